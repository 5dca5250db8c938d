package instruments

import (
	"fmt"
	"math"
	"time"
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
//	:MEASure[:SCALar]:POWer[:DC]?       in the unit set, exponent form
//	:MEASure[:SCALar]:TEMPerature?
//	:UNIT:POWer W|DBM, ?                W after power-on and *RST; answers W or DBM
//	:UNIT:TEMPerature CEL|FAR|K, ?      CEL after power-on and *RST
//
// A power of nothing in DBM is answered as not a number, 9.91E+37.
type Monitor struct {
	actor
	session
	cfg       MonitorConfig
	powerUnit string
	celUnit   string
	drawn     uint64
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
	m.session = session{identity: cfg.Identity, in: lines{limit: scpiMessageLimit}, answer: m.say,
		rst: m.defaults, pending: func(time.Time) bool { return false }}
	var commands []scpiCommand
	if cfg.Power {
		commands = append(commands,
			scpiCommand{pattern: "MEASure[:SCALar]:POWer[:DC]", ask: func(c scpiCall) (string, *scpiError) { return m.power(c.now), c.none() }},
			m.unit("UNIT:POWer", &m.powerUnit, "W", "DBM"))
	}
	if cfg.Temperature {
		commands = append(commands,
			scpiCommand{pattern: "MEASure[:SCALar]:TEMPerature[:DC]", ask: func(c scpiCall) (string, *scpiError) { return m.temperature(c.now), c.none() }},
			m.unit("UNIT:TEMPerature", &m.celUnit, "CEL", "FAR", "K"))
	}
	m.tree = compile(append(m.base(), commands...))
	m.powerOn()
	return m, nil
}

func (m *Monitor) defaults(time.Time) { m.powerUnit, m.celUnit = "W", "CEL" }

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

func (m *Monitor) power(now time.Time) string {
	m.drawn++
	watt := m.actor.w.pumpW(now) * (1 + m.cfg.PowerNoise*m.actor.w.rng(m.cfg.Name, m.drawn).NormFloat64())
	m.actor.w.record(Record{At: now, Device: m.cfg.Name, Kind: SensorRead, Text: "W", Value: watt})
	if m.powerUnit == "W" {
		return nr3(watt)
	}
	if watt <= 0 {
		return scpiNotANumber
	}
	return nr3(10 * math.Log10(watt/1e-3))
}

func (m *Monitor) temperature(now time.Time) string {
	m.drawn++
	cel := m.actor.w.crystalCel(now) + m.cfg.CelNoise*m.actor.w.rng(m.cfg.Name, m.drawn).NormFloat64()
	m.actor.w.record(Record{At: now, Device: m.cfg.Name, Kind: SensorRead, Text: "Cel", Value: cel})
	switch m.celUnit {
	case "FAR":
		return nr3(cel*9/5 + 32)
	case "K":
		return nr3(cel + 273.15)
	}
	return nr3(cel)
}
