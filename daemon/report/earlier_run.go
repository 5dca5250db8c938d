package report

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/forecast"
)

// EarlierRun is what an earlier run says of rates and of what takes time.
type EarlierRun struct {
	Expect forecast.Expect
	Costs  forecast.Costs
	From   string

	places []spot
	axes   []measure // of the axes that its readings tell apart
	dark   map[drivers.Channel]float64
	pairs  map[drivers.Channel][2]drivers.Channel
	window float64 // s
}

// spot is what was recorded at one place, per second.
type spot struct {
	axes     map[drivers.AxisName]float64
	settings map[drivers.DeviceName]float64
	counts   map[drivers.Channel]float64 // summed over the readings there
	seconds  float64
}

// measure is one coordinate of places: how far two of them are apart, in steps of its own.
type measure struct {
	axis    drivers.AxisName
	setting drivers.DeviceName
	step    float64
}

// The nearest places that a rate is taken from, and how far off they may be, in steps.
const (
	nearestPlaces = 4
	farthestStep  = 3
)

// ErrNothingCounted is returned for a run whose readings say nothing of rates.
var ErrNothingCounted = errors.New("no accepted reading with light; want a run that has some")

// FromRun takes rates and costs from a run of the logbook: rates at its places, and between them from
// the nearest ones, nearer ones weighing more; costs by what its readings took beyond a forecast of the
// same run.
func FromRun(ctx context.Context, book *logbook.Book, run protocol.RunID, today *bench.File) (*EarlierRun, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return nil, err
	}
	file, plan, err := planOf(ctx, book, row)
	if err != nil {
		return nil, fmt.Errorf("run %s: %w", run, err)
	}
	e := &EarlierRun{From: "run " + string(run), dark: map[drivers.Channel]float64{}, pairs: file.Counter.Coincidences, window: file.Counter.Window.Value}
	e.Expect = e.expect
	var readings []protocol.Reading
	darkS := 0.0
	for r, err := range book.Readings(ctx, run) {
		switch {
		case err != nil:
			return nil, err
		case !r.Accepted || r.Doubtful || r.Gate <= 0:
			continue
		}
		readings = append(readings, r.Reading)
		if r.Kind == protocol.Dark {
			darkS += r.Gate.Duration().Seconds()
			for _, c := range r.Counts {
				e.dark[drivers.Channel(c.Channel)] += float64(c.Counts)
			}
			continue
		}
		e.add(r.Reading)
	}
	if len(e.places) == 0 {
		return nil, fmt.Errorf("run %s: %w", run, ErrNothingCounted)
	}
	for c := range e.dark {
		e.dark[c] /= darkS
	}
	e.tellApart()
	e.Costs = costs(today)
	foreseen, err := Forecast(file, plan, Foreseen{Begins: row.QueuedAt.Time})
	if err != nil {
		return nil, fmt.Errorf("run %s: %w", run, err)
	}
	e.compare(readings, foreseen.Times())
	return e, nil
}

// add counts a reading at its place.
func (e *EarlierRun) add(r protocol.Reading) {
	here := spot{axes: map[drivers.AxisName]float64{}, settings: map[drivers.DeviceName]float64{}, counts: map[drivers.Channel]float64{}}
	for _, a := range r.Angles {
		here.axes[drivers.AxisName(a.Axis)] = a.Target.Degrees()
	}
	for _, s := range r.Settings {
		here.settings[drivers.DeviceName(s.Name)] = s.Target
	}
	i := slices.IndexFunc(e.places, func(p spot) bool { return same(p.axes, here.axes) && same(p.settings, here.settings) })
	if i < 0 {
		i = len(e.places)
		e.places = append(e.places, here)
	}
	e.places[i].seconds += r.Gate.Duration().Seconds()
	for _, c := range r.Counts {
		e.places[i].counts[drivers.Channel(c.Channel)] += float64(c.Counts)
	}
}

func same[K comparable](a, b map[K]float64) bool {
	if len(a) != len(b) {
		return false
	}
	for k, v := range a {
		if w, ok := b[k]; !ok || v != w {
			return false
		}
	}
	return true
}

// tellApart finds the coordinates and their steps: the median distance of neighbouring values, or one
// degree, or one unit, where there is but one.
func (e *EarlierRun) tellApart() {
	step := func(values []float64) float64 {
		slices.Sort(values)
		values = slices.Compact(values)
		var gaps []float64
		for i := 1; i < len(values); i++ {
			gaps = append(gaps, values[i]-values[i-1])
		}
		if len(gaps) == 0 {
			return 1
		}
		slices.Sort(gaps)
		return gaps[len(gaps)/2]
	}
	axes, settings := map[drivers.AxisName][]float64{}, map[drivers.DeviceName][]float64{}
	for _, p := range e.places {
		for a, v := range p.axes {
			axes[a] = append(axes[a], v)
		}
		for s, v := range p.settings {
			settings[s] = append(settings[s], v)
		}
	}
	for a, values := range axes {
		e.axes = append(e.axes, measure{axis: a, step: step(values)})
	}
	for s, values := range settings {
		e.axes = append(e.axes, measure{setting: s, step: step(values)})
	}
	slices.SortFunc(e.axes, func(a, b measure) int {
		return cmp.Or(cmp.Compare(a.axis, b.axis), cmp.Compare(a.setting, b.setting))
	})
}

// expect blends the nearest places, each weighed by the inverse square of its distance. Axes and
// settings that are not named stand where most light was counted.
func (e *EarlierRun) expect(axes []scan.AxisTarget, settings []scan.SettingTarget) (scan.Expected, error) {
	type near struct {
		place    int
		distance float64
	}
	var all []near
	for i, p := range e.places {
		d := 0.0
		for _, m := range e.axes {
			want, have, asked := 0.0, 0.0, false
			for _, t := range axes {
				if m.axis != "" && t.Axis == m.axis {
					want, have, asked = t.Angle.Degrees(), p.axes[m.axis], true
				}
			}
			for _, t := range settings {
				if m.setting != "" && t.Setting == m.setting {
					want, have, asked = t.Value, p.settings[m.setting], true
				}
			}
			if asked {
				d += (want - have) * (want - have) / (m.step * m.step)
			}
		}
		all = append(all, near{i, math.Sqrt(d)})
	}
	slices.SortStableFunc(all, func(a, b near) int { return cmp.Compare(a.distance, b.distance) })
	if all[0].distance > farthestStep {
		return scan.Expected{}, fmt.Errorf("%s counted nothing within %d of its steps of here", e.From, farthestStep)
	}
	all = all[:min(nearestPlaces, len(all))]
	if all[0].distance < 1e-6 {
		n := 1
		for n < len(all) && all[n].distance < 1e-6 {
			n++
		}
		all = all[:n]
	}
	out := scan.Expected{CountsHz: map[drivers.Channel]float64{}, AccidentalsHz: map[drivers.Channel]float64{}, DarkHz: e.dark}
	weights := 0.0
	for _, a := range all {
		p := e.places[a.place]
		w := 1 / math.Max(a.distance*a.distance, 1e-12)
		weights += w
		for c, n := range p.counts {
			out.CountsHz[c] += w * n / p.seconds
		}
	}
	for c := range out.CountsHz {
		out.CountsHz[c] /= weights
	}
	for c, of := range e.pairs {
		out.AccidentalsHz[c] = math.Min(out.CountsHz[c], out.CountsHz[of[0]]*out.CountsHz[of[1]]*e.window)
	}
	return out, nil
}

// compare finds what the run's readings took beyond the forecast of the same run: the mean over lights
// that followed one another in both, so that no hold is among it.
func (e *EarlierRun) compare(readings []protocol.Reading, foreseen []forecast.Timed) {
	type key struct{ point, visit int }
	at := map[key]int{}
	for i, t := range foreseen {
		if t.Kind == protocol.Light {
			at[key{t.Point, t.Visit}] = i
		}
	}
	var between, inside []float64
	for i := range readings {
		r := readings[i]
		if r.Kind != protocol.Light || r.Point == nil || r.Visit == nil {
			continue
		}
		k, known := at[key{*r.Point, *r.Visit}]
		if !known {
			continue
		}
		t := foreseen[k]
		if n := float64(len(r.Slices)); n > 0 && t.Slices > 0 {
			took := r.EndedAt.Sub(r.StartedAt.Time) - r.Gate.Duration()
			inside = append(inside, took.Seconds()/n-(t.Ended-t.Started-t.Gate).Seconds()/t.Slices)
		}
		if i == 0 || k == 0 || readings[i-1].Sequence+1 != r.Sequence || readings[i-1].Kind != protocol.Light || foreseen[k-1].Kind != protocol.Light {
			continue
		}
		before := readings[i-1]
		if before.Point == nil || before.Visit == nil || foreseen[k-1].Point != *before.Point || foreseen[k-1].Visit != *before.Visit {
			continue
		}
		between = append(between, r.StartedAt.Sub(before.EndedAt.Time).Seconds()-(t.Started-foreseen[k-1].Ended).Seconds())
	}
	mean := func(x []float64) time.Duration {
		sum := 0.0
		for _, v := range x {
			sum += v / float64(len(x))
		}
		return time.Duration(sum * float64(time.Second))
	}
	e.Costs.Reading, e.Costs.Slice = mean(between), mean(inside)
	e.Costs.From = fmt.Sprintf("as %s had it: %s a reading and %s a slice beyond 1.2 ms a question", e.From, unit.Span(e.Costs.Reading.Round(time.Millisecond)), unit.Span(e.Costs.Slice.Round(time.Millisecond)))
	if len(between) == 0 {
		e.Costs.From = forecast.Measured(0).From + "; " + e.From + " has no two lights in a row to tell"
	}
}
