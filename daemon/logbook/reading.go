package logbook

import (
	"context"
	"encoding/json"
	"iter"

	"gemel/protocol"
)

// Reading is a reading as it was appended, with what was found out about it later.
type Reading struct {
	protocol.Reading
	Doubtful bool
	Doubt    string // why, in the order it was found, joined by "; "
}

// readingsPage is small so that no read transaction stays open long: as long as one is, SQLite
// cannot reuse its write-ahead log.
const readingsPage = 256

// Readings yields the readings of a run in order, accepted or not, and ends after the first error.
// It shows the run as it was when the loop began: entries that come later are not seen, and neither
// are doubts that come later. A loop may be slow: nothing is held between two readings.
func (b *Book) Readings(ctx context.Context, run protocol.RunID) iter.Seq2[Reading, error] {
	return func(yield func(Reading, error) bool) {
		last, err := b.lastOf(ctx, run)
		if err != nil {
			yield(Reading{}, err)
			return
		}
		for r, err := range b.readingsUpTo(ctx, run, last) {
			if !yield(r, err) {
				return
			}
		}
	}
}

// lastOf is Last, and ErrNoRun where a run has no entry, which no run is without.
func (b *Book) lastOf(ctx context.Context, run protocol.RunID) (int64, error) {
	last, err := b.Last(ctx, run)
	if err == nil && last == 0 && run != protocol.BenchRun {
		err = wrap("run "+string(run), ErrNoRun)
	}
	return last, err
}

func (b *Book) readingsUpTo(ctx context.Context, run protocol.RunID, last int64) iter.Seq2[Reading, error] {
	return func(yield func(Reading, error) bool) {
		for after := int64(0); ; {
			page, err := b.readings(ctx, run, after, last)
			if err != nil {
				yield(Reading{}, wrap("run "+string(run), err))
				return
			}
			for _, r := range page {
				if !yield(r, nil) {
					return
				}
			}
			if len(page) < readingsPage {
				return
			}
			after = page[len(page)-1].Sequence
		}
	}
}

func (b *Book) readings(ctx context.Context, run protocol.RunID, after, last int64) ([]Reading, error) {
	// The same words as in the view reading, with the later doubts left out.
	rows, err := b.readers.QueryContext(ctx, `SELECT j.body, (SELECT group_concat(o.why, '; ') FROM (
			SELECT d.why FROM doubt d WHERE d.run = j.run
			   AND d.from_sequence <= j.sequence AND d.to_sequence >= j.sequence AND d.sequence <= ?3
			 ORDER BY d.sequence) o)
		  FROM journal j
		 WHERE j.run = ?1 AND j.kind = 'reading' AND j.sequence > ?2 AND j.sequence <= ?3
		 ORDER BY j.sequence LIMIT ?4`, run, after, last, readingsPage)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var page []Reading
	for rows.Next() {
		var body []byte
		var doubt *string
		if err := rows.Scan(&body, &doubt); err != nil {
			return nil, err
		}
		var r Reading
		if err := json.Unmarshal(body, &r.Reading); err != nil {
			return nil, err
		}
		if doubt != nil {
			r.Doubtful, r.Doubt = true, *doubt
		}
		page = append(page, r)
	}
	return page, rows.Err()
}
