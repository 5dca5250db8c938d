package report

import (
	"encoding/json"
	"math"
	"strings"
	"testing"

	"gemel/scan/estimate"
)

func aPeak(value float64) estimate.Result {
	u := 0.004
	r := estimate.Result{Run: "r1", Kind: "peak", Value: &value, U: &u, Expanded: &u, K: &u, Unit: "deg", Interval: &estimate.Interval{Low: value - u, High: value + u}}
	for i := range 9 {
		deg := value + 0.1*float64(i-4)
		r.Residuals = append(r.Residuals, estimate.Residual{AngleDeg: &deg, ExposureS: 2, Counts: 100, Expected: 90, Residual: 1})
	}
	return r
}

func TestOneResultIsAnObjectAndSeveralAreAListInIt(t *testing.T) {
	for n, all := range map[int][]estimate.Result{1: {aPeak(1)}, 3: {aPeak(1), aPeak(2), aPeak(3)}} {
		text, err := JSON(all)
		if err != nil {
			t.Fatal(err)
		}
		var body struct {
			Value   float64 `json:"value"`
			Results []struct {
				Value float64 `json:"value"`
			} `json:"results"`
		}
		if err := json.Unmarshal(text, &body); err != nil || body.Value != 1 || len(body.Results) != n || body.Results[n-1].Value != float64(n) {
			t.Errorf("%d results: %v, %+v", n, err, body)
		}
		objects, err := Objects(all)
		if err != nil || len(objects) != n || strings.Contains(string(objects[0]), `"results"`) {
			t.Errorf("%d results: %d objects, %v; want one for each, without the list", n, len(objects), err)
		}
	}
}

func TestAPictureNeedsSomethingToDraw(t *testing.T) {
	var b strings.Builder
	draw := func(all ...estimate.Result) {
		t.Helper()
		for _, p := range Pictures(all, Beside{}) {
			if err := p.Draw(&b); err != nil {
				t.Fatal(err)
			}
		}
	}
	refused := estimate.Refused(estimate.Rows{Run: "r1"}, "peak", &estimate.Refusal{Reasons: []string{"no light"}})
	if draw(refused); b.Len() > 0 {
		t.Errorf("%d bytes; want nothing drawn", b.Len())
	}
	if all := Pictures([]estimate.Result{refused, aPeak(2)}, Beside{}); len(all) != 1 || all[0].Number != 2 || all[0].Kind != "peak" {
		t.Errorf("%d pictures; want one, of the second", len(all))
	}
	if draw(refused, aPeak(2)); strings.Count(b.String(), `r="2.6"`) != 9 {
		t.Errorf("%d readings drawn; want 9", strings.Count(b.String(), `r="2.6"`))
	}
	named := aPeak(2)
	named.Axis = "idler_arm"
	if draw(named); !strings.Contains(b.String(), ">idler_arm / deg<") {
		t.Error("want the axis named")
	}
	if strings.Contains(b.String(), "NaN") || strings.Contains(b.String(), "Inf") {
		t.Error("the picture has places that are none")
	}
}

func TestTicksAreRoundAndInside(t *testing.T) {
	for _, c := range []struct{ low, high float64 }{{0, 1}, {-3.9, 4.1}, {0.5694, 0.5715}, {13, 24}, {0, 12345}} {
		list := ticks(c.low, c.high, 5)
		if len(list) < 5 || len(list) > 13 || list[0] < c.low || list[len(list)-1] > c.high {
			t.Errorf("%g to %g: %v", c.low, c.high, list)
		}
		if step := list[1] - list[0]; math.Abs(math.Round(list[0]/step)*step-list[0]) > 1e-9*math.Abs(c.high) {
			t.Errorf("%g to %g: %v; want multiples of the step", c.low, c.high, list)
		}
	}
}
