package instruments

import (
	"fmt"
	"math"
	"strings"
	"time"

	"gemel/sim/trouble"
)

// MonitorConfig describes a Monitor.
type MonitorConfig struct {
	Name        string
	Identity    Identity
	Power       bool    // it measures the pump's power, before the shutter
	Temperature bool    // it measures the crystal's temperature
	PowerNoise  float64 // rms, relative
	CelNoise    float64 // rms, Cel
	Latency     time.Duration
	Boot        time.Duration
}

// Monitor measures pump power and crystal temperature. It speaks a subset of IEEE 488.2 and
// SCPI-1999, and beside the common commands, each only if it measures that:
//
//	:INITiate[:IMMediate]                   measures everything, once, at this instant
//	:FETCh[:SCALar][:POWer|:TEMPerature]?   what was measured last, in the unit set, exponent form; of
//	                                        both, power first; -230 if there is nothing: before the
//	                                        first time, and after *RST or a restart
//	:READ…?  :MEASure…?                     both at once: each is a new measurement
//	:UNIT:POWer W|DBM, ?                    W after power-on and *RST; answers W or DBM
//	:UNIT:TEMPerature CEL|FAR|K, ?          CEL after power-on and *RST
//
// A power of nothing in DBM is answered as not a number, 9.91E+37.
type Monitor struct {
	actor
	session
	cfg       MonitorConfig
	powerUnit string
	celUnit   string
	drawn     uint64
	measured  bool
	ever      bool    // since the world began
	watt, cel float64 // as measured last
}

// NewMonitor puts a Monitor into the world.
func NewMonitor(w *World, cfg MonitorConfig) (*Monitor, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	if !cfg.Power && !cfg.Temperature {
		return nil, fmt.Errorf("%s: measures nothing; want power, temperature or both", cfg.Name)
	}
	m := &Monitor{cfg: cfg}
	m.defaults(time.Time{})
	m.actor = actor{name: cfg.Name, latency: orDefault(cfg.Latency, defaultLatency), boot: orDefault(cfg.Boot, 500*time.Millisecond),
		end: "\n", hear: m.session.heard, restart: func(now time.Time) { m.powerOn(); m.defaults(now) }}
	if err := w.join(&m.actor); err != nil {
		return nil, err
	}
	m.session = session{identity: func() Identity { return m.identify(cfg.Identity) }, in: lines{limit: scpiMessageLimit}, answer: m.say,
		rst: m.defaults, pending: func(time.Time) bool { return false }}
	commands := []scpiCommand{{pattern: "INITiate[:IMMediate][:ALL]", set: func(c scpiCall) *scpiError {
		err := c.none()
		if err == nil {
			m.measure(c.now)
		}
		return err
	}}}
	var all []func() string
	if cfg.Power {
		all = append(all, m.power)
		commands = append(commands, m.readings("[:SCALar]:POWer[:DC]", m.power)...)
		commands = append(commands, m.unit("UNIT:POWer", &m.powerUnit, "W", "DBM"))
	}
	if cfg.Temperature {
		all = append(all, m.temperature)
		commands = append(commands, m.readings("[:SCALar]:TEMPerature[:DC]", m.temperature)...)
		commands = append(commands, m.unit("UNIT:TEMPerature", &m.celUnit, "CEL", "FAR", "K"))
	}
	commands = append(commands, m.readings("[:SCALar]", all...)[:2]...) // MEASure? alone does not say what
	m.tree = compile(append(m.base(), commands...))
	m.powerOn()
	return m, nil
}

func (m *Monitor) defaults(time.Time) { m.powerUnit, m.celUnit, m.measured = "W", "CEL", false }

// readings are the ways to ask for some quantities: of the last measurement, or of a new one.
func (m *Monitor) readings(pattern string, quantities ...func() string) []scpiCommand {
	var commands []scpiCommand
	for _, word := range []string{"FETCh", "READ", "MEASure"} {
		commands = append(commands, scpiCommand{pattern: word + pattern, ask: func(c scpiCall) (string, *scpiError) {
			if err := c.none(); err != nil {
				return "", err
			}
			if word != "FETCh" {
				m.measure(c.now)
			}
			if !m.measured {
				return "", fault(-230, "")
			}
			answers := make([]string, len(quantities))
			for i, quantity := range quantities {
				answers[i] = quantity()
			}
			return strings.Join(answers, ","), nil
		}})
	}
	return commands
}

func (m *Monitor) unit(pattern string, unit *string, words ...string) scpiCommand {
	return scpiCommand{pattern: pattern,
		set: func(c scpiCall) *scpiError {
			u, err := wordArgument(c.args, words...)
			if err == nil {
				*unit = u
			}
			return err
		},
		ask: func(c scpiCall) (string, *scpiError) { return *unit, c.none() }}
}

// measure takes everything at one instant. Its noise follows from how many measurements there were.
func (m *Monitor) measure(now time.Time) {
	if s := m.spoils(trouble.StuckValue); s != nil && m.ever {
		m.measured = true
		m.meet(s, now, "")
		m.tell(now)
		return
	}
	m.drawn++
	noise := m.actor.w.rng(m.cfg.Name, m.drawn)
	m.measured, m.ever = true, true
	if m.cfg.Power {
		m.watt = m.actor.w.pumpW(now) * (1 + m.cfg.PowerNoise*noise.NormFloat64())
	}
	if m.cfg.Temperature {
		m.cel = m.actor.w.crystalCel(now) + m.cfg.CelNoise*noise.NormFloat64()
	}
	m.tell(now)
}

// tell writes down what was measured.
func (m *Monitor) tell(now time.Time) {
	if m.cfg.Power {
		m.actor.w.record(Record{At: now, Device: m.cfg.Name, Kind: SensorRead, Text: "W", Value: m.watt})
	}
	if m.cfg.Temperature {
		m.actor.w.record(Record{At: now, Device: m.cfg.Name, Kind: SensorRead, Text: "Cel", Value: m.cel})
	}
}

func (m *Monitor) power() string {
	if m.powerUnit == "W" {
		return nr3(m.watt)
	}
	if m.watt <= 0 {
		return scpiNotANumber
	}
	return nr3(10 * math.Log10(m.watt/1e-3))
}

func (m *Monitor) temperature() string {
	switch m.celUnit {
	case "FAR":
		return nr3(m.cel*9/5 + 32)
	case "K":
		return nr3(m.cel + 273.15)
	}
	return nr3(m.cel)
}
