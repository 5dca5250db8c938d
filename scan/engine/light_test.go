package engine

import (
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

func TestADetectorThatLatchesInTheMiddleOfADwellIsProtectedAtOnce(t *testing.T) {
	for name, c := range map[string]struct {
		floorHz float64
		after   int // slices without a count until it is noticed
	}{
		"a floor that one slice tells":     {100, 1},
		"a floor that takes three to tell": {3.4, 3},
	} {
		t.Run(name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, func(cfg *Config) {
					cfg.Plan.Dwell = scan.Dwell{Time: time.Hour, Slice: 2 * time.Second}
					for i := range cfg.Bench.Detectors {
						cfg.Bench.Detectors[i].FloorHz = c.floorHz
					}
				})
				gates := 0
				n.world.fail = func(what string) error {
					rate := 800.0
					if strings.HasPrefix(what, "gate 2s pump=true") {
						if gates++; gates > 1000 && gates <= 1000+c.after {
							rate = 0
						}
					}
					n.world.mu.Lock()
					n.world.rates["idler"] = rate
					n.world.mu.Unlock()
					return nil
				}
				if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v; want it to go on when the light is well", state, err)
				}
				light := 0
				for _, r := range n.readings(t) {
					if r.Kind != protocol.Light {
						continue
					}
					light++
					if bad := light == 1; r.Accepted == bad {
						t.Errorf("light reading %d: accepted %v, %q", light, r.Accepted, r.Reason)
					}
					if want := 1000 + c.after; light == 1 && (len(r.Slices) != want || !strings.Contains(r.Reason, "below its floor")) {
						t.Errorf("set aside after %d slices, %q; want after %d, for its floor", len(r.Slices), r.Reason, want)
					}
				}
				gated := 0
				for _, what := range n.heard() {
					if gated == 1000+c.after {
						if what != "close guard" {
							t.Errorf("after the slice that told it came %q; want the detectors protected first", what)
						}
						break
					}
					if strings.HasPrefix(what, "gate 2s pump=true") {
						gated++
					}
				}
				if !strings.Contains(kinds(n.events(t)), "held") {
					t.Errorf("events %s; want a hold", kinds(n.events(t)))
				}
			})
		})
	}
}
