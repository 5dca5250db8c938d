package keeper

import (
	"context"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
)

// shutter is a pump shutter that remembers where it is, whoever asks.
type shutter struct{ open *bool }

func (s shutter) Name() drivers.DeviceName      { return "shutter" }
func (s shutter) Identity() string              { return "stand-in" }
func (s shutter) Connect(context.Context) error { return nil }
func (s shutter) Open(context.Context) error    { *s.open = true; return nil }
func (s shutter) Close(context.Context) error   { *s.open = false; return nil }
func (s shutter) State(context.Context) (drivers.Blade, error) {
	return drivers.Blade{Open: *s.open, Sensed: true}, nil
}

// The process that died left the bench hot, and the stop comes before the next one's first act.
func TestAStopOfAnInterruptedRunBringsTheBenchToRestFirst(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		open := false
		k, book := keeping(t, func(c *Config) { counting(c); c.Bench.Pump = shutter{&open} })
		runs := enqueue(t, k, "a")
		during(t, k, func() { time.Sleep(5 * time.Second) })
		k = New(k.Config)
		open = true
		reply, err := k.Stop(t.Context(), protocol.RunRequest{Run: runs["a"], Who: "ann"})
		if err != nil || reply.State != protocol.Stopped {
			t.Fatalf("Stop() = %+v, %v; want stopped", reply, err)
		}
		if open {
			t.Error("the run is stopped for ever, and the pump is open")
		}
		if got := began(t, book, protocol.Ended); got != "a" {
			t.Errorf("ended: %q; want a", got)
		}
	})
}
