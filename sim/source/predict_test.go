package source

import (
	"bytes"
	"encoding/json"
	"encoding/xml"
	"errors"
	"io"
	"math"
	"strings"
	"testing"

	"gemel/sim/phasematch"
)

var job = Job{Crystal: "bbo-kato-1986", Process: "e-oo", Pump: "405 nm", Cut: "29.2 deg", Signal: "810 nm", Tilt: "0 deg",
	Azimuth: "0 deg", Temperature: "20 Cel", Thickness: "3 mm", Waist: "30 um"}

func predict(t *testing.T, j Job) Prediction {
	t.Helper()
	q, err := j.Query()
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
	if !strings.Contains(p.Table(), "none: ") {
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
	q, err := j.Query()
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
	_, err := Job{Crystal: "glass", Pump: "405", Cut: "29.2 mm", Waist: "100"}.Query()
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
	if err := Batch(strings.NewReader(in), &out); err != nil {
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

func TestTheDemoLikeBenchExplainsWhyThePeakIsNotTheEmissionAngle(t *testing.T) {
	q, err := job.Query()
	if err != nil {
		t.Fatal(err)
	}
	o := bench(t)
	q.Slab.ThicknessMm, q.WaistUm, q.Optics, q.TuningPoints = o.ThicknessMm, o.PumpWaistUm, &o, 41
	p, err := Predict(q)
	if err != nil {
		t.Fatal(err)
	}
	c := p.Collected
	if c == nil || math.Abs(c.SignalSinglesPeakDeg-*p.SignalExternalDeg-c.PeakMinusEmissionMdeg/1000) > 1e-9 || c.PeakMinusEmissionMdeg == 0 {
		t.Fatalf("collected %+v", c)
	}
	if table := p.Table(); !strings.Contains(table, c.Because) || !strings.Contains(table, "collected band") || strings.Count(table, "\n") < 40 {
		t.Errorf("table:\n%s\nwant the explanation, the band and the tuning curve", table)
	}
	t.Log("\n" + p.Table()[:2600])
}

func TestThePlotIsWellFormedAndShowsBothDaughtersAndArms(t *testing.T) {
	q, err := job.Query()
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

func BenchmarkPredict(b *testing.B) {
	q, err := job.Query()
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
		raw := answer(line)
		if err := json.Unmarshal(raw, &object); err != nil || (object.Roots == nil) == (object.Error == "") || bytes.ContainsRune(raw, '\n') {
			t.Fatalf("%s: %s (%v)", line, raw, err)
		}
		if strings.Contains(object.Error, "unsupported value") {
			t.Fatalf("%s: a number that is none: %s", line, raw)
		}
	})
}
