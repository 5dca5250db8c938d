// Package line owns one serial, TCP or in-memory line from open to close. It cuts what comes
// into answers, bounds every read and write, opens the line again when it was lost, lets urgent
// bytes pass between reads, and never hands out an answer that may belong to an earlier
// question. It knows nothing of what the bytes mean: the dialects say so by their judges.
//
// It refuses to guess. After a missing or strange answer nothing is asked until the longest
// answer time is over and the line is quiet; after a lost line or a restart each device must
// connect again before its next question.
package line

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"runtime/debug"
	"sync"
	"sync/atomic"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
)

// Line is one line. Its port belongs to the goroutine in Run; everybody else talks to that one.
type Line struct {
	set    Settings
	jobs   chan *job
	urgent chan *job
	done   chan struct{} // closed when Run has returned
	record record

	numbered atomic.Uint32
	letGo    atomic.Bool // its port belongs to another program; see release.go

	mu    sync.Mutex
	seats []*Seat

	// What follows belongs to the owner alone.
	running    context.Context
	port       Port
	inPort     bool // a call of the port runs: should it panic, the port is lost
	generation int  // raised by each opening
	lost       error
	openedAt   time.Time
	shortLived time.Duration // not zero: the last port was lost soon, and this is the pause before the next
	notBefore  time.Time     // when that pause is over
	rx         []byte
	buf        [512]byte
	outUntil   time.Time // not zero: out of step until then, and until quiet
	oddities   int       // how often something came that belonged to nothing, or did not come
	jitter     *rand.Rand
}

// New makes a line; it starts nothing and opens nothing.
func New(s Settings) *Line {
	s = s.withDefaults()
	return &Line{
		set:    s,
		jobs:   make(chan *job),
		urgent: make(chan *job),
		done:   make(chan struct{}),
		record: record{size: s.History},
		jitter: rand.New(rand.NewPCG(s.Seed, 0x9e3779b97f4a7c15)),
	}
}

// Name returns the bench file's name of the line.
func (l *Line) Name() string { return l.set.Name }

// job is one question, connection or urgent message on its way through the owner.
type job struct {
	ctx     context.Context
	seat    *Seat
	q       Question
	connect bool
	release bool
	reply   chan result // buffered: the owner never waits for the one who asked
}

type result struct {
	answer []byte
	fresh  bool
	fault  *Fault
}

// Run owns the port until ctx ends, and then closes it. It must run once, and only once.
func (l *Line) Run(ctx context.Context) error {
	defer close(l.done)
	defer l.drop()
	l.running = ctx
	for {
		select { // what is urgent goes first when both wait
		case u := <-l.urgent:
			l.do(u, l.passInTurn)
			continue
		default:
		}
		select {
		case <-ctx.Done():
			return nil
		case u := <-l.urgent:
			l.do(u, l.passInTurn)
		case j := <-l.jobs:
			switch {
			case j.release:
				l.do(j, l.release)
			case j.connect:
				l.do(j, l.connect)
			default:
				l.do(j, l.ask)
			}
		}
	}
}

// do runs one job and answers it, whatever happens: a panic in a judge or in the port must not
// take the owner along and leave every device of the line waiting.
func (l *Line) do(j *job, work func(*job) result) {
	defer func() {
		if p := recover(); p != nil {
			err := fmt.Errorf("panic: %v\n%s", p, debug.Stack())
			l.outOfStep(time.Now(), 0)
			if l.inPort {
				l.inPort = false
				l.lose(err)
			}
			j.reply <- result{fault: &Fault{Why: Panicked, Sent: true, Err: err}}
		}
	}()
	j.reply <- work(j)
}

// ask asks one question, again if that is allowed.
func (l *Line) ask(j *job) result {
	for try := 0; ; try++ {
		answer, fault := l.askOnce(j)
		if fault == nil || try >= j.q.Repeat || !fault.again {
			return result{answer: answer, fault: fault}
		}
		l.record.count(func(c *Counts) { c.Retried++ })
	}
}

func (l *Line) askOnce(j *job) ([]byte, *Fault) {
	if f := l.current(j.seat); f != nil {
		return nil, f
	}
	if f := l.clearInput(j); f != nil {
		return nil, f
	}
	if f := l.ended(j); f != nil {
		return nil, f
	}
	if !j.q.Follows {
		j.seat.oddities = l.oddities
	} else if j.seat.oddities != l.oddities {
		return nil, &Fault{Why: Strange, again: true, Err: errors.New("something strange came after the question before; its answer may not be its own")}
	}
	start := time.Now()
	if f := l.write(j.message()); f != nil {
		l.record.add(Entry{At: start, Device: j.seat.set.Device, Op: j.q.Op, Sent: j.q.Send, Note: f.Error()})
		return nil, f
	}
	l.record.count(func(c *Counts) { c.Asked++ })
	return l.await(j, start)
}

// current says whether the seat may ask at all.
func (l *Line) current(s *Seat) *Fault {
	switch {
	case s.restarted:
		return &Fault{Why: Restart, Err: errors.New("the instrument has restarted; want it connected again")}
	case l.port == nil && l.lost != nil:
		return &Fault{Why: Lost, Err: fmt.Errorf("line lost: %w", l.lost)}
	case l.port == nil || s.generation != l.generation:
		return &Fault{Why: Lost, Err: errors.New("line was opened anew; want the device connected again")}
	}
	return nil
}

// await waits for the answer to a question that was sent at start.
func (l *Line) await(j *job, start time.Time) (answer []byte, fault *Fault) {
	within := j.q.Within
	if within <= 0 {
		within = l.set.AnswerWithin
	}
	defer func() {
		e := Entry{At: start, Took: time.Since(start), Device: j.seat.set.Device, Op: j.q.Op, Sent: j.q.Send, Got: answer}
		if fault != nil {
			fault.Sent = true
			e.Note = fault.Error()
			if fault.Why != Lost && fault.Why != Refusal {
				l.outOfStep(start, within)
			}
		}
		l.record.add(e)
	}()

	var echo []byte
	if j.seat.set.Echo && !j.q.Bare {
		echo = j.message()
	}
	frame := j.frame()
	for {
		for {
			if len(echo) > 0 {
				if n := common(l.rx, echo); n == len(echo) {
					l.take(n)
					echo = nil
				} else if n == len(l.rx) {
					break // the rest of the echo is still to come
				}
			}
			if echo == nil && j.q.Judge == nil {
				return nil, nil
			}
			payload, size, err := frame(l.rx)
			if err != nil {
				return nil, &Fault{Why: Strange, again: true, Err: fmt.Errorf("answer %.80q: %w", l.rx, err)}
			}
			if size == 0 {
				break
			}
			text := append([]byte(nil), l.rx[:payload]...)
			l.take(size)
			switch v := l.judge(j, text, echo == nil); v.Kind {
			case Answer:
				return text, nil
			case Refused:
				return text, &Fault{Why: Refusal, Err: fmt.Errorf("refused: %s", orText(v.Reason, text))}
			case Restarted:
				return text, &Fault{Why: Restart, Err: fmt.Errorf("the instrument has restarted: it sent %.80q", text)}
			case Stranger:
				return text, &Fault{Why: Strange, again: true, Err: fmt.Errorf("answer %.80q does not belong to the question%s", text, because(v.Reason))}
			}
		}
		if len(l.rx) > l.set.MaxFrame {
			l.rx = l.rx[:0]
			return nil, &Fault{Why: Strange, again: true, Err: fmt.Errorf("answer of more than %d bytes; want its end before that", l.set.MaxFrame)}
		}
		if f := l.ended(j); f != nil {
			return nil, f
		}
		left := within - time.Since(start)
		if left <= 0 {
			l.record.count(func(c *Counts) { c.Missing++ })
			return nil, &Fault{Why: Missing, again: true, Err: fmt.Errorf("no answer within %s: %w", unit.Span(within), os.ErrDeadlineExceeded)}
		}
		if _, f := l.read(min(slice, left)); f != nil {
			return nil, f
		}
	}
}

// judge says what a whole frame is. A restart of the asker's instrument goes before everything,
// then the answer, then what the asker and the other devices on the line know as unasked.
func (l *Line) judge(j *job, frame []byte, answers bool) Verdict {
	own := j.seat.unasked(frame)
	if own.Kind == Restarted {
		l.restarted(j.seat)
		return own
	}
	v := Verdict{Kind: Stranger, Reason: "it came before the echo"}
	if answers {
		v = j.q.Judge(frame)
	}
	switch {
	case v.Kind == Restarted:
		l.restarted(j.seat)
	case v.Kind == Stray:
		l.stray(frame)
	case v.Kind != Stranger:
	case own.Kind == Chatter || len(frame) == 0 || l.unasked(j.seat, frame):
		v.Kind = Chatter
	default:
		l.record.count(func(c *Counts) { c.Strangers++ })
	}
	if v.Kind == Chatter {
		l.record.count(func(c *Counts) { c.Chatter++ })
	}
	return v
}

// unasked asks the other devices whether a frame is theirs, and marks those that restarted.
func (l *Line) unasked(asker *Seat, frame []byte) (known bool) {
	for _, s := range l.everySeat() {
		if s == asker {
			continue
		}
		switch s.unasked(frame).Kind {
		case Restarted:
			l.restarted(s)
			known = true
		case Chatter:
			known = true
		}
	}
	return known
}

func (l *Line) restarted(s *Seat) {
	for _, each := range l.everySeat() {
		if each == s || each.set.Nameless && s.set.Nameless {
			each.restarted = true
		}
	}
	l.record.count(func(c *Counts) { c.Restarts++ })
	l.set.Log.Warn().Str("line", l.set.Name).Str("device", string(s.set.Device)).Msg("the instrument restarted")
}

func (l *Line) stray(frame []byte) {
	l.oddities++
	l.record.count(func(c *Counts) { c.Strays++ })
	l.record.add(Entry{At: time.Now(), Got: frame, Note: "stray answer dropped"})
	l.set.Log.Warn().Str("line", l.set.Name).Str("answer", fmt.Sprintf("%.80q", frame)).Msg("stray answer dropped")
}

// clearInput brings the line into step and takes what already waits in the input, so that the
// next thing to come can only be the answer to the next question.
func (l *Line) clearInput(j *job) *Fault {
	for {
		if !l.outUntil.IsZero() {
			if f := l.resynchronise(j); f != nil {
				return f
			}
		}
		for range 64 { // an instrument that never stops talking is found out by resynchronise
			n, f := l.read(sip)
			if f != nil {
				return f
			}
			if n == 0 {
				break
			}
		}
		noise := l.sift(j.seat)
		if f := l.current(j.seat); f != nil {
			return f
		}
		if !noise && len(l.rx) == 0 {
			return nil
		}
		if len(l.rx) > 0 { // half an answer: the rest must not be taken for the beginning of ours
			l.outOfStep(time.Now().Add(-l.set.LongestAnswer), 0)
		}
	}
}

// resynchronise waits until the longest answer time is over and the line is quiet, and drops
// what comes meanwhile. Restarts are noticed all the same.
func (l *Line) resynchronise(j *job) *Fault {
	l.record.count(func(c *Counts) { c.Resynchronised++ })
	began := time.Now()
	quietSince := began
	giveUp := latest(began, l.outUntil).Add(l.set.LongestAnswer + 5*time.Second)
	for {
		if f := l.ended(j); f != nil {
			return f
		}
		now := time.Now()
		due := latest(l.outUntil, quietSince.Add(l.set.QuietFor))
		if !now.Before(due) {
			l.rx = l.rx[:0]
			l.outUntil = time.Time{}
			if j.connect {
				return nil
			}
			return l.current(j.seat)
		}
		if now.After(giveUp) {
			return &Fault{Why: Strange, Err: errors.New("line does not fall quiet; want an instrument that speaks only when asked, or its chatter declared")}
		}
		if _, f := l.read(min(slice, due.Sub(now))); f != nil {
			return f
		}
		if l.sift(j.seat) || len(l.rx) > 0 {
			quietSince = time.Now()
		}
	}
}

// sift takes the whole frames out of the input and drops them. It says whether there was one
// that nobody knows; half a frame stays.
func (l *Line) sift(s *Seat) (noise bool) {
	frame := Terminated(s.set.AnswersEndWith)
	for {
		payload, size, err := frame(l.rx)
		if err != nil || len(l.rx) > l.set.MaxFrame {
			l.rx = l.rx[:0]
			return true
		}
		if size == 0 {
			return noise
		}
		text := append([]byte(nil), l.rx[:payload]...)
		l.take(size)
		switch s.unasked(text).Kind {
		case Restarted:
			l.restarted(s)
			continue
		case Chatter:
			l.record.count(func(c *Counts) { c.Chatter++ })
			continue
		}
		if len(text) > 0 && !l.unasked(s, text) {
			l.stray(text)
			noise = true
		}
	}
}

// outOfStep says that an answer may still come to what was sent at that time.
func (l *Line) outOfStep(sent time.Time, within time.Duration) {
	l.oddities++
	until := sent.Add(l.set.LongestAnswer)
	if within > l.set.LongestAnswer { // this one was known to take longer
		until = time.Now().Add(l.set.LongestAnswer)
	}
	l.outUntil = latest(l.outUntil, until)
}

// ended lets urgent bytes pass, and says whether the job must end here.
func (l *Line) ended(j *job) *Fault {
	select {
	case u := <-l.urgent:
		l.do(u, l.pass)
		switch f := l.current(j.seat); {
		case j.connect && l.port == nil:
			return &Fault{Why: Lost, Err: fmt.Errorf("line lost: %w", l.lost)}
		case j.connect:
		case f != nil:
			return f
		default:
			return &Fault{Why: Interrupted, again: u.seat != j.seat, Err: fmt.Errorf("interrupted by an urgent message to %s", u.seat.set.Device)}
		}
	case <-j.q.Epoch:
		return &Fault{Why: Interrupted, Err: errStopped}
	default:
	}
	if l.running.Err() != nil {
		return &Fault{Why: Closed, Err: drivers.ErrClosed}
	}
	if j.ctx.Err() != nil {
		return &Fault{Why: Ended, Err: endOf(j.ctx)}
	}
	return nil
}

var errStopped = errors.New("stopped by an urgent message to this device")

// passInTurn is the road of urgent bytes while nothing else is under way: their answer, if one
// is expected, can be waited for like any other.
func (l *Line) passInTurn(u *job) result {
	wait := u.q.Judge != nil && l.outUntil.IsZero() && l.current(u.seat) == nil
	start := time.Now()
	r := l.pass(u)
	if r.fault != nil || !wait || l.current(u.seat) != nil {
		return r
	}
	l.outUntil = time.Time{} // pass expected nobody to wait
	u.q.Epoch = nil
	answer, f := l.await(u, start)
	return result{answer: answer, fault: f}
}

// pass sends urgent bytes at once, whatever the line was doing.
func (l *Line) pass(u *job) result {
	start := time.Now()
	if l.port == nil {
		l.notBefore = time.Time{}
		if f := l.open(u, start.Add(l.set.OpenWithin)); f != nil {
			return result{fault: f}
		}
	}
	f := l.write(u.message())
	e := Entry{At: start, Took: time.Since(start), Device: u.seat.set.Device, Op: u.q.Op, Sent: u.q.Send, Note: "urgent"}
	if f != nil {
		e.Note = "urgent: " + f.Error()
	} else {
		l.record.count(func(c *Counts) { c.Urgent++ })
		if u.q.Judge != nil {
			l.outOfStep(start, u.q.Within)
		}
	}
	l.record.add(e)
	return result{fault: f}
}

// connect opens the port if need be, waits for quiet, and makes the seat current again.
func (l *Line) connect(j *job) result {
	by := time.Now().Add(l.set.OpenWithin)
	for {
		if l.port == nil {
			if f := l.open(j, by); f != nil {
				return result{fault: f}
			}
		}
		l.outOfStep(time.Now().Add(-l.set.LongestAnswer), 0)
		f := l.resynchronise(j)
		if f == nil {
			break
		}
		if f.Why != Lost {
			return result{fault: f}
		}
	}
	s := j.seat
	fresh := s.generation != l.generation || s.restarted
	s.generation, s.restarted = l.generation, false
	return result{fresh: fresh}
}

// open opens the port, with growing pauses, until it is open or the job's time is over.
func (l *Line) open(j *job, by time.Time) *Fault {
	ctx, cancel := context.WithDeadline(j.ctx, by)
	defer cancel()
	defer context.AfterFunc(l.running, cancel)()
	pause, wait := l.set.BackoffMin, time.Until(l.notBefore)
	for {
		if wait > 0 {
			timer := time.NewTimer(wait)
			select {
			case <-timer.C:
			case <-ctx.Done():
			case u := <-l.urgent:
				l.do(u, l.pass)
			}
			timer.Stop()
		}
		switch {
		case l.port != nil: // opened for the urgent message
			return nil
		case l.letGo.Load():
			return &Fault{Why: Unusable, Err: ErrLetGo}
		case l.running.Err() != nil:
			return &Fault{Why: Closed, Err: drivers.ErrClosed}
		case j.ctx.Err() != nil:
			return &Fault{Why: Ended, Err: fmt.Errorf("%w while opening: %w", endOf(j.ctx), l.notOpen())}
		case ctx.Err() != nil:
			return &Fault{Why: Lost, Err: fmt.Errorf("does not open, or stay open, within %s: %w", unit.Span(l.set.OpenWithin), l.notOpen())}
		}
		l.inPort = true
		port, err := l.set.Open(ctx)
		l.inPort = false
		if err == nil {
			l.port, l.lost, l.openedAt = port, nil, time.Now()
			l.rx = l.rx[:0]
			l.generation++
			l.record.count(func(c *Counts) { c.Opened++ })
			l.record.add(Entry{At: time.Now(), Note: "opened"})
			return nil
		}
		if errors.Is(err, ErrHeld) || (l.generation == 0 && errors.Is(err, os.ErrPermission)) {
			return &Fault{Why: Unusable, Err: err}
		}
		l.lost = err
		wait = l.jittered(pause)
		pause = min(2*pause, l.set.BackoffMax)
	}
}

// notOpen is why there is no port.
func (l *Line) notOpen() error {
	if l.lost == nil {
		return errors.New("not tried yet")
	}
	return l.lost
}

// jittered shortens a pause by up to half, so that several lines on one hub do not come back in
// step.
func (l *Line) jittered(pause time.Duration) time.Duration {
	return pause/2 + time.Duration(l.jitter.Int64N(int64(pause/2)+1))
}

// read reads once, for d at most. That nothing came is no error.
func (l *Line) read(d time.Duration) (int, *Fault) {
	l.inPort = true
	err := l.port.SetReadDeadline(time.Now().Add(d))
	n := 0
	if err == nil {
		n, err = l.port.Read(l.buf[:])
	}
	l.inPort = false
	l.rx = append(l.rx, l.buf[:n]...)
	if err == nil && n == 0 {
		err = io.ErrNoProgress // a port that says neither bytes nor time-out would keep us spinning
	}
	if err == nil || errors.Is(err, os.ErrDeadlineExceeded) {
		return n, nil
	}
	return n, l.lose(err)
}

func (l *Line) write(b []byte) *Fault {
	l.inPort = true
	err := l.port.SetWriteDeadline(time.Now().Add(l.set.WriteWithin))
	for len(b) > 0 && err == nil {
		var n int
		if n, err = l.port.Write(b); err == nil && n == 0 {
			err = io.ErrNoProgress
		}
		b = b[n:]
	}
	l.inPort = false
	if err == nil {
		return nil
	}
	// Part of the message may be on its way, and the port may still hold the rest.
	f := l.lose(fmt.Errorf("write: %w", err))
	f.Sent = true
	return f
}

// lose closes the port after anything that is not a time-out. It is closed at once: a serial
// adapter that is plugged in again while somebody holds its old node comes back under another.
func (l *Line) lose(err error) *Fault {
	// A port that opens and is lost at once is as good as one that does not open: without a pause it
	// would keep a core busy. One that lived as long as the longest pause has had it.
	if time.Since(l.openedAt) < l.set.BackoffMax {
		l.shortLived = min(max(2*l.shortLived, l.set.BackoffMin), l.set.BackoffMax)
		l.notBefore = time.Now().Add(l.jittered(l.shortLived))
	} else {
		l.shortLived, l.notBefore = 0, time.Time{}
	}
	l.lost = err
	l.drop()
	l.record.count(func(c *Counts) { c.Lost++ })
	l.record.add(Entry{At: time.Now(), Note: "lost: " + err.Error()})
	return &Fault{Why: Lost, Err: fmt.Errorf("line lost: %w", err)}
}

func (l *Line) drop() {
	if l.port == nil {
		return
	}
	port := l.port
	l.port = nil
	l.rx = l.rx[:0]
	if err := port.Close(); err != nil {
		l.set.Log.Debug().Str("line", l.set.Name).Err(err).Msg("close")
	}
}

// take drops the first n bytes of the input and keeps the memory.
func (l *Line) take(n int) { l.rx = l.rx[:copy(l.rx, l.rx[n:])] }

func (l *Line) everySeat() []*Seat {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.seats
}

func common(a, b []byte) int {
	n := 0
	for n < len(a) && n < len(b) && a[n] == b[n] {
		n++
	}
	return n
}

func latest(a, b time.Time) time.Time {
	if a.After(b) {
		return a
	}
	return b
}

func orText(reason string, text []byte) string {
	if reason != "" {
		return reason
	}
	return fmt.Sprintf("%.80q", text)
}

func because(reason string) string {
	if reason == "" {
		return ""
	}
	return ": " + reason
}
