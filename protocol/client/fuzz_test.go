package client_test

import (
	"encoding/json"
	"os"
	"path/filepath"
	"testing"

	"gemel/protocol"
	"gemel/protocol/client"
)

// FuzzContact reads whatever may stand in a contact file. What is taken says where a daemon is, with
// files that do not hang on where the reader stands.
func FuzzContact(f *testing.F) {
	for _, s := range []string{`{"url":"nats://127.0.0.1:4222","bench":"skerry","control":"control.nk","watch":"/x/watch.nk"}`, `{"url":"x","bench":"a.b"}`, `{"url":"x","bench":">"}`, `{"bench":"a"}`, `null`, `[]`, ``, `{"url":"x","bench":"a","control":"../../etc/passwd"}`} {
		f.Add([]byte(s))
	}
	dir := f.TempDir()
	f.Fuzz(func(t *testing.T, text []byte) {
		file := filepath.Join(dir, protocol.ContactFile)
		if err := os.WriteFile(file, text, 0o600); err != nil {
			t.Fatal(err)
		}
		c, err := client.ReadContact(dir)
		if err != nil {
			if c != (protocol.Contact{}) {
				t.Errorf("%q is refused with %v, and gives %+v", text, err, c)
			}
			return
		}
		if c.URL == "" || !protocol.IsToken(c.Bench) {
			t.Errorf("%q gives %+v; want a URL and a bench", text, c)
		}
		for _, creds := range []string{c.Control, c.Watch} {
			if creds != "" && !filepath.IsAbs(creds) {
				t.Errorf("%q gives the file %q; want an absolute one", text, creds)
			}
		}
		body, err := json.Marshal(c)
		if err != nil {
			t.Fatal(err)
		}
		if err := os.WriteFile(file, body, 0o600); err != nil {
			t.Fatal(err)
		}
		if back, err := client.ReadContact(dir); err != nil || back != c {
			t.Errorf("%q gives %+v, and written again %+v, %v", text, c, back, err)
		}
	})
}
