//go:build unix

package main

import (
	"encoding/json"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"testing/synctest"

	"gonum.org/v1/gonum/interp"

	"gemel/daemon/logbook"
	"gemel/daemon/nighttest"
	"gemel/protocol"
	"gemel/scan/estimate"
	"gemel/sim/source"
)

// prediction is what `gemel predict --json` prints, as another program would read it.
type prediction struct {
	SignalExternalDeg *float64         `json:"signal_external_deg"`
	Roots             []map[string]any `json:"roots"`
	Warnings          []string         `json:"warnings"`
	Because           string           `json:"because"`
	Error             string           `json:"error"`
	Asked             struct {
		TiltDeg    float64 `json:"tilt_deg"`
		AzimuthDeg float64 `json:"azimuth_deg"`
		Cel        float64 `json:"temperature_cel"`
	} `json:"asked"`
	Collected struct {
		BareSignalDeg float64 `json:"bare_signal_deg"`
		BareIdlerDeg  float64 `json:"bare_idler_deg"`
		Peaks         []struct {
			Of, Over      string
			PeakDeg       float64 `json:"peak_deg"`
			MinusBareMdeg float64 `json:"minus_bare_mdeg"`
		} `json:"peaks"`
	} `json:"collected"`
}

func predicted(t *testing.T, text string) (p prediction) {
	t.Helper()
	if err := json.Unmarshal([]byte(text), &p); err != nil {
		t.Fatalf("%v: %s", err, text)
	}
	return p
}

// kato are the flags of row S069 of testdata/phase-matching/checks.csv.
var kato = []string{"--crystal", "bbo-kato-1986", "--process", "e-oo", "--pump", "405 nm", "--cut", "29.2 deg", "--signal", "810 nm", "--tilt", "0 deg",
	"--azimuth", "0 deg", "--temperature", "20 Cel", "--thickness", "2 mm", "--waist", "100 um"}

func TestPredictCarriesTheCheckedAngle(t *testing.T) {
	p := predicted(t, must(t, append([]string{"predict", "--json"}, kato...)...))
	if want := emissionDeg(t); p.SignalExternalDeg == nil || math.Abs(*p.SignalExternalDeg-want) > 1e-5 || len(p.Warnings) != 0 || len(p.Roots) != 1 {
		t.Errorf("%+v; want one root at %g deg and no warning", p, want)
	}
	table := must(t, append([]string{"predict"}, kato...)...)
	if first, _, _ := strings.Cut(table, "\n"); !strings.Contains(first, "signal photons of 810 nm leave at 2.8642 deg from the pump") || !strings.Contains(table, "mrad") {
		t.Errorf("%s\nwant a sentence first, then a table with units", table)
	}
}

func TestAnglesAndTemperaturesMayBeNegative(t *testing.T) {
	args := append([]string{"predict", "--json"}, kato[:8]...)
	for _, form := range [][]string{{"--tilt", "-0.05 deg", "--temperature", "-40 Cel", "--azimuth", "-90 deg"}, {"--tilt=-0.05 deg", "--temperature=-40 Cel", "--azimuth=-90 deg"}} {
		p := predicted(t, must(t, append(args, form...)...))
		if p.Asked.TiltDeg != -0.05 || p.Asked.Cel != -40 || p.Asked.AzimuthDeg != -90 || len(p.Roots) != 1 {
			t.Errorf("%v: %+v", form, p.Asked)
		}
	}
	for _, form := range [][]string{{"--tilt"}, {"--tilt", "--json"}} {
		if _, errOut, code := gemel(t, append(args, form...)...); code != exitWrongUse || !strings.Contains(errOut, `tilt: nothing; want a value with its unit, such as "29.2 deg"`) {
			t.Errorf("%v: exit code %d\n%s\nwant the missing value named", form, code, errOut)
		}
	}
}

func TestNoEmissionIsNoFailure(t *testing.T) {
	p := predicted(t, must(t, "predict", "--json", "--crystal", "bbo-kato-1986", "--pump", "405 nm", "--cut", "28 deg"))
	if p.Roots == nil || len(p.Roots) != 0 || p.Because == "" || p.SignalExternalDeg != nil {
		t.Errorf("%+v; want no roots, and why", p)
	}
}

func TestPredictSaysWhatIsAllowed(t *testing.T) {
	for _, c := range []struct {
		what string
		args []string
		code int
		want string
	}{
		{"nothing", nil, exitWrongUse, "crystal: nothing; want one of adp-zernike-1964"},
		{"a crystal misspelt", []string{"--crystal", "bbo-kato", "--pump", "405 nm", "--cut", "29.2 deg"}, exitWrongUse, `want "bbo-kato-1986", which is nearest, or one of adp-`},
		{"a pump without a unit", []string{"--crystal", "bbo-kato-1986", "--pump", "405", "--cut", "29.2 deg"}, exitWrongUse, "pump: 405 has no unit"},
		{"a wavelength outside the set", []string{"--crystal", "bbo-zhang-2000", "--pump", "405 nm", "--cut", "29.2 deg"}, exitWrongUse, "want 640 to 3180 nm: outside the range of the set"},
		{"a bench that is not there", []string{"--bench", "nowhere.yaml"}, exitFailed, "nowhere.yaml"},
		{"a batch beside a question", []string{"--batch", "--cut", "29.2 deg"}, exitWrongUse, "--batch beside flags of a single question"},
		{"a picture in no folder", append([]string{"--plot", filepath.Join(t.TempDir(), "no", "such.svg")}, kato...), exitFailed, "no such file or directory"},
	} {
		out, errOut, code := gemel(t, append([]string{"predict"}, c.args...)...)
		if code != c.code || !strings.Contains(errOut, c.want) || out != "" {
			t.Errorf("%s: exit code %d, %q on standard output\n%s\nwant code %d and %q", c.what, code, out, errOut, c.code, c.want)
		}
	}
}

func TestExtrapolationIsFlaggedInTheAnswer(t *testing.T) {
	p := predicted(t, must(t, "predict", "--json", "--extrapolate", "--crystal", "bbo-zhang-2000", "--pump", "405 nm", "--cut", "29.2 deg"))
	if len(p.Roots) != 1 || !strings.Contains(strings.Join(p.Warnings, "\n"), "extrapolated: ") {
		t.Errorf("%+v; want a root and a warning that says so", p)
	}
}

func TestABatchKeepsItsOrder(t *testing.T) {
	c := exec.Command(binary, "predict", "--batch", "--bench", demoBenchFile)
	c.Stdin = strings.NewReader(`{"cut": "29.2 deg"}
{"cut": "29.2 degrees"}
{"cut": "28 deg"}
not a job
{"crystal": "bbo-eimerl-1987"}`)
	out, err := c.Output()
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimSpace(string(out)), "\n")
	if len(lines) != 5 {
		t.Fatalf("%d lines; want 5\n%s", len(lines), out)
	}
	for i, ok := range []func(prediction) bool{
		func(p prediction) bool { return math.Abs(*p.SignalExternalDeg-emissionDeg(t)) < 1e-5 },
		func(p prediction) bool { return strings.HasPrefix(p.Error, "cut: ") },
		func(p prediction) bool { return p.Error == "" && p.Because != "" },
		func(p prediction) bool { return strings.HasPrefix(p.Error, "job: ") },
		func(p prediction) bool { return math.Abs(*p.SignalExternalDeg-3.356) < 1e-3 }, // the reference's README, "How far to trust an absolute angle"
	} {
		if !ok(predicted(t, lines[i])) {
			t.Errorf("line %d: %.300s", i+1, lines[i])
		}
	}
}

func TestThePictureIsWhole(t *testing.T) {
	file := filepath.Join(t.TempDir(), "emission.svg")
	must(t, "predict", "--bench", demoBenchFile, "--plot", file)
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	for _, want := range []string{"</svg>", "vacuum wavelength / nm", "angle outside, from the pump / deg", "signal arm: 2.864 ± ", "idler arm: 2.864 ± ", "S</text>", "I</text>"} {
		if !strings.Contains(string(text), want) {
			t.Errorf("no %q in the picture", want)
		}
	}
}

// ownKato is row S069 once more, as a person would type the set into a bench file.
const ownKato = `crystal:
    name: our-own
    reference: "certificate of the invented crystal 7"
    n_o: {constant: 2.7359, poles: [[0.01878, 0, 0.01822]], powers: [[-0.01354, 2]], range: [RANGE, 1060 nm], dn_dt: [[-16.6e-6, 0]]}
    n_e: {constant: 2.3753, poles: [[0.01224, 0, 0.01667]], powers: [[-0.01516, 2]], range: [RANGE, 1060 nm], dn_dt: [[-9.3e-6, 0]]}`

func TestACrystalOfTheBenchFilesOwnIsPredicted(t *testing.T) {
	const published = "crystal: bbo-kato-1986      # one named set of dispersion formulas; two sets never mix"
	own := variant(t, demoBenchFile, filepath.Join(t.TempDir(), "own.yaml"), change{published, strings.ReplaceAll(ownKato, "RANGE", "220 nm")})
	p := predicted(t, must(t, "predict", "--json", "--bench", own))
	if math.Abs(*p.SignalExternalDeg-emissionDeg(t)) > 1e-5 || strings.Contains(strings.Join(p.Warnings, " "), "extrapolated") {
		t.Errorf("signal at %g deg, warnings %q; want the published set's angle", *p.SignalExternalDeg, p.Warnings)
	}
	short := variant(t, demoBenchFile, filepath.Join(t.TempDir(), "short.yaml"), change{published, strings.ReplaceAll(ownKato, "RANGE", "500 nm")})
	if _, errOut, code := gemel(t, "predict", "--bench", short); code != exitFailed || !strings.Contains(errOut, "our-own n_o: 405 nm; want 500") {
		t.Errorf("exit code %d\n%s\nwant a pump outside the set refused", code, errOut)
	}
	long := variant(t, demoBenchFile, filepath.Join(t.TempDir(), "long.yaml"), change{published, strings.ReplaceAll(ownKato, "RANGE", "500 nm") + "\n  extrapolate: true"})
	p = predicted(t, must(t, "predict", "--json", "--bench", long))
	if math.Abs(*p.SignalExternalDeg-emissionDeg(t)) > 1e-5 || !strings.Contains(strings.Join(p.Warnings, " "), "extrapolated: crystal: our-own n_o: 405 nm") {
		t.Errorf("signal at %g deg, warnings %q; want the same, flagged", *p.SignalExternalDeg, p.Warnings)
	}
}

// crossing is a night that looks closely at one arm's way across the ring, the other one standing on it.
const crossing = `
title: One arm across the ring, closely
sweep:
  - {axis: crystal_tilt, at: 0 deg}
  - {axis: STILL, at: 2.864 deg}
  - {axis: MOVING, around: 2.864 deg, span: 1.2 deg, step: 0.03 deg}
dwell: {time: 2 s, slice: 1 s}
repeat: {times: 2, as: passes}
dark: {every: 30 points, dwell: 60 s, also: [start, end]}
`

// The nights go through drivers, instruments and logbook; their counts are drawn about rates at the
// angles where the virtual arms truly stood. What is fitted to them must lie where predict says, and
// off the bare emission (row S069) where predict says that apertures move it.
func TestTheDemosFittedPeaksAreThosePredicted(t *testing.T) {
	text, err := os.ReadFile(demoBenchFile)
	if err != nil {
		t.Fatal(err)
	}
	f, err := nighttest.AtClockOne(demoBenchFile, text)
	if err != nil {
		t.Fatal(err)
	}
	// The profiles that sweeps find, from the bench file alone.
	optics, err := f.Source()
	if err != nil {
		t.Fatal(err)
	}
	optics.Signal.Detector.Efficiency, optics.Idler.Detector.Efficiency = 1, 1
	model, err := source.New(optics)
	if err != nil {
		t.Fatal(err)
	}
	p := predicted(t, must(t, "predict", "--json", "--bench", demoBenchFile))
	bare := emissionDeg(t)
	if math.Abs(p.Collected.BareIdlerDeg-bare) > 1e-5 || math.Abs(p.Collected.BareSignalDeg-bare) > 1e-5 {
		t.Fatalf("bare emission at %g and %g deg; want %g deg, row S069", p.Collected.BareSignalDeg, p.Collected.BareIdlerDeg, bare)
	}
	apart := 0
	for _, arm := range []string{"signal", "idler"} {
		other := map[string]string{"signal": "idler", "idler": "signal"}[arm]
		data := t.TempDir()
		synctest.Test(t, func(t *testing.T) {
			r, err := nighttest.Run(nighttest.Night{Bench: f, Recipe: strings.NewReplacer("STILL", other+"_arm", "MOVING", arm+"_arm").Replace(crossing)}, data)
			if err != nil {
				t.Fatal(err)
			}
			if r.State != protocol.Finished || r.SetAside != 0 {
				t.Fatalf("%s (%s), %d set aside; want a quiet night", r.State, r.Reason, r.SetAside)
			}
		})
		at := func(deg, wave float64) source.Rates {
			pose := source.Pose{SignalDeg: 2.864, IdlerDeg: 2.864, WaveplateDeg: wave, PumpW: optics.PumpW, PumpNm: optics.PumpNm, CrystalCel: optics.CrystalCel, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}
			if arm == "signal" {
				pose.SignalDeg = deg
			} else {
				pose.IdlerDeg = deg
			}
			r := model.Exact(pose)
			if arm == "signal" {
				r.IdlerHz = r.SignalHz
			}
			return r
		}
		dim := at(2.864, 45).IdlerHz // what is no pair
		for _, k := range p.Collected.Peaks {
			if k.Over != arm+" arm" {
				continue
			}
			channel, profile := "pairs", func(deg float64) float64 { return at(deg, 0).PairsHz }
			if k.Of != "pairs" {
				channel, profile = arm, func(deg float64) float64 { return at(deg, 0).IdlerHz - dim }
			}
			fit, err := estimate.FitPeak(spots(t, data, arm+"_arm", channel), estimate.PredictedPeak, smooth(t, profile))
			if err != nil {
				t.Fatalf("%s over the %s: %v", k.Of, k.Over, err)
			}
			free, err := estimate.FitPeak(spots(t, data, arm+"_arm", channel), estimate.GaussianPeak, nil)
			if err != nil {
				t.Fatalf("%s over the %s: %v", k.Of, k.Over, err)
			}
			// A Gaussian knows nothing of the model, and is not the shape either.
			if d := free.CentreDeg() - k.PeakDeg; math.Abs(d) > shapeDeg+4*free.Fit.U(0) {
				t.Errorf("%s over the %s: a Gaussian fits at %.5f ± %.5f deg; predict says %.5f deg", k.Of, k.Over, free.CentreDeg(), free.Fit.U(0), k.PeakDeg)
			}
			offset, sigma := fit.Fit.Params[0], math.Hypot(fit.Fit.U(0), tableDeg)
			got := k.PeakDeg + offset
			t.Logf("%s over the %s: fitted %.5f ± %.5f deg, a Gaussian at %.5f deg, predicted %.5f deg (%+.1f sigma), bare emission %.5f deg (%+.1f sigma)",
				k.Of, k.Over, got, sigma, free.CentreDeg(), k.PeakDeg, offset/sigma, bare, (got-bare)/sigma)
			if !(fit.Fit.U(0) > 0 && sigma < 0.001) || math.Abs(offset) > 4*sigma {
				t.Errorf("%s over the %s: fitted %.5f ± %.5f deg; predict says %.5f deg", k.Of, k.Over, got, sigma, k.PeakDeg)
			}
			if math.Abs(k.MinusBareMdeg) > 5*1000*sigma {
				apart++
				if math.Abs(got-bare) < 4*sigma {
					t.Errorf("%s over the %s: fitted %.5f ± %.5f deg, on the bare emission at %.5f deg; predict says that apertures move it by %+.1f mdeg", k.Of, k.Over, got, sigma, bare, k.MinusBareMdeg)
				}
			}
		}
	}
	if apart < 2 {
		t.Errorf("%d of 4 peaks lie apart from the bare emission; the demo's apertures should move at least two", apart)
	}
}

// smooth asks for a profile every 0.03 deg, which a fit asks for some thousand times.
func smooth(t *testing.T, profile func(float64) float64) func(float64) float64 {
	t.Helper()
	var x, y []float64
	for deg := 1.4; deg < 4.4; deg += 0.03 {
		x, y = append(x, deg), append(y, profile(deg))
	}
	var c interp.NaturalCubic
	if err := c.Fit(x, y); err != nil {
		t.Fatal(err)
	}
	return func(deg float64) float64 { return max(0, c.Predict(min(max(deg, x[0]), x[len(x)-1]))) }
}

// tableDeg is what the instruments' table of rates, which holds to 1 % of the peak, may do to an
// angle.
const tableDeg = 0.0002

// shapeDeg is what a wrong shape may do to it.
const shapeDeg = 0.003

// spots are the accepted light readings over an arm's proved angle, dark counts and the
// accidentals of the demo's 4 ns window known.
func spots(t *testing.T, data, axis, channel string) (out []estimate.Spot) {
	t.Helper()
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	runs, err := book.Runs(t.Context())
	if err != nil || len(runs) != 1 {
		t.Fatalf("%d runs, %v; want one", len(runs), err)
	}
	count := func(r logbook.Reading, channel string) float64 {
		for _, c := range r.Counts {
			if c.Channel == channel {
				return float64(c.Counts)
			}
		}
		t.Fatalf("reading %d has no channel %q", r.Sequence, channel)
		return 0
	}
	var dark, darkS float64
	for r, err := range book.Readings(t.Context(), runs[0].Run) {
		if err != nil {
			t.Fatal(err)
		}
		gate := r.Gate.Duration().Seconds()
		switch {
		case !r.Accepted:
		case r.Kind == protocol.Dark:
			dark, darkS = dark+count(r, channel), darkS+gate
		case r.Kind == protocol.Light:
			s := estimate.Spot{Counts: count(r, channel), Exposure: gate}
			for _, a := range r.Angles {
				if a.Axis == axis {
					s.AngleDeg = (a.Before.Degrees() + a.After.Degrees()) / 2
				}
			}
			if channel == "pairs" {
				s.Known = count(r, "signal") * count(r, "idler") / gate * 4e-9
			}
			out = append(out, s)
		}
	}
	if channel != "pairs" {
		for i := range out {
			out[i].Known += dark / darkS * out[i].Exposure
		}
	}
	return out
}
