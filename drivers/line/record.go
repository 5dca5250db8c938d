package line

import (
	"fmt"
	"io"
	"sync"
	"time"

	"gemel/drivers"
)

// Entry is one exchange, or one thing that happened, in the wire log.
type Entry struct {
	At     time.Time
	Took   time.Duration
	Device drivers.DeviceName
	Op     string
	Sent   []byte // without its terminator
	Got    []byte // without its terminator
	Note   string
}

// Counts say what happened on a line since it was made.
type Counts struct {
	Asked          int // questions sent, each repetition counted
	Retried        int // of them repeated
	Missing        int // answers that did not come in time
	Strangers      int // answers that belonged to nothing
	Strays         int // late or doubled answers that were dropped
	Chatter        int // unasked lines that were dropped
	Restarts       int // restarts noticed
	Resynchronised int // times the line was waited quiet
	Urgent         int // urgent messages sent
	Opened         int // openings, the first one included
	Lost           int
}

// record is the bounded wire log with the counts.
type record struct {
	mu      sync.Mutex
	size    int
	entries []Entry // a ring once it is full
	next    int
	counts  Counts
}

func (r *record) add(e Entry) {
	r.mu.Lock()
	defer r.mu.Unlock()
	if len(r.entries) < r.size {
		r.entries = append(r.entries, e)
		return
	}
	r.entries[r.next] = e
	r.next = (r.next + 1) % r.size
}

func (r *record) count(f func(*Counts)) {
	r.mu.Lock()
	defer r.mu.Unlock()
	f(&r.counts)
}

// Counts returns what happened so far.
func (l *Line) Counts() Counts {
	l.record.mu.Lock()
	defer l.record.mu.Unlock()
	return l.record.counts
}

// Entries returns the wire log, the oldest exchange first.
func (l *Line) Entries() []Entry {
	r := &l.record
	r.mu.Lock()
	defer r.mu.Unlock()
	return append(append([]Entry(nil), r.entries[r.next:]...), r.entries[:r.next]...)
}

// Dump writes the wire log as text, one exchange a line.
func (l *Line) Dump(w io.Writer) error {
	for _, e := range l.Entries() {
		_, err := fmt.Fprintf(w, "%s %8.3fms %s %s > %q < %q %s\n", e.At.UTC().Format("2006-01-02T15:04:05.000000Z"),
			float64(e.Took)/1e6, e.Device, e.Op, e.Sent, e.Got, e.Note)
		if err != nil {
			return err
		}
	}
	return nil
}
