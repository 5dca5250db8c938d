package report

import (
	"context"
	"fmt"
	"slices"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/estimate"
)

// Judge compares a complete set of a run's references with an earlier one, both by their numbers,
// from what the logbook has of them. What is bad, and what cannot be told, is estimate's to say.
func Judge(ctx context.Context, book *logbook.Book, run protocol.RunID, plan scan.Plan, file *bench.File, set, baseline int) (engine.Verdict, error) {
	if plan.Reference == nil {
		return engine.Verdict{}, fmt.Errorf("run %s: reference %d of a plan that takes none; want a plan with references", run, set)
	}
	var now, before []protocol.Reading
	for r, err := range book.Readings(ctx, run) {
		if err != nil {
			return engine.Verdict{}, err
		}
		switch {
		case r.Kind != protocol.Reference || r.Reference == nil || !r.Accepted:
		case r.Reference.Set == set:
			now = append(now, r.Reading)
		case r.Reference.Set == baseline:
			before = append(before, r.Reading)
		}
	}
	if len(now) == 0 || len(before) == 0 {
		return engine.Verdict{}, fmt.Errorf("run %s: %d readings of reference %d, %d of reference %d; want both sets", run, len(now), set, len(before), baseline)
	}
	q := estimate.ReferenceQuestion{Of: *plan.Reference, Profile: profiles(file, *plan.Reference, before)}
	v := estimate.JudgeReference(now, before, Constants(file), q)
	untold := slices.ContainsFunc(v.Changes, func(c estimate.Change) bool { return c.Finding == estimate.Untold })
	return engine.Verdict{Good: v.Good, Untold: untold, Text: v.Text(), Detail: v.Detail()}, nil
}

// profiles predicts each arm's profile of coincidences through the top, by the declared source. It
// is nil where there is nothing to predict from.
func profiles(file *bench.File, ref scan.Reference, readings []protocol.Reading) map[string]func(float64) float64 {
	expect := file.Facts().Expect
	if expect == nil {
		return nil
	}
	var top []scan.AxisTarget
	for _, p := range ref.Places {
		if p.Arm == "" {
			top = p.Axes
		}
	}
	for _, r := range readings {
		top = standingAt(top, r) // what no place names stands where the readings found it
	}
	all := map[string]func(float64) float64{}
	for _, p := range ref.Places {
		if p.Arm == "" || all[string(p.Arm)] != nil {
			continue
		}
		profile := ratesAlong(expect, ref.Pairs, p.Arm, scan.Point{Axes: top})
		for _, t := range top {
			if t.Axis == p.Arm && profile(t.Angle.Degrees()) > 0 {
				all[string(p.Arm)] = profile
			}
		}
	}
	return all
}

// standingAt adds the axes that are not among the targets, where a reading wanted them.
func standingAt(targets []scan.AxisTarget, r protocol.Reading) []scan.AxisTarget {
	all := append([]scan.AxisTarget{}, targets...)
	for _, a := range r.Angles {
		all = placed(all, drivers.AxisName(a.Axis), a.Target, false)
	}
	return all
}
