package remote_test

import (
	"testing"
	"time"

	"github.com/nats-io/nats.go/jetstream"

	"gemel/daemon/courier"
	"gemel/protocol"
)

// The service publishes with rights of its own: a reply subject on the journal, the beat, a request
// or the server's own would have it publish there for a watcher, who may not.
func TestAnswersGoNowhereThatTheirAskerMayNotPublish(t *testing.T) {
	k := &keeper{}
	s := serve(t, k, nil)
	stream, err := courier.NewStream(s.daemon, courier.StreamConfig{Bench: bench})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := stream.Last(t.Context()); err != nil {
		t.Fatal(err)
	}
	heard, err := s.daemon.SubscribeSync("gemel.skerry.*")
	if err != nil {
		t.Fatal(err)
	}
	watch, control := s.connect(t, protocol.WatchRole), s.connect(t, protocol.ControlRole)
	for _, reply := range []string{"gemel.skerry.event.r1", "gemel.skerry.beat", "gemel.skerry.do.stop", "$JS.API.STREAM.DELETE.GEMEL_skerry", "$SRV.PING"} {
		for _, verb := range []string{"status", "queue"} {
			if err := watch.PublishRequest("gemel.skerry.do."+verb, reply, nil); err != nil {
				t.Fatal(err)
			}
		}
		// A start's answer has the form of a stop's request.
		if err := control.PublishRequest("gemel.skerry.do.start", reply, []byte(`{"recipe":"a","key":"k","who":"ann"}`)); err != nil {
			t.Fatal(err)
		}
		if err := control.PublishRequest("gemel.skerry.do.hand", reply, []byte(`{"act":"where","who":"ann"}`)); err != nil {
			t.Fatal(err)
		}
	}
	// Whatever was asked before these is answered before them.
	for _, verb := range []string{"status", "queue"} {
		if code, text, _ := ask(t, watch, verb, ""); code != "" {
			t.Fatalf("%s is answered %s %s", verb, code, text)
		}
	}
	if code, text, _ := ask(t, control, "start", `{"recipe_name":"b","key":"k","who":"bob"}`); code != "" {
		t.Fatalf("the last start is answered %s %s", code, text)
	}
	js, err := jetstream.New(s.daemon)
	if err != nil {
		t.Fatal(err)
	}
	info, err := js.Stream(t.Context(), protocol.Stream(bench))
	if err != nil {
		t.Fatal(err)
	}
	if n := info.CachedInfo().State.Msgs; n != 0 {
		t.Errorf("the stream holds %d messages; want none", n)
	}
	if m, err := heard.NextMsg(10 * time.Millisecond); err == nil {
		t.Errorf("heard %q on %s; want nothing", m.Data, m.Subject)
	}
	if k.notes() != "start b by bob" {
		t.Errorf("the keeper heard %q; want the last start alone", k.notes())
	}
}
