package report

import (
	"errors"
	"math"

	"gemel/daemon/bench"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/estimate"
	"gemel/sim/phasematch"
	"gemel/sim/source"
)

// model is what the source model of the declared optics can say about this run. Without optics it
// can say nothing, and the estimate names what it misses. The warnings, such as a crystal set used
// outside its range, belong into every result.
func model(f *bench.File, plan scan.Plan, rows estimate.Rows) (m estimate.Model, warnings []string) {
	optics, err := f.Source()
	if err != nil {
		return m, nil
	}
	w := witness{file: f, optics: optics, plan: plan}
	if m, err := source.New(optics); err == nil {
		warnings = m.Warnings()
	}
	for _, r := range rows.Readings {
		if r.Kind == protocol.Light && r.Accepted {
			w.lights = append(w.lights, r)
		}
	}
	if plan.Results[0].Kind == scan.Efficiency {
		m.Collection = w.collection
	}
	if plan.Results[0].Kind == scan.Peak && len(w.lights) > 0 {
		m.Profile = w.profile()
	}
	return m, warnings
}

// witness asks the model about the places of a run.
type witness struct {
	file   *bench.File
	optics source.Optics
	plan   scan.Plan
	lights []protocol.Reading
}

// pose is where a reading's axes stood, as the model wants it.
func (w witness) pose(r protocol.Reading) source.Pose {
	o := w.optics
	p := source.Pose{PumpW: o.PumpW, PumpNm: o.PumpNm, CrystalCel: o.CrystalCel, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}
	for _, a := range r.Angles {
		w.put(&p, a.Axis, (a.Before.Degrees()+a.After.Degrees())/2)
	}
	return p
}

func (w witness) put(p *source.Pose, axis string, deg float64) {
	for _, a := range w.file.Axes {
		if string(a.Name) != axis {
			continue
		}
		switch a.Role {
		case "signal_arm":
			p.SignalDeg = deg
		case "idler_arm":
			p.IdlerDeg = deg
		case "crystal_tilt":
			p.TiltDeg = deg
		}
	}
}

// collection is the share of the trigger's partners that the tested arm's aperture takes, averaged
// over the readings of the plateau. Around which angle these lie is asked of the model too, so that
// no reading decides whether it counts.
func (w witness) collection() (float64, error) {
	optics, swapped := w.optics, string(w.plan.Results[0].Trigger) != w.channelOf(w.file.Optics.Signal)
	if swapped {
		optics.Signal, optics.Idler = optics.Idler, optics.Signal
		optics.AzimuthDeg += 180
		optics.Process = partnerProcess(optics.Process)
	}
	m, err := source.New(optics)
	if err != nil {
		return 0, err
	}
	// In the order of the readings: a sum in the order of a map would differ in its last digit.
	share := map[source.Pose]float64{}
	sum, n := 0.0, 0
	for _, r := range w.lights {
		p := w.pose(r)
		if swapped {
			p.SignalDeg, p.IdlerDeg = p.IdlerDeg, p.SignalDeg
		}
		if half := w.plan.Results[0].HalfWidth.Degrees(); w.plan.Results[0].PlateauOf != "" && math.Abs(p.IdlerDeg-w.middle(m, p)) > half {
			continue
		}
		if _, known := share[p]; !known {
			share[p] = m.Collect(p).ApertureFraction
		}
		sum += share[p]
		n++
	}
	if n == 0 {
		return 0, errors.New("by the model no reading lies on the plateau: the tested arm's angles are off its partners' by more than the half width")
	}
	return sum / float64(n), nil
}

// middle is where the partners of a trigger at this pose go.
func (w witness) middle(m *source.Model, p source.Pose) float64 {
	signal, idler := m.Reference()
	if signal == 0 {
		return idler
	}
	return idler - (p.SignalDeg-signal)*idler/signal
}

func (w witness) channelOf(a bench.Arm) (channel string) {
	for _, d := range w.file.Detectors {
		if d.Name == a.Detector {
			return string(d.Channel)
		}
	}
	return ""
}

func partnerProcess(p phasematch.Process) phasematch.Process {
	if swapped := []rune(string(p)); len(swapped) == 4 {
		swapped[2], swapped[3] = swapped[3], swapped[2]
		return phasematch.Process(swapped)
	}
	return p
}

// profile predicts a channel's rate against the swept axis, in the unit of a perfect detector:
// scale, offset and background are the fit's.
func (w witness) profile() func(float64) float64 {
	optics := w.optics
	for _, arm := range []*source.Arm{&optics.Signal, &optics.Idler} {
		arm.Detector = source.Detector{Efficiency: 1, Model: arm.Detector.Model}
		arm.FluorescenceHzPerW, arm.StrayHzPerW = 0, 0
	}
	m, err := source.New(optics)
	if err != nil {
		return nil
	}
	base := w.pose(w.lights[0])
	of := string(w.plan.Results[0].Of)
	return func(deg float64) float64 {
		p := base
		w.put(&p, string(w.plan.Results[0].Along), deg)
		r := m.Rates(p)
		switch of {
		case w.channelOf(w.file.Optics.Signal):
			return r.SignalHz
		case w.channelOf(w.file.Optics.Idler):
			return r.IdlerHz
		}
		return r.PairsHz
	}
}
