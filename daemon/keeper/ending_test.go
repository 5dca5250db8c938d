package keeper

import (
	"context"
	"encoding/json"
	"errors"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// cutShort makes a keeper whose journal ends as that of a process that was killed: a run of bench time
// a hundred times faster than the machine's has one reading accepted and another to come.
func cutShort(t *testing.T, change func(*Config)) (*Keeper, *logbook.Book, protocol.RunID) {
	t.Helper()
	two := func(c *Config) {
		counting(c)
		c.Bench.Pace = 100
		plan := c.Plan
		c.Plan = func(text string, at time.Time, earlier func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
			p, err := plan(text, at, earlier)
			p.Repeat.Times = 2
			return p, err
		}
	}
	whole, from := keeping(t, two)
	run := enqueue(t, whole, "a")["a"]
	if state, err := whole.RunOne(t.Context(), run); err != nil || state != protocol.Finished {
		t.Fatalf("RunOne() = %s, %v; want finished", state, err)
	}
	k, book := keeping(t, func(c *Config) { two(c); change(c) })
	row, err := from.Run(t.Context(), run)
	if err != nil {
		t.Fatal(err)
	}
	entries, err := from.Entries(t.Context(), run, 0, 100)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := book.NewRun(t.Context(), row.Header, entries[0]); err != nil {
		t.Fatal(err)
	}
	for _, e := range entries[1:] {
		if err := book.Append(t.Context(), e); err != nil {
			t.Fatal(err)
		}
		if e.Kind == protocol.ReadingEntry {
			return k, book, run
		}
	}
	t.Fatalf("no reading in %d entries", len(entries))
	return nil, nil, ""
}

func eventsOf(t *testing.T, book *logbook.Book, run protocol.RunID) (all []protocol.Event) {
	t.Helper()
	entries, err := book.Entries(t.Context(), run, 0, 100)
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		var ev protocol.Event
		if e.Kind == protocol.EventEntry && json.Unmarshal(e.Body, &ev) == nil {
			all = append(all, ev)
		}
	}
	return all
}

func verified() []scan.Axis {
	return []scan.Axis{{Name: "arm", Verify: &scan.Verify{Every: time.Hour, Tolerance: unit.Degrees(0.1)}}}
}

// However a run ends that nobody executes: what its counted axes recorded since their last
// verification is doubted, the bench is at rest, and nothing is written before what was there.
func TestARunThatCannotGoOnIsInterruptedDoubtedAndFailed(t *testing.T) {
	misfit := func(string, time.Time, func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
		return scan.Plan{}, &strict.Error{Findings: []protocol.Finding{{File: "recipe", Key: "sweep", Found: "20 deg", Want: "at most 12 deg"}}}
	}
	for _, c := range []struct {
		name   string
		change func(*Config)
		says   string
	}{
		{"the bench file was changed", func(c *Config) { c.BenchText += " # moved"; c.Bench.Axes = verified() }, "failed: the bench file was changed"},
		{"the bench file was changed, and asks for no verification any more", func(c *Config) {
			old := c.BenchText
			c.BenchText += " # moved"
			c.Axes = func(text string) ([]scan.Axis, error) {
				if text != old {
					return nil, errors.New("not the bench file of the run")
				}
				return verified(), nil
			}
		}, "failed: the bench file was changed"},
		{"the recipe does not fit any more", func(c *Config) { c.Plan = misfit; c.Bench.Axes = verified() }, "failed: the recipe does not fit the bench any more"},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				open := true
				k, book, run := cutShort(t, func(config *Config) { c.change(config); config.Bench.Pump = shutter{&open} })
				state, err := k.RunOne(t.Context(), run)
				if err != nil || state != protocol.Failed {
					t.Fatalf("RunOne() = %s, %v; want failed", state, err)
				}
				if open {
					t.Error("the run is failed for ever, and the pump is open")
				}
				events := eventsOf(t, book, run)
				var kinds []string
				for i, ev := range events {
					kinds = append(kinds, string(ev.Kind))
					if i > 0 && ev.At.Before(events[i-1].At.Time) {
						t.Errorf("the %s is at %s, before the %s at %s", ev.Kind, ev.At, events[i-1].Kind, events[i-1].At)
					}
				}
				if got := strings.Join(kinds[len(kinds)-3:], " "); got != "interrupted doubted ended" {
					t.Fatalf("events %v; want interrupted, doubted and ended at the end", kinds)
				}
				if ended := events[len(events)-1]; !strings.HasPrefix(ended.Text, c.says) {
					t.Errorf("ended with %q; want %q", ended.Text, c.says)
				}
				row, err := book.Run(t.Context(), run)
				if err != nil || row.State != protocol.Failed {
					t.Errorf("the run is %s, %v; want failed", row.State, err)
				}
			})
		})
	}
}

// stuck is a shutter whose blade does not move any more.
type stuck struct{ shutter }

func (s stuck) Close(context.Context) error { return nil }

// Who reads the interruption alone must not take the bench for being at rest.
func TestEveryWordOfARunThatIsEndedUnrestedSaysSo(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		open := true
		k, book, run := cutShort(t, func(c *Config) { c.Bench.Axes = verified(); c.Bench.Pump = stuck{shutter{&open}} })
		before := len(eventsOf(t, book, run))
		if reply, err := k.Stop(t.Context(), protocol.RunRequest{Run: run, Who: "ann"}); err != nil || reply.State != protocol.Stopped {
			t.Fatalf("Stop() = %+v, %v; want stopped", reply, err)
		}
		var kinds []string
		for _, ev := range eventsOf(t, book, run)[before:] {
			kinds = append(kinds, string(ev.Kind))
			if !strings.Contains(ev.Text, "THE REST STATE WAS NOT REACHED: close shutter") {
				t.Errorf("%s: %q; want it to say that the pump's shutter did not close", ev.Kind, ev.Text)
			}
		}
		if got := strings.Join(kinds, " "); got != "interrupted doubted ended" {
			t.Errorf("events %s; want interrupted, doubted, ended", got)
		}
	})
}

// The last entry of a run may lie ahead of the machine's clock: bench time runs faster there.
func TestWhatTheKeeperWritesIsNeverBeforeTheEntryBeforeIt(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		k, book, run := cutShort(t, func(*Config) {})
		entries, err := book.Entries(t.Context(), run, 0, 100)
		if err != nil {
			t.Fatal(err)
		}
		var last protocol.Head
		if err := json.Unmarshal(entries[len(entries)-1].Body, &last); err != nil || !last.At.After(time.Now()) {
			t.Fatalf("the last entry is at %s, %v; want it ahead of the clock", last.At, err)
		}
		if _, err := k.Stop(t.Context(), protocol.RunRequest{Run: run, Who: "ann"}); err != nil {
			t.Fatal(err)
		}
		events := eventsOf(t, book, run)
		for _, ev := range events[len(events)-2:] {
			if ev.At.Before(last.At.Time) {
				t.Errorf("the %s is at %s; want it at %s or later", ev.Kind, ev.At, last.At)
			}
		}

		ahead := time.Now().Add(time.Hour)
		entry, err := k.eventEntry(protocol.BenchRun, 1, ahead, protocol.Trouble, "written before the clock was set back", "", nil, nil)
		if err != nil {
			t.Fatal(err)
		}
		if err := book.Append(t.Context(), entry); err != nil {
			t.Fatal(err)
		}
		if err := k.benchEvent(t.Context(), protocol.Trouble, "and after it", nil); err != nil {
			t.Fatal(err)
		}
		if of := eventsOf(t, book, protocol.BenchRun); of[1].At.Before(of[0].At.Time) {
			t.Errorf("the bench's second event is at %s; want it at %s or later", of[1].At, of[0].At)
		}
	})
}

// sticking is a shutter that stays open once it is stuck, and says so.
type sticking struct {
	shutter
	stuck *bool
}

func (s sticking) Close(ctx context.Context) error {
	if *s.stuck {
		*s.open = true
		return nil
	}
	return s.shutter.Close(ctx)
}

func TestTheAnswerToAStopOrAHoldSaysWhatIsNotAtRest(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		open, stuck := false, false
		k, _ := keeping(t, func(c *Config) { counting(c); c.Bench.Pump = sticking{shutter{&open}, &stuck} })
		want := func(what, rest string, err error) {
			t.Helper()
			if err != nil || !strings.Contains(rest, "close shutter") {
				t.Errorf("%s was answered with rest %q, %v; want it to name the shutter", what, rest, err)
			}
		}
		during(t, k, func() {
			time.Sleep(time.Second) // until it serves
			taken := make(chan error, 1)
			k.Hand(t.Context(), protocol.HandRequest{Act: protocol.HandWhere, Who: "ann"}, func(_ protocol.HandReply, err error) { taken <- err })
			if err := <-taken; err != nil {
				t.Error(err)
			}
			stuck = true // whoever closes it next is in a request that is waited for here
			hand, err := k.Stop(t.Context(), protocol.RunRequest{Run: protocol.BenchRun, Who: "ann"})
			want("the stop of hand work", hand.Rest, err)
			run := enqueue(t, k, "a")["a"]
			time.Sleep(40 * time.Second)
			held, err := k.Hold(t.Context(), protocol.RunRequest{Run: run, Who: "ann"})
			want("a hold", held.Rest, err)
			stopped, err := k.Stop(t.Context(), protocol.RunRequest{Run: run, Who: "ann"})
			want("a stop", stopped.Rest, err)
		})
		k, _, run := cutShort(t, func(c *Config) { c.Bench.Pump = sticking{shutter{&open}, &stuck} })
		stopped, err := k.Stop(t.Context(), protocol.RunRequest{Run: run, Who: "ann"})
		want("a stop of a run that nobody executes", stopped.Rest, err)

		whole, _ := keeping(t, counting)
		sound := enqueue(t, whole, "a")["a"]
		during(t, whole, func() {
			time.Sleep(3 * time.Second)
			held, err := whole.Hold(t.Context(), protocol.RunRequest{Run: sound, Who: "ann"})
			if err != nil || held.State != protocol.Holding || held.Rest != "" {
				t.Errorf("a hold at rest was answered %+v, %v; want nothing of the rest state", held, err)
			}
		})
	})
}
