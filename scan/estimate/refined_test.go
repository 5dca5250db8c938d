package estimate

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"gemel/protocol"
)

// A refinement crowds readings about the highest count of the first pass.

// sweepOf draws a flat-topped sweep of the idler arm in passes.
func sweepOf(r *rand.Rand, passes, points int, heralds float64, eff func(deg float64) float64) Rows {
	rows := Rows{Run: "20310203T220000-refined", Planned: points}
	for pass := 1; pass <= passes; pass++ {
		for i := range points {
			rows.Readings = append(rows.Readings, herald(r, len(rows.Readings)+1, -0.6+1.2*float64(i)/float64(points-1), i, pass, heralds, eff))
		}
	}
	return rows
}

func herald(r *rand.Rand, sequence int, deg float64, point, visit int, heralds float64, eff func(float64) float64) protocol.Reading {
	both := drawPoisson(r, heralds*eff(deg))
	g := gateCounts{s: int(both + drawPoisson(r, heralds*(1-eff(deg)))), d: int(both + drawPoisson(r, 100)), pairs: int(both)}
	return at(row(int64(sequence), protocol.Light, testStart, 1, []gateCounts{g}, EveryPair), "idler_arm", deg, point, visit)
}

func TestRefinedPointsDoNotChooseThePlateau(t *testing.T) {
	statistics(t)
	eff := func(deg float64) float64 { return 0.4 * softBox(deg, 0.7, 0.04) }
	ch := channels{s: "signal", d: "idler", c: "pairs"}
	use := Plateau{Axis: "idler_arm", HalfWidthDeg: 0.11}
	const times = 60
	var sum, sq, refinedIn float64
	for i := range times {
		r := rand.New(rand.NewPCG(96, uint64(i)))
		rows := sweepOf(r, 2, 25, 400, eff)
		best, most := 0.0, -1.0
		for _, one := range rows.Readings[:25] {
			if c, _ := countOf(one.Counts, "pairs"); c > most {
				most = c
				best, _ = angleOf(one, "idler_arm")
			}
		}
		plain, planned, _ := use.choose(rows, rows.Readings, ch, 0, &Refusal{})
		for k := range 30 {
			rows.Readings = append(rows.Readings, herald(r, 100+k, best-0.05+0.1*float64(k)/29, 25+k, 1, 400, eff))
		}
		kept, aside, notes := use.choose(rows, rows.Readings, ch, 0, &Refusal{})
		// The sweep's own readings are judged as if there were no others.
		own := 0
		for _, one := range kept {
			if one.Sequence < 100 {
				own++
			}
		}
		if own != len(plain) || len(aside)+len(kept) != len(planned)+len(plain)+30 {
			t.Fatalf("%d of the sweep's readings kept beside refined ones, %d without", own, len(plain))
		}
		for _, n := range notes {
			if strings.Contains(n.Text, "80 readings") || strings.Contains(n.Text, "55 readings") {
				t.Fatalf("%s: %s; want the sweep's own only", n.Name, n.Text)
			}
		}
		var c, s float64
		for _, one := range kept {
			if one.Sequence >= 100 {
				refinedIn++
			}
			a, _ := countOf(one.Counts, "pairs")
			b, _ := countOf(one.Counts, "signal")
			c, s = c+a, s+b
		}
		sum += c / s / times
		sq += c / s * c / s / times
	}
	own := math.Sqrt((sq - sum*sum) / times)
	t.Logf("mean %.5f ± %.5f, %.0f refined readings on the plateau", sum, own, refinedIn)
	if math.Abs(sum-0.4) > 4*own || refinedIn < times {
		t.Errorf("mean %.5f ± %.5f of 0.4 with %.0f refined readings; want no bias, and some of them", sum, own, refinedIn)
	}
}

func TestWithoutAPlateauOnlyTheSweepsPointsMakeAnEfficiency(t *testing.T) {
	n := newExactNight()
	n.rows.Planned = 1
	for i := range n.rows.Readings {
		if n.rows.Readings[i].Kind == protocol.Light {
			n.rows.Readings[i] = at(n.rows.Readings[i], "idler_arm", 2.86, 0, 1)
		}
	}
	alone, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	extra := at(n.rows.Readings[2], "nothing", 0, 1, 1)
	extra.Angles[0].Target += 1000
	extra.Sequence = 900
	n.rows.Readings = append(n.rows.Readings, extra)
	res, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	last := res.SetAside[len(res.SetAside)-1]
	if *res.Value != *alone.Value || last.Sequence != 900 || !strings.Contains(last.Reason, "refinement") {
		t.Errorf("%v, %v, %+v", *res.Value, *alone.Value, last)
	}
}

// Where readings stand may depend on earlier counts: a likelihood does not mind.
func TestRefinedPointsCountForAPeak(t *testing.T) {
	statistics(t)
	rate := func(x float64) float64 { return 4 + 60*gauss(x-0.03, 0.4) }
	const times = 80
	var miss, sq float64
	for i := range times {
		r := rand.New(rand.NewPCG(97, uint64(i)))
		data := profileData(r, rate, -0.6, 0.6, 13, ones)
		best := data[0]
		for _, s := range data {
			if s.Counts > best.Counts {
				best = s
			}
		}
		data = append(data, profileData(r, rate, best.AngleDeg-0.1, best.AngleDeg+0.1, 11, ones)...)
		rows := spotRows(data)
		rows.Planned = 13
		res, err := Peak(rows, skerry(EveryPair), Model{}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Trials: 1})
		if err != nil {
			t.Fatal(err)
		}
		if len(res.Used) != 24 {
			t.Fatalf("%d readings; want the refined ones too", len(res.Used))
		}
		m := (*res.Value - 0.03) / *res.U
		miss += m / times
		sq += m * m / times
	}
	t.Logf("mean miss %+.3f u, scatter %.3f u", miss, math.Sqrt(sq))
	if math.Abs(miss) > 4/math.Sqrt(times) || sq > 1.6 {
		t.Errorf("mean miss %+.3f u, scatter %.3f u; want none, and the one that is stated", miss, math.Sqrt(sq))
	}
}
