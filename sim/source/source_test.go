package source

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

// statistics leaves a test out under the race detector that computes for long in its own goroutine:
// there is nothing to race with, and what comes out is the same.
func statistics(t *testing.T) {
	t.Helper()
	if raced {
		t.Skip("long computations in one goroutine are held without the race detector")
	}
}

// bench returns optics like those of a small calibration bench; the numbers are invented.
func bench(t testing.TB) Optics {
	t.Helper()
	set, err := crystal.Named("bbo-kato-1986")
	if err != nil {
		t.Fatal(err)
	}
	arm := Arm{Aperture: Iris, RadiusMm: 1.5, DistanceMm: 500, Transmittance: 0.8,
		Filter:             Filter{CentreNm: 810, WidthNm: 10, Shape: FilterGaussian},
		Detector:           Detector{Efficiency: 0.5, DarkHz: 300, DeadTimeS: 45e-9, Model: NonParalysable},
		FluorescenceHzPerW: 20000, StrayHzPerW: 10000}
	return Optics{Crystal: set, Process: phasematch.EOO, CutDeg: 29.2, ThicknessMm: 2, CrystalCel: 20,
		PumpNm: 405, PumpWaistUm: 100, PumpW: 0.05, PairHzPerMw: 1000, Signal: arm, Idler: arm,
		Counter: Counter{WindowS: 10e-9, JitterS: 0.5e-9, Logic: EveryPair}}
}

// atPeak stands both arms on the ring of bench.
func atPeak() Pose {
	return Pose{SignalDeg: 2.864, IdlerDeg: 2.864, PumpW: 0.05, PumpNm: 405, CrystalCel: 20, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}
}

func model(t testing.TB, o Optics) *Model {
	t.Helper()
	m, err := New(o)
	if err != nil {
		t.Fatal(err)
	}
	return m
}

// lossless makes light without partners and imperfect detection vanish from optics.
func lossless(o Optics) Optics {
	for _, a := range []*Arm{&o.Signal, &o.Idler} {
		a.Transmittance, a.Detector = 1, Detector{Efficiency: 1}
		a.FluorescenceHzPerW, a.StrayHzPerW = 0, 0
	}
	return o
}

func TestRatesPeakOnTheRingAndVanishOffIt(t *testing.T) {
	m := model(t, bench(t))
	on := m.Rates(atPeak())
	p := atPeak()
	p.IdlerDeg += 1
	off := m.Rates(p)
	if !(on.PairsHz > 0 && off.PairsHz < on.PairsHz/100) {
		t.Errorf("pairs on the ring %.4g Hz, a degree beside it %.4g Hz; want at least a hundred times fewer", on.PairsHz, off.PairsHz)
	}
}

func TestADeclaredPairRateIsMetAtTheReference(t *testing.T) {
	o := bench(t)
	m := model(t, o)
	s, i := m.Reference()
	p := atPeak()
	p.SignalDeg, p.IdlerDeg = s, i
	got := m.Exact(p).PairsHz
	want := o.PairHzPerMw * 50 * 0.8 * 0.5 * 0.8 * 0.5
	if math.Abs(got/want-1) > 1e-6 {
		t.Errorf("%.6g pairs a second; want %.6g, what was declared times both arms' transmittances and efficiencies", got, want)
	}
	if math.Abs(s-2.8641765) > 1e-5 {
		t.Errorf("reference at %.7g deg; want the emission angle 2.8641765", s)
	}
}

func TestPairsNeverExceedSingles(t *testing.T) {
	statistics(t)
	rng := rand.New(rand.NewPCG(21, 0))
	for _, c := range cases(t) {
		m := model(t, lossless(c.o))
		for i := range 12 {
			p := c.p
			p.SignalDeg += 0.4 * rng.NormFloat64()
			p.IdlerDeg += 0.4 * rng.NormFloat64()
			r := m.Exact(p)
			if r.PairsHz > min(r.SignalHz, r.IdlerHz)*(1+1e-6) {
				t.Errorf("%s at %.4g and %.4g deg: %.8g pairs, singles %.8g and %.8g", c.name, p.SignalDeg, p.IdlerDeg, r.PairsHz, r.SignalHz, r.IdlerHz)
			}
			if i > 1 {
				continue
			}
			if q := m.Rates(p); q.PairsHz > min(q.SignalHz, q.IdlerHz) {
				t.Errorf("%s, from the table: %+v", c.name, q)
			}
		}
	}
}

// TestAWideIdlerGivesThePlateau: behind a wide aperture and no filter every partner is collected,
// and heralding is the idler arm's transmittance times its detector's efficiency, flat in its angle.
func TestAWideIdlerGivesThePlateau(t *testing.T) {
	statistics(t)
	o := lossless(bench(t))
	o.Idler.RadiusMm, o.Idler.Filter = 12, Filter{}
	o.Idler.Transmittance, o.Idler.Detector.Efficiency = 0.85, 0.62
	m := model(t, o)
	for _, off := range []float64{-0.5, -0.2, 0, 0.2, 0.5} {
		p := atPeak()
		p.IdlerDeg += off
		for name, r := range map[string]Rates{"integrated": m.Exact(p), "tabulated": m.Rates(p)} {
			if h := r.PairsHz / r.SignalHz; math.Abs(h-0.85*0.62) > 0.001 {
				t.Errorf("idler arm off by %g deg, %s: heralding %.5f; want the plateau %.5f", off, name, h, 0.85*0.62)
			}
		}
	}
}

func TestPartnersWantOppositeHeights(t *testing.T) {
	pairs := func(signal, idler float64) float64 {
		o := bench(t)
		o.PairHzPerMw, o.NonlinearPmPerV = 0, 1.75 // a scale that does not depend on the arms
		o.Signal.OutOfPlaneDeg, o.Idler.OutOfPlaneDeg = signal, idler
		return model(t, o).Exact(atPeak()).PairsHz
	}
	level, against, along := pairs(0, 0), pairs(0.2, -0.2), pairs(0.2, 0.2)
	if !(against > 0.95*level && along < 0.2*level) {
		t.Errorf("pairs: arms level %.4g, one up one down %.4g, both up %.4g; want partners on opposite sides", level, against, along)
	}
}

func TestWithoutPolarisersTypeIICountsBothWays(t *testing.T) {
	base := func() (Optics, Pose) {
		o, p := bench(t), atPeak()
		o.Process, o.CutDeg, o.AzimuthDeg = phasematch.EOE, 42.5, 90
		o.PairHzPerMw, o.NonlinearPmPerV = 0, 2
		p.SignalDeg, p.IdlerDeg = 2.95, 2.9
		return o, p
	}
	o, p := base()
	both := model(t, o).computed(p)
	o.Signal.Polarised, o.Idler.Polarised = true, true
	one := model(t, o).computed(p)
	o.Process = phasematch.EEO
	other := model(t, o).computed(p)
	for i := range both {
		if math.Abs(both[i]/(one[i]+other[i])-1) > 1e-9 || one[i] == 0 || other[i] == 0 {
			t.Errorf("integral %d: %.8g without polarisers, %.8g and %.8g with; want the sum", i, both[i], one[i], other[i])
		}
	}
}

func TestNoPoseGivesNonsense(t *testing.T) {
	m := model(t, bench(t))
	for _, p := range []Pose{
		{SignalDeg: 95, IdlerDeg: -120, PumpW: 1, PumpOpen: 1, CrystalCel: 20, SignalOpen: 1, IdlerOpen: 1},
		{SignalDeg: 2.8, IdlerDeg: 2.8, TiltDeg: 90, PumpW: 1, PumpOpen: 1, CrystalCel: 20, SignalOpen: 1, IdlerOpen: 1},
		{PumpW: 1, PumpNm: 150, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1},
		{},
	} {
		r := m.Rates(p)
		for _, v := range []float64{r.SignalHz, r.IdlerHz, r.PairsHz} {
			if !(v >= 0) || math.IsInf(v, 0) {
				t.Errorf("%+v: %+v; want rates", p, r)
			}
		}
	}
}

func TestTheWaveplateSpoilsPairsAndLeavesTheBackground(t *testing.T) {
	m := model(t, bench(t))
	p := atPeak()
	full := m.Rates(p)
	p.WaveplateDeg = 22.5
	half := m.Rates(p)
	p.WaveplateDeg = 45
	none := m.Rates(p)
	if math.Abs(half.PairsHz/full.PairsHz-0.5) > 1e-9 || none.PairsHz != 0 {
		t.Errorf("pairs %.6g at 22.5 deg and %.6g at 45 deg of %.6g; want half and none", half.PairsHz, none.PairsHz, full.PairsHz)
	}
	if want := 300 + 0.05*30000.; math.Abs(none.SignalHz-want) > 1e-9 || math.Abs(none.IdlerHz-want) > 1e-9 {
		t.Errorf("singles %.6g and %.6g Hz with pairs spoiled; want dark counts, fluorescence and stray light, %.6g Hz", none.SignalHz, none.IdlerHz, want)
	}
	p = atPeak()
	p.PumpOpen, p.RoomHz = 0, [2]float64{40, 70}
	if r := m.Rates(p); r != (Rates{SignalHz: 340, IdlerHz: 370, PairsHz: 0}) {
		t.Errorf("pump shut, room light on: %+v; want dark counts and room light", r)
	}
	p = atPeak()
	p.SignalOpen = 0
	if r := m.Rates(p); r.SignalHz != 300 || r.PairsHz != 0 || r.IdlerHz != full.IdlerHz {
		t.Errorf("signal detector's shutter closed: %+v; want its dark counts alone and the idler untouched", r)
	}
}

// TestTheNonlinearCoefficientGivesARateOfTheRightOrder holds the trade fact that a pair comes from
// between one in 10^6 and one in 10^12 pump photons (common practice, no source), and that a watt
// of visible light is 10^18 to 10^19 photons a second.
func TestTheNonlinearCoefficientGivesARateOfTheRightOrder(t *testing.T) {
	statistics(t)
	o := lossless(bench(t))
	o.PairHzPerMw, o.NonlinearPmPerV = 0, 1.75 // d_eff of BBO, of this order in every table
	o.Idler.RadiusMm, o.Signal.RadiusMm = 25, 25
	o.Signal.Filter, o.Idler.Filter = Filter{}, Filter{}
	m := model(t, o)
	p := atPeak()
	p.PumpW = 1
	r := m.Exact(p)
	photons := PhotonHz(1, 405)
	if photons < 1e18 || photons > 1e19 {
		t.Errorf("%.3g photons in a watt of violet light; want 10^18 to 10^19", photons)
	}
	if share := r.PairsHz / photons; share < 1e-12 || share > 1e-6 {
		t.Errorf("one pair in %.3g pump photons through wide arms; want one in 10^6 to 10^12", 1/share)
	}
	t.Logf("%.3g pairs a second and milliwatt through wide arms without filters; %s", r.PairsHz/1000, m.Scale())
	// The rate grows with the square of the coefficient.
	o.NonlinearPmPerV *= 2
	if q := model(t, o).Exact(p); math.Abs(q.PairsHz/r.PairsHz-4) > 1e-9 {
		t.Errorf("twice the coefficient gives %.6g times the pairs; want 4", q.PairsHz/r.PairsHz)
	}
}

func TestNewRefusesWhatItCannotModel(t *testing.T) {
	for _, c := range []struct {
		name string
		f    func(*Optics)
		want string
	}{
		{"closed ring", func(o *Optics) { o.CutDeg = 28 }, "no pairs at 810 nm leave"},
		{"filters that are no partners", func(o *Optics) { o.Idler.Filter = Filter{CentreNm: 700, WidthNm: 10, Shape: FilterFlat} }, "let no pair through"},
		{"two scales", func(o *Optics) { o.NonlinearPmPerV = 2 }, "exactly one of them"},
		{"unknown aperture", func(o *Optics) { o.Signal.Aperture = "square" }, `signal aperture "square"`},
		{"dead time without model", func(o *Optics) { o.Idler.Detector.Model = "" }, "dead-time model"},
		{"efficiency above one", func(o *Optics) { o.Idler.Detector.Efficiency = 1.2 }, "want 0 to 1"},
		{"pump out of range", func(o *Optics) { o.PumpNm = 200 }, "outside the range of the set"},
		{"unknown logic", func(o *Optics) { o.Counter.Logic = "first" }, `logic "first"`},
	} {
		o := bench(t)
		c.f(&o)
		if _, err := New(o); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v; want %q", c.name, err, c.want)
		}
	}
}

func TestDrawGivesTheSameCountsForTheSameSeed(t *testing.T) {
	m, err := New(bench(t))
	if err != nil {
		t.Fatal(err)
	}
	gate := []Segment{{For: time.Second, Rates: m.Rates(atPeak())}}
	a := m.Draw(rand.New(rand.NewPCG(1, 2)), gate)
	b := m.Draw(rand.New(rand.NewPCG(1, 2)), gate)
	if a != b || a.Coincidences == 0 {
		t.Errorf("counts %+v and %+v; want the same, with coincidences", a, b)
	}
	a = m.DrawEvents(rand.New(rand.NewPCG(1, 2)), gate)
	b = m.DrawEvents(rand.New(rand.NewPCG(1, 2)), gate)
	if a != b || a.Coincidences == 0 {
		t.Errorf("events gave %+v and %+v; want the same, with coincidences", a, b)
	}
}
