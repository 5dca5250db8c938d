package scpi

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Setting is something that can be set and read back, such as a delay or a power.
type Setting struct {
	*device
	set    SettingConfig
	toUnit unit.Conversion
}

// NewSetting makes a setting from its configuration. It sends nothing.
func NewSetting(l *line.Line, c SettingConfig) (*Setting, error) {
	d, err := newDevice(l, c.Common, nil)
	if err != nil {
		return nil, err
	}
	orElse(&c.AnswerUnit, c.Unit)
	orElse(&c.AskCondition, ":STAT:OPER:COND?")
	if c.SettlingBit == nil {
		settling := 1
		c.SettlingBit = &settling
	}
	if c.SettleWithin <= 0 {
		c.SettleWithin = 10 * time.Second
	}
	if c.PollEvery <= 0 {
		c.PollEvery = 50 * time.Millisecond
	}
	var bad []error
	if !strings.Contains(c.Set, "{value}") {
		bad = append(bad, fmt.Errorf("%s: set: %q has no {value}", c.Name, c.Set))
	}
	if !isQuery(c.Get) {
		bad = append(bad, fmt.Errorf("%s: get: %q; want a query", c.Name, c.Get))
	}
	if *c.SettlingBit > 15 {
		bad = append(bad, fmt.Errorf("%s: settling bit %d; want 0 to 15, or -1 for none", c.Name, *c.SettlingBit))
	}
	conversion, err := unit.Convert(c.AnswerUnit, c.Unit)
	if err != nil {
		bad = append(bad, fmt.Errorf("%s: %w", c.Name, err))
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	return &Setting{device: d, set: c, toUnit: conversion}, nil
}

// Unit returns the unit of Set and Get.
func (s *Setting) Unit() string { return s.set.Unit }

// Connect opens the line and checks who answers; the value stays as it is.
func (s *Setting) Connect(ctx context.Context) error { return s.connect(ctx) }

// Set commands the value, waits until it is reached and reads it back.
func (s *Setting) Set(ctx context.Context, value float64) (float64, error) {
	if math.IsNaN(value) || math.IsInf(value, 0) {
		return 0, s.errorf("set", drivers.GiveUp, "%v; want a number", value)
	}
	v := s.toUnit.Back(value)
	// Twelve digits are more than any instrument has, and fewer than the rounding of a conversion shows.
	text := strconv.FormatFloat(v, 'G', 12, 64)
	if s.set.Decimals != nil {
		text = strconv.FormatFloat(v, 'f', *s.set.Decimals, 64)
	}
	if err := s.command(ctx, "set", strings.ReplaceAll(s.set.Set, "{value}", text), s.repeat, nil); err != nil {
		return 0, err
	}
	if err := s.settled(ctx); err != nil {
		return 0, err
	}
	if err := s.wait(ctx, "set", nil, s.set.Settle); err != nil {
		return 0, err
	}
	got, err := s.get(ctx, "set")
	if err != nil {
		return 0, err
	}
	if math.Abs(got-value) > s.set.Tolerance+1e-9*math.Abs(value) {
		return got, s.errorf("set", drivers.Retry, "reads back %g %s; want %g within %g", got, s.set.Unit, value, s.set.Tolerance)
	}
	return got, nil
}

func (s *Setting) settled(ctx context.Context) error {
	if *s.set.SettlingBit < 0 {
		return nil
	}
	by := time.Now().Add(s.common.Pace.Real(s.set.SettleWithin) + s.seat.LongestAnswer())
	for {
		units, err := s.query(ctx, line.Question{Op: "set", Repeat: s.repeat}, s.set.AskCondition)
		if err != nil {
			return err
		}
		condition, err := register(units[0])
		if err != nil {
			return s.errorf("set", drivers.Retry, "condition register: %w", err)
		}
		if condition&(1<<*s.set.SettlingBit) == 0 {
			return nil
		}
		if time.Now().After(by) {
			return s.errorf("set", drivers.Retry, "not settled within %s", unit.Span(s.set.SettleWithin))
		}
		if err := s.wait(ctx, "set", nil, s.set.PollEvery); err != nil {
			return err
		}
	}
}

// Get asks for the value.
func (s *Setting) Get(ctx context.Context) (float64, error) { return s.get(ctx, "get") }

func (s *Setting) get(ctx context.Context, op string) (float64, error) {
	units, err := s.query(ctx, line.Question{Op: op, Repeat: s.repeat}, s.set.Get, s.set.Get, s.common.AskEvents)
	if err != nil {
		return 0, err
	}
	if err := s.events(ctx, op, units[2]); err != nil {
		return 0, err
	}
	if units[0] != units[1] {
		return 0, s.errorf(op, drivers.Retry, "%.40q and %.40q; want the same twice", units[0], units[1])
	}
	v, err := number(units[0])
	if err != nil {
		return 0, s.errorf(op, drivers.Retry, "%w", err)
	}
	return s.toUnit.Of(v), nil
}
