//go:build unix

package main

import (
	"bytes"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

// A logbook that was rescued, or an older one put back, stands beside a stream that holds more, or
// something else. Everything of it is published all the same, and what comes next too.
func TestALogbookThatTookAnothersPlaceIsPublished(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	args := []string{"--bench", quick(t, dir), "--data", data}
	finished := func(r logbook.RunRow) bool { return r.State == protocol.Finished }
	begin := func() *program {
		t.Helper()
		p, ok := serve(t, nil, args...)
		if !ok {
			t.Fatalf("serve: %s", p.err)
		}
		return p
	}
	end := func(p *program) {
		t.Helper()
		p.signal(syscall.SIGTERM)
		if code := p.wait(); code != exitDone {
			t.Fatalf("serve: exit code %d\n%s", code, p.err)
		}
	}
	putBack := func(from string) {
		t.Helper()
		for _, ending := range []string{"", "-wal", "-shm"} {
			if err := os.Remove(logbookFile(data) + ending); err != nil && !errors.Is(err, fs.ErrNotExist) {
				t.Fatal(err)
			}
		}
		if err := os.Rename(from, logbookFile(data)); err != nil {
			t.Fatal(err)
		}
	}
	p := begin()
	awaitRow(t, p, data, started(t, data, shortRecipe, "first"), "finished", finished)
	older := filepath.Join(dir, "older.db")
	must(t, "export", "--data", data, "--snapshot", older)
	awaitRow(t, p, data, started(t, data, shortRecipe, "second"), "finished", finished)
	mustCatchUp(t, p, data)
	end(p)

	putBack(older)
	p = begin()
	mustCatchUp(t, p, data)
	if !strings.Contains(p.err.String(), "made anew and filled again from the logbook") {
		t.Errorf("an older logbook was put back, and the log says nothing of it:\n%s", p.err)
	}
	awaitRow(t, p, data, started(t, data, shortRecipe, "third"), "finished", finished)
	mustCatchUp(t, p, data)
	end(p)

	all := entriesOf(t, data)
	hurtBody(t, data, all[len(all)-5].Body)
	rescued := filepath.Join(dir, "rescued.db")
	out, errOut, code := gemel(t, "check", "--data", data, "--rescue", rescued)
	if code != exitFailed || !strings.Contains(out, filepath.Join(data, "nats")) {
		t.Fatalf("exit %d\n%s%s\nwant something left, and a word on the broker's folder", code, out, errOut)
	}
	putBack(rescued)
	if n := len(entriesOf(t, data)); n >= len(all) {
		t.Fatalf("%d entries were rescued of %d; want fewer, or nothing is tested", n, len(all))
	}
	p = begin()
	mustCatchUp(t, p, data)
	awaitRow(t, p, data, started(t, data, "title: One\ndwell: 20 ms\n", "fourth"), "finished", finished)
	mustCatchUp(t, p, data)
	end(p)
}

// hurtBody changes one digit of an entry in the file.
func hurtBody(t *testing.T, data string, body []byte) {
	t.Helper()
	text, err := os.ReadFile(logbookFile(data))
	if err != nil {
		t.Fatal(err)
	}
	at := bytes.Index(text, body[:min(len(body), 200)])
	if at < 0 {
		t.Fatal("the entry is not in the file itself; want the log folded into it at the end")
	}
	text[at+len(`{"schema":"`)] ^= 1
	if err := os.WriteFile(logbookFile(data), text, 0o644); err != nil {
		t.Fatal(err)
	}
}
