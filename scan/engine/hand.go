package engine

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// HandFacts are what hand work has to know beside the bench.
type HandFacts struct {
	Lines            Lines                             // nil: they cannot be let go
	Limits           map[drivers.DeviceName][2]float64 // of settings, in their units
	GateMin, GateMax time.Duration                     // of the counter; 0: no bound
	Pairs            []HandPairs
}

// HandPairs says which singles a coincidence channel is of, and how wide its window is.
type HandPairs struct {
	Channel drivers.Channel
	Of      [2]drivers.Channel
	Window  float64 // seconds, full width
}

// Lines are all the lines of a bench. Released ones are closed, and stay so until Take.
type Lines interface {
	Release(ctx context.Context) error
	Take()
}

// Hand is a bench under a person's hand, one act after another, with no run active. It is built by
// NewHand and made ready by Begin; End leaves the rest state. It writes nothing: its owner does.
//
// What holds for a run holds here: limits and keep-outs from the angles that are reported at that
// moment, detectors protected while anything moves, light judged at each gate and whenever something
// was opened. What it believes of angles and zeros dies with it.
type Hand struct {
	facts    HandFacts
	e        *Engine
	wanted   map[drivers.DeviceName]bool            // shutters that a person opened
	sent     map[drivers.AxisName]unit.Angle        // by hand, and proved
	homedAt  map[drivers.AxisName]unit.Angle        // where a search by hand left an axis
	letGo    bool                                   // the lines are another program's
	left     map[drivers.AxisName]unit.Angle        // where the axes stood when the lines were let go
	leftSet  map[drivers.DeviceName]float64         // the same of settings
	axes     map[drivers.AxisName]protocol.HandAxis // as last seen
	blades   map[drivers.DeviceName]protocol.HandBlade
	settings map[drivers.DeviceName]protocol.HandValue
	sensors  map[drivers.DeviceName]protocol.HandValue
	askedAt  time.Time // when all of that was asked last
}

// NewHand puts a bench under a hand. It touches nothing.
func NewHand(b *Bench, facts HandFacts) *Hand {
	h := &Hand{facts: facts, e: New(Config{Bench: b}), wanted: map[drivers.DeviceName]bool{}, sent: map[drivers.AxisName]unit.Angle{}, homedAt: map[drivers.AxisName]unit.Angle{},
		axes: map[drivers.AxisName]protocol.HandAxis{}, blades: map[drivers.DeviceName]protocol.HandBlade{}, settings: map[drivers.DeviceName]protocol.HandValue{}, sensors: map[drivers.DeviceName]protocol.HandValue{}}
	h.e.origin = time.Now()
	h.e.benchZero = h.e.origin
	return h
}

// HandRefused is an act that was not done, for a reason that a person can see to.
type HandRefused struct{ Text string }

func (r *HandRefused) Error() string { return r.Text }

func refuseHand(format string, args ...any) error {
	return &HandRefused{Text: fmt.Sprintf(format, args...)}
}

// HandBright is light that a detector must not see, or too little to be believed. What could be
// protected is; Did says how that went.
type HandBright struct {
	Detector string
	RateHz   float64
	LimitHz  float64
	Did      string
	seen     error
}

func (b *HandBright) Error() string { return b.seen.Error() + "; " + b.Did }

// Begin brings the bench to rest, connects what is not connected, checks who answers, and asks
// where everything stands. It opens and moves nothing. Axes without a zero are no error: they are
// told, and stay.
func (h *Hand) Begin(ctx context.Context) error {
	bad := h.e.rest(ctx)
	if err := h.connect(ctx); err != nil {
		if bad != "" {
			return fmt.Errorf("%w%s", err, withBad(bad))
		}
		return err
	}
	return nil
}

func (h *Hand) connect(ctx context.Context) error {
	clear(h.wanted)
	clear(h.sent)
	clear(h.homedAt)
	clear(h.e.deaf)
	if err := gravest(h.e.connectAll(ctx)); err != nil {
		return err
	}
	h.look(ctx)
	return context.Cause(ctx)
}

// State is how the bench stood when each part of it was last asked.
func (h *Hand) State() protocol.HandReply {
	r := protocol.HandReply{LetGo: h.letGo, Axes: []protocol.HandAxis{}, Shutters: []protocol.HandBlade{}, Settings: []protocol.HandValue{}, Sensors: []protocol.HandValue{}, Moved: []protocol.HandMoved{}}
	for _, a := range h.e.Bench.Axes {
		r.Axes = append(r.Axes, h.axes[a.Name])
	}
	for _, s := range h.shutters() {
		r.Shutters = append(r.Shutters, h.blades[s.Name()])
	}
	for _, s := range h.e.Bench.Settings {
		r.Settings = append(r.Settings, h.settings[s.Name()])
	}
	for _, s := range h.e.Bench.Sensors {
		r.Sensors = append(r.Sensors, h.sensors[s.Name()])
	}
	return r
}

// Where asks every device how it stands. What does not answer is told in its place.
func (h *Hand) Where(ctx context.Context) error {
	if err := h.held(); err != nil {
		return err
	}
	h.look(ctx)
	return context.Cause(ctx)
}

func (h *Hand) held() error {
	if h.letGo {
		return refuseHand("the lines are let go; take them again first")
	}
	return nil
}

// look fills what State tells.
func (h *Hand) look(ctx context.Context) {
	h.askedAt = time.Now()
	h.places(ctx)
	h.lookAtShutters(ctx)
	for _, s := range h.e.Bench.Settings {
		h.settings[s.Name()] = valueOf(s.Name(), s.Unit(), func() (float64, error) { return s.Get(ctx) })
	}
	for _, s := range h.e.Bench.Sensors {
		h.sensors[s.Name()] = valueOf(s.Name(), s.Unit(), func() (float64, error) { return s.Read(ctx) })
	}
}

func valueOf(name drivers.DeviceName, unit string, read func() (float64, error)) protocol.HandValue {
	v := protocol.HandValue{Name: string(name), Unit: unit}
	value, err := read()
	if err != nil {
		v.Trouble = firstLine(err)
	} else {
		v.Value = &value
	}
	return v
}

// places asks every controller for its angles, and returns those that are known, and why the others
// are not.
func (h *Hand) places(ctx context.Context) (at map[drivers.AxisName]unit.Angle, bad map[drivers.AxisName]error) {
	at, bad = map[drivers.AxisName]unit.Angle{}, map[drivers.AxisName]error{}
	for _, s := range h.e.Bench.Stages {
		got, err := s.Where(ctx)
		if err != nil {
			for _, a := range s.Axes() {
				bad[a] = err
			}
			continue
		}
		maps.Copy(at, got)
	}
	for _, a := range h.e.Bench.Axes {
		told := protocol.HandAxis{Axis: string(a.Name), Low: a.Low, High: a.High, Proof: string(a.Proof)}
		if angle, known := at[a.Name]; known {
			told.Angle = &angle
		} else if err := bad[a.Name]; err != nil {
			told.Trouble = firstLine(err)
		}
		h.axes[a.Name] = told
	}
	return at, bad
}

// shutters lists the pump's, and then each detectors' once.
func (h *Hand) shutters() []drivers.Shutter {
	var all []drivers.Shutter
	if p := h.e.Bench.Pump; p != nil {
		all = append(all, p)
	}
	return append(all, h.e.protectors()...)
}

func (h *Hand) lookAtShutters(ctx context.Context) {
	for _, s := range h.shutters() {
		told := protocol.HandBlade{Shutter: string(s.Name()), Guards: h.guards(s)}
		blade, err := s.State(ctx)
		if err != nil {
			told.Trouble = firstLine(err)
		}
		told.Open = blade.Open
		h.blades[s.Name()] = told
	}
}

// guards says what is behind a shutter.
func (h *Hand) guards(s drivers.Shutter) string {
	var names []string
	if s == h.e.Bench.Pump {
		names = append(names, "pump")
	}
	for _, d := range h.e.Bench.Detectors {
		if d.Protect == s {
			names = append(names, d.Name)
		}
	}
	return strings.Join(names, ", ")
}

// Look counts one gate and judges the light in it. A long one is cut into shorter gates while detectors
// see light, so that too much of it does not wait for the end.
func (h *Hand) Look(ctx context.Context, gate time.Duration) (protocol.HandLookedAt, error) {
	if err := h.held(); err != nil {
		return protocol.HandLookedAt{}, err
	}
	if low, high := h.facts.GateMin, h.facts.GateMax; gate <= 0 || gate < low || high > 0 && gate > high {
		return protocol.HandLookedAt{}, refuseHand("gate %s; want %s to %s", gate, low, high)
	}
	var all protocol.Slice
	var parts []protocol.Slice
	doubt := ""
	for left := gate; left > 0; {
		part := left
		if h.seeing() && left >= 2*handSlice {
			part = handSlice
		}
		left -= part
		slice, bad, err := h.gate(ctx, part)
		if err != nil {
			return protocol.HandLookedAt{}, err
		}
		parts = append(parts, slice)
		if err := h.judge(ctx, parts...); err != nil {
			return protocol.HandLookedAt{}, err
		}
		all.Counts = sum(all.Counts, slice.Counts, h.e.Bench.Tag)
		all.Gate += slice.Gate
		if bad != "" {
			doubt = bad
		}
	}
	if time.Since(h.askedAt) > handRefresh {
		h.look(ctx)
	}
	return h.told(all, doubt), context.Cause(ctx)
}

// handSlice is the longest gate in which detectors see light that nobody judges, nearly: a last one may
// be twice as long. handRefresh is the time between two questions of how everything stands while a
// person looks at rates.
const (
	handSlice   = 2 * time.Second
	handRefresh = 2 * time.Second
)

// Watch is a glance that is nobody's: while detectors see light, somebody has to.
func (h *Hand) Watch(ctx context.Context) error {
	if h.letGo || !h.seeing() {
		return nil
	}
	return h.glance(ctx)
}

func (h *Hand) gate(ctx context.Context, gate time.Duration) (protocol.Slice, string, error) {
	r := &protocol.Reading{}
	slice, err := h.e.count(ctx, r, gate)
	return slice, r.Reason, err
}

func (h *Hand) told(s protocol.Slice, doubt string) protocol.HandLookedAt {
	l := protocol.HandLookedAt{Gate: s.Gate, Doubt: doubt, Rates: []protocol.HandRate{}, Ratios: []protocol.HandRatio{}}
	gate := s.Gate.Duration()
	for _, c := range s.Counts {
		if c.Channel == string(h.e.Bench.Tag) {
			continue
		}
		rate := protocol.HandRate{Channel: c.Channel, Counts: c.Counts, Rate: rateOf(s.Counts, drivers.Channel(c.Channel), gate)}
		for _, p := range h.facts.Pairs {
			if string(p.Channel) == c.Channel {
				a := rateOf(s.Counts, p.Of[0], gate) * rateOf(s.Counts, p.Of[1], gate) * p.Window
				rate.Accidentals = &a
			}
		}
		l.Rates = append(l.Rates, rate)
	}
	for _, p := range h.facts.Pairs {
		for _, arm := range p.Of {
			ratio := protocol.HandRatio{Channel: string(p.Channel), Over: string(arm)}
			if singles, both := float64(countOf(s.Counts, arm)), float64(countOf(s.Counts, p.Channel)); singles > 0 {
				value := both / singles
				u := math.Sqrt(both*max(0, 1-value)) / singles // binomial: each single has a partner or has none
				ratio.Ratio, ratio.U = &value, &u
			}
			l.Ratios = append(l.Ratios, ratio)
		}
	}
	return l
}

// seeing says whether any detector whose light is judged may see some.
func (h *Hand) seeing() bool {
	return slices.ContainsFunc(h.e.Bench.Detectors, func(d Detector) bool {
		return (d.TripHz > 0 || d.FloorHz > 0) && h.sees(d)
	})
}

func (h *Hand) sees(d Detector) bool { return d.Protect == nil || h.wanted[d.Protect.Name()] }

// judge compares gates, in their order, with trips and floors. Behind a closed shutter nothing is expected, so only
// the trip counts there. What is too bright is protected before anything else happens.
func (h *Hand) judge(ctx context.Context, gates ...protocol.Slice) error {
	b := *h.e.Bench
	b.Detectors = slices.Clone(b.Detectors)
	for i := range b.Detectors {
		if !h.sees(b.Detectors[i]) {
			b.Detectors[i].FloorHz = 0
		}
	}
	seen := (&Engine{Config: Config{Bench: &b}}).judgeLight(gates...)
	bright, is := errors.AsType[*brightness](seen)
	if !is {
		return seen
	}
	out := &HandBright{Detector: bright.detector, RateHz: bright.rateHz, LimitHz: bright.limitHz, seen: bright, Did: "the detectors were protected"}
	fresh, cancel := h.e.fresh(ctx, 5*time.Second)
	defer cancel()
	if err := h.protect(fresh); err != nil {
		out.Did = "A DETECTOR COULD NOT BE PROTECTED: " + strings.ReplaceAll(err.Error(), "\n", "; ")
	}
	open := slices.ContainsFunc(b.Detectors, func(d Detector) bool { return d.Name == bright.detector && d.Protect == nil })
	if pump := h.e.Bench.Pump; open && pump != nil {
		delete(h.wanted, pump.Name())
		out.Did += "; " + bright.detector + " has no protector, so the pump was closed"
		if err := h.e.shut(fresh, pump); err != nil {
			out.Did += ", WHICH FAILED: " + firstLine(err)
		}
	}
	h.lookAtShutters(fresh)
	return out
}

// protect closes the detectors' shutters, and forgets that a person opened them.
func (h *Hand) protect(ctx context.Context) error {
	for _, s := range h.e.protectors() {
		delete(h.wanted, s.Name())
	}
	return h.e.protect(ctx)
}

// glanceAtLeast is the gate of a glance where no detector names one.
const glanceAtLeast = 20 * time.Millisecond

// glance judges the light by a short gate.
func (h *Hand) glance(ctx context.Context) error {
	if !h.seeing() {
		return nil
	}
	gate := max(glanceAtLeast, h.facts.GateMin)
	for _, d := range h.e.Bench.Detectors {
		gate = max(gate, d.Glance)
	}
	slice, _, err := h.gate(ctx, gate)
	if err != nil {
		return err
	}
	return h.judge(ctx, slice)
}

// Shutter opens or closes what a name says: "pump", "detectors", a detector, or a shutter's own
// name. Before the pump opens, the keep-outs that it lifts must hold without it.
func (h *Hand) Shutter(ctx context.Context, name string, open bool) error {
	if err := h.held(); err != nil {
		return err
	}
	which, err := h.named(name)
	if err != nil {
		return err
	}
	defer h.lookAtShutters(ctx)
	if !open {
		var errs []error
		for _, s := range which {
			delete(h.wanted, s.Name())
			errs = append(errs, h.e.shut(ctx, s))
		}
		return errors.Join(errs...)
	}
	if slices.Contains(which, h.e.Bench.Pump) {
		at, _ := h.places(ctx)
		if err := route.Stand(h.e.Bench.Axes, h.e.Bench.KeepOuts, at, route.State{}); err != nil {
			return refuseHand("the pump stays closed: %v", err)
		}
	}
	return h.open(ctx, which)
}

// open opens shutters by a person's word, waits until the detectors behind them are ready, and
// judges what they see.
func (h *Hand) open(ctx context.Context, which []drivers.Shutter) error {
	var ready time.Duration
	for _, s := range which {
		moved, err := h.e.setShutter(ctx, s, true)
		if err != nil {
			return err
		}
		h.wanted[s.Name()] = true
		for _, d := range h.e.Bench.Detectors {
			if moved && d.Protect == s {
				ready = max(ready, d.Ready)
			}
		}
	}
	if err := h.e.Bench.Pace.Wait(ctx, ready); err != nil {
		return err
	}
	return h.glance(ctx)
}

func (h *Hand) named(name string) ([]drivers.Shutter, error) {
	all := h.shutters()
	switch {
	case name == "pump" && h.e.Bench.Pump != nil:
		return all[:1], nil
	case name == "detectors" && len(h.e.protectors()) > 0:
		return h.e.protectors(), nil
	}
	for _, d := range h.e.Bench.Detectors {
		if d.Name == name && d.Protect != nil {
			return []drivers.Shutter{d.Protect}, nil
		}
		if d.Name == name {
			return nil, refuseHand("%s: the bench file names no protector of this detector; there is nothing to open or close", name)
		}
	}
	var names []string
	for _, s := range all {
		if string(s.Name()) == name {
			return []drivers.Shutter{s}, nil
		}
		names = append(names, fmt.Sprintf("%s (%s)", s.Name(), h.guards(s)))
	}
	return nil, refuseHand("shutter %q; want pump, detectors, a detector, or one of %s", name, strings.Join(names, ", "))
}

// Moved is how a move went.
type Moved struct {
	From, Target, Stands unit.Angle
}

// Move sends one axis to a bench angle, or by one from where it was sent and stands, and proves that
// it arrived. The detectors are protected meanwhile; those that a person had opened are opened again
// after it. Out of a keep-out or back within its limits an axis may go, deeper it may not.
func (h *Hand) Move(ctx context.Context, name drivers.AxisName, angle unit.Angle, by bool) (Moved, error) {
	if err := h.held(); err != nil {
		return Moved{}, err
	}
	axis, err := h.axis(name)
	if err != nil {
		return Moved{}, err
	}
	at, err := h.standing(ctx, axis)
	if err != nil {
		return Moved{}, err
	}
	m := Moved{From: at[name], Target: angle, Stands: at[name]}
	if by {
		base := at[name]
		if sent, known := h.sent[name]; known && (sent-base).Abs() <= axis.Tolerance {
			base = sent // steps add up to what was asked for, not to what is left of each
		}
		m.Target = base + angle
	}
	closed, err := h.pumpClosed(ctx)
	if err != nil {
		return m, err
	}
	state := route.State{Attended: true, PumpClosed: closed}
	legs, err := route.Legs(h.e.Bench.Axes, h.e.Bench.KeepOuts, at, []scan.AxisTarget{{Axis: name, Angle: m.Target}}, state)
	if err != nil {
		return m, refuseHand("%v", err)
	}
	again := h.opened()
	if err := h.protect(ctx); err != nil {
		return m, err
	}
	delete(h.sent, name)
	delete(h.homedAt, name)
	for try := 1; ; try++ {
		if err := h.drive(ctx, axis, legs); err != nil {
			h.afterMotion(ctx)
			return m, err
		}
		if at, err = h.standing(ctx, axis); err != nil {
			h.afterMotion(ctx)
			return m, err
		}
		m.Stands = at[name]
		if (m.Stands - m.Target).Abs() <= axis.Tolerance {
			break
		}
		if try == proveTries {
			h.afterMotion(ctx)
			return m, &notThere{axis: name, angle: m.Stands, want: m.Target, tol: axis.Tolerance, during: fmt.Sprintf("after %d tries", proveTries)}
		}
		if legs, err = route.Legs(h.e.Bench.Axes, h.e.Bench.KeepOuts, at, []scan.AxisTarget{{Axis: name, Angle: m.Target}}, state); err != nil {
			h.afterMotion(ctx)
			return m, &drivers.Error{Op: "move", Device: "route", Remedy: drivers.GiveUp, Err: err}
		}
	}
	h.sent[name] = m.Target
	err = h.open(ctx, again)
	h.lookAtShutters(ctx)
	return m, err
}

// afterMotion asks how the bench stands after a move that failed.
func (h *Hand) afterMotion(ctx context.Context) {
	fresh, cancel := h.e.fresh(ctx, 2*time.Second)
	defer cancel()
	h.places(fresh)
	h.lookAtShutters(fresh)
}

func (h *Hand) axis(name drivers.AxisName) (scan.Axis, error) {
	var names []string
	for _, a := range h.e.Bench.Axes {
		if a.Name == name {
			return a, nil
		}
		names = append(names, string(a.Name))
	}
	return scan.Axis{}, refuseHand("axis %q; want one of %s", name, strings.Join(names, ", "))
}

// standing is where the axes stand, with that one among them.
func (h *Hand) standing(ctx context.Context, axis scan.Axis) (map[drivers.AxisName]unit.Angle, error) {
	at, bad := h.places(ctx)
	switch err := bad[axis.Name]; {
	case drivers.RemedyOf(err) == drivers.HomeAgain:
		return nil, refuseHand("%s does not move: %s; let its axes search for their zeros first, with somebody there", axis.Name, firstLine(err))
	case err != nil:
		return nil, err
	}
	if _, known := at[axis.Name]; !known {
		return nil, refuseHand("%s: its controller does not say where it stands", axis.Name)
	}
	return at, nil
}

func (h *Hand) pumpClosed(ctx context.Context) (bool, error) {
	pump := h.e.Bench.Pump
	if pump == nil {
		return false, nil
	}
	blade, err := pump.State(ctx)
	return err == nil && !blade.Open && !h.wanted[pump.Name()], err
}

// opened lists the detectors' shutters that a person opened.
func (h *Hand) opened() []drivers.Shutter {
	return slices.DeleteFunc(h.e.protectors(), func(s drivers.Shutter) bool { return !h.wanted[s.Name()] })
}

func (h *Hand) drive(ctx context.Context, axis scan.Axis, legs [][]scan.AxisTarget) error {
	stage := h.stage(axis)
	for _, leg := range legs {
		for _, t := range leg {
			if err := stage.Move(ctx, map[drivers.AxisName]unit.Angle{t.Axis: t.Angle}); err != nil {
				return err
			}
		}
	}
	return h.e.Bench.Pace.Wait(ctx, axis.Settle)
}

func (h *Hand) stage(axis scan.Axis) drivers.Stage {
	for _, s := range h.e.Bench.Stages {
		if s.Name() == axis.Controller {
			return s
		}
	}
	panic("engine: axis " + string(axis.Name) + " is on controller " + string(axis.Controller) + ", which the bench does not have")
}

// Set gives a setting a value in its unit, and returns what was read back. The detectors are protected
// meanwhile, for it may take long; those that a person had opened are opened again after it.
func (h *Hand) Set(ctx context.Context, name drivers.DeviceName, value float64) (float64, error) {
	if err := h.held(); err != nil {
		return 0, err
	}
	s, err := h.setting(name)
	if err != nil {
		return 0, err
	}
	if l, bounded := h.facts.Limits[name]; bounded && (value < l[0] || value > l[1]) {
		return 0, refuseHand("%s: %.9g %s is beyond its limits; want %.9g to %.9g %s", name, value, s.Unit(), l[0], l[1], s.Unit())
	}
	again := h.opened()
	if err := h.protect(ctx); err != nil {
		return 0, err
	}
	defer h.lookAtShutters(ctx)
	got, err := s.Set(ctx, value)
	h.settings[name] = valueOf(name, s.Unit(), func() (float64, error) { return got, err })
	if err != nil {
		return 0, err
	}
	return got, h.open(ctx, again) // and judged: it may have been the light
}

// SettingUnit is the unit of a setting.
func (h *Hand) SettingUnit(name drivers.DeviceName) (string, error) {
	s, err := h.setting(name)
	if err != nil {
		return "", err
	}
	return s.Unit(), nil
}

func (h *Hand) setting(name drivers.DeviceName) (drivers.Setting, error) {
	var names []string
	for _, s := range h.e.Bench.Settings {
		if s.Name() == name {
			return s, nil
		}
		names = append(names, string(s.Name()))
	}
	if len(names) == 0 {
		return nil, refuseHand("setting %q; this bench has none", name)
	}
	return nil, refuseHand("setting %q; want one of %s", name, strings.Join(names, ", "))
}

// Home lets one axis search its zero, with a person there, the pump closed and the detectors
// protected. The order that the bench file declares holds, and no search may be able to enter a
// keep-out.
func (h *Hand) Home(ctx context.Context, name drivers.AxisName) error {
	if err := h.held(); err != nil {
		return err
	}
	axis, err := h.axis(name)
	if err != nil {
		return err
	}
	stage := h.stage(axis)
	homed, err := stage.Homed(ctx)
	if err != nil {
		return err
	}
	order := h.e.homeOrder(stage)
	for _, before := range order {
		if before == name {
			break
		}
		if !homed[before] {
			return refuseHand("%s has no zero and searches before %s: the bench file's order is %s", before, name, joinNames(order))
		}
	}
	searched := []drivers.AxisName{name}
	if all, can := stage.(interface{ HomesTogether() bool }); can && all.HomesTogether() {
		searched = order
	}
	if err := route.HomeOrder(h.e.Bench.Axes, h.e.Bench.KeepOuts, h.bounded(ctx), searched); err != nil {
		return refuseHand("%v; release the lines, and use the controller's own means with somebody there", err)
	}
	if err := h.dim(ctx); err != nil {
		return err
	}
	for _, a := range searched {
		delete(h.sent, a)
		delete(h.homedAt, a)
	}
	err = stage.Home(ctx, searched)
	if err == nil {
		if homed, err = stage.Homed(ctx); err == nil && !homed[name] {
			err = &drivers.Error{Op: "home", Device: stage.Name(), Remedy: drivers.HomeAgain, Err: fmt.Errorf("%s still has no zero after the search", name)}
		}
	}
	if err == nil {
		for _, a := range searched {
			if at := h.e.axis(a).HomesAt; at != nil {
				h.homedAt[a] = *at
			}
		}
	}
	h.afterMotion(ctx)
	return err
}

// bounded is where the axes stand that are known to, those included that a search left at a known
// place though their controller cannot speak for all of its axes yet.
func (h *Hand) bounded(ctx context.Context) map[drivers.AxisName]unit.Angle {
	at, _ := h.places(ctx)
	for a, angle := range h.homedAt {
		if _, known := at[a]; !known {
			at[a] = angle
		}
	}
	return at
}

// dim closes the detectors, then the pump.
func (h *Hand) dim(ctx context.Context) error {
	if err := h.protect(ctx); err != nil {
		return err
	}
	if pump := h.e.Bench.Pump; pump != nil {
		delete(h.wanted, pump.Name())
		return h.e.shut(ctx, pump)
	}
	return nil
}

func joinNames(names []drivers.AxisName) string {
	var words []string
	for _, n := range names {
		words = append(words, string(n))
	}
	return strings.Join(words, ", ")
}

// Rest brings the bench to the rest state, and forgets what a person had opened.
func (h *Hand) Rest(ctx context.Context) (bad string) {
	if h.letGo {
		return "the lines are let go"
	}
	clear(h.wanted)
	bad = h.e.rest(ctx)
	h.afterMotion(ctx)
	return bad
}

// Release lets go of all lines, at rest, so that another program may use the instruments.
func (h *Hand) Release(ctx context.Context) error {
	switch {
	case h.letGo:
		return nil
	case h.facts.Lines == nil:
		return refuseHand("the lines of this bench cannot be let go")
	}
	if bad := h.Rest(ctx); bad != "" {
		return refuseHand("the lines are kept, for the rest state was not reached: %s", bad)
	}
	h.left, _ = h.places(ctx)
	h.leftSet = map[drivers.DeviceName]float64{}
	for _, s := range h.e.Bench.Settings {
		if value, err := s.Get(ctx); err == nil {
			h.leftSet[s.Name()] = value
		}
	}
	if err := h.facts.Lines.Release(ctx); err != nil {
		h.facts.Lines.Take()
		return err
	}
	h.letGo = true
	return nil
}

// Take opens the lines again, brings the bench to rest, checks who answers and which axes know their
// zero, and says what stands elsewhere than it was left. If a line does not come back all are let go
// again.
func (h *Hand) Take(ctx context.Context) ([]protocol.HandMoved, error) {
	if !h.letGo {
		return nil, refuseHand("the lines were not let go")
	}
	h.facts.Lines.Take()
	if err := h.connect(ctx); err != nil {
		fresh, cancel := h.e.fresh(ctx, 2*time.Second)
		defer cancel()
		_ = h.facts.Lines.Release(fresh)
		return nil, fmt.Errorf("the lines stay let go: %w", err)
	}
	h.letGo = false
	moved := []protocol.HandMoved{}
	for _, a := range h.e.Bench.Axes {
		before, was := h.left[a.Name]
		if now := h.axes[a.Name].Angle; was && now != nil && (*now-before).Abs() > a.Tolerance {
			moved = append(moved, protocol.HandMoved{Name: string(a.Name), Before: before.Degrees(), After: now.Degrees(), Unit: "deg"})
		}
	}
	for _, s := range h.e.Bench.Settings {
		before, was := h.leftSet[s.Name()]
		if now := h.settings[s.Name()].Value; was && now != nil && *now != before {
			moved = append(moved, protocol.HandMoved{Name: string(s.Name()), Before: before, After: *now, Unit: s.Unit()})
		}
	}
	return moved, nil
}

// LetGo says whether the lines are another program's.
func (h *Hand) LetGo() bool { return h.letGo }

// Lost lists the axes whose angle is not known, as last asked.
func (h *Hand) Lost() []string {
	lost := []string{}
	for _, a := range h.e.Bench.Axes {
		if h.axes[a.Name].Angle == nil {
			lost = append(lost, string(a.Name))
		}
	}
	return lost
}

// End leaves the bench at rest, with its lines ours again. It works under a context of its own.
func (h *Hand) End(ctx context.Context) (bad string) {
	if h.letGo {
		h.facts.Lines.Take()
		h.letGo = false
	}
	clear(h.wanted)
	return h.e.rest(ctx)
}
