package drivertest

import (
	"context"
	"math"
	"testing"
	"time"

	"gemel/drivers"
)

// ShutterSetup is one shutter to test, not yet connected.
type ShutterSetup struct {
	Shutter drivers.Shutter
	Wire    Wire
	Open    func() bool // whether light passes in truth
}

// Shutter holds a shutter to the contract.
func Shutter(t *testing.T, run Run, setup func(t *testing.T) ShutterSetup) {
	device(t, run, func(t *testing.T) (drivers.Device, Wire, func(context.Context) error) {
		s := setup(t)
		return s.Shutter, s.Wire, func(ctx context.Context) error { _, err := s.Shutter.State(ctx); return err }
	})
	ready := func(t *testing.T) ShutterSetup {
		t.Helper()
		s := setup(t)
		before := s.Open()
		if err := s.Shutter.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		if s.Open() != before {
			t.Error("connecting moved the blade")
		}
		return s
	}
	is := func(t *testing.T, s ShutterSetup, open bool) {
		t.Helper()
		settled(t, "state", func() error {
			blade, err := s.Shutter.State(t.Context())
			if err == nil && (blade.Open != open || s.Open() != open) {
				t.Errorf("state %+v, open in truth %v; want open %v", blade, s.Open(), open)
			}
			return err
		})
	}
	t.Run("it opens and closes, and says so", func(t *testing.T) {
		run(t, func(t *testing.T) {
			s := ready(t)
			for range 2 {
				settled(t, "open", func() error { return s.Shutter.Open(t.Context()) })
				is(t, s, true)
				settled(t, "close", func() error { return s.Shutter.Close(t.Context()) })
				is(t, s, false)
			}
			if err := s.Shutter.Close(t.Context()); err != nil {
				t.Errorf("closing a closed shutter: %v", err)
			}
		})
	})
	t.Run("whatever happens to an answer, what it reports is true", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := ready(t)
			plan(s.Wire)
			for _, open := range []bool{true, false} {
				settled(t, "command", func() error {
					err := map[bool]func(context.Context) error{true: s.Shutter.Open, false: s.Shutter.Close}[open](t.Context())
					if err == nil && s.Open() != open {
						t.Errorf("reports success; open in truth %v, want %v", s.Open(), open)
					}
					return err
				})
				is(t, s, open)
			}
		})
	})
	t.Run("closing from beside goes before opening", func(t *testing.T) {
		run(t, func(t *testing.T) {
			s := ready(t)
			opened := make(chan error)
			go func() { opened <- s.Shutter.Open(t.Context()) }()
			start := time.Now()
			if err := s.Shutter.Close(t.Context()); err != nil && drivers.RemedyOf(err) != drivers.Retry {
				t.Errorf("close: %v", err)
			}
			<-opened
			settled(t, "close", func() error { return s.Shutter.Close(t.Context()) })
			is(t, s, false)
			if took := time.Since(start); took > 10*time.Second {
				t.Errorf("took %v", took)
			}
		})
	})
}

// SensorSetup is one sensor to test, not yet connected.
type SensorSetup struct {
	Sensor    drivers.Sensor
	Wire      Wire
	True      func() float64 // in the sensor's unit
	Tolerance float64
}

// Sensor holds a sensor to the contract.
func Sensor(t *testing.T, run Run, setup func(t *testing.T) SensorSetup) {
	device(t, run, func(t *testing.T) (drivers.Device, Wire, func(context.Context) error) {
		s := setup(t)
		return s.Sensor, s.Wire, func(ctx context.Context) error { _, err := s.Sensor.Read(ctx); return err }
	})
	reads := func(t *testing.T, s SensorSetup) {
		t.Helper()
		settled(t, "read", func() error {
			v, err := s.Sensor.Read(t.Context())
			if err == nil && !(math.Abs(v-s.True()) <= s.Tolerance) {
				t.Errorf("read %v; in truth %v %s", v, s.True(), s.Sensor.Unit())
			}
			return err
		})
	}
	t.Run("whatever happens to an answer, a value is true", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := setup(t)
			if err := s.Sensor.Connect(t.Context()); err != nil {
				t.Fatalf("connect: %v", err)
			}
			if s.Sensor.Unit() == "" {
				t.Error("no unit")
			}
			reads(t, s)
			plan(s.Wire)
			for range 4 {
				reads(t, s)
			}
		})
	})
}

// SettingSetup is one setting to test, not yet connected.
type SettingSetup struct {
	Setting   drivers.Setting
	Wire      Wire
	Values    [2]float64     // that can be set, in its unit
	True      func() float64 // in its unit
	Tolerance float64
}

// Setting holds a setting to the contract.
func Setting(t *testing.T, run Run, setup func(t *testing.T) SettingSetup) {
	device(t, run, func(t *testing.T) (drivers.Device, Wire, func(context.Context) error) {
		s := setup(t)
		return s.Setting, s.Wire, func(ctx context.Context) error { _, err := s.Setting.Get(ctx); return err }
	})
	t.Run("whatever happens to an answer, a value that was set is there", func(t *testing.T) {
		hooks(t, run, func(t *testing.T) Wire { return setup(t).Wire }).each(t, run, func(t *testing.T, plan func(Wire)) {
			s := setup(t)
			before := s.True()
			if err := s.Setting.Connect(t.Context()); err != nil {
				t.Fatalf("connect: %v", err)
			}
			if s.True() != before {
				t.Error("connecting changed the value")
			}
			plan(s.Wire)
			for _, want := range s.Values {
				near := func(what string, v float64) {
					if !(math.Abs(v-want) <= s.Tolerance) {
						t.Errorf("%s %v; want %v %s", what, v, want, s.Setting.Unit())
					}
				}
				settled(t, "set", func() error {
					v, err := s.Setting.Set(t.Context(), want)
					if err == nil {
						near("set returns", v)
						near("in truth", s.True())
					}
					return err
				})
				settled(t, "get", func() error {
					v, err := s.Setting.Get(t.Context())
					if err == nil {
						near("get returns", v)
					}
					return err
				})
			}
			_, err := s.Setting.Set(t.Context(), math.NaN())
			proper(t, "set", err, drivers.GiveUp)
		})
	})
}
