package phasematch

import (
	"fmt"
	"strings"

	"gemel/sim/crystal"
)

// Plane is a principal plane of a biaxial crystal.
type Plane string

// The three principal planes. Angles in xy are counted from x towards y, in xz and yz from z.
const (
	XY Plane = "xy"
	XZ Plane = "xz"
	YZ Plane = "yz"
)

// axes returns the axis normal to the plane, and those along which a wave at 0 and at 90 deg is
// polarised when it is polarised in the plane.
func (p Plane) axes() (normal, at0, at90 crystal.Axis, err error) {
	switch p {
	case XY:
		return crystal.Z, crystal.Y, crystal.X, nil
	case XZ:
		return crystal.Y, crystal.X, crystal.Z, nil
	case YZ:
		return crystal.X, crystal.Y, crystal.Z, nil
	}
	return "", "", "", fmt.Errorf("phasematch: plane %q; want one of %s, %s, %s", string(p), XY, XZ, YZ)
}

// Biaxial is collinear phase matching in a principal plane. Outside the principal planes this
// package computes nothing.
type Biaxial struct {
	Crystal crystal.Set
	Plane   Plane
	// Scheme names the polarisations of signal, idler and pump, as in "zp-p": p lies in the plane,
	// the plane's normal is called by its own letter.
	Scheme      string
	PumpNm      float64
	SignalNm    float64
	Cel         float64
	Extrapolate bool
}

// AnglesDeg lists the matched angles in the plane, rising.
func (b Biaxial) AnglesDeg() ([]float64, error) {
	w, err := b.waves()
	if err != nil {
		return nil, err
	}
	return matchAngles(w), nil
}

// WalkoffDeg is the walk-off, at an angle in the plane, of the waves polarised in it: pump,
// signal, idler, 0 for those along the normal.
func (b Biaxial) WalkoffDeg(angleDeg float64) ([3]float64, error) {
	var rho [3]float64
	w, err := b.waves()
	if err != nil {
		return rho, err
	}
	for i := range w {
		if w[i].inPlane {
			rho[i] = WalkoffDeg(w[i].at0, w[i].at90, angleDeg)
		}
	}
	return rho, nil
}

func (b Biaxial) waves() ([3]planeWave, error) {
	var w [3]planeWave
	if b.Crystal.Class != crystal.Biaxial {
		return w, fmt.Errorf("phasematch: %s is %s; want a biaxial crystal", b.Crystal.Name, b.Crystal.Class)
	}
	normal, at0, at90, err := b.Plane.axes()
	if err != nil {
		return w, err
	}
	letter := string(normal)
	daughters, pump, ok := strings.Cut(b.Scheme, "-")
	if !ok || len(daughters) != 2 || len(pump) != 1 || strings.Trim(daughters+pump, "p"+letter) != "" {
		return w, fmt.Errorf(`phasematch: scheme %q; want three letters of p and %s such as "%s%s-p"`, b.Scheme, letter, letter, letter)
	}
	if !(b.SignalNm > b.PumpNm) {
		return w, fmt.Errorf("phasematch: signal %g nm with a pump of %g nm; want a longer wavelength than the pump's", b.SignalNm, b.PumpNm)
	}
	index := b.Crystal.Index
	if b.Extrapolate {
		index = b.Crystal.Extrapolate
	}
	pols := pump + daughters
	for i, nm := range [3]float64{b.PumpNm, b.SignalNm, Idler(b.PumpNm, b.SignalNm)} {
		w[i].nm, w[i].inPlane = nm, pols[i] == 'p'
		for _, x := range []struct {
			to   *float64
			axis crystal.Axis
		}{{&w[i].normal, normal}, {&w[i].at0, at0}, {&w[i].at90, at90}} {
			if *x.to, err = index(x.axis, nm, b.Cel); err != nil {
				return w, err
			}
		}
	}
	return w, nil
}
