package custom

import (
	"context"
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
	"gemel/protocol/unit"
)

// The plain controller of the design's example: one axis at an address, in tenths of a millidegree.
func plainStage() StageConfig {
	return StageConfig{
		Common: Common{Name: "turntable", Dialect: Dialect{
			EndsWith: `\r`, AnswersEndWith: `\r\n`,
			Asks: map[string]Ask{
				"where":   {Send: "P{address}", Match: "P(?P<angle>-?[0-9]+)", AngleIs: unit.Degree / 10_000},
				"move":    {Send: "M{address} {angle}", Match: "OK", Proves: "accepted"},
				"at_rest": {Send: "S{address}", Match: "IDLE", Otherwise: "BUSY|RAMP"},
				"stop":    {Bytes: `\x18`},
				"home":    {Send: "H{address}", Match: "OK"},
			},
			Refused: "E(?P<reason>[0-9]+)",
			Unasked: []Unasked{{Match: "READY", Means: "restarted"}, {Match: "T=.*", Means: "chatter"}},
		}},
		Axes: []Axis{{Name: "crystal_tilt", Address: "1", Speed: unit.Degree, Mount: drivers.Mount{Sense: 1}}},
	}
}

func TestThePlainControllerOfTheManual(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		play, err := drivertest.PlayFile("../../testdata/wire/custom-plain.txt")
		if err != nil {
			t.Fatal(err)
		}
		l := line.New(line.Settings{Open: func(context.Context) (line.Port, error) { return play, nil }})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		s, err := NewStage(l, plainStage())
		if err != nil {
			t.Fatal(err)
		}
		if err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		start := time.Now()
		if err := s.Move(t.Context(), map[drivers.AxisName]unit.Angle{"crystal_tilt": 3 * unit.Degree}); err != nil {
			t.Fatal(err)
		}
		if took := time.Since(start); took < 5864*time.Millisecond || took > 6100*time.Millisecond {
			t.Errorf("took %v; want the 5.864 s of the way and one more look", took)
		}
		s.TrustZero()
		at, err := s.Where(t.Context())
		if err != nil || at["crystal_tilt"] != 3*unit.Degree {
			t.Errorf("%v, %v; want 3 deg", at, err)
		}
		err = s.Move(t.Context(), map[drivers.AxisName]unit.Angle{"crystal_tilt": 900 * unit.Degree})
		if drivers.RemedyOf(err) != drivers.GiveUp || !strings.Contains(err.Error(), "17") {
			t.Errorf("%v; want give up, with the controller's reason", err)
		}
		cancel()
		<-done
		if err := play.Close(); err != nil {
			t.Error(err)
		}
	})
}

func TestDeclarationsThatCannotWorkAreRefusedWithAllFaultsAtOnce(t *testing.T) {
	c := plainStage()
	c.Dialect.Asks = map[string]Ask{
		"where":     {Send: "P{adress}", Match: "P(-?[0-9]+)"},
		"move":      {Send: "M {angle", Match: "OK(", Proves: "perhaps"},
		"at_rest":   {Send: "S", Match: "IDLE"},
		"where_to":  {Send: "X"},
		"arm":       {Send: "X"},
		"homed":     {Send: "R{address}", Match: ".*"},
		"identity":  {Match: "X(?P<speed>.)"},
		"home":      {Send: "H", Bytes: `\x`, Match: "OK"},
		"calibrate": {},
	}
	c.Dialect.Refused = "E(?P<why>.)"
	c.Dialect.Unasked = []Unasked{{Match: "READY", Means: "hello"}, {Means: "chatter"}}
	c.Dialect.Frame = "checksum"
	c.Dialect.EndsWith = `\q`
	c.Axes[0].Mount.Sense = 0
	c.FeedUnit = "rpm"
	s, err := NewStage(line.New(line.Settings{}), c)
	if s != nil || err == nil {
		t.Fatal("taken")
	}
	for _, want := range []string{
		"asks.stop: missing; motion that cannot be stopped",
		"asks.where.send: unknown name {adress}",
		"asks.where.match: no group for axis crystal_tilt",
		"asks.move.send: a brace without its other half",
		`asks.move.match: "OK(" is no RE2 pattern`,
		`asks.move.proves: "perhaps"`,
		"asks.at_rest: want match and otherwise",
		"asks.where_to: unknown question; want one of where, at_rest",
		"asks.arm: is no question for this kind of device",
		`asks.homed.match: ".*" also matches an empty answer`,
		"asks.identity: nothing to send",
		`unknown group "speed"`,
		"asks.home: send and bytes",
		"asks.calibrate: unknown question",
		`refused: unknown group "why"`,
		`unasked[0]: means "hello"`, "unasked[1]: no match",
		`frame: "checksum" is not available yet`,
		`unknown escape \q`,
		"axes[0].sense: 0; want 1 or -1",
		`feed_unit: "rpm"`,
	} {
		if !strings.Contains(err.Error(), want) {
			t.Errorf("%q is missing in:\n%v", want, err)
		}
	}
}

func TestStepsBecomeAnglesExactly(t *testing.T) {
	c := plainStage()
	w := c.Dialect.Asks["where"]
	w.AngleIs = 0
	c.Dialect.Asks["where"] = w
	c.Axes[0].StepsPerTurn, c.Axes[0].Gear = 12800, 90
	s, err := NewStage(line.New(line.Settings{}), c)
	if err != nil {
		t.Fatal(err)
	}
	q := s.questions["where"]
	// 360 deg in 1 152 000 steps is 0.3125 millidegrees a step.
	a, err := angleOf("-9165", s.scale(q, c.Axes[0]))
	if err != nil || a != unit.Degrees(-2.8640625) {
		t.Errorf("%v, %v; want -2.8640625 deg", a, err)
	}
	if got := s.number(s.questions["move"], c.Axes[0], a); got != "-9165" {
		t.Errorf("sent as %s", got)
	}
	c.Dialect.Asks["where"] = Ask{Send: "P{address}", Match: "P(?P<angle>.+)", AngleIs: unit.Degree}
	if _, err := NewStage(line.New(line.Settings{}), c); err == nil || !strings.Contains(err.Error(), "steps_per_turn") {
		t.Errorf("angle_is and steps_per_turn: %v; want a refusal", err)
	}
}

func TestEscapesAreBytes(t *testing.T) {
	if b, err := Bytes(`\x18\r\n\t\0\\x`); err != nil || string(b) != "\x18\r\n\t\x00\\x" {
		t.Errorf("%q, %v", b, err)
	}
	for _, bad := range []string{`\`, `\x1`, `\xzz`, `\q`} {
		if b, err := Bytes(bad); err == nil {
			t.Errorf("%s taken for %q", bad, b)
		}
	}
}

func FuzzDecoding(f *testing.F) {
	for _, s := range []string{"P-28640", "P1e99", "P+", "P0.5", "P--1", "P1e-99", "P99999999999999999999999999"} {
		f.Add(s)
	}
	re, err := parsePattern("P(?P<angle>.+)", []string{"angle"})
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, s string) {
		g := groupsOf(re, []byte(s))
		if g == nil {
			return
		}
		c := plainStage()
		stage := &Stage{device: &device{questions: map[string]*question{"where": {ask: c.Dialect.Asks["where"]}}}, set: c}
		a, err := angleOf(g["angle"], stage.scale(stage.questions["where"], c.Axes[0]))
		if err != nil {
			return
		}
		if v, err := strconv.ParseFloat(g["angle"], 64); err != nil || math.Abs(a.Degrees()-v/10000) > 1e-6*max(1, math.Abs(v)) {
			t.Fatalf("%q became %v", s, a)
		}
		if n, err := count(g["angle"]); err == nil && n > 1<<53 {
			t.Fatalf("%q counted as %d", s, n)
		}
	})
}

// A pattern that is taken covers whole answers and nothing else.
func FuzzPatterns(f *testing.F) {
	for _, s := range [][2]string{{"P(?P<angle>-?[0-9]+)", "P-28640"}, {"OK|BUSY", "xOK"}, {"a)|(b", "ax"}, {"(?i)ready", "READY now"}, {"(?P<reason>.*)x", "E1x"}, {"[", ""}, {"(?s:.)+$", "a\nb"}, {"x\\z|y", "yx"}} {
		f.Add(s[0], []byte(s[1]))
	}
	f.Fuzz(func(t *testing.T, pattern string, answer []byte) {
		re, err := parsePattern(pattern, []string{"angle", "reason"})
		if err != nil || re == nil {
			return
		}
		if re.MatchString("") {
			t.Fatalf("%q matches nothing at all", pattern)
		}
		if at := re.FindIndex(answer); at != nil && (at[0] != 0 || at[1] != len(answer)) {
			t.Fatalf("%q matches %q in %q; want whole answers only", pattern, answer[at[0]:at[1]], answer)
		}
		for name, text := range groupsOf(re, answer) {
			if name != "angle" && name != "reason" || !strings.Contains(string(answer), text) {
				t.Fatalf("%q of %q: group %s is %q", pattern, answer, name, text)
			}
		}
	})
}

func FuzzTemplates(f *testing.F) {
	f.Add(`M{angle}\x0d`)
	f.Fuzz(func(t *testing.T, s string) {
		tmpl, err := parseTemplate(s, []string{"angle"})
		if err != nil {
			return
		}
		if got := tmpl.fill(map[string]string{"angle": "1"}); !strings.Contains(s, "{angle}") && !strings.Contains(s, `\`) && string(got) != s {
			t.Fatalf("%q is sent as %q", s, got)
		}
	})
}

// rig is an instrument of one axis, a counter, a shutter, a sensor and a setting, written for
// these tests.
type rig struct {
	mu    sync.Mutex
	from  float64 // in steps
	to    float64
	began time.Time
	armed time.Time
	gates int
	open  bool
	value string
}

func (r *rig) at() float64 {
	way := r.to - r.from
	gone := 10_000 * time.Since(r.began).Seconds()
	if gone >= math.Abs(way) {
		return r.to
	}
	return r.from + math.Copysign(gone, way)
}

func (r *rig) answer(text string) string {
	r.mu.Lock()
	defer r.mu.Unlock()
	word, value, _ := strings.Cut(text, " ")
	switch word {
	case "P1":
		return fmt.Sprintf("P%d", int(math.Round(r.at())))
	case "M1", "H1":
		to, _ := strconv.ParseFloat("0"+strings.TrimPrefix(value, "-"), 64)
		if strings.HasPrefix(value, "-") {
			to = -to
		}
		r.from, r.to, r.began = r.at(), to, time.Now()
	case "S1":
		return map[bool]string{true: "IDLE", false: "RAMP"}[r.at() == r.to]
	case "ARM":
		r.gates++
		d, _ := strconv.ParseFloat(value, 64)
		r.armed = time.Now().Add(time.Duration(d * 1e6))
	case "N":
		if time.Now().Before(r.armed) {
			return "COUNTING"
		}
		return fmt.Sprintf("N %d/%d/%d", 100+r.gates, 7, r.gates)
	case "END":
		r.armed = time.Time{}
	case "SH":
		r.open = value == "up"
	case "SH?":
		return map[bool]string{true: "SH up", false: "SH down"}[r.open]
	case "V":
		r.value = value
	case "V?":
		return "V=" + r.value
	case "ID":
		return "ID skerry,rig"
	}
	return "OK"
}

func (r *rig) halt() {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.to = math.Round(r.at())
	r.from = r.to
}

func (r *rig) plugged(t *testing.T) (*line.Line, drivertest.Wire) {
	r.value = "1.5"
	far := &drivertest.Far{Answer: r.answer, EndsWith: "\r", Says: "\r\n", AtOnce: map[byte]func(){0x18: r.halt},
		Chatter: "T=21.5", Banner: "READY", Restarted: func() {
			r.halt()
			r.mu.Lock()
			defer r.mu.Unlock()
			r.armed = time.Time{}
		}}
	l := line.New(line.Settings{Name: "west", BackoffMax: 200 * time.Millisecond, Open: func(ctx context.Context) (line.Port, error) { return far.Open(ctx) }})
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan bool)
	go func() { _ = l.Run(ctx); close(done) }()
	t.Cleanup(func() { cancel(); <-done; far.HangUp() })
	return l, far.Wire()
}

func dialect(asks map[string]Ask) Common {
	d := plainStage().Dialect
	d.Asks = asks
	d.Asks["identity"] = Ask{Send: "ID", Match: "ID (?P<identity>.+)"}
	d.Identity = "skerry,rig"
	return Common{Name: "rig", Dialect: d}
}

func TestContracts(t *testing.T) {
	t.Run("stage that cannot tell its zero", func(t *testing.T) {
		drivertest.Stage(t, synctest.Test, func(t *testing.T) drivertest.StageSetup {
			r := &rig{}
			l, wire := r.plugged(t)
			s, err := NewStage(l, plainStage())
			if err != nil {
				t.Fatal(err)
			}
			return drivertest.StageSetup{Stage: s, Wire: wire, Tolerance: unit.Degrees(0.0001),
				Places: [2]map[drivers.AxisName]unit.Angle{{"crystal_tilt": unit.Degrees(2)}, {"crystal_tilt": unit.Degrees(-1.2345)}},
				True: func() map[drivers.AxisName]unit.Angle {
					r.mu.Lock()
					defer r.mu.Unlock()
					return map[drivers.AxisName]unit.Angle{"crystal_tilt": unit.Degrees(r.at() / 10000)}
				}}
		})
	})
	t.Run("counter", func(t *testing.T) {
		drivertest.Counter(t, synctest.Test, func(t *testing.T) drivertest.CounterSetup {
			r := &rig{}
			l, wire := r.plugged(t)
			c, err := NewCounter(l, CounterConfig{Common: dialect(map[string]Ask{
				"arm":    {Send: "ARM {gate}", Match: "OK"},
				"counts": {Send: "N", Match: "N (?P<signal>[0-9]+)/(?P<pairs>[0-9]+)/(?P<gates>[0-9]+)", Otherwise: "COUNTING"},
				"stop":   {Send: "END", Match: "OK"},
			}), Channels: []drivers.Channel{"signal", "pairs", "gates"}, Tag: "gates", GateIs: time.Millisecond})
			if err != nil {
				t.Fatal(err)
			}
			return drivertest.CounterSetup{Counter: c, Wire: wire, Gate: time.Second,
				Opened: func() int { r.mu.Lock(); defer r.mu.Unlock(); return r.gates },
				Last: func() map[drivers.Channel]uint64 {
					r.mu.Lock()
					defer r.mu.Unlock()
					return map[drivers.Channel]uint64{"signal": uint64(100 + r.gates), "pairs": 7, "gates": uint64(r.gates)}
				},
				Counting: func() bool { r.mu.Lock(); defer r.mu.Unlock(); return time.Now().Before(r.armed) }}
		})
	})
	t.Run("shutter", func(t *testing.T) {
		drivertest.Shutter(t, synctest.Test, func(t *testing.T) drivertest.ShutterSetup {
			r := &rig{}
			l, wire := r.plugged(t)
			s, err := NewShutter(l, ShutterConfig{Common: dialect(map[string]Ask{
				"set": {Send: "SH {value}", Match: "OK"}, "get": {Send: "SH?", Match: "SH (?P<value>up|down)"},
			}), Open: "up", Closed: "down", SettleOpen: 100 * time.Millisecond})
			if err != nil {
				t.Fatal(err)
			}
			return drivertest.ShutterSetup{Shutter: s, Wire: wire, Open: func() bool { r.mu.Lock(); defer r.mu.Unlock(); return r.open }}
		})
	})
	value := func(r *rig) func() float64 {
		return func() float64 {
			r.mu.Lock()
			defer r.mu.Unlock()
			v, _ := strconv.ParseFloat(r.value, 64)
			return v
		}
	}
	t.Run("sensor", func(t *testing.T) {
		drivertest.Sensor(t, synctest.Test, func(t *testing.T) drivertest.SensorSetup {
			r := &rig{}
			l, wire := r.plugged(t)
			s, err := NewSensor(l, SensorConfig{Common: dialect(map[string]Ask{"get": {Send: "V?", Match: "V=(?P<value>.+)"}}), Unit: "mW"})
			if err != nil {
				t.Fatal(err)
			}
			return drivertest.SensorSetup{Sensor: s, Wire: wire, True: value(r), Tolerance: 1e-9}
		})
	})
	t.Run("setting", func(t *testing.T) {
		drivertest.Setting(t, synctest.Test, func(t *testing.T) drivertest.SettingSetup {
			r := &rig{}
			l, wire := r.plugged(t)
			s, err := NewSetting(l, SettingConfig{Common: dialect(map[string]Ask{
				"get": {Send: "V?", Match: "V=(?P<value>.+)"}, "set": {Send: "V {value}", Match: "OK"}}), Unit: "mm", Tolerance: 1e-6})
			if err != nil {
				t.Fatal(err)
			}
			return drivertest.SettingSetup{Setting: s, Wire: wire, Values: [2]float64{12.25, -0.5}, True: value(r), Tolerance: 1e-6}
		})
	})
}
