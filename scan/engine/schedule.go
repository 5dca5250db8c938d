package engine

import (
	"context"
	"fmt"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// overhead is what a reading may take beside its dwell before the run has measured it.
const overhead = 15 * time.Second

// early waits, at rest, while the schedule says that it is too early. waited says that the loop has
// to look again.
func (e *Engine) early(ctx context.Context) (waited bool) {
	left := e.Plan.Schedule.NotBefore.Sub(e.now())
	if e.Plan.Schedule.NotBefore.IsZero() || left <= 0 {
		return false
	}
	op, end := e.operation(ctx)
	defer end()
	_ = e.Bench.Pace.Wait(op, min(left, time.Minute))
	return true
}

// cutAtEnd leaves the rest of the sweep out when the next visit and the closing readings would not
// be over by the schedule's end. The closing readings are reserved time: they happen all the same.
func (e *Engine) cutAtEnd(ctx context.Context, t task) (cut bool, err error) {
	end := e.Plan.Schedule.FinishBy
	p := &e.progress
	if within := e.refineWithin(); within > 0 && t.kind == lightTask && !p.cut && t.visit.Point >= len(e.Plan.Points) && e.now().Sub(p.refinedAt) >= within {
		left := p.left()
		return true, e.note(ctx, protocol.SetAside, fmt.Sprintf("%d added points are left out: refining may take %s", left, unit.Span(within)), map[string]any{"task": string(restTask), "left_out": left})
	}
	if !p.tooLate(t, e.now()) {
		return false, nil
	}
	left := p.left()
	return true, e.note(ctx, protocol.SetAside, fmt.Sprintf("%d visits are left out: they would not be over by %s", left, end.Format("15:04")),
		map[string]any{"task": string(restTask), "left_out": left, "finish_by": protocol.Time{Time: end}.String()})
}

// tooLate is the rule that the cut goes by: whether a visit that begins now, and the closing readings
// after it, would not be over by the schedule's end.
func (p *Progress) tooLate(t task, now time.Time) bool {
	end := p.thePlan.Schedule.FinishBy
	if end.IsZero() || t.kind != lightTask || p.cut {
		return false
	}
	need := t.dwell.Time + overhead
	if p.spentOn > 0 {
		need = max(t.dwell.Time, p.spent/time.Duration(p.spentOn)) + overhead/3
	}
	for _, c := range p.cadences() {
		if c.AtEnd {
			need += time.Duration(p.readings(c)) * (c.Dwell.Time + overhead)
		}
	}
	return now.Add(need).After(end)
}

func (e *Engine) refineWithin() time.Duration {
	if e.Plan.Refine == nil {
		return 0
	}
	return e.Plan.Refine.Within
}
