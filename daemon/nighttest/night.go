package nighttest

import (
	"bytes"
	"cmp"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"testing/synctest"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/courier"
	"gemel/daemon/crew"
	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/drivers/line"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/recipe"
	"gemel/sim/instruments"
	"gemel/sim/source"
	"gemel/sim/trouble"
)

// Night is everything that decides how a night goes. The same night is the same time line.
type Night struct {
	Bench  *bench.File // simulated, clock 1
	Recipe string
	Before []string      // recipes that are queued before it
	Daemon bool          // one loop takes the runs from the queue, as serve does; else each is executed by itself, as run does
	Model  *source.Model // of the bench, shared between nights; nil: made anew
	Script
	// Longest bounds it in bench time; 0: three days.
	Longest time.Duration
	// Zone is where the clock on the wall is that a schedule means; nil: UTC.
	Zone *time.Location
	// diary is what people do instead of asking for the recipes above and giving the script's orders.
	// It is kept through all lives of a daemon, until it says that there is no more to do.
	diary func(ctx context.Context, l *life, keep *keeper.Keeper) (done bool, err error)
	// up is when a process that died is started again; nil: within half a minute.
	up func(died time.Time) time.Time
	// Wrap sabotages: it changes a part before it is used. For the table of sabotages only.
	Wrap Sabotage
}

// Script is what goes wrong, and what people do. It prints as one line that reads back.
type Script struct {
	Troubles trouble.List
	Kills    []Kill
	Orders   []Order
	Broker   []Away // times during which the broker takes nothing
	Full     []Away // times during which the disk has no room for a page more
	Older    []Older
}

// Older is a broker that comes back as it was some messages ago.
type Older struct {
	At time.Duration
	By int
}

// Kill ends the process without a word: at the Nth passing of a step in its life, or after a time.
type Kill struct {
	Step  engine.Step
	Nth   int
	After time.Duration // into the process's life; used when Step is empty
}

// Order is a person's request, at a time into the night.
type Order struct {
	At   time.Duration
	What string // hold, resume or stop
}

// Away is a time without a broker. Lost says that what is published at its beginning is stored and
// its acknowledgement lost.
type Away struct {
	At, For time.Duration
}

// String prints the script on one line.
func (s Script) String() string {
	var parts []string
	for _, k := range s.Kills {
		if k.Step != "" {
			parts = append(parts, fmt.Sprintf("kill %s:%d", k.Step, k.Nth))
		} else {
			parts = append(parts, "kill "+k.After.String())
		}
	}
	for _, o := range s.Orders {
		parts = append(parts, o.What+" "+o.At.String())
	}
	for _, a := range s.Broker {
		parts = append(parts, fmt.Sprintf("away %s+%s", a.At, a.For))
	}
	for _, f := range s.Full {
		parts = append(parts, fmt.Sprintf("full %s+%s", f.At, f.For))
	}
	for _, o := range s.Older {
		parts = append(parts, fmt.Sprintf("older %s:%d", o.At, o.By))
	}
	return strings.Join(parts, ", ") + " | " + s.Troubles.String()
}

// ParseScript reads what String prints.
func ParseScript(text string) (Script, error) {
	var s Script
	people, troubles, found := strings.Cut(text, "|")
	if !found {
		return s, fmt.Errorf("script %q; want \"kill written:3, hold 2h | troubles\"", text)
	}
	for word := range strings.SplitSeq(people, ",") {
		what, arg, _ := strings.Cut(strings.TrimSpace(word), " ")
		if what == "" {
			continue
		}
		step, nth, isStep := strings.Cut(arg, ":")
		at, length, isAway := strings.Cut(arg, "+")
		d, derr := time.ParseDuration(at)
		n, nerr := strconv.Atoi(nth)
		switch {
		case what == "kill" && isStep && nerr == nil:
			s.Kills = append(s.Kills, Kill{Step: engine.Step(step), Nth: n})
		case what == "kill" && derr == nil:
			s.Kills = append(s.Kills, Kill{After: d})
		case slices.Contains([]string{"hold", "resume", "stop"}, what) && derr == nil:
			s.Orders = append(s.Orders, Order{At: d, What: what})
		case what == "older" && isStep && nerr == nil:
			d, err := time.ParseDuration(step)
			if err != nil {
				return s, err
			}
			s.Older = append(s.Older, Older{At: d, By: n})
		case (what == "away" || what == "full") && isAway && derr == nil:
			l, err := time.ParseDuration(length)
			if err != nil {
				return s, err
			}
			if a := (Away{At: d, For: l}); what == "away" {
				s.Broker = append(s.Broker, a)
			} else {
				s.Full = append(s.Full, a)
			}
		default:
			return s, fmt.Errorf("script: %q; want kill STEP:N, kill TIME, hold TIME, resume TIME, stop TIME, away TIME+TIME, full TIME+TIME or older TIME:N", word)
		}
	}
	var err error
	s.Troubles, err = trouble.Parse(strings.TrimSpace(troubles))
	return s, err
}

// Sabotage changes parts of the program on purpose, to see that the judge notices.
type Sabotage struct {
	Book   func(Book) Book
	Bench  func(*engine.Bench)
	Port   func(lineName string, p line.Port) line.Port
	Sink   func(courier.Sink) courier.Sink
	Panics engine.Step // the engine panics once at this step
	AtPart int         // at its Nth passing
	Line   func([]Moment) []Moment
	Facts  func(*Facts)
}

// Book is the logbook as keeper and courier see it together.
type Book interface {
	keeper.Book
	courier.Journal
}

// Result is a night that is over.
type Result struct {
	Line   []Moment
	Facts  Facts
	State  protocol.State // of the last run
	Reason string
	Took   time.Duration // bench time
	Lives  int
	// Counts of what the lines noticed, summed over all lives.
	Lines     line.Counts
	Accepted  int
	SetAside  int
	Stuck     string // why the night was given up before its run was final; empty otherwise
	Verified  []string
	Published int
	Ends      []End         // of all runs, in the order they were asked for
	Killed    []engine.Step // where kills took effect; empty: by the clock
}

// End is what became of a run.
type End struct {
	Run    protocol.RunID
	State  protocol.State
	Reason string
}

// Judge judges the night, its logbook's own verification included.
func (r *Result) Judge() []string { return r.Examine().Wrong }

// Examine does the same, and tells which troubles took effect.
func (r *Result) Examine() Verdict {
	v := Examine(r.Line, r.Facts)
	for _, text := range r.Verified {
		v.Wrong = append(v.Wrong, "logbook: "+text)
	}
	if r.Stuck != "" {
		v.Wrong = append(v.Wrong, "stuck: "+r.Stuck)
	}
	for _, e := range r.Ends {
		if !e.State.Final() && r.Stuck == "" {
			v.Wrong = append(v.Wrong, fmt.Sprintf("run %s is %s (%s) at the end; want it final", e.Run, e.State, e.Reason))
		}
	}
	return v
}

func (n *Night) longest() time.Duration { return cmp.Or(n.Longest, 72*time.Hour) }

// Run runs a night in the caller's bubble, with the data folder given. The error is the test kit's
// own, not the night's.
func Run(n Night, data string) (*Result, error) {
	if n.Bench.Pace() != 1 {
		return nil, errors.New("nighttest: a bench with clock 1 is wanted: bubbles make their own time")
	}
	k := &kit{Night: n, data: data, began: time.Now(), sink: &standIn{}, final: map[protocol.RunID]bool{}, over: make(chan struct{})}
	k.sink.older = func(now time.Time) (by int) {
		for len(k.Older) > 0 && now.Sub(k.began) >= k.Older[0].At {
			by += k.Older[0].By
			k.Older = k.Older[1:]
		}
		return by
	}
	k.sink.lost = func(n int) { k.note(Process{What: CameOlder, Text: strconv.Itoa(n)}) }
	k.sink.away = func(now time.Time) bool {
		for _, a := range n.Broker {
			if d := now.Sub(k.began); d >= a.At && d < a.At+a.For {
				return true
			}
		}
		return false
	}
	k.ledger = instruments.NewLedger(nil)
	var err error
	if k.virtual, err = bench.NewVirtual(n.Bench, bench.VirtualOptions{Model: n.Model, Troubles: n.Troubles, Ledger: k.ledger}); err != nil {
		return nil, err
	}
	world := crew.New(context.Background(), nil)
	for _, a := range k.virtual.Actors() {
		world.Go(a.Name, a.Run)
	}
	err = k.lives()
	world.Stop()
	if werr := world.Wait(); err == nil {
		err = werr
	}
	if err != nil {
		return nil, err
	}
	return k.result()
}

// kit is one night under way.
type kit struct {
	Night
	data    string
	began   time.Time
	virtual *bench.Virtual
	ledger  *instruments.Ledger
	sink    *standIn
	runs    []protocol.RunID // as they were asked for; the last is the night's own

	mu      sync.Mutex
	final   map[protocol.RunID]bool
	over    chan struct{} // closed when every run is final
	done    bool          // the diary is
	journal []Moment
	process []Moment
	counts  line.Counts
	lived   int
	orders  int // carried out
	stuck   string
	panics  int
	killed  []engine.Step // steps at which a kill took effect, in order; empty for one by the clock
}

// run is the one that people mean when they say nothing else.
func (k *kit) run() protocol.RunID {
	if len(k.runs) == 0 {
		return ""
	}
	return k.runs[len(k.runs)-1]
}

func (k *kit) note(p Process) {
	k.mu.Lock()
	defer k.mu.Unlock()
	k.process = append(k.process, Moment{At: time.Now().UTC(), Process: &p})
}

// lives lets one process follow another until the run is final.
func (k *kit) lives() error {
	for {
		final, err := k.life()
		k.lived++
		if err != nil || final {
			return err
		}
		if most := k.longest(); time.Since(k.began) > most {
			k.stuck = fmt.Sprintf("the run is not final after %s", most)
			return nil
		}
		if k.up != nil {
			time.Sleep(time.Until(k.up(time.Now())))
		}
		time.Sleep(17*time.Second + 331*time.Microsecond) // until somebody starts it again
	}
}

// life is one process, from its start to its end or its death.
func (k *kit) life() (final bool, err error) {
	k.note(Process{What: Started})
	book, err := logbook.Open(k.data)
	if err != nil {
		return false, err
	}
	defer func() { err = errors.Join(err, book.Close()) }()
	built, err := bench.Build(k.Bench, bench.Options{Virtual: k.virtual, Wrap: k.Wrap.Port})
	if err != nil {
		return false, err
	}
	if k.Wrap.Bench != nil {
		k.Wrap.Bench(&built.Bench)
	}
	l := &life{kit: k, lines: crew.New(context.Background(), nil), steps: map[engine.Step]int{}}
	l.main = crew.New(context.Background(), nil)
	if k.lived < len(k.Kills) {
		l.kill = &k.Kills[k.lived]
	}
	for _, one := range built.Lines {
		l.lines.Go("line "+one.Name(), one.Run)
	}
	var recorder Book = &recorder{Book: book, life: l}
	if k.Wrap.Book != nil {
		recorder = k.Wrap.Book(recorder)
	}
	var sink courier.Sink = k.sink
	if k.Wrap.Sink != nil {
		sink = k.Wrap.Sink(sink)
	}
	carrier := courier.New(k.Bench.Name, recorder, sink, nil)
	book.OnAppend(carrier.Nudge)
	keep := keeper.New(keeper.Config{
		Book: recorder, Bench: &built.Bench, BenchText: k.Bench.Text, Version: "test",
		Plan: k.plan, ResumeAfterRestart: true, Step: l.step,
		Conclude: func(ctx context.Context, run protocol.RunID) ([]json.RawMessage, error) {
			all, err := report.All(ctx, book, run, report.Options{})
			if err != nil {
				return nil, err
			}
			return report.Objects(all)
		},
		Judge: func(ctx context.Context, run protocol.RunID, plan scan.Plan, set, baseline int) (engine.Verdict, error) {
			return report.Judge(ctx, book, run, plan, k.Bench, set, baseline)
		},
		Refine: func(ctx context.Context, run protocol.RunID, plan scan.Plan, round int) (engine.Refinement, error) {
			return report.Refine(ctx, book, run, plan, k.Bench, round)
		},
	})
	l.main.Go("keeper", func(ctx context.Context) error { return l.work(ctx, keep) })
	l.main.Go("people", func(ctx context.Context) error { return l.people(ctx, keep) })
	if l.kill != nil && l.kill.Step == "" {
		l.main.Go("fate", func(ctx context.Context) error {
			timer := time.NewTimer(l.kill.After + 77*time.Nanosecond)
			defer timer.Stop()
			select {
			case <-ctx.Done():
			case <-timer.C:
				l.die()
			}
			return nil
		})
	}
	if len(k.Full) > 0 {
		l.main.Go("disk", func(ctx context.Context) error { return l.disk(ctx, book) })
	}
	l.carriers = crew.New(context.Background(), nil)
	l.carriers.Go("courier", carrier.Run)
	err = l.main.Wait()
	if !l.dead.Load() && err == nil {
		k.catchUp(carrier)
	}
	l.carriers.Stop()
	l.lines.Stop()
	err = errors.Join(err, l.carriers.Wait(), l.lines.Wait())
	for _, one := range built.Lines {
		c := one.Counts()
		k.counts.Asked += c.Asked
		k.counts.Retried += c.Retried
		k.counts.Missing += c.Missing
		k.counts.Strangers += c.Strangers
		k.counts.Strays += c.Strays
		k.counts.Chatter += c.Chatter
		k.counts.Restarts += c.Restarts
		k.counts.Resynchronised += c.Resynchronised
		k.counts.Urgent += c.Urgent
		k.counts.Opened += c.Opened
		k.counts.Lost += c.Lost
	}
	return (k.done || k.diary == nil && k.allFinal()) && !l.dead.Load(), err
}

func (k *kit) allFinal() bool {
	k.mu.Lock()
	defer k.mu.Unlock()
	return len(k.runs) > 0 && len(k.final) == len(k.runs)
}

// work executes the night's runs: as the daemon does, or each by itself.
func (l *life) work(ctx context.Context, keep *keeper.Keeper) error {
	if l.diary != nil {
		return keep.Run(ctx)
	}
	if err := l.choose(ctx, keep); err != nil || ctx.Err() != nil {
		return err
	}
	if l.Daemon {
		l.main.Go("end", func(ctx context.Context) error {
			select {
			case <-ctx.Done():
			case <-l.over:
				time.Sleep(time.Second) // whoever asked for the end gets an answer
				l.main.Stop()
			}
			return nil
		})
		return keep.Run(ctx)
	}
	for _, run := range l.runs {
		state, err := keep.RunOne(ctx, run)
		if err != nil && ctx.Err() == nil && state != protocol.Failed || ctx.Err() != nil {
			return err
		}
	}
	l.main.Stop()
	return nil
}

// disk takes the room away and gives it back.
func (l *life) disk(ctx context.Context, book *logbook.Book) error {
	full := false
	for {
		wait, now := time.Duration(-1), time.Since(l.began)
		want := false
		for _, f := range l.Full {
			want = want || now >= f.At && now < f.At+f.For
			for _, at := range []time.Duration{f.At, f.At + f.For} {
				if at > now && (wait < 0 || at-now < wait) {
					wait = at - now
				}
			}
		}
		if want != full {
			if err := book.SetMaxPages(ctx, map[bool]int64{true: 1}[want]); err != nil && ctx.Err() == nil {
				return err
			}
			full = want
			l.note(Process{What: map[bool]ProcessKind{true: DiskFull, false: DiskFree}[full]})
		}
		if wait < 0 {
			return nil
		}
		timer := time.NewTimer(wait + 5*time.Nanosecond)
		select {
		case <-ctx.Done():
			timer.Stop()
			return nil
		case <-timer.C:
		}
	}
}

// catchUp gives the courier what time it needs once the broker is back.
func (k *kit) catchUp(c *courier.Courier) {
	for range 1000 {
		synctest.Wait()
		k.sink.mu.Lock()
		stored := len(k.sink.stored)
		k.sink.mu.Unlock()
		if stored >= len(k.journal) {
			return
		}
		time.Sleep(time.Minute)
	}
	k.stuck = fmt.Sprintf("%d entries were never published: %v", c.Behind(), c.Trouble())
}

func (k *kit) plan(text string, accepted time.Time, earlier func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
	r, err := recipe.Parse("night.yaml", []byte(text))
	if err != nil {
		return scan.Plan{}, err
	}
	facts := k.Bench.Facts()
	facts.AcceptedAt, facts.Earlier = accepted.UTC(), earlier
	if k.Zone != nil {
		facts.AcceptedAt = accepted.In(k.Zone)
	}
	return r.Plan(facts)
}

// recipes lists what is asked for, in order, each with a key of its own.
func (k *kit) recipes() []string { return append(slices.Clone(k.Before), k.Recipe) }

// choose asks for every run. Asked again after each restart with the same keys: one run each, however
// often the process died. On a full disk somebody asks again after a while.
func (l *life) choose(ctx context.Context, keep *keeper.Keeper) error {
	var runs []protocol.RunID
	for i, text := range l.recipes() {
		for {
			reply, err := keep.Enqueue(ctx, protocol.StartRequest{Recipe: text, Key: fmt.Sprintf("night %d", i+1), Who: "nighttest"})
			if err == nil {
				runs = append(runs, reply.Run)
				break
			}
			r, refused := errors.AsType[*protocol.Refusal](err)
			if ctx.Err() != nil || !refused || r.Code != 503 {
				return err
			}
			time.Sleep(time.Minute)
		}
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	l.runs = runs
	return nil
}

// life is one process.
type life struct {
	*kit
	lines, main, carriers *crew.Group
	kill                  *Kill
	dead                  atomic.Bool
	stepsMu               sync.Mutex
	steps                 map[engine.Step]int
}

// die is a power cut for the process: no line hears it any more, nothing is written any more.
func (l *life) die() {
	l.note(Process{What: Killed, Run: l.run()})
	l.mu.Lock()
	l.killed = append(l.killed, l.kill.Step)
	l.mu.Unlock()
	l.dead.Store(true)
	l.lines.Stop()
	_ = l.lines.Wait()
	l.carriers.Stop()
	l.main.Stop()
}

// step counts the engine's steps, and kills at the one the script names. A dead process's
// goroutine ends at its next step: its deferred calls reach nobody.
func (l *life) step(s engine.Step) {
	if l.dead.Load() {
		runtime.Goexit()
	}
	l.stepsMu.Lock()
	l.steps[s]++
	n := l.steps[s]
	l.stepsMu.Unlock()
	if l.kill != nil && l.kill.Step == s && l.kill.Nth == n {
		l.die()
		runtime.Goexit()
	}
	if l.Wrap.Panics == s && n == max(1, l.Wrap.AtPart) && l.panics == 0 {
		l.panics++
		panic("sabotage: a bug at step " + string(s))
	}
}

// people carry out the script's requests, and otherwise do what a technician does in the morning:
// see that the run holds for something that a person may clear, look at it for a while, resume.
func (l *life) people(ctx context.Context, keep *keeper.Keeper) error {
	const look = 7 * time.Minute
	const enough = 12 // fruitless resumes, after which nobody comes again
	since, resumed := time.Time{}, 0
	if l.diary != nil {
		done, err := l.diary(ctx, l, keep)
		if done {
			l.kit.done = true
			l.main.Stop()
		}
		return err
	}
	for {
		wait := look + 13*time.Nanosecond
		if l.orders < len(l.Orders) {
			wait = min(wait, max(0, l.Orders[l.orders].At-time.Since(l.began))+19*time.Nanosecond)
		}
		timer := time.NewTimer(wait)
		select {
		case <-ctx.Done():
			timer.Stop()
			return nil
		case <-timer.C:
		}
		if l.orders < len(l.Orders) && time.Since(l.began) >= l.Orders[l.orders].At {
			o := l.Orders[l.orders]
			l.orders++
			l.ask(ctx, keep, o.What)
			continue
		}
		s := keep.Status(ctx)
		mine := slices.ContainsFunc(s.Causes, func(c protocol.Cause) bool { return c == protocol.ByTrouble || c == protocol.ByOperator })
		switch {
		case s.State != protocol.Holding || !mine:
			since = time.Time{}
		case since.IsZero():
			since = time.Now()
		case time.Since(since) > 2*look && resumed == enough:
			l.ask(ctx, keep, "stop")
			since, resumed = time.Time{}, 0
		case time.Since(since) > 2*look:
			l.ask(ctx, keep, "resume")
			since = time.Time{}
			resumed++
		}
		if time.Since(l.began) > l.longest() {
			l.ask(ctx, keep, "stop")
		}
	}
}

func (l *life) ask(ctx context.Context, keep *keeper.Keeper, what string) {
	q := protocol.RunRequest{Run: keep.Status(ctx).Run, Who: "a person"}
	if q.Run == "" {
		q.Run = l.run()
	}
	if q.Run == "" {
		return // nothing was asked for yet
	}
	var r protocol.RunReply
	var err error
	switch what {
	case "hold":
		if r, err = keep.Hold(ctx, q); err == nil && r.Recorded {
			l.note(Process{What: HoldAnswered, Run: q.Run})
		}
	case "resume":
		r, err = keep.Resume(ctx, q)
	case "stop":
		if r, err = keep.Stop(ctx, q); err == nil && r.Recorded {
			l.note(Process{What: StopAnswered, Run: q.Run})
		}
	}
	// A refusal is an answer too: the run may be over.
	if _, refused := errors.AsType[*protocol.Refusal](err); err != nil && !refused && ctx.Err() == nil {
		l.mu.Lock()
		l.stuck = fmt.Sprintf("%s was not answered: %v", what, err)
		l.mu.Unlock()
	}
}

// commitTime is what a commit costs. It also keeps what comes after it at a later instant.
const commitTime = 1500*time.Microsecond + 3*time.Nanosecond

// recorder is the logbook with a notebook beside it.
type recorder struct {
	Book
	life *life
}

func (r *recorder) alive() {
	if r.life.dead.Load() {
		runtime.Goexit()
	}
}

func (r *recorder) record(e protocol.Entry) {
	r.life.mu.Lock()
	defer r.life.mu.Unlock()
	r.life.journal = append(r.life.journal, Moment{At: time.Now().UTC(), Journal: &e})
	if k := r.life.kit; e.Kind == protocol.EventEntry && e.Run != protocol.BenchRun && bytes.Contains(e.Body, []byte(`"kind":"ended"`)) {
		k.final[e.Run] = true
		if len(k.runs) > 0 && len(k.final) == len(k.runs) && k.diary == nil {
			close(k.over)
		}
	}
}

func (r *recorder) Append(ctx context.Context, e protocol.Entry) error {
	r.alive()
	time.Sleep(commitTime)
	r.alive()
	err := r.Book.Append(ctx, e)
	if err == nil {
		r.record(e)
	}
	time.Sleep(3 * time.Nanosecond)
	return err
}

func (r *recorder) NewRun(ctx context.Context, h logbook.Header, first protocol.Entry) (protocol.RunID, error) {
	r.alive()
	existing, err := r.Book.NewRun(ctx, h, first)
	if err == nil && existing == "" {
		r.record(first)
	}
	return existing, err
}

// standIn is a stream that keeps what a broker would, in memory: bubbles cannot hold a broker.
type standIn struct {
	mu      sync.Mutex
	away    func(time.Time) bool
	older   func(time.Time) int // how many messages are lost now
	lost    func(int)
	was     bool
	stored  []courier.Message
	moments []Moment
}

var errAway = errors.New("the broker is away")

func (s *standIn) Last(context.Context) (courier.Last, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if s.away(time.Now()) {
		return courier.Last{}, errAway
	}
	s.age()
	if len(s.stored) == 0 {
		return courier.Last{}, nil
	}
	return courier.Last{Message: s.stored[len(s.stored)-1], Sequence: uint64(len(s.stored))}, nil
}

func (s *standIn) Publish(_ context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	away := s.away(time.Now())
	lost := away && !s.was // the first one into an outage is stored, and its acknowledgement lost
	s.was = away
	if away && !lost {
		return courier.Last{}, errAway
	}
	s.age()
	if after.Sequence != uint64(len(s.stored)) {
		return courier.Last{}, courier.ErrUnsure
	}
	s.stored = append(s.stored, m)
	run, number, _ := cutLast(m.ID)
	sequence, err := strconv.ParseInt(number, 10, 64)
	if err != nil {
		return courier.Last{}, err
	}
	s.moments = append(s.moments, Moment{At: time.Now().UTC(), Stream: &protocol.Entry{Run: protocol.RunID(run), Sequence: sequence, Body: json.RawMessage(m.Body)}})
	if lost {
		return courier.Last{}, errAway
	}
	return courier.Last{Message: m, Sequence: uint64(len(s.stored))}, nil
}

// age loses the messages that a broker which comes back older does not have.
func (s *standIn) age() {
	if n := min(s.older(time.Now()), len(s.stored)); n > 0 {
		s.stored = s.stored[:len(s.stored)-n]
		s.lost(n)
	}
}

func cutLast(id string) (run, number string, found bool) {
	i := strings.LastIndexByte(id, '.')
	if i < 0 {
		return id, "", false
	}
	return id[:i], id[i+1:], true
}

// result gathers the time line and what the logbook says of itself.
func (k *kit) result() (*Result, error) {
	k.virtual.World.Settle()
	r := &Result{Facts: FactsOf(k.Bench), Took: time.Since(k.began), Lives: k.lived, Lines: k.counts, Stuck: k.stuck, Published: len(k.sink.stored)}
	r.Killed = k.killed
	r.Facts.CaughtUp = k.stuck == ""
	r.Line = Merge(World(k.ledger.Records()), k.journal, k.sink.moments, k.process)
	if k.Wrap.Line != nil {
		r.Line = k.Wrap.Line(r.Line)
	}
	book, err := logbook.OpenReadOnly(k.data + "/logbook.db")
	if err != nil {
		return nil, err
	}
	defer book.Close()
	r.Verified = book.Verify(context.Background())
	for _, run := range k.runs {
		row, err := book.Run(context.Background(), run)
		if err != nil {
			return nil, err
		}
		r.State, r.Reason = row.State, row.Reason
		r.Ends = append(r.Ends, End{run, row.State, row.Reason})
		if r.Facts.Plans[run], err = k.planned(book, row); err != nil {
			return nil, err
		}
		for reading, err := range book.Readings(context.Background(), run) {
			if err != nil {
				return nil, err
			}
			if reading.Accepted {
				r.Accepted++
			} else {
				r.SetAside++
			}
		}
	}
	if last, ok := r.Facts.Plans[k.run()]; ok {
		r.Facts.Visits = len(last.Visits())
	}
	if k.Wrap.Facts != nil {
		k.Wrap.Facts(&r.Facts)
	}
	return r, nil
}

// planned is the plan of a run as its journal has it: reckoned from the moment at which it was accepted,
// with the values of earlier results that it took, if it got as far.
func (k *kit) planned(book *logbook.Book, row logbook.RunRow) (scan.Plan, error) {
	values, decided, err := book.Taken(context.Background(), row.Run)
	if err != nil {
		return scan.Plan{}, err
	}
	var earlier func(scan.EarlierAsk) (scan.EarlierSource, error)
	if decided {
		earlier = func(ask scan.EarlierAsk) (scan.EarlierSource, error) { return logbook.Again(values, ask) }
	}
	return k.plan(row.RecipeText, row.QueuedAt.Time, earlier)
}

// FactsOf is what the judge must know of a bench.
func FactsOf(f *bench.File) Facts {
	facts := Facts{Tag: string(f.Counter.Tag), Tolerance: map[string]float64{}, Plans: map[protocol.RunID]scan.Plan{}, KeepOuts: f.KeepOuts, Controller: map[string]string{},
		HomeOrder: map[string][]string{}, Unattended: map[string]bool{}, Settings: map[string]Scale{}, Sensors: map[string]Scale{}}
	for _, c := range f.Counter.Channels {
		facts.Channels = append(facts.Channels, string(c))
	}
	for _, a := range f.Axes {
		facts.Tolerance[string(a.Name)] = a.Tolerance.Degrees() + detection
		if a.Verify != nil { // less than that no verification finds
			facts.Tolerance[string(a.Name)] += a.Verify.Tolerance.Degrees()
		}
		facts.Axes = append(facts.Axes, a.Axis)
		facts.Controller[string(a.Name)] = string(a.Axis.Controller)
	}
	for _, c := range f.Controllers {
		facts.Controls = append(facts.Controls, string(c.Name))
		mine := slices.DeleteFunc(slices.Clone(f.Axes), func(a bench.Axis) bool { return a.Axis.Controller != c.Name })
		slices.SortStableFunc(mine, func(a, b bench.Axis) int { return a.HomeOrder - b.HomeOrder })
		for _, a := range mine {
			facts.HomeOrder[string(c.Name)] = append(facts.HomeOrder[string(c.Name)], string(a.Name))
			facts.Unattended[string(c.Name)] = a.Unattended
		}
	}
	for _, s := range f.Settings {
		facts.Settings[string(s.Name)] = Scale{Device: string(s.Name), Factor: factors[s.Unit], Tolerance: within[s.Unit]}
	}
	for _, s := range f.Sensors {
		facts.Sensors[string(s.Name)] = Scale{Device: s.Line, Factor: factors[s.Unit], Quantity: map[string]string{"mW": "W", "Cel": "Cel"}[s.Unit]}
	}
	facts.Counter = string(f.Counter.Name)
	if f.Pump != nil {
		facts.Pump = string(f.Pump.Name)
	}
	for _, d := range f.Detectors {
		if d.Watch > 0 && (facts.Watch == 0 || d.Watch < facts.Watch) {
			facts.Watch = d.Watch
		}
		facts.Detectors = append(facts.Detectors, DetectorFact{Name: d.Name, Channel: string(d.Channel), TripHz: d.TripHz, FloorHz: d.FloorHz, Protector: string(d.ProtectBy)})
	}
	return facts
}

// factors turn a value of the family's benches into the unit that the ledger has.
var factors = map[string]float64{"mW": 1e-3, "ns": 1e-9, "Cel": 1}

// within is what their files allow of a setting, in its unit.
var within = map[string]float64{"mW": 0.01, "ns": 0.002}

// detection is what an encoder of the virtual stages cannot see, with room: degrees.
const detection = 0.001

// AtClockOne reads a bench file's text with the simulation's clock set to 1.
func AtClockOne(path string, text []byte) (*bench.File, error) {
	var out []string
	for l := range strings.SplitSeq(string(text), "\n") {
		if strings.HasPrefix(strings.TrimSpace(l), "clock:") {
			l = l[:strings.Index(l, "clock:")] + "clock: 1"
		}
		out = append(out, l)
	}
	return bench.Parse(path, []byte(strings.Join(out, "\n")))
}
