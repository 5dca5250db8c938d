package forecast

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// profile is light as it falls off in truth: Gaussians, flat tops with soft edges, a slope, and
// accidental coincidences that stay where the true ones are long gone.
func profile(axes []scan.AxisTarget, _ []scan.SettingTarget) (scan.Expected, error) {
	s, i := axes[0].Angle.Degrees()-2.8, axes[1].Angle.Degrees()-2.8
	top := (math.Erf((0.35+s+i)/0.12) + math.Erf((0.35-s-i)/0.12)) / 2
	single := 200 + 3e4*math.Exp(-s*s/0.18)*(1+0.2*s)
	partner := 200 + 2e5*math.Exp(-i*i/0.5)
	pairs, chance := 5e3*math.Exp(-s*s/0.16)*math.Max(top, 0), single*partner*4e-9
	return scan.Expected{CountsHz: map[drivers.Channel]float64{"signal": single, "idler": partner, "pairs": pairs + chance}, AccidentalsHz: map[drivers.Channel]float64{"pairs": chance}}, nil
}

func columns(x scan.Expected) row {
	return row{x.CountsHz["signal"], x.CountsHz["idler"], x.CountsHz["pairs"], x.AccidentalsHz["pairs"]}
}

func TestRatesBetweenTheEvaluatedPlacesAreWithinAPercent(t *testing.T) {
	largest := 0.0
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(60, 400).Draw(t, "values of each arm")
		span, off := rapid.Float64Range(0.2, 2).Draw(t, "span"), rapid.Float64Range(-0.3, 0.3).Draw(t, "off the ring")
		a := [3]float64{2.8 + off - span/2, 2.8 + off + span/2, float64(n)}
		plan := grid(a, [3]float64{a[0], a[1], float64(n)}, rapid.Bool().Draw(t, "serpentine"))
		asked := 0
		r := newRates(plan.Points, []drivers.Channel{"signal", "idler", "pairs"}, []drivers.Channel{"pairs"}, func(axes []scan.AxisTarget, s []scan.SettingTarget) (scan.Expected, error) {
			asked++
			return profile(axes, s)
		})
		if asked > MostEvaluations || r.evaluated != asked {
			t.Fatalf("%d evaluations, counted as %d; want at most %d", asked, r.evaluated, MostEvaluations)
		}
		got := make(row, 4)
		for range 200 {
			i := rapid.IntRange(0, len(plan.Points)-1).Draw(t, "point")
			r.into(i, got)
			x, _ := profile(plan.Points[i].Axes, nil)
			for k, want := range columns(x) {
				d := math.Abs(got[k]/want - 1)
				largest = math.Max(largest, d)
				if !(d < 0.01) {
					t.Fatalf("point %d of %d, span %.2f deg: column %d is %g; want %g", i, len(plan.Points), span, k, got[k], want)
				}
			}
		}
		if r.error > 0.01 {
			t.Fatalf("the error found by itself is %g; want at most 0.01", r.error)
		}
	})
	t.Logf("largest relative error %.2g", largest)
}

// The model's own table keeps a hundredth of the largest rates nearby, so that far down a flank its
// answers are no smoother than that.
func TestInterpolatedRatesFollowTheModelAsCloselyAsItFollowsItself(t *testing.T) {
	l := light(t, 1)
	for _, span := range []float64{0.3, 0.8} {
		a := [3]float64{2.864 - span/2, 2.864 + span/2, 300}
		plan := grid(a, a, true)
		r := newRates(plan.Points, []drivers.Channel{"signal", "idler", "pairs"}, []drivers.Channel{"pairs"}, l.expect)
		highest, worst := make(row, 4), 0.0
		var got, want []row
		for i := 7; i < len(plan.Points); i += 367 {
			x, err := l.expect(plan.Points[i].Axes, nil)
			if err != nil {
				t.Fatal(err)
			}
			w, g := columns(x), make(row, 4)
			r.into(i, g)
			got, want = append(got, g), append(want, w)
			for k := range highest {
				highest[k] = math.Max(highest[k], w[k])
			}
		}
		for i := range got {
			for k := range highest {
				worst = math.Max(worst, math.Abs(got[i][k]-want[i][k])/math.Max(want[i][k], dim*highest[k]))
			}
		}
		t.Logf("span %.1f deg: at most %.2g off at %d of %d points, %.2g by its own check", span, worst, len(got), len(plan.Points), r.error)
		if worst > 0.01 {
			t.Errorf("span %.1f deg: %.2g off; want at most 0.01", span, worst)
		}
	}
}

// A list is understood as the entries it was made from, whatever they are: forth and back, in
// lock-step, with a partner that follows another axis.
func TestALatticeFindsTheEntriesThatAListWasMadeFrom(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var sizes []int
		total := 1
		for range rapid.IntRange(1, 3).Draw(t, "entries") {
			n := rapid.IntRange(2, 7).Draw(t, "values")
			sizes = append(sizes, n)
			total *= n
		}
		serpentine := rapid.Bool().Draw(t, "serpentine")
		follows := len(sizes) > 1 && rapid.Bool().Draw(t, "the innermost follows the outermost")
		lockstep := rapid.Bool().Draw(t, "lock-step")
		var points []scan.Point
		want := make([][]int, total)
		for p := range total {
			at := make([]int, len(sizes))
			q := p
			for i := len(sizes) - 1; i >= 0; i-- {
				n := sizes[i]
				line := q / n
				at[i] = q % n
				if serpentine && line%2 == 1 {
					at[i] = n - 1 - at[i]
				}
				q = line
			}
			want[p] = at
			var axes []scan.AxisTarget
			for i, k := range at {
				angle := unit.Angle(k*k+3*k) * deg // no even steps
				if follows && i == len(at)-1 {
					angle += unit.Angle(at[0]*at[0]*7+1) * deg / 3
				}
				axes = append(axes, scan.AxisTarget{Axis: drivers.AxisName(rune('a' + i)), Angle: angle})
			}
			if lockstep {
				axes = append(axes, scan.AxisTarget{Axis: "with", Angle: unit.Angle(at[0]) * deg})
			}
			points = append(points, scan.Point{Axes: axes})
		}
		l := newLattice(points)
		if l == nil || l.total != total {
			t.Fatalf("no lattice in %d points of %v", total, sizes)
		}
		for p := range points {
			at := make([]int, len(l.levels))
			l.indices(p, at)
			if l.pointAt(at) != p {
				t.Fatalf("point %d has the places %v, and these are point %d", p, at, l.pointAt(at))
			}
			for i := range at {
				if len(l.levels) != len(sizes) || l.levels[i].size != sizes[i] || at[i] != want[p][i] {
					t.Fatalf("point %d of %v, serpentine %t: at %v; want %v", p, sizes, serpentine, at, want[p])
				}
			}
		}
	})
}

func TestPointsBesidePlacesWithoutRatesTakeTheNearest(t *testing.T) {
	plan := grid([3]float64{2, 4, 60}, [3]float64{2, 4, 60}, false)
	for i := range plan.Points {
		if i < 10*60 {
			plan.Points[i].Empty = "the ring is closed"
		}
	}
	r := newRates(plan.Points, []drivers.Channel{"signal"}, nil, func(axes []scan.AxisTarget, _ []scan.SettingTarget) (scan.Expected, error) {
		return scan.Expected{CountsHz: map[drivers.Channel]float64{"signal": 1000}}, nil
	})
	got := make(row, 1)
	for i := 12 * 60; i < len(plan.Points); i++ {
		if r.into(i, got); !(math.Abs(got[0]-1000) < 1) {
			t.Fatalf("point %d: %g; want 1000", i, got[0])
		}
	}
}
