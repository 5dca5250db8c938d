package engine

import (
	"context"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// seekingStage can look for reference marks; the signal arm's is where slip says.
type seekingStage struct {
	fakeStage
	slip func() unit.Angle
}

func (s seekingStage) Mark(_ context.Context, axis drivers.AxisName) (unit.Angle, error) {
	if err := s.w.act("mark %s pump=%v guard=%v", axis, s.w.open["pump"], s.w.open["guard"]); err != nil {
		return 0, err
	}
	s.w.at[axis] = -5*unit.Degree + s.slip()
	return s.w.at[axis], nil
}

func (s seekingStage) Home(ctx context.Context, order []drivers.AxisName) error {
	s.w.at["signal_arm"] = -5 * unit.Degree
	return s.fakeStage.Home(ctx, order)
}

// counted is a night whose signal arm is only counted, and verified each six seconds.
func counted(t *testing.T, slip func(since time.Duration) unit.Angle) *night {
	t.Helper()
	return newNight(t, func(c *Config) {
		began, home := time.Now(), -5*unit.Degree
		a := &c.Bench.Axes[0]
		a.Proof, a.HomesAt, a.Verify = drivers.Reported, &home, &scan.Verify{Every: 6 * time.Second, Tolerance: unit.Degree / 50}
		stage := seekingStage{c.Bench.Stages[0].(fakeStage), func() unit.Angle { return slip(time.Since(began)) }}
		c.Bench.Stages = []drivers.Stage{stage}
	})
}

func TestACountedZeroIsVerifiedBeforeInBetweenAndAfter(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := counted(t, func(time.Duration) unit.Angle { return unit.Degree / 100 })
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := sequenceOf(n.readings(t)); got != "dark 0.1 1.1 2.1 2.2 dark 1.2 0.2 dark" {
			t.Errorf("readings %s; want all", got)
		}
		events := n.events(t)
		if events[1].Kind != protocol.HomedEvent || events[len(events)-2].Kind != protocol.HomedEvent || len(events) < 5 || len(events) > 7 {
			t.Errorf("events %s; want it verified before the first reading, in between and after the last", kinds(events))
		}
		for _, what := range n.heard() {
			if strings.HasPrefix(what, "mark") && what != "mark signal_arm pump=false guard=false" {
				t.Errorf("%q; want the pump closed and the detectors protected", what)
			}
		}
		for _, r := range n.readings(t) {
			if r.Angles[0].Proof != string(drivers.Reported) {
				t.Errorf("reading %d says %s; want reported", r.Sequence, r.Angles[0].Proof)
			}
		}
	})
}

func TestASlipDoubtsReadingsBackToTheLastGoodCheck(t *testing.T) {
	slips := func(since time.Duration) unit.Angle {
		if since > 10*time.Second && since < 20*time.Second {
			return unit.Degree / 10
		}
		return 0
	}
	synctest.Test(t, func(t *testing.T) {
		n := counted(t, slips)
		n.eng.Bench.Unattended = map[drivers.DeviceName]bool{"rotary": true}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		events := n.events(t)
		i := slices.IndexFunc(events, func(e protocol.Event) bool { return e.Kind == protocol.Doubted })
		if i < 1 || events[i+1].Kind != protocol.HomedEvent || !strings.Contains(events[i].Text, "signal_arm slipped: its reference mark is 0.1000 deg off") {
			t.Fatalf("events %s; want the slip told and the zero found again", kinds(events))
		}
		if from, to := numberIn(events[i].Detail, "from_sequence"), numberIn(events[i].Detail, "to_sequence"); from != int(events[i-1].Sequence)+1 || to != int(events[i].Sequence)-1 {
			t.Errorf("doubted %d to %d; want all since entry %d", from, to, events[i-1].Sequence)
		}
	})
	synctest.Test(t, func(t *testing.T) {
		n := counted(t, slips)
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(time.Minute)
		synctest.Wait()
		if s := n.eng.Snapshot(); s.State != protocol.Holding || !strings.Contains(s.Reason, "the zero of signal_arm is wrong; resume when it may search for it") {
			t.Fatalf("it is %s: %s; want a hold for somebody", s.State, s.Reason)
		}
		if _, err := n.eng.Resume(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		if state := <-done; state != protocol.Finished {
			t.Errorf("it ended %s; want finished", state)
		}
		if !slices.Contains(n.heard(), "home [signal_arm]") {
			t.Error("no search for the zero; want one with a person's word, though the controller believes it knows it")
		}
	})
}

func TestAZeroLostBeforeItWasVerifiedDoubtsWhatItCounted(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := counted(t, func(time.Duration) unit.Angle { return 0 })
		n.eng.Bench.Unattended = map[drivers.DeviceName]bool{"rotary": true}
		gates, lost := 0, false
		n.world.fail = func(what string) error {
			if strings.HasPrefix(what, "gate 1s pump=true") {
				gates++
			}
			if gates == 3 && !lost {
				lost, n.world.homed = true, false
				return &drivers.Error{Op: "where", Device: "rotary", Remedy: drivers.HomeAgain}
			}
			return nil
		}
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		doubted := 0
		for _, e := range n.events(t) {
			if e.Kind == protocol.Doubted {
				doubted++
				if !strings.Contains(e.Text, "signal_arm lost its zero before it was verified") {
					t.Errorf("told %q; want why", e.Text)
				}
			}
		}
		if doubted != 1 {
			t.Errorf("%d doubts; want one, events %s", doubted, kinds(n.events(t)))
		}
	})
}

func TestARunThatEndsUnverifiedDoubtsWhatItCountedSince(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := counted(t, func(time.Duration) unit.Angle { return 0 })
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(12 * time.Second)
		if _, err := n.eng.Stop(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		if state := <-done; state != protocol.Stopped {
			t.Fatalf("it ended %s; want stopped", state)
		}
		events := n.events(t)
		last := events[len(events)-2]
		if last.Kind != protocol.Doubted || !strings.Contains(last.Text, "ended before the zero of signal_arm was verified again") {
			t.Fatalf("events %s, then %q; want the doubt before the end", kinds(events), last.Text)
		}
		zero := slices.IndexFunc(events, func(e protocol.Event) bool { return e.Kind == protocol.HomedEvent })
		for _, e := range events[zero:] {
			if e.Kind == protocol.HomedEvent {
				zero = int(e.Sequence)
			}
		}
		if from, to := numberIn(last.Detail, "from_sequence"), numberIn(last.Detail, "to_sequence"); from != zero+1 || to != int(last.Sequence)-1 {
			t.Errorf("doubted %d to %d; want all since entry %d", from, to, zero)
		}
	})
}
