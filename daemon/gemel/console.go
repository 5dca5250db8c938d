package main

import (
	"context"
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"golang.org/x/term"

	"gemel/daemon/bench"
	"gemel/daemon/keeper"
	"gemel/protocol"
	"gemel/protocol/unit"
)

func isTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	return ok && term.IsTerminal(int(f.Fd()))
}

func loadBench(path string) (*bench.File, error) { return bench.Load(path) }

// caution says what the program is not, once, before anything moves.
func (c *console) caution(f *bench.File) {
	if f.Simulated() {
		fmt.Fprintf(c.err, "bench %s is simulated, %d bench seconds in a real one: nothing real moves, and everything recorded says so\n", f.Name, int(f.Pace()))
		return
	}
	fmt.Fprintln(c.err, "gemel is no safety function: laser class, eyewear, interlocks and high voltage are for the local laser safety officer, local codes and licensed practice; stages move without warning")
	for _, name := range f.Unprotected() {
		fmt.Fprintf(c.err, "DETECTOR %s CANNOT BE PROTECTED by this program: its bench file names no protector; room light under bias may destroy it\n", name)
	}
}

// progress tells how far the run is: one sentence that is written over on a terminal, a line now
// and then elsewhere.
func (c *console) progress(ctx context.Context, k *keeper.Keeper) error {
	every := 10 * time.Second
	if c.terminal {
		every = 200 * time.Millisecond
	}
	tick := time.NewTicker(every)
	defer tick.Stop()
	last := ""
	for {
		select {
		case <-ctx.Done():
			if c.terminal && last != "" {
				fmt.Fprint(c.err, "\r\x1b[K")
			}
			return nil
		case <-tick.C:
		}
		text := sentence(k.Status(ctx))
		if text == last {
			continue
		}
		last = text
		if c.terminal {
			fmt.Fprint(c.err, "\r\x1b[K"+text)
		} else {
			fmt.Fprintln(c.err, text)
		}
	}
}

// sentence says a status in words.
func sentence(s protocol.Status) string {
	if s.Hand != "" {
		return fmt.Sprintf("Bench %s is in the hand of %s; gemel stop ends that, at rest.", s.Bench, s.Hand) + next(s.Waiting)
	}
	if s.Run == "" {
		return fmt.Sprintf("Bench %s is idle.", s.Bench) + next(s.Waiting)
	}
	var b strings.Builder
	if s.State.Final() {
		fmt.Fprintf(&b, "Run %s, %q: %s", s.Run, s.Title, orElse(strings.TrimSuffix(asItWas(s.Reason), "."), string(s.State)))
		if s.EndedAt != nil {
			fmt.Fprintf(&b, ", at %s", s.EndedAt.Local().Format(time.DateTime))
		}
		return b.String() + "." + next(s.Waiting)
	}
	fmt.Fprintf(&b, "Run %s is %s", s.Run, s.State)
	if len(s.Causes) > 0 {
		words := make([]string, len(s.Causes))
		for i, c := range s.Causes {
			words[i] = string(c)
		}
		fmt.Fprintf(&b, " (%s)", strings.Join(words, ", "))
	}
	fmt.Fprintf(&b, " with %d of %d readings accepted", s.ReadingsAccepted, s.ReadingsPlanned)
	if s.ReadingsSetAside > 0 {
		fmt.Fprintf(&b, ", %d set aside", s.ReadingsSetAside)
	}
	b.WriteString(left(s) + ".")
	if (s.State == protocol.Holding || strings.HasPrefix(s.Reason, "waiting")) && s.Reason != "" {
		b.WriteString(" " + strings.TrimSuffix(s.Reason, ".") + ".")
	}
	if s.State == protocol.Holding {
		if s.LooksAgain != nil {
			fmt.Fprintf(&b, " It looks again by itself every %s, and goes on when that is over.", unit.Span(s.LooksAgain.Duration()))
		}
		for _, c := range s.Causes {
			if c == protocol.ByOperator || c == protocol.ByTrouble || c == protocol.ByRestart {
				b.WriteString(" It waits for a person: gemel resume, or gemel stop.")
				if c == protocol.ByTrouble {
					b.WriteString(" See to what is named first: a line or an instrument that comes back does not end this hold.")
				}
				if n := len(s.Waiting); n > 0 {
					fmt.Fprintf(&b, " Until then nothing behind it begins: %s in the queue.", count(n, "run"))
				}
				break
			}
		}
		if s.GivesUpAt != nil {
			fmt.Fprintf(&b, " If nothing ends the hold, the run fails at %s.", s.GivesUpAt.Local().Format(time.DateTime))
		}
	}
	return b.String() + next(s.Waiting)
}

// asItWas tells what a hold that was given up had been for as what it was: whether it still stands
// nobody knows.
func asItWas(reason string) string {
	return strings.Replace(reason, "; it was held: ", "; what the hold was for, when it began: ", 1)
}

// beside says what is wrong beside any run.
func beside(s protocol.Status) string {
	text := ""
	if s.BenchTrouble != "" {
		text += "\nAt the bench"
		if s.BenchTroubleAt != nil {
			text += ", " + s.BenchTroubleAt.Local().Format(time.DateTime)
		}
		text += ": " + s.BenchTrouble
	}
	if s.Unpublished != "" {
		text += fmt.Sprintf("\n%d entries are not published, the logbook has them: %s", s.Behind, s.Unpublished)
	}
	return text
}

// left says what a run still needs. Before the first reading only the dwells are known, and what is
// about them is not.
func left(s protocol.Status) string {
	taken := s.State == protocol.Running && s.ReadingsPlanned > 0 && s.ReadingsAccepted >= s.ReadingsPlanned
	switch {
	case taken:
		return "; the bench comes to rest, and the result is being worked out"
	case s.TimeLeft == nil:
		return ""
	case s.ReadingsAccepted == 0 && s.TimeLeft.Duration() < time.Minute:
		return ""
	case s.ReadingsAccepted == 0:
		return fmt.Sprintf(", at least %s left", roughly(s.TimeLeft.Duration()))
	case s.TimeLeft.Duration() < time.Second:
		return ", less than 1 s left"
	}
	return fmt.Sprintf(", about %s left", roughly(s.TimeLeft.Duration()))
}

// roughly prints a time with its two largest units.
func roughly(d time.Duration) string {
	if d = d.Round(time.Second); d >= time.Hour {
		d = d.Round(time.Minute)
	}
	return unit.Span(d)
}

// next names the runs that wait.
func next(waiting []protocol.WaitingRun) string {
	const most = 3
	var titles []string
	for _, w := range waiting[:min(len(waiting), most)] {
		titles = append(titles, fmt.Sprintf("%q", w.Title))
	}
	switch more := len(waiting) - most; {
	case len(waiting) == 0:
		return ""
	case more > 0:
		return fmt.Sprintf(" Next: %s and %d more.", strings.Join(titles, ", "), more)
	}
	return " Next: " + strings.Join(titles, ", ") + "."
}
