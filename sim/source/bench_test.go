package source

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"
)

var sink Rates

// BenchmarkCold is one point's rates at the stated accuracy, from nothing, for every bench that is
// held against brute force.
func BenchmarkCold(b *testing.B) {
	for _, c := range cases(b) {
		b.Run(c.name, func(b *testing.B) {
			m, err := New(c.o)
			if err != nil {
				b.Fatal(err)
			}
			for b.Loop() {
				sink = m.Exact(c.p)
			}
		})
	}
}

// BenchmarkTable is the same from the table, where the arms have been before and the laser drifts.
func BenchmarkTable(b *testing.B) {
	m, err := New(bench(b))
	if err != nil {
		b.Fatal(err)
	}
	p := atPeak()
	i := 0
	next := func() Pose {
		i++
		q := p
		q.SignalDeg += 0.002 * math.Sin(float64(i))
		q.IdlerDeg += 0.002 * math.Cos(2*float64(i))
		q.PumpNm += 0.004 * math.Sin(float64(i)/100)
		q.CrystalCel += 0.3 * math.Sin(float64(i)/77)
		return q
	}
	for range 1000 {
		m.Rates(next())
	}
	for b.Loop() {
		sink = m.Rates(next())
	}
}

// BenchmarkNight is a simulated night of 50 000 gates: a sweep of 60 idler angles for each of 5
// signal angles, visited again and again while laser and room drift.
func BenchmarkNight(b *testing.B) {
	for b.Loop() {
		m, err := New(bench(b))
		if err != nil {
			b.Fatal(err)
		}
		rng := rand.New(rand.NewPCG(1, 1))
		for gate := range 50000 {
			p := atPeak()
			p.SignalDeg += 0.1*float64(gate/60%5-2) + 0.001*rng.NormFloat64()
			p.IdlerDeg += 0.02*float64(gate%60-30) + 0.001*rng.NormFloat64()
			p.PumpNm += 0.005 * math.Sin(float64(gate)/10000)
			p.CrystalCel += math.Sin(float64(gate) / 20000)
			r := m.Rates(p)
			sinkCounts = m.Draw(rng, []Segment{{For: time.Second, Rates: r}})
		}
	}
}

var sinkCounts Counts

// BenchmarkDraw is the counts of one gate, at rates from quiet to saturated.
func BenchmarkDraw(b *testing.B) {
	for _, r := range []Rates{{SignalHz: 1e4, IdlerHz: 1e4, PairsHz: 2e3}, {SignalHz: 5e5, IdlerHz: 5e5, PairsHz: 1e5}, {SignalHz: 1e7, IdlerHz: 1e7, PairsHz: 2e6}} {
		b.Run(fmt.Sprintf("%.0e Hz", r.SignalHz), func(b *testing.B) {
			m, err := New(bench(b))
			if err != nil {
				b.Fatal(err)
			}
			rng := rand.New(rand.NewPCG(1, 1))
			for b.Loop() {
				sinkCounts = m.Draw(rng, []Segment{{For: time.Second, Rates: r}})
			}
		})
	}
}
