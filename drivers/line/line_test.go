package line_test

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/drivers/drivertest"
	"gemel/drivers/line"
)

// instrument is the far end of a line: it hands each thing that ends in a line feed, and each
// stop byte (0x03), to answer.
type instrument struct {
	t      *testing.T
	answer func(in *instrument, text string)

	mu     sync.Mutex
	far    *drivertest.End
	heard  []string
	when   []time.Time
	broken bool // opening fails
	opened int
}

func (in *instrument) open(context.Context) (line.Port, error) {
	in.mu.Lock()
	defer in.mu.Unlock()
	if in.broken {
		return nil, os.ErrNotExist
	}
	near, far := drivertest.Cable()
	in.far = far
	in.opened++
	go in.serve(far)
	return near, nil
}

func (in *instrument) serve(far *drivertest.End) {
	var text []byte
	b := make([]byte, 1)
	for {
		if _, err := far.Read(b); err != nil {
			return
		}
		text = append(text, b[0])
		if b[0] != '\n' && b[0] != 3 {
			continue
		}
		in.mu.Lock()
		in.heard = append(in.heard, strings.TrimSuffix(string(text), "\n"))
		in.when = append(in.when, time.Now())
		in.mu.Unlock()
		if in.answer != nil {
			in.answer(in, strings.TrimSuffix(string(text), "\n"))
		}
		text = nil
	}
}

func (in *instrument) say(text string) {
	in.mu.Lock()
	far := in.far
	in.mu.Unlock()
	_, _ = far.Write([]byte(text))
}

func (in *instrument) sayIn(d time.Duration, text string) {
	in.mu.Lock()
	far := in.far
	in.mu.Unlock()
	time.AfterFunc(d, func() { _, _ = far.Write([]byte(text)) })
}

func (in *instrument) hangUp() {
	in.mu.Lock()
	defer in.mu.Unlock()
	_ = in.far.Close()
}

func (in *instrument) setBroken(b bool) {
	in.mu.Lock()
	defer in.mu.Unlock()
	in.broken = b
}

func (in *instrument) heardAt(text string) (time.Time, bool) {
	in.mu.Lock()
	defer in.mu.Unlock()
	for i := len(in.heard) - 1; i >= 0; i-- {
		if strings.HasSuffix(in.heard[i], text) {
			return in.when[i], true
		}
	}
	return time.Time{}, false
}

func (in *instrument) times(text string) int {
	in.mu.Lock()
	defer in.mu.Unlock()
	n := 0
	for _, h := range in.heard {
		if h == text {
			n++
		}
	}
	return n
}

// any takes every line for the answer: only the line's own rules stand between it and a mistake.
func anything([]byte) line.Verdict { return line.Verdict{Kind: line.Answer} }

func exactly(want string) func([]byte) line.Verdict {
	return func(frame []byte) line.Verdict {
		if string(frame) == want {
			return line.Verdict{Kind: line.Answer}
		}
		return line.Verdict{}
	}
}

func ready(frame []byte) line.Verdict {
	switch {
	case string(frame) == "READY":
		return line.Verdict{Kind: line.Restarted}
	case strings.HasPrefix(string(frame), "T="):
		return line.Verdict{Kind: line.Chatter}
	}
	return line.Verdict{}
}

// onLine runs a test inside a bubble with a line, its owner and one connected seat.
func onLine(t *testing.T, answer func(*instrument, string), change func(*line.Settings), test func(t *testing.T, l *line.Line, s *line.Seat, in *instrument)) {
	t.Helper()
	synctest.Test(t, func(t *testing.T) {
		in := &instrument{t: t, answer: answer}
		set := line.Settings{Name: "east", Open: in.open, Seed: 7}
		if change != nil {
			change(&set)
		}
		l := line.New(set)
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan error)
		go func() { done <- l.Run(ctx) }()
		s := l.Seat(line.SeatSettings{Device: "stage", Unasked: ready})
		if fresh, err := s.Connect(t.Context()); err != nil || !fresh {
			t.Fatalf("connect: fresh %v, %v; want fresh", fresh, err)
		}
		test(t, l, s, in)
		cancel()
		if err := <-done; err != nil {
			t.Errorf("run: %v", err)
		}
		if in.far != nil {
			_ = in.far.Close()
		}
		time.Sleep(time.Minute) // late answers of the script
	})
}

func remedy(t *testing.T, err error, want drivers.Remedy, why line.Why) *drivers.Error {
	t.Helper()
	e, ok := errors.AsType[*drivers.Error](err)
	if !ok {
		t.Fatalf("error %v; want a *drivers.Error", err)
	}
	f, ok := errors.AsType[*line.Fault](err)
	if !ok || f.Why != why || e.Remedy != want {
		t.Fatalf("error %v with remedy %v, why %v; want %v, %v", err, e.Remedy, f.Why, want, why)
	}
	if e.Op == "" || e.Device == "" {
		t.Fatalf("error %#v without op or device", e)
	}
	return e
}

func TestAnAnswerThatIsLateIsNeverTakenForTheNext(t *testing.T) {
	answer := func(in *instrument, text string) {
		if text == "A?" {
			in.sayIn(1500*time.Millisecond, "a\n")
		} else {
			in.say("b\n")
		}
	}
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		start := time.Now()
		_, err := s.Ask(t.Context(), line.Question{Op: "a", Send: []byte("A?"), Judge: anything})
		e := remedy(t, err, drivers.Retry, line.Missing)
		if !errors.Is(e, os.ErrDeadlineExceeded) {
			t.Errorf("%v; want it to wrap os.ErrDeadlineExceeded", err)
		}
		got, err := s.Ask(t.Context(), line.Question{Op: "b", Send: []byte("B?"), Judge: anything})
		if err != nil || string(got) != "b" {
			t.Fatalf("got %q, %v; want b", got, err)
		}
		if took := time.Since(start); took < 2*time.Second || took > 2300*time.Millisecond {
			t.Errorf("took %v; want the longest answer time and little more", took)
		}
		c := l.Counts()
		if c.Strays != 1 || c.Missing != 1 || c.Resynchronised < 2 || c.Asked != 2 {
			t.Errorf("counts %+v; want the late answer counted once", c)
		}
	})
}

func TestAQuestionThatMayBeRepeatedIsRepeatedOnlyInStep(t *testing.T) {
	n := 0
	answer := func(in *instrument, text string) {
		if n++; n == 1 {
			in.sayIn(1900*time.Millisecond, "1\n") // late, and just inside the longest answer time
		} else {
			in.say(fmt.Sprintf("%d\n", n))
		}
	}
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		got, err := s.Ask(t.Context(), line.Question{Op: "n", Send: []byte("N?"), Judge: anything, Repeat: 2})
		if err != nil || string(got) != "2" {
			t.Errorf("got %q, %v; want 2", got, err)
		}
		if c := l.Counts(); c.Retried != 1 || c.Strays != 1 {
			t.Errorf("counts %+v; want one retry and one stray", c)
		}
	})
}

func TestADoubledAnswerIsDropped(t *testing.T) {
	answer := func(in *instrument, text string) { in.say(text + "\n" + text + "\n") }
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		for _, q := range []string{"one", "two", "three"} {
			got, err := s.Ask(t.Context(), line.Question{Op: q, Send: []byte(q), Judge: anything})
			if err != nil || string(got) != q {
				t.Errorf("got %q, %v; want %q", got, err, q)
			}
		}
		if c := l.Counts(); c.Strays != 2 {
			t.Errorf("%d strays; want 2", c.Strays)
		}
	})
}

func TestAHalfAnswerInTheInputIsWaitedOut(t *testing.T) {
	answer := func(in *instrument, text string) { in.say("good\n") }
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		in.say("ba")
		in.sayIn(20*time.Millisecond, "d\n")
		got, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything})
		if err != nil || string(got) != "good" {
			t.Errorf("got %q, %v; want good", got, err)
		}
	})
}

func TestAStrangerPutsTheLineOutOfStep(t *testing.T) {
	n := 0
	answer := func(in *instrument, text string) {
		if n++; n == 1 {
			in.say("?#!\n")
			in.sayIn(300*time.Millisecond, "right\n")
		} else {
			in.say("right\n")
		}
	}
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		got, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: exactly("right"), Repeat: 1})
		if err != nil || string(got) != "right" || n != 2 {
			t.Errorf("got %q, %v after %d questions; want right after 2", got, err, n)
		}
		if c := l.Counts(); c.Strangers != 1 || c.Strays != 1 {
			t.Errorf("counts %+v; want one stranger and one stray", c)
		}
		_, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: exactly("other")})
		remedy(t, err, drivers.Retry, line.Strange)
	})
}

func TestChatterIsDroppedAndRestartsAreNoticed(t *testing.T) {
	answer := func(in *instrument, text string) {
		switch text {
		case "Q":
			in.say("T=21.5\nok\n")
		case "R":
			in.say("READY\n")
		case "L":
			in.sayIn(1700*time.Millisecond, "READY\n")
		}
	}
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		in.say("T=20.0\n")
		ask := func(text string) error {
			got, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte(text), Judge: exactly("ok")})
			if err == nil && string(got) != "ok" {
				t.Errorf("got %q", got)
			}
			return err
		}
		if err := ask("Q"); err != nil {
			t.Errorf("with chatter: %v", err)
		}
		reconnect := func() {
			t.Helper()
			if fresh, err := s.Connect(t.Context()); err != nil || !fresh {
				t.Fatalf("connect: fresh %v, %v; want fresh after a restart", fresh, err)
			}
			if err := ask("Q"); err != nil {
				t.Fatalf("after connecting: %v", err)
			}
		}
		if e := remedy(t, ask("R"), drivers.Reconnect, line.Restart); !e.Restarted {
			t.Error("restart instead of an answer: not marked")
		}
		if e := remedy(t, ask("Q"), drivers.Reconnect, line.Restart); !e.Restarted {
			t.Error("until connected: not marked")
		}
		reconnect()
		in.say("READY\n")
		remedy(t, ask("Q"), drivers.Reconnect, line.Restart) // while idle
		reconnect()
		remedy(t, ask("L"), drivers.Retry, line.Missing)
		remedy(t, ask("Q"), drivers.Reconnect, line.Restart) // during resynchronisation
		reconnect()
		if fresh, err := s.Connect(t.Context()); err != nil || fresh {
			t.Errorf("connected again on a healthy line: fresh %v, %v; want neither", fresh, err)
		}
		if c := l.Counts(); c.Restarts != 3 || c.Opened != 1 || c.Chatter < 4 {
			t.Errorf("counts %+v; want 3 restarts on one opening, and the chatter", c)
		}
	})
}

func TestDevicesThatShareALineHearEachOthersRestartsAndReopenings(t *testing.T) {
	answer := func(in *instrument, text string) {
		if text == "Q" {
			in.say("HELLO\nok\n")
		}
		if text == "P" {
			in.say("ok\n")
		}
	}
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		other := l.Seat(line.SeatSettings{Device: "shutter", Unasked: func(f []byte) line.Verdict {
			if string(f) == "HELLO" {
				return line.Verdict{Kind: line.Restarted}
			}
			return line.Verdict{}
		}})
		_, err := other.Ask(t.Context(), line.Question{Op: "q", Send: []byte("P"), Judge: exactly("ok")})
		remedy(t, err, drivers.Reconnect, line.Lost) // never connected
		if _, err := other.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		if _, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: exactly("ok")}); err != nil {
			t.Errorf("the other device's restart spoils this answer: %v", err)
		}
		_, err = other.Ask(t.Context(), line.Question{Op: "q", Send: []byte("P"), Judge: exactly("ok")})
		remedy(t, err, drivers.Reconnect, line.Restart)

		in.hangUp()
		_, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("P"), Judge: exactly("ok")})
		remedy(t, err, drivers.Reconnect, line.Lost)
		if fresh, err := other.Connect(t.Context()); err != nil || !fresh {
			t.Fatalf("fresh %v, %v", fresh, err)
		}
		_, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("P"), Judge: exactly("ok")})
		remedy(t, err, drivers.Reconnect, line.Lost) // the line is open, but this device has not connected
		if fresh, err := s.Connect(t.Context()); err != nil || !fresh || in.opened != 2 {
			t.Errorf("fresh %v, %v, %d openings; want fresh on the second", fresh, err, in.opened)
		}
	})
}

func TestUrgentBytesArriveWithinASecondInEveryPhase(t *testing.T) {
	for _, tc := range []struct {
		phase string
		begin func(in *instrument, s *line.Seat)
		after time.Duration
	}{
		{"idle", func(*instrument, *line.Seat) {}, time.Second},
		{"waiting for an answer", func(in *instrument, s *line.Seat) {
			_, _ = s.Ask(in.t.Context(), line.Question{Op: "q", Send: []byte("silence"), Judge: anything, Within: time.Minute})
		}, 10 * time.Second},
		{"resynchronising", func(in *instrument, s *line.Seat) {
			_, _ = s.Ask(in.t.Context(), line.Question{Op: "q", Send: []byte("silence"), Judge: anything, Repeat: 5})
		}, 5 * time.Second},
		{"draining a line that never falls quiet", func(in *instrument, s *line.Seat) {
			for i := range 1000 {
				in.sayIn(time.Duration(i)*10*time.Millisecond, "noise\n")
			}
			_, _ = s.Connect(in.t.Context())
		}, 2 * time.Second},
		{"after the line was lost", func(in *instrument, s *line.Seat) {
			in.hangUp()
			_, _ = s.Ask(in.t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: anything})
		}, time.Second},
		{"while the line is being opened again", func(in *instrument, s *line.Seat) {
			in.hangUp()
			in.setBroken(true)
			_, _ = s.Ask(in.t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: anything})
			time.AfterFunc(3900*time.Millisecond, func() { in.setBroken(false) })
			_, _ = s.Connect(in.t.Context())
		}, 4 * time.Second},
	} {
		t.Run(tc.phase, func(t *testing.T) {
			quick := func(s *line.Settings) {
				s.LongestAnswer = 20 * time.Second
				s.BackoffMax = 500 * time.Millisecond
			}
			onLine(t, nil, quick, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
				done := make(chan bool)
				go func() { tc.begin(in, s); close(done) }()
				time.Sleep(tc.after)
				start := time.Now()
				ctx, cancel := context.WithTimeout(t.Context(), time.Second)
				defer cancel()
				_, err := s.Urgent(ctx, line.Question{Op: "stop", Send: []byte{3}, Bare: true})
				synctest.Wait()
				at, heard := in.heardAt("\x03")
				if err != nil || !heard || at.Sub(start) > time.Second {
					t.Errorf("stop: %v, heard %v after %v; want it within 1 s", err, heard, at.Sub(start))
				}
				<-done
				if c := l.Counts(); c.Urgent != 1 {
					t.Errorf("%d urgent; want 1", c.Urgent)
				}
			})
		})
	}
}

func TestAnUrgentMessageEndsTheQuestionAndTheEpoch(t *testing.T) {
	onLine(t, nil, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		epoch := s.Epoch()
		failed := make(chan error)
		go func() {
			_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("silence"), Judge: anything, Within: time.Hour, Repeat: 9})
			failed <- err
		}()
		time.Sleep(time.Second)
		if _, err := s.Urgent(t.Context(), line.Question{Op: "stop", Send: []byte{3}, Bare: true}); err != nil {
			t.Fatal(err)
		}
		remedy(t, <-failed, drivers.Retry, line.Interrupted)
		if !epoch.Over() || s.Epoch().Over() {
			t.Error("want the old epoch over and a new one begun")
		}
		_, err := s.Ask(t.Context(), line.Question{Op: "move", Send: []byte("GO"), Epoch: epoch})
		remedy(t, err, drivers.Retry, line.Interrupted)
		if in.times("GO") != 0 {
			t.Error("a motion of an epoch that is over was sent")
		}
	})
}

func TestAnUrgentMessageOnAnIdleLineGetsItsAnswer(t *testing.T) {
	answer := func(in *instrument, text string) { in.sayIn(30*time.Millisecond, "ok "+text+"\n") }
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		got, err := s.Urgent(t.Context(), line.Question{Op: "close", Send: []byte("CLOSE"), Judge: anything})
		if err != nil || string(got) != "ok CLOSE" {
			t.Errorf("got %q, %v; want its answer", got, err)
		}
		got, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything})
		if err != nil || string(got) != "ok Q" {
			t.Errorf("next question got %q, %v", got, err)
		}
	})
}

func TestTheEndOfAContextEndsTheQuestionWithoutARemedy(t *testing.T) {
	onLine(t, nil, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		why := errors.New("a guard broke")
		ctx, cancel := context.WithCancelCause(t.Context())
		time.AfterFunc(100*time.Millisecond, func() { cancel(why) })
		start := time.Now()
		_, err := s.Ask(ctx, line.Question{Op: "q", Send: []byte("silence"), Judge: anything, Within: time.Hour})
		if took := time.Since(start); took > 200*time.Millisecond {
			t.Errorf("took %v", took)
		}
		e := remedy(t, err, 0, line.Ended)
		if !errors.Is(err, why) || !errors.Is(err, context.Canceled) || drivers.RemedyOf(err) != 0 {
			t.Errorf("%v; want the cause in it and no remedy", e)
		}
	})
}

func TestAPanicInAJudgeIsAnErrorAndTheOwnerLives(t *testing.T) {
	answer := func(in *instrument, text string) { in.say("ok\n") }
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: func([]byte) line.Verdict { panic("bad judge") }})
		e := remedy(t, err, drivers.GiveUp, line.Panicked)
		if !strings.Contains(e.Error(), "bad judge") || !strings.Contains(e.Error(), "line_test.go") {
			t.Errorf("%v; want the panic and its stack", e)
		}
		if got, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything}); err != nil || string(got) != "ok" {
			t.Errorf("got %q, %v; want the owner alive", got, err)
		}
	})
}

func TestAnEchoIsTakenAwayAndNothingElseForIt(t *testing.T) {
	answer := func(in *instrument, text string) { in.say(text + "\n" + "answer\n") }
	onLine(t, answer, func(s *line.Settings) { s.Echo = true }, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		for range 2 {
			got, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything})
			if err != nil || string(got) != "answer" {
				t.Errorf("got %q, %v; want answer", got, err)
			}
		}
	})
	noEcho := func(in *instrument, text string) { in.say("answer\n") }
	onLine(t, noEcho, func(s *line.Settings) { s.Echo = true }, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything})
		remedy(t, err, drivers.Retry, line.Strange)
	})
}

func TestALineThatNeverFallsQuietIsAnErrorInBoundedTime(t *testing.T) {
	onLine(t, nil, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		for i := range 3000 {
			in.sayIn(time.Duration(i)*10*time.Millisecond, "noise\n")
		}
		start := time.Now()
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: exactly("ok")})
		remedy(t, err, drivers.Retry, line.Strange)
		if took := time.Since(start); took > 10*time.Second {
			t.Errorf("took %v", took)
		}
	})
}

func TestAnAnswerWithoutAnEndIsBounded(t *testing.T) {
	answer := func(in *instrument, text string) { in.say(strings.Repeat("x", 5000)) }
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything})
		remedy(t, err, drivers.Retry, line.Strange)
	})
}

// deaf takes no byte.
type deaf struct{ *drivertest.End }

func (deaf) Write([]byte) (int, error) {
	time.Sleep(500 * time.Millisecond)
	return 0, os.ErrDeadlineExceeded
}

func TestAWriteThatHangsLosesThePort(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		near, _ := drivertest.Cable()
		l := line.New(line.Settings{Name: "east", Open: func(context.Context) (line.Port, error) { return deaf{near}, nil }})
		ctx, cancel := context.WithCancel(t.Context())
		go func() { _ = l.Run(ctx) }()
		defer cancel()
		s := l.Seat(line.SeatSettings{Device: "stage"})
		if _, err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything, Repeat: 3})
		remedy(t, err, drivers.Reconnect, line.Lost)
		if f, _ := errors.AsType[*line.Fault](err); !f.Sent {
			t.Error("part of it may be on its way: want Sent")
		}
		if _, err := near.Read(nil); !errors.Is(err, io.EOF) {
			t.Errorf("port: %v; want it closed", err)
		}
	})
}

func TestOpeningIsBoundedAndAHeldPortIsAnErrorAtOnce(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		failure := error(os.ErrNotExist)
		tries := 0
		l := line.New(line.Settings{Name: "east", OpenWithin: 5 * time.Second, Open: func(context.Context) (line.Port, error) {
			tries++
			return nil, fmt.Errorf("/dev/nowhere: %w", failure)
		}})
		ctx, cancel := context.WithCancel(t.Context())
		defer cancel()
		go func() { _ = l.Run(ctx) }()
		s := l.Seat(line.SeatSettings{Device: "stage"})
		start := time.Now()
		_, err := s.Connect(t.Context())
		remedy(t, err, drivers.Reconnect, line.Lost)
		if !errors.Is(err, os.ErrNotExist) || time.Since(start) != 5*time.Second || tries < 5 || tries > 30 {
			t.Errorf("%v after %v and %d tries; want 5 s and a handful", err, time.Since(start), tries)
		}
		failure = line.ErrHeld
		start = time.Now()
		_, err = s.Connect(t.Context())
		remedy(t, err, drivers.GiveUp, line.Unusable)
		if time.Since(start) != 0 {
			t.Errorf("took %v", time.Since(start))
		}
	})
}

func TestAfterTheOwnerEndedEveryQuestionIsRefused(t *testing.T) {
	onLine(t, nil, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {})
	synctest.Test(t, func(t *testing.T) {
		in := &instrument{t: t}
		l := line.New(line.Settings{Open: in.open})
		s := l.Seat(line.SeatSettings{Device: "stage"})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		if _, err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		waiting := make(chan error)
		go func() {
			_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything, Within: time.Hour})
			waiting <- err
		}()
		time.Sleep(time.Second)
		cancel()
		remedy(t, <-waiting, drivers.GiveUp, line.Closed)
		<-done
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("Q"), Judge: anything})
		remedy(t, err, drivers.GiveUp, line.Closed)
		if !errors.Is(err, drivers.ErrClosed) {
			t.Errorf("%v; want drivers.ErrClosed", err)
		}
	})
}

func TestTheWireLogIsBoundedAndInOrder(t *testing.T) {
	answer := func(in *instrument, text string) { in.say(text + "\n") }
	onLine(t, answer, func(s *line.Settings) { s.History = 5 }, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		for i := range 12 {
			if _, err := s.Ask(t.Context(), line.Question{Op: "n", Send: fmt.Appendf(nil, "n%d", i), Judge: anything}); err != nil {
				t.Fatal(err)
			}
		}
		var b strings.Builder
		if err := l.Dump(&b); err != nil {
			t.Fatal(err)
		}
		entries := l.Entries()
		if len(entries) != 5 || string(entries[0].Sent) != "n7" || string(entries[4].Got) != "n11" || strings.Count(b.String(), "\n") != 5 {
			t.Errorf("%d entries:\n%s", len(entries), b.String())
		}
	})
}

func TestAPortThatIsLostAtOnceIsOpenedAgainWithPauses(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		tries := 0
		l := line.New(line.Settings{Name: "east", OpenWithin: 5 * time.Second, Open: func(context.Context) (line.Port, error) {
			if tries++; tries == 1000 {
				return nil, line.ErrHeld // or this test would never end
			}
			near, far := drivertest.Cable()
			return near, far.Close()
		}})
		ctx, cancel := context.WithCancel(t.Context())
		defer cancel()
		go func() { _ = l.Run(ctx) }()
		s := l.Seat(line.SeatSettings{Device: "stage"})
		for range 4 {
			before, start := tries, time.Now()
			_, err := s.Connect(t.Context())
			e := remedy(t, err, drivers.Reconnect, line.Lost)
			if took := time.Since(start); took < 4*time.Second || took > 5*time.Second || tries-before > 30 {
				t.Errorf("%v after %v and %d openings; want 5 s and a handful", e, took, tries-before)
			}
		}
		before, start := tries, time.Now()
		_, _ = s.Urgent(t.Context(), line.Question{Op: "stop", Send: []byte{3}, Bare: true})
		if tries != before+1 || time.Since(start) != 0 {
			t.Errorf("%d openings for an urgent message after %v; want one at once", tries-before, time.Since(start))
		}
	})
}

func TestAPortThatWasOpenForLongIsOpenedAgainWithoutAPause(t *testing.T) {
	onLine(t, nil, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		time.Sleep(10 * time.Second)
		in.hangUp()
		_, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: anything})
		remedy(t, err, drivers.Reconnect, line.Lost)
		start := time.Now()
		if _, err := s.Connect(t.Context()); err != nil || time.Since(start) > 60*time.Millisecond {
			t.Errorf("%v after %v; want it connected as soon as it was quiet", err, time.Since(start))
		}
	})
}

// mute is lost with the first write.
type mute struct{ *drivertest.End }

func (mute) Write([]byte) (int, error) { return 0, io.ErrClosedPipe }

func TestAConnectOutlivesAnUrgentMessageThatLosesThePort(t *testing.T) {
	for name, spoil := range map[string]func(*drivertest.End) line.Port{
		"after a while": func(e *drivertest.End) line.Port { return deaf{e} },
		"at once":       func(e *drivertest.End) line.Port { return mute{e} },
	} {
		t.Run(name, func(t *testing.T) {
			next := func(e *drivertest.End) line.Port { return e }
			onLine(t, func(in *instrument, text string) { in.say("A\n") }, func(set *line.Settings) {
				open := set.Open
				set.Open = func(ctx context.Context) (line.Port, error) {
					p, err := open(ctx)
					if err != nil {
						return nil, err
					}
					p = next(p.(*drivertest.End))
					next = func(e *drivertest.End) line.Port { return e }
					return p, nil
				}
			}, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
				q := line.Question{Op: "q", Send: []byte("Q"), Judge: anything}
				next = spoil
				in.hangUp()
				_, err := s.Ask(t.Context(), q)
				remedy(t, err, drivers.Reconnect, line.Lost)
				time.Sleep(10 * time.Second)
				connected := make(chan error)
				go func() { _, err := s.Connect(t.Context()); connected <- err }()
				time.Sleep(10 * time.Millisecond)
				_, err = s.Urgent(t.Context(), line.Question{Op: "stop", Send: []byte{3}, Bare: true})
				remedy(t, err, drivers.Reconnect, line.Lost)
				if err := <-connected; err != nil {
					t.Fatalf("connect: %v; want the line opened again", err)
				}
				if _, err := s.Ask(t.Context(), q); err != nil {
					t.Errorf("%v; want a line that is open after Connect", err)
				}
			})
		})
	}
}
