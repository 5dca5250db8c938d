// Package report makes a run's results from the logbook alone. Recipe and bench file are read from
// the texts that the run's header keeps, and what its points took from earlier results from its own
// journal, never from today's files and results, so that the same file gives the same digits years
// later. It writes nothing and touches no instrument.
package report

import (
	"context"
	"errors"
	"fmt"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/estimate"
	"gemel/scan/recipe"
)

// ErrNoResult is returned for a run whose recipe asks for no result.
var ErrNoResult = errors.New("the recipe asks for no result")

// Options change how a result is worked out, never which readings make it.
type Options struct {
	Off       []estimate.Step // corrections of an efficiency that are switched off
	Displaced bool            // accidentals from the displaced windows instead of the product
	Trials    int             // of a Monte Carlo propagation (JCGM 101) of an efficiency; 0: none
	Seed      uint64
}

// All works out the results of a run, in the order in which its recipe asks for them. A result that
// cannot be given says why in its Because, and is no error.
func All(ctx context.Context, book *logbook.Book, run protocol.RunID, o Options) ([]estimate.Result, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return nil, err
	}
	file, plan, err := planOf(ctx, book, row)
	if err != nil {
		return nil, err
	}
	if len(plan.Results) == 0 {
		return nil, fmt.Errorf("run %s: %w", run, ErrNoResult)
	}
	rows, err := rowsOf(ctx, book, row, plan)
	if err != nil {
		return nil, err
	}
	var all []estimate.Result
	for _, q := range plan.Results {
		result, err := Result(rows, file, plan, q, o)
		if err != nil {
			return nil, fmt.Errorf("run %s: %s: %w", run, q.Kind, err)
		}
		all = append(all, result)
	}
	return all, nil
}

// PlanOf works out a run's plan from the texts that it keeps.
func PlanOf(ctx context.Context, book *logbook.Book, run protocol.RunID) (scan.Plan, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return scan.Plan{}, err
	}
	_, plan, err := planOf(ctx, book, row)
	return plan, err
}

// planOf works out a run's bench and plan from the texts that it keeps.
func planOf(ctx context.Context, book *logbook.Book, row logbook.RunRow) (*bench.File, scan.Plan, error) {
	file, err := bench.Parse("bench file in the logbook", []byte(row.BenchText))
	if err != nil {
		return nil, scan.Plan{}, err
	}
	r, err := recipe.Parse("recipe in the logbook", []byte(row.RecipeText))
	if err != nil {
		return nil, scan.Plan{}, err
	}
	taken, _, err := book.Taken(ctx, row.Run)
	if err != nil {
		return nil, scan.Plan{}, err
	}
	facts := file.Facts()
	facts.AcceptedAt = row.QueuedAt.Time
	// The values that the run's points were made of, whatever was measured since.
	facts.Earlier = func(ask scan.EarlierAsk) (scan.EarlierSource, error) { return logbook.Again(taken, ask) }
	plan, err := r.Plan(facts)
	return file, plan, err
}

// Result works out one result that a plan asks for from the rows of its run.
func Result(rows estimate.Rows, file *bench.File, plan scan.Plan, q scan.Result, o Options) (estimate.Result, error) {
	rows = standing(rows, q.At)
	b := Constants(file)
	m, warnings := model(file, q, rows)
	result, err := asked(rows, file, b, m, plan, q, o)
	if refusal, ok := errors.AsType[*estimate.Refusal](err); ok {
		result, err = estimate.Refused(rows, string(q.Kind), refusal), nil
	} else {
		result.Warnings = append(result.Warnings, warnings...)
	}
	result.Axis, result.Setting = string(q.Along), string(q.Setting)
	return result, err
}

func asked(rows estimate.Rows, file *bench.File, b estimate.Bench, m estimate.Model, plan scan.Plan, q scan.Result, o Options) (estimate.Result, error) {
	curve := estimate.CurveQuestion{Channel: string(q.Of), Along: string(q.Along), Against: string(q.Against)}
	switch q.Kind {
	case scan.Efficiency:
		ask := estimate.Question{Trigger: armOf(file, q.Trigger), UnderTest: armOf(file, q.UnderTest), Off: map[estimate.Step]bool{},
			Displaced: o.Displaced, MonteCarlo: o.Trials, Seed: o.Seed}
		for _, step := range o.Off {
			ask.Off[step] = true
		}
		if q.PlateauOf != "" {
			ask.Use = &estimate.Plateau{Axis: string(q.PlateauOf), HalfWidthDeg: q.HalfWidth.Degrees()}
		}
		if q.By != "" {
			return estimate.EfficiencyBy(rows, b, m, ask, string(q.By))
		}
		return estimate.Efficiency(rows, b, m, ask)
	case scan.Peak:
		return estimate.Peak(rows, b, m, estimate.PeakQuestion{Axis: string(q.Along), Channel: string(q.Of), Shape: estimate.PeakShape(q.Profile), Power: string(q.Power)})
	case scan.Zero:
		return estimate.Zero(rows, b, m, estimate.ZeroQuestion{Axis: string(q.Along), Channel: string(q.Of)})
	case scan.TuningCurve:
		return estimate.TuningCurve(rows, b, m, curve)
	case scan.ConjugateMap:
		return estimate.ConjugateMap(rows, b, m, curve)
	case scan.Delay:
		return estimate.Delay(rows, b, estimate.DelayQuestion{Channel: string(q.Of), Setting: string(q.Setting), Operating: operating(file, q.Setting)})
	case scan.Drift:
		if plan.Reference == nil {
			return estimate.Result{}, &estimate.Refusal{Reasons: []string{"the recipe takes no references; want a key \"reference\""}}
		}
		return estimate.Drift(rows, b, driftQuestion(rows, file, *plan.Reference))
	}
	return estimate.Result{}, fmt.Errorf("a result of kind %q; want one that this program knows", q.Kind)
}

// operating is where a delay stands while the bench counts, in its own unit; nil: not declared.
func operating(f *bench.File, setting drivers.DeviceName) *float64 {
	for _, s := range f.Settings {
		if s.Name != setting || s.Centre == nil {
			continue
		}
		if at, err := unit.In(s.Centre.Value, s.Unit); err == nil {
			return &at
		}
	}
	return nil
}

// rowsOf reads a run's readings.
func rowsOf(ctx context.Context, book *logbook.Book, row logbook.RunRow, plan scan.Plan) (estimate.Rows, error) {
	rows := estimate.Rows{Run: row.Run, Title: row.Title, Doubtful: map[int64]string{}, Planned: len(plan.Points)}
	for r, err := range book.Readings(ctx, row.Run) {
		if err != nil {
			return rows, err
		}
		if r.Doubtful {
			rows.Doubtful[r.Sequence] = r.Doubt
		}
		rows.Readings = append(rows.Readings, r.Reading)
	}
	return rows, nil
}

// standing leaves out the light of other places than those that the result asks for.
func standing(rows estimate.Rows, at []scan.AxisTarget) estimate.Rows {
	if len(at) == 0 {
		return rows
	}
	kept := rows
	kept.Readings = nil
	for _, r := range rows.Readings {
		if r.Kind != protocol.Light || stands(r, at) {
			kept.Readings = append(kept.Readings, r)
		}
	}
	return kept
}

// stands says whether a reading was taken with the axes at the places that the result asks for.
func stands(r protocol.Reading, at []scan.AxisTarget) bool {
	for _, t := range at {
		for _, a := range r.Angles {
			if a.Axis == string(t.Axis) && a.Target != t.Angle {
				return false
			}
		}
	}
	return true
}

// armOf names the arm behind a singles channel.
func armOf(f *bench.File, channel drivers.Channel) string {
	for _, d := range f.Detectors {
		if d.Channel == channel {
			return d.Name
		}
	}
	return string(channel)
}
