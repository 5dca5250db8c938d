package source

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"

	"gemel/protocol/unit"
	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

// Job is a question about phase matching as a person writes it: quantities with their units. Empty
// fields have defaults, but crystal, pump and cut. The names are those of the command's flags.
type Job struct {
	Crystal     string `json:"crystal"`
	Process     string `json:"process"`     // default e-oo, in positive crystals o-ee
	Pump        string `json:"pump"`        // vacuum wavelength
	Cut         string `json:"cut"`         // optic axis to face normal
	Signal      string `json:"signal"`      // default twice the pump
	Tilt        string `json:"tilt"`        // default 0 deg
	Azimuth     string `json:"azimuth"`     // default 0 deg
	Temperature string `json:"temperature"` // default the set's own
	Thickness   string `json:"thickness"`   // default none: no widths
	Waist       string `json:"waist"`       // default none: no correlation
	Poling      string `json:"poling"`      // default none
	Extrapolate bool   `json:"extrapolate"` // evaluate outside the set's range, and say so
}

// Query is the same in numbers.
type Query struct {
	Slab       phasematch.Slab
	SignalNm   float64
	AzimuthDeg float64
	WaistUm    float64 // 0: unknown
	// Optics, when not nil, are those of a bench: what its apertures and filters really collect is
	// worked out as well.
	Optics *Optics
	// TuningPoints is the number of wavelengths of the tuning curve, 0 for none.
	TuningPoints int
}

// Query reads the job. All of its faults are reported at once.
func (j Job) Query() (Query, error) {
	var q Query
	var errs []error
	set, err := crystal.Named(j.Crystal)
	if err != nil {
		errs = append(errs, err)
	}
	read := func(name, text string, kind unit.Kind, in string, otherwise float64, needed bool) float64 {
		if text == "" {
			if needed {
				errs = append(errs, fmt.Errorf("%s: nothing; want a value such as %s", name, map[string]string{"pump": `"405 nm"`, "cut": `"29.2 deg"`}[name]))
			}
			return otherwise
		}
		v, err := unit.Parse(text, kind)
		if err == nil {
			v, err = unit.In(v, in)
		}
		if err != nil {
			errs = append(errs, fmt.Errorf("%s: %w", name, err))
		}
		return tidy(v)
	}
	s := &q.Slab
	s.Crystal, s.Extrapolate = set, j.Extrapolate
	s.PumpNm = read("pump", j.Pump, unit.Length, "nm", 0, true)
	s.CutDeg = read("cut", j.Cut, unit.Plane, "deg", 0, true)
	s.TiltDeg = read("tilt", j.Tilt, unit.Plane, "deg", 0, false)
	s.ThicknessMm = read("thickness", j.Thickness, unit.Length, "mm", 0, false)
	s.Cel = read("temperature", j.Temperature, unit.Temperature, "Cel", set.RefCel, false)
	s.PolingUm = read("poling", j.Poling, unit.Length, "um", 0, false)
	q.SignalNm = read("signal", j.Signal, unit.Length, "nm", 2*s.PumpNm, false)
	q.AzimuthDeg = read("azimuth", j.Azimuth, unit.Plane, "deg", 0, false)
	q.WaistUm = read("waist", j.Waist, unit.Length, "um", 0, false)
	if q.WaistUm < 0 {
		errs = append(errs, fmt.Errorf("waist: %q; want more than 0", j.Waist))
	}
	s.Process = phasematch.Process(j.Process)
	if j.Process == "" {
		if s.Process = phasematch.EOO; set.Sign == "positive" {
			s.Process = phasematch.OEE
		}
	}
	if len(errs) == 0 {
		if err := s.Check(); err != nil {
			errs = append(errs, err)
		}
	}
	return q, errors.Join(errs...)
}

// tidy drops what a change of units rounds: 405.00000000000006.
func tidy(v float64) float64 {
	t, err := strconv.ParseFloat(strconv.FormatFloat(v, 'g', 14, 64), 64)
	if err != nil {
		return v
	}
	return t
}

// Root is one matched pair of directions. A value that cannot be given (the idler stays inside, no
// thickness or waist was stated) is null.
type Root struct {
	SignalExternalDeg   *float64 `json:"signal_external_deg"`
	IdlerExternalDeg    *float64 `json:"idler_external_deg"`
	SignalInternalDeg   *float64 `json:"signal_internal_deg"`
	IdlerInternalDeg    *float64 `json:"idler_internal_deg"`
	IdlerAzimuthDeg     *float64 `json:"idler_azimuth_deg"`
	IdlerNm             float64  `json:"idler_nm"`
	PumpAxisAngleDeg    float64  `json:"pump_axis_angle_deg"`
	WalkoffDeg          float64  `json:"walkoff_deg"`
	EmissionFWHMMrad    *float64 `json:"emission_fwhm_mrad"`    // one wavelength, plane-wave pump
	CorrelationFWHMMrad *float64 `json:"correlation_fwhm_mrad"` // of the idler for one signal direction

	EmissionWithPumpFWHMMrad *float64 `json:"emission_with_pump_fwhm_mrad"` // with the pump's spread and walk-off
	SpectralFWHMNm           *float64 `json:"spectral_fwhm_nm"`             // at the root's direction, plane-wave pump
	SpectralWithPumpFWHMNm   *float64 `json:"spectral_with_pump_fwhm_nm"`
	Sensitivities            *Moves   `json:"sensitivities"` // null where the ring opens
}

// Moves say how the signal's external angle moves, in degrees.
type Moves struct {
	PerDegCut  float64 `json:"deg_per_deg_cut"`
	PerDegTilt float64 `json:"deg_per_deg_tilt"`
	PerKelvin  float64 `json:"deg_per_kelvin"`
	PerNmPump  float64 `json:"deg_per_nm_pump"`
}

// Tuned is one point of the tuning curve.
type Tuned struct {
	SignalNm          float64  `json:"signal_nm"`
	IdlerNm           float64  `json:"idler_nm"`
	SignalExternalDeg float64  `json:"signal_external_deg"`
	IdlerExternalDeg  *float64 `json:"idler_external_deg"`
}

// Collected is what a bench's apertures and filters make of it.
type Collected struct {
	Scale                 string   `json:"scale"`
	Fraction              float64  `json:"collected_fraction"`
	ApertureFraction      float64  `json:"collected_fraction_of_apertures"`
	SignalBandNm          float64  `json:"signal_band_fwhm_nm"`
	IdlerBandNm           float64  `json:"idler_band_fwhm_nm"`
	SignalCentreNm        float64  `json:"signal_band_centre_nm"`
	IdlerCentreNm         float64  `json:"idler_band_centre_nm"`
	SignalSinglesPeakDeg  float64  `json:"signal_singles_peak_deg"`
	IdlerSinglesPeakDeg   float64  `json:"idler_singles_peak_deg"`
	SignalSinglesFWHMDeg  float64  `json:"signal_singles_fwhm_deg"`
	IdlerSinglesFWHMDeg   float64  `json:"idler_singles_fwhm_deg"`
	PairsOverSignalDeg    float64  `json:"pairs_over_signal_peak_deg"`
	PairsOverIdlerDeg     float64  `json:"pairs_over_idler_peak_deg"`
	PairsOverBothDeg      float64  `json:"pairs_over_both_peak_deg"`
	PairsOverSignalFWHM   float64  `json:"pairs_over_signal_fwhm_deg"`
	PairsOverIdlerFWHM    float64  `json:"pairs_over_idler_fwhm_deg"`
	PairsOverBothFWHM     float64  `json:"pairs_over_both_fwhm_deg"`
	PeakMinusEmissionMdeg float64  `json:"peak_minus_emission_mdeg"` // of the signal singles
	Because               string   `json:"peak_because"`
	Warnings              []string `json:"-"`
}

// Prediction answers a query. The embedded root is the first one, or has only what does not depend
// on an emission.
type Prediction struct {
	Root
	Roots         []Root     `json:"roots"`
	Warnings      []string   `json:"warnings"`
	Because       string     `json:"because,omitempty"` // why there is no emission
	SignalNm      float64    `json:"signal_nm"`
	CollinearDeg  []float64  `json:"collinear_deg"`   // pump to optic axis, none: cannot be matched
	AlsoMatchedNm []float64  `json:"also_matched_nm"` // other signal wavelengths at the first root's direction
	Tuning        []Tuned    `json:"tuning"`
	Collected     *Collected `json:"collected,omitempty"`
}

// Predict answers a query. No emission is an answer, not an error.
func Predict(q Query) (Prediction, error) {
	p := Prediction{SignalNm: q.SignalNm, Roots: []Root{}, Warnings: []string{}, CollinearDeg: []float64{}, AlsoMatchedNm: []float64{}, Tuning: []Tuned{}}
	s := &q.Slab
	if err := s.Check(); err != nil {
		return p, err
	}
	pair, err := s.At(q.SignalNm)
	if err != nil {
		return p, err
	}
	p.IdlerNm, p.PumpAxisAngleDeg = pair.IdlerNm, pair.PumpAxisDeg()
	if p.WalkoffDeg, err = s.WalkoffDeg(); err != nil {
		return p, err
	}
	for _, nm := range []float64{s.PumpNm, q.SignalNm, pair.IdlerNm} {
		if err := s.Crystal.CheckRange(nm); err != nil {
			p.Warnings = append(p.Warnings, "extrapolated: "+err.Error())
		}
	}
	if s.Cel != s.Crystal.RefCel && !s.Crystal.HasTemperature() {
		p.Warnings = append(p.Warnings, fmt.Sprintf("%s has no temperature terms: %g Cel changes nothing", s.Crystal.Name, s.Cel))
	}
	angles, err := s.CollinearDeg(q.SignalNm)
	if err != nil {
		return p, err
	}
	p.CollinearDeg = append(p.CollinearDeg, angles...)
	e := pair.Emission(q.AzimuthDeg)
	p.Because = e.Because()
	for _, r := range e.Root[:e.N] {
		root, warnings := q.root(&pair, r)
		root.IdlerNm, root.PumpAxisAngleDeg, root.WalkoffDeg = p.IdlerNm, p.PumpAxisAngleDeg, p.WalkoffDeg
		p.Roots = append(p.Roots, root)
		p.Warnings = append(p.Warnings, warnings...)
	}
	if e.N > 0 {
		p.Root = p.Roots[0]
		for _, nm := range s.MatchedNm(*p.SignalExternalDeg, q.AzimuthDeg, 0, math.Inf(1)) {
			if math.Abs(nm-q.SignalNm) > 1e-6*q.SignalNm {
				p.AlsoMatchedNm = append(p.AlsoMatchedNm, nm)
			}
		}
	}
	p.Tuning = q.tuning(q.TuningPoints)
	if q.Optics != nil {
		if p.Collected, err = collect(*q.Optics); err != nil {
			p.Warnings = append(p.Warnings, err.Error())
		} else {
			p.Warnings = append(p.Warnings, p.Collected.Warnings...)
		}
	}
	return p, nil
}

func (q *Query) root(pair *phasematch.Pair, e phasematch.Emission) (r Root, warnings []string) {
	s := &q.Slab
	at := e.Signal.PolarDeg
	r.SignalExternalDeg, r.SignalInternalDeg, r.IdlerInternalDeg = new(at), new(e.Signal.InternalDeg), new(e.Idler.InternalDeg)
	if e.Idler.ReflectedBack {
		warnings = append(warnings, fmt.Sprintf("signal at %.4f deg: the idler is totally reflected at the exit face", at))
	} else {
		r.IdlerExternalDeg, r.IdlerAzimuthDeg = new(e.Idler.PolarDeg), new(e.Idler.AzimuthDeg)
	}
	width := func(to **float64, name string, w phasematch.Width, err error) {
		if err != nil {
			return
		}
		*to = new(w.FWHM)
		if w.Open {
			warnings = append(warnings, fmt.Sprintf("signal at %.4f deg: the %s does not fall to a half on one side (the emission covers the axis, or the set's range ends); its width counts to there", at, name))
		}
	}
	if s.ThicknessMm > 0 {
		w, err := pair.EmissionMrad(at, q.AzimuthDeg)
		width(&r.EmissionFWHMMrad, "emission", w, err)
		w, err = s.SpectralNm(q.SignalNm, at, q.AzimuthDeg)
		width(&r.SpectralFWHMNm, "band", w, err)
		if q.WaistUm > 0 {
			w, err = pair.EmissionWithPumpMrad(at, q.AzimuthDeg, q.WaistUm)
			width(&r.EmissionWithPumpFWHMMrad, "emission with the pump's spread", w, err)
			w, err = s.SpectralWithPumpNm(q.SignalNm, at, q.AzimuthDeg, q.WaistUm)
			width(&r.SpectralWithPumpFWHMNm, "band with the pump's spread", w, err)
		}
	}
	if q.WaistUm > 0 && !e.Idler.ReflectedBack {
		if v, err := pair.CorrelationMrad(at, q.AzimuthDeg, q.WaistUm); err == nil {
			r.CorrelationFWHMMrad = new(v)
		}
	}
	if m, err := s.Sensitivities(q.SignalNm, at, q.AzimuthDeg); err == nil {
		r.Sensitivities = &Moves{m.PerDegCut, m.PerDegTilt, m.PerKelvin, m.PerNmPump}
	}
	// The angle opens like a square root: where a hundredth of a degree of cut moves it by more than
	// a fifth of a degree, no figure of it is worth its digits.
	if r.Sensitivities == nil || math.Abs(r.Sensitivities.PerDegCut) > 20 {
		warnings = append(warnings, fmt.Sprintf("signal at %.4f deg: two directions are about to merge here (the ring just opens); its angle depends on cut, tilt and dispersion set more than anybody knows them", at))
	}
	return r, warnings
}

// tuning is the tuning curve: n wavelengths evenly over what crystal and energy allow, those
// without emission left out.
func (q *Query) tuning(n int) []Tuned {
	out := []Tuned{}
	if n < 2 {
		return out
	}
	lo, hi := q.Slab.Band()
	// A set that reaches far into the infrared would spread the points thin: 0.7 to 1.6 times the
	// degenerate wavelength is what a bench can see.
	lo, hi = max(lo, 1.4*q.Slab.PumpNm), min(hi, 3.2*q.Slab.PumpNm)
	for i := range n {
		nm := lo + (hi-lo)*float64(i)/float64(n-1)
		pair, err := q.Slab.At(nm)
		if err != nil {
			continue
		}
		e := pair.Emission(q.AzimuthDeg)
		for _, r := range e.Root[:e.N] {
			t := Tuned{SignalNm: nm, IdlerNm: pair.IdlerNm, SignalExternalDeg: r.Signal.PolarDeg}
			if !r.Idler.ReflectedBack {
				t.IdlerExternalDeg = new(r.Idler.PolarDeg)
			}
			out = append(out, t)
		}
	}
	return out
}

// collect works out what a bench's own apertures see at its reference.
func collect(o Optics) (*Collected, error) {
	m, err := New(o)
	if err != nil {
		return nil, err
	}
	s, i := m.Reference()
	c := m.Collect(Pose{SignalDeg: s, IdlerDeg: i, PumpW: 1, PumpOpen: 1, CrystalCel: o.CrystalCel})
	k := m.Peaks()
	out := &Collected{
		Scale: m.Scale(), Fraction: c.Fraction, ApertureFraction: c.ApertureFraction,
		SignalBandNm: c.Signal.FWHMNm, IdlerBandNm: c.Idler.FWHMNm, SignalCentreNm: c.Signal.CentreNm, IdlerCentreNm: c.Idler.CentreNm,
		SignalSinglesPeakDeg: k.SignalSingles.MaximumDeg, IdlerSinglesPeakDeg: k.IdlerSingles.MaximumDeg,
		SignalSinglesFWHMDeg: k.SignalSingles.FWHMDeg, IdlerSinglesFWHMDeg: k.IdlerSingles.FWHMDeg,
		PairsOverSignalDeg: k.PairsOverSignal.MaximumDeg, PairsOverIdlerDeg: k.PairsOverIdler.MaximumDeg, PairsOverBothDeg: k.PairsOverBoth.MaximumDeg,
		PairsOverSignalFWHM: k.PairsOverSignal.FWHMDeg, PairsOverIdlerFWHM: k.PairsOverIdler.FWHMDeg, PairsOverBothFWHM: k.PairsOverBoth.FWHMDeg,
		Warnings: m.Warnings(),
	}
	out.PeakMinusEmissionMdeg = (k.SignalSingles.MaximumDeg - s) * 1000
	out.Because = fmt.Sprintf("the bare emission at %.5g nm is at %.4f deg; through an aperture of ±%.3g mrad and a band of %.3g nm singles peak at %.4f deg, %+.1f mdeg from it, "+
		"because the aperture averages over a ring that curves away inside it, and over wavelengths that leave at other angles",
		m.centreNm(o.PumpNm), s, o.Signal.RadiusMm/o.Signal.DistanceMm*1000, c.Signal.FWHMNm, k.SignalSingles.MaximumDeg, out.PeakMinusEmissionMdeg)
	return out, nil
}

// Table prints a prediction for people.
func (p Prediction) Table() string {
	var b strings.Builder
	row := func(name, format string, v ...any) {
		fmt.Fprintf(&b, "%-34s "+format+"\n", append([]any{name}, v...)...)
	}
	maybe := func(name string, v *float64, unit string) {
		if v != nil {
			row(name, "%.6g %s", *v, unit)
		}
	}
	row("signal, idler", "%.6g nm, %.6g nm", p.SignalNm, p.IdlerNm)
	row("pump to optic axis", "%.5f deg", p.PumpAxisAngleDeg)
	for _, a := range p.CollinearDeg {
		row("collinear at", "%.5f deg", a)
	}
	row("pump walk-off", "%.4f deg", p.WalkoffDeg)
	if len(p.Roots) == 0 {
		row("emission", "none: %s", p.Because)
	}
	for i, r := range p.Roots {
		if len(p.Roots) > 1 {
			fmt.Fprintf(&b, "root %d\n", i+1)
		}
		maybe("signal, outside", r.SignalExternalDeg, "deg")
		maybe("idler, outside", r.IdlerExternalDeg, "deg")
		maybe("idler azimuth", r.IdlerAzimuthDeg, "deg")
		maybe("signal, inside", r.SignalInternalDeg, "deg")
		maybe("idler, inside", r.IdlerInternalDeg, "deg")
		maybe("ring, FWHM", r.EmissionFWHMMrad, "mrad")
		maybe("ring with the pump's spread, FWHM", r.EmissionWithPumpFWHMMrad, "mrad")
		maybe("partner's direction, FWHM", r.CorrelationFWHMMrad, "mrad")
		maybe("band at that angle, FWHM", r.SpectralFWHMNm, "nm")
		maybe("band with the pump's spread, FWHM", r.SpectralWithPumpFWHMNm, "nm")
		if m := r.Sensitivities; m != nil {
			row("signal moves by", "%+.4g deg per deg of cut, %+.4g per deg of tilt, %+.3g per K, %+.3g per nm of pump", m.PerDegCut, m.PerDegTilt, m.PerKelvin, m.PerNmPump)
		}
	}
	for _, nm := range p.AlsoMatchedNm {
		row("the same angle also matches", "%.6g nm", nm)
	}
	if c := p.Collected; c != nil {
		row("absolute scale", "%s", c.Scale)
		row("collected of the signal's partners", "%.5f, by apertures alone %.5f", c.Fraction, c.ApertureFraction)
		row("collected band, FWHM", "signal %.4g nm, idler %.4g nm", c.SignalBandNm, c.IdlerBandNm)
		row("peak of singles", "signal %.4f deg, idler %.4f deg", c.SignalSinglesPeakDeg, c.IdlerSinglesPeakDeg)
		row("peak of pairs", "over signal %.4f deg, over idler %.4f deg, over both %.4f deg", c.PairsOverSignalDeg, c.PairsOverIdlerDeg, c.PairsOverBothDeg)
		row("why peak and emission differ", "%s", c.Because)
	}
	for _, w := range p.Warnings {
		row("warning", "%s", w)
	}
	if len(p.Tuning) > 0 {
		fmt.Fprintf(&b, "\n%12s %14s %12s %14s\n", "signal nm", "signal deg", "idler nm", "idler deg")
		for _, t := range p.Tuning {
			idler := "inside"
			if t.IdlerExternalDeg != nil {
				idler = fmt.Sprintf("%.5f", *t.IdlerExternalDeg)
			}
			fmt.Fprintf(&b, "%12.2f %14.5f %12.2f %14s\n", t.SignalNm, t.SignalExternalDeg, t.IdlerNm, idler)
		}
	}
	return b.String()
}

// Batch answers one JSON job a line, in order, one line each; a job that cannot be answered gives
// an object with error. Only trouble with reading or writing ends it.
func Batch(in io.Reader, out io.Writer) error {
	lines := bufio.NewScanner(in)
	lines.Buffer(nil, 1<<20)
	for lines.Scan() {
		if len(bytes.TrimSpace(lines.Bytes())) == 0 {
			continue
		}
		// A line is answered when it was asked: the asker may be waiting for it.
		if _, err := out.Write(append(answer(lines.Bytes()), '\n')); err != nil {
			return err
		}
	}
	return lines.Err()
}

// answer is one line of a batch without its end.
func answer(line []byte) []byte {
	p, err := answerLine(line)
	if err == nil {
		var raw []byte
		if raw, err = json.Marshal(p); err == nil {
			return raw
		}
	}
	raw, _ := json.Marshal(map[string]string{"error": strings.ReplaceAll(err.Error(), "\n", "; ")}) // strings always marshal
	return raw
}

func answerLine(line []byte) (Prediction, error) {
	var j Job
	d := json.NewDecoder(bytes.NewReader(line))
	d.DisallowUnknownFields()
	if err := d.Decode(&j); err != nil {
		return Prediction{}, fmt.Errorf("job: %w", err)
	}
	if d.More() {
		return Prediction{}, errors.New("job: more than one value on a line; want one object")
	}
	q, err := j.Query()
	if err != nil {
		return Prediction{}, err
	}
	return Predict(q)
}
