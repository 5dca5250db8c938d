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

// Result is a number the recipe is for. Names are as written: detectors or channels.
type Result struct {
	Kind scan.ResultKind

	Trigger, UnderTest string
	PlateauOf          drivers.AxisName   // empty: all points
	HalfWidth          unit.Angle         //
	By                 drivers.DeviceName // a setting whose values each give an efficiency; empty: one

	Of      string
	Along   drivers.AxisName
	Against drivers.AxisName
	Setting drivers.DeviceName
	Profile string
	Power   drivers.DeviceName

	at []standing // the other axes have to be there

	kindAt, triggerAt, testAt, useAt, plateauAt, widthAt, byAt strict.Place
	ofAt, alongAt, againstAt, settingAt, powerAt               strict.Place
}

// The profiles a peak may be asked to have, and how many parameters each has: as many different
// angles are needed at least.
var profiles = map[string]int{"gaussian": 4, "sinc2": 4, "flat_top": 5, "two_peaks": 7, "predicted": 3}

const (
	maxResults    = 8
	flankPlaces   = 5 // different angles that fit a flat top, whose middle is the plateau's
	delayPlaces   = 5 // different values that fit a window with both its edges
	againstPlaces = 2 // different places that make a curve or a map
)

const (
	whyUse        = "which readings make the number must be said before they are taken, and must not come from the same fluctuations: the best of many points is biased high"
	whySingles    = "the coincidences of the two detectors are found by the bench file"
	whyBackground = "what the trigger counts without a partner is subtracted, or the efficiency comes out too small"
)

// readResults reads one result, or a list of them.
func (r *Recipe) readResults(v strict.Value) {
	if !v.Given() {
		return
	}
	items := []strict.Value{v}
	if v.IsList() {
		items = v.List(1, maxResults)
	}
	for _, item := range items {
		if q := r.readResult(item); q != nil {
			r.Results = append(r.Results, *q)
		}
	}
}

func (r *Recipe) readResult(v strict.Value) *Result {
	m := v.Map()
	kind := m.Need("kind")
	kinds := []scan.ResultKind{scan.Efficiency, scan.Peak, scan.TuningCurve, scan.ConjugateMap, scan.Drift, scan.Zero, scan.Delay}
	var words []string
	for _, k := range kinds {
		words = append(words, string(k))
	}
	q := &Result{Kind: scan.ResultKind(kind.Choice(words)), kindAt: kind.Place()}
	if !kind.Good() {
		return nil
	}
	switch q.Kind {
	case scan.Efficiency:
		q.readEfficiency(m)
		if r.Dark == nil && r.Background == nil {
			m.Fail("an efficiency without background and without darks", `a key "background", or at least "dark": `+whyBackground)
		}
	case scan.Drift:
		if r.Reference == nil {
			kind.Fail("the drift of a run without references", `a key "reference", such as {axes: [signal_arm, idler_arm], every: 30 min, dwell: 20 s}: they are what drift is seen by`)
		}
	default:
		q.readFit(m)
	}
	m.Done()
	return q
}

func (r *Result) readEfficiency(m strict.Map) {
	trigger, test, use, by := m.Need("trigger"), m.Need("under_test"), m.Opt("use"), m.Opt("by")
	r.Trigger, r.triggerAt = trigger.Token(), trigger.Place()
	r.UnderTest, r.testAt = test.Token(), test.Place()
	r.By, r.byAt = drivers.DeviceName(by.Token()), by.Place()
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
	r.at = readStandings(u.Opt("at"))
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

// readFit reads a result that is fitted to counts against an axis or a setting.
func (r *Result) readFit(m strict.Map) {
	of := m.Need("of")
	r.Of, r.ofAt = of.Token(), of.Place()
	if r.Kind == scan.Delay {
		setting := m.Need("setting")
		r.Setting, r.settingAt = drivers.DeviceName(setting.Token()), setting.Place()
		return
	}
	along := m.Need("along")
	r.Along, r.alongAt = drivers.AxisName(along.Token()), along.Place()
	switch r.Kind {
	case scan.Peak:
		names := make([]string, 0, len(profiles))
		for name := range profiles {
			names = append(names, name)
		}
		slices.Sort(names)
		r.Profile = m.Opt("profile").Choice(names, "")
		power := m.Opt("power")
		r.Power, r.powerAt = drivers.DeviceName(power.Token()), power.Place()
		r.at = readStandings(m.Opt("at"))
	case scan.Zero:
		r.at = readStandings(m.Opt("at"))
	case scan.TuningCurve, scan.ConjugateMap:
		against := m.Need("against")
		r.Against, r.againstAt = drivers.AxisName(against.Token()), against.Place()
	}
}

// results works the results out for one bench, each nil where something is wrong with it.
func (r *Recipe) results(f Facts) (all []*scan.Result, findings []protocol.Finding) {
	for i := range r.Results {
		q := &r.Results[i]
		out := &scan.Result{Kind: q.Kind, PlateauOf: q.PlateauOf, HalfWidth: q.HalfWidth, By: q.By, Along: q.Along, Against: q.Against, Setting: q.Setting, Profile: q.Profile, Power: q.Power}
		for _, s := range q.at {
			out.At = append(out.At, scan.AxisTarget{Axis: s.axis, Angle: s.angle})
		}
		var found []protocol.Finding
		switch q.Kind {
		case scan.Efficiency:
			found = r.efficiency(f, q, out)
		case scan.Delay:
			found = r.delay(f, q, out)
		case scan.Drift:
		default:
			found = r.fit(f, q, out)
		}
		if found != nil {
			findings, out = append(findings, found...), nil
		}
		all = append(all, out)
	}
	return all, findings
}

func (r *Recipe) efficiency(f Facts, q *Result, out *scan.Result) []protocol.Finding {
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
	findings = append(findings, r.standings(q, q.PlateauOf, "one place of the axis whose plateau is asked for")...)
	if q.By != "" {
		switch n := r.values(q.By); {
		case n == 0:
			findings = append(findings, q.byAt.Finding(fmt.Sprintf("the setting %q, which is not swept", q.By), fmt.Sprintf("a setting of the sweep, by an entry such as {setting: %s, at: [A, B, C]}", q.By)))
		case n < 2:
			findings = append(findings, q.byAt.Finding(fmt.Sprintf("one value of %s", q.By), "two different ones at least, or no \"by\""))
		}
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
	case axis.Role != signalArm && axis.Role != idlerArm:
		return append(findings, q.plateauAt.Finding(fmt.Sprintf("the axis %q, whose role is %s", q.PlateauOf, axis.Role), "an arm, whose sweep ends beside the light on both sides"))
	}
	findings = append(findings, r.swept(q.PlateauOf, q.plateauAt, flankPlaces, "a flat top with both flanks")...)
	if span, known := r.span(q.PlateauOf); known && span > 0 && 2*q.HalfWidth >= span {
		findings = append(findings, q.widthAt.Finding(fmt.Sprintf("%s to either side in a sweep of %s", q.HalfWidth, span), "less than half of the sweep: the plateau's middle comes from its flanks, which must be in the sweep too"))
	}
	return findings
}

func (r *Result) standsAt(axis drivers.AxisName) bool {
	return slices.ContainsFunc(r.at, func(s standing) bool { return s.axis == axis })
}

// moves says whether an axis of this role changes which pairs are collected.
func moves(role string) bool {
	return role == signalArm || role == idlerArm || role == crystalTilt
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

// standings checks the places where alone readings count; of the axis along none may be said.
func (r *Recipe) standings(q *Result, along drivers.AxisName, why string) (findings []protocol.Finding) {
	for _, s := range q.at {
		c, swept := r.column(s.axis)
		switch {
		case !swept:
			findings = append(findings, s.place.Finding(fmt.Sprintf("the axis %q, which is not swept", s.axis), "an axis of the sweep, at one of its places"))
		case s.axis == along:
			findings = append(findings, s.place.Finding(why, "other axes"))
		case c.ConjugateOf != "":
			findings = append(findings, s.place.Finding(fmt.Sprintf("one place of %s, which goes where partners go", s.axis), fmt.Sprintf("a place of %s, whose conjugate it is", c.ConjugateOf)))
		case c.stand != nil:
			findings = append(findings, s.place.Finding(fmt.Sprintf("one place of %s, whose places come from an earlier result", s.axis), "axes whose angles are written"))
		case !slices.Contains(c.angles(), s.angle):
			findings = append(findings, s.place.Finding(fmt.Sprintf("%s of %s, where no point is", s.angle, s.axis), "one of the places of its sweep"))
		}
	}
	return findings
}

// fit works out a result that is fitted to counts along an axis.
func (r *Recipe) fit(f Facts, q *Result, out *scan.Result) []protocol.Finding {
	var pairs bool
	var findings []protocol.Finding
	out.Of, pairs, findings = f.channel(q.Of, q.ofAt)
	findings = append(findings, r.standings(q, q.Along, "one place of the axis along which is fitted")...)
	if q.Power != "" {
		_, found := f.sensor(q.Power, q.powerAt)
		findings = append(findings, found...)
	}
	axis, found := f.axis(q.Along, q.alongAt)
	if findings = append(findings, found...); found != nil {
		return findings
	}
	if arm := axis.Role == signalArm || axis.Role == idlerArm; !arm && q.Kind != scan.Peak {
		return append(findings, q.alongAt.Finding(fmt.Sprintf("the axis %q, whose role is %s", q.Along, axis.Role), "an arm"))
	}
	need := profiles["gaussian"]
	switch q.Kind {
	case scan.Peak:
		findings = append(findings, r.swept(q.Along, q.alongAt, max(profiles[q.Profile], need), strings.TrimSpace("a profile "+q.Profile))...)
	case scan.Zero:
		findings = append(findings, r.bothSides(q, need)...)
	case scan.TuningCurve, scan.ConjugateMap:
		findings = append(findings, r.against(f, q, axis, need)...)
		if q.Kind == scan.ConjugateMap && !pairs && out.Of != "" {
			findings = append(findings, q.ofAt.Finding(fmt.Sprintf("a conjugate map of the single counts %q", q.Of), fmt.Sprintf("a coincidence channel, %s: single counts do not know where the other arm stands", oneOf(f.coincidences()))))
		}
	}
	return findings
}

// bothSides demands enough places of an arm on either side of the pump, which is at bench angle 0:
// its zero is the middle between the two sides of the ring.
func (r *Recipe) bothSides(q *Result, need int) []protocol.Finding {
	c, ok := r.column(q.Along)
	if !ok {
		return r.swept(q.Along, q.alongAt, need, "")
	}
	if c.ConjugateOf != "" {
		return []protocol.Finding{q.alongAt.Finding(fmt.Sprintf("the zero of %s, which goes where partners go", q.Along), "an arm whose angles are written, on both sides of the pump")}
	}
	if c.open() {
		return nil
	}
	angles := c.angles()
	slices.Sort(angles)
	var below, above int
	for _, a := range slices.Compact(angles) {
		switch {
		case a < 0:
			below++
		case a > 0:
			above++
		}
	}
	if below < need || above < need {
		return []protocol.Finding{q.alongAt.Finding(fmt.Sprintf("%s of %s below the pump at 0 deg and %d above it", placeCount(below), q.Along, above), fmt.Sprintf("at least %d on each side, such as at: [-3.2 deg, -3 deg, …, 3 deg, 3.2 deg]: the zero lies between the two sides of the ring", need))}
	}
	return nil
}

// against checks the axis whose places each give a fitted position.
func (r *Recipe) against(f Facts, q *Result, along scan.Axis, need int) (findings []protocol.Finding) {
	axis, found := f.axis(q.Against, q.againstAt)
	if found != nil {
		return found
	}
	switch want := "the crystal's tilt"; {
	case q.Kind == scan.TuningCurve && axis.Role != crystalTilt:
		return []protocol.Finding{q.againstAt.Finding(fmt.Sprintf("the axis %q, whose role is %s", q.Against, axis.Role), want+", "+known(string(q.Against), []string{tiltName(f)}))}
	case q.Kind == scan.ConjugateMap && (axis.Role != signalArm && axis.Role != idlerArm || axis.Name == along.Name):
		return []protocol.Finding{q.againstAt.Finding(fmt.Sprintf("the axis %q", q.Against), fmt.Sprintf("the other arm than %s", along.Name))}
	}
	findings = r.swept(q.Against, q.againstAt, againstPlaces, "a fitted position at each of them")
	// A conjugate has as many places at each of the other's as are added to where the partner goes.
	if c, ok := r.column(q.Along); !ok || c.ConjugateOf == "" {
		return append(findings, r.swept(q.Along, q.alongAt, need, "a peak")...)
	} else if n := distinct(c.Values); n < need {
		findings = append(findings, q.alongAt.Finding(fmt.Sprintf("%s of %s about each partner", placeCount(n), q.Along), fmt.Sprintf("at least %d, for a peak: span and step beside conjugate_of", need)))
	}
	return findings
}

func (r *Recipe) delay(f Facts, q *Result, out *scan.Result) (findings []protocol.Finding) {
	var pairs bool
	out.Of, pairs, findings = f.channel(q.Of, q.ofAt)
	if findings == nil && !pairs {
		findings = append(findings, q.ofAt.Finding(fmt.Sprintf("the delay of the single counts %q", q.Of), fmt.Sprintf("a coincidence channel, %s", oneOf(f.coincidences()))))
	}
	if _, found := f.setting(q.Setting, q.settingAt); found != nil {
		return append(findings, found...)
	}
	switch n := r.values(q.Setting); {
	case n == 0:
		findings = append(findings, q.settingAt.Finding(fmt.Sprintf("the setting %q, which is not swept", q.Setting), "a setting of the sweep"))
	case n < delayPlaces:
		findings = append(findings, q.settingAt.Finding(fmt.Sprintf("%d values of %s", n, q.Setting), fmt.Sprintf("at least %d different ones: the window's middle lies between its edges", delayPlaces)))
	}
	return findings
}

// values is how many different values a setting is swept over; 0 when it is not swept.
func (r *Recipe) values(setting drivers.DeviceName) int {
	for _, c := range r.columns() {
		if c.Setting == setting && setting != "" {
			return distinct(c.Values)
		}
	}
	return 0
}

// distinct is how many different values there are.
func distinct(v Values) int {
	if v.grid != nil {
		return v.grid.n
	}
	seen := map[string]bool{}
	for _, l := range v.listed {
		seen[l.value.RatString()+" "+l.unit] = true
	}
	return len(seen)
}

// swept refuses an axis that is swept over too few places for what is fitted to them.
func (r *Recipe) swept(axis drivers.AxisName, at strict.Place, need int, what string) []protocol.Finding {
	switch n := r.places(axis); {
	case n == 0:
		return []protocol.Finding{at.Finding(fmt.Sprintf("the axis %q, which is not swept", axis), "an axis of the sweep")}
	case n < need:
		return []protocol.Finding{at.Finding(fmt.Sprintf("%s of %s", placeCount(n), axis), fmt.Sprintf("at least %d different ones, for %s", need, what))}
	}
	return nil
}

func placeCount(n int) string {
	if n == 1 {
		return "one place"
	}
	return fmt.Sprintf("%d places", n)
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
