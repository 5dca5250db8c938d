package scpi

import (
	"context"
	"errors"
	"fmt"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Shutter is a shutter behind an output or a relay. What such an instrument answers is what it
// was commanded; only AskBlade, where there is a sensor, says where the blade is.
type Shutter struct {
	*device
	set ShutterConfig
}

// NewShutter makes a shutter from its configuration. It sends nothing.
func NewShutter(l *line.Line, c ShutterConfig) (*Shutter, error) {
	// No *RST at the start: it would move the blade.
	d, err := newDevice(l, c.Common, nil)
	if err != nil {
		return nil, err
	}
	orElse(&c.TurnOn, ":OUTP ON")
	orElse(&c.TurnOff, ":OUTP OFF")
	orElse(&c.AskOn, ":OUTP?")
	orElse(&c.PassesWhen, "closed")
	orElse(&c.BladeOpen, "1")
	orElse(&c.BladeClosed, "0")
	var bad []error
	if c.PassesWhen != "closed" && c.PassesWhen != "open" {
		bad = append(bad, fmt.Errorf("%s: passes when %q; want closed (the contact: on) or open (off)", c.Name, c.PassesWhen))
	}
	if c.BladeOpen == c.BladeClosed {
		bad = append(bad, fmt.Errorf("%s: the blade sensor answers %q open and closed", c.Name, c.BladeOpen))
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	return &Shutter{device: d, set: c}, nil
}

// Connect opens the line and checks who answers; the blade stays where it is.
func (s *Shutter) Connect(ctx context.Context) error { return s.connect(ctx) }

// Open lets light pass.
func (s *Shutter) Open(ctx context.Context) error {
	epoch := s.seat.Epoch()
	if err := s.command(ctx, "open", s.send(true), s.repeat, epoch); err != nil {
		return err
	}
	return s.reach(ctx, "open", epoch, true)
}

// Close blocks the light, before everything else that the line was doing.
func (s *Shutter) Close(ctx context.Context) error {
	if _, err := s.seat.Urgent(ctx, line.Question{Op: "close", Send: []byte(s.send(false))}); err != nil {
		return err
	}
	return s.reach(ctx, "close", nil, false)
}

func (s *Shutter) send(open bool) string {
	if open == (s.set.PassesWhen == "closed") {
		return s.set.TurnOn
	}
	return s.set.TurnOff
}

// reach checks what the instrument says of itself, waits for the blade, and asks its sensor.
func (s *Shutter) reach(ctx context.Context, op string, epoch line.Epoch, open bool) error {
	commanded, err := s.commanded(ctx, op, epoch)
	if err != nil {
		return err
	}
	if commanded != open {
		return s.errorf(op, drivers.Retry, "the instrument says that the shutter is %s", openOr(commanded))
	}
	settle := s.set.SettleClosed
	if open {
		settle = s.set.SettleOpen
	}
	if err := s.wait(ctx, op, epoch, settle); err != nil {
		return err
	}
	if s.set.AskBlade == "" {
		return nil
	}
	seen, err := s.blade(ctx, op, epoch)
	if err != nil {
		return err
	}
	if seen != open {
		return s.errorf(op, drivers.Retry, "the sensor sees the blade %s %s after the command", openOr(seen), unit.Span(settle))
	}
	return nil
}

// State asks the blade's sensor if there is one, otherwise what was commanded.
func (s *Shutter) State(ctx context.Context) (drivers.Blade, error) {
	if s.set.AskBlade != "" {
		open, err := s.blade(ctx, "state", nil)
		return drivers.Blade{Open: open, Sensed: err == nil}, err
	}
	open, err := s.commanded(ctx, "state", nil)
	return drivers.Blade{Open: open}, err
}

func (s *Shutter) commanded(ctx context.Context, op string, epoch line.Epoch) (open bool, err error) {
	answer, err := s.same(ctx, op, epoch, s.set.AskOn)
	if err != nil {
		return false, err
	}
	switch answer {
	case "1":
		return s.set.PassesWhen == "closed", nil
	case "0":
		return s.set.PassesWhen == "open", nil
	}
	return false, s.errorf(op, drivers.Retry, "%q answers %.40q; want 1 or 0", s.set.AskOn, answer)
}

func (s *Shutter) blade(ctx context.Context, op string, epoch line.Epoch) (open bool, err error) {
	answer, err := s.same(ctx, op, epoch, s.set.AskBlade)
	if err != nil {
		return false, err
	}
	switch answer {
	case s.set.BladeOpen:
		return true, nil
	case s.set.BladeClosed:
		return false, nil
	}
	return false, s.errorf(op, drivers.Retry, "%q answers %.40q; want %q or %q", s.set.AskBlade, answer, s.set.BladeOpen, s.set.BladeClosed)
}

// same asks twice in one message; both answers must agree to the letter.
func (s *Shutter) same(ctx context.Context, op string, epoch line.Epoch, ask string) (string, error) {
	units, err := s.query(ctx, line.Question{Op: op, Repeat: s.repeat, Epoch: epoch}, ask, ask, s.common.AskEvents)
	if err != nil {
		return "", err
	}
	if err := s.events(ctx, op, units[2]); err != nil {
		return "", err
	}
	if units[0] != units[1] {
		return "", s.errorf(op, drivers.Retry, "%q answers %.40q and %.40q; want the same twice", ask, units[0], units[1])
	}
	return units[0], nil
}

func openOr(open bool) string {
	if open {
		return "open"
	}
	return "closed"
}
