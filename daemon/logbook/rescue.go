package logbook

import (
	"cmp"
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"time"

	"gemel/protocol"
)

// Rescued is what Rescue took out of a file, and what it did not.
type Rescued struct {
	Runs, Entries, Notes int      // in the new logbook
	Unsummed             int      // of the entries: readable, but nobody can say that they are what was written
	Left                 []string // what is not in it, and why: one sentence a run and reason
	Rest                 string   // the file that holds what of it could be read; empty: there is none
}

// Rescue reads a logbook file that may be damaged, without changing it, and writes what is sound
// into a new logbook file: the runs whose header can be read, of each the entries from the first on
// without a gap whose bodies are what was written, and the notes. What can be read and does not
// belong there (entries behind a gap, or of a run without a header, or that were changed after they
// were written) goes, one JSON object a line, into a file beside it whose name ends in
// ".rest.jsonl". It invents nothing: a gap stays a gap.
//
// Neither file may exist. ErrLocked: a daemon writes the logbook. ErrForeign: there is no entry in it.
func Rescue(ctx context.Context, file, to string) (_ Rescued, err error) {
	var r Rescued
	if to, err = filepath.Abs(to); err != nil {
		return r, fmt.Errorf("rescue: %w", err)
	}
	rest := to + ".rest.jsonl"
	for _, name := range []string{to, rest} {
		if _, err := os.Lstat(name); err == nil {
			return r, fmt.Errorf("rescue %s: there is such a file; want a new name", name)
		}
	}
	// Pages are read one after another; a daemon in between would tear them apart.
	if _, err := os.Stat(filepath.Join(filepath.Dir(file), lockName)); err == nil {
		lock, err := takeLock(filepath.Dir(file))
		if errors.Is(err, ErrLocked) {
			return r, err
		}
		if err == nil {
			defer lock.Close()
		}
	}
	wrecks, done, err := openWrecks(file)
	if err != nil {
		return r, err
	}
	defer done()
	f := newFound()
	for _, w := range wrecks {
		for row := range w.rows() {
			if ctx.Err() != nil {
				return r, ctx.Err()
			}
			f.take(w, row)
		}
	}
	if len(f.entries)+len(f.odd) == 0 {
		return r, fmt.Errorf("%s: there is no entry in it: %w", file, ErrForeign)
	}

	part, restPart := to+".part", rest+".part"
	defer func() {
		os.Remove(part)
		os.Remove(restPart)
	}()
	for _, name := range []string{part, restPart} {
		if err := os.Remove(name); err != nil && !os.IsNotExist(err) {
			return r, fmt.Errorf("rescue: %w", err)
		}
	}
	out := &restFile{name: restPart, counts: map[reason]*span{}}
	err = f.write(ctx, part, out, &r)
	err = errors.Join(err, out.close())
	if err != nil {
		return r, wrap("rescue "+to, err)
	}
	r.Left = out.sentences()
	if out.written {
		if err := keep(restPart, rest); err != nil {
			return r, fmt.Errorf("rescue: %w", err)
		}
		r.Rest = rest
	}
	if err := keep(part, to); err != nil {
		return r, fmt.Errorf("rescue: %w", err)
	}
	return r, nil
}

// holdsEntries says whether a file that is no sound logbook was one.
func holdsEntries(file string) bool {
	wrecks, done, err := openWrecks(file)
	if err != nil {
		return false
	}
	defer done()
	for _, w := range wrecks {
		for row := range w.rows() {
			if e, sum, ok := entryOf(row); ok && sound(e, sum) == nil {
				return true
			}
		}
	}
	return false
}

// place is an entry's in its run.
type place struct {
	run      protocol.RunID
	sequence int64
}

// candidate is a row that can be read once more.
type candidate struct {
	wreck *wreck
	row   spot
	id    int64
	sum   int64 // of what it holds, worked out anew
	proof bool  // a sum that was kept says that this is what was written
	why   string
}

// found is what stands in a wreck. Of the entries only the places are kept: a large logbook does
// not fit into memory.
type found struct {
	entries map[place]candidate
	headers map[protocol.RunID]candidate
	notes   map[int64]candidate
	odd     []candidate // what is a row of ours and not sound, with why
	seen    map[int64]bool
}

func newFound() *found {
	return &found{entries: map[place]candidate{}, headers: map[protocol.RunID]candidate{}, notes: map[int64]candidate{}, seen: map[int64]bool{}}
}

func (f *found) take(w *wreck, r row) {
	c := candidate{wreck: w, row: r.spot, id: r.id}
	if e, sum, ok := entryOf(r); ok {
		c.sum, c.proof = sumOf(string(e.Kind), string(e.Body)), sum != nil
		if c.proof && *sum == c.sum {
			e = asItSays(e) // the columns beside the body may be damaged; the body is not
		}
		if err := sound(e, sum); err != nil {
			f.oddity(c, err.Error())
			return
		}
		put(f, f.entries, place{e.Run, e.Sequence}, c)
	} else if h, bench, sum, ok := headerOf(r); ok {
		c.sum, c.proof = h.sum(bench), sum != nil
		if c.proof && *sum != c.sum {
			f.oddity(c, "its sum does not hold: it is not what was written")
			return
		}
		put(f, f.headers, h.Run, c)
	} else if n, ok := noteOf(r); ok {
		c.sum = sumOf(string(n.Run), n.At.String(), n.Who, n.Text)
		put(f, f.notes, r.id, c)
	}
}

// put keeps a candidate unless the same, or a better one, is there. Of two that differ and are
// equally good neither is believed.
func put[K comparable](f *found, kept map[K]candidate, key K, c candidate) {
	old, there := kept[key]
	switch {
	case !there || c.proof && !old.proof:
		kept[key] = c
	case old.sum == c.sum || c.row.stray || old.proof && !c.proof:
	default:
		old.why = "two that differ stand in its place"
		kept[key] = old
		f.oddity(c, old.why)
	}
}

// oddity keeps what is not sound, the same once.
func (f *found) oddity(c candidate, why string) {
	if f.seen[c.sum] {
		return
	}
	f.seen[c.sum] = true
	c.why = why
	f.odd = append(f.odd, c)
}

func (f *found) write(ctx context.Context, part string, out *restFile, r *Rescued) error {
	if err := useDisk(); err != nil {
		return err
	}
	// It is made in one piece, and thrown away if it is not: no commit needs the disk's word.
	db, err := open(part, "_pragma=journal_mode(OFF)", "_pragma=synchronous(OFF)")
	if err != nil {
		return err
	}
	defer db.Close()
	db.SetMaxOpenConns(1)
	if err := bringAlong(db, 0); err != nil {
		return err
	}
	tx, err := db.BeginTx(ctx, nil)
	if err != nil {
		return err
	}
	defer tx.Rollback()
	if err := f.writeHeaders(ctx, tx, out, r); err != nil {
		return err
	}
	if err := f.writeEntries(ctx, tx, out, r); err != nil {
		return err
	}
	if err := f.writeNotes(ctx, tx, out, r); err != nil {
		return err
	}
	for _, c := range f.odd {
		row, _ := c.wreck.again(c.row)
		if e, _, ok := entryOf(row); ok {
			out.entry(e, c.why)
		} else if h, bench, _, ok := headerOf(row); ok {
			out.header(h, bench, c.why)
		} else if n, ok := noteOf(row); ok {
			out.note(n, c.why)
		}
	}
	if err := tx.Commit(); err != nil {
		return err
	}
	return db.Close()
}

// writeHeaders writes those of runs that have a first entry.
func (f *found) writeHeaders(ctx context.Context, tx *sql.Tx, out *restFile, r *Rescued) error {
	for _, run := range inOrder(f.headers) {
		c := f.headers[run]
		row, _ := c.wreck.again(c.row)
		h, bench, sum, ok := headerOf(row)
		if first, begun := f.entries[place{run, 1}]; c.why == "" && (!begun || first.why != "") {
			c.why = "the run's first entry cannot be read"
		}
		if ok && c.why == "" {
			key := sql.NullString{String: h.Key, Valid: h.Key != ""}
			_, err := tx.ExecContext(ctx, `INSERT INTO header (run, bench, title, recipe_text, bench_text, version, simulated, key, who, queued_at, sum)
				VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)`, h.Run, bench, h.Title, h.RecipeText, h.BenchText, h.Version, h.Simulated, key, h.Who, h.QueuedAt.String(), sum)
			if err == nil {
				r.Runs++
				continue
			}
			if !errors.Is(refused(err), ErrBody) {
				return err
			}
			c.why = err.Error()
		}
		delete(f.headers, run)
		out.header(h, bench, c.why)
	}
	return nil
}

// writeEntries writes each run up to its first gap, in the order of commits as far as that can be
// told.
func (f *found) writeEntries(ctx context.Context, tx *sql.Tx, out *restFile, r *Rescued) error {
	insert, err := tx.PrepareContext(ctx, `INSERT INTO journal (run, sequence, kind, body, sum) VALUES (?, ?, ?, ?, ?)`)
	if err != nil {
		return err
	}
	defer insert.Close()
	next := map[protocol.RunID]int64{}
	why := map[protocol.RunID]string{} // nothing more is written of these
	var behind []place
	for _, p := range inOrder(f.entries) {
		behind = append(behind, p)
		// An id may be damaged: of a run, what comes next is next.
		for {
			p := place{p.run, next[p.run] + 1}
			c, there := f.entries[p]
			if !there || c.why != "" || why[p.run] != "" {
				break
			}
			if _, known := f.headers[p.run]; !known && p.run != protocol.BenchRun {
				why[p.run] = "the run's header cannot be read"
				break
			}
			if c.id > f.entries[behind[len(behind)-1]].id {
				break // its turn comes
			}
			row, _ := c.wreck.again(c.row)
			e, sum, _ := entryOf(row)
			if sum != nil {
				e = asItSays(e)
			}
			if _, err := insert.ExecContext(ctx, e.Run, e.Sequence, e.Kind, string(e.Body), sum); err != nil {
				if !errors.Is(refused(err), ErrBody) {
					return err
				}
				why[p.run] = err.Error()
				break
			}
			next[p.run]++
			r.Entries++
			if sum == nil {
				r.Unsummed++
			}
		}
	}
	for _, p := range behind {
		if p.sequence <= next[p.run] {
			continue
		}
		c := f.entries[p]
		row, _ := c.wreck.again(c.row)
		e, _, _ := entryOf(row)
		e.Run, e.Sequence = p.run, p.sequence
		out.entry(e, cmp.Or(c.why, why[p.run], fmt.Sprintf("entry %d of the run cannot be read", next[p.run]+1)))
	}
	return nil
}

func (f *found) writeNotes(ctx context.Context, tx *sql.Tx, out *restFile, r *Rescued) error {
	for _, number := range inOrder(f.notes) {
		c := f.notes[number]
		row, _ := c.wreck.again(c.row)
		n, _ := noteOf(row)
		if _, known := f.headers[n.Run]; !known && n.Run != protocol.BenchRun && c.why == "" {
			c.why = "the run's header cannot be read"
		}
		if c.why != "" {
			out.note(n, c.why)
			continue
		}
		if _, err := tx.ExecContext(ctx, `INSERT INTO remark (run, at, who, text) VALUES (?, ?, ?, ?)`, n.Run, n.At.String(), n.Who, n.Text); err != nil {
			return err
		}
		r.Notes++
	}
	return nil
}

func inOrder[K comparable](of map[K]candidate) []K {
	keys := make([]K, 0, len(of))
	for k := range of {
		keys = append(keys, k)
	}
	slices.SortFunc(keys, func(a, b K) int {
		x, y := of[a], of[b]
		return cmp.Or(cmp.Compare(x.id, y.id), cmp.Compare(x.row.at, y.row.at), cmp.Compare(x.row.cell, y.row.cell))
	})
	return keys
}

// entryOf reads a row of the journal: sum is nil in those of schema 1.
func entryOf(r row) (e protocol.Entry, sum *int64, ok bool) {
	v := r.values
	if len(v) != 5 && len(v) != 6 || v[0] != nil {
		return e, nil, false
	}
	run, ok1 := v[1].(string)
	sequence, ok2 := v[2].(int64)
	kind, ok3 := v[3].(string)
	body, ok4 := v[4].(string)
	if !ok1 || !ok2 || !ok3 || !ok4 {
		return e, nil, false
	}
	if len(v) == 6 && v[5] != nil {
		s, is := v[5].(int64)
		if !is {
			return e, nil, false
		}
		sum = &s
	}
	return protocol.Entry{Run: protocol.RunID(run), Sequence: sequence, Kind: protocol.EntryKind(kind), Body: json.RawMessage(body)}, sum, true
}

// asItSays is an entry in the place that its body names.
func asItSays(e protocol.Entry) protocol.Entry {
	var head struct {
		Run      protocol.RunID `json:"run"`
		Sequence int64          `json:"sequence"`
	}
	if json.Unmarshal(e.Body, &head) == nil {
		e.Run, e.Sequence = head.Run, head.Sequence
	}
	return e
}

func headerOf(r row) (h Header, bench string, sum *int64, ok bool) {
	v := r.values
	if len(v) != 11 && len(v) != 12 || v[0] != nil {
		return h, "", nil, false
	}
	var run, queued string
	texts := map[int]*string{1: &run, 2: &bench, 3: &h.Title, 4: &h.RecipeText, 5: &h.BenchText, 6: &h.Version, 9: &h.Who, 10: &queued}
	for i, to := range texts {
		if *to, ok = v[i].(string); !ok {
			return h, "", nil, false
		}
	}
	h.Run = protocol.RunID(run)
	if pace, is := v[7].(int64); is {
		h.Simulated = new(int(pace))
	} else if v[7] != nil {
		return h, "", nil, false
	}
	if h.Key, ok = v[8].(string); !ok && v[8] != nil {
		return h, "", nil, false
	}
	if len(v) == 12 && v[11] != nil {
		s, is := v[11].(int64)
		if !is {
			return h, "", nil, false
		}
		sum = &s
	}
	at, err := time.Parse(time.RFC3339Nano, queued)
	h.QueuedAt = protocol.Time{Time: at}
	return h, bench, sum, err == nil
}

func noteOf(r row) (n Note, ok bool) {
	v := r.values
	if len(v) != 5 || v[0] != nil {
		return n, false
	}
	var run, at string
	for i, to := range []*string{&run, &at, &n.Who, &n.Text} {
		if *to, ok = v[i+1].(string); !ok {
			return n, false
		}
	}
	t, err := time.Parse(time.RFC3339Nano, at)
	n.Run, n.At = protocol.RunID(run), protocol.Time{Time: t}
	return n, err == nil
}

// restFile keeps what can be read and has no place in the new logbook, one JSON object a line.
type restFile struct {
	name    string
	file    *os.File
	written bool
	failed  error
	order   []reason
	counts  map[reason]*span
}

type reason struct {
	what string
	run  protocol.RunID
	why  string
}

type span struct {
	number      int
	first, last int64
}

func (o *restFile) entry(e protocol.Entry, why string) {
	line := map[string]any{"what": "entry", "run": e.Run, "sequence": e.Sequence, "kind": e.Kind, "why": why, "body": e.Body}
	if !json.Valid(e.Body) {
		line["body"] = string(e.Body)
	}
	o.put(reason{"entry", e.Run, why}, e.Sequence, line)
}

func (o *restFile) header(h Header, bench, why string) {
	o.put(reason{"header", h.Run, why}, 0, map[string]any{"what": "header", "run": h.Run, "why": why, "bench": bench, "title": h.Title, "recipe_text": h.RecipeText,
		"bench_text": h.BenchText, "version": h.Version, "simulated": h.Simulated, "key": h.Key, "who": h.Who, "queued_at": h.QueuedAt})
}

func (o *restFile) note(n Note, why string) {
	o.put(reason{"note", n.Run, why}, 0, map[string]any{"what": "note", "run": n.Run, "why": why, "at": n.At, "who": n.Who, "text": n.Text})
}

func (o *restFile) put(r reason, sequence int64, line map[string]any) {
	s := o.counts[r]
	if s == nil {
		s = &span{first: sequence, last: sequence}
		o.counts[r], o.order = s, append(o.order, r)
	}
	s.number++
	s.first, s.last = min(s.first, sequence), max(s.last, sequence)
	if o.failed != nil {
		return
	}
	if o.file == nil {
		if o.file, o.failed = os.OpenFile(o.name, os.O_CREATE|os.O_EXCL|os.O_WRONLY, 0o644); o.failed != nil {
			return
		}
		o.written = true
	}
	out := json.NewEncoder(o.file) // one write a line
	out.SetEscapeHTML(false)       // a body is to stay what it is
	o.failed = out.Encode(line)
}

func (o *restFile) close() error {
	if o.file == nil {
		return o.failed
	}
	return errors.Join(o.failed, o.file.Sync(), o.file.Close())
}

func (o *restFile) sentences() (all []string) {
	for _, r := range o.order {
		s := o.counts[r]
		what := fmt.Sprintf("%s of run %s", r.what, r.run)
		if r.what == "entry" {
			what = fmt.Sprintf("run %s, %d entries from %d to %d", r.run, s.number, s.first, s.last)
		}
		all = append(all, what+": "+r.why)
	}
	return all
}
