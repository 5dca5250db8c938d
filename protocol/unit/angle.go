// Package unit holds the quantities that every room of the house shares: angles that are
// exact, and the reading and printing of values that carry their unit ("1.5 deg", "2 s",
// "405 nm"). It imports the standard library only. A plain number where a unit belongs is
// an error here, because a bench where 5 may mean seconds or milliseconds is not safe.
package unit

import (
	"errors"
	"fmt"
	"math"
	"math/big"
	"math/bits"
	"strings"
)

// Angle is a plane angle in whole micro-arcseconds. Degrees to a millionth, arc minutes and
// arc seconds are exact and compare with ==; only radians round, once, where they enter.
// The largest angle is about 2.5 million degrees.
type Angle int64

// The units an angle is counted in.
const (
	MicroArcsecond Angle = 1
	Arcsecond            = 1_000_000 * MicroArcsecond
	Arcminute            = 60 * Arcsecond
	Degree               = 60 * Arcminute
	Turn                 = 360 * Degree
)

// maxAngle keeps sums and differences of any two angles inside int64.
const maxAngle = math.MaxInt64 / 4

// Degrees rounds deg to the nearest micro-arcsecond.
func Degrees(deg float64) Angle { return Angle(math.Round(deg * float64(Degree))) }

// Radians rounds rad to the nearest micro-arcsecond.
func Radians(rad float64) Angle { return Degrees(rad * 180 / math.Pi) }

// Degrees returns the angle as a floating-point number of degrees.
func (a Angle) Degrees() float64 { return float64(a) / float64(Degree) }

// Radians returns the angle in radians.
func (a Angle) Radians() float64 { return a.Degrees() * math.Pi / 180 }

// Abs returns the magnitude of the angle.
func (a Angle) Abs() Angle {
	if a < 0 {
		return -a
	}
	return a
}

// String prints the angle in degrees, as short as can be read back exactly: "2.85 deg".
func (a Angle) String() string { return a.decimal() + " deg" }

// exactDecimals of a degree tell any two angles apart: a micro-arcsecond is 2.8e-10 deg.
const exactDecimals = 10

// Fixed prints degrees with n decimals (0 to 10) and no unit, never as "-0.000".
func (a Angle) Fixed(n int) string {
	if n < 0 || n > exactDecimals {
		panic(fmt.Sprintf("unit: %d decimals of a degree; 0 to %d are possible", n, exactDecimals))
	}
	s := big.NewRat(int64(a), int64(Degree)).FloatString(n)
	if strings.Trim(s, "-0.") == "" {
		s = strings.TrimPrefix(s, "-")
	}
	return s
}

func (a Angle) decimal() string {
	// A micro-arcsecond is 25/9 of 10^-10 degrees.
	if high, low := bits.Mul64(magnitude(int64(a)), 25); high < 9 {
		n, rest := bits.Div64(high, low, 9)
		if rest > 4 {
			n++
		}
		return fixed(a < 0, n, exactDecimals)
	}
	s := strings.TrimRight(a.Fixed(exactDecimals), "0")
	return strings.TrimSuffix(s, ".")
}

// MarshalJSON writes the angle as a plain number of degrees; the field's name carries the unit.
func (a Angle) MarshalJSON() ([]byte, error) { return []byte(a.decimal()), nil }

// UnmarshalJSON reads a plain number of degrees.
func (a *Angle) UnmarshalJSON(b []byte) error {
	v, err := ParseAngleIn(string(b), "deg")
	if err != nil {
		return err
	}
	*a = v
	return nil
}

var angleUnits = map[string]Angle{
	"deg":    Degree,
	"arcmin": Arcminute,
	"arcsec": Arcsecond,
	"mrad":   0, // irrational in degrees: rounds once
}

// ParseAngle reads "1.5 deg", "30 arcmin", "12 arcsec" or "4.2 mrad".
func ParseAngle(text string) (Angle, error) {
	number, name, err := split(text, Plane)
	if err != nil {
		return 0, err
	}
	return ParseAngleIn(number, name)
}

// ParseAngleIn reads a decimal number that counts the named angle unit, exactly where the
// unit allows; what is finer than a micro-arcsecond is rounded.
func ParseAngleIn(number, name string) (Angle, error) {
	per, ok := angleUnits[name]
	if !ok {
		return 0, &Error{Text: number + " " + name, Found: fmt.Sprintf("unit %q", name), Want: "an angle in deg, mrad, arcmin or arcsec"}
	}
	if name == "mrad" {
		f, err := decimalFloat(number)
		if err != nil {
			return 0, err
		}
		if deg := f / 1000 * 180 / math.Pi; math.Abs(deg) < maxAngle/float64(Degree) {
			return Degrees(deg), nil
		}
		return 0, errTooLarge(number, name)
	}
	if err := checkDecimal(number); err != nil {
		return 0, err
	}
	n, _, ok := scaled(number, uint64(per), false)
	if !ok || n > maxAngle || n < -maxAngle {
		return 0, errTooLarge(number, name)
	}
	return Angle(n), nil
}

func errTooLarge(number, name string) error {
	return &Error{Text: number + " " + name, Found: number + " " + name, Want: "an angle below 600000 deg"}
}

// Error says what a value was, and what would have been one.
type Error struct {
	Text  string // the whole text given
	Found string // what is wrong in it
	Want  string // what is allowed
}

func (e *Error) Error() string { return fmt.Sprintf("%s; want %s", e.Found, e.Want) }

// ErrNoUnit marks a plain number where a quantity with a unit is wanted.
var ErrNoUnit = errors.New("has no unit")
