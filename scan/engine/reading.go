package engine

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"time"

	"gonum.org/v1/gonum/stat/distuv"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// brightness is light that a detector must not see, or too little to be believed.
type brightness struct {
	detector string
	rateHz   float64
	limitHz  float64
	floor    bool
}

func (b *brightness) Error() string {
	if b.floor {
		return fmt.Sprintf("%s counts %.4g /s, below its floor of %.4g /s: latched, paralysed or unplugged", b.detector, b.rateHz, b.limitHz)
	}
	return fmt.Sprintf("%s counts %.4g /s, above its trip rate of %.4g /s", b.detector, b.rateHz, b.limitHz)
}

// perform takes one reading, writes it, and decides what follows from how it went.
func (e *Engine) perform(ctx context.Context, t task) error {
	op, end := e.operation(ctx)
	reading, err := e.take(op, t)
	interrupted := op.Err() != nil
	end()
	bad := ""
	if _, bright := errors.AsType[*brightness](err); bright || err != nil && !interrupted {
		bad = e.cover(ctx) // of whatever failed: until the next gate nobody sees how bright it is
	}
	if reading != nil {
		if err != nil {
			reading.Accepted = false
			reading.Reason = firstLine(err)
			if interrupted {
				reading.Reason = "interrupted: " + context.Cause(op).Error()
			}
		}
		e.step(StepJudged)
		if werr := e.write(ctx, protocol.ReadingEntry, &reading.Head, reading, protocol.ReadingSchema); werr != nil {
			return werr
		}
		e.progress.applyReading(reading)
		e.publishSnapshot()
		if err == nil && reading.Accepted {
			err = e.judgeDark(reading)
		}
	}
	if werr := e.tellDeaf(ctx); werr != nil {
		return werr
	}
	switch {
	case interrupted:
		return nil // turn sees the order, or the end
	case err != nil:
		return e.afterError(ctx, t, err, bad)
	case !reading.Accepted:
		return e.again(ctx, t, reading.Reason)
	}
	return nil
}

// take moves, proves, lights, counts and judges. The reading is nil as long as no gate was
// opened. With an error it is what was counted until then, to be set aside.
func (e *Engine) take(ctx context.Context, t task) (*protocol.Reading, error) {
	r := &protocol.Reading{Kind: protocol.ReadingKind(t.kind), Simulated: e.simulated, Tag: string(e.Bench.Tag), Attempt: e.progress.attempts[t.key()] + 1,
		Settings: []protocol.Setting{}, Sensors: []protocol.Sensor{}, Counts: []protocol.Count{}, Slices: []protocol.Slice{}, Angles: []protocol.Angle{}}
	point := e.progress.point(e.progress.nearest().Point)
	targets := point.Axes
	if err := e.set(ctx, r, e.unstepped()); err != nil {
		return nil, err
	}
	switch t.kind {
	case lightTask:
		r.Point, r.Visit = &t.visit.Point, &t.visit.Visit
		if err := e.set(ctx, r, point.Settings); err != nil {
			return nil, err
		}
	case darkTask:
		targets = e.stay(targets) // no light comes: where the arms look makes no difference worth a journey
		if err := e.noteSettings(ctx, r, point.Settings); err != nil {
			return nil, err
		}
	case backgroundTask:
		if err := e.noteSettings(ctx, r, point.Settings); err != nil {
			return nil, err
		}
		b := e.Plan.Background
		targets = append(slices.Clone(targets), scan.AxisTarget{Axis: b.Axis, Angle: b.From + b.By})
	case referenceTask:
		ref := e.Plan.Reference
		place := ref.Places[t.visit.Point]
		r.Reference = &protocol.ReferenceOf{Set: t.visit.Visit, Place: t.visit.Point, Places: len(ref.Places), Arm: string(place.Arm), On: string(place.On)}
		targets = e.withOthers(place.Axes, targets)
		// Settings that are swept are put where they were first, or each set would be another one.
		if err := e.set(ctx, r, e.Plan.Points[0].Settings); err != nil {
			return nil, err
		}
	}
	before, err := e.goTo(ctx, targets)
	if err != nil {
		return nil, err
	}
	for _, a := range e.Bench.Axes {
		r.Angles = append(r.Angles, protocol.Angle{Axis: string(a.Name), Target: e.commanded[a.Name], Before: before[a.Name], After: before[a.Name], Proof: string(a.Proof)})
	}
	if t.kind != darkTask {
		if err := e.checkGuards(ctx); err != nil {
			return nil, err
		}
		if err := e.mayOpen(before); err != nil {
			return nil, err
		}
	}
	if err := e.light(ctx, t.kind != darkTask); err != nil {
		return nil, err
	}
	e.step(StepLit)
	if err := e.glance(ctx, r); err != nil {
		return orNil(r), err
	}
	if r.Glance != nil {
		if err := e.judgeRates(t.kind, *r.Glance); err != nil {
			return r, err
		}
	}
	watch := newWatch(e)
	defer func() { e.unheard = watch.fail }()
	watch.sample(ctx)
	r.StartedAt = protocol.Time{Time: e.now()}
	for _, gate := range t.dwell.Slices() {
		if t.dwell.Heralds > 0 && countOf(r.Counts, t.dwell.Trigger) >= t.dwell.Heralds {
			break
		}
		slice, err := e.count(ctx, r, gate)
		if err != nil {
			r.EndedAt = protocol.Time{Time: e.now()}
			r.Sensors = watch.sums()
			return orNil(r), err
		}
		r.Slices = append(r.Slices, slice)
		r.Counts = sum(r.Counts, slice.Counts, e.Bench.Tag)
		r.GateSet += slice.GateSet
		r.Gate += slice.Gate
		r.EndedAt = protocol.Time{Time: e.now()}
		e.step(StepGated)
		watch.sample(ctx)
		if err := e.judgeLight(r.Slices...); err != nil {
			r.Sensors = watch.sums()
			return r, err
		}
		if t.kind != darkTask {
			if err := errors.Join(e.judgeGuards(watch), e.judgeRates(t.kind, slice)); err != nil {
				r.Sensors = watch.sums()
				return r, err
			}
		}
		if err := e.hearWishes(ctx); err != nil {
			return r, err
		}
	}
	r.Sensors = watch.sums()
	after, err := e.where(ctx)
	if err != nil {
		return r, err
	}
	for i, a := range e.Bench.Axes {
		r.Angles[i].After = after[a.Name]
	}
	if err := e.readBack(ctx, r); err != nil {
		return r, err
	}
	if err := e.stillLit(ctx, t.kind != darkTask); err != nil {
		return r, err
	}
	r.Scatter = e.scatter(r.Slices)
	if err := e.inPlace(after, "after the dwell"); err != nil {
		r.Reason = err.Error()
		return r, nil
	}
	r.Accepted = r.Reason == ""
	return r, nil
}

// orNil drops a reading in which no gate was opened: there is nothing to set aside.
func orNil(r *protocol.Reading) *protocol.Reading {
	if len(r.Slices) == 0 && r.Glance == nil && r.LostGates == 0 {
		return nil
	}
	if r.StartedAt.IsZero() {
		r.StartedAt = r.EndedAt
	}
	return r
}

// count takes one slice, and notes in the reading what speaks against it.
func (e *Engine) count(ctx context.Context, r *protocol.Reading, gate time.Duration) (protocol.Slice, error) {
	g, err := e.Bench.Counter.Count(ctx, gate)
	if err != nil {
		if d, ok := errors.AsType[*drivers.Error](err); ok && d.GateOpened {
			r.LostGates++
		}
		return protocol.Slice{}, err
	}
	slice := protocol.Slice{GateSet: protocol.Seconds(g.Set), Gate: protocol.Seconds(g.Length), Raw: g.Raw}
	for _, c := range e.Bench.Counter.Channels() {
		slice.Counts = append(slice.Counts, protocol.Count{Channel: string(c), Counts: g.Counts[c]})
	}
	switch {
	case g.Overflow:
		r.Reason = "a counter channel ran over"
	case g.Doubtful:
		r.Reason = "the counter doubts its gate time"
	case (g.Length-g.Set).Abs() > g.Set/1000 || (g.Set-gate).Abs() > gate/100:
		r.Reason = fmt.Sprintf("a gate of the wrong length: asked %s, set %s, counted %s", unit.Span(gate), unit.Span(g.Set), unit.Span(g.Length))
	}
	return slice, nil
}

// glance looks at the light for a moment before the dwell, where a detector asks for it.
func (e *Engine) glance(ctx context.Context, r *protocol.Reading) error {
	var gate time.Duration
	for _, d := range e.Bench.Detectors {
		gate = max(gate, d.Glance)
	}
	if gate == 0 {
		return nil
	}
	slice, err := e.count(ctx, r, gate)
	r.EndedAt = protocol.Time{Time: e.now()}
	if err != nil {
		return err
	}
	r.Reason = "" // what speaks against a glance does not speak against the dwell
	r.Glance = &slice
	return e.judgeLight(slice)
}

// floorCounts is how many counts a floor must predict before too few of them mean something: the
// chance of none at all is then exp(-20).
const floorCounts = 20

// judgeLight compares the rates of gates, given in their order, with trip and floor: the last one with
// the trip, since light must be seen at once; with the floor the last ones that are long enough
// together, since little light needs time. A detector that latches in the middle of a dwell must not
// hide behind what it counted before.
func (e *Engine) judgeLight(gates ...protocol.Slice) error {
	last := gates[len(gates)-1]
	for _, d := range e.Bench.Detectors {
		if rate := rateOf(last.Counts, d.Channel, last.Gate.Duration()); d.TripHz > 0 && rate > d.TripHz {
			return &brightness{detector: d.Name, rateHz: rate, limitHz: d.TripHz}
		}
		if rate, enough := newestRate(gates, d); enough && rate < d.FloorHz/2 {
			return &brightness{detector: d.Name, rateHz: rate, limitHz: d.FloorHz, floor: true}
		}
	}
	return nil
}

// newestRate is a detector's rate in the last gates in which its floor predicts floorCounts.
func newestRate(gates []protocol.Slice, d Detector) (rateHz float64, enough bool) {
	counts, seconds := 0.0, 0.0
	for _, g := range slices.Backward(gates) {
		counts += float64(countOf(g.Counts, d.Channel))
		seconds += g.Gate.Duration().Seconds()
		if d.FloorHz*seconds >= floorCounts {
			return counts / seconds, true
		}
	}
	return 0, false
}

func countOf(counts []protocol.Count, channel drivers.Channel) uint64 {
	for _, c := range counts {
		if c.Channel == string(channel) {
			return c.Counts
		}
	}
	return 0
}

// withOthers adds to targets of some axes where the points' other axes stand now.
func (e *Engine) withOthers(some, all []scan.AxisTarget) []scan.AxisTarget {
	out := slices.Clone(some)
	for _, t := range e.stay(all) {
		if !slices.ContainsFunc(some, func(s scan.AxisTarget) bool { return s.Axis == t.Axis }) {
			out = append(out, t)
		}
	}
	return out
}

// stay turns targets into where those axes were last sent, so that they are proved and not moved.
func (e *Engine) stay(targets []scan.AxisTarget) []scan.AxisTarget {
	var stay []scan.AxisTarget
	for _, t := range targets {
		if e.sent[t.Axis] {
			stay = append(stay, scan.AxisTarget{Axis: t.Axis, Angle: e.commanded[t.Axis]})
		} else {
			stay = append(stay, t)
		}
	}
	return stay
}

func rateOf(counts []protocol.Count, channel drivers.Channel, gate time.Duration) float64 {
	if gate <= 0 {
		return 0
	}
	return float64(countOf(counts, channel)) / gate.Seconds()
}

// sum adds a slice's counts, except the tag, which is a name and no amount.
func sum(total, slice []protocol.Count, tag drivers.Channel) []protocol.Count {
	if len(total) == 0 {
		return append(total, slice...)
	}
	for i, c := range slice {
		if c.Channel == string(tag) {
			total[i].Counts = c.Counts
		} else {
			total[i].Counts += c.Counts
		}
	}
	return total
}

// scatter tests whether the slices of the singles channels scatter as counts do, both ways: too
// much, and too little. The channel that scatters least plausibly is named. Pearson's chi-square
// against equal rates. It marks a dwell and rejects none: a laser's own noise scatters too.
func (e *Engine) scatter(slices []protocol.Slice) *protocol.Scatter {
	if len(slices) < 2 {
		return nil
	}
	var worst *protocol.Scatter
	for _, d := range e.Bench.Detectors {
		var n, t float64
		for _, s := range slices {
			n += rateOf(s.Counts, d.Channel, time.Second)
			t += s.Gate.Duration().Seconds()
		}
		if n < 5*float64(len(slices)) || t == 0 {
			continue // too few for chi-square to mean anything
		}
		chi := 0.0
		for _, s := range slices {
			want := n * s.Gate.Duration().Seconds() / t
			got := rateOf(s.Counts, d.Channel, time.Second)
			chi += (got - want) * (got - want) / want
		}
		freedom := len(slices) - 1
		below := distuv.ChiSquared{K: float64(freedom)}.CDF(chi)
		above := distuv.ChiSquared{K: float64(freedom)}.Survival(chi)
		p := min(1, 2*min(below, above))
		if worst == nil || p < worst.P {
			worst = &protocol.Scatter{Channel: string(d.Channel), ChiSquare: chi, Freedom: freedom, P: p}
		}
	}
	return worst
}

// unstepped are the settings that the plan does not step, with where they stand.
func (e *Engine) unstepped() []scan.SettingTarget {
	var all []scan.SettingTarget
	for _, s := range e.Bench.Settings {
		value, ok := e.Bench.Stand[s.Name()]
		if ok && !slices.ContainsFunc(e.Plan.Points[0].Settings, func(t scan.SettingTarget) bool { return t.Setting == s.Name() }) {
			all = append(all, scan.SettingTarget{Setting: s.Name(), Value: value})
		}
	}
	return all
}

// set brings settings to their targets, with the detectors protected while one moves, and notes what was
// read back.
func (e *Engine) set(ctx context.Context, r *protocol.Reading, targets []scan.SettingTarget) error {
	shielded := false
	for _, t := range targets {
		s := e.setting(t.Setting)
		var value float64
		var err error
		if told, is := e.told[t.Setting]; is && told == t.Value && !e.strayed[t.Setting] {
			if value, err = s.Get(ctx); err == nil {
				err = e.atTarget(s, value, t.Value, "before the dwell")
			}
		} else {
			if !shielded {
				if err := e.shield(ctx); err != nil {
					return err
				}
				shielded = true
			}
			if !e.strayed[t.Setting] { // which is not noted where it stands before it was set again
				delete(e.told, t.Setting)
			}
			value, err = s.Set(ctx, t.Value)
		}
		if err != nil {
			return err
		}
		e.told[t.Setting] = t.Value
		delete(e.strayed, t.Setting)
		r.Settings = append(r.Settings, protocol.Setting{Name: string(t.Setting), Target: t.Value, Before: value, After: value, Unit: s.Unit()})
	}
	return nil
}

// atTarget says whether a setting still has the value that it was set to. One that left it by itself,
// or by somebody's hand, is set again at the next attempt.
func (e *Engine) atTarget(s drivers.Setting, value, target float64, during string) error {
	within, judged := e.Bench.Within[s.Name()]
	if !judged || math.Abs(value-target) <= within+1e-9*math.Abs(target) {
		return nil
	}
	e.strayed[s.Name()] = true
	return &drivers.Error{Op: "get", Device: s.Name(), Remedy: drivers.Retry,
		Err: fmt.Errorf("has left %.9g %s, which it was set to, and stands at %.9g %s %s; want it within %.3g", target, s.Unit(), value, s.Unit(), during, within)}
}

// noteSettings notes where the settings stand that the points step: what is counted beside the points
// is counted there.
func (e *Engine) noteSettings(ctx context.Context, r *protocol.Reading, stepped []scan.SettingTarget) error {
	for _, t := range stepped {
		if target, told := e.told[t.Setting]; told {
			if err := e.set(ctx, r, []scan.SettingTarget{{Setting: t.Setting, Value: target}}); err != nil {
				return err
			}
			continue
		}
		s := e.setting(t.Setting)
		value, err := s.Get(ctx)
		if err != nil {
			return err
		}
		r.Settings = append(r.Settings, protocol.Setting{Name: string(t.Setting), Target: value, Before: value, After: value, Unit: s.Unit()})
	}
	return nil
}

func (e *Engine) readBack(ctx context.Context, r *protocol.Reading) error {
	for i := range r.Settings {
		s := e.setting(drivers.DeviceName(r.Settings[i].Name))
		value, err := s.Get(ctx)
		if err != nil {
			return err
		}
		r.Settings[i].After = value
		if _, told := e.told[s.Name()]; !told {
			continue
		}
		if err := e.atTarget(s, value, r.Settings[i].Target, "after the dwell"); err != nil {
			return err
		}
	}
	return nil
}

func (e *Engine) setting(name drivers.DeviceName) drivers.Setting {
	for _, s := range e.Bench.Settings {
		if s.Name() == name {
			return s
		}
	}
	panic("engine: the plan names setting " + string(name) + ", which the bench does not have; it should have been refused")
}

// watch sums up the sensors over a dwell.
type watch struct {
	e    *Engine
	sum  []protocol.Sensor
	fail error
}

func newWatch(e *Engine) *watch {
	w := &watch{e: e}
	for _, s := range e.Bench.Sensors {
		w.sum = append(w.sum, protocol.Sensor{Sensor: string(s.Name()), Unit: s.Unit()})
	}
	return w
}

// sample reads every sensor once. A sensor that does not answer is left out and remembered: what
// was counted is true without it.
func (w *watch) sample(ctx context.Context) {
	for i, s := range w.e.Bench.Sensors {
		if _, deaf := w.e.deaf[s.Name()]; deaf {
			continue
		}
		v, err := s.Read(ctx)
		if ctx.Err() != nil {
			return
		}
		if err != nil {
			w.e.deaf[s.Name()] = w.e.now()
			w.fail = errors.Join(w.fail, err)
			continue
		}
		q := &w.sum[i]
		if q.Samples == 0 {
			q.Minimum, q.Maximum = v, v
		}
		q.Minimum, q.Maximum = min(q.Minimum, v), max(q.Maximum, v)
		q.Mean += (v - q.Mean) / float64(q.Samples+1)
		q.Samples++
	}
}

// sums returns the sensors that answered at least once.
func (w *watch) sums() []protocol.Sensor {
	out := []protocol.Sensor{}
	for _, q := range w.sum {
		if q.Samples > 0 {
			out = append(out, q)
		}
	}
	return out
}
