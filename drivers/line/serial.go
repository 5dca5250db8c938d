package line

import (
	"context"
	"errors"
	"fmt"
	"net"
	"os"
	"runtime/debug"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"go.bug.st/serial"
)

// Mode says how a serial device is set. Its zero value means 9600 baud, 8 data bits, no parity
// and 1 stop bit.
type Mode struct {
	Baud     int    // 0: 9600
	DataBits int    // 5 to 8; 0: 8
	Parity   string // "none" (or empty), "odd" or "even"
	StopBits string // "1" (or empty), "1.5" or "2"
}

func (m Mode) native() (*serial.Mode, error) {
	n := &serial.Mode{BaudRate: m.Baud, DataBits: m.DataBits}
	if n.BaudRate == 0 {
		n.BaudRate = 9600
	}
	if n.DataBits == 0 {
		n.DataBits = 8
	}
	if n.BaudRate < 0 {
		return nil, fmt.Errorf("baud: %d; want a positive number", m.Baud)
	}
	if n.DataBits < 5 || n.DataBits > 8 {
		return nil, fmt.Errorf("data bits: %d; want 5 to 8", m.DataBits)
	}
	switch m.Parity {
	case "", "none":
	case "odd":
		n.Parity = serial.OddParity
	case "even":
		n.Parity = serial.EvenParity
	default:
		return nil, fmt.Errorf("parity: %q; want none, odd or even", m.Parity)
	}
	switch m.StopBits {
	case "", "1":
	case "1.5":
		n.StopBits = serial.OnePointFiveStopBits
	case "2":
		n.StopBits = serial.TwoStopBits
	default:
		return nil, fmt.Errorf("stop bits: %q; want 1, 1.5 or 2", m.StopBits)
	}
	return n, nil
}

// Address returns what opens "tcp://host:port" or the serial device at a path. It opens nothing.
func Address(address string, mode Mode) (func(context.Context) (Port, error), error) {
	if hostPort, ok := strings.CutPrefix(address, "tcp://"); ok {
		if _, port, err := net.SplitHostPort(hostPort); err != nil || port == "" {
			return nil, fmt.Errorf("address: %q; want tcp://host:port", address)
		}
		return func(ctx context.Context) (Port, error) {
			var d net.Dialer
			conn, err := d.DialContext(ctx, "tcp", hostPort)
			if err != nil {
				return nil, err
			}
			return &tcpPort{conn.(*net.TCPConn)}, nil
		}, nil
	}
	if address == "" || strings.Contains(address, "://") {
		return nil, fmt.Errorf("address: %q; want the path of a serial device or tcp://host:port", address)
	}
	native, err := mode.native()
	if err != nil {
		return nil, err
	}
	hung := new(atomic.Int32)
	return func(context.Context) (Port, error) {
		if n := hung.Load(); n >= mostHung {
			return nil, fmt.Errorf("%s: %d writes hang there; want the instrument to take its bytes, or to be plugged in anew", address, n)
		}
		return openSerial(address, native, hung)
	}, nil
}

// mostHung bounds what a device that takes no bytes can cost: each write that hangs keeps a descriptor
// and a thread.
const mostHung = 4

// soon is too short a time to sleep: a read with a nearer deadline only looks at what is there.
const soon = time.Millisecond

// openSerial locks the device before it opens it: opening alone would already disturb another
// program's settings, and the exclusive mode that the library asks for does not hold against a
// privileged one.
func openSerial(path string, mode *serial.Mode, hung *atomic.Int32) (*serialPort, error) {
	hold, err := lock(path)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	port, err := serial.Open(path, mode)
	if err != nil {
		hold.release()
		// The library's error has no Unwrap: say in our words what can be asked for.
		if pe, ok := errors.AsType[*serial.PortError](err); ok {
			switch pe.Code() {
			case serial.PortBusy:
				err = ErrHeld
			case serial.PermissionDenied:
				err = os.ErrPermission
			}
		}
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	if err := port.ResetInputBuffer(); err != nil {
		hold.release()
		return nil, errors.Join(fmt.Errorf("%s: %w", path, err), port.Close())
	}
	return &serialPort{port: port, hold: hold, hung: hung}, nil
}

// serialPort makes a Port of the library's, which knows neither deadlines nor bounded writes.
type serialPort struct {
	port    serial.Port
	hold    *held
	hung    *atomic.Int32 // writes on this device that do not come back
	readBy  time.Time
	writeBy time.Time

	mu      sync.Mutex
	stuck   bool // a write has not come back
	counted bool // in hung
	closed  bool
}

func (p *serialPort) SetReadDeadline(t time.Time) error  { p.readBy = t; return nil }
func (p *serialPort) SetWriteDeadline(t time.Time) error { p.writeBy = t; return nil }

func (p *serialPort) Read(b []byte) (int, error) {
	timeout := serial.NoTimeout
	if !p.readBy.IsZero() {
		timeout = max(time.Until(p.readBy), 0)
		if timeout < soon {
			timeout = 0 // the library then only looks, in microseconds
		}
	}
	if err := p.port.SetReadTimeout(timeout); err != nil {
		return 0, err
	}
	n, err := p.port.Read(b)
	if n == 0 && err == nil && len(b) > 0 {
		return 0, os.ErrDeadlineExceeded
	}
	return n, err
}

// Write hands the bytes to a goroutine of its own, because the library's write blocks for as long
// as the device takes no bytes. This is the only one in the drivers. When the time is over the
// port is poisoned: nothing is written to it any more, and it is closed only when the stuck write
// has come back, for until then its descriptor must not be given to another file.
func (p *serialPort) Write(b []byte) (int, error) {
	p.mu.Lock()
	if p.stuck || p.closed {
		p.mu.Unlock()
		return 0, os.ErrClosed
	}
	p.stuck = true
	p.mu.Unlock()

	type outcome struct {
		n   int
		err error
	}
	back := make(chan outcome, 1)
	own := append([]byte(nil), b...)
	go func() {
		var o outcome
		defer func() {
			if r := recover(); r != nil {
				o.err = fmt.Errorf("panic: %v\n%s", r, debug.Stack())
			}
			p.mu.Lock()
			p.stuck = false
			if p.counted {
				p.hung.Add(-1)
			}
			late := p.closed
			p.mu.Unlock()
			if late {
				_ = p.port.Close() // nobody is left to hear of it
			}
			back <- o
		}()
		o.n, o.err = p.port.Write(own)
	}()

	var late <-chan time.Time
	if !p.writeBy.IsZero() {
		timer := time.NewTimer(max(time.Until(p.writeBy), 0))
		defer timer.Stop()
		late = timer.C
	}
	select {
	case o := <-back:
		return o.n, o.err
	case <-late:
		p.mu.Lock()
		if p.stuck && !p.counted {
			p.counted = true
			p.hung.Add(1)
		}
		p.mu.Unlock()
		return 0, fmt.Errorf("the device takes no bytes: %w", os.ErrDeadlineExceeded)
	}
}

// Close lets the kernel send what it holds, which may be a stop. Only behind a stuck write it is
// dropped: a motion command must not reach an instrument after its time.
func (p *serialPort) Close() error {
	p.mu.Lock()
	if p.closed {
		p.mu.Unlock()
		return nil
	}
	p.closed = true
	stuck := p.stuck
	p.mu.Unlock()
	defer p.hold.release()
	if stuck {
		p.hold.flush()
		return nil // the stuck write closes it
	}
	return p.port.Close()
}
