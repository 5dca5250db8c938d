package custom

import (
	"context"
	"errors"
	"fmt"
	"strconv"
	"sync/atomic"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Counter is a counter whose language was declared: arm opens a gate, counts gives all channels,
// at_rest (if there is one) says that no gate is open, stop ends one.
type Counter struct {
	*device
	set     CounterConfig
	lastTag atomic.Int64 // -1: not known
}

// NewCounter makes a counter from its configuration. It sends nothing.
func NewCounter(l *line.Line, c CounterConfig) (*Counter, error) {
	groups := []string{"gate", "overflow"}
	for _, ch := range c.Channels {
		groups = append(groups, string(ch))
	}
	d, bad := newDevice(l, c.Common, kind{
		questions: map[string][2][]string{
			"arm":      {{"gate"}, []string{"gate"}},
			"at_rest":  {},
			"counts":   {nil, groups},
			"stop":     {},
			"identity": {nil, []string{"identity"}},
		},
		needed: []string{"arm", "counts", "stop"},
	})
	if len(c.Channels) == 0 {
		bad.add("channels", "none; want at least one")
	}
	seen := map[drivers.Channel]bool{}
	for _, ch := range c.Channels {
		if ch == "gate" || ch == "overflow" || ch == "reason" || seen[ch] {
			bad.add("channels", "%q is given twice, or a word of this program", ch)
		}
		seen[ch] = true
		if q := d.questions["counts"]; q != nil && q.match != nil && !hasGroup(q.match, string(ch)) {
			bad.add("asks.counts.match", "no group for channel %q in %q", ch, q.ask.Match)
		}
	}
	if c.Tag != "" && !seen[c.Tag] {
		bad.add("gate_tag", "%q is not among the channels", c.Tag)
	}
	for _, name := range []string{"arm", "counts"} {
		if a, ok := c.Dialect.Asks[name]; ok && a.Match == "" {
			bad.add("asks."+name, "no match; want the pattern of its answer")
		}
	}
	if q := d.questions["arm"]; q != nil && q.send != nil && !q.send.has("gate") {
		bad.add("asks.arm.send", "%q has no {gate}", q.ask.Send)
	}
	if q := d.questions["at_rest"]; q != nil && (q.ask.Match == "" || q.ask.Otherwise == "") {
		bad.add("asks.at_rest", "want match and otherwise: the answers for yes and for no")
	}
	if len(bad.all) > 0 {
		return nil, errors.Join(bad.all...)
	}
	if c.GateIs <= 0 {
		c.GateIs = time.Second
	}
	if c.PollEvery <= 0 {
		c.PollEvery = 20 * time.Millisecond
	}
	counter := &Counter{device: d, set: c}
	counter.lastTag.Store(-1)
	return counter, nil
}

// Channels lists the channels in the order of the configuration.
func (c *Counter) Channels() []drivers.Channel {
	return append([]drivers.Channel(nil), c.set.Channels...)
}

// Connect opens the line, checks who answers and sends the start settings.
func (c *Counter) Connect(ctx context.Context) error {
	c.lastTag.Store(-1)
	_, err := c.connect(ctx)
	return err
}

// Count opens one gate, waits for its end and reads it.
func (c *Counter) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	if gate <= 0 {
		return drivers.Gate{}, c.errorf("count", drivers.GiveUp, "a gate of %s; want a positive time", unit.Span(gate))
	}
	epoch := c.seat.Epoch()
	g, mayBeOpen, err := c.count(ctx, gate, epoch)
	if err == nil || !mayBeOpen {
		return g, err
	}
	out := &drivers.Error{Op: "count", Device: c.Name(), Remedy: drivers.GiveUp, Err: err}
	if e, ok := errors.AsType[*drivers.Error](err); ok {
		*out = *e
	}
	out.GateOpened = true
	c.lastTag.Store(-1)
	if out.Remedy != drivers.Reconnect && !epoch.Over() {
		ctx, cancel := line.Urgently(ctx)
		defer cancel()
		if abortErr := c.halt(ctx, "count"); abortErr != nil && !uncertain(abortErr) {
			out.Err = fmt.Errorf("%w; and the gate was not ended: %w", out.Err, abortErr)
		}
	}
	return drivers.Gate{}, out
}

// count opens a gate and never again before it is known what became of it.
func (c *Counter) count(ctx context.Context, gate time.Duration, epoch line.Epoch) (g drivers.Gate, mayBeOpen bool, err error) {
	value := strconv.FormatFloat(gate.Seconds()/c.set.GateIs.Seconds(), 'f', -1, 64)
	armed, err := c.ask(ctx, "arm", "count", map[string]string{"gate": value}, 0, epoch)
	if err != nil {
		f := faultOf(err)
		return g, f == nil || f.Sent && f.Why != line.Refusal, err
	}
	if !armed.yes {
		return g, false, c.errorf("count", drivers.Retry, "%.80q; the gate was not opened", armed.text)
	}
	g.Set, g.Length = gate, gate
	if text, ok := armed.groups["gate"]; ok {
		if g.Set, err = c.gateOf(text); err != nil {
			return g, true, err
		}
		g.Length = g.Set
	}
	if err := c.wait(ctx, "count", epoch, g.Set); err != nil {
		return g, true, err
	}
	late := c.set.EndWithin
	if late <= 0 {
		late = 2*time.Second + gate/10
	}
	by := time.Now().Add(c.common.Pace.Real(late) + c.seat.LongestAnswer())
	for {
		over := true
		if c.questions["at_rest"] != nil {
			r, err := c.ask(ctx, "at_rest", "count", nil, c.repeat, epoch)
			if err != nil {
				return g, true, err
			}
			over = r.yes
		}
		if over {
			p, err := c.proved(ctx, "counts", "count", nil, epoch, toTheLetter)
			switch {
			case errors.Is(err, errDiffer): // it still counts
			case err != nil:
				return g, true, err
			case p.answer.yes && (c.behind("counts") != "at_rest" || p.behind.yes):
				return g, true, c.take(&g, p.answer)
			}
		}
		if time.Now().After(by) {
			return g, true, c.errorf("count", drivers.Retry, "no counts, or no two answers that agree, %s after a gate of %s", unit.Span(late), unit.Span(gate))
		}
		if err := c.wait(ctx, "count", epoch, c.set.PollEvery); err != nil {
			return g, true, err
		}
	}
}

func (c *Counter) take(g *drivers.Gate, r reply) error {
	g.Raw = r.text
	g.Counts = map[drivers.Channel]uint64{}
	for _, ch := range c.set.Channels {
		n, err := count(r.groups[string(ch)])
		if err != nil {
			return c.errorf("count", drivers.Retry, "channel %s: %w", ch, err)
		}
		g.Counts[ch] = n
	}
	if text, ok := r.groups["overflow"]; ok {
		over, ok := truth[text]
		if !ok {
			return c.errorf("count", drivers.Retry, "overflow %.40q; want 1 or 0", text)
		}
		g.Overflow = over
	}
	if text, ok := r.groups["gate"]; ok {
		length, err := c.gateOf(text)
		if err != nil {
			return err
		}
		g.Length = length
	}
	if c.set.Tag != "" {
		tag := int64(g.Counts[c.set.Tag])
		if tag == c.lastTag.Load() {
			return c.errorf("count", drivers.Retry, "the counts are those of gate %d, which was read before", tag)
		}
		c.lastTag.Store(tag)
	}
	return nil
}

func (c *Counter) gateOf(text string) (time.Duration, error) {
	f, err := float(text)
	if err != nil || f <= 0 || f*c.set.GateIs.Hours() > 1000 {
		return 0, c.errorf("count", drivers.Retry, "gate %.40q; want a positive time", text)
	}
	return time.Duration(f * float64(c.set.GateIs)), nil
}

// Abort ends a gate at once.
func (c *Counter) Abort(ctx context.Context) error {
	c.lastTag.Store(-1)
	return c.halt(ctx, "abort")
}

func (c *Counter) halt(ctx context.Context, op string) error {
	var r reply
	_, err := c.seat.Urgent(ctx, c.question(c.questions["stop"], op, nil, &r))
	return err
}
