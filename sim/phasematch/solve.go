package phasematch

import (
	"fmt"
	"math"

	"gemel/sim/crystal"
)

// CutsForAngle lists the cuts, rising, that put the signal at an external angle at an azimuth,
// with the tilt as it is.
func (s Slab) CutsForAngle(signalNm, polarDeg, azimuthDeg float64) ([]float64, error) {
	return s.settings(signalNm, polarDeg, azimuthDeg, 0, 90, func(s *Slab, v float64) { s.CutDeg = v })
}

// TiltsForAngle lists the tilts within ±limitDeg, rising, that put the signal at an external
// angle at an azimuth, with the cut as it is.
func (s Slab) TiltsForAngle(signalNm, polarDeg, azimuthDeg, limitDeg float64) ([]float64, error) {
	return s.settings(signalNm, polarDeg, azimuthDeg, -limitDeg, limitDeg, func(s *Slab, v float64) { s.TiltDeg = v })
}

func (s Slab) settings(signalNm, polarDeg, azimuthDeg, lo, hi float64, set func(*Slab, float64)) ([]float64, error) {
	set(&s, (lo+hi)/2)
	if _, err := s.At(signalNm); err != nil {
		return nil, err
	}
	return zeros(func(v float64) float64 {
		t := s
		set(&t, v)
		return t.mismatchOver(polarDeg, azimuthDeg)(signalNm)
	}, lo, hi, 360), nil
}

// Sensitivities say how far a matched external angle of the signal moves, in degrees, with the
// signal wavelength held.
type Sensitivities struct {
	PerDegCut  float64
	PerDegTilt float64
	PerKelvin  float64 // 0 where the set has no temperature terms
	PerNmPump  float64
}

// Sensitivities at the matched angle nearest to polarDeg. They grow without bound where the ring
// opens, so they fail there.
func (s Slab) Sensitivities(signalNm, polarDeg, azimuthDeg float64) (Sensitivities, error) {
	root := func(t Slab) (float64, error) {
		p, err := t.At(signalNm)
		if err != nil {
			return 0, err
		}
		e := p.Emission(azimuthDeg)
		best := math.NaN()
		for _, r := range e.Root[:e.N] {
			if !(math.Abs(r.Signal.PolarDeg-polarDeg) >= math.Abs(best-polarDeg)) {
				best = r.Signal.PolarDeg
			}
		}
		if math.IsNaN(best) {
			return 0, fmt.Errorf("phasematch: %s, too near for a sensitivity", e.Because())
		}
		return best, nil
	}
	slope := func(step float64, set func(*Slab, float64)) (float64, error) {
		up, down := s, s
		set(&up, step)
		set(&down, -step)
		a, err := root(up)
		if err != nil {
			return 0, err
		}
		b, err := root(down)
		return (a - b) / (2 * step), err
	}
	var out Sensitivities
	for _, x := range []struct {
		to   *float64
		step float64
		set  func(*Slab, float64)
	}{
		{&out.PerDegCut, 1e-4, func(s *Slab, d float64) { s.CutDeg += d }},
		{&out.PerDegTilt, 1e-4, func(s *Slab, d float64) { s.TiltDeg += d }},
		{&out.PerKelvin, 1e-2, func(s *Slab, d float64) { s.Cel += d }},
		{&out.PerNmPump, 1e-3, func(s *Slab, d float64) { s.PumpNm += d }},
	} {
		var err error
		if *x.to, err = slope(x.step, x.set); err != nil {
			return Sensitivities{}, err
		}
	}
	return out, nil
}

// AcceptanceExternalMrad is the full width at half maximum of second-harmonic generation in the
// fundamental's external angle, for a collinear type I crystal of the slab's thickness: the pump
// wavelength is the harmonic, the signal the fundamental. To first order in the angle.
func (s *Slab) AcceptanceExternalMrad() (float64, error) {
	angles, err := s.CollinearDeg(2 * s.PumpNm)
	if err != nil {
		return 0, err
	}
	if len(angles) == 0 {
		return 0, errNoEmission
	}
	const h = 1e-4
	t := *s
	at := func(theta float64) (float64, error) {
		t.CutDeg, t.TiltDeg = theta, 0
		p, err := t.At(2 * s.PumpNm)
		if err != nil {
			return 0, err
		}
		return p.MismatchPerMm(0, 0)
	}
	up, err := at(angles[0] + h)
	if err != nil {
		return 0, err
	}
	down, err := at(angles[0] - h)
	if err != nil {
		return 0, err
	}
	slope := (up - down) / (2 * h * deg)
	t.CutDeg, t.TiltDeg = angles[0], 0
	p, err := t.At(2 * s.PumpNm)
	if err != nil {
		return 0, err
	}
	n := math.Sqrt(p.signal.kSq) / p.signal.k0
	return n * 4 * halfMax / (s.ThicknessMm * math.Abs(slope)) * 1000, nil
}

// OverlapDeg is the full angle between the two directions in which an untilted degenerate type II
// crystal emits both polarisations: the rings of ordinary and extraordinary photons cross there.
func (s *Slab) OverlapDeg(signalNm float64) (float64, error) {
	p, err := s.At(signalNm)
	if err != nil {
		return 0, err
	}
	e := p.Emission(90)
	if e.N == 0 {
		return 0, errNoEmission
	}
	return 2 * e.Root[e.N-1].Signal.PolarDeg, nil
}

// ShortestHarmonicNm is the shortest fundamental between lo and hi whose collinear second harmonic
// a type I crystal still matches: where the angle to the axis reaches 90 deg.
func (s Slab) ShortestHarmonicNm(loNm, hiNm float64) (float64, error) {
	var failed error
	found := zeros(func(nm float64) float64 {
		ne, err := s.index(crystal.Extraordinary, nm/2)
		if err != nil {
			failed = err
			return math.NaN()
		}
		no, err := s.index(crystal.Ordinary, nm)
		if err != nil {
			failed = err
			return math.NaN()
		}
		return ne - no
	}, loNm, hiNm, 100)
	if failed != nil {
		return 0, failed
	}
	if len(found) == 0 {
		return 0, fmt.Errorf("phasematch: no edge between %g and %g nm", loNm, hiNm)
	}
	return found[0], nil
}

// IdlerByRuleDeg is the idler's external angle by sin(t_s)/l_s = sin(t_i)/l_i, which is exact in an
// untilted slab and wrong in a tilted one.
func IdlerByRuleDeg(pumpNm, signalNm, signalDeg float64) float64 {
	return math.Asin(math.Sin(signalDeg*deg)*Idler(pumpNm, signalNm)/signalNm) / deg
}
