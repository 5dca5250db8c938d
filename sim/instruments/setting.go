package instruments

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"
)

// What a Setting changes in the world, if it is not just a number, with the unit of its value.
const (
	PumpPower          = "pump_power"          // W
	CrystalTemperature = "crystal_temperature" // Cel
	Delay              = "delay"               // s, between the channels of the counter
	SignalIris         = "signal_iris"         // m, diameter
	IdlerIris          = "idler_iris"          // m, diameter
	SignalBias         = "signal_bias"         // V
	IdlerBias          = "idler_bias"          // V
	RoomLight          = "room_light"          // its own unit
)

// Effects lists them all.
func Effects() []string {
	return []string{PumpPower, CrystalTemperature, Delay, SignalIris, IdlerIris, SignalBias, IdlerBias, RoomLight}
}

// SettingConfig describes a Setting.
type SettingConfig struct {
	Name      string
	Identity  Identity
	Header    string // pattern such as "SOURce:POWer[:LEVel]"; capitals are the short form
	Units     map[string]float64
	Low, High float64
	Start     float64       // when the world begins, and after *RST
	PerSecond float64       // how fast the true value follows; 0: at once
	Lag       time.Duration // time constant with which it follows instead; 0: none
	Within    float64       // with Lag: how near the true value must be for the set one to be reached
	Changes   string        // one of Effects, or empty

	// Neutral is the value at which the world is as it was built: the delay at which pairs are
	// centred, the bias at which a detector has the efficiency it has. PerVolt is the relative
	// change of that efficiency for each volt more: a straight line, which is an invention.
	Neutral float64
	PerVolt float64
	// RoomHz is what a lamp adds to what is recorded at the signal's and the idler's open detector, for
	// each 1 of its value.
	RoomHz [2]float64

	Latency time.Duration
	Boot    time.Duration
}

// Setting is a source of something that can be set and read back. It speaks a subset of IEEE 488.2
// and SCPI-1999, and beside the common commands its one header:
//
//	<header> <number>[unit] | MIN | MAX | DEF
//	<header>?                  the value set, exponent form
//	<header>:ACTual?           the true value now, on its way to the one set
//	:STATus:OPERation:CONDition?   bit 1 while the true value is on its way
type Setting struct {
	actor
	session
	cfg   SettingConfig
	set   float64
	value *ramp
	there *happening // when the true value has reached the one set
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
	case cfg.Changes != "" && !slices.Contains(Effects(), cfg.Changes):
		return nil, fmt.Errorf("%s: changes %q; want one of %s, or nothing", cfg.Name, cfg.Changes, strings.Join(Effects(), ", "))
	case cfg.PerSecond > 0 && cfg.Lag > 0:
		return nil, fmt.Errorf("%s: %g a second and a lag of %v; want one of them", cfg.Name, cfg.PerSecond, cfg.Lag)
	case cfg.Lag > 0 && !(cfg.Within > 0):
		return nil, fmt.Errorf("%s: reached within %g; want more than 0 of what is approached ever more slowly", cfg.Name, cfg.Within)
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
		w.sets[cfg.Changes] = s
	}
	s.session = session{identity: func() Identity { return s.identify(cfg.Identity) }, in: lines{limit: scpiMessageLimit}, answer: s.say,
		rst: func(now time.Time) { s.turn(now, cfg.Start) }, pending: func(now time.Time) bool { return s.there != nil }}
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
	s.there.callOff()
	s.there = nil
	way, lasts := math.Abs(s.value.value(now)-v), time.Duration(0)
	switch {
	case s.cfg.Lag > 0:
		s.value.drift(now, v, s.cfg.Lag)
		if way > s.cfg.Within {
			lasts = time.Duration(s.cfg.Lag.Seconds() * math.Log(way/s.cfg.Within) * float64(time.Second))
		}
	case s.cfg.PerSecond > 0:
		lasts = time.Duration(way / s.cfg.PerSecond * float64(time.Second))
		s.value.turn(now, v, lasts)
	default:
		s.value.turn(now, v, 0)
	}
	s.operation.turn(operationSettling, lasts > 0)
	if lasts > 0 {
		s.there = s.actor.w.at(now.Add(lasts), &s.actor, func(at time.Time) {
			s.there = nil
			s.operation.turn(operationSettling, false)
			s.complete(at)
		})
	}
	s.actor.w.record(Record{At: now, Device: s.cfg.Name, Kind: ValueSet, Value: v})
}
