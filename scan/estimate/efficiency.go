package estimate

import (
	"fmt"
	"maps"
	"math"
	"math/rand/v2"
	"slices"
	"strings"

	"gemel/protocol"
)

// Step is one correction of an efficiency.
type Step string

// The steps, in the order they are applied and shown.
const (
	BackgroundStep  Step = "background"
	AccidentalStep  Step = "accidentals"
	ShadowStep      Step = "accidentals_in_dead_time"
	AfterpulseStep  Step = "afterpulsing"
	DeadTimeStep    Step = "dead_time"
	CaptureStep     Step = "window_capture"
	PathStep        Step = "path"
	CollectionStep  Step = "collection"
	fewCoincidences      = 100   // net; below, the interval is exact instead of symmetric
	warnLoad             = 0.1   // m tau of the tested detector
	refuseLoad           = 0.5   // as far as the coupled form is held by events
	loadModelShare       = 0.1   // half-width of the model row in units of (m tau)^2
	refuseWindow         = 0.1   // rate times window, beyond which the first order in it is not used
	leastCollection      = 0.995 // below, a flat top proves nothing
)

var steps = []Step{BackgroundStep, AccidentalStep, ShadowStep, AfterpulseStep, DeadTimeStep, CaptureStep, PathStep, CollectionStep}

// Question is what an efficiency is asked of: recipe key result, kind efficiency.
type Question struct {
	Trigger    string        // arm
	UnderTest  string        // arm
	Use        *Plateau      // nil: all light readings, which must stand at one place
	Off        map[Step]bool // corrections switched off
	Displaced  bool          // accidentals from the displaced windows instead of the product
	Coverage   float64       // 0: 0.95
	MonteCarlo int           // trials; 0: none
	Seed       uint64

	// pumpRatio is how much more pump there was at the light than at a background; nil: as much.
	pumpRatio func(background protocol.Reading) float64
}

// calculation holds an efficiency's rows and evaluates its formula at any values of the inputs.
type calculation struct {
	bench         Bench
	trigger, test Arm
	off           map[Step]bool
	useDisplaced  bool
	logic         Logic

	dwells      []dwell
	backgrounds []dim
	s, d, c     float64 // sums
	chances     float64 // accidentals at a window of 1 s
	displaced   float64 // accidentals by displaced windows
	windows     float64
	gateS       float64
	background  float64 // background counts within the light readings, own dead time removed, theirs put in
	backgroundU float64
	// Of the dark rate, where backgrounds of another pump power are made of it.
	darkVariance float64

	beyond    float64 // exact loss less first-order loss, at the estimates
	loadD     float64 // m_D tau_D at the estimates
	inputs    []Input
	crosses   []Cross
	collected float64
}

const backgroundSymbol = "B"

// places of the inputs
const (
	inC = iota
	inS
	inD
	inA // displaced accidentals
	inB
	inWindow
	inAfter
	inTauT
	inTauD
	inModel
	inShadow
	inEcho
	inCapture
	inCollection
	inPath // the first of the path's
)

// Efficiency is the detection efficiency of the arm under test by photon pairs (Klyshko 1980) with
// the corrections of the design, sums over readings:
//
//	eta = (C - A) / {[S - B (live light)/(live background)] (1 - p_ap) K L_D eta_W T_path}
//
// L_D is the tested detector's dead-time loss given a recorded herald (DeadTimeLoss), K what the
// dead times and the counter's logic take from C - A (chanceShadow). The trigger's dead time
// cancels. The error is a *Refusal where the rows or the constants do not carry a number.
func Efficiency(rows Rows, bench Bench, model Model, q Question) (Result, error) {
	if q.Coverage == 0 {
		q.Coverage = 0.95
	}
	result := newResult(rows, "efficiency")
	result.Coverage = q.Coverage
	no := &Refusal{}
	c := calculation{bench: bench, off: q.Off, useDisplaced: q.Displaced, logic: bench.Counter.Logic, collected: 1}
	var okT, okD bool
	c.trigger, okT = bench.arm(q.Trigger)
	c.test, okD = bench.arm(q.UnderTest)
	if !okT || !okD || q.Trigger == q.UnderTest {
		no.addf("trigger %q and detector under test %q; want two arms of the bench", q.Trigger, q.UnderTest)
		return Result{}, no
	}
	pair := [2]string{c.trigger.Channel, c.test.Channel}
	ch := channels{s: pair[0], d: pair[1], c: bench.Counter.coincidence(pair)}
	shifted, hasShifted := bench.Counter.displaced(pair)
	if hasShifted {
		ch.displaced, c.windows = shifted.Channel, float64(shifted.Windows)
	}
	c.refuseConstants(no, ch, model)
	c.refuseFilters(no, &result, model)

	kinds, aside := rows.split()
	lights := kinds[protocol.Light]
	if q.Use == nil {
		lights, aside = rows.asPlanned(lights, aside)
	}
	if q.Use != nil {
		kept, dropped, notes := q.Use.choose(rows, lights, ch, bench.Counter.Window.Value, no)
		lights = kept
		aside = append(aside, dropped...)
		result.Condition = append(result.Condition, notes...)
	} else {
		onePlace(lights, []string{c.test.Axis, c.trigger.Axis}, no)
	}
	if len(lights) == 0 {
		no.addf("no light reading counts; want at least one accepted")
	}
	for _, r := range lights {
		d, err := ch.read(r)
		if err != nil {
			no.addf("%v", err)
			continue
		}
		c.dwells = append(c.dwells, d)
		result.Used = append(result.Used, r.Sequence)
	}
	c.takeBackground(kinds, ch, q.pumpRatio, &result, no)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	c.sum()
	if c.s <= c.background || c.c <= 0 {
		no.addf("%.0f trigger counts against a background of %.0f, %.0f coincidences; want heralds and coincidences", c.s, c.background, c.c)
		no.Limit = c.upperLimit(q.Coverage)
		if l := no.Limit; l != nil {
			no.addf("what can be said: the efficiency of %s is below %.3g with %.4g %% coverage (%s)", c.test.Name, l.Efficiency, 100*l.Coverage, l.Because)
		}
		return Result{}, no
	}
	c.load(no, &result)
	if err := no.err(); err != nil {
		return Result{}, err
	}
	c.list()
	result.SetAside = aside
	return c.finish(result, q)
}

// UpperLimit is what a calibration without a single coincidence says nevertheless.
type UpperLimit struct {
	Efficiency float64 `json:"efficiency"`
	Coverage   float64 `json:"coverage"` // one-sided
	Counts     float64 `json:"coincidences"`
	Because    string  `json:"because"`
}

// upperLimit is the efficiency at which no coincidence would be seen with a chance of 1 - coverage:
// exp(-m) = 1 - coverage, so m = -ln(1 - coverage), 3.00 coincidences for 95 % (the one-sided case of
// Garwood 1936). Nothing is taken off for accidentals, of which there are none to be sure of, so the
// limit errs upwards only. The constants stand at their declared values.
func (c *calculation) upperLimit(coverage float64) *UpperLimit {
	if c.c > 0 || !(c.s > c.background) {
		return nil
	}
	l := *c
	l.off = maps.Clone(c.off)
	if l.off == nil {
		l.off = map[Step]bool{}
	}
	l.off[AccidentalStep], l.off[ShadowStep] = true, true
	l.useDisplaced = false
	l.dwells = slices.Clone(c.dwells)
	limit := UpperLimit{Coverage: coverage, Counts: PoissonUpper(0, coverage)}
	for i := range l.dwells {
		l.dwells[i].c = limit.Counts * l.dwells[i].s / c.s
	}
	l.c = limit.Counts
	no := &Refusal{}
	l.load(no, &Result{})
	if no.err() != nil {
		return nil
	}
	l.list()
	x := make([]float64, len(l.inputs))
	for i, in := range l.inputs {
		x[i] = in.Estimate
	}
	limit.Efficiency = math.Min(1, l.value(x))
	limit.Because = fmt.Sprintf("no coincidence was counted, which happens in %.3g %% of cases where %.2f are expected, -ln(1 - %.4g); accidentals are not taken off, and the constants stand at their declared values", 100*(1-coverage), limit.Counts, coverage)
	return &limit
}

func (c *calculation) on(s Step) bool { return !c.off[s] }

func (c *calculation) refuseConstants(no *Refusal, ch channels, model Model) {
	ct := c.bench.Counter
	if !ct.Latched {
		no.addf("singles and coincidences were not latched in the same interval (counter: latched); their ratio is no efficiency")
	}
	if ch.c == "" {
		no.addf("no channel counts coincidences of %q and %q", ch.s, ch.d)
	}
	if ct.Logic != EveryPair && ct.Logic != OnePerHerald {
		no.addf("counter logic %q; want every_pair or one_per_herald", ct.Logic)
	}
	if c.useDisplaced && ch.displaced == "" {
		no.addf("accidentals by displaced windows are asked for and the counter declares none")
	}
	if c.on(AccidentalStep) || c.on(ShadowStep) {
		no.need(ct.Window, "the coincidence window", 0, 1)
	}
	if c.on(CaptureStep) {
		no.need(ct.Capture, "the window capture", 1e-6, 1)
	}
	if c.on(AfterpulseStep) {
		no.need(c.trigger.Afterpulse, c.trigger.Name+": the afterpulse share", 0, 0.999)
	}
	if c.on(ShadowStep) && ct.Logic == EveryPair && c.test.DeadTime.Value < ct.Window.Value/2 {
		no.need(c.test.Afterpulse, c.test.Name+": the afterpulse share", 0, 0.999)
	}
	if c.on(DeadTimeStep) || c.on(ShadowStep) || c.on(BackgroundStep) {
		for _, a := range []Arm{c.trigger, c.test} {
			no.need(a.DeadTime, a.Name+": the dead time", 0, 1)
			if a.Model != NonParalysable && a.Model != Paralysable {
				no.addf("%s: dead-time model %q; want non-paralysable or paralysable", a.Name, a.Model)
			}
		}
	}
	if c.on(PathStep) {
		if len(c.test.Path) == 0 {
			no.addf("%s: no path is declared; want a list of transmittances, or the correction switched off", c.test.Name)
		}
		for _, t := range c.test.Path {
			no.need(t.Constant, c.test.Name+": path: "+t.Name, 1e-6, 1)
		}
	}
	if c.on(CollectionStep) {
		switch {
		case model.Collection == nil:
			no.addf("no model says how much of the heralded light the aperture collects; a flat top does not prove it")
		default:
			share, err := model.Collection()
			switch {
			case err != nil:
				no.addf("collection: %v", err)
			case !(share >= leastCollection && share <= 1+1e-9):
				no.addf("the model's collection is %.5f; want at least %.3f: widen or centre the tested arm's aperture", share, leastCollection)
			default:
				c.collected = math.Min(share, 1)
			}
		}
	}
}

// refuseFilters holds the tested arm's filter against the heralded band, and states the band.
func (c *calculation) refuseFilters(no *Refusal, r *Result, model Model) {
	var centre, width float64
	switch {
	case model.HeraldedBand != nil:
		var err error
		if centre, width, err = model.HeraldedBand(); err != nil {
			no.addf("heralded band: %v", err)
			return
		}
	case c.trigger.Filter != nil && c.bench.PumpNm > 0:
		centre, width = heraldedBand(c.bench.PumpNm, *c.trigger.Filter)
	default:
		no.addf("the heralded band is not known; want a filter on the trigger arm and the pump wavelength, or a model that says it")
		return
	}
	r.noteValue("wavelength", centre, 0.1, "nm", "centre of the heralded band, vacuum")
	r.noteValue("bandwidth", width, 0.1, "nm", "full width at half maximum of the heralded band")
	if f := c.test.Filter; f != nil {
		low, high := f.CentreNm-f.WidthNm/2, f.CentreNm+f.WidthNm/2
		if centre-width/2 < low || centre+width/2 > high {
			no.addf("%s: the filter passes %.2f to %.2f nm, the heralded band is %.2f to %.2f nm; want the band inside it", c.test.Name, low, high, centre-width/2, centre+width/2)
		}
	}
}

// onePlace refuses readings that stand at different angles of the arms unless Use says which count.
func onePlace(lights []protocol.Reading, axes []string, no *Refusal) {
	for _, axis := range axes {
		if axis == "" {
			continue
		}
		low, high := math.Inf(1), math.Inf(-1)
		for _, r := range lights {
			for _, a := range r.Angles {
				if a.Axis == axis {
					low, high = math.Min(low, a.Target.Degrees()), math.Max(high, a.Target.Degrees())
				}
			}
		}
		if high > low {
			no.addf("the readings stand at %g to %g deg of %s; want use: {plateau_of, half_width} to say which count", low, high, axis)
		}
	}
}

func (c *calculation) takeBackground(kinds map[protocol.ReadingKind][]protocol.Reading, ch channels, pumpRatio func(protocol.Reading) float64, r *Result, no *Refusal) {
	if !c.on(BackgroundStep) {
		return
	}
	from := kinds[protocol.Background]
	if len(from) == 0 {
		from = kinds[protocol.Dark]
		if len(from) > 0 {
			r.Warnings = append(r.Warnings, "no background was taken, so the dark is subtracted instead: fluorescence and stray pump light stay in the trigger counts and make the efficiency too small")
		}
	}
	if len(from) == 0 {
		no.addf("neither background nor dark was taken; want background readings, or the correction switched off")
		return
	}
	var dark, time float64
	for _, row := range kinds[protocol.Dark] {
		if n, ok := countOf(row.Counts, ch.s); ok {
			dark, time = dark+n, time+row.Gate.Duration().Seconds()
		}
	}
	for _, row := range from {
		n, ok := countOf(row.Counts, ch.s)
		gate := row.Gate.Duration().Seconds()
		if !ok || gate <= 0 {
			no.addf("%s reading %d: channel %q in a gate of %g s; want counts", row.Kind, row.Sequence, ch.s, gate)
			continue
		}
		one := dim{mid: middle(row), gateS: gate, counts: n}
		if pumpRatio != nil && row.Kind == protocol.Background {
			if more := pumpRatio(row); more != 1 {
				if time == 0 {
					no.addf("background reading %d was taken at another pump power, and without a dark nobody knows which part of it follows the pump; want darks, or backgrounds at each power", row.Sequence)
					continue
				}
				// What the pump makes grows with it, the dark does not; the dead time goes with both.
				one.scaled, one.variance, one.darkS = true, more*more*math.Max(n, 1), (1-more)*gate
				one.counts = c.recorded(more*c.arriving(n/gate)+(1-more)*c.arriving(dark/time)) * gate
				c.darkVariance = math.Max(dark, 1) / (time * time)
			}
		}
		c.backgrounds = append(c.backgrounds, one)
	}
	if time > 0 && len(kinds[protocol.Background]) > 0 {
		r.noteValue("dark count rate of the trigger", dark/time, math.Sqrt(math.Max(dark, 1))/time, "/s", "contained in the background, so not subtracted again")
	}
	slices.SortStableFunc(c.backgrounds, func(a, b dim) int { return a.mid.Compare(b.mid) })
	for i := range c.dwells {
		c.dwells[i].background = bracket(c.dwells[i].mid, c.backgrounds)
	}
}

// arriving is the rate at which the trigger would count without a dead time, recorded the way back.
func (c *calculation) arriving(recordedHz float64) float64 {
	return recordedHz / c.liveShare(recordedHz, c.trigger.DeadTime.Value)
}

func (c *calculation) recorded(hz float64) float64 {
	return c.trigger.Model.Observed(hz, c.trigger.DeadTime.Value)
}

func (c *calculation) sum() {
	weight := make([]float64, len(c.backgrounds))
	for _, d := range c.dwells {
		c.s, c.d, c.c = c.s+d.s, c.d+d.d, c.c+d.c
		c.chances += d.chances
		c.gateS += d.gateS
		if c.windows > 0 {
			c.displaced += d.displaced / c.windows
		}
		live := c.liveShare(d.s/d.gateS, c.trigger.DeadTime.Value)
		for _, s := range d.background {
			b := c.backgrounds[s.background]
			w := s.weight * d.gateS / b.gateS * live / c.liveShare(b.rateHz(), c.trigger.DeadTime.Value)
			c.background += w * b.counts
			weight[s.background] += w
		}
	}
	darkS := 0.0
	for i, b := range c.backgrounds {
		c.backgroundU += weight[i] * weight[i] * b.uncertain()
		darkS += weight[i] * b.darkS
	}
	c.backgroundU = math.Sqrt(c.backgroundU + darkS*darkS*c.darkVariance)
	if f := c.backgroundScatter().factor(); f > 1 {
		c.backgroundU *= f
	}
}

// backgroundScatter tests whether the backgrounds agree with one another.
func (c *calculation) backgroundScatter() Dispersion {
	var counts, time float64
	for _, b := range c.backgrounds {
		counts, time = counts+b.counts, time+b.gateS
	}
	var res, variance []float64
	for _, b := range c.backgrounds {
		expect := counts / time * b.gateS
		spread := expect
		if b.scaled {
			spread = b.variance
		}
		res, variance = append(res, b.counts-expect), append(variance, spread)
	}
	return Disperse(res, variance, 1)
}

// liveShare is recorded over true rate of the trigger.
func (c *calculation) liveShare(recordedHz, tauS float64) float64 {
	n, err := c.trigger.Model.True(recordedHz, tauS, false)
	if err != nil || n == 0 {
		return 1 // load refuses where this would matter
	}
	return recordedHz / n
}

// load judges the dead times and prepares the exact loss.
func (c *calculation) load(no *Refusal, r *Result) {
	mT, mD := c.s/c.gateS, c.d/c.gateS
	if c.on(BackgroundStep) || c.on(DeadTimeStep) {
		if _, err := c.trigger.Model.True(mT, c.trigger.DeadTime.Value, false); err != nil {
			no.addf("%s: %v", c.trigger.Name, err)
		}
	}
	if load := c.windowLoad(); (c.on(AccidentalStep) || c.on(ShadowStep)) && load > refuseWindow {
		no.addf("count rates times coincidence window is %.3f; want at most %.1f, beyond which accidentals are not held by any check: a shorter window or a lower pump power", load, refuseWindow)
	}
	if e := c.echoes(); e > 0 && c.on(ShadowStep) {
		r.Warnings = append(r.Warnings, fmt.Sprintf("half the coincidence window is longer than a dead time, so afterpulses may fall into it and count as second coincidences, up to %.2g %% of them: a shorter window would settle it", 100*e))
	}
	if !c.on(DeadTimeStep) {
		return
	}
	tauT, tauD := c.trigger.DeadTime.Value, c.test.DeadTime.Value
	c.loadD = mD * tauD
	pairHz := math.Max(0, (c.c-c.chances*c.bench.Counter.Window.Value)/c.gateS)
	pairHz /= chanceShadow(c.logic, mT, mD, pairHz, c.bench.Counter.Window.Value, tauT, tauD)
	if c.on(CaptureStep) {
		pairHz /= c.bench.Counter.Capture.Value
	}
	loss, err := DeadTimeLoss(c.trigger.Model, c.test.Model, mT, mD, pairHz, tauT, tauD)
	if err != nil {
		no.addf("%v", err)
		return
	}
	c.beyond = loss - (1 - c.loadD + pairHz*math.Min(tauT, tauD))
	if loadT := mT * tauT; max(c.loadD, loadT) > refuseLoad {
		no.addf("count rate times dead time is %.3f (%s) and %.3f (%s); want at most %.1f, beyond which the dead-time correction is not held by any check: lower the pump power",
			c.loadD, c.test.Name, loadT, c.trigger.Name, refuseLoad)
	} else if c.loadD > warnLoad {
		r.Warnings = append(r.Warnings, fmt.Sprintf("count rate times dead time of %s is %.3f, above %.1f: the dead-time correction and its model row matter; a lower pump power would settle it", c.test.Name, c.loadD, warnLoad))
	}
}

// windowLoad is how many strange counts of either detector a window meets.
func (c *calculation) windowLoad() float64 {
	return (c.s + c.d) / c.gateS * c.bench.Counter.Window.Value
}

// echoes is the largest share of coincidences that can be second ones of the same pair: an
// afterpulse of either detector that falls into the window, which a dead time beyond half the window
// forbids. How fast they decay is not declared: with a slow decay it is none of them, with a fast one
// all, so the row is a two-point one. A rectangular row was tried, and covered 92.4 % of 2000
// calibrations with a 20 ns window, dead times of 2 ns and a decay of 60 ns.
func (c *calculation) echoes() float64 {
	half, share := c.bench.Counter.Window.Value/2, 0.0
	if c.trigger.DeadTime.Value < half {
		share += c.trigger.Afterpulse.Value
	}
	if c.logic == EveryPair && c.test.DeadTime.Value < half {
		share += c.test.Afterpulse.Value
	}
	return share
}

// list names the inputs and their covariances.
func (c *calculation) list() {
	ct := c.bench.Counter
	a := c.displaced
	u := 0.0
	if c.useDisplaced {
		u = math.Sqrt(a / c.windows)
	}
	hw := loadModelShare * c.loadD * c.loadD
	side := (1 - c.collected) / 2
	c.inputs = []Input{
		inC:          {Quantity: "coincidences", Symbol: "C", Unit: "1", Estimate: c.c, U: math.Sqrt(c.c), Evaluation: TypeA, Distribution: Counting},
		inS:          {Quantity: "trigger counts", Symbol: "S", Unit: "1", Estimate: c.s, U: math.Sqrt(c.s), Evaluation: TypeA, Distribution: Counting},
		inD:          {Quantity: "counts of the detector under test", Symbol: "D", Unit: "1", Estimate: c.d, U: math.Sqrt(c.d), Evaluation: TypeA, Distribution: Counting},
		inA:          {Quantity: "accidentals by displaced windows", Symbol: "A", Unit: "1", Estimate: a, U: u, Evaluation: TypeA, Distribution: Counting},
		inB:          {Quantity: "background within the trigger counts", Symbol: backgroundSymbol, Unit: "1", Estimate: c.background, U: c.backgroundU, Evaluation: TypeA, Distribution: Normal},
		inWindow:     constant("coincidence window, full", "W", "s", ct.Window),
		inAfter:      constant("afterpulse share of the trigger", "p_ap", "1", c.trigger.Afterpulse),
		inTauT:       constant("dead time of the trigger", "tau_T", "s", c.trigger.DeadTime),
		inTauD:       constant("dead time of the detector under test", "tau_D", "s", c.test.DeadTime),
		inModel:      {Quantity: "dead-time model", Symbol: "f_L", Unit: "1", Estimate: 1, U: Rectangular.U(hw), Evaluation: TypeB, Distribution: Rectangular},
		inShadow:     {Quantity: "accidentals beyond the first order", Symbol: "f_K", Unit: "1", Estimate: 1, U: Rectangular.U(c.windowLoad() * c.windowLoad() / 2), Evaluation: TypeB, Distribution: Rectangular},
		inEcho:       {Quantity: "afterpulses inside the window: none or all", Symbol: "f_E", Unit: "1", Estimate: 1 + c.echoes()/2, U: TwoPoint.U(c.echoes() / 2), Evaluation: TypeB, Distribution: TwoPoint},
		inCapture:    constant("window capture", "eta_W", "1", ct.Capture),
		inCollection: {Quantity: "collection, one-sided: between the model's share and 1", Symbol: "f_col", Unit: "1", Estimate: 1 - side, U: Rectangular.U(side), Evaluation: TypeB, Distribution: Rectangular},
	}
	for i, t := range c.test.Path {
		c.inputs = append(c.inputs, constant("path: "+t.Name, fmt.Sprintf("T_%d", i+1), "1", t.Constant))
	}
	// Each coincidence is one of the trigger's counts and one of the tested detector's.
	both := math.Max(0, c.c-c.accidentals())
	c.crosses = []Cross{
		{inS, inC, c.c, "each coincidence is a trigger count"},
		{inD, inC, c.c, "each coincidence is a count of the detector under test"},
		{inS, inD, both, "true pairs are counted in both singles"},
	}
	if c.useDisplaced && c.on(AccidentalStep) {
		c.crosses = append(c.crosses,
			Cross{inA, inS, a, "displaced accidentals are counted in the same gates as the triggers"},
			Cross{inA, inC, a * c.c / c.s, "displaced accidentals and coincidences share triggers"})
	}
	c.silence()
}

func constant(quantity, symbol, unit string, c Constant) Input {
	if c.From != "" {
		quantity += " (" + c.From + ")"
	}
	return Input{Quantity: quantity, Symbol: symbol, Unit: unit, Estimate: c.Value, U: c.U, Evaluation: TypeB, Distribution: Normal}
}

// silence takes the uncertainty from inputs that no applied step uses, so that they make no row.
func (c *calculation) silence() {
	mute := func(places ...int) {
		for _, p := range places {
			c.inputs[p].U = 0
		}
	}
	if !c.on(BackgroundStep) {
		mute(inB)
	}
	if !c.on(AccidentalStep) && !c.on(ShadowStep) {
		mute(inWindow)
	}
	if !c.on(BackgroundStep) && !c.on(ShadowStep) && !c.on(DeadTimeStep) {
		mute(inTauT, inTauD)
	}
	if !c.on(AfterpulseStep) {
		mute(inAfter)
	}
	if !c.on(DeadTimeStep) {
		mute(inModel)
	}
	if !c.on(ShadowStep) {
		mute(inShadow, inEcho)
	}
	if !c.on(CaptureStep) {
		mute(inCapture)
	}
	if !c.on(CollectionStep) {
		mute(inCollection)
	}
	if !c.on(PathStep) {
		for i := range c.test.Path {
			mute(inPath + i)
		}
	}
}

// accidentals at the estimates, by the method chosen.
func (c *calculation) accidentals() float64 {
	switch {
	case !c.on(AccidentalStep):
		return 0
	case c.useDisplaced:
		return c.displaced
	}
	return c.chances * c.bench.Counter.Window.Value
}

// value is the efficiency at any values of the inputs.
func (c *calculation) value(x []float64) float64 { return c.upTo(x, len(steps)) }

// upTo applies the first n steps only: the waterfall.
func (c *calculation) upTo(x []float64, n int) float64 {
	on := map[Step]bool{}
	for _, s := range steps[:n] {
		on[s] = c.on(s)
	}
	background, accidental, shadow, after, dead := on[BackgroundStep], on[AccidentalStep], on[ShadowStep], on[AfterpulseStep], on[DeadTimeStep]
	fS, fD, fC := x[inS]/c.s, x[inD]/max(c.d, 1), x[inC]/c.c
	fB, fA := 1.0, 1.0
	if c.background > 0 {
		fB = x[inB] / c.background
	}
	if c.displaced > 0 {
		fA = x[inA] / c.displaced
	}
	tauT, tauD := x[inTauT], x[inTauD]
	shared := math.Min(tauT, tauD)
	net, heralds := 0.0, 0.0
	for _, d := range c.dwells {
		s, t := d.s*fS, d.d*fD
		mT, mD := s/d.gateS, t/d.gateS
		h := s
		if background {
			live := c.liveShare(mT, tauT)
			for _, sh := range d.background {
				b := c.backgrounds[sh.background]
				h -= fB * sh.weight * b.rateHz() * d.gateS * live / c.liveShare(b.rateHz(), tauT)
			}
		}
		a := 0.0
		if accidental {
			a = d.chances * fS * fD * x[inWindow]
			if c.useDisplaced {
				a = d.displaced / c.windows * fA
			}
		}
		k := 1.0
		if shadow {
			k = chanceShadow(c.logic, mT, mD, (d.c*fC-a)/d.gateS, x[inWindow], tauT, tauD) * x[inShadow] * x[inEcho]
		}
		if after {
			h *= 1 - x[inAfter]
		}
		loss := 1.0
		if dead {
			pairHz := (d.c*fC - a) / d.gateS / k
			if c.on(CaptureStep) {
				pairHz /= x[inCapture]
			}
			loss = 1 - mD*tauD + pairHz*shared
			if c.loadD > 0 {
				r := mD * tauD / c.loadD
				loss += c.beyond * r * r
			}
			loss *= x[inModel]
		}
		net += d.c*fC - a
		heralds += h * k * loss
	}
	y := net / heralds
	if on[CaptureStep] {
		y /= x[inCapture]
	}
	if on[PathStep] {
		for i := range c.test.Path {
			y /= x[inPath+i]
		}
	}
	if on[CollectionStep] {
		y /= x[inCollection]
	}
	return y
}

func (c *calculation) finish(r Result, q Question) (Result, error) {
	x := make([]float64, len(c.inputs))
	for i, in := range c.inputs {
		x[i] = in.Estimate
	}
	d := c.scatter(x)
	r.Dispersion = &d
	counted := slices.Clone(c.inputs)
	crosses := slices.Clone(c.crosses)
	if f := d.factor(); f > 1 {
		for _, p := range []int{inC, inS, inD} {
			counted[p].U *= f
			counted[p].Freedom = float64(d.Freedom)
		}
		for i := range crosses {
			if crosses[i].I != inA {
				crosses[i].Covariance *= f * f
			}
		}
		r.Warnings = append(r.Warnings, fmt.Sprintf("the readings scatter %.2f times as much as counting explains (p = %.2g): something moved between them", d.Birge, d.P))
	}
	b, err := Propagate(c.value, counted, crosses)
	if err != nil {
		return Result{}, &Refusal{Reasons: []string{err.Error()}}
	}
	e := b.Expand(q.Coverage)
	for _, row := range b.Rows {
		if row.U > 0 || row.Covariance && row.Contribution != 0 {
			r.Budget = append(r.Budget, row)
		}
	}
	r.quantity = "detection efficiency of " + c.test.Name
	r.Value, r.U, r.Expanded, r.K, r.KBecause = &b.Value, &b.U, &e.U, &e.K, e.Because
	if !math.IsInf(b.Freedom, 1) {
		r.Freedom = &b.Freedom
	}
	r.Interval = &Interval{b.Value - e.U, b.Value + e.U}
	net := c.c - c.accidentals()
	if net < fewCoincidences {
		i := c.exactInterval(x, b, e)
		r.Interval = &i
		r.KBecause = fmt.Sprintf("fewer than %d net coincidences (%.1f): the counting part is the exact binomial interval of coincidences among triggers (Clopper and Pearson 1934), the rest added in quadrature with k = %.3g", fewCoincidences, net, e.K)
	}
	if b.Value > 1 {
		r.Warnings = append(r.Warnings, "the efficiency is above 1: a constant or a channel is wrong")
	}
	c.waterfall(&r, x)
	c.conditions(&r, x, q)
	if q.MonteCarlo > 0 {
		m, err := Simulate(c.draw(d.factor()), q.MonteCarlo, q.Seed, q.Coverage)
		if err != nil {
			return Result{}, fmt.Errorf("monte carlo: %w", err)
		}
		m = m.Against(*r.Interval, b.U)
		r.MonteCarlo = &m
	}
	r.tidy()
	return r, nil
}

// scatter tests whether the readings agree with one efficiency.
func (c *calculation) scatter(x []float64) Dispersion {
	y := c.value(x)
	var res, variance []float64
	for i := range c.dwells {
		one := *c
		one.dwells = c.dwells[i : i+1]
		one.s, one.d, one.c = c.dwells[i].s, c.dwells[i].d, math.Max(c.dwells[i].c, 1)
		// what C would be in this reading at the common efficiency, by secants: the value is nearly
		// linear in it
		z := slices.Clone(x)
		z[inS], z[inD] = one.s, one.d
		first := c.dwells[i]
		first.c = one.c
		one.dwells = []dwell{first}
		at := func(counts float64) float64 {
			z[inC] = counts
			return one.value(z)
		}
		expect := one.c
		for range 4 {
			h := 1e-3 * (expect + 1)
			expect += (y - at(expect)) / (at(expect+h) - at(expect)) * h
		}
		// d expect / dS: heralds bring eff each, accidentals rise with the rate
		e := expect / math.Max(one.s, 1)
		if expect > 0 && one.s > 0 {
			res = append(res, c.dwells[i].c-expect)
			variance = append(variance, expect*(1-2*e)+e*e*one.s)
		}
	}
	return Disperse(res, variance, 1)
}

// exactInterval replaces the counting part of a symmetric interval by the exact binomial one.
func (c *calculation) exactInterval(x []float64, b Budget, e Expanded) Interval {
	at := func(share float64) float64 {
		z := slices.Clone(x)
		z[inC] = share * c.s
		return c.value(z)
	}
	p := ClopperPearson(math.Min(c.c, c.s), c.s, e.Coverage)
	other := b.U * b.U
	for _, row := range b.Rows {
		if row.Symbol == "C" || row.Symbol == "S" || row.Symbol == "Cov(S, C)" {
			other -= math.Copysign(row.Contribution*row.Contribution, row.Contribution)
		}
	}
	rest := e.K * math.Sqrt(math.Max(0, other))
	return Interval{math.Max(0, b.Value-math.Hypot(b.Value-at(p.Low), rest)), b.Value + math.Hypot(at(p.High)-b.Value, rest)}
}

// draw gives Monte Carlo trials: counts by what they share, constants by their distributions.
func (c *calculation) draw(factor float64) func(*rand.Rand) float64 {
	x := make([]float64, len(c.inputs))
	return func(r *rand.Rand) float64 {
		for i, in := range c.inputs {
			x[i] = in.Draw(r)
		}
		both := drawPoisson(r, c.c)
		spread := func(got, mean float64) float64 { return mean + factor*(got-mean) }
		x[inC] = spread(both, c.c)
		x[inS] = spread(both+drawPoisson(r, math.Max(0, c.s-c.c)), c.s)
		x[inD] = spread(both+drawPoisson(r, math.Max(0, c.d-c.c)), c.d)
		if c.windows > 0 {
			x[inA] = drawPoisson(r, c.displaced*c.windows) / c.windows
		}
		return c.value(x)
	}
}

func (c *calculation) waterfall(r *Result, x []float64) {
	raw := c.upTo(x, 0)
	r.Waterfall = append(r.Waterfall, Correction{Step: "raw coincidences over trigger counts", Applied: true, Amount: c.c / c.s, Unit: "1", After: raw,
		Note: fmt.Sprintf("C = %.0f, S = %.0f, D = %.0f in %.6g s", c.c, c.s, c.d, c.gateS)})
	w := x[inWindow]
	mT, mD := c.s/c.gateS, c.d/c.gateS
	product := c.chances * w
	for i, s := range steps {
		k := Correction{Step: strings.ReplaceAll(string(s), "_", " "), Applied: c.on(s), Unit: "1", After: c.upTo(x, i+1)}
		before := c.upTo(x, i)
		switch s {
		case BackgroundStep:
			k.Amount = c.background
			k.Note = fmt.Sprintf("%d measurements, interpolated in time, each freed of its own dead time; the dark is contained in it", len(c.backgrounds))
			if slices.ContainsFunc(c.backgrounds, func(d dim) bool { return d.scaled }) {
				k.Note += "; taken at another pump power, and scaled to this one above the dark"
			}
		case AccidentalStep:
			k.Amount = product
			k.Note = fmt.Sprintf("slice by slice from the full singles: %.6g", product)
			if c.windows > 0 {
				u := math.Sqrt(c.displaced / c.windows)
				k.Note += fmt.Sprintf("; by %.0f displaced windows: %.6g ± %.2g, apart by %.1f of that", c.windows, c.displaced, u, math.Abs(product-c.displaced)/math.Max(u, 1e-300))
				if c.useDisplaced {
					k.Amount = c.displaced
				}
				if math.Abs(product-c.displaced) > 4*u {
					r.Warnings = append(r.Warnings, fmt.Sprintf("accidentals by product (%.6g) and by displaced windows (%.6g) differ by more than four standard uncertainties: the window, a delay or a drifting rate is not what was declared", product, c.displaced))
				}
			}
		case ShadowStep:
			k.Amount = chanceShadow(c.logic, mT, mD, (c.c-c.accidentals())/c.gateS, w, x[inTauT], x[inTauD])
			k.Note = "what dead times and the counter's logic (" + string(c.logic) + ") take from C - A"
		case AfterpulseStep:
			k.Amount = 1 - x[inAfter]
		case DeadTimeStep:
			k.Amount = 1
			if k.After > 0 {
				k.Amount = before / k.After
			}
			k.Note = fmt.Sprintf("coupled with the trigger's (%s, %s); count rate times dead time %.4f", c.trigger.Model, c.test.Model, c.loadD)
			if math.Abs(c.beyond) > 0 {
				k.Note += fmt.Sprintf(" (beyond the first order: %+.2e)", c.beyond)
			}
		case CaptureStep:
			k.Amount = x[inCapture]
		case PathStep:
			k.Amount = 1
			var parts []string
			for j, t := range c.test.Path {
				k.Amount *= x[inPath+j]
				part := fmt.Sprintf("%s %.6g ± %.2g", t.Name, t.Value, t.U)
				if from := strings.TrimSpace(t.From + " " + t.Date); from != "" {
					part += " (" + from + ")"
				}
				parts = append(parts, part)
			}
			k.Note = strings.Join(parts, "; ")
		case CollectionStep:
			k.Amount = x[inCollection]
			k.Note = fmt.Sprintf("the model collects %.5f; the middle between it and 1", c.collected)
		}
		if !k.Applied {
			k.Amount, k.Note = 0, ""
		}
		r.Waterfall = append(r.Waterfall, k)
	}
}

func (c *calculation) conditions(r *Result, x []float64, q Question) {
	orNone := func(s string) string {
		if s == "" {
			return "not declared"
		}
		return s
	}
	net, a := c.c-c.accidentals(), c.chances*x[inWindow]
	r.note("polarisation", orNone(c.test.Polarisation))
	r.note("plane", orNone(c.test.Face)+": the plane that the efficiency refers to")
	r.noteValue("count rate of the trigger", c.s/c.gateS, math.Sqrt(c.s)/c.gateS, "/s", c.trigger.Name)
	r.noteValue("count rate of the detector under test", c.d/c.gateS, math.Sqrt(c.d)/c.gateS, "/s", c.test.Name)
	r.noteValue("coincidence rate", c.c/c.gateS, math.Sqrt(c.c)/c.gateS, "/s", "raw")
	r.note("detector settings", orNone(strings.Join(c.test.Settings, ", ")))
	r.note("trigger settings", orNone(strings.Join(c.trigger.Settings, ", ")))
	r.noteValue("coverage factor k", *r.K, 0.1, "1", fmt.Sprintf("%.4g %% coverage", 100*q.Coverage))
	r.noteValue("heralding efficiency, net", net/(c.s-c.background), math.Sqrt(c.c)/(c.s-c.background), "1", "(C - A)/(S - B): of arm and detector together, no detection efficiency")
	if a > 0 {
		gross := GrossCAR(c.c, a)
		u := gross * math.Hypot(1/math.Sqrt(c.c), c.inputs[inWindow].U/x[inWindow])
		r.noteValue("coincidence-to-accidental ratio, net", NetCAR(c.c, a), u, "1", "(C - A)/A")
		r.noteValue("coincidence-to-accidental ratio, gross", gross, u, "1", "C/A")
	}
	r.note("counter logic", string(c.logic))
	if c.trigger.Filter != nil {
		f := c.trigger.Filter
		r.note("trigger filter", fmt.Sprintf("%.6g nm, %.6g nm wide %s", f.CentreNm, f.WidthNm, f.Shape))
	}
	for _, s := range steps {
		if !c.on(s) {
			r.Warnings = append(r.Warnings, "the correction "+strings.ReplaceAll(string(s), "_", " ")+" is switched off, and its uncertainty with it")
		}
	}
}
