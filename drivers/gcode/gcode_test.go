package gcode_test

import (
	"context"
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/drivers/custom"
	"gemel/drivers/drivertest"
	"gemel/drivers/gcode"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// config declares a controller that takes RS-274 words and answers the questions that the
// standard leaves open in words of its own.
func config() gcode.Config {
	return gcode.Config{
		Name: "goniometer", Identity: "SKERRY,R2",
		Axes: []custom.Axis{
			{Name: "signal_arm", Letter: "A", Speed: unit.Degree, Mount: drivers.Mount{Sense: 1}},
			{Name: "idler_arm", Letter: "B", Speed: unit.Degree, Mount: drivers.Mount{Sense: -1, Zero: 2 * unit.Degree}},
		},
		Ack: "TAKEN", Nak: "REFUSED (?P<reason>.*)",
		Unasked:  []custom.Unasked{{Match: "HELLO .*", Means: "restarted"}, {Match: "T=.*", Means: "chatter"}},
		Position: custom.Ask{Send: "WHERE", Match: `AT A(?P<A>[+-][0-9]{3}\.[0-9]{4}) B(?P<B>[+-][0-9]{3}\.[0-9]{4}) C[+-][0-9]{3}\.[0-9]{4}`},
		AtRest:   custom.Ask{Send: "REST", Match: "STILL", Otherwise: "TURNING"},
		Stop:     custom.Ask{Bytes: `\x03`},
		Homed:    custom.Ask{Send: "REFD", Match: "REFD A(?P<A>[01]) B(?P<B>[01]) C[01]"},
		Home:     custom.Ask{Send: "REF {letter}", Match: "TAKEN"},
		Mark:     custom.Ask{Send: "MARK {letter}", Match: "TAKEN"},
		AskWho:   custom.Ask{Send: "WHO", Match: "WHO (?P<identity>.*)"},
	}
}

// controller is such a controller, written for these tests: axes that turn evenly from one
// place to the next.
type controller struct {
	mu       sync.Mutex
	from, to [2]float64
	began    time.Time
	takes    time.Duration
	homed    [2]bool
	homing   int // axis + 1
	moves    int
}

func (c *controller) at(now time.Time) [2]float64 {
	if c.takes <= 0 || now.Sub(c.began) >= c.takes {
		return c.to
	}
	share := float64(now.Sub(c.began)) / float64(c.takes)
	var at [2]float64
	for i := range at {
		at[i] = c.from[i] + share*(c.to[i]-c.from[i])
	}
	return at
}

func (c *controller) turn(to [2]float64, perSecond float64) {
	now := time.Now()
	c.from, c.began = c.at(now), now
	c.to = to
	way := math.Hypot(to[0]-c.from[0], to[1]-c.from[1])
	c.takes = time.Duration(way / perSecond * 1e9)
}

var move = regexp.MustCompile(`^G90 G94 G1((?: [AB]-?[0-9]+\.[0-9]{4})+) F([0-9]+(?:\.[0-9]+)?)$`)

func (c *controller) answer(text string) string {
	c.mu.Lock()
	defer c.mu.Unlock()
	now := time.Now()
	at := c.at(now)
	turning := at != c.to
	if !turning && c.homing > 0 {
		c.homed[c.homing-1], c.homing = true, 0
	}
	switch {
	case text == "WHO":
		return "WHO SKERRY,R2,11,3"
	case text == "WHERE":
		return fmt.Sprintf("AT A%+09.4f B%+09.4f C+000.0000", at[0], at[1])
	case text == "REST":
		return map[bool]string{true: "TURNING", false: "STILL"}[turning]
	case text == "REFD":
		return fmt.Sprintf("REFD A%d B%d C0", one(c.homed[0]), one(c.homed[1]))
	case strings.HasPrefix(text, "REF "):
		c.homing = strings.Index("AB", text[4:]) + 1
		to := c.to
		to[c.homing-1] = 0
		c.turn(to, 2)
		return "TAKEN"
	case strings.HasPrefix(text, "MARK "):
		axis := strings.Index("AB", text[5:])
		if !c.homed[axis] {
			return "REFUSED no zero"
		}
		to := c.to
		to[axis] = 0
		c.turn(to, 2)
		return "TAKEN"
	case text == "G21 G90 G94", text == "G54", text == "G92.1":
		return "TAKEN"
	}
	m := move.FindStringSubmatch(text)
	if m == nil {
		return "REFUSED no such words"
	}
	to := c.to
	for w := range strings.FieldsSeq(m[1]) {
		to[strings.Index("AB", w[:1])], _ = strconv.ParseFloat(w[1:], 64)
	}
	if math.Abs(to[0]) > 90 || math.Abs(to[1]) > 90 {
		return "REFUSED limit"
	}
	feed, _ := strconv.ParseFloat(m[2], 64)
	c.turn(to, feed/60)
	c.moves++
	return "TAKEN"
}

func one(b bool) int {
	if b {
		return 1
	}
	return 0
}

func (c *controller) stop() {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.to = c.at(time.Now())
	c.takes, c.homing = 0, 0
}

func (c *controller) restart() {
	c.stop()
	c.mu.Lock()
	defer c.mu.Unlock()
	c.homed = [2]bool{}
}

// setup puts the controller behind a line inside the bubble that runs.
func setup(t *testing.T, cfg gcode.Config) (*custom.Stage, *controller, *drivertest.Far, *line.Line) {
	c := &controller{}
	far := &drivertest.Far{
		Answer: c.answer, AtOnce: map[byte]func(){3: c.stop},
		Chatter: "T=21.5", Banner: "HELLO R2", Restarted: c.restart,
	}
	l := line.New(line.Settings{Name: "east", BackoffMax: 200 * time.Millisecond, Open: func(ctx context.Context) (line.Port, error) { return far.Open(ctx) }})
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan bool)
	go func() { _ = l.Run(ctx); close(done) }()
	t.Cleanup(func() { cancel(); <-done; far.HangUp() })
	stage, err := gcode.NewStage(l, cfg)
	if err != nil {
		t.Fatal(err)
	}
	return stage, c, far, l
}

func TestContract(t *testing.T) {
	drivertest.Stage(t, synctest.Test, func(t *testing.T) drivertest.StageSetup {
		stage, c, far, _ := setup(t, config())
		return drivertest.StageSetup{
			Stage: stage, Wire: far.Wire(), Tolerance: unit.Degrees(0.0001),
			Places: [2]map[drivers.AxisName]unit.Angle{
				{"signal_arm": unit.Degrees(1.5), "idler_arm": unit.Degrees(-2.25)},
				{"signal_arm": unit.Degrees(-1.25), "idler_arm": unit.Degrees(3)},
			},
			Marks: map[drivers.AxisName]unit.Angle{"signal_arm": 0, "idler_arm": unit.Degrees(2)},
			True: func() map[drivers.AxisName]unit.Angle {
				c.mu.Lock()
				defer c.mu.Unlock()
				at := c.at(time.Now())
				return map[drivers.AxisName]unit.Angle{"signal_arm": unit.Degrees(at[0]), "idler_arm": unit.Degrees(2 - at[1])}
			},
		}
	})
}

// Words: RS274/NGC 3.3.2.1, 3.5.2, 2.1.2.5; the file names the rest.
func TestAMoveOfTwoAxesAsTheStandardWritesIt(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		play, err := drivertest.PlayFile("../../testdata/wire/rs274-two-axes.txt")
		if err != nil {
			t.Fatal(err)
		}
		l := line.New(line.Settings{Open: func(context.Context) (line.Port, error) { return play, nil }})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		cfg := config()
		cfg.Axes[0].Speed = unit.Degrees(0.6) // 3 deg in 5 s
		cfg.Axes[1].Speed = unit.Degrees(0.8) // 4 deg in 5 s
		cfg.Axes[1].Mount = drivers.Mount{Sense: 1}
		s, err := gcode.NewStage(l, cfg)
		if err != nil {
			t.Fatal(err)
		}
		if err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		start := time.Now()
		if err := s.Move(t.Context(), map[drivers.AxisName]unit.Angle{"signal_arm": 3 * unit.Degree, "idler_arm": 3 * unit.Degree}); err != nil {
			t.Fatal(err)
		}
		if took := time.Since(start); took < 5*time.Second || took > 5200*time.Millisecond {
			t.Errorf("took %v; want the 5 s of the feed and one more look", took)
		}
		at, err := s.Where(t.Context())
		if err != nil || at["signal_arm"] != 3*unit.Degree || at["idler_arm"] != 3*unit.Degree {
			t.Errorf("%v, %v; want 3 deg both", at, err)
		}
		cancel()
		<-done
		if err := play.Close(); err != nil {
			t.Error(err)
		}
	})
}

func TestWordsHaveNoExponentAndNoNegativeZero(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		stage, c, far, _ := setup(t, config())
		if err := stage.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		for _, target := range []unit.Angle{1, -1, unit.Degrees(-0.00001), unit.Degrees(0.00005), unit.Degrees(-12.34)} {
			if err := stage.Move(t.Context(), map[drivers.AxisName]unit.Angle{"signal_arm": target}); err != nil {
				t.Fatal(err)
			}
		}
		var words []string
		for _, h := range far.Heard() {
			if strings.HasPrefix(h, "G90 G94") {
				words = append(words, strings.Fields(h)[3])
			}
		}
		if got := strings.Join(words, " "); got != "A0.0000 A0.0000 A0.0000 A0.0001 A-12.3400" || c.moves != 5 {
			t.Errorf("sent %q", got)
		}
		err := stage.Move(t.Context(), map[drivers.AxisName]unit.Angle{"signal_arm": 91 * unit.Degree})
		if drivers.RemedyOf(err) != drivers.GiveUp || !strings.Contains(err.Error(), "limit") {
			t.Errorf("%v; want give up, with the controller's reason", err)
		}
	})
}

func TestAControllerThatCannotBeWorkedWithSafelyIsRefused(t *testing.T) {
	l := line.New(line.Settings{})
	for _, tc := range []struct {
		name   string
		change func(*gcode.Config)
		want   []string
	}{
		{"no position", func(c *gcode.Config) { c.Position = custom.Ask{} }, []string{"where", "cannot be read back"}},
		{"no stop", func(c *gcode.Config) { c.Stop = custom.Ask{} }, []string{"stop", "must not be started"}},
		{"no acknowledgement", func(c *gcode.Config) { c.Ack = "" }, []string{"ack"}},
		{"a linear axis", func(c *gcode.Config) { c.Axes[0].Letter = "X" }, []string{"want A, B or C"}},
		{"two axes on one letter", func(c *gcode.Config) { c.Axes[1].Letter = "A" }, []string{"letter of another axis"}},
		{"no speed", func(c *gcode.Config) { c.Axes[0].Speed = 0 }, []string{"speed"}},
		{"relative moves", func(c *gcode.Config) { c.Start = []string{"g 91"} }, []string{"G91"}},
		{"a renamed position", func(c *gcode.Config) { c.Start = []string{"G92 A0"} }, []string{"G92"}},
		{"an end of program", func(c *gcode.Config) { c.Start = []string{"G21 M30"} }, []string{"M30"}},
		{"an axis not in the answer", func(c *gcode.Config) { c.Axes[1].Letter = "C" }, []string{"no group for axis idler_arm"}},
		{"all at once", func(c *gcode.Config) { c.Stop, c.Position, c.Ack = custom.Ask{}, custom.Ask{}, "" }, []string{"stop", "where", "ack"}},
	} {
		cfg := config()
		tc.change(&cfg)
		s, err := gcode.NewStage(l, cfg)
		for _, want := range tc.want {
			if s != nil || err == nil || !strings.Contains(err.Error(), want) {
				t.Errorf("%s: %v; want %q in it", tc.name, err, want)
			}
		}
	}
}
