package logbook

import (
	"fmt"
	"os"
	"path/filepath"
	"testing"
	"time"
)

// BenchmarkAppend takes turns between an append and what any durable record costs on this disk,
// the same bytes written to the end of a file and flushed, so that both see the same disk.
func BenchmarkAppend(b *testing.B) {
	book := openBook(b, b.TempDir())
	mustNewRun(b, book, header("r1", ""))
	plain, err := os.Create(filepath.Join(b.TempDir(), "plain"))
	if err != nil {
		b.Fatal(err)
	}
	defer plain.Close()
	var appending, writing time.Duration
	sequence := int64(1)
	for b.Loop() {
		sequence++
		e := aReading("r1", sequence)
		t0 := time.Now()
		if err := book.Append(b.Context(), e); err != nil {
			b.Fatal(err)
		}
		t1 := time.Now()
		if _, err := plain.Write(e.Body); err != nil {
			b.Fatal(err)
		}
		if err := flushData(plain); err != nil {
			b.Fatal(err)
		}
		appending, writing = appending+t1.Sub(t0), writing+time.Since(t1)
	}
	b.ReportMetric(float64(b.N)/appending.Seconds(), "appends/s")
	b.ReportMetric(float64(b.N)/writing.Seconds(), "plain/s")
	b.ReportMetric(appending.Seconds()/writing.Seconds(), "times-plain")
}

// BenchmarkViews asks what a person or a report asks, of a journal of 100 000 readings in runs of
// 5 000 with 20 doubts each.
func BenchmarkViews(b *testing.B) {
	book := openBook(b, b.TempDir())
	const runs, readings = 20, 5000
	const doubts = 20 // a run
	for r := range runs {
		run := killedRun(r)
		mustNewRun(b, book, header(run, ""))
		tx, err := book.writer.Begin()
		if err != nil {
			b.Fatal(err)
		}
		insert := tx.Stmt(book.insert)
		for s := int64(2); s < 2+readings+doubts; s++ {
			e := aReading(run, s)
			if s%250 == 0 {
				e = doubt(run, s, s-50, s-1, "drifted")
			}
			if _, err := insert.Exec(e.Run, e.Sequence, e.Kind, string(e.Body)); err != nil {
				b.Fatal(err)
			}
		}
		if err := tx.Commit(); err != nil {
			b.Fatal(err)
		}
	}
	if info, err := os.Stat(book.file); err == nil {
		b.Logf("%d bytes a reading, file of %d MB", len(aReading("r000001", 100).Body), info.Size()/1e6)
	}
	for _, c := range []struct{ name, query string }{
		{"every run with its state", `SELECT count(state) FROM run`},
		{"one reading", `SELECT count(gate_s) FROM reading WHERE run = 'r000010' AND sequence = 2400`},
		{"accepted in a run of 5000", `SELECT count(*) FROM reading WHERE run = 'r000010' AND accepted`},
		{"doubtful in a run of 5000", `SELECT count(*) FROM reading WHERE run = 'r000010' AND doubtful`},
		{"sum of counts in a run of 5000", `SELECT sum(counts) FROM reading_count WHERE run = 'r000010' AND channel = 'pair'`},
		{"counts and angles of a run of 5000", `SELECT count(c.counts + a.after_deg) FROM reading r JOIN reading_angle a USING (run, sequence)
			JOIN reading_count c USING (run, sequence) WHERE run = 'r000010' AND r.accepted AND a.axis = 'idler_arm' AND c.channel = 'pair'`},
		{"accepted in all", `SELECT count(*) FROM reading WHERE accepted`},
		{"doubtful in all", `SELECT count(*) FROM reading WHERE doubtful`},
		{"sum of counts in all", `SELECT sum(counts) FROM reading_count WHERE channel = 'pair'`},
		{"events in all", `SELECT count(text) FROM event`},
	} {
		b.Run(c.name, func(b *testing.B) {
			for b.Loop() {
				var n float64
				if err := book.readers.QueryRow(c.query).Scan(&n); err != nil {
					b.Fatal(err)
				}
				if n == 0 {
					b.Fatal("nothing found")
				}
			}
		})
	}
	b.Run("Readings of a run of 5000", func(b *testing.B) {
		for b.Loop() {
			n := 0
			for _, err := range book.Readings(b.Context(), "r000010") {
				if err != nil {
					b.Fatal(err)
				}
				n++
			}
			if n != readings {
				b.Fatal(fmt.Sprint(n, " readings"))
			}
		}
	})
	b.Run("Verify", func(b *testing.B) {
		for b.Loop() {
			if faults := book.Verify(b.Context()); len(faults) != 0 {
				b.Fatal(faults)
			}
		}
	})
}
