package unit

import (
	"math"
	"testing"
)

func TestConversionsGoThereAndBack(t *testing.T) {
	for _, c := range []struct {
		from, to string
		v, want  float64
	}{
		{"mW", "W", 45, 0.045}, {"W", "mW", 0.045, 45}, {"s", "ns", 1.84e-8, 18.4}, {"K", "Cel", 293.15, 20}, {"Cel", "K", 20, 293.15},
		{"", "V", 7, 7}, {"V", "V", 7, 7}, {"%", "ppm", 1, 1e4},
	} {
		conversion, err := Convert(c.from, c.to)
		if err != nil {
			t.Errorf("%s to %s: %v", c.from, c.to, err)
			continue
		}
		if got, back := conversion.Of(c.v), conversion.Back(c.want); math.Abs(got-c.want) > 1e-12*math.Abs(c.want) || math.Abs(back-c.v) > 1e-12*math.Abs(c.v) {
			t.Errorf("%g %s is %.15g %s, and back %.15g; want %g", c.v, c.from, got, c.to, back, c.want)
		}
	}
	for _, c := range [][2]string{{"mW", "Cel"}, {"parsec", "m"}, {"m", "parsec"}, {"", ""}} {
		if _, err := Convert(c[0], c[1]); err == nil {
			t.Errorf("%q is converted to %q; want it refused", c[0], c[1])
		}
	}
}
