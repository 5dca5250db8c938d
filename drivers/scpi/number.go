package scpi

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
)

// SCPI-1999 writes what is no number as numbers of their own: 9.91E+37 for "not a number",
// 9.9E+37 and -9.9E+37 for the infinities. They are flags, never data.
const (
	notANumber = 9.91e37
	infinity   = 9.9e37
)

var (
	errNotANumber = errors.New("the flag for not a number; want a measurement")
	errOverRange  = errors.New("the flag for over range; want a measurement")
)

// number reads one NR1, NR2 or NR3 of an answer: an optional sign, digits with at most one point,
// an optional exponent. Nothing else is a number: no spaces, hex, names or empty text.
func number(text string) (float64, error) {
	if len(text) > 64 {
		return 0, fmt.Errorf("a number of %d characters; want at most 64", len(text))
	}
	mantissa, exponent, hasExponent := strings.Cut(strings.ToUpper(text), "E")
	if hasExponent {
		digits := unsigned(exponent)
		if digits == "" || strings.Trim(digits, "0123456789") != "" || len(digits) > 5 {
			return 0, errNumber(text)
		}
	}
	whole, part, _ := strings.Cut(unsigned(mantissa), ".")
	if whole+part == "" || strings.Trim(whole+part, "0123456789") != "" {
		return 0, errNumber(text)
	}
	f, err := strconv.ParseFloat(text, 64)
	switch {
	case err != nil || math.IsInf(f, 0):
		return 0, fmt.Errorf("%.40q; want a number that a computer can hold", text)
	case math.Abs(f) > 0.9999*notANumber && math.Abs(f) < 1.0001*notANumber:
		return 0, errNotANumber
	case math.Abs(f) > 0.9999*infinity:
		return 0, errOverRange
	}
	return f, nil
}

func errNumber(text string) error { return fmt.Errorf("%.40q; want a decimal number", text) }

func unsigned(s string) string {
	if s != "" && (s[0] == '+' || s[0] == '-') {
		return s[1:]
	}
	return s
}

// count reads a number of counts. A counter may write one as +1.20340000E+04; beyond 2^53 the
// last digits would no longer be true.
func count(text string) (uint64, error) {
	f, err := number(text)
	if err != nil {
		return 0, err
	}
	if f < 0 || f != math.Trunc(f) || f >= 1<<53 {
		return 0, fmt.Errorf("%.40q; want a whole number of counts from 0 to 2^53", text)
	}
	return uint64(f), nil
}

// register reads an event or condition register, 0 to 65535.
func register(text string) (int, error) {
	f, err := number(text)
	if err != nil {
		return 0, err
	}
	if f < 0 || f != math.Trunc(f) || f > 65535 {
		return 0, fmt.Errorf("%.40q; want a register from 0 to 65535", text)
	}
	return int(f), nil
}

// split cuts an answer at sep, but not inside strings and definite blocks.
func split(answer []byte, sep byte) []string {
	var parts []string
	from := 0
	for i := 0; i < len(answer); {
		switch answer[i] {
		case sep:
			parts = append(parts, string(answer[from:i]))
			i++
			from = i
		case '"':
			i++
			for i < len(answer) && answer[i] != '"' {
				i++
			}
			i++
		case '#':
			i += blockSize(answer[i:])
		default:
			i++
		}
	}
	return append(parts, string(answer[from:]))
}

// blockSize returns the size of a definite block with its header, or 1 where none starts.
func blockSize(b []byte) int {
	if len(b) < 2 || b[1] < '1' || b[1] > '9' {
		return 1
	}
	n := int(b[1] - '0')
	if len(b) < 2+n {
		return 1
	}
	length, err := strconv.Atoi(string(b[2 : 2+n]))
	if err != nil || length < 0 || 2+n+length > len(b) {
		return 1
	}
	return 2 + n + length
}
