package nighttest

import (
	"slices"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// waits judges that every wait but an operator's hold, and the time without a process or without room
// on the disk, ends within what the recipe and the bench file say.
type waits struct {
	since time.Time // of the present state, or the last entry while running
	full  bool
	freed time.Time
	said  bool
}

// handling is what comes to a bound that is looked at from time to time.
const handling = 3 * time.Minute

// lineLost is how long a line that is gone is waited for before a person is asked.
const lineLost = 10 * time.Minute

// watchWait is asked at every moment, before anything of that moment is taken in.
func (j *judge) watchWait() {
	r := j.runs[j.current]
	w := &j.waits
	if r == nil || r.state.Final() || !r.began || j.killed || w.full || w.said {
		return
	}
	plan, ok := j.facts.Plans[j.current]
	if !ok {
		return
	}
	var bound time.Duration
	switch {
	case r.state == protocol.Holding && slices.Contains(r.causes, protocol.ByOperator):
		return
	case r.state == protocol.Holding:
		bound = plan.Trouble.GiveUpAfter
		if bound == 0 {
			bound = 12 * time.Hour
		}
		if slices.Contains(r.causes, protocol.ByGuard) {
			for _, g := range plan.Guards {
				bound = max(bound, g.GiveUpAfter)
			}
		}
	default:
		bound = lineLost + longestDwell(plan)
		if u := plan.Schedule.WarmUp; u != nil {
			bound += u.AtMost
		}
		if early := plan.Schedule.NotBefore.Sub(w.since); early > 0 {
			bound += early
		}
	}
	from := w.since
	if w.freed.After(from) {
		from = w.freed
	}
	if waited := j.now.Sub(from); waited > bound+handling {
		w.said = true
		j.say("run %s is %s for %s without a word; want at most %s", j.current, r.state, waited.Round(time.Second), bound)
	}
}

func longestDwell(plan scan.Plan) time.Duration {
	longest := plan.Dwell.Time
	for _, c := range []*scan.Cadence{plan.Dark} {
		if c != nil {
			longest = max(longest, c.Dwell.Time)
		}
	}
	if plan.Background != nil {
		longest = max(longest, plan.Background.Dwell.Time)
	}
	if plan.Reference != nil {
		longest = max(longest, plan.Reference.Dwell.Time)
	}
	return longest
}

// heard takes in that the current run wrote something. While it holds, looks at the light do not end
// the wait: only what changes its state or causes does.
func (j *judge) heard(e *protocol.Entry, before protocol.State) {
	if e.Run != j.current {
		return
	}
	if r := j.runs[j.current]; before != protocol.Holding || r.state != protocol.Holding || e.Kind == protocol.EventEntry {
		j.waits.since, j.waits.said = j.now, false
	}
}
