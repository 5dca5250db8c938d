package logbook

import (
	"fmt"
	"path/filepath"
	"sync/atomic"
)

// LeastRoom is what is kept free on the logbook's disk, in bytes, unless a bench file says
// otherwise: about thirty thousand readings, and room for the rest of the system to do its work.
const LeastRoom = 64 << 20

// Room returns a question to ask before each reading: its answer is an error when less than least
// bytes are free on the logbook's disk, so that a run holds in good order before a write fails. Once
// it was too little, there is room again from twice as much on: a disk at the edge would else make a
// run hold and go on with every file that comes and goes. A disk that does not tell is taken to have
// room; then a write that fails is what holds.
func (b *Book) Room(least int64) func() error {
	return room(filepath.Dir(b.file), least, freeBytes)
}

func room(dir string, least int64, free func(dir string) (int64, error)) func() error {
	var short atomic.Bool
	return func() error {
		has, err := free(dir)
		want := least
		if short.Load() {
			want = 2 * least
		}
		if err != nil || has >= want {
			short.Store(false)
			return nil
		}
		short.Store(true)
		return fmt.Errorf("%d MB are left on the disk of %s; want %d MB", has/1e6, dir, want/1e6)
	}
}
