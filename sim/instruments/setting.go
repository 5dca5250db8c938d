package instruments

import (
	"fmt"
	"time"
)

// What a Setting changes in the world, if it is not just a number.
const (
	PumpPower          = "pump_power"          // W
	CrystalTemperature = "crystal_temperature" // Cel
)

// SettingConfig describes a Setting.
type SettingConfig struct {
	Name      string
	Identity  Identity
	Header    string // pattern such as "SOURce:POWer[:LEVel]"; capitals are the short form
	Units     map[string]float64
	Low, High float64
	Start     float64 // when the world begins, and after *RST
	PerSecond float64 // how fast the true value follows; 0: at once
	Changes   string  // PumpPower, CrystalTemperature, or empty
	Latency   time.Duration
	Boot      time.Duration
}

// Setting is a source of something that can be set and read back. It speaks a subset of IEEE 488.2
// and SCPI-1999, and beside the common commands its one header:
//
//	<header> <number>[unit] | MIN | MAX | DEF
//	<header>?                  the value set, exponent form
//	<header>:ACTual?           the true value now, on its way to the one set
type Setting struct {
	actor
	session
	cfg   SettingConfig
	set   float64
	value *ramp
}

// NewSetting puts a Setting into the world.
func NewSetting(w *World, cfg SettingConfig) (*Setting, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	switch {
	case cfg.Header == "":
		return nil, fmt.Errorf("%s: no header; want one such as \"SOURce:POWer[:LEVel]\"", cfg.Name)
	case !(cfg.Low <= cfg.Start && cfg.Start <= cfg.High):
		return nil, fmt.Errorf("%s: start %g outside %g to %g; want it inside", cfg.Name, cfg.Start, cfg.Low, cfg.High)
	case cfg.Changes != "" && cfg.Changes != PumpPower && cfg.Changes != CrystalTemperature:
		return nil, fmt.Errorf("%s: changes %q; want pump_power, crystal_temperature or nothing", cfg.Name, cfg.Changes)
	case w.sets[cfg.Changes] != nil:
		return nil, fmt.Errorf("%s: there are two settings of %s; want one", cfg.Name, cfg.Changes)
	}
	s := &Setting{cfg: cfg, set: cfg.Start, value: newRamp(w.Now(), cfg.Start)}
	s.actor = actor{name: cfg.Name, latency: orDefault(cfg.Latency, defaultLatency), boot: orDefault(cfg.Boot, 500*time.Millisecond),
		end: "\n", hear: s.session.heard, restart: func(now time.Time) { s.powerOn(); s.turn(now, cfg.Start) }}
	if err := w.join(&s.actor); err != nil {
		return nil, err
	}
	if cfg.Changes != "" {
		w.sets[cfg.Changes] = s.value
	}
	s.session = session{identity: cfg.Identity, in: lines{limit: scpiMessageLimit}, answer: s.say,
		rst: func(now time.Time) { s.turn(now, cfg.Start) }, pending: func(time.Time) bool { return false }}
	q := quantity{low: cfg.Low, high: cfg.High, reset: cfg.Start, units: cfg.Units}
	s.tree = compile(append(s.base(),
		scpiCommand{pattern: cfg.Header,
			set: func(c scpiCall) *scpiError {
				v, err := q.argument(c.args)
				if err == nil {
					s.turn(c.now, v)
				}
				return err
			},
			ask: func(c scpiCall) (string, *scpiError) {
				v, err := q.asked(c, s.set)
				return nr3(v), err
			}},
		scpiCommand{pattern: cfg.Header + ":ACTual",
			ask: func(c scpiCall) (string, *scpiError) { return nr3(s.value.value(c.now)), c.none() }}))
	s.powerOn()
	return s, nil
}

func (s *Setting) turn(now time.Time, v float64) {
	s.set = v
	lasts := time.Duration(0)
	if way := s.value.value(now) - v; s.cfg.PerSecond > 0 {
		lasts = time.Duration(max(way, -way) / s.cfg.PerSecond * float64(time.Second))
	}
	s.value.turn(now, v, lasts)
	s.actor.w.record(Record{At: now, Device: s.cfg.Name, Kind: ValueSet, Value: v})
}
