package line

import (
	"context"
	"errors"
	"fmt"
	"time"

	"gemel/drivers"
)

// Errorf is the error of a device's question.
func Errorf(device drivers.DeviceName, op string, remedy drivers.Remedy, format string, args ...any) error {
	return &drivers.Error{Op: op, Device: device, Remedy: remedy, Err: fmt.Errorf(format, args...)}
}

// Wait waits for a time on the wall, the end of ctx or the end of the epoch, between two questions
// to a device. Its errors are the device's.
func Wait(ctx context.Context, device drivers.DeviceName, op string, epoch Epoch, real time.Duration) error {
	if ctx.Err() != nil {
		return ended(ctx, device, op)
	}
	if epoch.Over() {
		return stopped(device, op)
	}
	timer := time.NewTimer(max(real, 0))
	defer timer.Stop()
	select {
	case <-timer.C:
		return nil
	case <-ctx.Done():
		return ended(ctx, device, op)
	case <-epoch:
		return stopped(device, op)
	}
}

// ended is the error for a context that ended between two questions. It has no remedy.
func ended(ctx context.Context, device drivers.DeviceName, op string) error {
	err := ctx.Err()
	if cause := context.Cause(ctx); cause != nil && !errors.Is(cause, err) {
		err = fmt.Errorf("%w: %w", err, cause)
	}
	return &drivers.Error{Op: op, Device: device, Err: err}
}

func stopped(device drivers.DeviceName, op string) error {
	return Errorf(device, op, drivers.Retry, "stopped by an urgent message to this device")
}

// Urgently is the context for what must still be done after ctx has ended, within what is left of the
// second that callers are promised.
func Urgently(ctx context.Context) (context.Context, context.CancelFunc) {
	return context.WithTimeout(context.WithoutCancel(ctx), 700*time.Millisecond)
}
