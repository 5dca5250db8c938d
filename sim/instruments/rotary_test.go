package instruments_test

import (
	"math"
	"strings"
	"testing"
	"time"

	"gemel/sim/instruments"
)

// The word forms and their errors are those of the RS274/NGC Interpreter, version 3, as quoted
// with clause numbers in the reference notes, section 2.1; the rest are Rotary's own words.
func TestRotaryAnswersLines(t *testing.T) {
	const ok = "TAKEN"
	for _, c := range []struct{ name, send, want string }{
		{"identity", "WHO", "WHO Skerry,R3,17,1.2"},
		{"position, every axis with sign and four decimals", "WHERE", "AT A+000.0000 B+000.0000 C+000.0000"},
		{"at rest", "REST", "STILL"},
		{"references", "REFD", "REFD A1 B1 C1"},
		{"start lines", "G21 G90 G94", ok},
		{"coordinate system 1", "G54", ok},
		{"offsets off", "G92.1", ok},
		{"letter case means nothing (3.3)", "g90 g0 a0", ok},
		{"spaces mean nothing (3.3)", "G 9 0 G0 A 0 . 0", ok},
		{"words in any order (3.3)", "A0 G0 G90", ok},
		{"a line number (3.3.1)", "N00042 G90", ok},
		{"a line number of six digits (3.3.1)", "N000042 G90", `REFUSED line number "000042"`},
		{"a signed line number (3.3.1)", "N-1 G90", `REFUSED line number "-1"`},
		{"a comment (3.3.4)", "G0 (to the left) A0", ok},
		{"nested comments (3.3.4)", "G0 (a (b) c) A0", "REFUSED comment inside a comment"},
		{"a comment without end", "G0 A0 (x", "REFUSED comment without end"},
		{"block delete (3.3)", "/G0 A500", ok},
		{"an exponent (3.3.2.1: there is none)", "G0 A1E1", `REFUSED no E words here`},
		{"a number without digits (3.3.2.1)", "G0 A.", `REFUSED A: number "."`},
		{"a number with a bare point (3.3.2.1)", "G0 A0.", ok},
		{"two signs", "G0 A--1", `REFUSED A: number "--1"`},
		{"two points", "G0 A1.2.3", `REFUSED A: number "1.2.3"`},
		{"two words of one modal group (3.4)", "G0 G1 A0", "REFUSED two G words of one group"},
		{"the same axis twice", "G0 A0 A1", "REFUSED two A words"},
		{"G0 without an axis word (3.5.1)", "G0", "REFUSED G0 or G1 without an axis word"},
		{"G1 without a rate", "G1 A0", "REFUSED G1 without F"},
		{"a negative rate", "G1 A0 F-1", "REFUSED negative F"},
		{"an axis there is not", "G0 X1", "REFUSED no X words here"},
		{"incremental distances are not offered", "G91", "REFUSED no G91 here"},
		{"stored positions are not offered", "G28 A0", "REFUSED no G28 here"},
		{"a program end is not offered", "M2", "REFUSED no M words here"},
		{"a checksum is no part of the standard", "G0 A0*71", `REFUSED character '*' where a word begins`},
		{"a semicolon is no comment", "G0 A0 ; x", `REFUSED character ';' where a word begins`},
		{"beyond the controller's own limits", "G0 A200", "REFUSED A 200.0000 outside -10.0000 to 190.0000"},
		{"CR LF ends a line too", "REST\r", "STILL"},
		{"a line of 257 characters (3.3: 256)", "(" + strings.Repeat("x", 255) + ")", "REFUSED line longer than 256 characters"},
		{"our words are no RS-274", "WHEREABOUTS", "REFUSED W: number \"\""},
		{"a reference of an axis there is not", "REF Q", `REFUSED no axis "Q"`},
		{"a blank line has no answer", "", ""},
	} {
		t.Run(c.name, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				l := plug(t, t.Context(), arms(t, world(t, 1, ""), nil))
				l.expect(c.send, c.want)
				l.hangUp()
			})
		})
	}
}

func TestRotaryMovesTogetherAtTheRateOfTheStandard(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), arms(t, w, func(c *instruments.RotaryConfig) {
			for i := range c.Axes {
				c.Axes[i].AccelDegS2 = 1e6 // so that the rate is all that counts
			}
		}))
		// Reference notes 2.1: A +3, B +4, F60 takes 5 s.
		l.expect("G90 G94 G1 A3 B4 F60", "TAKEN")
		time.Sleep(4950 * time.Millisecond)
		l.expect("REST", "TURNING")
		a, _ := w.TrueDeg("signal_arm")
		b, _ := w.TrueDeg("idler_arm")
		if math.Abs(a/b-0.75) > 1e-9 {
			t.Errorf("in mid-move A stands at %.6f and B at %.6f; want them on the line 3 to 4", a, b)
		}
		time.Sleep(60 * time.Millisecond)
		l.expect("REST", "STILL")
		l.expect("WHERE", "AT A+003.0000 B+004.0000 C+000.0000")
		l.hangUp()
	})
}

func TestRotaryFollowsATrapezoid(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), arms(t, w, nil))
		// 10 deg/s and 20 deg/s²: 0.5 s and 2.5 deg up, as much down, 15 deg between: 2.5 s.
		l.expect("G0 A20", "TAKEN")
		w.Settle()
		begin := w.Ledger().Records()[0].At
		for _, p := range []struct{ s, deg float64 }{{0.25, 0.625}, {0.5, 2.5}, {1, 7.5}, {2, 17.5}, {2.25, 19.375}, {2.5, 20}, {3, 20}} {
			time.Sleep(time.Until(begin.Add(time.Duration(p.s * 1e9))))
			if deg, _ := w.TrueDeg("signal_arm"); math.Abs(deg-p.deg) > 1e-6 {
				t.Errorf("after %.2f s at %.6f deg; want %.6f", p.s, deg, p.deg)
			}
		}
		l.hangUp()
	})
}

func TestRotaryBacklashIsTrueWhereStepsAreCounted(t *testing.T) {
	for _, c := range []struct {
		name               string
		change             func(*instruments.AxisConfig)
		rising, falling    float64 // true angle minus the reading after an approach from either side
		readRise, readFall string
	}{
		{"counted steps: the axis hangs behind by the play when it comes from above", func(a *instruments.AxisConfig) {}, 0, 0.02, "AT A+010.0000", "AT A+010.0000"},
		{"a zero found from above: the other way round", func(a *instruments.AxisConfig) { a.FallingFlank = true }, -0.02, 0, "AT A+010.0000", "AT A+010.0000"},
		{"an encoder on the axis: none of it shows", func(a *instruments.AxisConfig) { a.Encoder = true }, 0, 0, "AT A+010.0000", "AT A+010.0000"},
		{"an encoder, the zero found from above", func(a *instruments.AxisConfig) { a.Encoder, a.FallingFlank = true, true }, 0, 0, "AT A+010.0000", "AT A+010.0000"},
	} {
		t.Run(c.name, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				w := world(t, 1, "")
				l := plug(t, t.Context(), arms(t, w, func(r *instruments.RotaryConfig) {
					r.Axes = r.Axes[:1]
					c.change(&r.Axes[0])
				}))
				check := func(side string, off float64, read string) {
					t.Helper()
					time.Sleep(10 * time.Second)
					l.expect("WHERE", read)
					if deg, _ := w.TrueDeg("signal_arm"); math.Abs(deg-10-off) > 1e-9 {
						t.Errorf("from %s: truly at %.6f; want %.6f", side, deg, 10+off)
					}
				}
				l.expect("G0 A10", "TAKEN")
				check("below", c.rising, c.readRise)
				l.expect("G0 A20", "TAKEN")
				l.expect("G0 A10", "TAKEN") // waits in the queue
				check("above", c.falling, c.readFall)
				l.expect("G0 A9", "TAKEN")
				l.expect("G0 A10", "TAKEN")
				check("below again", c.rising, c.readRise)
				l.hangUp()
			})
		})
	}
}

func TestRotarySenseAndZero(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), arms(t, w, func(r *instruments.RotaryConfig) {
			r.Axes = r.Axes[:1]
			r.Axes[0].Sense, r.Axes[0].ZeroDeg, r.Axes[0].StartDeg = -1, 100, 5
		}))
		l.expect("WHERE", "AT A+095.0000")
		l.expect("G0 A90", "TAKEN")
		time.Sleep(5 * time.Second)
		if deg, _ := w.TrueDeg("signal_arm"); math.Abs(deg-10) > 1e-9 {
			t.Errorf("controller at 90, zero 100, sense -1: truly at %.6f deg; want 10", deg)
		}
		l.hangUp()
	})
}

func TestRotaryStopByteActsInTheMiddleOfALine(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), arms(t, w, nil))
		l.expect("G0 A100 B50", "TAKEN")
		l.expect("G0 A0", "TAKEN") // planned, never begun
		time.Sleep(2 * time.Second)
		l.send("G0 A1\x03")
		l.send("\n")
		if s := l.hear(100 * time.Millisecond); s != "" {
			t.Errorf("after the stop byte and the rest of its line comes %q; want nothing", s)
		}
		time.Sleep(time.Second)
		l.expect("REST", "STILL")
		a, _ := w.TrueDeg("signal_arm")
		b, _ := w.TrueDeg("idler_arm")
		if a < 15 || a > 25 || math.Abs(a-2*b) > 1e-6 {
			t.Errorf("stopped at %.4f and %.4f; want about 20, and both still on the line 2 to 1", a, b)
		}
		time.Sleep(time.Minute)
		w.Settle()
		var kinds []string
		for _, r := range w.Ledger().Records() {
			kinds = append(kinds, string(r.Kind))
		}
		if got := strings.Join(kinds, " "); got != "move_started underway stop_byte move_stopped" {
			t.Errorf("ledger: %s; want move_started underway stop_byte move_stopped", got)
		}
		l.hangUp()
	})
}

func TestRotaryRestartInMidMoveLosesTheZero(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart(stage, at 2s)")
		l := plug(t, t.Context(), arms(t, w, nil))
		l.expect("G0 A100", "TAKEN")
		if s := l.hear(5 * time.Second); s != "HELLO R3" {
			t.Fatalf("unasked comes %q; want the banner", s)
		}
		if at := w.Now().Sub(w.Origin()); at < 3200*time.Millisecond || at > 3300*time.Millisecond {
			t.Errorf("the banner comes at %v; want 1.2 s after the restart at 2 s", at)
		}
		l.expect("REFD", "REFD A0 B0 C0")
		l.expect("WHERE", "AT A+000.0000 B+000.0000 C+000.0000")
		l.expect("G0 A1", "REFUSED A has no reference")
		a, _ := w.TrueDeg("signal_arm")
		if a < 15 || a > 20 {
			t.Errorf("stands at %.3f; want where 2 s brought it", a)
		}
		l.expect("REF A", "TAKEN")
		l.expect("REF A", "TAKEN") // asked again while it searches
		l.expect("REF B", "REFUSED still turning")
		l.expect("G0 A1", "REFUSED A searches its reference")
		time.Sleep(30 * time.Second)
		l.expect("REFD", "REFD A1 B0 C0")
		l.expect("WHERE", "AT A+000.0000 B+000.0000 C+000.0000")
		if a, _ := w.TrueDeg("signal_arm"); math.Abs(a) > 1e-9 {
			t.Errorf("after the search truly at %.6f; want the switch at 0", a)
		}
		l.hangUp()
	})
}

func TestRotaryIsDeafWhileItStarts(t *testing.T) {
	bubble(t, func(t *testing.T) {
		l := plug(t, t.Context(), arms(t, world(t, 1, "restart(stage, at 1s)"), nil))
		time.Sleep(1500 * time.Millisecond)
		l.send("WHO\n")
		if s := l.hear(5 * time.Second); s != "HELLO R3" {
			t.Errorf("comes %q; want the banner and nothing before", s)
		}
		if s := l.hear(time.Second); s != "" {
			t.Errorf("then comes %q; want nothing", s)
		}
		l.hangUp()
	})
}

func TestRotarySlipShowsOnlyWithAnEncoder(t *testing.T) {
	for _, encoder := range []bool{false, true} {
		for _, list := range []string{"slip(signal_arm, at 30s, by 0.5 deg)", "lost_steps(signal_arm, at 5s, by 0.5 deg)"} {
			bubble(t, func(t *testing.T) {
				w := world(t, 1, list)
				l := plug(t, t.Context(), arms(t, w, func(r *instruments.RotaryConfig) {
					r.Axes = r.Axes[:1]
					r.Axes[0].Encoder = encoder
				}))
				time.Sleep(10 * time.Second)
				l.expect("G0 A10", "TAKEN")
				time.Sleep(30 * time.Second)
				want, truth := "AT A+010.0000", 10.5
				if encoder {
					want = "AT A+010.5000"
				}
				l.expect("WHERE", want)
				if a, _ := w.TrueDeg("signal_arm"); math.Abs(a-truth) > 1e-9 {
					t.Errorf("%s, encoder %v: truly at %.6f; want %.6f", list, encoder, a, truth)
				}
				l.expect("G0 A10", "TAKEN") // a closed loop goes back, counted steps see no reason to
				time.Sleep(10 * time.Second)
				if encoder {
					truth = 10
				}
				if a, _ := w.TrueDeg("signal_arm"); math.Abs(a-truth) > 1e-9 {
					t.Errorf("%s, encoder %v, told to go there again: truly at %.6f; want %.6f", list, encoder, a, truth)
				}
				l.expect("REF A", "TAKEN")
				time.Sleep(30 * time.Second)
				if a, _ := w.TrueDeg("signal_arm"); math.Abs(a) > 1e-9 {
					t.Errorf("%s, encoder %v, after a search: truly at %.6f; want 0", list, encoder, a)
				}
				l.expect("WHERE", "AT A+000.0000")
				l.hangUp()
			})
		}
	}
}

func TestRotaryQueueIsBounded(t *testing.T) {
	bubble(t, func(t *testing.T) {
		l := plug(t, t.Context(), arms(t, world(t, 1, ""), nil))
		for i := range 16 {
			l.expect([]string{"G0 A180", "G0 A0"}[i%2], "TAKEN")
		}
		l.expect("G0 A180", "REFUSED queue full")
		l.hangUp()
	})
}

func TestRotaryEachOnItsOwn(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		l := plug(t, t.Context(), arms(t, w, func(r *instruments.RotaryConfig) { r.Together = false }))
		l.expect("G0 A100 B2", "TAKEN")
		time.Sleep(2 * time.Second)
		if b, _ := w.TrueDeg("idler_arm"); b != 2 {
			t.Errorf("B stands at %.4f; want 2 long before A arrives", b)
		}
		l.expect("REST", "TURNING")
		l.hangUp()
	})
}

func TestRotaryRefusesConfigurationsThatMakeNoSense(t *testing.T) {
	good := instruments.AxisConfig{Letter: "A", Axis: "x", LowDeg: 0, HighDeg: 1, SpeedDegS: 1, AccelDegS2: 1, StepsPerDeg: 1}
	for _, c := range []struct {
		name, want string
		change     func(*instruments.RotaryConfig)
	}{
		{"no axes", "0 axes; want one to four", func(c *instruments.RotaryConfig) { c.Axes = nil }},
		{"two axes on one letter", `letter "A" of axis y`, func(c *instruments.RotaryConfig) {
			b := good
			b.Axis = "y"
			c.Axes = append(c.Axes, b)
		}},
		{"a letter of no rotary axis", `letter "X"`, func(c *instruments.RotaryConfig) { c.Axes[0].Letter = "X" }},
		{"limits the wrong way round", "limits 2 to 1", func(c *instruments.RotaryConfig) { c.Axes[0].LowDeg = 2 }},
		{"no speed", "want all above 0", func(c *instruments.RotaryConfig) { c.Axes[0].SpeedDegS = 0 }},
		{"a sense of 2", "want +1 or -1", func(c *instruments.RotaryConfig) { c.Axes[0].Sense = 2 }},
	} {
		t.Run(c.name, func(t *testing.T) {
			cfg := instruments.RotaryConfig{Name: "s", Axes: []instruments.AxisConfig{good}}
			c.change(&cfg)
			if _, err := instruments.NewRotary(world(t, 1, ""), cfg); err == nil || !strings.Contains(err.Error(), c.want) {
				t.Errorf("error %v; want one that says %q", err, c.want)
			}
		})
	}
}
