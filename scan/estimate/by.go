package estimate

import (
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"strings"

	"gonum.org/v1/gonum/stat/distuv"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// BySetting is an efficiency at several values of a setting, and the straight line through them. Own
// uncertainties are those that the values do not share: counting. The rest is common, so it moves
// the whole line, and its slope only as far as a constant matters more at one end than at the other.
type BySetting struct {
	Setting string    `json:"setting"`
	Unit    string    `json:"setting_unit"`
	Values  []ByValue `json:"values"`
	// The line's slope, per unit of the setting; null with fewer than three values.
	Slope       *float64 `json:"slope_per_setting_unit"`
	SlopeOwnU   float64  `json:"slope_own_standard_uncertainty"`
	SlopeCommon float64  `json:"slope_common_standard_uncertainty"`
	SlopeP      float64  `json:"slope_p"` // chance of a slope at least as large where there is none
	Significant bool     `json:"slope_significant"`
}

// ByValue is the efficiency at one value of the setting.
type ByValue struct {
	At      float64  `json:"at"`
	Value   *float64 `json:"value"` // null: see because
	U       float64  `json:"standard_uncertainty"`
	OwnU    float64  `json:"own_standard_uncertainty"`
	LineAt  float64  `json:"line"`
	Because []string `json:"because,omitempty"`
}

// slopeLevel is the chance of calling a slope significant where there is none.
const slopeLevel = 0.01

// EfficiencyBy is Efficiency at each value of a setting by itself, and the weighted mean of all. A
// slope against the pump's power tells of accidentals or dead time that are not rightly corrected.
//
// Backgrounds count for the value that they were taken at, since fluorescence follows the pump. Where
// a value has none of its own and the setting is a power, the others are scaled to it: what they have
// above the darks grows with the pump. With another setting the darks stand in, with a warning. Weights are 1/u^2 of the counting parts alone:
// constants common to all values are not averaged down, and neither are backgrounds that stand in for
// other values than their own.
func EfficiencyBy(rows Rows, bench Bench, model Model, q Question, setting string) (Result, error) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	no := &Refusal{}
	values, unitName := settingValues(rows, setting, no)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	r := newResult(rows, "efficiency")
	r.Coverage = q.Coverage
	by := &BySetting{Setting: setting, Unit: unitName}
	stood := standing(rows, setting)
	var good []Result
	var x []float64
	lent := false // backgrounds that several values share
	aside := map[int64]string{}
	for _, v := range values {
		part, scaled := rows.at(setting, v, stood, isPower(unitName))
		ask := q
		lent = lent || scaled
		if scaled {
			ask.pumpRatio = func(r protocol.Reading) float64 { return v / stood[r.Sequence] }
		}
		one, err := Efficiency(part, bench, model, ask)
		if refusal, ok := errors.AsType[*Refusal](err); ok {
			one = Refused(part, "efficiency", refusal)
			no.addf("at %s = %g %s: %s", setting, v, unitName, strings.Join(refusal.Reasons, "; "))
		} else if err != nil {
			return Result{}, err
		}
		one.Title = fmt.Sprintf("%s, %s = %g %s", rows.Title, setting, v, unitName)
		r.Parts = append(r.Parts, one)
		for _, a := range one.SetAside {
			aside[a.Sequence] = a.Reason
		}
		line := ByValue{At: v, Value: one.Value, Because: one.Because}
		if one.Value != nil {
			line.U = *one.U
			good, x = append(good, one), append(x, v)
			r.Used = append(r.Used, one.Used...)
			for _, w := range one.Warnings {
				r.Warnings = append(r.Warnings, fmt.Sprintf("at %s = %g %s: %s", setting, v, unitName, w))
			}
		}
		by.Values = append(by.Values, line)
	}
	if len(good) == 0 {
		return Result{}, no
	}
	slices.Sort(r.Used)
	for _, n := range slices.Sorted(maps.Keys(aside)) {
		r.SetAside = append(r.SetAside, Aside{n, aside[n]})
	}
	r.By = by
	own := func(row Row) bool {
		return row.Covariance || row.Evaluation == TypeA && !(lent && row.Symbol == backgroundSymbol)
	}
	if err := by.line(&r, good, x, own); err != nil {
		no.addf("%v", err)
		return Result{}, no
	}
	if len(no.Reasons) > 0 {
		r.Warnings = append(r.Warnings, fmt.Sprintf("%d of %d values gave no efficiency: %s", len(no.Reasons), len(values), strings.Join(no.Reasons, "; ")))
	}
	r.Condition = append(r.Condition, good[0].Condition...)
	r.quantity = good[0].quantity + ", mean over " + setting
	r.tidy()
	return r, nil
}

// settingValues lists what a setting was asked to have while light was counted, rising.
func settingValues(rows Rows, setting string, no *Refusal) (values []float64, unit string) {
	kinds, _ := rows.split()
	for _, row := range kinds[protocol.Light] {
		i := slices.IndexFunc(row.Settings, func(s protocol.Setting) bool { return s.Name == setting })
		if i < 0 {
			no.addf("reading %d: no setting %q; want a sweep of it", row.Sequence, setting)
			return nil, ""
		}
		unit = row.Settings[i].Unit
		values = append(values, row.Settings[i].Target)
	}
	if len(values) == 0 {
		no.addf("no light reading counts; want some at each value of %s", setting)
	}
	slices.Sort(values)
	return slices.Compact(values), unit
}

// standing is what a setting had at each reading, by its sequence: as the reading says, or where it
// was left by the one before. Of what came before the first nothing is known.
func standing(rows Rows, setting string) map[int64]float64 {
	stood := map[int64]float64{}
	last, known := 0.0, false
	for _, row := range rows.Readings {
		if i := slices.IndexFunc(row.Settings, func(s protocol.Setting) bool { return s.Name == setting }); i >= 0 {
			last, known = row.Settings[i].Target, true
		}
		if known {
			stood[row.Sequence] = last
		}
	}
	return stood
}

func isPower(name string) bool {
	_, err := unit.Parse("1 "+name, unit.Power)
	return err == nil
}

// at keeps what belongs to one value of a setting: light and backgrounds that had it, and darks, which
// no pump reaches. scaled says that no background had it and those of other powers stand in. Readings
// of another value are not set aside: they make another number.
func (r Rows) at(setting string, value float64, stood map[int64]float64, power bool) (part Rows, scaled bool) {
	own := slices.ContainsFunc(r.Readings, func(row protocol.Reading) bool {
		at, known := stood[row.Sequence]
		_, doubted := r.Doubtful[row.Sequence]
		return row.Kind == protocol.Background && row.Accepted && !doubted && known && at == value
	})
	part = r
	part.Readings = nil
	for _, row := range r.Readings {
		at, known := stood[row.Sequence]
		switch {
		case row.Kind == protocol.Dark, known && at == value:
		case row.Kind == protocol.Background && known && at > 0 && power && !own:
			scaled = true
		default:
			continue
		}
		part.Readings = append(part.Readings, row)
	}
	return part, scaled
}

// ownVariance is what rows of its own give of an efficiency's variance.
func ownVariance(r Result, own func(Row) bool) float64 {
	v := *r.U * *r.U
	for _, row := range r.Budget {
		if !own(row) {
			v -= row.Contribution * row.Contribution
		}
	}
	return math.Max(v, 1e-6**r.U**r.U) // rounding
}

// line fits the straight line and states the mean. own tells rows that the values do not share.
func (by *BySetting) line(r *Result, good []Result, x []float64, own func(Row) bool) error {
	var y, u []float64
	sumW, middle := 0.0, 0.0
	for i, one := range good {
		y, u = append(y, *one.Value), append(u, math.Sqrt(ownVariance(one, own)))
		w := 1 / (u[i] * u[i])
		sumW, middle = sumW+w, middle+w*x[i]
	}
	middle /= sumW
	var design [][]float64
	k := 1
	if len(good) > 2 {
		k = 2
	}
	for _, v := range x {
		design = append(design, []float64{1, v - middle}[:k])
	}
	fit, err := weighted(design, y, u)
	if err != nil {
		return err
	}
	d := fit.dispersion
	r.Dispersion = &d
	// What a constant common to all does to the mean and to the slope.
	type common struct {
		row         Row
		mean, slope float64
	}
	shared := map[string]*common{}
	var symbols []string
	spread := 0.0
	for i := range good {
		spread += (x[i] - middle) * (x[i] - middle) / (u[i] * u[i])
	}
	for i, one := range good {
		w := 1 / (u[i] * u[i])
		for _, row := range one.Budget {
			if own(row) {
				continue
			}
			c := shared[row.Symbol]
			if c == nil {
				c = &common{row: row}
				shared[row.Symbol] = c
				symbols = append(symbols, row.Symbol)
			}
			move := row.Sensitivity * row.U // by one standard uncertainty
			c.mean += w / sumW * move
			c.row.U = math.Max(c.row.U, row.U)
			if k == 2 {
				c.slope += w * (x[i] - middle) / spread * move
			}
		}
	}
	inputs := []Input{{Quantity: fmt.Sprintf("counting, %d values of %s together", len(good), by.Setting), Symbol: "eta", Unit: "1", Estimate: fit.p[0], U: fit.u(0) * d.factor(), Evaluation: TypeA, Distribution: Normal}}
	var moves []float64
	variance := 0.0
	for _, s := range symbols {
		c := shared[s]
		// Moved by its uncertainty, a constant moves the mean by what it moves each value by, weighted.
		inputs = append(inputs, Input{Quantity: c.row.Quantity, Symbol: s, Unit: c.row.Unit, Estimate: c.row.Estimate, U: c.row.U, Evaluation: c.row.Evaluation, Distribution: c.row.Distribution})
		moves = append(moves, c.mean/c.row.U)
		variance += c.slope * c.slope
	}
	b, err := Propagate(func(z []float64) float64 {
		v := z[0]
		for i, m := range moves {
			v += m * (z[i+1] - inputs[i+1].Estimate)
		}
		return v
	}, inputs, nil)
	if err != nil {
		return err
	}
	r.state(b)
	next := 0
	for i := range by.Values {
		if by.Values[i].Value != nil {
			by.Values[i].OwnU = u[next]
			next++
		}
		by.Values[i].LineAt = fit.p[0]
		if k == 2 {
			by.Values[i].LineAt += fit.p[1] * (by.Values[i].At - middle)
		}
	}
	if d.Significant {
		r.Warnings = append(r.Warnings, fmt.Sprintf("the values scatter about their line %.2f times as much as counting explains (p = %.2g)", d.Birge, d.P))
	}
	if k < 2 {
		return nil
	}
	by.Slope, by.SlopeOwnU, by.SlopeCommon = &fit.p[1], fit.u(1)*d.factor(), math.Sqrt(variance)
	by.SlopeP = 2 * distuv.UnitNormal.Survival(math.Abs(fit.p[1])/math.Hypot(by.SlopeOwnU, by.SlopeCommon))
	if by.Significant = by.SlopeP < slopeLevel; by.Significant {
		r.Warnings = append(r.Warnings, fmt.Sprintf("the efficiency changes with %s by %.2g ± %.1g per %s (p = %.2g): something that goes with it is not rightly corrected, with a pump's power the accidentals (window, delay) or the dead times; the mean over the values is then no detector's number", by.Setting, fit.p[1], math.Hypot(by.SlopeOwnU, by.SlopeCommon), orOne(by.Unit), by.SlopeP))
	}
	return nil
}

func orOne(unit string) string {
	if unit == "" {
		return "unit"
	}
	return unit
}

func (by *BySetting) text(b *strings.Builder) {
	if by == nil {
		return
	}
	fmt.Fprintf(b, "\nOne by one\n  %14s %10s %10s %10s %10s\n", by.Setting+"/"+orOne(by.Unit), "efficiency", "u", "counting", "line")
	for _, v := range by.Values {
		if v.Value == nil {
			fmt.Fprintf(b, "  %14.6g none: %s\n", v.At, strings.Join(v.Because, "; "))
			continue
		}
		fmt.Fprintf(b, "  %14.6g %10.5f %10.5f %10.5f %10.5f\n", v.At, *v.Value, v.U, v.OwnU, v.LineAt)
	}
	if by.Slope == nil {
		b.WriteString("  No slope from fewer than three values.\n")
		return
	}
	verdict := "not significant"
	if by.Significant {
		verdict = "significant"
	}
	fmt.Fprintf(b, "  slope %+.3g per %s, ± %.2g by counting and ± %.2g by the constants they share: %s (p = %.3g)\n", *by.Slope, orOne(by.Unit), by.SlopeOwnU, by.SlopeCommon, verdict, by.SlopeP)
}
