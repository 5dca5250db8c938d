package recipe

import (
	"reflect"
	"strings"
	"testing"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

const ringThenPartner = `title: A
dwell: 1 s
sweep:
  - {axis: crystal_tilt, at: 1 deg}
  - {axis: signal_arm, at: {peak: signal_arm, from: "Find the ring", not_older_than: 12 h, u_below: 0.05 deg, otherwise: stop}}
  - {axis: idler_arm, conjugate_of: signal_arm, span: 0.2 deg, step: 0.1 deg}
`

func TestAValueOfAnEarlierRunIsTakenExactly(t *testing.T) {
	p := plan(t, ringThenPartner)
	// The partner is a tenth of the tilt further, and comes from a model: so it is rounded.
	if got, want := targets(p), "1 2.876543 2.87654 | 1 2.876543 2.97654 | 1 2.876543 3.07654"; got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
	source, _ := measured(scan.EarlierAsk{From: "Find the ring"})
	want := []scan.Earlier{{
		Ask:       scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm", From: "Find the ring", NotOlderThan: 12 * time.Hour, Below: unit.Degree / 20},
		Otherwise: scan.Stop, Source: &source,
	}}
	if !reflect.DeepEqual(p.Earlier, want) || len(p.Open()) != 0 {
		t.Errorf("got  %+v\nwant %+v", p.Earlier, want)
	}
	if again := plan(t, ringThenPartner); !reflect.DeepEqual(p, again) {
		t.Errorf("planned again with the same value as %+v; want %+v", again, p)
	}
}

func TestSettingsTakeEarlierValuesToo(t *testing.T) {
	for entry, want := range map[string]string{
		`setting: delay, at: {delay: delay, from: "Delay scan", u_below: 50 ps}`:                           "3.217ns",
		`setting: delay, around: {delay: delay, from: "Delay scan"}, span: 200 ps, step: 100 ps`:           "3.117ns | 3.217ns | 3.317ns",
		`setting: oven, around: {delay: oven, from: "Delay scan"}, span: 2 K, step: 1 K`:                   "",
		`setting: delay, around: {delay: delay, from: "Never"}, span: 200 ps, step: 200 ps`:                "-0.1ns | 0.1ns",
		`axis: signal_arm, at: 1 deg, with: {setting: delay, at: {delay: delay, from: "Delay scan"}}`:      "1 3.217ns",
		`axis: signal_arm, around: {peak: idler_arm, from: "Find the ring"}, span: 0.2 deg, step: 0.2 deg`: "2.776543 | 2.976543",
	} {
		r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\nsweep: [{"+entry+"}]\n"))
		if err != nil {
			t.Fatal(err)
		}
		p, err := r.Plan(bench())
		if want == "" { // 2 to 4 Cel are below the oven's limits
			if err == nil || !strings.Contains(err.Error(), "2.217 Cel is beyond the limits of oven, by the delay that run R9 found; want 10 Cel to 60 Cel") {
				t.Errorf("%s: %v; want the run named", entry, err)
			}
			continue
		}
		if err != nil {
			t.Fatalf("%s: %v", entry, err)
		}
		if got := targets(p); got != want {
			t.Errorf("%s: %s; want %s", entry, got, want)
		}
	}
	p := planOf(t, `sweep: [{setting: delay, at: {delay: delay, from: "Delay scan", u_below: 50 ps}}]`+"\n")
	if got := p.Earlier[0].Ask; got.BelowValue != 0.05 || got.Setting != "delay" || got.Kind != scan.Delay {
		t.Errorf("asked %+v; want 0.05 in the setting's unit", got)
	}
	r, err := Parse("r.yaml", []byte(`title: A
dwell: 1 s
sweep: [{setting: oven, at: {delay: oven, from: "Never", u_below: 0.2 K}}]
`))
	if err != nil {
		t.Fatal(err)
	}
	p, err = r.Plan(bench())
	if err != nil || p.Earlier[0].Ask.BelowValue != 0.2 || p.Points[0].Settings[0].Value != 35 {
		t.Errorf("%+v, %v; want a difference of temperatures, and the middle of 10 to 60 Cel", p, err)
	}
}

func TestAValueThatIsNotThereYetIsStoodInFor(t *testing.T) {
	never := strings.Replace(ringThenPartner, "Find the ring", "Never", 1)
	for _, c := range []struct {
		name, text, want, missing string
		change                    func(*Facts)
	}{
		{"by the model", never, "1 2.8 2.8 | 1 2.8 2.9 | 1 2.8 3", `no finished run "Never" has one`, func(*Facts) {}},
		{"without a logbook", ringThenPartner, "1 2.8 2.8 | 1 2.8 2.9 | 1 2.8 3", "no logbook is at hand to look it up in", func(f *Facts) { f.Earlier = nil }},
		{"by its park angle", never, "1 4 4 | 1 4 4.1 | 1 4 4.2", `no finished run "Never" has one`, func(f *Facts) { f.Emission, f.Axes[0].Park = nil, new(4*unit.Degree) }},
		{"by the middle of its limits", never, "1 3.5 3.5 | 1 3.5 3.6 | 1 3.5 3.7", `no finished run "Never" has one`, func(f *Facts) { f.Emission = nil }},
		{"without emission at that tilt", strings.Replace(never, "at: 1 deg", "at: 4.5 deg", 1), "4.5 3.5 3.85 | 4.5 3.5 3.95 | 4.5 3.5 4.05", `no finished run "Never" has one`, func(*Facts) {}},
		{"beyond the limits, where nobody goes", never, "1 2.8 2.8 | 1 2.8 2.9 | 1 2.8 3", `no finished run "Never" has one`, func(f *Facts) { f.Axes[0].High, f.Axes[1].High = unit.Degree, unit.Degree }},
		{"in a keep-out, where nobody goes", never, "1 2.8 2.8 | 1 2.8 2.9 | 1 2.8 3", `no finished run "Never" has one`, func(f *Facts) { f.KeepOuts = []scan.KeepOut{forbidden("signal_arm", 0, 5)} }},
		{"without partners", strings.Replace(never, "at: {peak", "around: {peak", 1), "1 7.3 | 1 7.3 | 1 7.3 | 1 7.5 | 1 7.5 | 1 7.5", `no finished run "Never" has one`, func(f *Facts) { f.Emission, f.Axes[0].Park = nil, new(74*unit.Degree/10) }},
	} {
		t.Run(c.name, func(t *testing.T) {
			text := strings.Replace(c.text, "otherwise: stop}}", "otherwise: stop}, span: 0.2 deg, step: 0.2 deg}", map[bool]int{true: 1}[strings.Contains(c.text, "around: {")])
			r, err := Parse("r.yaml", []byte(text))
			if err != nil {
				t.Fatal(err)
			}
			f := bench()
			c.change(&f)
			p, err := r.Plan(f)
			if err != nil {
				t.Fatal(err)
			}
			if got := targets(p); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
			if open := p.Open(); len(open) != 1 || open[0].Missing != c.missing || open[0].Source != nil || open[0].Otherwise != scan.Stop {
				t.Errorf("open: %+v; want %q", open, c.missing)
			}
		})
	}
}

func TestATiltFromAnEarlierRunDecidesWhereThePartnerGoes(t *testing.T) {
	const text = `title: A
dwell: 1 s
sweep:
  - {axis: signal_arm, at: {peak: signal_arm, from: "Never"}}
  - {axis: crystal_tilt, at: {peak: crystal_tilt, from: "Find the ring"}}
  - {axis: idler_arm, conjugate_of: signal_arm}
`
	if got, want := targets(plan(t, text)), "2.8 2.876543 3.08765"; got != want {
		t.Errorf("got %s; want %s", got, want)
	}
	if got, want := targets(plan(t, strings.Replace(text, "Find the ring", "Nothing", 1))), "2.8 0 2.8"; got != want {
		t.Errorf("got %s; want %s", got, want)
	}
}

// forbidden is a range of an axis, in degrees.
func forbidden(axis string, low, high float64) scan.KeepOut {
	return scan.KeepOut{Name: "post", Range: &scan.Range{Span: scan.Span{Axis: drivers.AxisName(axis), Low: unit.Degrees(low), High: unit.Degrees(high)}}}
}

func TestPointsWithoutEmissionAreKeptAndEmpty(t *testing.T) {
	p := planOf(t, `sweep:
  - {axis: crystal_tilt, at: [0 deg, 1 deg]}
  - {axis: signal_arm, from: 6 deg, to: 8 deg, step: 1 deg}
  - {axis: idler_arm, conjugate_of: signal_arm}
repeat: {times: 2, as: passes}
`)
	if got, want := targets(p), "0 6 6 | 0 7 7 | 0 8 | 1 6 6.1 | 1 7 7.1 | 1 8"; got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
	for i, point := range p.Points {
		want := ""
		if i == 2 || i == 5 {
			want = "signal_arm at 8 deg, crystal tilted by " + point.Axes[0].Angle.String() + ": the partner does not leave the crystal"
		}
		if point.Empty != want {
			t.Errorf("point %d is empty because %q; want %q", i, point.Empty, want)
		}
	}
	if n := len(p.Visits()); n != 8 {
		t.Errorf("%d visits; want those of the four points with emission, twice", n)
	}
	first := planOf(t, "sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: [8 deg, 6 deg]}, {axis: idler_arm, conjugate_of: signal_arm}]\n")
	if !first.Sweeps("idler_arm") {
		t.Error("an arm that the first point does not name is not swept; want it known by the others")
	}
}
