package recipe

import (
	"strings"
	"testing"

	"gemel/protocol/unit"
	"gemel/scan"
)

func TestAPlateauMayBeThatOfOnePlaceOfAnotherSweptArm(t *testing.T) {
	const text = `title: A
dwell: 1 s
dark: {also: [start], dwell: 10 s}
sweep: [{axis: signal_arm, at: [2 deg, 3 deg]}, {axis: idler_arm, from: 2 deg, to: 3 deg, step: 0.1 deg}]
result: {kind: efficiency, trigger: signal, under_test: idler, use: {plateau_of: idler_arm, half_width: 0.1 deg, at: {AT}}}
`
	for at, want := range map[string]string{
		"signal_arm: 3 deg":     "",
		"signal_arm: 2.5 deg":   "2.5 deg of signal_arm, where no point is",
		"idler_arm: 2.5 deg":    "one place of the axis whose plateau is asked for",
		"pump_waveplate: 0 deg": "which is not swept",
		"signal_arm: 3":         "no unit",
	} {
		r, err := Parse("r.yaml", []byte(strings.Replace(text, "AT", at, 1)))
		var plan scan.Plan
		if err == nil {
			plan, err = r.Plan(bench())
		}
		switch {
		case want == "" && err != nil:
			t.Errorf("%s: %v; want it taken", at, err)
		case want != "" && (err == nil || !strings.Contains(err.Error(), want)):
			t.Errorf("%s: %v; want %q in it", at, err, want)
		case want == "" && (len(plan.Results[0].At) != 1 || plan.Results[0].At[0].Angle != 3*unit.Degree):
			t.Errorf("%s: planned as %v", at, plan.Results[0].At)
		}
	}
}
