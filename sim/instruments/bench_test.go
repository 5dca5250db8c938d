package instruments_test

import (
	"bufio"
	"context"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/sim/crystal"
	"gemel/sim/instruments"
	"gemel/sim/phasematch"
	"gemel/sim/source"
	"gemel/sim/trouble"
)

// sourceModel is that of a small calibration bench; its numbers are invented.
var sourceModel = sync.OnceValues(func() (*source.Model, error) {
	set, err := crystal.Named("bbo-kato-1986")
	if err != nil {
		return nil, err
	}
	arm := source.Arm{Aperture: source.Iris, RadiusMm: 1.5, DistanceMm: 500, Transmittance: 0.8,
		Filter:             source.Filter{CentreNm: 810, WidthNm: 10, Shape: source.FilterGaussian},
		Detector:           source.Detector{Efficiency: 0.5, DarkHz: 300, DeadTimeS: 45e-9, Model: source.NonParalysable},
		FluorescenceHzPerW: 20000, StrayHzPerW: 10000}
	return source.New(source.Optics{Crystal: set, Process: phasematch.EOO, CutDeg: 29.2, ThicknessMm: 2, CrystalCel: 20,
		PumpNm: 405, PumpWaistUm: 100, PumpW: 0.05, PairHzPerMw: 1000, Signal: arm, Idler: arm,
		Counter: source.Counter{WindowS: 10e-9, JitterS: 0.5e-9, Logic: source.EveryPair}})
})

func model(t testing.TB) *source.Model {
	t.Helper()
	m, err := sourceModel()
	if err != nil {
		t.Fatal(err)
	}
	return m
}

var still = source.Pose{PumpW: 0.05, PumpNm: 405, CrystalCel: 20}

func world(t testing.TB, pace int, troubles string) *instruments.World {
	t.Helper()
	list, err := trouble.Parse(troubles)
	if err != nil {
		t.Fatal(err)
	}
	w, err := instruments.NewWorld(instruments.WorldConfig{Seed: 1, Pace: pace, Model: model(t), Still: still, Troubles: list})
	if err != nil {
		t.Fatal(err)
	}
	return w
}

func arms(t testing.TB, w *instruments.World, change func(*instruments.RotaryConfig)) *instruments.Rotary {
	t.Helper()
	axis := func(letter, name, role string) instruments.AxisConfig {
		return instruments.AxisConfig{Letter: letter, Axis: name, Role: role, LowDeg: -10, HighDeg: 190,
			SpeedDegS: 10, AccelDegS2: 20, BacklashDeg: 0.02, StepsPerDeg: 2000, Homed: true}
	}
	c := instruments.RotaryConfig{Name: "stage", Identity: instruments.Identity{Maker: "Skerry", Model: "R3", Serial: "17", Firmware: "1.2"},
		Together: true, Axes: []instruments.AxisConfig{axis("A", "signal_arm", instruments.SignalArm), axis("B", "idler_arm", instruments.IdlerArm), axis("C", "crystal_tilt", instruments.CrystalTilt)}}
	if change != nil {
		change(&c)
	}
	r, err := instruments.NewRotary(w, c)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

func counter(t testing.TB, w *instruments.World, change func(*instruments.CounterConfig)) *instruments.Counter {
	t.Helper()
	c := instruments.CounterConfig{Name: "counter", Identity: instruments.Identity{Maker: "Skerry", Model: "C4", Serial: "3", Firmware: "2.0"},
		Channels: []string{instruments.CountsSignal, instruments.CountsIdler, instruments.CountsPairs, instruments.CountsGates}}
	if change != nil {
		change(&c)
	}
	i, err := instruments.NewCounter(w, c)
	if err != nil {
		t.Fatal(err)
	}
	return i
}

// line is a host that talks to one instrument.
type line struct {
	t    testing.TB
	host *instruments.End
	in   *bufio.Reader
	done chan error
}

func plug(t testing.TB, ctx context.Context, i instruments.Instrument) *line {
	host, device := instruments.Cable(4096)
	l := &line{t: t, host: host, in: bufio.NewReader(host), done: make(chan error, 1)}
	go func() { l.done <- i.Serve(ctx, device) }()
	return l
}

func (l *line) hangUp() {
	l.t.Helper()
	_ = l.host.Close()
	if err := <-l.done; err != nil {
		l.t.Errorf("serve: %v; want nil after the host hung up", err)
	}
}

func (l *line) send(s string) {
	l.t.Helper()
	if _, err := l.host.Write([]byte(s)); err != nil {
		l.t.Fatalf("write %q: %v", s, err)
	}
}

// hear returns the next line, or "" if none comes within the time.
func (l *line) hear(within time.Duration) string {
	l.t.Helper()
	_ = l.host.SetReadDeadline(time.Now().Add(within))
	s, err := l.in.ReadString('\n')
	if err != nil {
		if s != "" {
			l.t.Fatalf("half a line %q: %v", s, err)
		}
		return ""
	}
	return strings.TrimSuffix(s, "\n")
}

// ask sends a line and returns the next one.
func (l *line) ask(q string) string {
	l.t.Helper()
	l.send(q + "\n")
	return l.hear(time.Second)
}

// expect holds a hand-written exchange.
func (l *line) expect(q, want string) {
	l.t.Helper()
	if got := l.ask(q); got != want {
		l.t.Errorf("%q is answered %q; want %q", q, got, want)
	}
}

func bubble(t *testing.T, f func(t *testing.T)) {
	t.Helper()
	synctest.Test(t, f)
}
