package bench

import (
	"reflect"
	"strings"
	"testing"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

const deg = unit.Degree

func TestKeepOutsAreReadWithTheSidesThatTheRolesGive(t *testing.T) {
	f := parse(t, with(t, "\n  pump_beam: {cone", "\n  post: {axis: idler_arm, between: [14 deg, 15 deg], while: {axis: crystal_tilt, between: [2 deg, 4 deg]}, margin: 0.5 deg}\n  pump_beam: {cone"))
	signal, idler := scan.Arm{Axis: "signal_arm", Side: 1}, scan.Arm{Axis: "idler_arm", Side: -1}
	want := []scan.KeepOut{
		{Name: "arms", Margin: 200 * deg / 1000, Apart: &scan.Apart{Arms: [2]scan.Arm{signal, idler}, Least: 1500 * deg / 1000}},
		{Name: "post", Margin: deg / 2, Range: &scan.Range{Span: scan.Span{Axis: "idler_arm", Low: 14 * deg, High: 15 * deg}, While: &scan.Span{Axis: "crystal_tilt", Low: 2 * deg, High: 4 * deg}}},
		{Name: "pump_beam", Margin: deg / 10, Cone: &scan.Cone{Arms: []scan.Arm{signal, idler}, HalfWidth: 400 * deg / 1000, UnlessPumpClosed: true}},
	}
	if !reflect.DeepEqual(f.KeepOuts, want) {
		t.Errorf("got  %+v\nwant %+v", f.KeepOuts, want)
	}
	if got := f.Facts().KeepOuts; !reflect.DeepEqual(got, want) {
		t.Errorf("facts have %+v; want the same", got)
	}
	b, err := Build(f, Options{Links: t.TempDir()})
	if err != nil || !reflect.DeepEqual(b.KeepOuts, want) {
		t.Errorf("the engine's bench has %+v, %v; want the same", b.KeepOuts, err)
	}
}

func TestAnAxisKnowsItsControllersMotionAndItsReference(t *testing.T) {
	for _, a := range demo(t).Facts().Axes {
		together, home := a.Controller == "rotary", a.Role == signalArm || a.Role == idlerArm
		if a.Together != together || (a.HomesAt != nil) != home || (a.HomeRunUp != nil) != home {
			t.Errorf("%s: together %v, reference at %v, run-up %v; want together %v, a reference %v", a.Name, a.Together, a.HomesAt, a.HomeRunUp, together, home)
		}
	}
}

// What a recipe for an arm's zero needs: the other side of the ring, with the other arm out of the
// way, through the pump's direction while the shutter is closed and not otherwise.
func TestAnArmOfTheDemoBenchReachesBothSidesOfTheRing(t *testing.T) {
	f := demo(t)
	for arm, other := range map[drivers.AxisName]drivers.AxisName{"signal_arm": "idler_arm", "idler_arm": "signal_arm"} {
		at := f.parks()
		at[other] = 8 * deg
		for _, target := range []unit.Angle{-3*deg - deg/2, 3 * deg} {
			moves := []scan.AxisTarget{{Axis: arm, Angle: target}}
			_, err := route.Legs(f.scanAxes(), f.KeepOuts, at, moves, route.State{PumpClosed: true})
			if err != nil {
				t.Errorf("%s to %s with the shutter closed: %v", arm, target, err)
			}
			at[arm] = target
			if err := route.Stand(f.scanAxes(), f.KeepOuts, at, route.State{}); err != nil {
				t.Errorf("%s at %s with the shutter open: %v", arm, target, err)
			}
		}
		at[arm] = 3 * deg
		if _, err := route.Legs(f.scanAxes(), f.KeepOuts, at, []scan.AxisTarget{{Axis: arm, Angle: -3 * deg}}, route.State{}); err == nil || !strings.Contains(err.Error(), `"pump_beam"`) {
			t.Errorf("%s through the open pump: %v; want it refused by the cone", arm, err)
		}
		at[other] = 2 * deg
		if _, err := route.Legs(f.scanAxes(), f.KeepOuts, at, []scan.AxisTarget{{Axis: arm, Angle: -3 * deg}}, route.State{PumpClosed: true}); err == nil || !strings.Contains(err.Error(), `"arms"`) {
			t.Errorf("%s through the other arm: %v; want it refused", arm, err)
		}
	}
}
