package logbook

import (
	"testing"
	"testing/synctest"
	"time"

	"gemel/protocol"
)

func TestALogbookLivesInABubble(t *testing.T) {
	dir := t.TempDir()
	readings := int64(2000)
	if testing.Short() {
		readings = 300
	}
	began := time.Now()
	synctest.Test(t, func(t *testing.T) {
		b, err := Open(dir)
		if err != nil {
			t.Fatal(err)
		}
		defer closeVerified(t, b)
		mustNewRun(t, b, header("r1", ""))
		appended := make(chan struct{}, 1)
		b.OnAppend(func() {
			select {
			case appended <- struct{}{}:
			default:
			}
		})
		followed := make(chan int64)
		go func() { // as the courier will
			var id int64
			for id < readings+1 {
				page, err := b.After(t.Context(), id, 100)
				if err != nil {
					t.Error(err)
					break
				}
				if len(page) == 0 {
					<-appended
					continue
				}
				id = page[len(page)-1].ID
			}
			followed <- id
		}()
		night := time.Now()
		for s := int64(2); s <= readings+1; s++ {
			time.Sleep(10 * time.Second) // the bubble's clock
			mustAppend(t, b, aReading("r1", s))
		}
		if got := <-followed; got != readings+1 {
			t.Errorf("followed %d entries; want %d", got, readings+1)
		}
		if err := b.AddNote(t.Context(), "r1", "test", "good night"); err != nil {
			t.Fatal(err)
		}
		notes, err := b.Notes(t.Context(), "r1")
		if err != nil {
			t.Fatal(err)
		}
		if len(notes) != 1 || notes[0].At.Sub(night) != time.Duration(readings)*10*time.Second {
			t.Errorf("notes %+v; want one, %s after %s", notes, time.Duration(readings)*10*time.Second, night)
		}
		n := int64(0)
		for r, err := range b.Readings(t.Context(), "r1") {
			if err != nil {
				t.Fatal(err)
			}
			if r.Kind != protocol.Light {
				t.Fatalf("a reading of kind %q", r.Kind)
			}
			n++
		}
		if n != readings {
			t.Errorf("%d readings; want %d", n, readings)
		}
	})
	t.Logf("%d readings in %s of true time", readings, time.Since(began).Round(time.Millisecond))
	openBook(t, dir) // and the file is well outside the bubble
}
