//go:build unix

package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"gemel/protocol"
)

func TestCheckSaysWhatItChecked(t *testing.T) {
	out := must(t, "check", "--bench", "../../configs/demo-bench.yaml", "--recipe", "../../configs/demo-recipe.yaml")
	lines := strings.Split(strings.TrimSpace(out), "\n")
	if len(lines) != 2 || !strings.Contains(lines[0], "demo-bench.yaml: bench skerry") || !strings.HasSuffix(lines[0], "; sound.") ||
		!strings.Contains(lines[1], "demo-recipe.yaml: ") || !strings.HasSuffix(lines[1], "fits the bench.") {
		t.Errorf("said\n%s\nwant a line for each file, that it is sound and fits", out)
	}
}

// A bench that is sound is said to be so beside the findings of the recipe.
func TestCheckFindsAllAndSaysWhatIsSound(t *testing.T) {
	recipe := filepath.Join(t.TempDir(), "bad.yaml")
	if err := os.WriteFile(recipe, []byte("tytle: a\ndwell: 5\n"), 0o644); err != nil {
		t.Fatal(err)
	}
	args := []string{"check", "--bench", "../../configs/demo-bench.yaml", "--recipe", recipe}
	out, errOut, code := gemel(t, args...)
	if code != exitFailed || !strings.Contains(out, "bench skerry") || !strings.Contains(errOut, ":1:1: tytle: an unknown key") || !strings.Contains(errOut, "dwell: 5 has no unit") {
		t.Errorf("exit %d\n%s%s\nwant the sound bench on standard output, both findings on standard error", code, out, errOut)
	}
	out, _, code = gemel(t, append(args, "--json")...)
	var got struct {
		Sound    []string           `json:"sound"`
		Findings []protocol.Finding `json:"findings"`
	}
	if err := json.Unmarshal([]byte(out), &got); err != nil {
		t.Fatalf("%v\n%s", err, out)
	}
	if code != exitFailed || len(got.Sound) != 1 || len(got.Findings) != 3 || got.Findings[0].File != recipe {
		t.Errorf("exit %d, %+v; want one sound file and three findings in a list", code, got)
	}
}

func TestSchemasArePrintedAloneAndOfTheTwoFormats(t *testing.T) {
	for _, c := range []struct {
		args []string
		want string
	}{
		{[]string{"check", "--schema", "queue"}, "--schema queue; want recipe or bench"},
		{[]string{"check", "--schema", "recipe", "--json"}, "--schema beside other flags; want it alone"},
		{[]string{"check"}, "nothing to check; want --bench, --recipe or --data"},
	} {
		if out, errOut, code := gemel(t, c.args...); code != exitWrongUse || out != "" || !strings.Contains(errOut, c.want) {
			t.Errorf("%q: exit %d\n%s%s\nwant exit %d and %q", c.args, code, out, errOut, exitWrongUse, c.want)
		}
	}
	var schema map[string]any
	if err := json.Unmarshal([]byte(must(t, "check", "--schema", "recipe")), &schema); err != nil {
		t.Fatal(err)
	}
	if schema["$schema"] != "https://json-schema.org/draft/2020-12/schema" || schema["title"] != "gemel recipe" {
		t.Errorf("a schema %v called %v; want draft 2020-12, of recipes", schema["$schema"], schema["title"])
	}
}
