package forecast

import (
	"fmt"
	"slices"
	"strings"

	"gemel/protocol"
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
	if f.LeftOut > 0 {
		fmt.Fprintf(&b, " with %s left out", plural(f.LeftOut, "visit"))
	}
	for i, r := range f.Results {
		sep := "; "
		if i > 0 {
			sep = ", "
		}
		kind := strings.ReplaceAll(r.Kind, "_", " ")
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

// Text is the forecast for a person: the sentence, then what it rests on.
func (f *Forecast) Text() string {
	var b strings.Builder
	line := func(format string, args ...any) { fmt.Fprintf(&b, format+"\n", args...) }
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
			parts = append(parts, fmt.Sprintf("%s %.4g", c, rate[n]))
		}
		for n, c := range f.pairs {
			parts = append(parts, fmt.Sprintf("%s %.4g (%.3g accidental)", c, rate[len(f.singles)+n], rate[len(f.singles)+len(f.pairs)+n]))
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

func (f *Forecast) textOfWorth(line func(string, ...any)) {
	if len(f.Results) == 0 {
		return
	}
	line("\nWorth, as standard uncertainty")
	for _, r := range f.Results {
		kind := strings.ReplaceAll(r.Kind, "_", " ")
		if r.Uncertainty == nil {
			line("  %s: %s", kind, strings.Join(r.Because, "; "))
			continue
		}
		unit := map[bool]string{true: "", false: " " + r.Unit}[r.Unit == "1"]
		line("  %s of about %.4g%s to %s", kind, *r.Value, unit, f.inUnit(*r.Uncertainty, r))
		if r.Counting != nil {
			line("    from counting, which more time makes less: %s", f.inUnit(*r.Counting, r))
			line("    floor, which no time makes less: %s", f.inUnit(*r.Floor, r))
		}
		for i, s := range r.FloorFrom {
			if i == mostTold || *r.Floor > 0 && s.Contribution < *r.Floor/20 {
				break
			}
			line("      %-50s %s", s.Quantity, f.inUnit(s.Contribution, r))
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
		line("  each dwell needs %d counts of %s, within %s", *m.Heralds, f.plan.Dwell.Trigger, span(m.Dwell.Duration()))
	} else if m.Dwell != nil {
		line("  each dwell has to last %s", span(m.Dwell.Duration()))
	}
	if m.Beside != nil {
		line("  each %s %s", f.besideKind(), span(m.Beside.Duration()))
	}
	if m.BestShare != nil && m.Share != nil {
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
