package bench

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"gemel/drivers"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// keepOuts reads what the axes must keep out of. Each has one of three forms:
//
//	{apart: [signal_arm, idler_arm], least: 2 deg}
//	{cone: [signal_arm, idler_arm], half_width: 0.5 deg, unless: shutter_closed}
//	{axis: idler_arm, between: [9 deg, 12 deg], while: {axis: crystal_tilt, between: [2 deg, 4 deg]}}
//
// and a margin. On which side of the pump an arm is follows from its role: the bench angles of
// signal_arm and idler_arm count away from the pump, each to its own side, whatever sense their
// controllers have. Axes of other roles turn nothing around the pump that the program knows of, so
// only ranges can be about them.
func (r *reader) keepOuts(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		k := scan.KeepOut{Name: e.Name, Margin: m.Opt("margin").Angle(0, unit.Turn/2)}
		apart, cone, axis := m.Opt("apart"), m.Opt("cone"), m.Opt("axis")
		foreign := func(want string, keys ...string) {
			for _, key := range keys {
				if v := m.Opt(key); v.Given() {
					v.Fail("a key of another kind of keep-out", want)
				}
			}
		}
		forms := 0
		for _, form := range []strict.Value{apart, cone, axis} {
			if form.Given() {
				forms++
			}
		}
		switch {
		case m.Given() && forms != 1:
			m.Fail(fmt.Sprintf("%d of \"apart\", \"cone\" and \"axis\"", forms), "one of them: two arms, arms and the pump, or a range of an axis")
		case apart.Given():
			k.Apart = &scan.Apart{Least: m.Need("least").Angle(unit.MicroArcsecond, unit.Turn/2)}
			for i, arm := range r.arms(apart, 2) {
				k.Apart.Arms[i] = arm
			}
			foreign("only least and margin with apart", "half_width", "unless", "between", "while")
		case cone.Given():
			k.Cone = &scan.Cone{HalfWidth: m.Need("half_width").Angle(unit.MicroArcsecond, unit.Turn/2), Arms: r.arms(cone, 1)}
			unless := m.Opt("unless")
			k.Cone.UnlessPumpClosed = unless.Choice([]string{"shutter_closed"}, "") != ""
			if unless.Good() && k.Cone.UnlessPumpClosed && r.file.Pump == nil {
				unless.Fail("a cone unless the shutter is closed, on a bench without a pump shutter", `a block "shutter", or no such key`)
			}
			foreign("only half_width, unless and margin with cone", "least", "between", "while")
		case axis.Given():
			k.Range = &scan.Range{Span: r.span(m)}
			if while := m.Opt("while"); while.Given() {
				w := while.Map()
				span := r.span(w)
				k.Range.While = &span
				w.Done()
			}
			foreign("only between, while and margin with axis", "least", "half_width", "unless")
		}
		if forms == 1 { // else nobody can say which keys belong to it
			m.Done()
		}
		r.file.KeepOuts = append(r.file.KeepOuts, k)
		r.file.keepOutsAt = append(r.file.keepOutsAt, e.Key)
	}
}

// arms reads the axes of a cone or of two arms that keep apart.
func (r *reader) arms(v strict.Value, least int) (arms []scan.Arm) {
	sides := map[string]int{signalArm: 1, idlerArm: -1}
	for _, item := range v.List(least, 2) {
		arm := scan.Arm{Axis: drivers.AxisName(item.Token())}
		if i := slices.IndexFunc(r.file.Axes, func(a Axis) bool { return a.Name == arm.Axis }); i >= 0 {
			arm.Side = sides[r.file.Axes[i].Role]
		}
		if item.Good() && arm.Side == 0 {
			item.Failf("an axis whose role is signal_arm or idler_arm")
		}
		arms = append(arms, arm)
	}
	return arms
}

func (r *reader) span(m strict.Map) scan.Span {
	axis := m.Need("axis")
	s := scan.Span{Axis: drivers.AxisName(axis.Token())}
	if axis.Good() && !slices.ContainsFunc(r.file.Axes, func(a Axis) bool { return a.Name == s.Axis }) {
		axis.Failf("an axis of this file")
	}
	s.Low, s.High = limits(m.Need("between"))
	return s
}

// checkKeepOuts holds that the keep-outs are sound, that the bench may stand where its axes park,
// and that no search for a zero with nobody there can enter one.
func (r *reader) checkKeepOuts() {
	f := r.file
	if r.doc.Err() != nil { // axes that were refused would be missed a second time
		return
	}
	axes := f.scanAxes()
	sound := true
	for i, k := range f.KeepOuts {
		if err := route.CheckKeepOuts(axes, f.KeepOuts[i:i+1]); err != nil {
			r.fail(f.keepOutsAt[i], found(err, k), "%s", wanted(err))
			sound = false
		}
	}
	if !sound {
		return
	}
	parks := f.parks()
	for i, k := range f.KeepOuts {
		if slices.ContainsFunc(about(k), func(a drivers.AxisName) bool { _, parked := parks[a]; return !parked }) {
			continue
		}
		if err := route.Stand(axes, f.KeepOuts[i:i+1], parks, route.State{PumpClosed: f.Pump != nil}); err != nil {
			if _, ok := errors.AsType[*route.Conflict](err); ok {
				r.fail(f.keepOutsAt[i], "at its park angles the bench stands in it: "+found(err, k), "%s", wanted(err))
			}
		}
	}
	for _, c := range f.Controllers {
		order, unattended := f.homing(c.Name)
		if !unattended || c.homesAll {
			continue // a person watches, or the file accepts the risk in words
		}
		if err := route.HomeOrder(axes, f.KeepOuts, nil, order); err != nil {
			name := order[0]
			if c, ok := errors.AsType[*route.Conflict](err); ok {
				name = c.Axes[0]
			}
			i := slices.IndexFunc(f.Axes, func(a Axis) bool { return strings.HasPrefix(err.Error(), string(a.Name)+":") })
			if i < 0 {
				i = slices.IndexFunc(f.Axes, func(a Axis) bool { return a.Name == name })
			}
			r.fail(f.Axes[i].homeAt, "unattended, though "+err.Error(), "a search that cannot: at and run_up that say which way it turns, narrower limits, or no unattended search")
		}
	}
}

// about are the axes a keep-out is about.
func about(k scan.KeepOut) (axes []drivers.AxisName) {
	switch {
	case k.Apart != nil:
		return []drivers.AxisName{k.Apart.Arms[0].Axis, k.Apart.Arms[1].Axis}
	case k.Cone != nil:
		for _, arm := range k.Cone.Arms {
			axes = append(axes, arm.Axis)
		}
	case k.Range != nil:
		axes = append(axes, k.Range.Axis)
		if k.Range.While != nil {
			axes = append(axes, k.Range.While.Axis)
		}
	}
	return axes
}

// found and wanted cut an error of package route in two.
func found(err error, k scan.KeepOut) string {
	text := strings.TrimPrefix(err.Error(), fmt.Sprintf("keep-out %q: ", k.Name))
	text, _, _ = strings.Cut(text, "; ")
	return text
}

func wanted(err error) string {
	_, want, _ := strings.Cut(err.Error(), "; ")
	if _, rest, ok := strings.Cut(want, " wants "); ok {
		return rest
	}
	return strings.TrimPrefix(want, "want ")
}

// scanAxes are the axes as route wants them.
func (f *File) scanAxes() []scan.Axis {
	axes := make([]scan.Axis, len(f.Axes))
	for i, a := range f.Axes {
		axes[i] = a.Axis
	}
	return axes
}

// parks are the park angles of the axes that have one.
func (f *File) parks() map[drivers.AxisName]unit.Angle {
	parks := map[drivers.AxisName]unit.Angle{}
	for _, a := range f.Axes {
		if a.Park != nil {
			parks[a.Name] = *a.Park
		}
	}
	return parks
}
