package main

import (
	"context"
	"slices"
	"sync"

	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
)

// teller is a keeper whose status says what only the logbook, the courier and the events tell beside
// it: how the run before a restart ended, what is wrong outside any run, and
// why entries wait to be published.
type teller struct {
	*keeper.Keeper
	book    *logbook.Book
	courier func() error // its trouble

	before   sync.Once
	recalled protocol.Status // of the run before this start; no run: there is none

	mu      sync.Mutex
	trouble protocol.Event // of the bench outside any run, since this start and until a run went over it
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
