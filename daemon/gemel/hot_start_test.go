//go:build unix

package main

import (
	"bytes"
	"maps"
	"net"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/sim/instruments"
)

// A process that died in a dwell left the shutters open. Whatever keeps the next one from its work,
// its first act is the rest state.
func TestAStartThatFailsLeavesTheBenchAtRest(t *testing.T) {
	for _, c := range []struct {
		name string
		// hinder puts something in the way, and returns what the start is given beside the usual.
		hinder func(t *testing.T, data, lines string) (more []string)
		says   []string
		lit    bool // the pump's shutter cannot be reached
	}{{
		name: "the broker's port is taken",
		hinder: func(t *testing.T, _, _ string) []string {
			l, err := net.Listen("tcp", port(t))
			if err != nil {
				t.Fatal(err)
			}
			t.Cleanup(func() { _ = l.Close() })
			return []string{"--nats-listen", l.Addr().String()}
		},
		says: []string{"the bench is at rest"},
	}, {
		name: "the logbook is damaged", hinder: damage,
		says: []string{"damaged", "the bench is at rest"},
	}, {
		name: "the logbook is damaged, and the pump's shutter has no line",
		hinder: func(t *testing.T, data, lines string) []string {
			links, err := os.ReadDir(lines)
			if err != nil {
				t.Fatal(err)
			}
			fewer := t.TempDir()
			for _, link := range links {
				// To the link, not to where it leads now: the simulator makes a terminal anew when its host hangs
				// up, under a name that begins with a dot until it takes the old one's place.
				if link.Name() == "pump_shutter" || strings.HasPrefix(link.Name(), ".") {
					continue
				}
				if err := os.Symlink(filepath.Join(lines, link.Name()), filepath.Join(fewer, link.Name())); err != nil {
					t.Fatal(err)
				}
			}
			return append(damage(t, data, lines), "--lines", fewer)
		},
		says: []string{"damaged", "THE REST STATE WAS NOT REACHED: close shutter"},
		lit:  true,
	}} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			dir := t.TempDir()
			bench, data, lines := quick(t, dir), filepath.Join(dir, "data"), filepath.Join(dir, "lines")
			sim, ledger := simulate(t, bench, lines, "")
			first, ok := serve(t, nil, "--bench", bench, "--data", data, "--lines", lines)
			if !ok {
				t.Fatal(first.err)
			}
			must(t, "start", "--data", data, "--recipe", writeFile(t, filepath.Join(dir, "far.yaml"), farRecipe))
			ledger.await(t, 0, "a long gate", gateIsLong)
			first.signal(syscall.SIGKILL)
			first.wait()
			args := append([]string{"serve", "--bench", bench, "--data", data, "--lines", lines}, c.hinder(t, data, lines)...)
			before := len(ledger.all(t))
			_, errOut, code := gemel(t, args...)
			if code != exitFailed {
				t.Errorf("exit code %d; want %d", code, exitFailed)
			}
			for _, says := range c.says {
				if !strings.Contains(errOut, says) {
					t.Errorf("the start does not say %q:\n%s", says, errOut)
				}
			}
			quit(t, sim)
			<-ledger.done
			if m := moved(ledger.all(t)[before:]); len(m) > 0 {
				t.Errorf("moved or lit by a start that failed: %v", m)
			}
			dark := map[string]string{"shutter": "closed", "signal_shield": "closed", "idler_shield": "closed"}
			if c.lit {
				dark["shutter"] = "open"
			} else {
				isAtRest(t, ledger.all(t))
			}
			if was := blades(ledger.all(t)[:before]); was["shutter"] != "open" || was["signal_shield"] != "open" {
				t.Errorf("the killed daemon left %v; want the shutters open", was)
			}
			if is := blades(ledger.all(t)); !maps.Equal(is, dark) {
				t.Errorf("the start that failed left %v; want %v", is, dark)
			}
		})
	}
}

// blades says how each blade stands at the end of some records.
func blades(records []instruments.Record) map[string]string {
	all := map[string]string{}
	for _, r := range records {
		switch r.Kind {
		case instruments.BladeStarted:
			all[r.Device] = "on its way"
		case instruments.BladeOpened:
			all[r.Device] = "open"
		case instruments.BladeClosed:
			all[r.Device] = "closed"
		}
	}
	return all
}

// damage spoils the pages of a logbook behind its first.
func damage(t *testing.T, data, _ string) []string {
	t.Helper()
	book, err := logbook.Open(data) // folds the write-ahead log into the file
	if err != nil {
		t.Fatal(err)
	}
	if err := book.Close(); err != nil {
		t.Fatal(err)
	}
	file := filepath.Join(data, "logbook.db")
	text, err := os.ReadFile(file)
	if err != nil || len(text) < 12*4096 {
		t.Fatalf("%d bytes of logbook, %v; want twelve pages to spoil", len(text), err)
	}
	copy(text[2*4096:], bytes.Repeat([]byte{0x5a}, 10*4096))
	writeFile(t, file, string(text))
	return nil
}

// Who stops a bench whose shutter is stuck must not read that all is well.
func TestAStopOfABenchThatStaysLitSaysSoAndFails(t *testing.T) {
	if testing.Short() {
		t.Skip("half a minute until the shutter sticks")
	}
	t.Parallel()
	dir := t.TempDir()
	bench, data, lines := quick(t, dir), filepath.Join(dir, "data"), filepath.Join(dir, "lines")
	sim, ledger := simulate(t, bench, lines, "stuck_shutter(shutter, at 20s, for 5h)") // while the run goes on
	p, ok := serve(t, nil, "--bench", bench, "--data", data, "--lines", lines)
	if !ok {
		t.Fatal(p.err)
	}
	must(t, "start", "--data", data, "--recipe", writeFile(t, filepath.Join(dir, "far.yaml"), farRecipe))
	_, n := ledger.await(t, 0, "a long gate", gateIsLong)
	began := ledger.all(t)[0].At
	ledger.await(t, n, "a gate behind the time at which the shutter sticks", func(r instruments.Record) bool {
		return r.Kind == instruments.GateOpened && r.At.Sub(began) > 22*time.Second
	})
	const says = "THE REST STATE WAS NOT REACHED: close shutter"
	for _, c := range []struct {
		args []string
		says string
	}{
		{[]string{"hold"}, says},
		{[]string{"stop", "--json"}, `"rest":"close shutter`},
	} {
		out, errOut, code := gemel(t, append(c.args, "--data", data)...)
		if code != exitFailed || !strings.Contains(out, c.says) {
			t.Errorf("%v: exit code %d; want %d and %q\n%s%s", c.args, code, exitFailed, c.says, out, errOut)
		}
	}
	p.signal(syscall.SIGTERM)
	p.wait()
	quit(t, sim)
	<-ledger.done
	if is := blades(ledger.all(t)); is["shutter"] == "closed" {
		t.Error("the shutter was closed all the same: nothing was tested")
	}
}
