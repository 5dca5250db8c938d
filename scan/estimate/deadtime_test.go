package estimate

import (
	"encoding/csv"
	"errors"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"
)

type check struct {
	id, quantity string
	in           map[string]float64
	value, tol   float64
	source       string
}

// checks reads testdata/statistics/checks.csv (its README names the sources).
func checks(t *testing.T, prefix string) []check {
	t.Helper()
	f, err := os.Open("../../testdata/statistics/checks.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var found []check
	for _, row := range rows[1:] {
		if !strings.HasPrefix(row[1], prefix) {
			continue
		}
		c := check{id: row[0], quantity: row[1], in: map[string]float64{}, source: row[8]}
		for part := range strings.SplitSeq(row[3], ";") {
			k, v, _ := strings.Cut(part, "=")
			c.in[k] = number(t, v)
		}
		c.value, c.tol = number(t, row[4]), number(t, row[6])
		found = append(found, c)
	}
	if len(found) == 0 {
		t.Fatalf("no check named %s…", prefix)
	}
	return found
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s: %.12g; want %.12g ± %.2g", what, got, want, tol)
	}
}

func TestDeadTimesAgreeWithPublishedRows(t *testing.T) {
	for _, c := range checks(t, "dead_") {
		tau := c.in["tau_ns"] * 1e-9
		model := NonParalysable
		if strings.HasPrefix(c.quantity, "dead_p_") {
			model = Paralysable
		}
		var got float64
		var err error
		if strings.Contains(c.quantity, "measured_per_s") {
			got = model.Observed(c.in["true_per_s"], tau)
		} else {
			got, err = model.True(c.in["measured_per_s"], tau, false)
		}
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.id+" "+c.source, got, c.value, c.tol)
	}
	// standards.md 6.4, computed there: tau = 2 us, n = 1e5.
	near(t, "non-paralysable", NonParalysable.Observed(1e5, 2e-6), 83333.3, 0.05)
	near(t, "paralysable", Paralysable.Observed(1e5, 2e-6), 81873.1, 0.05)
	low, err := Paralysable.True(81873.07530779819, 2e-6, false)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "lower branch", low, 1e5, 1e-5)
	high, err := Paralysable.True(81873.07530779819, 2e-6, true)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "upper branch", high, 1.430e6, 500)
	near(t, "upper branch back", Paralysable.Observed(high, 2e-6), 81873.07530779819, 1e-6)
}

func TestDeadTimeInversesHoldOverTheWholeRange(t *testing.T) {
	const tau = 1e-6
	for _, load := range []float64{1e-9, 1e-3, 0.1, 0.5, 0.9, 0.999, 1.001, 1.5, 5, 20} {
		n := load / tau
		back, err := Paralysable.True(Paralysable.Observed(n, tau), tau, load > 1)
		if err != nil {
			t.Fatal(err)
		}
		// At the branch point the slope vanishes: half the digits are all there are.
		near(t, "paralysable", back/n, 1, 1e-12+1e-16/math.Abs(1-load)/math.Max(math.Abs(1-load), 1e-8)*10)
		back, err = NonParalysable.True(NonParalysable.Observed(n, tau), tau, false)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "non-paralysable", back/n, 1, 1e-13)
	}
}

func TestDeadTimeRefusesWhereThereIsNoSolution(t *testing.T) {
	for _, c := range []struct {
		name  string
		model DeadTimeModel
		load  float64
		high  bool
	}{
		{"paralysable above 1/e", Paralysable, 0.36788, false},
		{"paralysable above 1/e, upper branch", Paralysable, 0.36788, true},
		{"non-paralysable at 1", NonParalysable, 1, false},
		{"non-paralysable has no upper branch", NonParalysable, 0.1, true},
	} {
		if v, err := c.model.True(c.load/1e-6, 1e-6, c.high); !errors.Is(err, ErrNoRate) {
			t.Errorf("%s: got %g, %v; want ErrNoRate", c.name, v, err)
		}
	}
	if _, err := Paralysable.True(0.36787/1e-6, 1e-6, false); err != nil {
		t.Errorf("just below 1/e: %v", err)
	}
}

func TestTwoSourcesGiveTheDeadTimeBack(t *testing.T) {
	// standards.md 6.4: Knoll's form recalled from memory, exact inversion confirmed there.
	tau, err := TwoSources(37208.4413, 53730.8104, 83472.1759, 199.9200)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "tau", tau, 2.000e-6, 0.0005e-6)
	m1, m2, m12, mb := 37208.4413, 53730.8104, 83472.1759, 199.9200
	short := (m1 + m2 - m12 - mb) / (m12*m12 - m1*m1 - m2*m2)
	near(t, "the short formula is wrong here, by the published amount", short, 2.70e-6, 0.005e-6)
	// and with exact rates, all digits
	o := func(n float64) float64 { return NonParalysable.Observed(n, 2e-6) }
	tau, err = TwoSources(o(40200), o(60200), o(100200), o(200))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "exact rates", tau, 2e-6, 1e-16)
	if _, err := TwoSources(100, 100, 500, 0); err == nil {
		t.Error("both lights together brighter than their sum: want an error")
	}
}

func TestPileUpAgreesWithThePublishedExample(t *testing.T) {
	near(t, "1e5/s, 50 ns (standards.md 6.4)", PileUp(1e5, 50e-9), 0.0050, 0.00005)
}

// The exact coupled loss against events: nothing in world knows these formulas.
func TestCoupledDeadTimesAgreeWithEvents(t *testing.T) {
	statistics(t)
	for i, c := range []struct {
		name           string
		modelT, modelD DeadTimeModel
		tauT, tauD     float64
		load           float64
	}{
		{"equal dead times", NonParalysable, NonParalysable, 50e-9, 50e-9, 0.3},
		{"the tested detector is slower", NonParalysable, NonParalysable, 30e-9, 80e-9, 0.3},
		{"the trigger is slower", NonParalysable, NonParalysable, 90e-9, 40e-9, 0.3},
		{"the trigger is much slower", NonParalysable, NonParalysable, 200e-9, 40e-9, 0.3},
		{"much slower", NonParalysable, NonParalysable, 20e-9, 200e-9, 0.5},
		{"very bright", NonParalysable, NonParalysable, 50e-9, 50e-9, 1},
		{"paralysable, equal", Paralysable, Paralysable, 50e-9, 50e-9, 0.2},
		{"paralysable, unequal", Paralysable, Paralysable, 30e-9, 90e-9, 0.2},
		{"paralysable trigger", Paralysable, NonParalysable, 50e-9, 50e-9, 0.3},
		{"slow paralysable trigger", Paralysable, NonParalysable, 150e-9, 40e-9, 0.2},
		{"fast paralysable trigger", Paralysable, NonParalysable, 30e-9, 100e-9, 0.3},
		{"paralysable tested detector", NonParalysable, Paralysable, 50e-9, 50e-9, 0.3},
		{"slow paralysable tested detector", NonParalysable, Paralysable, 30e-9, 100e-9, 0.3},
	} {
		w := world{etaT: 0.3, etaD: 0.6, pathD: 1, noiseT: 1e5, noiseD: 1e5, modelT: c.modelT, modelD: c.modelD, tauT: c.tauT, tauD: c.tauD,
			windowS: 1e-12, randomStream: rand.New(rand.NewPCG(71, uint64(i)))}
		w.pairsHz = c.load / c.tauD / w.etaD
		gateS := 0.03
		if *long {
			gateS = 2
		}
		g := w.count(gateS)
		mT, mD, pairs := float64(g.s)/gateS, float64(g.d)/gateS, float64(g.truePairs)/gateS
		loss, err := DeadTimeLoss(c.modelT, c.modelD, mT, mD, pairs, c.tauT, c.tauD)
		if err != nil {
			t.Fatal(c.name, err)
		}
		got := float64(g.truePairs) / float64(g.photonHeralds) / loss
		u := math.Sqrt(0.6*0.4/float64(g.photonHeralds)) / loss
		first := 1 - mD*c.tauD + pairs*math.Min(c.tauT, c.tauD)
		t.Logf("%s: eta %.5f ± %.5f, first order %.5f", c.name, got, u, got*loss/first)
		near(t, c.name, got, 0.6, 3.5*u)
	}
}

func TestCoupledDeadTimesJoinTheirLimits(t *testing.T) {
	p := deadPair{modelT: NonParalysable, modelD: NonParalysable, nT: 2e6, nD: 3e6, nPair: 1e6, tauD: 100e-9}
	p.tauT = 0
	l := p.live()
	near(t, "a trigger never dead", l, 1/(1+0.3), 1e-12)
	p.tauT = 1.0001e-4 * p.tauD
	above := p.live()
	p.tauT = 0.9999e-4 * p.tauD
	below := p.live()
	near(t, "grid against first order where they meet", above, below, 1e-7)
	p.tauT, p.nPair = 70e-9, 0
	l = p.live()
	near(t, "no pairs: nothing is coupled", l, 1/(1+0.3), 1e-5)
	p = deadPair{modelT: NonParalysable, modelD: NonParalysable, nT: 2e6, nD: 2e6, nPair: 2e6, tauT: 50e-9, tauD: 50e-9}
	l = p.live()
	near(t, "all are pairs and the dead times equal: D is live whenever T is", l, 1, 1e-6)
}

// What C - A misses of the true pairs, for windows longer and shorter than the dead times.
func TestChancesInTheShadowOfDeadTimesAgreeWithEvents(t *testing.T) {
	statistics(t)
	for i, c := range []struct {
		name          string
		window        float64
		tauT, tauD    float64
		pairsHz       float64
		withoutIsFine bool // K is near 1 for this logic: nothing to see
	}{
		{"dead times beyond the window", 4e-9, 45e-9, 50e-9, 1.5e6, false},
		{"no dead times", 10e-9, 0, 0, 1e6, true},
		{"dead times well inside the window", 20e-9, 2e-9, 3e-9, 6e5, false},
		{"trigger slow, tested detector fast", 20e-9, 40e-9, 2e-9, 6e5, false},
		{"trigger fast, tested detector slow", 20e-9, 2e-9, 40e-9, 6e5, false},
	} {
		w := world{etaT: 0.4, etaD: 0.6, pathD: 1, noiseT: 1e5, noiseD: 1e5, modelT: NonParalysable, modelD: NonParalysable, tauT: c.tauT, tauD: c.tauD,
			windowS: c.window, pairsHz: c.pairsHz, jitterS: 0.1e-9, randomStream: rand.New(rand.NewPCG(91, uint64(i)))}
		const gateS = 1.
		g := w.count(gateS)
		a := Accidentals(float64(g.s), float64(g.d), c.window, gateS)
		for logic, counts := range map[Logic]int{EveryPair: g.pairs, OnePerHerald: g.heralds} {
			k := chanceShadow(logic, float64(g.s)/gateS, float64(g.d)/gateS, float64(counts)-a, c.window, c.tauT, c.tauD)
			got := (float64(counts) - a) / k
			u := math.Sqrt(a)
			load := float64(g.s+g.d) / gateS * c.window
			t.Logf("%s, %s: (C - A)/K %.0f, true %d, K %.5f, u %.0f, second order %.0f", c.name, logic, got, g.truePairs, k, u, load*load/2*float64(g.truePairs))
			near(t, c.name+", "+string(logic), got, float64(g.truePairs), 3.5*u+load*load/2*float64(g.truePairs))
			if miss := math.Abs(float64(counts) - a - float64(g.truePairs)); !c.withoutIsFine && miss < 5*u {
				t.Errorf("%s, %s: C - A alone misses only %.0f ± %.0f: this case shows nothing", c.name, logic, miss, u)
			}
		}
	}
}
