package estimate

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
)

// MonteCarlo is the propagation of distributions, JCGM 101, with its comparison to the linear law.
type MonteCarlo struct {
	Trials    int      `json:"trials"`
	Mean      float64  `json:"mean"`
	U         float64  `json:"standard_uncertainty"`
	Symmetric Interval `json:"probabilistically_symmetric"`
	Shortest  Interval `json:"shortest"`
	Tolerance float64  `json:"numerical_tolerance"` // of two significant digits of u
	LowOff    float64  `json:"linear_low_off_by"`   // of the linear interval's ends from the symmetric ones
	HighOff   float64  `json:"linear_high_off_by"`
	LinearOK  bool     `json:"linear_may_be_used"`
	Sentence  string   `json:"sentence"`
}

// Simulate draws trials values of a result and sums them up for the coverage wanted (JCGM 101,
// clause 7.5 to 7.7). The same seed gives the same digits.
func Simulate(draw func(*rand.Rand) float64, trials int, seed uint64, coverage float64) (MonteCarlo, error) {
	if trials < 1000 {
		return MonteCarlo{}, fmt.Errorf("%d trials; want at least 1000, better 10^4/(1-p)", trials)
	}
	r := rand.New(rand.NewPCG(seed, 0x9e3779b97f4a7c15))
	y := make([]float64, trials)
	m := MonteCarlo{Trials: trials}
	sum := 0.0
	for i := range y {
		y[i] = draw(r)
		if math.IsNaN(y[i]) || math.IsInf(y[i], 0) {
			return MonteCarlo{}, fmt.Errorf("trial %d gave %g; want a number: the inputs reach where the result does not exist", i, y[i])
		}
		sum += y[i]
	}
	m.Mean = sum / float64(trials)
	for _, v := range y {
		m.U += (v - m.Mean) * (v - m.Mean)
	}
	m.U = math.Sqrt(m.U / float64(trials-1))
	slices.Sort(y)
	q := int(coverage*float64(trials) + 0.5)
	low := (trials - q + 1) / 2
	m.Symmetric = Interval{y[max(low-1, 0)], y[min(low-1+q, trials-1)]}
	m.Shortest = m.Symmetric
	for i := 0; i+q < trials; i++ {
		if y[i+q]-y[i] < m.Shortest.High-m.Shortest.Low {
			m.Shortest = Interval{y[i], y[i+q]}
		}
	}
	return m, nil
}

// Against compares with a linear interval (JCGM 101, clause 8): it may be used where both ends
// differ by no more than half a unit of the second significant digit of the linear u.
func (m MonteCarlo) Against(linear Interval, u float64) MonteCarlo {
	m.Tolerance = numericalTolerance(u)
	m.LowOff = math.Abs(linear.Low - m.Symmetric.Low)
	m.HighOff = math.Abs(linear.High - m.Symmetric.High)
	m.LinearOK = m.LowOff <= m.Tolerance && m.HighOff <= m.Tolerance
	off := fmt.Sprintf("The linear interval's ends differ from the simulated ones by %.2g and %.2g; the tolerance is %.1g", m.LowOff, m.HighOff, m.Tolerance)
	// An end of the simulated interval is itself uncertain by about 2.7 u/sqrt(M): the root of
	// p(1-p)/M over a normal density, at 2.5 %.
	noise := 2.7 * m.U / math.Sqrt(float64(m.Trials))
	switch {
	case m.LinearOK:
		m.Sentence = off + ": the linear result may be used."
	case max(m.LowOff, m.HighOff) < m.Tolerance+3*noise:
		m.Sentence = off + fmt.Sprintf(": too few trials to tell whether the linear result may be used; want about %.0e.", math.Pow(5*2.7*m.U/m.Tolerance, 2))
	default:
		m.Sentence = off + ": use the simulated interval."
	}
	return m
}

// numericalTolerance is half a unit of u's second significant digit (JCGM 101, 7.9.2).
func numericalTolerance(u float64) float64 {
	if !(u > 0) {
		return 0
	}
	e := math.Floor(math.Log10(u)) - 1
	if math.Round(u/math.Pow(10, e)) >= 100 { // 0.0996 is 1.0e-1 to two digits
		e++
	}
	return math.Pow(10, e) / 2
}

// Draw returns one value of an input; JCGM 101, 6.4. Student inputs use their degrees of freedom.
func (in Input) Draw(r *rand.Rand) float64 {
	switch in.Distribution {
	case Rectangular:
		return in.Estimate + in.U*math.Sqrt(3)*(2*r.Float64()-1)
	case Triangular:
		return in.Estimate + in.U*math.Sqrt(6)*(r.Float64()-r.Float64())
	case Arcsine:
		return in.Estimate + in.U*math.Sqrt2*math.Sin(math.Pi*2*r.Float64())
	case TwoPoint:
		if r.Uint64()&1 == 0 {
			return in.Estimate - in.U
		}
		return in.Estimate + in.U
	case Student:
		if in.Freedom > 0 {
			chi := 0.0
			for range int(in.Freedom) {
				z := r.NormFloat64()
				chi += z * z
			}
			return in.Estimate + in.U*r.NormFloat64()/math.Sqrt(chi/math.Floor(in.Freedom))
		}
	case Counting:
		return drawPoisson(r, in.Estimate)
	}
	return in.Estimate + in.U*r.NormFloat64()
}

// drawPoisson draws counts of a mean: by inversion up to 30, by a rounded normal with the skewness
// of the Poisson distribution above (Cornish and Fisher's first term), which is good to a tenth
// of a count where it is used.
func drawPoisson(r *rand.Rand, mean float64) float64 {
	if mean <= 0 {
		return 0
	}
	if mean < 30 {
		limit, n := math.Exp(-mean), 0
		for p := r.Float64(); p > limit; p *= r.Float64() {
			n++
		}
		return float64(n)
	}
	z := r.NormFloat64()
	return math.Max(0, math.Round(mean+math.Sqrt(mean)*z+(z*z-1)/6))
}
