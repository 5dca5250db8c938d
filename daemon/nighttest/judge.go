package nighttest

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// Judge says everything that is wrong with a night. It is pure: the same time line, the same
// words. An empty answer means:
//
//   - every run's journal is gapless, and no entry stands in it twice;
//   - each gate of the world is exactly one slice or glance of one reading with the same counts, or
//     a gate that a reading names as lost, or lies before an interruption that is written down;
//   - each slice of a reading is one gate of the world: none invented, none counted twice;
//   - the true angle of every accepted, not doubtful reading was within tolerance of what is written;
//   - a reading is durable before the next gate opens and before anything moves on;
//   - an entry is durable before it is published; the stream is the journal, in order, once;
//   - each visit is accepted once at most, and a finished run has them all or names what it gave up;
//   - an accepted dark had the pump truly blocked, all other accepted readings had it truly open, and
//     the detectors saw;
//   - a reading's times enclose its gates;
//   - in every hold and after every end the pump is closed, the detectors are protected, nothing moves,
//     nothing opens and nothing counts, but for looks at the light where light alone holds, or the
//     guard of a rate alone, which alone may open the pump for it;
//   - no gate opens and nothing moves after a stop was answered;
//   - light above a trip rate closes the detector's shutter at once, whatever other device is dead, and
//     the pump's where the detector's is kept from closing, until it is not any more;
//   - no setting is set with a detector open, and none was below its floor in an accepted reading for as
//     long as it takes to tell;
//   - a controller that restarted is written down before any angle of its is believed again;
//   - each kill of a run that was under way is followed by an interruption;
//   - what places, lights, planned, turns, effect and waits say in their files.
func Judge(line []Moment, facts Facts) []string { return Examine(line, facts).Wrong }

// Verdict is what a night comes to.
type Verdict struct {
	Wrong   []string
	Said    []string // the forms of the sentences in Wrong, as the judge's source has them
	Effects []Effect
}

// Effect is a trouble that took effect: the ledger says so.
type Effect struct {
	Kind trouble.Kind
	// Surfaced says that it showed in an event that it declares, Shown that some event of the run
	// followed it that may have had it for a cause.
	Surfaced, Shown bool
}

// Examine judges a night, and tells which troubles took effect and which of them showed.
func Examine(line []Moment, facts Facts) Verdict {
	j := &judge{facts: facts, runs: map[protocol.RunID]*runState{}}
	for _, m := range line {
		j.now = m.At
		j.watchLight()
		j.watchWait()
		switch {
		case m.World != nil:
			j.world(m.World)
		case m.Journal != nil:
			j.journal(m.Journal)
		case m.Stream != nil:
			j.stream(m.Stream)
		case m.Process != nil:
			j.process(m.Process)
		}
	}
	j.close()
	v := Verdict{Wrong: j.wrong, Said: j.said}
	for _, e := range j.effects {
		v.Effects = append(v.Effects, Effect{Kind: e.trouble.Kind, Surfaced: e.surfaced, Shown: e.surfaced || e.shown})
	}
	return v
}

type judge struct {
	facts Facts
	now   time.Time
	wrong []string
	said  []string // the forms of what is wrong

	runs      map[protocol.RunID]*runState
	durable   []string // ids in the order of commit
	bodies    map[string][]byte
	published int

	gates    []*gate // opened and not yet explained, in order
	open     *gate
	moved    time.Time // start of the last motion
	lastGate time.Time // end of the last gate
	pumpOpen bool
	guards   map[string]bool // open protectors
	bright   map[string]time.Time
	killed   bool           // and not started again yet
	orphans  bool           // gates before a kill wait for an interruption to explain them
	current  protocol.RunID // the run that moves the bench
	stopped  protocol.RunID
	hindered time.Time            // when a wire or a device last misbehaved
	zeroLost map[string]time.Time // controllers that restarted, until somebody wrote it down
	doubted  []span
	angles   []angleCheck

	places      places
	lights      lights
	waits       waits
	turns       turns
	pumpMoves   bool                // its blade is on its way to be open
	moveStarted time.Time           // of the last motion that is no search
	turning     map[string]int      // motions under way, by controller
	out         map[string]bool     // devices whose plug is out
	values      map[string][]valued // by device, and quantity of a sensor
	effects     []*effect
	wasKilled   bool
}

type span struct {
	run      protocol.RunID
	from, to int64
}

type angleCheck struct {
	run      protocol.RunID
	sequence int64
	text     string
}

type gate struct {
	opened time.Time
	truth  *instruments.GateTruth // nil while open
	closed time.Time
	ended  bool
	tag    uint64
	counts bool // its counts exist
}

type runState struct {
	next      int64
	state     protocol.State
	causes    []protocol.Cause
	began     bool
	accepted  map[[2]int]int64
	owed      bool   // killed while under way: an interruption has to come
	guard     string // that broke last
	unreached string // what in the present hold said that the rest state was not reached
	counting  bool   // a reading was taken since it last began or went on: all is connected
	planned   *planned
}

func (j *judge) say(format string, args ...any) {
	j.said = append(j.said, format)
	j.wrong = append(j.wrong, j.now.UTC().Format("15:04:05.000")+" "+fmt.Sprintf(format, args...))
}

func (j *judge) run(id protocol.RunID) *runState {
	r := j.runs[id]
	if r == nil {
		r = &runState{next: 1, accepted: map[[2]int]int64{}}
		j.runs[id] = r
	}
	return r
}

func (j *judge) world(r *instruments.Record) {
	j.place(r)
	j.lamp(r)
	j.value(r)
	j.troubled(r)
	switch r.Kind {
	case instruments.GateOpened:
		j.gateOpened(r)
	case instruments.GateClosed, instruments.GateAborted:
		j.gateEnded(r)
	case instruments.MoveStarted, instruments.HomeStarted, instruments.MarkStarted:
		j.moved = r.At
		if j.turning == nil {
			j.turning = map[string]int{}
		}
		j.turning[r.Device]++
		if r.Kind == instruments.MoveStarted {
			j.moveStarted = r.At
		}
		j.mustNotAct("%s: a motion began", r.Device)
		// A zero that is lost while nothing but a guard keeps the run is searched then, and the axes go to
		// their point in the dark, so that a rate is looked at there; how it is searched is judged as ever.
		if j.resting() && !(j.watched() && (r.Kind != instruments.MoveStarted || !j.pumpOpen && !slices.Contains(j.runs[j.current].causes, protocol.ByLight))) {
			j.say("%s: a motion began while run %s is %s", r.Device, j.current, j.runs[j.current].state)
		}
	case instruments.MoveEnded, instruments.MoveStopped, instruments.HomeFound, instruments.MarkFound:
		j.turning[r.Device]--
	case instruments.BladeStarted:
		if r.Device == j.facts.Pump {
			j.pumpMoves = r.Text == "open"
		} else if r.Text == "open" {
			j.guard(r.Device, true) // light comes through from now on
		}
		if r.Text == "open" && j.resting() && !j.mayLook(r.Device == j.facts.Pump) {
			j.say("%s was told to open while run %s is %s", r.Device, j.current, j.runs[j.current].state)
		}
	case instruments.BladeOpened, instruments.BladeClosed:
		open := r.Kind == instruments.BladeOpened
		if r.Device == j.facts.Pump {
			j.pumpOpen, j.pumpMoves = open, false
		}
		j.guard(r.Device, open)
		if !open {
			for _, d := range j.facts.Detectors {
				if d.Protector == r.Device {
					delete(j.bright, d.Name)
				}
			}
		}
	case instruments.Troubled:
		j.hindered = r.At
	case instruments.Unplugged, instruments.Plugged:
		j.hindered = r.At
		if j.out == nil {
			j.out = map[string]bool{}
		}
		j.out[r.Device] = r.Kind == instruments.Unplugged
	case instruments.Restarted:
		j.hindered = r.At
		if slices.Contains(j.facts.Controls, r.Device) {
			if j.zeroLost == nil {
				j.zeroLost = map[string]time.Time{}
			}
			j.zeroLost[r.Device] = r.At
		}
	}
	j.checkBright()
}

func (j *judge) guard(device string, open bool) {
	if j.guards == nil {
		j.guards = map[string]bool{}
	}
	j.guards[device] = open
}

// resting says whether the current run holds, or none is active.
func (j *judge) resting() bool {
	r := j.runs[j.current]
	return r != nil && (r.state == protocol.Holding || r.state.Final())
}

// watched says whether the current run holds for light or a guard and nothing else: nobody may have
// reached into the bench.
func (j *judge) watched() bool {
	r := j.runs[j.current]
	return r != nil && r.state == protocol.Holding && !slices.ContainsFunc(r.causes, func(c protocol.Cause) bool { return c != protocol.ByLight && c != protocol.ByGuard })
}

// mayLook says whether the current run holds for light or a guard and nothing else, and may look at it.
// For the guard of a rate of light it may open the pump, too, once the light is well.
func (j *judge) mayLook(pump bool) bool {
	r := j.runs[j.current]
	if !j.watched() {
		return false
	}
	if slices.Contains(r.causes, protocol.ByLight) {
		return !pump
	}
	for _, g := range j.facts.Plans[j.current].Guards {
		if g.Name == r.guard {
			return g.Rate != "" || g.DarkRate != "" && !pump
		}
	}
	return false
}

// mustNotAct complains when something moves or counts that has no right to.
func (j *judge) mustNotAct(format string, args ...any) {
	what := fmt.Sprintf(format, args...)
	if j.killed {
		j.say("%s while no process lives", what)
	}
	if j.stopped != "" && j.stopped == j.current {
		j.say("%s after the stop of run %s was answered", what, j.stopped)
	}
}

func (j *judge) gateOpened(r *instruments.Record) {
	g := &gate{opened: r.At, tag: r.Gate.Tag}
	j.gates = append(j.gates, g)
	j.open = g
	j.mustNotAct("%s: gate %d opened", r.Device, g.tag)
	if j.resting() && !j.mayLook(false) {
		j.say("gate %d opened while run %s is %s", g.tag, j.current, j.runs[j.current].state)
	}
}

func (j *judge) gateEnded(r *instruments.Record) {
	g := j.open
	if g == nil || g.tag != r.Gate.Tag {
		j.say("gate %d ended and was never seen to open", r.Gate.Tag)
		return
	}
	g.truth, g.closed, g.ended, g.counts = r.Gate, r.At, true, r.Kind == instruments.GateClosed
	j.open = nil
	j.lastGate = r.At
	if r.Gate.Seen == nil {
		return
	}
	for _, d := range j.facts.Detectors {
		seen := r.Gate.Seen.Signal
		if d.Name == "idler" {
			seen = r.Gate.Seen.Idler
		}
		// Well above the trip rate for the whole gate: nobody could have missed it.
		if d.TripHz > 0 && g.counts && seen.MeanHz > 1.5*d.TripHz && d.Protector != "" {
			if j.bright == nil {
				j.bright = map[string]time.Time{}
			}
			if _, known := j.bright[d.Name]; !known {
				j.bright[d.Name] = r.At
			}
		}
	}
}

// protectWithin is how long a detector may stay open after a gate that showed too much light:
// the exchanges that read the gate, a resynchronisation among them, and the blade's travel.
const protectWithin = 5 * time.Second

func (j *judge) checkBright() {
	for _, d := range j.facts.Detectors {
		since, bright := j.bright[d.Name]
		lasts := j.now.Sub(since)
		if !bright || j.killed || lasts <= j.watchPeriod()+protectWithin {
			continue // where nobody lives to close it the start will
		}
		also := ""
		if j.withheld(d.Protector) {
			if !j.pumpOpen || j.withheld(j.facts.Pump) {
				continue // what cannot be protected has the pump closed before it, and is tried again
			}
			also = ", and so is the pump, though its protector cannot close"
		}
		j.say("the %s detector is still open %s after a gate far above its trip rate%s", d.Name, lasts.Round(time.Millisecond), also)
		delete(j.bright, d.Name)
	}
}

func (j *judge) journal(e *protocol.Entry) {
	r := j.run(e.Run)
	if e.Sequence != r.next {
		j.say("run %s: entry %d became durable where %d was due", e.Run, e.Sequence, r.next)
	}
	if e.Sequence == 1 && r.next == 1 && e.Run != protocol.BenchRun {
		j.asked(e.Run)
	}
	r.next = e.Sequence + 1
	j.durable = append(j.durable, e.ID())
	if j.bodies == nil {
		j.bodies = map[string][]byte{}
	}
	j.bodies[e.ID()] = e.Body
	before := r.state
	defer func() {
		j.heard(e, before)
		if r.planned != nil {
			r.planned.wrote = j.now
		}
	}()
	switch e.Kind {
	case protocol.PointEntry:
		var points protocol.Points
		if err := json.Unmarshal(e.Body, &points); err != nil {
			j.say("run %s: entry %d: %v", e.Run, e.Sequence, err)
			return
		}
		j.decided(&points)
	case protocol.ReadingEntry:
		var reading protocol.Reading
		if err := json.Unmarshal(e.Body, &reading); err != nil {
			j.say("run %s: entry %d: %v", e.Run, e.Sequence, err)
			return
		}
		j.reading(r, &reading)
	case protocol.EventEntry:
		var ev protocol.Event
		if err := json.Unmarshal(e.Body, &ev); err != nil {
			j.say("run %s: entry %d: %v", e.Run, e.Sequence, err)
			return
		}
		j.event(r, &ev)
	case protocol.ResultEntry:
		j.result(fmt.Sprintf("run %s", e.Run), e)
	}
}

func (j *judge) reading(r *runState, b *protocol.Reading) {
	where := fmt.Sprintf("run %s: reading %d", b.Run, b.Sequence)
	if r.owed {
		j.say("%s was written after a kill, before the interruption was", where)
	}
	slices := b.Slices
	if b.Glance != nil {
		slices = append([]protocol.Slice{*b.Glance}, slices...)
	}
	var last *gate
	for i, s := range slices {
		if g := j.explain(where, s); g != nil {
			last = g
			if b.Accepted {
				j.angle(b, g)
				j.light(where, b, g, b.Glance != nil && i == 0)
			}
		}
	}
	// What is left unexplained now was opened for this reading or before it.
	unexplained := 0
	for _, g := range j.gates {
		if !g.opened.After(j.now) {
			unexplained++
		}
	}
	if j.orphans {
		unexplained = 0 // an interruption has to explain them, and is checked there
	}
	if unexplained > b.LostGates {
		j.say("%s names %d lost gates; %d gates that were opened are in no reading", where, b.LostGates, unexplained)
	}
	j.gates = nil
	if last != nil {
		if (j.lastGate.After(last.closed) || j.open != nil) && b.LostGates == 0 {
			j.say("%s: a gate was opened before it was durable", where)
		}
		if j.moved.After(last.closed) {
			j.say("%s: something moved before it was durable", where)
		}
	}
	for device, since := range j.zeroLost {
		if b.Accepted && b.Kind == protocol.Light && b.EndedAt.After(since) {
			j.say("%s was accepted after %s restarted, and nobody wrote down that its zero is lost", where, device)
		}
	}
	j.taken(where, b)
	r.counting = r.state == protocol.Running
	if !b.Accepted {
		j.surface(b.Run, protocol.SetAside)
		return
	}
	j.accepted(where, b)
	if b.Kind == protocol.Light {
		key := [2]int{*b.Point, *b.Visit}
		if before, twice := r.accepted[key]; twice {
			j.say("%s: point %d visit %d was accepted already as entry %d", where, key[0], key[1], before)
		}
		r.accepted[key] = b.Sequence
	}
	j.totals(where, b)
}

// light checks what light there truly was during a gate of an accepted reading, and its times.
func (j *judge) light(where string, b *protocol.Reading, g *gate, isGlance bool) {
	const slack = 50 * time.Millisecond // exchanges
	began, ended := b.StartedAt.Add(-slack), b.EndedAt.Add(slack)
	if isGlance {
		began, ended = time.Time{}, b.StartedAt.Add(slack)
	}
	if g.opened.Before(began) || g.closed.After(ended) {
		j.say("%s is said to last from %s to %s; its gate %d lasted from %s to %s", where, b.StartedAt, b.EndedAt, g.tag, g.opened.UTC(), g.closed.UTC())
	}
	seen := g.truth.Seen
	if seen == nil {
		return
	}
	// A glance is no data, and too short for a latched detector to be told from a dark one.
	for _, d := range j.facts.Detectors {
		at := seen.Signal
		if d.Name == "idler" {
			at = seen.Idler
		}
		if d.TripHz > 0 && at.MeanHz > wellAbove*d.TripHz && !isGlance {
			j.say("%s was accepted, and the %s detector saw %.3g /s in gate %d; it trips at %.3g /s", where, d.Name, at.MeanHz, g.tag, d.TripHz)
		}
	}
	if b.Kind == protocol.Check {
		return
	}
	if (g.truth.Doubtful || g.truth.Overflow) && !isGlance {
		j.say("%s was accepted, and its gate %d is doubtful (%v) or ran over (%v)", where, g.tag, g.truth.Doubtful, g.truth.Overflow)
	}
	j.guarded(where, b, seen)
	switch open := seen.PumpOpenShare; {
	case b.Kind == protocol.Dark && open > 0:
		j.say("%s is a dark, and the pump was open during %.3g of its gate %d", where, open, g.tag)
	case b.Kind != protocol.Dark && open < 1-1e-6:
		j.say("%s is not dark, and the pump was open during %.3g of its gate %d only", where, open, g.tag)
	}
	for _, d := range j.facts.Detectors {
		share := seen.Signal.OpenShare
		if d.Name == "idler" {
			share = seen.Idler.OpenShare
		}
		if d.Protector != "" && share < 1-1e-6 {
			j.say("%s: the %s detector was covered during part of gate %d", where, d.Name, g.tag)
		}
	}
}

// explain finds the gate of the world that a slice is, and compares every count.
func (j *judge) explain(where string, s protocol.Slice) *gate {
	tag := uint64(math.MaxUint64)
	for _, c := range s.Counts {
		if c.Channel == j.facts.Tag {
			tag = c.Counts
		}
	}
	for i, g := range j.gates {
		if g.tag != tag || !g.counts {
			continue
		}
		j.gates = slices.Delete(j.gates, i, i+1)
		for k, name := range j.facts.Channels {
			if k >= len(s.Counts) || s.Counts[k].Channel != name || k >= len(g.truth.Counts) || s.Counts[k].Counts != g.truth.Counts[k] {
				j.say("%s: gate %d counted %v; written is %v", where, tag, g.truth.Counts, s.Counts)
				break
			}
		}
		if math.Abs(s.Gate.Duration().Seconds()-g.truth.GateS) > 1e-6+1e-3*g.truth.GateS && !g.truth.Doubtful {
			j.say("%s: gate %d lasted %g s; written is %s", where, tag, g.truth.GateS, s.Gate.Duration())
		}
		return g
	}
	j.say("%s has a slice with tag %d: no such gate was closed since the entry before", where, tag)
	return nil
}

func (j *judge) angle(b *protocol.Reading, g *gate) {
	for _, a := range b.Angles {
		tol, known := j.facts.Tolerance[a.Axis]
		truth, seen := g.truth.Axes[a.Axis]
		if !known || !seen {
			continue
		}
		for _, written := range []float64{a.Before.Degrees(), a.After.Degrees(), a.Target.Degrees()} {
			if math.Abs(truth.LowDeg-written) > tol || math.Abs(truth.HighDeg-written) > tol {
				j.angles = append(j.angles, angleCheck{b.Run, b.Sequence, fmt.Sprintf("run %s: reading %d: %s was truly at %.4f to %.4f deg; written is %.4f (target %.4f, before %.4f, after %.4f)",
					b.Run, b.Sequence, a.Axis, truth.LowDeg, truth.HighDeg, written, a.Target.Degrees(), a.Before.Degrees(), a.After.Degrees())})
				break
			}
		}
	}
}

// totals checks that the sums are the slices' sums.
func (j *judge) totals(where string, b *protocol.Reading) {
	for k, c := range b.Counts {
		var total uint64
		for _, s := range b.Slices {
			if c.Channel == j.facts.Tag {
				total = s.Counts[k].Counts
			} else {
				total += s.Counts[k].Counts
			}
		}
		if total != c.Counts {
			j.say("%s: channel %s sums to %d; written is %d", where, c.Channel, total, c.Counts)
		}
	}
	if len(b.Slices) == 0 {
		j.say("%s was accepted without a slice", where)
	}
}

func (j *judge) event(r *runState, ev *protocol.Event) {
	where := fmt.Sprintf("run %s: %s", ev.Run, ev.Kind)
	if ev.Run == protocol.BenchRun {
		j.unreached(ev)
		j.reordered(ev)
		return
	}
	switch ev.Kind {
	case protocol.Began:
		if _, known := j.facts.Plans[ev.Run]; !known {
			j.say("%s, and nobody asked for it", where)
		}
		j.turn(where, ev.Run)
		j.current, r.began = ev.Run, true
	case protocol.Interrupted:
		j.current, r.owed, j.orphans = ev.Run, false, false
		j.gates = nil // what was open when the process died is named by this
		j.unreached(ev)
	case protocol.Doubted:
		from, _ := ev.Detail["from_sequence"].(float64)
		to, _ := ev.Detail["to_sequence"].(float64)
		j.doubted = append(j.doubted, span{ev.Run, int64(from), int64(to)})
	}
	if ev.Kind == protocol.Trouble || ev.Kind == protocol.Held || ev.Kind == protocol.HomedEvent || ev.Kind == protocol.Interrupted {
		for device := range j.zeroLost {
			if strings.Contains(ev.Text, device) || strings.Contains(fmt.Sprint(ev.Detail), device) {
				delete(j.zeroLost, device)
			}
		}
	}
	if r.state.Final() {
		j.say("%s after the run was %s for ever", where, r.state)
	}
	if ev.Kind == protocol.Ended && ev.State == protocol.Finished && !r.state.Final() {
		j.turns.finished = append(j.turns.finished, ev.Run)
	}
	r.state, r.causes = ev.State, ev.Causes
	if name, ok := ev.Detail["guard"].(string); ok && ev.Kind == protocol.GuardBroken {
		r.guard = name
	}
	j.surface(ev.Run, ev.Kind)
	j.placed(ev)
	j.follow(where, ev)
	if ev.Kind == protocol.Ended {
		j.reason(where, ev)
	}
	text := ev.Text
	switch {
	case ev.State == protocol.Running:
		r.unreached, r.counting = "", r.counting && ev.Kind != protocol.WentOn
	case strings.Contains(text, "NOT REACHED"):
		r.unreached = text
	case ev.Kind != protocol.Held && ev.Kind != protocol.Ended:
		text = r.unreached // what happens in a hold need not say it again
	}
	if r.state != protocol.Running || ev.Kind == protocol.Began {
		r.counting = false
	}
	if (r.state == protocol.Holding || r.state.Final()) && r.began {
		j.atRest(where, text)
	}
	if r.state == protocol.Holding && len(r.causes) == 0 {
		j.say("%s: holding without a cause", where)
	}
	if ev.Kind == protocol.Ended && ev.Text == "" {
		j.say("%s without a reason", where)
	}
}

// atRest checks the rest state at the moment that a hold or an end becomes durable. What is not
// reached must be said, by the name of the device, and that word is no excuse where the world did
// nothing to hinder it.
func (j *judge) atRest(where, text string) {
	excused := func(device string) bool {
		_, bad, said := strings.Cut(text, "NOT REACHED")
		return said && strings.Contains(bad, device) && j.hinders(device)
	}
	if j.pumpOpen && !excused(j.facts.Pump) {
		j.say("%s: the pump is not blocked", where)
	}
	for _, d := range j.facts.Detectors {
		if d.Protector != "" && j.guards[d.Protector] && !excused(d.Protector) {
			j.say("%s: the %s detector is not protected", where, d.Name)
		}
	}
	if j.open != nil && !excused(j.facts.Counter) {
		j.say("%s: a gate is open", where)
	}
	for _, name := range j.facts.Controls {
		if j.turning[name] > 0 && !excused(name) {
			j.say("%s: %s still turns", where, name)
		}
	}
}

func (j *judge) stream(e *protocol.Entry) {
	body, known := j.bodies[e.ID()]
	switch {
	case !known:
		j.say("entry %s was published before it was durable", e.ID())
	case !bytes.Equal(body, e.Body):
		j.say("entry %s was published with other bytes than it has in the journal", e.ID())
	case j.published >= len(j.durable):
		j.say("entry %s was published where nothing was due", e.ID())
	case j.durable[j.published] != e.ID():
		j.say("entry %s was published where %s was due", e.ID(), j.durable[j.published])
	}
	j.published++
}

func (j *judge) process(p *Process) {
	switch p.What {
	case Killed:
		j.killed, j.wasKilled = true, true
		j.died()
		for id, r := range j.runs {
			if id != protocol.BenchRun && r.began && !r.state.Final() && !slices.Contains(r.causes, protocol.ByRestart) {
				r.owed = true
			}
		}
		for _, r := range j.runs {
			j.orphans = j.orphans || r.owed && (len(j.gates) > 0 || j.open != nil)
		}
	case Started:
		j.killed = false
		j.waits.since = j.now
		for name := range j.bright {
			j.bright[name] = j.now // nobody could before; now the first act has to
		}
	case DiskFull, DiskFree:
		j.waits.full = p.What == DiskFull
		j.waits.freed = j.now
	case CameOlder:
		n, _ := strconv.Atoi(p.Text)
		j.published = max(0, j.published-n)
	case StopAnswered:
		j.stopped = p.Run
		if r := j.runs[p.Run]; r == nil || r.state != protocol.Stopped {
			j.say("the stop of run %s was answered before it was written", p.Run)
		}
	case HoldAnswered:
		if r := j.runs[p.Run]; r == nil || r.state != protocol.Holding && !r.state.Final() {
			j.say("the hold of run %s was answered before it was written", p.Run)
		}
	}
}

func (j *judge) close() {
	j.verdicts()
	for _, a := range j.angles {
		if j.doubtless(a.run, a.sequence) {
			j.wrong = append(j.wrong, a.text)
		}
	}
	for id, r := range j.runs {
		if r.owed {
			j.say("run %s was killed, and no interruption is written", id)
		}
	}
	if len(j.gates) > 0 {
		j.say("%d gates at the end are in no entry, the first with tag %d", len(j.gates), j.gates[0].tag)
	}
	if j.facts.CaughtUp && j.published != len(j.durable) {
		j.say("%d entries are durable, %d are in the stream", len(j.durable), j.published)
	}
}
