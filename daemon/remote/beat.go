package remote

import (
	"context"
	"encoding/json"
	"fmt"
	"time"

	"gemel/protocol"
)

// Publisher is a NATS connection as the heartbeat sees it.
type Publisher interface {
	Publish(subject string, body []byte) error
}

// beatEvery is part of the contract: who hears nothing for some seconds knows that something is
// wrong.
const beatEvery = time.Second

// RunBeat publishes the live state at once and then every second until ctx ends; then it returns nil. A beat
// that cannot be sent is left out: its absence is the message.
func RunBeat(ctx context.Context, to Publisher, status func() protocol.Status) error {
	tick := time.NewTicker(beatEvery)
	defer tick.Stop()
	for ctx.Err() == nil {
		s := whole(status())
		body, err := json.Marshal(protocol.Beat{Schema: protocol.BeatSchema, At: protocol.Time{Time: time.Now()}, Status: s})
		if err != nil {
			return fmt.Errorf("beat: %w", err)
		}
		_ = to.Publish(protocol.BeatSubject(s.Bench), body)
		select {
		case <-tick.C:
		case <-ctx.Done():
		}
	}
	return nil
}
