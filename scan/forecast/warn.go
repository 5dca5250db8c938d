package forecast

import (
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// Bounds of what is warned of.
const (
	mostLoad        = 0.1  // count rate times dead time
	mostAccidental  = 0.10 // share of the coincidences where there are most
	mostInterpolate = 0.01 // relative error between the places that were evaluated
	mostTold        = 5    // findings of one kind that are told one by one
)

// Band is what the arms' filters pass, vacuum wavelengths.
type Band struct {
	PumpNm            float64
	Channels          [2]drivers.Channel // of the signal's and the idler's detector
	Names             [2]string
	CentreNm, WidthNm [2]float64 // width 0: no filter
}

func (f *Forecast) warnf(format string, args ...any) {
	f.Warnings = append(f.Warnings, fmt.Sprintf(format, args...))
}

// warn looks at everything that cannot work, or will not be worth its time.
func (f *Forecast) warn(a Ask) error {
	if err := f.warnOfWays(a); err != nil {
		return err
	}
	f.warnOfTime(a)
	f.warnOfEmpty()
	for _, d := range a.Bench.Detectors {
		if d.ProtectBy == "" {
			f.warnf("the detector %s cannot be protected: nothing closes before it", d.Name)
		}
	}
	f.warnOfBand(a.Band)
	f.warnOfWorth(a)
	f.warnOfGuards(a)
	for _, e := range a.Plan.Open() {
		name := string(e.Ask.Axis)
		if name == "" {
			name = string(e.Ask.Setting)
		}
		f.warnf("provisional: no %s of %s from %q yet (%s); points stand where the model or the park angle puts them", e.Ask.Kind, name, e.Ask.From, orElse(e.Missing, "no such result"))
	}
	if f.rates == nil {
		if a.Expect == nil {
			f.warnf("no counts are forecast: the bench file does not describe the optics")
		}
		return nil
	}
	f.warnOfRates(a)
	return nil
}

func orElse(text, otherwise string) string {
	if text != "" {
		return text
	}
	return otherwise
}

// warnOfWays is about limits and keep-outs, at the points and on the ways between them.
func (f *Forecast) warnOfWays(a Ask) error {
	at := map[drivers.AxisName]unit.Angle{}
	for i, x := range a.Bench.Axes {
		at[x.Name] = a.Bench.Start[i]
	}
	findings, err := route.CheckPlan(a.Bench.Axes, a.Bench.KeepOuts, a.Plan, at)
	if err != nil {
		return err
	}
	dark, told := 0, 0
	known := map[int]bool{}
	for _, x := range findings {
		known[x.Point] = true
		if x.PumpClosed && a.Bench.Pump != nil {
			dark++
			continue
		}
		told++
		if told > mostTold {
			continue
		}
		switch {
		case x.Point < 0:
			f.warnf("%v", x.Err)
		case x.From >= 0 && x.From != x.Point:
			f.warnf("point %d, on the way from point %d: %v", x.Point, x.From, x.Err)
		default:
			f.warnf("point %d: %v", x.Point, x.Err)
		}
	}
	if told > mostTold {
		more := fmt.Sprint(told - mostTold)
		if len(findings) == route.MostFindings {
			more += " or more"
		}
		f.warnf("and %s points more like that", more)
	}
	// What the course found on its way, darks, backgrounds and references included.
	if len(findings) < route.MostFindings {
		points := make([]int, 0, len(f.stuck))
		for point := range f.stuck {
			if point >= 0 && !known[point] {
				points = append(points, point)
			}
		}
		slices.Sort(points)
		for i, point := range points {
			if i == mostTold {
				f.warnf("and no way to %s more", plural(len(points)-mostTold, "point"))
				break
			}
			f.warnf("no way to point %d is free: %v", point, f.stuck[point])
		}
	}
	if dark > 0 {
		f.warnf("%s only with the pump shutter closed: it is closed meanwhile", map[bool]string{true: "1 way is free", false: fmt.Sprintf("%d ways are free", dark)}[dark == 1])
	}
	return nil
}

func (f *Forecast) warnOfTime(a Ask) {
	s := a.Plan.Schedule
	if f.LeftOut > 0 {
		f.warnf("cannot finish: %d of %d visits are left out, because they would not be over by %s", f.LeftOut, f.LeftOut+f.Visits, f.clock(s.FinishBy))
	} else if !s.FinishBy.IsZero() && f.FinishesAt.After(s.FinishBy) {
		f.warnf("cannot finish: closing readings go on until %s, after the end at %s", f.clock(f.FinishesAt.Time), f.clock(s.FinishBy))
	}
	if names, times := f.zeros(); times > 0 {
		f.warnf("the zeros of %s are verified about %s: the time of these searches is not known, and not in the forecast", strings.Join(names, ", "), map[bool]string{true: "once", false: fmt.Sprintf("%d times", times)}[times == 1])
	}
	if w := s.WarmUp; w != nil {
		f.warnf("the warm-up is taken at its shortest; it may last %s", span(w.AtMost))
	}
	if r := a.Plan.Refine; r != nil && a.Refine == nil {
		f.warnf("the refinement is not foreseen: it may add %d points", r.AtMost)
	}
	if h := a.Plan.Dwell.Heralds; h > 0 && a.Expect == nil {
		f.warnf("dwells end on counts of %s, which are not known here: each is taken at its longest, %s", a.Plan.Dwell.Trigger, span(a.Plan.Dwell.Time))
	}
}

// zeros are the axes whose zero is verified, and how often in all: before the first light, every so
// often, and after the last.
func (f *Forecast) zeros() (names []string, times int) {
	for _, a := range f.bench.Axes {
		if a.Verify == nil {
			continue
		}
		names = append(names, string(a.Name))
		times += 2
		if a.Verify.Every > 0 {
			times += int(f.Duration.Duration() / a.Verify.Every)
		}
	}
	return names, times
}

func (f *Forecast) warnOfEmpty() {
	why := map[string]int{}
	first := map[string]int{}
	for i, p := range f.plan.Points {
		if p.Empty != "" {
			if why[p.Empty] == 0 {
				first[p.Empty] = i
			}
			why[p.Empty]++
		}
	}
	reasons := make([]string, 0, len(why))
	for r := range why {
		reasons = append(reasons, r)
	}
	sort.Slice(reasons, func(i, j int) bool { return first[reasons[i]] < first[reasons[j]] })
	for i, r := range reasons {
		if i == mostTold {
			f.warnf("and points without emission for %d reasons more", len(reasons)-mostTold)
			break
		}
		f.warnf("no emission at %s, from point %d on: %s", plural(why[r], "point"), first[r], r)
	}
}

// warnOfBand holds the band that each filter heralds against the other filter: 1/l_i = 1/l_p - 1/l_s at
// both edges.
func (f *Forecast) warnOfBand(b *Band) {
	if b == nil || b.PumpNm <= 0 || b.WidthNm[0] <= 0 || b.WidthNm[1] <= 0 {
		return
	}
	partner := func(nm float64) float64 { return 1 / (1/b.PumpNm - 1/nm) }
	look := func(trigger int) {
		other := 1 - trigger
		p, q := partner(b.CentreNm[trigger]-b.WidthNm[trigger]/2), partner(b.CentreNm[trigger]+b.WidthNm[trigger]/2)
		low, high := math.Min(p, q), math.Max(p, q)
		from, to := b.CentreNm[other]-b.WidthNm[other]/2, b.CentreNm[other]+b.WidthNm[other]/2
		if low < from-1e-9 || high > to+1e-9 {
			f.warnf("the filter of %s passes %.2f to %.2f nm, the band that %s heralds is %.2f to %.2f nm: partners are lost", b.Names[other], from, to, b.Names[trigger], low, high)
		}
	}
	for _, r := range f.plan.Results {
		if r.Kind != scan.Efficiency {
			continue
		}
		for i := range 2 {
			if r.Trigger == b.Channels[i] {
				look(i)
			}
		}
		return
	}
	// Without a trigger the wider one must take all that the narrower one heralds.
	if b.WidthNm[0] <= b.WidthNm[1] {
		look(0)
	} else {
		look(1)
	}
}

// worst keeps the largest of something and where it is.
type worst struct {
	value float64
	point int
	many  int
}

func (w *worst) see(value, bound float64, point int) {
	if value > w.value {
		w.value, w.point = value, point
	}
	if value > bound {
		w.many++
	}
}

// warnOfRates is about what the detectors and the counter see.
func (f *Forecast) warnOfRates(a Ask) {
	r := f.rates
	for _, w := range r.warnings {
		f.warnf("%s", w)
	}
	if r.failed != nil {
		f.warnf("no rates at point %d: %v", r.failedAt, r.failed)
	}
	if r.error > mostInterpolate {
		f.warnf("rates between the %d places that were worked out differ from the model by up to %s: a sweep with fewer points would show more", r.evaluated, share(r.error))
	}
	ns := len(f.singles)
	trip, floor, load := make([]worst, len(a.Bench.Detectors)), make([]worst, len(a.Bench.Detectors)), make([]worst, len(a.Bench.Detectors))
	highest := make([]worst, len(f.channels()))
	brightest := make([]worst, len(f.pairs))
	under := worst{}
	column := make([]int, len(a.Bench.Detectors))
	for d, x := range a.Bench.Detectors {
		column[d] = slices.Index(f.singles, x.Channel)
		floor[d].value = math.Inf(-1)
	}
	trigger := slices.Index(f.channels(), a.Plan.Dwell.Trigger)
	got := make(row, len(r.channels))
	longest := a.Plan.Dwell.Time.Seconds()
	accidental := make([]float64, len(f.pairs))
	for i, p := range a.Plan.Points {
		if p.Empty != "" {
			continue
		}
		r.into(i, got)
		if math.IsNaN(got[0]) {
			continue
		}
		for d, x := range a.Bench.Detectors {
			if column[d] < 0 {
				continue
			}
			hz := got[column[d]]
			if x.TripHz > 0 {
				trip[d].see(hz, x.TripHz, i)
			}
			if x.FloorHz > 0 {
				floor[d].see(-hz, -x.FloorHz/2, i)
			}
			load[d].see(hz*x.DeadTimeS, mostLoad, i)
		}
		for k := range highest {
			highest[k].see(got[k], math.Inf(1), i)
		}
		for k := range f.pairs {
			if got[ns+k] > brightest[k].value {
				accidental[k] = got[ns+len(f.pairs)+k] / got[ns+k]
			}
			brightest[k].see(got[ns+k], math.Inf(1), i)
		}
		if h := a.Plan.Dwell.Heralds; h > 0 && trigger >= 0 {
			under.see(float64(h)-got[trigger]*longest, 0, i)
		}
	}
	for d, x := range a.Bench.Detectors {
		if trip[d].many > 0 {
			f.warnf("%s would count %s /s at point %d, above its trip rate of %s /s; so at %s", x.Name, number(trip[d].value, 3), trip[d].point, number(x.TripHz, 3), plural(trip[d].many, "point"))
		}
		if floor[d].many > 0 {
			f.warnf("%s would count %s /s at point %d, below half of its floor of %s /s, and be taken for latched; so at %s", x.Name, number(-floor[d].value, 3), floor[d].point, number(x.FloorHz, 3), plural(floor[d].many, "point"))
		}
		if load[d].many > 0 {
			f.warnf("count rate times dead time of %s is %.3f at point %d, above %.1f: its correction will matter; so at %s", x.Name, load[d].value, load[d].point, mostLoad, plural(load[d].many, "point"))
		}
	}
	f.warnOfOverflow(a, highest)
	for k, c := range f.pairs {
		if accidental[k] > mostAccidental && f.wants(c) {
			f.warnf("%s of the coincidences on %s are accidental at point %d, where there are most: less pump power or a shorter window would help", share(accidental[k]), c, brightest[k].point)
		}
	}
	if under.many > 0 {
		f.warnf("%s of %s are not reached within %s at %s, by %s at most (point %d): these dwells last their longest", plural(int(a.Plan.Dwell.Heralds), "count"), a.Plan.Dwell.Trigger, span(a.Plan.Dwell.Time), plural(under.many, "point"), number(under.value, 3), under.point)
	}
	f.warnOfSpans(a)
}

// wants says whether a result looks at a channel of coincidences, or none looks at anything.
func (f *Forecast) wants(c drivers.Channel) bool {
	return len(f.plan.Results) == 0 || slices.ContainsFunc(f.plan.Results, func(q scan.Result) bool { return f.lookedAt(q) == c })
}

// lookedAt is the channel that a result is made of.
func (f *Forecast) lookedAt(q scan.Result) drivers.Channel {
	if q.Kind != scan.Efficiency {
		return q.Of
	}
	for _, c := range f.pairs {
		if of := f.bench.Counter.Coincidences[c]; of == [2]drivers.Channel{q.Trigger, q.UnderTest} || of == [2]drivers.Channel{q.UnderTest, q.Trigger} {
			return c
		}
	}
	return ""
}

// warnOfOverflow is about the counter's bits in the longest gate.
func (f *Forecast) warnOfOverflow(a Ask, highest []worst) {
	if a.Bench.Counter.Bits <= 0 {
		return
	}
	gate := a.Plan.Dwell.Slice
	for _, d := range []scan.Dwell{cadenceOf(a.Plan.Background), referenceOf(a.Plan.Reference)} {
		gate = max(gate, d.Slice)
	}
	full := math.Pow(2, float64(a.Bench.Counter.Bits))
	for k, c := range f.channels() {
		if n := highest[k].value * gate.Seconds(); n >= full {
			f.warnf("channel %s would count %s in a gate of %s at point %d, beyond the counter's %d bits: %s; want slices of %s at most", c, number(n, 3), span(gate), highest[k].point, a.Bench.Counter.Bits, number(full, 10),
				span(time.Duration(full/highest[k].value*float64(time.Second)).Truncate(time.Millisecond)))
		}
	}
}

func cadenceOf(b *scan.Background) scan.Dwell {
	if b == nil {
		return scan.Dwell{}
	}
	return b.Dwell
}

func referenceOf(r *scan.Reference) scan.Dwell {
	if r == nil {
		return scan.Dwell{}
	}
	return r.Dwell
}

// warnOfSpans finds results whose peak lies at an end of the sweep or beyond.
func (f *Forecast) warnOfSpans(a Ask) {
	for _, q := range a.Plan.Results {
		channel, along := f.lookedAt(q), q.Along
		if q.Kind == scan.Efficiency {
			along = q.PlateauOf
		}
		k := slices.Index(f.channels(), channel)
		if k < 0 || along == "" && q.Setting == "" {
			continue
		}
		f.warnOfSpan(q, k, along)
	}
}

// reach is what a sweep along an axis meets at one place of the axis against which it is taken.
type reach struct {
	at                   string // empty: the result has one place alone
	low, high, top       float64
	lowHz, highHz, topHz float64
}

func (r *reach) see(at, hz float64) {
	switch {
	case at < r.low:
		r.low, r.lowHz = at, hz
	case at == r.low:
		r.lowHz = math.Max(r.lowHz, hz)
	}
	switch {
	case at > r.high:
		r.high, r.highHz = at, hz
	case at == r.high:
		r.highHz = math.Max(r.highHz, hz)
	}
	if hz > r.topHz {
		r.top, r.topHz = at, hz
	}
}

func (f *Forecast) warnOfSpan(q scan.Result, k int, along drivers.AxisName) {
	place := func(p scan.Point) (at float64, ok bool) {
		for _, t := range p.Axes {
			if along != "" && t.Axis == along {
				return t.Angle.Degrees(), true
			}
		}
		for _, t := range p.Settings {
			if along == "" && t.Setting == q.Setting {
				return t.Value, true
			}
		}
		return 0, false
	}
	got := make(row, len(f.rates.channels))
	var places []*reach
	known := map[unit.Angle]*reach{}
	for i, p := range f.plan.Points {
		at, ok := place(p)
		if !ok || p.Empty != "" || !stands(p, q.At) {
			continue
		}
		f.rates.into(i, got)
		hz := got[k]
		if math.IsNaN(hz) {
			continue
		}
		var against unit.Angle
		text := ""
		if q.Against != "" {
			for _, t := range p.Axes {
				if t.Axis == q.Against {
					against = t.Angle
				}
			}
		}
		one := known[against]
		if one == nil {
			if q.Against != "" {
				text = fmt.Sprintf("at %s %s ", q.Against, against)
			}
			one = &reach{at: text, low: math.Inf(1), high: math.Inf(-1), topHz: math.Inf(-1)}
			known[against] = one
			places = append(places, one)
		}
		one.see(at, hz)
	}
	name, unitOf := string(along), "deg"
	if along == "" {
		name, unitOf = string(q.Setting), f.unitOf(q.Setting)
	}
	curve := q.Kind == scan.TuningCurve || q.Kind == scan.ConjugateMap
	told := 0
	for _, r := range places {
		if !(r.high > r.low) || !(r.topHz > 0) {
			continue
		}
		where := ""
		switch {
		case r.top == r.low:
			where = "lower"
		case r.top == r.high:
			where = "upper"
		}
		half := r.topHz / 2
		flank := where == "" && !curve && (r.lowHz > half || r.highHz > half)
		if where == "" && !flank {
			continue
		}
		if told++; told > mostTold {
			continue
		}
		if where != "" {
			f.warnf("%sthe span of %s, %s to %s %s, misses the peak: the most counts of %s (%s /s) are at its %s end", r.at, name, number(r.low, 4), number(r.high, 4), unitOf, f.channels()[k], number(r.topHz, 3), where)
		} else {
			f.warnf("%sthe span of %s, %s to %s %s, holds one flank at most: at its ends there are %s and %s counts of %s a second, at the top %s", r.at, name, number(r.low, 4), number(r.high, 4), unitOf, number(r.lowHz, 3), number(r.highHz, 3), f.channels()[k], number(r.topHz, 3))
		}
	}
	if told > mostTold {
		f.warnf("and so at %s more of %s", plural(told-mostTold, "place"), q.Against)
	}
}

// stands says whether a point has the axes where a result wants them.
func stands(p scan.Point, at []scan.AxisTarget) bool {
	for _, want := range at {
		for _, t := range p.Axes {
			if t.Axis == want.Axis && t.Angle != want.Angle {
				return false
			}
		}
	}
	return true
}

func plural(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

// clock is a moment on the wall of whoever asked.
func (f *Forecast) clock(t time.Time) string {
	t = t.In(f.local).Round(time.Minute)
	if b := f.BeginsAt.In(f.local); t.YearDay() == b.YearDay() && t.Year() == b.Year() || t.Sub(b) < 20*time.Hour {
		return t.Format("15:04")
	}
	if t.Year() != f.BeginsAt.In(f.local).Year() {
		return t.Format("15:04 on 2 Jan 2006")
	}
	return t.Format("15:04 on 2 Jan")
}

// span prints a duration as people say it, no finer than a forecast knows it.
func span(d time.Duration) string {
	switch {
	case d >= 48*time.Hour:
		return fmt.Sprintf("%d d %d h", d/(24*time.Hour), d%(24*time.Hour)/time.Hour)
	case d >= 10*time.Minute:
		d = d.Round(time.Minute)
	case d >= 10*time.Second:
		d = d.Round(time.Second)
	default:
		return fmt.Sprintf("%.3g s", d.Seconds()) // beside one another in a table: one unit
	}
	return unit.Span(d)
}
