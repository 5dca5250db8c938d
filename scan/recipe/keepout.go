package recipe

import (
	"errors"
	"fmt"
	"slices"
	"strings"

	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
	"gemel/scan/route"
)

// mostKeptOut is how many points in keep-outs are told one by one.
const mostKeptOut = 5

// keptOut says which points, ways between them and references keep-outs forbid. What is free with
// the pump closed is no finding: the run closes it for that way. Of shuffled points the places are
// judged and the ways of one order only, since each pass has its own: the others are judged at the
// moment of moving.
func (r *Recipe) keptOut(f Facts, plan scan.Plan) []protocol.Finding {
	if len(f.KeepOuts) == 0 || len(plan.Open()) > 0 {
		return nil
	}
	findings := r.judged(f, plan, "point", r.sweepAt)
	if q := plan.Reference; q != nil {
		set := scan.Plan{Repeat: scan.Repeat{Times: 1}}
		for _, p := range q.Places {
			set.Points = append(set.Points, scan.Point{Axes: p.Axes})
		}
		findings = append(findings, r.judged(f, set, "place of the reference", r.Reference.Cadence.at)...)
	}
	return findings
}

// judged runs a plan past the keep-outs. What it is about is named where it is no axis of the sweep's.
func (r *Recipe) judged(f Facts, plan scan.Plan, what string, at strict.Place) (findings []protocol.Finding) {
	wrong, err := route.CheckPlan(f.Axes, f.KeepOuts, plan, nil)
	if err != nil {
		return []protocol.Finding{at.Finding(err.Error(), "keep-outs that mean something, in the bench file")}
	}
	wrong = slices.DeleteFunc(wrong, func(w route.Finding) bool { return w.PumpClosed })
	for i, w := range wrong {
		here := at
		if what == "point" {
			here = r.inTheWay(w, at)
		}
		if i == mostKeptOut {
			more := fmt.Sprintf("%d more", len(wrong)-i)
			if len(wrong) == route.MostFindings {
				more += " and then some"
			}
			return append(findings, here.Finding(more+", in keep-outs", "the ones above mended first"))
		}
		found, want, ok := strings.Cut(w.Err.Error(), "; ")
		if keepOut, wants, told := strings.Cut(want, " wants "); told {
			found, want = found+", "+keepOut, wants
		} else if !ok {
			want = "a way that no keep-out forbids"
		}
		switch {
		case w.Point < 0:
		case w.From >= 0 && w.From != w.Point:
			found = fmt.Sprintf("on the way from %s %d to %s %d: %s", what, w.From, what, w.Point, found)
		default:
			found = fmt.Sprintf("%s %d: %s", what, w.Point, found)
		}
		findings = append(findings, here.Finding(found, want))
	}
	return findings
}

// inTheWay is the place of the innermost entry that moves an axis which a finding is about.
func (r *Recipe) inTheWay(w route.Finding, or strict.Place) strict.Place {
	if w.Point < 0 && r.Background != nil {
		return r.Background.turnAt
	}
	conflict, ok := errors.AsType[*route.Conflict](w.Err)
	if !ok {
		return or
	}
	for _, c := range slices.Backward(r.columns()) {
		if slices.Contains(conflict.Axes, c.Axis) {
			return c.nameAt
		}
	}
	return or
}
