package bench

import (
	"math"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/sim/source"
)

// overlap is the share of a normal distribution that lies within a window it is displaced in, by
// the trapezoidal rule.
func overlap(window, jitter, displaced float64) (share float64) {
	const steps = 4000
	for k := range steps + 1 {
		t := -window/2 + window*float64(k)/steps - displaced
		weight := 1.0
		if k == 0 || k == steps {
			weight = 0.5
		}
		share += weight * math.Exp(-t*t/(2*jitter*jitter))
	}
	return share * window / steps / (jitter * math.Sqrt(2*math.Pi))
}

// onTheRing is a simulated bench with settings whose arms stand where pairs go, its shutters open.
func onTheRing(t *testing.T) (*Bench, *source.Model, func(name drivers.DeviceName, value float64), func() map[drivers.Channel]uint64) {
	t.Helper()
	text := strings.ReplaceAll(withSettings(t, "", ""), "start: 1 deg}", "start: 2.864 deg}")
	text = strings.Replace(text, "    power_wander: {amplitude: 0.4 %, period: 40 min}\n", "", 1)
	text = strings.Replace(text, "    temperature_wander: {amplitude: 0.05 K, period: 25 min}\n", "", 1)
	f := parse(t, text)
	b, _ := live(t, f, VirtualOptions{})
	connectAll(t, b)
	shutters := []drivers.Shutter{b.Pump}
	for _, d := range b.Detectors {
		shutters = append(shutters, d.Protect)
	}
	for _, s := range shutters {
		if err := s.Open(t.Context()); err != nil {
			t.Fatal(err)
		}
	}
	model, err := TruthModel(f)
	if err != nil {
		t.Fatal(err)
	}
	set := func(name drivers.DeviceName, value float64) {
		t.Helper()
		for _, s := range b.Settings {
			if s.Name() == name {
				if _, err := s.Set(t.Context(), value); err != nil {
					t.Fatal(err)
				}
			}
		}
	}
	count := func() map[drivers.Channel]uint64 {
		t.Helper()
		gate, err := b.Counter.Count(t.Context(), 20*time.Second)
		if err != nil {
			t.Fatal(err)
		}
		return gate.Counts
	}
	return b, model, set, count
}

func TestADelayScanFindsTheWindowThatIsThere(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b, _, set, count := onTheRing(t)
		accidentals := func(n map[drivers.Channel]uint64) float64 {
			return float64(n["signal"]) * float64(n["idler"]) / 20 * 4e-9
		}
		centred := count()
		whole := float64(centred["pairs"]) - accidentals(centred)
		for _, ns := range []float64{14.42, 16.42, 16.9, 18.42, 20.1, 20.42, 20.9, 24} {
			set("delay", ns)
			n := count()
			want := whole*overlap(4e-9, 0.35e-9, (ns-18.42)*1e-9) + accidentals(n)
			if u := math.Sqrt(want + whole); math.Abs(float64(n["pairs"])-want) > 4*u {
				t.Errorf("%g ns: %d coincidences; want %.0f within %.0f", ns, n["pairs"], want, 4*u)
			}
			if drop := math.Abs(float64(n["signal"]) - float64(centred["signal"])); drop > 5*math.Sqrt(2*float64(centred["signal"])) {
				t.Errorf("%g ns: the signal's singles changed by %.0f; want a delay to leave them", ns, drop)
			}
		}
		if v, err := b.Settings[0].Get(t.Context()); err != nil || math.Abs(v-24) > 0.002 {
			t.Errorf("the delay reads %g ns, %v; want 24", v, err)
		}
	})
}

// Power, temperature, iris and bias against the model of the same truth at a pose written out here.
func TestSettingsDoToTheCountsWhatTheirKindSays(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b, model, set, count := onTheRing(t)
		pose := source.Pose{SignalDeg: 2.864, IdlerDeg: 2.864, PumpW: 0.045, PumpNm: 405, CrystalCel: 20, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1, RoomHz: [2]float64{900, 1100}}
		check := func(name string, p source.Pose) {
			t.Helper()
			n, r := count(), model.Expected(model.Exact(p))
			for _, c := range []struct {
				channel drivers.Channel
				hz      float64
			}{{"signal", r.SignalHz}, {"idler", r.IdlerHz}, {"pairs", r.TrueHz + r.AccidentalHz}} {
				// A thousandth beside the statistics: the encoders' own steps, and the table's.
				if want := 20 * c.hz; math.Abs(float64(n[c.channel])-want) > 4*math.Sqrt(want)+0.004*want {
					t.Errorf("%s: %d counts of %s; want %.0f", name, n[c.channel], c.channel, want)
				}
			}
		}
		check("as built", pose)
		set("laser", 20)
		p := pose
		p.PumpW = 0.020
		check("20 mW", p)
		for _, s := range b.Sensors {
			if v, err := s.Read(t.Context()); s.Name() == "pump_power" && (err != nil || math.Abs(v-20) > 0.2) {
				t.Errorf("the power monitor reads %g mW, %v; want 20", v, err)
			}
		}
		set("lamp", 80)
		p.RoomHz = [2]float64{900 + 80*600, 1100 + 80*500}
		check("20 mW and a lamp", p)
		set("laser", 0)
		p.PumpW = 0
		check("a lamp alone", p)
		set("lamp", 0)
		set("laser", 45)
		set("iris", 3)
		p = pose
		p.RadiusMm[1] = 1.5
		check("an iris of half the diameter", p)
		set("iris", 6)
		set("bias", 35.8)
		p = pose
		p.Gain[1] = -6 * 0.035 // by the true slope, not the declared one
		check("6 V less bias", p)
		set("bias", 41.8)
		begun := time.Now()
		set("oven", 60)
		// 40 K at 40 s come to within 0.02 K after 40 s × ln 2000; the bench's clock runs 100 times faster.
		if took, want := time.Since(begun)*100, time.Duration(40*math.Log(2000)*float64(time.Second)); took < want || took > want+10*time.Second {
			t.Errorf("the oven took %v; want %v", took, want)
		}
		p = pose
		p.CrystalCel = 60
		check("60 Cel", p)
	})
}
