package engine

import (
	"context"
	"errors"
	"fmt"
	"math"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// brokenGuard is a condition for counting that is not met.
type brokenGuard struct {
	guard scan.Guard
	value float64
	unit  string
	err   error  // the sensor did not answer
	text  string // what is wrong, where it is no value outside bounds
}

func (b *brokenGuard) Error() string {
	if b.text != "" {
		return fmt.Sprintf("guard %s: %s", b.guard.Name, b.text)
	}
	if b.err != nil {
		return fmt.Sprintf("guard %s: the sensor does not answer: %v", b.guard.Name, b.err)
	}
	return fmt.Sprintf("guard %s: %.6g %s; want %.6g to %.6g %s", b.guard.Name, b.value, b.unit, b.guard.Low, b.guard.High, b.unit)
}

// checkGuards reads every guarded sensor now. A sensor that does not answer cannot say that all is
// well.
func (e *Engine) checkGuards(ctx context.Context) error {
	for _, g := range e.Plan.Guards {
		if g.Sensor == "" {
			continue
		}
		s := e.sensor(g.Sensor)
		value, err := s.Read(ctx)
		if err != nil && ctx.Err() == nil && drivers.RemedyOf(err) == drivers.Reconnect {
			if err = s.Connect(ctx); err == nil {
				value, err = s.Read(ctx)
			}
		}
		if ctx.Err() != nil {
			return context.Cause(ctx)
		}
		if err != nil {
			return &brokenGuard{guard: g, unit: s.Unit(), err: err}
		}
		if value < g.Low || value > g.High {
			return &brokenGuard{guard: g, value: value, unit: s.Unit()}
		}
	}
	return nil
}

// judgeGuards holds what the watch has seen since it began against the guards: a value that left
// its bounds for a moment was seen by the dwell, too.
func (e *Engine) judgeGuards(w *watch) error {
	for _, g := range e.Plan.Guards {
		if g.Sensor == "" {
			continue
		}
		seen := false
		for _, q := range w.sum {
			if q.Sensor != string(g.Sensor) || q.Samples == 0 {
				continue
			}
			seen = true
			for _, value := range []float64{q.Minimum, q.Maximum} {
				if value < g.Low || value > g.High {
					return &brokenGuard{guard: g, value: value, unit: q.Unit}
				}
			}
		}
		if !seen {
			return &brokenGuard{guard: g, err: errors.Join(errors.New("no answer during the dwell"), w.fail)}
		}
	}
	return nil
}

// judgeRates holds one gate of a light dwell against the guards of rates. A background's rates are
// others by design.
func (e *Engine) judgeRates(kind taskKind, gate protocol.Slice) error {
	if kind != lightTask {
		return nil
	}
	return e.outOfBounds(func(g scan.Guard) drivers.Channel { return g.Rate }, gate.Counts, gate.Gate.Duration())
}

// judgeDark holds a dark against the guards of dark rates.
func (e *Engine) judgeDark(r *protocol.Reading) error {
	if r.Kind != protocol.Dark {
		return nil
	}
	return e.outOfBounds(func(g scan.Guard) drivers.Channel { return g.DarkRate }, r.Counts, r.Gate.Duration())
}

// outOfBounds finds a guard whose channel's rate is outside its bounds by more than four times what
// the count itself scatters: a short gate must not break a guard that a long one meets.
func (e *Engine) outOfBounds(of func(scan.Guard) drivers.Channel, counts []protocol.Count, gate time.Duration) error {
	for _, g := range e.Plan.Guards {
		if of(g) == "" || gate <= 0 {
			continue
		}
		rate := rateOf(counts, of(g), gate)
		low, high := g.Low*gate.Seconds(), g.High*gate.Seconds()
		n := rate * gate.Seconds()
		if n < low-4*math.Sqrt(low) || n > high+4*math.Sqrt(high)+4 {
			return &brokenGuard{guard: g, value: rate, unit: "/s"}
		}
	}
	return nil
}

// oldReference finds a guard that wants a younger reference, now that light would be counted next.
// again says that one can be had: the last set was not the last thing done.
func (e *Engine) oldReference() (b *brokenGuard, again bool) {
	p := &e.progress
	for _, g := range e.Plan.Guards {
		if g.ReferenceAge == 0 {
			continue
		}
		if age := e.now().Sub(p.ref.goodAt); age > g.ReferenceAge {
			text := fmt.Sprintf("the last good reference is %s old; want at most %s", unit.Span(age.Round(time.Second)), unit.Span(g.ReferenceAge))
			if p.ref.goodAt.IsZero() {
				text = "there is no good reference"
			}
			return &brokenGuard{guard: g, text: text}, p.sinceOf(referenceTask) > 0
		}
	}
	return nil, false
}

// afterGuard does what the recipe says of a guard that broke at a task.
func (e *Engine) afterGuard(ctx context.Context, t task, b *brokenGuard) error {
	detail := map[string]any{"guard": b.guard.Name, "low": b.guard.Low, "high": b.guard.High, "unit": b.unit}
	switch g := b.guard; {
	case g.Sensor != "":
		detail["sensor"] = string(g.Sensor)
	case g.Rate != "":
		detail["channel"] = string(g.Rate)
	case g.DarkRate != "":
		detail["channel"] = string(g.DarkRate)
	}
	if b.err == nil && b.text == "" {
		detail["value"] = b.value
	}
	switch b.guard.Otherwise {
	case scan.Skip:
		if err := e.note(ctx, protocol.GuardBroken, b.Error(), detail); err != nil || b.guard.DarkRate != "" {
			return err // the dark itself is sound
		}
		skipped := keyDetail(t)
		skipped["reason"] = b.Error()
		return e.note(ctx, protocol.SetAside, "given up: "+b.Error(), skipped)
	case scan.Stop:
		if err := e.note(ctx, protocol.GuardBroken, b.Error(), detail); err != nil {
			return err
		}
		return e.end(ctx, protocol.Failed, "failed: "+b.Error(), detail)
	}
	if b.guard.ReferenceAge > 0 {
		return e.holdFor(ctx, protocol.ByTrouble, "held: "+b.Error(), detail)
	}
	bad := e.rest(ctx)
	e.waitsSince = e.now().Add(-e.waitedFor(b.guard.Name))
	return e.event(ctx, protocol.GuardBroken, "held: "+b.Error()+withBad(bad), protocol.Holding, add(e.progress.Causes, protocol.ByGuard), detail)
}

// waitedFor is how long a guard has held already since a visit was last done: one that is met at each
// look, and broken again at each dwell, must come to its end all the same.
func (e *Engine) waitedFor(guard string) time.Duration {
	if done := len(e.progress.done); done != e.doneThen {
		e.doneThen = done
		clear(e.waited)
	}
	return e.waited[guard]
}

// guardEvery is the time between two looks at a guard that holds the run.
const guardEvery = 10 * time.Second

// lookAtGuards ends the hold when every guard is met again.
func (e *Engine) lookAtGuards(ctx context.Context) error {
	if g, ok := e.guardNamed(e.progress.guard); ok && g.Sensor == "" {
		if e.mayBeOpen() {
			return nil
		}
		if met, err := e.lookAtRate(ctx, g); !met || err != nil {
			return err
		}
	}
	op, end := e.operation(ctx)
	err := e.checkGuards(op)
	interrupted := op.Err() != nil
	end()
	if interrupted || err != nil {
		return nil
	}
	left := without(e.progress.Causes, protocol.ByGuard)
	name := e.progress.guard
	_ = e.waitedFor(name)
	e.waited[name] = e.now().Sub(e.waitsSince)
	state := protocol.Running
	if len(left) > 0 {
		state = protocol.Holding
	}
	if err := e.event(ctx, protocol.GuardMended, "every guard is met again", state, left, map[string]any{"cause": protocol.ByGuard}); err != nil {
		return err
	}
	if state == protocol.Running {
		return e.getReady(ctx, nil)
	}
	return nil
}

// lookAtRate counts as the guard's readings are counted, and for as long as what broke it, and says
// whether its rate is within bounds again. What it saw is written as a check.
func (e *Engine) lookAtRate(ctx context.Context, g scan.Guard) (met bool, err error) {
	dwell := e.Plan.Dwell.Slices()
	if g.DarkRate != "" && e.Plan.Dark != nil {
		dwell = e.Plan.Dark.Dwell.Slices()
	} else if len(dwell) > 1 {
		dwell = dwell[:1] // light is judged slice by slice, a dark when it is whole
	}
	against, interrupted, err := e.check(ctx, g.Rate != "", dwell, func(r *protocol.Reading) error {
		channel := func(q scan.Guard) drivers.Channel {
			if q.Name != g.Name {
				return ""
			}
			return q.Rate + q.DarkRate
		}
		return e.outOfBounds(channel, r.Counts, r.Gate.Duration())
	})
	if err != nil || interrupted || against == nil {
		return against == nil && !interrupted, err
	}
	if _, bright := errors.AsType[*brightness](against); bright {
		return false, e.holdFor(ctx, protocol.ByLight, "held: "+against.Error(), nil)
	}
	if drivers.RemedyOf(against) == drivers.HomeAgain {
		if err := e.trouble(ctx, against); err != nil {
			return false, err
		}
		return false, e.getReadyHeld(ctx)
	}
	_, broken := errors.AsType[*brokenGuard](against)
	_, elsewhere := errors.AsType[*notThere](against)
	if !broken && !elsewhere && drivers.RemedyOf(against) > drivers.Retry {
		if err := e.trouble(ctx, against); err != nil {
			return false, err
		}
		return false, e.connectQuietly(ctx)
	}
	return false, nil
}

func (e *Engine) guardNamed(name string) (scan.Guard, bool) {
	for _, g := range e.Plan.Guards {
		if g.Name == name {
			return g, true
		}
	}
	return scan.Guard{}, false
}

// patienceNow is how long the present hold may last.
func (e *Engine) patienceNow() time.Duration {
	if e.progress.holds(protocol.ByGuard) && !e.mayBeOpen() { // a person who is waited for gets the recipe's time
		if g, ok := e.guardNamed(e.progress.guard); ok && g.GiveUpAfter > 0 {
			return g.GiveUpAfter
		}
	}
	return e.patience
}

func (e *Engine) sensor(name drivers.DeviceName) drivers.Sensor {
	for _, s := range e.Bench.Sensors {
		if s.Name() == name {
			return s
		}
	}
	panic("engine: the plan guards sensor " + string(name) + ", which the bench does not have; it should have been refused")
}
