package main

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"golang.org/x/term"

	"gemel/daemon/crew"
	"gemel/protocol"
)

// liveEvery is the least time between two looks, and stayEvery the time between two words to a
// daemon whose lines are let go: without a word it takes the person for gone.
const (
	liveEvery = 200 * time.Millisecond
	stayEvery = 30 * time.Second
)

// handLive is a person at the keyboard.
type handLive struct {
	hold    *handHold
	screen  handScreen
	act     chan protocol.HandRequest // to the one who asks, one after another
	urgent  chan protocol.HandRequest // to the one who does not wait
	answers chan handAnswer
	busy    bool // something was asked and not answered
	next    *protocol.HandRequest
	asked   time.Time // when the last look, or stay, was asked for
	typing  []rune
	escaped bool     // the beginning of an arrow key came
	before  []string // lines typed earlier
	at      int      // which of them is shown; len(before): none
}

type handAnswer struct {
	q     protocol.HandRequest
	reply protocol.HandReply
	err   error
}

// live shows rates and takes acts from the keyboard until the person leaves.
func (h *handHold) live(ctx context.Context, con *console, keyboard *os.File) error {
	l := &handLive{hold: h, act: make(chan protocol.HandRequest, 1), urgent: make(chan protocol.HandRequest, 4), answers: make(chan handAnswer, 8)}
	old, err := term.MakeRaw(int(keyboard.Fd()))
	if err != nil {
		return fmt.Errorf("terminal: %w", err)
	}
	fmt.Fprint(con.err, "\x1b[?1049h") // a page of its own, so that what was there before comes back
	defer func() {
		fmt.Fprint(con.err, "\x1b[?1049l\r\x1b[K") // whatever the terminal makes of it, the shell gets a line of its own
		_ = term.Restore(int(keyboard.Fd()), old)
	}()
	keys := make(chan rune, 64)
	readers := crew.New(ctx, nil) // nobody waits for it: a read of a keyboard cannot be ended
	readers.Go("keyboard", func(ctx context.Context) error { return readKeys(ctx, keyboard, keys) })
	defer readers.Stop()
	asks := crew.New(ctx, nil)
	defer func() {
		asks.Stop()
		_ = asks.Wait()
	}()
	for name, from := range map[string]chan protocol.HandRequest{"acts": l.act, "urgent acts": l.urgent} {
		asks.Go(name, func(ctx context.Context) error { return l.asking(ctx, from) })
	}
	l.screen.said = []string{"type help for what can be done, leave for the end"}
	return l.loop(ctx, con, keyboard, keys)
}

func readKeys(ctx context.Context, from io.Reader, keys chan<- rune) error {
	in := bufio.NewReader(from)
	for {
		r, _, err := in.ReadRune()
		if err != nil {
			close(keys)
			return nil
		}
		select {
		case keys <- r:
		case <-ctx.Done():
			return nil
		}
	}
}

func (l *handLive) asking(ctx context.Context, from chan protocol.HandRequest) error {
	for {
		select {
		case <-ctx.Done():
			return nil
		case q := <-from:
			within, cancel := context.WithTimeout(ctx, handTime)
			reply, err := l.hold.client.Hand(within, q)
			cancel()
			select {
			case l.answers <- handAnswer{q, reply, err}:
			case <-ctx.Done():
				return nil
			}
		}
	}
}

func (l *handLive) loop(ctx context.Context, con *console, keyboard *os.File, keys <-chan rune) error {
	tick := time.NewTicker(liveEvery / 2)
	defer tick.Stop()
	drawn := ""
	for {
		l.advance()
		if text := l.draw(keyboard); text != drawn {
			drawn = text
			fmt.Fprint(con.err, text)
		}
		select {
		case <-ctx.Done():
			return nil
		case r, open := <-keys:
			if !open {
				return nil // the terminal is gone
			}
			if leave := l.key(r); leave {
				return nil
			}
		case a := <-l.answers:
			if err := l.answered(a); err != nil {
				return err
			}
		case <-tick.C:
		}
	}
}

// advance asks for what is due: what was typed, else a look.
func (l *handLive) advance() {
	switch {
	case l.busy:
	case l.next != nil:
		q := *l.next
		l.next = nil
		l.ask(l.act, q)
	case l.hold.last.LetGo:
		if time.Since(l.asked) >= stayEvery {
			l.ask(l.act, protocol.HandRequest{Act: protocol.HandStay})
		}
	case time.Since(l.asked) >= liveEvery:
		l.ask(l.act, protocol.HandRequest{Act: protocol.HandLook, Gate: protocol.Seconds(l.hold.gate), Live: true})
	}
}

func (l *handLive) ask(to chan protocol.HandRequest, q protocol.HandRequest) {
	l.busy, l.asked = true, time.Now()
	to <- l.hold.fill(q)
}

func (l *handLive) answered(a handAnswer) error {
	if a.q.Act != protocol.HandRest {
		l.busy = false
	}
	live := a.q.Live || a.q.Act == protocol.HandStay
	if !live {
		l.screen.doing = ""
	}
	if refused, is := errors.AsType[*protocol.Refusal](a.err); is {
		if strings.HasPrefix(refused.Problem.Error, "no such session") {
			return refused
		}
		l.screen.said = []string{refused.Problem.Error}
		if live {
			l.asked = time.Now().Add(time.Second) // not the same refusal five times a second
		}
		return nil
	}
	if a.err != nil {
		l.screen.said = []string{"the daemon does not answer: " + a.err.Error()}
		l.asked = time.Now().Add(time.Second)
		return nil
	}
	l.hold.last = a.reply
	if a.reply.Look != nil {
		l.screen.look = a.reply.Look
	}
	if !live {
		l.screen.said = []string{a.reply.Text}
	}
	return nil
}

// Keys of a terminal in raw mode.
const (
	keyEnd       = 3 // Ctrl-C
	keyEOF       = 4
	keyBackspace = 8
	keyKill      = 21 // Ctrl-U
	keyEscape    = 27
	keyDelete    = 127
)

// key takes one key. It says whether the person leaves.
func (l *handLive) key(r rune) (leave bool) {
	if l.escaped {
		l.sequence(r)
		return false
	}
	switch {
	case r == keyEnd, r == keyEOF:
		return true
	case r == '\r' || r == '\n':
		text := strings.TrimSpace(string(l.typing))
		l.typing = nil
		if text != "" {
			l.before = append(l.before, text)
		}
		l.at = len(l.before)
		return l.typed(text)
	case r == keyBackspace || r == keyDelete:
		l.typing = l.typing[:max(0, len(l.typing)-1)]
	case r == keyKill:
		l.typing = nil
	case r == keyEscape:
		l.escaped = true
	case r >= ' ':
		l.typing = append(l.typing, r)
	}
	return false
}

// sequence takes the rest of what an arrow key sends: up and down bring back what was typed before.
func (l *handLive) sequence(r rune) {
	if r == '[' || r == 'O' || r >= '0' && r <= '9' || r == ';' {
		return
	}
	l.escaped = false
	switch r {
	case 'A':
		l.at = max(0, l.at-1)
	case 'B':
		l.at = min(len(l.before), l.at+1)
	default:
		return
	}
	l.typing = nil
	if l.at < len(l.before) {
		l.typing = []rune(l.before[l.at])
	}
}

// typed takes a whole line.
func (l *handLive) typed(text string) (leave bool) {
	if text == "" {
		return false
	}
	if said, is, err := l.hold.own(text); is {
		if l.screen.said = said; err != nil {
			l.screen.said = []string{err.Error()}
		}
		return false
	}
	q, err := l.hold.parse(text)
	switch {
	case err != nil:
		l.screen.said = []string{err.Error()}
	case q.Act == protocol.HandLeave:
		return true
	case q.Act == protocol.HandRest:
		l.next = nil
		l.screen.doing = "rest …"
		select {
		case l.urgent <- l.hold.fill(q):
		default: // enough of them are on their way
		}
	case l.screen.doing != "":
		l.screen.said = []string{text + " was not taken: the act before goes on; rest ends it"}
	default:
		l.next = &q
		l.screen.doing = text + " …"
	}
	return false
}

// draw writes the page from its top, each line to its end, and nothing beyond.
func (l *handLive) draw(keyboard *os.File) string {
	width, height, err := term.GetSize(int(keyboard.Fd()))
	if err != nil {
		width, height = 80, 24
	}
	s := &l.screen
	s.head = fmt.Sprintf("%s, gate %.9g s", l.hold.client.Bench(), l.hold.gate.Seconds())
	if l.hold.last.LetGo {
		s.head = l.hold.client.Bench() + ": the lines are another program's; take brings them back"
		s.look = nil
	}
	s.stands, s.typing = standing(l.hold.last), string(l.typing)
	lines := s.lines(width, height)
	return "\x1b[H" + strings.Join(lines, "\x1b[K\r\n") + "\x1b[K\x1b[J"
}
