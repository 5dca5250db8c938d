package engine

import (
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// Outlook goes through a run without a bench, by the decisions that the engine itself takes: what
// comes next at a moment, what comes beside the points, where the schedule cuts the sweep off. Every
// reading succeeds, and every reference is good. It is what a forecast of time is made of.
//
// It goes a million visits in a fraction of a second: visits that are behind are told by the place of
// the next one alone, and lights that are certain to follow one another are not asked about one by
// one.
type Outlook struct {
	progress Progress
	refine   func(round int) []scan.Point
	leftOut  int
	certain  int       // lights that come next whatever happens before due
	due      time.Time // when the clock asks for something else; zero: never
	behind   int       // lights that the series have not heard of
}

// Foreseen is one reading that the engine would take.
type Foreseen struct {
	Kind  protocol.ReadingKind
	Visit scan.Visit // beside the points it is the visit whose place the arms have
	Point scan.Point // of that visit
	Place int        // of a reference, in the plan's list
	Set   int        // of a reference, from 1
	Dwell scan.Dwell

	task task
}

// NewOutlook begins a run of a plan at a moment. refine says which points each round of a refinement
// would add; it may be nil.
func NewOutlook(plan *scan.Plan, begins time.Time, refine func(round int) []scan.Point) *Outlook {
	o := &Outlook{refine: refine}
	p := &o.progress
	p.init()
	p.State, p.startedAt, p.Next = protocol.Running, begins, 1
	p.plan(plan)
	p.Decided = len(plan.Points)
	for _, c := range p.cadences() {
		p.series[c.kind] = series{} // so that visits are counted from the beginning
	}
	return o
}

// Next is the reading that is due at a moment, and false when the run is over.
func (o *Outlook) Next(now time.Time) (Foreseen, bool) {
	p := &o.progress
	if o.certain > 0 && (o.due.IsZero() || now.Before(o.due)) {
		o.certain--
		v := p.visits[p.cursor]
		return Foreseen{Kind: protocol.Light, Visit: v, Point: p.point(v.Point), Dwell: p.thePlan.Dwell, task: task{kind: lightTask, visit: v, dwell: p.thePlan.Dwell}}, true
	}
	o.catchUp()
	for o.refinable() {
		o.refineAt(now)
	}
	t, ok := p.next(now)
	if ok && (p.tooLate(t, now) || o.refinedLongEnough(t, now)) {
		o.leftOut += len(p.visits) - p.cursor
		p.cut = true
		t, ok = p.next(now)
	}
	if !ok {
		return Foreseen{}, false
	}
	f := Foreseen{Kind: protocol.ReadingKind(t.kind), Visit: p.nearest(), Dwell: t.dwell, task: t}
	f.Point = p.point(f.Visit.Point)
	switch t.kind {
	case referenceTask:
		f.Place, f.Set = t.visit.Point, t.visit.Visit
	case lightTask:
		o.certain, o.due = o.foresee()
		o.certain-- // this one
	}
	return f, true
}

// foresee is how many lights follow one another from here, and until when that is certain. Where each
// may be the last, by the schedule's end or a refinement's, it is one.
func (o *Outlook) foresee() (certain int, due time.Time) {
	p := &o.progress
	if !p.thePlan.Schedule.FinishBy.IsZero() || p.thePlan.Refine != nil {
		return 1, due
	}
	certain = len(p.visits) - p.cursor
	for _, c := range p.cadences() {
		if c.EveryPoints > 0 {
			certain = min(certain, c.EveryPoints-p.sinceOf(c.kind))
		}
		if at := p.lastOrStart(c.kind).Add(c.Every); c.Every > 0 && (due.IsZero() || at.Before(due)) {
			due = at
		}
	}
	return certain, due
}

// catchUp tells the series of the lights since they were last told.
func (o *Outlook) catchUp() {
	p := &o.progress
	if o.behind > 0 {
		for kind, s := range p.series {
			s.since, s.after = s.since+o.behind, false
			p.series[kind] = s
		}
	}
	o.certain, o.behind = 0, 0
}

func (o *Outlook) refinable() bool {
	p := &o.progress
	return p.thePlan.Refine != nil && o.refine != nil && !p.refineDone && !p.cut && p.visited()
}

func (o *Outlook) refinedLongEnough(t task, now time.Time) bool {
	p := &o.progress
	return t.kind == lightTask && t.visit.Point >= len(p.thePlan.Points) && p.thePlan.Refine.Within > 0 && now.Sub(p.refinedAt) >= p.thePlan.Refine.Within
}

// refineAt adds the points of a round, as the engine would.
func (o *Outlook) refineAt(now time.Time) {
	p, bound := &o.progress, o.progress.thePlan.Refine
	room := bound.AtMost - len(p.refined)
	var more []scan.Point
	if room > 0 && (bound.Within == 0 || p.refinedAt.IsZero() || now.Sub(p.refinedAt) < bound.Within) {
		more = o.refine(p.refineRound + 1)
	}
	more = more[:min(max(room, 0), len(more))]
	p.refineRound++
	if len(more) == 0 {
		p.refineDone = true
		return
	}
	if p.refinedAt.IsZero() {
		p.refinedAt = now
	}
	for _, point := range more {
		p.visits = append(p.visits, scan.Visit{Point: len(p.thePlan.Points) + len(p.refined), Visit: 1})
		p.refined = append(p.refined, point)
	}
}

// Taken says when a foreseen reading was begun and ended.
func (o *Outlook) Taken(f Foreseen, started, ended time.Time) {
	p := &o.progress
	if f.task.kind == lightTask {
		o.light(f.task.visit, ended)
		return
	}
	r := protocol.Reading{Kind: f.Kind, Accepted: true, StartedAt: protocol.Time{Time: started}, EndedAt: protocol.Time{Time: ended}}
	if f.task.kind == referenceTask {
		r.Reference = &protocol.ReferenceOf{Set: f.task.visit.Visit, Place: f.task.visit.Point, Places: len(p.thePlan.Reference.Places)}
	}
	r.Sequence = p.Next
	p.applyReading(&r)
	p.Next++
}

// light is what applyReading does for a light, without remembering each visit: a test holds the two
// together.
func (o *Outlook) light(v scan.Visit, ended time.Time) {
	p := &o.progress
	p.ref.passed()
	p.Next++
	p.cursor++
	o.behind++
	if len(p.done) == 0 {
		p.done[v] = true // some were made
	}
	if !p.lastLightA.IsZero() {
		p.spent += ended.Sub(p.lastLightA)
		p.spentOn++
	}
	p.lastLightA = ended
}

// LeftOut is how many visits the schedule's end has left out so far.
func (o *Outlook) LeftOut() int { return o.leftOut }

// Refined are the points that were added so far.
func (o *Outlook) Refined() []scan.Point { return o.progress.refined }
