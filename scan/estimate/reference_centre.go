package estimate

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// centreOf is where a profile stands, from three readings: low flank, top, high flank, with its
// standard uncertainty by counting.
//
// Without a predicted profile it is a Gaussian without ground, which three readings fit exactly:
// with y = ln(rate net of accidentals) the centre is the vertex of the parabola through the three,
//
//	c = (x1 + x2)/2 - b1/(2 b2),  b1 = (y2 - y1)/(x2 - x1),  b2 = ((y3 - y2)/(x3 - x2) - b1)/(x3 - x1),
//
// and u(c) follows from Var(y) = N/(N - A)^2. With flanks at half maximum and N counts at the top it
// is fwhm/(4 ln2 sqrt(N)) = 0.36 fwhm/sqrt(N) (derived here). With a predicted profile, centre,
// width and height are those of the profile, moved and stretched, by Poisson likelihood: a flat top
// has steeper flanks than a Gaussian of its width, which would call each shift too large.
func centreOf(three [3]Spot, predicted *armProfile) (centre, u float64, err error) {
	if !(three[0].AngleDeg < three[1].AngleDeg && three[1].AngleDeg < three[2].AngleDeg) {
		return 0, 0, fmt.Errorf("flanks at %.4g and %.4g deg, the top at %.4g deg; want the top between them", three[0].AngleDeg, three[2].AngleDeg, three[1].AngleDeg)
	}
	if predicted != nil {
		return predicted.centre(three)
	}
	return vertex(three)
}

// armProfile is a predicted profile through the top of a reference.
type armProfile struct {
	rate      func(angleDeg float64) float64
	middleDeg float64 // half way between its half maxima: of a flat top the maximum itself stands anywhere
	peak      float64
}

// newArmProfile asks the model from a width below the low flank to one above the high one. It is nil
// where the model cannot say, or where the profile that it predicts stands elsewhere and says nothing
// of the form here.
func newArmProfile(model func(angleDeg float64) float64, low, high float64) *armProfile {
	reach := high - low
	if !(reach > 0) {
		return nil
	}
	table, err := tabulate(model, low-1.2*reach, high+1.2*reach, reach)
	if err != nil {
		return nil
	}
	top := highest(table, low-reach, high+reach)
	p := &armProfile{rate: table, peak: table(top)}
	at := func(side float64) float64 {
		return half(func(v float64) float64 { return table(top+side*v) / p.peak }, 0, 2.2*reach)
	}
	p.middleDeg = top + (at(1)-at(-1))/2
	if p.middleDeg < low-reach/2 || p.middleDeg > high+reach/2 {
		return nil
	}
	return p
}

var errNoPeak = errors.New("the counts on both flanks and at the top are no peak")

func vertex(three [3]Spot) (centre, u float64, err error) {
	var x, y, v [3]float64
	for i, s := range three {
		net := s.Counts - s.Known
		if !(net > 0) {
			return 0, 0, errNoPeak
		}
		x[i], y[i], v[i] = s.AngleDeg, math.Log(net/s.Exposure), s.Counts/(net*net)
	}
	b1 := (y[1] - y[0]) / (x[1] - x[0])
	b2 := ((y[2]-y[1])/(x[2]-x[1]) - b1) / (x[2] - x[0])
	if !(b2 < 0) {
		return 0, 0, errNoPeak
	}
	centre = (x[0]+x[1])/2 - b1/(2*b2)
	if reach := x[2] - x[0]; centre < x[0]-reach || centre > x[2]+reach {
		return 0, 0, fmt.Errorf("%w: its centre would be at %.4g deg, far from the flanks", errNoPeak, centre)
	}
	toB1 := [3]float64{-1 / (x[1] - x[0]), 1 / (x[1] - x[0]), 0}
	variance := 0.0
	for i := range x {
		toB2 := 1.0
		for k := range x {
			if k != i {
				toB2 /= x[i] - x[k]
			}
		}
		slope := -toB1[i]/(2*b2) + b1*toB2/(2*b2*b2)
		variance += slope * slope * v[i]
	}
	return centre, math.Sqrt(variance), nil
}

// The parameters of a predicted profile through three readings.
const (
	moved     = iota // where its middle stands, degrees
	stretched        // its width, of the predicted one
	raised           // counts per exposure at its maximum
)

func (a *armProfile) centre(three [3]Spot) (centre, u float64, err error) {
	low, high := three[0].AngleDeg, three[2].AngleDeg
	reach := high - low
	shape := func(v float64) float64 { return math.Max(a.rate(a.middleDeg+v)/a.peak, 1e-9) }
	n := make([]float64, 3)
	for i, s := range three {
		n[i] = s.Counts
	}
	pr := problem{
		n: 3, low: []float64{low - reach, 0.25, 1e-9}, high: []float64{high + reach, 4, math.Inf(1)}, enough: 1e-9,
		model: func(p, m []float64) {
			for i, s := range three {
				m[i] = s.Exposure*p[raised]*shape((s.AngleDeg-p[moved])/p[stretched]) + s.Known
			}
		},
		value:  func(m []float64) float64 { return Cash(n, m) },
		slopes: func(i int, m float64) (g, h float64) { return 2 * (1 - n[i]/m), 2 / m },
	}
	starts := []float64{three[1].AngleDeg, a.middleDeg}
	if c, _, err := vertex(three); err == nil {
		starts = append(starts, c)
	}
	height := math.Max(three[1].Counts-three[1].Known, 1) / three[1].Exposure
	best := Fit{Value: math.Inf(1)}
	for _, start := range starts {
		pr.start = []float64{start, 1, height}
		if fit, err := pr.minimise(); err == nil && fit.Value < best.Value {
			best = fit
		}
	}
	switch {
	case math.IsInf(best.Value, 1) || best.Bounded[moved] || best.Bounded[stretched] || best.Bounded[raised]:
		return 0, 0, errNoPeak
	case best.Value > judgedSigmas*judgedSigmas:
		return 0, 0, fmt.Errorf("%w of the predicted form", errNoPeak)
	}
	return best.Params[moved], best.U(moved), nil
}

// sameChance is the chance that two sets of three counts differ as much and come from the same
// rates: the likelihood ratio of each pair of counts, and their sum as chi square.
func sameChance(a, b [3]Spot) float64 {
	sum := 0.0
	for i := range a {
		total := (a[i].Counts + b[i].Counts) / (a[i].Exposure + b[i].Exposure)
		if total > 0 {
			sum += Cash([]float64{a[i].Counts, b[i].Counts}, []float64{total * a[i].Exposure, total * b[i].Exposure})
		}
	}
	return distuv.ChiSquared{K: 3}.Survival(sum)
}
