//go:build unix

package main

import (
	"bytes"
	"context"
	"errors"
	"path/filepath"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/protocol"
)

// refusing is a logbook that takes no readings.
type refusing struct{ keeper.Book }

func (b refusing) Append(ctx context.Context, e protocol.Entry) error {
	if e.Kind == protocol.ReadingEntry {
		return logbook.ErrBody
	}
	return b.Book.Append(ctx, e)
}

// What ends a run by the logbook's word must reach whoever sits at the keyboard.
func TestARunThatTheLogbookRefusesEndsWithTheReason(t *testing.T) {
	dir := t.TempDir()
	s, err := open(t.Context(), benchFlags{Bench: quick(t, dir), Data: filepath.Join(dir, "data")}, "", true, zerolog.Nop())
	if err != nil {
		t.Fatal(err)
	}
	defer s.close()
	s.keeper.Book = refusing{s.book}
	reply, err := s.keeper.Enqueue(t.Context(), protocol.StartRequest{Recipe: soundRecipe, Key: "k", Who: "ann"})
	if err != nil {
		t.Fatal(err)
	}
	var out, errOut bytes.Buffer
	_, err = (&runCommand{}).execute(t.Context(), &console{out: &out, err: &errOut}, s, reply.Run)
	if !errors.Is(err, logbook.ErrBody) || !strings.HasPrefix(err.Error(), "keeper: ") {
		t.Errorf("the run ended with %v; want what the logbook said", err)
	}
}
