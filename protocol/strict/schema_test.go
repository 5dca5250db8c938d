package strict

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"regexp"
	"strings"
	"testing"
	"time"

	"github.com/santhosh-tekuri/jsonschema/v6"
	"gopkg.in/yaml.v3"
	"pgregory.net/rapid"

	"gemel/protocol/unit"
)

func compile(t interface{ Fatal(...any) }, read func(*Doc)) *jsonschema.Schema {
	text, err := Describe("a format", read)
	if err != nil {
		t.Fatal(err)
	}
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(text))
	if err != nil {
		t.Fatal(err)
	}
	c := jsonschema.NewCompiler()
	if err := c.AddResource("format", doc); err != nil {
		t.Fatal(err)
	}
	s, err := c.Compile("format")
	if err != nil {
		t.Fatal(err, string(text))
	}
	return s
}

// validate takes a text as JSON.
func validate(s *jsonschema.Schema, text string) error {
	var n yaml.Node
	if err := yaml.Unmarshal([]byte(text), &n); err != nil {
		return err
	}
	return s.Validate(asJSON(n.Content[0]))
}

var points = regexp.MustCompile(`^([1-9][0-9]{0,5}) points?$`)

// choosy walks an invented format in which keys depend on one another in all the ways that Describe
// understands.
func choosy(d *Doc) {
	m := d.Root()
	m.Need("title").Text()
	kind := m.Need("kind")
	switch kind.Choice([]string{"plain", "deep", "odd", "later"}) {
	case "plain":
		m.Need("size").Int(1, 3)
	case "deep":
		k := m.Need("more").Map()
		k.Need("share").Quantity(unit.Share, 0, 1)
		k.Opt("dead_time").Measured(unit.Time, 0, 1)
		k.Done()
	case "odd":
		k := m.Need("more").Map()
		k.Need("angle").Angle(0, unit.Turn)
		k.Done()
	default:
		kind.Fail("later", "not yet")
	}
	at, from, to := m.Opt("at"), m.Opt("from"), m.Opt("to")
	switch {
	case at.Given() && (from.Given() || to.Given()):
		m.Fail("two ways", "one")
	case at.IsList():
		for _, item := range at.List(1, 3) {
			item.Duration(0, time.Hour)
		}
	case at.Given():
		at.Duration(0, time.Hour)
	case from.Given() || to.Given():
		m.Need("from").Duration(0, time.Minute)
		m.Need("to").Duration(0, time.Minute)
	default:
		m.Fail("no way", "one")
	}
	if m.Opt("play").Angle(0, unit.Degree) > 0 && !m.Opt("side").Given() {
		m.Need("side")
	}
	m.Opt("side").Choice([]string{"left", "right"})
	if on := m.Opt("on"); !on.Bool(true) {
		on.Fail("off", "true, or no such key")
	}
	every := m.Opt("every")
	if every.Text(); every.Match(points) == nil {
		every.Duration(time.Second, time.Hour)
	}
	for _, e := range m.Opt("things").Map().Entries() {
		k := e.Value.Map()
		name, kind := k.Need("unit").Unit()
		if ends := k.Need("limits").List(2, 2); len(ends) == 2 && name != "" {
			low, high := ends[0].Quantity(kind, -1e9, 1e9), ends[1].Quantity(kind, -1e9, 1e9)
			if low >= high {
				ends[1].Failf("more than the first")
			}
		}
		k.Opt("speed").AnglePer("/s", 1, unit.Turn)
		k.Opt("drift").Difference(unit.Temperature, 0, math.Inf(1))
		k.Refuse("gated", "free", "gated")
		k.Done()
	}
	m.Opt("wire").Wire()
	m.Opt("name").Token()
	m.Opt("any").Any()
	m.Opt("ratio").Number(-1, 1)
	m.Later("soon")
	m.Done()
}

func TestTheSchemaAgreesWithTheReader(t *testing.T) {
	s := compile(t, choosy)
	const plain = "title: a\nkind: plain\nsize: 1\nat: 1 s\n"
	for _, c := range []struct{ name, text string }{
		{"the least that is accepted", plain},
		{"a list where one value could stand", "title: a\nkind: plain\nsize: 1\nat: [1 s, 2 s]\n"},
		{"the other keys of another word", "title: a\nkind: deep\nmore: {share: 65 %, dead_time: {value: 4 ns, u: 1 ns, from: b}}\nat: 1 s\n"},
		{"a share as a plain number", "title: a\nkind: deep\nmore: {share: 0.65}\nat: 1 s\n"},
		{"a constant without uncertainty", "title: a\nkind: deep\nmore: {share: 65%, dead_time: 4 ns}\nat: 1 s\n"},
		{"keys of the same name, by another word", "title: a\nkind: odd\nmore: {angle: 1 deg}\nat: 1 s\n"},
		{"values given in another way", "title: a\nkind: plain\nsize: 1\nfrom: 0 s\nto: 1 s\n"},
		{"zero where a minus is refused", plain + "play: -0 deg\n"},
		{"a key that another number would need", plain + "play: 0 deg\n"},
		{"that key", plain + "play: 1 deg\nside: left\n"},
		{"a pattern", plain + "every: 20 points\n"},
		{"what is read where the pattern does not match", plain + "every: 20 s\n"},
		{"the unit of a share as a number", plain + "things: {a: {unit: 1, limits: [0, 1]}}\n"},
		{"limits in the unit's kind", plain + "things: {a: {unit: mW, limits: [0 mW, 1 W]}, b: {unit: s, limits: [-1 s, 1 h], speed: 4 deg/s, drift: 0.2 K}}\n"},
		{"everything free at once", plain + "on: true\nwire: \"\"\nname: a-b\nany: 5 mA\nratio: -0.5\n"},
	} {
		t.Run("accepts "+c.name, func(t *testing.T) {
			if err := read1(c.text, choosy); err != nil {
				t.Fatal(err)
			}
			if err := validate(s, c.text); err != nil {
				t.Errorf("%v", err)
			}
		})
	}
	for _, c := range []struct{ name, text string }{
		{"a missing key", "kind: plain\nsize: 1\nat: 1 s\n"},
		{"an unknown key", plain + "tytle: b\n"},
		{"a key that comes later", plain + "soon: 1\n"},
		{"a word that is refused", "title: a\nkind: later\nat: 1 s\n"},
		{"a word that there is not", "title: a\nkind: none\nat: 1 s\n"},
		{"the keys of another word", "title: a\nkind: plain\nsize: 1\nmore: {angle: 1 deg}\nat: 1 s\n"},
		{"inner keys of another word", "title: a\nkind: deep\nmore: {angle: 1 deg}\nat: 1 s\n"},
		{"a word without its keys", "title: a\nkind: deep\nat: 1 s\n"},
		{"values given in two ways", plain + "from: 0 s\nto: 1 s\n"},
		{"values given in no way", "title: a\nkind: plain\nsize: 1\n"},
		{"half of a way", "title: a\nkind: plain\nsize: 1\nfrom: 0 s\n"},
		{"a number without unit", "title: a\nkind: plain\nsize: 1\nat: 1\n"},
		{"a unit of another kind", "title: a\nkind: plain\nsize: 1\nat: 1 deg\n"},
		{"a unit without its blank", "title: a\nkind: plain\nsize: 1\nat: 1s\n"},
		{"a list that is too long", "title: a\nkind: plain\nsize: 1\nat: [1 s, 2 s, 3 s, 4 s]\n"},
		{"an empty list", "title: a\nkind: plain\nsize: 1\nat: []\n"},
		{"a whole number that is too great", "title: a\nkind: plain\nsize: 4\nat: 1 s\n"},
		{"less than zero", plain + "play: -1 deg\n"},
		{"false where it is refused", plain + "on: false\n"},
		{"neither pattern nor time", plain + "every: 20 pints\n"},
		{"limits of another kind than their unit", plain + "things: {a: {unit: mW, limits: [0 s, 1 s]}}\n"},
		{"a limit too few", plain + "things: {a: {unit: mW, limits: [0 mW]}}\n"},
		{"a name that is none", plain + "things: {a.b: {unit: mW, limits: [0 mW, 1 mW]}}\n"},
		{"a refused key below", plain + "things: {a: {unit: mW, limits: [0 mW, 1 mW], gated: 1}}\n"},
		{"a speed in degrees", plain + "things: {a: {unit: mW, limits: [0 mW, 1 mW], speed: 4 deg}}\n"},
		{"a difference that is no temperature", plain + "things: {a: {unit: mW, limits: [0 mW, 1 mW], drift: 4 s}}\n"},
		{"a value that is empty", plain + "name:\n"},
		{"one value for keys", "title: a\nkind: deep\nmore: 4\nat: 1 s\n"},
		{"a list for keys", "title: a\nkind: deep\nmore: []\nat: 1 s\n"},
	} {
		t.Run("refuses "+c.name, func(t *testing.T) {
			if read1(c.text, choosy) == nil {
				t.Fatal("the reader accepts it; want a case that it refuses")
			}
			if validate(s, c.text) == nil {
				t.Error("valid; want it refused")
			}
		})
	}
}

func read1(text string, read func(*Doc)) error {
	d := Parse("f.yaml", []byte(text))
	read(d)
	return d.Err()
}

func TestAFormatThatCannotBeDescribedIsAnError(t *testing.T) {
	for name, read := range map[string]func(*Doc){
		"a reader that panics": func(d *Doc) { panic("for no reason") },
		"one that never ends": func(d *Doc) {
			for {
				d.Root().Opt("a").Given()
				d.Root().Opt("a")
			}
		},
		"one that refuses all": func(d *Doc) { d.Root().Fail("anything", "nothing") },
		"one of very many ways": func(d *Doc) {
			m := d.Root()
			n := 0
			for i := range 40 {
				if m.Opt(fmt.Sprint("k", i)).Given() {
					n++
				}
			}
			m.Need(fmt.Sprint("n", n))
		},
	} {
		if _, err := Describe(name, read); err == nil || !strings.HasPrefix(err.Error(), fmt.Sprintf("strict: the format %q cannot be described: ", name)) {
			t.Errorf("%s: %v; want an error that names the format", name, err)
		}
	}
}

// rule is one line of a random format: what it reads of a key, under which condition.
type rule struct {
	Key, Other string
	What       int
	When       int // 0: always, 1: if the other key is there, 2: if it is not, 3: if it has the word "b"
	Need       bool
	Sub        []rule
}

const whats = 9

func (r rule) read(m Map) {
	switch other := m.Opt(r.Other); r.When {
	case 1:
		if !other.Given() {
			return
		}
	case 2:
		if m.Has(r.Other) {
			return
		}
	case 3:
		if other.IsMap() || other.IsList() || other.Choice([]string{"a", "b"}, "") != "b" {
			return
		}
	}
	v := m.Opt(r.Key)
	if r.Need {
		v = m.Need(r.Key)
	}
	switch r.What {
	case 0:
		v.Int(0, 5)
	case 1:
		v.Choice([]string{"a", "b"})
	case 2:
		readRules(v.Map(), r.Sub)
	case 3:
		if v.IsMap() {
			readRules(v.Map(), r.Sub)
		} else {
			v.Duration(0, time.Hour)
		}
	case 4:
		for _, item := range v.List(1, 2) {
			item.Bool()
		}
	case 5:
		if v.Given() && m.Has(r.Other) {
			m.Fail(r.Key+" with "+r.Other, "one of them")
		}
	case 6:
		if !v.Given() && !m.Opt(r.Other).Given() {
			m.Fail("neither", "one of them")
		}
	case 7:
		if v.Int(-2, 2) > 0 {
			m.Need(r.Other)
		}
	case 8:
		m.Refuse("refused", "another", r.Key)
	}
}

func readRules(m Map, rules []rule) {
	for _, r := range rules {
		r.read(m)
	}
	m.Done()
}

var names = []string{"k", "l", "m", "n"}

func drawRules(t *rapid.T, depth int) []rule {
	rules := make([]rule, rapid.IntRange(1, 4).Draw(t, "rules"))
	for i := range rules {
		rules[i] = rule{Key: rapid.SampledFrom(names).Draw(t, "key"), Other: rapid.SampledFrom(names).Draw(t, "other"), What: rapid.IntRange(0, whats-1).Draw(t, "what"),
			When: rapid.IntRange(0, 3).Draw(t, "when"), Need: rapid.Bool().Draw(t, "need")}
		if what := rules[i].What; depth > 0 && (what == 2 || what == 3) {
			rules[i].Sub = drawRules(t, depth-1)
		}
	}
	return rules
}

func drawDoc(t *rapid.T, depth int) string {
	var b strings.Builder
	b.WriteString("{")
	for _, name := range names {
		if !rapid.Bool().Draw(t, name) {
			continue
		}
		value := rapid.SampledFrom([]string{"0", "1", "2", "a", "b", "1 s", "[true]", "[]", "{}", "{*}"}).Draw(t, "value of "+name)
		if value == "{*}" {
			value = "{}"
			if depth > 0 {
				value = drawDoc(t, depth-1)
			}
		}
		b.WriteString(name + ": " + value + ", ")
	}
	b.WriteString("}")
	return b.String()
}

// TestNoSchemaIsNarrowerThanItsReader draws formats and files.
func TestNoSchemaIsNarrowerThanItsReader(t *testing.T) {
	accepted, refused, tried := 0, 0, 0
	rapid.Check(t, func(t *rapid.T) {
		rules := drawRules(t, 1)
		read := func(d *Doc) { readRules(d.Root(), rules) }
		if text, err := Describe("drawn", read); err != nil {
			if strings.HasSuffix(err.Error(), "all ways to write it are refused") {
				t.Skip(err)
			}
			t.Fatal(err, string(text))
		}
		s := compile(t, read)
		for range 30 {
			text := drawDoc(t, 1)
			tried++
			switch ok, err := read1(text, read) == nil, validate(s, text); {
			case ok && err != nil:
				t.Fatalf("accepted, but %v\n%s\n%+v", err, text, rules)
			case ok:
				accepted++
			case err != nil:
				refused++
			}
		}
	})
	t.Logf("of %d files %d are accepted by reader and schema, %d refused by both", tried, accepted, refused)
	if refused*2 < tried-accepted {
		t.Errorf("of %d refused files the schema refuses %d; want most", tried-accepted, refused)
	}
}

func TestEveryQuantityMatchesItsPattern(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		kind := rapid.SampledFrom(unit.Kinds()).Draw(t, "kind")
		text := rapid.SampledFrom([]string{"", " ", "\t"}).Draw(t, "before") + rapid.StringMatching(`[+-]?[0-9]{0,3}\.?[0-9]{0,3}(e[+-]?[0-9]{1,2})?`).Draw(t, "number") +
			rapid.SampledFrom([]string{" ", "  ", " \n", ""}).Draw(t, "between") + rapid.SampledFrom(unit.Units(kind)).Draw(t, "unit") + rapid.SampledFrom([]string{"", "\n"}).Draw(t, "after")
		x, err := unit.Parse(text, kind)
		matches := regexp.MustCompile("^" + unit.Pattern(kind, true) + "$").MatchString(text)
		if matches != (err == nil) {
			t.Fatalf("%q is %g, %v; the pattern matches: %v", text, x, err, matches)
		}
		if err == nil && x >= 0 && kind != unit.Temperature && !regexp.MustCompile("^"+unit.Pattern(kind, false)+"$").MatchString(text) {
			t.Fatalf("%q is %g, and does not match the pattern for what is not below zero", text, x)
		}
		if any := regexp.MustCompile("^" + unit.Pattern("", true) + "$").MatchString(text); any != matches {
			t.Fatalf("%q matches the pattern of all kinds: %v; want %v", text, any, matches)
		}
	})
}

// FuzzSchema holds that no file is accepted by the reader and refused by its schema.
func FuzzSchema(f *testing.F) {
	s := compile(f, choosy)
	for _, text := range []string{
		"title: a\nkind: plain\nsize: 1\nat: 1 s\n", "title: a\nkind: deep\nmore: {share: 65 %, dead_time: {value: 4 ns, u: 1 ns, from: b}}\nat: [1 s]\nevery: 3 points\n",
		"title: a\nkind: odd\nmore: {angle: -1e-30 deg}\nfrom: .5 s\nto: +1. s\nthings: {true: {unit: '%', limits: [1 ppm, 2 1]}}\n",
		"title: |\n  a\nkind: 'plain'\nsize: 0\nplay: 1 mrad\nside: left\non: true\nwire: \"\\x00\"\nany: 293 K\nratio: 1e-3\n",
	} {
		f.Add(text)
	}
	f.Fuzz(func(t *testing.T, text string) {
		if read1(text, choosy) != nil {
			return
		}
		var n yaml.Node
		if err := yaml.Unmarshal([]byte(text), &n); err != nil {
			t.Fatal(err)
		}
		if err := s.Validate(asJSON(n.Content[0])); err != nil {
			t.Errorf("accepted, but %v\n%s", err, text)
		}
	})
}

// asJSON is what a YAML reader gives a validator; keys are text.
func asJSON(n *yaml.Node) any {
	switch n.Kind {
	case yaml.MappingNode:
		m := map[string]any{}
		for i := 0; i+1 < len(n.Content); i += 2 {
			m[n.Content[i].Value] = asJSON(n.Content[i+1])
		}
		return m
	case yaml.SequenceNode:
		list := []any{}
		for _, item := range n.Content {
			list = append(list, asJSON(item))
		}
		return list
	}
	var v any
	if err := n.Decode(&v); err != nil {
		return n.Value
	}
	switch x := v.(type) {
	case bool:
		return x
	case nil:
		return nil
	case int, float64:
		return json.Number(fmt.Sprint(x))
	}
	return n.Value
}
