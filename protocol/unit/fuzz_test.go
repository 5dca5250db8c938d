package unit_test

import (
	"math"
	"math/big"
	"regexp"
	"strings"
	"testing"

	"gemel/protocol/unit"
)

// FuzzQuantities reads whatever may stand for a quantity. What is taken is a finite number with a
// unit that is known, the same for the pattern that editors get, and a time to the nanosecond.
func FuzzQuantities(f *testing.F) {
	for _, s := range []string{"1.5 h", "0.000000001 s", "1 ps", "500 ps", "1e3 ms", "292 h", "-0 s", "+.5 s", "5. min", "65 %", "65%", "20 Cel", "-300 Cel", "9e99 K", "1e-99 nm", "1 s s", "1\t s", "\x001 s", "1 µs", "1,5 s", "0x10 s", "1_0 s", "Inf s", "99999999999999999999 ns"} {
		f.Add(s)
	}
	pattern := regexp.MustCompile(`\A(?:` + unit.Pattern("", true) + `)\z`)
	f.Fuzz(func(t *testing.T, text string) {
		value, kind, name, err := unit.ParseAny(text)
		if err == nil {
			if math.IsNaN(value) || math.IsInf(value, 0) {
				t.Errorf("%q is %v", text, value)
			}
			if !pattern.MatchString(text) {
				t.Errorf("%q is a quantity, and the pattern of quantities does not match it", text)
			}
			if back, err := unit.Parse(text, kind); err != nil || back != value {
				t.Errorf("%q of kind %s: %v, %v; want %v", text, kind, back, err, value)
			}
			for _, other := range unit.Kinds() {
				if _, err := unit.Parse(text, other); other != kind && err == nil {
					t.Errorf("%q is of kind %s, and is taken as %s", text, kind, other)
				}
			}
			if _, err := unit.In(value, name); err != nil {
				t.Errorf("%q in %s: %v", text, name, err)
			}
		} else if err.Error() == "" {
			t.Errorf("%q is refused without a reason", text)
		}
		d, err := unit.ParseDuration(text)
		if err != nil {
			return
		}
		number := strings.TrimSpace(strings.TrimSuffix(strings.TrimSpace(text), name))
		want, ok := new(big.Rat).SetString(number)
		per := map[string]*big.Rat{"ps": big.NewRat(1, 1000), "ns": big.NewRat(1, 1), "us": big.NewRat(1e3, 1), "ms": big.NewRat(1e6, 1), "s": big.NewRat(1e9, 1), "min": big.NewRat(60e9, 1), "h": big.NewRat(3600e9, 1)}[name]
		if !ok || per == nil || want.Mul(want, per).Cmp(new(big.Rat).SetInt64(int64(d))) != 0 {
			t.Errorf("%q is %d ns; want %v", text, d, want)
		}
	})
}
