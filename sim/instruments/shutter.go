package instruments

import (
	"fmt"
	"time"

	"gemel/sim/trouble"
)

// What the blade of a Shutter stands in front of.
const (
	PumpBlade   = "pump"
	SignalBlade = "signal"
	IdlerBlade  = "idler"
)

// ShutterConfig describes a Shutter.
type ShutterConfig struct {
	Name     string
	Identity Identity
	Blade    string        // PumpBlade, SignalBlade or IdlerBlade
	Travel   time.Duration // from fully closed to fully open; 0 is 20 ms
	Sensor   bool          // a sensor sees the blade
	Open     bool          // how it stands when the world begins
	Latency  time.Duration
	Boot     time.Duration
}

// Shutter passes or blocks the pump or one detector's light. It speaks a subset of IEEE 488.2 and
// SCPI-1999, and beside the common commands:
//
//	:OUTPut[:STATe] ON|OFF    ON passes light. *RST and a loss of power close
//	:OUTPut[:STATe]?          1 or 0: what was commanded
//	:SENSe:STATe?             1 or 0: what the blade sensor sees, with a sensor. It is 0 only while
//	                          the blade covers the whole beam, so that 0 is never said too early
type Shutter struct {
	actor
	session
	cfg   ShutterConfig
	on    bool // as it was commanded
	stuck bool // a command moved nothing; the next one may
	move  *happening
}

// NewShutter puts a Shutter into the world.
func NewShutter(w *World, cfg ShutterConfig) (*Shutter, error) {
	w.mu.Lock()
	defer w.mu.Unlock()
	if cfg.Blade != PumpBlade && cfg.Blade != SignalBlade && cfg.Blade != IdlerBlade {
		return nil, fmt.Errorf("%s: blade %q; want pump, signal or idler", cfg.Name, cfg.Blade)
	}
	if w.blades[cfg.Blade] != nil {
		return nil, fmt.Errorf("%s: there are two shutters in front of %s; want one", cfg.Name, cfg.Blade)
	}
	cfg.Travel = orDefault(cfg.Travel, 20*time.Millisecond)
	s := &Shutter{cfg: cfg, on: cfg.Open}
	s.actor = actor{name: cfg.Name, latency: orDefault(cfg.Latency, defaultLatency), boot: orDefault(cfg.Boot, 500*time.Millisecond),
		end: "\n", hear: s.session.heard, restart: func(now time.Time) { s.powerOn(); s.turn(now, false) }}
	if err := w.join(&s.actor); err != nil {
		return nil, err
	}
	share := 0.0
	if cfg.Open {
		share = 1
	}
	w.blades[cfg.Blade] = newRamp(w.Now(), share)
	s.session = session{identity: func() Identity { return s.identify(cfg.Identity) }, in: lines{limit: scpiMessageLimit}, answer: s.say,
		rst: func(now time.Time) { s.turn(now, false) }, pending: func(time.Time) bool { return false }}
	commands := []scpiCommand{{pattern: "OUTPut[:STATe]",
		set: func(c scpiCall) *scpiError {
			on, err := booleanArgument(c.args)
			if err == nil {
				s.turn(c.now, on)
			}
			return err
		},
		ask: func(c scpiCall) (string, *scpiError) { return bit(s.on), c.none() },
	}}
	if cfg.Sensor {
		commands = append(commands, scpiCommand{pattern: "SENSe:STATe", ask: func(c scpiCall) (string, *scpiError) {
			return bit(w.blades[cfg.Blade].value(c.now) > 0), c.none()
		}})
	}
	s.tree = compile(append(s.base(), commands...))
	s.powerOn()
	return s, nil
}

// turn sends the blade on its way, from wherever it is.
func (s *Shutter) turn(now time.Time, on bool) {
	if s.on == on && !s.stuck {
		return
	}
	s.on = on
	if spell := s.spoils(trouble.StuckShutter); spell != nil {
		s.meet(spell, now, "")
		s.stuck = true
		return
	}
	s.stuck = false
	w := s.actor.w
	to, kind, text := 0.0, BladeClosed, "closed"
	if on {
		to, kind, text = 1, BladeOpened, "open"
	}
	blade := w.blades[s.cfg.Blade]
	way := blade.value(now) - to
	lasts := time.Duration(max(way, -way) * float64(s.cfg.Travel))
	blade.turn(now, to, lasts)
	w.record(Record{At: now, Device: s.cfg.Name, Kind: BladeStarted, Text: text})
	s.move.callOff()
	s.move = w.at(now.Add(lasts), nil, func(at time.Time) { w.record(Record{At: at, Device: s.cfg.Name, Kind: kind}) })
}
