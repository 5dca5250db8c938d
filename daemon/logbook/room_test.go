package logbook

import (
	"errors"
	"strings"
	"testing"

	"gemel/protocol"
)

func TestRoomIsWantedTwiceOnceItWasTooLittle(t *testing.T) {
	var free int64
	var silent error
	ask := room("/data", 64<<20, func(string) (int64, error) { return free, silent })
	for _, c := range []struct {
		free int64
		fits bool
	}{
		{64 << 20, true}, {64<<20 - 1, false}, {64 << 20, false}, {128<<20 - 1, false}, {128 << 20, true}, {70 << 20, true}, {0, false},
	} {
		free = c.free
		if err := ask(); (err == nil) != c.fits {
			t.Errorf("%d bytes are free: %v; want room: %t", c.free, err, c.fits)
		}
	}
	if err := ask(); err == nil || !strings.Contains(err.Error(), "0 MB are left on the disk of /data; want 134 MB") {
		t.Errorf("said %v", err)
	}
	if silent = errors.New("not told"); ask() != nil {
		t.Error("a disk that does not tell is taken to have no room")
	}
}

func TestTheDiskTellsItsRoom(t *testing.T) {
	b := openBook(t, t.TempDir())
	if err := b.Room(1)(); err != nil {
		t.Errorf("not a byte: %v", err)
	}
	if err := b.Room(1 << 60)(); err == nil {
		t.Error("an exabyte is free here")
	}
}

func TestABodyHasABound(t *testing.T) {
	b := openBook(t, t.TempDir())
	mustNewRun(t, b, header("r1", ""))
	fill := func(size int) error {
		e := event("r1", 2, "trouble", "running", "")
		e = event("r1", 2, "trouble", "running", strings.Repeat("x", size-len(e.Body)))
		return b.Append(t.Context(), e)
	}
	if err := fill(protocol.MostBody + 1); !errors.Is(err, ErrBody) {
		t.Errorf("one byte more: %v; want %v", err, ErrBody)
	}
	if err := fill(protocol.MostBody); err != nil {
		t.Error(err)
	}
}
