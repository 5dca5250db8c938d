package engine

import (
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// Outlook goes through a run without a bench, by the decisions that the engine itself takes: what
// comes next at a moment, what comes beside the points, where the schedule cuts the sweep off.
// Every reading succeeds. It is what a forecast of time is made of.
type Outlook struct {
	progress Progress
	leftOut  int
}

// Foreseen is one reading that the engine would take.
type Foreseen struct {
	Kind  protocol.ReadingKind
	Visit scan.Visit // of a light; beside the points it is the visit whose place the arms have
	Dwell scan.Dwell

	task task
}

// NewOutlook begins a run of a plan at a moment.
func NewOutlook(plan *scan.Plan, begins time.Time) *Outlook {
	o := &Outlook{}
	o.progress.init()
	o.progress.State = protocol.Running
	o.progress.startedAt = begins
	o.progress.plan(plan)
	o.progress.Decided = len(plan.Points)
	return o
}

// Next is the reading that is due at a moment, and false when the run is over.
func (o *Outlook) Next(now time.Time) (Foreseen, bool) {
	p := &o.progress
	t, ok := p.next(now)
	if ok && p.tooLate(t, now) {
		o.leftOut = p.left()
		p.cut = true
		t, ok = p.next(now)
	}
	if !ok {
		return Foreseen{}, false
	}
	f := Foreseen{Kind: protocol.ReadingKind(t.kind), Visit: t.visit, Dwell: t.dwell, task: t}
	if t.kind != lightTask {
		f.Visit = p.nearest()
	}
	return f, true
}

// Taken says when a foreseen reading was begun and ended.
func (o *Outlook) Taken(f Foreseen, started, ended time.Time) {
	p := &o.progress
	p.finish(f.task.key(), started)
	if f.task.kind != lightTask {
		p.lastLightA = time.Time{}
		return
	}
	if !p.lastLightA.IsZero() {
		p.spent += ended.Sub(p.lastLightA)
		p.spentOn++
	}
	p.lastLightA = ended
}

// LeftOut is how many visits the schedule's end has left out so far.
func (o *Outlook) LeftOut() int { return o.leftOut }
