// Package crew starts goroutines, and is the only one that does. Each has a name, an end that
// somebody waits for, and a panic in it becomes an error that ends the whole crew after a hook
// has seen it: so a bug in one actor still leads to the rest state and never to a silent half.
package crew

import (
	"context"
	"errors"
	"fmt"
	"runtime/debug"
	"sync"
)

// Panic is the error a panicking actor ends with.
type Panic struct {
	Actor string
	Value any
	Stack []byte
}

func (p *Panic) Error() string { return fmt.Sprintf("%s: panic: %v", p.Actor, p.Value) }

// Group runs actors until the first fails or Stop is called.
type Group struct {
	ctx     context.Context
	cancel  context.CancelCauseFunc
	onPanic func(*Panic)
	wg      sync.WaitGroup
}

// ErrStopped is the cause of the actors' context after Stop.
var ErrStopped = errors.New("stopped on purpose")

// New makes a group whose actors' context ends with ctx. onPanic, which may be nil, is called in
// the panicking goroutine before the others are told to end.
func New(ctx context.Context, onPanic func(*Panic)) *Group {
	g := &Group{onPanic: onPanic}
	g.ctx, g.cancel = context.WithCancelCause(ctx)
	return g
}

// Go starts an actor. When it returns an error, other than by the end of its context, the
// group's context ends with that error as its cause.
func (g *Group) Go(name string, run func(context.Context) error) {
	g.wg.Go(func() {
		defer func() {
			if v := recover(); v != nil {
				p := &Panic{Actor: name, Value: v, Stack: debug.Stack()}
				if g.onPanic != nil {
					g.onPanic(p)
				}
				g.cancel(p)
			}
		}()
		if err := run(g.ctx); err != nil && g.ctx.Err() == nil {
			g.cancel(fmt.Errorf("%s: %w", name, err))
		}
	})
}

// Context ends when the group does; its cause says why.
func (g *Group) Context() context.Context { return g.ctx }

// Stop tells all actors to end.
func (g *Group) Stop() { g.cancel(ErrStopped) }

// Wait returns when all actors have ended: nil after Stop or the end of the outer context, else
// what the first failure was.
func (g *Group) Wait() error {
	g.wg.Wait()
	cause := context.Cause(g.ctx)
	if cause == nil || errors.Is(cause, ErrStopped) || errors.Is(cause, context.Canceled) {
		return nil
	}
	return cause
}
