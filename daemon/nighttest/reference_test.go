package nighttest

import (
	"encoding/json"
	"flag"
	"fmt"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/scan/engine"
	"gemel/scan/estimate"
)

var manyKills = flag.Bool("night.kill-refined", false, "kill a refined run at each of its first entries")

const watched = `
title: Refined, with references
sweep:
  - {axis: signal_arm, at: 2.864 deg}
  - {axis: idler_arm, from: 2.2 deg, to: 3.6 deg, step: 0.1 deg}
dwell: 2 s
reference: {axes: [signal_arm, idler_arm], on: [low_flank, top, high_flank], at: {signal_arm: 2.864 deg, idler_arm: 2.864 deg}, every: 6 points, dwell: 20 s, also: [end],
  bounds: {singles: 5 %, ratio: 3 %, centre: 0.02 deg}, otherwise: note}
refine: {along: idler_arm, of: pairs, u_below: 0.0004 deg, at_most: 30 points, within: 20 min}
result: [{kind: drift}, {kind: peak, of: pairs, along: idler_arm}]
`

// kept plays a night and returns what its journal holds, and the run.
func kept(t *testing.T, n Night) (r *Result, book *logbook.Book, run logbook.RunRow, entries []protocol.Entry) {
	t.Helper()
	var err error
	if n.Model, err = demoModel(); err != nil {
		t.Fatal(err)
	}
	data := t.TempDir()
	synctest.Test(t, func(t *testing.T) {
		var err error
		if r, err = Run(n, data); err != nil {
			t.Fatal(err)
		}
	})
	demand(t, n, r, "")
	if book, err = logbook.OpenReadOnly(filepath.Join(data, "logbook.db")); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { book.Close() })
	runs, err := book.Runs(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if entries, err = book.Entries(t.Context(), runs[0].Run, 0, 10000); err != nil {
		t.Fatal(err)
	}
	return r, book, runs[0], entries
}

func bodies[T any](t *testing.T, entries []protocol.Entry, kind protocol.EntryKind) (all []T) {
	t.Helper()
	for _, e := range entries {
		if e.Kind != kind {
			continue
		}
		var body T
		if err := json.Unmarshal(e.Body, &body); err != nil {
			t.Fatal(err)
		}
		all = append(all, body)
	}
	return all
}

// Killed at any step, a run visits every point that it decided once, decides each refinement once,
// and would decide all of them so again from the file alone.
func TestARefinedRunThatIsKilledVisitsWhatItDecided(t *testing.T) {
	scripts := []Script{{}}
	for i, step := range []engine.Step{engine.StepMoved, engine.StepGated, engine.StepWriting, engine.StepWritten} {
		scripts = append(scripts, Script{Kills: []Kill{{Step: step, Nth: 20 + 5*i}, {Step: step, Nth: 9 + i}}})
	}
	if *manyKills {
		for _, step := range []engine.Step{engine.StepWriting, engine.StepWritten, engine.StepDecided} {
			for nth := 1; nth < 60; nth++ {
				scripts = append(scripts, Script{Kills: []Kill{{Step: step, Nth: nth}}})
			}
		}
	}
	file := demoBench(t) // one for all nights: what the model works out is kept with it
	for _, s := range scripts {
		t.Run(strings.TrimSuffix(s.String(), " | "), func(t *testing.T) {
			n := Night{Bench: file, Recipe: watched, Script: s}
			r, book, row, entries := kept(t, n)
			if r.State != protocol.Finished {
				t.Fatalf("%s (%s); want finished", r.State, r.Reason)
			}
			decided, rounds := 0, 0
			plan, err := (&kit{Night: n}).plan(n.Recipe, row.QueuedAt.Time, nil)
			if err != nil {
				t.Fatal(err)
			}
			for _, p := range bodies[protocol.Points](t, entries, protocol.PointEntry) {
				decided += len(p.Points)
				if p.Refined == 0 {
					continue
				}
				if rounds++; p.Refined != rounds {
					t.Errorf("refinement %d is written as the %dth; want each once, in order", p.Refined, rounds)
				}
				again, err := report.Refine(t.Context(), book, row.Run, plan, n.Bench, p.Refined)
				if err != nil {
					t.Fatal(err)
				}
				if again.Grounds != p.Grounds || len(again.Points) != len(p.Points) {
					t.Errorf("refinement %d would be decided otherwise: %q with %d points; it was %q with %d", p.Refined, again.Grounds, len(again.Points), p.Grounds, len(p.Points))
				}
			}
			visited := map[int]int{}
			for _, one := range bodies[protocol.Reading](t, entries, protocol.ReadingEntry) {
				if one.Kind == protocol.Light && one.Accepted {
					visited[*one.Point]++
				}
			}
			if rounds < 2 || decided <= len(plan.Points) || len(visited) != decided {
				t.Errorf("%d points decided in %d refinements, %d visited; want more than the sweep's %d, all visited", decided, rounds, len(visited), len(plan.Points))
			}
			for p, times := range visited {
				if times != 1 {
					t.Errorf("point %d visited %d times; want once", p, times)
				}
			}
		})
	}
}

func TestAPumpThatFadesIsFoundByTheReferences(t *testing.T) {
	n := Night{Bench: demoBench(t), Recipe: watched}
	doubts := func(entries []protocol.Entry) (list []protocol.Event) {
		for _, ev := range bodies[protocol.Event](t, entries, protocol.EventEntry) {
			if ev.Kind == protocol.Doubted || strings.Contains(ev.Text, "cannot be judged") {
				list = append(list, ev)
			}
		}
		return list
	}
	quiet, _, _, entries := kept(t, n)
	if list := doubts(entries); len(list) > 0 {
		t.Errorf("on a quiet night: %+v; want nothing doubted", list)
	}
	var err error
	if n.Script, err = ParseScript(fmt.Sprintf("| pump_drift(at %s, for 1m0s, share -0.12)", (quiet.Took * 2 / 5).Round(time.Second))); err != nil {
		t.Fatal(err)
	}
	_, book, row, entries := kept(t, n)
	list := doubts(entries)
	if len(list) == 0 || !strings.Contains(list[0].Text, "singles of signal changed by -1") || strings.Contains(list[0].Text, "centre of idler_arm changed") {
		t.Fatalf("%+v; want the singles' change, and no arm's", list)
	}
	// Between the last good references and the first bad ones everything counted is doubtful.
	doubtful := 0
	for r, err := range book.Readings(t.Context(), row.Run) {
		if err != nil {
			t.Fatal(err)
		}
		if r.Doubtful && r.Kind == protocol.Light {
			doubtful++
		}
	}
	if doubtful < 6 {
		t.Errorf("%d readings of light are doubtful; want those between two references at least", doubtful)
	}
	all, err := report.All(t.Context(), book, row.Run, report.Options{})
	if err != nil {
		t.Fatal(err)
	}
	i := slices.IndexFunc(all[0].Drift.Quantities, func(q estimate.DriftQuantity) bool { return q.Quantity == "singles of signal" })
	if q := all[0].Drift.Quantities[i]; q.Excursion > -0.09 || q.Excursion < -0.13 {
		t.Errorf("%s; want an excursion of about -12 %%, less what of the counts is no light of the pump", q.Sentence())
	}
}
