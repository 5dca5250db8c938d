package recipe

import (
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

var update = flag.Bool("update", false, "write the findings into the bad files")

// mark begins the findings at the end of a bad file. They stand below what they are about, so that
// writing them moves no line.
const mark = "# findings:\n"

// TestBadRecipes walks the folder: each file is named after its mistake and ends with what is found.
func TestBadRecipes(t *testing.T) {
	facts := bench()
	facts.Axes = append(facts.Axes, scan.Axis{Name: "geared_arm", High: 5 * unit.Degree, Backlash: unit.Degree / 2, Rising: true, Park: new(unit.Angle(0))})
	facts.KeepOuts = []scan.KeepOut{{Name: "post", Range: &scan.Range{Span: scan.Span{Axis: "geared_arm", Low: 7 * unit.Degree / 2, High: 4 * unit.Degree}}}}
	facts.Singles, facts.Detectors["lonely"] = append(facts.Singles, "c"), "c"
	facts.AcceptedAt = time.Date(2026, 3, 28, 20, 0, 0, 0, zone(t, "Europe/Berlin")) // clocks are set forward in this night
	files, err := filepath.Glob("../../testdata/recipe-bad/*.yaml")
	if err != nil || len(files) < 30 {
		t.Fatalf("%d bad files, %v; want the folder", len(files), err)
	}
	for _, file := range files {
		name := filepath.Base(file)
		t.Run(strings.TrimSuffix(name, ".yaml"), func(t *testing.T) {
			text, err := strict.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			body, want, _ := strings.Cut(string(text), mark)
			r, err := Parse(name, []byte(body))
			if err == nil {
				_, err = r.Plan(facts)
			}
			if err == nil {
				t.Fatal("accepted; want it refused")
			}
			got := "# " + strings.ReplaceAll(err.Error(), "\n", "\n# ") + "\n"
			if *update {
				if err := os.WriteFile(file, []byte(body+mark+got), 0o644); err != nil {
					t.Fatal(err)
				}
				return
			}
			if got != want {
				t.Errorf("found\n%swant\n%s", got, want)
			}
		})
	}
}
