package unit

import (
	"fmt"
	"math"
	"math/big"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"
)

// number draws a decimal number that checkDecimal lets pass, mostly of the size that files have.
func number(t *rapid.T) string {
	text := rapid.OneOf(rapid.StringMatching(`[+-]?[0-9]{1,4}(\.[0-9]{0,12})?`), rapid.StringMatching(`[+-]?[0-9]{0,18}\.?[0-9]{0,18}(e[+-]?[0-9]{1,2})?`)).Draw(t, "number")
	if checkDecimal(text) != nil {
		t.Skip()
	}
	return text
}

func TestTheFastWayToADecimalIsTheExactOne(t *testing.T) {
	fast := 0
	rapid.Check(t, func(t *rapid.T) {
		text := number(t)
		per := rapid.SampledFrom([]uint64{uint64(Degree), uint64(Arcminute), uint64(Arcsecond), 1, 1e9, 3600e9}).Draw(t, "per")
		thousandths := rapid.Bool().Draw(t, "thousandths")
		n, exact, ok := scaledFast(text, per, thousandths)
		if !ok {
			return
		}
		fast++
		if m, wasExact, ok := scaledAny(text, per, thousandths); !ok || m != n || wasExact != exact {
			t.Fatalf("%s times %d is %d, exact %v; want %d, %v, %v", text, per, n, exact, m, wasExact, ok)
		}
	})
	if fast == 0 {
		t.Error("nothing went the fast way")
	}
}

func TestHalvesAreRoundedAwayFromZero(t *testing.T) {
	for text, want := range map[string]int64{"0.5": 1, "-0.5": -1, "0.49": 0, "1.5": 2, "-0": 0, "2": 2} {
		for name, way := range map[string]func(string, uint64, bool) (int64, bool, bool){"fast": scaledFast, "any": scaledAny} {
			if n, exact, ok := way(text, 1, false); n != want || !ok || exact != !strings.Contains(text, ".") {
				t.Errorf("%s by the way %s is %d, exact %v; want %d", text, name, n, exact, want)
			}
		}
	}
}

func TestAnglesAndSecondsArePrintedAsLongArithmeticPrintsThem(t *testing.T) {
	trim := func(s string) string {
		s = strings.TrimSuffix(strings.TrimRight(s, "0"), ".")
		if s == "-0" {
			return "0"
		}
		return s
	}
	same := func(t interface{ Errorf(string, ...any) }, n int64) {
		if got, want := Angle(n).decimal(), trim(big.NewRat(n, int64(Degree)).FloatString(exactDecimals)); got != want {
			t.Errorf("%d micro-arcseconds are printed %s; want %s", n, got, want)
		}
		if got, want := FormatSeconds(n), trim(big.NewRat(n, int64(time.Second)).FloatString(9)); got != want {
			t.Errorf("%d ns are printed %s; want %s", n, got, want)
		}
	}
	for _, n := range []int64{0, 1, -1, math.MaxInt64, math.MinInt64, math.MinInt64 + 1, maxAngle, -maxAngle, 1e9, -36e8} {
		same(t, n)
	}
	rapid.Check(t, func(t *rapid.T) {
		same(t, rapid.OneOf(rapid.Int64(), rapid.Int64Range(-1e12, 1e12)).Draw(t, "n"))
	})
}

func BenchmarkReadAngle(b *testing.B) {
	for _, text := range []string{"2.864", "2.8640277778", "2.86402777781234567891"} {
		b.Run(fmt.Sprint(len(text), " characters"), func(b *testing.B) {
			for b.Loop() {
				if _, err := ParseAngleIn(text, "deg"); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}

func BenchmarkPrintAngle(b *testing.B) {
	for b.Loop() {
		_ = Angle(10_310_500_001).decimal()
	}
}
