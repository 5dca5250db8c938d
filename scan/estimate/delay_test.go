package estimate

import (
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/sim/source"
)

// delayWorld draws the times of single pairs: no formula of the fit's is in it.
type delayWorld struct {
	centreNs, widthNs, jitterNs float64
	pairs                       float64 // in a reading, both recorded
	signal, idler, gateS        float64 // singles in a reading
	from, to, stepNs            float64
	drift                       float64 // of the pump, relative, over the scan
}

func (w delayWorld) scan(r *rand.Rand) Rows {
	rows := Rows{Run: "20310203T210000-delay"}
	n := int(math.Round((w.to - w.from) / w.stepNs))
	for i := range n + 1 {
		at := w.from + float64(i)*w.stepNs
		pump := 1 + w.drift*float64(i)/float64(n)
		in := 0
		pairs := int(drawPoisson(r, w.pairs*pump))
		for range pairs {
			if math.Abs(at-w.centreNs+w.jitterNs*r.NormFloat64()) <= w.widthNs/2 {
				in++
			}
		}
		g := gateCounts{s: pairs + int(drawPoisson(r, w.signal*pump-w.pairs*pump)), d: pairs + int(drawPoisson(r, w.idler*pump-w.pairs*pump))}
		g.pairs = in + int(drawPoisson(r, w.signal*w.idler*pump*pump*w.widthNs*1e-9/w.gateS))
		one := row(int64(i+1), protocol.Light, testStart, w.gateS, []gateCounts{g}, EveryPair)
		one.Settings = []protocol.Setting{{Name: "delay", Target: at, Before: at, After: at, Unit: "ns"}}
		rows.Readings = append(rows.Readings, one)
	}
	return rows
}

// undying is skerry with detectors that are never dead.
func undying() Bench {
	b := skerry(EveryPair)
	for i := range b.Arms {
		b.Arms[i].DeadTime = Constant{}
	}
	return b
}

func plainDelay() delayWorld {
	return delayWorld{centreNs: 2.3, widthNs: 4, jitterNs: 0.35, pairs: 4000, signal: 30000, idler: 26000, gateS: 0.5, from: -6, to: 10, stepNs: 0.25}
}

func TestDelayScansOfSingleTimesGiveTheWindowBack(t *testing.T) {
	statistics(t)
	times := 24
	if *long {
		times = 2000
	}
	for k, c := range []struct {
		name   string
		change func(*delayWorld)
	}{
		{"soft edges, many counts", func(*delayWorld) {}},
		{"a pump that drifts by a tenth", func(w *delayWorld) { w.drift = 0.1 }},
		{"few counts", func(w *delayWorld) { w.pairs, w.signal, w.idler = 60, 900, 800 }},
		{"jitter as wide as the window", func(w *delayWorld) { w.jitterNs = 1.5 }},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			inCentre, inWidth, inCapture, miss := 0, 0, 0, 0.0
			for i := range times {
				r := rand.New(rand.NewPCG(uint64(700+k), uint64(i)))
				w := plainDelay()
				c.change(&w)
				w.centreNs += r.Float64() - 0.5
				operating := w.centreNs + 0.8
				res, err := Delay(w.scan(r), undying(), DelayQuestion{Channel: "pairs", Setting: "delay", Operating: &operating, Trials: 1})
				if err != nil {
					t.Fatal(err)
				}
				d := res.Delay
				miss += (*res.Value - w.centreNs) / *res.U / float64(times)
				within := func(v, truth, u float64) int {
					if math.Abs(v-truth) <= 1.96*u {
						return 1
					}
					return 0
				}
				inCentre += within(*res.Value, w.centreNs, *res.U)
				inWidth += within(d.WidthS/nano, w.widthNs, d.WidthU/nano)
				s := math.Sqrt2 * w.jitterNs
				if truth := (math.Erf((w.widthNs/2-0.8)/s) + math.Erf((w.widthNs/2+0.8)/s)) / 2; d.CaptureIn.Low <= truth && truth <= d.CaptureIn.High {
					inCapture++
				}
			}
			for name, n := range map[string]int{"centre": inCentre, "width": inWidth, "capture": inCapture} {
				share := float64(n) / float64(times)
				t.Logf("%s: %.2f %% covered, mean miss of the centre %+.3f u", name, 100*share, miss)
				low, high := 0.935, 0.97
				if !*long {
					low, high = 0.95-3.5*math.Sqrt(0.95*0.05/float64(times)), 1
				}
				if share < low || share > high {
					t.Errorf("%s: %.2f %% covered; want %.1f to %.1f %%", name, 100*share, 100*low, 100*high)
				}
			}
		})
	}
}

func TestADelaySaysWhatTheWindowIs(t *testing.T) {
	w := plainDelay()
	res, err := Delay(w.scan(rand.New(rand.NewPCG(71, 1))), undying(), DelayQuestion{Channel: "pairs", Setting: "delay", Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	if res.Unit != "ns" || len(res.Residuals) != 65 || res.Residuals[0].AngleDeg != nil || len(res.Budget) != 1 || len(res.Warnings) != 0 {
		t.Errorf("unit %q, %d residuals, %d rows, warnings %q", res.Unit, len(res.Residuals), len(res.Budget), res.Warnings)
	}
	d := res.Delay
	near(t, "jitter", d.JitterS/nano, 0.35, 4**d.JitterU/nano)
	near(t, "pairs a second", d.PairsHz, 8000, 200)
	near(t, "the floor's own window", *d.ByFloorS/nano, 4, 4**d.ByFloorU/nano)
	if rate, _ := res.Lines(); rate == nil || math.Abs(rate(2.3e-9)-8000-d.BelowHz) > 300 {
		t.Error("the fitted profile is not what it is at its centre")
	}
	for _, part := range []string{"full width", "jitter", "for the counter in the bench file", "no operating delay is declared", "delay/ns"} {
		if !strings.Contains(res.Text(), part) {
			t.Errorf("no %q in\n%s", part, res.Text())
		}
	}
}

// Detectors that a pair makes dead miss chance partners on one side more than on the other: by the
// house's simulator of single events, whose heralds have a partner in 30 % and in 5 % of cases.
func TestDeadTimesMakeTwoFloors(t *testing.T) {
	statistics(t)
	o := ringOptics(t)
	o.Counter = source.Counter{WindowS: 4e-9, JitterS: 0.4e-9, Logic: source.EveryPair}
	for _, arm := range []*source.Arm{&o.Signal, &o.Idler} {
		arm.Detector = source.Detector{Efficiency: 0.6, DeadTimeS: 45e-9, Model: source.NonParalysable}
	}
	m, err := source.New(o)
	if err != nil {
		t.Fatal(err)
	}
	r := rand.New(rand.NewPCG(75, 1))
	rows := Rows{Run: "20310203T210000-floors"}
	for i := range 41 {
		at := float64(i)*0.4 - 8
		c := m.DrawEvents(r, []source.Segment{{For: 200 * time.Millisecond, Rates: source.Rates{SignalHz: 1e5, IdlerHz: 6e5, PairsHz: 3e4, DelayS: at * 1e-9}}})
		one := row(int64(i+1), protocol.Light, testStart, 0.2, []gateCounts{{s: int(c.Signal), d: int(c.Idler), pairs: int(c.Coincidences)}}, EveryPair)
		one.Settings = []protocol.Setting{{Name: "delay", Target: at, Before: at, After: at, Unit: "ns"}}
		rows.Readings = append(rows.Readings, one)
	}
	b := skerry(EveryPair)
	b.Arms[1].DeadTime = b.Arms[0].DeadTime
	res, err := Delay(rows, b, DelayQuestion{Channel: "pairs", Setting: "delay", Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	d := res.Delay
	near(t, "centre", *res.Value, 0, 4**res.U)
	near(t, "width", d.WidthS/nano, 4, 4*d.WidthU/nano)
	near(t, "jitter", d.JitterS/nano, 0.4, 4**d.JitterU/nano)
	near(t, "the floors' window", *d.ByFloorS/nano, 4, 4**d.ByFloorU/nano)
	if apart := math.Abs(d.AboveHz-d.BelowHz) / math.Hypot(d.AboveU, d.BelowU); apart < 5 {
		t.Errorf("floors %g ± %g and %g ± %g /s; want two", d.BelowHz, d.BelowU, d.AboveHz, d.AboveU)
	}
	if len(res.Warnings) != 0 {
		t.Errorf("warnings %q", res.Warnings)
	}
}

func TestDelaysFindWhatTheBenchFileHasWrong(t *testing.T) {
	w := plainDelay()
	w.widthNs = 5
	operating := w.centreNs + 2.4
	res, err := Delay(w.scan(rand.New(rand.NewPCG(72, 1))), undying(), DelayQuestion{Channel: "pairs", Setting: "delay", Operating: &operating, Trials: 1})
	if err != nil {
		t.Fatal(err)
	}
	all := strings.Join(res.Warnings, "\n")
	if !strings.Contains(all, "the full window is 4.99") || !strings.Contains(all, "captures") {
		t.Errorf("warnings %q; want to be told of window and capture", all)
	}
}

func TestSharpEdgesCarryTheStepOfTheSweep(t *testing.T) {
	statistics(t)
	inside := 0
	const times = 40
	for i := range times {
		r := rand.New(rand.NewPCG(73, uint64(i)))
		w := plainDelay()
		w.jitterNs, w.stepNs, w.widthNs = 0.002, 0.5, 3.8
		w.centreNs += r.Float64()
		res, err := Delay(w.scan(r), undying(), DelayQuestion{Channel: "pairs", Setting: "delay", Trials: 1})
		if err != nil {
			t.Fatal(err)
		}
		if res.Delay.JitterU != nil || *res.U < 0.05 {
			t.Fatalf("u %g ns, jitter ± %v; want the step's uncertainty and no jitter", *res.U, res.Delay.JitterU)
		}
		if math.Abs(*res.Value-w.centreNs) <= 1.96**res.U && math.Abs(res.Delay.WidthS/nano-w.widthNs) <= 1.96*res.Delay.WidthU/nano {
			inside++
		}
	}
	if inside < times*85/100 {
		t.Errorf("%d of %d inside; want the step to be in the uncertainty", inside, times)
	}
}

func TestADelayIsRefusedWithWhatToDo(t *testing.T) {
	whole := plainDelay()
	cut := whole
	cut.from = whole.centreNs
	dark := whole
	dark.pairs, dark.signal, dark.idler = 0, 0, 0
	steps := whole.scan(rand.New(rand.NewPCG(74, 1)))
	for i := range steps.Readings {
		steps.Readings[i].Settings[0].Unit = "mm"
	}
	for _, c := range []struct {
		name, want string
		rows       Rows
		q          DelayQuestion
	}{
		{"half a window", "ends on the floor beside", cut.scan(rand.New(rand.NewPCG(74, 2))), DelayQuestion{Channel: "pairs", Setting: "delay"}},
		{"no light", "want light", dark.scan(rand.New(rand.NewPCG(74, 3))), DelayQuestion{Channel: "pairs", Setting: "delay"}},
		{"singles", "counts no coincidences", steps, DelayQuestion{Channel: "signal", Setting: "delay"}},
		{"a length", "want a time", steps, DelayQuestion{Channel: "pairs", Setting: "delay"}},
		{"another setting", "no setting", steps, DelayQuestion{Channel: "pairs", Setting: "bias"}},
		{"nothing", "no light reading", Rows{Run: "x"}, DelayQuestion{Channel: "pairs", Setting: "delay"}},
	} {
		_, err := Delay(c.rows, undying(), c.q)
		var no *Refusal
		if !errors.As(err, &no) || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v; want %q", c.name, err, c.want)
		}
	}
}
