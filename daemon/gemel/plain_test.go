//go:build unix

package main

import (
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"gemel/daemon/logbook"
)

// plain is somebody else's program: it knows the contract's subjects and the credential files, and
// none of our packages.
type plain struct {
	t    *testing.T
	conn *nats.Conn
}

func plainly(t *testing.T, data, role, inbox string) *plain {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(data, "contact.json"))
	if err != nil {
		t.Fatal(err)
	}
	var contact map[string]string
	if err := json.Unmarshal(text, &contact); err != nil {
		t.Fatal(err)
	}
	file := contact[role]
	if !filepath.IsAbs(file) {
		file = filepath.Join(data, file)
	}
	key, err := nats.NkeyOptionFromSeed(file)
	if err != nil {
		t.Fatal(err)
	}
	conn, err := nats.Connect(contact["url"], key, nats.CustomInboxPrefix(inbox),
		nats.ErrorHandler(func(*nats.Conn, *nats.Subscription, error) {})) // the default prints what is refused
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(conn.Close)
	return &plain{t, conn}
}

func (p *plain) ask(verb, body string) (map[string]any, nats.Header) {
	p.t.Helper()
	m, err := p.conn.Request("gemel.skerry.do."+verb, []byte(body), 20*time.Second)
	if err != nil {
		p.t.Fatalf("%s: %v", verb, err)
	}
	var answer map[string]any
	if err := json.Unmarshal(m.Data, &answer); err != nil {
		p.t.Fatalf("%s: %v in %q", verb, err, m.Data)
	}
	return answer, m.Header
}

func TestAPlainNATSClientDrivesARunAndReceivesEveryEntryOnceInOrder(t *testing.T) {
	data := filepath.Join(t.TempDir(), "data")
	daemon, ok := serve(t, nil, "--bench", demoBenchFile, "--data", data)
	if !ok {
		t.Fatalf("serve: %s", daemon.err)
	}
	control, watch := plainly(t, data, "control", "_INBOX"), plainly(t, data, "watch", "_INBOX_watch")

	js, err := jetstream.New(watch.conn)
	if err != nil {
		t.Fatal(err)
	}
	consumer, err := js.CreateConsumer(within(t), "GEMEL_skerry", jetstream.ConsumerConfig{AckPolicy: jetstream.AckNonePolicy, DeliverPolicy: jetstream.DeliverAllPolicy})
	if err != nil {
		t.Fatal(err)
	}
	type message struct {
		subject, id string
		body        string
	}
	messages := make(chan message, 10000)
	consuming, err := consumer.Consume(func(m jetstream.Msg) {
		messages <- message{m.Subject(), m.Headers().Get("Nats-Msg-Id"), string(m.Data())}
	})
	if err != nil {
		t.Fatal(err)
	}
	defer consuming.Stop()
	beats, err := watch.conn.SubscribeSync("gemel.skerry.beat")
	if err != nil {
		t.Fatal(err)
	}

	// The watcher may ask how the bench is, and nothing else.
	if s, _ := watch.ask("status", "{}"); s["bench"] != "skerry" || s["run"] != "" {
		t.Errorf("status of an idle bench is %v", s)
	}
	if m, err := watch.conn.Request("gemel.skerry.do.start", []byte("{}"), 500*time.Millisecond); err == nil {
		t.Errorf("a watcher's start was answered %s", m.Data)
	}

	text, err := os.ReadFile(demoRecipeFile)
	if err != nil {
		t.Fatal(err)
	}
	request, err := json.Marshal(map[string]string{"recipe": string(text), "key": "plain-1", "who": "a plain client"})
	if err != nil {
		t.Fatal(err)
	}
	answer, _ := control.ask("start", string(request))
	run, _ := answer["run"].(string)
	if again, _ := control.ask("start", string(request)); run == "" || again["run"] != run {
		t.Fatalf("asked twice with one key: %v, then %v; want one run", answer, again)
	}
	named := fmt.Sprintf(`{"run": %q, "who": "a plain client"}`, run)

	var got []message
	readings, state := 0, ""
	until := func(what string, enough func() bool) {
		t.Helper()
		deadline := time.After(patience)
		for !enough() {
			select {
			case m := <-messages:
				got = append(got, m)
				if strings.HasPrefix(m.subject, "gemel.skerry.reading.") {
					readings++
				}
				var event struct{ State string }
				if strings.HasPrefix(m.subject, "gemel.skerry.event.") && json.Unmarshal([]byte(m.body), &event) == nil {
					state = event.State
				}
			case <-deadline:
				t.Fatalf("%s did not come within %s; %d entries did, the state is %q", what, patience, len(got), state)
			}
		}
	}
	until("the third reading", func() bool { return readings >= 3 })
	if a, _ := control.ask("hold", named); a["state"] != "holding" || fmt.Sprint(a["causes"]) != "[operator]" {
		t.Errorf("hold was answered %v; want holding because of operator", a)
	}
	until("the hold", func() bool { return state == "holding" })
	s, _ := control.ask("status", "{}")
	if s["state"] != "holding" || s["run"] != run || s["time_left_s"] != nil || s["readings_planned"] != 138.0 {
		t.Errorf("status of a holding run is %v", s)
	}
	for _, key := range []string{"bench", "state", "causes", "run", "readings_accepted", "readings_planned", "time_left_s"} {
		if _, has := s[key]; !has {
			t.Errorf("status has no %s", key)
		}
	}
	held := readings
	if a, _ := control.ask("resume", named); a["state"] != "running" {
		t.Errorf("resume was answered %v; want running", a)
	}
	until("more readings", func() bool { return readings >= held+5 })
	if a, _ := control.ask("stop", named); a["state"] != "stopped" {
		t.Errorf("stop was answered %v; want stopped", a)
	}
	until("the end", func() bool { return state == "stopped" })
	if a, head := control.ask("resume", named); head.Get("Nats-Service-Error-Code") != "409" || head.Get("Nats-Service-Error") == "" || a["error"] == "" {
		t.Errorf("resume of a run that is over was answered %v %v; want 409", head, a)
	}
	if m, err := beats.NextMsg(3 * time.Second); err != nil || !strings.Contains(string(m.Data), `"bench":"skerry"`) {
		t.Errorf("no beat within 3 s: %v", err)
	}
	daemon.signal(15)
	if code := daemon.wait(); code != exitDone {
		t.Errorf("serve: exit code %d", code)
	}

	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	entries, err := book.After(t.Context(), 0, 10000)
	if err != nil {
		t.Fatal(err)
	}
	if len(entries) != len(got) {
		t.Errorf("%d entries in the journal, %d received", len(entries), len(got))
	}
	for i := range min(len(entries), len(got)) {
		e, m := entries[i], got[i]
		if m.id != string(e.Run)+"."+strconv.FormatInt(e.Sequence, 10) || m.body != string(e.Body) || m.subject != "gemel.skerry."+string(e.Kind)+"."+string(e.Run) || e.Sequence != int64(i+1) {
			t.Fatalf("received as number %d: %s on %s; the journal has %s", i+1, m.id, m.subject, e.Entry.ID())
		}
	}
	t.Logf("%d entries, %d of them readings", len(got), readings)
}
