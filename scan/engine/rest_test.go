package engine

import (
	"context"
	"errors"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
)

// dead is a shutter on a line that never answers.
type dead struct {
	fakeShutter
	heard *[]time.Duration
	began time.Time
}

func (d dead) Close(ctx context.Context) error {
	*d.heard = append(*d.heard, time.Since(d.began))
	<-ctx.Done()
	return &drivers.Error{Op: "close", Device: d.name, Remedy: drivers.Reconnect, Err: context.Cause(ctx)}
}

func (d dead) Connect(ctx context.Context) error {
	<-ctx.Done()
	return &drivers.Error{Op: "connect", Device: d.name, Remedy: drivers.Reconnect, Err: context.Cause(ctx)}
}

func TestDeadLinesDelayNobodysStopByASecond(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		w := newWorld()
		b := w.bench()
		began := time.Now()
		var pump, guard []time.Duration
		b.Pump = dead{fakeShutter{fakeDevice{w, "pump"}}, &pump, began}
		for i := range b.Detectors {
			b.Detectors[i].Protect = &dead{fakeShutter{fakeDevice{w, "guard"}}, &guard, began}
		}
		var stopped, aborted time.Duration
		w.fail = func(what string) error {
			switch {
			case what == "stop rotary" && stopped == 0:
				stopped = time.Since(began)
			case what == "abort" && aborted == 0:
				aborted = time.Since(began)
			}
			return nil
		}
		bad := Rest(t.Context(), b)
		if stopped == 0 || stopped > time.Second || aborted == 0 || aborted > time.Second || len(pump) == 0 || pump[0] > time.Second {
			t.Errorf("the stage was told after %s, the counter after %s, the pump after %v; want all within a second", stopped, aborted, pump)
		}
		if !strings.Contains(bad, "close pump") || !strings.Contains(bad, "guard") {
			t.Errorf("the rest state is said to be %q; want both dead shutters named", bad)
		}
		if took := time.Since(began); took > 45*time.Second {
			t.Errorf("the attempt took %s; want it bounded", took)
		}
	})
}

func TestAStackDoesNotGetIntoASentence(t *testing.T) {
	err := &drivers.Error{Op: "where", Device: "rotary", Remedy: drivers.GiveUp, Err: errors.New("panic: a bug\ngoroutine 7 [running]:\n…")}
	if got := firstLine(err); got != "rotary: where: panic: a bug" {
		t.Errorf("firstLine() = %q", got)
	}
	if detail := errorDetail(err)["error"]; detail == nil || !strings.Contains(detail.(string), "goroutine 7") {
		t.Errorf("detail %v; want the stack kept", detail)
	}
}
