package instruments

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/sim/source"
	"gemel/sim/trouble"
)

// What a channel of a Counter counts.
const (
	CountsSignal = "signal"
	CountsIdler  = "idler"
	CountsPairs  = "pairs" // coincidences of signal and idler
	CountsGates  = "gates" // the tag: the number of this gate since power-on
	CountsNone   = "none"  // nothing is connected
)

// The forms in which a Counter answers numbers (IEEE 488.2).
const (
	NR1Signed = "nr1_signed" // +12034
	NR1Plain  = "nr1"        // 12034
	NR3Form   = "nr3"        // +1.20340000E+04
)

// CounterConfig describes a Counter.
type CounterConfig struct {
	Name     string
	Identity Identity
	Channels []string // what each counts, in the order of the answers: CountsSignal, …

	Numbers string // NR1Signed if empty
	Bits    int    // width of a channel; 0 is 32. A channel that runs over starts from 0 again

	OverflowBit int // of STATus:QUEStionable; 0 is 9
	TimeBit     int // of STATus:QUEStionable, for a doubtful gate time; 0 is 2

	// GateError is by what share the true gate is longer than the one set. The counter knows
	// nothing of it, except that it calls its gate time doubtful above DoubtAbove (0: never).
	GateError  float64
	DoubtAbove float64

	Latency time.Duration
	Boot    time.Duration
}

// Counter is a gated counter that latches all channels together. It speaks a subset of IEEE 488.2
// and SCPI-1999 (see session), and beside the common commands:
//
//	:FORMat[:DATA] ASCii, ?                        always ASC
//	:SENSe:FUNCtion[:ON] "TOTalize 1","TOT 2", ?   switches channels on; all are on after *RST
//	:SENSe:FUNCtion:OFF "TOT 2"    :SENSe:FUNCtion:CONCurrent ON, ?
//	:SENSe:TOTalize:APERture 1.0, ? [MIN|MAX|DEF]  the gate in seconds, 1 ms to 1000 s
//	:TRIGger:SOURce IMMediate, ?   :TRIGger:COUNt 1, ?
//	:INITiate[:IMMediate]                          opens one gate; -213 while one is open
//	:FETCh?                                        the counts of the last gate, all channels in
//	                                               order; -230 if there are none: before the first,
//	                                               while one is open, after :ABORt, *RST, a change
//	                                               of the gate, or a restart
//	:ABORt                                         ends an open gate at once; its counts are lost
//	:STATus:OPERation:CONDition?                   bit 4 while a gate is open
//	:STATus:QUEStionable[:EVENt]?                  bit 9: a channel ran over; bit 2: gate time doubtful
//
// [:SENSe] may be left out. A channel that is switched off counts 0.
type Counter struct {
	actor
	session
	cfg CounterConfig

	gateS  float64
	off    []bool
	opened uint64 // since power-on: the tag
	drawn  uint64 // since the world began: keys the draws

	running *running
	latched *GateTruth
}

// running is an open gate.
type running struct {
	gate
	tag  uint64
	draw uint64
	setS float64
	end  *happening

	wrong float64 // by what share it is longer than it was set
}

// The counter's numeric settings.
var (
	aperture = quantity{low: 1e-3, high: 1000, reset: 1, units: secondUnits}
	once     = quantity{low: 1, high: 1, reset: 1}
)

// NewCounter puts a Counter into the world.
func NewCounter(w *World, cfg CounterConfig) (*Counter, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	if cfg.Numbers == "" {
		cfg.Numbers = NR1Signed
	}
	if cfg.Bits == 0 {
		cfg.Bits = 32
	}
	if cfg.OverflowBit == 0 {
		cfg.OverflowBit = 9
	}
	if cfg.TimeBit == 0 {
		cfg.TimeBit = 2
	}
	if cfg.Bits < 1 || cfg.Bits > 53 {
		return nil, fmt.Errorf("%s: channels of %d bits; want 1 to 53", cfg.Name, cfg.Bits)
	}
	if cfg.OverflowBit < 0 || cfg.OverflowBit > 14 || cfg.TimeBit < 0 || cfg.TimeBit > 14 {
		return nil, fmt.Errorf("%s: status bits %d and %d; want 0 to 14", cfg.Name, cfg.OverflowBit, cfg.TimeBit)
	}
	if !slices.Contains([]string{NR1Signed, NR1Plain, NR3Form}, cfg.Numbers) {
		return nil, fmt.Errorf("%s: numbers %q; want %q, %q or %q", cfg.Name, cfg.Numbers, NR1Signed, NR1Plain, NR3Form)
	}
	if len(cfg.Channels) == 0 {
		return nil, fmt.Errorf("%s: no channels; want at least one", cfg.Name)
	}
	for _, what := range cfg.Channels {
		if !slices.Contains([]string{CountsSignal, CountsIdler, CountsPairs, CountsGates, CountsNone}, what) {
			return nil, fmt.Errorf("%s: a channel counts %q; want signal, idler, pairs, gates or none", cfg.Name, what)
		}
	}
	c := &Counter{cfg: cfg}
	c.actor = actor{name: cfg.Name, latency: orDefault(cfg.Latency, defaultLatency), boot: orDefault(cfg.Boot, 1200*time.Millisecond),
		end: "\n", hear: c.heard, restart: c.restarted}
	if err := w.join(&c.actor); err != nil {
		return nil, err
	}
	c.session = session{identity: func() Identity { return c.identify(cfg.Identity) }, in: lines{limit: scpiMessageLimit}, rst: c.reset,
		pending: func(time.Time) bool { return c.running != nil }, answer: c.say}
	c.tree = compile(append(c.base(), c.commands()...))
	c.powerOn()
	c.defaults()
	return c, nil
}

// heard takes one byte. Only while *OPC? or *WAI waits for the gate must somebody be awake at
// its end; else whoever asks next finds it over.
func (c *Counter) heard(now time.Time, b byte) {
	c.session.heard(now, b)
	if c.busy && c.running != nil {
		c.running.end.whose = &c.actor
	}
}

func (c *Counter) defaults() {
	c.gateS = aperture.reset
	c.off = make([]bool, len(c.cfg.Channels))
}

func (c *Counter) reset(now time.Time) {
	c.abort(now)
	c.latched = nil
	c.defaults()
}

func (c *Counter) restarted(now time.Time) {
	c.powerOn()
	c.abort(now)
	c.latched = nil
	c.opened = 0
	c.powerOn()
	c.defaults()
}

func (c *Counter) commands() []scpiCommand {
	return []scpiCommand{
		{pattern: "FORMat[:DATA]",
			set: func(s scpiCall) *scpiError {
				if len(s.args) == 2 && s.args[1].kind == 'n' {
					s.args = s.args[:1]
				}
				_, err := wordArgument(s.args, "ASCii")
				return err
			},
			ask: func(s scpiCall) (string, *scpiError) { return "ASC", s.none() }},
		{pattern: "[SENSe]:FUNCtion:CONCurrent",
			set: func(s scpiCall) *scpiError {
				on, err := booleanArgument(s.args)
				if err == nil && !on {
					return fault(-221, "channels always count together")
				}
				return err
			},
			ask: func(s scpiCall) (string, *scpiError) { return "1", s.none() }},
		{pattern: "[SENSe]:FUNCtion[:ON]",
			set: func(s scpiCall) *scpiError { return c.switchChannels(s.args, false) },
			ask: func(s scpiCall) (string, *scpiError) {
				var on []string
				for i, off := range c.off {
					if !off {
						on = append(on, fmt.Sprintf(`"TOT %d"`, i+1))
					}
				}
				return strings.Join(on, ","), s.none()
			}},
		{pattern: "[SENSe]:FUNCtion:OFF", set: func(s scpiCall) *scpiError { return c.switchChannels(s.args, true) }},
		{pattern: "[SENSe]:TOTalize:APERture",
			set: func(s scpiCall) *scpiError {
				v, err := aperture.argument(s.args)
				if err != nil {
					return err
				}
				if c.running != nil {
					return fault(-221, "gate open")
				}
				c.gateS = float64(time.Duration(v*1e9+0.5)) / 1e9
				c.latched = nil
				return nil
			},
			ask: func(s scpiCall) (string, *scpiError) {
				v, err := aperture.asked(s, c.gateS)
				return nr3(v), err
			}},
		{pattern: "TRIGger[:SEQuence]:SOURce",
			set: func(s scpiCall) *scpiError { _, err := wordArgument(s.args, "IMMediate"); return err },
			ask: func(s scpiCall) (string, *scpiError) { return "IMM", s.none() }},
		{pattern: "TRIGger[:SEQuence]:COUNt",
			set: func(s scpiCall) *scpiError {
				_, err := once.argument(s.args)
				return err
			},
			ask: func(s scpiCall) (string, *scpiError) {
				v, err := once.asked(s, 1)
				return strconv.FormatFloat(v, 'f', -1, 64), err
			}},
		{pattern: "INITiate[:IMMediate][:ALL]", set: func(s scpiCall) *scpiError {
			if err := s.none(); err != nil {
				return err
			}
			if c.running != nil {
				return fault(-213, "")
			}
			c.initiate(s.now)
			return nil
		}},
		{pattern: "ABORt", set: func(s scpiCall) *scpiError {
			if err := s.none(); err != nil {
				return err
			}
			c.abort(s.now)
			return nil
		}},
		{pattern: "FETCh", ask: func(s scpiCall) (string, *scpiError) {
			if err := s.none(); err != nil {
				return "", err
			}
			if c.latched == nil {
				return "", fault(-230, "")
			}
			g := *c.latched
			c.actor.w.record(Record{At: s.now, Device: c.cfg.Name, Kind: GateRead, Gate: &GateTruth{Tag: g.Tag, Opened: g.Opened, SetS: g.SetS, GateS: g.GateS, Counts: g.Counts, Overflow: g.Overflow, Doubtful: g.Doubtful}})
			parts := make([]string, len(g.Counts))
			for i, n := range g.Counts {
				parts[i] = c.number(n)
			}
			return strings.Join(parts, ","), nil
		}},
	}
}

func (c *Counter) number(n uint64) string {
	switch c.cfg.Numbers {
	case NR1Plain:
		return strconv.FormatUint(n, 10)
	case NR3Form:
		s := strconv.FormatFloat(float64(n), 'E', 8, 64)
		for digits := 9; digits < 17; digits++ { // exactly, however many digits that takes
			if v, _ := strconv.ParseFloat(s, 64); v == float64(n) {
				break
			}
			s = strconv.FormatFloat(float64(n), 'E', digits, 64)
		}
		return "+" + s
	}
	return "+" + strconv.FormatUint(n, 10)
}

// switchChannels takes sensor names such as "TOTalize 2", as strings.
func (c *Counter) switchChannels(args []argument, off bool) *scpiError {
	if len(args) == 0 {
		return fault(-109, "")
	}
	if c.running != nil {
		return fault(-221, "gate open")
	}
	next := slices.Clone(c.off)
	for _, a := range args {
		if a.kind != 's' {
			return fault(-104, "")
		}
		name, number, _ := strings.Cut(strings.ToUpper(strings.TrimSpace(a.text)), " ")
		n := 1
		if number = strings.TrimSpace(number); number != "" {
			v, err := strconv.Atoi(number)
			if err != nil {
				return fault(-224, a.text)
			}
			n = v
		}
		if name != "TOT" && name != "TOTALIZE" || n < 1 || n > len(next) {
			return fault(-224, a.text)
		}
		next[n-1] = off
	}
	c.off = next
	return nil
}

func (c *Counter) initiate(now time.Time) {
	w := c.actor.w
	c.opened++
	c.drawn++
	c.latched = nil
	r := &running{gate: gate{from: now}, tag: c.opened, draw: c.drawn, setS: c.gateS, wrong: c.cfg.GateError}
	if s := c.spoilOnce(trouble.WrongGate, now); s != nil {
		r.wrong += s.trouble.Share
	}
	lasts := max(1, time.Duration(c.gateS*(1+r.wrong)*1e9))
	c.running = r
	w.open[&r.gate] = true
	c.questionable.turn(1<<c.cfg.OverflowBit|1<<c.cfg.TimeBit, false)
	c.operation.turn(operationMeasuring, true)
	w.record(Record{At: now, Device: c.cfg.Name, Kind: GateOpened, Gate: &GateTruth{Tag: r.tag, Opened: now, SetS: r.setS}})
	r.end = w.at(now.Add(lasts), nil, func(at time.Time) { c.close(at, r) })
}

// close latches the counts of a gate that has run its time.
func (c *Counter) close(at time.Time, r *running) {
	w := c.actor.w
	truth, segments := w.look(r.from, at)
	truth.Tag, truth.SetS = r.tag, r.setS
	counts := w.cfg.Model.Draw(w.rng(c.cfg.Name, r.draw), segments)
	limit := uint64(1) << c.cfg.Bits
	burst := -1
	if c.spoilOnce(trouble.Overflow, at) != nil {
		burst = slices.IndexFunc(c.cfg.Channels, func(what string) bool { return what != CountsGates && what != CountsNone })
	}
	for i, what := range c.cfg.Channels {
		n := channelCounts(what, counts, r.tag)
		if c.off[i] {
			n = 0
		}
		if i == burst { // something made it run over, and what is left says nothing
			n += limit - min(n, limit) + w.rng(c.cfg.Name+" burst", r.draw).Uint64N(limit)
		}
		if n >= limit {
			n %= limit
			truth.Overflow = true
		}
		truth.Counts = append(truth.Counts, n)
	}
	truth.Doubtful = c.cfg.DoubtAbove > 0 && math.Abs(r.wrong) > c.cfg.DoubtAbove
	c.latched = &truth
	c.running = nil
	delete(w.open, &r.gate)
	c.questionable.turn(1<<c.cfg.OverflowBit, truth.Overflow)
	c.questionable.turn(1<<c.cfg.TimeBit, truth.Doubtful)
	c.operation.turn(operationMeasuring, false)
	w.record(Record{At: at, Device: c.cfg.Name, Kind: GateClosed, Gate: &truth})
	c.complete(at)
}

func channelCounts(what string, n source.Counts, tag uint64) uint64 {
	switch what {
	case CountsSignal:
		return n.Signal
	case CountsIdler:
		return n.Idler
	case CountsPairs:
		return n.Coincidences
	case CountsGates:
		return tag
	}
	return 0
}

// abort ends an open gate; its counts are lost.
func (c *Counter) abort(now time.Time) {
	r := c.running
	if r == nil {
		return
	}
	w := c.actor.w
	r.end.callOff()
	truth, _ := w.look(r.from, now)
	truth.Tag, truth.SetS = r.tag, r.setS
	c.running = nil
	delete(w.open, &r.gate)
	c.operation.turn(operationMeasuring, false)
	w.record(Record{At: now, Device: c.cfg.Name, Kind: GateAborted, Gate: &truth})
	c.complete(now)
}
