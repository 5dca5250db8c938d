package bench

import (
	"path/filepath"
	"strings"
	"testing"

	"gemel/scan/recipe"
)

func TestEveryFileInConfigsLoads(t *testing.T) {
	files, err := filepath.Glob("../../configs/*.yaml")
	if err != nil || len(files) < 3 {
		t.Fatalf("%v, %v; want the folder of configurations", files, err)
	}
	for _, path := range files {
		switch name := filepath.Base(path); {
		case strings.HasSuffix(name, "-bench.yaml"):
			if _, err := Load(path); err != nil {
				t.Error(err)
			}
		case strings.HasSuffix(name, "-recipe.yaml"):
			r, err := recipe.Load(path)
			if err != nil {
				t.Error(err)
				continue
			}
			for _, on := range []string{"demo", "lab"} {
				f, err := Load("../../configs/" + on + "-bench.yaml")
				if err != nil {
					continue // reported above
				}
				// A recipe for one bench alone names it in its comments.
				if _, only, named := strings.Cut(r.Text, "\n# bench: "); named && !strings.HasPrefix(only, on+"-bench.yaml\n") {
					continue
				}
				if _, err := r.Plan(f.Facts()); err != nil && (on == "demo" || name != "demo-recipe.yaml") {
					t.Errorf("on the %s bench: %v", on, err)
				}
			}
		default:
			t.Errorf("%s is neither a bench nor a recipe; want a name that says so", name)
		}
	}
}
