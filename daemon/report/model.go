package report

import (
	"errors"
	"math"
	"slices"

	"gemel/daemon/bench"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/estimate"
	"gemel/sim/phasematch"
	"gemel/sim/source"
)

// model is what the source model of the declared optics can say about one result of a run. Without
// optics it can say nothing, and the estimate names what it misses. The warnings, such as a crystal
// set used outside its range, belong into every result.
func model(f *bench.File, result scan.Result, rows estimate.Rows) (m estimate.Model, warnings []string) {
	w, foreseen := witnessOf(f, result, rows)
	if m, err := source.New(w.optics); err == nil {
		warnings = m.Warnings()
	}
	if len(w.lights) == 0 || !foreseen && result.Kind != scan.Efficiency {
		return m, warnings
	}
	switch result.Kind {
	case scan.Efficiency:
		m.Collection = w.collection
	case scan.Peak, scan.Zero:
		m.Profile = w.profile(w.lights, 0)
	case scan.TuningCurve:
		m.ProfileAt, m.CutDeg = w.profileAt, w.cut
		m.Bare = func(tiltDeg float64) (float64, error) { return f.Facts().Emission(w.role(result.Along), tiltDeg) }
	case scan.ConjugateMap:
		tilt := w.pose(w.lights[0]).TiltDeg
		m.ProfileAt = w.profileAt
		m.Bare = func(otherDeg float64) (float64, error) {
			return f.Facts().Conjugate(w.role(result.Against), otherDeg, tilt)
		}
	}
	return m, warnings
}

// witness asks the model about the places of a run.
type witness struct {
	file   *bench.File
	optics source.Optics
	result scan.Result
	lights []protocol.Reading

	perfect *source.Model // with perfect detectors, for the shape of a profile
}

// witnessOf is false where the model has nothing to say of a profile: no optics, or no light.
func witnessOf(f *bench.File, result scan.Result, rows estimate.Rows) (w witness, ok bool) {
	w = witness{file: f, result: result}
	optics, err := f.Source()
	if err != nil {
		return w, false
	}
	w.optics = optics
	w.perfect = f.Perfect()
	for _, r := range rows.Readings {
		if _, doubtful := rows.Doubtful[r.Sequence]; r.Kind == protocol.Light && r.Accepted && !doubtful {
			w.lights = append(w.lights, r)
		}
	}
	return w, w.perfect != nil && len(w.lights) > 0
}

// pose is how the bench stood at a reading, as the model wants it.
func (w witness) pose(r protocol.Reading) source.Pose {
	p := w.file.Still()
	for _, s := range r.Settings {
		w.file.Set(&p, drivers.DeviceName(s.Name), (s.Before+s.After)/2)
	}
	for _, a := range r.Angles {
		w.file.Put(&p, drivers.AxisName(a.Axis), stood(a))
	}
	return p
}

// stood is where an axis stood around a reading, degrees.
func stood(a protocol.Angle) float64 { return (a.Before.Degrees() + a.After.Degrees()) / 2 }

func (w witness) role(axis drivers.AxisName) string {
	for _, a := range w.file.Axes {
		if a.Name == axis {
			return a.Role
		}
	}
	return ""
}

// collection is the share of the trigger's partners that the tested arm's aperture takes, averaged
// over the readings of the plateau. Around which angle these lie is asked of the model too, so that
// no reading decides whether it counts.
func (w witness) collection() (float64, error) {
	optics, swapped := w.optics, string(w.result.Trigger) != w.channelOf(w.file.Optics.Signal)
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
		p.DelayS, p.Gain = 0, [2]float64{} // which collect nothing
		if swapped {
			p.SignalDeg, p.IdlerDeg = p.IdlerDeg, p.SignalDeg
			p.RadiusMm[0], p.RadiusMm[1] = p.RadiusMm[1], p.RadiusMm[0]
		}
		if half := w.result.HalfWidth.Degrees(); w.result.PlateauOf != "" && math.Abs(p.IdlerDeg-w.middle(m, p)) > half {
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
// scale, offset and background are the fit's. All other axes follow it as they did in the readings,
// an arm that was kept on the partner for one; the crystal stands tiltDeg further than it says.
func (w witness) profile(lights []protocol.Reading, tiltDeg float64) func(float64) float64 {
	if w.perfect == nil || len(lights) == 0 {
		return nil
	}
	base := w.pose(lights[0])
	follow := w.follow(lights)
	return func(deg float64) float64 {
		p := base
		for _, f := range follow {
			w.file.Put(&p, f.axis, f.at(deg))
		}
		w.file.Put(&p, w.result.Along, deg)
		p.TiltDeg += tiltDeg
		return w.rate(p)
	}
}

// at is profile's rate at a planned point; what the point does not name stands as it last stood.
func (w witness) at(point scan.Point) float64 {
	p := w.pose(w.lights[len(w.lights)-1])
	for _, s := range point.Settings {
		w.file.Set(&p, s.Setting, s.Value)
	}
	for _, a := range point.Axes {
		w.file.Put(&p, a.Axis, a.Angle.Degrees())
	}
	return w.rate(p)
}

func (w witness) rate(p source.Pose) float64 {
	r := w.perfect.Rates(p)
	switch string(w.result.Of) {
	case w.channelOf(w.file.Optics.Signal):
		return r.SignalHz
	case w.channelOf(w.file.Optics.Idler):
		return r.IdlerHz
	}
	return r.PairsHz
}

// profileAt is profile for the readings at one place of the other axis.
func (w witness) profileAt(againstDeg, shiftDeg float64) func(float64) float64 {
	var there []protocol.Reading
	for _, r := range w.lights {
		if slices.ContainsFunc(r.Angles, func(a protocol.Angle) bool {
			return a.Axis == string(w.result.Against) && a.Target.Degrees() == againstDeg
		}) {
			there = append(there, r)
		}
	}
	return w.profile(there, shiftDeg)
}

// followed is an axis as a straight line against the swept one, which is what a conjugate is over the
// width of a profile, and what an axis is that stands still.
type followed struct {
	axis                 drivers.AxisName
	alongDeg, deg, slope float64
}

func (f followed) at(alongDeg float64) float64 { return f.deg + f.slope*(alongDeg-f.alongDeg) }

func (w witness) follow(lights []protocol.Reading) (all []followed) {
	along := func(r protocol.Reading, axis drivers.AxisName) (float64, bool) {
		for _, a := range r.Angles {
			if a.Axis == string(axis) {
				return stood(a), true
			}
		}
		return 0, false
	}
	for _, a := range w.file.Axes {
		if a.Name == w.result.Along {
			continue
		}
		f := followed{axis: a.Name}
		n, xx, xy := 0.0, 0.0, 0.0
		for _, r := range lights {
			x, okX := along(r, w.result.Along)
			y, okY := along(r, a.Name)
			if okX && okY {
				f.alongDeg, f.deg, n = f.alongDeg+x, f.deg+y, n+1
			}
		}
		if n == 0 {
			continue
		}
		f.alongDeg, f.deg = f.alongDeg/n, f.deg/n
		for _, r := range lights {
			x, okX := along(r, w.result.Along)
			y, okY := along(r, a.Name)
			if okX && okY {
				xx, xy = xx+(x-f.alongDeg)*(x-f.alongDeg), xy+(x-f.alongDeg)*(y-f.deg)
			}
		}
		if xx > 0 {
			f.slope = xy / xx
		}
		all = append(all, f)
	}
	return all
}

// cut is the cut whose untilted crystal has the same angle between pump and optic axis as the
// declared one at a tilt.
func (w witness) cut(tiltDeg float64) (float64, error) {
	o := w.optics
	slab := phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, TiltDeg: tiltDeg, ThicknessMm: o.ThicknessMm, Cel: o.CrystalCel,
		PumpNm: o.PumpNm, PolingUm: o.PolingUm, Extrapolate: o.Extrapolate}
	return slab.PumpAxisDeg()
}
