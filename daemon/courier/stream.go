package courier

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"gemel/protocol"
)

// StreamConfig says which stream, and how much of the past it keeps.
type StreamConfig struct {
	Bench    string
	Replicas int   // 0 is 1
	MaxBytes int64 // 0 is 2 GiB, about a million readings

	// MaxAge is for outside servers that insist on one; 0 keeps messages until MaxBytes. A stream
	// that grew empty by age cannot tell a restarted courier where it ended, and is filled again.
	MaxAge time.Duration

	// Own says that the server lives in this process, and that nobody but it keeps its files.
	Own bool

	// Duplicates is the broker's own window, 0 is 10 minutes. Nothing here relies on it.
	Duplicates time.Duration
}

// answerTime bounds each question to the broker.
const answerTime = 5 * time.Second

// checkTime bounds the reading through of a whole stream.
const checkTime = 2 * time.Minute

// Stream is a bench's JetStream stream as a Sink.
type Stream struct {
	js   jetstream.JetStream
	want jetstream.StreamConfig
	own  bool

	unchecked bool // what it holds is still to be read through
}

// NewStream asks nothing yet. The connection should not buffer while it is away
// (nats.ReconnectBufSize(-1)): what it sends later is refused as out of place.
func NewStream(conn *nats.Conn, c StreamConfig) (*Stream, error) {
	js, err := jetstream.New(conn)
	if err != nil {
		return nil, err
	}
	return &Stream{js: js, own: c.Own, want: jetstream.StreamConfig{
		Name:        protocol.Stream(c.Bench),
		Description: "journal of bench " + c.Bench,
		Subjects:    protocol.StreamSubjects(c.Bench),
		Storage:     jetstream.FileStorage,
		Retention:   jetstream.LimitsPolicy,
		Discard:     jetstream.DiscardOld,
		MaxBytes:    orElse(c.MaxBytes, 2<<30),
		MaxAge:      c.MaxAge,
		Duplicates:  orElse(c.Duplicates, 10*time.Minute),
		Replicas:    orElse(c.Replicas, 1),
		DenyDelete:  true,
		DenyPurge:   true,
	}}, nil
}

// CheckOnce has the next Last read through the heads of all messages, and again until none is
// missing: a server whose files were damaged may not know which it lost. It is for a server of our
// own; a million messages take some seconds.
func (s *Stream) CheckOnce() { s.unchecked = true }

func orElse[T comparable](value, otherwise T) T {
	var zero T
	if value == zero {
		return otherwise
	}
	return value
}

// Last tells where the stream ends. It makes the stream, or changes it to what is wanted.
func (s *Stream) Last(ctx context.Context) (Last, error) {
	ctx, cancel := context.WithTimeout(ctx, answerTime)
	defer cancel()
	stream, err := s.js.Stream(ctx, s.want.Name)
	switch {
	case errors.Is(err, jetstream.ErrStreamNotFound):
		stream, err = s.js.CreateStream(ctx, s.want)
		if err == nil && s.own { // one that lay there damaged: the server may count on from what it did not find
			if err = s.renew(ctx); err == nil {
				stream, err = s.js.Stream(ctx, s.want.Name)
			}
		}
	case err == nil && !s.asWanted(stream.CachedInfo().Config):
		stream, err = s.js.UpdateStream(ctx, s.want)
	}
	if err != nil {
		return Last{}, err
	}
	state := stream.CachedInfo().State
	end := Last{Sequence: state.LastSeq}
	if s.own {
		end.Anew = s.renew
	}
	if state.Msgs == 0 {
		return end, nil
	}
	if state.LastSeq-state.FirstSeq+1 != state.Msgs {
		end.Renew, end.Because = s.renew, missing
	}
	m, err := stream.GetMsg(ctx, state.LastSeq)
	switch {
	case errors.Is(err, jetstream.ErrMsgNotFound):
		end.Renew, end.Because = s.renew, missing
		m, err = stream.GetMsg(ctx, state.FirstSeq)
	case err == nil && s.stray(m):
		end.Renew, end.Because = s.renew, "it ends in a message that is no entry"
		m, err = stream.GetMsg(ctx, state.FirstSeq)
	}
	if errors.Is(err, jetstream.ErrMsgNotFound) || err == nil && s.stray(m) {
		return end, nil // whose they were cannot be seen
	}
	if err != nil {
		return Last{}, fmt.Errorf("message %d: %w", state.LastSeq, err)
	}
	end.Message = Message{Subject: m.Subject, ID: m.Header.Get(nats.MsgIdHdr), Body: m.Data}
	if s.unchecked && end.Renew == nil {
		whole, err := s.whole(stream, state.FirstSeq, state.LastSeq)
		if err != nil {
			return Last{}, fmt.Errorf("reading it through: %w", err)
		}
		if s.unchecked = !whole; !whole {
			end.Renew, end.Because = s.renew, missing
		}
	}
	return end, nil
}

const missing = "messages are missing"

// stray says whether a message was sent by nobody. On a server of our own only the daemon may publish
// here, but the server itself sends its answers wherever who asks wants them.
func (s *Stream) stray(m *jetstream.RawStreamMsg) bool {
	return s.own && m.Header.Get(nats.MsgIdHdr) == ""
}

// whole says whether every message from the first to the last can be read.
func (s *Stream) whole(stream jetstream.Stream, first, last uint64) (bool, error) {
	ctx, cancel := context.WithTimeout(context.Background(), checkTime)
	defer cancel()
	all, err := stream.OrderedConsumer(ctx, jetstream.OrderedConsumerConfig{HeadersOnly: true})
	if err != nil {
		return false, err
	}
	messages, err := all.Messages()
	if err != nil {
		return false, err
	}
	defer messages.Stop()
	for due := first; due <= last; due++ {
		m, err := messages.Next(jetstream.NextContext(ctx))
		if err != nil {
			return false, err
		}
		at, err := m.Metadata()
		if err != nil || at.Sequence.Stream != due {
			return false, err
		}
	}
	return true, nil
}

// renew makes the stream anew. Nothing is lost by it: the journal has every message.
func (s *Stream) renew(ctx context.Context) error {
	ctx, cancel := context.WithTimeout(ctx, answerTime)
	defer cancel()
	for {
		err := s.js.DeleteStream(ctx, s.want.Name)
		if err != nil && !errors.Is(err, jetstream.ErrStreamNotFound) {
			return err
		}
		var made jetstream.Stream
		if made, err = s.js.CreateStream(ctx, s.want); err == nil {
			// The files of the old one may still be on their way out, and be found again.
			if n := made.CachedInfo().State.Msgs; n > 0 {
				err = fmt.Errorf("%d messages of the old one came back", n)
			}
		}
		if err == nil {
			s.unchecked = false
			return nil
		}
		sleep(ctx, renewPause)
		if ctx.Err() != nil {
			return err
		}
	}
}

const renewPause = 50 * time.Millisecond

// asWanted compares what we set; a server adds entries of its own.
func (s *Stream) asWanted(have jetstream.StreamConfig) bool {
	w := s.want
	return slices.Equal(have.Subjects, w.Subjects) && have.Description == w.Description &&
		have.Storage == w.Storage && have.Retention == w.Retention && have.Discard == w.Discard &&
		have.MaxBytes == w.MaxBytes && have.MaxAge == w.MaxAge && have.Duplicates == w.Duplicates &&
		have.Replicas == w.Replicas && have.DenyDelete == w.DenyDelete && have.DenyPurge == w.DenyPurge
}

// Publish sends m under its id, as the message after the given one. The expected sequence is what
// makes it safe; the expected id guards against a stream that was filled by somebody else to
// the same length.
func (s *Stream) Publish(ctx context.Context, m Message, after Last) (Last, error) {
	ctx, cancel := context.WithTimeout(ctx, answerTime)
	defer cancel()
	expect := []jetstream.PublishOpt{
		jetstream.WithMsgID(m.ID),
		jetstream.WithExpectStream(s.want.Name),
		jetstream.WithExpectLastSequence(after.Sequence),
		jetstream.WithRetryAttempts(0),
	}
	if after.ID != "" {
		expect = append(expect, jetstream.WithExpectLastMsgID(after.ID))
	}
	ack, err := s.js.PublishMsg(ctx, &nats.Msg{Subject: m.Subject, Data: m.Body}, expect...)
	if err != nil {
		return Last{}, err
	}
	// A duplicate is answered before anything expected is looked at.
	if ack.Sequence != after.Sequence+1 {
		return Last{}, fmt.Errorf("acknowledged as message %d, expected as %d: %w", ack.Sequence, after.Sequence+1, ErrUnsure)
	}
	return Last{Message: m, Sequence: ack.Sequence}, nil
}
