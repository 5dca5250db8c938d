package logbook

import (
	"errors"
	"os"
	"os/signal"
	"path/filepath"
	"syscall"
	"testing"
)

// The kernel refuses the write itself here, as a quota does: SQLite calls that an I/O error.
func TestAWriteThatTheKernelRefusesIsAFullDisk(t *testing.T) {
	dir := t.TempDir()
	b := openBook(t, dir)
	mustNewRun(t, b, header("r1", ""))
	wal, err := os.Stat(filepath.Join(dir, fileName+"-wal"))
	if err != nil {
		t.Fatal(err)
	}
	grow := limitFiles(t, uint64(wal.Size())+100_000)
	last := fillUp(t, b, "r1")
	grow()
	if last < 5 {
		t.Errorf("full after %d entries; want some room before", last)
	}
	mustAppend(t, b, aReading("r1", last+1), aReading("r1", last+2))
}

func TestASnapshotThatFailsLeavesNothing(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	dir := t.TempDir()
	grow := limitFiles(t, 20_000)
	err := b.Snapshot(t.Context(), filepath.Join(dir, "copy.db"))
	grow()
	if !errors.Is(err, ErrFull) {
		t.Errorf("Snapshot: %v; want %v", err, ErrFull)
	}
	if left, err := os.ReadDir(dir); err != nil || len(left) != 0 {
		t.Errorf("left %v, %v; want nothing", left, err)
	}
}

// limitFiles has the kernel refuse to let any file of this process grow beyond so many bytes.
func limitFiles(t *testing.T, size uint64) (grow func()) {
	t.Helper()
	signal.Ignore(syscall.SIGXFSZ)
	var old syscall.Rlimit
	if err := syscall.Getrlimit(syscall.RLIMIT_FSIZE, &old); err != nil {
		t.Fatal(err)
	}
	set := func(l syscall.Rlimit) {
		if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &l); err != nil {
			t.Error(err)
		}
	}
	grow = func() { set(old) }
	t.Cleanup(func() { // also when the test ended early
		grow()
		signal.Reset(syscall.SIGXFSZ)
	})
	set(syscall.Rlimit{Cur: size, Max: old.Max})
	return grow
}
