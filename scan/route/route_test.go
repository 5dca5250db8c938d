package route_test

import (
	"errors"
	"fmt"
	"reflect"
	"strings"
	"testing"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

func targets(at ...any) []scan.AxisTarget {
	var all []scan.AxisTarget
	for i := 0; i < len(at); i += 2 {
		all = append(all, scan.AxisTarget{Axis: drivers.AxisName(at[i].(string)), Angle: unit.Degrees(at[i+1].(float64))})
	}
	return all
}

// told prints legs as "a 1, b 2 | a 3".
func told(legs [][]scan.AxisTarget) string {
	var parts []string
	for _, leg := range legs {
		var moves []string
		for _, m := range leg {
			moves = append(moves, fmt.Sprintf("%s %g", m.Axis, m.Angle.Degrees()))
		}
		parts = append(parts, strings.Join(moves, ", "))
	}
	return strings.Join(parts, " | ")
}

func TestAxesGoTogetherWhereTheyMayAndInTurnWhereTheyMust(t *testing.T) {
	free := arm("plate", -90, 90)
	free.Backlash = 0
	for _, c := range []struct {
		name    string
		edit    func([]scan.Axis, []scan.KeepOut)
		at      place
		targets []scan.AxisTarget
		state   route.State
		want    string // legs, or the error
	}{
		{name: "together", at: place{"signal_arm": 3 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4., "idler_arm", 4.),
			want: "signal_arm 4, idler_arm 4"},
		{name: "one goes back first", at: place{"signal_arm": 4 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 3., "idler_arm", 4.),
			want: "signal_arm 2.9, idler_arm 4 | signal_arm 3"},
		{name: "the arm that opens the way goes first", at: place{"signal_arm": 2 * deg, "idler_arm": 6 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 6., "idler_arm", 2.),
			want: "signal_arm 6 | idler_arm 1.9 | idler_arm 2"},
		{name: "on a line that stays clear both go at once", edit: func(a []scan.Axis, _ []scan.KeepOut) { a[0].Together, a[1].Together = true, true },
			at: place{"signal_arm": 2 * deg, "idler_arm": 6 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 6., "idler_arm", 2.),
			want: "signal_arm 6, idler_arm 1.9 | idler_arm 2"},
		{name: "what nothing ties goes along at once", at: place{"signal_arm": 2 * deg, "idler_arm": 6 * deg, "crystal_tilt": 0, "plate": 10 * deg}, targets: targets("plate", 45., "signal_arm", 6., "idler_arm", 2.),
			want: "signal_arm 6, plate 45 | idler_arm 1.9 | idler_arm 2"},
		{name: "by a detour: the arm backs away from the pump while the other approaches",
			edit: func(a []scan.Axis, _ []scan.KeepOut) { a[1].Backlash = 0 },
			at:   place{"signal_arm": 3 * deg, "idler_arm": unit.Degrees(2.2), "crystal_tilt": 0}, targets: targets("signal_arm", 2.9, "idler_arm", 2.2),
			want: "idler_arm 2.3 | signal_arm 2.8 | signal_arm 2.9 | idler_arm 2.2"},
		{name: "the tilt makes room for the arm and comes back", at: place{"signal_arm": 3 * deg, "idler_arm": 8 * deg, "crystal_tilt": 25 * deg}, targets: targets("idler_arm", 22., "crystal_tilt", 25.),
			want: "crystal_tilt 19.99 | idler_arm 22 | crystal_tilt 25"},
		{name: "through the pump when it is closed", at: place{"signal_arm": 8 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("idler_arm", -2.), state: route.State{PumpClosed: true},
			want: "idler_arm -2.1 | idler_arm -2"},
		{name: "not when it is open", at: place{"signal_arm": 8 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("idler_arm", -2.),
			want: `idler_arm from 3 deg to -2 deg: no safe order of moving: idler_arm from 3 deg to -2.1 deg: 0 deg from the pump on the way; keep-out "pump" wants 1.1 deg or more (1 deg, and 0.1 deg for margin and tolerances), or the pump closed`},
		{name: "a target in a keep-out", at: place{"signal_arm": 8 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 1.5),
			want: `signal_arm at 1.5 deg, idler_arm at 3 deg: 4.5 deg apart; keep-out "arms" wants 5.09 deg or more (5 deg, and 0.09 deg for margin and tolerances)`},
		{name: "let stop inside by its tolerance it goes on", at: place{"signal_arm": unit.Degrees(2.09), "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4.), want: "signal_arm 4"},
		{name: "found deep inside nobody moves it", at: place{"signal_arm": unit.Degrees(0.5), "idler_arm": 8 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4.),
			want: `signal_arm at 0.5 deg: 0.5 deg from the pump; keep-out "pump" wants 1.1 deg or more (1 deg, and 0.1 deg for margin and tolerances), or the pump closed; move it out by hand`},
		{name: "but a person who watches", at: place{"signal_arm": unit.Degrees(0.5), "idler_arm": 8 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4.), state: route.State{Attended: true}, want: "signal_arm 4"},
		{name: "a person neither moves it deeper", at: place{"signal_arm": unit.Degrees(0.5), "idler_arm": 8 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", -2.), state: route.State{Attended: true},
			want: `signal_arm from 0.5 deg to -2 deg: no safe order of moving: signal_arm from 0.5 deg to -2.1 deg: 0 deg from the pump on the way; keep-out "pump" wants 1.1 deg or more (1 deg, and 0.1 deg for margin and tolerances), or the pump closed`},
		{name: "beyond its limits nobody moves it", at: place{"signal_arm": 31 * deg, "idler_arm": 8 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4.),
			want: "signal_arm: stands at 31 deg, beyond its soft limits -12 deg to 30 deg; move it back by hand"},
		{name: "a person brings it back within", at: place{"signal_arm": 31 * deg, "idler_arm": 8 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4.), state: route.State{Attended: true},
			want: "signal_arm 3.9 | signal_arm 4"},
		{name: "an unknown place that matters", at: place{"signal_arm": 8 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 4.),
			want: `idler_arm: its controller did not say where it stands; want its angle, for keep-out "arms" is about it`},
		{name: "an unknown place that does not", at: place{"plate": 0}, targets: targets("plate", 4.), want: "plate 4"},
		{name: "an unknown start", at: place{}, targets: targets("plate", 4.), want: "plate: its controller did not say where it stands; want its angle"},
		{name: "no such axis", at: place{}, targets: targets("paddle", 4.), want: "paddle: no such axis on this bench; want one of signal_arm, idler_arm, crystal_tilt, plate"},
		{name: "two targets for one axis", at: place{"plate": 0}, targets: targets("plate", 4., "plate", 5.), want: "plate: two targets in one move; want one"},
		{name: "nothing to do", at: place{}, want: ""},
		{name: "beyond a limit", at: place{"plate": 0}, targets: targets("plate", 91.), want: "plate: 91 deg is beyond the soft limits; want -90 deg to 90 deg"},
		{name: "the keep-out that no order gets around is named, not the first that offends", at: place{"signal_arm": 8 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets: targets("signal_arm", 15., "idler_arm", -3.5),
			edit: func(_ []scan.Axis, k []scan.KeepOut) { k[0].Apart.Least = 10 * deg },
			want: `signal_arm from 8 deg to 15 deg, idler_arm from 3 deg to -3.5 deg: no safe order of moving: idler_arm from 3 deg to -3.6 deg: 0 deg from the pump on the way; keep-out "pump" wants 1.1 deg or more (1 deg, and 0.1 deg for margin and tolerances), or the pump closed`},
	} {
		t.Run(c.name, func(t *testing.T) {
			axes, keepOuts := skerry()
			axes = append(axes, free)
			if c.edit != nil {
				c.edit(axes, keepOuts)
			}
			legs, err := route.Legs(axes, keepOuts, c.at, c.targets, c.state)
			got := told(legs)
			if err != nil {
				got = err.Error()
			}
			if got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
}

// An axis in step that turns round stands still until its play is taken up: a line that clears a
// corner by less than that does not clear it.
func TestALineLeavesRoomForPlay(t *testing.T) {
	axes := []scan.Axis{arm("signal_arm", -20, 20), arm("idler_arm", -20, 20)}
	for i := range axes {
		axes[i].Tolerance, axes[i].Together, axes[i].Backlash = 0, true, 0
	}
	keepOuts := []scan.KeepOut{{Name: "corner", Range: &scan.Range{Span: scan.Span{Axis: "signal_arm", Low: 5 * deg, High: 15 * deg},
		While: &scan.Span{Axis: "idler_arm", Low: -15 * deg, High: 4 * deg}}}}
	at := place{"signal_arm": 0, "idler_arm": 0}
	legs, err := route.Legs(axes, keepOuts, at, targets("signal_arm", 10., "idler_arm", 10.), route.State{})
	if want := "signal_arm 10, idler_arm 10"; err != nil || told(legs) != want {
		t.Errorf("%s, %v; want %s: the line clears the corner by 1 deg", told(legs), err, want)
	}
	axes[1].Backlash = 2 * deg
	legs, err = route.Legs(axes, keepOuts, at, targets("signal_arm", 10., "idler_arm", 10.), route.State{})
	if want := "idler_arm 10 | signal_arm 10"; err != nil || told(legs) != want {
		t.Errorf("%s, %v; want %s: a play of 2 deg does not", told(legs), err, want)
	}
}

func TestAConflictSaysWhatItIsAbout(t *testing.T) {
	axes, keepOuts := skerry()
	_, err := route.Legs(axes, keepOuts, place{"signal_arm": 8 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}, targets("idler_arm", -2.), route.State{})
	c, ok := errors.AsType[*route.Conflict](err)
	if !ok || c.KeepOut != "pump" || !reflect.DeepEqual(c.Axes, []drivers.AxisName{"idler_arm"}) || c.From[0] != 3*deg || c.To[0] != unit.Degrees(-2.1) {
		t.Errorf("%#v; want the pump, and the idler's leg from 3 to -2.1 deg", c)
	}
}

func TestTheBenchMayNotStandInTheOpenPump(t *testing.T) {
	axes, keepOuts := skerry()
	at := place{"signal_arm": 8 * deg, "idler_arm": deg, "crystal_tilt": 0}
	if err := route.Stand(axes, keepOuts, at, route.State{PumpClosed: true}); err != nil {
		t.Errorf("with the pump closed: %v", err)
	}
	if err := route.Stand(axes, keepOuts, at, route.State{}); err == nil || !strings.Contains(err.Error(), `1 deg from the pump; keep-out "pump"`) {
		t.Errorf("with the pump open: %v; want it refused", err)
	}
	delete(at, "crystal_tilt")
	if err := route.Stand(axes, keepOuts, at, route.State{PumpClosed: true}); err == nil || !strings.Contains(err.Error(), "crystal_tilt: its controller did not say") {
		t.Errorf("with a place not known: %v; want it refused", err)
	}
}

// Directions are compared around the circle: 175 and -175 deg are 10 deg apart.
func TestArmsMeetBehindThePumpToo(t *testing.T) {
	axes := []scan.Axis{arm("signal_arm", -180, 180), arm("idler_arm", -180, 180)}
	keepOuts := []scan.KeepOut{{Name: "arms", Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: 1}}, Least: 12 * deg}}}
	err := route.Stand(axes, keepOuts, place{"signal_arm": 175 * deg, "idler_arm": -175 * deg}, route.State{})
	if err == nil || !strings.Contains(err.Error(), "10 deg apart") {
		t.Errorf("%v; want 10 deg apart", err)
	}
	if err := route.Stand(axes, keepOuts, place{"signal_arm": 170 * deg, "idler_arm": -175 * deg}, route.State{}); err != nil {
		t.Errorf("15 deg apart: %v", err)
	}
}

func TestKeepOutsThatMeanNothingAreRefused(t *testing.T) {
	arms := [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}
	tilt := scan.Span{Axis: "crystal_tilt", Low: 0, High: deg}
	axes, good := skerry()
	if err := route.CheckKeepOuts(axes, good); err != nil {
		t.Fatal(err)
	}
	for want, k := range map[string]scan.KeepOut{
		`keep-out "k": 0 kinds of region; want one`:                                                    {},
		`keep-out "k": 2 kinds of region; want one`:                                                    {Apart: &scan.Apart{Arms: arms, Least: deg}, Range: &scan.Range{Span: tilt}},
		`keep-out "k": margin -1 deg; want 0 deg or more`:                                              {Margin: -deg, Range: &scan.Range{Span: tilt}},
		`keep-out "k": signal_arm on side 0; want 1 or -1`:                                             {Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "signal_arm"}, arms[1]}, Least: deg}},
		`keep-out "k": signal_arm twice; want two axes`:                                                {Apart: &scan.Apart{Arms: [2]scan.Arm{arms[0], arms[0]}, Least: deg}},
		`keep-out "k": no axis "paddle" on this bench; want one of`:                                    {Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "paddle", Side: 1}, arms[1]}, Least: deg}},
		`keep-out "k": 0 deg, 0.02 deg with margin and tolerances; want more than 0 deg, and less`:     {Apart: &scan.Apart{Arms: arms}},
		`keep-out "k": 180 deg, 180.01 deg with margin and tolerances; want more than 0 deg, and less`: {Cone: &scan.Cone{Arms: arms[:1], HalfWidth: 180 * deg}},
		`keep-out "k": a cone for no arm; want at least one`:                                           {Cone: &scan.Cone{HalfWidth: deg}},
		`keep-out "k": crystal_tilt from 1 deg to 1 deg; want the lower angle first`:                   {Range: &scan.Range{Span: scan.Span{Axis: "crystal_tilt", Low: deg, High: deg}}},
		`keep-out "k": crystal_tilt twice; want two axes`:                                              {Range: &scan.Range{Span: tilt, While: &tilt}},
	} {
		k.Name = "k"
		err := route.CheckKeepOuts(axes, []scan.KeepOut{good[0], k, good[1]})
		if err == nil || !strings.HasPrefix(err.Error(), want) {
			t.Errorf("got  %v\nwant %s", err, want)
		}
		if _, legs := route.Legs(axes, []scan.KeepOut{k}, place{}, nil, route.State{}); legs == nil {
			t.Errorf("%s: a move was planned with it", want)
		}
	}
}
