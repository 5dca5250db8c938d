package bench

import (
	"errors"
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/sim/crystal"
	"gemel/sim/instruments"
	"gemel/sim/phasematch"
	"gemel/sim/source"
)

// Optics is the light's way as the file states it. Lengths are metres.
type Optics struct {
	Crystal     crystal.Set // published, or the file's own
	Process     phasematch.Process
	Cut         unit.Angle
	Thickness   float64
	Poling      float64    // period; 0: none
	Temperature float64    // Cel
	Azimuth     unit.Angle // of the half-plane in which the signal arm turns
	Extrapolate bool

	PumpWavelength float64
	PumpWaist      float64    // 1/e² intensity radius at the crystal
	PumpPower      float64    // W
	PumpOff        unit.Angle // of its polarisation from the one that is phase-matched, wave plate at 0
	PairsPerMw     float64    // Hz: both photons through apertures and filters, before losses

	Signal, Idler Arm

	at strict.Place
}

// Arm is one collection arm.
type Arm struct {
	Detector   string
	Aperture   string          // source.Iris or source.Gaussian
	Radius     strict.Measured // m: of the iris, or 1/e² intensity radius of the mode
	Distance   strict.Measured // m
	OutOfPlane unit.Angle
	Filter     Filter
	Polarised  bool
	UnpairedHz float64 // recorded light without partners for each milliwatt of pump, that a forecast takes
	Path       []Transmittance
	Face       string // "window" or "fibre_input": the plane the efficiency refers to; empty: not stated
}

// Filter is a band pass; zero means none. Centre and Width are those that the light sees, at the angle
// at which it meets the filter.
type Filter struct {
	Centre, Width float64 // m
	Shape         string
}

// tilt moves the band to where it is for light that meets the filter at an angle.
func (f *Filter) tilt(angle, index strict.Value, m strict.Map) {
	if !angle.Given() && !index.Given() {
		return
	}
	m.Need("angle")
	m.Need("index")
	deg, n := angle.Angle(0, 60*unit.Degree).Degrees(), index.Number(1, 5, 1)
	if angle.Good() && index.Good() {
		t := source.Filter{CentreNm: f.Centre * 1e9, WidthNm: f.Width * 1e9}.Tilted(deg, n)
		f.Centre, f.Width = tidy(t.CentreNm)*1e-9, tidy(t.WidthNm)*1e-9
	}
}

// Transmittance is one part of the way from inside the crystal to the detector.
type Transmittance struct {
	Part  string
	Share strict.Measured
	Date  string // when it was measured
}

// transmittance is the product of the declared parts.
func (a Arm) transmittance() float64 {
	t := 1.0
	for _, p := range a.Path {
		t *= p.Share.Value
	}
	return t
}

// truth is what only the virtual instruments know.
type truth struct {
	signal, idler                  armTruth
	jitter                         float64 // s, rms between the two arrivals of a pair
	powerNoise                     float64 // of the power monitor, rms, relative
	temperatureNoise               float64 // of the temperature monitor, rms, Cel
	powerWander, temperatureWander instruments.Wander
	axes                           map[string]axisTruth
	settings                       []settingTruth
	at                             strict.Place
}

type armTruth struct {
	given        bool
	efficiency   float64
	darkHz       *float64 // nil: as stated
	fluorescence float64  // Hz per mW
	stray        float64  // Hz per mW
	room         float64  // Hz at the open detector
	afterpulse   float64  // s, mean delay
	latchHz      float64
}

type axisTruth struct {
	play  unit.Angle
	start *unit.Angle
	lost  bool // does not know its zero when the world begins
}

func (r *reader) simulation(v strict.Value) {
	if !v.Given() {
		return
	}
	m := v.Map()
	s := &Simulation{Clock: int(m.Opt("clock").Int(1, 100, 1)), Seed: uint64(m.Need("seed").Int(0, 999_999_999_999_999_999))}
	t := m.Need("truth")
	tm := t.Map()
	s.truth.at = t.Place()
	s.truth.signal, s.truth.idler = readArmTruth(tm.Need("signal")), readArmTruth(tm.Need("idler"))
	s.truth.jitter = tm.Opt("jitter").Quantity(unit.Time, 0, 1e-3)
	s.truth.powerNoise = tm.Opt("power_noise").Quantity(unit.Share, 0, 1)
	s.truth.temperatureNoise = tm.Opt("temperature_noise").Difference(unit.Temperature, 0, 10)
	s.truth.powerWander = readWander(tm.Opt("power_wander"), unit.Share)
	s.truth.temperatureWander = readWander(tm.Opt("temperature_wander"), unit.Temperature)
	s.truth.axes = map[string]axisTruth{}
	for _, e := range tm.Opt("axes").Map().Entries() {
		a := e.Value.Map()
		x := axisTruth{play: a.Opt("play").Angle(0, unit.Turn), lost: !a.Opt("homed").Bool(true)}
		if start := a.Opt("start"); start.Given() {
			deg := start.Angle(-farthest, farthest)
			x.start = &deg
		}
		a.Done()
		s.truth.axes[e.Name] = x
	}
	s.truth.settings = readSettingTruths(tm.Opt("settings"))
	tm.Done()
	m.Done()
	r.file.Simulation = s
}

// readWander reads a slow swing about the value that stands still.
func readWander(v strict.Value, kind unit.Kind) instruments.Wander {
	if !v.Given() {
		return instruments.Wander{}
	}
	m := v.Map()
	most := 50.0 // kelvins
	if kind == unit.Share {
		most = 0.5
	}
	w := instruments.Wander{Amplitude: m.Need("amplitude").Difference(kind, 0, most), Period: m.Need("period").Duration(time.Minute, 30*24*time.Hour)}
	m.Done()
	return w
}

func readArmTruth(v strict.Value) armTruth {
	m := v.Map()
	t := armTruth{
		given: v.Given(), efficiency: m.Need("efficiency").Quantity(unit.Share, 0.0001, 1),
		fluorescence: m.Opt("fluorescence_per_mw").Quantity(unit.Rate, 0, 1e9), stray: m.Opt("stray_per_mw").Quantity(unit.Rate, 0, 1e9),
		room: m.Opt("room").Quantity(unit.Rate, 0, 1e9), afterpulse: m.Opt("afterpulse_delay").Quantity(unit.Time, 0, 1),
		latchHz: m.Opt("latch_rate").Quantity(unit.Rate, 0, 1e12),
	}
	if dark := m.Opt("dark_rate"); dark.Given() {
		hz := dark.Quantity(unit.Rate, 0, 1e9)
		t.darkHz = &hz
	}
	m.Done()
	return t
}

func (r *reader) optics(v, arms strict.Value) {
	if !v.Given() && !arms.Given() {
		return
	}
	if !v.Given() {
		arms.Fail("arms without optics", "a block \"optics\"")
		return
	}
	m := v.Map()
	o := &Optics{at: v.Place()}
	o.Crystal = r.crystal(m.Need("crystal"))
	processes := make([]string, 0, 6)
	for _, p := range phasematch.Processes() {
		processes = append(processes, string(p))
	}
	o.Process = phasematch.Process(m.Need("process").Choice(processes))
	o.Cut = m.Need("cut").Angle(0, 90*unit.Degree)
	o.Thickness = m.Need("thickness").Quantity(unit.Length, 1e-6, 1)
	o.Poling = m.Opt("poling").Quantity(unit.Length, 1e-7, 1e-2)
	o.Temperature = m.Opt("temperature").Quantity(unit.Temperature, -100, 400, 20)
	o.Azimuth = m.Opt("azimuth").Angle(-unit.Turn, unit.Turn)
	o.Extrapolate = m.Opt("extrapolate").Bool()
	p := m.Need("pump").Map()
	o.PumpWavelength = p.Need("wavelength").Quantity(unit.Length, 150e-9, 5e-6)
	o.PumpWaist = p.Need("waist").Quantity(unit.Length, 1e-6, 1e-2)
	o.PumpPower = p.Need("power").Quantity(unit.Power, 0, 100)
	p.Refuse("a pulsed pump: not supported", "a continuous pump: with pulses, accidentals come in bunches that this program does not correct", "pulsed", "repetition_rate", "pulse_length")
	o.PumpOff = p.Opt("polarisation_axis").Angle(-unit.Turn/4, unit.Turn/4)
	p.Done()
	o.PairsPerMw = m.Need("pairs_per_mw").Quantity(unit.Rate, 0, 1e9)
	m.Done()
	am := arms.Map()
	if !arms.Given() {
		v.Fail("optics without arms", "a block \"arms\" with \"signal\" and \"idler\"")
	} else {
		o.Signal, o.Idler = r.arm(am.Need("signal")), r.arm(am.Need("idler"))
		am.Done()
	}
	r.file.Optics = o
}

func (r *reader) arm(v strict.Value) Arm {
	m := v.Map()
	detector := m.Need("detector")
	a := Arm{Detector: detector.Token()}
	if detector.Good() && !r.hasDetector(a.Detector) {
		detector.Failf("a detector of this file")
	}
	ap := m.Need("aperture").Map()
	a.Aperture = ap.Need("kind").Choice([]string{source.Iris, source.Gaussian})
	a.Radius = ap.Need("radius").Measured(unit.Length, 1e-6, 1)
	ap.Done()
	a.Distance = m.Need("distance").Measured(unit.Length, 1e-3, 100)
	a.OutOfPlane = m.Opt("out_of_plane").Angle(-10*unit.Degree, 10*unit.Degree)
	if f := m.Opt("filter"); f.Given() {
		fm := f.Map()
		a.Filter = Filter{Centre: fm.Need("centre").Quantity(unit.Length, 100e-9, 20e-6), Width: fm.Need("width").Quantity(unit.Length, 1e-12, 10e-6),
			Shape: fm.Need("shape").Choice([]string{source.FilterGaussian, source.FilterFlat})}
		a.Filter.tilt(fm.Opt("angle"), fm.Opt("index"), fm)
		fm.Done()
	}
	a.Polarised = m.Opt("polarised").Bool()
	a.UnpairedHz = m.Opt("expected_unpaired_per_mw").Quantity(unit.Rate, 0, 1e9)
	for _, item := range m.Opt("path").List(1, 64) {
		pm := item.Map()
		t := Transmittance{Part: pm.Need("part").Text()}
		t.Share.Value = pm.Need("value").Quantity(unit.Share, 0, 1)
		t.Share.U = pm.Opt("u").Quantity(unit.Share, 0, 1)
		t.Share.From = pm.Opt("from").Text("")
		t.Date = pm.Opt("date").Text("")
		pm.Done()
		a.Path = append(a.Path, t)
	}
	a.Face = m.Opt("face").Choice([]string{"window", "fibre_input"}, "")
	m.Done()
	return a
}

func (r *reader) hasDetector(name string) bool {
	for _, d := range r.file.Detectors {
		if d.Name == name {
			return true
		}
	}
	return false
}

// crystal reads the name of a published set, or a set of the file's own as term lists:
// n² = constant + Σ num·L^power/(L² − pole) + Σ coefficient·L^power, with L in micrometres.
func (r *reader) crystal(v strict.Value) crystal.Set {
	if !v.IsMap() {
		set, _ := crystal.Named(v.Choice(crystal.Names()))
		return set
	}
	before := r.findings()
	m := v.Map()
	name := m.Need("name")
	set := crystal.Set{Name: name.Token(), Class: crystal.Uniaxial, Title: "the bench file's own set", SourceKind: "own"}
	if slices.Contains(crystal.Names(), set.Name) {
		name.Failf("a name that no published set has")
	}
	set.Reference = m.Need("reference").Text()
	set.RefCel = m.Opt("temperature").Quantity(unit.Temperature, -273.15, 2000, 20)
	set.Axes = []crystal.Dispersion{readDispersion(m.Need("n_o"), crystal.Ordinary), readDispersion(m.Need("n_e"), crystal.Extraordinary)}
	m.Done()
	own, err := crystal.Own(set)
	if err != nil && r.findings() == before { // else it complains about what was found already
		found, want := halves(strings.TrimPrefix(err.Error(), "crystal: "))
		v.Fail(found, want)
	}
	return own
}

func (r *reader) findings() int {
	if e, ok := errors.AsType[*strict.Error](r.doc.Err()); ok {
		return len(e.Findings)
	}
	return 0
}

func readDispersion(v strict.Value, axis crystal.Axis) crystal.Dispersion {
	const largest = 1e6
	d := crystal.Dispersion{Axis: axis}
	m := v.Map()
	d.Constant = m.Need("constant").Number(-largest, largest)
	for _, item := range m.Opt("poles").List(1, 16) {
		if t := item.List(3, 3); t != nil {
			d.Poles = append(d.Poles, crystal.Pole{Num: t[0].Number(-largest, largest), Power: int(t[1].Int(-12, 12)), Pole: t[2].Number(-largest, largest)})
		}
	}
	terms := func(v strict.Value) (list []crystal.Power) {
		for _, item := range v.List(1, 16) {
			if t := item.List(2, 2); t != nil {
				list = append(list, crystal.Power{Coef: t[0].Number(-largest, largest), Power: int(t[1].Int(-12, 12))})
			}
		}
		return list
	}
	d.Powers = terms(m.Opt("powers"))
	d.DnDT = terms(m.Opt("dn_dt"))
	if d.DnDT != nil {
		d.DnDTKind = "own"
	}
	if r := m.Need("range").List(2, 2); r != nil {
		for i := range r {
			d.RangeUm[i] = r[i].Quantity(unit.Length, 50e-9, 100e-6) * 1e6
		}
	}
	m.Done()
	return d
}

// Source is the light's way as the file states it, in the terms of the model: what a prediction or
// an estimate may know. Nothing of the truth is in it; detectors have no efficiency.
func (f *File) Source() (source.Optics, error) {
	if f.Optics == nil {
		return source.Optics{}, fmt.Errorf("%s: a bench without optics; want the blocks \"optics\" and \"arms\"", f.Path)
	}
	return f.lit(truth{}), nil
}

// source is the light as the virtual instruments need it: the optics of the file with the truth
// that the file keeps apart.
func (f *File) source() (source.Optics, error) { return f.lit(f.Simulation.truth), nil }

func (f *File) lit(t truth) source.Optics {
	o := f.Optics
	return source.Optics{
		Crystal: o.Crystal, Process: o.Process, CutDeg: o.Cut.Degrees(), ThicknessMm: tidy(o.Thickness * 1e3), PolingUm: tidy(o.Poling * 1e6),
		CrystalCel: o.Temperature, AzimuthDeg: o.Azimuth.Degrees(), Extrapolate: o.Extrapolate,
		PumpNm: tidy(o.PumpWavelength * 1e9), PumpWaistUm: tidy(o.PumpWaist * 1e6), PumpW: o.PumpPower, PumpOffDeg: o.PumpOff.Degrees(), PairHzPerMw: o.PairsPerMw,
		Signal: f.sourceArm(o.Signal, t.signal), Idler: f.sourceArm(o.Idler, t.idler),
		Counter: source.Counter{WindowS: f.Counter.Window.Value, JitterS: t.jitter, Logic: f.Counter.Logic},
	}
}

// tidy drops what a change of units rounds: 405.00000000000006.
func tidy(v float64) float64 {
	t, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 14, 64), 64)
	if err != nil {
		return v
	}
	return t
}

func (f *File) sourceArm(a Arm, t armTruth) source.Arm {
	s := source.Arm{
		Aperture: a.Aperture, RadiusMm: tidy(a.Radius.Value * 1e3), DistanceMm: tidy(a.Distance.Value * 1e3), OutOfPlaneDeg: a.OutOfPlane.Degrees(),
		Filter:        source.Filter{CentreNm: tidy(a.Filter.Centre * 1e9), WidthNm: tidy(a.Filter.Width * 1e9), Shape: a.Filter.Shape},
		Transmittance: a.transmittance(), Polarised: a.Polarised,
		FluorescenceHzPerW: t.fluorescence * 1e3, StrayHzPerW: t.stray * 1e3,
	}
	for _, d := range f.Detectors {
		if d.Name != a.Detector {
			continue
		}
		s.Detector = source.Detector{Efficiency: t.efficiency, DarkHz: d.Dark.Value, DeadTimeS: d.DeadTime.Value, Model: d.Model,
			Afterpulse: d.Afterpulse.Value, AfterpulseS: t.afterpulse, LatchHz: t.latchHz}
		if t.darkHz != nil {
			s.Detector.DarkHz = *t.darkHz
		}
	}
	return s
}
