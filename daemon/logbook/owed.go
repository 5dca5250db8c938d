package logbook

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"gemel/protocol"
)

// A full disk must not make a stop forgotten that was answered: a file beside the logbook, whose
// blocks are there from the start, keeps the names of the runs until the journal has taken it. On
// a file system that writes every change to new blocks even that may fail; then the stop is only
// in memory.
const (
	owedName = "stop-owed"
	owedSize = 4096
)

// OwedStop is a stop that was carried out and could not be written into the journal.
type OwedStop struct {
	Run protocol.RunID `json:"run"`
	Who string         `json:"who"`
}

// reserve makes the file when it is not there, so that its blocks are taken while there is room.
func reserve(dir string) error {
	path := filepath.Join(dir, owedName)
	info, err := os.Stat(path)
	if err == nil && info.Size() == owedSize {
		return nil
	}
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return err
	}
	return overwrite(path, nil)
}

// Owe keeps stops until the journal takes them; it replaces what was kept before. It returns when
// they are on the disk.
func (b *Book) Owe(stops []OwedStop) error {
	if b.lock == nil {
		return wrap(b.file, ErrReadOnly)
	}
	text, err := json.Marshal(stops)
	if err != nil {
		return err
	}
	if len(stops) == 0 {
		text = nil
	}
	if len(text) >= owedSize {
		return fmt.Errorf("%s: %d stops of %d bytes; want less than %d", owedName, len(stops), len(text), owedSize)
	}
	return overwrite(filepath.Join(filepath.Dir(b.file), owedName), text)
}

// Owed returns the stops that are kept.
func (b *Book) Owed() ([]OwedStop, error) {
	text, err := os.ReadFile(filepath.Join(filepath.Dir(b.file), owedName))
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	if text = bytes.TrimSpace(text); len(text) == 0 {
		return nil, nil
	}
	var stops []OwedStop
	if err := json.Unmarshal(text, &stops); err != nil {
		return nil, fmt.Errorf("%s: %w", owedName, err)
	}
	return stops, nil
}

// overwrite writes in place: no truncation and no new file, which could find no room.
func overwrite(path string, text []byte) error {
	f, err := os.OpenFile(path, os.O_RDWR|os.O_CREATE, 0o644)
	if err != nil {
		return err
	}
	page := bytes.Repeat([]byte(" "), owedSize-1)
	copy(page, text)
	_, err = f.WriteAt(append(page, '\n'), 0)
	return errors.Join(err, f.Sync(), f.Close())
}
