package route

import (
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// mostOrdered bounds a search whose time grows with the square of the points.
const mostOrdered = 3000

// Order returns the places of points in an order that takes no longer to travel than the one given,
// for where a recipe leaves the order free: from the first point on always to the nearest in time,
// if that is quicker in all. The first point stays first, as it is where a reference or a person
// expects to begin. More than 3000 points stay as they are. Keep-outs are not looked at: CheckPlan
// does that, on the outcome.
func Order(points []scan.Point, axes []scan.Axis) []int {
	given := make([]int, len(points))
	for i := range given {
		given[i] = i
	}
	if len(points) > mostOrdered || len(points) < 3 {
		return given
	}
	t := newTable(points, axes)
	near := append([]int(nil), given...)
	for n := 1; n < len(near)-1; n++ {
		best, least := n, t.between(near[n-1], near[n])
		for i := n + 1; i < len(near); i++ {
			if d := t.between(near[n-1], near[i]); d < least {
				best, least = i, d
			}
		}
		// What was nearer to the front stays so: ties follow the order given.
		p := near[best]
		copy(near[n+1:best+1], near[n:best])
		near[n] = p
	}
	if t.total(near) < t.total(given) {
		return near
	}
	return given
}

// table holds the points' angles by axis number.
type table struct {
	axes   []scan.Axis
	angles [][]unit.Angle // by point and axis
	named  [][]bool
}

func newTable(points []scan.Point, axes []scan.Axis) *table {
	t := &table{axes: axes}
	number := map[drivers.AxisName]int{}
	for i, a := range axes {
		number[a.Name] = i
	}
	for _, p := range points {
		angles, named := make([]unit.Angle, len(axes)), make([]bool, len(axes))
		for _, target := range p.Axes {
			if i, ok := number[target.Axis]; ok {
				angles[i], named[i] = target.Angle, true
			}
		}
		t.angles, t.named = append(t.angles, angles), append(t.named, named)
	}
	return t
}

// between is the time from one point to another with all axes at once.
func (t *table) between(p, q int) (longest time.Duration) {
	for i := range t.axes {
		if a := &t.axes[i]; t.named[p][i] && t.named[q][i] && t.angles[p][i] != t.angles[q][i] {
			longest = max(longest, travel(*a, t.angles[p][i], t.angles[q][i]))
		}
	}
	return longest
}

func (t *table) total(order []int) (sum time.Duration) {
	for n := 1; n < len(order); n++ {
		sum += t.between(order[n-1], order[n])
	}
	return sum
}
