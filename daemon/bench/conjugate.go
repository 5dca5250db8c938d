package bench

import (
	"errors"
	"fmt"
	"math"

	"gemel/sim/phasematch"
)

// Roles of the two arms.
const (
	signalArm = "signal_arm"
	idlerArm  = "idler_arm"
)

// conjugate says into which angle of the other arm the partner goes of a photon that one arm sees
// at its filter's centre, for a crystal tilted so: momentum along the face is conserved. Bench
// angles in degrees; each arm counts away from the pump on its own side. What the partner leaves
// out of the arms' plane is not in the answer.
func (f *File) conjugate(role string, armDeg, tiltDeg float64) (float64, error) {
	o := f.Optics
	arm, process, azimuthDeg := o.Signal, o.Process, o.Azimuth.Degrees()
	switch role {
	case signalArm:
	case idlerArm:
		arm, process, azimuthDeg = o.Idler, process.Swapped(), azimuthDeg+180
	default:
		return 0, fmt.Errorf("an axis whose role is %q; want an arm", role)
	}
	if arm.Filter.Centre == 0 {
		return 0, fmt.Errorf("%s has no filter, so its photons have no wavelength; want a filter in the bench file", role)
	}
	slab := phasematch.Slab{Crystal: o.Crystal, Process: process, CutDeg: o.Cut.Degrees(), TiltDeg: tiltDeg, ThicknessMm: o.Thickness * 1e3,
		Cel: o.Temperature, PumpNm: o.PumpWavelength * 1e9, PolingUm: o.Poling * 1e6, Extrapolate: o.Extrapolate}
	pair, err := slab.At(arm.Filter.Centre * 1e9)
	if err != nil {
		return 0, err
	}
	polar, azimuth := laboratory(armDeg, arm.OutOfPlane.Degrees())
	partner := pair.Conjugate(polar, azimuth+azimuthDeg)
	in, _ := partner.InPlane(azimuthDeg + 180)
	if partner.ReflectedBack || math.IsNaN(in) {
		return 0, errors.New("the partner does not leave the crystal: it is totally reflected at the exit face, or cannot be at all")
	}
	return in, nil
}

// laboratory turns an angle in the arms' plane, and one out of it, into the polar angle to the pump
// and the azimuth from the arm's own side. All in degrees.
func laboratory(inDeg, outDeg float64) (polar, azimuth float64) {
	const deg = math.Pi / 180
	si, ci := math.Sincos(inDeg * deg)
	so, co := math.Sincos(outDeg * deg)
	return math.Acos(min(1, co*ci)) / deg, math.Atan2(so, co*si) / deg
}
