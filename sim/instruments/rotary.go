package instruments

import (
	"fmt"
	"slices"
	"strings"
	"time"
)

// RotaryConfig describes a Rotary.
type RotaryConfig struct {
	Name     string
	Identity Identity
	Axes     []AxisConfig // one to four; letters A, B, C, and U for a fourth
	Together bool         // axes of one line start and finish together [3.5.1]; else each on its own
	Latency  time.Duration
	Boot     time.Duration // from power to HELLO; 0 is 1.2 s
	Chatter  time.Duration // prints "T=21.4" this often, unasked; 0: never
}

// Rotary is a motion controller that takes RS-274/NGC lines for rotary axes: G0 G1 G90 G94 G20
// G21 G54 G92.1, F (degrees per minute, G94), A B C and U. A line ends with LF or CR LF, answers
// end with LF. What the standard leaves open are words of its own:
//
//	G90 G0 A12.34     -> TAKEN, once the line was understood and accepted (not: done)
//	                  -> REFUSED <reason>, and nothing moves
//	WHERE             -> AT A+012.3400 B-003.0000 C+000.0000 (controller degrees, each axis)
//	REST              -> STILL, or TURNING while anything moves or waits to move
//	REF A             -> TAKEN; the axis searches its reference; REST and REFD tell when it is done
//	MARK A            -> TAKEN; the same search, but the zero stays as it is: at rest, the axis stands at
//	                     its reference mark, and WHERE tells what it reads there
//	REFD              -> REFD A1 B1 C0 (1: the axis knows its zero)
//	WHO               -> WHO <maker>,<model>,<serial>,<firmware>
//	byte 0x03         stops everything at once, also in the middle of a line, which it clears;
//	                  no answer
//	HELLO <model>     unasked, after a restart, which loses the zero of every axis: the reading
//	                  starts from 0 where the axis stands
//
// Moves without a reference are refused. A blank line has no answer.
type Rotary struct {
	actor
	mechanism
	cfg     RotaryConfig
	in      lines
	letters string

	motion int // 0, 10, or -1 before the first G0 or G1
	feed   float64
}

// Letters of the standard, and the fourth that a Rotary may have beside them.
const rotaryLetters = "ABCU"

// NewRotary puts a Rotary into the world.
func NewRotary(w *World, cfg RotaryConfig) (*Rotary, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	r := &Rotary{cfg: cfg, in: lines{limit: maxBlock + 1}}
	if len(cfg.Axes) < 1 || len(cfg.Axes) > 4 {
		return nil, fmt.Errorf("%s: %d axes; want one to four", cfg.Name, len(cfg.Axes))
	}
	for _, a := range cfg.Axes {
		if len(a.Letter) != 1 || !strings.Contains(rotaryLetters, a.Letter) || strings.Contains(r.letters, a.Letter) {
			return nil, fmt.Errorf("%s: letter %q of axis %s; want a different one of A, B, C and U for each", cfg.Name, a.Letter, a.Axis)
		}
		r.letters += a.Letter
	}
	r.actor = actor{name: cfg.Name, latency: orDefault(cfg.Latency, defaultLatency), boot: orDefault(cfg.Boot, 1200*time.Millisecond),
		end: "\n", hear: r.heard, restart: r.restarted, hello: func() string { return "HELLO " + cfg.Identity.Model }}
	if err := w.join(&r.actor); err != nil {
		return nil, err
	}
	r.mechanism = mechanism{name: cfg.Name, w: w, together: cfg.Together, owner: &r.actor}
	r.moves = &r.mechanism
	for _, a := range cfg.Axes {
		x, err := w.newAxis(a)
		if err != nil {
			return nil, fmt.Errorf("%s: %w", cfg.Name, err)
		}
		r.mechanism.axes = append(r.mechanism.axes, x)
	}
	r.reset()
	r.chatter(cfg.Chatter, "T=21.4")
	return r, nil
}

func (r *Rotary) reset() { r.in.clear(); r.motion, r.feed = -1, 0 }

func (r *Rotary) restarted(now time.Time) {
	r.reset()
	r.lose(now)
}

func (r *Rotary) heard(now time.Time, b byte) {
	if b == 0x03 {
		r.in.clear()
		r.actor.w.record(Record{At: now, Device: r.cfg.Name, Kind: Stopped})
		r.stop(now)
		return
	}
	line, tooLong, complete := r.in.add(b)
	if !complete {
		return
	}
	if tooLong {
		r.refuse(now, line, fmt.Sprintf("line longer than %d characters", maxBlock))
		return
	}
	word, rest, _ := strings.Cut(strings.ToUpper(strings.TrimSpace(line)), " ")
	switch rest = strings.TrimSpace(rest); {
	case word == "":
	case word == "WHO" && rest == "":
		r.say(now, "WHO "+r.identify(r.cfg.Identity).String())
	case word == "WHERE" && rest == "":
		var at strings.Builder
		at.WriteString("AT")
		for _, x := range r.mechanism.axes {
			fmt.Fprintf(&at, " %s%s", x.cfg.Letter, signed(x.reading(now)))
		}
		r.say(now, at.String())
	case word == "REST" && rest == "":
		if r.turning(now) {
			r.say(now, "TURNING")
		} else {
			r.say(now, "STILL")
		}
	case word == "REFD" && rest == "":
		var refd strings.Builder
		refd.WriteString("REFD")
		for _, x := range r.mechanism.axes {
			refd.WriteString(" " + x.cfg.Letter + bit(x.homed))
		}
		r.say(now, refd.String())
	case word == "REF" || word == "MARK":
		x := r.named(rest)
		if x == nil {
			r.refuse(now, line, fmt.Sprintf("no axis %q", rest))
			return
		}
		search := r.home
		if word == "MARK" {
			search = r.mark
		}
		r.answer(now, line, search(now, x))
	default:
		b, err := parseBlock(line, r.letters)
		if err != nil {
			r.refuse(now, line, err.Error())
			return
		}
		if b.empty && !b.deleted {
			return
		}
		r.answer(now, line, r.run(now, b))
	}
}

func (r *Rotary) answer(now time.Time, line, refusal string) {
	if refusal != "" {
		r.refuse(now, line, refusal)
		return
	}
	r.say(now, "TAKEN")
}

func (r *Rotary) refuse(now time.Time, line, reason string) {
	r.actor.w.record(Record{At: now, Device: r.cfg.Name, Kind: Refused, Line: line, Text: reason})
	r.say(now, "REFUSED "+reason)
}

// run executes a block. The order is fixed: F, then modes, then motion [3.8]. A line that is
// refused changes nothing. A deleted block is skipped.
func (r *Rotary) run(now time.Time, b block) (refusal string) {
	if b.deleted {
		return ""
	}
	motion, feed := r.motion, r.feed
	if b.hasFeed {
		feed = b.feed
	}
	asked := false
	for _, g := range b.gs {
		if groupOf[g] == 1 {
			motion, asked = g, true
		}
	}
	switch {
	case asked && len(b.axes) == 0:
		return "G0 or G1 without an axis word" // [3.5.1, 3.5.2]
	case len(b.axes) > 0 && motion < 0:
		return "axis words before any G0 or G1"
	case len(b.axes) > 0 && motion == 10 && feed == 0:
		return "G1 without F"
	}
	if len(b.axes) > 0 {
		var targets []target
		for _, w := range b.axes {
			targets = append(targets, target{r.named(w.letter), w.deg})
		}
		slices.SortFunc(targets, func(a, b target) int { return strings.Compare(a.axis.cfg.Letter, b.axis.cfg.Letter) })
		rate := 0.0
		if motion == 10 {
			rate = feed
		}
		if refusal := r.move(now, targets, rate); refusal != "" {
			return refusal
		}
	}
	r.motion, r.feed = motion, feed
	return ""
}

// signed prints an angle with its sign, three digits, and four decimals.
func signed(deg float64) string {
	s := fmt.Sprintf("%+09.4f", deg)
	if s == "-000.0000" {
		return "+000.0000"
	}
	return s
}

func bit(b bool) string {
	if b {
		return "1"
	}
	return "0"
}

func orDefault(d, otherwise time.Duration) time.Duration {
	if d == 0 {
		return otherwise
	}
	return d
}

// chatter makes the device print a line unasked, again and again.
func (a *actor) chatter(every time.Duration, line string) {
	if every <= 0 {
		return
	}
	var next func(at time.Time)
	next = func(at time.Time) {
		if a.conn != nil && !at.Before(a.deafUntil) {
			a.murmur(at, line)
		}
		a.w.at(a.own(at.Add(every)), a, next)
	}
	a.w.at(a.own(a.w.Now().Add(every)), a, next)
}
