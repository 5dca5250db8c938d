//go:build unix

package main

import (
	"encoding/json"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"reflect"
	"regexp"
	"strings"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"gemel/protocol"
)

// The daemon makes a forecast while a run goes on, and it is the one that the command makes.
func TestADaemonForecastsWhileARunGoesOn(t *testing.T) {
	q := newQueueing(t)
	defer quit(t, q.daemon)
	q.start("long", "1 h")
	text, err := os.ReadFile("../../configs/demo-recipe.yaml")
	if err != nil {
		t.Fatal(err)
	}
	cl := q.client()
	defer cl.Close()
	remote, err := cl.Forecast(within(t), protocol.ForecastRequest{Recipe: string(text), Aim: "1 %", Who: "a test"})
	if err != nil || remote.Schema != protocol.ForecastSchema {
		t.Fatalf("answered %.80q, %v", remote.Sentence, err)
	}
	var local protocol.Forecast
	args := []string{"--bench", filepath.Join(q.dir, "quick-bench.yaml"), "--recipe", "../../configs/demo-recipe.yaml", "--aim", "1 %"}
	if err := json.Unmarshal([]byte(must(t, append([]string{"forecast", "--json"}, args...)...)), &local); err != nil {
		t.Fatal(err)
	}
	conforms(t, "forecast", must(t, append([]string{"forecast", "--json"}, args...)...))
	if len(remote.PointList) != 65 || remote.Duration != local.Duration || *remote.Uncertainty != *local.Uncertainty || remote.Aim == nil || !remote.Aim.Reachable {
		t.Errorf("the daemon says %q with %d points and %+v; the command %q", remote.Sentence, len(remote.PointList), remote.Aim, local.Sentence)
	}
	picture := filepath.Join(q.dir, "night.svg")
	said := must(t, append([]string{"forecast", "--plot", picture}, args...)...)
	drawn, err := os.ReadFile(picture)
	if err != nil || !strings.Contains(string(drawn), "65 points twice") || !strings.HasPrefix(said, "65 points twice") {
		t.Errorf("the picture has %d bytes, %v; the text begins %.80q", len(drawn), err, said)
	}
}

// conforms holds what was printed against the written contract.
func conforms(t *testing.T, name, body string) {
	t.Helper()
	text, err := fs.ReadFile(protocol.Contract(), "schemas/"+name+".json")
	if err != nil {
		t.Fatal(err)
	}
	read := func(text string) any {
		v, err := jsonschema.UnmarshalJSON(strings.NewReader(text))
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	c := jsonschema.NewCompiler()
	if err := c.AddResource(name, read(string(text))); err != nil {
		t.Fatal(err)
	}
	schema, err := c.Compile(name)
	if err != nil {
		t.Fatal(err)
	}
	if err := schema.Validate(read(body)); err != nil {
		t.Errorf("%s: %v", name, err)
	}
}

func TestForecastsThatAreAskedWrongly(t *testing.T) {
	args := []string{"forecast", "--bench", "../../configs/demo-bench.yaml", "--recipe", "../../configs/demo-recipe.yaml"}
	for _, c := range []struct{ name, flag, value, want string }{
		{"an aim without a unit", "--aim", "0.5", `aim "0.5"`},
		{"a run without its data", "--from", "r1", "want --data with the folder of a run"},
		{"an aim of another kind", "--aim", "0.5 deg", `want a share such as "0.5 %"`},
		{"a picture that is none", "--plot", filepath.Join(t.TempDir(), "x.png"), "want a name that ends in .svg"},
		{"a picture in no folder", "--plot", filepath.Join(t.TempDir(), "none", "x.svg"), "no folder"},
		{"a folder without a logbook", "--data", t.TempDir(), "want --data with the folder of a run"},
	} {
		if _, said, code := gemel(t, append(args, c.flag, c.value)...); code != exitWrongUse || !strings.Contains(said, c.want) {
			t.Errorf("%s: exit %d, %q; want %d and %q", c.name, code, said, exitWrongUse, c.want)
		}
	}
}

// Findings come as JSON where JSON was asked for, as check gives them.
func TestAForecastOfABadRecipeGivesItsFindingsAsJSON(t *testing.T) {
	bad := filepath.Join(t.TempDir(), "bad.yaml")
	if err := os.WriteFile(bad, []byte("title: 5\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	args := []string{"--json", "--bench", "../../configs/demo-bench.yaml", "--recipe", bad}
	said, _, code := gemel(t, append([]string{"forecast"}, args...)...)
	checked, _, want := gemel(t, append([]string{"check"}, args...)...)
	var forecast, check struct{ Findings []protocol.Finding }
	if err := errors.Join(json.Unmarshal([]byte(said), &forecast), json.Unmarshal([]byte(checked), &check)); err != nil {
		t.Fatal(err)
	}
	if code != want || len(forecast.Findings) == 0 || !reflect.DeepEqual(forecast.Findings, check.Findings) {
		t.Errorf("exit %d, %q; check says exit %d, %q", code, said, want, checked)
	}
}

// What the README shows is what the program says, but for the clock.
func TestTheReadmesForecastIsATrueOne(t *testing.T) {
	readme, err := os.ReadFile("../../README.md")
	if err != nil {
		t.Fatal(err)
	}
	said := must(t, "forecast", "--bench", "../../configs/demo-bench.yaml", "--recipe", "../../configs/demo-recipe.yaml", "--aim", "0.7 %")
	clock := regexp.MustCompile(`done at [0-9:]+`)
	shown := clock.ReplaceAllString(string(readme), "done at")
	lines := 0
	for line := range strings.SplitSeq(clock.ReplaceAllString(said, "done at"), "\n") {
		if strings.Contains(line, "from counting") || strings.Contains(line, "floor") || strings.HasPrefix(line, "  each ") || strings.HasPrefix(line, "65 points") || strings.Contains(line, "about ") || strings.Contains(line, "the run then takes") {
			lines++
			if !strings.Contains(shown, line+"\n") {
				t.Errorf("the README does not show %q", line)
			}
		}
	}
	if lines < 7 {
		t.Errorf("%d lines compared of\n%s", lines, said)
	}
}
