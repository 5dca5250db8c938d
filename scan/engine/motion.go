package engine

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// notThere is an axis that does not stand where it should. It is a reason to try again.
type notThere struct {
	axis   drivers.AxisName
	angle  unit.Angle
	want   unit.Angle
	tol    unit.Angle
	during string
}

func (n *notThere) Error() string {
	return fmt.Sprintf("%s: stands at %s deg %s; want %s ± %s deg", n.axis, n.angle.Fixed(4), n.during, n.want.Fixed(4), n.tol.Fixed(4))
}

// proveTries is how often axes are sent again to a target that they did not reach.
const proveTries = 3

// where asks every controller for its angles.
func (e *Engine) where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	all := map[drivers.AxisName]unit.Angle{}
	for _, s := range e.Bench.Stages {
		got, err := s.Where(ctx)
		if err != nil {
			return nil, err
		}
		maps.Copy(all, got)
	}
	return all, nil
}

// goTo brings every axis to where it has to be and proves it: those with a target there, the
// others to where they stood when the run began. Axes that were sent to their target before and
// are still there are not moved again. The returned angles are of all axes of the bench.
func (e *Engine) goTo(ctx context.Context, targets []scan.AxisTarget) (map[drivers.AxisName]unit.Angle, error) {
	at, err := e.where(ctx)
	if err != nil {
		return nil, err
	}
	for try := 1; ; try++ {
		due := e.due(at, targets)
		if len(due) == 0 {
			break
		}
		if try > proveTries {
			a := e.axis(due[0].Axis)
			return nil, &notThere{axis: a.Name, angle: at[a.Name], want: due[0].Angle, tol: a.Tolerance, during: fmt.Sprintf("after %d tries", proveTries)}
		}
		if err := e.move(ctx, at, due); err != nil {
			return nil, err
		}
		if at, err = e.where(ctx); err != nil {
			return nil, err
		}
		for _, t := range due {
			if a := e.axis(t.Axis); (at[t.Axis] - t.Angle).Abs() <= a.Tolerance {
				e.commanded[t.Axis], e.sent[t.Axis] = t.Angle, true
			}
		}
	}
	e.step(StepProved)
	return at, e.inPlace(at, "before the dwell")
}

// inPlace says whether every axis stands where it was sent or found.
func (e *Engine) inPlace(at map[drivers.AxisName]unit.Angle, during string) error {
	for _, a := range e.Bench.Axes {
		want, known := e.commanded[a.Name]
		if !known {
			continue
		}
		if (at[a.Name] - want).Abs() > a.Tolerance {
			delete(e.sent, a.Name) // so that the next attempt sends it again
			return &notThere{axis: a.Name, angle: at[a.Name], want: want, tol: a.Tolerance, during: during}
		}
	}
	return nil
}

// due lists the axes that must be moved, and where to. An axis that is to stay where it stood is
// moved only when it is elsewhere.
func (e *Engine) due(at map[drivers.AxisName]unit.Angle, targets []scan.AxisTarget) []scan.AxisTarget {
	var due []scan.AxisTarget
	targeted := map[drivers.AxisName]bool{}
	for _, t := range targets {
		targeted[t.Axis] = true
		if e.sent[t.Axis] && e.commanded[t.Axis] == t.Angle && (at[t.Axis]-t.Angle).Abs() <= e.axis(t.Axis).Tolerance {
			continue
		}
		due = append(due, t)
	}
	for _, a := range e.Bench.Axes {
		stand, known := e.progress.stand[a.Name]
		if !known || targeted[a.Name] {
			continue
		}
		if (at[a.Name] - stand).Abs() > a.Tolerance {
			due = append(due, scan.AxisTarget{Axis: a.Name, Angle: stand})
			continue
		}
		e.commanded[a.Name] = stand
	}
	return due
}

// legs finds the way, and says whether the pump must be closed for it.
func (e *Engine) legs(at map[drivers.AxisName]unit.Angle, targets []scan.AxisTarget) (legs [][]scan.AxisTarget, closePump bool, err error) {
	legs, err = route.Legs(e.Bench.Axes, e.Bench.KeepOuts, at, targets, route.State{})
	if _, conflict := errors.AsType[*route.Conflict](err); conflict && e.Bench.Pump != nil {
		if dark, derr := route.Legs(e.Bench.Axes, e.Bench.KeepOuts, at, targets, route.State{PumpClosed: true}); derr == nil {
			return dark, true, nil
		}
	}
	return legs, false, err
}

// mayOpen says whether the pump may be opened with the axes where they are.
func (e *Engine) mayOpen(at map[drivers.AxisName]unit.Angle) error {
	if err := route.Stand(e.Bench.Axes, e.Bench.KeepOuts, at, route.State{}); err != nil {
		return &drivers.Error{Op: "open the pump", Device: "route", Remedy: drivers.GiveUp, Err: err}
	}
	return nil
}

// move makes the legs that lead to the targets, with the detectors protected, and settles. Where
// only a closed pump leaves a way, it is closed, and stays so until the next light.
func (e *Engine) move(ctx context.Context, at map[drivers.AxisName]unit.Angle, targets []scan.AxisTarget) error {
	legs, closePump, err := e.legs(at, targets)
	if err != nil {
		return &drivers.Error{Op: "move", Device: "route", Remedy: drivers.GiveUp, Err: err}
	}
	if err := e.protect(ctx); err != nil {
		return err
	}
	if closePump {
		if err := e.shut(ctx, e.Bench.Pump); err != nil {
			return err
		}
	}
	e.step(StepMoving)
	var settle time.Duration
	for _, t := range targets {
		delete(e.commanded, t.Axis)
		delete(e.sent, t.Axis)
		settle = max(settle, e.axis(t.Axis).Settle)
	}
	for _, leg := range legs {
		for _, s := range e.Bench.Stages {
			part := map[drivers.AxisName]unit.Angle{}
			for _, t := range leg {
				if e.axis(t.Axis).Controller == s.Name() {
					part[t.Axis] = t.Angle
				}
			}
			if len(part) == 0 {
				continue
			}
			if err := s.Move(ctx, part); err != nil {
				return err
			}
		}
	}
	e.step(StepMoved)
	return e.Bench.Pace.Wait(ctx, settle)
}

func (e *Engine) axis(name drivers.AxisName) scan.Axis {
	for _, a := range e.Bench.Axes {
		if a.Name == name {
			return a
		}
	}
	panic("engine: the plan names axis " + string(name) + ", which the bench does not have; it should have been refused")
}

func (e *Engine) settingUnit(name drivers.DeviceName) string {
	for _, s := range e.Bench.Settings {
		if s.Name() == name {
			return s.Unit()
		}
	}
	return ""
}
