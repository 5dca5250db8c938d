package unit

import (
	"math"
	"math/big"
	"math/bits"
	"strconv"
	"strings"
)

// scaled returns a decimal number times a whole one, rounded to the nearest whole number, halves away
// from zero, and whether nothing was rounded. It is exact: no floats. Where 64 bits and their product
// do not reach, arithmetic of any length takes over, which is some eight times slower. It is not ok
// beyond int64. The number must have passed checkDecimal.
func scaled(number string, per uint64, thousandths bool) (n int64, exact, ok bool) {
	if n, exact, ok = scaledFast(number, per, thousandths); ok {
		return n, exact, true
	}
	return scaledAny(number, per, thousandths)
}

func scaledAny(number string, per uint64, thousandths bool) (n int64, exact, ok bool) {
	r, ok := new(big.Rat).SetString(number)
	if !ok {
		return 0, false, false
	}
	r.Mul(r, new(big.Rat).SetInt(new(big.Int).SetUint64(per)))
	if thousandths {
		r.Mul(r, big.NewRat(1, 1000))
	}
	i, ok := new(big.Int).SetString(r.FloatString(0), 10)
	if !ok || !i.IsInt64() {
		return 0, false, false
	}
	return i.Int64(), r.IsInt(), true
}

// pow10 are the powers of ten that 64 bits hold.
var pow10 = [...]uint64{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19}

// scaledFast is scaled for up to eighteen digits before and behind the point together.
func scaledFast(number string, per uint64, thousandths bool) (n int64, exact, ok bool) {
	var mantissa uint64
	negative, digits, behind := false, 0, 0 // behind: decimals of the mantissa
	point := false
	for i := range len(number) {
		switch c := number[i]; {
		case c == '-':
			negative = true
		case c == '+':
		case c == '.':
			point = true
		case '0' <= c && c <= '9':
			if mantissa > 0 || c > '0' {
				digits++
			}
			mantissa = mantissa*10 + uint64(c-'0')
			if point {
				behind++
			}
		default: // an exponent: rare in files, and no result has one
			return 0, false, false
		}
		if digits > 18 {
			return 0, false, false
		}
	}
	if thousandths {
		behind += 3
	}
	if behind >= len(pow10) {
		return 0, false, false
	}
	high, low := bits.Mul64(mantissa, per)
	divisor := pow10[behind]
	if high >= divisor {
		return 0, false, false
	}
	q, rest := bits.Div64(high, low, divisor)
	if rest >= divisor-rest && rest > 0 {
		q++
	}
	if q > math.MaxInt64 {
		return 0, false, false
	}
	n = int64(q)
	if negative {
		n = -n
	}
	return n, rest == 0, true
}

// fixed prints a whole number of 10^-decimals, without zeros at the end.
func fixed(negative bool, n uint64, decimals int) string {
	whole, part := strconv.FormatUint(n/pow10[decimals], 10), strconv.FormatUint(n%pow10[decimals], 10)
	part = strings.TrimRight(strings.Repeat("0", decimals-len(part))+part, "0")
	if part != "" {
		whole += "." + part
	}
	if negative && n > 0 {
		return "-" + whole
	}
	return whole
}

// FormatSeconds prints nanoseconds as a decimal number of seconds, as short as it is exact.
func FormatSeconds(ns int64) string {
	return fixed(ns < 0, magnitude(ns), 9)
}

func magnitude(n int64) uint64 {
	if n < 0 {
		return -uint64(n)
	}
	return uint64(n)
}
