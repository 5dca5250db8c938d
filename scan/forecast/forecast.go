package forecast

import (
	"math"
	"slices"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/estimate"
)

// Ask is what a forecast is made from.
type Ask struct {
	Plan   scan.Plan
	Bench  Bench
	Begins time.Time
	// Expect says what is recorded at a place; nil: the optics are not described, and no counts are
	// forecast.
	Expect    Expect
	RatesFrom string // where its rates come from, for people
	// Results works the plan's results out, in its order, from rows that hold expected counts; nil:
	// nothing is said of them. An error is a whole that cannot be worked out.
	Results func(rows estimate.Rows) ([]estimate.Result, error)
	// Refine decides what a refinement adds after what was counted so far, of the points decided so far
	// the last so many added; refinedAt is zero before the first. Nil: not foreseen.
	Refine func(rows estimate.Rows, points []scan.Point, added int, refinedAt, now time.Time) []scan.Point
	Aim    *Aim
	Band   *Band // what the filters pass; nil: not declared
}

// MostRows is how many readings the uncertainty of a result is worked out from, at most.
const MostRows = 20_000

// Forecast is what comes of it.
type Forecast struct {
	protocol.Forecast
	plan    scan.Plan
	bench   Bench
	rates   *rates
	pairs   []drivers.Channel
	singles []drivers.Channel
	first   []time.Duration // when each point's first reading begins; less than 0: never
	visits  []int32         // of each point
	gate    []float32       // seconds of one visit
	added   []scan.Point
	spent   Spent
	track   []step
	local   *time.Location
	stuck   map[int]error // points to which no way is free

	longestSet time.Duration // of references, from the reading before it to its own last one's end
	setBegan   time.Duration
	setOf      int // the set that is open, counted from 1; 0: none
	lastEnd    time.Duration
}

// step is one reading in the picture.
type step struct {
	kind         protocol.ReadingKind
	point, visit int
	started      time.Duration
	ended        time.Duration
	gate         time.Duration
	slices       float64
	at           []unit.Angle
}

// Timed is one reading of a forecast, times since the start.
type Timed struct {
	Kind         protocol.ReadingKind
	Point, Visit int // of a light
	Started      time.Duration
	Ended        time.Duration
	Gate         time.Duration
	Slices       float64
}

// Times are the readings in their order; of a long run only every so many lights are kept.
func (f *Forecast) Times() []Timed {
	all := make([]Timed, len(f.track))
	for i, s := range f.track {
		all[i] = Timed{Kind: s.kind, Point: s.point, Visit: s.visit, Started: s.started, Ended: s.ended, Gate: s.gate, Slices: s.slices}
	}
	return all
}

// mostSteps bounds what a picture draws; of more readings every so many are drawn.
const mostSteps = 4000

// Of works a forecast out. The error is about the keep-outs as such; everything else that cannot work
// is among the warnings.
func Of(a Ask) (*Forecast, error) {
	f, rows, err := course1(a)
	if err != nil {
		return nil, err
	}
	f.worth(a, rows)
	if a.Aim != nil {
		f.aim(a, rows)
	}
	if err := f.warn(a); err != nil {
		return nil, err
	}
	f.Sentence = f.sentence()
	return f, nil
}

// course1 goes through the run once, and keeps what is asked about later.
func course1(a Ask) (*Forecast, *rowMaker, error) {
	f := &Forecast{plan: a.Plan, bench: a.Bench, local: a.Begins.Location()}
	f.Schema, f.Bench, f.Title = protocol.ForecastSchema, a.Bench.Name, a.Plan.Title
	f.Results, f.Warnings = []protocol.ForecastResult{}, []string{}
	f.RatesFrom, f.OverheadFrom = a.RatesFrom, a.Bench.Costs.From
	f.Provisional = len(a.Plan.Open()) > 0
	for _, c := range a.Bench.Counter.Channels {
		if _, pairs := a.Bench.Counter.Coincidences[c]; pairs {
			f.pairs = append(f.pairs, c)
		} else {
			f.singles = append(f.singles, c)
		}
	}
	n := len(a.Plan.Points)
	f.first, f.visits, f.gate = make([]time.Duration, n), make([]int32, n), make([]float32, n)
	for i := range f.first {
		f.first[i] = -1
	}
	if a.Expect != nil {
		f.rates = newRates(a.Plan.Points, f.channels(), f.pairs, a.Expect)
	}
	c, err := newCourse(&f.plan, &f.bench)
	if err != nil {
		return nil, nil, err
	}
	maker := &rowMaker{forecast: f, ask: &a, few: f.expectsFewRows()}
	c.rate = maker.triggerHz
	var refine func(int) []scan.Point
	if a.Refine != nil && a.Plan.Refine != nil && a.Expect != nil && maker.few {
		refine = func(int) []scan.Point {
			var at time.Time
			if maker.refinedAt > 0 {
				at = a.Begins.Add(maker.refinedAt)
			}
			points := append(slices.Clone(a.Plan.Points), f.added...)
			more := a.Refine(maker.rows, points, len(f.added), at, a.Begins.Add(c.now))
			more = more[:min(len(more), max(0, a.Plan.Refine.AtMost-len(f.added)))]
			if len(more) > 0 && maker.refinedAt == 0 {
				maker.refinedAt = c.now
			}
			f.add(more)
			return more
		}
	}
	every, seen := 1, 0
	if visits := n * a.Plan.Repeat.Times; visits > mostSteps {
		every = visits/mostSteps + 1
	}
	look := c.run(a.Begins, refine, func(r *taken) {
		f.see(r)
		maker.add(r)
		if seen%every == 0 || r.kind != protocol.Light {
			f.track = append(f.track, step{kind: r.kind, point: r.point, visit: r.visit, started: r.started, ended: r.ended, gate: r.gate, slices: r.slices, at: slices.Clone(r.at)})
		}
		seen++
	})
	f.spent = c.spent
	f.LeftOut = look.LeftOut()
	f.BeginsAt, f.FinishesAt = protocol.Time{Time: a.Begins.UTC()}, protocol.Time{Time: a.Begins.Add(c.now).UTC()}
	s := c.spent
	for _, p := range []struct {
		to   *protocol.Seconds
		from time.Duration
	}{{&f.Duration, c.now}, {&f.Waiting, s.Waiting}, {&f.Moving, s.Moving}, {&f.Settling, s.Settling}, {&f.Counting, s.Counting}, {&f.Beside, s.Beside}, {&f.Overhead, s.Overhead}} {
		*p.to = protocol.Seconds(p.from)
	}
	f.Points, f.PointsAdded = n, len(f.added)
	for _, p := range a.Plan.Points {
		if p.Empty != "" {
			f.PointsEmpty++
		}
	}
	if r := f.rates; r != nil {
		f.RatesAt, f.Interpolation = r.evaluated, r.error
	}
	f.stuck = c.stuck
	return f, maker, nil
}

// channels are singles first.
func (f *Forecast) channels() []drivers.Channel { return append(slices.Clone(f.singles), f.pairs...) }

func (f *Forecast) expectsFewRows() bool {
	readings := len(f.plan.Points) * f.plan.Repeat.Times
	return readings <= MostRows
}

// add takes points of a refinement.
func (f *Forecast) add(more []scan.Point) {
	for _, p := range more {
		f.added = append(f.added, p)
		f.first, f.visits, f.gate = append(f.first, -1), append(f.visits, 0), append(f.gate, 0)
	}
}

func (f *Forecast) see(r *taken) {
	switch r.kind {
	case protocol.Light:
		f.Visits++
		if f.first[r.point] < 0 {
			f.first[r.point] = r.started
		}
		f.visits[r.point]++
		f.gate[r.point] = float32(r.gate.Seconds())
	case protocol.Dark:
		f.Darks++
	case protocol.Background:
		f.Backgrounds++
	case protocol.Reference:
		f.References++
		if f.setOf != r.set+1 {
			f.setOf, f.setBegan = r.set+1, f.lastEnd
			if f.lastEnd == 0 {
				f.setBegan = r.started
			}
		}
		f.longestSet = max(f.longestSet, r.ended-f.setBegan)
	}
	f.lastEnd = r.ended
}

// point is one of the sweep's, or one that a refinement added.
func (f *Forecast) point(i int) scan.Point {
	if n := len(f.plan.Points); i >= n {
		return f.added[i-n]
	}
	return f.plan.Points[i]
}

// perVisit writes what one visit of a point records, in the order of channels and then of the pairs'
// accidentals; false: no rates.
func (f *Forecast) perVisit(i int, rate row) bool {
	if f.rates == nil || i >= len(f.plan.Points) {
		return false
	}
	f.rates.into(i, rate)
	for k := range rate {
		rate[k] *= float64(f.gate[i])
	}
	return !slices.ContainsFunc(rate, math.IsNaN)
}

// List is every point with what is expected of one visit; for many points it is long.
func (f *Forecast) List() []protocol.ForecastPoint {
	all := make([]protocol.ForecastPoint, 0, len(f.plan.Points)+len(f.added))
	for i := range len(f.plan.Points) + len(f.added) {
		all = append(all, f.Row(i))
	}
	return all
}

// Row is one point of the list.
func (f *Forecast) Row(i int) protocol.ForecastPoint {
	p := f.point(i)
	out := protocol.ForecastPoint{Point: protocol.Point{Point: i, Axes: []protocol.AxisTarget{}, Empty: p.Empty}, Visits: int(f.visits[i]), Added: i >= len(f.plan.Points),
		Begins: protocol.Seconds(max(0, f.first[i])), Gate: protocol.Seconds(float64(f.gate[i]) * float64(time.Second)),
		Singles: map[string]float64{}, Coincidences: map[string]float64{}, Accidentals: map[string]float64{}}
	for _, t := range p.Axes {
		out.Axes = append(out.Axes, protocol.AxisTarget{Axis: string(t.Axis), Target: t.Angle})
	}
	for _, t := range p.Settings {
		out.Settings = append(out.Settings, protocol.SettingValue{Name: string(t.Setting), Target: t.Value, Unit: f.unitOf(t.Setting)})
	}
	rate := make(row, len(f.singles)+2*len(f.pairs))
	if f.perVisit(i, rate) {
		for k, c := range f.singles {
			out.Singles[string(c)] = figures(rate[k])
		}
		for k, c := range f.pairs {
			out.Coincidences[string(c)] = figures(rate[len(f.singles)+k])
			out.Accidentals[string(c)] = figures(rate[len(f.singles)+len(f.pairs)+k])
		}
	}
	return out
}

func (f *Forecast) unitOf(name drivers.DeviceName) string {
	for _, s := range f.bench.Settings {
		if s.Name == name {
			return s.Unit
		}
	}
	return ""
}

// figures keeps six significant digits: more are none of a model's.
func figures(v float64) float64 {
	if v == 0 || math.IsNaN(v) || math.IsInf(v, 0) {
		return 0
	}
	scale := math.Pow(10, 5-math.Floor(math.Log10(math.Abs(v))))
	return math.Round(v*scale) / scale
}
