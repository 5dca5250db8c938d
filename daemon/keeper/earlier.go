package keeper

import (
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// lookup answers what a plan asks of earlier results.
type lookup struct {
	keeper *Keeper
	ctx    context.Context
	now    time.Time
	taken  []protocol.EarlierValue // with decided: these and no others
	// decided says that the run's points are written.
	decided bool
	// broken is set when the logbook could not be read: what find says then is not about the results.
	broken error
}

// earlierOf answers for a run: with what its journal has taken already, else with what there is now.
func (k *Keeper) earlierOf(ctx context.Context, run protocol.RunID) (*lookup, error) {
	l := k.earlierNow(ctx)
	var err error
	l.taken, l.decided, err = k.Book.Taken(ctx, run)
	return l, err
}

func (k *Keeper) earlierNow(ctx context.Context) *lookup {
	return &lookup{keeper: k, ctx: ctx, now: time.Now()}
}

// find returns the value that is asked for; its error says what was found, and what is wanted.
func (l *lookup) find(ask scan.EarlierAsk) (scan.EarlierSource, error) {
	if l.decided {
		return logbook.Again(l.taken, ask)
	}
	source, err := l.keeper.earlier(l.ctx, ask, l.now)
	if none, ok := errors.AsType[*noValue](err); ok {
		return source, none
	}
	if err != nil && l.broken == nil {
		l.broken = err
	}
	return source, err
}

// noValue says why there is no earlier result that will do. Anything else is no answer.
type noValue struct{ text string }

func (e *noValue) Error() string { return e.text }

func none(format string, v ...any) *noValue { return &noValue{fmt.Sprintf(format, v...)} }

func subject(ask scan.EarlierAsk) string {
	return fmt.Sprintf("%s of %s", ask.Kind, cmp.Or(string(ask.Axis), string(ask.Setting)))
}

// earlier finds the last result of the kind that is asked for from a finished run with that title.
// When that one will not do there is none: an older one is not taken instead of it. Age is judged by
// the bench's clock at the result; on a simulated bench, whose clock may be ahead, a result from the
// future is new.
func (k *Keeper) earlier(ctx context.Context, ask scan.EarlierAsk, now time.Time) (scan.EarlierSource, error) {
	runs, err := k.Book.RunsTitled(ctx, k.Bench.Name, ask.From)
	if err != nil {
		return scan.EarlierSource{}, err
	}
	if len(runs) == 0 {
		return scan.EarlierSource{}, none("no run %q in this bench's logbook; want a finished one", ask.From)
	}
	finished := 0
	for _, run := range runs {
		if run.State != protocol.Finished {
			continue
		}
		finished++
		results, err := k.Book.Results(ctx, run.Run)
		if err != nil {
			return scan.EarlierSource{}, err
		}
		for _, entry := range results {
			r, err := readResult(entry)
			if err != nil {
				return scan.EarlierSource{}, err
			}
			if r.answers(ask) {
				return k.judge(ctx, ask, r, now)
			}
		}
	}
	if finished == 0 {
		return scan.EarlierSource{}, none("the last run %q, %s, is %s, and none has finished; want a finished one", ask.From, runs[0].Run, runs[0].State)
	}
	return scan.EarlierSource{}, none("no finished run %q has a %s; want a recipe of that title with a result: {kind: %s, …} of it", ask.From, subject(ask), ask.Kind)
}

// judge says whether the result that was found will do.
func (k *Keeper) judge(ctx context.Context, ask scan.EarlierAsk, r result, now time.Time) (scan.EarlierSource, error) {
	no := func(format string, v ...any) (scan.EarlierSource, error) {
		return scan.EarlierSource{}, none("the last %q (run %s) "+format, append([]any{ask.From, r.Run}, v...)...)
	}
	if r.Value == nil || r.U == nil {
		return no("gave no %s: %s; want one with a value", subject(ask), cmp.Or(strings.Join(r.Because, ", "), "it does not say why"))
	}
	if age := now.Sub(r.At.Time); ask.NotOlderThan > 0 && age > ask.NotOlderThan {
		return no("ended %s ago; want at most %s", ago(age), unit.Span(ask.NotOlderThan))
	}
	s := scan.EarlierSource{Run: string(r.Run), Sequence: r.Sequence}
	if ask.Axis == "" {
		name := k.unitOf(ask.Setting)
		value, err := convert(*r.Value, r.Unit, name)
		if err == nil {
			s.Value = value
			s.U, err = convertWidth(*r.U, r.Unit, name)
		}
		switch {
		case err != nil:
			return no("gave its %s in %q, and %s is set in %q: %v", subject(ask), r.Unit, ask.Setting, name, err)
		case !usable(s.Value, s.U):
			return no("gave a %s of %g ± %g %s; want numbers", subject(ask), s.Value, s.U, name)
		case ask.BelowValue > 0 && s.U > ask.BelowValue:
			return no("has a standard uncertainty of %.3g %s; want at most %.3g %s", s.U, name, ask.BelowValue, name)
		}
		return s, nil
	}
	s.Angle, s.U = unit.Degrees(*r.Value), *r.U
	switch {
	case r.Unit != "deg":
		return no("gave its %s in %q; want degrees", subject(ask), r.Unit)
	case !usable(*r.Value, s.U) || math.Abs(*r.Value) > 36000:
		return no("gave a %s of %g ± %g deg; want an angle", subject(ask), *r.Value, s.U)
	case ask.Below > 0 && s.U > ask.Below.Degrees():
		return no("has a standard uncertainty of %.3g deg; want at most %s", s.U, ask.Below)
	}
	row, err := k.Book.Run(ctx, r.Run)
	if err != nil {
		return scan.EarlierSource{}, err
	}
	if why := k.otherAngle(row, ask.Axis); why != "" {
		return no("%s", why)
	}
	return s, nil
}

// otherAngle says why an angle of an earlier run is not the same angle on this bench, empty when it
// is.
func (k *Keeper) otherAngle(row logbook.RunRow, axis drivers.AxisName) string {
	if row.BenchText == k.BenchText {
		return ""
	}
	if k.Declared == nil {
		return "had another bench file; want one under the same"
	}
	now, err := k.Declared(k.BenchText, axis)
	if err != nil {
		return fmt.Sprintf("cannot be compared: %v", err)
	}
	then, err := k.Declared(row.BenchText, axis)
	if err != nil {
		return fmt.Sprintf("had a bench file that this program does not read any more (%v); want one under the same", firstLine(err))
	}
	if then != now {
		return fmt.Sprintf("was under another bench file, which declared of %s: %s; now it is: %s; an angle of then is not the same angle now, so measure it again", axis, then, now)
	}
	return ""
}

func firstLine(err error) string {
	line, _, _ := strings.Cut(err.Error(), "\n")
	return line
}

func usable(value, u float64) bool {
	return !math.IsNaN(value) && !math.IsInf(value, 0) && u > 0 && !math.IsInf(u, 0)
}

func (k *Keeper) unitOf(setting drivers.DeviceName) string {
	for _, s := range k.Bench.Settings {
		if s.Name() == setting {
			return s.Unit()
		}
	}
	return ""
}

// convert gives a value in one unit in another of its kind.
func convert(value float64, from, to string) (float64, error) {
	if from == to {
		return value, nil
	}
	base, kind, _, err := unit.ParseAny(strconv.FormatFloat(value, 'g', 17, 64) + " " + from)
	if err != nil {
		return 0, err
	}
	if _, other, _, err := unit.ParseAny("1 " + to); err != nil || other != kind {
		return 0, errors.Join(err, fmt.Errorf("%q is no %s", to, kind))
	}
	return unit.In(base, to)
}

// convertWidth does the same with a difference, which a scale's zero does not shift.
func convertWidth(width float64, from, to string) (float64, error) {
	w, err := convert(width, from, to)
	if err != nil {
		return 0, err
	}
	nought, err := convert(0, from, to)
	return w - nought, err
}

// ago says an age as a person would.
func ago(d time.Duration) string {
	switch {
	case d >= 48*time.Hour:
		return fmt.Sprintf("%d days", int(d.Hours()/24))
	case d >= 2*time.Hour:
		return fmt.Sprintf("%d h", int(d.Hours()))
	case d >= 2*time.Minute:
		return fmt.Sprintf("%d min", int(d.Minutes()))
	}
	return fmt.Sprintf("%d s", int(d.Seconds()))
}

// result is what has to be known of a result's entry.
type result struct {
	protocol.Head
	Kind    string   `json:"kind"`
	Value   *float64 `json:"value"`
	U       *float64 `json:"standard_uncertainty"`
	Unit    string   `json:"unit"`
	Because []string `json:"because"`
	Axis    string   `json:"axis"`
	Setting string   `json:"setting"`
}

func readResult(e protocol.Entry) (result, error) {
	var r result
	if err := json.Unmarshal(e.Body, &r); err != nil {
		return r, fmt.Errorf("result %s: %w", e.ID(), err)
	}
	return r, nil
}

func (r result) answers(ask scan.EarlierAsk) bool {
	if r.Kind != string(ask.Kind) {
		return false
	}
	return r.Axis == string(ask.Axis) && r.Setting == string(ask.Setting)
}
