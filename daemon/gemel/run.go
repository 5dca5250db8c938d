package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"github.com/rs/zerolog"

	"gemel/daemon/crew"
	"gemel/daemon/report"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan/engine"
)

type runCommand struct {
	benchFlags
	Recipe  string `required:"" placeholder:"FILE" help:"Recipe."`
	JSON    bool   `name:"json" help:"Print the summary as JSON."`
	Abandon bool   `help:"Stop runs for ever that an earlier call left unfinished in the data folder."`
}

func (runCommand) Help() string {
	return `Example:
  gemel run --bench configs/demo-bench.yaml --recipe configs/demo-recipe.yaml

Ctrl-C stops the run and brings the bench to rest. A run that was killed goes on with the same command. The exit code is 0 only for a run that finished.`
}

func (c *runCommand) Run(ctx context.Context, con *console) error {
	err := c.run(ctx, con)
	started, _ := errors.AsType[*startError](err)
	if err != nil && interrupted(ctx, err) && (started == nil || started.restBad == "") {
		return errors.New("stopped before anything moved")
	}
	return con.findings(err, c.JSON)
}

// interrupted says whether an error is only that a person or the system asked for the end.
func interrupted(ctx context.Context, err error) bool {
	return ctx.Err() != nil && (errors.Is(err, ctx.Err()) || errors.Is(err, context.Cause(ctx)))
}

func (c *runCommand) run(ctx context.Context, con *console) error {
	text, err := strict.ReadFile(c.Recipe)
	if err != nil {
		return err
	}
	log := newLog(con, zerolog.WarnLevel)
	if err := c.checkFirst(string(text)); err != nil {
		return err // before a folder is made or a line is opened
	}
	s, err := open(ctx, c.benchFlags, "", true, log)
	if err != nil {
		return err
	}
	defer s.close()
	con.caution(s.file)
	if err := s.refuseHopeless(ctx); err != nil {
		return err
	}
	run, err := c.choose(ctx, s, string(text))
	if err != nil {
		return err
	}
	state, err := c.execute(ctx, con, s, run)
	if err != nil {
		return err
	}
	summary, err := summarise(context.WithoutCancel(ctx), s.book, run)
	if err != nil {
		return err
	}
	summary.drop(string(s.file.Counter.Tag))
	pairs := s.file.FirstCoincidence()
	if pairs != "" {
		summary.findMost(pairs)
	}
	unsaid := summary.takeMorning(context.WithoutCancel(ctx), s.book)
	if c.JSON {
		if err := json.NewEncoder(con.out).Encode(summary); err != nil {
			return err
		}
	} else if err := con.tell(summary, pairs); err != nil {
		return err
	}
	if unsaid != nil {
		return unsaid // after what can be said
	}
	if state != protocol.Finished {
		return errNotFinished
	}
	return nil
}

// refuseHopeless ends a call before there is a run when a device is held by another program, or
// is another one: no waiting mends that, and somebody sits at the keyboard. A bench that came to
// rest has answered.
func (s *session) refuseHopeless(ctx context.Context) error {
	if s.restBad == "" {
		return nil
	}
	var hopeless []error
	for _, d := range devices(s.keeper.Bench) {
		within, cancel := context.WithTimeout(ctx, 5*time.Second)
		err := d.Connect(within)
		cancel()
		if drivers.RemedyOf(err) == drivers.GiveUp {
			hopeless = append(hopeless, err)
		}
	}
	if len(hopeless) == 0 {
		return nil // what may mend itself is the run's to wait for
	}
	return fmt.Errorf("%w; no run was begun, and the bench may not be at rest: %s", errors.Join(hopeless...), s.restBad)
}

// devices lists what a run cannot do without.
func devices(b *engine.Bench) []drivers.Device {
	var all []drivers.Device
	for _, d := range b.Detectors {
		if d.Protect != nil {
			all = append(all, d.Protect)
		}
	}
	if b.Pump != nil {
		all = append(all, b.Pump)
	}
	for _, s := range b.Stages {
		all = append(all, s)
	}
	return append(all, b.Counter)
}

// tell prints the table, and under it what gemel report prints.
func (c *console) tell(sum *summary, pairs string) error {
	if err := sum.print(c.out, pairs); err != nil {
		return err
	}
	if sum.Night == nil {
		return nil
	}
	_, err := fmt.Fprint(c.out, "\n"+report.Morning(sum.Results, *sum.Night))
	return err
}

// checkFirst works everything out that can be known without touching anything.
func (c *runCommand) checkFirst(text string) error {
	f, err := loadBench(c.Bench)
	if err != nil {
		return err
	}
	_, err = planner(f, c.Recipe)(text, time.Now(), nil)
	return err
}

// choose takes up the run that a killed call of the same command left, or asks for a new one.
func (c *runCommand) choose(ctx context.Context, s *session, text string) (protocol.RunID, error) {
	rows, err := s.book.Unfinished(ctx)
	if err != nil {
		return "", err
	}
	for _, row := range rows {
		switch {
		case c.Abandon:
			if _, err := s.keeper.Stop(ctx, protocol.RunRequest{Run: row.Run, Who: whoami()}); err != nil {
				return "", err
			}
		case row.RecipeText == text && row.BenchText == s.file.Text:
			return row.Run, nil
		default:
			return "", fmt.Errorf("run %s (%q) is unfinished in this data folder; let it go on with its own bench and recipe, give it up with --abandon, or name another --data", row.Run, row.Title)
		}
	}
	reply, err := s.keeper.Enqueue(ctx, protocol.StartRequest{Recipe: text, Key: newKey(), Who: whoami()})
	return reply.Run, err
}

// execute lets the keeper work. The end of ctx is a person's or the system's wish to stop.
func (c *runCommand) execute(ctx context.Context, con *console, s *session, run protocol.RunID) (state protocol.State, err error) {
	fated, done := s.fated(context.WithoutCancel(ctx))
	defer done()
	work := crew.New(fated, s.panicked)
	work.Go("keeper", func(ctx context.Context) error {
		var err error
		if state, err = s.keeper.RunOne(ctx, run); err == nil {
			work.Stop() // not before an error: what ends the group first is what Wait returns
		}
		return err
	})
	work.Go("progress", func(ctx context.Context) error { return con.progress(ctx, s.keeper) })
	work.Go("stop", func(inner context.Context) error {
		select {
		case <-inner.Done():
		case <-ctx.Done():
			fmt.Fprintln(con.err, "stopping: the bench comes to rest; press again only if it does not")
			within, cancel := context.WithTimeout(inner, time.Minute)
			defer cancel()
			_, err := s.keeper.Stop(within, protocol.RunRequest{Run: run, Who: "the keyboard"})
			if err != nil && inner.Err() == nil {
				return err
			}
		}
		return nil
	})
	err = work.Wait()
	if err == nil && fated.Err() != nil {
		err = context.Cause(fated)
	}
	return state, err
}

// newLog writes for people on a terminal and JSON lines elsewhere.
func newLog(con *console, level zerolog.Level) zerolog.Logger {
	if con.terminal {
		return zerolog.New(zerolog.ConsoleWriter{Out: con.err, TimeFormat: "15:04:05"}).Level(level).With().Timestamp().Logger()
	}
	return zerolog.New(con.err).Level(level).With().Timestamp().Logger()
}
