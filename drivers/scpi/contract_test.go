package scpi

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/drivers/drivertest"
	"gemel/drivers/line"
)

// simple is an instrument of a few headers, written for these tests: a shutter, a meter and a
// setting in one. It answers one message with one line.
type simple struct {
	mu      sync.Mutex
	out     bool
	delay   float64
	power   float64
	mask    string
	powerOn bool
}

func (s *simple) answer(message string) string {
	s.mu.Lock()
	defer s.mu.Unlock()
	var answers []string
	say := func(format string, args ...any) { answers = append(answers, fmt.Sprintf(format, args...)) }
	for unit := range strings.SplitSeq(message, ";") {
		header, value, _ := strings.Cut(unit, " ")
		switch header {
		case "*IDN?":
			say("SKERRY,BOX,1,0")
		case "*CLS":
			s.powerOn = false
		case "*ESE":
			s.mask = value
		case "*ESE?":
			say("%s", s.mask)
		case "*ESR?":
			say("%d", map[bool]int{true: 128}[s.powerOn])
			s.powerOn = false
		case ":OUTP":
			s.out = value == "ON"
		case ":OUTP?":
			say("%d", map[bool]int{true: 1}[s.out])
		case ":INIT":
			s.power += 1e-4
		case ":MEAS:POW?":
			s.power += 1e-4
			fallthrough
		case ":FETC?":
			say("%+.5E", s.power)
		case ":DEL":
			s.delay, _ = strconv.ParseFloat(value, 64)
		case ":DEL?":
			say("%+.6E", s.delay)
		case ":STAT:OPER:COND?":
			say("0")
		case ":SYST:ERR?":
			say(`0,"No error"`)
		}
	}
	return strings.Join(answers, ";")
}

func plugged(t *testing.T, answer func(string) string, restarted func()) (*line.Line, *drivertest.Far) {
	far := &drivertest.Far{Answer: answer, Restarted: restarted}
	l := line.New(line.Settings{Name: "east", BackoffMax: 200 * time.Millisecond, Open: func(ctx context.Context) (line.Port, error) { return far.Open(ctx) }})
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan bool)
	go func() { _ = l.Run(ctx); close(done) }()
	t.Cleanup(func() { cancel(); <-done; far.HangUp() })
	return l, far
}

func TestCounterContract(t *testing.T) {
	for _, untagged := range []bool{false, true} {
		t.Run(fmt.Sprintf("untagged %v", untagged), func(t *testing.T) {
			drivertest.Counter(t, synctest.Test, func(t *testing.T) drivertest.CounterSetup {
				in := &counting{}
				l, far := plugged(t, func(m string) string { a, _ := in.message(m); return a },
					func() { in.set(func() { in.restart, in.until, in.mask, in.empty = true, time.Time{}, "0", true }) })
				cfg := counterConfig()
				cfg.Untagged = untagged
				c, err := NewCounter(l, cfg)
				must(t, c, err)
				return drivertest.CounterSetup{
					Counter: c, Wire: far.Wire(), Gate: time.Second,
					Opened: func() int { in.mu.Lock(); defer in.mu.Unlock(); return in.inits },
					Last: func() map[drivers.Channel]uint64 {
						in.mu.Lock()
						defer in.mu.Unlock()
						n := uint64(in.gates)
						return map[drivers.Channel]uint64{"signal": 1000 + n, "idler": 900 + n, "pairs": 50, "gates": n}
					},
					Counting: func() bool { in.mu.Lock(); defer in.mu.Unlock(); return time.Now().Before(in.until) },
				}
			})
		})
	}
}

func TestOtherContracts(t *testing.T) {
	box := func(t *testing.T) (*simple, *line.Line, *drivertest.Far) {
		s := &simple{}
		l, far := plugged(t, s.answer, func() {
			s.mu.Lock()
			defer s.mu.Unlock()
			s.powerOn, s.mask = true, "0"
		})
		return s, l, far
	}
	common := Common{Name: "box", Identity: "SKERRY,BOX"}
	t.Run("shutter", func(t *testing.T) {
		drivertest.Shutter(t, synctest.Test, func(t *testing.T) drivertest.ShutterSetup {
			s, l, far := box(t)
			d, err := NewShutter(l, ShutterConfig{Common: common, SettleOpen: 50 * time.Millisecond})
			must(t, d, err)
			return drivertest.ShutterSetup{Shutter: d, Wire: far.Wire(), Open: func() bool { s.mu.Lock(); defer s.mu.Unlock(); return s.out }}
		})
	})
	for how, set := range map[string]SensorConfig{
		"that is started and fetched": {},
		"that measures when asked":    {Measure: ":MEAS:POW?"},
		"that cannot be asked again":  {Measure: ":MEAS:POW?", Once: true, Agree: 0.15},
	} {
		t.Run("sensor "+how, func(t *testing.T) {
			drivertest.Sensor(t, synctest.Test, func(t *testing.T) drivertest.SensorSetup {
				s, l, far := box(t)
				set := set
				set.Common, set.Unit, set.AnswerUnit = common, "mW", "W"
				d, err := NewSensor(l, set)
				must(t, d, err)
				return drivertest.SensorSetup{Sensor: d, Wire: far.Wire(), Tolerance: 1e-6 + set.Agree, True: func() float64 { s.mu.Lock(); defer s.mu.Unlock(); return s.power * 1000 }}
			})
		})
	}
	t.Run("setting", func(t *testing.T) {
		drivertest.Setting(t, synctest.Test, func(t *testing.T) drivertest.SettingSetup {
			s, l, far := box(t)
			d, err := NewSetting(l, SettingConfig{Common: common, Unit: "ns", AnswerUnit: "s", Tolerance: 1e-3, Set: ":DEL {value}", Get: ":DEL?"})
			must(t, d, err)
			return drivertest.SettingSetup{Setting: d, Wire: far.Wire(), Values: [2]float64{12.5, -3}, Tolerance: 1e-3, True: func() float64 { s.mu.Lock(); defer s.mu.Unlock(); return s.delay * 1e9 }}
		})
	})
}

func TestAShutterThatDoesNotObeyIsAnError(t *testing.T) {
	for _, tc := range []struct {
		passes      string
		answer      string // to every question for the state
		open, close bool   // which of the two must fail
	}{
		{"closed", "0", true, false}, {"closed", "1", false, true},
		{"open", "1", true, false}, {"open", "0", false, true}, // a relay whose open contact lets light pass
	} {
		synctest.Test(t, func(t *testing.T) {
			box := &simple{}
			l, far := plugged(t, func(m string) string {
				a := box.answer(m)
				if strings.Contains(m, ":OUTP?") {
					fields := strings.Split(a, ";")
					fields[0], fields[1] = tc.answer, tc.answer
					a = strings.Join(fields, ";")
				}
				return a
			}, nil)
			s, err := NewShutter(l, ShutterConfig{Common: Common{Name: "pump", Identity: "SKERRY"}, PassesWhen: tc.passes})
			must(t, s, err)
			if err := s.Connect(t.Context()); err != nil {
				t.Fatal(err)
			}
			openErr, closeErr := s.Open(t.Context()), s.Close(t.Context())
			if (openErr != nil) != tc.open || (closeErr != nil) != tc.close {
				t.Errorf("passes when %s, always answers %s: open %v, close %v", tc.passes, tc.answer, openErr, closeErr)
			}
			want := map[string]string{"closed": ":OUTP OFF", "open": ":OUTP ON"}[tc.passes]
			if heard := strings.Join(far.Heard(), "\n"); !strings.Contains(heard, "\n"+want+"\n") {
				t.Errorf("passes when %s: closing sent\n%s\nwant %s", tc.passes, heard, want)
			}
		})
	}
}

func TestABladeThatTheSensorDoesNotSeeMovingIsAnError(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		box := &simple{}
		l, _ := plugged(t, func(m string) string {
			return box.answer(strings.ReplaceAll(m, ":BLAD?", ":STAT:OPER:COND?")) // which says 0
		}, nil)
		s, err := NewShutter(l, ShutterConfig{Common: Common{Name: "pump", Identity: "SKERRY"}, AskBlade: ":BLAD?"})
		must(t, s, err)
		if err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		if err := s.Open(t.Context()); drivers.RemedyOf(err) != drivers.Retry || !strings.Contains(err.Error(), "sensor") {
			t.Errorf("open: %v; want the sensor's word", err)
		}
		if b, err := s.State(t.Context()); err != nil || b.Open || !b.Sensed {
			t.Errorf("%+v, %v; want closed, sensed", b, err)
		}
	})
}

// An 8 hour night has about 30 000 gates; all of it, drivers and journal and engine, must run
// in 5 s. This counts a tenth of them.
func TestTheGatesOfANightTakeLittleTimeOfTheProcessor(t *testing.T) {
	if testing.Short() {
		t.Skip("skipped: takes a second")
	}
	const gates = 3000
	start := time.Now()
	var exchanges int
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		before := l.Counts().Asked
		for range gates {
			in.set(func() { in.heard = in.heard[:0] })
			if _, err := c.Count(t.Context(), time.Second); err != nil {
				t.Fatal(err)
			}
		}
		exchanges = l.Counts().Asked - before
	})
	each := time.Since(start) / gates
	t.Logf("%v a gate, both ends, in %.2f exchanges", each, float64(exchanges)/gates)
	if exchanges > 4*gates+4 || each > 2*time.Millisecond {
		t.Errorf("%v and %.2f exchanges a gate; want 4 exchanges and far less than 2 ms", each, float64(exchanges)/gates)
	}
}

// Two meters in one box on one line: nothing in a question says which of them it is for.
func twoMeters(t *testing.T, answer func(far *drivertest.Far, message, answer string) string, test func(t *testing.T, box *simple, power, other *Sensor)) {
	synctest.Test(t, func(t *testing.T) {
		box := &simple{}
		var far *drivertest.Far
		l, made := plugged(t, func(m string) string { return answer(far, m, box.answer(m)) }, nil)
		far = made
		meter := func(name drivers.DeviceName) *Sensor {
			s, err := NewSensor(l, SensorConfig{Common: Common{Name: name, Start: []string{":RANG 1"}}, Unit: "mW", AnswerUnit: "W"})
			must(t, s, err)
			if err := s.Connect(t.Context()); err != nil {
				t.Fatal(err)
			}
			return s
		}
		defer time.Sleep(time.Minute) // the far end is still at its answer
		test(t, box, meter("power"), meter("other"))
	})
}

func TestMetersOnOneLineNeverTakeEachOthersAnswers(t *testing.T) {
	double := false
	twoMeters(t, func(far *drivertest.Far, message, answer string) string {
		time.Sleep(10 * time.Millisecond)
		if double && strings.Contains(message, ":INIT") {
			double = false
			time.AfterFunc(5*time.Millisecond, func() { far.Say(answer + "\n") })
		}
		return answer
	}, func(t *testing.T, box *simple, power, other *Sensor) {
		double = true
		if _, err := power.Read(t.Context()); err != nil {
			t.Fatal(err)
		}
		v, err := other.Read(t.Context())
		if err != nil || math.Abs(v-box.power*1e3) > 1e-6 {
			t.Errorf("the other meter reads %v, %v; want its own %v, not the answer before", v, err, box.power*1e3)
		}
	})
}

func TestARestartThatOneMeterNoticesIsTheOthersToo(t *testing.T) {
	twoMeters(t, func(_ *drivertest.Far, _, answer string) string { return answer }, func(t *testing.T, box *simple, power, other *Sensor) {
		box.mu.Lock()
		box.powerOn = true
		box.mu.Unlock()
		for _, s := range []*Sensor{power, other} {
			_, err := s.Read(t.Context())
			if e, ok := errors.AsType[*drivers.Error](err); !ok || e.Remedy != drivers.Reconnect || !e.Restarted {
				t.Errorf("%s: %v; want a restart, and reconnect", s.Name(), err)
			}
		}
		for _, s := range []*Sensor{power, other} {
			if err := s.Connect(t.Context()); err != nil {
				t.Fatal(err)
			}
			if _, err := s.Read(t.Context()); err != nil {
				t.Error(err)
			}
		}
	})
}
