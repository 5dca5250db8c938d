package logbook

import (
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"gemel/protocol"
)

func TestStopsAreKeptInAFileThatDoesNotGrow(t *testing.T) {
	dir := t.TempDir()
	b := openBook(t, dir)
	file := filepath.Join(dir, "stop-owed")
	size := func() int64 {
		info, err := os.Stat(file)
		if err != nil {
			t.Fatal(err)
		}
		return info.Size()
	}
	if n := size(); n != 4096 {
		t.Errorf("the file has %d bytes at the start; want a page", n)
	}
	if owed, err := b.Owed(); err != nil || len(owed) != 0 {
		t.Errorf("at the start %v, %v are owed", owed, err)
	}
	want := []OwedStop{{Run: "r1", Who: "ann"}, {Run: "r2", Who: "\"bob\"\n"}}
	for _, stops := range [][]OwedStop{want, want[1:], nil, want} {
		if err := b.Owe(stops); err != nil {
			t.Fatal(err)
		}
		if owed, err := b.Owed(); err != nil || !slices.Equal(owed, stops) {
			t.Errorf("owed %v, %v; want %v", owed, err, stops)
		}
	}
	var many []OwedStop
	for i := range 100 {
		many = append(many, OwedStop{Run: protocol.RunID(fmt.Sprint("r", i)), Who: strings.Repeat("w", 80)})
	}
	if err := b.Owe(many); err == nil {
		t.Error("more than a page was kept")
	}
	if owed, err := b.Owed(); err != nil || !slices.Equal(owed, want) || size() != 4096 {
		t.Errorf("after that %v, %v are owed in %d bytes; want what was kept before", owed, err, size())
	}
}
