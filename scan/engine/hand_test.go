package engine

import (
	"context"
	"errors"
	"maps"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

type fakeSetting struct {
	fakeDevice
	value *float64
}

func (s fakeSetting) Unit() string                         { return "ns" }
func (s fakeSetting) Get(context.Context) (float64, error) { return *s.value, nil }
func (s fakeSetting) Set(_ context.Context, v float64) (float64, error) {
	if err := s.w.act("set %s %g", s.name, v); err != nil {
		return 0, err
	}
	*s.value = v
	return v, nil
}

// homing is a stage each of whose axes knows its zero, or not.
type homing struct {
	fakeStage
	knows map[drivers.AxisName]bool
}

func (s homing) Homed(context.Context) (map[drivers.AxisName]bool, error) {
	return maps.Clone(s.knows), nil
}
func (s homing) Home(_ context.Context, order []drivers.AxisName) error {
	for _, a := range order {
		s.knows[a] = true
		s.w.at[a] = 0
	}
	return s.w.act("home %v", order)
}
func (s homing) Where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	for a, knows := range s.knows {
		if !knows {
			return nil, &drivers.Error{Op: "where", Device: s.name, Remedy: drivers.HomeAgain, Err: errors.New(string(a) + " does not know its zero")}
		}
	}
	return s.fakeStage.Where(ctx)
}

// fakeLines notes what was let go.
type fakeLines struct{ w *world }

func (l fakeLines) Release(context.Context) error { return l.w.act("release") }
func (l fakeLines) Take()                         { _ = l.w.act("take") }

// underHand runs a test with a bench in hand, at rest, whose log is empty.
func underHand(t *testing.T, change func(*world, *Bench), test func(t *testing.T, w *world, h *Hand)) {
	t.Helper()
	synctest.Test(t, func(t *testing.T) {
		w := newWorld()
		b := w.bench()
		delay := 1.0
		b.Settings = []drivers.Setting{fakeSetting{fakeDevice{w, "delay"}, &delay}}
		if change != nil {
			change(w, b)
		}
		h := NewHand(b, HandFacts{Lines: fakeLines{w}, Limits: map[drivers.DeviceName][2]float64{"delay": {0, 10}}, GateMin: time.Millisecond, GateMax: 100 * time.Second,
			Pairs: []HandPairs{{Channel: "pairs", Of: [2]drivers.Channel{"signal", "idler"}, Window: 4e-9}}})
		if err := h.Begin(t.Context()); err != nil {
			t.Fatal(err)
		}
		w.atRest(t)
		w.log = nil
		test(t, w, h)
		if bad := h.End(t.Context()); bad != "" {
			t.Errorf("End() = %q; want the rest state", bad)
		}
		w.atRest(t)
	})
}

func refused(t *testing.T, err error, words ...string) {
	t.Helper()
	r, ok := errors.AsType[*HandRefused](err)
	if !ok {
		t.Fatalf("error %v; want a refusal", err)
	}
	for _, word := range words {
		if !strings.Contains(r.Text, word) {
			t.Errorf("refused: %s; want %q in it", r.Text, word)
		}
	}
}

// acts are what of the log matters here.
func (w *world) acts(words ...string) []string {
	return slices.DeleteFunc(w.heard(), func(what string) bool {
		return !slices.ContainsFunc(words, func(word string) bool { return strings.HasPrefix(what, word) })
	})
}

func TestAHandMovesOneAxisWithTheDetectorsProtectedAndOpensThemAgain(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		m, err := h.Move(t.Context(), "signal_arm", unit.Degree, false)
		if err != nil || m.Stands != unit.Degree || m.From != 0 {
			t.Fatalf("Move() = %+v, %v; want 1 deg", m, err)
		}
		if got := w.acts("open"); len(got) > 0 {
			t.Errorf("%v; nobody had opened anything", got)
		}
		if err := h.Shutter(t.Context(), "detectors", true); err != nil {
			t.Fatal(err)
		}
		w.log = nil
		for range 3 { // steps add up to what was asked for
			if m, err = h.Move(t.Context(), "signal_arm", unit.Degree/10, true); err != nil {
				t.Fatal(err)
			}
		}
		if want := unit.Degree + 3*unit.Degree/10; m.Target != want || m.Stands != want {
			t.Errorf("after three steps %+v; want %s", m, want)
		}
		got := strings.Join(w.acts("open", "close", "move", "gate")[:5], ", ")
		if want := "close guard, move signal_arm 0.60, move signal_arm 1.10, open guard, gate 20ms pump=false"; got != want {
			t.Errorf("a step was %s; want %s: protected, approached from its side, opened, glanced", got, want)
		}
		for _, s := range h.State().Shutters {
			if s.Open != (s.Shutter == "guard") {
				t.Errorf("%s is told open: %v", s.Shutter, s.Open)
			}
		}
	})
}

func TestAHandIsRefusedBeyondLimitsAndBeforeAnythingMoves(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		for name, c := range map[string]struct {
			do   func() error
			want string
		}{
			"an angle beyond the limits":      {func() error { _, err := h.Move(t.Context(), "signal_arm", 11*unit.Degree, false); return err }, "soft limits"},
			"no room to approach":             {func() error { _, err := h.Move(t.Context(), "signal_arm", -10*unit.Degree, false); return err }, "approach"},
			"a step beyond the limits":        {func() error { _, err := h.Move(t.Context(), "signal_arm", 11*unit.Degree, true); return err }, "soft limits"},
			"an axis that is not there":       {func() error { _, err := h.Move(t.Context(), "arm", 0, false); return err }, "want one of signal_arm, idler_arm, plate"},
			"a shutter that is not there":     {func() error { return h.Shutter(t.Context(), "roof", true) }, "guard (signal, idler)"},
			"a setting beyond its limits":     {func() error { _, err := h.Set(t.Context(), "delay", 10.5); return err }, "0 to 10 ns"},
			"a setting that is not there":     {func() error { _, err := h.Set(t.Context(), "iris", 1); return err }, "want one of delay"},
			"a gate that the counter has not": {func() error { _, err := h.Look(t.Context(), 200*time.Second); return err }, "1m40s"},
			"taking what was not let go":      {func() error { _, err := h.Take(t.Context()); return err }, "not let go"},
		} {
			refused(t, c.do(), c.want)
			if got := w.acts("move", "open", "set", "gate"); len(got) > 0 {
				t.Errorf("%s: %v was done; want nothing", name, got)
			}
		}
		if v, err := h.Set(t.Context(), "delay", 2.5); err != nil || v != 2.5 {
			t.Errorf("Set() = %g, %v; want 2.5", v, err)
		}
	})
}

func TestAHandKeepsOutOfKeepOutsAndMayLeadAnAxisOut(t *testing.T) {
	arms := []scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}
	underHand(t, func(w *world, b *Bench) {
		b.KeepOuts = []scan.KeepOut{{Name: "pump beam", Cone: &scan.Cone{Arms: arms, HalfWidth: 2 * unit.Degree, UnlessPumpClosed: true}}}
		w.at["signal_arm"], w.at["idler_arm"] = unit.Degree, 5*unit.Degree
	}, func(t *testing.T, w *world, h *Hand) {
		refused(t, h.Shutter(t.Context(), "pump", true), "the pump stays closed", "pump beam")
		if m, err := h.Move(t.Context(), "signal_arm", unit.Degree/2, true); err != nil || m.Stands != unit.Degree*3/2 {
			t.Fatalf("with the pump closed Move() = %+v, %v; want it free to move", m, err)
		}
		if _, err := h.Move(t.Context(), "signal_arm", 4*unit.Degree, false); err != nil {
			t.Fatal(err)
		}
		if err := h.Shutter(t.Context(), "pump", true); err != nil {
			t.Fatalf("outside the cone: %v; want it open", err)
		}
		w.log = nil
		_, err := h.Move(t.Context(), "signal_arm", unit.Degree, false)
		refused(t, err, "pump beam", "or the pump closed")
		if got := w.acts("move"); len(got) > 0 {
			t.Errorf("%v; want no move", got)
		}
		w.at["signal_arm"] = unit.Degree // pushed there by somebody
		_, err = h.Move(t.Context(), "signal_arm", unit.Degree/2, false)
		refused(t, err, "pump beam")
		if m, err := h.Move(t.Context(), "signal_arm", 4*unit.Degree, false); err != nil || m.Stands != 4*unit.Degree {
			t.Errorf("Move() = %+v, %v; want it led out, as a person watches", m, err)
		}
	})
}

func TestTooMuchLightIsProtectedFromBeforeItIsTold(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		for _, name := range []string{"pump", "detectors"} {
			if err := h.Shutter(t.Context(), name, true); err != nil {
				t.Fatal(err)
			}
		}
		if l, err := h.Look(t.Context(), time.Second); err != nil || l.Rates[0].Rate != 1000 {
			t.Fatalf("Look() = %+v, %v; want 1000 /s", l, err)
		}
		w.rates["idler"] = 2e5
		w.log = nil
		_, err := h.Look(t.Context(), time.Second)
		if b, ok := errors.AsType[*HandBright](err); !ok || b.Detector != "idler" || !strings.Contains(err.Error(), "2e+05 /s, above its trip rate of 1e+05 /s; the detectors were protected") {
			t.Fatalf("Look() = %v; want the trip told", err)
		}
		if w.open["guard"] || !w.open["pump"] {
			t.Errorf("open: %v; want the detectors protected and the pump as it was", w.open)
		}
		// What is opened now is glanced at, and closed again.
		if err := h.Shutter(t.Context(), "signal", true); err == nil || w.open["guard"] {
			t.Errorf("Shutter() = %v with the guard open: %v; want it closed by the glance", err, w.open["guard"])
		}
		// A latched detector reads next to nothing; a closed one may.
		w.rates["idler"], w.rates["signal"] = 800, 0
		if _, err := h.Look(t.Context(), 10*time.Second); err != nil {
			t.Errorf("behind its shutter: %v; want no floor there", err)
		}
		if err := h.Shutter(t.Context(), "detectors", true); err != nil {
			t.Fatal(err)
		}
		if _, err := h.Look(t.Context(), 10*time.Second); err == nil || !strings.Contains(err.Error(), "below its floor") || w.open["guard"] {
			t.Errorf("Look() = %v; want the floor told, and the detectors protected", err)
		}
		w.rates["signal"] = 1000
	})
}

func TestALongGateIsJudgedBeforeItsEnd(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		if l, err := h.Look(t.Context(), 9*time.Second); err != nil || l.Gate.Duration() != 9*time.Second || len(w.acts("gate")) != 1 {
			t.Fatalf("behind shutters: %+v, %v, %v; want one gate", l, err, w.acts("gate"))
		}
		if err := h.Shutter(t.Context(), "detectors", true); err != nil {
			t.Fatal(err)
		}
		w.log = nil
		if l, err := h.Look(t.Context(), 9*time.Second); err != nil || l.Gate.Duration() != 9*time.Second || l.Rates[0].Counts != 9000 || len(w.acts("gate")) != 4 {
			t.Errorf("seeing light: %+v, %v, %v; want 9 s in four gates", l, err, w.acts("gate"))
		}
		w.rates["idler"] = 2e5
		began := time.Now()
		if _, err := h.Look(t.Context(), 90*time.Second); err == nil || w.open["guard"] || time.Since(began) > 3*time.Second {
			t.Errorf("Look() = %v after %s; want the light seen in the first gate", err, time.Since(began))
		}
	})
}

func TestADetectorWithoutAProtectorHasThePumpClosedForIt(t *testing.T) {
	underHand(t, func(_ *world, b *Bench) { b.Detectors[1].Protect = nil }, func(t *testing.T, w *world, h *Hand) {
		refused(t, h.Shutter(t.Context(), "idler", true), "names no protector")
		if err := h.Shutter(t.Context(), "pump", true); err != nil {
			t.Fatal(err)
		}
		w.rates["idler"] = 2e5
		if err := h.Watch(t.Context()); err == nil || !strings.Contains(err.Error(), "so the pump was closed") || w.open["pump"] {
			t.Errorf("Watch() = %v with the pump open: %v; want it closed", err, w.open["pump"])
		}
		w.rates["idler"] = 800
	})
}

func TestNobodyWatchesWhatIsClosed(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		if err := h.Watch(t.Context()); err != nil || len(w.acts("gate")) > 0 {
			t.Errorf("Watch() = %v after %v; want nothing counted", err, w.acts("gate"))
		}
	})
}

func TestRatiosAreOfCountsAndAccidentalsOfTheWindow(t *testing.T) {
	underHand(t, func(w *world, b *Bench) {
		w.rates = map[drivers.Channel]float64{"signal": 1e4, "idler": 5e4, "pairs": 1000}
		b.Counter = threeChannels{fakeCounter{fakeDevice{w, "counter"}}}
	}, func(t *testing.T, w *world, h *Hand) {
		l, err := h.Look(t.Context(), 2*time.Second)
		if err != nil || len(l.Rates) != 3 || len(l.Ratios) != 2 {
			t.Fatalf("Look() = %+v, %v", l, err)
		}
		if a := l.Rates[2].Accidentals; a == nil || *a < 1.999 || *a > 2.001 || l.Rates[0].Accidentals != nil {
			t.Errorf("accidentals of %+v; want 1e4 × 5e4 × 4 ns = 2 /s, of the coincidences alone", l.Rates)
		}
		for i, want := range []struct{ ratio, u float64 }{{0.1, 0.002121}, {0.02, 0.000443}} { // sqrt(p (1-p) / n)
			if r := l.Ratios[i]; *r.Ratio != want.ratio || *r.U < 0.999*want.u || *r.U > 1.001*want.u {
				t.Errorf("%s/%s = %g ± %g; want %g ± %g", r.Channel, r.Over, *r.Ratio, *r.U, want.ratio, want.u)
			}
		}
	})
}

type threeChannels struct{ fakeCounter }

func (threeChannels) Channels() []drivers.Channel {
	return []drivers.Channel{"signal", "idler", "pairs", "tag"}
}

func TestAnAxisWithoutItsZeroDoesNotMoveUntilItWasSearchedInOrder(t *testing.T) {
	knows := map[drivers.AxisName]bool{"signal_arm": false, "idler_arm": false, "plate": true}
	underHand(t, func(w *world, b *Bench) {
		b.Stages = []drivers.Stage{homing{fakeStage{fakeDevice{w, "rotary"}}, knows}}
		b.HomeOrder = map[drivers.DeviceName][]drivers.AxisName{"rotary": {"idler_arm", "signal_arm", "plate"}}
	}, func(t *testing.T, w *world, h *Hand) {
		if got := strings.Join(h.Lost(), " "); got != "signal_arm idler_arm plate" {
			t.Errorf("lost: %s; want all of a controller that cannot speak for one", got)
		}
		_, err := h.Move(t.Context(), "signal_arm", unit.Degree, false)
		refused(t, err, "does not know its zero", "search for their zeros first")
		refused(t, h.Home(t.Context(), "signal_arm"), "idler_arm has no zero and searches before signal_arm")
		if err := h.Shutter(t.Context(), "pump", true); err != nil {
			t.Fatal(err)
		}
		w.log = nil
		if err := h.Home(t.Context(), "idler_arm"); err != nil {
			t.Fatal(err)
		}
		if got := strings.Join(w.acts("close", "home", "open"), ", "); got != "close guard, close pump, home [idler_arm]" {
			t.Errorf("%s; want everything closed, then one axis searched", got)
		}
		if err := h.Home(t.Context(), "signal_arm"); err != nil || len(h.Lost()) > 0 {
			t.Errorf("Home() = %v, lost %v; want all known", err, h.Lost())
		}
		if _, err := h.Move(t.Context(), "signal_arm", unit.Degree, false); err != nil {
			t.Error(err)
		}
	})
}

func TestASearchThatCouldEnterAKeepOutIsRefused(t *testing.T) {
	knows := map[drivers.AxisName]bool{"signal_arm": false, "idler_arm": false, "plate": true}
	underHand(t, func(w *world, b *Bench) {
		b.Stages = []drivers.Stage{homing{fakeStage{fakeDevice{w, "rotary"}}, knows}}
		b.KeepOuts = []scan.KeepOut{{Name: "arms", Apart: &scan.Apart{Arms: [2]scan.Arm{{Axis: "signal_arm", Side: 1}, {Axis: "idler_arm", Side: -1}}, Least: 5 * unit.Degree}}}
	}, func(t *testing.T, w *world, h *Hand) {
		refused(t, h.Home(t.Context(), "signal_arm"), "could enter a keep-out", "release the lines")
		if got := w.acts("home"); len(got) > 0 {
			t.Errorf("%v; want no search", got)
		}
	})
}

func TestLinesAreLetGoAtRestAndWhatMovedMeanwhileIsTold(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		if err := h.Shutter(t.Context(), "pump", true); err != nil {
			t.Fatal(err)
		}
		w.log = nil
		if err := h.Release(t.Context()); err != nil || !h.LetGo() {
			t.Fatal(err)
		}
		if got := w.acts("close pump", "release"); len(got) != 2 || got[0] != "close pump" {
			t.Errorf("%v; want the rest state, then the lines let go", got)
		}
		w.log = nil
		for name, err := range map[string]error{
			"look": func() error { _, err := h.Look(t.Context(), time.Second); return err }(), "where": h.Where(t.Context()), "shutter": h.Shutter(t.Context(), "pump", false),
			"move": func() error { _, err := h.Move(t.Context(), "plate", 0, false); return err }(), "home": h.Home(t.Context(), "plate"),
			"set": func() error { _, err := h.Set(t.Context(), "delay", 1); return err }(),
		} {
			refused(t, err, "take them again first")
			if len(w.heard()) > 0 {
				t.Errorf("%s: %v was done on lines that are another program's", name, w.heard())
			}
		}
		w.at["signal_arm"] = 2 * unit.Degree
		w.open["pump"] = true // the other program's doing
		*h.e.Bench.Settings[0].(fakeSetting).value = 7
		moved, err := h.Take(t.Context())
		if err != nil || h.LetGo() {
			t.Fatal(err)
		}
		if len(moved) != 2 || moved[0].Name != "signal_arm" || moved[0].Before != 0 || moved[0].After != 2 || moved[1].Name != "delay" || moved[1].After != 7 {
			t.Errorf("moved %+v; want signal_arm from 0 to 2 deg, and the delay to 7 ns", moved)
		}
		w.atRest(t)
		if got := w.acts("take", "connect"); len(got) < 5 || got[0] != "take" {
			t.Errorf("%v; want every device connected anew", got)
		}
	})
}

func TestLinesThatDoNotComeBackStayLetGo(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		if err := h.Release(t.Context()); err != nil {
			t.Fatal(err)
		}
		held := true
		w.fail = func(what string) error {
			if held && what == "connect rotary" {
				return &drivers.Error{Op: "connect", Device: "rotary", Remedy: drivers.GiveUp, Err: errors.New("held by another program")}
			}
			return nil
		}
		if _, err := h.Take(t.Context()); err == nil || !strings.Contains(err.Error(), "the lines stay let go: rotary: connect: held by another program") || !h.LetGo() {
			t.Errorf("Take() = %v; want the lines still let go, and why", err)
		}
		if got := w.heard(); got[len(got)-1] != "release" {
			t.Errorf("the last was %s; want the lines let go again", got[len(got)-1])
		}
		held = false
		if _, err := h.Take(t.Context()); err != nil || h.LetGo() {
			t.Errorf("Take() = %v when the other program had gone", err)
		}
	})
}

func TestAnInterruptedMoveIsNotFollowedByLight(t *testing.T) {
	underHand(t, nil, func(t *testing.T, w *world, h *Hand) {
		if err := h.Shutter(t.Context(), "detectors", true); err != nil {
			t.Fatal(err)
		}
		ctx, cancel := context.WithTimeout(t.Context(), 100*time.Millisecond)
		defer cancel()
		if _, err := h.Move(ctx, "signal_arm", unit.Degree, false); !errors.Is(err, context.DeadlineExceeded) {
			t.Errorf("Move() = %v; want it interrupted", err)
		}
		w.atRest(t)
	})
}

func TestABenchThatDoesNotConnectIsNotTakenInHand(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		w := newWorld()
		w.fail = func(what string) error {
			if what == "connect counter" {
				return &drivers.Error{Op: "identity", Device: "counter", Remedy: drivers.GiveUp, Err: errors.New("another instrument answers")}
			}
			return nil
		}
		if err := NewHand(w.bench(), HandFacts{}).Begin(t.Context()); drivers.RemedyOf(err) != drivers.GiveUp {
			t.Errorf("Begin() = %v; want that another instrument answers", err)
		}
		w.atRest(t)
	})
}
