package estimate

import (
	"errors"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
)

// exactNight is a night whose counts are the expectations themselves, so that what is left between
// result and truth is a mistake. Dead times are left out: the event tests hold them.
type exactNight struct {
	eta                float64
	bench              Bench
	rows               Rows
	dark, fluorescence float64
}

const (
	exactEta   = 0.6
	lightGateS = 1.0
)

func newExactNight() exactNight {
	n := exactNight{eta: exactEta, bench: skerry(EveryPair), dark: 500, fluorescence: 2500}
	const tiny = 1e-15
	for i := range n.bench.Arms {
		n.bench.Arms[i].DeadTime = Constant{tiny, tiny, "none"}
	}
	n.bench.Counter.Window = Constant{10e-9, 0.1e-9, "delay scan"}
	path, ct, p := 1.0, n.bench.Counter, n.bench.Arms[0].Afterpulse.Value
	for _, t := range n.bench.Arms[1].Path {
		path *= t.Value
	}
	photons := 60000.0
	s := (photons + n.dark + n.fluorescence) / (1 - p)
	both := photons * n.eta * path
	d := both/0.3 + 2000
	when := testStart
	add := func(kind protocol.ReadingKind, gate, s, d, c float64) {
		g := gateCounts{s: int(math.Round(s * gate)), d: int(math.Round(d * gate)), pairs: int(math.Round(c * gate)), heralds: int(math.Round(c * gate))}
		g.displaced = int(math.Round(s * d * ct.Window.Value * gate))
		n.rows.Readings = append(n.rows.Readings, row(int64(len(n.rows.Readings)+1), kind, when, gate, []gateCounts{g}, EveryPair))
		when = when.Add(101 * time.Second)
	}
	n.rows.Run = "20310203T220000-exact"
	dim := func() {
		add(protocol.Dark, 100, n.dark/(1-p), 300, 0)
		add(protocol.Background, 100, (n.dark+n.fluorescence)/(1-p), 2000, 0)
	}
	dim()
	for range 4 {
		add(protocol.Light, lightGateS, s, d, both*ct.Capture.Value+s*d*ct.Window.Value)
	}
	dim()
	return n
}

func (n exactNight) ask(change func(*Question)) (Result, error) {
	// Without dead times nothing shadows an accidental, and afterpulses could fall into the window.
	q := Question{Trigger: "signal", UnderTest: "idler", Off: map[Step]bool{ShadowStep: true}}
	if change != nil {
		change(&q)
	}
	return Efficiency(n.rows, n.bench, Model{Collection: full}, q)
}

// acceptance is what a right result passes and each deliberate mistake must fail: within a tenth
// of its uncertainty of the truth, and with the uncertainty that the counts and constants carry.
func (n exactNight) acceptance(value, u float64) error {
	c := 4 * 60000 * exactEta * 0.9456 * 0.995 * lightGateS
	e := c / (4 * 60000 / 0.992 * lightGateS)
	want := n.eta * math.Sqrt((1-e)/c+math.Pow(0.001/0.992, 2)+math.Pow(0.001/0.995, 2)+math.Pow(0.002/0.96, 2)+math.Pow(0.002/0.985, 2))
	switch {
	case math.Abs(value-n.eta) > 0.1*want:
		return errors.New("value off")
	case math.Abs(u/want-1) > 0.02:
		return errors.New("uncertainty off")
	}
	return nil
}

func TestTheRightCalculationPasses(t *testing.T) {
	n := newExactNight()
	r, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := n.acceptance(*r.Value, *r.U); err != nil {
		t.Errorf("%v ± %v: %v", *r.Value, *r.U, err)
	}
	d, err := n.ask(func(q *Question) { q.Displaced = true })
	if err != nil {
		t.Fatal(err)
	}
	near(t, "by displaced windows, which count whole events", *d.Value, *r.Value, 2e-5)
}

// Each mistake is made in the rows or in the arithmetic as somebody would make it, and must fail
// the acceptance that the right calculation passes.
func TestDeliberateMistakesAreCaught(t *testing.T) {
	remake := func(n exactNight, change func(r *protocol.Reading)) exactNight {
		n.rows.Readings = slices.Clone(n.rows.Readings)
		for i := range n.rows.Readings {
			r := &n.rows.Readings[i]
			r.Counts = slices.Clone(r.Counts)
			change(r)
			r.Slices = []protocol.Slice{{GateSet: r.GateSet, Gate: r.Gate, Counts: r.Counts}}
		}
		return n
	}
	result := func(n exactNight, change func(*Question)) (float64, float64) {
		r, err := n.ask(change)
		if err != nil {
			t.Fatal(err)
		}
		return *r.Value, *r.U
	}
	for _, c := range []struct {
		name string
		make func(n exactNight) (value, u float64)
	}{
		{"the covariance of S and C dropped", func(n exactNight) (float64, float64) {
			r, err := n.ask(nil)
			if err != nil {
				t.Fatal(err)
			}
			v := *r.U * *r.U
			found := false
			for _, b := range r.Budget {
				if b.Symbol == "Cov(S, C)" {
					found = true
					v -= math.Copysign(b.Contribution*b.Contribution, b.Contribution)
				}
			}
			if !found {
				t.Fatal("no row Cov(S, C) in the budget")
			}
			return *r.Value, math.Sqrt(v)
		}},
		{"the background subtracted twice: the dark on top of it", func(n exactNight) (float64, float64) {
			return result(remake(n, func(r *protocol.Reading) {
				if r.Kind == protocol.Background {
					r.Counts[0].Counts += n.rows.Readings[0].Counts[0].Counts
				}
			}), nil)
		}},
		{"the dark instead of the background", func(n exactNight) (float64, float64) {
			return result(remake(n, func(r *protocol.Reading) {
				if r.Kind == protocol.Background {
					r.Kind = protocol.Reference
				}
			}), nil)
		}},
		{"accidentals from singles less coincidences", func(n exactNight) (float64, float64) {
			r, err := n.ask(nil)
			if err != nil {
				t.Fatal(err)
			}
			var a, wrong, c float64
			for _, row := range n.rows.Readings {
				if row.Kind != protocol.Light {
					continue
				}
				s, d, p := float64(row.Counts[0].Counts), float64(row.Counts[1].Counts), float64(row.Counts[2].Counts)
				a += Accidentals(s, d, n.bench.Counter.Window.Value, lightGateS)
				wrong += Accidentals(s-p, d-p, n.bench.Counter.Window.Value, lightGateS)
				c += p
			}
			return *r.Value * (c - wrong) / (c - a), *r.U
		}},
		{"the path counted twice", func(n exactNight) (float64, float64) {
			n.bench.Arms = slices.Clone(n.bench.Arms)
			n.bench.Arms[1].Path = append(slices.Clone(n.bench.Arms[1].Path), n.bench.Arms[1].Path...)
			return result(n, nil)
		}},
		{"the window's half for the full one", func(n exactNight) (float64, float64) {
			n.bench.Counter.Window.Value /= 2
			return result(n, nil)
		}},
		{"counts normalised by power", func(n exactNight) (float64, float64) {
			// Half of the gates at half the power, all brought to full power before the sums.
			k := 0
			return result(remake(n, func(r *protocol.Reading) {
				if r.Kind != protocol.Light {
					return
				}
				power := []float64{1, 0.5}[k%2]
				k++
				for i := range r.Counts {
					// what the counter saw at that power: background and chances do not follow it alike
					background := float64(n.rows.Readings[1].Counts[i].Counts) / 100 * lightGateS
					v := (float64(r.Counts[i].Counts)-background)*power + background
					if r.Counts[i].Channel == "pairs" {
						s, d := float64(r.Counts[0].Counts), float64(r.Counts[1].Counts)
						a := Accidentals(s*power, d*power, n.bench.Counter.Window.Value, lightGateS) // s, d already divided by the power
						full := float64(n.rows.Readings[2].Counts[2].Counts) - Accidentals(float64(n.rows.Readings[2].Counts[0].Counts), float64(n.rows.Readings[2].Counts[1].Counts), n.bench.Counter.Window.Value, lightGateS)
						v = full*power + a
					}
					r.Counts[i].Counts = uint64(v / power)
				}
			}), nil)
		}},
		{"the afterpulses taken for heralds", func(n exactNight) (float64, float64) {
			return result(n, func(q *Question) { q.Off[AfterpulseStep] = true })
		}},
		{"the window capture forgotten", func(n exactNight) (float64, float64) {
			return result(n, func(q *Question) { q.Off[CaptureStep] = true })
		}},
	} {
		n := newExactNight()
		if value, u := c.make(n); n.acceptance(value, u) == nil {
			t.Errorf("%s: %.5f ± %.5f passes; want it caught", c.name, value, u)
		}
	}
}

// flatNight is a sweep of the tested arm across a flat top, drawn count by count.
func flatNight(r *rand.Rand, passes int, shift float64) Rows {
	rows := Rows{Run: "20310203T220000-flat"}
	when := testStart
	const heralds = 4000.0
	for v := 1; v <= passes; v++ {
		for p := range 33 {
			x := 2 + float64(p)*0.05
			top := (math.Erf((0.5-(x-2.8-shift))/0.05) + math.Erf((0.5+(x-2.8-shift))/0.05)) / 2
			s := drawPoisson(r, heralds)
			c := drawPoisson(r, s*0.5*top)
			g := gateCounts{s: int(s), d: int(2 * c), pairs: int(c), heralds: int(c)}
			rows.Readings = append(rows.Readings, at(row(int64(len(rows.Readings)+1), protocol.Light, when, 1, []gateCounts{g}, EveryPair), "idler_arm", x, p, v))
			when = when.Add(2 * time.Second)
		}
	}
	return rows
}

func plainQuestion(use *Plateau) Question {
	off := map[Step]bool{}
	for _, s := range steps {
		off[s] = true
	}
	return Question{Trigger: "signal", UnderTest: "idler", Use: use, Off: off}
}

func TestTheBestPointIsBiasedAndThePlateauIsNot(t *testing.T) {
	statistics(t)
	for _, passes := range []int{1, 3} {
		best, plateau, u := 0.0, 0.0, 0.0
		const nights = 60
		for i := range nights {
			rows := flatNight(rand.New(rand.NewPCG(31, uint64(i))), passes, 0.1*float64(i%5-2)/2)
			top := 0.0
			for _, r := range rows.Readings {
				top = math.Max(top, float64(r.Counts[2].Counts)/float64(r.Counts[0].Counts))
			}
			res, err := Efficiency(rows, skerry(EveryPair), Model{}, plainQuestion(&Plateau{Axis: "idler_arm", HalfWidthDeg: 0.2}))
			if err != nil {
				t.Fatal(err)
			}
			best += top / nights
			plateau += *res.Value / nights
			u = *res.U
		}
		t.Logf("%d passes: best point %.4f, plateau %.4f ± %.4f, truth 0.5", passes, best, plateau, u)
		near(t, "the plateau's mean", plateau, 0.5, 3.5*u*1.5/math.Sqrt(nights))
		if best-0.5 < 3*u {
			t.Errorf("the best point is %.4f on average: this test would not see the bias", best)
		}
	}
}

func TestAPlateauWithoutFlanksIsRefused(t *testing.T) {
	rows := flatNight(rand.New(rand.NewPCG(33, 1)), 2, 0)
	rows.Readings = slices.DeleteFunc(rows.Readings, func(r protocol.Reading) bool { return *r.Point < 11 || *r.Point > 21 }) // 2.55 to 3.05 deg of 2.3 to 3.3
	var no *Refusal
	if r, err := Efficiency(rows, skerry(EveryPair), Model{}, plainQuestion(&Plateau{Axis: "idler_arm", HalfWidthDeg: 0.1})); !errors.As(err, &no) {
		t.Errorf("no flank in the sweep: got %v with %d readings; want a refusal", *r.Value, len(r.Used))
	}
	// with a centre from elsewhere it stands
	r, err := Efficiency(rows, skerry(EveryPair), Model{}, plainQuestion(&Plateau{Axis: "idler_arm", HalfWidthDeg: 0.1, Centre: &Constant{2.8, 0.01, "an earlier run"}}))
	if err != nil {
		t.Fatal(err)
	}
	if len(r.Used) != 10 { // 2.7 to 2.9 deg, twice
		t.Errorf("%d readings within 0.1 deg of 2.8 deg; want 10", len(r.Used))
	}
}

func TestThePlateausCentreNeverComesFromTheReadingsItAdmits(t *testing.T) {
	rows := flatNight(rand.New(rand.NewPCG(32, 1)), 3, 0)
	use := Plateau{Axis: "idler_arm", HalfWidthDeg: 0.2}
	ch := channels{s: "signal", d: "idler", c: "pairs"}
	pick := func(rows Rows, visit int) (kept []int64) {
		no := &Refusal{}
		readings, _, _ := use.choose(rows, rows.Readings, ch, 0, no)
		if err := no.err(); err != nil {
			t.Fatal(err)
		}
		for _, r := range readings {
			if *r.Visit == visit {
				kept = append(kept, r.Sequence)
			}
		}
		return kept
	}
	before := pick(rows, 2)
	// Whatever the second visit counted, the choice among its readings stays.
	for i := range rows.Readings {
		if *rows.Readings[i].Visit == 2 {
			rows.Readings[i].Counts = slices.Clone(rows.Readings[i].Counts)
			rows.Readings[i].Counts[2].Counts = uint64(i % 7 * 300)
			rows.Readings[i].Slices = nil
		}
	}
	if after := pick(rows, 2); !slices.Equal(before, after) || len(before) != 9 && len(before) != 8 {
		t.Errorf("kept %v, and %v with other counts in the same readings; want the same eight or nine", before, after)
	}
}

func TestEfficiencyRefusesWithEveryReason(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(n *exactNight, q *Question, m *Model)
		want   string
	}{
		{"counts not latched together", func(n *exactNight, q *Question, m *Model) { n.bench.Counter.Latched = false }, "not latched"},
		{"a path piece without u", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].Path[0].U = 0 }, "exit face is 0.96 without an uncertainty"},
		{"no path", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].Path = nil }, "no path is declared"},
		{"a window without u", func(n *exactNight, q *Question, m *Model) { n.bench.Counter.Window.U = 0 }, "coincidence window"},
		{"no dead time", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].DeadTime = Constant{} }, "idler: the dead time is not declared"},
		{"a filter beside the heralded band", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].Filter.CentreNm = 830 }, "the filter passes 810.00 to 850.00 nm"},
		{"a filter narrower than the heralded band", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].Filter.WidthNm = 8 }, "want the band inside it"},
		{"no filter on the trigger", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[0].Filter = nil }, "heralded band is not known"},
		{"collection below 0.995", func(n *exactNight, q *Question, m *Model) {
			m.Collection = func() (float64, error) { return 0.9949, nil }
		}, "0.99490; want at least 0.995"},
		{"no model of the collection", func(n *exactNight, q *Question, m *Model) { m.Collection = nil }, "no model says"},
		{"readings at several places", func(n *exactNight, q *Question, m *Model) {
			for i := range n.rows.Readings {
				n.rows.Readings[i] = at(n.rows.Readings[i], "idler_arm", 2.8+0.01*float64(i), i, 1)
			}
		}, "want use: {plateau_of, half_width}"},
		{"no background and no dark", func(n *exactNight, q *Question, m *Model) {
			n.rows.Readings = slices.DeleteFunc(n.rows.Readings, func(r protocol.Reading) bool { return r.Kind != protocol.Light })
		}, "neither background nor dark"},
		{"nothing accepted", func(n *exactNight, q *Question, m *Model) {
			for i := range n.rows.Readings {
				n.rows.Readings[i].Accepted = false
			}
		}, "no light reading counts"},
		{"dead time beyond the checks", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].DeadTime = Constant{5e-6, 1e-8, "own"} }, "want at most 0.5"},
		{"a paralysed detector", func(n *exactNight, q *Question, m *Model) {
			n.bench.Arms[1].DeadTime = Constant{3.4e-6, 1e-8, "own"}
			n.bench.Arms[1].Model = Paralysable
		}, "no true rate"},
		{"a window as long as the counts are apart", func(n *exactNight, q *Question, m *Model) { n.bench.Counter.Window = Constant{1e-6, 1e-9, "own"} }, "a shorter window"},
		{"slices that do not add up", func(n *exactNight, q *Question, m *Model) {
			n.rows.Readings[3].Slices[0].Counts = slices.Clone(n.rows.Readings[3].Slices[0].Counts)
			n.rows.Readings[3].Slices[0].Counts[0].Counts--
		}, "the slices add up to"},
		{"a slice without a gate", func(n *exactNight, q *Question, m *Model) { n.rows.Readings[3].Slices[0].Gate = 0 }, "slice 1: gate of 0 s"},
		{"an arm that is none", func(n *exactNight, q *Question, m *Model) { q.UnderTest = "ider" }, `"ider"`},
		{"afterpulses that may fall into the window, and none declared", func(n *exactNight, q *Question, m *Model) { n.bench.Arms[1].Afterpulse = Constant{} }, "idler: the afterpulse share is not declared"},
		{"displaced windows where there are none", func(n *exactNight, q *Question, m *Model) { q.Displaced, n.bench.Counter.Displaced = true, nil }, "declares none"},
		{"the same arm twice", func(n *exactNight, q *Question, m *Model) { q.UnderTest = "signal" }, "want two arms"},
	} {
		n := newExactNight()
		q, m := Question{Trigger: "signal", UnderTest: "idler"}, Model{Collection: full}
		c.change(&n, &q, &m)
		r, err := Efficiency(n.rows, n.bench, m, q)
		var no *Refusal
		if !errors.As(err, &no) || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: got %v, %v; want a refusal with %q", c.name, r.Value, err, c.want)
		}
	}
	n := newExactNight()
	n.bench.Counter.Latched = false
	n.bench.Counter.Capture.U = 0
	n.bench.Arms[1].Path[1].U = 0
	var no *Refusal
	if _, err := n.ask(nil); !errors.As(err, &no) || len(no.Reasons) != 3 {
		t.Errorf("three things wrong: %v; want three reasons at once", err)
	}
}

func TestCollectionIsAOneSidedRow(t *testing.T) {
	n := newExactNight()
	r, err := Efficiency(n.rows, n.bench, Model{Collection: func() (float64, error) { return 0.996, nil }}, Question{Trigger: "signal", UnderTest: "idler", Off: map[Step]bool{ShadowStep: true}})
	if err != nil {
		t.Fatal(err)
	}
	all, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "only upwards, to the middle", *r.Value / *all.Value, 1/0.998, 1e-9)
	for _, b := range r.Budget {
		if b.Symbol == "f_col" {
			near(t, "rectangular of half-width 0.002", b.U, 0.002/math.Sqrt(3), 1e-12)
			return
		}
	}
	t.Error("no collection row in the budget")
}

func TestConstantsAreNotAveragedDown(t *testing.T) {
	n := newExactNight()
	once, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	lights := n.rows.Readings[2:6]
	for range 50 {
		n.rows.Readings = slices.Insert(n.rows.Readings, 2, lights...)
	}
	often, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	row := func(r Result, symbol string) float64 {
		for _, b := range r.Budget {
			if b.Symbol == symbol {
				return b.Contribution
			}
		}
		t.Fatal("no row", symbol)
		return 0
	}
	near(t, "path row", row(often, "T_1"), row(once, "T_1"), 1e-6)
	near(t, "count row falls with the root", row(often, "C"), row(once, "C")/math.Sqrt(51), 0.01*row(once, "C"))
}

func TestOverDispersionIsShownAndUsed(t *testing.T) {
	n := newExactNight()
	calm, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	for i := range n.rows.Readings {
		r := &n.rows.Readings[i]
		if r.Kind == protocol.Light {
			r.Counts = slices.Clone(r.Counts)
			r.Counts[2].Counts = uint64(float64(r.Counts[2].Counts) * (1 + 0.02*float64(i%2*2-1)))
			r.Slices = nil
		}
	}
	r, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	if calm.Dispersion.Significant || !r.Dispersion.Significant || r.Dispersion.Birge < 2 {
		t.Fatalf("calm %+v, scattered %+v", *calm.Dispersion, *r.Dispersion)
	}
	for _, b := range r.Budget {
		if b.Symbol == "C" && (b.Freedom == nil || *b.Freedom != 3 || math.Abs(b.U/math.Sqrt(b.Estimate)/r.Dispersion.Birge-1) > 1e-9) {
			t.Errorf("row C %+v; want the Birge ratio in it and 3 degrees of freedom", b)
		}
	}
	if *r.K <= *calm.K || *r.U <= *calm.U {
		t.Errorf("k %g and u %g; want both above %g and %g", *r.K, *r.U, *calm.K, *calm.U)
	}
	// By hand: +-2 % of C in each of 4 readings: chi square = 4 (0.02 C)^2/(C (1-e)).
	c := 60000 * exactEta * 0.9456 * 0.995 * lightGateS
	e := c / (63500 / 0.992 * lightGateS)
	near(t, "chi square", r.Dispersion.ChiSquare, 4*0.02*0.02*c/(1-e), 0.03*r.Dispersion.ChiSquare)
}

func TestBelowAHundredCoincidencesTheIntervalIsExactAndSaysSo(t *testing.T) {
	n := newExactNight()
	for i := range n.rows.Readings {
		r := &n.rows.Readings[i]
		r.Counts = slices.Clone(r.Counts)
		for k := range r.Counts {
			r.Counts[k].Counts /= 4_000
		}
		r.Counts[0].Counts = max(r.Counts[0].Counts, 1)
		r.Slices = nil
	}
	r, err := n.ask(nil)
	if err != nil {
		t.Fatal(err)
	}
	if r.symmetric() || !strings.Contains(r.Sentence(), "Clopper") || !strings.Contains(r.Sentence(), "not symmetric") {
		t.Errorf("%s; want an exact interval, in words", r.Sentence())
	}
	if r.Interval.Low < 0 {
		t.Errorf("low end %g", r.Interval.Low)
	}
}

func TestBackgroundsAreInterpolatedBetweenTheOnesAround(t *testing.T) {
	at := func(min int) time.Time { return testStart.Add(time.Duration(min) * time.Minute) }
	measured := []dim{{mid: at(0)}, {mid: at(10)}, {mid: at(30)}}
	for _, c := range []struct {
		at   time.Time
		want []share
	}{
		{at(-5), []share{{0, 1}}},
		{at(0), []share{{0, 1}}},
		{at(4), []share{{0, 0.6}, {1, 0.4}}},
		{at(25), []share{{1, 0.25}, {2, 0.75}}},
		{at(40), []share{{2, 1}}},
	} {
		if got := bracket(c.at, measured); len(got) != len(c.want) || got[0].background != c.want[0].background || math.Abs(got[0].weight-c.want[0].weight) > 1e-12 {
			t.Errorf("at %v: %v; want %v", c.at, got, c.want)
		}
	}
}

func TestTheBackgroundHasItsOwnDeadTime(t *testing.T) {
	// By the design's factor: B (1 - m_S tau)/(1 - m_B tau).
	n := newExactNight()
	n.bench.Arms[0].DeadTime = Constant{1e-6, 1e-8, "own"}
	c := calculation{bench: n.bench, trigger: n.bench.Arms[0], test: n.bench.Arms[1]}
	kinds, _ := n.rows.split()
	r := Result{}
	no := &Refusal{}
	for _, row := range kinds[protocol.Light] {
		d, err := channels{s: "signal", d: "idler", c: "pairs"}.read(row)
		if err != nil {
			t.Fatal(err)
		}
		c.dwells = append(c.dwells, d)
	}
	c.takeBackground(kinds, channels{s: "signal"}, nil, &r, no)
	c.sum()
	mS, mB := c.s/c.gateS, c.backgrounds[0].rateHz()
	near(t, "factor", c.background, mB*c.gateS*(1-mS*1e-6)/(1-mB*1e-6), 1e-6)
}

func TestHeraldedBandFollowsEnergyConservation(t *testing.T) {
	// checks S085 of the phase-matching reference, computed by an independent calculation:
	// 405 nm and 780 nm give 842.4 nm.
	centre, width := heraldedBand(405, Filter{CentreNm: 780, WidthNm: 10})
	near(t, "centre", centre, 842.4, 1e-6)
	near(t, "width: (842.4/780)^2 times the trigger's", width, 10*math.Pow(842.4/780, 2), 0.01)
}
