package client

import (
	"context"
	"errors"
	"fmt"
	"hash/crc32"
	"iter"
	"maps"
	"strconv"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"gemel/protocol"
)

// Gap says that entries of a run are missing from the stream, which happens when its oldest
// messages were dropped. The logbook still has them.
type Gap struct {
	Run      protocol.RunID
	From, To int64 // sequences, both missing
}

func (g *Gap) Error() string {
	return fmt.Sprintf("run %s: entries %d to %d are not in the stream", g.Run, g.From, g.To)
}

// Replaced says that the stream was made anew and holds something else than what was yielded of a
// run, from one entry on: the daemon's logbook is a rescued one, or an older one put back. What the
// logbook holds now comes next.
type Replaced struct {
	Run  protocol.RunID
	From int64 // the first sequence that is another entry
}

func (r *Replaced) Error() string {
	return fmt.Sprintf("run %s: the stream was made anew from another logbook; from entry %d on it is not what was followed", r.Run, r.From)
}

// Waits of a follower. What is said of a missing answer holds for a broker that is away too.
const (
	batch     = 256
	fetchTime = 20 * time.Second // a request for more lives so long
	heartbeat = 2 * time.Second  // an idle broker says so this often; twice missing is lost
	retryWait = 500 * time.Millisecond
	forgotten = time.Minute // the broker drops the consumer of a follower gone this long
)

// Follow yields the entries of one run, or of all with run "", in order: first those that the
// stream holds with a sequence of at least from, then new ones as they come, until ctx ends, which
// is not an error. With from 0 it yields new ones only. Each entry comes once, whatever the
// connection or the stream go through, and entries of one run without gaps: a missing piece is
// yielded as a *Gap, after which the entries go on. Where a stream made anew contradicts what was
// yielded, a *Replaced comes and then the entries that hold now. After any other error nothing more
// comes.
func (c *Client) Follow(ctx context.Context, run protocol.RunID, from int64) iter.Seq2[protocol.Entry, error] {
	return func(yield func(protocol.Entry, error) bool) {
		js, err := jetstream.New(c.conn)
		if err != nil {
			yield(protocol.Entry{}, err)
			return
		}
		f := &follower{client: c, js: js, stream: protocol.Stream(c.bench), from: from, seen: map[protocol.RunID]int64{}}
		f.subjects = protocol.StreamSubjects(c.bench)
		if run != "" {
			for i, s := range f.subjects {
				f.subjects[i] = strings.TrimSuffix(s, "*") + string(run)
			}
			if from > 0 {
				f.seen[run] = from - 1
			}
		}
		for ctx.Err() == nil {
			goOn, err := f.round(ctx, yield)
			if !goOn {
				return
			}
			if err != nil && fatal(err) {
				yield(protocol.Entry{}, fmt.Errorf("%s: %w", f.stream, err))
				return
			}
			if err != nil {
				pause(ctx, retryWait)
			}
		}
	}
}

// fatal tells what no waiting mends.
func fatal(err error) bool {
	return errors.Is(err, nats.ErrConnectionClosed) || errors.Is(err, ErrForbidden) || errors.Is(err, errBody)
}

var errBody = errors.New("not an entry of a journal")

type follower struct {
	client   *Client
	js       jetstream.JetStream
	stream   string
	subjects []string
	from     int64

	placed    bool // the start in the stream is decided
	next      uint64
	made      time.Time          // when the stream was made
	consumer  jetstream.Consumer // nil when a new one is needed
	delivered uint64             // by it, counted here
	seen      map[protocol.RunID]int64
	sums      map[protocol.RunID]map[int64]uint32 // of the bodies that were yielded: a renewed stream is compared with them
}

// round gets and yields one batch.
func (f *follower) round(ctx context.Context, yield func(protocol.Entry, error) bool) (goOn bool, err error) {
	if f.consumer == nil {
		if err := f.begin(ctx); err != nil {
			return true, err
		}
	}
	// The broker ends a request a second before this context does. An end that it did not
	// announce means that something may have been sent and not received.
	fetch, cancel := context.WithTimeout(ctx, fetchTime)
	defer cancel()
	got, err := f.consumer.Fetch(batch, jetstream.FetchContext(fetch), jetstream.FetchHeartbeat(heartbeat))
	if err != nil {
		f.consumer = nil
		return true, err
	}
	for m := range got.Messages() {
		goOn, err := f.take(m, yield)
		if !goOn || err != nil || f.consumer == nil {
			return goOn, err
		}
	}
	if err := got.Error(); err != nil {
		f.consumer = nil
		return true, err
	}
	return true, nil
}

// begin makes a consumer that continues where the last one ended. A stream that was replaced
// since is read from its beginning: what was seen is known by run and sequence.
func (f *follower) begin(ctx context.Context) error {
	ctx, cancel := context.WithTimeout(ctx, requestTime)
	defer cancel()
	ctx, done := f.client.refusable(ctx, "$JS.API.STREAM.INFO."+f.stream)
	defer done()
	stream, err := f.js.Stream(ctx, f.stream)
	if errors.Is(context.Cause(ctx), ErrForbidden) {
		return ErrForbidden
	}
	if err != nil {
		return err
	}
	info := stream.CachedInfo()
	switch {
	case !f.placed:
		f.placed = true
		f.next = 1
		if f.from == 0 {
			f.next = info.State.LastSeq + 1
		}
	case !info.Created.Equal(f.made):
		f.next = 1
	}
	f.made, f.delivered = info.Created, 0
	f.consumer, err = stream.CreateConsumer(ctx, jetstream.ConsumerConfig{
		FilterSubjects: f.subjects, DeliverPolicy: jetstream.DeliverByStartSequencePolicy, OptStartSeq: max(f.next, 1),
		AckPolicy: jetstream.AckNonePolicy, InactiveThreshold: forgotten, MemoryStorage: true, Replicas: 1,
	})
	return err
}

// take yields a message unless it was seen, and the gap before it if there is one.
func (f *follower) take(m jetstream.Msg, yield func(protocol.Entry, error) bool) (goOn bool, err error) {
	meta, err := m.Metadata()
	if err != nil {
		return true, fmt.Errorf("%w: %w", errBody, err)
	}
	if f.delivered++; meta.Sequence.Consumer != f.delivered {
		f.consumer = nil // something was lost on the way: ask again from there
		return true, nil
	}
	if m.Headers().Get(nats.MsgIdHdr) == "" { // an answer of the server's, sent here by who asked; the daemon makes the stream anew
		return true, nil
	}
	e, err := entry(m)
	if err != nil {
		return true, err
	}
	f.next = meta.Sequence.Stream + 1
	seen, known := f.seen[e.Run]
	sums := f.sums[e.Run]
	if f.sums == nil {
		f.sums = map[protocol.RunID]map[int64]uint32{}
	}
	if sums == nil {
		sums = map[int64]uint32{}
		f.sums[e.Run] = sums
	}
	sum := crc32.ChecksumIEEE(e.Body)
	if was, yielded := sums[e.Sequence]; yielded && was != sum {
		if !yield(protocol.Entry{}, &Replaced{Run: e.Run, From: e.Sequence}) {
			return false, nil
		}
		maps.DeleteFunc(sums, func(n int64, _ uint32) bool { return n >= e.Sequence })
		seen = e.Sequence - 1
	}
	if known && e.Sequence <= seen || e.Sequence < f.from {
		return true, nil
	}
	if known && e.Sequence > seen+1 && !yield(protocol.Entry{}, &Gap{Run: e.Run, From: seen + 1, To: e.Sequence - 1}) {
		return false, nil
	}
	f.seen[e.Run], sums[e.Sequence] = e.Sequence, sum
	return yield(e, nil), nil
}

// entry reads what a message is from its subject and id; the body is not looked into.
func entry(m jetstream.Msg) (protocol.Entry, error) {
	tokens := strings.Split(m.Subject(), ".")
	id := m.Headers().Get(nats.MsgIdHdr)
	run, number, _ := strings.Cut(id, ".")
	sequence, err := strconv.ParseInt(number, 10, 64)
	if err != nil || len(tokens) != 4 || tokens[3] != run {
		return protocol.Entry{}, fmt.Errorf("message on %q with id %q: %w", m.Subject(), id, errBody)
	}
	return protocol.Entry{Run: protocol.RunID(run), Sequence: sequence, Kind: protocol.EntryKind(tokens[2]), Body: m.Data()}, nil
}

func pause(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
	case <-ctx.Done():
	}
}
