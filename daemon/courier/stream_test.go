package courier_test

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"go.uber.org/goleak"

	"gemel/daemon/broker"
	"gemel/daemon/courier"
	"gemel/protocol"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

// place is a data folder with a real broker that can be ended and begun again.
type place struct {
	t    testing.TB
	dir  string
	conn *nats.Conn
	stop func()
}

func newPlace(t testing.TB) *place {
	p := &place{t: t, dir: t.TempDir()}
	p.begin()
	t.Cleanup(func() { p.end() })
	return p
}

func (p *place) begin() {
	p.t.Helper()
	b, err := broker.New(broker.Config{Bench: bench, Dir: p.dir})
	if err != nil {
		p.t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- b.Run(ctx) }()
	select {
	case <-b.Ready():
	case err := <-done:
		p.t.Fatal(err)
	}
	p.conn, err = b.Connect("test")
	if err != nil {
		p.t.Fatal(err)
	}
	conn := p.conn
	p.stop = sync.OnceFunc(func() {
		closed := conn.StatusChanged(nats.CLOSED)
		conn.Close()
		for !conn.IsClosed() {
			<-closed
		}
		cancel()
		if err := <-done; err != nil {
			p.t.Error(err)
		}
	})
}

func (p *place) end() { p.stop() }

func (p *place) stream(c courier.StreamConfig) *courier.Stream {
	p.t.Helper()
	c.Bench = bench
	s, err := courier.NewStream(p.conn, c)
	if err != nil {
		p.t.Fatal(err)
	}
	return s
}

func (p *place) js() jetstream.JetStream {
	p.t.Helper()
	js, err := jetstream.New(p.conn)
	if err != nil {
		p.t.Fatal(err)
	}
	return js
}

// ids reads what the stream holds, as a stranger would.
func (p *place) ids() []string {
	p.t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), 10*time.Second)
	defer cancel()
	stream, err := p.js().Stream(ctx, protocol.Stream(bench))
	if err != nil {
		p.t.Fatal(err)
	}
	var ids []string
	state := stream.CachedInfo().State
	for seq := state.FirstSeq; seq <= state.LastSeq; seq++ {
		m, err := stream.GetMsg(ctx, seq)
		if err != nil {
			p.t.Fatal(err)
		}
		ids = append(ids, m.Header.Get(nats.MsgIdHdr))
	}
	return ids
}

// deaf stores what it is given and keeps the acknowledgement of one id to itself.
type deaf struct {
	courier.Sink
	to   string
	lost chan struct{}
}

func (d *deaf) Publish(ctx context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	end, err := d.Sink.Publish(ctx, m, after)
	if m.ID == d.to && err == nil {
		d.to = ""
		close(d.lost)
		return courier.Last{}, errNoAnswer
	}
	return end, err
}

func finish(t *testing.T, j *journal, s courier.Sink) *courier.Courier {
	t.Helper()
	c := courier.New(bench, j, s, nil)
	if err := c.Finish(t.Context()); err != nil {
		t.Fatal(err)
	}
	return c
}

// As the first test of the courier, on the real broker. The window is the shortest that the server
// has, and shorter than the courier's first wait.
func TestALostAcknowledgementAndRestartsDoubleNothingOnARealBroker(t *testing.T) {
	p := newPlace(t)
	short := courier.StreamConfig{Duplicates: 100 * time.Millisecond}
	j := &journal{}
	j.add(entries("r1", 1, 6)...)
	d := &deaf{Sink: p.stream(short), to: "r1.4", lost: make(chan struct{})}
	first := start(t, j, d)
	<-d.lost // stored, not acknowledged
	first.kill()
	p.end()

	p.begin()
	j.add(entries("r2", 1, 2)...)
	finish(t, j, p.stream(short))
	if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}

	// The same in a process that lives on: its own wait outlasts the window.
	d = &deaf{Sink: p.stream(short), to: "r2.3", lost: make(chan struct{})}
	second := start(t, j, d)
	j.add(entries("r2", 3, 5)...)
	second.Nudge()
	<-d.lost
	js := p.js()
	for info := uint64(0); info < 11; {
		stream, err := js.Stream(t.Context(), protocol.Stream(bench))
		if err != nil {
			t.Fatal(err)
		}
		info = stream.CachedInfo().State.LastSeq
	}
	second.kill()
	if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}
}

func TestARealStreamThatIsMadeAnewIsFilledAgain(t *testing.T) {
	p := newPlace(t)
	j := &journal{}
	j.add(entries("r1", 1, 100)...)
	finish(t, j, p.stream(courier.StreamConfig{}))
	if err := p.js().DeleteStream(t.Context(), protocol.Stream(bench)); err != nil {
		t.Fatal(err)
	}
	j.add(entries("r1", 101, 101)...)
	finish(t, j, p.stream(courier.StreamConfig{}))
	if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}
}

// Restored from a copy of the broker's folder, as an operator would.
func TestARealStreamThatComesBackOlderIsFilledAgain(t *testing.T) {
	p := newPlace(t)
	j := &journal{}
	j.add(entries("r1", 1, 20)...)
	finish(t, j, p.stream(courier.StreamConfig{}))
	p.end()
	old := t.TempDir()
	if err := os.CopyFS(old, os.DirFS(filepath.Join(p.dir, "nats"))); err != nil {
		t.Fatal(err)
	}
	p.begin()
	j.add(entries("r1", 21, 40)...)
	finish(t, j, p.stream(courier.StreamConfig{}))
	p.end()
	if err := os.RemoveAll(filepath.Join(p.dir, "nats")); err != nil {
		t.Fatal(err)
	}
	if err := os.CopyFS(filepath.Join(p.dir, "nats"), os.DirFS(old)); err != nil {
		t.Fatal(err)
	}
	p.begin()
	if n := len(p.ids()); n != 20 {
		t.Fatalf("the restored stream holds %d messages; want 20", n)
	}
	j.add(entries("r2", 1, 1)...)
	finish(t, j, p.stream(courier.StreamConfig{}))
	if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}
}

func TestAStreamWithOtherSettingsIsChangedAndKeepsItsMessages(t *testing.T) {
	p := newPlace(t)
	j := &journal{}
	j.add(entries("r1", 1, 3)...)
	finish(t, j, p.stream(courier.StreamConfig{MaxBytes: 1 << 20, Duplicates: time.Second}))
	j.add(entries("r1", 4, 4)...)
	finish(t, j, p.stream(courier.StreamConfig{MaxAge: time.Hour}))
	stream, err := p.js().Stream(t.Context(), protocol.Stream(bench))
	if err != nil {
		t.Fatal(err)
	}
	c := stream.CachedInfo().Config
	if c.MaxBytes != 2<<30 || c.MaxAge != time.Hour || c.Duplicates != 10*time.Minute || !c.DenyDelete || !c.DenyPurge ||
		c.Storage != jetstream.FileStorage || !slices.Equal(c.Subjects, protocol.StreamSubjects(bench)) {
		t.Errorf("the stream has %+v", c)
	}
	if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}
}

// A reader may name any subject for an answer of the server's, also one that the stream takes.
func TestAStreamOfOurOwnThatGotAnAnswerOfTheServersIsFilledAgain(t *testing.T) {
	for _, before := range []int64{0, 3} {
		p := newPlace(t)
		own := courier.StreamConfig{Own: true}
		j := &journal{}
		if before > 0 {
			j.add(entries("r1", 1, before)...)
		}
		finish(t, j, p.stream(own))
		if err := p.conn.PublishRequest("$JS.API.INFO", "gemel.skerry.event.r1", nil); err != nil {
			t.Fatal(err)
		}
		for in := uint64(before); in == uint64(before); { // the answer is on its way
			stream, err := p.js().Stream(t.Context(), protocol.Stream(bench))
			if err != nil {
				t.Fatal(err)
			}
			in = stream.CachedInfo().State.Msgs
		}
		var said []string
		c := courier.New(bench, j, p.stream(own), func(err error) {
			if err != nil {
				said = append(said, err.Error())
			}
		})
		j.add(entries("r1", before+1, before+2)...)
		if err := c.Finish(t.Context()); err != nil {
			t.Errorf("Finish: %v; want nil", err)
		}
		if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
			t.Errorf("the stream holds %q; want %v", got, want)
		}
		if len(said) != 1 || !strings.Contains(said[0], "no entry: it is made anew") {
			t.Errorf("the courier said %q; want one word on the stray message", said)
		}
	}
}

func TestARealStreamOfAnotherLogbookIsRefused(t *testing.T) {
	p := newPlace(t)
	theirs := &journal{}
	theirs.add(entries("r9", 1, 3)...)
	finish(t, theirs, p.stream(courier.StreamConfig{}))
	ours := &journal{}
	ours.add(entries("r1", 1, 3)...)
	c := courier.New(bench, ours, p.stream(courier.StreamConfig{}), nil)
	if err := c.Finish(t.Context()); !errors.Is(err, courier.ErrForeign) {
		t.Errorf("Finish: %v; want ErrForeign", err)
	}
	if got, want := p.ids(), theirs.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want only theirs %v", got, want)
	}
}

// A rescued logbook ends before the stream does, and an older copy goes on with ids that the stream
// holds with other bodies. Where the server is our own the stream is made anew, and says so by when it
// was made.
func TestAStreamOfOurOwnThatAnotherLogbookFilledIsMadeAnew(t *testing.T) {
	for name, end := range map[string]int64{"the logbook ends before the stream": 4, "the logbook has the last id with another body": 6, "the logbook goes on beyond it": 9} {
		t.Run(name, func(t *testing.T) {
			p := newPlace(t)
			newer, older := &journal{}, &journal{}
			newer.add(entries("r1", 1, 6)...)
			finish(t, newer, p.stream(courier.StreamConfig{Own: true}))
			before, err := p.js().Stream(t.Context(), protocol.Stream(bench))
			if err != nil {
				t.Fatal(err)
			}
			older.add(entries("r1", 1, 4)...)
			for _, e := range entries("r1", 5, end) {
				e.Body = fmt.Appendf(nil, `{"run":"r1","sequence":%d,"other":true}`, e.Sequence)
				older.add(e)
			}
			var said []string
			c := courier.New(bench, older, p.stream(courier.StreamConfig{Own: true}), func(err error) {
				if err != nil {
					said = append(said, err.Error())
				}
			})
			if err := c.Finish(t.Context()); err != nil {
				t.Fatalf("Finish: %v", err)
			}
			if got, want := p.ids(), older.ids(); !slices.Equal(got, want) {
				t.Errorf("the stream holds %v; want %v", got, want)
			}
			if n := c.Behind(); n != 0 || c.Trouble() != nil {
				t.Errorf("%d behind, %v; want nothing left", n, c.Trouble())
			}
			if len(said) != 1 || !strings.Contains(said[0], `message 6, id "r1.6"`) || !strings.Contains(said[0], "made anew and filled again from the logbook") {
				t.Errorf("said %q; want one word on why it is made anew", said)
			}
			after, err := p.js().Stream(t.Context(), protocol.Stream(bench))
			if err != nil || after.CachedInfo().Created.Equal(before.CachedInfo().Created) {
				t.Errorf("made at %v before and after (%v); want another time, by which followers know", before.CachedInfo().Created, err)
			}
			for n, e := range older.entries {
				m, err := after.GetMsg(t.Context(), uint64(n+1))
				if err != nil || string(m.Data) != string(e.Body) {
					t.Errorf("message %d: %v, %v; want %s", n+1, m, err, e.Body)
				}
			}
		})
	}
}

// Two daemons with copies of one logbook on one outside broker must not weave.
func TestOfTwoCouriersOnOneStreamOneIsToldOff(t *testing.T) {
	p := newPlace(t)
	a, b := &journal{}, &journal{}
	for _, j := range []*journal{a, b} {
		j.add(entries("r1", 1, 3)...)
	}
	finish(t, a, p.stream(courier.StreamConfig{}))
	finish(t, b, p.stream(courier.StreamConfig{}))
	a.add(entries("r2", 1, 1)...)
	b.add(entries("r3", 1, 1)...)
	finish(t, a, p.stream(courier.StreamConfig{}))
	c := courier.New(bench, b, p.stream(courier.StreamConfig{}), nil)
	if err := c.Finish(t.Context()); !errors.Is(err, courier.ErrForeign) {
		t.Errorf("the second: %v; want ErrForeign", err)
	}
	if got, want := p.ids(), a.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}
}

func TestPublishStoresNothingOutOfPlace(t *testing.T) {
	p := newPlace(t)
	s := p.stream(courier.StreamConfig{})
	j := &journal{}
	j.add(entries("r1", 1, 3)...)
	finish(t, j, s)
	last, err := s.Last(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	next := courier.Message{Subject: "gemel.skerry.event.r1", ID: "r1.4", Body: []byte("{}")}
	wrongID, behind, ahead := last, last, last
	wrongID.ID = "r7.3"
	behind.Sequence--
	ahead.Sequence++
	again := next
	again.ID = "r1.2"
	for name, c := range map[string]struct {
		m     courier.Message
		after courier.Last
	}{
		"after another message of the same sequence":   {next, wrongID},
		"after the last but one":                       {next, behind},
		"after a message that is not there":            {next, ahead},
		"an id that the stream holds further in front": {again, last},
	} {
		if _, err := s.Publish(t.Context(), c.m, c.after); err == nil {
			t.Errorf("%s: stored; want it refused", name)
		}
	}
	if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
		t.Errorf("the stream holds %v; want %v", got, want)
	}
}

// Beside it, one append and fsync of a plain file: what a record costs on this disk at best.
func BenchmarkPublish(b *testing.B) {
	p := newPlace(b)
	s := p.stream(courier.StreamConfig{})
	body := make([]byte, 2000) // about one reading
	last, err := s.Last(b.Context())
	if err != nil {
		b.Fatal(err)
	}
	n := int64(0)
	var publishing time.Duration
	for b.Loop() {
		n++
		e := protocol.Entry{Run: "r1", Sequence: n, Kind: protocol.ReadingEntry}
		began := time.Now()
		last, err = s.Publish(b.Context(), courier.Message{Subject: "gemel.skerry.reading.r1", ID: e.ID(), Body: body}, last)
		publishing += time.Since(began)
		if err != nil {
			b.Fatal(err)
		}
	}
	file, err := os.Create(filepath.Join(b.TempDir(), "plain"))
	if err != nil {
		b.Fatal(err)
	}
	defer file.Close()
	began := time.Now()
	const commits = 200
	for range commits {
		if _, err := file.Write(body); err != nil {
			b.Fatal(err)
		}
		if err := file.Sync(); err != nil {
			b.Fatal(err)
		}
	}
	plain := time.Since(began) / commits
	each := publishing / time.Duration(n)
	b.ReportMetric(float64(time.Second)/float64(each), "publishes/s")
	b.ReportMetric(float64(time.Second)/float64(plain), "plain_fsyncs/s")
	b.ReportMetric(float64(each)/float64(plain), "fsyncs/publish")
}

// Messages that are gone between others, as after a damaged disk, are not filled in where they were:
// the stream is made anew, unless it is another logbook's.
func TestARealStreamWithAHoleIsMadeAnew(t *testing.T) {
	for name, gone := range map[string][]uint64{"in its middle": {3, 4}, "at its end": {5, 6}} {
		t.Run(name, func(t *testing.T) {
			p := newPlace(t)
			j, theirs := &journal{}, &journal{}
			j.add(entries("r1", 1, 6)...)
			theirs.add(entries("r9", 1, 6)...)
			finish(t, j, p.stream(courier.StreamConfig{}))
			// Nobody may delete a message, so a stream that lets them be is put in its place.
			js := p.js()
			name := protocol.Stream(bench)
			if err := js.DeleteStream(t.Context(), name); err != nil {
				t.Fatal(err)
			}
			stream, err := js.CreateStream(t.Context(), jetstream.StreamConfig{Name: name, Subjects: protocol.StreamSubjects(bench)})
			if err != nil {
				t.Fatal(err)
			}
			for _, e := range j.entries {
				m := &nats.Msg{Subject: protocol.Subject(bench, e.Kind, e.Run), Data: e.Body, Header: nats.Header{nats.MsgIdHdr: {e.Entry.ID()}}}
				if _, err := js.PublishMsg(t.Context(), m); err != nil {
					t.Fatal(err)
				}
			}
			for _, n := range gone {
				if err := stream.DeleteMsg(t.Context(), n); err != nil {
					t.Fatal(err)
				}
			}
			c := courier.New(bench, theirs, p.stream(courier.StreamConfig{}), nil)
			if err := c.Finish(t.Context()); !errors.Is(err, courier.ErrForeign) {
				t.Errorf("another logbook's courier: %v; want ErrForeign", err)
			}
			j.add(entries("r2", 1, 1)...)
			finish(t, j, p.stream(courier.StreamConfig{}))
			if got, want := p.ids(), j.ids(); !slices.Equal(got, want) {
				t.Errorf("the stream holds %v; want %v", got, want)
			}
		})
	}
}

func TestAWholeStreamIsReadThroughAndLeftAlone(t *testing.T) {
	p := newPlace(t)
	j := &journal{}
	j.add(entries("r1", 1, 500)...)
	finish(t, j, p.stream(courier.StreamConfig{}))
	s := p.stream(courier.StreamConfig{})
	s.CheckOnce()
	began := time.Now()
	last, err := s.Last(t.Context())
	if err != nil || last.Renew != nil || last.ID != "r1.500" {
		t.Errorf("the stream ends in %+v, %v; want it whole", last, err)
	}
	t.Logf("500 messages were read through in %s", time.Since(began))
}
