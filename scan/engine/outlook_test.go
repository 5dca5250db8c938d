package engine

import (
	"math/rand/v2"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// TestAnOutlookDecidesAsARunDoes goes through random plans twice: by the outlook, and by the fold of
// the journal that such a run would write, asked after each entry as the engine asks it.
func TestAnOutlookDecidesAsARunDoes(t *testing.T) {
	kinds := map[taskKind]int{}
	cuts, refined := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		begins := time.Date(2031, 2, 3, 22, 0, 0, 0, time.UTC)
		plan := scan.Plan{Dwell: scan.Dwell{Time: 10 * time.Second, Slice: 10 * time.Second}, Repeat: scan.Repeat{Times: rapid.IntRange(1, 3).Draw(t, "times"), InPlace: rapid.Bool().Draw(t, "in place")}}
		for i := range rapid.IntRange(1, 12).Draw(t, "points") {
			plan.Points = append(plan.Points, scan.Point{Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Angle(i)}}})
		}
		cadence := func(name string) *scan.Cadence {
			if !rapid.Bool().Draw(t, name) {
				return nil
			}
			c := &scan.Cadence{Dwell: scan.Dwell{Time: 5 * time.Second, Slice: 5 * time.Second}, AtStart: rapid.Bool().Draw(t, "start"), AtEnd: rapid.Bool().Draw(t, "end")}
			switch rapid.IntRange(0, 2).Draw(t, "every") {
			case 1:
				c.EveryPoints = rapid.IntRange(1, 8).Draw(t, "points between two")
			case 2:
				c.Every = time.Duration(rapid.IntRange(15, 200).Draw(t, "seconds between two")) * time.Second
			}
			return c
		}
		plan.Dark = cadence("dark")
		if c := cadence("background"); c != nil {
			plan.Background = &scan.Background{Cadence: *c, Axis: "plate"}
		}
		if c := cadence("reference"); c != nil {
			c.AtStart = true
			plan.Reference = &scan.Reference{Cadence: *c, Places: make([]scan.ReferencePlace, 3)}
		}
		if rapid.Bool().Draw(t, "an end") {
			plan.Schedule.FinishBy = begins.Add(time.Duration(rapid.IntRange(60, 600).Draw(t, "length")) * time.Second)
		}
		var refine func(int) []scan.Point
		if rapid.Bool().Draw(t, "refined") {
			plan.Refine = &scan.Refine{AtMost: rapid.IntRange(1, 6).Draw(t, "at most"), Within: time.Duration(rapid.IntRange(0, 60).Draw(t, "within")) * time.Second}
			refine = func(round int) []scan.Point { return make([]scan.Point, max(0, 4-round)) }
		}
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "times"), 1))
		look := NewOutlook(&plan, begins, refine)
		p := Progress{State: protocol.Running, startedAt: begins, Next: 1}
		p.init()
		p.plan(&plan)
		p.Decided = len(plan.Points)
		left := 0
		for now, n := begins, 0; ; n++ {
			for plan.Refine != nil && !p.refineDone && !p.cut && p.visited() { // as Engine.refine
				body := &protocol.Points{Head: protocol.Head{At: protocol.Time{Time: now}}, Refined: p.refineRound + 1}
				room := plan.Refine.AtMost - len(p.refined)
				if refine != nil && room > 0 && (plan.Refine.Within == 0 || p.refinedAt.IsZero() || now.Sub(p.refinedAt) < plan.Refine.Within) {
					for i := range min(room, len(refine(body.Refined))) {
						body.Points = append(body.Points, protocol.Point{Point: len(plan.Points) + len(p.refined) + i})
					}
				}
				refined += len(body.Points)
				p.applyPoints(body)
			}
			want, ok := p.next(now)
			if ok && want.kind == lightTask { // as Engine.cutAtEnd
				long := want.visit.Point >= len(plan.Points) && plan.Refine.Within > 0 && now.Sub(p.refinedAt) >= plan.Refine.Within
				if long || p.tooLate(want, now) {
					left += p.left()
					cuts++
					p.applyEvent(&protocol.Event{Kind: protocol.SetAside, Detail: map[string]any{"task": string(restTask)}})
					want, ok = p.next(now)
				}
			}
			got, more := look.Next(now)
			if more != ok || ok && (got.task != want) {
				t.Fatalf("reading %d: the outlook says %+v, %t; a run %+v, %t", n, got.task, more, want, ok)
			}
			if !ok {
				break
			}
			kinds[want.kind]++
			started := now.Add(time.Duration(1+rng.IntN(20)) * time.Second)
			now = started.Add(want.dwell.Time)
			look.Taken(got, started, now)
			r := protocol.Reading{Head: protocol.Head{Sequence: p.Next}, Kind: protocol.ReadingKind(want.kind), Accepted: true, StartedAt: protocol.Time{Time: started}, EndedAt: protocol.Time{Time: now}}
			switch want.kind {
			case lightTask:
				r.Point, r.Visit = &want.visit.Point, &want.visit.Visit
			case referenceTask:
				r.Reference = &protocol.ReferenceOf{Set: want.visit.Visit, Place: want.visit.Point, Places: 3}
			}
			p.applyReading(&r)
			p.Next++
			if n > 300 {
				return // what goes by the clock takes all the time there is
			}
		}
		if look.LeftOut() != left {
			t.Fatalf("%d visits left out; want %d", look.LeftOut(), left)
		}
	})
	t.Logf("readings %v, %d cuts, %d points added", kinds, cuts, refined)
	for _, k := range []taskKind{lightTask, darkTask, backgroundTask, referenceTask} {
		if kinds[k] == 0 {
			t.Errorf("no %s was taken", k)
		}
	}
	if cuts == 0 || refined == 0 {
		t.Error("nothing was cut, or nothing refined")
	}
}
