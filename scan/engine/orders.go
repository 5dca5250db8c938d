package engine

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"

	"gemel/protocol"
)

type orderKind string

const (
	stopOrder   orderKind = "stop"
	holdOrder   orderKind = "hold"
	resumeOrder orderKind = "resume"
	closeOrder  orderKind = "close"
)

// order is an operator's request on its way to Run's goroutine.
type order struct {
	ctx   context.Context // the caller's: a resume that nobody waits for any more is dropped
	kind  orderKind
	who   string
	reply protocol.RunReply
	done  chan struct{} // closed when reply is valid, or when the engine ended without it
	did   bool
	// answered is Run's goroutine's own; did belongs to the reply.
	answered bool
}

// ErrOver is returned for requests to a run that this engine no longer executes.
var ErrOver = errors.New("the run is no longer active")

// Stop ends the run for ever. Hold makes it wait for Resume. Each returns when the request was
// carried out and written down; a bench that is moving or counting is interrupted for it.
func (e *Engine) Stop(ctx context.Context, who string) (protocol.RunReply, error) {
	return e.request(ctx, stopOrder, who)
}

// Hold sets the open dwell aside, brings the bench to rest and waits.
func (e *Engine) Hold(ctx context.Context, who string) (protocol.RunReply, error) {
	return e.request(ctx, holdOrder, who)
}

// Resume clears the causes operator, trouble and restart. A guard, light or a full disk clear
// themselves when the bench is well. Where an axis has lost its zero, a resume is a person's word
// that it may search for it now.
func (e *Engine) Resume(ctx context.Context, who string) (protocol.RunReply, error) {
	return e.request(ctx, resumeOrder, who)
}

// StopAfterPoint ends the run when the point that is being counted is done and the closing darks,
// backgrounds and references are taken. It returns when that is written down, at the end of the
// slice that is open. A run that holds is stopped at once.
func (e *Engine) StopAfterPoint(ctx context.Context, who string) (protocol.RunReply, error) {
	return e.request(ctx, closeOrder, who)
}

func (e *Engine) request(ctx context.Context, kind orderKind, who string) (protocol.RunReply, error) {
	o := &order{ctx: ctx, kind: kind, who: who, done: make(chan struct{})}
	e.mu.Lock()
	if e.over {
		e.mu.Unlock()
		return protocol.RunReply{}, ErrOver
	}
	if kind == resumeOrder && e.snapshot.State == protocol.Running {
		r := protocol.RunReply{Run: e.RunID, State: e.snapshot.State, Causes: []protocol.Cause{}, Recorded: true}
		e.mu.Unlock()
		return r, nil
	}
	e.pending = append(e.pending, o)
	if e.cancelOp != nil && (kind != closeOrder || e.snapshot.State == protocol.Holding) {
		e.cancelOp(errOrdered)
	}
	e.mu.Unlock()
	select {
	case <-ctx.Done():
		return protocol.RunReply{}, context.Cause(ctx)
	case <-o.done:
	}
	if !o.did {
		return protocol.RunReply{}, ErrOver
	}
	return o.reply, nil
}

// operation gives a context that ends when ctx does or when an order comes in. An entry that waits for
// room is an operation inside another one: what was ordered meanwhile ends that one, too.
func (e *Engine) operation(ctx context.Context) (context.Context, func()) {
	op, cancel := context.WithCancelCause(ctx)
	e.mu.Lock()
	defer e.mu.Unlock()
	outer := e.cancelOp
	e.cancelOp = cancel
	urgent := func() bool {
		return slices.ContainsFunc(e.pending, func(o *order) bool { return o.kind != closeOrder })
	}
	if urgent() {
		cancel(errOrdered)
	}
	return op, func() {
		e.mu.Lock()
		defer e.mu.Unlock()
		e.cancelOp = outer
		cancel(nil)
		if outer != nil && urgent() {
			outer(errOrdered)
		}
	}
}

// interrupt ends the operation that is open, if there is one.
func (e *Engine) interrupt() {
	e.mu.Lock()
	defer e.mu.Unlock()
	if e.cancelOp != nil {
		e.cancelOp(errOrdered)
	}
}

func (e *Engine) takeOrder() *order {
	e.mu.Lock()
	defer e.mu.Unlock()
	for len(e.pending) > 0 {
		o := e.pending[0]
		e.pending = e.pending[1:]
		if o.kind == resumeOrder && o.ctx.Err() != nil {
			close(o.done) // what moves the bench must not come late
			continue
		}
		return o
	}
	return nil
}

// obey carries out one pending order. done says that there was one.
func (e *Engine) obey(ctx context.Context) (done bool, err error) {
	o := e.takeOrder()
	if o == nil {
		return false, nil
	}
	e.obeying = o
	held := 0
	defer func() {
		e.obeying = nil
		if !o.answered {
			close(o.done) // our bug, or the logbook's: the caller must not wait for ever
		}
	}()
	switch o.kind {
	case stopOrder:
		err = e.end(ctx, protocol.Stopped, "stopped by "+o.who, map[string]any{"who": o.who})
	case closeOrder:
		if e.progress.State == protocol.Holding {
			err = e.end(ctx, protocol.Stopped, "stopped by "+o.who, map[string]any{"who": o.who})
		} else {
			err = e.cutBy(ctx, o.who)
		}
	case holdOrder:
		if !e.progress.holds(protocol.ByOperator) {
			err = e.holdFor(ctx, protocol.ByOperator, "held by "+o.who, map[string]any{"who": o.who})
		}
	case resumeOrder:
		held = len(e.progress.Causes)
		if e.progress.State == protocol.Holding {
			err = e.release(ctx, "resumed by "+o.who, map[string]any{"who": o.who}, protocol.ByOperator, protocol.ByTrouble, protocol.ByRestart)
		}
	}
	if err == nil || errors.Is(err, errEnded) {
		e.answer(o, true)
		e.step(StepAnswered)
		if err == nil && o.kind == resumeOrder && e.progress.State == protocol.Running {
			e.homing = true // for this time only: somebody is there now
			err = e.getReady(ctx, nil)
			e.homing = false
		} else if err == nil && o.kind == resumeOrder && len(e.progress.Causes) < held && !e.mayBeOpen() {
			e.homing = true // what a guard still holds for may need the zero to be looked at
			err = e.getReadyHeld(ctx)
			e.homing = false
		}
	}
	return true, err
}

// cutBy leaves the rest of the sweep out by a person's wish. The closing readings follow.
func (e *Engine) cutBy(ctx context.Context, who string) error {
	if e.progress.cutBy != "" {
		return nil
	}
	left := e.progress.left()
	return e.note(ctx, protocol.SetAside, fmt.Sprintf("%s asked to stop after this point: %d visits are left out, closing readings follow", who, left),
		map[string]any{"task": string(restTask), "left_out": left, "who": who})
}

// hearWishes writes, between two slices, that the run is to stop after this point.
func (e *Engine) hearWishes(ctx context.Context) error {
	e.mu.Lock()
	var o *order
	if len(e.pending) > 0 && e.pending[0].kind == closeOrder {
		o, e.pending = e.pending[0], e.pending[1:]
	}
	e.mu.Unlock()
	if o == nil {
		return nil
	}
	e.obeying = o
	err := e.cutBy(ctx, o.who)
	e.obeying = nil
	if err != nil {
		close(o.done)
		return err
	}
	e.answer(o, true)
	return nil
}

func (e *Engine) answer(o *order, recorded bool) {
	if o.answered {
		return // "done, not recorded" was said already
	}
	o.reply = protocol.RunReply{Run: e.RunID, State: e.progress.State, Causes: append([]protocol.Cause{}, e.progress.Causes...), Recorded: recorded}
	o.did, o.answered = true, true
	close(o.done)
}

// holdFor adds a cause, after the rest state, and writes it.
func (e *Engine) holdFor(ctx context.Context, cause protocol.Cause, text string, detail map[string]any) error {
	bad := e.rest(ctx)
	if cause != protocol.ByLight || e.progress.State != protocol.Holding {
		e.waitsSince = e.now() // light that a look at a guard saw begins no new wait, or the two could go on for ever
	}
	return e.event(ctx, protocol.Held, text+withBad(bad), protocol.Holding, add(e.progress.Causes, cause), detail)
}

// release takes causes away. With none left the run is running again, and must be made ready.
func (e *Engine) release(ctx context.Context, text string, detail map[string]any, causes ...protocol.Cause) error {
	left := without(e.progress.Causes, causes...)
	if len(left) == len(e.progress.Causes) {
		return nil
	}
	state := protocol.Running
	if slices.Contains(causes, protocol.ByOperator) { // a person has seen it
		e.waitsSince = e.now()
		clear(e.waited)
	}
	if len(left) > 0 {
		state = protocol.Holding
		text += fmt.Sprintf("; still held by %s", join(left))
	}
	return e.event(ctx, protocol.WentOn, text, state, left, detail)
}

func add(causes []protocol.Cause, c protocol.Cause) []protocol.Cause {
	if slices.Contains(causes, c) {
		return causes
	}
	return append(slices.Clone(causes), c)
}

func without(causes []protocol.Cause, gone ...protocol.Cause) []protocol.Cause {
	return slices.DeleteFunc(slices.Clone(causes), func(c protocol.Cause) bool { return slices.Contains(gone, c) })
}

func join(causes []protocol.Cause) string {
	var text strings.Builder
	for i, c := range causes {
		if i > 0 {
			text.WriteString(", ")
		}
		text.WriteString(string(c))
	}
	return text.String()
}
