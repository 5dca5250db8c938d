package estimate

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"gemel/protocol"
)

// Plateau says which readings make an efficiency: those whose arm stands within HalfWidthDeg of the
// middle of its flat top. The middle always comes from other readings than the ones it admits,
// because readings picked by their own fluctuations are biased high.
//
// Readings of refined points, which lie where earlier counts were high, have no say about the middle:
// crowded about a fluctuation they would pull it there and so admit the readings that fluctuated.
// Within the half-width of a middle found without them they count like all others, because whether
// one is admitted goes by its angle alone, and its own counts had no part in choosing that.
type Plateau struct {
	Axis         string
	HalfWidthDeg float64
	Centre       *Constant // from elsewhere (an earlier run, the model); nil: from the other passes of this run
}

// choose keeps the readings near the middle. With two visits or more each visit's readings are
// judged by the middle of the others; with one, every second place along the axis by the rest.
func (p Plateau) choose(rows Rows, lights []protocol.Reading, ch channels, windowS float64, no *Refusal) (kept []protocol.Reading, aside []Aside, notes []Condition) {
	if !(p.HalfWidthDeg > 0) {
		no.addf("half_width is %g deg; want a positive angle", p.HalfWidthDeg)
		return nil, nil, nil
	}
	angle := make([]float64, len(lights))
	for i, r := range lights {
		a, ok := angleOf(r, p.Axis)
		if !ok {
			no.addf("reading %d: no angle of %q", r.Sequence, p.Axis)
			return nil, nil, nil
		}
		angle[i] = a
	}
	fold := folds(rows, lights, angle)
	centre := map[int]float64{}
	if p.Centre != nil {
		if !(p.Centre.U > 0) {
			no.addf("the plateau's centre is %g deg without an uncertainty; want its u", p.Centre.Value)
			return nil, nil, nil
		}
		for _, f := range fold {
			centre[f] = p.Centre.Value
		}
		v := p.Centre.Value
		notes = append(notes, Condition{Name: "plateau's centre", Value: &v, Unit: "deg", u: p.Centre.U, Text: "from elsewhere: " + p.Centre.From})
	} else {
		names := slices.Compact(slices.Sorted(slices.Values(fold)))
		if !parted(rows, lights, fold) {
			no.addf("one pass over %d places; want two visits, or places to split, or a centre from elsewhere: the centre must not come from the readings it admits", len(lights))
			return nil, nil, nil
		}
		for _, f := range names {
			var others []protocol.Reading
			for i, r := range lights {
				if fold[i] != f && !rows.refined(r) {
					others = append(others, r)
				}
			}
			v, u, err := middleOfTop(others, p.Axis, ch, windowS)
			if err == nil && u > p.HalfWidthDeg/2 {
				err = fmt.Errorf("it is known to ± %.2g deg only; want both flanks in the sweep, and at most half of half_width", u)
			}
			if err != nil {
				no.addf("the plateau's centre for part %d cannot be found in the other readings: %v", f, err)
				return nil, nil, nil
			}
			centre[f] = v
			notes = append(notes, Condition{Name: fmt.Sprintf("plateau's centre for part %d", f), Value: &v, Unit: "deg", u: u, Text: fmt.Sprintf("± %.2g deg, from the %d readings of the other parts", u, len(others))})
		}
	}
	for i, r := range lights {
		if math.Abs(angle[i]-centre[fold[i]]) <= p.HalfWidthDeg+1e-9 { // the edge counts, whatever the last bit says
			kept = append(kept, r)
		} else {
			aside = append(aside, Aside{r.Sequence, fmt.Sprintf(offPlateau, p.Axis, angle[i], centre[fold[i]], p.HalfWidthDeg)})
		}
	}
	if len(kept) == 0 {
		no.addf("no reading within %g deg of the plateau's centre; want a wider half_width or a finer step", p.HalfWidthDeg)
	}
	return kept, aside, notes
}

// parted says whether the sweep's own readings make two parts at least.
func parted(rows Rows, lights []protocol.Reading, fold []int) bool {
	first := -1
	for i, r := range lights {
		switch {
		case rows.refined(r):
		case first < 0:
			first = fold[i]
		case fold[i] != first:
			return true
		}
	}
	return false
}

// folds gives each reading the part of the run it belongs to: its visit, or where there is only
// one, its place along the axis, even or odd. Readings of refined points, which find no middle, are
// part 1, after whose counts they were placed.
func folds(rows Rows, lights []protocol.Reading, angle []float64) []int {
	fold := make([]int, len(lights))
	var order []int // of the sweep's own
	first, several := -1, false
	for i, r := range lights {
		if rows.refined(r) {
			fold[i] = 1
			continue
		}
		order = append(order, i)
		if r.Visit != nil {
			fold[i] = *r.Visit
		}
		if first < 0 {
			first = fold[i]
		}
		several = several || fold[i] != first
	}
	if several {
		return fold
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch {
		case angle[a] < angle[b]:
			return -1
		case angle[a] > angle[b]:
			return 1
		}
		return 0
	})
	for place, i := range order {
		fold[i] = 1 + place%2
	}
	return fold
}

// middleOfTop fits a flat top with soft edges to the coincidences, with the trigger counts as the
// exposure inside the likelihood: pump drift cancels without a division.
func middleOfTop(lights []protocol.Reading, axis string, ch channels, windowS float64) (centre, u float64, err error) {
	var data []Spot
	for _, r := range lights {
		d, err := ch.read(r)
		if err != nil {
			return 0, 0, err
		}
		a, _ := angleOf(r, axis)
		data = append(data, Spot{AngleDeg: a, Counts: d.c, Exposure: d.s, Known: d.chances * windowS})
	}
	var failed error
	for _, shape := range []PeakShape{FlatTop, GaussianPeak} {
		fit, err := FitPeak(data, shape, nil)
		if err == nil {
			err = fit.inSweep()
		}
		if err == nil {
			return fit.CentreDeg(), fit.Fit.U(centreParam), nil
		}
		failed = err
	}
	return 0, 0, failed
}

// offPlateau is the reason of a reading that a sweep takes to find the plateau, and that is none of it.
const offPlateau = "off the plateau: %s at %.4f deg, centre %.4f ± %.4f deg"

// byDesign says of a reading whether it is off the plateau, which is no fault of it, and where.
func (a Aside) byDesign() (atDeg, centreDeg float64, ok bool) {
	var axis string
	n, _ := fmt.Sscanf(a.Reason, "off the plateau: %s at %f deg, centre %f", &axis, &atDeg, &centreDeg)
	return atDeg, centreDeg, n == 3
}

// asideText lists readings set aside for a person: those off the plateau as stretches, those in a row
// that share a reason as one.
func asideText(list []Aside) string {
	var b strings.Builder
	type stretch struct{ low, high float64 }
	none := stretch{math.Inf(1), math.Inf(-1)}
	side := [2]stretch{none, none} // below the centre, above it
	off := 0
	var rest []Aside
	for _, a := range list {
		at, centre, ok := a.byDesign()
		if !ok {
			rest = append(rest, a)
			continue
		}
		off++
		s := &side[0]
		if at > centre {
			s = &side[1]
		}
		s.low, s.high = math.Min(s.low, at), math.Max(s.high, at)
	}
	if off > 0 {
		var where []string
		for _, s := range side {
			switch {
			case s.low == s.high:
				where = append(where, fmt.Sprintf("%.3f", s.low))
			case s.low < s.high:
				where = append(where, fmt.Sprintf("%.3f to %.3f", s.low, s.high))
			}
		}
		fmt.Fprintf(&b, "  %d %s off the plateau, as planned, at %s deg\n", off, plural(off, "reading"), strings.Join(where, " and "))
	}
	for i := 0; i < len(rest); {
		k := i + 1
		for k < len(rest) && rest[k].Reason == rest[i].Reason {
			k++
		}
		if k == i+1 {
			fmt.Fprintf(&b, "  reading %d: %s\n", rest[i].Sequence, rest[i].Reason)
		} else {
			fmt.Fprintf(&b, "  %d readings, %d to %d: %s\n", k-i, rest[i].Sequence, rest[k-1].Sequence, rest[i].Reason)
		}
		i = k
	}
	return b.String()
}
