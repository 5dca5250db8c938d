package remote_test

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/nats-io/nats.go/micro"
	"go.uber.org/goleak"

	"gemel/daemon/broker"
	"gemel/daemon/courier"
	"gemel/daemon/remote"
	"gemel/protocol"
	"gemel/protocol/client"
)

func TestMain(m *testing.M) { goleak.VerifyTestMain(m) }

const bench = "skerry"

// keeper is a stand-in that notes what it was asked.
type keeper struct {
	mu    sync.Mutex
	asked []string
	start func(protocol.StartRequest) (protocol.StartReply, error)
	onRun func(protocol.RunRequest) (protocol.RunReply, error)
}

func (k *keeper) note(format string, v ...any) {
	k.mu.Lock()
	defer k.mu.Unlock()
	k.asked = append(k.asked, fmt.Sprintf(format, v...))
}

func (k *keeper) notes() string {
	k.mu.Lock()
	defer k.mu.Unlock()
	return strings.Join(k.asked, "; ")
}

func (k *keeper) Start(_ context.Context, r protocol.StartRequest) (protocol.StartReply, error) {
	k.note("start %s by %s", r.RecipeName, r.Who)
	if k.start != nil {
		return k.start(r)
	}
	return protocol.StartReply{Run: "r1"}, nil
}

func (k *keeper) run(verb string, r protocol.RunRequest) (protocol.RunReply, error) {
	k.note("%s %s by %s", verb, r.Run, r.Who)
	if k.onRun != nil {
		return k.onRun(r)
	}
	return protocol.RunReply{Run: r.Run, State: protocol.Holding, Recorded: true}, nil
}

func (k *keeper) Stop(_ context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return k.run("stop", r)
}

func (k *keeper) Hold(_ context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return k.run("hold", r)
}

func (k *keeper) Resume(_ context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return k.run("resume", r)
}

func (k *keeper) Queue(context.Context) (protocol.QueueReply, error) {
	return protocol.QueueReply{Bench: bench}, nil
}

func (k *keeper) Reorder(_ context.Context, r protocol.ReorderRequest) (protocol.QueueReply, error) {
	k.note("reorder %v by %s", r.Runs, r.Who)
	return protocol.QueueReply{Bench: bench, Queue: []protocol.QueuedRun{{Run: "r2", Title: "Ring", State: protocol.Queued, ReadingsPlanned: new(3)}}}, nil
}

func (k *keeper) Withdraw(_ context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return k.run("withdraw", r)
}

func (k *keeper) StopAfterPoint(_ context.Context, r protocol.RunRequest) (protocol.RunReply, error) {
	return k.run("stop after point", r)
}

func (k *keeper) Status(context.Context) protocol.Status {
	return protocol.Status{Bench: bench, Version: "1.2.3", State: protocol.Running, Run: "r1"}
}

type station struct {
	dir    string
	daemon *nats.Conn
	end    func() error // ends Serve
}

// serve runs broker and service; panics are sent to the channel when there is one.
func serve(t *testing.T, k remote.Keeper, panics chan string) *station {
	t.Helper()
	s := &station{dir: t.TempDir()}
	b, err := broker.New(broker.Config{Bench: bench, Dir: s.dir})
	if err != nil {
		t.Fatal(err)
	}
	s.startBroker(t, b)
	s.daemon, err = b.Connect("daemon")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { closeConn(s.daemon) })
	ctx, cancel := context.WithCancel(context.Background())
	served := make(chan error, 1)
	c := remote.Config{Bench: bench, Version: "1.2.3-test", Panicked: func(verb string, v any, stack []byte) {
		if panics != nil {
			panics <- fmt.Sprintf("%s: %v, %d bytes of stack", verb, v, min(len(stack), 1))
		}
	}}
	go func() { served <- remote.Serve(ctx, s.daemon, k, c) }()
	s.end = sync.OnceValue(func() error { cancel(); return <-served })
	t.Cleanup(func() {
		if err := s.end(); err != nil {
			t.Errorf("Serve ended with %v; want nil", err)
		}
	})
	// The service is there when all its endpoints are.
	nc := s.connect(t, protocol.ControlRole)
	for n := 0; n < 9; {
		m, err := nc.Request("$SRV.INFO.gemel", nil, 5*time.Second)
		if errors.Is(err, nats.ErrNoResponders) && s.early(served) == nil {
			continue
		}
		if err != nil {
			t.Fatal(err)
		}
		var info micro.Info
		if err := json.Unmarshal(m.Data, &info); err != nil {
			t.Fatal(err)
		}
		n = len(info.Endpoints)
	}
	return s
}

// early tells whether Serve has ended when it should not.
func (s *station) early(served chan error) error {
	select {
	case err := <-served:
		served <- err
		return fmt.Errorf("Serve ended: %w", err)
	default:
		return nil
	}
}

func (s *station) startBroker(t *testing.T, b *broker.Broker) {
	t.Helper()
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan error, 1)
	go func() { done <- b.Run(ctx) }()
	t.Cleanup(func() {
		cancel()
		if err := <-done; err != nil {
			t.Error(err)
		}
	})
	select {
	case <-b.Ready():
	case err := <-done:
		done <- err
		t.Fatal(err)
	}
}

func closeConn(nc *nats.Conn) {
	closed := nc.StatusChanged(nats.CLOSED)
	nc.Close()
	for !nc.IsClosed() {
		<-closed
	}
}

// connect is a plain NATS connection that knows a credential file and no more.
func (s *station) connect(t *testing.T, role string) *nats.Conn {
	t.Helper()
	contact, err := client.ReadContact(s.dir)
	if err != nil {
		t.Fatal(err)
	}
	seed, err := nats.NkeyOptionFromSeed(filepath.Join(s.dir, role+".nk"))
	if err != nil {
		t.Fatal(err)
	}
	nc, err := nats.Connect(contact.URL, seed, nats.CustomInboxPrefix(protocol.InboxPrefix(role)))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { closeConn(nc) })
	return nc
}

// ask sends a request as it is and returns code, error text and body.
func ask(t *testing.T, nc *nats.Conn, verb, body string) (code, text, answer string) {
	t.Helper()
	m, err := nc.Request("gemel.skerry.do."+verb, []byte(body), 10*time.Second)
	if err != nil {
		t.Fatalf("%s %.60s: %v", verb, body, err)
	}
	return m.Header.Get("Nats-Service-Error-Code"), m.Header.Get("Nats-Service-Error"), string(m.Data)
}

func TestRequestsReachTheKeeperAndAreAnswered(t *testing.T) {
	k := &keeper{}
	nc := serve(t, k, nil).connect(t, protocol.ControlRole)
	soon := protocol.Time{Time: time.Now().Add(time.Hour)}.String()
	for _, c := range []struct{ verb, body, answer string }{
		{"start", `{"recipe_name":"demo","key":"k1","who":"night"}`, `{"run":"r1"}`},
		{"start", `{"recipe":"title: x","key":"k1","who":"night","expires_at":"` + soon + `"}`, `{"run":"r1"}`},
		{"stop", `{"run":"r1","who":"night"}`, `{"run":"r1","state":"holding","causes":[],"recorded":true}`},
		{"hold", `{"run":"r1"}`, `{"run":"r1","state":"holding","causes":[],"recorded":true}`},
		{"resume", ` {"who":"night","run":"r1"} `, `{"run":"r1","state":"holding","causes":[],"recorded":true}`},
		{"withdraw", `{"run":"r1","who":"night"}`, `{"run":"r1","state":"holding","causes":[],"recorded":true}`},
		{"stop_after_point", `{"run":"r1","who":"night"}`, `{"run":"r1","state":"holding","causes":[],"recorded":true}`},
		{"reorder", `{"runs":["r2","r1"],"who":"night","expires_at":"` + soon + `"}`,
			`{"bench":"skerry","queue":[{"run":"r2","title":"Ring","queued_at":null,"who":"","state":"queued","readings_planned":3}]}`},
		{"queue", `{}`, `{"bench":"skerry","queue":[]}`},
		{"queue", ``, `{"bench":"skerry","queue":[]}`},
	} {
		code, text, answer := ask(t, nc, c.verb, c.body)
		if code != "" || text != "" || answer != c.answer {
			t.Errorf("%s %s: %s %s %s; want %s", c.verb, c.body, code, text, answer, c.answer)
		}
	}
	if got, want := k.notes(), "start demo by night; start  by night; stop r1 by night; hold r1 by ; resume r1 by night; withdraw r1 by night; stop after point r1 by night; reorder [r2 r1] by night"; got != want {
		t.Errorf("the keeper heard %q; want %q", got, want)
	}
	for _, body := range []string{"{}", ""} {
		_, _, answer := ask(t, nc, "status", body)
		var s map[string]any
		if err := json.Unmarshal([]byte(answer), &s); err != nil || s["bench"] != bench || s["run"] != "r1" || s["time_left_s"] != nil {
			t.Errorf("status %q: %s, %v", body, answer, err)
		}
		if fmt.Sprint(s["causes"]) != "[]" || fmt.Sprint(s["queue"]) != "[]" {
			t.Errorf("empty lists are %v and %v; want []", s["causes"], s["queue"])
		}
	}
}

func TestRequestsThatExecuteNothing(t *testing.T) {
	k := &keeper{}
	nc := serve(t, k, nil).connect(t, protocol.ControlRole)
	past := protocol.Time{Time: time.Now().Add(-time.Second)}.String()
	big := strings.Repeat("x", 1<<20)
	for _, c := range []struct{ name, verb, body, code, text string }{
		{"expired start", "start", `{"recipe_name":"a","key":"k","who":"w","expires_at":"` + past + `"}`, "408", "expired at"},
		{"expired stop", "stop", `{"run":"r1","expires_at":"` + past + `"}`, "408", "nothing was done"},
		{"unknown key", "stop", `{"run":"r1","runs":"r2"}`, "400", `key "runs"; want only run, who, expires_at`},
		{"key in another case", "stop", `{"Run":"r1"}`, "400", `key "Run"`},
		{"key twice", "stop", `{"run":"r1","run":"r2"}`, "400", `key "run" twice`},
		{"null", "stop", `{"run":"r1","who":null}`, "400", "who: null"},
		{"trailing data", "stop", `{"run":"r1"}{"run":"r2"}`, "400", "something follows"},
		{"trailing bracket", "stop", `{"run":"r1"}}`, "400", "something follows"},
		{"cut off", "stop", `{"run":"r1"`, "400", "request"},
		{"no object", "stop", `["r1"]`, "400", "no JSON object"},
		{"nothing", "stop", ``, "400", "no JSON object"},
		{"not UTF-8", "stop", "{\"run\":\"r1\",\"who\":\"\xff\"}", "400", "not UTF-8"},
		{"wrong type", "stop", `{"run":1}`, "400", "run"},
		{"time that is none", "stop", `{"run":"r1","expires_at":"tomorrow"}`, "400", `"tomorrow"`},
		{"no run", "stop", `{"who":"w"}`, "400", "want the name of the run"},
		{"run that is no token", "hold", `{"run":"r1.*"}`, "400", "want the name of the run"},
		{"long who", "hold", `{"run":"r1","who":"` + big[:300] + `"}`, "400", "who of 300 bytes"},
		{"large", "resume", `{"run":"` + big[:70000] + `"}`, "413", "want at most 65536"},
		{"large start", "start", `{"recipe":"` + big + big + big + `"}`, "413", "want at most"},
		{"recipe too long", "start", `{"recipe":"` + big + `x","key":"k"}`, "413", "a recipe of 1048577 bytes"},
		{"two recipes", "start", `{"recipe":"a","recipe_name":"a","key":"k"}`, "400", "exactly one"},
		{"no recipe", "start", `{"key":"k"}`, "400", "exactly one"},
		{"no key", "start", `{"recipe":"a"}`, "400", "no key"},
		{"status with something", "status", `{"run":"r1"}`, "400", "want only an empty object"},
		{"queue with something", "queue", `{"run":"r1"}`, "400", "want only an empty object"},
		{"reorder of nothing", "reorder", `{"runs":[]}`, "400", "0 runs; want 1 to 200"},
		{"reorder without runs", "reorder", `{"who":"w"}`, "400", "0 runs"},
		{"reorder of too many", "reorder", `{"runs":["r` + strings.Repeat(`","r`, 200) + `"]}`, "400", "201 runs"},
		{"reorder of no tokens", "reorder", `{"runs":["r1","r.*"]}`, "400", `run "r.*"`},
		{"reorder of null", "reorder", `{"runs":[null]}`, "400", `run ""`},
		{"reorder of numbers", "reorder", `{"runs":[1]}`, "400", "runs"},
		{"reorder of a run", "reorder", `{"runs":"r1"}`, "400", "runs"},
		{"reorder as large as a recipe", "reorder", `{"runs":["` + big[:70000] + `"]}`, "413", "want at most 65536"},
		{"reorder by a long name", "reorder", `{"runs":["r1"],"who":"` + big[:300] + `"}`, "400", "who of 300 bytes"},
		{"expired reorder", "reorder", `{"runs":["r1"],"expires_at":"` + past + `"}`, "408", "nothing was done"},
		{"withdraw of no run", "withdraw", `{}`, "400", "want the name of the run"},
		{"expired withdraw", "withdraw", `{"run":"r1","expires_at":"` + past + `"}`, "408", "nothing was done"},
		{"forecast", "forecast", `{}`, "501", "not available yet"},
	} {
		t.Run(c.name, func(t *testing.T) {
			code, text, answer := ask(t, nc, c.verb, c.body)
			if code != c.code || !strings.Contains(text, c.text) {
				t.Errorf("answered %s %q; want %s and %q", code, text, c.code, c.text)
			}
			var p protocol.Problem
			if err := json.Unmarshal([]byte(answer), &p); err != nil || p.Error == "" || p.Findings == nil {
				t.Errorf("body %s, %v; want a problem", answer, err)
			}
		})
	}
	if k.notes() != "" {
		t.Errorf("the keeper heard %q; want nothing", k.notes())
	}
}

func TestARecipeOfTheLargestSizeArrives(t *testing.T) {
	arrived := make(chan int, 1)
	k := &keeper{start: func(r protocol.StartRequest) (protocol.StartReply, error) {
		arrived <- len(r.Recipe)
		return protocol.StartReply{Run: "r1"}, nil
	}}
	nc := serve(t, k, nil).connect(t, protocol.ControlRole)
	body, err := json.Marshal(protocol.StartRequest{Recipe: strings.Repeat("\n", 1<<20), Key: "k", Who: "w"})
	if err != nil {
		t.Fatal(err)
	}
	if code, text, _ := ask(t, nc, "start", string(body)); code != "" {
		t.Fatalf("answered %s %s", code, text)
	}
	if got := <-arrived; got != 1<<20 {
		t.Errorf("%d bytes arrived; want 1 MiB", got)
	}
}

func TestAKeepersRefusalTravelsWholeAndOtherErrorsAreDefects(t *testing.T) {
	found := protocol.Finding{File: "recipe.yaml", Line: 14, Col: 11, Key: "sweep[1].step", Found: "0.05 has no unit", Want: `an angle such as "0.05 deg"`}
	refusal := &protocol.Refusal{Code: 422, Problem: protocol.Problem{Error: "recipe: 1 finding\nsecond line", Findings: []protocol.Finding{found}}}
	k := &keeper{start: func(protocol.StartRequest) (protocol.StartReply, error) {
		return protocol.StartReply{}, fmt.Errorf("start: %w", refusal)
	}, onRun: func(protocol.RunRequest) (protocol.RunReply, error) {
		return protocol.RunReply{}, errors.New("disk on fire")
	}}
	nc := serve(t, k, nil).connect(t, protocol.ControlRole)
	code, text, answer := ask(t, nc, "start", `{"recipe":"a","key":"k"}`)
	if code != "422" || text != "start: recipe: 1 finding second line" {
		t.Errorf("headers %s %q", code, text)
	}
	var p protocol.Problem
	if err := json.Unmarshal([]byte(answer), &p); err != nil || len(p.Findings) != 1 || p.Findings[0] != found {
		t.Errorf("body %s, %v; want the finding", answer, err)
	}
	if code, text, _ := ask(t, nc, "hold", `{"run":"r1"}`); code != "500" || text != "disk on fire" {
		t.Errorf("another error is answered %s %q; want 500", code, text)
	}
}

func TestAStopIsAnsweredWhileAStartIsSlow(t *testing.T) {
	begun, release := make(chan bool), make(chan bool)
	k := &keeper{start: func(protocol.StartRequest) (protocol.StartReply, error) {
		begun <- true
		<-release
		return protocol.StartReply{Run: "r2"}, nil
	}}
	nc := serve(t, k, nil).connect(t, protocol.ControlRole)
	slow := make(chan string)
	go func() {
		m, err := nc.Request("gemel.skerry.do.start", []byte(`{"recipe":"a","key":"k"}`), 10*time.Second)
		if err != nil {
			slow <- err.Error()
			return
		}
		slow <- string(m.Data)
	}()
	<-begun
	for _, verb := range []string{"stop", "hold", "resume"} {
		if code, text, answer := ask(t, nc, verb, `{"run":"r1"}`); code != "" {
			t.Errorf("%s while starting: %s %s %s", verb, code, text, answer)
		}
	}
	if code, _, _ := ask(t, nc, "status", ``); code != "" {
		t.Error("no status while starting")
	}
	release <- true
	if got := <-slow; got != `{"run":"r2"}` {
		t.Errorf("the start is answered %s", got)
	}
}

// The second start is well in time when it arrives and late when its turn comes.
func TestARequestThatExpiresWhileItWaitsExecutesNothing(t *testing.T) {
	begun, release := make(chan bool), make(chan bool)
	k := &keeper{start: func(protocol.StartRequest) (protocol.StartReply, error) {
		begun <- true
		<-release
		return protocol.StartReply{Run: "r2"}, nil
	}}
	nc := serve(t, k, nil).connect(t, protocol.ControlRole)
	answers := make(chan *nats.Msg, 2)
	if _, err := nc.ChanSubscribe("_INBOX.answers", answers); err != nil {
		t.Fatal(err)
	}
	if err := nc.PublishRequest("gemel.skerry.do.start", "_INBOX.answers", []byte(`{"recipe_name":"first","key":"k"}`)); err != nil {
		t.Fatal(err)
	}
	<-begun
	expiry := time.Now().Add(50 * time.Millisecond)
	body := `{"recipe_name":"second","key":"k2","expires_at":"` + protocol.Time{Time: expiry}.String() + `"}`
	if err := nc.PublishRequest("gemel.skerry.do.start", "_INBOX.answers", []byte(body)); err != nil {
		t.Fatal(err)
	}
	<-time.After(time.Until(expiry)) // the wall clock decides here: brokers do not live in bubbles
	release <- true
	if first := <-answers; first.Header.Get("Nats-Service-Error-Code") != "" {
		t.Errorf("the first: %v", first.Header)
	}
	if second := <-answers; second.Header.Get("Nats-Service-Error-Code") != "408" {
		t.Errorf("the second is answered %v %s; want 408", second.Header, second.Data)
	}
	if k.notes() != "start first by " {
		t.Errorf("the keeper heard %q; want the first alone", k.notes())
	}
}

func TestAPanicBecomesAnAnswerAndACallOfTheHook(t *testing.T) {
	panics := make(chan string, 1)
	calls := 0
	k := &keeper{onRun: func(protocol.RunRequest) (protocol.RunReply, error) {
		if calls++; calls == 1 {
			panic("index out of range")
		}
		return protocol.RunReply{Run: "r1", State: protocol.Stopped, Recorded: true}, nil
	}}
	nc := serve(t, k, panics).connect(t, protocol.ControlRole)
	code, text, _ := ask(t, nc, "stop", `{"run":"r1"}`)
	if code != "500" || text != "stop: a defect of the daemon: index out of range" {
		t.Errorf("answered %s %q", code, text)
	}
	if got := <-panics; got != "stop: index out of range, 1 bytes of stack" {
		t.Errorf("the hook got %q", got)
	}
	if code, _, _ := ask(t, nc, "stop", `{"run":"r1"}`); code != "" {
		t.Errorf("the next stop is answered %s; want it done", code)
	}
}

func TestServeEndsAfterTheHandlersThatRun(t *testing.T) {
	begun, release := make(chan bool), make(chan bool)
	k := &keeper{start: func(protocol.StartRequest) (protocol.StartReply, error) {
		begun <- true
		<-release
		return protocol.StartReply{Run: "r2"}, nil
	}}
	s := serve(t, k, nil)
	nc := s.connect(t, protocol.ControlRole)
	answer := make(chan string, 1)
	go func() {
		m, err := nc.Request("gemel.skerry.do.start", []byte(`{"recipe":"a","key":"k"}`), 10*time.Second)
		if err != nil {
			answer <- err.Error()
			return
		}
		answer <- string(m.Data)
	}()
	<-begun
	ended := make(chan error, 1)
	go func() { ended <- s.end() }()
	for { // until the end is noticed, requests are still executed
		code, _, _ := ask(t, nc, "hold", `{"run":"r1"}`)
		if code == "503" {
			break
		}
	}
	select {
	case err := <-ended:
		t.Errorf("Serve returned %v while a start was being executed", err)
	default:
	}
	release <- true
	if got := <-answer; got != `{"run":"r2"}` {
		t.Errorf("the start is answered %s", got)
	}
	if err := <-ended; err != nil {
		t.Error(err)
	}
}

func TestTheServiceSaysWhoItIs(t *testing.T) {
	nc := serve(t, &keeper{}, nil).connect(t, protocol.WatchRole)
	m, err := nc.Request("$SRV.INFO.gemel", nil, 5*time.Second)
	if err != nil {
		t.Fatal(err)
	}
	var info micro.Info
	if err := json.Unmarshal(m.Data, &info); err != nil {
		t.Fatal(err)
	}
	if info.Name != "gemel" || info.Version != "1.2.3-test" || info.Metadata["bench"] != bench || info.Metadata["version"] != "1.2.3-test" {
		t.Errorf("the service is %+v", info)
	}
	for _, e := range info.Endpoints {
		if e.Subject != protocol.DoSubject(bench, e.Name) {
			t.Errorf("endpoint %s is on %s", e.Name, e.Subject)
		}
	}
}

// A push consumer publishes past the permissions of who made it: a watcher can make the journal's
// messages arrive as requests. None of them may be taken for one.
func TestJournalMessagesPushedToAnEndpointExecuteNothing(t *testing.T) {
	k := &keeper{}
	s := serve(t, k, nil)
	stream, err := courier.NewStream(s.daemon, courier.StreamConfig{Bench: bench})
	if err != nil {
		t.Fatal(err)
	}
	last, err := stream.Last(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	body := `{"schema":"gemel.event.v1","bench":"skerry","run":"r1","sequence":1}`
	if _, err := stream.Publish(t.Context(), courier.Message{Subject: "gemel.skerry.event.r1", ID: "r1.1", Body: []byte(body)}, last); err != nil {
		t.Fatal(err)
	}
	watch := s.connect(t, protocol.WatchRole)
	js, err := jetstream.New(watch)
	if err != nil {
		t.Fatal(err)
	}
	for _, headersOnly := range []bool{false, true} {
		c, err := js.CreatePushConsumer(t.Context(), protocol.Stream(bench), jetstream.ConsumerConfig{
			DeliverSubject: "gemel.skerry.do.stop", DeliverGroup: micro.DefaultQueueGroup, HeadersOnly: headersOnly, AckPolicy: jetstream.AckNonePolicy,
		})
		if err != nil {
			t.Fatal(err)
		}
		for delivered := uint64(0); delivered == 0; {
			info, err := c.Info(t.Context())
			if err != nil {
				t.Fatal(err)
			}
			delivered = info.Delivered.Consumer
		}
	}
	// This one's turn comes after those that were delivered.
	if code, _, _ := ask(t, s.connect(t, protocol.ControlRole), "stop", `{"run":"r7"}`); code != "" {
		t.Errorf("a real stop is answered %s", code)
	}
	if k.notes() != "stop r7 by " {
		t.Errorf("the keeper heard %q; want the real stop alone", k.notes())
	}
}

func TestAWatcherFollowsTheJournalWithTheRightsItHas(t *testing.T) {
	s := serve(t, &keeper{}, nil)
	stream, err := courier.NewStream(s.daemon, courier.StreamConfig{Bench: bench})
	if err != nil {
		t.Fatal(err)
	}
	last, err := stream.Last(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for n := int64(1); n <= 3; n++ {
		e := protocol.Entry{Run: "r1", Sequence: n}
		if last, err = stream.Publish(t.Context(), courier.Message{Subject: "gemel.skerry.event.r1", ID: e.ID(), Body: []byte("{}")}, last); err != nil {
			t.Fatal(err)
		}
	}
	for _, role := range []string{protocol.WatchRole, protocol.ControlRole} {
		c, err := client.ConnectFolder(s.dir, role)
		if err != nil {
			t.Fatal(err)
		}
		if status, err := c.Status(t.Context()); err != nil || status.Bench != bench {
			t.Errorf("%s: status %+v, %v", role, status, err)
		}
		_, err = c.Stop(t.Context(), protocol.RunRequest{Run: "r1"})
		if forbidden := errors.Is(err, client.ErrForbidden); forbidden != (role == protocol.WatchRole) {
			t.Errorf("%s: stop: %v", role, err)
		}
		var got []string
		for e, err := range c.Follow(t.Context(), "r1", 1) {
			if err != nil {
				t.Fatalf("%s: %v", role, err)
			}
			if got = append(got, e.ID()); len(got) == 3 {
				break
			}
		}
		if fmt.Sprint(got) != "[r1.1 r1.2 r1.3]" {
			t.Errorf("%s followed %v", role, got)
		}
		c.Close()
	}
}

// published is a connection that only remembers.
type published struct {
	mu   sync.Mutex
	msgs []string
	err  error
}

func (p *published) Publish(subject string, body []byte) error {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.msgs = append(p.msgs, subject+" "+string(body))
	return p.err
}

func TestTheBeatComesOnceASecondWhateverTheBrokerDoes(t *testing.T) {
	for _, away := range []error{nil, nats.ErrDisconnected} {
		synctest.Test(t, func(t *testing.T) {
			p := &published{err: away}
			ctx, cancel := context.WithTimeout(t.Context(), 9500*time.Millisecond)
			defer cancel()
			if err := remote.RunBeat(ctx, p, func() protocol.Status { return protocol.Status{Bench: bench} }); err != nil {
				t.Error(err)
			}
			if len(p.msgs) != 10 {
				t.Fatalf("%d beats in 9.5 s; want 10", len(p.msgs))
			}
			subject, body, _ := strings.Cut(p.msgs[1], " ")
			var b protocol.Beat
			if err := json.Unmarshal([]byte(body), &b); err != nil || subject != "gemel.skerry.beat" || b.Schema != "gemel.beat.v1" ||
				b.Bench != bench || b.Causes == nil || b.Queue == nil {
				t.Errorf("beat %s, %v", p.msgs[1], err)
			}
			if want := time.Now().Add(-8500 * time.Millisecond); !b.At.Equal(want) {
				t.Errorf("the second beat is of %v; want %v", b.At, want)
			}
		})
	}
}
