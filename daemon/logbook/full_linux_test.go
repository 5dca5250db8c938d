package logbook

import (
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
	signal.Ignore(syscall.SIGXFSZ)
	defer signal.Reset(syscall.SIGXFSZ)
	var limit syscall.Rlimit
	if err := syscall.Getrlimit(syscall.RLIMIT_FSIZE, &limit); err != nil {
		t.Fatal(err)
	}
	low := limit
	low.Cur = uint64(wal.Size()) + 100_000
	if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &low); err != nil {
		t.Fatal(err)
	}
	last := fillUp(t, b, "r1")
	if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &limit); err != nil {
		t.Fatal(err)
	}
	if last < 5 {
		t.Errorf("full after %d entries; want some room before", last)
	}
	mustAppend(t, b, aReading("r1", last+1), aReading("r1", last+2))
}
