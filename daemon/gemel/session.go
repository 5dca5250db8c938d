package main

import (
	"cmp"
	"context"
	"crypto/rand"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"os/user"
	"path/filepath"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/rs/zerolog"

	"gemel/daemon/bench"
	"gemel/daemon/broker"
	"gemel/daemon/courier"
	"gemel/daemon/crew"
	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/daemon/remote"
	"gemel/daemon/report"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/recipe"
	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// benchFlags are shared by the commands that build a bench.
type benchFlags struct {
	Bench  string `required:"" placeholder:"FILE" help:"Bench file."`
	Data   string `placeholder:"DIR" help:"Data folder (the bench file's, else gemel-data)."`
	Lines  string `placeholder:"DIR" help:"Use instruments that already run: links DIR/<line name>."`
	Listen string `name:"nats-listen" placeholder:"HOST:PORT" help:"Where the broker listens (loopback, free port)."`
	Home   bool   `help:"A person is there: axes without a zero may search for it."`
}

// session is a bench brought to life: lines, virtual instruments, logbook, broker, keeper.
type session struct {
	file  *bench.File
	data  string // folder
	bench *bench.Bench
	// restBad is what of the rest state was not reached at the start; empty: the bench is at rest.
	restBad string
	book    *logbook.Book
	keeper  *keeper.Keeper
	teller  *teller // the keeper, for whoever asks how things are
	broker  *broker.Broker
	log     zerolog.Logger

	courier *courier.Courier
	crews   []*crew.Group
	cleanup []func() // run in reverse: what was started first ends last
}

func parseRecipe(name string, text []byte) (*recipe.Recipe, error) { return recipe.Parse(name, text) }

// earlierFunc finds the value of an earlier result; nil: there is no logbook to ask.
type earlierFunc = func(scan.EarlierAsk) (scan.EarlierSource, error)

// planner works recipes out for a bench.
func planner(f *bench.File, name string) func(string, time.Time, earlierFunc) (scan.Plan, error) {
	return func(text string, accepted time.Time, earlier earlierFunc) (scan.Plan, error) {
		r, err := parseRecipe(name, []byte(text))
		if err != nil {
			return scan.Plan{}, err
		}
		facts := f.Facts()
		facts.AcceptedAt = accepted.In(time.Local) // a recipe's clock is the one on the wall
		facts.Earlier = earlier
		return r.Plan(facts)
	}
}

// declared says what a bench file declares that an angle of an axis means.
func declared(benchText string, axis drivers.AxisName) (string, error) {
	f, err := bench.Parse("bench file in the logbook", []byte(benchText))
	if err != nil {
		return "", err
	}
	for _, a := range f.Axes {
		if a.Name != axis {
			continue
		}
		text := fmt.Sprintf("zero %s, sense %d", a.Mount.Zero, a.Mount.Sense)
		if a.StepsPerTurn > 0 {
			text += fmt.Sprintf(", %g steps a turn, gear %g", a.StepsPerTurn, a.Gear)
		}
		return text + fmt.Sprintf(", on %s %s", a.Controller, orElse(a.Letter, a.Address)), nil
	}
	return "", fmt.Errorf("no axis %q in the bench file", axis)
}

// axesIn lists the axes that a bench file declares.
func axesIn(benchText string) (axes []scan.Axis, err error) {
	f, err := bench.Parse("bench file in the logbook", []byte(benchText))
	if err != nil {
		return nil, err
	}
	for _, a := range f.Axes {
		axes = append(axes, a.Axis)
	}
	return axes, nil
}

// open builds and starts everything but the keeper's own work. Whatever was started is closed
// again when it fails. The first act is the rest state, because a process that died may have left
// the bench hot: before the logbook and the broker, which may refuse to come up.
// attended says that the person who gave the command is there: what an earlier call left unfinished
// goes on without another word.
func open(ctx context.Context, flags benchFlags, recipeFolder string, attended bool, log zerolog.Logger) (_ *session, err error) {
	s := &session{log: log}
	defer func() {
		if err != nil {
			s.close()
		}
	}()
	if s.file, err = bench.Load(flags.Bench); err != nil {
		return nil, err
	}
	flags.Data = orElse(flags.Data, orElse(s.file.LogbookFolder, "gemel-data"))
	s.data = flags.Data
	if flags.Lines != "" && !s.file.Simulated() {
		return nil, errUse{errors.New("--lines is for simulated benches; a real bench names its devices in the bench file")}
	}
	folder, unheld := logbook.Hold(flags.Data)
	if errors.Is(unheld, logbook.ErrLocked) { // the bench is that daemon's
		return nil, fmt.Errorf("%w; one daemon a data folder: stop it, or name another --data", unheld)
	}
	if unheld == nil {
		s.cleanup = append(s.cleanup, func() { _ = folder.Close() })
	}
	if err := s.build(ctx, flags); err != nil {
		return nil, errors.Join(unheld, err)
	}
	s.restBad = engine.Rest(ctx, &s.bench.Bench)
	defer func() {
		if err != nil {
			err = &startError{err, s.restBad}
		}
	}()
	if unheld != nil {
		return nil, unheld
	}
	if s.book, err = folder.Open(); err != nil {
		if errors.Is(err, logbook.ErrDamaged) {
			return nil, fmt.Errorf("%w; it was not written to: %s", err, afterDamage(flags.Data))
		}
		return nil, err
	}
	s.cleanup = append(s.cleanup, func() { _ = s.book.Close() })
	if s.broker, err = broker.New(broker.Config{Bench: s.file.Name, Dir: flags.Data, Listen: orElse(flags.Listen, s.file.NATSListen), Log: func(text string) { log.Warn().Msg(text) }}); err != nil {
		return nil, err
	}
	s.keeper = keeper.New(keeper.Config{
		Book: s.book, Bench: &s.bench.Bench, AtRest: s.restBad == "", BenchText: s.file.Text, Version: version, Plan: planner(s.file, "recipe"),
		Hand:   s.bench.Hand(),
		Recipe: recipesIn(recipeFolder), Armed: armedIn(flags.Data, s.file.Simulated()), MayHome: flags.Home,
		Declared:           declared,
		Axes:               axesIn,
		ResumeAfterRestart: attended || s.file.AfterRestart == bench.AfterRestartResume || s.file.AfterRestart == "" && s.file.Simulated(),
		Conclude: func(ctx context.Context, run protocol.RunID) ([]json.RawMessage, error) {
			all, err := report.All(ctx, s.book, run, report.Options{})
			if err != nil {
				return nil, err
			}
			return report.Objects(all)
		},
		Judge: func(ctx context.Context, run protocol.RunID, plan scan.Plan, set, baseline int) (engine.Verdict, error) {
			return report.Judge(ctx, s.book, run, plan, s.file, set, baseline)
		},
		Refine: func(ctx context.Context, run protocol.RunID, plan scan.Plan, round int) (engine.Refinement, error) {
			return report.Refine(ctx, s.book, run, plan, s.file, round)
		},
		Foresee: foreseer(s.file),
		Told:    s.told,
		Behind:  func() int64 { return s.courier.Behind() },
		Room:    s.book.Room(cmp.Or(s.file.LeastRoom, logbook.LeastRoom)),
		Step:    killpoint(),
	})
	s.teller = &teller{Keeper: s.keeper, book: s.book, courier: func() error { return s.courier.Trouble() }}
	return s, s.serve(ctx)
}

// startError is why a start failed after its first act, and how that left the bench.
type startError struct {
	err     error
	restBad string
}

func (e *startError) Error() string {
	if e.restBad != "" {
		return fmt.Sprintf("%v; THE REST STATE WAS NOT REACHED: %s", e.err, e.restBad)
	}
	return fmt.Sprintf("%v; the bench is at rest", e.err)
}

func (e *startError) Unwrap() error { return e.err }

// build makes the bench, and starts its lines and, behind them, its virtual instruments.
func (s *session) build(ctx context.Context, flags benchFlags) (err error) {
	options := bench.Options{Links: flags.Lines, Log: s.log, Wrap: sabotage()}
	if s.file.Simulated() && flags.Lines == "" {
		folder, err := os.MkdirTemp("", "gemel-lines-")
		if err != nil {
			return err
		}
		s.cleanup = append(s.cleanup, func() { _ = os.RemoveAll(folder) })
		if options.Virtual, err = bench.NewVirtual(s.file, bench.VirtualOptions{Folder: folder, Ledger: instruments.WriteOnly(nil), Troubles: trouble.List{}}); err != nil {
			return err
		}
	}
	if s.bench, err = bench.Build(s.file, options); err != nil {
		return err
	}
	// Lines and instruments outlive ctx: after a signal the rest state still has to be reached.
	lines := s.crew(ctx)
	for _, a := range s.bench.Actors() {
		lines.Go(a.Name, a.Run)
	}
	return nil
}

// told logs what a service's own log should say of its runs; the journal has all of it.
func (s *session) told(ev protocol.Event) {
	s.teller.hear(ev)
	switch ev.Kind {
	case protocol.Began, protocol.Held, protocol.WentOn, protocol.Interrupted, protocol.Trouble, protocol.OperatorDid, protocol.Ended:
		s.log.Info().Str("run", string(ev.Run)).Str("state", string(ev.State)).Msg(ev.Text)
	}
}

// crew starts a group that close will stop and wait for.
func (s *session) crew(ctx context.Context) *crew.Group {
	g := crew.New(context.WithoutCancel(ctx), s.panicked)
	s.crews = append(s.crews, g)
	s.cleanup = append(s.cleanup, func() {
		g.Stop()
		_ = g.Wait()
	})
	return g
}

// connect opens a connection of the daemon to its broker. What is published while the broker is
// away fails at once: nothing that moves a bench may be delivered later.
func (s *session) connect(name string) (*nats.Conn, error) {
	c, err := s.broker.Connect(name, nats.ReconnectBufSize(-1))
	if err == nil {
		s.cleanup = append(s.cleanup, c.Close)
	}
	return c, err
}

// serve starts the broker and what lives on it.
func (s *session) serve(ctx context.Context) error {
	broken := s.crew(ctx)
	broken.Go("broker", s.broker.Run)
	select {
	case <-s.broker.Ready():
	case <-broken.Context().Done():
		return broken.Wait()
	case <-time.After(20 * time.Second):
		return errors.New("broker: not ready after 20 s")
	}
	if err := s.carry(ctx); err != nil {
		return err
	}
	conn, err := s.connect("remote")
	if err != nil {
		return err
	}
	front := s.crew(ctx)
	front.Go("remote", func(ctx context.Context) error {
		return remote.Serve(ctx, conn, s.teller, remote.Config{Bench: s.file.Name, Version: version, Panicked: func(verb string, value any, stack []byte) {
			s.log.Error().Str("request", verb).Interface("panic", value).Bytes("stack", stack).Msg("a request failed by a bug in this program; the bench goes on")
		}})
	})
	front.Go("beat", func(ctx context.Context) error {
		return remote.RunBeat(ctx, conn, func() protocol.Status { return s.teller.Status(ctx) })
	})
	return s.awaitRemote(front, conn)
}

// awaitRemote returns when requests are answered, so that nobody who waited for "serving" is told
// that there is no daemon.
func (s *session) awaitRemote(front *crew.Group, conn *nats.Conn) error {
	within, cancel := context.WithTimeout(front.Context(), 20*time.Second)
	defer cancel()
	for {
		_, err := conn.RequestWithContext(within, protocol.DoSubject(s.file.Name, "status"), []byte("{}"))
		switch {
		case err == nil:
			return nil
		case within.Err() != nil:
			return fmt.Errorf("remote: no request is answered after 20 s: %w", err)
		}
		select {
		case <-within.Done():
		case <-time.After(5 * time.Millisecond):
		}
	}
}

// carry starts the courier. At the end it gets a moment for what is left; the rest waits for the
// next start.
func (s *session) carry(ctx context.Context) error {
	conn, err := s.connect("courier")
	if err != nil {
		return err
	}
	stream, err := courier.NewStream(conn, courier.StreamConfig{Bench: s.file.Name, Own: true})
	if err != nil {
		return err
	}
	if _, err := stream.Last(ctx); err != nil { // made now, so that whoever looks for it finds it
		s.log.Warn().Err(err).Msg("the stream cannot be made yet; the logbook goes on")
	}
	stream.CheckOnce()
	s.courier = courier.New(s.file.Name, s.book, onCarry(stream), func(err error) {
		if err != nil {
			s.log.Warn().Err(err).Msg("entries wait to be published; the logbook has them")
		} else {
			s.log.Info().Msg("entries are published")
		}
	})
	s.cleanup = append(s.cleanup, func() {
		within, cancel := context.WithTimeout(context.WithoutCancel(ctx), 3*time.Second)
		defer cancel()
		if err := s.courier.Finish(within); err != nil {
			s.log.Warn().Err(err).Int64("entries", s.courier.Behind()).Msg("not everything is published; the next start goes on")
		}
	})
	g := s.crew(ctx)
	g.Go("courier", s.courier.Run)
	s.book.OnAppend(onCommit(s.courier.Nudge))
	return nil
}

func (s *session) panicked(p *crew.Panic) {
	s.log.Error().Str("actor", p.Actor).Interface("panic", p.Value).Bytes("stack", p.Stack).Msg("a bug in this program; the bench is brought to rest")
}

// close ends everything in the reverse of its start: what takes requests first, the hold on the data
// folder last.
func (s *session) close() {
	for i := len(s.cleanup) - 1; i >= 0; i-- {
		s.cleanup[i]()
	}
	s.cleanup = nil
}

// fated ends with ctx, or with the failure of anything that the keeper stands on; its cause says
// which.
func (s *session) fated(ctx context.Context) (context.Context, func()) {
	fated, cancel := context.WithCancelCause(ctx)
	var stops []func() bool
	for _, g := range s.crews {
		stops = append(stops, context.AfterFunc(g.Context(), func() { cancel(fmt.Errorf("a part of the program failed: %w", context.Cause(g.Context()))) }))
	}
	return fated, func() {
		for _, stop := range stops {
			stop()
		}
		cancel(nil)
	}
}

// recipesIn reads recipes by name from one folder, and from nowhere else.
func recipesIn(folder string) func(string) (string, error) {
	if folder == "" {
		return nil
	}
	return func(name string) (string, error) {
		file := strings.TrimSuffix(name, ".yaml")
		if !protocol.IsToken(file) || !filepath.IsLocal(file) { // some names are devices, on some systems
			return "", fmt.Errorf("recipe name %.200q; want letters, digits, \"-\" and \"_\" only", name)
		}
		file = filepath.Join(folder, file+".yaml")
		// Who asks from elsewhere is not told where the folder is.
		info, err := os.Stat(file)
		switch {
		case err != nil && errors.Is(err, fs.ErrNotExist):
			return "", fmt.Errorf("no recipe %q in the folder of recipes", name)
		case err == nil && !info.Mode().IsRegular(): // opening a pipe would wait for whoever writes to it
			return "", fmt.Errorf("recipe %q is no file; want one", name)
		}
		text, err := strict.ReadFile(file)
		if path, is := errors.AsType[*fs.PathError](err); is {
			return "", fmt.Errorf("recipe %q: %w", name, path.Err)
		}
		if _, large := errors.AsType[*strict.Error](err); large {
			return "", fmt.Errorf("recipe %q is larger than %d bytes", name, strict.MaxBytes)
		}
		return string(text), err
	}
}

func orElse(text, otherwise string) string {
	if text != "" {
		return text
	}
	return otherwise
}

// newKey makes a key for one start, so that a repeated request is one run.
func newKey() string {
	b := make([]byte, 12)
	_, _ = rand.Read(b) // never fails
	return hex.EncodeToString(b)
}

// whoami names the person for the logbook.
func whoami() string {
	if u, err := user.Current(); err == nil && u.Username != "" {
		return u.Username
	}
	return "somebody at the command line"
}
