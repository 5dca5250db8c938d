package bench

import (
	"math"
	"strings"
	"testing"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/sim/phasematch"
	"gemel/sim/source"
)

func stand(signal, idler, tilt float64) []scan.AxisTarget {
	return []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(signal)}, {Axis: "idler_arm", Angle: unit.Degrees(idler)}, {Axis: "crystal_tilt", Angle: unit.Degrees(tilt)}}
}

func expected(t *testing.T, f *File, axes []scan.AxisTarget, settings ...scan.SettingTarget) scan.Expected {
	t.Helper()
	e, err := f.Facts().Expect(axes, settings)
	if err != nil {
		t.Fatal(err)
	}
	return e
}

// The numbers are worked out here from what the demo bench declares, without the model of detectors
// and counter: 420 pairs a second and milliwatt at 45 mW, transmittances, efficiencies, dead times.
func TestExpectedRatesFollowFromWhatTheFileDeclares(t *testing.T) {
	f := demo(t)
	ring, _ := mustModel(t, f).Reference()
	e := expected(t, f, stand(ring, ring, 0))
	pairs := 420. * 45 * (0.995 * 0.985 * 0.94 * 0.60) * (0.995 * 0.984 * 0.95 * 0.55)
	const tau = 45e-9
	live := func(channel drivers.Channel) float64 { return 1 - e.CountsHz[channel]*tau }
	want := pairs * 0.999 * live("signal") * live("idler")
	if got := e.CountsHz["pairs"] - e.AccidentalsHz["pairs"]; math.Abs(got/want-1) > 0.01 {
		t.Errorf("%.1f true coincidences a second; want %.1f", got, want)
	}
	// Half the window lies on each side of a count, and a count with its partner finds no other there.
	signal, idler := e.CountsHz["signal"], e.CountsHz["idler"]
	if got, want := e.AccidentalsHz["pairs"], 2e-9*((signal-want)*idler+(idler-want)*signal); math.Abs(got/want-1) > 0.03 {
		t.Errorf("%.3f accidentals a second; want %.3f", got, want)
	}
	for channel, dark := range map[drivers.Channel]float64{"signal": 180 + 1000, "idler": 220 + 1000} {
		if got := e.DarkHz[channel]; math.Abs(got/dark-1) > 0.01 {
			t.Errorf("%s: %.0f counts a second in the dark; want %.0f and afterpulses of them", channel, got, dark)
		}
	}
	if _, tag := e.CountsHz["gates"]; tag || len(e.Warnings) > 0 {
		t.Errorf("%v, warnings %q; want no rate of the channel that counts gates, and no warning", e.CountsHz, e.Warnings)
	}
}

func mustModel(t *testing.T, f *File) *source.Model {
	t.Helper()
	m, err := f.outlooked()
	if err != nil {
		t.Fatal(err)
	}
	return m
}

func TestWhatIsExpectedFollowsSettingsAsDeclared(t *testing.T) {
	f := parse(t, withSettings(t, "", ""))
	ring, _ := mustModel(t, f).Reference()
	at := stand(ring, ring, 0)
	true_ := func(e scan.Expected) float64 { return e.CountsHz["pairs"] - e.AccidentalsHz["pairs"] }
	asDeclared := expected(t, f, at)
	for _, c := range []struct {
		name  string
		set   scan.SettingTarget
		share float64 // of the true coincidences
		close float64
	}{
		{"the declared centre of the delay", scan.SettingTarget{Setting: "delay", Value: 18.4}, 1, 1e-9},
		{"a delay off it by half the window", scan.SettingTarget{Setting: "delay", Value: 20.4}, 0.5, 1e-6},
		{"a delay a little less off, by a normal integral: one jitter inside", scan.SettingTarget{Setting: "delay", Value: 20.05}, 0.841344746, 1e-6},
		{"a delay far off", scan.SettingTarget{Setting: "delay", Value: 30}, 0, 1e-9},
		{"two thirds of the power", scan.SettingTarget{Setting: "laser", Value: 30}, 2. / 3, 5e-3}, // a little more, for there is less dead time
		{"three volts less on the idler", scan.SettingTarget{Setting: "bias", Value: 38.8}, 0.91, 2e-3},
	} {
		if got := true_(expected(t, f, at, c.set)) / true_(asDeclared); math.Abs(got-c.share) > c.close {
			t.Errorf("%s: %.6f of the coincidences; want %.6f", c.name, got, c.share)
		}
	}
	cool, warm := true_(expected(t, f, at, scan.SettingTarget{Setting: "oven", Value: 20})), true_(expected(t, f, at, scan.SettingTarget{Setting: "oven", Value: 60}))
	if math.Abs(cool/true_(asDeclared)-1) > 1e-9 || !(warm < 0.999*cool) {
		t.Errorf("%.1f coincidences at 20 Cel and %.1f at 60 Cel; want as declared, and fewer", cool, warm)
	}
	small := expected(t, f, at, scan.SettingTarget{Setting: "iris", Value: 1})
	if !(true_(small) < true_(asDeclared)/4) || !(small.CountsHz["idler"] < asDeclared.CountsHz["idler"]/10) || small.CountsHz["signal"] != asDeclared.CountsHz["signal"] {
		t.Errorf("through a sixth of the iris %v; want far fewer of the idler's and the signal's %v as they were", small.CountsHz, asDeclared.CountsHz)
	}
}

func TestALampIsExpectedInBothDetectorsAndInNoPair(t *testing.T) {
	f := demo(t)
	at := stand(2.864, 2.864, 0)
	lamp := func(percent float64) scan.SettingTarget { return scan.SettingTarget{Setting: "lamp", Value: percent} }
	blocked := scan.SettingTarget{Setting: "laser", Value: 0}
	off, on := expected(t, f, at, blocked, lamp(0)), expected(t, f, at, blocked, lamp(80))
	for channel, adds := range map[drivers.Channel]float64{"signal": 48e3, "idler": 40e3} {
		// 45 ns of dead time and less than a hundredth of afterpulses about it
		if more := on.CountsHz[channel] - off.CountsHz[channel]; math.Abs(more-adds) > 0.01*adds {
			t.Errorf("%s: the lamp adds %.0f /s; want about %.0f", channel, more, adds)
		}
		if math.Abs(on.CountsHz[channel]-on.DarkHz[channel]) > 1e-6 {
			t.Errorf("%s: %.1f /s with the pump at 0 mW and %.1f in the dark; want the same", channel, on.CountsHz[channel], on.DarkHz[channel])
		}
	}
	if on.CountsHz["pairs"] != on.AccidentalsHz["pairs"] || on.CountsHz["pairs"] < 4e-9*48e3*40e3 {
		t.Errorf("%.3g pairs /s of which %.3g by chance; want chance alone", on.CountsHz["pairs"], on.AccidentalsHz["pairs"])
	}
}

func TestExpectationsKnowNothingOfTheTruth(t *testing.T) {
	text := withSettings(t, "efficiency: 57 %, fluorescence_per_mw: 12 Hz, stray_per_mw: 5 Hz, room: 1100 Hz", "efficiency: 7 %, fluorescence_per_mw: 900 Hz")
	text = strings.Replace(text, "offset: 18.42 ns", "offset: 3 ns", 1)
	text = strings.Replace(text, "\n    jitter: 0.35 ns ", "\n    jitter: 3 ns ", 1)
	a, b := expected(t, parse(t, withSettings(t, "", "")), stand(2.864, 2.864, 0)), expected(t, parse(t, text), stand(2.864, 2.864, 0))
	for channel, hz := range a.CountsHz {
		if b.CountsHz[channel] != hz || b.AccidentalsHz[channel] != a.AccidentalsHz[channel] || b.DarkHz[channel] != a.DarkHz[channel] {
			t.Errorf("%s: %g and %g a second with two truths; want the same", channel, hz, b.CountsHz[channel])
		}
	}
}

func TestWhatIsNotDeclaredIsSaid(t *testing.T) {
	text := with(t, `    centre: {value: 18.4 ns, u: 0.05 ns, from: "delay scan, 2031-01-21"}`+"\n", "")
	text = strings.Replace(text, `    expected_efficiency: {value: 60 %, u: 3 %, from: "data sheet"}`, "", 1)
	f := parse(t, text)
	all := strings.Join(expected(t, f, stand(2.864, 2.864, 0)).Warnings, "\n")
	for _, want := range []string{"signal has no expected_efficiency", "delay has no centre"} {
		if !strings.Contains(all, want) {
			t.Errorf("%q; want a warning that says %q", all, want)
		}
	}
	if _, err := f.Facts().Expect([]scan.AxisTarget{{Axis: "nothing"}}, nil); err == nil {
		t.Error("an axis that there is not is taken; want it refused")
	}
	if _, err := f.Facts().Expect(nil, []scan.SettingTarget{{Setting: "nothing"}}); err == nil {
		t.Error("a setting that there is not is taken; want it refused")
	}
}

func TestEmissionIsTheRingOfPhaseMatching(t *testing.T) {
	f := demo(t)
	f.Optics.Azimuth = 0 // where a tilt changes the angle most
	for _, tilt := range []float64{-1, 0, 0.5, 2} {
		for role, process := range map[string]phasematch.Process{signalArm: f.Optics.Process, idlerArm: f.Optics.Process.Swapped()} {
			azimuth := map[string]float64{signalArm: 0, idlerArm: 180}[role]
			p, err := source.Predict(source.Query{Slab: phasematch.Slab{Crystal: f.Optics.Crystal, Process: process, CutDeg: 29.2, TiltDeg: tilt, ThicknessMm: 2, Cel: 20, PumpNm: 405}, SignalNm: 810, AzimuthDeg: azimuth})
			if err != nil {
				t.Fatal(err)
			}
			got, err := f.Facts().Emission(role, tilt)
			if p.SignalExternalDeg == nil {
				if err == nil || !strings.Contains(err.Error(), "no emission") {
					t.Errorf("%s at tilt %g: %.4f deg, %v; want it said that there is none", role, tilt, got, err)
				}
				continue
			}
			if err != nil || math.Abs(got-*p.SignalExternalDeg) > 1e-6 {
				t.Errorf("%s at tilt %g: %.6f deg, %v; want %.6f", role, tilt, got, err, *p.SignalExternalDeg)
			}
		}
	}
	if _, err := f.Facts().Emission(crystalTilt, 0); err == nil {
		t.Error("the emission of a tilt; want an arm asked for")
	}
}

func TestAnArmBesideItsPlaneMeetsTheSameRing(t *testing.T) {
	f := demo(t)
	ring, err := f.Facts().Emission(signalArm, 0)
	if err != nil {
		t.Fatal(err)
	}
	f.Optics.Signal.OutOfPlane = unit.Degrees(0.8)
	in, err := f.Facts().Emission(signalArm, 0)
	if err != nil {
		t.Fatal(err)
	}
	polar, _ := laboratory(in, 0.8)
	// The ring of an untilted type I crystal is round but for the pump's walk-off.
	if math.Abs(polar-ring) > 0.01 || in >= ring-0.1 {
		t.Errorf("%.4f deg in the plane, %.4f from the pump; want %.4f from the pump", in, polar, ring)
	}
	f.Optics.Signal.OutOfPlane = unit.Degrees(4)
	if _, err := f.Facts().Emission(signalArm, 0); err == nil || !strings.Contains(err.Error(), "passes under") {
		t.Errorf("%v; want it said that the ring does not reach the arm", err)
	}
}

func TestFlanksAreWhereCoincidencesAreHalved(t *testing.T) {
	f := demo(t)
	m := mustModel(t, f)
	top := stand(2.864, 2.864, 0)
	for _, arm := range []drivers.AxisName{"signal_arm", "idler_arm"} {
		low, high, err := f.Facts().Flanks(arm, top)
		if err != nil {
			t.Fatal(err)
		}
		rate := func(deg float64) float64 {
			p := f.pose(top, nil)
			f.Put(&p, arm, deg)
			return m.Exact(p).PairsHz
		}
		most := 0.0
		for x := low.Degrees(); x <= high.Degrees(); x += 0.02 {
			most = max(most, rate(x))
		}
		for _, flank := range []unit.Angle{low, high} {
			if got := rate(flank.Degrees()) / most; math.Abs(got-0.5) > 0.003 {
				t.Errorf("%s at %s: %.4f of the maximum; want a half", arm, flank, got)
			}
		}
		if low >= unit.Degrees(2.864) || high <= unit.Degrees(2.864) {
			t.Errorf("%s: flanks %s and %s; want one on each side of the top", arm, low, high)
		}
	}
	if _, _, err := f.Facts().Flanks("crystal_tilt", top); err == nil {
		t.Error("the flanks of a tilt; want an arm asked for")
	}
	if low, high, err := f.Facts().Flanks("signal_arm", stand(9, 9, 0)); err == nil || !strings.Contains(err.Error(), "no coincidences") {
		t.Errorf("far off the ring %s and %s, %v; want it said that there is nothing", low, high, err)
	}
}

// A tilt at which the ring is closed is expected to give no pairs, and it is said why.
func TestAClosedRingIsSaid(t *testing.T) {
	text := strings.Replace(with(t, "limits: [-4 deg, 4 deg]", "limits: [-6 deg, 6 deg]"), "azimuth: 90 deg", "azimuth: 0 deg", 1)
	f := parse(t, text)
	for _, tilt := range []float64{-6, 6} {
		if _, err := f.Facts().Emission(signalArm, tilt); err == nil {
			continue
		}
		e := expected(t, f, stand(2.864, 2.864, tilt))
		if len(e.Warnings) == 0 || !strings.Contains(strings.Join(e.Warnings, " "), "no emission") || e.CountsHz["pairs"]-e.AccidentalsHz["pairs"] > 1 {
			t.Errorf("%v, warnings %q; want no pairs and a warning that says why", e.CountsHz, e.Warnings)
		}
		return
	}
	t.Error("the ring is open at both ends of the tilt; want one at which it is closed")
}

func BenchmarkExpect(b *testing.B) {
	f, err := Load("../../configs/demo-bench.yaml")
	if err != nil {
		b.Fatal(err)
	}
	expect, i := f.Facts().Expect, 0
	for b.Loop() {
		i++
		if _, err := expect(stand(2.6+0.01*float64(i%60), 2.6+0.01*float64(i/60%60), 0), nil); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkFlanks(b *testing.B) {
	f, err := Load("../../configs/demo-bench.yaml")
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if _, _, err := f.Facts().Flanks("idler_arm", stand(2.864, 2.864, 0)); err != nil {
			b.Fatal(err)
		}
	}
}
