// Package drivertest is the contract of package drivers as a test suite. Whoever writes a driver
// runs it: Stage, Counter, Shutter, Sensor and Setting take a function that makes the driver
// with an instrument behind it, real or not, and hooks to spoil what that instrument says.
//
// What it holds every driver to: no value that is not the instrument's own, whatever the wire
// does; every failure an *drivers.Error with its operation, its device and a remedy that helps;
// the end of a context and a stop at once, in any state.
//
// It also has what such tests are made of: an in-memory Cable, a Far end that answers, and
// Record and Play for exchanges in files.
package drivertest

import (
	"context"
	"errors"
	"slices"
	"testing"
	"time"

	"gemel/drivers"
)

// Run runs one test. Pass synctest.Test where instrument and driver live in memory, and Plainly
// where they do not.
type Run func(t *testing.T, test func(t *testing.T))

// Plainly runs a test as it is, on the wall's clock.
func Plainly(t *testing.T, test func(t *testing.T)) { test(t) }

// Wire are the ways to spoil what the instrument says. After answers more the next is missing,
// has a character damaged, comes twice, or comes late. A test whose hook is nil is skipped.
type Wire struct {
	Miss    func(after int)
	Garble  func(after int)
	Double  func(after int)
	Late    func(after int, by time.Duration)
	Unasked func()        // something without meaning comes now
	Restart func()        // the instrument restarts now, and says so if it ever does
	Unplug  func()        // the line is lost now
	Plug    func()        // and can be opened again
	Pending func() int    // faults that have not happened yet; nil: not known
	LateBy  time.Duration // a delay longer than an answer may take, shorter than LongestAnswer; 0: 1.5 s
}

func (w Wire) faults() []wrong {
	by := w.LateBy
	if by == 0 {
		by = 1500 * time.Millisecond
	}
	all := []wrong{{"a missing answer", w.Miss}, {"a damaged answer", w.Garble}, {"a doubled answer", w.Double}}
	late := wrong{name: "a late answer"}
	if w.Late != nil {
		late.plan = func(after int) { w.Late(after, by) }
	}
	unasked := wrong{name: "something unasked"}
	if w.Unasked != nil {
		unasked.plan = func(int) { w.Unasked() }
	}
	return append(all, late, unasked)
}

type wrong struct {
	name string
	plan func(after int)
}

// depth is how many answers in a row are spoiled one by one in each operation.
const depth = 4

// each runs a test once for each fault and each of the next answers that it may hit.
func (w Wire) each(t *testing.T, run Run, test func(t *testing.T, plan func(Wire))) {
	for i, f := range w.faults() {
		t.Run(f.name, func(t *testing.T) {
			if f.plan == nil {
				t.Skip("SKIPPED: the caller has no hook for " + f.name)
			}
			for after := range depth {
				run(t, func(t *testing.T) {
					test(t, func(w Wire) { w.faults()[i].plan(after) })
				})
			}
		})
	}
}

// hooks makes a setup only to see which hooks it has.
func hooks(t *testing.T, run Run, setup func(t *testing.T) Wire) (w Wire) {
	run(t, func(t *testing.T) { w = setup(t) })
	return w
}

// settled tries an operation until it succeeds. Each failure must carry the remedy Retry.
func settled(t *testing.T, op string, f func() error) {
	t.Helper()
	var err error
	for range 5 {
		if err = f(); err == nil {
			return
		}
		proper(t, op, err, drivers.Retry)
	}
	t.Fatalf("%s: still fails after 5 tries: %v", op, err)
}

// proper checks that an error is what the contract says, with one of the remedies.
func proper(t *testing.T, op string, err error, remedies ...drivers.Remedy) *drivers.Error {
	t.Helper()
	if err == nil {
		t.Fatalf("%s: no error; want one with remedy %v", op, remedies)
	}
	e, ok := errors.AsType[*drivers.Error](err)
	if !ok {
		t.Fatalf("%s: %v; want a *drivers.Error", op, err)
	}
	if e.Op == "" || e.Device == "" || e.Err == nil {
		t.Errorf("%s: %#v; want op, device and cause", op, e)
	}
	if e.Restarted && e.Remedy != drivers.Reconnect {
		t.Errorf("%s: %v: restarted, remedy %v; want reconnect", op, err, e.Remedy)
	}
	if slices.Contains(remedies, e.Remedy) {
		return e
	}
	t.Fatalf("%s: %v: remedy %v; want %v", op, err, e.Remedy, remedies)
	return nil
}

// endedWithin checks what a method returned that was cut short by its context.
func endedWithin(t *testing.T, op string, start time.Time, err error) {
	t.Helper()
	if took := time.Since(start); took > time.Second {
		t.Errorf("%s: came back %v after the end of its context; want a second at most", op, took)
	}
	if err == nil {
		t.Fatalf("%s: no error after the end of its context", op)
	}
	if !errors.Is(err, context.Canceled) && !errors.Is(err, context.DeadlineExceeded) {
		t.Errorf("%s: %v; want the end of the context in it", op, err)
	}
	if r := drivers.RemedyOf(err); r != 0 {
		t.Errorf("%s: %v: remedy %v; want none for the end of a context", op, err, r)
	}
}

// device tests what all devices have in common. use is a question that answers now.
func device(t *testing.T, run Run, setup func(t *testing.T) (drivers.Device, Wire, func(context.Context) error)) {
	test := func(name string, f func(t *testing.T, d drivers.Device, w Wire, use func(context.Context) error)) {
		t.Run(name, func(t *testing.T) {
			run(t, func(t *testing.T) {
				d, w, use := setup(t)
				if err := d.Connect(t.Context()); err != nil {
					t.Fatalf("connect: %v", err)
				}
				f(t, d, w, use)
			})
		})
	}
	test("it connects, any number of times, and has a name", func(t *testing.T, d drivers.Device, w Wire, use func(context.Context) error) {
		if d.Name() == "" {
			t.Error("no name")
		}
		before := d.Identity()
		if err := d.Connect(t.Context()); err != nil || d.Identity() != before {
			t.Errorf("again: %v, identity %q; want %q", err, d.Identity(), before)
		}
		if err := use(t.Context()); err != nil {
			t.Error(err)
		}
	})
	test("a context that has ended asks nothing", func(t *testing.T, d drivers.Device, w Wire, use func(context.Context) error) {
		ctx, cancel := context.WithCancel(t.Context())
		cancel()
		start := time.Now()
		endedWithin(t, "use", start, use(ctx))
		endedWithin(t, "connect", start, d.Connect(ctx))
		if err := use(t.Context()); err != nil {
			t.Errorf("afterwards: %v", err)
		}
	})
	test("after the line was lost it must connect, and then works", func(t *testing.T, d drivers.Device, w Wire, use func(context.Context) error) {
		if w.Unplug == nil || w.Plug == nil {
			t.Skip("SKIPPED: the caller has no hook for a lost line")
		}
		w.Unplug()
		proper(t, "use", use(t.Context()), drivers.Reconnect)
		ctx, cancel := context.WithTimeout(t.Context(), time.Second)
		defer cancel()
		start := time.Now()
		if err := d.Connect(ctx); err == nil {
			t.Error("connected without a line")
		}
		if took := time.Since(start); took > 2*time.Second {
			t.Errorf("connect came back after %v, its context ended after 1 s", took)
		}
		w.Plug()
		proper(t, "use", use(t.Context()), drivers.Reconnect)
		if err := d.Connect(t.Context()); err != nil {
			t.Fatalf("connect: %v", err)
		}
		if err := use(t.Context()); err != nil && drivers.RemedyOf(err) != drivers.HomeAgain {
			t.Errorf("after connecting: %v", err)
		}
	})
}
