package source

import (
	"errors"
	"fmt"
	"math"
)

// Exact constants of the SI.
const (
	planck     = 6.62607015e-34 // J s
	lightSpeed = 299792458      // m/s
)

// PhotonHz is the rate of photons of a beam: P l/(h c).
func PhotonHz(watt, nm float64) float64 { return watt * nm * 1e-9 / (planck * lightSpeed) }

// RecordedHz is the rate that a detector of a dead time records of events at a true rate: n/(1 + n
// tau) when non-paralysable, n exp(-n tau) when paralysable (Knoll, Radiation Detection and
// Measurement).
func RecordedHz(model string, trueHz, deadS float64) float64 {
	if model == Paralysable {
		return trueHz * math.Exp(-trueHz*deadS)
	}
	return trueHz / (1 + trueHz*deadS)
}

// ErrSaturated is returned for a recorded rate that no true rate explains.
var ErrSaturated = errors.New("above what a detector of this dead time can record")

// TrueHz inverts RecordedHz, on the branch below the maximum for a paralysable detector, which
// records every rate but the largest twice.
func TrueHz(model string, recordedHz, deadS float64) (float64, error) {
	x := recordedHz * deadS
	if model != Paralysable {
		if x >= 1 {
			return 0, fmt.Errorf("source: recorded %g Hz; want less than %g Hz: %w", recordedHz, 1/deadS, ErrSaturated)
		}
		return recordedHz / (1 - x), nil
	}
	if x > 1/math.E {
		return 0, fmt.Errorf("source: recorded %g Hz; want at most %g Hz: %w", recordedHz, 1/(math.E*deadS), ErrSaturated)
	}
	// y e^-y = x on y <= 1, by Newton from below: the function is concave there.
	y := x
	for range 200 {
		e := math.Exp(-y)
		slope := e * (1 - y)
		if slope < 1e-12 {
			break
		}
		step := (y*e - x) / slope
		y -= step
		if math.Abs(step) <= 1e-16*y {
			break
		}
	}
	return y / deadS, nil
}

// AccidentalHz is the rate of accidental coincidences of two independent streams of recorded
// events in a window of a full width: R1 R2 tau (Eckart and Shonka, Phys. Rev. 53, 752 (1938)).
// A counter whose detectors are dead for longer than the window shows fewer beside true pairs:
// see Model.Expected.
func AccidentalHz(r1Hz, r2Hz, windowS float64) float64 { return r1Hz * r2Hz * windowS }
