package courier_test

import (
	"context"
	"errors"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/courier"
	"gemel/protocol"
)

const bench = "skerry"

// life is one life of the daemon as far as the courier is concerned.
type life struct {
	*courier.Courier
	kill func()
}

func start(t *testing.T, j *journal, s courier.Sink) life {
	t.Helper()
	ctx, cancel := context.WithCancel(t.Context())
	c := courier.New(bench, j, s, nil)
	done := make(chan error, 1)
	go func() { done <- c.Run(ctx) }()
	return life{Courier: c, kill: func() {
		cancel()
		if err := <-done; err != nil {
			t.Errorf("Run ended with %v; want nil when it was told to end", err)
		}
	}}
}

func wantSame(t *testing.T, j *journal, s *stream) {
	t.Helper()
	if got, want := s.ids(), j.ids(); !slices.Equal(got, want) {
		t.Fatalf("the stream holds %v; want the journal %v", got, want)
	}
}

// Naive publishing relies on the duplicate window: an acknowledgement is lost, the broker stays
// away until the window is over, and the process that knew what it had sent is gone.
func TestALostAcknowledgementALongOutageAndARestartDoubleNothing(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		j.add(entries("r1", 1, 3)...)
		first := start(t, j, s)
		synctest.Wait()
		wantSame(t, j, s)

		s.set(func(s *stream) { s.loseAcks = 1 })
		j.add(entries("r1", 4, 4)...)
		first.Nudge()
		synctest.Wait()
		s.set(func(s *stream) { s.away = true }) // stored, not acknowledged, and now nobody answers
		j.add(entries("r1", 5, 6)...)
		first.Nudge()
		time.Sleep(window / 2)
		first.kill()

		second := start(t, j, s)
		defer second.kill()
		time.Sleep(2 * window)
		if second.Behind() == 0 {
			t.Error("nothing is behind while the broker is away and two entries wait")
		}
		s.set(func(s *stream) { s.away = false })
		time.Sleep(time.Minute)
		wantSame(t, j, s)
		if n := second.Behind(); n != 0 {
			t.Errorf("%d entries behind after everything arrived; want 0", n)
		}
		if err := second.Trouble(); err != nil {
			t.Errorf("still in trouble after everything arrived: %v", err)
		}
	})
}

func TestEachEntryIsPublishedOnItsSubjectWithItsBytes(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		j.add(entries("r1", 1, 2)...)
		j.add(entries(protocol.BenchRun, 1, 1)...)
		l := start(t, j, s)
		defer l.kill()
		synctest.Wait()
		wantSame(t, j, s)
		for i, e := range j.entries {
			m := s.messages[i]
			if m.Subject != protocol.Subject(bench, e.Kind, e.Run) || string(m.Body) != string(e.Body) {
				t.Errorf("entry %s went to %q as %s; want %s", e.Entry.ID(), m.Subject, m.Body, e.Body)
			}
		}
	})
}

func TestAnEntryIsCarriedAsSoonAsItIsNudged(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		l := start(t, j, s)
		defer l.kill()
		synctest.Wait()
		began := time.Now()
		for n := int64(1); n <= 300; n++ {
			j.add(entries("r1", n, n)...)
			l.Nudge()
			synctest.Wait()
		}
		wantSame(t, j, s)
		if d := time.Since(began); d != 0 {
			t.Errorf("carrying waited %v; want no waiting", d)
		}
	})
}

func TestAForgottenNudgeIsMadeUpFor(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		l := start(t, j, s)
		defer l.kill()
		synctest.Wait()
		j.add(entries("r1", 1, 1)...)
		time.Sleep(time.Minute)
		wantSame(t, j, s)
	})
}

func TestStreamsThatComeBackDifferent(t *testing.T) {
	cases := []struct {
		name   string
		change func(*stream)
	}{
		{"restored from before the last five messages", func(s *stream) {
			s.messages = s.messages[:len(s.messages)-5]
			s.seen = map[string]time.Time{}
		}},
		{"made anew and empty", (*stream).anew},
		{"without its oldest messages", func(s *stream) {
			s.removed, s.messages = s.removed+4, s.messages[4:]
		}},
		{"the same", func(*stream) {}},
	}
	for _, c := range cases {
		for _, restarted := range []bool{false, true} {
			name := c.name + ", same process"
			if restarted {
				name = c.name + ", process restarted"
			}
			t.Run(name, func(t *testing.T) {
				synctest.Test(t, func(t *testing.T) {
					j, s := &journal{}, newStream()
					j.add(entries("r1", 1, 20)...)
					l := start(t, j, s)
					synctest.Wait()
					wantSame(t, j, s)
					s.set(c.change)
					kept := uint64(0)
					if s.removed == 4 { // a stream may lose its oldest messages: they are not sent again
						kept = 4
					}
					if restarted {
						l.kill()
						l = start(t, j, s)
					}
					defer func() { l.kill() }()
					j.add(entries("r2", 1, 3)...)
					l.Nudge()
					time.Sleep(2 * window)
					if got, want := s.ids(), j.ids()[kept:]; !slices.Equal(got, want) {
						t.Fatalf("the stream holds %v; want %v", got, want)
					}
				})
			})
		}
	}
}

// Emptying by hand leaves the stream's sequence as it was. A courier that knows where it stood
// goes on there; one that does not fills the stream again, once its ids are forgotten.
func TestAStreamEmptiedByHandGoesOnAndIsFilledAfterARestart(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		j.add(entries("r1", 1, 20)...)
		l := start(t, j, s)
		synctest.Wait()
		s.set(func(s *stream) { s.removed, s.messages = s.end(), nil })
		j.add(entries("r2", 1, 2)...)
		l.Nudge()
		synctest.Wait()
		if got, want := s.ids(), []string{"r2.1", "r2.2"}; !slices.Equal(got, want) {
			t.Errorf("the stream holds %v; want %v", got, want)
		}
		l.kill()
		s.set(func(s *stream) { s.removed, s.messages = s.end(), nil })
		l = start(t, j, s)
		defer func() { l.kill() }()
		time.Sleep(2 * window)
		wantSame(t, j, s)
	})
}

func TestAnIdleStreamThatIsReplacedIsFilledWithoutANewEntry(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		j.add(entries("r1", 1, 5)...)
		l := start(t, j, s)
		defer l.kill()
		synctest.Wait()
		s.set((*stream).anew)
		time.Sleep(time.Minute)
		wantSame(t, j, s)
	})
}

func TestAnotherLogbooksStreamIsRefused(t *testing.T) {
	other := func(run protocol.RunID, sequence int64, body string) courier.Message {
		e := protocol.Entry{Run: run, Sequence: sequence, Kind: protocol.EventEntry}
		return courier.Message{Subject: protocol.Subject(bench, e.Kind, e.Run), ID: e.ID(), Body: []byte(body)}
	}
	cases := []struct {
		name string
		last courier.Message
	}{
		{"its last message is of a run that the journal does not know", other("r9", 1, `{}`)},
		{"its last message is further than the journal goes", other("r1", 4, `{}`)},
		{"its last message has an id that the journal knows and other content", other(protocol.BenchRun, 3, `{"run":"-","other":1}`)},
		{"its last message was not published by a courier", courier.Message{Subject: "gemel.skerry.event.r1", ID: "", Body: []byte(`{}`)}},
		{"its last message has an id without a sequence", courier.Message{Subject: "gemel.skerry.event.r1", ID: "r1", Body: []byte(`{}`)}},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				j, s := &journal{}, newStream()
				j.add(entries("r1", 1, 3)...)
				j.add(entries(protocol.BenchRun, 1, 3)...)
				s.messages = []courier.Message{c.last}
				var said []error
				ctx, cancel := context.WithCancel(t.Context())
				k := courier.New(bench, j, s, func(err error) { said = append(said, err) })
				done := make(chan error)
				go func() { done <- k.Run(ctx) }()
				time.Sleep(10 * time.Minute)
				if !errors.Is(k.Trouble(), courier.ErrForeign) {
					t.Errorf("trouble is %v; want that the stream is another logbook's", k.Trouble())
				}
				if len(s.messages) != 1 {
					t.Errorf("%d messages in the stream; want nothing published", len(s.messages)-1)
				}
				if k.Behind() != 6 {
					t.Errorf("%d behind; want all 6", k.Behind())
				}
				cancel()
				<-done
				if len(said) != 1 || !errors.Is(said[0], courier.ErrForeign) {
					t.Errorf("reported %v; want it said once", said)
				}
			})
		})
	}
}

func TestTroubleIsReportedWhenItComesAndWhenItGoes(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		j.add(entries("r1", 1, 2)...)
		s.away = true
		var said []string
		ctx, cancel := context.WithCancel(t.Context())
		k := courier.New(bench, j, s, func(err error) {
			if err == nil {
				said = append(said, "well")
			} else {
				said = append(said, err.Error())
			}
		})
		done := make(chan error)
		go func() { done <- k.Run(ctx) }()
		time.Sleep(time.Hour)
		s.set(func(s *stream) { s.away = false })
		time.Sleep(time.Minute)
		cancel()
		<-done
		want := "stream GEMEL_skerry: no responders|well"
		if got := strings.Join(said, "|"); got != want {
			t.Errorf("said %q; want %q", got, want)
		}
		wantSame(t, j, s)
	})
}

func TestAnAwayBrokerIsNotHammered(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		s.away = true
		l := start(t, j, s)
		defer l.kill()
		for n := int64(1); n <= 3600; n++ { // an entry a second
			j.add(entries("r1", n, n)...)
			l.Nudge()
			time.Sleep(time.Second)
		}
		if s.calls > 1000 {
			t.Errorf("asked %d times in an hour; want at most 1000", s.calls)
		}
		if n := l.Behind(); n < 3590 || n > 3600 {
			t.Errorf("%d behind; want nearly 3600", n)
		}
	})
}

// eye looks at the courier whenever something is published.
type eye struct {
	courier.Sink
	look func()
}

func (e eye) Publish(ctx context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	e.look()
	return e.Sink.Publish(ctx, m, after)
}

func TestBehindCountsTheWholeBacklogWhileItIsCarried(t *testing.T) {
	j, s := &journal{}, newStream()
	j.add(entries("r1", 1, 500)...)
	var c *courier.Courier
	left := int64(500)
	c = courier.New(bench, j, eye{s, func() {
		if n := c.Behind(); n != left {
			t.Errorf("%d behind; want %d", n, left)
		}
		left--
	}}, nil)
	if err := c.Finish(t.Context()); err != nil || c.Behind() != 0 {
		t.Errorf("Finish: %v, %d behind; want none", err, c.Behind())
	}
}

func TestALogbookThatCannotBeReadCostsPatienceOnly(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{fail: errors.New("disk I/O error")}, newStream()
		j.add(entries("r1", 1, 4)...)
		l := start(t, j, s)
		defer l.kill()
		time.Sleep(time.Minute)
		if l.Trouble() == nil {
			t.Error("no trouble told while the logbook cannot be read")
		}
		j.mu.Lock()
		j.fail = nil
		j.mu.Unlock()
		time.Sleep(time.Minute)
		wantSame(t, j, s)
	})
}

func TestFinishDeliversWhatIsLeftAndGivesUpInTime(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		j, s := &journal{}, newStream()
		j.add(entries("r1", 1, 150)...)
		c := courier.New(bench, j, s, nil)
		if err := c.Finish(t.Context()); err != nil {
			t.Errorf("Finish: %v", err)
		}
		wantSame(t, j, s)
		s.away = true
		j.add(entries("r1", 151, 152)...)
		if err := c.Finish(t.Context()); !errors.Is(err, errAway) {
			t.Errorf("Finish with the broker away: %v; want its error at once", err)
		}
	})
}

// Whatever happens to broker and process, the stream ends as the journal, and at no moment
// before that is it anything but a beginning of the journal.
func TestNightsOfBrokerTroubleEndWithTheJournal(t *testing.T) {
	for seed := uint64(1); seed <= 200; seed++ {
		synctest.Test(t, func(t *testing.T) {
			r := rand.New(rand.NewPCG(seed, 4))
			j, s := &journal{}, newStream()
			l := start(t, j, s)
			defer func() { l.kill() }()
			var story []string
			next := int64(1)
			for range 40 {
				n := r.Int64N(4)
				j.add(entries("r1", next, next+n)...)
				next += n + 1
				l.Nudge()
				what := r.IntN(8)
				story = append(story, [...]string{"away", "back", "lost ack", "dropped", "restart", "older", "anew", "calm"}[what])
				s.set(func(s *stream) {
					switch what {
					case 0:
						s.away = true
					case 1:
						s.away = false
					case 2:
						s.loseAcks = 1 + r.IntN(2)
					case 3:
						s.drop = 1 + r.IntN(2)
					case 5:
						s.messages = s.messages[:r.IntN(len(s.messages)+1)]
						s.seen = map[string]time.Time{}
					case 6:
						s.anew()
					}
				})
				if what == 4 {
					l.kill()
					l = start(t, j, s)
				}
				time.Sleep(time.Duration(r.Int64N(int64(90 * time.Second))))
				if got, want := s.ids(), j.ids(); !slices.Equal(got, want[:len(got)]) {
					t.Fatalf("seed %d: after %v the stream holds %v; want a beginning of the journal", seed, story, got)
				}
			}
			s.set(func(s *stream) { s.away, s.loseAcks, s.drop = false, 0, 0 })
			time.Sleep(2 * window)
			if got, want := s.ids(), j.ids(); !slices.Equal(got, want) {
				t.Fatalf("seed %d: after %v the stream holds %d messages; want the %d of the journal", seed, story, len(got), len(want))
			}
			if n := l.Behind(); n != 0 {
				t.Errorf("seed %d: %d behind at the end; want 0", seed, n)
			}
		})
	}
}
