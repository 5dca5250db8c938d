package route

import (
	"errors"
	"math"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Walk says how long moves take, one after another, as Legs and Time together say it, and without
// making anything where all axes may go at once: a forecast asks it a million times. Places are lists
// of angles in the order of the axes.
type Walk struct {
	*checker
	axes        []scan.Axis
	keepOuts    []scan.KeepOut
	controllers [][]int // the axes of each, in the order of their first axis
	back        []unit.Angle
}

// Trip is one move.
type Trip struct {
	Travel time.Duration // of all legs, settling not included
	Settle time.Duration // of the slowest axis that was sent
	Sent   int           // commands to controllers
	Dark   bool          // the pump has to be closed for it
	Back   bool          // an axis goes beyond first, to take up its backlash
}

// NewWalk prepares a walk. The error is about the keep-outs as such.
func NewWalk(axes []scan.Axis, keepOuts []scan.KeepOut) (*Walk, error) {
	b, err := newBench(axes, keepOuts)
	if err != nil {
		return nil, err
	}
	w := &Walk{checker: &checker{bench: b, to: make([]unit.Angle, len(axes))}, axes: axes, keepOuts: keepOuts, back: make([]unit.Angle, len(axes))}
	known := make([]bool, len(axes))
	for i := range known {
		known[i] = true
	}
	w.choose(known)
	group := map[drivers.DeviceName]int{}
	for i, a := range axes {
		g, ok := group[a.Controller]
		if !ok {
			g = len(w.controllers)
			group[a.Controller] = g
			w.controllers = append(w.controllers, nil)
		}
		w.controllers[g] = append(w.controllers[g], i)
	}
	return w, nil
}

// Only says that all moves are a plan's, from where the axes stand at first. Where that leaves every
// keep-out far away, moves take no longer than their way, whatever the places: Free then is true.
func (w *Walk) Only(plan scan.Plan, at map[drivers.AxisName]unit.Angle) {
	if w.roomy(plan, at) {
		w.fences = nil
	}
}

// Free says that no keep-out is looked at.
func (w *Walk) Free() bool { return len(w.fences) == 0 }

// Go is the move of the axes marked from here to there; the others stand at here. Where only a closed
// pump leaves a way, that is the way taken. The error says why there is none.
func (w *Walk) Go(here, there []unit.Angle, sent []bool) (Trip, error) {
	var t Trip
	first, last := w.back, w.to
	copy(first, here)
	copy(last, here)
	twice := false
	for i := range w.axes {
		if !sent[i] {
			continue
		}
		a := &w.axes[i]
		t.Settle = max(t.Settle, a.Settle)
		first[i], last[i] = there[i], there[i]
		if nearerThanApproach(*a, here[i], there[i]) {
			first[i], twice = approach(*a, there[i]), true
		}
	}
	for i := range w.fences {
		if w.fences[i].crossed(here, first) || twice && w.fences[i].crossed(first, last) {
			return w.legs(here, there, sent)
		}
	}
	t.Back = twice
	w.leg(&t, here, first, sent, false)
	if twice {
		w.leg(&t, first, last, sent, true)
	}
	return t, nil
}

// leg adds one leg. In the second only those go that took up their backlash.
func (w *Walk) leg(t *Trip, from, to []unit.Angle, sent []bool, second bool) {
	for _, axes := range w.controllers {
		var longest time.Duration
		speed, accel := math.Inf(1), math.Inf(1)
		inStep, moves, any := false, false, false
		for _, i := range axes {
			if !sent[i] || second && from[i] == to[i] {
				continue
			}
			a := &w.axes[i]
			any = true
			way := (to[i] - from[i]).Abs().Degrees()
			inStep = inStep || a.Together
			if !inStep {
				longest = max(longest, ride(way, a.SpeedDegS, a.AccelDegS2))
			}
			if way == 0 || a.SpeedDegS <= 0 {
				continue
			}
			moves = true
			speed = min(speed, a.SpeedDegS/way)
			if a.AccelDegS2 > 0 {
				accel = min(accel, a.AccelDegS2/way)
			}
		}
		if !any {
			continue
		}
		t.Sent++
		if inStep && moves {
			if math.IsInf(accel, 1) {
				accel = 0
			}
			longest = ride(1, speed, accel)
		}
		t.Travel += longest
	}
}

// legs is the long way, where axes go in turn or by a detour.
func (w *Walk) legs(here, there []unit.Angle, sent []bool) (Trip, error) {
	at := make(map[drivers.AxisName]unit.Angle, len(w.axes))
	var targets []scan.AxisTarget
	var t Trip
	for i, a := range w.axes {
		at[a.Name] = here[i]
		if sent[i] {
			targets = append(targets, scan.AxisTarget{Axis: a.Name, Angle: there[i]})
			t.Back = t.Back || nearerThanApproach(a, here[i], there[i])
			t.Settle = max(t.Settle, a.Settle)
		}
	}
	legs, err := Legs(w.axes, w.keepOuts, at, targets, State{})
	if _, conflict := errors.AsType[*Conflict](err); conflict {
		if dark, derr := Legs(w.axes, w.keepOuts, at, targets, State{PumpClosed: true}); derr == nil {
			legs, err, t.Dark = dark, nil, true
		}
	}
	if err != nil {
		return t, err
	}
	t.Travel = Time(w.axes, at, legs) - t.Settle
	for _, leg := range legs {
		asked := map[drivers.DeviceName]bool{}
		for _, target := range leg {
			asked[w.axes[w.number[target.Axis]].Controller] = true
		}
		t.Sent += len(asked)
	}
	return t, nil
}
