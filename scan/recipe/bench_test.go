package recipe

import (
	"fmt"
	"math/big"
	"strings"
	"testing"
	"time"
	"unsafe"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

func TestAGridHasTheSizeThatArithmeticSays(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		d := drawer{t}
		want, last := 1, map[drivers.AxisName]unit.Angle{}
		var entries []string
		for i, name := range []string{"signal_arm", "idler_arm", "crystal_tilt"}[:d.int("entries", 1, 3)] {
			in := d.one("unit", "deg", "arcmin", "arcsec")
			per := map[string]unit.Angle{"deg": unit.Degree, "arcmin": unit.Arcminute, "arcsec": unit.Arcsecond}[in]
			n := d.int("steps", 1, []int{300, 30, 9}[i])
			step, from := d.int("step", 1, 99), d.int("from", -9999, 9999) // thousandths
			write := func(thousandths int64, of int64) string {
				return big.NewRat(thousandths, 1000*of).FloatString(4) + " " + in
			}
			end := from + n*step
			last[drivers.AxisName(name)] = unit.Angle(end) * per / 1000
			switch d.int("way", 0, 2) {
			case 0:
				entries = append(entries, fmt.Sprintf("{axis: %s, from: %s, to: %s, step: %s}", name, write(int64(from), 1), write(int64(end), 1), write(int64(step), 1)))
			case 1:
				last[drivers.AxisName(name)] = unit.Angle(from) * per / 1000
				entries = append(entries, fmt.Sprintf("{axis: %s, from: %s, to: %s, step: %s}", name, write(int64(end), 1), write(int64(from), 1), write(int64(step), 1)))
			case 2:
				entries = append(entries, fmt.Sprintf("{axis: %s, around: %s, span: %s, step: %s}", name, write(int64(from)+int64(end), 2), write(int64(n*step), 1), write(int64(step), 1)))
			}
			want *= n + 1
		}
		r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\nsweep: ["+strings.Join(entries, ", ")+"]\n"))
		if err != nil {
			t.Fatal(err)
		}
		f := bench()
		for i := range f.Axes {
			f.Axes[i].Low, f.Axes[i].High = -unit.Turn, unit.Turn
		}
		p, err := r.Plan(f)
		if err != nil {
			t.Fatal(err)
		}
		if len(p.Points) != want || r.Points() != want {
			t.Fatalf("%v: %d points, %d announced; want %d", entries, len(p.Points), r.Points(), want)
		}
		for _, a := range p.Points[want-1].Axes {
			if a.Angle != last[a.Axis] {
				t.Fatalf("%v: the last point has %s at %s; want %s", entries, a.Axis, a.Angle, last[a.Axis])
			}
		}
	})
}

// drawBench is a small bench with keep-outs, in whole degrees.
func drawBench(d drawer) Facts {
	f := bench()
	for i := range f.Axes {
		a := &f.Axes[i]
		a.Low = unit.Angle(-d.int("low", 3, 14)) * unit.Degree
		a.High = unit.Angle(d.int("high", 6, 16)) * unit.Degree
		a.Backlash, a.Rising = unit.Angle(d.int("backlash", 0, 1))*unit.Degree, d.yes("rising")
		a.Tolerance = unit.Angle(d.int("tolerance", 0, 1)) * unit.Degree / 4
		a.Controller = drivers.DeviceName(d.one("controller", "one", "two"))
		a.Together = d.yes("together")
		a.SpeedDegS, a.AccelDegS2 = 5, 10
	}
	f.Axes[3].Park = new(unit.Angle(0))
	arms := [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}
	for n := range d.int("keep-outs", 0, 2) {
		k := scan.KeepOut{Name: fmt.Sprint("keep-out ", n), Margin: unit.Angle(d.int("margin", 0, 1)) * unit.Degree / 2}
		span := func(axis string) scan.Span {
			low := d.int("from", -12, 12)
			return scan.Span{Axis: drivers.AxisName(axis), Low: unit.Angle(low) * unit.Degree, High: unit.Angle(low+d.int("wide", 1, 6)) * unit.Degree}
		}
		switch d.int("keep-out", 0, 3) {
		case 0:
			k.Apart = &scan.Apart{Arms: arms, Least: unit.Angle(d.int("apart", 1, 8)) * unit.Degree}
		case 1:
			k.Cone = &scan.Cone{Arms: arms[:d.int("arms", 1, 2)], HalfWidth: unit.Angle(d.int("cone", 1, 3)) * unit.Degree, UnlessPumpClosed: d.yes("closed")}
		case 2:
			k.Range = &scan.Range{Span: span("signal_arm")}
		case 3:
			while := span("idler_arm")
			k.Range = &scan.Range{Span: span("crystal_tilt"), While: &while}
		}
		f.KeepOuts = append(f.KeepOuts, k)
	}
	return f
}

// offends says which rule of a bench a place breaks, written from what the words mean and not from
// how package route works them out. Rules about axes that the place does not name say nothing.
func offends(f Facts, place []scan.AxisTarget) string {
	deg := map[drivers.AxisName]float64{}
	more := map[drivers.AxisName]float64{} // tolerance
	for _, t := range place {
		for _, a := range f.Axes {
			if a.Name != t.Axis {
				continue
			}
			deg[t.Axis], more[t.Axis] = t.Angle.Degrees(), a.Tolerance.Degrees()
			begin := t.Angle + a.Backlash
			if a.Rising {
				begin = t.Angle - a.Backlash
			}
			if t.Angle < a.Low || t.Angle > a.High || begin < a.Low || begin > a.High {
				return fmt.Sprintf("%s at %s, approached from %s", t.Axis, t.Angle, begin)
			}
		}
	}
	inside := func(s scan.Span, margin float64) bool {
		x, ok := deg[s.Axis]
		return ok && x > s.Low.Degrees()-margin-more[s.Axis]+1e-9 && x < s.High.Degrees()+margin+more[s.Axis]-1e-9
	}
	for _, k := range f.KeepOuts {
		margin := k.Margin.Degrees()
		switch {
		case k.Apart != nil:
			a, okA := deg[k.Apart.Arms[0].Axis]
			b, okB := deg[k.Apart.Arms[1].Axis]
			between := a*float64(k.Apart.Arms[0].Side) - b*float64(k.Apart.Arms[1].Side)
			if between < 0 {
				between = -between
			}
			if okA && okB && between < k.Apart.Least.Degrees()+margin+more["signal_arm"]+more["idler_arm"]-1e-9 {
				return fmt.Sprintf("arms %g deg apart, keep-out %+v", between, *k.Apart)
			}
		case k.Cone != nil:
			for _, arm := range k.Cone.Arms {
				if x, ok := deg[arm.Axis]; ok && x*x < (k.Cone.HalfWidth.Degrees()+margin+more[arm.Axis])*(k.Cone.HalfWidth.Degrees()+margin+more[arm.Axis])-1e-9 {
					return fmt.Sprintf("%s at %g deg in the cone %+v", arm.Axis, x, *k.Cone)
				}
			}
		case k.Range != nil:
			if inside(k.Range.Span, margin) && (k.Range.While == nil || inside(*k.Range.While, margin)) {
				return fmt.Sprintf("in the range %+v", *k.Range)
			}
		}
	}
	return ""
}

// drawPlan plans a small recipe for a bench, whose place is mostly within its limits. It is not ok
// where the recipe is refused.
func drawPlan(d drawer, f Facts) (p scan.Plan, text string, ok bool) {
	angle := func(name string) string { return fmt.Sprintf("%d deg", d.int(name, -5, 11)) }
	var entries []string
	for _, axis := range []string{"crystal_tilt", "signal_arm", "idler_arm"} {
		switch way := d.int(axis, 0, 4); {
		case way == 0 && axis == "idler_arm":
			entries = append(entries, "{axis: idler_arm, conjugate_of: signal_arm, span: 2 deg, step: 1 deg}")
		case way <= 2:
			entries = append(entries, fmt.Sprintf("{axis: %s, at: %s}", axis, angle("at")))
		case way == 3:
			entries = append(entries, fmt.Sprintf("{axis: %s, at: [%s, %s]}", axis, angle("at"), angle("at")))
		default:
			from := d.int("from", -6, 9)
			entries = append(entries, fmt.Sprintf("{axis: %s, from: %d deg, to: %d deg, step: 0.5 deg}", axis, from, from+d.int("to", 1, 5)))
		}
	}
	text = "title: A\ndwell: 1 s\norder: " + d.one("order", "ascending", "serpentine", "shuffled") + "\nsweep: [" + strings.Join(entries, ", ") + "]\n"
	if d.int("background", 0, 3) == 0 {
		text += fmt.Sprintf("background: {turn: pump_waveplate, by: %d deg, every: 3 points, dwell: 1 s}\n", d.int("by", 1, 9))
	}
	if d.int("reference", 0, 3) == 0 {
		text += "reference: {axes: [signal_arm, idler_arm], every: 30 min, flank: 0.5 deg, at: {crystal_tilt: " + angle("tilt") + d.one("top", "", ", signal_arm: 4 deg", ", signal_arm: 4 deg, idler_arm: 5 deg") + "}}\n"
	}
	r, err := Parse("r.yaml", []byte(text))
	if err != nil {
		d.Fatalf("%s%v", text, err)
	}
	p, err = r.Plan(f)
	if err != nil {
		return p, text, false
	}
	return p, text, true
}

func TestEveryPointOfAnAcceptedRecipeMayBeStoodAt(t *testing.T) {
	accepted, refused, references := 0, 0, 0
	rapid.Check(t, func(t *rapid.T) {
		d := drawer{t}
		f := drawBench(d)
		for range 5 {
			p, text, ok := drawPlan(d, f)
			if !ok {
				refused++
				continue
			}
			accepted++
			for _, v := range p.Visits() {
				if wrong := offends(f, p.Points[v.Point].Axes); wrong != "" {
					t.Fatalf("%saccepted with point %d at %v: %s", text, v.Point, p.Points[v.Point].Axes, wrong)
				}
			}
			if b := p.Background; b != nil {
				for _, a := range []unit.Angle{b.From, b.From + b.By} {
					if wrong := offends(f, []scan.AxisTarget{{Axis: b.Axis, Angle: a}}); wrong != "" {
						t.Fatalf("%saccepted with a background: %s", text, wrong)
					}
				}
			}
			if p.Reference != nil {
				references++
				for _, place := range p.Reference.Places {
					if wrong := offends(f, place.Axes); wrong != "" {
						t.Fatalf("%saccepted with a reference on the %s at %v: %s", text, place.On, place.Axes, wrong)
					}
				}
			}
		}
	})
	t.Logf("%d recipes accepted, %d with references, %d refused", accepted, references, refused)
	if accepted < 10 || references < 2 || refused < 10 {
		t.Errorf("%d recipes accepted, %d with references, %d refused; want some of each, or the test shows nothing", accepted, references, refused)
	}
}

func TestKeepOutsThatAClosedPumpLiftsForTheWayAreNoFinding(t *testing.T) {
	f := bench()
	f.KeepOuts = []scan.KeepOut{{Name: "beam", Cone: &scan.Cone{Arms: []scan.Arm{{Axis: "signal_arm", Side: 1}}, HalfWidth: unit.Degree / 2, UnlessPumpClosed: true}}}
	for sweep, want := range map[string]string{
		"at: [-1 deg, 1 deg]":        "",
		"at: [-1 deg, 0 deg, 1 deg]": `r.yaml:3:16: sweep[0].axis: point 1: signal_arm at 0 deg: 0 deg from the pump, keep-out "beam"; want 0.5 deg or more`,
	} {
		r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\nsweep: [{axis: signal_arm, "+sweep+"}]\n"))
		if err != nil {
			t.Fatal(err)
		}
		_, err = r.Plan(f)
		if want == "" && err != nil || want != "" && (err == nil || !strings.Contains(err.Error(), want)) {
			t.Errorf("%s: %v; want %q", sweep, err, want)
		}
	}
}

const millionPoints = "title: A\ndwell: 1 s\nsweep:\n- {axis: signal_arm, from: 0 deg, to: 0.999 deg, step: 0.001 deg}\n- {axis: idler_arm, from: 0 deg, to: 0.999 deg, step: 0.001 deg}\n"

// BenchmarkAMillionPoints reads and plans a recipe, and reports how long that takes against filling
// in as many points by two loops.
func BenchmarkAMillionPoints(b *testing.B) {
	f := bench()
	b.ReportAllocs()
	var planned, bare time.Duration
	for b.Loop() {
		begin := time.Now()
		r, err := Parse("r.yaml", []byte(millionPoints))
		if err != nil {
			b.Fatal(err)
		}
		p, err := r.Plan(f)
		if err != nil || len(p.Points) != 1_000_000 {
			b.Fatalf("%d points, %v; want a million", len(p.Points), err)
		}
		planned += time.Since(begin)
		b.StopTimer()
		begin = time.Now()
		filled := fill(1000)
		bare += time.Since(begin)
		if filled[999_999].Axes[1] != p.Points[999_999].Axes[1] {
			b.Fatalf("filled in to %v, planned to %v", filled[999_999].Axes, p.Points[999_999].Axes)
		}
		b.StartTimer()
	}
	b.ReportMetric(planned.Seconds()/bare.Seconds(), "times-bare")
	const point, target = unsafe.Sizeof(scan.Point{}), unsafe.Sizeof(scan.AxisTarget{})
	b.ReportMetric(float64(point+2*target), "B/point")
}

// fill is the bare expansion of n places of each of two arms.
func fill(n int) []scan.Point {
	points := make([]scan.Point, n*n)
	targets := make([]scan.AxisTarget, 0, 2*n*n)
	for i := range points {
		targets = append(targets, scan.AxisTarget{Axis: "signal_arm", Angle: unit.Angle(i/n) * unit.Degree / 1000}, scan.AxisTarget{Axis: "idler_arm", Angle: unit.Angle(i%n) * unit.Degree / 1000})
		points[i].Axes = targets[2*i : 2*i+2 : 2*i+2]
	}
	return points
}

// BenchmarkAMillionPointsWithKeepOuts is what looking at every place and way costs.
func BenchmarkAMillionPointsWithKeepOuts(b *testing.B) {
	f := bench()
	for i := range f.Axes {
		f.Axes[i].Controller, f.Axes[i].SpeedDegS, f.Axes[i].AccelDegS2 = "one", 5, 20
	}
	f.KeepOuts = []scan.KeepOut{{Name: "arms", Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}, Least: unit.Degree}}}
	text := strings.ReplaceAll(strings.ReplaceAll(millionPoints, "from: 0 deg", "from: 2 deg"), "to: 0.999", "to: 2.999")
	b.ReportAllocs()
	for b.Loop() {
		r, err := Parse("r.yaml", []byte(text))
		if err != nil {
			b.Fatal(err)
		}
		if _, err := r.Plan(f); err != nil {
			b.Fatal(err)
		}
	}
}
