package report

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan/estimate"
)

// grains is how many readings a spine shows one by one; of more it shows every so many.
const grains = 1200

// spine draws the night from its readings: angle across, time downward, both arms as mirrored tracks
// beside the pump, darks as notches in it, holds as white space, references in a column of their own,
// where drift is a lean.
func (s *sheet) spine(b Beside) {
	all := b.rows.Readings
	if len(all) < 2 || b.tracks == [2]drivers.AxisName{} {
		return
	}
	from, to := all[0].StartedAt.Time, all[len(all)-1].EndedAt.Time
	if !to.After(from) {
		return
	}
	s.heading("The night")
	const clocks, column = 56., 96. // for the hours, and for the references
	const tall = 400.
	top := s.y + 44
	middle := (clocks + sheetWidth - column) / 2
	y := func(t time.Time) float64 { return top + tall*float64(t.Sub(from))/float64(to.Sub(from)) }
	for _, t := range hours(from, to, 8) {
		s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.4" stroke-dasharray="1 5"/>`, clocks, y(t), sheetWidth-margin)
		s.text(clocks-8, y(t)+4.5, "end", t.UTC().Format("15:04"))
	}
	s.text(clocks-8, top-12, "end", "UTC")
	key := []string{}
	ends := [2][2]float64{{middle - 22, clocks + 14}, {middle + 22, sheetWidth - column - 14}}
	for i, axis := range b.tracks {
		if name := s.track(b, axis, [2]string{"S", "I"}[i], ends[i], top, y); name != "" {
			key = append(key, name)
		}
	}
	s.pump(b, middle, y, to)
	key = append(key, "in the middle the pump, thick while light is counted")
	kinds := map[protocol.ReadingKind]bool{}
	for _, r := range all {
		h := math.Max(1.4, y(r.EndedAt.Time)-y(r.StartedAt.Time))
		switch r.Kind {
		case protocol.Dark:
			s.line(`<path d="M%.1f %.1fl-12 %.1fl12 %.1fz" fill="#222" stroke="none"/>`, middle+1.6, y(r.StartedAt.Time)-2, h/2+2, h/2+2)
		case protocol.Background:
			s.line(`<path d="M%.1f %.1fl12 %.1fl-12 %.1fz" fill="#fff" stroke-width="0.9"/>`, middle-1.6, y(r.StartedAt.Time)-2, h/2+2, h/2+2)
		}
		kinds[r.Kind] = true
	}
	if kinds[protocol.Dark] {
		key = append(key, "filled notch: dark")
	}
	if kinds[protocol.Background] {
		key = append(key, "open notch: background")
	}
	if b.drift != nil {
		key = append(key, s.lean(*b.drift, sheetWidth-column/2, top, y))
	}
	s.y = top + tall + 8
	s.paragraph(strings.Join(key, "; ") + ".")
	s.holds(b.night)
}

// track draws where an arm stood, and returns what the key says of it.
func (s *sheet) track(b Beside, axis drivers.AxisName, letter string, ends [2]float64, top float64, y func(time.Time) float64) string {
	low, high := math.Inf(1), math.Inf(-1)
	light := 0
	for _, r := range b.rows.Readings {
		if at, ok := stoodAt(r, axis); ok && r.Kind == protocol.Light {
			low, high, light = math.Min(low, at), math.Max(high, at), light+1
		}
	}
	if light == 0 {
		return ""
	}
	middling := high-low < 1e-3 // an encoder's last digits are no sweep
	x := func(at float64) float64 {
		if middling {
			return (ends[0] + ends[1]) / 2
		}
		return ends[0] + (at-low)/(high-low)*(ends[1]-ends[0])
	}
	s.lettered((ends[0]+ends[1])/2, top-28, "middle", ` font-family="serif" font-size="18"`, letter)
	if middling {
		s.text(x(low), top-10, "middle", fixed((low+high)/2, 3)+"°")
	} else {
		s.text(x(low), top-10, "middle", fixed(low, 2)+"°")
		s.text(x(high), top-10, "middle", fixed(high, 2)+"°")
	}
	var d strings.Builder
	open, n := false, 0
	var before time.Time
	every := light/grains + 1
	for _, r := range b.rows.Readings {
		at, ok := stoodAt(r, axis)
		if !ok || r.Kind != protocol.Light {
			open = open && r.Kind != protocol.Reference
			continue
		}
		n++
		if n%every != 0 {
			continue
		}
		held := slices.ContainsFunc(b.night.Holds, func(h Hold) bool { return h.From.After(before) && h.From.Before(r.StartedAt.Time) })
		pen := byte('L')
		if !open || held {
			pen, open = 'M', true
		}
		before = r.StartedAt.Time
		fmt.Fprintf(&d, "%c%.1f %.1fV%.1f", pen, x(at), y(r.StartedAt.Time), y(r.EndedAt.Time))
	}
	s.line(`<path d="%s" stroke-width="0.5"/>`, d.String())
	n = 0
	for _, r := range b.rows.Readings {
		at, ok := stoodAt(r, axis)
		if !ok || r.Kind != protocol.Light {
			continue
		}
		n++
		if n%every != 0 {
			continue
		}
		fill := "#222"
		if !r.Accepted || b.rows.Doubtful[r.Sequence] != "" {
			fill = "#fff"
		}
		s.line(`<circle cx="%.1f" cy="%.1f" r="1.7" stroke-width="0.7" fill="%s"/>`, x(at), (y(r.StartedAt.Time)+y(r.EndedAt.Time))/2, fill)
	}
	text := letter + " " + string(axis) + ", a grain a reading, hollow where it was set aside or is doubtful"
	if every > 1 {
		text = fmt.Sprintf("%s %s, a grain for every %d readings, hollow where it was set aside or is doubtful", letter, axis, every)
	}
	if letter != "S" {
		text = letter + " " + string(axis)
	}
	return text
}

// pump draws the line in the middle: thin, thick while light is counted, absent while the run holds, and
// with a bar at the end of a run that finished or was stopped.
func (s *sheet) pump(b Beside, x float64, y func(time.Time) float64, last time.Time) {
	at := b.rows.Readings[0].StartedAt.Time
	for _, h := range b.night.Holds {
		until := last
		if h.To != nil {
			until = h.To.Time
		}
		if until.Before(at) || h.From.After(last) {
			continue
		}
		if h.From.After(at) {
			s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.8"/>`, x, y(at), y(h.From.Time))
		}
		at = earlier(until, last)
	}
	if at.Before(last) {
		s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.8"/>`, x, y(at), y(last))
	}
	var d strings.Builder
	for _, r := range b.rows.Readings {
		if r.Kind != protocol.Dark && r.Accepted {
			fmt.Fprintf(&d, "M%.1f %.1fV%.1f", x, y(r.StartedAt.Time), y(r.EndedAt.Time))
		}
	}
	s.line(`<path d="%s" stroke-width="3.2"/>`, d.String())
	if b.night.State == protocol.Finished || b.night.State == protocol.Stopped {
		s.line(`<path d="M%.1f %.1fh20" stroke-width="2"/>`, x-10, y(last)+1)
	}
}

// lean draws the change of the references' first quantity, and returns what the key says of it.
func (s *sheet) lean(d estimate.DriftTable, x, top float64, y func(time.Time) float64) string {
	q := leading(d)
	most := 0.
	for _, r := range q.Rows {
		most = math.Max(most, math.Abs(r.Change)+changeU(q, r))
	}
	const half = 32.
	at := func(change float64) float64 { return x + change/most*half }
	s.lettered(x, top-28, "middle", ` font-family="serif" font-size="18"`, "R")
	scale, unit := percentOrDeg(q)
	s.text(x, top-10, "middle", "±"+short(scale*most)+unit)
	s.line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.5" stroke-dasharray="1 3"/>`, x, y(q.Rows[0].At.Time), y(q.Rows[len(q.Rows)-1].At.Time))
	var line strings.Builder
	pen := byte('M')
	for _, r := range q.Rows {
		fmt.Fprintf(&line, "%c%.1f %.1f", pen, at(r.Change), y(r.At.Time))
		pen = 'L'
	}
	s.line(`<path d="%s" stroke-width="0.8"/>`, line.String())
	for _, r := range q.Rows {
		u := changeU(q, r)
		s.line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.7"/><circle cx="%.1f" cy="%.1f" r="2.6" fill="#fff"/>`, at(r.Change-u), y(r.At.Time), at(r.Change+u), at(r.Change), y(r.At.Time))
	}
	return "R references: " + q.Quantity + ", change from the first set"
}

// holds lists why a run waited.
func (s *sheet) holds(n Night) {
	for i, h := range n.Holds {
		if i == 5 {
			s.paragraph(fmt.Sprintf("and %d more holds", len(n.Holds)-i))
			return
		}
		s.paragraph(h.sentence(inUTC))
	}
}

// hours are round moments between two, at most so many.
func hours(from, to time.Time, most int) (list []time.Time) {
	every := 30 * 24 * time.Hour
	for _, e := range []time.Duration{time.Second, 5 * time.Second, 15 * time.Second, 30 * time.Second, time.Minute, 2 * time.Minute, 5 * time.Minute, 10 * time.Minute, 15 * time.Minute, 30 * time.Minute,
		time.Hour, 2 * time.Hour, 3 * time.Hour, 6 * time.Hour, 12 * time.Hour, 24 * time.Hour, 7 * 24 * time.Hour} {
		if to.Sub(from) <= time.Duration(most)*e {
			every = e
			break
		}
	}
	for t := from.UTC().Truncate(every); !t.After(to); t = t.Add(every) {
		if !t.Before(from) {
			list = append(list, t)
		}
	}
	return list
}

func earlier(a, b time.Time) time.Time {
	if a.Before(b) {
		return a
	}
	return b
}

// inUTC is a time on a picture, whose clock is UTC.
func inUTC(t protocol.Time) string { return t.UTC().Format(time.DateTime) }
