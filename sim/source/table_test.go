package source

import (
	"math"
	"math/rand/v2"
	"sync"
	"testing"
)

// TestTheTableAgreesWithTheIntegralsEverywhere compares interpolated rates with computed ones at
// random poses around the peak, tilts and drifts included, in parts of the largest rate.
func TestTheTableAgreesWithTheIntegralsEverywhere(t *testing.T) {
	for _, c := range cases(t) {
		if testing.Short() && c.name != "two irises on the ring" {
			continue
		}
		t.Run(c.name, func(t *testing.T) {
			m, err := New(c.o)
			if err != nil {
				t.Fatal(err)
			}
			rng := rand.New(rand.NewPCG(5, 5))
			var top, worst collected
			type pairOf struct{ got, want collected }
			var all []pairOf
			for range 12 {
				p := c.p
				p.SignalDeg += 0.2 * rng.NormFloat64()
				p.IdlerDeg += 0.2 * rng.NormFloat64()
				p.TiltDeg += 0.1 * rng.NormFloat64()
				p.PumpNm += 0.02 * rng.NormFloat64()
				p.CrystalCel += 3 * rng.NormFloat64()
				x := pairOf{m.tabulated(p), m.computed(p)}
				all = append(all, x)
				for i := range top {
					top[i] = max(top[i], x.want[i])
				}
			}
			at := m.computed(c.p)
			for i := range top {
				top[i] = max(top[i], at[i])
			}
			for _, x := range all {
				for i := range top {
					worst[i] = max(worst[i], math.Abs(x.got[i]-x.want[i])/top[i])
				}
			}
			t.Logf("worst differences in parts of the largest: signal %.2g, idler %.2g, pairs %.2g", worst[0], worst[1], worst[2])
			for i, w := range worst {
				if w > 0.01 {
					t.Errorf("integral %d differs by %.2g of the largest; want 1 %%", i, w)
				}
			}
		})
	}
}

func TestRatesDoNotDependOnWhatWasAskedBefore(t *testing.T) {
	one, err := New(bench(t))
	if err != nil {
		t.Fatal(err)
	}
	other, err := New(bench(t))
	if err != nil {
		t.Fatal(err)
	}
	p := atPeak()
	want := one.Rates(p)
	for i := range 30 {
		q := p
		q.SignalDeg += 0.01 * float64(i%7)
		q.IdlerDeg -= 0.013 * float64(i%5)
		q.TiltDeg = 0.04 * float64(i%3)
		other.Rates(q)
	}
	if got := other.Rates(p); got != want {
		t.Errorf("rates %+v after other poses, %+v before; want the same to the bit", got, want)
	}
}

func TestSeveralInstrumentsMayAskAtOnce(t *testing.T) {
	m := model(t, bench(t))
	want := model(t, bench(t)).Rates(atPeak())
	var all sync.WaitGroup
	for g := range 4 {
		all.Go(func() {
			for i := range 20 {
				p := atPeak()
				p.IdlerDeg += 0.001 * float64(g*i)
				m.Rates(p)
				if got := m.Rates(atPeak()); got != want {
					t.Errorf("rates %+v; want %+v", got, want)
				}
			}
		})
	}
	all.Wait()
}
