package client

import (
	"testing"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"gemel/protocol"
)

// message is a delivery with the sequences of stream and consumer.
type message struct {
	jetstream.Msg
	stream, consumer uint64
	id               string
}

func (m message) Metadata() (*jetstream.MsgMetadata, error) {
	return &jetstream.MsgMetadata{Sequence: jetstream.SequencePair{Stream: m.stream, Consumer: m.consumer}}, nil
}
func (m message) Subject() string      { return "gemel.skerry.event.r1" }
func (m message) Headers() nats.Header { return nats.Header{nats.MsgIdHdr: {m.id}} }
func (m message) Data() []byte         { return []byte("{}") }

// What the broker delivered and the network lost is no gap of the stream: it is asked for again.
func TestALostDeliveryIsAskedForAgain(t *testing.T) {
	f := &follower{seen: map[protocol.RunID]int64{}, consumer: struct{ jetstream.Consumer }{}}
	var got []string
	yield := func(e protocol.Entry, err error) bool {
		if err != nil {
			t.Errorf("told of %v; want nothing missing", err)
		}
		got = append(got, e.ID())
		return true
	}
	for _, m := range []message{{stream: 11, consumer: 1, id: "r1.1"}, {stream: 13, consumer: 3, id: "r1.3"}} {
		if goOn, err := f.take(m, yield); !goOn || err != nil {
			t.Fatal(goOn, err)
		}
	}
	if len(got) != 1 || got[0] != "r1.1" || f.consumer != nil || f.next != 12 {
		t.Errorf("yielded %v, goes on from %d with %v; want r1.1, from 12 with a new consumer", got, f.next, f.consumer)
	}
}
