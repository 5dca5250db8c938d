package scpi

import (
	"context"
	"errors"
	"fmt"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Sensor is a meter of one quantity, such as pump power or crystal temperature.
type Sensor struct {
	*device
	set    SensorConfig
	toUnit linear
}

// NewSensor makes a sensor from its configuration. It sends nothing.
func NewSensor(l *line.Line, c SensorConfig) (*Sensor, error) {
	d, err := newDevice(l, c.Common, nil)
	if err != nil {
		return nil, err
	}
	orElse(&c.AnswerUnit, c.Unit)
	orElse(&c.Again, ":FETC?")
	var bad []error
	if c.Measure == "" || !isQuery(c.Measure) {
		bad = append(bad, fmt.Errorf("%s: measure: %q; want a query such as :MEAS:POW?", c.Name, c.Measure))
	}
	if (c.SetUnit != "") != (c.AskUnit != "") || (c.AskUnit != "") != (c.UnitAnswer != "") {
		bad = append(bad, fmt.Errorf("%s: of set unit, ask unit and unit answer some are missing; want all three or none", c.Name))
	}
	conversion, err := conversionOf(c.AnswerUnit, c.Unit)
	if err != nil {
		bad = append(bad, fmt.Errorf("%s: %w", c.Name, err))
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	return &Sensor{device: d, set: c, toUnit: conversion}, nil
}

// Unit returns the unit of what Read returns.
func (s *Sensor) Unit() string { return s.set.Unit }

// Connect opens the line, checks who answers, sets the unit and reads it back: a power meter
// left in dBm would look plausible.
func (s *Sensor) Connect(ctx context.Context) error {
	if err := s.connect(ctx); err != nil || s.set.SetUnit == "" {
		return err
	}
	if err := s.command(ctx, "unit", s.set.SetUnit, s.repeat, nil); err != nil {
		return err
	}
	units, err := s.query(ctx, line.Question{Op: "unit", Repeat: s.repeat}, s.set.AskUnit, s.set.AskUnit)
	if err != nil {
		return err
	}
	if units[0] != units[1] {
		return s.errorf("unit", drivers.Retry, "read back as %.40q and as %.40q; want the same twice", units[0], units[1])
	}
	if units[0] != s.set.UnitAnswer {
		return s.errorf("unit", drivers.GiveUp, "read back as %.40q; want %q", units[0], s.set.UnitAnswer)
	}
	return nil
}

// Read measures once, and asks for the same measurement a second time.
func (s *Sensor) Read(ctx context.Context) (float64, error) {
	parts := []string{s.set.Measure, s.set.Again, s.common.AskEvents}
	if s.set.Once {
		parts = []string{s.set.Measure, s.common.AskEvents}
	}
	units, err := s.query(ctx, line.Question{Op: "read", Repeat: s.repeat, Within: s.common.Pace.Real(s.set.Within)}, parts...)
	if err != nil {
		return 0, err
	}
	if err := s.events(ctx, "read", units[len(units)-1]); err != nil {
		return 0, err
	}
	if !s.set.Once && units[0] != units[1] {
		return 0, s.errorf("read", drivers.Retry, "%.40q and %.40q; want the same twice", units[0], units[1])
	}
	v, err := number(units[0])
	if err != nil {
		return 0, s.errorf("read", drivers.Retry, "%w", err)
	}
	return s.toUnit.of(v), nil
}

// linear turns a value in one unit into another.
type linear struct{ factor, offset float64 }

func (c linear) of(v float64) float64   { return c.factor*v + c.offset }
func (c linear) back(v float64) float64 { return (v - c.offset) / c.factor }

// conversionOf finds the conversion by what package unit makes of 0 and 1: every unit it knows is
// a factor and an offset from another of its kind.
func conversionOf(from, to string) (linear, error) {
	if from == to {
		if _, _, _, err := unit.ParseAny("1 " + to); err != nil {
			return linear{}, err
		}
		return linear{1, 0}, nil
	}
	zero, kind, _, err := unit.ParseAny("0 " + from)
	if err != nil {
		return linear{}, err
	}
	one, err := unit.Parse("1 "+from, kind)
	if err != nil {
		return linear{}, err
	}
	if _, err := unit.Parse("1 "+to, kind); err != nil {
		return linear{}, err
	}
	offset, err := unit.In(zero, to)
	if err != nil {
		return linear{}, err
	}
	sum, err := unit.In(one, to)
	return linear{sum - offset, offset}, err
}
