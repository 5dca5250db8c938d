package drivertest

import (
	"context"
	"errors"
	"maps"
	"testing"
	"time"

	"gemel/drivers"
)

// CounterSetup is one counter to test, not yet connected.
type CounterSetup struct {
	Counter drivers.Counter
	Wire    Wire
	Gate    time.Duration // a gate of some hundred milliseconds or more, in bench time
	Pace    drivers.Pace
	// Opened says how many gates the instrument has truly opened since it was made.
	Opened func() int
	// Last says what the instrument truly counted in the last gate that ran to its end.
	Last func() map[drivers.Channel]uint64
	// Counting says whether a gate is truly open now.
	Counting func() bool
}

// Counter holds a counter to the contract.
func Counter(t *testing.T, run Run, setup func(t *testing.T) CounterSetup) {
	device(t, run, func(t *testing.T) (drivers.Device, Wire, func(context.Context) error) {
		s := setup(t)
		return s.Counter, s.Wire, func(ctx context.Context) error { _, err := s.Counter.Count(ctx, s.Gate); return err }
	})
	ready := func(t *testing.T) CounterSetup {
		t.Helper()
		s := setup(t)
		if err := s.Counter.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		if n := s.Opened(); n != 0 {
			t.Errorf("%d gates opened by connecting; want none", n)
		}
		return s
	}
	test := func(name string, f func(t *testing.T, s CounterSetup)) {
		t.Run(name, func(t *testing.T) { run(t, func(t *testing.T) { f(t, ready(t)) }) })
	}
	half := func(s CounterSetup) time.Duration { return s.Pace.Real(s.Gate / 2) }

	test("it counts what the instrument counted, in one gate each", func(t *testing.T, s CounterSetup) {
		for n := 1; n <= 3; n++ {
			g, err := s.Counter.Count(t.Context(), s.Gate)
			if err != nil {
				t.Fatalf("count: %v", err)
			}
			s.counted(t, g)
			if s.Opened() != n {
				t.Errorf("%d gates opened for %d counts", s.Opened(), n)
			}
			if d := g.Set - s.Gate; d.Abs() > s.Gate/100 || g.Length <= 0 || g.Raw == "" {
				t.Errorf("gate %+v; want about %v, with the raw answer", g, s.Gate)
			}
		}
	})
	test("a gate without a length is refused before anything is opened", func(t *testing.T, s CounterSetup) {
		_, err := s.Counter.Count(t.Context(), 0)
		if e := proper(t, "count", err, drivers.GiveUp); e.GateOpened || s.Opened() != 0 {
			t.Errorf("%v, %d gates opened", err, s.Opened())
		}
	})
	t.Run("whatever happens to an answer, counts are true and each gate is accounted for", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := ready(t)
			if _, err := s.Counter.Count(t.Context(), s.Gate); err != nil {
				t.Fatalf("count: %v", err)
			}
			plan(s.Wire)
			for range 3 {
				settled(t, "count", func() error {
					before := s.Opened()
					g, err := s.Counter.Count(t.Context(), s.Gate)
					opened := s.Opened() - before
					switch {
					case opened > 1:
						t.Errorf("one count opened %d gates", opened)
					case err == nil:
						if opened != 1 {
							t.Errorf("counts without a gate: %+v", g)
						}
						s.counted(t, g)
					case opened == 1 && !gateOpened(err):
						t.Errorf("%v: a gate was opened, and the error does not say so", err)
					}
					return err
				})
			}
		})
	})
	test("the end of a context aborts the gate within a second", func(t *testing.T, s CounterSetup) {
		ctx, cancel := context.WithTimeout(t.Context(), half(s))
		defer cancel()
		start := time.Now().Add(half(s))
		_, err := s.Counter.Count(ctx, s.Gate)
		endedWithin(t, "count", start, err)
		if !gateOpened(err) {
			t.Errorf("%v: does not say that a gate was opened", err)
		}
		s.closed(t)
		g, err := s.Counter.Count(t.Context(), s.Gate)
		if err != nil {
			t.Fatalf("the next count: %v", err)
		}
		s.counted(t, g)
	})
	test("an abort from beside ends the gate, and may be called without one", func(t *testing.T, s CounterSetup) {
		if err := s.Counter.Abort(t.Context()); err != nil {
			t.Errorf("without a gate: %v", err)
		}
		counted := make(chan error)
		go func() { _, err := s.Counter.Count(t.Context(), s.Gate); counted <- err }()
		<-time.NewTimer(half(s)).C
		if err := s.Counter.Abort(t.Context()); err != nil {
			t.Errorf("abort: %v", err)
		}
		if err := <-counted; !gateOpened(err) {
			t.Errorf("count: %v; want an error that names the gate", err)
		}
		s.closed(t)
		if _, err := s.Counter.Count(t.Context(), s.Gate); err != nil {
			t.Errorf("the next count: %v", err)
		}
	})
	test("a restart during a gate keeps no reading", func(t *testing.T, s CounterSetup) {
		if s.Wire.Restart == nil {
			t.Skip("SKIPPED: the caller has no hook for a restart")
		}
		timer := time.AfterFunc(half(s), s.Wire.Restart)
		defer timer.Stop()
		_, err := s.Counter.Count(t.Context(), s.Gate)
		if e := proper(t, "count", err, drivers.Reconnect); !e.GateOpened {
			t.Errorf("%v: does not say that a gate was opened", err)
		}
		if err := s.Counter.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		g, err := s.Counter.Count(t.Context(), s.Gate)
		if err != nil {
			t.Fatalf("count: %v", err)
		}
		s.counted(t, g)
	})
	test("a line lost during a gate keeps no reading", func(t *testing.T, s CounterSetup) {
		if s.Wire.Unplug == nil || s.Wire.Plug == nil {
			t.Skip("SKIPPED: the caller has no hook for a lost line")
		}
		timer := time.AfterFunc(half(s), s.Wire.Unplug)
		defer timer.Stop()
		_, err := s.Counter.Count(t.Context(), s.Gate)
		if e := proper(t, "count", err, drivers.Reconnect); !e.GateOpened {
			t.Errorf("%v: does not say that a gate was opened", err)
		}
	})
}

func gateOpened(err error) bool {
	e, ok := errors.AsType[*drivers.Error](err)
	return ok && e.GateOpened
}

func (s CounterSetup) counted(t *testing.T, g drivers.Gate) {
	t.Helper()
	if want := s.Last(); !maps.Equal(g.Counts, want) {
		t.Errorf("counts %v; the instrument counted %v", g.Counts, want)
	}
	if len(g.Counts) != len(s.Counter.Channels()) {
		t.Errorf("%d counts for channels %v", len(g.Counts), s.Counter.Channels())
	}
}

func (s CounterSetup) closed(t *testing.T) {
	t.Helper()
	<-time.NewTimer(100 * time.Millisecond).C // the bytes of the abort are on their way
	if s.Counting() {
		t.Error("a gate is still open")
	}
}
