package source

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"
)

// overlap is the share of a normal distribution of arrival times, displaced by a delay, that lies
// within a window, by Simpson's rule over the window.
func overlap(window, jitter, delay float64) float64 {
	const steps = 2000
	h := window / steps
	density := func(t float64) float64 {
		return math.Exp(-(t-delay)*(t-delay)/(2*jitter*jitter)) / (jitter * math.Sqrt(2*math.Pi))
	}
	sum := density(-window/2) + density(window/2)
	for k := 1; k < steps; k++ {
		sum += density(-window/2+float64(k)*h) * float64(2+2*(k%2))
	}
	return sum * h / 3
}

func TestADelayLeavesTheShareOfPairsThatTheWindowStillOverlaps(t *testing.T) {
	o := bench(t)
	o.Counter.WindowS, o.Counter.JitterS = 4e-9, 0.35e-9
	m := model(t, o)
	p := atPeak()
	centred := m.Expected(m.Rates(p))
	for _, delay := range []float64{-3e-9, -2e-9, -1.7e-9, 0, 0.5e-9, 1.9e-9, 2.3e-9, 2.7e-9, 20e-9} {
		p.DelayS = delay
		r := m.Expected(m.Rates(p))
		got := r.TrueHz / centred.TrueHz
		want := overlap(4e-9, 0.35e-9, delay) / overlap(4e-9, 0.35e-9, 0)
		if math.Abs(got-want) > 1e-9 {
			t.Errorf("at %g ns %.9f of the pairs are left; want %.9f", delay*1e9, got, want)
		}
		if r.SignalHz != centred.SignalHz || r.IdlerHz != centred.IdlerHz {
			t.Errorf("at %g ns singles %g and %g; want them as they are without a delay", delay*1e9, r.SignalHz, r.IdlerHz)
		}
	}
}

// One gate at three delays, so that the events' own delays must be right, too.
func TestEventsAtADelayAreCountedAsOftenAsExpected(t *testing.T) {
	statistics(t)
	o := bench(t)
	o.Counter.WindowS, o.Counter.JitterS = 4e-9, 0.5e-9
	m := model(t, o)
	var segments []Segment
	want, coarse := 0.0, 0.0
	for _, delay := range []float64{0, 1.8e-9, 2.4e-9} {
		r := Rates{SignalHz: 4e5, IdlerHz: 5e5, PairsHz: 2e5, DelayS: delay}
		segments = append(segments, Segment{For: time.Second, Rates: r})
		e := m.Expected(r)
		want += e.TrueHz + e.AccidentalHz
	}
	rng := rand.New(rand.NewPCG(7, 9))
	got := float64(m.DrawEvents(rng, segments).Coincidences)
	coarse = float64(m.Draw(rng, segments).Coincidences)
	if math.Abs(got-want) > 4*math.Sqrt(want) || math.Abs(coarse-want) > 4*math.Sqrt(want) {
		t.Errorf("%.0f coincidences event by event and %.0f drawn; want %.0f within %.0f", got, coarse, want, 4*math.Sqrt(want))
	}
}

func TestAnIrisOfAnotherSizeIsABenchBuiltWithIt(t *testing.T) {
	o := bench(t)
	o.PairHzPerMw, o.NonlinearPmPerV = 0, 2 // an absolute scale that knows nothing of apertures
	o.Signal.Aperture, o.Idler.Aperture = Iris, Iris
	p := atPeak()
	p.RoomHz = [2]float64{500, 700}
	m := model(t, o)
	for _, radius := range [][2]float64{{0.8, 0}, {0, 1.5}, {2, 2.5}} {
		t.Run(fmt.Sprintf("%g and %g mm", radius[0], radius[1]), func(t *testing.T) {
			built := o
			area := [2]float64{1, 1}
			for i, arm := range []*Arm{&built.Signal, &built.Idler} {
				if radius[i] > 0 {
					area[i] = radius[i] * radius[i] / (arm.RadiusMm * arm.RadiusMm)
					arm.RadiusMm = radius[i]
					arm.FluorescenceHzPerW, arm.StrayHzPerW = arm.FluorescenceHzPerW*area[i], arm.StrayHzPerW*area[i]
				}
			}
			q, r := p, p
			q.RadiusMm = radius
			r.RoomHz = [2]float64{p.RoomHz[0] * area[0], p.RoomHz[1] * area[1]}
			got, want := m.Exact(q), model(t, built).Exact(r)
			table := m.Rates(q)
			for _, c := range []struct {
				name                 string
				got, tabulated, want float64
			}{{"signal", got.SignalHz, table.SignalHz, want.SignalHz}, {"idler", got.IdlerHz, table.IdlerHz, want.IdlerHz}, {"pairs", got.PairsHz, table.PairsHz, want.PairsHz}} {
				if math.Abs(c.got/c.want-1) > 1e-12 || math.Abs(c.tabulated/c.want-1) > 0.01 {
					t.Errorf("%s %g /s, tabulated %g; want %g", c.name, c.got, c.tabulated, c.want)
				}
			}
		})
	}
}

func TestADetectorsGainChangesItsOwnLightAndNoDarkCounts(t *testing.T) {
	o := bench(t)
	m := model(t, o)
	p := atPeak()
	before := m.Rates(p)
	p.Gain = [2]float64{-0.2, 0}
	r := m.Rates(p)
	dark := o.Signal.Detector.DarkHz
	if got, want := r.SignalHz-dark, 0.8*(before.SignalHz-dark); math.Abs(got/want-1) > 1e-12 {
		t.Errorf("%g /s of light at four fifths; want %g", got, want)
	}
	if got, want := r.PairsHz, 0.8*before.PairsHz; math.Abs(got/want-1) > 1e-12 || r.IdlerHz != before.IdlerHz {
		t.Errorf("%g pairs and %g idler counts; want %g and %g", got, r.IdlerHz, want, before.IdlerHz)
	}
	p.Gain = [2]float64{100, -2}
	if r := m.Rates(p); math.Abs((r.SignalHz-dark)/(before.SignalHz-dark)*o.Signal.Detector.Efficiency-1) > 1e-12 || r.PairsHz != 0 || r.IdlerHz != o.Idler.Detector.DarkHz {
		t.Errorf("%+v; want a perfect signal detector and a blind idler one", r)
	}
}

// A spacer between two mirrors of index n passes what fits into its way across, n d cos(angle inside).
func TestATiltedFilterPassesWhatFitsIntoItsSpacer(t *testing.T) {
	for _, c := range []struct{ angle, index float64 }{{0, 2.1}, {8, 2.1}, {20, 1.45}, {45, 3.2}} {
		inside := math.Asin(math.Sin(c.angle*math.Pi/180) / c.index)
		f := Filter{CentreNm: 812, WidthNm: 10, Shape: FilterFlat}.Tilted(c.angle, c.index)
		if want := 812 * math.Cos(inside); math.Abs(f.CentreNm-want) > 1e-9 || math.Abs(f.WidthNm/f.CentreNm-10./812) > 1e-12 {
			t.Errorf("at %g deg %.6f nm, %.6f wide; want %.6f and the same share of it", c.angle, f.CentreNm, f.WidthNm, want)
		}
	}
}

func TestTheWavePlateMakesUpForATurnedPolarisation(t *testing.T) {
	o := bench(t)
	right := model(t, o).Rates(atPeak()).PairsHz
	o.PumpOffDeg = 30
	m := model(t, o)
	for plate, share := range map[float64]float64{0: 0.75, 15: 1, -30: 0, 37.5: 0.5} {
		p := atPeak()
		p.WaveplateDeg = plate
		if got := m.Rates(p).PairsHz; math.Abs(got-share*right) > 1e-9*right {
			t.Errorf("plate at %g deg: %.3f pairs a second; want %.3f", plate, got, share*right)
		}
	}
}
