package forecast

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/estimate"
)

// Aim is an uncertainty that is wanted: a share of the value, or a number in the result's unit.
type Aim struct {
	Text     string
	Share    float64 // of the value; 0: Absolute counts
	Absolute float64 // degrees, or seconds
	Time     bool    // Absolute is a time
}

// ParseAim reads "0.5 %", "0.01 deg" or "0.2 ns".
func ParseAim(text string) (Aim, error) {
	base, kind, _, err := unit.ParseAny(text)
	if err != nil {
		return Aim{}, fmt.Errorf("aim %q: %w", text, err)
	}
	a := Aim{Text: text}
	switch kind {
	case unit.Share:
		a.Share = base
	case unit.Time:
		a.Absolute, a.Time = base, true
	default:
		angle, aerr := unit.ParseAngle(text)
		if aerr != nil {
			return Aim{}, fmt.Errorf("aim %q; want a share of the value such as \"0.5 %%\", an angle such as \"0.01 deg\" or a time", text)
		}
		a.Absolute = angle.Degrees()
	}
	if !(a.Share > 0 || a.Absolute > 0) {
		return Aim{}, fmt.Errorf("aim %q; want more than nothing", text)
	}
	return a, nil
}

// Fits says whether the aim is one for a plan's first result: a share for an efficiency or a drift, an
// angle or a time for a place.
func (a Aim) Fits(results []scan.Result) error {
	if len(results) == 0 {
		return fmt.Errorf("aim %q: the recipe asks for no result; want a key \"result\"", a.Text)
	}
	q := results[0]
	what := strings.ReplaceAll(string(q.Kind), "_", " ")
	switch q.Kind {
	case scan.Efficiency, scan.Drift:
		if a.Share == 0 {
			return fmt.Errorf("aim %q for the recipe's first result, a number without unit (%s); want a share such as \"0.5 %%\"", a.Text, what)
		}
	case scan.Delay:
		if a.Share > 0 || !a.Time {
			return fmt.Errorf("aim %q for the recipe's first result, a %s; want a time such as \"0.2 ns\"", a.Text, what)
		}
	default:
		if a.Share > 0 || a.Time {
			return fmt.Errorf("aim %q for the recipe's first result, an angle (%s); want one such as \"0.01 deg\"", a.Text, what)
		}
	}
	return nil
}

// worth asks the estimate what the run's counts would come to.
func (f *Forecast) worth(a Ask, m *rowMaker) {
	if len(a.Plan.Results) == 0 {
		return
	}
	refuse := func(why string) {
		for _, r := range a.Plan.Results {
			f.Results = append(f.Results, protocol.ForecastResult{Kind: string(r.Kind), FloorFrom: []protocol.ForecastShare{}, Because: []string{why}})
		}
	}
	switch {
	case a.Results == nil:
		refuse("not forecast: nothing here works results out")
		return
	case a.Expect == nil:
		refuse("not forecast: the bench file does not describe the optics, so that no counts can be expected")
		return
	case !m.few:
		refuse(fmt.Sprintf("not forecast: more than %d readings", MostRows))
		return
	}
	results, err := a.Results(m.rows)
	if err != nil {
		refuse("not forecast: " + err.Error())
		return
	}
	for i, r := range results {
		one := split(r)
		if i < len(a.Plan.Results) {
			one.Kind = string(a.Plan.Results[i].Kind)
		}
		f.Results = append(f.Results, one)
	}
	if len(f.Results) > 0 {
		f.Uncertainty, f.Floor = f.Results[0].Uncertainty, f.Results[0].Floor
	}
}

// split parts a result's uncertainty into what more counting makes smaller and what it does not: the
// rows of the budget that come from scatter (evaluation A), and all others.
func split(r estimate.Result) protocol.ForecastResult {
	out := protocol.ForecastResult{Kind: r.Kind, Unit: r.Unit, Value: r.Value, Uncertainty: r.U, FloorFrom: []protocol.ForecastShare{}, Because: append([]string{}, r.Because...)}
	if r.Value == nil || r.U == nil {
		if len(out.Because) == 0 {
			out.Because = []string{"not forecast: this kind of result has no single number"}
		}
		out.Value, out.Uncertainty = nil, nil
		return out
	}
	if len(r.Budget) == 0 {
		out.Because = append(out.Because, "not split: the result has no budget of its own")
		return out
	}
	floor := 0.0
	for _, row := range r.Budget {
		if row.Evaluation == estimate.TypeA {
			continue
		}
		floor += math.Copysign(row.Contribution*row.Contribution, row.Contribution)
		out.FloorFrom = append(out.FloorFrom, protocol.ForecastShare{Quantity: row.Quantity, Contribution: row.Contribution})
	}
	slices.SortStableFunc(out.FloorFrom, func(a, b protocol.ForecastShare) int {
		switch {
		case math.Abs(a.Contribution) > math.Abs(b.Contribution):
			return -1
		case math.Abs(a.Contribution) < math.Abs(b.Contribution):
			return 1
		}
		return strings.Compare(a.Quantity, b.Quantity)
	})
	floor = math.Sqrt(math.Max(0, floor))
	counting := math.Sqrt(math.Max(0, *r.U**r.U-floor*floor))
	out.Floor, out.Counting = &floor, &counting
	return out
}

// besideVariance is the part of a result's variance that the backgrounds' own counting makes.
func besideVariance(r estimate.Result) float64 {
	v := 0.0
	for _, row := range r.Budget {
		if row.Symbol == "B" && row.Evaluation == estimate.TypeA {
			v += row.Contribution * row.Contribution
		}
	}
	return v
}

// aim works out how long each reading has to be.
//
// Let the light readings count for a time L and the backgrounds for a time B in all. Counting's
// variance is then v(L, B) = a/L + b/B beside the floor, with a = v_light L and b = v_beside B as they
// are now. With T = L + B given, dv = 0 demands a/L² = b/B² (Lagrange), so that
//
//	B/L = √(b/a),   L = T √a/(√a + √b),   v = (√a + √b)²/T.
//
// For v wanted: L = √a (√a + √b)/v and B = √b (√a + √b)/v. Darks that only watch take nothing from
// the variance: their best share is none.
func (f *Forecast) aim(a Ask, m *rowMaker) {
	out := &protocol.ForecastAim{Text: a.Aim.Text}
	f.Aim = out
	no := func(format string, args ...any) { out.Because = fmt.Sprintf(format, args...) }
	if len(f.Results) == 0 || f.Results[0].Counting == nil || f.Results[0].Value == nil {
		no("not forecast: no result whose uncertainty is known")
		return
	}
	first := f.Results[0]
	if err := a.Aim.Fits(a.Plan.Results); err != nil {
		no("%v", err)
		return
	}
	out.Wanted = a.Aim.Absolute
	switch {
	case a.Plan.Results[0].Kind == scan.Drift: // a relative change already
		out.Wanted = a.Aim.Share
	case a.Aim.Share > 0:
		out.Wanted = a.Aim.Share * math.Abs(*first.Value)
	case first.Unit == "ns":
		out.Wanted *= 1e9
	}
	results, err := a.Results(m.rows)
	if err != nil {
		no("%v", err)
		return
	}
	beside := besideVariance(results[0])
	light := math.Max(0, *first.Counting**first.Counting-beside)
	lightS, besideS := 0.0, 0.0
	kind := f.besideKind()
	for _, r := range m.rows.Readings {
		switch r.Kind {
		case protocol.Light:
			lightS += r.Gate.Duration().Seconds()
		case kind:
			besideS += r.Gate.Duration().Seconds()
		}
	}
	as, bs := math.Sqrt(light*lightS), math.Sqrt(beside*besideS)
	if as > 0 {
		best := bs / (as + bs)
		out.BestShare = &best
	}
	if all := lightS + besideS; all > 0 {
		share := besideS / all
		out.Share = &share
	}
	left := out.Wanted*out.Wanted - *first.Floor**first.Floor
	if left <= 0 {
		because := "the floor is " + f.inUnit(*first.Floor, first) + f.floorNames(first)
		no("unreachable, because %s", because)
		return
	}
	if as == 0 {
		no("unreachable, because nothing is counted")
		return
	}
	factor := as * (as + bs) / left / lightS
	plan := f.plan
	scaled := func(d scan.Dwell, by float64) scan.Dwell {
		whole := d.Time == d.Slice
		n := max(1, math.Ceil(float64(d.Time)*by/float64(time.Second)-1e-9))
		if d.Time < time.Second {
			n = math.Ceil(float64(d.Time)*by/float64(time.Millisecond)) / 1000
		}
		d.Time = time.Duration(n * float64(time.Second))
		if d.Heralds > 0 {
			d.Heralds = uint64(math.Ceil(float64(d.Heralds) * by))
		}
		if whole || d.Slice > d.Time {
			d.Slice = min(d.Time, max(d.Slice, d.Time))
		}
		return d
	}
	plan.Dwell = scaled(plan.Dwell, factor)
	dwell := protocol.Seconds(plan.Dwell.Time)
	out.Dwell = &dwell
	if plan.Dwell.Heralds > 0 {
		out.Heralds = &plan.Dwell.Heralds
	}
	if besideS > 0 && bs > 0 {
		by := bs * (as + bs) / left / besideS
		var d scan.Dwell
		if kind == protocol.Background {
			b := *plan.Background
			b.Dwell = scaled(b.Dwell, by)
			plan.Background, d = &b, b.Dwell
		} else {
			b := *plan.Dark
			b.Dwell = scaled(b.Dwell, by)
			plan.Dark, d = &b, b.Dwell
		}
		s := protocol.Seconds(d.Time)
		out.Beside = &s
	}
	out.Reachable = true
	// The same forecast with these dwells: the estimate has the last word.
	again := a
	again.Plan, again.Aim = plan, nil
	if plan.Schedule.FinishBy.After(time.Time{}) {
		again.Plan.Schedule.FinishBy = time.Time{} // how long it takes, not what fits
	}
	then, rows, err := course1(again)
	if err != nil {
		no("%v", err)
		return
	}
	then.worth(again, rows)
	out.Duration, out.Uncertainty = &then.Duration, then.Uncertainty
	if end := f.plan.Schedule.FinishBy; !end.IsZero() && then.FinishesAt.After(end) {
		out.Because = fmt.Sprintf("that is over at %s, after the end that the recipe sets", f.clock(then.FinishesAt.Time))
	}
}

// besideKind is what the estimate takes for the counts without a partner.
func (f *Forecast) besideKind() protocol.ReadingKind {
	if f.plan.Background != nil {
		return protocol.Background
	}
	return protocol.Dark
}

// inUnit prints an uncertainty of a result: as a share of an efficiency, in its unit otherwise.
func (f *Forecast) inUnit(u float64, r protocol.ForecastResult) string {
	switch {
	case r.Unit == "1" && r.Kind == string(scan.Efficiency) && r.Value != nil && *r.Value != 0:
		return share(u / math.Abs(*r.Value))
	case r.Unit == "1": // a relative change
		return share(u)
	case r.Unit == "s":
		return shortTime(u * 1e12)
	case r.Unit == "ns":
		return shortTime(u * 1e3)
	case r.Unit == "deg" && u < 0.0995:
		return number(u*1e3, 2) + " mdeg"
	}
	return strings.TrimSpace(number(u, 2) + " " + r.Unit)
}

func shortTime(ps float64) string {
	if ps >= 995 {
		return number(ps/1e3, 2) + " ns"
	}
	return number(ps, 2) + " ps"
}

// share prints a share in percent, to two digits where there are not more before the point.
func share(v float64) string {
	if v >= 0.1 {
		return fmt.Sprintf("%.0f %%", 100*v)
	}
	return number(100*v, 2) + " %"
}

// floorNames says what a floor is made of: what alone is a quarter of its variance or more.
func (f *Forecast) floorNames(r protocol.ForecastResult) string {
	if r.Floor == nil || *r.Floor == 0 {
		return ""
	}
	var names []string
	path := 0.0
	for _, s := range r.FloorFrom {
		if strings.HasPrefix(s.Quantity, "path: ") {
			path += s.Contribution * s.Contribution
		}
	}
	whole := *r.Floor * *r.Floor
	if path > whole/4 {
		names = append(names, "path")
	}
	for _, s := range r.FloorFrom {
		if !strings.HasPrefix(s.Quantity, "path: ") && s.Contribution*s.Contribution > whole/4 {
			name, _, _ := strings.Cut(s.Quantity, " (")
			name, _, _ = strings.Cut(name, ", one-sided")
			names = append(names, name)
		}
	}
	if len(names) == 0 {
		return ""
	}
	return ": " + strings.Join(names, ", ")
}
