// Command gemel runs angle scans on a photon-pair bench, all night and unattended. This package
// only reads the command line and wires rooms together; one file a command.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"
	"time"

	"github.com/alecthomas/kong"

	"gemel/protocol/strict"
)

// version is the program's; a release build sets it.
var version = "0.1.0-dev"

// Exit codes, part of the contract: only a run that finished is a success.
const (
	exitDone     = 0
	exitFailed   = 1
	exitWrongUse = 2
)

type commands struct {
	Run      runCommand      `cmd:"" help:"Run one recipe from start to result, in this process."`
	Serve    serveCommand    `cmd:"" help:"Serve a bench: runs are started and stopped by other programs."`
	Check    checkCommand    `cmd:"" help:"Check a bench file, a recipe, a data folder; touch nothing."`
	Start    startCommand    `cmd:"" help:"Ask a serving daemon to run a recipe."`
	Stop     stopCommand     `cmd:"" help:"Stop a run for ever; the bench comes to rest first."`
	Hold     holdCommand     `cmd:"" help:"Make a run wait, with the bench at rest."`
	Resume   resumeCommand   `cmd:"" help:"Let a run go on that a person, a trouble or a restart holds."`
	Status   statusCommand   `cmd:"" help:"Say how the bench is."`
	Queue    queueCommand    `cmd:"" help:"List the runs that wait, reorder them, withdraw one."`
	Follow   followCommand   `cmd:"" help:"Print what happens, as it happens."`
	Arm      armCommand      `cmd:"" help:"Allow remote starts on this bench for a while."`
	Hand     handCommand     `cmd:"" help:"Take the bench in hand: live rates, one axis, shutters, settings, lines."`
	Note     noteCommand     `cmd:"" help:"Write a note into the logbook."`
	Export   exportCommand   `cmd:"" help:"Write a run's readings as CSV."`
	Report   reportCommand   `cmd:"" help:"Work out a run's result from the logbook alone."`
	Forecast forecastCommand `cmd:"" help:"Say what a recipe will do, how long it takes and what it will be worth; move nothing."`
	Predict  predictCommand  `cmd:"" help:"Work out where the photons of a pair go, how wide, and how it moves."`
	Sim      simCommand      `cmd:"" help:"Offer a bench's virtual instruments alone, to any program."`

	Version kong.VersionFlag `help:"Print the version and end."`
}

const description = `gemel drives a photon-pair bench through recipes of angle steps and dwells, writes every reading down before it goes on, and leaves results in the morning.

It is no safety function. Pump beams blind, ultraviolet is invisible, stages pinch, room light destroys photomultipliers under high voltage. Interlocks are hard-wired and act without it.`

func main() { os.Exit(Main(os.Args[1:], os.Stdin, os.Stdout, os.Stderr)) }

// console is what a command talks to.
type console struct {
	in       io.Reader
	out, err io.Writer
	terminal bool // err is one
}

// Main is the whole program but for the exit.
func Main(args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	var c commands
	exited := -1
	parser, err := kong.New(&c, kong.Name("gemel"), kong.Description(description), kong.Writers(stdout, stderr),
		kong.Exit(func(code int) { exited = code }), kong.Vars{"version": version}, kong.UsageOnError(),
		kong.ConfigureHelp(kong.HelpOptions{Compact: true, WrapUpperBound: 100}))
	if err != nil {
		fmt.Fprintln(stderr, "gemel:", err)
		return exitWrongUse
	}
	parsed, err := parser.Parse(args)
	if exited >= 0 { // --help or --version
		return exited
	}
	if err != nil {
		fmt.Fprintf(stderr, "gemel: %v; see gemel --help\n", err)
		return exitWrongUse
	}
	// The first signal asks for the rest state; one that comes later ends the wait for it. What comes
	// within a second of the first is the same wish: a key that bounces, or a shell that passes it on.
	// A terminal that is closed asks for it, too, and one who stopped reading must not end a night.
	ctx, cancel := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM, syscall.SIGHUP)
	signal.Ignore(syscall.SIGPIPE)
	defer cancel()
	context.AfterFunc(ctx, func() { time.AfterFunc(sameWish, cancel) })
	con := &console{in: stdin, out: stdout, err: stderr, terminal: isTerminal(stderr)}
	parsed.BindTo(ctx, (*context.Context)(nil))
	err = parsed.Run(con)
	return con.report(err)
}

// sameWish is how long after the first signal another one adds nothing to it.
const sameWish = time.Second

// errNotFinished makes the exit code 1 without another word: the run has told its story.
var errNotFinished = errors.New("not finished")

// errUse makes the exit code 2.
type errUse struct{ error }

func (e errUse) Unwrap() error { return e.error }

func (c *console) report(err error) int {
	if err == nil {
		return exitDone
	}
	if errors.Is(err, errNotFinished) || errors.Is(err, syscall.EPIPE) { // whoever read has seen enough
		return exitFailed
	}
	if e, ok := errors.AsType[*strict.Error](err); ok {
		for _, f := range e.Findings {
			fmt.Fprintln(c.err, f)
		}
		fmt.Fprintf(c.err, "gemel: %s; nothing was moved or written\n", count(len(e.Findings), "finding"))
		return exitFailed
	}
	fmt.Fprintln(c.err, "gemel:", err)
	if _, ok := errors.AsType[errUse](err); ok {
		return exitWrongUse
	}
	return exitFailed
}

func count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}
