package estimate

import (
	"fmt"
	"math"
	"slices"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// RefineQuestion is what a refinement is asked of: recipe key refine.
type RefineQuestion struct {
	Of     scan.Refine
	Axis   scan.Axis    // that the points are added on
	Points []scan.Point // all that were decided, in the order of their index
	Added  int          // how many of them, the last ones, earlier rounds added
	// Allowed says what speaks against a point beyond the axis's soft limits, such as a keep-out; nil:
	// nothing does.
	Allowed func(scan.Point) error
	Each    time.Duration // bench time that a point takes: dwell, move and the rest
	Spent   time.Duration // bench time that the refinement took so far
	// Expect predicts the rate of the channel at a point, in any unit; nil: there is no prediction.
	Expect func(scan.Point) float64
}

// Refinement is a decision to add points, or not to.
type Refinement struct {
	Points  []scan.Point // none: the refinement is over
	Grounds string       // one sentence with the numbers
}

// share of the budget that one round may spend, so that the next is placed by better counts.
const roundShare = 3

// Refine decides which points are added after what was counted so far: a pure function of the
// readings and the points. Points are added on one line, the set of points that differ in the axis
// alone; of several it is the one with the highest rate, neighbours averaged. Where no such line
// has three places, because other axes follow the axis, the whole sweep is one, and what follows is
// interpolated. The profile that is fitted is the predicted one, a Gaussian or a flat top, whichever
// costs least (Akaike 1974: the Cash statistic and two for each parameter).
//
// About a maximum it is one grid, centred on the fitted place, without what is too near to a place
// that was counted; a later round adds another only where the maximum turned out to stand outside
// the first. For an uncertainty asked, each round takes the places that, one after another, lower
// the variance of the fitted centre most, given everything counted before: for a peak those are the
// flanks, and no place twice in a round. A round is no larger than what is expected to do, nor than
// a third of what is allowed.
//
// Places are chosen by counts that stay in the fit: a fitted position is not biased by that, because
// the likelihood of the counts does not depend on why the places were chosen; a mean or a best value
// over these points would be.
func Refine(rows Rows, bench Bench, q RefineQuestion) Refinement {
	l, err := q.line(rows, bench)
	if err != nil {
		return Refinement{Grounds: fmt.Sprintf("%s cannot be refined: %v", q.Of.Along, err)}
	}
	room, why := q.room()
	fit, err := l.fit(q)
	if q.Of.Below > 0 {
		if err != nil {
			return Refinement{Grounds: fmt.Sprintf("%s: no position of %s can be fitted: %v", q.Of.Along, q.Of.Of, err)}
		}
		return q.sharpen(l, fit, room, why)
	}
	return q.gridAbout(l, fit, err, room, why)
}

// room is how many points may still be added, and what keeps it from being more.
func (q RefineQuestion) room() (points int, why string) {
	points, why = q.Of.AtMost-q.Added, fmt.Sprintf("%d of %d points are used", q.Added, q.Of.AtMost)
	if q.Of.Within > 0 {
		left := 0
		if q.Each > 0 {
			left = int(max(0, q.Of.Within-q.Spent) / q.Each)
		}
		if left < points {
			points, why = left, fmt.Sprintf("%s of %s are used, and a point takes %s", unit.Span(rounded(q.Spent)), unit.Span(q.Of.Within), unit.Span(rounded(q.Each)))
		}
	}
	return max(0, points), why
}

func rounded(d time.Duration) time.Duration {
	if d > time.Minute {
		return d.Round(time.Second)
	}
	return d.Round(100 * time.Millisecond)
}

// gridAbout adds the grid about a maximum.
func (q RefineQuestion) gridAbout(l refineLine, fit PeakFit, failed error, room int, why string) Refinement {
	if p := l.flat(); p > flatChance {
		return Refinement{Grounds: fmt.Sprintf("no maximum of %s stands out along %s: counts so uneven come by chance with p = %.2g", q.Of.Of, q.Of.Along, p)}
	}
	centre, told := l.summit(), fmt.Sprintf("the highest rate of %s along %s is at", q.Of.Of, q.Of.Along)
	note := fmt.Sprintf(" (no fit: %v)", failed)
	if failed == nil {
		centre, told = fit.middleDeg(), fmt.Sprintf("%s maximum of %s at", q.Of.Along, q.Of.Of)
		note = fmt.Sprintf(", u %s deg", figure(fit.Fit.U(centreParam), 2))
	}
	told = fmt.Sprintf("%s %s deg%s%s", told, figure(centre, 5), note, l.where)
	grain := sensible(q.Of.Step / 2)
	middle := unit.Degrees(centre)
	middle = grain * unit.Angle(math.Round(float64(middle)/float64(grain)))
	if q.Added > 0 {
		low, high := l.addedSpan(q)
		if middle >= low-q.Of.Step && middle <= high+q.Of.Step {
			return Refinement{Grounds: fmt.Sprintf("%s: the grid about it is counted", told)}
		}
	}
	near := max(q.Axis.Tolerance, q.Of.Step/4)
	var places []unit.Angle
	for k := unit.Angle(0); k <= q.Of.Span/2/q.Of.Step; k++ { // from the middle outwards: a bound cuts the ends
		for _, a := range []unit.Angle{middle + k*q.Of.Step, middle - k*q.Of.Step} {
			if slices.Contains(places, a) || slices.ContainsFunc(l.places, func(p unit.Angle) bool { return (p - a).Abs() <= near }) || !q.may(l, a) {
				continue
			}
			places = append(places, a)
		}
	}
	switch {
	case len(places) == 0:
		return Refinement{Grounds: fmt.Sprintf("%s: every place of the grid about it is counted, or cannot be gone to", told)}
	case room == 0:
		return Refinement{Grounds: fmt.Sprintf("%s: no points are added, %s", told, why)}
	}
	places = places[:min(room, len(places))]
	points := q.points(l, places)
	return Refinement{Points: points, Grounds: fmt.Sprintf("%s: %d %s from %s to %s by %s", told, len(points), plural(len(points), "point"), slices.Min(places), slices.Max(places), q.Of.Step)}
}

// flatChance calls a line flat where its counts are as uneven as chance would make them.
const flatChance = 1e-4

// sharpen adds places where counts lower the fitted centre's uncertainty.
func (q RefineQuestion) sharpen(l refineLine, fit PeakFit, room int, why string) Refinement {
	u, goal := fit.Fit.U(centreParam), q.Of.Below.Degrees()
	told := fmt.Sprintf("%s peak at %s deg, u %s deg, asked %s deg%s", q.Of.Along, figure(fit.middleDeg(), 5), figure(u, 2), figure(goal, 2), l.where)
	switch {
	case fit.Fit.Bounded[centreParam] || !(u > 0):
		return Refinement{Grounds: fmt.Sprintf("%s of %s: the readings do not hold its position; no points are added", q.Of.Along, q.Of.Of)}
	case u <= goal:
		return Refinement{Grounds: fmt.Sprintf("%s: reached with %d added %s", told, q.Added, plural(q.Added, "point"))}
	case room == 0:
		return Refinement{Grounds: fmt.Sprintf("%s: not reached, %s", told, why)}
	}
	most := min(room, (q.Added+room+roundShare-1)/roundShare)
	places, expected := l.best(fit, q, goal, most)
	if len(places) == 0 {
		return Refinement{Grounds: fmt.Sprintf("%s: not reached, and no place on its flanks can be gone to", told)}
	}
	points := q.points(l, places)
	return Refinement{Points: points, Grounds: fmt.Sprintf("%s: %d %s on the flanks, which should bring u to %s deg", told, len(points), plural(len(points), "point"), figure(expected, 2))}
}

// may says whether a place lies within the limits and nothing else speaks against it.
func (q RefineQuestion) may(l refineLine, a unit.Angle) bool {
	if !q.Axis.Limits(a) {
		return false
	}
	p, ok := l.point(q.Of.Along, a)
	return ok && (q.Allowed == nil || q.Allowed(p) == nil)
}

// points are those at some places of a line, in the direction in which the axis is approached.
func (q RefineQuestion) points(l refineLine, places []unit.Angle) []scan.Point {
	places = slices.Sorted(slices.Values(places))
	if !q.Axis.Rising {
		slices.Reverse(places)
	}
	points := make([]scan.Point, len(places))
	for i, a := range places {
		points[i], _ = l.point(q.Of.Along, a)
	}
	return points
}

// sensible is the largest power of ten of a degree that is no more than an angle: what a person
// would round to.
func sensible(a unit.Angle) unit.Angle {
	grain := unit.Degree
	for grain > a && grain >= 10 {
		grain /= 10
	}
	return grain
}

func plural(n int, noun string) string {
	if n == 1 {
		return noun
	}
	return noun + "s"
}

// light is the readings that a refinement looks at.
func (q RefineQuestion) light(rows Rows) (kinds map[protocol.ReadingKind][]protocol.Reading) {
	kinds, _ = rows.split()
	kinds[protocol.Light] = slices.DeleteFunc(slices.Clone(kinds[protocol.Light]), func(r protocol.Reading) bool {
		return r.Point == nil || *r.Point < 0 || *r.Point >= len(q.Points)
	})
	return kinds
}
