package instruments_test

import (
	"bufio"
	"context"
	"errors"
	"os"
	"path/filepath"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"gemel/sim/instruments"
)

// open opens the terminal behind a link as a program does that sets nothing: what arrives must be
// right all the same. Waiting is for the link of a new terminal, in real time.
func open(t *testing.T, link string) *os.File {
	t.Helper()
	deadline := time.Now().Add(5 * time.Second)
	for {
		f, err := os.OpenFile(link, os.O_RDWR|unix.O_NOCTTY|unix.O_NONBLOCK, 0)
		if err == nil {
			return f
		}
		if time.Now().After(deadline) {
			t.Fatalf("%s: %v", link, err)
		}
		time.Sleep(time.Millisecond)
	}
}

func exchange(t *testing.T, f *os.File, send, want string) {
	t.Helper()
	_ = f.SetDeadline(time.Now().Add(5 * time.Second))
	if _, err := f.Write([]byte(send)); err != nil {
		t.Fatalf("write %q: %v", send, err)
	}
	if got, err := bufio.NewReader(f).ReadString('\n'); err != nil || got != want {
		t.Fatalf("%q is answered %q, %v; want %q", send, got, err, want)
	}
}

func TestPresentOnAPseudoTerminal(t *testing.T) {
	w := world(t, 1, "")
	c := counter(t, w, nil)
	link := filepath.Join(t.TempDir(), "counter")
	ctx, cancel := context.WithCancelCause(t.Context())
	ready, done := make(chan string, 1), make(chan error, 1)
	go func() { done <- instruments.Present(ctx, c, link, func(address string) { ready <- address }) }()
	if address := <-ready; address != link {
		t.Errorf("address %q; want the link", address)
	}
	f := open(t, link)
	exchange(t, f, "*IDN?\n", "Skerry,C4,3,2.0\n")
	exchange(t, f, "*IDN?\r\n", "Skerry,C4,3,2.0\n") // raw: nothing echoes, CR stays CR
	exchange(t, f, "*ESE 77;*ESE?\n", "77\n")
	_ = f.Close()

	// The next host finds a terminal at the same link, and the instrument as it was. Until the old
	// terminal is gone, an open of the link can still meet it; such a line ends at once.
	for deadline := time.Now().Add(5 * time.Second); ; {
		f = open(t, link)
		_ = f.SetDeadline(time.Now().Add(time.Second))
		_, _ = f.Write([]byte("*ESE?\n"))
		got, err := bufio.NewReader(f).ReadString('\n')
		_ = f.Close()
		if err == nil && got == "77\n" {
			break
		}
		if time.Now().After(deadline) {
			t.Fatalf("the next host hears %q, %v; want 77", got, err)
		}
	}

	why := errors.New("enough")
	cancel(why)
	if err := <-done; err != why {
		t.Errorf("present: %v; want the cause", err)
	}
	if _, err := os.Lstat(link); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("the link is left behind: %v", err)
	}
}

func TestPresentTakesTheLinkAwayWhileUnplugged(t *testing.T) {
	w := world(t, 100, "unplug(counter, at 20s, for 20s)") // 0.2 s each
	c := counter(t, w, nil)
	link := filepath.Join(t.TempDir(), "counter")
	ctx, cancel := context.WithCancel(t.Context())
	done := make(chan error, 1)
	go func() { done <- instruments.Present(ctx, c, link, nil) }()
	f := open(t, link)
	exchange(t, f, "*IDN?\n", "Skerry,C4,3,2.0\n")
	_ = f.SetDeadline(time.Now().Add(5 * time.Second))
	if n, err := f.Read(make([]byte, 1)); n > 0 || err == nil || errors.Is(err, os.ErrDeadlineExceeded) {
		t.Errorf("read over the unplugging: %d, %v; want the line to end", n, err)
	}
	_ = f.Close()
	f = open(t, link)
	if at := w.Now().Sub(w.Origin()); at < 40*time.Second {
		t.Errorf("there is a link at %v; want none before the plug is back at 40 s", at)
	}
	exchange(t, f, "*IDN?\n", "Skerry,C4,3,2.0\n")
	_ = f.Close()
	cancel()
	<-done
}
