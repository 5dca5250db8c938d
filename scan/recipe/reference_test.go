package recipe

import (
	"fmt"
	"math"
	"math/rand/v2"
	"reflect"
	"strings"
	"testing"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// said prints a set of references: each place with its axes.
func said(r *scan.Reference) string {
	var all []string
	for _, p := range r.Places {
		var s strings.Builder
		s.WriteString(string(p.On))
		if p.Arm != "" {
			s.WriteString(" of " + string(p.Arm))
		}
		for _, t := range p.Axes {
			s.WriteString(" " + strings.TrimSuffix(t.Angle.String(), " deg"))
		}
		all = append(all, s.String())
	}
	return strings.Join(all, " | ")
}

const (
	tiltZero  = "{axis: crystal_tilt, at: 0 deg}, "
	bothSwept = "sweep: [" + tiltZero + "{axis: signal_arm, from: 2 deg, to: 3 deg, step: 0.5 deg}, {axis: idler_arm, from: 2 deg, to: 3 deg, step: 0.5 deg}]\n"
)

func TestReferencesStandAtTheTopAndOnBothFlanks(t *testing.T) {
	const half = 0.35322 // of the mirror's light
	for _, c := range []struct{ name, sweep, reference, want string }{
		{"where the model sees light", bothSwept, "axes: [signal_arm, idler_arm]",
			"top 0 2.8 2.8 | low_flank of signal_arm 0 2.44678 2.8 | high_flank of signal_arm 0 3.15322 2.8 | low_flank of idler_arm 0 2.8 2.44678 | high_flank of idler_arm 0 2.8 3.15322"},
		{"at the tilt of the sweep", strings.Replace(bothSwept, "at: 0 deg", "at: 1 deg", 1), "axes: [idler_arm], on: [top]", "top 1 2.8 2.9"},
		{"where the sweep keeps an arm, and the partner", "sweep: [" + tiltZero + "{axis: signal_arm, at: 2 deg}, {axis: idler_arm, from: 1 deg, to: 3 deg, step: 0.1 deg}]\n", "axes: [idler_arm]",
			"top 0 2 2 | low_flank of idler_arm 0 2 1.64678 | high_flank of idler_arm 0 2 2.35322"},
		{"the other way round", "sweep: [" + tiltZero + "{axis: idler_arm, at: [2 deg, 2 deg]}, {axis: signal_arm, conjugate_of: idler_arm, span: 1 deg, step: 0.1 deg}]\n", "axes: [signal_arm], on: [top]", "top 0 2 2"},
		{"where the recipe says", bothSwept, "axes: [idler_arm], at: {signal_arm: 2.5 deg, crystal_tilt: 0.5 deg}, flank: 12 arcmin",
			"top 0.5 2.5 2.55 | low_flank of idler_arm 0.5 2.5 2.35 | high_flank of idler_arm 0.5 2.5 2.75"},
		{"with every axis that is swept", "sweep: [{axis: pump_waveplate, at: [0 deg, 45 deg]}, " + bothSwept[len("sweep: ["):], "axes: [idler_arm], on: [top], at: {pump_waveplate: 0 deg}", "top 0 0 2.8 2.8"},
		{"where the crystal parks for backgrounds", "background: {turn: crystal_tilt, by: 2 deg, also: [end], dwell: 1 s}\n" + strings.Replace(bothSwept, tiltZero, "", 1), "axes: [idler_arm], on: [top]", "top 2.8 2.9"},
	} {
		t.Run(c.name, func(t *testing.T) {
			r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\n"+c.sweep+"reference: {"+c.reference+", every: 30 min, dwell: 20 s}\n"))
			if err != nil {
				t.Fatal(err)
			}
			f := bench()
			f.Axes[2].Park = new(unit.Degree)
			p, err := r.Plan(f)
			if err != nil {
				t.Fatal(err)
			}
			if got := said(p.Reference); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
	if d := spread * math.Sqrt(2*math.Ln2); math.Abs(d-half) > 1e-5 {
		t.Fatalf("half at %g; the wanted places were written for %g", d, half)
	}
}

func TestAReferenceSaysWhatItCountsAndWhen(t *testing.T) {
	dark := "dark: {every: 30 min, dwell: 60 s}\n"
	p := planOf(t, bothSwept+dark+"reference: {axes: [idler_arm], on: [top], every: 20 points, dwell: {time: 20 s, slice: 5 s}, also: [end], bounds: {singles: 3 %, ratio: 5 %}, otherwise: stop}\n")
	want := scan.Reference{
		Cadence: scan.Cadence{Dwell: scan.Dwell{Time: 20 * time.Second, Slice: 5 * time.Second}, EveryPoints: 20, AtStart: true, AtEnd: true},
		Places:  p.Reference.Places, Trigger: "a", UnderTest: "b", Pairs: "ab", Bounds: scan.Bounds{Singles: 0.03, Ratio: 0.05}, Otherwise: scan.Stop,
	}
	if !reflect.DeepEqual(*p.Reference, want) || len(want.Places) != 1 {
		t.Errorf("got  %+v\nwant %+v", *p.Reference, want)
	}
	t.Run("its dwell is the points' where none is written", func(t *testing.T) {
		p := plan(t, "title: A\ndwell: {heralds: 200000, of: signal, at_most: 60 s, slice: 1 s}\n"+bothSwept+"reference: {axes: [idler_arm], every: 30 min}\n")
		if got := p.Reference.Dwell; got != (scan.Dwell{Time: time.Minute, Slice: time.Second}) || p.Reference.Otherwise != scan.Note {
			t.Errorf("%+v, otherwise %s; want 60 s in slices and a note", got, p.Reference.Otherwise)
		}
	})
	t.Run("of several coincidences it is the result's", func(t *testing.T) {
		f := bench()
		f.Singles = append(f.Singles, "c")
		f.Coincidences["bc"] = [2]drivers.Channel{"b", "c"}
		f.Detectors["third"] = "c"
		for result, want := range map[string]string{
			"":                                     "references of which coincidences",
			"of: bc":                               "b c bc",
			"kind: peak, of: bc, along: idler_arm": "b c bc",
			"kind: efficiency, trigger: third, under_test: idler, use: {plateau_of: idler_arm, half_width: 0.1 deg, at: {signal_arm: 2 deg}}": "c b bc",
		} {
			of, more := "", ""
			if strings.HasPrefix(result, "kind") {
				more = "result: {" + result + "}\n"
			} else if result != "" {
				of = ", " + result
			}
			r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\n"+strings.Replace(bothSwept, "3 deg, step: 0.5 deg}]", "3 deg, step: 0.1 deg}]", 1)+dark+"reference: {axes: [idler_arm], on: [top], every: 30 min"+of+"}\n"+more))
			if err != nil {
				t.Fatal(err)
			}
			p, err := r.Plan(f)
			if err != nil {
				if result != "" || !strings.Contains(err.Error(), want) {
					t.Errorf("%s: %v; want %s", result, err, want)
				}
				continue
			}
			if q := p.Reference; fmt.Sprintf("%s %s %s", q.Trigger, q.UnderTest, q.Pairs) != want {
				t.Errorf("%s: counts %s, %s and %s; want %s", result, q.Trigger, q.UnderTest, q.Pairs, want)
			}
		}
	})
}

func TestABenchWithoutOpticsHasItsReferencesDeclared(t *testing.T) {
	for reference, want := range map[string]string{
		"axes: [idler_arm], every: 30 min":                                                                                   `a reference whose top is not known: signal_arm is swept, on a bench without optics; want a key such as at: {signal_arm: 2 deg}, or blocks "optics" and "arms"`,
		"axes: [idler_arm], every: 30 min, at: {signal_arm: 2 deg, idler_arm: 2 deg}":                                        `flanks on a bench without optics; want a key such as "flank: 0.3 deg"`,
		"axes: [idler_arm], every: 30 min, at: {signal_arm: 2 deg, idler_arm: 2 deg}, on: [top], bounds: {singles: 0.1 ppm}": "",
		"axes: [idler_arm], every: 30 min, at: {signal_arm: 2 deg, idler_arm: 2 deg}, flank: 0.3 deg":                        "",
	} {
		r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\n"+bothSwept+"reference: {"+reference+"}\n"))
		if err != nil {
			t.Fatal(err)
		}
		f := bench()
		f.Conjugate, f.Emission, f.Flanks, f.Expect = nil, nil, nil, nil
		_, err = r.Plan(f)
		switch {
		case want == "" && err != nil:
			t.Errorf("%s: %v; want it taken, and judged by the run", reference, err)
		case want != "" && (err == nil || !strings.Contains(err.Error(), want)):
			t.Errorf("%s: %v; want %s", reference, err, want)
		}
	}
}

// TestABoundIsRefusedBelowFourOfItsOwnCountingErrors draws the counts of many pairs of sets that did
// not change, and compares their scatter with what the plan refuses.
func TestABoundIsRefusedBelowFourOfItsOwnCountingErrors(t *testing.T) {
	const dwell, sets = 20.0, 20_000
	rng := rand.New(rand.NewPCG(5, 0))
	poisson := func(mean float64) float64 { return math.Round(mean + math.Sqrt(mean)*rng.NormFloat64()) } // thousands of counts: a Gaussian
	rates := func(idler float64) (a, b, pairs, accidentals float64) {
		e, _ := source([]scan.AxisTarget{{Axis: "signal_arm", Angle: 2 * unit.Degree}, {Axis: "idler_arm", Angle: unit.Degrees(idler)}}, nil)
		return dwell * e.CountsHz["a"], dwell * e.CountsHz["b"], dwell * e.CountsHz["ab"], dwell * e.AccidentalsHz["ab"]
	}
	half := spread * math.Sqrt(2*math.Ln2)
	var singles, ratio, centre float64 // sums of squares
	measure := func() (s, r, c float64) {
		_, b, pairs, acc := rates(2)
		coincidences := poisson(pairs)
		s = coincidences + poisson(b-pairs)
		_, _, low, _ := rates(2 - half)
		_, _, high, _ := rates(2 + half)
		n1, n0, n2 := poisson(low)-acc, coincidences-acc, poisson(high)-acc
		// Three points and three unknowns: the parabola of the logarithms is the Gaussian.
		l1, l0, l2 := math.Log(n1), math.Log(n0), math.Log(n2)
		return s, n0 / s, half / 2 * (l1 - l2) / (l1 + l2 - 2*l0)
	}
	for range sets {
		s1, r1, c1 := measure()
		s2, r2, c2 := measure()
		singles += (s2/s1 - 1) * (s2/s1 - 1) / sets
		ratio += (r2/r1 - 1) * (r2/r1 - 1) / sets
		centre += (c2 - c1) * (c2 - c1) / sets
	}
	for _, c := range []struct {
		key, unit string
		scatter   float64
	}{{"singles", "%", 100 * math.Sqrt(singles)}, {"ratio", "%", 100 * math.Sqrt(ratio)}, {"centre", "deg", math.Sqrt(centre)}} {
		accepted := func(sigmas float64) bool {
			r, err := Parse("r.yaml", fmt.Appendf(nil, "title: A\ndwell: 20 s\nsweep: [%s{axis: signal_arm, at: 2 deg}, {axis: idler_arm, from: 1 deg, to: 3 deg, step: 0.1 deg}]\nreference: {axes: [idler_arm], every: 30 min, bounds: {%s: %.9f %s}}\n", tiltZero, c.key, sigmas*c.scatter, c.unit))
			if err != nil {
				t.Fatal(err)
			}
			_, err = r.Plan(bench())
			return err == nil
		}
		if accepted(3.8) || !accepted(4.2) {
			t.Errorf("%s scatter by %g %s: a bound of 3.8 of that is accepted: %v, one of 4.2: %v; want only the second", c.key, c.scatter, c.unit, accepted(3.8), accepted(4.2))
		}
	}
}

func TestTheDwellThatABoundIsSaidToNeedIsEnough(t *testing.T) {
	text := func(dwell string) string {
		return "title: A\ndwell: 1 s\n" + bothSwept + "reference: {axes: [signal_arm, idler_arm], every: 24 h, dwell: " + dwell + ", bounds: {centre: 0.001 deg}}\n"
	}
	r, err := Parse("r.yaml", []byte(text("1 s")))
	if err != nil {
		t.Fatal(err)
	}
	_, err = r.Plan(bench())
	if err == nil {
		t.Fatal("accepted; want the dwell refused")
	}
	_, want, _ := strings.Cut(err.Error(), `"dwell: `)
	want, _, _ = strings.Cut(want, `"`)
	f := bench()
	f.GateMax = 0
	if r, err = Parse("r.yaml", []byte(text(want))); err == nil {
		_, err = r.Plan(f)
	}
	if err != nil {
		t.Errorf("a dwell of %q: %v; want it taken, as it was said to be enough", want, err)
	}
}

func TestAProvisionalReferenceIsNotJudged(t *testing.T) {
	const text = `title: A
dwell: 1 s
sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: {peak: signal_arm, from: "RING"}}, {axis: idler_arm, conjugate_of: signal_arm, span: 1 deg, step: 0.1 deg}]
reference: {axes: [idler_arm], every: 30 min, bounds: {singles: 0.1 %}}
`
	if got, want := said(plan(t, text).Reference), "top 0 2.8 2.8 | low_flank of idler_arm 0 2.8 2.44678 | high_flank of idler_arm 0 2.8 3.15322"; got != want {
		t.Errorf("got %s; want %s", got, want)
	}
	r, err := Parse("r.yaml", []byte(strings.Replace(text, "RING", "Find the ring", 1)))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := r.Plan(bench()); err == nil || !strings.Contains(err.Error(), "less than four times its own counting error") {
		t.Errorf("%v; want the bound judged where the reference really stands", err)
	}
}
