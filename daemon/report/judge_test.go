package report_test

import (
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/recipe"
)

// journal writes a run by hand: readings drawn from what the demo's bench expects.
type journal struct {
	t    *testing.T
	book *logbook.Book
	file *bench.File
	run  protocol.RunID
	next int64
	at   time.Time
	r    *rand.Rand
	slip map[drivers.AxisName]float64 // how far an arm's reading is off its place, degrees
	loss float64                      // share of the signal's counts that is left
}

// driftRecipe is as somebody would write it.
const driftRecipe = `title: A night of references
dwell: 5 s
sweep:
  - {axis: signal_arm, at: 2.88 deg}
  - {axis: idler_arm, at: 2.96 deg}
reference: {axes: [signal_arm, idler_arm], on: [low_flank, top, high_flank], every: 30 min, dwell: 20 s, bounds: {singles: 5 %, ratio: 3 %, centre: 0.03 deg}, otherwise: note}
result: {kind: drift}
`

func newJournal(t *testing.T, seed uint64) *journal { return newJournalOf(t, seed, driftRecipe) }

func newJournalOf(t *testing.T, seed uint64, recipeText string) *journal {
	t.Helper()
	file, err := bench.Load(filepath.Join("..", "..", "configs", "demo-bench.yaml"))
	if err != nil {
		t.Fatal(err)
	}
	book, err := logbook.Open(t.TempDir())
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { book.Close() })
	j := &journal{t: t, book: book, file: file, run: "20310203-220000-abcd", next: 2, at: time.Date(2031, 2, 3, 22, 0, 0, 0, time.UTC),
		r: rand.New(rand.NewPCG(seed, 1)), slip: map[drivers.AxisName]float64{}, loss: 1}
	head := protocol.Head{Schema: protocol.EventSchema, Bench: file.Name, Run: j.run, Sequence: 1, At: protocol.Time{Time: j.at}}
	first, err := json.Marshal(protocol.Event{Head: head, Kind: protocol.OperatorDid, Text: "start asked for", State: protocol.Queued, Causes: []protocol.Cause{}, Detail: map[string]any{}})
	if err != nil {
		t.Fatal(err)
	}
	h := logbook.Header{Run: j.run, Title: "Drift", RecipeText: recipeText, BenchText: file.Text, Version: "test", QueuedAt: head.At}
	if _, err := book.NewRun(t.Context(), h, protocol.Entry{Run: j.run, Sequence: 1, Kind: protocol.EventEntry, Body: first}); err != nil {
		t.Fatal(err)
	}
	return j
}

func (j *journal) head(schema string) protocol.Head {
	return protocol.Head{Schema: schema, Bench: j.file.Name, Run: j.run, Sequence: j.next, At: protocol.Time{Time: j.at}}
}

func (j *journal) write(kind protocol.EntryKind, body any) {
	j.t.Helper()
	raw, err := json.Marshal(body)
	if err != nil {
		j.t.Fatal(err)
	}
	if err := j.book.Append(j.t.Context(), protocol.Entry{Run: j.run, Sequence: j.next, Kind: kind, Body: raw}); err != nil {
		j.t.Fatal(err)
	}
	j.next++
}

// reading counts at a place what the declared source gives there.
func (j *journal) reading(kind protocol.ReadingKind, axes []scan.AxisTarget, gate time.Duration, more func(r *protocol.Reading)) {
	j.t.Helper()
	truly := make([]scan.AxisTarget, len(axes))
	angles := []protocol.Angle{}
	for i, a := range axes {
		truly[i] = scan.AxisTarget{Axis: a.Axis, Angle: a.Angle + unit.Degrees(j.slip[a.Axis])}
		angles = append(angles, protocol.Angle{Axis: string(a.Axis), Target: a.Angle, Before: a.Angle, After: a.Angle, Proof: "proved"})
	}
	e, err := j.file.Facts().Expect(truly, nil)
	if err != nil {
		j.t.Fatal(err)
	}
	draw := func(hz float64) uint64 {
		mean := hz * gate.Seconds()
		return uint64(math.Max(0, math.Round(mean+math.Sqrt(mean)*j.r.NormFloat64())))
	}
	pairs := draw((e.CountsHz["pairs"] - e.AccidentalsHz["pairs"]) * j.loss)
	signal := pairs + draw((e.CountsHz["signal"]-e.CountsHz["pairs"])*j.loss)
	idler := pairs + draw(e.CountsHz["idler"]-e.CountsHz["pairs"])
	counts := []protocol.Count{{Channel: "signal", Counts: signal}, {Channel: "idler", Counts: idler}, {Channel: "pairs", Counts: pairs + draw(e.AccidentalsHz["pairs"])}}
	began := j.at
	j.at = j.at.Add(gate)
	r := protocol.Reading{Head: j.head(protocol.ReadingSchema), Kind: kind, Accepted: true, StartedAt: protocol.Time{Time: began}, EndedAt: protocol.Time{Time: j.at},
		GateSet: protocol.Seconds(gate), Gate: protocol.Seconds(gate), Angles: angles, Settings: []protocol.Setting{}, Sensors: []protocol.Sensor{}, Counts: counts,
		Slices: []protocol.Slice{{GateSet: protocol.Seconds(gate), Gate: protocol.Seconds(gate), Counts: counts}}, Attempt: 1}
	more(&r)
	j.write(protocol.ReadingEntry, r)
	j.at = j.at.Add(time.Second) // a move
}

func arms(signalDeg, idlerDeg float64) []scan.AxisTarget {
	return []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(signalDeg)}, {Axis: "idler_arm", Angle: unit.Degrees(idlerDeg)}}
}

// referencePlan is a plan with a reference on both arms, at the flanks that the optics declare.
func referencePlan(t *testing.T, file *bench.File) scan.Plan {
	t.Helper()
	const signalDeg, idlerDeg = 2.88, 2.96
	ref := scan.Reference{Places: []scan.ReferencePlace{{On: scan.Top, Axes: arms(signalDeg, idlerDeg)}}, Trigger: "signal", UnderTest: "idler", Pairs: "pairs",
		Bounds: scan.Bounds{Singles: 0.05, Ratio: 0.03, Centre: unit.Degrees(0.03)}}
	for _, arm := range []drivers.AxisName{"signal_arm", "idler_arm"} {
		low, high, err := file.Facts().Flanks(arm, arms(signalDeg, idlerDeg))
		if err != nil {
			t.Fatal(err)
		}
		for i, a := range []unit.Angle{low, high} {
			axes := arms(signalDeg, idlerDeg)
			for k := range axes {
				if axes[k].Axis == arm {
					axes[k].Angle = a
				}
			}
			ref.Places = append(ref.Places, scan.ReferencePlace{Arm: arm, On: []scan.Spot{scan.LowFlank, scan.HighFlank}[i], Axes: axes})
		}
	}
	return scan.Plan{Title: "Drift", Reference: &ref}
}

func (j *journal) set(ref *scan.Reference, set int) {
	j.t.Helper()
	for i, p := range ref.Places {
		j.reading(protocol.Reference, p.Axes, 20*time.Second, func(r *protocol.Reading) {
			r.Reference = &protocol.ReferenceOf{Set: set, Place: i, Places: len(ref.Places), Arm: string(p.Arm), On: string(p.On)}
		})
	}
	j.at = j.at.Add(30 * time.Minute)
}

func TestSetsOfReferencesAreJudgedFromTheLogbook(t *testing.T) {
	j := newJournal(t, 1)
	plan := referencePlan(t, j.file)
	j.set(plan.Reference, 1)
	j.set(plan.Reference, 2)
	j.slip["idler_arm"] = 0.06
	j.set(plan.Reference, 3)
	j.slip["idler_arm"], j.loss = 0, 0.8
	j.set(plan.Reference, 4)
	for _, c := range []struct {
		set, baseline int
		good          bool
		want          []string
	}{
		{2, 1, true, []string{"within bounds: singles of signal "}},
		{3, 1, false, []string{"centre of idler_arm changed by -0.06", "0.03 deg allowed; within bounds: "}},
		{3, 2, false, []string{"centre of idler_arm changed by -0.06"}},
		{4, 1, false, []string{"singles of signal changed by -20 %, u ", "pairs per count of idler changed by -", "within bounds: singles of idler "}},
		{3, 3, true, nil}, // no readings before: an error
	} {
		t.Run(fmt.Sprintf("%d against %d", c.set, c.baseline), func(t *testing.T) {
			v, err := report.Judge(t.Context(), j.book, j.run, plan, j.file, c.set, c.baseline)
			if c.want == nil {
				if err == nil {
					t.Fatalf("%+v; want an error", v)
				}
				return
			}
			if err != nil {
				t.Fatal(err)
			}
			if v.Good != c.good {
				t.Errorf("good is %v (%s); want %v", v.Good, v.Text, c.good)
			}
			for _, want := range c.want {
				if !strings.Contains(v.Text, want) {
					t.Errorf("%q; want %q in it", v.Text, want)
				}
			}
			again, err := report.Judge(t.Context(), j.book, j.run, plan, j.file, c.set, c.baseline)
			if err != nil || again.Text != v.Text || !reflect.DeepEqual(asJSON(t, again.Detail), asJSON(t, v.Detail)) {
				t.Errorf("asked again: %+v (%v); want the same", again, err)
			}
		})
	}
}

func TestADriftIsReportedFromTheLogbook(t *testing.T) {
	j := newJournal(t, 4)
	r, err := recipe.Parse("drift", []byte(driftRecipe))
	if err != nil {
		t.Fatal(err)
	}
	plan, err := r.Plan(j.file.Facts())
	if err != nil {
		t.Fatal(err)
	}
	for set := 1; set <= 6; set++ {
		j.set(plan.Reference, set)
		j.slip["signal_arm"] += 0.005
	}
	all, err := report.All(t.Context(), j.book, j.run, report.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if len(all) != 1 || all[0].Kind != "drift" || all[0].Value == nil || all[0].Drift == nil {
		t.Fatalf("%+v; want one drift with a number", all)
	}
	for _, q := range all[0].Drift.Quantities {
		t.Log(q.Sentence())
		if q.Quantity == "centre of signal_arm" && (q.Worst != 6 || math.Abs(q.Excursion+0.025) > 4*q.ExcursionU || q.ExcursionU > 0.005) {
			t.Errorf("%+v; want set 6 off by -0.025 deg", q)
		}
	}
}

func asJSON(t *testing.T, v any) string {
	t.Helper()
	b, err := json.Marshal(v)
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}
