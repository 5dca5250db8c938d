package logbook

import (
	"cmp"
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strconv"

	"gemel/protocol"
)

// Header is what belongs to a run as a whole and is known before its first entry.
type Header struct {
	Run        protocol.RunID
	Title      string
	RecipeText string
	BenchText  string
	Version    string // of the program
	Simulated  *int   // nil on a real bench, else the clock factor
	Key        string // the request's idempotency key; empty: it has none
	Who        string
	QueuedAt   protocol.Time
}

// RunRow is a run as it stands: its header, and what its events say.
type RunRow struct {
	Header
	Bench     string
	State     protocol.State
	Reason    string // the text of the last event that carries a state
	Causes    []protocol.Cause
	StartedAt protocol.Time // zero until it began
	EndedAt   protocol.Time // zero until it ended
}

func (h Header) sum(bench string) int64 {
	simulated := ""
	if h.Simulated != nil {
		simulated = strconv.Itoa(*h.Simulated)
	}
	return sumOf(string(h.Run), bench, h.Title, h.RecipeText, h.BenchText, h.Version, simulated, h.Key, h.Who, h.QueuedAt.String())
}

// NewRun writes a run's header and its first entry, both or neither. When a run of the same bench
// was asked for with the same key before, that run is returned as existing and nothing is
// written. Like Append it is not interrupted by the end of ctx.
//
// Errors: ErrDifferent when the run's name is taken, ErrBody, ErrFull.
func (b *Book) NewRun(ctx context.Context, h Header, first protocol.Entry) (existing protocol.RunID, err error) {
	where := "run " + string(h.Run)
	if b.insert == nil {
		return "", wrap(where, ErrReadOnly)
	}
	if !protocol.IsToken(string(h.Run)) || h.Run == protocol.BenchRun {
		return "", fmt.Errorf("run name %q: %w; want 1 to 64 letters, digits, \"-\" and \"_\", and not \"-\" alone", h.Run, ErrBody)
	}
	if h.RecipeText == "" || h.BenchText == "" || h.Version == "" {
		return "", fmt.Errorf("%s: %w: recipe text, bench text or program version is empty; want all three", where, ErrBody)
	}
	if first.Run != h.Run || first.Sequence != 1 {
		return "", fmt.Errorf("%s: %w: its first entry is %s; want %s.1", where, ErrBody, first.ID(), h.Run)
	}
	if err := fits(first); err != nil {
		return "", wrap(where, err)
	}
	var head protocol.Head
	if err := json.Unmarshal(first.Body, &head); err != nil {
		return "", fmt.Errorf("%s: %w: %w", where, ErrBody, err)
	}

	ctx = context.WithoutCancel(ctx)
	tx, err := b.writer.BeginTx(ctx, nil)
	if err != nil {
		return "", wrap(where, err)
	}
	defer tx.Rollback()
	key := sql.NullString{String: h.Key, Valid: h.Key != ""}
	err = tx.QueryRowContext(ctx, `SELECT run FROM header WHERE bench = ? AND key = ?`, head.Bench, key).Scan(&existing)
	if err == nil {
		return existing, nil
	}
	if !errors.Is(err, sql.ErrNoRows) {
		return "", wrap(where, err)
	}
	var taken bool
	if err := tx.QueryRowContext(ctx, `SELECT EXISTS (SELECT 1 FROM header WHERE run = ?)`, h.Run).Scan(&taken); err != nil {
		return "", wrap(where, err)
	}
	if taken {
		return "", fmt.Errorf("%s: %w; want a name of its own", where, ErrDifferent)
	}
	if _, err := tx.ExecContext(ctx, `INSERT INTO header (run, bench, title, recipe_text, bench_text, version, simulated, key, who, queued_at, sum)
		VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)`, h.Run, head.Bench, h.Title, h.RecipeText, h.BenchText, h.Version, h.Simulated, key, h.Who, h.QueuedAt.String(), h.sum(head.Bench)); err != nil {
		return "", wrap(where, err)
	}
	if _, err := tx.StmtContext(ctx, b.insert).ExecContext(ctx, first.Run, first.Sequence, first.Kind, string(first.Body), sumOf(string(first.Kind), string(first.Body))); err != nil {
		return "", wrap(where, refused(err))
	}
	if err := tx.Commit(); err != nil {
		return "", wrap(where, err)
	}
	b.tell()
	return "", nil
}

// Asked returns the run of a bench that was asked for with a key, empty when there is none.
func (b *Book) Asked(ctx context.Context, bench, key string) (run protocol.RunID, err error) {
	err = b.readers.QueryRowContext(ctx, `SELECT run FROM header WHERE bench = ? AND key = ?`, bench, key).Scan(&run)
	if errors.Is(err, sql.ErrNoRows) {
		return "", nil
	}
	return run, wrap(b.file, err)
}

const selectRun = `SELECT run, title, state, reason, started_at, ended_at, recipe_text, bench_text, version, simulated,
	causes, bench, key, who, queued_at FROM run `

// Runs returns all runs in the order they were asked for.
func (b *Book) Runs(ctx context.Context) ([]RunRow, error) {
	rows, err := b.runs(ctx, selectRun+`ORDER BY number`)
	return rows, wrap(b.file, err)
}

// Unfinished returns the runs that are in no final state, in the order of Queue.
func (b *Book) Unfinished(ctx context.Context) ([]RunRow, error) {
	rows, err := b.runs(ctx, selectRun+`WHERE run IN (`+notEnded+`) ORDER BY number`)
	if err != nil {
		return nil, wrap(b.file, err)
	}
	return rows, b.arrange(ctx, len(rows), func(place map[protocol.RunID]int) {
		slices.SortStableFunc(rows, func(a, b RunRow) int {
			return cmp.Compare(rank(place, a.Run, a.State), rank(place, b.Run, b.State))
		})
	})
}

// Run returns one run, or ErrNoRun.
func (b *Book) Run(ctx context.Context, run protocol.RunID) (RunRow, error) {
	rows, err := b.runs(ctx, selectRun+`WHERE run = ?`, run)
	if err == nil && len(rows) == 0 {
		err = ErrNoRun
	}
	if err != nil {
		return RunRow{}, wrap("run "+string(run), err)
	}
	return rows[0], nil
}

func (b *Book) runs(ctx context.Context, query string, args ...any) ([]RunRow, error) {
	rows, err := b.readers.QueryContext(ctx, query, args...)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var found []RunRow
	for rows.Next() {
		var r RunRow
		var state, reason, started, ended, queued, causes, key sql.NullString
		if err := rows.Scan(&r.Run, &r.Title, &state, &reason, &started, &ended, &r.RecipeText, &r.BenchText, &r.Version, &r.Simulated,
			&causes, &r.Bench, &key, &r.Who, &queued); err != nil {
			return nil, err
		}
		r.State, r.Reason, r.Key = protocol.State(state.String), reason.String, key.String
		if causes.Valid {
			if err := json.Unmarshal([]byte(causes.String), &r.Causes); err != nil {
				return nil, fmt.Errorf("run %s: causes: %w", r.Run, err)
			}
		}
		for _, t := range []struct {
			text sql.NullString
			to   *protocol.Time
		}{{started, &r.StartedAt}, {ended, &r.EndedAt}, {queued, &r.QueuedAt}} {
			if *t.to, err = instantOf(t.text); err != nil {
				return nil, fmt.Errorf("run %s: %w", r.Run, err)
			}
		}
		found = append(found, r)
	}
	return found, rows.Err()
}

// instantOf reads a time as the views give it; null is the zero time.
func instantOf(text sql.NullString) (t protocol.Time, err error) {
	if text.Valid {
		err = t.UnmarshalJSON([]byte(`"` + text.String + `"`))
	}
	return t, err
}
