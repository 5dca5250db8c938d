package route_test

import (
	"maps"
	"math"
	"slices"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// homing looks at every half degree that the axes of one search may have, and says how deep in a
// keep-out that can be.
func homing(axes []scan.Axis, keepOuts []scan.KeepOut, at place, order []drivers.AxisName) float64 {
	deepest := math.Inf(-1)
	low, high := place{}, place{}
	for _, a := range axes {
		low[a.Name], high[a.Name] = a.Low, a.High
		if x, known := at[a.Name]; known {
			low[a.Name], high[a.Name] = x, x
		}
	}
	for _, name := range order {
		i := slices.IndexFunc(axes, func(a scan.Axis) bool { return a.Name == name })
		low[name], high[name] = axes[i].Low, axes[i].High
		for _, k := range keepOuts {
			if slices.Contains(concerns(k), name) {
				deepest = max(deepest, deepestInBox(k, axes, low, high, true))
			}
		}
		if h := axes[i].HomesAt; h != nil {
			low[name], high[name] = *h, *h
		}
	}
	return deepest
}

func TestASearchIsAllowedExactlyWhereItCanMeetNothing(t *testing.T) {
	allowed, refused := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		axes := drawAxes(t, 3, 2)
		keepOuts := drawKeepOuts(t, axes, 2)
		at := place{}
		for i, a := range axes {
			if rapid.Bool().Draw(t, "known") {
				at[a.Name] = a.Low + unit.Angle(rapid.IntRange(0, int((a.High-a.Low)/deg)).Draw(t, "at"))*deg
			}
			if rapid.Bool().Draw(t, "home known") {
				h := a.Low
				axes[i].HomesAt = &h
			}
		}
		var order []drivers.AxisName
		for _, a := range rapid.Permutation(axes).Draw(t, "order")[:rapid.IntRange(1, 3).Draw(t, "searched")] {
			order = append(order, a.Name)
		}
		err := route.HomeOrder(axes, keepOuts, maps.Clone(at), order)
		deepest := homing(axes, keepOuts, at, order)
		if err == nil {
			allowed++
		} else {
			refused++
		}
		if (err == nil) != (deepest <= 1e-9) {
			t.Fatalf("%v, though axes may come %.1f deg into a keep-out", err, deepest)
		}
	})
	t.Logf("%d allowed, %d refused", allowed, refused)
}

func TestTheOrderOfSearchesDecides(t *testing.T) {
	axes, keepOuts := skerry()
	keepOuts = keepOuts[2:] // the mount: no tilt of 20 to 30 deg while the idler is at 10 to 20 deg
	at := place{"signal_arm": 0, "idler_arm": 2 * deg}
	home := 0 * deg
	axes[1].HomesAt, axes[2].HomesAt = &home, &home
	if err := route.HomeOrder(axes, keepOuts, at, []drivers.AxisName{"crystal_tilt", "idler_arm"}); err != nil {
		t.Errorf("the tilt first, as the idler stands away from the mount: %v", err)
	}
	err := route.HomeOrder(axes, keepOuts, at, []drivers.AxisName{"idler_arm", "crystal_tilt"})
	want := `idler_arm: the search for its reference could enter a keep-out: crystal_tilt from -40 deg to 40 deg, idler_arm from -12 deg to 30 deg: in a forbidden range on the way; keep-out "mount" wants`
	if err == nil || !strings.HasPrefix(err.Error(), want) {
		t.Errorf("got  %v\nwant %s", err, want)
	}
	if err := route.HomeOrder(axes, keepOuts, at, []drivers.AxisName{"idler_arm", "idler_arm"}); err == nil || !strings.Contains(err.Error(), "twice") {
		t.Errorf("%v; want it refused: twice", err)
	}
	if err := route.HomeOrder(axes, keepOuts, at, []drivers.AxisName{"plate"}); err == nil || !strings.Contains(err.Error(), "no such axis") {
		t.Errorf("%v; want it refused: no such axis", err)
	}
}

// straight walks a search that goes straight to its reference from every whole degree at which the
// bench may stand: outside the keep-out, and on the side of it where it parks. It says how near
// the arms come to one another.
func straight(axes []scan.Axis, searched int) (nearest unit.Angle) {
	nearest = unit.Turn
	for s := axes[0].Low; s <= axes[0].High; s += deg {
		for i := axes[1].Low; i <= axes[1].High; i += deg {
			if s+i < 2*deg { // signal and idler count to opposite sides: they are their sum apart
				continue
			}
			at := [2]unit.Angle{s, i}
			home, runUp := *axes[searched].HomesAt, *axes[searched].HomeRunUp
			for x := min(at[searched], home-runUp); x <= max(at[searched], home+runUp); x += deg / 2 {
				if x < at[searched] && x < home-runUp || x > at[searched] && x > home+runUp {
					continue
				}
				nearest = min(nearest, x+at[1-searched])
			}
		}
	}
	return nearest
}

func TestASearchStraightAwayFromTheOtherArmIsAllowedWhereverBothStand(t *testing.T) {
	park, runUp := 3*deg, deg
	arm := func(name drivers.AxisName, low, high, home unit.Angle) scan.Axis {
		return scan.Axis{Name: name, Controller: "arms", Low: low, High: high, Park: &park, HomesAt: &home, HomeRunUp: &runUp}
	}
	keepOuts := []scan.KeepOut{{Name: "apart", Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}, Least: 2 * deg}}}
	for _, c := range []struct {
		name        string
		low, home   unit.Angle
		change      func(*scan.Axis)
		want, truth bool // truth: nothing in the walk comes nearer than allowed
	}{
		{"outwards to the far end", -4 * deg, 12 * deg, nil, true, true},
		{"outwards to within its run-up of the far end", -4 * deg, 11 * deg, nil, true, true},
		{"inwards", -4 * deg, 0, nil, false, false},
		{"to the middle, from either side", -4 * deg, 6 * deg, nil, false, false},
		{"outwards, nobody knows how", -4 * deg, 12 * deg, func(a *scan.Axis) { a.HomeRunUp = nil }, false, true},
		{"outwards, nobody knows from where", -4 * deg, 12 * deg, func(a *scan.Axis) { a.Park = nil }, false, true},
	} {
		axes := []scan.Axis{arm("signal_arm", c.low, 12*deg, c.home), arm("idler_arm", c.low, 12*deg, 12*deg)}
		if c.change != nil {
			c.change(&axes[0])
		} else if safe := straight(axes, 0) >= 2*deg; safe != c.truth {
			t.Errorf("%s: walked, the arms come %s near; the table says otherwise", c.name, straight(axes, 0))
		}
		err := route.HomeOrder(axes, keepOuts, nil, []drivers.AxisName{"signal_arm", "idler_arm"})
		if (err == nil) != c.want {
			t.Errorf("%s: %v; want it allowed: %v", c.name, err, c.want)
		}
	}
}
