package line_test

import (
	"context"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers/drivertest"
	"gemel/drivers/line"
)

// BenchmarkExchange says how many times as much of the processor a question through a line takes as the
// bare bytes to and fro through the same cable, in one run: the ratio is what counts, since the machine
// is in both. A night of 30 000 gates takes about 120 000 exchanges on the counter's line.
func BenchmarkExchange(b *testing.B) {
	const question, answer, exchanges = "*ESE 173;:FETC?;*ESE?\n", "12034,9876,512;0;173\n", 1000
	echo := func(far *drivertest.End) {
		buf := make([]byte, 256)
		for {
			if _, err := far.Read(buf); err != nil {
				return
			}
			_, _ = far.Write([]byte(answer))
		}
	}
	asks := func(t *testing.T) {
		near, far := drivertest.Cable()
		l := line.New(line.Settings{Open: func(context.Context) (line.Port, error) { return near, nil }})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan bool)
		go func() { _ = l.Run(ctx); close(done) }()
		go echo(far)
		s := l.Seat(line.SeatSettings{Device: "counter"})
		if _, err := s.Connect(ctx); err != nil {
			t.Fatal(err)
		}
		for range exchanges {
			if _, err := s.Ask(ctx, line.Question{Op: "q", Send: []byte(question[:len(question)-1]), Judge: anything}); err != nil {
				t.Fatal(err)
			}
		}
		cancel()
		<-done
		_ = far.Close()
	}
	bytes := func(t *testing.T) {
		near, far := drivertest.Cable()
		go echo(far)
		buf := make([]byte, 256)
		for range exchanges {
			if _, err := near.Write([]byte(question)); err != nil {
				t.Fatal(err)
			}
			if _, err := near.Read(buf); err != nil {
				t.Fatal(err)
			}
		}
		_ = near.Close()
		_ = far.Close()
	}
	// A benchmark cannot enter a bubble itself. In one, waits take no time, and the wall's clock outside
	// shows what is left: the work.
	works := func(f func(*testing.T)) time.Duration {
		began := time.Now()
		if !testing.RunTests(func(string, string) (bool, error) { return true, nil }, []testing.InternalTest{{Name: "exchanges", F: func(t *testing.T) { synctest.Test(t, f) }}}) {
			b.Fatal("the exchanges failed")
		}
		return time.Since(began)
	}
	var asked, plain time.Duration
	n := 0
	for b.Loop() {
		asked, plain, n = asked+works(asks), plain+works(bytes), n+exchanges
	}
	b.ReportMetric(float64(asked)/float64(n)/1e3, "us/exchange")
	b.ReportMetric(float64(asked)/float64(plain), "times(bytes)")
	b.ReportMetric(0, "ns/op")
}
