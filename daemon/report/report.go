// Package report makes a run's result from the logbook alone. Recipe and bench file are read from
// the texts that the run's header keeps, never from today's files, so that the same file gives the
// same digits years later. It writes nothing and touches no instrument.
package report

import (
	"context"
	"errors"
	"fmt"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
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
	Trials    int             // of a Monte Carlo propagation (JCGM 101); 0: none
	Seed      uint64
}

// Of works out the result of a run as its recipe asks for it.
func Of(ctx context.Context, book *logbook.Book, run protocol.RunID) (estimate.Result, error) {
	return With(ctx, book, run, Options{})
}

// With is Of with options. A result that cannot be given says why in its Because, and is no error.
func With(ctx context.Context, book *logbook.Book, run protocol.RunID, o Options) (estimate.Result, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return estimate.Result{}, err
	}
	file, err := bench.Parse("bench file in the logbook", []byte(row.BenchText))
	if err != nil {
		return estimate.Result{}, err
	}
	r, err := recipe.Parse("recipe in the logbook", []byte(row.RecipeText))
	if err != nil {
		return estimate.Result{}, err
	}
	facts := file.Facts()
	facts.AcceptedAt = row.QueuedAt.Time
	plan, err := r.Plan(facts)
	if err != nil {
		return estimate.Result{}, err
	}
	if len(plan.Results) == 0 {
		return estimate.Result{}, fmt.Errorf("run %s: %w", run, ErrNoResult)
	}
	rows, err := rowsOf(ctx, book, row, plan)
	if err != nil {
		return estimate.Result{}, err
	}
	return Result(rows, file, plan, o)
}

// Result works out the result that a plan asks for from the rows of its run.
func Result(rows estimate.Rows, file *bench.File, plan scan.Plan, o Options) (estimate.Result, error) {
	b := Constants(file)
	m, warnings := model(file, plan, rows)
	var result estimate.Result
	var err error
	switch plan.Results[0].Kind {
	case scan.Efficiency:
		q := estimate.Question{Trigger: armOf(file, plan.Results[0].Trigger), UnderTest: armOf(file, plan.Results[0].UnderTest), Off: map[estimate.Step]bool{},
			Displaced: o.Displaced, MonteCarlo: o.Trials, Seed: o.Seed}
		for _, step := range o.Off {
			q.Off[step] = true
		}
		if plan.Results[0].PlateauOf != "" {
			q.Use = &estimate.Plateau{Axis: string(plan.Results[0].PlateauOf), HalfWidthDeg: plan.Results[0].HalfWidth.Degrees()}
		}
		result, err = estimate.Efficiency(rows, b, m, q)
	case scan.Peak:
		result, err = estimate.Peak(rows, b, m, estimate.PeakQuestion{
			Axis: string(plan.Results[0].Along), Channel: string(plan.Results[0].Of), Shape: estimate.PeakShape(plan.Results[0].Profile), Power: string(plan.Results[0].Power),
		})
	default:
		return estimate.Result{}, fmt.Errorf("result of kind %q; want efficiency or peak", plan.Results[0].Kind)
	}
	if refusal, ok := errors.AsType[*estimate.Refusal](err); ok {
		return estimate.Refused(rows, string(plan.Results[0].Kind), refusal), nil
	}
	result.Warnings = append(result.Warnings, warnings...)
	return result, err
}

// rowsOf reads a run's readings, less those at places that the result does not use.
func rowsOf(ctx context.Context, book *logbook.Book, row logbook.RunRow, plan scan.Plan) (estimate.Rows, error) {
	rows := estimate.Rows{Run: row.Run, Title: row.Title, Doubtful: map[int64]string{}}
	for r, err := range book.Readings(ctx, row.Run) {
		if err != nil {
			return rows, err
		}
		if r.Doubtful {
			rows.Doubtful[r.Sequence] = r.Doubt
		}
		if r.Kind == protocol.Light && !stands(r.Reading, plan.Results[0].At) {
			continue
		}
		rows.Readings = append(rows.Readings, r.Reading)
	}
	return rows, nil
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
