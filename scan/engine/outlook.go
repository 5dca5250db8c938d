package engine

import (
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// Outlook goes through a run without a bench, by the decisions that the engine itself takes: what
// comes next at a moment, what comes beside the points, where the schedule cuts the sweep off. Every
// reading succeeds, and every reference is good. It is what a forecast of time is made of.
type Outlook struct {
	progress Progress
	refine   func(round int) []scan.Point
	leftOut  int
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
	return o
}

// Next is the reading that is due at a moment, and false when the run is over.
func (o *Outlook) Next(now time.Time) (Foreseen, bool) {
	p := &o.progress
	for o.refinable() {
		o.refineAt(now)
	}
	t, ok := p.next(now)
	if ok && (p.tooLate(t, now) || o.refinedLongEnough(t, now)) {
		o.leftOut += p.left()
		p.cut = true
		t, ok = p.next(now)
	}
	if !ok {
		return Foreseen{}, false
	}
	f := Foreseen{Kind: protocol.ReadingKind(t.kind), Visit: p.nearest(), Dwell: t.dwell, task: t}
	f.Point = p.point(f.Visit.Point)
	if t.kind == referenceTask {
		f.Place, f.Set = t.visit.Point, t.visit.Visit
	}
	return f, true
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
	r := protocol.Reading{Kind: f.Kind, Accepted: true, StartedAt: protocol.Time{Time: started}, EndedAt: protocol.Time{Time: ended}}
	switch f.task.kind {
	case lightTask:
		r.Point, r.Visit = &f.task.visit.Point, &f.task.visit.Visit
	case referenceTask:
		r.Reference = &protocol.ReferenceOf{Set: f.task.visit.Visit, Place: f.task.visit.Point, Places: len(o.progress.thePlan.Reference.Places)}
	}
	r.Sequence = o.progress.Next
	o.progress.applyReading(&r)
	o.progress.Next++
}

// LeftOut is how many visits the schedule's end has left out so far.
func (o *Outlook) LeftOut() int { return o.leftOut }

// Refined are the points that were added so far.
func (o *Outlook) Refined() []scan.Point { return o.progress.refined }
