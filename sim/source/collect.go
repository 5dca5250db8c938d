package source

import "math"

// Collection is what apertures and filters make of the pairs, before transmittances and detectors.
type Collection struct {
	SignalHz, IdlerHz float64 // pairs a second whose photon passes the arm's aperture and filter
	BothHz            float64 // pairs a second of which both do
	// Fraction is the share of the signal arm's pairs whose partner passes the idler arm's aperture
	// and filter; ApertureFraction takes the idler's filter away.
	Fraction         float64
	ApertureFraction float64
	Signal, Idler    Bandwidth // of the pairs of which both pass
}

// Bandwidth is a range of wavelengths.
type Bandwidth struct {
	CentreNm float64 // mean
	FWHMNm   float64 // between the outermost half maxima
	RMSNm    float64
}

// Collect integrates over both arms at a pose, shutters open.
func (m *Model) Collect(p Pose) Collection {
	m = m.with(p.RadiusMm)
	p.SignalOpen, p.IdlerOpen = 1, 1
	w := m.pairW(p) * m.scale
	c := m.computed(p)
	out := Collection{SignalHz: w * c[ofSignal], IdlerHz: w * c[ofIdler], BothHz: w * c[ofPairs]}
	if c[ofSignal] > 0 {
		out.Fraction = min(1, c[ofPairs]/c[ofSignal])
		open := Model{o: m.o, rules: m.rules, effort: m.effort, mirrored: m.mirrored, idlerFirst: m.idlerFirst, typicalDeg: m.typicalDeg}
		open.o.Idler.Filter = Filter{}
		f := open.newFrame(p.TiltDeg, m.pumpNm(p), p.CrystalCel)
		out.ApertureFraction = min(1, open.integral(f, ofPairs, p.SignalDeg, p.IdlerDeg, 0)/c[ofSignal])
	}
	out.Signal, out.Idler = m.bandwidth(p)
	return out
}

// bandwidth looks at the spectrum of the pairs that both arms take, on a grid fine enough to see
// its half maxima.
func (m *Model) bandwidth(p Pose) (signal, idler Bandwidth) {
	const grid = 241
	f := m.newFrame(p.TiltDeg, m.pumpNm(p), p.CrystalCel)
	o := &m.o
	s := newStand(&o.Signal, o.AzimuthDeg, p.SignalDeg, p.TiltDeg)
	i := newStand(&o.Idler, o.AzimuthDeg, -p.IdlerDeg, p.TiltDeg)
	type line struct{ signalNm, idlerNm, share float64 }
	var lines []line
	for _, w := range f.ways {
		if !w.counts[ofPairs] {
			continue
		}
		b := band{slab: w.signal.slab}
		lo, hi := b.slab.Band()
		f0, f1 := o.Signal.Filter.window()
		lo, hi = max(lo, f0), min(hi, f1)
		for k := range grid {
			nm := lo + (hi-lo)*(float64(k)+0.5)/grid
			pair, err := b.slab.At(nm)
			if err != nil {
				continue
			}
			// Per wavelength, so that the same grid serves both arms.
			weight := o.Signal.Filter.Passes(nm) * o.Idler.Filter.Passes(pair.IdlerNm) / (nm * nm * nm * pair.IdlerNm)
			b.colours = append(b.colours, colour{pair, weight})
		}
		spectrum := make([]float64, len(b.colours))
		b.both(m.rules, m.rays(&b, &s, true), &i, o.PumpWaistUm/1000, 0, m.effort, spectrum)
		for k := range spectrum {
			lines = append(lines, line{b.colours[k].pair.SignalNm, b.colours[k].pair.IdlerNm, spectrum[k]})
		}
	}
	measure := func(nm func(line) float64) Bandwidth {
		var sum, mean, square, top float64
		for _, l := range lines {
			sum += l.share
			mean += l.share * nm(l)
			top = max(top, l.share)
		}
		if !(sum > 0) {
			return Bandwidth{}
		}
		mean /= sum
		first, last := math.NaN(), math.NaN()
		for k, l := range lines {
			square += l.share * (nm(l) - mean) * (nm(l) - mean)
			if k == 0 {
				continue
			}
			before := lines[k-1]
			if (l.share >= top/2) != (before.share >= top/2) {
				x := nm(before) + (nm(l)-nm(before))*(top/2-before.share)/(l.share-before.share)
				if math.IsNaN(first) {
					first = x
				}
				last = x
			}
		}
		out := Bandwidth{CentreNm: mean, RMSNm: math.Sqrt(square / sum)}
		if width := math.Abs(last - first); width > 0 {
			out.FWHMNm = width
		}
		return out
	}
	return measure(func(l line) float64 { return l.signalNm }), measure(func(l line) float64 { return l.idlerNm })
}

// Peak is the shape of a rate over an arm's angle, through the arm's real aperture and filter.
type Peak struct {
	MaximumDeg  float64
	MiddleDeg   float64 // midway between the half maxima: where a top is flat, the peak
	CentroidDeg float64 // of everything above a tenth of the maximum
	FWHMDeg     float64
}

// Peaks are the shapes that sweeps around the bare emission find.
type Peaks struct {
	SignalSingles, IdlerSingles Peak // background left out
	PairsOverSignal             Peak // the idler arm on the bare emission
	PairsOverIdler              Peak // the signal arm on the bare emission
	PairsOverBoth               Peak // over the signal arm, the idler arm following in proportion
}

// Peaks sweeps both arms through the reference without noise.
func (m *Model) Peaks() Peaks { return m.peaks(0, m.typicalDeg[0], m.typicalDeg[1]) }

// peaks sweeps both arms through two angles, with the crystal at a tilt.
func (m *Model) peaks(tiltDeg, s, i float64) Peaks {
	f := m.newFrame(tiltDeg, m.o.PumpNm, m.o.CrystalCel)
	ratio := 1.0
	if s > 0 {
		ratio = i / s
	}
	over := func(what int, at float64, moved *Arm, angles func(float64) (float64, float64)) Peak {
		// No profile is much narrower than the aperture that is swept across it.
		step := max(2*m.pitchDeg[what], 0.35*moved.RadiusMm/moved.DistanceMm/deg)
		return shape(at, step, func(x float64) float64 {
			a, b := angles(x)
			return m.integral(f, what, a, b, 0)
		})
	}
	return Peaks{
		SignalSingles:   over(ofSignal, s, &m.o.Signal, func(x float64) (float64, float64) { return x, i }),
		IdlerSingles:    over(ofIdler, i, &m.o.Idler, func(x float64) (float64, float64) { return s, x }),
		PairsOverSignal: over(ofPairs, s, &m.o.Signal, func(x float64) (float64, float64) { return x, i }),
		PairsOverIdler:  over(ofPairs, i, &m.o.Idler, func(x float64) (float64, float64) { return s, x }),
		PairsOverBoth:   over(ofPairs, s, &m.o.Signal, func(x float64) (float64, float64) { return x, x * ratio }),
	}
}

// shape samples a peak at and around an angle until it has fallen to a tenth on both sides.
func shape(at, step float64, rate func(float64) float64) Peak {
	var x, y []float64
	const most = 60
	top := rate(at)
	x, y = append(x, at), append(y, top)
	for _, side := range []float64{-1, 1} {
		for k := 1; k <= most; k++ {
			a := at + side*float64(k)*step
			if a <= 0 { // a ring that covers the axis ends there
				break
			}
			v := rate(a)
			top = max(top, v)
			if side < 0 {
				x, y = append([]float64{a}, x...), append([]float64{v}, y...)
			} else {
				x, y = append(x, a), append(y, v)
			}
			if v < top/20 {
				break
			}
		}
	}
	best := 0
	for k := range y {
		if y[k] > y[best] {
			best = k
		}
	}
	p := Peak{MaximumDeg: x[best]}
	if best > 0 && best < len(x)-1 {
		p.MaximumDeg += summit(step, y[best-1], y[best], y[best+1])
		// Again on a finer grid: the flanks bend a parabola that reaches as far as they.
		near := step / 4
		if lo := p.MaximumDeg - near; lo > 0 {
			p.MaximumDeg += summit(near, rate(lo), rate(p.MaximumDeg), rate(p.MaximumDeg+near))
		}
	}
	half := y[best] / 2
	first, last := x[0], x[len(x)-1]
	sum, mean := 0.0, 0.0
	for k := range x {
		if y[k] >= y[best]/10 {
			sum += y[k]
			mean += y[k] * x[k]
		}
		if k == 0 {
			continue
		}
		switch {
		case k <= best && y[k-1] < half && y[k] >= half:
			first = crossing(rate, half, x[k-1], x[k], y[k-1], y[k])
		case k > best && y[k-1] >= half && y[k] < half:
			last = crossing(rate, half, x[k-1], x[k], y[k-1], y[k])
		}
	}
	p.CentroidDeg, p.MiddleDeg, p.FWHMDeg = mean/sum, (first+last)/2, last-first
	return p
}

// summit is where the parabola through the logarithms of three neighbours is highest, as seen from
// the middle one.
func summit(step, left, middle, right float64) float64 {
	a, b, c := math.Log(left), math.Log(middle), math.Log(right)
	if d := a - 2*b + c; d < 0 && !math.IsInf(d, -1) {
		return max(-step, min(step, step/2*(a-c)/d))
	}
	return 0
}

// crossing is where a rate passes a height between two angles; five chords find it to 1e-5 of their
// distance.
func crossing(rate func(float64) float64, height, a, b, ya, yb float64) float64 {
	at := a
	for range 5 {
		at = a + (b-a)*(height-ya)/(yb-ya)
		y := rate(at)
		if (y < height) == (ya < height) {
			a, ya = at, y
		} else {
			b, yb = at, y
		}
	}
	return at
}
