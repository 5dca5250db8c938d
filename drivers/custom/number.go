package custom

import (
	"fmt"
	"math/big"
	"strconv"
	"strings"

	"gemel/protocol/unit"
)

// decimal reads a decimal number of an answer exactly: a sign, digits, at most one point. An
// exponent is allowed, as a declared instrument may be anything, but a small one only.
func decimal(text string) (*big.Rat, error) {
	if len(text) > 40 {
		return nil, errNumber(text)
	}
	unsigned := strings.TrimPrefix(strings.TrimPrefix(text, "+"), "-")
	if len(text)-len(unsigned) > 1 {
		return nil, errNumber(text)
	}
	mantissa, exponent, hasExponent := strings.Cut(strings.ToLower(unsigned), "e")
	whole, part, _ := strings.Cut(mantissa, ".")
	if whole+part == "" || strings.Trim(whole+part, "0123456789") != "" {
		return nil, errNumber(text)
	}
	if hasExponent {
		digits := strings.TrimLeft(exponent, "+-")
		if len(exponent)-len(digits) > 1 || digits == "" || len(digits) > 2 || strings.Trim(digits, "0123456789") != "" {
			return nil, errNumber(text)
		}
	}
	r, ok := new(big.Rat).SetString(text)
	if !ok {
		return nil, errNumber(text)
	}
	return r, nil
}

func errNumber(text string) error { return fmt.Errorf("%.40q; want a decimal number", text) }

func float(text string) (float64, error) {
	r, err := decimal(text)
	if err != nil {
		return 0, err
	}
	f, _ := r.Float64()
	return f, nil
}

// count reads a whole number of counts below 2^53.
func count(text string) (uint64, error) {
	r, err := decimal(text)
	if err != nil {
		return 0, err
	}
	if !r.IsInt() || r.Sign() < 0 || r.Num().BitLen() > 53 {
		return 0, fmt.Errorf("%.40q; want a whole number of counts from 0 to 2^53", text)
	}
	return r.Num().Uint64(), nil
}

// largest bounds what a controller may report: more than 1600 turns is no position of a bench.
const largest = 600_000 * unit.Degree

// angleOf turns a controller's number into an angle, exactly where the scale is exact.
func angleOf(text string, scale *big.Rat) (unit.Angle, error) {
	r, err := decimal(text)
	if err != nil {
		return 0, err
	}
	i, ok := new(big.Int).SetString(r.Mul(r, scale).FloatString(0), 10)
	if !ok || !i.IsInt64() || unit.Angle(i.Int64()).Abs() > largest {
		return 0, fmt.Errorf("%.40q; want an angle below 600000 deg", text)
	}
	return unit.Angle(i.Int64()), nil
}

// numberOf writes an angle as a controller's number, without an exponent and never as -0.
func numberOf(a unit.Angle, scale *big.Rat, decimals int) string {
	s := new(big.Rat).Quo(big.NewRat(int64(a), 1), scale).FloatString(decimals)
	if strings.Trim(s, "-0.") == "" {
		s = strings.TrimPrefix(s, "-")
	}
	return s
}

// plain writes a number without an exponent, with as many decimals as it needs up to n.
func plain(v float64, n int) string {
	s := strconv.FormatFloat(v, 'f', n, 64)
	if strings.Contains(s, ".") {
		s = strings.TrimRight(strings.TrimRight(s, "0"), ".")
	}
	if s == "-0" {
		return "0"
	}
	return s
}
