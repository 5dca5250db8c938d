package nighttest

import (
	"bytes"
	"context"
	"encoding/json"
	"encoding/xml"
	"errors"
	"io"
	"math"
	"path/filepath"
	"strings"
	"testing"
	"testing/synctest"

	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/scan/estimate"
)

const efficiency = `
title: Idler efficiency on the plateau
sweep:
  - {axis: signal_arm, at: 2.864 deg}
  - {axis: idler_arm, around: 2.864 deg, span: 1.2 deg, step: 0.1 deg}
order: serpentine
dwell: {heralds: 100000, at_most: 20 s, slice: 2 s}
repeat: {times: 2, as: passes}
dark: {every: 10 points, dwell: 20 s, also: [start, end]}
background: {turn: pump_waveplate, by: 45 deg, every: 10 points, dwell: 40 s, also: [start, end]}
result: {kind: efficiency, trigger: signal, under_test: idler, use: {plateau_of: idler_arm, half_width: 0.05 deg}}
`

const ringPeak = `
title: Find the ring
sweep:
  - {axis: idler_arm, at: 2.864 deg}
  - {axis: signal_arm, around: 2.864 deg, span: 0.8 deg, step: 0.05 deg}
dwell: 4 s
repeat: {times: 2, as: passes}
result: {kind: peak, of: pairs, along: signal_arm, profile: predicted}
`

const delayScan = `
title: Coincidence delay
sweep:
  - {axis: signal_arm, at: 2.86 deg}
  - {axis: idler_arm, at: 2.86 deg}
  - {setting: delay, from: 14 ns, to: 23 ns, step: 0.25 ns}
dwell: 1 s
result:
  - {kind: delay, of: pairs, setting: delay}
`

const bothSides = `
title: Zero and both sides
sweep:
  - {axis: crystal_tilt, at: 0 deg}
  - {axis: idler_arm, at: 11 deg}
  - {axis: signal_arm, at: [-3.6 deg, -3.2 deg, -3 deg, -2.9 deg, -2.8 deg, -2.7 deg, -2.5 deg, -2.1 deg, 2.1 deg, 2.5 deg, 2.7 deg, 2.8 deg, 2.9 deg, 3 deg, 3.2 deg, 3.6 deg]}
dwell: 2 s
dark: {dwell: 10 s, also: [start, end]}
result:
  - {kind: zero, of: signal, along: signal_arm}
  - {kind: peak, of: signal, along: signal_arm, profile: two_peaks}
`

// resultOf is the first of resultsOf.
func resultOf(t *testing.T, recipe string) (estimate.Result, *Result) {
	t.Helper()
	all, night := resultsOf(t, recipe)
	return all[0], night
}

// resultsOf runs a night and works its results out twice: from the logbook, and from a copy of the
// file alone.
func resultsOf(t *testing.T, recipe string) ([]estimate.Result, *Result) {
	t.Helper()
	data, n := t.TempDir(), Night{Bench: demoBench(t), Recipe: recipe}
	var night *Result
	var err error
	if n.Model, err = demoModel(); err != nil {
		t.Fatal(err)
	}
	synctest.Test(t, func(t *testing.T) {
		var err error
		if night, err = Run(n, data); err != nil {
			t.Fatal(err)
		}
	})
	demand(t, n, night, "")
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	runs, err := book.Runs(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	first := digits(t, book, runs[0].Run)
	alone := filepath.Join(t.TempDir(), "copy.db")
	if err := book.Snapshot(t.Context(), alone); err != nil {
		t.Fatal(err)
	}
	kept, err := logbook.OpenReadOnly(alone)
	if err != nil {
		t.Fatal(err)
	}
	defer kept.Close()
	if again := digits(t, kept, runs[0].Run); !bytes.Equal(first, again) {
		t.Error("a copy of the file gives other digits")
	}
	all, err := report.All(context.Background(), book, runs[0].Run, report.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if all[0].Kind == "efficiency" {
		options(t, book, all[0])
	}
	return all, night
}

func digits(t *testing.T, book *logbook.Book, run protocol.RunID) []byte {
	t.Helper()
	all, err := report.All(t.Context(), book, run, report.Options{})
	if err != nil {
		t.Fatal(err)
	}
	text, err := report.JSON(all)
	if err != nil {
		t.Fatal(err)
	}
	var fixed map[string]json.RawMessage
	if err := json.Unmarshal(text, &fixed); err != nil {
		t.Fatal(err)
	}
	for _, key := range []string{"run", "kind", "value", "standard_uncertainty", "expanded_uncertainty", "coverage_factor", "unit", "budget", "corrections", "conditions", "readings_used", "readings_set_aside", "simulated"} {
		if fixed[key] == nil {
			t.Errorf("key %s is missing", key)
		}
	}
	return text
}

// options checks what a person may ask otherwise of the same run.
func options(t *testing.T, book *logbook.Book, asked estimate.Result) {
	t.Helper()
	with := func(o report.Options) estimate.Result {
		t.Helper()
		all, err := report.All(t.Context(), book, asked.Run, o)
		if err != nil {
			t.Fatal(err)
		}
		return all[0]
	}
	// The declared path is 0.995 × 0.984 × 0.95.
	if r := with(report.Options{Off: []estimate.Step{estimate.PathStep}}); r.Value == nil || math.Abs(*r.Value/(*asked.Value*0.995*0.984*0.95)-1) > 1e-9 {
		t.Errorf("without the path: %s; with it: %s", r.Sentence(), asked.Sentence())
	}
	if r := with(report.Options{Displaced: true}); r.Value != nil || len(r.Because) == 0 {
		t.Errorf("by displaced windows, which this counter has not: %s", r.Sentence())
	}
	if r := with(report.Options{Trials: 2000, Seed: 1}); r.MonteCarlo == nil || *r.Value != *asked.Value {
		t.Errorf("with trials: %s, %v; want the same value and a Monte Carlo beside it", r.Sentence(), r.MonteCarlo)
	}
}

// trueEfficiency stands in configs/demo-bench.yaml under simulation.truth, where no result can read it.
const trueEfficiency = 0.57

func TestTheEfficiencyOfASimulatedDetectorIsItsTrueOne(t *testing.T) {
	r, night := resultOf(t, efficiency)
	if r.Value == nil {
		t.Fatalf("no value: %q", r.Because)
	}
	if math.Abs(*r.Value-trueEfficiency) > *r.Expanded {
		t.Errorf("%s; the true one is %g", r.Sentence(), trueEfficiency)
	}
	// Counting alone is much better than the declared path: it has to agree too.
	if counting := 0.003; math.Abs(*r.Value-trueEfficiency) > 3*counting {
		t.Errorf("%g differs from %g by more than three times what counting allows", *r.Value, trueEfficiency)
	}
	t.Log(r.Sentence())
	if len(r.Used) != 2 || night.SetAside != 0 {
		t.Errorf("%d readings used; want the place in the plateau's middle, twice", len(r.Used))
	}
}

func TestTheRingIsWhereTheModelPutsIt(t *testing.T) {
	// The profile is predicted with the emission at 2.8642 deg (checks.csv S069: bbo-kato-1986, 405 nm,
	// cut 29.2 deg), the fit moves it by an offset, and the bench has none: both arms stand true.
	r, _ := resultOf(t, ringPeak)
	if r.Value == nil {
		t.Fatalf("no value: %q", r.Because)
	}
	t.Log(r.Sentence())
	if math.Abs(*r.Value-2.8642) > max(*r.Expanded, 0.02) {
		t.Errorf("the peak stands at %g ± %g deg; want 2.864", *r.Value, *r.Expanded)
	}
}

// trueDelayNs and trueJitterNs stand in configs/demo-bench.yaml under simulation.truth.
const (
	trueDelayNs  = 18.42
	trueJitterNs = 0.35
)

func TestTheDelayOfASimulatedCounterIsItsTrueOne(t *testing.T) {
	r, _ := resultOf(t, delayScan)
	if r.Value == nil {
		t.Fatalf("no value: %q", r.Because)
	}
	t.Log(r.Sentence())
	d := r.Delay
	for _, c := range []struct {
		what            string
		got, want, u, k float64
	}{
		{"centre", *r.Value, trueDelayNs, *r.U, 4},
		{"full width", d.WidthS * 1e9, 4, d.WidthU * 1e9, 4},
		{"jitter", d.JitterS * 1e9, trueJitterNs, *d.JitterU * 1e9, 4},
		{"window by the floors", *d.ByFloorS * 1e9, 4, *d.ByFloorU * 1e9, 4},
	} {
		if math.Abs(c.got-c.want) > c.k*c.u {
			t.Errorf("%s: %g ± %g; the true one is %g", c.what, c.got, c.u, c.want)
		}
	}
	if r.Unit != "ns" || !d.Declared {
		t.Errorf("unit %q, operating delay declared: %v", r.Unit, d.Declared)
	}
}

func TestSeveralResultsComeInTheRecipesOrder(t *testing.T) {
	all, _ := resultsOf(t, bothSides)
	if len(all) != 2 || all[0].Kind != "zero" || all[1].Kind != "peak" {
		t.Fatalf("%d results; want a zero and a peak", len(all))
	}
	for _, r := range all {
		if r.Value == nil {
			t.Fatalf("no %s: %q", r.Kind, r.Because)
		}
		t.Log(r.Sentence())
	}
	// The bench's arms stand true, and its ring is even: checks S069.
	z := all[0].Zero
	if math.Abs(*all[0].Value) > 4*z.OffsetU || math.Abs(z.HalfDeg-*z.Expected) > 4*z.OffsetU {
		t.Errorf("zero %g, half the distance %g where %g is predicted, ± %g deg", *all[0].Value, z.HalfDeg, *z.Expected, z.OffsetU)
	}
	text, err := report.JSON(all)
	if err != nil {
		t.Fatal(err)
	}
	var body struct {
		Kind    string            `json:"kind"`
		Results []json.RawMessage `json:"results"`
	}
	if err := json.Unmarshal(text, &body); err != nil || body.Kind != "zero" || len(body.Results) != 2 {
		t.Errorf("%v: kind %q, %d results; want the first's own keys and a list of both", err, body.Kind, len(body.Results))
	}
	var picture strings.Builder
	for _, p := range report.Pictures(all, report.Beside{}) {
		if err := p.Draw(&picture); err != nil {
			t.Fatal(err)
		}
	}
	if n := strings.Count(picture.String(), `r="2.6"`); n != 16+16 {
		t.Errorf("%d readings drawn; want each in both pictures", n)
	}
	if d := xml.NewDecoder(strings.NewReader(picture.String())); !wellFormed(d) {
		t.Error("the picture is no XML")
	}
}

func wellFormed(d *xml.Decoder) bool {
	for {
		if _, err := d.Token(); err != nil {
			return errors.Is(err, io.EOF)
		}
	}
}
