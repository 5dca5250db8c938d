package line

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"gemel/drivers"
)

// Verdict is what a judge says of one frame.
type Verdict struct {
	Kind   Kind
	Reason string // of a refusal, or why a stranger is one
}

// Kind says what a frame is.
type Kind int

// The kinds of frames. Zero is Stranger, so that a judge which says nothing lets nothing in.
const (
	Stranger  Kind = iota // belongs to nothing known: the line is out of step
	Answer                // the answer to the question
	Refused               // the instrument says no
	Chatter               // unasked and without meaning: dropped
	Stray                 // certainly the answer to an earlier question: dropped
	Restarted             // the instrument started anew
)

// Question is one thing to send, and how to know its answer.
type Question struct {
	Op   string // of errors and the wire log: "where", "count", …
	Send []byte
	Bare bool  // no terminator is added
	Cut  Frame // how answers are cut; nil: at the terminator
	// Judge says of each frame what it is; nil: nothing is answered. It must not keep the frame.
	Judge  func(frame []byte) Verdict
	Within time.Duration // 0: the line's AnswerWithin
	Repeat int           // how often it may be asked again after a missing or strange answer
	// Epoch, if not nil, is the device's epoch that the question belongs to: it is not sent, and
	// not waited for, once an urgent message has ended that epoch.
	Epoch Epoch
	// Follows says that it proves the answer to the device's question before. If anything strange came
	// since that was sent, such as the double of an answer, then what was taken for its answer may
	// have been another's: this question fails as Strange and is not sent.
	Follows bool
}

// Epoch ends when an urgent message is sent to a device: it is closed then.
type Epoch <-chan struct{}

// Over says whether the epoch has ended.
func (e Epoch) Over() bool {
	select {
	case <-e:
		return true
	default:
		return false
	}
}

func (j *job) message() []byte {
	if j.q.Bare {
		return j.q.Send
	}
	return append(append([]byte(nil), j.q.Send...), j.seat.set.EndsWith...)
}

func (j *job) frame() Frame {
	if j.q.Cut != nil {
		return j.q.Cut
	}
	return Terminated(j.seat.set.AnswersEndWith)
}

// Why says what kind of fault it was.
type Why int

// The faults, and the remedies they carry.
const (
	Missing     Why = iota + 1 // no answer in time: Retry
	Strange                    // an answer that belongs to something else, or to nothing: Retry
	Interrupted                // an urgent message went first: Retry
	Lost                       // the port was lost, or opened anew since: Reconnect
	Restart                    // the instrument restarted: Reconnect
	Refusal                    // the instrument said no: GiveUp
	Unusable                   // the port can never be opened so: GiveUp
	Panicked                   // a judge or a port panicked: GiveUp
	Closed                     // the line's owner ended: GiveUp, wraps drivers.ErrClosed
	Ended                      // the context ended: no remedy
)

// Fault is the cause inside every *drivers.Error from a line.
type Fault struct {
	Why   Why
	Sent  bool // the question was sent, at least in part: what it asks for may have happened
	Err   error
	again bool // asking once more may help
}

func (f *Fault) Error() string { return f.Err.Error() }
func (f *Fault) Unwrap() error { return f.Err }

// Again says that asking once more may help.
func (f *Fault) Again() bool { return f.again }

func (f *Fault) remedy() drivers.Remedy {
	switch f.Why {
	case Missing, Strange, Interrupted:
		return drivers.Retry
	case Lost, Restart:
		return drivers.Reconnect
	case Ended:
		return 0
	}
	return drivers.GiveUp
}

// ErrHeld is the cause when another program holds the port.
var ErrHeld = errors.New("held by another program")

// SeatSettings say how one device speaks on a line that it may share with others.
type SeatSettings struct {
	Device         drivers.DeviceName
	EndsWith       []byte // empty: the line's
	AnswersEndWith []byte // empty: the line's
	Echo           bool   // true here or in the line's settings: questions are repeated
	// Nameless says that nothing in a question tells whom it is for. All nameless devices of a line are
	// then parts of one instrument: what one learns of a restart is true for all.
	Nameless bool
	// Unasked knows what this device sends by itself: it returns Restarted, Chatter, or the zero
	// Verdict for anything else. Nil: it never does. It must be quick and must not call the line.
	Unasked func(frame []byte) Verdict
}

// Seat is one device's place on a line.
type Seat struct {
	line *Line
	set  SeatSettings

	mu    sync.Mutex
	epoch chan struct{}

	// What follows belongs to the line's owner.
	generation int
	restarted  bool
	oddities   int // of the line, when the last question that follows none was sent
}

// Seat gives a device its place. It starts nothing.
func (l *Line) Seat(set SeatSettings) *Seat {
	if len(set.EndsWith) == 0 {
		set.EndsWith = l.set.EndsWith
	}
	if len(set.AnswersEndWith) == 0 {
		set.AnswersEndWith = l.set.AnswersEndWith
	}
	set.Echo = set.Echo || l.set.Echo
	s := &Seat{line: l, set: set, epoch: make(chan struct{})}
	l.mu.Lock()
	defer l.mu.Unlock()
	l.seats = append(l.seats[:len(l.seats):len(l.seats)], s)
	return s
}

// Device returns the name of the device whose seat it is.
func (s *Seat) Device() drivers.DeviceName { return s.set.Device }

// Blocks cuts this device's answers at its terminator, but not inside blocks and strings.
func (s *Seat) Blocks() Frame { return Blocks(s.set.AnswersEndWith) }

// Number returns numbers that count up, for questions that carry one. They are the line's: devices
// that share it never number alike.
func (s *Seat) Number() uint32 { return s.line.numbered.Add(1) - 1 }

// LongestAnswer is after which time nothing comes any more to what was sent before.
func (s *Seat) LongestAnswer() time.Duration { return s.line.set.LongestAnswer }

func (s *Seat) unasked(frame []byte) Verdict {
	if s.set.Unasked == nil {
		return Verdict{}
	}
	return s.set.Unasked(frame)
}

// Connect opens the line if it is not open, waits until it is quiet, and lets the device ask
// again. It returns whether the line was opened anew, or the instrument seen to restart, since
// this device last connected. The error is an *drivers.Error.
func (s *Seat) Connect(ctx context.Context) (fresh bool, err error) {
	j := &job{ctx: ctx, seat: s, q: Question{Op: "connect"}, connect: true, reply: make(chan result, 1)}
	r := s.line.hand(s.line.jobs, j)
	return r.fresh, s.fail(j.q.Op, r.fault)
}

// Ask sends a question and returns its answer without the terminator. The error is an
// *drivers.Error around a *Fault.
func (s *Seat) Ask(ctx context.Context, q Question) ([]byte, error) {
	j := &job{ctx: ctx, seat: s, q: q, reply: make(chan result, 1)}
	r := s.line.hand(s.line.jobs, j)
	return r.answer, s.fail(q.Op, r.fault)
}

// Urgent sends a message before everything else, resynchronisation and waiting answers
// included, and ends this device's epoch. If the line was idle and in step, and the question has
// a judge, it returns the answer; otherwise nil as soon as the bytes are written. A line that is
// not open is opened for it, as long as ctx lasts.
func (s *Seat) Urgent(ctx context.Context, q Question) ([]byte, error) {
	s.mu.Lock()
	close(s.epoch)
	s.epoch = make(chan struct{})
	s.mu.Unlock()
	q.Epoch, q.Repeat = nil, 0
	j := &job{ctx: ctx, seat: s, q: q, reply: make(chan result, 1)}
	r := s.line.hand(s.line.urgent, j)
	return r.answer, s.fail(q.Op, r.fault)
}

// Epoch returns the epoch that lasts until the next urgent message.
func (s *Seat) Epoch() Epoch {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.epoch
}

func (s *Seat) fail(op string, f *Fault) error {
	if f == nil {
		return nil
	}
	return &drivers.Error{Op: op, Device: s.set.Device, Remedy: f.remedy(), Restarted: f.Why == Restart, Err: f}
}

// grace is how long one who asks waits for the owner after his context ended. The owner looks at
// the context between two reads; only a port that hangs in open, write or close takes longer. What
// the second that callers are promised leaves is for a stop or an abort that follows.
const grace = 250 * time.Millisecond

func (l *Line) hand(to chan<- *job, j *job) result {
	if j.ctx.Err() != nil {
		return result{fault: &Fault{Why: Ended, Err: endOf(j.ctx)}}
	}
	select {
	case to <- j:
	case <-j.ctx.Done():
		return result{fault: &Fault{Why: Ended, Err: endOf(j.ctx)}}
	case <-j.q.Epoch:
		return result{fault: &Fault{Why: Interrupted, Err: errStopped}}
	case <-l.done:
		return result{fault: &Fault{Why: Closed, Err: drivers.ErrClosed}}
	}
	select {
	case r := <-j.reply:
		return r
	case <-l.done:
	case <-j.ctx.Done():
		timer := time.NewTimer(grace)
		defer timer.Stop()
		select {
		case r := <-j.reply:
			return r
		case <-l.done:
		case <-timer.C:
			return result{fault: &Fault{Why: Ended, Sent: true, Err: endOf(j.ctx)}}
		}
	}
	select { // the owner answers before it leaves
	case r := <-j.reply:
		return r
	default:
		return result{fault: &Fault{Why: Closed, Sent: true, Err: drivers.ErrClosed}}
	}
}

// endOf returns how a context ended, with its cause where that says more.
func endOf(ctx context.Context) error {
	err, cause := ctx.Err(), context.Cause(ctx)
	if cause == nil || errors.Is(cause, err) {
		return err
	}
	return fmt.Errorf("%w: %w", err, cause)
}
