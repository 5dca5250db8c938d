package estimate

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// refineLine is a set of points that differ in one axis, and what was counted there.
type refineLine struct {
	like   []scan.Point // its points, from low to high; what else they name is the same, or follows the axis
	places []unit.Angle // of like, on the axis
	data   []Spot
	where  string // which line it is, for a sentence; empty: there is one
}

// line finds the line that points are added on.
func (q RefineQuestion) line(rows Rows, bench Bench) (refineLine, error) {
	groups, follows := linesOf(q.Points, q.Of.Along)
	if len(groups) == 0 {
		return refineLine{}, fmt.Errorf("%d points; want a sweep of it with at least three places, everything else the same", len(q.Points))
	}
	lineOf := make([]int, len(q.Points))
	for i := range lineOf {
		lineOf[i] = -1
	}
	for g, members := range groups {
		for _, i := range members {
			lineOf[i] = g
		}
	}
	kinds := q.light(rows)
	byLine := make([][]protocol.Reading, len(groups))
	for _, r := range kinds[protocol.Light] {
		if g := lineOf[*r.Point]; g >= 0 {
			byLine[g] = append(byLine[g], r)
		}
	}
	ask := PeakQuestion{Axis: string(q.Of.Along), Channel: string(q.Of.Of)}
	best, bestRate := refineLine{}, math.Inf(-1)
	var refused error = errors.New("no reading counts")
	for g, members := range groups {
		if len(byLine[g]) == 0 {
			continue
		}
		part := map[protocol.ReadingKind][]protocol.Reading{protocol.Light: byLine[g], protocol.Dark: kinds[protocol.Dark]}
		no, unused := &Refusal{}, Result{}
		data := gather(part, bench, ask, &unused, no)
		if err := no.err(); err != nil {
			refused = err
			continue
		}
		l := refineLine{data: data}
		for _, i := range members {
			l.like = append(l.like, q.Points[i])
			a, _ := target(q.Points[i], q.Of.Along)
			l.places = append(l.places, a)
		}
		// The line of the earlier rounds stays the line: another one's luck must not move the points.
		if rate := l.highest(); q.Added > 0 && slices.Contains(members, len(q.Points)-1) || rate > bestRate {
			best, bestRate = l, rate
			if len(groups) > 1 && !follows {
				best.where = " where " + others(q.Points[members[0]], q.Of.Along)
			}
			if q.Added > 0 && slices.Contains(members, len(q.Points)-1) {
				break
			}
		}
	}
	if len(best.data) == 0 {
		return refineLine{}, refused
	}
	return best, nil
}

// linesOf groups the points that differ in one axis alone, each group from low to high, by their
// indices; groups with fewer than three places are left out. Where none is left and no place of the
// axis comes twice, other axes follow it, and the sweep is one line.
func linesOf(points []scan.Point, along drivers.AxisName) (groups [][]int, follows bool) {
	at := map[string]int{}
	var all [][]int
	var every []int
	for i, p := range points {
		if _, moves := target(p, along); !moves || p.Empty != "" {
			continue
		}
		key := others(p, along)
		g, known := at[key]
		if !known {
			g = len(all)
			at[key] = g
			all = append(all, nil)
		}
		all[g] = append(all[g], i)
		every = append(every, i)
	}
	place := func(i int) unit.Angle {
		a, _ := target(points[i], along)
		return a
	}
	sorted := func(group []int) []int {
		slices.SortStableFunc(group, func(a, b int) int { return int(min(max(place(a)-place(b), -1), 1)) })
		return group
	}
	distinct := func(group []int) int {
		n := 0
		for k, i := range group {
			if k == 0 || place(i) != place(group[k-1]) {
				n++
			}
		}
		return n
	}
	for _, g := range all {
		if g = sorted(g); distinct(g) >= 3 {
			groups = append(groups, g)
		}
	}
	if every = sorted(every); len(groups) == 0 && len(every) >= 3 && distinct(every) == len(every) && sameSettings(points, every) {
		return [][]int{every}, true
	}
	return groups, false
}

func sameSettings(points []scan.Point, members []int) bool {
	for _, i := range members {
		if !slices.Equal(points[i].Settings, points[members[0]].Settings) {
			return false
		}
	}
	return true
}

func target(p scan.Point, axis drivers.AxisName) (unit.Angle, bool) {
	for _, t := range p.Axes {
		if t.Axis == axis {
			return t.Angle, true
		}
	}
	return 0, false
}

// others names everything of a point but one axis.
func others(p scan.Point, but drivers.AxisName) string {
	var parts []string
	for _, t := range p.Axes {
		if t.Axis != but {
			parts = append(parts, fmt.Sprintf("%s is at %s", t.Axis, t.Angle))
		}
	}
	for _, s := range p.Settings {
		parts = append(parts, fmt.Sprintf("%s is %v", s.Setting, s.Value))
	}
	return strings.Join(parts, ", ")
}

// point is the line's point at a place. What follows the axis is interpolated between neighbours;
// beyond the line's ends it is not known.
func (l refineLine) point(along drivers.AxisName, a unit.Angle) (scan.Point, bool) {
	i, _ := slices.BinarySearch(l.places, a)
	from, to := max(0, i-1), min(i, len(l.places)-1)
	p := scan.Point{Axes: slices.Clone(l.like[from].Axes), Settings: slices.Clone(l.like[from].Settings)}
	for k := range p.Axes {
		t := &p.Axes[k]
		if t.Axis == along {
			t.Angle = a
			continue
		}
		other, _ := target(l.like[to], t.Axis)
		if other == t.Angle {
			continue
		}
		if a < l.places[0] || a > l.places[len(l.places)-1] {
			return scan.Point{}, false
		}
		share := float64(a-l.places[from]) / float64(l.places[to]-l.places[from])
		t.Angle += unit.Angle(math.Round(share * float64(other-t.Angle)))
	}
	if from == to && (a < l.places[0] || a > l.places[len(l.places)-1]) && l.follows(along) {
		return scan.Point{}, false
	}
	return p, true
}

func (l refineLine) follows(along drivers.AxisName) bool {
	return others(l.like[0], along) != others(l.like[len(l.like)-1], along)
}

// addedSpan is from where to where earlier rounds added points.
func (l refineLine) addedSpan(q RefineQuestion) (low, high unit.Angle) {
	low, high = math.MaxInt64, math.MinInt64
	for _, p := range q.Points[len(q.Points)-q.Added:] {
		a, _ := target(p, q.Of.Along)
		low, high = min(low, a), max(high, a)
	}
	return low, high
}

// spot is what was counted at one place of a line.
type placeSum struct{ angleDeg, counts, known, exposure float64 }

// perPlace sums what was counted at each place, from low to high. Places nearer than a
// thousandth of the line's length are one: a place is never reached to the last digit.
func (l refineLine) perPlace() []placeSum {
	data := slices.Clone(l.data)
	slices.SortStableFunc(data, func(a, b Spot) int {
		switch {
		case a.AngleDeg < b.AngleDeg:
			return -1
		case a.AngleDeg > b.AngleDeg:
			return 1
		}
		return 0
	})
	near := (data[len(data)-1].AngleDeg - data[0].AngleDeg) / 1000
	var sums []placeSum
	for _, s := range data {
		if n := len(sums); n == 0 || s.AngleDeg-sums[n-1].angleDeg > near {
			sums = append(sums, placeSum{angleDeg: s.AngleDeg})
		}
		p := &sums[len(sums)-1]
		p.counts, p.known, p.exposure = p.counts+s.Counts, p.known+s.Known, p.exposure+s.Exposure
	}
	return sums
}

// smooth is the rate at each place, averaged with its neighbours so that one lucky reading is no
// maximum.
func smooth(sums []placeSum) []float64 {
	rates := make([]float64, len(sums))
	for i := range sums {
		var net, exposure float64
		for _, s := range sums[max(0, i-1):min(len(sums), i+2)] {
			net, exposure = net+s.counts-s.known, exposure+s.exposure
		}
		rates[i] = net / math.Max(exposure, 1e-300)
	}
	return rates
}

func (l refineLine) highest() float64 { return slices.Max(smooth(l.perPlace())) }

// summit is the place with the highest rate.
func (l refineLine) summit() float64 {
	sums := l.perPlace()
	rates := smooth(sums)
	best := 0
	for i := range rates {
		if rates[i] > rates[best] {
			best = i
		}
	}
	return sums[best].angleDeg
}

// flat is the chance that counts so uneven come from one rate.
func (l refineLine) flat() float64 {
	sums := l.perPlace()
	var net, exposure float64
	for _, s := range sums {
		net, exposure = net+s.counts-s.known, exposure+s.exposure
	}
	rate := math.Max(net/exposure, 0)
	off, v := make([]float64, len(sums)), make([]float64, len(sums))
	for i, s := range sums {
		m := rate*s.exposure + s.known
		off[i], v[i] = s.counts-m, math.Max(m, 1e-9)
	}
	return Disperse(off, v, 1).P
}

// fit is the profile of a line.
func (l refineLine) fit(q RefineQuestion) (PeakFit, error) {
	shapes := []PeakShape{GaussianPeak, FlatTop}
	var predicted func(float64) float64
	if q.Expect != nil {
		shapes = append(shapes, PredictedPeak)
		predicted = func(angleDeg float64) float64 {
			p, ok := l.point(q.Of.Along, unit.Degrees(angleDeg))
			if !ok { // beyond the line's end, where what follows is not known
				p = l.like[0]
				if unit.Degrees(angleDeg) > l.places[0] {
					p = l.like[len(l.like)-1]
				}
			}
			return q.Expect(p)
		}
	}
	var best PeakFit
	var failed error
	cost := math.Inf(1)
	for _, shape := range shapes {
		f, err := FitPeak(l.data, shape, predicted)
		if err == nil {
			err = f.inSweep()
		}
		if err != nil {
			if failed == nil {
				failed = err
			}
			continue
		}
		if c := f.Fit.Value + 2*float64(len(f.Names)); c < cost {
			cost, best = c, f
		}
	}
	if math.IsInf(cost, 1) {
		return PeakFit{}, failed
	}
	return best, nil
}

// candidates is how many places a full width is divided into.
const candidates = 40

// best takes places one after another, each the one whose expected counts lower the variance of the
// fitted centre most, given all that was counted and all that were taken before, until it is down to
// the goal. It returns the standard uncertainty that is expected then.
func (l refineLine) best(fit PeakFit, q RefineQuestion, goalDeg float64, most int) (places []unit.Angle, u float64) {
	fwhm, _ := fit.FWHMDeg()
	low, high := fit.data[0].AngleDeg, fit.data[len(fit.data)-1].AngleDeg
	grain := max(sensible(unit.Degrees(fwhm/candidates)), q.Axis.Tolerance, 1)
	first := unit.Angle(math.Ceil(math.Max(low, fit.middleDeg()-1.5*fwhm) * float64(unit.Degree) / float64(grain)))
	last := unit.Angle(math.Floor(math.Min(high, fit.middleDeg()+1.5*fwhm) * float64(unit.Degree) / float64(grain)))
	step := max(1, (last-first)/(4*candidates))
	var exposure, known float64
	for _, s := range fit.data {
		exposure, known = exposure+s.Exposure, known+s.Known
	}
	one := fit
	one.data = nil
	var at []unit.Angle
	for k := first; k <= last; k += step {
		a := k * grain
		if !q.may(l, a) {
			continue
		}
		at = append(at, a)
		each := exposure / float64(len(fit.data))
		one.data = append(one.data, Spot{AngleDeg: a.Degrees(), Exposure: each, Known: known / exposure * each, GateS: each, DeadS: fit.data[0].DeadS, Dead: fit.data[0].Dead})
	}
	if len(at) == 0 {
		return nil, fit.Fit.U(centreParam)
	}
	m := make([]float64, len(at))
	one.expected(fit.Fit.Params, m)
	pr := problem{n: len(at), start: fit.Fit.Params, model: one.expected}
	k := len(fit.Fit.Params)
	jac := make([][]float64, k)
	for i := range jac {
		jac[i] = make([]float64, len(at))
	}
	pr.jacobian(fit.Fit.Params, jac)
	cov := matrix(k)
	for i := range cov {
		copy(cov[i], fit.Fit.Cov[i])
	}
	toCov := make([]float64, k)
	spread := func(i int) (gain, variance float64) {
		variance = m[i]
		for a := range k {
			toCov[a] = 0
			for b := range k {
				toCov[a] += cov[a][b] * jac[b][i]
			}
			variance += jac[a][i] * toCov[a]
		}
		return toCov[centreParam] * toCov[centreParam] / variance, variance
	}
	taken := make([]bool, len(at))
	for len(places) < most && cov[centreParam][centreParam] > goalDeg*goalDeg {
		best, bestGain := -1, 0.0
		for i := range at {
			if taken[i] || !(m[i] > 0) {
				continue
			}
			if gain, _ := spread(i); gain > bestGain {
				best, bestGain = i, gain
			}
		}
		if best < 0 {
			break
		}
		taken[best] = true
		places = append(places, at[best])
		_, v := spread(best)
		for a := range k {
			for b := range k {
				cov[a][b] -= toCov[a] * toCov[b] / v
			}
		}
	}
	return places, math.Sqrt(math.Max(0, cov[centreParam][centreParam]))
}
