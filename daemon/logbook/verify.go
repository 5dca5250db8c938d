package logbook

import (
	"context"
	"encoding/json"
	"fmt"
	"slices"

	"gemel/protocol"
)

// Audit is what was looked at in a logbook and what was found.
type Audit struct {
	Schema                         int
	Runs, Entries, Readings, Notes int
	Unsummed                       int      // entries of schema 1, of which nobody can say that their bodies are what was written
	Checked                        []string // one phrase a check
	Wrong                          []string // one sentence a fault; none when it is well
}

// Verify reads the whole file and returns what is wrong with it, one sentence each; nothing when
// it is well. On a large file it takes seconds.
func (b *Book) Verify(ctx context.Context) []string {
	var a Audit
	b.verify(ctx, &a)
	return a.Wrong
}

// Audit is Verify, with what it looked at, and with every view read to its end.
func (b *Book) Audit(ctx context.Context) Audit {
	var a Audit
	b.verify(ctx, &a)
	b.verifyViews(ctx, &a)
	return a
}

// verify goes on after a fault as far as that can be.
func (b *Book) verify(ctx context.Context, a *Audit) {
	for _, check := range checks {
		if !slices.Contains(a.Checked, check.phrase) {
			a.Checked = append(a.Checked, check.phrase)
		}
		rows, err := b.readers.QueryContext(ctx, check.query)
		if err != nil {
			a.wrong("%s: cannot be checked: %v", check.what, err)
			continue
		}
		for rows.Next() {
			var found string
			if err := rows.Scan(&found); err != nil {
				found = err.Error()
			}
			a.wrong("%s: %s", check.what, found)
		}
		if err := rows.Err(); err != nil {
			a.wrong("%s: cannot be checked: %v", check.what, err)
		}
		rows.Close()
	}
	a.Checked = append(a.Checked, "every body against its sum and its kind", "counts against their slices")
	if err := b.readers.QueryRowContext(ctx, `SELECT user_version FROM pragma_user_version`).Scan(&a.Schema); err != nil {
		a.wrong("schema: cannot be checked: %v", err)
		return
	}
	b.verifyBodies(ctx, a)
	b.verifyHeaders(ctx, a)
}

func (a *Audit) wrong(format string, of ...any) {
	a.Wrong = append(a.Wrong, fmt.Sprintf(format, of...))
}

// verifyBodies reads the journal in pages, so that a daemon that writes beside it is not kept from
// beginning its write-ahead log anew.
func (b *Book) verifyBodies(ctx context.Context, a *Audit) {
	sum := "NULL"
	if a.Schema > 1 {
		sum = "sum"
	}
	for after := int64(0); ; {
		n := 0
		rows, err := b.readers.QueryContext(ctx, `SELECT id, run, sequence, kind, body, `+sum+` FROM journal WHERE id > ? ORDER BY id LIMIT 1000`, after)
		if err != nil {
			a.wrong("bodies: cannot be read on after entry %d: %v", after, err)
			return
		}
		for rows.Next() {
			var e protocol.Entry
			var body []byte
			var sum *int64
			if err := rows.Scan(&after, &e.Run, &e.Sequence, &e.Kind, &body, &sum); err != nil {
				a.wrong("bodies: entry %d: %v", after+1, err)
				continue
			}
			n++
			e.Body = body
			a.Entries++
			if e.Kind == protocol.ReadingEntry {
				a.Readings++
			}
			if sum == nil {
				a.Unsummed++
			}
			if err := sound(e, sum); err != nil {
				a.wrong("body: entry %s: %v", e.ID(), err)
			} else if text := summed(e); text != "" {
				a.wrong("counts: entry %s: %s", e.ID(), text)
			}
		}
		err = rows.Err()
		rows.Close()
		if err != nil {
			a.wrong("bodies: cannot be read on after entry %d: %v", after, err)
			return
		}
		if n == 0 {
			return
		}
	}
}

// sound says what is wrong with an entry by itself.
func sound(e protocol.Entry, sum *int64) error {
	if sum != nil && *sum != sumOf(string(e.Kind), string(e.Body)) {
		return fmt.Errorf("its sum does not hold: it is not what was written")
	}
	return fits(e)
}

// summed says where a reading's counts are neither the sum of its slices nor, as those of a tag
// channel, the last one's.
func summed(e protocol.Entry) string {
	if e.Kind != protocol.ReadingEntry {
		return ""
	}
	var r protocol.Reading
	if err := json.Unmarshal(e.Body, &r); err != nil {
		return fmt.Sprintf("not a reading: %v", err)
	}
	if len(r.Slices) == 0 {
		return ""
	}
	for _, c := range r.Counts {
		var sum uint64
		for _, s := range r.Slices {
			for _, in := range s.Counts {
				if in.Channel == c.Channel {
					sum += in.Counts
				}
			}
		}
		if sum != c.Counts && !slices.Contains(r.Slices[len(r.Slices)-1].Counts, c) {
			return fmt.Sprintf("%s counted %d, its slices %d", c.Channel, c.Counts, sum)
		}
	}
	return ""
}

func (b *Book) verifyHeaders(ctx context.Context, a *Audit) {
	if err := b.readers.QueryRowContext(ctx, `SELECT count(*) FROM remark`).Scan(&a.Notes); err != nil {
		a.wrong("note: cannot be read: %v", err)
	}
	sum := "NULL"
	if a.Schema > 1 {
		sum = "sum"
	}
	rows, err := b.readers.QueryContext(ctx, `SELECT run, bench, title, recipe_text, bench_text, version, simulated, coalesce(key, ''), who, queued_at, `+sum+` FROM header`)
	if err != nil {
		a.wrong("header: cannot be read: %v", err)
		return
	}
	defer rows.Close()
	for rows.Next() {
		a.Runs++
		var h Header
		var bench, queued string
		var sum *int64
		err := rows.Scan(&h.Run, &bench, &h.Title, &h.RecipeText, &h.BenchText, &h.Version, &h.Simulated, &h.Key, &h.Who, &queued, &sum)
		if err == nil {
			err = h.QueuedAt.UnmarshalJSON([]byte(`"` + queued + `"`))
		}
		if err != nil {
			a.wrong("header: run %s: %v", h.Run, err)
		} else if sum != nil && *sum != h.sum(bench) {
			a.wrong("header: run %s: its sum does not hold: it is not what was written", h.Run)
		}
	}
	if err := rows.Err(); err != nil {
		a.wrong("header: cannot be read: %v", err)
	}
}

// views are those that people's tools rely on.
var views = []string{"run", "reading", "reading_angle", "reading_setting", "reading_sensor", "reading_count", "reading_slice", "event", "note"}

func (b *Book) verifyViews(ctx context.Context, a *Audit) {
	a.Checked = append(a.Checked, fmt.Sprintf("%d views", len(views)))
	for _, view := range views {
		rows, err := b.readers.QueryContext(ctx, `SELECT * FROM `+view)
		if err != nil {
			a.wrong("view %s: %v", view, err)
			continue
		}
		for rows.Next() {
		}
		err = rows.Err()
		rows.Close()
		if err != nil {
			a.wrong("view %s: %v", view, err)
		}
	}
}

// Each query returns one text a fault.
var checks = []struct{ what, phrase, query string }{
	{"database", "SQLite's own structure", `SELECT integrity_check FROM pragma_integrity_check WHERE integrity_check <> 'ok'`},
	{"ids of the journal", "ids and sequences without gaps", `SELECT format('%d entries, ids %d to %d; want 1 to the number of entries', count(*), min(id), max(id))
		FROM journal HAVING count(*) > 0 AND (min(id) <> 1 OR max(id) <> count(*))`},
	{"sequence", "ids and sequences without gaps", `SELECT format('run %s has %d entries, %d to %d; want 1 to their number', run, count(*), min(sequence), max(sequence))
		FROM journal GROUP BY run HAVING min(sequence) <> 1 OR max(sequence) <> count(*)`},
	{"order", "the order of commits", `SELECT format('%s.%d was committed before its predecessor', run, sequence)
		FROM (SELECT run, sequence, id, lag(id) OVER (PARTITION BY run ORDER BY sequence) AS before FROM journal) WHERE before > id`},
	{"body", "bodies that are JSON and belong to their entry", `SELECT format('entry %s.%d is not JSON', run, sequence) FROM journal WHERE NOT json_valid(body)`},
	{"body", "bodies that are JSON and belong to their entry", `SELECT format('entry %s.%d says that it is %s.%s', run, sequence, json_extract(body, '$.run'), json_extract(body, '$.sequence'))
		FROM journal WHERE json_valid(body) AND (json_extract(body, '$.run') IS NOT run OR json_extract(body, '$.sequence') IS NOT sequence)`},
	{"header", "headers, entries and notes belong to each other", `SELECT format('run %s has entries and no header', run) FROM (SELECT DISTINCT run FROM journal WHERE run <> '-')
		WHERE run NOT IN (SELECT run FROM header)`},
	{"header", "headers, entries and notes belong to each other", `SELECT format('run %s has no entry', run) FROM header WHERE run NOT IN (SELECT run FROM journal)`},
	{"header", "headers, entries and notes belong to each other", `SELECT format('run %s lacks recipe text, bench text or version', run) FROM header
		WHERE recipe_text = '' OR bench_text = '' OR version = ''`},
	{"view reading", "headers, entries and notes belong to each other", `SELECT format('%d rows; want %d, the readings in the journal', shown, kept)
		FROM (SELECT (SELECT count(*) FROM reading) AS shown, (SELECT count(*) FROM journal WHERE kind = 'reading') AS kept) WHERE shown <> kept`},
	{"note", "headers, entries and notes belong to each other", `SELECT format('note %d is on run %s, which is not there', number, run) FROM remark
		WHERE run <> '-' AND run NOT IN (SELECT run FROM header)`},
}
