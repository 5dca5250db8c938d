// Package crystal holds published dispersion formulas as data: for each set the refractive
// indices of its axes over a stated range of vacuum wavelengths, their temperature terms where
// they are published, and where all of it was read. Indices are absolute, the outside index is
// exactly 1.
//
// The package refuses a wavelength outside a set's range (ErrRange) unless the caller asks for
// extrapolation, and it never mixes two sets: absolute emission angles differ by a degree
// between sets of one crystal, so a number is worth something only within one named set.
package crystal

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
)

// Class says how many optic axes a crystal has.
type Class string

// The two classes that phase match by birefringence.
const (
	Uniaxial Class = "uniaxial"
	Biaxial  Class = "biaxial"
)

// Axis names a principal index: o and e of a uniaxial crystal, x, y and z of a biaxial one.
type Axis string

// The principal indices. In biaxial sets n_x < n_y < n_z.
const (
	Ordinary      Axis = "o"
	Extraordinary Axis = "e"
	X             Axis = "x"
	Y             Axis = "y"
	Z             Axis = "z"
)

// ErrRange is wrapped by every complaint about a wavelength outside the range of a set.
var ErrRange = errors.New("outside the range of the set")

// A Pole is one term num·L^power/(L² − pole), with L in micrometres and pole in um².
type Pole struct {
	Num   float64
	Power int
	Pole  float64
}

// A Power is one term coef·L^power, with L in micrometres.
type Power struct {
	Coef  float64
	Power int
}

// Jundt holds the temperature-dependent form of one axis, which replaces the terms:
// n² = a1 + b1 f + (a2 + b2 f)/(L² − (a3 + b3 f)²) + (a4 + b4 f)/(L² − a5²) − a6 L² with
// f = (T − 24.5)(T + 570.82), T in degrees Celsius.
type Jundt struct {
	A [6]float64
	B [4]float64
}

// A Dispersion is one principal index of a set:
// n² = Constant + Σ Num·L^Power/(L² − Pole) + Σ Coef·L^Power.
type Dispersion struct {
	Axis     Axis
	Formula  string // the same, as published, for people and for a test that compares the two
	Constant float64
	Poles    []Pole
	Powers   []Power
	RangeUm  [2]float64
	DnDT     []Power // dn/dT in 1/K as terms in L; nil when none is published
	DnDTKind string  // kind of source of DnDT: "a" read, "c" recalled from memory
	Jundt    *Jundt
	Note     string
	Database string // path in the public refractive-index database (CC0), where it was read there
}

// A Set is one published set of formulas. Treat it as read-only: copies share their slices.
type Set struct {
	Name          string
	Title         string
	Class         Class
	Sign          string // "negative" or "positive" for uniaxial sets
	Reference     string
	DOI           string
	Source        string // where the coefficients were read
	SourceKind    string // "a" read in a public source, "c" recalled from memory
	RefCel        float64
	RefNote       string
	DnDTReference string
	DnDTWarning   string
	DnDTRangeUm   [2]float64 // zero where the source states none
	Notes         []string
	Axes          []Dispersion
}

// Names lists the published sets in alphabetical order.
func Names() []string {
	all := published()
	names := make([]string, len(all))
	for i, s := range all {
		names[i] = s.Name
	}
	slices.Sort(names)
	return names
}

// Named returns a published set. The error lists what there is, the nearest name first.
func Named(name string) (Set, error) {
	for _, s := range published() {
		if s.Name == name {
			return s, nil
		}
	}
	names, near := Names(), ""
	if name == "" {
		return Set{}, fmt.Errorf("crystal: nothing; want one of %s", strings.Join(names, ", "))
	}
	if n := nearest(name, names); n != "" {
		near = fmt.Sprintf("%q, which is nearest, or ", n)
	}
	if len(name) > 64 {
		name = name[:64] + "…"
	}
	return Set{}, fmt.Errorf("crystal: %q is not a set that this program knows; want %sone of %s", name, near, strings.Join(names, ", "))
}

// nearest is the name that shares most pieces of three letters with what was written, "" where none
// shares any.
func nearest(written string, names []string) string {
	written = strings.ToLower(written)
	best, most := "", 0
	for _, name := range names {
		n := 0
		for i := range len(name) - 2 {
			if strings.Contains(written, name[i:i+3]) {
				n++
			}
		}
		if n > most {
			best, most = name, n
		}
	}
	return best
}

// Own builds a set from a user's own terms. The range of each axis must be stated: a formula
// without one cannot be refused where it is wrong.
func Own(s Set) (Set, error) {
	want := []Axis{Ordinary, Extraordinary}
	if s.Class == Biaxial {
		want = []Axis{X, Y, Z}
	} else if s.Class != Uniaxial {
		return Set{}, fmt.Errorf("crystal: class %q; want %q or %q", s.Class, Uniaxial, Biaxial)
	}
	if len(s.Axes) != len(want) {
		return Set{}, fmt.Errorf("crystal: %d dispersion formulas; want %d, for n_%s", len(s.Axes), len(want), joinAxes(want))
	}
	for _, a := range want {
		i := slices.IndexFunc(s.Axes, func(d Dispersion) bool { return d.Axis == a })
		if i < 0 {
			return Set{}, fmt.Errorf("crystal: no dispersion formula for n_%s; want one for n_%s", a, joinAxes(want))
		}
		if err := s.Axes[i].check(); err != nil {
			return Set{}, fmt.Errorf("crystal: n_%s: %w", a, err)
		}
	}
	if s.Class == Uniaxial {
		d, e := s.dispersion(Ordinary), s.dispersion(Extraordinary)
		lo, hi := max(d.RangeUm[0], e.RangeUm[0]), min(d.RangeUm[1], e.RangeUm[1])
		if lo >= hi {
			return Set{}, errors.New("crystal: the ranges of n_o and n_e do not meet; want a common range")
		}
		// The sign decides which processes can be matched, so it is computed, never believed.
		mid := (lo + hi) / 2
		s.Sign = "negative"
		if e.at(mid, s.RefCel, s.RefCel) > d.at(mid, s.RefCel, s.RefCel) {
			s.Sign = "positive"
		}
	}
	return s, nil
}

func joinAxes(axes []Axis) string {
	parts := make([]string, len(axes))
	for i, a := range axes {
		parts[i] = string(a)
	}
	return strings.Join(parts, ", n_")
}

func (d *Dispersion) check() error {
	if !(d.RangeUm[0] > 0 && d.RangeUm[1] > d.RangeUm[0]) {
		return fmt.Errorf("range %v um; want two rising wavelengths in micrometres", d.RangeUm)
	}
	for _, p := range d.Poles {
		if p.Pole >= d.RangeUm[0]*d.RangeUm[0] && p.Pole <= d.RangeUm[1]*d.RangeUm[1] {
			return fmt.Errorf("the pole at L² = %g um² lies inside the range %v um; want it outside", p.Pole, d.RangeUm)
		}
		if p.Num == 0 && p.Pole == 0 {
			return errors.New("a term 0/(L² − 0); want it left out, some data files pad with such terms")
		}
	}
	const steps = 32
	for i := range steps + 1 {
		um := d.RangeUm[0] + (d.RangeUm[1]-d.RangeUm[0])*float64(i)/steps
		if n := d.at(um, 20, 20); !(n >= 1 && n < 10) {
			return fmt.Errorf("index %.4g at %.4g um; want a number between 1 and 10 over the whole range", n, um)
		}
	}
	return nil
}

func (s *Set) dispersion(a Axis) *Dispersion {
	for i := range s.Axes {
		if d := &s.Axes[i]; d.Axis == a {
			return d
		}
	}
	return nil
}

// Index returns the principal index of an axis at a vacuum wavelength and crystal temperature.
// It fails with ErrRange outside the range that the source gives.
func (s *Set) Index(a Axis, nm, cel float64) (float64, error) {
	d := s.dispersion(a)
	if d == nil {
		return 0, fmt.Errorf("crystal: %s has no n_%s; it is %s", s.Name, a, s.Class)
	}
	if err := s.rangeOf(d, nm); err != nil {
		return 0, err
	}
	return s.evaluate(d, nm, cel)
}

// Extrapolate is Index without the refusal, for callers that flag what they print. It still
// fails where the formula gives no index at all.
func (s *Set) Extrapolate(a Axis, nm, cel float64) (float64, error) {
	d := s.dispersion(a)
	if d == nil {
		return 0, fmt.Errorf("crystal: %s has no n_%s; it is %s", s.Name, a, s.Class)
	}
	return s.evaluate(d, nm, cel)
}

func (s *Set) evaluate(d *Dispersion, nm, cel float64) (float64, error) {
	n := d.at(nm/1000, cel, s.RefCel)
	if !(n >= 0.1 && n < 100) {
		return 0, fmt.Errorf("crystal: %s n_%s: the formula gives no index at %g nm; want a wavelength nearer to %g to %g nm: %w",
			s.Name, d.Axis, nm, d.RangeUm[0]*1000, d.RangeUm[1]*1000, ErrRange)
	}
	return n, nil
}

// CheckRange returns an error that wraps ErrRange where a wavelength is outside the range of
// any axis of the set, and nil elsewhere.
func (s *Set) CheckRange(nm float64) error {
	for i := range s.Axes {
		if err := s.rangeOf(&s.Axes[i], nm); err != nil {
			return err
		}
	}
	return nil
}

func (s *Set) rangeOf(d *Dispersion, nm float64) error {
	// A hair of tolerance, because 1064 nm and 1.064 um are the same wavelength to a user.
	const hair = 1e-9
	um := nm / 1000
	if um >= d.RangeUm[0]*(1-hair) && um <= d.RangeUm[1]*(1+hair) {
		return nil
	}
	return fmt.Errorf("crystal: %s n_%s: %g nm; want %g to %g nm: %w", s.Name, d.Axis, nm, d.RangeUm[0]*1000, d.RangeUm[1]*1000, ErrRange)
}

// HasTemperature reports whether the set has temperature terms on every axis. Without them
// Index ignores the temperature, which a caller that was given one should say.
func (s *Set) HasTemperature() bool {
	for _, d := range s.Axes {
		if d.Jundt == nil && d.DnDT == nil {
			return false
		}
	}
	return len(s.Axes) > 0
}

// at evaluates the terms. It is NaN where n² is negative.
func (d *Dispersion) at(um, cel, refCel float64) float64 {
	l2 := um * um
	if d.Jundt != nil {
		a, b := &d.Jundt.A, &d.Jundt.B
		f := (cel - 24.5) * (cel + 570.82)
		p := a[2] + b[2]*f
		return math.Sqrt(a[0] + b[0]*f + (a[1]+b[1]*f)/(l2-p*p) + (a[3]+b[3]*f)/(l2-a[4]*a[4]) - a[5]*l2)
	}
	n2 := d.Constant
	for _, p := range d.Poles {
		n2 += p.Num * power(um, p.Power) / (l2 - p.Pole)
	}
	for _, p := range d.Powers {
		n2 += p.Coef * power(um, p.Power)
	}
	n := math.Sqrt(n2)
	if d.DnDT != nil && cel != refCel {
		slope := 0.0
		for _, p := range d.DnDT {
			slope += p.Coef * power(um, p.Power)
		}
		n += slope * (cel - refCel)
	}
	return n
}

func power(x float64, n int) float64 {
	if n < 0 {
		return 1 / power(x, -n)
	}
	y := 1.0
	for range n {
		y *= x
	}
	return y
}
