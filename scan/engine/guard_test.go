package engine

import (
	"errors"
	"fmt"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
)

// guarded is a night whose pump power the test decides.
func guarded(t *testing.T, otherwise scan.Then, giveUp time.Duration, power func(since time.Duration) (float64, error)) *night {
	t.Helper()
	n := newNight(t, func(c *Config) {
		c.Plan.Guards = []scan.Guard{{Name: "pump_power", Sensor: "pump_power", Low: 45, High: 55, Otherwise: otherwise, GiveUpAfter: giveUp}}
	})
	began := time.Now()
	n.eng.Bench.Sensors = []drivers.Sensor{fakeSensor{fakeDevice{n.world, "pump_power"}, func() (float64, error) { return power(time.Since(began)) }}}
	return n
}

func between(from, to time.Duration) func(time.Duration) (float64, error) {
	return func(since time.Duration) (float64, error) {
		if since >= from && since < to {
			return 30, nil
		}
		return 50, nil
	}
}

func TestABrokenGuardHoldsTheRunAndEndsItsOwnHold(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := guarded(t, scan.Hold, 0, between(8*time.Second, 3*time.Minute))
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		events := n.events(t)
		if got, want := kinds(events), "began guard_broken guard_mended ended"; got != want {
			t.Fatalf("events %s; want %s", got, want)
		}
		if !slices.Equal(events[1].Causes, []protocol.Cause{protocol.ByGuard}) || events[1].State != protocol.Holding || events[2].State != protocol.Running {
			t.Errorf("guard_broken %s for %v, guard_mended %s; want holding for the guard, then running", events[1].State, events[1].Causes, events[2].State)
		}
		if !strings.Contains(events[1].Text, "30 mW; want 45 to 55 mW") {
			t.Errorf("text %q; want what was seen and what is wanted", events[1].Text)
		}
		setAside := 0
		for _, r := range n.readings(t) {
			for _, s := range r.Sensors {
				if r.Accepted && r.Kind == protocol.Light && s.Minimum < 45 {
					t.Errorf("reading %d was accepted at %g mW", r.Sequence, s.Minimum)
				}
			}
			if !r.Accepted {
				setAside++
			}
		}
		if setAside != 1 {
			t.Errorf("%d set aside; want the dwell in which the guard broke", setAside)
		}
	})
}

func TestAGuardThatDoesNotMendFailsTheRunInItsOwnTime(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := guarded(t, scan.Hold, 10*time.Minute, between(8*time.Second, 100*time.Hour))
		began := time.Now()
		state, err := n.eng.Run(t.Context())
		if state != protocol.Failed || err != nil {
			t.Fatalf("Run() = %s, %v; want failed", state, err)
		}
		if took := time.Since(began); took < 10*time.Minute || took > 12*time.Minute {
			t.Errorf("it took %s; want the guard's 10 min", took)
		}
		n.atRest(t)
	})
}

func TestAGuardSkipsOrStopsWhereTheRecipeSaysSo(t *testing.T) {
	for then, want := range map[scan.Then]string{scan.Skip: "finished", scan.Stop: "failed"} {
		synctest.Test(t, func(t *testing.T) {
			n := guarded(t, then, 0, between(8*time.Second, 11*time.Second))
			state, err := n.eng.Run(t.Context())
			if string(state) != want || err != nil {
				t.Errorf("%s: Run() = %s, %v; want %s", then, state, err, want)
			}
			if !strings.Contains(kinds(n.events(t)), "guard_broken") {
				t.Errorf("%s: events %s; want guard_broken", then, kinds(n.events(t)))
			}
		})
	}
}

func TestASilentSensorBreaksItsGuardAndNoOther(t *testing.T) {
	silent := func(since time.Duration) (float64, error) {
		if since > 8*time.Second && since < 2*time.Minute {
			return 0, &drivers.Error{Op: "read", Device: "pump_power", Remedy: drivers.Retry, Err: errors.New("no answer")}
		}
		return 50, nil
	}
	synctest.Test(t, func(t *testing.T) {
		n := guarded(t, scan.Hold, 0, silent)
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if !strings.Contains(kinds(n.events(t)), "guard_broken guard_mended") {
			t.Errorf("events %s; want the silence taken for a broken guard", kinds(n.events(t)))
		}
	})
}

func TestAResumedRunStillHoldsForItsGuard(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := guarded(t, scan.Hold, 30*time.Minute, between(8*time.Second, 100*time.Hour))
		done := during(time.Minute, func() {
			if r, err := n.eng.Resume(t.Context(), "ann"); err != nil || r.State != protocol.Holding || !slices.Equal(r.Causes, []protocol.Cause{protocol.ByGuard}) {
				t.Errorf("Resume() = %+v, %v; want still held by the guard: nothing clears somebody else's hold", r, err)
			}
		})
		if state, _ := n.eng.Run(t.Context()); state != protocol.Failed {
			t.Errorf("Run() = %s; want failed", state)
		}
		<-done
	})
}

func TestAScheduleWaitsAndThenLeavesOutWhatDoesNotFit(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		began := time.Now()
		n := newNight(t, func(c *Config) {
			c.Plan.Repeat.Times = 20
			c.Plan.Schedule = scan.Schedule{NotBefore: began.Add(2 * time.Hour), FinishBy: began.Add(2*time.Hour + 90*time.Second)}
		})
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		readings := n.readings(t)
		if first := readings[0].StartedAt.Time; first.Before(began.Add(2 * time.Hour)) {
			t.Errorf("counted at %s; want nothing before %s", first, began.Add(2*time.Hour))
		}
		last := readings[len(readings)-1]
		if last.Kind != protocol.Dark || last.EndedAt.After(began.Add(2*time.Hour+90*time.Second)) {
			t.Errorf("the last reading is %s at %s; want the closing dark before the end", last.Kind, last.EndedAt)
		}
		if got := n.eng.Snapshot(); got.Accepted >= 60 || got.Accepted < 15 || got.Accepted != got.Planned-n.eng.progress.leftOut {
			t.Errorf("%d accepted of %d planned; want what was left out to be all that is missing", got.Accepted, got.Planned)
		}
		events := n.events(t)
		if text := events[len(events)-1].Text; !strings.Contains(text, fmt.Sprintf("%d visits were left out", n.eng.progress.leftOut)) {
			t.Errorf("it ended with %q; want what was left out told", text)
		}
		if p := n.fold(t); !p.cut {
			t.Error("the cut is not in the journal: a resumed run would go on")
		}
	})
}

func TestARateGuardHoldsUntilTheRateIsWellAgain(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			c.Plan.Guards = []scan.Guard{{Name: "rate of signal", Rate: "signal", Low: 500, High: 2000, Otherwise: scan.Hold}}
		})
		began := time.Now()
		n.world.fail = func(what string) error {
			n.world.mu.Lock()
			defer n.world.mu.Unlock()
			since := time.Since(began)
			n.world.rates["signal"] = 1000
			if since > 6*time.Second && since < 3*time.Minute {
				n.world.rates["signal"] = 200
			}
			return nil
		}
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		events := n.events(t)
		if got := kinds(events); got != "began guard_broken guard_mended ended" || !strings.Contains(events[1].Text, "200 /s; want 500 to 2000 /s") || events[1].Detail["channel"] != "signal" {
			t.Fatalf("events %s, %q; want the rate and its bounds", got, events[1].Text)
		}
		if mended := events[2].At.Sub(began); mended < 3*time.Minute || mended > 4*time.Minute {
			t.Errorf("mended after %s; want soon after 3 min", mended)
		}
		checks := 0
		for _, r := range n.readings(t) {
			if r.Kind == protocol.Light && r.Accepted && countOf(r.Counts, "signal") < 1900 {
				t.Errorf("reading %d was accepted with %d counts", r.Sequence, countOf(r.Counts, "signal"))
			}
			if r.Kind == protocol.Check {
				checks++
			}
		}
		if checks < 4 || checks > 8 {
			t.Errorf("%d checks in three minutes; want one each half minute", checks)
		}
	})
}

func TestAGuardOfTheDarkRateLooksAtDarks(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			c.Plan.Guards = []scan.Guard{{Name: "dark rate of idler", DarkRate: "idler", Low: 0, High: 500, Otherwise: scan.Stop}}
		})
		state, err := n.eng.Run(t.Context())
		events := n.events(t)
		if state != protocol.Failed || err != nil || kinds(events) != "began guard_broken ended" || !strings.Contains(events[1].Text, "800 /s; want 0 to 500 /s") {
			t.Errorf("Run() = %s, %v, events %s; want failed at the first dark", state, err, kinds(events))
		}
		if got := sequenceOf(n.readings(t)); got != "dark" {
			t.Errorf("readings %s; want the dark, accepted", got)
		}
	})
}
