//go:build unix

package main

import (
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/sim/instruments"
)

// atRest says what still shines, counts or moves at the end of a ledger.
func atRest(t *testing.T, records []instruments.Record) {
	t.Helper()
	isAtRest(t, records)
	if len(moved(records)) == 0 {
		t.Error("nothing had moved: the trouble came too early to show anything")
	}
}

// isAtRest is atRest for a bench on which nothing may have moved yet.
func isAtRest(t *testing.T, records []instruments.Record) {
	t.Helper()
	pump, gate := "closed", false
	moving := map[string]bool{}
	for _, r := range records {
		switch r.Kind {
		case instruments.BladeStarted:
			if r.Device == "shutter" {
				pump = r.Text
			}
		case instruments.GateOpened:
			gate = true
		case instruments.GateClosed, instruments.GateAborted:
			gate = false
		case instruments.MoveStarted, instruments.HomeStarted, instruments.MarkStarted:
			moving[r.Device] = true
		case instruments.MoveEnded, instruments.MoveStopped, instruments.HomeFound, instruments.MarkFound, instruments.Restarted:
			moving[r.Device] = false
		}
	}
	if pump != "closed" || gate || moving["rotary"] || moving["plate"] {
		t.Errorf("at the end the pump is %s, a gate is open: %t, axes turn: %v; want the rest state", pump, gate, moving)
	}
}

func TestABugInTheProgramStillLeadsToTheRestState(t *testing.T) {
	t.Parallel()
	for _, c := range []struct {
		name, env, says string
		state           protocol.State
	}{
		{"in the loop", "GEMEL_PANIC_AT=gated:5", "a bug in this program", protocol.Failed},
		{"in the driver of the counter's line", "GEMEL_PANIC_LINE=counter:60", "panic: a bug made on purpose", protocol.Holding},
		{"in the driver of the arms' line", "GEMEL_PANIC_LINE=arms:40", "panic: a bug made on purpose", protocol.Holding},
	} {
		if c.state == protocol.Holding && (testing.Short() || strings.Contains(c.env, "arms") && !*stopAll) {
			continue // slow
		}
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			dir := t.TempDir()
			lines := filepath.Join(dir, "lines")
			s := &stopping{bench: quick(t, dir), recipe: writeFile(t, filepath.Join(dir, "r.yaml"), killRecipe), data: filepath.Join(dir, "data"), lines: lines}
			sim, ledger := simulate(t, s.bench, lines, "")
			p := launch(t, []string{c.env}, "run", "--bench", s.bench, "--data", s.data, "--lines", lines, "--recipe", s.recipe)
			if c.state == protocol.Holding { // for a person, with the bench at rest
				if !p.says(p.err, "is holding (trouble)") {
					t.Fatalf("the run ended: %s", p.err)
				}
				if row := s.row(t); row.State != c.state || !strings.Contains(row.Reason, c.says) {
					t.Errorf("the run is %s (%s); want it holding, and %q", row.State, row.Reason, c.says)
				}
				p.signal(syscall.SIGINT)
			}
			if code := p.wait(); code != exitFailed {
				t.Errorf("exit code %d; want 1", code)
			}
			if row := s.row(t); c.state == protocol.Failed && (row.State != c.state || !strings.Contains(row.Reason, c.says)) {
				t.Errorf("the run is %s (%s); want %s, and %q", row.State, row.Reason, c.state, c.says)
			} else if c.state != protocol.Failed && row.State != protocol.Stopped {
				t.Errorf("the run is %s (%s); want stopped", row.State, row.Reason)
			}
			quit(t, sim)
			<-ledger.done
			atRest(t, ledger.all(t))
		})
	}
}

func TestAPulledPlugIsWaitedForAndWrittenDown(t *testing.T) {
	t.Parallel()
	for _, device := range []string{"counter", "rotary"} {
		if testing.Short() && device == "rotary" {
			continue
		}
		t.Run(device, func(t *testing.T) {
			t.Parallel()
			dir := t.TempDir()
			// Long enough to be under way when the plug is pulled, on a busy machine too.
			long := strings.Replace(killRecipe, "times: 2", "times: 10", 1)
			s := &stopping{bench: quick(t, dir), recipe: writeFile(t, filepath.Join(dir, "r.yaml"), long), data: filepath.Join(dir, "data"), lines: filepath.Join(dir, "lines")}
			sim, ledger := simulate(t, s.bench, s.lines, "unplug("+device+", at 6s, for 1s)")
			p := launch(t, nil, "run", "--bench", s.bench, "--data", s.data, "--lines", s.lines, "--recipe", s.recipe)
			if code := p.wait(); code != exitDone {
				t.Errorf("exit code %d; want the run finished\n%s", code, p.err)
			}
			if !troubled(t, s.data, device) {
				t.Errorf("no event tells of %s", device)
			}
			quit(t, sim)
			<-ledger.done
			atRest(t, ledger.all(t))
		})
	}
}

func TestAClosedTerminalBringsTheBenchToRest(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	long := strings.Replace(killRecipe, "times: 2", "times: 50", 1)
	s := &stopping{bench: quick(t, dir), recipe: writeFile(t, filepath.Join(dir, "r.yaml"), long), data: filepath.Join(dir, "data"), lines: filepath.Join(dir, "lines")}
	sim, ledger := simulate(t, s.bench, s.lines, "")
	p := launch(t, nil, "run", "--bench", s.bench, "--data", s.data, "--lines", s.lines, "--recipe", s.recipe)
	ledger.await(t, 0, "a gate", func(r instruments.Record) bool { return r.Kind == instruments.GateClosed })
	p.signal(syscall.SIGHUP)
	if code := p.wait(); code != exitFailed {
		t.Errorf("exit code %d; want 1", code)
	}
	if row := s.row(t); row.State != protocol.Stopped {
		t.Errorf("the run is %s (%s); want stopped", row.State, row.Reason)
	}
	quit(t, sim)
	<-ledger.done
	atRest(t, ledger.all(t))
}

func troubled(t *testing.T, data, device string) bool {
	t.Helper()
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	entries, err := book.After(t.Context(), 0, 100000)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		switch kindOf(e.Entry) {
		case protocol.Trouble, protocol.TakenAgain, protocol.Held:
			if strings.Contains(string(e.Body), device) {
				t.Logf("%.300s", e.Body)
				return true
			}
		}
	}
	return false
}

// All instruments vanish at once and others of the same kind come back, as after a power cut of the
// lab: the run goes on by itself or holds for a person with a reason, and can be brought to its end.
func TestARunOutlivesThePowerOfTheLab(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	s := &stopping{bench: quick(t, dir), recipe: writeFile(t, filepath.Join(dir, "r.yaml"), killRecipe), data: filepath.Join(dir, "data"), lines: filepath.Join(dir, "lines")}
	sim, ledger := simulate(t, s.bench, s.lines, "")
	s.serve(t)
	cl, err := client.ConnectFolder(s.data, protocol.ControlRole)
	if err != nil {
		t.Fatal(err)
	}
	defer cl.Close()
	readings, cut, resumed := 0, false, 0
	for e, err := range cl.Follow(within(t), "", 1) {
		if err != nil {
			t.Fatal(err)
		}
		if e.Kind == protocol.ReadingEntry {
			readings++
		}
		switch {
		case readings == 5 && !cut:
			cut = true
			sim.signal(syscall.SIGKILL)
			sim.wait()
			<-ledger.done
			sim, ledger = simulate(t, s.bench, s.lines, "")
		case kindOf(e) == protocol.Held:
			resumed++
			if _, err := cl.Resume(t.Context(), protocol.RunRequest{Run: e.Run, Who: "the test"}); err != nil {
				t.Error(err)
			}
		}
		if kindOf(e) == protocol.Ended {
			break
		}
	}
	row := s.row(t)
	if row.State != protocol.Finished || !cut {
		t.Errorf("the run is %s (%s) after %d readings; want finished", row.State, row.Reason, readings)
	}
	t.Logf("%s; a person was needed %d times", row.Reason, resumed)
	s.p.signal(syscall.SIGTERM)
	if code := s.p.wait(); code != exitDone {
		t.Errorf("serve: exit code %d\n%s", code, s.p.err)
	}
	quit(t, sim)
	<-ledger.done
	atRest(t, ledger.all(t))
}
