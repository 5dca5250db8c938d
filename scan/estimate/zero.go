package estimate

import (
	"fmt"
	"math"
	"strings"
)

// ZeroQuestion is what a zero is asked of: recipe key result, kind zero.
type ZeroQuestion struct {
	Axis     string
	Channel  string  // singles or coincidences
	Coverage float64 // 0: 0.95
	Trials   int     // simulated data sets for the goodness of fit; 0: 200
	Seed     uint64
}

// ZeroOfArm is an arm's zero from both sides of the ring. All angles are bench angles; where the
// model predicts the profiles, a side's angle is the middle between the half maxima.
type ZeroOfArm struct {
	Axis     string   `json:"axis"`
	OffsetU  float64  `json:"offset_fit_standard_uncertainty_deg"` // the fits' alone
	LowDeg   float64  `json:"low_side_deg"`
	LowU     float64  `json:"low_side_standard_uncertainty_deg"` // the fit's alone
	HighDeg  float64  `json:"high_side_deg"`
	HighU    float64  `json:"high_side_standard_uncertainty_deg"`
	HalfDeg  float64  `json:"half_distance_deg"`
	HalfU    float64  `json:"half_distance_standard_uncertainty_deg"`
	Expected *float64 `json:"predicted_half_distance_deg"` // by phase matching; null: the bench describes no optics
}

// Zero is the bench angle at which an arm looks into the pump, from the two places where it crosses
// the ring: the pump is midway between what is left of them when the model's own two places are
// taken away, so a ring that tilt or walk-off makes lopsided does not pull the zero. Half the distance
// is compared with phase matching. The two sides are fitted each by itself, by Poisson likelihood
// (FitPeak). The axis's error goes whole into the zero, since an error of both angles alike is one of
// the zero, and as two independent ones into the distance.
func Zero(rows Rows, bench Bench, model Model, q ZeroQuestion) (Result, error) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	if q.Trials == 0 {
		q.Trials = 200
	}
	r := newResult(rows, "zero")
	r.Unit, r.Coverage = "deg", q.Coverage
	r.quantity = "zero of " + q.Axis
	no := &Refusal{}
	axis, ok := bench.AxisError[q.Axis]
	if !ok || !(axis.U > 0) {
		no.addf("%s: the axis's standard uncertainty (error) is not declared; an angle without it would claim the fit's alone", q.Axis)
	}
	kinds, aside := rows.split()
	r.SetAside = aside
	data := gather(kinds, bench, PeakQuestion{Axis: q.Axis, Channel: q.Channel}, &r, no)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	shape := GaussianPeak
	if model.Profile != nil {
		shape = PredictedPeak
	}
	var side [2]PeakFit
	var place, offset, u [2]float64
	for i, name := range []string{"below zero", "above zero"} {
		var half []Spot
		for _, s := range data {
			if (s.AngleDeg > 0) == (i == 1) {
				half = append(half, s)
			}
		}
		fit, err := FitPeak(half, shape, model.Profile)
		if err == nil {
			err = fit.inSweep()
		}
		if err == nil {
			err = fit.stands(q.Channel)
		}
		if err != nil {
			no.addf("%s on the side %s: %v; want a sweep of %s that crosses the ring on both sides of the pump", q.Channel, name, err, q.Axis)
			continue
		}
		side[i], u[i], place[i] = fit, fit.Fit.U(centreParam), fit.middleDeg()
		if shape == PredictedPeak {
			offset[i] = fit.Fit.Params[centreParam]
		}
	}
	if err := no.err(); err != nil {
		return Result{}, err
	}
	z := &ZeroOfArm{Axis: q.Axis, OffsetU: math.Hypot(u[0], u[1]) / 2, LowDeg: place[0], LowU: u[0], HighDeg: place[1], HighU: u[1], HalfDeg: (place[1] - place[0]) / 2}
	z.HalfU = math.Hypot(z.OffsetU, axis.U/math.Sqrt2)
	from := [2]string{"angle of the ring", "angle of the ring"}
	estimate := place
	if shape == PredictedPeak {
		estimate, from = offset, [2]string{"measured minus predicted angle", "measured minus predicted angle"}
		half := z.HalfDeg - (offset[1]-offset[0])/2
		z.Expected = &half
	} else {
		r.Warnings = append(r.Warnings, "the bench describes no optics, so the ring is taken to lie evenly about the pump: a tilted crystal, or walk-off in the plane of the arms, would pull the zero")
	}
	b, err := Propagate(func(x []float64) float64 { return (x[0]+x[1])/2 + x[2] }, []Input{
		{Quantity: from[0] + ", side below zero", Symbol: "x_low", Unit: "deg", Estimate: estimate[0], U: u[0], Evaluation: TypeA, Distribution: Normal},
		{Quantity: from[1] + ", side above zero", Symbol: "x_high", Unit: "deg", Estimate: estimate[1], U: u[1], Evaluation: TypeA, Distribution: Normal},
		{Quantity: "error of the axis", Symbol: "x_axis", Unit: "deg", U: axis.U, Evaluation: TypeB, Distribution: Normal},
	}, nil)
	if err != nil {
		no.addf("%v", err)
		return Result{}, no
	}
	r.state(b)
	r.Zero = z
	if z.Expected != nil {
		if apart := (z.HalfDeg - *z.Expected) / z.HalfU; math.Abs(apart) > 3 {
			r.Warnings = append(r.Warnings, fmt.Sprintf("half the distance between the two sides is %.4f ± %.2g deg and %.4f deg by phase matching, apart by %.1f of that: cut, tilt or temperature is not what the bench file says, or the arm's scale is not; the zero does not suffer", z.HalfDeg, z.HalfU, *z.Expected, math.Abs(apart)))
		}
	}
	for i, name := range []string{"below zero", "above zero"} {
		g := side[i].Goodness(q.Trials, q.Seed+uint64(i))
		r.noteValue("goodness of fit, side "+name, g.P, 0.01, "1", fmt.Sprintf("Cash statistic %.4g on %d degrees of freedom; %d simulated data sets gave %.4g on average", g.Statistic, side[i].Fit.Freedom, g.Trials, g.Mean))
		if g.P < onePercent {
			r.Warnings = append(r.Warnings, fmt.Sprintf("the %s profile does not describe the readings on the side %s (p = %.2g)", shape, name, g.P))
		}
		r.Residuals = append(r.Residuals, side[i].Residuals()...)
	}
	r.note("zero in the bench file", fmt.Sprintf("add %s deg, times sense, to the key zero of %s: then the pump is at 0", fixed(*r.Value, 4), q.Axis))
	r.fitted = func(deg float64) float64 {
		if deg > 0 {
			return side[1].RateHz(deg)
		}
		return side[0].RateHz(deg)
	}
	r.tidy()
	return r, nil
}

// middleDeg is midway between the half maxima: where a top is flat, the highest place says nothing.
func (f PeakFit) middleDeg() float64 {
	if f.Shape != PredictedPeak {
		return f.CentreDeg()
	}
	top := f.profile(f.topDeg)
	span := f.data[len(f.data)-1].AngleDeg - f.data[0].AngleDeg
	up := half(func(v float64) float64 { return f.profile(f.topDeg+v) / top }, 0, span)
	down := half(func(v float64) float64 { return f.profile(f.topDeg-v) / top }, 0, span)
	return f.CentreDeg() + (up-down)/2
}

func (z *ZeroOfArm) text(b *strings.Builder) {
	if z == nil {
		return
	}
	b.WriteString("\nBoth sides of the ring\n")
	fmt.Fprintf(b, "  %-36s %.4f ± %.2g deg\n", "side below zero", z.LowDeg, z.LowU)
	fmt.Fprintf(b, "  %-36s %.4f ± %.2g deg\n", "side above zero", z.HighDeg, z.HighU)
	against := ""
	if z.Expected != nil {
		against = fmt.Sprintf("; by phase matching %.4f deg, measured minus predicted %+.4f deg", *z.Expected, z.HalfDeg-*z.Expected)
	}
	fmt.Fprintf(b, "  %-36s %.4f ± %.2g deg%s\n", "half the distance", z.HalfDeg, z.HalfU, against)
}
