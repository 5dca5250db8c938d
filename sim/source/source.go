package source

import (
	"errors"
	"fmt"
	"math"
	"sync"

	"gemel/sim/phasematch"
)

// Model is a bench ready to be asked. It may be used by several goroutines at once.
type Model struct {
	o      Optics
	rules  *rules
	effort float64 // factor on the number of quadrature points, 1 in use
	scale  float64 // pairs a second, watt and unit of the integral

	mirrored    bool       // both arms stand in the principal plane
	idlerFirst  bool       // the idler arm has the smaller aperture: pairs start from its photon
	filled      [2]float64 // area of the arms' apertures, in that of the bench as built: what light without partners follows
	typicalDeg  [2]float64 // where the arms stand at the reference
	pitchDeg    [3]float64 // of the table, by quantity
	pitchOffset float64    // of the table, 1/mm

	mu     sync.Mutex
	frames map[frameKey]*frame
	sized  map[[2]float64]*Model // the same bench with other irises
}

// frameKey names a frame by whole pitches of tilt, pump wavelength and temperature.
type frameKey struct{ tilt, pump, cel int32 }

// Between two frames the mismatch is shifted as a whole, which is exact enough over so little.
const (
	tiltPitchDeg = 0.05
	celPitch     = 5.
	mostFrames   = 512
)

// New checks the optics, finds where pairs go, and sets the absolute scale.
func New(o Optics) (*Model, error) {
	if o.Counter.Logic == "" {
		o.Counter.Logic = EveryPair
	}
	if err := o.check(); err != nil {
		return nil, err
	}
	m := &Model{o: o, rules: newRules(), effort: 1, filled: [2]float64{1, 1}, frames: map[frameKey]*frame{}, sized: map[[2]float64]*Model{}}
	if err := m.place(); err != nil {
		return nil, err
	}
	return m, nil
}

// place finds the reference, from which scale and pitches follow.
func (m *Model) place() error {
	o := &m.o
	m.mirrored = math.Mod(o.AzimuthDeg, 180) == 0 && o.Signal.OutOfPlaneDeg == 0 && o.Idler.OutOfPlaneDeg == 0
	slab := o.slab(0)
	if err := slab.Check(); err != nil {
		return err
	}
	if _, err := slab.At(m.centreNm(o.PumpNm)); err != nil {
		return err
	}
	if s, i, err := m.bare(0); err == nil {
		m.typicalDeg = [2]float64{s, i}
	} else if o.PairHzPerMw > 0 {
		return fmt.Errorf("%w; want optics for which the declared pair rate can hold, or the nonlinear coefficient", err)
	}

	m.size()
	f := m.newFrame(0, o.PumpNm, o.CrystalCel)
	if err := m.resolved(f); err != nil {
		return err
	}
	if o.PairHzPerMw > 0 {
		there := m.integral(f, ofPairs, m.typicalDeg[0], m.typicalDeg[1], 0)
		if !(there > 0) {
			return errors.New("source: the filters let no pair through both arms; want filters whose wavelengths are partners")
		}
		m.scale = o.PairHzPerMw * 1000 / there
		return nil
	}
	const vacuum = 8.8541878128e-12 // F/m
	d, l := o.NonlinearPmPerV*1e-12, o.ThicknessMm*1e-3
	// Momenta are in 1/mm: 1e6 for the one d²q that is not normalised.
	m.scale = 1e6 * 2 * d * d * l * l / (vacuum * lightSpeed * lightSpeed * lightSpeed * math.Pow(2*math.Pi, 3))
	return nil
}

func (o *Optics) slab(tiltDeg float64) phasematch.Slab {
	return phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, TiltDeg: tiltDeg, ThicknessMm: o.ThicknessMm, Cel: o.CrystalCel,
		PumpNm: o.PumpNm, PolingUm: o.PolingUm, Extrapolate: o.Extrapolate}
}

// bare is where pairs of the signal filter's centre go that no aperture has averaged, at a tilt.
func (m *Model) bare(tiltDeg float64) (signalDeg, idlerDeg float64, err error) {
	o := &m.o
	slab := o.slab(tiltDeg)
	nm := m.centreNm(o.PumpNm)
	pair, err := slab.At(nm)
	if err != nil {
		return 0, 0, err
	}
	e := pair.Emission(o.AzimuthDeg)
	if e.N == 0 || e.Root[0].Idler.ReflectedBack {
		why := e.Because()
		if e.N > 0 {
			why = "the idler is totally reflected at the exit face"
		}
		return 0, 0, fmt.Errorf("source: no pairs at %g nm leave the crystal at tilt %g deg and azimuth %g deg (%s)", nm, tiltDeg, o.AzimuthDeg, why)
	}
	idlerDeg, _ = e.Root[0].Idler.InPlane(o.AzimuthDeg + 180)
	return e.Root[0].Signal.PolarDeg, idlerDeg, nil
}

func (o *Optics) check() error {
	var errs []error
	errorf := func(format string, a ...any) { errs = append(errs, fmt.Errorf("source: "+format, a...)) }
	if !(o.ThicknessMm > 0) {
		errorf("thickness %g mm; want more than 0", o.ThicknessMm)
	}
	if !(o.PumpWaistUm > 0) {
		errorf("pump waist %g um; want more than 0", o.PumpWaistUm)
	}
	if (o.PairHzPerMw > 0) == (o.NonlinearPmPerV > 0) {
		errorf("pair rate %g Hz per mW and nonlinear coefficient %g pm/V; want exactly one of them", o.PairHzPerMw, o.NonlinearPmPerV)
	}
	for _, x := range []struct {
		name string
		arm  *Arm
	}{{"signal", &o.Signal}, {"idler", &o.Idler}} {
		a, d := x.arm, &x.arm.Detector
		if a.Aperture != Iris && a.Aperture != Gaussian {
			errorf("%s aperture %q; want %q or %q", x.name, a.Aperture, Iris, Gaussian)
		}
		if !(a.RadiusMm > 0 && a.DistanceMm > 0 && a.RadiusMm < a.DistanceMm) {
			errorf("%s aperture of radius %g mm at %g mm; want a radius smaller than the distance", x.name, a.RadiusMm, a.DistanceMm)
		}
		if f := a.Filter; f.WidthNm < 0 || (f.WidthNm > 0 && (!(f.CentreNm > 0) || (f.Shape != FilterGaussian && f.Shape != FilterFlat))) {
			errorf("%s filter of %g nm at %g nm, shape %q; want a positive width and centre, shape %q or %q", x.name, f.WidthNm, f.CentreNm, f.Shape, FilterGaussian, FilterFlat)
		}
		if !(a.Transmittance >= 0 && a.Transmittance <= 1 && d.Efficiency >= 0 && d.Efficiency <= 1) {
			errorf("%s transmittance %g and detector efficiency %g; want 0 to 1", x.name, a.Transmittance, d.Efficiency)
		}
		if !(a.FluorescenceHzPerW >= 0 && a.StrayHzPerW >= 0 && d.DarkHz >= 0 && d.DeadTimeS >= 0 && d.AfterpulseS >= 0 && d.LatchHz >= 0) {
			errorf("%s: a background, a dark rate or a time of the detector is negative; want 0 or more", x.name)
		}
		if !(d.Afterpulse >= 0 && d.Afterpulse < 0.5) {
			errorf("%s afterpulse share %g; want 0 to 0.5", x.name, d.Afterpulse)
		}
		if d.DeadTimeS > 0 && d.Model != NonParalysable && d.Model != Paralysable {
			errorf("%s dead-time model %q; want %q or %q", x.name, d.Model, NonParalysable, Paralysable)
		}
		if d.Afterpulse > 0 && d.Model == Paralysable {
			errorf("%s: afterpulses of a paralysable detector; want the non-paralysable model with them", x.name)
		}
	}
	if c := o.Counter; c.WindowS < 0 || c.JitterS < 0 || (c.Logic != EveryPair && c.Logic != OnePerHerald) {
		errorf("counter window %g s, jitter %g s, logic %q; want times of 0 or more, logic %q or %q", c.WindowS, c.JitterS, c.Logic, EveryPair, OnePerHerald)
	}
	return errors.Join(errs...)
}

// Warnings says in sentences where the optics strain the model.
func (m *Model) Warnings() []string {
	var w []string
	o := &m.o
	if o.Extrapolate {
		for _, nm := range []float64{o.PumpNm, m.centreNm(o.PumpNm), phasematch.Idler(o.PumpNm, m.centreNm(o.PumpNm))} {
			if err := o.Crystal.CheckRange(nm); err != nil {
				w = append(w, err.Error())
			}
		}
	}
	if !o.Crystal.HasTemperature() {
		w = append(w, fmt.Sprintf("%s has no temperature terms: the temperature changes nothing here", o.Crystal.Name))
	}
	slab := o.slab(0)
	lo, hi := slab.Band()
	for _, x := range []struct {
		name string
		f    Filter
	}{{"signal", o.Signal.Filter}, {"idler", o.Idler.Filter}} {
		if f0, f1 := x.f.window(); f0 < lo || f1 > hi {
			w = append(w, fmt.Sprintf("the %s arm takes wavelengths for which %s says nothing: light outside %.0f to %.0f nm is left out", x.name, o.Crystal.Name, lo, hi))
		}
	}
	rayleigh := math.Pi * o.PumpWaistUm * o.PumpWaistUm / o.PumpNm // mm
	if d := min(o.Signal.DistanceMm, o.Idler.DistanceMm); rayleigh > 0.3*d {
		w = append(w, fmt.Sprintf("an arm's aperture at %.0f mm is not far from a pump with a Rayleigh length of %.0f mm: partners spread more than computed", d, rayleigh))
	}
	return w
}

// Scale says in words where the absolute rates come from.
func (m *Model) Scale() string {
	if m.o.PairHzPerMw > 0 {
		return fmt.Sprintf("declared: %g pairs a second and milliwatt through both arms at %.4g and %.4g deg", m.o.PairHzPerMw, m.typicalDeg[0], m.typicalDeg[1])
	}
	return fmt.Sprintf("from the nonlinear coefficient of %g pm/V, plane-wave gain (Byer and Harris 1968)", m.o.NonlinearPmPerV)
}

// Reference is where the arms stand when a declared pair rate holds.
func (m *Model) Reference() (signalDeg, idlerDeg float64) { return m.typicalDeg[0], m.typicalDeg[1] }

// Rates returns the rates of detection events at a pose, from the table: to 1 % of the largest
// rates nearby, and in microseconds where the arms have been before.
func (m *Model) Rates(p Pose) Rates {
	m = m.with(p.RadiusMm)
	m.mu.Lock()
	defer m.mu.Unlock()
	return m.rates(p, m.tabulated(p))
}

// Exact is Rates without the table: milliseconds, always.
func (m *Model) Exact(p Pose) Rates {
	m = m.with(p.RadiusMm)
	return m.rates(p, m.computed(p))
}

// Along is the exact rate of pairs against the angle of one arm, the idler's or the signal's, with
// everything else at a pose: Exact without working out the crystal anew for each angle.
func (m *Model) Along(p Pose, idler bool) func(deg float64) float64 {
	m = m.with(p.RadiusMm)
	f := m.newFrame(p.TiltDeg, m.pumpNm(p), p.CrystalCel)
	return func(deg float64) float64 {
		q := p
		q.SignalDeg = deg
		if idler {
			q.SignalDeg, q.IdlerDeg = p.SignalDeg, deg
		}
		return m.rates(q, m.integrals(f, q)).PairsHz
	}
}

// mostSized bounds how many irises are remembered.
const mostSized = 32

// with is the model of the same bench with irises of other radii. The absolute scale stays: a
// declared pair rate holds for the bench as built.
func (m *Model) with(radiusMm [2]float64) *Model {
	o := m.o
	for i, arm := range []*Arm{&o.Signal, &o.Idler} {
		if radiusMm[i] > 0 {
			arm.RadiusMm = radiusMm[i]
		}
		radiusMm[i] = arm.RadiusMm
	}
	if radiusMm == [2]float64{m.o.Signal.RadiusMm, m.o.Idler.RadiusMm} {
		return m
	}
	m.mu.Lock()
	defer m.mu.Unlock()
	if other := m.sized[radiusMm]; other != nil {
		return other
	}
	if len(m.sized) >= mostSized {
		clear(m.sized) // forgetting costs time, never an answer
	}
	other := &Model{o: o, rules: m.rules, effort: m.effort, scale: m.scale, frames: map[frameKey]*frame{},
		mirrored: m.mirrored, typicalDeg: m.typicalDeg}
	for i, arm := range []Arm{m.o.Signal, m.o.Idler} {
		other.filled[i] = radiusMm[i] / arm.RadiusMm * radiusMm[i] / arm.RadiusMm
	}
	other.size()
	// No pitch is wider than the bench's own, whose errors are known.
	for i := range other.pitchDeg {
		other.pitchDeg[i] = min(other.pitchDeg[i], m.pitchDeg[i])
	}
	m.sized[radiusMm] = other
	return other
}

// size works out what follows from the apertures' sizes: which photon the integration of pairs
// starts from, and the scales over which rates change, as angles in air.
func (m *Model) size() {
	o := &m.o
	m.idlerFirst = o.Idler.RadiusMm/o.Idler.DistanceMm < o.Signal.RadiusMm/o.Signal.DistanceMm
	slab := o.slab(0)
	pair, err := slab.At(m.centreNm(o.PumpNm))
	if err != nil {
		return // place has asked before
	}
	_, ks, ki := pair.Wavenumbers()
	k := min(ks, ki)
	stand := newStand(&o.Signal, o.AzimuthDeg, m.typicalDeg[0], 0)
	x, y, _ := stand.face(stand.centre)
	gx, gy := pair.SignalSlope(ks*x, ks*y)
	half := o.ThicknessMm / 2
	emission := 1.2 / (half*k*math.Hypot(gx, gy) + math.Sqrt(half*k)) // the second term bounds it on the axis
	open := min(o.Signal.RadiusMm/o.Signal.DistanceMm, o.Idler.RadiusMm/o.Idler.DistanceMm)
	partners := math.Hypot(1/(k*o.PumpWaistUm/1000), open/2)
	m.pitchDeg = [3]float64{0.25 * emission / deg, 0.25 * emission / deg, 0.25 * min(emission, partners) / deg}
	m.pitchOffset = 0.3 / half
}

// collected are the three integrals at a pose.
type collected [3]float64

func (m *Model) tabulated(p Pose) collected {
	if m.pairW(p) == 0 {
		return collected{}
	}
	pumpNm := m.pumpNm(p)
	pumpPitch := 0.05
	for _, f := range []Filter{m.o.Signal.Filter, m.o.Idler.Filter} {
		if f.WidthNm > 0 {
			pumpPitch = min(pumpPitch, f.WidthNm/100)
		}
	}
	key := frameKey{int32(math.Round(p.TiltDeg / tiltPitchDeg)), int32(math.Round((pumpNm - m.o.PumpNm) / pumpPitch)), int32(math.Round((p.CrystalCel - m.o.CrystalCel) / celPitch))}
	f := m.frames[key]
	if f == nil {
		if len(m.frames) >= mostFrames {
			clear(m.frames) // forgetting costs time, never an answer
		}
		f = m.newFrame(float64(key.tilt)*tiltPitchDeg, m.o.PumpNm+float64(key.pump)*pumpPitch, m.o.CrystalCel+float64(key.cel)*celPitch)
		m.frames[key] = f
	}
	offset := 0.0
	if p.TiltDeg != f.tiltDeg || pumpNm != f.pumpNm || p.CrystalCel != f.cel {
		slab := f.slab
		slab.TiltDeg, slab.PumpNm, slab.Cel = p.TiltDeg, pumpNm, p.CrystalCel
		if here, err := slab.At(m.centreNm(f.pumpNm)); err == nil {
			a, errA := here.MismatchPerMm(m.typicalDeg[0], m.o.AzimuthDeg)
			b, errB := f.centre.MismatchPerMm(m.typicalDeg[0], m.o.AzimuthDeg)
			if errA == nil && errB == nil {
				offset = (a - b) / m.pitchOffset
			}
		}
	}
	var c collected
	if p.SignalOpen > 0 {
		c[ofSignal] = m.interpolate(f, ofSignal, [3]float64{p.SignalDeg / m.pitchDeg[ofSignal], 0, offset})
	}
	if p.IdlerOpen > 0 {
		c[ofIdler] = m.interpolate(f, ofIdler, [3]float64{0, p.IdlerDeg / m.pitchDeg[ofIdler], offset})
	}
	if p.SignalOpen > 0 && p.IdlerOpen > 0 {
		c[ofPairs] = m.interpolate(f, ofPairs, [3]float64{p.SignalDeg / m.pitchDeg[ofPairs], p.IdlerDeg / m.pitchDeg[ofPairs], offset})
	}
	return c
}

func (m *Model) computed(p Pose) collected {
	return m.integrals(m.newFrame(p.TiltDeg, m.pumpNm(p), p.CrystalCel), p)
}

func (m *Model) integrals(f *frame, p Pose) collected {
	var c collected
	for what := range c {
		c[what] = m.integral(f, what, p.SignalDeg, p.IdlerDeg, 0)
	}
	return c
}

func (m *Model) pumpNm(p Pose) float64 {
	if p.PumpNm == 0 {
		return m.o.PumpNm
	}
	return p.PumpNm
}

// pairW is the pump power that makes pairs: what passes the shutter, phase-matched component.
func (m *Model) pairW(p Pose) float64 {
	h := math.Cos((2*p.WaveplateDeg - m.o.PumpOffDeg) * deg)
	w := p.PumpW * p.PumpOpen * h * h
	if w < 1e-15*p.PumpW { // 45 deg spoils, whatever the cosine rounds to
		return 0
	}
	return w
}

func (m *Model) rates(p Pose, c collected) Rates {
	o := &m.o
	w := m.pairW(p) * m.scale
	gs, gi := o.Signal.Detector.gain(p.Gain[0]), o.Idler.Detector.gain(p.Gain[1])
	ts := o.Signal.Transmittance * o.Signal.Detector.Efficiency * gs * p.SignalOpen
	ti := o.Idler.Transmittance * o.Idler.Detector.Efficiency * gi * p.IdlerOpen
	s, i := w*c[ofSignal]*ts, w*c[ofIdler]*ti
	pump := p.PumpW * p.PumpOpen
	return Rates{
		SignalHz: s + o.Signal.background(pump, gs*p.SignalOpen*m.filled[0], p.RoomHz[0]),
		IdlerHz:  i + o.Idler.background(pump, gi*p.IdlerOpen*m.filled[1], p.RoomHz[1]),
		// Interpolation must not find more partners than photons.
		PairsHz: min(w*c[ofPairs]*ts*ti, s, i),
		DelayS:  p.DelayS,
	}
}

// gain is the factor on the efficiency that a relative change of it makes: none makes it negative,
// or more than one.
func (d *Detector) gain(change float64) float64 {
	g := max(0, 1+change)
	if d.Efficiency*g > 1 {
		return 1 / d.Efficiency
	}
	return g
}

// background is the light without partners, and the dark counts. passes is the share of that light
// that is counted of what was stated.
func (a *Arm) background(pumpW, passes, roomHz float64) float64 {
	return a.Detector.DarkHz + passes*(roomHz+pumpW*(a.FluorescenceHzPerW+a.StrayHzPerW))
}
