package trouble

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// Parse reads a list as String prints it. Spaces and line ends between troubles are free. Each
// kind takes its arguments in one order:
//
//	missing(DEVICE, answer N)                 restart(DEVICE, at TIME)
//	duplicated(DEVICE, answer N)              unplug(DEVICE, at TIME, for TIME)
//	late(DEVICE, answer N, by TIME)           lamp(at TIME, for TIME, rate NUMBER Hz)
//	garbled(DEVICE, answer N, byte I as "c")  slip(AXIS, at TIME, by NUMBER deg)
//	unasked(DEVICE, answer N, line "TEXT")    lost_steps(AXIS, at TIME, by NUMBER deg)
//	                                          pump_drift(at TIME, for TIME, share NUMBER)
//
// TIME is a time as Go prints it, such as 2h13m or 230ms. An error says at which character of
// the list reading stopped.
func Parse(text string) (List, error) {
	p := &parser{text: text}
	var l List
	p.spaces()
	for p.at < len(p.text) {
		t := p.trouble()
		if p.err != nil {
			return nil, p.err
		}
		l = append(l, t)
		p.spaces()
		if p.at == len(p.text) {
			break
		}
		p.literal(";")
		p.spaces()
		if p.err != nil {
			return nil, p.err
		}
	}
	return l, nil
}

type parser struct {
	text string
	at   int
	err  error
}

func (p *parser) fail(format string, a ...any) {
	if p.err == nil {
		p.err = fmt.Errorf("trouble list, character %d: %s", p.at+1, fmt.Sprintf(format, a...))
	}
}

func (p *parser) spaces() {
	for p.at < len(p.text) && strings.IndexByte(" \t\r\n", p.text[p.at]) >= 0 {
		p.at++
	}
}

func (p *parser) literal(s string) {
	p.spaces()
	if p.err != nil {
		return
	}
	if !strings.HasPrefix(p.text[p.at:], s) {
		p.fail("found %q; want %q", p.rest(), s)
		return
	}
	p.at += len(s)
	p.spaces()
}

func (p *parser) rest() string {
	r := p.text[p.at:]
	return r[:min(len(r), 12)]
}

// word takes everything up to a character that ends an argument.
func (p *parser) word(want string) string {
	p.spaces()
	n := strings.IndexAny(p.text[p.at:], " \t\r\n,();\"")
	if n < 0 {
		n = len(p.text) - p.at
	}
	w := p.text[p.at : p.at+n]
	if w == "" {
		p.fail("found %q; want %s", p.rest(), want)
	}
	p.at += n
	return w
}

func (p *parser) whole(want string) int {
	w := p.word(want)
	n, err := strconv.Atoi(w)
	if err != nil || n < 0 {
		p.fail("found %q; want %s", w, want)
	}
	return n
}

func (p *parser) number(want string) float64 {
	w := p.word(want)
	x, err := strconv.ParseFloat(w, 64)
	if err != nil || math.IsNaN(x) || math.IsInf(x, 0) {
		p.fail("found %q; want %s", w, want)
	}
	return x
}

func (p *parser) time(key string) time.Duration {
	p.literal(key)
	w := p.word("a time such as 2h13m")
	d, err := time.ParseDuration(w)
	if err != nil || d < 0 {
		p.fail("found %q; want a time such as 2h13m", w)
	}
	return d
}

func (p *parser) quoted() string {
	p.spaces()
	q, err := strconv.QuotedPrefix(p.text[p.at:])
	if err != nil || q[0] != '"' {
		p.fail("found %q; want a text in quotes", p.rest())
		return ""
	}
	p.at += len(q)
	s, _ := strconv.Unquote(q)
	return s
}

func (p *parser) trouble() Trouble {
	t := Trouble{Kind: Kind(p.word("a kind of trouble"))}
	p.literal("(")
	switch t.Kind {
	case Missing, Garbled, Late, Duplicated, Unasked:
		t.Device = p.word("a device")
		p.literal(",")
		p.literal("answer")
		if t.Answer = p.whole("the number of an answer, from 1"); t.Answer < 1 {
			p.fail("answer 0; answers count from 1")
		}
	case Restart, Unplug, Slip, LostSteps:
		t.Device = p.word("a device or axis")
		p.literal(",")
		t.At = p.time("at")
	case Lamp, PumpDrift:
		t.At = p.time("at")
	default:
		p.fail("%q is no kind of trouble; there are missing, garbled, late, duplicated, unasked, restart, lamp, unplug, slip, lost_steps and pump_drift", t.Kind)
	}
	switch t.Kind {
	case Garbled:
		p.literal(",")
		p.literal("byte")
		t.Byte = p.whole("a place in the line, from 0")
		p.literal("as")
		s := []rune(p.quoted())
		if len(s) != 1 || s[0] > 255 {
			p.fail("found %q; want one byte in quotes", string(s))
		} else {
			t.As = byte(s[0])
		}
	case Late:
		p.literal(",")
		t.By = p.time("by")
	case Unasked:
		p.literal(",")
		p.literal("line")
		t.Text = p.quoted()
	case Lamp:
		p.literal(",")
		t.For = p.time("for")
		p.literal(",")
		p.literal("rate")
		t.RateHz = p.number("a rate")
		p.literal("Hz")
	case Unplug:
		p.literal(",")
		t.For = p.time("for")
	case Slip, LostSteps:
		p.literal(",")
		p.literal("by")
		t.ByDeg = p.number("an angle")
		p.literal("deg")
	case PumpDrift:
		p.literal(",")
		t.For = p.time("for")
		p.literal(",")
		p.literal("share")
		t.Share = p.number("a share")
	}
	p.literal(")")
	return t
}
