package estimate

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// refBench is an invented bench with true rates at a place of both arms: Gaussian in the one, a
// flat top in the other.
type refBench struct {
	signalHz, idlerHz, pairsHz float64 // at the top; singles do not depend on the place
	signalAt, idlerAt          float64 // where the profiles truly stand
	signalFWHM                 float64
	idlerBox, idlerEdge        float64 // no edge: Gaussian of FWHM idlerBox
	windowS                    float64
	dwellS                     float64
	power                      float64 // of the pump, 1 as it was
	signalLoss                 float64 // 1: detector as it was
}

func quietBench() refBench {
	return refBench{signalHz: 40e3, idlerHz: 60e3, pairsHz: 4e3, signalAt: 3.1, idlerAt: 3.1, signalFWHM: 0.5, idlerBox: 0.7, windowS: 4e-9, dwellS: 20, power: 1, signalLoss: 1}
}

func (b refBench) idlerShape(v float64) float64 {
	if b.idlerEdge == 0 {
		return gauss(v, b.idlerBox)
	}
	return softBox(v, b.idlerBox, b.idlerEdge)
}

// take counts one set: top, then both flanks of both arms at where their half maxima were declared.
func (b refBench) take(r *rand.Rand, set int) []protocol.Reading {
	const signalTop, idlerTop = 3.1, 3.1
	var all []protocol.Reading
	when := testStart.Add(time.Duration(set) * 30 * time.Minute)
	add := func(arm string, on scan.Spot, signalDeg, idlerDeg float64) {
		c := b.pairsHz * b.signalLoss * b.power * gauss(signalDeg-b.signalAt, b.signalFWHM) * b.idlerShape(idlerDeg-b.idlerAt)
		pairs := drawPoisson(r, c*b.dwellS) // each is a count of both detectors
		s := pairs + drawPoisson(r, (b.signalHz*b.signalLoss*b.power-c)*b.dwellS)
		d := pairs + drawPoisson(r, (b.idlerHz*b.power-c)*b.dwellS)
		pairs += drawPoisson(r, s*d*b.windowS/b.dwellS)
		one := row(int64(100*set+len(all)+1), protocol.Reference, when, b.dwellS, []gateCounts{{s: int(s), d: int(d), pairs: int(pairs)}}, EveryPair)
		for axis, deg := range map[string]float64{"signal_arm": signalDeg, "idler_arm": idlerDeg} {
			a := unit.Degrees(deg)
			one.Angles = append(one.Angles, protocol.Angle{Axis: axis, Target: a, Before: a, After: a})
		}
		one.Reference = &protocol.ReferenceOf{Set: set, Place: len(all), Arm: arm, On: string(on)}
		when = when.Add(time.Duration((b.dwellS + 1) * 1e9))
		all = append(all, one)
	}
	add("", scan.Top, signalTop, idlerTop)
	add("signal_arm", scan.LowFlank, signalTop-b.signalFWHM/2, idlerTop)
	add("signal_arm", scan.HighFlank, signalTop+b.signalFWHM/2, idlerTop)
	add("idler_arm", scan.LowFlank, signalTop, idlerTop-b.idlerBox/2)
	add("idler_arm", scan.HighFlank, signalTop, idlerTop+b.idlerBox/2)
	return all
}

func refQuestion(bounds scan.Bounds) ReferenceQuestion {
	at := func(signalDeg, idlerDeg float64) []scan.AxisTarget {
		return []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(signalDeg)}, {Axis: "idler_arm", Angle: unit.Degrees(idlerDeg)}}
	}
	return ReferenceQuestion{Of: scan.Reference{
		Places: []scan.ReferencePlace{{On: scan.Top, Axes: at(3.1, 3.1)},
			{Arm: "signal_arm", On: scan.LowFlank, Axes: at(2.85, 3.1)}, {Arm: "signal_arm", On: scan.HighFlank, Axes: at(3.35, 3.1)},
			{Arm: "idler_arm", On: scan.LowFlank, Axes: at(3.1, 2.75)}, {Arm: "idler_arm", On: scan.HighFlank, Axes: at(3.1, 3.45)}},
		Trigger: "signal", UnderTest: "idler", Pairs: "pairs", Bounds: bounds,
	}}
}

func judgeOf(t *testing.T, v ReferenceVerdict, quantity string) Change {
	t.Helper()
	for _, c := range v.Changes {
		if c.Quantity == quantity {
			return c
		}
	}
	t.Fatalf("no %q among %+v", quantity, v.Changes)
	return Change{}
}

func TestThreeReadingsGiveTheCentreAndItsUncertaintyExactly(t *testing.T) {
	const fwhm, centre, top = 0.6, 3.123, 10000.0
	var three [3]Spot
	for i, x := range []float64{3.1 - 0.3, 3.1, 3.1 + 0.3} {
		three[i] = Spot{AngleDeg: x, Counts: 2*top*gauss(x-centre, fwhm) + 50, Exposure: 2, Known: 50}
	}
	c, _, err := centreOf(three, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "centre", c, centre, 1e-12)
	for i, n := range []float64{top / 2, top, top / 2} {
		three[i].Counts, three[i].Known = n, 0
	}
	_, u, err := centreOf(three, nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "u with flanks at half maximum", u, fwhm/(4*math.Ln2*math.Sqrt(top)), 1e-12)
	c, v, err := centreOf(three, newArmProfile(func(x float64) float64 { return gauss(x-2.9, fwhm) }, 2.8, 3.4))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "the same by a predicted Gaussian that stands elsewhere", c, 3.1, 1e-5)
	near(t, "u of that", v, u, 1e-3*u)
}

func TestWhatIsNoPeakHasNoCentre(t *testing.T) {
	for _, c := range []struct {
		name   string
		counts [3]float64
		at     [3]float64
	}{
		{"flanks higher than the top", [3]float64{90, 80, 95}, [3]float64{1, 2, 3}},
		{"nothing on a flank", [3]float64{0, 80, 40}, [3]float64{1, 2, 3}},
		{"a slope without an end", [3]float64{1000, 1001, 1002}, [3]float64{1, 2, 3}},
		{"the top beside both flanks", [3]float64{40, 80, 40}, [3]float64{2, 1, 3}},
	} {
		var three [3]Spot
		for i := range three {
			three[i] = Spot{AngleDeg: c.at[i], Counts: c.counts[i], Exposure: 1}
		}
		if at, _, err := centreOf(three, nil); err == nil {
			t.Errorf("%s: centre at %g; want an error", c.name, at)
		}
	}
}

func TestReferencesThatDidNotChangeAreSeldomCalledBad(t *testing.T) {
	sets := 10000
	if *long {
		sets = 500000
	}
	b, bench := quietBench(), skerry(EveryPair)
	r := rand.New(rand.NewPCG(71, 1))
	// Each kind's tightest bounds that can be judged, which are the worst for false alarms.
	bounds := scan.Bounds{Singles: 1, Ratio: 1, Centre: unit.Degrees(1)}
	tightest := map[string]float64{}
	for _, c := range JudgeReference(b.take(r, 2), b.take(r, 1), bench, refQuestion(bounds)).Changes {
		kind := strings.Fields(c.Quantity)[0]
		tightest[kind] = math.Max(tightest[kind], 1.005*judgedSigmas*c.U)
	}
	bounds = scan.Bounds{Singles: math.Expm1(tightest["singles"]), Ratio: math.Expm1(tightest["pairs"]), Centre: unit.Degrees(tightest["centre"])}
	alarms, told, compared := map[string]int{}, 0, 0
	var sum, square map[string]float64 = map[string]float64{}, map[string]float64{}
	for range sets {
		v := JudgeReference(b.take(r, 2), b.take(r, 1), bench, refQuestion(bounds))
		for _, c := range v.Changes {
			compared++
			if c.Finding == Beyond {
				alarms[c.Quantity]++
			}
			if c.Finding != Untold {
				told++
			}
			sum[c.Quantity] += c.Change / c.U
			square[c.Quantity] += c.Change / c.U * c.Change / c.U
		}
	}
	total := 0
	for _, n := range alarms {
		total += n
	}
	allowed := judgedChance * float64(compared)
	t.Logf("%d of %d comparisons called bad, %.1f allowed; %.1f %% could be told", total, compared, allowed, 100*float64(told)/float64(compared))
	if float64(total) > allowed+3*math.Sqrt(allowed) {
		t.Errorf("false alarms %v of %d comparisons; want no more than %.2g of them", alarms, compared, judgedChance)
	}
	if told < compared/3 {
		t.Errorf("%d of %d could be told; want bounds here that mostly can", told, compared)
	}
	for quantity := range sum {
		mean, spread := sum[quantity]/float64(sets), math.Sqrt(square[quantity]/float64(sets))
		t.Logf("%s: change over its u: mean %+.3f, spread %.3f", quantity, mean, spread)
		if math.Abs(mean) > 4/math.Sqrt(float64(sets)) || math.Abs(spread-1) > 4/math.Sqrt(2*float64(sets)) {
			t.Errorf("%s: change over its u has mean %+.3f and spread %.3f; want 0 and 1", quantity, mean, spread)
		}
	}
}

func TestChangesAreFound(t *testing.T) {
	bounds := scan.Bounds{Singles: 0.03, Ratio: 0.04, Centre: unit.Degrees(0.03)}
	for _, c := range []struct {
		name   string
		change func(b *refBench)
		want   []string // quantities beyond their bounds; the others are not
	}{
		{"nothing", func(*refBench) {}, nil},
		{"the pump lost 5 percent", func(b *refBench) { b.power = 0.95 }, []string{"singles of signal", "singles of idler"}},
		{"the trigger detector lost 6 percent of its efficiency", func(b *refBench) { b.signalLoss = 0.94 }, []string{"singles of signal", "pairs per count of idler"}},
		{"the idler arm slipped by 0.05 deg", func(b *refBench) { b.idlerAt += 0.05 }, []string{"centre of idler_arm"}},
		{"the signal arm slipped by half its width", func(b *refBench) { b.signalAt += 0.25 }, []string{"pairs per count of signal", "pairs per count of idler", "centre of signal_arm"}},
		{"the signal arm looks elsewhere", func(b *refBench) { b.signalAt += 4 },
			[]string{"pairs per count of signal", "pairs per count of idler", "centre of signal_arm", "centre of idler_arm"}},
		{"the trigger detector died", func(b *refBench) { b.signalLoss = 0 }, []string{"singles of signal", "pairs per count of idler", "centre of signal_arm", "centre of idler_arm"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := rand.New(rand.NewPCG(72, uint64(len(c.name))))
			missed, wrong := map[string]int{}, map[string]int{}
			const sets = 200
			for range sets {
				before, after := quietBench(), quietBench()
				c.change(&after)
				v := JudgeReference(after.take(r, 2), before.take(r, 1), skerry(EveryPair), refQuestion(bounds))
				bad := false
				for _, q := range v.Changes {
					want := false
					for _, w := range c.want {
						want = want || w == q.Quantity
					}
					bad = bad || q.Finding == Beyond
					switch {
					case want && q.Finding != Beyond:
						missed[q.Quantity]++
					case !want && q.Finding == Beyond:
						wrong[q.Quantity]++
					}
				}
				if v.Good == bad {
					t.Fatalf("good is %v with findings %+v", v.Good, v.Changes)
				}
			}
			// 2 of 200 missed: the changes are several u beyond their bounds.
			for q, n := range missed {
				if n > sets/100 {
					t.Errorf("%s: missed %d times of %d", q, n, sets)
				}
			}
			for q, n := range wrong {
				if n > 0 {
					t.Errorf("%s: called bad %d times of %d", q, n, sets)
				}
			}
		})
	}
}

func TestAFlatTopsShiftIsNotCalledTooLarge(t *testing.T) {
	b := quietBench()
	b.idlerEdge, b.dwellS = 0.05, 400
	q := refQuestion(scan.Bounds{Centre: unit.Degrees(0.03)})
	r := rand.New(rand.NewPCG(73, 1))
	after := b
	after.idlerAt += 0.02
	before, now := b.take(r, 1), after.take(r, 2)
	c := judgeOf(t, JudgeReference(now, before, skerry(EveryPair), q), "centre of idler_arm")
	if c.Change < 0.035 {
		t.Errorf("as a Gaussian: shift %.4f deg; want it overrated, or this test shows nothing", c.Change)
	}
	q.Profile = map[string]func(float64) float64{"idler_arm": b.idlerShapeAt(3.05)}
	v := JudgeReference(now, before, skerry(EveryPair), q)
	c = judgeOf(t, v, "centre of idler_arm")
	near(t, "shift by the predicted profile", c.Change, 0.02, 4*c.U)
	if !v.Good || c.U > 0.003 {
		t.Errorf("%+v; want it good, with a u of a mdeg or two", c)
	}
}

func TestACentresUncertaintyByAPredictedProfileIsTrue(t *testing.T) {
	times := 400
	if *long {
		times = 10000
	}
	b := quietBench()
	b.idlerEdge = 0.06
	q := refQuestion(scan.Bounds{Centre: unit.Degrees(0.03)})
	q.Profile = map[string]func(float64) float64{"idler_arm": b.idlerShapeAt(3.05)}
	r := rand.New(rand.NewPCG(74, 1))
	sum, square := 0.0, 0.0
	for range times {
		c := judgeOf(t, JudgeReference(b.take(r, 2), b.take(r, 1), skerry(EveryPair), q), "centre of idler_arm")
		sum, square = sum+c.Change/c.U, square+c.Change*c.Change/c.U/c.U
	}
	mean, spread := sum/float64(times), math.Sqrt(square/float64(times))
	t.Logf("mean %+.3f, spread %.3f", mean, spread)
	if math.Abs(mean) > 4/math.Sqrt(float64(times)) || math.Abs(spread-1) > 4/math.Sqrt(2*float64(times)) {
		t.Errorf("shift over its u: mean %+.3f, spread %.3f; want 0 and 1", mean, spread)
	}
}

func (b refBench) idlerShapeAt(at float64) func(float64) float64 {
	return func(x float64) float64 { return b.idlerShape(x - at) }
}

func TestFewCountsCannotTellAndSayWhatWouldDo(t *testing.T) {
	b := quietBench()
	b.dwellS = 0.5
	r := rand.New(rand.NewPCG(75, 1))
	v := JudgeReference(b.take(r, 2), b.take(r, 1), skerry(EveryPair), refQuestion(scan.Bounds{Ratio: 0.01, Centre: unit.Degrees(0.005)}))
	if !v.Good {
		t.Fatalf("%s; want it not called bad", v.Text())
	}
	c := judgeOf(t, v, "pairs per count of signal")
	if c.Finding != Untold || !(c.WantS > b.dwellS) {
		t.Fatalf("%+v; want it untold, with a longer dwell", c)
	}
	for _, want := range []string{"cannot tell: pairs per count of signal, ", " counts give u ", "for a bound of 1 %", "want a dwell of at least "} {
		if !strings.Contains(v.Text(), want) {
			t.Errorf("%q; want %q in it", v.Text(), want)
		}
	}
	// With that dwell the bound is four sigma.
	b.dwellS = c.WantS
	sum, n := 0.0, 50
	for range n {
		sum += judgeOf(t, JudgeReference(b.take(r, 2), b.take(r, 1), skerry(EveryPair), refQuestion(scan.Bounds{Ratio: 0.01})), "pairs per count of signal").U / float64(n)
	}
	near(t, "bound in sigmas with the dwell asked for", math.Log1p(0.01)/sum, judgedSigmas, 0.3)
}

func TestAMissingReadingIsSaidAndNotCalledBad(t *testing.T) {
	b := quietBench()
	r := rand.New(rand.NewPCG(76, 1))
	now := b.take(r, 2)
	now[3].Accepted = false // the idler's low flank
	v := JudgeReference(now, b.take(r, 1), skerry(EveryPair), refQuestion(scan.Bounds{Singles: 0.03, Centre: unit.Degrees(0.03)}))
	if want := "cannot tell: centre of idler_arm, no reading at the low flank of idler_arm"; !v.Good || !strings.Contains(v.Text(), want) {
		t.Errorf("good %v: %q; want good, and %q", v.Good, v.Text(), want)
	}
	v = JudgeReference(nil, nil, skerry(EveryPair), refQuestion(scan.Bounds{Singles: 0.03, Ratio: 0.03, Centre: unit.Degrees(0.03)}))
	if !v.Good || len(v.Changes) != 6 {
		t.Errorf("nothing at all: %+v; want six quantities that cannot be told", v)
	}
	if _, err := json.Marshal(v.Detail()); err != nil {
		t.Errorf("detail: %v", err)
	}
}

func TestGatesOfDifferentLengthCompareAsRates(t *testing.T) {
	b, long := quietBench(), quietBench()
	long.dwellS = 60
	r := rand.New(rand.NewPCG(77, 1))
	v := JudgeReference(long.take(r, 2), b.take(r, 1), skerry(EveryPair), refQuestion(scan.Bounds{Singles: 0.01, Ratio: 0.03, Centre: unit.Degrees(0.03)}))
	if !v.Good {
		t.Errorf("%s; want good", v.Text())
	}
	if _, err := json.Marshal(v.Detail()); err != nil {
		t.Errorf("detail: %v", err)
	}
}
