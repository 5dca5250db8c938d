package line

import "golang.org/x/sys/unix"

// flush drops what waits to be sent and gives up exclusive use, which would otherwise outlive a
// port whose write is stuck and lock out our own next opening.
func (h *held) flush() {
	_ = unix.IoctlSetInt(h.fd, unix.TCFLSH, unix.TCIOFLUSH)
	_ = unix.IoctlSetInt(h.fd, unix.TIOCNXCL, 0)
}
