//go:build unix

package main

import (
	"encoding/json"
	"fmt"
	"path/filepath"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

// A clock that is set back must not make a word given for a night last for years, nor one that is set
// forward make anything armed.
func TestArmingDoesNotOutlastAClockThatIsSet(t *testing.T) {
	at := time.Date(2031, 2, 3, 22, 0, 0, 0, time.UTC)
	a := arming{At: at, Until: at.Add(9 * time.Hour), Who: "somebody"}
	for _, c := range []struct {
		name string
		now  time.Time
		want bool
	}{
		{"at once", at, true},
		{"in the night", at.Add(4 * time.Hour), true},
		{"at the end", at.Add(9 * time.Hour), false},
		{"after a correction by some seconds", at.Add(-3 * time.Second), true},
		{"after the clock was set back by an hour, soon after", at.Add(-time.Hour), false},
		{"after the clock fell back to its first year", time.Date(1970, 1, 1, 0, 0, 0, 0, time.UTC), false},
		{"after the clock was set forward by years", at.AddDate(10, 0, 0), false},
	} {
		if got := a.covers(c.now); got != c.want {
			t.Errorf("%s: armed %t; want %t", c.name, got, c.want)
		}
	}
	if (arming{Until: at}).covers(at.Add(-time.Second)) {
		t.Error("a file that does not say when it was written arms the bench")
	}
	if (arming{At: at, Until: at.AddDate(1, 0, 0)}).covers(at.Add(30 * time.Hour)) {
		t.Error("a file that says a year arms the bench for more than a day")
	}
}

// The clock was hours ahead and is right again: what was written lies in the future. The run goes on at
// once, and its times do not run backwards.
func TestALogbookThatEndsInTheFutureIsGoneOnWith(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	args := []string{"--bench", quick(t, dir), "--data", data}
	p, ok := serve(t, nil, args...)
	if !ok {
		t.Fatalf("serve: %s", p.err)
	}
	run := started(t, data, killRecipe, "future")
	awaitRow(t, p, data, run, "counting", func(logbook.RunRow) bool {
		n := 0
		for _, e := range entriesOf(t, data) {
			if e.Kind == protocol.ReadingEntry {
				n++
			}
		}
		return n >= 3
	})
	p.signal(syscall.SIGTERM)
	if code := p.wait(); code != exitDone {
		t.Fatalf("serve: exit code %d\n%s", code, p.err)
	}
	ahead := time.Now().Add(3 * time.Hour)
	func() {
		book, err := logbook.Open(data)
		if err != nil {
			t.Fatal(err)
		}
		defer book.Close()
		last, err := book.Last(t.Context(), run)
		if err != nil {
			t.Fatal(err)
		}
		body, err := json.Marshal(protocol.Event{
			Head: protocol.Head{Schema: protocol.EventSchema, Bench: "skerry", Run: run, Sequence: last + 1, At: protocol.Time{Time: ahead}},
			Kind: protocol.Trouble, Text: "written while the clock was ahead", State: protocol.Holding, Causes: []protocol.Cause{protocol.ByRestart}, Detail: map[string]any{},
		})
		if err == nil {
			err = book.Append(t.Context(), protocol.Entry{Run: run, Sequence: last + 1, Kind: protocol.EventEntry, Body: body})
		}
		if err != nil {
			t.Fatal(err)
		}
	}()
	if p, ok = serve(t, nil, args...); !ok {
		t.Fatalf("serve: %s", p.err)
	}
	awaitRow(t, p, data, run, "finished", func(r logbook.RunRow) bool { return r.State == protocol.Finished })
	mustCatchUp(t, p, data)
	var before protocol.Head
	behind := 0
	for _, e := range entriesOf(t, data) {
		if e.Run != run {
			continue
		}
		head := headOf(t, e.Entry)
		if head.At.Before(before.At.Time) {
			t.Errorf("entry %d is of %s; the one before it of %s", head.Sequence, head.At, before.At)
		}
		if before.At.Equal(ahead) || behind > 0 {
			behind++
		}
		before = head
	}
	if behind < 5 || before.At.After(ahead.Add(patience)) {
		t.Errorf("%d entries follow the one of %s, the last of %s; want the rest of the run, as long after it as it took", behind, ahead, before.At)
	}
	if out := must(t, "check", "--data", data); out == "" {
		t.Error("check says nothing")
	}
	t.Log(fmt.Sprint(behind, " entries after the step"))
}
