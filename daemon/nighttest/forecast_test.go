package nighttest

import (
	"encoding/json"
	"flag"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/forecast"
	"gemel/scan/recipe"
)

// nearEnough is how far a forecast's time may be from what the simulated run takes.
const nearEnough = 0.02

var namesBench = regexp.MustCompile(`(?m)^# bench: (\S+)$`)

// recipesOfConfigs lists the recipes of configs/ with the bench that each names; the demo's where it
// names none.
func recipesOfConfigs(t *testing.T) map[string]string {
	t.Helper()
	all := map[string]string{}
	for _, pattern := range []string{"../../configs/*-recipe.yaml", "../../configs/recipes/*.yaml"} {
		files, err := filepath.Glob(pattern)
		if err != nil {
			t.Fatal(err)
		}
		for _, file := range files {
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			all[file] = "demo-bench.yaml"
			if m := namesBench.FindSubmatch(text); m != nil {
				all[file] = string(m[1])
			}
		}
	}
	if len(all) < 3 {
		t.Fatalf("%d recipes found; want at least three", len(all))
	}
	return all
}

var longForecasts = flag.Bool("long", false, "hold the forecasts of all recipes against their runs, not those of the quick ones alone")

// quickRecipes are the recipes whose runs are played in a second or two of an idle computer: one that steps
// settings, one that homes an arm from both sides, one of a delay, and one that moves nothing.
var quickRecipes = []string{"crosstalk.yaml", "arm-zero.yaml", "coincidence-delay.yaml", "alignment.yaml"}

func TestAForecastTakesAsLongAsTheRun(t *testing.T) {
	for file, benchName := range recipesOfConfigs(t) {
		t.Run(filepath.Base(file), func(t *testing.T) {
			if !*longForecasts && !slices.Contains(quickRecipes, filepath.Base(file)) {
				t.Skip("with -long")
			}
			t.Parallel()
			f := benchNamed(t, benchName)
			if !f.Simulated() {
				t.Skip("a real bench")
			}
			foreseen, night, took := forecastAndRun(t, f, read(t, file))
			said := foreseen.Duration.Duration().Seconds()
			t.Logf("%s\nforecast %.1f s, run %.1f s, %+.2f %%", foreseen.Sentence, said, took, 100*(said/took-1))
			if night.State != protocol.Finished || night.SetAside > 0 {
				t.Fatalf("the run is %s (%s) with %d readings set aside; want it finished with none", night.State, night.Reason, night.SetAside)
			}
			if math.Abs(said/took-1) > nearEnough {
				t.Errorf("the forecast says %.1f s, the run took %.1f s: %+.2f %%; want them within %g %%\n%s", said, took, 100*(said/took-1), 100*nearEnough, foreseen.Text())
			}
		})
	}
}

func read(t testing.TB, file string) string {
	t.Helper()
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

func benchNamed(t testing.TB, name string) *bench.File {
	t.Helper()
	path := filepath.Join("../../configs", name)
	f, err := AtClockOne(path, []byte(read(t, path)))
	if err != nil {
		t.Fatal(err)
	}
	return f
}

var asksEarlier = regexp.MustCompile(`from: "([^"]+)"`)

// forecastAndRun makes the forecast of a recipe and runs it. What it takes from an earlier result is
// run before it in the same night, and its forecast is made once that is there. The time is in
// seconds, from the end of what came before to the run's own.
func forecastAndRun(t *testing.T, f *bench.File, text string) (foreseen *forecast.Forecast, night *Result, took float64) {
	t.Helper()
	n := Night{Bench: f, Recipe: text}
	if m := asksEarlier.FindStringSubmatch(text); m != nil {
		for file := range recipesOfConfigs(t) {
			if other := read(t, file); strings.Contains(other, "title: "+m[1]+"\n") {
				n.Before = []string{other}
			}
		}
	}
	data := t.TempDir()
	synctest.Test(t, func(t *testing.T) {
		began := time.Now()
		var err error
		if night, err = Run(n, data); err != nil {
			t.Fatal(err)
		}
		var taken []protocol.EarlierValue
		var ended time.Time
		for _, m := range night.Line {
			if m.Journal == nil {
				continue
			}
			switch {
			case m.Journal.Kind == protocol.PointEntry:
				var p protocol.Points
				if err := json.Unmarshal(m.Journal.Body, &p); err != nil {
					t.Fatal(err)
				}
				taken = append(taken, p.Earlier...)
			case strings.Contains(string(m.Journal.Body), `"kind":"ended"`):
				if !ended.IsZero() {
					began = ended
				}
				ended = m.At
			}
		}
		took = ended.Sub(began).Seconds()
		r, err := recipe.Parse("recipe", []byte(text))
		if err != nil {
			t.Fatal(err)
		}
		facts := f.Facts()
		facts.AcceptedAt = began
		facts.Earlier = func(ask scan.EarlierAsk) (scan.EarlierSource, error) { return logbook.Again(taken, ask) }
		plan, err := r.Plan(facts)
		if err != nil {
			t.Fatal(err)
		}
		if foreseen, err = report.Forecast(f, plan, report.Foreseen{Begins: began}); err != nil {
			t.Fatal(err)
		}
		if len(plan.Open()) > 0 {
			t.Errorf("values are open: %+v", plan.Open())
		}
	})
	return foreseen, night, took
}

// TestAForecastFromAnEarlierRunIsNearerToTheBench forecasts a run from itself: rates are what was
// counted, and time is what it took.
func TestAForecastFromAnEarlierRunIsNearerToTheBench(t *testing.T) {
	f := demoBench(t)
	data := t.TempDir()
	n := Night{Bench: f, Recipe: small}
	var night *Result
	var err error
	if n.Model, err = demoModel(); err != nil {
		t.Fatal(err)
	}
	synctest.Test(t, func(t *testing.T) {
		var err error
		if night, err = Run(n, data); err != nil {
			t.Fatal(err)
		}
	})
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	runs, err := book.Runs(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	earlier, err := report.FromRun(t.Context(), book, runs[0].Run, f)
	if err != nil {
		t.Fatal(err)
	}
	r, err := recipe.Parse("recipe", []byte(small))
	if err != nil {
		t.Fatal(err)
	}
	plan, err := r.Plan(f.Facts())
	if err != nil {
		t.Fatal(err)
	}
	foreseen, err := report.Forecast(f, plan, report.Foreseen{Begins: time.Now(), Earlier: earlier})
	if err != nil {
		t.Fatal(err)
	}
	if said := foreseen.Duration.Duration().Seconds(); math.Abs(said/night.Took.Seconds()-1) > 0.002 {
		t.Errorf("the forecast says %.1f s, the run took %.1f s (%s)", said, night.Took.Seconds(), foreseen.OverheadFrom)
	}
	sums, times := map[int]float64{}, map[int]float64{}
	for reading, err := range book.Readings(t.Context(), runs[0].Run) {
		if err != nil {
			t.Fatal(err)
		}
		if reading.Kind == protocol.Light && reading.Accepted {
			for _, c := range reading.Counts {
				if c.Channel == "pairs" {
					sums[*reading.Point] += float64(c.Counts)
					times[*reading.Point]++
				}
			}
		}
	}
	for _, p := range foreseen.List() {
		if want := sums[p.Point.Point] / times[p.Point.Point]; math.Abs(p.Coincidences["pairs"]-want) > 1e-4*want+1e-6 {
			t.Errorf("point %d: %g pairs expected; %g were counted", p.Point.Point, p.Coincidences["pairs"], want)
		}
	}
	// Between its places: half way from one point of the sweep to the next.
	between := []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(2.864)}, {Axis: "idler_arm", Angle: unit.Degrees(2.814)}}
	x, err := earlier.Expect(between, nil)
	if err != nil {
		t.Fatal(err)
	}
	model, err := f.Facts().Expect(between, nil)
	if err != nil {
		t.Fatal(err)
	}
	// The bench file expects 60 and 55 % of detectors that truly have 61 and 57 %.
	if ratio := x.CountsHz["pairs"] / model.CountsHz["pairs"]; math.Abs(ratio-0.61*0.57/(0.60*0.55)) > 0.05 {
		t.Errorf("%g pairs a second between two places, %g by the declared values: ratio %.3f; want about %.3f", x.CountsHz["pairs"], model.CountsHz["pairs"], ratio, 0.61*0.57/(0.60*0.55))
	}
	if _, err := earlier.Expect([]scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(9)}}, nil); err == nil {
		t.Error("rates where the run never was; want none")
	}
}
