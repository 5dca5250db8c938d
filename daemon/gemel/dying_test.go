//go:build unix

package main

import (
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/daemon/nighttest"
	"gemel/protocol"
	"gemel/scan/recipe"
	"gemel/sim/instruments"
)

// judged lets the judge read what one run wrote and what truly happened.
func judged(t *testing.T, benchFile, recipeText, data string, records []instruments.Record, more ...[]nighttest.Moment) {
	t.Helper()
	f, err := bench.Load(benchFile)
	if err != nil {
		t.Fatal(err)
	}
	facts := nighttest.FactsOf(f)
	r, err := recipe.Parse("r.yaml", []byte(recipeText))
	if err != nil {
		t.Fatal(err)
	}
	plan, err := r.Plan(f.Facts())
	if err != nil {
		t.Fatal(err)
	}
	var journal []nighttest.Moment
	var last time.Time
	for _, e := range entriesOf(t, data) {
		if head := headOf(t, e.Entry); head.At.After(last) {
			last = head.At.Time
		}
		facts.Plans[e.Run] = plan
		journal = append(journal, nighttest.Moment{At: last, Journal: &e.Entry})
	}
	line := nighttest.Merge(append(more, nighttest.World(records), journal)...)
	if wrong := nighttest.Judge(line, facts); len(wrong) > 0 {
		file := filepath.Join(t.ArtifactDir(), "story.txt")
		story := nighttest.Result{Line: line}
		writeFile(t, file, story.Story())
		t.Errorf("the judge says (the whole story with -artifacts):\n  %s", strings.Join(wrong[:min(len(wrong), 15)], "\n  "))
	}
	must(t, "check", "--data", data)
	// A check that cannot fail is none.
	i := slices.IndexFunc(journal, func(m nighttest.Moment) bool { return m.Journal.Kind == protocol.ReadingEntry })
	if len(nighttest.Judge(nighttest.Merge(append(more, nighttest.World(records), without(journal, i))...), facts)) == 0 {
		t.Error("a reading is lost, and the judge does not notice")
	}
}

// obituary is what the loss of power did to every instrument at once, which the killed process could
// not write down: gates and motions end, blades fall shut, controllers forget their zero.
func obituary(f *bench.File, at time.Time, records []instruments.Record) (all []instruments.Record) {
	var gate *instruments.GateTruth
	for _, r := range records {
		switch r.Kind {
		case instruments.GateOpened:
			gate = r.Gate
		case instruments.GateClosed, instruments.GateAborted:
			gate = nil
		}
	}
	add := func(r instruments.Record) {
		r.At = at
		all = append(all, r)
	}
	if gate != nil {
		add(instruments.Record{Device: string(f.Counter.Name), Kind: instruments.GateAborted, Gate: gate})
	}
	for _, s := range append(slices.Clone(f.Protectors), *f.Pump) {
		add(instruments.Record{Device: string(s.Name), Kind: instruments.BladeClosed})
	}
	for _, c := range f.Controllers {
		add(instruments.Record{Device: string(c.Name), Kind: instruments.Restarted})
	}
	return all
}

// All instruments lose their power while a run goes on, and come back without their zeros. The run
// finds them by the search that the bench file declares, or waits for a person.
func TestInstrumentsThatDieAndComeBackLoseAndDoubleNothing(t *testing.T) {
	t.Parallel()
	long := strings.Replace(killRecipe, "times: 2", "times: 4", 1)
	for _, c := range []struct {
		name  string
		bench []change
		holds bool
	}{
		{"and are searched for unattended", nil, false},
		{"and wait for a person", []change{{`home: \{unattended: true, `, "home: {"}}, true},
	} {
		if testing.Short() && c.holds {
			continue
		}
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			dir := t.TempDir()
			data, lines := filepath.Join(dir, "data"), filepath.Join(dir, "lines")
			known := quick(t, dir, c.bench...)
			forgetful := variant(t, known, filepath.Join(dir, "forgetful.yaml"),
				change{`(signal_arm|idler_arm|crystal_tilt): \{play`, "$1: {homed: false, play"},
				change{`^    axes:$`, "    axes:\n      pump_waveplate: {homed: false}"})
			f, err := bench.Load(known)
			if err != nil {
				t.Fatal(err)
			}
			sim, ledger := simulate(t, known, lines, "")
			p, ok := serve(t, nil, "--bench", known, "--data", data, "--lines", lines)
			if !ok {
				t.Fatalf("serve: %s", p.err)
			}
			run := started(t, data, long, "dying")
			deaths := 1
			if *realAll {
				deaths = 4
			}
			var records []instruments.Record
			for range deaths {
				gates := 0
				ledger.await(t, 0, "the eighth gate", func(r instruments.Record) bool {
					if r.Kind == instruments.GateClosed {
						gates++
					}
					return gates == 8
				})
				// As the system does when a device goes: its name goes first, so that nobody opens
				// whatever gets its terminal's number next.
				for _, l := range f.Lines {
					_ = os.Remove(filepath.Join(lines, l.Name))
				}
				sim.signal(syscall.SIGKILL)
				sim.wait()
				<-ledger.done
				died := ledger.all(t)
				records = append(records, append(died, obituary(f, sim.endedAt.UTC(), died)...)...)
				sim, ledger = simulate(t, forgetful, lines, "")
				if c.holds {
					row := awaitRow(t, p, data, run, "holding", func(r logbook.RunRow) bool { return r.State == protocol.Holding })
					if !slices.Contains(row.Causes, protocol.ByTrouble) || !strings.Contains(row.Reason, "lost the zero") {
						t.Errorf("the run holds for %v: %s; want a lost zero", row.Causes, row.Reason)
					}
					if done := moved(ledger.all(t)); len(done) > 0 {
						t.Errorf("%v happened with nobody there", done)
					}
					must(t, "resume", "--data", data)
				}
			}
			awaitRow(t, p, data, run, "finished", func(r logbook.RunRow) bool { return r.State == protocol.Finished })
			p.signal(syscall.SIGTERM)
			if code := p.wait(); code != exitDone {
				t.Errorf("serve: exit code %d\n%s", code, p.err)
			}
			quit(t, sim)
			<-ledger.done
			atRest(t, ledger.all(t))
			records = append(records, ledger.all(t)...)
			judged(t, known, long, data, records)
			homed := 0
			for _, e := range entriesOf(t, data) {
				if kindOf(e.Entry) == protocol.HomedEvent {
					homed++
				}
			}
			if homed < 2*deaths {
				t.Errorf("%d searches are written; want one of each controller after each death", homed)
			}
			t.Logf("%d deaths, %d records of the world, %d entries", deaths, len(records), len(entriesOf(t, data)))
		})
	}
}
