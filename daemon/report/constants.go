package report

import (
	"fmt"
	"math"

	"gemel/daemon/bench"
	"gemel/protocol/strict"
	"gemel/scan/estimate"
)

// Constants are what a bench file declares that enters results, in the terms of the estimate. The
// truth of a simulated bench is not among them and cannot be.
func Constants(f *bench.File) estimate.Bench {
	b := estimate.Bench{Name: f.Name, AxisError: map[string]estimate.Constant{},
		Counter: estimate.Counter{Logic: estimate.Logic(f.Counter.Logic), Latched: f.Counter.Logic != "", Pairs: map[string][2]string{}, Window: constant(f.Counter.Window), Capture: constant(f.Counter.Capture)}}
	for channel, of := range f.Counter.Coincidences {
		b.Counter.Pairs[string(channel)] = [2]string{string(of[0]), string(of[1])}
	}
	for _, d := range f.Counter.Displaced {
		b.Counter.Displaced = append(b.Counter.Displaced, estimate.Displaced{Channel: string(d.Channel), Of: [2]string{string(d.Of[0]), string(d.Of[1])}, Windows: d.Windows})
	}
	for _, a := range f.Axes {
		b.AxisError[string(a.Name)] = estimate.Constant{U: a.Error.Degrees(), From: "bench file, error of " + string(a.Name)}
	}
	if f.Optics != nil {
		b.PumpNm = f.Optics.PumpWavelength * 1e9
	}
	for _, d := range f.Detectors {
		arm := estimate.Arm{Name: d.Name, Channel: string(d.Channel), DeadTime: constant(d.DeadTime), Model: estimate.DeadTimeModel(d.Model), Afterpulse: constant(d.Afterpulse), Settings: d.Settings}
		if f.Optics != nil {
			light(f, &arm)
		}
		b.Arms = append(b.Arms, arm)
	}
	return b
}

// light fills in what the optics say of the arm that carries a detector.
func light(f *bench.File, arm *estimate.Arm) {
	role, way := "", bench.Arm{}
	switch arm.Name {
	case f.Optics.Signal.Detector:
		role, way = "signal_arm", f.Optics.Signal
	case f.Optics.Idler.Detector:
		role, way = "idler_arm", f.Optics.Idler
	default:
		return
	}
	for _, a := range f.Axes {
		if a.Role == role {
			arm.Axis = string(a.Name)
		}
	}
	for _, t := range way.Path {
		arm.Path = append(arm.Path, estimate.Transmittance{Name: t.Part, Constant: constant(t.Share), Date: t.Date})
	}
	arm.Face = way.Face
	if way.Filter.Width > 0 {
		arm.Filter = &estimate.Filter{CentreNm: way.Filter.Centre * 1e9, WidthNm: way.Filter.Width * 1e9, Shape: way.Filter.Shape}
	}
	// A daughter's polarisation follows from the process: both ordinary in e-oo, and so on.
	process := string(f.Optics.Process)
	if len(process) == 4 {
		ray := map[byte]string{'o': "ordinary", 'e': "extraordinary"}[process[map[string]int{"signal_arm": 2, "idler_arm": 3}[role]]]
		arm.Polarisation = fmt.Sprintf("linear, of the %s ray", ray)
	}
}

func constant(m strict.Measured) estimate.Constant {
	return estimate.Constant{Value: m.Value, U: math.Abs(m.U), From: m.From}
}
