package keeper

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/scan"
)

// owing makes a keeper over a logbook in dir.
func owing(t *testing.T, dir string) (*Keeper, *logbook.Book) {
	t.Helper()
	book, err := logbook.Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	k, _ := keeping(t, counting)
	k.Book = book
	return New(k.Config), book
}

func kinds(t *testing.T, book *logbook.Book, run protocol.RunID) string {
	t.Helper()
	row, err := book.Run(t.Context(), run)
	if err != nil {
		t.Fatal(err)
	}
	var list []string
	for _, k := range []protocol.EventKind{protocol.Began, protocol.Interrupted, protocol.Ended} {
		if began(t, book, k) != "" {
			list = append(list, string(k))
		}
	}
	return strings.Join(append(list, string(row.State), row.Reason), " ")
}

// The program ends before there is room: without what is kept beside the logbook the next start
// would go on with a run that a person has stopped, and was told so.
func TestAStopThatFoundNoRoomOutlivesTheProgram(t *testing.T) {
	for _, c := range []struct {
		name  string
		begun time.Duration // until it is stopped; 0: it still waits
		full  time.Duration // from then on it waits for room
		ask   func(*Keeper, context.Context, protocol.RunRequest) (protocol.RunReply, error)
		state protocol.State
		want  string
	}{
		{"of a run that is executed", 5 * time.Second, 0, (*Keeper).Stop, protocol.Stopped, "began interrupted ended stopped stopped by ann, while nothing could be written"},
		{"after the point that is open", 5 * time.Second, 0, (*Keeper).StopAfterPoint, protocol.Holding, "began interrupted ended stopped stopped by ann, while nothing could be written"},
		{"after the point that waits for room", 5 * time.Second, 20 * time.Second, (*Keeper).StopAfterPoint, protocol.Stopped, "began interrupted ended stopped stopped by ann, while nothing could be written"},
		{"of a run that waits", 0, 0, (*Keeper).Stop, protocol.Stopped, "ended stopped stopped by ann, while nothing could be written"},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				dir := t.TempDir()
				k, book := owing(t, dir)
				run := enqueue(t, k, "a")["a"]
				stop := func() {
					fill(t, book)
					time.Sleep(c.full)
					r, err := c.ask(k, t.Context(), protocol.RunRequest{Run: run, Who: "ann"})
					if err != nil || r.Recorded || r.State != c.state {
						t.Errorf("answered %+v, %v; want %s, not recorded", r, err, c.state)
					}
				}
				if c.begun == 0 {
					stop()
				} else {
					during(t, k, func() { time.Sleep(c.begun); stop() })
				}
				if err := book.Close(); err != nil {
					t.Fatal(err)
				}
				k, book = owing(t, dir)
				during(t, k, func() { time.Sleep(time.Minute) })
				if got := kinds(t, book, run); got != c.want {
					t.Errorf("the journal has %s; want %s", got, c.want)
				}
				if owed, err := book.Owed(); err != nil || len(owed) != 0 {
					t.Errorf("still owed: %v, %v", owed, err)
				}
				if err := book.Close(); err != nil {
					t.Fatal(err)
				}
			})
		})
	}
}

// A reading whose entry waits is lost to the engine's end, not to its patience: the run must not be
// given to another engine, which would say that the program ended.
func TestADiskThatIsFullForLongerThanThePatienceLosesNoReading(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book := owing(t, t.TempDir())
		defer func() { _ = book.Close() }()
		c := k.Config
		c.Plan = func(text string, _ time.Time, _ func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
			return scan.Plan{Title: text, Points: []scan.Point{{}}, Dwell: scan.Dwell{Time: time.Minute, Slice: time.Minute}, Repeat: scan.Repeat{Times: 4},
				Trouble: scan.Trouble{GiveUpAfter: 10 * time.Minute, Then: scan.Hold}}, nil
		}
		k = New(c)
		run := enqueue(t, k, "a")["a"]
		during(t, k, func() {
			time.Sleep(90 * time.Second)
			fill(t, book)
			time.Sleep(time.Hour)
			if s := k.Status(t.Context()); s.State != protocol.Holding || !slices.Equal(s.Causes, []protocol.Cause{protocol.ByStorage}) || s.ReadingsAccepted != 1 {
				t.Errorf("full for an hour: %s for %v, %d readings; want held for storage with one reading", s.State, s.Causes, s.ReadingsAccepted)
			}
			if err := book.SetMaxPages(t.Context(), 0); err != nil {
				t.Fatal(err)
			}
			time.Sleep(10 * time.Minute)
		})
		if got := kinds(t, book, run); !strings.HasPrefix(got, "began ended finished") {
			t.Errorf("the journal has %s; want it to go on by itself", got)
		}
		entries, err := book.Entries(t.Context(), run, 0, 100)
		taken := 0
		for _, e := range entries {
			if e.Kind == protocol.ReadingEntry {
				taken++
			}
		}
		if err != nil || taken != 4 {
			t.Errorf("%d readings, %v; want four, none taken twice", taken, err)
		}
	})
}

func TestNothingBeginsBeforeAStopThatIsOwedIsWritten(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		dir := t.TempDir()
		k, book := owing(t, dir)
		defer func() { _ = book.Close() }()
		runs := enqueue(t, k, "a", "b")
		if err := book.Owe([]logbook.OwedStop{{Run: runs["a"], Who: "ann"}, {Run: "of-another-logbook", Who: "bob"}}); err != nil {
			t.Fatal(err)
		}
		fill(t, book)
		during(t, k, func() {
			time.Sleep(time.Hour)
			if got := began(t, book, protocol.Began); got != "" {
				t.Errorf("%s began on a full disk", got)
			}
			if err := book.SetMaxPages(t.Context(), 0); err != nil {
				t.Fatal(err)
			}
			time.Sleep(time.Minute)
		})
		if got := began(t, book, protocol.Began, protocol.Ended); got != "a b b" {
			t.Errorf("began and ended: %s; want a to end without a beginning, then b", got)
		}
	})
}

func TestWhatIsOwedAndCannotBeReadIsToldOnceAndStopsNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		dir := t.TempDir()
		k, book := owing(t, dir)
		defer func() { _ = book.Close() }()
		if err := os.WriteFile(filepath.Join(dir, "stop-owed"), []byte("[{"), 0o600); err != nil {
			t.Fatal(err)
		}
		enqueue(t, k, "a")
		during(t, k, func() { time.Sleep(time.Minute) })
		entries, err := book.Entries(t.Context(), protocol.BenchRun, 0, 10)
		if err != nil || len(entries) != 1 || !strings.Contains(string(entries[0].Body), "stops that were kept on a full disk cannot be read") {
			t.Errorf("bench entries %v, %v; want one that says so", entries, err)
		}
		if got := began(t, book, protocol.Ended); got != "a" {
			t.Errorf("%q ended; want a", got)
		}
	})
}

// fill leaves no room for another entry.
func fill(t *testing.T, book *logbook.Book) {
	t.Helper()
	if err := book.SetMaxPages(t.Context(), 1); err != nil {
		t.Fatal(err)
	}
	for n := int64(1); ; n++ {
		body := fmt.Sprintf(`{"run":"-","sequence":%d,"kind":"operator","detail":{}}`, n)
		if err := book.Append(t.Context(), protocol.Entry{Run: protocol.BenchRun, Sequence: n, Kind: protocol.EventEntry, Body: []byte(body)}); errors.Is(err, logbook.ErrFull) {
			return
		} else if err != nil {
			t.Fatal(err)
		}
	}
}
