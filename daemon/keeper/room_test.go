package keeper

import (
	"errors"
	"slices"
	"strings"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/scan"
)

// long makes runs of two hours and more, and says otherwise what owing does.
func long(t *testing.T, room func() error) (*Keeper, *logbook.Book) {
	t.Helper()
	k, book := owing(t, t.TempDir())
	c := k.Config
	c.Room = room
	c.Plan = func(text string, _ time.Time, _ func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
		return scan.Plan{Title: text, Points: []scan.Point{{}}, Dwell: scan.Dwell{Time: 10 * time.Second, Slice: time.Second}, Repeat: scan.Repeat{Times: 800}}, nil
	}
	return New(c), book
}

// The real file refuses a page more in the middle of a run, several times over.
func TestARealLogbookThatIsFullHoldsTheRunAndLosesNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book := long(t, nil)
		defer func() {
			for _, wrong := range book.Verify(t.Context()) {
				t.Errorf("the logbook: %s", wrong)
			}
			if err := book.Close(); err != nil {
				t.Error(err)
			}
		}()
		run := enqueue(t, k, "a")["a"]
		during(t, k, func() {
			time.Sleep(5 * time.Second)
			for range 3 {
				if err := book.SetMaxPages(t.Context(), 1); err != nil {
					t.Fatal(err)
				}
				time.Sleep(20 * time.Minute)
				s := k.Status(t.Context())
				if s.State != protocol.Holding || !slices.Contains(s.Causes, protocol.ByStorage) || !strings.Contains(s.Reason, "nothing can be written") {
					t.Errorf("on a full disk the run is %s for %v (%s); want held for storage", s.State, s.Causes, s.Reason)
				}
				before, err := book.Last(t.Context(), run)
				if err != nil {
					t.Fatal(err)
				}
				if err := book.SetMaxPages(t.Context(), 0); err != nil {
					t.Fatal(err)
				}
				time.Sleep(32 * time.Second)
				if after, err := book.Last(t.Context(), run); err != nil || after <= before {
					t.Errorf("half a minute after there was room the run has %d entries, %v; want more than %d", after, err, before)
				}
			}
			time.Sleep(4 * time.Hour)
		})
		if row, err := book.Run(t.Context(), run); err != nil || row.State != protocol.Finished || !strings.Contains(row.Reason, "800 of 800 readings accepted, 0 set aside") {
			t.Errorf("the run is %s (%s), %v; want finished with every reading", row.State, row.Reason, err)
		}
	})
}

func TestTooLittleRoomHoldsARunBeforeAWriteFails(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var short atomic.Bool
		k, book := long(t, func() error {
			if short.Load() {
				return errors.New("3 MB are left")
			}
			return nil
		})
		defer func() { _ = book.Close() }()
		run := enqueue(t, k, "a")["a"]
		during(t, k, func() {
			time.Sleep(5 * time.Second)
			short.Store(true)
			time.Sleep(20 * time.Minute)
			row, err := book.Run(t.Context(), run)
			if err != nil || row.State != protocol.Holding || row.Reason != "held: 3 MB are left" {
				t.Errorf("the run is %s (%s), %v; want held, and written down", row.State, row.Reason, err)
			}
			short.Store(false)
			time.Sleep(4 * time.Hour)
		})
		if row, err := book.Run(t.Context(), run); err != nil || row.State != protocol.Finished {
			t.Errorf("the run is %s (%s), %v; want finished", row.State, row.Reason, err)
		}
	})
}
