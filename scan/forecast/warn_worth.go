package forecast

import (
	"math"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

const (
	mostHeld = 0.005 // share of the pairs that a background may still hold
	sigmas   = 4     // bounds of references that are nearer to their counting's error are broken by chance
)

// warnOfWorth is about numbers that cannot be what they are called, and about readings that are not
// what the recipe takes them for.
func (f *Forecast) warnOfWorth(a Ask) {
	for i, r := range f.Results {
		if r.Kind != string(scan.Efficiency) || r.Value == nil {
			continue
		}
		if v := *r.Value; v > 1 || v < 0 {
			f.warnf("the %s comes out as %s, and none can be %s: look at its background, the coincidence window and the declared values", f.subject(i), share(v), map[bool]string{true: "above 1", false: "below 0"}[v > 1])
		}
	}
	if f.rates != nil {
		f.warnOfBackground(a)
	}
	f.warnOfReferences(a)
	f.warnOfRefinement(a)
	f.warnOfSteps(a)
}

// warnOfBackground asks what is left of the pairs where the background is counted: they are taken
// from the trigger's counts as if they had no partners, and an efficiency comes out too high by that.
func (f *Forecast) warnOfBackground(a Ask) {
	g := a.Plan.Background
	if g == nil || len(f.pairs) == 0 {
		return
	}
	k := 0
	for i, c := range f.pairs {
		if f.wants(c) {
			k = i
			break
		}
	}
	ns, np := len(f.singles), len(f.pairs)
	got := make(row, len(f.rates.channels))
	best, most := -1, 0.0
	for i, p := range a.Plan.Points {
		if p.Empty != "" {
			continue
		}
		f.rates.into(i, got)
		if net := got[ns+k] - got[ns+np+k]; net > most {
			best, most = i, net
		}
	}
	if best < 0 {
		return
	}
	held := func(by unit.Angle) float64 {
		p := a.Plan.Points[best]
		axes := append(append([]scan.AxisTarget{}, p.Axes...), scan.AxisTarget{Axis: g.Axis, Angle: g.From + by})
		x, err := a.Expect(axes, p.Settings)
		if err != nil {
			return math.NaN()
		}
		return (x.CountsHz[f.pairs[k]] - x.AccidentalsHz[f.pairs[k]]) / most
	}
	left := held(g.By)
	if !(left > mostHeld) {
		return
	}
	want := "want an angle, or an axis, at which none are left"
	for _, axis := range a.Bench.Axes {
		if axis.Name != g.Axis || axis.Role != "pump_waveplate" {
			continue
		}
		least := left
		for deg := 5.0; deg <= 90; deg += 5 {
			for _, by := range []unit.Angle{unit.Degrees(deg), unit.Degrees(-deg)} {
				if h := held(by); axis.Limits(g.From+by) && h < least-1e-9 {
					least, want = h, "want by: "+by.String()
				}
			}
		}
	}
	f.warnf("the background (turn: %s, by: %s) still holds %s of the pairs: they are taken for counts without a partner, and an efficiency comes out too high; %s", g.Axis, g.By, share(left), want)
}

// warnOfReferences is about sets that take longer than the time between two, and about bounds at a
// place that is provisional: at one that is known they are refused where they are nearer than four
// times their own counting's error, by the same formulas.
//
// Of C coincidences, N of them true, and S singles, counted twice for the same time: the singles'
// change has the standard uncertainty √(2/S), that of N/S is √(2 (C/N² - 1/S)), and that of a
// Gaussian's centre by its flanks c ± w is w/(4 ln 2) √(2 (C₁/N₁² + C₂/N₂²)).
func (f *Forecast) warnOfReferences(a Ask) {
	q := a.Plan.Reference
	if q == nil {
		return
	}
	if q.Every > 0 && f.longestSet > q.Every {
		f.warnf("one set of references takes %s with its moves and settling, longer than its every: %s: little else would be counted", span(f.longestSet), span(q.Every))
	}
	if !f.Provisional || a.Expect == nil || len(a.Plan.Points) == 0 {
		return
	}
	type counts struct{ least, most, pairs, net float64 }
	expect := func(p scan.ReferencePlace) counts {
		x, err := a.Expect(p.Axes, a.Plan.Points[0].Settings)
		if err != nil {
			return counts{}
		}
		t := q.Dwell.Time.Seconds()
		of := func(c drivers.Channel) float64 { return t * x.CountsHz[c] }
		return counts{math.Min(of(q.Trigger), of(q.UnderTest)), math.Max(of(q.Trigger), of(q.UnderTest)), of(q.Pairs), of(q.Pairs) - t*x.AccidentalsHz[q.Pairs]}
	}
	tell := func(name string, bound, u float64, show func(float64) string) {
		if bound > 0 && !(bound >= sigmas*u) {
			f.warnf("the references' bound %s: %s is less than four times its own counting's error (%s in %s) at this provisional place: want %s, or a longer dwell", name, show(bound), show(u), span(q.Dwell.Time), show(sigmas*u))
		}
	}
	degrees := func(v float64) string { return number(v, 2) + " deg" }
	flanks := map[drivers.AxisName][]scan.ReferencePlace{}
	var arms []drivers.AxisName
	for _, p := range q.Places {
		if p.On != scan.Top {
			if len(flanks[p.Arm]) == 0 {
				arms = append(arms, p.Arm)
			}
			flanks[p.Arm] = append(flanks[p.Arm], p)
			continue
		}
		if x := expect(p); x.net > 0 {
			tell("singles", q.Bounds.Singles, math.Sqrt(2/x.least), share)
			tell("ratio", q.Bounds.Ratio, math.Sqrt(2*math.Max(0, x.pairs/(x.net*x.net)-1/x.most)), share)
		}
	}
	for _, arm := range arms {
		if len(flanks[arm]) != 2 {
			continue
		}
		variance, width := 0.0, 0.0
		for i, p := range flanks[arm] {
			x := expect(p)
			variance += x.pairs / (x.net * x.net)
			for _, t := range p.Axes {
				if t.Axis == arm {
					width += [2]float64{-1, 1}[i] * t.Angle.Degrees()
				}
			}
		}
		if u := math.Abs(width) / 2 / (4 * math.Ln2) * math.Sqrt(2*variance); !math.IsNaN(u) && !math.IsInf(u, 0) {
			tell("centre", q.Bounds.Centre.Degrees(), u, degrees)
		}
	}
}

// warnOfRefinement is about a refinement that ends with its points and not with what it wants.
func (f *Forecast) warnOfRefinement(a Ask) {
	q := a.Plan.Refine
	if q == nil || q.Below == 0 || a.Refine == nil || f.rates == nil {
		return
	}
	for i, r := range f.Results {
		if i >= len(a.Plan.Results) || a.Plan.Results[i].Along != q.Along || a.Plan.Results[i].Of != q.Of || r.Counting == nil {
			continue
		}
		if *r.Counting > q.Below.Degrees() {
			f.warnf("the refinement's u_below: %s is not reached: with %s added of at_most: %d the %s is known to %s from counting", q.Below, plural(f.PointsAdded, "point"), q.AtMost, f.subject(i), f.inUnit(*r.Counting, r))
		}
		return
	}
	if f.PointsAdded >= q.AtMost {
		f.warnf("the refinement adds all of its at_most: %d points, and may end before u_below: %s is reached", q.AtMost, q.Below)
	}
}

// warnOfSteps is about neighbours that a proved position cannot tell apart.
func (f *Forecast) warnOfSteps(a Ask) {
	least := map[drivers.AxisName]unit.Angle{}
	for i := 1; i < len(a.Plan.Points); i++ {
		p, q := a.Plan.Points[i-1], a.Plan.Points[i]
		if len(p.Axes) != len(q.Axes) {
			continue
		}
		changed, many := -1, 0
		for k := range p.Axes {
			if p.Axes[k] != q.Axes[k] {
				changed = k
				many++
			}
		}
		if many != 1 || p.Axes[changed].Axis != q.Axes[changed].Axis {
			continue
		}
		name, step := p.Axes[changed].Axis, (p.Axes[changed].Angle - q.Axes[changed].Angle).Abs()
		if old, known := least[name]; !known || step < old {
			least[name] = step
		}
	}
	for _, axis := range a.Bench.Axes {
		if step, known := least[axis.Name]; known && step < axis.Tolerance {
			f.warnf("steps of %s along %s are below its tolerance of %s: neighbouring readings may be taken at the same place", step, axis.Name, axis.Tolerance)
		}
	}
}

// warnOfGuards is about guards that what is expected would break.
func (f *Forecast) warnOfGuards(a Ask) {
	for _, g := range a.Plan.Guards {
		unitOf := "/s"
		var value func(int) float64
		gate := min(a.Plan.Dwell.Slice, a.Plan.Dwell.Time)
		got := make(row, 0)
		if f.rates != nil {
			got = make(row, len(f.rates.channels))
		}
		switch {
		case g.Rate != "" && f.rates != nil:
			k := indexOf(f.channels(), g.Rate)
			if k < 0 {
				continue
			}
			value = func(i int) float64 { f.rates.into(i, got); return got[k] }
		case g.DarkRate != "" && f.rates != nil && a.Plan.Dark != nil && f.rates.dark != nil:
			gate = a.Plan.Dark.Dwell.Time
			if hz := f.rates.dark[g.DarkRate]; beyond(hz, g.Low, g.High, gate) {
				f.warnf("guard %q: darks of %s are expected to count %s /s, outside %s to %s /s: %s", g.Name, g.DarkRate, number(hz, 3), number(g.Low, 6), number(g.High, 6), then(g.Otherwise))
			}
			continue
		case g.Sensor != "" && a.Bench.PumpPower != nil && a.Bench.PumpPower.Sensor == g.Sensor:
			unitOf, gate = a.Bench.PumpPower.Unit, 0
			value = func(i int) float64 { return a.Bench.PumpPower.at(a.Plan.Points[i]) }
		default:
			continue
		}
		w := worst{value: math.Inf(-1)}
		worstValue := 0.0
		for i, p := range a.Plan.Points {
			if p.Empty != "" {
				continue
			}
			v := value(i)
			if math.IsNaN(v) || !beyond(v, g.Low, g.High, gate) {
				continue
			}
			if off := math.Max(g.Low-v, v-g.High); off > w.value {
				w.value, w.point, worstValue = off, i, v
			}
			w.many++
		}
		if w.many > 0 {
			f.warnf("guard %q: %s %s is expected at point %d, outside %s to %s %s, and so at %s: %s", g.Name, number(worstValue, 3), unitOf, w.point, number(g.Low, 6), number(g.High, 6), unitOf, plural(w.many, "point"), then(g.Otherwise))
		}
	}
}

func indexOf(channels []drivers.Channel, c drivers.Channel) int {
	for k, known := range channels {
		if known == c {
			return k
		}
	}
	return -1
}

// beyond is the engine's own allowance: four times what the bound's count scatters in a gate.
func beyond(v, low, high float64, gate time.Duration) bool {
	if gate <= 0 {
		return v < low || v > high
	}
	t := gate.Seconds()
	return v*t < low*t-4*math.Sqrt(math.Max(low*t, 0)) || v*t > high*t+4*math.Sqrt(math.Max(high*t, 0))+4
}

func then(t scan.Then) string {
	switch t {
	case scan.Skip:
		return "these points would be skipped"
	case scan.Stop:
		return "the run would stop"
	}
	return "the run would hold"
}
