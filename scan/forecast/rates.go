package forecast

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"gemel/drivers"
	"gemel/scan"
)

// MostEvaluations is how many places the rates are worked out at, at most, however many points there
// are.
const MostEvaluations = 2000

// Expect says what is recorded at a place, per second of light.
type Expect func(axes []scan.AxisTarget, settings []scan.SettingTarget) (scan.Expected, error)

// rates are what every point of a plan records: evaluated at each where they are few, or at nodes and
// interpolated in between. Between nodes the logarithm of each rate is followed by cubics along each
// entry of the sweep: what falls off as a Gaussian is then met to the last digit, and what is small
// keeps its relative error. Of coincidences the true and the accidental ones are followed each for
// itself, since they fall off differently.
type rates struct {
	channels  []drivers.Channel // of counts, coincidences last, then of their accidentals
	counts    int               // how many of them are counts
	points    []scan.Point
	lattice   *lattice  // nil: a row of values each point
	values    []float64 // by node, the channels of one node together; logarithms with a lattice
	dark      map[drivers.Channel]float64
	warnings  []string
	evaluated int
	error     float64 // the largest relative error found between nodes
	failed    error   // of the first place where there are no rates
	failedAt  int
}

// row is what one place records, in the order of channels.
type row []float64

func newRates(points []scan.Point, channels []drivers.Channel, pairs []drivers.Channel, expect Expect) *rates {
	r := &rates{channels: append(slices.Clone(channels), pairs...), counts: len(channels), points: points, failedAt: -1}
	e := evaluator{rates: r, expect: expect, told: map[string]bool{}}
	if l := newLattice(points); len(points) > MostEvaluations && l != nil {
		r.lattice = l
		e.spread()
		return r
	}
	if len(points) <= MostEvaluations {
		known := map[string]row{}
		for i, p := range points {
			key := placeOf(p)
			v, ok := known[key]
			if !ok {
				v = e.at(i)
				known[key] = v
			}
			r.values = append(r.values, v...)
		}
		return r
	}
	// A list without a grid: nodes at even distances along it.
	r.lattice = &lattice{levels: []level{{size: len(points), stride: 1}}, total: len(points)}
	e.spread()
	return r
}

func placeOf(p scan.Point) string { return fmt.Sprint(p.Axes, p.Settings) }

// evaluator asks the model.
type evaluator struct {
	*rates
	expect Expect
	told   map[string]bool
}

// at asks about one point. A place without rates is not a number.
func (e *evaluator) at(i int) row {
	out := make(row, len(e.channels))
	p := e.points[i]
	if p.Empty != "" {
		for k := range out {
			out[k] = math.NaN()
		}
		return out
	}
	e.evaluated++
	x, err := e.expect(p.Axes, p.Settings)
	if err != nil {
		if e.failed == nil {
			e.failed, e.failedAt = err, i
		}
		for k := range out {
			out[k] = math.NaN()
		}
		return out
	}
	e.hear(x)
	for k, c := range e.channels {
		if k < e.counts {
			out[k] = x.CountsHz[c]
		} else {
			out[k] = x.AccidentalsHz[c]
		}
	}
	return out
}

func (e *evaluator) hear(x scan.Expected) {
	if e.dark == nil && len(x.DarkHz) > 0 {
		e.dark = x.DarkHz
	}
	for _, w := range x.Warnings {
		if !e.told[w] && len(e.told) < 20 {
			e.told[w] = true
			e.warnings = append(e.warnings, w)
		}
	}
}

const (
	leastHz  = 1e-9 // below it a rate is none, and has a logarithm all the same
	trial    = 65   // nodes along one entry of the sweep that are tried, at most
	goodness = 2e-3 // relative error along one entry that is aimed at
	checked  = 100  // places between nodes at which the error is looked for
)

// spread chooses the nodes of the lattice and asks the model there.
func (e *evaluator) spread() {
	l := e.lattice
	// Entries of the sweep with few values keep them all.
	room := MostEvaluations - checked
	want := make([]int, len(l.levels))
	for i := range l.levels {
		want[i] = e.needed(i)
		l.levels[i].take(want[i])
	}
	room -= e.evaluated
	for l.nodes() > room {
		// The largest gives way first.
		i := 0
		for k := range want {
			if l.levels[k].count() > l.levels[i].count() {
				i = k
			}
		}
		want[i] = max(2, l.levels[i].count()-1-l.levels[i].count()/16)
		l.levels[i].take(want[i])
	}
	// What room is left makes the meshes finer, evenly.
	for grown := true; grown; {
		grown = false
		for i := range l.levels {
			at := l.levels[i].count()
			if at >= l.levels[i].size || l.nodes()/at*(at+1) > room {
				continue
			}
			want[i] = at + 1
			l.levels[i].take(want[i])
			grown = grown || l.levels[i].count() > at
		}
	}
	for n := range l.nodes() {
		for _, v := range e.parted(e.at(l.point(n))) {
			e.values = append(e.values, logOf(v))
		}
	}
	for i := range l.levels {
		l.levels[i].weigh()
	}
	e.check()
}

// parted takes the accidental ones from the coincidences, and joined puts them back.
func (r *rates) parted(v row) row {
	pairs := len(r.channels) - r.counts
	for k := range pairs {
		v[r.counts-pairs+k] = v[r.counts-pairs+k] - v[r.counts+k]
	}
	return v
}

func (r *rates) joined(v row) row {
	pairs := len(r.channels) - r.counts
	for k := range pairs {
		v[r.counts-pairs+k] += v[r.counts+k]
	}
	return v
}

func logOf(v float64) float64 { return math.Log(math.Max(v, leastHz)) } // NaN stays

// needed is how many nodes along one entry suffice, with all others at their middle.
func (e *evaluator) needed(i int) int {
	v := e.lattice.levels[i]
	if v.size <= 9 {
		return v.size
	}
	base := 0
	for k, other := range e.lattice.levels {
		if k != i {
			base += other.size / 2 * other.stride
		}
	}
	pairs := len(e.channels) - e.counts
	known := map[int]row{}
	ask := func(index int) row {
		p := e.lattice.reflect(base, i, index)
		if _, ok := known[index]; !ok {
			known[index] = e.parted(e.at(p))
		}
		return known[index]
	}
	n := 9
	for ; n < min(v.size, trial); n = 2*n - 1 {
		v.take(n)
		v.weigh()
		if v.count() < n { // nodes met: all values are taken
			return v.count()
		}
		worst := 0.0
		for k := 1; k < len(v.at); k++ {
			mid := (v.at[k-1] + v.at[k]) / 2
			if mid == v.at[k-1] {
				continue
			}
			got := ask(mid)
			for c := range got {
				log := 0.0
				for j := range 4 {
					log += v.weight[mid][j] * logOf(ask(v.at[v.first[mid]+j])[c])
				}
				whole := got[c]
				if c < e.counts && c >= e.counts-pairs {
					whole += got[c+pairs] // an error of the true ones matters as far as there are some
				}
				if d := math.Abs(math.Exp(log)-got[c]) / math.Max(whole, leastHz); !math.IsNaN(d) && whole > leastHz {
					worst = math.Max(worst, d)
				}
			}
		}
		if worst < goodness {
			break
		}
	}
	return min(n, v.size)
}

// dim is the share of a channel's highest rate below which an error counts relative to it: the model's
// own table keeps a hundredth of what is nearby.
const dim = 0.05

// check looks for the error between nodes, at places drawn from a fixed seed.
func (e *evaluator) check() {
	rng := rand.New(rand.NewPCG(1, uint64(len(e.points))))
	var wants, gots []row
	highest := make(row, e.counts)
	for range min(checked, MostEvaluations-e.evaluated) {
		i := rng.IntN(len(e.points))
		want, got := e.at(i), make(row, len(e.channels))
		e.into(i, got)
		wants, gots = append(wants, want), append(gots, got)
		for k := range highest {
			if want[k] > highest[k] {
				highest[k] = want[k]
			}
		}
	}
	for i := range wants {
		for k, most := range highest {
			if d := math.Abs(gots[i][k]-wants[i][k]) / math.Max(wants[i][k], dim*most); !math.IsNaN(d) {
				e.error = math.Max(e.error, d)
			}
		}
	}
}

// into writes what a point records, in the order of the channels.
func (r *rates) into(point int, out row) {
	n := len(r.channels)
	if r.lattice == nil {
		copy(out, r.values[point*n:(point+1)*n])
		return
	}
	for k := range out {
		out[k] = 0
	}
	nearest, most := -1, 0.0
	r.lattice.blend(point, func(node int, weight float64) {
		values := r.values[node*n : (node+1)*n]
		if w := math.Abs(weight); w > most && !math.IsNaN(values[0]) {
			nearest, most = node, w
		}
		for k, v := range values {
			out[k] += weight * v
		}
	})
	if math.IsNaN(out[0]) && nearest >= 0 { // beside a place without rates
		copy(out, r.values[nearest*n:(nearest+1)*n])
	}
	for k := range out {
		out[k] = math.Exp(out[k])
		if out[k] < 2*leastHz {
			out[k] = 0
		}
	}
	r.joined(out)
}

// lattice sees a list of points as what it was made from: entries nested in one another, the last
// running fastest, every second line backwards or none.
type lattice struct {
	levels     []level // outermost first
	total      int
	serpentine bool
}

// level is one entry of the sweep.
type level struct {
	size   int
	stride int // points from one of its values to the next

	at     []int        // the nodes, by index
	first  []int        // for each index the first of the four nodes it is blended from
	weight [][4]float64 // and how much of each
}

// newLattice finds the nesting, or nil where there is none.
func newLattice(points []scan.Point) *lattice {
	if len(points) < 2 {
		return nil
	}
	width := len(points[0].Axes) + len(points[0].Settings)
	same := func(a, b scan.Point, column int) bool {
		if column < len(a.Axes) {
			return a.Axes[column].Angle == b.Axes[column].Angle
		}
		return a.Settings[column-len(a.Axes)].Value == b.Settings[column-len(a.Axes)].Value
	}
	used := make([]bool, width) // columns of inner levels
	l := &lattice{total: 1}
	for stride := 1; stride < len(points); {
		// This level's columns are those that change in its first step, beyond the inner ones.
		mine := make([]bool, width)
		any := false
		for c := range width {
			if !used[c] && !same(points[0], points[stride], c) {
				mine[c], any = true, true
			}
		}
		if !any {
			return nil
		}
		size := 1
		for ; (size+1)*stride <= len(points); size++ {
			if size*stride >= len(points) {
				break
			}
			a, b, left := points[(size-1)*stride], points[size*stride], false
			for c := range width {
				left = left || !used[c] && !mine[c] && !same(a, b, c)
			}
			if left {
				break
			}
		}
		l.levels = append(l.levels, level{size: size, stride: stride})
		for c := range width {
			used[c] = used[c] || mine[c]
		}
		stride *= size
		l.total = stride
		if len(points)%stride != 0 {
			return nil
		}
	}
	if l.total != len(points) {
		return nil
	}
	slices.Reverse(l.levels)
	inner := l.levels[len(l.levels)-1]
	if len(l.levels) > 1 && inner.size > 1 {
		n := inner.size
		l.serpentine = turned(points[:n], points[n:2*n])
	}
	return l
}

// turned says whether the second of two lines runs backwards: the steps between its points are those
// of the first in the other order and direction.
func turned(a, b []scan.Point) bool {
	step := func(line []scan.Point, i int) (steps []float64) {
		for c := range line[i].Axes {
			steps = append(steps, float64(line[i+1].Axes[c].Angle-line[i].Axes[c].Angle))
		}
		for c := range line[i].Settings {
			steps = append(steps, line[i+1].Settings[c].Value-line[i].Settings[c].Value)
		}
		return steps
	}
	for i := range len(a) - 1 {
		back := step(a, len(a)-2-i)
		for c := range back {
			back[c] = -back[c]
		}
		if !slices.Equal(step(b, i), back) {
			return false
		}
	}
	return true
}

// indices are a point's places in the levels.
func (l *lattice) indices(point int, out []int) {
	p := point
	for i := len(l.levels) - 1; i >= 0; i-- {
		n := l.levels[i].size
		line := p / n
		out[i] = p % n
		if l.serpentine && line%2 == 1 {
			out[i] = n - 1 - out[i]
		}
		p = line
	}
}

// pointAt is the point at places in the levels.
func (l *lattice) pointAt(indices []int) int {
	p := 0
	for i, v := range l.levels {
		at := indices[i]
		if l.serpentine && p%2 == 1 {
			at = v.size - 1 - at
		}
		p = p*v.size + at
	}
	return p
}

// reflect is the point that has the indices of another but for one level.
func (l *lattice) reflect(point, level, index int) int {
	at := make([]int, len(l.levels))
	for i, v := range l.levels {
		at[i] = point / v.stride % v.size
	}
	at[level] = index
	return l.pointAt(at)
}

func (l *lattice) nodes() int {
	n := 1
	for i := range l.levels {
		n *= l.levels[i].count()
	}
	return n
}

// point is the point behind a node.
func (l *lattice) point(node int) int {
	at := make([]int, len(l.levels))
	for i := len(l.levels) - 1; i >= 0; i-- {
		v := &l.levels[i]
		at[i] = v.at[node%v.count()]
		node /= v.count()
	}
	return l.pointAt(at)
}

// blend gives the nodes a point is blended from, and their weights.
func (l *lattice) blend(point int, give func(node int, weight float64)) {
	var at [8]int
	l.indices(point, at[:len(l.levels)])
	var go_ func(level, node int, weight float64)
	go_ = func(level, node int, weight float64) {
		if level == len(l.levels) {
			give(node, weight)
			return
		}
		v := &l.levels[level]
		first, w := v.first[at[level]], v.weight[at[level]]
		for j, share := range w {
			if share != 0 {
				go_(level+1, node*v.count()+first+j, weight*share)
			}
		}
	}
	go_(0, 0, 1)
}

func (v *level) count() int { return len(v.at) }

// take makes n nodes at even distances, both ends among them.
func (v *level) take(n int) {
	n = min(n, v.size)
	v.at = v.at[:0:0]
	for i := range n {
		at := 0
		if n > 1 {
			at = int(math.Round(float64(i) * float64(v.size-1) / float64(n-1)))
		}
		if len(v.at) == 0 || v.at[len(v.at)-1] != at {
			v.at = append(v.at, at)
		}
	}
}

// weigh works out, for every index, the cubic through the four nodes around it (Lagrange's form).
func (v *level) weigh() {
	v.first, v.weight = make([]int, v.size), make([][4]float64, v.size)
	for i := range v.size {
		k, exact := slices.BinarySearch(v.at, i)
		if exact {
			v.first[i], v.weight[i] = k, [4]float64{1}
			continue
		}
		order := min(4, len(v.at))
		first := min(max(k-order/2, 0), len(v.at)-order)
		v.first[i] = first
		for j := range order {
			w := 1.0
			for m := range order {
				if m != j {
					w *= float64(i-v.at[first+m]) / float64(v.at[first+j]-v.at[first+m])
				}
			}
			v.weight[i][j] = w
		}
	}
}
