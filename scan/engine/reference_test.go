package engine

import (
	"context"
	"fmt"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// referenced is a night with a set of two places at the start, every three visits and at the end,
// whose sets from bad on the test calls bad.
func referenced(t *testing.T, otherwise scan.Then, bad func(set, baseline int) bool) *night {
	t.Helper()
	return newNight(t, func(c *Config) {
		c.Plan.Dark = nil
		c.Plan.Reference = &scan.Reference{
			Cadence: scan.Cadence{Dwell: scan.Dwell{Time: time.Second, Slice: time.Second}, EveryPoints: 3, AtStart: true, AtEnd: true},
			Places: []scan.ReferencePlace{
				{On: scan.Top, Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: 5 * unit.Degree}, {Axis: "idler_arm", Angle: 3 * unit.Degree}}},
				{Arm: "idler_arm", On: scan.LowFlank, Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: 5 * unit.Degree}, {Axis: "idler_arm", Angle: 2 * unit.Degree}}},
			},
			Otherwise: otherwise,
		}
		c.Judge = func(_ context.Context, set, baseline int) (Verdict, error) {
			return Verdict{Good: !bad(set, baseline), Text: "singles fell by 7 %; at most 3 %", Detail: map[string]any{"singles": -0.07}}, nil
		}
	})
}

// places is sequenceOf with the references' sets and places.
func places(readings []protocol.Reading) string {
	var words []string
	for _, r := range readings {
		word := sequenceOf([]protocol.Reading{r})
		if r.Reference != nil {
			word = fmt.Sprintf("ref%d/%d", r.Reference.Set, r.Reference.Place)
		}
		words = append(words, word)
	}
	return strings.Join(words, " ")
}

func never(int, int) bool { return false }

func TestReferencesReturnToTheirPlaces(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := referenced(t, scan.Hold, never)
		planned := n.eng.Snapshot().Planned
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		want := "ref1/0 ref1/1 0.1 1.1 2.1 ref2/0 ref2/1 2.2 1.2 0.2 ref3/0 ref3/1"
		if got := places(n.readings(t)); got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		if planned != 12 {
			t.Errorf("%d readings planned; want 12", planned)
		}
		for _, r := range n.readings(t) {
			if r.Reference != nil && (r.Angles[0].Before != 5*unit.Degree || r.Angles[1].Before != unit.Angle(3-r.Reference.Place)*unit.Degree || r.Point != nil || r.Reference.Places != 2) {
				t.Errorf("reading %d: %+v at %v; want the reference's own place", r.Sequence, r.Reference, r.Angles)
			}
		}
	})
}

func TestABadReferenceDoubtsReadingsBackToTheLastGoodOne(t *testing.T) {
	for otherwise, want := range map[scan.Then]string{
		scan.Note: "began doubted ended",
		scan.Stop: "began doubted ended",
	} {
		synctest.Test(t, func(t *testing.T) {
			n := referenced(t, otherwise, func(set, _ int) bool { return set == 2 })
			state, err := n.eng.Run(t.Context())
			if final := map[scan.Then]protocol.State{scan.Note: protocol.Finished, scan.Stop: protocol.Failed}[otherwise]; state != final || err != nil {
				t.Fatalf("%s: Run() = %s, %v; want %s", otherwise, state, err, final)
			}
			events := n.events(t)
			if got := kinds(events); got != want {
				t.Fatalf("%s: events %s; want %s", otherwise, got, want)
			}
			lights := map[int64]bool{}
			for _, r := range n.readings(t)[2:5] {
				lights[r.Sequence] = true
			}
			from, to := int64(numberIn(events[1].Detail, "from_sequence")), int64(numberIn(events[1].Detail, "to_sequence"))
			for s := from; s <= to; s++ {
				delete(lights, s)
			}
			first, second := n.readings(t)[1].Sequence, n.readings(t)[5].Sequence
			if len(lights) > 0 || from <= first || to >= second {
				t.Errorf("%s: doubted %d to %d; want all between the sets, which end at %d and begin at %d", otherwise, from, to, first, second)
			}
			if !strings.Contains(events[1].Text, "reference 2 against 1: singles fell by 7 %") || events[1].Detail["singles"] != -0.07 {
				t.Errorf("%s: told %q with %v; want the verdict", otherwise, events[1].Text, events[1].Detail)
			}
		})
	}
}

func TestAPersonLetsARunGoOnFromANewReference(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var asked []string
		n := referenced(t, scan.Hold, func(set, baseline int) bool {
			asked = append(asked, fmt.Sprintf("%d/%d", set, baseline))
			return baseline == 1 // for good: what the pump gave in the evening it does not give any more
		})
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(5 * time.Minute)
		synctest.Wait()
		if s := n.eng.Snapshot(); s.State != protocol.Holding || !slices.Equal(s.Causes, []protocol.Cause{protocol.ByTrouble}) || !strings.HasPrefix(s.Reason, "held: reference 2 against 1") {
			t.Fatalf("it is %s for %v: %s; want a hold by the reference", s.State, s.Causes, s.Reason)
		}
		n.atRest(t)
		if _, err := n.eng.Resume(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		if state := <-done; state != protocol.Finished {
			t.Errorf("it ended %s; want finished", state)
		}
		if got, want := places(n.readings(t)), "ref1/0 ref1/1 0.1 1.1 2.1 ref2/0 ref2/1 ref3/0 ref3/1 2.2 1.2 0.2 ref4/0 ref4/1"; got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		if got, want := strings.Join(asked, " "), "2/1 4/3"; got != want {
			t.Errorf("judged %s; want %s", got, want)
		}
	})
}

func TestASetThatWasCutIsTakenAnew(t *testing.T) {
	// Killed after every entry, the run goes on, compares before it counts light, and ends with the
	// same visits.
	var whole []protocol.Entry
	synctest.Test(t, func(t *testing.T) {
		n := referenced(t, scan.Hold, never)
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		whole = slices.Clone(n.entries)
	})
	for cut := 2; cut < len(whole); cut++ {
		synctest.Test(t, func(t *testing.T) {
			n := referenced(t, scan.Hold, never)
			n.memory.entries = slices.Clone(whole[:cut])
			before := len(n.readings(t))
			c := n.eng.Config
			c.Past, c.ResumeAfterRestart = n.fold(t), true
			n.eng = New(c)
			if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
				t.Fatalf("cut after %d: %s, %v; want finished", cut, state, err)
			}
			seen := map[string]int{}
			for _, r := range n.readings(t) {
				if r.Kind == protocol.Light && r.Accepted {
					seen[sequenceOf([]protocol.Reading{r})]++
				}
			}
			if len(seen) != 6 {
				t.Errorf("cut after %d: light %v; want six visits, each once", cut, seen)
			}
			for what, times := range seen {
				if times != 1 {
					t.Errorf("cut after %d: %s came %d times", cut, what, times)
				}
			}
			sets := map[int]int{}
			for i, r := range n.readings(t)[before:] {
				if r.Reference != nil {
					sets[r.Reference.Set]++
				}
				if i < 2 && r.Kind == protocol.Light {
					t.Errorf("cut after %d: light comes before the references are compared: %s", cut, places(n.readings(t)))
				}
			}
			for set, readings := range sets {
				if readings != 2 {
					t.Errorf("cut after %d: set %d has %d readings since then; want all of it", cut, set, readings)
				}
			}
		})
	}
}

func TestAnOldReferenceIsRenewedBeforeItBreaksAGuard(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := referenced(t, scan.Note, func(set, _ int) bool { return set == 3 })
		n.eng.Plan.Reference.EveryPoints = 0
		n.eng.Plan.Guards = []scan.Guard{{Name: "reference_age", ReferenceAge: 6 * time.Second, Otherwise: scan.Stop}}
		state, err := n.eng.Run(t.Context())
		if state != protocol.Failed || err != nil {
			t.Fatalf("Run() = %s, %v; want failed", state, err)
		}
		events := n.events(t)
		if last := events[len(events)-1]; !strings.Contains(last.Text, "the last good reference is") || kinds(events) != "began doubted guard_broken ended" {
			t.Errorf("events %s, at last %q; want the age of the last good reference", kinds(events), last.Text)
		}
		if got := places(n.readings(t)); !strings.HasPrefix(got, "ref1/0 ref1/1 0.1") || !strings.HasSuffix(got, "ref3/0 ref3/1") || strings.Count(got, "ref") != 6 {
			t.Errorf("readings %s; want two sets that came when the last was too old", got)
		}
	})
}

func TestABoundThatCannotBeJudgedIsToldOnce(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := referenced(t, scan.Hold, never)
		n.eng.Config.Judge = func(context.Context, int, int) (Verdict, error) {
			return Verdict{Good: true, Untold: true, Text: "cannot tell: centre of idler_arm; want a dwell of at least 40 s"}, nil
		}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if events := n.events(t); kinds(events) != "began trouble ended" || !strings.Contains(events[1].Text, "want a dwell of at least 40 s") {
			t.Errorf("events %s; want what cannot be judged, once", kinds(events))
		}
	})
}
