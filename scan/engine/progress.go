package engine

import (
	"encoding/json"
	"fmt"
	"maps"
	"slices"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
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
	Decided  int // points of the sweep written so far
	Accepted int
	SetAside int
	Earlier  []protocol.EarlierValue // values that the points took from earlier results

	done        map[scan.Visit]bool             // accepted or given up
	attempts    map[taskKey]int                 // failed since the last success or resume
	series      map[taskKind]series             // what is repeated beside the points
	results     int                             // written so far
	concluded   bool                            // all of them are, or there are none to be had
	guard       string                          // the guard that broke last
	cut         bool                            // the rest of the sweep is left out, by the schedule or by a person
	cutBy       string                          // the person; empty: the schedule
	leftOut     int                             // visits left out so
	givenUp     int                             // readings given up after their retries
	warm        bool                            // the warm-up is over
	ref         references                      // where the references stand
	refined     []scan.Point                    // points added after the first pass
	refinedAt   time.Time                       // when the first of them were decided
	refineRound int                             // of the last refinement written
	refineDone  bool                            // none follows
	zeros       map[drivers.AxisName]verified   // when each axis's zero was last found true
	lastTaken   int64                           // entry of the last accepted reading
	stand       map[drivers.AxisName]unit.Angle // where the axes have to be that the sweep does not move; nil until that is written
	spent       time.Duration                   // bench time spent on accepted light readings, moves included
	spentOn     int
	startedAt   time.Time
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
	lightTask      taskKind = "light"
	darkTask       taskKind = "dark"
	backgroundTask taskKind = "background"
	referenceTask  taskKind = "reference"
	restTask       taskKind = "rest" // all visits that are left, when the schedule cuts them off
)

// series is what was done so far of something that is repeated beside the points.
type series struct {
	taken int       // accepted or given up
	at    time.Time // start of the last
	since int       // visits done since then
	after bool      // one came after the last visit
}

// cadence is what the plan wants of it.
type cadence struct {
	kind taskKind
	scan.Cadence
}

// cadences lists what is repeated beside the points, in the order in which it is taken when
// several are due.
func (p *Progress) cadences() []cadence {
	var all []cadence
	if d := p.thePlan.Dark; d != nil {
		all = append(all, cadence{darkTask, *d})
	}
	if b := p.thePlan.Background; b != nil {
		all = append(all, cadence{backgroundTask, b.Cadence})
	}
	if r := p.thePlan.Reference; r != nil {
		all = append(all, cadence{referenceTask, r.Cadence})
	}
	return all
}

// readings is how many readings one of a cadence consists of.
func (p *Progress) readings(c cadence) int {
	if c.kind == referenceTask {
		return len(p.thePlan.Reference.Places)
	}
	return 1
}

// task is one reading to take. Of a reference the visit's point is the place in the plan's list, and
// its visit the number of the set.
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
		p.applyPoints(&pts)
		head = pts.Head
	default:
		if entry.Kind == protocol.ResultEntry {
			p.results++
		}
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
	c.series = maps.Clone(p.series)
	c.stand = maps.Clone(p.stand)
	c.refined = slices.Clone(p.refined)
	c.zeros = maps.Clone(p.zeros)
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
	if p.series == nil {
		p.series = map[taskKind]series{}
	}
}

func (p *Progress) plan(plan *scan.Plan) {
	p.thePlan = plan
	p.visits = plan.Visits()
	for i := range p.refined {
		p.visits = append(p.visits, scan.Visit{Point: len(plan.Points) + i, Visit: 1})
	}
	p.cursor = 0
}

// point is one of the sweep's, or one that a refinement added.
func (p *Progress) point(i int) scan.Point {
	if n := len(p.thePlan.Points); i >= n {
		return p.refined[i-n]
	}
	return p.thePlan.Points[i]
}

func (p *Progress) holds(c protocol.Cause) bool { return slices.Contains(p.Causes, c) }

func (p *Progress) applyReading(r *protocol.Reading) {
	p.init()
	key, known := readingKey(r)
	if r.Kind != protocol.Check {
		p.ref.passed() // it would not have been taken after a bad one
	}
	if !r.Accepted {
		p.SetAside++
		return
	}
	if !known {
		return
	}
	p.Accepted++
	p.lastTaken = r.Sequence
	if key.kind == referenceTask {
		p.applyReference(r)
		return
	}
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
	case r.Kind == protocol.Background:
		return taskKey{kind: backgroundTask}, true
	case r.Kind == protocol.Reference && r.Reference != nil:
		return taskKey{referenceTask, scan.Visit{Point: r.Reference.Place, Visit: r.Reference.Set}}, true
	}
	return taskKey{}, false
}

// finish marks a task as done, by an accepted reading or by giving it up.
func (p *Progress) finish(key taskKey, startedAt time.Time) {
	delete(p.attempts, key)
	if key.kind == lightTask {
		p.done[key.visit] = true
		for kind, s := range p.series {
			s.since++
			s.after = false
			p.series[kind] = s
		}
		return
	}
	if key.kind == referenceTask { // given up, and with it the set
		p.ref.abandon()
		p.ref.due = false
	}
	p.series[key.kind] = series{taken: p.series[key.kind].taken + 1, at: startedAt, after: true}
}

// sinceOf is how many visits were done since the last of a kind, or since the run began.
func (p *Progress) sinceOf(kind taskKind) int {
	if s, any := p.series[kind]; any {
		return s.since
	}
	return len(p.done)
}

func (p *Progress) applyPoints(pts *protocol.Points) {
	if pts.Refined > 0 {
		p.applyRefinement(pts)
		return
	}
	p.Decided += len(pts.Points)
	if pts.Earlier != nil {
		p.Earlier = pts.Earlier
	}
	if pts.Stand == nil {
		return
	}
	p.stand = map[drivers.AxisName]unit.Angle{}
	for _, t := range pts.Stand {
		p.stand[drivers.AxisName(t.Axis)] = t.Target
	}
}

// applyRefinement adds points at the end of the list. One without points is the last.
func (p *Progress) applyRefinement(pts *protocol.Points) {
	p.refineRound = pts.Refined
	if len(pts.Points) == 0 {
		p.refineDone = true
		return
	}
	if p.refinedAt.IsZero() {
		p.refinedAt = pts.At.Time
	}
	for _, q := range pts.Points {
		point := scan.Point{}
		for _, t := range q.Axes {
			point.Axes = append(point.Axes, scan.AxisTarget{Axis: drivers.AxisName(t.Axis), Angle: t.Target})
		}
		for _, t := range q.Settings {
			point.Settings = append(point.Settings, scan.SettingTarget{Setting: drivers.DeviceName(t.Name), Value: t.Target})
		}
		p.refined = append(p.refined, point)
		if p.thePlan != nil {
			p.visits = append(p.visits, scan.Visit{Point: q.Point, Visit: 1})
		}
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
	p.ref.applyEvent(ev)
	p.applyVerified(ev)
	switch ev.Kind {
	case protocol.Began:
		p.startedAt = ev.At.Time
	case protocol.Held, protocol.Interrupted, protocol.GuardBroken:
		p.lastLightA = time.Time{}
		if name, ok := ev.Detail["guard"].(string); ok {
			p.guard = name
		}
		if key, ok := eventKey(ev.Detail); ok && slices.Contains(ev.Causes, protocol.ByLight) {
			p.attempts[key]++ // too bright counts as an attempt, or an arm in the pump would be tried for ever
		}
	case protocol.WentOn, protocol.GuardMended:
		p.lastLightA = time.Time{}
		if _, warm := ev.Detail["warm_up"]; warm {
			p.warm = true
			return
		}
		if _, mended := ev.Detail["cause"]; !mended {
			clear(p.attempts) // a person or a restart begins anew; what mended itself does not
		}
	case protocol.TakenAgain:
		if key, ok := eventKey(ev.Detail); ok {
			p.attempts[key]++
		}
	case protocol.SetAside:
		if key, ok := eventKey(ev.Detail); ok && key.kind == restTask {
			p.cut, p.leftOut = true, numberIn(ev.Detail, "left_out")
			p.cutBy, _ = ev.Detail["who"].(string)
		} else if ok {
			p.givenUp++
			p.finish(key, ev.At.Time)
		}
	}
}

func keyDetail(t task) map[string]any {
	d := map[string]any{"task": string(t.kind)}
	if t.kind == lightTask || t.kind == referenceTask {
		d["point"], d["visit"] = t.visit.Point, t.visit.Visit
	}
	return d
}

func eventKey(detail map[string]any) (taskKey, bool) {
	number := func(name string) int { return numberIn(detail, name) }
	kind, _ := detail["task"].(string)
	switch taskKind(kind) {
	case lightTask, referenceTask:
		return taskKey{taskKind(kind), scan.Visit{Point: number("point"), Visit: number("visit")}}, true
	case darkTask, backgroundTask, restTask:
		return taskKey{kind: taskKind(kind)}, true
	}
	return taskKey{}, false
}

// numberIn reads a whole number of a detail, as it was made or as JSON gave it back; 0: there is none.
func numberIn(detail map[string]any, name string) int {
	switch v := detail[name].(type) {
	case float64:
		return int(v)
	case int:
		return v
	case int64:
		return int(v)
	}
	return 0
}

// next returns the reading that is due now, and false when the plan is done.
func (p *Progress) next(now time.Time) (task, bool) {
	all := p.visited() || p.cut
	if place, begun := p.ref.begun(); begun {
		return p.referenceAt(place, p.ref.set), true
	}
	for _, c := range p.cadences() {
		had := p.series[c.kind]
		due := c.AtStart && had.taken == 0 && len(p.done) == 0 ||
			!all && c.EveryPoints > 0 && p.sinceOf(c.kind) >= c.EveryPoints ||
			// One visit at least lies between two, or what takes longer than its cadence would be all there is.
			!all && c.Every > 0 && p.sinceOf(c.kind) > 0 && !now.Before(p.lastOrStart(c.kind).Add(c.Every)) ||
			!all && c.kind == referenceTask && p.ref.due ||
			all && c.AtEnd && !had.after
		if due && c.kind == referenceTask {
			return p.referenceAt(0, p.ref.set+1), true
		}
		if due {
			return task{kind: c.kind, dwell: c.Dwell}, true
		}
	}
	if all {
		return task{}, false
	}
	return task{kind: lightTask, visit: p.visits[p.cursor], dwell: p.thePlan.Dwell}, true
}

// visited says whether every visit that is decided was made or given up.
func (p *Progress) visited() bool {
	for p.cursor < len(p.visits) && p.done[p.visits[p.cursor]] {
		p.cursor++
	}
	return p.cursor >= len(p.visits)
}

// nearest is the visit that is next, or the last one when all are done: where the arms are for
// what is counted beside the points.
func (p *Progress) nearest() scan.Visit { return p.visits[min(p.cursor, len(p.visits)-1)] }

func (p *Progress) lastOrStart(kind taskKind) time.Time {
	if s := p.series[kind]; s.taken > 0 {
		return s.at
	}
	return p.startedAt
}

// Planned counts the readings of the whole run: those taken, those given up or left out, and those
// that are still certain to come. What goes by the clock is counted when it is taken.
func (p *Progress) Planned() int {
	if p.thePlan == nil {
		return 0
	}
	n := p.Accepted + p.givenUp + p.leftOut + p.left()
	for _, c := range p.cadences() {
		n += p.ahead(c) * p.readings(c)
	}
	if _, begun := p.ref.begun(); begun && p.series[referenceTask].taken == 0 {
		n -= p.ref.placed
	}
	return n
}

// left is how many visits are still to be made.
func (p *Progress) left() int {
	if p.cut {
		return 0
	}
	return len(p.visits) - len(p.done)
}

// ahead is how many of a cadence are certain to come.
func (p *Progress) ahead(c cadence) int {
	n := 0
	had := p.series[c.kind]
	left := p.left()
	if c.AtStart && had.taken == 0 && len(p.done) == 0 {
		n++
	}
	if c.EveryPoints > 0 && left > 0 {
		n += max(0, left+p.sinceOf(c.kind)-1) / c.EveryPoints
	}
	if c.AtEnd && (left > 0 || !had.after) {
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
	each := p.thePlan.Dwell.Time
	if p.spentOn > 0 {
		each = p.spent / time.Duration(p.spentOn)
	}
	total := time.Duration(p.left()) * each
	for _, c := range p.cadences() {
		total += time.Duration(p.ahead(c)*p.readings(c)) * c.Dwell.Time
	}
	return &total
}
