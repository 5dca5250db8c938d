package engine

import (
	"context"
	"errors"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
)

func (m *memory) setFull(full bool) {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.full = full
}

func TestWhatIsAskedForOnAFullDiskComesTrueWhenThereIsRoom(t *testing.T) {
	for _, c := range []struct {
		what   string
		events string
		state  protocol.State
	}{
		{"stop", "began went_on ended", protocol.Stopped},
		{"stop after the point", "began went_on ended", protocol.Stopped},
		{"hold", "began went_on held went_on ended", protocol.Finished},
	} {
		t.Run(c.what, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, nil)
				done := during(9*time.Second, func() {
					n.setFull(true)
					time.Sleep(2 * time.Minute)
					ask := map[string]func(context.Context, string) (protocol.RunReply, error){
						"stop": n.eng.Stop, "stop after the point": n.eng.StopAfterPoint, "hold": n.eng.Hold,
					}[c.what]
					for range 2 { // asked twice: the first request must not block the second
						asked := time.Now()
						r, err := ask(t.Context(), "ann")
						stands := protocol.Stopped
						if c.what == "hold" {
							stands = protocol.Holding
						}
						if err != nil || r.Recorded || r.State != stands || time.Since(asked) > 10*time.Second {
							t.Errorf("answered %+v, %v after %s; want %s, not recorded, soon", r, err, time.Since(asked), stands)
						}
					}
					n.atRest(t)
					time.Sleep(time.Minute)
					n.setFull(false)
					time.Sleep(5 * time.Minute)
					if c.what == "hold" {
						if s := n.eng.Snapshot(); s.State != protocol.Holding || !slices.Equal(s.Causes, []protocol.Cause{protocol.ByOperator}) {
							t.Errorf("with room again the run is %s for %v; want held by the operator: nobody cleared that", s.State, s.Causes)
						}
						if _, err := n.eng.Resume(t.Context(), "ann"); err != nil {
							t.Error(err)
						}
					}
				})
				state, err := n.eng.Run(bounded(t))
				<-done
				if state != c.state || err != nil {
					t.Fatalf("Run() = %s, %v; want %s", state, err, c.state)
				}
				if got := kinds(n.events(t)); got != c.events {
					t.Errorf("events %s; want %s", got, c.events)
				}
			})
		})
	}
}

func TestARequestWhoseOwnEntryIsTheFirstWithoutRoomIsAnswered(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		done := during(9*time.Second, func() {
			if _, err := n.eng.Hold(t.Context(), "ann"); err != nil {
				t.Error(err)
			}
			n.setFull(true)
			asked := time.Now()
			r, err := n.eng.Stop(t.Context(), "ann")
			if err != nil || r.Recorded || r.State != protocol.Stopped || time.Since(asked) > 10*time.Second {
				t.Errorf("Stop() = %+v, %v after %s; want done, not recorded, soon", r, err, time.Since(asked))
			}
			time.Sleep(time.Hour / 2)
			n.setFull(false)
		})
		state, err := n.eng.Run(t.Context())
		<-done
		if state != protocol.Stopped || err != nil {
			t.Errorf("Run() = %s, %v; want stopped", state, err)
		}
	})
}

// slowHome is a stage that takes its time to search.
type slowHome struct{ fakeStage }

func (s slowHome) Home(ctx context.Context, order []drivers.AxisName) error {
	_ = s.w.act("home %v", order)
	if err := drivers.Pace(1).Wait(ctx, 5*time.Minute); err != nil {
		return &drivers.Error{Op: "home", Device: s.name, Err: err}
	}
	s.w.homed = true
	return nil
}

func TestAStopIsHeardInASearchWhoseWordHadToWaitForRoom(t *testing.T) {
	for _, c := range []struct {
		name      string
		full      time.Duration // from the start; 0: there is always room
		asked     time.Duration
		recorded  bool
		searching bool
	}{
		{"there was room", 0, 30 * time.Second, true, true},
		{"the search began when there was room again", 30 * time.Second, time.Minute, true, true},
		{"there is still no room, so the search must not begin", 2 * time.Minute, time.Minute, false, false},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, func(c *Config) {
					c.Bench.Unattended = map[drivers.DeviceName]bool{"rotary": true}
					c.Bench.Stages = []drivers.Stage{slowHome{c.Bench.Stages[0].(fakeStage)}}
				})
				n.world.homed = false
				n.world.fail = func(what string) error {
					if what == "connect counter" && c.full > 0 {
						n.setFull(true)
					}
					return nil
				}
				freed := during(c.full, func() { n.setFull(false) })
				done := during(c.asked, func() {
					asked := time.Now()
					r, err := n.eng.Stop(t.Context(), "ann")
					if took := time.Since(asked); err != nil || r.State != protocol.Stopped || r.Recorded != c.recorded || took > time.Second && c.recorded || took > 31*time.Second {
						t.Errorf("Stop() = %+v, %v after %s; want stopped, recorded %v, at once", r, err, took, c.recorded)
					}
				})
				began := time.Now()
				state, err := n.eng.Run(bounded(t))
				<-done
				<-freed
				if took := time.Since(began); state != protocol.Stopped || err != nil || took > 3*time.Minute {
					t.Errorf("Run() = %s, %v after %s; want stopped before the search is over", state, err, took)
				}
				if searched := slices.ContainsFunc(n.heard(), func(l string) bool { return strings.HasPrefix(l, "home") }); searched != c.searching {
					t.Errorf("searched: %v; want %v", searched, c.searching)
				}
			})
		})
	}
}

func TestADiskThatIsFullForLongerThanAnyPatienceCostsNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil) // with a patience of 1 h
		done := during(9*time.Second, func() {
			n.setFull(true)
			time.Sleep(30 * time.Hour)
			if s := n.eng.Snapshot(); s.State != protocol.Holding || !slices.Equal(s.Causes, []protocol.Cause{protocol.ByStorage}) {
				t.Errorf("full for 30 h the run is %s for %v; want held for storage", s.State, s.Causes)
			}
			n.atRest(t)
			n.setFull(false)
		})
		state, err := n.eng.Run(t.Context())
		<-done
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := kinds(n.events(t)); got != "began went_on ended" {
			t.Errorf("events %s; want it to go on by itself", got)
		}
		if got := sequenceOf(n.readings(t)); got != "dark 0.1 1.1 2.1 2.2 dark 1.2 0.2 dark" {
			t.Errorf("readings %s; want all, the one that waited among them", got)
		}
	})
}

func TestTheTimeWithoutRoomCountsForNoOtherHold(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		began := time.Now()
		n.world.fail = func(string) error {
			n.world.mu.Lock()
			defer n.world.mu.Unlock()
			n.world.rates["idler"] = 800
			if since := time.Since(began); since > 6*time.Second && since < 4*time.Hour {
				n.world.rates["idler"] = 5e6
			}
			return nil
		}
		done := during(10*time.Minute, func() {
			n.setFull(true) // the next look's entry waits
			time.Sleep(230*time.Minute + time.Second)
			n.setFull(false)
		})
		state, err := n.eng.Run(t.Context())
		<-done
		if state != protocol.Finished || err != nil {
			t.Errorf("Run() = %s, %v, events %s; want finished: of 4 h the light was looked at for ten minutes", state, err, kinds(n.events(t)))
		}
	})
}

func TestNobodyLooksAtTheLightWhileAPersonHolds(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		n.fail = func(what string) error {
			if strings.HasPrefix(what, "gate 1s pump=true") {
				n.rates["idler"] = 5e6
			}
			return nil
		}
		done := during(10*time.Second, func() {
			if s := n.eng.Snapshot(); !slices.Equal(s.Causes, []protocol.Cause{protocol.ByLight}) {
				t.Fatalf("held for %v; want light", s.Causes)
			}
			if _, err := n.eng.Hold(t.Context(), "ann"); err != nil {
				t.Error(err)
			}
			synctest.Wait()
			before := len(n.heard())
			time.Sleep(2 * time.Hour)
			for _, l := range n.heard()[before:] {
				if strings.HasPrefix(l, "open") || strings.HasPrefix(l, "gate") {
					t.Errorf("%s while a person holds: the enclosure may be open", l)
				}
			}
			if _, err := n.eng.Stop(t.Context(), "ann"); err != nil {
				t.Error(err)
			}
		})
		if state, err := n.eng.Run(t.Context()); state != protocol.Stopped || err != nil {
			t.Errorf("Run() = %s, %v; want stopped", state, err)
		}
		<-done
	})
}

func TestAWeekendWithoutTheProgramCountsForNoHold(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		whole := newNight(t, nil)
		if _, err := whole.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		time.Sleep(3 * 24 * time.Hour)
		n := newNight(t, nil)
		n.memory.entries = slices.Clone(whole.entries[:6])
		c := n.eng.Config
		c.Past = n.fold(t) // after_restart: hold
		n.eng = New(c)
		done := during(30*time.Minute, func() {
			if s := n.eng.Snapshot(); s.State != protocol.Holding {
				t.Errorf("half an hour after the start the run is %s (%s); want it to wait for a person", s.State, s.Reason)
			}
			if _, err := n.eng.Resume(t.Context(), "ann"); err != nil {
				t.Error(err)
			}
		})
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Errorf("Run() = %s, %v; want finished", state, err)
		}
		<-done
	})
}

func TestLittleRoomHoldsBeforeThereIsNone(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		began := time.Now()
		n := newNight(t, func(c *Config) {
			c.Room = func() error {
				if since := time.Since(began); since > 6*time.Second && since < 10*time.Minute {
					return errors.New("3 MB are left where the logbook is; want 64 MB")
				}
				return nil
			}
		})
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		events := n.events(t)
		if kinds(events) != "began held went_on ended" || !slices.Equal(events[1].Causes, []protocol.Cause{protocol.ByStorage}) || !strings.Contains(events[1].Text, "3 MB are left") {
			t.Errorf("events %s, %q for %v; want a hold for storage that ends itself", kinds(events), events[1].Text, events[1].Causes)
		}
		if got := sequenceOf(n.readings(t)); got != "dark 0.1 1.1 2.1 2.2 dark 1.2 0.2 dark" {
			t.Errorf("readings %s; want all, none set aside", got)
		}
	})
}

func TestTheBenchIsNotCalledAtRestWhereABladeStuckAllTheWhile(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		var met time.Time
		n.fail = func(did string) error {
			switch {
			case did == "gate 1s pump=true" && met.IsZero():
				met = time.Now()
				n.setFull(true)
				return retry(true)
			case did == "close guard" && !met.IsZero() && time.Since(met) < 11*time.Minute:
				return &drivers.Error{Op: "close", Device: "guard", Remedy: drivers.Retry, Err: errors.New("the sensor sees the blade open")}
			}
			return nil
		}
		room := during(10*time.Minute, func() { n.setFull(false) })
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		<-room
		var words strings.Builder
		for _, ev := range n.events(t) {
			if strings.HasPrefix(ev.Text, "there is room again") {
				words.WriteString(ev.Text)
			}
		}
		if !strings.Contains(words.String(), "NOT REACHED: protect by guard") || strings.Contains(words.String(), "was at rest") {
			t.Errorf("with room again it was said: %q; want that the guard did not close", words.String())
		}
	})
}
