package drivertest

import (
	"io"
	"os"
	"sync"
	"time"
)

// End is one end of an in-memory cable. It behaves like a serial line: a write does not wait for
// a reader, a full buffer does make it wait, deadlines hold for both, and hanging up ends both
// ends at once and throws away what was not read. It blocks only on channels, so that time in a
// testing/synctest bubble goes on.
type End struct {
	in, out *way
}

// capacity is how many bytes one direction holds, as much as a pseudo-terminal takes.
const capacity = 16 << 10

// Cable returns two ends that are joined.
func Cable() (*End, *End) {
	a, b := &way{changed: make(chan struct{})}, &way{changed: make(chan struct{})}
	return &End{in: a, out: b}, &End{in: b, out: a}
}

type way struct {
	mu      sync.Mutex
	buf     []byte
	hungUp  bool
	changed chan struct{} // closed and replaced at each change
	readBy  time.Time
	writeBy time.Time
}

func (w *way) change() {
	close(w.changed)
	w.changed = make(chan struct{})
}

// await waits for a change until by; the lock is held before and after.
func (w *way) await(by time.Time) error {
	changed := w.changed
	w.mu.Unlock()
	defer w.mu.Lock()
	if by.IsZero() {
		<-changed
		return nil
	}
	left := time.Until(by)
	if left <= 0 {
		return os.ErrDeadlineExceeded
	}
	timer := time.NewTimer(left)
	defer timer.Stop()
	select {
	case <-changed:
		return nil
	case <-timer.C:
		return os.ErrDeadlineExceeded
	}
}

// Read reads what is there, or waits for it until the deadline.
func (e *End) Read(b []byte) (int, error) {
	w := e.in
	w.mu.Lock()
	defer w.mu.Unlock()
	for len(w.buf) == 0 {
		if w.hungUp {
			return 0, io.EOF
		}
		if err := w.await(w.readBy); err != nil && len(w.buf) == 0 {
			return 0, err
		}
	}
	n := copy(b, w.buf)
	w.buf = w.buf[:copy(w.buf, w.buf[n:])]
	w.change()
	return n, nil
}

// Write takes all bytes, waiting for room until the deadline.
func (e *End) Write(b []byte) (int, error) {
	w := e.out
	w.mu.Lock()
	defer w.mu.Unlock()
	written := 0
	for {
		if w.hungUp {
			return written, io.ErrClosedPipe
		}
		n := min(len(b), capacity-len(w.buf))
		w.buf = append(w.buf, b[:n]...)
		b, written = b[n:], written+n
		if n > 0 {
			w.change()
		}
		if len(b) == 0 {
			return written, nil
		}
		if err := w.await(w.writeBy); err != nil {
			return written, err
		}
	}
}

// SetReadDeadline bounds reads that begin afterwards.
func (e *End) SetReadDeadline(t time.Time) error {
	e.in.mu.Lock()
	defer e.in.mu.Unlock()
	e.in.readBy = t
	return nil
}

// SetWriteDeadline bounds writes that begin afterwards.
func (e *End) SetWriteDeadline(t time.Time) error {
	e.out.mu.Lock()
	defer e.out.mu.Unlock()
	e.out.writeBy = t
	return nil
}

// Close hangs up.
func (e *End) Close() error {
	for _, w := range []*way{e.in, e.out} {
		w.mu.Lock()
		if !w.hungUp {
			w.hungUp = true
			w.buf = nil
			w.change()
		}
		w.mu.Unlock()
	}
	return nil
}
