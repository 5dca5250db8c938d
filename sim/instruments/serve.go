package instruments

import (
	"context"
	"errors"
	"io"
	"os"
	"slices"
	"strings"
	"syscall"
	"time"

	"gemel/sim/trouble"
)

// instantModulus is a prime. Each device owns one residue of real nanoseconds modulo it and does
// whatever it does by itself only at such instants, so that under virtual time no two devices
// ever wake together and a night replayed is the same night.
const instantModulus = 997

// actor is what all instruments have in common: the line, the answers on their way, the plug.
// Everything but the connection itself is guarded by the world's lock.
type actor struct {
	name    string
	w       *World
	wire    *trouble.Wire
	residue int64
	latency time.Duration // bench time from the question's last byte to the answer
	boot    time.Duration // bench time from power to the first word
	end     string        // line end of answers

	hear    func(now time.Time, b byte) // one byte from the host
	restart func(now time.Time)         // power was lost: what is left afterwards
	hello   func() string               // what is printed unasked after start-up; nil: nothing

	out       []saying
	last      time.Time // when the last answer in turn goes out; real
	deafUntil time.Time
	unplugged bool
	restarts  int
	another   bool       // the instrument behind the plug is not the one that was there
	moves     *mechanism // what it moves; nil: nothing

	pulled int      // troubles that have the plug pulled
	deaf   []*spell // it neither hears nor answers
	hung   []*spell // what is written to it hangs
	spoilt []*spell // what waits for, or lasts over, gates, measurements and motions of blades

	conn  Conn
	dirty bool
}

// stalling is a connection whose host's writes can be made to hang.
type stalling interface {
	Stall(on bool)
	Waited() (since time.Time, ok bool)
}

// identify is who it says it is: whoever stands behind the plug.
func (a *actor) identify(i Identity) Identity {
	if a.another {
		return Identity{Maker: "another", Model: "other", Serial: "other", Firmware: "0"}
	}
	return i
}

// saying is a line on its way to the host.
type saying struct {
	due  time.Time // real
	text string
}

// defaultLatency is how long an instrument takes to answer if its configuration does not say otherwise.
const defaultLatency = time.Millisecond

// Name is the device's name in the bench file.
func (a *actor) Name() string { return a.name }

// Plugged is false while the device's plug is pulled.
func (a *actor) Plugged() bool {
	a.w.mu.Lock()
	defer a.w.mu.Unlock()
	a.w.settle(a.w.Now())
	return !a.unplugged
}

// instant is the first instant of this device not before t (real time).
func (a *actor) instant(t time.Time) time.Time {
	d := (a.residue - t.UnixNano()%instantModulus) % instantModulus
	if d < 0 {
		d += instantModulus
	}
	return t.Add(time.Duration(d))
}

// own is the same for bench time.
func (a *actor) own(at time.Time) time.Time { return a.w.bench(a.instant(a.w.real(at))) }

// say queues an answer. Answers go out in turn, except where a trouble delays one.
func (a *actor) say(now time.Time, line string) {
	heard, troubles := a.wire.Pass(line)
	for _, t := range troubles {
		a.w.record(Record{At: now, Device: a.name, Kind: Troubled, Text: t.String(), Line: line})
	}
	open := false
	for _, h := range heard {
		end := a.end
		if h.Open {
			end = ""
		}
		a.queue(now.Add(a.latency), h.Delay, h.Line+end, open)
		open = h.Open
	}
}

// murmur queues a line that answers nothing.
func (a *actor) murmur(at time.Time, line string) { a.queue(at, 0, line+a.end, false) }

// queue puts a text on its way. Nothing overtakes the rest of an answer.
func (a *actor) queue(at time.Time, delay time.Duration, text string, rest bool) {
	due := a.w.real(at)
	if !due.After(a.last) {
		due = a.last.Add(1)
	}
	due = a.instant(due)
	if delay == 0 {
		a.last = due
	} else {
		due = a.instant(due.Add(delay / a.w.pace))
		if rest {
			a.last = due
		}
	}
	i, _ := slices.BinarySearchFunc(a.out, due, func(s saying, t time.Time) int {
		if s.due.After(t) {
			return 1
		}
		return -1
	})
	a.out = slices.Insert(a.out, i, saying{due, text})
}

// expect schedules a trouble of this device.
func (a *actor) expect(t trouble.Trouble) {
	at := a.w.origin.Add(t.At)
	if now := a.w.Now(); at.Before(now) {
		at = now
	}
	at = a.own(at)
	switch t.Kind {
	case trouble.Restart:
		a.w.at(at, a, func(at time.Time) {
			a.w.record(Record{At: at, Device: a.name, Kind: Restarted, Text: t.String()})
			a.powerCycle(at)
		})
	case trouble.RestartMoving:
		a.w.at(at, a, func(at time.Time) {
			switch {
			case a.moves == nil:
			case a.moves.turning(at):
				a.midway(at, t)
			default:
				a.moves.toRestart = &t
			}
		})
	case trouble.Unplug, trouble.Gone, trouble.Stranger:
		a.w.at(at, a, func(at time.Time) {
			a.pulled++
			a.unplugged = true
			a.w.record(Record{At: at, Device: a.name, Kind: Unplugged, Text: t.String()})
		})
		if t.Kind == trouble.Gone {
			break
		}
		a.w.at(a.own(at.Add(t.For)), nil, func(at time.Time) {
			if a.pulled--; a.pulled > 0 {
				return
			}
			a.unplugged = false
			a.w.record(Record{At: at, Device: a.name, Kind: Plugged, Text: t.String()})
		})
		if t.Kind == trouble.Stranger {
			a.w.at(a.own(at.Add(t.For)), nil, func(time.Time) { a.another = true })
		}
	case trouble.Silent, trouble.DeadLine:
		a.w.at(at, nil, func(time.Time) { a.deaf = append(a.deaf, &spell{trouble: t}) })
		if t.Kind == trouble.Silent {
			a.w.at(at.Add(t.For), nil, func(at time.Time) { a.over(&a.deaf, at, t) })
		}
	case trouble.Hung:
		a.w.at(at, a, func(at time.Time) {
			a.hung = append(a.hung, &spell{trouble: t})
			a.stall(true)
		})
		a.w.at(a.own(at.Add(t.For)), a, func(at time.Time) {
			a.waited()
			a.over(&a.hung, at, t)
			a.stall(len(a.hung) > 0)
		})
	case trouble.WrongGate, trouble.Overflow, trouble.StuckValue, trouble.StuckShutter:
		a.w.at(at, nil, func(time.Time) { a.spoilt = append(a.spoilt, &spell{trouble: t}) })
		if t.For > 0 {
			a.w.at(at.Add(t.For), nil, func(at time.Time) { a.over(&a.spoilt, at, t) })
		}
	}
}

// spell is a trouble from its time to its end. It takes effect when it first meets something.
type spell struct {
	trouble trouble.Trouble
	met     bool
}

// meet writes down, once, that the trouble took effect.
func (a *actor) meet(s *spell, at time.Time, line string) {
	if s == nil || s.met {
		return
	}
	s.met = true
	if i := strings.IndexByte(line, '\n'); i >= 0 {
		line = line[:i+1] // how many lines one read brings is the wire's affair, and no part of the night
	}
	a.w.record(Record{At: at, Device: a.name, Kind: Befell, Text: s.trouble.String(), Line: line})
}

// over ends a trouble, and says so if it ever took effect.
func (a *actor) over(among *[]*spell, at time.Time, t trouble.Trouble) {
	i := slices.IndexFunc(*among, func(s *spell) bool { return s.trouble == t })
	if i < 0 {
		return
	}
	if (*among)[i].met {
		a.w.record(Record{At: at, Device: a.name, Kind: Passed, Text: string(t.Kind)})
	}
	*among = slices.Delete(*among, i, i+1)
}

// spoils is the first trouble of a kind that waits or lasts.
func (a *actor) spoils(k trouble.Kind) *spell {
	if i := slices.IndexFunc(a.spoilt, func(s *spell) bool { return s.trouble.Kind == k }); i >= 0 {
		return a.spoilt[i]
	}
	return nil
}

// spoilOnce takes a trouble that happens to one thing and is over.
func (a *actor) spoilOnce(k trouble.Kind, at time.Time) *spell {
	s := a.spoils(k)
	if s != nil {
		a.meet(s, at, "")
		a.spoilt = slices.DeleteFunc(a.spoilt, func(other *spell) bool { return other == s })
	}
	return s
}

// midway restarts a controller in the middle of a motion.
func (a *actor) midway(at time.Time, t trouble.Trouble) {
	a.w.record(Record{At: at, Device: a.name, Kind: Restarted, Text: t.String()})
	a.powerCycle(at)
}

// stall lets the host's writes hang, or go on. What hung is heard then.
func (a *actor) stall(on bool) {
	if c, ok := a.conn.(stalling); ok {
		c.Stall(on)
	}
}

// waited looks whether something that was written hung meanwhile.
func (a *actor) waited() {
	if len(a.hung) == 0 {
		return
	}
	if c, ok := a.conn.(stalling); ok {
		if since, waited := c.Waited(); waited {
			a.meet(a.hung[0], a.w.bench(since), "")
		}
	}
}

func (a *actor) powerCycle(at time.Time) {
	a.restarts++
	a.out = nil
	a.deafUntil = at.Add(a.boot)
	a.restart(at)
	if a.hello != nil {
		a.murmur(at.Add(a.boot), a.hello())
	}
}

// poke makes Serve look again. The world's lock is held.
func (a *actor) poke() {
	a.dirty = true
	if a.conn != nil {
		_ = a.conn.SetReadDeadline(time.Unix(1, 0))
	}
}

// Serve is the one loop of all instruments: send what is due, then wait for bytes or for the
// next thing that is due.
func (a *actor) Serve(ctx context.Context, conn Conn) error {
	a.w.mu.Lock()
	a.conn = conn
	if len(a.hung) > 0 {
		a.stall(true)
	}
	now := time.Now()
	a.out = slices.DeleteFunc(a.out, func(s saying) bool { return s.due.Before(now) }) // said to nobody
	a.w.mu.Unlock()
	defer func() {
		a.w.mu.Lock()
		a.waited()
		a.conn = nil
		a.w.mu.Unlock()
	}()
	stop := context.AfterFunc(ctx, func() {
		a.w.mu.Lock()
		a.poke()
		a.w.mu.Unlock()
	})
	defer stop()
	buf := make([]byte, 4096)
	for {
		send, wake, plugged := a.turn()
		if !plugged {
			_ = conn.Close()
			return ErrUnplugged
		}
		if len(send) > 0 {
			if _, err := conn.Write(send); err != nil && !errors.Is(err, os.ErrDeadlineExceeded) {
				return ended(err)
			}
		}
		_ = conn.SetReadDeadline(wake)
		if a.again(ctx) {
			if ctx.Err() != nil {
				return context.Cause(ctx)
			}
			continue
		}
		n, err := conn.Read(buf)
		if n > 0 {
			a.take(buf[:n])
		}
		if err != nil && !errors.Is(err, os.ErrDeadlineExceeded) {
			return ended(err)
		}
	}
}

// ended says whether a connection ended in a way that is nobody's fault.
func ended(err error) error {
	if errors.Is(err, io.EOF) || errors.Is(err, os.ErrClosed) || errors.Is(err, syscall.EIO) || errors.Is(err, syscall.EPIPE) || errors.Is(err, syscall.ECONNRESET) {
		return nil
	}
	return err
}

// again says that the loop has to look once more before it waits.
func (a *actor) again(ctx context.Context) bool {
	a.w.mu.Lock()
	defer a.w.mu.Unlock()
	dirty := a.dirty
	a.dirty = false
	return dirty || ctx.Err() != nil
}

// turn lets time come up to now, and returns what is due to be sent and when to wake next.
func (a *actor) turn() (send []byte, wake time.Time, plugged bool) {
	a.w.mu.Lock()
	defer a.w.mu.Unlock()
	real := time.Now()
	a.w.settle(a.w.bench(real))
	if a.unplugged {
		return nil, time.Time{}, false
	}
	n := 0
	for n < len(a.out) && !a.out[n].due.After(real) {
		send = append(send, a.out[n].text...)
		n++
	}
	a.out = slices.Delete(a.out, 0, n)
	if at, ok := a.w.nextFor(a); ok {
		wake = a.instant(a.w.real(at))
	}
	if len(a.out) > 0 && (wake.IsZero() || a.out[0].due.Before(wake)) {
		wake = a.out[0].due
	}
	return send, wake, true
}

func (a *actor) take(b []byte) {
	a.w.mu.Lock()
	defer a.w.mu.Unlock()
	now := a.w.Now()
	a.w.settle(now)
	switch {
	case a.unplugged || now.Before(a.deafUntil):
		return
	case len(a.deaf) > 0:
		a.meet(a.deaf[0], now, string(b))
		return
	case len(a.hung) > 0:
		// A line of the system's takes what is written to it, up to its buffer: nobody hears it.
		if _, ok := a.conn.(stalling); !ok {
			a.meet(a.hung[0], now, string(b))
			return
		}
	}
	for _, c := range b {
		a.hear(now, c)
	}
	a.w.forget(now)
}

// lines collects bytes into lines that end with NL or CR NL, up to a length.
type lines struct {
	limit   int
	partial []byte
	over    bool
}

// add takes one byte; at a line's end it returns the line, and whether it was cut at the limit.
func (l *lines) add(b byte) (line string, tooLong, complete bool) {
	if b != '\n' {
		if len(l.partial) < l.limit {
			l.partial = append(l.partial, b)
		} else {
			l.over = true
		}
		return "", false, false
	}
	line, tooLong = string(l.partial), l.over
	l.clear()
	if n := len(line); n > 0 && line[n-1] == '\r' {
		line = line[:n-1]
	}
	return line, tooLong, true
}

func (l *lines) clear() {
	l.partial = l.partial[:0]
	l.over = false
}
