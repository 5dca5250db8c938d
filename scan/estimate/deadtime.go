package estimate

import (
	"errors"
	"fmt"
	"math"
)

// DeadTimeModel says what an event does that meets a dead detector.
type DeadTimeModel string

// The models (Knoll, Radiation Detection and Measurement).
const (
	NonParalysable DeadTimeModel = "non-paralysable" // it is lost
	Paralysable    DeadTimeModel = "paralysable"     // it is lost, and starts the dead time anew
)

// ErrNoRate marks an observed rate that no true rate can produce.
var ErrNoRate = errors.New("no true rate gives this observed rate")

// Observed returns the rate (1/s) that a detector of this model and dead time (s) records at a
// true rate (1/s): n/(1+n tau), or n exp(-n tau) (Knoll, Radiation Detection and Measurement).
func (m DeadTimeModel) Observed(trueHz, tauS float64) float64 {
	if m == Paralysable {
		return trueHz * math.Exp(-trueHz*tauS)
	}
	return trueHz / (1 + trueHz*tauS)
}

// True inverts Observed. The paralysable model has two solutions, -W(-m tau)/tau by the two real
// branches of Lambert's function; high asks for the upper one (a detector choked by light). The
// non-paralysable model has one, m/(1 - m tau), and ErrNoRate for high. Where there is no
// solution (m tau >= 1, or above 1/e) the error wraps ErrNoRate.
func (m DeadTimeModel) True(observedHz, tauS float64, high bool) (float64, error) {
	load := observedHz * tauS
	switch {
	case observedHz < 0 || tauS < 0 || math.IsNaN(load):
		return 0, fmt.Errorf("observed rate %g /s with dead time %g s; want neither negative", observedHz, tauS)
	case m == Paralysable:
		if load > 1/math.E {
			return 0, fmt.Errorf("observed rate times dead time is %.4g; want at most 1/e for the paralysable model: %w", load, ErrNoRate)
		}
		if load == 0 {
			if high {
				return 0, fmt.Errorf("observed rate times dead time is 0: %w", ErrNoRate)
			}
			return observedHz, nil
		}
		return -lambertW(-load, high) / tauS, nil
	case high:
		return 0, fmt.Errorf("the non-paralysable model has one branch only: %w", ErrNoRate)
	case load >= 1:
		return 0, fmt.Errorf("observed rate times dead time is %.4g; want below 1 for the non-paralysable model: %w", load, ErrNoRate)
	}
	return observedHz / (1 - load), nil
}

// lambertW solves w e^w = x for -1/e <= x < 0 on the principal branch (w >= -1), or on the lower
// one (w <= -1), by Halley's iteration.
func lambertW(x float64, lower bool) float64 {
	p := math.Sqrt(math.Max(0, 2*(math.E*x+1))) // distance from the branch point
	w := -1 + p - p*p/3
	if lower {
		w = -1 - p - p*p/3
		if x > -0.1 {
			l := math.Log(-x)
			w = l - math.Log(-l)
		}
	}
	for range 60 {
		e := math.Exp(w)
		f := w*e - x
		if w == -1 {
			return w
		}
		step := f / (e*(w+1) - (w+2)*f/(2*w+2))
		w -= step
		if math.Abs(step) <= 1e-16*math.Abs(w) {
			break
		}
	}
	return w
}

// TwoSources returns the non-paralysable dead time (s) from the rates observed (1/s) with either
// of two sources, with both together, and with none. Formula as Knoll (recalled from memory);
// its inversion is exact. The two lights must not interfere.
func TwoSources(firstHz, secondHz, bothHz, noneHz float64) (float64, error) {
	x := firstHz*secondHz - noneHz*bothHz
	y := firstHz*secondHz*(bothHz+noneHz) - noneHz*bothHz*(firstHz+secondHz)
	z := y * (firstHz + secondHz - bothHz - noneHz) / (x * x)
	if !(z >= 0 && z <= 1) || y == 0 {
		return 0, fmt.Errorf("rates %g, %g, both %g, none %g /s; want rates that a dead time can explain", firstHz, secondHz, bothHz, noneHz)
	}
	return x * (1 - math.Sqrt(1-z)) / y, nil
}

// PileUp returns the chance that another pulse follows within tauS (s) at a true rate (1/s):
// 1 - exp(-n tau) (Poisson).
func PileUp(trueHz, tauS float64) float64 { return -math.Expm1(-trueHz * tauS) }

// deadPair is two detectors that share pairs: true rates (1/s), pairs included in both, and dead
// times (s).
type deadPair struct {
	modelT, modelD DeadTimeModel
	nT, nD, nPair  float64
	tauT, tauD     float64
}

// live returns the chance that D is live when T is, exactly, under Poisson arrivals. With both
// paralysable, neither saw a photon during its dead time, so with a = min(tauT, tauD) the joint
// chance is exp(-nT tauT - nD tauD + nPair a). The other cases are worked out below; all were
// derived here and are held by TestCoupledDeadTimesAgreeWithEvents. Cox and Isham (1977) and Smith
// (1978) are said to give the exact theory, recalled from memory. Jitter between partners is
// taken as short against the dead times, and afterpulses as ordinary counts.
func (p deadPair) live() float64 {
	if p.modelT == Paralysable && p.modelD == Paralysable {
		return math.Exp(-p.nD*p.tauD + p.nPair*math.Min(p.tauT, p.tauD))
	}
	aliveT := p.modelT.Observed(p.nT, p.tauT) / p.nT
	switch {
	case p.modelT == Paralysable:
		return quietAndLive(p.nT, p.tauT, p.nD, p.tauD, p.nPair) / aliveT
	case p.modelD == Paralysable:
		return quietAndLive(p.nD, p.tauD, p.nT, p.tauT, p.nPair) / aliveT
	}
	return p.jointNonParalysable() / aliveT
}

// quietAndLive is the chance that a paralysable detector saw nothing for its dead time and a
// non-paralysable one is live. While the first sees nothing the second sees no pairs, so its
// chance p of being live goes by p'(s) = -n' p(s) + what it recorded a dead time ago, n' = n - nPair.
func quietAndLive(quietHz, quietS, n, tau, nPair float64) float64 {
	alive := 1 / (1 + n*tau)
	slow := n - nPair
	const steps, most = 64, 40 // to a dead time; dead times until nothing is remembered
	h := tau / steps
	span := math.Min(quietS, most*tau)
	p := []float64{alive}
	for s := 0.; s < span && h > 0; {
		d := math.Min(h, span-s)
		fed := n * alive // in the middle of the step
		if k := len(p) - 1; k >= steps {
			fed = slow * (p[k-steps] + (p[k-steps+1]-p[k-steps])*d/h/2)
		}
		now := p[len(p)-1]
		p = append(p, (now*(1-d*slow/2)+d*fed)/(1+d*slow/2))
		s += d
		if d < h*(1-1e-9) {
			break
		}
	}
	return math.Exp(-quietHz*quietS) * p[len(p)-1]
}

// jointNonParalysable returns the chance that both are live. Let D have the longer dead time, q(x)
// be the density of "T dead for another x, D live", r(y) the same with T and D exchanged, and P the
// chance looked for. A state with both dead cannot change but by running out, so with u = tauD - y
//
//	q'(x) = nD q(x) - nT r(u = tauD-tauT+x),              q(tauT) = (nT-nPair) P
//	r'(u) = -nT r(u) + nD q(u)       for u < tauT,       r(u = 0) = (nD-nPair) P
//	r'(u) = -nT r(u) + nT r(u-tauT)  for u > tauT,       r rises by nPair P at u = tauT
//
// and D is live for 1/(1+nD tauD) of the time. Solved for P = 1 by sweeps, which converge like
// powers of n tau.
func (p deadPair) jointNonParalysable() float64 {
	if p.tauD < p.tauT {
		p.nT, p.nD, p.tauT, p.tauD = p.nD, p.nT, p.tauD, p.tauT
	}
	if p.tauT <= 1e-4*p.tauD { // the first order in the short one is as good as exact, and needs no grid
		return (1 + p.nPair*p.tauT) / ((1 + p.nD*p.tauD) * (1 + p.nT*p.tauT))
	}
	steps := min(128, max(16, int(256*p.tauT/p.tauD)))
	h := p.tauT / float64(steps)
	gap := p.tauD - p.tauT
	q := make([]float64, steps+1)
	early := make([]float64, steps+1)     // r for u = 0 .. tauT
	late := make([]float64, int(gap/h)+2) // r for u = tauT .. tauD and a little more
	at := func(r []float64, u float64) float64 {
		k := u / h
		i := min(int(k), len(r)-2)
		f := k - float64(i)
		return r[i]*(1-f) + r[i+1]*f
	}
	fed := func(x float64) float64 { // r(u = gap + x)
		if u := gap + x; u < p.tauT {
			return at(early, u)
		}
		return at(late, gap+x-p.tauT)
	}
	jump := p.tauT - gap // the x at which fed jumps
	for i := range q {
		q[i], early[i] = p.nT-p.nPair, p.nD-p.nPair
	}
	for range 200 {
		change := 0.0
		late[0] = early[steps] + p.nPair
		for i := 1; i < len(late); i++ {
			before := func(k int) float64 {
				if k <= steps {
					return early[k]
				}
				return late[k-steps]
			}
			first := before(i - 1)
			if i-1 == steps {
				first = late[0]
			}
			late[i] = (late[i-1]*(1-h*p.nT/2) + h*p.nT*(first+before(i))/2) / (1 + h*p.nT/2)
		}
		q[steps] = p.nT - p.nPair
		next := fed(p.tauT)
		for i := steps - 1; i >= 0; i-- {
			x := float64(i) * h
			here := fed(x)
			mean := (here + next) / 2
			if x < jump && jump <= x+h {
				mean = ((here+early[steps])*(jump-x) + (late[0]+next)*(x+h-jump)) / (2 * h)
			}
			q[i] = (q[i+1]*(1-h*p.nD/2) + h*p.nT*mean) / (1 + h*p.nD/2)
			next = here
		}
		early[0] = p.nD - p.nPair
		for i := 1; i <= steps; i++ {
			v := (early[i-1]*(1-h*p.nT/2) + h*p.nD*(q[i-1]+q[i])/2) / (1 + h*p.nT/2)
			change = math.Max(change, math.Abs(v-early[i]))
			early[i] = v
		}
		if change <= 1e-12*p.nD {
			break
		}
	}
	sum := (q[0] + q[steps]) / 2
	for i := 1; i < steps; i++ {
		sum += q[i]
	}
	// D is live when both are, or when T alone is dead.
	return 1 / ((1 + p.nD*p.tauD) * (1 + sum*h))
}

// DeadTimeLoss returns the share of heralded photons that found the tested detector D live, from
// what was recorded: rates of T, D and of true coincidences (1/s), and dead times (s). To first
// order it is 1 - mD tauD + RC min(tauT, tauD), which is where the exact forms behind it
// (deadPair.live) start.
func DeadTimeLoss(modelT, modelD DeadTimeModel, mT, mD, pairHz, tauT, tauD float64) (float64, error) {
	nT, err := modelT.True(mT, tauT, false)
	if err != nil {
		return 0, fmt.Errorf("trigger: %w", err)
	}
	nD, err := modelD.True(mD, tauD, false)
	if err != nil {
		return 0, fmt.Errorf("detector under test: %w", err)
	}
	if mT <= 0 || mD <= 0 {
		return 1, nil
	}
	p := deadPair{modelT: modelT, modelD: modelD, nT: nT, nD: nD, tauT: tauT, tauD: tauD, nPair: pairHz}
	loss := 1.0
	for range 30 {
		loss = p.live()
		// pairHz = nPair × chance that both are live = nPair × (mT/nT) × loss
		pair := math.Min(pairHz*nT/(mT*loss), math.Min(nT, nD))
		if math.Abs(pair-p.nPair) <= 1e-13*pair {
			break
		}
		p.nPair = pair
	}
	return loss, nil
}
