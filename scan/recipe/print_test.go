package recipe

import (
	"flag"
	"fmt"
	"math/big"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"gemel/protocol/strict"
)

func TestMain(m *testing.M) {
	flag.Set("rapid.seed", "20310203") // the same recipes every time; -rapid.seed overrides
	flag.Set("rapid.nofailfile", "true")
	flag.Parse()
	os.Exit(m.Run())
}

// differs says where two recipes are not the same, places in their files aside.
func differs(path string, a, b reflect.Value) string {
	if a.Type() != b.Type() {
		return path + ": " + a.Type().String() + " and " + b.Type().String()
	}
	if a.Type() == reflect.TypeFor[strict.Place]() {
		return ""
	}
	switch a.Kind() {
	case reflect.Pointer:
		if a.IsNil() || b.IsNil() {
			if a.IsNil() != b.IsNil() {
				return path + ": one is nil"
			}
			return ""
		}
		if a.Type() == reflect.TypeFor[*big.Rat]() {
			x, y := (*big.Rat)(a.UnsafePointer()), (*big.Rat)(b.UnsafePointer())
			if x.Cmp(y) != 0 {
				return fmt.Sprintf("%s: %s and %s", path, x, y)
			}
			return ""
		}
		return differs(path, a.Elem(), b.Elem())
	case reflect.Struct:
		for i := range a.NumField() {
			name := a.Type().Field(i).Name
			if path == "" && (name == "File" || name == "Text") {
				continue
			}
			if d := differs(path+"."+name, a.Field(i), b.Field(i)); d != "" {
				return d
			}
		}
		return ""
	case reflect.Slice:
		if a.Len() != b.Len() {
			return fmt.Sprintf("%s: %d and %d of them", path, a.Len(), b.Len())
		}
		for i := range a.Len() {
			if d := differs(fmt.Sprintf("%s[%d]", path, i), a.Index(i), b.Index(i)); d != "" {
				return d
			}
		}
		return ""
	}
	if !a.Equal(b) {
		return fmt.Sprintf("%s: %v and %v", path, a, b)
	}
	return ""
}

// printed reads a text, prints it and reads it again, and says what is wrong with that.
func printed(text string) (wrong string) {
	r, err := Parse("r.yaml", []byte(text))
	if err != nil {
		return "refused: " + err.Error()
	}
	out := r.Print()
	again, err := Parse("r.yaml", out)
	if err != nil {
		return fmt.Sprintf("printed as\n%swhich is refused: %v", out, err)
	}
	if d := differs("", reflect.ValueOf(*r), reflect.ValueOf(*again)); d != "" {
		return fmt.Sprintf("printed as\n%swhich is another recipe: %s", out, d)
	}
	if second := again.Print(); string(second) != string(out) {
		return fmt.Sprintf("printed as\n%sand then as\n%s", out, second)
	}
	return ""
}

func TestWhatIsPrintedReadsBackAsTheSame(t *testing.T) {
	covered := map[string]bool{}
	rapid.Check(t, func(t *rapid.T) {
		text := drawRecipe(t)
		if wrong := printed(text); wrong != "" {
			t.Fatalf("%s\nis %s", text, wrong)
		}
		for _, key := range everyKey {
			covered[key] = covered[key] || strings.Contains("\n"+text, "\n"+key+":") || strings.Contains(text, "{"+key+":") || strings.Contains(text, " "+key+":")
		}
	})
	for _, key := range everyKey {
		if !covered[key] {
			t.Errorf("no recipe with the key %q was drawn", key)
		}
	}
}

func TestTheRecipesThatComeWithTheProgramPrint(t *testing.T) {
	files, err := filepath.Glob("../../configs/*recipe*.yaml")
	more, _ := filepath.Glob("../../configs/recipes/*.yaml")
	if files = append(files, more...); err != nil || len(files) < 3 {
		t.Fatalf("%d recipes, %v; want those in configs", len(files), err)
	}
	for _, file := range files {
		text, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		if wrong := printed(string(text)); wrong != "" {
			t.Errorf("%s: %s", file, wrong)
		}
	}
}

// everyKey are the keys of a recipe, the levels they stand on aside.
var everyKey = strings.Fields(`title sweep order dwell repeat dark background reference refine guards trouble schedule result
	axis setting at from to step around span conjugate_of with peak zero delay not_older_than u_below otherwise
	time slice heralds at_most of times as every also turn by axes on flank bounds singles ratio centre
	along within watch rate dark_rate reference_age give_up_after retries then warm_up steady not_before finish_by
	kind trigger under_test use plateau_of half_width points against profile power`)

// drawer writes recipes that are sound in themselves, in all the ways there are.
type drawer struct{ *rapid.T }

func (d drawer) one(name string, words ...string) string {
	return rapid.SampledFrom(words).Draw(d.T, name)
}

func (d drawer) yes(name string) bool { return rapid.Bool().Draw(d.T, name) }

func (d drawer) int(name string, low, high int) int {
	return rapid.IntRange(low, high).Draw(d.T, name)
}

// maybe writes a field, or nothing.
func (d drawer) maybe(key, value string) string {
	if d.yes(key) {
		return key + ": " + value
	}
	return ""
}

func (d drawer) decimal(name string, low, high int) string {
	s := fmt.Sprint(d.int(name, low, high))
	if n := d.int(name+" decimals", 0, 9); n > 0 {
		s += "." + fmt.Sprintf("%09d", d.int(name+" fraction", 0, 999_999_999))[:n]
	}
	return s + d.one(name+" exponent", "", "", "", "e0", "e-1", "e+0")
}

func (d drawer) angle(name string) string {
	return d.decimal(name, -9, 9) + " " + d.one(name+" unit", "deg", "deg", "arcmin", "arcsec", "mrad")
}

// above is an angle above zero.
func (d drawer) above(name string) string {
	return fmt.Sprintf("%d.%d %s", d.int(name, 0, 20), d.int(name+" fraction", 1, 9999), d.one(name+" unit", "deg", "arcmin", "arcsec"))
}

func (d drawer) long(name string) string {
	return fmt.Sprintf("%d %s", d.int(name, 1, 20), d.one(name+" unit", "min", "h"))
}

func (d drawer) title(name string) string {
	return d.one(name, `"Both arms: once"`, `Both arms`, `"say \"so\" \\ now"`, `'it''s # one'`, `"Ångström, 810 nm"`, `"\u2028 and \u00a0"`, `"true"`)
}

// grid is a step and what it makes of a range: text of the first value, the last, the width, the step.
func (d drawer) grid(name, unit string) (first, last, width, step string, n int) {
	per := d.int(name+" step", 1, 5000)
	n = d.int(name+" steps", 1, 60)
	from := d.int(name+" from", -200_000, 200_000)
	write := func(x int) string { return fmt.Sprintf("%s %s", big.NewRat(int64(x), 10_000).FloatString(4), unit) }
	return write(from), write(from + n*per), write(n * per), write(per), n + 1
}

// list writes n values.
func (d drawer) list(name string, n int, value func(string) string) string {
	all := make([]string, n)
	for i := range all {
		all[i] = value(name)
	}
	if n == 1 && d.yes(name+" alone") {
		return all[0]
	}
	return "[" + strings.Join(all, ", ") + "]"
}

// values writes an entry's values, n of them, or as many as come where n is 0.
func (d drawer) values(name string, setting bool, n int) (text string, count int) {
	units := []string{"deg", "arcmin", "arcsec", "mrad"}
	value := d.angle
	if setting {
		units = []string{"ns", "ps", "mW", "Cel", "K"}
		value = func(name string) string { return d.decimal(name, -9, 9) + " " + d.one(name+" unit", units...) }
	}
	first, last, width, step, count := d.grid(name, d.one(name+" grid", units...))
	earlier := fields("delay: "+name, "from: "+d.title(name+" from"), d.maybe("not_older_than", d.long(name)), d.maybe("u_below", "0.02 ns"), d.maybe("otherwise", d.one("otherwise", "hold", "stop")))
	if !setting {
		earlier = fields(d.one("kind", "peak", "zero")+": "+name, "from: "+d.title(name+" from"), d.maybe("not_older_than", d.long(name)), d.maybe("u_below", d.above(name)), d.maybe("otherwise", d.one("otherwise", "hold", "stop")))
	}
	way := d.int(name+" way", 0, 5)
	switch {
	case n > 0 || way == 0:
		if n == 0 {
			n = d.int(name+" listed", 1, 5)
		}
		return "at: " + d.list(name, n, value), n
	case way == 1:
		return "at: " + earlier, 1
	case way == 2:
		return "around: " + earlier + ", span: " + width + ", step: " + step, count
	case way == 3:
		return "from: " + last + ", to: " + first + ", step: " + step, count
	case way == 4:
		return "around: " + first + ", span: " + width + ", step: " + step, count
	}
	return "from: " + first + ", to: " + last + ", step: " + step, count
}

func (d drawer) sweep() string {
	names := rapid.Permutation([]string{"axis: signal_arm", "axis: crystal_tilt", "setting: delay", "setting: oven", "axis: yes_arm", "axis: plate"}).Draw(d.T, "names")
	var entries []string
	for _, name := range names[:d.int("entries", 0, 3)] {
		_, bare, _ := strings.Cut(name, ": ")
		text, n := d.values(bare, strings.HasPrefix(name, "setting"), 0)
		with := ""
		if n <= 5 && len(entries) == 0 && d.yes("with") {
			other := d.one("beside", "axis: beside", "setting: beside")
			its, _ := d.values("beside", strings.HasPrefix(other, "setting"), n)
			with = "with: " + fields(other, its)
		}
		entries = append(entries, fields(name, text, with))
	}
	if len(entries) > 0 && d.yes("conjugate") {
		_, _, width, step, _ := d.grid("conjugate", d.one("conjugate unit", "deg", "mrad"))
		grid := ""
		if d.yes("spread") {
			grid = "span: " + width + ", step: " + step
		}
		entries = append(entries, fields("axis: idler_arm", "conjugate_of: signal_arm", grid))
	}
	if len(entries) == 0 {
		return ""
	}
	return "sweep: [" + strings.Join(entries, ", ") + "]"
}

// dwell writes a dwell that is no longer than 20 s, and needs none of the heralds' where times alone do.
func (d drawer) dwell(name string, heralds bool) string {
	time := fmt.Sprintf("%d s", d.int(name, 6, 20))
	slice := d.one(name+" slice", "1 s", "2.5 s", "250 ms", "1500000 us", "1000000001 ns")
	switch way := d.int(name+" way", 0, 3); {
	case way == 0:
		return time
	case way == 1:
		return fields("time: " + time)
	case way == 2 && heralds:
		return fields(fmt.Sprintf("heralds: %d", d.int("heralds", 1, 1_000_000)), d.maybe("of", d.one("of", "signal", "a")), "at_most: "+time, "slice: "+slice)
	}
	return fields("time: "+time, "slice: "+slice)
}

func (d drawer) cadence(name string) string {
	every := "every: " + d.one(name+" every", "30 min", "1 h", "1 point", "20 points", "100.5 s")
	also := "also: " + d.one(name+" also", "[end]", "[start, end]", "[end, start]")
	switch d.int(name+" when", 0, 2) {
	case 0:
		return every
	case 1:
		return also
	}
	return every + ", " + also
}

func (d drawer) at() string {
	if !d.yes("standing") {
		return ""
	}
	return "at: " + fields("signal_arm: "+d.angle("standing"), d.maybe("plate", d.angle("standing")))
}

func (d drawer) reference() string {
	on := d.one("on", "", "on: [top]", "on: [low_flank, top, high_flank]", "on: [top, high_flank, low_flank]")
	centre := ""
	if on != "on: [top]" {
		centre = d.maybe("centre", d.above("centre"))
	}
	bounds := fields(d.maybe("singles", d.one("singles", "3 %", "0.03", "1234.5 ppm")), d.maybe("ratio", d.one("ratio", "1 %", "0.1")), centre)
	if bounds == "{}" {
		bounds = ""
	} else {
		bounds = "bounds: " + bounds + ", otherwise: " + d.one("otherwise", "note", "hold", "stop")
	}
	return "reference: " + fields("axes: "+d.one("axes", "[signal_arm]", "[idler_arm, signal_arm]"), on, d.maybe("of", "ab"), d.at(), d.maybe("flank", d.above("flank")),
		d.maybe("dwell", d.dwell("reference", false)), "every: "+d.one("every", "30 min", "20 points"), d.maybe("also", "[end]"), bounds)
}

func (d drawer) refine() string {
	_, _, width, step, n := d.grid("refine", d.one("refine unit", "deg", "arcmin", "mrad"))
	how := "around: maximum, span: " + width + ", step: " + step
	if d.yes("below") {
		how = "u_below: " + d.above("below")
	}
	return "refine: " + fields("along: idler_arm", "of: "+d.one("of", "ab", "idler"), how, fmt.Sprintf("at_most: %d points", d.int("at most", n, 100)), d.maybe("within", d.long("within")))
}

func (d drawer) guards(dark, reference bool) string {
	all := []string{"watch: pump_power, within: [45 mW, 0.055 W]", "rate: signal, within: [1 kHz, 80000 /s]", "watch: crystal_temperature, within: [292.15 K, 21.5 Cel]"}
	if dark {
		all = append(all, "dark_rate: b, within: [0 Hz, 500 Hz]")
	}
	if reference {
		all = append(all, "reference_age: 2 h")
	}
	chosen := rapid.Permutation(all).Draw(d.T, "guards")[:d.int("guards", 1, len(all))]
	for i, g := range chosen {
		otherwise := d.one("otherwise", "", "otherwise: hold, give_up_after: 30 min", "otherwise: stop")
		chosen[i] = fields(g, otherwise)
	}
	return "guards: [" + strings.Join(chosen, ", ") + "]"
}

func (d drawer) schedule() string {
	warm := "warm_up: " + fields("steady: "+fields("pump_power: "+d.one("steady", "0.5 % over 10 min", "0.5% over 90 s", "1.25 mW over 600 s"), d.maybe("oven", "0.1 Cel over 1 h")), "at_most: 2 h")
	switch d.int("schedule", 0, 3) {
	case 0:
		return "schedule: " + fields(warm)
	case 1:
		return `schedule: {not_before: "22:00", ` + d.maybe("finish_by", `06:30`) + "}"
	}
	return "schedule: " + fields(warm, d.maybe("not_before", "22:00"), `finish_by: "06:30"`)
}

func (d drawer) result(dimmed, reference bool) string {
	use := d.one("use", "points: all", "plateau_of: idler_arm, half_width: 0.1 deg", "half_width: 6 arcmin, plateau_of: idler_arm")
	all := []string{
		fields("kind: peak", "of: ab", "along: idler_arm", d.maybe("profile", d.one("profile", "sinc2", "flat_top")), d.maybe("power", "pump_power"), d.at()),
		fields("kind: zero", "of: a", "along: signal_arm", d.at()),
		"{kind: tuning_curve, of: ab, along: idler_arm, against: crystal_tilt}",
		"{kind: conjugate_map, of: ab, along: idler_arm, against: signal_arm}",
		"{kind: delay, of: ab, setting: delay}",
	}
	if dimmed {
		all = append(all, fields("kind: efficiency", "trigger: signal", "under_test: b", d.maybe("by", "oven"), "use: "+fields(use, d.at())))
	}
	if reference {
		all = append(all, "{kind: drift}")
	}
	chosen := rapid.Permutation(all).Draw(d.T, "results")[:d.int("results", 1, len(all))]
	if len(chosen) == 1 && d.yes("one alone") {
		return "result: " + chosen[0]
	}
	return "result: [" + strings.Join(chosen, ", ") + "]"
}

func drawRecipe(t *rapid.T) string {
	d := drawer{t}
	lines := []string{"title: " + d.title("title"), d.sweep(), d.maybe("order", d.one("order", "ascending", "serpentine", "shuffled")), "dwell: " + d.dwell("dwell", true)}
	if d.yes("repeat") {
		lines = append(lines, "repeat: "+fields(fmt.Sprintf("times: %d", d.int("times", 1, 3)), d.maybe("as", d.one("as", "passes", "in_place"))))
	}
	dark, background, reference := d.yes("dark"), d.yes("background"), d.yes("reference")
	if dark {
		lines = append(lines, "dark: "+fields("dwell: "+d.dwell("dark", false), d.cadence("dark")))
	}
	if background {
		lines = append(lines, "background: "+fields("turn: plate", "by: "+d.above("by"), "dwell: "+d.dwell("background", false), d.cadence("background")))
	}
	if reference {
		lines = append(lines, d.reference())
	}
	if d.yes("refine") {
		lines = append(lines, d.refine())
	}
	if d.yes("guards") {
		lines = append(lines, d.guards(dark, reference))
	}
	if d.yes("trouble") {
		lines = append(lines, "trouble: "+fields(d.maybe("retries", "0"), d.maybe("then", d.one("then", "hold", "skip", "stop")), d.maybe("give_up_after", d.long("give up"))))
	}
	if d.yes("schedule") {
		lines = append(lines, d.schedule())
	}
	if d.yes("result") {
		lines = append(lines, d.result(dark || background, reference))
	}
	var b strings.Builder
	for _, l := range lines {
		if l != "" {
			b.WriteString(l + "\n")
		}
	}
	return b.String()
}
