package engine

import (
	"context"
	"errors"
	"fmt"
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

// bounded ends a run that goes on for ever, long after it should have failed.
func bounded(t *testing.T) context.Context {
	ctx, cancel := context.WithTimeout(t.Context(), 3*time.Hour)
	t.Cleanup(cancel)
	return ctx
}

// rated is a night with a guard of the signal's rate, and rates that the test decides before each act.
func rated(t *testing.T, giveUp time.Duration, change func(*Config), rates func(n *night, since time.Duration, what string)) *night {
	t.Helper()
	n := newNight(t, func(c *Config) {
		c.Plan.Guards = []scan.Guard{{Name: "rate of signal", Rate: "signal", Low: 500, High: 2000, Otherwise: scan.Hold, GiveUpAfter: giveUp}}
		if change != nil {
			change(c)
		}
	})
	began := time.Now()
	n.world.fail = func(what string) error {
		n.world.mu.Lock()
		defer n.world.mu.Unlock()
		n.world.rates["signal"], n.world.rates["idler"] = 1000, 800
		rates(n, time.Since(began), what)
		return nil
	}
	return n
}

func TestLightThatComesWhileARateGuardHoldsIsLookedAtFirst(t *testing.T) {
	for _, c := range []struct {
		name  string
		held  bool // a person holds as well, and resumes after 20 min
		rates func(n *night, since time.Duration, what string)
		want  protocol.State
		ended time.Duration
		kinds string
	}{
		{"both mend", false, func(n *night, since time.Duration, _ string) {
			if since > 6*time.Second && since < 3*time.Minute {
				n.rates["signal"] = 200
			}
			if since > time.Minute && since < 2*time.Minute {
				n.rates["idler"] = 5e6
			}
		}, protocol.Finished, 5 * time.Minute, "began guard_broken held went_on guard_mended ended"},
		{"both mend while a person holds", true, func(n *night, since time.Duration, _ string) {
			if since > 6*time.Second && since < 3*time.Minute {
				n.rates["signal"] = 200
			}
			if since > time.Minute && since < 2*time.Minute {
				n.rates["idler"] = 5e6
			}
		}, protocol.Finished, 25 * time.Minute, "began guard_broken held held went_on went_on guard_mended ended"},
		{"the pump is too bright each time that it is opened", false, func(n *night, since time.Duration, what string) {
			if since > 6*time.Second {
				n.rates["signal"] = 200
			}
			if since > time.Minute && strings.HasSuffix(what, "pump=true") {
				n.rates["idler"] = 5e6
			}
		}, protocol.Failed, 32 * time.Minute, ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				began := time.Now()
				n := rated(t, 30*time.Minute, nil, c.rates)
				done := during(0, func() {})
				if c.held {
					done = during(100*time.Second, func() {
						if s := n.eng.Snapshot(); !slices.Equal(s.Causes, []protocol.Cause{protocol.ByGuard, protocol.ByLight}) {
							t.Errorf("held for %v; want the guard and light", s.Causes)
						}
						if _, err := n.eng.Hold(t.Context(), "ann"); err != nil {
							t.Error(err)
						}
						synctest.Wait()
						before := len(n.heard())
						time.Sleep(18 * time.Minute)
						for _, l := range n.heard()[before:] {
							if strings.HasPrefix(l, "open") || strings.HasPrefix(l, "gate") {
								t.Errorf("%s while a person holds: the enclosure may be open", l)
							}
						}
						if _, err := n.eng.Resume(t.Context(), "ann"); err != nil {
							t.Error(err)
						}
					})
				}
				state, err := n.eng.Run(t.Context())
				<-done
				if took := time.Since(began); state != c.want || err != nil || took > c.ended {
					t.Errorf("Run() = %s, %v after %s; want %s within %s", state, err, took, c.want, c.ended)
				}
				if got := kinds(n.events(t)); c.kinds != "" && got != c.kinds {
					t.Errorf("events %s; want %s", got, c.kinds)
				}
				n.atRest(t)
			})
		})
	}
}

func TestALookAtARateIsNoLaxerThanTheDwellThatBrokeIt(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := rated(t, 10*time.Minute, func(c *Config) {
			for i := range c.Bench.Detectors {
				c.Bench.Detectors[i].FloorHz = 0 // or the look counts longer for it
			}
		}, func(n *night, since time.Duration, _ string) {
			if since > 6*time.Second {
				n.rates["signal"] = 400 // within four standard deviations of 500 in 0.1 s, beyond them in 1 s
			}
		})
		began := time.Now()
		state, err := n.eng.Run(bounded(t))
		if took := time.Since(began); state != protocol.Failed || err != nil || took > 12*time.Minute {
			t.Errorf("Run() = %s, %v after %s; want failed in the guard's 10 min", state, err, took)
		}
		if got := kinds(n.events(t)); got != "began guard_broken ended" {
			t.Errorf("events %s; want it broken once and never mended", got)
		}
	})
}

func TestAGuardThatEachDwellBreaksAgainComesToItsEnd(t *testing.T) {
	for _, c := range []struct {
		name string
		well time.Duration // for how long light dwells are well again in between, from 5 min on
		want time.Duration
	}{
		{"no dwell is accepted", 0, 10 * time.Minute},
		{"one is accepted in between, and it begins anew", time.Minute, 15 * time.Minute},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				taken := 0
				n := rated(t, 10*time.Minute, func(c *Config) { c.Plan.Repeat.Times = 200 }, func(n *night, since time.Duration, what string) {
					well := since > 5*time.Minute && since < 5*time.Minute+c.well
					if since > 6*time.Second && n.eng.progress.State == protocol.Running && strings.HasPrefix(what, "gate 1s pump=true") && !well {
						n.rates["signal"] = 200 // each look finds it well
						taken++
					}
				})
				began := time.Now()
				state, err := n.eng.Run(bounded(t))
				if took := time.Since(began); state != protocol.Failed || err != nil || took < c.want || took > c.want+3*time.Minute {
					t.Errorf("Run() = %s, %v after %s; want failed after %s", state, err, took, c.want)
				}
				if taken < 10 || !strings.Contains(kinds(n.events(t)), "guard_mended guard_broken") {
					t.Errorf("broken %d times; want it to be met and broken by turns", taken)
				}
			})
		})
	}
}

// losing is a stage that says where it is only while it knows its zero.
type losing struct{ fakeStage }

func (s losing) Where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	if !s.w.homed {
		return nil, &drivers.Error{Op: "where", Device: s.name, Remedy: drivers.HomeAgain, Err: errors.New("signal_arm does not know its zero")}
	}
	return s.fakeStage.Where(ctx)
}

func (s losing) Home(ctx context.Context, order []drivers.AxisName) error {
	for _, a := range order {
		s.w.at[a] = 0
	}
	for name, open := range s.w.open {
		if open {
			_ = s.w.act("searched with %s open", name)
		}
	}
	return s.fakeStage.Home(ctx, order)
}

func TestAZeroThatIsLostWhileARateGuardHoldsIsFoundAsAtAnyOtherTime(t *testing.T) {
	for _, c := range []struct {
		name       string
		unattended bool
		kinds      string
	}{
		{"where the bench file allows it", true, "began guard_broken trouble trouble homed guard_mended ended"},
		{"where a person has to say so", false, "began guard_broken trouble held went_on trouble homed guard_mended ended"},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				lost := false
				n := rated(t, 15*time.Minute, func(cfg *Config) {
					cfg.Bench.Unattended = map[drivers.DeviceName]bool{"rotary": c.unattended}
					cfg.Bench.Stages = []drivers.Stage{losing{cfg.Bench.Stages[0].(fakeStage)}}
				}, func(n *night, since time.Duration, _ string) {
					if since > 6*time.Second && since < 3*time.Minute || n.at["idler_arm"] != 3*unit.Degree {
						n.rates["signal"] = 200 // there is no light where a search leaves the arms
					}
					if since > 10*time.Second && !lost {
						lost, n.homed = true, false
					}
				})
				done := during(0, func() {})
				if !c.unattended {
					done = during(50*time.Minute, func() {
						if s := n.eng.Snapshot(); !slices.Equal(s.Causes, []protocol.Cause{protocol.ByGuard, protocol.ByTrouble}) {
							t.Errorf("held for %v (%s); want the guard, and trouble for a person", s.Causes, s.Reason)
						}
						if _, err := n.eng.Resume(t.Context(), "ann"); err != nil {
							t.Error(err)
						}
					})
				}
				state, err := n.eng.Run(t.Context())
				<-done
				if state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v, events %s; want finished", state, err, kinds(n.events(t)))
				}
				if got := kinds(n.events(t)); got != c.kinds {
					t.Errorf("events %s; want %s", got, c.kinds)
				}
				for _, l := range n.heard() {
					if strings.HasPrefix(l, "searched with") {
						t.Error(l)
					}
				}
			})
		})
	}
}
