package engine

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"time"

	"gemel/drivers"
)

// Rest brings a bench to the rest state outside any run. The text says what could not be reached.
func Rest(ctx context.Context, b *Bench) (bad string) {
	e := &Engine{Config: Config{Bench: b}, opened: map[drivers.DeviceName]bool{}}
	return e.rest(ctx)
}

// rest brings the bench to the rest state: light off, detectors protected, motion and counting
// stopped. It goes through the devices three times. The first time each gets its command and only a
// moment to confirm it, so that no dead line delays another's stop by more than that; then those
// that did not confirm get their time; then what is left is connected anew. It runs under a context
// of its own, because the one that ended the work must not keep the shutter open. The text says
// what could not be reached; it is empty when all was.
func (e *Engine) rest(ctx context.Context) (bad string) {
	defer e.step(StepRested)
	fresh, cancel := e.fresh(ctx, 8*time.Second)
	defer cancel()
	left := e.attempt(fresh, e.restJobs(), restMoment, false)
	left = e.attempt(fresh, left, e.Bench.Pace.Real(2*time.Second)+time.Second, false)
	left = e.attempt(fresh, left, e.Bench.Pace.Real(2*time.Second)+time.Second, true)
	var words []string
	for _, j := range left {
		words = append(words, fmt.Sprintf("%s: %s", j.what, firstLine(j.err)))
	}
	e.progress.restBad = strings.Join(words, "; ")
	e.publishSnapshot()
	return e.progress.restBad
}

// restMoment is what a device gets to confirm its stop before the next one is told: the last of
// six hears of it within a second though all others are dead.
const restMoment = 150 * time.Millisecond

// attempt tries jobs, each within its time, and returns those that failed.
func (e *Engine) attempt(ctx context.Context, jobs []restJob, within time.Duration, anew bool) (left []restJob) {
	for _, j := range jobs {
		limit, done := context.WithTimeout(ctx, within)
		j.err = nil
		if anew {
			j.err = j.device.Connect(limit)
		}
		if j.err == nil {
			j.err = j.do(limit)
		}
		done()
		if j.err != nil {
			left = append(left, j)
		}
	}
	return left
}

type restJob struct {
	what   string
	device drivers.Device
	do     func(context.Context) error
	err    error
}

// restJobs lists what the rest state consists of, the most urgent first.
func (e *Engine) restJobs() []restJob {
	var jobs []restJob
	for _, s := range e.protectors() {
		jobs = append(jobs, restJob{"protect by " + string(s.Name()), s, func(ctx context.Context) error { return e.shut(ctx, s) }, nil})
	}
	if s := e.Bench.Pump; s != nil {
		jobs = append(jobs, restJob{"close " + string(s.Name()), s, func(ctx context.Context) error { return e.shut(ctx, s) }, nil})
	}
	for _, s := range e.Bench.Stages {
		jobs = append(jobs, restJob{"stop " + string(s.Name()), s, s.Stop, nil})
	}
	if c := e.Bench.Counter; c != nil {
		jobs = append(jobs, restJob{"stop counting on " + string(c.Name()), c, c.Abort, nil})
	}
	return jobs
}

// shut closes a shutter and believes only its answer.
func (e *Engine) shut(ctx context.Context, s drivers.Shutter) error {
	delete(e.opened, s.Name())
	if err := s.Close(ctx); err != nil {
		return err
	}
	blade, err := s.State(ctx)
	if err != nil {
		return err
	}
	if blade.Open {
		return &drivers.Error{Op: "close", Device: s.Name(), Remedy: drivers.Retry, Err: errors.New("says it is open after it was told to close")}
	}
	return nil
}

func (e *Engine) protectors() []drivers.Shutter {
	var all []drivers.Shutter
	for _, d := range e.Bench.Detectors {
		if d.Protect == nil {
			continue
		}
		known := false
		for _, s := range all {
			known = known || s == d.Protect
		}
		if !known {
			all = append(all, d.Protect)
		}
	}
	return all
}

// protect closes the detectors' shutters only: the least that must happen at once.
func (e *Engine) protect(ctx context.Context) error {
	var errs []error
	for _, s := range e.protectors() {
		errs = append(errs, e.shut(ctx, s))
	}
	return errors.Join(errs...)
}

// cover closes the detectors' shutters before anything else happens, none waiting for another's dead
// line. Where one does not confirm it at once the whole rest state follows, and with it the pump's
// shutter: a detector that cannot be protected gets no light that could be spared. The text says what
// could not be reached.
func (e *Engine) cover(ctx context.Context) (bad string) {
	fresh, cancel := e.fresh(ctx, 5*time.Second)
	defer cancel()
	if left := e.attempt(fresh, e.restJobs()[:len(e.protectors())], restMoment, false); len(left) > 0 {
		return e.rest(ctx)
	}
	return ""
}

// shield closes the detectors' shutters that may be open, before something that takes its time: who
// looks meanwhile is nobody.
func (e *Engine) shield(ctx context.Context) error {
	var errs []error
	for _, s := range e.protectors() {
		if !e.opened[s.Name()] {
			if blade, err := s.State(ctx); err == nil && !blade.Open {
				continue
			}
		}
		errs = append(errs, e.shut(ctx, s))
	}
	return errors.Join(errs...)
}

// light sets the shutters for a reading: the pump open or closed, the detectors seeing. The pump
// comes first, so that nothing is seen before it is as it should be.
func (e *Engine) light(ctx context.Context, pump bool) error {
	if s := e.Bench.Pump; s != nil {
		if _, err := e.setShutter(ctx, s, pump); err != nil {
			return err
		}
	}
	var ready time.Duration
	for _, d := range e.Bench.Detectors {
		if d.Protect == nil {
			continue
		}
		moved, err := e.setShutter(ctx, d.Protect, true)
		if err != nil {
			return err
		}
		if moved {
			ready = max(ready, d.Ready)
		}
	}
	return e.Bench.Pace.Wait(ctx, ready)
}

// stillLit says after a dwell whether the shutters are as they were for it: one that lost its power
// meanwhile has fallen shut.
func (e *Engine) stillLit(ctx context.Context, pump bool) error {
	if s := e.Bench.Pump; s != nil {
		if err := e.still(ctx, s, pump); err != nil {
			return err
		}
	}
	for _, s := range e.protectors() {
		if err := e.still(ctx, s, true); err != nil {
			return err
		}
	}
	return nil
}

func (e *Engine) still(ctx context.Context, s drivers.Shutter, open bool) error {
	blade, err := s.State(ctx)
	if err != nil || blade.Open == open {
		return err
	}
	delete(e.opened, s.Name())
	says := map[bool]string{true: "open", false: "closed"}
	return &drivers.Error{Op: "count", Device: s.Name(), Remedy: drivers.Retry, Err: fmt.Errorf("says it is %s after the dwell, and was %s before it", says[blade.Open], says[open])}
}

// setShutter opens or closes a shutter that is not so already. One counts as open only after an
// Open that succeeded: a blade that a failed one left on its way is seen as open before it is.
func (e *Engine) setShutter(ctx context.Context, s drivers.Shutter, open bool) (moved bool, err error) {
	blade, err := s.State(ctx)
	if err != nil {
		return false, err
	}
	if !open {
		if !blade.Open {
			return false, nil
		}
		return true, e.shut(ctx, s)
	}
	if blade.Open && e.opened[s.Name()] {
		return false, nil
	}
	delete(e.opened, s.Name())
	if err := s.Open(ctx); err != nil {
		return false, err
	}
	if blade, err = s.State(ctx); err != nil {
		return false, err
	}
	if !blade.Open {
		return false, &drivers.Error{Op: "open", Device: s.Name(), Remedy: drivers.Retry, Err: errors.New("says it is closed after it was told to open")}
	}
	e.opened[s.Name()] = true
	return true, nil
}
