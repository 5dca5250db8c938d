package source

import (
	"math"
	"testing"
)

func TestQuadratureRulesIntegratePolynomialsExactly(t *testing.T) {
	r := newRules()
	for n := 1; n <= mostLegendre; n++ {
		for _, power := range []int{0, min(2, 2*n-2), 2*n - 2} {
			sum := 0.0
			for i, x := range r.legendre[n].x {
				sum += r.legendre[n].w[i] * math.Pow(x, float64(power))
			}
			if want := 2 / float64(power+1); math.Abs(sum-want) > 1e-12 {
				t.Fatalf("Legendre, %d points, x^%d: %.15g; want %.15g", n, power, sum, want)
			}
		}
	}
	for n := 1; n <= mostHermite; n++ {
		moment := 1.0 // of the standard normal density: 1, 1, 3, 15, 105 ...
		for power := 0; power <= min(2*n-2, 12); power += 2 {
			if power > 0 {
				moment *= float64(power - 1)
			}
			sum := 0.0
			for i, x := range r.hermite[n].x {
				sum += r.hermite[n].w[i] * math.Pow(x, float64(power))
			}
			if math.Abs(sum/moment-1) > 1e-11 {
				t.Fatalf("Hermite, %d points, x^%d: %.15g; want %g", n, power, sum, moment)
			}
		}
	}
}
