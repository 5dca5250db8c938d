package estimate

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/mathext"
	"gonum.org/v1/gonum/stat/distuv"
)

// Interval is a coverage interval.
type Interval struct {
	Low  float64 `json:"low"`
	High float64 `json:"high"`
}

// Garwood returns the exact central interval of a Poisson mean after n counts (Garwood,
// Biometrika 28, 437 (1936)): chi2(a/2; 2n)/2 to chi2(1-a/2; 2n+2)/2, from 0 when n = 0.
func Garwood(n, coverage float64) Interval {
	a := (1 - coverage) / 2
	i := Interval{High: mathext.GammaIncRegCompInv(n+1, a)}
	if n > 0 {
		i.Low = mathext.GammaIncRegInv(n, a)
	}
	return i
}

// PoissonUpper is the exact one-sided upper limit of a Poisson mean after n counts.
func PoissonUpper(n, coverage float64) float64 {
	return mathext.GammaIncRegCompInv(n+1, 1-coverage)
}

// ClopperPearson returns the exact central interval of a binomial chance after k of n (Clopper
// and Pearson, Biometrika 26, 404 (1934)).
func ClopperPearson(k, n, coverage float64) Interval {
	a := (1 - coverage) / 2
	i := Interval{Low: 0, High: 1}
	if k > 0 {
		i.Low = mathext.InvRegIncBeta(k, n-k+1, a)
	}
	if k < n {
		i.High = mathext.InvRegIncBeta(k+1, n-k, 1-a)
	}
	return i
}

// Decision is the verdict about a net count rate: ISO 11929 and Currie, Anal. Chem. 40, 586
// (1968), as recalled in the project's notes on counting statistics.
type Decision struct {
	Net       float64 // w (n_g/t_g - n_0/t_0)
	U         float64 // standard uncertainty of Net
	Threshold float64 // y*: above it the effect is decided to be there
	Limit     float64 // y#: the smallest true value that is found with the chance stated; +Inf if none
	Best      float64 // best estimate of a value that cannot be negative
	BestU     float64
	Detected  bool
	Exact     bool // few counts: decided by the exact binomial test, not by the threshold
}

// fewCounts is below which the normal forms of ISO 11929 are not used to decide.
const fewCounts = 10

// Decide compares gross counts in tGross (s) with background counts in tBackground (s). w turns
// the net rate into the quantity wanted, with relative standard uncertainty uRel; k is the normal
// quantile of both error chances (1.645 for 5 %).
func Decide(gross, tGross, background, tBackground, w, uRel, k float64) (Decision, error) {
	if tGross <= 0 || tBackground <= 0 || gross < 0 || background < 0 || w <= 0 || k <= 0 {
		return Decision{}, fmt.Errorf("gross %g in %g s, background %g in %g s, factor %g; want positive times and factor and no negative count", gross, tGross, background, tBackground, w)
	}
	r0 := background / tBackground
	d := Decision{Net: w * (gross/tGross - r0), Threshold: k * w * math.Sqrt(r0/tGross+r0/tBackground), Limit: math.Inf(1)}
	d.U = math.Sqrt(w*w*(gross/tGross/tGross+r0/tBackground) + d.Net*d.Net*uRel*uRel)
	if q := k * uRel; q < 1 {
		d.Limit = (2*d.Threshold + k*k*w/tGross) / (1 - q*q)
	}
	d.Detected = d.Net > d.Threshold
	if gross+background < 2*fewCounts {
		d.Exact = true
		d.Detected = BinomialExcess(gross, background, tGross/(tGross+tBackground)) < distuv.UnitNormal.Survival(k)
	}
	if d.U > 0 {
		z := d.Net / d.U
		omega := distuv.UnitNormal.CDF(z)
		d.Best = d.Net + d.U*math.Exp(-z*z/2)/(omega*math.Sqrt(2*math.Pi))
		d.BestU = math.Sqrt(math.Max(0, d.U*d.U-(d.Best-d.Net)*d.Best))
	}
	return d, nil
}

// BinomialExcess is the chance of gross or more counts out of gross + background where each falls
// into the gross gate with chance p: the exact test of two Poisson counts (Przyborowski and
// Wilenski, Biometrika 31, 313 (1940), recalled from memory).
func BinomialExcess(gross, background, p float64) float64 {
	if gross <= 0 {
		return 1
	}
	return mathext.RegIncBeta(gross, background+1, p)
}
