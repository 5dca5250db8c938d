package estimate

import (
	"encoding/json"
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gemel/scan"
)

func driftOf(t *testing.T, sets int, seed uint64, change func(b *refBench, hours float64)) (Result, DriftQuestion) {
	t.Helper()
	r := rand.New(rand.NewPCG(seed, 5))
	rows := Rows{Run: "20310203T220000-drift", Doubtful: map[int64]string{}}
	for set := 1; set <= sets; set++ {
		b := quietBench()
		change(&b, float64(set-1)/2) // one every half hour
		rows.Readings = append(rows.Readings, b.take(r, set)...)
	}
	if sets > 0 {
		rows.Doubtful[rows.Readings[0].Sequence] = "the arm had slipped"
	}
	q := DriftQuestion{ReferenceQuestion: refQuestion(scan.Bounds{})}
	res, err := Drift(rows, skerry(EveryPair), q)
	if err != nil {
		t.Fatal(err)
	}
	return res, q
}

func quantityOf(t *testing.T, r Result, name string) DriftQuantity {
	t.Helper()
	for _, q := range r.Drift.Quantities {
		if q.Quantity == name {
			return q
		}
	}
	t.Fatalf("no %q among %+v", name, r.Drift.Quantities)
	return DriftQuantity{}
}

func TestADriftIsFoundForWhatItIs(t *testing.T) {
	r, _ := driftOf(t, 17, 1, func(b *refBench, hours float64) {
		b.power = 1 - 0.02*hours
		b.idlerAt += 0.004 * hours
		if hours == 6 {
			b.signalAt += 0.06
		}
	})
	if len(r.Drift.Quantities) != 6 || r.Drift.Sets != 17 || len(r.Used) != 85 {
		t.Fatalf("%d quantities of %d sets from %d readings; want 6 of 17 from 85, doubted or not", len(r.Drift.Quantities), r.Drift.Sets, len(r.Used))
	}
	power := quantityOf(t, r, "singles of signal")
	near(t, "power", power.PerHour, -0.02, 4*power.PerHourU)
	near(t, "power, peak to peak", power.PeakToPeak, 0.16, 0.01)
	if power.Worst != 17 {
		t.Errorf("worst set of the power %d; want the last", power.Worst)
	}
	idler := quantityOf(t, r, "centre of idler_arm")
	near(t, "the idler arm", idler.PerHour, 0.004, 4*idler.PerHourU)
	signal := quantityOf(t, r, "centre of signal_arm")
	near(t, "the signal arm's excursion", signal.Excursion, 0.06, 4*signal.ExcursionU)
	if signal.Worst != 13 || !signal.Scatter.Significant {
		t.Errorf("%+v; want set 13 the worst, and more scatter than counting explains", signal)
	}
	near(t, "the number: the ratio's change over the night", *r.Value, 8*quantityOf(t, r, "pairs per count of signal").PerHour, 1e-9)
	for _, want := range []string{"drift of pairs per count of signal over 8 h, from 17 sets", "centre of signal_arm: ", "set 13 is farthest from the first, by 0.06", "\n  singles of idler\n"} {
		if !strings.Contains(r.Text(), want) {
			t.Errorf("%s\nwant %q in it", r.Text(), want)
		}
	}
	b, err := r.JSON()
	if err != nil {
		t.Fatal(err)
	}
	var back struct {
		Kind  string     `json:"kind"`
		Drift DriftTable `json:"drift"`
	}
	if err := json.Unmarshal(b, &back); err != nil || back.Kind != "drift" || len(back.Drift.Quantities[0].Rows) != 17 {
		t.Errorf("JSON of kind %q with %+v (%v)", back.Kind, back.Drift, err)
	}
}

func TestANightWithoutDriftIsCoveredByItsUncertainty(t *testing.T) {
	times := 200
	if *long {
		times = 4000
	}
	inside := map[string]int{}
	for i := range times {
		r, _ := driftOf(t, 9, uint64(100+i), func(*refBench, float64) {})
		for _, q := range r.Drift.Quantities {
			if math.Abs(q.PerHour) < 1.96*q.PerHourU {
				inside[q.Quantity]++
			}
		}
		if r.Interval.Low <= 0 && 0 <= r.Interval.High {
			inside["the number"]++
		}
	}
	for name, n := range inside {
		share := float64(n) / float64(times)
		t.Logf("%s: %.1f %% covered", name, 100*share)
		if math.Abs(share-0.95) > 4*math.Sqrt(0.95*0.05/float64(times)) {
			t.Errorf("%s: %.1f %% covered; want 95 %%", name, 100*share)
		}
	}
	if len(inside) != 7 {
		t.Errorf("%d numbers looked at; want 7", len(inside))
	}
}

func TestADriftWithoutEnoughSetsIsRefused(t *testing.T) {
	r := rand.New(rand.NewPCG(95, 1))
	one := Rows{Run: "20310203T220000-drift", Readings: quietBench().take(r, 1)}
	for _, c := range []struct {
		name string
		rows Rows
		want string
	}{
		{"none", Rows{}, "0 sets of references; want two at least"},
		{"one", one, "1 sets of references; want two at least"},
	} {
		_, err := Drift(c.rows, skerry(EveryPair), DriftQuestion{ReferenceQuestion: refQuestion(scan.Bounds{})})
		if refusal, ok := errors.AsType[*Refusal](err); !ok || !strings.Contains(refusal.Error(), c.want) {
			t.Errorf("%s: %v; want a refusal with %q", c.name, err, c.want)
		}
	}
}

func TestASetWithoutItsFlanksIsMissingThereAlone(t *testing.T) {
	r := rand.New(rand.NewPCG(96, 1))
	rows := Rows{Run: "20310203T220000-drift"}
	for set := 1; set <= 3; set++ {
		readings := quietBench().take(r, set)
		if set == 2 {
			readings[3].Accepted, readings[3].Reason = false, "the gate was short"
		}
		rows.Readings = append(rows.Readings, readings...)
	}
	res, err := Drift(rows, skerry(EveryPair), DriftQuestion{ReferenceQuestion: refQuestion(scan.Bounds{})})
	if err != nil {
		t.Fatal(err)
	}
	idler, signal := quantityOf(t, res, "centre of idler_arm"), quantityOf(t, res, "centre of signal_arm")
	if len(idler.Rows) != 2 || len(signal.Rows) != 3 || len(idler.Missing) != 1 || len(res.SetAside) != 1 {
		t.Errorf("%d and %d rows, %v missing, %v set aside; want 2 and 3, one missing, one set aside", len(idler.Rows), len(signal.Rows), idler.Missing, res.SetAside)
	}
}
