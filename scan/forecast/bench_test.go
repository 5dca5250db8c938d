package forecast

import (
	"sync"
	"testing"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/sim/crystal"
	"gemel/sim/source"
)

const deg = unit.Degree

// arms is a bench with two arms, a tilt and a wave plate, both detectors protected.
func arms() Bench {
	axis := func(name drivers.AxisName, role string, controller drivers.DeviceName, low, high, speed, backlash float64) scan.Axis {
		return scan.Axis{Name: name, Role: role, Controller: controller, Low: unit.Degrees(low), High: unit.Degrees(high), Tolerance: unit.Degrees(0.002), Backlash: unit.Degrees(backlash), Rising: true,
			Settle: 100 * time.Millisecond, SpeedDegS: speed, AccelDegS2: 5 * speed, Together: controller == "rotary"}
	}
	return Bench{
		Name: "skerry",
		Axes: []scan.Axis{axis("signal_arm", "signal_arm", "rotary", -1, 12, 6, 0.05), axis("idler_arm", "idler_arm", "rotary", -1, 12, 6, 0.05),
			axis("crystal_tilt", "crystal_tilt", "rotary", -4, 4, 2, 0.02), axis("plate", "pump_waveplate", "plate", -10, 100, 20, 0)},
		Start:       []unit.Angle{deg, deg, 0, 0},
		Controllers: []drivers.DeviceName{"rotary", "plate"},
		Pump:        &Shutter{Name: "shutter", SettleOpen: 60 * time.Millisecond, SettleClosed: 60 * time.Millisecond},
		Protectors:  []Shutter{{Name: "shield", SettleOpen: 40 * time.Millisecond, SettleClosed: 40 * time.Millisecond}},
		Detectors: []Detector{{Name: "signal", Channel: "signal", TripHz: 2e6, FloorHz: 20, Glance: 10 * time.Millisecond, ProtectBy: "shield", DeadTimeS: 45e-9},
			{Name: "idler", Channel: "idler", TripHz: 2e6, FloorHz: 20, Glance: 10 * time.Millisecond, ProtectBy: "shield", DeadTimeS: 45e-9}},
		Counter: Counter{Name: "counter", Channels: []drivers.Channel{"signal", "idler", "pairs"}, Coincidences: map[drivers.Channel][2]drivers.Channel{"pairs": {"signal", "idler"}}, Bits: 32},
		Costs:   Measured(8),
	}
}

// optics are the demo's, with a pump of so many times its power.
func optics(power float64) source.Optics {
	set, _ := crystal.Named("bbo-kato-1986")
	detector := func(dark float64, model string) source.Detector {
		return source.Detector{Efficiency: 0.6, DarkHz: dark, DeadTimeS: 45e-9, Model: model, Afterpulse: 0.006, AfterpulseS: 120e-9}
	}
	return source.Optics{
		Crystal: set, Process: "e-oo", CutDeg: 29.2, ThicknessMm: 2, CrystalCel: 20, AzimuthDeg: 90, PumpNm: 405, PumpWaistUm: 130, PumpW: 0.045 * power, PairHzPerMw: 420,
		Signal:  source.Arm{Aperture: source.Gaussian, RadiusMm: 1.2, DistanceMm: 500, Filter: source.Filter{CentreNm: 810, WidthNm: 10, Shape: source.FilterGaussian}, Transmittance: 0.92, Detector: detector(180, source.NonParalysable)},
		Idler:   source.Arm{Aperture: source.Iris, RadiusMm: 3, DistanceMm: 500, Filter: source.Filter{CentreNm: 810, WidthNm: 40, Shape: source.FilterFlat}, Transmittance: 0.93, Detector: detector(220, source.NonParalysable)},
		Counter: source.Counter{WindowS: 4e-9, JitterS: 0.35e-9, Logic: source.EveryPair},
	}
}

// lit is the model of optics at a power, and what it expects.
type lit struct {
	model  *source.Model
	optics source.Optics
	asked  int
}

var models sync.Map // by power: what a model worked out once is quick ever after

func light(t testing.TB, power float64) *lit {
	t.Helper()
	o := optics(power)
	if m, ok := models.Load(power); ok {
		return &lit{model: m.(*source.Model), optics: o}
	}
	m, err := source.New(o)
	if err != nil {
		t.Fatal(err)
	}
	models.Store(power, m)
	return &lit{model: m, optics: o}
}

func (l *lit) pose(axes []scan.AxisTarget) source.Pose {
	p := source.Pose{SignalDeg: 1, IdlerDeg: 1, PumpW: l.optics.PumpW, PumpNm: l.optics.PumpNm, CrystalCel: l.optics.CrystalCel, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}
	for _, a := range axes {
		switch a.Axis {
		case "signal_arm":
			p.SignalDeg = a.Angle.Degrees()
		case "idler_arm":
			p.IdlerDeg = a.Angle.Degrees()
		case "crystal_tilt":
			p.TiltDeg = a.Angle.Degrees()
		case "plate":
			p.WaveplateDeg = a.Angle.Degrees()
		}
	}
	return p
}

func (l *lit) expect(axes []scan.AxisTarget, _ []scan.SettingTarget) (scan.Expected, error) {
	l.asked++
	p := l.pose(axes)
	r := l.model.Expected(l.model.Rates(p))
	p.PumpOpen = 0
	d := l.model.Expected(l.model.Rates(p))
	return scan.Expected{
		CountsHz:      map[drivers.Channel]float64{"signal": r.SignalHz, "idler": r.IdlerHz, "pairs": r.TrueHz + r.AccidentalHz},
		AccidentalsHz: map[drivers.Channel]float64{"pairs": r.AccidentalHz},
		DarkHz:        map[drivers.Channel]float64{"signal": d.SignalHz, "idler": d.IdlerHz, "pairs": d.AccidentalHz},
	}, nil
}

// grid is a plan over both arms, the idler running fastest.
func grid(signal, idler [3]float64, serpentine bool) scan.Plan {
	p := scan.Plan{Title: "Both arms", Dwell: scan.Dwell{Time: 4 * time.Second, Slice: 2 * time.Second}, Repeat: scan.Repeat{Times: 1, Serpentine: serpentine}}
	line := 0
	for s := 0; s < int(signal[2]); s++ {
		for k := 0; k < int(idler[2]); k++ {
			i := k
			if serpentine && line%2 == 1 {
				i = int(idler[2]) - 1 - k
			}
			at := func(v [3]float64, n int) unit.Angle {
				if v[2] == 1 {
					return unit.Degrees(v[0])
				}
				return unit.Degrees(v[0] + (v[1]-v[0])*float64(n)/(v[2]-1))
			}
			p.Points = append(p.Points, scan.Point{Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: at(signal, s)}, {Axis: "idler_arm", Angle: at(idler, i)}}})
		}
		line++
	}
	return p
}
