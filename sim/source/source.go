package source

import (
	"errors"
	"fmt"
	"math"
)

// Model is a bench ready to be asked. It may be used by several goroutines at once.
type Model struct {
	o Optics
}

// New checks the optics and prepares a model of them.
func New(o Optics) (*Model, error) {
	if o.Counter.Logic == "" {
		o.Counter.Logic = EveryPair
	}
	if err := o.check(); err != nil {
		return nil, err
	}
	return &Model{o: o}, nil
}

func (o Optics) check() error {
	var errs []error
	if err := o.Process.Check(); err != nil {
		errs = append(errs, err)
	}
	if err := o.Crystal.CheckRange(o.PumpNm); err != nil && !o.Extrapolate {
		errs = append(errs, err)
	}
	for name, a := range map[string]Arm{"signal": o.Signal, "idler": o.Idler} {
		if a.Aperture != Iris && a.Aperture != Gaussian {
			errs = append(errs, fmt.Errorf("source: %s aperture %q; want %q or %q", name, a.Aperture, Iris, Gaussian))
		}
	}
	return errors.Join(errs...)
}

// Rates returns the rates of detection events at a pose.
func (m *Model) Rates(p Pose) Rates {
	o := &m.o
	w := p.PumpW * p.PumpOpen
	signalMrad, idlerMrad := o.Signal.acceptanceMrad(), o.Idler.acceptanceMrad()
	centre := m.ringDeg(p)
	const mrad = math.Pi / 180 * 1000
	ds, di := (p.SignalDeg-centre)*mrad, (p.IdlerDeg-centre)*mrad
	const ringMrad, pairMrad = 2.5, 1.3 // rms of the emission and of the conjugate direction
	vs, vi := ringMrad*ringMrad+signalMrad*signalMrad, ringMrad*ringMrad+idlerMrad*idlerMrad
	ring := func(d, v float64) float64 { return math.Exp(-d * d / 2 / v) }
	heralded := math.Exp(-(ds - di) * (ds - di) / 2 / (pairMrad*pairMrad + idlerMrad*idlerMrad + signalMrad*signalMrad))
	h := math.Cos(2 * p.WaveplateDeg * math.Pi / 180)
	pairs := o.PairHzPerMw * w * 1000 * h * h
	ts := o.Signal.Transmittance * o.Signal.Detector.Efficiency * p.SignalOpen
	ti := o.Idler.Transmittance * o.Idler.Detector.Efficiency * p.IdlerOpen
	s, i := pairs*ring(ds, vs)*ts, pairs*ring(di, vi)*ti
	c := min(pairs*ring(ds, vs)*heralded*ts*ti, s, i)
	return Rates{
		SignalHz: s + o.Signal.background(w, p.SignalOpen, p.RoomHz[0]),
		IdlerHz:  i + o.Idler.background(w, p.IdlerOpen, p.RoomHz[1]),
		PairsHz:  c,
	}
}

func (a Arm) background(pumpW, open, roomHz float64) float64 {
	return a.Detector.DarkHz + open*(roomHz+pumpW*(a.FluorescenceHzPerW+a.StrayHzPerW))
}

func (a Arm) acceptanceMrad() float64 { return a.RadiusMm / a.DistanceMm * 1000 / 2 }

// ringDeg is the external half-angle of the degenerate type I ring, refraction at the exit face
// included.
func (m *Model) ringDeg(p Pose) float64 {
	no, _ := m.o.Crystal.Extrapolate("o", p.PumpNm, p.CrystalCel)
	ne, _ := m.o.Crystal.Extrapolate("e", p.PumpNm, p.CrystalCel)
	nd, _ := m.o.Crystal.Extrapolate("o", 2*p.PumpNm, p.CrystalCel)
	axis := (m.o.CutDeg + p.TiltDeg/no) * math.Pi / 180
	np := 1 / math.Sqrt(math.Pow(math.Cos(axis)/no, 2)+math.Pow(math.Sin(axis)/ne, 2))
	if np >= nd {
		return 0
	}
	return math.Asin(math.Sqrt(nd*nd-np*np)) * 180 / math.Pi
}
