package report_test

import (
	"encoding/xml"
	"errors"
	"io"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/scan/estimate"
)

// drawn draws a run's pictures, and demands what holds of each: well-formed, no place that is none,
// nothing outside the sheet.
func (j *journal) drawn() (pictures []string, all []estimate.Result) {
	j.t.Helper()
	all, err := report.All(j.t.Context(), j.book, j.run, report.Options{})
	if err != nil {
		j.t.Fatal(err)
	}
	beside, err := report.BesideOf(j.t.Context(), j.book, j.run, all)
	if err != nil {
		j.t.Fatal(err)
	}
	for i, p := range report.Pictures(all, beside) {
		var b strings.Builder
		if err := p.Draw(&b); err != nil {
			j.t.Fatal(err)
		}
		text := b.String()
		if err := os.WriteFile(filepath.Join(j.t.ArtifactDir(), p.Kind+strconv.Itoa(i)+".svg"), []byte(text), 0o600); err != nil {
			j.t.Fatal(err)
		}
		soundPicture(j.t, text)
		pictures = append(pictures, text)
	}
	return pictures, all
}

var (
	boxOf    = regexp.MustCompile(`viewBox="0 0 ([0-9]+) ([0-9]+)"`)
	placesOf = regexp.MustCompile(`(?:<text x|<circle cx)="([-0-9.]+)" (?:y|cy)="([-0-9.]+)"`)
)

func soundPicture(t *testing.T, text string) {
	t.Helper()
	for d := xml.NewDecoder(strings.NewReader(text)); ; {
		if _, err := d.Token(); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			t.Fatalf("the picture is no XML: %v", err)
		}
	}
	if strings.Contains(text, "NaN") || strings.Contains(text, "Inf") {
		t.Error("the picture has places that are none")
	}
	box := boxOf.FindStringSubmatch(text)
	if box == nil {
		t.Fatal("the picture has no size")
	}
	number := func(s string) float64 {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	for _, m := range placesOf.FindAllStringSubmatch(text, -1) {
		if m[1] == "0.0" && m[2] == "0.0" {
			continue // within a turned group
		}
		if x, y := number(m[1]), number(m[2]); x < 0 || x > number(box[1]) || y < 0 || y > number(box[2]) {
			t.Errorf("%s is outside of the picture, %s by %s", m[0], box[1], box[2])
		}
	}
}

const efficiencyRecipe = `title: Idler detector
sweep:
  - {axis: crystal_tilt, at: 0 deg}
  - {axis: signal_arm, at: 2.864 deg}
  - {axis: idler_arm, from: 2.364 deg, to: 3.364 deg, step: 0.05 deg}
dwell: 4 s
repeat: {times: 2, as: passes}
dark: {dwell: 20 s, also: [start, end]}
reference: {axes: [signal_arm, idler_arm], on: [low_flank, top, high_flank], every: 30 min, dwell: 20 s, bounds: {singles: 5 %}, otherwise: note}
result: {kind: efficiency, trigger: signal, under_test: idler, use: {plateau_of: idler_arm, half_width: 0.06 deg}}
`

func (j *journal) dark() {
	j.reading(protocol.Dark, arms(2.864, 2.864), 20*time.Second, func(r *protocol.Reading) {
		r.Counts = []protocol.Count{{Channel: "signal", Counts: 22000}, {Channel: "idler", Counts: 24000}, {Channel: "pairs", Counts: 0}}
		r.Slices[0].Counts = r.Counts
	})
}

func TestAnEfficiencyIsDrawnWithPlateauBudgetAndNight(t *testing.T) {
	j := newJournalOf(t, 3, efficiencyRecipe)
	plan := referencePlan(t, j.file)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 44})
	j.dark()
	j.set(plan.Reference, 1)
	point := 0
	for visit := 1; visit <= 2; visit++ {
		for i := range 21 {
			j.reading(protocol.Light, arms(2.864, 2.364+0.05*float64(i)), 4*time.Second, func(r *protocol.Reading) {
				r.Point, r.Visit = new(i), new(visit)
				r.Accepted = point != 7
				if point++; point == 8 {
					r.Reason = "the gate was short"
				}
			})
		}
		if visit == 1 {
			j.tells(protocol.Held, protocol.Holding, "held by anna & <ben>", time.Minute, nil)
			j.tells(protocol.WentOn, protocol.Running, "resumed by anna", 4*time.Minute, nil)
		}
	}
	j.set(plan.Reference, 2)
	j.dark()
	j.tells(protocol.Ended, protocol.Finished, "finished: 43 of 44 readings accepted, 1 set aside", 0, nil)
	pictures, all := j.drawn()
	if len(pictures) != 1 {
		t.Fatalf("%d pictures; want one: %q", len(pictures), all[0].Because)
	}
	r, text := all[0], pictures[0]
	for _, want := range []string{
		">Detection efficiency of idler<", ">" + r.Stated() + "<", string(j.run), ">pairs per count of signal<", ">idler_arm / deg<", "middle 2.86",
		">The budget in quadrature<", ">path: filter (spectrophotometer)<", ">combined<", ">The night<", ">S<", ">I<", ">R<", "held by anna &amp; &lt;ben&gt;",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("no %q in the picture", want)
		}
	}
	// 41 accepted light readings in the plateau, 42 twice in the spine, and two sets of references.
	if n := strings.Count(text, `r="2.6"`); n != 41+2 {
		t.Errorf("%d circles; want 41 readings and 2 sets", n)
	}
	if n := strings.Count(text, `r="1.7"`); n != 2*42 {
		t.Errorf("%d grains; want 42 on either side", n)
	}
	if filled := strings.Count(text, `r="2.6" fill="#222"`); filled != len(r.Used) {
		t.Errorf("%d filled circles; want the %d readings that make the result", filled, len(r.Used))
	}
	if hollow := strings.Count(text, `r="1.7" stroke-width="0.7" fill="#fff"`); hollow != 2 {
		t.Errorf("%d hollow grains; want the one that was set aside, on both sides", hollow)
	}
}

func TestADriftIsDrawnWithBoundsHoldsAndWhatWasCalledBad(t *testing.T) {
	j := newJournal(t, 1)
	plan := referencePlan(t, j.file)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 1})
	for set := 1; set <= 3; set++ {
		j.set(plan.Reference, set)
	}
	j.slip["idler_arm"] = 0.06
	j.set(plan.Reference, 4)
	v, err := report.Judge(t.Context(), j.book, j.run, plan, j.file, 4, 1)
	if err != nil || v.Good {
		t.Fatalf("%+v, %v; want a bad set", v, err)
	}
	detail := v.Detail
	detail["reference"], detail["compared_with"] = 4, 1
	detail["from_sequence"], detail["to_sequence"], detail["why"] = j.next-1, j.next-1, "reference 4 against 1"
	j.tells(protocol.Doubted, protocol.Holding, "held: reference 4 against 1: "+v.Text, 0, detail)
	j.tells(protocol.WentOn, protocol.Running, "resumed by anna", 20*time.Minute, nil)
	j.slip["idler_arm"] = 0
	for set := 5; set <= 8; set++ {
		j.set(plan.Reference, set)
	}
	pictures, all := j.drawn()
	if len(pictures) != 1 || all[0].Drift == nil {
		t.Fatalf("%d pictures; want one of the drift", len(pictures))
	}
	text := pictures[0]
	for _, want := range []string{">" + all[0].Stated() + "<", ">centre of idler_arm<", ">singles of signal<", "mdeg an hour (u)", "time / UTC, from 2031-02-03", "Ringed 4: the run called that set bad against set 1, by", ">Grey: the run held.<"} {
		if !strings.Contains(text, want) {
			t.Errorf("no %q in the picture", want)
		}
	}
	if n := strings.Count(text, `r="2.8"`); n != 6*8 {
		t.Errorf("%d circles; want 8 sets of 6 quantities", n)
	}
	beyond := 0
	for _, c := range v.Detail["changes"].([]estimate.Change) {
		if c.Finding == estimate.Beyond {
			beyond++
		}
	}
	if n := strings.Count(text, `r="6.5"`); n == 0 || n != beyond {
		t.Errorf("%d rings; want %d, one for each quantity that was beyond its bound", n, beyond)
	}
	if n := strings.Count(text, `fill="#ddd"`); n != 6 {
		t.Errorf("%d grey stretches; want one in each panel", n)
	}
	if strings.Contains(text, "false alarm") {
		t.Error("an arm that slipped by twice its bound is no false alarm")
	}
}

func TestTheLegsOfABudgetEndAtItsCombinedUncertainty(t *testing.T) {
	inputs := []estimate.Input{{Quantity: "a", Symbol: "a", Estimate: 3, U: 0.3}, {Quantity: "b", Symbol: "b", Estimate: 2, U: 0.4}, {Quantity: "c", Symbol: "c", Estimate: 1, U: 0.1}}
	for _, cross := range []float64{0, 0.1, -0.11} {
		b, err := estimate.Propagate(func(x []float64) float64 { return x[0] + x[1] + 2*x[2] }, inputs, []estimate.Cross{{I: 0, J: 1, Covariance: cross, Because: "both by one ruler"}})
		if err != nil {
			t.Fatal(err)
		}
		if got := report.EndOfLegs(b.Rows); math.Abs(got-b.U) > 1e-12 {
			t.Errorf("covariance %g: the legs end %g from their start; want %g", cross, got, b.U)
		}
	}
}

// What a reader holds on a telephone is narrow: the sheet must not be wider than its letters are for.
func TestEveryRowOfAPictureFitsItsSheet(t *testing.T) {
	j := newJournal(t, 2)
	plan := referencePlan(t, j.file)
	for set := 1; set <= 3; set++ {
		j.set(plan.Reference, set)
	}
	pictures, _ := j.drawn()
	row := regexp.MustCompile(`text-anchor="start"[^>]*>([^<]*)<`)
	for _, text := range pictures {
		rows := row.FindAllStringSubmatch(text, -1)
		if len(rows) < 10 {
			t.Fatalf("%d rows; want the sentence and the panels", len(rows))
		}
		longest := slices.MaxFunc(rows, func(a, b []string) int { return len(a[1]) - len(b[1]) })[1]
		if len(longest) > 60 {
			t.Errorf("%q has %d letters; want 60 at most", longest, len(longest))
		}
	}
}
