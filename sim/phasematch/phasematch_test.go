package phasematch

import (
	"math"
	"math/rand/v2"
	"sync"
	"testing"
	"time"

	"gemel/sim/crystal"
)

func set(t testing.TB, name string) crystal.Set {
	t.Helper()
	s, err := crystal.Named(name)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// bbo is made once: the random cases ask for it tens of thousands of times.
var bbo = sync.OnceValue(func() crystal.Set {
	s, err := crystal.Named("bbo-kato-1986")
	if err != nil {
		panic(err)
	}
	return s
})

// slab returns a BBO slab for a violet pump; the check values use the same.
func slab(t testing.TB) Slab {
	t.Helper()
	return Slab{Crystal: bbo(), Process: EOO, CutDeg: 29.2, ThicknessMm: 2, Cel: 20, PumpNm: 405}
}

func at(t testing.TB, s Slab, nm float64) Pair {
	t.Helper()
	p, err := s.At(nm)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

// random draws a slab of one of three negative or positive crystals whose ring is likely open.
func random(rng *rand.Rand, base Slab) (Slab, float64, float64) {
	base.CutDeg += rng.Float64()*6 - 1
	base.TiltDeg = rng.Float64()*12 - 4
	nm := 2 * base.PumpNm * (0.85 + 0.35*rng.Float64())
	return base, nm, rng.Float64() * 360
}

// cone is the second route: for two ordinary daughters the internal wave vectors close a triangle
// with the pump's, so the signal lies on a cone around the pump with a half-angle from the law of
// cosines. It returns the direction in air at a position on the cone.
func cone(s Slab, nm, chi float64) (polar, azimuth float64, ok bool) {
	n := func(a crystal.Axis, nm float64) float64 {
		v, _ := s.Crystal.Index(a, nm, s.Cel)
		return v
	}
	idler := 1 / (1/s.PumpNm - 1/nm)
	no, ne := n("o", s.PumpNm), n("e", s.PumpNm)
	// The refracted tilt by fixed-point iteration on Snell's law.
	tilt, beta := s.TiltDeg*deg, 0.0
	np := no
	for range 200 {
		axis := s.CutDeg*deg + beta
		np = 1 / math.Sqrt(math.Pow(math.Cos(axis)/no, 2)+math.Pow(math.Sin(axis)/ne, 2))
		beta = math.Asin(math.Sin(tilt) / np)
	}
	kp, ks, ki := np/s.PumpNm, n("o", nm)/nm, n("o", idler)/idler
	c := (kp*kp + ks*ks - ki*ki) / (2 * kp * ks)
	if c > 1 {
		return 0, 0, false
	}
	si := math.Sqrt(1 - c*c)
	// Axes inside, on the face: the pump leans by beta against the normal.
	sb, cb := math.Sincos(beta)
	x := ks * (c*-sb + si*math.Cos(chi)*cb)
	y := ks * si * math.Sin(chi)
	// Outside: the momentum along the face is kept.
	ox, oy := x*nm, y*nm
	if ox*ox+oy*oy >= 1 {
		return 0, 0, false
	}
	oz := math.Sqrt(1 - ox*ox - oy*oy)
	st, ct := math.Sincos(tilt)
	lx, lz := ox*ct+oz*st, oz*ct-ox*st
	return math.Atan2(math.Hypot(lx, oy), lz) / deg, math.Atan2(oy, lx) / deg, true
}

func TestClosedFormAndVectorSolverAgreeOnRandomTiltsAndAzimuths(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 1))
	base := slab(t)
	compared, worst := 0, 0.0
	for range 20000 {
		s, nm, chi := random(rng, base)
		polar, azimuth, ok := cone(s, nm, chi*deg)
		if !ok || polar > 60 {
			continue
		}
		p := at(t, s, nm)
		e := p.Emission(azimuth)
		nearest := math.Inf(1)
		for _, r := range e.Root[:e.N] {
			nearest = min(nearest, math.Abs(r.Signal.PolarDeg-polar))
		}
		compared++
		// Near the collinear direction the root is double and any rounding grows: compare where
		// the ring is wider than a tenth of a degree.
		if polar > 0.1 {
			worst = max(worst, nearest)
		}
		if polar > 0.1 && nearest > 1e-9 {
			t.Fatalf("cut %g tilt %g signal %g azimuth %g: cone %.12g, solver %+v", s.CutDeg, s.TiltDeg, nm, azimuth, polar, e)
		}
	}
	if compared < 5000 {
		t.Errorf("%d cases compared; want thousands", compared)
	}
	t.Logf("%d cases, worst difference %.2g deg", compared, worst)
}

func TestUntiltedClosedFormAgreesWithTheVectorSolver(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 2))
	compared := 0
	for range 5000 {
		s, nm, azimuth := random(rng, slab(t))
		s.TiltDeg = 0
		p := at(t, s, nm)
		signal, idler, ok := p.RingDeg()
		e := p.Emission(azimuth)
		if ok != (e.N == 1) {
			t.Fatalf("cut %g signal %g: closed form %v, solver %d roots", s.CutDeg, nm, ok, e.N)
		}
		if !ok || signal < 0.1 {
			continue
		}
		compared++
		if d := max(math.Abs(signal-e.Root[0].Signal.PolarDeg), math.Abs(idler-e.Root[0].Idler.PolarDeg)); d > 1e-9 {
			t.Fatalf("cut %g signal %g: closed form %.12g and %.12g, solver %+v", s.CutDeg, nm, signal, idler, e.Root[0])
		}
	}
	if compared < 2000 {
		t.Errorf("%d cases compared; want thousands", compared)
	}
}

// positive is an invented crystal that matches all three processes of a positive one: BBO with the
// names of its axes exchanged.
var positive = sync.OnceValue(func() crystal.Set {
	s := bbo()
	o, e := s.Axes[0], s.Axes[1]
	o.Axis, e.Axis = crystal.Extraordinary, crystal.Ordinary
	s.Name, s.Axes = "invented positive crystal", []crystal.Dispersion{e, o}
	own, err := crystal.Own(s)
	if err != nil || own.Sign != "positive" {
		panic("want a positive crystal")
	}
	return own
})

// wild draws any of the six processes in a crystal of the fitting sign, cut near the collinear
// angle, tilted.
func wild(t testing.TB, rng *rand.Rand) (Slab, float64, float64) {
	s := slab(t)
	s.Process = Processes()[rng.IntN(6)]
	if s.Process[0] == 'o' {
		s.Crystal = positive()
	}
	nm := 2 * s.PumpNm * (0.9 + 0.2*rng.Float64())
	angles, err := s.CollinearDeg(nm)
	if err != nil || len(angles) != 1 {
		t.Fatalf("%s at %g nm: angles %v, %v", s.Process, nm, angles, err)
	}
	s.CutDeg = angles[0] + rng.Float64()*4 - 2
	s.TiltDeg = rng.Float64()*6 - 3
	return s, nm, rng.Float64() * 360
}

// unit is the direction of a photon in air.
func unit(d Direction) [3]float64 {
	st, ct := math.Sincos(d.PolarDeg * deg)
	sp, cp := math.Sincos(d.AzimuthDeg * deg)
	return [3]float64{st * cp, st * sp, ct}
}

func TestEnergyAndMomentumAlongTheFaceAreConserved(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	perProcess := map[Process]int{}
	for range 20000 {
		s, nm, azimuth := wild(t, rng)
		p := at(t, s, nm)
		if d := 1/s.PumpNm - 1/p.SignalNm - 1/p.IdlerNm; math.Abs(d) > 1e-15 {
			t.Fatalf("signal %g: energy is missed by %g", nm, d)
		}
		e := p.Emission(azimuth)
		for _, r := range e.Root[:e.N] {
			if r.Idler.ReflectedBack {
				continue
			}
			perProcess[s.Process]++
			a, b := unit(r.Signal), unit(r.Idler)
			ct, st := math.Cos(s.TiltDeg*deg), math.Sin(s.TiltDeg*deg)
			// In the axes of the face, in units of 1/nm, with nothing of the solver's own.
			along := func(v [3]float64) (x, y float64) { return v[0]*ct - v[2]*st, v[1] }
			sx, sy := along(a)
			ix, iy := along(b)
			px := -st / s.PumpNm
			if dx, dy := sx/nm+ix/p.IdlerNm-px, sy/nm+iy/p.IdlerNm; math.Hypot(dx, dy)*s.PumpNm > 1e-12 {
				t.Fatalf("%s cut %g tilt %g signal %g azimuth %g: momentum along the face is missed by %g, %g", s.Process, s.CutDeg, s.TiltDeg, nm, azimuth, dx, dy)
			}
			if dk, err := p.MismatchPerMm(r.Signal.PolarDeg, azimuth); err != nil || math.Abs(dk) > 1e-7 {
				t.Fatalf("%s: mismatch %g per mm at a root, %v", s.Process, dk, err)
			}
		}
	}
	for _, process := range Processes() {
		if perProcess[process] < 500 {
			t.Errorf("%s: %d emissions; want hundreds", process, perProcess[process])
		}
	}
}

func TestEmissionIsMirroredInThePrincipalPlane(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 4))
	seen := 0
	for range 5000 {
		s, nm, azimuth := wild(t, rng)
		p := at(t, s, nm)
		a, b := p.Emission(azimuth), p.Emission(-azimuth)
		if a.N != b.N {
			t.Fatalf("%d and %d roots at azimuths ±%g", a.N, b.N, azimuth)
		}
		for i := range a.N {
			seen++
			if d := math.Abs(a.Root[i].Signal.PolarDeg - b.Root[i].Signal.PolarDeg); d > 1e-10 {
				t.Fatalf("azimuths ±%g differ by %g deg", azimuth, d)
			}
		}
	}
	if seen < 2000 {
		t.Errorf("%d emissions; want thousands", seen)
	}
}

func TestAskingForTheIdlerGivesTheSignalBack(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 5))
	seen := 0
	for range 5000 {
		s, nm, azimuth := wild(t, rng)
		p := at(t, s, nm)
		e := p.Emission(azimuth)
		s.Process = s.Process.Swapped()
		q := at(t, s, p.IdlerNm)
		for _, r := range e.Root[:e.N] {
			if r.Idler.ReflectedBack || r.Signal.PolarDeg < 0.5 || r.Idler.PolarDeg < 0.5 {
				continue
			}
			back := q.Emission(r.Idler.AzimuthDeg)
			nearest := math.Inf(1)
			for _, b := range back.Root[:back.N] {
				nearest = min(nearest, math.Abs(b.Signal.PolarDeg-r.Idler.PolarDeg)+math.Abs(b.Idler.PolarDeg-r.Signal.PolarDeg))
			}
			seen++
			if nearest > 1e-8 {
				t.Fatalf("%s cut %g tilt %g signal %g azimuth %g: exchanged daughters miss by %g deg", s.Process, s.CutDeg, s.TiltDeg, nm, azimuth, nearest)
			}
		}
	}
	if seen < 2000 {
		t.Errorf("%d emissions; want thousands", seen)
	}
}

func TestTheSineRuleIsExactOnlyWithoutTilt(t *testing.T) {
	s := slab(t)
	miss := func(tilt float64) float64 {
		s.TiltDeg = tilt
		p := at(t, s, 780)
		e := p.Emission(0)
		if e.N != 1 {
			t.Fatalf("%d roots; want 1", e.N)
		}
		return math.Abs(IdlerByRuleDeg(405, 780, e.Root[0].Signal.PolarDeg) - e.Root[0].Idler.PolarDeg)
	}
	if d := miss(0); d > 1e-12 {
		t.Errorf("untilted: the rule misses by %g deg; want 0", d)
	}
	if d := miss(3); d < 0.005 || d > 0.05 {
		t.Errorf("tilted by 3 deg: the rule misses by %g deg; want about 0.017", d)
	}
}

// TestRootsAreCountedAsASearchCountsThem compares the number of roots with sign changes on a fine
// grid, in type II slabs where none, one and two occur.
func TestRootsAreCountedAsASearchCountsThem(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 6))
	var seen [3]int
	for range 1500 {
		s, nm, azimuth := wild(t, rng)
		p := at(t, s, nm)
		e := p.Emission(azimuth)
		sp, cp := math.Sincos(azimuth * deg)
		changes, near := 0, false
		last := math.NaN()
		for i := range 4000 {
			f, _ := p.mismatch(float64(i)/4001, sp, cp)
			if last*f < 0 {
				changes++
			}
			near = near || math.Abs(f) < 1e-2
			last = f
		}
		if changes != e.N {
			// A pair of roots closer than the grid is the solver's to see.
			if e.N == 2 && changes == 0 && e.Root[1].Signal.PolarDeg-e.Root[0].Signal.PolarDeg < 0.03 {
				continue
			}
			if e.N == 1 && changes == 0 && near {
				continue
			}
			t.Fatalf("%s cut %g tilt %g signal %g azimuth %g: %d roots, a search finds %d", s.Process, s.CutDeg, s.TiltDeg, nm, azimuth, e.N, changes)
		}
		seen[e.N]++
	}
	for n, k := range seen {
		if k < 20 {
			t.Errorf("%d slabs with %d roots; want some", k, n)
		}
	}
}

func TestATangentRootCountsOnce(t *testing.T) {
	s := slab(t)
	angles, err := s.CollinearDeg(810)
	if err != nil || len(angles) != 1 {
		t.Fatalf("%v %v", angles, err)
	}
	s.CutDeg = angles[0]
	p := at(t, s, 810)
	if e := p.Emission(40); e.N != 1 || e.Root[0].Signal.PolarDeg > 0.01 {
		t.Errorf("at the collinear angle: %+v; want one root on the axis", e)
	}
	s.CutDeg = angles[0] - 0.01
	p = at(t, s, 810)
	if e := p.Emission(40); e.N != 0 || e.Because() == "" {
		t.Errorf("below the collinear angle: %+v; want none, and why", e)
	}
	// Type II: turn the azimuth until two roots merge, halving the interval.
	s = slab(t)
	s.Process, s.CutDeg = EOE, 41
	p = at(t, s, 810)
	two, none := 180.0, 90.0
	if a, b := p.Emission(two).N, p.Emission(none).N; a != 2 || b != 0 {
		t.Fatalf("%d roots at 180 deg, %d at 90 deg; want 2 and 0", a, b)
	}
	for range 100 {
		if mid := (two + none) / 2; p.Emission(mid).N == 0 {
			none = mid
		} else {
			two = mid
		}
	}
	e := p.Emission(two)
	if e.N < 1 || (e.N == 2 && e.Root[1].Signal.PolarDeg-e.Root[0].Signal.PolarDeg > 1e-4) {
		t.Errorf("where the roots merge: %+v; want one, or two in one place", e)
	}
}

func TestATotallyReflectedIdlerIsReportedWithoutNaN(t *testing.T) {
	// Of unequal partners the redder leaves at the larger angle, until it no longer leaves.
	s := slab(t)
	s.Extrapolate = true
	for cut := 30.0; cut < 90; cut++ {
		for nm := 430.0; nm < 800; nm += 10 {
			s.CutDeg = cut
			p := at(t, s, nm)
			if e := p.Emission(0); e.N == 1 && e.Root[0].Idler.ReflectedBack {
				if d := e.Root[0].Idler; math.IsNaN(d.PolarDeg) || math.IsNaN(d.InternalDeg) || d.InternalDeg < 5 {
					t.Errorf("reflected idler %+v; want a direction inside and no NaN", d)
				}
				return
			}
		}
	}
	t.Error("no slab found whose idler is reflected")
}

func TestATotallyReflectedSignalIsReported(t *testing.T) {
	s := slab(t)
	s.Extrapolate = true
	for cut := 40.0; cut <= 90; cut += 2 {
		for nm := 810.0; nm < 2400; nm += 40 {
			s.CutDeg = cut
			p := at(t, s, nm)
			e := p.Emission(0)
			if !e.SignalReflected {
				continue
			}
			if e.N != 0 || e.Because() != "the signal is totally reflected at the exit face" {
				t.Errorf("%+v, because %q", e, e.Because())
			}
			// The closed triangle of wave vectors says the same: momentum along the face of more than
			// air can carry.
			along := (p.kpz*p.kpz + p.signal.kSq - p.idler.kSq) / (2 * p.kpz)
			if q := math.Sqrt(p.signal.kSq - along*along); q < p.signal.k0*(1-1e-6) {
				t.Errorf("cut %g signal %g: momentum along the face is %g of what air carries; want more than 1", cut, nm, q/p.signal.k0)
			}
			return
		}
	}
	t.Error("no slab found whose signal is reflected")
}

// TestAPrincipalPlaneOfAnEqualPairOfAxesIsUniaxial builds a biaxial crystal out of BBO, with
// n_x = n_y = n_o and n_z = n_e, and asks both solvers for the same angles.
func TestAPrincipalPlaneOfAnEqualPairOfAxesIsUniaxial(t *testing.T) {
	s := slab(t)
	o, e := s.Crystal.Axes[0], s.Crystal.Axes[1]
	x, y, z := o, o, e
	x.Axis, y.Axis, z.Axis = crystal.X, crystal.Y, crystal.Z
	twin := s.Crystal
	twin.Class, twin.Axes = crystal.Biaxial, []crystal.Dispersion{x, y, z}
	for scheme, process := range map[string]Process{"yy-p": EOO, "yp-p": EOE, "py-p": EEO} {
		s.Process = process
		want, err := s.CollinearDeg(790)
		if err != nil {
			t.Fatal(err)
		}
		b := Biaxial{Crystal: twin, Plane: XZ, Scheme: scheme, PumpNm: 405, SignalNm: 790, Cel: 20}
		got, err := b.AnglesDeg()
		if err != nil || len(got) != 1 || len(want) != 1 || math.Abs(got[0]-want[0]) > 1e-9 {
			t.Errorf("%s: %v, %v; the uniaxial solver gives %v", scheme, got, err, want)
		}
		rho, err := b.WalkoffDeg(got[0])
		s.CutDeg = want[0]
		if w, _ := s.WalkoffDeg(); err != nil || math.Abs(rho[0]-w) > 1e-9 {
			t.Errorf("%s: walk-off %v, %v; want %g", scheme, rho, err, w)
		}
	}
	for _, scheme := range []string{"", "zz-p", "yyp", "yy-pp", "yx-p"} {
		if _, err := (Biaxial{Crystal: twin, Plane: XZ, Scheme: scheme, PumpNm: 405, SignalNm: 790}).AnglesDeg(); err == nil {
			t.Errorf("scheme %q was taken in the xz plane", scheme)
		}
	}
}

// TestBiaxialAnglesConserveMomentum recomputes the condition from the indices for every biaxial
// set and plane.
func TestBiaxialAnglesConserveMomentum(t *testing.T) {
	found := 0
	for _, name := range []string{"ktp-kato-2002", "lbo-chen-1989", "lbo-datasheet-pm", "bibo-umemura-2007"} {
		for _, plane := range []Plane{XY, XZ, YZ} {
			for _, scheme := range []string{"nn-p", "pp-n", "np-p", "np-n"} {
				c := set(t, name)
				normal, at0, at90, err := plane.axes()
				if err != nil {
					t.Fatal(err)
				}
				b := Biaxial{Crystal: c, Plane: plane, PumpNm: 532, SignalNm: 1064, Cel: 20}
				for _, r := range scheme {
					if r == 'n' {
						b.Scheme += string(normal)
					} else {
						b.Scheme += string(r)
					}
				}
				angles, err := b.AnglesDeg()
				if err != nil {
					t.Fatal(err)
				}
				index := func(pol byte, nm, angle float64) float64 {
					n := func(a crystal.Axis) float64 { v, _ := c.Index(a, nm, 20); return v }
					if pol == 'n' {
						return n(normal)
					}
					return 1 / math.Sqrt(math.Pow(math.Cos(angle*deg)/n(at0), 2)+math.Pow(math.Sin(angle*deg)/n(at90), 2))
				}
				for _, a := range angles {
					found++
					if d := 2*index(scheme[3], 532, a) - index(scheme[0], 1064, a) - index(scheme[1], 1064, a); math.Abs(d) > 1e-10 {
						t.Errorf("%s %s %s at %g deg: momentum is missed by %g", name, plane, scheme, a, d)
					}
				}
			}
		}
	}
	if found < 8 {
		t.Errorf("%d matched angles; want several a crystal", found)
	}
}

func TestPolingShiftsTheConditionByItsGrating(t *testing.T) {
	s := slab(t)
	plain := at(t, s, 810)
	dk, err := plain.MismatchPerMm(0, 0)
	if err != nil {
		t.Fatal(err)
	}
	s.PolingUm = 2 * math.Pi / dk * 1000
	poled := at(t, s, 810)
	if e := poled.Emission(0); e.N != 1 || e.Root[0].Signal.PolarDeg > 0.01 {
		t.Errorf("poled to match on the axis: %+v; want emission there", e)
	}
}

func TestTradeFactsHold(t *testing.T) { // common practice, no source
	if nm := Idler(405, 810); nm != 810 {
		t.Errorf("degenerate partner %g nm; want twice the pump's 405", nm)
	}
	p := at(t, slab(t), 760)
	e := p.Emission(0)
	if e.N != 1 || !(p.IdlerNm > p.SignalNm && e.Root[0].Idler.PolarDeg > e.Root[0].Signal.PolarDeg) {
		t.Errorf("%g nm at %g deg and %g nm at %g deg; want the redder at the larger angle", p.SignalNm, e.Root[0].Signal.PolarDeg, p.IdlerNm, e.Root[0].Idler.PolarDeg)
	}
}

func TestSensitivitiesMatchWhatTheSettingsDo(t *testing.T) {
	s := slab(t)
	got, err := s.Sensitivities(810, 2.864, 0)
	if err != nil {
		t.Fatal(err)
	}
	// The four figures are printed in the notes beside the check values.
	for _, c := range []struct {
		name       string
		got, want  float64
		toleranceR float64
	}{
		{"cut", got.PerDegCut, 3.75, 0.01},
		{"tilt", got.PerDegTilt, 2.26, 0.01},
		{"kelvin", got.PerKelvin, -0.0039, 0.02},
		{"pump, 0.030 deg for the 0.1144 nm between air and vacuum", got.PerNmPump, 0.030 / 0.1144, 0.05},
	} {
		if math.Abs(c.got-c.want) > c.toleranceR*math.Abs(c.want) {
			t.Errorf("per %s: %.5g; want %.5g", c.name, c.got, c.want)
		}
	}
}

func TestTiltsAndCutsComeBack(t *testing.T) {
	s := slab(t)
	for _, tilt := range []float64{-3, 0, 2.5} {
		s.TiltDeg = tilt
		axis, err := s.PumpAxisDeg()
		if err != nil {
			t.Fatal(err)
		}
		back, err := s.TiltForPumpAxis(axis)
		if err != nil || math.Abs(back-tilt) > 1e-10 {
			t.Errorf("tilt %g came back as %g, %v", tilt, back, err)
		}
	}
	s.TiltDeg = 1.25
	p := at(t, s, 790)
	e := p.Emission(30)
	tilts, err := s.TiltsForAngle(790, e.Root[0].Signal.PolarDeg, 30, 5)
	if err != nil || len(tilts) != 1 || math.Abs(tilts[0]-1.25) > 1e-9 {
		t.Errorf("tilts %v, %v; want 1.25", tilts, err)
	}
}

func TestAThinCrystalCoversTheAxis(t *testing.T) {
	s := slab(t)
	s.ThicknessMm = 0.1
	p := at(t, s, 810)
	w, err := p.EmissionMrad(2.864, 0)
	if err != nil || !w.Open {
		t.Errorf("0.1 mm: %+v, %v; want an emission that covers the axis", w, err)
	}
	if m := s.MatchedNm(2.0, 0, 600, 1000); len(m) != 0 {
		t.Errorf("2 deg is matched at %v; want nowhere, the ring's smallest angle is larger", m)
	}
	if m := s.MatchedNm(3.0, 0, 600, 1000); len(m) != 2 {
		t.Errorf("3 deg is matched at %v; want two wavelengths", m)
	}
}

func TestAPumpSpreadWidensTheRingThroughWalkoff(t *testing.T) {
	s := slab(t)
	p := at(t, s, 810)
	bare, err := p.EmissionMrad(2.864, 0)
	if err != nil {
		t.Fatal(err)
	}
	// An all but plane wave gives the plane wave's width.
	plane, err := p.EmissionWithPumpMrad(2.864, 0, 1e5)
	if err != nil || math.Abs(plane.FWHM/bare.FWHM-1) > 1e-4 {
		t.Errorf("waist 10 cm: %+v, %v; want %+v", plane, err, bare)
	}
	tight, err := p.EmissionWithPumpMrad(2.864, 0, 50)
	if err != nil {
		t.Fatal(err)
	}
	// By brute force: the same ring averaged over a fine square grid of pump directions.
	const w = 0.05
	at := func(t float64) float64 {
		_, k, _ := p.Wavenumbers()
		sx := k * math.Sin(t)
		sum, norm := 0.0, 0.0
		for i := -60; i <= 60; i++ {
			for j := -20; j <= 20; j++ {
				qx, qy := float64(i)*0.08/w, float64(j)*0.25/w
				g := math.Exp(-(qx*qx + qy*qy) * w * w / 2)
				dk := p.PumpNormal(qx, qy) - p.SignalNormal(sx, 0) - p.IdlerNormal(qx-sx, qy)
				sum += g * Sinc2(dk, s.ThicknessMm)
				norm += g
			}
		}
		return sum / norm
	}
	top := maximum(at, 2.5*deg, 3.2*deg, 200)
	half := at(top) / 2
	lo, hi := top, top
	for at(lo) > half {
		lo -= 1e-5
	}
	for at(hi) > half {
		hi += 1e-5
	}
	if want := (hi - lo) * 1000; math.Abs(tight.FWHM-want) > 0.03 || tight.FWHM < 1.05*bare.FWHM {
		t.Errorf("waist 50 um: %.4f mrad; want %.4f, well above the plane wave's %.4f", tight.FWHM, want, bare.FWHM)
	}
	band, err := s.SpectralNm(860, 3.2, 0)
	if err != nil {
		t.Fatal(err)
	}
	wide, err := s.SpectralWithPumpNm(860, 3.2, 0, 1e5)
	if err != nil || math.Abs(wide.FWHM/band.FWHM-1) > 0.05 {
		t.Errorf("band with a plane pump %+v, %v; want about %+v", wide, err, band)
	}
	if wider, err := s.SpectralWithPumpNm(860, 3.2, 0, 50); err != nil || !(wider.FWHM > wide.FWHM) {
		t.Errorf("band with a waist of 50 um %+v, %v; want more than %+v", wider, err, wide)
	}
}

func TestNothingIsComputedOutsideTheRangeUnlessAsked(t *testing.T) {
	s := slab(t)
	s.Crystal = set(t, "bbo-zhang-2000")
	if _, err := s.At(810); err == nil {
		t.Error("a violet pump outside the set's range was taken; want a refusal")
	}
	s.Extrapolate = true
	if _, err := s.At(810); err != nil {
		t.Errorf("asked to extrapolate: %v", err)
	}
}

// threeIndices is the yardstick of the benchmarks: the indices of the three waves.
func threeIndices(s *Slab, nm float64) float64 {
	no, _ := s.index(crystal.Ordinary, s.PumpNm)
	ne, _ := s.index(crystal.Extraordinary, s.PumpNm)
	ns, _ := s.index(crystal.Ordinary, nm)
	ni, _ := s.index(crystal.Ordinary, Idler(s.PumpNm, nm))
	return ExtraordinaryIndex(no, ne, s.CutDeg) + ns + ni
}

var sink float64

// BenchmarkInEvaluations reports emission and closed form in units of an evaluation of the three
// indices, measured in turns within one run.
func BenchmarkInEvaluations(b *testing.B) {
	plain, tilted := slab(b), slab(b)
	tilted.TiltDeg = 1.5
	var spent [3]time.Duration
	const each = 200
	for b.Loop() {
		for k, f := range []func(){
			func() { sink = threeIndices(&plain, 800) },
			func() { p, _ := tilted.At(800); e := p.Emission(33); sink = e.Root[0].Signal.PolarDeg },
			func() { p, _ := plain.At(800); sink, _, _ = p.RingDeg() },
		} {
			start := time.Now()
			for range each {
				f()
			}
			spent[k] += time.Since(start)
		}
	}
	b.ReportMetric(float64(spent[1])/float64(spent[0]), "evaluations/emission")
	b.ReportMetric(float64(spent[2])/float64(spent[0]), "evaluations/closed-form")
	b.ReportMetric(0, "ns/op")
}

func BenchmarkThreeIndices(b *testing.B) {
	s := slab(b)
	for b.Loop() {
		sink = threeIndices(&s, 800)
	}
}

func BenchmarkGeneralEmission(b *testing.B) {
	s := slab(b)
	s.TiltDeg = 1.5
	b.ReportAllocs()
	for b.Loop() {
		p, err := s.At(800)
		if err != nil {
			b.Fatal(err)
		}
		e := p.Emission(33)
		sink = e.Root[0].Signal.PolarDeg
	}
}

func BenchmarkUntiltedClosedForm(b *testing.B) {
	s := slab(b)
	b.ReportAllocs()
	for b.Loop() {
		p, err := s.At(800)
		if err != nil {
			b.Fatal(err)
		}
		sink, _, _ = p.RingDeg()
	}
}

func TestEmissionAllocatesNothing(t *testing.T) {
	s := slab(t)
	s.TiltDeg = 1.5
	if n := testing.AllocsPerRun(100, func() {
		p, _ := s.At(800)
		e := p.Emission(33)
		sink = e.Root[0].Signal.PolarDeg
	}); n != 0 {
		t.Errorf("%g allocations an emission; want none", n)
	}
}
