package route

import (
	"fmt"
	"slices"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// HomeOrder says whether axes may search their references one after another in that order, with
// the pump closed: nil only if no search can enter a keep-out, though it may take its axis anywhere
// within the soft limits; one whose search goes straight to its reference (HomeRunUp) may also go
// away from what is near it. Axes that at does not name, such as those that lost their zero, may stand
// anywhere within theirs until they are searched; afterwards an axis stands at HomesAt, or, where
// that is not known, anywhere again. An axis that stands or searches beyond its soft limits is
// beyond what can be judged here: a hard stop must be safe by itself.
func HomeOrder(axes []scan.Axis, keepOuts []scan.KeepOut, at map[drivers.AxisName]unit.Angle, order []drivers.AxisName) error {
	b, err := newBench(axes, keepOuts)
	if err != nil {
		return err
	}
	low, known := b.place(at)
	high, _ := b.place(at)
	for i, a := range axes {
		if !known[i] {
			low[i], high[i] = a.Low, a.High
		}
	}
	for n, name := range order {
		if _, ok := b.number[name]; !ok {
			return b.errNoAxis(name)
		}
		if slices.Contains(order[:n], name) {
			return fmt.Errorf("%s: twice in one order; want each axis once", name)
		}
	}
	for _, name := range order {
		i := b.number[name]
		a := axes[i]
		before := [2]unit.Angle{low[i], high[i]}
		if runUp := a.HomeRunUp; a.HomesAt != nil && runUp != nil {
			low[i], high[i] = min(low[i], *a.HomesAt-*runUp), max(high[i], *a.HomesAt+*runUp)
		} else {
			low[i], high[i] = min(low[i], a.Low), max(high[i], a.High)
		}
		for _, f := range b.fences {
			if f.lifts || f.axis[0] != i && !(f.pair && f.axis[1] == i) {
				continue
			}
			f.line = false // between what bounds the place of each axis, everything is possible
			if f.crossed(low, high) && !b.leaves(f, i, before, low, high) {
				return fmt.Errorf("%s: the search for its reference could enter a keep-out: %w", name, b.conflict(f, low, high))
			}
		}
		if a.HomesAt != nil {
			low[i], high[i] = *a.HomesAt, *a.HomesAt
		}
	}
	return nil
}

// leaves says whether an axis whose search turns it straight to its reference only goes away from a
// band's edges, wherever the axes stand between low and high: on the side of it where the bench
// parks. That is the side it is on: within the limits no way leads to the other but through the
// keep-out. before is what bounded the axis's place when its search began.
func (b *bench) leaves(f fence, axis int, before [2]unit.Angle, low, high []unit.Angle) bool {
	a := b.axes[axis]
	if !f.band || a.HomesAt == nil || a.HomeRunUp == nil {
		return false
	}
	// Near its reference it may turn to and fro: there everything must be free.
	nearLow, nearHigh := slices.Clone(low), slices.Clone(high)
	nearLow[axis], nearHigh[axis] = *a.HomesAt-*a.HomeRunUp, *a.HomesAt+*a.HomeRunUp
	if f.crossed(nearLow, nearHigh) {
		return false
	}
	var way unit.Angle
	switch {
	case before[1] <= nearHigh[axis]:
		way = 1
	case before[0] >= nearLow[axis]:
		way = -1
	default:
		return false // from below and from above
	}
	parked := make([]unit.Angle, len(b.axes))
	for n := range f.count() {
		i := f.axis[n]
		if b.axes[i].Park == nil {
			return false
		}
		parked[i] = *b.axes[i].Park
		if i == axis {
			way *= f.side[n]
		}
	}
	if f.holds(parked) {
		return false
	}
	stands, _ := f.sum(parked, parked, false)
	floor := stands / unit.Turn * unit.Turn // the whole turns on both sides of where it parks
	if floor > stands {
		floor -= unit.Turn
	}
	least, most := f.sum(low, high, false)
	return way > 0 && most <= floor+unit.Turn-f.reach || way < 0 && least >= floor+f.reach
}
