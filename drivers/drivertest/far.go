package drivertest

import (
	"bytes"
	"context"
	"os"
	"sync"
	"time"
)

// Far is the far end of a line in a test: it cuts what a driver sends into lines, has them
// answered by a function, and spoils answers as it is told. It is meant for instruments of a few
// lines, written from a manual beside the test.
type Far struct {
	EndsWith string          // of what the driver sends; "\n" if empty
	Says     string          // ends each answer; "\n" if empty
	AtOnce   map[byte]func() // bytes that act as soon as they come, without an end of line
	// Answer answers one line; "" says nothing. It is called from one goroutine.
	Answer func(text string) string
	// Chatter and Banner are what comes unasked, and after a restart; empty: never.
	Chatter, Banner string
	// Restarted, if not nil, is told of a restart.
	Restarted func()

	mu      sync.Mutex
	end     *End
	pulled  bool
	planned map[int]fault // by the number of the answer
	said    int
	heard   []string
}

type fault struct {
	kind  string
	delay time.Duration
}

// Open plugs a driver in.
func (f *Far) Open(context.Context) (Port, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.pulled {
		return nil, os.ErrNotExist
	}
	near, far := Cable()
	f.end = far
	go f.serve(far)
	return near, nil
}

func (f *Far) serve(end *End) {
	sep := []byte(f.EndsWith)
	if len(sep) == 0 {
		sep = []byte("\n")
	}
	var text []byte
	b := make([]byte, 256)
	for {
		n, err := end.Read(b)
		if err != nil {
			return
		}
		for _, c := range b[:n] {
			if act, ok := f.AtOnce[c]; ok {
				f.note(string(c))
				act()
				continue
			}
			text = append(text, c)
			if !bytes.HasSuffix(text, sep) {
				continue
			}
			heard := string(text[:len(text)-len(sep)])
			text = text[:0]
			f.note(heard)
			if answer := f.Answer(heard); answer != "" {
				f.answer(end, answer)
			}
		}
	}
}

func (f *Far) note(text string) {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.heard = append(f.heard, text)
}

// Heard returns every line, and byte that acts at once, that came so far.
func (f *Far) Heard() []string {
	f.mu.Lock()
	defer f.mu.Unlock()
	return append([]string(nil), f.heard...)
}

func (f *Far) answer(end *End, text string) {
	says := f.Says
	if says == "" {
		says = "\n"
	}
	f.mu.Lock()
	wrong := f.planned[f.said]
	delete(f.planned, f.said)
	f.said++
	f.mu.Unlock()
	whole := []byte(text + says)
	switch wrong.kind {
	case "miss":
		return
	case "late":
		time.AfterFunc(wrong.delay, func() { _, _ = end.Write(whole) })
		return
	case "garble":
		// One digit or letter becomes another; the line still has its end.
		i := len(text) / 2
		whole[i] ^= 3
	case "double":
		whole = append(whole, whole...)
	}
	_, _ = end.Write(whole)
}

// Say sends something unasked.
func (f *Far) Say(text string) {
	f.mu.Lock()
	end := f.end
	f.mu.Unlock()
	if end != nil {
		_, _ = end.Write([]byte(text))
	}
}

func (f *Far) plan(after int, wrong fault) {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.planned == nil {
		f.planned = map[int]fault{}
	}
	f.planned[f.said+after] = wrong
}

// Pending says how many planned faults have not happened yet, so that a test can be sure it
// tested something.
func (f *Far) Pending() int {
	f.mu.Lock()
	defer f.mu.Unlock()
	return len(f.planned)
}

// HangUp pulls the plug; the driver cannot be plugged in until Plug.
func (f *Far) HangUp() {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.pulled = true
	if f.end != nil {
		_ = f.end.Close()
	}
}

// Plug lets the driver in again.
func (f *Far) Plug() {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.pulled = false
}

// Wire returns the hooks of this far end.
func (f *Far) Wire() Wire {
	w := Wire{
		Miss:    func(after int) { f.plan(after, fault{kind: "miss"}) },
		Garble:  func(after int) { f.plan(after, fault{kind: "garble"}) },
		Double:  func(after int) { f.plan(after, fault{kind: "double"}) },
		Late:    func(after int, by time.Duration) { f.plan(after, fault{"late", by}) },
		Unplug:  f.HangUp,
		Plug:    f.Plug,
		Pending: f.Pending,
	}
	says := f.Says
	if says == "" {
		says = "\n"
	}
	if f.Chatter != "" {
		w.Unasked = func() { f.Say(f.Chatter + says) }
	}
	w.Restart = func() {
		if f.Restarted != nil {
			f.Restarted()
		}
		if f.Banner != "" {
			f.Say(f.Banner + says)
		}
	}
	return w
}
