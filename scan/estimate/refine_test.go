package estimate

import (
	"math"
	"math/rand/v2"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// refined is a run with a refinement: counts are drawn where the points are.
type refined struct {
	q    RefineQuestion
	rows Rows
	rate func(p scan.Point) float64 // Hz
	r    *rand.Rand
}

const refineGateS = 2.0

func newRefined(of scan.Refine, points []scan.Point, rate func(scan.Point) float64, r *rand.Rand) *refined {
	run := &refined{rate: rate, r: r, rows: Rows{Run: "20310203T220000-refine"}, q: RefineQuestion{Of: of,
		Axis: scan.Axis{Name: "idler_arm", Low: unit.Degrees(-1), High: unit.Degrees(12), Tolerance: unit.Degrees(0.002), Rising: true}, Each: 5 * time.Second}}
	run.add(points)
	return run
}

func (run *refined) add(points []scan.Point) {
	for _, p := range points {
		i := len(run.q.Points)
		run.q.Points = append(run.q.Points, p)
		if p.Empty != "" {
			continue
		}
		n := drawPoisson(run.r, run.rate(p)*refineGateS)
		one := row(int64(i+1), protocol.Light, testStart.Add(time.Duration(i)*5*time.Second), refineGateS, []gateCounts{{d: int(n)}}, EveryPair)
		visit := 1
		one.Point, one.Visit = &i, &visit
		for _, t := range p.Axes {
			one.Angles = append(one.Angles, protocol.Angle{Axis: string(t.Axis), Target: t.Angle, Before: t.Angle, After: t.Angle})
		}
		run.rows.Readings = append(run.rows.Readings, one)
	}
}

// round lets the counts decide once, and takes what they ask for.
func (run *refined) round() Refinement {
	d := Refine(run.rows, skerry(EveryPair), run.q)
	run.add(d.Points)
	run.q.Added += len(d.Points)
	run.q.Spent += time.Duration(len(d.Points)) * run.q.Each
	return d
}

func (run *refined) toTheEnd(t interface{ Fatal(...any) }) (rounds []Refinement) {
	for {
		d := run.round()
		rounds = append(rounds, d)
		if len(d.Points) == 0 {
			return rounds
		}
		if len(rounds) > 200 {
			t.Fatal("200 rounds without an end")
		}
	}
}

func idlerAt(deg float64) scan.Point {
	return scan.Point{Axes: []scan.AxisTarget{{Axis: "idler_arm", Angle: unit.Degrees(deg)}}}
}

func idlerSweep(low, high, step float64) (points []scan.Point) {
	for i := range int(math.Round((high-low)/step)) + 1 {
		points = append(points, idlerAt(low+float64(i)*step))
	}
	return points
}

func idlerOf(p scan.Point) float64 {
	a, _ := target(p, "idler_arm")
	return a.Degrees()
}

// peakAt is a Gaussian of 0.5 deg on some background.
func peakAt(centre, heightHz, groundHz float64) func(scan.Point) float64 {
	return func(p scan.Point) float64 { return groundHz + heightHz*gauss(idlerOf(p)-centre, 0.5) }
}

func idlersOf(points []scan.Point) (list []float64) {
	for _, p := range points {
		list = append(list, idlerOf(p))
	}
	return list
}

func TestAGridIsPutAboutTheMaximum(t *testing.T) {
	of := scan.Refine{Of: "idler", Along: "idler_arm", Span: unit.Degrees(0.2), Step: unit.Degrees(0.02), AtMost: 40}
	run := newRefined(of, idlerSweep(2, 4, 0.1), peakAt(3.124, 5000, 100), rand.New(rand.NewPCG(81, 1)))
	d := run.round()
	// Centred on 3.12 deg; 3.1 and 3.2 deg are counted already.
	want := []float64{3.02, 3.04, 3.06, 3.08, 3.12, 3.14, 3.16, 3.18, 3.22}
	if got := idlersOf(d.Points); !slices.EqualFunc(got, want, func(a, b float64) bool { return math.Abs(a-b) < 1e-9 }) {
		t.Errorf("%v; want %v", got, want)
	}
	if want := ": 9 points from 3.02 deg to 3.22 deg by 0.02 deg"; !strings.HasPrefix(d.Grounds, "idler_arm maximum of idler at 3.12") || !strings.HasSuffix(d.Grounds, want) {
		t.Errorf("%q; want the maximum, and %q", d.Grounds, want)
	}
	if d := run.round(); len(d.Points) > 0 || !strings.HasSuffix(d.Grounds, "the grid about it is counted") {
		t.Errorf("second round: %q with %v; want none", d.Grounds, idlersOf(d.Points))
	}
}

func TestAGridIsCutByWhatIsAllowed(t *testing.T) {
	of := scan.Refine{Of: "idler", Along: "idler_arm", Span: unit.Degrees(0.4), Step: unit.Degrees(0.02), AtMost: 40}
	sweep := idlerSweep(2, 4, 0.1)
	for _, c := range []struct {
		name   string
		change func(q *RefineQuestion)
		points int
		low    float64
		high   float64
	}{
		{"nothing", func(*RefineQuestion) {}, 17, 2.92, 3.32}, // 21 places, of which 3, 3.1, 3.2 and 3.3 deg are counted
		{"a bound of points keeps the middle", func(q *RefineQuestion) { q.Of.AtMost = 4 }, 4, 3.08, 3.16},
		{"a bound of time", func(q *RefineQuestion) { q.Of.Within, q.Each = 31*time.Second, 5*time.Second }, 6, 3.06, 3.18},
		{"time used up", func(q *RefineQuestion) { q.Of.Within, q.Spent = time.Minute, 58*time.Second }, 0, 0, 0},
		{"a soft limit", func(q *RefineQuestion) { q.Axis.High = unit.Degrees(3.15) }, 10, 2.92, 3.14},
		{"a keep-out", func(q *RefineQuestion) {
			q.Allowed = func(p scan.Point) error {
				if idlerOf(p) < 3.07 {
					return errNoFit
				}
				return nil
			}
		}, 10, 3.08, 3.32},
	} {
		run := newRefined(of, sweep, peakAt(3.1203, 50000, 1000), rand.New(rand.NewPCG(82, 1)))
		c.change(&run.q)
		d := run.round()
		got := idlersOf(d.Points)
		if len(got) != c.points || c.points > 0 && (math.Abs(slices.Min(got)-c.low) > 1e-9 || math.Abs(slices.Max(got)-c.high) > 1e-9) {
			t.Errorf("%s: %v (%s); want %d points from %g to %g", c.name, got, d.Grounds, c.points, c.low, c.high)
		}
	}
}

func TestNoGridIsPutAboutChance(t *testing.T) {
	statistics(t)
	of := scan.Refine{Of: "idler", Along: "idler_arm", Span: unit.Degrees(0.4), Step: unit.Degrees(0.02), AtMost: 40}
	for seed := range uint64(60) {
		run := newRefined(of, idlerSweep(2, 4, 0.1), func(scan.Point) float64 { return 50 }, rand.New(rand.NewPCG(83, seed)))
		if d := run.round(); len(d.Points) > 0 {
			t.Fatalf("seed %d: %s; want none", seed, d.Grounds)
		}
	}
}

func TestOfSeveralLinesTheHighestIsRefined(t *testing.T) {
	var points []scan.Point
	for _, signal := range []float64{2.9, 3.0, 3.1} {
		for _, p := range idlerSweep(2, 4, 0.1) {
			p.Axes = append([]scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(signal)}}, p.Axes...)
			points = append(points, p)
		}
	}
	rate := func(p scan.Point) float64 {
		signal, _ := target(p, "signal_arm")
		return 50 + 3000*gauss(signal.Degrees()-3.0, 0.15)*gauss(idlerOf(p)-3.3, 0.5)
	}
	run := newRefined(scan.Refine{Of: "idler", Along: "idler_arm", Span: unit.Degrees(0.2), Step: unit.Degrees(0.02), AtMost: 40}, points, rate, rand.New(rand.NewPCG(84, 1)))
	d := run.round()
	if len(d.Points) == 0 || !strings.Contains(d.Grounds, " where signal_arm is at 3 deg") {
		t.Fatalf("%q with %d points; want them where signal_arm is at 3 deg", d.Grounds, len(d.Points))
	}
	for _, p := range d.Points {
		if signal, _ := target(p, "signal_arm"); signal != unit.Degrees(3) {
			t.Errorf("%+v; want signal_arm at 3 deg", p)
		}
	}
}

func TestAnAxisThatFollowsIsInterpolated(t *testing.T) {
	var points []scan.Point
	for i, p := range idlerSweep(2, 4, 0.1) {
		p.Axes = append(p.Axes, scan.AxisTarget{Axis: "signal_arm", Angle: unit.Degrees(4.5 - 0.1*float64(i))})
		points = append(points, p)
	}
	run := newRefined(scan.Refine{Of: "idler", Along: "idler_arm", Span: unit.Degrees(0.2), Step: unit.Degrees(0.02), AtMost: 40}, points, peakAt(3.12, 5000, 100), rand.New(rand.NewPCG(85, 1)))
	d := run.round()
	if len(d.Points) == 0 {
		t.Fatal(d.Grounds)
	}
	for _, p := range d.Points {
		signal, _ := target(p, "signal_arm")
		near(t, "the axis that follows", signal.Degrees(), 6.5-idlerOf(p), 1e-9)
	}
	run.q.Points, run.rows.Readings, run.q.Added = nil, nil, 0
	run.rate = peakAt(4, 5000, 100) // at the end of the line
	run.add(points)
	for _, p := range run.round().Points {
		if idlerOf(p) > 4 {
			t.Errorf("%+v lies beyond the line, where what follows is not known", p)
		}
	}
}

func TestPositionsBecomeAsSharpAsAsked(t *testing.T) {
	statistics(t)
	times := 60
	if *long {
		times = 4000
	}
	const asked = 0.002
	of := scan.Refine{Of: "idler", Along: "idler_arm", Below: unit.Degrees(asked), AtMost: 60}
	inside, reached, sum, square, used, onFlanks, all := 0, 0, 0.0, 0.0, 0, 0, 0
	for i := range times {
		r := rand.New(rand.NewPCG(86, uint64(i)))
		centre := 3 + 0.1*r.Float64()
		run := newRefined(of, idlerSweep(2, 4, 0.1), peakAt(centre, 300, 20), r)
		rounds := run.toTheEnd(t)
		used += run.q.Added
		for _, p := range run.q.Points[len(run.q.Points)-run.q.Added:] {
			all++
			if off := math.Abs(idlerOf(p) - centre); off > 0.08 && off < 0.42 {
				onFlanks++
			}
		}
		l, err := run.q.line(run.rows, skerry(EveryPair))
		if err != nil {
			t.Fatal(err)
		}
		fit, err := l.fit(run.q)
		if err != nil {
			t.Fatal(err)
		}
		u := fit.Fit.U(centreParam)
		if strings.Contains(rounds[len(rounds)-1].Grounds, "reached with") {
			reached++
			if u > asked {
				t.Errorf("%q, but u is %g deg", rounds[len(rounds)-1].Grounds, u)
			}
		}
		miss := (fit.CentreDeg() - centre) / u
		sum, square = sum+miss, square+miss*miss
		if math.Abs(miss) < 1.96 {
			inside++
		}
	}
	share, mean, spread := float64(inside)/float64(times), sum/float64(times), math.Sqrt(square/float64(times))
	t.Logf("%.1f %% within 1.96 u, miss/u mean %+.3f, spread %.3f; %d of %d reached, with %.1f points on average, %d of %d on the flanks", 100*share, mean, spread, reached, times, float64(used)/float64(times), onFlanks, all)
	if math.Abs(mean) > 4/math.Sqrt(float64(times)) || spread > 1+4/math.Sqrt(2*float64(times)) || share < 0.95-4*math.Sqrt(0.95*0.05/float64(times)) {
		t.Errorf("%.1f %% covered, mean %+.3f, spread %.3f; want 95 %%, 0 and 1", 100*share, mean, spread)
	}
	if reached < times*9/10 {
		t.Errorf("%d of %d reached; want nearly all", reached, times)
	}
	if onFlanks < all*9/10 {
		t.Errorf("%d of %d points on the flanks; want nearly all", onFlanks, all)
	}
}

// What the flanks are worth: as many points spread over the sweep must not do as well.
func TestChosenPointsDoBetterThanTheSweepAgain(t *testing.T) {
	chosen, spread := 0.0, 0.0
	for seed := range uint64(10) {
		run := newRefined(scan.Refine{Of: "idler", Along: "idler_arm", Below: 1, AtMost: 21}, idlerSweep(2, 4, 0.1), peakAt(3.04, 1000, 20), rand.New(rand.NewPCG(87, seed)))
		other := newRefined(run.q.Of, idlerSweep(2, 4, 0.1), run.rate, rand.New(rand.NewPCG(88, seed)))
		run.toTheEnd(t)
		if run.q.Added != 21 {
			t.Fatalf("%d points; want all 21: the goal cannot be reached", run.q.Added)
		}
		other.add(idlerSweep(2.05, 4.05, 0.1))
		for into, r := range map[*float64]*refined{&chosen: run, &spread: other} {
			l, err := r.q.line(r.rows, skerry(EveryPair))
			if err != nil {
				t.Fatal(err)
			}
			fit, err := l.fit(r.q)
			if err != nil {
				t.Fatal(err)
			}
			*into += fit.Fit.U(centreParam) / 10
		}
	}
	if chosen > 0.75*spread {
		t.Errorf("u %.4g deg by chosen points, %.4g deg by a second sweep; want it smaller by a quarter", chosen, spread)
	}
}

func TestAsManyPointsAsAThirdOfWhatIsAllowedARound(t *testing.T) {
	run := newRefined(scan.Refine{Of: "idler", Along: "idler_arm", Below: unit.Degrees(0.0001), AtMost: 20}, idlerSweep(2, 4, 0.1), peakAt(3.1, 300, 20), rand.New(rand.NewPCG(89, 1)))
	var sizes []int
	var last string
	for _, d := range run.toTheEnd(t) {
		sizes, last = append(sizes, len(d.Points)), d.Grounds
	}
	if !slices.Equal(sizes, []int{7, 7, 6, 0}) {
		t.Errorf("rounds of %v; want 7, 7, 6 and none", sizes)
	}
	if want := "asked 0.0001 deg: not reached, 20 of 20 points are used"; !strings.HasSuffix(last, want) {
		t.Errorf("%q; want it to end in %q", last, want)
	}
}

func TestWhatCannotBeRefinedSaysWhy(t *testing.T) {
	below := scan.Refine{Of: "idler", Along: "idler_arm", Below: unit.Degrees(0.004), AtMost: 60}
	for _, c := range []struct {
		name   string
		of     scan.Refine
		points []scan.Point
		rate   func(scan.Point) float64
		want   string
	}{
		{"two places", below, idlerSweep(3, 3.1, 0.1), peakAt(3, 100, 1), "idler_arm cannot be refined: 2 points; want a sweep"},
		{"a channel that is not there", scan.Refine{Of: "other", Along: "idler_arm", Below: 1, AtMost: 9}, idlerSweep(2, 4, 0.1), peakAt(3, 100, 1), `no channel "other"`},
		{"nothing counted", below, idlerSweep(2, 4, 0.1), func(scan.Point) float64 { return 0 }, "no position of idler can be fitted: 21 readings with 0 counts"},
		{"a peak outside the sweep", below, idlerSweep(2, 4, 0.1), peakAt(4.3, 300, 1), "outside the sweep from 2 to 4 deg"},
	} {
		run := newRefined(c.of, c.points, c.rate, rand.New(rand.NewPCG(90, 1)))
		if d := run.round(); len(d.Points) > 0 || !strings.Contains(d.Grounds, c.want) {
			t.Errorf("%s: %q with %d points; want none, and %q", c.name, d.Grounds, len(d.Points), c.want)
		}
	}
}

// Whatever the counts: no point outside limits or forbidden ranges, no more than allowed, the same
// decision from the same rows, and an end.
func TestARefinementNeverLeavesItsBounds(t *testing.T) {
	statistics(t)
	rapid.Check(t, func(t *rapid.T) {
		of := scan.Refine{Of: drivers.Channel(rapid.SampledFrom([]string{"idler", "pairs"}).Draw(t, "of")), Along: "idler_arm", AtMost: rapid.IntRange(0, 30).Draw(t, "at most")}
		if rapid.Bool().Draw(t, "around") {
			of.Step = unit.Degrees(float64(rapid.IntRange(1, 100).Draw(t, "step")) / 1000)
			of.Span = unit.Degrees(float64(rapid.IntRange(1, 3000).Draw(t, "span")) / 1000)
		} else {
			of.Below = unit.Degrees(float64(rapid.IntRange(1, 100).Draw(t, "below")) / 10000)
		}
		low := float64(rapid.IntRange(0, 300).Draw(t, "low")) / 100
		points := idlerSweep(low, low+float64(rapid.IntRange(3, 30).Draw(t, "length"))/10, 0.1)
		centre, height := float64(rapid.IntRange(-100, 700).Draw(t, "centre"))/100, float64(rapid.IntRange(0, 3000).Draw(t, "height"))
		run := newRefined(of, points, peakAt(centre, height, float64(rapid.IntRange(0, 50).Draw(t, "ground"))), rand.New(rand.NewPCG(91, rapid.Uint64().Draw(t, "seed"))))
		run.q.Axis.Low, run.q.Axis.High = points[0].Axes[0].Angle-unit.Degrees(0.05), points[len(points)-1].Axes[0].Angle+unit.Degrees(float64(rapid.IntRange(-50, 50).Draw(t, "room"))/100)
		run.q.Axis.Rising = rapid.Bool().Draw(t, "rising")
		hole := float64(rapid.IntRange(0, 600).Draw(t, "hole")) / 100
		run.q.Allowed = func(p scan.Point) error {
			if math.Abs(idlerOf(p)-hole) < 0.1 {
				return errNoFit
			}
			return nil
		}
		if rapid.Bool().Draw(t, "timed") {
			of.Within = time.Duration(rapid.IntRange(1, 200).Draw(t, "within")) * time.Second
			run.q.Of = of
		}
		for rounds := 0; ; rounds++ {
			first, again := Refine(run.rows, skerry(EveryPair), run.q), Refine(run.rows, skerry(EveryPair), run.q)
			if !reflect.DeepEqual(first, again) {
				t.Fatalf("two answers to one question: %+v, %+v", first, again)
			}
			d := run.round()
			if d.Grounds == "" {
				t.Fatal("no grounds")
			}
			for _, p := range d.Points {
				a, _ := target(p, "idler_arm")
				if !run.q.Axis.Limits(a) || run.q.Allowed(p) != nil {
					t.Fatalf("%v is not allowed", a)
				}
			}
			if run.q.Added > max(0, of.AtMost) || of.Within > 0 && run.q.Spent > of.Within {
				t.Fatalf("%d points in %s; want %d in %s", run.q.Added, run.q.Spent, of.AtMost, of.Within)
			}
			if len(d.Points) == 0 {
				return
			}
			if rounds > of.AtMost {
				t.Fatal("no end")
			}
		}
	})
}
