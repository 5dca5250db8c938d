package unit

import (
	"fmt"
	"math"
	"regexp"
	"sort"
	"strconv"
	"strings"
	"time"
)

// Kind says what a quantity measures. Each kind has one base unit, in which values are held.
type Kind string

// The kinds, with their base units.
const (
	Plane       Kind = "angle"       // deg, as float64; use Angle where it must be exact
	Time        Kind = "time"        // s
	Length      Kind = "length"      // m
	Rate        Kind = "rate"        // Hz, which is also counts per second
	Power       Kind = "power"       // W
	Temperature Kind = "temperature" // Cel
	Share       Kind = "share"       // 1
	Voltage     Kind = "voltage"     // V
	Current     Kind = "current"     // A
)

type scale struct {
	kind   Kind
	factor float64
	offset float64 // added after the factor: only temperatures have one
}

// Spellings are UCUM's where UCUM has one (case-sensitive, micro is u); "%" and "ppm" are shares.
var scales = map[string]scale{
	"deg": {Plane, 1, 0}, "mrad": {Plane, 180 / math.Pi / 1000, 0}, "arcmin": {Plane, 1. / 60, 0}, "arcsec": {Plane, 1. / 3600, 0},
	"ps": {Time, 1e-12, 0}, "ns": {Time, 1e-9, 0}, "us": {Time, 1e-6, 0}, "ms": {Time, 1e-3, 0}, "s": {Time, 1, 0}, "min": {Time, 60, 0}, "h": {Time, 3600, 0},
	"nm": {Length, 1e-9, 0}, "um": {Length, 1e-6, 0}, "mm": {Length, 1e-3, 0}, "cm": {Length, 1e-2, 0}, "m": {Length, 1, 0},
	"Hz": {Rate, 1, 0}, "kHz": {Rate, 1e3, 0}, "MHz": {Rate, 1e6, 0}, "/s": {Rate, 1, 0},
	"nW": {Power, 1e-9, 0}, "uW": {Power, 1e-6, 0}, "mW": {Power, 1e-3, 0}, "W": {Power, 1, 0},
	"Cel": {Temperature, 1, 0}, "K": {Temperature, 1, -273.15},
	"1": {Share, 1, 0}, "%": {Share, 1e-2, 0}, "ppm": {Share, 1e-6, 0},
	"uV": {Voltage, 1e-6, 0}, "mV": {Voltage, 1e-3, 0}, "V": {Voltage, 1, 0},
	"uA": {Current, 1e-6, 0}, "mA": {Current, 1e-3, 0}, "A": {Current, 1, 0},
}

// Units lists the spellings of a kind, the smallest first.
func Units(kind Kind) []string {
	var names []string
	for name, s := range scales {
		if s.kind == kind {
			names = append(names, name)
		}
	}
	sort.Slice(names, func(i, j int) bool {
		a, b := scales[names[i]], scales[names[j]]
		if a.factor != b.factor {
			return a.factor < b.factor
		}
		return names[i] < names[j]
	})
	return names
}

// Kinds lists all kinds.
func Kinds() []Kind {
	return []Kind{Plane, Time, Length, Rate, Power, Temperature, Share, Voltage, Current}
}

// Pattern is a regular expression, in the syntax that RE2 and ECMA-262 share and without anchors, for
// the quantities of a kind, or of any kind if it is empty. It matches all that Parse reads; where
// negative is false, all but those below zero, and a few of these that are nearly zero.
func Pattern(kind Kind, negative bool) string {
	kinds := []Kind{kind}
	if kind == "" {
		kinds = Kinds()
	}
	var names []string
	for _, k := range kinds {
		names = append(names, Units(k)...)
	}
	for i, name := range names {
		names[i] = regexp.QuoteMeta(name)
	}
	const space, mantissa, exponent = `[ \t\r\n]*`, `(?:[0-9]+\.?[0-9]*|\.[0-9]+)`, `(?:[eE][+-]?[0-9]{1,2})?`
	number := `[+-]?` + mantissa + exponent
	if !negative {
		// What is written with a minus may still be zero, or be rounded to it.
		number = `(?:\+?` + mantissa + exponent + `|-(?:0*\.[0-9]+|0+\.?)` + exponent + `|-` + mantissa + `[eE]-[0-9]{1,2})`
	}
	behind := ` ` + space + `(?:` + strings.Join(names, "|") + `)`
	if kind == "" || kind == Share {
		behind = `(?:` + behind + `|%)`
	}
	return space + number + behind + space
}

// sample is a value of the kind as it is written; of no kind two of them.
func sample(kind Kind) string {
	switch kind {
	case Plane:
		return `"1.5 deg"`
	case Time:
		return `"2 s"`
	case Length:
		return `"405 nm"`
	case Rate:
		return `"250 kHz"`
	case Power:
		return `"50 mW"`
	case Temperature:
		return `"20 Cel"`
	case Share:
		return `"65 %" or 0.65`
	case Voltage:
		return `"5 V"`
	case Current:
		return `"20 mA"`
	}
	return `"2 s" or "1.5 deg"`
}

// Example says what a value of the kind looks like, such as `a time such as "2 s"`.
func Example(kind Kind) string {
	article := "a "
	if strings.ContainsRune("aeiou", rune(kind[0])) {
		article = "an "
	}
	return article + string(kind) + " such as " + sample(kind)
}

// Parse reads a quantity of the given kind, such as "405 nm", and returns it in the base unit.
// The error is an *Error, or wraps ErrNoUnit for a plain number.
func Parse(text string, kind Kind) (float64, error) {
	v, got, _, err := parse(text, kind)
	if err != nil {
		return 0, err
	}
	if got != kind {
		return 0, wrongUnit(text, kind)
	}
	return v, nil
}

// ParseAny reads a quantity of whatever kind its unit says. It returns the value in the kind's
// base unit, the kind, and the unit as written.
func ParseAny(text string) (value float64, kind Kind, name string, err error) {
	return parse(text, "")
}

// parse is ParseAny for a text that should be of a kind, if one is named: its examples are of that.
func parse(text string, want Kind) (value float64, kind Kind, name string, err error) {
	number, name, err := split(text, want)
	if err != nil {
		return 0, "", "", err
	}
	s, ok := scales[name]
	if !ok {
		known := []string{"deg", "s", "ms", "nm", "mm", "mW", "kHz", "Cel", "%"}
		if want != "" {
			known = Units(want)
		}
		return 0, "", "", &Error{Text: text, Found: fmt.Sprintf("unknown unit %q", name), Want: "a unit such as " + strings.Join(known, ", ")}
	}
	f, err := decimalFloat(number)
	if err != nil {
		return 0, "", "", err
	}
	return f*s.factor + s.offset, s.kind, name, nil
}

// In converts a value in the base unit of name's kind to the unit called name.
func In(value float64, name string) (float64, error) {
	s, ok := scales[name]
	if !ok {
		return 0, &Error{Text: name, Found: fmt.Sprintf("unknown unit %q", name), Want: "a unit that this program knows"}
	}
	return (value - s.offset) / s.factor, nil
}

// nanoseconds of each unit of time, but for picoseconds, which are thousandths of one.
var nanoseconds = map[string]uint64{"ps": 1, "ns": 1, "us": 1e3, "ms": 1e6, "s": 1e9, "min": 60e9, "h": 3600e9}

// ParseDuration reads a time such as "2 s", "500 ms" or "1.5 h", exactly to the nanosecond.
func ParseDuration(text string) (time.Duration, error) {
	number, name, err := split(text, Time)
	if err != nil {
		return 0, err
	}
	if s, ok := scales[name]; !ok || s.kind != Time {
		return 0, wrongUnit(text, Time)
	}
	if err := checkDecimal(number); err != nil {
		return 0, err
	}
	n, exact, ok := scaled(number, nanoseconds[name], name == "ps")
	switch {
	case !ok:
		return 0, &Error{Text: text, Found: text, Want: "less than 292 years"}
	case !exact:
		return 0, &Error{Text: text, Found: text, Want: "whole nanoseconds"}
	}
	return time.Duration(n), nil
}

func wrongUnit(text string, kind Kind) error {
	article := "a "
	if strings.ContainsRune("aeiou", rune(kind[0])) {
		article = "an "
	}
	return &Error{Text: text, Found: strconv.Quote(text), Want: article + string(kind) + " in " + strings.Join(Units(kind), ", ")}
}

// blanks may stand around a value: those that YAML may leave there, no others.
const blanks = " \t\r\n"

// split cuts "1.5 deg" in two. A plain number wraps ErrNoUnit.
func split(text string, kind Kind) (number, name string, err error) {
	text = strings.Trim(text, blanks)
	number, name, _ = strings.Cut(text, " ")
	name = strings.Trim(name, blanks)
	if name == "" {
		if before, ok := strings.CutSuffix(number, "%"); ok { // "0.5%" is as clear as "0.5 %"
			return before, "%", nil
		}
		if checkDecimal(number) == nil {
			return "", "", fmt.Errorf("%s %w; want a value with its unit, such as %s", number, ErrNoUnit, sample(kind))
		}
		return "", "", &Error{Text: text, Found: strconv.Quote(text), Want: "a number, one space and a unit, such as " + sample(kind)}
	}
	return number, name, nil
}

// checkDecimal accepts plain decimal numbers with an optional exponent of up to two digits: no
// hex, no fractions, no underscores, no infinities, nothing that takes long to expand.
func checkDecimal(s string) error {
	bad := &Error{Text: s, Found: strconv.Quote(s), Want: "a decimal number"}
	if len(s) > 40 {
		return &Error{Text: s, Found: fmt.Sprintf("a number of %d characters", len(s)), Want: "at most 40"}
	}
	rest := strings.TrimLeft(s, "+-")
	if len(s)-len(rest) > 1 {
		return bad
	}
	mantissa, exponent, hasExponent := strings.Cut(strings.ToLower(rest), "e")
	whole, part, _ := strings.Cut(mantissa, ".")
	if whole+part == "" || !digits(whole) || !digits(part) {
		return bad
	}
	if hasExponent {
		e := strings.TrimLeft(exponent, "+-")
		if len(exponent)-len(e) > 1 || e == "" || len(e) > 2 || !digits(e) {
			return bad
		}
	}
	return nil
}

func digits(s string) bool {
	for _, r := range s {
		if r < '0' || r > '9' {
			return false
		}
	}
	return true
}

func decimalFloat(s string) (float64, error) {
	if err := checkDecimal(s); err != nil {
		return 0, err
	}
	return strconv.ParseFloat(s, 64)
}
