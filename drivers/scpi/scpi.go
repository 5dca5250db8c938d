// Package scpi speaks IEEE 488.2 and SCPI-1999 with counters, shutters, sensors and settings.
// It speaks a subset; every header is a default that the configuration may overwrite, because
// the standard has no word for much of what a bench needs.
//
// Each question is numbered: the event enable mask (*ESE) is set before it and asked after it,
// so that an answer which belongs to another question shows. What ends in a reading is asked
// twice and must agree to the letter. It refuses numbers that the standard uses as flags,
// answers with too few or too many parts, and every reading during which the instrument
// reported an error or that it had been switched on.
package scpi

import (
	"context"
	"errors"
	"fmt"
	"strconv"
	"strings"
	"sync/atomic"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
)

// Bits of the standard event status register (IEEE 488.2, 11.5.1).
const (
	eventErrors  = 1<<2 | 1<<3 | 1<<4 | 1<<5 // query, device, execution and command error
	eventPowerOn = 1 << 7
)

// device is what the four kinds of instruments share.
type device struct {
	seat     *line.Seat
	common   Common
	repeat   int
	identity atomic.Value // string
}

func newDevice(l *line.Line, c Common, start []string) (*device, error) {
	if l == nil {
		return nil, fmt.Errorf("%s: no line; want the line it is on", c.Name)
	}
	if c.Name == "" {
		return nil, errors.New("device without a name")
	}
	if c.Start == nil {
		c.Start = start
	}
	orElse(&c.AskIdentity, "*IDN?")
	orElse(&c.AskError, ":SYST:ERR?")
	orElse(&c.AskEvents, "*ESR?")
	orElse(&c.Clear, "*CLS")
	d := &device{seat: l.Seat(line.SeatSettings{Device: c.Name, Nameless: true}), common: c, repeat: 2}
	if c.Repeat != nil {
		d.repeat = max(*c.Repeat, 0)
	}
	d.identity.Store("")
	return d, nil
}

func orElse(s *string, otherwise string) {
	if *s == "" {
		*s = otherwise
	}
}

// Name returns the bench file's name of the device.
func (d *device) Name() drivers.DeviceName { return d.common.Name }

// Identity returns the answer to the identity question of the last Connect.
func (d *device) Identity() string { return d.identity.Load().(string) }

// connect opens the line, clears the status, checks the identity and sends the start settings.
func (d *device) connect(ctx context.Context) error {
	if _, err := d.seat.Connect(ctx); err != nil {
		return err
	}
	if _, err := d.seat.Ask(ctx, line.Question{Op: "clear", Send: []byte(d.common.Clear)}); err != nil {
		return err
	}
	if err := d.identify(ctx); err != nil {
		return err
	}
	for _, text := range d.common.Start {
		if err := d.command(ctx, "start", text, d.repeat, nil); err != nil {
			return err
		}
	}
	return nil
}

// identify believes an identity that is the expected one, or that came twice the same: a
// damaged answer must not pass for another instrument.
func (d *device) identify(ctx context.Context) error {
	before := ""
	for range 4 {
		answer, err := d.seat.Ask(ctx, line.Question{Op: "identity", Send: []byte(d.common.AskIdentity), Repeat: d.repeat,
			Judge: func(frame []byte) line.Verdict {
				// IEEE 488.2, 10.14: four fields.
				if strings.Count(string(frame), ",") != 3 {
					return line.Verdict{Reason: "want four fields"}
				}
				return line.Verdict{Kind: line.Answer}
			}})
		if err != nil {
			return err
		}
		found := string(answer)
		field := differs(d.common.Identity, found)
		if field == "" && d.common.Identity != "" || found == before {
			if field != "" {
				return d.errorf("identity", drivers.GiveUp, "%q answers; want %q (%s differs)", found, d.common.Identity, field)
			}
			d.identity.Store(found)
			return nil
		}
		before = found
	}
	return d.errorf("identity", drivers.Retry, "four different answers, the last %q; want the same twice", before)
}

// differs names the first field of an identity that is not the expected one.
func differs(want, found string) string {
	fields := strings.Split(found, ",")
	for i, w := range strings.Split(want, ",") {
		if w = strings.TrimSpace(w); w == "" {
			continue
		}
		if i >= len(fields) || strings.TrimSpace(fields[i]) != w {
			if i < 4 {
				return [...]string{"maker", "model", "serial", "firmware"}[i]
			}
			return "the number of fields"
		}
	}
	return ""
}

// query sends parts as one message and returns the answer of each part that asks.
func (d *device) query(ctx context.Context, q line.Question, parts ...string) ([]string, error) {
	units, asks, err := d.exchange(ctx, q, parts...)
	if err != nil {
		return nil, err
	}
	if len(units) != asks {
		// The number is right, so this is our answer: the instrument refused a part of it.
		if err := d.queued(ctx, q.Op); err != nil {
			return nil, err
		}
		return nil, d.miscounted(q.Op, units, asks)
	}
	return units, nil
}

func (d *device) miscounted(op string, units []string, asks int) error {
	return d.errorf(op, drivers.Retry, "%.80q has %d parts; want %d", strings.Join(units, ";"), len(units), asks)
}

// exchange is query without a look at how many parts were answered; asks says how many should be.
func (d *device) exchange(ctx context.Context, q line.Question, parts ...string) (units []string, asks int, err error) {
	var events []int // which answers are the event register
	for _, p := range parts {
		if p == d.common.AskEvents {
			events = append(events, asks)
		}
		if isQuery(p) {
			asks++
		}
	}
	message := strings.Join(parts, ";")
	tag := ""
	if !d.common.Untagged {
		// 1 to 255: after power-on the mask is 0, which is nobody's number.
		tag = strconv.Itoa(int(d.seat.Number()%255) + 1)
		message = "*ESE " + tag + ";" + message + ";*ESE?"
	}
	q.Send = []byte(message)
	q.Cut = d.seat.Blocks()
	q.Judge = func(frame []byte) line.Verdict {
		units = split(frame, ';')
		if tag != "" {
			last := units[len(units)-1]
			if last != tag {
				if mask, err := register(last); err == nil && mask <= 255 && len(units) > 1 {
					return line.Verdict{Kind: line.Stray}
				}
				return line.Verdict{Reason: "want the number " + tag + " at its end"}
			}
			units = units[:len(units)-1]
		}
		// A part that fails is not answered, so that of a short answer only the first part is known.
		for _, at := range events {
			if at == 0 || len(units) == asks {
				if bits, err := register(units[at]); err == nil && bits&eventPowerOn != 0 {
					return line.Verdict{Kind: line.Restarted}
				}
			}
		}
		if tag == "" && len(units) != asks {
			return line.Verdict{Reason: fmt.Sprintf("want %d parts", asks)}
		}
		return line.Verdict{Kind: line.Answer}
	}
	_, err = d.seat.Ask(ctx, q)
	return units, asks, err
}

func isQuery(part string) bool {
	header, _, _ := strings.Cut(part, " ")
	return strings.HasSuffix(header, "?")
}

// command sends something that has an effect and is asked nothing, and looks whether the
// instrument had an error from it.
func (d *device) command(ctx context.Context, op, text string, repeat int, epoch line.Epoch) error {
	units, err := d.query(ctx, line.Question{Op: op, Repeat: repeat, Epoch: epoch}, text, d.common.AskEvents)
	if err != nil {
		return err
	}
	return d.events(ctx, op, units[0])
}

// events turns the error bits of the event register into the error that the queue names.
func (d *device) events(ctx context.Context, op, text string) error {
	bits, err := register(text)
	if err != nil {
		return d.errorf(op, drivers.Retry, "event register: %w", err)
	}
	if bits&eventErrors == 0 {
		return nil
	}
	if err := d.queued(ctx, op); err != nil {
		return err
	}
	return d.errorf(op, drivers.Retry, "event register %d without an entry in the error queue", bits)
}

// queued empties the error queue and returns its oldest entry as an error, or nil.
func (d *device) queued(ctx context.Context, op string) error {
	var first error
	for range 32 {
		units, asks, err := d.exchange(ctx, line.Question{Op: op, Repeat: d.repeat}, d.common.AskError)
		if err != nil {
			return err
		}
		if len(units) != asks {
			return d.miscounted(op, units, asks) // an instrument without an error queue
		}
		entry, err := d.entry(op, units[0])
		if err != nil {
			return err
		}
		if entry == nil {
			return first
		}
		if first == nil {
			first = entry
		}
	}
	return first
}

// entry reads one entry of the error queue; nil for 0, "No error". bad is an entry that is none.
func (d *device) entry(op, text string) (entry, bad error) {
	fields := split([]byte(text), ',')
	n, err := number(fields[0])
	if err != nil || n != float64(int(n)) || len(fields) != 2 || !strings.HasPrefix(fields[1], `"`) || !strings.HasSuffix(fields[1], `"`) {
		return nil, d.errorf(op, drivers.Retry, "error queue: %.80q; want <number>,\"<text>\"", text)
	}
	if n == 0 {
		return nil, nil
	}
	remedy, restarted := remedyFor(int(n))
	return &drivers.Error{Op: op, Device: d.common.Name, Remedy: remedy, Restarted: restarted, Err: fmt.Errorf("the instrument reports %s", text)}, nil
}

// remedyFor sorts the numbers of the error queue (SCPI-1999 volume 2, 21.8).
func remedyFor(n int) (remedy drivers.Remedy, restarted bool) {
	switch {
	case n == -500: // power on
		return drivers.Reconnect, true
	case n == -213: // init ignored: a gate is open
		return drivers.Retry, false
	case n == -230, n == -231: // data stale or questionable
		return drivers.Retry, false
	case n <= -360 && n >= -369, n <= -400 && n >= -499: // the line is out of step
		return drivers.Retry, false
	case n == -350: // queue overflow: what was lost is not known
		return drivers.Retry, false
	case n <= -800 && n >= -899, n <= -700 && n >= -799, n <= -600 && n >= -699: // events
		return drivers.Retry, false
	}
	return drivers.GiveUp, false // the bench file, this program or the hardware is wrong
}

func (d *device) errorf(op string, remedy drivers.Remedy, format string, args ...any) error {
	return line.Errorf(d.common.Name, op, remedy, format, args...)
}

// wait waits for a bench time, the end of ctx or the end of the epoch.
func (d *device) wait(ctx context.Context, op string, epoch line.Epoch, bench time.Duration) error {
	return line.Wait(ctx, d.common.Name, op, epoch, d.common.Pace.Real(bench))
}
