package unit

import (
	"testing"
	"time"

	"pgregory.net/rapid"
)

func TestATimeIsSaidAsAPersonSaysIt(t *testing.T) {
	for d, want := range map[time.Duration]string{
		0:                            "0 s",
		17 * time.Nanosecond:         "17 ns",
		250 * time.Millisecond:       "250 ms",
		1500 * time.Microsecond:      "1.5 ms",
		123456789:                    "123.457 ms",
		time.Second:                  "1 s",
		1500 * time.Millisecond:      "1.5 s",
		12345678 * time.Microsecond:  "12.346 s",
		59999600 * time.Microsecond:  "1 min",
		90 * time.Second:             "1 min 30 s",
		1000 * time.Second:           "16 min 40 s",
		1000*time.Second + 400000000: "16 min 40 s",
		time.Hour + 5*time.Second:    "1 h 5 s",
		125 * time.Minute:            "2 h 5 min",
		168 * time.Hour:              "168 h",
		-90 * time.Second:            "-1 min 30 s",
	} {
		if got := Span(d); got != want {
			t.Errorf("%d ns: %q; want %q", d, got, want)
		}
	}
}

func TestAWrittenTimeIsReadBackExactly(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		d := time.Duration(rapid.Int64Range(0, int64(200*time.Hour)).Draw(t, "d"))
		if every := rapid.SampledFrom([]time.Duration{1, time.Microsecond, time.Millisecond, time.Second, time.Minute, time.Hour}).Draw(t, "every"); true {
			d -= d % every
		}
		if got, err := ParseDuration(Written(d)); err != nil || got != d {
			t.Fatalf("%q is read as %d ns, %v; want %d", Written(d), got, err, d)
		}
	})
}
