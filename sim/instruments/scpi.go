package instruments

import (
	"fmt"
	"strings"
	"time"
)

// session is the part of IEEE 488.2 and SCPI-1999 that all our SCPI instruments share: messages
// and their units, the header tree, status registers, the error queue, the common commands. It
// follows standards.md section 1. It is a subset, and says so: it does not conform.
//
// A message ends with NL or CR NL. All answers of one message are sent as one line when the
// message is done, separated by ";". A unit that fails gives no answer; a command error ends the
// message, as the parser no longer knows where it is. *OPC? and *WAI make everything behind them
// wait for a pending operation, and nothing on a serial line can overtake that.
type session struct {
	identity func() Identity
	tree     []scpiCommand
	rst      func(now time.Time)      // *RST of the device functions
	pending  func(now time.Time) bool // an operation is under way
	answer   func(now time.Time, line string)

	in    lines
	queue []string // messages that wait behind *OPC? or *WAI

	// The message under way.
	units   []string
	path    []string
	answers []string
	busy    bool // waits for a pending operation
	working bool // work is running, further down the stack
	opcOwed bool // *OPC? waits to put its 1

	errors        []scpiError
	esr, ese, sre byte
	opc           bool // *OPC waits to set its bit
	operation     statusRegister
	questionable  statusRegister
}

// statusRegister is one of SCPI's status registers. Bit 15 is never used.
type statusRegister struct {
	condition, event, enable, rising, falling uint16
}

// turn changes condition bits, and latches the event bits that the transition filters let pass.
func (r *statusRegister) turn(bits uint16, on bool) {
	before := r.condition
	if on {
		r.condition |= bits
	} else {
		r.condition &^= bits
	}
	r.event |= (^before & r.condition & r.rising) | (before & ^r.condition & r.falling)
}

// preset is what STATus:PRESet and power-on leave: nothing enabled, events on rising only.
func (r *statusRegister) preset() { r.enable, r.rising, r.falling = 0, 0x7FFF, 0 }

// The bits of the standard event status register.
const (
	esrComplete = 1 << 0
	esrQuery    = 1 << 2
	esrDevice   = 1 << 3
	esrExecute  = 1 << 4
	esrCommand  = 1 << 5
	esrPowerOn  = 1 << 7
)

// Bits of the status registers that our instruments use.
const (
	operationSettling    = 1 << 1
	operationMeasuring   = 1 << 4
	questionableTime     = 1 << 2
	scpiMessageLimit     = 4096
	scpiErrorQueueLength = 16
	scpiWaitingLimit     = 64
	scpiLongestMnemonic  = 12
	scpiLongestMantissa  = 255
	scpiLargestExponent  = 32000
	scpiVersion          = "1999.0"
	scpiNotANumber       = "9.91E+37"
	statusByteErrors     = 1 << 2
	statusByteQuestion   = 1 << 3
	statusByteMessage    = 1 << 4
	statusByteEvents     = 1 << 5
	statusByteMaster     = 1 << 6
	statusByteOperation  = 1 << 7
)

// scpiError is an entry of the error queue, and the reason a unit failed.
type scpiError struct {
	number int
	detail string // device text, may be empty
}

// scpiTexts are the standard's texts (SCPI-1999 volume 2, 21.8).
var scpiTexts = map[int]string{
	0: "No error", -100: "Command error", -101: "Invalid character", -102: "Syntax error", -103: "Invalid separator",
	-104: "Data type error", -108: "Parameter not allowed", -109: "Missing parameter", -110: "Command header error",
	-111: "Header separator error", -112: "Program mnemonic too long", -113: "Undefined header", -114: "Header suffix out of range",
	-120: "Numeric data error", -121: "Invalid character in number", -123: "Exponent too large", -124: "Too many digits",
	-128: "Numeric data not allowed", -131: "Invalid suffix", -138: "Suffix not allowed", -141: "Invalid character data",
	-151: "Invalid string data", -161: "Invalid block data", -171: "Invalid expression",
	-200: "Execution error", -213: "Init ignored", -220: "Parameter error", -221: "Settings conflict", -222: "Data out of range",
	-224: "Illegal parameter value", -230: "Data corrupt or stale", -350: "Queue overflow", -363: "Input buffer overrun",
}

func (e scpiError) Error() string { return e.String() }

func (e scpiError) String() string {
	text := scpiTexts[e.number]
	if e.detail != "" {
		text += ";" + strings.ReplaceAll(e.detail, `"`, `""`)
	}
	return fmt.Sprintf(`%d,"%s"`, e.number, text)
}

func fault(number int, detail string) *scpiError { return &scpiError{number, detail} }

// powerOn is the state after power-on.
func (s *session) powerOn() {
	s.in.clear()
	s.queue, s.units, s.path, s.answers = nil, nil, nil, nil
	s.busy, s.opcOwed, s.opc = false, false, false
	s.errors = nil
	s.esr, s.ese, s.sre = esrPowerOn, 0, 0
	s.operation, s.questionable = statusRegister{}, statusRegister{}
	s.operation.preset()
	s.questionable.preset()
}

// raise puts an error into the queue and sets its bit. A full queue loses the newest.
func (s *session) raise(e *scpiError) {
	if len(s.errors) < scpiErrorQueueLength {
		s.errors = append(s.errors, *e)
	} else {
		s.errors[len(s.errors)-1] = scpiError{number: -350}
	}
	switch {
	case e.number <= -100 && e.number > -200:
		s.esr |= esrCommand
	case e.number <= -200 && e.number > -300:
		s.esr |= esrExecute
	case e.number <= -300 && e.number > -400 || e.number > 0:
		s.esr |= esrDevice
	case e.number <= -400 && e.number > -500:
		s.esr |= esrQuery
	}
}

// statusByte is what *STB? reads.
func (s *session) statusByte() byte {
	var b byte
	if len(s.errors) > 0 {
		b |= statusByteErrors
	}
	if s.questionable.event&s.questionable.enable != 0 {
		b |= statusByteQuestion
	}
	if len(s.answers) > 0 {
		b |= statusByteMessage
	}
	if s.esr&s.ese != 0 {
		b |= statusByteEvents
	}
	if s.operation.event&s.operation.enable != 0 {
		b |= statusByteOperation
	}
	if b&s.sre != 0 {
		b |= statusByteMaster
	}
	return b
}

// heard takes one byte from the line.
func (s *session) heard(now time.Time, b byte) {
	line, tooLong, complete := s.in.add(b)
	switch {
	case !complete:
	case tooLong:
		s.raise(fault(-363, ""))
	case len(s.queue) >= scpiWaitingLimit:
		s.raise(fault(-363, ""))
	default:
		s.queue = append(s.queue, line)
		s.work(now)
	}
}

// complete tells that a pending operation has ended.
func (s *session) complete(now time.Time) {
	if s.opc {
		s.opc = false
		s.esr |= esrComplete
	}
	if !s.working {
		s.work(now)
	}
}

// work executes what has come, until something has to wait.
func (s *session) work(now time.Time) {
	s.working = true
	defer func() { s.working = false }()
	for {
		if s.busy {
			if s.pending(now) {
				return
			}
			if s.opcOwed {
				s.opcOwed = false
				s.answers = append(s.answers, "1")
			}
			s.busy = false
		}
		if len(s.units) == 0 {
			if len(s.answers) > 0 {
				s.answer(now, strings.Join(s.answers, ";"))
			}
			s.answers, s.path = nil, nil
			if len(s.queue) == 0 {
				return
			}
			line := s.queue[0]
			s.queue = s.queue[1:]
			units, err := splitUnits(line)
			if err != nil {
				s.raise(err)
			}
			s.units = units
			continue
		}
		unit := s.units[0]
		s.units = s.units[1:]
		if err := s.unit(now, unit); err != nil {
			s.raise(err)
			if err.number > -200 {
				s.units = nil
			}
		}
	}
}

// unit executes one unit of a message.
func (s *session) unit(now time.Time, text string) *scpiError {
	h, args, err := parseUnit(text)
	if err != nil {
		return err
	}
	if h.common != "" {
		return s.common(now, h, args)
	}
	nodes := h.nodes
	if !h.rooted {
		nodes = append(append([]string(nil), s.path...), nodes...)
	}
	c, suffixes, err := find(s.tree, nodes, h.query)
	if err != nil {
		return err
	}
	// The next header goes on from the branch that was walked, as it was written.
	s.path = nodes[:len(nodes)-1]
	call := scpiCall{now: now, args: args, suffixes: suffixes}
	if !h.query {
		return c.set(call)
	}
	a, err := c.ask(call)
	if err == nil {
		s.answers = append(s.answers, a)
	}
	return err
}

// common executes a common command of IEEE 488.2.
func (s *session) common(now time.Time, h header, args []argument) *scpiError {
	put := func(format string, a ...any) *scpiError {
		s.answers = append(s.answers, fmt.Sprintf(format, a...))
		return nil
	}
	name := h.common
	if h.query {
		name += "?"
	}
	if name != "ESE" && name != "SRE" && len(args) > 0 {
		return fault(-108, "")
	}
	switch name {
	case "IDN?":
		return put("%s", s.identity())
	case "CLS":
		s.errors, s.esr, s.opc = nil, 0, false
		s.operation.event, s.questionable.event = 0, 0
	case "RST":
		s.opc = false
		s.rst(now)
	case "OPC":
		if s.pending(now) {
			s.opc = true
		} else {
			s.esr |= esrComplete
		}
	case "OPC?":
		s.busy, s.opcOwed = true, true
	case "WAI":
		s.busy = true
	case "ESR?":
		b := s.esr
		s.esr = 0
		return put("%d", b)
	case "ESE?":
		return put("%d", s.ese)
	case "SRE?":
		return put("%d", s.sre)
	case "STB?":
		return put("%d", s.statusByte())
	case "TST?":
		return put("0")
	case "ESE", "SRE":
		v, err := wholeArgument(args, 0, 255)
		if err != nil {
			return err
		}
		if name == "ESE" {
			s.ese = byte(v)
		} else {
			s.sre = byte(v) &^ statusByteMaster
		}
	default:
		return fault(-113, "*"+name)
	}
	return nil
}

// base are the headers that every SCPI instrument has.
func (s *session) base() []scpiCommand {
	list := []scpiCommand{
		{pattern: "SYSTem:ERRor[:NEXT]", ask: func(scpiCall) (string, *scpiError) {
			if len(s.errors) == 0 {
				return scpiError{}.String(), nil
			}
			e := s.errors[0]
			s.errors = s.errors[1:]
			return e.String(), nil
		}},
		{pattern: "SYSTem:ERRor:ALL", ask: func(scpiCall) (string, *scpiError) {
			all := make([]string, 0, len(s.errors))
			for _, e := range s.errors {
				all = append(all, e.String())
			}
			if len(all) == 0 {
				all = append(all, scpiError{}.String())
			}
			s.errors = nil
			return strings.Join(all, ","), nil
		}},
		{pattern: "SYSTem:ERRor:COUNt", ask: func(scpiCall) (string, *scpiError) { return fmt.Sprint(len(s.errors)), nil }},
		{pattern: "SYSTem:VERSion", ask: func(scpiCall) (string, *scpiError) { return scpiVersion, nil }},
		{pattern: "STATus:PRESet", set: func(c scpiCall) *scpiError {
			s.operation.preset()
			s.questionable.preset()
			return c.none()
		}},
	}
	for _, r := range []struct {
		name string
		reg  *statusRegister
	}{{"OPERation", &s.operation}, {"QUEStionable", &s.questionable}} {
		p := "STATus:" + r.name
		list = append(list,
			scpiCommand{pattern: p + "[:EVENt]", ask: func(scpiCall) (string, *scpiError) {
				v := r.reg.event
				r.reg.event = 0
				return fmt.Sprint(v), nil
			}},
			scpiCommand{pattern: p + ":CONDition", ask: func(scpiCall) (string, *scpiError) { return fmt.Sprint(r.reg.condition), nil }})
		for _, m := range []struct {
			name string
			mask *uint16
		}{{"ENABle", &r.reg.enable}, {"PTRansition", &r.reg.rising}, {"NTRansition", &r.reg.falling}} {
			list = append(list, scpiCommand{pattern: p + ":" + m.name,
				ask: func(scpiCall) (string, *scpiError) { return fmt.Sprint(*m.mask), nil },
				set: func(c scpiCall) *scpiError {
					v, err := wholeArgument(c.args, 0, 65535)
					if err == nil {
						*m.mask = uint16(v) & 0x7FFF
					}
					return err
				}})
		}
	}
	return list
}
