package recipe

import (
	"fmt"
	"regexp"
	"strconv"
	"time"

	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
)

// Schedule bounds a run by times on the wall clock.
type Schedule struct {
	NotBefore *Clock // nil: at once
	FinishBy  *Clock // nil: no end
	WarmUp    *WarmUp

	at, beforeAt, byAt strict.Place
}

// Clock is a time of the day.
type Clock struct{ Hour, Minute int }

func (c Clock) String() string { return fmt.Sprintf("%02d:%02d", c.Hour, c.Minute) }

func (c Clock) before(d Clock) bool { return c.Hour*60+c.Minute < d.Hour*60+d.Minute }

var clockTime = regexp.MustCompile(`^([01][0-9]|2[0-3]):([0-5][0-9])$`)

func readSchedule(v strict.Value) *Schedule {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	before, by, warm := m.Opt("not_before"), m.Opt("finish_by"), m.Opt("warm_up")
	s := &Schedule{NotBefore: readClock(before), FinishBy: readClock(by), WarmUp: readWarmUp(warm), at: v.Place(), beforeAt: before.Place(), byAt: by.Place()}
	switch {
	case m.Given() && !before.Given() && !by.Given() && !warm.Given():
		m.Fail("no times", `"not_before", "finish_by", "warm_up" or several of them`)
	case s.NotBefore != nil && s.FinishBy != nil && *s.NotBefore == *s.FinishBy:
		by.Fail(fmt.Sprintf("%s again", s.FinishBy), "another time than not_before")
	}
	m.Done()
	return s
}

func readClock(v strict.Value) *Clock {
	if !v.Given() {
		return nil
	}
	const want = `a time of the day from "00:00" to "23:59"`
	if v.TextLike(want); !v.Good() {
		return nil
	}
	n := v.Match(clockTime)
	if n == nil {
		v.Failf(want)
		return nil
	}
	c := &Clock{}
	c.Hour, _ = strconv.Atoi(n[1])
	c.Minute, _ = strconv.Atoi(n[2])
	return c
}

// schedule turns times of the day into instants, once, for the moment the recipe is accepted.
func (r *Recipe) schedule(f Facts) (scan.Schedule, []protocol.Finding) {
	s := r.Schedule
	if s == nil {
		return scan.Schedule{}, nil
	}
	warm, findings := s.WarmUp.plan(f)
	switch {
	case findings != nil:
		return scan.Schedule{}, findings
	case s.NotBefore == nil && s.FinishBy == nil:
		return scan.Schedule{WarmUp: warm}, nil // in bench time, whatever the wall says
	case f.Pace > 1:
		return scan.Schedule{}, []protocol.Finding{s.at.Finding(fmt.Sprintf("a schedule on a simulated bench at %d times the speed", f.Pace), `no "not_before" and no "finish_by", or "clock: 1" in the bench file: this bench's hours are not those on the wall`)}
	case f.AcceptedAt.IsZero():
		return scan.Schedule{}, []protocol.Finding{s.at.Finding("a schedule without a moment to reckon from", "to be asked for a run, or with a time")}
	}
	from, to, ok := Instants(s.NotBefore, s.FinishBy, f.AcceptedAt)
	if !ok {
		return scan.Schedule{}, []protocol.Finding{s.byAt.Finding(fmt.Sprintf("%s to %s in the night to %s, when the clocks leave these times out", s.NotBefore, s.FinishBy, to.Format("2006-01-02")), "times with a night between them")}
	}
	return scan.Schedule{NotBefore: from, FinishBy: to, WarmUp: warm}, nil
}

// Instants works out when a run may begin and has to end that is accepted at a moment, in the
// moment's location; nil clocks and zero times are none.
//
//   - The end is the next time the clock shows finish_by.
//   - The beginning is the last time before that end that the clock shows not_before: accepted
//     within the night it means, a run begins at once, and the instant lies in the past.
//   - Without an end, the beginning is the next time the clock shows not_before.
//   - A time that the clock leaves out is the moment the clock is set forward.
//   - Of a time that the clock shows twice, an end is the first and a beginning the second, so that
//     both readings of the promise are kept; a beginning that would then follow its end is the first.
//
// It is not ok when the clock leaves out all of the time between the two.
func Instants(notBefore, finishBy *Clock, accepted time.Time) (from, to time.Time, ok bool) {
	loc := accepted.Location()
	if finishBy == nil {
		if notBefore != nil {
			_, from = next(*notBefore, accepted.Add(-time.Nanosecond), true)
		}
		return from, to, true
	}
	day, to := next(*finishBy, accepted, false)
	if notBefore == nil {
		return from, to, true
	}
	if !notBefore.before(*finishBy) {
		day = day.AddDate(0, 0, -1)
	}
	first, second := shows(*notBefore, day, loc)
	from = second
	if !from.Before(to) {
		from = first
	}
	return from, to, from.Before(to)
}

// next is the first time after a moment that the clock shows c, the later of two on one day if so
// wanted, and the day on which it does.
func next(c Clock, after time.Time, later bool) (day, at time.Time) {
	y, m, d := after.Date()
	for k := -1; ; k++ {
		day := time.Date(y, m, d+k, 0, 0, 0, 0, time.UTC)
		first, second := shows(c, day, after.Location())
		if later {
			first = second
		}
		if first.After(after) {
			return day, first
		}
	}
}

// shows returns when the clock of a place shows c on a day of the calendar, given as its midnight
// in UTC: twice where clocks are set back over it, else twice the same. Where they are set forward
// over it, it is the moment that they are.
func shows(c Clock, day time.Time, loc *time.Location) (first, second time.Time) {
	// The clock's reading as if it were UTC. True time is at most 14 h away from it, so that the
	// offsets a good day before and after are those on both sides of a change near by.
	reading := day.Add(time.Duration(c.Hour)*time.Hour + time.Duration(c.Minute)*time.Minute)
	const away = 26 * time.Hour
	at := func(probe time.Duration) (time.Time, bool) {
		_, offset := reading.Add(probe).In(loc).Zone()
		t := reading.Add(-time.Duration(offset) * time.Second).In(loc)
		_, its := t.Zone()
		return t, its == offset
	}
	before, beforeOK := at(-away)
	after, afterOK := at(away)
	switch {
	case beforeOK && afterOK:
		return before, after
	case beforeOK:
		return before, before
	case afterOK:
		return after, after
	}
	change, _ := before.ZoneBounds()
	return change, change
}
