package recipe

import (
	"fmt"
	"math/big"
	"slices"
	"strconv"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Refine asks for points after the first pass, where the counts say so.
type Refine struct {
	Along  drivers.AxisName
	Of     string     // as written: a detector or a channel
	Below  unit.Angle // 0: a grid about the maximum
	AtMost int
	Within time.Duration // 0: bounded by AtMost alone

	around                    Values // the grid, about zero
	at, alongAt, ofAt, mostAt strict.Place
}

func readRefine(v strict.Value) *Refine {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	along, of, most, within := m.Need("along"), m.Need("of"), m.Need("at_most"), m.Opt("within")
	around, span, step, below := m.Opt("around"), m.Opt("span"), m.Opt("step"), m.Opt("u_below")
	r := &Refine{Along: drivers.AxisName(along.Token()), Of: of.Token(), at: v.Place(), alongAt: along.Place(), ofAt: of.Place(), mostAt: most.Place()}
	r.AtMost = readPoints(most)
	r.Within = within.Duration(time.Second, maxGiveUp, 0)
	const want = "around: maximum, span and step; or u_below"
	switch grid := around.Given() || span.Given() || step.Given(); {
	case !m.Given():
	case grid && below.Given():
		m.Fail("points added in two ways", "one of: "+want)
	case grid:
		m.Need("around")
		m.Need("span")
		m.Need("step")
		around.Choice([]string{"maximum"})
		r.around = readSpan(number{value: new(big.Rat)}, span, step, around, true)
		if n := r.around.Len(); most.Good() && n > r.AtMost {
			most.Fail(fmt.Sprintf("%d points for a grid of %d", r.AtMost, n), "at least as many as the grid has")
		}
	case below.Given():
		if r.Below = below.Angle(0, unit.Turn/4); below.Good() && r.Below == 0 {
			below.Failf("a standard uncertainty above zero")
		}
	default:
		m.Fail("points added nowhere", "one of: "+want)
	}
	m.Done()
	return r
}

// maxRefined bounds what a refinement may add.
const maxRefined = 10_000

func readPoints(v strict.Value) int {
	want := fmt.Sprintf(`a number of points from 1 to %d, such as "40 points"`, maxRefined)
	if v.TextLike(want); !v.Good() {
		return 0
	}
	var n int
	if m := v.Match(everyPoints); m != nil {
		n, _ = strconv.Atoi(m[1])
	}
	if n == 0 || n > maxRefined {
		v.Failf("%s", want)
	}
	return n
}

// refine works the refinement out for one bench.
func (r *Recipe) refine(f Facts) (*scan.Refine, []protocol.Finding) {
	q := r.Refine
	if q == nil {
		return nil, nil
	}
	out := &scan.Refine{Along: q.Along, Below: q.Below, AtMost: q.AtMost, Within: q.Within}
	var findings, found []protocol.Finding
	out.Of, _, findings = f.channel(q.Of, q.ofAt)
	need, what := 3, "a maximum between them"
	if q.Below > 0 {
		need, what = profiles["gaussian"], "a position fitted to them"
	}
	if _, found = f.axis(q.Along, q.alongAt); found == nil {
		found = r.swept(q.Along, q.alongAt, need, what)
	}
	findings = append(findings, found...)
	if q.around.Len() > 0 {
		low, high := Entry{Values: q.around}.offsets()
		out.Span = high - low
		n, _ := q.around.at(1)
		out.Step = n.angle() - low
		if c, ok := r.column(q.Along); ok {
			if axis, found := f.axis(q.Along, q.alongAt); found == nil && out.Span > axis.High-axis.Low {
				findings = append(findings, q.at.Finding(fmt.Sprintf("a span of %s", out.Span), fmt.Sprintf("less than the %s within the soft limits of %s", axis.High-axis.Low, c.Axis)))
			}
		}
	}
	if len(r.Sweep) > 0 && int(r.visits().Int64())+q.AtMost*r.Repeat.Times > MaxVisits {
		findings = append(findings, q.mostAt.Finding(fmt.Sprintf("%s visits and %d points more, each visited %d times", r.visits(), q.AtMost, r.Repeat.Times), fmt.Sprintf("at most %d in all", MaxVisits)))
	}
	if len(findings) > 0 {
		return nil, findings
	}
	return out, nil
}

// channel finds the channel that a detector's or a channel's name means, and says whether it counts
// coincidences.
func (f Facts) channel(name string, at strict.Place) (c drivers.Channel, pairs bool, findings []protocol.Finding) {
	if _, pairs := f.Coincidences[drivers.Channel(name)]; pairs {
		return drivers.Channel(name), true, nil
	}
	c, findings = f.single(name, at, "", "")
	if findings != nil {
		names := append(f.singles(), f.coincidences()...)
		slices.Sort(names)
		findings = []protocol.Finding{at.Finding(fmt.Sprintf("no channel and no detector %q on this bench", name), known(name, names))}
	}
	return c, false, findings
}
