package logbook

import (
	"database/sql"
	"os"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
)

// Readers stand in the log from time to time, and one page is read after another all the while.
func TestTheLogStaysSmallWhateverIsRead(t *testing.T) {
	appends := int64(8_000)
	switch {
	case os.Getenv("GEMEL_LONG") != "":
		appends = 100_000
	case testing.Short():
		appends = 2_500
	}
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	var tx *sql.Tx
	var biggest, read int64
	for s := int64(2); s <= appends; s++ {
		mustAppend(t, b, aReading("r1", s))
		if s%20 == 0 { // as the courier does
			page, err := b.After(t.Context(), read, 20)
			if err != nil || len(page) == 0 {
				t.Fatalf("after %d: %d entries, %v", read, len(page), err)
			}
			read = page[len(page)-1].ID
			info, err := os.Stat(b.file + "-wal")
			if err != nil {
				t.Fatal(err)
			}
			biggest = max(biggest, info.Size())
		}
		var err error
		switch s % 2000 {
		case 500: // as a report does
			tx = standIn(t, b)
		case 900:
			err = tx.Rollback()
			tx = nil
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	if tx != nil {
		if err := tx.Rollback(); err != nil {
			t.Fatal(err)
		}
	}
	t.Logf("%d appends: the log had at most %d kB", appends, biggest>>10)
	if biggest > mostLog+1<<20 {
		t.Errorf("the log grew to %d bytes; want at most %d, and what %d appends add", biggest, mostLog, foldEvery)
	}
}

// standIn begins a read that keeps what it sees.
func standIn(t *testing.T, b *Book) *sql.Tx {
	t.Helper()
	tx, err := b.readers.Begin()
	if err != nil {
		t.Fatal(err)
	}
	var n int
	if err := tx.QueryRow(`SELECT count(*) FROM header`).Scan(&n); err != nil {
		t.Fatal(err)
	}
	return tx
}

// Another program that never lets go makes the log grow; nothing else may come of it.
func TestAReaderThatNeverEndsDelaysAppendsBySmallAmounts(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	tx := standIn(t, b)
	var slowest time.Duration
	s := int64(2)
	size := func() int64 {
		info, err := os.Stat(b.file + "-wal")
		if err != nil {
			t.Fatal(err)
		}
		return info.Size()
	}
	append := func() {
		began := time.Now()
		mustAppend(t, b, aReading("r1", s))
		slowest = max(slowest, time.Since(began))
		s++
	}
	for size() < mostLog+1<<20 { // what is long fills the log sooner
		mustAppend(t, b, event("r1", s, protocol.Trouble, protocol.Running, strings.Repeat("the line is gone; ", 10_000)))
		s++
	}
	for size() < mostLog+2<<20 {
		append()
	}
	if err := tx.Rollback(); err != nil {
		t.Fatal(err)
	}
	for range foldEvery {
		append()
	}
	if got := size(); got >= mostLog {
		t.Errorf("the log has %d bytes after the reader went; want less than %d", got, mostLog)
	}
	t.Logf("the slowest append took %s", slowest)
	var patience int
	if err := b.folder.QueryRow(`PRAGMA busy_timeout`).Scan(&patience); err != nil || patience != 100 {
		t.Errorf("readers are waited for %d ms, %v; want 100", patience, err)
	}
}
