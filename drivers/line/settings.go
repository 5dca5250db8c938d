package line

import (
	"context"
	"io"
	"time"

	"github.com/rs/zerolog"
)

// Port is what a line needs of whatever carries its bytes: a net.Conn and an in-memory cable
// are ports as they stand, Address makes them of serial devices and TCP addresses. A read or write that outlives
// its deadline must return an error that wraps os.ErrDeadlineExceeded; every other error means
// that the port is lost. A read that finds bytes waiting returns them at once.
type Port interface {
	io.ReadWriteCloser
	SetReadDeadline(time.Time) error
	SetWriteDeadline(time.Time) error
}

// Settings describe one line. All times are times on the wall: the bytes of a simulated
// instrument that lives faster still travel through a real process.
type Settings struct {
	Name string
	// Open opens the port by a path that names the same instrument after it was plugged in
	// again. It must give up when its context ends.
	Open func(context.Context) (Port, error)

	EndsWith       []byte // sent after each question; "\n" if empty
	AnswersEndWith []byte // ends each answer; "\n" if empty, and then a "\r" before it is dropped
	Echo           bool   // the instrument repeats each question before it answers

	AnswerWithin  time.Duration // an answer that takes longer is missing; default 1 s
	LongestAnswer time.Duration // after this nothing comes any more; default 2 s, at least AnswerWithin
	WriteWithin   time.Duration // a write that takes longer is stuck, and the port lost; default 500 ms
	QuietFor      time.Duration // a line on which nothing came for so long is quiet; default 50 ms
	OpenWithin    time.Duration // one Connect tries to open for so long at most; default 10 s
	BackoffMin    time.Duration // pause after the first refused opening; default 50 ms
	BackoffMax    time.Duration // longest pause between openings; default 2 s
	Seed          uint64        // of the jitter of those pauses

	MaxFrame int // bytes of the longest answer; default 4096
	History  int // exchanges kept in the wire log; default 256
	Log      zerolog.Logger
}

// slice bounds each read, and so how long urgent bytes wait for one.
const slice = 20 * time.Millisecond

// sip is how long a look at what already waits in the input may take. A deadline that has
// passed would make most ports return without looking; those from Address do not sleep for it.
const sip = 200 * time.Microsecond

func (s Settings) withDefaults() Settings {
	if len(s.EndsWith) == 0 {
		s.EndsWith = []byte("\n")
	}
	if len(s.AnswersEndWith) == 0 {
		s.AnswersEndWith = []byte("\n")
	}
	orElse(&s.AnswerWithin, time.Second)
	orElse(&s.LongestAnswer, 2*time.Second)
	s.LongestAnswer = max(s.LongestAnswer, s.AnswerWithin)
	orElse(&s.WriteWithin, 500*time.Millisecond)
	orElse(&s.QuietFor, 50*time.Millisecond)
	orElse(&s.OpenWithin, 10*time.Second)
	orElse(&s.BackoffMin, 50*time.Millisecond)
	orElse(&s.BackoffMax, 2*time.Second)
	s.BackoffMax = max(s.BackoffMax, s.BackoffMin)
	if s.MaxFrame <= 0 {
		s.MaxFrame = 4096
	}
	if s.History <= 0 {
		s.History = 256
	}
	return s
}

func orElse(d *time.Duration, otherwise time.Duration) {
	if *d <= 0 {
		*d = otherwise
	}
}
