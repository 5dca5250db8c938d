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
	statistics(t)
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
	statistics(t)
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
	statistics(t)
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
	name          string
	signal, idler Detector
	counter       Counter
	rates         Rates
	gate          time.Duration
	gates         int
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
		for _, r := range []Rates{{SignalHz: 2e4, IdlerHz: 3e4, PairsHz: 4e3}, {SignalHz: 3e5, IdlerHz: 2e5, PairsHz: 6e4}, {SignalHz: 2e6, IdlerHz: 3e6, PairsHz: 0}, {SignalHz: 3e6, IdlerHz: 2e6, PairsHz: 8e5}, {SignalHz: 1.5e7, IdlerHz: 2e7, PairsHz: 5e6}} {
			for _, c := range []Counter{
				{WindowS: 10e-9, JitterS: 1e-9, Logic: EveryPair},
				{WindowS: 8e-9, JitterS: 0.5e-9, Logic: OnePerHerald},
				{WindowS: 12e-9, Logic: EveryPair, DelayS: 300e-9},
			} {
				if (r.SignalHz < 1e5 || r.SignalHz == 2e6) && c.DelayS > 0 {
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
		counts := take(10*s.gates, func() Counts { return m.Draw(rng, seg) })
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

// modes are the two ways to draw a gate; what follows must hold for both.
var modes = []struct {
	name string
	draw func(*Model, *rand.Rand, []Segment) Counts
}{
	{"counts", (*Model).Draw},
	{"events", (*Model).DrawEvents},
}

// TestVarianceIsPoissonAndDeadTimeReducesIt compares the variance of singles with published
// closed forms: the mean without dead time, smaller by (1 + n tau)² with a non-paralysable one
// (Knoll), by 1 - 2 n tau exp(-n tau) with a paralysable one.
func TestVarianceIsPoissonAndDeadTimeReducesIt(t *testing.T) {
	const gates = 3000
	rates := []float64{1e4, 1e6, 1e7, 3e7}
	family := 2 * 3 * len(rates)
	for _, mode := range modes {
		for k, n := range rates {
			for j, d := range []Detector{{}, {DeadTimeS: 50e-9, Model: NonParalysable}, {DeadTimeS: 50e-9, Model: Paralysable}} {
				x := n * d.DeadTimeS
				mean, reduced := n, 1.0
				switch d.Model {
				case NonParalysable:
					mean, reduced = n/(1+x), 1/((1+x)*(1+x))
				case Paralysable:
					mean, reduced = n*math.Exp(-x), 1-2*x*math.Exp(-x)
				}
				s := station{signal: d, counter: Counter{Logic: EveryPair}}
				rng := rand.New(rand.NewPCG(15, uint64(10*k+j)))
				gate := time.Duration(400 / mean * 1e9)
				got := take(gates, func() Counts { return mode.draw(s.model(), rng, []Segment{{For: gate, Rates: Rates{SignalHz: n}}}) })
				mean *= gate.Seconds()
				chi2 := got.variance(0) * (gates - 1) / (mean * reduced)
				assertChiSquare(t, fmt.Sprintf("%s, %g Hz, dead time %g s %s, variance over mean", mode.name, n, d.DeadTimeS, d.Model), chi2, gates-1, family)
			}
		}
	}
}

// TestAccidentalsFollowTheProductOfSinglesForBothLogics holds independent streams to R1 R2 tau
// (every_pair) and R1 (1 - exp(-R2 tau)) (one_per_herald), tau the full window.
func TestAccidentalsFollowTheProductOfSinglesForBothLogics(t *testing.T) {
	type c struct {
		r1, r2, window float64
		logic          string
	}
	var cases []c
	for _, logic := range []string{EveryPair, OnePerHerald} {
		for _, r := range [][2]float64{{1e5, 2e5}, {2e6, 1e6}, {1e7, 2e7}} {
			for _, w := range []float64{10e-9, 100e-9} {
				cases = append(cases, c{r[0], r[1], w, logic})
			}
		}
	}
	for _, mode := range modes {
		for k, c := range cases {
			mean := c.r1 * c.r2 * c.window
			if c.logic == OnePerHerald {
				mean = c.r1 * -math.Expm1(-c.r2*c.window)
			}
			s := station{counter: Counter{WindowS: c.window, Logic: c.logic}}
			rng := rand.New(rand.NewPCG(16, uint64(k)))
			const gates = 60
			gate := time.Duration(2e4 / c.r1 * 1e9)
			got := take(gates, func() Counts {
				return mode.draw(s.model(), rng, []Segment{{For: gate, Rates: Rates{SignalHz: c.r1, IdlerHz: c.r2}}})
			})
			mean *= gate.Seconds()
			// The mean of the gates against its own spread: the number of coincidences is over-dispersed
			// where one event has several partners.
			z := (got.mean[2] - mean) / math.Sqrt(got.variance(2)/gates)
			assertChiSquare(t, fmt.Sprintf("%s, %g and %g Hz, window %g s, %s: %.2f accidentals a gate, want %.2f", mode.name, c.r1, c.r2, c.window, c.logic, got.mean[2], mean), z*z, 1, 2*len(cases))
		}
	}
}

// TestHeraldingIsBinomial: of S trigger events a share eta is coincident, with variance
// eta (1 - eta)/S, not that of two independent counts.
func TestHeraldingIsBinomial(t *testing.T) {
	const gates = 3000
	for _, mode := range modes {
		for k, eta := range []float64{0.05, 0.4, 0.8} {
			s := station{counter: Counter{WindowS: 1e-12, Logic: EveryPair}}
			rng := rand.New(rand.NewPCG(17, uint64(k)))
			chi2 := 0.0
			for range gates {
				c := mode.draw(s.model(), rng, []Segment{{For: 5 * time.Millisecond, Rates: Rates{SignalHz: 1e5, IdlerHz: 1.5e5, PairsHz: eta * 1e5}}})
				n := float64(c.Signal)
				d := float64(c.Coincidences) - eta*n
				chi2 += d * d / (n * eta * (1 - eta))
			}
			assertChiSquare(t, fmt.Sprintf("%s, heralding %g", mode.name, eta), chi2, gates, 2*3)
		}
	}
}

// TestAfterpulsesAddTheirShare: with a detector that is hardly ever dead, the recorded rate grows
// by 1/(1 - p), and the share of afterpulses is p.
func TestAfterpulsesAddTheirShare(t *testing.T) {
	const gates = 400
	for _, mode := range modes {
		for k, p := range []float64{0.005, 0.03, 0.2} {
			d := Detector{Afterpulse: p, AfterpulseS: 40e-9, DeadTimeS: 30e-9, Model: NonParalysable}
			s := station{signal: d, counter: Counter{Logic: EveryPair}}
			rng := rand.New(rand.NewPCG(18, uint64(k)))
			const n, gate = 2000., time.Second
			got := take(gates, func() Counts { return mode.draw(s.model(), rng, []Segment{{For: gate, Rates: Rates{SignalHz: n}}}) })
			want := n / (1 - p)
			z := (got.mean[0] - want) / math.Sqrt(got.variance(0)/gates)
			// n tau is 6e-5 and n·delay 8e-5: both are below what these gates resolve.
			assertChiSquare(t, fmt.Sprintf("%s, afterpulse chance %g: %.1f counts, want %.1f", mode.name, p, got.mean[0], want), z*z, 1, 2*3)
			if share := d.AfterpulseShare(n); math.Abs(share-p) > 1e-3*p {
				t.Errorf("afterpulse share %g at a low rate; want %g", share, p)
			}
		}
	}
}

// TestCoupledDeadTimesAgreeByTwoRoutes: the grid solver with equal dead times against the closed
// form, and the second order against the grid solver where both are used.
func TestCoupledDeadTimesAgreeByTwoRoutes(t *testing.T) {
	for _, n := range [][3]float64{{1e5, 2e5, 5e4}, {1e6, 1.2e6, 4e5}, {1e7, 2e7, 5e6}, {3e7, 3e7, 2e7}} {
		d := Detector{DeadTimeS: 45e-9, Model: NonParalysable}
		s, i := d.respond(n[0]), d.respond(n[1])
		closed, grid := equalDead(s, i, n[0]-n[2], n[1]-n[2], 45e-9), unequalDead(s, i, n[2], 45e-9, 45e-9)
		if math.Abs(grid/closed-1) > 1e-4 {
			t.Errorf("%v Hz: both alive %.8f in closed form, %.8f on the grid", n, closed, grid)
		}
	}
	for _, n := range [][3]float64{{1e5, 2e5, 5e4}, {5e5, 1e6, 3e5}, {1e6, 1e6, 2e5}} {
		long, short := Detector{DeadTimeS: 58e-9, Model: NonParalysable}, Detector{DeadTimeS: 20e-9, Model: NonParalysable}
		s, i := long.respond(n[0]), short.respond(n[1])
		second, grid := secondOrder(s, i, n[2], 58e-9, 20e-9), unequalDead(s, i, n[2], 58e-9, 20e-9)
		if math.Abs(grid/second-1) > 1e-4 {
			t.Errorf("%v Hz: both alive %.8f to second order, %.8f on the grid", n, second, grid)
		}
	}
}

// TestADeadPartnerLeavesFewerAccidentals: beside a pair that both detectors recorded there is no
// accidental partner while the dead times exceed the window, so that a counter shows fewer of them
// than the product of its singles; a displaced window shows the product.
func TestADeadPartnerLeavesFewerAccidentals(t *testing.T) {
	d := Detector{DeadTimeS: 45e-9, Model: NonParalysable}
	r := Rates{SignalHz: 1e6, IdlerHz: 1e6, PairsHz: 4e5}
	count := func(k Counter) (sum Counts, m *Model) {
		k.Logic = EveryPair
		m = (station{signal: d, idler: d, counter: k}).model()
		rng := rand.New(rand.NewPCG(21, 1))
		for range 20 {
			sum.add(m.DrawEvents(rng, []Segment{{For: 100 * time.Millisecond, Rates: r}}))
		}
		return sum, m
	}
	// The same events with a window that no accidental fits in: the seed is the same.
	wide, m := count(Counter{WindowS: 10e-9})
	narrow, _ := count(Counter{WindowS: 1e-13})
	displaced, _ := count(Counter{WindowS: 10e-9, DelayS: 500e-9})
	product := float64(wide.Signal) * float64(wide.Idler) * 10e-9 / 2
	accidental := float64(wide.Coincidences - narrow.Coincidences)
	if want := m.Expected(r).AccidentalHz * 2; math.Abs(accidental-want) > 5.5*math.Sqrt(want) || accidental > 0.7*product {
		t.Errorf("%.0f accidentals beside pairs; want %.0f, well below the product %.0f", accidental, want, product)
	}
	if got := float64(displaced.Coincidences); math.Abs(got-product) > 5.5*math.Sqrt(product) {
		t.Errorf("%.0f in a displaced window; want the product %.0f", got, product)
	}
}

func TestALatchedDetectorCountsNothing(t *testing.T) {
	s := station{signal: Detector{LatchHz: 1e6}, counter: Counter{WindowS: 1e-8, Logic: EveryPair}}
	for _, mode := range modes {
		rng := rand.New(rand.NewPCG(19, 0))
		dark := Rates{SignalHz: 1e4, IdlerHz: 1e4, PairsHz: 1e3}
		light := Rates{SignalHz: 2e6, IdlerHz: 1e4, PairsHz: 1e3}
		a := mode.draw(s.model(), rng, []Segment{{For: time.Second, Rates: dark}})
		b := mode.draw(s.model(), rng, []Segment{{For: time.Second, Rates: light}})
		half := mode.draw(s.model(), rng, []Segment{{For: 500 * time.Millisecond, Rates: light}, {For: 500 * time.Millisecond, Rates: dark}})
		if a.Signal == 0 || b.Signal != 0 || b.Coincidences != 0 || b.Idler == 0 {
			t.Errorf("%s: %+v in the dark, %+v in daylight; want no signal counts in daylight", mode.name, a, b)
		}
		if r := float64(half.Signal) / float64(a.Signal); r < 0.4 || r > 0.6 {
			t.Errorf("%s: %d of %d counts when daylight ends half-way; want half", mode.name, half.Signal, a.Signal)
		}
	}
}

func TestTheWindowCapturesWhatJitterLeaves(t *testing.T) {
	for _, c := range []struct {
		k    Counter
		want float64
	}{
		{Counter{WindowS: 2e-9, JitterS: 1e-9}, 0.682689},
		{Counter{WindowS: 4e-9, JitterS: 1e-9}, 0.954500},
		{Counter{WindowS: 4e-9, JitterS: 1e-9, DelayS: 2e-9}, 0.499968},
		{Counter{WindowS: 4e-9, DelayS: 1.9e-9}, 1},
		{Counter{WindowS: 4e-9, DelayS: 2.1e-9}, 0},
	} {
		if got := c.k.WindowCapture(); math.Abs(got-c.want) > 1e-5 {
			t.Errorf("%+v captures %.6f; want %.6f", c.k, got, c.want)
		}
		s := station{counter: c.k}
		s.counter.Logic = EveryPair
		rng := rand.New(rand.NewPCG(20, 0))
		got := s.model().DrawEvents(rng, []Segment{{For: time.Second, Rates: Rates{SignalHz: 1e5, IdlerHz: 1e5, PairsHz: 1e5}}})
		n := float64(got.Signal)
		accidental := n * n * c.k.WindowS
		u := math.Sqrt(n*c.want*(1-c.want)+accidental) + 1
		if d := float64(got.Coincidences) - n*c.want - accidental; math.Abs(d) > 5.5*u {
			t.Errorf("%+v: %d of %.0f pairs; want %.0f", c.k, got.Coincidences, n, n*c.want)
		}
	}
}
