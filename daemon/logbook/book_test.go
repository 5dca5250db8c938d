package logbook

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"

	"go.uber.org/goleak"
	"modernc.org/sqlite"
)

func TestMain(m *testing.M) {
	if dir := os.Getenv(childFolder); dir != "" {
		appendForEver(dir)
	}
	flag.Set("rapid.seed", "20310203") // the same nights every time; -rapid.seed overrides
	flag.Set("rapid.nofailfile", "true")
	flag.Set("rapid.checks", "50") // each some thirty commits
	flag.Parse()
	if testing.Short() {
		flag.Set("rapid.checks", "15")
	}
	goleak.VerifyTestMain(m)
}

// openBook opens a logbook that is verified and closed when the test ends.
func openBook(t testing.TB, dir string) *Book {
	t.Helper()
	b, err := Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { closeVerified(t, b) })
	return b
}

func closeVerified(t testing.TB, b *Book) {
	t.Helper()
	for _, fault := range b.Verify(context.Background()) {
		t.Errorf("verify: %s", fault)
	}
	if err := b.Close(); err != nil {
		t.Errorf("close: %v", err)
	}
}

var evening = protocol.Time{Time: time.Date(2031, 2, 3, 20, 0, 0, 0, time.UTC)}

func header(run protocol.RunID, key string) Header {
	return Header{Run: run, Title: "arm sweep", RecipeText: "title: arm sweep\n", BenchText: "bench: {name: skerry}\n",
		Version: "0.1.0", Key: key, Who: "test", QueuedAt: evening}
}

func head(schema string, run protocol.RunID, sequence int64) protocol.Head {
	return protocol.Head{Schema: schema, Bench: "skerry", Run: run, Sequence: sequence,
		At: protocol.Time{Time: evening.Add(time.Duration(sequence) * time.Second)}}
}

func entry(kind protocol.EntryKind, h protocol.Head, body any) protocol.Entry {
	text, err := json.Marshal(body)
	if err != nil {
		panic(err)
	}
	return protocol.Entry{Run: h.Run, Sequence: h.Sequence, Kind: kind, Body: text}
}

func event(run protocol.RunID, sequence int64, kind protocol.EventKind, state protocol.State, text string) protocol.Entry {
	h := head(protocol.EventSchema, run, sequence)
	return entry(protocol.EventEntry, h, protocol.Event{Head: h, Kind: kind, State: state, Text: text})
}

func doubt(run protocol.RunID, sequence, from, to int64, why string) protocol.Entry {
	h := head(protocol.EventSchema, run, sequence)
	return entry(protocol.EventEntry, h, protocol.Event{Head: h, Kind: protocol.Doubted, State: protocol.Running, Text: "drifted",
		Detail: map[string]any{"from_sequence": from, "to_sequence": to, "why": why}})
}

// aReading has the size of a real one: two axes, three channels, five slices.
func aReading(run protocol.RunID, sequence int64) protocol.Entry {
	h := head(protocol.ReadingSchema, run, sequence)
	point, visit := int(sequence)/2, int(sequence)%2+1
	r := protocol.Reading{Head: h, Kind: protocol.Light, Point: &point, Visit: &visit, Accepted: true,
		StartedAt: h.At, EndedAt: protocol.Time{Time: h.At.Add(5 * time.Second)},
		GateSet: protocol.Seconds(5 * time.Second), Gate: protocol.Seconds(5*time.Second + 17),
		Attempt: 1, Scatter: &protocol.Scatter{Channel: "signal", ChiSquare: 3.2, Freedom: 4, P: 0.52}}
	for _, axis := range []string{"signal_arm", "idler_arm"} {
		target := unit.Degrees(2.5 + float64(sequence%100)*0.01)
		r.Angles = append(r.Angles, protocol.Angle{Axis: axis, Target: target, Before: target + 1234567, After: target - 7654321, Proof: "proved"})
	}
	r.Sensors = []protocol.Sensor{{Sensor: "pump_power", Minimum: 49.9, Mean: 50.01, Maximum: 50.1, Samples: 50, Unit: "mW"}}
	for slice := range 5 {
		var counts []protocol.Count
		for i, channel := range []string{"signal", "idler", "pair"} {
			counts = append(counts, protocol.Count{Channel: channel, Counts: uint64(20000 - 5000*i + slice + int(sequence))})
		}
		r.Slices = append(r.Slices, protocol.Slice{GateSet: protocol.Seconds(time.Second), Gate: protocol.Seconds(time.Second + 3), Counts: counts,
			Raw: fmt.Sprintf("%d,%d,%d,1.000000003", counts[0].Counts, counts[1].Counts, counts[2].Counts)})
	}
	for i, channel := range []string{"signal", "idler", "pair"} {
		sum := uint64(0)
		for _, s := range r.Slices {
			sum += s.Counts[i].Counts
		}
		r.Counts = append(r.Counts, protocol.Count{Channel: channel, Counts: sum})
	}
	return entry(protocol.ReadingEntry, h, r)
}

func mustAppend(t testing.TB, b *Book, entries ...protocol.Entry) {
	t.Helper()
	for _, e := range entries {
		if err := b.Append(t.Context(), e); err != nil {
			t.Fatal(err)
		}
	}
}

func mustNewRun(t testing.TB, b *Book, h Header) {
	t.Helper()
	existing, err := b.NewRun(t.Context(), h, event(h.Run, 1, protocol.OperatorDid, protocol.Queued, "asked for"))
	if err != nil || existing != "" {
		t.Fatalf("NewRun(%s) = %q, %v", h.Run, existing, err)
	}
}

func TestAppendTakesEveryEntryOnceAndInItsTurn(t *testing.T) {
	const run = "r1"
	second := event(run, 2, protocol.Began, protocol.Running, "began")
	withBody := func(body string) protocol.Entry {
		return protocol.Entry{Run: run, Sequence: 3, Kind: protocol.EventEntry, Body: json.RawMessage(body)}
	}
	for _, c := range []struct {
		name  string
		entry protocol.Entry
		want  error
	}{
		{"the next one is taken", event(run, 3, protocol.Held, protocol.Holding, "held"), nil},
		{"the same again is well", second, nil},
		{"other bytes at the same place are refused", event(run, 2, protocol.Began, protocol.Running, "began again"), ErrDifferent},
		{"the same bytes as another kind are refused", protocol.Entry{Run: run, Sequence: 2, Kind: protocol.ResultEntry, Body: second.Body}, ErrDifferent},
		{"one too far on is refused", event(run, 4, protocol.Held, protocol.Holding, "held"), ErrGap},
		{"sequence 0 is refused", event(run, 0, protocol.Held, protocol.Holding, "held"), ErrGap},
		{"an unknown run is refused", event("r2", 1, protocol.Began, protocol.Running, "began"), ErrNoRun},
		{"the bench needs no run", event(protocol.BenchRun, 1, protocol.Trouble, "", "a line is gone"), nil},
		{"the bench's sequence has no gaps either", event(protocol.BenchRun, 2, protocol.Trouble, "", "a line is gone"), ErrGap},
		{"an unknown kind is refused", protocol.Entry{Run: run, Sequence: 3, Kind: "beat", Body: json.RawMessage(`{"run":"r1","sequence":3}`)}, ErrBody},
		{"half a body is refused", withBody(`{"run":"r1","sequence":3`), ErrBody},
		{"another run's body is refused", withBody(`{"run":"r2","sequence":3}`), ErrBody},
		{"another entry's body is refused", withBody(`{"run":"r1","sequence":4}`), ErrBody},
		{"a body that says two things is refused", withBody(`{"run":"r2","run":"r1","sequence":3}`), ErrBody},
		{"a body with its names in capitals is refused", withBody(`{"RUN":"r1","SEQUENCE":3}`), ErrBody},
		{"a body that is not UTF-8 is refused", withBody("{\"run\":\"r1\",\"sequence\":3,\"text\":\"\xff\"}"), ErrBody},
		{"a doubt about nothing is refused", event(run, 3, protocol.Doubted, protocol.Running, "drifted"), ErrBody},
		{"a doubt from later to earlier is refused", doubt(run, 3, 2, 1, "drift"), ErrBody},
		{"a doubt without a reason is refused", doubt(run, 3, 1, 2, ""), ErrBody},
		{"a doubt with all of it is taken", doubt(run, 3, 1, 2, "drift"), nil},
	} {
		t.Run(c.name, func(t *testing.T) {
			b := openBook(t, t.TempDir())
			mustNewRun(t, b, header(run, ""))
			mustAppend(t, b, second)
			before, err := b.After(t.Context(), 0, 100)
			if err != nil {
				t.Fatal(err)
			}
			if err := b.Append(t.Context(), c.entry); !errors.Is(err, c.want) {
				t.Fatalf("Append: %v; want %v", err, c.want)
			}
			after, err := b.After(t.Context(), 0, 100)
			if err != nil {
				t.Fatal(err)
			}
			want := len(before)
			if c.want == nil && c.entry.ID() != second.ID() {
				want++
			}
			if len(after) != want {
				t.Errorf("%d entries after; want %d", len(after), want)
			}
		})
	}
}

func TestAppendWritesThoughItsContextHasEnded(t *testing.T) {
	b := openBook(t, t.TempDir())
	ended, cancel := context.WithCancel(t.Context())
	cancel()
	if existing, err := b.NewRun(ended, header("r1", ""), event("r1", 1, protocol.OperatorDid, protocol.Queued, "asked for")); err != nil || existing != "" {
		t.Fatalf("NewRun: %q, %v", existing, err)
	}
	if err := b.Append(ended, event("r1", 2, protocol.Began, protocol.Running, "began")); err != nil {
		t.Fatal(err)
	}
	if last, err := b.Last(t.Context(), "r1"); err != nil || last != 2 {
		t.Errorf("last %d, %v; want 2", last, err)
	}
}

func TestNewRunIsAskedForOnceAKey(t *testing.T) {
	b := openBook(t, t.TempDir())
	h := header("r1", "key one")
	seven := 7
	h.Simulated = &seven
	mustNewRun(t, b, h)
	ask := func(run protocol.RunID, key, bench string) (protocol.RunID, error) {
		first := head(protocol.EventSchema, run, 1)
		first.Bench = bench
		return b.NewRun(t.Context(), header(run, key), entry(protocol.EventEntry, first, protocol.Event{Head: first, State: protocol.Queued}))
	}
	for _, c := range []struct {
		name     string
		run      protocol.RunID
		key      string
		bench    string
		existing protocol.RunID
		err      error
	}{
		{"asked again with the key: the first run", "r2", "key one", "skerry", "r1", nil},
		{"asked again to the letter: the first run", "r1", "key one", "skerry", "r1", nil},
		{"another key: another run", "r3", "key two", "skerry", "", nil},
		{"the key on another bench: another run", "r4", "key one", "holm", "", nil},
		{"no key: another run", "r5", "", "skerry", "", nil},
		{"no key again: another run", "r6", "", "skerry", "", nil},
		{"a name that is taken: refused", "r3", "key three", "skerry", "", ErrDifferent},
		{"the bench's name: refused", protocol.BenchRun, "key four", "skerry", "", ErrBody},
		{"a name that cannot stand in a subject: refused", "r.7", "key five", "skerry", "", ErrBody},
	} {
		existing, err := ask(c.run, c.key, c.bench)
		if existing != c.existing || !errors.Is(err, c.err) {
			t.Errorf("%s: got %q, %v; want %q, %v", c.name, existing, err, c.existing, c.err)
		}
	}
	rows, err := b.Runs(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var names []protocol.RunID
	for _, r := range rows {
		names = append(names, r.Run)
	}
	if want := []protocol.RunID{"r1", "r3", "r4", "r5", "r6"}; !slices.Equal(names, want) {
		t.Errorf("runs %v; want %v", names, want)
	}
	first := rows[0]
	if first.Key != h.Key || first.RecipeText != h.RecipeText || first.BenchText != h.BenchText || first.Simulated == nil || *first.Simulated != 7 ||
		!first.QueuedAt.Equal(evening.Time) || first.Who != "test" || first.Bench != "skerry" || first.State != protocol.Queued || !first.StartedAt.IsZero() {
		t.Errorf("the first run reads %+v", first)
	}
}

func TestNewRunRefusesAnEmptyText(t *testing.T) {
	b := openBook(t, t.TempDir())
	for _, blank := range []func(*Header){
		func(h *Header) { h.RecipeText = "" }, func(h *Header) { h.BenchText = "" }, func(h *Header) { h.Version = "" },
	} {
		h := header("r1", "")
		blank(&h)
		if _, err := b.NewRun(t.Context(), h, event("r1", 1, protocol.OperatorDid, protocol.Queued, "asked for")); !errors.Is(err, ErrBody) {
			t.Errorf("%+v: %v; want %v", h, err, ErrBody)
		}
	}
	if _, err := b.NewRun(t.Context(), header("r1", ""), event("r1", 2, protocol.OperatorDid, protocol.Queued, "asked for")); !errors.Is(err, ErrBody) {
		t.Errorf("a first entry with sequence 2: %v; want %v", err, ErrBody)
	}
	if rows, err := b.Runs(t.Context()); err != nil || len(rows) != 0 {
		t.Errorf("runs %v, %v; want none", rows, err)
	}
}

func TestRunFollowsItsEvents(t *testing.T) {
	b := openBook(t, t.TempDir())
	for _, run := range []protocol.RunID{"r1", "r2", "r3"} {
		mustNewRun(t, b, header(run, ""))
	}
	h := head(protocol.EventSchema, "r2", 3)
	mustAppend(t, b,
		event("r1", 2, protocol.Began, protocol.Running, "began"),
		event("r1", 3, protocol.Ended, protocol.Finished, "all points counted"),
		event("r1", 4, protocol.OperatorDid, "", "looked at it"),
		event("r2", 2, protocol.Began, protocol.Running, "began"),
		entry(protocol.EventEntry, h, protocol.Event{Head: h, Kind: protocol.Held, State: protocol.Holding, Text: "light", Causes: []protocol.Cause{protocol.ByLight, protocol.ByOperator}}))

	r1, err := b.Run(t.Context(), "r1")
	if err != nil {
		t.Fatal(err)
	}
	if r1.State != protocol.Finished || r1.Reason != "all points counted" || r1.StartedAt.Sub(evening.Time) != 2*time.Second || r1.EndedAt.Sub(evening.Time) != 3*time.Second {
		t.Errorf("r1 reads %+v", r1)
	}
	open, err := b.Unfinished(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	if len(open) != 2 || open[0].Run != "r2" || open[1].Run != "r3" {
		t.Fatalf("unfinished: %+v; want r2, r3", open)
	}
	if open[0].State != protocol.Holding || !slices.Equal(open[0].Causes, []protocol.Cause{protocol.ByLight, protocol.ByOperator}) || !open[0].EndedAt.IsZero() {
		t.Errorf("r2 reads %+v", open[0])
	}
	if _, err := b.Run(t.Context(), "r9"); !errors.Is(err, ErrNoRun) {
		t.Errorf("an unknown run: %v; want %v", err, ErrNoRun)
	}
}

func TestReadingsShowTheRunAsItWasWhenTheLoopBegan(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	const last = 2*readingsPage + 20 // three pages
	for s := int64(2); s < last; s++ {
		mustAppend(t, b, aReading("r1", s))
	}
	mustAppend(t, b, doubt("r1", last, 5, 6, "slipped"))
	seen := int64(1)
	for r, err := range b.Readings(t.Context(), "r1") {
		if err != nil {
			t.Fatal(err)
		}
		if r.Sequence != seen+1 {
			t.Fatalf("%d after %d", r.Sequence, seen)
		}
		seen = r.Sequence
		if seen == 3 {
			mustAppend(t, b, doubt("r1", last+1, 4, last-1, "drifted"), aReading("r1", last+2))
		}
		if want := seen == 5 || seen == 6; r.Doubtful != want || (r.Doubt == "slipped") != want {
			t.Errorf("reading %d: doubtful %t, %q", seen, r.Doubtful, r.Doubt)
		}
	}
	if seen != last-1 {
		t.Errorf("the loop ended at %d; want %d", seen, last-1)
	}
	doubts := map[int64]string{}
	for r, err := range b.Readings(t.Context(), "r1") {
		if err != nil {
			t.Fatal(err)
		}
		doubts[r.Sequence] = r.Doubt
		if r.Sequence == 6 {
			break
		}
	}
	if doubts[3] != "" || doubts[4] != "drifted" || doubts[5] != "slipped; drifted" {
		t.Errorf("the second loop saw %v", doubts)
	}
	var doubtful, from, to int64
	if err := b.readers.QueryRow(`SELECT count(*), min(sequence), max(sequence) FROM reading WHERE doubtful AND doubt LIKE '%drifted'`).Scan(&doubtful, &from, &to); err != nil {
		t.Fatal(err)
	}
	if doubtful != last-4 || from != 4 || to != last-1 {
		t.Errorf("the view has %d doubtful readings from %d to %d; want %d from 4 to %d", doubtful, from, to, last-4, last-1)
	}
	for _, err := range b.Readings(t.Context(), "r9") {
		if !errors.Is(err, ErrNoRun) {
			t.Errorf("an unknown run: %v; want %v", err, ErrNoRun)
		}
	}
}

func TestWhoFollowsTheJournalIsToldOfEveryCommit(t *testing.T) {
	b := openBook(t, t.TempDir())
	told, again := 0, make(chan struct{}, 1)
	b.OnAppend(func() { told++ })
	b.OnAppend(func() {
		select {
		case again <- struct{}{}:
		default:
		}
	})
	mustNewRun(t, b, header("r1", ""))
	for s := int64(2); s <= 20; s++ {
		mustAppend(t, b, aReading("r1", s)) // nobody takes from again, and nobody waits
	}
	mustAppend(t, b, aReading("r1", 20)) // was there
	if told != 20 {
		t.Fatalf("told %d times; want 20", told)
	}

	done := make(chan error, 1)
	go func() {
		var id int64
		for id < 220 {
			page, err := b.After(t.Context(), id, 7)
			if err != nil {
				done <- err
				return
			}
			if len(page) == 0 {
				<-again
				continue
			}
			for _, n := range page {
				if n.ID != id+1 || n.Sequence != n.ID {
					done <- fmt.Errorf("id %d, sequence %d after id %d", n.ID, n.Sequence, id)
					return
				}
				id = n.ID
			}
		}
		done <- nil
	}()
	for s := int64(21); s <= 220; s++ {
		mustAppend(t, b, aReading("r1", s))
	}
	if err := <-done; err != nil {
		t.Fatal(err)
	}
}

func TestNotesAreKeptBesideTheJournal(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	for _, text := range []string{"the lid was open", "closed it"} {
		if err := b.AddNote(t.Context(), "r1", "Ása", text); err != nil {
			t.Fatal(err)
		}
	}
	if err := b.AddNote(t.Context(), protocol.BenchRun, "Ása", "new fibre"); err != nil {
		t.Fatal(err)
	}
	if err := b.AddNote(t.Context(), "r9", "Ása", "hello"); !errors.Is(err, ErrNoRun) {
		t.Errorf("a note on an unknown run: %v; want %v", err, ErrNoRun)
	}
	if err := b.AddNote(t.Context(), "r1", "Ása", ""); !errors.Is(err, ErrBody) {
		t.Errorf("an empty note: %v; want %v", err, ErrBody)
	}
	notes, err := b.Notes(t.Context(), "r1")
	if err != nil {
		t.Fatal(err)
	}
	if len(notes) != 2 || notes[0].Text != "the lid was open" || notes[1].Text != "closed it" || notes[0].Who != "Ása" || notes[0].At.IsZero() {
		t.Errorf("notes %+v", notes)
	}
}

func TestOneFolderHasOneDaemon(t *testing.T) {
	dir := t.TempDir()
	b, err := Open(dir)
	if err != nil {
		t.Fatal(err)
	}
	mustNewRun(t, b, header("r1", ""))
	_, err = Open(dir)
	if !errors.Is(err, ErrLocked) || !strings.Contains(err.Error(), dir) || !strings.Contains(err.Error(), fmt.Sprint(os.Getpid())) {
		t.Errorf("a second Open: %v; want %v with folder and process", err, ErrLocked)
	}
	beside, err := OpenReadOnly(filepath.Join(dir, fileName))
	if err != nil {
		t.Fatal(err)
	}
	if rows, err := beside.Runs(t.Context()); err != nil || len(rows) != 1 {
		t.Errorf("read beside the daemon: %d runs, %v; want 1", len(rows), err)
	}
	for name, err := range map[string]error{
		"Append":  beside.Append(t.Context(), event("r1", 2, protocol.Began, protocol.Running, "began")),
		"AddNote": beside.AddNote(t.Context(), "r1", "test", "hello"),
		"NewRun": func() error {
			_, err := beside.NewRun(t.Context(), header("r2", ""), event("r2", 1, protocol.Began, "", ""))
			return err
		}(),
	} {
		if !errors.Is(err, ErrReadOnly) {
			t.Errorf("%s on a read-only logbook: %v; want %v", name, err, ErrReadOnly)
		}
	}
	closeVerified(t, beside)
	closeVerified(t, b)
	openBook(t, dir) // and the folder is free again
}

func TestOpenRefusesWhatIsNotItsOwn(t *testing.T) {
	exec := func(statements string) func(t *testing.T, file string) {
		return func(t *testing.T, file string) {
			db, err := sql.Open("sqlite", "file:"+file)
			if err != nil {
				t.Fatal(err)
			}
			defer db.Close()
			if _, err := db.Exec(statements); err != nil {
				t.Fatal(err)
			}
		}
	}
	for _, c := range []struct {
		name string
		make func(t *testing.T, file string)
		want string // "": opens
	}{
		{"a file of no length is a first start", func(t *testing.T, file string) { os.WriteFile(file, nil, 0o644) }, ""},
		{"a first start that a power cut ended is begun again", exec("PRAGMA journal_mode = WAL"), ""},
		{"a text file is refused", func(t *testing.T, file string) { os.WriteFile(file, []byte(strings.Repeat("counts\n", 1000)), 0o644) }, "no SQLite database"},
		{"another program's database is refused", exec("CREATE TABLE readings (x); PRAGMA application_id = 1234"), "another program"},
		{"a database without a name is refused", exec("CREATE TABLE readings (x)"), "another program"},
		{"a newer logbook is refused", exec(fmt.Sprintf("CREATE TABLE journal (x); PRAGMA application_id = %d; PRAGMA user_version = 3", applicationID)), "newer gemel (schema 3)"},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			file := filepath.Join(dir, fileName)
			c.make(t, file)
			before, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			b, err := Open(dir)
			if c.want == "" {
				if err != nil {
					t.Fatal(err)
				}
				closeVerified(t, b)
				return
			}
			if !errors.Is(err, ErrForeign) || !strings.Contains(err.Error(), c.want) || !strings.Contains(err.Error(), file) {
				t.Errorf("Open: %v; want %q with the file", err, c.want)
			}
			if _, err := OpenReadOnly(file); !errors.Is(err, ErrForeign) {
				t.Errorf("OpenReadOnly: %v; want %v", err, ErrForeign)
			}
			after, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			if string(before) != string(after) {
				t.Error("the refused file was changed")
			}
		})
	}
	if _, err := OpenReadOnly(filepath.Join(t.TempDir(), "none.db")); !errors.Is(err, ErrForeign) {
		t.Errorf("OpenReadOnly of no file: %v", err)
	}
}

// What a power cut would show cannot be shown here; that SQLite was told what it needs to survive
// one can.
func TestTheFileIsKeptAsSafeAsWasPromised(t *testing.T) {
	b := openBook(t, t.TempDir())
	for pragma, want := range map[string]string{
		"synchronous": "2", "journal_mode": "wal", "busy_timeout": "5000", "trusted_schema": "0",
		"application_id": fmt.Sprint(applicationID), "user_version": "2",
	} {
		var got string
		if err := b.writer.QueryRow("PRAGMA " + pragma).Scan(&got); err != nil || got != want {
			t.Errorf("%s is %s, %v; want %s", pragma, got, err, want)
		}
	}
	if runtime.GOOS == "linux" && !(sqlite.OFDLockingEnabled() && sqlite.FdatasyncEnabled()) {
		t.Errorf("locks of the open file: %t, fdatasync: %t; want both", sqlite.OFDLockingEnabled(), sqlite.FdatasyncEnabled())
	}
	if _, err := b.readers.Exec("CREATE TABLE x (y)"); err == nil {
		t.Error("a reading connection wrote")
	}
}

func TestADataFolderMayHaveAnyName(t *testing.T) {
	dir := filepath.Join(t.TempDir(), "night? 50% #1 &mode=ro")
	b := openBook(t, dir)
	mustNewRun(t, b, header("r1", ""))
	if _, err := os.Stat(filepath.Join(dir, fileName)); err != nil {
		t.Error(err)
	}
}

func TestTheJournalCannotBeChangedEvenByHand(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	for _, statement := range []string{
		`DELETE FROM journal`, `UPDATE journal SET kind = 'result'`,
		`INSERT INTO journal (run, sequence, kind, body) VALUES ('r1', 2, 'event', '{"run":"r1","sequence":3}')`,
		`INSERT INTO journal (run, sequence, kind, body) VALUES ('r1', 2, 'event', '{')`,
		`INSERT INTO journal (run, sequence, kind, body) VALUES ('r1', 1, 'event', '{"run":"r1","sequence":1}')`,
	} {
		if _, err := b.writer.Exec(statement); err == nil {
			t.Errorf("%s: done; want it refused", statement)
		}
	}
}

func TestVerifyFindsWhatIsWrong(t *testing.T) {
	const free = `DROP TRIGGER journal_is_never_changed; DROP TRIGGER journal_is_never_shortened; PRAGMA ignore_check_constraints = 1;`
	for _, c := range []struct{ name, damage, want string }{
		{"an entry is gone", `DELETE FROM journal WHERE run = 'r1' AND sequence = 2`, "sequence: run r1 has 2 entries, 1 to 3"},
		{"an id is gone", `DELETE FROM journal WHERE id = 2`, "ids of the journal: 3 entries, ids 1 to 4"},
		{"two ids were exchanged", `UPDATE journal SET id = 9 WHERE id = 2; UPDATE journal SET id = 2 WHERE id = 3; UPDATE journal SET id = 3 WHERE id = 9`, "order: r1.3 was committed before its predecessor"},
		{"a body was cut", `UPDATE journal SET body = substr(body, 1, 20) WHERE id = 2`, "is not JSON"},
		{"a body was exchanged", `UPDATE journal SET body = (SELECT body FROM journal WHERE id = 1) WHERE id = 2`, "entry r1.2 says that it is r1.1"},
		{"a header is gone", `DELETE FROM header`, "run r1 has entries and no header"},
		{"a run's entries are gone", `DELETE FROM journal WHERE run = 'r1'`, "run r1 has no entry"},
		{"a text is gone", `UPDATE header SET bench_text = ''`, "lacks recipe text, bench text or version"},
		{"a note is on nothing", `UPDATE remark SET run = 'r9'`, "note 1 is on run r9"},
		{"an index lost a row", `PRAGMA writable_schema = 1; UPDATE sqlite_schema SET sql = 'CREATE INDEX remark_of_run ON remark (run, who)' WHERE name = 'remark_of_run'`, "database: "},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := t.TempDir()
			b, err := Open(dir)
			if err != nil {
				t.Fatal(err)
			}
			mustNewRun(t, b, header("r1", ""))
			mustAppend(t, b, aReading("r1", 2), aReading("r1", 3), event(protocol.BenchRun, 1, protocol.Trouble, "", "a line is gone"))
			if err := b.AddNote(t.Context(), "r1", "test", "hello"); err != nil {
				t.Fatal(err)
			}
			if faults := b.Verify(t.Context()); len(faults) != 0 {
				t.Fatalf("before the damage: %q", faults)
			}
			if _, err := b.writer.Exec(free + c.damage); err != nil {
				t.Fatal(err)
			}
			if err := b.Close(); err != nil {
				t.Fatal(err)
			}
			again, err := OpenReadOnly(filepath.Join(dir, fileName))
			if err != nil {
				t.Fatal(err)
			}
			defer again.Close()
			if faults := again.Verify(t.Context()); !slices.ContainsFunc(faults, func(f string) bool { return strings.Contains(f, c.want) }) {
				t.Errorf("verify says %q; want %q", faults, c.want)
			}
		})
	}
}
