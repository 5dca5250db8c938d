package drivertest

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"os"
	"strconv"
	"strings"
	"sync"
	"time"
)

// Step is one direction of an exchange.
type Step struct {
	Send bool // from the program to the instrument
	Text []byte
	Line int // of the file, 0 if there is none
}

// Parse reads exchanges: a line "> text" is sent, "< text" comes back, "#" begins a comment, and
// escapes are Go's, such as \n and \x03.
func Parse(text string) ([]Step, error) {
	var steps []Step
	for i, l := range strings.Split(text, "\n") {
		if strings.HasPrefix(l, "#") || strings.TrimSpace(l) == "" {
			continue
		}
		if !strings.HasPrefix(l, "> ") && !strings.HasPrefix(l, "< ") {
			return nil, fmt.Errorf("line %d: %q; want \"> \", \"< \" or \"#\" at its beginning", i+1, l)
		}
		plain, err := strconv.Unquote(`"` + strings.ReplaceAll(l[2:], `"`, `\"`) + `"`)
		if err != nil {
			return nil, fmt.Errorf("line %d: %q: %w", i+1, l, err)
		}
		steps = append(steps, Step{Send: l[0] == '>', Text: []byte(plain), Line: i + 1})
	}
	return steps, nil
}

// Format writes exchanges as Parse reads them.
func Format(steps []Step) string {
	var b strings.Builder
	for _, s := range steps {
		q := strconv.QuoteToASCII(string(s.Text))
		q = strings.ReplaceAll(q[1:len(q)-1], `\"`, `"`)
		fmt.Fprintf(&b, "%c %s\n", map[bool]rune{true: '>', false: '<'}[s.Send], q)
	}
	return b.String()
}

// Playback is a port that plays exchanges: it expects what they send, to the byte, and gives
// back what they answer. What comes before the first thing sent waits in the input.
type Playback struct {
	mu     sync.Mutex
	steps  []Step
	sent   []byte // of the step that is being sent
	wrong  error
	end    *End // what the driver reads
	far    *End
	closed bool
}

// Play makes a playback of the exchanges.
func Play(steps []Step) *Playback {
	p := &Playback{steps: steps}
	p.end, p.far = Cable()
	p.answer()
	return p
}

// answer gives back everything up to the next thing that must be sent.
func (p *Playback) answer() {
	for len(p.steps) > 0 && !p.steps[0].Send {
		_, _ = p.far.Write(p.steps[0].Text)
		p.steps = p.steps[1:]
	}
}

// Write compares with what should be sent now.
func (p *Playback) Write(b []byte) (int, error) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.wrong != nil || p.closed {
		return 0, errors.Join(p.wrong, io.ErrClosedPipe)
	}
	p.sent = append(p.sent, b...)
	for len(p.sent) > 0 {
		if len(p.steps) == 0 {
			p.wrong = fmt.Errorf("playback: sent %q after the end", p.sent)
			return 0, p.wrong
		}
		want := p.steps[0]
		n := min(len(want.Text), len(p.sent))
		if !bytes.Equal(p.sent[:n], want.Text[:n]) {
			p.wrong = fmt.Errorf("playback: line %d: sent %q; want %q", want.Line, p.sent, want.Text)
			return 0, p.wrong
		}
		if n < len(want.Text) {
			break
		}
		p.sent = p.sent[n:]
		p.steps = p.steps[1:]
		p.answer()
	}
	return len(b), nil
}

func (p *Playback) Read(b []byte) (int, error)         { return p.end.Read(b) }
func (p *Playback) SetReadDeadline(t time.Time) error  { return p.end.SetReadDeadline(t) }
func (p *Playback) SetWriteDeadline(t time.Time) error { return nil }

// Close hangs up. It fails if something wrong was sent, or exchanges are left over.
func (p *Playback) Close() error {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.closed = true
	_ = p.end.Close()
	switch {
	case p.wrong != nil:
		return p.wrong
	case len(p.sent) > 0:
		return fmt.Errorf("playback: line %d: sent only %q; want %q", p.steps[0].Line, p.sent, p.steps[0].Text)
	case len(p.steps) > 0:
		return fmt.Errorf("playback: line %d: %d left over, the first %q", p.steps[0].Line, len(p.steps), p.steps[0].Text)
	}
	return nil
}

// Port is what Record listens to.
type Port interface {
	io.ReadWriteCloser
	SetReadDeadline(time.Time) error
	SetWriteDeadline(time.Time) error
}

// Recorder is a port that remembers what passes through it.
type Recorder struct {
	Port
	mu    sync.Mutex
	steps []Step
}

// Record listens to a port.
func Record(p Port) *Recorder { return &Recorder{Port: p} }

func (r *Recorder) Read(b []byte) (int, error) {
	n, err := r.Port.Read(b)
	r.add(false, b[:n])
	return n, err
}

func (r *Recorder) Write(b []byte) (int, error) {
	n, err := r.Port.Write(b)
	r.add(true, b[:n])
	return n, err
}

// add joins pieces of one direction, which arrive in any number, to lines.
func (r *Recorder) add(send bool, b []byte) {
	if len(b) == 0 {
		return
	}
	r.mu.Lock()
	defer r.mu.Unlock()
	if n := len(r.steps); n > 0 && r.steps[n-1].Send == send && !bytes.HasSuffix(r.steps[n-1].Text, []byte("\n")) {
		r.steps[n-1].Text = append(r.steps[n-1].Text, b...)
		return
	}
	for _, l := range bytes.SplitAfter(b, []byte("\n")) {
		if len(l) > 0 {
			r.steps = append(r.steps, Step{Send: send, Text: bytes.Clone(l)})
		}
	}
}

// Steps returns what passed so far.
func (r *Recorder) Steps() []Step {
	r.mu.Lock()
	defer r.mu.Unlock()
	return append([]Step(nil), r.steps...)
}

// PlayFile makes a playback of a file.
func PlayFile(path string) (*Playback, error) {
	text, err := os.ReadFile(path)
	if err != nil {
		return nil, err
	}
	steps, err := Parse(string(text))
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	return Play(steps), nil
}
