package estimate

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/interp"
	"gonum.org/v1/gonum/stat/distuv"
)

// PeakShape is what a profile is taken to look like. All widths are full widths at half maximum.
type PeakShape string

// The shapes. In the formulas v is the distance from the centre.
const (
	GaussianPeak  PeakShape = "gaussian"  // exp(-4 ln2 v^2/fwhm^2)
	SincPeak      PeakShape = "sinc2"     // (sin a/a)^2 with a = 2 × 1.3915574 v/fwhm
	FlatTop       PeakShape = "flat_top"  // a box of the width given, its edges softened by a Gaussian of deviation edge
	TwoPeaks      PeakShape = "two_peaks" // two Gaussians, each with its own width
	PredictedPeak PeakShape = "predicted" // Model.Profile with offset, scale and background

	// window is a flat top on a floor of two levels: what a coincidence window sees against a delay.
	window PeakShape = "window"
)

// halfSinc is where sinc^2 is one half.
const halfSinc = 1.3915573782515102

// Spot is one reading of a profile. Its expected counts are Exposure × (shape + background) +
// Known: gate time and pump power belong in the exposure, inside the likelihood, since counts
// divided by a power are no counts any more. Known counts (accidentals, dark) are in no unit but
// counts. Where the detector's dead time is declared, what it loses of them is taken off: a top is
// lower by it than its flanks.
type Spot struct {
	AngleDeg float64
	Counts   float64
	Exposure float64
	Known    float64

	GateS float64       // of the reading, for the rate that the dead time sees
	DeadS float64       // 0: none is declared
	Dead  DeadTimeModel // of the detector
}

// recorded is what the detector makes of counts that it would record without a dead time.
func (s Spot) recorded(counts float64) float64 {
	if !(s.DeadS > 0 && s.GateS > 0) {
		return counts
	}
	return s.GateS * s.Dead.Observed(counts/s.GateS, s.DeadS)
}

// the first parameter of every shape
const centreParam = 0

// parameters of the shapes but the predicted one
const (
	widthParam = iota + 1
	heightParam
	groundParam
	edgeParam
	ground2Param
	centre2Param = iota - 1
	width2Param
	height2Param
)

var peakNames = map[PeakShape][]string{
	GaussianPeak:  {"centre", "fwhm", "height", "background"},
	SincPeak:      {"centre", "fwhm", "height", "background"},
	FlatTop:       {"centre", "box width", "height", "background", "edge"},
	TwoPeaks:      {"centre", "fwhm", "height", "background", "second centre", "second fwhm", "second height"},
	PredictedPeak: {"offset", "scale", "background"},
	window:        {"centre", "full width", "height", "floor below", "jitter", "floor above"},
}

// PeakFit is a fitted profile.
type PeakFit struct {
	Shape   PeakShape
	Names   []string // of Fit.Params
	Fit     Fit      // Value is the Cash statistic
	data    []Spot
	profile func(float64) float64
	topDeg  float64 // where the predicted profile is highest
	pr      problem

	heldEdge float64 // of a flat top; 0: fitted
}

// FitPeak fits a profile to counts by their Poisson likelihood (Cash, Astrophys. J. 228, 939
// (1979), in the form with the terms of n, so that it can be compared between data sets). predicted
// is needed by PredictedPeak alone.
func FitPeak(data []Spot, shape PeakShape, predicted func(angleDeg float64) float64) (PeakFit, error) {
	return fitPeak(data, shape, predicted, 0)
}

// fitPeak is FitPeak, with a flat top's edges held where heldEdge is above 0, and more places to start
// from than those seen in the data.
func fitPeak(data []Spot, shape PeakShape, predicted func(angleDeg float64) float64, heldEdge float64, more ...[]float64) (PeakFit, error) {
	names, ok := peakNames[shape]
	if !ok {
		return PeakFit{}, fmt.Errorf("shape %q; want gaussian, sinc2, flat_top, two_peaks or predicted", shape)
	}
	if shape == PredictedPeak && predicted == nil {
		return PeakFit{}, fmt.Errorf("shape predicted without a model; want one that predicts the profile")
	}
	f := PeakFit{Shape: shape, Names: names, profile: predicted, heldEdge: heldEdge}
	total := 0.0
	for _, s := range data {
		if s.Exposure > 0 {
			f.data = append(f.data, s)
			total += s.Counts
		}
	}
	slices.SortStableFunc(f.data, func(a, b Spot) int {
		switch {
		case a.AngleDeg < b.AngleDeg:
			return -1
		case a.AngleDeg > b.AngleDeg:
			return 1
		}
		return 0
	})
	if len(f.data) < len(names) || total == 0 {
		return PeakFit{}, fmt.Errorf("%d readings with %.0f counts in all for %d parameters; want at least as many readings, and counts", len(f.data), total, len(names))
	}
	low, high := f.data[0].AngleDeg, f.data[len(f.data)-1].AngleDeg
	if high <= low {
		return PeakFit{}, fmt.Errorf("all readings at %g deg; want a profile", low)
	}
	if shape == PredictedPeak {
		var err error
		if f.profile, err = tabulate(predicted, low-(high-low)/2, high+(high-low)/2, (high-low)/float64(len(f.data))); err != nil {
			return PeakFit{}, err
		}
		f.topDeg = highest(f.profile, low, high)
	}
	bestValue := math.Inf(1)
	var failed error
	for _, start := range append(f.starts(low, high), more...) {
		pr := f.problem(start, low, high)
		fit, err := pr.minimise()
		if err != nil {
			failed = err
			continue
		}
		if fit.Value < bestValue {
			bestValue, f.Fit, f.pr = fit.Value, fit, pr
		}
	}
	if math.IsInf(bestValue, 1) {
		return PeakFit{}, fmt.Errorf("%s: %w", shape, failed)
	}
	return f, nil
}

// tablePerStep is how many values of the model lie between two readings of a predicted profile.
const tablePerStep = 8

// tabulate asks the model once for each place and puts a cubic spline through the answers: a fit, its
// intervals and its goodness ask some million times, and the model takes its time.
func tabulate(f func(float64) float64, low, high, step float64) (func(float64) float64, error) {
	n := min(max(int((high-low)/step)*tablePerStep, 64), 4096)
	x, y := make([]float64, n), make([]float64, n)
	sum := 0.0
	for i := range x {
		x[i] = low + (high-low)*float64(i)/float64(n-1)
		y[i] = f(x[i])
		if !(y[i] >= 0) || math.IsInf(y[i], 0) {
			return nil, fmt.Errorf("predicted profile: %g at %g deg; want a rate", y[i], x[i])
		}
		sum += y[i]
	}
	if sum == 0 {
		return nil, fmt.Errorf("predicted profile: nothing from %g to %g deg; want a profile where the readings are", low, high)
	}
	var c interp.NaturalCubic
	if err := c.Fit(x, y); err != nil {
		return nil, fmt.Errorf("predicted profile: %w", err)
	}
	return func(v float64) float64 { return math.Max(0, c.Predict(math.Min(math.Max(v, low), high))) }, nil
}

// Cash is 2 sum [m - n + n ln(n/m)]; +Inf where an expectation is not positive.
func Cash(n, m []float64) float64 {
	c := 0.0
	for i := range n {
		if !(m[i] > 0) {
			return math.Inf(1)
		}
		t := m[i] - n[i]
		if n[i] > 0 {
			t += n[i] * math.Log(n[i]/m[i])
		}
		c += 2 * t
	}
	return c
}

// rate is the shape without background, in counts per exposure.
func (f *PeakFit) rate(x float64, p []float64) float64 {
	if f.Shape == PredictedPeak {
		return p[1] * f.profile(x-p[centreParam])
	}
	v := x - p[centreParam]
	switch f.Shape {
	case SincPeak:
		a := 2 * halfSinc * v / p[widthParam]
		if math.Abs(a) < 1e-4 {
			return p[heightParam] * (1 - a*a/3)
		}
		s := math.Sin(a) / a
		return p[heightParam] * s * s
	case FlatTop:
		return p[heightParam] * softBox(v, p[widthParam], p[edgeParam])
	case window:
		// As far as the window has gone over the pairs, the one floor has become the other.
		over := math.Min(math.Max((v+p[widthParam]/2)/p[widthParam], 0), 1)
		return p[heightParam]*softBox(v, p[widthParam], p[edgeParam]) + over*(p[ground2Param]-p[groundParam])
	case TwoPeaks:
		return p[heightParam]*gauss(v, p[widthParam]) + p[height2Param]*gauss(x-p[centre2Param], p[width2Param])
	}
	return p[heightParam] * gauss(v, p[widthParam])
}

// RateHz is the fitted profile with its background, in counts per exposure, before any dead time.
func (f PeakFit) RateHz(x float64) float64 { return f.rate(x, f.Fit.Params) + f.ground(f.Fit.Params) }

func (f *PeakFit) ground(p []float64) float64 {
	if f.Shape == PredictedPeak {
		return p[2]
	}
	return p[groundParam]
}

func gauss(v, fwhm float64) float64 { return math.Exp(-4 * math.Ln2 * v * v / (fwhm * fwhm)) }

// softBox is 1 in its middle.
func softBox(v, width, edge float64) float64 {
	s := math.Sqrt2 * edge
	return (math.Erf((width/2-v)/s) + math.Erf((width/2+v)/s)) / (2 * math.Erf(width/2/s))
}

func (f *PeakFit) expected(p, m []float64) {
	g := f.ground(p)
	for i, s := range f.data {
		m[i] = s.recorded(s.Exposure*(f.rate(s.AngleDeg, p)+g) + s.Known)
	}
}

func (f *PeakFit) problem(start []float64, low, high float64) problem {
	n := make([]float64, len(f.data))
	exposure := 0.0
	for i, s := range f.data {
		n[i] = s.Counts
		exposure += s.Exposure
	}
	span := high - low
	finest := span / float64(len(f.data)) / 20
	tiny := 1e-6 / exposure // a background of nothing would forbid a stray count
	k := len(start)
	lo, hi := make([]float64, k), make([]float64, k)
	for i := range k {
		lo[i], hi[i] = tiny, math.Inf(1)
	}
	lo[centreParam], hi[centreParam] = low-span/2, high+span/2
	if f.Shape == PredictedPeak {
		lo[centreParam], hi[centreParam] = -span/2, span/2 // as far as the table reaches
	} else {
		lo[widthParam], hi[widthParam] = finest, 4*span
		lo[heightParam] = 0
	}
	switch f.Shape {
	case FlatTop, window:
		lo[edgeParam], hi[edgeParam] = finest, span/2
		if f.heldEdge > 0 {
			lo[edgeParam], hi[edgeParam] = f.heldEdge, f.heldEdge
		}
	case TwoPeaks:
		lo[centre2Param], hi[centre2Param] = low-span/2, high+span/2
		lo[width2Param], hi[width2Param] = finest, 4*span
	}
	return problem{
		n: len(n), start: start, low: lo, high: hi, model: f.expected,
		enough: 1e-9, // of a statistic whose unit is one standard deviation: scoring creeps where a background nears nothing
		value:  func(m []float64) float64 { return Cash(n, m) },
		slopes: func(i int, m float64) (g, h float64) { return 2 * (1 - n[i]/m), 2 / m },
	}
}

// starts are starting values seen from the data: highest stretch, its width, and the quiet rest.
func (f *PeakFit) starts(low, high float64) [][]float64 {
	rates := make([]float64, len(f.data))
	for i, s := range f.data {
		rates[i] = math.Max(0, s.Counts-s.Known) / s.Exposure
	}
	smooth := make([]float64, len(rates))
	for i := range rates {
		a, b := max(0, i-1), min(len(rates), i+2)
		for _, v := range rates[a:b] {
			smooth[i] += v / float64(b-a)
		}
	}
	sorted := slices.Sorted(slices.Values(smooth))
	ground := math.Max(sorted[len(sorted)/10], 1e-3*sorted[len(sorted)-1])
	top := 0
	for i := range smooth {
		if smooth[i] > smooth[top] {
			top = i
		}
	}
	height := math.Max(smooth[top]-ground, 1e-3*smooth[top]+1e-12)
	weight, centre, first, last := 0.0, 0.0, math.Inf(1), math.Inf(-1)
	for i, s := range f.data {
		if v := smooth[i] - ground; v >= height/2 {
			weight, centre = weight+v, centre+v*s.AngleDeg
			first, last = math.Min(first, s.AngleDeg), math.Max(last, s.AngleDeg)
		}
	}
	step := (high - low) / float64(len(f.data))
	centre = centre / math.Max(weight, 1e-300)
	if weight == 0 {
		centre = f.data[top].AngleDeg
		first, last = centre, centre
	}
	width := last - first + step
	summit := f.data[top].AngleDeg
	var list [][]float64
	switch f.Shape {
	case PredictedPeak:
		scale := height / math.Max(f.profile(f.topDeg), 1e-300)
		for _, off := range []float64{0, centre - f.topDeg, summit - f.topDeg} {
			list = append(list, []float64{off, scale, ground})
		}
	case FlatTop:
		for _, e := range []float64{0.05, 0.15, 0.4} {
			list = append(list, []float64{centre, width, height, ground, e * width})
		}
	case window:
		// A window's middle is the median of what is above the floor, and its width twice the middle half, even where counts are few.
		total, sum := 0.0, 0.0
		for i := range f.data {
			total += math.Max(0, rates[i]-ground)
		}
		quarter := [3]float64{}
		for i, s := range f.data {
			before := sum
			sum += math.Max(0, rates[i]-ground)
			for k, share := range []float64{0.25, 0.5, 0.75} {
				if before < share*total && sum >= share*total {
					quarter[k] = s.AngleDeg
				}
			}
		}
		wide := math.Max(2*(quarter[2]-quarter[0]), step)
		for _, e := range []float64{0.05, 0.15, 0.4} {
			list = append(list, []float64{centre, width, height, ground, e * width, ground}, []float64{quarter[1], wide, height, ground, e * wide, ground})
		}
	case TwoPeaks:
		for _, apart := range []float64{0.5, 1, 0.25} {
			list = append(list, []float64{centre - apart*width/2, width / 2, height, ground, centre + apart*width/2, width / 2, height})
		}
		// the highest place well away from the summit
		second := -1
		for i, s := range f.data {
			if math.Abs(s.AngleDeg-summit) > width && (second < 0 || smooth[i] > smooth[second]) {
				second = i
			}
		}
		if second >= 0 {
			w := math.Max(width/2, step)
			list = append(list, []float64{summit, w, height, ground, f.data[second].AngleDeg, w, math.Max(smooth[second]-ground, height/20)})
		}
	default:
		for _, w := range []float64{1, 0.5, 2} {
			list = append(list, []float64{centre, w * width, height, ground}, []float64{summit, w * width, height, ground})
		}
	}
	return list
}

func highest(f func(float64) float64, low, high float64) float64 {
	best := low
	const n = 400
	for i := range n + 1 {
		if x := low + (high-low)*float64(i)/n; f(x) > f(best) {
			best = x
		}
	}
	a, b := best-(high-low)/n, best+(high-low)/n
	for range 80 {
		l, r := a+(b-a)/3, b-(b-a)/3
		if f(l) < f(r) {
			a = l
		} else {
			b = r
		}
	}
	return (a + b) / 2
}

// CentreDeg is where the fitted profile stands; of a predicted one, where its maximum stands.
func (f PeakFit) CentreDeg() float64 { return f.topDeg + f.Fit.Params[centreParam] }

// inSweep refuses a centre that the readings do not hold from both sides.
func (f PeakFit) inSweep() error {
	low, high := f.data[0].AngleDeg, f.data[len(f.data)-1].AngleDeg
	if c := f.CentreDeg(); f.Fit.Bounded[centreParam] || c < low || c > high {
		return fmt.Errorf("the centre came out at %.4g deg, outside the sweep from %.4g to %.4g deg; want a sweep with both flanks", c, low, high)
	}
	return nil
}

// FWHMDeg is the full width at half maximum and its standard uncertainty; of a predicted profile the
// width is the model's and has none.
func (f PeakFit) FWHMDeg() (fwhm, u float64) {
	switch f.Shape {
	case FlatTop:
		at := func(p []float64) float64 {
			return 2 * half(func(v float64) float64 { return softBox(v, p[widthParam], p[edgeParam]) }, 0, p[widthParam]+6*p[edgeParam])
		}
		p := f.Fit.Params
		return at(p), f.carry(at)
	case PredictedPeak:
		top := f.profile(f.topDeg)
		shape := func(v float64) float64 { return f.profile(f.topDeg+v) / top }
		back := func(v float64) float64 { return shape(-v) }
		span := f.data[len(f.data)-1].AngleDeg - f.data[0].AngleDeg
		return half(shape, 0, span) + half(back, 0, span), 0
	}
	return f.Fit.Params[widthParam], f.Fit.U(widthParam)
}

// half finds where a falling shape is one half.
func half(shape func(float64) float64, a, b float64) float64 {
	const n = 200 // the first crossing, where side lobes follow
	for i := 1; i <= n; i++ {
		if x := b * float64(i) / n; shape(x) < 0.5 {
			a, b = b*float64(i-1)/n, x
			break
		}
	}
	for range 60 {
		if m := (a + b) / 2; shape(m) > 0.5 {
			a = m
		} else {
			b = m
		}
	}
	return (a + b) / 2
}

// carry propagates the fit's covariance to a function of the parameters.
func (f PeakFit) carry(y func(p []float64) float64) float64 {
	p := f.Fit.Params
	g := make([]float64, len(p))
	for i := range p {
		g[i] = slope(y, p, i, f.Fit.U(i))
	}
	v := 0.0
	for i := range p {
		for k := range p {
			v += g[i] * g[k] * f.Fit.Cov[i][k]
		}
	}
	return math.Sqrt(math.Max(0, v))
}

// Expected is the fitted expectation of each reading, in the order of the angles, with the
// readings.
func (f PeakFit) Expected() ([]Spot, []float64) {
	m := make([]float64, len(f.data))
	f.expected(f.Fit.Params, m)
	return f.data, m
}

// Interval is the profile-likelihood interval of parameter i: the other parameters are fitted anew,
// and the statistic rises by the square of the normal quantile.
func (f PeakFit) Interval(i int, coverage float64) (Interval, error) {
	z := distuv.UnitNormal.Quantile((1 + coverage) / 2)
	at := f.Fit.Params[i]
	u := f.Fit.U(i)
	if u == 0 {
		u = math.Max(math.Abs(at)*0.1, 1e-6)
	}
	rise := func(v float64, start []float64) (float64, []float64) {
		pr := f.pr
		pr.start = slices.Clone(start)
		pr.start[i] = v
		pr.fixed = i + 1
		fit, err := pr.minimise()
		if err != nil {
			return math.NaN(), start
		}
		return fit.Value - f.Fit.Value - z*z, fit.Params
	}
	end := func(sign float64) (float64, error) {
		in, start := at, f.Fit.Params
		var out, v float64
		for try := 1; ; try++ {
			out = math.Min(math.Max(at+sign*z*u*float64(try), f.pr.low[i]), f.pr.high[i])
			v, start = rise(out, start)
			if math.IsNaN(v) {
				return 0, fmt.Errorf("profile likelihood of %s at %g: %w", f.Names[i], out, errNoFit)
			}
			if v >= 0 {
				break
			}
			in = out
			if out <= f.pr.low[i] || out >= f.pr.high[i] || try > 50 {
				return out, nil // the data do not bound it on this side
			}
		}
		for range 50 {
			m := (in + out) / 2
			v, next := rise(m, start)
			if math.IsNaN(v) {
				return 0, fmt.Errorf("profile likelihood of %s at %g: %w", f.Names[i], m, errNoFit)
			}
			start = next
			if v < 0 {
				in = m
			} else {
				out = m
			}
			if math.Abs(out-in) < 1e-4*u {
				break
			}
		}
		return (in + out) / 2, nil
	}
	low, err := end(-1)
	if err != nil {
		return Interval{}, err
	}
	high, err := end(1)
	return Interval{low, high}, err
}

// Goodness says how the Cash statistic compares with what the fitted profile itself would give: at
// low counts it is not chi-square distributed, so readings are drawn and fitted anew.
type Goodness struct {
	Statistic float64
	Mean      float64 // of the simulated ones
	P         float64 // share of simulated ones at least as large
	Trials    int
	Failed    int // simulated data that could not be fitted; they count as larger
}

// Goodness draws trials data sets from the fit. The same seed gives the same digits.
func (f PeakFit) Goodness(trials int, seed uint64) Goodness {
	g := Goodness{Statistic: f.Fit.Value, Trials: trials}
	_, m := f.Expected()
	r := rand.New(rand.NewPCG(seed, 0xda3e39cb94b95bdb))
	low, high := f.data[0].AngleDeg, f.data[len(f.data)-1].AngleDeg
	larger, sum := 0, 0.0
	for range trials {
		one := f
		one.data = slices.Clone(f.data)
		for i := range one.data {
			one.data[i].Counts = drawPoisson(r, m[i])
		}
		pr := one.problem(f.Fit.Params, low, high)
		fit, err := pr.minimise()
		if err != nil {
			g.Failed++
			larger++
			continue
		}
		sum += fit.Value
		if fit.Value >= f.Fit.Value {
			larger++
		}
	}
	g.Mean = sum / math.Max(float64(trials-g.Failed), 1)
	g.P = float64(larger+1) / float64(trials+1)
	return g
}
