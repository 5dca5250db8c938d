package nighttest

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// turns judges whose turn it is, and when: runs begin in the order of the queue and one at a time, none
// counts before its schedule lets it or before its bench is steady, and what a run takes from earlier
// results is the last one, which is good enough, or nothing.
type turns struct {
	queue    []protocol.RunID // as they were asked for, or as a person ordered them
	finished []protocol.RunID // in the order of their ends
	results  map[protocol.RunID][]resultSeen
}

// resultSeen is what the judge must know of a result's entry.
type resultSeen struct {
	protocol.Head
	Kind    string   `json:"kind"`
	Value   *float64 `json:"value"`
	U       *float64 `json:"standard_uncertainty"`
	Axis    string   `json:"axis"`
	Setting string   `json:"setting"`
}

// asked takes in that a run was asked for.
func (j *judge) asked(run protocol.RunID) { j.turns.queue = append(j.turns.queue, run) }

// reordered takes in the queue's new order: what it does not name comes behind.
func (j *judge) reordered(ev *protocol.Event) {
	order, _ := ev.Detail[logbook.QueueDetail].([]any)
	var first []protocol.RunID
	for _, name := range order {
		if run, ok := name.(string); ok {
			first = append(first, protocol.RunID(run))
		}
	}
	if first == nil {
		return
	}
	rest := slices.DeleteFunc(slices.Clone(j.turns.queue), func(run protocol.RunID) bool { return slices.Contains(first, run) })
	j.turns.queue = append(first, rest...)
}

// turn judges that a run begins.
func (j *judge) turn(where string, run protocol.RunID) {
	passed := true // whoever comes before it in the queue
	for _, id := range j.turns.queue {
		switch other := j.run(id); {
		case id == run:
			passed = false
		case other.state.Final():
		case other.began:
			j.say("%s while run %s is %s", where, id, other.state)
		case passed:
			j.say("%s, and run %s was to come first", where, id)
		}
	}
}

// due judges the moment at which a reading was taken.
func (j *judge) due(where string, p *planned, b *protocol.Reading) {
	if b.Kind == protocol.Check {
		return
	}
	if early := p.plan.Schedule.NotBefore; b.StartedAt.Before(early) {
		j.say("%s was taken before %s", where, early.UTC().Format(time.TimeOnly))
	}
	if p.plan.Schedule.WarmUp != nil && !p.warm {
		j.say("%s was taken before the bench was found steady", where)
	}
}

// steady judges that a bench is called steady: by what its sensors answered until now.
func (j *judge) steady(where string, p *planned) {
	p.warm = true
	if p.plan.Schedule.WarmUp == nil {
		return
	}
	for _, s := range p.plan.Schedule.WarmUp.Steady {
		scale, known := j.facts.Sensors[string(s.Sensor)]
		if !known {
			continue
		}
		low, high, n := math.Inf(1), math.Inf(-1), 0
		for _, v := range j.values[scale.Device+" "+scale.Quantity] {
			if !v.at.Before(j.now.Add(-s.Over)) {
				low, high, n = min(low, v.value/scale.Factor), max(high, v.value/scale.Factor), n+1
			}
		}
		most := s.Absolute
		if s.Relative > 0 {
			most = s.Relative * max(math.Abs(low), math.Abs(high))
		}
		if n < 3 || high-low > most*(1+1e-6) {
			j.say("%s: %s is called steady; it answered %d times, from %g to %g, in %s", where, s.Sensor, n, low, high, s.Over)
		}
	}
}

// result takes in what a run measured.
func (j *judge) result(where string, e *protocol.Entry) {
	var r resultSeen
	if err := json.Unmarshal(e.Body, &r); err != nil {
		j.say("%s: entry %d: %v", where, e.Sequence, err)
		return
	}
	if j.turns.results == nil {
		j.turns.results = map[protocol.RunID][]resultSeen{}
	}
	j.turns.results[e.Run] = append(j.turns.results[e.Run], r)
}

// lastResult is the one that is asked for: of the run that finished last of those that have one.
func (j *judge) lastResult(ask scan.EarlierAsk) (resultSeen, bool) {
	for _, run := range slices.Backward(j.turns.finished) {
		if j.facts.Plans[run].Title != ask.From {
			continue
		}
		for _, r := range j.turns.results[run] {
			if r.Kind == string(ask.Kind) && r.Axis == string(ask.Axis) && r.Setting == string(ask.Setting) {
				return r, true
			}
		}
	}
	return resultSeen{}, false
}

// resultMinute is how long the way from a value that is still new enough to the entry that takes it may be.
const resultMinute = time.Minute

// earlier judges the values that points take from earlier results.
func (j *judge) earlier(where string, p *planned, b *protocol.Points) {
	for _, e := range p.plan.Earlier {
		ask := e.Ask
		what := fmt.Sprintf("%s: the %s of %s from %q", where, ask.Kind, ask.Of(), ask.From)
		i := slices.IndexFunc(b.Earlier, func(v protocol.EarlierValue) bool {
			return v.Kind == string(ask.Kind) && v.Axis == string(ask.Axis) && v.Setting == string(ask.Setting) && v.From == ask.From
		})
		if i < 0 {
			j.say("%s is not written with them", what)
			continue
		}
		v := b.Earlier[i]
		r, found := j.lastResult(ask)
		if !found || r.Value == nil || r.U == nil {
			j.say("%s is taken from entry %d of run %s; there is none", what, v.Sequence, v.Run)
			continue
		}
		same := v.Run == r.Run && v.Sequence == r.Sequence && math.Abs(v.U-*r.U) <= 1e-9**r.U
		switch {
		case v.Angle != nil:
			same = same && *v.Angle == unit.Degrees(*r.Value)
		case v.Value != nil:
			same = same && math.Abs(*v.Value-*r.Value) <= 1e-9*math.Abs(*r.Value)
		}
		most := ask.BelowValue
		if ask.Axis != "" {
			most = ask.Below.Degrees()
		}
		switch {
		case !same:
			j.say("%s is written as %+v; the last is %g ± %g, entry %d of run %s", what, v, *r.Value, *r.U, r.Sequence, r.Run)
		case most > 0 && *r.U > most:
			j.say("%s is uncertain by %g; want at most %g", what, *r.U, most)
		case ask.NotOlderThan > 0 && j.now.Sub(r.At.Time) > ask.NotOlderThan+resultMinute:
			j.say("%s is %s old; want at most %s", what, j.now.Sub(r.At.Time).Round(time.Second), ask.NotOlderThan)
		}
	}
}
