package instruments_test

import (
	"math"
	"strconv"
	"testing"
	"time"

	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

func plain(t *testing.T, w *instruments.World, change func(*instruments.PlainConfig)) *instruments.Plain {
	t.Helper()
	c := instruments.PlainConfig{Name: "tilt", Identity: instruments.Identity{Maker: "Skerry", Model: "P1", Serial: "9"},
		Axes: []instruments.AxisConfig{
			{Letter: "1", Axis: "crystal_tilt", Role: instruments.CrystalTilt, LowDeg: -20, HighDeg: 200, SpeedDegS: 10, AccelDegS2: 20, BacklashDeg: 0.05, StepsPerDeg: 10000, Homed: true},
			{Letter: "2", Axis: "plate", Role: instruments.PumpWaveplate, LowDeg: -20, HighDeg: 200, SpeedDegS: 10, AccelDegS2: 20, StepsPerDeg: 10000},
		}}
	if change != nil {
		change(&c)
	}
	p, err := instruments.NewPlain(w, c)
	if err != nil {
		t.Fatal(err)
	}
	return p
}

// The exchanges for P, M, S and the refusals follow the example of a declared dialect in the
// design, section 8; the other words are Plain's own.
func TestPlainExchanges(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), plain(t, w, nil))
		for _, c := range []struct{ send, want string }{
			{"I", "ISkerry,P1,9,0"},
			{"P1", "P0"}, {"S1", "IDLE"}, {"Z1", "1"}, {"Z2", "0"},
			{"M1 123450", "OK"},
			{"P9", "E2"}, {"P", "E2"}, {"P1 5", "E3"}, {"M1", "E3"}, {"M1 1.5", "E3"}, {"M1 +5", "E3"}, {"M1 5 6", "E3"}, {"M1 99999999999", "E3"},
			{"Q1", "E1"}, {"p1", "E1"}, {"M1 2000001", "E4"}, {"M2 5", "E5"}, {"H1", "E6"},
		} {
			l.expect(c.send, c.want)
		}
		l.expect("S1", "RAMP")
		time.Sleep(700 * time.Millisecond)
		l.expect("S1", "BUSY")
		l.expect("S2", "IDLE")
		time.Sleep(2 * time.Second)
		l.expect("S1", "IDLE")
		l.expect("P1", "P123450")
		l.expect("M1 -123450", "OK")
		time.Sleep(time.Second)
		l.send("M1 0\x18\n")
		if s := l.hear(time.Second); s != "" {
			t.Errorf("after the stop byte comes %q; want nothing", s)
		}
		l.expect("S1", "IDLE")
		a, err := strconv.Atoi(l.ask("P1")[1:])
		if err != nil || a > 80000 || a < 20000 {
			t.Errorf("stopped at %d units, %v; want half way down", a, err)
		}
		l.expect("M1 0", "OK")
		l.expect("X", "OK")
		l.expect("H2", "OK")
		time.Sleep(10 * time.Second)
		l.expect("Z2", "1")
		l.expect("S2", "IDLE")
		l.hangUp()
	})
}

func TestPlainSpeaksUnasked(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart(tilt, at 65s)")
		l := plug(t, t.Context(), plain(t, w, func(c *instruments.PlainConfig) { c.Chatter = 30 * time.Second }))
		for _, want := range []string{"T=21.4", "T=21.4", "READY", "T=21.4"} {
			if s := l.hear(time.Minute); s != want {
				t.Errorf("comes %q; want %q", s, want)
			}
		}
		l.expect("Z1", "0")
		l.hangUp()
	})
}

func TestShutterTellsWhatWasCommandedAndWhatTheSensorSees(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart(pump, at 10s)")
		s, err := instruments.NewShutter(w, instruments.ShutterConfig{Name: "pump", Blade: instruments.PumpBlade, Travel: 100 * time.Millisecond, Sensor: true})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), s)
		l.expect(":OUTP?;:SENS:STAT?", "0;0")
		l.expect(":OUTPut:STATe ON;:OUTP?", "1")
		time.Sleep(200 * time.Millisecond)
		l.expect(":SENS:STAT?", "1")
		l.expect(":OUTP 0;OUTP?;:SENS:STAT?", "0;1") // told, but the blade has not moved yet
		time.Sleep(50 * time.Millisecond)
		l.expect(":SENS:STAT?", "1") // half closed is not closed
		time.Sleep(60 * time.Millisecond)
		l.expect(":SENS:STAT?", "0")
		l.expect(":OUTP MAYBE;:SYST:ERR?", `-224,"Illegal parameter value;MAYBE"`)
		l.send(":OUTP ON\n")
		time.Sleep(15 * time.Second)
		l.expect(":OUTP?;*ESR?", "0;128") // without power it closes
		w.Settle()
		var kinds []instruments.Kind
		for _, r := range w.Ledger().Records() {
			kinds = append(kinds, r.Kind)
		}
		want := []instruments.Kind{instruments.BladeStarted, instruments.BladeOpened, instruments.BladeStarted, instruments.BladeClosed,
			instruments.BladeStarted, instruments.BladeOpened, instruments.Restarted, instruments.BladeStarted, instruments.BladeClosed}
		if len(kinds) != len(want) {
			t.Fatalf("ledger %v; want %v", kinds, want)
		}
		for i := range want {
			if kinds[i] != want[i] {
				t.Errorf("ledger entry %d is %s; want %s", i+1, kinds[i], want[i])
			}
		}
		l.hangUp()
	})
	t.Run("without a sensor there is no such header", func(t *testing.T) {
		bubble(t, func(t *testing.T) {
			s, err := instruments.NewShutter(world(t, 1, ""), instruments.ShutterConfig{Name: "pump", Blade: instruments.PumpBlade})
			if err != nil {
				t.Fatal(err)
			}
			l := plug(t, t.Context(), s)
			l.expect(":SENS:STAT?;:OUTP?", "")
			l.expect(":SYST:ERR?", `-113,"Undefined header;SENS:STAT"`)
			l.hangUp()
		})
	})
}

func number(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Errorf("%q is no number", s)
	}
	return v
}

func TestMonitorAnswersInTheUnitSet(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "pump_drift(at 1h, for 10m, share -0.2)")
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "meter", Power: true, Temperature: true})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), m)
		l.expect(":UNIT:POW?;TEMP?", "W;CEL")
		l.expect(":MEAS:POW?;TEMP?", "5.000000E-02;2.000000E+01")
		l.expect(":MEASure:SCALar:POWer:DC?", "5.000000E-02")
		l.expect(":UNIT:POW DBM;:UNIT:POW?;:MEAS:POW?", "DBM;1.698970E+01") // 10 log10(50)
		l.expect(":UNIT:TEMP FAR;:MEAS:TEMP?;:UNIT:TEMP K;:MEAS:TEMP?", "6.800000E+01;2.931500E+02")
		l.expect("*RST;:UNIT:POW?;:UNIT:POW MA;:SYST:ERR?", `W;-224,"Illegal parameter value;MA"`)
		time.Sleep(time.Until(w.Origin().Add(65 * time.Minute)))
		if v := number(t, l.ask(":MEAS:POW?")); math.Abs(v-0.045) > 1e-6 {
			t.Errorf("half way down the drift %.6f W; want 0.045", v)
		}
		time.Sleep(time.Hour)
		l.expect(":MEAS:POW?", "4.000000E-02")
		l.hangUp()
	})
}

func TestMonitorNoiseIsItsOwnAndTheSameEachTime(t *testing.T) {
	read := func() (a, b string) {
		bubble(t, func(t *testing.T) {
			m, err := instruments.NewMonitor(world(t, 1, ""), instruments.MonitorConfig{Name: "meter", Power: true, PowerNoise: 0.01})
			if err != nil {
				t.Fatal(err)
			}
			l := plug(t, t.Context(), m)
			a, b = l.ask(":MEAS:POW?"), l.ask(":MEAS:POW?")
			l.hangUp()
		})
		return a, b
	}
	a1, b1 := read()
	a2, b2 := read()
	if a1 != a2 || b1 != b2 || a1 == b1 {
		t.Errorf("read %s, %s and again %s, %s; want the same pair, and two values in it", a1, b1, a2, b2)
	}
}

func TestSettingTravelsToItsValue(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s, err := instruments.NewSetting(w, instruments.SettingConfig{Name: "laser", Header: "SOURce:POWer[:LEVel]", Units: map[string]float64{"W": 1, "MW": 1e-3},
			Low: 0, High: 0.1, Start: 0.05, PerSecond: 0.01, Changes: instruments.PumpPower})
		if err != nil {
			t.Fatal(err)
		}
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "meter", Power: true})
		if err != nil {
			t.Fatal(err)
		}
		l, k := plug(t, t.Context(), s), plug(t, t.Context(), m)
		l.expect(":SOUR:POW 70 MW;:SOUR:POW?", "7.000000E-02")
		time.Sleep(time.Second)
		if v := number(t, l.ask(":SOUR:POW:LEV:ACT?")); math.Abs(v-0.06) > 1e-4 {
			t.Errorf("after 1 s %.5f W; want 0.06", v)
		}
		time.Sleep(2 * time.Second)
		k.expect(":MEAS:POW?", "7.000000E-02")
		l.expect(":SOUR:POW 1;:SYST:ERR?", `-222,"Data out of range"`)
		l.hangUp()
		k.hangUp()
	})
}

func TestWireTroublesReachTheHost(t *testing.T) {
	for _, c := range []struct {
		list string
		want [4]string // what comes within 100 ms of each of four questions
	}{
		{"", [4]string{"0", "0", "0", "0"}},
		{"missing(pump, answer 2)", [4]string{"0", "", "0", "0"}},
		{`garbled(pump, answer 2, byte 0 as "8"); garbled(pump, answer 3, byte 0 as "8")`, [4]string{"0", "8", "9", "0"}},
		{"late(pump, answer 2, by 150ms)", [4]string{"0", "", "0", "0"}}, // the second line comes before the third answer
		{"duplicated(pump, answer 2)", [4]string{"0", "0", "0", "0"}},
		{`unasked(pump, answer 2, line "T=21.4")`, [4]string{"0", "T=21.4", "0", "0"}},
	} {
		bubble(t, func(t *testing.T) {
			w := world(t, 1, c.list)
			s, err := instruments.NewShutter(w, instruments.ShutterConfig{Name: "pump", Blade: instruments.PumpBlade})
			if err != nil {
				t.Fatal(err)
			}
			l := plug(t, t.Context(), s)
			for i, want := range c.want {
				begin := time.Now()
				l.send(":OUTP?\n")
				if got := l.hear(100 * time.Millisecond); got != want {
					t.Errorf("%s: answer %d is %q; want %q", c.list, i+1, got, want)
				}
				time.Sleep(time.Until(begin.Add(100 * time.Millisecond)))
			}
			list, _ := trouble.Parse(c.list)
			n := 0
			for _, r := range w.Ledger().Records() {
				if r.Kind == instruments.Troubled {
					n++
				}
			}
			if n != len(list) {
				t.Errorf("%s: the ledger has %d wire troubles; want %d", c.list, n, len(list))
			}
			l.hangUp()
		})
	}
}

func TestUnplugEndsTheConnectionAndTheDeviceComesBack(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "unplug(stage, at 1s, for 3s)")
		s := arms(t, w, nil)
		l := plug(t, t.Context(), s)
		l.expect("G0 A30", "TAKEN")
		if got := l.hear(time.Minute); got != "" {
			t.Errorf("comes %q; want the end", got)
		}
		if err := <-l.done; err != instruments.ErrUnplugged {
			t.Errorf("serve: %v; want ErrUnplugged", err)
		}
		l = plug(t, t.Context(), s)
		if err := <-l.done; err != instruments.ErrUnplugged || s.Plugged() {
			t.Errorf("serve while unplugged: %v, plugged %v; want ErrUnplugged at once", err, s.Plugged())
		}
		time.Sleep(4 * time.Second)
		if !s.Plugged() {
			t.Error("still unplugged after 3 s")
		}
		l = plug(t, t.Context(), s)
		l.expect("WHERE", "AT A+030.0000 B+000.0000 C+000.0000") // the controller had power all the time
		l.hangUp()
	})
}

func TestTroublesThatCallWhileTheInstrumentWaits(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), arms(t, w, nil))
		time.Sleep(time.Hour)
		if err := w.Let(trouble.Trouble{Kind: trouble.Restart, Device: "stage"}); err != nil {
			t.Fatal(err)
		}
		if s := l.hear(2 * time.Second); s != "HELLO R3" {
			t.Errorf("comes %q; want the banner", s)
		}
		if err := w.Let(trouble.Trouble{Kind: trouble.Missing, Device: "stage", Answer: 1}); err == nil {
			t.Error("a wire trouble was let happen in the world")
		}
		l.hangUp()
	})
}

func TestStrangersAreTroublesOfNobody(t *testing.T) {
	w := world(t, 1, "restart(stage, at 1s); restart(tower, at 1s); lamp(at 1s, for 1s, rate 1 Hz); missing(counter, answer 1); slip(signal_arm, at 1s, by 1 deg); slip(stage, at 1s, by 1 deg)")
	arms(t, w, nil)
	const want = "restart(tower, at 1s); missing(counter, answer 1); slip(stage, at 1s, by 1 deg)"
	if got := w.Strangers().String(); got != want {
		t.Errorf("strangers: %s; want %s", got, want)
	}
}

func TestBytesMayComeOneByOne(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s, c := plug(t, t.Context(), arms(t, w, nil)), plug(t, t.Context(), counter(t, w, nil))
		trickle := func(l *line, text, want string) {
			t.Helper()
			for i := range len(text) {
				l.send(text[i : i+1])
				time.Sleep(3 * time.Millisecond)
			}
			if got := l.hear(time.Second); got != want {
				t.Errorf("%q is answered %q; want %q", text, got, want)
			}
		}
		trickle(s, "G90 G0 A0\r\n", "TAKEN")
		trickle(c, "*ESE 9;*ESE?\r\n", "9")
		s.hangUp()
		c.hangUp()
	})
}

func TestATemperatureIsReachedEverMoreSlowly(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s, err := instruments.NewSetting(w, instruments.SettingConfig{Name: "oven", Header: "SOURce:TEMPerature", Low: 10, High: 80, Start: 20,
			Lag: 40 * time.Second, Within: 0.1, Changes: instruments.CrystalTemperature})
		if err != nil {
			t.Fatal(err)
		}
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "thermometer", Temperature: true})
		if err != nil {
			t.Fatal(err)
		}
		l, k := plug(t, t.Context(), s), plug(t, t.Context(), m)
		l.expect(":SOUR:TEMP 30;:SOUR:TEMP?", "3.000000E+01")
		begun := time.Now()
		for _, after := range []time.Duration{10 * time.Second, 40 * time.Second, 120 * time.Second} {
			time.Sleep(after - time.Since(begun))
			want := 30 - 10*math.Exp(-after.Seconds()/40)
			if v := number(t, k.ask(":MEAS:TEMP?")); math.Abs(v-want) > 0.01 {
				t.Errorf("after %v the crystal has %.3f Cel; want %.3f", after, v, want)
			}
			l.expect(":STAT:OPER:COND?", "2")
		}
		// A tenth of a kelvin of ten is left after ln(100) time constants.
		time.Sleep(time.Duration(40*math.Log(100)*float64(time.Second)) - time.Since(begun) + 100*time.Millisecond)
		l.expect(":STAT:OPER:COND?;*OPC?", "0;1")
		l.expect(":SOUR:TEMP 29.95;:STAT:OPER:COND?", "0") // nearer already than what counts as reached
		l.hangUp()
		k.hangUp()
	})
}

func TestSettingsThatCannotBeAreRefused(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		good := instruments.SettingConfig{Name: "delay", Header: "SOURce:DELay", Low: 0, High: 1, Changes: instruments.Delay}
		if _, err := instruments.NewSetting(w, good); err != nil {
			t.Fatal(err)
		}
		for name, c := range map[string]instruments.SettingConfig{
			"a second delay":                       {Name: "other", Header: "SOURce:DELay", High: 1, Changes: instruments.Delay},
			"a change of nothing there is":         {Name: "other", Header: "SOURce:FOO", High: 1, Changes: "colour"},
			"a lag that never ends":                {Name: "other", Header: "SOURce:TEMPerature", High: 1, Lag: time.Second},
			"both ways to follow":                  {Name: "other", Header: "SOURce:TEMPerature", High: 1, Lag: time.Second, Within: 1, PerSecond: 1},
			"a start outside of what it can be at": {Name: "other", Header: "SOURce:TEMPerature", High: 1, Start: 2},
		} {
			if _, err := instruments.NewSetting(w, c); err == nil {
				t.Errorf("%s is taken; want it refused", name)
			}
		}
	})
}
