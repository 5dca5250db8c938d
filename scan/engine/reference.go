package engine

import (
	"context"
	"fmt"
	"maps"
	"slices"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// references is where a run's references stand: a part of the fold. A set that a hold or an
// interruption cut is left incomplete, and another one is taken.
type references struct {
	set         int   // the last one begun, from 1; 0: none
	placed      int   // its readings so far
	places      int   // how many it needs; 0: it was abandoned
	first, last int64 // entries of its first and its last reading
	startedAt   time.Time
	due         bool      // one is to be taken before the next light
	pending     bool      // complete, and not judged yet
	baseline    int       // the set that others are compared with; 0: the next complete one
	held        bool      // a bad one holds the run
	untold      bool      // it was written that a bound cannot be judged: once is enough
	goodUntil   int64     // entry of the last reading of the last good set
	goodAt      time.Time // when that set began; zero: there is none
}

// begun says whether a set is incomplete, and the place that is next.
func (f *references) begun() (place int, ok bool) {
	return f.placed, f.placed > 0 && f.placed < f.places
}

// passed is told that the pending set was judged, and good.
func (f *references) passed() {
	if f.pending {
		f.pending, f.goodUntil, f.goodAt = false, f.last, f.startedAt
	}
}

func (f *references) abandon() { f.placed, f.places, f.pending = 0, 0, false }

func (f *references) applyEvent(ev *protocol.Event) {
	if _, bad := ev.Detail["reference"]; bad && ev.Kind != protocol.Ended {
		f.pending = false
		f.held = f.held || ev.State == protocol.Holding
	}
	if untold, _ := ev.Detail["untold"].(bool); untold {
		f.untold = true
	}
	switch ev.Kind {
	case protocol.Held, protocol.Interrupted, protocol.GuardBroken:
		if _, begun := f.begun(); begun {
			f.abandon()
			f.due = true
		}
		f.due = f.due || f.set > 0 && ev.Kind == protocol.Interrupted
	case protocol.WentOn:
		if _, mended := ev.Detail["cause"]; mended {
			return
		}
		f.due = f.due || f.set > 0 // somebody was at the bench, or nobody was for a while
		if f.held && !slices.Contains(ev.Causes, protocol.ByTrouble) {
			f.held, f.baseline = false, 0 // a person has seen the drift: from here it is counted anew
		}
	}
}

// applyReference adds an accepted reading of a set.
func (p *Progress) applyReference(r *protocol.Reading) {
	f := &p.ref
	key, _ := readingKey(r)
	delete(p.attempts, key)
	p.lastLightA = time.Time{}
	if r.Reference.Place == 0 {
		f.set, f.first, f.startedAt, f.places = r.Reference.Set, r.Sequence, r.StartedAt.Time, r.Reference.Places
	}
	f.placed, f.last = r.Reference.Place+1, r.Sequence
	if f.placed < f.places {
		return
	}
	f.due = false
	p.series[referenceTask] = series{taken: p.series[referenceTask].taken + 1, at: f.startedAt, after: true}
	f.pending = true
	if f.baseline == 0 {
		f.baseline = f.set
		f.passed()
	}
}

// referenceAt is the task of one place of a set.
func (p *Progress) referenceAt(place, set int) task {
	return task{kind: referenceTask, visit: scan.Visit{Point: place, Visit: set}, dwell: p.thePlan.Reference.Dwell}
}

// judge asks what the set that was just completed says, and acts on it. A bad one doubts every
// reading since the last good one.
func (e *Engine) judge(ctx context.Context) error {
	f, p := &e.progress.ref, &e.progress
	if e.Judge == nil {
		f.passed()
		return nil
	}
	verdict, err := e.Judge(ctx, f.set, f.baseline)
	if ctx.Err() != nil {
		return ctx.Err() // the end of the program decides nothing
	}
	if err != nil {
		return e.note(ctx, protocol.Trouble, fmt.Sprintf("reference %d cannot be judged: %s", f.set, firstLine(err)), map[string]any{"reference": f.set, "compared_with": f.baseline})
	}
	if verdict.Good {
		f.passed()
		if !verdict.Untold || f.untold {
			return nil
		}
		return e.note(ctx, protocol.Trouble, fmt.Sprintf("reference %d against %d: %s", f.set, f.baseline, verdict.Text), map[string]any{"untold": true, "changes": verdict.Detail})
	}
	text := fmt.Sprintf("reference %d against %d: %s", f.set, f.baseline, verdict.Text)
	detail := map[string]any{}
	maps.Copy(detail, verdict.Detail)
	detail["reference"], detail["compared_with"] = f.set, f.baseline
	kind := protocol.Trouble
	if from, to := f.goodUntil+1, f.first-1; from <= to {
		kind = protocol.Doubted
		detail["from_sequence"], detail["to_sequence"], detail["why"] = from, to, text
		text += fmt.Sprintf("; readings %d to %d are doubtful", from, to)
	}
	over := p.visited() || p.cut // nothing comes that a hold could save
	switch {
	case e.Plan.Reference.Otherwise == scan.Stop && !over:
		if err := e.note(ctx, kind, text, detail); err != nil {
			return err
		}
		return e.end(ctx, protocol.Failed, "failed: "+text, map[string]any{"reference": f.set})
	case e.Plan.Reference.Otherwise == scan.Hold && !over:
		bad := e.rest(ctx)
		e.waitsSince = e.now()
		return e.event(ctx, kind, "held: "+text+withBad(bad), protocol.Holding, add(p.Causes, protocol.ByTrouble), detail)
	}
	return e.note(ctx, kind, text, detail)
}
