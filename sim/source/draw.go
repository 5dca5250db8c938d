package source

import (
	"math"
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

// Draw returns the counts of one gate made of segments of constant rates. It draws numbers of
// events, not events, so a gate costs microseconds whatever its rates are.
func (m *Model) Draw(rng *rand.Rand, segments []Segment) Counts {
	var c Counts
	for _, s := range segments {
		t := s.For.Seconds()
		r := s.Rates
		ls := live(m.o.Signal.Detector, r.SignalHz)
		li := live(m.o.Idler.Detector, r.IdlerHz)
		pairs := r.PairsHz * ls * li
		both := poisson(rng, pairs*t)
		c.Signal += both + poisson(rng, max(0, r.SignalHz*ls-pairs)*t)
		c.Idler += both + poisson(rng, max(0, r.IdlerHz*li-pairs)*t)
		c.Coincidences += both + poisson(rng, r.SignalHz*ls*r.IdlerHz*li*m.o.Counter.WindowS*t)
	}
	return c
}

func live(d Detector, n float64) float64 {
	switch {
	case d.LatchHz > 0 && n > d.LatchHz:
		return 0
	case d.Model == Paralysable:
		return math.Exp(-n * d.DeadTimeS)
	}
	return 1 / (1 + n*d.DeadTimeS)
}
