// Package route says which ways axes may go: targets against soft limits and keep-outs, and the
// legs of a move, each safe however fast its axes are, the last of which ends with the approach
// that each axis declares. It plans from the angles that the stages report and moves nothing.
//
// It promises that no leg it returns enters a keep-out, margin and tolerances included, and that
// where moving the named axes one after another is safe in some order, a way is found. It never
// moves an axis it was not asked to move, and never guesses: an axis whose place is not known, and
// that a keep-out ties to one that moves, is an error. It is no safety function: a slipped axis or
// a false zero is not seen here.
package route

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// State is what the ways that are free depend on, beside angles.
type State struct {
	// PumpClosed says that the pump is blocked and stays so until the last leg has ended. Whoever
	// opens it again asks Stand first.
	PumpClosed bool
	// Attended says that a person watches: axes that stand in a keep-out or beyond their limits may
	// be moved out of it, never deeper into it. Nobody else may move them.
	Attended bool
}

// Check says whether an axis may be sent to an angle: within its soft limits, with room for the
// approach from its declared side.
func Check(a scan.Axis, target unit.Angle) error {
	if !a.Limits(target) {
		return fmt.Errorf("%s: %s is beyond the soft limits; want %s to %s", a.Name, target, a.Low, a.High)
	}
	if from := approach(a, target); !a.Limits(from) {
		return fmt.Errorf("%s: %s leaves no room to approach from the %s side by %s within the soft limits %s to %s",
			a.Name, target, side(a), a.Backlash, a.Low, a.High)
	}
	return nil
}

// CheckKeepOuts says what is wrong with keep-outs as such, all at once.
func CheckKeepOuts(axes []scan.Axis, keepOuts []scan.KeepOut) error {
	_, err := newBench(axes, keepOuts)
	return err
}

// Stand says whether the bench may stand as it does: no axis in a keep-out by more than its
// tolerance.
func Stand(axes []scan.Axis, keepOuts []scan.KeepOut, at map[drivers.AxisName]unit.Angle, state State) error {
	b, err := newBench(axes, keepOuts)
	if err != nil {
		return err
	}
	place, known := b.place(at)
	for _, f := range b.fences {
		if f.lifted(state) {
			continue
		}
		if i := f.unknown(known); i >= 0 {
			return b.errUnknown(i, f)
		}
		if !f.yield(place, false) {
			return b.conflict(f, place, place)
		}
	}
	return nil
}

// Legs lists the moves that bring axes from where they stand to their targets, each leg a set of
// targets that may be approached together. An axis that has to take up its backlash goes beyond
// first. Where a keep-out makes moving together unsafe the axes go in turn, in a safe order if there
// is one, or by a detour of the same axes if one is found; else the move is refused with a
// *Conflict. The targets' axes alone move; at holds all axes that keep-outs tie to them. An axis may begin
// inside an edge by up to its tolerance, because that is where it was let stop, and then goes away
// from it.
func Legs(axes []scan.Axis, keepOuts []scan.KeepOut, at map[drivers.AxisName]unit.Angle, targets []scan.AxisTarget, state State) ([][]scan.AxisTarget, error) {
	b, err := newBench(axes, keepOuts)
	if err != nil {
		return nil, err
	}
	place, known := b.place(at)
	movers, err := b.movers(place, known, targets)
	if err != nil {
		return nil, err
	}
	for _, m := range movers {
		a, from := b.axes[m.axis], place[m.axis]
		if !state.Attended && (from < a.Low-a.Tolerance || from > a.High+a.Tolerance) {
			return nil, fmt.Errorf("%s: stands at %s, beyond its soft limits %s to %s; move it back by hand", a.Name, from, a.Low, a.High)
		}
		if err := Check(a, m.places[goal]); err != nil {
			return nil, err
		}
	}
	end := slices.Clone(place)
	moves := make([]bool, len(axes))
	for _, m := range movers {
		end[m.axis], moves[m.axis] = m.places[goal], true
	}
	var fences []fence
	for i := range b.fences {
		b.fences[i].measure(moves)
		f := b.fences[i]
		if f.lifted(state) || !f.about(moves) {
			continue
		}
		if i := f.unknown(known); i >= 0 {
			return nil, b.errUnknown(i, f)
		}
		if f.holds(end) {
			return nil, b.conflict(f, end, end)
		}
		if !f.yield(place, state.Attended) {
			return nil, fmt.Errorf("%w; move it out by hand", b.conflict(f, place, place))
		}
		fences = append(fences, f)
	}
	return b.way(fences, movers, place)
}

// bench is what a search works on: axes by number, and the keep-outs' edges, margins included.
type bench struct {
	axes   []scan.Axis
	number map[drivers.AxisName]int
	fences []fence
}

func newBench(axes []scan.Axis, keepOuts []scan.KeepOut) (*bench, error) {
	b := &bench{axes: axes, number: make(map[drivers.AxisName]int, len(axes))}
	for i, a := range axes {
		b.number[a.Name] = i
	}
	var bad []error
	for _, k := range keepOuts {
		fences, err := b.fence(k)
		if err != nil {
			bad = append(bad, err)
		}
		for _, f := range fences {
			f.number = len(b.fences)
			b.fences = append(b.fences, f)
		}
	}
	return b, errors.Join(bad...)
}

func (b *bench) place(at map[drivers.AxisName]unit.Angle) (place []unit.Angle, known []bool) {
	place, known = make([]unit.Angle, len(b.axes)), make([]bool, len(b.axes))
	for i, a := range b.axes {
		place[i], known[i] = at[a.Name]
	}
	return place, known
}

func (b *bench) errUnknown(axis int, f fence) error {
	return fmt.Errorf("%s: its controller did not say where it stands; want its angle, for keep-out %q is about it", b.axes[axis].Name, f.name)
}

// movers are the axes of the targets with the places they must come by.
func (b *bench) movers(place []unit.Angle, known []bool, targets []scan.AxisTarget) ([]mover, error) {
	movers := make([]mover, 0, len(targets))
	for _, t := range targets {
		i, ok := b.number[t.Axis]
		if !ok {
			return nil, b.errNoAxis(t.Axis)
		}
		if !known[i] {
			return nil, fmt.Errorf("%s: its controller did not say where it stands; want its angle", t.Axis)
		}
		if slices.ContainsFunc(movers, func(m mover) bool { return m.axis == i }) {
			return nil, fmt.Errorf("%s: two targets in one move; want one", t.Axis)
		}
		movers = append(movers, newMover(b.axes[i], i, place[i], t.Angle))
	}
	return movers, nil
}

func (b *bench) errNoAxis(name drivers.AxisName) error {
	return fmt.Errorf("%s: no such axis on this bench; want one of %s", name, b.names())
}

func (b *bench) names() string {
	names := make([]string, len(b.axes))
	for i, a := range b.axes {
		names[i] = string(a.Name)
	}
	return strings.Join(names, ", ")
}

// approach is where the last leg to a target begins at the latest.
func approach(a scan.Axis, target unit.Angle) unit.Angle {
	if a.Rising {
		return target - a.Backlash
	}
	return target + a.Backlash
}

// nearerThanApproach says whether an axis at from is not yet on the side it approaches a target from.
func nearerThanApproach(a scan.Axis, from, target unit.Angle) bool {
	start := approach(a, target)
	return a.Backlash > 0 && (a.Rising && from > start || !a.Rising && from < start)
}

func side(a scan.Axis) string {
	if a.Rising {
		return "lower"
	}
	return "upper"
}
