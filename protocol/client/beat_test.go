package client_test

import (
	"context"
	"encoding/json"
	"errors"
	"testing"
	"time"

	"github.com/nats-io/nats.go"

	"gemel/protocol"
	"gemel/protocol/client"
)

func TestSilenceIsToldAgainAndAgainAndABeatEndsIt(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	const patience = 50 * time.Millisecond
	beat := func() {
		body, err := json.Marshal(protocol.Beat{Schema: protocol.BeatSchema, Status: protocol.Status{Bench: bench}})
		if err == nil {
			err = b.daemon.Publish("gemel.skerry.beat", body)
		}
		if err != nil {
			t.Error(err)
		}
	}
	silences, heard := 0, 0
	for got, err := range c.Beats(ctx, patience) {
		silence, silent := errors.AsType[*client.Silence](err)
		switch {
		case silent:
			silences++
			if want := time.Duration(silences) * patience; silence.Bench != bench || silence.For != want {
				t.Errorf("silence number %d is %+v; want one of %s", silences, silence, want)
			}
			if silences == 3 {
				beat()
			}
			continue
		case err != nil || got.Bench != bench:
			t.Fatalf("%+v, %v; want a beat", got, err)
		}
		silences = 0
		if heard++; heard == 2 {
			break
		}
	}
	if heard != 2 {
		t.Errorf("%d beats were heard; want two", heard)
	}
}

func TestABeatThatIsNoneEndsListening(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
	defer cancel()
	n := 0
	for _, err := range c.Beats(ctx, 50*time.Millisecond) {
		if _, silent := errors.AsType[*client.Silence](err); silent {
			if err := b.daemon.Publish("gemel.skerry.beat", []byte("{")); err != nil {
				t.Fatal(err)
			}
			continue
		}
		if n++; err == nil {
			t.Error("a beat that is none was taken for one")
		}
	}
	if n != 1 {
		t.Errorf("%d errors; want one, and then the end", n)
	}
}

func TestRequestsOfTheQueueAreSentAsTheContractSays(t *testing.T) {
	b := newBus(t)
	c := b.client(t, protocol.ControlRole)
	requests := make(chan string, 1)
	_, err := b.daemon.Subscribe("gemel.skerry.do.*", func(m *nats.Msg) {
		requests <- m.Subject[len("gemel.skerry.do."):] + " " + string(m.Data)
		_ = m.Respond([]byte(`{"bench":"skerry","queue":[{"run":"r2","title":"Ring","queued_at":null,"who":"","state":"queued","readings_planned":3}],"run":"r2","state":"stopped","causes":[],"recorded":true}`))
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
	q, err := c.Queue(ctx)
	if got := <-requests; got != "queue {}" || err != nil || len(q.Queue) != 1 || *q.Queue[0].ReadingsPlanned != 3 {
		t.Errorf("sent %s, got %+v, %v", got, q, err)
	}
	_, err = c.Reorder(ctx, protocol.ReorderRequest{Runs: []protocol.RunID{"r2"}, Who: "night"})
	expiry := protocol.Time{Time: deadline}.String()
	if got, want := <-requests, `reorder {"runs":["r2"],"who":"night","expires_at":"`+expiry+`"}`; got != want || err != nil {
		t.Errorf("sent %s, %v; want %s: what moves next must not be decided late", got, err, want)
	}
	r, err := c.Withdraw(ctx, protocol.RunRequest{Run: "r2", Who: "night"})
	if got, want := <-requests, `withdraw {"run":"r2","who":"night"}`; got != want || err != nil || r.State != protocol.Stopped {
		t.Errorf("sent %s, %+v, %v; want %s", got, r, err, want)
	}
}
