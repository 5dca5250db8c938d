package estimate

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/mat"
)

// Fit is a fitted model. Cov is unscaled for likelihoods and scaled by the residual variance for
// least squares.
type Fit struct {
	Params   []float64
	Cov      [][]float64
	Value    float64 // sum of squares, or the Cash statistic
	Freedom  int
	Residual float64 // residual standard deviation (least squares)
	Bounded  []bool  // parameters that ended on a bound: their uncertainty is not symmetric
}

// U is the standard uncertainty of parameter i.
func (f Fit) U(i int) float64 { return math.Sqrt(f.Cov[i][i]) }

// LinearFit solves a linear least-squares problem by QR (normal equations lose half the digits).
func LinearFit(design [][]float64, y []float64) (Fit, error) {
	n := len(y)
	if n == 0 || len(design) != n || len(design[0]) > n {
		return Fit{}, fmt.Errorf("%d observations for a design of %d rows; want as many, and at least as many as parameters", n, len(design))
	}
	p := len(design[0])
	a := mat.NewDense(n, p, slices.Concat(design...))
	var qr mat.QR
	qr.Factorize(a)
	var b mat.VecDense
	if err := qr.SolveVecTo(&b, false, mat.NewVecDense(n, slices.Clone(y))); err != nil {
		return Fit{}, fmt.Errorf("linear fit: %w; want parameters that the data can tell apart", err)
	}
	f := Fit{Params: slices.Clone(b.RawVector().Data), Freedom: n - p, Bounded: make([]bool, p)}
	for i, row := range design {
		v := y[i]
		for k := range row {
			v -= row[k] * f.Params[k]
		}
		f.Value += v * v
	}
	if f.Freedom > 0 {
		f.Residual = math.Sqrt(f.Value / float64(f.Freedom))
	}
	var r mat.Dense
	qr.RTo(&r)
	tri := mat.NewTriDense(p, mat.Upper, nil)
	for i := range p {
		for k := i; k < p; k++ {
			tri.SetTri(i, k, r.At(i, k))
		}
	}
	var inv mat.TriDense
	if err := inv.InverseTri(tri); err != nil {
		return Fit{}, fmt.Errorf("linear fit: %w; want parameters that the data can tell apart", err)
	}
	var cov mat.Dense
	cov.Mul(&inv, inv.T())
	f.Cov = matrix(p)
	for i := range p {
		for k := range p {
			f.Cov[i][k] = cov.At(i, k) * f.Residual * f.Residual
		}
	}
	return f, nil
}

func matrix(p int) [][]float64 {
	m := make([][]float64, p)
	for i := range m {
		m[i] = make([]float64, p)
	}
	return m
}

// LeastSquares fits y = model(x; p) by the method of Levenberg and Marquardt with parameters scaled
// by their own curvature. Standard deviations are scaled by the residual one, unweighted.
func LeastSquares(model func(x float64, p []float64) float64, x, y, start []float64) (Fit, error) {
	pr := problem{
		n: len(y), start: start,
		model: func(p, m []float64) {
			for i := range x {
				m[i] = model(x[i], p)
			}
		},
		value: func(m []float64) float64 {
			s := 0.0
			for i := range m {
				s += (y[i] - m[i]) * (y[i] - m[i])
			}
			return s
		},
		slopes: func(i int, m float64) (g, h float64) { return -2 * (y[i] - m), 2 },
	}
	f, err := pr.minimise()
	if err != nil {
		return Fit{}, err
	}
	if f.Freedom > 0 {
		f.Residual = math.Sqrt(f.Value / float64(f.Freedom))
	}
	for i := range f.Cov {
		for k := range f.Cov {
			f.Cov[i][k] *= f.Residual * f.Residual
		}
	}
	return f, nil
}

// problem is a sum over observations of a function of the model there: least squares and Poisson
// likelihoods are two of them.
type problem struct {
	n         int
	start     []float64
	low, high []float64 // nil: none
	model     func(p, m []float64)
	value     func(m []float64) float64                      // +Inf where m is not allowed
	slopes    func(i int, m float64) (first, second float64) // of observation i's term, the second as expected
	enough    float64                                        // a gain this small is none; 0: to the last digit
	fixed     int                                            // 1 + index of a parameter held at its start; 0: none
}

var errNoFit = errors.New("the fit did not converge")

const (
	fitIterations = 600
	fitDamping    = 1e-3
)

// minimise returns the minimum, and the inverse of half the expected curvature as Cov.
func (pr problem) minimise() (Fit, error) {
	p := slices.Clone(pr.start)
	k := len(p)
	pr.clamp(p)
	m, trial := make([]float64, pr.n), make([]float64, pr.n)
	pr.model(p, m)
	best := pr.value(m)
	if math.IsNaN(best) || math.IsInf(best, 0) {
		return Fit{}, fmt.Errorf("%w: the start is not allowed; want starting values that give positive expectations", errNoFit)
	}
	jac := matrix(k)
	for i := range jac {
		jac[i] = make([]float64, pr.n)
	}
	grad, damping := make([]float64, k), fitDamping
	scale := make([]float64, k) // the largest curvature met so far (Moré 1978): a flat tail does not unleash a step
	curve := matrix(k)
	small := 0
	for range fitIterations {
		pr.jacobian(p, jac)
		for a := range k {
			grad[a] = 0
			for b := range k {
				curve[a][b] = 0
			}
		}
		for i := range pr.n {
			g, h := pr.slopes(i, m[i])
			for a := range k {
				grad[a] += g * jac[a][i]
				for b := range a + 1 {
					curve[a][b] += h * jac[a][i] * jac[b][i]
				}
			}
		}
		for a := range k {
			scale[a] = math.Max(scale[a], curve[a][a])
		}
		free := pr.free(p, grad)
		moved := false
		for range 40 {
			step, ok := solveDamped(curve, grad, scale, free, damping)
			if !ok {
				damping = math.Max(damping*4, 1e-8)
				continue
			}
			q := slices.Clone(p)
			size := 0.0
			for a := range k {
				q[a] += step[a]
			}
			pr.clamp(q)
			for a := range k {
				size = math.Max(size, math.Abs(q[a]-p[a])/(math.Abs(p[a])+1e-12))
			}
			pr.model(q, trial)
			v := pr.value(trial)
			if v <= best { // NaN and +Inf fail this
				gain := best - v
				p, best, moved = q, v, true
				copy(m, trial)
				damping = math.Max(damping/9, 1e-15)
				if size < 1e-12 || gain <= 1e-14*math.Abs(best) && size < 1e-8 || gain < pr.enough {
					small++
				} else {
					small = 0
				}
				break
			}
			damping = math.Max(damping*4, 1e-8)
			if size < 1e-13 {
				break
			}
		}
		if !moved || small >= 3 {
			return pr.finish(p, m, best, jac)
		}
	}
	return Fit{}, fmt.Errorf("%w in %d steps; want starting values nearer to the data", errNoFit, fitIterations)
}

func (pr problem) finish(p, m []float64, value float64, jac [][]float64) (Fit, error) {
	k := len(p)
	pr.jacobian(p, jac)
	f := Fit{Params: p, Value: value, Freedom: pr.n - k, Cov: matrix(k), Bounded: make([]bool, k)}
	if pr.fixed > 0 {
		f.Freedom++
	}
	half := matrix(k)
	grad := make([]float64, k)
	for i := range pr.n {
		g, h := pr.slopes(i, m[i])
		for a := range k {
			grad[a] += g * jac[a][i]
			for b := range a + 1 {
				half[a][b] += h / 2 * jac[a][i] * jac[b][i]
			}
		}
	}
	free := pr.free(p, grad)
	var at []int
	for a := range k {
		if free[a] {
			at = append(at, a)
		} else if pr.fixed != a+1 {
			f.Bounded[a] = true
		}
	}
	if len(at) == 0 {
		return f, nil
	}
	s := mat.NewSymDense(len(at), nil)
	for i, a := range at {
		for j := range i + 1 {
			// scaled to a unit diagonal, so that degrees and counts do not spoil the inverse
			d := math.Sqrt(half[a][a] * half[at[j]][at[j]])
			if d == 0 {
				return Fit{}, fmt.Errorf("%w: parameter %d changes nothing; want data that depend on it", errNoFit, a)
			}
			s.SetSym(i, j, half[a][at[j]]/d)
		}
	}
	var ch mat.Cholesky
	if !ch.Factorize(s) {
		return Fit{}, fmt.Errorf("%w: the data cannot tell the parameters apart", errNoFit)
	}
	var inv mat.SymDense
	if err := ch.InverseTo(&inv); err != nil {
		if _, poor := err.(mat.Condition); !poor {
			return Fit{}, fmt.Errorf("%w: %w", errNoFit, err)
		}
	}
	for i, a := range at {
		for j, b := range at {
			f.Cov[a][b] = inv.At(i, j) / math.Sqrt(half[a][a]*half[b][b])
		}
	}
	return f, nil
}

func (pr problem) clamp(p []float64) {
	for a := range p {
		if pr.low != nil {
			p[a] = math.Max(p[a], pr.low[a])
		}
		if pr.high != nil {
			p[a] = math.Min(p[a], pr.high[a])
		}
	}
}

// free says which parameters may move: neither fixed nor pushed against a bound.
func (pr problem) free(p, grad []float64) []bool {
	free := make([]bool, len(p))
	for a := range p {
		held := pr.fixed == a+1 ||
			pr.low != nil && p[a] <= pr.low[a] && grad[a] >= 0 ||
			pr.high != nil && p[a] >= pr.high[a] && grad[a] <= 0
		free[a] = !held
	}
	return free
}

// jacobian by five-point differences: certified answers need ten digits of it.
func (pr problem) jacobian(p []float64, jac [][]float64) {
	buf := [4][]float64{}
	for s := range buf {
		buf[s] = make([]float64, pr.n)
	}
	q := slices.Clone(p)
	for a := range p {
		h := 1e-5 * math.Abs(p[a])
		if h == 0 {
			h = 1e-5 * math.Max(math.Abs(pr.start[a]), 1e-3)
		}
		for s, d := range [4]float64{-2, -1, 1, 2} {
			q[a] = p[a] + d*h
			pr.model(q, buf[s])
		}
		q[a] = p[a]
		for i := range pr.n {
			jac[a][i] = (buf[0][i] - 8*buf[1][i] + 8*buf[2][i] - buf[3][i]) / (12 * h)
		}
	}
}

func solveDamped(curve [][]float64, grad, scale []float64, free []bool, damping float64) ([]float64, bool) {
	var at []int
	for a := range grad {
		if free[a] && scale[a] > 0 {
			at = append(at, a)
		}
	}
	step := make([]float64, len(grad))
	if len(at) == 0 {
		return step, true
	}
	s := mat.NewSymDense(len(at), nil)
	rhs := mat.NewVecDense(len(at), nil)
	for i, a := range at {
		for j := range i + 1 {
			s.SetSym(i, j, curve[a][at[j]]/math.Sqrt(scale[a]*scale[at[j]]))
		}
		s.SetSym(i, i, curve[a][a]/scale[a]+damping)
		rhs.SetVec(i, -grad[a]/math.Sqrt(scale[a]))
	}
	var ch mat.Cholesky
	if !ch.Factorize(s) {
		return nil, false
	}
	var x mat.VecDense
	if err := ch.SolveVecTo(&x, rhs); err != nil {
		if _, poor := err.(mat.Condition); !poor {
			return nil, false
		}
	}
	for i, a := range at {
		step[a] = x.AtVec(i) / math.Sqrt(scale[a])
	}
	return step, true
}
