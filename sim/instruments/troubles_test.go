package instruments_test

import (
	"errors"
	"math"
	"strings"
	"testing"
	"time"

	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// befell are the troubles that the ledger says took effect, whatever the record.
func befell(w *instruments.World, kind trouble.Kind) []instruments.Record {
	w.Settle()
	var all []instruments.Record
	for _, r := range w.Ledger().Records() {
		if strings.HasPrefix(r.Text, string(kind)+"(") && r.Kind != instruments.Plugged {
			all = append(all, r)
		}
	}
	return all
}

// once fails unless a trouble took effect exactly once, within a second of when it should.
func once(t *testing.T, w *instruments.World, kind trouble.Kind, after time.Duration) {
	t.Helper()
	all := befell(w, kind)
	if len(all) != 1 {
		t.Fatalf("the ledger has %s %d times; want once: %+v", kind, len(all), all)
	}
	if l, err := trouble.Parse(all[0].Text); err != nil || len(l) != 1 || l[0].Kind != kind {
		t.Errorf("%q reads as %v, %v; want the trouble", all[0].Text, l, err)
	}
	if off := all[0].At.Sub(w.Origin()) - after; off.Abs() > time.Second {
		t.Errorf("%s took effect %v after the beginning; want about %v", kind, off+after, after)
	}
}

func encoders(c *instruments.RotaryConfig) {
	for i := range c.Axes {
		c.Axes[i].Encoder = true
	}
}

func TestAStallShowsWithAnEncoderAndIsHiddenBySteps(t *testing.T) {
	for _, c := range []struct {
		name    string
		encoder bool
	}{{"an encoder", true}, {"counted steps", false}} {
		t.Run(c.name, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				w := world(t, 1, "stall(signal_arm, at 5s)")
				l := plug(t, t.Context(), arms(t, w, func(r *instruments.RotaryConfig) {
					if c.encoder {
						encoders(r)
					}
				}))
				time.Sleep(10 * time.Second)
				l.expect("G90 G0 A20", "TAKEN")
				time.Sleep(1300 * time.Millisecond)
				l.expect("REST", "TURNING") // its controller does not know
				time.Sleep(5 * time.Second)
				l.expect("REST", "STILL")
				angle, _ := w.TrueDeg("signal_arm")
				if math.Abs(angle-10) > 0.1 {
					t.Errorf("the axis stands at %g deg; want half way, 10", angle)
				}
				said := l.ask("WHERE")
				if hidden := strings.HasPrefix(said, "AT A+020.0000"); hidden == c.encoder {
					t.Errorf("the controller says %q at true %g deg", said, angle)
				}
				once(t, w, trouble.Stall, 11250*time.Millisecond)
				l.expect("G0 A30", "TAKEN")
				time.Sleep(10 * time.Second)
				again, _ := w.TrueDeg("signal_arm")
				if want := map[bool]float64{true: 30, false: angle + 10}[c.encoder]; math.Abs(again-want) > 0.03 {
					t.Errorf("the next move ends at %g deg; want %g, as it stalls once", again, want)
				}
				l.hangUp()
			})
		})
	}
}

func TestARestartWaitsForAMotion(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart_moving(stage, at 5s)")
		l := plug(t, t.Context(), arms(t, w, encoders))
		time.Sleep(20 * time.Second)
		l.expect("REFD", "REFD A1 B1 C1")
		l.expect("G90 G0 A20", "TAKEN")
		time.Sleep(10 * time.Second)
		if said := l.hear(time.Second); said != "HELLO R3" {
			t.Errorf("heard %q; want a greeting after the restart", said)
		}
		l.expect("REFD", "REFD A0 B0 C0")
		if angle, _ := w.TrueDeg("signal_arm"); math.Abs(angle-10) > 0.1 {
			t.Errorf("the axis stands at %g deg; want it where it was in the middle, 10", angle)
		}
		once(t, w, trouble.RestartMoving, 21250*time.Millisecond)
		l.hangUp()
	})
}

func TestASearchForTheMarkKeepsTheZeroAndShowsTheSlip(t *testing.T) {
	for _, c := range []struct {
		name, troubles, want string
		encoder              bool
	}{
		{"nothing slipped", "", "AT A+004.0000 B+000.0000 C+000.0000", false},
		{"steps hide a slip until then", "slip(signal_arm, at 5s, by 0.5 deg)", "AT A+003.5000 B+000.0000 C+000.0000", false},
		{"the other way", "slip(signal_arm, at 5s, by -0.5 deg)", "AT A+004.5000 B+000.0000 C+000.0000", false},
		{"an encoder knew", "slip(signal_arm, at 5s, by 0.5 deg)", "AT A+004.0000 B+000.0000 C+000.0000", true},
		{"lost steps", "lost_steps(signal_arm, at 15s, by -0.5 deg)", "AT A+004.5000 B+000.0000 C+000.0000", false},
	} {
		t.Run(c.name, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				w := world(t, 1, c.troubles)
				l := plug(t, t.Context(), arms(t, w, func(r *instruments.RotaryConfig) {
					r.Axes[0].Encoder, r.Axes[0].HomeDeg = c.encoder, 4
				}))
				time.Sleep(20 * time.Second)
				l.expect("G90 G0 A10", "TAKEN")
				l.expect("MARK A", "REFUSED still turning")
				time.Sleep(10 * time.Second)
				l.expect("MARK A", "TAKEN")
				l.expect("REST", "TURNING")
				time.Sleep(20 * time.Second)
				l.expect("WHERE", c.want)
				l.expect("REFD", "REFD A1 B1 C1")
				if angle, _ := w.TrueDeg("signal_arm"); math.Abs(angle-4) > 1e-4 {
					t.Errorf("the axis stands at true %g deg; want it at its mark, 4", angle)
				}
				l.expect("REF A", "TAKEN") // and a search that sets the zero mends it
				time.Sleep(20 * time.Second)
				l.expect("WHERE", "AT A+004.0000 B+000.0000 C+000.0000")
				l.hangUp()
			})
		})
	}
}

func TestAPlainSearchesItsMarkToo(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "slip(crystal_tilt, at 1s, by 0.25 deg)")
		l := plug(t, t.Context(), plain(t, w, nil))
		time.Sleep(2 * time.Second)
		l.expect("R1", "OK")
		time.Sleep(time.Minute)
		l.expect("S1", "IDLE")
		before := number(t, strings.TrimPrefix(l.ask("P1"), "P"))
		l.expect("H1", "OK")
		time.Sleep(time.Minute)
		if after := number(t, strings.TrimPrefix(l.ask("P1"), "P")); math.Abs(after-before) != 2500 {
			t.Errorf("the mark reads %g by the old zero and %g by the new one; want 0.25 deg between them", before, after)
		}
		l.hangUp()
	})
}

func TestAModeHopMovesTheEmissionAndLeavesThePower(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "mode_hop(at 1h, by -0.4 nm)")
		arms(t, w, func(r *instruments.RotaryConfig) { r.Axes[0].StartDeg, r.Axes[1].StartDeg = 3.0, 3.0 })
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "monitor", Power: true})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), m)
		power := l.ask("READ:POW?")
		before := instruments.Look(w, w.Now(), w.Now().Add(time.Minute))
		time.Sleep(2 * time.Hour)
		l.expect("READ:POW?", power)
		after := instruments.Look(w, w.Now(), w.Now().Add(time.Minute))
		if a, b := before.Seen.Signal.MeanHz, after.Seen.Signal.MeanHz; math.Abs(a-b) < 0.02*a {
			t.Errorf("%g Hz before and %g Hz after the hop; want another rate", a, b)
		}
		once(t, w, trouble.ModeHop, time.Hour)
		l.hangUp()
	})
}

func TestATemperatureDriftsAndStays(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "temperature_drift(at 1h, for 30m, by 1.5 Cel)")
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "monitor", Temperature: true})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), m)
		for _, want := range []float64{20, 20.75, 21.5} {
			if got := number(t, l.ask("READ:TEMP?")); math.Abs(got-want) > 0.01 {
				t.Errorf("after %v the monitor says %g Cel; want %g", w.Now().Sub(w.Origin()), got, want)
			}
			time.Sleep(75 * time.Minute)
			if want == 20.75 {
				time.Sleep(10 * time.Hour)
			}
		}
		once(t, w, trouble.TemperatureDrift, time.Hour)
		l.hangUp()
	})
}

func TestASensorThatIsStuckSaysTheSame(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "stuck_value(monitor, at 1m, for 10m)")
		m, err := instruments.NewMonitor(w, instruments.MonitorConfig{Name: "monitor", Power: true, PowerNoise: 0.01})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), m)
		seen := map[string]int{}
		for range 20 {
			seen[l.ask("READ:POW?")]++
			time.Sleep(time.Minute)
		}
		most := 0
		for _, n := range seen {
			most = max(most, n)
		}
		if most < 10 || most > 12 || len(seen) < 8 {
			t.Errorf("the values came %v times; want one about eleven times, the others once", seen)
		}
		once(t, w, trouble.StuckValue, time.Minute)
		l.hangUp()
	})
}

func TestADeviceThatIsSilentNeitherHearsNorAnswers(t *testing.T) {
	for _, c := range []struct {
		list  string
		again bool
	}{{"silent(stage, at 10s, for 30s)", true}, {"dead_line(stage, at 10s)", false}} {
		t.Run(c.list, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				w := world(t, 1, c.list)
				l := plug(t, t.Context(), arms(t, w, nil))
				l.expect("REST", "STILL")
				time.Sleep(11 * time.Second)
				if all := w.Ledger().Records(); len(all) != 0 {
					t.Errorf("%+v before anybody asked", all)
				}
				l.expect("G90 G0 A10", "")
				l.expect("REST", "")
				time.Sleep(time.Minute)
				l.expect("REST", map[bool]string{true: "STILL"}[c.again])
				if angle, _ := w.TrueDeg("signal_arm"); angle != 0 {
					t.Errorf("the axis stands at %g deg; want it where it was, as nobody heard", angle)
				}
				list, _ := trouble.Parse(c.list)
				once(t, w, list[0].Kind, 11*time.Second)
				l.hangUp()
			})
		})
	}
}

func TestWhatIsWrittenHangsForAWhile(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "hung(stage, at 10s, for 30s)")
		stage := arms(t, w, nil)
		l := plug(t, t.Context(), stage)
		l.expect("REST", "STILL")
		time.Sleep(15 * time.Second)
		_ = l.host.SetWriteDeadline(time.Now().Add(time.Second))
		if _, err := l.host.Write([]byte("REST\n")); err == nil {
			t.Error("the write succeeded; want it to wait until its deadline")
		}
		l.hangUp()
		l = plug(t, t.Context(), stage) // another connection does not help
		time.Sleep(time.Second)
		began := time.Now()
		l.expect("REST", "STILL")
		if waited := time.Since(began); waited < 20*time.Second || waited > 25*time.Second {
			t.Errorf("the next write waited %v; want the rest of the 30 s", waited)
		}
		once(t, w, trouble.Hung, 15*time.Second)
		l.hangUp()
	})
}

func TestALineThatIsGoneStaysAwayAndAStrangerComesBack(t *testing.T) {
	for _, c := range []struct {
		list string
		who  string // once it is plugged again; empty: never
	}{
		{"gone(stage, at 10s); unplug(stage, at 5s, for 20s)", ""},
		{"stranger(stage, at 10s, for 5s)", "WHO another,other,other,0"},
	} {
		t.Run(c.list, func(t *testing.T) {
			bubble(t, func(t *testing.T) {
				w := world(t, 1, c.list)
				stage := arms(t, w, nil)
				l := plug(t, t.Context(), stage)
				l.expect("WHO", "WHO Skerry,R3,17,1.2")
				if err := <-l.done; !errors.Is(err, instruments.ErrUnplugged) {
					t.Errorf("serve ended with %v; want the plug pulled", err)
				}
				time.Sleep(24 * time.Hour)
				if stage.Plugged() != (c.who != "") {
					t.Fatalf("plugged: %v a day later", stage.Plugged())
				}
				list, _ := trouble.Parse(c.list)
				once(t, w, list[0].Kind, 10*time.Second)
				if c.who != "" {
					l = plug(t, t.Context(), stage)
					l.expect("WHO", c.who)
					l.hangUp()
				}
			})
		})
	}
}

func TestAGateOfTheWrongLengthIsCalledDoubtfulOnce(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "wrong_gate(counter, at 5s, share -0.2)")
		l := plug(t, t.Context(), counter(t, w, func(c *instruments.CounterConfig) { c.DoubtAbove = 0.01 }))
		for i, want := range []struct {
			gateS float64
			bit   string
		}{{10, "0"}, {8, "4"}, {10, "0"}} {
			l.send(":TOT:APER 10\n:INIT\n")
			time.Sleep(20 * time.Second)
			l.expect("STAT:QUES:COND?", want.bit)
			if g := gates(w, instruments.GateClosed)[i]; g.GateS != want.gateS || g.SetS != 10 || g.Doubtful != (want.bit != "0") {
				t.Errorf("gate %d: %+v; want %g s of 10", i, g, want.gateS)
			}
		}
		once(t, w, trouble.WrongGate, 20*time.Second)
		l.hangUp()
	})
}

func TestAChannelThatRunsOverSaysSoOnce(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "overflow(counter, at 5s)")
		l := plug(t, t.Context(), counter(t, w, nil))
		for _, bit := range []string{"0", "512", "0"} {
			counts := l.count(4 * time.Second)
			l.expect("STAT:QUES:COND?", bit)
			closed := gates(w, instruments.GateClosed)
			g := closed[len(closed)-1]
			if g.Overflow != (bit != "0") || counts != answered(g.Counts) {
				t.Errorf("%q answered of %+v", counts, g)
			}
			if g.Overflow == (g.Counts[0] < 1e6) {
				t.Errorf("signal counts %d with overflow %v; want nonsense exactly when it ran over", g.Counts[0], g.Overflow)
			}
		}
		if all := befell(w, trouble.Overflow); len(all) != 1 {
			t.Errorf("took effect %d times; want once", len(all))
		}
		l.hangUp()
	})
}

func TestALatchedDetectorGivesNextToNothingInLight(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "latched(idler, at 30s, for 1m)")
		l := plug(t, t.Context(), counter(t, w, nil))
		var idler, pairs, signal []uint64
		var light []float64
		for range 4 {
			l.count(10 * time.Second)
			time.Sleep(20 * time.Second)
			all := gates(w, instruments.GateClosed)
			g := all[len(all)-1]
			signal, idler, pairs = append(signal, g.Counts[0]), append(idler, g.Counts[1]), append(pairs, g.Counts[2])
			light = append(light, g.Seen.Idler.MeanHz)
		}
		for i := range idler {
			latched := i == 1 || i == 2
			if (idler[i] < 10) != latched || signal[i] < 1000 || light[i] != light[0] {
				t.Errorf("gate %d: signal %d, idler %d, pairs %d in a light of %g Hz; latched %v", i, signal[i], idler[i], pairs[i], light[i], latched)
			}
		}
		once(t, w, trouble.Latched, 30*time.Second)
	})
}

func TestAStuckBladeIsSeenByItsSensor(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "stuck_shutter(shutter, at 10s, for 1m)")
		s, err := instruments.NewShutter(w, instruments.ShutterConfig{Name: "shutter", Blade: instruments.SignalBlade, Sensor: true})
		if err != nil {
			t.Fatal(err)
		}
		l := plug(t, t.Context(), s)
		l.send("OUTP ON\n")
		time.Sleep(11 * time.Second)
		l.expect("SENS:STAT?", "1")
		l.send("OUTP OFF\n")
		time.Sleep(time.Second)
		l.expect("OUTP?", "0")
		l.expect("SENS:STAT?", "1")
		once(t, w, trouble.StuckShutter, 11*time.Second)
		time.Sleep(2 * time.Minute)
		l.expect("SENS:STAT?", "1")
		l.send("OUTP OFF\n") // told again, it goes
		time.Sleep(time.Second)
		l.expect("SENS:STAT?", "0")
		l.hangUp()
	})
}

func TestAnAnswerComesInTwoPiecesAndNothingOvertakesTheRest(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "split(stage, answer 1, byte 2, by 400ms)")
		l := plug(t, t.Context(), arms(t, w, nil))
		began := time.Now()
		l.send("REST\nREFD\n")
		piece := make([]byte, 100)
		n, err := l.host.Read(piece)
		if string(piece[:n]) != "ST" || err != nil || time.Since(began) > 10*time.Millisecond {
			t.Errorf("first came %q, %v after %v; want two bytes at once", piece[:n], err, time.Since(began))
		}
		for _, want := range []string{"ILL", "REFD A1 B1 C1"} {
			if said := l.hear(time.Second); said != want {
				t.Errorf("then came %q; want %q", said, want)
			}
		}
		if took := time.Since(began); took < 400*time.Millisecond || took > 410*time.Millisecond {
			t.Errorf("the rest came after %v; want 400 ms", took)
		}
		once(t, w, trouble.Split, 0)
		l.hangUp()
	})
}
