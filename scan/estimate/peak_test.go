package estimate

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

func TestCashAgreesWithThePublishedTerms(t *testing.T) {
	// standards.md 6.3, computed there.
	n, m := []float64{0, 1, 5, 12}, []float64{0.5, 2, 4, 10}
	for i, want := range []float64{1, 0.613706, 0.231436, 0.375717} {
		near(t, "term", Cash(n[i:i+1], m[i:i+1]), want, 0.5e-6)
	}
	near(t, "sum", Cash(n, m), 2.220859, 0.5e-6)
	old := 0.0
	for i := range n {
		old += 2 * (m[i] - n[i]*math.Log(m[i]))
	}
	near(t, "the 1979 form", old, -37.5113, 0.5e-4)
	if !math.IsInf(Cash([]float64{1}, []float64{0}), 1) {
		t.Error("a count where none is expected: want +Inf")
	}
}

// profileData draws counts of a rate over a grid.
func profileData(r *rand.Rand, rate func(x float64) float64, low, high float64, n int, exposure func(i int) float64) []Spot {
	var data []Spot
	for i := range n {
		x := low + (high-low)*float64(i)/float64(n-1)
		e := exposure(i)
		data = append(data, Spot{AngleDeg: x, Counts: drawPoisson(r, e*rate(x)), Exposure: e})
	}
	return data
}

func ones(int) float64 { return 1 }

func TestPeaksComeBackFromCounts(t *testing.T) {
	statistics(t)
	soft := func(v, w, e float64) float64 {
		return (math.Erf((w/2-v)/math.Sqrt2/e) + math.Erf((w/2+v)/math.Sqrt2/e)) / 2
	}
	for _, c := range []struct {
		name         string
		shape        PeakShape
		rate         func(x float64) float64
		centre, fwhm float64
	}{
		{"a gaussian", GaussianPeak, func(x float64) float64 { return 20 + 900*math.Exp(-(x-2.86)*(x-2.86)/2/0.01) }, 2.86, 0.1 * 2.354820045},
		{"a sinc squared", SincPeak, func(x float64) float64 {
			a := (x - 2.86) / 0.1
			if a == 0 {
				return 920
			}
			return 20 + 900*math.Pow(math.Sin(a)/a, 2)
		}, 2.86, 0.2 * 1.3915574},
		{"a flat top with soft edges", FlatTop, func(x float64) float64 { return 20 + 900*soft(x-2.86, 0.5, 0.05) }, 2.86, 0.5},
		{"two peaks", TwoPeaks, func(x float64) float64 {
			return 20 + 900*math.Exp(-(x-2.6)*(x-2.6)/2/0.0064) + 500*math.Exp(-(x-3.1)*(x-3.1)/2/0.0064)
		}, 2.6, 0.08 * 2.354820045},
	} {
		data := profileData(rand.New(rand.NewPCG(3, 1)), c.rate, 2.2, 3.5, 53, ones)
		f, err := FitPeak(data, c.shape, nil)
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		w, u := f.FWHMDeg()
		if c.shape == TwoPeaks && f.CentreDeg() > 2.9 { // either may be called the first
			near(t, c.name+", first", f.Fit.Params[centre2Param], 2.6, 4*f.Fit.U(centre2Param))
			continue
		}
		near(t, c.name+": centre", f.CentreDeg(), c.centre, 4*f.Fit.U(centreParam))
		near(t, c.name+": full width at half maximum", w, c.fwhm, 4*u+0.001)
		if f.Fit.U(centreParam) > 0.01 || f.Fit.U(centreParam) <= 0 {
			t.Errorf("%s: u(centre) %g; want a few mdeg", c.name, f.Fit.U(centreParam))
		}
		if c.shape == TwoPeaks {
			near(t, c.name+", second", f.Fit.Params[centre2Param], 3.1, 4*f.Fit.U(centre2Param))
		}
		i, err := f.Interval(centreParam, 0.6826894921370859)
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.name+": the profile likelihood's half width is the curvature's", (i.High-i.Low)/2, f.Fit.U(centreParam), 0.05*f.Fit.U(centreParam))
		if g := f.Goodness(100, 7); g.P < 0.001 || g.Failed > 2 {
			t.Errorf("%s: %+v; want a fit that its own data bear out", c.name, g)
		}
	}
}

// skewed stands in for a predicted profile: steep inside the ring, slow outside.
func skewed(x float64) float64 {
	v := x - 2.84
	w := 0.11 * (1 + 0.5*math.Tanh(v/0.05))
	return math.Exp(-v * v / 2 / w / w)
}

func TestThePredictedProfileFindsItsOffset(t *testing.T) {
	rate := func(x float64) float64 { return 5 + 400*skewed(x-0.03) }
	data := profileData(rand.New(rand.NewPCG(3, 2)), rate, 2.3, 3.4, 45, ones)
	f, err := FitPeak(data, PredictedPeak, skewed)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "offset", f.Fit.Params[centreParam], 0.03, 4*f.Fit.U(centreParam))
	top := highest(skewed, 2.3, 3.4)
	near(t, "the centre is where the maximum stands", f.CentreDeg(), top+f.Fit.Params[centreParam], 1e-5)
	// A Gaussian fitted to the same counts is pulled: that is why the predicted one is offered.
	g, err := FitPeak(data, GaussianPeak, nil)
	if err != nil {
		t.Fatal(err)
	}
	if d := math.Abs(g.CentreDeg() - (top + 0.03)); d < 3*f.Fit.U(centreParam) {
		t.Errorf("the Gaussian is off by only %g deg: this profile shows nothing", d)
	}
	if p := g.Goodness(100, 3).P; p > 0.05 {
		t.Errorf("the wrong shape fits with p = %g; want it found out", p)
	}
}

func TestGoodnessIsJudgedByWhatFewCountsReallyDo(t *testing.T) {
	// At a tenth of a count a reading the statistic is far from its degrees of freedom; the
	// simulated one is not.
	r := rand.New(rand.NewPCG(8, 8))
	low, n := 0, 12
	if *long {
		n = 100
	}
	for range n {
		data := profileData(r, func(x float64) float64 { return 0.1 + 2*gauss(x-1, 0.4) }, 0, 2, 60, ones)
		f, err := FitPeak(data, GaussianPeak, nil)
		if err != nil {
			continue
		}
		g := f.Goodness(40, 5)
		if g.P < 0.1 {
			low++
		}
		if ratio := g.Mean / float64(f.Fit.Freedom); ratio > 0.95 {
			t.Errorf("mean statistic %.3f of the degrees of freedom; want it visibly below at such counts", ratio)
		}
	}
	if low > 1+n/4 {
		t.Errorf("%d of %d honest data sets below p = 0.1; want about a tenth", low, n)
	}
}

func TestPowerBelongsIntoTheExposure(t *testing.T) {
	// The pump drifts by a third over the sweep. As exposure inside the likelihood the centre
	// stands; without it, it moves.
	r := rand.New(rand.NewPCG(3, 3))
	drift := func(i int) float64 { return 1.2 - 0.4*float64(i)/52 }
	data := profileData(r, func(x float64) float64 { return 20 + 3000*gauss(x-2.86, 0.5) }, 2.2, 3.5, 53, drift)
	f, err := FitPeak(data, GaussianPeak, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "centre", f.CentreDeg(), 2.86, 4*f.Fit.U(centreParam))
	for i := range data {
		data[i].Exposure = 1
	}
	g, err := FitPeak(data, GaussianPeak, nil)
	if err != nil {
		t.Fatal(err)
	}
	if d := 2.86 - g.CentreDeg(); d < 6*f.Fit.U(centreParam) {
		t.Errorf("without the power the centre is off by %g; want it pulled to the bright side", d)
	}
}

func TestFitsDoNotCreepWhereTheBackgroundNearsNothing(t *testing.T) {
	// Two nights of the long coverage run did not converge in 600 steps.
	for _, seed := range []uint64{477, 1555} {
		r := rand.New(rand.NewPCG(501, seed))
		offset, shift := 0.05*(2*r.Float64()-1), 0.002*r.NormFloat64()
		data := profileData(r, func(x float64) float64 { return 0.24 + 12*skewed(x-offset+shift) }, 2.3, 3.4, 45, ones)
		f, err := FitPeak(data, PredictedPeak, skewed)
		if err != nil {
			t.Errorf("night %d: %v", seed, err)
			continue
		}
		near(t, "offset", f.Fit.Params[centreParam], offset-shift, 4*f.Fit.U(centreParam))
	}
}

func TestKnownCountsAreExpectedNotSubtracted(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	data := profileData(r, func(x float64) float64 { return 1 + 60*gauss(x-1, 0.4) + 30*x }, 0, 2, 41, ones)
	for i := range data {
		data[i].Known = 30 * data[i].AngleDeg
	}
	f, err := FitPeak(data, GaussianPeak, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "centre", f.CentreDeg(), 1, 4*f.Fit.U(centreParam))
	near(t, "background", f.Fit.Params[groundParam], 1, 4*f.Fit.U(groundParam)+0.01)
}

func TestFitsRefuseEmptyProfiles(t *testing.T) {
	for _, data := range [][]Spot{
		nil,
		spotsOf(1, 0, 2, 0, 3, 0, 4, 0, 5, 0),
		spotsOf(1, 5, 1, 6, 1, 4, 1, 6, 1, 5),
		spotsOf(1, 5, 2, 6),
	} {
		if f, err := FitPeak(data, GaussianPeak, nil); err == nil {
			t.Errorf("%v: fitted %v; want an error", data, f.Fit.Params)
		}
	}
	if _, err := FitPeak(nil, PredictedPeak, nil); err == nil {
		t.Error("predicted without a prediction: want an error")
	}
}

// Fitted angles against the truth, the axis's error drawn anew each time.
func TestPeakAnglesCoverTheTruth(t *testing.T) {
	statistics(t)
	times := 60
	if *long {
		times = 2000
	}
	for k, c := range []struct {
		name   string
		height float64
		shape  PeakShape
		rate   func(x float64) float64
	}{
		{"predicted profile, many counts", 2000, PredictedPeak, skewed},
		{"predicted profile, few counts", 12, PredictedPeak, skewed},
		{"gaussian, many counts", 2000, GaussianPeak, func(x float64) float64 { return gauss(x-2.84, 0.3) }},
		{"gaussian, few counts", 12, GaussianPeak, func(x float64) float64 { return gauss(x-2.84, 0.3) }},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			const axisU = 0.002
			inside, tried, miss := 0, 0, 0.0
			middle := betweenHalves(c.rate, 2.3, 3.4)
			for i := range times {
				r := rand.New(rand.NewPCG(uint64(500+k), uint64(i)))
				offset, shift := 0.05*(2*r.Float64()-1), axisU*r.NormFloat64()
				rate := func(x float64) float64 { return 0.02*c.height + c.height*c.rate(x-offset+shift) }
				data := profileData(r, rate, 2.3, 3.4, 45, ones)
				res, err := Peak(spotRows(data), skerry(EveryPair), Model{Profile: c.rate}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Shape: c.shape, Trials: 1})
				if err != nil {
					t.Errorf("%d: %v", i, err)
					continue
				}
				tried++
				if res.Interval.Low <= middle+offset && middle+offset <= res.Interval.High {
					inside++
				}
				miss += (*res.Value - middle - offset) / *res.U
			}
			share := float64(inside) / float64(times)
			t.Logf("%.2f %% covered, mean miss %+.3f u, %d of %d fitted", 100*share, miss/float64(tried), tried, times)
			low, high := 0.935, 0.965
			if !*long {
				low, high = 0.95-3.5*math.Sqrt(0.95*0.05/float64(times)), 1
			}
			if share < low || share > high {
				t.Errorf("%.2f %% covered; want %.1f to %.1f %%", 100*share, 100*low, 100*high)
			}
		})
	}
}

// betweenHalves is the middle of the places where a rate is at least half of its highest, looked at one
// by one.
func betweenHalves(rate func(x float64) float64, low, high float64) float64 {
	const step = 1e-5
	top, first, last := 0., math.Inf(1), math.Inf(-1)
	for x := low; x < high; x += step {
		top = math.Max(top, rate(x))
	}
	for x := low; x < high; x += step {
		if rate(x) >= top/2 {
			first, last = math.Min(first, x), math.Max(last, x)
		}
	}
	return (first + last) / 2
}

func spotRows(data []Spot) Rows {
	rows := Rows{Run: "20310203T220000-peak"}
	for i, s := range data {
		g := gateCounts{d: int(s.Counts)}
		rows.Readings = append(rows.Readings, at(row(int64(i+1), "light", testStart, s.Exposure, []gateCounts{g}, EveryPair), "idler_arm", s.AngleDeg, i, 1))
	}
	return rows
}

func TestAPeakIsReportedWithWhatItNeeds(t *testing.T) {
	data := profileData(rand.New(rand.NewPCG(3, 9)), func(x float64) float64 { return 5 + 300*gauss(x-2.86, 0.3) }, 2.3, 3.4, 45, ones)
	res, err := Peak(spotRows(data), skerry(EveryPair), Model{}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	if res.Unit != "deg" || len(res.Residuals) != 45 || len(res.Budget) != 2 || len(res.Used) != 45 {
		t.Errorf("unit %q, %d residuals, %d rows, %d used", res.Unit, len(res.Residuals), len(res.Budget), len(res.Used))
	}
	near(t, "combined with the axis's error", *res.U, math.Hypot(res.Budget[0].U, 0.002), 1e-12)
	bare := skerry(EveryPair)
	bare.AxisError = nil
	if _, err := Peak(spotRows(data), bare, Model{}, PeakQuestion{Axis: "idler_arm", Channel: "idler"}); err == nil {
		t.Error("no axis error declared: want a refusal")
	}
	flank := profileData(rand.New(rand.NewPCG(3, 11)), func(x float64) float64 { return 5 + 300*gauss(x-2.86, 0.3) }, 2.95, 3.4, 45, ones)
	var no *Refusal
	if res, err := Peak(spotRows(flank), skerry(EveryPair), Model{}, PeakQuestion{Axis: "idler_arm", Channel: "idler"}); !errors.As(err, &no) {
		t.Errorf("one flank only: got %v ± %v; want a refusal", *res.Value, *res.U)
	}
}

func TestAPeakFittedToNothingIsNoValue(t *testing.T) {
	shape := func(x float64) float64 { return gauss(x-2.86, 0.2) }
	for seed := range uint64(12) {
		for _, rate := range []float64{0.25, 5, 800} { // 11 counts in all, up to plenty
			flat := profileData(rand.New(rand.NewPCG(30, seed)), func(float64) float64 { return rate }, 2.3, 3.4, 45, ones)
			for _, model := range []Model{{Profile: shape}, {}} {
				var no *Refusal
				if res, err := Peak(spotRows(flat), skerry(EveryPair), model, PeakQuestion{Axis: "idler_arm", Channel: "idler", Trials: 1}); !errors.As(err, &no) {
					t.Errorf("seed %d, %g counts a reading: %g ± %g deg; want a refusal", seed, rate, *res.Value, *res.U)
				}
			}
		}
		weak := profileData(rand.New(rand.NewPCG(31, seed)), func(x float64) float64 { return 0.1 + 8*shape(x) }, 2.3, 3.4, 45, ones)
		if _, err := Peak(spotRows(weak), skerry(EveryPair), Model{Profile: shape}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Trials: 1}); err != nil {
			t.Errorf("seed %d: %v; want a peak where eight counts a reading are one", seed, err)
		}
	}
}

// spotsOf takes angles and counts in turn, of one exposure each.
func spotsOf(pairs ...float64) (data []Spot) {
	for i := 0; i+1 < len(pairs); i += 2 {
		data = append(data, Spot{AngleDeg: pairs[i], Counts: pairs[i+1], Exposure: 1})
	}
	return data
}

func TestADeclaredDeadTimeCompressesThePredictedProfile(t *testing.T) {
	const tau, gate = 45e-9, 3.
	shape := func(x float64) float64 { return softBox(x-2.86, 0.6, 0.12) }
	for _, model := range []DeadTimeModel{NonParalysable, Paralysable} {
		r := rand.New(rand.NewPCG(5, 5))
		var data []Spot
		for i := range 41 {
			x := 1.9 + 0.0475*float64(i)
			true := 1000 + 320e3*shape(x)
			// Knoll's formulas, written out: what the package has is under test.
			seen := true / (1 + true*tau)
			if model == Paralysable {
				seen = true * math.Exp(-true*tau)
			}
			data = append(data, Spot{AngleDeg: x, Counts: drawPoisson(r, gate*seen), Exposure: gate, GateS: gate, DeadS: tau, Dead: model})
		}
		f, err := FitPeak(data, PredictedPeak, shape)
		if err != nil {
			t.Fatal(err)
		}
		if g := f.Goodness(60, 1); g.P < onePercent {
			t.Errorf("%s: p = %.3g; want a fit that its own counts bear out", model, g.P)
		}
		near(t, "scale", f.Fit.Params[1], 320e3, 4*f.Fit.U(1))
		near(t, "background", f.Fit.Params[2], 1000, 4*f.Fit.U(2))
		for i := range data {
			data[i].DeadS = 0
		}
		if f, err = FitPeak(data, PredictedPeak, shape); err != nil {
			t.Fatal(err)
		}
		if g := f.Goodness(99, 1); g.P > onePercent {
			t.Errorf("%s, not declared: p = %.3g; want the flattened top to show", model, g.P)
		}
	}
}

func TestThePeakOfAPredictedProfileIsTheMiddleOfItsHalfMaxima(t *testing.T) {
	// A top that leans: its maximum stands at its right end, the middle of the half maxima does not.
	lean := func(x float64) float64 { return softBox(x-2.86, 0.6, 0.05) * (1 + 0.1*(x-2.86)) }
	middle := betweenHalves(lean, 2, 3.8)
	rows := Rows{Run: "run", Doubtful: map[int64]string{}}
	r := rand.New(rand.NewPCG(6, 6))
	for i := range 41 {
		x := 1.96 + 0.045*float64(i)
		one := row(int64(i+1), protocol.Light, testStart, 1, []gateCounts{{d: int(drawPoisson(r, 50+20000*lean(x)))}}, EveryPair)
		rows.Readings = append(rows.Readings, at(one, "idler_arm", x, i, 1))
	}
	p, err := Peak(rows, Bench{AxisError: map[string]Constant{"idler_arm": {U: 0.004}}}, Model{Profile: lean}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Trials: 20})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "peak", *p.Value, middle, 0.003)
	if highest(lean, 2, 3.8)-middle < 0.1 {
		t.Fatal("the maximum is the middle; want a profile where they differ")
	}
	q := RefineQuestion{Of: scan.Refine{Of: "idler", Along: "idler_arm", Below: unit.Degrees(0.05), AtMost: 10},
		Axis: scan.Axis{Name: "idler_arm", Low: 0, High: 10 * unit.Degree}, Expect: func(p scan.Point) float64 { return lean(p.Axes[0].Angle.Degrees()) }}
	for i := range rows.Readings {
		q.Points = append(q.Points, scan.Point{Axes: []scan.AxisTarget{{Axis: "idler_arm", Angle: rows.Readings[i].Angles[0].Target}}})
	}
	want := fmt.Sprintf("idler_arm peak at %s deg", figure(*p.Value, 5))
	if d := Refine(rows, Bench{}, q); !strings.HasPrefix(d.Grounds, want) {
		t.Errorf("the refinement says %q, the result %q", d.Grounds, want)
	}
}
