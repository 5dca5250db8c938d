package route

import (
	"fmt"
	"math/bits"
	"slices"
	"strings"

	"gemel/protocol/unit"
	"gemel/scan"
)

// mover is an axis on its way, with the places it comes by.
type mover struct {
	axis   int
	back   bool         // it has to take up its backlash: it comes by its approach
	rising bool         // and then goes upwards
	places []unit.Angle // of stand, approach and goal, then detours
}

// The places every mover has.
const (
	stand = iota
	begin
	goal
)

func newMover(a scan.Axis, axis int, from, target unit.Angle) mover {
	return mover{axis: axis, back: nearerThanApproach(a, from, target), rising: a.Rising, places: []unit.Angle{from, approach(a, target), target}}
}

// next is where a mover goes from a place when it makes no detour.
func (m mover) next(place int) int {
	if place == stand && m.back {
		return begin
	}
	return goal
}

// may says whether a mover may go from one place straight to another, detours included: its goal
// only from beyond the place where the approach begins.
func (m mover) may(from, to int) bool {
	switch {
	case from == to || from == goal || m.places[from] == m.places[to] && to != goal:
		return false
	case to != goal || m.places[begin] == m.places[goal]:
		return true
	}
	return m.rising && m.places[from] <= m.places[begin] || !m.rising && m.places[from] >= m.places[begin]
}

// step is a mover that goes to one of its places.
type step struct{ mover, to int }

// way finds the legs. Fewest legs first; among those, as much as possible at once and early.
func (b *bench) way(fences []fence, movers []mover, at []unit.Angle) ([][]scan.AxisTarget, error) {
	if len(movers) == 0 {
		return nil, nil
	}
	s := &search{movers: movers, at: at, fences: fences, from: make([]unit.Angle, len(at)), to: make([]unit.Angle, len(at))}
	first := s.together()
	if first == nil {
		return s.legs(b, s.atOnce()), nil
	}
	var tied, free []mover
	for _, m := range movers {
		if s.tied(m.axis) {
			tied = append(tied, m)
		} else {
			free = append(free, m)
		}
	}
	if len(tied) > mostTied {
		return nil, fmt.Errorf("%d axes that keep-outs tie together in one move; want %d at most, or a way on which all may go at once: %w",
			len(tied), mostTied, first.conflict(b))
	}
	s.movers = tied
	var path [][]step
	if wall := s.wall(); wall != nil {
		first = wall
	} else if path = s.find(s.inTurn); path == nil && len(tied) <= mostDetours {
		s.addDetours(b)
		path = s.find(s.byDetours)
	}
	if path == nil {
		return nil, fmt.Errorf("%s: no safe order of moving: %w", b.told(tied), first.conflict(b))
	}
	legs := s.legs(b, path)
	rest := &search{movers: free}
	for i, leg := range rest.legs(b, rest.atOnce()) {
		if i == len(legs) {
			legs = append(legs, nil)
		}
		legs[i] = append(legs[i], leg...)
	}
	return legs, nil
}

// Bounds of the search: places to be looked at grow as a power of the number of axes.
const (
	mostAtOnce  = 4 // tied axes of which any set may share a leg; beyond, each goes alone
	mostTied    = 8
	mostDetours = 4
	mostNodes   = 5_000 // some ten milliseconds at worst, as nobody can interrupt it
)

// search looks for a way through the places of its movers. A node is one place of each, as a number
// whose digits are the places.
type search struct {
	movers   []mover
	fences   []fence
	at       []unit.Angle
	from, to []unit.Angle // of the leg looked at, all axes of the bench
}

// offence is a leg that a fence forbids.
type offence struct {
	fence    fence
	from, to []unit.Angle
}

func (o *offence) conflict(b *bench) *Conflict { return b.conflict(o.fence, o.from, o.to) }

// atOnce is the way on which all movers go at once: back those that must, on the rest, then the
// approach of those that went back.
func (s *search) atOnce() [][]step {
	var first, last []step
	for i, m := range s.movers {
		first = append(first, step{i, m.next(stand)})
		if m.back {
			last = append(last, step{i, goal})
		}
	}
	switch {
	case first == nil:
		return nil
	case last == nil:
		return [][]step{first}
	}
	return [][]step{first, last}
}

// together returns what forbids that all movers go at once, or nil.
func (s *search) together() *offence {
	copy(s.from, s.at)
	copy(s.to, s.at)
	for _, m := range s.movers {
		s.to[m.axis] = m.places[m.next(stand)]
	}
	if o := s.offence(); o != nil {
		return o
	}
	copy(s.from, s.to)
	for _, m := range s.movers {
		s.to[m.axis] = m.places[goal]
	}
	return s.offence()
}

// offence returns the first fence that the leg from s.from to s.to may cross, or nil.
func (s *search) offence() *offence {
	for i := range s.fences {
		if s.fences[i].crossed(s.from, s.to) {
			return &offence{s.fences[i], slices.Clone(s.from), slices.Clone(s.to)}
		}
	}
	return nil
}

func (s *search) clear() bool {
	for i := range s.fences {
		if s.fences[i].crossed(s.from, s.to) {
			return false
		}
	}
	return true
}

// tied says whether a fence is about an axis.
func (s *search) tied(axis int) bool {
	return slices.ContainsFunc(s.fences, func(f fence) bool { return f.axis[0] == axis || f.pair && f.axis[1] == axis })
}

// wall returns a fence that forbids what an axis must pass on every way, whatever the other movers
// do: one about this mover and axes that stand.
func (s *search) wall() *offence {
	moves := func(axis int) bool {
		return slices.ContainsFunc(s.movers, func(m mover) bool { return m.axis == axis })
	}
	for _, m := range s.movers {
		for _, f := range s.fences {
			other := f.axis[0]
			if other == m.axis {
				other = f.axis[1]
			} else if !f.pair || f.axis[1] != m.axis {
				continue
			}
			if f.pair && moves(other) {
				continue
			}
			for p := stand; p != goal; p = m.next(p) {
				from, to := slices.Clone(s.at), slices.Clone(s.at)
				from[m.axis], to[m.axis] = m.places[p], m.places[m.next(p)]
				if f.crossed(from, to) {
					return &offence{f, from, to}
				}
			}
		}
	}
	return nil
}

// inTurn yields the legs that bring some movers one place on, large sets first.
func (s *search) inTurn(node []int, try func([]step) bool) {
	n := len(s.movers)
	most := 1
	if n <= mostAtOnce {
		most = n
	}
	for size := most; size > 0; size-- {
	sets:
		for set := uint(1); set < 1<<n; set++ {
			if bits.OnesCount(set) != size {
				continue
			}
			var leg []step
			for i, m := range s.movers {
				if set>>i&1 == 0 {
					continue
				}
				if node[i] == goal {
					continue sets
				}
				leg = append(leg, step{i, m.next(node[i])})
			}
			if !try(leg) {
				return
			}
		}
	}
}

// byDetours yields the legs of one mover from its place to any other.
func (s *search) byDetours(node []int, try func([]step) bool) {
	for i, m := range s.movers {
		for p := range m.places {
			if m.may(node[i], p) && !try([]step{{i, p}}) {
				return
			}
		}
	}
}

// find returns the way with the fewest legs, or nil.
func (s *search) find(moves func(node []int, try func([]step) bool)) [][]step {
	nodes := 1
	for _, m := range s.movers {
		nodes *= len(m.places)
	}
	number := func(node []int) (n int) {
		for i, m := range s.movers {
			n = n*len(m.places) + node[i]
		}
		return n
	}
	type come struct {
		from int
		leg  []step
	}
	came := make([]come, nodes)
	start, end := make([]int, len(s.movers)), make([]int, len(s.movers))
	for i := range end {
		end[i] = goal
	}
	came[number(start)].leg = []step{}
	node, to := make([]int, len(s.movers)), make([]int, len(s.movers))
	for queue := []int{number(start)}; len(queue) > 0 && came[number(end)].leg == nil; queue = queue[1:] {
		for i, n := len(s.movers)-1, queue[0]; i >= 0; i-- {
			node[i], n = n%len(s.movers[i].places), n/len(s.movers[i].places)
		}
		copy(s.from, s.at)
		for i, m := range s.movers {
			s.from[m.axis] = m.places[node[i]]
		}
		moves(node, func(leg []step) bool {
			copy(to, node)
			copy(s.to, s.from)
			for _, st := range leg {
				to[st.mover] = st.to
				s.to[s.movers[st.mover].axis] = s.movers[st.mover].places[st.to]
			}
			if n := number(to); came[n].leg == nil && s.clear() {
				came[n] = come{queue[0], leg}
				queue = append(queue, n)
			}
			return came[number(end)].leg == nil
		})
	}
	if came[number(end)].leg == nil {
		return nil
	}
	var path [][]step
	for n := number(end); n != number(start); n = came[n].from {
		path = append(path, came[n].leg)
	}
	slices.Reverse(path)
	return path
}

// addDetours gives every mover the places where a way can turn: the edges of the fences, seen from
// where the others stand and go, and its limits.
func (s *search) addDetours(b *bench) {
	most := len(s.movers[0].places)
	for power(most+1, len(s.movers)) <= mostNodes {
		most++
	}
	others := func(axis int) []unit.Angle {
		for _, m := range s.movers {
			if m.axis == axis {
				return m.places[:goal+1]
			}
		}
		return s.at[axis : axis+1]
	}
	for i := range s.movers {
		m := &s.movers[i]
		a := b.axes[m.axis]
		add := func(p unit.Angle) {
			there := m.places[stand] == p || m.places[begin] == p || slices.Contains(m.places[goal+1:], p)
			if a.Limits(p) && !there && len(m.places) < most {
				m.places = append(m.places, p)
			}
		}
		for _, f := range s.fences {
			for n := range f.count() {
				switch {
				case f.axis[n] != m.axis:
				case !f.band:
					add(f.low[n])
					add(f.high[n])
				case f.pair:
					for _, v := range others(f.axis[1-n]) {
						f.edges(n, f.side[1-n]*v, a, add)
					}
				default:
					f.edges(n, 0, a, add)
				}
			}
		}
		add(a.Low)
		add(a.High)
	}
}

func power(x, n int) int {
	p := 1
	for range n {
		p *= x
	}
	return p
}

// edges finds where the n-th axis of a band is on its edge, the other adding so much to the sum.
func (f *fence) edges(n int, other unit.Angle, a scan.Axis, found func(unit.Angle)) {
	middle := -f.side[n] * other
	for turn := (a.Low-middle)/unit.Turn*unit.Turn - unit.Turn; middle+turn-f.reach <= a.High; turn += unit.Turn {
		found(middle + turn - f.reach)
		found(middle + turn + f.reach)
	}
}

// legs turns steps into targets.
func (s *search) legs(b *bench, path [][]step) [][]scan.AxisTarget {
	legs := make([][]scan.AxisTarget, len(path))
	for i, leg := range path {
		for _, st := range leg {
			m := s.movers[st.mover]
			legs[i] = append(legs[i], scan.AxisTarget{Axis: b.axes[m.axis].Name, Angle: m.places[st.to]})
		}
	}
	return legs
}

// told names movers with their stands and goals.
func (b *bench) told(movers []mover) string {
	var told []string
	for _, m := range movers {
		told = append(told, fmt.Sprintf("%s from %s to %s", b.axes[m.axis].Name, m.places[stand], m.places[goal]))
	}
	return strings.Join(told, ", ")
}
