//go:build unix

package main

import (
	"bytes"
	"context"
	"flag"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/client"
	"gemel/sim/instruments"
)

var realAll = flag.Bool("real.all", false, "the long form of what happens to files, lines and instruments of real processes")

// spoiling is what happens to the files in which the broker keeps its copy of the journal.
type spoiling struct {
	name string
	do   func(t *testing.T, store string)
	// mend makes a damage good that only a person can make good. Until then the daemon says what is
	// wrong with which file.
	mend func(t *testing.T, store string)
}

// filesUnder lists the files in which messages, and what is known of them, are kept.
func filesUnder(t *testing.T, store string) (all []string) {
	t.Helper()
	err := filepath.WalkDir(store, func(path string, d fs.DirEntry, err error) error {
		if err == nil && d.Type().IsRegular() && d.Name() != "lock" {
			all = append(all, path)
		}
		return nil // what the broker takes away meanwhile is no mistake
	})
	if err != nil || len(all) == 0 {
		t.Fatalf("%d files in %s, %v; want some to spoil", len(all), store, err)
	}
	return all
}

func eachFile(do func(path string) error) func(*testing.T, string) {
	return func(t *testing.T, store string) {
		t.Helper()
		for _, path := range filesUnder(t, store) {
			if err := do(path); err != nil && !os.IsNotExist(err) {
				t.Fatal(err)
			}
		}
	}
}

func sizeOf(path string) int64 {
	info, err := os.Stat(path)
	if err != nil {
		return 0
	}
	return info.Size()
}

func spoilings() []spoiling {
	return []spoiling{
		{name: "the folder is gone", do: func(t *testing.T, store string) {
			if err := os.RemoveAll(store); err != nil {
				t.Fatal(err)
			}
		}},
		{name: "every file is cut in half", do: eachFile(func(path string) error { return os.Truncate(path, sizeOf(path)/2) })},
		{name: "every file is empty", do: eachFile(func(path string) error { return os.Truncate(path, 0) })},
		{name: "every file is garbage", do: eachFile(func(path string) error {
			return os.WriteFile(path, bytes.Repeat([]byte{0xa5}, int(sizeOf(path))), 0o600)
		})},
		{name: "the messages are gone", do: eachFile(func(path string) error {
			if filepath.Ext(path) == ".blk" {
				return os.Remove(path)
			}
			return nil
		})},
		{name: "the end of the messages is gone", do: eachFile(func(path string) error {
			if filepath.Ext(path) == ".blk" {
				return os.Truncate(path, sizeOf(path)*2/3)
			}
			return nil
		})},
		{name: "what is known of the stream is gone", do: eachFile(func(path string) error {
			if strings.HasPrefix(filepath.Base(path), "meta.") {
				return os.Remove(path)
			}
			return nil
		})},
		{name: "every file is gone, and the folders are there", do: eachFile(os.Remove)},
		{name: "an older copy stands there", do: func(t *testing.T, store string) {
			if err := os.RemoveAll(store); err != nil {
				t.Fatal(err)
			}
			if err := os.CopyFS(store, os.DirFS(olderThan(store))); err != nil {
				t.Fatal(err)
			}
		}},
		{name: "a file stands where the server's own folder was", do: func(t *testing.T, store string) {
			if err := os.RemoveAll(filepath.Join(store, "jetstream")); err != nil {
				t.Fatal(err)
			}
			writeFile(t, filepath.Join(store, "jetstream"), "")
		}, mend: func(t *testing.T, store string) {
			if err := os.Remove(filepath.Join(store, "jetstream")); err != nil {
				t.Fatal(err)
			}
		}},
		{name: "a file stands where the folder was", do: func(t *testing.T, store string) {
			if err := os.RemoveAll(store); err != nil {
				t.Fatal(err)
			}
			writeFile(t, store, "")
		}, mend: func(t *testing.T, store string) {
			if err := os.Remove(store); err != nil {
				t.Fatal(err)
			}
		}},
	}
}

func olderThan(store string) string { return store + ".older" }

// copyAside makes the copy that will be older some day. Files that come and go meanwhile, under a
// server that works, are copied as they were met.
func copyAside(t *testing.T, store string) {
	t.Helper()
	var err error
	for range 100 {
		if err = os.RemoveAll(olderThan(store)); err != nil {
			t.Fatal(err)
		}
		if err = os.CopyFS(olderThan(store), os.DirFS(store)); err == nil {
			return
		}
	}
	t.Fatal(err)
}

// few is the short form. With -short it is one.
func few(all []spoiling, names ...string) (some []spoiling) {
	for _, s := range all {
		if slices.Contains(names, s.name) && (len(some) == 0 || !testing.Short()) {
			some = append(some, s)
		}
	}
	return some
}

// entriesOf reads the journal in the order of its commits.
func entriesOf(t *testing.T, data string) []protocol.Numbered {
	t.Helper()
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	entries, err := book.After(t.Context(), 0, 1_000_000)
	if err != nil {
		t.Fatal(err)
	}
	return entries
}

// mustCatchUp waits until the stream holds the journal as it is now, and compares them.
func mustCatchUp(t *testing.T, p *program, data string) {
	t.Helper()
	want := entriesOf(t, data)
	cl, err := client.ConnectFolder(data, protocol.WatchRole)
	if err != nil {
		t.Fatal(err)
	}
	defer cl.Close()
	ctx, cancel := context.WithCancel(within(t))
	defer cancel()
	n := 0
	for e, err := range cl.Follow(ctx, "", 1) {
		if err != nil && ctx.Err() != nil {
			break
		}
		if err != nil {
			continue // the broker is away for a moment
		}
		if e.ID() != want[n].Entry.ID() || !bytes.Equal(e.Body, want[n].Body) {
			t.Fatalf("the stream's message %d is entry %s; the journal has %s\n%s", n+1, e.ID(), want[n].Entry.ID(), p.err)
		}
		if n++; n == len(want) {
			return
		}
	}
	t.Fatalf("the stream holds %d entries within %s; the journal %d\n%s", n, patience, len(want), p.err)
}

// started is a run on a daemon.
func started(t *testing.T, data, recipe, key string) protocol.RunID {
	t.Helper()
	cl, err := client.ConnectFolder(data, protocol.ControlRole)
	if err != nil {
		t.Fatal(err)
	}
	defer cl.Close()
	r, err := cl.Start(within(t), protocol.StartRequest{Recipe: recipe, Key: key, Who: "the test"})
	if err != nil {
		t.Fatal(err)
	}
	return r.Run
}

// awaitRow waits for a run's row in the logbook to be so.
func awaitRow(t *testing.T, p *program, data string, run protocol.RunID, what string, is func(logbook.RunRow) bool) logbook.RunRow {
	t.Helper()
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	deadline := time.After(patience)
	for {
		row, err := book.Run(t.Context(), run)
		if err == nil && is(row) {
			return row
		}
		select {
		case <-time.After(10 * time.Millisecond): // a file tells nobody that it changed
		case <-p.ended:
			t.Fatalf("the daemon ended before run %s was %s (it is %s: %s)\n%s", run, what, row.State, row.Reason, p.err)
		case <-deadline:
			t.Fatalf("run %s is not %s within %s: %s %v %s (%v)\n%s", run, what, patience, row.State, row.Causes, row.Reason, err, p.err)
		}
	}
}

const shortRecipe = "title: Short\nsweep: [{axis: idler_arm, from: 2 deg, to: 3 deg, step: 0.1 deg}]\ndwell: {time: 20 ms, slice: 10 ms}\n"

// What the broker keeps is a copy. However it is damaged while nobody serves, the daemon starts and
// fills it again from the journal, or ends at once with a word on what to do.
func TestABrokersFolderThatWasDamagedIsFilledAgainFromTheJournal(t *testing.T) {
	t.Parallel()
	dir := t.TempDir()
	data := filepath.Join(dir, "data")
	args := []string{"--bench", quick(t, dir), "--data", data}
	p, ok := serve(t, nil, args...)
	if !ok {
		t.Fatalf("serve: %s", p.err)
	}
	finished := func(r logbook.RunRow) bool { return r.State == protocol.Finished }
	awaitRow(t, p, data, started(t, data, shortRecipe, "first"), "finished", finished)
	mustCatchUp(t, p, data)
	copyAside(t, filepath.Join(data, "nats"))
	awaitRow(t, p, data, started(t, data, shortRecipe, "second"), "finished", finished)
	mustCatchUp(t, p, data)
	all := spoilings()
	if !*realAll {
		all = few(all, "every file is cut in half", "the end of the messages is gone", "an older copy stands there", "a file stands where the folder was")
	}
	for i, s := range all {
		began := time.Now()
		p.signal(syscall.SIGTERM)
		if code := p.wait(); code != exitDone {
			t.Fatalf("serve: exit code %d\n%s", code, p.err)
		}
		store := filepath.Join(data, "nats")
		s.do(t, store)
		p, ok = serve(t, nil, args...)
		if s.mend != nil {
			if ok || p.wait() != exitFailed || !strings.Contains(p.err.String(), store) {
				t.Fatalf("%s: serve says %q; want it to end with code 1 and a word on %s", s.name, p.err, store)
			}
			s.mend(t, store)
			p, ok = serve(t, nil, args...)
		}
		if !ok {
			t.Fatalf("%s: serve: %s", s.name, p.err)
		}
		mustCatchUp(t, p, data)
		// And it takes what is new.
		run := started(t, data, "title: One\ndwell: 20 ms\n", fmt.Sprint("after ", i))
		awaitRow(t, p, data, run, "finished", finished)
		mustCatchUp(t, p, data)
		t.Logf("%s: %s", s.name, time.Since(began).Round(10*time.Millisecond))
	}
}

// While it serves, the same damage never makes a reading wait; the next start at the latest fills the
// stream again.
func TestABrokersFolderThatIsDamagedMeanwhileHoldsNoReadingUp(t *testing.T) {
	t.Parallel()
	long := strings.Replace(shortRecipe, "dwell:", "repeat: {times: 1000, as: passes}\ndwell:", 1)
	all := spoilings()
	if !*realAll {
		all = few(all, "every file is empty", "an older copy stands there")
	}
	dir := t.TempDir()
	bench, lines := quick(t, dir), filepath.Join(dir, "lines")
	_, ledger := simulate(t, bench, lines, "")
	gates := 0
	gateClosed := func(r instruments.Record) bool { return r.Kind == instruments.GateClosed }
	for i, s := range all {
		if s.mend != nil {
			continue // the same as without the folder, while it serves
		}
		began := time.Now()
		data := filepath.Join(dir, fmt.Sprint("data", i))
		args := []string{"--bench", bench, "--data", data, "--lines", lines}
		p, ok := serve(t, nil, args...)
		if !ok {
			t.Fatalf("serve: %s", p.err)
		}
		run := started(t, data, long, "long")
		before := len(ledger.all(t))
		_, gates = ledger.await(t, gates, "a gate", gateClosed)
		copyAside(t, filepath.Join(data, "nats"))
		for range 5 {
			_, gates = ledger.await(t, gates, "a gate", gateClosed)
		}
		s.do(t, filepath.Join(data, "nats"))
		spoiled := time.Now()
		longest, last := time.Duration(0), spoiled
		for range 30 {
			var r instruments.Record
			if r, gates = ledger.await(t, gates, "a gate", gateClosed); r.At.Before(spoiled) {
				continue
			}
			longest, last = max(longest, r.At.Sub(last)), r.At
		}
		must(t, "stop", "--data", data, string(run))
		p.signal(syscall.SIGTERM)
		if code := p.wait(); code != exitDone {
			t.Fatalf("%s: serve: exit code %d\n%s", s.name, code, p.err)
		}
		// A dark, a motion and a busy machine lie between two gates; a broker's time-out is 5 s.
		if longest > 4*time.Second {
			t.Errorf("%s: %s between two gates; want nothing to wait for the broker", s.name, longest)
		}
		if p, ok = serve(t, nil, args...); !ok {
			t.Fatalf("%s: serve: %s", s.name, p.err)
		}
		mustCatchUp(t, p, data)
		p.signal(syscall.SIGTERM)
		p.wait()
		dwelt, readings := 0, 0
		for _, r := range ledger.all(t)[before:] {
			if r.Kind == instruments.GateClosed && r.Gate.SetS > 0.005 { // no glance
				dwelt++
			}
		}
		for _, e := range entriesOf(t, data) {
			if e.Kind == protocol.ReadingEntry {
				readings++
			}
		}
		// The stop came into one dwell, of two slices.
		if readings == 0 || dwelt < 2*readings || dwelt > 2*readings+2 {
			t.Errorf("%s: %d readings are in the logbook, and %d slices were counted; want two a reading, and at most two that the stop cut", s.name, readings, dwelt)
		}
		t.Logf("%s: %d readings, %s at most between gates, %s in all", s.name, readings, longest.Round(time.Millisecond), time.Since(began).Round(10*time.Millisecond))
	}
}

// A folder that the daemon may not write to is said by its name at the start, and held up no reading
// while it serves.
func TestABrokersFolderThatIsNotWritableIsNamedAndHoldsNoReadingUp(t *testing.T) {
	t.Parallel()
	dir, err := os.MkdirTemp("", "gemel-unwritable-") // of all users, which t.TempDir is not everywhere
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = os.RemoveAll(dir) })
	data := filepath.Join(dir, "data")
	store := filepath.Join(data, "nats")
	if err := os.Mkdir(data, 0o755); err != nil {
		t.Fatal(err)
	}
	var user *syscall.Credential
	if os.Getuid() == 0 { // whom no permission binds: the daemon is somebody else then
		user = &syscall.Credential{Uid: 65534, Gid: 65534}
		for _, path := range []string{dir, filepath.Dir(binary)} {
			if err := os.Chmod(path, 0o755); err != nil {
				t.Fatal(err)
			}
		}
		if err := os.Chown(data, 65534, 65534); err != nil {
			t.Skipf("SKIPPED: root cannot give a folder away here, and nothing forbids root to write: %v", err)
		}
	}
	args := []string{"serve", "--bench", quick(t, dir), "--data", data}
	live := func() (*program, bool) {
		p := launchBy(t, user, nil, args...)
		return p, p.says(p.err, `"message":"serving"`)
	}
	mode := func(dirs os.FileMode) {
		t.Helper()
		var all []string
		if err := filepath.WalkDir(store, func(path string, d fs.DirEntry, err error) error {
			if err == nil && d.IsDir() {
				all = append(all, path)
			}
			return err
		}); err != nil {
			t.Fatal(err)
		}
		for _, path := range all {
			if err := os.Chmod(path, dirs); err != nil {
				t.Fatal(err)
			}
		}
	}
	end := func(p *program) {
		t.Helper()
		p.signal(syscall.SIGTERM)
		if code := p.wait(); code != exitDone {
			t.Fatalf("serve: exit code %d\n%s", code, p.err)
		}
	}
	finished := func(r logbook.RunRow) bool { return r.State == protocol.Finished }
	p, ok := live()
	if !ok {
		t.Fatalf("serve: %s", p.err)
	}
	mode(0o500)
	awaitRow(t, p, data, started(t, data, strings.Replace(shortRecipe, "dwell:", "repeat: {times: 3, as: passes}\ndwell:", 1), "meanwhile"), "finished", finished)
	var longest time.Duration
	var last time.Time
	for _, e := range entriesOf(t, data) {
		if at := headOf(t, e.Entry).At.Time; e.Kind == protocol.ReadingEntry {
			if !last.IsZero() {
				longest = max(longest, at.Sub(last))
			}
			last = at
		}
	}
	if longest > 4*time.Second {
		t.Errorf("%s between two readings; want nothing to wait for the broker", longest)
	}
	meanwhile := p.err.String()
	end(p)
	p, ok = live()
	if ok || p.wait() != exitFailed || !strings.Contains(p.err.String(), store) || !strings.Contains(p.err.String(), "not writable") {
		t.Errorf("serve says %q; want it to end with code 1 and a word on %s", p.err, store)
	}
	t.Logf("%s at most between readings; the next start: %s\nmeanwhile: %s", longest.Round(time.Millisecond), strings.TrimSpace(p.err.String()), meanwhile)
	mode(0o700)
	if p, ok = live(); !ok {
		t.Fatalf("serve: %s", p.err)
	}
	mustCatchUp(t, p, data)
	end(p)
}
