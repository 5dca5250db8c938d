package bench

import (
	"errors"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"maps"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan/recipe"
)

// The tests of this file hold README's reference and the two readers together: each example is put
// into a sound file and read, each key that a reader knows has a row and each row a key that a reader
// knows, what the reader says is allowed stands in the row, and each key that is refused is listed.

const readme = "../../README.md"

// table is one table of the reference.
type table struct {
	docs   []string       // the sound files that the examples go into, and
	places []string       // where in them; one file and place must take an example
	nodes  *regexp.Regexp // all places in the files that the table's keys belong to
}

func at(docs, nodes string, places ...string) table {
	return table{docs: strings.Split(docs, ", "), places: places, nodes: regexp.MustCompile("^(" + nodes + ")$")}
}

// tables are those of the reference, by their headings.
func tables() map[string]table {
	return map[string]table{
		"The blocks":                   at("bench, simulated", "", ""),
		"`lines.NAME`":                 at("bench", `lines\.\w+`, "lines.a", "lines.tcp"),
		"Every instrument":             at("bench", `(controllers|counters|protectors|sensors|settings)\.\w+|shutter`, "counters.counter"),
		"`controllers.NAME`":           at("bench", `controllers\.\w+`, "controllers.own"),
		"`axes.NAME`":                  at("bench", `axes\.\w+`, "axes.pump_waveplate", "axes.signal_arm"),
		"`keep_out.NAME`":              at("bench", `keep_out\.\w+`, "keep_out.new"),
		"`counters.NAME`":              at("bench", `counters\.\w+`, "counters.counter"),
		"`detectors.NAME`":             at("bench", `detectors\.\w+`, "detectors.signal"),
		"`shutter`, `protectors.NAME`": at("bench", `shutter|protectors\.\w+`, "shutter"),
		"`sensors.NAME`":               at("bench", `sensors\.\w+`, "sensors.pump_power"),
		"`settings.NAME`":              at("bench", `settings\.\w+`, "settings.delay"),
		"`optics`":                     at("bench", `optics`, "optics"),
		"`arms.signal`, `arms.idler`":  at("bench", `arms\.\w+`, "arms.signal"),
		"`simulation`":                 at("simulated", `simulation`, "simulation"),
		"Dialect `scpi`":               at("bench", `counters\.counter|shutter|protectors\.signal_shield|sensors\.pump_power|settings\.(delay|oven|bias)`, "counters.counter"),
		"`scpi` counters":              at("bench", `counters\.counter`, "counters.counter"),
		"`scpi` shutters":              at("bench", `shutter|protectors\.signal_shield`, "shutter"),
		"`scpi` sensors":               at("bench", `sensors\.pump_power`, "sensors.pump_power"),
		"`scpi` settings":              at("bench", `settings\.(delay|oven|bias)`, "settings.delay"),
		"Dialect `custom`":             at("bench", `\w+\.own\w*`, "controllers.own", "settings.own_power"),
		"`custom` controllers":         at("bench", `controllers\.own`, "controllers.own"),
		"`custom` counters":            at("own counter", `counters\.own_counter`, "counters.own_counter"),
		"`custom` shutters":            at("bench", `protectors\.own_shield`, "protectors.own_shield"),
		"`custom` sensors":             at("bench", `sensors\.own_meter`, "sensors.own_meter"),
		"`custom` settings":            at("bench", `settings\.own_power`, "settings.own_power"),
		"Dialect `gcode`":              at("bench", `controllers\.rotary`, "controllers.rotary"),
		"A recipe":                     at("recipe, swept", "", ""),
		"`sweep[]`":                    at("recipe", `sweep\[\]`, "sweep[]"),
		"`dwell`":                      at("recipe", `dwell`, "dwell"),
		"`repeat`":                     at("recipe", `repeat`, "repeat"),
		"`dark`, `background`":         at("recipe", `dark|background`, "dark", "background"),
		"`background`":                 at("recipe", `background`, "background"),
		"`reference`":                  at("swept", `reference`, "reference"),
		"`refine`":                     at("swept", `refine`, "refine"),
		"`guards[]`":                   at("recipe, swept", `guards\[\]`, "guards[]"),
		"`schedule`":                   at("recipe", `schedule`, "schedule"),
		"`trouble`":                    at("recipe", `trouble`, "trouble"),
		"`result`":                     at("swept, stepped", `result`, "result"),
	}
}

// sound is what the examples are put into.
type sound struct {
	files map[string]*node
	facts recipe.Facts // of the file "bench", for recipes
}

func soundFiles(t *testing.T) sound {
	t.Helper()
	const ours = `{bench: {name: skerry},
lines: {a: {device: /dev/a}, b: {device: /dev/b}, c: {device: /dev/c}, d: {device: /dev/d}, e: {device: /dev/e}, f: {device: /dev/f}, g: {device: /dev/g}, h: {device: /dev/h}, tcp: {device: "tcp://192.0.2.17:5025"}},
controllers: {
 rotary: {line: a, dialect: gcode, motion: together, ack: ok, asks: {where: {send: W, match: "A(?P<A>[-0-9.]+) B(?P<B>[-0-9.]+) C(?P<C>[-0-9.]+)"}, at_rest: {send: R, match: S, otherwise: M}, stop: {bytes: '\x18'}}},
 own: {line: b, dialect: custom, motion: each, asks: {where: {send: "P{address}", match: "P(?P<angle>-?[0-9.]+)"}, move: {send: "M{address} {angle}", match: OK}, at_rest: {send: "S{address}", match: IDLE, otherwise: BUSY}, stop: {bytes: '\x18'}, home: {send: H, match: OK}, mark: {send: "R{address}", match: OK}}}},
axes: {
 signal_arm: {role: signal_arm, controller: rotary, letter: A, limits: [-1 deg, 12 deg], speed: 6 deg/s, acceleration: 30 deg/s2, tolerance: 0.002 deg, position_from: encoder},
 idler_arm: {role: idler_arm, controller: rotary, letter: B, limits: [-1 deg, 12 deg], speed: 6 deg/s, acceleration: 30 deg/s2, tolerance: 0.002 deg, position_from: encoder},
 crystal_tilt: {role: crystal_tilt, controller: rotary, letter: C, limits: [-4 deg, 4 deg], speed: 2 deg/s, acceleration: 10 deg/s2, tolerance: 0.002 deg, position_from: encoder},
 pump_waveplate: {role: pump_waveplate, controller: own, address: "1", limits: [-10 deg, 100 deg], speed: 20 deg/s, acceleration: 80 deg/s2, tolerance: 0.01 deg, park: 0 deg, position_from: encoder}},
counters: {counter: {line: tcp, dialect: scpi, channels: [signal, idler, pairs, gates], coincidences: {pairs: [signal, idler]}, logic: every_pair, latched: true, window: {full: 4 ns}, gate: [1 ms, 1000 s]}},
detectors: {signal: {channel: signal, protect: {by: signal_shield}}, idler: {channel: idler, protect: {by: own_shield}}},
shutter: {line: c, dialect: scpi, settle_open: 60 ms, settle_closed: 60 ms},
protectors: {signal_shield: {line: d, dialect: scpi, settle_open: 40 ms, settle_closed: 40 ms},
 own_shield: {line: e, dialect: custom, settle_open: 40 ms, settle_closed: 40 ms, asks: {set: {send: "B {value}", match: OK}, get: {send: "B?", match: "B=(?P<value>[01])"}}}},
sensors: {pump_power: {line: f, dialect: scpi, kind: power, unit: mW},
 own_meter: {line: e, dialect: custom, kind: temperature, unit: Cel, asks: {get: {send: "T?", match: "T=(?P<value>[0-9.]+)"}}}},
settings: {delay: {line: g, dialect: scpi, unit: ns, limits: [0 ns, 50 ns], tolerance: 0.1 ns, headers: {set: ":SOUR:DEL {value}", get: ":SOUR:DEL?"}},
 own_power: {line: h, dialect: custom, unit: mW, limits: [0 mW, 50 mW], tolerance: 0.1 mW, asks: {set: {send: "L {value}", match: OK}, get: {send: "L?", match: "L=(?P<value>[0-9.]+)"}}}},
optics: {crystal: bbo-kato-1986, process: e-oo, cut: 29.2 deg, thickness: 2 mm, azimuth: 90 deg, pump: {wavelength: 405 nm, waist: 300 um, power: 45 mW}, pairs_per_mw: 420 Hz},
arms: {signal: {detector: signal, aperture: {kind: gaussian, radius: 1.2 mm}, distance: 500 mm, filter: {centre: 810 nm, width: 10 nm, shape: gaussian}},
 idler: {detector: idler, aperture: {kind: iris, radius: 3 mm}, distance: 500 mm, filter: {centre: 810 nm, width: 40 nm, shape: flat}}}}`
	bench := grow(t, ours)
	counter := grow(t, ours)
	counter.at("counters").keys = map[string]*node{"own_counter": grow(t, `{line: tcp, dialect: custom, channels: [signal, idler, pairs, gates], coincidences: {pairs: [signal, idler]}, logic: every_pair, latched: true, window: {full: 4 ns}, gate: [1 ms, 1000 s],
 asks: {arm: {send: "G {gate}", match: GO}, counts: {send: "C?", match: "(?P<signal>[0-9]+),(?P<idler>[0-9]+),(?P<pairs>[0-9]+),(?P<gates>[0-9]+)"}, stop: {send: X}}}`)}
	simulated := grow(t, ours)
	for block, name := range map[string]string{"protectors": "own_shield", "sensors": "own_meter", "settings": "own_power"} {
		delete(simulated.at(block).keys, name)
	}
	for _, line := range []string{"e", "h"} {
		delete(simulated.at("lines").keys, line)
	}
	for _, l := range simulated.at("lines").keys {
		l.keys["device"] = &node{text: "simulated"}
	}
	delete(simulated.at("detectors.idler").keys, "protect")
	simulated.merge(grow(t, `{simulation: {seed: 1, truth: {signal: {efficiency: 60 %}, idler: {efficiency: 55 %}}},
lines: {oven: {device: simulated}, bias: {device: simulated}},
settings: {delay: {is: delay, answer_unit: s},
 oven: {line: oven, dialect: scpi, is: crystal_temperature, unit: Cel, limits: [15 Cel, 60 Cel], tolerance: 0.1 K, headers: {set: ":SOUR:TEMP {value}", get: ":SOUR:TEMP?"}},
 bias: {line: bias, dialect: scpi, is: idler_bias, unit: V, nominal: 41 V, per_volt: 3 %, limits: [30 V, 45 V], tolerance: 0.1 V, headers: {set: ":SOUR:VOLT {value}", get: ":SOUR:VOLT?"}}}}`))
	files := map[string]*node{
		"bench": bench, "own counter": counter, "simulated": simulated,
		"recipe": grow(t, `{title: Both arms, sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: 2.864 deg}], dwell: 5 s}`),
		// For results, whose arms must be swept.
		"swept": grow(t, `{title: Both arms, sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: 2.864 deg}, {axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}], dwell: 5 s, dark: {dwell: 5 s, also: [end]}, reference: {axes: [idler_arm], on: [top], every: 30 min, dwell: 5 s}}`),
		"stepped": grow(t, `{title: All of them, sweep: [{axis: crystal_tilt, at: [0 deg, 1 deg]}, {setting: delay, from: 0 ns, to: 4 ns, step: 1 ns},
 {axis: signal_arm, at: [-0.9 deg, -0.8 deg, -0.7 deg, -0.6 deg, 0.6 deg, 0.7 deg, 0.8 deg, 0.9 deg]}, {axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}], dwell: 5 s, dark: {dwell: 5 s, also: [end]}}`),
	}
	f, err := Parse("", []byte(bench.String()))
	if err != nil {
		t.Fatal(err)
	}
	facts := f.Facts()
	facts.AcceptedAt = time.Date(2031, 2, 3, 18, 0, 0, 0, time.UTC)
	return sound{files, facts}
}

// read reads a file of one kind and returns all findings.
func (s sound) read(t *testing.T, doc string, n *node) []protocol.Finding {
	t.Helper()
	var err error
	if doc == "recipe" || doc == "swept" || doc == "stepped" {
		var r *recipe.Recipe
		if r, err = recipe.Parse("recipe.yaml", []byte(n.String())); err == nil {
			_, err = r.Plan(s.facts)
		}
	} else {
		_, err = Parse("", []byte(n.String()))
	}
	if e, ok := errors.AsType[*strict.Error](err); ok {
		return e.Findings
	}
	if err != nil {
		t.Fatalf("%v\n%s", err, n)
	}
	return nil
}

// row is one row of a table: | `key` | means | allowed | `example` |.
type row struct {
	heading, key, means, allowed, example string
	line                                  int
}

// rows reads README's reference, and the keys that it says are refused: | `key` | why | `example` |.
func rows(t *testing.T) (known, refused []row) {
	t.Helper()
	text, err := os.ReadFile(readme)
	if err != nil {
		t.Fatal(err)
	}
	heading, inside := "", false
	for i, line := range strings.Split(string(text), "\n") {
		switch {
		case strings.HasPrefix(line, "## "):
			inside = line == "## Reference"
		case strings.HasPrefix(line, "###"):
			heading = strings.TrimLeft(line, "# ")
		case inside && strings.HasPrefix(line, "| `"):
			cells := strings.Split(strings.ReplaceAll(strings.Trim(line, "| "), `\|`, "\x00"), " | ")
			for k := range cells {
				cells[k] = strings.ReplaceAll(strings.TrimSpace(cells[k]), "\x00", "|")
			}
			code := func(s string) string { return strings.Trim(s, "`") }
			switch {
			case heading == "What is refused" && len(cells) == 3:
				refused = append(refused, row{heading, code(cells[0]), cells[1], "", code(cells[2]), i + 1})
			case len(cells) == 4:
				known = append(known, row{heading, code(cells[0]), cells[1], cells[2], code(cells[3]), i + 1})
			default:
				t.Errorf("README.md:%d: %d cells under %q; want key, means, allowed and example", i+1, len(cells), heading)
			}
		}
	}
	if len(known) < 150 || len(refused) < 15 {
		t.Fatalf("%d keys and %d refused ones in README; want the reference", len(known), len(refused))
	}
	return known, refused
}

// examples puts each row's example into its place and hands over the file with the place's path.
func examples(t *testing.T, each func(r row, tab table, doc, place string, file *node)) {
	t.Helper()
	known, _ := rows(t)
	all := tables()
	s := soundFiles(t)
	for doc, file := range s.files {
		if found := s.read(t, doc, file); len(found) > 0 {
			t.Fatalf("the sound file %q has findings: %v", doc, found)
		}
	}
	for _, r := range known {
		tab, ok := all[r.heading]
		if !ok {
			t.Errorf("README.md:%d: the heading %q is none of this test's; want it in tables()", r.line, r.heading)
			continue
		}
		var complaints []protocol.Finding
		taken := false
		for _, doc := range tab.docs {
			for _, place := range tab.places {
				if taken {
					break
				}
				file := s.files[doc].clone()
				file.put(place, example(t, r.example))
				found := s.read(t, doc, file)
				complaints = append(complaints, found...)
				if taken = len(found) == 0; taken {
					each(r, tab, doc, place, file)
				}
			}
		}
		if !taken {
			t.Errorf("README.md:%d: `%s` is refused: %v", r.line, r.example, complaints)
		}
	}
}

func TestEveryExampleInTheReferenceIsTakenAndHasItsKey(t *testing.T) {
	examples(t, func(r row, _ table, _, _ string, _ *node) {
		var paths []string
		whole := example(t, r.example)
		whole.walk("", func(path string, n *node) {
			for key := range n.keys {
				paths = append(paths, below(general(path), key))
			}
		})
		if !slices.Contains(paths, r.key) {
			t.Errorf("README.md:%d: the example of `%s` has only %v; want the key itself in it", r.line, r.key, paths)
		}
	})
}

// stranger is a key that no reader knows, and near to none that one does.
const stranger = "qqqqqqqqqqqqqqqqqqqqqqqqqqqqqqqq"

func TestTheReferenceHasTheKeysOfTheReadersAndNoOthers(t *testing.T) {
	all := tables()
	readersKnow := map[string]map[string]bool{} // by doc and node
	s := soundFiles(t)
	ask := func(doc, path string, file *node) {
		file = file.clone()
		file.at(path).keys[stranger] = &node{text: "1"}
		at := index.ReplaceAllString(general(path), "[]")
		for _, f := range s.read(t, doc, file) {
			if f.Found != "an unknown key" || !strings.HasSuffix(f.Key, stranger) {
				continue // a name of the user's own choice, where the place has such
			}
			if readersKnow[at] == nil {
				readersKnow[at] = map[string]bool{}
			}
			for key := range strings.SplitSeq(strings.TrimPrefix(f.Want, "one of "), ", ") {
				readersKnow[at][strings.Trim(key, `"`)] = true
			}
		}
	}
	for doc, file := range s.files {
		file.walk("", func(path string, n *node) {
			if n.keys != nil {
				ask(doc, path, file)
			}
		})
	}
	examples(t, func(r row, _ table, doc, place string, file *node) {
		place = newest(place, file)
		example(t, r.example).walk(place, func(path string, n *node) {
			if n.keys != nil {
				ask(doc, path, file)
			}
		})
	})

	known, _ := rows(t)
	described := func(node, key string) *row {
		for i, r := range known {
			tab := all[r.heading]
			for cut := 0; cut <= len(node); cut++ {
				if cut != 0 && cut != len(node) && node[cut] != '.' {
					continue
				}
				if tab.nodes != nil && tab.nodes.MatchString(node[:cut]) && r.key == below(strings.TrimPrefix(node[cut:], "."), key) {
					return &known[i]
				}
			}
		}
		return nil
	}
	met := map[int]bool{}
	constants := map[string]bool{"value": true, "u": true, "from": true}
	for _, node := range slices.Sorted(maps.Keys(readersKnow)) {
		if maps.Equal(readersKnow[node], constants) {
			continue // said once for all constants, and held by the test of what is allowed
		}
		for key := range readersKnow[node] {
			if r := described(node, key); r != nil {
				met[r.line] = true
			} else {
				t.Errorf("README.md: no row for the key %q of %q, which the reader knows", key, node)
			}
		}
		for _, r := range known {
			if tab := all[r.heading]; tab.nodes != nil && tab.nodes.MatchString(node) && !strings.ContainsAny(r.key, ".[") && !readersKnow[node][r.key] {
				t.Errorf("README.md:%d: `%s` under %s; no reader knows it in %q", r.line, r.key, r.heading, node)
			}
		}
	}
	for _, r := range known {
		if !met[r.line] {
			t.Errorf("README.md:%d: `%s` under %s, which no reader knows", r.line, r.key, r.heading)
		}
	}
}

// extent is how package strict says what numbers it takes, numeric how a value with or without a unit is
// written.
var (
	extent  = regexp.MustCompile(`^(a whole number from |a number from )?(\S+( \S+)? to \S+( \S+)?)$`)
	numeric = regexp.MustCompile(`^(-?[0-9][0-9.e+-]*)( [A-Za-z%/0-9]+)?$`)
)

// allowed asks a reader what it takes for one value, by giving it what nobody would. It is empty where
// the reader takes more than could be listed.
func (s sound) allowed(t *testing.T, doc, path string, file *node) string {
	value := file.at(path)
	probes := []string{stranger}
	if m := numeric.FindStringSubmatch(value.text); m != nil {
		probes = nil
		for _, n := range []string{"-99999999", "99999", "99999999", "99999999999999", "99999999999999999"} {
			probes = append(probes, n+m[2])
		}
	}
	for _, probe := range probes {
		file := file.clone()
		*file.at(path) = node{text: probe}
		for _, f := range s.read(t, doc, file) {
			if f.Key != path || strings.Trim(f.Found, `"`) != probe {
				continue
			}
			if m := extent.FindStringSubmatch(f.Want); m != nil {
				return m[2]
			}
			if list, ok := strings.CutPrefix(f.Want, "one of "); ok && !strings.HasPrefix(list, "the ") {
				return list
			}
			if f.Want == "true or false" {
				return f.Want
			}
			if only, err := strconv.Unquote(f.Want); err == nil {
				return only
			}
		}
	}
	return ""
}

func TestTheReferenceSaysWhatTheReadersAllow(t *testing.T) {
	s, checked := soundFiles(t), 0
	written := map[int]string{}
	examples(t, func(r row, _ table, doc, place string, file *node) {
		place = newest(place, file)
		path := "" // of the row's own value
		example(t, r.example).walk("", func(inExample string, n *node) {
			within, key := inExample[:max(strings.LastIndexByte(inExample, '.'), 0)], inExample[strings.LastIndexByte(inExample, '.')+1:]
			if path == "" && n.keys == nil && n.list == nil && below(general(within), key) == r.key {
				path = below(place, inExample)
			}
		})
		if path == "" {
			return // a block or a list
		}
		if want := s.allowed(t, doc, path, file); want != "" {
			checked++
			if rest, ok := strings.CutPrefix(r.allowed, want); !ok || rest != "" && !strings.ContainsAny(rest[:1], ",;") {
				written[r.line] = want
				if !*update {
					t.Errorf("README.md:%d: `%s` allows %q; the reader allows %q", r.line, r.key, r.allowed, want)
				}
			}
		}
		value := file.at(path)
		if !numeric.MatchString(value.text) {
			return
		}
		wrapped := file.clone()
		*wrapped.at(path) = *grow(t, fmt.Sprintf("{value: %s, u: %s, from: somewhere}", value.text, value.text))
		takes := len(s.read(t, doc, wrapped)) == 0
		if says := strings.Contains(r.means, "a constant"); says != takes {
			t.Errorf("README.md:%d: `%s` as {value, u, from}: taken: %v, called a constant: %v", r.line, r.key, takes, says)
		}
	})
	if checked < 100 {
		t.Errorf("%d rows compared; want the most part of the reference", checked)
	}
	if *update && len(written) > 0 {
		rewrite(t, written)
	}
}

// rewrite puts what the readers allow into README.
func rewrite(t *testing.T, allowed map[int]string) {
	text, err := os.ReadFile(readme)
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(string(text), "\n")
	for n, want := range allowed {
		cells := strings.Split(lines[n-1], " | ")
		cells[2] = want
		lines[n-1] = strings.Join(cells, " | ")
	}
	if err := os.WriteFile(readme, []byte(strings.Join(lines, "\n")), 0o644); err != nil {
		t.Fatal(err)
	}
}

func TestWhatTheReferenceCallsRefusedIsRefused(t *testing.T) {
	_, refused := rows(t)
	s := soundFiles(t)
	for _, r := range refused {
		doc, text := "bench", r.example
		if rest, ok := strings.CutPrefix(text, "recipe: "); ok {
			doc, text = "swept", rest
		}
		file := s.files[doc].clone()
		file.merge(example(t, text))
		found := s.read(t, doc, file)
		name := r.key[strings.LastIndexAny(r.key, ".]")+1:]
		said := slices.ContainsFunc(found, func(f protocol.Finding) bool {
			return strings.HasSuffix(f.Key, name) && f.Found != "an unknown key" && f.Found != "missing"
		})
		if !said {
			t.Errorf("README.md:%d: `%s` gives %v; want a refusal at %q", r.line, r.example, found, name)
		}
	}
}

// Keys that a reader refuses by name are in its source only, so that is where they are looked up.
func TestEveryKeyThatIsRefusedByNameIsInTheReference(t *testing.T) {
	known, refused := rows(t)
	listed := map[string]bool{}
	for _, r := range append(known, refused...) {
		listed[r.key[strings.LastIndexAny(r.key, ".]")+1:]] = true
	}
	n := 0
	for _, pattern := range []string{"*.go", "../../scan/recipe/*.go"} {
		sources, _ := filepath.Glob(pattern)
		for _, name := range sources {
			tree, err := parser.ParseFile(token.NewFileSet(), name, nil, 0)
			if err != nil {
				t.Fatal(err)
			}
			ast.Inspect(tree, func(x ast.Node) bool {
				call, ok := x.(*ast.CallExpr)
				if !ok {
					return true
				}
				method, ok := call.Fun.(*ast.SelectorExpr)
				skip := map[string]int{"Later": 0, "Refuse": 2}
				if !ok || method.Sel.Name != "Later" && method.Sel.Name != "Refuse" {
					return true
				}
				for _, arg := range call.Args[min(skip[method.Sel.Name], len(call.Args)):] {
					if key, ok := arg.(*ast.BasicLit); ok {
						n++
						if text, _ := strconv.Unquote(key.Value); !listed[text] {
							t.Errorf("%s refuses the key %q; README's reference does not say so", name, text)
						}
					}
				}
				return true
			})
		}
	}
	if n < 20 {
		t.Errorf("%d refused keys found in the readers; the search is broken", n)
	}
}

// node is a value of a file: keys, a list or one value as it is written.
type node struct {
	keys map[string]*node
	list []*node
	text string
}

// example reads an example, which is keys in braces, or one key without them.
func example(t *testing.T, text string) *node {
	t.Helper()
	if !strings.HasPrefix(text, "{") {
		text = "{" + text + "}"
	}
	return grow(t, text)
}

// grow reads YAML in its flow style, as far as the reference uses it.
func grow(t *testing.T, text string) *node {
	t.Helper()
	s := &flow{text: text}
	n := s.value()
	if s.space(); s.bad || s.text != "" {
		t.Fatalf("%q: cannot be read from %q on", text, s.text)
	}
	return n
}

type flow struct {
	text string
	bad  bool
}

func (s *flow) space() { s.text = strings.TrimLeft(s.text, " \n") }

func (s *flow) eat(c byte) bool {
	s.space()
	if s.text == "" || s.text[0] != c {
		return false
	}
	s.text = s.text[1:]
	return true
}

func (s *flow) value() *node {
	switch {
	case s.eat('{'):
		n := &node{keys: map[string]*node{}}
		for !s.bad && !s.eat('}') {
			s.space()
			key, rest, ok := strings.Cut(s.text, ":")
			s.bad = s.bad || !ok || key == "" || n.keys[key] != nil
			s.text = rest
			n.keys[key] = s.value()
			s.eat(',')
		}
		return n
	case s.eat('['):
		n := &node{list: []*node{}}
		for !s.bad && !s.eat(']') {
			n.list = append(n.list, s.value())
			s.eat(',')
		}
		return n
	}
	s.space()
	word := regexp.MustCompile(`^("([^"\\]|\\.)*"|'[^']*'|[^,\[\]{}"'\n][^,\[\]{}\n]*)`).FindString(s.text)
	s.bad = s.bad || word == ""
	s.text = s.text[len(word):]
	return &node{text: strings.TrimSpace(word)}
}

func (n *node) String() string {
	var parts []string
	switch {
	case n.keys != nil:
		for _, key := range slices.Sorted(maps.Keys(n.keys)) {
			parts = append(parts, key+": "+n.keys[key].String())
		}
		return "{" + strings.Join(parts, ", ") + "}"
	case n.list != nil:
		for _, item := range n.list {
			parts = append(parts, item.String())
		}
		return "[" + strings.Join(parts, ", ") + "]"
	}
	return n.text
}

func (n *node) clone() *node {
	c := &node{text: n.text}
	if n.keys != nil {
		c.keys = map[string]*node{}
		for key, v := range n.keys {
			c.keys[key] = v.clone()
		}
	}
	if n.list != nil {
		c.list = []*node{}
		for _, v := range n.list {
			c.list = append(c.list, v.clone())
		}
	}
	return c
}

// merge lays other over the node: keys by name, all else as a whole.
func (n *node) merge(other *node) {
	for key, v := range other.keys {
		if mine := n.keys[key]; mine != nil && mine.keys != nil && v.keys != nil {
			mine.merge(v)
		} else {
			n.keys[key] = v
		}
	}
}

// put merges an example into a place, or adds it to a list.
func (n *node) put(place string, example *node) {
	if list, ok := strings.CutSuffix(place, "[]"); ok {
		if n.keys[list] == nil {
			n.keys[list] = &node{list: []*node{}}
		}
		n.keys[list].list = append(n.keys[list].list, example)
		return
	}
	if block, name, below := strings.Cut(place, "."); below && n.at(place) == nil {
		n.put(block, &node{keys: map[string]*node{name: example}})
		return
	}
	if here := n.at(place); here == nil || here.keys == nil {
		n.keys[place] = example // all such places are blocks at the top
		return
	}
	n.at(place).merge(example)
}

// newest turns "sweep[]" into the place of the list's last item.
func newest(place string, file *node) string {
	if list, ok := strings.CutSuffix(place, "[]"); ok {
		return fmt.Sprintf("%s[%d]", list, len(file.at(list).list)-1)
	}
	return place
}

// at finds a node by its path, such as "sweep[1].step"; nil when there is none.
func (n *node) at(path string) *node {
	for part := range strings.FieldsFuncSeq(path, func(c rune) bool { return c == '.' || c == '[' || c == ']' }) {
		i, err := strconv.Atoi(part)
		switch {
		case n == nil:
			return nil
		case err == nil && i < len(n.list):
			n = n.list[i]
		default:
			n = n.keys[part]
		}
	}
	return n
}

// walk calls do for the node and all below it.
func (n *node) walk(path string, do func(path string, n *node)) {
	do(path, n)
	for _, key := range slices.Sorted(maps.Keys(n.keys)) {
		n.keys[key].walk(below(path, key), do)
	}
	for i, item := range n.list {
		item.walk(fmt.Sprintf("%s[%d]", path, i), do)
	}
}

func below(path, key string) string {
	if path == "" {
		return key
	}
	return path + "." + key
}

var index = regexp.MustCompile(`\[[0-9]+\]`)

// general writes a path as the reference does, where keys are the same in several places.
func general(path string) string {
	path = index.ReplaceAllString(path, "[]")
	for _, c := range []struct{ from, to string }{
		{`(^|\.)truth\.(axes|settings)\.[^.]+$`, "${1}truth.$2.NAME"}, {`(^|\.)truth\.(signal|idler)$`, "${1}truth.ARM"},
		{`(^|\.)asks\.[^.]+$`, "${1}asks.QUESTION"}, {`(\.own\w*)\.start\[\]$`, "${1}.asks.QUESTION"},
		{`(^|\.)crystal\.n_[oe]$`, "${1}crystal.INDEX"}, {`^sweep\[\]\.with$`, "sweep[]"}, {`^result\[\]$`, "result"},
	} {
		path = regexp.MustCompile(c.from).ReplaceAllString(path, c.to)
	}
	return path
}
