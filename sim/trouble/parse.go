package trouble

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"
)

// Parse reads a list as String prints it. Spaces and line ends between troubles are free. Each
// kind takes its arguments in one order:
//
//	missing(DEVICE, answer N)                   restart(DEVICE, at TIME)
//	duplicated(DEVICE, answer N)                restart_moving(DEVICE, at TIME)
//	late(DEVICE, answer N, by TIME)             unplug(DEVICE, at TIME, for TIME)
//	garbled(DEVICE, answer N, byte I as "c")    gone(DEVICE, at TIME)
//	split(DEVICE, answer N, byte I, by TIME)    stranger(DEVICE, at TIME, for TIME)
//	unasked(DEVICE, answer N, line "TEXT")      silent(DEVICE, at TIME, for TIME)
//	slip(AXIS, at TIME, by NUMBER deg)          dead_line(DEVICE, at TIME)
//	lost_steps(AXIS, at TIME, by NUMBER deg)    hung(DEVICE, at TIME, for TIME)
//	stall(AXIS, at TIME)                        wrong_gate(COUNTER, at TIME, share NUMBER)
//	lamp(at TIME, for TIME, rate NUMBER Hz)     overflow(COUNTER, at TIME)
//	pump_drift(at TIME, for TIME, share NUMBER) latched(ARM, at TIME, for TIME)
//	mode_hop(at TIME, by NUMBER nm)             stuck_value(SENSOR, at TIME, for TIME)
//	temperature_drift(at TIME, for TIME, by NUMBER Cel)
//	                                            stuck_shutter(SHUTTER, at TIME, for TIME)
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
	switch {
	case !slices.Contains(Kinds(), t.Kind):
		p.fail("%q is no kind of trouble; there are %s", t.Kind, join(Kinds()))
	case t.Wired():
		t.Device = p.word("a device")
		p.literal(",")
		p.literal("answer")
		if t.Answer = p.whole("the number of an answer, from 1"); t.Answer < 1 {
			p.fail("answer 0; answers count from 1")
		}
	default:
		if t.Kind.OfAxis() || t.Kind.OfDevice() || t.Kind == Latched {
			t.Device = p.word("a device, axis or arm")
			p.literal(",")
		}
		t.At = p.time("at")
	}
	if t.Kind.lasts() {
		p.literal(",")
		t.For = p.time("for")
	}
	amount := func(key, want, unit string) float64 {
		p.literal(",")
		p.literal(key)
		x := p.number(want)
		p.literal(unit)
		return x
	}
	switch t.Kind {
	case Garbled, Split:
		p.literal(",")
		p.literal("byte")
		t.Byte = p.whole("a place in the line, from 0")
		if t.Kind == Split {
			p.literal(",")
			t.By = p.time("by")
			break
		}
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
		t.RateHz = amount("rate", "a rate", "Hz")
	case Slip, LostSteps:
		t.ByDeg = amount("by", "an angle", "deg")
	case ModeHop:
		t.ByNm = amount("by", "a change of wavelength", "nm")
	case TemperatureDrift:
		t.ByCel = amount("by", "a change of temperature", "Cel")
	case PumpDrift, WrongGate:
		t.Share = amount("share", "a share", "")
	}
	p.literal(")")
	return t
}

func join(kinds []Kind) string {
	words := make([]string, len(kinds))
	for i, k := range kinds {
		words[i] = string(k)
	}
	last := len(words) - 1
	return strings.Join(words[:last], ", ") + " and " + words[last]
}
