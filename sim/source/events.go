package source

import (
	"math"
	"math/rand/v2"
	"slices"
)

// DrawEvents returns the counts of one gate from single events: photons arrive one by one,
// detectors die and recover, traps release afterpulses, the counter compares times. It costs about
// 50 ns an event and is the standard for Draw.
func (m *Model) DrawEvents(rng *rand.Rand, segments []Segment) Counts {
	arms := [2]live{{d: &m.o.Signal.Detector}, {d: &m.o.Idler.Detector}}
	for i := range arms {
		arms[i].until, arms[i].pulse = math.Inf(-1), math.Inf(1)
	}
	start := 0.0
	for _, seg := range segments {
		end := start + seg.For.Seconds()
		r := seg.Rates
		pairs := min(r.PairsHz, r.SignalHz, r.IdlerHz)
		before := len(arms[1].times)
		alone := [2]float64{r.SignalHz - pairs, r.IdlerHz - pairs}
		arms[0].latched = arms[0].d.LatchHz > 0 && r.SignalHz > arms[0].d.LatchHz
		arms[1].latched = arms[1].d.LatchHz > 0 && r.IdlerHz > arms[1].d.LatchHz
		total := pairs + alone[0] + alone[1]
		for t := start; total > 0; {
			t += rng.ExpFloat64() / total
			if t >= end {
				break
			}
			switch u := rng.Float64() * total; {
			case u < pairs:
				arms[0].photon(rng, t)
				arms[1].photon(rng, t)
			case u < pairs+alone[0]:
				arms[0].photon(rng, t)
			default:
				arms[1].photon(rng, t)
			}
		}
		for i := range arms {
			arms[i].release(rng, end)
		}
		for j := before; j < len(arms[1].times); j++ { // what the counter is given, not when the detector fired
			arms[1].times[j] -= r.DelayS
		}
		start = end
	}
	c := Counts{Signal: uint64(len(arms[0].times)), Idler: uint64(len(arms[1].times))}
	k := m.o.Counter
	for i := range arms {
		for j := range arms[i].times {
			if k.JitterS > 0 {
				arms[i].times[j] += rng.NormFloat64() * k.JitterS / math.Sqrt2
			}
		}
		slices.Sort(arms[i].times)
	}
	c.Coincidences = coincidences(arms[0].times, arms[1].times, k)
	return c
}

// live is a detector at work.
type live struct {
	d       *Detector
	latched bool
	until   float64 // dead until
	pulse   float64 // when a filled trap will release, if nothing comes before
	times   []float64
}

// photon is a detection event at time t; what the traps release before comes first.
func (l *live) photon(rng *rand.Rand, t float64) {
	l.release(rng, t)
	if l.latched {
		return
	}
	if t < l.until {
		if l.d.Model == Paralysable {
			l.until = t + l.d.DeadTimeS
		}
		return
	}
	l.record(rng, t)
}

func (l *live) release(rng *rand.Rand, t float64) {
	for l.pulse <= t {
		if l.latched {
			l.pulse = math.Inf(1)
			return
		}
		l.record(rng, l.pulse)
	}
}

// record notes an event. A new event empties the trap of the one before.
func (l *live) record(rng *rand.Rand, t float64) {
	l.times = append(l.times, t)
	l.until = t + l.d.DeadTimeS
	l.pulse = math.Inf(1)
	if l.d.Afterpulse > 0 && rng.Float64() < l.d.Afterpulse {
		l.pulse = l.until + rng.ExpFloat64()*l.d.AfterpulseS
	}
}

// coincidences counts partners within the window around each signal event.
func coincidences(signal, idler []float64, k Counter) uint64 {
	var n uint64
	first := 0
	for _, s := range signal {
		lo, hi := s+k.DelayS-k.WindowS/2, s+k.DelayS+k.WindowS/2
		for first < len(idler) && idler[first] < lo {
			first++
		}
		for i := first; i < len(idler) && idler[i] <= hi; i++ {
			n++
			if k.Logic == OnePerHerald {
				break
			}
		}
	}
	return n
}
