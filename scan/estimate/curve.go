package estimate

import (
	"cmp"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"strings"

	"gonum.org/v1/gonum/mat"

	"gemel/protocol"
)

// CurveQuestion is what a tuning curve or a conjugate map is asked of: recipe key result, kinds
// tuning_curve and conjugate_map.
type CurveQuestion struct {
	Channel  string  // singles or coincidences
	Along    string  // the arm that is fitted at each place
	Against  string  // the axis whose places they are
	Coverage float64 // 0: 0.95
	Trials   int     // simulated data sets for each place's goodness of fit; 0: 100
	Seed     uint64
}

// Curve is fitted angles of one axis against another, beside what the model says.
type Curve struct {
	Along       string         `json:"along"`
	Against     string         `json:"against"`
	Places      []PlaceOnCurve `json:"places"`
	Unknowns    []Unknown      `json:"unknowns"`
	Inseparable []string       `json:"inseparable"` // what these readings cannot tell apart, in words
	ChiSquare   float64        `json:"chi_square"`
	Freedom     int            `json:"degrees_of_freedom"`
	P           float64        `json:"p"` // chance of a larger chi square
}

// PlaceOnCurve is one fitted angle. The angle is that of the bare emission (or of the bare partner):
// the fitted shift of the profile, added to where the model's bare light goes, so that aperture and
// band, which pull a peak, are taken out by the model.
type PlaceOnCurve struct {
	AgainstDeg   float64 `json:"against_deg"`
	AngleDeg     float64 `json:"angle_deg"`
	U            float64 `json:"standard_uncertainty_deg"` // the fit's alone
	PeakDeg      float64 `json:"peak_deg"`                 // of the profile itself, midway between its half maxima
	PredictedDeg float64 `json:"predicted_deg"`            // with nothing fitted
	FittedDeg    float64 `json:"fitted_deg"`               // with the unknowns fitted
	ResidualDeg  float64 `json:"residual_deg"`
	Readings     int     `json:"readings"`
	P            float64 `json:"goodness_of_fit"` // share of simulated data sets that fit the place's profile no better
	Left         string  `json:"left_out,omitempty"`
}

// Unknown is a number that the comparison with the model leaves open.
type Unknown struct {
	Name   string  `json:"name"`
	Value  float64 `json:"value"`
	U      float64 `json:"standard_uncertainty"` // with the axes' errors
	Unit   string  `json:"unit"`
	Fitted bool    `json:"fitted"` // else it was held, with the uncertainty stated
}

// correlated is from which correlation on two unknowns are called inseparable: their uncertainties
// are then seven times what each would have alone.
const correlated = 0.99

// TuningCurve fits the place of the light along an arm at each crystal tilt and compares it with
// phase matching: angle(tilt) = E(tilt + t) + z, with the tilt's zero t and the arm's z unknown. The
// declared cut cannot be told from t, so t is given with the cut held, and the cut that would do as
// well beside it. z is fitted where the curve is bent enough to tell it from t, and held at 0 with
// the axis's error otherwise. The value is t.
func TuningCurve(rows Rows, bench Bench, model Model, q CurveQuestion) (Result, error) {
	c, no := newComparison(rows, bench, model, q, "tuning_curve")
	c.r.quantity = fmt.Sprintf("zero of %s by phase matching", q.Against)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	shift := 0.0
	var fit linear
	free := 2
	// The profile's shape goes with the tilt as it truly is, so the fit is repeated there.
	for range 3 {
		if !c.fitPlaces(shift, no) {
			return Result{}, no
		}
		var err error
		if fit, free, err = c.tuned(shift); err != nil {
			no.addf("%v", err)
			return Result{}, no
		}
		moved := fit.p[0] - shift
		shift = fit.p[0]
		if math.Abs(moved) < fit.u(0)/20 {
			break
		}
	}
	u := fit.u(0)
	inputs := []Input{
		{Quantity: "fit to the angles", Symbol: "t_fit", Unit: "deg", Estimate: shift, U: u * c.factor(fit), Evaluation: TypeA, Distribution: Normal},
		{Quantity: "error of " + q.Against, Symbol: "x_tilt", Unit: "deg", U: bench.AxisError[q.Against].U, Evaluation: TypeB, Distribution: Normal},
	}
	through := 0.0
	if free == 1 {
		through = fit.held // degrees of tilt a degree of the arm's zero
		inputs = append(inputs, Input{Quantity: "zero of " + q.Along + ", held at 0", Symbol: "x_arm", Unit: "deg", U: bench.AxisError[q.Along].U, Evaluation: TypeB, Distribution: Normal})
	}
	b, err := Propagate(func(x []float64) float64 {
		y := x[0] + x[1]
		if len(x) > 2 {
			y += through * x[2]
		}
		return y
	}, inputs, nil)
	if err != nil {
		no.addf("%v", err)
		return Result{}, no
	}
	c.r.state(b)
	v := c.r.Curve
	v.Unknowns = []Unknown{{Name: "zero of " + q.Against, Value: b.Value, U: b.U, Unit: "deg", Fitted: true}}
	zero := Unknown{Name: "zero of " + q.Along, Unit: "deg", U: bench.AxisError[q.Along].U}
	if free == 2 {
		zero = Unknown{Name: zero.Name, Value: fit.p[1], U: math.Hypot(fit.u(1)*c.factor(fit), zero.U), Unit: "deg", Fitted: true}
	} else {
		v.Inseparable = append(v.Inseparable, fmt.Sprintf("the zeros of %s and of %s: the curve over these places is too straight, so the second is held at 0 with the axis's error; more places nearer to where the ring opens would tell", q.Against, q.Along))
	}
	v.Unknowns = append(v.Unknowns, zero)
	same := "the zero of " + q.Against + " and the crystal's cut"
	if model.CutDeg != nil {
		if cut, err := model.CutDeg(b.Value); err == nil {
			if declared, err := model.CutDeg(0); err == nil {
				same += fmt.Sprintf(": with the tilt's zero right, a cut of %.4f deg instead of %.4f deg would do as well", cut, declared)
				slope, err := model.CutDeg(b.Value + b.U)
				if err == nil {
					v.Unknowns = append(v.Unknowns, Unknown{Name: "cut, if the zero of " + q.Against + " is right", Value: cut, U: math.Abs(slope - cut), Unit: "deg", Fitted: true})
				}
			}
		}
	}
	v.Inseparable = append(v.Inseparable, same)
	c.r.fitted = func(tiltDeg float64) float64 { return c.bare(tiltDeg+shift) + v.Unknowns[1].Value }
	c.finish(fit)
	return c.r, nil
}

// ConjugateMap fits, at each place of the other arm, where an arm finds the partners, and compares it
// with the momentum along the crystal's face: partner(a) = M(a) + o + k (a - mean a). o is what the
// two zeros leave together; k, that the filters' wavelengths or the axes' scales are not what is
// declared, is fitted from three places on, and held at 0 before. The value is o.
func ConjugateMap(rows Rows, bench Bench, model Model, q CurveQuestion) (Result, error) {
	c, no := newComparison(rows, bench, model, q, "conjugate_map")
	c.r.quantity = fmt.Sprintf("offset of %s from the partners of %s", q.Along, q.Against)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	if !c.fitPlaces(0, no) {
		return Result{}, no
	}
	middle, slope := 0.0, 0.0
	low, high := math.Inf(1), math.Inf(-1)
	for _, p := range c.fits {
		middle += p.against / float64(len(c.fits))
		low, high = math.Min(low, p.against), math.Max(high, p.against)
	}
	if a, err := model.Bare(high + 0.05); err == nil { // how the partner goes with the other arm
		if b, err := model.Bare(low - 0.05); err == nil {
			slope = (a - b) / (high - low + 0.1)
		}
	}
	var design [][]float64
	var y, u []float64
	free := 1
	if len(c.fits) > 2 {
		free = 2
	}
	for _, p := range c.fits {
		design = append(design, []float64{1, p.against - middle}[:free])
		y, u = append(y, p.offset), append(u, p.u)
	}
	fit, err := weighted(design, y, u)
	if err != nil {
		no.addf("%v", err)
		return Result{}, no
	}
	b, err := Propagate(func(x []float64) float64 { return x[0] + x[1] - slope*x[2] }, []Input{
		{Quantity: "fit to the angles", Symbol: "o_fit", Unit: "deg", Estimate: fit.p[0], U: fit.u(0) * c.factor(fit), Evaluation: TypeA, Distribution: Normal},
		{Quantity: "error of " + q.Along, Symbol: "x_along", Unit: "deg", U: bench.AxisError[q.Along].U, Evaluation: TypeB, Distribution: Normal},
		{Quantity: "error of " + q.Against, Symbol: "x_against", Unit: "deg", U: bench.AxisError[q.Against].U, Evaluation: TypeB, Distribution: Normal},
	}, nil)
	if err != nil {
		no.addf("%v", err)
		return Result{}, no
	}
	c.r.state(b)
	v := c.r.Curve
	v.Unknowns = []Unknown{{Name: fmt.Sprintf("zero of %s less %.4g times the zero of %s", q.Along, slope, q.Against), Value: b.Value, U: b.U, Unit: "deg", Fitted: true}}
	v.Inseparable = []string{fmt.Sprintf("the zeros of %s and %s: only what they leave together is seen; a zero from both sides of the ring tells one of them", q.Along, q.Against)}
	if free == 2 {
		k := Unknown{Name: "slope beside the model's", Value: fit.p[1], U: fit.u(1) * c.factor(fit), Unit: "1", Fitted: true}
		v.Unknowns = append(v.Unknowns, k)
		if math.Abs(k.Value) > 3*k.U {
			c.r.Warnings = append(c.r.Warnings, fmt.Sprintf("the partners' angle changes by %+.4f ± %.2g more a degree of %s than momentum asks for: the filters' centres, or an axis's scale, are not what the bench file says", k.Value, k.U, q.Against))
		}
		v.Inseparable = append(v.Inseparable, "the ratio of the two filters' wavelengths and the ratio of the two axes' scales: both are a slope")
	} else {
		v.Inseparable = append(v.Inseparable, "a slope: with fewer than three places there is none to see")
	}
	c.r.fitted = func(deg float64) float64 {
		y := c.bare(deg) + fit.p[0]
		if free == 2 {
			y += fit.p[1] * (deg - middle)
		}
		return y
	}
	c.finish(fit)
	return c.r, nil
}

// comparison is a curve on its way.
type comparison struct {
	model Model
	q     CurveQuestion
	r     Result

	groups []group
	fits   []placeFit
}

// group is the readings at one place of the other axis.
type group struct {
	nominalDeg float64 // as asked for
	trueDeg    float64 // as proved, on the average
	data       []Spot
}

// placeFit is what the profile at one place gave.
type placeFit struct {
	against          float64
	offset, u        float64 // of the profile, from where the model has it with nothing fitted
	bare, peak       float64
	shape            PeakFit
	readings         int
	predictedAtShift float64 // change of the bare angle by the shift that the profile had
}

func newComparison(rows Rows, bench Bench, model Model, q CurveQuestion, kind string) (*comparison, *Refusal) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	if q.Trials == 0 {
		q.Trials = 100
	}
	c := &comparison{model: model, q: q, r: newResult(rows, kind)}
	c.r.Unit, c.r.Coverage = "deg", q.Coverage
	c.r.Curve = &Curve{Along: q.Along, Against: q.Against}
	no := &Refusal{}
	kinds, aside := rows.split()
	c.r.SetAside = aside
	if len(kinds[protocol.Light]) == 0 {
		no.addf("the run has no light reading that counts: %d taken, %d set aside; want it to be run, or the reasons below to be mended", len(rows.Readings), len(aside))
		return c, no
	}
	if model.ProfileAt == nil || model.Bare == nil {
		no.addf("the bench describes no optics to compare with; want the blocks optics and arms in the bench file, or the result kind peak")
	}
	for _, axis := range []string{q.Along, q.Against} {
		if !(bench.AxisError[axis].U > 0) {
			no.addf("%s: the axis's standard uncertainty (error) is not declared; an angle without it would claim the fit's alone", axis)
		}
	}
	byPlace := map[float64][]protocol.Reading{}
	for _, row := range kinds[protocol.Light] {
		i := slices.IndexFunc(row.Angles, func(a protocol.Angle) bool { return a.Axis == q.Against })
		if i < 0 {
			no.addf("reading %d: no angle of %q", row.Sequence, q.Against)
			break
		}
		at := row.Angles[i].Target.Degrees()
		byPlace[at] = append(byPlace[at], row)
	}
	for _, at := range slices.Sorted(maps.Keys(byPlace)) {
		lights := byPlace[at]
		g := group{nominalDeg: at}
		g.data = gather(map[protocol.ReadingKind][]protocol.Reading{protocol.Light: lights, protocol.Dark: kinds[protocol.Dark]}, bench, PeakQuestion{Axis: q.Along, Channel: q.Channel}, &c.r, no)
		for _, row := range lights {
			a, _ := angleOf(row, q.Against)
			g.trueDeg += a / float64(len(lights))
		}
		g.trueDeg = math.Round(g.trueDeg*1e6) / 1e6 // no axis tells more, and a sum of shares does
		c.groups = append(c.groups, g)
	}
	slices.Sort(c.r.Used)
	if len(c.groups) == 0 {
		no.addf("no light reading counts; want a sweep of %s at each place of %s", q.Along, q.Against)
	}
	return c, no
}

// fitPlaces fits each place's profile, predicted with the other axis shifted so. A place whose
// profile cannot be fitted is left out with the reason; without any there is no curve.
func (c *comparison) fitPlaces(shiftDeg float64, no *Refusal) bool {
	c.fits, c.r.Curve.Places = nil, nil
	var why []string
	for _, g := range c.groups {
		p, err := c.fitPlace(g, shiftDeg)
		if err != nil {
			why = append(why, fmt.Sprintf("%s at %.4g deg: %v", c.q.Against, g.nominalDeg, err))
			c.r.Curve.Places = append(c.r.Curve.Places, PlaceOnCurve{AgainstDeg: g.trueDeg, Readings: len(g.data), Left: err.Error()})
			continue
		}
		c.fits = append(c.fits, p)
	}
	if len(c.fits) == 0 {
		no.Reasons = append(no.Reasons, why...)
		return false
	}
	return true
}

func (c *comparison) fitPlace(g group, shiftDeg float64) (placeFit, error) {
	p := placeFit{against: g.trueDeg, readings: len(g.data)}
	var err error
	if p.bare, err = c.model.Bare(g.trueDeg); err != nil {
		return p, err
	}
	if shiftDeg != 0 {
		there, err := c.model.Bare(g.trueDeg + shiftDeg)
		if err != nil {
			return p, err
		}
		p.predictedAtShift = there - p.bare
	}
	if p.shape, err = FitPeak(g.data, PredictedPeak, c.model.ProfileAt(g.nominalDeg, shiftDeg)); err != nil {
		return p, err
	}
	if err := p.shape.inSweep(); err != nil {
		return p, err
	}
	if d, ok := p.shape.decide(); ok && !d.Detected {
		return p, errors.New("no peak is decided to be there: its net counts are below the decision threshold")
	}
	p.offset, p.u, p.peak = p.shape.Fit.Params[centreParam]+p.predictedAtShift, p.shape.Fit.U(centreParam), p.shape.middleDeg()
	if fwhm, _ := p.shape.FWHMDeg(); !(p.u > 0 && p.u < fwhm/2) {
		return p, fmt.Errorf("its angle is held to ± %.2g deg only, with a width of %.2g deg: too few counts, or none of the light", p.u, fwhm)
	}
	return p, nil
}

// tuned fits tilt zero and, where it can be told, arm zero; shift is where the curve is linearised.
func (c *comparison) tuned(shift float64) (linear, int, error) {
	const h = 0.01 // deg
	var both, one [][]float64
	var y, u []float64
	for _, p := range c.fits {
		up, errUp := c.model.Bare(p.against + shift + h)
		down, errDown := c.model.Bare(p.against + shift - h)
		slope := (up - down) / (2 * h)
		if errUp != nil || errDown != nil { // beside where the ring opens
			slope = 0
		}
		both = append(both, []float64{slope, 1})
		one = append(one, []float64{slope})
		y, u = append(y, p.offset-p.predictedAtShift+slope*shift), append(u, p.u)
	}
	if len(c.fits) > 2 {
		if f, err := weighted(both, y, u); err == nil && math.Abs(f.cov[0][1])/(f.u(0)*f.u(1)) < correlated {
			return f, 2, nil
		}
	}
	f, err := weighted(one, y, u)
	if err != nil {
		return f, 0, err
	}
	// What an error of the arm's zero makes of the tilt's.
	ones := make([]float64, len(y))
	for i := range ones {
		ones[i] = 1
	}
	k, err := weighted(one, ones, u)
	f.held = -k.p[0]
	return f, 1, err
}

// bare is where the model's bare light goes, NaN where it has none.
func (c *comparison) bare(againstDeg float64) float64 {
	v, err := c.model.Bare(againstDeg)
	if err != nil {
		return math.NaN()
	}
	return v
}

// factor multiplies the fits' uncertainties where the angles scatter more than they allow.
func (c *comparison) factor(f linear) float64 { return f.dispersion.factor() }

// finish fills in the table and what it says.
func (c *comparison) finish(f linear) {
	v := c.r.Curve
	v.ChiSquare, v.Freedom, v.P = f.dispersion.ChiSquare, f.dispersion.Freedom, f.dispersion.P
	c.r.Dispersion = &f.dispersion
	for i, p := range c.fits {
		angle := p.bare + p.offset
		one := PlaceOnCurve{AgainstDeg: p.against, AngleDeg: angle, U: p.u, PeakDeg: p.peak, PredictedDeg: p.bare, FittedDeg: angle - f.residual[i], ResidualDeg: f.residual[i],
			Readings: p.readings, P: p.shape.Goodness(c.q.Trials, c.q.Seed+uint64(i)).P}
		if one.P < onePercent {
			c.r.Warnings = append(c.r.Warnings, fmt.Sprintf("the predicted profile does not describe the readings at %.4f deg of %s (p = %.2g)", p.against, c.q.Against, one.P))
		}
		v.Places = append(v.Places, one)
	}
	slices.SortFunc(v.Places, func(a, b PlaceOnCurve) int { return cmp.Compare(a.AgainstDeg, b.AgainstDeg) })
	left := 0
	for _, p := range v.Places {
		if p.Left != "" {
			left++
		}
	}
	if left > 0 {
		c.r.Warnings = append(c.r.Warnings, fmt.Sprintf("%d of %d places are left out: see the table", left, len(v.Places)))
	}
	if f.dispersion.Significant {
		c.r.Warnings = append(c.r.Warnings, fmt.Sprintf("the angles scatter about the model by %.2f times their uncertainties (p = %.2g), which are multiplied by it: an axis's errors from place to place, or a model that is not this crystal's", f.dispersion.Birge, f.dispersion.P))
	}
	c.r.predicted = c.bare
	c.r.note("model", "its own uncertainty (dispersion formulas, temperature, pump wavelength) is not in the budget")
	c.r.tidy()
}

// linear is a weighted straight fit.
type linear struct {
	p          []float64
	cov        [][]float64
	residual   []float64
	dispersion Dispersion
	held       float64 // of a tuning curve: degrees of tilt a degree of the arm's zero
}

func (f linear) u(i int) float64 { return math.Sqrt(f.cov[i][i]) }

// weighted solves y = design × p by least squares with the weights 1/u^2; the covariance is that of
// the stated uncertainties, whatever the residuals are.
func weighted(design [][]float64, y, u []float64) (linear, error) {
	n, k := len(y), len(design[0])
	if n < k {
		return linear{}, fmt.Errorf("%d places for %d unknowns; want at least as many", n, k)
	}
	a := mat.NewDense(n, k, nil)
	b := mat.NewVecDense(n, nil)
	for i := range n {
		for j := range k {
			a.Set(i, j, design[i][j]/u[i])
		}
		b.SetVec(i, y[i]/u[i])
	}
	var qr mat.QR
	qr.Factorize(a)
	var x mat.VecDense
	if err := qr.SolveVecTo(&x, false, b); err != nil {
		return linear{}, errors.New("the places do not hold the unknowns; want places where the curve is not the same")
	}
	var square, inverse mat.Dense
	square.Mul(a.T(), a)
	if err := inverse.Inverse(&square); err != nil {
		if _, poor := err.(mat.Condition); !poor || math.IsInf(float64(err.(mat.Condition)), 1) {
			return linear{}, errors.New("the places do not hold the unknowns; want places where the curve is not the same")
		}
	}
	f := linear{p: slices.Clone(x.RawVector().Data), cov: matrix(k)}
	for i := range k {
		for j := range k {
			f.cov[i][j] = inverse.At(i, j)
		}
	}
	variance := make([]float64, n)
	for i := range n {
		r := y[i]
		for j := range k {
			r -= design[i][j] * f.p[j]
		}
		f.residual = append(f.residual, r)
		variance[i] = u[i] * u[i]
	}
	f.dispersion = Disperse(f.residual, variance, k)
	return f, nil
}

func (c *Curve) text(b *strings.Builder) {
	if c == nil {
		return
	}
	fmt.Fprintf(b, "\nFitted against predicted (all angles in degrees; of %s at each place of %s)\n", c.Along, c.Against)
	fmt.Fprintf(b, "  %10s %10s %9s %10s %10s %10s %8s %6s\n", c.head(), "angle", "u", "predicted", "fitted", "residual", "res./u", "p")
	for _, p := range c.Places {
		if p.Left != "" {
			fmt.Fprintf(b, "  %10.4f left out: %s\n", p.AgainstDeg, p.Left)
			continue
		}
		fmt.Fprintf(b, "  %10.4f %10.4f %9.4f %10.4f %10.4f %+10.4f %+8.2f %6.2f\n", p.AgainstDeg, p.AngleDeg, p.U, p.PredictedDeg, p.FittedDeg, p.ResidualDeg, p.ResidualDeg/p.U, p.P)
	}
	fmt.Fprintf(b, "  chi square %.2f on %d degrees of freedom, p = %.3g. The angle is the bare light's: aperture and band are taken out by the model.\n", c.ChiSquare, c.Freedom, c.P)
	for _, u := range c.Unknowns {
		how := "fitted"
		if !u.Fitted {
			how = "held"
		}
		fmt.Fprintf(b, "  %s: %+.4f ± %.2g %s, %s\n", u.Name, u.Value, u.U, strings.TrimPrefix(u.Unit, "1"), how)
	}
	for _, s := range c.Inseparable {
		b.WriteString("  Not to be told apart: " + s + ".\n")
	}
}

func (c *Curve) head() string {
	if len(c.Against) > 10 {
		return "against"
	}
	return c.Against
}
