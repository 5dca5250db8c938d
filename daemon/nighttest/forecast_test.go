package nighttest

import (
	"math"
	"os"
	"path/filepath"
	"regexp"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/report"
	"gemel/protocol"
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

func TestAForecastTakesAsLongAsTheRun(t *testing.T) {
	for file, benchName := range recipesOfConfigs(t) {
		t.Run(filepath.Base(file), func(t *testing.T) {
			t.Parallel()
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			path := filepath.Join("../../configs", benchName)
			benchText, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			f, err := AtClockOne(path, benchText)
			if err != nil {
				t.Fatal(err)
			}
			if !f.Simulated() {
				t.Skip("a real bench")
			}
			foreseen, night := forecastAndRun(t, f, string(text))
			took := night.Took.Seconds()
			said := foreseen.Duration.Duration().Seconds()
			t.Logf("%s\nforecast %.1f s, run %.1f s, %+.2f %%", foreseen.Sentence, said, took, 100*(said/took-1))
			if night.State != protocol.Finished {
				t.Fatalf("the run is %s (%s); want it finished", night.State, night.Reason)
			}
			if math.Abs(said/took-1) > nearEnough {
				t.Errorf("the forecast says %.1f s, the run took %.1f s: %+.2f %%; want them within %g %%\n%s", said, took, 100*(said/took-1), 100*nearEnough, foreseen.Text())
			}
		})
	}
}

// forecastAndRun asks for a forecast in the bubble in which the run then takes place.
func forecastAndRun(t *testing.T, f *bench.File, text string) (foreseen *forecast.Forecast, night *Result) {
	t.Helper()
	data := t.TempDir()
	synctest.Test(t, func(t *testing.T) {
		r, err := recipe.Parse("recipe", []byte(text))
		if err != nil {
			t.Fatal(err)
		}
		facts := f.Facts()
		facts.AcceptedAt = time.Now()
		plan, err := r.Plan(facts)
		if err != nil {
			t.Fatal(err)
		}
		if foreseen, err = report.Forecast(f, plan, report.Foreseen{Begins: time.Now()}); err != nil {
			t.Fatal(err)
		}
		if night, err = Run(Night{Bench: f, Recipe: text}, data); err != nil {
			t.Fatal(err)
		}
	})
	return foreseen, night
}
