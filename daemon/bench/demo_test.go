package bench

import (
	"context"
	"encoding/json"
	"testing"
	"testing/synctest"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/engine"
	"gemel/scan/recipe"
)

// pages is a logbook in memory.
type pages []protocol.Entry

func (p *pages) Append(_ context.Context, e protocol.Entry) error {
	*p = append(*p, e)
	return nil
}

// demoNight runs the demo recipe on the demo bench and returns its readings.
func demoNight(t *testing.T, vo VirtualOptions) []protocol.Reading {
	t.Helper()
	f := demo(t)
	r, err := recipe.Load("../../configs/demo-recipe.yaml")
	if err != nil {
		t.Fatal(err)
	}
	plan, err := r.Plan(f.Facts())
	if err != nil {
		t.Fatal(err)
	}
	b, _ := live(t, f, vo)
	var log pages
	state, err := engine.New(engine.Config{Bench: &b.Bench, Plan: plan, RunID: "demo", Log: &log}).Run(t.Context())
	if state != protocol.Finished || err != nil {
		t.Errorf("the demo ended %s, %v; want finished", state, err)
	}
	var readings []protocol.Reading
	for _, e := range log {
		var r protocol.Reading
		switch e.Kind {
		case protocol.ReadingEntry:
			if err := json.Unmarshal(e.Body, &r); err != nil {
				t.Fatal(err)
			}
			readings = append(readings, r)
		case protocol.EventEntry:
			t.Logf("%s", e.Body)
		}
	}
	return readings
}

func TestTheDemoFindsMostCoincidencesOnThePredictedRing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		visits, darks := map[int]int{}, 0
		best, at := uint64(0), protocol.Reading{}
		for _, r := range demoNight(t, VirtualOptions{}) {
			switch {
			case !r.Accepted:
				t.Errorf("reading %d was set aside: %s", r.Sequence, r.Reason)
			case r.Kind == protocol.Dark:
				darks++
			case r.Kind == protocol.Light:
				visits[*r.Point]++
				for _, c := range r.Counts {
					if c.Channel == "pairs" && c.Counts > best {
						best, at = c.Counts, r
					}
				}
			}
		}
		if len(visits) < 60 || darks < 4 {
			t.Errorf("%d points and %d darks; want 60 points and darks at start, end and between", len(visits), darks)
		}
		for point, n := range visits {
			if n != 2 {
				t.Errorf("point %d has %d accepted readings; want 2", point, n)
			}
		}
		// The ring's half-angle: row S069 of the project's reference values for phase matching.
		ring := unit.Degrees(2.864)
		for _, a := range at.Angles {
			switch step := unit.Degrees(0.1); a.Axis {
			case "idler_arm":
				step = unit.Degrees(0.05)
				fallthrough
			case "signal_arm":
				if (a.Before - ring).Abs() > step {
					t.Errorf("most coincidences (%d) with %s at %s; want it within %s of %s", best, a.Axis, a.Before, step, ring)
				}
			}
		}
	})
}
