package protocol_test

import (
	"bytes"
	"encoding/json"
	"testing"

	"gemel/protocol"
)

// FuzzBodies reads whatever may come as a message's body. What is taken is written as something that
// is read as the same, and each time in it sorts as text.
func FuzzBodies(f *testing.F) {
	for _, s := range []string{
		`{"schema":"gemel.event.v1","bench":"skerry","run":"r1","sequence":1,"at":"2031-02-03T04:05:06Z","kind":"ended","text":"done","state":"finished","causes":[],"detail":{"a":1e400}}`,
		`{"at":"9999-12-31T23:59:59.9999999999-23:59"}`, `{"at":"0000-01-01T00:00:00+23:59"}`, `{"at":null,"started_at":"2031-02-03T04:05:06.1+01:00"}`,
		`{"gate_s":0.0000000001,"gate_set_s":1e3}`, `{"gate_s":-9223372036.854775808}`, `{"gate_s":"1"}`, `{"counts":[{"channel":"a","counts":18446744073709551616}]}`, `{"angles":[{"before_deg":1e99,"after_deg":-0}]}`,
		`{"points":[{"point":0,"axes":[{"axis":"a","target_deg":0.000000001}]}],"stand":[]}`, `{"time_left_s":1,"ended_at":"2031-02-03T04:05:06Z","simulated":100}`, `{"expires_at":"now"}`, `{"act":"move","to_deg":359.999999999,"value":-1e308}`,
	} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		again[protocol.Reading](t, data)
		again[protocol.Event](t, data)
		again[protocol.Points](t, data)
		again[protocol.Beat](t, data)
		again[protocol.HandRequest](t, data)
		again[protocol.HandReply](t, data)
		again[protocol.QueueReply](t, data)
		var head struct {
			At protocol.Time `json:"at"`
		}
		if json.Unmarshal(data, &head) == nil && len(head.At.String()) != len("2031-02-03T04:05:06.000000000Z") {
			t.Errorf("%q has the time %s, which does not sort as text", data, head.At)
		}
	})
}

func again[T any](t *testing.T, data []byte) {
	t.Helper()
	var first, second T
	if json.Unmarshal(data, &first) != nil {
		return
	}
	a, err := json.Marshal(first)
	if err != nil {
		t.Errorf("%T of %q cannot be written: %v", first, data, err)
		return
	}
	if err := json.Unmarshal(a, &second); err != nil {
		t.Errorf("%T of %q is written as %s, and that is refused: %v", first, data, a, err)
		return
	}
	if b, err := json.Marshal(second); err != nil || !bytes.Equal(a, b) {
		t.Errorf("%T of %q is written as %s, and then as %s, %v", first, data, a, b, err)
	}
}
