package forecast

import (
	"bytes"
	"encoding/xml"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/estimate"
)

var evening = time.Date(2031, 2, 3, 21, 4, 0, 0, time.UTC)

// even is light that is the same wherever the arms stand.
func even(signal, idler, pairs float64) Expect {
	return func([]scan.AxisTarget, []scan.SettingTarget) (scan.Expected, error) {
		return scan.Expected{CountsHz: map[drivers.Channel]float64{"signal": signal, "idler": idler, "pairs": pairs}, AccidentalsHz: map[drivers.Channel]float64{"pairs": signal * idler * 4e-9},
			DarkHz: map[drivers.Channel]float64{"signal": 180, "idler": 220}}, nil
	}
}

func small() scan.Plan {
	return grid([3]float64{2.764, 2.964, 3}, [3]float64{2.364, 3.364, 5}, true)
}

func foreseen(t *testing.T, a Ask) *Forecast {
	t.Helper()
	if a.Begins.IsZero() {
		a.Begins = evening
	}
	if a.Bench.Axes == nil {
		a.Bench = arms()
	}
	f, err := Of(a)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func TestTheKindsOfTimeAddUpAndEveryVisitIsMade(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p := grid([3]float64{2.7, 3, float64(rapid.IntRange(1, 5).Draw(t, "signal"))}, [3]float64{2.4, 3.3, float64(rapid.IntRange(2, 6).Draw(t, "idler"))}, true)
		p.Repeat = scan.Repeat{Times: rapid.IntRange(1, 3).Draw(t, "times"), InPlace: rapid.Bool().Draw(t, "in place"), Shuffled: rapid.Bool().Draw(t, "shuffled"), Seed: 7}
		dwell := scan.Dwell{Time: 10 * time.Second, Slice: 10 * time.Second}
		every := rapid.IntRange(0, 9).Draw(t, "points between darks")
		p.Dark = &scan.Cadence{Dwell: dwell, EveryPoints: every, AtStart: rapid.Bool().Draw(t, "start"), AtEnd: rapid.Bool().Draw(t, "end")}
		p.Background = &scan.Background{Cadence: scan.Cadence{Dwell: dwell, Every: time.Duration(rapid.IntRange(1, 5).Draw(t, "minutes")) * time.Minute}, Axis: "plate", By: 45 * deg}
		a := Ask{Plan: p, Bench: arms(), Begins: evening, Expect: even(2e4, 5e5, 5e3)}
		f, err := Of(a)
		if err != nil {
			t.Fatal(err)
		}
		sum := f.Waiting + f.Moving + f.Settling + f.Counting + f.Beside + f.Overhead
		if sum != f.Duration || f.FinishesAt.Sub(f.BeginsAt.Time) != f.Duration.Duration() {
			t.Fatalf("%v in all; the kinds add up to %v", f.Duration, sum)
		}
		if want := len(p.Visits()); f.Visits != want || f.Counting.Duration() != time.Duration(want)*p.Dwell.Time {
			t.Fatalf("%d visits, counting %s; want %d", f.Visits, f.Counting.Duration(), want)
		}
		if want := time.Duration(f.Darks+f.Backgrounds) * 10 * time.Second; f.Beside.Duration() != want {
			t.Fatalf("%s beside the points; want %s", f.Beside.Duration(), want)
		}
		for i, row := range f.List() {
			if row.Visits != p.Repeat.Times || math.Abs(row.Singles["signal"]-8e4) > 1 {
				t.Fatalf("point %d: %d visits of %g counts; want %d of 80000", i, row.Visits, row.Singles["signal"], p.Repeat.Times)
			}
		}
	})
}

func TestWhatDoesNotFitBeforeTheEndIsLeftOutAndClosingReadingsStay(t *testing.T) {
	p := small()
	p.Repeat.Times = 100
	p.Dark = &scan.Cadence{Dwell: scan.Dwell{Time: 20 * time.Second, Slice: 20 * time.Second}, AtEnd: true}
	p.Schedule = scan.Schedule{NotBefore: evening.Add(10 * time.Minute), FinishBy: evening.Add(70 * time.Minute)}
	f := foreseen(t, Ask{Plan: p})
	if f.LeftOut == 0 || f.Visits+f.LeftOut != 1500 || f.Darks != 1 {
		t.Errorf("%d visits, %d left out, %d darks; want 1500 in all and the closing dark", f.Visits, f.LeftOut, f.Darks)
	}
	if late := f.FinishesAt.Sub(p.Schedule.FinishBy); late > 0 || late < -time.Minute {
		t.Errorf("over at %s; want just before %s", f.FinishesAt, p.Schedule.FinishBy)
	}
	if d := f.Waiting.Duration(); d < 9*time.Minute || d > 10*time.Minute {
		t.Errorf("%s of waiting; want about ten minutes", d)
	}
	demandWarning(t, f, fmt.Sprintf("%d of 1500 visits are left out", f.LeftOut))
}

func demandWarning(t *testing.T, f *Forecast, text string) {
	t.Helper()
	if !slices.ContainsFunc(f.Warnings, func(w string) bool { return strings.Contains(w, text) }) {
		t.Errorf("warnings %q; want one with %q", f.Warnings, text)
	}
}

// A dwell that ends on counts is as long as dwells that end on counts are.
func TestHeraldedDwellsLastAsLongAsDrawnOnes(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 6))
	for _, c := range []struct{ heralds, hz, most float64 }{{1000, 300, 20}, {1000, 333.4, 20}, {50, 17, 10}, {50, 2, 10}, {100000, 12500, 30}} {
		d := scan.Dwell{Time: time.Duration(c.most) * time.Second, Slice: time.Second, Heralds: uint64(c.heralds)}
		n, total := heraldedSlices(d, d.Slices(), c.hz)
		const trials = 4000
		sum := 0.0
		for range trials {
			counts := 0.0
			for s := 0.0; s < c.most && counts < c.heralds; s++ {
				counts += poissonOf(rng, c.hz)
				sum++
			}
		}
		if mean := sum / trials; math.Abs(n-mean) > 0.05 || math.Abs(total.Seconds()-n) > 1e-6 {
			t.Errorf("%g counts at %g /s: %.3f slices, %s; drawn ones take %.3f", c.heralds, c.hz, n, total, mean)
		}
	}
}

// poissonOf draws by exponential gaps where there are few, else by the normal limit.
func poissonOf(rng *rand.Rand, mean float64) float64 {
	if mean > 300 {
		return math.Round(mean + math.Sqrt(mean)*rng.NormFloat64())
	}
	n := -1.0
	for at := 0.0; at < mean; n++ {
		at += rng.ExpFloat64()
	}
	return math.Max(n, 0)
}

func TestWarningsSayWhatIsWrongAndWhere(t *testing.T) {
	shallow := func(axes []scan.AxisTarget, s []scan.SettingTarget) (scan.Expected, error) {
		x, err := even(2e4, 5e5, 5e3)(axes, s)
		x.CountsHz["pairs"] = 100 * axes[1].Angle.Degrees()
		return x, err
	}
	peak := []scan.Result{{Kind: scan.Peak, Of: "pairs", Along: "idler_arm"}}
	for _, c := range []struct {
		name   string
		change func(*Ask)
		want   string
	}{
		{"beyond a limit", func(a *Ask) { a.Plan.Points[7].Axes[1].Angle = 13 * deg }, "point 7: idler_arm: 13 deg is beyond the soft limits"},
		{"in a keep-out", func(a *Ask) {
			a.Bench.KeepOuts = []scan.KeepOut{{Name: "lamp", Range: &scan.Range{Span: scan.Span{Axis: "idler_arm", Low: 31 * deg / 10, High: 32 * deg / 10}}}}
			a.Plan.Points[4].Axes[1].Angle = 315 * deg / 100
		}, `"lamp"`},
		{"above the trip rate", func(a *Ask) { a.Expect = even(2e4, 3e6, 5e3) }, "idler would count 3 000 000 /s at point 0, above its trip rate of 2 000 000 /s; so at 15 points"},
		{"below the floor", func(a *Ask) { a.Expect = even(3, 5e5, 1) }, "signal would count 3 /s at point 0, below half of its floor"},
		{"a dead time that matters", func(a *Ask) { a.Bench.Detectors[1].DeadTimeS = 300e-9 }, "count rate times dead time of idler is 0.150 at point 0, above 0.1"},
		{"a counter that runs over", func(a *Ask) { a.Bench.Counter.Bits = 16 }, "channel idler would count 1 000 000 in a gate of 2 s at point 0, beyond the counter's 16 bits: 65 536; want slices of 0.131 s at most"},
		{"accidental coincidences", func(a *Ask) { a.Expect = even(2e5, 1e6, 5e3) }, "16 % of the coincidences on pairs are accidental at point 0"},
		{"a span that misses the peak", func(a *Ask) { a.Plan.Results, a.Expect = peak, shallow }, "the span of idler_arm, 2.364 to 3.364 deg, misses the peak: the most counts of pairs (336 /s) are at its upper end"},
		{"a point without emission", func(a *Ask) {
			a.Plan.Points[3].Empty, a.Plan.Points[4].Empty = "ring closed at 3 deg", "ring closed at 3 deg"
		}, "no emission at 2 points, from point 3 on: ring closed at 3 deg"},
		{"a filter that does not pass the partners", func(a *Ask) {
			a.Band = &Band{PumpNm: 405, Names: [2]string{"signal", "idler"}, CentreNm: [2]float64{780, 810}, WidthNm: [2]float64{10, 20}}
		}, // 405·785/380 and 405·775/370.
			"the filter of idler passes 800.00 to 820.00 nm, the band that signal heralds is 836.64 to 848.31 nm"},
		{"a detector that nothing protects", func(a *Ask) { a.Bench.Detectors[0].ProtectBy = "" }, "the detector signal cannot be protected"},
		{"a value that is still open", func(a *Ask) {
			a.Plan.Earlier = []scan.Earlier{{Ask: scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm", From: "Find the ring"}, Missing: "no run of that title"}}
		}, `provisional: no peak of signal_arm from "Find the ring" yet (no run of that title)`},
		{"counts that are not reached", func(a *Ask) {
			a.Plan.Dwell.Heralds, a.Plan.Dwell.Trigger = 100_000, "signal"
		}, "100000 counts of signal are not reached within 4 s at 15 points"},
		{"a warm-up", func(a *Ask) {
			a.Plan.Schedule.WarmUp = &scan.WarmUp{Steady: []scan.Steady{{Over: time.Minute}}, AtMost: time.Hour}
		}, "it may last 1 h"},
		{"zeros that are verified", func(a *Ask) { a.Bench.Axes[1].Verify = &scan.Verify{Every: 30 * time.Second} }, "the zeros of idler_arm are verified about 4 times"},
		{"optics that are not described", func(a *Ask) { a.Expect = nil }, "does not describe the optics"},
		{"rates that cannot be told", func(a *Ask) {
			a.Expect = func([]scan.AxisTarget, []scan.SettingTarget) (scan.Expected, error) {
				return scan.Expected{}, errors.New("no such crystal")
			}
		}, "no rates at point 0: no such crystal"},
	} {
		t.Run(c.name, func(t *testing.T) {
			a := Ask{Plan: small(), Bench: arms(), Expect: even(2e4, 5e5, 5e3)}
			if quiet := foreseen(t, a); len(quiet.Warnings) != 0 {
				t.Fatalf("warnings %q of a sound recipe; want none", quiet.Warnings)
			}
			c.change(&a)
			f := foreseen(t, a)
			demandWarning(t, f, c.want)
			if !strings.Contains(strings.Join(strings.Fields(f.Text()), " "), c.want) {
				t.Errorf("the text does not say it:\n%s", f.Text())
			}
		})
	}
}

// counted is a result whose variance is a/L + b/B and a floor: what the estimate of an efficiency
// comes to, with numbers that can be checked by hand.
func counted(a, b, floor float64) func(estimate.Rows) ([]estimate.Result, error) {
	return func(rows estimate.Rows) ([]estimate.Result, error) {
		light, beside := 0.0, 0.0
		for _, r := range rows.Readings {
			switch r.Kind {
			case protocol.Light:
				light += r.Gate.Duration().Seconds()
			case protocol.Background:
				beside += r.Gate.Duration().Seconds()
			}
		}
		value, vl, vb := 0.5, a/light, b/beside
		u := math.Sqrt(vl + vb + floor*floor)
		return []estimate.Result{{Kind: "efficiency", Unit: "1", Value: &value, U: &u, Budget: []estimate.Row{
			{Quantity: "coincidences", Symbol: "C", Evaluation: estimate.TypeA, Contribution: math.Sqrt(vl)},
			{Quantity: "background within the trigger counts", Symbol: "B", Evaluation: estimate.TypeA, Contribution: math.Sqrt(vb)},
			{Quantity: "path: lens (photometer)", Evaluation: estimate.TypeB, Contribution: floor},
		}}}, nil
	}
}

func TestAnAimIsReachedByTheDwellItSays(t *testing.T) {
	p := small()
	p.Results = []scan.Result{{Kind: scan.Efficiency, Trigger: "signal", UnderTest: "idler"}}
	p.Background = &scan.Background{Cadence: scan.Cadence{Dwell: scan.Dwell{Time: 20 * time.Second, Slice: 20 * time.Second}, AtStart: true, AtEnd: true}, Axis: "plate", By: 45 * deg}
	ask := Ask{Plan: p, Expect: even(2e4, 5e5, 5e3), Results: counted(4e-3, 1e-3, 1e-3)}
	aim, err := ParseAim("0.4 %")
	if err != nil {
		t.Fatal(err)
	}
	ask.Aim = &aim
	f := foreseen(t, ask)
	m := f.Aim
	if !m.Reachable || m.Wanted != 0.002 || m.Uncertainty == nil || *m.Uncertainty > 0.002 || *m.Uncertainty < 0.0018 {
		t.Fatalf("%+v, %v; want it reached, and not by much more than is needed", *m, m.Uncertainty)
	}
	// √b/(√a+√b) with a = 4, b = 1.
	if math.Abs(*m.BestShare-1.0/3) > 1e-9 || math.Abs(*m.Share-40.0/100) > 1e-9 {
		t.Errorf("best share %g of now %g; want a third of two fifths", *m.BestShare, *m.Share)
	}
	// L = √a(√a+√b)/v with v = 0.002² - 0.001².
	light := math.Sqrt(4e-3) * (math.Sqrt(4e-3) + math.Sqrt(1e-3)) / 3e-6
	if got := 15 * m.Dwell.Duration().Seconds(); got < light || got > light+15 {
		t.Errorf("light for %.0f s; want %.0f", got, light)
	}
	// No other split of the same time does better.
	beside := 2 * m.Beside.Duration().Seconds()
	total := 15*m.Dwell.Duration().Seconds() + beside
	for _, b := range []float64{0.8 * beside, 1.25 * beside} {
		if v, best := 4e-3/(total-b)+1e-3/b, 4e-3/(total-beside)+1e-3/beside; v < best {
			t.Errorf("%g s of background give a variance of %g; the best is said to be %g", b, v, best)
		}
	}
	aim, _ = ParseAim("0.1 %")
	f = foreseen(t, ask)
	if f.Aim.Reachable || f.Aim.Because != "unreachable, because the floor is 0.2 %: path" {
		t.Errorf("%+v; want it unreachable because of the path", *f.Aim)
	}
}

func TestAnUncertaintyIsPartedIntoCountingAndFloor(t *testing.T) {
	p := small()
	p.Results = []scan.Result{{Kind: scan.Efficiency, Trigger: "signal", UnderTest: "idler"}}
	p.Background = &scan.Background{Cadence: scan.Cadence{Dwell: scan.Dwell{Time: 20 * time.Second, Slice: 20 * time.Second}, AtStart: true}, Axis: "plate", By: 45 * deg}
	f := foreseen(t, Ask{Plan: p, Expect: even(2e4, 5e5, 5e3), Results: counted(60*16e-6, 0, 3e-3)})
	if r := f.Results[0]; math.Abs(*r.Counting-4e-3) > 1e-12 || math.Abs(*r.Floor-3e-3) > 1e-12 || math.Abs(*f.Uncertainty-5e-3) > 1e-12 || *f.Floor != *r.Floor {
		t.Errorf("%g from counting, %g floor, %g in all; want 0.004, 0.003, 0.005", *r.Counting, *r.Floor, *f.Uncertainty)
	}
	if want := "15 points, 1 min 34 s, done at 21:06; efficiency of idler to 1 % (0.8 % from counting, 0.6 % floor: path)."; f.Sentence != want {
		t.Errorf("%q; want %q", f.Sentence, want)
	}
}

func TestAimsThatMeanNothingAreRefused(t *testing.T) {
	for _, text := range []string{"", "0.5", "0 %", "-1 %", "3 mW", "soon"} {
		if _, err := ParseAim(text); err == nil {
			t.Errorf("%q is taken for an aim", text)
		}
	}
	if a, err := ParseAim("0.01 deg"); err != nil || a.Absolute != 0.01 {
		t.Errorf("0.01 deg: %+v, %v", a, err)
	}
}

func TestAPictureIsWholeAndSaysTheSentence(t *testing.T) {
	p := small()
	p.Title = "a < b & c"
	p.Dark = &scan.Cadence{Dwell: scan.Dwell{Time: 10 * time.Second, Slice: 10 * time.Second}, AtStart: true, AtEnd: true}
	f := foreseen(t, Ask{Plan: p, Expect: even(2e4, 5e5, 5e3)})
	var b bytes.Buffer
	if err := f.Draw(&b); err != nil {
		t.Fatal(err)
	}
	picture := b.String()
	d := xml.NewDecoder(&b)
	for {
		if _, err := d.Token(); err == io.EOF {
			break
		} else if err != nil {
			t.Fatal(err)
		}
	}
	for _, want := range []string{"15 points", "notch: dark", ">S<", ">I<", "stroke-dasharray"} {
		if !strings.Contains(picture, want) {
			t.Errorf("the picture has no %q", want)
		}
	}
	if strings.Contains(picture, "NaN") || strings.Contains(picture, "Inf") {
		t.Error("the picture has numbers that are none")
	}
}

// What is taken from an earlier, equal reading is what would be worked out anew.
func TestHabitsChangeNothing(t *testing.T) {
	saved := 0
	rapid.Check(t, func(t *rapid.T) {
		p := grid([3]float64{2.7, 3.1, float64(rapid.IntRange(1, 5).Draw(t, "signal"))}, [3]float64{2.4, 3.3, float64(rapid.IntRange(2, 6).Draw(t, "idler"))}, rapid.Bool().Draw(t, "serpentine"))
		p.Repeat.Times, p.Repeat.InPlace = rapid.IntRange(1, 3).Draw(t, "times"), rapid.Bool().Draw(t, "in place")
		p.Repeat.Shuffled = rapid.Bool().Draw(t, "shuffled")
		p.Dwell = scan.Dwell{Time: 5 * time.Second, Slice: time.Duration(rapid.IntRange(1, 5).Draw(t, "slice")) * time.Second}
		dwell := scan.Dwell{Time: 3 * time.Second, Slice: 3 * time.Second}
		p.Dark = &scan.Cadence{Dwell: dwell, EveryPoints: rapid.IntRange(1, 9).Draw(t, "points between darks")}
		p.Background = &scan.Background{Cadence: scan.Cadence{Dwell: dwell, Every: time.Minute, AtEnd: true}, Axis: "plate", By: 45 * deg}
		b := arms()
		var all [2][]taken
		var spent [2]Spent
		for k := range all {
			c, err := newCourse(&p, &b)
			if err != nil {
				t.Fatal(err)
			}
			c.anew = k == 1
			c.run(evening, nil, func(r *taken) {
				one := *r
				one.at = slices.Clone(r.at)
				all[k] = append(all[k], one)
			})
			spent[k] = c.spent
			saved += len(c.habits)
		}
		if !reflect.DeepEqual(all[0], all[1]) || spent[0] != spent[1] {
			t.Fatalf("%d readings in %+v by habit; %d in %+v anew", len(all[0]), spent[0], len(all[1]), spent[1])
		}
	})
	if saved == 0 {
		t.Error("no habit was ever formed")
	}
}

func million(serpentine bool) scan.Plan {
	const n = 1000
	p := scan.Plan{Title: "a million", Dwell: scan.Dwell{Time: time.Second, Slice: time.Second}, Repeat: scan.Repeat{Times: 1, Serpentine: serpentine},
		Dark: &scan.Cadence{Dwell: scan.Dwell{Time: 10 * time.Second, Slice: 10 * time.Second}, EveryPoints: 500, AtStart: true, AtEnd: true}}
	targets := make([]scan.AxisTarget, 0, 2*n*n)
	for s := range n {
		for i := range n {
			k := i
			if serpentine && s%2 == 1 {
				k = n - 1 - i
			}
			targets = append(targets, scan.AxisTarget{Axis: "signal_arm", Angle: 2*deg + unit.Angle(s)*deg/500}, scan.AxisTarget{Axis: "idler_arm", Angle: 2*deg + unit.Angle(k)*deg/500})
			p.Points = append(p.Points, scan.Point{Axes: targets[len(targets)-2:]})
		}
	}
	return p
}

func BenchmarkGeometryAndTimeOfAMillionPoints(b *testing.B) {
	p, bench := million(true), arms()
	b.ReportAllocs()
	for b.Loop() {
		c, err := newCourse(&p, &bench)
		if err != nil {
			b.Fatal(err)
		}
		c.run(evening, nil, nil)
	}
}
