// Package route says which ways axes may go: targets against soft limits, and the legs of a move
// that ends with the approach each axis declares. It plans from the angles that the stages report
// and moves nothing.
package route

import (
	"fmt"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

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

// Legs lists the moves that bring axes from where they stand to their targets, each leg a set of
// targets that may be approached together. An axis that has to take up its backlash first goes
// beyond, in the first leg. An axis that stands outside its limits may only be moved by hand.
func Legs(axes []scan.Axis, at map[drivers.AxisName]unit.Angle, targets []scan.AxisTarget) ([][]scan.AxisTarget, error) {
	var first, last []scan.AxisTarget
	for _, t := range targets {
		a, ok := find(axes, t.Axis)
		if !ok {
			return nil, fmt.Errorf("%s: no such axis on this bench", t.Axis)
		}
		from, ok := at[t.Axis]
		if !ok {
			return nil, fmt.Errorf("%s: its controller did not say where it stands", t.Axis)
		}
		if from < a.Low-a.Tolerance || from > a.High+a.Tolerance {
			return nil, fmt.Errorf("%s: stands at %s, beyond its soft limits %s to %s; move it back by hand", a.Name, from, a.Low, a.High)
		}
		if err := Check(a, t.Angle); err != nil {
			return nil, err
		}
		start := approach(a, t.Angle)
		wrongSide := a.Rising && from > start || !a.Rising && from < start
		if a.Backlash > 0 && wrongSide {
			first = append(first, scan.AxisTarget{Axis: t.Axis, Angle: start})
		}
		last = append(last, t)
	}
	if len(first) == 0 {
		return [][]scan.AxisTarget{last}, nil
	}
	return [][]scan.AxisTarget{first, last}, nil
}

// approach is where the last leg to a target begins at the latest.
func approach(a scan.Axis, target unit.Angle) unit.Angle {
	if a.Rising {
		return target - a.Backlash
	}
	return target + a.Backlash
}

func side(a scan.Axis) string {
	if a.Rising {
		return "lower"
	}
	return "upper"
}

func find(axes []scan.Axis, name drivers.AxisName) (scan.Axis, bool) {
	for _, a := range axes {
		if a.Name == name {
			return a, true
		}
	}
	return scan.Axis{}, false
}
