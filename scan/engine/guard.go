package engine

import (
	"context"
	"errors"
	"fmt"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
)

// brokenGuard is a condition for counting that is not met.
type brokenGuard struct {
	guard scan.Guard
	value float64
	unit  string
	err   error // the sensor did not answer
}

func (b *brokenGuard) Error() string {
	if b.err != nil {
		return fmt.Sprintf("guard %s: the sensor does not answer: %v", b.guard.Name, b.err)
	}
	return fmt.Sprintf("guard %s: %.6g %s; want %.6g to %.6g %s", b.guard.Name, b.value, b.unit, b.guard.Low, b.guard.High, b.unit)
}

// checkGuards reads every guarded sensor now. A sensor that does not answer cannot say that all is
// well.
func (e *Engine) checkGuards(ctx context.Context) error {
	for _, g := range e.Plan.Guards {
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

// afterGuard does what the recipe says of a guard that broke at a task.
func (e *Engine) afterGuard(ctx context.Context, t task, b *brokenGuard) error {
	detail := map[string]any{"guard": b.guard.Name, "sensor": string(b.guard.Sensor), "low": b.guard.Low, "high": b.guard.High, "unit": b.unit}
	if b.err == nil {
		detail["value"] = b.value
	}
	switch b.guard.Otherwise {
	case scan.Skip:
		if err := e.note(ctx, protocol.GuardBroken, b.Error(), detail); err != nil {
			return err
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
	bad := e.rest(ctx)
	e.waitsSince = e.now()
	return e.event(ctx, protocol.GuardBroken, "held: "+b.Error()+withBad(bad), protocol.Holding, add(e.progress.Causes, protocol.ByGuard), detail)
}

// guardEvery is the time between two looks at a guard that holds the run.
const guardEvery = 10 * time.Second

// lookAtGuards ends the hold when every guard is met again.
func (e *Engine) lookAtGuards(ctx context.Context) error {
	op, end := e.operation(ctx)
	err := e.checkGuards(op)
	interrupted := op.Err() != nil
	end()
	if interrupted || err != nil {
		return nil
	}
	left := without(e.progress.Causes, protocol.ByGuard)
	state := protocol.Running
	if len(left) > 0 {
		state = protocol.Holding
	}
	if err := e.event(ctx, protocol.GuardMended, "every guard is met again", state, left, map[string]any{"cause": protocol.ByGuard}); err != nil {
		return err
	}
	if state == protocol.Running {
		return e.getReady(ctx, true)
	}
	return nil
}

// patienceNow is how long the present hold may last.
func (e *Engine) patienceNow() time.Duration {
	if e.progress.holds(protocol.ByGuard) {
		for _, g := range e.Plan.Guards {
			if g.Name == e.progress.guard && g.GiveUpAfter > 0 {
				return g.GiveUpAfter
			}
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
