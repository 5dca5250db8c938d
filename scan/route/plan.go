package route

import (
	"errors"
	"fmt"
	"slices"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Finding is one thing that is wrong with a plan.
type Finding struct {
	Point int // its place in the plan; -1: the turn of the background, whatever the point
	// From is the point before, when it is the way from there that is not free; Point again, when it
	// is the background there, or the way to it or back; -1, when it is the point itself.
	From int
	// PumpClosed says that the way is free once the pump is closed: a matter of closing it, where
	// the bench can.
	PumpClosed bool
	Err        error
}

// MostFindings is how many findings CheckPlan returns at most.
const MostFindings = 1000

// CheckPlan looks at every visit of a plan before anything moves: targets within limits and with
// room to approach them, places outside keep-outs with the pump open, every axis able to approach
// its target a second time while the others stand at theirs, and a safe way from each visit to the
// next and, where the plan turns an axis for backgrounds, there and back. The stand of axes that no
// point names comes from at, which may be nil: a keep-out about an axis whose place is not known is
// left to the moment of moving, as is the way to the first visit. The same finding on a later pass
// is not repeated. The error is about the keep-outs as such.
func CheckPlan(axes []scan.Axis, keepOuts []scan.KeepOut, plan scan.Plan, at map[drivers.AxisName]unit.Angle) ([]Finding, error) {
	b, err := newBench(axes, keepOuts)
	if err != nil {
		return nil, err
	}
	if b.roomy(plan, at) {
		return nil, nil
	}
	c := &checker{bench: b, told: map[[2]int]bool{}, from: make([]unit.Angle, len(axes)), to: make([]unit.Angle, len(axes))}
	here, known := b.place(at)
	spoiled := -1
	if g := plan.Background; g != nil {
		i, ok := b.number[g.Axis]
		if !ok {
			c.find(Finding{Point: -1, From: -1, Err: fmt.Errorf("background: %w", b.errNoAxis(g.Axis))})
			return c.findings, nil
		}
		if err := errors.Join(Check(axes[i], g.From), Check(axes[i], g.From+g.By)); err != nil {
			c.find(Finding{Point: -1, From: -1, Err: fmt.Errorf("background: %w", err)})
		}
		spoiled, here[i], known[i] = i, g.From, true
	}
	var (
		last   = -1 // the point before, if the way from there can be judged
		there  = slices.Clone(here)
		turned = make([]unit.Angle, len(axes))
	)
	c.choose(known)
	for _, v := range plan.Visits() {
		if len(c.findings) == MostFindings {
			break
		}
		if v.Point == last {
			continue // in place
		}
		copy(there, here)
		more, err := c.aim(plan.Points[v.Point], there, known)
		if more {
			c.choose(known)
			last = -1
		}
		if err == nil {
			err = c.stand(there)
		}
		if err != nil {
			c.find(Finding{Point: v.Point, From: -1, Err: err})
			copy(here, there)
			last = -1
			continue
		}
		if last >= 0 {
			c.way(here, there, v.Point, last)
		}
		if spoiled >= 0 && c.ties(spoiled) {
			copy(turned, there)
			turned[spoiled] = plan.Background.From + plan.Background.By
			if err := c.stand(turned); err != nil {
				c.find(Finding{Point: v.Point, From: v.Point, Err: fmt.Errorf("background: %w", err)})
			} else {
				if last >= 0 {
					c.way(here, turned, v.Point, last)
				}
				c.way(there, turned, v.Point, v.Point)
				c.way(turned, there, v.Point, v.Point)
			}
		}
		copy(here, there)
		last = v.Point
	}
	return c.findings, nil
}

// checker looks at places and ways of one plan, without setting anything aside on the common path.
type checker struct {
	*bench
	fences   []fence // those about axes whose places are known
	closed   []fence // and those of them that hold with the pump closed
	from, to []unit.Angle
	findings []Finding
	told     map[[2]int]bool
}

func (c *checker) find(f Finding) {
	if key := [2]int{f.From, f.Point}; !c.told[key] && len(c.findings) < MostFindings {
		c.told[key] = true
		c.findings = append(c.findings, f)
	}
}

// choose takes the fences that can be judged.
func (c *checker) choose(known []bool) {
	c.fences, c.closed = nil, nil
	for _, f := range c.bench.fences {
		if f.unknown(known) >= 0 {
			continue
		}
		c.fences = append(c.fences, f)
		if !f.lifts {
			c.closed = append(c.closed, f)
		}
	}
}

func (c *checker) ties(axis int) bool {
	return slices.ContainsFunc(c.fences, func(f fence) bool { return f.axis[0] == axis || f.pair && f.axis[1] == axis })
}

// aim puts a point's targets into a place, and says whether more axes' places are known now.
func (c *checker) aim(p scan.Point, place []unit.Angle, known []bool) (more bool, err error) {
	var bad []error
	for _, t := range p.Axes {
		i, ok := c.number[t.Axis]
		if !ok {
			bad = append(bad, c.errNoAxis(t.Axis))
			continue
		}
		more = more || !known[i]
		place[i], known[i] = t.Angle, true
		if err := Check(c.axes[i], t.Angle); err != nil {
			bad = append(bad, err)
		}
	}
	return more, errors.Join(bad...)
}

// stand says what forbids a place, or that one axis approaches it again.
func (c *checker) stand(place []unit.Angle) error {
	for i := range c.fences {
		if c.fences[i].holds(place) {
			return c.conflict(c.fences[i], place, place)
		}
	}
	copy(c.from, place)
	for i := range c.fences {
		f := &c.fences[i]
		for n := range f.count() {
			axis := f.axis[n]
			a := &c.axes[axis]
			if a.Backlash == 0 {
				continue
			}
			c.from[axis] = approach(*a, place[axis])
			if f.crossed(c.from, place) {
				return fmt.Errorf("no room to approach from the %s side by %s: %w", side(*a), a.Backlash, c.conflict(*f, c.from, place))
			}
			c.from[axis] = place[axis]
		}
	}
	return nil
}

// way looks at the way between two places that may be stood at.
func (c *checker) way(here, there []unit.Angle, point, last int) {
	if c.atOnce(here, there) {
		return
	}
	_, err := c.bench.way(c.fences, c.moving(here, there), here)
	if err == nil {
		return
	}
	_, closed := c.bench.way(c.closed, c.moving(here, there), here)
	c.find(Finding{Point: point, From: last, PumpClosed: closed == nil, Err: err})
}

func (c *checker) moving(here, there []unit.Angle) []mover {
	var movers []mover
	for i, a := range c.axes {
		if here[i] != there[i] {
			movers = append(movers, newMover(a, i, here[i], there[i]))
		}
	}
	return movers
}

// atOnce says whether all axes may go at once, as search.together does for a move.
func (c *checker) atOnce(here, there []unit.Angle) bool {
	copy(c.to, there)
	back := false
	for i := range c.axes {
		if a := &c.axes[i]; here[i] != there[i] && nearerThanApproach(*a, here[i], there[i]) {
			c.to[i], back = approach(*a, there[i]), true
		}
	}
	for i := range c.fences {
		if c.fences[i].crossed(here, c.to) || back && c.fences[i].crossed(c.to, there) {
			return false
		}
	}
	return true
}

// roomy says that nothing of a plan can be wrong: the box that holds all its places, and where axes
// stand that it does not name, lies within the limits with room to approach, and no fence is about any
// of it. Most plans are far from everything, and so a million points take no longer than reading them.
func (b *bench) roomy(plan scan.Plan, at map[drivers.AxisName]unit.Angle) bool {
	n := len(b.axes)
	low, high, set, named := make([]unit.Angle, n), make([]unit.Angle, n), make([]bool, n), make([]bool, n)
	wide := func(i int, a unit.Angle) {
		if !set[i] {
			low[i], high[i], set[i] = a, a, true
		}
		low[i], high[i] = min(low[i], a), max(high[i], a)
	}
	for i, a := range b.axes {
		if place, known := at[a.Name]; known {
			wide(i, place)
		}
	}
	var columns []int
	add := func(targets []scan.AxisTarget) bool {
		for k, t := range targets {
			i := -1
			if k < len(columns) && b.axes[columns[k]].Name == t.Axis {
				i = columns[k]
			} else if known, ok := b.number[t.Axis]; ok {
				i = known
				if k == len(columns) {
					columns = append(columns, i)
				}
			} else {
				return false
			}
			named[i] = true
			wide(i, t.Angle)
		}
		return true
	}
	for _, p := range plan.Points {
		if !add(p.Axes) {
			return false
		}
	}
	if r := plan.Reference; r != nil {
		for _, p := range r.Places {
			if !add(p.Axes) {
				return false
			}
		}
	}
	if g := plan.Background; g != nil && !add([]scan.AxisTarget{{Axis: g.Axis, Angle: g.From}}) {
		return false
	} else if g != nil {
		wide(b.number[g.Axis], g.From+g.By)
	}
	for i, a := range b.axes {
		if !named[i] {
			continue
		}
		low[i], high[i] = min(low[i], approach(a, low[i])), max(high[i], approach(a, high[i]))
		if !a.Limits(low[i]) || !a.Limits(high[i]) {
			return false
		}
	}
	for _, f := range b.fences {
		f.line = false // anywhere in the box
		if f.unknown(set) < 0 && f.crossed(low, high) {
			return false
		}
	}
	return true
}
