package logbook

import (
	"os"
	"syscall"
)

func flushData(f *os.File) error { return syscall.Fdatasync(int(f.Fd())) }
