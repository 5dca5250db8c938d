package scpi

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
	"sync/atomic"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Counter is a gated counter. It opens a gate by INITiate, which it sends once and never again
// while it is not known whether the instrument took it.
type Counter struct {
	*device
	set CounterConfig

	gate   time.Duration // as set, 0 if the instrument may have forgotten it
	gateIs time.Duration // as read back

	// lastTag is the tag of the last gate that was read; -1 if it is not known, as after an
	// aborted gate, whose tag nobody read.
	lastTag atomic.Int64
}

// NewCounter makes a counter from its configuration. It sends nothing.
func NewCounter(l *line.Line, c CounterConfig) (*Counter, error) {
	d, err := newDevice(l, c.Common, []string{"*RST", ":FORM ASC", ":TRIG:SOUR IMM", ":TRIG:COUN 1"})
	if err != nil {
		return nil, err
	}
	orElse(&c.SetGate, ":SENS:TOT:APER {seconds}")
	orElse(&c.AskGate, ":SENS:TOT:APER?")
	orElse(&c.Initiate, ":INIT")
	orElse(&c.AskCondition, ":STAT:OPER:COND?")
	orElse(&c.Fetch, ":FETC?")
	orElse(&c.AskQuality, ":STAT:QUES:EVEN?")
	orElse(&c.Abort, ":ABOR")
	if c.CountingBit == nil {
		measuring := 4
		c.CountingBit = &measuring
	}
	if c.OverflowBits == nil {
		c.OverflowBits = []int{9}
	}
	if c.DoubtBits == nil {
		c.DoubtBits = []int{2}
	}
	if c.GateWithin <= 0 {
		c.GateWithin = 1e-3
	}
	if c.PollEvery <= 0 {
		c.PollEvery = 20 * time.Millisecond
	}
	var bad []error
	wrong := func(format string, args ...any) {
		bad = append(bad, fmt.Errorf("%s: "+format, append([]any{c.Name}, args...)...))
	}
	if len(c.Channels) == 0 {
		wrong("no channels; want at least one")
	}
	seen := map[drivers.Channel]bool{}
	for _, ch := range c.Channels {
		if ch == "" || seen[ch] {
			wrong("channel %q is empty or given twice", ch)
		}
		seen[ch] = true
	}
	if c.Tag != "" && !seen[c.Tag] {
		wrong("tag channel %q is not among the channels", c.Tag)
	}
	if !strings.Contains(c.SetGate, "{seconds}") {
		wrong("set gate: %q has no {seconds}", c.SetGate)
	}
	for _, bit := range append(append([]int{*c.CountingBit}, c.OverflowBits...), c.DoubtBits...) {
		if bit < 0 || bit > 15 {
			wrong("status bit %d; want 0 to 15", bit)
		}
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	counter := &Counter{device: d, set: c}
	counter.lastTag.Store(-1)
	return counter, nil
}

// Channels lists the channels in the order of the instrument's answers.
func (c *Counter) Channels() []drivers.Channel {
	return append([]drivers.Channel(nil), c.set.Channels...)
}

// Connect opens the line, checks who answers and sends the start settings.
func (c *Counter) Connect(ctx context.Context) error {
	c.gate = 0
	c.lastTag.Store(-1)
	return c.connect(ctx)
}

// Count opens one gate, waits for its end and reads it.
func (c *Counter) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	epoch := c.seat.Epoch()
	if err := c.setGate(ctx, gate, epoch); err != nil {
		return drivers.Gate{}, err
	}
	mayBeOpen, err := c.initiate(ctx, epoch)
	if err == nil {
		err = c.untilOver(ctx, epoch)
	}
	var g drivers.Gate
	if err == nil {
		g, err = c.read(ctx, epoch)
	}
	if err == nil {
		return g, nil
	}
	out := &drivers.Error{Op: "count", Device: c.Name(), Remedy: drivers.GiveUp, Err: err}
	if e, ok := errors.AsType[*drivers.Error](err); ok {
		*out = *e
	}
	if !mayBeOpen {
		return drivers.Gate{}, out
	}
	// A gate is open, or was, whose counts nobody will get, and whose tag nobody has read.
	out.GateOpened = true
	c.gate = 0
	c.lastTag.Store(-1)
	if out.Remedy != drivers.Reconnect && !epoch.Over() {
		if abortErr := c.abort(ctx); abortErr != nil {
			out.Err = fmt.Errorf("%w; and the gate was not aborted: %w", out.Err, abortErr)
		}
	}
	return drivers.Gate{}, out
}

func (c *Counter) setGate(ctx context.Context, gate time.Duration, epoch line.Epoch) error {
	if gate <= 0 || (c.set.GateMin > 0 && gate < c.set.GateMin) || (c.set.GateMax > 0 && gate > c.set.GateMax) {
		return c.errorf("gate", drivers.GiveUp, "a gate of %s; want %s to %s", unit.Span(gate), unit.Span(c.set.GateMin), unit.Span(c.set.GateMax))
	}
	if gate == c.gate {
		return nil
	}
	c.gate = 0
	text := strings.ReplaceAll(c.set.SetGate, "{seconds}", strconv.FormatFloat(gate.Seconds(), 'f', -1, 64))
	units, err := c.query(ctx, line.Question{Op: "gate", Repeat: c.repeat, Epoch: epoch}, text, c.set.AskGate, c.common.AskEvents)
	if err != nil {
		return err
	}
	if err := c.events(ctx, "gate", units[1]); err != nil {
		return err
	}
	again, err := c.query(ctx, line.Question{Op: "gate", Repeat: c.repeat, Epoch: epoch}, c.set.AskGate)
	if err != nil {
		return err
	}
	if again[0] != units[0] {
		return c.errorf("gate", drivers.Retry, "read back as %q and as %q; want the same twice", units[0], again[0])
	}
	seconds, err := number(units[0])
	if err != nil {
		return c.errorf("gate", drivers.Retry, "read back: %w", err)
	}
	if math.Abs(seconds-gate.Seconds()) > c.set.GateWithin*gate.Seconds() {
		return c.errorf("gate", drivers.GiveUp, "set to %s, read back as %q s; want them equal within a share of %g", unit.Written(gate), units[0], c.set.GateWithin)
	}
	c.gate, c.gateIs = gate, time.Duration(math.Round(seconds*1e9))
	return nil
}

// initiate opens the gate. After an error mayBeOpen says whether it may be open all the same.
func (c *Counter) initiate(ctx context.Context, epoch line.Epoch) (mayBeOpen bool, err error) {
	start := time.Now()
	units, err := c.query(ctx, line.Question{Op: "count", Epoch: epoch}, c.set.Initiate, c.set.AskCondition, c.common.AskEvents)
	if err != nil {
		f, ok := errors.AsType[*line.Fault](err)
		switch {
		case !ok:
			return true, err
		case f.Sent && (f.Why == line.Missing || f.Why == line.Strange):
			return c.settle(ctx, epoch, err)
		}
		return f.Sent, err
	}
	if err := c.events(ctx, "count", units[1]); err != nil {
		return true, err
	}
	condition, err := register(units[0])
	if err != nil {
		return true, c.errorf("count", drivers.Retry, "condition register: %w", err)
	}
	// A short gate may be over before its answer is here; a long one may not.
	if !c.saysCounting(condition) && time.Since(start) < c.common.Pace.Real(c.gateIs)/2 {
		return true, c.errorf("count", drivers.Retry, "not counting after %q, condition register %d", c.set.Initiate, condition)
	}
	return true, nil
}

// settle finds out whether the instrument took an INITiate whose answer did not come. It never
// sends it again: two gates might be open one after the other, and only one be written down.
func (c *Counter) settle(ctx context.Context, epoch line.Epoch, cause error) (mayBeOpen bool, err error) {
	counting, err := c.counting(ctx, epoch)
	if err != nil || counting {
		return true, err
	}
	last := c.lastTag.Load()
	if c.set.Tag == "" || last < 0 {
		return true, c.errorf("count", drivers.Retry, "it is not known whether the gate was opened: %w", cause)
	}
	units, err := c.query(ctx, line.Question{Op: "count", Repeat: c.repeat, Epoch: epoch}, c.set.Fetch)
	if err != nil {
		return true, err
	}
	counts, err := c.counts(units[0])
	if err != nil {
		return true, c.errorf("count", drivers.Retry, "%w", err)
	}
	if int64(counts[c.set.Tag]) == last {
		return false, c.errorf("count", drivers.Retry, "the gate was not opened: %w", cause)
	}
	return true, nil // it was ours, and is over
}

func (c *Counter) saysCounting(condition int) bool {
	return condition&(1<<*c.set.CountingBit) != 0
}

func (c *Counter) counting(ctx context.Context, epoch line.Epoch) (bool, error) {
	units, err := c.query(ctx, line.Question{Op: "count", Repeat: c.repeat, Epoch: epoch}, c.set.AskCondition)
	if err != nil {
		return false, err
	}
	condition, err := register(units[0])
	if err != nil {
		return false, c.errorf("count", drivers.Retry, "condition register: %w", err)
	}
	return c.saysCounting(condition), nil
}

// untilOver waits out the gate with one timer, and then asks until the instrument says that it
// no longer counts.
func (c *Counter) untilOver(ctx context.Context, epoch line.Epoch) error {
	if err := c.wait(ctx, "count", epoch, c.gateIs); err != nil {
		return err
	}
	late := c.set.EndWithin
	if late <= 0 {
		late = 2*time.Second + c.gateIs/10
	}
	// The bound is bench time, but each look costs time on the wall: give it that as well.
	by := time.Now().Add(c.common.Pace.Real(late) + c.seat.LongestAnswer())
	for {
		counting, err := c.counting(ctx, epoch)
		if err != nil {
			return err
		}
		if !counting {
			return nil
		}
		if time.Now().After(by) {
			return c.errorf("count", drivers.Retry, "still counting %s after a gate of %s", unit.Span(late), unit.Span(c.gateIs))
		}
		if err := c.wait(ctx, "count", epoch, c.set.PollEvery); err != nil {
			return err
		}
	}
}

// read takes the counts. The registers are cleared by being asked, so the first of the two
// questions cannot be repeated: if its answer is lost, so is the gate. It begins with the events: a
// counter that restarted has no counts to answer, and only the first part of a short answer is known.
func (c *Counter) read(ctx context.Context, epoch line.Epoch) (drivers.Gate, error) {
	units, err := c.query(ctx, line.Question{Op: "count", Epoch: epoch},
		c.common.AskEvents, c.set.Fetch, c.set.AskQuality, c.common.AskEvents, c.common.AskError)
	if err != nil {
		return drivers.Gate{}, err
	}
	if entry, err := c.entry("count", units[4]); err != nil || entry != nil {
		return drivers.Gate{}, errors.Join(err, entry)
	}
	for _, events := range []string{units[0], units[3]} {
		if err := c.events(ctx, "count", events); err != nil {
			return drivers.Gate{}, err
		}
	}
	quality, err := register(units[2])
	if err != nil {
		return drivers.Gate{}, c.errorf("count", drivers.Retry, "quality register: %w", err)
	}
	raw, err := c.twice(ctx, epoch, units[1])
	if err != nil {
		return drivers.Gate{}, err
	}
	counts, err := c.counts(raw)
	if err != nil {
		return drivers.Gate{}, c.errorf("count", drivers.Retry, "%w", err)
	}
	if c.set.Tag != "" {
		tag := int64(counts[c.set.Tag])
		if tag == c.lastTag.Load() {
			return drivers.Gate{}, c.errorf("count", drivers.Retry, "the counts are those of gate %d, which was read before", tag)
		}
		c.lastTag.Store(tag)
	}
	return drivers.Gate{
		Counts: counts, Set: c.gateIs, Length: c.gateIs, Raw: raw,
		Overflow: anySet(quality, c.set.OverflowBits), Doubtful: anySet(quality, c.set.DoubtBits),
	}, nil
}

// twice asks for the counts until two answers in a row agree to the letter.
func (c *Counter) twice(ctx context.Context, epoch line.Epoch, before string) (string, error) {
	for range 3 {
		units, err := c.query(ctx, line.Question{Op: "count", Repeat: c.repeat, Epoch: epoch}, c.set.Fetch)
		if err != nil {
			return "", err
		}
		if units[0] == before {
			return before, nil
		}
		before = units[0]
	}
	return "", c.errorf("count", drivers.Retry, "no two answers agree, the last is %.80q", before)
}

func (c *Counter) counts(answer string) (map[drivers.Channel]uint64, error) {
	fields := strings.Split(answer, ",")
	if len(fields) != len(c.set.Channels) {
		return nil, fmt.Errorf("%d numbers in %.80q; want one for each of %d channels", len(fields), answer, len(c.set.Channels))
	}
	counts := make(map[drivers.Channel]uint64, len(fields))
	for i, field := range fields {
		n, err := count(strings.TrimSpace(field))
		if err != nil {
			return nil, fmt.Errorf("channel %s: %w", c.set.Channels[i], err)
		}
		counts[c.set.Channels[i]] = n
	}
	return counts, nil
}

func anySet(register int, bits []int) bool {
	for _, b := range bits {
		if register&(1<<b) != 0 {
			return true
		}
	}
	return false
}

// Abort ends a gate at once, and asks whether it has ended.
func (c *Counter) Abort(ctx context.Context) error {
	c.lastTag.Store(-1)
	if _, err := c.seat.Urgent(ctx, line.Question{Op: "abort", Send: []byte(c.set.Abort)}); err != nil {
		return err
	}
	counting, err := c.counting(ctx, nil)
	if err != nil {
		return err
	}
	if counting {
		return c.errorf("abort", drivers.Retry, "still counting after %q", c.set.Abort)
	}
	return nil
}

// abort ends our own gate on the way out of Count, even if its context has ended.
func (c *Counter) abort(ctx context.Context) error {
	ctx, cancel := line.Urgently(ctx)
	defer cancel()
	_, err := c.seat.Urgent(ctx, line.Question{Op: "abort", Send: []byte(c.set.Abort)})
	return err
}
