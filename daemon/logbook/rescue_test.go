package logbook

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"gemel/protocol"
)

// image is a logbook as the disk has it, and what it holds.
type image struct {
	file, log []byte
	entries   []protocol.Numbered
}

// anImage is of three runs and the bench, with bodies that need pages of their own, part of it in
// the write-ahead log.
func anImage(t testing.TB) image {
	t.Helper()
	dir := t.TempDir()
	b := openBook(t, dir)
	for _, run := range []protocol.RunID{"r1", "r2", "r3"} {
		mustNewRun(t, b, header(run, "key of "+string(run)))
	}
	fill := func(from, to int64) {
		for s := from; s <= to; s++ {
			mustAppend(t, b, aReading("r1", s), aReading("r2", s), event(protocol.BenchRun, s-1, protocol.Trouble, "", "a line is gone"))
			if s%5 == 0 {
				mustAppend(t, b, event("r3", s/5+1, protocol.Trouble, "", strings.Repeat("ö", int(s)*700)))
			}
		}
		if err := b.AddNote(t.Context(), "r1", "ann", fmt.Sprintf("%d so far", to)); err != nil {
			t.Fatal(err)
		}
	}
	fill(2, 20)
	if _, err := b.folder.Exec(`PRAGMA wal_checkpoint(TRUNCATE)`); err != nil {
		t.Fatal(err)
	}
	fill(21, 30)
	entries, err := b.After(t.Context(), 0, 10000)
	if err != nil {
		t.Fatal(err)
	}
	i := image{entries: entries}
	if i.file, err = os.ReadFile(b.file); err != nil {
		t.Fatal(err)
	}
	if i.log, err = os.ReadFile(b.file + "-wal"); err != nil || len(i.log) < 50_000 {
		t.Fatalf("a log of %d bytes, %v; want half of the entries in it", len(i.log), err)
	}
	return i
}

// put writes the image as a data folder.
func (i image) put(t testing.TB) (dir string) {
	t.Helper()
	dir = t.TempDir()
	if err := errors.Join(os.WriteFile(filepath.Join(dir, fileName), i.file, 0o644), os.WriteFile(filepath.Join(dir, fileName+"-wal"), i.log, 0o644)); err != nil {
		t.Fatal(err)
	}
	return dir
}

// readable is what SQLite itself can still read: this test's own reader beside ours.
func (i image) readable(t *testing.T) map[string]bool {
	t.Helper()
	can := map[string]bool{}
	db, err := open(filepath.Join(i.put(t), fileName))
	if err != nil {
		return can
	}
	defer db.Close()
	for _, n := range i.entries {
		var run protocol.RunID
		var sequence int64
		var body []byte
		err := db.QueryRow(`SELECT run, sequence, body FROM journal NOT INDEXED WHERE id = ?`, n.ID).Scan(&run, &sequence, &body)
		if err == nil && run == n.Run && sequence == n.Sequence && bytes.Equal(body, n.Body) {
			can[n.Entry.ID()] = true
		}
	}
	return can
}

// damage does one thing that disks and people do.
func (i image) damage(random *rand.Rand) (image, string) {
	i.file, i.log = bytes.Clone(i.file), bytes.Clone(i.log)
	in, name := &i.file, "file"
	if random.IntN(3) == 0 {
		in, name = &i.log, "log"
	}
	page := func() int { return random.IntN(len(*in) / usualPage) }
	switch kind := random.IntN(7); kind {
	case 0:
		at, bit := random.IntN(len(*in)), random.IntN(8)
		(*in)[at] ^= 1 << bit
		return i, fmt.Sprintf("bit %d of byte %d of the %s", bit, at, name)
	case 1:
		at, n := random.IntN(len(*in)), 1+random.IntN(64)
		for k := at; k < min(at+n, len(*in)); k++ {
			(*in)[k] = byte(random.Uint32())
		}
		return i, fmt.Sprintf("%d bytes from %d of the %s", n, at, name)
	case 2:
		n := random.IntN(len(*in))
		*in = (*in)[:n]
		return i, fmt.Sprintf("the %s cut at %d", name, n)
	case 3:
		p := page()
		clear((*in)[p*usualPage : (p+1)*usualPage])
		return i, fmt.Sprintf("page %d of the %s zeroed", p, name)
	case 4:
		p, q := page(), page()
		copy((*in)[p*usualPage:(p+1)*usualPage], (*in)[q*usualPage:(q+1)*usualPage])
		return i, fmt.Sprintf("page %d of the %s over page %d", q, name, p)
	case 5:
		for range 40 {
			(*in)[random.IntN(len(*in))] = byte(random.Uint32())
		}
		return i, "40 bytes anywhere in the " + name
	default:
		at := random.IntN(fileHead)
		i.file[at] ^= byte(1 + random.IntN(255))
		return i, fmt.Sprintf("byte %d of the file's head", at)
	}
}

// rescued is what a rescue brought out: by id, in the new logbook and beside it.
func rescued(t *testing.T, r Rescued, to string) (in, beside map[string]string) {
	t.Helper()
	in, beside = map[string]string{}, map[string]string{}
	b, err := OpenReadOnly(to)
	if err != nil {
		t.Fatal(err)
	}
	defer b.Close()
	if a := b.Audit(t.Context()); len(a.Wrong) != 0 || a.Entries != r.Entries || a.Runs != r.Runs || a.Notes != r.Notes {
		t.Errorf("the new logbook has %+v; want %+v and nothing wrong", a, r)
	}
	entries, err := b.After(t.Context(), 0, 10000)
	if err != nil {
		t.Fatal(err)
	}
	for _, n := range entries {
		in[n.Entry.ID()] = string(n.Body)
	}
	if r.Rest == "" {
		return in, beside
	}
	text, err := os.ReadFile(r.Rest)
	if err != nil {
		t.Fatal(err)
	}
	lines := bufio.NewScanner(bytes.NewReader(text))
	lines.Buffer(nil, 1<<24)
	for lines.Scan() {
		var l struct {
			What, Why string
			Run       protocol.RunID
			Sequence  int64
			Body      json.RawMessage
		}
		if err := json.Unmarshal(lines.Bytes(), &l); err != nil || l.Why == "" {
			t.Fatalf("rest: %v, why %q: %s", err, l.Why, lines.Bytes())
		}
		if l.What == "entry" {
			beside[protocol.Entry{Run: l.Run, Sequence: l.Sequence}.ID()] += string(l.Body)
		}
	}
	return in, beside
}

func TestRescueTakesAllThatCanBeReadAndInventsNothing(t *testing.T) {
	trials := 120
	if testing.Short() {
		trials = 40
	}
	whole := anImage(t)
	var refused, cut, more, all int
	for seed := range trials {
		random := rand.New(rand.NewPCG(2031, uint64(seed)))
		hurt, what := whole.damage(random)
		for random.IntN(4) == 0 {
			var also string
			hurt, also = hurt.damage(random)
			if what += ", " + also; len(hurt.file) < usualPage || len(hurt.log) < usualPage {
				break
			}
		}
		if len(hurt.file) == 0 {
			continue // that is a first start
		}
		t.Run(fmt.Sprintf("seed %d, %s", seed, what), func(t *testing.T) {
			dir := hurt.put(t)
			b, err := Open(dir)
			if err == nil {
				b.Audit(t.Context())
				b.Close()
			} else {
				refused++
				if is, _ := os.ReadFile(filepath.Join(dir, fileName)); !bytes.Equal(is, hurt.file) {
					t.Errorf("Open: %v, and the file was written to", err)
				}
				if !errors.Is(err, ErrDamaged) && !errors.Is(err, ErrForeign) {
					t.Errorf("Open: %v; want a damaged logbook", err)
				}
			}
			dir = hurt.put(t)
			if b, err := OpenReadOnly(filepath.Join(dir, fileName)); err == nil {
				b.Audit(t.Context())
				b.Close()
			}

			can := hurt.readable(t)
			dir = hurt.put(t)
			to := filepath.Join(t.TempDir(), "rescued.db")
			r, err := Rescue(t.Context(), filepath.Join(dir, fileName), to)
			if err != nil {
				if !errors.Is(err, ErrForeign) || len(can) != 0 {
					t.Fatalf("Rescue: %v, and SQLite reads %d entries", err, len(can))
				}
				return
			}
			if is, _ := os.ReadFile(filepath.Join(dir, fileName)); !bytes.Equal(is, hurt.file) {
				t.Error("the damaged file was changed")
			}
			in, beside := rescued(t, r, to)
			original := map[string]string{}
			for _, n := range whole.entries {
				id := n.Entry.ID()
				original[id] = string(n.Body)
				if can[id] && in[id] == "" && !strings.Contains(beside[id], string(n.Body)) {
					t.Errorf("SQLite reads %s, and it is in neither file; left: %q", id, r.Left)
				}
			}
			for id, body := range in {
				if original[id] != body {
					t.Errorf("%s was invented", id)
				}
			}
			if len(beside) > 0 && len(r.Left) == 0 {
				t.Errorf("%d entries beside, and nothing is said of them", len(beside))
			}
			all += len(whole.entries)
			cut += len(whole.entries) - len(in)
			more += len(in) + len(beside) - len(can)
		})
	}
	t.Logf("%d damages, %d refused by Open; of %d entries %d were not in the new logbook; %d were brought out that SQLite does not read", trials, refused, all, cut, more)
	if refused < trials/4 {
		t.Errorf("Open refused %d of %d damaged files; want a quarter at least", refused, trials)
	}
}

func TestRescueOfASoundLogbookIsTheLogbook(t *testing.T) {
	whole := anImage(t)
	dir := whole.put(t)
	to := filepath.Join(t.TempDir(), "rescued.db")
	r, err := Rescue(t.Context(), filepath.Join(dir, fileName), to)
	if err != nil || len(r.Left) != 0 || r.Rest != "" || r.Entries != len(whole.entries) || r.Runs != 3 || r.Notes != 2 || r.Unsummed != 0 {
		t.Fatalf("Rescue: %+v, %v; want all %d entries, 3 runs, 2 notes", r, err, len(whole.entries))
	}
	b, err := OpenReadOnly(to)
	if err != nil {
		t.Fatal(err)
	}
	got, err := b.After(t.Context(), 0, 10000)
	if err != nil {
		t.Fatal(err)
	}
	for i, n := range got {
		if want := whole.entries[i]; n.ID != want.ID || n.Entry.ID() != want.Entry.ID() || n.Kind != want.Kind || !bytes.Equal(n.Body, want.Body) {
			t.Fatalf("entry %d is %s; want %s", n.ID, n.Entry.ID(), want.Entry.ID())
		}
	}
	rows, err := b.Runs(t.Context())
	if err != nil || len(rows) != 3 || rows[1].Key != "key of r2" || rows[1].RecipeText != header("r2", "").RecipeText {
		t.Errorf("runs %+v, %v", rows, err)
	}
	for _, name := range []string{to, filepath.Join(t.TempDir(), "no such folder", "x.db")} {
		if _, err := Rescue(t.Context(), filepath.Join(dir, fileName), name); err == nil {
			t.Errorf("a rescue to %s was made", name)
		}
	}
	// A daemon may go on with it.
	closeVerified(t, b)
	again := t.TempDir()
	if err := os.Rename(to, filepath.Join(again, fileName)); err != nil {
		t.Fatal(err)
	}
	mustAppend(t, openBook(t, again), aReading("r1", 31))
}

func TestRescueKeepsAGapAGap(t *testing.T) {
	for _, c := range []struct{ name, damage, left string }{
		{"an entry is gone", `DELETE FROM journal WHERE run = 'r1' AND sequence = 12`, "run r1, 18 entries from 13 to 30: entry 12 of the run cannot be read"},
		{"a body was changed", `UPDATE journal SET body = replace(body, '"accepted":true', '"accepted":null') WHERE run = 'r1' AND sequence = 12`, "run r1, 1 entries from 12 to 12: its sum does not hold"},
		{"a header is gone", `DELETE FROM header WHERE run = 'r2'`, "run r2, 30 entries from 1 to 30: the run's header cannot be read"},
		{"a recipe was changed", `UPDATE header SET recipe_text = 'title: another' WHERE run = 'r2'`, "header of run r2: its sum does not hold"},
		{"a first entry is gone", `DELETE FROM journal WHERE run = 'r2' AND sequence = 1`, "header of run r2: the run's first entry cannot be read"},
	} {
		t.Run(c.name, func(t *testing.T) {
			dir := anImage(t).put(t)
			b, err := Open(dir)
			if err != nil {
				t.Fatal(err)
			}
			if _, err := b.writer.Exec(`DROP TRIGGER journal_is_never_changed; DROP TRIGGER journal_is_never_shortened; ` + c.damage); err != nil {
				t.Fatal(err)
			}
			if err := b.Close(); err != nil {
				t.Fatal(err)
			}
			to := filepath.Join(t.TempDir(), "rescued.db")
			r, err := Rescue(t.Context(), b.file, to)
			if err != nil {
				t.Fatal(err)
			}
			if left := strings.Join(r.Left, "\n"); !strings.Contains(left, c.left) {
				t.Errorf("left:\n%s\nwant %q", left, c.left)
			}
			rescued(t, r, to)
		})
	}
}

func TestRescueWaitsForNoDaemonAndTakesNoOtherFile(t *testing.T) {
	dir := t.TempDir()
	b := openBook(t, dir)
	mustNewRun(t, b, header("r1", ""))
	if _, err := Rescue(t.Context(), b.file, filepath.Join(dir, "x.db")); !errors.Is(err, ErrLocked) {
		t.Errorf("beside a daemon: %v; want %v", err, ErrLocked)
	}
	other := filepath.Join(t.TempDir(), "notes.txt")
	if err := os.WriteFile(other, bytes.Repeat([]byte("counts\n"), 3000), 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := Rescue(t.Context(), other, filepath.Join(dir, "x.db")); !errors.Is(err, ErrForeign) {
		t.Errorf("a text file: %v; want %v", err, ErrForeign)
	}
	if left, _ := filepath.Glob(filepath.Join(dir, "x.db*")); len(left) != 0 {
		t.Errorf("left %q; want nothing", left)
	}
}

// Whatever a file holds, it is opened, verified and rescued, or refused.
func FuzzAnyBytesAsALogbook(f *testing.F) {
	small, err := os.ReadFile(fixture(1))
	if err != nil {
		f.Fatal(err)
	}
	f.Add(small, []byte(nil))
	f.Add(small[:3*usualPage], []byte("x"))
	f.Add([]byte("SQLite format 3\x00"), []byte(nil))
	whole := anImage(f)
	f.Add(whole.file[:2*usualPage], whole.log[:40_000])
	f.Fuzz(func(t *testing.T, file, log []byte) {
		if len(file) > 1<<18 || len(log) > 1<<18 {
			t.Skip("too large to be quick")
		}
		i := image{file: file, log: log}
		dir := i.put(t)
		r, err := Rescue(t.Context(), filepath.Join(dir, fileName), filepath.Join(dir, "rescued.db"))
		if err == nil {
			rescued(t, r, filepath.Join(dir, "rescued.db"))
		}
		if b, err := OpenReadOnly(filepath.Join(dir, fileName)); err == nil {
			b.Audit(t.Context())
			b.Close()
		}
	})
}
