package estimate

import (
	"encoding/csv"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"

	"gemel/protocol"
	"gemel/sim/phasematch"
	"gemel/sim/source"
)

// matched is a published or independently computed angle of the phase-matching checks, degrees.
func matched(t *testing.T, id string) float64 {
	t.Helper()
	f, err := os.Open("../../testdata/phase-matching/checks.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	for _, row := range rows {
		if row[0] == id {
			v, err := strconv.ParseFloat(row[4], 64)
			if err != nil {
				t.Fatal(err)
			}
			return v
		}
	}
	t.Fatalf("no check %s", id)
	return 0
}

// spot of two axes, degrees; the counts are those of the channel signal or pairs.
func twoAxes(rows *Rows, along string, alongDeg float64, against string, againstDeg float64, g gateCounts) {
	n := len(rows.Readings)
	one := at(row(int64(n+1), protocol.Light, testStart, 1, []gateCounts{g}, EveryPair), along, alongDeg, n, 1)
	rows.Readings = append(rows.Readings, at(one, against, againstDeg, n, 1))
}

func withTilt() Bench {
	b := skerry(EveryPair)
	b.AxisError["crystal_tilt"] = Constant{U: 0.002}
	return b
}

func TestALopsidedRingDoesNotPullTheZero(t *testing.T) {
	// A crystal cut at 28.5 deg and tilted by 2 deg in the plane of the arms: both sides by an
	// independent calculation (checks S073 and S075).
	low, high := matched(t, "S075"), matched(t, "S073")
	const z = 0.031
	ring := func(x float64) float64 { return gauss(x-high, 0.3) + gauss(x+low, 0.3) }
	r := rand.New(rand.NewPCG(81, 1))
	var data []Spot
	for _, c := range []float64{-low, high} {
		data = append(data, profileData(r, func(x float64) float64 { return 10 + 2e5*ring(x-z) }, c-0.6, c+0.6, 41, ones)...)
	}
	rows := spotRows(data)
	q := ZeroQuestion{Axis: "idler_arm", Channel: "idler", Seed: 1, Trials: 50}
	res, err := Zero(rows, skerry(EveryPair), Model{Profile: ring}, q)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "zero", *res.Value, z, 5*res.Zero.OffsetU)
	near(t, "half the distance", res.Zero.HalfDeg, (low+high)/2, 1e-3)
	near(t, "predicted half", *res.Zero.Expected, (low+high)/2, 1e-4)
	near(t, "combined with the axis's error", *res.U, math.Hypot(res.Zero.OffsetU, 0.002), 1e-12)
	if len(res.Residuals) != 82 || len(res.Warnings) != 0 {
		t.Errorf("%d residuals, warnings %q", len(res.Residuals), res.Warnings)
	}
	// Without a model the ring's lopsidedness is in the zero, and it says that it may be.
	bare, err := Zero(rows, skerry(EveryPair), Model{}, q)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "without a model", *bare.Value, z+(high-low)/2, 5*bare.Zero.OffsetU)
	if bare.Zero.Expected != nil || !strings.Contains(bare.Text(), "evenly about the pump") {
		t.Errorf("without a model: %s", bare.Text())
	}
	// Half a ring is none.
	var no *Refusal
	if _, err := Zero(spotRows(data[:41]), skerry(EveryPair), Model{Profile: ring}, q); !errors.As(err, &no) || !strings.Contains(err.Error(), "both sides of the pump") {
		t.Errorf("one side alone: %v", err)
	}
}

func TestADistanceThatPhaseMatchingDoesNotGiveIsSaid(t *testing.T) {
	ring := func(x float64) float64 { return gauss(math.Abs(x)-2.86, 0.3) }
	real := func(x float64) float64 { return 5 + 500*gauss(math.Abs(x)-2.9, 0.3) }
	r := rand.New(rand.NewPCG(82, 1))
	data := append(profileData(r, real, -3.6, -2.2, 41, ones), profileData(r, real, 2.2, 3.6, 41, ones)...)
	res, err := Zero(spotRows(data), skerry(EveryPair), Model{Profile: ring}, ZeroQuestion{Axis: "idler_arm", Channel: "idler", Trials: 20})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "zero", *res.Value, 0, 4**res.U)
	if !strings.Contains(strings.Join(res.Warnings, "\n"), "by phase matching") {
		t.Errorf("warnings %q; want the distance named", res.Warnings)
	}
}

func TestZerosCoverTheTruth(t *testing.T) {
	statistics(t)
	times := 60
	if *long {
		times = 2000
	}
	side := func(x float64) float64 { // steep inside, slow outside, on both sides
		return skewed(math.Abs(x))
	}
	for k, height := range []float64{2000, 15} {
		inside, miss := 0, 0.0
		for i := range times {
			r := rand.New(rand.NewPCG(uint64(800+k), uint64(i)))
			z, shift := 0.05*r.NormFloat64(), 0.002*r.NormFloat64()
			real := func(x float64) float64 { return 0.02*height + height*side(x-z+shift) }
			data := append(profileData(r, real, -3.4, -2.3, 37, ones), profileData(r, real, 2.3, 3.4, 37, ones)...)
			res, err := Zero(spotRows(data), skerry(EveryPair), Model{Profile: side}, ZeroQuestion{Axis: "idler_arm", Channel: "idler", Trials: 1})
			if err != nil {
				t.Fatal(err)
			}
			if res.Interval.Low <= z && z <= res.Interval.High {
				inside++
			}
			miss += (*res.Value - z) / *res.U / float64(times)
		}
		coverage(t, "zero", inside, times, miss)
	}
}

func coverage(t *testing.T, what string, inside, times int, miss float64) {
	t.Helper()
	share := float64(inside) / float64(times)
	t.Logf("%s: %.2f %% covered, mean miss %+.3f u", what, 100*share, miss)
	low, high := 0.935, 0.97
	if !*long {
		low, high = 0.95-3.5*math.Sqrt(0.95*0.05/float64(times)), 1
	}
	if share < low || share > high {
		t.Errorf("%s: %.2f %% covered; want %.1f to %.1f %%", what, 100*share, 100*low, 100*high)
	}
}

// bare is the emission that a slab of these optics has, as seen by the signal arm.
func bareSignal(o source.Optics, tiltDeg float64) (float64, error) {
	slab := phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, TiltDeg: tiltDeg, ThicknessMm: o.ThicknessMm, Cel: o.CrystalCel, PumpNm: o.PumpNm}
	pair, err := slab.At(o.Signal.Filter.CentreNm)
	if err != nil {
		return 0, err
	}
	e := pair.Emission(o.AzimuthDeg)
	if e.N == 0 {
		return 0, errors.New(e.Because())
	}
	return e.Root[0].Signal.PolarDeg, nil
}

// tuning is a model of optics for a sweep of the signal arm at crystal tilts.
func tuning(t testing.TB, o source.Optics) Model {
	t.Helper()
	m, err := source.New(o)
	if err != nil {
		t.Fatal(err)
	}
	return Model{
		ProfileAt: func(tiltDeg, shiftDeg float64) func(float64) float64 {
			return func(deg float64) float64 {
				return m.Rates(source.Pose{SignalDeg: deg, IdlerDeg: 2.8, TiltDeg: tiltDeg + shiftDeg, PumpW: 0.05, PumpNm: 405, CrystalCel: 20, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}).SignalHz
			}
		},
		Bare: func(tiltDeg float64) (float64, error) { return bareSignal(o, tiltDeg) },
		CutDeg: func(tiltDeg float64) (float64, error) {
			slab := phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, TiltDeg: tiltDeg, ThicknessMm: o.ThicknessMm, Cel: o.CrystalCel, PumpNm: o.PumpNm}
			return slab.PumpAxisDeg()
		},
	}
}

// tuned draws the singles of a tuning curve: the crystal stands tilt further than it says, the arm
// reads zero too much.
func tunedRows(t testing.TB, r *rand.Rand, o source.Optics, tilts []float64, tilt, zero, height float64) Rows {
	t.Helper()
	m, err := source.New(o)
	if err != nil {
		t.Fatal(err)
	}
	rate := func(deg, tiltDeg float64) float64 {
		return m.Rates(source.Pose{SignalDeg: deg, IdlerDeg: 2.8, TiltDeg: tiltDeg, PumpW: 0.05, PumpNm: 405, CrystalCel: 20, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}).SignalHz
	}
	rows := Rows{Run: "20310203T220000-tuning"}
	top := rate(2.864, 0)
	for _, a := range tilts {
		middle, err := bareSignal(ringOptics(t), a)
		if err != nil {
			t.Fatal(err)
		}
		for i := range 33 {
			deg := middle - 0.8 + 1.6*float64(i)/32
			twoAxes(&rows, "signal_arm", deg, "crystal_tilt", a, gateCounts{s: int(drawPoisson(r, 5+height*rate(deg-zero, a+tilt)/top))})
		}
	}
	return rows
}

var tuningQuestion = CurveQuestion{Channel: "signal", Along: "signal_arm", Against: "crystal_tilt", Trials: 1}

func TestATuningCurveFindsTheTiltsAndTheArmsZero(t *testing.T) {
	o := ringOptics(t)
	// Towards the tilt at which the ring closes the curve is bent: there the two zeros part.
	wide := []float64{-0.4, -0.25, 0, 0.3, 0.7, 1.3, 2}
	res, err := TuningCurve(tunedRows(t, rand.New(rand.NewPCG(83, 1)), o, wide, 0.06, 0.03, 20000), withTilt(), tuning(t, o), tuningQuestion)
	if err != nil {
		t.Fatal(err)
	}
	v := res.Curve
	near(t, "zero of the tilt", *res.Value, 0.06, 4**res.U)
	if !v.Unknowns[1].Fitted {
		t.Fatalf("unknowns %+v; want the arm's zero fitted too", v.Unknowns)
	}
	near(t, "zero of the arm", v.Unknowns[1].Value, 0.03, 4*v.Unknowns[1].U)
	if len(v.Places) != 7 || v.P < 0.001 || len(v.Inseparable) != 1 || !strings.Contains(v.Inseparable[0], "cut") {
		t.Errorf("%d places, p %g, %q", len(v.Places), v.P, v.Inseparable)
	}
	for _, part := range []string{"predicted", "chi square", "Not to be told apart: the zero of crystal_tilt and the crystal's cut", "fitted"} {
		if !strings.Contains(res.Text(), part) {
			t.Errorf("no %q in\n%s", part, res.Text())
		}
	}

	// Two tilts side by side: one ring, one unknown.
	res, err = TuningCurve(tunedRows(t, rand.New(rand.NewPCG(83, 2)), o, []float64{0.9, 1.1}, 0.06, 0, 20000), withTilt(), tuning(t, o), tuningQuestion)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "zero of the tilt alone", *res.Value, 0.06, 4**res.U)
	if res.Curve.Unknowns[1].Fitted || len(res.Curve.Inseparable) != 2 || len(res.Budget) != 3 {
		t.Errorf("unknowns %+v, %q, %d rows; want the arm's zero held, named, and in the budget", res.Curve.Unknowns, res.Curve.Inseparable, len(res.Budget))
	}
}

func TestAnotherCutIsTheTiltsZeroByAnotherName(t *testing.T) {
	statistics(t)
	o := ringOptics(t)
	real := o
	real.CutDeg += 0.05
	res, err := TuningCurve(tunedRows(t, rand.New(rand.NewPCG(84, 1)), real, []float64{-0.4, -0.2, 0, 0.5, 1, 1.5}, 0, 0, 50000), withTilt(), tuning(t, o), tuningQuestion)
	if err != nil {
		t.Fatal(err)
	}
	for _, u := range res.Curve.Unknowns {
		if strings.HasPrefix(u.Name, "cut") {
			near(t, "cut", u.Value, o.CutDeg+0.05, 4*u.U)
			return
		}
	}
	t.Errorf("unknowns %+v; want the cut that would do", res.Curve.Unknowns)
}

func TestTuningCurvesCoverTheTruth(t *testing.T) {
	statistics(t)
	times := 3
	if *long {
		times = 1000
	}
	o := ringOptics(t)
	model := tuning(t, o)
	inTilt, inZero, fitted, miss := 0, 0, 0, 0.0
	for i := range times {
		r := rand.New(rand.NewPCG(840, uint64(i)))
		tilt, zero := 0.05*r.NormFloat64(), 0.03*r.NormFloat64()
		offTilt, offArm := 0.002*r.NormFloat64(), 0.002*r.NormFloat64() // the axes' own errors, the same all night
		res, err := TuningCurve(tunedRows(t, r, o, []float64{-0.35, -0.2, 0, 0.3, 1, 1.8}, tilt-offTilt, zero+offArm, 3000), withTilt(), model, tuningQuestion)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(*res.Value-tilt) <= *res.Expanded {
			inTilt++
		}
		miss += (*res.Value - tilt) / *res.U / float64(times)
		if z := res.Curve.Unknowns[1]; z.Fitted {
			fitted++
			if math.Abs(z.Value-zero) <= 1.96*z.U {
				inZero++
			}
		}
	}
	coverage(t, "zero of the tilt", inTilt, times, miss)
	if fitted < times/2 {
		t.Fatalf("the arm's zero was fitted in %d of %d", fitted, times)
	}
	coverage(t, "zero of the arm", inZero, fitted, 0)
}

func TestAConjugateMapFindsWhatTheZerosLeave(t *testing.T) {
	statistics(t)
	// A crystal cut at 28.5 deg, tilted by 3 deg: a signal of 780 nm at 4 deg has its partner at
	// 4.337 deg by an independent calculation (check S088). The optics' filters are those wavelengths.
	want := matched(t, "S088")
	o := ringOptics(t)
	slab := phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: 28.5, TiltDeg: 3, ThicknessMm: 2, Cel: 20, PumpNm: 405}
	pair, err := slab.At(780)
	if err != nil {
		t.Fatal(err)
	}
	partner := func(deg float64) float64 { in, _ := pair.Conjugate(deg, 0).InPlane(180); return in }
	shape := func(centre float64) func(float64) float64 {
		return func(x float64) float64 { return skewed(x - centre + 2.84) }
	}
	model := Model{
		Bare: func(deg float64) (float64, error) { return partner(deg), nil },
		ProfileAt: func(deg, _ float64) func(float64) float64 {
			return shape(partner(deg))
		},
	}
	const offset = 0.042
	draw := func(r *rand.Rand, places []float64, height, slope float64) Rows {
		rows := Rows{Run: "20310203T220000-map"}
		for _, a := range places {
			truth := partner(a) + offset + slope*(a-4)
			if a == 4 {
				truth = want + offset
			}
			for i := range 33 {
				deg := truth - 0.7 + 1.4*float64(i)/32
				twoAxes(&rows, "idler_arm", deg, "signal_arm", a, gateCounts{s: 1000, d: 1000, pairs: int(drawPoisson(r, 3+height*shape(truth)(deg)))})
			}
		}
		return rows
	}
	q := CurveQuestion{Channel: "pairs", Along: "idler_arm", Against: "signal_arm", Trials: 50}
	res, err := ConjugateMap(draw(rand.New(rand.NewPCG(85, 1)), []float64{3.6, 3.8, 4, 4.2, 4.4}, 5000, 0), withTilt(), model, q)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "offset", *res.Value, offset, 4*res.Budget[0].U)
	near(t, "the partner of 4 deg", res.Curve.Places[2].AngleDeg, want+offset, 5*res.Curve.Places[2].U)
	// The error of the arm that is not swept moves the partner by the slope of the map.
	near(t, "u", *res.U, math.Sqrt(res.Budget[0].U*res.Budget[0].U+0.002*0.002*(1+res.Budget[2].Sensitivity*res.Budget[2].Sensitivity)), 1e-9)
	near(t, "slope of the map", -res.Budget[2].Sensitivity, (partner(4.4)-partner(3.6))/0.8, 1e-2)
	if len(res.Curve.Unknowns) != 2 || math.Abs(res.Curve.Unknowns[1].Value) > 4*res.Curve.Unknowns[1].U || len(res.Warnings) != 0 {
		t.Errorf("unknowns %+v, warnings %q", res.Curve.Unknowns, res.Warnings)
	}
	// A filter that is not what the file says makes a slope.
	res, err = ConjugateMap(draw(rand.New(rand.NewPCG(85, 2)), []float64{3.4, 3.8, 4.2, 4.6}, 5000, 0.05), withTilt(), model, q)
	if err != nil {
		t.Fatal(err)
	}
	if !strings.Contains(strings.Join(res.Warnings, "\n"), "more a degree of signal_arm") {
		t.Errorf("warnings %q; want the slope named", res.Warnings)
	}
	// Two places hold an offset and nothing else.
	res, err = ConjugateMap(draw(rand.New(rand.NewPCG(85, 3)), []float64{3.8, 4.2}, 5000, 0), withTilt(), model, q)
	if err != nil || len(res.Curve.Unknowns) != 1 || len(res.Curve.Inseparable) != 2 {
		t.Errorf("two places: %v, %+v", err, res.Curve)
	}
	if _, err := ConjugateMap(draw(rand.New(rand.NewPCG(85, 4)), []float64{4}, 5000, 0), withTilt(), Model{}, q); err == nil || !strings.Contains(err.Error(), "optics") {
		t.Errorf("no optics: %v", err)
	}
}

func TestAPlaceWithoutAPeakIsLeftOutAndSaid(t *testing.T) {
	o := ringOptics(t)
	rows := tunedRows(t, rand.New(rand.NewPCG(86, 1)), o, []float64{-0.2, 0, 0.6, 1.2}, 0, 0, 5000)
	for i := range rows.Readings[:33] {
		rows.Readings[i].Counts[0].Counts, rows.Readings[i].Slices = uint64(5), nil
	}
	q := tuningQuestion
	q.Trials = 5
	res, err := TuningCurve(rows, withTilt(), tuning(t, o), q)
	if err != nil {
		t.Fatal(err)
	}
	if res.Curve.Places[0].Left == "" || !strings.Contains(res.Text(), "left out") || !strings.Contains(strings.Join(res.Warnings, ""), "1 of 4 places") {
		t.Errorf("%+v\n%q", res.Curve.Places[0], res.Warnings)
	}
}
