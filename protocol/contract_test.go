package protocol_test

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io/fs"
	"maps"
	"path"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/santhosh-tekuri/jsonschema/v6"
	"gopkg.in/yaml.v3"

	"gemel/protocol"
	"gemel/protocol/unit"
)

func at(text string) protocol.Time {
	t, err := time.Parse(time.RFC3339Nano, text)
	if err != nil {
		panic(err)
	}
	return protocol.Time{Time: t}
}

func head(schema string) protocol.Head {
	return protocol.Head{Schema: schema, Bench: "skerry", Run: "20310203-0405-a", Sequence: 7, At: at("2031-02-03T04:05:06.5Z")}
}

func status() protocol.Status {
	return protocol.Status{
		Bench: "skerry", Version: "1.0.0", State: protocol.Holding, Causes: []protocol.Cause{protocol.ByGuard, protocol.ByOperator}, Reason: "pump power",
		Run: "20310203-0405-a", Title: "Ring", ReadingsAccepted: 3, ReadingsPlanned: 60, ReadingsSetAside: 1,
		TimeLeft: new(protocol.Seconds(90 * time.Second)), EndedAt: new(at("2031-02-03T04:05:06.5Z")), Queue: []protocol.RunID{"r2"}, Waiting: []protocol.WaitingRun{{Run: "r2", Title: "Peak"}}, Armed: true, Simulated: new(20), Behind: 4, Hand: "ann",
		HoldingSince: new(at("2031-02-03T04:05:06.5Z")), GivesUpAt: new(at("2031-02-03T16:05:06.5Z")), LooksAgain: new(protocol.Seconds(30 * time.Second)),
		BenchTrouble: "at rest: no answer", BenchTroubleAt: new(at("2031-02-03T04:05:06.5Z")), Unpublished: "no broker",
	}
}

func foreseen() protocol.Forecast {
	return protocol.Forecast{
		Schema: protocol.ForecastSchema, Bench: "skerry", Title: "Ring", Sentence: "1 point, 2 s.", BeginsAt: at("2031-02-03T04:05:06.5Z"), FinishesAt: at("2031-02-03T04:05:08.5Z"),
		Duration: protocol.Seconds(2 * time.Second), Counting: protocol.Seconds(2 * time.Second), Points: 1, Visits: 1, Uncertainty: new(0.004), Floor: new(0.003),
		Results: []protocol.ForecastResult{
			{Kind: "efficiency", Unit: "1", Value: new(0.55), Uncertainty: new(0.004), Counting: new(0.002), Floor: new(0.003), FloorFrom: []protocol.ForecastShare{{Quantity: "path", Contribution: 0.003}}, Because: []string{}},
			{Kind: "peak", FloorFrom: []protocol.ForecastShare{}, Because: []string{"no optics"}},
		},
		Aim: &protocol.ForecastAim{Text: "0.5 %", Wanted: 0.0035, Reachable: true, Dwell: new(protocol.Seconds(time.Second)), Heralds: new(uint64(7)), Beside: new(protocol.Seconds(time.Second)),
			BestShare: new(0.1), Share: new(0.2), Duration: new(protocol.Seconds(time.Minute)), Uncertainty: new(0.0035)},
		RatesFrom: "the model", RatesAt: 1, Interpolation: 0.001, OverheadFrom: "measured", Warnings: []string{"no emission"},
		PointList: []protocol.ForecastPoint{{
			Point:  protocol.Point{Point: 0, Axes: []protocol.AxisTarget{{Axis: "signal_arm", Target: unit.Degree}}, Settings: []protocol.SettingValue{{Name: "delay", Target: 1e-9, Unit: "s"}}, Empty: "closed"},
			Visits: 1, Gate: protocol.Seconds(2 * time.Second), Singles: map[string]float64{"signal": 20}, Coincidences: map[string]float64{"pairs": 2}, Accidentals: map[string]float64{"pairs": 0.1},
		}},
	}
}

// messages are one full and one sparse example of everything that is sent, under the name of the
// schema.
func messages() map[string][]any {
	reading := protocol.Reading{
		Head: head(protocol.ReadingSchema), Kind: protocol.Light, Point: new(0), Visit: new(1), Accepted: true,
		StartedAt: at("2031-02-03T04:05:00Z"), EndedAt: at("2031-02-03T04:05:02Z"),
		GateSet: protocol.Seconds(2 * time.Second), Gate: protocol.Seconds(1999999990),
		Angles:   []protocol.Angle{{Axis: "signal_arm", Target: unit.Degrees(2.864), Before: unit.Degrees(2.8641), After: -unit.Degree, Proof: "proved"}},
		Settings: []protocol.Setting{{Name: "delay", Target: 1e-9, Before: 1e-9, After: 1.1e-9, Unit: "s"}},
		Sensors:  []protocol.Sensor{{Sensor: "pump_power", Minimum: 1, Mean: 2, Maximum: 3, Samples: 20, Unit: "W"}},
		Counts:   []protocol.Count{{Channel: "signal", Counts: 1<<64 - 1}},
		Slices:   []protocol.Slice{{GateSet: protocol.Seconds(time.Second), Gate: protocol.Seconds(time.Second), Counts: []protocol.Count{{Channel: "signal", Counts: 0}}, Raw: "1,2\r\n"}},
		Scatter:  &protocol.Scatter{Channel: "signal", ChiSquare: 3.2, Freedom: 4, P: 0.5},
		Glance:   &protocol.Slice{GateSet: protocol.Seconds(time.Second), Gate: protocol.Seconds(time.Second), Counts: []protocol.Count{}, Raw: "3"},
		Attempt:  2, LostGates: 1, Simulated: new(100),
	}
	bare := protocol.Reading{
		Head: head(protocol.ReadingSchema), Kind: protocol.Dark, Reason: "overflow", StartedAt: reading.StartedAt, EndedAt: reading.EndedAt,
		Angles: []protocol.Angle{}, Settings: []protocol.Setting{}, Sensors: []protocol.Sensor{}, Counts: []protocol.Count{}, Slices: []protocol.Slice{}, Attempt: 1,
	}
	idle := protocol.Status{Bench: "skerry", Causes: []protocol.Cause{}, Queue: []protocol.RunID{}, Waiting: []protocol.WaitingRun{}}
	benchEvent := protocol.Event{Head: head(protocol.EventSchema), Kind: protocol.OperatorDid, Text: "armed", Causes: []protocol.Cause{}, Detail: map[string]any{}}
	benchEvent.Run = protocol.BenchRun
	return map[string][]any{
		"reading": {reading, bare},
		"point": {
			protocol.Points{Head: head(protocol.PointSchema), Grounds: "sweep", Points: []protocol.Point{{
				Point: 3, Axes: []protocol.AxisTarget{{Axis: "signal_arm", Target: unit.Degree}},
				Settings: []protocol.SettingValue{{Name: "delay", Target: 1e-9, Unit: "s"}},
			}}},
			protocol.Points{Head: head(protocol.PointSchema), Grounds: "sweep", Points: []protocol.Point{{Axes: []protocol.AxisTarget{}}}},
		},
		"event": {
			protocol.Event{
				Head: head(protocol.EventSchema), Kind: protocol.Held, Text: "held: pump power", State: protocol.Holding,
				Causes: []protocol.Cause{protocol.ByGuard}, Detail: map[string]any{"guard": "pump_power", "value": 1.5},
			},
			benchEvent,
		},
		"beat": {
			protocol.Beat{Schema: protocol.BeatSchema, At: at("2031-02-03T04:05:06.5Z"), Status: status()},
			protocol.Beat{Schema: protocol.BeatSchema, At: at("2031-02-03T04:05:06.5Z"), Status: idle},
		},
		"status":        {status(), idle},
		"start_request": {protocol.StartRequest{Recipe: "title: x", RecipeName: "x", Key: "k", Who: "night", ExpiresAt: new(at("2031-02-03T04:05:06.5Z"))}, protocol.StartRequest{Key: "k"}},
		"start_reply":   {protocol.StartReply{Run: "r1"}},
		"run_request":   {protocol.RunRequest{Run: "r1", Who: "night", ExpiresAt: new(at("2031-02-03T04:05:06.5Z"))}, protocol.RunRequest{Run: "r1"}},
		"run_reply":     {protocol.RunReply{Run: "r1", State: protocol.Stopped, Causes: []protocol.Cause{}, Recorded: true, Rest: "close shutter: no answer"}, protocol.RunReply{Run: "r1", State: protocol.Stopped, Causes: []protocol.Cause{}}},
		"queue_reply": {
			protocol.QueueReply{Bench: "skerry", Queue: []protocol.QueuedRun{{Run: "r2", Title: "Peak", QueuedAt: at("2031-02-03T04:05:06.5Z"), Who: "ann", State: protocol.Queued, ReadingsPlanned: new(60)}}},
			protocol.QueueReply{Bench: "skerry", Queue: []protocol.QueuedRun{{Run: "r2", QueuedAt: at("2031-02-03T04:05:06.5Z"), State: protocol.Holding}}},
		},
		"reorder_request": {protocol.ReorderRequest{Runs: []protocol.RunID{"r3", "r2"}, Who: "ann", ExpiresAt: new(at("2031-02-03T04:05:06.5Z"))}, protocol.ReorderRequest{Runs: []protocol.RunID{"r3"}}},
		"forecast_request": {
			protocol.ForecastRequest{Recipe: "title: x", RecipeName: "x", Aim: "0.5 %", Who: "night", ExpiresAt: new(at("2031-02-03T04:05:06.5Z"))},
			protocol.ForecastRequest{RecipeName: "x"},
		},
		"forecast": {foreseen(), protocol.Forecast{
			Schema: protocol.ForecastSchema, Bench: "skerry", BeginsAt: at("2031-02-03T04:05:06.5Z"), FinishesAt: at("2031-02-03T04:05:06.5Z"), Results: []protocol.ForecastResult{}, Warnings: []string{},
			PointListLeftOut: "3000 points",
		}},
		"problem": {
			protocol.Problem{Error: "recipe: 1 finding", Findings: []protocol.Finding{{File: "a.yaml", Line: 3, Col: 9, Key: "dwell", Found: "2", Want: "a time"}}},
			protocol.Refuse(404, "no run r9").Problem,
		},
		"hand_request": {
			protocol.HandRequest{Act: protocol.HandMove, Session: "s", Who: "ann", Axis: "signal_arm", To: new(unit.Degree), By: new(-unit.Degree / 10), Shutter: "pump", Open: new(false),
				Setting: "delay", Value: new(1.2), Unit: "ns", Gate: protocol.Seconds(time.Second / 2), Live: true, ExpiresAt: new(at("2031-02-03T04:05:06.5Z"))},
			protocol.HandRequest{Act: protocol.HandRest},
		},
		"hand_reply": {
			protocol.HandReply{Act: protocol.HandTake, Session: "s", Text: "taken", Recorded: true, Lease: protocol.Seconds(2 * time.Minute),
				Axes:     []protocol.HandAxis{{Axis: "signal_arm", Angle: new(unit.Degree), Low: -unit.Degree, High: unit.Degree, Proof: "proved"}, {Axis: "idler_arm", Proof: "reported", Trouble: "no zero"}},
				Shutters: []protocol.HandBlade{{Shutter: "shutter", Guards: "pump", Open: true}}, Settings: []protocol.HandValue{{Name: "delay", Value: new(1.2), Unit: "ns"}},
				Sensors: []protocol.HandValue{{Name: "pump_power", Unit: "mW", Trouble: "no answer"}},
				Look: &protocol.HandLookedAt{Gate: protocol.Seconds(time.Second / 2), Doubt: "a counter channel ran over",
					Rates:  []protocol.HandRate{{Channel: "signal", Counts: 500, Rate: 1000}, {Channel: "pairs", Counts: 5, Rate: 10, Accidentals: new(0.1)}},
					Ratios: []protocol.HandRatio{{Channel: "pairs", Over: "signal", Ratio: new(0.01), U: new(0.004)}, {Channel: "pairs", Over: "idler"}}},
				Moved: []protocol.HandMoved{{Name: "signal_arm", Before: 1, After: 2, Unit: "deg"}}},
			protocol.HandReply{Act: protocol.HandWhere, LetGo: true, Axes: []protocol.HandAxis{}, Shutters: []protocol.HandBlade{}, Settings: []protocol.HandValue{}, Sensors: []protocol.HandValue{}, Moved: []protocol.HandMoved{}},
		},
		"contact": {protocol.Contact{URL: "nats://127.0.0.1:4222", Bench: "skerry", Control: "control.nk", Watch: "watch.nk"}},
	}
}

// unborn are schemas without a Go type yet.
var unborn = []string{"result", "status_request", "queue_request"}

func names(t *testing.T) []string {
	t.Helper()
	files, err := fs.Glob(protocol.Contract(), "schemas/*.json")
	if err != nil || len(files) == 0 {
		t.Fatalf("schemas: %v, %v", files, err)
	}
	var names []string
	for _, f := range files {
		names = append(names, strings.TrimSuffix(path.Base(f), ".json"))
	}
	return names
}

func document(t *testing.T, name string) map[string]any {
	t.Helper()
	text, err := fs.ReadFile(protocol.Contract(), "schemas/"+name+".json")
	if err != nil {
		t.Fatal(err)
	}
	var d map[string]any
	if err := json.Unmarshal(text, &d); err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	return d
}

// compile reads the schema under the given draft, whatever it says of itself.
func compile(t *testing.T, name string, draft *jsonschema.Draft) *jsonschema.Schema {
	t.Helper()
	d := document(t, name)
	delete(d, "$schema")
	c := jsonschema.NewCompiler()
	c.DefaultDraft(draft)
	if err := c.AddResource(name, d); err != nil {
		t.Fatal(err)
	}
	s, err := c.Compile(name)
	if err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	return s
}

func validate(s *jsonschema.Schema, body []byte) error {
	v, err := jsonschema.UnmarshalJSON(bytes.NewReader(body))
	if err != nil {
		return err
	}
	return s.Validate(v)
}

func TestWhatGoWritesIsWhatTheSchemasSay(t *testing.T) {
	examples := messages()
	for _, name := range names(t) {
		if len(examples[name]) == 0 && !slices.Contains(unborn, name) {
			t.Errorf("schema %s has no example", name)
		}
		for _, draft := range []*jsonschema.Draft{jsonschema.Draft2020, jsonschema.Draft7} {
			s := compile(t, name, draft)
			for i, m := range examples[name] {
				body, err := json.Marshal(m)
				if err != nil {
					t.Fatal(err)
				}
				// Requests are examples of every key at once, which no schema forbids here.
				if name == "start_request" && i == 1 {
					body = []byte(`{"recipe_name":"x","key":"k"}`)
				}
				if err := validate(s, body); err != nil {
					t.Errorf("%s, example %d: %v\n%s", name, i, err, body)
				}
			}
		}
	}
	for name := range examples {
		if !slices.Contains(names(t), name) {
			t.Errorf("message %s has no schema", name)
		}
	}
}

// Leaving out any required field, or giving it another type, must be noticed.
func TestTheSchemasNoticeWhatIsMissingOrOfAnotherKind(t *testing.T) {
	for name, examples := range messages() {
		s := compile(t, name, jsonschema.Draft2020)
		body, err := json.Marshal(examples[0])
		if err != nil {
			t.Fatal(err)
		}
		var whole map[string]any
		if err := json.Unmarshal(body, &whole); err != nil {
			t.Fatal(err)
		}
		required, _ := document(t, name)["required"].([]any)
		for key := range whole {
			part := map[string]any{}
			maps.Copy(part, whole)
			delete(part, key)
			text, err := json.Marshal(part)
			if err != nil {
				t.Fatal(err)
			}
			if err := validate(s, text); (err != nil) != slices.Contains(required, any(key)) {
				t.Errorf("%s without %s: %v", name, key, err)
			}
			part[key] = []any{[]any{}} // no field is a list of lists
			if text, err = json.Marshal(part); err != nil {
				t.Fatal(err)
			}
			if validate(s, text) == nil {
				t.Errorf("%s with a list of lists as %s: valid; want it noticed", name, key)
			}
		}
	}
}

func TestRequestsWithAnUnknownKeyAreNotValid(t *testing.T) {
	for _, c := range []struct{ name, body string }{
		{"run_request", `{"run":"r1","runs":"r2"}`},
		{"start_request", `{"recipe":"x","key":"k","priority":1}`},
		{"status_request", `{"run":"r1"}`},
		{"queue_request", `{"run":"r1"}`},
		{"forecast_request", `{"recipe":"x","key":"k"}`},
		{"reorder_request", `{"runs":["r1"],"first":"r1"}`},
	} {
		if validate(compile(t, c.name, jsonschema.Draft2020), []byte(c.body)) == nil {
			t.Errorf("%s %s: valid; want it noticed", c.name, c.body)
		}
	}
}

func TestAResultHasTheKeysOfTheReport(t *testing.T) {
	s := compile(t, "result", jsonschema.Draft2020)
	body := `{"schema":"gemel.result.v1","bench":"skerry","run":"r1","sequence":9,"at":"2031-02-03T04:05:06.000000000Z","kind":"efficiency","value":0.55,
		"standard_uncertainty":0.002,"expanded_uncertainty":0.004,"coverage_factor":2,"unit":"1","budget":[{}],"corrections":[{}],"conditions":[{}],
		"readings_used":[4,5],"readings_set_aside":[{"sequence":6,"reason":"off the plateau"}],"simulated":20,"more":"to come"}`
	if err := validate(s, []byte(body)); err != nil {
		t.Error(err)
	}
	properties := document(t, "result")["properties"].(map[string]any)
	for key := range strings.FieldsSeq(`run kind value standard_uncertainty expanded_uncertainty coverage_factor unit budget corrections conditions
		readings_used readings_set_aside simulated`) {
		if properties[key] == nil {
			t.Errorf("key %s is not described", key)
		}
	}
}

// fields lists the JSON paths of a type, lists as "[]".
func fields(t reflect.Type, at string) []string {
	for t.Kind() == reflect.Pointer {
		t = t.Elem()
	}
	if t.Implements(reflect.TypeFor[json.Marshaler]()) || reflect.PointerTo(t).Implements(reflect.TypeFor[json.Marshaler]()) {
		return nil
	}
	switch t.Kind() {
	case reflect.Slice:
		return fields(t.Elem(), at+"[]")
	case reflect.Struct:
		var list []string
		for f := range t.Fields() {
			name, _, _ := strings.Cut(f.Tag.Get("json"), ",")
			if f.Anonymous && name == "" {
				list = append(list, fields(f.Type, at)...)
				continue
			}
			list = append(list, at+"."+name)
			list = append(list, fields(f.Type, at+"."+name)...)
		}
		return list
	}
	return nil
}

func described(schema map[string]any, at string) []string {
	var list []string
	if items, ok := schema["items"].(map[string]any); ok {
		list = append(list, described(items, at+"[]")...)
	}
	properties, _ := schema["properties"].(map[string]any)
	for name, p := range properties {
		list = append(list, at+"."+name)
		list = append(list, described(p.(map[string]any), at+"."+name)...)
	}
	return list
}

func TestTypesAndSchemasHaveTheSameFields(t *testing.T) {
	for name, examples := range messages() {
		typed := fields(reflect.TypeOf(examples[0]), "")
		written := described(document(t, name), "")
		slices.Sort(typed)
		slices.Sort(written)
		if len(typed) == 0 || !slices.Equal(typed, written) {
			t.Errorf("%s: Go has\n%v\nand the schema\n%v", name, typed, written)
		}
	}
}

// Keywords that mean the same in 2020-12 and in draft-07.
var common = strings.Fields(`$schema $id title description type properties required additionalProperties items enum const
	minimum maximum minLength maxLength pattern`)

func TestSchemasUseOnlyWhatTwoDraftsAgreeOn(t *testing.T) {
	var walk func(where string, v any)
	walk = func(where string, v any) {
		s, ok := v.(map[string]any)
		if !ok {
			t.Errorf("%s: %v is no schema", where, v)
			return
		}
		for k, v := range s {
			if !slices.Contains(common, k) {
				t.Errorf("%s: keyword %s; want only %v", where, k, common)
			}
			switch k {
			case "items":
				walk(where+"[]", v)
			case "properties":
				for name, p := range v.(map[string]any) {
					walk(where+"."+name, p)
				}
			}
		}
	}
	for _, name := range names(t) {
		d := document(t, name)
		walk(name, d)
		if d["$schema"] != "https://json-schema.org/draft/2020-12/schema" || d["$id"] != "urn:gemel:schema:"+name {
			t.Errorf("%s calls itself %v, %v", name, d["$schema"], d["$id"])
		}
	}
}

func TestSchemasListTheValuesThatGoKnows(t *testing.T) {
	text := func(list ...any) string { return fmt.Sprint(list...) }
	enum := func(name string, keys ...string) string {
		v := any(document(t, name))
		for _, k := range keys {
			v = v.(map[string]any)[k]
		}
		return fmt.Sprint(v.(map[string]any)["enum"])
	}
	states := []protocol.State{protocol.Queued, protocol.Running, protocol.Holding, protocol.Finished, protocol.Stopped, protocol.Failed}
	causes := []protocol.Cause{protocol.ByOperator, protocol.ByGuard, protocol.ByTrouble, protocol.ByLight, protocol.ByStorage, protocol.ByRestart}
	kinds := []protocol.ReadingKind{protocol.Light, protocol.Dark, protocol.Background, protocol.Reference, protocol.Check}
	events := []protocol.EventKind{protocol.Began, protocol.Held, protocol.WentOn, protocol.HomedEvent, protocol.GuardBroken, protocol.GuardMended,
		protocol.SetAside, protocol.TakenAgain, protocol.Doubted, protocol.Interrupted, protocol.Trouble, protocol.OperatorDid, protocol.Ended}
	for _, c := range []struct{ got, want string }{
		{enum("run_reply", "properties", "state"), text(states)},
		{enum("queue_reply", "properties", "queue", "items", "properties", "state"), text(states)},
		{enum("status", "properties", "state"), text(append([]protocol.State{""}, states...))},
		{enum("event", "properties", "state"), text(append([]protocol.State{""}, states...))},
		{enum("status", "properties", "causes", "items"), text(causes)},
		{enum("reading", "properties", "kind"), text(kinds)},
		{enum("event", "properties", "kind"), text(events)},
		{enum("hand_request", "properties", "act"), text(protocol.HandActs())},
		{enum("hand_reply", "properties", "act"), text(protocol.HandActs())},
	} {
		if c.got != c.want {
			t.Errorf("the schema lists %s; want %s", c.got, c.want)
		}
	}
	for name, schema := range map[string]string{"reading": protocol.ReadingSchema, "point": protocol.PointSchema, "event": protocol.EventSchema,
		"result": protocol.ResultSchema, "beat": protocol.BeatSchema} {
		if got := document(t, name)["properties"].(map[string]any)["schema"].(map[string]any)["const"]; got != schema {
			t.Errorf("%s is called %v; want %s", name, got, schema)
		}
	}
}

func asyncapi(t *testing.T) map[string]any {
	t.Helper()
	text, err := fs.ReadFile(protocol.Contract(), "asyncapi.yaml")
	if err != nil {
		t.Fatal(err)
	}
	var d map[string]any
	if err := yaml.Unmarshal(text, &d); err != nil {
		t.Fatal(err)
	}
	return d
}

// resolve follows a reference to its target, nil if there is none.
func resolve(t *testing.T, root map[string]any, ref string) any {
	t.Helper()
	if file, ok := strings.CutPrefix(ref, "./"); ok {
		if _, err := fs.Stat(protocol.Contract(), file); err != nil {
			return nil
		}
		return document(t, strings.TrimSuffix(path.Base(file), ".json"))
	}
	var v any = root
	pointer, ok := strings.CutPrefix(ref, "#/")
	if !ok {
		return nil
	}
	for step := range strings.SplitSeq(pointer, "/") {
		m, ok := v.(map[string]any)
		if !ok {
			return nil
		}
		v = m[step]
	}
	return v
}

func TestAsyncAPIReferencesResolve(t *testing.T) {
	root := asyncapi(t)
	used := map[string]bool{}
	var walk func(v any)
	walk = func(v any) {
		switch v := v.(type) {
		case []any:
			for _, e := range v {
				walk(e)
			}
		case map[string]any:
			if ref, ok := v["$ref"].(string); ok {
				if resolve(t, root, ref) == nil {
					t.Errorf("%s leads nowhere", ref)
				}
				if len(v) != 1 {
					t.Errorf("%s has neighbours, which are ignored", ref)
				}
				used[ref] = true
			}
			for _, e := range v {
				walk(e)
			}
		}
	}
	walk(root)
	for _, name := range names(t) {
		if ref := "./schemas/" + name + ".json"; !used[ref] && name != "contact" {
			t.Errorf("%s is not used", ref)
		}
	}
}

func TestAsyncAPIDescribesTheSubjectsThatGoUses(t *testing.T) {
	root := asyncapi(t)
	if root["asyncapi"] != "3.0.0" || root["info"].(map[string]any)["title"] == nil || root["info"].(map[string]any)["version"] == nil {
		t.Errorf("asyncapi %v, info %v", root["asyncapi"], root["info"])
	}
	want := map[string]string{"beat": protocol.BeatSubject("{bench}")}
	for _, k := range []protocol.EntryKind{protocol.ReadingEntry, protocol.PointEntry, protocol.EventEntry, protocol.ResultEntry} {
		want[string(k)] = protocol.Subject("{bench}", k, "{run}")
	}
	verbs := []string{"start", "stop", "hold", "resume", "status", "queue", "reorder", "withdraw", "forecast", "hand", "stop_after_point"}
	for _, v := range verbs {
		want[v] = protocol.DoSubject("{bench}", v)
	}
	channels := root["channels"].(map[string]any)
	for name, c := range channels {
		channel := c.(map[string]any)
		address, _ := channel["address"].(string)
		if strings.HasSuffix(name, "Reply") {
			if a, there := channel["address"]; !there || a != nil {
				t.Errorf("channel %s has address %v; want null, an inbox", name, a)
			}
			continue
		}
		if address != want[name] {
			t.Errorf("channel %s is at %q; want %q", name, address, want[name])
		}
		delete(want, name)
		parameters, _ := channel["parameters"].(map[string]any)
		for _, p := range []string{"bench", "run"} {
			if strings.Contains(address, "{"+p+"}") != (parameters[p] != nil) {
				t.Errorf("channel %s at %s declares %v", name, address, parameters)
			}
		}
		if channel["bindings"] != nil {
			t.Errorf("channel %s has bindings, which NATS does not define", name)
		}
	}
	if len(want) > 0 {
		t.Errorf("not described: %v", want)
	}
	for name, o := range root["operations"].(map[string]any) {
		operation := o.(map[string]any)
		channel := operation["channel"].(map[string]any)["$ref"].(string)
		receives := slices.Contains(verbs, name)
		if action := operation["action"]; (action == "receive") != receives || (action == "send") == receives {
			t.Errorf("operation %s has action %v", name, action)
		}
		for _, m := range operation["messages"].([]any) {
			if ref := m.(map[string]any)["$ref"].(string); !strings.HasPrefix(ref, channel+"/messages/") {
				t.Errorf("operation %s sends %s on %s", name, ref, channel)
			}
		}
		if receives {
			if fmt.Sprint(operation["bindings"]) != "map[nats:map[bindingVersion:0.1.0 queue:q]]" {
				t.Errorf("operation %s has bindings %v", name, operation["bindings"])
			}
			if ref := operation["reply"].(map[string]any)["channel"].(map[string]any)["$ref"]; ref != "#/channels/"+name+"Reply" {
				t.Errorf("operation %s is answered on %v", name, ref)
			}
		}
	}
}
