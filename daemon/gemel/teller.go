package main

import (
	"context"
	"slices"
	"sync"
	"time"

	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/engine"
)

// teller is a keeper whose status says what only the logbook, the courier and the events tell beside
// it: how the run before a restart ended, how long a hold lasts, what is wrong outside any run, and
// why entries wait to be published.
type teller struct {
	*keeper.Keeper
	book    *logbook.Book
	bench   *engine.Bench
	courier func() error // its trouble

	before   sync.Once
	recalled protocol.Status // of the run before this start; no run: there is none

	mu      sync.Mutex
	holds   protocol.Event // that the run holds for; no state: it does not hold
	since   time.Time
	trouble protocol.Event // of the bench outside any run, since this start and until a run went over it

	planned protocol.RunID // that plan is of
	plan    scan.Plan
}

// hear takes in an event when it is written.
func (t *teller) hear(ev protocol.Event) {
	t.mu.Lock()
	defer t.mu.Unlock()
	if ev.Run == protocol.BenchRun {
		if ev.Kind == protocol.Trouble {
			t.trouble = ev
		}
		return
	}
	if ev.Kind == protocol.Began || ev.Kind == protocol.WentOn || ev.Kind == protocol.Ended {
		t.trouble = protocol.Event{} // it went through the rest state, and says so where that was not reached
	}
	switch {
	case ev.State == protocol.Queued: // of another one
	case ev.State != protocol.Holding:
		t.holds = protocol.Event{}
	case t.holds.State == "" || t.holds.Run != ev.Run || ev.Kind == protocol.Held || ev.Kind == protocol.GuardBroken || ev.Kind == protocol.WentOn || ev.Kind == protocol.Interrupted:
		t.holds, t.since = ev, time.Now()
	}
}

// Status is the keeper's, and more.
func (t *teller) Status(ctx context.Context) protocol.Status {
	s := t.Keeper.Status(ctx)
	if s.Run == "" {
		t.before.Do(func() { t.recalled = t.recall(ctx) })
		if r := t.recalled; r.Run != "" {
			s.Run, s.Title, s.State, s.Reason, s.EndedAt = r.Run, r.Title, r.State, r.Reason, r.EndedAt
			s.ReadingsAccepted, s.ReadingsPlanned, s.ReadingsSetAside = r.ReadingsAccepted, r.ReadingsPlanned, r.ReadingsSetAside
		}
	}
	if s.Behind > 0 {
		if err := t.courier(); err != nil {
			s.Unpublished = err.Error()
		}
	}
	t.mu.Lock()
	defer t.mu.Unlock()
	if t.trouble.Text != "" {
		s.BenchTrouble, s.BenchTroubleAt = t.trouble.Text, &t.trouble.At
	}
	if s.State == protocol.Holding {
		t.bound(ctx, &s)
	}
	return s
}

// recall finds the run that ended last. One that was withdrawn before it began is none.
func (t *teller) recall(ctx context.Context) (s protocol.Status) {
	runs, err := t.book.Runs(ctx)
	if err != nil {
		return s // whoever must read the logbook tells that
	}
	runs = slices.DeleteFunc(runs, func(r logbook.RunRow) bool {
		return r.EndedAt.IsZero() || r.State == protocol.Stopped && r.StartedAt.IsZero()
	})
	if len(runs) == 0 {
		return s
	}
	last := slices.MaxFunc(runs, func(a, b logbook.RunRow) int { return a.EndedAt.Compare(b.EndedAt.Time) })
	night, err := report.NightOf(ctx, t.book, last.Run)
	if err != nil {
		return s
	}
	return protocol.Status{Run: last.Run, Title: last.Title, State: last.State, Reason: last.Reason, EndedAt: &last.EndedAt,
		ReadingsAccepted: night.Accepted, ReadingsPlanned: night.Planned, ReadingsSetAside: night.SetAside}
}

// Looks of the engine at what mends itself, in bench time.
const (
	looksAtSensors = 10 * time.Second
	looksAtLight   = 30 * time.Second // and at the disk
)

// bound says until when the run holds before it fails, and whether it looks by itself. Of a hold that
// no event of this start tells, nothing is known.
func (t *teller) bound(ctx context.Context, s *protocol.Status) {
	if t.holds.State != protocol.Holding || t.holds.Run != s.Run {
		return
	}
	if t.planned != s.Run {
		plan, err := report.PlanOf(ctx, t.book, s.Run)
		if err != nil {
			return
		}
		t.planned, t.plan = s.Run, plan
	}
	holds := func(c protocol.Cause) bool { return slices.Contains(s.Causes, c) }
	s.HoldingSince = &protocol.Time{Time: t.since}
	patience := t.plan.Trouble.GiveUpAfter
	if patience <= 0 {
		patience = engine.DefaultPatience
	}
	var every time.Duration
	switch {
	case holds(protocol.ByStorage):
		every = looksAtLight
	case holds(protocol.ByGuard):
		every = looksAtSensors
		name, _ := t.holds.Detail["guard"].(string)
		for _, g := range t.plan.Guards {
			if g.Name != name {
				continue
			}
			if g.Sensor == "" {
				every = looksAtLight
			}
			if g.GiveUpAfter > 0 {
				patience = g.GiveUpAfter
			}
		}
	case len(s.Causes) == 1 && holds(protocol.ByLight):
		every = looksAtLight
	}
	pace := t.bench.Pace
	if !holds(protocol.ByOperator) {
		s.GivesUpAt = &protocol.Time{Time: t.since.Add(pace.Real(patience))}
	}
	person := holds(protocol.ByOperator) || holds(protocol.ByTrouble) || holds(protocol.ByRestart)
	if every > 0 && !person {
		looks := protocol.Seconds(pace.Real(every))
		s.LooksAgain = &looks
	}
}
