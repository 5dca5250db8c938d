// Package trouble says what can go wrong on a simulated night: on the wire (one answer line
// becomes another, none, a late one, two, two halves, or comes behind a line nobody asked for) and in the
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
	Split      Kind = "split"      // the answer breaks off before Byte, and goes on By later
)

// World troubles, at a bench time since the world began.
const (
	Restart   Kind = "restart"    // a device starts anew: a stage loses its zero, a counter its gate
	Lamp      Kind = "lamp"       // somebody turns the light on For a while, with RateHz at each open detector
	Unplug    Kind = "unplug"     // the device's line is gone For a while
	Slip      Kind = "slip"       // an axis is pushed ByDeg; its controller's count does not know
	LostSteps Kind = "lost_steps" // like a slip, but in the first move that is under way at At or begins later
	PumpDrift Kind = "pump_drift" // the pump's power changes by the share Share, evenly over For, and stays there

	RestartMoving    Kind = "restart_moving"    // like a restart, but in the first move that is under way at At or begins later
	Stall            Kind = "stall"             // an axis stops short in the first move that is under way at At or begins later
	ModeHop          Kind = "mode_hop"          // the pump's wavelength jumps ByNm; its power stays
	TemperatureDrift Kind = "temperature_drift" // the crystal's temperature changes ByCel, evenly over For, and stays there
	Gone             Kind = "gone"              // the device's line is gone for ever
	Stranger         Kind = "stranger"          // the device's line is gone For a while, and then another instrument answers there
	Silent           Kind = "silent"            // the device neither hears nor answers For a while; its line can be opened
	DeadLine         Kind = "dead_line"         // the same for ever
	Hung             Kind = "hung"              // what is written to the device's line hangs For a while; hearing nothing on a line of the system's
	WrongGate        Kind = "wrong_gate"        // the first gate that opens at At or later is longer than it was set by the share Share
	Overflow         Kind = "overflow"          // a channel runs over in the first gate that ends at At or later; the counter's status says so
	Latched          Kind = "latched"           // the detector of an arm gives next to nothing in light, For a while
	StuckValue       Kind = "stuck_value"       // a sensor measures what it measured last, For a while
	StuckShutter     Kind = "stuck_shutter"     // the blade stays where it is, For a while; what a sensor says of it is true
)

// Kinds lists them all, wire troubles first.
func Kinds() []Kind {
	return []Kind{Missing, Garbled, Late, Duplicated, Unasked, Split, Restart, Lamp, Unplug, Slip, LostSteps, PumpDrift,
		RestartMoving, Stall, ModeHop, TemperatureDrift, Gone, Stranger, Silent, DeadLine, Hung, WrongGate, Overflow, Latched, StuckValue, StuckShutter}
}

// Trouble is one thing that goes wrong. Which fields count depends on the kind; the others are zero.
type Trouble struct {
	Kind   Kind
	Device string // the device's name in the bench file; the axis's if OfAxis; for Latched the arm, signal or idler

	Answer int           // wire troubles: number of the answer line
	By     time.Duration // Late, Split: in bench time
	Byte   int           // Garbled, Split: index into the line, modulo its length
	As     byte          // Garbled: what that byte becomes, or the next digit if it is that already
	Text   string        // Unasked: the line, without its end

	At     time.Duration // world troubles: bench time since the world began
	For    time.Duration
	RateHz float64 // Lamp
	ByDeg  float64 // Slip, LostSteps: bench degrees
	Share  float64 // PumpDrift, WrongGate: -0.1 is 10 % less
	ByNm   float64 // ModeHop
	ByCel  float64 // TemperatureDrift
}

// List is what goes wrong in one night.
type List []Trouble

// Wired says whether the trouble happens to an answer line.
func (t Trouble) Wired() bool {
	switch t.Kind {
	case Missing, Garbled, Late, Duplicated, Unasked, Split:
		return true
	}
	return false
}

// OfAxis says whether the trouble happens to an axis.
func (k Kind) OfAxis() bool { return k == Slip || k == LostSteps || k == Stall }

// OfDevice says whether the trouble happens to a device, other than to an answer of it.
func (k Kind) OfDevice() bool {
	switch k {
	case Restart, RestartMoving, Unplug, Gone, Stranger, Silent, DeadLine, Hung, WrongGate, Overflow, StuckValue, StuckShutter:
		return true
	}
	return false
}

// lasts says whether the trouble has a duration.
func (k Kind) lasts() bool {
	switch k {
	case Lamp, Unplug, PumpDrift, TemperatureDrift, Stranger, Silent, Hung, Latched, StuckValue, StuckShutter:
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
	if t.Kind.lasts() {
		arg("for %s", duration(t.For))
	}
	switch t.Kind {
	case Garbled:
		arg("byte %d as %s", t.Byte, strconv.Quote(string(rune(t.As))))
	case Split:
		arg("byte %d", t.Byte)
		arg("by %s", duration(t.By))
	case Late:
		arg("by %s", duration(t.By))
	case Unasked:
		arg("line %s", strconv.Quote(t.Text))
	case Lamp:
		arg("rate %s Hz", number(t.RateHz))
	case Slip, LostSteps:
		arg("by %s deg", number(t.ByDeg))
	case ModeHop:
		arg("by %s nm", number(t.ByNm))
	case TemperatureDrift:
		arg("by %s Cel", number(t.ByCel))
	case PumpDrift, WrongGate:
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
