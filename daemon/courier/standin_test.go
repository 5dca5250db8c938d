package courier_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"gemel/daemon/courier"
	"gemel/protocol"
)

// journal is the logbook's side: entries in the order of commit. Its ids have holes, because
// nothing promises that they have none.
type journal struct {
	mu      sync.Mutex
	entries []protocol.Numbered
	fail    error
}

func (j *journal) add(entries ...protocol.Entry) {
	j.mu.Lock()
	defer j.mu.Unlock()
	for _, e := range entries {
		id := int64(1)
		if n := len(j.entries); n > 0 {
			id = j.entries[n-1].ID + 1 + e.Sequence%2
		}
		j.entries = append(j.entries, protocol.Numbered{ID: id, Entry: e})
	}
}

func (j *journal) After(_ context.Context, id int64, limit int) ([]protocol.Numbered, error) {
	j.mu.Lock()
	defer j.mu.Unlock()
	if j.fail != nil {
		return nil, j.fail
	}
	var found []protocol.Numbered
	for _, e := range j.entries {
		if e.ID > id && len(found) < limit {
			found = append(found, e)
		}
	}
	return found, nil
}

func (j *journal) Position(_ context.Context, run protocol.RunID, sequence int64) (int64, bool, error) {
	j.mu.Lock()
	defer j.mu.Unlock()
	if j.fail != nil {
		return 0, false, j.fail
	}
	for _, e := range j.entries {
		if e.Run == run && e.Sequence == sequence {
			return e.ID, true, nil
		}
	}
	return 0, false, nil
}

func (j *journal) ids() []string {
	j.mu.Lock()
	defer j.mu.Unlock()
	var ids []string
	for _, e := range j.entries {
		ids = append(ids, e.Entry.ID())
	}
	return ids
}

func entries(run protocol.RunID, from, to int64) []protocol.Entry {
	kinds := []protocol.EntryKind{protocol.EventEntry, protocol.PointEntry, protocol.ReadingEntry}
	var list []protocol.Entry
	for s := from; s <= to; s++ {
		body := fmt.Sprintf(`{"run":%q,"sequence":%d}`, run, s)
		list = append(list, protocol.Entry{Run: run, Sequence: s, Kind: kinds[s%3], Body: []byte(body)})
	}
	return list
}

var (
	errAway     = errors.New("no responders")
	errNoAnswer = errors.New("time-out")
	errLastSeq  = errors.New("wrong last sequence")
	errLastID   = errors.New("wrong last message id")
)

// window is the stand-in's duplicate window.
const window = 2 * time.Minute

// stream is a recording stand-in for a JetStream stream and judges a publish in the server's
// order: duplicate id first, then the expected sequence and id. Duplicates are forgotten after
// the window. Faults are asked for by the test.
type stream struct {
	mu       sync.Mutex
	messages []courier.Message
	removed  uint64 // sequences that the stream once had in front of messages
	seen     map[string]time.Time
	away     bool
	loseAcks int // so many publishes are stored, and answered by nothing
	drop     int // so many publishes get lost on their way
	calls    int
}

func newStream() *stream { return &stream{seen: map[string]time.Time{}} }

func (s *stream) end() uint64 { return s.removed + uint64(len(s.messages)) }

func (s *stream) Last(context.Context) (courier.Last, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.calls++
	if s.away {
		return courier.Last{}, errAway
	}
	if len(s.messages) == 0 {
		return courier.Last{Sequence: s.end()}, nil
	}
	return courier.Last{Message: s.messages[len(s.messages)-1], Sequence: s.end()}, nil
}

func (s *stream) Publish(_ context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.calls++
	if s.away {
		return courier.Last{}, errAway
	}
	if s.drop > 0 {
		s.drop--
		return courier.Last{}, errNoAnswer
	}
	if at, ok := s.seen[m.ID]; ok && time.Since(at) < window {
		return courier.Last{}, courier.ErrUnsure
	}
	if after.Sequence != s.end() {
		return courier.Last{}, errLastSeq
	}
	if len(s.messages) > 0 && after.ID != s.messages[len(s.messages)-1].ID {
		return courier.Last{}, errLastID
	}
	s.messages = append(s.messages, courier.Message{Subject: m.Subject, ID: m.ID, Body: bytes.Clone(m.Body)})
	s.seen[m.ID] = time.Now()
	if s.loseAcks > 0 {
		s.loseAcks--
		return courier.Last{}, errNoAnswer
	}
	return courier.Last{Message: m, Sequence: s.end()}, nil
}

func (s *stream) set(change func(*stream)) {
	s.mu.Lock()
	defer s.mu.Unlock()
	change(s)
}

// anew is what deleting and making the stream leaves.
func (s *stream) anew() {
	s.messages, s.removed, s.seen = nil, 0, map[string]time.Time{}
}

func (s *stream) ids() []string {
	s.mu.Lock()
	defer s.mu.Unlock()
	var ids []string
	for _, m := range s.messages {
		ids = append(ids, m.ID)
	}
	return ids
}
