package keeper

import (
	"context"
	"encoding/json"
	"fmt"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/engine"
)

// counter is all the hardware of a bench that counts where the arms stand.
type counter struct{}

func (counter) Name() drivers.DeviceName      { return "counter" }
func (counter) Identity() string              { return "stand-in" }
func (counter) Connect(context.Context) error { return nil }
func (counter) Abort(context.Context) error   { return nil }
func (counter) Channels() []drivers.Channel   { return []drivers.Channel{"signal"} }
func (counter) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	if err := drivers.Pace(1).Wait(ctx, gate); err != nil {
		return drivers.Gate{}, &drivers.Error{Op: "count", Device: "counter", Remedy: drivers.Retry, GateOpened: true, Err: err}
	}
	return drivers.Gate{Counts: map[drivers.Channel]uint64{"signal": 100}, Set: gate, Length: gate, Raw: "100"}, nil
}

// counting makes a bench that can execute runs of one reading of ten seconds. Their title is the
// recipe's text.
func counting(c *Config) {
	c.Bench.Counter = counter{}
	c.Plan = func(text string, _ time.Time, _ func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
		return scan.Plan{Title: text, Points: []scan.Point{{}}, Dwell: scan.Dwell{Time: 10 * time.Second, Slice: 10 * time.Second}, Repeat: scan.Repeat{Times: 1}}, nil
	}
}

// enqueue asks for runs whose titles and keys are the names given.
func enqueue(t *testing.T, k *Keeper, names ...string) map[string]protocol.RunID {
	t.Helper()
	runs := map[string]protocol.RunID{}
	for _, name := range names {
		r, err := k.Start(t.Context(), protocol.StartRequest{Recipe: name, Key: name, Who: "ann"})
		if err != nil {
			t.Fatal(err)
		}
		runs[name] = r.Run
	}
	return runs
}

func titles(t *testing.T, k *Keeper) string {
	t.Helper()
	q, err := k.Queue(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var list []string
	for _, r := range q.Queue {
		list = append(list, r.Title)
	}
	return strings.Join(list, " ")
}

// began lists the titles of the runs in the order in which they began or went on.
func began(t *testing.T, book *logbook.Book, kinds ...protocol.EventKind) string {
	t.Helper()
	entries, err := book.After(t.Context(), 0, 10000)
	if err != nil {
		t.Fatal(err)
	}
	var list []string
	for _, e := range entries {
		var ev protocol.Event
		if e.Kind != protocol.EventEntry || json.Unmarshal(e.Body, &ev) != nil || !slices.Contains(kinds, ev.Kind) {
			continue
		}
		row, err := book.Run(t.Context(), e.Run)
		if err != nil {
			t.Fatal(err)
		}
		list = append(list, row.Title)
	}
	return strings.Join(list, " ")
}

// during runs the keeper until what is done meanwhile has returned.
func during(t *testing.T, k *Keeper, do func()) {
	t.Helper()
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan error, 1)
	go func() { done <- k.Run(ctx) }()
	do()
	cancel()
	if err := <-done; err != nil {
		t.Errorf("Run() = %v; want nil", err)
	}
}

func reorder(t *testing.T, k *Keeper, runs map[string]protocol.RunID, first ...string) error {
	t.Helper()
	q := protocol.ReorderRequest{Who: "bob"}
	for _, name := range first {
		q.Runs = append(q.Runs, runs[name])
	}
	_, err := k.Reorder(t.Context(), q)
	return err
}

func TestRunsAreExecutedInTheOrderTheQueueWasGivenAlsoAfterARestart(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book := keeping(t, counting)
		runs := enqueue(t, k, "a", "b", "c", "d")
		if err := reorder(t, k, runs, "d", "b"); err != nil {
			t.Fatal(err)
		}
		if got := titles(t, k); got != "d b a c" {
			t.Errorf("the queue is %s; want d b a c", got)
		}
		enqueue(t, k, "e")
		if err := reorder(t, k, runs, "c"); err != nil {
			t.Fatal(err)
		}
		enqueue(t, k, "f")
		k = New(k.Config) // the program ended and was started again
		if got := titles(t, k); got != "c d b a e f" {
			t.Errorf("after a restart the queue is %s; want c d b a e f", got)
		}
		s := k.Status(t.Context())
		if len(s.Waiting) != 6 || s.Waiting[0] != (protocol.WaitingRun{Run: runs["c"], Title: "c"}) || s.Queue[0] != runs["c"] {
			t.Errorf("the status has %v and %v; want c first", s.Queue, s.Waiting)
		}
		during(t, k, func() { time.Sleep(5 * time.Minute) })
		if got := began(t, book, protocol.Began); got != "c d b a e f" {
			t.Errorf("runs began in the order %s; want c d b a e f", got)
		}
		if got := titles(t, k); got != "" {
			t.Errorf("%s still wait", got)
		}
	})
}

func TestTheQueueTellsWhatIsKnownOfEachRun(t *testing.T) {
	k, _ := keeping(t, counting)
	runs := enqueue(t, k, "a")
	q, err := k.Queue(t.Context())
	if err != nil || len(q.Queue) != 1 || q.Bench != "skerry" {
		t.Fatalf("Queue() = %+v, %v; want one run", q, err)
	}
	r := q.Queue[0]
	if r.Run != runs["a"] || r.Title != "a" || r.Who != "ann" || r.State != protocol.Queued || r.QueuedAt.IsZero() || r.ReadingsPlanned == nil || *r.ReadingsPlanned != 1 {
		t.Errorf("the run in the queue is %+v; want what was asked for, and one reading", r)
	}
}

func TestAReorderedQueueIsOneEventOfTheBenchAndTheSameOrderAgainIsNone(t *testing.T) {
	k, book := keeping(t, counting)
	runs := enqueue(t, k, "a", "b")
	for range 3 {
		if err := reorder(t, k, runs, "b"); err != nil {
			t.Fatal(err)
		}
	}
	entries, err := book.Entries(t.Context(), protocol.BenchRun, 0, 10)
	if err != nil || len(entries) != 1 {
		t.Fatalf("%d bench entries, %v; want one", len(entries), err)
	}
	var ev protocol.Event
	if err := json.Unmarshal(entries[0].Body, &ev); err != nil {
		t.Fatal(err)
	}
	if ev.Kind != protocol.OperatorDid || ev.State != "" || ev.Text != `the queue was reordered by bob: first "b"` || fmt.Sprint(ev.Detail["queue"]) != fmt.Sprint([]protocol.RunID{runs["b"], runs["a"]}) {
		t.Errorf("the event is %+v; want kind operator with the whole order", ev)
	}
}

func TestWhatCannotBeReorderedIsRefusedAndChangesNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, _ := keeping(t, counting)
		runs := enqueue(t, k, "running", "a", "b", "gone")
		if _, err := k.Withdraw(t.Context(), protocol.RunRequest{Run: runs["gone"], Who: "ann"}); err != nil {
			t.Fatal(err)
		}
		runs["unknown"] = "nosuch"
		during(t, k, func() {
			time.Sleep(5 * time.Second)
			for _, c := range []struct {
				name  string
				first []string
				code  int
				text  string
			}{
				{"nothing", nil, 400, "no runs"},
				{"one twice", []string{"b", "a", "b"}, 400, "named twice"},
				{"an unknown one", []string{"b", "unknown"}, 404, `no run "nosuch"`},
				{"one that is withdrawn", []string{"b", "gone"}, 409, "is stopped, for ever"},
				{"one that is executed", []string{"b", "running"}, 409, "is running, and does not wait"},
			} {
				err := reorder(t, k, runs, c.first...)
				if code(err) != c.code || !strings.Contains(err.Error(), c.text) {
					t.Errorf("%s: %v; want %d and %q", c.name, err, c.code, c.text)
				}
			}
			k.Armed = func(time.Time) bool { return false }
			if err := reorder(t, k, runs, "b"); code(err) != 403 {
				t.Errorf("not armed: %v; want 403: it decides what moves next", err)
			}
			if got := titles(t, k); got != "a b" {
				t.Errorf("the queue is %s; want a b still", got)
			}
		})
	})
}

func TestAnInterruptedRunGoesFirstWhateverTheQueueSays(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book := keeping(t, func(c *Config) { counting(c); c.ResumeAfterRestart = true })
		runs := enqueue(t, k, "a", "b", "c")
		during(t, k, func() { time.Sleep(5 * time.Second) }) // a is in the middle of its reading
		k = New(k.Config)
		if err := reorder(t, k, runs, "c"); err != nil {
			t.Fatal(err)
		}
		if err := reorder(t, k, runs, "a"); code(err) != 409 || !strings.Contains(err.Error(), "interrupted") {
			t.Errorf("the interrupted run in another place: %v; want 409", err)
		}
		if _, err := k.Withdraw(t.Context(), protocol.RunRequest{Run: runs["a"]}); code(err) != 409 || !strings.Contains(err.Error(), "can be stopped") {
			t.Errorf("the interrupted run withdrawn: %v; want 409, since it has begun", err)
		}
		if got := titles(t, k); got != "a c b" {
			t.Errorf("the queue is %s; want a c b", got)
		}
		during(t, k, func() { time.Sleep(5 * time.Minute) })
		if got := began(t, book, protocol.Began, protocol.WentOn); got != "a a c b" {
			t.Errorf("runs began and went on in the order %s; want a a c b", got)
		}
	})
}

func TestWithdrawEndsWhatWaitsAndNothingElse(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book := keeping(t, counting)
		runs := enqueue(t, k, "a", "b", "c")
		k.Armed = func(time.Time) bool { return false } // it moves nothing
		during(t, k, func() {
			time.Sleep(5 * time.Second)
			r, err := k.Withdraw(t.Context(), protocol.RunRequest{Run: runs["b"], Who: "ann"})
			if err != nil || r.State != protocol.Stopped || !r.Recorded {
				t.Errorf("withdraw: %+v, %v; want stopped", r, err)
			}
			for name, want := range map[string]int{"a": 409, "b": 409} {
				if _, err := k.Withdraw(t.Context(), protocol.RunRequest{Run: runs[name]}); code(err) != want {
					t.Errorf("withdraw of %s: %v; want %d", name, err, want)
				}
			}
			time.Sleep(5 * time.Minute)
		})
		if got := began(t, book, protocol.Began); got != "a c" {
			t.Errorf("%s began; want a c", got)
		}
	})
}

func TestNobodyWaitsForALongRecipeToBeWorkedOut(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		working, release := make(chan bool), make(chan bool)
		slow := false
		k, book := keeping(t, func(c *Config) {
			counting(c)
			quick := c.Plan
			c.Plan = func(text string, at time.Time, e func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
				if slow && text == "a" {
					working <- true
					<-release
				}
				return quick(text, at, e)
			}
		})
		runs := enqueue(t, k, "a", "b", "c")
		slow = true
		during(t, k, func() {
			<-working
			if s := k.Status(t.Context()); len(s.Queue) != 3 {
				t.Errorf("the status has %d runs; want three that wait", len(s.Queue))
			}
			// Whose turn it is may be changed until it has come.
			if err := reorder(t, k, runs, "c"); err != nil {
				t.Error(err)
			}
			if r, err := k.Stop(t.Context(), protocol.RunRequest{Run: runs["a"], Who: "ann"}); err != nil || r.State != protocol.Stopped {
				t.Errorf("stop: %+v, %v; want stopped", r, err)
			}
			release <- true
			time.Sleep(5 * time.Minute)
		})
		if got := began(t, book, protocol.Began); got != "c b" {
			t.Errorf("%s began; want c b", got)
		}
	})
}

// meddler does something once, when a run is looked up.
type meddler struct {
	Book
	do func()
}

func (m *meddler) Run(ctx context.Context, run protocol.RunID) (logbook.RunRow, error) {
	if do := m.do; do != nil {
		m.do = nil
		do()
	}
	return m.Book.Run(ctx, run)
}

func TestAStopAtTheMomentARunBeginsFindsIt(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book := keeping(t, counting)
		runs := enqueue(t, k, "a")
		ended := make(chan protocol.State, 1)
		k.Book = &meddler{book, func() { // the stop has seen no engine, and has not taken the lock
			eng, _, err := k.turn(t.Context())
			if err != nil || eng == nil {
				t.Errorf("turn() = %v, %v; want the engine of a", eng, err)
				return
			}
			go func() {
				state, err := k.execute(t.Context(), eng)
				if err != nil {
					t.Error(err)
				}
				ended <- state
			}()
		}}
		r, err := k.Stop(t.Context(), protocol.RunRequest{Run: runs["a"], Who: "ann"})
		if state := <-ended; err != nil || r.State != protocol.Stopped || state != protocol.Stopped {
			t.Errorf("answered %+v, %v, and the run ended %s; want it stopped", r, err, state)
		}
	})
}

func TestAnAskedKeyIsAnsweredWithoutWorkingTheRecipeOutAgain(t *testing.T) {
	asked := 0
	k, _ := keeping(t, func(c *Config) {
		counting(c)
		quick := c.Plan
		c.Plan = func(text string, at time.Time, e func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
			asked++
			return quick(text, at, e)
		}
	})
	first := enqueue(t, k, "a")
	if again := enqueue(t, k, "a"); again["a"] != first["a"] || asked != 1 {
		t.Errorf("asked again: run %s after %d plans; want %s after one", again["a"], asked, first["a"])
	}
}

func TestAQueueHasAnEndAndAKnownKeyIsAnsweredAllTheSame(t *testing.T) {
	k, _ := keeping(t, counting)
	var names []string
	for i := range protocol.MostQueued {
		names = append(names, fmt.Sprint("r", i))
	}
	runs := enqueue(t, k, names...)
	if _, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "more", Key: "more"}); code(err) != 503 || !strings.Contains(err.Error(), "withdraw some") {
		t.Errorf("one more: %v; want 503", err)
	}
	if r, err := k.Start(t.Context(), protocol.StartRequest{Recipe: "r7", Key: "r7"}); err != nil || r.Run != runs["r7"] {
		t.Errorf("asked again: %v, %v; want %s", r, err, runs["r7"])
	}
}

func TestJudgementsAndRefinementsAreAskedForTheRunThatIsExecuted(t *testing.T) {
	k, _ := keeping(t, counting)
	k.Refine = func(_ context.Context, run protocol.RunID, plan scan.Plan, round int) (engine.Refinement, error) {
		return engine.Refinement{Grounds: fmt.Sprintf("%s %q %d", run, plan.Title, round)}, nil
	}
	k.Judge = func(_ context.Context, run protocol.RunID, plan scan.Plan, set, baseline int) (engine.Verdict, error) {
		return engine.Verdict{Text: fmt.Sprintf("%s %q %d %d", run, plan.Title, set, baseline)}, nil
	}
	eng := k.engine(logbook.RunRow{Header: logbook.Header{Run: "r1"}}, scan.Plan{Title: "a", Points: []scan.Point{{}}, Repeat: scan.Repeat{Times: 1}}, engine.Progress{})
	if r, err := eng.Refine(t.Context(), 2); err != nil || r.Grounds != `r1 "a" 2` {
		t.Errorf("Refine: %q, %v", r.Grounds, err)
	}
	if v, err := eng.Judge(t.Context(), 3, 1); err != nil || v.Text != `r1 "a" 3 1` {
		t.Errorf("Judge: %q, %v", v.Text, err)
	}
	plain, _ := keeping(t, counting)
	if eng := plain.engine(logbook.RunRow{}, scan.Plan{Points: []scan.Point{{}}}, engine.Progress{}); eng.Refine != nil || eng.Judge != nil {
		t.Error("an engine without judge and refinement has them; want nil, which it understands")
	}
}
