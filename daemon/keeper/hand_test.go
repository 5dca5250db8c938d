package keeper

import (
	"context"
	"encoding/json"
	"slices"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/engine"
)

// table is a bench of stand-ins: one arm, one counter, a pump and a guard before the one detector.
type table struct {
	mu    sync.Mutex
	open  map[drivers.DeviceName]bool
	at    unit.Angle
	rate  float64
	stops int
	bug   bool // the next gate panics
}

func (t *table) isOpen(name drivers.DeviceName) bool {
	t.mu.Lock()
	defer t.mu.Unlock()
	return t.open[name]
}

type piece struct {
	on   *table
	name drivers.DeviceName
}

func (p piece) Name() drivers.DeviceName      { return p.name }
func (p piece) Identity() string              { return "stand-in" }
func (p piece) Connect(context.Context) error { return nil }

type blade struct{ piece }

func (b blade) Open(context.Context) error  { return b.turn(true) }
func (b blade) Close(context.Context) error { return b.turn(false) }
func (b blade) turn(open bool) error {
	b.on.mu.Lock()
	defer b.on.mu.Unlock()
	b.on.open[b.name] = open
	return nil
}
func (b blade) State(context.Context) (drivers.Blade, error) {
	return drivers.Blade{Open: b.on.isOpen(b.name)}, nil
}

type arm struct{ piece }

func (arm) Axes() []drivers.AxisName { return []drivers.AxisName{"arm"} }
func (arm) Together() bool           { return false }
func (arm) TrustZero()               {}
func (a arm) Stop(context.Context) error {
	a.on.mu.Lock()
	defer a.on.mu.Unlock()
	a.on.stops++
	return nil
}
func (a arm) Where(context.Context) (map[drivers.AxisName]unit.Angle, error) {
	a.on.mu.Lock()
	defer a.on.mu.Unlock()
	return map[drivers.AxisName]unit.Angle{"arm": a.on.at}, nil
}

// Move takes a second a degree.
func (a arm) Move(ctx context.Context, to map[drivers.AxisName]unit.Angle) error {
	at, _ := a.Where(ctx)
	if err := drivers.Pace(1).Wait(ctx, time.Duration((to["arm"]-at["arm"]).Abs().Degrees()*float64(time.Second))); err != nil {
		return err
	}
	a.on.mu.Lock()
	defer a.on.mu.Unlock()
	a.on.at = to["arm"]
	return nil
}
func (arm) Home(context.Context, []drivers.AxisName) error { return nil }
func (arm) Homed(context.Context) (map[drivers.AxisName]bool, error) {
	return map[drivers.AxisName]bool{"arm": true}, nil
}

type counts struct{ piece }

func (counts) Channels() []drivers.Channel { return []drivers.Channel{"one"} }
func (counts) Abort(context.Context) error { return nil }
func (c counts) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	c.on.mu.Lock()
	rate, bug := c.on.rate, c.on.bug
	c.on.mu.Unlock()
	if bug {
		panic("a bug of the test's")
	}
	if err := drivers.Pace(1).Wait(ctx, gate); err != nil {
		return drivers.Gate{}, &drivers.Error{Op: "count", Device: c.name, Remedy: drivers.Retry, GateOpened: true, Err: err}
	}
	return drivers.Gate{Counts: map[drivers.Channel]uint64{"one": uint64(rate * gate.Seconds())}, Set: gate, Length: gate}, nil
}

// fullBook refuses to append while it is full.
type fullBook struct {
	Book
	mu   sync.Mutex
	full bool
}

func (b *fullBook) fill(full bool) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.full = full
}

func (b *fullBook) Append(ctx context.Context, e protocol.Entry) error {
	b.mu.Lock()
	full := b.full
	b.mu.Unlock()
	if full {
		return logbook.ErrFull
	}
	return b.Book.Append(ctx, e)
}

// lending is a keeper at work, a bench, and what people ask of it by hand.
type lending struct {
	*table
	t       *testing.T
	k       *Keeper
	book    *fullBook
	session string
	broken  bool         // the keeper may end with an error
	stop    func() error // ends the keeper, and returns what it ended with
}

func lend(t *testing.T, change func(*Config), test func(t *testing.T, l *lending)) {
	t.Helper()
	synctest.Test(t, func(t *testing.T) {
		on := &table{open: map[drivers.DeviceName]bool{}, rate: 1000}
		l := &lending{table: on, t: t}
		guard := blade{piece{on, "guard"}}
		l.k, _ = keeping(t, func(c *Config) {
			l.book = &fullBook{Book: c.Book}
			c.Book = l.book
			c.Bench = &engine.Bench{Name: "skerry", Pace: 1, Simulated: true,
				Axes:   []scan.Axis{{Name: "arm", Controller: "rotary", Low: -10 * unit.Degree, High: 100 * unit.Degree, Tolerance: unit.Degree / 100, Proof: drivers.Proved}},
				Stages: []drivers.Stage{arm{piece{on, "rotary"}}}, Counter: counts{piece{on, "counter"}}, Pump: blade{piece{on, "pump"}},
				Detectors: []engine.Detector{{Name: "one", Channel: "one", TripHz: 1e5, Protect: guard}}}
			if change != nil {
				change(c)
			}
		})
		ctx, cancel := context.WithCancel(t.Context())
		ended := make(chan error, 1)
		go func() { ended <- l.k.Run(ctx) }()
		l.stop = sync.OnceValue(func() error { cancel(); return <-ended })
		synctest.Wait()
		test(t, l)
		if err := l.stop(); err != nil && !l.broken {
			t.Errorf("Run() = %v; want nil", err)
		}
		l.atRest()
	})
}

func (l *lending) atRest() {
	l.t.Helper()
	synctest.Wait()
	for _, name := range []drivers.DeviceName{"pump", "guard"} {
		if l.isOpen(name) {
			l.t.Errorf("%s is open; want the rest state", name)
		}
	}
}

type handAnswer struct {
	protocol.HandReply
	err error
}

// ask sends a request and returns where its answer will be.
func (l *lending) ask(q protocol.HandRequest) <-chan handAnswer {
	if q.Session == "" {
		q.Session = l.session
	}
	if q.Who == "" {
		q.Who = "ann"
	}
	got := make(chan handAnswer, 1)
	l.k.Hand(l.t.Context(), q, func(r protocol.HandReply, err error) { got <- handAnswer{r, err} })
	return got
}

// do is ask for what has to succeed.
func (l *lending) do(q protocol.HandRequest) protocol.HandReply {
	l.t.Helper()
	a := <-l.ask(q)
	if a.err != nil {
		l.t.Fatalf("%s: %v", q.Act, a.err)
	}
	l.session = a.Session
	return a.HandReply
}

// texts are the events of the bench, and with each that it hangs together.
func (l *lending) texts() []string {
	l.t.Helper()
	entries, err := l.book.Entries(context.WithoutCancel(l.t.Context()), protocol.BenchRun, 0, 1000)
	if err != nil {
		l.t.Fatal(err)
	}
	var texts []string
	for i, e := range entries {
		var ev protocol.Event
		if err := json.Unmarshal(e.Body, &ev); err != nil || e.Sequence != int64(i+1) {
			l.t.Fatalf("entry %d: %v", e.Sequence, err)
		}
		texts = append(texts, string(ev.Kind)+": "+ev.Text)
	}
	return texts
}

func yes() *bool { v := true; return &v }

func look(gate time.Duration) protocol.HandRequest {
	return protocol.HandRequest{Act: protocol.HandLook, Gate: protocol.Seconds(gate)}
}

func move(to unit.Angle) protocol.HandRequest {
	return protocol.HandRequest{Act: protocol.HandMove, Axis: "arm", To: &to}
}

func TestEveryActIsInTheJournalWhenItIsAnswered(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		for _, c := range []struct {
			q    protocol.HandRequest
			want string
		}{
			{protocol.HandRequest{Act: protocol.HandWhere}, "operator: ann took the bench in hand"},
			{protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: yes()}, "operator: ann opened pump"},
			{move(unit.Degree), "operator: ann moved arm from 0.0000 deg to 1 deg, where it stands at 1.0000 deg"},
			{look(time.Second), "operator: ann looked, gate 1 s: one 1000 /s"},
			{protocol.HandRequest{Act: protocol.HandRest}, "operator: ann brought the bench to rest"},
		} {
			r := l.do(c.q)
			texts := l.texts()
			if got := texts[len(texts)-1]; got != c.want {
				t.Errorf("%s was answered, and the last that is written is %q; want %q", c.q.Act, got, c.want)
			}
			if r.Recorded != (c.q.Act != protocol.HandWhere) || len(r.Axes) != 1 || len(r.Shutters) != 2 {
				t.Errorf("%s: %+v; want it recorded, and how the bench stands", c.q.Act, r)
			}
		}
		live := look(time.Second / 2)
		live.Live = true
		before := len(l.texts())
		for range 7 {
			if r := l.do(live); r.Look.Rates[0].Rate != 1000 {
				t.Errorf("look %+v; want 1000 /s", r.Look)
			}
		}
		if len(l.texts()) != before {
			t.Error("looks that follow one another were written one by one")
		}
		l.do(move(2 * unit.Degree))
		if texts := l.texts(); len(texts) != before+2 || texts[before] != "operator: ann looked 7 times; the last time looked, gate 0.5 s: one 1000 /s" {
			t.Errorf("then %q; want the looks as one entry, before the move", texts[before:])
		}
		r := l.do(protocol.HandRequest{Act: protocol.HandLeave})
		if !r.Recorded || r.Text != "ann took the hand off the bench, with the bench at rest" {
			t.Errorf("leave: %+v", r)
		}
		if s := l.k.Status(t.Context()); s.Hand != "" {
			t.Errorf("status says %s has the bench", s.Hand)
		}
	})
}

func TestWhatIsWrongWithAnActIsToldAndNothingIsDone(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		angle := unit.Degree
		for name, c := range map[string]struct {
			q    protocol.HandRequest
			code int
		}{
			"no act":                       {protocol.HandRequest{}, 400},
			"an act that is none":          {protocol.HandRequest{Act: "dance"}, 400},
			"a look without a gate":        {protocol.HandRequest{Act: protocol.HandLook}, 400},
			"a move without a target":      {protocol.HandRequest{Act: protocol.HandMove, Axis: "arm"}, 400},
			"a move with two":              {protocol.HandRequest{Act: protocol.HandMove, Axis: "arm", To: &angle, By: &angle}, 400},
			"a rest with an axis":          {protocol.HandRequest{Act: protocol.HandRest, Axis: "arm"}, 400},
			"a live move":                  {protocol.HandRequest{Act: protocol.HandMove, Axis: "arm", To: &angle, Live: true}, 400},
			"a rest of nobody":             {protocol.HandRequest{Act: protocol.HandRest}, 409},
			"a session that is none":       {protocol.HandRequest{Act: protocol.HandWhere, Session: "yesterday"}, 409},
			"a request that is late":       {protocol.HandRequest{Act: protocol.HandWhere, ExpiresAt: &protocol.Time{Time: time.Now()}}, 408},
			"a stop of nobody's hand work": {protocol.HandRequest{Act: protocol.HandLeave}, 409},
		} {
			if a := <-l.ask(c.q); code(a.err) != c.code {
				t.Errorf("%s: %v; want %d", name, a.err, c.code)
			}
		}
		if _, err := l.k.Stop(t.Context(), protocol.RunRequest{Run: protocol.BenchRun}); code(err) != 409 {
			t.Errorf("a stop with nobody there: %v; want 409", err)
		}
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
		before := len(l.texts())
		if a := <-l.ask(move(200 * unit.Degree)); code(a.err) != 409 || !strings.Contains(a.err.Error(), "soft limits") {
			t.Errorf("beyond the limits: %v; want 409", a.err)
		}
		value := 1.0
		if a := <-l.ask(protocol.HandRequest{Act: protocol.HandSet, Setting: "delay", Value: &value, Unit: "ns"}); code(a.err) != 409 {
			t.Errorf("a setting that is not there: %v; want 409", a.err)
		}
		if texts := l.texts(); len(texts) != before {
			t.Errorf("refusals were written as %q", texts[before:])
		}
	})
}

// A refusal names no session: one that it left open would keep the bench from everybody.
func TestASessionWhoseFirstActIsRefusedIsOverWithIt(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		if a := <-l.ask(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "/etc/passwd", Open: yes()}); code(a.err) != 409 || !strings.Contains(a.err.Error(), "want pump, detectors") {
			t.Errorf("a shutter that is none: %v; want 409 with the names there are", a.err)
		}
		if s := l.k.Status(t.Context()); s.Hand != "" {
			t.Errorf("status says %s has the bench; want nobody", s.Hand)
		}
		want := []string{"operator: ann took the bench in hand", "operator: the first act of ann was refused, so the hand work ended, with the bench at rest"}
		if got := l.texts(); !slices.Equal(got, want) {
			t.Errorf("written is %q; want %q", got, want)
		}
		l.do(move(unit.Degree)) // the next one is not told of the first
	})
}

// Whoever was answered that a session is over, or was refused before it began, may ask anew at once.
func TestAnAnswerThatEndsASessionLeavesNothingOfIt(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		for range 200 {
			if a := <-l.ask(protocol.HandRequest{Act: protocol.HandWhere, ExpiresAt: &protocol.Time{Time: time.Now()}}); code(a.err) != 408 {
				t.Fatalf("a request that is late: %v; want 408", a.err)
			}
			if _, err := l.k.Stop(t.Context(), protocol.RunRequest{Run: protocol.BenchRun}); code(err) != 409 {
				t.Fatalf("a stop with nobody there: %v; want 409", err)
			}
			l.do(protocol.HandRequest{Act: protocol.HandWhere})
			l.do(protocol.HandRequest{Act: protocol.HandLeave})
			l.session = ""
		}
	})
}

func TestHandWorkIsTakenOnceTheKeeperSaysThatItServes(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		serving := make(chan struct{})
		k, _ := keeping(t, func(c *Config) {
			c.Bench = &engine.Bench{Name: "skerry", Pace: 1, Simulated: true}
			c.Serving = func() { close(serving) }
		})
		where := func(to chan<- error) {
			k.Hand(t.Context(), protocol.HandRequest{Act: protocol.HandWhere, Who: "ann"}, func(_ protocol.HandReply, err error) { to <- err })
		}
		answers := make(chan error, 1)
		where(answers)
		if err := <-answers; code(err) != 503 {
			t.Error("hand work was taken before anybody serves; want 503")
		}
		ctx, cancel := context.WithCancel(t.Context())
		ended := make(chan error, 1)
		go func() { ended <- k.Run(ctx) }()
		<-serving
		where(answers)
		if err := <-answers; err != nil {
			t.Errorf("right after the word: %v; want the bench", err)
		}
		cancel()
		if err := <-ended; err != nil {
			t.Errorf("Run() = %v; want nil", err)
		}
	})
}

func TestAnUnarmedBenchIsClosedAndLookedAtAndNothingElse(t *testing.T) {
	armed := false
	lend(t, func(c *Config) { c.Armed = func(time.Time) bool { return armed } }, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
		angle, value := unit.Degree, 1.0
		for _, q := range []protocol.HandRequest{
			look(time.Second), move(angle), {Act: protocol.HandShutter, Shutter: "pump", Open: yes()}, {Act: protocol.HandTake},
			{Act: protocol.HandHome, Axis: "arm"}, {Act: protocol.HandSet, Setting: "delay", Value: &value, Unit: "ns"},
		} {
			if a := <-l.ask(q); code(a.err) != 403 {
				t.Errorf("%s: %v; want 403", q.Act, a.err)
			}
		}
		l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: new(bool)})
		l.do(protocol.HandRequest{Act: protocol.HandRest})
		l.do(protocol.HandRequest{Act: protocol.HandStay})
		armed = true
		l.do(look(time.Second))
	})
}

func TestASilentPersonIsTakenForGone(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		for _, name := range []string{"pump", "detectors"} {
			l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: name, Open: yes()})
		}
		time.Sleep(handLease - time.Second)
		synctest.Wait()
		if !l.isOpen("pump") {
			t.Error("the pump was closed before the time was over")
		}
		l.do(protocol.HandRequest{Act: protocol.HandStay})
		time.Sleep(handLease - time.Second)
		synctest.Wait()
		if !l.isOpen("pump") {
			t.Error("a word did not renew the time")
		}
		time.Sleep(2 * time.Second)
		l.atRest()
		if a := <-l.ask(protocol.HandRequest{Act: protocol.HandStay}); code(a.err) != 409 || !strings.Contains(a.err.Error(), "no such session") {
			t.Errorf("asked after that: %v; want 409", a.err)
		}
		texts := l.texts()
		if got := texts[len(texts)-1]; got != "operator: nothing was asked for 2 min, so the hand work of ann ended, with the bench at rest" {
			t.Errorf("written: %q", got)
		}
	})
}

func TestSomebodyWatchesTheLightWhileNobodyLooks(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "detectors", Open: yes()})
		l.mu.Lock()
		l.rate = 2e5
		l.mu.Unlock()
		time.Sleep(handWatch + time.Second)
		l.atRest()
		texts := l.texts()
		if got := texts[len(texts)-1]; !strings.Contains(got, "while nobody looked: one counts 2e+05 /s, above its trip rate of 1e+05 /s; the detectors were protected") {
			t.Errorf("written: %q", got)
		}
		if a := <-l.ask(look(time.Second)); code(a.err) != 409 || !strings.Contains(a.err.Error(), "above its trip rate") {
			t.Errorf("a look: %v; want the trip told", a.err)
		}
	})
}

func TestOnePersonAtATimeAndRunsWaitForThem(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
		if a := <-l.ask(protocol.HandRequest{Act: protocol.HandWhere, Session: "another", Who: "bob"}); code(a.err) != 409 || !strings.Contains(a.err.Error(), "ann has the bench under their hand since") {
			t.Errorf("bob: %v; want 409 that names ann", a.err)
		}
		if s := l.k.Status(t.Context()); s.Hand != "ann" {
			t.Errorf("status: in the hand of %q; want ann", s.Hand)
		}
		run, err := l.k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k"})
		if err != nil {
			t.Fatal(err)
		}
		l.do(move(unit.Degree)) // the session goes on
		if s := l.k.Status(t.Context()); s.Run != "" || !slices.Equal(s.Queue, []protocol.RunID{run.Run}) {
			t.Errorf("status %+v; want the run in the queue", s)
		}
		l.do(protocol.HandRequest{Act: protocol.HandLeave})
		l.session = ""
		synctest.Wait()
		for range 100 {
			time.Sleep(time.Second)
			if row, err := l.book.Run(t.Context(), run.Run); err != nil || row.State == protocol.Finished {
				break
			}
		}
		row, err := l.book.Run(t.Context(), run.Run)
		if err != nil || row.State != protocol.Finished {
			t.Errorf("the run is %s (%s), %v; want it finished after the hand was taken off", row.State, row.Reason, err)
		}
		l.do(protocol.HandRequest{Act: protocol.HandWhere}) // and the bench is free again
	})
}

func TestARunHasTheBenchToItself(t *testing.T) {
	lend(t, func(c *Config) {
		c.Plan = aLongPlan
	}, func(t *testing.T, l *lending) {
		run, err := l.k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k"})
		if err != nil {
			t.Fatal(err)
		}
		time.Sleep(time.Minute)
		if a := <-l.ask(protocol.HandRequest{Act: protocol.HandWhere}); code(a.err) != 409 || !strings.Contains(a.err.Error(), string(run.Run)+" is running") {
			t.Errorf("during a run: %v; want 409 that names it", a.err)
		}
		if _, err := l.k.Hold(t.Context(), protocol.RunRequest{Run: run.Run}); err != nil {
			t.Fatal(err)
		}
		if a := <-l.ask(protocol.HandRequest{Act: protocol.HandWhere}); code(a.err) != 409 || !strings.Contains(a.err.Error(), "is holding") {
			t.Errorf("during a hold: %v; want 409", a.err)
		}
		if _, err := l.k.Stop(t.Context(), protocol.RunRequest{Run: run.Run}); err != nil {
			t.Fatal(err)
		}
		synctest.Wait()
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
	})
}

func aLongPlan(text string, _ time.Time, _ func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
	dwell := scan.Dwell{Time: time.Hour, Slice: time.Minute}
	return scan.Plan{Title: text, Dwell: dwell, Points: []scan.Point{{}}, Repeat: scan.Repeat{Times: 1}}, nil
}

func TestRestAndStopInterruptWhatGoesOn(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: yes()})
		moving := l.ask(move(90 * unit.Degree))
		time.Sleep(10 * time.Second)
		began := time.Now()
		l.do(protocol.HandRequest{Act: protocol.HandRest})
		if took := time.Since(began); took > time.Second {
			t.Errorf("rest took %s; want it within a second", took)
		}
		l.atRest()
		if a := <-moving; code(a.err) != 503 || !strings.Contains(a.err.Error(), "moved arm from 0.0000 deg to 90 deg: interrupted by ann") {
			t.Errorf("the move was answered %v; want that it was interrupted", a.err)
		}
		l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: yes()})
		looking := l.ask(look(50 * time.Second))
		time.Sleep(10 * time.Second)
		began = time.Now()
		r, err := l.k.Stop(t.Context(), protocol.RunRequest{Run: protocol.BenchRun, Who: "bob"})
		if err != nil || r.State != protocol.Stopped || !r.Recorded || time.Since(began) > time.Second {
			t.Errorf("Stop() = %+v, %v after %s; want it done and written within a second", r, err, time.Since(began))
		}
		l.atRest()
		if a := <-looking; code(a.err) != 503 || !strings.Contains(a.err.Error(), "interrupted by bob") {
			t.Errorf("the look was answered %v; want that bob interrupted it", a.err)
		}
		want := []string{"operator: ann took the bench in hand", "operator: ann opened pump", "trouble: ann moved arm from 0.0000 deg to 90 deg: interrupted by ann", "operator: ann brought the bench to rest",
			"operator: ann opened pump", "trouble: ann looked, gate 50 s: interrupted by bob", "operator: bob ended the hand work of ann, with the bench at rest"}
		if got := l.texts(); !slices.Equal(got, want) {
			t.Errorf("written: %q\nwant %q", got, want)
		}
	})
}

func TestWithoutRoomToWriteTheBenchGoesToRest(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
		l.book.fill(true)
		r := l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: yes()})
		if r.Recorded || !strings.Contains(r.Text, "nothing can be written, so the bench is at rest") || r.Shutters[0].Open {
			t.Errorf("%+v; want it told that it was done, not recorded, and undone", r)
		}
		l.atRest()
		if a := <-l.ask(move(unit.Degree)); code(a.err) != 503 || l.at != 0 {
			t.Errorf("a move: %v, and the arm stands at %s; want it refused", a.err, l.at)
		}
		l.book.fill(false)
		l.do(move(unit.Degree))
		want := []string{"operator: ann took the bench in hand", "operator: ann opened pump", "operator: ann moved arm from 0.0000 deg to 1 deg, where it stands at 1.0000 deg"}
		if got := l.texts(); !slices.Equal(got, want) {
			t.Errorf("written: %q\nwant %q", got, want)
		}
	})
}

// countedLines stand in for the lines of a bench.
type countedLines struct {
	mu    sync.Mutex
	letGo bool
}

func (c *countedLines) set(letGo bool) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.letGo = letGo
}
func (c *countedLines) Release(context.Context) error { c.set(true); return nil }
func (c *countedLines) Take()                         { c.set(false) }

func TestLinesThatWereLetGoAreTakenByAPersonOnly(t *testing.T) {
	lines := &countedLines{}
	lend(t, func(c *Config) { c.Hand.Lines = lines }, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
		if r := l.do(protocol.HandRequest{Act: protocol.HandRelease}); !r.LetGo || !lines.letGo {
			t.Errorf("%+v; want the lines let go", r)
		}
		if _, err := l.k.Start(t.Context(), protocol.StartRequest{Recipe: "title: a", Key: "k"}); err != nil {
			t.Fatal(err)
		}
		time.Sleep(time.Hour)
		if s := l.k.Status(t.Context()); !lines.letGo || s.Hand != "ann" || s.Run != "" {
			t.Errorf("after an hour the lines are let go: %v, status %+v; want the other program left alone", lines.letGo, s)
		}
		l.session = "" // ann's terminal is gone, and bob comes
		if r := l.do(protocol.HandRequest{Act: protocol.HandTake, Who: "bob"}); r.LetGo || lines.letGo || r.Session == "" || !strings.Contains(r.Text, "everything stands as it was left") {
			t.Errorf("%+v; want the lines taken", r)
		}
		if s := l.k.Status(t.Context()); s.Hand != "bob" {
			t.Errorf("in the hand of %s; want bob", s.Hand)
		}
	})
}

func TestTheEndOfTheProgramEndsHandWorkAtRest(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: yes()})
		looking := l.ask(look(50 * time.Second))
		time.Sleep(time.Second)
		if err := l.stop(); err != nil {
			t.Fatal(err)
		}
		l.atRest()
		if a := <-looking; a.err == nil {
			t.Error("the look was answered as done")
		}
		if a := <-l.ask(look(time.Second)); code(a.err) != 503 {
			t.Errorf("asked after the end: %v; want 503", a.err)
		}
		texts := l.texts()
		if got := texts[len(texts)-1]; !strings.Contains(got, "the program was told to end, and the hand work of ann with it, with the bench at rest") {
			t.Errorf("written: %q", got)
		}
	})
}

func TestTheEndOfTheProgramLeavesLinesThatWereLetGo(t *testing.T) {
	lines := &countedLines{}
	lend(t, func(c *Config) { c.Hand.Lines = lines }, func(t *testing.T, l *lending) {
		l.do(protocol.HandRequest{Act: protocol.HandWhere})
		l.do(protocol.HandRequest{Act: protocol.HandRelease})
		if err := l.stop(); err != nil {
			t.Fatal(err)
		}
		if texts := l.texts(); !lines.letGo || !strings.HasSuffix(texts[len(texts)-1], "with the lines still another program's") {
			t.Errorf("let go: %v, written: %q; want the other program left alone", lines.letGo, texts[len(texts)-1])
		}
	})
}

func TestABugInHandWorkEndsAtRestAndIsAnswered(t *testing.T) {
	var failed error
	lend(t, nil, func(t *testing.T, l *lending) {
		l.broken = true
		l.do(protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: yes()})
		l.mu.Lock()
		l.bug = true
		l.mu.Unlock()
		if a := <-l.ask(look(time.Second)); code(a.err) != 500 {
			t.Errorf("answered %v; want 500", a.err)
		}
		synctest.Wait()
		failed = l.stop()
		l.atRest()
		texts := l.texts()
		if got := texts[len(texts)-1]; !strings.HasPrefix(got, "trouble: a bug in this program ended the hand work of ann: a bug of the test's") {
			t.Errorf("written: %q", got)
		}
	})
	if failed == nil || !strings.Contains(failed.Error(), "panic: a bug of the test's") {
		t.Errorf("Run() = %v; want the bug", failed)
	}
}

func TestHandWorkThatWasCutShortIsToldAtTheNextStart(t *testing.T) {
	lend(t, nil, func(t *testing.T, l *lending) {
		if err := l.k.benchEvent(t.Context(), protocol.OperatorDid, "ann took the bench in hand", map[string]any{"who": "ann", handDetail: handBegins}); err != nil {
			t.Fatal(err)
		}
		if err := l.k.benchEvent(t.Context(), protocol.OperatorDid, "the queue was reordered by bob", nil); err != nil {
			t.Fatal(err)
		}
		for range 2 { // and told once
			if err := l.k.tellCutHand(t.Context()); err != nil {
				t.Fatal(err)
			}
		}
		texts := l.texts()
		if want := "interrupted: interrupted: the program ended during the hand work of ann; what was being done then is not written"; len(texts) != 3 || texts[2] != want {
			t.Errorf("written: %q; want %q once", texts, want)
		}
	})
}
