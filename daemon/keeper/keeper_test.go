package keeper

import (
	"context"
	"errors"
	"strings"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
	"gemel/scan/engine"
)

// keeping makes a keeper over a real logbook and a bench that nothing is asked of.
func keeping(t *testing.T, change func(*Config)) (*Keeper, *logbook.Book) {
	t.Helper()
	book, err := logbook.Open(t.TempDir())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		for _, wrong := range book.Verify(context.Background()) {
			t.Errorf("the logbook: %s", wrong)
		}
		if err := book.Close(); err != nil {
			t.Error(err)
		}
	})
	c := Config{
		Book: book, Bench: &engine.Bench{Name: "skerry", Pace: 1, Simulated: true}, BenchText: "bench: {name: skerry}", Version: "test",
		Plan: func(text string, _ time.Time, _ func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
			if strings.Contains(text, "bad") {
				return scan.Plan{}, &strict.Error{Findings: []protocol.Finding{{File: "recipe", Line: 2, Col: 1, Key: "dwell", Found: "bad", Want: "a time"}}}
			}
			return scan.Plan{Title: text, Points: []scan.Point{{}}, Repeat: scan.Repeat{Times: 1}}, nil
		},
	}
	if change != nil {
		change(&c)
	}
	return New(c), book
}

func code(err error) int {
	if r, ok := errors.AsType[*protocol.Refusal](err); ok {
		return r.Code
	}
	return 0
}

func TestOneKeyIsOneRunAndAnotherRecipeUnderItIsRefused(t *testing.T) {
	k, book := keeping(t, nil)
	first, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k", Who: "ann"})
	if err != nil {
		t.Fatal(err)
	}
	again, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k", Who: "ann"})
	if err != nil || again.Run != first.Run {
		t.Errorf("asked again: %v, %v; want run %s", again, err, first.Run)
	}
	if _, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "title: b", Key: "k"}); code(err) != 409 || !strings.Contains(err.Error(), string(first.Run)) {
		t.Errorf("another recipe under the key: %v; want 409 that names the run", err)
	}
	rows, err := book.Runs(t.Context())
	if err != nil || len(rows) != 1 {
		t.Errorf("%d runs, %v; want one", len(rows), err)
	}
}

func TestStartsThatCannotBeAreRefusedAndWriteNothing(t *testing.T) {
	k, book := keeping(t, nil)
	for name, c := range map[string]struct {
		request protocol.StartRequest
		code    int
	}{
		"nothing to run":        {protocol.StartRequest{Key: "k"}, 400},
		"two recipes":           {protocol.StartRequest{Recipe: "a", RecipeName: "b", Key: "k"}, 400},
		"no key":                {protocol.StartRequest{Recipe: "a"}, 400},
		"a name and no folder":  {protocol.StartRequest{RecipeName: "b", Key: "k"}, 404},
		"a recipe with finding": {protocol.StartRequest{Recipe: "bad", Key: "k"}, 422},
	} {
		_, err := k.Start(t.Context(), c.request)
		if code(err) != c.code {
			t.Errorf("%s: %v; want %d", name, err, c.code)
		}
		if r, _ := errors.AsType[*protocol.Refusal](err); c.code == 422 && (r == nil || len(r.Findings) != 1 || r.Findings[0].Line != 2) {
			t.Errorf("%s: findings of %v; want the recipe's", name, err)
		}
	}
	k.Armed = func(time.Time) bool { return false }
	if _, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "a", Key: "k"}); code(err) != 403 {
		t.Errorf("not armed: %v; want 403", err)
	}
	if rows, err := book.Runs(t.Context()); err != nil || len(rows) != 0 {
		t.Errorf("%d runs, %v; want none", len(rows), err)
	}
}

func TestARunInTheQueueCanBeStoppedOnceAndNothingElse(t *testing.T) {
	k, book := keeping(t, nil)
	r, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k", Who: "ann\n\x1b[31mbob"})
	if err != nil {
		t.Fatal(err)
	}
	if s := k.Status(t.Context()); len(s.Queue) != 1 || s.Queue[0] != r.Run || s.Run != "" {
		t.Errorf("status %+v; want the run in the queue and none active", s)
	}
	ask := protocol.RunRequest{Run: r.Run, Who: "ann"}
	if _, err := k.Hold(t.Context(), ask); code(err) != 409 {
		t.Errorf("hold: %v; want 409", err)
	}
	if _, err := k.Resume(t.Context(), ask); code(err) != 409 {
		t.Errorf("resume: %v; want 409", err)
	}
	reply, err := k.Stop(t.Context(), ask)
	if err != nil || reply.State != protocol.Stopped || !reply.Recorded {
		t.Errorf("stop: %+v, %v; want stopped", reply, err)
	}
	if _, err := k.Stop(t.Context(), ask); code(err) != 409 {
		t.Errorf("stop again: %v; want 409", err)
	}
	if _, err := k.Stop(t.Context(), protocol.RunRequest{Run: "nosuch"}); code(err) != 404 {
		t.Errorf("stop of another: %v; want 404", err)
	}
	if _, err := k.Stop(t.Context(), protocol.RunRequest{}); code(err) != 400 {
		t.Errorf("stop of nothing: %v; want 400", err)
	}
	entries, err := book.Entries(t.Context(), r.Run, 0, 10)
	if err != nil || len(entries) != 2 || !strings.Contains(string(entries[0].Body), `asked for by ann[31mbob"`) {
		t.Errorf("entries %v, %v; want the asking without control characters, and the end", entries, err)
	}
}

func TestARunWhoseBenchFileChangedIsFailedAndNotExecuted(t *testing.T) {
	k, book := keeping(t, nil)
	r, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k"})
	if err != nil {
		t.Fatal(err)
	}
	changed := k.Config
	changed.BenchText += " # zero moved"
	state, err := New(changed).RunOne(t.Context(), r.Run)
	if err != nil || state != protocol.Failed {
		t.Errorf("RunOne() = %s, %v; want failed", state, err)
	}
	row, err := book.Run(t.Context(), r.Run)
	if err != nil || row.State != protocol.Failed || !strings.Contains(row.Reason, "bench file was changed") {
		t.Errorf("the run is %s (%s), %v; want failed for its bench file", row.State, row.Reason, err)
	}
}

func TestRunNamesSortByTimeAndDiffer(t *testing.T) {
	k, _ := keeping(t, nil)
	now := time.Date(2031, 2, 3, 4, 5, 6, 7, time.UTC)
	a, b, later := k.name(now, "a"), k.name(now, "b"), k.name(now.Add(time.Second), "a")
	if a == b || a >= later || !protocol.IsToken(string(a)) {
		t.Errorf("names %s, %s, then %s; want tokens that differ and sort", a, b, later)
	}
}
