package source

import (
	"math/rand/v2"
	"testing"
	"time"

	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

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

func TestRatesPeakOnTheRingAndVanishOffIt(t *testing.T) {
	m, err := New(bench(t))
	if err != nil {
		t.Fatal(err)
	}
	on := m.Rates(atPeak())
	p := atPeak()
	p.IdlerDeg += 1
	off := m.Rates(p)
	if !(on.PairsHz > 0 && off.PairsHz < on.PairsHz/100) {
		t.Errorf("pairs on the ring %.4g Hz, a degree beside it %.4g Hz; want at least a hundred times fewer", on.PairsHz, off.PairsHz)
	}
	if on.PairsHz > min(on.SignalHz, on.IdlerHz) {
		t.Errorf("rates %+v: more pairs than singles", on)
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
}
