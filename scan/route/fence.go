package route

import (
	"errors"
	"fmt"
	"math"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// fence is one forbidden region of one or two axes, open at its edges, margin and tolerances
// included. It is either a band, sum of side·angle nearer than reach to a whole turn, or a
// rectangle.
type fence struct {
	name   string
	number int    // in the bench's list
	kind   string // what a band's distance is, in messages
	axis   [2]int
	pair   bool // two axes; otherwise axis[1] and what belongs to it mean nothing
	lifts  bool // with the pump closed
	band   bool
	side   [2]unit.Angle // +1 or -1
	reach  unit.Angle
	low    [2]unit.Angle
	high   [2]unit.Angle
	tol    [2]unit.Angle // of the axes: how far inside an axis may be found that was let stop outside
	margin unit.Angle
	play   [2]unit.Angle // how far an axis that turns round may lag behind the straight line
	line   bool          // both axes move on a straight line when they move in one leg
}

// fence turns a keep-out into regions.
func (b *bench) fence(k scan.KeepOut) ([]fence, error) {
	fail := func(format string, args ...any) ([]fence, error) {
		return nil, fmt.Errorf("keep-out %q: "+format, append([]any{k.Name}, args...)...)
	}
	kinds := 0
	for _, set := range []bool{k.Apart != nil, k.Range != nil, k.Cone != nil} {
		if set {
			kinds++
		}
	}
	switch {
	case kinds != 1:
		return fail("%d kinds of region; want one", kinds)
	case k.Margin < 0:
		return fail("margin %s; want 0 deg or more", k.Margin)
	case k.Apart != nil:
		f, err := b.bandOf(k, k.Apart.Least, k.Apart.Arms[:]...)
		if err != nil {
			return fail("%w", err)
		}
		f.kind = "apart"
		return []fence{f}, nil
	case k.Range != nil:
		spans := []scan.Span{k.Range.Span}
		if k.Range.While != nil {
			spans = append(spans, *k.Range.While)
		}
		f, err := b.rectangleOf(k, spans...)
		if err != nil {
			return fail("%w", err)
		}
		return []fence{f}, nil
	}
	if len(k.Cone.Arms) == 0 {
		return fail("a cone for no arm; want at least one")
	}
	var fences []fence
	for _, arm := range k.Cone.Arms {
		f, err := b.bandOf(k, k.Cone.HalfWidth, arm)
		if err != nil {
			return fail("%w", err)
		}
		f.kind, f.lifts = "from the pump", k.Cone.UnlessPumpClosed
		fences = append(fences, f)
	}
	return fences, nil
}

// bandOf keeps one arm from the pump, or two from each other.
func (b *bench) bandOf(k scan.KeepOut, least unit.Angle, arms ...scan.Arm) (fence, error) {
	f := fence{name: k.Name, band: true, reach: least + k.Margin, margin: k.Margin, pair: len(arms) == 2}
	for n, arm := range arms {
		if err := b.tie(&f, n, arm.Axis); err != nil {
			return f, err
		}
		if arm.Side != 1 && arm.Side != -1 {
			return f, fmt.Errorf("%s on side %d; want 1 or -1", arm.Axis, arm.Side)
		}
		f.side[n] = unit.Angle(arm.Side)
		f.reach += f.tol[n]
	}
	if f.pair {
		f.side[1] = -f.side[1] // the difference of the directions
	}
	if least <= 0 || f.reach >= unit.Turn/2 {
		return f, fmt.Errorf("%s, %s with margin and tolerances; want more than 0 deg, and less than 180 deg in all", least, f.reach)
	}
	return f, nil
}

func (b *bench) rectangleOf(k scan.KeepOut, spans ...scan.Span) (fence, error) {
	f := fence{name: k.Name, margin: k.Margin, pair: len(spans) == 2}
	for n, s := range spans {
		if err := b.tie(&f, n, s.Axis); err != nil {
			return f, err
		}
		if s.Low >= s.High {
			return f, fmt.Errorf("%s from %s to %s; want the lower angle first", s.Axis, s.Low, s.High)
		}
		f.low[n], f.high[n] = s.Low-k.Margin-f.tol[n], s.High+k.Margin+f.tol[n]
	}
	return f, nil
}

// tie makes the named axis the fence's n-th.
func (b *bench) tie(f *fence, n int, name drivers.AxisName) error {
	i, ok := b.number[name]
	if !ok {
		return fmt.Errorf("no axis %q on this bench; want one of %s", name, b.names())
	}
	a := b.axes[i]
	f.axis[n], f.tol[n], f.play[n] = i, a.Tolerance, a.Backlash
	if n == 1 {
		if f.axis[0] == i {
			return errors.New(string(name) + " twice; want two axes")
		}
		first := b.axes[f.axis[0]]
		f.line = a.Together && first.Together && a.Controller == first.Controller
	}
	return nil
}

func (f *fence) lifted(s State) bool { return f.lifts && s.PumpClosed }

// unknown is the first of the fence's axes whose place is not known, or -1.
func (f *fence) unknown(known []bool) int {
	for n := range f.count() {
		if i := f.axis[n]; !known[i] {
			return i
		}
	}
	return -1
}

// about says whether the fence is about any of the axes marked.
func (f *fence) about(marked []bool) bool {
	return marked[f.axis[0]] || f.pair && marked[f.axis[1]]
}

// measure takes back the tolerance of axes that do not move: they stand where the stage says, not
// where they were sent.
func (f *fence) measure(moves []bool) {
	for n := range f.count() {
		if moves[f.axis[n]] {
			continue
		}
		if f.band {
			f.reach -= f.tol[n]
		} else {
			f.low[n], f.high[n] = f.low[n]+f.tol[n], f.high[n]-f.tol[n]
		}
		f.tol[n] = 0
	}
}

func (f *fence) count() int {
	if f.pair {
		return 2
	}
	return 1
}

// holds says whether a place lies inside.
func (f *fence) holds(place []unit.Angle) bool { return f.crossed(place, place) }

// crossed says whether axes that leave one place for another in one leg may come inside. Axes on a
// line are expected within a strip around it, all others anywhere between their ends.
func (f *fence) crossed(from, to []unit.Angle) bool {
	straight := f.straight(from, to)
	if f.band {
		low, high := f.sum(from, to, straight)
		return nearest(low, high) < f.reach
	}
	for n := range f.count() {
		a, b := from[f.axis[n]], to[f.axis[n]]
		if max(a, b) <= f.low[n] || min(a, b) >= f.high[n] {
			return false
		}
	}
	return !straight || f.cut(from, to)
}

// straight says whether the fence's axes keep to a line in this leg: where one of them stands, there
// is no difference.
func (f *fence) straight(from, to []unit.Angle) bool {
	return f.line && from[f.axis[0]] != to[f.axis[0]] && from[f.axis[1]] != to[f.axis[1]]
}

// sum is the range of a band's sum on the way.
func (f *fence) sum(from, to []unit.Angle, straight bool) (low, high unit.Angle) {
	var ends [2]unit.Angle
	var slack unit.Angle
	for n := range f.count() {
		a, b := f.side[n]*from[f.axis[n]], f.side[n]*to[f.axis[n]]
		low, high = low+min(a, b), high+max(a, b)
		ends[0], ends[1] = ends[0]+a, ends[1]+b
		slack += f.play[n]
	}
	if straight {
		low, high = max(low, min(ends[0], ends[1])-slack), min(high, max(ends[0], ends[1])+slack)
	}
	return low, high
}

// nearest is the least distance of a range from a whole number of turns.
func nearest(low, high unit.Angle) unit.Angle {
	turns := low / unit.Turn * unit.Turn
	if turns < low {
		turns += unit.Turn // the first whole turn that is not below the range
	}
	if turns <= high {
		return 0
	}
	return min(turns-high, low-(turns-unit.Turn))
}

// cut says whether the strip around a straight line meets a rectangle, given that the line's ends
// are not both on one outer side of it: whether the rectangle has corners on both sides of the line.
func (f *fence) cut(from, to []unit.Angle) bool {
	x0, y0 := from[f.axis[0]].Degrees(), from[f.axis[1]].Degrees()
	dx, dy := to[f.axis[0]].Degrees()-x0, to[f.axis[1]].Degrees()-y0
	const grain = 1e-9 // square degrees: far above what rounding does to the product, on the safe side
	left, right := false, false
	for _, x := range []unit.Angle{f.low[0] - f.play[0], f.high[0] + f.play[0]} {
		for _, y := range []unit.Angle{f.low[1] - f.play[1], f.high[1] + f.play[1]} {
			c := dx*(y.Degrees()-y0) - dy*(x.Degrees()-x0)
			left, right = left || c > -grain, right || c < grain
		}
	}
	return left && right
}

// yield draws the fence back to where the axes stand, if that is inside by no more than the
// tolerance, or freely. It says whether they stand outside now.
func (f *fence) yield(place []unit.Angle, freely bool) bool {
	if !f.holds(place) {
		return true
	}
	if f.band {
		low, high := f.sum(place, place, false)
		d := nearest(low, high)
		if f.reach-d > f.tol[0]+f.tol[1] && !freely {
			return false
		}
		f.reach = d
		return true
	}
	// The edge that is passed least counts, or the least beyond what its axis's tolerance explains.
	edge, beyond := (*unit.Angle)(nil), unit.Angle(math.MaxInt64)
	var drawn unit.Angle
	for n := range f.count() {
		at := place[f.axis[n]]
		if by := at - f.low[n] - f.tol[n]; by < beyond {
			edge, beyond, drawn = &f.low[n], by, at
		}
		if by := f.high[n] - at - f.tol[n]; by < beyond {
			edge, beyond, drawn = &f.high[n], by, at
		}
	}
	if beyond > 0 && !freely {
		return false
	}
	*edge = drawn
	return true
}
