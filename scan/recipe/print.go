package recipe

import (
	"fmt"
	"math/big"
	"strconv"
	"strings"
	"time"

	"gemel/protocol/unit"
	"gemel/scan"
)

// Print writes the recipe as text that reads back as the same recipe: every value that was left out
// as what stands in for it, grids by their ends, angles in degrees where those can say them exactly.
func (r *Recipe) Print() []byte {
	var p printer
	p.line("title", strconv.Quote(r.Title))
	if len(r.Sweep) > 0 {
		p.b.WriteString("sweep:\n")
		for _, e := range r.Sweep {
			p.b.WriteString("  - " + e.print() + "\n")
		}
	}
	p.line("order", string(r.Order))
	p.line("dwell", printDwell(r.Dwell, r.of))
	as := "passes"
	if r.Repeat.InPlace {
		as = "in_place"
	}
	p.line("repeat", fmt.Sprintf("{times: %d, as: %s}", r.Repeat.Times, as))
	if r.Dark != nil {
		p.line("dark", fields(r.Dark.print()...))
	}
	if b := r.Background; b != nil {
		p.line("background", fields(append([]string{"turn: " + word(string(b.Turn)), "by: " + b.By.String()}, b.Cadence.print()...)...))
	}
	if r.Reference != nil {
		p.line("reference", r.Reference.print())
	}
	if r.Refine != nil {
		p.line("refine", r.Refine.print())
	}
	if len(r.Guards) > 0 {
		p.b.WriteString("guards:\n")
		for _, g := range r.Guards {
			p.b.WriteString("  - " + g.print() + "\n")
		}
	}
	trouble := []string{fmt.Sprintf("retries: %d", r.Trouble.Retries), "then: " + string(r.Trouble.Then)}
	p.line("trouble", fields(append(trouble, printSpan("give_up_after", r.Trouble.GiveUpAfter))...))
	if r.Schedule != nil {
		p.line("schedule", r.Schedule.print())
	}
	switch len(r.Results) {
	case 0:
	case 1:
		p.line("result", r.Results[0].print())
	default:
		p.b.WriteString("result:\n")
		for i := range r.Results {
			p.b.WriteString("  - " + r.Results[i].print() + "\n")
		}
	}
	return []byte(p.b.String())
}

type printer struct{ b strings.Builder }

func (p *printer) line(key, value string) { p.b.WriteString(key + ": " + value + "\n") }

// fields joins what is written between braces, and leaves out what is empty.
func fields(all ...string) string {
	var some []string
	for _, f := range all {
		if f != "" {
			some = append(some, f)
		}
	}
	return "{" + strings.Join(some, ", ") + "}"
}

// word quotes a name that YAML would take for something else.
func word(name string) string {
	switch strings.ToLower(name) {
	case "true", "false", "null", "yes", "no", "on", "off", "y", "n":
		return strconv.Quote(name)
	}
	return name
}

// named writes a key whose value is a name; nothing where there is none.
func named[N ~string](key string, name N) string {
	if name == "" {
		return ""
	}
	return key + ": " + word(string(name))
}

func printAngle(key string, a unit.Angle) string {
	if a == 0 {
		return ""
	}
	return key + ": " + a.String()
}

func printSpan(key string, d time.Duration) string {
	if d == 0 {
		return ""
	}
	return key + ": " + span(d)
}

// span writes a time to the nanosecond.
func span(d time.Duration) string {
	return unit.Written(d)
}

func printDwell(d scan.Dwell, of string) string {
	switch {
	case d.Heralds > 0:
		return fields(fmt.Sprintf("heralds: %d", d.Heralds), named("of", of), "at_most: "+span(d.Time), "slice: "+span(d.Slice))
	case d.Slice == d.Time:
		return span(d.Time)
	}
	return fields("time: "+span(d.Time), "slice: "+span(d.Slice))
}

func (c Cadence) print() []string {
	all := []string{"dwell: " + printDwell(c.Dwell, "")}
	switch {
	case c.EveryPoints == 1:
		all = append(all, "every: 1 point")
	case c.EveryPoints > 0:
		all = append(all, fmt.Sprintf("every: %d points", c.EveryPoints))
	case c.Every > 0:
		all = append(all, "every: "+span(c.Every))
	}
	var also []string
	if c.AtStart {
		also = append(also, "start")
	}
	if c.AtEnd {
		also = append(also, "end")
	}
	if len(also) > 0 {
		all = append(all, "also: ["+strings.Join(also, ", ")+"]")
	}
	return all
}

func (e Entry) print() string {
	all := []string{named("axis", e.Axis), named("setting", e.Setting), named("conjugate_of", e.ConjugateOf)}
	v := e.Values
	switch {
	case e.ConjugateOf != "" && v.grid == nil: // the partner's place alone
	case e.ConjugateOf != "":
		all = append(all, v.grid.print()...)
	case v.earlier != nil && v.grid == nil:
		all = append(all, "at: "+v.earlier.print())
	case v.earlier != nil:
		all = append(append(all, "around: "+v.earlier.print()), v.grid.print()...)
	case v.grid != nil:
		g := v.grid
		last, _ := v.at(g.n - 1)
		all = append(all, "from: "+number{value: g.first, unit: g.unit}.exactly(), "to: "+last.exactly(), "step: "+number{value: new(big.Rat).Abs(g.step), unit: g.unit}.exactly())
	case len(v.listed) == 1:
		all = append(all, "at: "+v.listed[0].exactly())
	default:
		values := make([]string, len(v.listed))
		for i, n := range v.listed {
			values[i] = n.exactly()
		}
		all = append(all, "at: ["+strings.Join(values, ", ")+"]")
	}
	if e.With != nil {
		all = append(all, "with: "+e.With.print())
	}
	return fields(all...)
}

// print writes a grid that stands about something.
func (g *grid) print() []string {
	width := new(big.Rat).Mul(g.step, big.NewRat(int64(g.n-1), 1))
	return []string{"span: " + number{value: width, unit: g.unit}.exactly(), "step: " + number{value: g.step, unit: g.unit}.exactly()}
}

func (e *Earlier) print() string {
	below := ""
	if e.below != nil {
		below = "u_below: " + e.below.exactly()
	}
	whose := word(string(e.Axis) + string(e.Setting)) // one of them is empty
	return fields(string(e.Kind)+": "+whose, "from: "+strconv.Quote(e.From), printSpan("not_older_than", e.NotOlderThan), below, "otherwise: "+string(e.Otherwise))
}

// exactly writes a value as it is read back: degrees where a decimal can say them, else arcseconds,
// which always can.
func (n number) exactly() string {
	if n.unit != "" {
		return decimal(n.value) + " " + n.unit
	}
	deg := new(big.Rat).Quo(n.value, big.NewRat(int64(unit.Degree), 1))
	if digits, finite := deg.FloatPrec(); finite && digits <= 20 {
		return decimal(deg) + " deg"
	}
	return decimal(new(big.Rat).Quo(n.value, big.NewRat(int64(unit.Arcsecond), 1))) + " arcsec"
}

// decimal writes a number that has a finite decimal expansion, with an exponent where that is shorter.
func decimal(x *big.Rat) string {
	digits, _ := x.FloatPrec()
	plain := x.FloatString(digits)
	if len(plain) <= 24 {
		return plain
	}
	all := strings.TrimLeft(strings.ReplaceAll(strings.TrimPrefix(plain, "-"), ".", ""), "0")
	whole := strings.TrimRight(all, "0")
	exponent := len(all) - 1 - digits
	s := whole[:1]
	if len(whole) > 1 {
		s += "." + whole[1:]
	}
	if x.Sign() < 0 {
		s = "-" + s
	}
	return fmt.Sprintf("%se%d", s, exponent)
}

func printStandings(key string, all []standing) string {
	if len(all) == 0 {
		return ""
	}
	places := make([]string, len(all))
	for i, s := range all {
		places[i] = word(string(s.axis)) + ": " + s.angle.String()
	}
	return key + ": " + fields(places...)
}

func (q *Reference) print() string {
	names := make([]string, len(q.Axes))
	for i, a := range q.Axes {
		names[i] = word(string(a))
	}
	on := "on: [top]"
	if q.Flanks {
		on = "on: [low_flank, top, high_flank]"
	}
	bounds := fields(printShare("singles", q.Bounds.Singles), printShare("ratio", q.Bounds.Ratio), printAngle("centre", q.Bounds.Centre))
	if bounds != "{}" {
		bounds = "bounds: " + bounds
	} else {
		bounds = ""
	}
	all := append([]string{"axes: [" + strings.Join(names, ", ") + "]", on, named("of", q.Of), printStandings("at", q.at), printAngle("flank", q.Flank)}, q.Cadence.print()...)
	return fields(append(all, bounds, "otherwise: "+string(q.Otherwise))...)
}

// printShare writes a share as a plain number, the shortest that reads back the same.
func printShare(key string, x float64) string {
	if x == 0 {
		return ""
	}
	return key + ": " + strconv.FormatFloat(x, 'f', -1, 64)
}

func (q *Refine) print() string {
	all := []string{named("along", q.Along), named("of", q.Of)}
	if q.around.grid != nil {
		all = append(append(all, "around: maximum"), q.around.grid.print()...)
	}
	return fields(append(all, printAngle("u_below", q.Below), fmt.Sprintf("at_most: %d points", q.AtMost), printSpan("within", q.Within))...)
}

func (g Guard) print() string {
	within := ""
	if g.ReferenceAge == 0 {
		within = "within: [" + g.low.exactly() + ", " + g.high.exactly() + "]"
	}
	return fields(named("watch", g.Watch), named("rate", g.Rate), named("dark_rate", g.DarkRate), printSpan("reference_age", g.ReferenceAge),
		within, "otherwise: "+string(g.Otherwise), printSpan("give_up_after", g.GiveUpAfter))
}

func (s *Schedule) print() string {
	var warm, before, by string
	if w := s.WarmUp; w != nil {
		steady := make([]string, len(w.Steady))
		for i, one := range w.Steady {
			steady[i] = word(string(one.Sensor)) + ": " + one.by.exactly() + " over " + span(one.Over)
		}
		warm = "warm_up: " + fields("steady: "+fields(steady...), "at_most: "+span(w.AtMost))
	}
	if s.NotBefore != nil {
		before = "not_before: " + strconv.Quote(s.NotBefore.String())
	}
	if s.FinishBy != nil {
		by = "finish_by: " + strconv.Quote(s.FinishBy.String())
	}
	return fields(warm, before, by)
}

func (q *Result) print() string {
	all := []string{"kind: " + string(q.Kind), named("trigger", q.Trigger), named("under_test", q.UnderTest), named("by", q.By),
		named("of", q.Of), named("along", q.Along), named("against", q.Against), named("setting", q.Setting), named("profile", q.Profile), named("power", q.Power)}
	at := printStandings("at", q.at)
	switch {
	case q.Kind != scan.Efficiency:
		all = append(all, at)
	case q.PlateauOf == "":
		all = append(all, "use: "+fields("points: all", at))
	default:
		all = append(all, "use: "+fields(named("plateau_of", q.PlateauOf), "half_width: "+q.HalfWidth.String(), at))
	}
	return fields(all...)
}
