package estimate

import (
	"fmt"
	"math"
	"strings"

	"gonum.org/v1/gonum/stat/distuv"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// DelayQuestion is what a delay is asked of: recipe key result, kind delay.
type DelayQuestion struct {
	Channel string // coincidences
	Setting string // the delay that is swept
	// Operating is where the delay stands while the bench counts, in the setting's unit; nil: not
	// declared, and the capture is given for the fitted centre.
	Operating *float64
	Coverage  float64 // 0: 0.95
	Trials    int     // simulated data sets for the goodness of fit; 0: 200
	Seed      uint64
}

// DelayProfile is a fitted coincidence window.
type DelayProfile struct {
	Setting    string   `json:"setting"`
	CentreS    float64  `json:"centre_s"`
	CentreU    float64  `json:"centre_standard_uncertainty_s"`
	WidthS     float64  `json:"full_width_s"`
	WidthU     float64  `json:"full_width_standard_uncertainty_s"`
	JitterS    float64  `json:"jitter_rms_s"`
	JitterU    *float64 `json:"jitter_standard_uncertainty_s"` // null: the edges are sharper than the sweep can tell, and jitter_rms_s is no measurement
	OperatingS float64  `json:"operating_delay_s"`             // what the capture holds for
	Declared   bool     `json:"operating_delay_declared"`      // else it is the centre
	Capture    float64  `json:"window_capture"`                // share of true coincidences inside the window there
	CaptureU   float64  `json:"window_capture_standard_uncertainty"`
	// CaptureIn is the coverage interval: what is lost, 1 - capture, is known to a factor rather than
	// to a difference, so it is not symmetric.
	CaptureIn Interval `json:"window_capture_interval"`
	PairsHz   float64  `json:"pairs_per_s"` // in the middle of the window
	BelowHz   float64  `json:"accidentals_below_per_s"`
	BelowU    float64  `json:"accidentals_below_standard_uncertainty_per_s"`
	AboveHz   float64  `json:"accidentals_above_per_s"`
	AboveU    float64  `json:"accidentals_above_standard_uncertainty_per_s"`
	// ByFloorS is the window that the floors and the singles' rates give; null where none was seen, or
	// where a dead time ends within the sweep.
	ByFloorS *float64 `json:"full_width_by_accidentals_s"`
	ByFloorU *float64 `json:"full_width_by_accidentals_standard_uncertainty_s"`
}

// nano is what the fit calls a second: its parameters should be neither tiny nor huge.
const nano = 1e-9

// Delay says where the coincidences of a pair of channels are centred against a delay, and how wide
// the window is. A pair is counted when its two times, apart by the delay and a Gaussian jitter, are
// no more than half the full window apart, so the profile is a box convolved with a Gaussian,
//
//	P {erf[(W/2 - v)/(sqrt2 s)] + erf[(W/2 + v)/(sqrt2 s)]}/2 + floor,   v = delay - centre.
//
// The floor is flat on either side, and not the same on both: a chance partner that comes after its
// herald is missed where the herald's true partner made the detector dead, which is the case for the
// share of heralds that have one, and that share is not the same for the two detectors. As the window
// goes over the pairs the one floor becomes the other. (Derived here; held against drawn times by
// TestDelayScansOfSingleTimesGiveTheWindowBack.)
//
// The fit is by Poisson likelihood; the counts of the pair's first channel are the exposure, so that a
// drifting pump makes no false flank. The setting's own scale is taken as exact. The error is a
// *Refusal where there is nothing to fit.
func Delay(rows Rows, bench Bench, q DelayQuestion) (Result, error) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	if q.Trials == 0 {
		q.Trials = 200
	}
	r := newResult(rows, "delay")
	r.Coverage = q.Coverage
	r.quantity = fmt.Sprintf("centre of %s on %s", q.Channel, q.Setting)
	no := &Refusal{}
	pair, ok := bench.Counter.Pairs[q.Channel]
	if !ok {
		no.addf("channel %q counts no coincidences of this bench; want one that does", q.Channel)
		return Result{}, no
	}
	kinds, aside := rows.split()
	r.SetAside = aside
	scan := delayScan(kinds[protocol.Light], channels{s: pair[0], d: pair[1], c: q.Channel}, q.Setting, &r, no)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	if net, flat := scan.flat(bench.Counter.Window.Value, q); flat {
		no.Net = &net
		no.addf("no window: the coincidences of %s are the same at every delay, as far as they were counted (the largest excess, at %.5g ns, is %.1f standard deviations); want pairs, or a sweep over where they are", q.Channel, net.MostAtS/nano, net.Most)
		no.addf("%s", net.sentence(q.Channel))
		return Result{}, no
	}
	// Where no reading lies on an edge, the likelihood is flat between the two beside it, and nothing
	// holds the jitter.
	fit, err := FitPeak(scan.data, window, nil)
	sharp := err != nil || fit.Fit.Bounded[edgeParam] || fit.Fit.Params[edgeParam] < scan.pitch()/4
	if sharp {
		var known [][]float64
		if err == nil {
			known = append(known, fit.Fit.Params)
		}
		fit, err = fitPeak(scan.data, window, nil, scan.pitch()/4, known...)
	}
	if err != nil {
		no.addf("%v; want a sweep with readings on both edges that ends on the floor beside them", err)
		return Result{}, no
	}
	p := fit.Fit.Params
	centre, width := p[centreParam], p[widthParam]
	low, high := fit.data[0].AngleDeg, fit.data[len(fit.data)-1].AngleDeg
	if centre-width/2 < low || centre+width/2 > high || fit.Fit.Bounded[centreParam] || fit.Fit.Bounded[widthParam] {
		no.addf("the window came out from %.4g to %.4g ns in a sweep from %.4g to %.4g ns; want a sweep that ends on the floor beside both edges", centre-width/2, centre+width/2, low, high)
		return Result{}, no
	}
	inputs := []Input{{Quantity: "fit of the window's profile", Symbol: "t_fit", Unit: scan.unit, Estimate: centre / scan.perNano, U: fit.Fit.U(centreParam) / scan.perNano, Evaluation: TypeA, Distribution: Normal}}
	widthU := fit.Fit.U(widthParam)
	if sharp {
		// Each edge is somewhere between two readings, and no more is known of it.
		low, lowHalf := scan.gap(centre - width/2)
		high, highHalf := scan.gap(centre + width/2)
		fit.Fit.Params[centreParam], fit.Fit.Params[widthParam] = (low+high)/2, high-low
		widthU = math.Hypot(Rectangular.U(lowHalf), Rectangular.U(highHalf))
		inputs = []Input{
			{Quantity: "gap between readings that the lower edge lies in", Symbol: "t_low", Unit: scan.unit, Estimate: low / scan.perNano, U: Rectangular.U(lowHalf) / scan.perNano, Evaluation: TypeB, Distribution: Rectangular},
			{Quantity: "gap between readings that the upper edge lies in", Symbol: "t_high", Unit: scan.unit, Estimate: high / scan.perNano, U: Rectangular.U(highHalf) / scan.perNano, Evaluation: TypeB, Distribution: Rectangular},
		}
		r.Warnings = append(r.Warnings, fmt.Sprintf("the edges are sharper than the step of %.3g ns beside them: centre and width are known to that step alone, and the jitter is not measured; a finer sweep over the edges would tell", 2*math.Max(lowHalf, highHalf)))
	}
	b, err := Propagate(func(x []float64) float64 {
		sum := 0.0
		for _, v := range x {
			sum += v / float64(len(x))
		}
		return sum
	}, inputs, nil)
	if err != nil {
		no.addf("%v", err)
		return Result{}, no
	}
	r.Unit = scan.unit
	r.state(b)
	r.Delay = scan.profile(fit, b.U*scan.perNano, widthU, sharp, q)
	scan.floors(r.Delay, fit, bench, pair)
	r.Delay.judge(&r, bench.Counter, q.Channel)
	g := fit.Goodness(q.Trials, q.Seed)
	r.noteValue("Cash statistic", g.Statistic, 1, "1", fmt.Sprintf("%d degrees of freedom; %d simulated data sets gave %.4g on average", fit.Fit.Freedom, g.Trials, g.Mean))
	r.noteValue("goodness of fit", g.P, 0.01, "1", "share of simulated data sets that fit no better")
	if g.P < onePercent && !sharp {
		r.Warnings = append(r.Warnings, fmt.Sprintf("a box with Gaussian edges on two floors does not describe the readings (p = %.2g): centre, width and capture are those of the wrong shape", g.P))
	}
	r.Residuals = fit.Residuals()
	for i := range r.Residuals {
		at := *r.Residuals[i].AngleDeg * nano
		r.Residuals[i].AngleDeg, r.Residuals[i].DelayS = nil, &at
	}
	r.fitted = func(s float64) float64 { return fit.RateHz(s / nano) }
	r.tidy()
	return r, nil
}

// delayed is a delay scan as it is fitted: nanoseconds, and seconds of gate as the exposure.
type delayed struct {
	data     []Spot
	unit     string
	perNano  float64 // nanoseconds in one of the setting's units
	chances  float64 // sum of S D / T over all readings: times W it is the floor's counts
	exposure float64
	singles  [2]float64 // of the pair's two channels, all readings
}

func delayScan(lights []protocol.Reading, ch channels, setting string, r *Result, no *Refusal) (d delayed) {
	for _, row := range lights {
		at, name, ok := settingOf(row, setting)
		if !ok {
			no.addf("reading %d: no setting %q; want a sweep of it", row.Sequence, setting)
			return d
		}
		second, err := unit.Parse("1 "+name, unit.Time)
		if err != nil {
			no.addf("setting %q counts in %q; want a time, such as ns", setting, name)
			return d
		}
		d.unit, d.perNano = name, second/nano
		one, err := ch.read(row)
		if err != nil {
			no.addf("%v", err)
			return d
		}
		d.data = append(d.data, Spot{AngleDeg: at * d.perNano, Counts: one.c, Exposure: one.s})
		d.chances, d.exposure = d.chances+one.chances, d.exposure+one.gateS
		d.singles[0], d.singles[1] = d.singles[0]+one.s, d.singles[1]+one.d
		r.Used = append(r.Used, row.Sequence)
	}
	switch {
	case len(d.data) == 0:
		no.addf("no light reading counts; want a sweep of %s", setting)
	case d.singles[0] == 0:
		no.addf("channel %q counted nothing; want light", ch.s)
	}
	for i := range d.data {
		d.data[i].Exposure *= d.exposure / d.singles[0]
	}
	return d
}

// settingOf is what a setting had around a reading, in its unit.
func settingOf(r protocol.Reading, name string) (value float64, unit string, ok bool) {
	for _, s := range r.Settings {
		if s.Name == name {
			return (s.Before + s.After) / 2, s.Unit, true
		}
	}
	return 0, "", false
}

// pitch is the mean gap between places, 0 where there is one.
func (d delayed) pitch() float64 {
	low, high := math.Inf(1), math.Inf(-1)
	places := map[float64]bool{}
	for _, s := range d.data {
		low, high, places[s.AngleDeg] = math.Min(low, s.AngleDeg), math.Max(high, s.AngleDeg), true
	}
	return (high - low) / math.Max(float64(len(places)-1), 1)
}

// gap is the middle and the half-width of the gap between readings that a place lies in.
func (d delayed) gap(at float64) (middle, half float64) {
	below, above := math.Inf(-1), math.Inf(1)
	for _, s := range d.data {
		if s.AngleDeg <= at {
			below = math.Max(below, s.AngleDeg)
		} else {
			above = math.Min(above, s.AngleDeg)
		}
	}
	return (below + above) / 2, (above - below) / 2
}

func (d delayed) profile(fit PeakFit, centreU, widthU float64, sharp bool, q DelayQuestion) *DelayProfile {
	p := fit.Fit.Params
	at := p[centreParam]
	if q.Operating != nil {
		at = *q.Operating * d.perNano
	}
	capture := func(p []float64) float64 {
		v, s := at-p[centreParam], math.Sqrt2*p[edgeParam]
		if q.Operating == nil {
			v = 0
		}
		return (math.Erf((p[widthParam]/2-v)/s) + math.Erf((p[widthParam]/2+v)/s)) / 2
	}
	top := p[heightParam] / math.Erf(p[widthParam]/2/(math.Sqrt2*p[edgeParam]))
	w := &DelayProfile{Setting: q.Setting, CentreS: p[centreParam] * nano, CentreU: centreU * nano, WidthS: p[widthParam] * nano, WidthU: widthU * nano,
		JitterS: p[edgeParam] * nano, OperatingS: at * nano, Declared: q.Operating != nil, Capture: capture(p), CaptureU: fit.carry(capture),
		PairsHz: top, BelowHz: p[groundParam], BelowU: fit.Fit.U(groundParam), AboveHz: p[ground2Param], AboveU: fit.Fit.U(ground2Param)}
	if sharp {
		// The jitter may be anything from none to what was held.
		none := append([]float64(nil), p...)
		none[edgeParam] /= 100
		w.CaptureU = math.Hypot(w.CaptureU, Rectangular.U(math.Abs(w.Capture-capture(none))))
	} else {
		u := fit.Fit.U(edgeParam) * nano
		w.JitterU = &u
	}
	w.CaptureIn = Interval{w.Capture - 2*w.CaptureU, 1}
	if lost := 1 - w.Capture; lost > 0 && w.CaptureU > 0 {
		factor := math.Exp(distuv.UnitNormal.Quantile((1+q.Coverage)/2) * w.CaptureU / lost)
		w.CaptureIn = Interval{math.Max(0, 1-lost*factor), 1 - lost/factor}
	}
	return w
}

// floors works the window out that the floors ask for: chance partners come at the rate S D W, less
// on either side those that meet a detector made dead by a pair.
func (d delayed) floors(w *DelayProfile, fit PeakFit, bench Bench, pair [2]string) {
	mean, u := (w.BelowHz+w.AboveHz)/2, math.Hypot(w.BelowU, w.AboveU)/2
	if !(d.chances > 0) || fit.Fit.Bounded[groundParam] || fit.Fit.Bounded[ground2Param] {
		return
	}
	reach := 0.0
	for _, s := range fit.data {
		reach = math.Max(reach, (math.Abs(s.AngleDeg-fit.Fit.Params[centreParam])+fit.Fit.Params[widthParam]/2)*nano)
	}
	missed := 0.0
	for i, channel := range pair {
		for _, a := range bench.Arms {
			if a.Channel != channel {
				continue
			}
			switch tau := a.DeadTime.Value; {
			case tau >= reach: // where the partner of the other channel's counts makes it dead all along
				missed += w.PairsHz * d.exposure / d.singles[1-i] / 2
			case tau > 0:
				return
			}
		}
	}
	if missed >= 1 {
		return
	}
	scale := d.exposure / d.chances / (1 - missed)
	by, byU := mean*scale, u*scale
	w.ByFloorS, w.ByFloorU = &by, &byU
}

// judge compares with what the bench file declares.
func (w *DelayProfile) judge(r *Result, c Counter, channel string) {
	if c.Window.U > 0 {
		if apart := (w.WidthS - c.Window.Value) / math.Hypot(w.WidthU, c.Window.U); math.Abs(apart) > 3 {
			r.Warnings = append(r.Warnings, fmt.Sprintf("the full window is %.4g ± %.2g ns here and %.4g ± %.2g ns in the bench file, apart by %.1f of both uncertainties: accidentals go with the declared one", w.WidthS/nano, w.WidthU/nano, c.Window.Value/nano, c.Window.U/nano, math.Abs(apart)))
		}
	}
	if w.ByFloorS != nil {
		if apart := (w.WidthS - *w.ByFloorS) / math.Hypot(w.WidthU, *w.ByFloorU); math.Abs(apart) > 4 {
			r.Warnings = append(r.Warnings, fmt.Sprintf("the floors of %s ask for a window of %.4g ± %.2g ns, the edges for %.4g ± %.2g ns: something besides chance counts beside the window, or chance pairs are lost", channel, *w.ByFloorS/nano, *w.ByFloorU/nano, w.WidthS/nano, w.WidthU/nano))
		}
	}
	if w.Declared && c.Capture.U > 0 {
		if apart := (w.Capture - c.Capture.Value) / math.Hypot(w.CaptureU, c.Capture.U); math.Abs(apart) > 3 {
			r.Warnings = append(r.Warnings, fmt.Sprintf("the window captures %.5g ± %.2g here and %.5g ± %.2g in the bench file: efficiencies go with the declared one", w.Capture, w.CaptureU, c.Capture.Value, c.Capture.U))
		}
	}
}

func (w *DelayProfile) text(b *strings.Builder) {
	if w == nil {
		return
	}
	b.WriteString("\nThe window\n")
	line := func(name, format string, args ...any) {
		fmt.Fprintf(b, "  %-36s %s\n", name, fmt.Sprintf(format, args...))
	}
	line("centre", "%.5g ± %.2g ns", w.CentreS/nano, w.CentreU/nano)
	line("full width", "%.5g ± %.2g ns", w.WidthS/nano, w.WidthU/nano)
	if w.JitterU != nil {
		line("jitter between the two times, rms", "%.4g ± %.2g ns", w.JitterS/nano, *w.JitterU/nano)
	} else {
		line("jitter between the two times, rms", "below what this sweep can tell")
	}
	where := "at the fitted centre, since no operating delay is declared"
	if w.Declared {
		where = fmt.Sprintf("at the operating delay of %.5g ns", w.OperatingS/nano)
	}
	line("true pairs inside the window", "%.5g ± %.2g (interval %.5g to %.5g), %s", w.Capture, w.CaptureU, w.CaptureIn.Low, w.CaptureIn.High, where)
	line("pairs in the middle", "%.5g /s", w.PairsHz)
	line("accidentals below, and above", "%.4g ± %.2g, and %.4g ± %.2g /s", w.BelowHz, w.BelowU, w.AboveHz, w.AboveU)
	if w.ByFloorS != nil {
		line("full width by these floors", "%.4g ± %.2g ns", *w.ByFloorS/nano, *w.ByFloorU/nano)
	}
	fmt.Fprintf(b, "  for the counter in the bench file:   window: {full: %.5g ns, u: %.2g ns}, capture: {value: %.4f %%, u: %.2g %%}\n", w.WidthS/nano, w.WidthU/nano, 100*w.Capture, math.Max(100*w.CaptureU, 0.001))
}
