// Package source turns the true state of a bench into count rates and counts: phase-matched
// pairs through both arms' apertures and filters, fluorescence, stray and room light, detectors
// with dead time and afterpulses, and a coincidence counter.
//
// It promises that Rates is a pure function of the pose (what was asked before changes how
// fast the answer comes, never the answer), that the coincidence rate never exceeds either
// singles rate, and that the same random generator gives the same counts. It has no clock and
// starts nothing. It refuses optics that it cannot honestly model: New says what and why.
//
// Light is collected incoherently: an aperture is a transmittance for directions, one inside an
// iris, exp(-2 r²/w²) for a Gaussian mode of 1/e² intensity radius w at the arm's distance. The
// crystal is a point seen from there, that is, the distance is long against the pump's Rayleigh
// length. Fresnel losses belong into an arm's transmittance.
package source

import (
	"math"

	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

// Optics describes the bench as it was built, which does not change during a night. What does
// change is in Pose.
type Optics struct {
	Crystal     crystal.Set
	Process     phasematch.Process
	CutDeg      float64
	ThicknessMm float64
	PolingUm    float64 // period along the face normal, 0 for a crystal that is not poled
	CrystalCel  float64 // temperature at which the declared pair rate holds
	AzimuthDeg  float64 // of the half-plane in which the signal arm turns
	Extrapolate bool    // use the crystal set outside its range; Model.Warnings says so

	PumpNm      float64
	PumpWaistUm float64 // 1/e² intensity radius, at the crystal
	PumpW       float64 // nominal; the pose carries what there is
	// PumpOffDeg is by how far the pump's polarisation is turned from the one that is phase-matched, with
	// the wave plate at 0. The plate turns it by twice its own angle: at half of this it is right. The
	// declared pair rate holds for a polarisation that is right.
	PumpOffDeg float64

	// The absolute scale: one of the two, the other 0. PairHzPerMw is the rate of pairs a
	// milliwatt of pump at which both photons pass apertures and filters, before transmittances
	// and detectors, with the crystal untilted and both arms on the predicted emission of the
	// signal filter's centre. NonlinearPmPerV is d_eff, from which the rate follows.
	PairHzPerMw     float64
	NonlinearPmPerV float64

	Signal, Idler Arm
	Counter       Counter
}

// The kinds of aperture.
const (
	Iris     = "iris"
	Gaussian = "gaussian"
)

// The shapes of a filter. Both have a peak transmittance of one; what they lose at the peak
// belongs into the arm's transmittance.
const (
	FilterGaussian = "gaussian"
	FilterFlat     = "flat"
)

// Arm is one collection arm.
type Arm struct {
	Aperture      string  // Iris or Gaussian
	RadiusMm      float64 // of the iris, or 1/e² intensity radius of the mode
	DistanceMm    float64 // from the crystal
	OutOfPlaneDeg float64 // angle by which the aperture's centre misses the plane the arms turn in,
	// positive for both arms on the side of azimuth + 90 deg: partners want opposite signs

	Filter        Filter
	Transmittance float64 // from inside the crystal to the detector, at the collected wavelength
	Polarised     bool    // passes only the polarisation that the process gives this arm
	Detector      Detector

	// Light without partners that follows the pump, in recorded events a second and watt of pump,
	// detector efficiency included. Both stay when phase matching is spoiled.
	FluorescenceHzPerW float64
	StrayHzPerW        float64
}

// Filter is a band pass. A width of 0 means that there is none.
type Filter struct {
	CentreNm float64
	WidthNm  float64 // full width at half maximum
	Shape    string  // FilterGaussian or FilterFlat
}

// Tilted is an interference filter of an effective index as light sees it that meets it under an
// angle: the band moves to shorter waves by sqrt(1 - sin²angle/index²), and keeps its relative width
// (thin-film optics, recalled from memory). The two polarisations part at large angles, which is not
// in it, nor the spread of angles within an aperture.
func (f Filter) Tilted(angleDeg, index float64) Filter {
	s := math.Sin(angleDeg*deg) / index
	by := math.Sqrt(1 - s*s)
	f.CentreNm, f.WidthNm = f.CentreNm*by, f.WidthNm*by
	return f
}

// The two dead-time models (Knoll, Radiation Detection and Measurement).
const (
	NonParalysable = "non-paralysable"
	Paralysable    = "paralysable"
)

// Detector is one photon-counting detector.
type Detector struct {
	Efficiency  float64
	DarkHz      float64
	DeadTimeS   float64
	Model       string  // NonParalysable or Paralysable; needed with a dead time
	Afterpulse  float64 // chance that a recorded event leaves an afterpulse behind
	AfterpulseS float64 // mean delay of the afterpulse after the end of the dead time
	LatchHz     float64 // above this rate the detector latches and gives nothing; 0: never
}

// What a counter does when more than one partner falls into the window of one herald.
const (
	EveryPair    = "every_pair"     // counts every pair
	OnePerHerald = "one_per_herald" // counts a signal event once, if it has any partner
)

// Counter is the coincidence counter.
type Counter struct {
	WindowS float64 // full width: a pair counts when |t1 - t2| <= WindowS/2
	JitterS float64 // rms of the difference between the two arrival times of a pair
	DelayS  float64 // by how far the delay between the channels is set wrong
	Logic   string  // EveryPair or OnePerHerald
}

// Pose is the true state of the bench at an instant. Angles are external degrees.
type Pose struct {
	// Both positive: the signal arm stands on the + side of the plane, the idler arm on the
	// opposite side, each counted away from the pump.
	SignalDeg, IdlerDeg float64
	TiltDeg             float64
	WaveplateDeg        float64 // pump half-wave plate, from the phase-matched setting; 45 spoils
	PumpW, PumpNm       float64
	CrystalCel          float64
	PumpOpen            float64 // share of the pump that passes the shutter, 0 to 1
	SignalOpen          float64 // detector shutters, 0 to 1
	IdlerOpen           float64
	RoomHz              [2]float64 // recorded room light at signal and idler detector, when open

	// What settings change. Zero is the bench as it was built.
	DelayS   float64    // by how far the delay between the channels is set wrong
	RadiusMm [2]float64 // of the signal and the idler arm's iris; 0: as built
	Gain     [2]float64 // relative change of the detectors' efficiencies: -0.1 leaves nine tenths
}

// Rates are rates of detection events: efficiency and dark counts are in, dead time, afterpulses
// and the counter are not. PairsHz are true coincident detections and contained in both others.
type Rates struct {
	SignalHz, IdlerHz, PairsHz float64

	DelayS float64 // the pose's: the counter's window lies so much further off the pairs
}
