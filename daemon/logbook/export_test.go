package logbook

import (
	"bytes"
	"context"
	"encoding/csv"
	"errors"
	"flag"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
)

var update = flag.Bool("update", false, "write what comes out over the golden files")

// A night with one of everything that makes a table awkward: a dark without point, a reading set
// aside for a reason with quotes and a comma in it, a doubt, a title of two lines, a sensor that only
// some readings have.
func exampleNight(t *testing.T, b *Book) {
	h := header("20310203T200000Z-k3", "")
	h.Title, h.Simulated = "arm sweep,\n\"first\"", new(10)
	mustNewRun(t, b, h)
	point, visit := 0, 1
	reading := func(sequence int64, change func(*protocol.Reading)) protocol.Entry {
		hd := head(protocol.ReadingSchema, h.Run, sequence)
		r := protocol.Reading{Head: hd, Kind: protocol.Light, Point: &point, Visit: &visit, Accepted: true, Attempt: 1,
			StartedAt: hd.At, EndedAt: protocol.Time{Time: hd.At.Add(1500 * time.Millisecond)},
			GateSet: protocol.Seconds(1500 * time.Millisecond), Gate: protocol.Seconds(1500*time.Millisecond + 1),
			Angles:   []protocol.Angle{{Axis: "signal_arm", Target: unit.Degrees(2.864), Before: unit.Degrees(2.8641), After: unit.Degrees(-2), Proof: "reported"}},
			Counts:   []protocol.Count{{Channel: "signal", Counts: 18446744073709551615}, {Channel: "pair", Counts: 12}},
			Settings: []protocol.Setting{{Name: "delay", Target: 100, Before: 99.5, After: 100.25, Unit: "ps"}}}
		change(&r)
		return entry(protocol.ReadingEntry, hd, r)
	}
	mustAppend(t, b,
		event(h.Run, 2, protocol.Began, protocol.Running, "began"),
		reading(3, func(r *protocol.Reading) {
			r.Kind, r.Point, r.Visit, r.Angles, r.Settings = protocol.Dark, nil, nil, nil, nil
		}),
		reading(4, func(r *protocol.Reading) { r.Accepted, r.Reason = false, `pump "low", 44.1 mW` }),
		reading(5, func(r *protocol.Reading) {
			r.Attempt = 2
			r.Sensors = []protocol.Sensor{{Sensor: "pump_power", Minimum: 49, Mean: 50.125, Maximum: 51, Samples: 15, Unit: "mW"}}
		}),
		doubt(h.Run, 6, 5, 5, "signal_arm slipped"),
		event(h.Run, 7, protocol.Ended, protocol.Finished, "all points counted"))
}

func TestExportIsATableThatSaysWhatItIs(t *testing.T) {
	b := openBook(t, t.TempDir())
	exampleNight(t, b)
	var out bytes.Buffer
	if err := b.Export(t.Context(), "20310203T200000Z-k3", &out); err != nil {
		t.Fatal(err)
	}
	golden := filepath.Join("testdata", "export.csv")
	if *update {
		if err := os.WriteFile(golden, out.Bytes(), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(golden)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(out.Bytes(), want) {
		t.Errorf("exported\n%s\nwant\n%s", out.Bytes(), want)
	}

	// A reader that knows RFC 4180 and the comments gets the values back.
	table := csv.NewReader(&out)
	table.Comment = '#'
	rows, err := table.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) != 4 {
		t.Fatalf("%d rows; want a line of names and 3 readings", len(rows))
	}
	cell := func(row int, name string) string { return rows[row][slices.Index(rows[0], name)] }
	for _, c := range []struct {
		row        int
		name, want string
	}{
		{1, "kind", "dark"}, {1, "point", ""}, {1, "signal_arm.target_deg", ""}, {1, "delay.target", ""},
		{2, "accepted", "0"}, {2, "reason", `pump "low", 44.1 mW`}, {2, "doubtful", "0"}, {2, "pump_power.mean", ""},
		{3, "doubtful", "1"}, {3, "doubt", "signal_arm slipped"}, {3, "attempt", "2"}, {3, "pump_power.mean", "50.125"},
		{3, "signal_arm.target_deg", "2.864"}, {3, "signal_arm.after_deg", "-2"}, {3, "signal.counts", "18446744073709551615"},
		{3, "gate_s", "1.500000001"}, {3, "ended_at", "2031-02-03T20:00:06.500000000Z"}, {3, "delay.after", "100.25"},
	} {
		if got := cell(c.row, c.name); got != c.want {
			t.Errorf("row %d, %s: %q; want %q", c.row, c.name, got, c.want)
		}
	}
	for _, name := range rows[0] {
		if !strings.Contains(string(want), "\n# column "+name+": ") {
			t.Errorf("no comment gives the unit of %s", name)
		}
	}
	if err := b.Export(t.Context(), "r9", &out); !errors.Is(err, ErrNoRun) {
		t.Errorf("an unknown run: %v; want %v", err, ErrNoRun)
	}
}

func TestSnapshotIsAWholeLogbook(t *testing.T) {
	b := openBook(t, t.TempDir())
	exampleNight(t, b)
	if err := b.AddNote(t.Context(), "20310203T200000Z-k3", "test", "good night"); err != nil {
		t.Fatal(err)
	}
	file := filepath.Join(t.TempDir(), "copy of the night.db")

	// The journal goes on while it is copied.
	done := make(chan error)
	go func() {
		var err error
		for s := int64(8); s < 60 && err == nil; s++ {
			err = b.Append(context.Background(), aReading("20310203T200000Z-k3", s))
		}
		done <- err
	}()
	err := b.Snapshot(t.Context(), file)
	if err := <-done; err != nil {
		t.Fatal(err)
	}
	if err != nil {
		t.Fatal(err)
	}

	c, err := OpenReadOnly(file)
	if err != nil {
		t.Fatal(err)
	}
	defer closeVerified(t, c)
	last, err := c.Last(t.Context(), "20310203T200000Z-k3")
	if err != nil || last < 7 {
		t.Fatalf("the copy ends at %d, %v; want 7 or more", last, err)
	}
	got, err := c.After(t.Context(), 0, 1000)
	if err != nil {
		t.Fatal(err)
	}
	want, err := b.After(t.Context(), 0, len(got))
	if err != nil {
		t.Fatal(err)
	}
	for i := range want {
		if got[i].Entry.ID() != want[i].Entry.ID() || string(got[i].Body) != string(want[i].Body) {
			t.Errorf("entry %d differs", want[i].Entry.Sequence)
		}
	}
	if notes, err := c.Notes(t.Context(), "20310203T200000Z-k3"); err != nil || len(notes) != 1 {
		t.Errorf("the copy has %d notes, %v; want 1", len(notes), err)
	}

	if err := b.Snapshot(t.Context(), file); err == nil {
		t.Error("a snapshot over a file that is there was made")
	}
	if err := b.Snapshot(t.Context(), filepath.Join(t.TempDir(), "no such folder", "copy.db")); err == nil {
		t.Error("a snapshot in a folder that is not there was made")
	}
	left, err := filepath.Glob(filepath.Join(filepath.Dir(file), "*"))
	if err != nil || len(left) != 1 {
		t.Errorf("files %q, %v; want the copy alone", left, err)
	}
}
