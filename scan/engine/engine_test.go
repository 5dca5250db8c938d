package engine

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"reflect"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

type night struct {
	*world
	*memory
	eng *Engine
}

func newNight(t *testing.T, change func(*Config)) *night {
	t.Helper()
	n := &night{world: newWorld(), memory: &memory{}}
	c := Config{Bench: n.bench(), Plan: aPlan(), RunID: "r", Log: n.memory}
	if change != nil {
		change(&c)
	}
	n.eng = New(c)
	return n
}

func sequenceOf(readings []protocol.Reading) string {
	var words []string
	for _, r := range readings {
		word := string(r.Kind)
		if r.Point != nil {
			word = fmt.Sprintf("%d.%d", *r.Point, *r.Visit)
		}
		if !r.Accepted {
			word += "-"
		}
		words = append(words, word)
	}
	return strings.Join(words, " ")
}

func TestAPlanIsTakenInOrderWithItsDarks(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		planned := n.eng.Snapshot().Planned
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		got := sequenceOf(n.readings(t))
		if want := "dark 0.1 1.1 2.1 2.2 dark 1.2 0.2 dark"; got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		if planned != 9 {
			t.Errorf("%d readings planned; want 9", planned)
		}
		n.atRest(t)
		for _, r := range n.readings(t) {
			if len(r.Angles) != 3 || r.Angles[0].Target != r.Angles[0].Before || r.Angles[0].Target != r.Angles[0].After {
				t.Errorf("reading %d: angles %+v; want all axes at their targets", r.Sequence, r.Angles)
			}
			if r.Kind == protocol.Light && (len(r.Slices) != 2 || r.Counts[0].Counts != 2000 || r.Gate.Duration() != 2*time.Second || r.Glance == nil) {
				t.Errorf("reading %d: %d slices, counts %v, gate %s; want 2, 2000, 2 s, and a glance", r.Sequence, len(r.Slices), r.Counts, r.Gate.Duration())
			}
			if r.Kind == protocol.Light && r.Counts[2].Counts != r.Slices[1].Counts[2].Counts {
				t.Errorf("reading %d: the tag was summed: %v", r.Sequence, r.Counts)
			}
		}
		for _, r := range n.readings(t) {
			if r.Simulated == nil || *r.Simulated != 1 {
				t.Errorf("reading %d does not say that it was simulated", r.Sequence)
			}
		}
	})
}

func TestABackgroundSpoilsPhaseMatchingAndPutsItBack(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			c.Plan.Background = &scan.Background{Axis: "plate", From: 5 * unit.Degree, By: 45 * unit.Degree, Cadence: scan.Cadence{Dwell: scan.Dwell{Time: time.Second, Slice: time.Second}, EveryPoints: 2, AtStart: true, AtEnd: true}}
		})
		planned := n.eng.Snapshot().Planned
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		got := sequenceOf(n.readings(t))
		if want := "dark background 0.1 1.1 background 2.1 2.2 dark background 1.2 0.2 dark background"; got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		if got := len(n.readings(t)); planned != got {
			t.Errorf("%d readings planned, %d taken", planned, got)
		}
		for _, r := range n.readings(t) {
			plate := r.Angles[2].Before
			switch {
			case r.Kind == protocol.Background && plate != 50*unit.Degree, r.Kind == protocol.Light && plate != 5*unit.Degree:
				t.Errorf("reading %d, %s: the plate stands at %s; want 50 deg for a background, 5 deg for light", r.Sequence, r.Kind, plate)
			}
		}
		if n.at["plate"] != 5*unit.Degree {
			t.Errorf("after the run the plate stands at %s; want it put back to 5 deg", n.at["plate"])
		}
	})
}

func TestARunCutInABackgroundGoesOnPhaseMatched(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		change := func(c *Config) {
			c.Plan.Background = &scan.Background{Axis: "plate", From: 5 * unit.Degree, By: 45 * unit.Degree, Cadence: scan.Cadence{Dwell: scan.Dwell{Time: time.Second, Slice: time.Second}, AtStart: true}}
		}
		whole := newNight(t, change)
		if _, err := whole.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		n := newNight(t, change)
		n.memory.entries = slices.Clone(whole.entries[:4]) // began, points, dark, background
		n.at["plate"] = 50 * unit.Degree                   // as the cut left it
		c := n.eng.Config
		c.Past, c.ResumeAfterRestart = n.fold(t), true
		n.eng = New(c)
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		for _, r := range n.readings(t) {
			if r.Kind == protocol.Light && r.Angles[2].Before != 5*unit.Degree {
				t.Errorf("reading %d: light with the plate at %s; want it put back to 5 deg", r.Sequence, r.Angles[2].Before)
			}
		}
	})
}

func TestADwellEndsWithEnoughHeraldsOrAtItsTime(t *testing.T) {
	for rate, slices := range map[float64]int{1000: 3, 300: 5} {
		synctest.Test(t, func(t *testing.T) {
			n := newNight(t, func(c *Config) {
				c.Plan.Dwell = scan.Dwell{Time: 5 * time.Second, Slice: time.Second, Heralds: 2500, Trigger: "signal"}
			})
			n.rates["signal"] = rate
			if _, err := n.eng.Run(t.Context()); err != nil {
				t.Fatal(err)
			}
			for _, r := range n.readings(t) {
				if r.Kind == protocol.Light && len(r.Slices) != slices {
					t.Errorf("at %g /s: %d slices; want %d", rate, len(r.Slices), slices)
				}
			}
		})
	}
}

func TestTheApproachIsAlwaysFromTheDeclaredSide(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		var moves []string
		for _, l := range n.log {
			if strings.HasPrefix(l, "move signal_arm") {
				moves = append(moves, strings.TrimPrefix(l, "move signal_arm "))
			}
		}
		// Up 0, 1, 2 and back 1, 0: downwards each goes half a degree beyond first, and so does the first, from 0.
		if want := []string{"-0.50", "0.00", "1.00", "2.00", "0.50", "1.00", "-0.50", "0.00"}; !slices.Equal(moves, want) {
			t.Errorf("moves %v; want %v", moves, want)
		}
	})
}

func TestDetectorsAreProtectedDuringEveryMove(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		bad := 0
		n.fail = func(what string) error {
			if strings.HasPrefix(what, "move") && n.open["guard"] {
				bad++
			}
			if strings.HasPrefix(what, "gate") && !n.open["guard"] {
				bad++
			}
			return nil
		}
		if _, err := n.eng.Run(t.Context()); err != nil || bad > 0 {
			t.Errorf("%d moves with open detectors or gates with closed ones, %v; want none", bad, err)
		}
	})
}

func fails(times int, prefix string, err error) func(string) error {
	return func(what string) error {
		if strings.HasPrefix(what, prefix) && times > 0 {
			times--
			return err
		}
		return nil
	}
}

func kinds(events []protocol.Event) string {
	var words []string
	for _, e := range events {
		words = append(words, string(e.Kind))
	}
	return strings.Join(words, " ")
}

func retry(opened bool) error {
	return &drivers.Error{Op: "count", Device: "counter", Remedy: drivers.Retry, GateOpened: opened, Err: errors.New("garbled twice")}
}

func TestAFailedReadingIsSetAsideAndTakenAgain(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		n.fail = fails(2, "gate 1s pump=true", retry(true))
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got, want := sequenceOf(n.readings(t)), "dark 0.1- 0.1- 0.1 1.1 2.1 2.2 dark 1.2 0.2 dark"; got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		if r := n.readings(t)[1]; r.LostGates != 1 || !strings.Contains(r.Reason, "garbled") {
			t.Errorf("set aside with %d lost gates and reason %q; want 1 and the error", r.LostGates, r.Reason)
		}
		if r := n.readings(t)[3]; r.Attempt != 3 {
			t.Errorf("accepted at attempt %d; want 3", r.Attempt)
		}
		if got, want := kinds(n.events(t)), "began taken_again taken_again ended"; got != want {
			t.Errorf("events %s; want %s", got, want)
		}
	})
}

func TestEnoughFailuresDoWhatTheRecipeSays(t *testing.T) {
	for _, c := range []struct {
		then      scan.Then
		state     protocol.State
		endEvents string
	}{
		{scan.Skip, protocol.Finished, "began taken_again taken_again set_aside ended"},
		{scan.Stop, protocol.Failed, "began taken_again taken_again ended"},
		{scan.Hold, protocol.Failed, "began taken_again taken_again held ended"}, // nobody comes within the hour
	} {
		t.Run(string(c.then), func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, func(c2 *Config) { c2.Plan.Trouble.Then = c.then })
				n.fail = fails(3, "gate 1s pump=true", retry(true))
				state, err := n.eng.Run(t.Context())
				if state != c.state || err != nil {
					t.Fatalf("Run() = %s, %v; want %s", state, err, c.state)
				}
				if got := kinds(n.events(t)); got != c.endEvents {
					t.Errorf("events %s; want %s", got, c.endEvents)
				}
				n.atRest(t)
			})
		})
	}
}

// during calls f, in a goroutine, at a time into the night.
func during(after time.Duration, f func()) <-chan struct{} {
	done := make(chan struct{})
	go func() {
		time.Sleep(after)
		synctest.Wait()
		f()
		close(done)
	}()
	return done
}

func TestStopHoldAndResumeAreObeyedInTheMiddleOfAGate(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		done := during(2500*time.Millisecond, func() {
			asked := time.Now()
			r, err := n.eng.Hold(t.Context(), "ann")
			if err != nil || r.State != protocol.Holding || !slices.Equal(r.Causes, []protocol.Cause{protocol.ByOperator}) || !r.Recorded {
				t.Errorf("Hold() = %+v, %v", r, err)
			}
			if waited := time.Since(asked); waited > time.Second {
				t.Errorf("the hold took %s; want a second at most", waited)
			}
			n.atRest(t)
			if last := n.events(t)[len(n.events(t))-1]; last.Kind != protocol.Held {
				t.Errorf("answered before it was written: last event %s", last.Kind)
			}
			time.Sleep(30 * time.Hour) // an operator's hold has no bound
			if r, err = n.eng.Resume(t.Context(), "ann"); err != nil || r.State != protocol.Running {
				t.Errorf("Resume() = %+v, %v", r, err)
			}
			time.Sleep(6 * time.Second)
			if r, err = n.eng.Stop(t.Context(), "bob"); err != nil || r.State != protocol.Stopped {
				t.Errorf("Stop() = %+v, %v", r, err)
			}
			if _, err = n.eng.Resume(t.Context(), "bob"); !errors.Is(err, ErrOver) {
				t.Errorf("Resume() after the end = %v; want ErrOver", err)
			}
		})
		state, err := n.eng.Run(t.Context())
		<-done
		if state != protocol.Stopped || err != nil {
			t.Fatalf("Run() = %s, %v; want stopped", state, err)
		}
		n.atRest(t)
		readings := n.readings(t)
		if readings[1].Accepted || readings[1].LostGates != 1 {
			t.Errorf("the held dwell: %+v; want it set aside with its lost gate", readings[1])
		}
	})
}

func TestAResumedRunGoesOnWhereItWas(t *testing.T) {
	// Cut the night after each entry in turn; whatever the cut, the accepted visits come out the same.
	synctest.Test(t, func(t *testing.T) {
		whole := newNight(t, nil)
		if _, err := whole.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		for cut := 1; cut < len(whole.entries); cut++ {
			n := newNight(t, nil)
			n.memory.entries = slices.Clone(whole.entries[:cut])
			c := n.eng.Config
			c.Past, c.ResumeAfterRestart = n.fold(t), true
			n.eng = New(c)
			state, err := n.eng.Run(t.Context())
			if state != protocol.Finished || err != nil {
				t.Fatalf("cut after %d: Run() = %s, %v; want finished", cut, state, err)
			}
			if got, want := sequenceOf(n.readings(t)), sequenceOf(whole.readings(t)); got != want {
				t.Errorf("cut after %d: readings %s; want %s", cut, got, want)
			}
			if !strings.Contains(kinds(n.events(t)), "interrupted went_on") {
				t.Errorf("cut after %d: events %s; want the interruption told", cut, kinds(n.events(t)))
			}
		}
	})
}

func TestTooMuchLightProtectsFirstAndTheHoldEndsByItself(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		var dark time.Time
		n.fail = func(what string) error {
			if strings.HasPrefix(what, "gate 1s pump=true") && dark.IsZero() {
				dark = time.Now().Add(2 * time.Minute)
				n.rates["idler"] = 5e6
			}
			if !dark.IsZero() && time.Now().After(dark) {
				n.rates["idler"] = 800
			}
			return nil
		}
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		events := n.events(t)
		if got, want := kinds(events), "began held went_on ended"; got != want {
			t.Fatalf("events %s; want %s", got, want)
		}
		if !slices.Equal(events[1].Causes, []protocol.Cause{protocol.ByLight}) {
			t.Errorf("held for %v; want light", events[1].Causes)
		}
		// The first act after the bright gate closes the guard; the pump and the rest come later.
		for i, l := range n.log {
			if strings.HasPrefix(l, "gate 1s pump=true") {
				if n.log[i+1] != "close guard" {
					t.Errorf("after the bright gate came %q; want the guard closed first", n.log[i+1])
				}
				break
			}
		}
		if got := sequenceOf(n.readings(t)); !strings.HasPrefix(got, "dark 0.1- check- check- check- check") {
			t.Errorf("readings %s; want the looks at the light as checks", got)
		}
	})
}

func TestAnArmThatLooksIntoThePumpIsNotTriedForEver(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) { c.Plan.Trouble.Then = scan.Skip })
		n.fail = func(what string) error {
			n.rates["idler"] = 800
			if strings.HasPrefix(what, "gate") && n.open["pump"] && n.at["signal_arm"] == 0 {
				n.rates["idler"] = 5e6
			}
			return nil
		}
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished without the bright point", state, err)
		}
		if got := n.eng.Snapshot().Accepted; got != 7 {
			t.Errorf("%d accepted; want the 4 other visits and 3 darks", got)
		}
	})
}

func TestNoRoomHoldsAndNothingIsLostOrDoubled(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		done := during(9*time.Second, func() {
			n.memory.mu.Lock()
			n.memory.full = true
			n.memory.mu.Unlock()
			time.Sleep(5 * time.Minute)
			s := n.eng.Snapshot()
			if s.State != protocol.Holding || !slices.Contains(s.Causes, protocol.ByStorage) {
				t.Errorf("snapshot %+v; want holding for storage", s)
			}
			n.atRest(t)
			n.memory.mu.Lock()
			n.memory.full = false
			n.memory.mu.Unlock()
		})
		state, err := n.eng.Run(t.Context())
		<-done
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got, want := sequenceOf(n.readings(t)), "dark 0.1 1.1 2.1 2.2 dark 1.2 0.2 dark"; got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		if !strings.Contains(kinds(n.events(t)), "went_on") {
			t.Errorf("events %s; want the time without room told", kinds(n.events(t)))
		}
	})
}

func TestAPanicEndsInTheRestState(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		n.fail = func(what string) error {
			if strings.HasPrefix(what, "gate 1s pump=true") {
				panic("a bug")
			}
			return nil
		}
		state, err := n.eng.Run(t.Context())
		if state != protocol.Failed || err == nil || !strings.Contains(err.Error(), "a bug") {
			t.Errorf("Run() = %s, %v; want failed with the bug", state, err)
		}
		n.atRest(t)
		if last := n.events(t)[len(n.events(t))-1]; last.Kind != protocol.Ended || last.State != protocol.Failed {
			t.Errorf("last event %+v; want ended, failed", last)
		}
	})
}

func TestALogbookThatHoldsSomethingElseEndsInTheRestState(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		n.fail = func(what string) error {
			if strings.HasPrefix(what, "gate 1s pump=true") && len(n.entries) == 3 {
				n.entries = append(n.entries, protocol.Entry{}) // somebody else wrote
			}
			return nil
		}
		if _, err := n.eng.Run(t.Context()); !errors.Is(err, ErrConflict) {
			t.Errorf("Run() = %v; want ErrConflict", err)
		}
		n.atRest(t)
	})
}

func TestAResultIsWrittenOnceBeforeTheEnd(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		asked := 0
		conclude := func(context.Context) ([]json.RawMessage, error) {
			asked++
			return []json.RawMessage{json.RawMessage(`{"kind":"efficiency","value":0.57,"run":"somebody else's"}`)}, nil
		}
		wanted := func(c *Config) { c.Conclude, c.Plan.Results = conclude, []scan.Result{{Kind: scan.Efficiency}} }
		n := newNight(t, wanted)
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		e := n.entries[len(n.entries)-2]
		var got map[string]any
		if err := json.Unmarshal(e.Body, &got); err != nil || e.Kind != protocol.ResultEntry || got["value"] != 0.57 || got["run"] != "r" || got["schema"] != protocol.ResultSchema || got["sequence"] != float64(e.Sequence) {
			t.Errorf("entry %d is a %s: %s, %v; want the result with the head of this entry", e.Sequence, e.Kind, e.Body, err)
		}
		// Cut before the end: the result is there already and is not worked out again.
		again := newNight(t, wanted)
		again.memory.entries = slices.Clone(n.entries[:len(n.entries)-1])
		c := again.eng.Config
		c.Past, c.ResumeAfterRestart = again.fold(t), true
		again.eng = New(c)
		if state, err := again.eng.Run(t.Context()); state != protocol.Finished || err != nil || asked != 1 {
			t.Errorf("resumed: %s, %v, asked %d times; want finished, asked once", state, err, asked)
		}
	})
}

func TestARunWithoutItsResultStillFinishes(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			c.Plan.Results = []scan.Result{{Kind: scan.Efficiency}}
			c.Conclude = func(context.Context) ([]json.RawMessage, error) { return nil, errors.New("the file is gone") }
		})
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil || !strings.Contains(kinds(n.events(t)), "trouble ended") {
			t.Errorf("Run() = %s, %v, events %s; want finished, and the missing result told", state, err, kinds(n.events(t)))
		}
	})
}

func TestTheFirstActIsTheRestState(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		n.open["pump"], n.open["guard"] = true, true
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		if want := []string{"close guard", "close pump", "stop rotary", "abort"}; !slices.Equal(n.log[:4], want) {
			t.Errorf("first acts %v; want %v", n.log[:4], want)
		}
	})
}

func TestAShutdownLeavesTheRunForARestart(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		ctx, cancel := context.WithCancelCause(t.Context())
		done := during(5*time.Second, func() { cancel(ErrShutdown) })
		state, err := n.eng.Run(ctx)
		<-done
		if state != protocol.Holding || err != nil {
			t.Fatalf("Run() = %s, %v; want holding", state, err)
		}
		n.atRest(t)
		p := n.fold(t)
		if !slices.Equal(p.Causes, []protocol.Cause{protocol.ByRestart}) {
			t.Errorf("causes %v; want restart", p.Causes)
		}
	})
}

func TestALostZeroWaitsForAPersonUnlessTheBenchFileSaysOtherwise(t *testing.T) {
	lost := &drivers.Error{Op: "where", Device: "rotary", Remedy: drivers.HomeAgain, Restarted: true, Err: errors.New("the controller restarted")}
	for _, unattended := range []bool{false, true} {
		t.Run(fmt.Sprintf("unattended %v", unattended), func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, nil)
				n.eng.Bench.Unattended = map[drivers.DeviceName]bool{"rotary": unattended}
				n.fail = func(what string) error {
					if what == "move signal_arm 2.00" && n.homed && !slices.ContainsFunc(n.log, func(l string) bool { return strings.HasPrefix(l, "home") }) {
						n.homed = false
					}
					if what == "where" && !n.homed {
						return lost
					}
					return nil
				}
				done := make(<-chan struct{})
				if !unattended {
					done = during(10*time.Minute, func() {
						if slices.ContainsFunc(n.log, func(l string) bool { return strings.HasPrefix(l, "home") }) {
							t.Error("homed with nobody there")
						}
						if _, err := n.eng.Resume(t.Context(), "ann"); err != nil {
							t.Error(err)
						}
					})
				}
				state, err := n.eng.Run(t.Context())
				if !unattended {
					<-done
				}
				if state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v; want finished", state, err)
				}
				if !strings.Contains(kinds(n.events(t)), "homed") {
					t.Errorf("events %s; want homed", kinds(n.events(t)))
				}
			})
		})
	}
}

func TestFoldAndLifeAgree(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		n.fail = fails(2, "gate 1s pump=true", retry(true))
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		folded, lived := n.fold(t), n.eng.progress
		lived.thePlan, lived.visits, lived.cursor = nil, nil, 0 // a fold has no plan
		if !reflect.DeepEqual(folded, lived) {
			t.Errorf("folded %+v\nlived  %+v", folded, lived)
		}
	})
}

type offSetting struct {
	fakeDevice
	value *float64
}

func (s offSetting) Unit() string { return "mW" }
func (s offSetting) Set(_ context.Context, value float64) (float64, error) {
	*s.value = value + 0.001
	return *s.value, s.w.act("set %s %g", s.name, value)
}
func (s offSetting) Get(context.Context) (float64, error) { return *s.value, nil }

func TestEveryReadingSaysWhereTheSteppedSettingsStand(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		value := 45.0
		n := newNight(t, func(c *Config) {
			for i := range c.Plan.Points {
				c.Plan.Points[i].Settings = []scan.SettingTarget{{Setting: "laser", Value: float64(15 * (i + 1))}}
			}
		})
		n.eng.Bench.Settings = []drivers.Setting{offSetting{fakeDevice{n.world, "laser"}, &value}}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		var got []string
		for _, r := range n.readings(t) {
			if len(r.Settings) != 1 {
				t.Fatalf("reading %d has settings %+v; want the laser", r.Sequence, r.Settings)
			}
			got = append(got, fmt.Sprintf("%s %g/%g", r.Kind, r.Settings[0].Target, r.Settings[0].After))
		}
		want := "dark 45/45, light 15/15.001, light 30/30.001, light 45/45.001, light 45/45.001, dark 45/45.001, light 30/30.001, light 15/15.001, dark 15/15.001"
		if strings.Join(got, ", ") != want {
			t.Errorf("settings %s; want %s", strings.Join(got, ", "), want)
		}
	})
}

func TestSettingsThatNobodyStepsAreBroughtWhereTheyStand(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		value := 22.4 // where a scan that was stopped left it
		n := newNight(t, nil)
		n.eng.Bench.Settings = []drivers.Setting{offSetting{fakeDevice{n.world, "delay"}, &value}}
		n.eng.Bench.Stand = map[drivers.DeviceName]float64{"delay": 18.4}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		sets := 0
		for _, what := range n.heard() {
			if strings.HasPrefix(what, "set delay") {
				sets++
			}
		}
		if sets != 1 {
			t.Errorf("it was set %d times; want once", sets)
		}
		for _, r := range n.readings(t) {
			if len(r.Settings) != 1 || r.Settings[0].Target != 18.4 || r.Settings[0].Before != 18.401 {
				t.Errorf("reading %d has %+v; want the delay where it stands", r.Sequence, r.Settings)
			}
		}
	})
}
