//go:build unix

package main

import (
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

func TestAHoldSaysWhatItWaitsFor(t *testing.T) {
	at, every := &protocol.Time{Time: time.Date(2031, 2, 3, 4, 5, 6, 0, time.Local)}, protocol.Seconds(30*time.Second)
	for name, c := range map[string]struct {
		causes []protocol.Cause
		fails  *protocol.Time
		looks  *protocol.Seconds
		said   string
	}{
		"light":       {[]protocol.Cause{protocol.ByLight}, at, &every, "It looks again by itself every 30 s, and goes on when that is over. If nothing ends the hold, the run fails at 2031-02-03 04:05:06."},
		"a trouble":   {[]protocol.Cause{protocol.ByTrouble}, at, nil, "gemel resume, or gemel stop. See to what is named first"},
		"an operator": {[]protocol.Cause{protocol.ByOperator}, nil, nil, "It waits for a person: gemel resume, or gemel stop."},
	} {
		text := sentence(protocol.Status{Run: "r1", State: protocol.Holding, Causes: c.causes, GivesUpAt: c.fails, LooksAgain: c.looks})
		if !strings.Contains(text, c.said) || strings.Contains(text, "the run fails at") != (c.fails != nil) {
			t.Errorf("%s: said %q; want %q", name, text, c.said)
		}
	}
}

func TestATroubleOfTheBenchIsToldUntilARunWentOverIt(t *testing.T) {
	tell := &teller{}
	tell.hear(protocol.Event{Head: protocol.Head{Run: protocol.BenchRun}, Kind: protocol.Trouble, Text: "at the start the rest state was not reached: laser: away"})
	if tell.trouble.Text == "" {
		t.Fatal("it is not kept")
	}
	if text := beside(protocol.Status{BenchTrouble: tell.trouble.Text, Behind: 3, Unpublished: "no broker"}); !strings.Contains(text, "At the bench: at the start the rest state") || !strings.Contains(text, "3 entries are not published, the logbook has them: no broker") {
		t.Errorf("said %q", text)
	}
	tell.hear(protocol.Event{Head: protocol.Head{Run: "r1"}, Kind: protocol.OperatorDid, State: protocol.Queued})
	if tell.trouble.Text == "" {
		t.Error("a run that waits took it away")
	}
	tell.hear(protocol.Event{Head: protocol.Head{Run: "r1"}, Kind: protocol.Began, State: protocol.Running})
	if tell.trouble.Text != "" {
		t.Error("a run that began did not take it away")
	}
}

func TestAfterARestartTheRunThatEndedLastIsTold(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	args := []string{"--bench", quick(t, dir), "--data", data}
	p, ok := serve(t, nil, args...)
	if !ok {
		t.Fatalf("serve: %s", p.err)
	}
	run := started(t, data, "title: One\ndwell: 20 ms\n", "one")
	row := awaitRow(t, p, data, run, "finished", func(r logbook.RunRow) bool { return r.State == protocol.Finished })
	p.signal(syscall.SIGKILL)
	p.wait()
	if p, ok = serve(t, nil, args...); !ok {
		t.Fatalf("serve again: %s", p.err)
	}
	out := must(t, "status", "--data", data)
	for _, want := range []string{string(run), `"One": finished`, ", at " + row.EndedAt.Local().Format(time.DateTime), "gemel report --run " + string(run)} {
		if !strings.Contains(out, want) {
			t.Errorf("status says %s\nwant %q", out, want)
		}
	}
	out = must(t, "report", "--data", data, "--run", string(run))
	if !strings.Contains(out, "asks for no result") || !strings.Contains(out, "The night, in local time") {
		t.Errorf("report of a run without a result:\n%s", out)
	}
	if out = must(t, "report", "--data", data, "--run", string(run), "--json"); !strings.Contains(out, `"results": []`) {
		t.Errorf("report --json of a run without a result:\n%s", out)
	}
	if out = must(t, "check", "--data", data); !strings.Contains(out, `finished  "One", ended `) {
		t.Errorf("check:\n%s", out)
	}
}
