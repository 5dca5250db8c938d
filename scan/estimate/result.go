package estimate

import (
	"encoding/json"
	"fmt"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"gemel/protocol"
	"gemel/scan"
)

// Result is a result with everything that is needed to check it. Its JSON is what `report --json`
// prints; the first thirteen keys are fixed.
type Result struct {
	Run       protocol.RunID `json:"run"`
	Kind      string         `json:"kind"`
	Value     *float64       `json:"value"` // null: refused, see because
	U         *float64       `json:"standard_uncertainty"`
	Expanded  *float64       `json:"expanded_uncertainty"`
	K         *float64       `json:"coverage_factor"`
	Unit      string         `json:"unit"`
	Budget    []Row          `json:"budget"`
	Waterfall []Correction   `json:"corrections"`
	Condition []Condition    `json:"conditions"`
	Used      []int64        `json:"readings_used"`
	SetAside  []Aside        `json:"readings_set_aside"`
	Simulated *int           `json:"simulated"`

	Title      string      `json:"title"`
	Coverage   float64     `json:"coverage"`
	KBecause   string      `json:"coverage_factor_because"`
	Freedom    *float64    `json:"effective_degrees_of_freedom"` // null: unlimited
	Interval   *Interval   `json:"interval"`                     // the coverage interval, symmetric or not
	Dispersion *Dispersion `json:"dispersion"`
	MonteCarlo *MonteCarlo `json:"monte_carlo"`
	Residuals  []Residual  `json:"residuals,omitempty"` // of a fitted profile
	Warnings   []string    `json:"warnings"`
	Because    []string    `json:"because"` // why there is no value

	// What it is a number of, also where there is none: an earlier result is found by it.
	Axis    string `json:"axis,omitempty"`    // of a peak, a zero, a curve: the axis along which profiles are fitted
	Setting string `json:"setting,omitempty"` // of a delay: the setting that is swept

	// What a kind adds.
	Delay *DelayProfile `json:"delay,omitempty"`       // of the kind delay
	Zero  *ZeroOfArm    `json:"zero,omitempty"`        // of the kind zero
	Curve *Curve        `json:"curve,omitempty"`       // of the kinds tuning_curve and conjugate_map
	Drift *DriftTable   `json:"drift,omitempty"`       // of the kind drift
	By    *BySetting    `json:"by,omitempty"`          // of an efficiency at several values of a setting
	Parts []Result      `json:"parts,omitempty"`       // the efficiency at each of these values, whole
	Limit *UpperLimit   `json:"upper_limit,omitempty"` // of an efficiency without a single coincidence
	Net   *NetPairs     `json:"net_pairs,omitempty"`   // of a delay without a window

	quantity string // what the sentence calls it
	// As lines, for a picture: counts a second against degrees or seconds, degrees against degrees.
	fitted, predicted func(float64) float64
}

// Lines are what was fitted, and what the model predicts with nothing fitted, nil where there is
// none: of a profile counts a second, without what is known of them, against degrees or seconds; of a
// curve degrees against degrees, NaN where no light goes. A result that was read back from JSON has
// none.
func (r Result) Lines() (fitted, predicted func(at float64) float64) { return r.fitted, r.predicted }

// Correction is one step of the waterfall, from raw to result.
type Correction struct {
	Step    string  `json:"step"`
	Applied bool    `json:"applied"`
	Amount  float64 `json:"amount"` // what the step itself came to, in Unit
	Unit    string  `json:"unit"`
	After   float64 `json:"value_after"`
	Note    string  `json:"note"`
}

// Condition is one thing that the result holds for.
type Condition struct {
	Name  string   `json:"name"`
	Value *float64 `json:"value"`
	Unit  string   `json:"unit"`
	Text  string   `json:"text"`

	u float64 // how well the value is known, for its digits; 0: not said
}

func (r *Result) note(name, text string) {
	r.Condition = append(r.Condition, Condition{Name: name, Text: text})
}

// noteValue notes a number, which a person is shown to two digits of u, or six in all where u is 0.
func (r *Result) noteValue(name string, v, u float64, unit, text string) {
	c := Condition{Name: name, Unit: unit, Text: text, u: u}
	if !math.IsNaN(v) && !math.IsInf(v, 0) {
		c.Value = &v
	}
	r.Condition = append(r.Condition, c)
}

// Refused is the result that says why there is none.
func Refused(rows Rows, kind string, refusal *Refusal) Result {
	r := newResult(rows, kind)
	r.Because, r.Limit, r.Net = refusal.Reasons, refusal.Limit, refusal.Net
	_, r.SetAside = rows.split()
	r.tidy()
	return r
}

func newResult(rows Rows, kind string) Result {
	r := Result{Run: rows.Run, Title: rows.Title, Kind: kind, Unit: "1"}
	for _, row := range rows.Readings {
		if row.Simulated != nil {
			r.Simulated = row.Simulated
		}
	}
	return r
}

// state takes value, uncertainties and rows from a budget.
func (r *Result) state(b Budget) Expanded {
	e := b.Expand(r.Coverage)
	r.Value, r.U, r.Expanded, r.K, r.KBecause, r.Budget = &b.Value, &b.U, &e.U, &e.K, e.Because, b.Rows
	r.Interval = &Interval{b.Value - e.U, b.Value + e.U}
	if !math.IsInf(b.Freedom, 1) {
		r.Freedom = &b.Freedom
	}
	return e
}

// tidy makes empty lists print as lists.
func (r *Result) tidy() {
	if r.Budget == nil {
		r.Budget = []Row{}
	}
	if r.Waterfall == nil {
		r.Waterfall = []Correction{}
	}
	if r.Condition == nil {
		r.Condition = []Condition{}
	}
	if r.Used == nil {
		r.Used = []int64{}
	}
	if r.SetAside == nil {
		r.SetAside = []Aside{}
	}
	if r.Warnings == nil {
		r.Warnings = []string{}
	}
	if r.Because == nil {
		r.Because = []string{}
	}
}

// JSON is the result for a program, indented.
func (r Result) JSON() ([]byte, error) {
	b, err := json.MarshalIndent(r, "", "  ")
	if err != nil {
		return nil, fmt.Errorf("result of %s: %w", r.Run, err)
	}
	return append(b, '\n'), nil
}

// Text is the result for a person: a sentence first, then waterfall, budget and conditions.
func (r Result) Text() string {
	var b strings.Builder
	b.WriteString(r.Sentence() + "\n")
	if r.Simulated != nil {
		fmt.Fprintf(&b, "Simulated (clock factor %d): no instrument was calibrated.\n", *r.Simulated)
	}
	for _, w := range r.Warnings {
		b.WriteString("Note: " + w + "\n")
	}
	for _, part := range []interface{ text(*strings.Builder) }{r.Delay, r.Zero, r.Curve, r.By} {
		part.text(&b)
	}
	if r.Drift != nil {
		b.WriteString("\n" + r.Drift.Text())
	}
	if len(r.Waterfall) > 0 {
		b.WriteString("\nFrom the counts to the result\n")
		for _, c := range r.Waterfall {
			state := ""
			if !c.Applied {
				state = "  (switched off)"
			}
			fmt.Fprintf(&b, "  %-42s %12s %-3s  %10s%s\n", c.Step, figure(c.Amount, 6), c.Unit, figure(c.After, 6), state)
			if c.Note != "" {
				b.WriteString("      " + c.Note + "\n")
			}
		}
	}
	if len(r.Budget) > 0 {
		b.WriteString("\nUncertainty budget (JCGM 100)\n")
		wide := 0
		for _, row := range r.Budget {
			wide = max(wide, utf8.RuneCountInString(row.Quantity))
		}
		fmt.Fprintf(&b, "  %-*s %-10s %13s %-5s %11s %-2s %-12s %5s %12s %12s %8s\n", wide, "quantity", "symbol", "estimate", "unit", "u", "", "distribution", "dof", "sensitivity", "contribution", "share")
		for _, row := range r.Budget {
			dof, u := "inf", figure(row.U, 3)
			if row.Freedom != nil {
				dof = strconv.FormatFloat(*row.Freedom, 'f', -1, 64)
			}
			if row.Covariance {
				dof, u = "", ""
			}
			fmt.Fprintf(&b, "  %-*s %-10s %13s %-5s %11s %-2s %-12s %5s %12s %12s %7s%%\n", wide, row.Quantity, row.Symbol, figure(row.Estimate, 7), row.Unit, u,
				row.Evaluation, row.Distribution, dof, figure(row.Sensitivity, 3), figure(row.Contribution, 3), fixed(100*row.Share, 1))
		}
		if r.U != nil {
			fmt.Fprintf(&b, "  combined standard uncertainty %s; coverage factor %s: %s\n", figure(*r.U, 3), figure(*r.K, 4), r.KBecause)
			b.WriteString("  printed uncertainties are rounded here only; the JSON carries all digits\n")
		}
	}
	if d := r.Dispersion; d != nil && d.Freedom > 0 {
		fmt.Fprintf(&b, "\nScatter between readings: Birge ratio %.3f over %d values (chi square %.1f on %d degrees of freedom, p = %.3g)%s.\n", d.Birge, d.Readings, d.ChiSquare, d.Freedom, d.P,
			map[bool]string{true: ": more than counting explains, so the counting rows are multiplied by it", false: ": no more than counting explains, at the level of 1 %"}[d.Significant])
	}
	if m := r.MonteCarlo; m != nil {
		fmt.Fprintf(&b, "\nMonte Carlo (JCGM 101), %d trials: mean %s, u %s, interval %s to %s. %s\n", m.Trials, figure(m.Mean, 6), figure(m.U, 3), figure(m.Symmetric.Low, 6), figure(m.Symmetric.High, 6), m.Sentence)
	}
	if len(r.Condition) > 0 {
		b.WriteString("\nConditions\n")
		for _, c := range r.Condition {
			v := c.Text
			if c.Value != nil {
				v = figure(*c.Value, 6)
				if c.u > 0 {
					v = fixed(*c.Value, decimals(c.u))
				}
				v = strings.TrimSpace(v + " " + strings.TrimPrefix(c.Unit, "1"))
				if c.Text != "" {
					v += " (" + c.Text + ")"
				}
			}
			fmt.Fprintf(&b, "  %-36s %s\n", c.Name, v)
		}
	}
	if len(r.Residuals) > 0 {
		b.WriteString("\nReadings against the fitted profile\n")
		head := "angle/deg"
		if r.Residuals[0].AngleDeg == nil {
			head = "delay/ns"
		}
		fmt.Fprintf(&b, "  %10s %12s %12s %9s\n", head, "counts", "expected", "residual")
		for _, p := range r.Residuals {
			at, _ := p.Place()
			if p.AngleDeg == nil {
				at *= 1e9
			}
			fmt.Fprintf(&b, "  %10.4f %12.0f %12.1f %+9.2f\n", at, p.Counts, p.Expected, p.Residual)
		}
	}
	if len(r.SetAside) > 0 {
		b.WriteString("\nSet aside\n" + asideText(r.SetAside))
	}
	return b.String()
}

// Sentence says the result: value ± expanded uncertainty, k, readings kept and set aside.
func (r Result) Sentence() string {
	off := 0
	for _, a := range r.SetAside {
		if _, _, ok := a.byDesign(); ok {
			off++
		}
	}
	counts := fmt.Sprintf("%d %s kept, %d set aside", len(r.Used), plural(len(r.Used), "reading"), len(r.SetAside)-off)
	if off > 0 {
		counts += fmt.Sprintf(", %d off the plateau as planned", off)
	}
	if r.Value == nil {
		return fmt.Sprintf("No %s from %s (%s): %s.", strings.ReplaceAll(r.Kind, "_", " "), r.Run, counts, strings.Join(r.Because, "; "))
	}
	name := r.quantity
	if name == "" {
		name = strings.ReplaceAll(r.Kind, "_", " ")
	}
	scale, unit := r.shownIn()
	if i := r.Interval; i != nil && !r.symmetric() {
		return fmt.Sprintf("The %s is %s%s, with a %.4g %% interval of %s to %s%s that is not symmetric (%s); %s.", name, figure(*r.Value, 4), unit, 100*r.Coverage,
			figure(i.Low, 4), figure(i.High, 4), unit, r.KBecause, counts)
	}
	places := decimals(scale * *r.Expanded)
	return fmt.Sprintf("The %s is %s ± %s%s (expanded uncertainty, k = %.2f, %.4g %% coverage); %s.", name,
		fixed(scale**r.Value, places), fixed(scale**r.Expanded, places), unit, *r.K, 100*r.Coverage, counts)
}

// shownIn is the factor and the unit, with its space, that a person reads a value in.
func (r Result) shownIn() (scale float64, unit string) {
	switch {
	case r.Kind == string(scan.Drift) && r.Unit == "1":
		return 100, " %" // a relative change: the tables under it have it so
	case r.Unit == "1":
		return 1, ""
	}
	return 1, " " + r.Unit
}

// Quantity names what the result is a number of.
func (r Result) Quantity() string {
	if r.quantity == "" {
		return strings.ReplaceAll(r.Kind, "_", " ")
	}
	return strings.TrimSuffix(r.quantity, ",")
}

// Stated is the value with its standard uncertainty and unit; empty where there is no value.
func (r Result) Stated() string {
	if r.Value == nil || r.U == nil {
		return ""
	}
	scale, unit := r.shownIn()
	places := decimals(scale * *r.U)
	return fmt.Sprintf("%s ± %s%s (u)", fixed(scale**r.Value, places), fixed(scale**r.U, places), unit)
}

// fixed prints so many decimals, and nothing never as less than nothing.
func fixed(v float64, places int) string {
	text := strconv.FormatFloat(v, 'f', places, 64)
	if bare, negative := strings.CutPrefix(text, "-"); negative && strings.Trim(bare, "0.") == "" {
		return bare
	}
	return text
}

func (r Result) symmetric() bool {
	tiny := 1e-9 * *r.Expanded
	return math.Abs(*r.Value-*r.Expanded-r.Interval.Low) <= tiny && math.Abs(*r.Value+*r.Expanded-r.Interval.High) <= tiny
}

// decimals is how many places show two significant digits of an uncertainty.
func decimals(u float64) int {
	if !(u > 0) || math.IsInf(u, 0) {
		return 6
	}
	p := 1 - int(math.Floor(math.Log10(u)))
	if math.Round(u*math.Pow(10, float64(p))) >= 100 { // 0.0996 is 0.10
		p--
	}
	return min(max(p, 0), 12)
}

// figure prints a number with so many significant digits, plainly where that is short.
func figure(v float64, digits int) string {
	if a := math.Abs(v); v != 0 && (a < 1e-4 || a >= 1e10) {
		return strconv.FormatFloat(v, 'e', digits-1, 64)
	} else if a >= math.Pow(10, float64(digits)) {
		return strconv.FormatFloat(v, 'f', 0, 64)
	}
	return strconv.FormatFloat(v, 'g', digits, 64)
}
