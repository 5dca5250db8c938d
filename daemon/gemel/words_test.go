//go:build unix

package main

import (
	"encoding/json"
	"os"
	"os/exec"
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
		"given up after a hold": {with(func(s *protocol.Status) {
			s.State, s.Reason, s.EndedAt = protocol.Failed, "failed: it did not mend within 2 h; it was held: signal sees 9e+05 /s", &protocol.Time{Time: time.Date(2031, 2, 3, 4, 5, 6, 0, time.Local)}
		}), `Run r1, "Ring": failed: it did not mend within 2 h; what the hold was for, when it began: signal sees 9e+05 /s, at 2031-02-03 04:05:06.`},
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

func TestALookSaysWhatWasClosed(t *testing.T) {
	r := handed()
	r.Act, r.Text = protocol.HandLook, "counted 1 s"
	if got := told(r); got != "counted 1 s; closed all the while: signal, idler" {
		t.Errorf("%q; want the closed detectors named", got)
	}
	r.Shutters[1].Open = true
	if got := told(r); got != "counted 1 s" {
		t.Errorf("%q; want no word of shutters when all are open", got)
	}
}

func TestFollowSaysAResultInALine(t *testing.T) {
	for body, want := range map[string]string{
		`{"run": "r1", "sequence": 9, "at": "2031-02-03T04:05:06.000000000Z", "kind": "peak", "axis": "idler_arm", "value": 2.86528, "standard_uncertainty": 0.00012, "unit": "deg"}`: "result: peak along idler_arm: 2.86528 with standard uncertainty 0.00012 deg",
		`{"run": "r1", "sequence": 9, "at": "2031-02-03T04:05:06.000000000Z", "kind": "tuning_curve", "value": null, "because": ["no light"]}`:                                        "result: tuning curve: no value, because no light",
	} {
		if got, err := resultLine([]byte(body)); err != nil || !strings.HasSuffix(got, want) {
			t.Errorf("%q, %v; want %q", got, err, want)
		}
	}
}

func TestFollowTakesTheNumberOfAGateForNoCount(t *testing.T) {
	r := protocol.Reading{Head: protocol.Head{Run: "r1", Sequence: 7}, Kind: protocol.Dark, Accepted: true, Gate: protocol.Seconds(2 * time.Second),
		Counts: []protocol.Count{{Channel: "signal", Counts: 500}, {Channel: "gates", Counts: 4711}}, Tag: "gates"}
	body, err := json.Marshal(r)
	if err != nil {
		t.Fatal(err)
	}
	var out strings.Builder
	err = tell(&console{out: &out}, protocol.Entry{Kind: protocol.ReadingEntry, Body: body})
	if want := "dark: signal 500 (250 /s) gate 4711 by gates in 2 s\n"; err != nil || !strings.HasSuffix(out.String(), want) {
		t.Errorf("%q, %v; want %q", out.String(), err, want)
	}
}

func TestActsWithoutADaemonAreTakenInAScriptToo(t *testing.T) {
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	p, _ := serve(t, nil, "--bench", demoBenchFile, "--data", data)
	out := must(t, "hand", "--data", data, "--do", "help", "--do", "gate 1 s", "--do", "note the lid is off", "--do", "look")
	for _, want := range []string{"the end, at rest", "gate 1 s", "noted", "closed all the while: "} {
		if !strings.Contains(out, want) {
			t.Errorf("it does not say %q:\n%s", want, out)
		}
	}
	recipe := writeFile(t, filepath.Join(dir, "bad.yaml"), "title: A\ndwell: 5\n")
	for _, args := range [][]string{{"start", "--data", data}, {"run", "--data", data + "-2", "--bench", demoBenchFile}} {
		out, errOut, code := gemel(t, append(args, "--json", "--recipe", recipe)...)
		var said struct{ Findings []protocol.Finding }
		if err := json.Unmarshal([]byte(out), &said); err != nil || code != exitFailed || len(said.Findings) != 1 || said.Findings[0].File != recipe || said.Findings[0].Line != 2 {
			t.Errorf("%s --json ended with %d: %s%s%v; want the finding, in the file that was named", args[0], code, out, errOut, err)
		}
	}
	quit(t, p)
}

func TestWhoeverStopsReadingHearsNoComplaint(t *testing.T) {
	r, w, err := os.Pipe()
	if err != nil {
		t.Fatal(err)
	}
	r.Close()
	p := &program{t: t, cmd: exec.Command(binary, "check", "--schema", "bench"), out: newOutput(), err: newOutput(), ended: make(chan struct{})}
	p.cmd.Stdout, p.cmd.Stderr = w, p.err
	err = p.cmd.Run()
	w.Close()
	if code := p.cmd.ProcessState.ExitCode(); code != exitFailed || p.err.String() != "" {
		t.Errorf("it ended with %d, %v: %q; want 1 and not a word", code, err, p.err)
	}
}
