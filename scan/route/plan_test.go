package route_test

import (
	"fmt"
	"maps"
	"math/rand/v2"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

func drawPlan(t *rapid.T, axes []scan.Axis, keepOuts []scan.KeepOut) (scan.Plan, place) {
	plan := scan.Plan{Repeat: scan.Repeat{Times: rapid.IntRange(1, 2).Draw(t, "times"), Shuffled: rapid.Bool().Draw(t, "shuffled"),
		Serpentine: rapid.Bool().Draw(t, "serpentine"), InPlace: rapid.Bool().Draw(t, "in place"), Seed: 5}}
	named := rapid.IntRange(1, len(axes)).Draw(t, "named")
	standing, ok := drawPlace(t, axes, keepOuts, false)
	if !ok {
		t.Skip("no room on this bench")
	}
	for range rapid.IntRange(1, 4).Draw(t, "points") {
		at, ok := drawPlace(t, axes, keepOuts, false)
		if !ok {
			t.Skip("no room on this bench")
		}
		var p scan.Point
		for _, a := range axes[:named] {
			p.Axes = append(p.Axes, scan.AxisTarget{Axis: a.Name, Angle: at[a.Name]})
		}
		plan.Points = append(plan.Points, p)
	}
	return plan, standing
}

// A plan without findings is made: every move that it leads to is possible from wherever the axes
// really stand within their tolerances, and so is the second approach of any axis.
func TestAPlanWithoutFindingsCanBeMade(t *testing.T) {
	whole, found, closing := 0, 0, 0
	rapid.Check(t, func(t *rapid.T) {
		axes := drawAxes(t, rapid.IntRange(2, 4).Draw(t, "axes"), 2)
		keepOuts := drawKeepOuts(t, axes, 2)
		plan, standing := drawPlan(t, axes, keepOuts)
		findings, err := route.CheckPlan(axes, keepOuts, plan, standing)
		if err != nil {
			t.Fatal(err)
		}
		wrong := map[[2]int]route.Finding{}
		for _, f := range findings {
			wrong[[2]int{f.From, f.Point}] = f
		}
		if len(findings) == 0 {
			whole++
		}
		rng := rand.New(rand.NewPCG(3, 3))
		exact, last := maps.Clone(standing), -1
		for _, v := range plan.Visits() {
			var due []scan.AxisTarget
			next := maps.Clone(exact)
			for _, target := range plan.Points[v.Point].Axes {
				if exact[target.Axis] != target.Angle {
					due = append(due, target)
				}
				next[target.Axis] = target.Angle
			}
			for range 3 {
				really, there := maps.Clone(exact), maps.Clone(next)
				for _, a := range axes {
					really[a.Name] += a.Tolerance * unit.Angle(rng.IntN(3)-1)
					there[a.Name] += a.Tolerance * unit.Angle(rng.IntN(3)-1)
				}
				if f, bad := wrong[[2]int{last, v.Point}]; last >= 0 && wrong[[2]int{-1, v.Point}].Err == nil && wrong[[2]int{-1, last}].Err == nil {
					_, err := route.Legs(axes, keepOuts, really, due, route.State{})
					if err != nil && !bad {
						t.Fatalf("no finding on the way from %d to %d, but from %v: %v", last, v.Point, really, err)
					}
					if bad {
						found++
						if _, err := route.Legs(axes, keepOuts, exact, due, route.State{}); err == nil && exactly(axes) {
							t.Fatalf("%v, but the legs are found", f.Err)
						}
						if _, err := route.Legs(axes, keepOuts, really, due, route.State{PumpClosed: true}); f.PumpClosed && err != nil {
							t.Fatalf("said to be free with the pump closed: %v", err)
						} else if f.PumpClosed {
							closing++
						}
					}
				}
				if wrong[[2]int{-1, v.Point}].Err == nil {
					if err := route.Stand(axes, keepOuts, there, route.State{}); err != nil {
						t.Fatal(err)
					}
					for _, target := range plan.Points[v.Point].Axes {
						if _, err := route.Legs(axes, keepOuts, there, []scan.AxisTarget{target}, route.State{}); err != nil {
							t.Fatalf("no finding at point %d, but a second approach from %v: %v", v.Point, there, err)
						}
					}
				}
			}
			exact, last = next, v.Point
		}
	})
	t.Logf("%d plans without a finding; %d ways not free, %d of them free with the pump closed", whole, found, closing)
}

func exactly(axes []scan.Axis) bool {
	for _, a := range axes {
		if a.Tolerance > 0 {
			return false
		}
	}
	return true
}

func arm(name drivers.AxisName, low, high float64) scan.Axis {
	return scan.Axis{Name: name, Controller: "rotary", Low: unit.Degrees(low), High: unit.Degrees(high), Tolerance: unit.Degrees(0.01),
		Backlash: unit.Degrees(0.1), Rising: true, SpeedDegS: 6, AccelDegS2: 30, Settle: 1e8}
}

// Two arms on opposite sides of the pump, a tilt between them, and what may not meet.
func skerry() ([]scan.Axis, []scan.KeepOut) {
	axes := []scan.Axis{arm("signal_arm", -12, 30), arm("idler_arm", -12, 30), arm("crystal_tilt", -40, 40)}
	return axes, []scan.KeepOut{
		{Name: "arms", Margin: unit.Degrees(0.08), Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}, Least: 5 * deg}},
		{Name: "pump", Margin: unit.Degrees(0.09), Cone: &scan.Cone{Arms: []scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}, HalfWidth: deg, UnlessPumpClosed: true}},
		{Name: "mount", Range: &scan.Range{Span: scan.Span{Axis: "crystal_tilt", Low: 20 * deg, High: 30 * deg}, While: &scan.Span{Axis: "idler_arm", Low: 10 * deg, High: 20 * deg}}},
	}
}

func points(targets ...map[drivers.AxisName]float64) []scan.Point {
	var all []scan.Point
	for _, at := range targets {
		var p scan.Point
		for _, name := range names {
			if d, ok := at[name]; ok {
				p.Axes = append(p.Axes, scan.AxisTarget{Axis: name, Angle: unit.Degrees(d)})
			}
		}
		all = append(all, p)
	}
	return all
}

func TestFindingsSayWhichPointAndWhy(t *testing.T) {
	type at = map[drivers.AxisName]float64
	for _, c := range []struct {
		name   string
		points []scan.Point
		stand  place
		want   string
	}{
		{"a good plan", points(at{"signal_arm": 3, "idler_arm": 3}, at{"signal_arm": 4, "idler_arm": 3}), nil, ""},
		{"beyond a limit", points(at{"signal_arm": 3, "idler_arm": 3}, at{"signal_arm": 31, "idler_arm": 3}), nil,
			"1<-1 false signal_arm: 31 deg is beyond the soft limits; want -12 deg to 30 deg"},
		{"no room to approach", points(at{"signal_arm": -11.95}), nil,
			"0<-1 false signal_arm: -11.95 deg leaves no room to approach from the lower side by 0.1 deg within the soft limits -12 deg to 30 deg"},
		{"arms too near", points(at{"signal_arm": 2, "idler_arm": 3}), nil,
			`0<-1 false signal_arm at 2 deg, idler_arm at 3 deg: 5 deg apart; keep-out "arms" wants 5.1 deg or more (5 deg, and 0.1 deg for margin and tolerances)`},
		{"arms with no room to approach", points(at{"signal_arm": 2.15, "idler_arm": 3}), nil,
			`0<-1 false no room to approach from the lower side by 0.1 deg: signal_arm from 2.05 deg to 2.15 deg, idler_arm at 3 deg: 5.05 deg apart on the way; keep-out "arms" wants 5.1 deg or more (5 deg, and 0.1 deg for margin and tolerances)`},
		{"an arm in the pump", points(at{"signal_arm": 1}), nil,
			`0<-1 false signal_arm at 1 deg: 1 deg from the pump; keep-out "pump" wants 1.1 deg or more (1 deg, and 0.1 deg for margin and tolerances), or the pump closed`},
		{"both sides of the pump", points(at{"signal_arm": 3}, at{"signal_arm": -3}), nil,
			`1<0 true signal_arm from 3 deg to -3 deg: no safe order of moving: signal_arm from 3 deg to -3.1 deg: 0 deg from the pump on the way; keep-out "pump" wants 1.1 deg or more (1 deg, and 0.1 deg for margin and tolerances), or the pump closed`},
		{"through the mount", points(at{"idler_arm": 8}, at{"idler_arm": 22}), place{"crystal_tilt": 25 * deg, "signal_arm": 3 * deg},
			`1<0 false idler_arm from 8 deg to 22 deg: no safe order of moving: crystal_tilt at 25 deg, idler_arm from 8 deg to 22 deg: in a forbidden range on the way; keep-out "mount" wants crystal_tilt outside 19.99 deg to 30.01 deg, or idler_arm outside 9.99 deg to 20.01 deg, margin and tolerances included`},
		{"the tilt not known", points(at{"idler_arm": 8}, at{"idler_arm": 22}), nil, ""},
		{"a tilt that a later point names first", points(at{"idler_arm": 15}, at{"idler_arm": 22, "crystal_tilt": 25}, at{"idler_arm": 8}), place{"signal_arm": 3 * deg},
			`2<1 false idler_arm from 22 deg to 8 deg: no safe order of moving`},
		{"no such axis", points(at{"plate": 8}), nil, "0<-1 false plate: no such axis on this bench; want one of signal_arm, idler_arm, crystal_tilt"},
	} {
		t.Run(c.name, func(t *testing.T) {
			axes, keepOuts := skerry()
			findings, err := route.CheckPlan(axes, keepOuts, scan.Plan{Points: c.points, Repeat: scan.Repeat{Times: 2}}, c.stand)
			if err != nil {
				t.Fatal(err)
			}
			var got []string
			for _, f := range findings {
				got = append(got, fmt.Sprintf("%d<%d %v %v", f.Point, f.From, f.PumpClosed, f.Err))
			}
			if text := strings.Join(got, "\n"); !strings.HasPrefix(text, c.want) || (text == "") != (c.want == "") {
				t.Errorf("got  %s\nwant %s", text, c.want)
			}
		})
	}
}

func TestABackgroundThatTurnsIntoAKeepOutIsFound(t *testing.T) {
	axes, keepOuts := skerry()
	type at = map[drivers.AxisName]float64
	plan := scan.Plan{Points: points(at{"idler_arm": 5}, at{"idler_arm": 15}), Repeat: scan.Repeat{Times: 1},
		Background: &scan.Background{Axis: "crystal_tilt", From: 0, By: 25 * deg}}
	stand := place{"signal_arm": 3 * deg}
	findings, err := route.CheckPlan(axes, keepOuts, plan, stand)
	if err != nil || len(findings) != 1 || findings[0].Point != 1 || !strings.Contains(findings[0].Err.Error(), `background: `) || !strings.Contains(findings[0].Err.Error(), `"mount"`) {
		t.Errorf("%v, %v; want one finding at point 1, whose background stands in the mount", findings, err)
	}
	plan.Background.By = 35 * deg // beyond the mount's range, which lies on the way
	findings, err = route.CheckPlan(axes, keepOuts, plan, stand)
	if err != nil || len(findings) != 1 || findings[0].Point != 1 || findings[0].From != 1 {
		t.Errorf("%v, %v; want one finding on the way to the background of point 1", findings, err)
	}
	plan.Background.By = 45 * deg
	findings, err = route.CheckPlan(axes, keepOuts, plan, stand)
	if err != nil || len(findings) == 0 || findings[0].Point != -1 || !strings.Contains(findings[0].Err.Error(), "beyond the soft limits") {
		t.Errorf("%v, %v; want the background beyond the limits", findings, err)
	}
}

func TestFindingsAreBounded(t *testing.T) {
	axes, keepOuts := skerry()
	var plan scan.Plan
	for range 5 * route.MostFindings {
		plan.Points = append(plan.Points, points(map[drivers.AxisName]float64{"signal_arm": 0})...)
	}
	plan.Repeat.Times = 3
	findings, err := route.CheckPlan(axes, keepOuts, plan, nil)
	if err != nil || len(findings) != route.MostFindings {
		t.Errorf("%d findings, %v; want %d", len(findings), err, route.MostFindings)
	}
}

func BenchmarkCheckPlanOf100000Points(b *testing.B) {
	axes, keepOuts := skerry()
	plan := scan.Plan{Repeat: scan.Repeat{Times: 1}}
	for i := range 316 {
		for j := range 316 {
			plan.Points = append(plan.Points, scan.Point{Axes: []scan.AxisTarget{
				{Axis: "signal_arm", Angle: 3*deg + unit.Angle(i)*deg/100}, {Axis: "idler_arm", Angle: 3*deg + unit.Angle(j)*deg/100}}})
		}
	}
	stand := place{"crystal_tilt": 0}
	for b.Loop() {
		findings, err := route.CheckPlan(axes, keepOuts, plan, stand)
		if err != nil || len(findings) > 0 {
			b.Fatal(findings, err)
		}
	}
	b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(len(plan.Points)), "ns/point")
}

func BenchmarkLegs(b *testing.B) {
	axes, keepOuts := skerry()
	at := place{"signal_arm": 3 * deg, "idler_arm": 3 * deg, "crystal_tilt": 0}
	targets := []scan.AxisTarget{{Axis: "signal_arm", Angle: 4 * deg}, {Axis: "idler_arm", Angle: 5 * deg}}
	for b.Loop() {
		if _, err := route.Legs(axes, keepOuts, at, targets, route.State{}); err != nil {
			b.Fatal(err)
		}
	}
}
