package engine

import (
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// A shutter that lost its power in a dwell has fallen shut, and nobody asked it: part of the dwell
// was counted in another light than the reading says.
func TestAShutterThatFallsShutInADwellSpoilsTheReading(t *testing.T) {
	for _, shutter := range []string{"pump", "guard"} {
		t.Run(shutter, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, nil)
				lit := 0
				n.world.fail = func(what string) error {
					if strings.HasPrefix(what, "gate") && strings.HasSuffix(what, "pump=true") {
						if lit++; lit == 3 {
							n.world.shutter(shutter, false)
						}
					}
					return nil
				}
				state, err := n.eng.Run(t.Context())
				if state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v; want finished", state, err)
				}
				var spoilt []protocol.Reading
				for _, r := range n.readings(t) {
					if !r.Accepted {
						spoilt = append(spoilt, r)
					}
				}
				if len(spoilt) != 1 || !strings.Contains(spoilt[0].Reason, shutter) || !strings.Contains(spoilt[0].Reason, "closed after the dwell") {
					t.Errorf("set aside: %+v; want the one dwell in which %s fell shut", spoilt, shutter)
				}
				if got := kinds(n.events(t)); got != "began taken_again ended" {
					t.Errorf("events %s; want it taken again", got)
				}
			})
		})
	}
}

func TestARateIsNotLookedAtWhileAPersonHoldsAsWell(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			c.Plan.Guards = []scan.Guard{{Name: "rate of signal", Rate: "signal", Low: 500, High: 2000, Otherwise: scan.Hold}}
		})
		began := time.Now()
		n.world.fail = func(string) error {
			n.world.mu.Lock()
			defer n.world.mu.Unlock()
			n.world.rates["signal"] = 1000
			if since := time.Since(began); since > 6*time.Second && since < 3*time.Minute {
				n.world.rates["signal"] = 200
			}
			return nil
		}
		go func() {
			time.Sleep(time.Minute)
			if _, err := n.eng.Hold(t.Context(), "a person"); err != nil {
				t.Error(err)
			}
			before := len(n.world.heard())
			time.Sleep(10 * time.Minute)
			for _, what := range n.world.heard()[before:] {
				if strings.HasPrefix(what, "gate") || strings.HasPrefix(what, "open") {
					t.Errorf("%q while a person holds", what)
				}
			}
			if _, err := n.eng.Resume(t.Context(), "a person"); err != nil {
				t.Error(err)
			}
		}()
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := kinds(n.events(t)); got != "began guard_broken held went_on guard_mended ended" {
			t.Errorf("events %s; want the guard mended after the person let go", got)
		}
	})
}

// So much light that the detector latches looks like no light: a short look must not end the hold.
func TestALatchedDetectorIsNotTakenForADarkOneByALook(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		began := time.Now()
		n.world.fail = func(string) error {
			n.world.mu.Lock()
			defer n.world.mu.Unlock()
			switch since := time.Since(began); {
			case since > 8*time.Second && since < 20*time.Second:
				n.world.rates["signal"] = 1e6
			case since > 20*time.Second && since < 5*time.Minute:
				n.world.rates["signal"] = 0
			default:
				n.world.rates["signal"] = 1000
			}
			return nil
		}
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		events := n.events(t)
		if got := kinds(events); got != "began held went_on ended" || events[2].At.Sub(began) < 5*time.Minute {
			t.Errorf("events %s; want one hold, until the detector counts again", got)
		}
	})
}
