package engine

import (
	"encoding/json"
	"fmt"
	"maps"
	"slices"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// Progress is what a run's journal comes to: where it stands, and so what is next. It is a pure
// fold over entries. The engine folds its own entries into the same value as it writes them, so
// that a resumed run and one that was never interrupted decide alike; the cadence of darks is
// read off here and never counted anywhere else.
type Progress struct {
	Next     int64 // the next entry's sequence
	State    protocol.State
	Causes   []protocol.Cause
	Reason   string // the text of the last event that changed the state
	LastAt   time.Time
	Decided  int // points written so far
	Accepted int
	SetAside int

	done        map[scan.Visit]bool // accepted or given up
	attempts    map[taskKey]int     // failed since the last success or resume
	darks       int                 // accepted or given up
	darkAt      time.Time           // start of the last dark
	sinceDark   int                 // visits done since then
	darkAfter   bool                // a dark came after the last visit
	spent       time.Duration       // bench time spent on accepted light readings, moves included
	spentOn     int
	startedAt   time.Time
	heldAt      time.Time
	restBad     string
	storageHeld bool // an entry had to wait for room; the event that says so is still to be written
	thePlan     *scan.Plan
	visits      []scan.Visit
	cursor      int // visits before it are done
	lastLightA  time.Time
}

// taskKind is what the engine can be about to do.
type taskKind string

const (
	lightTask taskKind = "light"
	darkTask  taskKind = "dark"
)

// task is one reading to take.
type task struct {
	kind  taskKind
	visit scan.Visit
	dwell scan.Dwell
}

type taskKey struct {
	kind  taskKind
	visit scan.Visit
}

func (t task) key() taskKey { return taskKey{t.kind, t.visit} }

// Fold adds one entry of the run's journal.
func (p *Progress) Fold(entry protocol.Entry) error {
	if p.Next == 0 {
		p.Next = 1
	}
	if entry.Sequence != p.Next {
		return fmt.Errorf("run %s: entry %d follows %d; want %d", entry.Run, entry.Sequence, p.Next-1, p.Next)
	}
	var head protocol.Head
	switch entry.Kind {
	case protocol.ReadingEntry:
		var r protocol.Reading
		if err := json.Unmarshal(entry.Body, &r); err != nil {
			return fmt.Errorf("run %s: entry %d: %w", entry.Run, entry.Sequence, err)
		}
		p.applyReading(&r)
		head = r.Head
	case protocol.EventEntry:
		var ev protocol.Event
		if err := json.Unmarshal(entry.Body, &ev); err != nil {
			return fmt.Errorf("run %s: entry %d: %w", entry.Run, entry.Sequence, err)
		}
		p.applyEvent(&ev)
		head = ev.Head
	case protocol.PointEntry:
		var pts protocol.Points
		if err := json.Unmarshal(entry.Body, &pts); err != nil {
			return fmt.Errorf("run %s: entry %d: %w", entry.Run, entry.Sequence, err)
		}
		p.Decided += len(pts.Points)
		head = pts.Head
	default:
		if err := json.Unmarshal(entry.Body, &head); err != nil {
			return fmt.Errorf("run %s: entry %d: %w", entry.Run, entry.Sequence, err)
		}
	}
	p.Next = entry.Sequence + 1
	if head.At.After(p.LastAt) {
		p.LastAt = head.At.Time
	}
	return nil
}

func (p *Progress) clone() Progress {
	c := *p
	c.done = maps.Clone(p.done)
	c.attempts = maps.Clone(p.attempts)
	c.Causes = slices.Clone(p.Causes)
	if c.Next == 0 {
		c.Next = 1
	}
	c.init()
	return c
}

func (p *Progress) init() {
	if p.done == nil {
		p.done = map[scan.Visit]bool{}
	}
	if p.attempts == nil {
		p.attempts = map[taskKey]int{}
	}
}

func (p *Progress) plan(plan *scan.Plan) {
	p.thePlan = plan
	p.visits = plan.Visits()
	p.cursor = 0
}

func (p *Progress) holds(c protocol.Cause) bool { return slices.Contains(p.Causes, c) }

func (p *Progress) applyReading(r *protocol.Reading) {
	p.init()
	key, known := readingKey(r)
	if !r.Accepted {
		p.SetAside++
		return
	}
	if !known {
		return
	}
	p.Accepted++
	p.finish(key, r.StartedAt.Time)
	if key.kind == lightTask {
		if !p.lastLightA.IsZero() {
			p.spent += r.EndedAt.Sub(p.lastLightA)
			p.spentOn++
		}
		p.lastLightA = r.EndedAt.Time
	} else {
		p.lastLightA = time.Time{}
	}
}

func readingKey(r *protocol.Reading) (taskKey, bool) {
	switch {
	case r.Kind == protocol.Light && r.Point != nil && r.Visit != nil:
		return taskKey{lightTask, scan.Visit{Point: *r.Point, Visit: *r.Visit}}, true
	case r.Kind == protocol.Dark:
		return taskKey{kind: darkTask}, true
	}
	return taskKey{}, false
}

// finish marks a task as done, by an accepted reading or by giving it up.
func (p *Progress) finish(key taskKey, startedAt time.Time) {
	delete(p.attempts, key)
	switch key.kind {
	case lightTask:
		p.done[key.visit] = true
		p.sinceDark++
		p.darkAfter = false
	case darkTask:
		p.darks++
		p.darkAt = startedAt
		p.sinceDark = 0
		p.darkAfter = true
	}
}

func (p *Progress) applyEvent(ev *protocol.Event) {
	p.init()
	if ev.State != "" {
		if ev.State != p.State || ev.Kind == protocol.Held || ev.Kind == protocol.WentOn {
			p.Reason = ev.Text
		}
		p.State = ev.State
		p.Causes = slices.Clone(ev.Causes)
	}
	switch ev.Kind {
	case protocol.Began:
		p.startedAt = ev.At.Time
	case protocol.Held, protocol.Interrupted:
		p.heldAt = ev.At.Time
		p.lastLightA = time.Time{}
		if key, ok := eventKey(ev.Detail); ok && slices.Contains(ev.Causes, protocol.ByLight) {
			p.attempts[key]++ // too bright counts as an attempt, or an arm in the pump would be tried for ever
		}
	case protocol.WentOn:
		p.lastLightA = time.Time{}
		if _, mended := ev.Detail["cause"]; !mended {
			clear(p.attempts) // a person or a restart begins anew; what mended itself does not
		}
	case protocol.TakenAgain:
		if key, ok := eventKey(ev.Detail); ok {
			p.attempts[key]++
		}
	case protocol.SetAside:
		if key, ok := eventKey(ev.Detail); ok {
			p.finish(key, ev.At.Time)
		}
	}
}

func keyDetail(t task) map[string]any {
	d := map[string]any{"task": string(t.kind)}
	if t.kind == lightTask {
		d["point"], d["visit"] = t.visit.Point, t.visit.Visit
	}
	return d
}

func eventKey(detail map[string]any) (taskKey, bool) {
	number := func(name string) int {
		switch v := detail[name].(type) {
		case float64:
			return int(v)
		case int:
			return v
		}
		return 0
	}
	kind, _ := detail["task"].(string)
	switch taskKind(kind) {
	case lightTask:
		return taskKey{lightTask, scan.Visit{Point: number("point"), Visit: number("visit")}}, true
	case darkTask:
		return taskKey{kind: darkTask}, true
	}
	return taskKey{}, false
}

// next returns the reading that is due now, and false when the plan is done.
func (p *Progress) next(now time.Time) (task, bool) {
	for p.cursor < len(p.visits) && p.done[p.visits[p.cursor]] {
		p.cursor++
	}
	all := p.cursor >= len(p.visits)
	if d := p.thePlan.Dark; d != nil {
		due := d.AtStart && p.darks == 0 && len(p.done) == 0 ||
			!all && d.EveryPoints > 0 && p.sinceDark >= d.EveryPoints ||
			!all && d.Every > 0 && !now.Before(p.lastDarkOrStart().Add(d.Every)) ||
			all && d.AtEnd && !p.darkAfter
		if due {
			return task{kind: darkTask, dwell: d.Dwell}, true
		}
	}
	if all {
		return task{}, false
	}
	return task{kind: lightTask, visit: p.visits[p.cursor], dwell: p.thePlan.Dwell}, true
}

func (p *Progress) lastDarkOrStart() time.Time {
	if p.darkAt.IsZero() {
		return p.startedAt
	}
	return p.darkAt
}

// Planned counts the readings of the whole run: those taken, those that are still certain to
// come. Darks by the clock are counted when they are taken.
func (p *Progress) Planned() int {
	if p.thePlan == nil {
		return 0
	}
	n := len(p.visits) + p.darks
	d := p.thePlan.Dark
	if d == nil {
		return n
	}
	left := len(p.visits) - len(p.done)
	if d.AtStart && p.darks == 0 && len(p.done) == 0 {
		n++
	}
	if d.EveryPoints > 0 && left > 0 {
		n += max(0, left+p.sinceDark-1) / d.EveryPoints
	}
	if d.AtEnd && (left > 0 || !p.darkAfter) {
		n++
	}
	return n
}

// timeLeft is what is left in bench time, judged by what the readings so far took; before there
// are two it is judged by the dwells alone.
func (p *Progress) timeLeft() *time.Duration {
	if p.thePlan == nil {
		return nil
	}
	left := p.Planned() - len(p.done) - p.darks
	lights := len(p.visits) - len(p.done)
	each := p.thePlan.Dwell.Time
	if p.spentOn > 0 {
		each = max(each, p.spent/time.Duration(p.spentOn))
	}
	total := time.Duration(lights) * each
	if d := p.thePlan.Dark; d != nil {
		total += time.Duration(max(0, left-lights)) * d.Dwell.Time
	}
	return &total
}
