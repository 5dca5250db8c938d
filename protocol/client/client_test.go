package client_test

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/nats-io/nats-server/v2/server"
	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/nats-io/nkeys"
	"go.uber.org/goleak"

	"gemel/protocol"
	"gemel/protocol/client"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

const bench = "skerry"

// bus is a broker without a daemon: the tests play the daemon on its connection, by hand.
type bus struct {
	dir     string
	options server.Options
	server  *server.Server
	daemon  *nats.Conn
	js      jetstream.JetStream
}

func seed(t *testing.T, file string) (public string) {
	t.Helper()
	pair, err := nkeys.CreateUser()
	if err != nil {
		t.Fatal(err)
	}
	text, err := pair.Seed()
	if err == nil {
		err = os.WriteFile(file, text, 0o600)
	}
	if err == nil {
		public, err = pair.PublicKey()
	}
	if err != nil {
		t.Fatal(err)
	}
	return public
}

func newBus(t *testing.T) *bus {
	t.Helper()
	b := &bus{dir: t.TempDir()}
	b.options = server.Options{Host: "127.0.0.1", Port: server.RANDOM_PORT, NoSigs: true, NoLog: true, JetStream: true, StoreDir: filepath.Join(b.dir, "nats"),
		Nkeys: []*server.NkeyUser{
			{Nkey: seed(t, filepath.Join(b.dir, "daemon.nk"))},
			{Nkey: seed(t, filepath.Join(b.dir, "control.nk"))},
			{Nkey: seed(t, filepath.Join(b.dir, "watch.nk")), Permissions: &server.Permissions{
				Publish:   &server.SubjectPermission{Allow: []string{"gemel.skerry.do.status"}},
				Subscribe: &server.SubjectPermission{Allow: []string{"_INBOX_watch.>"}},
			}},
		}}
	b.start(t)
	t.Cleanup(b.stop)
	contact, err := json.Marshal(protocol.Contact{URL: b.server.ClientURL(), Bench: bench, Control: "control.nk", Watch: "watch.nk"})
	if err == nil {
		err = os.WriteFile(filepath.Join(b.dir, "contact.json"), contact, 0o600)
	}
	if err != nil {
		t.Fatal(err)
	}
	b.daemon, err = client.Options{URL: b.server.ClientURL(), Creds: filepath.Join(b.dir, "daemon.nk")}.Dial()
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		closed := b.daemon.StatusChanged(nats.CLOSED)
		b.daemon.Close()
		for !b.daemon.IsClosed() {
			<-closed
		}
	})
	b.js, err = jetstream.New(b.daemon)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func (b *bus) start(t *testing.T) {
	t.Helper()
	options := b.options
	srv, err := server.NewServer(&options)
	if err != nil {
		t.Fatal(err)
	}
	srv.Start()
	if !srv.ReadyForConnections(10 * time.Second) {
		t.Fatal("the broker did not start")
	}
	b.server, b.options.Port = srv, options.Port
}

func (b *bus) stop() {
	b.server.Shutdown()
	b.server.WaitForShutdown()
}

func (b *bus) stream(t *testing.T) {
	t.Helper()
	_, err := b.js.CreateStream(t.Context(), jetstream.StreamConfig{Name: "GEMEL_skerry", Subjects: protocol.StreamSubjects(bench)})
	if err != nil {
		t.Fatal(err)
	}
}

func (b *bus) publish(t *testing.T, run protocol.RunID, from, to int64) {
	t.Helper()
	for n := from; n <= to; n++ {
		e := protocol.Entry{Run: run, Sequence: n}
		kind := []protocol.EntryKind{protocol.EventEntry, protocol.ReadingEntry}[n%2]
		for { // over a reconnection, too
			_, err := b.js.Publish(t.Context(), protocol.Subject(bench, kind, run), fmt.Appendf(nil, `{"sequence":%d}`, n), jetstream.WithMsgID(e.ID()))
			if err == nil {
				break
			}
			if t.Context().Err() != nil {
				t.Fatal(err)
			}
		}
	}
}

func (b *bus) client(t *testing.T, role string) *client.Client {
	t.Helper()
	c, err := client.ConnectFolder(b.dir, role)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(c.Close)
	return c
}

func TestAFolderTellsWhetherADaemonRuns(t *testing.T) {
	if _, err := client.ConnectFolder(t.TempDir(), protocol.ControlRole); !errors.Is(err, client.ErrNotRunning) {
		t.Errorf("an empty folder: %v; want ErrNotRunning", err)
	}
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	if _, err := c.Status(t.Context()); !errors.Is(err, client.ErrNoDaemon) {
		t.Errorf("a broker without a daemon: %v; want ErrNoDaemon", err)
	}
	b.stop()
	if _, err := client.ConnectFolder(b.dir, protocol.ControlRole); !errors.Is(err, client.ErrGone) {
		t.Errorf("a contact file and nobody there: %v; want ErrGone", err)
	}
	for text, want := range map[string]string{"{": "contact.json", `{"bench":"skerry"}`: "want both", `{"url":"nats://x","bench":"a.b"}`: "want both"} {
		if err := os.WriteFile(filepath.Join(b.dir, "contact.json"), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
		_, err := client.ConnectFolder(b.dir, protocol.ControlRole)
		if err == nil || !strings.Contains(err.Error(), want) || errors.Is(err, client.ErrNotRunning) {
			t.Errorf("contact file %s: %v; want it called broken", text, err)
		}
	}
}

func TestBadOptionsAreRefused(t *testing.T) {
	dir := t.TempDir()
	file := filepath.Join(dir, "x.nk")
	if err := os.WriteFile(file, []byte("SECRET"), 0o600); err != nil {
		t.Fatal(err)
	}
	for name, o := range map[string]client.Options{
		"no bench":        {URL: "nats://127.0.0.1:1"},
		"no such file":    {URL: "nats://127.0.0.1:1", Bench: bench, Creds: filepath.Join(dir, "none.nk")},
		"no seed in file": {URL: "nats://127.0.0.1:1", Bench: bench, Creds: file},
		"nobody there":    {URL: "nats://127.0.0.1:1", Bench: bench},
	} {
		c, err := client.Connect(o)
		if err == nil {
			c.Close()
			t.Errorf("%s: connected; want an error", name)
		} else if strings.Contains(err.Error(), "SECRET") {
			t.Errorf("%s: the error quotes the file: %v", name, err)
		}
	}
}

func TestRequestsAreSentAsTheContractSays(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	requests := make(chan string, 1)
	_, err := b.daemon.Subscribe("gemel.skerry.do.*", func(m *nats.Msg) {
		requests <- strings.TrimPrefix(m.Subject, "gemel.skerry.do.") + " " + string(m.Data)
		_ = m.Respond([]byte(`{"run":"r1","state":"holding","causes":["operator"],"recorded":true}`))
	})
	if err == nil {
		err = b.daemon.Flush()
	}
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	deadline, _ := ctx.Deadline()
	expiry := `"expires_at":"` + protocol.Time{Time: deadline}.String() + `"`

	start, err := c.Start(ctx, protocol.StartRequest{RecipeName: "demo", Key: "k", Who: "night"})
	if got, want := <-requests, `start {"recipe_name":"demo","key":"k","who":"night",`+expiry+`}`; got != want || err != nil || start.Run != "r1" {
		t.Errorf("sent %s, %+v, %v; want %s", got, start, err, want)
	}
	r := protocol.RunRequest{Run: "r1", Who: "night"}
	for verb, do := range map[string]func(context.Context, protocol.RunRequest) (protocol.RunReply, error){"stop": c.Stop, "hold": c.Hold} {
		reply, err := do(ctx, r)
		if got, want := <-requests, verb+` {"run":"r1","who":"night"}`; got != want || err != nil || reply.State != protocol.Holding ||
			!slices.Equal(reply.Causes, []protocol.Cause{protocol.ByOperator}) {
			t.Errorf("sent %s, %+v, %v; want %s", got, reply, err, want)
		}
	}
	_, err = c.Resume(ctx, r)
	if got, want := <-requests, `resume {"run":"r1","who":"night",`+expiry+`}`; got != want || err != nil {
		t.Errorf("sent %s, %v; want %s", got, err, want)
	}
	_, err = c.Start(t.Context(), protocol.StartRequest{Recipe: "title: x"})
	var sent protocol.StartRequest
	body := strings.TrimPrefix(<-requests, "start ")
	if e := json.Unmarshal([]byte(body), &sent); e != nil || err != nil || sent.Key == "" || sent.ExpiresAt != nil {
		t.Errorf("sent %s, %v; want a key made up and no expiry", body, err)
	}
	_, err = c.Status(ctx)
	if got := <-requests; got != "status {}" || err != nil {
		t.Errorf("sent %s, %v; want status {}", got, err)
	}
}

func TestARefusalComesBackAsOne(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	_, err := b.daemon.Subscribe("gemel.skerry.do.start", func(m *nats.Msg) {
		answer := nats.NewMsg(m.Reply)
		answer.Header.Set("Nats-Service-Error", "recipe: 1 finding")
		answer.Header.Set("Nats-Service-Error-Code", "422")
		answer.Data = []byte(`{"error":"recipe: 1 finding","findings":[{"file":"a.yaml","line":3,"column":9,"key":"dwell","found":"2","want":"a time"}]}`)
		_ = m.RespondMsg(answer)
	})
	if err == nil {
		_, err = b.daemon.Subscribe("gemel.skerry.do.stop", func(m *nats.Msg) {
			answer := nats.NewMsg(m.Reply)
			answer.Header.Set("Nats-Service-Error", "no run r9")
			answer.Header.Set("Nats-Service-Error-Code", "404")
			_ = m.RespondMsg(answer)
		})
	}
	if err == nil {
		err = b.daemon.Flush()
	}
	if err != nil {
		t.Fatal(err)
	}
	_, err = c.Start(t.Context(), protocol.StartRequest{Recipe: "x"})
	r, ok := errors.AsType[*protocol.Refusal](err)
	if !ok || r.Code != 422 || len(r.Findings) != 1 || r.Findings[0].String() != "a.yaml:3:9: dwell: 2; want a time" {
		t.Errorf("start: %#v; want the refusal with its finding", err)
	}
	_, err = c.Stop(t.Context(), protocol.RunRequest{Run: "r9"})
	if r, ok := errors.AsType[*protocol.Refusal](err); !ok || r.Code != 404 || r.Error() != "no run r9" {
		t.Errorf("stop: %#v; want 404", err)
	}
}

func TestWhatARoleMayNotDoIsSaidAtOnce(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.WatchRole)
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	began := time.Now()
	if _, err := c.Stop(ctx, protocol.RunRequest{Run: "r1"}); !errors.Is(err, client.ErrForbidden) {
		t.Errorf("stop: %v; want ErrForbidden", err)
	}
	for e, err := range c.Follow(ctx, "", 1) {
		if !errors.Is(err, client.ErrForbidden) {
			t.Errorf("follow: %v, %v; want ErrForbidden", e, err)
		}
	}
	if d := time.Since(began); d > 30*time.Second {
		t.Errorf("it took %v; want no waiting for a time-out", d)
	}
}

// heard is what a follower yielded, as "<run>.<sequence>" or the gap's text.
type heard chan string

func follow(t *testing.T, c *client.Client, run protocol.RunID, from int64) (heard, context.CancelFunc) {
	t.Helper()
	ctx, cancel := context.WithCancel(t.Context())
	h := make(heard, 1000)
	done := make(chan struct{})
	go func() {
		defer close(done)
		for e, err := range c.Follow(ctx, run, from) {
			if err != nil {
				h <- err.Error()
				continue
			}
			if want := fmt.Sprintf(`{"sequence":%d}`, e.Sequence); string(e.Body) != want {
				h <- "body " + string(e.Body)
			}
			h <- e.ID()
		}
	}()
	end := func() { cancel(); <-done }
	t.Cleanup(end)
	return h, end
}

func (h heard) want(t *testing.T, list ...string) {
	t.Helper()
	for i, w := range list {
		select {
		case got := <-h:
			if got != w {
				t.Fatalf("number %d is %q; want %q", i+1, got, w)
			}
		case <-time.After(time.Minute):
			t.Fatalf("number %d does not come; want %q", i+1, w)
		}
	}
}

func ids(run string, from, to int) []string {
	var list []string
	for n := from; n <= to; n++ {
		list = append(list, fmt.Sprintf("%s.%d", run, n))
	}
	return list
}

func TestFollowYieldsWhatIsThereAndWhatComes(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	b.publish(t, "r1", 1, 300) // more than one batch
	b.publish(t, "r2", 1, 3)
	b.publish(t, "r1", 301, 302)
	c := b.client(t, protocol.ControlRole)
	all, _ := follow(t, c, "", 1)
	one, _ := follow(t, c, "r1", 1)
	late, _ := follow(t, c, "r1", 300)
	all.want(t, slices.Concat(ids("r1", 1, 300), ids("r2", 1, 3), ids("r1", 301, 302))...)
	one.want(t, ids("r1", 1, 302)...)
	late.want(t, ids("r1", 300, 302)...)
	b.publish(t, "r2", 4, 4)
	b.publish(t, "r1", 303, 303)
	all.want(t, "r2.4", "r1.303")
	one.want(t, "r1.303")
	late.want(t, "r1.303")
}

func TestFollowFromNowYieldsOnlyWhatComes(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	b.publish(t, "r1", 1, 5)
	c := b.client(t, protocol.ControlRole)
	h, _ := follow(t, c, "", 0)
	stream, err := b.js.Stream(t.Context(), "GEMEL_skerry")
	if err != nil {
		t.Fatal(err)
	}
	for n := 0; n == 0; { // until it listens
		info, err := stream.Info(t.Context())
		if err != nil {
			t.Fatal(err)
		}
		n = info.State.Consumers
	}
	b.publish(t, "r1", 6, 7)
	h.want(t, "r1.6", "r1.7")
}

func TestFollowWaitsForAStreamThatIsNotThereYet(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	h, _ := follow(t, c, "r1", 1)
	b.stream(t)
	b.publish(t, "r1", 1, 3)
	h.want(t, ids("r1", 1, 3)...)
}

func TestFollowSaysWhatIsMissing(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	b.publish(t, "r1", 4, 5)
	b.publish(t, "r1", 8, 8)
	c := b.client(t, protocol.ControlRole)
	h, _ := follow(t, c, "r1", 1)
	h.want(t, "run r1: entries 1 to 3 are not in the stream", "r1.4", "r1.5", "run r1: entries 6 to 7 are not in the stream", "r1.8")
}

func TestFollowYieldsNothingTwice(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	c := b.client(t, protocol.ControlRole)
	h, _ := follow(t, c, "", 1)
	b.publish(t, "r0", 1, 5)
	b.publish(t, "r1", 1, 20)
	h.want(t, append(ids("r0", 1, 5), ids("r1", 1, 20)...)...)
	// The broker goes and comes back.
	b.stop()
	b.start(t)
	b.publish(t, "r1", 21, 30)
	h.want(t, ids("r1", 21, 30)...)
	// The stream is made anew, and what it is filled with stands elsewhere than before.
	if err := b.js.DeleteStream(t.Context(), "GEMEL_skerry"); err != nil {
		t.Fatal(err)
	}
	b.stream(t)
	b.publish(t, "r1", 1, 33)
	h.want(t, ids("r1", 31, 33)...)
}

// A rescued logbook, or an older one, goes on with sequences that were published with other bodies.
// Whoever follows by sequence is told from which one on, and gets what holds now.
func TestFollowSaysWhatAnotherLogbooksStreamContradicts(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	c := b.client(t, protocol.ControlRole)
	ctx, cancel := context.WithCancel(t.Context())
	defer cancel()
	heard := make(chan string, 100)
	done := make(chan struct{})
	go func() {
		defer close(done)
		for e, err := range c.Follow(ctx, "", 1) {
			if err != nil {
				heard <- err.Error()
				continue
			}
			heard <- e.ID() + " " + string(e.Body)
		}
	}()
	want := func(list ...string) {
		t.Helper()
		for _, w := range list {
			if got := <-heard; got != w {
				t.Fatalf("got %q; want %q", got, w)
			}
		}
	}
	publish := func(n int64, body string) {
		t.Helper()
		id := protocol.Entry{Run: "r1", Sequence: n}.ID()
		if _, err := b.js.Publish(t.Context(), "gemel.skerry.event.r1", []byte(body), jetstream.WithMsgID(id)); err != nil {
			t.Fatal(err)
		}
	}
	for n := int64(1); n <= 6; n++ {
		publish(n, `{"old":true}`)
	}
	for n := 1; n <= 6; n++ {
		want(fmt.Sprintf(`r1.%d {"old":true}`, n))
	}
	if err := b.js.DeleteStream(t.Context(), "GEMEL_skerry"); err != nil {
		t.Fatal(err)
	}
	b.stream(t)
	for n := int64(1); n <= 3; n++ {
		publish(n, `{"old":true}`)
	}
	publish(4, `{"new":true}`)
	publish(5, `{"new":true}`)
	want("run r1: the stream was made anew from another logbook; from entry 4 on it is not what was followed", `r1.4 {"new":true}`, `r1.5 {"new":true}`)
	cancel()
	<-done
}

func TestAMessageThatIsNoEntryEndsFollowing(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	if _, err := b.js.Publish(t.Context(), "gemel.skerry.event.r1", []byte("{}"), jetstream.WithMsgID("r2.1")); err != nil {
		t.Fatal(err)
	}
	c := b.client(t, protocol.ControlRole)
	h, _ := follow(t, c, "", 1)
	h.want(t, `GEMEL_skerry: message on "gemel.skerry.event.r1" with id "r2.1": not an entry of a journal`)
}

// A reader may have the server answer on a subject of the journal.
func TestAnAnswerOfTheServersAmongTheEntriesIsPassedOver(t *testing.T) {
	b := newBus(t)
	b.stream(t)
	b.publish(t, "r1", 1, 2)
	if _, err := b.js.Publish(t.Context(), "gemel.skerry.event.r1", []byte("{}")); err != nil {
		t.Fatal(err)
	}
	b.publish(t, "r1", 3, 4)
	h, _ := follow(t, b.client(t, protocol.ControlRole), "", 1)
	h.want(t, ids("r1", 1, 4)...)
}
