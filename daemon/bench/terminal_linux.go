package bench

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"time"

	"golang.org/x/sys/unix"
)

// terminal is the instrument's end of a pseudo-terminal, and the link under which the host finds it.
type terminal struct {
	link   string
	master *os.File
}

// openTerminal makes a pseudo-terminal in raw mode and points the link at it. Raw before the first
// byte: a fresh one echoes, and what the instrument says before a host comes would come back to it.
func openTerminal(link string) (*terminal, error) {
	master, err := os.OpenFile("/dev/ptmx", os.O_RDWR|unix.O_NOCTTY|unix.O_NONBLOCK, 0)
	if err != nil {
		return nil, err
	}
	t := &terminal{link: link, master: master}
	if err := t.point(); err != nil {
		return nil, errors.Join(err, master.Close())
	}
	return t, nil
}

func (t *terminal) point() error {
	var number int
	// Through SyscallConn, since Fd would make the file blocking: no deadlines, and no end to a Read.
	err := t.control(func(fd int) (err error) {
		if err = unix.IoctlSetPointerInt(fd, unix.TIOCSPTLCK, 0); err != nil {
			return err
		}
		number, err = unix.IoctlGetInt(fd, unix.TIOCGPTN)
		return err
	})
	if err != nil {
		return fmt.Errorf("pseudo-terminal: %w", err)
	}
	path := fmt.Sprintf("/dev/pts/%d", number)
	if err := makeRaw(path); err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	// Renamed into place, so that a host that looks at any moment finds the old one or the new one.
	next := t.link + ".next"
	if err := os.Remove(next); err != nil && !errors.Is(err, os.ErrNotExist) {
		return err
	}
	if err := os.MkdirAll(filepath.Dir(t.link), 0o755); err != nil {
		return err
	}
	if err := os.Symlink(path, next); err != nil {
		return err
	}
	return os.Rename(next, t.link)
}

func (t *terminal) control(do func(fd int) error) error {
	raw, err := t.master.SyscallConn()
	if err != nil {
		return err
	}
	var inner error
	if err := raw.Control(func(fd uintptr) { inner = do(int(fd)) }); err != nil {
		return err
	}
	return inner
}

func makeRaw(path string) error {
	fd, err := unix.Open(path, unix.O_RDWR|unix.O_NOCTTY, 0)
	if err != nil {
		return err
	}
	defer unix.Close(fd)
	mode, err := unix.IoctlGetTermios(fd, unix.TCGETS)
	if err != nil {
		return err
	}
	mode.Iflag &^= unix.IGNBRK | unix.BRKINT | unix.PARMRK | unix.ISTRIP | unix.INLCR | unix.IGNCR | unix.ICRNL | unix.IXON
	mode.Oflag &^= unix.OPOST
	mode.Lflag &^= unix.ECHO | unix.ECHONL | unix.ICANON | unix.ISIG | unix.IEXTEN
	mode.Cflag = mode.Cflag&^(unix.CSIZE|unix.PARENB) | unix.CS8
	return unix.IoctlSetTermios(fd, unix.TCSETS, mode)
}

// hostLook is how often a terminal without a host looks for one. The kernel does not tell: a master
// without a slave hangs up at once, for every reader and every poll.
const hostLook = 3 * time.Millisecond

// accept waits until a host has opened the terminal.
func (t *terminal) accept(ctx context.Context) (*os.File, error) {
	look := time.NewTicker(hostLook)
	defer look.Stop()
	for {
		var here bool
		err := t.control(func(fd int) error {
			p := []unix.PollFd{{Fd: int32(fd), Events: unix.POLLIN}}
			_, err := unix.Poll(p, 0)
			here = p[0].Revents&unix.POLLHUP == 0 || p[0].Revents&unix.POLLIN != 0
			if errors.Is(err, unix.EINTR) {
				return nil
			}
			return err
		})
		if err != nil {
			return nil, err
		}
		if here {
			return t.master, nil
		}
		select {
		case <-ctx.Done():
			return nil, context.Cause(ctx)
		case <-look.C:
		}
	}
}

// renew gives the instrument a new terminal under the same link. A host that was killed leaves its
// claim on the old one behind as long as the master is open, and nobody else could open it.
func (t *terminal) renew() error {
	if err := t.master.Close(); err != nil && !errors.Is(err, os.ErrClosed) {
		return err
	}
	next, err := openTerminal(t.link)
	if err != nil {
		return err
	}
	t.master = next.master
	return nil
}

// unplug takes the terminal away, as a pulled cable does.
func (t *terminal) unplug() error {
	err := os.Remove(t.link)
	if errors.Is(err, os.ErrNotExist) {
		err = nil
	}
	if cerr := t.master.Close(); cerr != nil && !errors.Is(cerr, os.ErrClosed) {
		err = errors.Join(err, cerr)
	}
	return err
}

// address is what a host opens.
func (t *terminal) address() string { return t.link }

// linked is the address of an instrument that runs elsewhere and left its link in a folder.
func linked(folder, name string) (string, error) { return filepath.Join(folder, name), nil }
