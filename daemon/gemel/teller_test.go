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
	"gemel/scan"
	"gemel/scan/engine"
)

func TestAHoldTellsHowLongItLastsAndWhatItWaitsFor(t *testing.T) {
	for name, c := range map[string]struct {
		kind   protocol.EventKind
		detail map[string]any
		causes []protocol.Cause
		fails  time.Duration // after it began; 0: never
		looks  time.Duration // 0: a person
		said   string
	}{
		"light":              {protocol.Held, nil, []protocol.Cause{protocol.ByLight}, 2 * time.Hour, 30 * time.Second, "It looks again by itself every 30 s"},
		"storage":            {protocol.Held, nil, []protocol.Cause{protocol.ByStorage}, 2 * time.Hour, 30 * time.Second, "It looks again by itself every 30 s"},
		"a sensor's guard":   {protocol.GuardBroken, map[string]any{"guard": "power"}, []protocol.Cause{protocol.ByGuard}, time.Hour, 10 * time.Second, "It looks again by itself every 10 s"},
		"a rate's guard":     {protocol.GuardBroken, map[string]any{"guard": "rate"}, []protocol.Cause{protocol.ByGuard}, 2 * time.Hour, 30 * time.Second, "It looks again by itself every 30 s"},
		"a trouble":          {protocol.Held, nil, []protocol.Cause{protocol.ByTrouble}, 2 * time.Hour, 0, "gemel resume, or gemel stop. See to what is named first"},
		"an operator":        {protocol.Held, nil, []protocol.Cause{protocol.ByOperator}, 0, 0, "It waits for a person: gemel resume, or gemel stop."},
		"light and operator": {protocol.Held, nil, []protocol.Cause{protocol.ByLight, protocol.ByOperator}, 0, 0, "It waits for a person: gemel resume, or gemel stop."},
	} {
		t.Run(name, func(t *testing.T) {
			tell := &teller{bench: &engine.Bench{}, planned: "r1"}
			tell.plan.Trouble.GiveUpAfter = 2 * time.Hour
			tell.plan.Guards = []scan.Guard{{Name: "power", Sensor: "pump_power", GiveUpAfter: time.Hour}, {Name: "rate", Rate: "signal"}}
			tell.hear(protocol.Event{Head: protocol.Head{Run: "r1"}, Kind: c.kind, State: protocol.Holding, Detail: c.detail})
			s := protocol.Status{Run: "r1", State: protocol.Holding, Causes: c.causes}
			tell.bound(t.Context(), &s)
			if s.HoldingSince == nil || (s.GivesUpAt == nil) != (c.fails == 0) || (s.LooksAgain == nil) != (c.looks == 0) {
				t.Fatalf("%+v", s)
			}
			if c.fails > 0 {
				if got := s.GivesUpAt.Sub(s.HoldingSince.Time); got != c.fails {
					t.Errorf("fails after %s; want %s", got, c.fails)
				}
			}
			if c.looks > 0 && s.LooksAgain.Duration() != c.looks {
				t.Errorf("looks every %s; want %s", s.LooksAgain.Duration(), c.looks)
			}
			text := sentence(s)
			if !strings.Contains(text, c.said) || strings.Contains(text, "the run fails at") != (c.fails > 0) {
				t.Errorf("said %q; want %q", text, c.said)
			}
			tell.hear(protocol.Event{Head: protocol.Head{Run: "r1"}, Kind: protocol.WentOn, State: protocol.Running})
			s = protocol.Status{Run: "r1", State: protocol.Holding}
			if tell.bound(t.Context(), &s); s.HoldingSince != nil {
				t.Errorf("after it went on: %+v", s)
			}
		})
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
