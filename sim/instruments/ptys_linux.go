package instruments

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"time"

	"golang.org/x/sys/unix"
)

// hostPoll is how often an idle pseudo-terminal is looked at for a host that opened it. The
// master of one without a host reads EIO at once, so it cannot simply be read.
const hostPoll = 10 * time.Millisecond

// Present offers the instrument on a pseudo-terminal until ctx ends, whose cause it returns. link
// is a symbolic link that always leads to the terminal of the moment: when a host goes away the
// next one gets a new terminal, as after a re-enumeration, since an exclusive lock of a host that
// was killed outlives it. While the plug is pulled there is no link. ready, if not nil, is called
// once, when the link can be opened, with what a bench file would say for the line.
func Present(ctx context.Context, inst Instrument, link string, ready func(address string)) error {
	var old *pty
	defer func() {
		_ = os.Remove(link)
		if old != nil {
			_ = old.Close()
		}
	}()
	for {
		if old != nil && !inst.Plugged() {
			old.link = link
			_ = old.Close()
			old = nil
		}
		if err := await(ctx, inst.Plugged); err != nil {
			return err
		}
		pty, err := openPty()
		if err != nil {
			return fmt.Errorf("%s: %w", inst.Name(), err)
		}
		if err := point(link, pty.slave); err != nil {
			_ = pty.Close()
			return fmt.Errorf("%s: %w", inst.Name(), err)
		}
		// Only now may the old one go: a link to a terminal that is gone leads to whoever gets its
		// number next.
		if old != nil {
			_ = old.Close()
		}
		pty.link, old = link, pty
		if ready != nil {
			ready(link)
			ready = nil
		}
		pulled := false
		err = await(ctx, func() bool {
			pulled = !inst.Plugged()
			return pulled || pty.hosted()
		})
		if err == nil && !pulled {
			err = inst.Serve(ctx, pty)
			pulled = errors.Is(err, ErrUnplugged)
		}
		if pulled {
			_ = pty.Close()
			old, err = nil, nil
		}
		if err != nil {
			return err
		}
		pty.link = ""
	}
}

// await waits until something is so.
func await(ctx context.Context, so func() bool) error {
	if so() {
		return context.Cause(ctx)
	}
	tick := time.NewTicker(hostPoll)
	defer tick.Stop()
	for {
		select {
		case <-ctx.Done():
			return context.Cause(ctx)
		case <-tick.C:
			if so() {
				return nil
			}
		}
	}
}

// point makes the link lead to a path, in one step.
func point(link, path string) error {
	fresh := filepath.Join(filepath.Dir(link), "."+filepath.Base(link)+".new")
	_ = os.Remove(fresh)
	if err := os.Symlink(path, fresh); err != nil {
		return err
	}
	return os.Rename(fresh, link)
}

// pty is the master of a pseudo-terminal. It is opened without Fd(), which would make it
// blocking: so deadlines work, and Close ends a Read and hangs up.
type pty struct {
	*os.File
	slave string
	link  string // taken away before the terminal, if it still leads here
}

// Close takes the link away, and then hangs up.
func (p *pty) Close() error {
	if p.link != "" {
		_ = os.Remove(p.link)
	}
	return p.File.Close()
}

// openPty opens one whose slave is in raw mode already: a fresh one echoes, and turns a banner
// written before the host set it up into input of the instrument.
func openPty() (*pty, error) {
	f, err := os.OpenFile("/dev/ptmx", os.O_RDWR|unix.O_NOCTTY, 0)
	if err != nil {
		return nil, err
	}
	p := &pty{File: f}
	var number int
	err = p.control(func(fd int) (err error) {
		if err = unix.IoctlSetPointerInt(fd, unix.TIOCSPTLCK, 0); err == nil {
			number, err = unix.IoctlGetInt(fd, unix.TIOCGPTN)
		}
		return err
	})
	if err == nil {
		p.slave = "/dev/pts/" + strconv.Itoa(number)
		err = raw(p.slave)
	}
	if err != nil {
		_ = f.Close()
		return nil, fmt.Errorf("pseudo-terminal: %w", err)
	}
	return p, nil
}

func raw(path string) error {
	fd, err := unix.Open(path, unix.O_RDWR|unix.O_NOCTTY|unix.O_CLOEXEC, 0)
	if err != nil {
		return err
	}
	defer func() { _ = unix.Close(fd) }()
	t, err := unix.IoctlGetTermios(fd, unix.TCGETS)
	if err != nil {
		return err
	}
	t.Iflag &^= unix.IGNBRK | unix.BRKINT | unix.PARMRK | unix.ISTRIP | unix.INLCR | unix.IGNCR | unix.ICRNL | unix.IXON
	t.Oflag &^= unix.OPOST
	t.Lflag &^= unix.ECHO | unix.ECHONL | unix.ICANON | unix.ISIG | unix.IEXTEN
	t.Cflag &^= unix.CSIZE | unix.PARENB
	t.Cflag |= unix.CS8
	t.Cc[unix.VMIN], t.Cc[unix.VTIME] = 1, 0
	return unix.IoctlSetTermios(fd, unix.TCSETS, t)
}

func (p *pty) control(f func(fd int) error) error {
	c, err := p.SyscallConn()
	if err != nil {
		return err
	}
	inner := error(nil)
	if err := c.Control(func(fd uintptr) { inner = f(int(fd)) }); err != nil {
		return err
	}
	return inner
}

// hosted says whether somebody has the slave open, or had, and left bytes.
func (p *pty) hosted() bool {
	fds := []unix.PollFd{{Events: unix.POLLIN}}
	err := p.control(func(fd int) error {
		fds[0].Fd = int32(fd)
		_, err := unix.Poll(fds, 0)
		return err
	})
	return err == nil && (fds[0].Revents&unix.POLLHUP == 0 || fds[0].Revents&unix.POLLIN != 0)
}

// Write gives up after a moment if the host does not read, as a serial line would not wait either.
func (p *pty) Write(b []byte) (int, error) {
	_ = p.SetWriteDeadline(time.Now().Add(100 * time.Millisecond))
	return p.File.Write(b)
}
