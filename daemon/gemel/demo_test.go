//go:build unix

package main

import (
	"encoding/csv"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/alecthomas/kong"
	"go.bug.st/serial"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/scan/recipe"
)

// emissionDeg is row S069 of testdata/phase-matching/checks.csv, an independent calculation:
// bbo-kato-1986, type I, 405 nm, cut 29.2 deg, 810 nm outside the crystal.
func emissionDeg(t *testing.T) float64 {
	t.Helper()
	file, err := os.Open("../../testdata/phase-matching/checks.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	in := csv.NewReader(file)
	in.FieldsPerRecord = -1
	rows, err := in.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	for _, row := range rows {
		if row[0] == "S069" {
			deg, err := strconv.ParseFloat(row[4], 64)
			if err != nil {
				t.Fatal(err)
			}
			return deg
		}
	}
	t.Fatal("checks.csv has no row S069")
	return 0
}

func TestTheDemoFindsTheRingAndWritesEveryReadingOnce(t *testing.T) {
	t.Parallel() // with what waits more than it works
	data := filepath.Join(t.TempDir(), "data")
	began := time.Now()
	p := launch(t, nil, "run", "--bench", demoBenchFile, "--recipe", demoRecipeFile, "--data", data, "--json")
	if code := p.wait(); code != exitDone {
		t.Fatalf("exit code %d\n%s", code, p.err)
	}
	took := time.Since(began)
	t.Logf("took %s", took.Round(100*time.Millisecond))
	if took > time.Minute {
		t.Errorf("took %s; want less than a minute", took)
	}
	var summary struct {
		Run      protocol.RunID `json:"run"`
		State    protocol.State `json:"state"`
		Accepted int            `json:"readings_accepted"`
		Points   []struct {
			Visits int `json:"visits"`
		} `json:"points"`
		Most struct {
			Angles map[string]float64 `json:"target_deg"`
		} `json:"most_coincident"`
	}
	if err := json.Unmarshal([]byte(p.out.String()), &summary); err != nil {
		t.Fatalf("%v in %s", err, p.out)
	}
	if summary.State != protocol.Finished || len(summary.Points) < 60 {
		t.Errorf("%s with %d points; want finished with 60 at least", summary.State, len(summary.Points))
	}
	want := emissionDeg(t)
	for axis, step := range map[string]float64{"signal_arm": 0.1, "idler_arm": 0.2} {
		if at := summary.Most.Angles[axis]; math.Abs(at-want) > step {
			t.Errorf("most coincidences with %s at %g deg; want %g within one step of %g", axis, at, want, step)
		}
	}
	eachOnce(t, data, summary.Run, summary.Accepted)
	sameMorning(t, p.out.String(), must(t, "report", "--data", data, "--json"))
	exported(t, must(t, "export", "--data", data), summary.Accepted)
	t.Log(strings.TrimSpace(must(t, "check", "--data", data)))
	_, errOut, code := gemel(t, "status", "--data", data)
	if code != exitFailed || !strings.Contains(errOut, "no daemon is running here") || !strings.Contains(errOut, data) {
		t.Errorf("status: exit code %d, %q; want 1 and that no daemon runs there", code, errOut)
	}
}

// sameMorning compares what a run and a later report tell of its results and its night.
func sameMorning(t *testing.T, run, report string) {
	t.Helper()
	type morning struct {
		Results []json.RawMessage `json:"results"`
		Night   json.RawMessage   `json:"night"`
	}
	var told [2]morning
	for i, text := range []string{run, report} {
		if err := json.Unmarshal([]byte(text), &told[i]); err != nil {
			t.Fatal(err)
		}
		again, err := json.Marshal(told[i]) // the one is indented
		if err != nil {
			t.Fatal(err)
		}
		if err := json.Unmarshal(again, &told[i]); err != nil {
			t.Fatal(err)
		}
	}
	if len(told[0].Results) == 0 || !strings.Contains(string(told[0].Night), `"readings_accepted"`) || !reflect.DeepEqual(told[0], told[1]) {
		t.Errorf("the run tells %s\nand the report %s", told[0], told[1])
	}
}

// eachOnce compares what was accepted with what the recipe plans.
func eachOnce(t *testing.T, data string, run protocol.RunID, accepted int) {
	t.Helper()
	f, err := bench.Load(demoBenchFile)
	if err != nil {
		t.Fatal(err)
	}
	r, err := recipe.Load(demoRecipeFile)
	if err != nil {
		t.Fatal(err)
	}
	plan, err := r.Plan(f.Facts())
	if err != nil {
		t.Fatal(err)
	}
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	times := map[[2]int]int{}
	darks, backgrounds := 0, 0
	for r, err := range book.Readings(t.Context(), run) {
		if err != nil {
			t.Fatal(err)
		}
		switch {
		case !r.Accepted:
		case r.Kind == protocol.Light:
			times[[2]int{*r.Point, *r.Visit}]++
		case r.Kind == protocol.Dark:
			darks++
		case r.Kind == protocol.Background:
			backgrounds++
		}
	}
	planned := plan.Visits()
	for _, v := range planned {
		key := [2]int{v.Point, v.Visit}
		if times[key] != 1 {
			t.Errorf("point %d visit %d was accepted %d times; want once", key[0], key[1], times[key])
		}
	}
	if len(times) != len(planned) || darks < 2 || backgrounds < 2 || len(planned)+darks+backgrounds != accepted {
		t.Errorf("%d visits, %d darks and %d backgrounds accepted; %d visits planned, and the summary says %d in all", len(times), darks, backgrounds, len(planned), accepted)
	}
}

func exported(t *testing.T, text string, accepted int) {
	t.Helper()
	in := csv.NewReader(strings.NewReader(text))
	in.Comment = '#'
	rows, err := in.ReadAll()
	if err != nil || len(rows) != accepted+1 {
		t.Fatalf("export: %d rows, %v; want a head and %d readings", len(rows), err, accepted)
	}
	for _, unit := range []string{"deg", "s"} {
		if !strings.Contains(text[:strings.Index(text, strings.Join(rows[0], ","))], unit) {
			t.Errorf("the header comment names no %s", unit)
		}
	}
}

func TestAnyProgramMayAskASimulatedInstrumentWhoItIs(t *testing.T) {
	p := launch(t, nil, "sim", "--bench", demoBenchFile)
	f, err := bench.Load(demoBenchFile)
	if err != nil {
		t.Fatal(err)
	}
	if last := f.Lines[len(f.Lines)-1].Name; !p.says(p.out, last+" ") { // the order is the file's
		t.Fatalf("gemel sim: %s", p.err)
	}
	asked := 0
	for text := range strings.Lines(p.out.String()) {
		name, path, _ := strings.Cut(strings.TrimSpace(text), " ")
		if name == "arms" || name == "waveplate" {
			continue // they speak no IEEE 488.2
		}
		asked++
		port, err := serial.Open(path, &serial.Mode{BaudRate: 9600})
		if err != nil {
			t.Errorf("%s: %v", path, err)
			continue
		}
		if err := port.SetReadTimeout(10 * time.Second); err != nil {
			t.Fatal(err)
		}
		if _, err := port.Write([]byte("*IDN?\n")); err != nil {
			t.Fatal(err)
		}
		answer := ""
		for b := make([]byte, 64); !strings.HasSuffix(answer, "\n"); {
			n, err := port.Read(b)
			if err != nil || n == 0 {
				t.Fatalf("%s: answered %q, then nothing (%v)", name, answer, err)
			}
			answer += string(b[:n])
		}
		// IEEE 488.2, 10.14: four fields, separated by commas.
		if len(strings.Split(strings.TrimSpace(answer), ",")) != 4 {
			t.Errorf("%s answers %q; want four fields", name, answer)
		}
		if err := port.Close(); err != nil {
			t.Error(err)
		}
	}
	if want := len(f.Lines) - 2; asked != want {
		t.Errorf("%d devices were asked; want %d", asked, want)
	}
	quit(t, p)
}

func TestEveryCommandExplainsItselfWithAnExample(t *testing.T) {
	var c commands
	parser, err := kong.New(&c, kong.Vars{"version": version})
	if err != nil {
		t.Fatal(err)
	}
	names := 0
	for _, leaf := range parser.Model.Leaves(true) {
		names++
		out, errOut, code := gemel(t, leaf.Name, "--help")
		if code != exitDone || errOut != "" || !strings.Contains(out, "Example") || !strings.Contains(out, "gemel "+leaf.Name) {
			t.Errorf("%s --help: exit code %d, standard error %q; want 0 and an example\n%s", leaf.Name, code, errOut, out)
		}
	}
	if names < 13 {
		t.Errorf("%d commands; want 13 at least", names)
	}
	for _, args := range [][]string{{}, {"bogus"}, {"run"}, {"run", "--bogus"}} {
		if _, errOut, code := gemel(t, args...); code != exitWrongUse || errOut == "" {
			t.Errorf("gemel %v: exit code %d, %q; want 2 and a word", args, code, errOut)
		}
	}
}
