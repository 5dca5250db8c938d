package engine

import (
	"errors"
	"slices"
	"testing"
	"testing/synctest"

	"gemel/drivers"
	"gemel/protocol"
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
