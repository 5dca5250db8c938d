//go:build unix

package line

import (
	"errors"
	"fmt"

	"golang.org/x/sys/unix"
)

// held is the lock on a device node.
type held struct{ fd int }

// lock takes an advisory lock that also holds between privileged programs.
func lock(path string) (*held, error) {
	fd, err := unix.Open(path, unix.O_RDONLY|unix.O_NOCTTY|unix.O_NONBLOCK|unix.O_CLOEXEC, 0)
	if errors.Is(err, unix.EBUSY) { // another program asked for exclusive use
		return nil, ErrHeld
	}
	if err != nil {
		return nil, err
	}
	err = unix.Flock(fd, unix.LOCK_EX|unix.LOCK_NB)
	if err == nil {
		return &held{fd: fd}, nil
	}
	_ = unix.Close(fd)
	if errors.Is(err, unix.EWOULDBLOCK) {
		return nil, ErrHeld
	}
	return nil, fmt.Errorf("lock: %w", err)
}

func (h *held) release() { _ = unix.Close(h.fd) }
