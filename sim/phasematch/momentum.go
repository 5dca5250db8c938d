package phasematch

import "math"

// What follows serves integrations over many directions: momenta along the face in 1/mm, in the
// face's own axes (x in the plane of the optic axis, y as in the laboratory).

// Wavenumbers are 2 pi/lambda of pump, signal and idler, in 1/mm.
func (p *Pair) Wavenumbers() (pump, signal, idler float64) { return p.pump.k0, p.signal.k0, p.idler.k0 }

// Indices are the refractive indices of pump, signal and idler along the face normal.
func (p *Pair) Indices() (pump, signal, idler float64) {
	return p.pump.normal(p.qp, 0) / p.pump.k0, p.signal.normal(0, 0) / p.signal.k0, p.idler.normal(0, 0) / p.idler.k0
}

// PumpAlongFace is the x component of the momentum of the pump's axis; its y component is 0.
func (p *Pair) PumpAlongFace() float64 { return p.qp }

// Normal parts of the three waves at momenta along the face; NaN where a wave cannot propagate.
func (p *Pair) PumpNormal(qx, qy float64) float64   { return p.pump.normal(qx, qy) - p.grating }
func (p *Pair) SignalNormal(qx, qy float64) float64 { return p.signal.normal(qx, qy) }
func (p *Pair) IdlerNormal(qx, qy float64) float64  { return p.idler.normal(qx, qy) }

// PartnerSlope is the gradient of the mismatch with respect to the idler's momentum, the signal's
// held and the pump supplying the sum, where the sum is the pump's axis.
func (p *Pair) PartnerSlope(sx, sy float64) (x, y float64) {
	_, px, py := p.pump.kz(p.qp, 0)
	_, ix, iy := p.idler.kz(p.qp-sx, -sy)
	return px - ix, py - iy
}

// SignalSlope is the gradient of the mismatch with respect to the signal's momentum, the pump's
// held and the idler supplying the difference.
func (p *Pair) SignalSlope(sx, sy float64) (x, y float64) {
	_, dx, dy := p.signal.kz(sx, sy)
	_, ix, iy := p.idler.kz(p.qp-sx, -sy)
	return ix - dx, iy - dy
}

// normal is kz without its derivatives.
func (w *wave) normal(qx, qy float64) float64 {
	if !w.extraordinary {
		return math.Sqrt(w.kSq - qx*qx - qy*qy)
	}
	b := w.b * qx
	return (math.Sqrt(b*b-w.a*(w.cxx*qx*qx+w.cyy*qy*qy-w.k0Sq)) - b) / w.a
}
