package instruments

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// PlainConfig describes a Plain.
type PlainConfig struct {
	Name     string
	Identity Identity
	Axes     []AxisConfig // Letter is the axis's address, digits
	Latency  time.Duration
	Boot     time.Duration // from power to READY; 0 is 1.2 s
	Chatter  time.Duration // prints "T=21.4" this often, unasked; 0: never
}

// Plain is a motion controller with a small language of its own: one letter, the axis's address,
// and whole numbers of 0.0001 degree. A line ends with LF or CR LF, answers end with LF. Each
// axis moves on its own.
//
//	P1           -> P1234500        where axis 1 is, in 0.0001 deg of the controller
//	M1 1234500   -> OK              accepted; the axis goes there
//	S1           -> IDLE, or RAMP while it speeds up or slows down, or BUSY
//	H1           -> OK              searches the reference
//	R1           -> OK              searches the reference and keeps the zero: when IDLE, P1 tells
//	                                what it reads there
//	Z1           -> 1 or 0          whether the axis knows its zero
//	X            -> OK              stops all axes; the byte 0x18 does the same at once, even in
//	                                the middle of a line, which it clears, and has no answer
//	I            -> I<maker>,<model>,<serial>,<firmware>
//
// A refusal is E and a number: E1 unknown word, E2 no such address, E3 no number, E4 outside the
// controller's limits, E5 no reference, E6 not now. READY comes unasked after a restart, which
// loses the zero of every axis, and T=21.4 as often as its configuration says.
type Plain struct {
	actor
	mechanism
	cfg PlainConfig
	in  lines
}

// The numbers of Plain's refusals.
const (
	plainUnknown = "E1"
	plainAddress = "E2"
	plainNumber  = "E3"
	plainLimit   = "E4"
	plainZero    = "E5"
	plainNotNow  = "E6"
)

const plainUnitsPerDeg = 10000

// NewPlain puts a Plain into the world.
func NewPlain(w *World, cfg PlainConfig) (*Plain, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	p := &Plain{cfg: cfg, in: lines{limit: 64}}
	for i, a := range cfg.Axes {
		if a.Letter == "" || strings.Trim(a.Letter, "0123456789") != "" {
			return nil, fmt.Errorf("%s: address %q of axis %s; want digits", cfg.Name, a.Letter, a.Axis)
		}
		for _, b := range cfg.Axes[:i] {
			if a.Letter == b.Letter {
				return nil, fmt.Errorf("%s: axes %s and %s at address %s; want one each", cfg.Name, b.Axis, a.Axis, a.Letter)
			}
		}
	}
	p.actor = actor{name: cfg.Name, latency: orDefault(cfg.Latency, defaultLatency), boot: orDefault(cfg.Boot, 1200*time.Millisecond),
		end: "\n", hear: p.heard, restart: func(now time.Time) { p.in.clear(); p.lose(now) }, hello: func() string { return "READY" }}
	if err := w.join(&p.actor); err != nil {
		return nil, err
	}
	p.mechanism = mechanism{name: cfg.Name, w: w, owner: &p.actor}
	p.moves = &p.mechanism
	for _, a := range cfg.Axes {
		x, err := w.newAxis(a)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", cfg.Name, err)
		}
		p.mechanism.axes = append(p.mechanism.axes, x)
	}
	p.chatter(cfg.Chatter, "T=21.4")
	return p, nil
}

func (p *Plain) heard(now time.Time, b byte) {
	if b == 0x18 {
		p.in.clear()
		p.halt(now)
		return
	}
	line, tooLong, complete := p.in.add(b)
	if !complete || line == "" {
		return
	}
	answer := plainUnknown
	if !tooLong {
		answer = p.do(now, line)
	}
	if strings.HasPrefix(answer, "E") {
		p.actor.w.record(Record{At: now, Device: p.cfg.Name, Kind: Refused, Line: line, Text: answer})
	}
	p.say(now, answer)
}

func (p *Plain) halt(now time.Time) {
	p.actor.w.record(Record{At: now, Device: p.cfg.Name, Kind: Stopped})
	p.stop(now)
}

func (p *Plain) do(now time.Time, line string) string {
	switch line {
	case "I":
		return "I" + p.identify(p.cfg.Identity).String()
	case "X":
		p.halt(now)
		return "OK"
	}
	if !strings.ContainsRune("PMSHZR", rune(line[0])) {
		return plainUnknown
	}
	address, rest, more := strings.Cut(line[1:], " ")
	x := p.named(address)
	if x == nil {
		return plainAddress
	}
	if more != (line[0] == 'M') {
		return plainNumber
	}
	switch line[0] {
	case 'P':
		return "P" + strconv.FormatFloat(math.Round(x.reading(now)*plainUnitsPerDeg)+0, 'f', 0, 64)
	case 'S':
		switch turning, ramping := x.path.moving(now); {
		case ramping:
			return "RAMP"
		case turning:
			return "BUSY"
		}
		return "IDLE"
	case 'H':
		if p.home(now, x) != "" {
			return plainNotNow
		}
		return "OK"
	case 'R':
		switch {
		case !x.homed:
			return plainZero
		case p.mark(now, x) != "":
			return plainNotNow
		}
		return "OK"
	case 'Z':
		return bit(x.homed)
	}
	n, err := strconv.ParseInt(rest, 10, 32)
	if err != nil || strings.HasPrefix(rest, "+") {
		return plainNumber
	}
	deg := float64(n) / plainUnitsPerDeg
	switch {
	case !x.homed && p.searching() == nil:
		return plainZero
	case deg < x.cfg.LowDeg || deg > x.cfg.HighDeg:
		return plainLimit
	case p.move(now, []target{{x, deg}}, 0) != "":
		return plainNotNow
	}
	return "OK"
}
