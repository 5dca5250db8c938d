package report_test

import (
	"math"
	"reflect"
	"strings"
	"testing"
	"time"

	"gemel/daemon/report"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/engine"
)

// decided writes points down, and counts at each.
func (j *journal) decided(points []scan.Point, from, refined int) {
	j.t.Helper()
	body := protocol.Points{Head: j.head(protocol.PointSchema), Grounds: "sweep", Points: []protocol.Point{}, Refined: refined}
	for i, p := range points {
		one := protocol.Point{Point: from + i, Axes: []protocol.AxisTarget{}}
		for _, a := range p.Axes {
			one.Axes = append(one.Axes, protocol.AxisTarget{Axis: string(a.Axis), Target: a.Angle})
		}
		body.Points = append(body.Points, one)
	}
	j.write(protocol.PointEntry, body)
	for i, p := range points {
		point, visit := from+i, 1
		j.reading(protocol.Light, p.Axes, 500*time.Millisecond, func(r *protocol.Reading) { r.Point, r.Visit = &point, &visit })
	}
}

func idlerSweep(low, high, step float64) (points []scan.Point) {
	for i := range int(math.Round((high-low)/step)) + 1 {
		points = append(points, scan.Point{Axes: arms(2.88, low+float64(i)*step)})
	}
	return points
}

func TestPointsAreAddedFromTheLogbookAloneAndTheSameAgain(t *testing.T) {
	j := newJournal(t, 2)
	points := idlerSweep(2.2, 3.8, 0.1)
	plan := scan.Plan{Title: "Refined", Points: points, Dwell: scan.Dwell{Time: 500 * time.Millisecond, Slice: 500 * time.Millisecond},
		Refine: &scan.Refine{Of: "pairs", Along: "idler_arm", Below: unit.Degrees(0.0006), AtMost: 30}}
	j.decided(points, 0, 0)
	var rounds []engine.Refinement
	for round := 1; ; round++ {
		d, err := report.Refine(t.Context(), j.book, j.run, plan, j.file, round)
		if err != nil {
			t.Fatal(err)
		}
		rounds = append(rounds, d)
		t.Log(d.Grounds)
		j.decided(d.Points, len(points), round)
		points = append(points, d.Points...)
		if len(d.Points) == 0 {
			break
		}
	}
	if added := len(points) - len(plan.Points); added == 0 || added > 30 || len(rounds) < 2 {
		t.Fatalf("%d points in %d rounds; want some, and no more than 30", added, len(rounds))
	}
	if last := rounds[len(rounds)-1].Grounds; !strings.Contains(last, "idler_arm peak at ") || !strings.Contains(last, "asked 0.0006 deg") {
		t.Errorf("%q; want the position and what was asked", last)
	}
	// After a restart the decisions are the same, also those that were carried out since.
	for i, d := range rounds {
		again, err := report.Refine(t.Context(), j.book, j.run, plan, j.file, i+1)
		if err != nil || !reflect.DeepEqual(again, d) {
			t.Errorf("round %d again: %+v (%v); want %+v", i+1, again, err, d)
		}
	}
}

func TestAGridIsAddedWithinLimitsAndTime(t *testing.T) {
	j := newJournal(t, 3)
	points := idlerSweep(2.2, 3.8, 0.1)
	refine := scan.Refine{Of: "pairs", Along: "idler_arm", Span: unit.Degrees(0.4), Step: unit.Degrees(0.02), AtMost: 40}
	plan := scan.Plan{Title: "Refined", Points: points, Dwell: scan.Dwell{Time: 500 * time.Millisecond, Slice: 500 * time.Millisecond}, Refine: &refine}
	j.decided(points, 0, 0)
	all, err := report.Refine(t.Context(), j.book, j.run, plan, j.file, 1)
	if err != nil || len(all.Points) < 15 {
		t.Fatalf("%+v (%v); want a grid", all, err)
	}
	axis := j.file.Facts().Axes[1]
	for _, p := range all.Points {
		if p.Axes[0] != (scan.AxisTarget{Axis: drivers.AxisName("signal_arm"), Angle: unit.Degrees(2.88)}) || p.Axes[1].Axis != axis.Name || !axis.Limits(p.Axes[1].Angle) {
			t.Errorf("%+v; want signal_arm at 2.88 deg and the idler arm within its limits", p)
		}
	}
	refine.Within = 7 * time.Second // a point takes a dwell of 0.5 s and a move of 1 s
	few, err := report.Refine(t.Context(), j.book, j.run, plan, j.file, 1)
	if err != nil || len(few.Points) != 4 {
		t.Errorf("%d points (%s, %v); want 4 in 7 s", len(few.Points), few.Grounds, err)
	}
	refine.Along = "no_axis"
	if d, err := report.Refine(t.Context(), j.book, j.run, plan, j.file, 1); err == nil {
		t.Errorf("%+v; want an error for an axis that is not there", d)
	}
}
