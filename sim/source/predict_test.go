package source

import (
	"bytes"
	"encoding/json"
	"encoding/xml"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"gemel/sim/crystal"
	"gemel/sim/phasematch"
)

var job = Job{Crystal: "bbo-kato-1986", Process: "e-oo", Pump: "405 nm", Cut: "29.2 deg", Signal: "810 nm", Tilt: "0 deg",
	Azimuth: "0 deg", Temperature: "20 Cel", Thickness: "3 mm", Waist: "30 um"}

func predict(t *testing.T, j Job) Prediction {
	t.Helper()
	q, err := j.Query(Query{})
	if err != nil {
		t.Fatal(err)
	}
	p, err := Predict(q)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func TestAPredictionCarriesTheCheckedFigures(t *testing.T) {
	p := predict(t, job)
	for _, c := range []struct {
		name      string
		got       *float64
		want, tol float64 // rows S069, S070, S094, S099 of the check values
	}{
		{"signal outside", p.SignalExternalDeg, 2.8641765363, 1e-9},
		{"signal inside", p.SignalInternalDeg, 1.7246811288, 1e-9},
		{"idler outside", p.IdlerExternalDeg, 2.8641765363, 1e-9},
		{"ring", p.EmissionFWHMMrad, 3.9800089888, 1e-8},
		{"correlation", p.CorrelationFWHMMrad, 5.4203632474, 1e-6},
	} {
		if c.got == nil || math.Abs(*c.got-c.want) > c.tol {
			t.Errorf("%s: %v; want %.10g", c.name, c.got, c.want)
		}
	}
	if p.IdlerNm != 810 || math.Abs(p.WalkoffDeg-3.8806750635) > 1e-8 || math.Abs(p.PumpAxisAngleDeg-29.2) > 1e-12 || len(p.Roots) != 1 || *p.IdlerAzimuthDeg != 180 {
		t.Errorf("%+v", p)
	}
}

func TestPredictionsHaveTheAgreedKeys(t *testing.T) {
	var line map[string]any
	raw, err := json.Marshal(predict(t, job))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(raw, &line); err != nil {
		t.Fatal(err)
	}
	keys := []string{"signal_external_deg", "idler_external_deg", "signal_internal_deg", "idler_internal_deg", "idler_azimuth_deg", "idler_nm",
		"pump_axis_angle_deg", "walkoff_deg", "emission_fwhm_mrad", "correlation_fwhm_mrad"}
	root := line["roots"].([]any)[0].(map[string]any)
	for _, k := range keys {
		if v, ok := line[k].(float64); !ok || root[k] != v {
			t.Errorf("%s is %v, of the first root %v; want the same number", k, line[k], root[k])
		}
	}
	if w, ok := line["warnings"].([]any); !ok || len(w) != 0 {
		t.Errorf("warnings: %v; want an empty list", line["warnings"])
	}
	if _, ok := line["because"]; ok {
		t.Error("a reason for no emission beside an emission")
	}
}

func TestNoEmissionIsAnAnswerWithAReason(t *testing.T) {
	j := job
	j.Cut = "28 deg"
	p := predict(t, j)
	raw, err := json.Marshal(p)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Contains(raw, []byte(`"roots":[]`)) || p.Because == "" || !bytes.Contains(raw, []byte(`"signal_external_deg":null`)) {
		t.Errorf("%s; want no roots, null angles and why", raw)
	}
	if !strings.Contains(p.Table(), "no emission of 810 nm at azimuth 0 deg; no direction") {
		t.Errorf("table:\n%s\nwant it to say that there is none", p.Table())
	}
}

func TestTwoRootsAreBothListed(t *testing.T) {
	j := job
	j.Process, j.Cut, j.Azimuth = "e-oe", "41 deg", "180 deg"
	p := predict(t, j)
	if len(p.Roots) != 2 || !(*p.Roots[0].SignalExternalDeg < *p.Roots[1].SignalExternalDeg) || *p.SignalExternalDeg != *p.Roots[0].SignalExternalDeg {
		t.Errorf("%d roots; want two, the smaller angle first and at the top", len(p.Roots))
	}
}

func TestARingThatJustOpensIsFlagged(t *testing.T) {
	j := job
	j.Cut = "28.8160 deg" // collinear at 28.81586
	if p := predict(t, j); len(p.Roots) != 1 || !strings.Contains(strings.Join(p.Warnings, "\n"), "just opens") {
		t.Errorf("%d roots, warnings %q; want one that doubts the angle", len(p.Roots), p.Warnings)
	}
}

func TestExtrapolationIsRefusedOrFlagged(t *testing.T) {
	j := job
	j.Crystal = "bbo-zhang-2000"
	q, err := j.Query(Query{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := Predict(q); err == nil || !strings.Contains(err.Error(), "outside the range") {
		t.Errorf("%v; want a refusal", err)
	}
	j.Extrapolate = true
	if p := predict(t, j); len(p.Warnings) != 1 || !strings.Contains(p.Warnings[0], "extrapolated") {
		t.Errorf("warnings %q; want one that says so", p.Warnings)
	}
}

func TestAJobReportsAllItsFaultsAtOnce(t *testing.T) {
	_, err := Job{Crystal: "glass", Pump: "405", Cut: "29.2 mm", Waist: "100"}.Query(Query{})
	for _, want := range []string{`"glass" is not a set`, "pump: ", "cut: ", "waist: "} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v; want %q in it", err, want)
		}
	}
}

func TestABatchAnswersLineByLineInOrder(t *testing.T) {
	in := `{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg", "signal": "810 nm"}
{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "28 deg"}
{"crystal": "bbo-kato-1986", "pump": "405", "cut": "29.2 deg"}
not json
{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg", "colour": "blue"}

{"crystal": "zgp-das-2003", "pump": "2050 nm", "signal": "3000 nm", "cut": "53.5 deg", "azimuth": "30 deg"}
`
	var out bytes.Buffer
	if err := Batch(strings.NewReader(in), &out, Query{}); err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimSpace(out.String()), "\n")
	if len(lines) != 6 {
		t.Fatalf("%d lines; want 6:\n%s", len(lines), out.String())
	}
	for i, want := range []string{`"signal_external_deg":2.86417653`, `"roots":[]`, `"error":"pump: `, `"error":"job: `, `"error":"job: `, `"signal_external_deg":2.33567469`} {
		if !strings.Contains(lines[i], want) || !json.Valid([]byte(lines[i])) {
			t.Errorf("line %d: %s; want %s", i+1, lines[i], want)
		}
	}
}

func TestABenchTellsThePeaksFromTheBareEmission(t *testing.T) {
	o := bench(t)
	o.Idler.RadiusMm = 6
	q := Ask(o)
	q.Tuning = true
	p, err := Predict(q)
	if err != nil {
		t.Fatal(err)
	}
	c := p.Collected
	if c == nil || len(c.Peaks) != 5 || c.BareSignalDeg != *p.SignalExternalDeg || c.BareNm != 810 {
		t.Fatalf("collected %+v", c)
	}
	m := model(t, o)
	for _, k := range c.Peaks {
		if math.Abs(k.ApertureMdeg+k.BandMdeg-k.MinusBareMdeg) > 1e-9 || math.Abs(k.MiddleDeg-c.BareSignalDeg-k.MinusBareMdeg/1000) > 1e-9 {
			t.Errorf("%+v: the parts do not add up", k)
		}
		if k.Of != "idler singles" {
			continue
		}
		// The rates themselves say that the peak is there and the bare emission is not it.
		at := func(deg float64) float64 { return m.integral(m.newFrame(0, 405, 20), ofIdler, 2.864, deg, 0) }
		low, high := at(k.MiddleDeg-k.FWHMDeg/2), at(k.MiddleDeg+k.FWHMDeg/2)
		if !(k.MinusBareMdeg < -10 && k.ApertureMdeg < -10) || math.Abs(low/high-1) > 1e-3 || at(c.BareIdlerDeg-k.FWHMDeg/2) < 1.02*at(c.BareIdlerDeg+k.FWHMDeg/2) {
			t.Errorf("%+v: want the middle of the rates, some hundredths of a degree inside the ring", k)
		}
	}
	table := p.Table()
	for _, want := range []string{"The two differ because " + c.Because, "peak - bare / mdeg", "collected band of the signal", "Tuning curve", "deg per K"} {
		if !strings.Contains(table, want) {
			t.Errorf("table:\n%s\nwant %q in it", table, want)
		}
	}
}

func TestATiltedBenchIsAskedAtItsTilt(t *testing.T) {
	q, err := Job{Tilt: "0.5 deg"}.Query(Ask(bench(t)))
	if err != nil {
		t.Fatal(err)
	}
	p, err := Predict(q)
	if err != nil {
		t.Fatal(err)
	}
	if c := p.Collected; math.Abs(c.BareSignalDeg-*p.SignalExternalDeg) > 1e-12 || c.BareSignalDeg < 3.7 || math.Abs(c.Peaks[0].MaximumDeg-c.BareSignalDeg) > 0.02 {
		t.Errorf("bare %.4f deg, signal %.4f deg, singles %+v; want all of them near 3.87 deg", c.BareSignalDeg, *p.SignalExternalDeg, c.Peaks[0])
	}
}

func TestAJobOverABenchKeepsWhatItDoesNotSay(t *testing.T) {
	o := bench(t)
	o.AzimuthDeg, o.ThicknessMm = 90, 5
	q, err := Job{Cut: "29.5 deg"}.Query(Ask(o))
	if err != nil {
		t.Fatal(err)
	}
	if q.Slab.CutDeg != 29.5 || q.Optics.CutDeg != 29.5 || q.Slab.ThicknessMm != 5 || q.AzimuthDeg != 90 || q.WaistUm != o.PumpWaistUm || q.SignalNm != 810 || o.CutDeg != 29.2 {
		t.Errorf("%+v; want the bench with another cut, and the bench as it was", q)
	}
}

func TestLightThatTheSetKnowsNothingOfIsSaidToBeLeftOut(t *testing.T) {
	o := bench(t)
	if w := strings.Join(model(t, o).Warnings(), "\n"); strings.Contains(w, "left out") {
		t.Errorf("warnings %q of filters that the set covers", w)
	}
	o.Idler.Filter = Filter{}
	if w := strings.Join(model(t, o).Warnings(), "\n"); !strings.Contains(w, "the idler arm takes wavelengths for which bbo-kato-1986 says nothing: light outside 655 to 1060 nm is left out") {
		t.Errorf("warnings %q; want the idler's missing filter in them", w)
	}
}

func TestTheWrongSignOfACrystalIsNamed(t *testing.T) {
	j := job
	j.Process = "o-ee"
	if p := predict(t, j); len(p.Roots) != 0 || !strings.Contains(strings.Join(p.Warnings, "\n"), "o-ee matches in positive crystals; bbo-kato-1986 is negative") {
		t.Errorf("%d roots, warnings %q; want none, and why", len(p.Roots), p.Warnings)
	}
}

func TestAbsurdValuesAreRefusedByName(t *testing.T) {
	for _, c := range []struct {
		what string
		job  func(*Job)
		want string
	}{
		{"a negative wavelength", func(j *Job) { j.Pump = "-405 nm" }, `pump: "-405 nm"; want 100 to 20000 nm`},
		{"a pump in metres", func(j *Job) { j.Pump = "405 m" }, `pump: "405 m"; want 100 to 20000 nm`},
		{"a pump in degrees", func(j *Job) { j.Pump = "405 deg" }, `pump: "405 deg"; want a length in nm, um, mm, cm, m`},
		{"a number that is none", func(j *Job) { j.Cut = "NaN deg" }, `cut: "NaN"; want a decimal number`},
		{"a decimal comma", func(j *Job) { j.Cut = "29,2 deg" }, `cut: "29,2"; want a decimal number`},
		{"infinity", func(j *Job) { j.Waist = "Inf um" }, `waist: "Inf"; want a decimal number`},
		{"a cut beyond the right angle", func(j *Job) { j.Cut = "91 deg" }, `cut: "91 deg"; want 0 to 90 deg`},
		{"no thickness", func(j *Job) { j.Thickness = "0 mm" }, `thickness: "0 mm"; want 0.001 to 500 mm`},
		{"no waist", func(j *Job) { j.Waist = "0 um" }, `waist: "0 um"; want 1 to 10000 um`},
		{"below absolute zero", func(j *Job) { j.Temperature = "-1 K" }, `temperature: "-1 K"; want -273.15 to 1500 Cel`},
		{"no unit", func(j *Job) { j.Temperature = "20" }, `temperature: 20 has no unit; want `},
		{"a process that is none", func(j *Job) { j.Process = "type I" }, `process "type I"; want one of [e-oo e-oe e-eo o-ee o-oe o-eo]`},
		{"a crystal that is nearly one", func(j *Job) { j.Crystal = "BBO Kato" }, `"BBO Kato" is not a set that this program knows; want "bbo-kato-1986", which is nearest, or one of adp-zernike-1964`},
		{"a biaxial crystal", func(j *Job) { j.Crystal = "ktp-kato-2002" }, `ktp-kato-2002 is biaxial; want a uniaxial crystal`},
	} {
		j := job
		c.job(&j)
		if _, err := j.Query(Query{}); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v; want %q", c.what, err, c.want)
		}
	}
}

func TestABatchIsReadStrictly(t *testing.T) {
	for line, want := range map[string]string{
		`{"crystal": "bbo-kato-1986", "pump": 405, "cut": "29.2 deg"}`:      `job: pump: no text; want a value in quotes, with its unit`,
		`{"crystal": "bbo-kato-1986", "Pump": "405 nm", "cut": "29.2 deg"}`: `job: "Pump" is no name; want azimuth, crystal`,
		`{"crystal": "bbo-kato-1986", "pump": "405 nm", "pump": "450 nm"}`:  `job: pump twice; want it once`,
		`{"crystal": "bbo-kato-1986", "extrapolate": "yes"}`:                `job: extrapolate: neither true nor false`,
		`{"crystal": "bbo-kato-1986"`:                                       `job: `,
		`{} {}`:                                                             `job: more than one value on a line`,
		`{}`:                                                                `crystal: nothing; want one of`,
		`{"pump": "405 nm", "cut": "29.2 deg", "crystal": "` + strings.Repeat("b", 70000) + `"}`: `job: a line longer than 65536 bytes`,
	} {
		var out bytes.Buffer
		if err := Batch(strings.NewReader(line+"\n"+`{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg", "tilt": null}`), &out, Query{}); err != nil {
			t.Fatal(err)
		}
		replies := strings.Split(strings.TrimSpace(out.String()), "\n")
		var refused struct{ Error string }
		if len(replies) != 2 || json.Unmarshal([]byte(replies[0]), &refused) != nil || !strings.Contains(refused.Error, want) || !strings.Contains(replies[1], `"signal_external_deg":2.8641`) {
			t.Errorf("%.80s: %.300q; want %q, and the next line answered", line, replies, want)
		}
	}
}

func TestThePlotIsWellFormedAndShowsBothDaughtersAndArms(t *testing.T) {
	q, err := job.Query(Query{})
	if err != nil {
		t.Fatal(err)
	}
	o := bench(t)
	q.Optics = &o
	for _, process := range []phasematch.Process{phasematch.EOO, phasematch.EOE} {
		q.Slab.Process = process
		if process == phasematch.EOE {
			q.Slab.CutDeg, q.Optics = 42.5, nil
		}
		var b bytes.Buffer
		if err := Plot(&b, q); err != nil {
			t.Fatal(err)
		}
		d := xml.NewDecoder(bytes.NewReader(b.Bytes()))
		counts := map[string]int{}
		for {
			token, err := d.Token()
			if errors.Is(err, io.EOF) {
				break
			}
			if err != nil {
				t.Fatalf("%s: %v\n%s", process, err, b.String())
			}
			if e, ok := token.(xml.StartElement); ok {
				counts[e.Name.Local]++
			}
		}
		patches := 3 // both arms and the sheet
		if q.Optics == nil {
			patches = 1
		}
		if counts["rect"] != patches || counts["circle"] < 2 || strings.Contains(b.String(), "NaN") {
			t.Errorf("%s: %v; want %d patches, two points and no NaN", process, counts, patches)
		}
	}
}

// Whatever is asked within the bounds that are printed is answered, and JSON can carry the answer.
func TestRandomQuestionsAreAnswered(t *testing.T) {
	statistics(t)
	rng := rand.New(rand.NewPCG(31, 2))
	decades := func(lo, hi float64) float64 { return lo * math.Pow(hi/lo, rng.Float64()) }
	names, matched, apertures := crystal.Names(), 0, 0
	for i := range 900 {
		pump := decades(250, 1500)
		j := Job{Crystal: names[rng.IntN(len(names))], Process: string(phasematch.Processes()[rng.IntN(6)]), Pump: fmt.Sprintf("%g nm", pump),
			Signal: fmt.Sprintf("%g nm", pump*decades(1.01, 12)), Cut: fmt.Sprintf("%g deg", 90*rng.Float64()), Tilt: fmt.Sprintf("%g deg", 79*(2*rng.Float64()-1)*rng.Float64()),
			Azimuth: fmt.Sprintf("%g deg", 720*rng.Float64()-360), Temperature: fmt.Sprintf("%g Cel", decades(1, 1500)), Thickness: fmt.Sprintf("%g mm", decades(0.001, 500)),
			Waist: fmt.Sprintf("%g um", decades(1, 10000)), Extrapolate: rng.IntN(2) == 0}
		if rng.IntN(3) == 0 {
			j.Poling = fmt.Sprintf("%g um", decades(1, 1000))
		}
		if rng.IntN(3) == 0 {
			j.Signal = ""
		}
		known := Query{}
		if i%15 == 0 { // a bench as wild
			o := bench(t)
			o.Signal.RadiusMm, o.Idler.RadiusMm = decades(0.01, 20), decades(0.01, 20)
			o.Signal.OutOfPlaneDeg, o.Idler.OutOfPlaneDeg = 2*rng.NormFloat64(), 2*rng.NormFloat64()
			o.Signal.Filter.WidthNm, o.Idler.Filter.WidthNm = decades(0.01, 300), decades(0.01, 300)
			known = Ask(o)
			j = Job{Cut: fmt.Sprintf("%g deg", 28.5+rng.Float64()), Tilt: fmt.Sprintf("%g deg", rng.NormFloat64()), Thickness: j.Thickness, Waist: j.Waist, Azimuth: j.Azimuth}
		}
		q, err := j.Query(known)
		if err != nil {
			continue
		}
		q.Tuning = i%10 == 0
		p, err := Predict(q)
		if err != nil {
			continue
		}
		if _, err := json.Marshal(p); err != nil || len(p.Roots) > 2 || (len(p.Roots) == 0) != (p.Because != "") || p.Table() == "" {
			t.Errorf("%+v: %d roots, because %q, %v", j, len(p.Roots), p.Because, err)
		}
		if err := Plot(io.Discard, q); err != nil && !strings.Contains(err.Error(), "holds no signal") {
			t.Errorf("%+v: %v", j, err)
		}
		matched += len(p.Roots)
		if p.Collected != nil {
			apertures++
		}
	}
	t.Logf("%d roots, %d benches", matched, apertures)
	if matched < 40 || apertures < 5 {
		t.Errorf("%d roots and %d benches; the questions ask nothing", matched, apertures)
	}
}

func BenchmarkPredict(b *testing.B) {
	q, err := job.Query(Query{})
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if _, err := Predict(q); err != nil {
			b.Fatal(err)
		}
	}
}

// FuzzAnswer: whatever a line says, the answer is one JSON object with either roots or an error,
// and nothing in it is NaN (which JSON cannot carry).
func FuzzAnswer(f *testing.F) {
	for _, seed := range []string{
		`{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg", "signal": "760 nm", "tilt": "2 deg", "azimuth": "33 deg", "thickness": "0.1 mm", "waist": "5 um"}`,
		`{"crystal": "bbo-kato-1986", "pump": "405 nm", "cut": "29.2 deg", "signal": "1060 nm", "tilt": "79 deg", "thickness": "500 mm", "waist": "10 mm"}`,
		`{"crystal": "bbo-kato-1986", "process": "e-oe", "pump": "405 nm", "cut": "41 deg", "azimuth": "180 deg", "temperature": "300 K", "poling": "40 um"}`,
		`{"crystal": "zgp-das-2003", "pump": "2050 nm", "signal": "3000 nm", "cut": "53.5 deg"}`,
		`{"crystal": "ktp-kato-2002", "pump": "532 nm", "cut": "90 deg"}`,
		`{"crystal": "bbo-zhang-2000", "pump": "405 nm", "cut": "0 deg", "extrapolate": true, "thickness": "900 mm", "waist": "1e-3 nm"}`,
		`{"crystal": "bbo-kato-1986", "process": "", "pump": "1e-9 nm", "cut": "79 arcmin", "tilt": "-79.9 deg", "extrapolate": true}`,
		`[]`, `{"pump": 405}`, `{}{}`, `{"cut": "29,2 deg"}`,
	} {
		f.Add([]byte(seed))
	}
	f.Fuzz(func(t *testing.T, line []byte) {
		var object struct {
			Roots []json.RawMessage `json:"roots"`
			Error string            `json:"error"`
		}
		slow := time.AfterFunc(20*time.Second, func() { panic(fmt.Sprintf("no answer after 20 s to %q", line)) })
		raw := answer(line, Query{})
		slow.Stop()
		if err := json.Unmarshal(raw, &object); err != nil || (object.Roots == nil) == (object.Error == "") || bytes.ContainsRune(raw, '\n') {
			t.Fatalf("%s: %s (%v)", line, raw, err)
		}
		if strings.Contains(object.Error, "unsupported value") {
			t.Fatalf("%s: a number that is none: %s", line, raw)
		}
	})
}
