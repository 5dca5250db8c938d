//go:build unix

package main

import (
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/protocol"
)

func TestAStatusIsSaidOnceAndLeavesNoQuestionOpen(t *testing.T) {
	running := protocol.Status{Bench: "skerry", Run: "r1", Title: "Ring", State: protocol.Running, ReadingsPlanned: 18, TimeLeft: new(protocol.Seconds(0))}
	with := func(change func(*protocol.Status)) protocol.Status {
		s := running
		change(&s)
		return s
	}
	cases := map[string]struct {
		status protocol.Status
		want   string
	}{
		"before the first reading nothing is left to say of the time": {running, "Run r1 is running with 0 of 18 readings accepted."},
		"before the first reading only the dwells are known": {with(func(s *protocol.Status) { s.TimeLeft = new(protocol.Seconds(10 * time.Minute)) }),
			"Run r1 is running with 0 of 18 readings accepted, at least 10 min left."},
		"under way": {with(func(s *protocol.Status) {
			s.ReadingsAccepted, s.TimeLeft = 3, new(protocol.Seconds(16*time.Minute+40*time.Second))
		}),
			"Run r1 is running with 3 of 18 readings accepted, about 16 min 40 s left."},
		"hours": {with(func(s *protocol.Status) {
			s.ReadingsAccepted, s.TimeLeft = 3, new(protocol.Seconds(10*time.Hour+20*time.Second))
		}),
			"Run r1 is running with 3 of 18 readings accepted, about 10 h left."},
		"the last moment": {with(func(s *protocol.Status) { s.ReadingsAccepted = 17 }), "Run r1 is running with 17 of 18 readings accepted, less than 1 s left."},
		"nothing left to count": {with(func(s *protocol.Status) { s.ReadingsAccepted = 18 }),
			"Run r1 is running with 18 of 18 readings accepted; the bench comes to rest, and the result is being worked out."},
		"over": {with(func(s *protocol.Status) {
			s.State, s.Reason, s.EndedAt = protocol.Finished, "finished: 18 of 18 readings accepted", &protocol.Time{Time: time.Date(2031, 2, 3, 4, 5, 6, 0, time.Local)}
		}), `Run r1, "Ring": finished: 18 of 18 readings accepted, at 2031-02-03 04:05:06.`},
		"held in front of others": {with(func(s *protocol.Status) {
			s.State, s.Causes, s.Reason, s.TimeLeft = protocol.Holding, []protocol.Cause{protocol.ByOperator}, "held by ann", nil
			s.Waiting = []protocol.WaitingRun{{Run: "r2", Title: "Peak"}}
		}), `Run r1 is holding (operator) with 0 of 18 readings accepted. held by ann. It waits for a person: gemel resume, or gemel stop. Until then nothing behind it begins: 1 run in the queue. Next: "Peak".`},
	}
	for name, c := range cases {
		t.Run(name, func(t *testing.T) {
			if got := sentence(c.status); got != c.want {
				t.Errorf("%q\nwant %q", got, c.want)
			}
		})
	}
}

func TestRequestsAreAnsweredWithWhatTheyDid(t *testing.T) {
	data := filepath.Join(t.TempDir(), "data")
	p, _ := serve(t, nil, "--bench", quick(t, t.TempDir()), "--data", data)
	if out := must(t, "status", "--data", data); !strings.Contains(out, "is idle. Nothing waits; gemel start --recipe FILE begins a run.") {
		t.Errorf("status: %s", out)
	}
	recipe := writeFile(t, filepath.Join(t.TempDir(), "far.yaml"), farRecipe)
	must(t, "start", "--data", data, "--recipe", recipe)
	if !p.says(p.err, "began") {
		t.Fatalf("the service's log does not tell of the run: %s", p.err)
	}
	for _, c := range []struct{ ask, want string }{
		{"resume", "is running; nothing held it"}, {"hold", "is holding because of operator"}, {"resume", "goes on"}, {"stop", "is stopped"},
	} {
		if out := must(t, c.ask, "--data", data); !strings.Contains(out, c.want) {
			t.Errorf("%s: %s; want %q", c.ask, out, c.want)
		}
	}
	for _, want := range []string{"held", "stopped by"} {
		if !p.says(p.err, want) {
			t.Errorf("the service's log does not say %q: %s", want, p.err)
		}
	}
	quit(t, p)
	if _, errOut, code := gemel(t, "status", "--data", data); code != exitFailed || !strings.Contains(errOut, "gemel serve --bench FILE") {
		t.Errorf("without a daemon status ended with %d: %s; want to be told how to start one", code, errOut)
	}
	if _, errOut, code := gemel(t, "export", "--data", data+"-elsewhere"); code != exitWrongUse || !strings.Contains(errOut, "--data") {
		t.Errorf("an export from nowhere ended with %d: %s; want to be told of --data", code, errOut)
	}
}

func TestAKeyThatBouncesIsOneWishToStop(t *testing.T) {
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	recipe := writeFile(t, filepath.Join(dir, "far.yaml"), farRecipe)
	p := launch(t, nil, "run", "--bench", quick(t, dir), "--recipe", recipe, "--data", data)
	if !p.says(p.err, "is simulated") {
		t.Fatalf("it ended: %s", p.err)
	}
	for range 3 {
		p.signal(syscall.SIGINT)
	}
	if code := p.wait(); code != exitFailed || strings.Contains(p.err.String(), "context canceled") {
		t.Errorf("it ended with %d: %s; want 1 and a sentence", code, p.err)
	}
	if said := p.err.String(); !strings.Contains(said, "stopping: the bench comes to rest") && !strings.Contains(said, "stopped before anything moved") {
		t.Errorf("it said %s; want that it stops, or that nothing had moved", said)
	}
}
