//go:build !linux

package logbook

import "os"

func flushData(f *os.File) error { return f.Sync() }
