package logbook

import (
	"bytes"
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"hash/crc32"
	"unicode/utf8"

	"gemel/protocol"

	sqlite3 "modernc.org/sqlite/lib"
)

// One statement is one transaction: whether the entry's turn has come and the entry itself cannot
// come apart, and the usual case costs one round trip.
const insertEntry = `INSERT INTO journal (run, sequence, kind, body, sum)
	SELECT ?1, ?2, ?3, ?4, ?5
	 WHERE ?2 = 1 + coalesce((SELECT max(sequence) FROM journal WHERE run = ?1), 0)
	   AND (?1 = '-' OR EXISTS (SELECT 1 FROM header WHERE run = ?1))`

// Append writes an entry and returns when it is on the disk. It is not interrupted by the end of
// ctx, because an interrupted commit may or may not have happened; it waits for other connections
// at most 5 s. The same entry may be appended again, and is there once.
//
// Errors: ErrGap when it is not the run's next, ErrDifferent when another stands in its place,
// ErrNoRun, ErrBody, and ErrFull, after which the same Append works once there is room.
func (b *Book) Append(ctx context.Context, e protocol.Entry) error {
	where := "journal entry " + e.ID()
	if b.insert == nil {
		return wrap(where, ErrReadOnly)
	}
	if err := fits(e); err != nil {
		return wrap(where, err)
	}
	ctx = context.WithoutCancel(ctx)
	result, err := b.insert.ExecContext(ctx, e.Run, e.Sequence, e.Kind, string(e.Body), sumOf(string(e.Kind), string(e.Body)))
	if err != nil {
		return wrap(where, refused(err))
	}
	written, err := result.RowsAffected()
	if err != nil {
		return wrap(where, err)
	}
	if written == 0 {
		return wrap(where, b.whyNot(ctx, e))
	}
	b.tell()
	b.boundLog()
	return nil
}

// whyNot finds out why an entry was not the run's next. nil: it is there already.
func (b *Book) whyNot(ctx context.Context, e protocol.Entry) error {
	var kind protocol.EntryKind
	var body []byte
	err := b.writer.QueryRowContext(ctx, `SELECT kind, body FROM journal WHERE run = ? AND sequence = ?`, e.Run, e.Sequence).Scan(&kind, &body)
	switch {
	case err == nil && kind == e.Kind && bytes.Equal(body, e.Body):
		return nil
	case err == nil:
		return fmt.Errorf("%w: a %s of %d bytes; want the same to the byte, or the next sequence", ErrDifferent, kind, len(body))
	case !errors.Is(err, sql.ErrNoRows):
		return err
	}
	last, err := b.Last(ctx, e.Run)
	if err != nil {
		return err
	}
	if last == 0 && e.Run != protocol.BenchRun {
		return ErrNoRun
	}
	return fmt.Errorf("%w: the run's last is %d; want %d", ErrGap, last, last+1)
}

func refused(err error) error {
	if isCode(err, sqlite3.SQLITE_CONSTRAINT) {
		return fmt.Errorf("%w: %w", ErrBody, err)
	}
	return err
}

// sumOf is what the columns named sum hold.
func sumOf(parts ...string) int64 {
	var sum uint32
	for _, p := range parts {
		sum = crc32.Update(sum, crc32.MakeTable(crc32.Castagnoli), append([]byte(p), 0))
	}
	return int64(sum)
}

// fits checks what would make an entry useless to those who read it: no JSON, another entry's
// body, or a doubt that does not say about what.
func fits(e protocol.Entry) error {
	switch e.Kind {
	case protocol.ReadingEntry, protocol.PointEntry, protocol.EventEntry, protocol.ResultEntry:
	default:
		return fmt.Errorf("%w: kind %q; want reading, point, event or result", ErrBody, e.Kind)
	}
	if e.Sequence < 1 {
		return fmt.Errorf("%w: sequence %d; want 1 or more", ErrGap, e.Sequence)
	}
	if len(e.Body) > protocol.MostBody {
		return fmt.Errorf("%w: %d bytes; want at most %d", ErrBody, len(e.Body), protocol.MostBody)
	}
	if !utf8.Valid(e.Body) {
		return fmt.Errorf("%w: not UTF-8; want JSON", ErrBody)
	}
	var head struct {
		Run      protocol.RunID     `json:"run"`
		Sequence int64              `json:"sequence"`
		Kind     protocol.EventKind `json:"kind"`
		Detail   json.RawMessage    `json:"detail"`
	}
	if err := json.Unmarshal(e.Body, &head); err != nil {
		return fmt.Errorf("%w: %w", ErrBody, err)
	}
	if head.Run != e.Run || head.Sequence != e.Sequence {
		return fmt.Errorf("%w: it says %s.%d; want %s", ErrBody, head.Run, head.Sequence, e.ID())
	}
	if e.Kind == protocol.EventEntry && head.Kind == protocol.Doubted {
		var about struct {
			From int64  `json:"from_sequence"`
			To   int64  `json:"to_sequence"`
			Why  string `json:"why"`
		}
		if err := json.Unmarshal(head.Detail, &about); err != nil {
			return fmt.Errorf("%w: detail of a doubt: %w", ErrBody, err)
		}
		if about.From < 1 || about.To < about.From || about.Why == "" {
			return fmt.Errorf("%w: a doubt about %d to %d because %q; want from_sequence, to_sequence and why", ErrBody, about.From, about.To, about.Why)
		}
	}
	return nil
}

// Last returns the sequence of the run's last entry, 0 when there is none.
func (b *Book) Last(ctx context.Context, run protocol.RunID) (int64, error) {
	var last int64
	err := b.readers.QueryRowContext(ctx, `SELECT coalesce(max(sequence), 0) FROM journal WHERE run = ?`, run).Scan(&last)
	return last, wrap("run "+string(run), err)
}

// Entries returns at most limit entries of a run, in order, that come after a sequence. There are
// none for a run it does not know.
func (b *Book) Entries(ctx context.Context, run protocol.RunID, afterSequence int64, limit int) ([]protocol.Entry, error) {
	numbered, err := b.entries(ctx, `SELECT id, run, sequence, kind, body FROM journal
		WHERE run = ? AND sequence > ? ORDER BY sequence LIMIT ?`, run, afterSequence, max(limit, 0))
	if err != nil {
		return nil, wrap("run "+string(run), err)
	}
	entries := make([]protocol.Entry, len(numbered))
	for i, n := range numbered {
		entries[i] = n.Entry
	}
	return entries, nil
}

// After returns at most limit entries of the whole journal, in the order of commits, that come
// after an id; 0 is before the first.
func (b *Book) After(ctx context.Context, journalID int64, limit int) ([]protocol.Numbered, error) {
	numbered, err := b.entries(ctx, `SELECT id, run, sequence, kind, body FROM journal
		WHERE id > ? ORDER BY id LIMIT ?`, journalID, max(limit, 0))
	return numbered, wrap(b.file, err)
}

// Position returns the place in the whole journal of one entry.
func (b *Book) Position(ctx context.Context, run protocol.RunID, sequence int64) (id int64, found bool, err error) {
	err = b.readers.QueryRowContext(ctx, `SELECT id FROM journal WHERE run = ? AND sequence = ?`, run, sequence).Scan(&id)
	if errors.Is(err, sql.ErrNoRows) {
		return 0, false, nil
	}
	return id, err == nil, wrap(b.file, err)
}

func (b *Book) entries(ctx context.Context, query string, args ...any) ([]protocol.Numbered, error) {
	rows, err := b.readers.QueryContext(ctx, query, args...)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var found []protocol.Numbered
	for rows.Next() {
		var n protocol.Numbered
		var body []byte
		if err := rows.Scan(&n.ID, &n.Run, &n.Sequence, &n.Kind, &body); err != nil {
			return nil, err
		}
		n.Body = body
		found = append(found, n)
	}
	return found, rows.Err()
}
