package engine

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"runtime/debug"
	"strings"
	"sync"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Logbook is where entries go. Append returns after the entry is durable, is idempotent for the
// same run, sequence and bytes, and must not be cut short by ctx once it began to write.
type Logbook interface {
	Append(ctx context.Context, entry protocol.Entry) error
}

// ErrConflict marks an Append that can never succeed: other bytes under the same sequence, or a
// gap. Every other error is taken for a lack of room, and tried again.
var ErrConflict = errors.New("the logbook holds something else here")

// ErrShutdown is the cause to end Run's context with when the daemon goes down and the run is to
// be resumed later. Any other end of the context means the same.
var ErrShutdown = errors.New("the daemon is going down")

// Step names a place in the life of a reading, for tests that interrupt there.
type Step string

// The steps, in the order of a reading's life.
const (
	StepDecided  Step = "decided"  // the next thing to do is known
	StepMoving   Step = "moving"   // about to move
	StepMoved    Step = "moved"    // the stages say they are at rest
	StepProved   Step = "proved"   // angles read back and judged
	StepLit      Step = "lit"      // shutters as the reading needs them
	StepGated    Step = "gated"    // one gate closed and read
	StepJudged   Step = "judged"   // accepted or set aside, not yet written
	StepWriting  Step = "writing"  // the entry's bytes are final, append not yet called
	StepWritten  Step = "written"  // append returned
	StepRested   Step = "rested"   // rest state reached
	StepAnswered Step = "answered" // an operator's request was carried out and written
)

// Steps lists them all.
var Steps = []Step{StepDecided, StepMoving, StepMoved, StepProved, StepLit, StepGated, StepJudged, StepWriting, StepWritten, StepRested, StepAnswered}

// Config is what one execution of a run needs.
type Config struct {
	Bench *Bench
	Plan  scan.Plan
	RunID protocol.RunID
	Log   Logbook
	// Past is the run's journal so far, folded. A run that was never begun has only its first
	// entry there.
	Past Progress
	// ResumeAfterRestart lets a run that was interrupted go on without a person.
	ResumeAfterRestart bool
	// MayHome is a person's word, given with the start, that axes without a zero may search for it.
	MayHome bool
	// Conclude works out the run's results from what is written, each as a JSON object, in the order
	// of the plan; nil: the run has none. It is asked when everything is counted.
	Conclude func(ctx context.Context) ([]json.RawMessage, error)
	// Replan works the plan out again, for one whose values from earlier results were missing.
	Replan func(ctx context.Context) (scan.Plan, error)
	// Judge compares one complete set of references, counted from 1, with an earlier one, from what
	// is written. It is asked once a set, and again after a restart that came in between.
	Judge func(ctx context.Context, set, baseline int) (Verdict, error)
	// Refine decides which points are added, from what is written. It is asked after the first pass,
	// and after the points of each refinement, until it adds none.
	Refine func(ctx context.Context, round int) (Refinement, error)
	// Room says why the logbook should not be written to much longer, before it cannot be; nil: it is
	// not asked. It is asked before each reading.
	Room func() error
	// Step, if not nil, is called at every step. Tests kill there.
	Step func(Step)
}

// Verdict is what a set of references says about the night so far.
type Verdict struct {
	Good   bool
	Untold bool           // too few counts for one of the bounds: neither good nor bad
	Text   string         // one sentence: what changed by how much, and what was allowed
	Detail map[string]any // the numbers
}

// Refinement is a decision to add points, or not to.
type Refinement struct {
	Points  []scan.Point // each is visited once; none: the refinement is over
	Grounds string       // one sentence: what the counts say, and why these points
}

// Engine executes one run. Build it with New, run it with Run, once.
type Engine struct {
	Config
	origin    time.Time // real time at which Run began
	benchZero time.Time // bench time at origin

	// Owned by Run's goroutine.
	progress   Progress
	commanded  map[drivers.AxisName]unit.Angle // where each axis has to stand: sent there and proved, or found there
	sent       map[drivers.AxisName]bool       // it was sent there, by the approach its file declares
	told       map[drivers.DeviceName]float64  // what each setting was last set to
	strayed    map[drivers.DeviceName]bool     // settings that left what they were told: to be set again
	opened     map[drivers.DeviceName]bool     // shutters that were opened, and not told to close since
	simulated  *int
	patience   time.Duration                    // no hold but an operator's lasts longer
	waitsSince time.Time                        // when the present hold began to count: downtime does not
	waited     map[string]time.Duration         // how long each guard has held since a visit was last done
	doneThen   int                              // visits done by then
	obeying    *order                           // the request being carried out
	owed       []*order                         // answered "done, not recorded": written when there is room
	homing     bool                             // a person allowed the next search for the zero
	deaf       map[drivers.DeviceName]time.Time // sensors that do not answer, and when they were last tried
	unheard    error                            // what made a sensor deaf in the last dwell
	warm       *warmUp                          // what is seen of the sensors while they become steady

	mu       sync.Mutex // guards what follows
	pending  []*order
	cancelOp context.CancelCauseFunc
	snapshot Snapshot
	over     bool
}

// Snapshot is what others may know of a running engine.
type Snapshot struct {
	State    protocol.State
	Causes   []protocol.Cause
	Reason   string
	Accepted int
	SetAside int
	Planned  int
	TimeLeft *time.Duration // bench time; nil while holding or before anything is known
	RestBad  string         // why the rest state could not be reached; empty when it was
	Hold     *Hold          // nil while the run does not hold
}

// Hold is how long a hold lasts.
type Hold struct {
	Since     time.Time     // by the machine's clock: what counts towards its end
	GivesUpAt time.Time     // by the machine's clock: when it fails the run; zero: never by itself
	Looks     time.Duration // between two looks at what mends itself, bench time; 0: a person ends it
}

// New prepares an engine. It starts nothing and touches nothing.
func New(c Config) *Engine {
	e := &Engine{Config: c, progress: c.Past.clone(), waited: map[string]time.Duration{}, commanded: map[drivers.AxisName]unit.Angle{}, sent: map[drivers.AxisName]bool{}, told: map[drivers.DeviceName]float64{}, strayed: map[drivers.DeviceName]bool{}, opened: map[drivers.DeviceName]bool{}, deaf: map[drivers.DeviceName]time.Time{}}
	e.homing = c.MayHome
	e.patience = c.Plan.Trouble.GiveUpAfter
	if e.patience <= 0 {
		e.patience = DefaultPatience
	}
	if c.Bench.Simulated {
		pace := max(1, int(c.Bench.Pace))
		e.simulated = &pace
	}
	e.progress.plan(&e.Plan)
	e.publishSnapshot()
	return e
}

// DefaultPatience bounds every hold but an operator's when the recipe states no other bound.
const DefaultPatience = 12 * time.Hour

var (
	errOrdered = errors.New("an operator's request came in")
	errEnded   = errors.New("run ended")
)

// Run executes the plan until the run is final or ctx ends, which leaves it holding for a
// restart. Its first act and its last is the rest state. The returned state is the run's; the
// error is nil unless something beyond the run is broken (the logbook refuses, or our own bug).
func (e *Engine) Run(ctx context.Context) (state protocol.State, err error) {
	e.origin = time.Now()
	e.benchZero = e.origin
	if e.progress.LastAt.After(e.benchZero) {
		e.benchZero = e.progress.LastAt // bench time never runs backwards, though it may have run fast before
	}
	defer e.close()
	defer func() {
		if v := recover(); v != nil {
			state, err = e.afterPanic(ctx, v)
		}
	}()
	err = e.run(ctx)
	switch {
	case errors.Is(err, errEnded):
		return e.progress.State, nil
	case ctx.Err() != nil:
		return e.shutdown(ctx)
	default:
		if bad := e.rest(ctx); bad != "" {
			err = fmt.Errorf("%w%s", err, withBad(bad))
		}
		return e.progress.State, err
	}
}

func (e *Engine) run(ctx context.Context) error {
	if e.progress.State.Final() {
		return errEnded
	}
	bad := e.rest(ctx)
	if err := e.openRun(ctx, bad); err != nil {
		return err
	}
	for {
		if err := e.turn(ctx); err != nil {
			return err
		}
	}
}

// openRun writes that the run began, or that it was interrupted, and connects the instruments.
func (e *Engine) openRun(ctx context.Context, restBad string) error {
	p := &e.progress
	e.waitsSince = e.now()
	switch {
	case p.State == protocol.Queued || p.State == "":
		if err := e.event(ctx, protocol.Began, "began: "+e.Plan.Title+withBad(restBad), protocol.Running, nil, map[string]any{
			"points": len(e.Plan.Points), "readings_planned": p.Planned(), "simulated": e.simulated,
		}); err != nil {
			return err
		}
	case !p.holds(protocol.ByRestart):
		causes := add(p.Causes, protocol.ByRestart)
		if err := e.event(ctx, protocol.Interrupted, "interrupted: the program ended without a word; what was being counted is lost, nothing that was written is"+withBad(restBad),
			protocol.Holding, causes, map[string]any{"after_sequence": p.Next - 1}); err != nil {
			return err
		}
	}
	if p.holds(protocol.ByRestart) && e.ResumeAfterRestart {
		if err := e.release(ctx, "the bench file says to go on after a restart", nil, protocol.ByRestart); err != nil {
			return err
		}
	}
	if p.State == protocol.Running {
		return e.getReady(ctx, nil)
	}
	return nil
}

func withBad(restBad string) string {
	if restBad == "" {
		return ""
	}
	return "; THE REST STATE WAS NOT REACHED: " + restBad
}

// decidePoints writes the list of points, in entries that stay well below a message's size, and
// with the first where the axes stand that the points do not move.
func (e *Engine) decidePoints(ctx context.Context) error {
	const most = 500
	for e.progress.Decided < len(e.Plan.Points) {
		from := e.progress.Decided
		to := min(from+most, len(e.Plan.Points))
		body := &protocol.Points{Grounds: e.grounds(), Points: []protocol.Point{}}
		if from == 0 {
			stand, ready, err := e.standing(ctx)
			if err != nil || !ready {
				return err
			}
			body.Stand, body.Earlier = stand, e.earlierBody()
		}
		for i := from; i < to; i++ {
			body.Points = append(body.Points, e.pointBody(i, e.Plan.Points[i]))
		}
		if err := e.write(ctx, protocol.PointEntry, &body.Head, body, protocol.PointSchema); err != nil {
			return err
		}
		e.progress.applyPoints(body)
	}
	return nil
}

func (e *Engine) pointBody(index int, p scan.Point) protocol.Point {
	body := protocol.Point{Point: index, Axes: []protocol.AxisTarget{}, Empty: p.Empty}
	for _, t := range p.Axes {
		body.Axes = append(body.Axes, protocol.AxisTarget{Axis: string(t.Axis), Target: t.Angle})
	}
	for _, s := range p.Settings {
		body.Settings = append(body.Settings, protocol.SettingValue{Name: string(s.Setting), Target: s.Value, Unit: e.settingUnit(s.Setting)})
	}
	return body
}

func (e *Engine) grounds() string {
	if e.Plan.Repeat.Shuffled {
		return fmt.Sprintf("sweep, shuffled by seed %d", e.Plan.Repeat.Seed)
	}
	return "sweep"
}

// standing reads where the axes are that the sweep does not move. Not ready means that the run
// holds, or was interrupted.
func (e *Engine) standing(ctx context.Context) (stand []protocol.AxisTarget, ready bool, err error) {
	op, end := e.operation(ctx)
	at, err := e.where(op)
	interrupted := op.Err() != nil
	end()
	switch {
	case interrupted:
		return nil, false, nil
	case err != nil:
		return nil, false, e.holdFor(ctx, protocol.ByTrouble, "held: "+firstLine(err), errorDetail(err))
	}
	stand = []protocol.AxisTarget{}
	for _, a := range e.Bench.Axes {
		if e.Plan.Sweeps(a.Name) {
			continue
		}
		place := at[a.Name]
		if b := e.Plan.Background; b != nil && b.Axis == a.Name {
			place = b.From
		}
		stand = append(stand, protocol.AxisTarget{Axis: string(a.Name), Target: place})
	}
	return stand, true, nil
}

// turn does the next thing: an operator's request, a wait, or one reading.
func (e *Engine) turn(ctx context.Context) error {
	if err := ctx.Err(); err != nil {
		return err
	}
	if e.progress.storageHeld {
		e.progress.storageHeld = false
		text := "there is room again: nothing could be written for a while, and the bench was at rest"
		if bad := e.progress.restBad; bad != "" {
			text = "there is room again: nothing could be written for a while" + withBad(bad)
		}
		if err := e.note(ctx, protocol.WentOn, text, map[string]any{"cause": protocol.ByStorage}); err != nil {
			return err
		}
	}
	if len(e.owed) > 0 {
		return e.payOwed(ctx)
	}
	if done, err := e.obey(ctx); done || err != nil {
		return err
	}
	if e.progress.State == protocol.Holding {
		return e.waitOut(ctx)
	}
	if e.progress.Decided == 0 && len(e.Plan.Open()) > 0 {
		return e.findEarlier(ctx)
	}
	if e.progress.Decided < len(e.Plan.Points) {
		return e.decidePoints(ctx)
	}
	if e.progress.ref.pending {
		return e.judge(ctx)
	}
	if waited, err := e.warming(ctx); waited || err != nil {
		return err
	}
	if e.early(ctx) {
		return nil
	}
	if a, due := e.toVerify(false); due {
		return e.verify(ctx, a)
	}
	if e.refinable() {
		return e.refine(ctx)
	}
	task, ok := e.progress.next(e.now())
	if ok {
		if cut, err := e.cutAtEnd(ctx, task); cut || err != nil {
			return err
		}
	}
	if !ok {
		if a, due := e.toVerify(true); due {
			return e.verify(ctx, a)
		}
		if done, err := e.putBack(ctx); !done || err != nil {
			return err
		}
		if err := e.conclude(ctx); err != nil {
			return err
		}
		if who := e.progress.cutBy; who != "" {
			return e.end(ctx, protocol.Stopped, fmt.Sprintf("stopped by %s after a point: %d of %d readings accepted, the closing ones among them", who, e.progress.Accepted, e.progress.Planned()), map[string]any{"who": who})
		}
		text := fmt.Sprintf("finished: %d of %d readings accepted, %d set aside", e.progress.Accepted, e.progress.Planned(), e.progress.SetAside)
		if n := e.progress.leftOut; n > 0 {
			text += fmt.Sprintf("; %d visits were left out, which did not fit", n)
		}
		return e.end(ctx, protocol.Finished, text, nil)
	}
	if task.kind == lightTask {
		if b, again := e.oldReference(); again {
			e.progress.ref.due = true
			return nil
		} else if b != nil {
			return e.afterGuard(ctx, task, b)
		}
	}
	if bad := e.room(); bad != nil {
		return e.holdFor(ctx, protocol.ByStorage, "held: "+bad.Error(), nil)
	}
	e.step(StepDecided)
	return e.perform(ctx, task)
}

// conclude writes the result. That there is none is told, and is no reason for the run to fail: what
// was counted stands.
func (e *Engine) conclude(ctx context.Context) error {
	if e.Conclude == nil || e.progress.concluded || e.progress.results >= len(e.Plan.Results) {
		return nil
	}
	e.rest(ctx) // it may take a while, and nothing moves meanwhile
	objects, err := e.Conclude(ctx)
	if ctx.Err() != nil {
		return ctx.Err() // the end of the program decides nothing
	}
	if err != nil {
		e.progress.concluded = true
		return e.note(ctx, protocol.Trouble, "no result: "+err.Error(), nil)
	}
	for _, object := range objects[min(e.progress.results, len(objects)):] {
		body := &resultBody{object: object}
		if err := e.write(ctx, protocol.ResultEntry, &body.Head, body, protocol.ResultSchema); err != nil {
			return err
		}
		e.progress.results++
	}
	e.progress.concluded = true
	return nil
}

// resultBody is a result with the head of a journal entry.
type resultBody struct {
	protocol.Head
	object json.RawMessage
}

// MarshalJSON puts the head's fields into the object; the head wins.
func (r *resultBody) MarshalJSON() ([]byte, error) {
	all := map[string]json.RawMessage{}
	if err := json.Unmarshal(r.object, &all); err != nil {
		return nil, fmt.Errorf("result: %w", err)
	}
	head, err := json.Marshal(r.Head)
	if err != nil {
		return nil, err
	}
	if err := json.Unmarshal(head, &all); err != nil {
		return nil, err
	}
	return json.Marshal(all)
}

// putBack turns the axis back that a background turned away, with the light off. What fails then
// holds the run, for nobody may find the bench spoiled in the morning without a word.
func (e *Engine) putBack(ctx context.Context) (done bool, err error) {
	b := e.Plan.Background
	if b == nil {
		return true, nil
	}
	op, end := e.operation(ctx)
	defer end()
	if err = e.protect(op); err == nil {
		_, err = e.goTo(op, e.stay(e.progress.point(e.progress.nearest().Point).Axes))
	}
	switch {
	case op.Err() != nil:
		return false, nil
	case err != nil:
		return false, e.holdFor(ctx, protocol.ByTrouble, fmt.Sprintf("held: %s could not be turned back after the last background: %v", b.Axis, err), errorDetail(err))
	}
	return true, nil
}

// end brings the bench to rest and closes the run for ever. The rest state comes first.
func (e *Engine) end(ctx context.Context, state protocol.State, text string, detail map[string]any) error {
	bad := e.rest(ctx)
	if err := e.doubtUnseen(ctx); err != nil {
		return err
	}
	if err := e.event(ctx, protocol.Ended, text+withBad(bad), state, nil, detail); err != nil {
		return err
	}
	return errEnded
}

// doubtUnseen writes which readings rest on zeros that nobody verified since.
func (e *Engine) doubtUnseen(ctx context.Context) error {
	for _, d := range e.progress.Unverified(e.Bench.Axes) {
		if err := e.note(ctx, protocol.Doubted, d.Text, d.Detail); err != nil {
			return err
		}
	}
	return nil
}

// shutdown leaves the run unfinished, at rest, holding for a restart.
func (e *Engine) shutdown(ctx context.Context) (protocol.State, error) {
	fresh, cancel := e.fresh(ctx, 15*time.Second)
	defer cancel()
	bad := e.rest(fresh)
	if e.progress.State.Final() {
		return e.progress.State, nil
	}
	err := e.event(fresh, protocol.Held, "the program was told to end; the run goes on from here when it is started again"+withBad(bad),
		protocol.Holding, add(e.progress.Causes, protocol.ByRestart), nil)
	if errors.Is(err, errEnded) {
		err = nil
	}
	return e.progress.State, err
}

// afterPanic is the road of our own bugs: the rest state first, then the words.
func (e *Engine) afterPanic(ctx context.Context, value any) (protocol.State, error) {
	stack := debug.Stack()
	fresh, cancel := e.fresh(ctx, 15*time.Second)
	defer cancel()
	bad := e.rest(fresh)
	err := fmt.Errorf("engine: panic: %v\n%s", value, stack)
	text := fmt.Sprintf("failed: a bug in this program: %v%s", value, withBad(bad))
	if werr := e.doubtUnseen(fresh); werr != nil {
		return e.progress.State, errors.Join(err, werr)
	}
	if werr := e.event(fresh, protocol.Ended, text, protocol.Failed, nil, map[string]any{"stack": string(stack)}); werr != nil {
		return e.progress.State, errors.Join(err, werr)
	}
	return protocol.Failed, err
}

// fresh gives a context of its own to what must happen though ctx has ended.
func (e *Engine) fresh(ctx context.Context, within time.Duration) (context.Context, context.CancelFunc) {
	return context.WithTimeout(context.WithoutCancel(ctx), e.Bench.Pace.Real(within)+5*time.Second)
}

func (e *Engine) step(s Step) {
	if e.Step != nil {
		e.Step(s)
	}
}

// now is bench time.
func (e *Engine) now() time.Time {
	return e.benchZero.Add(e.Bench.Pace.Bench(time.Since(e.origin))).UTC()
}

// event writes an event with the state that follows from it.
func (e *Engine) event(ctx context.Context, kind protocol.EventKind, text string, state protocol.State, causes []protocol.Cause, detail map[string]any) error {
	if causes == nil {
		causes = []protocol.Cause{}
	}
	if detail == nil {
		detail = map[string]any{}
	}
	if bad := withBad(e.progress.restBad); state == protocol.Holding && !strings.Contains(text, bad) {
		text += bad // whatever a run says while it holds, it says this too
	}
	body := &protocol.Event{Kind: kind, Text: text, State: state, Causes: causes, Detail: detail}
	if err := e.write(ctx, protocol.EventEntry, &body.Head, body, protocol.EventSchema); err != nil {
		return err
	}
	e.progress.applyEvent(body)
	e.publishSnapshot()
	return nil
}

// note writes an event that changes no state.
func (e *Engine) note(ctx context.Context, kind protocol.EventKind, text string, detail map[string]any) error {
	return e.event(ctx, kind, text, e.progress.State, e.progress.Causes, detail)
}

// write makes the entry's bytes final, appends them, and tries for as long as the logbook lacks
// room. Nothing else happens before it returns: that is the order the whole program promises.
func (e *Engine) write(ctx context.Context, kind protocol.EntryKind, head *protocol.Head, body any, schema string) error {
	*head = protocol.Head{Schema: schema, Bench: e.Bench.Name, Run: e.RunID, Sequence: e.progress.Next, At: protocol.Time{Time: e.now()}}
	raw, err := json.Marshal(body)
	if err != nil {
		return fmt.Errorf("entry %d: %w", head.Sequence, err)
	}
	entry := protocol.Entry{Run: e.RunID, Sequence: head.Sequence, Kind: kind, Body: raw}
	e.step(StepWriting)
	if err := e.append(ctx, entry); err != nil {
		return err
	}
	e.progress.Next = head.Sequence + 1
	e.progress.LastAt = head.At.Time
	e.step(StepWritten)
	return nil
}

func (e *Engine) close() {
	e.mu.Lock()
	defer e.mu.Unlock()
	e.over = true
	for _, o := range e.pending {
		close(o.done)
	}
	e.pending = nil
}

func (e *Engine) publishSnapshot() {
	p := &e.progress
	s := Snapshot{State: p.State, Causes: append([]protocol.Cause{}, p.Causes...), Reason: p.Reason, Accepted: p.Accepted, SetAside: p.SetAside, Planned: p.Planned(), RestBad: p.restBad}
	if p.State == protocol.Running {
		s.TimeLeft = p.timeLeft()
		if end := e.Plan.Schedule.FinishBy; s.TimeLeft != nil && !end.IsZero() {
			left := max(0, min(*s.TimeLeft, end.Sub(e.now())))
			s.TimeLeft = &left
		}
	}
	e.mu.Lock()
	if p.State == protocol.Holding {
		s.Hold = e.snapshot.Hold // until waitOut knows better
	}
	e.snapshot = s
	e.mu.Unlock()
}

// Snapshot returns the present state. It never waits for the engine.
func (e *Engine) Snapshot() Snapshot {
	e.mu.Lock()
	defer e.mu.Unlock()
	return e.snapshot
}
