package recipe

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// Reference is a return to known places as the recipe says it.
type Reference struct {
	Cadence
	Axes      []drivers.AxisName // the arms whose flanks are counted
	Flanks    bool               // the flanks too, not the top alone
	Of        string             // the coincidence channel; empty: the result's, or the bench's only one
	Flank     unit.Angle         // from the top to half maximum; 0: by the model
	Bounds    scan.Bounds
	Otherwise scan.Then

	at                           []standing
	axesAt                       []strict.Place
	onAt, ofAt, flankAt          strict.Place
	singlesAt, ratioAt, centreAt strict.Place
}

// readReference reads the key "reference". Its dwell is the points' own where none is written.
func readReference(v strict.Value, points scan.Dwell) *Reference {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	r := &Reference{}
	axes, on, of, flank := m.Need("axes"), m.Opt("on"), m.Opt("of"), m.Opt("flank")
	bounds, otherwise := m.Opt("bounds"), m.Opt("otherwise")
	r.Cadence = readCadenceOr(m, v.Place(), "reference", scan.Dwell{Time: points.Time, Slice: points.Slice})
	if also := m.Opt("also"); also.Good() && !m.Has("every") && !r.AtEnd {
		m.Fail("references at the start alone", `"every", or "also: [end]": the first set is what later ones are compared with`)
	}
	r.AtStart = true
	for _, item := range axes.List(1, 2) {
		name := drivers.AxisName(item.Token())
		if item.Good() && slices.Contains(r.Axes, name) {
			item.Fail(strconv.Quote(item.Text())+" a second time", "each arm once")
		}
		r.Axes, r.axesAt = append(r.Axes, name), append(r.axesAt, item.Place())
	}
	r.readSpots(on)
	r.Of, r.ofAt, r.onAt = of.Token(), of.Place(), on.Place()
	r.Flank, r.flankAt = flank.Angle(0, unit.Turn/4), flank.Place()
	if flank.Good() && r.Flank == 0 {
		flank.Failf("an angle above zero: from the top to where coincidences fall to half")
	}
	r.at = readStandings(m.Opt("at"))
	b := bounds.Map()
	singles, ratio, centre := b.Opt("singles"), b.Opt("ratio"), b.Opt("centre")
	r.Bounds = scan.Bounds{Singles: readShare(singles), Ratio: readShare(ratio), Centre: centre.Angle(0, unit.Turn/4)}
	r.singlesAt, r.ratioAt, r.centreAt = singles.Place(), ratio.Place(), centre.Place()
	switch {
	case b.Given() && !singles.Given() && !ratio.Given() && !centre.Given():
		b.Fail("no bounds", `"singles", "ratio", "centre" or several of them`)
	case centre.Good() && r.Bounds.Centre == 0:
		centre.Failf("an angle above zero")
	case centre.Given() && on.Good() && !r.Flanks:
		centre.Fail("a bound of the centre without flanks", "on: [low_flank, top, high_flank]: the centre is fitted to them")
	}
	b.Done()
	r.Otherwise = scan.Then(otherwise.Choice([]string{string(scan.Note), string(scan.Hold), string(scan.Stop)}, string(scan.Note)))
	if otherwise.Good() && r.Otherwise != scan.Note && m.Given() && !bounds.Given() {
		otherwise.Fail(fmt.Sprintf("%q without bounds", r.Otherwise), `"bounds" beside it, such as {singles: 3 %, centre: 0.03 deg}: without them no reference fails`)
	}
	m.Done()
	return r
}

// readSpots reads which places of a profile a set has: the top alone, or with both flanks.
func (r *Reference) readSpots(on strict.Value) {
	if !on.Given() {
		r.Flanks = true
		return
	}
	seen := map[string]bool{}
	for _, item := range on.List(1, 3) {
		spot := item.Choice([]string{string(scan.LowFlank), string(scan.Top), string(scan.HighFlank)})
		if item.Good() && seen[spot] {
			item.Fail(strconv.Quote(spot)+" a second time", "each place once")
		}
		seen[spot] = true
	}
	low, top, high := seen[string(scan.LowFlank)], seen[string(scan.Top)], seen[string(scan.HighFlank)]
	if on.Good() && len(seen) > 0 && !seen[""] && (!top || low != high) {
		on.Fail("places that make no reference", "[low_flank, top, high_flank], or [top] alone: the centre needs both flanks, everything else the top")
	}
	r.Flanks = low && high
}

func readShare(v strict.Value) float64 {
	x := v.Quantity(unit.Share, 0, 1)
	if v.Good() && x == 0 {
		v.Failf("a share above zero, such as 1 %%")
	}
	return x
}

// standing is an axis at a place of its own.
type standing struct {
	axis  drivers.AxisName
	angle unit.Angle
	place strict.Place
}

// readStandings reads {AXIS: ANGLE, …}.
func readStandings(v strict.Value) []standing {
	var all []standing
	for _, e := range v.Map().Entries() {
		all = append(all, standing{axis: drivers.AxisName(e.Name), angle: e.Value.Angle(-unit.Turn, unit.Turn), place: e.Value.Place()})
	}
	return all
}

func find(all []standing, axis drivers.AxisName) (standing, bool) {
	i := slices.IndexFunc(all, func(s standing) bool { return s.axis == axis })
	if i < 0 {
		return standing{}, false
	}
	return all[i], true
}

// reference works the references out for one bench.
func (r *Recipe) reference(f Facts, results []*scan.Result) (*scan.Reference, []protocol.Finding) {
	q := r.Reference
	if q == nil {
		return nil, nil
	}
	findings := checkGates(q.Dwell, q.dwellAt, f)
	for i, name := range q.Axes {
		axis, found := f.axis(name, q.axesAt[i])
		findings = append(findings, found...)
		if found == nil && axis.Role != signalArm && axis.Role != idlerArm {
			findings = append(findings, q.axesAt[i].Finding(fmt.Sprintf("the axis %q, whose role is %s", name, axis.Role), "an arm"))
		}
	}
	top, open, found := r.referenceTop(f)
	findings = append(findings, found...)
	out := &scan.Reference{Cadence: q.Cadence.Cadence, Bounds: q.Bounds, Otherwise: q.Otherwise}
	found = r.referenceChannels(f, results, out)
	findings = append(findings, found...)
	if len(findings) > 0 {
		return nil, findings
	}
	if out.Places, findings = r.referencePlaces(f, top, open); len(findings) > 0 {
		return nil, findings
	}
	set := time.Duration(len(out.Places)) * q.Dwell.Time
	switch busy := q.busy(r, set); {
	case q.Every > 0 && q.Every <= set:
		findings = append(findings, q.everyAt.Finding(fmt.Sprintf("%s for a set of %d readings that counts %s", unit.Span(q.Every), len(out.Places), unit.Span(set)), "more time between two sets than one takes"))
	case q.Every > 0 && busy >= 1:
		findings = append(findings, q.everyAt.Finding("darks, backgrounds and references that take all the time there is", fmt.Sprintf("less often: they take %.0f min of every hour", 60*busy)))
	}
	if !open {
		findings = append(findings, r.referenceReach(f, out.Places)...)
		if len(findings) == 0 {
			findings = r.referenceBounds(f, *out)
		}
	}
	if len(findings) > 0 {
		return nil, findings
	}
	return out, nil
}

// busy is the share of the time that goes into everything that is repeated by the clock.
func (q *Reference) busy(r *Recipe, set time.Duration) float64 {
	sum := set.Seconds() / q.Every.Seconds()
	if r.Dark != nil && r.Dark.Every > 0 {
		sum += share(*r.Dark)
	}
	if r.Background != nil && r.Background.Every > 0 {
		sum += share(r.Background.Cadence)
	}
	return sum
}

// referenceTop is where the sweep's axes stand at the top: where the recipe says, else where the
// sweep keeps them, else, of arms, where the model sees the light. It is open where that depends on
// a value that is not measured yet.
func (r *Recipe) referenceTop(f Facts) (top []scan.AxisTarget, open bool, findings []protocol.Finding) {
	q := r.Reference
	place := map[drivers.AxisName]unit.Angle{}
	for _, s := range q.at {
		_, found := f.axis(s.axis, s.place)
		if findings = append(findings, found...); found == nil && !r.sweeps(s.axis) {
			findings = append(findings, s.place.Finding(fmt.Sprintf("the axis %q, which is not in the sweep", s.axis), fmt.Sprintf("an axis of the sweep, or an entry such as {axis: %s, at: %s} in it: the points must bring back what a reference moves", s.axis, s.angle)))
		}
		place[s.axis] = s.angle
	}
	for _, c := range r.columns() {
		if c.Setting != "" {
			if n := c.Values.Len(); n > 1 {
				findings = append(findings, q.Cadence.at.Finding(fmt.Sprintf("references while %s is swept over %d values", c.Setting, n), "a sweep that keeps every setting at one value: counts at different ones cannot be compared"))
			}
			continue
		}
		if _, said := place[c.Axis]; said {
			continue
		}
		role := f.role(c.Axis)
		angles := c.angles()
		slices.Sort(angles)
		switch n := len(slices.Compact(angles)); {
		case n == 1 && c.ConjugateOf == "":
			place[c.Axis] = angles[0]
			open = open || c.open()
		case role != signalArm && role != idlerArm && role != "":
			findings = append(findings, q.Cadence.at.Finding(fmt.Sprintf("references while %s is swept over %s", c.Axis, placeCount(n)), fmt.Sprintf("a key such as at: {%s: %s}: where it stands in all of them", c.Axis, angles[0])))
		}
	}
	if len(findings) > 0 {
		return nil, false, findings
	}
	findings = r.placeArms(f, place)
	for _, c := range r.columns() {
		if a, ok := place[c.Axis]; ok && c.Axis != "" {
			top = append(top, scan.AxisTarget{Axis: c.Axis, Angle: a})
		}
	}
	return top, open, findings
}

// placeArms adds the arms that no place is said for, where the model puts them.
func (r *Recipe) placeArms(f Facts, place map[drivers.AxisName]unit.Angle) []protocol.Finding {
	q := r.Reference
	var open []scan.Axis // without a place so far
	var known *scan.Axis
	for _, a := range f.Axes {
		if a.Role != signalArm && a.Role != idlerArm {
			continue
		}
		if !r.sweeps(a.Name) {
			return []protocol.Finding{q.Cadence.at.Finding(fmt.Sprintf("references while %s is not in the sweep", a.Name), fmt.Sprintf("an entry such as {axis: %s, at: 2 deg} in the sweep: the points must bring back what a reference moves", a.Name))}
		}
		if _, ok := place[a.Name]; ok {
			known = &a
		} else {
			open = append(open, a)
		}
	}
	if len(open) == 0 {
		return nil
	}
	say := func(a scan.Axis) string { return fmt.Sprintf("at: {%s: 2 deg}", a.Name) }
	if f.Emission == nil || f.Conjugate == nil {
		return []protocol.Finding{q.Cadence.at.Finding(fmt.Sprintf("a reference whose top is not known: %s is swept, on a bench without optics", open[0].Name), "a key such as "+say(open[0])+`, or blocks "optics" and "arms" in the bench file`)}
	}
	tilt, ok := unit.Angle(0), true
	if name := drivers.AxisName(tiltName(f)); name != "" {
		if tilt, ok = place[name]; !ok {
			if park := r.tiltPark(f); park != nil {
				tilt, ok = *park, true
			}
		}
	}
	if !ok {
		return []protocol.Finding{q.Cadence.at.Finding("a reference without the crystal's tilt", "an entry such as {axis: "+tiltName(f)+", at: 0 deg} in the sweep: where the crystal stands decides where the light goes")}
	}
	if known == nil {
		i := max(slices.IndexFunc(open, func(a scan.Axis) bool { return a.Role == signalArm }), 0)
		deg, err := f.Emission(open[i].Role, tilt.Degrees())
		if err != nil {
			return []protocol.Finding{q.Cadence.at.Finding(fmt.Sprintf("a reference where %s sees no light, crystal tilted by %s: %v", open[i].Name, tilt, err), "a tilt with emission, or a key such as "+say(open[i]))}
		}
		known = &open[i]
		place[known.Name] = roundPartner(deg)
	}
	for _, a := range open {
		if a.Name == known.Name {
			continue
		}
		deg, err := f.Conjugate(known.Role, place[known.Name].Degrees(), tilt.Degrees())
		if err != nil {
			return []protocol.Finding{q.Cadence.at.Finding(fmt.Sprintf("a reference without partners, %s at %s, crystal tilted by %s: %v", known.Name, place[known.Name], tilt, err), "a place with partners, by a key such as "+say(*known))}
		}
		place[a.Name] = roundPartner(deg)
	}
	return nil
}

// tiltPark is where the crystal stands that no entry of the sweep tilts, if a background says so.
func (r *Recipe) tiltPark(f Facts) *unit.Angle {
	name := tiltName(f)
	i := slices.IndexFunc(f.Axes, func(a scan.Axis) bool { return string(a.Name) == name })
	if i < 0 || r.Background == nil || string(r.Background.Turn) != name {
		return nil
	}
	return f.Axes[i].Park
}

// referenceChannels finds out what is counted: what the recipe says, else what its results are
// made of, else the bench's only coincidences.
func (r *Recipe) referenceChannels(f Facts, results []*scan.Result, out *scan.Reference) []protocol.Finding {
	q := r.Reference
	if q.Of != "" {
		pair, ok := f.Coincidences[drivers.Channel(q.Of)]
		if !ok {
			return []protocol.Finding{q.ofAt.Finding(fmt.Sprintf("no coincidence channel %q on this bench", q.Of), known(q.Of, f.coincidences()))}
		}
		out.Pairs, out.Trigger, out.UnderTest = drivers.Channel(q.Of), pair[0], pair[1]
		return nil
	}
	for _, res := range results {
		if res == nil {
			continue
		}
		if res.Kind == scan.Efficiency {
			for _, c := range f.coincidences() {
				if pair := f.Coincidences[drivers.Channel(c)]; pair == [2]drivers.Channel{res.Trigger, res.UnderTest} || pair == [2]drivers.Channel{res.UnderTest, res.Trigger} {
					out.Pairs, out.Trigger, out.UnderTest = drivers.Channel(c), res.Trigger, res.UnderTest
					return nil
				}
			}
		}
		if pair, ok := f.Coincidences[res.Of]; ok {
			out.Pairs, out.Trigger, out.UnderTest = res.Of, pair[0], pair[1]
			return nil
		}
	}
	if len(f.Coincidences) == 1 {
		for c, pair := range f.Coincidences {
			out.Pairs, out.Trigger, out.UnderTest = c, pair[0], pair[1]
		}
		return nil
	}
	return []protocol.Finding{q.Cadence.at.Finding("references of which coincidences", fmt.Sprintf(`"of" with a coincidence channel, %s`, oneOf(f.coincidences())))}
}

func (f Facts) coincidences() []string {
	names := make([]string, 0, len(f.Coincidences))
	for c := range f.Coincidences {
		names = append(names, string(c))
	}
	slices.Sort(names)
	return names
}

// referencePlaces lists a set's readings: the top, and the flanks of each arm with everything else
// at the top. Nobody asks for an order of their own, so they come in the one that travels least.
func (r *Recipe) referencePlaces(f Facts, top []scan.AxisTarget, open bool) ([]scan.ReferencePlace, []protocol.Finding) {
	q := r.Reference
	places := []scan.ReferencePlace{{On: scan.Top, Axes: top}}
	if !q.Flanks {
		return places, nil
	}
	var findings []protocol.Finding
	for i, arm := range q.Axes {
		at := slices.IndexFunc(top, func(t scan.AxisTarget) bool { return t.Axis == arm })
		centre := top[at].Angle
		low, high := centre-q.Flank, centre+q.Flank
		if q.Flank == 0 {
			if f.Flanks == nil {
				return nil, []protocol.Finding{q.Cadence.at.Finding("flanks on a bench without optics", `a key such as "flank: 0.3 deg", from the top to where coincidences fall to half; or "on: [top]"; or blocks "optics" and "arms" in the bench file`)}
			}
			var err error
			if low, high, err = f.Flanks(arm, top); err != nil {
				if open {
					continue // where it stands is provisional, too
				}
				findings = append(findings, q.axesAt[i].Finding(fmt.Sprintf("no flanks of %s about %s: %v", arm, centre, err), `a top with coincidences, or a key such as "flank: 0.3 deg"`))
				continue
			}
			low, high = roundPartner(low.Degrees()), roundPartner(high.Degrees())
		}
		if !open && (low >= centre || high <= centre) {
			findings = append(findings, q.axesAt[i].Finding(fmt.Sprintf("a top of %s at %s, while coincidences fall to half at %s and %s", arm, centre, low, high), fmt.Sprintf("a top between them, such as at: {%s: %s}, or a key \"flank\"", arm, roundPartner((low.Degrees()+high.Degrees())/2))))
			continue
		}
		for _, flank := range []struct {
			on scan.Spot
			at unit.Angle
		}{{scan.LowFlank, low}, {scan.HighFlank, high}} {
			axes := slices.Clone(top)
			axes[at].Angle = flank.at
			places = append(places, scan.ReferencePlace{Arm: arm, On: flank.on, Axes: axes})
		}
	}
	points := make([]scan.Point, len(places))
	for i, p := range places {
		points[i].Axes = p.Axes
	}
	ordered := make([]scan.ReferencePlace, 0, len(places))
	for _, i := range route.Order(points, f.Axes) {
		ordered = append(ordered, places[i])
	}
	return ordered, findings
}

// referenceReach says which places of a set an axis cannot be sent to.
func (r *Recipe) referenceReach(f Facts, places []scan.ReferencePlace) (findings []protocol.Finding) {
	q := r.Reference
	for _, p := range places {
		for _, t := range p.Axes {
			if p.Arm != "" && p.Arm != t.Axis {
				continue // as at the top
			}
			at := q.Cadence.at
			if s, ok := find(q.at, t.Axis); ok {
				at = s.place
			}
			axis, _ := f.axis(t.Axis, at)
			if found, want, ok := reach(axis, t.Angle); !ok {
				findings = append(findings, at.Finding(fmt.Sprintf("the %s: %s", strings.ReplaceAll(string(p.On), "_", " "), found), want))
			}
		}
	}
	return findings
}

// judgedSigmas is how many standard uncertainties by counting a bound must have at least: with four,
// a set that did not change is called bad once in 16,000 by chance.
const judgedSigmas = 4

// referenceBounds refuses bounds that two sets that did not change would often break, by the counts
// that the declared source gives. Both sets count for the dwell T; C are coincidences, A the
// accidental ones among them, N = C - A, S singles. Counts are Poisson's.
//
//	singles:  S2/S1 - 1, standard uncertainty sqrt(2/S)
//	ratio:    of R = N/S: C is a binomial share of S, so that u(R)/R = sqrt(C/N² - 1/S), twice
//	centre:   a Gaussian with half width w at half maximum, flanks at c ± w. With d the shift,
//	          ln(N_high/N_low) = 2 w d/s² and s² = w²/(2 ln 2), hence d = w/(4 ln 2) ln(N_high/N_low)
//	          and u(d) = w/(4 ln 2) sqrt(C_low/N_low² + C_high/N_high²), twice. About d = 0 the
//	          height and the width, for which the top is there, do not correlate with it.
//
// A bench without optics expects nothing, and leaves this to the run.
func (r *Recipe) referenceBounds(f Facts, out scan.Reference) []protocol.Finding {
	if f.Expect == nil {
		return nil
	}
	q := r.Reference
	var settings []scan.SettingTarget
	for _, c := range r.columns() {
		if s, found := f.setting(c.Setting, c.nameAt); found == nil {
			if x, err := c.value(0, s.Unit); err == nil {
				settings = append(settings, scan.SettingTarget{Setting: c.Setting, Value: x})
			}
		}
	}
	type counts struct{ trigger, underTest, pairs, net float64 }
	expect := func(p scan.ReferencePlace) (counts, error) {
		e, err := f.Expect(p.Axes, settings)
		t := q.Dwell.Time.Seconds()
		return counts{t * e.CountsHz[out.Trigger], t * e.CountsHz[out.UnderTest], t * e.CountsHz[out.Pairs], t * (e.CountsHz[out.Pairs] - e.AccidentalsHz[out.Pairs])}, err
	}
	var top counts
	var unknown []error
	flanks := map[drivers.AxisName][]scan.ReferencePlace{}
	for _, p := range out.Places {
		if p.On == scan.Top {
			var err error
			top, err = expect(p)
			unknown = append(unknown, err)
		} else {
			flanks[p.Arm] = append(flanks[p.Arm], p)
		}
	}
	if err := errors.Join(unknown...); err != nil {
		return []protocol.Finding{q.Cadence.at.Finding(fmt.Sprintf("a top where nothing can be expected: %v", err), "a place that the bench file's optics describe")}
	}
	var findings []protocol.Finding
	judge := func(at strict.Place, bound, u float64, show func(float64) string) {
		switch least := judgedSigmas * u; {
		case bound == 0 || bound >= least:
		case math.IsInf(u, 0) || math.IsNaN(u):
			findings = append(findings, at.Finding("a bound where no counts are expected", "a place with light, or no such bound"))
		default:
			want := "at least " + show(roundedUp(least))
			if dwell := time.Duration(roundedUp(q.Dwell.Time.Seconds()*least*least/(bound*bound)) * float64(time.Second)); dwell <= maxDwell {
				want += fmt.Sprintf(`, or "dwell: %s" for the references`, unit.Written(dwell.Round(time.Millisecond)))
			}
			findings = append(findings, at.Finding(fmt.Sprintf("%s, less than four times its own counting error of %s in %s", show(bound), show(roundedUp(u)), unit.Span(q.Dwell.Time)), want))
		}
	}
	percent := func(x float64) string { return strconv.FormatFloat(100*x, 'g', 6, 64) + " %" }
	judge(q.singlesAt, q.Bounds.Singles, math.Sqrt(2/min(top.trigger, top.underTest)), percent)
	judge(q.ratioAt, q.Bounds.Ratio, math.Sqrt(2*(top.pairs/(top.net*top.net)-1/max(top.trigger, top.underTest))), percent)
	for _, arm := range q.Axes {
		if q.Bounds.Centre == 0 || len(flanks[arm]) != 2 {
			continue
		}
		var variance float64
		var at []float64
		for _, p := range flanks[arm] {
			c, err := expect(p)
			if err != nil || c.net <= 0 {
				c = counts{}
			}
			variance += c.pairs / (c.net * c.net)
			i := slices.IndexFunc(p.Axes, func(t scan.AxisTarget) bool { return t.Axis == arm })
			at = append(at, p.Axes[i].Angle.Degrees())
		}
		w := math.Abs(at[1]-at[0]) / 2
		judge(q.centreAt, q.Bounds.Centre.Degrees(), w/(4*math.Ln2)*math.Sqrt(2*variance), func(deg float64) string {
			return strconv.FormatFloat(deg, 'g', 6, 64) + " deg"
		})
	}
	return findings
}

// roundedUp keeps two digits, never less than x.
func roundedUp(x float64) float64 {
	if !(x > 0) || math.IsInf(x, 0) {
		return x
	}
	step := math.Pow(10, math.Floor(math.Log10(x))-1)
	up, _ := strconv.ParseFloat(strconv.FormatFloat(math.Ceil(x/step-1e-9)*step, 'g', 6, 64), 64)
	return up
}
