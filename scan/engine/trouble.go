package engine

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// afterError does what an error's remedy asks for, and then takes the reading again or not. bad says
// what of the rest state was not reached when the detectors were covered: until it is, nothing is
// counted and the pump stays closed.
func (e *Engine) afterError(ctx context.Context, t task, err error, bad string) error {
	if b, ok := errors.AsType[*brightness](err); ok {
		if bad == "" && e.progress.attempts[t.key()] >= e.Plan.Trouble.Retries {
			return e.again(ctx, t, b.Error()) // it is bright here each time: the arm may look into the pump
		}
		detail := keyDetail(t)
		detail["detector"], detail["rate_hz"], detail["limit_hz"] = b.detector, b.rateHz, b.limitHz
		return e.holdFor(ctx, protocol.ByLight, "held: "+b.Error(), detail)
	}
	guard, broken := errors.AsType[*brokenGuard](err)
	_, elsewhere := errors.AsType[*notThere](err)
	remedy := drivers.RemedyOf(err)
	if broken || elsewhere {
		remedy = drivers.Retry
	}
	if bad != "" && remedy == drivers.Retry || remedy == drivers.Reconnect || remedy == drivers.HomeAgain {
		if werr := e.note(ctx, protocol.Trouble, firstLine(err)+withBad(bad), errorDetail(err)); werr != nil {
			return werr
		}
		if werr := e.getReady(ctx, err); werr != nil || e.progress.State != protocol.Running {
			return werr
		}
	}
	switch {
	case broken:
		return e.afterGuard(ctx, t, guard)
	case remedy == drivers.Retry, remedy == drivers.Reconnect, remedy == drivers.HomeAgain:
		return e.again(ctx, t, firstLine(err))
	default:
		return e.holdFor(ctx, protocol.ByTrouble, "held: "+firstLine(err), errorDetail(err))
	}
}

// again counts a failed attempt, and does what the recipe says when there were enough.
func (e *Engine) again(ctx context.Context, t task, reason string) error {
	detail := keyDetail(t)
	detail["reason"] = reason
	failed := e.progress.attempts[t.key()] + 1
	detail["attempt"] = failed
	if failed <= e.Plan.Trouble.Retries {
		return e.note(ctx, protocol.TakenAgain, fmt.Sprintf("taken again: %s", reason), detail)
	}
	switch e.Plan.Trouble.Then {
	case scan.Skip:
		return e.note(ctx, protocol.SetAside, fmt.Sprintf("given up after %d attempts: %s", failed, reason), detail)
	case scan.Stop:
		return e.end(ctx, protocol.Failed, fmt.Sprintf("failed after %d attempts at one reading: %s", failed, reason), detail)
	default:
		return e.holdFor(ctx, protocol.ByTrouble, fmt.Sprintf("held after %d attempts: %s", failed, reason), detail)
	}
}

// firstLine is what of an error belongs into a sentence: a stack does not.
func firstLine(err error) string {
	line, _, _ := strings.Cut(err.Error(), "\n")
	return line
}

func errorDetail(err error) map[string]any {
	detail := map[string]any{}
	if text := err.Error(); strings.Contains(text, "\n") {
		detail["error"] = text
	}
	if d, ok := errors.AsType[*drivers.Error](err); ok {
		detail["device"], detail["op"], detail["remedy"] = string(d.Device), d.Op, d.Remedy.String()
	}
	return detail
}

func (e *Engine) trouble(ctx context.Context, err error) error {
	return e.note(ctx, protocol.Trouble, firstLine(err), errorDetail(err))
}

// connectPatience bounds how long a lost line is waited for before a person is asked.
const connectPatience = 10 * time.Minute

// getReady connects what is not connected, after which the bench is in the rest state, and makes
// sure of every zero and every angle. after is the trouble that made it necessary, and is written; nil
// says to do so though nothing is known to be wrong. What else is met on the way is written too, once
// for each device: it may be over before anything asks again. The run is left holding when a person is
// needed.
func (e *Engine) getReady(ctx context.Context, after error) error {
	op, end := e.operation(ctx)
	defer end()
	written := map[string]bool{}
	if after != nil {
		written[deviceOf(after)] = true
	}
	deadline := e.now().Add(min(connectPatience, e.patience))
	for pause := time.Second; ; pause = min(2*pause, 30*time.Second) {
		met := e.connectAll(op)
		if len(met) == 0 {
			break
		}
		if op.Err() != nil {
			return nil
		}
		err := gravest(met)
		if drivers.RemedyOf(err) == drivers.GiveUp || e.now().After(deadline) {
			return e.holdFor(ctx, protocol.ByTrouble, "held: "+firstLine(err), errorDetail(err))
		}
		for _, each := range met {
			if device := deviceOf(each); !written[device] {
				written[device] = true
				if werr := e.trouble(ctx, each); werr != nil || e.progress.storageHeld {
					return werr // what was asked for while nothing could be written comes first
				}
			}
		}
		e.showWaiting(err)
		if e.Bench.Pace.Wait(op, pause) != nil {
			return nil
		}
	}
	e.publishSnapshot()
	e.forget()
	if err := e.findZero(ctx, op); err != nil || e.progress.State != protocol.Running || op.Err() != nil {
		return err
	}
	if _, err := e.where(op); err != nil && op.Err() == nil {
		if after != nil && drivers.RemedyOf(err) <= drivers.Reconnect {
			if written[deviceOf(err)] {
				return nil // the next attempt at the reading meets it again, and is counted
			}
			return e.trouble(ctx, err)
		}
		return e.holdFor(ctx, protocol.ByTrouble, "held: "+firstLine(err), errorDetail(err))
	}
	return nil
}

// forget makes sure that angles are proved anew, and settings and sensors asked again.
func (e *Engine) forget() {
	clear(e.commanded)
	clear(e.sent)
	clear(e.told)
	clear(e.deaf)
}

// getReadyHeld does during a hold that nobody is needed for what getReady does before the next reading,
// but waits for no line: what is away is met again at the next look.
func (e *Engine) getReadyHeld(ctx context.Context) error {
	op, end := e.operation(ctx)
	defer end()
	if e.connectAll(op) != nil || op.Err() != nil {
		return nil
	}
	e.forget()
	return e.findZero(ctx, op)
}

// connectAll connects every device, with all light off first. It tries them all, and returns what each
// that failed met; nothing but the end of ctx, where that ended.
func (e *Engine) connectAll(ctx context.Context) (met []error) {
	note := func(err error) bool {
		if err != nil {
			met = append(met, err)
		}
		return err == nil
	}
	for _, j := range e.restJobs() {
		if note(j.device.Connect(ctx)) {
			note(j.do(ctx))
		}
	}
	for _, s := range e.Bench.Settings {
		note(s.Connect(ctx))
	}
	for _, s := range e.Bench.Sensors {
		if err := s.Connect(ctx); err != nil {
			e.deaf[s.Name()] = e.now()
		}
	}
	if err := context.Cause(ctx); err != nil {
		return []error{err}
	}
	return met
}

// gravest returns the first of the errors whose remedy asks most: that another instrument answers must
// not hide behind a line that is merely away. It returns nil for none.
func gravest(met []error) (worst error) {
	for _, err := range met {
		if worst == nil || drivers.RemedyOf(err) > drivers.RemedyOf(worst) {
			worst = err
		}
	}
	return worst
}

// deviceOf names the device that an error is of; empty: of none.
func deviceOf(err error) string {
	if d, ok := errors.AsType[*drivers.Error](err); ok {
		return string(d.Device)
	}
	return ""
}

// findZero makes sure that every axis knows its zero. A search moves through angles nobody chose,
// so it waits for a person's word unless the bench file gives it.
func (e *Engine) findZero(ctx, op context.Context) error {
	for _, s := range e.Bench.Stages {
		homed, err := s.Homed(op)
		if op.Err() != nil {
			return nil
		}
		if err != nil {
			return e.holdFor(ctx, protocol.ByTrouble, "held: "+firstLine(err), errorDetail(err))
		}
		var lost []drivers.AxisName
		for _, a := range e.homeOrder(s) {
			if !homed[a] || e.progress.zeros[a].wrong {
				lost = append(lost, a)
			}
		}
		if len(lost) == 0 {
			continue
		}
		detail := map[string]any{"controller": string(s.Name()), "axes": lost}
		if err := e.doubtUnverified(ctx, lost); err != nil {
			return err
		}
		if !e.homing && !e.Bench.Unattended[s.Name()] {
			return e.holdFor(ctx, protocol.ByTrouble, fmt.Sprintf("held: %s has lost the zero of %v; resume when the arms may search for it, with somebody there", s.Name(), lost), detail)
		}
		if err := e.maySearch(op, lost); err != nil {
			if op.Err() != nil {
				return nil
			}
			return e.holdFor(ctx, protocol.ByTrouble, "held: "+firstLine(err), detail)
		}
		// Said before the search: one that is interrupted may find the zero all the same, and then
		// nothing else would tell that it was lost.
		if err := e.note(ctx, protocol.Trouble, fmt.Sprintf("%s has lost the zero of %v and searches for it", s.Name(), lost), detail); err != nil {
			return err
		}
		if op.Err() != nil {
			return nil // stopped while that had to wait for room
		}
		if err := s.Home(op, lost); err != nil {
			if op.Err() != nil {
				return nil
			}
			return e.holdFor(ctx, protocol.ByTrouble, "held: the search for the zero failed: "+firstLine(err), errorDetail(err))
		}
		if err := e.note(ctx, protocol.HomedEvent, fmt.Sprintf("%s found the zero of %v", s.Name(), lost), detail); err != nil {
			return err
		}
	}
	e.homing = false
	return nil
}

// maySearch says whether axes may search their zero, one after another, without entering a keep-out.
// Only axes that know their zero are believed to stand where they say.
func (e *Engine) maySearch(ctx context.Context, lost []drivers.AxisName) error {
	if len(e.Bench.KeepOuts) == 0 {
		return nil
	}
	known := map[drivers.AxisName]unit.Angle{}
	for _, s := range e.Bench.Stages {
		homed, err := s.Homed(ctx)
		if err != nil {
			return err
		}
		at, err := s.Where(ctx)
		if err != nil && drivers.RemedyOf(err) != drivers.HomeAgain {
			return err // one that has lost a zero says nothing about its other axes either
		}
		for name, angle := range at {
			if homed[name] {
				known[name] = angle
			}
		}
	}
	return route.HomeOrder(e.Bench.Axes, e.Bench.KeepOuts, known, lost)
}

// homeOrder is the order the bench file declares, or the controller's own.
func (e *Engine) homeOrder(s drivers.Stage) []drivers.AxisName {
	if order := e.Bench.HomeOrder[s.Name()]; len(order) > 0 {
		return order
	}
	return s.Axes()
}

// tellDeaf writes once that a sensor fell silent, and tries those that did again after a while.
func (e *Engine) tellDeaf(ctx context.Context) error {
	if err := e.unheard; err != nil {
		e.unheard = nil
		if werr := e.note(ctx, protocol.Trouble, "a sensor does not answer; readings go on without it: "+err.Error(), errorDetail(err)); werr != nil {
			return werr
		}
	}
	for _, s := range e.Bench.Sensors {
		last, deaf := e.deaf[s.Name()]
		if !deaf || e.now().Sub(last) < time.Minute {
			continue
		}
		within, cancel := context.WithTimeout(ctx, e.Bench.Pace.Real(2*time.Second)+time.Second)
		err := s.Connect(within)
		cancel()
		if err != nil {
			e.deaf[s.Name()] = e.now()
			continue
		}
		delete(e.deaf, s.Name())
	}
	return nil
}

// append writes one entry, and waits while there is no room. The rest state comes first then; the
// hold itself can only be told afterwards. This wait has no bound: that it was over could not be
// written either, and what waits here would be lost. It counts for no other hold's patience.
func (e *Engine) append(ctx context.Context, entry protocol.Entry) error {
	err := e.Log.Append(context.WithoutCancel(ctx), entry)
	if err == nil {
		return nil
	}
	if errors.Is(err, ErrConflict) {
		return err
	}
	since := e.now()
	e.rest(ctx)
	e.showHolding(protocol.ByStorage, "held: nothing can be written: "+err.Error())
	if e.obeying != nil {
		e.answerUnrecorded(e.obeying) // what it asked for is done as far as the bench goes, and its entry waits here
	}
	for pause := time.Second; ; pause = min(2*pause, 30*time.Second) {
		if ctx.Err() != nil {
			return fmt.Errorf("not recorded: %w", err)
		}
		op, end := e.operation(ctx)
		_ = e.Bench.Pace.Wait(op, pause)
		end()
		if e.progress.restBad != "" {
			e.rest(ctx) // a blade that stuck may move by now
			e.showHolding(protocol.ByStorage, "held: nothing can be written: "+err.Error())
		}
		if err = e.Log.Append(context.WithoutCancel(ctx), entry); err == nil {
			e.progress.storageHeld = true
			e.waitsSince = e.waitsSince.Add(e.now().Sub(since))
			e.publishSnapshot()
			if len(e.owed) > 0 {
				e.interrupt() // what was being done here was stopped or held meanwhile
			}
			return nil
		}
		if errors.Is(err, ErrConflict) {
			return err
		}
		if o := e.takeOrder(); o != nil {
			// Done first, answered "done, not recorded": the bench is at rest already. It is written, and
			// for a hold or a stop comes true for the run, when there is room.
			e.answerUnrecorded(o)
			if o.kind != resumeOrder {
				e.owed = append(e.owed, o)
			}
		}
	}
}

// payOwed writes what was asked for while nothing could be written: a stop before any hold. A stop
// after the point is a plain one there, as of any run that holds.
func (e *Engine) payOwed(ctx context.Context) error {
	owed := e.owed
	e.owed = nil
	for _, o := range owed {
		if o.kind == stopOrder || o.kind == closeOrder {
			return e.end(ctx, protocol.Stopped, "stopped by "+o.who+", while nothing could be written", map[string]any{"who": o.who})
		}
	}
	return e.holdFor(ctx, protocol.ByOperator, "held by "+owed[0].who+", while nothing could be written", map[string]any{"who": owed[0].who})
}

func (e *Engine) answerUnrecorded(o *order) {
	if o.answered {
		return
	}
	o.reply = protocol.RunReply{Run: e.RunID, State: protocol.Holding, Causes: []protocol.Cause{protocol.ByStorage}}
	if o.kind == stopOrder || o.kind == closeOrder && (o != e.obeying || e.progress.State == protocol.Holding) {
		o.reply.State, o.reply.Causes = protocol.Stopped, []protocol.Cause{}
	}
	o.did, o.answered = true, true
	close(o.done)
}

// showWaiting lets a status say what a running run waits for.
func (e *Engine) showWaiting(err error) {
	e.mu.Lock()
	defer e.mu.Unlock()
	e.snapshot.Reason, e.snapshot.TimeLeft = "waiting: "+firstLine(err), nil
}

func (e *Engine) showHolding(cause protocol.Cause, reason string) {
	e.mu.Lock()
	defer e.mu.Unlock()
	e.snapshot.State, e.snapshot.Causes, e.snapshot.Reason, e.snapshot.TimeLeft = protocol.Holding, add(e.progress.Causes, cause), reason, nil
}

// lookAgain is the time between two looks at a light that was too bright.
const lookAgain = 30 * time.Second

// waitOut waits while the run holds: for an operator, or for what mends itself.
func (e *Engine) waitOut(ctx context.Context) error {
	p := &e.progress
	if patience := e.patienceNow(); !p.holds(protocol.ByOperator) && e.now().Sub(e.waitsSince) > patience {
		return e.end(ctx, protocol.Failed, fmt.Sprintf("failed: it did not mend within %s; it was %s", unit.Span(patience), p.Reason), nil)
	}
	if p.restBad != "" {
		e.rest(ctx) // a blade that stuck may move by now
	}
	light := p.holds(protocol.ByLight) && !e.mayBeOpen() // before any guard: a rate is looked at with the pump open
	pause := e.pause(light)
	e.showHold(pause)
	op, end := e.operation(ctx)
	err := e.Bench.Pace.Wait(op, pause)
	end()
	switch {
	case err != nil:
		return nil
	case p.holds(protocol.ByStorage):
		return e.lookAtRoom(ctx)
	case light:
		return e.lookAtLight(ctx)
	case p.holds(protocol.ByGuard):
		return e.lookAtGuards(ctx)
	}
	return nil
}

// pause is how long the run holds until the next look, or until the patience is asked about again.
func (e *Engine) pause(light bool) time.Duration {
	p := &e.progress
	switch {
	case p.holds(protocol.ByGuard) && !light:
		if g, ok := e.guardNamed(p.guard); ok && g.Sensor == "" {
			return lookAgain // it opens the light for a moment
		}
		return guardEvery
	case p.holds(protocol.ByLight), p.holds(protocol.ByStorage):
		return lookAgain
	}
	return time.Minute
}

// showHold lets whoever asks for the status know how long this hold lasts.
func (e *Engine) showHold(pause time.Duration) {
	p := &e.progress
	held := e.now().Sub(e.waitsSince)
	h := Hold{Since: time.Now().Add(-e.Bench.Pace.Real(held))}
	if !p.holds(protocol.ByOperator) {
		h.GivesUpAt = h.Since.Add(e.Bench.Pace.Real(e.patienceNow()))
	}
	if !e.mayBeOpen() && (p.holds(protocol.ByGuard) || p.holds(protocol.ByLight) || p.holds(protocol.ByStorage)) {
		h.Looks = pause
	}
	e.mu.Lock()
	defer e.mu.Unlock()
	e.snapshot.Hold = &h
}

// mayBeOpen says whether somebody may have the enclosure open: then no light for a look. A guard, the
// light and a full disk hold by themselves.
func (e *Engine) mayBeOpen() bool {
	p := &e.progress
	return p.holds(protocol.ByOperator) || p.holds(protocol.ByTrouble) || p.holds(protocol.ByRestart)
}

func (e *Engine) room() error {
	if e.Room == nil {
		return nil
	}
	return e.Room()
}

// lookAtRoom ends the hold when there is room again.
func (e *Engine) lookAtRoom(ctx context.Context) error {
	if e.room() != nil {
		return nil
	}
	if err := e.release(ctx, "there is room again", map[string]any{"cause": protocol.ByStorage}, protocol.ByStorage); err != nil {
		return err
	}
	if e.progress.State == protocol.Running {
		return e.getReady(ctx, nil)
	}
	return nil
}

// lookAtLight opens the detectors for a moment, with the pump closed, and ends the hold when the
// light is well. What it saw is written as a check.
func (e *Engine) lookAtLight(ctx context.Context) error {
	against, interrupted, err := e.check(ctx, false, nil, func(*protocol.Reading) error { return nil })
	if err != nil || interrupted {
		return err
	}
	_, bright := errors.AsType[*brightness](against)
	switch {
	case against == nil:
		if err := e.release(ctx, "the light is well again", map[string]any{"cause": protocol.ByLight}, protocol.ByLight); err != nil {
			return err
		}
		if e.progress.State == protocol.Running {
			return e.getReady(ctx, nil)
		}
	case !bright && drivers.RemedyOf(against) > drivers.Retry:
		if err := e.trouble(ctx, against); err != nil {
			return err
		}
		return e.connectQuietly(ctx)
	}
	return nil
}

// check counts for a moment during a hold, with the pump open or closed, and comes back to rest. Gates
// of dwell follow where that is too short for what is judged. What it saw is written as a reading of
// the kind check. against is what speaks against going on: the light, an instrument, or what judge
// says; err is the logbook's.
func (e *Engine) check(ctx context.Context, pump bool, dwell []time.Duration, judge func(*protocol.Reading) error) (against error, interrupted bool, err error) {
	op, end := e.operation(ctx)
	r := &protocol.Reading{Kind: protocol.Check, Simulated: e.simulated, Tag: string(e.Bench.Tag), Attempt: 1, StartedAt: protocol.Time{Time: e.now()},
		Settings: []protocol.Setting{}, Sensors: []protocol.Sensor{}, Counts: []protocol.Count{}, Slices: []protocol.Slice{}, Angles: []protocol.Angle{}}
	if pump {
		var at map[drivers.AxisName]unit.Angle
		if at, against = e.whereToLook(op); against == nil {
			against = e.mayOpen(at)
		}
	}
	if against == nil {
		against = e.light(op, pump)
	}
	if against == nil {
		against = e.lookOnce(op, r, dwell)
	}
	if against == nil {
		against = judge(r)
	}
	interrupted = op.Err() != nil
	end()
	if bad := e.rest(ctx); bad != "" && against == nil {
		against = fmt.Errorf("the rest state was not reached after the look: %s", bad)
	}
	r.EndedAt = protocol.Time{Time: e.now()}
	r.Accepted = against == nil
	if against != nil {
		r.Reason = against.Error()
	}
	if len(r.Slices)+r.LostGates > 0 {
		if err := e.write(ctx, protocol.ReadingEntry, &r.Head, r, protocol.ReadingSchema); err != nil {
			return against, interrupted, err
		}
		e.progress.applyReading(r)
	}
	return against, interrupted, nil
}

// whereToLook says where the axes are. Those that were not sent to their point since they were last in
// doubt are sent there first, pump closed and detectors protected: a rate means something there only.
func (e *Engine) whereToLook(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	targets := e.progress.point(e.progress.nearest().Point).Axes
	for _, t := range targets {
		if !e.sent[t.Axis] {
			return e.goTo(ctx, targets)
		}
	}
	return e.where(ctx)
}

// lookOnce counts a short gate, and where that is too short for a detector's floor to mean something
// a longer one: a detector that so much light has latched looks as if it were dark for a moment, too.
// Then it counts gates of dwell until it has counted for as long as they are together.
func (e *Engine) lookOnce(ctx context.Context, r *protocol.Reading, dwell []time.Duration) error {
	gate, floor := 100*time.Millisecond, time.Duration(0)
	for _, d := range e.Bench.Detectors {
		gate = max(gate, d.Glance)
		if d.FloorHz > 0 {
			floor = max(floor, min(longestLook, time.Duration(1.1*floorCounts/d.FloorHz*float64(time.Second))))
		}
	}
	enough := time.Duration(0)
	for _, gate := range dwell {
		enough += gate
	}
	for i, gate := range append([]time.Duration{gate, floor}, dwell...) {
		want := gate
		if i > 1 {
			want = enough
		}
		if gate == 0 || want <= r.Gate.Duration() {
			continue
		}
		slice, err := e.count(ctx, r, gate)
		if err != nil {
			return err
		}
		r.Reason = ""
		r.Slices, r.Counts = append(r.Slices, slice), sum(r.Counts, slices.Clone(slice.Counts), e.Bench.Tag)
		r.GateSet += slice.GateSet
		r.Gate += slice.Gate
		if err := e.judgeLight(r.Slices...); err != nil {
			return err
		}
	}
	return nil
}

// longestLook bounds how long a detector is opened to see whether it is below its floor.
const longestLook = 10 * time.Second

// connectQuietly mends lines during a hold; what fails now is met again at the next look.
func (e *Engine) connectQuietly(ctx context.Context) error {
	op, end := e.operation(ctx)
	defer end()
	_ = e.connectAll(op)
	if e.progress.restBad != "" {
		e.rest(ctx) // what is reached by now must not be denied in the next word
	}
	return nil
}
