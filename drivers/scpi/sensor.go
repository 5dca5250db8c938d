package scpi

import (
	"context"
	"errors"
	"fmt"
	"math"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Sensor is a meter of one quantity, such as pump power or crystal temperature.
type Sensor struct {
	*device
	set    SensorConfig
	toUnit unit.Conversion
}

// NewSensor makes a sensor from its configuration. It sends nothing.
func NewSensor(l *line.Line, c SensorConfig) (*Sensor, error) {
	d, err := newDevice(l, c.Common, nil)
	if err != nil {
		return nil, err
	}
	orElse(&c.AnswerUnit, c.Unit)
	orElse(&c.Fetch, ":FETC?")
	var bad []error
	if c.Initiate != "" && c.Measure != "" {
		bad = append(bad, fmt.Errorf("%s: initiate %q and measure %q; want one of them", c.Name, c.Initiate, c.Measure))
	}
	orElse(&c.Initiate, ":INIT")
	if !isQuery(c.Fetch) {
		bad = append(bad, fmt.Errorf("%s: fetch: %q; want a query", c.Name, c.Fetch))
	}
	if c.Measure != "" && !isQuery(c.Measure) {
		bad = append(bad, fmt.Errorf("%s: measure: %q; want a query such as :MEAS:POW?", c.Name, c.Measure))
	}
	if isQuery(c.Initiate) {
		bad = append(bad, fmt.Errorf("%s: initiate: %q is a query; want it as measure", c.Name, c.Initiate))
	}
	if c.Once && c.Measure == "" {
		bad = append(bad, fmt.Errorf("%s: once without measure; want the query that measures", c.Name))
	}
	if c.Once != (c.Agree > 0) {
		bad = append(bad, fmt.Errorf("%s: once %t, agree %g; want both or neither: two measurements are compared, one cannot be told from a damaged one", c.Name, c.Once, c.Agree))
	}
	if (c.SetUnit != "") != (c.AskUnit != "") || (c.AskUnit != "") != (c.UnitAnswer != "") {
		bad = append(bad, fmt.Errorf("%s: of set unit, ask unit and unit answer some are missing; want all three or none", c.Name))
	}
	conversion, err := unit.Convert(c.AnswerUnit, c.Unit)
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

// Read measures once, and asks for the measurement twice; or it measures twice, where the meter can
// do nothing else.
func (s *Sensor) Read(ctx context.Context) (float64, error) {
	parts := []string{s.set.Initiate, s.set.Fetch, s.set.Fetch, s.common.AskEvents}
	switch {
	case s.set.Once:
		parts = []string{s.set.Measure, s.set.Measure, s.common.AskEvents}
	case s.set.Measure != "":
		parts = []string{s.set.Measure, s.set.Fetch, s.common.AskEvents}
	}
	units, err := s.query(ctx, line.Question{Op: "read", Repeat: s.repeat, Within: s.common.Pace.Real(s.set.Within)}, parts...)
	if err != nil {
		return 0, err
	}
	if err := s.events(ctx, "read", units[2]); err != nil {
		return 0, err
	}
	if !s.set.Once && units[0] != units[1] {
		return 0, s.errorf("read", drivers.Retry, "%.40q and %.40q; want the same twice", units[0], units[1])
	}
	var values [2]float64
	for i := range values {
		v, err := number(units[i])
		if err != nil {
			return 0, s.errorf("read", drivers.Retry, "%w", err)
		}
		values[i] = s.toUnit.Of(v)
	}
	if math.Abs(values[0]-values[1]) > s.set.Agree {
		return 0, s.errorf("read", drivers.Retry, "%g %s and then %g; want them equal within %g", values[0], s.set.Unit, values[1], s.set.Agree)
	}
	return values[1], nil
}
