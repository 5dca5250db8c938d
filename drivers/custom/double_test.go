package custom

import (
	"context"
	"fmt"
	"math"
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

// slow is a controller of two axes at addresses, whose answers take 10 ms and bear no numbers. One of
// them comes a second time, some time later, as lines with a bad contact or an eager adapter do it.
type slow struct {
	mu       sync.Mutex
	from, to [2]float64 // in steps
	began    time.Time

	next    int // the number of that answer, from 0, counted from the call of arm
	doubled int // and counted from the beginning; -1: not armed yet
	by      time.Duration
	garbled bool // and both times with another digit
	said    int
	far     *drivertest.Far
}

func (s *slow) at(axis int) float64 {
	way, gone := s.to[axis]-s.from[axis], 10_000*time.Since(s.began).Seconds()
	if gone >= math.Abs(way) {
		return s.to[axis]
	}
	return s.from[axis] + math.Copysign(gone, way)
}

func (s *slow) answer(text string) string {
	time.Sleep(10 * time.Millisecond)
	s.mu.Lock()
	defer s.mu.Unlock()
	answer, axis := "OK", 0
	if len(text) > 1 {
		axis = int(text[1]-'0') - 1
	}
	switch text[0] {
	case 'P':
		answer = fmt.Sprintf("P%d", int(math.Round(s.at(axis))))
	case 'S':
		answer = map[bool]string{true: "IDLE", false: "RAMP"}[s.at(axis) == s.to[axis]]
	case 'Z':
		answer = "1"
	case 'M':
		var to float64
		_, _ = fmt.Sscanf(text[3:], "%g", &to)
		s.from = [2]float64{s.at(0), s.at(1)}
		s.began = time.Now()
		s.to[axis] = to
	}
	s.said++
	if s.said-1 == s.doubled {
		if s.garbled {
			answer = strings.Replace(answer, "00", "70", 1)
		}
		time.AfterFunc(s.by, func() { s.far.Say(answer + "\r\n") })
	}
	return answer
}

func (s *slow) arm() {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.doubled = s.said + s.next
}

// with connects a stage to it and runs a test.
func (s *slow) with(t *testing.T, drop string, axes int, speed unit.Angle, test func(t *testing.T, stage *Stage, l *line.Line)) {
	synctest.Test(t, func(t *testing.T) {
		s.far = &drivertest.Far{Answer: s.answer, EndsWith: "\r", Says: "\r\n", AtOnce: map[byte]func(){0x18: func() {
			s.mu.Lock()
			defer s.mu.Unlock()
			s.from = [2]float64{s.at(0), s.at(1)}
			s.to = s.from
		}}}
		l := line.New(line.Settings{Name: "west", Open: func(ctx context.Context) (line.Port, error) { return s.far.Open(ctx) }})
		ctx, cancel := context.WithCancel(context.Background())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		c := plainStage()
		c.Axes[0].Speed = speed
		c.Dialect.Asks["homed"] = Ask{Send: "Z{address}", Match: "1", Otherwise: "0"}
		delete(c.Dialect.Asks, drop)
		second := c.Axes[0]
		second.Name, second.Address = "waveplate", "2"
		c.Axes = append(c.Axes, second)[:axes]
		stage, err := NewStage(l, c)
		if err != nil {
			t.Fatal(err)
		}
		if err := stage.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		stage.TrustZero()
		test(t, stage, l)
		time.Sleep(time.Minute)
		cancel()
		<-done
		s.far.HangUp()
	})
}

// sweep doubles each of the answers after each of the delays.
func sweep(t *testing.T, answers int, damage []bool, test func(t *testing.T, s *slow, what string)) {
	for doubled := range answers {
		for by := time.Millisecond; by < 60*time.Millisecond; by += 3 * time.Millisecond {
			for _, garbled := range damage {
				s := &slow{to: [2]float64{120010, 40020}, doubled: -1, next: doubled, by: by, garbled: garbled}
				s.from = s.to
				test(t, s, fmt.Sprintf("answer %d doubled after %v, garbled %v", doubled, by, garbled))
				if t.Failed() {
					return
				}
			}
		}
	}
}

func TestADoubledAnswerIsNoAngle(t *testing.T) {
	for _, drop := range []string{"", "homed"} {
		sweep(t, 8, []bool{false, true}, func(t *testing.T, s *slow, what string) {
			s.with(t, drop, 2, unit.Degree, func(t *testing.T, stage *Stage, l *line.Line) {
				s.arm()
				for range 3 {
					at, err := stage.Where(t.Context())
					if err != nil && drivers.RemedyOf(err) != drivers.Retry {
						t.Errorf("%s: %v; want retry", what, err)
					}
					if err == nil && (at["crystal_tilt"] != unit.Degrees(12.001) || at["waveplate"] != unit.Degrees(4.002)) {
						t.Errorf("%s: %v; want 12.001 and 4.002 deg", what, at)
					}
				}
			})
		})
	}
}

func TestADoubledAnswerIsNoRest(t *testing.T) {
	for _, drop := range []string{"", "homed"} {
		sweep(t, 12, []bool{false}, func(t *testing.T, s *slow, what string) {
			// Without a speed it is asked at once whether it rests.
			s.with(t, drop, 1, 0, func(t *testing.T, stage *Stage, l *line.Line) {
				s.arm()
				for _, to := range []float64{3, 9} {
					if _, err := stage.Where(t.Context()); err != nil && drivers.RemedyOf(err) != drivers.Retry {
						t.Errorf("%s: %v; want retry", what, err)
					}
					err := stage.Move(t.Context(), map[drivers.AxisName]unit.Angle{"crystal_tilt": unit.Degrees(to)})
					s.mu.Lock()
					rests := s.at(0) == s.to[0] && s.at(1) == s.to[1]
					s.mu.Unlock()
					if !rests {
						t.Errorf("%s: move returns %v while it still turns", what, err)
					}
				}
			})
		})
	}
}

// What a proved angle costs on a line of which answers bear no numbers.
func TestExchangesOfAMoveAndAnAngle(t *testing.T) {
	s := &slow{to: [2]float64{120010, 40020}, doubled: -1}
	s.with(t, "", 2, unit.Degree, func(t *testing.T, stage *Stage, l *line.Line) {
		before := l.Counts().Asked
		if _, err := stage.Where(t.Context()); err != nil {
			t.Fatal(err)
		}
		where := l.Counts().Asked - before
		before = l.Counts().Asked
		if err := stage.Move(t.Context(), map[drivers.AxisName]unit.Angle{"crystal_tilt": 0}); err != nil {
			t.Fatal(err)
		}
		t.Logf("two axes asked one by one: %d exchanges for their angles, %d for a move", where, l.Counts().Asked-before)
	})
}

func TestAStopForEachAxisGoesToAllWhateverTheFirstAnswers(t *testing.T) {
	for name, answer := range map[string]string{"nothing": "", "a refusal": "E9", "something strange": "?"} {
		t.Run(name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				var when [3]time.Time
				far := &drivertest.Far{EndsWith: "\r", Says: "\r\n", Answer: func(text string) string {
					switch text {
					case "X1":
						when[1] = time.Now()
						return answer
					case "X2":
						when[2] = time.Now()
						return "OK"
					case "S1", "S2":
						return "IDLE"
					}
					return "P0"
				}}
				l := line.New(line.Settings{Name: "west", Open: func(ctx context.Context) (line.Port, error) { return far.Open(ctx) }})
				ctx, cancel := context.WithCancel(context.Background())
				done := make(chan bool)
				go func() { _ = l.Run(ctx); close(done) }()
				c := plainStage()
				c.Dialect.Asks["stop"] = Ask{Send: "X{address}", Match: "OK"}
				second := c.Axes[0]
				second.Name, second.Address = "waveplate", "2"
				c.Axes = append(c.Axes, second)
				stage, err := NewStage(l, c)
				if err != nil {
					t.Fatal(err)
				}
				if err := stage.Connect(t.Context()); err != nil {
					t.Fatal(err)
				}
				err = stage.Stop(t.Context())
				if late := when[2].Sub(when[1]); when[1].IsZero() || when[2].IsZero() || late > 200*time.Millisecond {
					t.Errorf("the second axis is stopped %v after the first; want both at once", late)
				}
				if (drivers.RemedyOf(err) == drivers.GiveUp) != (answer == "E9") {
					t.Errorf("%v; want the refusal told, and nothing else", err)
				}
				cancel()
				<-done
				far.HangUp()
			})
		})
	}
}
