package engine

import (
	"errors"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
)

// warmed is a night that waits for the pump's power to vary by no more than 1 % over 5 min.
func warmed(t *testing.T, power func(since time.Duration) (float64, error)) *night {
	t.Helper()
	n := newNight(t, func(c *Config) {
		c.Plan.Trouble.GiveUpAfter = 0
		c.Plan.Schedule.WarmUp = &scan.WarmUp{Steady: []scan.Steady{{Sensor: "pump_power", Relative: 0.01, Over: 5 * time.Minute}}, AtMost: time.Hour}
	})
	began := time.Now()
	n.eng.Bench.Sensors = []drivers.Sensor{fakeSensor{fakeDevice{n.world, "pump_power"}, func() (float64, error) { return power(time.Since(began)) }}}
	return n
}

func TestARunWaitsUntilItsSensorsAreSteady(t *testing.T) {
	rises := func(until time.Duration) func(time.Duration) (float64, error) {
		return func(since time.Duration) (float64, error) { return 50 - 10*max(0, (until-since).Minutes()), nil }
	}
	for name, c := range map[string]struct {
		power       func(time.Duration) (float64, error)
		from, until time.Duration // when the first gate is opened
	}{
		"steady from the start":     {rises(0), 5 * time.Minute, 6 * time.Minute},
		"rising for twenty minutes": {rises(20 * time.Minute), 24 * time.Minute, 26 * time.Minute},
		"silent in between, which may hide a step": {func(since time.Duration) (float64, error) {
			if since > 4*time.Minute && since < 10*time.Minute {
				return 0, errors.New("silent")
			}
			return 50, nil
		}, 15 * time.Minute, 16 * time.Minute},
	} {
		synctest.Test(t, func(t *testing.T) {
			n := warmed(t, c.power)
			began := time.Now()
			if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
				t.Fatalf("%s: Run() = %s, %v; want finished", name, state, err)
			}
			if first := n.readings(t)[0].StartedAt.Sub(began); first < c.from || first > c.until {
				t.Errorf("%s: counting began after %s; want %s to %s", name, first, c.from, c.until)
			}
			events := n.events(t)
			if kinds(events) != "began guard_mended ended" || !strings.HasPrefix(events[1].Text, "steady: pump_power varied by") {
				t.Errorf("%s: events %s, %q; want what was steady told", name, kinds(events), events[1].Text)
			}
		})
	}
}

func TestAWarmUpHoldsForAPersonInTheEnd(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		well := time.Now().Add(2 * time.Hour)
		n := warmed(t, func(since time.Duration) (float64, error) {
			if time.Now().After(well) {
				return 50, nil
			}
			return 50 + float64(since/time.Minute%2), nil
		})
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(70 * time.Minute)
		synctest.Wait()
		if s := n.eng.Snapshot(); s.State != protocol.Holding || !slices.Equal(s.Causes, []protocol.Cause{protocol.ByTrouble}) || !strings.Contains(s.Reason, "not steady within 1 h: pump_power varied by 1 mW") {
			t.Fatalf("after 70 min it is %s for %v: %s; want a hold that says what is not steady", s.State, s.Causes, s.Reason)
		}
		time.Sleep(time.Hour)
		if _, err := n.eng.Resume(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		if state := <-done; state != protocol.Finished {
			t.Errorf("it ended %s; want finished", state)
		}
	})
}

func TestAWarmUpIsOverOnce(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := warmed(t, func(time.Duration) (float64, error) { return 50, nil })
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		again := warmed(t, func(time.Duration) (float64, error) { return 50, nil })
		again.memory.entries = slices.Clone(n.entries[:6])
		c := again.eng.Config
		c.Past, c.ResumeAfterRestart = again.fold(t), true
		again.eng = New(c)
		began := time.Now()
		if state, err := again.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("resumed: %s, %v; want finished", state, err)
		}
		if took := time.Since(began); took > time.Minute {
			t.Errorf("resumed, it took %s; want no second warm-up", took)
		}
	})
}

func TestCountingBeginsNotBeforeItsTimeHoweverEarlyItIsSteady(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := warmed(t, func(since time.Duration) (float64, error) {
			if since > 100*time.Minute && since < 110*time.Minute {
				return 40, nil // it was steady long ago, and is not when it matters
			}
			return 50, nil
		})
		begin := time.Now().Add(112 * time.Minute)
		n.eng.Plan.Schedule.NotBefore = begin
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if first := n.readings(t)[0].StartedAt.Sub(begin); first < 2*time.Minute || first > 5*time.Minute {
			t.Errorf("counting began %s after its time; want when the last five minutes were steady", first)
		}
	})
}
