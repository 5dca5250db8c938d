package source

import (
	"errors"
	"fmt"
	"math"

	"gemel/sim/phasematch"
)

// frame is the crystal at one tilt, pump wavelength and temperature, with everything that does not
// depend on where the arms stand.
type frame struct {
	tiltDeg, pumpNm, cel float64
	slab                 phasematch.Slab
	ways                 []way
	centre               phasematch.Pair // at the signal filter's centre
	known                map[place]float64
}

// way is one assignment of the two daughters to the two arms. Type I has one; type II has two,
// unless polarisers say which photon goes where.
type way struct {
	signal, idler band // what either arm sees of the pairs, whatever the partner does
	pairs         band
	idlerFirst    bool // pairs has the idler arm's photon as its first
	counts        [3]bool
}

// What is tabulated.
const (
	ofSignal = iota
	ofIdler
	ofPairs
)

// place is a node of the table: which quantity, and where in units of its pitch.
type place struct {
	what          int
	signal, idler int32
	offset        int32
}

func (m *Model) newFrame(tiltDeg, pumpNm, cel float64) *frame {
	o := &m.o
	f := &frame{tiltDeg: tiltDeg, pumpNm: pumpNm, cel: cel, known: map[place]float64{}}
	f.slab = phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, TiltDeg: tiltDeg, ThicknessMm: o.ThicknessMm,
		Cel: cel, PumpNm: pumpNm, PolingUm: o.PolingUm, Extrapolate: o.Extrapolate}
	f.centre, _ = f.slab.At(m.centreNm(pumpNm))
	at := func(a *Arm, angle float64) ray {
		s := newStand(a, o.AzimuthDeg, angle, tiltDeg)
		x, y, _ := s.face(s.centre)
		return ray{x: x, y: y}
	}
	rs, ri := at(&o.Signal, m.typicalDeg[0]), at(&o.Idler, -m.typicalDeg[1])
	swapped := f.slab
	swapped.Process = f.slab.Process.Swapped()
	assign := func(s, i phasematch.Slab, counts [3]bool) way {
		w := way{idlerFirst: m.idlerFirst, counts: counts}
		w.signal = newBand(m.rules, s, o.Signal.Filter, nil, rs, m.effort)
		w.idler = newBand(m.rules, i, o.Idler.Filter, nil, ri, m.effort)
		if w.idlerFirst {
			w.pairs = newBand(m.rules, i, o.Idler.Filter, &o.Signal.Filter, ri, m.effort)
		} else {
			w.pairs = newBand(m.rules, s, o.Signal.Filter, &o.Idler.Filter, rs, m.effort)
		}
		return w
	}
	f.ways = append(f.ways, assign(f.slab, swapped, [3]bool{true, true, true}))
	if swapped.Process != f.slab.Process {
		s, i := !o.Signal.Polarised, !o.Idler.Polarised
		if s || i {
			f.ways = append(f.ways, assign(swapped, f.slab, [3]bool{s, i, s && i}))
		}
	}
	return f
}

// centreNm is the signal wavelength that stands for all: the filter's centre, or degenerate.
func (m *Model) centreNm(pumpNm float64) float64 { return m.o.centreNm(pumpNm) }

func (o *Optics) centreNm(pumpNm float64) float64 {
	if f := o.Signal.Filter; f.WidthNm > 0 {
		return f.CentreNm
	}
	return 2 * pumpNm
}

// integral is one quantity with the arms at angles and an offset added to the mismatch, in the
// units of G without d² P L² and constants.
func (m *Model) integral(f *frame, what int, signalDeg, idlerDeg, offset float64) float64 {
	waist := m.o.PumpWaistUm / 1000
	signal := newStand(&m.o.Signal, m.o.AzimuthDeg, signalDeg, f.tiltDeg)
	idler := newStand(&m.o.Idler, m.o.AzimuthDeg, -idlerDeg, f.tiltDeg)
	total := 0.0
	for i := range f.ways {
		w := &f.ways[i]
		if !w.counts[what] {
			continue
		}
		switch what {
		case ofSignal:
			total += w.signal.single(m.rules, m.rays(&w.signal, &signal, false), waist, offset, m.effort)
		case ofIdler:
			total += w.idler.single(m.rules, m.rays(&w.idler, &idler, false), waist, offset, m.effort)
		case ofPairs:
			first, other := &signal, &idler
			if w.idlerFirst {
				first, other = other, first
			}
			total += w.pairs.both(m.rules, m.rays(&w.pairs, first, true), other, waist, offset, m.effort, nil)
		}
	}
	if math.IsNaN(total) {
		return 0 // a slab turned so far that no pump enters
	}
	return total
}

// rays fills a stand's aperture as finely as the mismatch turns across it, and for pairs also as
// finely as the partners' spread is small.
func (m *Model) rays(b *band, s *stand, pairs bool) []ray {
	if len(b.colours) == 0 {
		return nil
	}
	phase, k, _ := m.turns(b, s)
	if math.IsNaN(phase) {
		return nil
	}
	open := s.arm.RadiusMm / s.arm.DistanceMm
	edge := 0.0
	if pairs {
		edge = min(k*open*m.o.PumpWaistUm/1000, 12)
	}
	if s.arm.Aperture == Gaussian {
		return s.rays(m.rules, points((6+1.5*phase+1.3*edge)*m.effort, 3, mostEvenly), points((6+1.3*edge)*m.effort, 4, mostEvenly), m.mirrored)
	}
	if !pairs {
		return s.rays(m.rules, points((2.6+0.77*phase)*m.effort, 2, 48), points((6.8+1.7*phase)*m.effort, 6, 96), m.mirrored)
	}
	return s.rays(m.rules, points((1.6+0.55*phase+0.5*edge)*m.effort, 2, 48), points((5+1.2*phase+1.2*edge)*m.effort, 6, 96), m.mirrored)
}

// turns says by how many radians the phase of the mismatch turns across a stand's aperture, and
// across the pump's own directions (1/e² radii); k is the first photon's wavenumber, 1/mm.
func (m *Model) turns(b *band, s *stand) (aperture, k, pump float64) {
	p := &b.colours[len(b.colours)/2].pair
	_, k, _ = p.Wavenumbers()
	x, y, _ := s.face(s.centre)
	gx, gy := p.SignalSlope(k*x, k*y)
	open := s.arm.RadiusMm / s.arm.DistanceMm
	half := b.slab.ThicknessMm / 2
	px, py := p.PartnerSlope(k*x, k*y)
	return half * k * open * (math.Hypot(gx, gy) + open), k, half * math.Hypot(px, py) / (m.o.PumpWaistUm / 1000)
}

// What the numbers of quadrature points reach for.
const (
	mostTurnsAperture = 50
	mostTurnsPump     = 39
)

// resolved refuses optics whose mismatch turns faster than the integration can follow.
func (m *Model) resolved(f *frame) error {
	var errs []error
	for i := range f.ways {
		for _, x := range []struct {
			name  string
			arm   *Arm
			band  *band
			angle float64
		}{{"signal", &m.o.Signal, &f.ways[i].signal, m.typicalDeg[0]}, {"idler", &m.o.Idler, &f.ways[i].idler, -m.typicalDeg[1]}} {
			if len(x.band.colours) == 0 {
				continue
			}
			s := newStand(x.arm, m.o.AzimuthDeg, x.angle, f.tiltDeg)
			aperture, _, pump := m.turns(x.band, &s)
			if aperture > mostTurnsAperture {
				errs = append(errs, fmt.Errorf("source: across the %s aperture the mismatch turns by %.0f rad; want %d or less: a shorter crystal or a smaller aperture", x.name, aperture, mostTurnsAperture))
			}
			if pump > mostTurnsPump {
				errs = append(errs, fmt.Errorf("source: over the pump's own directions the %s's mismatch turns by %.0f rad; want %d or less: a shorter crystal or a wider waist", x.name, pump, mostTurnsPump))
			}
		}
	}
	return errors.Join(errs...)
}

// at is a node of the table, computed when it is first asked for.
func (m *Model) at(f *frame, p place) float64 {
	if v, ok := f.known[p]; ok {
		return v
	}
	h := m.pitchDeg[p.what]
	v := m.integral(f, p.what, float64(p.signal)*h, float64(p.idler)*h, float64(p.offset)*m.pitchOffset)
	f.known[p] = v
	return v
}

// near is the smallest share of a pitch that is worth another node: what it leaves out is less
// than a thousandth of the peak.
const near = 1e-3

// interpolate reads the table between its nodes: a parabola through three nodes in each
// coordinate and the mixed terms of the quadrant, around the nearest node. x are the coordinates
// (signal, idler, offset) in units of the pitch; those of arms that do not matter are 0.
func (m *Model) interpolate(f *frame, what int, x [3]float64) float64 {
	var n [3]int32
	var d [3]float64
	for i := range x {
		r := math.Round(x[i])
		n[i], d[i] = int32(r), x[i]-r
	}
	node := func(step [3]int32) float64 {
		return m.at(f, place{what, n[0] + step[0], n[1] + step[1], n[2] + step[2]})
	}
	centre := node([3]int32{})
	v := centre
	var toward [3]float64
	var sign [3]int32
	for i := range d {
		if math.Abs(d[i]) < near {
			continue
		}
		var up, down [3]int32
		up[i], down[i] = 1, -1
		a, b := node(up), node(down)
		v += d[i]*(a-b)/2 + d[i]*d[i]*(a-2*centre+b)/2
		if sign[i], toward[i] = 1, a; d[i] < 0 {
			sign[i], toward[i] = -1, b
		}
	}
	for i := range d {
		for j := range i {
			if sign[i] == 0 || sign[j] == 0 || math.Abs(d[i]*d[j]) < near {
				continue
			}
			var step [3]int32
			step[i], step[j] = sign[i], sign[j]
			v += math.Abs(d[i]*d[j]) * (node(step) - toward[i] - toward[j] + centre)
		}
	}
	return max(0, v)
}
