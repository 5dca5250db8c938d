package estimate

import (
	"fmt"
	"math"

	"gemel/protocol"
)

// PeakQuestion is what a peak is asked of: recipe key result, kind peak.
type PeakQuestion struct {
	Axis     string
	Channel  string    // singles or coincidences
	Shape    PeakShape // empty: predicted where the model predicts a profile, else gaussian
	Power    string    // sensor whose mean goes into the exposure; empty: none
	Coverage float64   // 0: 0.95
	Trials   int       // simulated data sets for the goodness of fit; 0: 200
	Seed     uint64
}

// onePercent calls a fit bad when so small a share of simulated data fits worse.
const onePercent = 0.01

// asymmetric is how different the two halves of an interval may be and still be called symmetric.
const asymmetric = 0.05

// Peak is the angle at which a profile stands, by Poisson likelihood (FitPeak); of a predicted profile
// it is the middle between the half maxima, which a flat top's maximum is not. Accidentals of a
// coincidence channel and the dark counts of a singles channel are known parts of the expectation,
// never subtracted; power is exposure, never a divisor; the declared dead time of a singles channel
// compresses the profile. The axis's own error is common to all
// readings, so it is not averaged down. The error is a *Refusal where there is
// nothing to fit, or what was fitted may be nothing.
func Peak(rows Rows, bench Bench, model Model, q PeakQuestion) (Result, error) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	if q.Trials == 0 {
		q.Trials = 200
	}
	if q.Shape == "" {
		q.Shape = GaussianPeak
		if model.Profile != nil {
			q.Shape = PredictedPeak
		}
	}
	r := newResult(rows, "peak")
	r.Unit, r.Coverage = "deg", q.Coverage
	r.quantity = fmt.Sprintf("peak of %s on %s", q.Channel, q.Axis)
	no := &Refusal{}
	zero, ok := bench.AxisError[q.Axis]
	if !ok || !(zero.U > 0) {
		no.addf("%s: the axis's standard uncertainty (error) is not declared; an angle without it would claim the fit's alone", q.Axis)
	}
	kinds, aside := rows.split()
	r.SetAside = aside
	data := gather(kinds, bench, q, &r, no)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	fit, err := FitPeak(data, q.Shape, model.Profile)
	if err == nil {
		err = fit.inSweep()
	}
	if err != nil {
		return Result{}, &Refusal{Reasons: []string{fmt.Sprintf("%s: %v", q.Shape, err)}}
	}
	if err := fit.stands(q.Channel); err != nil {
		return Result{}, &Refusal{Reasons: []string{err.Error()}}
	}
	centre := fit.middleDeg()
	b, err := Propagate(func(x []float64) float64 { return x[0] + x[1] }, []Input{
		{Quantity: "fit of the " + string(q.Shape) + " profile", Symbol: "x_fit", Unit: "deg", Estimate: centre, U: fit.Fit.U(centreParam), Evaluation: TypeA, Distribution: Normal},
		{Quantity: "error of the axis", Symbol: "x_axis", Unit: "deg", U: zero.U, Evaluation: TypeB, Distribution: Normal},
	}, nil)
	if err != nil {
		return Result{}, &Refusal{Reasons: []string{err.Error()}}
	}
	e := r.state(b)
	axis := e.K * zero.U
	if i, err := fit.Interval(centreParam, q.Coverage); err != nil {
		r.Warnings = append(r.Warnings, "the profile likelihood of the angle could not be followed ("+err.Error()+"): the interval is the symmetric one")
	} else {
		at := fit.Fit.Params[centreParam]
		below, above := at-i.Low, i.High-at
		if math.Abs(below-above) > asymmetric*(below+above)/2 {
			r.Interval = &Interval{b.Value - math.Hypot(below, axis), b.Value + math.Hypot(above, axis)}
			r.KBecause = fmt.Sprintf("profile likelihood, whose halves are %.3g and %.3g deg, with the axis's error in quadrature (k = %.3g)", below, above, e.K)
		}
	}
	describe(&r, fit, q)
	r.tidy()
	return r, nil
}

// gather turns readings into spots of a profile.
func gather(kinds map[protocol.ReadingKind][]protocol.Reading, bench Bench, q PeakQuestion, r *Result, no *Refusal) []Spot {
	pair, isPair := bench.Counter.Pairs[q.Channel]
	if isPair && !(bench.Counter.Window.U > 0) {
		no.addf("the coincidence window is %g s without an uncertainty; want its u, since accidentals are part of the profile", bench.Counter.Window.Value)
	}
	detector, _ := bench.counts(q.Channel)
	var darks []dim
	if !isPair {
		for _, row := range kinds[protocol.Dark] {
			if n, ok := countOf(row.Counts, q.Channel); ok && row.Gate > 0 {
				darks = append(darks, dim{mid: middle(row), gateS: row.Gate.Duration().Seconds(), counts: n})
			}
		}
	}
	mean, n := 0.0, 0.0
	power := func(row protocol.Reading) (float64, bool) {
		for _, s := range row.Sensors {
			if s.Sensor == q.Power {
				return s.Mean, s.Mean > 0
			}
		}
		return 0, false
	}
	if q.Power != "" {
		for _, row := range kinds[protocol.Light] {
			p, ok := power(row)
			if !ok {
				no.addf("reading %d: no power from sensor %q", row.Sequence, q.Power)
				return nil
			}
			mean, n = mean+p, n+1
		}
		mean /= max(n, 1)
	}
	var data []Spot
	for _, row := range kinds[protocol.Light] {
		angle, ok := angleOf(row, q.Axis)
		if !ok {
			no.addf("reading %d: no angle of %q", row.Sequence, q.Axis)
			return nil
		}
		counts, ok := countOf(row.Counts, q.Channel)
		if !ok {
			no.addf("reading %d: no channel %q", row.Sequence, q.Channel)
			return nil
		}
		s := Spot{AngleDeg: angle, Counts: counts, Exposure: row.Gate.Duration().Seconds(), GateS: row.Gate.Duration().Seconds(), DeadS: detector.DeadTime.Value, Dead: detector.Model}
		if isPair {
			d, err := channels{s: pair[0], d: pair[1], c: q.Channel}.read(row)
			if err != nil {
				no.addf("%v", err)
				return nil
			}
			s.Known = d.chances * bench.Counter.Window.Value
		}
		for _, sh := range bracket(middle(row), darks) {
			s.Known += sh.weight * darks[sh.background].rateHz() * s.Exposure
		}
		if q.Power != "" {
			p, _ := power(row)
			s.Exposure *= p / mean
		}
		data = append(data, s)
		r.Used = append(r.Used, row.Sequence)
	}
	if len(data) == 0 {
		no.addf("no light reading counts: %d set aside; want a run that took some along %s", len(r.SetAside), q.Axis)
	}
	return data
}

// Residual is one reading of a fitted profile. Exactly one of AngleDeg and DelayS is set.
type Residual struct {
	AngleDeg  *float64 `json:"angle_deg,omitempty"`
	DelayS    *float64 `json:"delay_s,omitempty"`
	ExposureS float64  `json:"exposure_s"` // gate, times the power (or the singles of a delay) over their mean
	Counts    float64  `json:"counts"`
	Expected  float64  `json:"expected_counts"`
	Residual  float64  `json:"residual"` // signed root of the reading's part of the Cash statistic
}

// Place is where the reading lies on its profile, and in which unit.
func (r Residual) Place() (at float64, unit string) {
	if r.AngleDeg != nil {
		return *r.AngleDeg, "deg"
	}
	return *r.DelayS, "s"
}

// Residuals lists what the fit leaves, in the order of the angles.
func (f PeakFit) Residuals() []Residual {
	data, m := f.Expected()
	list := make([]Residual, len(data))
	for i, s := range data {
		list[i] = Residual{AngleDeg: &data[i].AngleDeg, ExposureS: s.Exposure, Counts: s.Counts, Expected: m[i],
			Residual: math.Copysign(math.Sqrt(math.Max(0, Cash([]float64{s.Counts}, []float64{m[i]}))), s.Counts-m[i])}
	}
	return list
}

// describe adds width, strength, goodness, decision and residuals.
func describe(r *Result, fit PeakFit, q PeakQuestion) {
	fwhm, u := fit.FWHMDeg()
	switch {
	case fit.Shape == PredictedPeak:
		r.noteValue("full width at half maximum", fwhm, 0.001, "deg", "the model's; not fitted")
		r.noteValue("measured minus predicted angle", fit.Fit.Params[centreParam], fit.Fit.U(centreParam), "deg", fmt.Sprintf("± %.3g deg, the fit's alone", fit.Fit.U(centreParam)))
	case fit.Shape == FlatTop:
		r.noteValue("full width at half maximum", fwhm, u, "deg", fmt.Sprintf("± %.3g deg", u))
	default:
		text := fmt.Sprintf("± %.3g deg", u)
		if i, err := fit.Interval(widthParam, q.Coverage); err == nil {
			text += fmt.Sprintf("; %.4g %% profile-likelihood interval %.6g to %.6g deg", 100*q.Coverage, i.Low, i.High)
		}
		r.noteValue("full width at half maximum", fwhm, u, "deg", text)
	}
	for i, name := range fit.Names {
		if name == "height" || name == "background" || name == "scale" || fit.Shape == TwoPeaks && i >= centre2Param {
			text := fmt.Sprintf("± %.3g", fit.Fit.U(i))
			if fit.Fit.Bounded[i] {
				text = "on the edge of what is allowed"
			}
			unit := map[string]string{"height": "/s", "background": "/s", "second height": "/s", "second centre": "deg", "second fwhm": "deg"}[name]
			r.noteValue(name, fit.Fit.Params[i], fit.Fit.U(i), unit, text)
		}
	}
	g := fit.Goodness(q.Trials, q.Seed)
	r.noteValue("Cash statistic", g.Statistic, 1, "1", fmt.Sprintf("%d degrees of freedom; %d simulated data sets gave %.4g on average", fit.Fit.Freedom, g.Trials, g.Mean))
	r.noteValue("goodness of fit", g.P, 0.01, "1", "share of simulated data sets that fit no better")
	if g.P < onePercent {
		r.Warnings = append(r.Warnings, fmt.Sprintf("the %s profile does not describe the readings (p = %.2g): its angle and uncertainty are those of the wrong shape", fit.Shape, g.P))
	}
	if d, ok := fit.decide(); ok {
		r.noteValue("decision threshold, net counts", d.Threshold, d.U, "1", fmt.Sprintf("net %.4g ± %.3g counts within the width (ISO 11929, 5 %%)", d.Net, d.U))
		r.noteValue("detection limit, net counts", d.Limit, d.U, "1", "5 % of either error")
	}
	r.Residuals = fit.Residuals()
	r.fitted = fit.RateHz
}

// stands refuses a profile that was fitted to nothing: a place would be driven to. The counts must be
// more uneven than chance makes them, as a refinement asks too, and those within the width above the
// decision threshold.
func (f PeakFit) stands(channel string) error {
	if p := (refineLine{data: f.data}).flat(); p > flatChance {
		return fmt.Errorf("no peak of %s stands out: counts so uneven come by chance with p = %.2g; want more counts, or a sweep over the light", channel, p)
	}
	if d, ok := f.decide(); ok && !d.Detected {
		return fmt.Errorf("no peak of %s is decided to be there: %.4g ± %.3g net counts within its width, with a decision threshold of %.4g (ISO 11929, 5 %%); want more counts, or a sweep over the light", channel, d.Net, d.U, d.Threshold)
	}
	return nil
}

// decide compares the counts within the width with those well outside it.
func (f PeakFit) decide() (Decision, bool) {
	fwhm, _ := f.FWHMDeg()
	var gross, tGross, rest, tRest float64
	for _, s := range f.data {
		switch v := math.Abs(s.AngleDeg - f.CentreDeg()); {
		case v <= fwhm/2:
			gross, tGross = gross+s.Counts, tGross+s.Exposure
		case v > 1.5*fwhm:
			rest, tRest = rest+s.Counts, tRest+s.Exposure
		}
	}
	if tGross == 0 || tRest == 0 {
		return Decision{}, false
	}
	d, err := Decide(gross, tGross, rest, tRest, tGross, 0, 1.6448536269514722)
	return d, err == nil
}
