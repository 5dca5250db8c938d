package source

import (
	"math"
	"testing"
	"time"

	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

// brute integrates the density of pairs over both arms by brute force: points spread evenly over
// the signal aperture, the signal's wavelength and the pump's directions, everything else by
// elementary optics that shares nothing with the model but the published indices.
type brute struct {
	o        Optics
	pose     Pose
	from, to float64 // nm
}

// sums are in the units of Model.integral: what the signal arm sees, and what both see.
func (b brute) sums(n int) (signal, pairs float64) {
	o := b.o
	// The generalised golden ratio of five dimensions spreads points evenly (Roberts 2018).
	phi := 2.0
	for range 100 {
		phi = math.Pow(1+phi, 1./6)
	}
	var step [5]float64
	for i := range step {
		step[i] = math.Pow(phi, -float64(i+1))
	}
	x := [5]float64{0.5, 0.5, 0.5, 0.5, 0.5}
	signalArm, idlerArm := b.arm(&o.Signal, b.pose.SignalDeg), b.arm(&o.Idler, -b.pose.IdlerDeg)
	w := o.PumpWaistUm / 1000
	ct, st := math.Cos(b.pose.TiltDeg*math.Pi/180), math.Sin(b.pose.TiltDeg*math.Pi/180)
	k0p := 2 * math.Pi / (b.pose.PumpNm * 1e-6)
	e := [3]bool{o.Process[0] == 'e', o.Process[2] == 'e', o.Process[3] == 'e'}
	pump := b.indices(b.pose.PumpNm)
	np := b.inside(e[0], pump, k0p, -k0p*st, 0) / k0p
	for range n {
		for i := range x {
			x[i] = math.Mod(x[i]+step[i], 1)
		}
		nm := b.from + (b.to-b.from)*x[0]
		idlerNm := 1 / (1/b.pose.PumpNm - 1/nm)
		// A point of the signal aperture, and its solid angle.
		reach := o.Signal.RadiusMm
		if o.Signal.Aperture == Gaussian {
			reach *= 2.2
		}
		r, a := reach*math.Sqrt(x[1]), 2*math.Pi*x[2]
		px, py := r*math.Cos(a), r*math.Sin(a)
		dir, dist := signalArm.toward(px, py)
		weight := math.Pi * reach * reach * o.Signal.DistanceMm / (dist * dist * dist)
		if o.Signal.Aperture == Gaussian {
			weight *= math.Exp(-2 * r * r / (o.Signal.RadiusMm * o.Signal.RadiusMm))
		}
		weight *= dir[0]*st + dir[2]*ct
		ks, ki := 2*math.Pi/(nm*1e-6), 2*math.Pi/(idlerNm*1e-6)
		sx, sy := ks*(dir[0]*ct-dir[2]*st), ks*dir[1]
		// A direction of the pump from its normal distribution.
		g := math.Sqrt(-2*math.Log(1-x[3])) / w
		qx, qy := -k0p*st+g*math.Cos(2*math.Pi*x[4]), g*math.Sin(2*math.Pi*x[4])
		ix, iy := qx-sx, qy-sy
		is, ii := b.indices(nm), b.indices(idlerNm)
		dk := b.inside(e[0], pump, k0p, qx, qy) - b.inside(e[1], is, ks, sx, sy) - b.inside(e[2], ii, ki, ix, iy)
		t := dk * o.ThicknessMm / 2
		s := 1.0
		if t != 0 {
			s = math.Sin(t) / t
		}
		ws, wi := 2*math.Pi*lightSpeed/(nm*1e-9), 2*math.Pi*lightSpeed/(idlerNm*1e-9)
		n3 := np * b.inside(e[1], is, ks, 0, 0) / ks * b.inside(e[2], ii, ki, 0, 0) / ki
		v := s * s * weight * ks * ks * ws * wi / n3 * 2 * math.Pi * lightSpeed / (nm * nm * 1e-9) * (b.to - b.from) * pass(o.Signal.Filter, nm)
		signal += v
		// Where the partner meets the idler aperture.
		fx, fy := ix/ki, iy/ki
		fn := math.Sqrt(1 - fx*fx - fy*fy)
		d := [3]float64{fx*ct + fn*st, fy, fn*ct - fx*st}
		hx, hy, ok := idlerArm.hit(d)
		if !ok {
			continue
		}
		rr := hx*hx + hy*hy
		share := 0.0
		switch {
		case o.Idler.Aperture == Gaussian:
			share = math.Exp(-2 * rr / (o.Idler.RadiusMm * o.Idler.RadiusMm))
		case rr <= o.Idler.RadiusMm*o.Idler.RadiusMm:
			share = 1
		}
		pairs += v * share * pass(o.Idler.Filter, idlerNm)
	}
	return signal / float64(n), pairs / float64(n)
}

func pass(f Filter, nm float64) float64 {
	switch {
	case f.WidthNm == 0:
		return 1
	case f.Shape == FilterFlat:
		if math.Abs(nm-f.CentreNm) <= f.WidthNm/2 {
			return 1
		}
		return 0
	}
	return math.Pow(2, -math.Pow(2*(nm-f.CentreNm)/f.WidthNm, 2))
}

func (b brute) indices(nm float64) [2]float64 {
	no, _ := b.o.Crystal.Extrapolate(crystal.Ordinary, nm, b.pose.CrystalCel)
	ne, _ := b.o.Crystal.Extrapolate(crystal.Extraordinary, nm, b.pose.CrystalCel)
	return [2]float64{no, ne}
}

// inside is the normal part of a wave vector by repeated refraction, in 1/mm.
func (b brute) inside(extraordinary bool, n [2]float64, k0, qx, qy float64) float64 {
	no, ne := n[0], n[1]
	q2 := qx*qx + qy*qy
	kz := math.Sqrt(no*no*k0*k0 - q2)
	if !extraordinary {
		return kz
	}
	cx, cz := math.Sin(b.o.CutDeg*math.Pi/180), math.Cos(b.o.CutDeg*math.Pi/180)
	for range 6 {
		c := (qx*cx + kz*cz) / math.Sqrt(q2+kz*kz)
		kz = math.Sqrt(k0*k0/(c*c/(no*no)+(1-c*c)/(ne*ne)) - q2)
	}
	return kz
}

// bruteArm is an arm as a plate that stands across its own direction.
type bruteArm struct {
	d       float64
	c, u, v [3]float64
}

func (b brute) arm(a *Arm, angle float64) bruteArm {
	const rad = math.Pi / 180
	az, t, h := b.o.AzimuthDeg*rad, angle*rad, a.OutOfPlaneDeg*rad
	along := [3]float64{math.Cos(az), math.Sin(az), 0}
	across := [3]float64{-math.Sin(az), math.Cos(az), 0}
	out := bruteArm{d: a.DistanceMm}
	for i := range 3 {
		z := [3]float64{0, 0, 1}[i]
		out.c[i] = math.Cos(h)*(math.Sin(t)*along[i]+math.Cos(t)*z) + math.Sin(h)*across[i]
		out.u[i] = math.Cos(t)*along[i] - math.Sin(t)*z
		out.v[i] = math.Cos(h)*across[i] - math.Sin(h)*(math.Sin(t)*along[i]+math.Cos(t)*z)
	}
	return out
}

func (a bruteArm) toward(x, y float64) (dir [3]float64, dist float64) {
	dist = math.Sqrt(a.d*a.d + x*x + y*y)
	for i := range dir {
		dir[i] = (a.d*a.c[i] + x*a.u[i] + y*a.v[i]) / dist
	}
	return dir, dist
}

func (a bruteArm) hit(d [3]float64) (x, y float64, ok bool) {
	dot := func(p, q [3]float64) float64 { return p[0]*q[0] + p[1]*q[1] + p[2]*q[2] }
	ahead := dot(d, a.c)
	return dot(d, a.u) / ahead * a.d, dot(d, a.v) / ahead * a.d, ahead > 0
}

func cases(t testing.TB) []struct {
	name string
	o    Optics
	p    Pose
} {
	type c = struct {
		name string
		o    Optics
		p    Pose
	}
	mod := func(name string, f func(*Optics, *Pose)) c {
		o, p := bench(t), atPeak()
		f(&o, &p)
		return c{name, o, p}
	}
	return []c{
		mod("two irises on the ring", func(o *Optics, p *Pose) {}),
		mod("idler arm off by 0.2 deg", func(o *Optics, p *Pose) { p.IdlerDeg += 0.2 }),
		mod("signal arm off by 0.3 deg, crystal tilted", func(o *Optics, p *Pose) { p.SignalDeg += 0.3; p.TiltDeg = 0.4 }),
		mod("wide idler iris: the plateau", func(o *Optics, p *Pose) { o.Idler.RadiusMm = 12 }),
		mod("wide signal iris", func(o *Optics, p *Pose) { o.Signal.RadiusMm = 6 }),
		mod("two Gaussian modes", func(o *Optics, p *Pose) {
			o.Signal.Aperture, o.Idler.Aperture = Gaussian, Gaussian
			p.IdlerDeg += 0.1
		}),
		mod("Gaussian signal, iris for the idler, out of plane", func(o *Optics, p *Pose) {
			o.Signal.Aperture, o.Signal.OutOfPlaneDeg, o.Idler.OutOfPlaneDeg = Gaussian, 0.1, 0.15
		}),
		mod("long crystal, narrow pump, azimuth 60 deg", func(o *Optics, p *Pose) {
			o.ThicknessMm, o.PumpWaistUm, o.AzimuthDeg = 5, 40, 60
			o.Idler.RadiusMm = 4
		}),
		mod("flat filters, unequal partners", func(o *Optics, p *Pose) {
			o.Signal.Filter = Filter{CentreNm: 780, WidthNm: 10, Shape: FilterFlat}
			o.Idler.Filter = Filter{CentreNm: 842.4, WidthNm: 14, Shape: FilterFlat}
			p.SignalDeg, p.IdlerDeg = 2.84, 3.07
		}),
		mod("type II, both photons polarised", func(o *Optics, p *Pose) {
			o.Process, o.CutDeg, o.AzimuthDeg = phasematch.EOE, 42.5, 90
			o.Signal.Polarised, o.Idler.Polarised = true, true
			p.SignalDeg, p.IdlerDeg = 2.917, 2.917
		}),
		mod("no filter on the idler", func(o *Optics, p *Pose) { o.Idler.Filter = Filter{} }),
	}
}

// TestRatesAgreeWithBruteForceIntegration holds absolute integrals to 1 % and the collected
// fraction to 0.1 % of one.
func TestRatesAgreeWithBruteForceIntegration(t *testing.T) {
	statistics(t)
	const n = 1 << 18 // its own noise is then up to 7e-4 of the fraction; 2^23 points agreed to 1e-4
	for i, c := range cases(t) {
		if testing.Short() && i > 2 {
			break
		}
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			m, err := New(c.o)
			if err != nil {
				t.Fatal(err)
			}
			b := brute{o: c.o, pose: c.p}
			f0, f1 := c.o.Signal.Filter.window()
			b.from, b.to = f0-1, f1+1
			wantS, wantC := b.sums(n)
			got := m.computed(c.p)
			fraction, wantFraction := got[ofPairs]/got[ofSignal], wantC/wantS
			t.Logf("signal %.5g (%+.2g), pairs %.5g (%+.2g), fraction %.5f (%+.2g)", got[ofSignal], got[ofSignal]/wantS-1, got[ofPairs], got[ofPairs]/wantC-1, fraction, fraction-wantFraction)
			if math.Abs(got[ofSignal]/wantS-1) > 0.01 {
				t.Errorf("signal %.6g, brute force %.6g; want 1 %%", got[ofSignal], wantS)
			}
			if math.Abs(got[ofPairs]-wantC) > 0.01*wantC+1e-5*wantS {
				t.Errorf("pairs %.6g, brute force %.6g; want 1 %%", got[ofPairs], wantC)
			}
			if math.Abs(fraction-wantFraction) > 0.001 {
				t.Errorf("collected fraction %.5f, brute force %.5f; want 0.001", fraction, wantFraction)
			}
		})
	}
}

func TestTwiceTheEffortChangesNothingThatMatters(t *testing.T) {
	statistics(t)
	for _, c := range cases(t) {
		m, err := New(c.o)
		if err != nil {
			t.Fatal(err)
		}
		start := time.Now()
		a := m.computed(c.p)
		took := time.Since(start)
		m.effort = 2
		b := m.computed(c.p)
		m.effort = 1
		t.Logf("%-50s %8v  %+.1e %+.1e %+.1e  fraction %+.1e", c.name, took.Round(10*time.Microsecond), a[0]/b[0]-1, a[1]/b[1]-1, a[2]/b[2]-1, a[2]/a[0]-b[2]/b[0])
		for what := range a {
			if math.Abs(a[what]/b[what]-1) > 1e-3 {
				t.Errorf("%s: integral %d is %.6g, with twice the points %.6g", c.name, what, a[what], b[what])
			}
		}
		if math.Abs(a[2]/a[0]-b[2]/b[0]) > 3e-4 {
			t.Errorf("%s: fraction %.6f, with twice the points %.6f", c.name, a[2]/a[0], b[2]/b[0])
		}
	}
}
