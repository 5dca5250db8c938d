package phasematch

import (
	"errors"
	"fmt"
	"math"

	"gemel/sim/crystal"
)

const (
	deg = math.Pi / 180
	// halfMax is the argument at which sinc² falls to one half.
	halfMax = 1.3915573782515098
)

// Slab is a plane-parallel crystal in the pump.
type Slab struct {
	Crystal     crystal.Set // uniaxial
	Process     Process
	CutDeg      float64
	TiltDeg     float64
	ThicknessMm float64
	Cel         float64
	PumpNm      float64
	// PolingUm is the period of a poled crystal along the face normal, 0 without poling. The
	// condition becomes k_p = k_s + k_i + 2 pi/period; a negative period is the order -1.
	PolingUm    float64
	Extrapolate bool
}

// wave is one of the three waves at its wavelength: what its normal wave-vector component needs.
type wave struct {
	extraordinary bool
	k0            float64 // 2 pi/lambda in 1/mm
	kSq           float64 // (n_o k0)², of an ordinary wave
	// The extraordinary wave solves A kz² + 2 B qx kz + C = 0, its forward root.
	a, b, cxx, cyy float64
	k0Sq           float64
}

// Pair is a slab with the pump and both daughters at their wavelengths, ready to be asked for
// directions. It is a value without references; its methods allocate nothing.
type Pair struct {
	SignalNm, IdlerNm   float64
	pump, signal, idler wave
	sinTilt, cosTilt    float64
	qp                  float64 // pump momentum along the face, x component, 1/mm
	kpz                 float64
	grating             float64 // 2 pi/period, 1/mm
	lengthMm            float64
	sinCut, cosCut      float64
}

// Idler returns the wavelength of the other daughter by energy conservation. The signal must be
// longer than the pump.
func Idler(pumpNm, signalNm float64) float64 { return pumpNm * signalNm / (signalNm - pumpNm) }

// Check returns every reason for which the slab cannot be computed.
func (s *Slab) Check() error {
	var errs []error
	errorf := func(format string, a ...any) { errs = append(errs, fmt.Errorf("phasematch: "+format, a...)) }
	if s.Crystal.Class != crystal.Uniaxial {
		errorf("%s is %s; want a uniaxial crystal, biaxial ones are matched in principal planes only", s.Crystal.Name, s.Crystal.Class)
	}
	if err := s.checkProcess(); err != nil {
		errs = append(errs, err)
	}
	if !(s.CutDeg >= 0 && s.CutDeg <= 90) {
		errorf("cut %g deg; want 0 to 90", s.CutDeg)
	}
	if !(math.Abs(s.TiltDeg) < 80) {
		errorf("tilt %g deg; want less than 80", s.TiltDeg)
	}
	if !(s.ThicknessMm >= 0 && s.ThicknessMm < 1000) {
		errorf("thickness %g mm; want 0 to 1000", s.ThicknessMm)
	}
	if !(s.PumpNm > 0 && s.PumpNm < 1e5) {
		errorf("pump %g nm; want a vacuum wavelength", s.PumpNm)
	}
	if !(s.Cel > -273.15 && s.Cel < 2000) {
		errorf("temperature %g Cel; want -273.15 to 2000", s.Cel)
	}
	if math.IsNaN(s.PolingUm) || math.IsInf(s.PolingUm, 0) {
		errorf("poling %g um; want a period", s.PolingUm)
	}
	return errors.Join(errs...)
}

// checkProcess allows equal polarisations, which only poling can match, with poling.
func (s *Slab) checkProcess() error {
	if s.PolingUm != 0 && (s.Process == "e-ee" || s.Process == "o-oo") {
		return nil
	}
	return s.Process.Check()
}

// At prepares the slab for one signal wavelength. It fails outside the set's range (unless
// Slab.Extrapolate), and for a signal that is not longer than the pump.
func (s *Slab) At(signalNm float64) (Pair, error) {
	if !(signalNm > s.PumpNm) {
		return Pair{}, fmt.Errorf("phasematch: signal %g nm with a pump of %g nm; want a longer wavelength than the pump's", signalNm, s.PumpNm)
	}
	if err := s.checkProcess(); err != nil {
		return Pair{}, err
	}
	var p Pair
	p.SignalNm, p.IdlerNm = signalNm, Idler(s.PumpNm, signalNm)
	p.lengthMm = s.ThicknessMm
	p.sinCut, p.cosCut = math.Sincos(s.CutDeg * deg)
	p.sinTilt, p.cosTilt = 0, 1
	if s.TiltDeg != 0 {
		p.sinTilt, p.cosTilt = math.Sincos(s.TiltDeg * deg)
	}
	if s.PolingUm != 0 {
		p.grating = 2 * math.Pi / s.PolingUm * 1000
	}
	ePump, eSignal, eIdler := s.Process.Rays()
	if err := p.pump.set(s, &p, s.PumpNm, ePump); err != nil {
		return Pair{}, err
	}
	if err := p.signal.set(s, &p, p.SignalNm, eSignal); err != nil {
		return Pair{}, err
	}
	if err := p.idler.set(s, &p, p.IdlerNm, eIdler); err != nil {
		return Pair{}, err
	}
	p.qp = -p.pump.k0 * p.sinTilt
	p.kpz, _, _ = p.pump.kz(p.qp, 0)
	return p, nil
}

func (s *Slab) index(a crystal.Axis, nm float64) (float64, error) {
	if s.Extrapolate {
		return s.Crystal.Extrapolate(a, nm, s.Cel)
	}
	return s.Crystal.Index(a, nm, s.Cel)
}

func (w *wave) set(s *Slab, p *Pair, nm float64, extraordinary bool) error {
	no, err := s.index(crystal.Ordinary, nm)
	if err != nil {
		return err
	}
	w.k0 = 2 * math.Pi / nm * 1e6
	w.k0Sq = w.k0 * w.k0
	w.extraordinary = extraordinary
	w.kSq = no * no * w.k0Sq
	if !extraordinary {
		return nil
	}
	ne, err := s.index(crystal.Extraordinary, nm)
	if err != nil {
		return err
	}
	o, e := 1/(no*no), 1/(ne*ne)
	d := o - e
	w.a = e + d*p.cosCut*p.cosCut
	w.b = d * p.sinCut * p.cosCut
	w.cxx = e + d*p.sinCut*p.sinCut
	w.cyy = e
	return nil
}

// kz is the component along the face normal of a forward wave whose momentum along the face is
// (qx, qy), in 1/mm, with its derivatives. It is NaN where the wave cannot propagate inside.
func (w *wave) kz(qx, qy float64) (kz, dx, dy float64) {
	if !w.extraordinary {
		kz = math.Sqrt(w.kSq - qx*qx - qy*qy)
		inv := 1 / kz
		return kz, -qx * inv, -qy * inv
	}
	b := w.b * qx
	root := math.Sqrt(b*b - w.a*(w.cxx*qx*qx+w.cyy*qy*qy-w.k0Sq))
	kz = (root - b) / w.a
	inv := 1 / root
	return kz, -(w.cxx*qx + w.b*kz) * inv, -w.cyy * qy * inv
}

// theta is the angle between the optic axis and a wave vector inside, in degrees.
func (p *Pair) theta(qx, qy, kz float64) float64 {
	along := qx*p.sinCut + kz*p.cosCut
	ax, az := qx-along*p.sinCut, kz-along*p.cosCut
	return math.Atan2(math.Sqrt(ax*ax+az*az+qy*qy), along) / deg
}

// PumpAxisDeg is the angle between pump wave vector and optic axis inside the crystal.
func (p *Pair) PumpAxisDeg() float64 { return p.theta(p.qp, 0, p.kpz) }

// outside turns a direction in air, as sine and cosine of the polar angle and of the azimuth,
// into components along the face, in units of k0.
func (p *Pair) onFace(sinT, cosT, sinPhi, cosPhi float64) (x, y float64) {
	return sinT*cosPhi*p.cosTilt - cosT*p.sinTilt, sinT * sinPhi
}

// Direction is a direction in air.
type Direction struct {
	PolarDeg      float64 // to the incoming pump, 0 or more
	AzimuthDeg    float64 // 0 to 360, from the side of the optic axis
	InternalDeg   float64 // angle between the wave vectors of this photon and the pump, inside
	ReflectedBack bool    // cannot leave the exit face: the two angles in air mean nothing
}

// direction finds the direction in air of a wave with momentum (qx, qy) along the face.
func (p *Pair) direction(w *wave, qx, qy float64) Direction {
	var d Direction
	kz, _, _ := w.kz(qx, qy)
	// Angle to the pump inside, from the cross product: an arc cosine loses half the digits.
	cx, cy, cz := qy*p.kpz, kz*p.qp-qx*p.kpz, -qy*p.qp
	d.InternalDeg = math.Atan2(math.Sqrt(cx*cx+cy*cy+cz*cz), kz*p.kpz+qx*p.qp) / deg
	x, y := qx/w.k0, qy/w.k0
	nSq := 1 - x*x - y*y
	if !(nSq > 0) {
		d.ReflectedBack = true
		return d
	}
	n := math.Sqrt(nSq)
	lx, lz := x*p.cosTilt+n*p.sinTilt, n*p.cosTilt-x*p.sinTilt
	d.PolarDeg = math.Atan2(math.Sqrt(lx*lx+y*y), lz) / deg
	if d.AzimuthDeg = math.Atan2(y, lx) / deg; d.AzimuthDeg < 0 {
		d.AzimuthDeg += 360
	}
	return d
}

// InPlane splits a direction into the signed angle in the plane of an azimuth, positive on its
// side, and the angle out of that plane.
func (d Direction) InPlane(azimuthDeg float64) (inDeg, outDeg float64) {
	st, ct := math.Sincos(d.PolarDeg * deg)
	sp, cp := math.Sincos((d.AzimuthDeg - azimuthDeg) * deg)
	return math.Atan2(st*cp, ct) / deg, math.Asin(st*sp) / deg
}
