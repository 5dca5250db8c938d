package client

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"iter"
	"time"

	"github.com/nats-io/nats.go"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// Silence says that no heartbeat of the bench came for a while: its daemon ended or hangs, or the
// way to it is cut. Only a new beat tells that it is back.
type Silence struct {
	Bench string
	For   time.Duration // since the last beat, or since listening began
}

func (s *Silence) Error() string {
	return fmt.Sprintf("nothing was heard of bench %s for %s: its daemon has ended or hangs, or the way to it is cut", s.Bench, unit.Span(s.For))
}

// Beats yields the heartbeats of the bench as they come, until ctx ends, which is not an error. When
// none comes for as long as patience it yields a *Silence, and another each time it lasted as long
// again. After any other error nothing more comes.
func (c *Client) Beats(ctx context.Context, patience time.Duration) iter.Seq2[protocol.Beat, error] {
	return func(yield func(protocol.Beat, error) bool) {
		subscription, err := c.conn.SubscribeSync(protocol.BeatSubject(c.bench))
		if err != nil {
			yield(protocol.Beat{}, fmt.Errorf("beat: %w", err))
			return
		}
		defer func() { _ = subscription.Unsubscribe() }()
		silent := time.Duration(0)
		for ctx.Err() == nil {
			b, err := nextBeat(ctx, subscription, patience)
			switch {
			case ctx.Err() != nil:
				return
			case errors.Is(err, nats.ErrSlowConsumer):
				continue // a caller that dawdled has missed some beats, and nothing else
			case errors.Is(err, context.DeadlineExceeded):
				silent += patience
				err = &Silence{Bench: c.bench, For: silent}
			case err == nil:
				silent = 0
			}
			_, goesOn := errors.AsType[*Silence](err)
			if !yield(b, err) || err != nil && !goesOn {
				return
			}
		}
	}
}

func nextBeat(ctx context.Context, s *nats.Subscription, patience time.Duration) (b protocol.Beat, err error) {
	within, cancel := context.WithTimeout(ctx, patience)
	defer cancel()
	m, err := s.NextMsgWithContext(within)
	if err != nil {
		return b, err
	}
	if err := json.Unmarshal(m.Data, &b); err != nil {
		return b, fmt.Errorf("beat: %w", err)
	}
	return b, nil
}
