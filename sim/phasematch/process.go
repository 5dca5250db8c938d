// Package phasematch says where the photons of a pair go: which directions and wavelengths
// conserve energy and momentum in a birefringent slab, how wide the answer is, and how it moves
// with cut, tilt, temperature and pump.
//
// Conventions. Wavelengths are vacuum wavelengths in nanometres, angles degrees unless a name
// says otherwise, z along the incoming pump, the optic axis in the x-z plane on the +x side,
// azimuths counted from +x towards +y. External angles are measured in air from the incoming
// pump, not from the face normal. The cut is the angle between optic axis and face normal; a
// positive tilt increases the angle between pump and optic axis. The mismatch is
// k_p - k_s - k_i along the face normal, with the momentum along the face conserved exactly.
//
// The package refuses wavelengths outside the crystal set's range unless Slab.Extrapolate is
// set; a caller that sets it has to say so in what it prints. It knows plane faces and uniaxial
// crystals, and biaxial ones in their principal planes only.
package phasematch

import (
	"fmt"
	"slices"
)

// Process says how pump, signal and idler are polarised, in this order: e-oo is type I.
type Process string

// The processes that birefringence can match in a uniaxial crystal: the first three in negative
// crystals, the others in positive ones.
const (
	EOO Process = "e-oo"
	EOE Process = "e-oe"
	EEO Process = "e-eo"
	OEE Process = "o-ee"
	OOE Process = "o-oe"
	OEO Process = "o-eo"
)

// Processes lists them all, in the order above.
func Processes() []Process { return []Process{EOO, EOE, EEO, OEE, OOE, OEO} }

// Check refuses a process that is none of the six.
func (p Process) Check() error {
	if slices.Contains(Processes(), p) {
		return nil
	}
	return fmt.Errorf("phasematch: process %q; want one of %v", string(p), Processes())
}

// Rays says which of pump, signal and idler are extraordinary. It panics on what Check refuses for
// being no process at all.
func (p Process) Rays() (pump, signal, idler bool) {
	return p[0] == 'e', p[2] == 'e', p[3] == 'e'
}

// Swapped is the same process with the names of the daughters exchanged.
func (p Process) Swapped() Process { return p[:2] + p[3:4] + p[2:3] }
