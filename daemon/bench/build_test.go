package bench

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/crew"
	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
	"gemel/sim/trouble"
)

// demo reads the demo bench.
func demo(t *testing.T) *File {
	t.Helper()
	f, err := Load("../../configs/demo-bench.yaml")
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// live builds a bench and runs it until the test ends.
func live(t *testing.T, f *File, vo VirtualOptions) (*Bench, *Virtual) {
	t.Helper()
	return liveWith(t, f, vo, nil)
}

// liveWith also puts something between the lines and their ports.
func liveWith(t *testing.T, f *File, vo VirtualOptions, wrap func(string, line.Port) line.Port) (*Bench, *Virtual) {
	t.Helper()
	v, err := NewVirtual(f, vo)
	if err != nil {
		t.Fatal(err)
	}
	b, err := Build(f, Options{Virtual: v, Wrap: wrap})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan error)
	go func() { done <- b.Run(ctx, nil) }()
	t.Cleanup(func() {
		cancel()
		if err := <-done; err != nil {
			t.Error(err)
		}
	})
	return b, v
}

func connectAll(t *testing.T, b *Bench) {
	t.Helper()
	for _, d := range b.Devices() {
		if err := d.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
	}
}

// oneReading takes the demo bench through everything a reading needs, once.
func oneReading(t *testing.T, b *Bench) drivers.Gate {
	t.Helper()
	ctx := t.Context()
	must := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	connectAll(t, b)
	for _, s := range b.Stages {
		homed, err := s.Homed(ctx)
		must(err)
		for axis, yes := range homed {
			if !yes {
				t.Errorf("%s does not know its zero", axis)
			}
		}
	}
	ring := unit.Degrees(2.864)
	must(b.Stages[0].Move(ctx, map[drivers.AxisName]unit.Angle{"signal_arm": ring, "idler_arm": ring}))
	must(b.Stages[1].Move(ctx, map[drivers.AxisName]unit.Angle{"pump_waveplate": 10 * unit.Degree}))
	must(b.Stages[1].Move(ctx, map[drivers.AxisName]unit.Angle{"pump_waveplate": 0}))
	at, err := b.Stages[0].Where(ctx)
	must(err)
	for _, a := range b.Axes {
		if a.Name == "signal_arm" || a.Name == "idler_arm" {
			if d := (at[a.Name] - ring).Abs(); d > a.Tolerance {
				t.Errorf("%s stands at %s; want %s within %s", a.Name, at[a.Name], ring, a.Tolerance)
			}
		}
	}
	must(b.Pump.Open(ctx))
	for _, d := range b.Detectors {
		must(d.Protect.Open(ctx))
	}
	for _, s := range b.Sensors {
		v, err := s.Read(ctx)
		must(err)
		if low, high := map[string]float64{"mW": 44, "Cel": 19}[s.Unit()], map[string]float64{"mW": 46, "Cel": 21}[s.Unit()]; v < low || v > high {
			t.Errorf("%s reads %g %s; want %g to %g", s.Name(), v, s.Unit(), low, high)
		}
	}
	gate, err := b.Counter.Count(ctx, time.Second)
	must(err)
	return gate
}

func TestTheDemoBenchTakesAReadingInMemoryUnderVirtualTime(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b, v := live(t, demo(t), VirtualOptions{})
		g := oneReading(t, b)
		if g.Counts["pairs"] < 1000 || g.Counts["signal"] < g.Counts["pairs"] || g.Counts["idler"] < g.Counts["pairs"] || g.Counts["gates"] != 1 {
			t.Errorf("counts %v; want pairs on the ring, and more singles", g.Counts)
		}
		if true, ok := v.World.TrueDeg("idler_arm"); !ok || true < 2.8 || true > 2.9 {
			t.Errorf("the idler arm truly stands at %g deg; want 2.864", true)
		}
	})
}

func TestTheDemoBenchTakesAReadingThroughPseudoTerminals(t *testing.T) {
	b, _ := live(t, demo(t), VirtualOptions{Folder: t.TempDir()})
	if g := oneReading(t, b); g.Counts["pairs"] < 1000 {
		t.Errorf("counts %v; want pairs on the ring", g.Counts)
	}
}

func parse(t *testing.T, text string) *File {
	t.Helper()
	f, err := Parse("bench.yaml", []byte(text))
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// with returns the demo bench's text with one piece replaced.
func with(t *testing.T, changes ...string) string {
	t.Helper()
	text := demo(t).Text
	for i := 0; i < len(changes); i += 2 {
		if old := changes[i]; strings.Count(text, old) != 1 {
			t.Fatalf("%q stands %d times in the demo bench; want once", old, strings.Count(text, old))
		}
		text = strings.Replace(text, changes[i], changes[i+1], 1)
	}
	return text
}

// withSettings is the demo bench with three settings more, and another piece replaced.
func withSettings(t *testing.T, old, now string) string {
	t.Helper()
	text := with(t, "\noptics:\n", `
  oven: {line: oven, dialect: scpi, is: crystal_temperature, unit: Cel, limits: [15 Cel, 60 Cel], tolerance: 0.02 K, settle_within: 10 min, headers: {set: ":SOUR:TEMP {value}", get: ":SOUR:TEMP?"}}
  iris: {line: iris, dialect: scpi, is: idler_iris, unit: mm, answer_unit: m, limits: [1 mm, 12 mm], tolerance: 10 um, headers: {set: ":SOUR:POS {value}", get: ":SOUR:POS?"}}
  bias: {line: bias, dialect: scpi, is: idler_bias, unit: V, nominal: 41.8 V, per_volt: 3 %, limits: [30 V, 45 V], tolerance: 10 mV, headers: {set: ":SOUR:VOLT {value}", get: ":SOUR:VOLT?"}}

optics:
`)
	text = strings.Replace(text, "\nlines:\n", "\nlines:\n  oven: {device: simulated}\n  iris: {device: simulated}\n  bias: {device: simulated}\n", 1)
	text = strings.Replace(text, "    settings:\n", "    settings:\n      oven: {lag: 40 s}\n      bias: {per_volt: 3.5 %}\n", 1)
	return strings.Replace(text, old, now, 1)
}

func TestAVirtualSettingChangesTheWorldAndIsReadBack(t *testing.T) {
	f := parse(t, withSettings(t, "", ""))
	synctest.Test(t, func(t *testing.T) {
		b, _ := live(t, f, VirtualOptions{})
		connectAll(t, b)
		for i, c := range []struct{ set, want float64 }{{12.5, 12.5}, {30, 30}, {60, 60}, {25, 25}, {4, 4}, {40, 40}} {
			got, err := b.Settings[i].Set(t.Context(), c.set)
			if err != nil || got < c.want-0.1 || got > c.want+0.1 {
				t.Errorf("%s set to %g reads %g, %v; want %g %s", b.Settings[i].Name(), c.set, got, err, c.want, b.Settings[i].Unit())
			}
		}
		for _, s := range b.Sensors {
			if s.Name() != "pump_power" {
				continue
			}
			if v, err := s.Read(t.Context()); err != nil || v < 29 || v > 31 {
				t.Errorf("the power monitor reads %g mW, %v; want the 30 mW that were set", v, err)
			}
		}
	})
}

func TestSettingsAreHeldToTheToleranceThatTheirFileDeclares(t *testing.T) {
	text, err := os.ReadFile("../../configs/lab-bench.yaml")
	if err != nil {
		t.Fatal(err)
	}
	lab := string(text) + `
settings:
  power: {line: shutters, dialect: custom, unit: mW, limits: [0 mW, 50 mW], tolerance: 200 uW, asks: {set: {send: "L {value}", match: OK}, get: {send: "L?", match: "L=(?P<value>[0-9.]+)"}}}
`
	for _, c := range []struct {
		text    string
		options Options
		want    map[drivers.DeviceName]float64
	}{
		{withSettings(t, "", ""), Options{Links: t.TempDir()}, map[drivers.DeviceName]float64{"delay": 0.002, "laser": 0.01, "lamp": 0.1, "oven": 0.02, "iris": 0.01, "bias": 0.01}},
		{lab, Options{}, map[drivers.DeviceName]float64{"power": 0.2}},
	} {
		b, err := Build(parse(t, c.text), c.options)
		if err != nil {
			t.Fatal(err)
		}
		for _, s := range b.Settings {
			got, is := b.Within[s.Name()]
			if want, known := c.want[s.Name()]; known && (!is || math.Abs(got-want) > 1e-9) || !is {
				t.Errorf("%s may be off by %g %s; want %g", s.Name(), got, s.Unit(), want)
			}
			delete(c.want, s.Name())
		}
		for name := range c.want {
			t.Errorf("the bench has no setting %s", name)
		}
	}
}

func TestAnotherInstrumentAtTheLinesPathIsRefused(t *testing.T) {
	folder := t.TempDir()
	other := parse(t, with(t, `identity: "Skerry Workshop,counter,3,2.0"`, `identity: "Skerry Workshop,counter,4,2.0"`))
	v, err := NewVirtual(other, VirtualOptions{Folder: folder})
	if err != nil {
		t.Fatal(err)
	}
	b, err := Build(demo(t), Options{Links: folder})
	if err != nil {
		t.Fatal(err)
	}
	b.virtual = v // so that live actors are all run by one group
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan error)
	go func() { done <- b.Run(ctx, nil) }()
	defer func() {
		cancel()
		if err := <-done; err != nil {
			t.Error(err)
		}
	}()
	if err := b.Pump.Connect(t.Context()); err != nil {
		t.Errorf("the shutter, which is the right one: %v", err)
	}
	err = b.Counter.Connect(t.Context())
	if drivers.RemedyOf(err) != drivers.GiveUp {
		t.Errorf("got %v, remedy %s; want another counter refused", err, drivers.RemedyOf(err))
	}
}

func TestAPulledAndReplacedPlugIsFoundAgainUnderItsLink(t *testing.T) {
	for name, folder := range map[string]string{"in memory": "", "on a pseudo-terminal": t.TempDir()} {
		t.Run(name, func(t *testing.T) {
			b, v := live(t, demo(t), VirtualOptions{Folder: folder})
			if err := b.Pump.Connect(t.Context()); err != nil {
				t.Fatal(err)
			}
			if err := v.World.Let(trouble.Trouble{Kind: trouble.Unplug, Device: "shutter", For: 20 * time.Second}); err != nil {
				t.Fatal(err)
			}
			failures := 0
			for range 1000 { // bounded by the line's own patience with each attempt
				_, err := b.Pump.State(t.Context())
				if err == nil && failures > 0 {
					return
				}
				if err != nil {
					failures++
					if err := b.Pump.Connect(t.Context()); err != nil && drivers.RemedyOf(err) == drivers.GiveUp {
						t.Fatal(err)
					}
				}
			}
			t.Errorf("%d failures; want the plug noticed and the shutter found again", failures)
		})
	}
}

func TestInstrumentsAreAnsweredThroughAnyFileHandle(t *testing.T) {
	v, err := NewVirtual(demo(t), VirtualOptions{Folder: t.TempDir()})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	g := crew.New(ctx, nil)
	for _, a := range v.Actors() {
		g.Go(a.Name, a.Run)
	}
	var addresses []Address
	defer func() {
		cancel()
		if err := g.Wait(); err != nil {
			t.Error(err)
		}
		for _, a := range addresses {
			if _, err := os.Lstat(a.Path); !errors.Is(err, os.ErrNotExist) {
				t.Errorf("the link of %s is left behind", a.Line)
			}
		}
	}()
	if addresses, err = v.Addresses(t.Context()); err != nil {
		t.Fatal(err)
	}
	for _, a := range addresses {
		want := map[string]string{"counter": "Skerry Workshop,counter,3,2.0\n", "pump_shutter": "Skerry Workshop,shutter,8,1.1\n"}[a.Line]
		if want == "" {
			continue
		}
		if strings.HasPrefix(a.Path, "tcp://") {
			t.Skip("no pseudo-terminals on this system")
		}
		host, err := os.OpenFile(a.Path, os.O_RDWR, 0)
		if err != nil {
			t.Fatal(err)
		}
		if _, err := host.WriteString("*IDN?\n"); err != nil {
			t.Fatal(err)
		}
		answer, err := bufio.NewReader(host).ReadString('\n')
		if err != nil || answer != want {
			t.Errorf("%s answered %q, %v; want %q", a.Line, answer, err, want)
		}
		if err := host.Close(); err != nil {
			t.Fatal(err)
		}
	}
}

func TestABenchIsRealOrSimulatedAndBuildsAccordingly(t *testing.T) {
	lab, err := Load("../../configs/lab-bench.yaml")
	if err != nil {
		t.Fatal(err)
	}
	b, err := Build(lab, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if b.Simulated || b.Pace != 1 || len(b.Lines) != 3 || len(b.Actors()) != 3 || len(b.Devices()) != 4 {
		t.Errorf("simulated %t, pace %d, %d lines, %d actors, %d devices; want a real bench of 3 lines and 4 devices", b.Simulated, b.Pace, len(b.Lines), len(b.Actors()), len(b.Devices()))
	}
	if b.Detectors[0].Protect == nil || b.Detectors[0].Protect != b.Detectors[1].Protect {
		t.Error("the shield is two shutters; want one in front of both detectors")
	}
	if _, err := NewVirtual(lab, VirtualOptions{}); err == nil {
		t.Error("virtual instruments for a real bench; want them refused")
	}
	if _, err := Build(lab, Options{Links: "x"}); err == nil {
		t.Error("links for a real bench; want them refused")
	}
	if _, err := Build(demo(t), Options{}); err == nil {
		t.Error("a simulated bench with no instruments; want it refused")
	}
	if got := demo(t).Pace(); got != 100 {
		t.Errorf("the demo's pace is %d; want 100", got)
	}
}

func TestUnattendedHomingIsHandedToTheEngine(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b, _ := live(t, demo(t), VirtualOptions{})
		if got := fmt.Sprint(b.HomeOrder["rotary"]); got != "[signal_arm idler_arm crystal_tilt]" || !b.Unattended["rotary"] {
			t.Errorf("order %s, unattended %t; want the file's", got, b.Unattended["rotary"])
		}
	})
}

func TestLineEndsAreWrittenAsBytes(t *testing.T) {
	text := with(t, "  counter: {device: simulated}\n", `  counter: {device: simulated, ends_with: '\r\x0A', answers_end_with: '\n'}`+"\n")
	f := parse(t, text)
	for _, l := range f.Lines {
		if l.Name == "counter" && (string(l.EndsWith) != "\r\n" || string(l.AnswersEndWith) != "\n") {
			t.Errorf("line ends %q and %q; want CR LF and LF", l.EndsWith, l.AnswersEndWith)
		}
	}
	for _, bad := range []string{`''`, `'\q'`, `'\x1'`, `'\n\n\n\n\n'`} {
		if _, err := Parse("bench.yaml", []byte(strings.Replace(text, `'\r\x0A'`, bad, 1))); err == nil {
			t.Errorf("the line end %s was accepted; want it refused", bad)
		}
	}
}

// FuzzParse holds that a bench file never panics the reader, and that what was accepted once is
// accepted again and can be built.
func FuzzParse(f *testing.F) {
	for _, name := range []string{"demo", "lab"} {
		file, err := Load("../../configs/" + name + "-bench.yaml")
		if err != nil {
			f.Fatal(err)
		}
		f.Add(file.Text)
	}
	f.Add("bench: {name: a}\nlines: {a: {device: simulated}}\ncounters: {c: {line: a, dialect: custom, asks: {}}}\n")
	f.Fuzz(func(t *testing.T, text string) {
		file, err := Parse("bench.yaml", []byte(text))
		if err != nil {
			return
		}
		if _, err := Parse("bench.yaml", []byte(file.Text)); err != nil {
			t.Fatalf("accepted once only: %v", err)
		}
		o := Options{}
		if file.Simulated() {
			if o.Virtual, err = NewVirtual(file, VirtualOptions{}); err != nil {
				t.Fatalf("accepted, but has no virtual instruments: %v", err)
			}
		}
		if _, err := Build(file, o); err != nil {
			t.Fatalf("accepted, but not built: %v", err)
		}
	})
}
