package logbook

import (
	"cmp"
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"slices"

	"gemel/protocol"
)

// Waiting is a run in no final state, as a list of runs shows it.
type Waiting struct {
	Run      protocol.RunID
	Title    string
	Who      string
	QueuedAt protocol.Time
	State    protocol.State
	Readings *int // planned when the run was asked for; nil: that is not written
}

// Queue returns the runs that are in no final state, in the order in which they are to be executed.
// First come those that began already, for what was interrupted goes on first. The others stand as
// the last change of the queue left them (see QueueDetail), and those that were asked for later
// behind them.
func (b *Book) Queue(ctx context.Context) ([]Waiting, error) {
	rows, err := b.readers.QueryContext(ctx, `SELECT r.run, r.title, r.who, r.queued_at, r.state,
			(SELECT json_extract(f.body, '$.detail.readings_planned') FROM journal f WHERE f.run = r.run AND f.sequence = 1)
		  FROM run r WHERE r.run IN (`+notEnded+`) ORDER BY r.number`)
	if err != nil {
		return nil, wrap(b.file, err)
	}
	defer rows.Close()
	var found []Waiting
	for rows.Next() {
		var w Waiting
		var state, queued sql.NullString
		if err := rows.Scan(&w.Run, &w.Title, &w.Who, &queued, &state, &w.Readings); err != nil {
			return nil, wrap(b.file, err)
		}
		w.State = protocol.State(state.String)
		if w.QueuedAt, err = instantOf(queued); err != nil {
			return nil, fmt.Errorf("run %s: %w", w.Run, err)
		}
		found = append(found, w)
	}
	if err := rows.Err(); err != nil {
		return nil, wrap(b.file, err)
	}
	return found, b.arrange(ctx, len(found), func(place map[protocol.RunID]int) {
		slices.SortStableFunc(found, func(a, b Waiting) int {
			return cmp.Compare(rank(place, a.Run, a.State), rank(place, b.Run, b.State))
		})
	})
}

// notEnded finds the runs in no final state by an index alone, for it is asked once a second: only
// the event that ends a run brings it there.
const notEnded = `SELECT h.run FROM header h WHERE NOT EXISTS (SELECT 1 FROM journal e
	WHERE e.run = h.run AND e.kind = 'event' AND json_extract(e.body, '$.kind') = 'ended')`

// QueueDetail is the key in the detail of a bench event of kind operator under which a change of
// the queue is written: the names of the runs that wait, in their new order. The last such event
// counts.
const QueueDetail = "queue"

// arrange has runs sorted that were read in the order they were asked for.
func (b *Book) arrange(ctx context.Context, n int, sort func(place map[protocol.RunID]int)) error {
	if n < 2 {
		return nil
	}
	place, err := b.places(ctx)
	if err == nil {
		sort(place)
	}
	return wrap(b.file, err)
}

// places tells where the last change of the queue put each run, from 1.
func (b *Book) places(ctx context.Context) (map[protocol.RunID]int, error) {
	var list []byte
	err := b.readers.QueryRowContext(ctx, `SELECT json_extract(body, '$.detail.queue') FROM journal
		WHERE run = '-' AND kind = 'event' AND json_extract(body, '$.kind') = 'operator' AND json_type(body, '$.detail.queue') = 'array'
		ORDER BY sequence DESC LIMIT 1`).Scan(&list)
	if errors.Is(err, sql.ErrNoRows) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	var runs []protocol.RunID
	if err := json.Unmarshal(list, &runs); err != nil {
		return nil, fmt.Errorf("order of the queue: %w", err)
	}
	place := map[protocol.RunID]int{}
	for i, run := range runs {
		place[run] = i + 1
	}
	return place, nil
}

// rank sorts: what began, then what has a place, then the rest.
func rank(place map[protocol.RunID]int, run protocol.RunID, state protocol.State) int {
	if state != protocol.Queued && state != "" {
		return 0
	}
	if p := place[run]; p > 0 {
		return p
	}
	return len(place) + 1
}
