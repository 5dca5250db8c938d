package crew

import (
	"context"
	"errors"
	"testing"
	"testing/synctest"
)

func TestAPanicEndsTheOthersAfterTheHookSawIt(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var order []string
		g := New(t.Context(), func(p *Panic) { order = append(order, "hook "+p.Actor) })
		done := make(chan struct{})
		g.Go("waiter", func(ctx context.Context) error {
			<-ctx.Done()
			order = append(order, "waiter ends")
			close(done)
			return ctx.Err()
		})
		g.Go("bad", func(context.Context) error { panic("a bug") })
		err := g.Wait()
		<-done
		p, ok := errors.AsType[*Panic](err)
		if !ok || p.Actor != "bad" || p.Value != "a bug" || len(p.Stack) == 0 {
			t.Fatalf("Wait() = %v; want the panic of bad with its stack", err)
		}
		if len(order) != 2 || order[0] != "hook bad" || order[1] != "waiter ends" {
			t.Errorf("order %q; want the hook before the others end", order)
		}
	})
}

func TestAFailureIsTheCauseAndStopIsNot(t *testing.T) {
	broken := errors.New("broken")
	g := New(t.Context(), nil)
	g.Go("one", func(context.Context) error { return broken })
	if err := g.Wait(); !errors.Is(err, broken) {
		t.Errorf("Wait() = %v; want %v", err, broken)
	}
	g = New(t.Context(), nil)
	g.Go("one", func(ctx context.Context) error { <-ctx.Done(); return context.Cause(ctx) })
	g.Stop()
	if err := g.Wait(); err != nil {
		t.Errorf("Wait() after Stop = %v; want nil", err)
	}
}
