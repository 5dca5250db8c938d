package nighttest

import (
	"time"

	"gemel/sim/instruments"
)

// lights judges how long too much light lasts, at the detector and not by anybody's answer: as long as
// nobody could see it, and the protector's time; the time without a process does not count.
type lights struct {
	lampHz float64
	seen   map[string]*exposure
}

type exposure struct {
	since  time.Time
	dead   time.Duration // of it, without a process
	killed time.Time     // zero: a process lives
	said   bool
}

func (j *judge) lamp(r *instruments.Record) {
	switch r.Kind {
	case instruments.LampOn:
		j.lights.lampHz += r.Value
	case instruments.LampOff:
		j.lights.lampHz -= r.Value
	}
}

// well above the trip rate: what dead time swallows is no excuse.
const wellAbove = 1.3

// watchLight is asked at every moment, before anything of that moment is taken in.
func (j *judge) watchLight() {
	for _, d := range j.facts.Detectors {
		if d.TripHz == 0 || d.Protector == "" {
			continue
		}
		x := j.lights.seen[d.Name]
		if j.lights.lampHz <= wellAbove*d.TripHz || !j.guards[d.Protector] {
			delete(j.lights.seen, d.Name)
			continue
		}
		if x == nil {
			if j.lights.seen == nil {
				j.lights.seen = map[string]*exposure{}
			}
			x = &exposure{since: j.now}
			j.lights.seen[d.Name] = x
		}
		switch {
		case j.killed && x.killed.IsZero():
			x.killed = j.now
		case !j.killed && !x.killed.IsZero():
			x.dead += j.now.Sub(x.killed)
			x.killed = time.Time{}
		}
		if j.killed || x.said {
			continue
		}
		bound := j.watchPeriod() + protectWithin
		if j.now.Sub(j.hindered) < bound+hindrance || j.hinders("") {
			bound += hindrance
		}
		if lasts := j.now.Sub(x.since) - x.dead; lasts > bound && !j.out[d.Protector] && !j.hinders(d.Protector) {
			x.said = true
			j.say("the %s detector was in light above its trip rate for %s; want at most %s", d.Name, lasts.Round(time.Millisecond), bound)
		}
	}
}

// hindrance is what a line that misbehaves may cost: the longest answers, a resynchronisation, a
// connection made anew, for every device of the rest state.
const hindrance = 45 * time.Second

// watchPeriod is how long light may go unseen.
func (j *judge) watchPeriod() time.Duration {
	if j.facts.Watch > 0 {
		return j.facts.Watch
	}
	plan, ok := j.facts.Plans[j.current]
	if !ok {
		return time.Minute
	}
	longest := plan.Dwell.Slice
	if plan.Dark != nil {
		longest = max(longest, plan.Dark.Dwell.Slice)
	}
	if plan.Background != nil {
		longest = max(longest, plan.Background.Dwell.Slice)
	}
	if plan.Reference != nil {
		longest = max(longest, plan.Reference.Dwell.Slice)
	}
	return longest
}
