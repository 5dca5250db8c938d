package scpi

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/drivers/drivertest"
	"gemel/drivers/line"
)

// Number forms: NR1, NR2, NR3 of IEEE 488.2 8.7; flags of SCPI-1999 volume 1, 7.2.1.
func TestNumbersAreReadStrictly(t *testing.T) {
	for _, tc := range []struct {
		text string
		want float64
		err  error
	}{
		{"0", 0, nil}, {"+12034", 12034, nil}, {"-7", -7, nil}, {"1.5", 1.5, nil}, {"-.5", -.5, nil}, {"3.", 3, nil},
		{"+1.20340000E+04", 12034, nil}, {"1e-3", 1e-3, nil}, {"1.250E-008", 1.25e-8, nil},
		{"9.91E+37", 0, errNotANumber}, {"9.91E37", 0, errNotANumber}, {"9.9E+37", 0, errOverRange}, {"-9.9E+37", 0, errOverRange}, {"1E300", 0, errOverRange},
	} {
		got, err := number(tc.text)
		if !errors.Is(err, tc.err) || (err == nil && got != tc.want) {
			t.Errorf("%q: %v, %v; want %v, %v", tc.text, got, err, tc.want, tc.err)
		}
	}
	for _, bad := range []string{"", "+", ".", "E5", "1E", "1E+", "1 ", " 1", "0x10", "1_000", "Inf", "NaN", "nan", "1,5", "1.2.3", "--1", "1E5.0", "1E999999", "12O34", strings.Repeat("1", 65)} {
		if v, err := number(bad); err == nil {
			t.Errorf("%q taken for %v; want an error", bad, v)
		}
	}
}

func TestCountsAreWholeAndBelowTwoToThe53(t *testing.T) {
	for text, want := range map[string]uint64{"0": 0, "+5.12000000E+02": 512, "9007199254740991": 1<<53 - 1, "9876.0": 9876} {
		if got, err := count(text); err != nil || got != want {
			t.Errorf("%q: %d, %v; want %d", text, got, err, want)
		}
	}
	for _, bad := range []string{"1.5", "-1", "9007199254740992", "9.91E37", "1.2034E-1"} {
		if got, err := count(bad); err == nil {
			t.Errorf("%q taken for %d; want an error", bad, got)
		}
	}
}

// Error numbers: SCPI-1999 volume 2, 21.8; what each is answered with: standards, 1.4.
func TestErrorNumbersHaveTheirRemedies(t *testing.T) {
	for n, want := range map[int]drivers.Remedy{
		-113: drivers.GiveUp, -102: drivers.GiveUp, -222: drivers.GiveUp, -224: drivers.GiveUp, -241: drivers.GiveUp, 77: drivers.GiveUp,
		-213: drivers.Retry, -230: drivers.Retry, -231: drivers.Retry, -360: drivers.Retry, -363: drivers.Retry, -410: drivers.Retry, -350: drivers.Retry,
		-500: drivers.Reconnect,
	} {
		got, restarted := remedyFor(n)
		if got != want || restarted != (n == -500) {
			t.Errorf("%d: %v, restarted %v; want %v", n, got, restarted, want)
		}
	}
}

func TestAnswersAreSplitOutsideStringsAndBlocks(t *testing.T) {
	for text, want := range map[string]string{
		`1;0;0,"No error";7`:              `1|0|0,"No error"|7`,
		`-113,"Undefined header;:FOO?";3`: `-113,"Undefined header;:FOO?"|3`,
		`#13a;b;4`:                        `#13a;b|4`,
		``:                                ``,
		`1;;2`:                            `1||2`,
		`"a""b;c";1`:                      `"a""b;c"|1`,
	} {
		if got := strings.Join(split([]byte(text), ';'), "|"); got != want {
			t.Errorf("%q: %q; want %q", text, got, want)
		}
	}
}

func FuzzDecoding(f *testing.F) {
	for _, s := range []string{"+12034,9876,+512;0;0;173", "9.91E37", `0,"No error";5`, "#15HE;LO", "#9999999999"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, b []byte) {
		for _, sep := range []byte{';', ','} {
			if got := strings.Join(split(b, sep), string(sep)); got != string(b) {
				t.Fatalf("%q comes back as %q", b, got)
			}
		}
		if v, err := number(string(b)); err == nil && (math.IsNaN(v) || math.Abs(v) > 9.8e37 && math.Abs(v) != 9.8e37) && math.Abs(v) >= 9.9e37 {
			t.Fatalf("%q read as %v", b, v)
		}
		if n, err := count(string(b)); err == nil && n >= 1<<53 {
			t.Fatalf("%q read as %d", b, n)
		}
		if n, err := register(string(b)); err == nil && (n < 0 || n > 65535) {
			t.Fatalf("%q read as the register %d", b, n)
		}
		if n := blockSize(b); n != 1 && (n < 3 || n > len(b) || b[1] < '1' || b[1] > '9') {
			t.Fatalf("%q begins with a block of %d bytes", b, n)
		}
	})
}

// playing runs a test against exchanges that were written by hand, to the last of them.
func playing(t *testing.T, file string, test func(t *testing.T, l *line.Line)) {
	t.Helper()
	synctest.Test(t, func(t *testing.T) {
		play, err := drivertest.PlayFile("../../testdata/wire/" + file)
		if err != nil {
			t.Fatal(err)
		}
		l := line.New(line.Settings{Name: "play", Open: func(context.Context) (line.Port, error) { return play, nil }})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		test(t, l)
		cancel()
		<-done
		if err := play.Close(); err != nil {
			t.Error(err)
		}
	})
}

func must[T any](t *testing.T, v T, err error) T {
	t.Helper()
	if err != nil {
		t.Fatal(err)
	}
	return v
}

func counterConfig() CounterConfig {
	return CounterConfig{
		Common:   Common{Name: "counter", Identity: "SKERRY,QC-4,0042"},
		Channels: []drivers.Channel{"signal", "idler", "pairs", "gates"}, Tag: "gates",
	}
}

func TestAGateIsCountedAsTheStandardsSay(t *testing.T) {
	playing(t, "scpi-counter-gate.txt", func(t *testing.T, l *line.Line) {
		c, err := NewCounter(l, counterConfig())
		must(t, c, err)
		if err := c.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		if c.Identity() != "SKERRY,QC-4,0042,1.7" {
			t.Errorf("identity %q", c.Identity())
		}
		start := time.Now()
		g, err := c.Count(t.Context(), time.Second)
		must(t, g, err)
		if took := time.Since(start); took < time.Second || took > 1100*time.Millisecond {
			t.Errorf("took %v; want the gate and one more look", took)
		}
		want := map[drivers.Channel]uint64{"signal": 12034, "idler": 9876, "pairs": 512, "gates": 1}
		if fmt.Sprint(g.Counts) != fmt.Sprint(want) || g.Set != time.Second || g.Length != time.Second || g.Overflow || g.Doubtful ||
			g.Raw != "+12034,9876.0,+5.12000000E+02,1" {
			t.Errorf("gate %+v; want %v in 1 s", g, want)
		}
		g, err = c.Count(t.Context(), time.Second)
		must(t, g, err)
		if !g.Overflow || !g.Doubtful || g.Counts["signal"] != 1<<53-1 {
			t.Errorf("gate %+v; want overflow (bit 9) and a doubtful time (bit 2)", g)
		}
	})
}

func TestAShutterOpensAndClosesAndAsksWhatItWasTold(t *testing.T) {
	playing(t, "scpi-shutter.txt", func(t *testing.T, l *line.Line) {
		s, err := NewShutter(l, ShutterConfig{Common: Common{Name: "pump"}, SettleOpen: 300 * time.Millisecond, SettleClosed: 100 * time.Millisecond})
		must(t, s, err)
		// Without an expected identity it is asked until two answers agree: give the wanted one.
		s.common.Identity = "SKERRY,SHUT"
		if err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		start := time.Now()
		if err := s.Open(t.Context()); err != nil || time.Since(start) < 300*time.Millisecond {
			t.Errorf("open: %v after %v; want the settling time", err, time.Since(start))
		}
		if err := s.Close(t.Context()); err != nil {
			t.Errorf("close: %v", err)
		}
	})
}

func TestAMeterIsReadInItsUnitAndFlagsAreNoData(t *testing.T) {
	playing(t, "scpi-meter.txt", func(t *testing.T, l *line.Line) {
		s, err := NewSensor(l, SensorConfig{Common: Common{Name: "power", Identity: "SKERRY,PM,7,0"}, Unit: "mW", AnswerUnit: "W",
			SetUnit: ":UNIT:POW W", AskUnit: ":UNIT:POW?", UnitAnswer: "W", Measure: ":MEAS:POW?"})
		must(t, s, err)
		if err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		if v, err := s.Read(t.Context()); err != nil || math.Abs(v-49.87) > 1e-9 {
			t.Errorf("%v mW, %v; want 49.87", v, err)
		}
		for _, want := range []string{"not a number", "over range", "same twice"} {
			_, err := s.Read(t.Context())
			if drivers.RemedyOf(err) != drivers.Retry || !strings.Contains(err.Error(), want) {
				t.Errorf("%v; want a retry that says %q", err, want)
			}
		}
	})
}

func TestASettingIsSetReachedAndReadBack(t *testing.T) {
	playing(t, "scpi-setting.txt", func(t *testing.T, l *line.Line) {
		s, err := NewSetting(l, SettingConfig{Common: Common{Name: "delay", Identity: "SKERRY,DLY"}, Unit: "ns", AnswerUnit: "s", Tolerance: 0.01,
			Set: ":SOUR:PULS:DEL {value}", Get: ":SOUR:PULS:DEL?"})
		must(t, s, err)
		if err := s.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		if v, err := s.Set(t.Context(), 12.5); err != nil || math.Abs(v-12.5) > 1e-9 {
			t.Errorf("%v ns, %v; want 12.5", v, err)
		}
	})
}

// counting is a small counter written for these tests from the standards: enough of a message
// exchange to be interrupted, restarted and lied to.
type counting struct {
	mu       sync.Mutex
	far      *drivertest.End
	heard    []string
	inits    int
	aborts   int
	gates    int
	mask     string
	until    time.Time
	restart  bool                                        // the power-on bit waits to be asked for
	empty    bool                                        // there are no counts: FETCh? is refused and not answered
	stale    bool                                        // such a refusal waits in the event register and the error queue
	meddle   func(message, answer string) (string, bool) // what really goes out; false: nothing
	deafInit bool                                        // the next message with an INITiate is lost on the way there
}

func (c *counting) open(context.Context) (line.Port, error) {
	near, far := drivertest.Cable()
	c.mu.Lock()
	c.far = far
	c.mu.Unlock()
	go c.serve(far)
	return near, nil
}

func (c *counting) serve(far *drivertest.End) {
	var text []byte
	b := make([]byte, 256)
	for {
		n, err := far.Read(b)
		if err != nil {
			return
		}
		text = append(text, b[:n]...)
		for {
			message, rest, ok := strings.Cut(string(text), "\n")
			if !ok {
				break
			}
			text = []byte(rest)
			if answer, ok := c.message(message); ok {
				_, _ = far.Write([]byte(answer + "\n"))
			}
		}
	}
}

func (c *counting) message(message string) (string, bool) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.heard = append(c.heard, message)
	if c.deafInit && strings.Contains(message, ":INIT") {
		c.deafInit = false
		return "", false
	}
	var answers []string
	say := func(format string, args ...any) { answers = append(answers, fmt.Sprintf(format, args...)) }
	over := !time.Now().Before(c.until)
	for unit := range strings.SplitSeq(message, ";") {
		header, value, _ := strings.Cut(unit, " ")
		switch header {
		case "*IDN?":
			say("SKERRY,QC-4,0042,1.7")
		case "*ESE":
			c.mask = value
		case "*ESE?":
			say("%s", c.mask)
		case "*ESR?":
			say("%d", map[bool]int{true: 128}[c.restart]+map[bool]int{true: 16}[c.stale])
			c.restart = false
		case ":SENS:TOT:APER?":
			say("+1.00000000E+00")
		case ":INIT":
			c.inits++
			c.gates++
			c.until = time.Now().Add(time.Second)
			over, c.empty = false, false
		case ":ABOR":
			c.aborts++
			c.until = time.Time{}
		case ":STAT:OPER:COND?":
			say("%d", map[bool]int{false: 16}[over])
		case ":FETC?":
			if c.stale = c.stale || c.empty; !c.empty {
				say("%d,%d,%d,%d", 1000+c.gates, 900+c.gates, 50, c.gates)
			}
		case ":STAT:QUES:EVEN?":
			say("0")
		case ":SYST:ERR?":
			say("%s", map[bool]string{true: `-230,"Data corrupt or stale"`, false: `0,"No error"`}[c.stale])
			c.stale = false
		}
	}
	answer := strings.Join(answers, ";")
	if c.meddle != nil {
		return c.meddle(message, answer)
	}
	return answer, answer != ""
}

func (c *counting) set(f func()) {
	c.mu.Lock()
	defer c.mu.Unlock()
	f()
}

func counted(t *testing.T, test func(t *testing.T, c *Counter, in *counting, l *line.Line)) {
	t.Helper()
	synctest.Test(t, func(t *testing.T) {
		in := &counting{}
		l := line.New(line.Settings{Name: "east", Open: in.open})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		c, err := NewCounter(l, counterConfig())
		must(t, c, err)
		if err := c.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		test(t, c, in, l)
		cancel()
		<-done
		_ = in.far.Close()
	})
}

func failed(t *testing.T, err error, remedy drivers.Remedy, opened bool) *drivers.Error {
	t.Helper()
	e, ok := errors.AsType[*drivers.Error](err)
	if !ok || e.Remedy != remedy || e.GateOpened != opened || e.Device != "counter" || e.Op == "" {
		t.Fatalf("error %v (%+v); want remedy %v, gate opened %v", err, e, remedy, opened)
	}
	return e
}

// once meddles with the first answer to a message that contains text.
func once(text string, how func(answer string) (string, bool)) func(string, string) (string, bool) {
	done := false
	return func(message, answer string) (string, bool) {
		if !done && strings.Contains(message, text) && answer != "" {
			done = true
			return how(answer)
		}
		return answer, answer != ""
	}
}

func lost(string) (string, bool) { return "", false }

func TestALostAnswerToTheStartOfAGateIsSettledByAsking(t *testing.T) {
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		must(t, "", func() error { _, err := c.Count(t.Context(), time.Second); return err }())

		// It was heard: by the time the line is in step again the gate is over, and its tag is new.
		in.set(func() { in.meddle = once(":INIT", lost) })
		g, err := c.Count(t.Context(), time.Second)
		if err != nil || g.Counts["gates"] != 2 || in.inits != 2 {
			t.Errorf("gate %+v, %v, %d starts; want the second gate from two", g, err, in.inits)
		}

		// It was not: nothing counts, and the tag is the old one.
		in.set(func() { in.meddle, in.deafInit = nil, true })
		_, err = c.Count(t.Context(), time.Second)
		failed(t, err, drivers.Retry, false)
		if in.inits != 2 {
			t.Errorf("%d starts; want it never sent again by itself", in.inits)
		}
		if g, err := c.Count(t.Context(), time.Second); err != nil || g.Counts["gates"] != 3 {
			t.Errorf("gate %+v, %v; want the third", g, err)
		}
	})
}

func TestAStartThatCannotBeSettledIsAborted(t *testing.T) {
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		in.set(func() { in.meddle = once(":INIT", lost) }) // the first gate: no tag is known yet
		_, err := c.Count(t.Context(), time.Second)
		failed(t, err, drivers.Retry, true)
		synctest.Wait()
		if in.aborts != 1 || in.inits != 1 {
			t.Errorf("%d aborts, %d starts; want one of each", in.aborts, in.inits)
		}
	})
}

func TestTheEndOfAContextAbortsTheGateWithinASecond(t *testing.T) {
	for _, after := range []time.Duration{500 * time.Millisecond, time.Microsecond, 1005 * time.Millisecond} {
		counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
			if after > time.Second { // the end comes while the answer to a look is awaited
				in.set(func() {
					in.meddle = func(m, a string) (string, bool) { return a, a != "" && !strings.HasSuffix(m, ":COND?;*ESE?") }
				})
			}
			ctx, cancel := context.WithTimeout(t.Context(), after)
			defer cancel()
			start := time.Now()
			_, err := c.Count(ctx, time.Second)
			if took := time.Since(start); took > after+time.Second {
				t.Errorf("took %v", took)
			}
			if after == time.Microsecond {
				failed(t, err, 0, false) // it ended before the gate was opened
				return
			}
			failed(t, err, 0, true)
			synctest.Wait()
			if in.aborts != 1 || !errors.Is(err, context.DeadlineExceeded) {
				t.Errorf("%d aborts, %v; want one, and the context's end", in.aborts, err)
			}
		})
	}
}

func TestAnAbortFromBesideEndsTheCountAtOnce(t *testing.T) {
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		failure := make(chan error)
		go func() { _, err := c.Count(t.Context(), time.Second); failure <- err }()
		time.Sleep(300 * time.Millisecond)
		if err := c.Abort(t.Context()); err != nil {
			t.Error(err)
		}
		start := time.Now()
		failed(t, <-failure, drivers.Retry, true)
		if time.Since(start) > 100*time.Millisecond || in.aborts != 1 {
			t.Errorf("after %v, %d aborts", time.Since(start), in.aborts)
		}
		if err := c.Abort(t.Context()); err != nil {
			t.Errorf("with no gate open: %v", err)
		}
	})
}

func TestARestartDuringAGateKeepsNoReading(t *testing.T) {
	for name, forgets := range map[string]bool{"the counts of the gate before are still there": false, "there are no counts": true} {
		t.Run(name, func(t *testing.T) {
			counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
				go func() {
					time.Sleep(500 * time.Millisecond)
					in.set(func() { in.restart, in.until, in.empty = true, time.Time{}, forgets })
				}()
				_, err := c.Count(t.Context(), time.Second)
				if e := failed(t, err, drivers.Reconnect, true); !e.Restarted {
					t.Error("want it marked as a restart")
				}
				_, err = c.Count(t.Context(), time.Second)
				failed(t, err, drivers.Reconnect, false) // until connected
				in.set(func() { in.heard = nil })
				if err := c.Connect(t.Context()); err != nil {
					t.Fatal(err)
				}
				if heard := strings.Join(in.heard, "\n"); !strings.Contains(heard, "*RST") {
					t.Errorf("connecting sent\n%s\nwant the start settings", heard)
				}
				if _, err := c.Count(t.Context(), time.Second); err != nil {
					t.Error(err)
				}
			})
		})
	}
}

func TestDamagedAndDoubledAnswersAreNeverCounts(t *testing.T) {
	digit := func(a string) (string, bool) { return strings.Replace(a, "10", "70", 1), true }
	for _, tc := range []struct {
		name   string
		meddle func(string, string) (string, bool)
		fails  bool
	}{
		{"a digit of the first answer", once(":FETC?;:STAT", digit), false}, // the second and third agree
		{"a digit of the second answer", once(":FETC?;*ESE?", digit), false},
		{"the number of the question", once(":FETC?;*ESE?", func(a string) (string, bool) { return a + "9", true }), false},
		{"the first answer is lost", once(":FETC?;:STAT", lost), true}, // and the registers with it
		{"the second answer is lost", once(":FETC?;*ESE?", lost), false},
		{"every answer twice", func(m, a string) (string, bool) { return a + "\n" + a, a != "" }, false},
		{"a letter for a digit, always", func(m, a string) (string, bool) {
			if strings.Contains(m, "FETC") {
				a = strings.Replace(a, "100", "1O0", 1)
			}
			return a, a != ""
		}, true},
	} {
		t.Run(tc.name, func(t *testing.T) {
			counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
				for n := range uint64(3) {
					if n == 1 {
						in.set(func() { in.meddle = tc.meddle })
					}
					g, err := c.Count(t.Context(), time.Second)
					switch {
					case err != nil && !tc.fails:
						t.Fatal(err)
					case err != nil:
						failed(t, err, drivers.Retry, true)
					case g.Counts["signal"] != 1000+g.Counts["gates"] || g.Counts["gates"] != n+1:
						t.Errorf("gate %d: %+v", n+1, g)
					case tc.fails && n == 1:
						t.Error("counted; want an error")
					}
				}
			})
		})
	}
}

func TestCountsOfAGateThatWasReadBeforeAreNotReadAgain(t *testing.T) {
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		if _, err := c.Count(t.Context(), time.Second); err != nil {
			t.Fatal(err)
		}
		in.set(func() { // it acknowledges the next gate, and gives the counts of the last
			in.meddle = func(m, a string) (string, bool) {
				return strings.ReplaceAll(a, "1002,902,50,2", "1001,901,50,1"), a != ""
			}
		})
		_, err := c.Count(t.Context(), time.Second)
		if e := failed(t, err, drivers.Retry, true); !strings.Contains(e.Error(), "read before") {
			t.Errorf("%v; want it to say that they were read before", err)
		}
	})
}

// Here the line's own rules do not help: the double comes after the next question was sent, and
// looks like its answer.
func TestAnAnswerWithTheNumberOfAnEarlierQuestionIsDropped(t *testing.T) {
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		in.set(func() {
			in.meddle = func(m, a string) (string, bool) {
				if a != "" {
					say := func() { _, _ = in.far.Write([]byte(a + "\n")) }
					time.AfterFunc(5*time.Millisecond, say)
					time.AfterFunc(5500*time.Microsecond, say)
				}
				return "", false
			}
		})
		before := l.Counts()
		for n := range uint64(3) {
			g, err := c.Count(t.Context(), time.Second)
			if err != nil || g.Counts["gates"] != n+1 || g.Counts["signal"] != 1001+n {
				t.Errorf("gate %d: %+v, %v", n+1, g, err)
			}
		}
		after := l.Counts()
		if after.Strays-before.Strays < 10 || after.Strangers != before.Strangers || after.Retried != before.Retried {
			t.Errorf("counts %+v; want the doubles dropped, and nothing asked again", after)
		}
		time.Sleep(time.Second)
	})
}

func TestAnotherInstrumentIsRefusedAndADamagedIdentityIsNot(t *testing.T) {
	counted(t, func(t *testing.T, c *Counter, in *counting, l *line.Line) {
		in.set(func() { in.meddle = once("*IDN?", func(string) (string, bool) { return "SKERRY,QC-4,0O42,1.7", true }) })
		if err := c.Connect(t.Context()); err != nil {
			t.Errorf("after one damaged answer: %v", err)
		}
		in.set(func() {
			in.meddle = func(m, a string) (string, bool) {
				if m == "*IDN?" {
					a = "OTHER,QC-4,0042,1.7"
				}
				return a, a != ""
			}
		})
		e := failed(t, c.Connect(t.Context()), drivers.GiveUp, false)
		if !strings.Contains(e.Error(), "OTHER") || !strings.Contains(e.Error(), "maker") {
			t.Errorf("%v; want what was found and which field differs", e)
		}
	})
}

func TestConfigurationsThatCannotWorkAreRefusedWithAllFaults(t *testing.T) {
	l := line.New(line.Settings{})
	bit := 99
	_, err := NewCounter(l, CounterConfig{Common: Common{Name: "counter"}, Tag: "gates", SetGate: ":APER", CountingBit: &bit})
	for _, want := range []string{"no channels", "tag channel", "{seconds}", "status bit 99"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v; want %q in it", err, want)
		}
	}
	if _, err := NewShutter(l, ShutterConfig{Common: Common{Name: "s"}, PassesWhen: "maybe"}); err == nil {
		t.Error("passes when maybe: taken")
	}
	_, err = NewSensor(l, SensorConfig{Common: Common{Name: "p"}, Unit: "mW", Initiate: ":READ?", Fetch: ":FETC", Once: true})
	for _, want := range []string{`initiate: ":READ?" is a query`, `fetch: ":FETC"`, "once without measure", "agree 0"} {
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%v; want %q in it", err, want)
		}
	}
	if _, err := NewSensor(l, SensorConfig{Common: Common{Name: "p"}, Unit: "mW", AnswerUnit: "Cel", Measure: ":MEAS:POW?"}); err == nil {
		t.Error("Cel as mW: taken")
	}
	if _, err := NewSetting(l, SettingConfig{Common: Common{Name: "d"}, Unit: "ns", Set: ":DEL", Get: ":DEL"}); err == nil {
		t.Error("a set without {value}: taken")
	}
}

// stuck is a port that no longer comes back from a read, whatever its deadline says.
type stuck struct {
	line.Port
	now     *atomic.Bool
	release chan bool
}

func (s stuck) Read(b []byte) (int, error) {
	if s.now.Load() {
		<-s.release
	}
	return s.Port.Read(b)
}

func TestACountOnAPortThatHangsComesBackWithinASecond(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		in, hang, release := &counting{}, atomic.Bool{}, make(chan bool)
		l := line.New(line.Settings{Name: "east", Open: func(ctx context.Context) (line.Port, error) {
			p, err := in.open(ctx)
			return stuck{p, &hang, release}, err
		}})
		run, end := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(run); close(done) }()
		c, err := NewCounter(l, counterConfig())
		must(t, c, err)
		if err := c.Connect(t.Context()); err != nil {
			t.Fatal(err)
		}
		ctx, cancel := context.WithTimeout(t.Context(), 1100*time.Millisecond)
		defer cancel()
		time.AfterFunc(500*time.Millisecond, func() { hang.Store(true) })
		_, err = c.Count(ctx, time.Second)
		if late := time.Since(in.until) - 100*time.Millisecond; !errors.Is(err, context.DeadlineExceeded) || late > time.Second {
			t.Errorf("%v, %v after the end of its context; want a second at most", err, late)
		}
		failed(t, err, 0, true)
		hang.Store(false)
		close(release)
		end()
		<-done
		_ = in.far.Close()
	})
}
