package remote

import (
	"bytes"
	"encoding/json"
	"errors"
	"testing"
	"time"
	"unicode/utf8"

	"gemel/protocol"
)

// FuzzDecode sends whatever strangers may send to every decoder of requests. A request is either
// refused with a reason, or means the same to a plain reader of JSON, with no key but the known ones.
func FuzzDecode(f *testing.F) {
	for _, seed := range []string{
		`{}`, ``, `null`, `{"run":"r1","who":"night","expires_at":"2031-02-03T04:05:06Z"}`, `{"runs":["r1","r2"],"who":"ann"}`, `{"runs":[null]}`,
		`{"runs":{}}`, `{"recipe":"title: x","key":"k"}`, `{"run":"r1","run":"r2"}`, `{"Run":"r1"}`, `{"run":"r1"}}`, "{\"run\":\"\xff\"}",
		`{"runs":[[[[[[]]]]]]}`, `{"expires_at":"9999-12-31T23:59:59.999999999+23:59","run":"r"}`, `{"\u0072un":"r1"}`,
		`{"act":"move","axis":"a","to_deg":1.5,"by_deg":-1e9,"who":"ann","live":true}`, `{"act":"look","gate_s":1e-9}`, `{"recipe":"a","aim":"b","expires_at":"0001-01-01T00:00:00Z"}`,
	} {
		f.Add([]byte(seed))
	}
	f.Fuzz(func(t *testing.T, data []byte) {
		tried(t, data, protocol.StartRequest{})
		tried(t, data, protocol.RunRequest{})
		tried(t, data, protocol.ReorderRequest{})
		tried(t, data, protocol.HandRequest{})
		tried(t, data, protocol.ForecastRequest{})
		tried(t, data, struct{}{})
		if q, err := handRequest(data); err == nil && (len(q.Who) > maxName || q.ExpiresAt != nil && time.Since(q.ExpiresAt.Time) > time.Second) {
			t.Errorf("%q is let through as %+v", data, q)
		}
	})
}

func tried[T any](t *testing.T, data []byte, plain T) {
	t.Helper()
	value, err := decode[T](data, maxSmall)
	if err != nil {
		r, ok := errors.AsType[*protocol.Refusal](err)
		if !ok || r.Code != 400 && r.Code != 413 || r.Problem.Error == "" || !utf8.ValidString(header(r.Problem.Error)) {
			t.Errorf("%T of %q: %v; want a refusal with a reason", plain, data, err)
		}
		return
	}
	if len(data) > maxSmall {
		t.Errorf("%T of %d bytes was read", plain, len(data))
	}
	d := json.NewDecoder(bytes.NewReader(data))
	d.DisallowUnknownFields()
	if err := d.Decode(&plain); err != nil {
		t.Errorf("%T of %q: read, and a plain reader says %v", plain, data, err)
		return
	}
	a, errA := json.Marshal(value)
	b, errB := json.Marshal(plain)
	if errA != nil || errB != nil || !bytes.Equal(a, b) {
		t.Errorf("%T of %q: %s, %v; a plain reader has %s, %v", plain, data, a, errA, b, errB)
	}
}
