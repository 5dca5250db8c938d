package bench

import (
	"errors"
	"fmt"
	"math"

	"gemel/sim/phasematch"
)

// Roles of axes that do something to the light.
const (
	signalArm     = "signal_arm"
	idlerArm      = "idler_arm"
	crystalTilt   = "crystal_tilt"
	pumpWaveplate = "pump_waveplate"
)

// conjugate says into which angle of the other arm the partner goes of a photon that one arm sees
// at its filter's centre, for a crystal tilted so: momentum along the face is conserved. Bench
// angles in degrees; each arm counts away from the pump on its own side. What the partner leaves
// out of the arms' plane is not in the answer.
func (f *File) conjugate(role string, armDeg, tiltDeg float64) (float64, error) {
	pair, arm, azimuthDeg, err := f.seen(role, tiltDeg)
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

// seen are the pairs whose one photon has the filter's centre of an arm, that photon first, for a
// crystal tilted so; and the half-plane that arm turns in.
func (f *File) seen(role string, tiltDeg float64) (pair phasematch.Pair, arm Arm, azimuthDeg float64, err error) {
	o := f.Optics
	process := o.Process
	arm, azimuthDeg = o.Signal, o.Azimuth.Degrees()
	switch role {
	case signalArm:
	case idlerArm:
		arm, process, azimuthDeg = o.Idler, process.Swapped(), azimuthDeg+180
	default:
		return pair, arm, 0, fmt.Errorf("an axis whose role is %q; want an arm", role)
	}
	if arm.Filter.Centre == 0 {
		return pair, arm, 0, fmt.Errorf("%s has no filter, so its photons have no wavelength; want a filter in the bench file", role)
	}
	slab := phasematch.Slab{Crystal: o.Crystal, Process: process, CutDeg: o.Cut.Degrees(), TiltDeg: tiltDeg, ThicknessMm: o.Thickness * 1e3,
		Cel: o.Temperature, PumpNm: o.PumpWavelength * 1e9, PolingUm: o.Poling * 1e6, Extrapolate: o.Extrapolate}
	pair, err = slab.At(arm.Filter.Centre * 1e9)
	return pair, arm, azimuthDeg, err
}

// emission is the bench angle in degrees at which an arm sees the light of its filter's centre, for
// a crystal tilted so: on its own side of the pump. Where two directions are matched it is the first
// of the model's, which a simulated bench's rate holds for.
func (f *File) emission(role string, tiltDeg float64) (float64, error) {
	pair, arm, azimuthDeg, err := f.seen(role, tiltDeg)
	if err != nil {
		return 0, err
	}
	out := arm.OutOfPlane.Degrees()
	in, azimuth := math.NaN(), 0.0
	for range 20 { // beside its plane an arm meets the ring at another azimuth
		e := pair.Emission(azimuthDeg + azimuth)
		if e.N == 0 {
			return 0, fmt.Errorf("no emission at the filter's centre with the crystal tilted by %g deg: %s", tiltDeg, e.Because())
		}
		c := math.Cos(e.Root[0].Signal.PolarDeg*math.Pi/180) / math.Cos(out*math.Pi/180)
		if c > 1 {
			return 0, fmt.Errorf("the ring of %.4g deg passes under the arm, which is %g deg out of the plane", e.Root[0].Signal.PolarDeg, out)
		}
		before := in
		in = math.Acos(c) * 180 / math.Pi
		if out == 0 || math.Abs(in-before) < 1e-7 {
			break
		}
		_, azimuth = laboratory(in, out)
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
