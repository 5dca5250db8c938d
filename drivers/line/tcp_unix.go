//go:build unix

package line

import (
	"errors"
	"io"
	"net"
	"os"
	"time"

	"golang.org/x/sys/unix"
)

// tcpPort is a TCP connection that can look at what is there without sleeping until a deadline.
type tcpPort struct{ *net.TCPConn }

// SetReadDeadline does not reach the connection when it is near: Read then only looks.
func (p *tcpPort) SetReadDeadline(t time.Time) error {
	if !t.IsZero() && time.Until(t) < soon {
		return p.TCPConn.SetReadDeadline(time.Unix(1, 0))
	}
	return p.TCPConn.SetReadDeadline(t)
}

// Read asks the system first, as a deadline that has passed would keep the connection from it.
func (p *tcpPort) Read(b []byte) (int, error) {
	n, err := p.TCPConn.Read(b)
	if n > 0 || !errors.Is(err, os.ErrDeadlineExceeded) {
		return n, err
	}
	raw, rawErr := p.SyscallConn()
	if rawErr != nil {
		return 0, err
	}
	late := err
	if ctlErr := raw.Control(func(fd uintptr) { n, err = unix.Read(int(fd), b) }); ctlErr != nil {
		return 0, late
	}
	switch {
	case errors.Is(err, unix.EAGAIN), errors.Is(err, unix.EINTR):
		return 0, late
	case err != nil:
		return 0, err
	case n == 0:
		return 0, io.EOF
	}
	return n, nil
}
