package engine

import (
	"context"
	"fmt"

	"gemel/protocol"
	"gemel/scan"
)

// findEarlier works the plan out again with what earlier results give now. Without them nothing is
// decided and nothing moves.
func (e *Engine) findEarlier(ctx context.Context) error {
	if e.Replan != nil {
		plan, err := e.Replan(ctx)
		if ctx.Err() != nil {
			return ctx.Err() // the end of the program decides nothing
		}
		if err != nil {
			return e.end(ctx, protocol.Failed, "failed: the recipe cannot be run with the values that earlier results give: "+err.Error(), nil)
		}
		e.Plan = plan
		e.progress.plan(&e.Plan)
	}
	open := e.Plan.Open()
	if len(open) == 0 {
		return nil
	}
	text := fmt.Sprintf("no value for the %s of %s: %s", open[0].Ask.Kind, open[0].Ask.Of(), open[0].Missing)
	for _, o := range open {
		if o.Otherwise == scan.Stop {
			return e.end(ctx, protocol.Failed, "failed: "+text, nil)
		}
	}
	return e.holdFor(ctx, protocol.ByTrouble, "held: "+text+"; resume when there is one", nil)
}

// earlierBody is what the first entry of points keeps of earlier results.
func (e *Engine) earlierBody() []protocol.EarlierValue {
	var all []protocol.EarlierValue
	for _, q := range e.Plan.Earlier {
		v := protocol.EarlierValue{Kind: string(q.Ask.Kind), Axis: string(q.Ask.Axis), Setting: string(q.Ask.Setting), From: q.Ask.From,
			Run: protocol.RunID(q.Source.Run), Sequence: q.Source.Sequence, U: q.Source.U}
		if q.Ask.Axis != "" {
			v.Angle = &q.Source.Angle
		} else {
			v.Value = &q.Source.Value
		}
		all = append(all, v)
	}
	return all
}
