package engine

import (
	"context"
	"fmt"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/route"
)

// refinable says that the first pass, and what was added so far, is done, and more may follow.
func (e *Engine) refinable() bool {
	p := &e.progress
	return e.Plan.Refine != nil && e.Refine != nil && !p.refineDone && !p.cut && p.visited()
}

// refine asks which points are to be added, and writes the decision before anything moves.
func (e *Engine) refine(ctx context.Context) error {
	p, bound := &e.progress, e.Plan.Refine
	body := &protocol.Points{Refined: p.refineRound + 1, Points: []protocol.Point{}}
	room := bound.AtMost - len(p.refined)
	switch {
	case room <= 0:
		body.Grounds = fmt.Sprintf("refined: the bound of %d points is reached", bound.AtMost)
	case bound.Within > 0 && !p.refinedAt.IsZero() && e.now().Sub(p.refinedAt) >= bound.Within:
		body.Grounds = fmt.Sprintf("refined: the bound of %s is reached", unit.Span(bound.Within))
	default:
		e.rest(ctx) // it may take a while, and nothing moves meanwhile
		more, err := e.Refine(ctx, body.Refined)
		if ctx.Err() != nil {
			return ctx.Err() // the end of the program decides nothing
		}
		if err != nil {
			body.Grounds = "not refined: " + firstLine(err)
			break
		}
		body.Grounds = more.Grounds
		next := len(e.Plan.Points) + len(p.refined)
		for _, point := range more.Points[:min(room, len(more.Points))] {
			for _, t := range point.Axes {
				if err := route.Check(e.axis(t.Axis), t.Angle); err != nil {
					return fmt.Errorf("a refinement's point: %w", err) // it was told the limits: our bug
				}
			}
			body.Points = append(body.Points, e.pointBody(next+len(body.Points), point))
		}
	}
	if err := e.write(ctx, protocol.PointEntry, &body.Head, body, protocol.PointSchema); err != nil {
		return err
	}
	p.applyPoints(body)
	e.publishSnapshot()
	return nil
}
