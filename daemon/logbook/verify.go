package logbook

import (
	"context"
	"fmt"
)

// Verify reads the whole file and returns what is wrong with it, one sentence each; nothing when
// it is well. On a large file it takes seconds.
func (b *Book) Verify(ctx context.Context) []string {
	var wrong []string
	for _, check := range checks {
		rows, err := b.readers.QueryContext(ctx, check.query)
		if err != nil {
			wrong = append(wrong, fmt.Sprintf("%s: cannot be checked: %v", check.what, err))
			continue
		}
		for rows.Next() {
			var found string
			if err := rows.Scan(&found); err != nil {
				found = err.Error()
			}
			wrong = append(wrong, check.what+": "+found)
		}
		if err := rows.Err(); err != nil {
			wrong = append(wrong, fmt.Sprintf("%s: cannot be checked: %v", check.what, err))
		}
		rows.Close()
	}
	return wrong
}

// Each query returns one text a fault.
var checks = []struct{ what, query string }{
	{"database", `SELECT integrity_check FROM pragma_integrity_check WHERE integrity_check <> 'ok'`},
	{"ids of the journal", `SELECT format('%d entries, ids %d to %d; want 1 to the number of entries', count(*), min(id), max(id))
		FROM journal HAVING count(*) > 0 AND (min(id) <> 1 OR max(id) <> count(*))`},
	{"sequence", `SELECT format('run %s has %d entries, %d to %d; want 1 to their number', run, count(*), min(sequence), max(sequence))
		FROM journal GROUP BY run HAVING min(sequence) <> 1 OR max(sequence) <> count(*)`},
	{"order", `SELECT format('%s.%d was committed before its predecessor', run, sequence)
		FROM (SELECT run, sequence, id, lag(id) OVER (PARTITION BY run ORDER BY sequence) AS before FROM journal) WHERE before > id`},
	{"body", `SELECT format('entry %s.%d is not JSON', run, sequence) FROM journal WHERE NOT json_valid(body)`},
	{"body", `SELECT format('entry %s.%d says that it is %s.%s', run, sequence, json_extract(body, '$.run'), json_extract(body, '$.sequence'))
		FROM journal WHERE json_valid(body) AND (json_extract(body, '$.run') IS NOT run OR json_extract(body, '$.sequence') IS NOT sequence)`},
	{"header", `SELECT format('run %s has entries and no header', run) FROM (SELECT DISTINCT run FROM journal WHERE run <> '-')
		WHERE run NOT IN (SELECT run FROM header)`},
	{"header", `SELECT format('run %s has no entry', run) FROM header WHERE run NOT IN (SELECT run FROM journal)`},
	{"header", `SELECT format('run %s lacks recipe text, bench text or version', run) FROM header
		WHERE recipe_text = '' OR bench_text = '' OR version = ''`},
	{"note", `SELECT format('note %d is on run %s, which is not there', number, run) FROM remark
		WHERE run <> '-' AND run NOT IN (SELECT run FROM header)`},
}
