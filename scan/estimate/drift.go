package estimate

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// DriftTable is what the references of a run say of its night.
type DriftTable struct {
	Sets       int             `json:"sets"`
	From       protocol.Time   `json:"from"` // middle of the first set
	To         protocol.Time   `json:"to"`   // middle of the last
	Quantities []DriftQuantity `json:"quantities"`
}

// DriftQuantity is one quantity against time. Changes are from its first row: relative where
// ChangeUnit is 1, in degrees where it is deg.
type DriftQuantity struct {
	Quantity   string     `json:"quantity"`
	Unit       string     `json:"unit"` // of the rows' values: Hz, 1 (counts per count), deg
	ChangeUnit string     `json:"change_unit"`
	Rows       []DriftRow `json:"rows"`
	PerHour    float64    `json:"change_per_hour"`     // of a line through all rows, weighted by counting
	PerHourU   float64    `json:"change_per_hour_u"`   // its standard uncertainty, widened by the scatter about the line where counting does not explain that
	Scatter    Dispersion `json:"scatter"`             // of the rows about the line
	PeakToPeak float64    `json:"peak_to_peak"`        // greatest less least change; counting alone makes it greater than nothing
	Worst      int        `json:"worst_set"`           // with the largest change
	Excursion  float64    `json:"largest_excursion"`   // that change
	ExcursionU float64    `json:"largest_excursion_u"` // its standard uncertainty by counting
	Missing    []string   `json:"missing,omitempty"`   // sets that do not have it, and why
}

// DriftRow is one set's value of a quantity.
type DriftRow struct {
	Set    int           `json:"set"`
	At     protocol.Time `json:"at"` // the middle of the set
	Value  float64       `json:"value"`
	U      float64       `json:"u"` // by counting
	Change float64       `json:"change"`
}

// DriftQuestion is what a drift is asked of: recipe key result, kind drift.
type DriftQuestion struct {
	ReferenceQuestion
	Coverage float64 // 0: 0.95
}

// Drift tells how the references changed over a run: singles and both coincidence ratios at the top,
// and each arm's fitted centre, against time. Its one number is what the line through the ratio of
// coincidences to the trigger's counts comes to from the first set to the last, since that ratio is
// what an efficiency is made of; where the top is not among the places, the first quantity there is.
// Doubted references count: they are where the drift shows. A refusal names what is missing.
func Drift(rows Rows, bench Bench, q DriftQuestion) (Result, error) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	r := newResult(rows, string(scan.Drift))
	r.Coverage = q.Coverage
	sets := q.sets(rows, &r)
	if len(sets) < 2 {
		return Result{}, &Refusal{Reasons: []string{fmt.Sprintf("%d sets of references; want two at least", len(sets))}}
	}
	d := DriftTable{Sets: len(sets), From: sets[0].at, To: sets[len(sets)-1].at}
	var missed []string
	for _, m := range q.measures(bench) {
		one, ok := m.against(sets)
		if !ok {
			missed = append(missed, fmt.Sprintf("%s: fewer than two sets have it: %s", m.name, strings.Join(one.Missing, "; ")))
			continue
		}
		d.Quantities = append(d.Quantities, one)
	}
	if len(d.Quantities) == 0 {
		return Result{}, &Refusal{Reasons: missed}
	}
	r.Warnings = append(r.Warnings, missed...)
	first := d.first(q.ratioName(string(q.Of.Trigger)))
	hours := d.To.Sub(d.From.Time).Hours()
	if !(hours > 0) {
		return Result{}, &Refusal{Reasons: []string{"all sets of references have the same time; want a night between them"}}
	}
	in := Input{Quantity: "line through " + first.Quantity, Symbol: "b", Unit: first.ChangeUnit + "/h", Estimate: first.PerHour, U: first.PerHourU, Evaluation: TypeA, Distribution: Normal}
	if first.Scatter.Significant {
		in.Distribution, in.Freedom = Student, float64(first.Scatter.Freedom)
	}
	b, err := Propagate(func(x []float64) float64 { return x[0] * hours }, []Input{in}, nil)
	if err != nil {
		return Result{}, &Refusal{Reasons: []string{err.Error()}}
	}
	r.state(b)
	r.Unit, r.quantity = first.ChangeUnit, fmt.Sprintf("drift of %s over %s, from %d sets of references,", first.Quantity, unit.Span(d.To.Sub(d.From.Time).Round(time.Minute)), len(sets))
	r.Drift = &d
	if !(bench.Counter.Window.Value > 0) {
		r.Warnings = append(r.Warnings, "the coincidence window is not declared, so accidentals are part of the ratios and of the profiles")
	}
	r.tidy()
	return r, nil
}

// driftSet is the readings of one set.
type driftSet struct {
	set      int
	at       protocol.Time
	readings []protocol.Reading
}

func (q DriftQuestion) sets(rows Rows, r *Result) []driftSet {
	var sets []driftSet
	for _, one := range rows.Readings {
		if one.Kind != protocol.Reference || one.Reference == nil {
			continue
		}
		if !one.Accepted {
			r.SetAside = append(r.SetAside, Aside{one.Sequence, one.Reason})
			continue
		}
		r.Used = append(r.Used, one.Sequence)
		i := slices.IndexFunc(sets, func(s driftSet) bool { return s.set == one.Reference.Set })
		if i < 0 {
			i = len(sets)
			sets = append(sets, driftSet{set: one.Reference.Set})
		}
		sets[i].readings = append(sets[i].readings, one)
	}
	for i := range sets {
		first, last := sets[i].readings[0].StartedAt, sets[i].readings[len(sets[i].readings)-1].EndedAt
		sets[i].at = protocol.Time{Time: first.Add(last.Sub(first.Time) / 2)}
	}
	return sets
}

// measure is one quantity that each set may have.
type measure struct {
	name, unit string
	relative   bool
	of         func(readings []protocol.Reading) (value, u float64, err error)
}

func (q DriftQuestion) measures(bench Bench) []measure {
	at := func(what func(top dwell, windowS float64) (float64, float64, error)) func([]protocol.Reading) (float64, float64, error) {
		return func(readings []protocol.Reading) (float64, float64, error) {
			s := newReferenceSet(readings, bench, q.ReferenceQuestion)
			top, err := s.find(topPlace)
			if err != nil {
				return 0, 0, err
			}
			return what(top.dwell, s.windowS)
		}
	}
	var all []measure
	for _, channel := range []string{string(q.Of.Trigger), string(q.Of.UnderTest)} {
		isTrigger := channel == string(q.Of.Trigger)
		all = append(all, measure{singlesName(channel), "Hz", true, at(func(top dwell, _ float64) (float64, float64, error) {
			n := top.singles(isTrigger)
			return n / top.gateS, math.Sqrt(math.Max(n, 1)) / top.gateS, nil
		})})
	}
	for _, channel := range []string{string(q.Of.Trigger), string(q.Of.UnderTest)} {
		isTrigger := channel == string(q.Of.Trigger)
		all = append(all, measure{q.ratioName(channel), "1", true, at(func(top dwell, windowS float64) (float64, float64, error) {
			value, v := top.ratio(isTrigger, windowS)
			if math.IsInf(v, 1) {
				return 0, 0, fmt.Errorf("no net coincidences at the top")
			}
			return value, value * math.Sqrt(v), nil
		})})
	}
	profiles := q.profiles()
	for _, arm := range q.arms() {
		all = append(all, measure{centreName(arm), "deg", false, func(readings []protocol.Reading) (float64, float64, error) {
			three, _, err := newReferenceSet(readings, bench, q.ReferenceQuestion).flanks(arm)
			if err != nil {
				return 0, 0, err
			}
			return centreOf(three, profiles[arm])
		}})
	}
	return all
}

// against works a quantity out for every set. Not ok means that fewer than two have it.
func (m measure) against(sets []driftSet) (q DriftQuantity, ok bool) {
	q = DriftQuantity{Quantity: m.name, Unit: m.unit, ChangeUnit: "deg"}
	if m.relative {
		q.ChangeUnit = "1"
	}
	var hours, change, u []float64
	scale := 1.0
	for _, s := range sets {
		value, uValue, err := m.of(s.readings)
		if err == nil && m.relative && len(q.Rows) == 0 && !(value > 0) {
			err = fmt.Errorf("%g; want more than nothing to compare with", value)
		}
		if err != nil {
			q.Missing = append(q.Missing, fmt.Sprintf("set %d: %v", s.set, err))
			continue
		}
		if len(q.Rows) == 0 && m.relative {
			scale = value
		}
		row := DriftRow{Set: s.set, At: s.at, Value: value, U: uValue}
		if len(q.Rows) > 0 {
			row.Change = (value - q.Rows[0].Value) / scale
		}
		q.Rows = append(q.Rows, row)
		hours, change, u = append(hours, s.at.Sub(sets[0].at.Time).Hours()), append(change, row.Change), append(u, uValue/scale)
	}
	if len(q.Rows) < 2 {
		return q, false
	}
	q.PerHour, q.PerHourU, q.Scatter = trend(hours, change, u)
	q.PeakToPeak = slices.Max(change) - slices.Min(change)
	q.Worst = q.Rows[1].Set
	for i, row := range q.Rows {
		if i > 0 && math.Abs(row.Change) >= math.Abs(q.Excursion) {
			q.Worst, q.Excursion, q.ExcursionU = row.Set, row.Change, math.Hypot(u[i], u[0])
		}
	}
	return q, true
}

// trend is a line through values with their standard uncertainties. Where the values scatter about
// it more than these explain, the slope's uncertainty is multiplied by the Birge ratio.
func trend(x, y, u []float64) (slope, uSlope float64, scatter Dispersion) {
	var sw, sx, sy float64
	for i := range x {
		w := 1 / (u[i] * u[i])
		sw, sx, sy = sw+w, sx+w*x[i], sy+w*y[i]
	}
	var sxx, sxy float64
	for i := range x {
		w, d := 1/(u[i]*u[i]), x[i]-sx/sw
		sxx, sxy = sxx+w*d*d, sxy+w*d*y[i]
	}
	slope = sxy / sxx
	off, v := make([]float64, len(x)), make([]float64, len(x))
	for i := range x {
		off[i], v[i] = y[i]-sy/sw-slope*(x[i]-sx/sw), u[i]*u[i]
	}
	scatter = Disperse(off, v, 2)
	return slope, scatter.factor() / math.Sqrt(sxx), scatter
}

// first is the quantity with this name, or else the first there is.
func (d DriftTable) first(name string) DriftQuantity {
	for _, q := range d.Quantities {
		if q.Quantity == name {
			return q
		}
	}
	return d.Quantities[0]
}

// Text is the table for a person: a sentence for each quantity, then one row a set.
func (d DriftTable) Text() string {
	var b strings.Builder
	b.WriteString("References against time (changes from the first set; u by counting)\n")
	for _, q := range d.Quantities {
		b.WriteString("  " + q.Sentence() + "\n")
		for _, miss := range q.Missing {
			b.WriteString("      " + miss + "\n")
		}
	}
	for _, q := range d.Quantities {
		fmt.Fprintf(&b, "\n  %s\n  %5s %-20s %14s %12s %12s\n", q.Quantity, "set", "at", q.Unit, "u", "change")
		for _, row := range q.Rows {
			fmt.Fprintf(&b, "  %5d %-20s %14s %12s %12s\n", row.Set, row.At.UTC().Truncate(time.Second).Format(time.RFC3339), figure(row.Value, 7), figure(row.U, 2), q.shown(row.Change))
		}
	}
	return b.String()
}

// Sentence says how a quantity drifted.
func (q DriftQuantity) Sentence() string {
	about := "counting explains the scatter about it"
	switch {
	case q.Scatter.Freedom == 0:
		about = "two sets make a line, and say nothing of the scatter about it"
	case q.Scatter.Significant:
		about = fmt.Sprintf("the scatter about it is %.1f times what counting explains", q.Scatter.Birge)
	}
	return fmt.Sprintf("%s: %s ± %s an hour (k = 1; %s); peak to peak %s; set %d is farthest from the first, by %s, u %s.",
		q.Quantity, q.shown(q.PerHour), q.shown(q.PerHourU), about, q.shown(q.PeakToPeak), q.Worst, q.shown(q.Excursion), q.shown(q.ExcursionU))
}

func (q DriftQuantity) shown(change float64) string {
	if q.ChangeUnit == "1" {
		return shownPercent(change)
	}
	return shownDegrees(change)
}
