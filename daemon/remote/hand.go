package remote

import (
	"context"
	"encoding/json"
	"fmt"
	"runtime/debug"
	"sync"

	"github.com/nats-io/nats.go/micro"

	"gemel/protocol"
)

// Hands is what a keeper that knows hand work can do beside Keeper's methods. Hand returns at once,
// and calls answer once, later, from a goroutine of its own: a request to rest must not wait behind
// the move that it is to interrupt.
type Hands interface {
	Hand(ctx context.Context, q protocol.HandRequest, answer func(protocol.HandReply, error))
}

// hand is the endpoint of hand work.
func (h *handlers) hand(keeper Hands) micro.Handler {
	return micro.HandlerFunc(func(r micro.Request) {
		if !own(r.Reply()) {
			return
		}
		if !h.enter() {
			refuse(r, protocol.Refuse(503, "the daemon is ending; nothing was done"))
			return
		}
		answer := h.once(r)
		defer func() {
			if v := recover(); v != nil {
				answer(protocol.HandReply{}, protocol.Refuse(500, fmt.Sprintf("hand: a defect of the daemon: %v", v)))
				if h.panicked != nil {
					h.panicked("hand", v, debug.Stack())
				}
			}
		}()
		q, err := handRequest(r.Data())
		if err != nil {
			answer(protocol.HandReply{}, err)
			return
		}
		keeper.Hand(h.ctx, q, answer)
	})
}

// once makes what answers a request, the first time it is called.
func (h *handlers) once(r micro.Request) func(protocol.HandReply, error) {
	var once sync.Once
	return func(reply protocol.HandReply, err error) {
		once.Do(func() {
			defer h.active.Done()
			if err != nil {
				refuse(r, err)
				return
			}
			body, err := json.Marshal(reply)
			if err != nil {
				refuse(r, fmt.Errorf("hand: %w", err))
				return
			}
			_ = r.Respond(body) // a requester that is gone is its own affair
		})
	}
}

// handRequest checks what can be checked without the bench.
func handRequest(data []byte) (protocol.HandRequest, error) {
	q, err := decode[protocol.HandRequest](data, maxSmall)
	if err != nil {
		return q, err
	}
	if err := inTime(q.ExpiresAt); err != nil {
		return q, err
	}
	return q, short("hand", map[string]string{"who": q.Who})
}
