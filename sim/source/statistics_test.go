package source

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"gonum.org/v1/gonum/stat/distuv"
)

// familyWise is the chance that any of the comparisons of a test fails by bad luck; the seeds are
// fixed, so it never does twice.
const familyWise = 1e-6

// chiSquare compares counts in bins with expected ones, merging bins until each expects ten.
func chiSquare(observed, expected []float64) (chi2 float64, degrees int) {
	o, e := 0.0, 0.0
	bins := 0
	for i := range observed {
		o += observed[i]
		e += expected[i]
		if e >= 10 {
			chi2 += (o - e) * (o - e) / e
			bins++
			o, e = 0, 0
		}
	}
	if e > 0 && bins > 0 {
		chi2 += (o - e) * (o - e) / math.Max(e, 1)
		bins++
	}
	return chi2, bins - 1
}

func assertChiSquare(t *testing.T, what string, chi2 float64, degrees, family int) {
	t.Helper()
	p := distuv.ChiSquared{K: float64(degrees)}.Survival(chi2)
	if degrees < 1 || p < familyWise/float64(family) || 1-p < familyWise/float64(family) {
		t.Errorf("%s: chi-square %.1f for %d degrees of freedom, p %.2g; want a p between %.1g and its complement", what, chi2, degrees, p, familyWise/float64(family))
	}
}

func TestPoissonDrawsArePoisson(t *testing.T) {
	means := []float64{0.02, 0.5, 3, 9.99, 10, 25, 130, 2500, 1e6}
	for i, mean := range means {
		rng := rand.New(rand.NewPCG(11, uint64(i)))
		const n = 200000
		lo := max(0, math.Floor(mean-8*math.Sqrt(mean)-10))
		width := max(1, math.Floor(math.Sqrt(mean)/5))
		bins := int((2*8*math.Sqrt(mean)+30)/width) + 1
		observed, expected := make([]float64, bins), make([]float64, bins)
		for range n {
			b := int((float64(poisson(rng, mean)) - lo) / width)
			observed[min(max(b, 0), bins-1)]++
		}
		d := distuv.Poisson{Lambda: mean}
		for b := range bins {
			for k := lo + float64(b)*width; k < lo+float64(b+1)*width; k++ {
				expected[b] += n * d.Prob(k)
			}
		}
		chi2, degrees := chiSquare(observed, expected)
		assertChiSquare(t, fmt.Sprintf("mean %g", mean), chi2, max(degrees, 1), len(means))
	}
}

func TestBinomialDrawsAreBinomial(t *testing.T) {
	cases := []struct {
		n uint64
		p float64
	}{{1, 0.3}, {20, 0.1}, {20, 0.9}, {100, 0.099}, {100, 0.1}, {1000, 0.5}, {1000, 0.93}, {5000000, 0.002}, {3000000, 0.3}}
	for i, c := range cases {
		rng := rand.New(rand.NewPCG(12, uint64(i)))
		const draws = 200000
		mean, rms := float64(c.n)*c.p, math.Sqrt(float64(c.n)*c.p*(1-c.p))
		lo := max(0, math.Floor(mean-8*rms-10))
		width := max(1, math.Floor(rms/5))
		bins := int((16*rms+30)/width) + 1
		observed, expected := make([]float64, bins), make([]float64, bins)
		for range draws {
			b := int((float64(binomial(rng, c.n, c.p)) - lo) / width)
			observed[min(max(b, 0), bins-1)]++
		}
		d := distuv.Binomial{N: float64(c.n), P: c.p}
		for b := range bins {
			for k := lo + float64(b)*width; k < lo+float64(b+1)*width && k <= float64(c.n); k++ {
				expected[b] += draws * math.Exp(d.LogProb(k))
			}
		}
		chi2, degrees := chiSquare(observed, expected)
		assertChiSquare(t, fmt.Sprintf("%d of %g", c.n, c.p), chi2, max(degrees, 1), len(cases))
	}
}

func TestGammaDrawsAreGamma(t *testing.T) {
	shapes := []float64{0.3, 1, 4.5, 200}
	for i, shape := range shapes {
		rng := rand.New(rand.NewPCG(13, uint64(i)))
		const n, bins = 200000, 50
		observed, expected := make([]float64, bins), make([]float64, bins)
		d := distuv.Gamma{Alpha: shape, Beta: 1}
		for range n {
			observed[min(bins-1, int(d.CDF(gamma(rng, shape))*bins))]++
		}
		for b := range expected {
			expected[b] = n / bins
		}
		chi2, degrees := chiSquare(observed, expected)
		assertChiSquare(t, fmt.Sprintf("shape %g", shape), chi2, degrees, len(shapes))
	}
}

// station is one point of the grid over which counting is tested.
type station struct {
	name            string
	signal, idler   Detector
	counter         Counter
	rates           Rates
	gate            time.Duration
	gates           int
	meanToleranceR  float64 // relative, what the count-level formulae may be wrong by
	ofAccidentalsR  float64
	varianceToleran float64
}

func grid() []station {
	np := func(ns float64) Detector { return Detector{DeadTimeS: ns * 1e-9, Model: NonParalysable} }
	pa := func(ns float64) Detector { return Detector{DeadTimeS: ns * 1e-9, Model: Paralysable} }
	ap := func(d Detector, p, delay float64) Detector { d.Afterpulse, d.AfterpulseS = p, delay; return d }
	var out []station
	pairsOf := []struct {
		name          string
		signal, idler Detector
	}{
		{"no dead time", Detector{}, Detector{}},
		{"45 ns both", np(45), np(45)},
		{"60 and 25 ns", np(60), np(25)},
		{"25 and 60 ns", np(25), np(60)},
		{"45 ns paralysable", pa(45), pa(45)},
		{"50 and 30 ns paralysable", pa(50), pa(30)},
		{"non-paralysable 45, paralysable 45", np(45), pa(45)},
		{"paralysable 30, non-paralysable 50", pa(30), np(50)},
		{"45 ns with afterpulses", ap(np(45), 0.03, 80e-9), ap(np(45), 0.02, 50e-9)},
	}
	for _, d := range pairsOf {
		for _, r := range []Rates{{2e4, 3e4, 4e3}, {3e5, 2e5, 6e4}, {2e6, 3e6, 0}, {3e6, 2e6, 8e5}, {1.5e7, 2e7, 5e6}} {
			for _, c := range []Counter{
				{WindowS: 10e-9, JitterS: 1e-9, Logic: EveryPair},
				{WindowS: 8e-9, JitterS: 0.5e-9, Logic: OnePerHerald},
				{WindowS: 12e-9, Logic: EveryPair, DelayS: 300e-9},
			} {
				if r.SignalHz < 1e5 && c.DelayS > 0 {
					continue // too few accidentals to test
				}
				name := fmt.Sprintf("%s, %.0e %.0e %.0e Hz, %s, delay %g ns", d.name, r.SignalHz, r.IdlerHz, r.PairsHz, c.Logic, c.DelayS*1e9)
				out = append(out, station{name: name, signal: d.signal, idler: d.idler, counter: c, rates: r,
					gate: time.Duration(2e3 / r.SignalHz * 1e9), gates: 150})
			}
		}
	}
	return out
}

func (s station) model() *Model {
	o := Optics{Counter: s.counter}
	o.Signal.Detector, o.Idler.Detector = s.signal, s.idler
	return &Model{o: o}
}

// sample is what many gates of one kind gave.
type sample struct {
	n          float64
	mean, m2   [3]float64
	covariance float64 // signal with coincidences
}

func take(n int, draw func() Counts) sample {
	var s sample
	for range n {
		c := draw()
		s.n++
		x := [3]float64{float64(c.Signal), float64(c.Idler), float64(c.Coincidences)}
		before := x[0] - s.mean[0]
		for i := range x {
			d := x[i] - s.mean[i]
			s.mean[i] += d / s.n
			s.m2[i] += d * (x[i] - s.mean[i])
		}
		s.covariance += before * (x[2] - s.mean[2])
	}
	return s
}

func (s sample) variance(i int) float64 { return s.m2[i] / (s.n - 1) }

var shown = [3]string{"signal", "idler", "coincidences"}

// TestCountsFollowTheEvents compares the count-level mode with the event-level one over a grid of
// rates up to saturation: means, variances, the covariance of singles and coincidences.
func TestCountsFollowTheEvents(t *testing.T) {
	stations := grid()
	family := 7 * len(stations)
	limit := distuv.UnitNormal.Quantile(1 - familyWise/float64(family)/2)
	worst := 0.0
	for k, s := range stations {
		m := s.model()
		rng := rand.New(rand.NewPCG(14, uint64(k)))
		seg := []Segment{{For: s.gate, Rates: s.rates}}
		events := take(s.gates, func() Counts { return m.DrawEvents(rng, seg) })
		counts := take(20*s.gates, func() Counts { return m.Draw(rng, seg) })
		e := m.Expected(s.rates)
		g := s.gate.Seconds()
		expected := [3]float64{e.SignalHz * g, e.IdlerHz * g, (e.TrueHz + e.AccidentalHz) * g}
		for i := range shown {
			u := math.Sqrt(events.variance(i)/events.n + counts.variance(i)/counts.n)
			z := (events.mean[i] - counts.mean[i]) / u
			worst = math.Max(worst, math.Abs(z))
			if math.Abs(z) > limit {
				t.Errorf("%s: %s a gate: events %.3f, counts %.3f, expected %.3f (%.1f standard deviations)", s.name, shown[i], events.mean[i], counts.mean[i], expected[i], z)
			}
			if d := counts.mean[i] - expected[i]; math.Abs(d) > limit*math.Sqrt(counts.variance(i)/counts.n) {
				t.Errorf("%s: %s: counts %.3f a gate, expected %.3f", s.name, shown[i], counts.mean[i], expected[i])
			}
			// The ratio of variances follows an F distribution, nearly normal in its logarithm.
			r := math.Log(events.variance(i)/counts.variance(i)) / math.Sqrt(2/(events.n-1)+2/(counts.n-1))
			worst = math.Max(worst, math.Abs(r))
			if math.Abs(r) > limit {
				t.Errorf("%s: variance of %s: events %.4g, counts %.4g", s.name, shown[i], events.variance(i), counts.variance(i))
			}
		}
		// Of the covariance of singles and coincidences.
		u := math.Sqrt((events.variance(0)*events.variance(2) + math.Pow(events.covariance/(events.n-1), 2)) * (1/events.n + 1/counts.n))
		z := (events.covariance/(events.n-1) - counts.covariance/(counts.n-1)) / u
		worst = math.Max(worst, math.Abs(z))
		if math.Abs(z) > limit {
			t.Errorf("%s: covariance of singles and coincidences: events %.4g, counts %.4g", s.name, events.covariance/(events.n-1), counts.covariance/(counts.n-1))
		}
	}
	t.Logf("%d comparisons, largest %.2f standard deviations, limit %.2f", family, worst, limit)
}
