package report

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/estimate"
)

const panelHigh = 92.

// drift draws each quantity of the references against time, one panel below the other.
func (s *sheet) drift(d estimate.DriftTable, b Beside) {
	s.y += 6
	key := "Circles: change from the first set, with what counting leaves open (u of the one set); line: fitted to all of them"
	if b.plan.Reference != nil {
		key += "; broken lines: how far a set may be from the one it is compared with"
	}
	s.paragraph(key + ".")
	from, to := d.From.Time, d.To.Time
	room := to.Sub(from) / 30
	from, to = from.Add(-room), to.Add(room)
	x := func(t time.Time) float64 {
		return left + float64(t.Sub(from))/float64(to.Sub(from))*(sheetWidth-left-right)
	}
	for _, q := range d.Quantities {
		s.panel(q, b, x, from, to)
	}
	for _, t := range hours(from, to, 6) {
		s.line(`<path d="M%.1f %.1fv5" stroke-width="0.8"/>`, x(t), s.y)
		s.text(x(t), s.y+18, "middle", t.UTC().Format("15:04"))
	}
	s.text((left+sheetWidth-right)/2, s.y+36, "middle", "time / UTC, from "+d.From.UTC().Format(time.DateOnly))
	s.y += 44
	if slices.ContainsFunc(b.night.Holds, func(h Hold) bool { return overlaps(h, from, to) }) {
		s.paragraph("Grey: the run held.")
	}
	for _, one := range b.bad {
		s.paragraph(one.sentence(d, b))
	}
	s.holds(b.night)
}

func overlaps(h Hold, from, to time.Time) bool {
	return h.From.Before(to) && (h.To == nil || h.To.After(from))
}

// panel draws one quantity.
func (s *sheet) panel(q estimate.DriftQuantity, b Beside, x func(time.Time) float64, from, to time.Time) {
	scale, name := percentOrDeg(q)
	s.heading(q.Quantity)
	s.y += lineHigh
	s.text(margin, s.y, "start", fmt.Sprintf("change /%s; line: %s ± %s%s an hour (u)", name, signed(scale*q.PerHour, scale*q.PerHourU), short(scale*q.PerHourU), name))
	bands := bandsOf(q, b)
	low, high := 0., 0.
	take := func(v float64) { low, high = math.Min(low, v), math.Max(high, v) }
	for _, r := range q.Rows {
		take(r.Change - changeU(q, r))
		take(r.Change + changeU(q, r))
	}
	if far := 4 * math.Max(high, -low); len(bands) == 1 && bands[0].half > far {
		// Drawn, the bounds would leave nothing to see of the changes.
		s.y += lineHigh
		s.text(margin, s.y, "start", fmt.Sprintf("bounds of ±%s%s beyond the edges", plain(scale*bands[0].half), name))
		bands = nil
	}
	for _, band := range bands {
		take(band.centre - band.half)
		take(band.centre + band.half)
	}
	top := s.y + 12
	bottom := top + panelHigh
	if room := (high - low) * 0.06; room > 0 {
		low, high = low-room, high+room
	} else {
		low, high = -1e-6, 1e-6
	}
	y := func(v float64) float64 { return bottom - (v-low)/(high-low)*panelHigh }
	for _, h := range b.night.Holds {
		if !overlaps(h, from, to) {
			continue
		}
		a, z := x(later(h.From.Time, from)), x(to)
		if h.To != nil {
			z = x(earlier(h.To.Time, to))
		}
		s.line(`<rect x="%.1f" y="%.1f" width="%.1f" height="%.1f" fill="#ddd" stroke="none"/>`, a, top, math.Max(z-a, 1), panelHigh)
	}
	s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.8"/><path d="M%.1f %.1fH%.1f" stroke-width="0.8"/>`, left, top, bottom, left, bottom, sheetWidth-right)
	s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.4" stroke-dasharray="1 3"/>`, left, y(0), sheetWidth-right)
	for _, v := range ticks(scale*low, scale*high, 2) {
		s.line(`<path d="M%.1f %.1fh-5" stroke-width="0.8"/>`, left, y(v/scale))
		s.text(left-9, y(v/scale)+4.5, "end", plain(v))
	}
	for _, band := range bands {
		for _, side := range []float64{-1, 1} {
			s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.8" stroke-dasharray="6 3"/>`, x(later(band.from, from)), y(band.centre+side*band.half), x(earlier(band.to, to)))
		}
	}
	first, last := q.Rows[0].At.Time, q.Rows[len(q.Rows)-1].At.Time
	line := lineThrough(q)
	s.line(`<path d="M%.1f %.1fL%.1f %.1f" stroke-width="1.3"/>`, x(first), y(line(first)), x(last), y(line(last)))
	for _, r := range q.Rows {
		u := changeU(q, r)
		at := r.At.Time
		s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.7"/><circle cx="%.1f" cy="%.1f" r="2.8" fill="#fff"/>`, x(at), y(r.Change-u), y(r.Change+u), x(at), y(r.Change))
		if slices.ContainsFunc(b.bad, func(one badSet) bool { return one.set == r.Set && slices.Contains(one.beyond, q.Quantity) }) {
			s.line(`<circle cx="%.1f" cy="%.1f" r="6.5" stroke-width="1.3"/>`, x(at), y(r.Change))
			s.text(x(at), y(r.Change)+map[bool]float64{true: -11, false: 20}[r.Change < 0], "middle", fmt.Sprint(r.Set))
		}
	}
	s.y = bottom
}

// allowed is how far a quantity may be from its centre, over a time.
type allowed struct {
	from, to     time.Time
	centre, half float64
}

// bandsOf are the bounds of a quantity, about each of the sets that others were compared with.
func bandsOf(q estimate.DriftQuantity, b Beside) []allowed {
	if b.plan.Reference == nil {
		return nil
	}
	bounds := b.plan.Reference.Bounds
	half := bounds.Ratio
	switch q.Unit {
	case "Hz":
		half = bounds.Singles
	case "deg":
		half = bounds.Centre.Degrees()
	}
	if half == 0 {
		return nil
	}
	about := func(set int) (allowed, bool) {
		for _, r := range q.Rows {
			if r.Set == set {
				one := allowed{from: r.At.Time, centre: r.Change, half: half}
				if q.ChangeUnit == "1" {
					one.half *= 1 + r.Change // relative to that set, not to the first
				}
				return one, true
			}
		}
		return allowed{}, false
	}
	var list []allowed
	add := func(set int) {
		one, ok := about(set)
		if !ok || len(list) > 0 && !one.from.After(list[len(list)-1].from) {
			return
		}
		if len(list) > 0 {
			list[len(list)-1].to = one.from
		}
		one.to = q.Rows[len(q.Rows)-1].At.Time
		list = append(list, one)
	}
	add(q.Rows[0].Set)
	for _, one := range b.bad {
		add(one.against)
	}
	return list
}

// sentence says what was bad about a set, and what the whole night makes of it.
func (one badSet) sentence(d estimate.DriftTable, b Beside) string {
	text := fmt.Sprintf("Ringed %d: the run called that set bad against set %d, by %s.", one.set, one.against, strings.Join(one.beyond, ", "))
	for _, q := range d.Quantities {
		if !slices.Contains(one.beyond, q.Quantity) {
			continue
		}
		if !chance(q, b, one) {
			return text
		}
	}
	return text + " By all sets together nothing went beyond a bound then: it may have been a false alarm."
}

// chance says whether the line through all sets keeps the bound where one of them did not, and counting
// explains the scatter about it.
func chance(q estimate.DriftQuantity, b Beside, one badSet) bool {
	if q.Scatter.Significant {
		return false
	}
	line := lineThrough(q)
	for _, r := range q.Rows {
		if r.Set != one.set {
			continue
		}
		for _, band := range slices.Backward(bandsOf(q, b)) {
			if !r.At.Before(band.from) {
				return math.Abs(line(r.At.Time)-line(band.from)) <= band.half
			}
		}
	}
	return false
}

// lineThrough is the line fitted to a quantity's rows, as a change: the weighted mean and the slope.
func lineThrough(q estimate.DriftQuantity) func(time.Time) float64 {
	var sum, hours, change float64
	start := q.Rows[0].At.Time
	for _, r := range q.Rows {
		w := 1 / (r.U * r.U)
		sum, hours, change = sum+w, hours+w*r.At.Sub(start).Hours(), change+w*r.Change
	}
	return func(t time.Time) float64 { return change/sum + q.PerHour*(t.Sub(start).Hours()-hours/sum) }
}

// changeU is what counting leaves open of one row, in the unit of its change.
func changeU(q estimate.DriftQuantity, r estimate.DriftRow) float64 {
	if q.ChangeUnit == "1" {
		return r.U / q.Rows[0].Value
	}
	return r.U
}

// leading is the quantity that shows a drift best: coincidences per count where there are any.
func leading(d estimate.DriftTable) estimate.DriftQuantity {
	for _, q := range d.Quantities {
		if q.Unit == "1" {
			return q
		}
	}
	return d.Quantities[0]
}

// percentOrDeg is the factor and unit in which changes are read.
func percentOrDeg(q estimate.DriftQuantity) (scale float64, name string) {
	if q.ChangeUnit == "1" {
		return 100, " %"
	}
	return 1000, " mdeg"
}

// signed is a value with as many decimals as two digits of its uncertainty need.
func signed(v, u float64) string {
	places := 0
	if u > 0 {
		places = int(math.Max(0, 1-math.Floor(math.Log10(u))))
	}
	return fixed(v, places)
}

// sentence says when and why a run waited.
func (h Hold) sentence(when func(protocol.Time) string) string {
	span := "held from " + when(h.From) + ", still"
	if h.To != nil {
		lasted := "less than 1 s"
		if d := h.To.Sub(h.From.Time).Round(time.Second); d > 0 {
			lasted = unit.Span(d)
		}
		span = fmt.Sprintf("held from %s to %s (%s)", when(h.From), when(*h.To), lasted)
	}
	return span + ": " + strings.Join(h.Why, "; ")
}

func later(a, b time.Time) time.Time {
	if a.After(b) {
		return a
	}
	return b
}
