package bench

import (
	"bytes"
	"io"
	"slices"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/drivers/drivertest"
	"gemel/drivers/line"
	"gemel/protocol/unit"
	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// spoiler stands between the line and the virtual instrument of one test, and spoils answers when
// the contract asks for it.
type spoiler struct {
	mu      sync.Mutex
	planned map[int]func(*instruments.End, []byte) // by the number of the answer
	said    int
	host    *instruments.End // the instrument's side of what the line holds
}

func (s *spoiler) wrap(_ string, p line.Port) line.Port {
	near, far := instruments.Cable(cableBuffer)
	s.mu.Lock()
	s.host = far
	s.mu.Unlock()
	go func() { // what the line sends
		_, _ = io.Copy(p, far)
		_ = p.Close()
	}()
	go func() { // what the instrument says
		defer far.Close()
		var text []byte
		b := make([]byte, 256)
		for {
			n, err := p.Read(b)
			text = append(text, b[:n]...)
			for {
				i := bytes.IndexByte(text, '\n')
				if i < 0 {
					break
				}
				s.pass(far, bytes.Clone(text[:i+1]))
				text = text[i+1:]
			}
			if err != nil {
				return
			}
		}
	}()
	return near
}

func (s *spoiler) pass(far *instruments.End, answer []byte) {
	s.mu.Lock()
	s.said++
	spoil := s.planned[s.said]
	delete(s.planned, s.said)
	s.mu.Unlock()
	if spoil == nil {
		_, _ = far.Write(answer)
		return
	}
	spoil(far, answer)
}

func (s *spoiler) plan(after int, spoil func(*instruments.End, []byte)) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.planned[s.said+1+after] = spoil
}

// wire is the spoiler as the contract's hooks.
func (s *spoiler) wire(v *Virtual, device string) drivertest.Wire {
	return drivertest.Wire{
		Miss: func(after int) { s.plan(after, func(*instruments.End, []byte) {}) },
		Garble: func(after int) {
			s.plan(after, func(far *instruments.End, a []byte) {
				i := bytes.IndexAny(a, "0123456789")
				i = max(i, 0)
				if a[i]++; a[i] == '9'+1 {
					a[i] = '0'
				}
				_, _ = far.Write(a)
			})
		},
		Double: func(after int) {
			s.plan(after, func(far *instruments.End, a []byte) { _, _ = far.Write(append(a, a...)) })
		},
		Late: func(after int, by time.Duration) {
			s.plan(after, func(far *instruments.End, a []byte) {
				time.AfterFunc(by, func() { _, _ = far.Write(a) })
			})
		},
		Unasked: func() {
			s.mu.Lock()
			defer s.mu.Unlock()
			_, _ = s.host.Write([]byte("T=21.4\n"))
		},
		Restart: func() {
			if err := v.World.Let(trouble.Trouble{Kind: trouble.Restart, Device: device}); err != nil {
				panic(err)
			}
			time.Sleep(3 * time.Second) // virtual: until it is up again
		},
		Unplug: func() {
			if err := v.World.Let(trouble.Trouble{Kind: trouble.Unplug, Device: device, For: 10 * time.Second}); err != nil {
				panic(err)
			}
			time.Sleep(time.Millisecond) // virtual: until the line has noticed
		},
		Plug: func() { time.Sleep(11 * time.Second) }, // virtual: until it is in again
		Pending: func() int {
			s.mu.Lock()
			defer s.mu.Unlock()
			return len(s.planned)
		},
	}
}

// spoiled builds the demo bench at its own pace, with a spoiler on one line.
func spoiled(t *testing.T, lineName, device string) (*Bench, *Virtual, drivertest.Wire) {
	t.Helper()
	return spoiledFile(t, parse(t, with(t, "  clock: 100 ", "  clock: 1 ")), lineName, device)
}

func spoiledFile(t *testing.T, f *File, lineName, device string) (*Bench, *Virtual, drivertest.Wire) {
	t.Helper()
	s := &spoiler{planned: map[int]func(*instruments.End, []byte){}}
	b, v := liveWith(t, f, VirtualOptions{}, func(name string, p line.Port) line.Port {
		if name != lineName {
			return p
		}
		return s.wrap(name, p)
	})
	return b, v, s.wire(v, device)
}

func stageSetup(index int, lineName string, places [2]map[drivers.AxisName]unit.Angle, marks map[drivers.AxisName]unit.Angle, change ...string) func(*testing.T) drivertest.StageSetup {
	return func(t *testing.T) drivertest.StageSetup {
		device := map[string]string{"arms": "rotary", "waveplate": "plate"}[lineName]
		b, v, wire := spoiledFile(t, parse(t, with(t, append([]string{"  clock: 100 ", "  clock: 1 "}, change...)...)), lineName, device)
		stage := b.Stages[index]
		setup := drivertest.StageSetup{Stage: stage, Wire: wire, Places: places, Tolerance: unit.Degrees(0.002), Marks: marks,
			True: func() map[drivers.AxisName]unit.Angle {
				at := map[drivers.AxisName]unit.Angle{}
				for _, axis := range stage.Axes() {
					deg, ok := v.World.TrueDeg(string(axis))
					if !ok {
						t.Fatalf("no axis %s in the world", axis)
					}
					at[axis] = unit.Degrees(deg)
				}
				return at
			}}
		if len(change) > 0 { // its position is only counted
			setup.Push = func(axis drivers.AxisName, by unit.Angle) {
				if err := v.World.Let(trouble.Trouble{Kind: trouble.Slip, Device: string(axis), ByDeg: by.Degrees()}); err != nil {
					t.Fatal(err)
				}
				time.Sleep(time.Millisecond) // virtual: until it has slipped
			}
		}
		return setup
	}
}

// The contract of package drivers, held by every dialect against the virtual instrument that hears
// it: each was written from its own standard, and here they meet.
func TestContractOfStages(t *testing.T) {
	t.Run("gcode", func(t *testing.T) {
		drivertest.Stage(t, synctest.Test, stageSetup(0, "arms", [2]map[drivers.AxisName]unit.Angle{
			{"signal_arm": unit.Degree, "idler_arm": 2 * unit.Degree, "crystal_tilt": 0},
			{"signal_arm": 9 * unit.Degree, "idler_arm": 8 * unit.Degree, "crystal_tilt": unit.Degree},
		}, map[drivers.AxisName]unit.Angle{"signal_arm": unit.Degrees(11.5), "idler_arm": unit.Degrees(11.5), "crystal_tilt": 0}))
	})
	plate := [2]map[drivers.AxisName]unit.Angle{{"pump_waveplate": 0}, {"pump_waveplate": 90 * unit.Degree}}
	t.Run("custom", func(t *testing.T) {
		drivertest.Stage(t, synctest.Test, stageSetup(1, "waveplate", plate, map[drivers.AxisName]unit.Angle{"pump_waveplate": 0}))
	})
	t.Run("custom, position only counted", func(t *testing.T) {
		drivertest.Stage(t, synctest.Test, stageSetup(1, "waveplate", plate, map[drivers.AxisName]unit.Angle{"pump_waveplate": 60 * unit.Degree}, countedPlate...))
	})
}

// countedPlate changes the demo bench so that the wave plate's position is only counted.
var countedPlate = []string{"    park: 0 deg\n    position_from: encoder\n    home: {unattended: true, order: 1}\n",
	"    park: 0 deg\n    position_from: steps\n    verify_home: {every: 30 min, tolerance: 0.02 deg}\n    home: {unattended: true, order: 1, at: 60 deg}\n"}

// last returns the newest record of a device of one of the kinds, and how many there are.
func last(v *Virtual, device string, kinds ...instruments.Kind) (newest instruments.Record, n int) {
	v.World.Settle()
	for _, r := range v.World.Ledger().Records() {
		if r.Device == device && slices.Contains(kinds, r.Kind) {
			newest, n = r, n+1
		}
	}
	return newest, n
}

func TestContractOfCounters(t *testing.T) {
	drivertest.Counter(t, synctest.Test, func(t *testing.T) drivertest.CounterSetup {
		b, v, wire := spoiled(t, "counter", "counter")
		opened := func() int { _, n := last(v, "counter", instruments.GateOpened); return n }
		return drivertest.CounterSetup{Counter: b.Counter, Wire: wire, Gate: 500 * time.Millisecond, Pace: 1, Opened: opened,
			Last: func() map[drivers.Channel]uint64 {
				r, _ := last(v, "counter", instruments.GateClosed)
				counts := map[drivers.Channel]uint64{}
				for i, c := range b.File.Counter.Channels {
					counts[c] = r.Gate.Counts[i]
				}
				return counts
			},
			Counting: func() bool {
				_, over := last(v, "counter", instruments.GateClosed, instruments.GateAborted)
				return opened() > over
			}}
	})
}

func TestContractOfShutters(t *testing.T) {
	drivertest.Shutter(t, synctest.Test, func(t *testing.T) drivertest.ShutterSetup {
		b, v, wire := spoiled(t, "pump_shutter", "shutter")
		return drivertest.ShutterSetup{Shutter: b.Pump, Wire: wire, Open: func() bool {
			r, n := last(v, "shutter", instruments.BladeStarted, instruments.BladeOpened, instruments.BladeClosed)
			return n > 0 && r.Kind != instruments.BladeClosed // a blade under way lets light pass
		}}
	})
}

// The demo's meters are noisy, so that a value which was not measured just now shows.
func TestContractOfSensors(t *testing.T) {
	for i, of := range []struct {
		unit string
		per  float64
	}{{"W", 1e3}, {"Cel", 1}} {
		t.Run(of.unit, func(t *testing.T) {
			drivertest.Sensor(t, synctest.Test, func(t *testing.T) drivertest.SensorSetup {
				b, v, wire := spoiled(t, "monitor", "monitor")
				return drivertest.SensorSetup{Sensor: b.Sensors[i], Wire: wire, Tolerance: 1e-4, True: func() (value float64) {
					v.World.Settle()
					for _, r := range v.World.Ledger().Records() {
						if r.Device == "monitor" && r.Kind == instruments.SensorRead && r.Text == of.unit {
							value = r.Value * of.per
						}
					}
					return value
				}}
			})
		})
	}
}

func TestContractOfSettings(t *testing.T) {
	drivertest.Setting(t, synctest.Test, func(t *testing.T) drivertest.SettingSetup {
		b, v, wire := spoiledFile(t, parse(t, withSettings(t, "  clock: 100 ", "  clock: 1 ")), "laser", "laser")
		return drivertest.SettingSetup{Setting: b.Settings[1], Wire: wire, Values: [2]float64{30, 50}, Tolerance: 1e-3, True: func() float64 {
			r, n := last(v, "laser", instruments.ValueSet)
			if n == 0 {
				return b.File.Optics.PumpPower * 1e3
			}
			return r.Value * 1e3 // W to mW
		}}
	})
}

func TestACountedPositionIsReportedAndVerified(t *testing.T) {
	f := parse(t, with(t, countedPlate...))
	for _, a := range f.Axes {
		counted := a.Name == "pump_waveplate"
		if (a.Proof == drivers.Reported) != counted || (a.Verify != nil) != counted {
			t.Errorf("%s: positions %s, to be verified %+v; want the plate's alone reported and verified", a.Name, a.Proof, a.Verify)
		}
		if counted && (a.Verify.Every != 30*time.Minute || a.Verify.Tolerance != unit.Degrees(0.02) || *a.HomesAt != 60*unit.Degree) {
			t.Errorf("%s: %+v at %v; want what the file says", a.Name, a.Verify, *a.HomesAt)
		}
	}
}
