package keeper

import (
	"context"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

func TestAForecastNeedsNoArmingAndWritesNothing(t *testing.T) {
	k, book := keeping(t, func(c *Config) {
		c.Armed = func(time.Time) bool { return false }
		c.Recipe = func(name string) (string, error) { return "title of " + name, nil }
		c.Foresee = func(_ context.Context, plan scan.Plan, begins time.Time, aim string) (protocol.Forecast, error) {
			return protocol.Forecast{Title: plan.Title, Sentence: aim, BeginsAt: protocol.Time{Time: begins}}, nil
		}
	})
	for _, c := range []struct {
		name  string
		q     protocol.ForecastRequest
		code  int
		title string
	}{
		{"of a text", protocol.ForecastRequest{Recipe: "title: a", Aim: "1 %"}, 0, "title: a"},
		{"of a name", protocol.ForecastRequest{RecipeName: "ring", Aim: "1 %"}, 0, "title of ring"},
		{"of a recipe with findings", protocol.ForecastRequest{Recipe: "bad"}, 422, ""},
	} {
		f, err := k.Forecast(t.Context(), c.q)
		if code(err) != c.code || f.Title != c.title {
			t.Errorf("%s: %q, %v; want %q, code %d", c.name, f.Title, err, c.title, c.code)
		}
		if err == nil && f.Sentence != "1 %" {
			t.Errorf("%s: an aim of %q arrived", c.name, f.Sentence)
		}
	}
	if waiting, err := book.Queue(t.Context()); err != nil || len(waiting) != 0 {
		t.Errorf("%d runs wait, %v; want none", len(waiting), err)
	}
	if _, err := (&Keeper{}).Forecast(t.Context(), protocol.ForecastRequest{Recipe: "title: a"}); code(err) != 501 {
		t.Errorf("without a forecaster: %v; want code 501", err)
	}
}
