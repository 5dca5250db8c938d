package nighttest

import (
	"encoding/json"
	"os"
	"path/filepath"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/sim/instruments"
)

// quick is a plan whose readings cost software and hardly any bench time.
const quick = `
title: What a reading costs
sweep:
  - {axis: signal_arm, around: 2.864 deg, span: 1 deg, step: 0.02 deg}
  - {axis: idler_arm, around: 2.864 deg, span: 0.4 deg, step: 0.1 deg}
order: serpentine
dwell: 1 s
repeat: {times: 1}
`

// BenchmarkReading says what the software of one reading costs, simulation included, beside its
// round trips at the speed of a line in memory and beside one commit of its own size, all in one
// run: the ratios are what counts. On a real line the round trips are a hundred times longer.
func BenchmarkReading(b *testing.B) {
	text, err := os.ReadFile("../../configs/demo-bench.yaml")
	if err != nil {
		b.Fatal(err)
	}
	f, err := AtClockOne("../../configs/demo-bench.yaml", text)
	if err != nil {
		b.Fatal(err)
	}
	var night, trips, commits time.Duration
	readings, asked, bytes := 0, 0, 0
	for b.Loop() {
		var r *Result
		data := b.TempDir()
		began := time.Now()
		// A benchmark cannot enter a bubble itself.
		ok := testing.RunTests(func(string, string) (bool, error) { return true, nil }, []testing.InternalTest{{Name: "night", F: func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				var err error
				if r, err = Run(Night{Bench: f, Recipe: quick}, data); err != nil {
					t.Fatal(err)
				}
			})
		}}})
		if !ok || r == nil || r.State != protocol.Finished {
			b.Fatalf("the night failed: %+v", r)
		}
		night += time.Since(began)
		readings += r.Accepted
		asked += r.Lines.Asked
		for _, m := range r.Line {
			if m.Journal != nil && m.Journal.Kind == protocol.ReadingEntry {
				bytes = len(m.Journal.Body)
			}
		}
	}
	trips = roundTrips(b, 2000)
	commits = appends(b, 500, bytes)
	each := float64(night) / float64(readings)
	b.ReportMetric(each/1e3, "us/reading")
	b.ReportMetric(float64(asked)/float64(readings), "questions/reading")
	b.ReportMetric(float64(trips)/2000/1e3, "us/roundtrip")
	b.ReportMetric(float64(commits)/500/1e3, "us/commit")
	b.ReportMetric(each/(float64(trips)/2000*float64(asked)/float64(readings)+float64(commits)/500), "times(trips+commit)")
	b.ReportMetric(0, "ns/op")
}

// roundTrips asks a bare echo over a cable.
func roundTrips(b *testing.B, n int) time.Duration {
	host, device := instruments.Cable(4096)
	defer host.Close()
	go func() {
		buf := make([]byte, 256)
		for {
			k, err := device.Read(buf)
			if err != nil {
				return
			}
			_, _ = device.Write(buf[:k])
		}
	}()
	buf := make([]byte, 256)
	began := time.Now()
	for range n {
		if _, err := host.Write([]byte("WHERE\n")); err != nil {
			b.Fatal(err)
		}
		if _, err := host.Read(buf); err != nil {
			b.Fatal(err)
		}
	}
	return time.Since(began)
}

// appends commits entries of a reading's size to a logbook.
func appends(b *testing.B, n, size int) time.Duration {
	book, err := logbook.Open(filepath.Join(b.TempDir(), "commits"))
	if err != nil {
		b.Fatal(err)
	}
	defer book.Close()
	filler := make([]byte, max(0, size-300))
	for i := range filler {
		filler[i] = 'x'
	}
	entry := func(i int) protocol.Entry {
		body, err := json.Marshal(protocol.Event{Head: protocol.Head{Schema: protocol.EventSchema, Bench: "skerry", Run: protocol.BenchRun, Sequence: int64(i)}, Kind: protocol.Trouble, Text: string(filler), Causes: []protocol.Cause{}, Detail: map[string]any{}})
		if err != nil {
			b.Fatal(err)
		}
		return protocol.Entry{Run: protocol.BenchRun, Sequence: int64(i), Kind: protocol.EventEntry, Body: body}
	}
	began := time.Now()
	for i := 1; i <= n; i++ {
		if err := book.Append(b.Context(), entry(i)); err != nil {
			b.Fatal(err)
		}
	}
	return time.Since(began)
}
