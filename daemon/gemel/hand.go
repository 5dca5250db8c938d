package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"strings"
	"time"

	"golang.org/x/term"

	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/protocol/unit"
)

type handCommand struct {
	remoteFlags
	Do   []string `placeholder:"ACT" sep:"none" help:"Do this and end; may be given several times. Without it a terminal is needed."`
	Gate string   `default:"0.5 s" placeholder:"TIME" help:"Gate of the live rates, in bench time."`
}

func (handCommand) Help() string {
	return `Example:
  gemel hand                                   (live rates, large; type help)
  gemel hand --do "pump open" --do "detectors open" --do "look 1 s" --do "signal_arm +0.1 deg" --do "look 1 s"

A serving daemon lends the bench to one person at a time, with no run active. Runs that are asked for meanwhile begin when the hand is taken off: by leave, by Ctrl-C, or two minutes after the last request, always in the rest state. On a real bench it needs gemel arm.`
}

// handHelp is what may be typed.
const handHelp = `AXIS 3.1 deg             move one axis to a bench angle
AXIS +0.1 deg            move it on; AXIS by -0.1 deg moves it back, AXIS to -0.1 deg goes there
pump open | pump close   the pump's shutter
detectors open | close   all detectors; a detector's name for one
SETTING 1.2 ns           give a setting a value
gate 0.5 s               gate of the live rates, and of a look without one
look 2 s                 count one gate, and write it down
note TEXT                write what you have to say into the logbook
where                    ask every device how it stands
home AXIS                let an axis search its zero: be there
rest                     everything closed and still, at once
release | take           let another program use the lines | take them again
leave                    the end, at rest; Ctrl-C does the same`

func (c *handCommand) Run(ctx context.Context, con *console) error {
	gate, err := unit.ParseDuration(c.Gate)
	if err != nil || gate <= 0 {
		return errUse{fmt.Errorf("--gate %q; want a time such as \"0.5 s\"", c.Gate)}
	}
	keyboard, typed := con.in.(*os.File)
	if typed = typed && con.terminal && !c.JSON && term.IsTerminal(int(keyboard.Fd())); !typed && len(c.Do) == 0 {
		return errUse{errors.New("no terminal to show live rates on; give acts with --do, such as --do \"look 1 s\"")}
	}
	cl, err := c.connect(protocol.ControlRole)
	if err != nil {
		return err
	}
	defer cl.Close()
	h := &handHold{client: cl, who: whoami(), gate: gate}
	if c.NATS == "" {
		h.note = func(text string) error { return writeNote(ctx, c.Data, protocol.BenchRun, text) }
	}
	defer h.leave(ctx, con)
	if _, err := h.ask(ctx, protocol.HandRequest{Act: protocol.HandWhere}); err != nil {
		return err
	}
	if len(c.Do) > 0 {
		return c.script(ctx, con, h)
	}
	return h.live(ctx, con, keyboard)
}

// script does acts one after another, and ends with the first that fails.
func (c *handCommand) script(ctx context.Context, con *console, h *handHold) error {
	for _, text := range c.Do {
		if said, is, err := h.own(text); is {
			if err != nil {
				return errUse{fmt.Errorf("--do %q: %w", text, err)}
			}
			if !c.JSON { // which is of what the daemon answers
				fmt.Fprintln(con.out, strings.Join(said, "\n"))
			}
			continue
		}
		q, err := h.parse(text)
		if err != nil {
			return errUse{fmt.Errorf("--do %q: %w", text, err)}
		}
		if q.Act == protocol.HandLeave {
			return nil
		}
		r, err := h.ask(ctx, q)
		if err != nil && interrupted(ctx, err) {
			return fmt.Errorf("stopped during %q; the bench comes to rest", text)
		}
		if err != nil {
			return err
		}
		if c.JSON {
			err = con.json(r)
		} else {
			_, err = fmt.Fprintln(con.out, told(r))
		}
		if err != nil {
			return err
		}
	}
	return nil
}

// own does what needs no daemon; is says whether the line was such an act.
func (h *handHold) own(text string) (said []string, is bool, err error) {
	name, rest, _ := strings.Cut(strings.TrimSpace(text), " ")
	switch rest = strings.TrimSpace(rest); {
	case name == "help" && rest == "":
		return strings.Split(handHelp, "\n"), true, nil
	case name == "gate":
		d, err := unit.ParseDuration(rest)
		if err != nil || d <= 0 {
			return nil, true, fmt.Errorf("gate %q; want a time such as \"0.5 s\"", rest)
		}
		h.gate = d
		return []string{"gate " + unit.Written(d)}, true, nil
	case name == "note" && rest == "":
		return nil, true, errors.New(`a note of nothing; want its text behind it`)
	case name == "note" && h.note == nil:
		return nil, true, errors.New("notes go into a logbook on this machine; want gemel note beside it")
	case name == "note":
		return []string{"noted"}, true, h.note(rest)
	}
	return nil, false, nil
}

// told is a reply as a sentence; how everything stands where that was asked.
func told(r protocol.HandReply) string {
	if r.Act == protocol.HandLook {
		return r.Text + inTheDark(r)
	}
	if r.Act != protocol.HandWhere {
		return r.Text
	}
	return strings.Join(standing(r), "\n")
}

// inTheDark says which shutters were closed while it was counted: what was counted is then no light
// of theirs.
func inTheDark(r protocol.HandReply) string {
	var closed []string
	for _, s := range r.Shutters {
		if !s.Open && s.Trouble == "" {
			closed = append(closed, s.Guards)
		}
	}
	if len(closed) == 0 {
		return ""
	}
	return "; closed all the while: " + strings.Join(closed, ", ")
}

// standing says how the bench stands, a line for each kind of thing.
func standing(r protocol.HandReply) []string {
	var axes, blades, values []string
	for _, a := range r.Axes {
		if a.Angle == nil {
			axes = append(axes, fmt.Sprintf("%s unknown (%s)", a.Axis, a.Trouble))
		} else {
			axes = append(axes, fmt.Sprintf("%s %s deg", a.Axis, a.Angle.Fixed(4)))
		}
	}
	for _, s := range r.Shutters {
		how := "closed"
		switch {
		case s.Trouble != "":
			how = "unknown (" + s.Trouble + ")"
		case s.Open:
			how = "open"
		}
		blades = append(blades, s.Guards+" "+how)
	}
	for _, list := range [][]protocol.HandValue{r.Settings, r.Sensors} {
		for _, v := range list {
			if v.Value == nil {
				values = append(values, fmt.Sprintf("%s unknown (%s)", v.Name, v.Trouble))
			} else {
				values = append(values, fmt.Sprintf("%s %.6g %s", v.Name, *v.Value, v.Unit))
			}
		}
	}
	var lines []string
	for _, words := range [][]string{axes, blades, values} {
		if len(words) > 0 {
			lines = append(lines, strings.Join(words, ", "))
		}
	}
	return lines
}

// handHold is a person's hold of a bench, from this side.
type handHold struct {
	client *client.Client
	who    string
	last   protocol.HandReply
	gate   time.Duration           // of a look that names none
	note   func(text string) error // nil: there is no logbook to write to
}

// handTime bounds one act: a search for a zero takes its time.
const handTime = 15 * time.Minute

// handExpiry is how old a request may be when its turn comes.
const handExpiry = 10 * time.Second

// ask sends one act and keeps what the reply says of the bench.
func (h *handHold) ask(ctx context.Context, q protocol.HandRequest) (protocol.HandReply, error) {
	r, err := h.send(ctx, q)
	if err == nil {
		h.last = r
	}
	return r, err
}

func (h *handHold) send(ctx context.Context, q protocol.HandRequest) (protocol.HandReply, error) {
	within, cancel := context.WithTimeout(ctx, handTime)
	defer cancel()
	return h.client.Hand(within, h.fill(q))
}

// fill makes a request one of this session.
func (h *handHold) fill(q protocol.HandRequest) protocol.HandRequest {
	q.Session, q.Who = h.last.Session, h.who
	if q.Act != protocol.HandRest && q.Act != protocol.HandLeave {
		q.ExpiresAt = &protocol.Time{Time: time.Now().Add(handExpiry)}
	}
	return q
}

// leave ends the session, though ctx has ended: Ctrl-C leads to the rest state, too.
func (h *handHold) leave(ctx context.Context, con *console) {
	if h.last.Session == "" {
		return
	}
	fresh, cancel := context.WithTimeout(context.WithoutCancel(ctx), requestTime)
	defer cancel()
	r, err := h.send(fresh, protocol.HandRequest{Act: protocol.HandLeave})
	if _, refused := errors.AsType[*protocol.Refusal](err); refused {
		return // it had ended already, at rest
	}
	if err != nil {
		fmt.Fprintf(con.err, "gemel: the daemon could not be told to rest: %v; it does so by itself, two minutes after the last request\n", err)
		return
	}
	fmt.Fprintln(con.err, r.Text)
}

// parse reads one typed act.
func (h *handHold) parse(text string) (protocol.HandRequest, error) {
	words := strings.Fields(text)
	if len(words) == 0 {
		return protocol.HandRequest{}, errors.New("nothing; want an act, such as \"look 1 s\"; see help")
	}
	name, rest := words[0], words[1:]
	if q, known, err := h.parsePlain(name, rest); known {
		return q, err
	}
	if name == "home" && len(rest) == 1 {
		return protocol.HandRequest{Act: protocol.HandHome, Axis: rest[0]}, nil
	}
	if len(rest) == 1 && (rest[0] == "open" || rest[0] == "close" || rest[0] == "closed") {
		open := rest[0] == "open"
		return protocol.HandRequest{Act: protocol.HandShutter, Shutter: name, Open: &open}, nil
	}
	for _, a := range h.last.Axes {
		if a.Axis == name {
			return parseMove(name, rest)
		}
	}
	for _, s := range h.last.Settings {
		if s.Name == name {
			return parseSet(s, rest)
		}
	}
	return protocol.HandRequest{}, fmt.Errorf("%q is no act, axis, shutter or setting here; want one of %s", name, strings.Join(h.names(), ", "))
}

// parsePlain reads the acts that name nothing of the bench.
func (h *handHold) parsePlain(name string, rest []string) (q protocol.HandRequest, known bool, err error) {
	acts := map[string]protocol.HandAct{"where": protocol.HandWhere, "rest": protocol.HandRest, "release": protocol.HandRelease, "take": protocol.HandTake, "leave": protocol.HandLeave, "quit": protocol.HandLeave}
	if act, plain := acts[name]; plain {
		if len(rest) > 0 {
			err = fmt.Errorf("%s %s; want %s alone", name, strings.Join(rest, " "), name)
		}
		return protocol.HandRequest{Act: act}, true, err
	}
	if name != "look" {
		return q, false, nil
	}
	if len(rest) == 0 && h.gate > 0 {
		return protocol.HandRequest{Act: protocol.HandLook, Gate: protocol.Seconds(h.gate)}, true, nil
	}
	gate, err := unit.ParseDuration(strings.Join(rest, " "))
	if err != nil {
		err = fmt.Errorf("look: %w", err)
	}
	return protocol.HandRequest{Act: protocol.HandLook, Gate: protocol.Seconds(gate)}, true, err
}

// parseMove tells where to, and by how much, apart: a minus may mean either.
func parseMove(axis string, rest []string) (protocol.HandRequest, error) {
	q := protocol.HandRequest{Act: protocol.HandMove, Axis: axis}
	how := ""
	if len(rest) > 0 && (rest[0] == "to" || rest[0] == "by") {
		how, rest = rest[0], rest[1:]
	}
	text := strings.Join(rest, " ")
	angle, err := unit.ParseAngle(text)
	if err != nil {
		return q, fmt.Errorf("%s: %w", axis, err)
	}
	switch {
	case how == "by" || how == "" && text[0] == '+':
		q.By = &angle
	case how == "to" || text[0] != '-':
		q.To = &angle
	default:
		return q, fmt.Errorf("%s %s may be a place or a step; want \"%s to %s\" or \"%s by %s\"", axis, text, axis, text, axis, text)
	}
	return q, nil
}

func parseSet(s protocol.HandValue, rest []string) (protocol.HandRequest, error) {
	text := strings.Join(rest, " ")
	base, _, name, err := unit.ParseAny(text)
	if err != nil {
		return protocol.HandRequest{}, fmt.Errorf("%s: %w", s.Name, err)
	}
	value, err := unit.In(base, name)
	if err != nil {
		return protocol.HandRequest{}, fmt.Errorf("%s: %w", s.Name, err)
	}
	return protocol.HandRequest{Act: protocol.HandSet, Setting: s.Name, Value: &value, Unit: name}, nil
}

// names lists what a line may begin with.
func (h *handHold) names() []string {
	names := []string{"look", "gate", "where", "rest", "release", "take", "home", "note", "help", "leave"}
	for _, a := range h.last.Axes {
		names = append(names, a.Axis)
	}
	for _, s := range h.last.Shutters {
		names = append(names, strings.Split(s.Guards, ", ")...)
	}
	for _, s := range h.last.Settings {
		names = append(names, s.Name)
	}
	return names
}
