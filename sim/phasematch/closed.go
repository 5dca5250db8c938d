package phasematch

import "math"

// RingDeg is the closed form of the emission of an untilted slab with two ordinary daughters:
// the internal polar angles follow from the law of cosines between k_p, k_s and k_i, and
// sin(t) = n sin(t inside) leads out. ok is false when the ring is closed or cannot leave.
// The process must be e-oo (or o-oo), the tilt 0.
func (p *Pair) RingDeg() (signalDeg, idlerDeg float64, ok bool) {
	kp := p.kpz - p.grating
	along := (kp*kp + p.signal.kSq - p.idler.kSq) / (2 * kp)
	qSq := p.signal.kSq - along*along
	if qSq < 0 {
		return 0, 0, false
	}
	q := math.Sqrt(qSq)
	s, i := q/p.signal.k0, q/p.idler.k0
	if s >= 1 || i >= 1 {
		return 0, 0, false
	}
	return math.Asin(s) / deg, math.Asin(i) / deg, true
}
