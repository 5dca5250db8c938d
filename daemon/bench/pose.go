package bench

import (
	"slices"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/sim/instruments"
	"gemel/sim/source"
)

// Still is the bench as its optics declare it, shutters open: every axis at its park angle, at zero
// without one, and every setting where the light is as declared. It is for benches with optics.
func (f *File) Still() source.Pose {
	o := f.lit(truth{})
	p := source.Pose{PumpW: o.PumpW, PumpNm: o.PumpNm, CrystalCel: o.CrystalCel, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}
	for _, a := range f.Axes {
		if a.Park != nil {
			f.Put(&p, a.Name, a.Park.Degrees())
		}
	}
	return p
}

// Put stands an axis, by its name in the file, at a bench angle. Axes that do nothing to the light
// change nothing.
func (f *File) Put(p *source.Pose, axis drivers.AxisName, deg float64) {
	i := slices.IndexFunc(f.Axes, func(a Axis) bool { return a.Name == axis })
	if i < 0 {
		return
	}
	switch f.Axes[i].Role {
	case signalArm:
		p.SignalDeg = deg
	case idlerArm:
		p.IdlerDeg = deg
	case crystalTilt:
		p.TiltDeg = deg
	case pumpWaveplate:
		p.WaveplateDeg = deg
	}
}

// Set gives a setting, by its name in the file, a value in its unit. What a delay or a bias does
// follows from what the file declares of it; settings of which it says nothing change nothing.
func (f *File) Set(p *source.Pose, setting drivers.DeviceName, value float64) {
	i := slices.IndexFunc(f.Settings, func(s Setting) bool { return s.Name == setting })
	if i < 0 {
		return
	}
	s := f.Settings[i]
	base := s.base(value)
	switch s.Is {
	case instruments.PumpPower:
		p.PumpW = base
	case instruments.CrystalTemperature:
		p.CrystalCel = base
	case instruments.Delay:
		if s.Centre != nil {
			p.DelayS = base - s.Centre.Value
		}
	case instruments.SignalIris:
		p.RadiusMm[0] = base / 2 * 1000
	case instruments.IdlerIris:
		p.RadiusMm[1] = base / 2 * 1000
	case instruments.SignalBias:
		p.Gain[0] = s.PerVolt * (base - s.Nominal)
	case instruments.IdlerBias:
		p.Gain[1] = s.PerVolt * (base - s.Nominal)
	case instruments.RoomLight:
		for i, adds := range s.AddsHz {
			p.RoomHz[i] += max(0, value) * adds
		}
	}
}

// pose is the bench with some axes and settings elsewhere.
func (f *File) pose(axes []scan.AxisTarget, settings []scan.SettingTarget) source.Pose {
	p := f.Still()
	for _, t := range axes {
		f.Put(&p, t.Axis, t.Angle.Degrees())
	}
	for _, t := range settings {
		f.Set(&p, t.Setting, t.Value)
	}
	return p
}

// tiltOf is where a pose's crystal stands, as exact as an axis is.
func tiltOf(p source.Pose) unit.Angle { return unit.Degrees(p.TiltDeg) }
