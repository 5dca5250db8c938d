package instruments_test

import (
	"context"
	"encoding/json"
	"errors"
	"math/rand/v2"
	"strings"
	"sync"
	"testing"
	"time"

	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// night lets two hosts talk at once to a stage and a counter, under troubles drawn from the seed,
// and returns everything that was heard and everything that truly happened.
func night(t *testing.T, seed uint64) (heard, truth string) {
	bubble(t, func(t *testing.T) {
		troubles := trouble.Draw(rand.New(rand.NewPCG(seed, 0)), trouble.Night{For: 10 * time.Minute, Targets: []trouble.Target{
			{Device: "stage", Answers: 300, Longest: 500 * time.Millisecond, Restart: true, Chatter: []string{"T=21.4"}},
			{Device: "counter", Answers: 300, Longest: 500 * time.Millisecond, Restart: true}}}, 30)
		w := world(t, 1, troubles.String())
		s := plug(t, t.Context(), arms(t, w, nil))
		c := plug(t, t.Context(), counter(t, w, nil))
		var logs [2]strings.Builder
		var hosts sync.WaitGroup
		talk := func(l *line, log *strings.Builder, questions ...string) {
			for i := range 300 {
				l.send(questions[i%len(questions)] + "\n")
				log.WriteString(l.hear(300*time.Millisecond) + "\n")
				time.Sleep(700 * time.Millisecond)
			}
		}
		hosts.Go(func() { talk(s, &logs[0], "G0 A3 B4", "REST", "WHERE", "G0 A2 B2", "WHERE") })
		hosts.Go(func() { talk(c, &logs[1], ":INIT", ":STAT:OPER:COND?", ":FETC?", ":SYST:ERR?") })
		hosts.Wait()
		s.hangUp()
		c.hangUp()
		w.Settle()
		b, err := json.Marshal(w.Ledger().Records())
		if err != nil {
			t.Fatal(err)
		}
		heard, truth = logs[0].String()+logs[1].String(), string(b)
	})
	return heard, truth
}

func TestTheSameSeedIsTheSameNight(t *testing.T) {
	for seed := range uint64(5) {
		h1, t1 := night(t, seed)
		h2, t2 := night(t, seed)
		if h1 != h2 {
			t.Errorf("seed %d: the hosts heard different lines", seed)
		}
		if t1 != t2 {
			t.Errorf("seed %d: different things happened", seed)
		}
		if !strings.Contains(t1, string(instruments.Troubled)) {
			t.Errorf("seed %d: no wire trouble took effect", seed)
		}
	}
}

func TestServeEndsWithItsContext(t *testing.T) {
	bubble(t, func(t *testing.T) {
		ctx, cancel := context.WithCancelCause(t.Context())
		l := plug(t, ctx, arms(t, world(t, 1, ""), nil))
		l.expect("REST", "STILL")
		why := errors.New("the bench is put away")
		cancel(why)
		if err := <-l.done; err != why {
			t.Errorf("serve: %v; want the cause", err)
		}
	})
}

// BenchmarkExchange is one question to an instrument and its answer, with a latency of 1 ns.
func BenchmarkExchange(b *testing.B) {
	w := world(b, 100, "")
	l := plug(b, b.Context(), arms(b, w, func(c *instruments.RotaryConfig) { c.Latency = 1 }))
	for b.Loop() {
		if l.ask("REST") != "STILL" {
			b.Fatal("not still")
		}
	}
	l.hangUp()
}

// BenchmarkGate is what a closed gate costs: nothing changes in it, or an arm travels through it.
func BenchmarkGate(b *testing.B) {
	for _, c := range []struct{ name, move string }{{"still", ""}, {"travelling", "G0 A180 B180"}} {
		b.Run(c.name, func(b *testing.B) {
			w := world(b, 1, "")
			s := plug(b, b.Context(), arms(b, w, func(c *instruments.RotaryConfig) { c.Axes[0].SpeedDegS, c.Axes[1].SpeedDegS = 0.01, 0.01 }))
			k := plug(b, b.Context(), counter(b, w, nil))
			if c.move != "" {
				s.ask(c.move)
				time.Sleep(2 * time.Millisecond)
			}
			k.ask(":SENS:TOT:APER MIN;:SYST:ERR?")
			begin := w.Now()
			for b.Loop() {
				instruments.Look(w, begin, begin.Add(time.Second))
			}
			s.hangUp()
			k.hangUp()
		})
	}
}

func TestNoTwoDevicesWakeAtOneInstant(t *testing.T) {
	bubble(t, func(t *testing.T) {
		w := world(t, 1, "restart(stage, at 10s); restart(counter, at 10s); restart(pump, at 10s)")
		p, err := instruments.NewShutter(w, instruments.ShutterConfig{Name: "pump", Blade: instruments.PumpBlade})
		if err != nil {
			t.Fatal(err)
		}
		lines := []*line{plug(t, t.Context(), arms(t, w, nil)), plug(t, t.Context(), counter(t, w, nil)), plug(t, t.Context(), p)}
		came := make([]time.Time, len(lines))
		var hosts sync.WaitGroup
		for i, l := range lines {
			hosts.Go(func() {
				l.ask([]string{"WHO", "*IDN?", "*IDN?"}[i])
				came[i] = time.Now()
			})
		}
		hosts.Wait()
		time.Sleep(20 * time.Second)
		for _, l := range lines {
			l.hangUp()
		}
		w.Settle()
		for _, r := range w.Ledger().Records() {
			if r.Kind == instruments.Restarted {
				came = append(came, r.At)
			}
		}
		seen := map[int64]bool{}
		for _, at := range came {
			if seen[at.UnixNano()] {
				t.Errorf("two devices did something at %v", at)
			}
			seen[at.UnixNano()] = true
		}
		if len(came) != 6 {
			t.Errorf("%d answers and restarts; want 3 each", len(came))
		}
	})
}
