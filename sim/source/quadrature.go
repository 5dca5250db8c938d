package source

import "math"

// nodes is a quadrature rule.
type nodes struct {
	x, w []float64
}

// legendre returns the Gauss-Legendre rule of n points on -1 to 1.
func legendre(n int) nodes {
	r := nodes{make([]float64, n), make([]float64, n)}
	for i := range n {
		x := math.Cos(math.Pi * (float64(i) + 0.75) / (float64(n) + 0.5))
		var slope float64
		for range 100 {
			p, last := 1.0, 0.0
			for k := 1; k <= n; k++ {
				p, last = ((2*float64(k)-1)*x*p-(float64(k)-1)*last)/float64(k), p
			}
			slope = float64(n) * (x*p - last) / (x*x - 1)
			dx := p / slope
			x -= dx
			if math.Abs(dx) < 1e-15 {
				break
			}
		}
		r.x[i], r.w[i] = x, 2/((1-x*x)*slope*slope)
	}
	return r
}

// hermite returns the Gauss-Hermite rule of n points for the standard normal density: the weights
// add up to one.
func hermite(n int) nodes {
	r := nodes{make([]float64, n), make([]float64, n)}
	// Zeros of the normalised Hermite functions by bisection between those of the rule before.
	value := func(x float64, n int) float64 {
		p, last := 1.0, 0.0
		for k := 1; k <= n; k++ {
			p, last = (x*p-math.Sqrt(float64(k-1))*last)/math.Sqrt(float64(k)), p
		}
		return p
	}
	before := []float64{}
	for k := 1; k <= n; k++ {
		edge := 2*math.Sqrt(float64(k)) + 2
		fence := append(append([]float64{-edge}, before...), edge)
		now := make([]float64, k)
		for i := range k {
			lo, hi := fence[i], fence[i+1]
			rising := value(hi, k) > value(lo, k)
			for range 80 {
				mid := (lo + hi) / 2
				if (value(mid, k) > 0) == rising {
					hi = mid
				} else {
					lo = mid
				}
			}
			now[i] = (lo + hi) / 2
		}
		before = now
	}
	for i, x := range before {
		v := value(x, n-1)
		r.x[i], r.w[i] = x, 1/(float64(n)*v*v)
	}
	return r
}

const (
	mostLegendre = 96
	mostHermite  = 32
)

// rules holds the quadrature rules of every size that is used, made once.
type rules struct {
	legendre [mostLegendre + 1]nodes
	hermite  [mostHermite + 1]nodes
}

func newRules() *rules {
	r := &rules{}
	for n := 1; n <= mostLegendre; n++ {
		r.legendre[n] = legendre(n)
	}
	for n := 1; n <= mostHermite; n++ {
		r.hermite[n] = hermite(n)
	}
	return r
}

// points rounds a wished number of points to one that there is a rule for.
func points(wish float64, least, most int) int {
	if !(wish < float64(most)) {
		return most
	}
	return max(least, int(math.Ceil(wish)))
}
