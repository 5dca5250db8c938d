// Package drivers says what a stage, a counter, a shutter, a sensor and a setting must do, and
// how they fail. Nothing here talks to anything: the dialects in the folders below do.
//
// All methods take a context and come back within a second of its end, whatever the line does.
// All angles are bench angles: a driver turns the controller's numbers into them by its axes'
// Mount before anybody else sees one. No method returns a value it did not validate: an answer
// that is late, garbled or belongs to another question is an *Error, never a number.
//
// Methods of one device are called from one goroutine at a time, except Stop, Abort and Protect
// roads (Stage.Stop, Counter.Abort, Shutter.Close), which may be called at any moment, beside a
// method that still runs, and reach the instrument first.
package drivers

import (
	"context"
	"errors"
	"fmt"
	"time"

	"gemel/protocol/unit"
)

// Identifiers are types of their own, so that two of them cannot be swapped.
type (
	// AxisName is the bench file's name of an axis, such as "signal_arm".
	AxisName string
	// Channel is the bench file's name of a counter channel, such as "signal" or "pairs".
	Channel string
	// DeviceName is the bench file's name of a controller, counter, shutter, sensor or setting.
	DeviceName string
)

// Device is what everything on a line can do.
type Device interface {
	// Name is the bench file's name of the device.
	Name() DeviceName
	// Connect opens the line if it is not open, waits until it is quiet, checks that the
	// instrument there is the one the bench file names, and sends the start settings. It may be
	// called again at any time, and must be after any error whose remedy is Reconnect. It moves
	// nothing, opens nothing and counts nothing. Another instrument at the device's path is
	// GiveUp.
	Connect(ctx context.Context) error
	// Identity is the instrument's own description, as read by the last Connect.
	Identity() string
}

// Proof says how far a position can be believed.
type Proof string

const (
	// Proved positions come from an encoder on the axis.
	Proved Proof = "proved"
	// Reported positions are only counted by the controller: a lost step does not show.
	Reported Proof = "reported"
)

// Stage is a motion controller with one or more axes.
type Stage interface {
	Device
	// Axes lists the controller's axes in a fixed order.
	Axes() []AxisName
	// Together says whether axes of one Move start and finish together, on a straight line in
	// the space of angles. If not, each takes its own time, and any order of passing is possible.
	Together() bool
	// Move sends the named axes to the targets and returns when the controller says that all its
	// axes are at rest. It does not claim that they arrived: ask Where. When ctx ends the motion
	// is stopped before Move returns. A refusal by the controller (a limit of its own) is GiveUp.
	Move(ctx context.Context, targets map[AxisName]unit.Angle) error
	// Where returns the angles of all axes that the controller reports now, asked twice with
	// equal answers. A controller that has lost its zero fails with remedy HomeAgain even if it
	// still prints plausible numbers.
	Where(ctx context.Context) (map[AxisName]unit.Angle, error)
	// Stop halts all axes at once, out of turn, and returns when the controller says it is at rest.
	Stop(ctx context.Context) error
	// Home searches the reference of the named axes, one after the other in that order, or of
	// all of them at once if the controller can only do that, and returns when it is found.
	Home(ctx context.Context, order []AxisName) error
	// Homed says, for each axis, whether the controller knows its zero. For a controller that
	// cannot tell, it is false from a restart or reconnection until Home or TrustZero.
	Homed(ctx context.Context) (map[AxisName]bool, error)
	// TrustZero is a person's word that the zero of all axes is true as it stands.
	TrustZero()
}

// Verifier is a Stage that can look for the reference mark of an axis and keep the zero it has.
type Verifier interface {
	// Mark searches the reference mark of an axis and returns the angle at which it was found, by
	// the zero the controller has. The axis is left there.
	Mark(ctx context.Context, axis AxisName) (unit.Angle, error)
}

// Gate is one closed counting interval.
type Gate struct {
	Counts   map[Channel]uint64 // all channels latched together, the tag channel too
	Set      time.Duration      // the gate as read back from the counter after it was set
	Length   time.Duration      // the gate as the counter measured it; Set if it cannot tell
	Overflow bool               // a channel ran over
	Doubtful bool               // the counter says its gate time is not to be trusted
	Raw      string             // the answer the counts were taken from
}

// Counter is a gated counter with latched channels.
type Counter interface {
	Device
	// Channels lists all channels in the order of the instrument's answers.
	Channels() []Channel
	// Count opens one gate, waits for its end and reads it, asked twice with equal answers.
	// When ctx ends the gate is aborted before Count returns. An error after the gate was opened
	// is a *Error with GateOpened set, because that gate will be missing from the journal unless
	// somebody names it.
	Count(ctx context.Context, gate time.Duration) (Gate, error)
	// Abort ends a gate at once, out of turn. Aborting when none is open is no error.
	Abort(ctx context.Context) error
}

// Blade says where a shutter's blade is.
type Blade struct {
	Open   bool
	Sensed bool // a sensor saw the blade; otherwise this is only what was commanded
}

// Shutter passes or blocks light.
type Shutter interface {
	Device
	// Open and Close command the blade, read the state back, and wait its settling time.
	Open(ctx context.Context) error
	Close(ctx context.Context) error
	// State asks where the blade is.
	State(ctx context.Context) (Blade, error)
}

// Sensor measures one quantity, in the unit the bench file declares for it.
type Sensor interface {
	Device
	Unit() string // a spelling of package unit, such as "mW" or "Cel"
	Read(ctx context.Context) (float64, error)
}

// Setting can be set and read back, and is no rotary axis: a delay, a power, an iris.
type Setting interface {
	Device
	Unit() string
	// Set commands the value, waits until the instrument has it, and returns the value read back.
	Set(ctx context.Context, value float64) (float64, error)
	Get(ctx context.Context) (float64, error)
}

// Remedy says what can be done about an error. Callers switch on it, never on text.
type Remedy int

// The remedies, from the mildest to the last.
const (
	Retry     Remedy = iota + 1 // ask again: the question has no effect, or is safe to repeat
	Reconnect                   // the line was lost or reopened: Connect, then verify everything
	HomeAgain                   // the zero is lost: no angle from this controller is true until Home
	GiveUp                      // a person must look: wrong instrument, refusal, wrong bench file
)

func (r Remedy) String() string {
	switch r {
	case Retry:
		return "retry"
	case Reconnect:
		return "reconnect"
	case HomeAgain:
		return "home again"
	case GiveUp:
		return "give up"
	}
	return fmt.Sprintf("remedy %d", int(r))
}

// Error is the one error type of this boundary.
type Error struct {
	Op         string // the question that failed: "where", "count", "identity", …
	Device     DeviceName
	Remedy     Remedy
	GateOpened bool // a gate was opened, and its counts were not returned
	Restarted  bool // the instrument said, or showed, that it started anew
	Err        error
}

func (e *Error) Error() string { return fmt.Sprintf("%s: %s: %v", e.Device, e.Op, e.Err) }
func (e *Error) Unwrap() error { return e.Err }

// RemedyOf returns the remedy an error carries. The end of a context has none (0); whatever is
// not an *Error is GiveUp.
func RemedyOf(err error) Remedy {
	if e, ok := errors.AsType[*Error](err); ok {
		return e.Remedy
	}
	if err == nil || errors.Is(err, context.Canceled) || errors.Is(err, context.DeadlineExceeded) {
		return 0
	}
	return GiveUp
}

// ErrClosed is the cause in errors from a line that its owner closed on purpose.
var ErrClosed = errors.New("line closed")

// Mount ties the controller's numbers to bench angles: bench = Sense × (controller − Zero).
type Mount struct {
	Sense int        // +1 or -1
	Zero  unit.Angle // the controller's reading, in degrees, where the bench angle is 0
}

// Bench turns a controller's reading into a bench angle.
func (m Mount) Bench(controller unit.Angle) unit.Angle {
	return unit.Angle(m.Sense) * (controller - m.Zero)
}

// Controller turns a bench angle into the controller's reading.
func (m Mount) Controller(bench unit.Angle) unit.Angle {
	return unit.Angle(m.Sense)*bench + m.Zero
}

// Pace says how many bench seconds pass in one real second. It is 1 on a real bench; simulated
// ones may be faster. Package daemon/bench holds it and hands it out; it divides waits and
// nothing else, so that every recorded time is bench time.
type Pace int

// Real returns how long a bench time takes on the wall.
func (p Pace) Real(bench time.Duration) time.Duration { return bench / time.Duration(max(p, 1)) }

// Bench returns how much bench time passes in a real time.
func (p Pace) Bench(real time.Duration) time.Duration { return real * time.Duration(max(p, 1)) }

// Wait waits for a bench time, or for the end of ctx, whose cause it returns.
func (p Pace) Wait(ctx context.Context, bench time.Duration) error {
	if err := context.Cause(ctx); err != nil {
		return err
	}
	if bench <= 0 {
		return nil
	}
	timer := time.NewTimer(p.Real(bench))
	defer timer.Stop()
	select {
	case <-ctx.Done():
		return context.Cause(ctx)
	case <-timer.C:
		return nil
	}
}
