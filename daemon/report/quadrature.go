package report

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"gemel/scan/estimate"
)

// leg is a contribution to a budget, drawn on the hypotenuse of those before it.
type leg struct {
	row  estimate.Row
	from place
	to   place
}

// legs lays a budget out so that the way from the start to the end of the last leg is the combined
// standard uncertainty: each leg stands at right angles on the running hypotenuse, or bent as far as
// its covariances with those before it ask for, by the law of cosines. The largest comes first.
func legs(rows []estimate.Row) []leg {
	var list []leg
	between := map[[2]string]float64{} // what a pair's covariance adds to the variance
	for _, row := range rows {
		if !row.Covariance {
			list = append(list, leg{row: row})
			continue
		}
		a, z, ok := strings.Cut(strings.TrimSuffix(strings.TrimPrefix(row.Symbol, "Cov("), ")"), ", ")
		if ok {
			v := math.Copysign(row.Contribution*row.Contribution, row.Contribution)
			between[[2]string{a, z}], between[[2]string{z, a}] = v, v
		}
	}
	slices.SortStableFunc(list, func(a, b leg) int {
		switch {
		case a.row.Contribution > b.row.Contribution:
			return -1
		case a.row.Contribution < b.row.Contribution:
			return 1
		}
		return 0
	})
	var end place
	for i := range list {
		c, v := list[i].row.Contribution, 0.
		for _, before := range list[:i] {
			v += between[[2]string{before.row.Symbol, list[i].row.Symbol}]
		}
		list[i].from = end
		h := math.Hypot(end.x, end.y)
		if h == 0 || c == 0 {
			end.x += c
		} else {
			bend := math.Max(-1, math.Min(1, v/(2*h*c)))
			along, aside := c*bend/h, c*math.Sqrt(1-bend*bend)/h
			end = place{end.x + along*end.x - aside*end.y, end.y + along*end.y + aside*end.x}
		}
		list[i].to = end
	}
	return list
}

// numbered is the least share of the whole, as a length, that a leg must have to get a number.
const numbered = 0.07

// quadrature draws a budget as legs on the running hypotenuse, with the list of those that can be seen.
func (s *sheet) quadrature(r estimate.Result) {
	all := legs(r.Budget)
	if len(all) < 2 || r.U == nil || !(*r.U > 0) {
		return
	}
	s.heading("The budget in quadrature")
	s.paragraph("Each contribution to u stands on the hypotenuse of those before it, bent where the two are correlated; the thick line is u.")
	low, high := place{}, place{}
	for _, l := range all {
		low, high = place{math.Min(low.x, l.to.x), math.Min(low.y, l.to.y)}, place{math.Max(high.x, l.to.x), math.Max(high.y, l.to.y)}
	}
	high.x = math.Max(high.x, *r.U)
	const wide, tall, beside = sheetWidth - 2*margin - 110, 210., 80. // beside it stands the name of the last
	scale := math.Min(wide/(high.x-low.x), tall/math.Max(high.y-low.y, 1e-300))
	top := s.y + 26
	foot := top + (high.y-low.y)*scale
	x := func(v float64) float64 { return margin + beside + (v-low.x)*scale }
	y := func(v float64) float64 { return foot - (v-low.y)*scale }
	end := all[len(all)-1].to
	for _, l := range all[1:] {
		s.line(`<path d="M%.1f %.1fL%.1f %.1f" stroke-width="0.4" stroke-dasharray="1 3"/>`, x(0), y(0), x(l.from.x), y(l.from.y))
	}
	// From the end of u down to the scale on which it is read.
	radius := *r.U * scale
	s.line(`<path d="M%.1f %.1fA%.1f %.1f 0 %d 1 %.1f %.1f" stroke-width="0.5" stroke-dasharray="4 3"/>`, x(end.x), y(end.y), radius, radius, map[bool]int{true: 1}[end.y < 0], x(*r.U), y(0))
	for i, l := range all {
		s.line(`<path d="M%.1f %.1fL%.1f %.1f" stroke-width="1.4"/>`, x(l.from.x), y(l.from.y), x(l.to.x), y(l.to.y))
		if l.row.Contribution < numbered**r.U {
			continue
		}
		// Within, as seen from the start; the first leg, which leaves it, gets its number above.
		mid := place{(l.from.x + l.to.x) / 2, (l.from.y + l.to.y) / 2}
		out := place{mid.x / math.Hypot(mid.x, mid.y), mid.y / math.Hypot(mid.x, mid.y)}
		if i == 0 {
			out = place{0, -1} // the others come round above it
		}
		s.text(x(mid.x)-12*out.x, y(mid.y)+12*out.y+4.5, "middle", fmt.Sprint(i+1))
	}
	s.line(`<path d="M%.1f %.1fL%.1f %.1f" stroke-width="2.6"/>`, x(0), y(0), x(end.x), y(end.y))
	// On the side that no leg is on.
	across := place{-end.y / *r.U, end.x / *r.U}
	anchor := "end"
	if across.x > 0 {
		anchor = "start"
	}
	s.text(x(end.x*0.55)+10*across.x, y(end.y*0.55)-10*across.y+4.5, anchor, "u "+short(*r.U))
	axis := foot + 24
	s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.8"/>`, x(0), axis, math.Max(x(*r.U), x(high.x)))
	for _, v := range spaced(0, math.Max(*r.U, high.x), (math.Max(*r.U, high.x))*scale) {
		s.line(`<path d="M%.1f %.1fv5" stroke-width="0.8"/>`, x(v), axis)
		s.text(x(v), axis+18, "middle", plain(v))
	}
	s.y = axis + 22
	unit := r.Unit
	s.row("", "contribution", "u / "+unit, "share")
	few, rest := 0, 0.
	for i, l := range all {
		if l.row.Contribution < numbered**r.U {
			few, rest = few+1, math.Hypot(rest, l.row.Contribution)
			continue
		}
		s.row(fmt.Sprint(i+1), l.row.Quantity, short(l.row.Contribution), fixed(100*l.row.Share, 1)+" %")
	}
	if few > 0 {
		s.row("", fmt.Sprintf("%d smaller ones together", few), short(rest), fixed(100*rest*rest/(*r.U**r.U), 1)+" %")
	}
	for _, row := range r.Budget {
		if row.Covariance && math.Abs(row.Contribution) >= numbered**r.U {
			s.row("", "bent: "+row.Quantity, "", fixed(100*row.Share, 1)+" %")
		}
	}
	s.row("", "combined", short(*r.U), "100.0 %")
}

// row is one line of a table: number, name, and two figures at their places.
func (s *sheet) row(number, name, figure, share string) {
	const most = 34
	rows := wrapped(name, most)
	s.y += lineHigh
	s.text(margin+16, s.y, "end", number)
	s.text(sheetWidth-margin-78, s.y, "end", figure)
	s.text(sheetWidth-margin, s.y, "end", share)
	for i, part := range rows {
		if i > 0 {
			s.y += lineHigh
		}
		s.text(margin+24, s.y, "start", part)
	}
}

// short is a number with two digits that say something, plainly where that is short.
func short(v float64) string {
	if v == 0 || math.Abs(v) >= 1e4 || math.Abs(v) < 1e-5 {
		return fmt.Sprintf("%.2g", v)
	}
	return fixed(v, int(math.Max(0, 1-math.Floor(math.Log10(math.Abs(v))))))
}
