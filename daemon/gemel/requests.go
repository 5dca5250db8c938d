package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"strings"
	"sync"
	"time"

	"gemel/daemon/crew"
	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
)

// remoteFlags say which daemon is meant: the one of a data folder, or one by URL.
type remoteFlags struct {
	Data  string `default:"gemel-data" placeholder:"DIR" help:"Data folder of the daemon on this machine."`
	NATS  string `name:"nats" placeholder:"URL" help:"Another machine's NATS; needs --creds and --on."`
	Creds string `placeholder:"FILE" help:"Credentials for --nats."`
	On    string `placeholder:"BENCH" help:"Bench behind --nats."`
	JSON  bool   `name:"json" help:"Print JSON."`

	patience time.Duration // more than a request usually gets
}

// connect finds the daemon.
func (f remoteFlags) connect(role string) (*client.Client, error) {
	if f.NATS == "" {
		cl, err := client.ConnectFolder(f.Data, role)
		if errors.Is(err, client.ErrNotRunning) || errors.Is(err, client.ErrGone) {
			err = fmt.Errorf("%w; start one with gemel serve --bench FILE, or name the folder of one that runs with --data", err)
		}
		return cl, err
	}
	if f.Creds == "" || f.On == "" {
		return nil, errUse{errors.New("--nats needs --creds FILE and --on BENCH")}
	}
	return client.Connect(client.Options{URL: f.NATS, Creds: f.Creds, Bench: f.On, Name: "gemel"})
}

// requestTime bounds a request, and is its expiry: one that arrives later does nothing.
const requestTime = 20 * time.Second

// sliceTime bounds a request that is answered when the open slice ends.
const sliceTime = 10 * time.Minute

func (f remoteFlags) with(ctx context.Context, role string, do func(context.Context, *client.Client) error) error {
	c, err := f.connect(role)
	if err != nil {
		return err
	}
	defer c.Close()
	within, cancel := context.WithTimeout(ctx, max(f.patience, requestTime))
	defer cancel()
	err = do(within, c)
	if r, ok := errors.AsType[*protocol.Refusal](err); ok && len(r.Findings) > 0 {
		return &strict.Error{Findings: r.Findings}
	}
	return err
}

// findings prints what is wrong with files as JSON where JSON was asked for.
func (c *console) findings(err error, asJSON bool) error {
	e, ok := errors.AsType[*strict.Error](err)
	if !ok || !asJSON {
		return err
	}
	if err := c.json(map[string]any{"findings": e.Findings}); err != nil {
		return err
	}
	return errNotFinished
}

func (c *console) json(v any) error { return json.NewEncoder(c.out).Encode(v) }

type startCommand struct {
	remoteFlags
	Recipe string `placeholder:"FILE" help:"Recipe to send." xor:"recipe"`
	Name   string `placeholder:"NAME" help:"Name of a recipe in the daemon's folder." xor:"recipe"`
	Key    string `help:"The same key twice is one run; made up if not given."`
}

func (startCommand) Help() string {
	return "Example:\n  gemel start --recipe configs/demo-recipe.yaml"
}

func (c *startCommand) Run(ctx context.Context, con *console) error {
	q := protocol.StartRequest{RecipeName: c.Name, Key: orElse(c.Key, newKey()), Who: whoami()}
	if (c.Recipe == "") == (c.Name == "") {
		return errUse{errors.New("want --recipe FILE or --name NAME")}
	}
	if c.Recipe != "" {
		text, err := strict.ReadFile(c.Recipe)
		if err != nil {
			return err
		}
		q.Recipe = string(text)
	}
	return con.findings(c.start(ctx, con, q), c.JSON)
}

func (c *startCommand) start(ctx context.Context, con *console, q protocol.StartRequest) error {
	err := c.with(ctx, protocol.ControlRole, func(ctx context.Context, cl *client.Client) error {
		r, err := cl.Start(ctx, q)
		if err != nil {
			return err
		}
		if c.JSON {
			return con.json(r)
		}
		fmt.Fprintf(con.out, "queued as %s\n", r.Run)
		return nil
	})
	if e, ok := errors.AsType[*strict.Error](err); ok && c.Recipe != "" {
		for i := range e.Findings { // the daemon knows the text, and not where it is from
			e.Findings[i].File = c.Recipe
		}
	}
	return err
}

// runFlags name a run, or leave it to be the current one.
type runFlags struct {
	remoteFlags
	Which string `arg:"" optional:"" name:"run" help:"The run; without it the current one."`
}

// ask sends a request. goesOn says in words what was asked of a run that runs on: was is how it
// stood before.
func (c *runFlags) ask(ctx context.Context, con *console, do func(*client.Client, context.Context, protocol.RunRequest) (protocol.RunReply, error), goesOn func(was protocol.State) string) error {
	return c.with(ctx, protocol.ControlRole, func(ctx context.Context, cl *client.Client) error {
		s, err := cl.Status(ctx)
		if err != nil {
			return err
		}
		run := protocol.RunID(c.Which)
		if run == "" {
			switch active := s.Run != "" && !s.State.Final(); {
			case active:
				run = s.Run
			case s.Hand != "":
				run = protocol.BenchRun // whose stop is the end of hand work
			default:
				return errors.New("no run is active; name one, or see gemel status")
			}
		}
		r, err := do(cl, ctx, protocol.RunRequest{Run: run, Who: whoami()})
		if err != nil {
			return err
		}
		if c.JSON {
			return errors.Join(con.json(r), notAtRest(r))
		}
		was := s.State
		if s.Run != r.Run {
			was = ""
		}
		switch {
		case r.Run == protocol.BenchRun:
			fmt.Fprint(con.out, "nobody has the bench in hand any more"+map[bool]string{true: "; it is at rest"}[r.Rest == ""])
		case r.State == protocol.Running:
			fmt.Fprintf(con.out, "run %s %s", r.Run, goesOn(was))
		default:
			fmt.Fprintf(con.out, "run %s is %s", r.Run, r.State)
		}
		for i, cause := range r.Causes {
			fmt.Fprintf(con.out, "%s%s", map[bool]string{true: " because of ", false: ", "}[i == 0], cause)
		}
		if !r.Recorded {
			fmt.Fprint(con.out, "; done, not recorded: nothing can be written at the moment")
		}
		if r.Rest != "" {
			fmt.Fprintf(con.out, "; THE REST STATE WAS NOT REACHED: %s", r.Rest)
		}
		fmt.Fprintln(con.out)
		return notAtRest(r)
	})
}

// notAtRest makes the exit code 1 where the bench may still be hot; what was asked for is done.
func notAtRest(r protocol.RunReply) error {
	if r.Rest != "" {
		return errNotFinished
	}
	return nil
}

func stillRuns(protocol.State) string { return "is running" }

type stopCommand struct {
	runFlags
	AfterPoint bool `help:"Let the open point end, and take the closing darks, backgrounds and references first."`
}

func (stopCommand) Help() string { return "Example:\n  gemel stop\n  gemel stop --after-point" }
func (c *stopCommand) Run(ctx context.Context, con *console) error {
	if c.AfterPoint {
		c.patience = sliceTime
		return c.ask(ctx, con, (*client.Client).StopAfterPoint, func(protocol.State) string {
			return "stops after this point, with its closing readings"
		})
	}
	return c.ask(ctx, con, (*client.Client).Stop, stillRuns)
}

type holdCommand struct{ runFlags }

func (holdCommand) Help() string { return "Example:\n  gemel hold" }
func (c *holdCommand) Run(ctx context.Context, con *console) error {
	return c.ask(ctx, con, (*client.Client).Hold, stillRuns)
}

type resumeCommand struct{ runFlags }

func (resumeCommand) Help() string {
	return "Example:\n  gemel resume\n\nWhere a controller lost its zero, this is your word that its axes may search for it now: be there."
}
func (c *resumeCommand) Run(ctx context.Context, con *console) error {
	return c.ask(ctx, con, (*client.Client).Resume, func(was protocol.State) string {
		if was == protocol.Running {
			return "is running; nothing held it"
		}
		return "goes on"
	})
}

type statusCommand struct{ remoteFlags }

func (statusCommand) Help() string { return "Example:\n  gemel status --json" }
func (c *statusCommand) Run(ctx context.Context, con *console) error {
	return c.with(ctx, protocol.WatchRole, func(ctx context.Context, cl *client.Client) error {
		s, err := cl.Status(ctx)
		if err != nil {
			return err
		}
		if c.JSON {
			return con.json(s)
		}
		text := sentence(s)
		if idle := s.Run == "" || s.State.Final(); idle && s.Hand == "" && len(s.Waiting) == 0 {
			text += " Nothing waits; gemel start --recipe FILE begins a run."
		}
		if s.Run != "" && s.State.Final() && s.Hand == "" {
			text += fmt.Sprintf("\ngemel report --run %s tells its night.", s.Run)
		}
		fmt.Fprintln(con.out, text+beside(s))
		return nil
	})
}

type followCommand struct {
	remoteFlags
	Which string `arg:"" optional:"" name:"run" help:"The run; without it everything on the bench."`
	All   bool   `help:"Begin with what the stream holds already."`
	Once  bool   `help:"End when the run named has ended."`
	Give  string `name:"give-up" placeholder:"TIME" help:"End with code 1 when nothing is heard of the daemon for so long."`
}

func (followCommand) Help() string {
	return `Example:
  gemel follow --all --json | head
  gemel follow --once --give-up "2 min" 20310203-213000-5f0c1a2b

With --json each line is one journal entry as it was published. When the daemon falls silent for five seconds, a line on standard error says so, and another when it is back; following goes on across both, with no entry lost or doubled, because a daemon that died goes on with its run when it is started again. Whoever must not wait for that says --give-up.`
}

// silent is how long the beat, which comes once a second, may be missing before that is told.
const silent = 5 * time.Second

func (c *followCommand) Run(ctx context.Context, con *console) error {
	patience := time.Duration(0)
	if c.Give != "" {
		var err error
		if patience, err = unit.ParseDuration(c.Give); err != nil || patience < silent {
			return errUse{errors.Join(fmt.Errorf("--give-up %q; want %s or more", c.Give, unit.Span(silent)), err)}
		}
	}
	cl, err := c.connect(protocol.WatchRole)
	if err != nil {
		return err
	}
	defer cl.Close()
	if !c.JSON {
		c.now(ctx, con, cl)
	}
	aside := &aside{to: con.err}
	g := crew.New(ctx, nil)
	g.Go("journal", func(ctx context.Context) error {
		defer g.Stop()
		return c.journal(ctx, con, aside, cl)
	})
	g.Go("beat", func(ctx context.Context) error { return listen(ctx, aside, cl, patience) })
	return g.Wait()
}

// now tells how the bench is and what waits, before the entries begin.
func (c *followCommand) now(ctx context.Context, con *console, cl *client.Client) {
	within, cancel := context.WithTimeout(ctx, silent)
	defer cancel()
	s, err := cl.Status(within)
	if err != nil {
		fmt.Fprintf(con.err, "gemel: %v; following all the same\n", err)
		return
	}
	fmt.Fprintln(con.err, sentence(s))
}

// aside is where two actors write lines that belong to no entry.
type aside struct {
	mu sync.Mutex
	to io.Writer
}

func (a *aside) say(v ...any) {
	a.mu.Lock()
	defer a.mu.Unlock()
	fmt.Fprintln(a.to, append([]any{"gemel:"}, v...)...)
}

func (c *followCommand) journal(ctx context.Context, con *console, aside *aside, cl *client.Client) error {
	from := int64(0)
	if c.All {
		from = 1
	}
	for e, err := range cl.Follow(ctx, protocol.RunID(c.Which), from) {
		if gap, ok := errors.AsType[*client.Gap](err); ok {
			aside.say(gap)
			continue
		}
		if other, ok := errors.AsType[*client.Replaced](err); ok {
			aside.say(other)
			continue
		}
		if err != nil {
			return err
		}
		if c.JSON {
			if _, err := fmt.Fprintf(con.out, "%s\n", e.Body); err != nil {
				return err
			}
		} else if err := tell(con, e); err != nil {
			return err
		}
		if c.Once && ended(e) {
			return nil
		}
	}
	return nil
}

// listen tells when the daemon falls silent and when it is heard again. patience 0 has no end.
func listen(ctx context.Context, aside *aside, cl *client.Client, patience time.Duration) error {
	lost := false
	for _, err := range cl.Beats(ctx, silent) {
		silence, ok := errors.AsType[*client.Silence](err)
		switch {
		case err == nil:
			if lost {
				aside.say("the daemon is heard again")
			}
			lost = false
		case !ok:
			return err
		case patience > 0 && silence.For >= patience:
			return fmt.Errorf("%w; given up", silence)
		case !lost:
			lost = true
			aside.say(fmt.Sprintf("%v; still following", silence))
		}
	}
	return nil
}

func ended(e protocol.Entry) bool {
	var ev protocol.Event
	return e.Kind == protocol.EventEntry && json.Unmarshal(e.Body, &ev) == nil && ev.Kind == protocol.Ended
}

// tell prints one entry as a line for people.
func tell(con *console, e protocol.Entry) error {
	switch e.Kind {
	case protocol.ReadingEntry:
		var r protocol.Reading
		if err := json.Unmarshal(e.Body, &r); err != nil {
			return err
		}
		what := string(r.Kind)
		if r.Point != nil {
			what = fmt.Sprintf("point %d visit %d", *r.Point, *r.Visit)
		}
		fmt.Fprintf(con.out, "%s  %s %d  %s:", r.EndedAt.Local().Format("15:04:05"), r.Run, r.Sequence, what)
		for _, a := range r.Angles {
			fmt.Fprintf(con.out, " %s %s deg", a.Axis, a.After.Fixed(3))
		}
		for _, n := range r.Counts {
			if n.Channel == r.Tag {
				fmt.Fprintf(con.out, " gate %d by %s", n.Counts, n.Channel) // a number, and no amount
				continue
			}
			fmt.Fprintf(con.out, " %s %d", n.Channel, n.Counts)
			if s := r.Gate.Duration().Seconds(); s > 0 {
				fmt.Fprintf(con.out, " (%.4g /s)", float64(n.Counts)/s)
			}
		}
		fmt.Fprintf(con.out, " in %.4g s", r.Gate.Duration().Seconds())
		if !r.Accepted {
			fmt.Fprintf(con.out, "; set aside: %s", r.Reason)
		}
	case protocol.EventEntry:
		var ev protocol.Event
		if err := json.Unmarshal(e.Body, &ev); err != nil {
			return err
		}
		fmt.Fprintf(con.out, "%s  %s %d  %s", ev.At.Local().Format("15:04:05"), ev.Run, ev.Sequence, ev.Text)
	case protocol.PointEntry:
		var p protocol.Points
		if err := json.Unmarshal(e.Body, &p); err != nil {
			return err
		}
		fmt.Fprintf(con.out, "%s  %s %d  %s decided (%s)", p.At.Local().Format("15:04:05"), p.Run, p.Sequence, count(len(p.Points), "point"), p.Grounds)
	case protocol.ResultEntry:
		text, err := resultLine(e.Body)
		if err != nil {
			return err
		}
		fmt.Fprint(con.out, text)
	default:
		fmt.Fprintf(con.out, "%s %d  %s", e.Run, e.Sequence, e.Kind)
	}
	_, err := fmt.Fprintln(con.out)
	return err
}

// resultLine says a result in a line; gemel report tells all of it.
func resultLine(body []byte) (string, error) {
	var r struct {
		protocol.Head
		Kind    string   `json:"kind"`
		Axis    string   `json:"axis"`
		Value   *float64 `json:"value"`
		U       *float64 `json:"standard_uncertainty"`
		Unit    string   `json:"unit"`
		Because []string `json:"because"`
	}
	if err := json.Unmarshal(body, &r); err != nil {
		return "", err
	}
	what := strings.ReplaceAll(r.Kind, "_", " ")
	if r.Axis != "" {
		what += " along " + r.Axis
	}
	text := fmt.Sprintf("%s  %s %d  result: %s: ", r.At.Local().Format("15:04:05"), r.Run, r.Sequence, what)
	if r.Value == nil {
		return text + "no value, because " + strings.Join(r.Because, "; "), nil
	}
	text += fmt.Sprintf("%.6g", *r.Value)
	if r.U != nil {
		text += fmt.Sprintf(" with standard uncertainty %.2g", *r.U)
	}
	if r.Unit != "1" {
		text += " " + r.Unit
	}
	return text, nil
}
