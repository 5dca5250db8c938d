// Package custom speaks whatever language its user declares: for each question that the program
// asks of an instrument one entry says what to send and what may be answered. Patterns must
// cover the whole answer, names come from a closed list, and whatever fits no pattern is
// trouble, never a value.
//
// It refuses to be built from a declaration with which it could not work safely: a stage without
// a position query or a stop, unknown names, patterns without the groups they need. All that is
// wrong is reported at once.
package custom

import (
	"context"
	"errors"
	"fmt"
	"regexp"
	"sort"
	"strings"
	"sync/atomic"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
)

// Questions are all the names an entry of Asks may have.
func Questions() []string {
	return []string{"where", "at_rest", "homed", "move", "stop", "home", "mark", "arm", "counts", "identity", "set", "get"}
}

// question is one entry, checked and compiled.
type question struct {
	ask       Ask
	name      string
	send      template
	bare      bool
	match     *regexp.Regexp
	otherwise *regexp.Regexp
}

// device is what all kinds of instruments of this dialect share.
type device struct {
	seat      *line.Seat
	common    Common
	repeat    int
	questions map[string]*question
	start     []*question
	refused   *regexp.Regexp
	identity  atomic.Value // string
}

// kind says what a kind of device may be asked.
type kind struct {
	questions map[string][2][]string // name -> names in templates, groups in answers
	needed    []string
}

// faults collects everything that is wrong with a configuration.
type faults struct {
	device drivers.DeviceName
	all    []error
}

func (f *faults) add(where, format string, args ...any) {
	f.all = append(f.all, fmt.Errorf("%s: %s: "+format, append([]any{f.device, where}, args...)...))
}

// newDevice compiles the dialect. It always returns a device, so that the caller can look for
// more faults before it gives up.
func newDevice(l *line.Line, c Common, k kind) (*device, *faults) {
	bad := &faults{device: c.Name}
	if c.Name == "" {
		bad.add("name", "empty; want the device's name")
	}
	d := &device{common: c, repeat: 2, questions: map[string]*question{}}
	d.identity.Store("")
	if c.Repeat != nil {
		d.repeat = max(*c.Repeat, 0)
	}
	spoken := c.Dialect
	if spoken.Frame != "" && spoken.Frame != "none" {
		bad.add("frame", "%q is not available yet; want none", spoken.Frame)
	}
	names := make([]string, 0, len(spoken.Asks))
	for name := range spoken.Asks {
		names = append(names, name)
	}
	sort.Strings(names)
	for _, name := range names {
		allowed, ok := k.questions[name]
		switch {
		case !ok && contains(Questions(), name):
			bad.add("asks."+name, "is no question for this kind of device; want %s", list(k.names()))
		case !ok:
			bad.add("asks."+name, "unknown question; want %s", list(k.names()))
		default:
			d.questions[name] = compile(bad, "asks."+name, name, spoken.Asks[name], allowed[0], allowed[1])
		}
	}
	for _, name := range k.needed {
		if _, ok := spoken.Asks[name]; !ok {
			bad.add("asks."+name, "missing; %s", whyNeeded[name])
		}
	}
	for i, a := range spoken.Start {
		d.start = append(d.start, compile(bad, fmt.Sprintf("start[%d]", i), "start", a, nil, nil))
	}
	var err error
	if d.refused, err = parsePattern(spoken.Refused, []string{"reason"}); err != nil {
		bad.add("refused", "%w", err)
	}
	if spoken.Identity != "" && d.questions["identity"] == nil {
		bad.add("identity", "%q is wanted, but there is no question identity", spoken.Identity)
	}
	type pattern struct {
		re   *regexp.Regexp
		kind line.Kind
	}
	var unasked []pattern
	for i, u := range spoken.Unasked {
		where := fmt.Sprintf("unasked[%d]", i)
		re, err := parsePattern(u.Match, []string{"reason"})
		if err != nil {
			bad.add(where, "%w", err)
		} else if re == nil {
			bad.add(where, "no match; want a pattern")
		}
		kinds := map[string]line.Kind{"restarted": line.Restarted, "chatter": line.Chatter}
		if kinds[u.Means] == 0 {
			bad.add(where, "means %q; want restarted or chatter", u.Means)
		}
		unasked = append(unasked, pattern{re, kinds[u.Means]})
	}
	seat := line.SeatSettings{Device: c.Name, Echo: spoken.Echo, Unasked: func(frame []byte) line.Verdict {
		for _, u := range unasked {
			if u.re.Match(frame) {
				return line.Verdict{Kind: u.kind}
			}
		}
		return line.Verdict{}
	}}
	if seat.EndsWith, err = Bytes(spoken.EndsWith); err != nil {
		bad.add("ends_with", "%w", err)
	}
	if seat.AnswersEndWith, err = Bytes(spoken.AnswersEndWith); err != nil {
		bad.add("answers_end_with", "%w", err)
	}
	if l == nil {
		bad.add("line", "none; want the line it is on")
	} else if len(bad.all) == 0 {
		d.seat = l.Seat(seat)
	}
	return d, bad
}

var whyNeeded = map[string]string{
	"where":  "an angle that cannot be read back cannot be recorded",
	"stop":   "motion that cannot be stopped must not be started",
	"move":   "a stage must be able to move",
	"arm":    "a counter must be able to open a gate",
	"counts": "a counter must be able to give its counts",
	"set":    "it must be able to be set",
	"get":    "a value that cannot be read back cannot be recorded",
}

func (k kind) names() []string {
	var names []string
	for _, q := range Questions() {
		if _, ok := k.questions[q]; ok {
			names = append(names, q)
		}
	}
	return names
}

func compile(bad *faults, where, name string, a Ask, names, groups []string) *question {
	q := &question{ask: a, name: name, bare: a.Bytes != ""}
	var err error
	switch {
	case a.Send == "" && a.Bytes == "":
		bad.add(where, "nothing to send; want send or bytes")
	case a.Send != "" && a.Bytes != "":
		bad.add(where, "send and bytes; want one of them")
	case q.bare:
		var b []byte
		if b, err = Bytes(a.Bytes); err != nil {
			bad.add(where+".bytes", "%w", err)
		}
		q.send = template{{text: string(b)}}
	default:
		if q.send, err = parseTemplate(a.Send, names); err != nil {
			bad.add(where+".send", "%w", err)
		}
	}
	if q.match, err = parsePattern(a.Match, append([]string{"reason"}, groups...)); err != nil {
		bad.add(where+".match", "%w", err)
	}
	if q.otherwise, err = parsePattern(a.Otherwise, append([]string{"reason"}, groups...)); err != nil {
		bad.add(where+".otherwise", "%w", err)
	}
	if a.Match == "" && a.Otherwise != "" {
		bad.add(where, "otherwise without match; want both")
	}
	switch a.Proves {
	case "", "accepted":
	case "arrived":
		if a.Match == "" {
			bad.add(where, "proves arrived without an answer; want match")
		}
		fallthrough
	default:
		if name != "move" && name != "home" && name != "mark" || a.Proves != "arrived" {
			bad.add(where+".proves", "%q; want accepted, or for move and home arrived", a.Proves)
		}
	}
	if a.AngleIs < 0 {
		bad.add(where+".angle_is", "%v; want a positive angle: the sense is the axis's", a.AngleIs)
	}
	if a.Decimals != nil && (*a.Decimals < 0 || *a.Decimals > 9) {
		bad.add(where+".decimals", "%d; want 0 to 9", *a.Decimals)
	}
	return q
}

// reply is an answer that fits.
type reply struct {
	groups map[string]string
	text   string
	yes    bool // match fitted, and not otherwise
}

// question prepares an entry for the line.
func (d *device) question(q *question, op string, values map[string]string, into *reply) line.Question {
	ask := line.Question{Op: op, Send: q.send.fill(values), Bare: q.bare, Within: d.common.Pace.Real(q.ask.Within)}
	if q.match == nil {
		return ask // nothing is answered; a refusal that comes all the same is met as a stray
	}
	ask.Judge = func(frame []byte) line.Verdict {
		if g := groupsOf(q.match, frame); g != nil {
			*into = reply{groups: g, text: string(frame), yes: true}
			return line.Verdict{Kind: line.Answer}
		}
		if g := groupsOf(q.otherwise, frame); g != nil {
			*into = reply{groups: g, text: string(frame)}
			return line.Verdict{Kind: line.Answer}
		}
		if g := groupsOf(d.refused, frame); g != nil {
			return line.Verdict{Kind: line.Refused, Reason: g["reason"]}
		}
		return line.Verdict{}
	}
	return ask
}

// ask asks one question. Only one that has no effect may be repeated.
func (d *device) ask(ctx context.Context, name, op string, values map[string]string, repeat int, epoch line.Epoch) (reply, error) {
	var r reply
	q := d.question(d.questions[name], op, values, &r)
	q.Repeat, q.Epoch = repeat, epoch
	_, err := d.seat.Ask(ctx, q)
	return r, err
}

// proof is an answer, and the one to the question that was asked behind it.
type proof struct{ answer, behind reply }

// behind is the question that is asked behind another for the shape of its answer: if the answer
// before was the double of an earlier one, the true one comes now, and does not fit. Where answers
// bear no numbers nothing else tells. "" if the instrument knows none.
func (d *device) behind(name string) string {
	for _, other := range map[string][]string{
		"where":   {"homed", "at_rest", "identity"},
		"homed":   {"at_rest", "identity", "where"},
		"at_rest": {"homed", "identity", "where"},
		"counts":  {"at_rest", "identity"},
		"get":     {"at_rest", "identity"},
	}[name] {
		if q := d.questions[other]; q != nil && q.match != nil {
			return other
		}
	}
	return ""
}

// once asks a question once. follows says that it proves the answer before.
func (d *device) once(ctx context.Context, name, op string, values map[string]string, epoch line.Epoch, follows bool) (r reply, err error) {
	q := d.question(d.questions[name], op, values, &r)
	q.Epoch, q.Follows = epoch, follows
	_, err = d.seat.Ask(ctx, q)
	return r, err
}

// after asks the question behind another.
func (d *device) after(ctx context.Context, name, op string, values map[string]string, epoch line.Epoch) (reply, error) {
	other := d.behind(name)
	if other == "" {
		return reply{}, nil
	}
	r, err := d.once(ctx, other, op, values, epoch, true)
	if f := faultOf(err); f != nil && f.Why == line.Refusal {
		err = nil // a refusal has a shape of its own too
	}
	return r, err
}

// prove asks a question and the one behind it. follows says that both prove an answer before.
func (d *device) prove(ctx context.Context, name, op string, values map[string]string, epoch line.Epoch, follows bool) (p proof, err error) {
	if p.answer, err = d.once(ctx, name, op, values, epoch, follows); err == nil {
		p.behind, err = d.after(ctx, name, op, values, epoch)
	}
	return p, err
}

// errDiffer is the cause when an instrument never says the same twice.
var errDiffer = errors.New("no two answers agree")

// proved asks until two answers in a row agree, each with another question behind it, and starts
// over when anything strange comes between them.
func (d *device) proved(ctx context.Context, name, op string, values map[string]string, epoch line.Epoch, agree func(a, b proof) bool) (proof, error) {
	for try := 0; ; try++ {
		p, err := d.agreed(ctx, name, op, values, epoch, agree)
		if f := faultOf(err); f == nil || !f.Again() || try >= d.repeat {
			return p, err
		}
	}
}

func (d *device) agreed(ctx context.Context, name, op string, values map[string]string, epoch line.Epoch, agree func(a, b proof) bool) (proof, error) {
	before, err := d.prove(ctx, name, op, values, epoch, false)
	if err != nil {
		return proof{}, err
	}
	for range 3 {
		now, err := d.prove(ctx, name, op, values, epoch, true)
		if err != nil {
			return proof{}, err
		}
		if agree(before, now) {
			return now, nil
		}
		before = now
	}
	return before, d.errorf(op, drivers.Retry, "%w, the last is %.80q", errDiffer, before.answer.text)
}

// toTheLetter is how answers agree that are not measured anew each time.
func toTheLetter(a, b proof) bool { return a.answer.text == b.answer.text }

// connect opens the line, checks who answers and sends the start settings. fresh says that
// the instrument may have forgotten everything.
func (d *device) connect(ctx context.Context) (fresh bool, err error) {
	fresh, err = d.seat.Connect(ctx)
	if err != nil {
		return fresh, err
	}
	if d.questions["identity"] != nil {
		if err := d.identify(ctx); err != nil {
			return fresh, err
		}
	}
	for _, q := range d.start {
		var r reply
		ask := d.question(q, "start", nil, &r)
		ask.Repeat = d.repeat
		if _, err := d.seat.Ask(ctx, ask); err != nil {
			return fresh, err
		}
	}
	return fresh, nil
}

// identify believes the expected identity, or one that came twice the same: a damaged answer
// must not pass for another instrument.
func (d *device) identify(ctx context.Context) error {
	want, before := d.common.Dialect.Identity, ""
	for range 4 {
		r, err := d.ask(ctx, "identity", "identity", nil, d.repeat, nil)
		if err != nil {
			return err
		}
		found, ok := r.groups["identity"]
		if !ok {
			found = r.text
		}
		same := fits(want, found)
		if want != "" && same || found == before {
			if !same {
				return d.errorf("identity", drivers.GiveUp, "%q answers; want %q", found, want)
			}
			d.identity.Store(found)
			return nil
		}
		before = found
	}
	return d.errorf("identity", drivers.Retry, "four different answers, the last %q; want the same twice", before)
}

func fits(want, found string) bool {
	fields := strings.Split(found, ",")
	for i, w := range strings.Split(want, ",") {
		if w = strings.TrimSpace(w); w != "" && (i >= len(fields) || strings.TrimSpace(fields[i]) != w) {
			return false
		}
	}
	return true
}

// Name returns the bench file's name of the device.
func (d *device) Name() drivers.DeviceName { return d.common.Name }

// Identity returns what the question identity was answered by the last Connect, if it is declared.
func (d *device) Identity() string { return d.identity.Load().(string) }

func (d *device) errorf(op string, remedy drivers.Remedy, format string, args ...any) error {
	return line.Errorf(d.common.Name, op, remedy, format, args...)
}

// wait waits for a bench time, the end of ctx or the end of the epoch.
func (d *device) wait(ctx context.Context, op string, epoch line.Epoch, bench time.Duration) error {
	return line.Wait(ctx, d.common.Name, op, epoch, d.common.Pace.Real(bench))
}

func faultOf(err error) *line.Fault {
	f, _ := errors.AsType[*line.Fault](err)
	return f
}

// uncertain says that the question was sent and nobody knows whether it was heard.
func uncertain(err error) bool {
	f := faultOf(err)
	return f != nil && f.Sent && (f.Why == line.Missing || f.Why == line.Strange || f.Why == line.Interrupted)
}
