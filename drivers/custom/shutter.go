package custom

import (
	"context"
	"errors"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Shutter is a shutter whose language was declared.
type Shutter struct {
	*device
	set ShutterConfig
}

// valued is what a shutter, a sensor and a setting may be asked.
func valued(needed ...string) kind {
	return kind{
		questions: map[string][2][]string{
			"set":      {{"value"}, nil},
			"get":      {nil, []string{"value"}},
			"at_rest":  {},
			"identity": {nil, []string{"identity"}},
		},
		needed: needed,
	}
}

// NewShutter makes a shutter from its configuration. It sends nothing.
func NewShutter(l *line.Line, c ShutterConfig) (*Shutter, error) {
	d, bad := newDevice(l, c.Common, valued("set", "get"))
	if c.Open == "" {
		c.Open = "1"
	}
	if c.Closed == "" {
		c.Closed = "0"
	}
	if c.Open == c.Closed {
		bad.add("open", "%q, as when it is closed", c.Open)
	}
	d.needValue(bad)
	if len(bad.all) > 0 {
		return nil, errors.Join(bad.all...)
	}
	return &Shutter{device: d, set: c}, nil
}

// needValue wants {value} in what is set and the group value in what is got.
func (d *device) needValue(bad *faults) {
	if q := d.questions["set"]; q != nil && q.send != nil && !q.send.has("value") {
		bad.add("asks.set.send", "%q has no {value}", q.ask.Send)
	}
	if q := d.questions["get"]; q != nil {
		if q.ask.Match == "" || q.match != nil && !hasGroup(q.match, "value") {
			bad.add("asks.get.match", "no group value in %q", q.ask.Match)
		}
		if q.ask.Otherwise != "" {
			bad.add("asks.get.otherwise", "a value has no other answer")
		}
	}
	if q := d.questions["at_rest"]; q != nil && (q.ask.Match == "" || q.ask.Otherwise == "") {
		bad.add("asks.at_rest", "want match and otherwise: the answers for yes and for no")
	}
}

// atRest waits until the instrument says so, where it can.
func (d *device) atRest(ctx context.Context, op string, epoch line.Epoch, within, every time.Duration) error {
	if d.questions["at_rest"] == nil {
		return nil
	}
	by := time.Now().Add(d.common.Pace.Real(within) + d.seat.LongestAnswer())
	for {
		r, err := d.ask(ctx, "at_rest", op, nil, d.repeat, epoch)
		if err != nil || r.yes {
			return err
		}
		if time.Now().After(by) {
			return d.errorf(op, drivers.Retry, "not at rest within %s", unit.Span(within))
		}
		if err := d.wait(ctx, op, epoch, every); err != nil {
			return err
		}
	}
}

// Connect opens the line and checks who answers; the blade stays where it is.
func (s *Shutter) Connect(ctx context.Context) error {
	_, err := s.connect(ctx)
	return err
}

// Open lets light pass.
func (s *Shutter) Open(ctx context.Context) error {
	epoch := s.seat.Epoch()
	r, err := s.ask(ctx, "set", "open", map[string]string{"value": s.set.Open}, s.repeat, epoch)
	if err == nil && !r.yes && s.questions["set"].match != nil {
		err = s.errorf("open", drivers.Retry, "answered %.80q", r.text)
	}
	if err != nil {
		return err
	}
	return s.reach(ctx, "open", epoch, true)
}

// Close blocks the light, before everything else that the line was doing. That its answer is
// missing does not matter as long as the state can be asked.
func (s *Shutter) Close(ctx context.Context) error {
	var r reply
	q := s.question(s.questions["set"], "close", map[string]string{"value": s.set.Closed}, &r)
	if _, err := s.seat.Urgent(ctx, q); err != nil && !uncertain(err) {
		return err
	}
	return s.reach(ctx, "close", nil, false)
}

func (s *Shutter) reach(ctx context.Context, op string, epoch line.Epoch, open bool) error {
	settle := s.set.SettleClosed
	if open {
		settle = s.set.SettleOpen
	}
	if s.set.Sensed { // the blade must have had its time before its sensor is asked
		if err := s.wait(ctx, op, epoch, settle); err != nil {
			return err
		}
	}
	if err := s.atRest(ctx, op, epoch, 10*time.Second, 50*time.Millisecond); err != nil {
		return err
	}
	found, err := s.state(ctx, op, epoch)
	if err != nil {
		return err
	}
	if found != open {
		return s.errorf(op, drivers.Retry, "the instrument says that the shutter is not so")
	}
	if s.set.Sensed {
		return nil
	}
	return s.wait(ctx, op, epoch, settle)
}

func (s *Shutter) state(ctx context.Context, op string, epoch line.Epoch) (open bool, err error) {
	p, err := s.proved(ctx, "get", op, nil, epoch, toTheLetter)
	if err != nil {
		return false, err
	}
	switch p.answer.groups["value"] {
	case s.set.Open:
		return true, nil
	case s.set.Closed:
		return false, nil
	}
	return false, s.errorf(op, drivers.Retry, "%.40q; want %q or %q", p.answer.groups["value"], s.set.Open, s.set.Closed)
}

// State asks where the blade is.
func (s *Shutter) State(ctx context.Context) (drivers.Blade, error) {
	open, err := s.state(ctx, "state", nil)
	return drivers.Blade{Open: open, Sensed: s.set.Sensed && err == nil}, err
}
