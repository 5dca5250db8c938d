package main

import (
	"bytes"
	"encoding/json"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"
	"gopkg.in/yaml.v3"
	"pgregory.net/rapid"

	"gemel/daemon/bench"
	"gemel/scan/recipe"
)

// format is one of the two formats: its schema, its reader, its files.
type format struct {
	name   string
	schema *jsonschema.Schema
	parse  func([]byte) error
	good   []string // texts
}

// formats makes each schema once for all tests: it takes a while.
var formats = sync.OnceValues(func() (map[string]format, error) {
	all := map[string]format{
		"recipe": {parse: func(text []byte) error { _, err := recipe.Parse("f.yaml", text); return err }},
		"bench":  {parse: func(text []byte) error { _, err := bench.Parse("f.yaml", text); return err }},
	}
	for name, f := range all {
		f.name = name
		var b bytes.Buffer
		if err := printSchema(&b, name); err != nil {
			return nil, err
		}
		doc, err := jsonschema.UnmarshalJSON(&b)
		if err != nil {
			return nil, err
		}
		c := jsonschema.NewCompiler()
		if err := c.AddResource(name, doc); err != nil {
			return nil, err
		}
		if f.schema, err = c.Compile(name); err != nil {
			return nil, err
		}
		all[name] = f
	}
	files, err := filepath.Glob("../../configs/*.yaml")
	if err != nil {
		return nil, err
	}
	more, err := filepath.Glob("../../configs/recipes/*.yaml")
	if err != nil {
		return nil, err
	}
	for _, file := range append(files, more...) {
		text, err := os.ReadFile(file)
		if err != nil {
			return nil, err
		}
		name := "recipe"
		if strings.HasPrefix(string(text), "bench:") || strings.Contains(string(text), "\nbench:") {
			name = "bench"
		}
		f := all[name]
		f.good = append(f.good, string(text))
		all[name] = f
	}
	return all, nil
})

func formatOf(t interface{ Fatal(...any) }, name string) format {
	all, err := formats()
	if err != nil {
		t.Fatal(err)
	}
	return all[name]
}

// validate says what the schema finds, as an editor would: from the YAML alone.
func (f format) validate(text string) error {
	var n yaml.Node
	if err := yaml.Unmarshal([]byte(text), &n); err != nil {
		return err
	}
	if len(n.Content) == 0 {
		return f.schema.Validate(nil)
	}
	v, err := asJSON(n.Content[0])
	if err != nil {
		return err
	}
	return f.schema.Validate(v)
}

// asJSON is a YAML value as JSON has it. Keys are text, and of two alike the last one counts.
func asJSON(n *yaml.Node) (any, error) {
	switch n.Kind {
	case yaml.AliasNode:
		return asJSON(n.Alias)
	case yaml.MappingNode:
		m := map[string]any{}
		for i := 0; i+1 < len(n.Content); i += 2 {
			v, err := asJSON(n.Content[i+1])
			if err != nil {
				return nil, err
			}
			m[n.Content[i].Value] = v
		}
		return m, nil
	case yaml.SequenceNode:
		list := []any{}
		for _, item := range n.Content {
			v, err := asJSON(item)
			if err != nil {
				return nil, err
			}
			list = append(list, v)
		}
		return list, nil
	}
	switch n.Tag {
	case "!!null":
		return nil, nil
	case "!!bool":
		return strings.EqualFold(n.Value, "true"), nil
	case "!!int", "!!float":
		var x any
		if err := n.Decode(&x); err != nil {
			return nil, err
		}
		text, err := json.Marshal(x)
		if err != nil { // infinite, or no number
			return n.Value, nil
		}
		return json.Number(text), nil
	}
	return n.Value, nil
}

func TestEveryFileInConfigsIsValid(t *testing.T) {
	for name, least := range map[string]int{"bench": 2, "recipe": 3} {
		f := formatOf(t, name)
		if len(f.good) < least {
			t.Errorf("%d %s files in configs; want at least %d", len(f.good), name, least)
		}
		for _, text := range f.good {
			if err := f.parse([]byte(text)); err != nil {
				t.Errorf("%v", err)
			}
			if err := f.validate(text); err != nil {
				t.Errorf("%s\n%v", strings.SplitN(text, "\n", 2)[0], err)
			}
		}
	}
}

// onlyFound are the bad files that only the program can find, because the mistake lies between
// contents, in YAML's own spelling or in what the bench is.
func onlyFound() map[string][]string {
	return map[string][]string{
		"bench": {
			"arm-of-a-detector-that-is-not-there", "axis-of-a-controller-that-is-not-there", "axis-outside-the-standard-letters", "backlash-without-a-side",
			"channel-twice", "coincidence-of-channels-that-are-not-there", "controller-pattern-that-is-none", "controller-pattern-without-an-axis",
			"controller-without-axes", "counter-a-second-one", "crystal-of-its-own-with-a-pole-in-its-range", "detector-on-a-coincidence-channel",
			"detector-protected-by-nothing-there", "detector-with-dead-time-of-no-model", "detectors-on-one-channel", "gate-range-the-wrong-way-round",
			"gate-tag-of-no-channel", "glance-shorter-than-a-gate", "home-all-at-once-without-consent", "home-outside-its-limits",
			"home-together-though-it-need-not", "home-unattended-for-one-axis-of-two", "home-unattended-in-the-same-place",
			"home-unattended-without-a-question", "keep-out-about-an-axis-that-is-no-arm", "keep-out-of-an-arm-apart-from-itself",
			"keep-out-range-of-an-axis-that-is-not-there", "keep-out-range-the-wrong-way-round", "keep-out-that-a-search-could-enter",
			"keep-out-unless-a-shutter-that-is-not-there", "keep-out-where-the-bench-parks", "keep-out-wider-than-the-circle", "limits-the-wrong-way-round",
			"line-answers-longer-than-the-longest", "line-by-a-bare-name", "line-on-tcp-with-baud", "line-real-beside-simulated",
			"line-real-on-a-simulated-bench", "line-simulated-without-simulation", "line-that-is-not-there", "line-used-by-nothing", "line-with-two-baud-rates",
			"name-twice", "park-leaves-no-room-to-approach", "park-outside-its-limits", "protector-of-nothing", "pump-outside-the-crystal-data",
			"sense-is-zero", "sensor-measured-once", "setting-centre-of-no-delay", "setting-is-what-another-is", "setting-of-an-iris-that-is-a-fibre",
			"mark-of-no-axis", "setting-adds-without-a-lamp", "verify-home-finer-than-the-axis", "verify-home-without-a-place",
			"verify-home-without-a-question", "watch-of-a-light-that-never-trips", "watch-shorter-than-a-gate", "setting-slope-of-no-bias", "setting-stands-beyond-its-limits", "setting-tolerance-of-another-kind", "simulated-axis-without-acceleration", "simulated-bench-without-optics",
			"simulated-counter-that-speaks-custom", "simulated-instruments-on-one-line", "simulated-run-up-shorter-than-it-is",
			"simulated-setting-that-speaks-nanoseconds", "simulated-setting-that-starts-beyond-its-limits", "simulated-truth-of-another-setting",
			"simulated-truth-of-no-axis", "simulated-truth-of-no-setting", "two-axes-in-one-role", "two-axes-on-one-letter",
		},
		"recipe": {
			"axis-comes-twice", "axis-is-not-on-this-bench", "background-leaves-no-room-to-approach", "background-turns-a-swept-axis",
			"background-turns-an-axis-without-park", "background-turns-an-unknown-axis", "background-turns-beyond-a-soft-limit", "background-turns-by-nothing",
			"conjugate-is-beyond-a-soft-limit", "conjugate-map-of-single-counts", "conjugate-never-leaves-the-crystal", "conjugate-of-a-waveplate",
			"conjugate-of-an-arm-that-is-not-in-the-sweep", "conjugate-of-an-earlier-value-beyond-a-soft-limit",
			"conjugate-whose-step-does-not-divide-the-span", "conjugate-without-the-tilt", "conjugates-of-each-other", "dark-comes-more-often-than-it-lasts",
			"darks-and-backgrounds-take-all-the-time", "delay-of-single-counts", "delay-of-too-few-values", "drift-without-references",
			"earlier-delay-for-an-axis", "earlier-delay-of-another-setting", "earlier-peak-of-an-axis-that-is-not-there",
			"earlier-uncertainty-is-not-in-the-settings-unit", "earlier-value-is-beyond-a-soft-limit", "earlier-zero-of-a-tilt",
			"efficiencies-of-two-triggers-on-heralds", "efficiency-by-a-setting-that-is-not-swept", "efficiency-of-a-coincidence-channel",
			"efficiency-of-all-points-of-a-sweep", "efficiency-of-detectors-never-counted-together", "efficiency-of-its-own-trigger",
			"efficiency-without-background-and-dark", "gate-is-longer-than-the-counter-has", "guard-bounds-are-the-wrong-way-round",
			"guard-gives-up-without-holding", "guard-has-another-unit", "guard-of-the-rate-of-nobody", "guard-of-darks-that-are-not-counted",
			"guard-of-references-that-are-not-repeated", "guard-of-references-that-are-not-taken", "guard-watches-no-sensor", "heralds-in-one-slice",
			"heralds-of-a-coincidence-channel", "heralds-of-an-unknown-channel", "heralds-of-no-channel", "heralds-of-the-detector-under-test",
			"last-slice-is-shorter-than-the-counter-has", "lock-step-beyond-a-soft-limit", "lock-step-with-another-number-of-values",
			"one-range-has-a-thousand-million-steps", "peak-along-an-axis-that-stands-still", "peak-at-a-place-where-no-point-is", "peak-from-too-few-places",
			"peak-of-things-not-on-this-bench", "plateau-from-too-few-places", "plateau-has-no-width", "plateau-is-wider-than-the-sweep", "plateau-of-a-tilt",
			"plateau-of-an-axis-that-stands-still", "plateau-while-another-arm-moves", "points-are-a-thousand-million", "points-in-a-keep-out",
			"range-has-no-length", "reference-at-an-axis-that-no-point-brings-back", "reference-at-the-start-alone", "reference-beyond-a-soft-limit",
			"reference-bounds-are-zero", "reference-bounds-below-their-counting-error", "reference-comes-more-often-than-it-lasts", "reference-in-a-keep-out",
			"reference-of-a-centre-without-flanks", "reference-of-an-arm-that-no-point-brings-back", "reference-of-things-not-on-this-bench",
			"reference-on-one-flank", "reference-top-beside-its-flanks", "reference-while-a-setting-is-swept", "reference-while-the-tilt-is-swept",
			"reference-without-the-tilt", "refinement-along-an-axis-that-stands-still", "refinement-wider-than-the-limits",
			"refinement-with-fewer-points-than-its-grid", "schedule-begins-when-it-ends", "schedule-in-a-night-whose-hour-is-left-out", "second-document",
			"setting-has-another-unit", "setting-is-not-on-this-bench", "slice-is-longer-than-its-dwell", "slices-are-too-many", "span-is-negative",
			"step-does-not-divide-the-range", "step-is-negative", "step-is-zero", "target-is-beyond-a-soft-limit", "target-leaves-no-room-to-approach",
			"tuning-curve-against-an-arm", "tuning-curve-from-one-tilt", "units-of-a-grid-differ", "warm-up-of-another-kind", "warm-up-of-nothing",
			"ways-through-a-keep-out", "zero-from-one-side", "zero-of-a-conjugate",
		},
	}
}

func TestOnlyTheListedBadFilesAreValid(t *testing.T) {
	for name, listed := range onlyFound() {
		f := formatOf(t, name)
		files, err := filepath.Glob("../../testdata/" + name + "-bad/*.yaml")
		if err != nil || len(files) < 60 {
			t.Fatalf("%d bad %s files, %v; want the folder", len(files), name, err)
		}
		refused := 0
		for _, file := range files {
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			body, _, _ := strings.Cut(string(text), "# findings:\n")
			mistake := strings.TrimSuffix(filepath.Base(file), ".yaml")
			invalid, only := f.validate(body) != nil, slices.Contains(listed, mistake)
			switch {
			case invalid && only:
				t.Errorf("%s: not valid, and in the list of those that only the program can find; want it off the list", mistake)
			case !invalid && !only:
				t.Errorf("%s: valid; want it refused, or in the list of those that only the program can find", mistake)
			case invalid:
				refused++
			}
		}
		for _, mistake := range listed {
			if !slices.Contains(files, "../../testdata/"+name+"-bad/"+mistake+".yaml") {
				t.Errorf("%s: in the list, and no file", mistake)
			}
		}
		t.Logf("%s: the schema refuses %d of %d bad files, the program all", name, refused, len(files))
	}
}

// TestWhatTheReaderAcceptsIsValid changes good files at random. What is still accepted must be valid.
func TestWhatTheReaderAcceptsIsValid(t *testing.T) {
	for _, name := range []string{"recipe", "bench"} {
		f := formatOf(t, name)
		seeds := slices.Clone(f.good)
		files, err := filepath.Glob("../../testdata/" + name + "-bad/*.yaml")
		if err != nil {
			t.Fatal(err)
		}
		for _, file := range files {
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			seeds = append(seeds, string(text))
		}
		pool := gather(seeds)
		accepted, tried := 0, 0
		rapid.Check(t, func(t *rapid.T) {
			var n yaml.Node
			if err := yaml.Unmarshal([]byte(rapid.SampledFrom(f.good).Draw(t, "file")), &n); err != nil {
				t.Fatal(err)
			}
			for range rapid.IntRange(1, 2).Draw(t, "changes") {
				pool.change(t, n.Content[0])
			}
			text, err := yaml.Marshal(&n)
			if err != nil {
				t.Skip()
			}
			tried++
			if f.parse(text) != nil {
				return
			}
			accepted++
			if err := f.validate(string(text)); err != nil {
				t.Fatalf("accepted, but\n%v\n%s", err, text)
			}
		})
		if accepted == 0 && !testing.Short() { // of the twenty of the short form all may be refused
			t.Errorf("%s: none of %d changed files accepted; want some, or nothing is tested", name, tried)
		}
		t.Logf("%s: %d of %d changed files accepted, all valid", name, accepted, tried)
	}
}

// pool is what files are changed to: the values that any file has under a key, and the keys that
// stand together.
type pool struct {
	values map[string][]*yaml.Node
	keys   []string
}

func gather(texts []string) pool {
	p := pool{values: map[string][]*yaml.Node{}}
	var walk func(key string, n *yaml.Node)
	walk = func(key string, n *yaml.Node) {
		if key != "" {
			p.values[key] = append(p.values[key], n)
		}
		for i, sub := range n.Content {
			switch {
			case n.Kind != yaml.MappingNode:
				walk(key, sub)
			case i%2 == 1:
				walk(n.Content[i-1].Value, sub)
			}
		}
	}
	for _, text := range texts {
		var n yaml.Node
		if yaml.Unmarshal([]byte(text), &n) == nil && n.Kind != 0 {
			walk("", n.Content[0])
		}
	}
	p.keys = slices.Sorted(maps.Keys(p.values))
	return p
}

// change takes a key away, gives one, or puts another value under one, somewhere in a file.
func (p pool) change(t *rapid.T, root *yaml.Node) {
	var all []*yaml.Node
	var walk func(n *yaml.Node)
	walk = func(n *yaml.Node) {
		if n.Kind == yaml.MappingNode {
			all = append(all, n)
		}
		for _, sub := range n.Content {
			walk(sub)
		}
	}
	walk(root)
	m := rapid.SampledFrom(all).Draw(t, "where")
	at := 0
	if len(m.Content) > 0 {
		at = 2 * rapid.IntRange(0, len(m.Content)/2-1).Draw(t, "key")
	}
	what := rapid.IntRange(0, 3).Draw(t, "what")
	switch {
	case what == 0 && len(m.Content) > 0:
		m.Content = slices.Delete(slices.Clone(m.Content), at, at+2)
	case what == 1 || len(m.Content) == 0:
		key := rapid.SampledFrom(p.keys).Draw(t, "new")
		m.Content = append(slices.Clone(m.Content), &yaml.Node{Kind: yaml.ScalarNode, Value: key}, rapid.SampledFrom(p.values[key]).Draw(t, "value"))
	case what == 2:
		m.Content[at+1] = &yaml.Node{Kind: yaml.ScalarNode, Value: rapid.SampledFrom(odd).Draw(t, "odd value")}
	default:
		if values := p.values[m.Content[at].Value]; len(values) > 0 {
			m.Content[at+1] = rapid.SampledFrom(values).Draw(t, "value")
		}
	}
}

// odd are values that are near to what is written somewhere.
var odd = []string{"0", "1", "-1", "0.5", "1e3", "true", "false", "a", "1 s", "1.5 s", "+2 s", "-0 s", "1 min", "0 deg", "-0.5 deg", "5 mrad", "1e-3 deg", ".5 deg", "3. deg",
	"50 %", "50%", "0.5 %", "5 mW", "20 Cel", "293 K", "1 kHz", "405 nm", "10 points", "22:00", "signal_arm", "[]", "10 deg/s", "1 1", "12 /s"}
