package instruments

import (
	"io"
	"os"
	"sync"
	"syscall"
	"time"
)

// Cable returns the two ends of a serial line held in memory. Each direction keeps at most buffer
// bytes that nobody has read yet; more are dropped and counted, as a UART without flow control
// drops them. A write never waits (except on a line that is stalled on purpose).
//
// Closing the device's end is pulling the plug: what the host has not read is lost, its reads
// end with io.EOF and its writes fail with EIO. Closing the host's end lets the device read what
// is still on the way, then io.EOF; what the device writes after that is lost without an error.
// Reads wait in a way that lets virtual time pass.
func Cable(buffer int) (host, device *End) {
	toDevice, toHost := newLane(buffer), newLane(buffer)
	host = &End{in: toHost, out: toDevice}
	device = &End{in: toDevice, out: toHost, device: true}
	host.far, device.far = device, host
	return host, device
}

// End is one end of a Cable. Its methods may be called from several goroutines.
type End struct {
	in, out *lane
	far     *End
	device  bool
}

// lane is one direction. Its reader and its writer each have a deadline.
type lane struct {
	mu      sync.Mutex
	changed *sync.Cond
	buf     []byte
	limit   int
	dropped uint64
	stalled bool
	waited  time.Time // since when a writer has waited on the stalled line; zero: none did
	hungUp  bool      // the writer is gone: read what is left, then io.EOF
	dead    bool      // the reader is gone
	closed  [2]bool
	until   [2]time.Time
	alarm   [2]*time.Timer
}

const (
	reading = iota
	writing
)

func newLane(limit int) *lane {
	l := &lane{limit: limit}
	l.changed = sync.NewCond(&l.mu)
	return l
}

func (l *lane) expired(side int) bool {
	return !l.until[side].IsZero() && !time.Now().Before(l.until[side])
}

func (l *lane) setDeadline(side int, t time.Time) {
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.alarm[side] != nil {
		l.alarm[side].Stop()
		l.alarm[side] = nil
	}
	l.until[side] = t
	if d := time.Until(t); !t.IsZero() && d > 0 && !l.closed[side] {
		l.alarm[side] = time.AfterFunc(d, func() {
			l.mu.Lock()
			l.changed.Broadcast()
			l.mu.Unlock()
		})
	}
	l.changed.Broadcast()
}

// close ends one side's use of the lane, and its alarm.
func (l *lane) close(side int) {
	l.closed[side] = true
	if l.alarm[side] != nil {
		l.alarm[side].Stop()
		l.alarm[side] = nil
	}
}

// Read waits for at least one byte. It fails with io.EOF when the other end is gone, with
// os.ErrDeadlineExceeded at the deadline, and with os.ErrClosed after Close.
func (e *End) Read(b []byte) (int, error) {
	l := e.in
	l.mu.Lock()
	defer l.mu.Unlock()
	for {
		switch {
		case l.closed[reading]:
			return 0, os.ErrClosed
		case len(b) == 0:
			return 0, nil
		case l.expired(reading):
			return 0, os.ErrDeadlineExceeded
		case len(l.buf) > 0:
			n := copy(b, l.buf)
			l.buf = l.buf[:copy(l.buf, l.buf[n:])]
			return n, nil
		case l.hungUp:
			return 0, io.EOF
		}
		l.changed.Wait()
	}
}

// Write puts bytes on the line. What the other end's buffer has no room for is dropped, and the
// write succeeds all the same. On the host's end it fails with syscall.EIO when the plug is pulled.
func (e *End) Write(b []byte) (int, error) {
	l := e.out
	l.mu.Lock()
	defer l.mu.Unlock()
	for {
		switch {
		case l.closed[writing]:
			return 0, os.ErrClosed
		case l.dead && e.device:
			return len(b), nil
		case l.dead:
			return 0, syscall.EIO
		case l.expired(writing):
			return 0, os.ErrDeadlineExceeded
		case !l.stalled:
			n := min(len(b), l.limit-len(l.buf))
			l.buf = append(l.buf, b[:n]...)
			l.dropped += uint64(len(b) - n)
			l.changed.Broadcast()
			return len(b), nil
		}
		if l.waited.IsZero() {
			l.waited = time.Now()
		}
		l.changed.Wait()
	}
}

// Close gives the end up. Closing twice is no error.
func (e *End) Close() error {
	e.in.mu.Lock()
	e.in.close(reading)
	e.in.dead = true
	e.in.buf = nil
	e.in.changed.Broadcast()
	e.in.mu.Unlock()

	e.out.mu.Lock()
	e.out.close(writing)
	e.out.hungUp = true
	if e.device {
		e.out.buf = nil
	}
	e.out.changed.Broadcast()
	e.out.mu.Unlock()
	return nil
}

// SetReadDeadline ends reads at t with os.ErrDeadlineExceeded; the zero time means never.
func (e *End) SetReadDeadline(t time.Time) error { e.in.setDeadline(reading, t); return nil }

// SetWriteDeadline does the same for writes, which wait only on a stalled line.
func (e *End) SetWriteDeadline(t time.Time) error { e.out.setDeadline(writing, t); return nil }

// SetDeadline sets both.
func (e *End) SetDeadline(t time.Time) error {
	_ = e.SetReadDeadline(t)
	return e.SetWriteDeadline(t)
}

// Stall makes writes to this end wait, as an adapter does whose driver hangs, until Stall(false),
// Close or the writer's deadline.
func (e *End) Stall(on bool) {
	e.in.mu.Lock()
	e.in.stalled = on
	if on {
		e.in.waited = time.Time{}
	}
	e.in.changed.Broadcast()
	e.in.mu.Unlock()
}

// Waited says since when a write to this end has waited, or waited, because of the last Stall(true).
func (e *End) Waited() (since time.Time, ok bool) {
	e.in.mu.Lock()
	defer e.in.mu.Unlock()
	return e.in.waited, !e.in.waited.IsZero()
}

// Dropped is how many bytes sent to this end were lost because its buffer was full.
func (e *End) Dropped() uint64 {
	e.in.mu.Lock()
	defer e.in.mu.Unlock()
	return e.in.dropped
}

// Discard throws away what has arrived and was not read, as a host does that resets its input.
func (e *End) Discard() {
	e.in.mu.Lock()
	e.in.buf = e.in.buf[:0]
	e.in.mu.Unlock()
}
