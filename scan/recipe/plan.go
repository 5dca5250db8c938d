package recipe

import (
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

// Facts are what a plan must know of the bench.
type Facts struct {
	Axes        []scan.Axis
	Settings    []Setting
	PumpShutter bool          // without one there are no darks
	GateMin     time.Duration // the counter's range of gates; zero: no bound known
	GateMax     time.Duration
	Watch       time.Duration // the longest gate without a look at the light: slices are cut to it; 0: none

	SliceBytes int // what one gate takes at most in the entry of its reading; 0: no bound known

	Singles      []drivers.Channel                      // channels that count one detector
	Coincidences map[drivers.Channel][2]drivers.Channel // the two singles channels of each coincidence channel
	Detectors    map[string]drivers.Channel             // the singles channel of each detector
	Sensors      []Sensor

	Pace       drivers.Pace // bench seconds in a real one; 0 counts as 1
	AcceptedAt time.Time    // when the run was accepted, in the bench's location: what a schedule is reckoned from

	// Conjugate says where the partner of a photon goes: into which angle of the other arm, for an
	// arm of this role (signal_arm, idler_arm) and angle at its filter's centre and a crystal
	// tilted so; bench angles in degrees. An error says why there is none. Nil: the optics are not
	// described.
	Conjugate func(role string, armDeg, tiltDeg float64) (partnerDeg float64, err error)

	KeepOuts []scan.KeepOut

	// Emission says at which bench angle an arm of this role sees the light of its filter's centre,
	// for a crystal tilted so; degrees. Nil: the optics are not described.
	Emission func(role string, tiltDeg float64) (deg float64, err error)
	// Flanks are the bench angles of an arm at which coincidences fall to half, with everything else
	// at the places given. Nil: the optics are not described.
	Flanks func(arm drivers.AxisName, top []scan.AxisTarget) (low, high unit.Angle, err error)
	// Expect says what the declared source gives at a place; axes and settings that it does not name
	// stand at park, at zero without one, or where the optics declare them. Nil: the optics are not
	// described.
	Expect func(axes []scan.AxisTarget, settings []scan.SettingTarget) (scan.Expected, error)

	// Earlier finds the value of an earlier result; its error says why there is none. Nil: there is
	// no logbook to ask, and all values are open.
	Earlier func(scan.EarlierAsk) (scan.EarlierSource, error)
}

// Setting is one setting a sweep may step.
type Setting struct {
	Name      drivers.DeviceName
	Unit      string  // a spelling of package unit
	Low, High float64 // in that unit
}

// Sensor is one sensor that may be watched.
type Sensor struct {
	Name drivers.DeviceName
	Unit string // a spelling of package unit
}

// The roles of axes that the model knows.
const (
	signalArm   = "signal_arm"
	idlerArm    = "idler_arm"
	crystalTilt = "crystal_tilt"
)

// Plan works the recipe out for one bench. The error is a *strict.Error with all findings, each at
// the line of the recipe that asks for what the bench cannot do.
//
// A plan whose Open is not empty is provisional: its places are not judged by limits and keep-outs,
// because nobody goes there. Planned again with the values known, it is judged in full.
func (r *Recipe) Plan(f Facts) (scan.Plan, error) {
	r, earlier, findings := r.resolved(f)
	follow := map[int]partners{}
	for i, c := range r.columns() {
		if c.ConjugateOf == "" {
			findings = append(findings, c.check(f)...)
			continue
		}
		p, found := r.partners(c, f)
		follow[i] = p
		findings = append(findings, found...)
	}
	findings = append(findings, checkGates(r.Dwell, r.dwellAt, f)...)
	results, found := r.results(f)
	findings = append(findings, found...)
	trigger, found := r.trigger(f, results)
	findings = append(findings, found...)
	if r.Dark != nil {
		findings = append(findings, checkGates(r.Dark.Dwell, r.Dark.dwellAt, f)...)
		if !f.PumpShutter {
			findings = append(findings, r.Dark.at.Finding("darks on a bench without a pump shutter", `no key "dark", or a "shutter" in the bench file`))
		}
	}
	background, found := r.background(f)
	findings = append(findings, found...)
	reference, found := r.reference(f, results)
	findings = append(findings, found...)
	refine, found := r.refine(f)
	findings = append(findings, found...)
	guards, found := r.guards(f)
	findings = append(findings, found...)
	schedule, found := r.schedule(f)
	findings = append(findings, found...)
	if err := strict.Join(findings...); err != nil {
		return scan.Plan{}, err
	}
	plan := scan.Plan{Title: r.Title, Points: r.expand(f, follow), Dwell: r.Dwell, Repeat: r.Repeat, Background: background, Reference: reference,
		Refine: refine, Guards: guards, Schedule: schedule, Trouble: r.Trouble, Earlier: earlier}
	for _, q := range results {
		plan.Results = append(plan.Results, *q)
	}
	plan.Dwell.Trigger = trigger
	if r.Dark != nil {
		dark := r.Dark.Cadence
		plan.Dark = &dark
	}
	for _, d := range dwells(&plan) {
		*d = f.watched(*d)
	}
	if err := strict.Join(r.keptOut(f, plan)...); err != nil {
		return scan.Plan{}, err
	}
	return plan, nil
}

// trigger is the channel whose counts end a dwell. An efficiency's own trigger does without being
// named again. results holds nil for one that is not sound.
func (r *Recipe) trigger(f Facts, results []*scan.Result) (drivers.Channel, []protocol.Finding) {
	if r.Dwell.Heralds == 0 {
		return "", nil
	}
	var c drivers.Channel
	if r.of != "" {
		var found []protocol.Finding
		if c, found = f.single(r.of, r.ofAt, "a dwell that ends on", whyNotPairs); found != nil {
			return "", found
		}
	}
	efficiencies := 0
	for i, q := range r.Results {
		if q.Kind != scan.Efficiency {
			continue
		}
		efficiencies++
		switch {
		case results[i] == nil: // what is wrong with it is reported there
		case c == "":
			c = results[i].Trigger
		case c != results[i].Trigger && r.of != "":
			return "", []protocol.Finding{r.ofAt.Finding(fmt.Sprintf("heralds of %q beside a result whose trigger is %q", r.of, q.Trigger), "the result's trigger, or no \"of\": ending on counts of the detector under test biases the efficiency")}
		case c != results[i].Trigger:
			return "", []protocol.Finding{q.triggerAt.Finding(fmt.Sprintf("the trigger %q, while the dwell ends on heralds of another", q.Trigger), "the same trigger in every efficiency, or a dwell of a fixed time: ending on counts of the detector under test biases the efficiency")}
		}
	}
	if c == "" && efficiencies == 0 {
		return "", []protocol.Finding{r.dwellAt.Finding("heralds of no channel", fmt.Sprintf(`"of" with the trigger's channel or detector, %s`, oneOf(f.singles())))}
	}
	return c, nil
}

// single finds the channel that a detector's or a channel's name means. A channel of coincidences
// is refused with the reason.
func (f Facts) single(name string, at strict.Place, use, why string) (drivers.Channel, []protocol.Finding) {
	channel := drivers.Channel(name)
	if c, ok := f.Detectors[name]; ok {
		return c, nil
	}
	if slices.Contains(f.Singles, channel) {
		return channel, nil
	}
	if _, pairs := f.Coincidences[channel]; pairs {
		return "", []protocol.Finding{at.Finding(fmt.Sprintf("%s the coincidence channel %q", use, name), "a channel of single counts: "+why)}
	}
	return "", []protocol.Finding{at.Finding(fmt.Sprintf("no channel and no detector %q on this bench", name), known(name, f.singles()))}
}

// singles lists every name of a channel of single counts.
func (f Facts) singles() []string {
	var names []string
	for _, c := range f.Singles {
		names = append(names, string(c))
	}
	for name := range f.Detectors {
		names = append(names, name)
	}
	slices.Sort(names)
	return slices.Compact(names)
}

func (r *Recipe) background(f Facts) (*scan.Background, []protocol.Finding) {
	b := r.Background
	if b == nil {
		return nil, nil
	}
	findings := checkGates(b.Dwell, b.dwellAt, f)
	if d := r.Dark; d != nil && d.Every > 0 && b.Every > 0 && share(*d)+share(b.Cadence) >= 1 {
		findings = append(findings, b.everyAt.Finding("darks and backgrounds that take all the time there is", fmt.Sprintf("less often: of every hour the darks take %.0f min, the backgrounds %.0f min", 60*share(*d), 60*share(b.Cadence))))
	}
	axis, found := f.axis(b.Turn, b.turnAt)
	switch {
	case found != nil:
		return nil, append(findings, found...)
	case r.sweeps(b.Turn):
		findings = append(findings, b.turnAt.Finding(fmt.Sprintf("the axis %q, which the sweep moves", b.Turn), "an axis that stands still while light is counted"))
	case axis.Park == nil:
		findings = append(findings, b.turnAt.Finding(fmt.Sprintf("the axis %q, which has no park angle", b.Turn),
			`"park" at this axis in the bench file: it stands there while light is counted, and that must be declared, because a run that was stopped in a background would spoil the next one`))
	default:
		if found, want, ok := reach(axis, *axis.Park); !ok {
			findings = append(findings, b.turnAt.Finding("its park angle: "+found, want+", in the bench file"))
		}
		if found, want, ok := reach(axis, *axis.Park+b.By); !ok {
			findings = append(findings, b.byAt.Finding(fmt.Sprintf("%s from its park angle of %s: %s", b.By, *axis.Park, found), want))
		}
	}
	if len(findings) > 0 {
		return nil, findings
	}
	return &scan.Background{Cadence: b.Cadence.Cadence, Axis: b.Turn, From: *axis.Park, By: b.By}, nil
}

func (r *Recipe) sweeps(axis drivers.AxisName) bool {
	_, ok := r.column(axis)
	return ok
}

// share is how much of the time a cadence takes that goes by the clock.
func share(c Cadence) float64 { return c.Dwell.Time.Seconds() / c.Every.Seconds() }

func (e Entry) check(f Facts) []protocol.Finding {
	if e.Axis != "" {
		return e.checkAxis(f)
	}
	return e.checkSetting(f)
}

func (e Entry) checkAxis(f Facts) []protocol.Finding {
	axis, findings := f.axis(e.Axis, e.nameAt)
	if findings != nil {
		return findings
	}
	if e.open() {
		return nil
	}
	var from unit.Angle
	if e.stand != nil {
		from = e.stand.angle
	}
	for _, k := range e.Values.extremes() {
		n, at := e.Values.at(k)
		if found, want, ok := reach(axis, from+n.angle()); !ok {
			findings = append(findings, at.Finding(found+e.from(), want))
		}
	}
	return findings
}

func (f Facts) axis(name drivers.AxisName, at strict.Place) (scan.Axis, []protocol.Finding) {
	i := slices.IndexFunc(f.Axes, func(a scan.Axis) bool { return a.Name == name })
	if i >= 0 {
		return f.Axes[i], nil
	}
	names := make([]string, len(f.Axes))
	for k, a := range f.Axes {
		names[k] = string(a.Name)
	}
	return scan.Axis{}, []protocol.Finding{at.Finding(fmt.Sprintf("no axis %q on this bench", name), known(string(name), names))}
}

// role is the role of an axis; empty when there is no such axis.
func (f Facts) role(name drivers.AxisName) string {
	for _, a := range f.Axes {
		if a.Name == name {
			return a.Role
		}
	}
	return ""
}

// reach says whether an axis may be sent to an angle, as a route would be asked at the moment of
// moving, and if not what is wrong and what would do.
func reach(axis scan.Axis, a unit.Angle) (found, want string, ok bool) {
	if route.Check(axis, a) == nil {
		return "", "", true
	}
	low, high := axis.Low, axis.High
	if axis.Rising {
		low += axis.Backlash
	} else {
		high -= axis.Backlash
	}
	want = fmt.Sprintf("%s to %s", low, high)
	if !axis.Limits(a) {
		return fmt.Sprintf("%s is beyond the soft limits of %s", a, axis.Name), want, false
	}
	return fmt.Sprintf("%s leaves no room within the soft limits of %s to approach by %s", a, axis.Name, axis.Backlash), want, false
}

func (e Entry) checkSetting(f Facts) []protocol.Finding {
	s, findings := f.setting(e.Setting, e.nameAt)
	if findings != nil {
		return findings
	}
	for _, k := range e.Values.extremes() {
		n, at := e.Values.at(k)
		x, err := e.value(k, s.Unit)
		switch {
		case err != nil:
			findings = append(findings, at.Finding(n.String(), fmt.Sprintf("a value in %s, the unit of %s", s.Unit, s.Name)))
		case !e.open() && (x < s.Low || x > s.High):
			written := n.String()
			if e.stand != nil {
				written = fmt.Sprintf("%g %s", x, s.Unit)
			}
			findings = append(findings, at.Finding(fmt.Sprintf("%s is beyond the limits of %s%s", written, s.Name, e.from()), fmt.Sprintf("%g %s to %g %s", s.Low, s.Unit, s.High, s.Unit)))
		}
	}
	return findings
}

// value is value i of a setting's entry, in the setting's unit.
func (e Entry) value(i int, name string) (float64, error) {
	n, _ := e.Values.at(i)
	if e.stand == nil {
		return n.in(name)
	}
	x, err := n.difference(name)
	if err != nil || x == 0 {
		return e.stand.value, err // to the last digit
	}
	return strconv.ParseFloat(strconv.FormatFloat(e.stand.value+x, 'g', 12, 64), 64)
}

func (f Facts) setting(name drivers.DeviceName, at strict.Place) (Setting, []protocol.Finding) {
	i := slices.IndexFunc(f.Settings, func(s Setting) bool { return s.Name == name })
	if i >= 0 {
		return f.Settings[i], nil
	}
	names := make([]string, len(f.Settings))
	for k, s := range f.Settings {
		names[k] = string(s.Name)
	}
	return Setting{}, []protocol.Finding{at.Finding(fmt.Sprintf("no setting %q on this bench", name), known(string(name), names))}
}

// in returns the value in another unit of its kind, as the decimal number a person would write: the
// twelfth digit is far below what a setting can do, the sixteenth is noise of the conversion.
func (n number) in(name string) (float64, error) {
	if n.unit == name {
		f, _ := n.value.Float64()
		return f, nil
	}
	own, _ := n.value.Float64()
	_, kind, _, err := unit.ParseAny("1 " + name)
	if err != nil {
		return 0, err
	}
	// Not the decimal expansion: a grid value may have more digits than a number in a file may.
	base, err := unit.Parse(strconv.FormatFloat(own, 'g', 17, 64)+" "+n.unit, kind)
	if err != nil {
		return 0, err
	}
	x, err := unit.In(base, name)
	if err != nil {
		return 0, err
	}
	return strconv.ParseFloat(strconv.FormatFloat(x, 'g', 12, 64), 64)
}

func known(name string, names []string) string {
	if len(names) == 0 {
		return "none: the bench file has none"
	}
	slices.Sort(names)
	if near := strict.Nearest(name, names); near != "" {
		return fmt.Sprintf("%q, which is nearest", near)
	}
	return oneOf(names)
}

// dwells are all that a plan counts for. What plan and recipe share is parted first.
func dwells(plan *scan.Plan) []*scan.Dwell {
	all := []*scan.Dwell{&plan.Dwell}
	if plan.Dark != nil {
		all = append(all, &plan.Dark.Dwell)
	}
	if b := plan.Background; b != nil {
		own := *b
		plan.Background = &own
		all = append(all, &own.Dwell)
	}
	if q := plan.Reference; q != nil {
		own := *q
		plan.Reference = &own
		all = append(all, &own.Dwell)
	}
	return all
}

// watched cuts the slices of a dwell into equal gates, to the millisecond, so that the light is looked
// at as often as its detectors need.
func (f Facts) watched(d scan.Dwell) scan.Dwell {
	if f.Watch > 0 && d.Slice > f.Watch {
		n := (d.Slice + f.Watch - 1) / f.Watch
		cut := (d.Slice + n - 1) / n
		d.Slice = min((cut + time.Millisecond - 1).Truncate(time.Millisecond), f.Watch)
	}
	return d
}

// restOfReading is more than an entry of a reading holds beside its slices, in bytes: some hundred for
// each axis, setting, sensor and channel.
const restOfReading = 256 << 10

func checkGates(d scan.Dwell, at strict.Place, f Facts) []protocol.Finding {
	d = f.watched(d)
	n := int((d.Time + d.Slice - 1) / d.Slice)
	if n > maxSlices {
		return []protocol.Finding{at.Finding(fmt.Sprintf("%d gates of %s, as often as the light has to be looked at", n, unit.Span(d.Slice)), fmt.Sprintf("at most %d: a shorter dwell and more repeats", maxSlices))}
	}
	if f.SliceBytes > 0 && n > (protocol.MostBody-restOfReading)/f.SliceBytes {
		return []protocol.Finding{at.Finding(fmt.Sprintf("%d gates of %s, each of up to %d bytes with this counter's channels and their names", n, unit.Span(d.Slice), f.SliceBytes),
			fmt.Sprintf("at most %d, which one entry of the logbook holds: longer slices, or a shorter dwell and more repeats", (protocol.MostBody-restOfReading)/f.SliceBytes))}
	}
	low, high := f.GateMin, f.GateMax
	if high == 0 {
		high = math.MaxInt64
	}
	rest := d.Time % d.Slice
	switch {
	case d.Slice > high:
		return []protocol.Finding{at.Finding("a gate of "+unit.Span(d.Slice), fmt.Sprintf("at most %s, this counter's longest: cut the dwell, such as {time: %s, slice: %s}", unit.Span(high), unit.Written(d.Time), unit.Written(high)))}
	case d.Slice < low:
		return []protocol.Finding{at.Finding("a gate of "+unit.Span(d.Slice), fmt.Sprintf("at least %s, this counter's shortest", unit.Span(low)))}
	case rest != 0 && rest < low:
		return []protocol.Finding{at.Finding("a last slice of "+unit.Span(rest), fmt.Sprintf("at least %s, this counter's shortest: a slice that divides the dwell", unit.Span(low)))}
	}
	return nil
}

// expand lists the points, the last entry of the sweep running fastest. follow holds, by the place
// of their column, where conjugates go; a point where one goes nowhere is empty, and names the other
// axes alone.
func (r *Recipe) expand(f Facts, follow map[int]partners) []scan.Point {
	n := r.Points()
	if len(r.Sweep) == 0 {
		return make([]scan.Point, 1)
	}
	columns := r.columns()
	angles, values := make([][]unit.Angle, len(columns)), make([][]float64, len(columns))
	axes := 0
	for i, c := range columns {
		if c.Axis != "" {
			axes++
			angles[i] = c.angles()
			continue
		}
		values[i] = make([]float64, c.Values.Len())
		s, _ := f.setting(c.Setting, c.nameAt)
		for k := range values[i] {
			values[i][k], _ = c.value(k, s.Unit) // checked at the extremes: a unit that fails, fails there
		}
	}
	points := make([]scan.Point, n)
	axisTargets, settingTargets := make([]scan.AxisTarget, 0, n*axes), make([]scan.SettingTarget, 0, n*(len(columns)-axes))
	at := make([]int, len(r.Sweep))
	for p := range points {
		r.place(p, at)
		a, s := len(axisTargets), len(settingTargets)
		for i, c := range columns {
			if c.Axis == "" {
				settingTargets = append(settingTargets, scan.SettingTarget{Setting: c.Setting, Value: values[i][at[c.level]]})
				continue
			}
			angle := angles[i][at[c.level]]
			if partner, ok := follow[i]; ok {
				if points[p].Empty = partner.empty(at); points[p].Empty != "" {
					continue // nowhere to send this arm
				}
				angle += partner.at(at)
			}
			axisTargets = append(axisTargets, scan.AxisTarget{Axis: c.Axis, Angle: angle})
		}
		points[p].Axes, points[p].Settings = axisTargets[a:len(axisTargets):len(axisTargets)], settingTargets[s:len(settingTargets):len(settingTargets)]
	}
	return points
}

// place works out which value of each entry point p has. Serpentine turns a line round when the
// number of lines before it is odd, on every level, so that neighbours differ in one entry only.
func (r *Recipe) place(p int, at []int) {
	for i := len(r.Sweep) - 1; i >= 0; i-- {
		n := r.Sweep[i].Values.Len()
		line := p / n
		at[i] = p % n
		if r.Order == Serpentine && line%2 == 1 {
			at[i] = n - 1 - at[i]
		}
		p = line
	}
}

// oneOf lists the names there are, each in quotes.
func oneOf(names []string) string {
	quoted := make([]string, len(names))
	for i, name := range names {
		quoted[i] = strconv.Quote(name)
	}
	switch len(quoted) {
	case 0:
		return "none: the bench file has none"
	case 1:
		return quoted[0]
	}
	return "one of " + strings.Join(quoted, ", ")
}
