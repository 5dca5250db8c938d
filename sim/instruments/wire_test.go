package instruments_test

import (
	"errors"
	"io"
	"os"
	"syscall"
	"testing"
	"testing/synctest"
	"time"

	"gemel/sim/instruments"
)

func read(e *instruments.End) (string, error) {
	b := make([]byte, 64)
	n, err := e.Read(b)
	return string(b[:n]), err
}

func write(t *testing.T, e *instruments.End, s string) {
	t.Helper()
	if n, err := e.Write([]byte(s)); n != len(s) || err != nil {
		t.Fatalf("write %q: %d, %v", s, n, err)
	}
}

func TestCableCarriesBytesBothWays(t *testing.T) {
	host, device := instruments.Cable(16)
	write(t, host, "question")
	write(t, device, "answer")
	if s, err := read(device); s != "question" || err != nil {
		t.Errorf("device reads %q, %v", s, err)
	}
	if s, err := read(host); s != "answer" || err != nil {
		t.Errorf("host reads %q, %v", s, err)
	}
}

func TestCableDropsWhatNobodyReads(t *testing.T) {
	host, device := instruments.Cable(4)
	write(t, device, "abcdef")
	write(t, device, "gh")
	if s, _ := read(host); s != "abcd" {
		t.Errorf("host reads %q; want what fitted, abcd", s)
	}
	if n := host.Dropped(); n != 4 {
		t.Errorf("%d bytes dropped; want 4", n)
	}
	write(t, device, "ij")
	if s, _ := read(host); s != "ij" {
		t.Errorf("host reads %q; want ij, as there is room again", s)
	}
}

func TestCableReadEndsAtTheDeadlineOfVirtualTime(t *testing.T) {
	bubble(t, func(t *testing.T) {
		host, device := instruments.Cable(16)
		begin := time.Now()
		_ = host.SetReadDeadline(begin.Add(3 * time.Hour))
		if _, err := read(host); !errors.Is(err, os.ErrDeadlineExceeded) {
			t.Errorf("read: %v; want the deadline", err)
		}
		if d := time.Since(begin); d != 3*time.Hour {
			t.Errorf("the read took %v; want 3h", d)
		}
		_ = host.SetReadDeadline(time.Time{})
		go func() {
			time.Sleep(time.Minute)
			write(t, device, "late")
		}()
		if s, err := read(host); s != "late" || err != nil {
			t.Errorf("read after a deadline was taken away: %q, %v", s, err)
		}
		_ = host.SetReadDeadline(time.Now().Add(time.Hour)) // its alarm must not outlive the test
		_ = host.Close()
		_ = device.Close()
	})
}

func TestCableADeadlineMovedWhileReadingEndsTheRead(t *testing.T) {
	bubble(t, func(t *testing.T) {
		host, _ := instruments.Cable(16)
		done := make(chan error)
		go func() { _, err := read(host); done <- err }()
		synctest.Wait()
		_ = host.SetReadDeadline(time.Unix(1, 0))
		if err := <-done; !errors.Is(err, os.ErrDeadlineExceeded) {
			t.Errorf("read: %v; want the deadline", err)
		}
	})
}

func TestCableUnplugged(t *testing.T) {
	bubble(t, func(t *testing.T) {
		host, device := instruments.Cable(16)
		pending := make(chan error)
		go func() { _, err := read(host); pending <- err }()
		synctest.Wait()
		_ = device.Close()
		if err := <-pending; err != io.EOF {
			t.Errorf("the pending read ends with %v; want EOF", err)
		}
		if _, err := host.Write([]byte("x")); !errors.Is(err, syscall.EIO) {
			t.Errorf("write: %v; want EIO", err)
		}
		if err := device.Close(); err != nil {
			t.Errorf("second close: %v", err)
		}
	})
	t.Run("what the host has not read is lost", func(t *testing.T) {
		host, device := instruments.Cable(16)
		write(t, device, "unread")
		_ = device.Close()
		if s, err := read(host); s != "" || err != io.EOF {
			t.Errorf("read %q, %v; want nothing and EOF", s, err)
		}
	})
}

func TestCableHostHangsUp(t *testing.T) {
	host, device := instruments.Cable(16)
	write(t, host, "\x03")
	_ = host.Close()
	if s, err := read(device); s != "\x03" || err != nil {
		t.Errorf("device reads %q, %v; want the stop byte that was on its way", s, err)
	}
	if _, err := read(device); err != io.EOF {
		t.Errorf("device reads: %v; want EOF", err)
	}
	if _, err := device.Write([]byte("to nobody")); err != nil {
		t.Errorf("device writes: %v; want no error, as a UART has none", err)
	}
	if _, err := host.Write([]byte("x")); !errors.Is(err, os.ErrClosed) {
		t.Errorf("write to a closed end: %v; want os.ErrClosed", err)
	}
}

func TestCableStalledWriteEndsAtItsDeadline(t *testing.T) {
	bubble(t, func(t *testing.T) {
		host, device := instruments.Cable(16)
		device.Stall(true)
		_ = host.SetWriteDeadline(time.Now().Add(time.Second))
		if _, err := host.Write([]byte("x")); !errors.Is(err, os.ErrDeadlineExceeded) {
			t.Errorf("write: %v; want the deadline", err)
		}
		_ = host.SetWriteDeadline(time.Time{})
		go func() {
			time.Sleep(time.Second)
			device.Stall(false)
		}()
		write(t, host, "y")
		if s, _ := read(device); s != "y" {
			t.Errorf("device reads %q; want y alone", s)
		}
	})
}

// BenchmarkCable is one question and one answer of 16 bytes each.
func BenchmarkCable(b *testing.B) {
	host, device := instruments.Cable(4096)
	go func() {
		buf := make([]byte, 64)
		for {
			n, err := device.Read(buf)
			if err != nil {
				return
			}
			_, _ = device.Write(buf[:n])
		}
	}()
	buf := make([]byte, 64)
	for b.Loop() {
		_, _ = host.Write([]byte("0123456789abcdef"))
		if n, _ := host.Read(buf); n != 16 {
			b.Fatal("echo cut")
		}
	}
	_ = host.Close()
}
