package engine

import (
	"errors"
	"slices"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
)

// A trouble may be over before the run is ready again: it is written when it is met, or never.
func TestEachDeviceThatFailsWhileTheBenchIsMadeReadyIsWritten(t *testing.T) {
	lost := func(device drivers.DeviceName) error {
		return &drivers.Error{Op: "connect", Device: device, Remedy: drivers.Reconnect, Err: errors.New("line lost")}
	}
	for _, test := range []struct {
		name string
		fail func(heard map[string]int, what string) error
		want []string
	}{
		{"at the beginning of a run", func(heard map[string]int, what string) error {
			if what == "connect counter" && heard[what] <= 2 {
				return lost("counter")
			}
			return nil
		}, []string{"counter"}},
		{"two at once, of which one stays longer", func(heard map[string]int, what string) error {
			switch {
			case what == "connect counter" && heard[what] <= 1:
				return lost("counter")
			case what == "connect guard" && heard[what] <= 4:
				return lost("guard")
			}
			return nil
		}, []string{"guard", "counter"}},
		{"behind the one that made it necessary", func(heard map[string]int, what string) error {
			switch {
			case what == "move idler_arm 3.00" && heard[what] == 1:
				return lost("rotary")
			case what == "connect rotary" && heard[what] == 2:
				return lost("rotary")
			case what == "connect counter" && (heard[what] == 3 || heard[what] == 4):
				return lost("counter")
			}
			return nil
		}, []string{"rotary", "counter"}},
	} {
		t.Run(test.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				w, m := newWorld(), &memory{}
				heard := map[string]int{}
				w.fail = func(what string) error {
					heard[what]++
					return test.fail(heard, what)
				}
				state, err := New(Config{Bench: w.bench(), Plan: aPlan(), RunID: "20000101-000000-00000000", Log: m}).Run(t.Context())
				if err != nil || state != protocol.Finished {
					t.Fatalf("%s, %v; want finished", state, err)
				}
				var got []string
				for _, ev := range m.events(t) {
					if ev.Kind == protocol.Trouble {
						device, _ := ev.Detail["device"].(string)
						got = append(got, device)
					}
				}
				if !slices.Equal(got, test.want) {
					t.Errorf("troubles of %v are written; want %v, each once", got, test.want)
				}
			})
		})
	}
}

// A status tells of a hold what the engine itself goes by.
func TestAHoldShowsHowLongItLasts(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		for _, c := range []struct {
			causes []protocol.Cause
			guard  string
			fails  time.Duration // after it began; 0: never
			looks  time.Duration // 0: a person
		}{
			{[]protocol.Cause{protocol.ByLight}, "", 2 * time.Hour, 30 * time.Second},
			{[]protocol.Cause{protocol.ByStorage}, "", 2 * time.Hour, 30 * time.Second},
			{[]protocol.Cause{protocol.ByGuard}, "power", time.Hour, 10 * time.Second},
			{[]protocol.Cause{protocol.ByGuard}, "rate", 2 * time.Hour, 30 * time.Second},
			{[]protocol.Cause{protocol.ByGuard, protocol.ByLight}, "power", time.Hour, 30 * time.Second}, // the light is looked at first
			{[]protocol.Cause{protocol.ByGuard, protocol.ByTrouble}, "power", 2 * time.Hour, 0},
			{[]protocol.Cause{protocol.ByTrouble}, "", 2 * time.Hour, 0},
			{[]protocol.Cause{protocol.ByLight, protocol.ByOperator}, "", 0, 0},
		} {
			plan := scan.Plan{Trouble: scan.Trouble{GiveUpAfter: 2 * time.Hour}, Guards: []scan.Guard{{Name: "power", Sensor: "pump_power", GiveUpAfter: time.Hour}, {Name: "rate", Rate: "signal"}}}
			e := New(Config{Bench: &Bench{Pace: 10}, Plan: plan})
			e.origin, e.benchZero = time.Now(), time.Now()
			e.progress.Causes, e.progress.guard = c.causes, c.guard
			e.waitsSince = e.now().Add(-10 * time.Minute) // a minute of the machine's
			e.showHold(e.pause(e.progress.holds(protocol.ByLight) && !e.mayBeOpen()))
			h := e.Snapshot().Hold
			if got := time.Since(h.Since); got != time.Minute {
				t.Errorf("%v: held for %s; want 1 min", c.causes, got)
			}
			if h.Looks != c.looks || h.GivesUpAt.IsZero() != (c.fails == 0) || c.fails > 0 && h.GivesUpAt.Sub(h.Since) != c.fails/10 {
				t.Errorf("%v: looks every %s and gives up at %s after %s; want %s and %s", c.causes, h.Looks, h.GivesUpAt, h.Since, c.looks, c.fails/10)
			}
		}
	})
}
