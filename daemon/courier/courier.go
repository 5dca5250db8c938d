// Package courier carries entries from the logbook's journal to NATS. It is a cursor over the
// journal: it publishes each entry's bytes, in order, as the one message that may follow the
// stream's last. It never decides what is true: an entry is true once the logbook committed it,
// and a broker that is away costs patience, not data.
//
// The cursor is not kept anywhere. After a start, and whenever a publish was not clearly
// acknowledged, the stream is asked for its last message, and the journal where that stands.
// So neither a lost acknowledgement nor an outage longer than the broker's duplicate window
// doubles anything, and a stream that comes back older or empty is filled again. A stream that
// ends in something the journal does not hold follows another logbook. On a server of our own that
// is the one which stood here before a rescue, or before an older copy was put back: the stream is
// made anew from the journal. On any other it is somebody else's: nothing is published to it.
package courier

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"gemel/protocol"
)

// Journal is the logbook as the courier sees it. Ids rise in the order of commit.
type Journal interface {
	// After returns at most limit entries with an id above id, in order.
	After(ctx context.Context, id int64, limit int) ([]protocol.Numbered, error)
	// Position finds the id of one entry.
	Position(ctx context.Context, run protocol.RunID, sequence int64) (id int64, found bool, err error)
}

// Message is one entry as it is sent.
type Message struct {
	Subject string
	ID      string // "<run>.<sequence>"
	Body    []byte
}

// Last is where a stream ends. An empty stream has no subject, and the sequence of the message
// that was its last, 0 if there never was one.
type Last struct {
	Message
	Sequence uint64

	// Renew is not nil when messages are missing between the stream's first and its last, by damage:
	// the limits take from the front only; or when the last is no courier's. It makes the stream anew,
	// empty. Message is then one that is still there, if any is.
	Renew   func(context.Context) error
	Because string // of Renew: what is wrong

	// Anew is what Renew is, for a whole stream that does not fit the journal. It is nil where the
	// stream may be somebody else's.
	Anew func(context.Context) error
}

// Sink is a stream.
type Sink interface {
	// Last tells where the stream ends. It makes the stream when there is none.
	Last(ctx context.Context) (Last, error)
	// Publish stores m if and only if the stream still ends in after, and returns the new end
	// once it is stored durably. After an error the message may have been stored or not.
	Publish(ctx context.Context, m Message, after Last) (Last, error)
}

// ErrForeign is the trouble of a stream that another logbook filled.
var ErrForeign = errors.New("another logbook's stream")

// ErrUnsure is what a Sink returns when it cannot tell whether the message is where it belongs.
var ErrUnsure = errors.New("not clear whether the message was stored")

const (
	page = 64 // entries read from the journal at once

	// The first wait is short because most outages are a restart of the broker; the last keeps
	// an outage of days cheap and its end quickly noticed.
	firstWait = 250 * time.Millisecond
	lastWait  = 5 * time.Second

	// An idle stream is asked again now and then: it may have been replaced.
	idleWait = 30 * time.Second
)

// Courier is made by New. Run and Finish must not run at the same time.
type Courier struct {
	bench   string
	journal Journal
	sink    Sink
	report  func(error)
	nudge   chan struct{}

	cursor  int64 // id of the last entry known to be in the stream
	counted int64 // id up to which entries are in behind
	behind  atomic.Int64

	mu      sync.Mutex
	trouble error
}

// New makes a courier for one bench. It starts nothing. report, which may be nil, is told of each
// trouble when it begins and gets nil when it is over; it must not block.
func New(bench string, journal Journal, sink Sink, report func(error)) *Courier {
	return &Courier{bench: bench, journal: journal, sink: sink, report: report, nudge: make(chan struct{}, 1)}
}

// Nudge says that there are new entries. It never blocks.
func (c *Courier) Nudge() {
	select {
	case c.nudge <- struct{}{}:
	default:
	}
}

// Behind counts the entries that are not known to be in the stream. Until the stream was reached
// for the first time these are all of the journal.
func (c *Courier) Behind() int64 { return c.behind.Load() }

// Trouble says why entries wait, nil if nothing is wrong.
func (c *Courier) Trouble() error {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.trouble
}

// Run carries until ctx ends, and then returns nil. Whatever else goes wrong is Trouble, waited
// out and tried again: no run depends on what the broker can do.
func (c *Courier) Run(ctx context.Context) error {
	wait := firstWait
	for ctx.Err() == nil {
		carried, err := c.pass(ctx, c.awaitMore)
		if ctx.Err() != nil {
			break
		}
		if carried > 0 {
			wait = firstWait
		}
		if err == nil {
			continue // idle: ask the stream again
		}
		c.become(err)
		if err := c.count(ctx); err != nil && ctx.Err() == nil {
			c.become(err)
		}
		sleep(ctx, wait)
		wait = min(2*wait, lastWait)
	}
	return nil
}

// Finish carries what is there, without waiting for more and without a second try. It is for the
// end of the daemon, after Run returned.
func (c *Courier) Finish(ctx context.Context) error {
	_, err := c.pass(ctx, func(context.Context) bool { return false })
	return err
}

// pass asks the stream where it ends and carries from there until more says that there will be
// nothing more to carry.
func (c *Courier) pass(ctx context.Context, more func(context.Context) bool) (carried int, err error) {
	last, err := c.sink.Last(ctx)
	if err != nil {
		return 0, fmt.Errorf("stream %s: %w", protocol.Stream(c.bench), err)
	}
	cursor, err := c.find(ctx, last)
	if errors.Is(err, ErrForeign) && last.Anew != nil {
		last.Renew, last.Because = last.Anew, fmt.Sprintf("it ends in message %d, id %q, which this logbook does not hold so: "+
			"the logbook is a rescued one, or an older one put back", last.Sequence, last.ID)
		err = nil
	}
	if err != nil {
		return 0, err
	}
	if last.Renew != nil { // what stands behind a hole would never be filled in front of it
		c.become(fmt.Errorf("stream %s: %s: it is made anew and filled again from the logbook", protocol.Stream(c.bench), last.Because))
		if err := last.Renew(ctx); err != nil {
			return 0, fmt.Errorf("stream %s: %s, and it cannot be made anew: %w", protocol.Stream(c.bench), last.Because, err)
		}
		cursor = 0
		if last, err = c.sink.Last(ctx); err != nil { // the server may count on from what it had
			return 0, fmt.Errorf("stream %s: %w", protocol.Stream(c.bench), err)
		}
		if last.Subject != "" || last.Renew != nil {
			return 0, fmt.Errorf("stream %s: made anew, and not empty; want nothing in it", protocol.Stream(c.bench))
		}
	}
	if err := c.stand(ctx, cursor); err != nil {
		return 0, err
	}
	for {
		batch, err := c.journal.After(ctx, c.cursor, page)
		if err != nil {
			return carried, fmt.Errorf("journal after entry %d: %w", c.cursor, err)
		}
		c.add(batch)
		for _, e := range batch {
			last, err = c.sink.Publish(ctx, c.message(e.Entry), last)
			if err != nil {
				return carried, fmt.Errorf("entry %s: %w", e.Entry.ID(), err)
			}
			c.cursor = e.ID
			c.behind.Add(-1)
			carried++
		}
		c.become(nil)
		if len(batch) == 0 && !more(ctx) {
			return carried, nil
		}
	}
}

// awaitMore returns false when it is time to ask the stream again.
func (c *Courier) awaitMore(ctx context.Context) bool {
	idle := time.NewTimer(idleWait)
	defer idle.Stop()
	select {
	case <-c.nudge:
		return true
	case <-idle.C:
	case <-ctx.Done():
	}
	return false
}

// find translates the end of the stream into a place in the journal. Ids alone would not do: the
// bench's own events have the same ids in every logbook, so the bodies must agree too.
func (c *Courier) find(ctx context.Context, last Last) (int64, error) {
	if last.Subject == "" {
		return 0, nil
	}
	foreign := func(found string) error {
		return fmt.Errorf("stream %s: ends in message %d, %s; want an entry of this logbook: %w; nothing is published to it until the stream is deleted at its server, after which it is filled from this logbook, or the other logbook is put back",
			protocol.Stream(c.bench), last.Sequence, found, ErrForeign)
	}
	run, number, _ := strings.Cut(last.ID, ".")
	sequence, err := strconv.ParseInt(number, 10, 64)
	if err != nil {
		return 0, foreign(fmt.Sprintf("with id %q", last.ID))
	}
	id, found, err := c.journal.Position(ctx, protocol.RunID(run), sequence)
	if err != nil {
		return 0, fmt.Errorf("journal entry %s: %w", last.ID, err)
	}
	if !found {
		return 0, foreign(fmt.Sprintf("entry %q, which the journal does not hold", last.ID))
	}
	at, err := c.journal.After(ctx, id-1, 1)
	if err != nil {
		return 0, fmt.Errorf("journal entry %s: %w", last.ID, err)
	}
	if len(at) != 1 || at[0].ID != id {
		return 0, fmt.Errorf("journal entry %s: not found at %d where it should stand", last.ID, id)
	}
	if own := c.message(at[0].Entry); own.Subject != last.Subject || !bytes.Equal(own.Body, last.Body) {
		return 0, foreign(fmt.Sprintf("entry %q with other content than the journal's", last.ID))
	}
	return id, nil
}

func (c *Courier) message(e protocol.Entry) Message {
	return Message{Subject: protocol.Subject(c.bench, e.Kind, e.Run), ID: e.ID(), Body: e.Body}
}

// stand moves the cursor. What is behind is counted anew only if it was not where it is now.
func (c *Courier) stand(ctx context.Context, cursor int64) error {
	if cursor != c.cursor {
		c.cursor, c.counted = cursor, cursor
		c.behind.Store(0)
	}
	return c.count(ctx)
}

// count adds the entries to Behind that were committed since it last looked.
func (c *Courier) count(ctx context.Context) error {
	for {
		batch, err := c.journal.After(ctx, c.counted, page)
		if err != nil {
			return fmt.Errorf("journal after entry %d: %w", c.counted, err)
		}
		if len(batch) == 0 {
			return nil
		}
		c.add(batch)
	}
}

func (c *Courier) add(batch []protocol.Numbered) {
	for _, e := range batch {
		if e.ID > c.counted {
			c.counted = e.ID
			c.behind.Add(1)
		}
	}
}

// become notes the trouble, and reports it if it reads differently from the one before.
func (c *Courier) become(err error) {
	c.mu.Lock()
	before := c.trouble
	c.trouble = err
	c.mu.Unlock()
	same := before == nil && err == nil || before != nil && err != nil && before.Error() == err.Error()
	if !same && c.report != nil {
		c.report(err)
	}
}

func sleep(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
	case <-ctx.Done():
	}
}
