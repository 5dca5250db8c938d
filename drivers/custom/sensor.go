package custom

import (
	"context"
	"errors"
	"math"
	"strconv"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Sensor is a sensor whose language was declared.
type Sensor struct {
	*device
	set    SensorConfig
	toUnit unit.Conversion
}

// NewSensor makes a sensor from its configuration. It sends nothing.
func NewSensor(l *line.Line, c SensorConfig) (*Sensor, error) {
	d, bad := newDevice(l, c.Common, valued("get"))
	d.needValue(bad)
	toUnit, err := unit.Convert(c.Dialect.Asks["get"].UnitIs, c.Unit)
	if err != nil {
		bad.add("asks.get.unit_is", "%w", err)
	}
	if len(bad.all) > 0 {
		return nil, errors.Join(bad.all...)
	}
	return &Sensor{device: d, set: c, toUnit: toUnit}, nil
}

// Unit returns the unit of what Read returns.
func (s *Sensor) Unit() string { return s.set.Unit }

// Connect opens the line, checks who answers and sends the start settings.
func (s *Sensor) Connect(ctx context.Context) error {
	_, err := s.connect(ctx)
	return err
}

// Read asks twice. Where each answer is a new measurement the two may differ by Agree.
func (s *Sensor) Read(ctx context.Context) (float64, error) {
	agree := toTheLetter
	if s.set.Varies {
		agree = func(a, b proof) bool {
			before, err := s.value(a.answer.groups["value"])
			now, err2 := s.value(b.answer.groups["value"])
			return err == nil && err2 == nil && math.Abs(before-now) <= s.set.Agree
		}
	}
	p, err := s.proved(ctx, "get", "read", nil, nil, agree)
	if err != nil {
		return 0, err
	}
	return s.value(p.answer.groups["value"])
}

func (s *Sensor) value(text string) (float64, error) {
	v, err := float(text)
	if err != nil {
		return 0, s.errorf("read", drivers.Retry, "%w", err)
	}
	return s.toUnit.Of(v), nil
}

// Setting is a setting whose language was declared.
type Setting struct {
	*device
	set      SettingConfig
	toUnit   unit.Conversion // of get
	sendUnit unit.Conversion // of set
}

// NewSetting makes a setting from its configuration. It sends nothing.
func NewSetting(l *line.Line, c SettingConfig) (*Setting, error) {
	d, bad := newDevice(l, c.Common, valued("set", "get"))
	d.needValue(bad)
	toUnit, err := unit.Convert(c.Dialect.Asks["get"].UnitIs, c.Unit)
	if err != nil {
		bad.add("asks.get.unit_is", "%w", err)
	}
	sendUnit, err := unit.Convert(c.Dialect.Asks["set"].UnitIs, c.Unit)
	if err != nil {
		bad.add("asks.set.unit_is", "%w", err)
	}
	if len(bad.all) > 0 {
		return nil, errors.Join(bad.all...)
	}
	if c.SettleWithin <= 0 {
		c.SettleWithin = 10 * time.Second
	}
	if c.PollEvery <= 0 {
		c.PollEvery = 50 * time.Millisecond
	}
	return &Setting{device: d, set: c, toUnit: toUnit, sendUnit: sendUnit}, nil
}

// Unit returns the unit of Set and Get.
func (s *Setting) Unit() string { return s.set.Unit }

// Connect opens the line and checks who answers; the value stays as it is.
func (s *Setting) Connect(ctx context.Context) error {
	_, err := s.connect(ctx)
	return err
}

// Set commands the value, waits until it is reached and reads it back.
func (s *Setting) Set(ctx context.Context, value float64) (float64, error) {
	if math.IsNaN(value) || math.IsInf(value, 0) {
		return 0, s.errorf("set", drivers.GiveUp, "%v; want a number", value)
	}
	q := s.questions["set"]
	decimals := -1
	if q.ask.Decimals != nil {
		decimals = *q.ask.Decimals
	}
	text := strconv.FormatFloat(s.sendUnit.Back(value), 'f', decimals, 64)
	if strings.Trim(text, "-0.") == "" {
		text = strings.TrimPrefix(text, "-")
	}
	r, err := s.ask(ctx, "set", "set", map[string]string{"value": text}, s.repeat, nil)
	if err == nil && !r.yes && q.match != nil {
		err = s.errorf("set", drivers.Retry, "answered %.80q", r.text)
	}
	if err != nil {
		return 0, err
	}
	if err := s.atRest(ctx, "set", nil, s.set.SettleWithin, s.set.PollEvery); err != nil {
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

// Get asks for the value until two answers in a row agree to the letter.
func (s *Setting) Get(ctx context.Context) (float64, error) { return s.get(ctx, "get") }

func (s *Setting) get(ctx context.Context, op string) (float64, error) {
	p, err := s.proved(ctx, "get", op, nil, nil, toTheLetter)
	if err != nil {
		return 0, err
	}
	v, err := float(p.answer.groups["value"])
	if err != nil {
		return 0, s.errorf(op, drivers.Retry, "%w", err)
	}
	return s.toUnit.Of(v), nil
}
