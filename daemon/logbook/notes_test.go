package logbook

import (
	"errors"
	"testing"
)

func TestANoteIsTakenBesideADaemonThatHoldsTheFolder(t *testing.T) {
	dir := t.TempDir()
	b := openBook(t, dir)
	mustNewRun(t, b, header("r1", "k"))
	beside, err := OpenForNotes(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer beside.Close()
	if err := beside.AddNote(t.Context(), "r1", "ann", "door opened at 01:10"); err != nil {
		t.Fatal(err)
	}
	if err := beside.Append(t.Context(), event("r1", 2, "began", "running", "began")); !errors.Is(err, ErrReadOnly) {
		t.Errorf("Append() = %v; want ErrReadOnly", err)
	}
	if _, err := beside.NewRun(t.Context(), header("r2", "k2"), event("r2", 1, "operator", "queued", "asked")); !errors.Is(err, ErrReadOnly) {
		t.Errorf("NewRun() = %v; want ErrReadOnly", err)
	}
	mustAppend(t, b, event("r1", 2, "began", "running", "began"))
	notes, err := b.Notes(t.Context(), "r1")
	if err != nil || len(notes) != 1 || notes[0].Text != "door opened at 01:10" {
		t.Errorf("Notes() = %v, %v; want the one", notes, err)
	}
}

func TestNotesNeedALogbookThatIsThere(t *testing.T) {
	if _, err := OpenForNotes(t.TempDir()); !errors.Is(err, ErrForeign) {
		t.Errorf("OpenForNotes() of an empty folder = %v; want ErrForeign", err)
	}
}
