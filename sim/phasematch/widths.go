package phasematch

import (
	"errors"
	"math"
)

// Width is a full width at half maximum. Open says that the half maximum is not reached on one
// side: the emission covers the axis, or the band runs into the end of the set's range. FWHM
// then reaches from there to the other side.
type Width struct {
	FWHM float64
	Open bool
}

var errNoEmission = errors.New("phasematch: no emission at this azimuth and wavelength")

// EmissionMrad is the width in external polar angle of the emission at one wavelength for a
// plane-wave pump, around a matched angle: where sinc²(mismatch·length/2) is one half.
func (p *Pair) EmissionMrad(polarDeg, azimuthDeg float64) (Width, error) {
	if !(p.lengthMm > 0) {
		return Width{}, errors.New("phasematch: thickness 0; want one, the width of the emission depends on it")
	}
	sinPhi, cosPhi := math.Sincos(azimuthDeg * deg)
	edge := 2 * halfMax / p.lengthMm
	at := func(t float64) float64 {
		s, c := math.Sincos(t)
		// The azimuth is kept through the axis, where the polar angle turns negative.
		x, y := p.onFace(s, c, sinPhi, cosPhi)
		qx, qy := p.signal.k0*x, p.signal.k0*y
		ks, _, _ := p.signal.kz(qx, qy)
		ki, _, _ := p.idler.kz(p.qp-qx, -qy)
		return p.kpz - ks - ki - p.grating
	}
	t0 := polarDeg * deg
	inner, okIn := leave(at, t0, -1e-4, 0, edge)
	outer, okOut := leave(at, t0, 1e-4, math.Pi/2-1e-6, edge)
	if !okOut {
		return Width{FWHM: (math.Pi/2 - inner) * 1000, Open: true}, nil
	}
	return Width{FWHM: (outer - inner) * 1000, Open: !okIn}, nil
}

// leave walks from a root in growing steps until |f| passes edge, and refines the crossing. ok is
// false when the end comes first; the end is then returned.
func leave(f func(float64) float64, from, step, end, edge float64) (x float64, ok bool) {
	over := func(x float64) float64 {
		v := math.Abs(f(x))
		if math.IsNaN(v) {
			return math.MaxFloat64
		}
		return v - edge
	}
	a, fa := from, over(from)
	for range 10000 {
		b := a + step
		last := false
		if (step > 0) == (b > end) {
			b, last = end, true
		}
		if fb := over(b); fb >= 0 {
			return bracketed(over, a, b, fa, fb), true
		} else if last {
			return end, false
		} else {
			a, fa = b, fb
		}
		step *= 1.05
	}
	return a, false
}

// SpectralNm is the width in signal wavelength seen at a fixed direction around a matched
// wavelength, for a plane-wave pump. The band is open where the set's range ends first.
func (s *Slab) SpectralNm(signalNm, polarDeg, azimuthDeg float64) (Width, error) {
	if !(s.ThicknessMm > 0) {
		return Width{}, errors.New("phasematch: thickness 0; want one, the width of the band depends on it")
	}
	at := s.mismatchOver(polarDeg, azimuthDeg)
	if dk := at(signalNm); math.IsNaN(dk) {
		return Width{}, errNoEmission
	}
	edge := 2 * halfMax / s.ThicknessMm
	lo, hi := s.Band()
	a, okA := leave(at, signalNm, -0.05, lo, edge)
	b, okB := leave(at, signalNm, 0.05, hi, edge)
	return Width{FWHM: b - a, Open: !okA || !okB}, nil
}

// mismatchOver is the mismatch at a fixed signal direction as a function of its wavelength; NaN
// where nothing propagates or the set ends.
func (s *Slab) mismatchOver(polarDeg, azimuthDeg float64) func(float64) float64 {
	return func(nm float64) float64 {
		p, err := s.At(nm)
		if err != nil {
			return math.NaN()
		}
		dk, err := p.MismatchPerMm(polarDeg, azimuthDeg)
		if err != nil {
			return math.NaN()
		}
		return dk
	}
}

// Band is the range of signal wavelengths for which signal and idler are inside the set's range,
// or a quarter beyond it when extrapolation was asked for.
func (s *Slab) Band() (lo, hi float64) {
	lo, hi = 0, math.Inf(1)
	for _, d := range s.Crystal.Axes {
		lo, hi = max(lo, d.RangeUm[0]*1000), min(hi, d.RangeUm[1]*1000)
	}
	if s.Extrapolate {
		lo, hi = lo*0.8, hi*1.25
	}
	// The idler of the longest wavelength is the shortest, and the other way round.
	lo = max(lo, s.PumpNm*1.02)
	if hi > s.PumpNm {
		lo = max(lo, Idler(s.PumpNm, hi))
	}
	return lo, min(hi, Idler(s.PumpNm, lo))
}

// MatchedNm lists the signal wavelengths between lo and hi, rising, that are matched in a
// direction. There may be none, one or two, because the outside angle has a minimum.
func (s *Slab) MatchedNm(polarDeg, azimuthDeg, loNm, hiNm float64) []float64 {
	lo, hi := s.Band()
	lo, hi = max(lo, loNm), min(hi, hiNm)
	if !(lo < hi) {
		return nil
	}
	return zeros(s.mismatchOver(polarDeg, azimuthDeg), lo, hi, 400)
}

// ThinCorrelationMrad is the width of the idler's direction, seen with the signal's fixed, that
// the pump's own spread allows in a thin crystal: 2 sqrt(2 ln 2)/(w0 k_i cos t_i) (Monken, Souto
// Ribeiro and Padua, Phys. Rev. A 57, 3123 (1998)).
func ThinCorrelationMrad(idlerNm, idlerDeg, waistUm float64) float64 {
	k := 2 * math.Pi / idlerNm * 1000 // 1/um
	return 2 * math.Sqrt(2*math.Ln2) / (waistUm * k * math.Cos(idlerDeg*deg)) * 1000
}

// CorrelationMrad is the same with the crystal's length: the width in the idler's polar angle of
// exp(-|q_s + q_i - q_p|² w0²/2) sinc²(mismatch·length/2), with the pump component that supplies
// the sum refracted as the wave it is, so that walk-off is in (Joobeur, Saleh and Teich, Phys.
// Rev. A 50, 3349 (1994)). Signal direction and both wavelengths are exact, detectors points.
func (p *Pair) CorrelationMrad(signalPolarDeg, signalAzimuthDeg, waistUm float64) (float64, error) {
	if !(waistUm > 0) {
		return 0, errors.New("phasematch: waist 0; want one, the correlation depends on it")
	}
	st, ct := math.Sincos(signalPolarDeg * deg)
	sp, cp := math.Sincos(signalAzimuthDeg * deg)
	x, y := p.onFace(st, ct, sp, cp)
	sx, sy := p.signal.k0*x, p.signal.k0*y
	ks, _, _ := p.signal.kz(sx, sy)
	idler := p.direction(&p.idler, p.qp-sx, -sy)
	if idler.ReflectedBack {
		return 0, errors.New("phasematch: the idler is totally reflected at the exit face; want a direction that leaves")
	}
	si, ci := math.Sincos(idler.AzimuthDeg * deg)
	w := waistUm / 1000
	density := func(t float64) float64 {
		s, c := math.Sincos(t)
		x, y := p.onFace(s, c, si, ci)
		ix, iy := p.idler.k0*x, p.idler.k0*y
		ki, _, _ := p.idler.kz(ix, iy)
		kp, _, _ := p.pump.kz(sx+ix, sy+iy)
		dx, dy := sx+ix-p.qp, sy+iy
		v := math.Exp(-(dx*dx+dy*dy)*w*w/2) * Sinc2(kp-ks-ki-p.grating, p.lengthMm)
		if math.IsNaN(v) {
			return 0
		}
		return v
	}
	t0 := idler.PolarDeg * deg
	thin := ThinCorrelationMrad(p.IdlerNm, idler.PolarDeg, waistUm) / 1000
	top := maximum(density, t0-thin*1.5, t0+thin*1.5, 200)
	half := density(top) / 2
	below := func(t float64) float64 { return half - density(t) }
	inner, okIn := cross(below, top, -thin/50)
	outer, okOut := cross(below, top, thin/50)
	if !okIn || !okOut {
		return 0, errors.New("phasematch: the correlation has no half maximum; want a wider waist")
	}
	return (outer - inner) * 1000, nil
}

// maximum finds the highest value of a function of few humps: the best of a grid, then a golden
// section.
func maximum(f func(float64) float64, lo, hi float64, n int) float64 {
	best, at := math.Inf(-1), 0
	for i := range n + 1 {
		if v := f(lo + (hi-lo)*float64(i)/float64(n)); v > best {
			best, at = v, i
		}
	}
	a, b := lo+(hi-lo)*float64(max(0, at-1))/float64(n), lo+(hi-lo)*float64(min(n, at+1))/float64(n)
	const golden = 0.6180339887498949
	for range 60 {
		if b-a < 1e-9*(math.Abs(a)+math.Abs(b)) { // nearer than a maximum can be told
			break
		}
		c, d := b-golden*(b-a), a+golden*(b-a)
		if f(c) > f(d) {
			b = d
		} else {
			a = c
		}
	}
	return (a + b) / 2
}

// cross walks from a point where f is negative until it is not, and refines.
func cross(f func(float64) float64, from, step float64) (float64, bool) {
	a, fa := from, f(from)
	for range 2000 {
		b := a + step
		fb := f(b)
		if fb >= 0 {
			return bracketed(f, a, b, fa, fb), true
		}
		a, fa = b, fb
	}
	return a, false
}

// spread is the phase-matching function of a signal momentum averaged over the directions of a
// pump of a waist, each refracted as the wave it is: what one detector sees when nobody looks for
// the partner.
func (p *Pair) spread(sx, sy, waistMm float64) float64 {
	gx, gy := p.PartnerSlope(sx, sy)
	ex, ey := 1.0, 0.0
	if g := math.Hypot(gx, gy); g > 0 {
		ex, ey = gx/g, gy/g
	}
	ks := p.signal.normal(sx, sy)
	sum, weights := 0.0, 0.0
	const n = 48 // equidistant points over ±4.8 rms: exact while the phase turns less than 12 rad an rms
	for i := range n {
		u := 9.6 * ((float64(i)+0.5)/n - 0.5)
		w := math.Exp(-u * u / 2)
		for side := -1.0; side < 2; side += 2 { // across, one rms to each side is exact to third order
			qx, qy := p.qp+(u*ex-side*ey)/waistMm, (u*ey+side*ex)/waistMm
			weights += w
			if v := Sinc2(p.PumpNormal(qx, qy)-ks-p.idler.normal(qx-sx, qy-sy), p.lengthMm); !math.IsNaN(v) {
				sum += w * v
			}
		}
	}
	return sum / weights
}

// EmissionWithPumpMrad is EmissionMrad for a pump of a waist instead of a plane wave: its spread
// of directions, together with its walk-off, widens the ring. The width is that of the singles in
// external polar angle at one wavelength.
func (p *Pair) EmissionWithPumpMrad(polarDeg, azimuthDeg, waistUm float64) (Width, error) {
	if !(waistUm > 0 && p.lengthMm > 0) {
		return Width{}, errors.New("phasematch: waist or thickness 0; want both, the width of the ring depends on them")
	}
	bare, err := p.EmissionMrad(polarDeg, azimuthDeg)
	if err != nil {
		return Width{}, err
	}
	sinPhi, cosPhi := math.Sincos(azimuthDeg * deg)
	density := func(t float64) float64 {
		s, c := math.Sincos(t)
		x, y := p.onFace(s, c, sinPhi, cosPhi)
		return p.spread(p.signal.k0*x, p.signal.k0*y, waistUm/1000)
	}
	step := bare.FWHM / 1000 / 20
	return halfMaxima(density, polarDeg*deg, step, 0, 1000)
}

// SpectralWithPumpNm is SpectralNm for a pump of a waist.
func (s *Slab) SpectralWithPumpNm(signalNm, polarDeg, azimuthDeg, waistUm float64) (Width, error) {
	if !(waistUm > 0) {
		return Width{}, errors.New("phasematch: waist 0; want one, the width of the band depends on it")
	}
	bare, err := s.SpectralNm(signalNm, polarDeg, azimuthDeg)
	if err != nil {
		return Width{}, err
	}
	st, ct := math.Sincos(polarDeg * deg)
	sp, cp := math.Sincos(azimuthDeg * deg)
	density := func(nm float64) float64 {
		p, err := s.At(nm)
		if err != nil {
			return math.NaN()
		}
		x, y := p.onFace(st, ct, sp, cp)
		return p.spread(p.signal.k0*x, p.signal.k0*y, waistUm/1000)
	}
	return halfMaxima(density, signalNm, bare.FWHM/20, s.PumpNm*1.02, 1)
}

// halfMaxima finds the width of a hump around a point, in units of 1/scale. It is open where the
// function ends (NaN, or lo) before it has fallen to a half.
func halfMaxima(f func(float64) float64, at, step, lo, scale float64) (Width, error) {
	top := maximum(func(x float64) float64 {
		if v := f(x); !math.IsNaN(v) && x >= lo {
			return v
		}
		return 0
	}, at-8*step, at+8*step, 16)
	half := f(top) / 2
	var w Width
	edge := func(step float64) float64 {
		a, fa := top, -half
		for range 4000 {
			b := a + step
			v := f(b)
			if b < lo || math.IsNaN(v) {
				w.Open = true
				return a
			}
			fb := half - v
			if fb >= 0 {
				return bracketed(func(x float64) float64 { return half - f(x) }, a, b, fa, fb)
			}
			a, fa = b, fb
		}
		w.Open = true
		return a
	}
	w.FWHM = (edge(step) - edge(-step)) * scale
	if !(w.FWHM > 0) {
		return Width{}, errNoEmission
	}
	return w, nil
}
