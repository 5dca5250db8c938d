package source

import (
	"math"
	"math/rand/v2"
)

// poisson draws from a Poisson distribution. Small means: products of uniforms (Knuth 1969);
// larger ones: transformed rejection, algorithm PTRS of W. Hormann, Insurance: Mathematics and
// Economics 12, 39 (1993), recalled from memory and held by a chi-square test.
func poisson(rng *rand.Rand, mean float64) uint64 {
	if !(mean > 0) {
		return 0
	}
	if mean < 10 {
		limit := math.Exp(-mean)
		n := uint64(0)
		for p := rng.Float64(); p > limit; p *= rng.Float64() {
			n++
		}
		return n
	}
	slam, loglam := math.Sqrt(mean), math.Log(mean)
	b := 0.931 + 2.53*slam
	a := -0.059 + 0.02483*b
	invalpha := 1.1239 + 1.1328/(b-3.4)
	vr := 0.9277 - 3.6224/(b-2)
	for {
		u, v := rng.Float64()-0.5, rng.Float64()
		us := 0.5 - math.Abs(u)
		k := math.Floor((2*a/us+b)*u + mean + 0.43)
		if us >= 0.07 && v <= vr {
			return uint64(k)
		}
		if k < 0 || (us < 0.013 && v > us) {
			continue
		}
		lg, _ := math.Lgamma(k + 1)
		if math.Log(v)+math.Log(invalpha)-math.Log(a/(us*us)+b) <= k*loglam-mean-lg {
			return uint64(k)
		}
	}
}

// binomial draws how many of n things happen that happen with chance p each. Small n·p: waiting
// times (Devroye 1986); larger: transformed rejection, algorithm BTRS of W. Hormann, J. Stat.
// Comput. Simul. 46, 101 (1993), recalled from memory and held by a chi-square test.
func binomial(rng *rand.Rand, n uint64, p float64) uint64 {
	switch {
	case n == 0 || !(p > 0):
		return 0
	case p >= 1:
		return n
	case p > 0.5:
		return n - binomial(rng, n, 1-p)
	}
	nf := float64(n)
	if nf*p < 10 {
		lq := math.Log1p(-p)
		sum, k := 0.0, uint64(0)
		for {
			sum += math.Floor(math.Log(1-rng.Float64())/lq) + 1
			if sum > nf {
				return k
			}
			k++
		}
	}
	q := 1 - p
	spq := math.Sqrt(nf * p * q)
	b := 1.15 + 2.53*spq
	a := -0.0873 + 0.0248*b + 0.01*p
	c := nf*p + 0.5
	vr := 0.92 - 4.2/b
	alpha := (2.83 + 5.1/b) * spq
	lpq := math.Log(p / q)
	mode := math.Floor((nf + 1) * p)
	lg := func(x float64) float64 { v, _ := math.Lgamma(x + 1); return v }
	h := lg(mode) + lg(nf-mode)
	for {
		u, v := rng.Float64()-0.5, rng.Float64()
		us := 0.5 - math.Abs(u)
		k := math.Floor((2*a/us+b)*u + c)
		if us >= 0.07 && v <= vr {
			return uint64(k)
		}
		if k < 0 || k > nf {
			continue
		}
		if math.Log(v*alpha/(a/(us*us)+b)) <= h-lg(k)-lg(nf-k)+(k-mode)*lpq {
			return uint64(k)
		}
	}
}

// gamma draws from a gamma distribution of unit scale (Marsaglia and Tsang, ACM Trans. Math.
// Software 26, 363 (2000), recalled from memory and held by a chi-square test).
func gamma(rng *rand.Rand, shape float64) float64 {
	if shape < 1 {
		return gamma(rng, shape+1) * math.Pow(1-rng.Float64(), 1/shape)
	}
	d := shape - 1./3
	c := 1 / math.Sqrt(9*d)
	for {
		x := rng.NormFloat64()
		v := 1 + c*x
		if v <= 0 {
			continue
		}
		v = v * v * v
		if math.Log(1-rng.Float64()) < x*x/2+d-d*v+d*math.Log(v) {
			return d * v
		}
	}
}
