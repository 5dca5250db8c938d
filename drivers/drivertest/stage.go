package drivertest

import (
	"context"
	"maps"
	"testing"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
)

// StageSetup is one stage to test, not yet connected.
type StageSetup struct {
	Stage drivers.Stage
	Wire  Wire
	// Places are two sets of targets for all axes, some seconds of travel apart.
	Places [2]map[drivers.AxisName]unit.Angle
	// True says where the axes stand in truth, as bench angles.
	True      func() map[drivers.AxisName]unit.Angle
	Tolerance unit.Angle // between that and what is reported
	// Marks says where the axes' reference marks are, by a true zero, for a stage that can look for
	// them; nil: it cannot. Push pushes an axis without its controller's knowing; nil: not possible.
	Marks map[drivers.AxisName]unit.Angle
	Push  func(axis drivers.AxisName, by unit.Angle)
}

// Stage holds a stage to the contract.
func Stage(t *testing.T, run Run, setup func(t *testing.T) StageSetup) {
	device(t, run, func(t *testing.T) (drivers.Device, Wire, func(context.Context) error) {
		s := setup(t)
		return s.Stage, s.Wire, func(ctx context.Context) error {
			_, err := s.Stage.Where(ctx)
			if drivers.RemedyOf(err) == drivers.HomeAgain {
				return nil // it was asked, and answered
			}
			return err
		}
	})

	ready := func(t *testing.T) StageSetup {
		t.Helper()
		s := setup(t)
		if err := s.Stage.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		if err := s.Stage.Home(t.Context(), s.Stage.Axes()); err != nil {
			t.Fatalf("home: %v", err)
		}
		return s
	}
	test := func(name string, f func(t *testing.T, s StageSetup)) {
		t.Run(name, func(t *testing.T) { run(t, func(t *testing.T) { f(t, ready(t)) }) })
	}

	test("it moves, and says where it is", func(t *testing.T, s StageSetup) {
		for _, place := range []int{0, 1, 0} {
			if err := s.Stage.Move(t.Context(), s.Places[place]); err != nil {
				t.Fatalf("move: %v", err)
			}
			s.standsAt(t, s.Places[place])
		}
		homed, err := s.Stage.Homed(t.Context())
		for _, axis := range s.Stage.Axes() {
			if !homed[axis] || err != nil {
				t.Errorf("homed %v, %v; want all", homed, err)
			}
		}
	})
	test("it moves one axis and leaves the others", func(t *testing.T, s StageSetup) {
		s.move(t, s.Places[0])
		axis := s.Stage.Axes()[0]
		s.move(t, map[drivers.AxisName]unit.Angle{axis: s.Places[1][axis]})
		want := map[drivers.AxisName]unit.Angle{}
		maps.Copy(want, s.Places[0])
		want[axis] = s.Places[1][axis]
		s.standsAt(t, want)
	})
	test("an axis that it does not have is refused, and nothing moves", func(t *testing.T, s StageSetup) {
		s.move(t, s.Places[0])
		proper(t, "move", s.Stage.Move(t.Context(), map[drivers.AxisName]unit.Angle{"no_such_axis": 0}), drivers.GiveUp)
		proper(t, "home", s.Stage.Home(t.Context(), []drivers.AxisName{"no_such_axis"}), drivers.GiveUp)
		s.standsAt(t, s.Places[0])
	})
	t.Run("whatever happens to an answer, an angle is true", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := ready(t)
			s.move(t, s.Places[0])
			plan(s.Wire)
			settled(t, "where", func() error {
				at, err := s.Stage.Where(t.Context())
				if err == nil {
					s.near(t, "reported", at, s.True())
				}
				return err
			})
			settled(t, "move", func() error { return s.Stage.Move(t.Context(), s.Places[1]) })
			s.standsAt(t, s.Places[1])
		})
	})
	t.Run("whatever happens to an answer, a move that is retried arrives", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := ready(t)
			plan(s.Wire)
			settled(t, "move", func() error { return s.Stage.Move(t.Context(), s.Places[0]) })
			before := s.True()
			s.near(t, "after the move", before, s.Places[0])
			s.standsAt(t, s.Places[0])
		})
	})
	marks := func(s StageSetup) drivers.Verifier {
		v, _ := s.Stage.(drivers.Verifier)
		return v
	}
	test("a search for the mark says where it is, and keeps the zero", func(t *testing.T, s StageSetup) {
		if s.Marks == nil {
			t.Skip("SKIPPED: the caller says of no mark")
		}
		s.move(t, s.Places[0])
		for axis, mark := range s.Marks {
			at, err := marks(s).Mark(t.Context(), axis)
			if err != nil || (at-mark).Abs() > s.Tolerance {
				t.Errorf("%s: the mark is found at %v, %v; want %v", axis, at, err, mark)
			}
			s.near(t, "in truth", s.True(), map[drivers.AxisName]unit.Angle{axis: mark})
			if s.Push == nil {
				continue
			}
			by := 20 * s.Tolerance
			s.Push(axis, by)
			if at, err = marks(s).Mark(t.Context(), axis); err != nil || (at+by-mark).Abs() > s.Tolerance {
				t.Errorf("%s, pushed by %v: the mark is found at %v, %v; want %v", axis, by, at, err, mark-by)
			}
			s.near(t, "in truth", s.True(), map[drivers.AxisName]unit.Angle{axis: mark})
		}
		_, err := marks(s).Mark(t.Context(), "no_such_axis")
		proper(t, "mark", err, drivers.GiveUp)
	})
	t.Run("whatever happens to an answer, a mark is where it is said to be", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := ready(t)
			if s.Marks == nil {
				t.Skip("SKIPPED: the caller says of no mark")
			}
			axis := s.Stage.Axes()[0]
			plan(s.Wire)
			settled(t, "mark", func() error {
				at, err := marks(s).Mark(t.Context(), axis)
				if err == nil && (at-s.Marks[axis]).Abs() > s.Tolerance {
					t.Errorf("the mark is found at %v; want %v", at, s.Marks[axis])
				}
				return err
			})
			s.near(t, "in truth", s.True(), map[drivers.AxisName]unit.Angle{axis: s.Marks[axis]})
		})
	})
	test("no mark is looked for without a zero to keep", func(t *testing.T, s StageSetup) {
		if s.Marks == nil || s.Wire.Restart == nil {
			t.Skip("SKIPPED: the caller has no hook for a restart, or says of no mark")
		}
		s.Wire.Restart()
		if err := s.Stage.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		before := s.True()
		_, err := marks(s).Mark(t.Context(), s.Stage.Axes()[0])
		proper(t, "mark", err, drivers.HomeAgain)
		s.near(t, "in truth", s.True(), before)
	})
	test("the end of a context stops a search for the mark within a second", func(t *testing.T, s StageSetup) {
		if s.Marks == nil {
			t.Skip("SKIPPED: the caller says of no mark")
		}
		s.move(t, s.Places[0])
		ctx, cancel := context.WithTimeout(t.Context(), 50*time.Millisecond)
		defer cancel()
		start := time.Now().Add(50 * time.Millisecond)
		_, err := marks(s).Mark(ctx, s.Stage.Axes()[0])
		endedWithin(t, "mark", start, err)
		s.rests(t)
	})
	test("the end of a context stops a move within a second", func(t *testing.T, s StageSetup) {
		s.move(t, s.Places[0])
		ctx, cancel := context.WithTimeout(t.Context(), 700*time.Millisecond)
		defer cancel()
		start := time.Now().Add(700 * time.Millisecond)
		endedWithin(t, "move", start, s.Stage.Move(ctx, s.Places[1]))
		s.rests(t)
	})
	test("a stop from beside ends a move, and may be called at rest", func(t *testing.T, s StageSetup) {
		s.move(t, s.Places[0])
		moved := make(chan error)
		go func() { moved <- s.Stage.Move(t.Context(), s.Places[1]) }()
		timer := time.NewTimer(700 * time.Millisecond)
		<-timer.C
		if err := s.Stage.Stop(t.Context()); err != nil {
			t.Errorf("stop: %v", err)
		}
		select {
		case err := <-moved:
			if err == nil {
				t.Error("the move that was stopped reports success")
			}
		case <-time.After(5 * time.Second):
			t.Fatal("the move did not come back")
		}
		s.rests(t)
		if err := s.Stage.Stop(t.Context()); err != nil {
			t.Errorf("stop at rest: %v", err)
		}
		s.move(t, s.Places[1])
		s.standsAt(t, s.Places[1])
	})
	test("after a restart no angle is true until its zero is", func(t *testing.T, s StageSetup) {
		if s.Wire.Restart == nil {
			t.Skip("SKIPPED: the caller has no hook for a restart")
		}
		s.move(t, s.Places[0])
		s.Wire.Restart()
		if _, err := s.Stage.Where(t.Context()); err == nil {
			t.Fatal("where: an angle after a restart")
		} else {
			proper(t, "where", err, drivers.Reconnect, drivers.HomeAgain)
		}
		if err := s.Stage.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		_, err := s.Stage.Where(t.Context())
		proper(t, "where", err, drivers.HomeAgain)
		homed, err := s.Stage.Homed(t.Context())
		for _, axis := range s.Stage.Axes() {
			if homed[axis] || err != nil {
				t.Errorf("homed %v, %v; want none", homed, err)
			}
		}
		s.Stage.TrustZero()
		if _, err := s.Stage.Where(t.Context()); err != nil {
			t.Errorf("where, with a person's word for the zero: %v", err)
		}
		if err := s.Stage.Home(t.Context(), s.Stage.Axes()); err != nil {
			t.Fatalf("home: %v", err)
		}
		s.move(t, s.Places[1])
		s.standsAt(t, s.Places[1])
	})
	test("a restart during a move is noticed", func(t *testing.T, s StageSetup) {
		if s.Wire.Restart == nil {
			t.Skip("SKIPPED: the caller has no hook for a restart")
		}
		s.move(t, s.Places[0])
		moved := make(chan error)
		go func() { moved <- s.Stage.Move(t.Context(), s.Places[1]) }()
		timer := time.NewTimer(700 * time.Millisecond)
		<-timer.C
		s.Wire.Restart()
		if err := <-moved; err != nil {
			proper(t, "move", err, drivers.Reconnect)
		}
		_, err := s.Stage.Where(t.Context())
		proper(t, "where", err, drivers.Reconnect, drivers.HomeAgain)
	})
}

func (s StageSetup) move(t *testing.T, to map[drivers.AxisName]unit.Angle) {
	t.Helper()
	if err := s.Stage.Move(t.Context(), to); err != nil {
		t.Fatalf("move: %v", err)
	}
}

// standsAt checks that the stage reports the place, and that it is the truth.
func (s StageSetup) standsAt(t *testing.T, want map[drivers.AxisName]unit.Angle) {
	t.Helper()
	settled(t, "where", func() error {
		at, err := s.Stage.Where(t.Context())
		if err == nil {
			if len(at) != len(s.Stage.Axes()) {
				t.Errorf("where: %v; want all of %v", at, s.Stage.Axes())
			}
			s.near(t, "reported", at, want)
		}
		return err
	})
	s.near(t, "in truth", s.True(), want)
}

func (s StageSetup) near(t *testing.T, what string, got, want map[drivers.AxisName]unit.Angle) {
	t.Helper()
	for axis, angle := range want {
		if d := (got[axis] - angle).Abs(); d > s.Tolerance {
			t.Errorf("%s: %s stands at %v; want %v", what, axis, got[axis], angle)
		}
	}
}

// rests checks that nothing moves any more.
func (s StageSetup) rests(t *testing.T) {
	t.Helper()
	before := s.True()
	timer := time.NewTimer(300 * time.Millisecond)
	<-timer.C
	for axis, angle := range s.True() {
		if angle != before[axis] {
			t.Errorf("%s still moves: %v, and then %v", axis, before[axis], angle)
		}
	}
}
