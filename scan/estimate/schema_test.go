package estimate

import (
	"bytes"
	"encoding/json"
	"io/fs"
	"math/rand/v2"
	"reflect"
	"slices"
	"strings"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"gemel/protocol"
)

func resultSchema(t *testing.T) map[string]any {
	t.Helper()
	text, err := fs.ReadFile(protocol.Contract(), "schemas/result.json")
	if err != nil {
		t.Fatal(err)
	}
	var d map[string]any
	if err := json.Unmarshal(text, &d); err != nil {
		t.Fatal(err)
	}
	return d
}

// typed lists the JSON paths of a type, lists as "[]"; a result inside a result is not looked into.
func typed(t reflect.Type, at string) []string {
	for t.Kind() == reflect.Pointer {
		t = t.Elem()
	}
	if t.Implements(reflect.TypeFor[json.Marshaler]()) || reflect.PointerTo(t).Implements(reflect.TypeFor[json.Marshaler]()) || t == reflect.TypeFor[Result]() && at != "" {
		return nil
	}
	switch t.Kind() {
	case reflect.Slice:
		return typed(t.Elem(), at+"[]")
	case reflect.Struct:
		var list []string
		for f := range t.Fields() {
			name, _, _ := strings.Cut(f.Tag.Get("json"), ",")
			switch {
			case !f.IsExported():
				continue
			case f.Anonymous && name == "":
				list = append(list, typed(f.Type, at)...)
				continue
			}
			list = append(list, at+"."+name)
			list = append(list, typed(f.Type, at+"."+name)...)
		}
		return list
	}
	return nil
}

func written(schema map[string]any, at string) []string {
	var list []string
	if items, ok := schema["items"].(map[string]any); ok {
		list = append(list, written(items, at+"[]")...)
	}
	properties, _ := schema["properties"].(map[string]any)
	for name, p := range properties {
		list = append(list, at+"."+name)
		list = append(list, written(p.(map[string]any), at+"."+name)...)
	}
	return list
}

func TestTheResultsSchemaDescribesEveryKey(t *testing.T) {
	head := []string{".schema", ".bench", ".run", ".sequence", ".at"}
	got, want := written(resultSchema(t), ""), typed(reflect.TypeFor[Result](), "")
	got = slices.DeleteFunc(got, func(s string) bool { return slices.Contains(head, s) && !slices.Contains(want, s) })
	slices.Sort(got)
	slices.Sort(want)
	for _, s := range got {
		if !slices.Contains(want, s) {
			t.Errorf("the schema describes %s, which no result has", s)
		}
	}
	for _, s := range want {
		if !slices.Contains(got, s) {
			t.Errorf("a result has %s, which the schema does not describe", s)
		}
	}
	if len(want) < 100 {
		t.Fatalf("%d keys; the walk is broken", len(want))
	}
}

// One result of each kind, as it is journaled, is what the schema says, and not more.
func TestResultsOfEveryKindFitTheSchema(t *testing.T) {
	c := jsonschema.NewCompiler()
	if err := c.AddResource("result", resultSchema(t)); err != nil {
		t.Fatal(err)
	}
	s, err := c.Compile("result")
	if err != nil {
		t.Fatal(err)
	}
	r := rand.New(rand.NewPCG(99, 1))
	ring := func(x float64) float64 { return skewed(x) + skewed(-x) }
	sides := append(profileData(r, func(x float64) float64 { return 5 + 300*ring(x) }, -3.4, -2.3, 37, ones), profileData(r, func(x float64) float64 { return 5 + 300*ring(x) }, 2.3, 3.4, 37, ones)...)
	o := ringOptics(t)
	powersRows, _ := atPowers(r, powers, 2000, nil)
	dark := newExactNight()
	for i := range dark.rows.Readings {
		dark.rows.Readings[i].Counts[2].Counts, dark.rows.Readings[i].Slices = 0, nil
	}
	ask := Question{Trigger: "signal", UnderTest: "idler"}
	monteCarlo := ask
	monteCarlo.MonteCarlo = 2000
	for name, make := range map[string]func() (Result, error){
		"efficiency": func() (Result, error) {
			return Efficiency(demoNight(), skerry(EveryPair), Model{Collection: full}, monteCarlo)
		},
		"efficiency by a setting": func() (Result, error) {
			return EfficiencyBy(powersRows, skerry(EveryPair), Model{Collection: full}, ask, "pump_power")
		},
		"efficiency without coincidences": func() (Result, error) { return dark.ask(nil) },
		"peak": func() (Result, error) {
			return Peak(spotRows(sides[37:]), skerry(EveryPair), Model{}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Trials: 5})
		},
		"zero": func() (Result, error) {
			return Zero(spotRows(sides), skerry(EveryPair), Model{Profile: ring}, ZeroQuestion{Axis: "idler_arm", Channel: "idler", Trials: 5})
		},
		"delay": func() (Result, error) {
			return Delay(plainDelay().scan(r), skerry(EveryPair), DelayQuestion{Channel: "pairs", Setting: "delay", Trials: 5})
		},
		"tuning_curve": func() (Result, error) {
			return TuningCurve(tunedRows(t, r, o, []float64{-0.2, 0, 1}, 0, 0, 3000), withTilt(), tuning(t, o), tuningQuestion)
		},
	} {
		res, err := make()
		kind, _, _ := strings.Cut(name, " ")
		if no, ok := err.(*Refusal); ok {
			res = Refused(Rows{Run: "20310203T220000-none"}, kind, no)
		} else if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		text, err := res.JSON()
		if err != nil {
			t.Fatal(err)
		}
		var body map[string]any
		if err := json.Unmarshal(text, &body); err != nil {
			t.Fatal(err)
		}
		body["schema"], body["bench"], body["sequence"], body["at"] = protocol.ResultSchema, "skerry", 9, "2031-02-03T04:05:06.000000000Z"
		text, err = json.Marshal(body)
		if err != nil {
			t.Fatal(err)
		}
		v, err := jsonschema.UnmarshalJSON(bytes.NewReader(text))
		if err != nil {
			t.Fatal(err)
		}
		if err := s.Validate(v); err != nil || body["kind"] != kind {
			t.Errorf("%s: kind %v: %v", name, body["kind"], err)
		}
		if (res.Value == nil) != (name == "efficiency without coincidences") {
			t.Errorf("%s: value %v, because %q", name, res.Value, res.Because)
		}
	}
}
