package report

import (
	"fmt"
	"slices"
	"time"

	"gemel/daemon/bench"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/estimate"
	"gemel/scan/forecast"
	"gemel/sim/source"
)

// Foreseen is what a forecast is asked with, beside bench file and plan.
type Foreseen struct {
	Begins time.Time
	Aim    *forecast.Aim
	// Earlier are rates and costs from an earlier run; nil: the model's and the measured ones.
	Earlier *EarlierRun
}

// Forecast is what a plan will do on a bench, how long it takes and what it will be worth, by the
// same questions that its results will be worked out by.
func Forecast(file *bench.File, plan scan.Plan, o Foreseen) (*forecast.Forecast, error) {
	ask := forecast.Ask{Plan: plan, Bench: forecastBench(file), Begins: o.Begins, Aim: o.Aim, Expect: forecast.Expect(file.Facts().Expect), RatesFrom: "the model of the declared optics", Band: band(file)}
	if o.Earlier != nil {
		ask.Expect, ask.RatesFrom, ask.Bench.Costs = o.Earlier.Expect, o.Earlier.From, o.Earlier.Costs
	}
	if len(plan.Results) > 0 && file.Optics != nil {
		ask.Results = func(rows estimate.Rows) ([]estimate.Result, error) {
			rows.Planned = len(plan.Points)
			var all []estimate.Result
			for _, q := range plan.Results {
				r, err := Result(rows, file, plan, q, Options{})
				if err != nil {
					return nil, err
				}
				all = append(all, r)
			}
			return all, nil
		}
	}
	if plan.Refine != nil {
		ask.Refine = func(rows estimate.Rows, points []scan.Point, added int, refinedAt, now time.Time) []scan.Point {
			known := past{rows: rows, points: points, added: added, refinedAt: protocol.Time{Time: refinedAt}, lastAt: protocol.Time{Time: now}}
			d, err := known.refine(plan, file)
			if err != nil {
				return nil
			}
			return d.Points
		}
	}
	return forecast.Of(ask)
}

// forecastBench is what a forecast must know of a bench file.
func forecastBench(file *bench.File) forecast.Bench {
	b := forecast.Bench{Name: file.Name, KeepOuts: file.KeepOuts, Costs: costs(file),
		Counter: forecast.Counter{Name: file.Counter.Name, Coincidences: file.Counter.Coincidences, Bits: file.Counter.Bits}}
	for _, c := range file.Counter.Channels {
		if c != file.Counter.Tag {
			b.Counter.Channels = append(b.Counter.Channels, c)
		}
	}
	for _, a := range file.Axes {
		b.Axes = append(b.Axes, a.Axis)
		at := max(a.Low, min(a.High, 0))
		if a.Park != nil {
			at = *a.Park
		}
		b.Start = append(b.Start, at)
	}
	for _, c := range file.Controllers {
		b.Controllers = append(b.Controllers, c.Name)
	}
	shutter := func(s bench.Shutter) forecast.Shutter {
		return forecast.Shutter{Name: s.Name, SettleOpen: s.SettleOpen, SettleClosed: s.SettleClosed}
	}
	if file.Pump != nil {
		s := shutter(*file.Pump)
		b.Pump = &s
	}
	for _, d := range file.Detectors {
		b.Detectors = append(b.Detectors, forecast.Detector{Name: d.Name, Channel: d.Channel, TripHz: d.TripHz, FloorHz: d.FloorHz, Glance: d.Glance, Ready: d.Ready,
			ProtectBy: d.ProtectBy, DeadTimeS: d.DeadTime.Value})
		known := slices.ContainsFunc(b.Protectors, func(s forecast.Shutter) bool { return s.Name == d.ProtectBy })
		if i := slices.IndexFunc(file.Protectors, func(s bench.Shutter) bool { return s.Name == d.ProtectBy }); i >= 0 && !known {
			b.Protectors = append(b.Protectors, shutter(file.Protectors[i]))
		}
	}
	for _, s := range file.Sensors {
		b.Sensors = append(b.Sensors, s.Name)
	}
	for _, s := range file.Settings {
		one := forecast.Setting{Name: s.Name, Unit: s.Unit, Settle: s.Settle}
		if value, ok := file.Stands(s); ok {
			one.Stand = &value
		}
		b.Settings = append(b.Settings, one)
	}
	b.Pace, b.PumpPower = float64(file.Pace()), pumpPower(file)
	return b
}

// pumpPower is what the bench's one sensor of power shows by what the optics declare; nil where there
// is none, or where several leave it open which one looks at the pump.
func pumpPower(file *bench.File) *forecast.PumpPower {
	if file.Optics == nil {
		return nil
	}
	var w *forecast.PumpPower
	for _, s := range file.Sensors {
		if s.Kind != unit.Power {
			continue
		}
		if w != nil {
			return nil
		}
		value, err := unit.In(file.Optics.PumpPower, s.Unit)
		if err != nil {
			return nil
		}
		w = &forecast.PumpPower{Sensor: s.Name, Unit: s.Unit, Value: value}
	}
	for _, s := range file.Settings {
		var p source.Pose
		if file.Set(&p, s.Name, 1); w == nil || p.PumpW == 0 {
			continue
		}
		if one, err := unit.In(p.PumpW, w.Unit); err == nil {
			w.By, w.ByUnit = s.Name, one
		}
	}
	return w
}

// bitsAsked are the bits of one question and its answer on a serial line, start and stop bits in them.
const bitsAsked = 400

// costs are the measured ones, with what slow lines add.
func costs(file *bench.File) forecast.Costs {
	c := forecast.Measured(len(file.Lines))
	c.On = map[drivers.DeviceName]time.Duration{}
	if pace := file.Pace(); pace > 1 {
		c.From += fmt.Sprintf("; with the clock %d times as fast, what this computer takes itself counts as often and is not in it: --from RUN has it from a run", int(pace))
	}
	baud := map[string]int{}
	for _, l := range file.Lines {
		baud[l.Name] = l.Baud
	}
	slow := func(d bench.Device) {
		if b := baud[d.Line]; b > 0 {
			c.On[d.Name] = c.Question + time.Duration(bitsAsked*float64(time.Second)/float64(b))
		}
	}
	for _, x := range file.Controllers {
		slow(x.Device)
	}
	slow(file.Counter.Device)
	if file.Pump != nil {
		slow(file.Pump.Device)
	}
	for _, x := range file.Protectors {
		slow(x.Device)
	}
	for _, x := range file.Sensors {
		slow(x.Device)
	}
	for _, x := range file.Settings {
		slow(x.Device)
	}
	return c
}

// band is what the arms' filters pass, where both are declared.
func band(file *bench.File) *forecast.Band {
	if file.Optics == nil {
		return nil
	}
	b := &forecast.Band{PumpNm: file.Optics.PumpWavelength * 1e9}
	for i, arm := range []bench.Arm{file.Optics.Signal, file.Optics.Idler} {
		b.Names[i], b.CentreNm[i], b.WidthNm[i] = arm.Detector, arm.Filter.Centre*1e9, arm.Filter.Width*1e9
		for _, d := range file.Detectors {
			if d.Name == arm.Detector {
				b.Channels[i] = d.Channel
			}
		}
	}
	return b
}
