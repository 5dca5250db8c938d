package source

import (
	"math"
	"testing"

	"gemel/sim/phasematch"
)

func TestTheCollectedBandwidthIsTheFiltersProduct(t *testing.T) {
	// Near degeneracy the emission angle hardly depends on wavelength: two Gaussian filters of 10 nm
	// leave 10/sqrt 2.
	m := model(t, bench(t))
	c := m.Collect(atPeak())
	if math.Abs(c.Signal.FWHMNm-10/math.Sqrt2) > 0.1 || math.Abs(c.Signal.CentreNm-810) > 0.1 {
		t.Errorf("signal band %+v; want 7.07 nm at 810 nm", c.Signal)
	}
	if math.Abs(c.Idler.FWHMNm-c.Signal.FWHMNm) > 0.02 {
		t.Errorf("idler band %+v, signal band %+v; want the same width at degeneracy", c.Idler, c.Signal)
	}
	// Behind filters much wider than what the crystal matches, the crystal decides.
	o := bench(t)
	o.ThicknessMm, o.Signal.RadiusMm, o.Idler.RadiusMm, o.PumpWaistUm = 3, 0.1, 12, 2000
	o.Signal.Filter, o.Idler.Filter = Filter{CentreNm: 840, WidthNm: 100, Shape: FilterFlat}, Filter{}
	p := atPeak()
	wide := model(t, o)
	p.SignalDeg, p.IdlerDeg = wide.Reference()
	// The width at a fixed direction (31.6 nm, check value S097, for the bare sinc²), with the
	// density of states that grows towards the blue.
	slab := phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, ThicknessMm: 3, Cel: 20, PumpNm: 405}
	profile := func(nm float64) float64 {
		pair, err := slab.At(nm)
		if err != nil {
			t.Fatal(err)
		}
		dk, err := pair.MismatchPerMm(p.SignalDeg, 0)
		if err != nil {
			t.Fatal(err)
		}
		return phasematch.Sinc2(dk, 3) / math.Pow(nm, 5) / pair.IdlerNm
	}
	top := 0.0
	for nm := 790.0; nm < 890; nm += 0.01 {
		top = max(top, profile(nm))
	}
	lo, hi := 830.0, 840.0
	for profile(lo) > top/2 {
		lo -= 0.01
	}
	for profile(hi) > top/2 {
		hi += 0.01
	}
	if c := wide.Collect(p); math.Abs(c.Signal.FWHMNm-(hi-lo)) > 0.15 || math.Abs(hi-lo-31.6) > 1.5 {
		t.Errorf("signal band %+v of a wide filter; want the crystal's %.3f nm", c.Signal, hi-lo)
	}
}

func TestTheCollectedFractionSeparatesApertureAndFilter(t *testing.T) {
	o := bench(t)
	o.Idler.RadiusMm = 12
	c := model(t, o).Collect(atPeak())
	if c.ApertureFraction < 0.9999 || math.Abs(c.Fraction-1/math.Sqrt2) > 0.01 {
		t.Errorf("fractions %.5f, without the idler's filter %.5f; want 0.707 and 1", c.Fraction, c.ApertureFraction)
	}
	if r := c.BothHz / c.SignalHz; math.Abs(r-c.Fraction) > 1e-12 {
		t.Errorf("both over signal %.6f, fraction %.6f; want the same", r, c.Fraction)
	}
}

func TestAFiniteApertureMovesAndWidensThePeak(t *testing.T) {
	small := bench(t)
	small.Signal.RadiusMm, small.Idler.RadiusMm = 0.05, 0.05
	small.Signal.Filter.WidthNm, small.Idler.Filter.WidthNm = 0.5, 0.5
	small.PumpWaistUm = 500
	p := model(t, small).Peaks()
	// The plane-wave ring at one wavelength: 2.864 deg, and 6.0 mrad wide (check value S094 for 3 mm
	// scales to 2 mm, nearly).
	if math.Abs(p.SignalSingles.MaximumDeg-2.8642) > 0.004 || math.Abs(p.SignalSingles.FWHMDeg-0.342) > 0.01 {
		t.Errorf("point detectors, wide pump: %+v; want the bare ring at 2.8642 deg", p.SignalSingles)
	}
	wide := bench(t)
	wide.Signal.RadiusMm, wide.Idler.RadiusMm = 4, 4
	q := model(t, wide).Peaks()
	if !(q.SignalSingles.MaximumDeg < p.SignalSingles.MaximumDeg-0.005) || !(q.SignalSingles.FWHMDeg > 1.5*p.SignalSingles.FWHMDeg) {
		t.Errorf("apertures of 4 mm: %+v; want the peak pulled inward and wider than %+v", q.SignalSingles, p.SignalSingles)
	}
	for name, pair := range map[string][2]Peak{"signal": {q.PairsOverSignal, q.SignalSingles}, "idler": {q.PairsOverIdler, q.IdlerSingles}} {
		if pair[0].FWHMDeg > pair[1].FWHMDeg {
			t.Errorf("%s: pairs %+v are wider than singles %+v", name, pair[0], pair[1])
		}
	}
}
