package estimate

import (
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gemel/protocol"
)

// atPowers takes single photons at several pump powers: everything that the pump makes follows it.
func atPowers(r *rand.Rand, powers []float64, net float64, change func(*world)) (Rows, float64) {
	rows := Rows{Run: "20310203T220000-powers"}
	truth := 0.0
	for _, p := range powers {
		w := nominal(r)
		w.pairsHz, w.noiseT, w.noiseD = 1.2e4*p, 600*p, 600*p
		if change != nil {
			change(&w)
		}
		truth = w.etaD
		n := night{w: w}
		lengths(w, &n, net, 4)
		for _, one := range rowsOf(n.take(), EveryPair).Readings {
			one.Sequence = int64(len(rows.Readings) + 1)
			one.Settings = []protocol.Setting{{Name: "pump_power", Target: p, Before: p, After: p, Unit: "mW"}}
			rows.Readings = append(rows.Readings, one)
		}
	}
	return rows, truth
}

var powers = []float64{5, 15, 30, 45}

func TestAnEfficiencyAtSeveralPowersIsShownOneByOne(t *testing.T) {
	rows, truth := atPowers(rand.New(rand.NewPCG(91, 1)), powers, 15000, nil)
	q := Question{Trigger: "signal", UnderTest: "idler"}
	res, err := EfficiencyBy(rows, skerry(EveryPair), Model{Collection: full}, q, "pump_power")
	if err != nil {
		t.Fatal(err)
	}
	near(t, "mean", *res.Value, truth, 3**res.U)
	if len(res.Parts) != 4 || len(res.By.Values) != 4 || res.By.Unit != "mW" || res.By.Slope == nil || res.By.Significant {
		t.Fatalf("%d parts, %+v", len(res.Parts), res.By)
	}
	// What the values share is not averaged down, what they do not is.
	own := 0.0
	for i, part := range res.Parts {
		if len(part.Used) != 4 {
			t.Errorf("part %d: %d readings; want those of its power", i, len(part.Used))
		}
		v := res.By.Values[i]
		near(t, "its own value", *v.Value, *part.Value, 0)
		own += 1 / (v.OwnU * v.OwnU)
		if v.OwnU >= v.U {
			t.Errorf("value %d: counting alone %g of %g", i, v.OwnU, v.U)
		}
	}
	near(t, "counting of the mean", res.Budget[0].U, 1/math.Sqrt(own), 1e-9)
	path := 0.0
	for _, row := range res.Budget {
		if row.Symbol == "T_1" {
			path = row.Contribution
		}
	}
	near(t, "the path's row is as large as ever", path, *res.Value*0.002/0.96, 1e-2*path)
	if len(res.Used) != 16 || !strings.Contains(res.Text(), "One by one") || !strings.Contains(res.Text(), "not significant") {
		t.Errorf("%d readings used\n%s", len(res.Used), res.Text())
	}
}

func TestAWrongWindowIsASlopeAgainstThePower(t *testing.T) {
	statistics(t)
	// Much light without partners on the tested detector, so that accidentals weigh.
	rows, _ := atPowers(rand.New(rand.NewPCG(92, 1)), []float64{5, 30, 60, 90}, 30000, func(w *world) { w.noiseD = 2 * w.pairsHz })
	b := skerry(EveryPair)
	b.Counter.Window = Constant{1e-9, 0.05e-9, "a mistake"} // it is 4 ns
	res, err := EfficiencyBy(rows, b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"}, "pump_power")
	if err != nil {
		t.Fatal(err)
	}
	if !res.By.Significant || *res.By.Slope < 0 || !strings.Contains(strings.Join(res.Warnings, "\n"), "changes with pump_power") {
		t.Errorf("%+v, %q; want the slope found", res.By, res.Warnings)
	}
	// The same counts with a window that is known badly: its uncertainty explains the slope.
	b.Counter.Window = Constant{1e-9, 2e-9, "a guess"}
	if res, err = EfficiencyBy(rows, b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"}, "pump_power"); err != nil {
		t.Fatal(err)
	}
	if res.By.Significant || res.By.SlopeCommon < res.By.SlopeOwnU {
		t.Errorf("%+v; want the window's uncertainty in the slope's", res.By)
	}
}

func TestHonestPowersHaveNoSlope(t *testing.T) {
	statistics(t)
	times, found, inside, miss := 12, 0, 0, 0.0
	if *long {
		times = 500
	}
	for i := range times {
		r := rand.New(rand.NewPCG(93, uint64(i)))
		b := skerry(EveryPair)
		drawnWorld := drawn(r, b, NonParalysable)
		rows, truth := atPowers(r, powers, 15000, func(w *world) {
			d := drawnWorld
			d.pairsHz, d.noiseT, d.noiseD = w.pairsHz, w.noiseT, w.noiseD
			*w = d
		})
		res, err := EfficiencyBy(rows, b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"}, "pump_power")
		if err != nil {
			t.Fatal(err)
		}
		if res.By.Significant {
			found++
		}
		if res.Interval.Low <= truth && truth <= res.Interval.High {
			inside++
		}
		miss += (*res.Value - truth) / *res.U / float64(times)
	}
	coverage(t, "mean over powers", inside, times, miss)
	if most := 0.01*float64(times) + 4*math.Sqrt(0.01*float64(times)); float64(found) > most {
		t.Errorf("%d of %d honest nights have a significant slope; want at most %.1f", found, times, most)
	}
}

func TestBackgroundsCountForTheirOwnPower(t *testing.T) {
	rows, truth := atPowers(rand.New(rand.NewPCG(94, 1)), powers, 15000, func(w *world) { w.noiseT *= 6 })
	q := Question{Trigger: "signal", UnderTest: "idler"}
	res, err := EfficiencyBy(rows, skerry(EveryPair), Model{Collection: full}, q, "pump_power")
	if err != nil {
		t.Fatal(err)
	}
	near(t, "mean", *res.Value, truth, 3**res.U)
	// Without backgrounds at one power there is no number for it, and the others stand.
	var kept []protocol.Reading
	for _, one := range rows.Readings {
		if one.Kind != protocol.Background || one.Settings[0].Target != 30 {
			kept = append(kept, one)
		}
	}
	rows.Readings = kept
	if res, err = EfficiencyBy(rows, skerry(EveryPair), Model{Collection: full}, q, "pump_power"); err != nil {
		t.Fatal(err)
	}
	if v := res.By.Values[2]; v.Value != nil || !strings.Contains(strings.Join(v.Because, ""), "without a dark") || !strings.Contains(strings.Join(res.Warnings, "\n"), "1 of 4 values gave no efficiency") {
		t.Errorf("%+v, %q", v, res.Warnings)
	}
	var no *Refusal
	if _, err := EfficiencyBy(rows, skerry(EveryPair), Model{Collection: full}, q, "iris"); !errors.As(err, &no) || !strings.Contains(err.Error(), "iris") {
		t.Errorf("by a setting that there is not: %v", err)
	}
}

// As an engine writes it: backgrounds say nothing of the setting, which stands where the reading before
// left it, always at the highest power here.
func TestBackgroundsOfAnotherPowerAreScaledAboveTheDark(t *testing.T) {
	statistics(t)
	times, inside, miss, slopes := 8, 0, 0.0, 0
	if *long {
		times = 300
	}
	const darkHz = 20000.0
	for i := range times {
		r := rand.New(rand.NewPCG(98, uint64(i)))
		b := skerry(EveryPair)
		tonight := drawn(r, b, NonParalysable)
		rows, truth := atPowers(r, powers, 15000, func(w *world) {
			d := tonight
			d.pairsHz, d.noiseT, d.noiseD = w.pairsHz, 4*w.noiseT+darkHz, w.noiseD
			*w = d
		})
		var kept []protocol.Reading
		for _, one := range rows.Readings {
			if one.Kind == protocol.Background {
				if one.Settings[0].Target != 45 || len(kept) == 0 || kept[len(kept)-1].Settings == nil && kept[len(kept)-1].Kind == protocol.Background {
					continue
				}
				one.Settings = nil
				if at := kept[len(kept)-1].Settings[0].Target; at != 45 {
					continue // the one before the first light at 45 mW
				}
			}
			kept = append(kept, one)
		}
		dark := row(900, protocol.Dark, testStart, 2, []gateCounts{{s: int(drawPoisson(r, 2*darkHz/(1-tonight.afterT)*(1-darkHz*45e-9)))}}, EveryPair)
		rows.Readings = append(kept, dark)
		res, err := EfficiencyBy(rows, b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"}, "pump_power")
		if err != nil {
			t.Fatal(err)
		}
		if res.Interval.Low <= truth && truth <= res.Interval.High {
			inside++
		}
		miss += (*res.Value - truth) / *res.U / float64(times)
		if res.By.Significant || res.Dispersion.Significant {
			slopes++
		}
		if v := res.By.Values[0]; v.Value == nil || math.Abs(*v.Value-truth) > 5*v.U {
			t.Errorf("night %d: at 5 mW %v ± %g of %g", i, *v.Value, v.U, truth)
		}
	}
	coverage(t, "mean over powers, backgrounds scaled", inside, times, miss)
	if float64(slopes) > 2+0.1*float64(times) {
		t.Errorf("%d of %d nights with a slope; want next to none", slopes, times)
	}
}

func TestNoCoincidenceIsAnUpperLimit(t *testing.T) {
	n := newExactNight()
	heralds := 0.0
	for i := range n.rows.Readings {
		r := &n.rows.Readings[i]
		r.Slices = nil
		for k := range r.Counts {
			if r.Counts[k].Channel == "pairs" {
				r.Counts[k].Counts = 0
			}
			if r.Kind == protocol.Light && r.Counts[k].Channel == "signal" {
				heralds += float64(r.Counts[k].Counts)
			}
		}
	}
	res, err := n.ask(nil)
	no, ok := errors.AsType[*Refusal](err)
	if !ok || no.Limit == nil {
		t.Fatalf("%v, %v; want a refusal with a limit", res.Value, err)
	}
	// -ln 0.05 over the photons that were heralded, through window and path: the night's own truth.
	want := -math.Log(0.05) / (4 * 60000 * lightGateS * 0.995 * 0.96 * 0.985)
	near(t, "limit", no.Limit.Efficiency, want, 1e-3*want)
	near(t, "coincidences", no.Limit.Counts, 2.9957, 1e-4)
	refused := Refused(n.rows, "efficiency", no)
	text, err := refused.JSON()
	if err != nil {
		t.Fatal(err)
	}
	var got struct {
		Value *float64    `json:"value"`
		Limit *UpperLimit `json:"upper_limit"`
	}
	if err := json.Unmarshal(text, &got); err != nil || got.Value != nil || got.Limit == nil || *got.Limit != *no.Limit {
		t.Errorf("%v: %+v", err, got)
	}
	if !strings.Contains(refused.Text(), "is below") || !strings.Contains(refused.Text(), "95 % coverage") {
		t.Error(refused.Text())
	}
	if heralds == 0 {
		t.Fatal("no heralds")
	}
}

func TestTheUpperLimitIsSeldomBelowTheTruth(t *testing.T) {
	// A detector so poor that some nights see nothing. Where none is seen, the limit must lie above
	// the truth; how often it would not is at most one in twenty of all nights.
	below, none, times := 0, 0, 400
	for i := range times {
		r := rand.New(rand.NewPCG(95, uint64(i)))
		w := nominal(r)
		w.etaD, w.noiseD, w.noiseT = 1.5e-3*math.Exp(-3*r.Float64()), 0, 200
		w.afterD, w.afterT = 0, 0
		w.pairsHz = 1e4
		rows := rowsOf(night{w: w, readings: 2, slices: 1, sliceS: 0.4, darkS: 1}.take(), EveryPair)
		_, err := Efficiency(rows, skerry(EveryPair), Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"})
		no, ok := errors.AsType[*Refusal](err)
		if !ok || no.Limit == nil {
			continue
		}
		none++
		if no.Limit.Efficiency < w.etaD {
			below++
		}
	}
	t.Logf("%d of %d nights without a coincidence, %d limits below the truth", none, times, below)
	if none < times/10 {
		t.Fatalf("%d nights without a coincidence; want many", none)
	}
	if most := 0.05*float64(times) + 3.5*math.Sqrt(0.05*float64(times)); float64(below) > most {
		t.Errorf("%d limits of %d below the truth; want at most %.0f", below, times, most)
	}
}
