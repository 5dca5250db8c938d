package remote_test

import (
	"context"
	"encoding/json"
	"errors"
	"strings"
	"testing"
	"time"

	"gemel/daemon/remote"
	"gemel/protocol"
	"gemel/protocol/client"
)

// handed is a keeper whose moves end when somebody wants rest.
type handed struct {
	keeper
	moving chan func(protocol.HandReply, error)
}

var _ remote.Hands = &handed{}

func (k *handed) Hand(_ context.Context, q protocol.HandRequest, answer func(protocol.HandReply, error)) {
	k.note("%s by %s", q.Act, q.Who)
	switch q.Act {
	case protocol.HandMove:
		k.moving <- answer
	case protocol.HandRest:
		(<-k.moving)(protocol.HandReply{}, protocol.Refuse(409, "interrupted"))
		answer(protocol.HandReply{Act: q.Act, Text: "at rest"}, nil)
		answer(protocol.HandReply{}, nil) // a second answer is nobody's
	default:
		panic("a bug")
	}
}

func TestARequestToRestDoesNotWaitBehindAMove(t *testing.T) {
	k := &handed{moving: make(chan func(protocol.HandReply, error), 1)}
	panics := make(chan string, 1)
	s := serve(t, k, panics)
	conn := s.connect(t, protocol.ControlRole)
	ask := func(body string) (protocol.HandReply, string) {
		m, err := conn.Request(protocol.DoSubject(bench, "hand"), []byte(body), 10*time.Second)
		if err != nil {
			t.Error(err)
			return protocol.HandReply{}, ""
		}
		var r protocol.HandReply
		if err := json.Unmarshal(m.Data, &r); err != nil {
			t.Error(err)
		}
		return r, m.Header.Get("Nats-Service-Error-Code")
	}
	moved := make(chan string, 1)
	go func() {
		_, code := ask(`{"act":"move","axis":"signal_arm","to_deg":1,"who":"ann"}`)
		moved <- code
	}()
	for len(k.moving) == 0 {
		if len(moved) > 0 {
			t.Fatalf("the move was answered %s before it ended", <-moved)
		}
	}
	if r, code := ask(`{"act":"rest","who":"ann"}`); code != "" || r.Text != "at rest" {
		t.Errorf("rest: %+v, %s; want it answered while the move goes on", r, code)
	}
	if code := <-moved; code != "409" {
		t.Errorf("the move was answered %q; want 409", code)
	}
	for body, want := range map[string]string{
		`{"act":"move","axes":"signal_arm"}`:                                  "400",
		`{"act":"rest","who":"` + strings.Repeat("a", 300) + `"}`:             "400",
		`{"act":"rest","who":"ann","expires_at":"2020-01-01T00:00:00Z"}`:      "408",
		`{"act":"look","who":"ann"}`:                                          "500", // the stand-in's bug
		`{"act":"move","who":"ann","axis":"a","to_deg":null}`:                 "400",
		`{"act":"move","who":"ann","axis":"a","to_deg":"1 deg"}`:              "400",
		`{"act":"rest","who":"ann","expires_at":"2020-01-01T00:00:00Z"} more`: "400",
	} {
		if _, code := ask(body); code != want {
			t.Errorf("%.80s: answered %q; want %s", body, code, want)
		}
	}
	if text := <-panics; !strings.HasPrefix(text, "hand: a bug") {
		t.Errorf("the hook heard %q", text)
	}
}

func TestTheEndOfTheServiceWaitsForHandWork(t *testing.T) {
	k := &handed{moving: make(chan func(protocol.HandReply, error), 1)}
	s := serve(t, k, nil)
	c, err := client.ConnectFolder(s.dir, protocol.ControlRole)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	answers := make(chan error, 1)
	go func() {
		r, err := c.Hand(t.Context(), protocol.HandRequest{Act: protocol.HandMove, Axis: "a", Who: "ann"})
		if err == nil && r.Text != "moved" {
			t.Errorf("answered %+v", r)
		}
		answers <- err
	}()
	answer := <-k.moving
	ended := make(chan error, 1)
	go func() { ended <- s.end() }()
	for code := 0; code != 503; { // it is ending
		_, err := c.Hand(t.Context(), protocol.HandRequest{Act: protocol.HandLook, Who: "ann"})
		if r, refused := errors.AsType[*protocol.Refusal](err); refused {
			code = r.Code
		} else {
			t.Fatal(err)
		}
	}
	if len(ended) > 0 {
		t.Errorf("the service ended, %v, before the move was answered", <-ended)
	}
	answer(protocol.HandReply{Text: "moved"}, nil)
	if err := <-answers; err != nil {
		t.Errorf("the move was answered %v", err)
	}
	if err := <-ended; err != nil {
		t.Error(err)
	}
}
