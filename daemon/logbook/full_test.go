package logbook

import (
	"errors"
	"testing"

	"gemel/protocol"
)

func TestAFullDiskIsSaidAndTheSameAppendWorksLater(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	if err := b.SetMaxPages(t.Context(), 1); err != nil {
		t.Fatal(err)
	}
	last := fillUp(t, b, "r1")
	waiting := aReading("r1", last+1)

	// A full disk takes no run either, and says so in the same way.
	h := header("r2", "key")
	h.BenchText = string(make([]byte, 20000))
	first := event("r2", 1, protocol.OperatorDid, protocol.Queued, "asked for")
	if _, err := b.NewRun(t.Context(), h, first); !errors.Is(err, ErrFull) {
		t.Errorf("NewRun: %v; want %v", err, ErrFull)
	}
	if _, err := b.Run(t.Context(), "r2"); !errors.Is(err, ErrNoRun) {
		t.Errorf("half a run is there: %v", err)
	}
	for range 3 {
		if err := b.Append(t.Context(), waiting); !errors.Is(err, ErrFull) {
			t.Fatalf("Append: %v; want %v", err, ErrFull)
		}
	}
	if got, err := b.Last(t.Context(), "r1"); err != nil || got != last {
		t.Errorf("last %d, %v; want %d", got, err, last)
	}

	if err := b.SetMaxPages(t.Context(), 0); err != nil {
		t.Fatal(err)
	}
	mustAppend(t, b, waiting, aReading("r1", last+2))
	if existing, err := b.NewRun(t.Context(), h, first); err != nil || existing != "" {
		t.Errorf("NewRun: %q, %v", existing, err)
	}
}

// fillUp appends until the disk is full, and returns the last sequence that was taken.
func fillUp(t *testing.T, b *Book, run protocol.RunID) int64 {
	t.Helper()
	last, err := b.Last(t.Context(), run)
	if err != nil {
		t.Fatal(err)
	}
	for range 10000 {
		err := b.Append(t.Context(), aReading(run, last+1))
		if errors.Is(err, ErrFull) {
			return last
		}
		if err != nil {
			t.Fatal(err)
		}
		last++
	}
	t.Fatal("10000 readings, and the disk is not full")
	return 0
}
