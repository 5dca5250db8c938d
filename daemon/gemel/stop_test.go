//go:build unix

package main

import (
	"encoding/json"
	"flag"
	"fmt"
	"math"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/sim/instruments"
)

var stopAll = flag.Bool("stop.all", false, "stop in every phase in every way, on every line that can be out of step")

// stopWithin is what is promised for every phase: until the stop bytes are at the instruments.
const stopWithin = time.Second

// restWithin is until it is answered, with the rest state reached and all of it written: a question that
// the stop cut short is waited out, for the 2 s that a line's longest answer is by default. restAtMost is
// the same where a line is out of step: the engine's own bound for a rest state, and the way to it.
const (
	restWithin = 4 * time.Second
	restAtMost = 15 * time.Second
)

// phase is a place in a run's life at which somebody wants it to stop.
type phase struct {
	name     string
	bench    []change
	recipe   string
	troubles string
	// reach waits until the run is there. from is the place in the ledger to look from.
	reach func(t *testing.T, l *truth, data string)
	rare  bool // in the long form only
	// outOfStep is the device whose line is being brought back in step.
	outOfStep string
}

const farRecipe = `
title: Far apart
sweep: [{axis: signal_arm, from: 2 deg, to: 11 deg, step: 9 deg}]
dwell: {time: 40 s, slice: 20 s}
`

const refinedRecipe = "title: Refined\nsweep:\n  - {axis: signal_arm, at: 2.864 deg}\n  - {axis: idler_arm, around: 2.864 deg, span: 0.8 deg, step: 0.2 deg}\ndwell: {time: 1 s, slice: 500 ms}\nrefine: {along: idler_arm, of: pairs, around: maximum, span: 0.1 deg, step: 0.05 deg, at_most: 4 points, within: 20 min}\n"

const withBackground = farRecipe + "background: {turn: pump_waveplate, by: 45 deg, every: 30 min, dwell: 40 s, also: [start]}\n"

func plateTurns(r instruments.Record) bool {
	return r.Device == "plate" && r.Kind == instruments.MoveStarted
}

func wantRefined(t *testing.T, data string) {
	t.Helper()
	refined := func(e protocol.Numbered) bool {
		var points protocol.Points
		return e.Kind == protocol.PointEntry && json.Unmarshal(e.Body, &points) == nil && points.Refined > 0
	}
	if !slices.ContainsFunc(entriesOf(t, data), refined) {
		t.Error("no refinement was decided")
	}
}

// holds waits until the run holds for a cause.
func holds(cause protocol.Cause) func(*testing.T, *truth, string) {
	return func(t *testing.T, l *truth, data string) {
		held := func() bool {
			book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
			if err != nil {
				return false // not made yet
			}
			defer book.Close()
			rows, err := book.Runs(t.Context())
			return err == nil && len(rows) == 1 && slices.Contains(rows[0].Causes, cause)
		}
		for deadline := time.Now().Add(patience); !held(); <-time.After(20 * time.Millisecond) {
			if time.Now().After(deadline) {
				t.Fatalf("the run does not hold for %s within %s", cause, patience)
			}
		}
	}
}

func gateIsLong(r instruments.Record) bool {
	return r.Kind == instruments.GateOpened && r.Gate.SetS > 1
}

func phases() []phase {
	all := []phase{{
		name: "during a move", recipe: farRecipe,
		bench: []change{{`speed: 2000 deg/s$`, "speed: 1 deg/s"}},
		reach: func(t *testing.T, l *truth, _ string) {
			l.await(t, 0, "a long move", func(r instruments.Record) bool {
				s, is := r.Axes["signal_arm"]
				return r.Kind == instruments.MoveStarted && is && math.Abs(s.ToDeg-s.FromDeg) > 0.5
			})
		},
	}, {
		name: "during a gate", recipe: farRecipe,
		reach: func(t *testing.T, l *truth, _ string) { l.await(t, 0, "a long gate", gateIsLong) },
	}, {
		name: "while an arm settles", recipe: farRecipe,
		bench: []change{{`settle: 2 ms\n    park: 1 deg`, "settle: 50 s\n    park: 1 deg"}},
		reach: func(t *testing.T, l *truth, _ string) {
			l.await(t, 0, "the arm's approach", func(r instruments.Record) bool { // from below, in one go
				_, is := r.Axes["signal_arm"]
				return r.Kind == instruments.MoveEnded && is
			})
			<-time.After(300 * time.Millisecond) // until the program has seen them at rest; settling leaves no trace
		},
	}, {
		name: "during a hold", recipe: farRecipe,
		reach: func(t *testing.T, l *truth, data string) {
			l.await(t, 0, "a long gate", gateIsLong)
			must(t, "hold", "--data", data)
		},
	}}
	all = append(all, phase{
		name: "during a dark", recipe: farRecipe + "dark: {every: 30 min, dwell: 40 s, also: [start]}\n",
		reach: func(t *testing.T, l *truth, _ string) {
			l.await(t, 0, "a dark's gate", gateIsLong)
			for _, r := range l.all(t) {
				if r.Device == "shutter" && r.Kind == instruments.BladeStarted && r.Text == "open" {
					t.Error("the pump was opened before the first long gate; want a dark there")
				}
			}
		},
	}, phase{
		name: "while the waveplate turns for a background", recipe: withBackground,
		bench: []change{{`speed: 2000 deg/s\n    acceleration: 200000 deg/s2\n    tolerance: 0.01 deg`, "speed: 1 deg/s\n    acceleration: 200 deg/s2\n    tolerance: 0.01 deg"}},
		reach: func(t *testing.T, l *truth, _ string) { l.await(t, 0, "the plate's turn", plateTurns) },
	}, phase{
		name: "during a background", recipe: withBackground, rare: true,
		reach: func(t *testing.T, l *truth, _ string) {
			_, n := l.await(t, 0, "the plate's turn", plateTurns)
			l.await(t, n, "a background's gate", gateIsLong)
		},
	}, phase{
		name: "while a zero is verified", recipe: farRecipe,
		bench: []change{
			{`speed: 2000 deg/s$`, "speed: 1 deg/s"},
			{`error: 0.004 deg\n    home: \{unattended: true, order: 1,`, "error: 0.004 deg\n    verify_home: {tolerance: 0.02 deg}\n    home: {unattended: true, order: 1,"},
		},
		reach: func(t *testing.T, l *truth, _ string) {
			l.await(t, 0, "a search for a mark", func(r instruments.Record) bool { return r.Kind == instruments.MarkStarted })
			for _, r := range l.all(t) {
				if r.Kind == instruments.MarkFound {
					t.Error("the mark was found already; want the stop to meet its search")
				}
			}
		},
	}, phase{
		name: "while a person is waited for, because of a lost zero", recipe: farRecipe,
		bench: []change{{`home: \{unattended: true, `, "home: {"}, {`signal_arm: \{play`, "signal_arm: {homed: false, play"}},
		reach: holds("trouble"),
	}, phase{
		name: "while a guard is waited for", rare: true,
		recipe: farRecipe + "guards:\n  - {watch: pump_power, within: [100 mW, 200 mW], otherwise: hold, give_up_after: 30 min}\n",
		reach:  holds("guard"),
	}, phase{
		name: "on the way to a point that a refinement added", rare: true,
		bench:  []change{{`speed: 2000 deg/s$`, "speed: 0.2 deg/s"}},
		recipe: refinedRecipe,
		reach: func(t *testing.T, l *truth, data string) {
			n := 0
			for range 10 { // two slices of five points
				_, n = l.await(t, n, "a slice", func(r instruments.Record) bool { return r.Kind == instruments.GateClosed && r.Gate.SetS > 0.3 })
			}
			l.await(t, n, "the way to the next point", func(r instruments.Record) bool {
				s, is := r.Axes["idler_arm"]
				return r.Kind == instruments.MoveStarted && is && s.FromDeg != s.ToDeg
			})
			wantRefined(t, data)
		},
	}, phase{
		name: "during a reference", rare: true,
		recipe: "title: Referred\nsweep: [{axis: signal_arm, at: 2.864 deg}, {axis: idler_arm, from: 2 deg, to: 3 deg, step: 1 deg}]\ndwell: 20 ms\nreference: {axes: [idler_arm], on: [top], at: {signal_arm: 2.864 deg, idler_arm: 2.864 deg}, every: 1 point, dwell: {time: 40 s, slice: 20 s}}\n",
		reach: func(t *testing.T, l *truth, _ string) {
			l.await(t, 0, "a gate of a reference", func(r instruments.Record) bool { return r.Kind == instruments.GateOpened && r.Gate.SetS > 1 })
		},
	}, phase{
		name: "in a refinement", rare: true,
		recipe: refinedRecipe,
		reach: func(t *testing.T, l *truth, data string) {
			n := 0
			light := func(r instruments.Record) bool { return r.Kind == instruments.GateOpened && r.Gate.SetS > 0.3 }
			for range 11 { // two slices of five points, and one of the first that was added
				_, n = l.await(t, n, "a point", light)
			}
			wantRefined(t, data)
		},
	}, phase{
		name: "during a warm-up", rare: true,
		recipe: farRecipe + "schedule: {warm_up: {steady: {pump_power: 0.5 % over 10 min}, at_most: 2 h}}\n",
		reach: func(t *testing.T, l *truth, _ string) {
			n := 0
			for range 2 {
				_, n = l.await(t, n, "a look at the power", func(r instruments.Record) bool { return r.Kind == instruments.SensorRead })
			}
		},
	})
	for i, device := range []string{"rotary", "counter", "shutter", "signal_shield", "monitor"} {
		first := 20
		if device == "shutter" {
			first = 6 // it is asked little once it is open
		}
		var list []string
		for n := first; n < first+8; n++ {
			list = append(list, fmt.Sprintf("missing(%s, answer %d)", device, n))
		}
		all = append(all, phase{
			name: "while the line of " + device + " is out of step", troubles: strings.Join(list, "; "), rare: i > 0, outOfStep: device,
			bench:  impatient(),
			recipe: "title: Out of step\nsweep: [{axis: signal_arm, from: 1 deg, to: 11 deg, step: 0.1 deg}]\ndwell: {time: 20 ms, slice: 10 ms}\n",
			reach: func(t *testing.T, l *truth, _ string) {
				l.await(t, 0, "the first missing answer", func(r instruments.Record) bool { return r.Kind == instruments.Troubled })
			},
		})
	}
	return all
}

// impatient shortens the waits for answers in the short form.
func impatient() []change {
	if *stopAll {
		return nil
	}
	return []change{{"device: simulated}", "device: simulated, answer_within: 200 ms, longest_answer: 400 ms}"}}
}

// way is how somebody wants it to stop.
type way struct {
	name string
	// start starts the run. ask stops it and returns the moment before it was asked, and a check of
	// what came of it.
	start func(t *testing.T, s *stopping)
	ask   func(t *testing.T, s *stopping) time.Time
	end   func(t *testing.T, s *stopping)
}

type stopping struct {
	bench, recipe, data, lines string
	p                          *program
	acked                      time.Time // when the request was answered; zero: the program's end is the answer
}

func (s *stopping) serve(t *testing.T) {
	var ok bool
	if s.p, ok = serve(t, nil, "--bench", s.bench, "--data", s.data, "--lines", s.lines); !ok {
		t.Fatalf("serve: %s", s.p.err)
	}
	must(t, "start", "--data", s.data, "--recipe", s.recipe)
}

func (s *stopping) row(t *testing.T) logbook.RunRow {
	t.Helper()
	book, err := logbook.OpenReadOnly(filepath.Join(s.data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	rows, err := book.Runs(t.Context())
	if err != nil || len(rows) != 1 {
		t.Fatalf("%d runs, %v; want 1", len(rows), err)
	}
	return rows[0]
}

func signalled(sig syscall.Signal) func(*testing.T, *stopping) time.Time {
	return func(t *testing.T, s *stopping) time.Time {
		asked := time.Now()
		s.p.signal(sig)
		return asked
	}
}

var ways = []way{{
	name: "by a request", start: func(t *testing.T, s *stopping) { s.serve(t) },
	ask: func(t *testing.T, s *stopping) time.Time {
		cl, err := client.ConnectFolder(s.data, protocol.ControlRole)
		if err != nil {
			t.Fatal(err)
		}
		defer cl.Close()
		status, err := cl.Status(within(t))
		if err != nil {
			t.Fatal(err)
		}
		asked := time.Now()
		r, err := cl.Stop(within(t), protocol.RunRequest{Run: status.Run, Who: "the test"})
		s.acked = time.Now()
		if err != nil || r.State != protocol.Stopped || !r.Recorded {
			t.Errorf("stop was answered %+v, %v; want stopped and recorded", r, err)
		}
		t.Logf("answered after %s", s.acked.Sub(asked).Round(time.Millisecond))
		return asked
	},
	end: func(t *testing.T, s *stopping) {
		s.p.signal(syscall.SIGTERM)
		if code := s.p.wait(); code != exitDone {
			t.Errorf("serve: exit code %d after SIGTERM; want 0\n%s", code, s.p.err)
		}
		if row := s.row(t); row.State != protocol.Stopped || !strings.Contains(row.Reason, "the test") {
			t.Errorf("the run is %s (%s); want stopped, and by whom", row.State, row.Reason)
		}
	},
}, {
	name: "by SIGTERM to serve", start: func(t *testing.T, s *stopping) { s.serve(t) },
	ask: signalled(syscall.SIGTERM),
	end: func(t *testing.T, s *stopping) {
		if code := s.p.wait(); code != exitDone {
			t.Errorf("serve: exit code %d; want 0\n%s", code, s.p.err)
		}
		if row := s.row(t); row.State != protocol.Holding || len(row.Causes) == 0 || row.Causes[len(row.Causes)-1] != protocol.ByRestart || row.Reason == "" {
			t.Errorf("the run is %s %v (%s); want it holding for the restart", row.State, row.Causes, row.Reason)
		}
	},
}, {
	name: "by Ctrl-C to run",
	start: func(t *testing.T, s *stopping) {
		s.p = launch(t, nil, "run", "--bench", s.bench, "--data", s.data, "--lines", s.lines, "--recipe", s.recipe)
	},
	ask: signalled(syscall.SIGINT),
	end: func(t *testing.T, s *stopping) {
		if code := s.p.wait(); code != exitFailed {
			t.Errorf("run: exit code %d; want 1: it did not finish\n%s", code, s.p.err)
		}
		if row := s.row(t); row.State != protocol.Stopped || row.Reason == "" {
			t.Errorf("the run is %s (%s); want stopped, and why", row.State, row.Reason)
		}
		t.Log(s.row(t).Reason)
	},
}}

// Each phase is stopped in one way by default, in turn; with -stop.all in all of them.
func TestAStopReachesTheInstrumentsWithinASecond(t *testing.T) {
	for i, ph := range phases() {
		for j, w := range ways {
			switch {
			case *stopAll:
			case ph.rare, i%len(ways) != j, testing.Short() && i > 1:
				continue
			case ph.name == "during a hold" && w.name == "by Ctrl-C to run":
				continue
			}
			t.Run(ph.name+" "+w.name, func(t *testing.T) { stop(t, ph, w) })
		}
	}
}

func stop(t *testing.T, ph phase, w way) {
	dir := t.TempDir()
	s := &stopping{bench: quick(t, dir, ph.bench...), recipe: writeFile(t, filepath.Join(dir, "r.yaml"), ph.recipe), data: filepath.Join(dir, "data"), lines: filepath.Join(dir, "lines")}
	sim, ledger := simulate(t, s.bench, s.lines, ph.troubles)
	w.start(t, s)
	ph.reach(t, ledger, s.data)
	before := len(ledger.all(t))
	asked := w.ask(t, s)
	w.end(t, s)
	quit(t, sim)
	<-ledger.done
	// The short form asks this of the instrument whose line is out of step alone, if one is.
	want := []string{"rotary", "plate", "gate", "pump"}
	if ph.outOfStep != "" && !*stopAll {
		want = []string{map[string]string{"rotary": "rotary", "counter": "gate"}[ph.outOfStep]}
	}
	wantStopped(t, ledger.all(t), before, asked, want)
	if s.acked.IsZero() {
		s.acked = s.p.endedAt
	}
	bound := restWithin
	if ph.outOfStep != "" {
		bound = restAtMost
	}
	wantRest(t, ledger.all(t), asked, s.acked, bound)
}

// wantRest reads from the instruments' ledger that the rest state was there when the stop was
// answered, within its bound, and that nothing came after.
func wantRest(t *testing.T, records []instruments.Record, asked, acked time.Time, bound time.Duration) {
	t.Helper()
	if took := acked.Sub(asked); took > bound {
		t.Errorf("the stop was answered after %s; want it within %s", took.Round(time.Millisecond), bound)
	}
	n := 0
	for n < len(records) && !records[n].At.After(acked) {
		n++
	}
	isAtRest(t, records[:n])
	for _, r := range records[n:] {
		if lit := r.Kind == instruments.BladeStarted && r.Text == "open"; lit || len(moved([]instruments.Record{r})) > 0 {
			t.Errorf("%s %s %s came %s after the answer to the stop", r.Device, r.Kind, r.Text, r.At.Sub(acked).Round(time.Millisecond))
		}
	}
}

// wantStopped reads from the instruments' ledger what a stop did, and when.
func wantStopped(t *testing.T, records []instruments.Record, before int, asked time.Time, want []string) {
	t.Helper()
	told := map[string]time.Duration{} // by device: when the stop was there
	gate, pump := false, false
	var report []string
	note := func(what string, r instruments.Record) {
		if _, known := told[what]; known || r.At.Before(asked) {
			return
		}
		told[what] = r.At.Sub(asked)
		report = append(report, fmt.Sprintf("%s %s", what, told[what].Round(time.Millisecond)))
	}
	for i, r := range records {
		switch r.Kind {
		case instruments.GateOpened:
			gate = r.At.Before(asked)
		case instruments.GateClosed:
			if r.At.Before(asked) {
				gate = false
			}
		case instruments.GateAborted:
			if r.At.Before(asked) {
				gate = false
			} else if i >= before {
				note("gate", r)
			}
		case instruments.BladeStarted:
			if r.Device == "shutter" {
				if r.At.Before(asked) {
					pump = r.Text == "open"
				} else if r.Text == "closed" {
					note("pump", r)
				}
			}
		case instruments.Stopped:
			note(r.Device, r)
		}
	}
	for _, what := range want {
		at, is := told[what]
		if what == "gate" && !gate || what == "pump" && !pump {
			continue // none was open
		}
		if !is || at > stopWithin {
			t.Errorf("%s: the stop arrived after %s (at all: %t); want it within %s", what, at.Round(time.Millisecond), is, stopWithin)
		}
	}
	// What was on the wire may still begin; nothing may after the stop bytes.
	for _, r := range records {
		if at := r.At.Sub(asked); at > told["rotary"]+aftermath && len(moved([]instruments.Record{r})) > 0 {
			t.Errorf("%s %s began %s after the stop was asked for", r.Device, r.Kind, at.Round(time.Millisecond))
		}
	}
	t.Log(strings.Join(report, ", "))
}

// The run before it was stopped, and the next in the queue is stopped at once: before its turn, while it
// takes the bench, or just after. Nothing of it comes after the answer.
func TestAStopMeetsARunThatIsJustAboutToBegin(t *testing.T) {
	delays := []time.Duration{0, 40 * time.Millisecond}
	if *stopAll {
		delays = nil
		for d := time.Duration(0); d < 400*time.Millisecond; d += 10 * time.Millisecond {
			delays = append(delays, d)
		}
	}
	dir := t.TempDir()
	s := &stopping{bench: quick(t, dir), data: filepath.Join(dir, "data"), lines: filepath.Join(dir, "lines")}
	sim, ledger := simulate(t, s.bench, s.lines, "")
	var ok bool
	if s.p, ok = serve(t, nil, "--bench", s.bench, "--data", s.data, "--lines", s.lines); !ok {
		t.Fatalf("serve: %s", s.p.err)
	}
	cl, err := client.ConnectFolder(s.data, protocol.ControlRole)
	if err != nil {
		t.Fatal(err)
	}
	defer cl.Close()
	stop := func(run protocol.RunID) {
		t.Helper()
		if r, err := cl.Stop(within(t), protocol.RunRequest{Run: run, Who: "the test"}); err != nil || r.State != protocol.Stopped || !r.Recorded {
			t.Errorf("stop was answered %+v, %v; want stopped and recorded", r, err)
		}
	}
	n := 0
	for i, delay := range delays {
		first := started(t, s.data, farRecipe, fmt.Sprint("first ", i))
		_, n = ledger.await(t, n, "a long gate", gateIsLong)
		second := started(t, s.data, farRecipe, fmt.Sprint("second ", i))
		stop(first)
		<-time.After(delay)
		before, asked := len(ledger.all(t)), time.Now()
		stop(second)
		acked := time.Now()
		<-time.After(150 * time.Millisecond) // for what would come after it
		wantRest(t, ledger.all(t), asked, acked, restWithin)
		row := awaitRow(t, s.p, s.data, second, "stopped", func(r logbook.RunRow) bool { return r.State == protocol.Stopped })
		if !strings.Contains(row.Reason, "the test") {
			t.Errorf("it was stopped for %q; want by whom", row.Reason)
		}
		// What was asked when the run ended may still be answered, so that a line is waited for; the stop
		// itself is not.
		wantStopped(t, ledger.all(t), before, asked, []string{"rotary", "plate", "gate", "pump"})
	}
	s.p.signal(syscall.SIGTERM)
	if code := s.p.wait(); code != exitDone {
		t.Errorf("serve: exit code %d\n%s", code, s.p.err)
	}
	quit(t, sim)
}
