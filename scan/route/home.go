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
// within the soft limits. Axes that at does not name, such as those that lost their zero, may stand
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
		low[i], high[i] = min(low[i], a.Low), max(high[i], a.High)
		for _, f := range b.fences {
			if f.lifts || f.axis[0] != i && !(f.pair && f.axis[1] == i) {
				continue
			}
			f.line = false // between what bounds the place of each axis, everything is possible
			if f.crossed(low, high) {
				return fmt.Errorf("%s: the search for its reference could enter a keep-out: %w", name, b.conflict(f, low, high))
			}
		}
		if a.HomesAt != nil {
			low[i], high[i] = *a.HomesAt, *a.HomesAt
		}
	}
	return nil
}
