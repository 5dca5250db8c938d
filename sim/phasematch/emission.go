package phasematch

import (
	"fmt"
	"math"
)

// Emission is one matched pair of directions.
type Emission struct {
	Signal, Idler Direction
}

// Emissions are the matched directions at one azimuth and wavelength: none, one or two, the
// smaller polar angle first. A tangent root counts once.
type Emissions struct {
	N    int
	Root [2]Emission
	// SignalReflected says that a match exists inside whose signal cannot leave the exit face.
	SignalReflected bool
}

// Because explains in words why there is no emission; it is empty when there is one.
func (e Emissions) Because() string {
	switch {
	case e.N > 0:
		return ""
	case e.SignalReflected:
		return "the signal is totally reflected at the exit face"
	}
	return "no direction at this azimuth conserves momentum: the ring is closed, or lies elsewhere"
}

// mismatch is k_p - k_s - k_i along the face normal for a signal that leaves at the polar angle
// with sine s, and its derivative with respect to s.
func (p *Pair) mismatch(s, sinPhi, cosPhi float64) (dk, slope float64) {
	c := math.Sqrt(1 - s*s)
	k := p.signal.k0
	x, y := p.onFace(s, c, sinPhi, cosPhi)
	qx, qy := k*x, k*y
	dx, dy := k*(cosPhi*p.cosTilt+s/c*p.sinTilt), k*sinPhi
	ks, sx, sy := p.signal.kz(qx, qy)
	ki, ix, iy := p.idler.kz(p.qp-qx, -qy)
	return p.kpz - ks - ki - p.grating, (ix-sx)*dx + (iy-sy)*dy
}

// Emission finds where the signal leaves at an azimuth.
func (p *Pair) Emission(azimuthDeg float64) Emissions {
	sinPhi, cosPhi := math.Sincos(azimuthDeg * deg)
	var roots [2]float64
	n, beyond := p.roots(sinPhi, cosPhi, &roots)
	e := Emissions{N: n, SignalReflected: beyond}
	for i := range n {
		c := math.Sqrt(1 - roots[i]*roots[i])
		x, y := p.onFace(roots[i], c, sinPhi, cosPhi)
		qx, qy := x*p.signal.k0, y*p.signal.k0
		e.Root[i].Signal = p.direction(&p.signal, qx, qy)
		e.Root[i].Idler = p.direction(&p.idler, p.qp-qx, -qy)
		// What was asked for is returned as it was asked, not as it rounds.
		e.Root[i].Signal.AzimuthDeg = azimuthDeg
	}
	return e
}

// tangent is the mismatch, relative to the pump's wave vector, below which two roots that are
// about to vanish are one.
const tangent = 1e-13

// roots finds the sines of the polar angles at which the mismatch vanishes. The normal component
// of every wave is a concave function of its momentum along the face, so the mismatch is convex
// along an untilted ray, and very nearly so along a tilted one: it has one minimum.
func (p *Pair) roots(sinPhi, cosPhi float64, roots *[2]float64) (n int, beyond bool) {
	top := 1.0
	if side := p.sinTilt * cosPhi; side < 0 {
		top = math.Sin(math.Atan2(p.cosTilt, -side)) // beyond it the ray would run along the face
	}
	top *= 1 - 1e-9
	eps := tangent * p.kpz
	f0, d0 := p.mismatch(0, sinPhi, cosPhi)
	curvature := 2 * p.curvature()
	if f0 <= eps && f0 >= -eps {
		// On the axis itself. A falling mismatch comes back to zero further out.
		roots[0] = 0
		if d0 >= -curvature*1e-6 {
			return 1, false
		}
		low, _, ok := p.bottom(sinPhi, cosPhi, d0, curvature, top)
		if !ok {
			return 1, false
		}
		s, ok := p.newton(2*low, low, top, 1, sinPhi, cosPhi)
		if !ok {
			return 1, false
		}
		roots[1] = s
		return 2, false
	}
	if f0 < 0 {
		// One root. Start from the parabola's, on its far side, from where Newton's steps on a
		// convex function never overshoot.
		s, ok := p.newton((math.Sqrt(d0*d0-2*curvature*f0)-d0)/curvature, 0, top, 1, sinPhi, cosPhi)
		if !ok {
			// Still negative where the ray would run along the face: the match lies beyond, inside only.
			// NaN there: the partner cannot propagate before it is reached.
			edge, _ := p.mismatch(top, sinPhi, cosPhi)
			return 0, edge < 0
		}
		roots[0] = s
		return 1, false
	}
	if d0 >= 0 {
		return 0, false
	}
	low, f, ok := p.bottom(sinPhi, cosPhi, d0, curvature, top)
	if !ok || f > eps {
		return 0, false
	}
	if f >= -eps {
		roots[0] = low
		return 1, false
	}
	spread := math.Sqrt(-2 * f / curvature)
	n = 0
	if s, ok := p.newton(low-spread, 0, low, -1, sinPhi, cosPhi); ok {
		roots[n] = s
		n++
	}
	if s, ok := p.newton(low+spread, low, top, 1, sinPhi, cosPhi); ok {
		roots[n] = s
		n++
	}
	return n, false
}

// curvature estimates half the second derivative of the mismatch with respect to the sine.
func (p *Pair) curvature() float64 {
	return p.signal.k0Sq / 2 * (1/math.Sqrt(p.signal.kSq) + 1/math.Sqrt(p.idler.kSq))
}

// bottom finds the minimum of a mismatch that falls at first.
func (p *Pair) bottom(sinPhi, cosPhi, d0, curvature, top float64) (s, f float64, ok bool) {
	lo, hi := 0.0, top
	s = min(-d0/curvature, top/2)
	// Secant steps on the slope, kept inside a bracket.
	sOld, dOld := 0.0, d0
	for range 100 {
		var d float64
		f, d = p.mismatch(s, sinPhi, cosPhi)
		switch {
		case math.IsNaN(f) || d > 0:
			hi = s
		default:
			lo = s
		}
		next := (lo + hi) / 2
		if !math.IsNaN(d) && d != dOld {
			if n := s - d*(s-sOld)/(d-dOld); n > lo && n < hi {
				next = n
			}
			sOld, dOld = s, d
		}
		if math.Abs(next-s) <= 1e-9*s || hi-lo < 1e-14 {
			return s, f, s < top*(1-1e-6)
		}
		s = next
	}
	return s, f, false
}

// newton finds the root between lo and hi from a start. sign is +1 where the mismatch is negative
// at lo and positive at hi, -1 where it is the other way round. It fails if there is no root.
func (p *Pair) newton(s, lo, hi, sign, sinPhi, cosPhi float64) (float64, bool) {
	if !(s > lo && s < hi) {
		s = (lo + hi) / 2
	}
	for range 200 {
		f, d := p.mismatch(s, sinPhi, cosPhi)
		if sign*f > 0 || math.IsNaN(f) {
			hi = s
		} else {
			lo = s
		}
		step := f / d
		if next := s - step; next >= lo && next <= hi {
			s = next
			if step*step <= 1e-13*s || step == 0 { // the error left is step²/2s or less
				return s, true
			}
			continue
		}
		s = (lo + hi) / 2
		if hi-lo <= 1e-15 {
			return 0, false // squeezed against an end
		}
	}
	return 0, false
}

// Conjugate is the direction in which the partner of a signal photon leaves that is seen in a
// given direction: momentum along the face is conserved whether phase matching is perfect or not.
// reflected says that the partner does not leave the crystal.
func (p *Pair) Conjugate(polarDeg, azimuthDeg float64) Direction {
	st, ct := math.Sincos(polarDeg * deg)
	sp, cp := math.Sincos(azimuthDeg * deg)
	x, y := p.onFace(st, ct, sp, cp)
	return p.direction(&p.idler, p.qp-p.signal.k0*x, -p.signal.k0*y)
}

// MismatchPerMm is the mismatch for a signal seen in a direction, in 1/mm.
func (p *Pair) MismatchPerMm(polarDeg, azimuthDeg float64) (float64, error) {
	st, ct := math.Sincos(polarDeg * deg)
	sp, cp := math.Sincos(azimuthDeg * deg)
	x, y := p.onFace(st, ct, sp, cp)
	ks, _, _ := p.signal.kz(p.signal.k0*x, p.signal.k0*y)
	ki, _, _ := p.idler.kz(p.qp-p.signal.k0*x, -p.signal.k0*y)
	if dk := p.kpz - ks - ki - p.grating; !math.IsNaN(dk) {
		return dk, nil
	}
	return 0, fmt.Errorf("phasematch: a signal at %g deg has no partner that propagates; want a smaller angle", polarDeg)
}

// Sinc2 is the phase-matching function sinc²(mismatch·length/2).
func Sinc2(dkPerMm, lengthMm float64) float64 {
	x := dkPerMm * lengthMm / 2
	if math.Abs(x) < 1e-4 {
		return 1 - x*x/3
	}
	s := math.Sin(x) / x
	return s * s
}
