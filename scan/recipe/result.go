package recipe

import (
	"fmt"
	"slices"
	"strings"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Result is the number the recipe is for. Names are as written: detectors or channels.
type Result struct {
	Kind scan.ResultKind

	Trigger, UnderTest string
	PlateauOf          drivers.AxisName // empty: all points
	HalfWidth          unit.Angle
	at                 []standing // the other axes have to be there

	Of      string
	Along   drivers.AxisName
	Profile string
	Power   drivers.DeviceName

	triggerAt, testAt, useAt, plateauAt, widthAt strict.Place
	ofAt, alongAt, powerAt                       strict.Place
}

// The profiles a peak may be asked to have, and how many parameters each has: as many different
// angles are needed at least.
var profiles = map[string]int{"gaussian": 4, "sinc2": 4, "flat_top": 5, "two_peaks": 7, "predicted": 3}

// flankPlaces is how many different angles fit a flat top, whose middle is the plateau's.
const flankPlaces = 5

const (
	whyUse        = "which readings make the number must be said before they are taken, and must not come from the same fluctuations: the best of many points is biased high"
	whySingles    = "the coincidences of the two detectors are found by the bench file"
	whyBackground = "what the trigger counts without a partner is subtracted, or the efficiency comes out too small"
)

func readResult(v strict.Value, dimmed bool) *Result {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	kind := m.Need("kind")
	if later := []string{"tuning_curve", "conjugate_map", "drift", "zero", "delay"}; kind.Good() && slices.Contains(later, kind.Text()) {
		kind.Failf("efficiency or peak: this kind is not available yet")
		return nil
	}
	r := &Result{Kind: scan.ResultKind(kind.Choice([]string{string(scan.Efficiency), string(scan.Peak)}))}
	switch {
	case !kind.Good():
		return nil
	case r.Kind == scan.Efficiency:
		r.readEfficiency(m)
		if !dimmed {
			m.Fail("an efficiency without background and without darks", `a key "background", or at least "dark": `+whyBackground)
		}
	default:
		r.readPeak(m)
	}
	m.Done()
	return r
}

func (r *Result) readEfficiency(m strict.Map) {
	trigger, test, use := m.Need("trigger"), m.Need("under_test"), m.Opt("use")
	r.Trigger, r.triggerAt = trigger.Token(), trigger.Place()
	r.UnderTest, r.testAt = test.Token(), test.Place()
	r.useAt = use.Place()
	const ways = "{plateau_of: AXIS, half_width: 0.1 deg} or {points: all}"
	switch {
	case !m.Given():
		return
	case !use.Given():
		m.Fail(`an efficiency without "use"`, "use: "+ways+": "+whyUse)
		return
	case !use.IsMap():
		use.Failf("%s: %s", ways, whyUse)
		return
	}
	u := use.Map()
	plateau, width, points := u.Opt("plateau_of"), u.Opt("half_width"), u.Opt("points")
	for _, e := range u.Opt("at").Map().Entries() {
		r.at = append(r.at, standing{axis: drivers.AxisName(e.Name), angle: e.Value.Angle(-unit.Turn, unit.Turn), place: e.Value.Place()})
	}
	switch {
	case points.Given() && (plateau.Given() || width.Given()):
		u.Fail("readings chosen in two ways", "one of "+ways)
	case points.Given():
		points.Choice([]string{"all"})
	case plateau.Given() || width.Given():
		u.Need("plateau_of")
		u.Need("half_width")
		r.PlateauOf, r.plateauAt = drivers.AxisName(plateau.Token()), plateau.Place()
		r.HalfWidth, r.widthAt = width.Angle(0, unit.Turn), width.Place()
		if width.Good() && r.HalfWidth == 0 {
			width.Failf("an angle above zero: readings this far from the plateau's middle count")
		}
	default:
		u.Refuse("readings chosen by their own counts", ways+": "+whyUse, "best", "maximum", "top")
		if !u.Has("best") && !u.Has("maximum") && !u.Has("top") {
			u.Need("plateau_of")
		}
	}
	u.Done()
}

func (r *Result) readPeak(m strict.Map) {
	of, along := m.Need("of"), m.Need("along")
	r.Of, r.ofAt = of.Token(), of.Place()
	r.Along, r.alongAt = drivers.AxisName(along.Token()), along.Place()
	names := make([]string, 0, len(profiles))
	for name := range profiles {
		names = append(names, name)
	}
	slices.Sort(names)
	r.Profile = m.Opt("profile").Choice(names, "")
	power := m.Opt("power")
	r.Power, r.powerAt = drivers.DeviceName(power.Token()), power.Place()
}

// result works the result out for one bench; it is nil where something is wrong with it.
func (r *Recipe) result(f Facts) (*scan.Result, []protocol.Finding) {
	if r.Result == nil {
		return nil, nil
	}
	q := r.Result
	out := &scan.Result{Kind: q.Kind, PlateauOf: q.PlateauOf, HalfWidth: q.HalfWidth, Along: q.Along, Profile: q.Profile, Power: q.Power}
	var findings []protocol.Finding
	if q.Kind == scan.Efficiency {
		findings = r.efficiency(f, out)
	} else {
		findings = r.peak(f, out)
	}
	if findings != nil {
		return nil, findings
	}
	return out, nil
}

func (r *Recipe) efficiency(f Facts, out *scan.Result) []protocol.Finding {
	q := r.Result
	var findings, found []protocol.Finding
	out.Trigger, found = f.single(q.Trigger, q.triggerAt, "as trigger", whySingles)
	findings = append(findings, found...)
	out.UnderTest, found = f.single(q.UnderTest, q.testAt, "as detector under test", whySingles)
	findings = append(findings, found...)
	if findings == nil {
		switch {
		case out.Trigger == out.UnderTest:
			findings = append(findings, q.testAt.Finding(fmt.Sprintf("the trigger %q again", q.UnderTest), "another detector than the trigger"))
		case !f.counts(out.Trigger, out.UnderTest):
			findings = append(findings, q.testAt.Finding(fmt.Sprintf("%q, which no channel counts in coincidence with %q", q.UnderTest, q.Trigger), "two detectors whose coincidences this counter counts"))
		}
	}
	for _, s := range q.at {
		c, swept := r.column(s.axis)
		switch {
		case !swept:
			findings = append(findings, s.place.Finding(fmt.Sprintf("the axis %q, which is not swept", s.axis), "an axis of the sweep, at one of its places"))
		case s.axis == q.PlateauOf:
			findings = append(findings, s.place.Finding("one place of the axis whose plateau is asked for", "other axes"))
		case !slices.Contains(c.angles(), s.angle):
			findings = append(findings, s.place.Finding(fmt.Sprintf("%s of %s, where no point is", s.angle, s.axis), "one of the places of its sweep"))
		}
		out.At = append(out.At, scan.AxisTarget{Axis: s.axis, Angle: s.angle})
	}
	for _, a := range f.Axes {
		if n := r.places(a.Name); n > 1 && a.Name != q.PlateauOf && moves(a.Role) && !q.standsAt(a.Name) {
			if q.PlateauOf == "" {
				findings = append(findings, q.useAt.Finding(fmt.Sprintf("all points, while %s is swept over %d places", a.Name, n), fmt.Sprintf("{plateau_of: %s, half_width: …}, or a sweep that keeps to one place: readings beside the plateau make the efficiency too small", a.Name)))
			} else {
				findings = append(findings, q.plateauAt.Finding(fmt.Sprintf("the plateau of %s, while %s is swept over %d places", q.PlateauOf, a.Name, n), "one place of every other axis, in the sweep or by at: {AXIS: ANGLE} beside it: the plateau lies elsewhere at each of them"))
			}
		}
	}
	if q.PlateauOf == "" {
		return findings
	}
	axis, found := f.axis(q.PlateauOf, q.plateauAt)
	switch {
	case found != nil:
		return append(findings, found...)
	case axis.Role != "signal_arm" && axis.Role != "idler_arm":
		return append(findings, q.plateauAt.Finding(fmt.Sprintf("the axis %q, whose role is %s", q.PlateauOf, axis.Role), "an arm, whose sweep ends beside the light on both sides"))
	}
	findings = append(findings, r.swept(q.PlateauOf, q.plateauAt, flankPlaces, "a flat top with both flanks")...)
	if span, known := r.span(q.PlateauOf); known && span > 0 && 2*q.HalfWidth >= span {
		findings = append(findings, q.widthAt.Finding(fmt.Sprintf("%s to either side in a sweep of %s", q.HalfWidth, span), "less than half of the sweep: the plateau's middle comes from its flanks, which must be in the sweep too"))
	}
	return findings
}

// standing is an axis at the place where its readings count.
type standing struct {
	axis  drivers.AxisName
	angle unit.Angle
	place strict.Place
}

func (r *Result) standsAt(axis drivers.AxisName) bool {
	return slices.ContainsFunc(r.at, func(s standing) bool { return s.axis == axis })
}

// moves says whether an axis of this role changes which pairs are collected.
func moves(role string) bool {
	return role == "signal_arm" || role == "idler_arm" || role == "crystal_tilt"
}

// counts says whether the counter counts coincidences of two channels.
func (f Facts) counts(a, b drivers.Channel) bool {
	for _, pair := range f.Coincidences {
		if pair == [2]drivers.Channel{a, b} || pair == [2]drivers.Channel{b, a} {
			return true
		}
	}
	return false
}

func (r *Recipe) peak(f Facts, out *scan.Result) []protocol.Finding {
	q := r.Result
	var findings []protocol.Finding
	if _, pairs := f.Coincidences[drivers.Channel(q.Of)]; pairs {
		out.Of = drivers.Channel(q.Of)
	} else {
		var found []protocol.Finding
		out.Of, found = f.single(q.Of, q.ofAt, "", "")
		if found != nil {
			names := f.singles()
			for c := range f.Coincidences {
				names = append(names, string(c))
			}
			findings = append(findings, q.ofAt.Finding(fmt.Sprintf("no channel and no detector %q on this bench", q.Of), known(q.Of, names)))
		}
	}
	if _, found := f.axis(q.Along, q.alongAt); found != nil {
		findings = append(findings, found...)
	} else {
		need := max(profiles[q.Profile], profiles["gaussian"])
		findings = append(findings, r.swept(q.Along, q.alongAt, need, strings.TrimSpace("a profile "+q.Profile))...)
	}
	if q.Power != "" {
		if _, found := f.sensor(q.Power, q.powerAt); found != nil {
			findings = append(findings, found...)
		}
	}
	return findings
}

// swept refuses an axis that is swept over too few places for what is fitted to them.
func (r *Recipe) swept(axis drivers.AxisName, at strict.Place, need int, what string) []protocol.Finding {
	switch n := r.places(axis); {
	case n == 0:
		return []protocol.Finding{at.Finding(fmt.Sprintf("the axis %q, which is not swept", axis), "an axis of the sweep")}
	case n < need:
		return []protocol.Finding{at.Finding(fmt.Sprintf("%d places of %s", n, axis), fmt.Sprintf("at least %d different ones, for %s", need, what))}
	}
	return nil
}

// places is how many different angles an axis is swept over; 0 when it is not swept. Of a conjugate
// it is how many there can be.
func (r *Recipe) places(axis drivers.AxisName) int {
	c, ok := r.column(axis)
	if !ok {
		return 0
	}
	angles := c.angles()
	slices.Sort(angles)
	n := len(slices.Compact(angles))
	if c.ConjugateOf != "" && c.ConjugateOf != axis {
		if of, ok := r.column(c.ConjugateOf); ok && of.ConjugateOf == "" {
			n *= r.places(of.Axis)
		}
	}
	return n
}

// span is how far the sweep of an axis reaches, where that is known without the model.
func (r *Recipe) span(axis drivers.AxisName) (unit.Angle, bool) {
	c, ok := r.column(axis)
	if !ok || c.ConjugateOf != "" && r.places(c.ConjugateOf) > 1 {
		return 0, false
	}
	angles := c.angles()
	return slices.Max(angles) - slices.Min(angles), true
}

func (f Facts) sensor(name drivers.DeviceName, at strict.Place) (Sensor, []protocol.Finding) {
	i := slices.IndexFunc(f.Sensors, func(s Sensor) bool { return s.Name == name })
	if i >= 0 {
		return f.Sensors[i], nil
	}
	names := make([]string, len(f.Sensors))
	for k, s := range f.Sensors {
		names[k] = string(s.Name)
	}
	return Sensor{}, []protocol.Finding{at.Finding(fmt.Sprintf("no sensor %q on this bench", name), known(string(name), names))}
}
