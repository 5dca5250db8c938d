package forecast

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// sentence says the run in one: points, time, end, worth.
func (f *Forecast) sentence() string {
	var b strings.Builder
	points := f.Points - f.PointsEmpty
	switch {
	case f.plan.Repeat.Times == 1:
		b.WriteString(plural(points, "point"))
	case f.plan.Repeat.Times == 2:
		fmt.Fprintf(&b, "%s twice", plural(points, "point"))
	default:
		fmt.Fprintf(&b, "%s %d times", plural(points, "point"), f.plan.Repeat.Times)
	}
	if f.PointsAdded > 0 {
		fmt.Fprintf(&b, " and %d added", f.PointsAdded)
	}
	fmt.Fprintf(&b, ", %s, done at %s", span(f.Duration.Duration()), f.clock(f.FinishesAt.Time))
	if pace := f.bench.Pace; pace > 1 {
		fmt.Fprintf(&b, " bench time (after %s on the wall's clock)", span(time.Duration(float64(f.Duration.Duration())/pace)))
	}
	if f.LeftOut > 0 {
		fmt.Fprintf(&b, " with %s left out", plural(f.LeftOut, "visit"))
	}
	for i, r := range f.Results {
		sep := "; "
		if i > 0 {
			sep = ", "
		}
		kind := f.subject(i)
		switch {
		case r.Uncertainty == nil:
			fmt.Fprintf(&b, "%sno %s is forecast", sep, kind)
		case r.Counting == nil:
			fmt.Fprintf(&b, "%s%s to %s", sep, kind, f.inUnit(*r.Uncertainty, r))
		default:
			fmt.Fprintf(&b, "%s%s to %s (%s from counting, %s floor%s)", sep, kind, f.inUnit(*r.Uncertainty, r), f.inUnit(*r.Counting, r), f.inUnit(*r.Floor, r), f.floorNames(r))
		}
	}
	b.WriteString(".")
	if f.Provisional {
		b.WriteString(" Provisional: values of earlier results are missing.")
	}
	return b.String()
}

// wide is how many letters a line of the text has at most, where words allow it.
const wide = 100

// folded breaks a line between words; what follows is indented by two more than the line itself.
func folded(line string, wide int) string {
	var b strings.Builder
	indent := len(line) - len(strings.TrimLeft(line, " \n"))
	hang := strings.Repeat(" ", len(strings.TrimLeft(line[:indent], "\n"))+2)
	for {
		runes := []rune(strings.TrimLeft(line, "\n"))
		lead := len([]rune(line)) - len(runes)
		if len(runes) <= wide {
			break
		}
		at := -1
		for i := wide; i > len(hang); i-- {
			if runes[i] == ' ' && runes[i-1] != ' ' && !(digit(runes[i-1]) && i+1 < len(runes) && digit(runes[i+1])) {
				at = i
				break
			}
		}
		if at < 0 {
			break
		}
		b.WriteString(line[:lead] + string(runes[:at]) + "\n")
		line = hang + strings.TrimLeft(string(runes[at:]), " ")
	}
	b.WriteString(line + "\n")
	return b.String()
}

func digit(r rune) bool { return r >= '0' && r <= '9' }

// Text is the forecast for a person: the sentence, then what it rests on.
func (f *Forecast) Text() string {
	var b strings.Builder
	line := func(format string, args ...any) { b.WriteString(folded(fmt.Sprintf(format, args...), wide)) }
	line("%s", f.Sentence)
	if len(f.Warnings) > 0 {
		line("\nMind")
		for _, w := range f.Warnings {
			line("  %s", w)
		}
	}
	line("\nTime")
	whole := f.Duration.Duration()
	for _, p := range []struct {
		what string
		took protocol.Seconds
	}{{"counting", f.Counting}, {"darks, backgrounds, references", f.Beside}, {"moving", f.Moving}, {"settling", f.Settling}, {"overhead", f.Overhead}, {"waiting", f.Waiting}} {
		if d := p.took.Duration(); d > 0 && whole > 0 {
			line("  %-31s %10s  %4.1f %%", p.what, span(d), 100*float64(d)/float64(whole))
		}
	}
	if text := f.besides(); text != "" {
		line("  %s", text)
	}
	line("  overhead: %s", f.OverheadFrom)
	f.textOfCounts(line)
	f.textOfWorth(line)
	f.textOfAim(line)
	return b.String()
}

func (f *Forecast) besides() string {
	var parts []string
	for _, p := range []struct {
		n    int
		what string
	}{{f.Darks, "dark"}, {f.Backgrounds, "background"}} {
		if p.n > 0 {
			parts = append(parts, plural(p.n, p.what))
		}
	}
	if f.References > 0 {
		parts = append(parts, plural(f.References, "reference reading"))
	}
	if len(parts) == 0 {
		return ""
	}
	return strings.Join(parts, ", ") + " beside " + plural(f.Visits, "light reading")
}

// textOfCounts shows the brightest and the dimmest point.
func (f *Forecast) textOfCounts(line func(string, ...any)) {
	if f.rates == nil || f.Points == 0 {
		return
	}
	best, least := -1, -1
	most, fewest := -1.0, 0.0
	rate := make(row, len(f.rates.channels))
	k := len(f.singles)
	if len(f.pairs) == 0 {
		k = 0
	}
	if len(f.plan.Results) > 0 {
		k = max(0, slices.Index(f.channels(), f.lookedAt(f.plan.Results[0])))
	}
	for i := range f.plan.Points {
		if f.visits[i] == 0 || !f.perVisit(i, rate) {
			continue
		}
		if rate[k] > most {
			best, most = i, rate[k]
		}
		if least < 0 || rate[k] < fewest {
			least, fewest = i, rate[k]
		}
	}
	if best < 0 {
		return
	}
	line("\nCounts of one visit, by %s", f.RatesFrom)
	tell := func(name string, i int) {
		f.perVisit(i, rate)
		var parts []string
		for n, c := range f.singles {
			parts = append(parts, fmt.Sprintf("%s %s", c, number(rate[n], 4)))
		}
		for n, c := range f.pairs {
			parts = append(parts, fmt.Sprintf("%s %s (%s accidental)", c, number(rate[len(f.singles)+n], 4), number(rate[len(f.singles)+len(f.pairs)+n], 3)))
		}
		line("  %s, point %d (%s): %s", name, i, f.where(i), strings.Join(parts, ", "))
	}
	tell("most", best)
	if least != best {
		tell("least", least)
	}
	if f.rates.lattice != nil {
		line("  rates worked out at %d places, interpolated between them to %s", f.RatesAt, share(f.Interpolation))
	}
}

// where says the targets of a point.
func (f *Forecast) where(i int) string {
	var parts []string
	p := f.point(i)
	for _, t := range p.Axes {
		parts = append(parts, fmt.Sprintf("%s %s deg", t.Axis, t.Angle.Fixed(3)))
	}
	for _, t := range p.Settings {
		parts = append(parts, fmt.Sprintf("%s %g %s", t.Setting, t.Value, f.unitOf(t.Setting)))
	}
	if len(parts) == 0 {
		return "where everything stands"
	}
	return strings.Join(parts, ", ")
}

// subject names a result by what it is of.
func (f *Forecast) subject(i int) string {
	if i >= len(f.plan.Results) {
		return strings.ReplaceAll(f.Results[i].Kind, "_", " ")
	}
	q := f.plan.Results[i]
	name := strings.ReplaceAll(string(q.Kind), "_", " ")
	of := string(q.Along)
	switch q.Kind {
	case scan.Efficiency:
		of = string(q.UnderTest)
		for _, d := range f.bench.Detectors {
			if d.Channel == q.UnderTest {
				of = d.Name
			}
		}
	case scan.Delay:
		of = string(q.Setting)
	case scan.Drift:
		of = ""
	}
	if of == "" || of == name {
		return name
	}
	name += " of " + of
	for k, other := range f.plan.Results { // two of the same axis
		if k != i && other.Kind == q.Kind && other.Along == q.Along && other.Of != q.Of {
			return name + " in " + string(q.Of)
		}
	}
	return name
}

// about prints a result's value to the two digits that its uncertainty has.
func about(r protocol.ForecastResult) string {
	value, u, unit := *r.Value, *r.Uncertainty, r.Unit
	if unit == "1" {
		value, u, unit = 100*value, 100*u, "%"
	}
	decimals := 3
	if u > 0 && !math.IsInf(u, 0) {
		decimals = max(0, min(12, 1-int(math.Floor(math.Log10(u)))))
	}
	text := strconv.FormatFloat(value, 'f', decimals, 64)
	if strings.Trim(text, "-0.") == "" {
		text = strings.TrimPrefix(text, "-")
	}
	return strings.TrimSpace(text + " " + unit)
}

// number prints so many significant digits, without an exponent, in groups of three where there are
// more than four before the point.
func number(v float64, digits int) string {
	if v == 0 || math.IsNaN(v) || math.IsInf(v, 0) {
		return fmt.Sprint(v)
	}
	if math.Abs(v) < 1e-6 || math.Abs(v) >= 1e15 {
		return fmt.Sprintf("%.*g", digits, v)
	}
	scaled, _ := strconv.ParseFloat(strconv.FormatFloat(v, 'g', digits, 64), 64)
	text := strconv.FormatFloat(scaled, 'f', -1, 64)
	whole, rest, _ := strings.Cut(text, ".")
	sign := strings.TrimRight(whole, "0123456789")
	whole = whole[len(sign):]
	if len(whole) > 4 {
		for at := len(whole) - 3; at > 0; at -= 3 {
			whole = whole[:at] + " " + whole[at:]
		}
	}
	if rest != "" {
		rest = "." + rest
	}
	return sign + whole + rest
}

func (f *Forecast) textOfWorth(line func(string, ...any)) {
	if len(f.Results) == 0 {
		return
	}
	line("\nWorth, as standard uncertainty")
	for n, r := range f.Results {
		kind := f.subject(n)
		if r.Uncertainty == nil {
			line("  %s: %s", kind, strings.Join(r.Because, "; "))
			continue
		}
		line("  %s: about %s, to %s", kind, about(r), f.inUnit(*r.Uncertainty, r))
		if r.Counting != nil {
			line("    from counting, which more time makes less: %s", f.inUnit(*r.Counting, r))
			line("    floor, which no time makes less: %s", f.inUnit(*r.Floor, r))
		}
		for i, s := range r.FloorFrom {
			if i == mostTold || *r.Floor > 0 && s.Contribution < *r.Floor/20 {
				break
			}
			line("      %-9s %s", f.inUnit(s.Contribution, r), s.Quantity)
		}
		for _, why := range r.Because {
			line("    %s", why)
		}
	}
}

func (f *Forecast) textOfAim(line func(string, ...any)) {
	m := f.Aim
	if m == nil {
		return
	}
	line("\nFor %s", m.Text)
	if !m.Reachable {
		line("  %s.", m.Because)
		return
	}
	if m.Heralds != nil {
		line("  each dwell needs %s of %s, within %s", plural(int(*m.Heralds), "count"), f.plan.Dwell.Trigger, span(m.Dwell.Duration()))
	} else if m.Dwell != nil {
		line("  each dwell has to last %s", span(m.Dwell.Duration()))
	}
	if m.Beside != nil {
		line("  each %s %s", f.besideKind(), span(m.Beside.Duration()))
	}
	if m.BestShare != nil && m.Share != nil && *m.BestShare == 0 {
		line("  the %ss take nothing from this uncertainty; they have %s of the counting time, and less would do", f.besideKind(), share(*m.Share))
	} else if m.BestShare != nil && m.Share != nil {
		line("  of the counting time the %ss should have %s for the least uncertainty; they have %s now", f.besideKind(), share(*m.BestShare), share(*m.Share))
	}
	if m.Duration != nil {
		line("  the run then takes %s", span(m.Duration.Duration()))
	}
	if m.Uncertainty != nil && len(f.Results) > 0 {
		line("  and is worth %s", f.inUnit(*m.Uncertainty, f.Results[0]))
	}
	if m.Because != "" {
		line("  %s", m.Because)
	}
}
