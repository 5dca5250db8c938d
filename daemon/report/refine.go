package report

import (
	"context"
	"encoding/json"
	"fmt"
	"maps"
	"math"
	"slices"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/estimate"
	"gemel/scan/route"
)

// Refine decides which points a run's refinement adds in a round, counted from 1, from what its
// journal holds before the decision: asked again, also after the decision was written and carried
// out, it gives the same answer. Which points is estimate's to say.
func Refine(ctx context.Context, book *logbook.Book, run protocol.RunID, plan scan.Plan, file *bench.File, round int) (engine.Refinement, error) {
	if plan.Refine == nil {
		return engine.Refinement{}, fmt.Errorf("run %s: a refinement of a plan that has none; want a plan with one", run)
	}
	known, err := before(ctx, book, run, round)
	if err != nil {
		return engine.Refinement{}, err
	}
	d, err := known.refine(plan, file)
	if err != nil {
		return engine.Refinement{}, fmt.Errorf("run %s: %w", run, err)
	}
	return engine.Refinement{Points: d.Points, Grounds: d.Grounds}, nil
}

// refine asks the estimate, in the words of bench and plan.
func (known past) refine(plan scan.Plan, file *bench.File) (estimate.Refinement, error) {
	q := estimate.RefineQuestion{Of: *plan.Refine, Points: known.points, Added: known.added, Each: known.each(plan.Dwell), Spent: known.spent()}
	facts := file.Facts()
	i := slices.IndexFunc(facts.Axes, func(a scan.Axis) bool { return a.Name == plan.Refine.Along })
	if i < 0 {
		return estimate.Refinement{}, fmt.Errorf("refined along %q; want an axis of this bench", plan.Refine.Along)
	}
	q.Axis = facts.Axes[i]
	stand := map[drivers.AxisName]unit.Angle{}
	for _, r := range known.rows.Readings {
		for _, a := range r.Angles {
			stand[drivers.AxisName(a.Axis)] = a.Target
		}
	}
	q.Allowed = func(p scan.Point) error {
		at := maps.Clone(stand)
		for _, t := range p.Axes {
			at[t.Axis] = t.Angle
			for _, a := range facts.Axes {
				if err := route.Check(a, t.Angle); a.Name == t.Axis && err != nil {
					return err
				}
			}
		}
		return route.Stand(facts.Axes, facts.KeepOuts, at, route.State{})
	}
	if w, ok := witnessOf(file, scan.Result{Of: plan.Refine.Of, Along: plan.Refine.Along}, known.rows); ok {
		q.Expect = w.at // the profile that the result is fitted with, so that both say the same
	}
	return estimate.Refine(known.rows, Constants(file), q), nil
}

// past is a run's journal before one of its decisions.
type past struct {
	rows      estimate.Rows
	points    []scan.Point
	added     int           // of points, by refinements
	refinedAt protocol.Time // of the first refinement
	lastAt    protocol.Time
}

// before reads a run's journal up to the decision of a round.
func before(ctx context.Context, book *logbook.Book, run protocol.RunID, round int) (past, error) {
	p := past{rows: estimate.Rows{Run: run, Doubtful: map[int64]string{}}}
	const page = 500
	for after := int64(0); ; {
		entries, err := book.Entries(ctx, run, after, page)
		if err != nil {
			return past{}, err
		}
		for _, e := range entries {
			if over, err := p.add(e, round); over || err != nil {
				return p, err
			}
			after = e.Sequence
		}
		if len(entries) < page {
			return p, nil
		}
	}
}

// add takes an entry in. It is over with the decision of the round itself.
func (p *past) add(e protocol.Entry, round int) (over bool, err error) {
	fail := func(err error) error { return fmt.Errorf("run %s: entry %d: %w", e.Run, e.Sequence, err) }
	switch e.Kind {
	case protocol.PointEntry:
		var body protocol.Points
		if err := json.Unmarshal(e.Body, &body); err != nil {
			return false, fail(err)
		}
		if body.Refined >= round {
			return true, nil
		}
		for _, one := range body.Points {
			p.points = append(p.points, pointOf(one))
		}
		if body.Refined > 0 {
			p.added += len(body.Points)
			if p.refinedAt.IsZero() {
				p.refinedAt = body.At
			}
		}
	case protocol.ReadingEntry:
		var r protocol.Reading
		if err := json.Unmarshal(e.Body, &r); err != nil {
			return false, fail(err)
		}
		if r.Kind == protocol.Light || r.Kind == protocol.Dark {
			p.rows.Readings = append(p.rows.Readings, r)
			p.lastAt = r.EndedAt
		}
	case protocol.EventEntry:
		var ev protocol.Event
		if err := json.Unmarshal(e.Body, &ev); err != nil {
			return false, fail(err)
		}
		if ev.Kind == protocol.Doubted {
			p.doubt(ev)
		}
	}
	return false, nil
}

// doubt marks the readings that a finding is about.
func (p *past) doubt(ev protocol.Event) {
	from, okFrom := ev.Detail["from_sequence"].(float64)
	to, okTo := ev.Detail["to_sequence"].(float64)
	if !okFrom || !okTo {
		return
	}
	why, _ := ev.Detail["why"].(string)
	for _, r := range p.rows.Readings {
		if r.Sequence >= int64(from) && r.Sequence <= int64(to) {
			p.rows.Doubtful[r.Sequence] = why
		}
	}
}

func pointOf(p protocol.Point) scan.Point {
	out := scan.Point{Empty: p.Empty}
	for _, a := range p.Axes {
		out.Axes = append(out.Axes, scan.AxisTarget{Axis: drivers.AxisName(a.Axis), Angle: a.Target})
	}
	for _, s := range p.Settings {
		out.Settings = append(out.Settings, scan.SettingTarget{Setting: drivers.DeviceName(s.Name), Value: s.Target})
	}
	return out
}

// each is what a point takes from the end of one dwell to the end of the next: the median over those
// that followed one another, so that no hold and no dark is among it.
func (p past) each(dwell scan.Dwell) time.Duration {
	var took []time.Duration
	for i := 1; i < len(p.rows.Readings); i++ {
		a, b := p.rows.Readings[i-1], p.rows.Readings[i]
		if a.Kind == protocol.Light && b.Kind == protocol.Light && b.Sequence == a.Sequence+1 && b.Accepted {
			took = append(took, b.EndedAt.Sub(a.EndedAt.Time))
		}
	}
	if len(took) == 0 {
		return dwell.Time
	}
	slices.Sort(took)
	return took[len(took)/2]
}

// spent is the time since the refinement began.
func (p past) spent() time.Duration {
	if p.refinedAt.IsZero() {
		return 0
	}
	return max(0, p.lastAt.Sub(p.refinedAt.Time))
}

// placed sets the target of an axis; one that is there already stays unless it is to be replaced.
func placed(targets []scan.AxisTarget, axis drivers.AxisName, a unit.Angle, replace bool) []scan.AxisTarget {
	for i := range targets {
		if targets[i].Axis == axis {
			if replace {
				targets[i].Angle = a
			}
			return targets
		}
	}
	return append(targets, scan.AxisTarget{Axis: axis, Angle: a})
}

// ratesAlong is what the declared source gives on a channel against one axis, with everything else
// as at a point: of coincidences those that are not accidental. NaN where it gives nothing.
func ratesAlong(expect func([]scan.AxisTarget, []scan.SettingTarget) (scan.Expected, error), of drivers.Channel, along drivers.AxisName, at scan.Point) func(angleDeg float64) float64 {
	return func(angleDeg float64) float64 {
		e, err := expect(placed(slices.Clone(at.Axes), along, unit.Degrees(angleDeg), true), at.Settings)
		if err != nil {
			return math.NaN()
		}
		rate, ok := e.CountsHz[of]
		if !ok {
			return math.NaN()
		}
		return math.Max(0, rate-e.AccidentalsHz[of])
	}
}
