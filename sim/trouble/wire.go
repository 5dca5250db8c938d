package trouble

import "time"

// Heard is one line as the host gets it, or a part of one.
type Heard struct {
	Line  string
	Open  bool          // its line goes on: what comes next is the rest of it
	Delay time.Duration // beyond the moment at which the untroubled answer would have come; bench time
}

// Wire is what happens to one device's answers. It counts them, so every answer must pass
// through it, in order. It belongs to one goroutine at a time.
type Wire struct {
	device string
	list   map[int]List
	answer int

	// The last garbling and what it made, so that the next one differs.
	lastLine, lastHeard string
}

// Wire picks the device's wire troubles out of the list.
func (l List) Wire(device string) *Wire {
	w := &Wire{device: device, list: map[int]List{}}
	for _, t := range l {
		if t.Wired() && t.Device == device {
			w.list[t.Answer] = append(w.list[t.Answer], t)
		}
	}
	return w
}

// Answers is how many answers have passed.
func (w *Wire) Answers() int { return w.answer }

// Pass returns what the host hears of the next answer, in order, and the troubles that took
// effect. Several troubles of one answer act in the order of the list; an answer that is missing
// is neither late nor doubled.
//
// No two garblings in a row make the same line out of the same line: asking twice protects
// against single corruptions, not against a wire that conspires.
func (w *Wire) Pass(line string) ([]Heard, List) {
	w.answer++
	heard := []Heard{{Line: line}}
	troubles := w.list[w.answer]
	for _, t := range troubles {
		switch t.Kind {
		case Missing:
			heard = nil
		case Garbled:
			for i := range heard {
				heard[i].Line = w.garble(heard[i].Line, t)
			}
		case Late:
			for i := range heard {
				heard[i].Delay += t.By
			}
		case Split:
			heard = split(heard, t)
		case Duplicated:
			heard = append(heard, heard...)
		case Unasked:
			heard = append([]Heard{{Line: t.Text}}, heard...)
		}
	}
	return heard, troubles
}

// split breaks the last line in two.
func split(heard []Heard, t Trouble) []Heard {
	if len(heard) == 0 || heard[len(heard)-1].Line == "" {
		return heard
	}
	last := &heard[len(heard)-1]
	at := t.Byte % len(last.Line)
	rest := Heard{Line: last.Line[at:], Delay: last.Delay + t.By}
	last.Line, last.Open = last.Line[:at], true
	return append(heard, rest)
}

func (w *Wire) garble(line string, t Trouble) string {
	if line == "" {
		return line
	}
	b := []byte(line)
	i := t.Byte % len(b)
	as := t.As
	for range 12 {
		if as != line[i] {
			b[i] = as
			if s := string(b); w.lastLine != line || w.lastHeard != s {
				w.lastLine, w.lastHeard = line, s
				return s
			}
		}
		as = nextDigit(as)
	}
	return string(b)
}

// nextDigit goes round the digits, and from anything else to the digits.
func nextDigit(b byte) byte {
	if b < '0' || b >= '9' {
		return '0'
	}
	return b + 1
}
