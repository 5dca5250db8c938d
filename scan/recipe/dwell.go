package recipe

import (
	"fmt"
	"regexp"
	"strconv"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Cadence is how often something is counted beside the points.
type Cadence struct {
	scan.Cadence

	at, dwellAt, everyAt strict.Place
}

// Background is a cadence with the pump on and phase matching spoiled by a turned axis.
type Background struct {
	Cadence
	Turn drivers.AxisName
	By   unit.Angle

	turnAt, byAt strict.Place
}

// maxHeralds keeps a number of trigger counts far within what a counter sums up in maxDwell.
const maxHeralds = 1_000_000_000_000

// readDwell reads the dwell of the points: a time, cut or not, or a number of trigger counts.
func (r *Recipe) readDwell(v strict.Value) {
	r.dwellAt = v.Place()
	if !v.IsMap() {
		r.Dwell = readTime(v)
		return
	}
	m := v.Map()
	refusePairs(m)
	heralds, of, atMost := m.Opt("heralds"), m.Opt("of"), m.Opt("at_most")
	if !heralds.Given() {
		for _, alone := range []strict.Value{of, atMost} {
			if alone.Given() && !m.Has("coincidences") && !m.Has("pairs") {
				alone.Fail("a key that belongs to heralds", `"heralds" beside it, or "time" alone`)
			}
		}
		r.Dwell = readTimeIn(m)
		m.Done()
		return
	}
	if t := m.Opt("time"); t.Given() {
		t.Fail("a time beside heralds", `"at_most" for the longest time`)
	}
	r.Dwell.Heralds = uint64(heralds.Int(1, maxHeralds))
	r.of, r.ofAt = of.Token(), of.Place()
	longest, slice := m.Need("at_most"), m.Need("slice")
	r.Dwell.Time = longest.Duration(minDwell, maxDwell)
	r.Dwell.Slice = readSlice(slice, r.Dwell.Time)
	if slice.Good() && longest.Good() && r.Dwell.Slice == r.Dwell.Time {
		slice.Fail("one slice that is the whole dwell", "a shorter one: a dwell can end early at the end of a slice only")
	}
	m.Done()
}

// readTime reads a dwell that lasts a time: "5 s", or {time: 5 s, slice: 1 s}.
func readTime(v strict.Value) scan.Dwell {
	if !v.IsMap() {
		t := v.Duration(minDwell, maxDwell)
		return scan.Dwell{Time: t, Slice: t}
	}
	m := v.Map()
	refusePairs(m)
	m.Refuse("heralds where no partners are counted", "a time, such as {time: 60 s, slice: 10 s}", "heralds", "at_most", "of")
	d := readTimeIn(m)
	m.Done()
	return d
}

func readTimeIn(m strict.Map) scan.Dwell {
	var d scan.Dwell
	if t := m.Opt("time"); t.Given() || !m.Has("coincidences") && !m.Has("pairs") && !m.Has("heralds") {
		d.Time = m.Need("time").Duration(minDwell, maxDwell)
	}
	d.Slice = readSlice(m.Opt("slice"), d.Time)
	return d
}

// refusePairs refuses to end a dwell on coincidences. Inverse binomial sampling: n/N overestimates
// the chance (Haldane 1945, recalled from memory).
func refusePairs(m strict.Map) {
	m.Refuse("a dwell that ends on a number of coincidences", "a fixed time, or {heralds: …, at_most: …, slice: …}: "+whyNotPairs, "coincidences", "pairs")
}

const whyNotPairs = "ending a count on its own success favours lucky stretches, so the efficiency comes out too high; ending on trigger counts (heralds) does not"

func readSlice(v strict.Value, dwell time.Duration) time.Duration {
	slice := v.Duration(minDwell, maxDwell, dwell)
	if v.Good() && dwell > 0 {
		switch n := (dwell + slice - 1) / slice; {
		case slice > dwell:
			v.Failf("no more than the dwell of %s", unit.Span(dwell))
		case n > maxSlices:
			v.Fail(fmt.Sprintf("%d slices", n), fmt.Sprintf("at most %d", maxSlices))
		}
	}
	return slice
}

func readDark(v strict.Value) *Cadence {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	c := readCadence(m, v.Place(), "dark")
	m.Done()
	return &c
}

func readBackground(v strict.Value) *Background {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	turn, by := m.Need("turn"), m.Need("by")
	b := &Background{Turn: drivers.AxisName(turn.Token()), By: by.Angle(-unit.Turn, unit.Turn), turnAt: turn.Place(), byAt: by.Place()}
	if by.Good() && b.By == 0 {
		by.Failf("an angle that spoils phase matching, such as 45 deg of a half-wave plate in the pump")
	}
	b.Cadence = readCadence(m, v.Place(), "background")
	m.Done()
	return b
}

var everyPoints = regexp.MustCompile(`^([1-9][0-9]{0,5}) points?$`)

func readCadence(m strict.Map, at strict.Place, what string) Cadence {
	m.Need("dwell")
	return readCadenceOr(m, at, what, scan.Dwell{})
}

// readCadenceOr does without a dwell, and takes the one given in its stead.
func readCadenceOr(m strict.Map, at strict.Place, what string, or scan.Dwell) Cadence {
	dwell, every, also := m.Opt("dwell"), m.Opt("every"), m.Opt("also")
	c := Cadence{at: at, dwellAt: dwell.Place(), everyAt: every.Place()}
	if c.Dwell = or; dwell.Given() {
		c.Dwell = readTime(dwell)
	}
	const often = `a number of points such as "10 points", or a time such as "30 min"`
	if text := every.TextLike(often); every.Good() {
		if n := every.Match(everyPoints); n != nil {
			c.EveryPoints, _ = strconv.Atoi(n[1])
		} else if strings.Contains(text, "point") {
			every.Failf(often)
		} else if c.Every = every.Duration(time.Second, maxDwell); every.Good() && c.Every <= c.Dwell.Time {
			every.Failf("more than the %s's own dwell of %s, or nothing else would be counted", what, unit.Span(c.Dwell.Time))
		}
	}
	for _, item := range also.List(1, 2) {
		switch item.Choice([]string{"start", "end"}) {
		case "start":
			c.AtStart = true
		case "end":
			c.AtEnd = true
		}
	}
	if m.Given() && !every.Given() && !also.Given() {
		m.NeedLike("every", `how often: "every: 30 min", "every: 20 points", "also: [start, end]" or both keys`)
	}
	return c
}
