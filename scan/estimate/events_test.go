package estimate

import "math/rand/v2"

// world is the truth behind a simulated gate: photons one by one, written from the definitions
// alone, so that it shares no formula with what it checks.
type world struct {
	etaT         float64 // chance that a signal photon is recorded by a live trigger detector
	etaD, pathD  float64 // detection efficiency looked for; what reaches the detector
	pairsHz      float64
	noiseT       float64 // fluorescence, dark counts, stray light of T, 1/s
	noiseD       float64
	modelT       DeadTimeModel
	modelD       DeadTimeModel
	tauT, tauD   float64
	afterT       float64 // chance that a recorded count brings an afterpulse
	afterD       float64
	afterDecayS  float64
	windowS      float64 // full
	jitterS      float64 // standard deviation of tD - tT of true partners
	displacedS   float64 // 0: no displaced window
	spoiled      bool    // phase matching spoiled: no pairs
	randomStream *rand.Rand
}

// gateCounts is what a counter would show, and what only the simulator knows.
type gateCounts struct {
	s, d           int
	pairs, heralds int // every_pair, one_per_herald
	displaced      int // every_pair in the displaced window
	afterpulsesT   int
	truePairs      int // recorded on both sides from one pair
	photonHeralds  int // recorded trigger counts that were photons of pairs
}

type pulse struct {
	t    float64
	pair int // 0: none
	kind byte
}

// detector records a stream of arrivals in the order of time.
type detector struct {
	model   DeadTimeModel
	tau     float64
	after   float64
	decay   float64
	blind   float64 // dead until
	pending []float64
	out     []pulse
	echoes  int
	r       *rand.Rand
}

func (d *detector) flush(until float64) {
	for len(d.pending) > 0 {
		k := 0
		for i, t := range d.pending {
			if t < d.pending[k] {
				k = i
			}
		}
		t := d.pending[k]
		if t > until {
			return
		}
		d.pending[k] = d.pending[len(d.pending)-1]
		d.pending = d.pending[:len(d.pending)-1]
		d.arrive(pulse{t: t, kind: 'a'})
	}
}

func (d *detector) arrive(p pulse) {
	if p.t < d.blind {
		if d.model == Paralysable {
			d.blind = p.t + d.tau
		}
		return
	}
	d.blind = p.t + d.tau
	d.out = append(d.out, p)
	if p.kind == 'a' {
		d.echoes++
	}
	if d.after > 0 && d.r.Float64() < d.after {
		d.pending = append(d.pending, p.t+d.tau+d.decay*d.r.ExpFloat64())
	}
}

// count simulates one gate of t seconds.
func (w world) count(t float64) gateCounts {
	r := w.randomStream
	both := w.pairsHz * w.etaT * w.etaD * w.pathD
	onlyT := w.pairsHz*w.etaT - both
	onlyD := w.pairsHz*w.etaD*w.pathD - both
	if w.spoiled {
		both, onlyT, onlyD = 0, 0, 0
	}
	total := both + onlyT + onlyD + w.noiseT + w.noiseD
	dt := detector{model: w.modelT, tau: w.tauT, after: w.afterT, decay: w.afterDecayS, r: r, blind: -1}
	dd := detector{model: w.modelD, tau: w.tauD, after: w.afterD, decay: w.afterDecayS, r: r, blind: -1}
	n := int(total*t*1.1) + 100
	at, ad := make([]pulse, 0, n), make([]pulse, 0, n)
	now, pair := 0.0, 0
	for {
		now += r.ExpFloat64() / total
		if now > t {
			break
		}
		u := r.Float64() * total
		late := 0.0
		if w.jitterS > 0 {
			late = w.jitterS * r.NormFloat64()
		}
		switch {
		case u < both:
			pair++
			at = append(at, pulse{now, pair, 'p'})
			ad = append(ad, pulse{now + late, pair, 'p'})
		case u < both+onlyT:
			at = append(at, pulse{now, 0, 'p'})
		case u < both+onlyT+onlyD:
			ad = append(ad, pulse{now + late, 0, 'p'})
		case u < both+onlyT+onlyD+w.noiseT:
			at = append(at, pulse{now, 0, 'n'})
		default:
			ad = append(ad, pulse{now, 0, 'n'})
		}
	}
	for i := 1; i < len(ad); i++ { // jitter can swap neighbours
		for k := i; k > 0 && ad[k].t < ad[k-1].t; k-- {
			ad[k], ad[k-1] = ad[k-1], ad[k]
		}
	}
	for _, p := range at {
		dt.flush(p.t)
		dt.arrive(p)
	}
	for _, p := range ad {
		dd.flush(p.t)
		dd.arrive(p)
	}
	c := gateCounts{s: len(dt.out), d: len(dd.out), afterpulsesT: dt.echoes}
	low, far := 0, 0
	for _, p := range dt.out {
		if p.kind == 'p' {
			c.photonHeralds++
		}
		for low < len(dd.out) && dd.out[low].t < p.t-w.windowS/2 {
			low++
		}
		hits := 0
		for k := low; k < len(dd.out) && dd.out[k].t <= p.t+w.windowS/2; k++ {
			hits++
			if p.pair != 0 && dd.out[k].pair == p.pair {
				c.truePairs++
			}
		}
		c.pairs += hits
		c.heralds += min(hits, 1)
		if w.displacedS > 0 {
			from := p.t + w.displacedS
			for far < len(dd.out) && dd.out[far].t < from-w.windowS/2 {
				far++
			}
			for k := far; k < len(dd.out) && dd.out[k].t <= from+w.windowS/2; k++ {
				c.displaced++
			}
		}
	}
	return c
}
