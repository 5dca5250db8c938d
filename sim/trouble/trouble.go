// Package trouble says what can go wrong on a simulated night: on the wire (one answer line
// becomes another, none, a late one, two, or comes behind a line nobody asked for) and in the
// world (a controller restarts, the lamp is switched on, an axis slips, a plug is pulled).
//
// It promises that a list of troubles prints itself as one line that reads back to the same
// list, that drawing from the same generator gives the same list, and that a trouble happens
// once. Wire troubles touch answers only, never what was sent to an instrument. It has no clock
// and starts nothing: package instruments lets the troubles happen.
package trouble

import (
	"fmt"
	"strconv"
	"strings"
	"time"
)

// Kind is what goes wrong. The text is the word of the list's grammar.
type Kind string

// Wire troubles: one answer line of one device, numbered from 1 since the device's first power-on.
const (
	Missing    Kind = "missing"    // the answer never comes
	Garbled    Kind = "garbled"    // one byte of the answer is another byte
	Late       Kind = "late"       // the answer comes By later than it would have
	Duplicated Kind = "duplicated" // the answer comes twice
	Unasked    Kind = "unasked"    // a line nobody asked for comes just before the answer
)

// World troubles, at a bench time since the world began.
const (
	Restart   Kind = "restart"    // a device starts anew: a stage loses its zero, a counter its gate
	Lamp      Kind = "lamp"       // somebody turns the light on For a while, with RateHz at each open detector
	Unplug    Kind = "unplug"     // the device's line is gone For a while
	Slip      Kind = "slip"       // an axis is pushed ByDeg; its controller's count does not know
	LostSteps Kind = "lost_steps" // like a slip, but in the first move that is under way at At or begins later
	PumpDrift Kind = "pump_drift" // the pump's power changes by the share Share, evenly over For, and stays there
)

// Kinds lists them all, wire troubles first.
func Kinds() []Kind {
	return []Kind{Missing, Garbled, Late, Duplicated, Unasked, Restart, Lamp, Unplug, Slip, LostSteps, PumpDrift}
}

// Trouble is one thing that goes wrong. Which fields count depends on the kind; the others are zero.
type Trouble struct {
	Kind   Kind
	Device string // the device's, or for Slip and LostSteps the axis's, name in the bench file

	Answer int           // wire troubles: number of the answer line
	By     time.Duration // Late, in bench time
	Byte   int           // Garbled: index into the line, modulo its length
	As     byte          // Garbled: what that byte becomes, or the next digit if it is that already
	Text   string        // Unasked: the line, without its end

	At     time.Duration // world troubles: bench time since the world began
	For    time.Duration
	RateHz float64 // Lamp
	ByDeg  float64 // Slip, LostSteps: bench degrees
	Share  float64 // PumpDrift: -0.1 is 10 % less
}

// List is what goes wrong in one night.
type List []Trouble

// Wired says whether the trouble happens to an answer line.
func (t Trouble) Wired() bool {
	switch t.Kind {
	case Missing, Garbled, Late, Duplicated, Unasked:
		return true
	}
	return false
}

// String prints the trouble as the grammar of Parse reads it.
func (t Trouble) String() string {
	var args []string
	arg := func(format string, a ...any) { args = append(args, fmt.Sprintf(format, a...)) }
	if t.Wired() {
		arg("%s", t.Device)
		arg("answer %d", t.Answer)
	} else {
		if t.Device != "" {
			arg("%s", t.Device)
		}
		arg("at %s", duration(t.At))
	}
	switch t.Kind {
	case Garbled:
		arg("byte %d as %s", t.Byte, strconv.Quote(string(rune(t.As))))
	case Late:
		arg("by %s", duration(t.By))
	case Unasked:
		arg("line %s", strconv.Quote(t.Text))
	case Lamp:
		arg("for %s", duration(t.For))
		arg("rate %s Hz", number(t.RateHz))
	case Unplug:
		arg("for %s", duration(t.For))
	case Slip, LostSteps:
		arg("by %s deg", number(t.ByDeg))
	case PumpDrift:
		arg("for %s", duration(t.For))
		arg("share %s", number(t.Share))
	}
	return string(t.Kind) + "(" + strings.Join(args, ", ") + ")"
}

// String prints the list on one line, such as
//
//	late(counter, answer 412, by 230ms); lamp(at 2h13m, for 40s, rate 250000 Hz)
func (l List) String() string {
	parts := make([]string, len(l))
	for i, t := range l {
		parts[i] = t.String()
	}
	return strings.Join(parts, "; ")
}

// duration prints as time.Duration does, without the zero minutes and seconds it appends.
func duration(d time.Duration) string {
	s := d.String()
	if strings.HasSuffix(s, "m0s") {
		s = s[:len(s)-2]
	}
	if strings.HasSuffix(s, "h0m") {
		s = s[:len(s)-2]
	}
	return s
}

func number(x float64) string { return strconv.FormatFloat(x, 'g', -1, 64) }
