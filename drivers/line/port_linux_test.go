package line_test

import (
	"context"
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"gemel/drivers"
	"gemel/drivers/line"
)

// pty opens a pseudo-terminal in raw mode and returns its master and the path of its slave.
func pty(t *testing.T) (*os.File, string) {
	t.Helper()
	master, err := os.OpenFile("/dev/ptmx", os.O_RDWR|unix.O_NOCTTY|unix.O_NONBLOCK, 0)
	if err != nil {
		t.Skipf("SKIPPED: no pseudo-terminals here: %v", err)
	}
	t.Cleanup(func() { _ = master.Close() })
	raw, err := master.SyscallConn()
	if err != nil {
		t.Fatal(err)
	}
	var n int
	var inner error
	err = raw.Control(func(fd uintptr) {
		if inner = unix.IoctlSetPointerInt(int(fd), unix.TIOCSPTLCK, 0); inner == nil {
			n, inner = unix.IoctlGetInt(int(fd), unix.TIOCGPTN)
		}
	})
	if err = errors.Join(err, inner); err != nil {
		t.Fatal(err)
	}
	return master, fmt.Sprintf("/dev/pts/%d", n)
}

// echoes answers each line with itself.
func echoes(rw interface {
	Read([]byte) (int, error)
	Write([]byte) (int, error)
}) {
	b := make([]byte, 256)
	for {
		n, err := rw.Read(b)
		if errors.Is(err, unix.EIO) { // nobody has the slave open yet
			time.Sleep(time.Millisecond)
			continue
		}
		if err != nil {
			return
		}
		_, _ = rw.Write(b[:n])
	}
}

func running(t *testing.T, open func(context.Context) (line.Port, error)) (*line.Line, *line.Seat) {
	t.Helper()
	l := line.New(line.Settings{Name: "real", Open: open, AnswerWithin: 2 * time.Second, OpenWithin: 2 * time.Second, BackoffMin: 5 * time.Millisecond})
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan bool)
	go func() { _ = l.Run(ctx); close(done) }()
	t.Cleanup(func() { cancel(); <-done })
	return l, l.Seat(line.SeatSettings{Device: "stage"})
}

func TestASerialDeviceIsHeldAnsweredLostAndOpenedAgainByItsStablePath(t *testing.T) {
	master, slave := pty(t)
	link := filepath.Join(t.TempDir(), "stage")
	if err := os.Symlink(slave, link); err != nil {
		t.Fatal(err)
	}
	go echoes(master)
	open, err := line.Address(link, line.Mode{Baud: 115200})
	if err != nil {
		t.Fatal(err)
	}
	l, s := running(t, open)
	if _, err := s.Connect(t.Context()); err != nil {
		t.Fatal(err)
	}
	const n = 200
	start := time.Now()
	for i := range n {
		text := fmt.Sprintf("question %d", i)
		got, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte(text), Judge: exactly(text)})
		if err != nil || string(got) != text {
			t.Fatalf("got %q, %v", got, err)
		}
	}
	t.Logf("%v an exchange over a pseudo-terminal", time.Since(start)/n)

	if port, err := open(t.Context()); !errors.Is(err, line.ErrHeld) {
		t.Errorf("second opening: %v, %v; want it held", port, err)
	}

	// The plug is pulled, and comes back under another node behind the same link.
	second, slave2 := pty(t)
	go echoes(second)
	if err := errors.Join(os.Remove(link), os.Symlink(slave2, link), master.Close()); err != nil {
		t.Fatal(err)
	}
	_, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: exactly("x")})
	remedy(t, err, drivers.Reconnect, line.Lost)
	if fresh, err := s.Connect(t.Context()); err != nil || !fresh {
		t.Fatalf("fresh %v, %v", fresh, err)
	}
	if _, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: exactly("x")}); err != nil {
		t.Error(err)
	}
	if c := l.Counts(); c.Opened != 2 || c.Lost != 1 {
		t.Errorf("counts %+v; want two openings and one loss", c)
	}
}

func TestAWriteThatHangsOnASerialDevicePoisonsThePort(t *testing.T) {
	master, slave := pty(t)
	open, err := line.Address(slave, line.Mode{})
	if err != nil {
		t.Fatal(err)
	}
	port, err := open(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if err := port.SetWriteDeadline(time.Now().Add(200 * time.Millisecond)); err != nil {
		t.Fatal(err)
	}
	start := time.Now()
	_, err = port.Write([]byte(strings.Repeat("x", 1<<20)))
	if !errors.Is(err, os.ErrDeadlineExceeded) || time.Since(start) > time.Second {
		t.Fatalf("%v after %v; want the deadline", err, time.Since(start))
	}
	if _, err := port.Write([]byte("MOVE")); !errors.Is(err, os.ErrClosed) {
		t.Errorf("a poisoned port took bytes: %v", err)
	}
	if err := port.Close(); err != nil {
		t.Error(err)
	}
	if _, err := port.Write([]byte("MOVE")); !errors.Is(err, os.ErrClosed) {
		t.Errorf("a closed port took bytes: %v", err)
	}
	again, err := open(t.Context())
	if err != nil {
		t.Fatalf("opening again while the write is stuck: %v", err)
	}
	_ = again.Close()
	_ = master.Close()
}

// Each write that hangs keeps a descriptor and a thread until it comes back, so there are few.
func TestADeviceThatTakesNoBytesIsNotOpenedOverAndOver(t *testing.T) {
	master, slave := pty(t)
	link := filepath.Join(t.TempDir(), "stage")
	if err := os.Symlink(slave, link); err != nil {
		t.Fatal(err)
	}
	open, err := line.Address(link, line.Mode{})
	if err != nil {
		t.Fatal(err)
	}
	hung := 0
	for ; hung < 20; hung++ {
		port, err := open(t.Context())
		if err != nil {
			if !strings.Contains(err.Error(), "writes hang") {
				t.Fatal(err)
			}
			break
		}
		if err := port.SetWriteDeadline(time.Now().Add(20 * time.Millisecond)); err != nil {
			t.Fatal(err)
		}
		if _, err := port.Write([]byte(strings.Repeat("x", 1<<20))); !errors.Is(err, os.ErrDeadlineExceeded) {
			t.Fatalf("%v; want the deadline", err)
		}
		_ = port.Close()
	}
	if hung != 4 {
		t.Errorf("%d openings before it is refused; want 4", hung)
	}
	// Plugged in anew, the writes come back with an error, and it may be opened.
	second, fresh := pty(t)
	defer func() { _ = second.Close() }()
	if err := errors.Join(os.Remove(link), os.Symlink(fresh, link), master.Close()); err != nil {
		t.Fatal(err)
	}
	for deadline := time.Now().Add(10 * time.Second); ; time.Sleep(time.Millisecond) {
		port, err := open(t.Context())
		if err == nil {
			_ = port.Close()
			break
		}
		if time.Now().After(deadline) {
			t.Fatalf("after it was plugged in anew: %v", err)
		}
	}
}

func TestATCPLineAnswersAndIsOpenedAgain(t *testing.T) {
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer func() { _ = listener.Close() }()
	conns := make(chan net.Conn, 4)
	go func() {
		for {
			c, err := listener.Accept()
			if err != nil {
				return
			}
			conns <- c
			go echoes(c)
		}
	}()
	open, err := line.Address("tcp://"+listener.Addr().String(), line.Mode{})
	if err != nil {
		t.Fatal(err)
	}
	l, s := running(t, open)
	if _, err := s.Connect(t.Context()); err != nil {
		t.Fatal(err)
	}
	first := <-conns
	const n = 200
	start := time.Now()
	for range n {
		if _, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: exactly("x")}); err != nil {
			t.Fatal(err)
		}
	}
	t.Logf("%v an exchange over TCP", time.Since(start)/n)
	if _, err := first.Write([]byte("late\nlater\n")); err != nil {
		t.Fatal(err)
	}
	for deadline := time.Now().Add(5 * time.Second); l.Counts().Strays < 2 && time.Now().Before(deadline); {
		if _, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: exactly("x"), Repeat: 1}); err != nil {
			t.Fatal(err)
		}
	}
	if c := l.Counts(); c.Strays+c.Strangers != 2 {
		t.Errorf("counts %+v; want both stray lines met", c)
	}
	_ = first.Close()
	_, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: exactly("x")})
	for range 100 { // the news of the hang-up may take a moment
		if err != nil {
			break
		}
		_, err = s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("x"), Judge: exactly("x")})
	}
	remedy(t, err, drivers.Reconnect, line.Lost)
	if _, err := s.Connect(t.Context()); err != nil {
		t.Error(err)
	}
}

func TestAddressesThatAreNoneAreRefused(t *testing.T) {
	for _, tc := range []struct {
		address string
		mode    line.Mode
	}{
		{"", line.Mode{}}, {"tcp://nohost", line.Mode{}}, {"udp://h:1", line.Mode{}},
		{"/dev/x", line.Mode{Parity: "some"}}, {"/dev/x", line.Mode{StopBits: "3"}}, {"/dev/x", line.Mode{DataBits: 9}}, {"/dev/x", line.Mode{Baud: -1}},
	} {
		if _, err := line.Address(tc.address, tc.mode); err == nil {
			t.Errorf("%q with %+v taken; want an error", tc.address, tc.mode)
		}
	}
	open, err := line.Address("/dev/does-not-exist", line.Mode{})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := open(t.Context()); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("%v; want os.ErrNotExist", err)
	}
}
