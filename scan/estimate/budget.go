package estimate

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"gonum.org/v1/gonum/stat/distuv"
)

// Evaluation says how a standard uncertainty was come by: JCGM 100, 4.2 and 4.3.
type Evaluation string

// The evaluations.
const (
	TypeA Evaluation = "A" // from the scatter of observations, counting included
	TypeB Evaluation = "B" // from anything else: a certificate, a delay scan, a model
)

// Shape is the distribution that an input is taken to have.
type Shape string

// The shapes. A half-width a becomes a/sqrt(3), a/sqrt(6), a/sqrt(2) by U of Rectangular,
// Triangular, Arcsine (JCGM 100, 4.3.7 to 4.3.9).
const (
	Normal      Shape = "normal"
	Rectangular Shape = "rectangular"
	Triangular  Shape = "triangular"
	Arcsine     Shape = "arcsine"
	TwoPoint    Shape = "two-point" // at one of two bounds, nobody knows which: the half-width itself
	Counting    Shape = "poisson"
	Student     Shape = "t" // a mean of few observations: Freedom says how few
)

// U returns the standard uncertainty of a half-width.
func (s Shape) U(halfWidth float64) float64 {
	switch s {
	case Rectangular:
		return halfWidth / math.Sqrt(3)
	case Triangular:
		return halfWidth / math.Sqrt(6)
	case Arcsine:
		return halfWidth / math.Sqrt2
	}
	return halfWidth
}

// Input is one quantity that a result depends on.
type Input struct {
	Quantity     string
	Symbol       string
	Unit         string
	Estimate     float64
	U            float64 // standard uncertainty, in Unit
	Evaluation   Evaluation
	Distribution Shape
	Freedom      float64 // degrees of freedom; 0: as many as anybody likes
}

// Cross is a covariance of two inputs, by their places in the list.
type Cross struct {
	I, J       int
	Covariance float64
	Because    string
}

// Row is one line of a budget. Contribution is |c| u, in the result's unit; of a covariance it is
// the square root of its share with the sign of it, so that a negative one can be seen.
type Row struct {
	Quantity     string     `json:"quantity"`
	Symbol       string     `json:"symbol"`
	Estimate     float64    `json:"estimate"`
	Unit         string     `json:"unit"`
	U            float64    `json:"standard_uncertainty"`
	Evaluation   Evaluation `json:"evaluation"`
	Distribution Shape      `json:"distribution"`
	Freedom      *float64   `json:"degrees_of_freedom"` // null: infinitely many
	Sensitivity  float64    `json:"sensitivity"`
	Contribution float64    `json:"contribution"`
	Share        float64    `json:"share"` // of the variance; negative where a covariance helps
	Covariance   bool       `json:"covariance"`
}

// Budget is a result with everything that makes its uncertainty.
type Budget struct {
	Value   float64
	U       float64 // combined standard uncertainty
	Freedom float64 // effective; +Inf where none of the rows has few
	Rows    []Row
}

// Propagate is the law of propagation of uncertainty, JCGM 100, equations 10 and 13: u^2 = sum of
// (c_i u_i)^2 plus 2 c_i c_j cov(i, j), the sensitivities c from f by differences far smaller than
// u. The effective degrees of freedom follow Welch and Satterthwaite (G.4) over groups: inputs tied
// by a covariance are one group with the smallest degrees of freedom among them, since the
// formula holds for independent ones only. Where f fails (NaN) the error says at which input.
func Propagate(f func(x []float64) float64, inputs []Input, crosses []Cross) (Budget, error) {
	x := make([]float64, len(inputs))
	for i, in := range inputs {
		x[i] = in.Estimate
	}
	b := Budget{Value: f(x), Freedom: math.Inf(1)}
	if math.IsNaN(b.Value) || math.IsInf(b.Value, 0) {
		return Budget{}, fmt.Errorf("the result at the estimates is %g; want a number", b.Value)
	}
	c := make([]float64, len(inputs))
	group := make([]int, len(inputs))
	variance := 0.0
	for i, in := range inputs {
		group[i] = i
		c[i] = slope(f, x, i, in.U)
		if math.IsNaN(c[i]) || in.U < 0 || math.IsNaN(in.U) {
			return Budget{}, fmt.Errorf("%s (%s): sensitivity %g, standard uncertainty %g; want numbers, and no negative uncertainty", in.Quantity, in.Symbol, c[i], in.U)
		}
		variance += c[i] * c[i] * in.U * in.U
		row := Row{Quantity: in.Quantity, Symbol: in.Symbol, Estimate: in.Estimate, Unit: in.Unit, U: in.U, Evaluation: in.Evaluation,
			Distribution: in.Distribution, Sensitivity: c[i], Contribution: math.Abs(c[i]) * in.U}
		if in.Freedom > 0 {
			row.Freedom = &in.Freedom
		}
		b.Rows = append(b.Rows, row)
	}
	for _, k := range crosses {
		v := 2 * c[k.I] * c[k.J] * k.Covariance
		variance += v
		a, z := inputs[k.I], inputs[k.J]
		b.Rows = append(b.Rows, Row{Quantity: k.Because, Symbol: "Cov(" + a.Symbol + ", " + z.Symbol + ")", Estimate: k.Covariance, Unit: product(a.Unit, z.Unit),
			Evaluation: a.Evaluation, Sensitivity: 2 * c[k.I] * c[k.J], Contribution: math.Copysign(math.Sqrt(math.Abs(v)), v), Covariance: true})
		from, to := group[k.J], group[k.I]
		for i := range group {
			if group[i] == from {
				group[i] = to
			}
		}
	}
	if !(variance >= 0) || math.IsInf(variance, 1) {
		return Budget{}, fmt.Errorf("variance %g; want uncertainties and covariances that can be", variance)
	}
	b.U = math.Sqrt(variance)
	for i := range b.Rows {
		if variance > 0 {
			b.Rows[i].Share = math.Copysign(b.Rows[i].Contribution*b.Rows[i].Contribution, b.Rows[i].Contribution) / variance
		}
	}
	b.Freedom = effectiveFreedom(inputs, crosses, c, group, variance)
	return b, nil
}

func effectiveFreedom(inputs []Input, crosses []Cross, c []float64, group []int, variance float64) float64 {
	sum := 0.0
	for g := range inputs {
		v, few := 0.0, math.Inf(1)
		for i, in := range inputs {
			if group[i] != g {
				continue
			}
			v += c[i] * c[i] * in.U * in.U
			if in.Freedom > 0 && c[i]*in.U != 0 {
				few = math.Min(few, in.Freedom)
			}
		}
		for _, k := range crosses {
			if group[k.I] == g {
				v += 2 * c[k.I] * c[k.J] * k.Covariance
			}
		}
		sum += v * v / few
	}
	if sum == 0 {
		return math.Inf(1)
	}
	return variance * variance / sum
}

func product(a, b string) string {
	switch {
	case a == "1":
		return b
	case b == "1":
		return a
	case a == b:
		return a + "^2"
	}
	return a + "·" + b
}

// slope is a five-point difference over a hundredth of the standard uncertainty, or over a
// millionth of the value where there is none.
func slope(f func([]float64) float64, x []float64, i int, u float64) float64 {
	h := u / 100
	if h == 0 {
		h = math.Abs(x[i]) * 1e-6
	}
	if h == 0 {
		h = 1e-9
	}
	h = math.Max(h, math.Abs(x[i])*1e-7) // what is finer drowns in rounding
	at := func(d float64) float64 {
		z := slices.Clone(x)
		z[i] += d
		return f(z)
	}
	return (8*(at(h)-at(-h)) - (at(2*h) - at(-2*h))) / (12 * h)
}

// SecondOrder returns the standard uncertainty with the next terms of the series for independent,
// symmetric inputs: JCGM 100, 5.1.2, note: (f_ij^2/2 + f_i f_ijj) u_i^2 u_j^2 summed over i and j.
func SecondOrder(f func([]float64) float64, inputs []Input) float64 {
	x := make([]float64, len(inputs))
	for i, in := range inputs {
		x[i] = in.Estimate
	}
	at := func(steps ...[2]float64) float64 {
		z := slices.Clone(x)
		for _, s := range steps {
			z[int(s[0])] += s[1]
		}
		return f(z)
	}
	variance := 0.0
	for i, a := range inputs {
		fi := slope(f, x, i, a.U)
		variance += fi * fi * a.U * a.U
		for j, b := range inputs {
			// In units of u the differences may be as wide as u: the terms are then u^2 times them.
			p, q := float64(i), float64(j)
			var fij, fijj float64 // times u_i u_j, and u_i u_j^2
			if i == j {
				fij = at([2]float64{p, a.U}) - 2*at() + at([2]float64{p, -a.U})
				fijj = (at([2]float64{p, 2 * a.U}) - 2*at([2]float64{p, a.U}) + 2*at([2]float64{p, -a.U}) - at([2]float64{p, -2 * a.U})) / 2
			} else {
				pp, pm := at([2]float64{p, a.U}, [2]float64{q, b.U}), at([2]float64{p, a.U}, [2]float64{q, -b.U})
				mp, mm := at([2]float64{p, -a.U}, [2]float64{q, b.U}), at([2]float64{p, -a.U}, [2]float64{q, -b.U})
				fij = (pp - pm - mp + mm) / 4
				fijj = (pp + pm - 2*at([2]float64{p, a.U}) - mp - mm + 2*at([2]float64{p, -a.U})) / 2
			}
			variance += fij*fij/2 + fi*a.U*fijj
		}
	}
	return math.Sqrt(math.Max(0, variance))
}

// Expanded is an expanded uncertainty and how its factor was chosen.
type Expanded struct {
	K        float64
	U        float64
	Coverage float64
	Because  string
}

// Expand multiplies by the quantile of the t distribution at the effective degrees of freedom,
// rounded down to an integer (JCGM 100, G.4.1), or by the normal one where they are unlimited.
func (b Budget) Expand(coverage float64) Expanded {
	p := (1 + coverage) / 2
	e := Expanded{Coverage: coverage}
	if math.IsInf(b.Freedom, 1) || b.Freedom > 1e6 {
		e.K = distuv.UnitNormal.Quantile(p)
		e.Because = fmt.Sprintf("normal distribution, %.4g %% coverage: no row that matters has few degrees of freedom", coverage*100)
	} else {
		nu := math.Max(1, math.Floor(b.Freedom))
		e.K = distuv.StudentsT{Sigma: 1, Nu: nu}.Quantile(p)
		e.Because = fmt.Sprintf("t distribution with %.0f effective degrees of freedom (Welch-Satterthwaite %.4g, rounded down), %.4g %% coverage", nu, b.Freedom, coverage*100)
		var tied []string
		for _, r := range b.Rows {
			if r.Covariance {
				tied = append(tied, r.Symbol)
			}
		}
		if len(tied) > 0 {
			e.Because += "; inputs tied by " + strings.Join(tied, ", ") + " count as one group"
		}
	}
	e.U = e.K * b.U
	return e
}

// Simultaneous sums up quantities that were observed in simultaneous sets (one column a quantity):
// means, standard uncertainties of the means, and their correlation coefficients, from the same
// sets (JCGM 100, 4.2.3 and 5.2.3).
func Simultaneous(columns ...[]float64) (means, u []float64, r [][]float64) {
	n := float64(len(columns[0]))
	cov := func(a, b int) float64 {
		s := 0.0
		for i := range columns[a] {
			s += (columns[a][i] - means[a]) * (columns[b][i] - means[b])
		}
		return s / (n - 1) / n
	}
	for _, col := range columns {
		m := 0.0
		for _, v := range col {
			m += v / n
		}
		means = append(means, m)
	}
	for a := range columns {
		u = append(u, math.Sqrt(cov(a, a)))
	}
	for a := range columns {
		r = append(r, make([]float64, len(columns)))
		for b := range columns {
			r[a][b] = cov(a, b) / (u[a] * u[b])
		}
	}
	return means, u, r
}
