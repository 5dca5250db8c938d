package forecast

import (
	"strings"
	"testing"
	"time"
	"unicode/utf8"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/estimate"
)

// worthOf gives the first result one value and one part of its uncertainty.
func worthOf(value, u float64, unit string) func(estimate.Rows) ([]estimate.Result, error) {
	return func(estimate.Rows) ([]estimate.Result, error) {
		return []estimate.Result{{Unit: unit, Value: &value, U: &u, Budget: []estimate.Row{{Quantity: "counts", Evaluation: estimate.TypeA, Contribution: u}}}}, nil
	}
}

var efficiencyOfIdler = []scan.Result{{Kind: scan.Efficiency, Trigger: "signal", UnderTest: "idler"}}

func dwelling(seconds int) scan.Dwell {
	d := time.Duration(seconds) * time.Second
	return scan.Dwell{Time: d, Slice: d}
}

// polarised is light whose pairs go with the wave plate at 45 degrees.
func polarised(axes []scan.AxisTarget, s []scan.SettingTarget) (scan.Expected, error) {
	x, err := even(2e4, 5e5, 5e3)(axes, s)
	for _, t := range axes {
		if t.Axis == "plate" {
			off := min(1, t.Angle.Abs().Degrees()/45)
			x.CountsHz["pairs"] = (1-off)*(5e3-40) + 40
			x.AccidentalsHz["pairs"] = 40
		}
	}
	return x, err
}

// Each warning is shown beside the nearest recipe that has it not.
func TestWhatAnEveningWouldBeLostToIsForecast(t *testing.T) {
	background := func(by unit.Angle) *scan.Background {
		return &scan.Background{Cadence: scan.Cadence{Dwell: dwelling(10), AtStart: true}, Axis: "plate", By: by}
	}
	references := func(every time.Duration) *scan.Reference {
		return &scan.Reference{Cadence: scan.Cadence{Dwell: dwelling(20), Every: every, AtStart: true}, Trigger: "signal", UnderTest: "idler", Pairs: "pairs", Otherwise: scan.Note,
			Places: []scan.ReferencePlace{{On: scan.Top, Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: 2 * deg}, {Axis: "idler_arm", Angle: 3 * deg}}}}}
	}
	open := []scan.Earlier{{Ask: scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm", From: "Find the ring"}}}
	for _, c := range []struct {
		name  string
		bad   func(*Ask)
		sound func(*Ask)
		want  string
	}{
		{"a background that holds pairs", func(a *Ask) { a.Plan.Background, a.Expect = background(10*deg), polarised }, func(a *Ask) { a.Plan.Background, a.Expect = background(45*deg), polarised },
			"still holds 78 % of the pairs: they are taken for counts without a partner, and an efficiency comes out too high; want by: 45 deg"},
		{"an efficiency above one", func(a *Ask) { a.Plan.Results, a.Results = efficiencyOfIdler, worthOf(4.7, 0.1, "1") }, func(a *Ask) { a.Plan.Results, a.Results = efficiencyOfIdler, worthOf(0.47, 0.01, "1") },
			"the efficiency of idler comes out as 470 %, and none can be above 1"},
		{"an efficiency below nothing", func(a *Ask) { a.Plan.Results, a.Results = efficiencyOfIdler, worthOf(-0.2, 0.1, "1") }, func(a *Ask) {},
			"the efficiency of idler comes out as -20 %, and none can be below 0"},
		{"a guard of rates", func(a *Ask) {
			a.Plan.Guards = []scan.Guard{{Name: "rate signal", Rate: "signal", Low: 1, High: 2, Otherwise: scan.Hold}}
		}, func(a *Ask) {
			a.Plan.Guards = []scan.Guard{{Name: "rate signal", Rate: "signal", Low: 1e4, High: 19990}}
		}, // 19 990 ± four times its root in 2 s
			`guard "rate signal": 20 000 /s is expected at point 0, outside 1 to 2 /s, and so at 15 points: the run would hold`},
		{"a guard of darks", func(a *Ask) {
			a.Plan.Dark = &scan.Cadence{Dwell: dwelling(10), AtStart: true}
			a.Plan.Guards = []scan.Guard{{Name: "dark_rate idler", DarkRate: "idler", High: 100, Otherwise: scan.Stop}}
		}, func(a *Ask) {
			a.Plan.Dark = &scan.Cadence{Dwell: dwelling(10), AtStart: true}
			a.Plan.Guards = []scan.Guard{{Name: "dark_rate idler", DarkRate: "idler", High: 500}}
		}, `guard "dark_rate idler": darks of idler are expected to count 220 /s, outside 0 to 100 /s: the run would stop`},
		{"a guard of the pump's power", func(a *Ask) {
			a.Bench.PumpPower = &PumpPower{Sensor: "meter", Unit: "mW", Value: 45}
			a.Plan.Guards = []scan.Guard{{Name: "meter", Sensor: "meter", Low: 100, High: 200, Otherwise: scan.Skip}}
		}, func(a *Ask) { // the recipe sets it
			a.Bench.PumpPower = &PumpPower{Sensor: "meter", Unit: "mW", Value: 45, By: "laser", ByUnit: 1000}
			a.Bench.Settings = []Setting{{Name: "laser", Unit: "W"}}
			for i := range a.Plan.Points {
				a.Plan.Points[i].Settings = []scan.SettingTarget{{Setting: "laser", Value: 0.15}}
			}
			a.Plan.Guards = []scan.Guard{{Name: "meter", Sensor: "meter", Low: 100, High: 200}}
		}, `guard "meter": 45 mW is expected at point 0, outside 100 to 200 mW, and so at 15 points: these points would be skipped`},
		{"references that take longer than the time between two", func(a *Ask) { a.Plan.Reference = references(15 * time.Second) }, func(a *Ask) { a.Plan.Reference = references(time.Minute) },
			"one set of references takes 21 s with its moves and settling, longer than its every: 15 s"},
		{"bounds too narrow at a provisional place", func(a *Ask) {
			a.Plan.Reference, a.Plan.Earlier = references(10*time.Minute), open
			a.Plan.Reference.Bounds.Singles = 0.001
		}, nil, // √(2/400000) = 0.22 %
			"the references' bound singles: 0.1 % is less than four times its own counting's error (0.22 % in 20 s) at this provisional place: want 0.89 %"},
		{"steps below a tolerance", func(a *Ask) { a.Plan = grid([3]float64{2.8, 2.9, 3}, [3]float64{2.364, 2.366, 5}, true) }, func(a *Ask) {},
			"steps of 0.0005 deg along idler_arm are below its tolerance of 0.002 deg"},
	} {
		t.Run(c.name, func(t *testing.T) {
			a := Ask{Plan: small(), Bench: arms(), Expect: even(2e4, 5e5, 5e3)}
			c.bad(&a)
			demandWarning(t, foreseen(t, a), c.want)
			if c.sound == nil {
				return
			}
			a = Ask{Plan: small(), Bench: arms(), Expect: even(2e4, 5e5, 5e3)}
			c.sound(&a)
			if w := foreseen(t, a).Warnings; len(w) != 0 {
				t.Errorf("warnings %q of a sound one; want none", w)
			}
		})
	}
}

func TestARefinementThatCannotReachItsAimIsForecast(t *testing.T) {
	a := Ask{Plan: small(), Bench: arms(), Expect: even(2e4, 5e5, 5e3), Results: worthOf(2.9, 0.004, "deg")}
	a.Plan.Results = []scan.Result{{Kind: scan.Peak, Of: "signal", Along: "idler_arm"}}
	a.Plan.Refine = &scan.Refine{Of: "signal", Along: "idler_arm", Below: deg / 1000, AtMost: 4}
	a.Refine = func(_ estimate.Rows, points []scan.Point, added int, _, _ time.Time) []scan.Point { return points[:2] }
	demandWarning(t, foreseen(t, a), "the refinement's u_below: 0.001 deg is not reached: with 4 points added of at_most: 4 the peak of idler_arm is known to 4 mdeg from counting")
	a.Results = worthOf(2.9, 0.0004, "deg")
	for _, w := range foreseen(t, a).Warnings {
		if strings.Contains(w, "u_below") {
			t.Errorf("%q of one that is reached", w)
		}
	}
}

// At the second tilt the ring lies beyond the sweep; at the first it does not.
func TestACurveIsLookedAtPlaceByPlace(t *testing.T) {
	p := scan.Plan{Title: "curve", Dwell: dwelling(1), Repeat: scan.Repeat{Times: 1}, Results: []scan.Result{{Kind: scan.TuningCurve, Of: "signal", Along: "signal_arm", Against: "crystal_tilt"}}}
	for _, tilt := range []float64{0, 1.2} {
		for k := range 7 {
			p.Points = append(p.Points, scan.Point{Axes: []scan.AxisTarget{{Axis: "crystal_tilt", Angle: unit.Degrees(tilt)}, {Axis: "signal_arm", Angle: unit.Degrees(1.5 + 0.5*float64(k))}}})
		}
	}
	ring := func(axes []scan.AxisTarget, s []scan.SettingTarget) (scan.Expected, error) {
		x, err := even(2e4, 5e5, 5e3)(axes, s)
		off := axes[1].Angle.Degrees() - 3 - 1.3*axes[0].Angle.Degrees()
		x.CountsHz["signal"] = 2e4 / (1 + 4*off*off)
		return x, err
	}
	w := foreseen(t, Ask{Plan: p, Expect: ring}).Warnings
	if len(w) != 1 || !strings.HasPrefix(w[0], "at crystal_tilt 1.2 deg the span of signal_arm, 1.5 to 4.5 deg, misses the peak") {
		t.Errorf("warnings %q; want one, of the second tilt", w)
	}
}

func TestAnAimIsOneForTheFirstResult(t *testing.T) {
	for _, c := range []struct {
		kind scan.ResultKind
		aim  string
		fits bool
	}{
		{scan.Efficiency, "0.5 %", true}, {scan.Efficiency, "0.5 deg", false}, {scan.Efficiency, "0.2 ns", false}, {scan.Drift, "0.1 %", true},
		{scan.Peak, "0.01 deg", true}, {scan.Peak, "0.5 %", false}, {scan.Peak, "0.2 ns", false}, {scan.Delay, "0.2 ns", true}, {scan.Delay, "1 deg", false},
	} {
		aim, err := ParseAim(c.aim)
		if err != nil {
			t.Fatal(err)
		}
		if err := aim.Fits([]scan.Result{{Kind: c.kind}}); (err == nil) != c.fits {
			t.Errorf("%s for a result of kind %s: %v", c.aim, c.kind, err)
		}
	}
	aim, _ := ParseAim("1 %")
	if aim.Fits(nil) == nil {
		t.Error("an aim without a result is taken")
	}
}

func TestNumbersAndClocksReadAsPeopleWriteThem(t *testing.T) {
	u := func(v float64) *float64 { return &v }
	for _, c := range []struct{ got, want string }{
		{number(36340.4, 4), "36 340"}, {number(2.488e6, 4), "2 488 000"}, {number(1141, 4), "1141"}, {number(0.04317, 3), "0.0432"}, {number(-12345.6, 6), "-12 345.6"},
		{share(1), "100 %"}, {share(0.0996), "10 %"}, {share(0.0038), "0.38 %"},
		{(&Forecast{}).inUnit(0.1, protocol.ForecastResult{Unit: "deg"}), "0.1 deg"}, {(&Forecast{}).inUnit(0.004, protocol.ForecastResult{Unit: "deg"}), "4 mdeg"},
		{about(protocol.ForecastResult{Unit: "1", Value: u(-9.126e-06), Uncertainty: u(0.0033)}), "0.00 %"}, {about(protocol.ForecastResult{Unit: "deg", Value: u(2.8570123), Uncertainty: u(0.004)}), "2.8570 deg"},
		{(&Forecast{local: time.UTC, Forecast: protocol.Forecast{BeginsAt: protocol.Time{Time: evening}}}).clock(evening.AddDate(1, 0, 0)), "21:04 on 3 Feb 2032"},
		{(&Forecast{local: time.UTC, Forecast: protocol.Forecast{BeginsAt: protocol.Time{Time: evening}}}).clock(evening.AddDate(0, 1, 0)), "21:04 on 3 Mar"},
	} {
		if c.got != c.want {
			t.Errorf("%q; want %q", c.got, c.want)
		}
	}
	b := arms()
	b.Pace = 100
	p := small()
	p.Title = strings.Repeat("long ", 10)
	f := foreseen(t, Ask{Plan: p, Bench: b, Expect: even(2e4, 5e5, 5e3), RatesFrom: strings.Repeat("a model of many words, ", 9)})
	if !strings.Contains(f.Sentence, "done at 21:05 bench time (after 0.6") {
		t.Errorf("%q; want its clock named", f.Sentence)
	}
	for line := range strings.SplitSeq(f.Text(), "\n") {
		if n := utf8.RuneCountInString(line); n > wide {
			t.Errorf("%d letters in %q; want at most %d", n, line, wide)
		}
	}
}

// A keep-out over a point is told once, though the way there is looked at as well.
func TestAKeepOutIsToldOnce(t *testing.T) {
	a := Ask{Plan: small(), Bench: arms(), Expect: even(2e4, 5e5, 5e3)}
	a.Bench.KeepOuts = []scan.KeepOut{{Name: "lamp", Range: &scan.Range{Span: scan.Span{Axis: drivers.AxisName("idler_arm"), Low: 31 * deg / 10, High: 32 * deg / 10}}}}
	a.Plan.Points[4].Axes[1].Angle = 315 * deg / 100
	told := 0
	for _, w := range foreseen(t, a).Warnings {
		if strings.HasPrefix(w, "point 4:") || strings.Contains(w, "to point 4 is") {
			told++
		}
	}
	if told != 1 {
		t.Errorf("point 4 is told of %d times; want once: %q", told, foreseen(t, a).Warnings)
	}
}

// A setting that settles takes its time once: where it stands already it is only asked. Where it changes
// between two readings the detectors are protected first, and again for the move that follows.
func TestASettingSettlesOnlyWhenItIsChanged(t *testing.T) {
	took := func(change func(*Ask)) time.Duration {
		a := Ask{Plan: small(), Bench: arms(), Expect: even(2e4, 5e5, 5e3)}
		change(&a)
		return foreseen(t, a).Settling.Duration()
	}
	var closing time.Duration
	for _, s := range arms().Protectors {
		closing += s.SettleClosed
	}
	bare := took(func(*Ask) {})
	stand := 45.0
	lamp := []Setting{{Name: "lamp", Unit: "%", Settle: 5 * time.Second, Stand: &stand}}
	if more := took(func(a *Ask) { a.Bench.Settings = lamp }) - bare; more != 5*time.Second {
		t.Errorf("a setting that stands: %s more; want 5 s", more)
	}
	if more := took(func(a *Ask) {
		a.Bench.Settings = lamp
		for i := range a.Plan.Points {
			a.Plan.Points[i].Settings = []scan.SettingTarget{{Setting: "lamp", Value: float64(i / 5)}}
		}
	}) - bare; more != 15*time.Second+2*closing {
		t.Errorf("a setting stepped twice: %s more; want 15 s, and twice the %s in which the detectors are covered", more, closing)
	}
}
