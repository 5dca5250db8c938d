package engine

import (
	"context"
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

// oven is a setting that takes half an hour, and can be turned at its front.
type oven struct {
	fakeDevice
	value *float64
	stuck bool // it says so, and stays
}

func (s oven) Unit() string { return "Cel" }
func (s oven) Set(ctx context.Context, value float64) (float64, error) {
	if err := s.w.act("set %s %g", s.name, value); err != nil {
		return 0, err
	}
	if !s.stuck {
		*s.value = value
	}
	return value, drivers.Pace(1).Wait(ctx, 30*time.Minute)
}
func (s oven) Get(context.Context) (float64, error) { return *s.value, nil }

func TestNoDetectorIsOpenWhileASettingMoves(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		value := 20.0
		n := newNight(t, func(c *Config) {
			for i := range c.Plan.Points {
				c.Plan.Points[i].Axes = c.Plan.Points[0].Axes // nothing else would protect them
				c.Plan.Points[i].Settings = []scan.SettingTarget{{Setting: "oven", Value: float64(20 + i)}}
			}
		})
		n.eng.Bench.Settings = []drivers.Setting{oven{fakeDevice{n.world, "oven"}, &value, false}}
		sets, closed := 0, 0
		n.world.fail = func(what string) error {
			n.world.mu.Lock()
			defer n.world.mu.Unlock()
			switch {
			case strings.HasPrefix(what, "set oven"):
				if sets++; n.world.open["guard"] {
					t.Errorf("%q with the detectors open, and for half an hour nobody judges the light", what)
				}
			case what == "close guard":
				closed++
			}
			return nil
		}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if sets != 5 {
			t.Errorf("set %d times; want 5: the same value is not set again", sets)
		}
		if most := sets + 5; closed > most {
			t.Errorf("the detectors were protected %d times; want %d at most: what is closed is left so", closed, most)
		}
	})
}

func TestASettingThatLeftItsValueIsSetAgainAndItsReadingIsSetAside(t *testing.T) {
	for name, c := range map[string]struct {
		steps  bool
		at     string // the act after which it is turned, the nth time
		nth    int
		to     float64
		within map[drivers.DeviceName]float64
		set    int    // times
		aside  string // readings
		reason string
	}{
		"in the middle of a dwell": {at: "gate 1s pump=true", nth: 3, to: 20, within: map[drivers.DeviceName]float64{"laser": 0.1}, set: 2,
			aside: "1.1-", reason: "laser: get: has left 45 Cel, which it was set to, and stands at 20 Cel after the dwell; want it within 0.1"},
		"on the way": {at: "move signal_arm 2.00", nth: 1, to: 20, within: map[drivers.DeviceName]float64{"laser": 0.1}, set: 2,
			aside: "2.1-", reason: "after the dwell"},
		"in a dark": {at: "gate 1s pump=false", nth: 2, to: 20, within: map[drivers.DeviceName]float64{"laser": 0.1}, set: 2,
			aside: "dark-", reason: "after the dwell"},
		"in a dark beside its steps": {steps: true, at: "gate 1s pump=false", nth: 2, to: 20, within: map[drivers.DeviceName]float64{"laser": 0.1}, set: 6,
			aside: "dark-", reason: "has left 47 Cel"},
		"by no more than it may":     {at: "gate 1s pump=true", nth: 3, to: 45.1, within: map[drivers.DeviceName]float64{"laser": 0.1}, set: 1},
		"which is read back vaguely": {at: "gate 1s pump=true", nth: 3, to: 20, set: 1},
	} {
		t.Run(name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				value := 45.0
				n := newNight(t, func(cfg *Config) {
					cfg.Bench.Stand = map[drivers.DeviceName]float64{"laser": 45}
					for i := range cfg.Plan.Points {
						if c.steps {
							cfg.Plan.Points[i].Settings = []scan.SettingTarget{{Setting: "laser", Value: float64(45 + i)}}
						}
					}
				})
				n.eng.Bench.Settings = []drivers.Setting{oven{fakeDevice{n.world, "laser"}, &value, false}}
				n.eng.Bench.Within = c.within
				seen, sets := 0, 0
				n.world.fail = func(what string) error {
					switch {
					case what == c.at:
						if seen++; seen == c.nth {
							value = c.to
						}
					case strings.HasPrefix(what, "set laser"):
						if sets++; n.world.open["guard"] {
							t.Errorf("%q with the detectors open", what)
						}
					}
					return nil
				}
				if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v; want finished", state, err)
				}
				var aside []string
				for _, r := range n.readings(t) {
					s := r.Settings[0]
					off := slices.ContainsFunc([]float64{s.Before, s.After}, func(v float64) bool { return v < s.Target-0.2 || v > s.Target+0.2 })
					switch {
					case r.Accepted && off && c.within != nil:
						t.Errorf("reading %d accepted with %+v", r.Sequence, s)
					case !r.Accepted:
						aside = append(aside, sequenceOf([]protocol.Reading{r}))
						if !strings.Contains(r.Reason, c.reason) {
							t.Errorf("set aside for %q; want %q in it", r.Reason, c.reason)
						}
					}
				}
				if strings.Join(aside, " ") != c.aside {
					t.Errorf("set aside: %v; want %s", aside, c.aside)
				}
				if sets != c.set {
					t.Errorf("set %d times; want %d", sets, c.set)
				}
			})
		})
	}
}

func TestASettingThatLeavesItsValueBetweenTwoReadingsCostsAnAttemptAndNoReading(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		value := 45.0
		n := newNight(t, func(c *Config) { c.Bench.Stand = map[drivers.DeviceName]float64{"laser": 45} })
		n.eng.Bench.Settings = []drivers.Setting{oven{fakeDevice{n.world, "laser"}, &value, false}}
		n.eng.Bench.Within = map[drivers.DeviceName]float64{"laser": 0.1}
		decided := 0
		n.eng.Step = func(s Step) {
			if s == StepDecided {
				if decided++; decided == 4 {
					value = 20
				}
			}
		}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got, want := kinds(n.events(t)), "began taken_again ended"; got != want {
			t.Errorf("events %s; want %s", got, want)
		}
		for _, r := range n.readings(t) {
			if !r.Accepted || r.Settings[0].Before != 45 || r.Settings[0].After != 45 {
				t.Errorf("reading %d: accepted %v, %+v", r.Sequence, r.Accepted, r.Settings)
			}
		}
	})
}

func TestASettingThatStaysOffHoldsTheRun(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		value := 20.0 // it echoes what it is told, and does not do it
		n := newNight(t, func(c *Config) {
			c.Bench.Stand = map[drivers.DeviceName]float64{"laser": 45}
			c.Plan.Trouble.GiveUpAfter = 20 * time.Hour
		})
		n.eng.Bench.Settings = []drivers.Setting{oven{fakeDevice{n.world, "laser"}, &value, true}}
		n.eng.Bench.Within = map[drivers.DeviceName]float64{"laser": 0.1}
		done := during(10*time.Hour, func() {
			if s := n.eng.Snapshot(); s.State != protocol.Holding || !strings.Contains(s.Reason, "stands at 20 Cel") {
				t.Errorf("%s, %q; want it held for what stands off", s.State, s.Reason)
			}
			if _, err := n.eng.Stop(t.Context(), "ann"); err != nil {
				t.Error(err)
			}
		})
		_, _ = n.eng.Run(t.Context())
		<-done
		for _, r := range n.readings(t) {
			if r.Accepted {
				t.Errorf("reading %d accepted with %+v", r.Sequence, r.Settings)
			}
		}
	})
}

func TestNoDarkIsTakenBesideASettingThatLeftItsValueAndCannotBeSetAgain(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		value, strayed := 45.0, false
		n := newNight(t, func(c *Config) {
			for i := range c.Plan.Points {
				c.Plan.Points[i].Settings = []scan.SettingTarget{{Setting: "laser", Value: float64(45 + i)}}
			}
		})
		n.eng.Bench.Settings = []drivers.Setting{oven{fakeDevice{n.world, "laser"}, &value, false}}
		n.eng.Bench.Within = map[drivers.DeviceName]float64{"laser": 0.1}
		darks := 0
		n.world.fail = func(what string) error {
			switch {
			case what == "gate 1s pump=false":
				if darks++; darks == 2 {
					value, strayed = 20, true
				}
			case strings.HasPrefix(what, "set laser") && strayed:
				return &drivers.Error{Op: "set", Device: "laser", Remedy: drivers.Retry, Err: context.DeadlineExceeded}
			}
			return nil
		}
		done := during(5*time.Hour, func() {
			if s := n.eng.Snapshot(); s.State != protocol.Holding || !strings.Contains(s.Reason, "laser: set") {
				t.Errorf("%s, %q; want it held, because the laser cannot be set", s.State, s.Reason)
			}
			if _, err := n.eng.Stop(t.Context(), "ann"); err != nil {
				t.Error(err)
			}
		})
		n.eng.patience = 20 * time.Hour
		_, _ = n.eng.Run(t.Context())
		<-done
		for _, r := range n.readings(t) {
			if r.Accepted && r.Settings[0].After == 20 {
				t.Errorf("reading %d accepted with %+v", r.Sequence, r.Settings)
			}
		}
	})
}

func TestAHandSetsWithTheDetectorsProtectedAndOpensThemAgain(t *testing.T) {
	for _, fails := range []bool{false, true} {
		t.Run(fmt.Sprintf("it fails: %v", fails), func(t *testing.T) {
			underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
				if _, err := h.Set(t.Context(), "delay", 2); err != nil {
					t.Fatal(err)
				}
				if got := w.acts("open", "gate"); len(got) > 0 {
					t.Errorf("%v; nobody had opened anything", got)
				}
				if err := h.Shutter(t.Context(), "detectors", true); err != nil {
					t.Fatal(err)
				}
				w.log = nil
				want := "close guard, set delay 3, open guard, gate 20ms pump=false"
				if fails {
					w.fail = func(what string) error {
						if strings.HasPrefix(what, "set") {
							return &drivers.Error{Op: "set", Device: "delay", Remedy: drivers.Retry, Err: context.DeadlineExceeded}
						}
						return nil
					}
					want = "close guard, set delay 3"
				}
				if _, err := h.Set(t.Context(), "delay", 3); (err != nil) != fails {
					t.Fatalf("Set() = %v", err)
				}
				if got := strings.Join(w.acts("open", "close", "set", "gate"), ", "); got != want {
					t.Errorf("it was %s; want %s", got, want)
				}
				for _, s := range h.State().Shutters {
					if s.Shutter == "guard" && s.Open == fails {
						t.Errorf("the guard is told open: %v", s.Open)
					}
				}
			})
		})
	}
}
