package bench

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"sync"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/sim/instruments"
	"gemel/sim/source"
)

// outlook is the declared source as a model, made once for a file when first asked for. It may be
// used by several goroutines.
type outlook struct {
	once     sync.Once
	model    *source.Model
	warnings []string
	err      error

	shape   sync.Once
	perfect *source.Model

	mu     sync.Mutex
	empty  map[unit.Angle]string // why there is no emission, by tilt
	flanks map[flank][2]unit.Angle
}

// flank names what was asked for: plans are worked out again and again, and the first answer takes a
// second.
type flank struct {
	arm drivers.AxisName
	at  source.Pose
}

// mostKnown bounds what is remembered. Forgetting costs time, never an answer.
const mostKnown = 10_000

// expectation is the light as the file states it, with what it says is to be expected of detectors
// and backgrounds. Nothing of a simulated bench's truth is in it.
func (f *File) expectation() (o source.Optics, missing []string) {
	o = f.lit(truth{})
	o.Counter.JitterS = f.Counter.Jitter.Value
	for _, x := range []struct {
		arm *source.Arm
		way Arm
	}{{&o.Signal, f.Optics.Signal}, {&o.Idler, f.Optics.Idler}} {
		x.arm.StrayHzPerW = x.way.UnpairedHz * 1e3
		x.arm.Detector.Efficiency = 1
		for _, d := range f.Detectors {
			switch {
			case d.Name != x.way.Detector:
			case d.Expected.Value > 0:
				x.arm.Detector.Efficiency = d.Expected.Value
			default:
				missing = append(missing, fmt.Sprintf("the detector %s has no expected_efficiency in the bench file: a perfect one is taken", d.Name))
			}
		}
		if x.arm.Detector.Afterpulse > 0 && x.arm.Detector.AfterpulseS == 0 {
			x.arm.Detector.AfterpulseS = 1e-9 // not declared; what matters is how many there are
		}
	}
	for _, s := range f.Settings {
		if s.Is == instruments.Delay && s.Centre == nil {
			missing = append(missing, fmt.Sprintf("the delay %s has no centre in the bench file: pairs are taken as centred wherever it stands", s.Name))
		}
	}
	return o, missing
}

// outlooked is the model of what is expected.
func (f *File) outlooked() (*source.Model, error) {
	l := f.outlook
	l.once.Do(func() {
		if f.Optics == nil {
			l.err = errors.New("a bench without optics; want the blocks \"optics\" and \"arms\"")
			return
		}
		o, missing := f.expectation()
		if l.model, l.err = source.New(o); l.err == nil {
			l.warnings = append(missing, l.model.Warnings()...)
		}
	})
	return l.model, l.err
}

// Perfect is the model of the declared optics with perfect detectors, for the shapes of profiles: made
// once, so that what one fit has worked out is quick for all others. It is nil where the bench has no
// optics, or none that can be computed.
func (f *File) Perfect() *source.Model {
	l := f.outlook
	l.shape.Do(func() {
		o, err := f.Source()
		if err != nil {
			return
		}
		for _, arm := range []*source.Arm{&o.Signal, &o.Idler} {
			arm.Detector = source.Detector{Efficiency: 1, Model: arm.Detector.Model}
			arm.FluorescenceHzPerW, arm.StrayHzPerW = 0, 0
		}
		l.perfect, _ = source.New(o)
	})
	return l.perfect
}

// noEmission says why there is none at a tilt; empty: there is.
func (f *File) noEmission(tilt unit.Angle) string {
	l := f.outlook
	l.mu.Lock()
	defer l.mu.Unlock()
	why, known := l.empty[tilt]
	if !known {
		if f.Optics.Signal.Filter.Centre > 0 {
			if _, err := f.emission(signalArm, tilt.Degrees()); err != nil {
				why = err.Error()
			}
		}
		if l.empty == nil || len(l.empty) >= mostKnown {
			l.empty = map[unit.Angle]string{}
		}
		l.empty[tilt] = why
	}
	return why
}

// expect is what the declared source gives at a place.
func (f *File) expect(axes []scan.AxisTarget, settings []scan.SettingTarget) (scan.Expected, error) {
	m, err := f.outlooked()
	if err != nil {
		return scan.Expected{}, err
	}
	for _, t := range axes {
		if !slices.ContainsFunc(f.Axes, func(a Axis) bool { return a.Name == t.Axis }) {
			return scan.Expected{}, fmt.Errorf("no axis %q on this bench; want one of its own", t.Axis)
		}
	}
	for _, t := range settings {
		if !slices.ContainsFunc(f.Settings, func(s Setting) bool { return s.Name == t.Setting }) {
			return scan.Expected{}, fmt.Errorf("no setting %q on this bench; want one of its own", t.Setting)
		}
	}
	p := f.pose(axes, settings)
	for i, arm := range []Arm{f.Optics.Signal, f.Optics.Idler} {
		for _, d := range f.Detectors {
			if d.Name == arm.Detector {
				p.RoomHz[i] += d.RoomHz
			}
		}
	}
	light := f.recorded(m, p)
	p.PumpOpen = 0
	dark := f.recorded(m, p)
	e := scan.Expected{CountsHz: map[drivers.Channel]float64{}, AccidentalsHz: map[drivers.Channel]float64{}, DarkHz: map[drivers.Channel]float64{}, Warnings: slices.Clone(f.outlook.warnings)}
	if why := f.noEmission(tiltOf(p)); why != "" {
		e.Warnings = append(e.Warnings, why)
	}
	signal, idler := f.channelOf(f.Optics.Signal), f.channelOf(f.Optics.Idler)
	for _, c := range f.Counter.Channels {
		switch of, pairs := f.Counter.Coincidences[c]; {
		case c == f.Counter.Tag:
		case c == signal:
			e.CountsHz[c], e.DarkHz[c] = light.SignalHz, dark.SignalHz
		case c == idler:
			e.CountsHz[c], e.DarkHz[c] = light.IdlerHz, dark.IdlerHz
		case pairs:
			e.CountsHz[c], e.AccidentalsHz[c], e.DarkHz[c] = 0, 0, 0
			if of == [2]drivers.Channel{signal, idler} || of == [2]drivers.Channel{idler, signal} {
				e.CountsHz[c], e.AccidentalsHz[c], e.DarkHz[c] = light.TrueHz+light.AccidentalHz, light.AccidentalHz, dark.AccidentalHz
			}
		default: // a detector in no arm, or none
			for _, d := range f.Detectors {
				if d.Channel == c {
					e.CountsHz[c], e.DarkHz[c] = d.Dark.Value+d.RoomHz, d.Dark.Value+d.RoomHz
				}
			}
		}
	}
	for _, d := range f.Counter.Displaced { // windows that hold accidentals alone
		w := f.Counter.Window.Value * float64(d.Windows)
		lit, unlit := e.CountsHz[d.Of[0]]*e.CountsHz[d.Of[1]]*w, e.DarkHz[d.Of[0]]*e.DarkHz[d.Of[1]]*w
		e.CountsHz[d.Channel], e.AccidentalsHz[d.Channel], e.DarkHz[d.Channel] = lit, lit, unlit
	}
	return e, nil
}

// recorded is what detectors and counter make of a pose. The declared capture holds where the delay is
// right; off it the window's overlap with the declared jitter is left.
func (f *File) recorded(m *source.Model, p source.Pose) source.Recorded {
	r := m.Expected(m.Rates(p))
	if f.Counter.Capture.Value > 0 {
		r.TrueHz *= f.Counter.Capture.Value / source.Counter{WindowS: f.Counter.Window.Value, JitterS: f.Counter.Jitter.Value}.WindowCapture()
	}
	return r
}

// channelOf is the channel of an arm's detector.
func (f *File) channelOf(arm Arm) drivers.Channel {
	for _, d := range f.Detectors {
		if d.Name == arm.Detector {
			return d.Channel
		}
	}
	return ""
}

// flanks are the bench angles of an arm at which pairs in both arms are half of what they are at
// most along it, with everything else at the places given.
func (f *File) flanks(arm drivers.AxisName, top []scan.AxisTarget) (low, high unit.Angle, err error) {
	m, err := f.outlooked()
	if err != nil {
		return 0, 0, err
	}
	i := slices.IndexFunc(f.Axes, func(a Axis) bool { return a.Name == arm })
	if i < 0 || f.Axes[i].Role != signalArm && f.Axes[i].Role != idlerArm {
		return 0, 0, fmt.Errorf("%s is no arm; want an axis whose role is signal_arm or idler_arm", arm)
	}
	p := f.pose(top, nil)
	begin := p.SignalDeg
	if f.Axes[i].Role == idlerArm {
		begin = p.IdlerDeg
	}
	if !slices.ContainsFunc(top, func(t scan.AxisTarget) bool { return t.Axis == arm }) {
		if begin, err = f.emission(f.Axes[i].Role, p.TiltDeg); err != nil {
			return 0, 0, err
		}
	}
	l := f.outlook
	asked := flank{arm, p}
	f.Put(&asked.at, arm, begin)
	l.mu.Lock()
	known, ok := l.flanks[asked]
	l.mu.Unlock()
	if ok {
		return known[0], known[1], nil
	}
	if low, high, err = f.halved(m, asked); err != nil {
		return 0, 0, err
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.flanks == nil || len(l.flanks) >= mostKnown {
		l.flanks = map[flank][2]unit.Angle{}
	}
	l.flanks[asked] = [2]unit.Angle{low, high}
	return low, high, nil
}

// halved works the flanks out.
func (f *File) halved(m *source.Model, asked flank) (low, high unit.Angle, err error) {
	idler := slices.ContainsFunc(f.Axes, func(a Axis) bool { return a.Name == asked.arm && a.Role == idlerArm })
	begin := asked.at.SignalDeg
	if idler {
		begin = asked.at.IdlerDeg
	}
	pairs := m.Along(asked.at, idler)
	peak, lowDeg, highDeg, ok := flanksOf(pairs, begin, f.openDeg()/2)
	ring := f.Still()
	ring.SignalDeg, ring.IdlerDeg = m.Reference()
	ring.TiltDeg = 0
	if !ok || pairs(peak) < 1e-3*m.Rates(ring).PairsHz {
		return 0, 0, fmt.Errorf("no coincidences to speak of with %s at %.4f deg, or none that fall to a half within reach; want the other arm where the partners go", asked.arm, begin)
	}
	// A ten-thousandth of a degree is finer than any arm needs, and the same on every machine.
	place := func(deg float64) unit.Angle { return unit.Degrees(math.Round(deg*1e4) / 1e4) }
	return place(lowDeg), place(highDeg), nil
}

// openDeg is the smaller aperture's radius, as an angle: nothing along an arm is much narrower.
func (f *File) openDeg() float64 {
	a, b := f.Optics.Signal, f.Optics.Idler
	return min(a.Radius.Value/a.Distance.Value, b.Radius.Value/b.Distance.Value) * 180 / math.Pi
}

// flanksOf finds, by steps and then by chords, where a peak about an angle falls to half of its
// maximum.
func flanksOf(rate func(float64) float64, begin, step float64) (at, low, high float64, ok bool) {
	const most = 60 // steps to either side
	// Uphill to the maximum, in steps and then in smaller ones. A flat top is not flat to the last digit,
	// and where on it the maximum is means nothing.
	at = begin
	top := rate(at)
	for _, h := range []float64{step, step / 3, step / 9} {
		for range most {
			up, down := rate(at+h), rate(at-h)
			if max(up, down) <= 1.001*top {
				break
			}
			if up > down {
				at, top = at+h, up
			} else {
				at, top = at-h, down
			}
		}
	}
	if !(top > 0) {
		return at, 0, 0, false
	}
	edge := func(side float64) float64 {
		inner, yi := at, top
		for k := 1; k <= most; k++ {
			outer := at + side*step*float64(k)
			yo := rate(outer)
			switch {
			case yo > 1.01*top:
				return math.NaN() // climbing: the maximum is elsewhere
			case yo < top/2:
				return halfway(rate, top/2, inner, outer, yi, yo)
			}
			inner, yi = outer, yo
		}
		return math.NaN()
	}
	low, high = edge(-1), edge(1)
	return at, low, high, low < high
}

// halfway finds where a rate passes a height between two angles on both sides of it, by chords, and
// by halves where chords creep (regula falsi, Illinois variant of Dowell and Jarratt 1971, recalled
// from memory).
func halfway(rate func(float64) float64, height, a, b, ya, yb float64) float64 {
	ya, yb = ya-height, yb-height
	x := b
	for range 30 {
		last := x
		x = b - yb*(b-a)/(yb-ya)
		if math.Abs(x-last) < 2e-6 { // far below what an angle is rounded to
			break
		}
		if y := rate(x) - height; (y < 0) == (yb < 0) {
			b, yb, ya = x, y, ya/2
		} else {
			a, ya, b, yb = b, yb, x, y
		}
	}
	return x
}
