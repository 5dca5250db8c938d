package recipe

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Facts are what a plan must know of the bench.
type Facts struct {
	Axes        []scan.Axis
	Settings    []Setting
	PumpShutter bool          // without one there are no darks
	GateMin     time.Duration // the counter's range of gates; zero: no bound known
	GateMax     time.Duration
}

// Setting is one setting a sweep may step.
type Setting struct {
	Name      drivers.DeviceName
	Unit      string  // a spelling of package unit
	Low, High float64 // in that unit
}

// Plan works the recipe out for one bench. The error is a *strict.Error with all findings, each at
// the line of the recipe that asks for what the bench cannot do.
func (r *Recipe) Plan(f Facts) (scan.Plan, error) {
	var findings []protocol.Finding
	for _, e := range r.Sweep {
		findings = append(findings, e.check(f)...)
	}
	findings = append(findings, checkGates(r.Dwell, r.dwellAt, f)...)
	if r.Dark != nil {
		findings = append(findings, checkGates(r.Dark.Dwell, r.darkDwellAt, f)...)
		if !f.PumpShutter {
			findings = append(findings, r.darkAt.Finding("darks on a bench without a pump shutter", `no key "dark", or a "shutter" in the bench file`))
		}
	}
	if err := strict.Join(findings...); err != nil {
		return scan.Plan{}, err
	}
	plan := scan.Plan{Title: r.Title, Points: r.expand(f), Dwell: r.Dwell, Repeat: r.Repeat, Trouble: r.Trouble}
	if r.Dark != nil {
		dark := *r.Dark
		plan.Dark = &dark
	}
	return plan, nil
}

func (e Entry) check(f Facts) []protocol.Finding {
	if e.Axis != "" {
		return e.checkAxis(f.Axes)
	}
	return e.checkSetting(f.Settings)
}

func (e Entry) checkAxis(axes []scan.Axis) []protocol.Finding {
	i := slices.IndexFunc(axes, func(a scan.Axis) bool { return a.Name == e.Axis })
	if i < 0 {
		names := make([]string, len(axes))
		for k, a := range axes {
			names[k] = string(a.Name)
		}
		return []protocol.Finding{e.nameAt.Finding(fmt.Sprintf("no axis %q on this bench", e.Axis), known(string(e.Axis), names))}
	}
	var findings []protocol.Finding
	for _, k := range e.Values.extremes() {
		n, at := e.Values.at(k)
		a, axis := n.angle(), axes[i]
		low, high := axis.Low, axis.High
		if axis.Rising {
			low += axis.Backlash
		} else {
			high -= axis.Backlash
		}
		switch {
		case !axis.Limits(a):
			findings = append(findings, at.Finding(fmt.Sprintf("%s is beyond the soft limits of %s", a, e.Axis), fmt.Sprintf("%s to %s", low, high)))
		case a < low || a > high:
			findings = append(findings, at.Finding(fmt.Sprintf("%s leaves no room within the soft limits of %s to approach by %s", a, e.Axis, axis.Backlash), fmt.Sprintf("%s to %s", low, high)))
		}
	}
	return findings
}

func (e Entry) checkSetting(settings []Setting) []protocol.Finding {
	i := slices.IndexFunc(settings, func(s Setting) bool { return s.Name == e.Setting })
	if i < 0 {
		names := make([]string, len(settings))
		for k, s := range settings {
			names[k] = string(s.Name)
		}
		return []protocol.Finding{e.nameAt.Finding(fmt.Sprintf("no setting %q on this bench", e.Setting), known(string(e.Setting), names))}
	}
	s := settings[i]
	var findings []protocol.Finding
	for _, k := range e.Values.extremes() {
		n, at := e.Values.at(k)
		x, err := n.in(s.Unit)
		switch {
		case err != nil:
			findings = append(findings, at.Finding(n.String(), fmt.Sprintf("a value in %s, the unit of %s", s.Unit, s.Name)))
		case x < s.Low || x > s.High:
			findings = append(findings, at.Finding(fmt.Sprintf("%s is beyond the limits of %s", n, s.Name), fmt.Sprintf("%g %s to %g %s", s.Low, s.Unit, s.High, s.Unit)))
		}
	}
	return findings
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
	return fmt.Sprintf("one of %q", names)
}

func checkGates(d scan.Dwell, at strict.Place, f Facts) []protocol.Finding {
	low, high := f.GateMin, f.GateMax
	if high == 0 {
		high = math.MaxInt64
	}
	rest := d.Time % d.Slice
	switch {
	case d.Slice > high:
		return []protocol.Finding{at.Finding("a gate of "+strict.Span(d.Slice), fmt.Sprintf("at most %s, this counter's longest: cut the dwell, such as {time: %s, slice: %s}", strict.Span(high), strict.Span(d.Time), strict.Span(high)))}
	case d.Slice < low:
		return []protocol.Finding{at.Finding("a gate of "+strict.Span(d.Slice), fmt.Sprintf("at least %s, this counter's shortest", strict.Span(low)))}
	case rest != 0 && rest < low:
		return []protocol.Finding{at.Finding("a last slice of "+strict.Span(rest), fmt.Sprintf("at least %s, this counter's shortest: a slice that divides the dwell", strict.Span(low)))}
	}
	return nil
}

// expand lists the points, the last entry of the sweep running fastest.
func (r *Recipe) expand(f Facts) []scan.Point {
	n := r.Points()
	if len(r.Sweep) == 0 {
		return make([]scan.Point, 1)
	}
	var axes, settings []int // indices of entries
	angles, values := make([][]unit.Angle, len(r.Sweep)), make([][]float64, len(r.Sweep))
	for i, e := range r.Sweep {
		if e.Axis != "" {
			axes = append(axes, i)
			angles[i] = make([]unit.Angle, e.Values.Len())
			for k := range angles[i] {
				x, _ := e.Values.at(k)
				angles[i][k] = x.angle()
			}
			continue
		}
		settings = append(settings, i)
		values[i] = make([]float64, e.Values.Len())
		name := f.Settings[slices.IndexFunc(f.Settings, func(s Setting) bool { return s.Name == e.Setting })].Unit
		for k := range values[i] {
			x, _ := e.Values.at(k)
			values[i][k], _ = x.in(name) // checked at the extremes: a unit that fails, fails there
		}
	}
	points := make([]scan.Point, n)
	axisTargets, settingTargets := make([]scan.AxisTarget, 0, n*len(axes)), make([]scan.SettingTarget, 0, n*len(settings))
	at := make([]int, len(r.Sweep))
	for p := range points {
		r.place(p, at)
		a, s := len(axisTargets), len(settingTargets)
		for _, i := range axes {
			axisTargets = append(axisTargets, scan.AxisTarget{Axis: r.Sweep[i].Axis, Angle: angles[i][at[i]]})
		}
		for _, i := range settings {
			settingTargets = append(settingTargets, scan.SettingTarget{Setting: r.Sweep[i].Setting, Value: values[i][at[i]]})
		}
		points[p] = scan.Point{Axes: axisTargets[a:len(axisTargets):len(axisTargets)], Settings: settingTargets[s:len(settingTargets):len(settingTargets)]}
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
