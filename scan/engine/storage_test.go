package engine

import (
	"errors"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

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
		{"hold", "began went_on held went_on ended", protocol.Finished},
	} {
		t.Run(c.what, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, nil)
				done := during(9*time.Second, func() {
					n.setFull(true)
					time.Sleep(2 * time.Minute)
					ask := n.eng.Stop
					if c.what == "hold" {
						ask = n.eng.Hold
					}
					for range 2 { // asked twice: the first request must not block the second
						asked := time.Now()
						r, err := ask(t.Context(), "ann")
						if err != nil || r.Recorded || time.Since(asked) > 10*time.Second {
							t.Errorf("answered %+v, %v after %s; want done, not recorded, soon", r, err, time.Since(asked))
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
				state, err := n.eng.Run(t.Context())
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
