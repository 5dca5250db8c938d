package phasematch

import (
	"fmt"
	"math"
	"slices"

	"gemel/sim/crystal"
)

// ExtraordinaryIndex is the index of an extraordinary wave whose wave vector makes an angle with
// the optic axis: 1/n² = cos²/n_o² + sin²/n_e² (Born and Wolf).
func ExtraordinaryIndex(no, ne, thetaDeg float64) float64 {
	s, c := math.Sincos(thetaDeg * deg)
	return 1 / math.Sqrt(c*c/(no*no)+s*s/(ne*ne))
}

// WalkoffDeg is the magnitude of the angle between ray and wave vector of an extraordinary wave:
// rho = atan((n_o/n_e)² tan theta) - theta.
func WalkoffDeg(no, ne, thetaDeg float64) float64 {
	s, c := math.Sincos(thetaDeg * deg)
	r := no / ne
	return math.Abs(math.Atan2(r*r*s, c)/deg - thetaDeg)
}

// WalkoffDeg is the walk-off of the pump inside the slab; 0 for an ordinary pump.
func (s *Slab) WalkoffDeg() (float64, error) {
	theta, err := s.PumpAxisDeg()
	if err != nil {
		return 0, err
	}
	if e, _, _ := s.Process.Rays(); !e {
		return 0, nil
	}
	no, err := s.index(crystal.Ordinary, s.PumpNm)
	if err != nil {
		return 0, err
	}
	ne, err := s.index(crystal.Extraordinary, s.PumpNm)
	if err != nil {
		return 0, err
	}
	return WalkoffDeg(no, ne, theta), nil
}

// PumpAxisDeg is the angle between pump and optic axis inside: cut plus the refracted tilt.
func (s *Slab) PumpAxisDeg() (float64, error) {
	if err := s.checkProcess(); err != nil {
		return 0, err
	}
	p, err := s.At(2 * s.PumpNm)
	if err == nil {
		return p.PumpAxisDeg(), nil
	}
	// The daughters at twice the pump may be out of range although the pump is not.
	var q Pair
	q.sinCut, q.cosCut = math.Sincos(s.CutDeg * deg)
	ePump, _, _ := s.Process.Rays()
	if err := q.pump.set(s, &q, s.PumpNm, ePump); err != nil {
		return 0, err
	}
	q.qp = -q.pump.k0 * math.Sin(s.TiltDeg*deg)
	q.kpz, _, _ = q.pump.kz(q.qp, 0)
	return q.PumpAxisDeg(), nil
}

// TiltForPumpAxis is the way back: the tilt that puts the pump at an angle to the optic axis.
func (s *Slab) TiltForPumpAxis(axisDeg float64) (float64, error) {
	if err := s.checkProcess(); err != nil {
		return 0, err
	}
	no, err := s.index(crystal.Ordinary, s.PumpNm)
	if err != nil {
		return 0, err
	}
	n := no
	if e, _, _ := s.Process.Rays(); e {
		ne, err := s.index(crystal.Extraordinary, s.PumpNm)
		if err != nil {
			return 0, err
		}
		n = ExtraordinaryIndex(no, ne, axisDeg)
	}
	sin := n * math.Sin((axisDeg-s.CutDeg)*deg)
	if math.Abs(sin) >= 1 {
		return 0, fmt.Errorf("phasematch: a pump at %g deg to the optic axis of a crystal cut at %g deg; want an angle that a tilt in air can reach", axisDeg, s.CutDeg)
	}
	return math.Asin(sin) / deg, nil
}

// CollinearDeg lists the angles between pump and optic axis, rising, at which the three waves
// match along one direction. There may be none. Type I has a closed form; the others are solved.
// Poling, cut and tilt play no part.
func (s *Slab) CollinearDeg(signalNm float64) ([]float64, error) {
	if !(signalNm > s.PumpNm) {
		return nil, fmt.Errorf("phasematch: signal %g nm with a pump of %g nm; want a longer wavelength than the pump's", signalNm, s.PumpNm)
	}
	if err := s.checkProcess(); err != nil {
		return nil, err
	}
	idlerNm := Idler(s.PumpNm, signalNm)
	var w [3]planeWave
	e := [3]bool{}
	e[0], e[1], e[2] = s.Process.Rays()
	for i, nm := range [3]float64{s.PumpNm, signalNm, idlerNm} {
		no, err := s.index(crystal.Ordinary, nm)
		if err != nil {
			return nil, err
		}
		ne, err := s.index(crystal.Extraordinary, nm)
		if err != nil {
			return nil, err
		}
		w[i] = planeWave{nm: nm, inPlane: e[i], normal: no, at0: no, at90: ne}
	}
	if e == [3]bool{true, false, false} {
		n := s.PumpNm * (w[1].normal/signalNm + w[2].normal/idlerNm)
		no, ne := w[0].at0, w[0].at90
		sinSq := (1/(n*n) - 1/(no*no)) / (1/(ne*ne) - 1/(no*no))
		if sinSq < 0 || sinSq > 1 {
			return nil, nil
		}
		return []float64{math.Asin(math.Sqrt(sinSq)) / deg}, nil
	}
	return matchAngles(w), nil
}

// planeWave is a wave that travels in a plane of symmetry: polarised along the plane's normal, or
// in the plane with an index that turns from at0 to at90.
type planeWave struct {
	nm                float64
	inPlane           bool
	normal, at0, at90 float64
}

func (w planeWave) index(thetaDeg float64) float64 {
	if !w.inPlane {
		return w.normal
	}
	return ExtraordinaryIndex(w.at0, w.at90, thetaDeg)
}

// matchAngles finds all angles between 0 and 90 deg at which n_p/l_p = n_s/l_s + n_i/l_i.
func matchAngles(w [3]planeWave) []float64 {
	f := func(theta float64) float64 {
		return w[0].index(theta)/w[0].nm - w[1].index(theta)/w[1].nm - w[2].index(theta)/w[2].nm
	}
	return zeros(f, 0, 90, 360)
}

// zeros finds the sign changes of a smooth function on a grid and refines each.
func zeros(f func(float64) float64, lo, hi float64, steps int) []float64 {
	var found []float64
	x0, f0 := lo, f(lo)
	if f0 == 0 {
		found = append(found, lo)
	}
	for i := 1; i <= steps; i++ {
		x1 := lo + (hi-lo)*float64(i)/float64(steps)
		f1 := f(x1)
		switch {
		case f1 == 0:
			found = append(found, x1)
		case f0*f1 < 0:
			found = append(found, bracketed(f, x0, x1, f0, f1))
		}
		x0, f0 = x1, f1
	}
	return slices.Clip(found)
}

// bracketed refines a root between two points of opposite sign, by the method of Brent (1973)
// without its bookkeeping: inverse steps by the Illinois rule, halving when they stall.
func bracketed(f func(float64) float64, a, b, fa, fb float64) float64 {
	side := 0
	for i := range 200 {
		x := (a*fb - b*fa) / (fb - fa)
		if i%4 == 3 || !(x > min(a, b) && x < max(a, b)) {
			x = (a + b) / 2
		}
		fx := f(x)
		if fx == 0 || math.Abs(b-a) <= 1e-15*(math.Abs(a)+math.Abs(b)) {
			return x
		}
		if fx*fb < 0 {
			a, fa = b, fb
			b, fb = x, fx
			side = 0
			continue
		}
		b, fb = x, fx
		if side++; side > 1 {
			fa /= 2
		}
	}
	return (a + b) / 2
}
