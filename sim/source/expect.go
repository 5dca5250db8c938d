package source

import "math"

// Recorded is what detectors and counter make of rates of detection events, on the average of a
// long gate.
type Recorded struct {
	SignalHz, IdlerHz float64 // recorded singles, afterpulses included
	TrueHz            float64 // coincidences between the two photons of a pair, inside the window
	AccidentalHz      float64 // all others that the counter's logic counts
}

// response is one detector at one rate.
type response struct {
	latched bool
	rate    float64 // recorded, afterpulses included
	fano    float64 // variance over mean of the counts of a long gate
	// Rate of detection events that would leave the same dead time without afterpulses.
	driving float64
	live    float64 // chance to be alive
}

// respond works out a detector at a rate n of events.
//
// Non-paralysable: a renewal process. After each recorded event the detector is dead for tau; the
// next event comes at the rate n, or with the chance p of an afterpulse at the rate n + 1/delay.
// Mean and variance of that time give rate and variance of the counts. Paralysable: rate
// n exp(-n tau), variance over mean 1 - 2 n tau exp(-n tau).
func (d *Detector) respond(n float64) response {
	switch {
	case d.LatchHz > 0 && n > d.LatchHz:
		return response{latched: true, fano: 1}
	case !(n > 0):
		return response{fano: 1, live: 1}
	case d.DeadTimeS > 0 && d.Model == Paralysable:
		x := math.Exp(-n * d.DeadTimeS)
		return response{rate: n * x, fano: 1 - 2*n*d.DeadTimeS*x, driving: n, live: x}
	}
	p := d.Afterpulse
	fast := 1 / n
	if p > 0 {
		fast = d.AfterpulseS / (n*d.AfterpulseS + 1)
	}
	wait := (1-p)/n + p*fast
	second := 2*(1-p)/(n*n) + 2*p*fast*fast
	mean := d.DeadTimeS + wait
	r := response{rate: 1 / mean, fano: (second - wait*wait) / (mean * mean)}
	r.live = wait / mean
	r.driving = 1 / wait
	return r
}

// AfterpulseShare is the share of the recorded events that are afterpulses, at a rate of detection
// events.
func (d *Detector) AfterpulseShare(eventHz float64) float64 {
	return d.Afterpulse / (eventHz*d.AfterpulseS + 1)
}

// WindowCapture is the share of true pairs whose recorded times fall within the window.
func (c Counter) WindowCapture() float64 {
	if c.JitterS <= 0 {
		if math.Abs(c.DelayS) <= c.WindowS/2 {
			return 1
		}
		return 0
	}
	s := c.JitterS * math.Sqrt2
	return (math.Erf((c.WindowS/2-c.DelayS)/s) + math.Erf((c.WindowS/2+c.DelayS)/s)) / 2
}

// Expected says what detectors and counter record at constant rates. The dead times of the two
// detectors are coupled by the pairs (Cox and Isham 1977, recalled from memory): both are alive
// together more often than by chance. Beside a pair that both recorded, a detector that is dead
// for longer than the window finds no accidental partner, so that there are fewer accidentals
// than the product of the singles suggests; the product holds for a window displaced by more
// than the dead times.
func (m *Model) Expected(r Rates) Recorded {
	s, i := m.o.Signal.Detector.respond(r.SignalHz), m.o.Idler.Detector.respond(r.IdlerHz)
	return m.expected(r, s, i)
}

func (m *Model) expected(r Rates, s, i response) Recorded {
	out := Recorded{SignalHz: s.rate, IdlerHz: i.rate}
	if s.latched || i.latched || s.rate == 0 || i.rate == 0 {
		return out
	}
	ds, di := &m.o.Signal.Detector, &m.o.Idler.Detector
	c := min(r.PairsHz, s.driving, i.driving)
	both := bothAlive(ds, di, s, i, c)
	k := m.o.Counter
	k.DelayS += r.DelayS
	out.TrueHz = c * both * k.WindowCapture()
	together := c * both

	// Chances to find a recorded idler event later than a recorded signal event, and the other way
	// round, up to a lag.
	later := func(of, partner response, d, other *Detector, lag float64) float64 {
		tau := other.DeadTimeS
		u := min(lag, tau)
		n := partner.driving
		alone := of.driving - c
		sum := 0.0
		if other.Model == Paralysable && tau > 0 {
			// Alive after the lag only without an event in the whole time before.
			reach := 0.0
			if d.Model == Paralysable {
				reach = d.DeadTimeS
			}
			shift := c * max(0, u-max(0, reach-tau))
			sum = alone * n * both * (u - shift*u/2)
		} else {
			sum = alone * both * -math.Expm1(-n*u)
			if tau > 0 {
				// Dead at first, alive again before the lag is over.
				sum += of.driving * n * max(0, of.live-both) / tau * u * u / 2
			}
		}
		return sum + of.rate*partner.rate*max(0, lag-tau)
	}
	between := func(lo, hi float64, of, partner response, d, other *Detector) float64 {
		return later(of, partner, d, other, max(0, hi)) - later(of, partner, d, other, max(0, lo))
	}
	lo, hi := k.DelayS-k.WindowS/2, k.DelayS+k.WindowS/2
	accidental := between(lo, hi, s, i, ds, di) + between(-hi, -lo, i, s, di, ds)
	if k.Logic == OnePerHerald && di.DeadTimeS < k.WindowS {
		// Several partners of one herald are one. Heralds with their true partner have none to add.
		heralds := s.rate - out.TrueHz
		mean := accidental / s.rate
		if di.DeadTimeS >= k.WindowS/2 {
			mean = accidental / max(s.rate-together, 1e-300)
		}
		accidental = heralds * -math.Expm1(-mean)
	}
	out.AccidentalHz = accidental
	return out
}

// bothAlive is the chance that both detectors are alive, with pairs at the rate c in both.
func bothAlive(ds, di *Detector, s, i response, c float64) float64 {
	ts, ti := ds.DeadTimeS, di.DeadTimeS
	ps, pi := ts > 0 && ds.Model == Paralysable, ti > 0 && di.Model == Paralysable
	a, b := s.driving-c, i.driving-c
	switch {
	case ts == 0 || ti == 0 || c == 0:
		return s.live * i.live
	case ps && pi:
		// No event of either kind for as long as it would matter.
		return math.Exp(-a*ts - b*ti - c*max(ts, ti))
	case pi:
		return math.Exp(-i.driving*ti) * aliveWithout(a, s, ts, ti)
	case ps:
		return math.Exp(-s.driving*ts) * aliveWithout(b, i, ti, ts)
	case ts < ti:
		return bothAlive(di, ds, i, s, c)
	case ts == ti:
		return equalDead(s, i, a, b, ts)
	}
	if max(s.driving*ts, i.driving*ti) < 0.06 {
		return secondOrder(s, i, c, ts, ti)
	}
	return unequalDead(s, i, c, ts, ti)
}

// secondOrder is the chance for a longer dead time ts of the signal to second order in rate times
// dead time: what both lose together is counted once.
func secondOrder(s, i response, c, ts, ti float64) float64 {
	a, b := s.driving-c, i.driving-c
	overlap := func(t float64) float64 { // integral of min(x, ti) from 0 to t
		if t <= ti {
			return t * t / 2
		}
		return ti*ti/2 + (t-ti)*ti
	}
	k := c*ti + s.driving*b*ti*ti/2 + i.driving*a*overlap(ts) + i.driving*c*overlap(ts-ti)
	return (1 - s.rate*ts - i.rate*ti) / (1 - k)
}

// equalDead solves the coupled process for equal non-paralysable dead times. With f(x) the density
// of "signal dead for another x, idler alive" and h(x) that of "idler dead for another tau - x,
// signal alive", both obey y' = n_i f - n_s h; f(tau) = a p and h(0) = b p.
func equalDead(s, i response, a, b, tau float64) float64 {
	ns, ni := s.driving, i.driving
	d := ni - ns
	if math.Abs(d*tau) < 1e-6 {
		return s.live / (1 + (a+b)/2*tau)
	}
	e := math.Exp(d * tau)
	step := d * (a - b*e) / (ni*e - ns) // f - h
	f := (b+step+ns*step/d)*(e-1)/d - ns*step*tau/d
	return s.live / (1 + f - step*tau)
}

// unequalDead solves it for a longer dead time ts of the signal by iteration on a grid.
func unequalDead(s, i response, c, ts, ti float64) float64 {
	// Both dead times as nearly whole cells as can be.
	const most = 192
	cells, miss := most, math.Inf(1)
	for n := most / 2; n <= most; n++ {
		k := ti / ts * float64(n)
		if m := math.Abs(k - math.Round(k)); math.Round(k) >= 1 && m < miss-1e-9 {
			cells, miss = n, m
		}
	}
	h := ts / float64(cells)
	n2 := max(1, int(math.Round(ti/h)))
	a, b := s.driving-c, i.driving-c
	// f[k], g[k]: densities with k cells left; of the signal dead, the idler dead. The chance that
	// both are alive is scaled to 1.
	var f, g [most + 1]float64
	for k := range f {
		f[k] = a
	}
	for k := range n2 + 1 {
		g[k] = b
	}
	keepF, halfF := math.Exp(-i.driving*h), math.Exp(-i.driving*h/2)
	keepG, halfG := math.Exp(-s.driving*h), math.Exp(-s.driving*h/2)
	last := 0.0
	for range 400 {
		// The signal's dead time runs down while the idler, alive, may fire and later recover.
		source := func(k int) float64 {
			if k > cells-n2 {
				return s.driving * g[cells-k]
			}
			return i.driving * f[min(cells, k+n2)]
		}
		now := a
		f[cells] = now
		for k := cells - 1; k >= 0; k-- {
			to := source(k)
			if k == cells-n2 { // there the source jumps; this is its value on the way down
				to = s.driving * g[n2]
			}
			now = now*keepF + h*halfF*(source(k+1)+to)/2
			f[k] = now
			if k == cells-n2 && k > 0 {
				now += c // both fired together; the idler is back first
				f[k] += c / 2
			}
		}
		now = b
		g[n2] = now
		for k := n2 - 1; k >= 0; k-- {
			now = now*keepG + h*halfG*i.driving*(f[n2-k]+f[n2-k-1])/2
			g[k] = now
		}
		sum := 0.0
		for k := range n2 {
			sum += h * (g[k] + g[k+1]) / 2
		}
		if math.Abs(sum-last) < 1e-9*(1+sum) {
			last = sum
			break
		}
		last = sum
	}
	return s.live / (1 + last)
}

// aliveWithout is the chance that a non-paralysable detector of dead time tau is alive after a
// time t in which only events at the rate a came, having been in its steady state before.
func aliveWithout(a float64, d response, tau, t float64) float64 {
	first := func(t float64) float64 {
		if a*t < 1e-9 {
			return d.live * (1 + (d.driving-a)*t)
		}
		return d.live * (math.Exp(-a*t) + d.driving*-math.Expm1(-a*t)/a)
	}
	if t <= tau {
		return first(t)
	}
	const cells = 64
	h := tau / cells
	var before [cells + 1]float64
	for k := range before {
		before[k] = first(float64(k) * h)
	}
	now, k := before[cells], 0
	for at := tau; at < t; at += h {
		step := min(h, t-at)
		k++
		delayed := (before[(k-1)%(cells+1)] + before[k%(cells+1)]) / 2
		next := now*math.Exp(-a*step) + delayed*-math.Expm1(-a*step)
		before[(k-1)%(cells+1)] = now
		now = next
	}
	return now
}
