package recipe

import (
	"reflect"
	"testing"
	"time"

	"gemel/protocol/unit"
	"gemel/scan"
)

func TestARefinementIsAGridOrAnUncertainty(t *testing.T) {
	for refine, want := range map[string]scan.Refine{
		"of: ab, around: maximum, span: 0.2 deg, step: 0.02 deg, at_most: 40 points, within: 30 min": {Of: "ab", Span: unit.Degree / 5, Step: unit.Degree / 50, AtMost: 40, Within: 30 * time.Minute},
		"of: idler, u_below: 0.005 deg, at_most: 1 point":                                            {Of: "b", Below: unit.Degree / 200, AtMost: 1},
	} {
		want.Along = "idler_arm"
		if got := planOf(t, acrossIdler+"refine: {along: idler_arm, "+refine+"}\n").Refine; !reflect.DeepEqual(*got, want) {
			t.Errorf("%s: %+v; want %+v", refine, *got, want)
		}
	}
	const million = "sweep: [{axis: idler_arm, from: 0 deg, to: 0.99999 deg, step: 0.00001 deg}]\nrepeat: {times: 10}\n"
	r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\n"+million+"refine: {along: idler_arm, of: ab, u_below: 0.005 deg, at_most: 1 point}\n"))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := r.Plan(bench()); err == nil {
		t.Error("a million visits and ten more are accepted; want them refused")
	}
}

// TestEveryKindOfResultArrivesInThePlan also holds that several come in the recipe's order.
func TestEveryKindOfResultArrivesInThePlan(t *testing.T) {
	got := planOf(t, `sweep:
  - {axis: crystal_tilt, at: [0 deg, 1 deg]}
  - {setting: delay, from: -2 ns, to: 2 ns, step: 1 ns}
  - {axis: signal_arm, at: [-0.4 deg, -0.3 deg, -0.2 deg, -0.1 deg, 0 deg, 0.1 deg, 0.2 deg, 0.3 deg, 0.4 deg]}
  - {axis: idler_arm, conjugate_of: signal_arm, span: 0.3 deg, step: 0.1 deg}
dark: {also: [end], dwell: 10 s}
result:
  - {kind: tuning_curve, of: ab, along: idler_arm, against: crystal_tilt}
  - {kind: conjugate_map, of: ab, along: idler_arm, against: signal_arm}
  - {kind: conjugate_map, of: ab, along: signal_arm, against: idler_arm}
  - {kind: zero, of: signal, along: signal_arm, at: {crystal_tilt: 1 deg}}
  - {kind: peak, of: ab, along: signal_arm, profile: sinc2, power: pump_power, at: {crystal_tilt: 0 deg}}
  - {kind: delay, of: ab, setting: delay}
  - {kind: efficiency, trigger: idler, under_test: signal, by: delay, use: {plateau_of: idler_arm, half_width: 0.1 deg, at: {crystal_tilt: 0 deg, signal_arm: 0.4 deg}}}
`).Results
	want := []scan.Result{
		{Kind: scan.TuningCurve, Of: "ab", Along: "idler_arm", Against: "crystal_tilt"},
		{Kind: scan.ConjugateMap, Of: "ab", Along: "idler_arm", Against: "signal_arm"},
		{Kind: scan.ConjugateMap, Of: "ab", Along: "signal_arm", Against: "idler_arm"},
		{Kind: scan.Zero, Of: "a", Along: "signal_arm", At: []scan.AxisTarget{{Axis: "crystal_tilt", Angle: unit.Degree}}},
		{Kind: scan.Peak, Of: "ab", Along: "signal_arm", Profile: "sinc2", Power: "pump_power", At: []scan.AxisTarget{{Axis: "crystal_tilt"}}},
		{Kind: scan.Delay, Of: "ab", Setting: "delay"},
		{Kind: scan.Efficiency, Trigger: "b", UnderTest: "a", By: "delay", PlateauOf: "idler_arm", HalfWidth: unit.Degree / 10,
			At: []scan.AxisTarget{{Axis: "crystal_tilt"}, {Axis: "signal_arm", Angle: 2 * unit.Degree / 5}}},
	}
	for i := range want {
		if i >= len(got) || !reflect.DeepEqual(got[i], want[i]) {
			t.Fatalf("result %d of %d\ngot  %+v\nwant %+v", i, len(got), got, want[i])
		}
	}
	drift := planOf(t, bothSwept+"reference: {axes: [idler_arm], every: 30 min}\nresult: {kind: drift}\n").Results
	if !reflect.DeepEqual(drift, []scan.Result{{Kind: scan.Drift}}) {
		t.Errorf("got %+v; want the drift", drift)
	}
}
