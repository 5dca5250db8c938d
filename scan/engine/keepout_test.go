package engine

import (
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

func cone(half unit.Angle) []scan.KeepOut {
	return []scan.KeepOut{{Name: "pump", Cone: &scan.Cone{Arms: []scan.Arm{{Axis: "signal_arm", Side: 1}}, HalfWidth: half, UnlessPumpClosed: true}}}
}

// across has points on both sides of the pump.
func across(c *Config) {
	c.Plan.Points = []scan.Point{at(-4 * unit.Degree), at(4 * unit.Degree)}
	c.Plan.Repeat.Times = 1
	c.Plan.Dark = nil
	c.Bench.KeepOuts = cone(unit.Degree)
}

func TestAnArmCrossesThePumpOnlyWhenItIsClosed(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, across)
		n.world.at["signal_arm"] = -5 * unit.Degree
		n.world.fail = func(what string) error {
			n.world.mu.Lock()
			defer n.world.mu.Unlock()
			if strings.HasPrefix(what, "move signal_arm 4.00") || strings.HasPrefix(what, "move signal_arm 3.50") {
				if n.world.open["pump"] && n.world.at["signal_arm"] < 0 {
					t.Error("the arm goes through the pump while it is open")
				}
			}
			return nil
		}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := sequenceOf(n.readings(t)); got != "0.1 1.1" {
			t.Errorf("readings %s; want both sides", got)
		}
		heard := n.heard()
		first := slices.Index(heard, "open pump")
		if first < 0 || !slices.Contains(heard[first:], "close pump") {
			t.Errorf("heard %v; want the pump closed for the way across", heard)
		}
	})
}

func TestThePumpIsNotOpenedIntoAnArm(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			across(c)
			c.Plan.Points = []scan.Point{at(unit.Degree / 2)}
		})
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(time.Minute)
		synctest.Wait()
		if s := n.eng.Snapshot(); s.State != protocol.Holding || !strings.Contains(s.Reason, `keep-out "pump"`) {
			t.Errorf("it is %s: %s; want a hold that names the keep-out", s.State, s.Reason)
		}
		if slices.Contains(n.heard(), "open pump") {
			t.Error("the pump was opened into the arm")
		}
		if _, err := n.eng.Stop(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		<-done
	})
}

func TestASearchForTheZeroKeepsOut(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) {
			c.Bench.KeepOuts = []scan.KeepOut{{Name: "post", Range: &scan.Range{Span: scan.Span{Axis: "idler_arm", Low: -2 * unit.Degree, High: -unit.Degree}}}}
			c.MayHome = true
		})
		n.world.homed = false
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(time.Minute)
		synctest.Wait()
		if s := n.eng.Snapshot(); s.State != protocol.Holding || !strings.Contains(s.Reason, "search for its reference could enter a keep-out") {
			t.Errorf("it is %s: %s; want a hold before the search", s.State, s.Reason)
		}
		for _, what := range n.heard() {
			if strings.HasPrefix(what, "home") {
				t.Errorf("%q; want no search", what)
			}
		}
		if _, err := n.eng.Stop(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		<-done
	})
}

func TestAStopAfterThePointTakesTheClosingReadings(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(6 * time.Second) // in the second point's dwell
		asked := time.Now()
		reply, err := n.eng.StopAfterPoint(t.Context(), "mara")
		if err != nil || !reply.Recorded || reply.State != protocol.Running {
			t.Fatalf("StopAfterPoint() = %+v, %v; want it written while the run goes on", reply, err)
		}
		if took := time.Since(asked); took > 1500*time.Millisecond {
			t.Errorf("answered after %s; want the end of a slice", took)
		}
		if state := <-done; state != protocol.Stopped {
			t.Errorf("it ended %s; want stopped", state)
		}
		if got := sequenceOf(n.readings(t)); got != "dark 0.1 1.1 dark" {
			t.Errorf("readings %s; want the open point whole and the closing dark", got)
		}
		if events := n.events(t); kinds(events) != "began set_aside ended" || !strings.HasPrefix(events[2].Text, "stopped by mara after a point") {
			t.Errorf("events %s, %q; want who stopped it", kinds(events), events[len(events)-1].Text)
		}
		n.atRest(t)
	})
}
