//go:build unix

package main

import (
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/daemon/nighttest"
	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/scan/engine"
	"gemel/scan/recipe"
	"gemel/sim/instruments"
)

var (
	kills    = flag.Int("kills", 0, "how often to kill, a quarter of it at random times and the rest evenly at the named steps; 0: a few times")
	killSeed = flag.Uint64("kill.seed", 1, "seed of the places and times of the kills")
)

// steps are all places to die that have a name: the engine's, the logbook's and the courier's.
var steps = append(slices.Clone(engine.Steps), "committed", "publishing", "published")

// death is where a life of the daemon ends: at the Nth passing of a step, or some time after the
// daemon serves.
type death struct {
	step  engine.Step
	nth   int
	after time.Duration
}

func (d death) String() string {
	if d.step != "" {
		return fmt.Sprintf("%s:%d", d.step, d.nth)
	}
	return d.after.String()
}

// drawDeath picks a passing that a life reaches soon: some steps come several times a reading.
func drawDeath(rng *rand.Rand, step engine.Step) death {
	most := 6
	switch step {
	case engine.StepGated, engine.StepWriting, engine.StepWritten, "committed", "publishing", "published":
		most = 12
	case engine.StepRested, engine.StepAnswered:
		most = 2
	}
	return death{step: step, nth: 1 + rng.IntN(most)}
}

// killRecipe has everything that the engine decides, in little: passes, darks, references,
// refinement and a result.
const killRecipe = `
title: Killed over and over
sweep:
  - {axis: signal_arm, at: 2.864 deg}
  - {axis: idler_arm, around: 2.864 deg, span: 0.8 deg, step: 0.2 deg}
dwell: {time: 20 ms, slice: 10 ms}
repeat: {times: 2, as: passes}
dark: {every: 10 points, dwell: 20 ms, also: [start, end]}
reference: {axes: [idler_arm], on: [top], at: {signal_arm: 2.864 deg, idler_arm: 2.864 deg}, every: 5 points, dwell: 20 ms, also: [end], otherwise: note}
refine: {along: idler_arm, of: pairs, around: maximum, span: 0.1 deg, step: 0.05 deg, at_most: 4 points, within: 20 min}
trouble: {retries: 3, then: hold}
result: {kind: drift}
`

// Each campaign is one data folder and one world. The long form is many, since a story of fifty kills
// can still be read when something is wrong with it.
func TestTheDaemonKilledAnywhereLosesAndDoublesNothing(t *testing.T) {
	rng := rand.New(rand.NewPCG(*killSeed, 1))
	if *kills == 0 {
		few := []engine.Step{engine.StepWriting, engine.StepGated, "published"}
		if testing.Short() {
			few = few[:1]
		}
		campaign(t, *killSeed, append(drawDeaths(rng, len(few), few), drawDeaths(rng, 1, nil)...))
		return
	}
	random := *kills / 4
	deaths := append(drawDeaths(rng, *kills-random, steps), drawDeaths(rng, random, nil)...)
	rng.Shuffle(len(deaths), func(i, j int) { deaths[i], deaths[j] = deaths[j], deaths[i] })
	died := map[engine.Step]int{}
	for some := range slices.Chunk(deaths, 50) {
		for _, d := range some {
			died[d.step]++
		}
		t.Run("from "+some[0].String(), func(t *testing.T) {
			t.Parallel()
			campaign(t, *killSeed, some)
		})
	}
	t.Logf("%d kills: %v; those without a step at random times", len(deaths), died)
}

// drawDeaths draws n deaths, evenly at these steps; without any at random times.
func drawDeaths(rng *rand.Rand, n int, at []engine.Step) (all []death) {
	for i := range n {
		if len(at) > 0 {
			all = append(all, drawDeath(rng, at[i%len(at)]))
		} else {
			all = append(all, death{after: time.Duration(rng.Int64N(int64(2500 * time.Millisecond)))})
		}
	}
	return all
}

// aftermath is how long the bytes that a process sent before its death may take to do their work,
// and its death to be noticed.
const aftermath = 20 * time.Millisecond

// campaign lets one daemon after another die on the same data folder and the same living
// instruments, run after run until all deaths were died, and then judges the whole time line: the
// instruments' ledger, the journal in the order of its commits, and what one follower received.
//
// The clock of the bench is 1, so the three share it. A journal entry's moment is when its body was
// made, which is before its commit: so what the judge says about "durable before the next gate" is
// proved by the kills at "writing" and "written", and "durable before published" by a look into the
// logbook at each arrival.
func campaign(t *testing.T, seed uint64, deaths []death) {
	t.Helper()
	dir := t.TempDir()
	c := &killing{t: t, ended: map[protocol.RunID]bool{}, dir: dir, data: filepath.Join(dir, "data"), listen: port(t)}
	c.bench = quick(t, dir)
	c.recipe = killRecipe
	lines := filepath.Join(dir, "lines")
	sim, ledger := simulate(t, c.bench, lines, "")
	c.args = []string{"--bench", c.bench, "--data", c.data, "--lines", lines, "--nats-listen", c.listen}

	began := time.Now()
	for i, d := range deaths {
		c.life(&d)
		if t.Failed() {
			t.Fatalf("in life %d, %s, of %v", i+1, d, deaths)
		}
	}
	c.life(nil)
	quit(t, sim)

	f, err := bench.Load(c.bench)
	if err != nil {
		t.Fatal(err)
	}
	facts := nighttest.FactsOf(f)
	r, err := recipe.Parse("kill.yaml", []byte(c.recipe))
	if err != nil {
		t.Fatal(err)
	}
	plan, err := r.Plan(f.Facts())
	if err != nil {
		t.Fatal(err)
	}
	facts.CaughtUp = true
	journal, runs := c.journal()
	for _, run := range runs {
		facts.Plans[run] = plan
	}
	line := nighttest.Merge(nighttest.World(ledger.all(t)), journal, c.stream, c.process)
	if wrong := nighttest.Judge(line, facts); len(wrong) > 0 {
		wrong = append(wrong[:min(len(wrong), 15)], "deaths: "+fmt.Sprint(deaths))
		file := filepath.Join(t.ArtifactDir(), "story.txt")
		story := nighttest.Result{Line: line}
		writeFile(t, file, story.Story())
		t.Errorf("the judge says (-kill.seed %d; the whole story with -artifacts):\n  %s", seed, strings.Join(wrong, "\n  "))
	}
	if !slices.ContainsFunc(journal, refinedBy) {
		t.Error("no refinement added a point")
	}
	mustNotice(t, journal, ledger.all(t), c, facts)
	t.Logf("%d kills over %d runs, %d journal entries, %d records of the world, in %s", len(deaths), len(runs), len(journal), len(ledger.all(t)), time.Since(began).Round(100*time.Millisecond))
}

// refinedBy says whether an entry added points to a sweep.
func refinedBy(m nighttest.Moment) bool {
	var points protocol.Points
	return m.Journal.Kind == protocol.PointEntry && json.Unmarshal(m.Journal.Body, &points) == nil && points.Refined > 0 && len(points.Points) > 0
}

// mustNotice takes one thing at a time out of a time line that the judge found flawless, since a
// check that cannot fail is none.
func mustNotice(t *testing.T, journal []nighttest.Moment, records []instruments.Record, c *killing, facts nighttest.Facts) {
	t.Helper()
	world := nighttest.World(records)
	reading := slices.IndexFunc(journal, func(m nighttest.Moment) bool { return m.Journal.Kind == protocol.ReadingEntry })
	interruption := slices.IndexFunc(journal, func(m nighttest.Moment) bool { return kindOf(*m.Journal) == protocol.Interrupted })
	closed := slices.IndexFunc(world, func(m nighttest.Moment) bool {
		return m.World.Kind == instruments.GateClosed && m.World.Gate.SetS > 0.005
	})
	// The last start before the last gate: what follows it was done by nobody.
	last := slices.IndexFunc(world, func(m nighttest.Moment) bool { return m.World.Kind == instruments.GateOpened })
	for i, m := range world {
		if m.World.Kind == instruments.GateOpened && m.At.After(world[last].At) {
			last = i
		}
	}
	start := 0
	for i, m := range c.process {
		if m.Process.What == nighttest.Started && m.At.Before(world[last].At) {
			start = i
		}
	}
	for name, line := range map[string][]nighttest.Moment{
		"a reading is lost":            nighttest.Merge(world, without(journal, reading), c.stream, c.process),
		"a reading is doubled":         nighttest.Merge(world, slices.Insert(slices.Clone(journal), reading, journal[reading]), c.stream, c.process),
		"a gate is invented":           nighttest.Merge(without(world, closed), journal, c.stream, c.process),
		"an interruption is not told":  nighttest.Merge(world, without(journal, interruption), c.stream, c.process),
		"an entry is not published":    nighttest.Merge(world, journal, without(c.stream, len(c.stream)/2), c.process),
		"an entry is published twice":  nighttest.Merge(world, journal, slices.Insert(slices.Clone(c.stream), 1, c.stream[1]), c.process),
		"a process acts after it died": nighttest.Merge(world, journal, c.stream, without(c.process, start)),
	} {
		if len(nighttest.Judge(line, facts)) == 0 {
			t.Errorf("%s, and the judge does not notice", name)
		}
	}
}

func without(list []nighttest.Moment, i int) []nighttest.Moment {
	if i < 0 {
		return nil
	}
	return slices.Delete(slices.Clone(list), i, i+1)
}

type killing struct {
	t                                *testing.T
	dir, data, bench, recipe, listen string
	args                             []string
	key                              int              // the last that was asked for
	pending                          bool             // and not answered yet
	queue                            []protocol.RunID // that are not over, in their order
	ended                            map[protocol.RunID]bool
	disturbs                         bool // this life holds and resumes what runs

	process, stream []nighttest.Moment
	follower        *client.Client
	arrived         chan protocol.Entry
	mu              sync.Mutex // guards stream
}

// follow starts the one follower, which lives through all the daemon's deaths, and looks for each
// entry in the logbook as it arrives.
func (c *killing) follow() {
	var err error
	if c.follower, err = client.ConnectFolder(c.data, protocol.WatchRole); err != nil {
		c.t.Fatal(err)
	}
	book, err := logbook.OpenReadOnly(filepath.Join(c.data, "logbook.db"))
	if err != nil {
		c.t.Fatal(err)
	}
	c.arrived = make(chan protocol.Entry, 100000)
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan struct{})
	c.t.Cleanup(func() {
		cancel()
		<-done
		c.follower.Close()
		_ = book.Close()
	})
	go func() {
		defer close(done)
		for e, err := range c.follower.Follow(ctx, "", 1) {
			if err != nil {
				if ctx.Err() == nil {
					c.t.Errorf("the follower: %v", err)
				}
				continue
			}
			at := time.Now().UTC()
			if _, found, err := book.Position(ctx, e.Run, e.Sequence); err == nil && !found {
				c.t.Errorf("entry %s arrived and is not in the logbook", e.ID())
			} else if err != nil && ctx.Err() == nil {
				c.t.Errorf("entry %s: %v", e.ID(), err)
			}
			c.mu.Lock()
			c.stream = append(c.stream, nighttest.Moment{At: at, Stream: &e})
			c.mu.Unlock()
			c.arrived <- e
		}
	}()
}

// note puts what happened to the process on the time line.
func (c *killing) note(what nighttest.ProcessKind, at time.Time) {
	if n := len(c.process); n > 0 && !at.After(c.process[n-1].At) {
		at = c.process[n-1].At.Add(1)
	}
	c.process = append(c.process, nighttest.Moment{At: at.UTC(), Process: &nighttest.Process{What: what, Run: c.run()}})
}

// life is one daemon, from its start to its death; without one, until the run is final.
func (c *killing) life(d *death) {
	t := c.t
	t.Helper()
	var env []string
	if d != nil && d.step != "" {
		env = []string{"GEMEL_KILL_AT=" + d.String()}
	}
	c.note(nighttest.Started, time.Now())
	p, serving := serve(t, env, c.args...)
	if serving && d != nil && d.step == "" {
		timer := time.AfterFunc(d.after, func() { p.signal(syscall.SIGKILL) })
		defer timer.Stop()
	}
	if serving && c.follower == nil {
		c.follow()
	}
	c.disturbs = d != nil && d.step == engine.StepAnswered
	for serving && c.alive(p) {
		switch {
		case c.pending, c.key == 0, d != nil && len(c.queue) < 2:
			c.start(p)
		case len(c.queue) > 0:
			c.untilOver(p)
		default:
			serving = false
		}
	}
	if d == nil {
		p.signal(syscall.SIGTERM)
		if code := p.wait(); code != exitDone {
			t.Errorf("serve ended with code %d after SIGTERM\n%s", code, p.err)
		}
		return
	}
	p.wait()
	status := p.cmd.ProcessState.Sys().(syscall.WaitStatus)
	if !status.Signaled() || status.Signal() != syscall.SIGKILL {
		t.Errorf("the daemon ended by itself: %s\n%s", p.cmd.ProcessState, p.err)
	}
	c.note(nighttest.Killed, p.endedAt.Add(aftermath))
}

func (c *killing) alive(p *program) bool {
	select {
	case <-p.ended:
		return false
	default:
		return true
	}
}

// ask sends a request as somebody who does not know that the daemon may die meanwhile.
func (c *killing) ask(p *program, do func(context.Context, *client.Client) error) error {
	ctx, cancel := context.WithTimeout(c.t.Context(), patience)
	defer cancel()
	go func() {
		select {
		case <-p.ended:
			cancel()
		case <-ctx.Done():
		}
	}()
	cl, err := client.ConnectFolder(c.data, protocol.ControlRole)
	if err != nil {
		return err
	}
	defer cl.Close()
	return do(ctx, cl)
}

// run is the one whose turn it is.
func (c *killing) run() protocol.RunID {
	if len(c.queue) == 0 {
		return ""
	}
	return c.queue[0]
}

// start asks for a run. A request that died with the daemon is asked again in the next life, under
// the same key.
func (c *killing) start(p *program) {
	if !c.pending {
		c.key++
		c.pending = true
	}
	err := c.ask(p, func(ctx context.Context, cl *client.Client) error {
		r, err := cl.Start(ctx, protocol.StartRequest{Recipe: c.recipe, Key: fmt.Sprint("kill-", c.key), Who: "the harness"})
		if err == nil {
			c.pending = false
			if !c.ended[r.Run] {
				c.queue = append(c.queue, r.Run)
			}
		}
		return err
	})
	if err != nil {
		c.mustBeDead(p, "start", err)
	}
}

// mustBeDead accepts an error only from a daemon that died.
func (c *killing) mustBeDead(p *program, what string, err error) {
	c.t.Helper()
	if _, refused := errors.AsType[*protocol.Refusal](err); refused && what != "start" {
		return // the run is over, or does not hold: an answer
	}
	select {
	case <-p.ended:
	case <-time.After(5 * time.Second):
		c.t.Fatalf("%s: %v", what, err)
	}
}

// disturb holds the run and lets it go on: requests to die at.
func (c *killing) disturb(p *program) {
	if c.request(p, "hold", (*client.Client).Hold) {
		c.request(p, "resume", (*client.Client).Resume)
	}
}

func (c *killing) request(p *program, verb string, do func(*client.Client, context.Context, protocol.RunRequest) (protocol.RunReply, error)) bool {
	err := c.ask(p, func(ctx context.Context, cl *client.Client) error {
		_, err := do(cl, ctx, protocol.RunRequest{Run: c.run(), Who: "the harness"})
		return err
	})
	if err != nil {
		c.mustBeDead(p, verb, err)
	}
	return err == nil
}

// untilOver reads what arrives until a run's end, or the daemon's.
func (c *killing) untilOver(p *program) {
	deadline := time.After(patience)
	for {
		select {
		case e := <-c.arrived:
			if kindOf(e) == protocol.Ended {
				c.ended[e.Run] = true
				c.queue = slices.DeleteFunc(c.queue, func(r protocol.RunID) bool { return r == e.Run })
				return
			}
			if e.Run != c.run() {
				continue
			}
			if c.disturbs && e.Kind == protocol.ReadingEntry {
				c.disturb(p)
			}
			var ev protocol.Event
			if e.Kind == protocol.EventEntry && json.Unmarshal(e.Body, &ev) == nil && slices.Contains(ev.Causes, protocol.ByOperator) {
				// The daemon died between hold and resume; nobody clears a person's hold but a person.
				c.request(p, "resume", (*client.Client).Resume)
			}
		case <-p.ended:
			return
		case <-deadline:
			out := must(c.t, "status", "--data", c.data)
			c.t.Fatalf("no run is over after %s: %s\n%s", patience, out, p.err)
		}
	}
}

// journal reads the journal in the order of its commits. An entry's moment is when its body was
// made, or the moment of the entry before, if somebody else's entry was made later and committed
// earlier.
func (c *killing) journal() (moments []nighttest.Moment, runs []protocol.RunID) {
	t := c.t
	t.Helper()
	must(t, "check", "--data", c.data)
	book, err := logbook.OpenReadOnly(filepath.Join(c.data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	entries, err := book.After(t.Context(), 0, 1_000_000)
	if err != nil {
		t.Fatal(err)
	}
	var last time.Time
	for _, e := range entries {
		head := headOf(t, e.Entry)
		if head.At.After(last) {
			last = head.At.Time
		}
		moments = append(moments, nighttest.Moment{At: last, Journal: &e.Entry})
	}
	rows, err := book.Runs(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for _, row := range rows {
		runs = append(runs, row.Run)
		if row.State != protocol.Finished {
			t.Errorf("run %s is %s (%s); want finished", row.Run, row.State, row.Reason)
		}
	}
	if len(rows) != c.key {
		t.Errorf("%d runs are in the logbook; %d keys were asked for", len(rows), c.key)
	}
	return moments, runs
}
