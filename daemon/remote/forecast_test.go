package remote_test

import (
	"context"
	"encoding/json"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
)

// foreseeing is a keeper that makes forecasts of so many points.
type foreseeing struct {
	*keeper
	points int
	err    error
}

func (k foreseeing) Forecast(_ context.Context, q protocol.ForecastRequest) (protocol.Forecast, error) {
	k.note("forecast %s for %s", q.RecipeName, q.Aim)
	f := protocol.Forecast{Schema: protocol.ForecastSchema, Bench: bench, Points: k.points, Results: []protocol.ForecastResult{}, Warnings: []string{}}
	for i := range k.points {
		f.PointList = append(f.PointList, protocol.ForecastPoint{Point: protocol.Point{Point: i, Axes: []protocol.AxisTarget{{Axis: "signal_arm", Target: unit.Degree}}},
			Singles: map[string]float64{strings.Repeat("s", 300): 1}})
	}
	return f, k.err
}

func TestAForecastIsAnsweredAndFitsIntoAMessage(t *testing.T) {
	for _, c := range []struct {
		name   string
		points int
		listed bool
	}{
		{"few points are listed", 3, true},
		{"as many as fit are listed", 1000, true},
		{"many points are not", 2001, false},
		{"nor are as many as make a message too large", 2000, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			k := foreseeing{keeper: &keeper{}, points: c.points}
			s := serve(t, k, nil)
			conn := s.connect(t, "control")
			m, err := conn.Request(protocol.DoSubject(bench, "forecast"), []byte(`{"recipe_name":"ring","aim":"0.5 %"}`), 10*time.Second)
			if err != nil {
				t.Fatal(err)
			}
			var f protocol.Forecast
			if err := json.Unmarshal(m.Data, &f); err != nil || f.Points != c.points {
				t.Fatalf("%d points, %v, headers %v", f.Points, err, m.Header)
			}
			if listed := len(f.PointList) == c.points; listed != c.listed || listed == (f.PointListLeftOut != "") {
				t.Errorf("%d points listed, %q; want listed: %t", len(f.PointList), f.PointListLeftOut, c.listed)
			}
			if !strings.Contains(k.notes(), "forecast ring for 0.5 %") {
				t.Errorf("asked %q", k.notes())
			}
		})
	}
}

func TestAForecastThatCannotBeMadeSaysWhy(t *testing.T) {
	k := foreseeing{keeper: &keeper{}, err: protocol.Refuse(422, "the recipe cannot be run")}
	s := serve(t, k, nil)
	conn := s.connect(t, "control")
	past := protocol.Time{Time: time.Now().Add(-time.Second)}.String()
	for _, c := range []struct{ name, body, code, text string }{
		{"a recipe with findings", `{"recipe":"x"}`, "422", "cannot be run"},
		{"an expired request", `{"recipe":"x","expires_at":"` + past + `"}`, "408", "nothing was done"},
		{"two recipes", `{"recipe":"x","recipe_name":"y"}`, "400", "exactly one"},
		{"no recipe", `{}`, "400", "exactly one"},
		{"a key of starts", `{"recipe":"x","key":"k"}`, "400", `key "key"`},
	} {
		m, err := conn.Request(protocol.DoSubject(bench, "forecast"), []byte(c.body), 10*time.Second)
		if err != nil {
			t.Fatal(err)
		}
		if code, text := m.Header.Get("Nats-Service-Error-Code"), m.Header.Get("Nats-Service-Error"); code != c.code || !strings.Contains(text, c.text) {
			t.Errorf("%s: %s %q; want %s %q", c.name, code, text, c.code, c.text)
		}
	}
}
