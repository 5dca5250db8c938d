package bench

import (
	"context"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
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
	v, err := NewVirtual(f, vo)
	if err != nil {
		t.Fatal(err)
	}
	b, err := Build(f, Options{Virtual: v})
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
