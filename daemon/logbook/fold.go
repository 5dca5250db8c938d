package logbook

import (
	"context"
	"database/sql"
	"os"
)

// SQLite folds the write-ahead log into the file every thousand pages, but begins the log anew only
// when no reader stands in it. Readers that come one after another without a pause would let it
// grow for ever; so from mostLog on the log is looked at every foldEvery appends, and readers are
// waited for, foldWait at most. While they wait for each other new ones read from the file itself.
const (
	mostLog   = 16 << 20
	foldEvery = 64
	foldWait  = "_pragma=busy_timeout(100)" // ms
)

// openFolder opens a connection of its own: on the writer's, the short patience would be the
// appends', too.
func openFolder(file string) (*sql.DB, error) {
	db, err := open(file, foldWait)
	if err != nil {
		return nil, err
	}
	db.SetMaxOpenConns(1)
	return db, nil
}

// boundLog is called after each append. What fails here is tried again later, and costs room only.
func (b *Book) boundLog() {
	if b.appends.Add(1)%foldEvery != 0 {
		return
	}
	if info, err := os.Stat(b.file + "-wal"); err != nil || info.Size() < mostLog {
		return
	}
	_, _ = b.folder.ExecContext(context.Background(), `PRAGMA wal_checkpoint(TRUNCATE)`)
}
