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

// hermites returns the Gauss-Hermite rules of 1 to most points for the standard normal density:
// the weights of each add up to one. The zeros of one rule lie between those of the next.
func hermites(most int) []nodes {
	value := func(x float64, n int) float64 { // normalised Hermite polynomial
		p, last := 1.0, 0.0
		for k := 1; k <= n; k++ {
			p, last = (x*p-math.Sqrt(float64(k-1))*last)/math.Sqrt(float64(k)), p
		}
		return p
	}
	all := make([]nodes, most+1)
	for n := 1; n <= most; n++ {
		edge := 2*math.Sqrt(float64(n)) + 2
		r := nodes{make([]float64, n), make([]float64, n)}
		for i := range n {
			lo, hi := -edge, edge
			if i > 0 {
				lo = all[n-1].x[i-1]
			}
			if i < n-1 {
				hi = all[n-1].x[i]
			}
			rising := value(hi, n) > value(lo, n)
			for hi-lo > 1e-15 {
				mid := (lo + hi) / 2
				if mid == lo || mid == hi {
					break
				}
				if (value(mid, n) > 0) == rising {
					hi = mid
				} else {
					lo = mid
				}
			}
			r.x[i] = (lo + hi) / 2
			v := value(r.x[i], n-1)
			r.w[i] = 1 / (float64(n) * v * v)
		}
		all[n] = r
	}
	return all
}

// evenly is a rule of n equidistant points for the standard normal density, weights adding up to
// one. It beats Hermite's where the other factor oscillates.
func evenly(n int) nodes {
	r := nodes{make([]float64, n), make([]float64, n)}
	sum := 0.0
	for i := range n {
		r.x[i] = 9.6 * ((float64(i)+0.5)/float64(n) - 0.5)
		r.w[i] = math.Exp(-r.x[i] * r.x[i] / 2)
		sum += r.w[i]
	}
	for i := range n {
		r.w[i] /= sum
	}
	return r
}

const (
	mostLegendre = 96
	mostHermite  = 16
	mostEvenly   = 128
)

// rules holds the quadrature rules of every size that is used, made once.
type rules struct {
	legendre [mostLegendre + 1]nodes
	hermite  []nodes
	evenly   [mostEvenly + 1]nodes
}

func newRules() *rules {
	r := &rules{hermite: hermites(mostHermite)}
	for n := 1; n <= mostLegendre; n++ {
		r.legendre[n] = legendre(n)
	}
	for n := 1; n <= mostEvenly; n++ {
		r.evenly[n] = evenly(n)
	}
	return r
}

// normal is a rule for the standard normal density times sinc² of a phase that grows by phase over
// one rms. base is the number of points without it.
func (r *rules) normal(base, phase, effort float64) nodes {
	if n := (base + 3*phase) * effort; n <= mostHermite && phase < 1.2 {
		return r.hermite[points(n, 3, mostHermite)]
	}
	// Equidistant points fail at frequencies beyond 2 pi/step less the density's own spread.
	return r.evenly[points(9.6*(2*phase+4.2)/(2*math.Pi)*effort, 8, mostEvenly)]
}

// points rounds a wished number of points to one that there is a rule for.
func points(wish float64, least, most int) int {
	if !(wish < float64(most)) {
		return most
	}
	return max(least, int(math.Ceil(wish)))
}
