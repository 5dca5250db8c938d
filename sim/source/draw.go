package source

import (
	"math/rand/v2"
	"time"
)

// Segment is a stretch of a gate during which the rates are constant.
type Segment struct {
	For   time.Duration
	Rates Rates
}

// Counts are what a counter shows after a gate.
type Counts struct {
	Signal, Idler, Coincidences uint64
}

func (c *Counts) add(d Counts) {
	c.Signal += d.Signal
	c.Idler += d.Idler
	c.Coincidences += d.Coincidences
}

// Draw returns the counts of one gate made of segments of constant rates. It draws numbers of
// events, not events, so a gate costs microseconds whatever its rates are. Means are those of
// Expected; variances are those of the dead time; coincidences are a subset of both singles. It is
// tested against DrawEvents.
func (m *Model) Draw(rng *rand.Rand, segments []Segment) Counts {
	var c Counts
	for i := range segments {
		c.add(m.draw(rng, &segments[i]))
	}
	return c
}

func (m *Model) draw(rng *rand.Rand, seg *Segment) Counts {
	t := seg.For.Seconds()
	if !(t > 0) {
		return Counts{}
	}
	s, i := m.o.Signal.Detector.respond(seg.Rates.SignalHz), m.o.Idler.Detector.respond(seg.Rates.IdlerHz)
	e := m.expected(seg.Rates, s, i)
	coincident := e.TrueHz + e.AccidentalHz
	if !(coincident < min(s.rate, i.rate)) {
		// A window so wide that coincidences are no longer a subset of the singles.
		extra := coincident
		if m.o.Counter.Logic == OnePerHerald {
			n := spread(rng, s.rate*t, s.fano)
			return Counts{Signal: n, Idler: spread(rng, i.rate*t, i.fano), Coincidences: binomial(rng, n, extra/s.rate)}
		}
		return Counts{Signal: spread(rng, s.rate*t, s.fano), Idler: spread(rng, i.rate*t, i.fano), Coincidences: poisson(rng, extra*t)}
	}
	// Each signal event is part of a coincidence with the same chance. What the idler counts
	// besides has the variance that is left over for it.
	var c Counts
	c.Signal = spread(rng, s.rate*t, s.fano)
	share := 0.0
	if s.rate > 0 {
		share = coincident / s.rate
	}
	c.Coincidences = binomial(rng, c.Signal, share)
	rest := i.rate - coincident
	fano := 1.0
	if rest > 0 {
		fano = max(0.02, (i.fano*i.rate-coincident*(1-share+share*s.fano))/rest)
	}
	c.Idler = c.Coincidences + spread(rng, rest*t, fano)
	return c
}

// spread draws a count of a given mean and variance over mean: a Poisson count for 1, a binomial
// one below, a Poisson count of a gamma-distributed mean above.
func spread(rng *rand.Rand, mean, fano float64) uint64 {
	switch {
	case !(mean > 0):
		return 0
	case fano < 1-1e-9:
		p := 1 - fano
		n := mean / p
		whole := uint64(n)
		if rng.Float64() < n-float64(whole) { // keeps the mean
			whole++
		}
		return binomial(rng, whole, p)
	case fano > 1+1e-9:
		b := fano - 1
		return poisson(rng, b*gamma(rng, mean/b))
	}
	return poisson(rng, mean)
}
