package source

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"maps"
	"math"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"

	"gemel/protocol/unit"
	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

// Job is a question about phase matching as a person writes it: quantities with their units. The
// names are those of the command's flags. Empty fields keep what is known already, or have defaults;
// crystal, pump and cut have none.
type Job struct {
	Crystal     string `json:"crystal"`
	Process     string `json:"process"`     // default e-oo, in positive crystals o-ee
	Pump        string `json:"pump"`        // vacuum wavelength
	Cut         string `json:"cut"`         // optic axis to face normal
	Signal      string `json:"signal"`      // default twice the pump
	Tilt        string `json:"tilt"`        // default 0 deg
	Azimuth     string `json:"azimuth"`     // default 0 deg
	Temperature string `json:"temperature"` // default the set's own
	Thickness   string `json:"thickness"`   // default DefaultThickness
	Waist       string `json:"waist"`       // default DefaultWaist
	Poling      string `json:"poling"`      // default none
	Extrapolate bool   `json:"extrapolate"` // evaluate outside the set's range, and say so
}

// What a job has that does not say.
const (
	DefaultThickness = "2 mm"
	DefaultWaist     = "100 um"
)

// Query is the same in numbers.
type Query struct {
	Slab       phasematch.Slab
	SignalNm   float64
	AzimuthDeg float64
	WaistUm    float64 // 0: unknown
	// Optics, when not nil, are those of a bench: what its apertures and filters really collect is
	// worked out as well.
	Optics *Optics
	// Tuning asks for the tuning curve.
	Tuning bool
}

// Ask is the question about a bench as it was built: its signal arm's wavelength and plane.
func Ask(o Optics) Query {
	q := Query{AzimuthDeg: o.AzimuthDeg, WaistUm: o.PumpWaistUm, Optics: &o}
	q.Slab = phasematch.Slab{Crystal: o.Crystal, Process: o.Process, CutDeg: o.CutDeg, ThicknessMm: o.ThicknessMm, Cel: o.CrystalCel,
		PumpNm: o.PumpNm, PolingUm: o.PolingUm, Extrapolate: o.Extrapolate}
	q.SignalNm = o.centreNm(o.PumpNm)
	return q
}

// Query reads the job over what is known; the zero Query knows nothing. All of the job's faults are
// reported at once.
func (j Job) Query(known Query) (Query, error) {
	q := known
	var errs []error
	s := &q.Slab
	asked := s.Crystal.Name != ""
	if j.Crystal != "" || !asked {
		set, err := crystal.Named(j.Crystal)
		if err != nil {
			errs = append(errs, err)
		}
		if s.Crystal = set; !asked {
			s.Cel = set.RefCel
		}
	}
	if j.Process != "" {
		s.Process = phasematch.Process(j.Process)
	} else if !asked {
		if s.Process = phasematch.EOO; s.Crystal.Sign == "positive" {
			s.Process = phasematch.OEE
		}
	}
	otherwise := func(text *string, value string) {
		if *text == "" && !asked {
			*text = value
		}
	}
	otherwise(&j.Thickness, DefaultThickness)
	otherwise(&j.Waist, DefaultWaist)
	read := func(to *float64, name, text string, kind unit.Kind, in string, low, high float64) {
		if text == "" {
			if !asked && (name == "pump" || name == "cut") {
				errs = append(errs, fmt.Errorf("%s: nothing; want a value such as %s", name, map[string]string{"pump": `"405 nm"`, "cut": `"29.2 deg"`}[name]))
			}
			return
		}
		v, err := unit.Parse(text, kind)
		if err == nil {
			v, err = unit.In(v, in)
		}
		if v = tidy(v); err == nil && !(v >= low && v <= high) {
			err = fmt.Errorf("%q; want %g to %g %s", text, low, high, in)
		}
		if err != nil {
			errs = append(errs, fmt.Errorf("%s: %w", name, err))
			return
		}
		*to = v
	}
	pump := s.PumpNm
	read(&s.PumpNm, "pump", j.Pump, unit.Length, "nm", 100, 20000)
	read(&s.CutDeg, "cut", j.Cut, unit.Plane, "deg", 0, 90)
	read(&s.TiltDeg, "tilt", j.Tilt, unit.Plane, "deg", -79, 79)
	read(&s.ThicknessMm, "thickness", j.Thickness, unit.Length, "mm", 0.001, 500)
	read(&s.Cel, "temperature", j.Temperature, unit.Temperature, "Cel", -273.15, 1500)
	read(&s.PolingUm, "poling", j.Poling, unit.Length, "um", -10000, 10000)
	if s.PumpNm != pump && (!asked || q.Optics == nil || q.Optics.Signal.Filter.WidthNm == 0) {
		q.SignalNm = 2 * s.PumpNm
	}
	read(&q.SignalNm, "signal", j.Signal, unit.Length, "nm", 100, 200000)
	read(&q.AzimuthDeg, "azimuth", j.Azimuth, unit.Plane, "deg", -360, 360)
	read(&q.WaistUm, "waist", j.Waist, unit.Length, "um", 1, 10000)
	s.Extrapolate = s.Extrapolate || j.Extrapolate
	if len(errs) == 0 {
		if err := s.Check(); err != nil {
			errs = append(errs, err)
		}
	}
	if q.Optics != nil {
		o := *q.Optics
		o.Crystal, o.Process, o.CutDeg, o.ThicknessMm, o.CrystalCel, o.PolingUm, o.Extrapolate = s.Crystal, s.Process, s.CutDeg, s.ThicknessMm, s.Cel, s.PolingUm, s.Extrapolate
		o.AzimuthDeg, o.PumpNm, o.PumpWaistUm = q.AzimuthDeg, s.PumpNm, q.WaistUm
		q.Optics = &o
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

// Collected is what a bench's apertures and filters make of it, both arms on the bare emission.
type Collected struct {
	Scale            string       `json:"scale"`
	Fraction         float64      `json:"collected_fraction"`
	ApertureFraction float64      `json:"collected_fraction_of_apertures"`
	SignalCentreNm   float64      `json:"signal_band_centre_nm"`
	SignalBandNm     float64      `json:"signal_band_fwhm_nm"`
	IdlerCentreNm    float64      `json:"idler_band_centre_nm"`
	IdlerBandNm      float64      `json:"idler_band_fwhm_nm"`
	BareNm           float64      `json:"bare_signal_nm"` // the wavelength whose emission is called bare
	BareSignalDeg    float64      `json:"bare_signal_deg"`
	BareIdlerDeg     float64      `json:"bare_idler_deg"`
	Peaks            []PeakOfRate `json:"peaks"`
	Because          string       `json:"peak_because"` // why peaks and bare emission differ
	warnings         []string
}

// PeakOfRate is where a sweep finds a rate, and why there.
type PeakOfRate struct {
	Of         string  `json:"of"`          // signal singles, idler singles or pairs
	Over       string  `json:"over"`        // signal arm, idler arm or both arms together
	MiddleDeg  float64 `json:"peak_deg"`    // midway between the half maxima
	MaximumDeg float64 `json:"maximum_deg"` // means little where the top is flat
	FWHMDeg    float64 `json:"fwhm_deg"`
	// The peak less the bare emission, and its parts: of ring, apertures and waist at one wavelength,
	// and of the band that the filters pass.
	MinusBareMdeg float64 `json:"minus_bare_mdeg"`
	ApertureMdeg  float64 `json:"aperture_part_mdeg"`
	BandMdeg      float64 `json:"band_part_mdeg"`
}

// Asked is the question that is answered, defaults filled in.
type Asked struct {
	Crystal     string             `json:"crystal"`
	Process     phasematch.Process `json:"process"`
	PumpNm      float64            `json:"pump_nm"`
	CutDeg      float64            `json:"cut_deg"`
	SignalNm    float64            `json:"signal_nm"`
	TiltDeg     float64            `json:"tilt_deg"`
	AzimuthDeg  float64            `json:"azimuth_deg"`
	Cel         float64            `json:"temperature_cel"`
	ThicknessMm float64            `json:"thickness_mm"`
	WaistUm     float64            `json:"waist_um"`
	PolingUm    float64            `json:"poling_um"`
}

// Prediction answers a query. The embedded root is the first one, or has only what does not depend
// on an emission.
type Prediction struct {
	Root
	Roots         []Root     `json:"roots"`
	Warnings      []string   `json:"warnings"`
	Because       string     `json:"because,omitempty"` // why there is no emission
	Asked         Asked      `json:"asked"`
	CollinearDeg  []float64  `json:"collinear_deg"`   // pump to optic axis, none: cannot be matched
	AlsoMatchedNm []float64  `json:"also_matched_nm"` // other signal wavelengths at the first root's direction
	Tuning        []Tuned    `json:"tuning"`
	Collected     *Collected `json:"collected,omitempty"`
}

// Predict answers a query. No emission is an answer, not an error.
func Predict(q Query) (Prediction, error) {
	p := Prediction{Asked: q.asked(), Roots: []Root{}, Warnings: []string{}, CollinearDeg: []float64{}, AlsoMatchedNm: []float64{}, Tuning: []Tuned{}}
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
	if sign := map[byte]string{'e': "negative", 'o': "positive"}[s.Process[0]]; s.PolingUm == 0 && sign != s.Crystal.Sign {
		p.Warnings = append(p.Warnings, fmt.Sprintf("%s matches in %s crystals; %s is %s", s.Process, sign, s.Crystal.Name, s.Crystal.Sign))
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
	if q.Tuning {
		p.Tuning = q.curve(q.roundNm())
	}
	if q.Optics != nil {
		if p.Collected, err = collect(*q.Optics, s.TiltDeg); err != nil {
			p.Warnings = append(p.Warnings, "apertures: "+err.Error())
		} else {
			p.Warnings = append(p.Warnings, p.Collected.warnings...)
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

func (q *Query) asked() Asked {
	s := &q.Slab
	return Asked{Crystal: s.Crystal.Name, Process: s.Process, PumpNm: s.PumpNm, CutDeg: s.CutDeg, SignalNm: q.SignalNm, TiltDeg: s.TiltDeg,
		AzimuthDeg: q.AzimuthDeg, Cel: s.Cel, ThicknessMm: s.ThicknessMm, WaistUm: q.WaistUm, PolingUm: s.PolingUm}
}

// range of the tuning curve: what crystal and energy allow, and what a bench can see of it. A set that
// reaches far into the infrared would spread the points thin.
func (q *Query) span() (loNm, hiNm float64) {
	lo, hi := q.Slab.Band()
	return max(lo, 1.4*q.Slab.PumpNm), min(hi, 3.2*q.Slab.PumpNm)
}

// roundNm are at most fifty round wavelengths over the tuning curve's range.
func (q *Query) roundNm() (nm []float64) {
	const most = 50
	lo, hi := q.span()
	if !(lo < hi) {
		return nil
	}
	step := math.Pow(10, math.Floor(math.Log10((hi-lo)/most)))
	for _, k := range []float64{1, 2, 5, 10} {
		if (hi-lo)/(k*step) <= most {
			step *= k
			break
		}
	}
	for v := math.Ceil(lo / step); v*step <= hi; v++ {
		nm = append(nm, tidy(v*step))
	}
	return nm
}

// curve is the tuning curve at wavelengths; those without emission are left out.
func (q *Query) curve(wavelengths []float64) []Tuned {
	out := []Tuned{}
	for _, nm := range wavelengths {
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

// collect works out what a bench's own apertures see at a tilt, both arms on the bare emission of
// the signal filter's centre.
func collect(o Optics, tiltDeg float64) (*Collected, error) {
	m, err := New(o)
	if err != nil {
		return nil, err
	}
	s, i, err := m.bare(tiltDeg)
	if err != nil {
		return nil, err
	}
	nm := o.centreNm(o.PumpNm)
	c := m.Collect(Pose{SignalDeg: s, IdlerDeg: i, TiltDeg: tiltDeg, PumpW: 1, PumpOpen: 1, CrystalCel: o.CrystalCel})
	k := m.peaks(tiltDeg, s, i)
	// The same at one wavelength: what is then left of a difference is not the band's.
	const narrow = 0.02 // nm
	o.Signal.Filter = Filter{CentreNm: nm, WidthNm: narrow, Shape: FilterGaussian}
	o.Idler.Filter = Filter{CentreNm: phasematch.Idler(o.PumpNm, nm), WidthNm: narrow, Shape: FilterGaussian}
	one, err := New(o)
	if err != nil {
		return nil, err
	}
	l := one.peaks(tiltDeg, s, i)
	out := &Collected{
		Scale: m.Scale(), Fraction: c.Fraction, ApertureFraction: c.ApertureFraction,
		SignalBandNm: c.Signal.FWHMNm, IdlerBandNm: c.Idler.FWHMNm, SignalCentreNm: c.Signal.CentreNm, IdlerCentreNm: c.Idler.CentreNm,
		BareNm: nm, BareSignalDeg: s, BareIdlerDeg: i,
		Because: "the ring falls off more steeply outside than inside, an arm averages over its aperture, within which the ring curves, " +
			"and over the wavelengths that its filter passes, which leave at other angles; " +
			"where one arm stands still, the pairs over the other peak at the partners of what the first one takes",
		warnings: m.Warnings(),
	}
	for _, x := range []struct {
		of, over  string
		bare      float64
		full, one Peak
	}{
		{"signal singles", "signal arm", s, k.SignalSingles, l.SignalSingles},
		{"idler singles", "idler arm", i, k.IdlerSingles, l.IdlerSingles},
		{"pairs", "signal arm", s, k.PairsOverSignal, l.PairsOverSignal},
		{"pairs", "idler arm", i, k.PairsOverIdler, l.PairsOverIdler},
		{"pairs", "both arms together", s, k.PairsOverBoth, l.PairsOverBoth},
	} {
		aperture := (x.one.MiddleDeg - x.bare) * 1000
		total := (x.full.MiddleDeg - x.bare) * 1000
		out.Peaks = append(out.Peaks, PeakOfRate{x.of, x.over, x.full.MiddleDeg, x.full.MaximumDeg, x.full.FWHMDeg, total, aperture, total - aperture})
	}
	return out, nil
}

// Sentence says the most important thing in words.
func (p Prediction) Sentence() string {
	a := p.Asked
	var b strings.Builder
	fmt.Fprintf(&b, "%s, %s, pumped at %g nm, cut at %g deg", a.Crystal, a.Process, a.PumpNm, a.CutDeg)
	if a.TiltDeg != 0 {
		fmt.Fprintf(&b, ", tilted by %g deg", a.TiltDeg)
	}
	if len(p.Roots) == 0 {
		fmt.Fprintf(&b, ": no emission of %.6g nm at azimuth %g deg; %s.", a.SignalNm, a.AzimuthDeg, p.Because)
		return b.String()
	}
	fmt.Fprintf(&b, ": signal photons of %.6g nm leave at %.4f deg from the pump, ", a.SignalNm, *p.SignalExternalDeg)
	if p.IdlerExternalDeg == nil {
		fmt.Fprintf(&b, "their partners of %.6g nm not at all.", p.IdlerNm)
	} else {
		fmt.Fprintf(&b, "their partners of %.6g nm at %.4f deg.", p.IdlerNm, *p.IdlerExternalDeg)
	}
	if len(p.Roots) == 2 {
		fmt.Fprintf(&b, " A second direction is matched, at %.4f deg.", *p.Roots[1].SignalExternalDeg)
	}
	return b.String()
}

// Table prints a prediction for people: a sentence, then quantities with their units.
func (p Prediction) Table() string {
	var b strings.Builder
	fmt.Fprintf(&b, "%s\n", p.Sentence())
	for _, w := range p.Warnings {
		fmt.Fprintf(&b, "Warning: %s.\n", w)
	}
	t := tabwriter.NewWriter(&b, 0, 0, 2, ' ', 0)
	row := func(name, format, unit string, v ...any) {
		fmt.Fprintf(t, "%s\t%s\t%s\n", name, fmt.Sprintf(format, v...), unit)
	}
	maybe := func(name, format, unit string, v *float64) {
		if v != nil {
			row(name, format, unit, *v)
		}
	}
	fmt.Fprintln(t)
	a := p.Asked
	row("crystal thickness", "%g", "mm", a.ThicknessMm)
	row("crystal temperature", "%g", "Cel", a.Cel)
	if a.PolingUm != 0 {
		row("poling period", "%g", "um", a.PolingUm)
	}
	row("pump waist, 1/e² radius", "%g", "um", a.WaistUm)
	row("signal wavelength", "%.8g", "nm", a.SignalNm)
	row("idler wavelength", "%.8g", "nm", p.IdlerNm)
	row("signal azimuth", "%g", "deg", a.AzimuthDeg)
	row("pump to optic axis, inside", "%.5f", "deg", p.PumpAxisAngleDeg)
	for _, c := range p.CollinearDeg {
		row("  of collinear emission", "%.5f", "deg", c)
	}
	row("pump walk-off", "%.4f", "deg", p.WalkoffDeg)
	for i, r := range p.Roots {
		if len(p.Roots) > 1 {
			row(fmt.Sprintf("direction %d", i+1), "", "")
		}
		maybe("signal, outside", "%.5f", "deg", r.SignalExternalDeg)
		maybe("idler, outside", "%.5f", "deg", r.IdlerExternalDeg)
		maybe("idler azimuth", "%.4f", "deg", r.IdlerAzimuthDeg)
		maybe("signal, inside", "%.5f", "deg", r.SignalInternalDeg)
		maybe("idler, inside", "%.5f", "deg", r.IdlerInternalDeg)
		maybe("ring, FWHM", "%.4g", "mrad", r.EmissionFWHMMrad)
		maybe("  with the pump's spread", "%.4g", "mrad", r.EmissionWithPumpFWHMMrad)
		maybe("idler's direction for one signal's, FWHM", "%.4g", "mrad", r.CorrelationFWHMMrad)
		maybe("band at the signal's direction, FWHM", "%.4g", "nm", r.SpectralFWHMNm)
		maybe("  with the pump's spread", "%.4g", "nm", r.SpectralWithPumpFWHMNm)
		if m := r.Sensitivities; m != nil {
			row("signal's angle moves by", "%+.4g", "deg per deg of cut", m.PerDegCut)
			row("", "%+.4g", "deg per deg of tilt", m.PerDegTilt)
			row("", "%+.3g", "deg per K", m.PerKelvin)
			row("", "%+.3g", "deg per nm of pump", m.PerNmPump)
		}
	}
	for _, nm := range p.AlsoMatchedNm {
		row("the signal's angle also matches", "%.6g", "nm", nm)
	}
	_ = t.Flush() // into memory
	if p.Collected != nil {
		p.Collected.table(&b)
	}
	if len(p.Tuning) > 0 {
		b.WriteString("\nTuning curve, angles outside:\n")
		t := tabwriter.NewWriter(&b, 0, 0, 2, ' ', tabwriter.AlignRight)
		fmt.Fprintln(t, "signal / nm\tsignal / deg\tidler / nm\tidler / deg\t")
		for _, x := range p.Tuning {
			idler := "inside"
			if x.IdlerExternalDeg != nil {
				idler = fmt.Sprintf("%.4f", *x.IdlerExternalDeg)
			}
			fmt.Fprintf(t, "%g\t%.4f\t%.2f\t%s\t\n", x.SignalNm, x.SignalExternalDeg, x.IdlerNm, idler)
		}
		_ = t.Flush()
	}
	return b.String()
}

func (c *Collected) table(b *strings.Builder) {
	fmt.Fprintf(b, "\nThrough the arms' apertures and filters, both arms on the bare emission of %.6g nm (signal %.4f deg, idler %.4f deg):\n", c.BareNm, c.BareSignalDeg, c.BareIdlerDeg)
	t := tabwriter.NewWriter(b, 0, 0, 2, ' ', 0)
	fmt.Fprintf(t, "share of the signal's partners collected\t%.5f\t1\n", c.Fraction)
	fmt.Fprintf(t, "  by the aperture alone\t%.5f\t1\n", c.ApertureFraction)
	fmt.Fprintf(t, "collected band of the signal, centre and FWHM\t%.2f, %.3g\tnm\n", c.SignalCentreNm, c.SignalBandNm)
	fmt.Fprintf(t, "collected band of the idler, centre and FWHM\t%.2f, %.3g\tnm\n", c.IdlerCentreNm, c.IdlerBandNm)
	_ = t.Flush()
	fmt.Fprintf(b, "Absolute scale, %s.\n", c.Scale)
	b.WriteString("\nWhere a sweep finds its peak (midway between the half maxima), and how far that is from the bare emission:\n")
	t = tabwriter.NewWriter(b, 0, 0, 2, ' ', tabwriter.AlignRight)
	fmt.Fprintln(t, "of\tover the\tpeak / deg\tFWHM / deg\tpeak - bare / mdeg\tby ring and apertures\tby the band\t")
	for _, k := range c.Peaks {
		fmt.Fprintf(t, "%s\t%s\t%.4f\t%.4f\t%+.1f\t%+.1f\t%+.1f\t\n", k.Of, k.Over, k.MiddleDeg, k.FWHMDeg, k.MinusBareMdeg, k.ApertureMdeg, k.BandMdeg)
	}
	_ = t.Flush()
	fmt.Fprintf(b, "The two differ because %s.\n", c.Because)
}

// longest is the longest line of a batch that is read.
const longest = 1 << 16

// Batch answers one JSON job a line, in order, one line each, over what is known; a job that cannot
// be answered gives an object with error. Empty lines are no jobs. Only trouble with reading or
// writing ends it.
func Batch(in io.Reader, out io.Writer, known Query) error {
	lines := bufio.NewReaderSize(in, longest)
	for {
		line, err := lines.ReadSlice('\n')
		long := errors.Is(err, bufio.ErrBufferFull)
		for errors.Is(err, bufio.ErrBufferFull) {
			_, err = lines.ReadSlice('\n')
		}
		if err != nil && !errors.Is(err, io.EOF) {
			return err
		}
		text := bytes.TrimSpace(line)
		if len(text) > 0 {
			reply := refusal(fmt.Errorf("job: a line longer than %d bytes; want one JSON object", longest))
			if !long {
				reply = answer(text, known)
			}
			// A line is answered when it was asked: the asker may be waiting for it.
			if _, err := out.Write(append(reply, '\n')); err != nil {
				return err
			}
		}
		if err != nil {
			return nil
		}
	}
}

// answer is one line of a batch without its end.
func answer(line []byte, known Query) []byte {
	j, err := readJob(line)
	if err != nil {
		return refusal(err)
	}
	q, err := j.Query(known)
	if err != nil {
		return refusal(err)
	}
	p, err := Predict(q)
	if err != nil {
		return refusal(err)
	}
	raw, err := json.Marshal(p)
	if err != nil {
		return refusal(err)
	}
	return raw
}

func refusal(err error) []byte {
	raw, _ := json.Marshal(map[string]string{"error": strings.ReplaceAll(err.Error(), "\n", "; ")}) // strings always marshal
	return raw
}

// readJob reads a job more strictly than encoding/json: names are spelt as they are, and none comes
// twice.
func readJob(line []byte) (Job, error) {
	var j Job
	fields := map[string]*string{"crystal": &j.Crystal, "process": &j.Process, "pump": &j.Pump, "cut": &j.Cut, "signal": &j.Signal, "tilt": &j.Tilt,
		"azimuth": &j.Azimuth, "temperature": &j.Temperature, "thickness": &j.Thickness, "waist": &j.Waist, "poling": &j.Poling}
	d := json.NewDecoder(bytes.NewReader(line))
	const want = `want one JSON object such as {"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg"}`
	if open, err := d.Token(); err != nil || open != json.Delim('{') {
		return j, errors.New("job: no JSON object; " + want)
	}
	seen := map[string]bool{}
	for d.More() {
		token, err := d.Token()
		name, _ := token.(string)
		if err != nil {
			return j, fmt.Errorf("job: %w; %s", err, want)
		}
		var value any
		if err := d.Decode(&value); err != nil {
			return j, fmt.Errorf("job: %s: %w; %s", shortened(name), err, want)
		}
		to := fields[name]
		switch {
		case to == nil && name != "extrapolate":
			return j, fmt.Errorf("job: %q is no name; want %s, extrapolate", shortened(name), strings.Join(slices.Sorted(maps.Keys(fields)), ", "))
		case seen[name]:
			return j, fmt.Errorf("job: %s twice; want it once", name)
		}
		seen[name] = true
		text, isText := value.(string)
		yes, isBool := value.(bool)
		switch {
		case value == nil: // as if it were not there
		case isText && to != nil:
			*to = text
		case isBool && to == nil:
			j.Extrapolate = yes
		case to == nil:
			return j, errors.New("job: extrapolate: neither true nor false; want one of them")
		default:
			return j, fmt.Errorf("job: %s: no text; want a value in quotes, with its unit where it has one, such as \"405 nm\"", name)
		}
	}
	if _, err := d.Token(); err != nil {
		return j, fmt.Errorf("job: %w; %s", err, want)
	}
	if _, err := d.Token(); !errors.Is(err, io.EOF) {
		return j, errors.New("job: more than one value on a line; " + want)
	}
	return j, nil
}

// shortened keeps a stranger's text from filling a message.
func shortened(text string) string {
	if r := []rune(text); len(r) > 40 {
		return string(r[:40]) + "…"
	}
	return text
}
