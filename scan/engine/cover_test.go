package engine

import (
	"context"
	"errors"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
)

// mute is a shutter on a line that is silent for a while from its first Close in light on.
type mute struct {
	fakeShutter
	since, until *time.Time
	length       time.Duration
	tries        *int // in vain
}

func (m mute) silent(ctx context.Context) error {
	if !time.Now().Before(*m.until) {
		return nil
	}
	*m.tries++
	<-ctx.Done()
	return &drivers.Error{Op: "close", Device: m.name, Remedy: drivers.Retry, Err: context.Cause(ctx)}
}

func (m mute) Close(ctx context.Context) error {
	if m.since.IsZero() && m.w.open[string(m.name)] {
		*m.since, *m.until = time.Now(), time.Now().Add(m.length)
	}
	within, cancel := context.WithTimeout(ctx, 5*time.Second)
	defer cancel()
	if err := m.silent(within); err != nil {
		return err
	}
	return m.fakeShutter.Close(ctx)
}

func (m mute) Connect(ctx context.Context) error {
	within, cancel := context.WithTimeout(ctx, 5*time.Second)
	defer cancel()
	return m.silent(within)
}

func TestDetectorsAreCoveredWhateverMadeAReadingFail(t *testing.T) {
	for what, device := range map[string]drivers.DeviceName{"gate 1s pump=true": "counter", "where": "rotary"} {
		t.Run(what, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				n := newNight(t, nil)
				failed := -1
				n.fail = func(did string) error {
					if did == what && n.open["guard"] && failed < 0 {
						failed = len(n.log)
						return &drivers.Error{Op: "ask", Device: device, Remedy: drivers.Retry, Err: errors.New("no answer within 1 s")}
					}
					return nil
				}
				if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v; want finished", state, err)
				}
				if failed < 0 || n.log[failed] != "close guard" {
					t.Errorf("after the failure came %q; want the guard closed, for nobody sees the light", n.log[max(failed, 0)])
				}
			})
		})
	}
}

func TestAProtectorThatIsNotReachedDelaysNoOtherAndClosesThePump(t *testing.T) {
	for _, c := range []struct {
		name   string
		bright bool
		kind   protocol.EventKind
	}{
		{"in too much light", true, protocol.Held},
		{"while the counter is silent", false, protocol.Trouble},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				var since, until, covered, dark, again time.Time
				tries := 0
				n := newNight(t, func(c *Config) {
					c.Plan.Trouble.Retries, c.Plan.Trouble.Then = 0, scan.Skip
				})
				b := n.eng.Bench
				b.Detectors[0].Protect = mute{fakeShutter{fakeDevice{n.world, "signal_guard"}}, &since, &until, 3 * time.Minute, &tries}
				var met bool
				n.fail = func(did string) error {
					switch {
					case did == "gate 1s pump=true" && !met:
						met = true
						if c.bright {
							n.rates["signal"] = 5e6
							return nil
						}
						return retry(true)
					case did == "close guard" && met && covered.IsZero():
						covered = time.Now()
						n.rates["signal"] = 1000
					case did == "close pump" && met && dark.IsZero():
						dark = time.Now()
					case did == "open pump" && met && again.IsZero():
						again = time.Now()
					}
					return nil
				}
				if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
					t.Fatalf("Run() = %s, %v; want finished", state, err)
				}
				if a, b := covered.Sub(since), dark.Sub(since); a < 0 || a > time.Second || b < 0 || b > time.Second {
					t.Errorf("with one guard silent the other was closed after %s and the pump after %s; want both within a second", a, b)
				}
				if !again.After(until) {
					t.Errorf("the pump was opened again %s after the guard fell silent; want it closed for the %s of it", again.Sub(since), until.Sub(since))
				}
				if tries < 6 {
					t.Errorf("the silent guard was tried %d times in %s; want it tried again and again", tries, until.Sub(since))
				}
				if e := n.events(t)[1]; e.Kind != c.kind || !strings.Contains(e.Text, "NOT REACHED: protect by signal_guard") {
					t.Errorf("first came %s: %q; want %s and what was not reached", e.Kind, e.Text, c.kind)
				}
				n.atRest(t)
			})
		})
	}
}

func TestABladeThatSticksIsTriedAgainWhileNothingCanBeWritten(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, nil)
		var met, closed time.Time
		n.fail = func(did string) error {
			switch {
			case did == "gate 1s pump=true" && met.IsZero():
				met = time.Now()
				n.memory.mu.Lock()
				n.memory.full = true
				n.memory.mu.Unlock()
				return retry(true)
			case did == "close guard" && !met.IsZero() && time.Since(met) < 20*time.Second:
				return &drivers.Error{Op: "close", Device: "guard", Remedy: drivers.Retry, Err: errors.New("the sensor sees the blade open")}
			case did == "close guard" && !met.IsZero() && closed.IsZero():
				closed = time.Now()
			}
			return nil
		}
		room := during(10*time.Minute, func() {
			if took := closed.Sub(met); closed.IsZero() || took > time.Minute {
				t.Errorf("the guard was closed after %s, while nothing could be written; want it tried again within a minute", took)
			}
			n.memory.mu.Lock()
			n.memory.full = false
			n.memory.mu.Unlock()
		})
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		<-room
	})
}
