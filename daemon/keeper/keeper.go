// Package keeper keeps one bench: it puts runs into the queue, executes one after another, takes
// up unfinished ones after a restart, and carries operators' requests to the run they name. It
// promises that a request is in the journal before it is answered, that one key makes one run,
// and that the bench is at rest whenever no run moves it.
package keeper

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
	"sync"
	"time"
	"unicode"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
	"gemel/scan/engine"
)

// Book is what the keeper needs of the logbook.
type Book interface {
	Asked(ctx context.Context, bench, key string) (protocol.RunID, error)
	NewRun(ctx context.Context, h logbook.Header, first protocol.Entry) (existing protocol.RunID, err error)
	Append(ctx context.Context, e protocol.Entry) error
	Entries(ctx context.Context, run protocol.RunID, afterSequence int64, limit int) ([]protocol.Entry, error)
	Last(ctx context.Context, run protocol.RunID) (int64, error)
	Queue(ctx context.Context) ([]logbook.Waiting, error)
	Run(ctx context.Context, run protocol.RunID) (logbook.RunRow, error)
	RunsTitled(ctx context.Context, bench, title string) ([]logbook.Titled, error)
	Results(ctx context.Context, run protocol.RunID) ([]protocol.Entry, error)
	Taken(ctx context.Context, run protocol.RunID) (values []protocol.EarlierValue, decided bool, err error)
	Owe(stops []logbook.OwedStop) error
	Owed() ([]logbook.OwedStop, error)
}

// Config is what a keeper is made of.
type Config struct {
	Book      Book
	Bench     *engine.Bench
	BenchText string
	Version   string
	// Plan works a recipe's text out for this bench, with the moment at which it was accepted: asked
	// again after a restart, with the same values of earlier results, it gives the same plan. Its
	// error is a *strict.Error with findings; a value that is missing is none.
	Plan func(recipeText string, accepted time.Time, earlier func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error)
	// Declared says, in a text that is equal where the meaning is, what a bench file declares that an
	// angle of the axis means: its zero, its sense and its steps. Nil: only results under the very
	// same bench file are taken.
	Declared func(benchText string, axis drivers.AxisName) (string, error)
	// Axes lists the axes that a bench file declares. Nil: the present one's are taken for all runs.
	Axes func(benchText string) ([]scan.Axis, error)
	// Recipe reads the text of a recipe by the name it has in the configured folder; nil: there is none.
	Recipe func(name string) (string, error)
	// AtRest says that whoever makes the keeper has just brought the bench to rest, and Run need not.
	AtRest bool
	// ResumeAfterRestart lets interrupted runs go on without a person.
	ResumeAfterRestart bool
	// Conclude works out a run's results, each as a JSON object, from what is written; it is asked
	// only for runs whose recipe wants some. Nil: no run has any.
	Conclude func(ctx context.Context, run protocol.RunID) ([]json.RawMessage, error)
	// Judge compares a complete set of references with an earlier one. Nil: none is judged.
	Judge func(ctx context.Context, run protocol.RunID, plan scan.Plan, set, baseline int) (engine.Verdict, error)
	// Refine decides which points are added after the first pass. Nil: none is.
	Refine func(ctx context.Context, run protocol.RunID, plan scan.Plan, round int) (engine.Refinement, error)
	// Foresee works out what a plan would do, for an aim that may be empty. Nil: no forecasts are made.
	Foresee func(ctx context.Context, plan scan.Plan, begins time.Time, aim string) (protocol.Forecast, error)
	// Armed says whether remote requests may move the bench now.
	Armed func(now time.Time) bool
	// MayHome is a person's word that axes may search their zero at the start of each run.
	MayHome bool
	// Hand is what hand work has to know beside the bench.
	Hand engine.HandFacts
	// Serving is called by Run when every request is taken from then on; nil: nobody waits for that.
	Serving func()
	// Told hears of every event of a run once it is written, in the goroutine that wrote it; nil:
	// nobody listens.
	Told func(protocol.Event)
	// Behind tells how many entries are not published yet; nil: nothing is published.
	Behind func() int64
	// Room is handed to the engine: why a run should hold before the disk is full. Nil: it is not asked.
	Room func() error
	// Step is handed to the engine; for tests.
	Step func(engine.Step)
}

// Keeper keeps one bench. Build it with New; Run or RunOne executes.
type Keeper struct {
	Config
	wake chan struct{}

	// order is held while it is decided whose turn it is, and while that is changed. It may be held
	// for as long as a journal takes to be read, so no status waits for it. It is taken before mu.
	order lock
	// events is held while an event of the bench finds its place.
	events lock

	mu      sync.Mutex // held for moments only
	current *engine.Engine
	row     logbook.RunRow // of current, or of the run before
	last    engine.Snapshot
	ended   time.Time // of the run before
	hands   hands
}

// New makes a keeper. It starts nothing.
func New(c Config) *Keeper {
	if c.Armed == nil {
		c.Armed = func(time.Time) bool { return c.Bench.Simulated }
	}
	return &Keeper{Config: c, wake: make(chan struct{}, 1), order: make(lock, 1), events: make(lock, 1)}
}

// lock is a mutex that is held while the disk or the bench is waited for. It is a channel because
// virtual time passes for who waits on one, and for who waits for a mutex it does not.
type lock chan struct{}

// Lock waits until nobody else holds it.
func (l lock) Lock() { l <- struct{}{} }

// Unlock lets the next one have it.
func (l lock) Unlock() { <-l }

// Run brings the bench to rest, takes up what is unfinished, and then executes runs as they are
// asked for, until ctx ends. An error means that the logbook or this program is broken.
func (k *Keeper) Run(ctx context.Context) error {
	defer k.openHands()()
	if k.Serving != nil {
		k.Serving()
	}
	bad := ""
	if !k.AtRest {
		bad = engine.Rest(ctx, k.Bench)
	}
	if bad != "" {
		if err := k.benchEvent(ctx, protocol.Trouble, "at the start the rest state was not reached: "+bad, nil); err != nil && !errors.Is(err, logbook.ErrFull) {
			return err
		}
	}
	if err := k.tellCutHand(ctx); err != nil && !errors.Is(err, logbook.ErrFull) && ctx.Err() == nil {
		return err
	}
	for ctx.Err() == nil {
		idle, err := k.once(ctx)
		switch {
		case ctx.Err() != nil:
		case errors.Is(err, logbook.ErrFull):
			k.wait(ctx, fullEvery) // whoever is next begins when it can be written
		case err != nil:
			return err
		case idle:
			k.wait(ctx, 0)
		}
	}
	return nil
}

// fullEvery is the time between two looks for room on a full disk, with no run to look for it.
const fullEvery = 10 * time.Second

// wait returns when there may be something to do; 0 is however late that is.
func (k *Keeper) wait(ctx context.Context, most time.Duration) {
	var late <-chan time.Time
	if most > 0 {
		timer := time.NewTimer(most)
		defer timer.Stop()
		late = timer.C
	}
	select {
	case <-ctx.Done():
	case <-k.wake:
	case <-late:
	}
}

// once executes the run whose turn it is. idle says that there is none.
func (k *Keeper) once(ctx context.Context) (idle bool, err error) {
	if err := k.payOwed(ctx); err != nil {
		return false, err
	}
	if done, err := k.handWork(ctx); done || err != nil {
		return false, err
	}
	eng, idle, err := k.turn(ctx)
	if err == nil && eng != nil {
		_, err = k.execute(ctx, eng)
	}
	return idle, err
}

// RunOne executes one run to its end, or to the end of ctx.
func (k *Keeper) RunOne(ctx context.Context, run protocol.RunID) (protocol.State, error) {
	if err := k.payOwed(ctx); err != nil {
		return "", err
	}
	row, err := k.Book.Run(ctx, run)
	if err != nil {
		return "", err
	}
	plan, planErr, err := k.workOut(ctx, row)
	if err != nil {
		return "", err
	}
	eng, err := k.take(ctx, row, plan, planErr, func() (bool, error) { return true, nil })
	if err != nil {
		return protocol.Failed, err
	}
	if eng == nil { // it had ended, or could not be executed
		row, err := k.Book.Run(ctx, run)
		return row.State, err
	}
	return k.execute(ctx, eng)
}

// execute lets an engine go on from where the journal ends.
func (k *Keeper) execute(ctx context.Context, eng *engine.Engine) (protocol.State, error) {
	state, err := eng.Run(ctx)
	k.mu.Lock()
	k.current, k.last, k.ended = nil, eng.Snapshot(), time.Now()
	k.mu.Unlock()
	return state, err
}

// engine makes the engine of a run.
func (k *Keeper) engine(row logbook.RunRow, plan scan.Plan, past engine.Progress) *engine.Engine {
	c := engine.Config{
		Bench: k.Bench, Plan: plan, RunID: row.Run, Log: k.appender(), Past: past,
		ResumeAfterRestart: k.ResumeAfterRestart, MayHome: k.MayHome, Room: k.Room, Step: k.Step, Conclude: k.concluder(row.Run, plan),
	}
	// The engine asks from one goroutine.
	c.Replan = func(ctx context.Context) (scan.Plan, error) {
		again, err := k.plan(row, k.earlierNow(ctx).find)
		if err == nil {
			plan = again
		}
		return again, err
	}
	if k.Judge != nil {
		c.Judge = func(ctx context.Context, set, baseline int) (engine.Verdict, error) {
			return k.Judge(ctx, row.Run, plan, set, baseline)
		}
	}
	if k.Refine != nil {
		c.Refine = func(ctx context.Context, round int) (engine.Refinement, error) {
			return k.Refine(ctx, row.Run, plan, round)
		}
	}
	return engine.New(c)
}

// concluder is what works out the result of one run, nil when its recipe asks for none.
func (k *Keeper) concluder(run protocol.RunID, plan scan.Plan) func(context.Context) ([]json.RawMessage, error) {
	if k.Conclude == nil || len(plan.Results) == 0 {
		return nil
	}
	return func(ctx context.Context) ([]json.RawMessage, error) { return k.Conclude(ctx, run) }
}

func (k *Keeper) fold(ctx context.Context, run protocol.RunID) (engine.Progress, error) {
	var past engine.Progress
	for {
		entries, err := k.Book.Entries(ctx, run, max(0, past.Next-1), 1000)
		if err != nil {
			return past, err
		}
		for _, e := range entries {
			if err := past.Fold(e); err != nil {
				return past, err
			}
		}
		if len(entries) < 1000 {
			return past, nil
		}
	}
}

// append writes an event at the present time, or at the time of the entry before it where the clock is
// behind that: bench time may have run fast, and the machine's clock may have been set.
func (k *Keeper) append(ctx context.Context, run protocol.RunID, sequence int64, lastAt time.Time, kind protocol.EventKind, text string, state protocol.State, causes []protocol.Cause, detail map[string]any) error {
	at := time.Now()
	if at.Before(lastAt) {
		at = lastAt
	}
	entry, err := k.eventEntry(run, sequence, at, kind, text, state, causes, detail)
	if err != nil {
		return err
	}
	return k.appender().Append(ctx, entry)
}

func (k *Keeper) eventEntry(run protocol.RunID, sequence int64, at time.Time, kind protocol.EventKind, text string, state protocol.State, causes []protocol.Cause, detail map[string]any) (protocol.Entry, error) {
	if causes == nil {
		causes = []protocol.Cause{}
	}
	if detail == nil {
		detail = map[string]any{}
	}
	body, err := json.Marshal(protocol.Event{
		Head: protocol.Head{Schema: protocol.EventSchema, Bench: k.Bench.Name, Run: run, Sequence: sequence, At: protocol.Time{Time: at}},
		Kind: kind, Text: text, State: state, Causes: causes, Detail: detail,
	})
	return protocol.Entry{Run: run, Sequence: sequence, Kind: protocol.EventEntry, Body: body}, err
}

// benchEvent writes what happened to the bench outside any run.
func (k *Keeper) benchEvent(ctx context.Context, kind protocol.EventKind, text string, detail map[string]any) error {
	k.events.Lock()
	defer k.events.Unlock()
	last, err := k.Book.Last(ctx, protocol.BenchRun)
	if err != nil {
		return err
	}
	before, err := k.Book.Entries(ctx, protocol.BenchRun, max(0, last-1), 1)
	if err != nil {
		return err
	}
	var head protocol.Head
	for _, e := range before {
		_ = json.Unmarshal(e.Body, &head) // the logbook took it, so it is JSON; without a time it says nothing of this one's
	}
	return k.append(ctx, protocol.BenchRun, last+1, head.At.Time, kind, text, "", nil, detail)
}

func notArmed() error {
	return protocol.Refuse(403, "the bench is not armed: somebody at the bench has to say `gemel arm --until HH:MM` first")
}

// Start checks a recipe and puts a run into the queue. It returns once that is durable.
func (k *Keeper) Start(ctx context.Context, q protocol.StartRequest) (protocol.StartReply, error) {
	if !k.Armed(time.Now()) {
		return protocol.StartReply{}, notArmed()
	}
	return k.Enqueue(ctx, q)
}

// Enqueue is Start for somebody at the bench itself.
func (k *Keeper) Enqueue(ctx context.Context, q protocol.StartRequest) (protocol.StartReply, error) {
	text := q.Recipe
	if q.RecipeName != "" {
		if text != "" {
			return protocol.StartReply{}, protocol.Refuse(400, "recipe and recipe_name are both set; want one of them")
		}
		if k.Recipe == nil {
			return protocol.StartReply{}, protocol.Refuse(404, "no folder of recipes is configured; send the recipe's text")
		}
		var err error
		if text, err = k.Recipe(q.RecipeName); err != nil {
			return protocol.StartReply{}, protocol.Refuse(404, err.Error())
		}
	}
	if text == "" {
		return protocol.StartReply{}, protocol.Refuse(400, "no recipe; want its text, or the name of one in the configured folder")
	}
	if q.Key == "" {
		return protocol.StartReply{}, protocol.Refuse(400, "no key; want one of your own choice, so that a start asked for twice is one run")
	}
	if run, err := k.Book.Asked(ctx, k.Bench.Name, q.Key); err != nil || run != "" {
		if err != nil {
			return protocol.StartReply{}, err
		}
		return k.askedBefore(ctx, run, text)
	}
	if queue, err := k.Book.Queue(ctx); err != nil || len(queue) >= protocol.MostQueued {
		if err != nil {
			return protocol.StartReply{}, err
		}
		return protocol.StartReply{}, protocol.Refuse(503, fmt.Sprintf("%d runs wait already; want at most %d: withdraw some, or ask again when some are done", len(queue), protocol.MostQueued))
	}
	now := time.Now()
	earlier := k.earlierNow(ctx)
	plan, err := k.Plan(text, now, earlier.find)
	if earlier.broken != nil {
		return protocol.StartReply{}, earlier.broken
	}
	if err != nil {
		refusal := protocol.Refuse(422, "the recipe cannot be run: "+err.Error())
		if e, ok := errors.AsType[*strict.Error](err); ok {
			refusal.Findings = e.Findings
		}
		return protocol.StartReply{}, refusal
	}
	run := k.name(now, q.Key)
	first, err := k.eventEntry(run, 1, now, protocol.OperatorDid, "start asked for by "+who(q.Who), protocol.Queued, nil, map[string]any{"who": q.Who, "key": q.Key, "readings_planned": k.planned(plan)})
	if err != nil {
		return protocol.StartReply{}, err
	}
	h := logbook.Header{Run: run, Title: plan.Title, RecipeText: text, BenchText: k.BenchText, Version: k.Version, Key: q.Key, Who: q.Who, QueuedAt: protocol.Time{Time: now}}
	if k.Bench.Simulated {
		pace := max(1, int(k.Bench.Pace))
		h.Simulated = &pace
	}
	existing, err := k.Book.NewRun(ctx, h, first)
	if err != nil {
		if errors.Is(err, logbook.ErrFull) {
			return protocol.StartReply{}, protocol.Refuse(503, "nothing can be written: "+err.Error())
		}
		return protocol.StartReply{}, err
	}
	if existing != "" {
		return k.askedBefore(ctx, existing, text)
	}
	select {
	case k.wake <- struct{}{}:
	default:
	}
	return protocol.StartReply{Run: run}, nil
}

// planned is how many readings a plan is certain to take.
func (k *Keeper) planned(plan scan.Plan) int {
	return engine.New(engine.Config{Bench: k.Bench, Plan: plan}).Snapshot().Planned
}

// askedBefore answers a start whose key was used before. The same request again is the same run; another
// recipe under an old key would be measured never, and reported as done.
func (k *Keeper) askedBefore(ctx context.Context, existing protocol.RunID, text string) (protocol.StartReply, error) {
	row, err := k.Book.Run(ctx, existing)
	if err != nil {
		return protocol.StartReply{}, err
	}
	if row.RecipeText != text {
		return protocol.StartReply{}, protocol.Refuse(409, fmt.Sprintf("this key belongs to run %s, which has another recipe; want a key of its own for each start", existing))
	}
	return protocol.StartReply{Run: existing}, nil
}

// name makes a run's name: it sorts by time, and two benches or two requests in one second do not
// meet.
func (k *Keeper) name(now time.Time, key string) protocol.RunID {
	sum := sha256.Sum256(fmt.Appendf(nil, "%s|%s|%d", k.Bench.Name, key, now.UnixNano()))
	return protocol.RunID(now.UTC().Format("20060102-150405") + "-" + hex.EncodeToString(sum[:4]))
}

// shuffleSeed is a run's own, and the same after each restart.
func shuffleSeed(run protocol.RunID) uint64 {
	sum := sha256.Sum256([]byte(run))
	return binary.BigEndian.Uint64(sum[:])
}

// who is a name as it may stand in a line of text: one line, no control characters, not endless.
func who(name string) string {
	name = strings.Map(func(r rune) rune {
		if unicode.IsControl(r) {
			return -1
		}
		return r
	}, name)
	if name = strings.TrimSpace(name); name == "" {
		return "somebody who gave no name"
	}
	if runes := []rune(name); len(runes) > 80 {
		name = string(runes[:80])
	}
	return name
}

// Stop ends a run for ever, also one that waits in the queue.
func (k *Keeper) Stop(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	if q.Run == protocol.BenchRun {
		return k.stopHand(ctx, q)
	}
	for {
		eng, err := k.find(ctx, q)
		if err != nil {
			return protocol.RunReply{}, err
		}
		if eng != nil {
			reply, err := answered(ctx, eng, eng.Stop, q)
			k.oweUnrecorded(q, reply, err)
			return reply, err
		}
		reply, err := k.stopQueued(ctx, q)
		if !errors.Is(err, errBegan) {
			return reply, err
		}
	}
}

// StopAfterPoint ends a run when its open point is done and the closing readings are taken; one that
// waits in the queue is stopped there.
func (k *Keeper) StopAfterPoint(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	if q.Run == protocol.BenchRun {
		return k.stopHand(ctx, q) // hand work has no points
	}
	eng, err := k.find(ctx, q)
	if err != nil {
		return protocol.RunReply{}, err
	}
	if eng == nil {
		return k.Stop(ctx, q)
	}
	reply, err := answered(ctx, eng, eng.StopAfterPoint, q)
	k.oweUnrecorded(q, reply, err)
	return reply, err
}

// Hold makes the current run wait.
func (k *Keeper) Hold(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	eng, err := k.find(ctx, q)
	if err != nil {
		return protocol.RunReply{}, err
	}
	if eng == nil {
		return protocol.RunReply{}, protocol.Refuse(409, fmt.Sprintf("run %s waits in the queue; it can be stopped, or left to wait", q.Run))
	}
	return answered(ctx, eng, eng.Hold, q)
}

// Resume takes the causes away that a person may take away.
func (k *Keeper) Resume(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	if !k.Armed(time.Now()) {
		return protocol.RunReply{}, notArmed()
	}
	eng, err := k.find(ctx, q)
	if err != nil {
		return protocol.RunReply{}, err
	}
	if eng == nil {
		return protocol.RunReply{}, protocol.Refuse(409, fmt.Sprintf("run %s waits in the queue; it begins when its turn comes", q.Run))
	}
	return answered(ctx, eng, eng.Resume, q)
}

// answered asks an engine, and adds to its answer what of the rest state was not reached.
func answered(ctx context.Context, eng *engine.Engine, ask func(context.Context, string) (protocol.RunReply, error), q protocol.RunRequest) (protocol.RunReply, error) {
	r, err := ask(ctx, who(q.Who))
	if errors.Is(err, engine.ErrOver) {
		return r, protocol.Refuse(409, "the run is over")
	}
	if err == nil && r.State != protocol.Running {
		r.Rest = eng.Snapshot().RestBad
	}
	return r, err
}

// find returns the engine of the run a request names, or nil when that run waits in the queue.
func (k *Keeper) find(ctx context.Context, q protocol.RunRequest) (*engine.Engine, error) {
	if q.Run == "" {
		return nil, protocol.Refuse(400, "no run named; want the run you mean, so that a late request cannot hit another")
	}
	if q.Run == protocol.BenchRun {
		if s := k.handSession(); s != nil {
			return nil, protocol.Refuse(409, fmt.Sprintf("the bench is in the hand of %s, and no run moves it; want a stop, which ends that at rest", s.who))
		}
		return nil, protocol.Refuse(409, "nobody has the bench in hand, and no run is named; want the run you mean")
	}
	if eng := k.executing(q.Run); eng != nil {
		return eng, nil
	}
	_, err := k.unfinished(ctx, q.Run)
	return nil, err
}

// executing returns the engine of a run, nil when none executes it.
func (k *Keeper) executing(run protocol.RunID) *engine.Engine {
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.row.Run != run {
		return nil
	}
	return k.current
}

// Status tells how the bench is. It never waits for the bench, nor for a request.
func (k *Keeper) Status(ctx context.Context) protocol.Status {
	s := protocol.Status{Bench: k.Bench.Name, Version: k.Version, Causes: []protocol.Cause{}, Armed: k.Armed(time.Now()),
		Queue: []protocol.RunID{}, Waiting: []protocol.WaitingRun{}}
	waiting, _ := k.waiting(ctx) // a logbook that cannot be read is told by whoever must read it
	for _, w := range waiting {
		s.Queue = append(s.Queue, w.Run)
		s.Waiting = append(s.Waiting, protocol.WaitingRun{Run: w.Run, Title: w.Title})
	}
	if k.Bench.Simulated {
		pace := max(1, int(k.Bench.Pace))
		s.Simulated = &pace
	}
	if k.Behind != nil {
		s.Behind = k.Behind()
	}
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.hands.session != nil {
		s.Hand = k.hands.session.who
	}
	if k.row.Run == "" {
		return s
	}
	snap := k.last
	if k.current != nil {
		snap = k.current.Snapshot()
	} else if snap.State.Final() {
		s.EndedAt = &protocol.Time{Time: k.ended}
	}
	s.Run, s.Title = k.row.Run, k.row.Title
	s.State, s.Causes, s.Reason = snap.State, snap.Causes, snap.Reason
	s.ReadingsAccepted, s.ReadingsPlanned, s.ReadingsSetAside = snap.Accepted, snap.Planned, snap.SetAside
	if snap.TimeLeft != nil {
		left := protocol.Seconds(k.Bench.Pace.Real(*snap.TimeLeft).Round(100 * time.Millisecond))
		s.TimeLeft = &left
	}
	if h := snap.Hold; h != nil {
		s.HoldingSince = &protocol.Time{Time: h.Since}
		if !h.GivesUpAt.IsZero() {
			s.GivesUpAt = &protocol.Time{Time: h.GivesUpAt}
		}
		if h.Looks > 0 {
			every := protocol.Seconds(k.Bench.Pace.Real(h.Looks))
			s.LooksAgain = &every
		}
	}
	return s
}

// appender gives the engine its one method, and tells it which refusals are for ever.
type appender struct {
	book Book
	told func(protocol.Event)
}

func (k *Keeper) appender() appender { return appender{k.Book, k.Told} }

func (a appender) Append(ctx context.Context, e protocol.Entry) error {
	err := a.book.Append(ctx, e)
	for _, never := range []error{logbook.ErrGap, logbook.ErrDifferent, logbook.ErrNoRun, logbook.ErrBody, logbook.ErrReadOnly} {
		if errors.Is(err, never) {
			return fmt.Errorf("%w: %w", engine.ErrConflict, err)
		}
	}
	if err == nil && a.told != nil && e.Kind == protocol.EventEntry {
		var ev protocol.Event
		if json.Unmarshal(e.Body, &ev) == nil {
			a.told(ev)
		}
	}
	return err
}
