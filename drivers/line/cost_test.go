package line_test

import (
	"testing"
	"time"

	"gemel/drivers/line"
)

// A night of 30 000 gates takes about 120 000 exchanges on the counter's line.
func TestTheExchangesOfANightTakeLittleTimeOfTheProcessor(t *testing.T) {
	if testing.Short() {
		t.Skip("skipped: takes a few seconds under the race detector")
	}
	const exchanges = 20_000
	start := time.Now()
	answer := func(in *instrument, text string) { in.sayIn(2*time.Millisecond, "12034,9876,512;0;173\n") }
	onLine(t, answer, nil, func(t *testing.T, l *line.Line, s *line.Seat, in *instrument) {
		in.mu.Lock()
		in.heard = make([]string, 0, exchanges)
		in.mu.Unlock()
		for range exchanges {
			if _, err := s.Ask(t.Context(), line.Question{Op: "q", Send: []byte("*ESE 173;:FETC?;*ESE?"), Judge: anything}); err != nil {
				t.Fatal(err)
			}
		}
	})
	each := time.Since(start) / exchanges
	t.Logf("%v an exchange, both ends", each)
	if each > 500*time.Microsecond {
		t.Errorf("%v an exchange; want far less than 500 us", each)
	}
}
