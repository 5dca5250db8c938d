package logbook

import (
	"context"
	"database/sql"
	"fmt"
	"time"

	"gemel/protocol"
)

// Note is what a person wrote about a run, or about the bench.
type Note struct {
	Run  protocol.RunID
	At   protocol.Time
	Who  string
	Text string
}

// AddNote writes what a person has to say about a run, or about the bench under run "-", at the
// wall clock's time. It returns when the note is on the disk.
func (b *Book) AddNote(ctx context.Context, run protocol.RunID, who, text string) error {
	where := "note on run " + string(run)
	if b.writer == nil {
		return wrap(where, ErrReadOnly)
	}
	if text == "" {
		return fmt.Errorf("%s: %w: it is empty; want a text", where, ErrBody)
	}
	result, err := b.writer.ExecContext(context.WithoutCancel(ctx), `INSERT INTO remark (run, at, who, text)
		SELECT ?1, ?2, ?3, ?4 WHERE ?1 = '-' OR EXISTS (SELECT 1 FROM header WHERE run = ?1)`,
		run, protocol.Time{Time: time.Now()}.String(), who, text)
	if err != nil {
		return wrap(where, err)
	}
	if n, err := result.RowsAffected(); err != nil || n == 0 {
		if err == nil {
			err = ErrNoRun
		}
		return wrap(where, err)
	}
	return nil
}

// Notes returns the notes on a run in the order they were written.
func (b *Book) Notes(ctx context.Context, run protocol.RunID) ([]Note, error) {
	where := "notes on run " + string(run)
	rows, err := b.readers.QueryContext(ctx, `SELECT run, at, who, text FROM note WHERE run = ? ORDER BY number`, run)
	if err != nil {
		return nil, wrap(where, err)
	}
	defer rows.Close()
	var notes []Note
	for rows.Next() {
		var n Note
		var at sql.NullString
		if err := rows.Scan(&n.Run, &at, &n.Who, &n.Text); err != nil {
			return nil, wrap(where, err)
		}
		if n.At, err = instantOf(at); err != nil {
			return nil, wrap(where, err)
		}
		notes = append(notes, n)
	}
	return notes, wrap(where, rows.Err())
}
