package route_test

import (
	"fmt"
	"maps"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// The random benches of these tests have whole degrees everywhere. A keep-out is open at its edges,
// so that a move of one axis, or a box, that meets one at all meets it at a whole or a half degree:
// what is sampled every half degree is not sampled but looked at whole.
const deg = unit.Degree

type place map[drivers.AxisName]unit.Angle

// inside is how deep a place lies in a keep-out, in degrees, margin and tolerances included; 0 or
// less outside. It is written from the definition, in floating degrees.
func inside(k scan.KeepOut, axes []scan.Axis, at place, closed bool) float64 {
	tol := func(name drivers.AxisName) float64 {
		for _, a := range axes {
			if a.Name == name {
				return a.Tolerance.Degrees()
			}
		}
		panic("no axis " + name)
	}
	around := func(d float64) float64 { return math.Abs(math.Remainder(d, 360)) }
	margin := k.Margin.Degrees()
	switch {
	case k.Apart != nil:
		a, b := k.Apart.Arms[0], k.Apart.Arms[1]
		d := around(float64(a.Side)*at[a.Axis].Degrees() - float64(b.Side)*at[b.Axis].Degrees())
		return k.Apart.Least.Degrees() + margin + tol(a.Axis) + tol(b.Axis) - d
	case k.Cone != nil:
		deepest := math.Inf(-1)
		if closed && k.Cone.UnlessPumpClosed {
			return deepest
		}
		for _, a := range k.Cone.Arms {
			deepest = max(deepest, k.Cone.HalfWidth.Degrees()+margin+tol(a.Axis)-around(at[a.Axis].Degrees()))
		}
		return deepest
	}
	in := func(s scan.Span) float64 {
		x, more := at[s.Axis].Degrees(), margin+tol(s.Axis)
		return min(x-s.Low.Degrees()+more, s.High.Degrees()+more-x)
	}
	if k.Range.While == nil {
		return in(k.Range.Span)
	}
	return min(in(k.Range.Span), in(*k.Range.While))
}

func concerns(k scan.KeepOut) []drivers.AxisName {
	switch {
	case k.Apart != nil:
		return []drivers.AxisName{k.Apart.Arms[0].Axis, k.Apart.Arms[1].Axis}
	case k.Range != nil && k.Range.While != nil:
		return []drivers.AxisName{k.Range.Axis, k.Range.While.Axis}
	case k.Range != nil:
		return []drivers.AxisName{k.Range.Axis}
	}
	var names []drivers.AxisName
	for _, a := range k.Cone.Arms {
		names = append(names, a.Axis)
	}
	return names
}

// deepestInBox looks at every half degree of the box between two places.
func deepestInBox(k scan.KeepOut, axes []scan.Axis, from, to place, closed bool) float64 {
	deepest := math.Inf(-1)
	at := maps.Clone(from)
	var walk func(names []drivers.AxisName)
	walk = func(names []drivers.AxisName) {
		if len(names) == 0 {
			deepest = max(deepest, inside(k, axes, at, closed))
			return
		}
		n := names[0]
		for x := min(from[n], to[n]); x <= max(from[n], to[n]); x += deg / 2 {
			at[n] = x
			walk(names[1:])
		}
		at[n] = from[n]
	}
	if k.Cone != nil { // each arm by itself
		for _, n := range concerns(k) {
			walk([]drivers.AxisName{n})
		}
		return deepest
	}
	walk(concerns(k))
	return deepest
}

// deepestOnLine follows the motion of axes in step, each late by a play of its own.
func deepestOnLine(k scan.KeepOut, axes []scan.Axis, from, to place, play map[drivers.AxisName]float64, closed bool) float64 {
	deepest := math.Inf(-1)
	at := maps.Clone(from)
	for i := range 301 {
		for name, a := range from {
			way := (to[name] - a).Degrees()
			gone := min(max(0, math.Abs(way)*float64(i)/300-play[name]), math.Abs(way))
			at[name] = a + unit.Degrees(math.Copysign(gone, way))
		}
		deepest = max(deepest, inside(k, axes, at, closed))
	}
	return deepest
}

var names = []drivers.AxisName{"signal_arm", "idler_arm", "crystal_tilt", "plate"}

func drawAxes(t *rapid.T, n int, backlash int) []scan.Axis {
	var axes []scan.Axis
	for _, name := range names[:n] {
		low := rapid.IntRange(-15, 0).Draw(t, "low")
		a := scan.Axis{Name: name, Controller: "one", Low: unit.Angle(low) * deg, High: unit.Angle(low+rapid.IntRange(6, 25).Draw(t, "width")) * deg,
			Tolerance: unit.Angle(rapid.IntRange(0, 1).Draw(t, "tolerance")) * deg,
			Backlash:  unit.Angle(rapid.IntRange(0, backlash).Draw(t, "backlash")) * deg, Rising: rapid.Bool().Draw(t, "rising"),
			Together: rapid.Bool().Draw(t, "together"), SpeedDegS: 1}
		if rapid.IntRange(0, 3).Draw(t, "controller") == 0 {
			a.Controller = "two"
		}
		axes = append(axes, a)
	}
	return axes
}

func drawKeepOuts(t *rapid.T, axes []scan.Axis, most int) []scan.KeepOut {
	side := func() int { return 2*rapid.IntRange(0, 1).Draw(t, "side") - 1 }
	span := func(a scan.Axis) scan.Span {
		low := rapid.IntRange(int(a.Low/deg)-2, int(a.High/deg)).Draw(t, "from")
		return scan.Span{Axis: a.Name, Low: unit.Angle(low) * deg, High: unit.Angle(low+rapid.IntRange(1, 6).Draw(t, "wide")) * deg}
	}
	var all []scan.KeepOut
	for i := range rapid.IntRange(1, most).Draw(t, "keep-outs") {
		k := scan.KeepOut{Name: fmt.Sprint("k", i), Margin: unit.Angle(rapid.IntRange(0, 1).Draw(t, "margin")) * deg}
		two := rapid.Permutation(axes).Draw(t, "axes")[:2]
		switch rapid.IntRange(0, 3).Draw(t, "kind") {
		case 0:
			k.Apart = &scan.Apart{Arms: [2]scan.Arm{{Axis: two[0].Name, Side: side()}, {Axis: two[1].Name, Side: side()}}, Least: unit.Angle(rapid.IntRange(1, 8).Draw(t, "least")) * deg}
		case 1:
			k.Range = &scan.Range{Span: span(two[0])}
		case 2:
			while := span(two[1])
			k.Range = &scan.Range{Span: span(two[0]), While: &while}
		case 3:
			k.Cone = &scan.Cone{Arms: []scan.Arm{{Axis: two[0].Name, Side: side()}}, HalfWidth: unit.Angle(rapid.IntRange(1, 3).Draw(t, "half width")) * deg, UnlessPumpClosed: rapid.Bool().Draw(t, "unless")}
		}
		all = append(all, k)
	}
	return all
}

// drawPlace draws a place within the limits that is outside all keep-outs, or says that none was found.
func drawPlace(t *rapid.T, axes []scan.Axis, keepOuts []scan.KeepOut, closed bool) (place, bool) {
	rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "place"), 1))
	for range 40 {
		at := place{}
		for _, a := range axes {
			low, high := int(a.Low/deg), int(a.High/deg)
			if a.Rising {
				low += int(a.Backlash / deg)
			} else {
				high -= int(a.Backlash / deg)
			}
			at[a.Name] = unit.Angle(low+rng.IntN(high-low+1)) * deg
		}
		if clear(keepOuts, axes, at, closed) {
			return at, true
		}
	}
	return nil, false
}

func clear(keepOuts []scan.KeepOut, axes []scan.Axis, at place, closed bool) bool {
	for _, k := range keepOuts {
		if inside(k, axes, at, closed) > 1e-9 {
			return false
		}
	}
	return true
}

func startOf(a scan.Axis, target unit.Angle) unit.Angle {
	if a.Rising {
		return target - a.Backlash
	}
	return target + a.Backlash
}

// late says whether an axis comes from the wrong side.
func late(a scan.Axis, from, target unit.Angle) bool {
	return a.Backlash > 0 && (a.Rising && from > startOf(a, target) || !a.Rising && from < startOf(a, target))
}

// measured leaves out the tolerance of axes that do not move: where they stand is known.
func measured(axes []scan.Axis, targets []scan.AxisTarget) []scan.Axis {
	axes = slices.Clone(axes)
	for i := range axes {
		if !slices.ContainsFunc(targets, func(t scan.AxisTarget) bool { return t.Axis == axes[i].Name }) {
			axes[i].Tolerance = 0
		}
	}
	return axes
}

// follow makes the legs and fails the test where one offends.
func follow(t *rapid.T, axes []scan.Axis, keepOuts []scan.KeepOut, at place, targets []scan.AxisTarget, legs [][]scan.AxisTarget, closed bool) {
	t.Helper()
	axes = measured(axes, targets)
	rng := rand.New(rand.NewPCG(7, 7))
	began := map[string]float64{}
	for _, k := range keepOuts {
		began[k.Name] = max(0, inside(k, axes, at, closed))
	}
	asked := map[drivers.AxisName]bool{}
	for _, target := range targets {
		asked[target.Axis] = true
	}
	here := maps.Clone(at)
	lastFrom := place{}
	for n, leg := range legs {
		next := maps.Clone(here)
		for _, m := range leg {
			if !asked[m.Axis] {
				t.Fatalf("leg %d of %v moves %s, which nobody asked for", n, legs, m.Axis)
			}
			next[m.Axis] = m.Angle
			lastFrom[m.Axis] = here[m.Axis]
		}
		for _, a := range axes {
			if asked[a.Name] && (next[a.Name] < min(a.Low, at[a.Name]) || next[a.Name] > max(a.High, at[a.Name])) {
				t.Fatalf("leg %d of %v takes %s beyond its limits", n, legs, a.Name)
			}
		}
		for _, k := range keepOuts {
			involved := false
			inStep, moving := true, 0
			var controller drivers.DeviceName
			for _, name := range concerns(k) {
				involved = involved || asked[name]
				for _, a := range axes {
					if a.Name != name || here[name] == next[name] {
						continue
					}
					moving++
					inStep = inStep && a.Together && (moving == 1 || a.Controller == controller)
					controller = a.Controller
				}
			}
			if !involved {
				continue
			}
			deepest := math.Inf(-1)
			if moving == 2 && inStep {
				for range 3 {
					play := map[drivers.AxisName]float64{}
					for _, a := range axes {
						play[a.Name] = rng.Float64() * a.Backlash.Degrees() * float64(rng.IntN(2))
					}
					deepest = max(deepest, deepestOnLine(k, axes, here, next, play, closed))
				}
			} else {
				deepest = deepestInBox(k, axes, here, next, closed)
			}
			if deepest > began[k.Name]+1e-6 {
				t.Fatalf("leg %d of %v from %v comes %.3f deg into %s; at the beginning it was %.3f", n, legs, at, deepest, k.Name, began[k.Name])
			}
		}
		here = next
	}
	for _, target := range targets {
		if here[target.Axis] != target.Angle {
			t.Fatalf("%v from %v ends with %s at %s; want %s", legs, at, target.Axis, here[target.Axis], target.Angle)
		}
		for _, a := range axes {
			if a.Name == target.Axis && late(a, lastFrom[a.Name], target.Angle) {
				t.Fatalf("%v: the last leg of %s begins at %s; want its approach of %s from the declared side", legs, a.Name, lastFrom[a.Name], a.Backlash)
			}
		}
	}
}

func drawTargets(t *rapid.T, axes []scan.Axis, end place) []scan.AxisTarget {
	var targets []scan.AxisTarget
	n := rapid.IntRange(1, len(axes)).Draw(t, "moved")
	for _, a := range rapid.Permutation(axes).Draw(t, "order")[:n] {
		targets = append(targets, scan.AxisTarget{Axis: a.Name, Angle: end[a.Name]})
	}
	return targets
}

// oneByOne says whether some order of single axes is free.
func oneByOne(axes []scan.Axis, keepOuts []scan.KeepOut, at place, targets []scan.AxisTarget, closed bool) bool {
	if len(targets) == 0 {
		return true
	}
	for i, target := range targets {
		var a scan.Axis
		for _, x := range axes {
			if x.Name == target.Axis {
				a = x
			}
		}
		stops := []unit.Angle{target.Angle}
		if late(a, at[a.Name], target.Angle) {
			stops = []unit.Angle{startOf(a, target.Angle), target.Angle}
		}
		here, free := maps.Clone(at), true
		for _, stop := range stops {
			next := maps.Clone(here)
			next[a.Name] = stop
			for _, k := range keepOuts {
				free = free && deepestInBox(k, axes, here, next, closed) <= 1e-9
			}
			here = next
		}
		rest := append(append([]scan.AxisTarget(nil), targets[:i]...), targets[i+1:]...)
		if free && oneByOne(axes, keepOuts, here, rest, closed) {
			return true
		}
	}
	return false
}

func TestNoLegEntersAKeepOutAndASafeOrderIsFound(t *testing.T) {
	found, refused, turns := 0, 0, 0
	rapid.Check(t, func(t *rapid.T) {
		axes := drawAxes(t, rapid.IntRange(2, 4).Draw(t, "axes"), 3)
		keepOuts := drawKeepOuts(t, axes, 3)
		closed := rapid.Bool().Draw(t, "closed")
		at, ok := drawPlace(t, axes, keepOuts, closed)
		end, ok2 := drawPlace(t, axes, keepOuts, closed)
		if !ok || !ok2 {
			t.Skip("no room on this bench")
		}
		targets := drawTargets(t, axes, end)
		legs, err := route.Legs(axes, keepOuts, at, targets, route.State{PumpClosed: closed})
		if err == nil {
			found++
			if len(legs) > 2 {
				turns++
			}
			follow(t, axes, keepOuts, at, targets, legs, closed)
			return
		}
		refused++
		if oneByOne(measured(axes, targets), keepOuts, at, targets, closed) {
			t.Fatalf("refused though some order of single axes is free from %v to %v: %v", at, targets, err)
		}
	})
	t.Logf("%d found, %d of them by more than two legs; %d refused", found, turns, refused)
}

// An axis that was let stop up to its tolerance inside an edge may go on, and not deeper.
func TestAWayBeginsWhereTheAxesReallyStand(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		axes := drawAxes(t, rapid.IntRange(2, 4).Draw(t, "axes"), 3)
		keepOuts := drawKeepOuts(t, axes, 3)
		at, ok := drawPlace(t, axes, keepOuts, false)
		end, ok2 := drawPlace(t, axes, keepOuts, false)
		if !ok || !ok2 {
			t.Skip("no room on this bench")
		}
		for _, a := range axes {
			at[a.Name] += a.Tolerance * unit.Angle(rapid.IntRange(-1, 1).Draw(t, "off"))
		}
		if err := route.Stand(axes, keepOuts, at, route.State{}); err != nil {
			t.Fatalf("within tolerance of a free place: %v", err)
		}
		targets := drawTargets(t, axes, end)
		legs, err := route.Legs(axes, keepOuts, at, targets, route.State{})
		if err == nil {
			follow(t, axes, keepOuts, at, targets, legs, false)
		}
	})
}

// reachable floods the whole degrees of two axes without backlash.
func reachable(axes []scan.Axis, keepOuts []scan.KeepOut, at, end place) bool {
	type spot [2]int
	a, b := axes[0], axes[1]
	put := func(x, y float64) place {
		p := maps.Clone(at)
		p[a.Name], p[b.Name] = unit.Degrees(x), unit.Degrees(y)
		return p
	}
	start := spot{int(at[a.Name] / deg), int(at[b.Name] / deg)}
	goal := spot{int(end[a.Name] / deg), int(end[b.Name] / deg)}
	seen := map[spot]bool{start: true}
	for queue := []spot{start}; len(queue) > 0; queue = queue[1:] {
		s := queue[0]
		if s == goal {
			return true
		}
		for _, d := range []spot{{1, 0}, {-1, 0}, {0, 1}, {0, -1}} {
			n := spot{s[0] + d[0], s[1] + d[1]}
			x, y := float64(n[0]), float64(n[1])
			if seen[n] || x < a.Low.Degrees() || x > a.High.Degrees() || y < b.Low.Degrees() || y > b.High.Degrees() ||
				!clear(keepOuts, axes, put(x, y), false) || !clear(keepOuts, axes, put(x-float64(d[0])/2, y-float64(d[1])/2), false) {
				continue
			}
			seen[n] = true
			queue = append(queue, n)
		}
	}
	return false
}

func TestTwoAxesFindEveryWayThereIs(t *testing.T) {
	detours := 0
	rapid.Check(t, func(t *rapid.T) {
		axes := drawAxes(t, 3, 0)
		keepOuts := drawKeepOuts(t, axes, 5)
		at, ok := drawPlace(t, axes, keepOuts, false)
		end, ok2 := drawPlace(t, axes, keepOuts, false)
		if !ok || !ok2 {
			t.Skip("no room on this bench")
		}
		third := axes[2].Name
		end[third] = at[third]
		if !clear(keepOuts, axes, end, false) {
			t.Skip("no room for the third axis")
		}
		targets := []scan.AxisTarget{{Axis: axes[0].Name, Angle: end[axes[0].Name]}, {Axis: axes[1].Name, Angle: end[axes[1].Name]}}
		legs, err := route.Legs(axes, keepOuts, at, targets, route.State{})
		if err == nil {
			follow(t, axes, keepOuts, at, targets, legs, false)
			if len(legs) > 2 {
				detours++
			}
		} else if reachable(measured(axes, targets), keepOuts, at, end) {
			t.Fatalf("no way found from %v to %v, where there is one: %v", at, end, err)
		}
	})
	t.Logf("%d by a detour", detours)
}
