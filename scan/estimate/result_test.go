package estimate

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"regexp"
	"strings"
	"testing"

	"gemel/protocol"
)

func demoNight() Rows {
	w := nominal(rand.New(rand.NewPCG(41, 1)))
	w.pairsHz = 1e5
	rows := rowsOf(night{w: w, readings: 4, slices: 5, sliceS: 0.05, darkS: 0.5}.take(), EveryPair)
	one := 1
	for i := range rows.Readings {
		rows.Readings[i].Simulated = &one
	}
	rows.Readings[2].Accepted, rows.Readings[2].Reason = false, "the pump left its band"
	rows.Doubtful = map[int64]string{4: "the idler arm had slipped"}
	return rows
}

func TestTheResultsJSONHasTheFixedKeys(t *testing.T) {
	r, err := Efficiency(demoNight(), skerry(EveryPair), Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"})
	if err != nil {
		t.Fatal(err)
	}
	refused := Refused(demoNight(), "efficiency", &Refusal{Reasons: []string{"not latched"}})
	for _, c := range []Result{r, refused} {
		text, err := c.JSON()
		if err != nil {
			t.Fatal(err)
		}
		var got map[string]any
		if err := json.Unmarshal(text, &got); err != nil {
			t.Fatal(err)
		}
		for _, key := range []string{"run", "kind", "value", "standard_uncertainty", "expanded_uncertainty", "coverage_factor", "unit", "budget", "corrections", "conditions",
			"readings_used", "readings_set_aside", "simulated"} {
			v, ok := got[key]
			if !ok {
				t.Errorf("no key %q", key)
			}
			if _, list := v.([]any); !list && strings.Contains(" budget corrections conditions readings_used readings_set_aside ", " "+key+" ") {
				t.Errorf("%q is %v; want a list, even an empty one", key, v)
			}
		}
		if got["kind"] != "efficiency" || got["run"] != "20310203T220000-test" || got["simulated"] != 1.0 {
			t.Errorf("kind %v, run %v, simulated %v", got["kind"], got["run"], got["simulated"])
		}
	}
	if refused.Value != nil || !strings.Contains(refused.Text(), "not latched") {
		t.Errorf("refused: %v, %s", refused.Value, refused.Text())
	}
}

func TestTheReportBeginsWithASentence(t *testing.T) {
	r, err := Efficiency(demoNight(), skerry(EveryPair), Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"})
	if err != nil {
		t.Fatal(err)
	}
	first, rest, _ := strings.Cut(r.Text(), "\n")
	if !regexp.MustCompile(`^The detection efficiency of idler is 0\.\d{4} ± 0\.\d{4} \(expanded uncertainty, k = 1\.96, 95 % coverage\); 2 readings kept, 2 set aside\.$`).MatchString(first) {
		t.Errorf("first line %q", first)
	}
	for _, part := range []string{"Simulated", "From the counts to the result", "raw coincidences over trigger counts", "background", "accidentals", "afterpulsing", "dead time", "window capture", "path", "collection",
		"Uncertainty budget (JCGM 100)", "Cov(S, C)", "combined standard uncertainty", "Birge ratio", "Conditions", "wavelength", "bandwidth", "polarisation", "plane", "count rate of the trigger", "detector settings",
		"coverage factor k", "heralding efficiency, net", "coincidence-to-accidental ratio, net", "coincidence-to-accidental ratio, gross", "Set aside", "the pump left its band", "doubtful: the idler arm had slipped"} {
		if !strings.Contains(rest, part) {
			t.Errorf("no %q in the report", part)
		}
	}
	if a, b := strings.Index(rest, "From the counts"), strings.Index(rest, "Uncertainty budget"); a < 0 || b < a || strings.Index(rest, "Conditions") < b {
		t.Error("want the waterfall, then the budget, then the conditions")
	}
}

func TestTheSameRowsGiveTheSameDigits(t *testing.T) {
	rows := demoNight()
	ask := func(rows Rows) []byte {
		r, err := Efficiency(rows, skerry(EveryPair), Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler", MonteCarlo: 2000, Seed: 9})
		if err != nil {
			t.Fatal(err)
		}
		text, err := r.JSON()
		if err != nil {
			t.Fatal(err)
		}
		return append(text, r.Text()...)
	}
	// What the logbook keeps is JSON; read back it must be the same rows.
	copied := rows
	copied.Readings = nil
	for _, row := range rows.Readings {
		text, err := json.Marshal(row)
		if err != nil {
			t.Fatal(err)
		}
		var back protocol.Reading
		if err := json.Unmarshal(text, &back); err != nil {
			t.Fatal(err)
		}
		copied.Readings = append(copied.Readings, back)
	}
	first := ask(rows)
	for range 3 {
		if !bytes.Equal(first, ask(copied)) {
			t.Fatal("the same rows, read back, gave other digits")
		}
	}
}

func TestTheWaterfallEndsAtTheResultAndStepsCanBeSwitchedOff(t *testing.T) {
	rows, b := demoNight(), skerry(EveryPair)
	q := Question{Trigger: "signal", UnderTest: "idler"}
	r, err := Efficiency(rows, b, Model{Collection: full}, q)
	if err != nil {
		t.Fatal(err)
	}
	last := r.Waterfall[len(r.Waterfall)-1]
	near(t, "last step", last.After, *r.Value, 1e-15)
	near(t, "first step", r.Waterfall[0].After, r.Waterfall[0].Amount, 1e-15)
	if len(r.Waterfall) != 1+len(steps) {
		t.Errorf("%d steps; want %d", len(r.Waterfall), 1+len(steps))
	}
	q.Off = map[Step]bool{PathStep: true}
	off, err := Efficiency(rows, b, Model{Collection: full}, q)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "without the path", *off.Value, *r.Value*0.96*0.985, 1e-12)
	for _, row := range off.Budget {
		if strings.HasPrefix(row.Symbol, "T_") {
			t.Errorf("row %q although the path is switched off", row.Quantity)
		}
	}
	if !strings.Contains(off.Text(), "switched off") {
		t.Error("the report does not say that a correction is switched off")
	}
	for _, s := range steps {
		q.Off = map[Step]bool{s: true}
		if r, err := Efficiency(rows, b, Model{Collection: full}, q); err != nil || r.Waterfall[1+indexOf(s)].Applied {
			t.Errorf("%s switched off: %v", s, err)
		}
	}
}

func indexOf(step Step) int {
	for i, s := range steps {
		if s == step {
			return i
		}
	}
	return -1
}

func TestSwitchedOffStepsNeedNoConstants(t *testing.T) {
	r, err := Efficiency(demoNight(), Bench{Counter: Counter{Logic: EveryPair, Latched: true, Pairs: map[string][2]string{"pairs": {"signal", "idler"}}}, PumpNm: 405,
		Arms: []Arm{{Name: "signal", Channel: "signal", Filter: &Filter{810, 10, "flat"}}, {Name: "idler", Channel: "idler"}}}, Model{}, plainQuestion(nil))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "raw ratio", *r.Value, r.Waterfall[0].Amount, 1e-15)
	// binomial, since nothing else is in it
	s := r.Budget[1].Estimate
	near(t, "u", *r.U, binomialU(*r.Value, s), 1e-9)
}

func binomialU(p, n float64) float64 { return math.Sqrt(p * (1 - p) / n) }

func TestRoundingShowsTwoDigitsOfTheUncertainty(t *testing.T) {
	for _, c := range []struct {
		u    float64
		want int
	}{{0.0042, 4}, {0.0996, 2}, {0.1, 2}, {12, 0}, {1.2e-5, 6}, {0, 6}} {
		if got := decimals(c.u); got != c.want {
			t.Errorf("u = %g: %d places; want %d", c.u, got, c.want)
		}
	}
}

func TestARefusalIsAnError(t *testing.T) {
	var no *Refusal
	_, err := Efficiency(Rows{Run: "x"}, skerry(EveryPair), Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"})
	if !errors.As(err, &no) || !strings.HasPrefix(err.Error(), "no result: ") {
		t.Errorf("empty run: %v", err)
	}
}

// Whatever stands in the rows and constants, there is a number that prints, or a refusal.
func TestHostileRowsGiveANumberOrARefusal(t *testing.T) {
	r := rand.New(rand.NewPCG(51, 1))
	odd := []float64{0, -1, 1e-300, 1e300, math.NaN(), math.Inf(1), 0.5, 4e-9}
	numbers, refusals := 0, 0
	for i := range 3000 {
		n := newExactNight()
		constants := []*Constant{&n.bench.Counter.Window, &n.bench.Counter.Capture, &n.bench.Arms[0].DeadTime, &n.bench.Arms[1].DeadTime, &n.bench.Arms[0].Afterpulse,
			&n.bench.Arms[1].Afterpulse, &n.bench.Arms[1].Path[0].Constant}
		for range r.IntN(3) {
			c := constants[r.IntN(len(constants))]
			if r.IntN(2) == 0 {
				c.Value = odd[r.IntN(len(odd))]
			} else {
				c.U = odd[r.IntN(len(odd))]
			}
		}
		for range r.IntN(4) {
			row := &n.rows.Readings[r.IntN(len(n.rows.Readings))]
			switch r.IntN(6) {
			case 0:
				row.Gate = 0
			case 1:
				row.Counts = row.Counts[:r.IntN(len(row.Counts)+1)]
			case 2:
				if len(row.Counts) == 0 {
					continue
				}
				row.Counts[r.IntN(len(row.Counts))].Counts = []uint64{0, 1, 1 << 60}[r.IntN(3)]
			case 3:
				row.Slices = nil
			case 4:
				for k := range row.Slices {
					row.Slices[k].Gate = 0
				}
			case 5:
				row.Kind = []protocol.ReadingKind{protocol.Light, protocol.Dark, protocol.Background, protocol.Reference, protocol.Check}[r.IntN(5)]
			}
		}
		res, err := n.ask(func(q *Question) {
			q.Displaced = r.IntN(2) == 0
			q.Off = map[Step]bool{steps[r.IntN(len(steps))]: true, ShadowStep: r.IntN(2) == 0}
		})
		var no *Refusal
		switch {
		case errors.As(err, &no) && len(no.Reasons) > 0:
			refusals++
			continue
		case err != nil:
			t.Fatalf("night %d: %v", i, err)
		}
		numbers++
		if math.IsNaN(*res.Value+*res.U+*res.Expanded) || math.IsInf(*res.Value, 0) {
			t.Fatalf("night %d: %v ± %v", i, *res.Value, *res.U)
		}
		if _, err := res.JSON(); err != nil {
			t.Fatalf("night %d: %v", i, err)
		}
	}
	if numbers < 200 || refusals < 200 {
		t.Errorf("%d numbers and %d refusals; want plenty of both", numbers, refusals)
	}
}

func TestReadingsOffThePlateauAreOneLineAndNoTrouble(t *testing.T) {
	r := Result{Run: "r", Kind: "efficiency", Because: []string{"none"}, Used: []int64{1}}
	for i, deg := range []float64{2.361, 2.561, 2.761, 2.961, 3.361} {
		r.SetAside = append(r.SetAside, Aside{int64(10 + i), fmt.Sprintf(offPlateau, "idler_arm", deg, 2.8601, 0.05)})
	}
	for i := range 3 {
		r.SetAside = append(r.SetAside, Aside{int64(20 + i), "the pump left its band"})
	}
	r.SetAside = append(r.SetAside, Aside{30, "doubtful: it slipped"})
	text := r.Text()
	for _, want := range []string{
		"(1 reading kept, 4 set aside, 5 off the plateau as planned)",
		"Set aside\n  5 readings off the plateau, as planned, at 2.361 to 2.761 and 2.961 to 3.361 deg\n  3 readings, 20 to 22: the pump left its band\n  reading 30: doubtful: it slipped\n",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("no %q in\n%s", want, text)
		}
	}
}

func TestARunWithoutLightIsToldSoAndNotOfOptics(t *testing.T) {
	dark := Rows{Run: "r", Readings: []protocol.Reading{row(1, protocol.Dark, testStart, 1, []gateCounts{{}}, EveryPair)}}
	for name, err := range map[string]error{
		"tuning curve": func() error { _, err := TuningCurve(dark, withTilt(), Model{}, tuningQuestion); return err }(),
		"peak": func() error {
			_, err := Peak(dark, skerry(EveryPair), Model{}, PeakQuestion{Axis: "idler_arm", Channel: "idler"})
			return err
		}(),
	} {
		if err == nil || !strings.Contains(err.Error(), "no light reading") || strings.Contains(err.Error(), "optics") {
			t.Errorf("%s: %v; want to be told that there is no light", name, err)
		}
	}
}

func TestDigitsSayNoMoreThanThereIs(t *testing.T) {
	v, u, k := 1., 0.1, 1.96
	r := Result{Run: "r", Kind: "peak", Value: &v, U: &u, Expanded: &u, K: &k, Budget: []Row{{Quantity: "x", Share: -1e-9}}, Dispersion: &Dispersion{Birge: 1, Readings: 1, P: 1}}
	if text := r.Text(); strings.Contains(text, "-0.0%") || !strings.Contains(text, " 0.0%") || strings.Contains(text, "Birge") {
		t.Errorf("%s\nwant a share of 0.0%%, and no word on the scatter of one reading", text)
	}
	r.Dispersion = &Dispersion{Birge: 1.3, Readings: 8, ChiSquare: 12, Freedom: 7, P: 0.0472}
	if text := r.Text(); !strings.Contains(text, "p = 0.0472): no more than counting explains, at the level of 1 %.") {
		t.Errorf("%s\nwant the level that p is held against", text)
	}
}
