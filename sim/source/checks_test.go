package source

import (
	"encoding/csv"
	"errors"
	"fmt"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

// checks is testdata/phase-matching/checks.csv; its README names the sources.
const checks = "../../testdata/phase-matching/checks.csv"

// TestEveryCheckValueHoldsAtItsTolerance asks the packages crystal, phasematch and source for
// every row but those of the estimate of an efficiency (klyshko_*).
func TestEveryCheckValueHoldsAtItsTolerance(t *testing.T) {
	f, err := os.Open(checks)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	checked, elsewhere := 0, 0
	for _, row := range rows[1:] {
		id, quantity, source := row[0], row[1], row[8]
		if strings.HasPrefix(quantity, "klyshko_") {
			elsewhere++
			continue
		}
		want, tol := number(t, row[4]), number(t, row[6])
		q := question{crystal: row[2], inputs: map[string]string{}}
		for part := range strings.SplitSeq(row[3], ";") {
			k, v, _ := strings.Cut(part, "=")
			q.inputs[k] = v
		}
		got, err := q.answer(quantity)
		checked++
		switch {
		case err != nil:
			t.Errorf("%s %s: %v (%s)", id, quantity, err, source)
		case !(math.Abs(got-want) <= tol):
			t.Errorf("%s %s %s %s: %.12g; want %.12g ± %g (%s)", id, quantity, row[2], row[3], got, want, tol, source)
		case len(q.unused()) > 0:
			t.Errorf("%s %s: the inputs %v were not used", id, quantity, q.unused())
		default:
			t.Logf("%s %-28s %-22s %-70s %.10g - %.10g = %+.2g, tolerance %g, kind %s", id, quantity, row[2], row[3], got, want, got-want, tol, row[7])
		}
	}
	if checked != 108 || elsewhere != 7 {
		t.Errorf("%d rows checked, %d left to the estimate; want 108 and 7 of 115", checked, elsewhere)
	}
}

func number(t *testing.T, text string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(text, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// question is one row: named inputs, each of which has to be used.
type question struct {
	crystal string
	inputs  map[string]string
	used    map[string]bool
}

func (q *question) text(key string) string {
	if q.used == nil {
		q.used = map[string]bool{}
	}
	q.used[key] = true
	return q.inputs[key]
}

func (q *question) num(key string, otherwise float64) float64 {
	s := q.text(key)
	if s == "" {
		return otherwise
	}
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		return math.NaN()
	}
	return v
}

func (q *question) unused() []string {
	var keys []string
	for k := range q.inputs {
		if k != "" && !q.used[k] {
			keys = append(keys, k)
		}
	}
	return keys
}

var errNone = errors.New("no solution")

func (q *question) answer(quantity string) (float64, error) {
	nan := math.NaN()
	switch quantity {
	case "idler_nm":
		return phasematch.Idler(q.num("pump_nm", nan), q.num("signal_nm", nan)), nil
	case "idler_ext_by_rule_deg":
		p, s := q.num("pump_nm", nan), q.num("signal_nm", nan)
		return phasematch.IdlerByRuleDeg(p, s, q.num("signal_ext_deg", nan)), nil
	case "corr_fwhm_thin_mrad":
		return phasematch.ThinCorrelationMrad(q.num("idler_nm", nan), q.num("idler_ext_deg", nan), q.num("waist_um", nan)), nil
	case "photon_flux_per_s":
		return PhotonHz(q.num("power_w", nan), q.num("lambda_nm", nan)), nil
	case "dead_np_measured_per_s":
		return RecordedHz(NonParalysable, q.num("true_per_s", nan), q.num("tau_ns", nan)*1e-9), nil
	case "dead_p_measured_per_s":
		return RecordedHz(Paralysable, q.num("true_per_s", nan), q.num("tau_ns", nan)*1e-9), nil
	case "dead_np_true_per_s":
		return TrueHz(NonParalysable, q.num("measured_per_s", nan), q.num("tau_ns", nan)*1e-9)
	case "dead_p_true_per_s":
		return TrueHz(Paralysable, q.num("measured_per_s", nan), q.num("tau_ns", nan)*1e-9)
	case "accidental_per_s":
		return AccidentalHz(q.num("r1_per_s", nan), q.num("r2_per_s", nan), q.num("window_ns", nan)*1e-9), nil
	case "n_air":
		return crystal.AirIndex(q.num("lambda_nm", nan)), nil
	}
	set, err := crystal.Named(q.crystal)
	if err != nil {
		return 0, err
	}
	cel := q.num("temp_c", set.RefCel)
	index := func(a crystal.Axis) (float64, error) {
		n, err := set.Index(a, q.num("lambda_nm", nan), cel)
		if errors.Is(err, crystal.ErrRange) {
			return set.Extrapolate(a, q.num("lambda_nm", nan), cel)
		}
		return n, err
	}
	switch quantity {
	case "n_o", "n_e", "n_x", "n_y", "n_z":
		return index(crystal.Axis(quantity[2:]))
	case "n_e_theta", "walkoff_deg":
		no, err := index(crystal.Ordinary)
		if err != nil {
			return 0, err
		}
		ne, err := index(crystal.Extraordinary)
		if err != nil {
			return 0, err
		}
		if quantity == "n_e_theta" {
			return phasematch.ExtraordinaryIndex(no, ne, q.num("theta_deg", nan)), nil
		}
		return phasematch.WalkoffDeg(no, ne, q.num("theta_deg", nan)), nil
	case "pm_phi_xy_deg", "walkoff_xy_deg":
		f := q.num("fundamental_nm", nan)
		b := phasematch.Biaxial{Crystal: set, Plane: phasematch.XY, Scheme: q.text("scheme"), PumpNm: f / 2, SignalNm: f, Cel: cel}
		angles, err := b.AnglesDeg()
		if err != nil || len(angles) == 0 {
			return 0, errors.Join(err, errNone)
		}
		if quantity == "pm_phi_xy_deg" {
			return angles[0], nil
		}
		rho, err := b.WalkoffDeg(angles[0])
		return rho[0], err // of the harmonic
	}

	slab := phasematch.Slab{Crystal: set, Process: phasematch.Process(q.text("process")), Cel: cel, Extrapolate: true,
		CutDeg: q.num("cut_deg", 0), TiltDeg: q.num("tilt_deg", 0), ThicknessMm: q.num("length_mm", 0), PumpNm: q.num("pump_nm", nan)}
	if slab.Process == "" {
		slab.Process = phasematch.EOO
	}
	switch quantity {
	case "shg_edge_nm":
		return slab.ShortestHarmonicNm(q.num("search_lo_nm", nan), q.num("search_hi_nm", nan))
	case "shg_acceptance_ext_mrad":
		slab.PumpNm = q.num("fundamental_nm", nan) / 2
		return slab.AcceptanceExternalMrad()
	case "pump_theta_eff_deg":
		return slab.PumpAxisDeg()
	case "type2_overlap_full_angle_deg":
		slab.Process = phasematch.EOE
		return slab.OverlapDeg(q.num("signal_nm", nan))
	case "pm_angle_deg", "walkoff_at_pm_deg":
		angles, err := slab.CollinearDeg(q.num("signal_nm", nan))
		if err != nil || len(angles) != 1 {
			return 0, errors.Join(err, fmt.Errorf("%d angles", len(angles)))
		}
		if quantity == "pm_angle_deg" {
			return angles[0], nil
		}
		slab.CutDeg = angles[0]
		return slab.WalkoffDeg()
	case "cut_for_ext_angle_deg":
		cuts, err := slab.CutsForAngle(q.num("signal_nm", nan), q.num("external_deg", nan), 0)
		if err != nil || len(cuts) == 0 {
			return 0, errors.Join(err, errNone)
		}
		return cuts[0], nil
	case "matched_signal_nm":
		nm := slab.MatchedNm(q.num("signal_ext_deg", nan), q.num("azimuth_deg", 0), q.num("search_lo_nm", nan), q.num("search_hi_nm", nan))
		if len(nm) != 1 {
			return 0, fmt.Errorf("%d wavelengths", len(nm))
		}
		return nm[0], nil
	}

	nm, azimuth := q.num("signal_nm", nan), q.num("azimuth_deg", 0)
	pair, err := slab.At(nm)
	if err != nil {
		return 0, err
	}
	switch quantity {
	case "conjugate_idler_ext_deg":
		return pair.Conjugate(q.num("signal_ext_deg", nan), azimuth).PolarDeg, nil
	case "delta_k_per_mm":
		return pair.MismatchPerMm(q.num("signal_ext_deg", nan), azimuth)
	case "sinc2":
		dk, err := pair.MismatchPerMm(q.num("signal_ext_deg", nan), azimuth)
		return phasematch.Sinc2(dk, slab.ThicknessMm), err
	}
	e := pair.Emission(azimuth)
	if e.N == 0 {
		return 0, errNone
	}
	root := e.Root[0]
	switch quantity {
	case "emission_signal_ext_deg":
		return root.Signal.PolarDeg, nil
	case "emission_signal_int_deg":
		return root.Signal.InternalDeg, nil
	case "emission_idler_ext_deg":
		return root.Idler.PolarDeg, nil
	case "emission_idler_azimuth_deg":
		return root.Idler.AzimuthDeg, nil
	case "emission_fwhm_mrad":
		w, err := pair.EmissionMrad(root.Signal.PolarDeg, azimuth)
		return w.FWHM, err
	case "spectral_fwhm_nm":
		w, err := slab.SpectralNm(nm, root.Signal.PolarDeg, azimuth)
		return w.FWHM, err
	case "corr_fwhm_full_mrad":
		return pair.CorrelationMrad(root.Signal.PolarDeg, azimuth, q.num("waist_um", nan))
	}
	return 0, fmt.Errorf("no answer to %q", quantity)
}
