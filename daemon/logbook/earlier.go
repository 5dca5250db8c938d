package logbook

import (
	"context"
	"database/sql"
	"encoding/json"
	"fmt"

	"gemel/protocol"
	"gemel/scan"
)

// Titled is a run by its title alone: what has to be known of it before its results are read.
type Titled struct {
	Run     protocol.RunID
	State   protocol.State
	EndedAt protocol.Time // zero until it ended
}

// RunsTitled returns the runs of a bench with a title, the one that ended last first; those that
// have not ended come behind, the one that was asked for last first.
func (b *Book) RunsTitled(ctx context.Context, bench, title string) ([]Titled, error) {
	rows, err := b.readers.QueryContext(ctx, `SELECT run, state, ended_at FROM run WHERE bench = ? AND title = ?
		ORDER BY ended_at IS NULL, ended_at DESC, number DESC`, bench, title)
	if err != nil {
		return nil, wrap(b.file, err)
	}
	defer rows.Close()
	var found []Titled
	for rows.Next() {
		var t Titled
		var state, ended sql.NullString
		if err := rows.Scan(&t.Run, &state, &ended); err != nil {
			return nil, wrap(b.file, err)
		}
		t.State = protocol.State(state.String)
		if t.EndedAt, err = instantOf(ended); err != nil {
			return nil, fmt.Errorf("run %s: %w", t.Run, err)
		}
		found = append(found, t)
	}
	return found, wrap(b.file, rows.Err())
}

// Results returns the results of a run, the last first.
func (b *Book) Results(ctx context.Context, run protocol.RunID) ([]protocol.Entry, error) {
	numbered, err := b.entries(ctx, `SELECT id, run, sequence, kind, body FROM journal
		WHERE run = ? AND kind = 'result' ORDER BY sequence DESC`, run)
	if err != nil {
		return nil, wrap("run "+string(run), err)
	}
	entries := make([]protocol.Entry, len(numbered))
	for i, n := range numbered {
		entries[i] = n.Entry
	}
	return entries, nil
}

// Taken returns the values that a run's points take from earlier results, as its journal has them;
// decided says whether its points are written at all. A run goes on with these for ever, whatever
// was measured since.
func (b *Book) Taken(ctx context.Context, run protocol.RunID) (values []protocol.EarlierValue, decided bool, err error) {
	where := "run " + string(run)
	numbered, err := b.entries(ctx, `SELECT id, run, sequence, kind, body FROM journal
		WHERE run = ? AND kind = 'point' ORDER BY sequence LIMIT 1`, run)
	if err != nil || len(numbered) == 0 {
		return nil, false, wrap(where, err)
	}
	var first protocol.Points
	if err := json.Unmarshal(numbered[0].Body, &first); err != nil {
		return nil, false, fmt.Errorf("%s: entry %d: %w", where, numbered[0].Sequence, err)
	}
	return first.Earlier, true, nil
}

// Again finds among the values that a run has taken the one that is asked for, so that its recipe
// comes to the same plan again.
func Again(taken []protocol.EarlierValue, ask scan.EarlierAsk) (scan.EarlierSource, error) {
	for _, v := range taken {
		if v.Kind != string(ask.Kind) || v.Axis != string(ask.Axis) || v.Setting != string(ask.Setting) || v.From != ask.From {
			continue
		}
		s := scan.EarlierSource{Run: string(v.Run), Sequence: v.Sequence, U: v.U}
		if v.Angle != nil {
			s.Angle = *v.Angle
		}
		if v.Value != nil {
			s.Value = *v.Value
		}
		return s, nil
	}
	return scan.EarlierSource{}, fmt.Errorf("the run took no %s of %s%s from %q; want the recipe that it began with", ask.Kind, ask.Axis, ask.Setting, ask.From)
}
