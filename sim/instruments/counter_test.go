package instruments_test

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"reflect"
	"strings"
	"testing"
	"time"

	"gemel/sim/instruments"
)

// gates are the ledger's records of one kind.
func gates(w *instruments.World, kind instruments.Kind) []*instruments.GateTruth {
	w.Settle()
	var g []*instruments.GateTruth
	for _, r := range w.Ledger().Records() {
		if r.Kind == kind {
			g = append(g, r.Gate)
		}
	}
	return g
}

// count opens a gate of the length set, waits for it, and reads it.
func (l *line) count(gate time.Duration) string {
	l.t.Helper()
	l.send(":INIT\n")
	time.Sleep(gate + 10*time.Millisecond)
	return l.ask(":FETC?")
}

func answered(counts []uint64) string {
	s := make([]string, len(counts))
	for i, n := range counts {
		s[i] = fmt.Sprintf("+%d", n)
	}
	return strings.Join(s, ",")
}

func TestCounterAnswersWhatTheLedgerSays(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s := plug(t, t.Context(), arms(t, w, nil))
		c := plug(t, t.Context(), counter(t, w, nil))
		s.expect("G0 A2.864 B2.864", "TAKEN")
		time.Sleep(3 * time.Second)
		var heard []string
		for range 5 {
			heard = append(heard, c.count(time.Second))
		}
		closed, read := gates(w, instruments.GateClosed), gates(w, instruments.GateRead)
		if len(closed) != 5 || len(read) != 5 {
			t.Fatalf("%d gates closed and %d read; want 5 each", len(closed), len(read))
		}
		for i, g := range closed {
			if heard[i] != answered(g.Counts) || !reflect.DeepEqual(read[i].Counts, g.Counts) {
				t.Errorf("gate %d: heard %s, ledger has %v closed and %v read", i+1, heard[i], g.Counts, read[i].Counts)
			}
			if g.Tag != uint64(i+1) || g.Counts[3] != g.Tag {
				t.Errorf("gate %d: tag %d, tag channel %d", i+1, g.Tag, g.Counts[3])
			}
			if g.GateS != 1 || g.Axes["signal_arm"].LowDeg != g.Axes["signal_arm"].HighDeg {
				t.Errorf("gate %d: %.9f s with the signal arm at %+v; want 1 s at one angle", i+1, g.GateS, g.Axes["signal_arm"])
			}
			mean := g.Seen.Signal.MeanHz / (1 + g.Seen.Signal.MeanHz*45e-9)
			if d := float64(g.Counts[0]) - mean; math.Abs(d) > 6*math.Sqrt(mean) {
				t.Errorf("gate %d: %d counts; want %.0f within 6 sigma", i+1, g.Counts[0], mean)
			}
		}
		s.hangUp()
		c.hangUp()
	})
}

func TestCounterSeesMotionLampAndShutterInsideAGate(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "lamp(at 10s, for 5s, rate 100000 Hz)")
		pump, err := instruments.NewShutter(w, instruments.ShutterConfig{Name: "pump", Blade: instruments.PumpBlade, Travel: 40 * time.Millisecond})
		if err != nil {
			t.Fatal(err)
		}
		guard, err := instruments.NewShutter(w, instruments.ShutterConfig{Name: "guard", Blade: instruments.SignalBlade, Open: true})
		if err != nil {
			t.Fatal(err)
		}
		p, d := plug(t, t.Context(), pump), plug(t, t.Context(), guard)
		s := plug(t, t.Context(), arms(t, w, nil))
		c := plug(t, t.Context(), counter(t, w, nil))
		c.send(":SENS:TOT:APER 20\n")
		until := func(at time.Duration) { time.Sleep(time.Until(w.Origin().Add(at))) }
		until(2 * time.Second)
		c.send(":INIT\n")
		until(7 * time.Second)
		s.expect("G0 A5", "TAKEN")
		until(12 * time.Second)
		p.send(":OUTP ON\n")
		until(13 * time.Second)
		d.send(":OUTP OFF\n")
		until(30 * time.Second)
		g := gates(w, instruments.GateClosed)[0]
		near := func(what string, got, want float64) {
			t.Helper()
			if math.Abs(got-want) > 1e-6 {
				t.Errorf("%s is %.7f; want %.7f", what, got, want)
			}
		}
		near("lamp share", g.Seen.LampShare, 5./20)
		near("the lamp the idler detector saw", g.Seen.Idler.LampShare, 5./20)
		near("the lamp the signal detector saw", g.Seen.Signal.LampShare, 3.02/20) // until its blade covers all
		near("pump share", g.Seen.PumpOpenShare, (10-0.02)/20)
		near("signal detector's opening", g.Seen.Signal.OpenShare, (11+0.01)/20)
		near("idler detector's opening", g.Seen.Idler.OpenShare, 1)
		near("signal arm from", g.Axes["signal_arm"].LowDeg, 0)
		near("signal arm to", g.Axes["signal_arm"].HighDeg, 5)
		near("idler arm to", g.Axes["idler_arm"].HighDeg, 0)
		if g.Seen.Idler.PeakHz < 100000 {
			t.Errorf("the idler detector's peak rate is %.0f Hz; want the lamp's 100 kHz in it", g.Seen.Idler.PeakHz)
		}
		for _, l := range []*line{p, d, s, c} {
			l.hangUp()
		}
	})
}

func TestCounterTroublesElsewhereDoNotShiftCounts(t *testing.T) {
	night := func(t *testing.T, troubles string) (counts [][]uint64) {
		bubble(t, func(t *testing.T) {
			w := world(t, 1, troubles)
			s := plug(t, t.Context(), arms(t, w, nil))
			c := plug(t, t.Context(), counter(t, w, nil))
			for range 4 {
				s.ask("WHERE")
				c.count(time.Second)
			}
			for _, g := range gates(w, instruments.GateClosed) {
				counts = append(counts, g.Counts)
			}
			s.hangUp()
			c.hangUp()
		})
		return counts
	}
	quiet := night(t, "")
	troubled := night(t, `missing(stage, answer 2); late(counter, answer 1, by 300ms); garbled(counter, answer 2, byte 1 as "7")`)
	if len(quiet) != 4 || !reflect.DeepEqual(quiet, troubled) {
		t.Errorf("counts %v; troubled night %v; want the same", quiet, troubled)
	}
	if reflect.DeepEqual(quiet[0][:3], quiet[1][:3]) {
		t.Errorf("two gates have the same counts %v; want draws of their own", quiet[0])
	}
}

func TestCounterRestartAndAbort(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart(counter, at 10s)")
		c := plug(t, t.Context(), counter(t, w, nil))
		c.count(time.Second)
		c.send(":INIT;:ABOR\n")
		c.expect("*ESR?", "128")
		c.send(":SENS:TOT:APER 60;:INIT\n")
		time.Sleep(20 * time.Second)
		c.expect("*ESR?;:SENS:TOT:APER?;:STAT:OPER:COND?", "128;1.000000E+00;0")
		c.expect(":FETC?;:SYST:ERR?", `-230,"Data corrupt or stale"`)
		if s := c.count(time.Second); !strings.HasSuffix(s, ",+1") {
			t.Errorf("counts %q; want the tag to begin anew at 1", s)
		}
		aborted := gates(w, instruments.GateAborted)
		if len(aborted) != 2 || aborted[0].GateS > 0.01 || aborted[1].GateS < 7 || aborted[1].Counts != nil {
			t.Errorf("aborted gates %+v; want one at once, one by the restart, neither with counts", aborted)
		}
		c.hangUp()
	})
}

func TestCounterFlags(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "lamp(at 0s, for 1h, rate 100000 Hz)")
		c := plug(t, t.Context(), counter(t, w, func(k *instruments.CounterConfig) {
			k.Bits, k.GateError, k.DoubtAbove = 16, 0.01, 0.005
		}))
		s := c.count(1020 * time.Millisecond)
		c.expect(":STAT:QUES:COND?;EVEN?;EVEN?", "516;516;0") // bits 9 and 2, cleared by reading
		c.count(1020 * time.Millisecond)
		c.expect(":STAT:QUES?", "516") // and set by the next such gate
		g := gates(w, instruments.GateClosed)[0]
		if !g.Overflow || !g.Doubtful || g.GateS != 1.01 || g.SetS != 1 || g.Counts[0] >= 1<<16 || s != answered(g.Counts) {
			t.Errorf("gate %+v answered %q; want 1.01 s, doubtful, and 16 bits that ran over", g, s)
		}
		c.hangUp()
	})
}

func TestCounterGateNobodyFetchesForHoursIsStillTrue(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s := plug(t, t.Context(), arms(t, w, nil))
		c := plug(t, t.Context(), counter(t, w, nil))
		s.expect("G0 A1", "TAKEN")
		time.Sleep(2 * time.Second)
		c.send(":SENS:TOT:APER 1000;:INIT\n")
		time.Sleep(2 * time.Second)
		for i := range 500 { // some of them while the gate is open
			s.expect([]string{"G0 A9", "G0 A2"}[i%2], "TAKEN")
			time.Sleep(20 * time.Second)
		}
		if got := c.ask(":FETC?"); got != answered(gates(w, instruments.GateClosed)[0].Counts) {
			t.Errorf("counts %s; want those of the ledger", got)
		}
		if r := gates(w, instruments.GateClosed)[0].Axes["signal_arm"]; math.Abs(r.LowDeg-1) > 1e-9 || math.Abs(r.HighDeg-9) > 1e-9 {
			t.Errorf("during the gate the arm was at %+v; want 1, where it began, to 9", r)
		}
		s.hangUp()
		c.hangUp()
	})
}

func TestLedgerIsInOrderAndOnPaper(t *testing.T) {
	bubble(t, func(t *testing.T) {
		var paper bytes.Buffer
		w, err := instruments.NewWorld(instruments.WorldConfig{Seed: 3, Pace: 10, Model: model(t), Still: still, Ledger: instruments.NewLedger(&paper)})
		if err != nil {
			t.Fatal(err)
		}
		s := plug(t, t.Context(), arms(t, w, nil))
		c := plug(t, t.Context(), counter(t, w, nil))
		c.send(":INIT\n")
		time.Sleep(time.Millisecond)
		s.expect("G0 A5", "TAKEN")
		time.Sleep(time.Second)
		c.count(time.Second)
		w.Settle()
		records := w.Ledger().Records()
		for i := 1; i < len(records); i++ {
			if records[i].At.Before(records[i-1].At) {
				t.Errorf("record %d of %v comes after one of %v", i, records[i].At, records[i-1].At)
			}
		}
		dec := json.NewDecoder(&paper)
		for i, want := range records {
			var got instruments.Record
			if err := dec.Decode(&got); err != nil {
				t.Fatalf("line %d: %v", i+1, err)
			}
			if !reflect.DeepEqual(got, want) {
				t.Errorf("line %d reads back as %+v; want %+v", i+1, got, want)
			}
		}
		if dec.More() {
			t.Error("more lines than records")
		}
		// At pace 10 a gate of 1 s is over in 0.1 s, and is still 1 s in the ledger.
		if g := gates(w, instruments.GateClosed)[0]; g.GateS != 1 {
			t.Errorf("gate of %.6f s; want 1 s of bench time", g.GateS)
		}
		s.hangUp()
		c.hangUp()
	})
}

func TestALedgerThatForgetsIsOnPaperAlone(t *testing.T) {
	bubble(t, func(t *testing.T) {
		var kept, paper bytes.Buffer
		for _, l := range []*instruments.Ledger{instruments.NewLedger(&kept), instruments.WriteOnly(&paper)} {
			w, err := instruments.NewWorld(instruments.WorldConfig{Seed: 3, Pace: 10, Model: model(t), Still: still, Ledger: l})
			if err != nil {
				t.Fatal(err)
			}
			c := plug(t, t.Context(), counter(t, w, nil))
			c.count(time.Second)
			w.Settle()
			if forgets, n := paper.Len() > 0, len(l.Records()); forgets != (n == 0) {
				t.Errorf("%d records are kept; want none of the one that forgets alone", n)
			}
			c.hangUp()
		}
		if a, b := strings.Count(kept.String(), "\n"), strings.Count(paper.String(), "\n"); a == 0 || a != b {
			t.Errorf("the one that forgets wrote %d lines; want %d, as the other did", b, a)
		}
	})
}

func TestCounterIntegratesRatesAlongAMotion(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "")
		s := plug(t, t.Context(), arms(t, w, func(c *instruments.RotaryConfig) { c.Axes[0].AccelDegS2 = 1e6 }))
		c := plug(t, t.Context(), counter(t, w, nil))
		s.expect("G0 B2.864", "TAKEN")
		time.Sleep(2 * time.Second)
		c.send(":INIT\n")
		s.expect("G0 A6", "TAKEN") // at 10 deg/s it passes the peak within a few hundredths of a second
		time.Sleep(2 * time.Second)
		p := still
		p.PumpOpen, p.SignalOpen, p.IdlerOpen, p.IdlerDeg = 1, 1, 1, 2.864
		const n = 4000
		passing := 0.0
		for k := range n {
			p.SignalDeg = 6 * (float64(k) + 0.5) / n
			passing += model(t).Rates(p).SignalHz / n
		}
		p.SignalDeg = 0
		before := model(t).Rates(p).SignalHz
		p.SignalDeg = 6
		after := model(t).Rates(p).SignalHz
		var moved time.Time
		for _, r := range w.Ledger().Records() {
			if r.Kind == instruments.MoveStarted {
				moved = r.At
			}
		}
		g := gates(w, instruments.GateClosed)[0]
		wait := moved.Sub(g.Opened).Seconds()
		want := before*wait + passing*0.6 + after*(0.4-wait)
		if d := math.Abs(g.Seen.Signal.MeanHz - want); d > 1e-3*want {
			t.Errorf("mean rate %.1f Hz; want %.1f by fine steps, to a part in a thousand", g.Seen.Signal.MeanHz, want)
		}
		s.hangUp()
		c.hangUp()
	})
}
