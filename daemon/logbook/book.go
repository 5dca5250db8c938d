// Package logbook keeps what happened on a bench, in one SQLite file, and is the only package
// that knows it is SQLite.
//
// It promises: an entry that Append accepted is on the disk and stays there, byte for byte, in its
// place; sequences have no gaps; asking twice writes once; a full disk is said as such and loses
// nothing that was accepted; a damaged file is found, not written to, and Rescue takes out of it
// what can be read. What people read are views over the entries' own bodies (schema.sql describes
// them), so there is one truth.
//
// It refuses: changing or removing an entry, an entry out of its turn or with a body that is not
// its own, a run it does not know, a second writer on the same folder, a file that is damaged, or
// that another program or a newer gemel made. It does not judge readings, and it publishes nothing.
package logbook

import (
	"context"
	"database/sql"
	_ "embed"
	"errors"
	"fmt"
	"io/fs"
	"net/url"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"time"

	"github.com/gofrs/flock"
	"modernc.org/sqlite"
	sqlite3 "modernc.org/sqlite/lib"
)

//go:embed schema.sql
var schema string

const (
	applicationID = 0x67656D6C // "geml"
	schemaVersion = 2

	fileName = "logbook.db"
	lockName = "lock"
)

// What a Book answers when it does not do what it was asked.
var (
	ErrLocked    = errors.New("in use by another process")
	ErrForeign   = errors.New("not a logbook that this program can use")
	ErrDamaged   = errors.New("the logbook is damaged")
	ErrReadOnly  = errors.New("opened for reading only")
	ErrNoRun     = errors.New("no such run")
	ErrGap       = errors.New("sequence out of turn")
	ErrDifferent = errors.New("another entry stands there already")
	ErrBody      = errors.New("body does not fit its entry")

	// ErrFull: the disk has no room, or refused to take a write. Nothing was written; the same
	// call works once there is room.
	ErrFull = errors.New("the disk takes no more")
)

// Book is an open logbook. All methods may be called from any goroutine.
type Book struct {
	file    string
	lock    *flock.Flock // nil when read-only, and when a Folder has it
	writer  *sql.DB      // one connection; nil when read-only
	insert  *sql.Stmt    // on writer
	readers *sql.DB
	folder  *sql.DB // folds the write-ahead log into the file; nil when read-only
	appends atomic.Int64

	mu       sync.Mutex
	onAppend []func()
}

// Folder is a data folder that is held against all other daemons.
type Folder struct {
	dir  string
	lock *flock.Flock
}

// Hold makes a data folder when it is not there, and takes its lock: ErrLocked means that another
// daemon works there.
func Hold(dir string) (*Folder, error) {
	dir, err := filepath.Abs(dir)
	if err != nil {
		return nil, fmt.Errorf("data folder: %w", err)
	}
	if err := os.MkdirAll(dir, 0o755); err != nil {
		return nil, fmt.Errorf("data folder: %w", err)
	}
	// SQLite's own locks let two daemons take turns; one bench must have one.
	lock, err := takeLock(dir)
	if err != nil {
		return nil, err
	}
	return &Folder{dir, lock}, nil
}

// Close lets go of the folder; its logbook must be closed before.
func (f *Folder) Close() error { return f.lock.Close() }

// Open opens the logbook of a data folder, and makes both when they are not there. It holds the
// folder's lock until Close: ErrLocked means that another daemon works there.
func Open(dir string) (*Book, error) {
	f, err := Hold(dir)
	if err != nil {
		return nil, err
	}
	b, err := f.Open()
	if err != nil {
		_ = f.Close()
		return nil, err
	}
	b.lock = f.lock
	return b, nil
}

// Open opens the logbook of the folder, and makes it when it is not there.
func (f *Folder) Open() (_ *Book, err error) {
	b := &Book{file: filepath.Join(f.dir, fileName)}
	defer func() {
		if err != nil {
			b.Close()
		}
	}()
	if err := useDisk(); err != nil {
		return nil, err
	}
	version, err := inspect(b.file)
	if err != nil {
		return nil, err
	}
	if version != 0 {
		if err := lookOver(b.file); err != nil {
			return nil, err
		}
	}
	if b.writer, err = openWriter(b.file); err != nil {
		return nil, err
	}
	if err := bringAlong(b.writer, version); err != nil {
		return nil, wrap(b.file, err)
	}
	if b.insert, err = b.writer.Prepare(insertEntry); err != nil {
		return nil, wrap(b.file, err)
	}
	if b.readers, err = openReaders(b.file); err != nil {
		return nil, err
	}
	if b.folder, err = openFolder(b.file); err != nil {
		return nil, err
	}
	_ = reserve(f.dir) // without it a stop on a full disk is only in memory; that is no reason not to begin
	return b, nil
}

// OpenForNotes opens the logbook of a data folder for AddNote alone, beside a daemon that may write
// it: a note has to be possible at any hour. It takes no lock, makes nothing, and everything else
// that writes answers ErrReadOnly.
func OpenForNotes(dir string) (*Book, error) {
	b, err := OpenReadOnly(filepath.Join(dir, fileName))
	if err != nil {
		return nil, err
	}
	if b.writer, err = openWriter(b.file); err != nil {
		b.Close()
		return nil, err
	}
	return b, nil
}

func openWriter(file string) (*sql.DB, error) {
	db, err := open(file, "_txlock=immediate", "_pragma=journal_mode(WAL)", "_pragma=synchronous(FULL)",
		"_pragma=journal_size_limit(67108864)")
	if err != nil {
		return nil, err
	}
	db.SetMaxOpenConns(1)
	return db, nil
}

// OpenReadOnly opens a logbook file for reading, beside a daemon that writes it or long after. It
// takes no lock, and every method that writes answers ErrReadOnly. The file's folder must be
// writable for SQLite's shared-memory file, unless the file is a Snapshot.
func OpenReadOnly(file string) (*Book, error) {
	file, err := filepath.Abs(file)
	if err != nil {
		return nil, fmt.Errorf("logbook: %w", err)
	}
	if err := useDisk(); err != nil {
		return nil, err
	}
	version, err := inspect(file)
	if err != nil {
		return nil, err
	}
	if version == 0 {
		return nil, fmt.Errorf("%s: there is nothing in it, or no such file: %w", file, ErrForeign)
	}
	readers, err := openReaders(file)
	if err != nil {
		return nil, err
	}
	return &Book{file: file, readers: readers}, nil
}

// Close lets go of file and folder. Nothing may be appended any more; everything appended is safe
// with or without it.
func (b *Book) Close() error {
	var errs []error
	if b.readers != nil {
		errs = append(errs, b.readers.Close())
	}
	if b.insert != nil {
		errs = append(errs, b.insert.Close())
	}
	if b.folder != nil {
		errs = append(errs, b.folder.Close())
	}
	if b.writer != nil { // last, so that SQLite folds the write-ahead log into the file
		errs = append(errs, b.writer.Close())
	}
	if b.lock != nil {
		errs = append(errs, b.lock.Close())
	}
	return errors.Join(errs...)
}

// OnAppend has f called after every commit to the journal, by whoever appended and before Append
// returns: f must only set a flag or fill a channel's one place, and never wait. It is told that
// something is new, not what; After says that.
func (b *Book) OnAppend(f func()) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.onAppend = append(b.onAppend, f)
}

func (b *Book) tell() {
	b.mu.Lock()
	defer b.mu.Unlock()
	for _, f := range b.onAppend {
		f()
	}
}

// SetMaxPages keeps the file from growing beyond so many pages of 4096 bytes, or beyond its present
// size if that is more; 0 takes the limit away. Tests fill the disk with it.
func (b *Book) SetMaxPages(ctx context.Context, pages int64) error {
	if b.writer == nil {
		return wrap(b.file, ErrReadOnly)
	}
	if pages == 0 {
		pages = 4294967294 // SQLite's own greatest
	}
	_, err := b.writer.ExecContext(ctx, "PRAGMA max_page_count = "+strconv.FormatInt(pages, 10))
	return wrap(b.file, err)
}

func takeLock(dir string) (*flock.Flock, error) {
	path := filepath.Join(dir, lockName)
	lock := flock.New(path, flock.SetFlag(os.O_CREATE|os.O_RDWR), flock.SetPermissions(0o644))
	got, err := lock.TryLock()
	if err != nil {
		return nil, fmt.Errorf("data folder %s: its lock: %w", dir, err)
	}
	if !got {
		by := ""
		if text, err := os.ReadFile(path); err == nil {
			if pid, err := strconv.Atoi(strings.TrimSpace(string(text))); err == nil {
				by = fmt.Sprintf(" (process %d)", pid)
			}
		}
		return nil, fmt.Errorf("data folder %s: %w%s; want a folder of its own for each daemon", dir, ErrLocked, by)
	}
	// The number is a courtesy to whoever is refused; the lock holds without it.
	_ = os.WriteFile(path, []byte(strconv.Itoa(os.Getpid())+"\n"), 0o644)
	return lock, nil
}

// useDisk sets what SQLite can only be told for the whole process, and before the first file: locks
// that another open and close of the file elsewhere in the process does not take away, and a
// cheaper flush that is as safe. Telling it again changes nothing.
func useDisk() error {
	if _, err := sqlite.OFDLocking(true); err != nil && !errors.Is(err, sqlite.ErrOFDLockingUnavailable) {
		return fmt.Errorf("logbook: %w", err)
	}
	if _, err := sqlite.Fdatasync(true); err != nil && !errors.Is(err, sqlite.ErrFdatasyncUnavailable) {
		return fmt.Errorf("logbook: %w", err)
	}
	return nil
}

// inspect looks whether the file is ours before anything about it is changed, and returns its
// schema. A file that is not there, or in which a first start came to nothing, has schema 0.
func inspect(file string) (version int, err error) {
	info, err := os.Stat(file)
	if errors.Is(err, fs.ErrNotExist) || err == nil && info.Size() == 0 {
		return 0, nil
	}
	if err != nil {
		return 0, fmt.Errorf("logbook: %w", err)
	}
	db, err := open(file, "mode=ro")
	if err != nil {
		return 0, orDamaged(file, err)
	}
	defer db.Close()
	var application, objects int64
	err = db.QueryRow(`SELECT (SELECT application_id FROM pragma_application_id), (SELECT user_version FROM pragma_user_version),
		(SELECT count(*) FROM sqlite_schema)`).Scan(&application, &version, &objects)
	switch {
	case isCode(err, sqlite3.SQLITE_NOTADB):
		return 0, orDamaged(file, notADatabase(file))
	case err != nil:
		return 0, wrap(file, err)
	case application == 0 && version == 0 && objects == 0:
		return 0, nil
	case application != applicationID:
		return 0, orDamaged(file, fmt.Errorf("%s: made by another program (application id %#x): %w; want a file that gemel made, or none", file, application, ErrForeign))
	case version > schemaVersion:
		return 0, fmt.Errorf("%s: made by a newer gemel (schema %d): %w; want schema %d, or a newer program", file, version, ErrForeign, schemaVersion)
	case version < 1:
		return 0, orDamaged(file, fmt.Errorf("%s: schema %d: %w; want schema 1 to %d", file, version, ErrForeign, schemaVersion))
	}
	return version, nil
}

// orDamaged tells a damaged logbook from a file of somebody else's: in ours are entries.
func orDamaged(file string, err error) error {
	if errors.Is(err, ErrForeign) && holdsEntries(file) {
		return fmt.Errorf("%s: %w: its first page is not what it was, and there are entries in it", file, ErrDamaged)
	}
	return err
}

// lookTime bounds the look at a file before it is written to. A logbook of some ten thousand
// readings is looked at whole in it; Verify has no such bound.
const lookTime = 10 * time.Second

// lookOver finds damage before anything is written. What it has not found within lookTime it does
// not find.
func lookOver(file string) error {
	db, err := open(file, "mode=ro", "_pragma=query_only(1)")
	if err != nil {
		return err
	}
	defer db.Close()
	ctx, cancel := context.WithTimeout(context.Background(), lookTime)
	defer cancel()
	var found string
	err = db.QueryRowContext(ctx, `PRAGMA quick_check(1)`).Scan(&found)
	switch {
	case ctx.Err() != nil:
		return nil
	case err != nil:
		return wrap(file, err)
	case found != "ok":
		return fmt.Errorf("%s: %w: %s", file, ErrDamaged, strings.ReplaceAll(found, "\n", "; "))
	}
	return nil
}

// bringAlong makes a file of an earlier schema one of the present; schema 0 is an empty file. It
// does all or nothing: a power cut in the middle leaves what was there.
func bringAlong(db *sql.DB, version int) error {
	if version == schemaVersion {
		return nil
	}
	tx, err := db.Begin()
	if err != nil {
		return err
	}
	defer tx.Rollback()
	steps := schema + fmt.Sprintf("; PRAGMA application_id = %d", applicationID)
	if version == 1 {
		steps = `ALTER TABLE header ADD COLUMN sum INTEGER; ALTER TABLE journal ADD COLUMN sum INTEGER`
	}
	if _, err := tx.Exec(steps); err != nil {
		return err
	}
	if _, err := tx.Exec(fmt.Sprintf("PRAGMA user_version = %d", schemaVersion)); err != nil {
		return err
	}
	return tx.Commit()
}

func openReaders(file string) (*sql.DB, error) {
	db, err := open(file, "mode=ro", "_pragma=query_only(1)")
	if err != nil {
		return nil, err
	}
	db.SetMaxOpenConns(3)
	db.SetMaxIdleConns(3)
	return db, nil
}

// busy bounds every wait for another connection's lock.
const busy = "_pragma=busy_timeout(5000)"

func open(file string, options ...string) (*sql.DB, error) {
	path := filepath.ToSlash(file)
	if !strings.HasPrefix(path, "/") { // a drive letter
		path = "/" + path
	}
	if !slices.ContainsFunc(options, func(o string) bool { return strings.HasPrefix(o, "_pragma=busy_timeout") }) {
		options = append(options, busy) // of two the driver would take the first
	}
	query := strings.Join(append(options, "_pragma=trusted_schema(0)"), "&")
	name := url.URL{Scheme: "file", Path: path, RawQuery: query}
	db, err := sql.Open("sqlite", name.String())
	if err != nil {
		return nil, wrap(file, err)
	}
	if err := db.Ping(); err != nil {
		db.Close()
		if isCode(err, sqlite3.SQLITE_NOTADB) {
			return nil, notADatabase(file)
		}
		return nil, wrap(file, err)
	}
	return db, nil
}

func notADatabase(file string) error {
	return fmt.Errorf("%s: no SQLite database: %w; want a file that gemel made, or none", file, ErrForeign)
}

func isCode(err error, primary int) bool {
	e, ok := errors.AsType[*sqlite.Error](err)
	return ok && e.Code()&0xff == primary
}

// wrap says where an error happened, and calls a full disk and a damaged file by their names. SQLite answers IOERR, not
// FULL, for a quota, a file-size limit or a failed flush; to the caller these are the same: keep
// what you have and ask again.
func wrap(where string, err error) error {
	if err == nil {
		return nil
	}
	if isCode(err, sqlite3.SQLITE_FULL) || isCode(err, sqlite3.SQLITE_IOERR) {
		return fmt.Errorf("%s: %w: %w", where, ErrFull, err)
	}
	if isCode(err, sqlite3.SQLITE_CORRUPT) {
		return fmt.Errorf("%s: %w: %w", where, ErrDamaged, err)
	}
	return fmt.Errorf("%s: %w", where, err)
}
