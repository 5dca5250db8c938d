package engine

import (
	"context"
	"fmt"
	"slices"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// verified is when an axis's zero was last found, or found true, at its reference mark: a part of the
// fold. The zero time means that it has to be looked at before light is counted.
type verified struct {
	at       time.Time
	sequence int64 // of the entry that says so
	wrong    bool  // it slipped, and the controller does not know
}

// axesIn reads the axes that a detail names, as it was made or as JSON gave it back.
func axesIn(detail map[string]any) []drivers.AxisName {
	var all []drivers.AxisName
	switch axes := detail["axes"].(type) {
	case []drivers.AxisName:
		all = axes
	case []any:
		for _, a := range axes {
			if name, ok := a.(string); ok {
				all = append(all, drivers.AxisName(name))
			}
		}
	}
	return all
}

// applyVerified folds what an event says about zeros.
func (p *Progress) applyVerified(ev *protocol.Event) {
	if p.zeros == nil {
		p.zeros = map[drivers.AxisName]verified{}
	}
	switch ev.Kind {
	case protocol.HomedEvent:
		for _, a := range axesIn(ev.Detail) {
			p.zeros[a] = verified{at: ev.At.Time, sequence: ev.Sequence}
		}
	case protocol.Doubted:
		for _, a := range axesIn(ev.Detail) {
			p.zeros[a] = verified{sequence: ev.Sequence}
		}
	case protocol.Held:
		if wrong, _ := ev.Detail["zero_wrong"].(bool); wrong {
			for _, a := range axesIn(ev.Detail) {
				p.zeros[a] = verified{sequence: p.zeros[a].sequence, wrong: true}
			}
		}
	case protocol.Interrupted, protocol.WentOn:
		if _, mended := ev.Detail["cause"]; mended {
			return
		}
		for a, z := range p.zeros {
			p.zeros[a] = verified{sequence: z.sequence, wrong: z.wrong} // nobody saw what happened meanwhile
		}
	}
}

// toVerify is an axis whose zero is to be verified now. closing asks for those that moved light since.
func (e *Engine) toVerify(closing bool) (scan.Axis, bool) {
	for _, a := range e.Bench.Axes {
		if a.Verify == nil {
			continue
		}
		z := e.progress.zeros[a.Name]
		switch {
		case z.at.IsZero(),
			!closing && a.Verify.Every > 0 && !e.now().Before(z.at.Add(a.Verify.Every)),
			closing && e.progress.lastTaken > z.sequence:
			return a, true
		}
	}
	return scan.Axis{}, false
}

// verify looks for an axis's reference mark, with the pump closed and the detectors protected. Where
// the mark is not where it should be, every reading since it last was is doubted, and the zero
// counts as lost.
func (e *Engine) verify(ctx context.Context, a scan.Axis) error {
	op, end := e.operation(ctx)
	defer end()
	mark, err := e.mark(op, a)
	switch {
	case op.Err() != nil:
		return nil
	case err != nil && drivers.RemedyOf(err) == drivers.Reconnect:
		if werr := e.trouble(ctx, err); werr != nil {
			return werr
		}
		end()
		return e.getReady(ctx, err)
	case err != nil:
		return e.holdFor(ctx, protocol.ByTrouble, fmt.Sprintf("held: the zero of %s could not be verified: %s", a.Name, firstLine(err)), errorDetail(err))
	}
	off := mark - *a.HomesAt
	detail := map[string]any{"axes": []drivers.AxisName{a.Name}, "verified": true, "off_deg": off, "tolerance_deg": a.Verify.Tolerance}
	if off.Abs() <= a.Verify.Tolerance {
		return e.note(ctx, protocol.HomedEvent, fmt.Sprintf("%s: zero verified, %s deg off; want at most %s", a.Name, off.Fixed(4), a.Verify.Tolerance), detail)
	}
	if err := e.doubtSince(ctx, a.Name, fmt.Sprintf("%s slipped: its reference mark is %s deg off; want at most %s", a.Name, off.Fixed(4), a.Verify.Tolerance), detail); err != nil {
		return err
	}
	return e.searchAgain(ctx, op, a)
}

// mark goes through the rest state's shutters, asks whether the way is free, and looks for the mark.
func (e *Engine) mark(ctx context.Context, a scan.Axis) (unit.Angle, error) {
	stage := e.stageOf(a)
	seeker, ok := stage.(drivers.Verifier)
	if !ok || a.HomesAt == nil {
		return 0, &drivers.Error{Op: "verify", Device: a.Controller, Remedy: drivers.GiveUp, Err: fmt.Errorf("%s has no reference mark that can be looked for", a.Name)}
	}
	if err := e.protect(ctx); err != nil {
		return 0, err
	}
	if e.Bench.Pump != nil {
		if err := e.shut(ctx, e.Bench.Pump); err != nil {
			return 0, err
		}
	}
	at, err := e.where(ctx)
	if err != nil {
		return 0, err
	}
	if err := route.HomeOrder(e.Bench.Axes, e.Bench.KeepOuts, at, []drivers.AxisName{a.Name}); err != nil {
		return 0, &drivers.Error{Op: "verify", Device: a.Controller, Remedy: drivers.GiveUp, Err: err}
	}
	delete(e.sent, a.Name)
	delete(e.commanded, a.Name)
	return seeker.Mark(ctx, a.Name)
}

// doubtSince doubts every reading since an axis's zero was last known to be true.
func (e *Engine) doubtSince(ctx context.Context, axis drivers.AxisName, why string, detail map[string]any) error {
	from, to := e.progress.zeros[axis].sequence+1, e.progress.Next-1
	delete(detail, "verified")
	if e.progress.lastTaken < from {
		return e.note(ctx, protocol.Trouble, why, detail)
	}
	detail["from_sequence"], detail["to_sequence"], detail["why"] = from, to, why
	return e.note(ctx, protocol.Doubted, fmt.Sprintf("%s; readings %d to %d are doubtful", why, from, to), detail)
}

// doubtUnverified doubts the readings of axes that lost their zero before it was verified: whether
// they had slipped by then nobody can tell any more.
func (e *Engine) doubtUnverified(ctx context.Context, lost []drivers.AxisName) error {
	for _, name := range lost {
		z := e.progress.zeros[name]
		if e.axis(name).Verify == nil || z.wrong || e.progress.lastTaken <= z.sequence {
			continue
		}
		why := fmt.Sprintf("%s lost its zero before it was verified", name)
		if err := e.doubtSince(ctx, name, why, map[string]any{"axes": []drivers.AxisName{name}}); err != nil {
			return err
		}
	}
	return nil
}

// Doubt is what an event of the kind doubted says.
type Doubt struct {
	Text   string
	Detail map[string]any
}

// Unverified lists what is to be doubted when a run ends with its closing verification not made: the
// readings since an axis whose position is only counted was last known to stand where it says.
func (p *Progress) Unverified(axes []scan.Axis) (all []Doubt) {
	for _, a := range axes {
		z := p.zeros[a.Name]
		if a.Verify == nil || p.lastTaken <= z.sequence {
			continue
		}
		from, to := z.sequence+1, p.Next-1
		why := fmt.Sprintf("the run ended before the zero of %s was verified again", a.Name)
		all = append(all, Doubt{fmt.Sprintf("%s; readings %d to %d are doubtful", why, from, to),
			map[string]any{"axes": []drivers.AxisName{a.Name}, "from_sequence": from, "to_sequence": to, "why": why}})
	}
	return all
}

// searchAgain finds the zero of an axis that slipped, or holds for somebody who may.
func (e *Engine) searchAgain(ctx, op context.Context, a scan.Axis) error {
	if !e.homing && !e.Bench.Unattended[a.Controller] {
		return e.holdFor(ctx, protocol.ByTrouble, fmt.Sprintf("held: the zero of %s is wrong; resume when it may search for it, with somebody there", a.Name), map[string]any{"controller": string(a.Controller), "axes": []drivers.AxisName{a.Name}, "zero_wrong": true})
	}
	if err := e.stageOf(a).Home(op, []drivers.AxisName{a.Name}); err != nil {
		if op.Err() != nil {
			return nil
		}
		return e.holdFor(ctx, protocol.ByTrouble, "held: the search for the zero failed: "+firstLine(err), errorDetail(err))
	}
	return e.note(ctx, protocol.HomedEvent, fmt.Sprintf("%s found the zero of %s", a.Controller, a.Name), map[string]any{"controller": string(a.Controller), "axes": []drivers.AxisName{a.Name}})
}

func (e *Engine) stageOf(a scan.Axis) drivers.Stage {
	i := slices.IndexFunc(e.Bench.Stages, func(s drivers.Stage) bool { return s.Name() == a.Controller })
	return e.Bench.Stages[i]
}
