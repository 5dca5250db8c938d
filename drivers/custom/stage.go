package custom

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"math"
	"math/big"
	"slices"
	"strings"
	"sync"
	"time"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// Stage is a motion controller whose language was declared.
type Stage struct {
	*device
	set StageConfig

	mu      sync.Mutex
	trusted map[drivers.AxisName]bool // a zero found by Home or vouched for, since the last restart
}

// NewStage makes a stage from its configuration. It sends nothing. The error names everything
// that is wrong.
func NewStage(l *line.Line, c StageConfig) (*Stage, error) {
	letters := []string{"A", "B", "C"}
	for _, a := range c.Axes {
		if a.Letter != "" && !contains(letters, a.Letter) {
			letters = append(letters, a.Letter)
		}
	}
	one := []string{"letter", "address"}
	d, bad := newDevice(l, c.Common, kind{
		questions: map[string][2][]string{
			"where":    {one, append([]string{"angle", "homed"}, letters...)},
			"at_rest":  {one, nil},
			"homed":    {one, letters},
			"move":     {{"letter", "address", "angle", "feed", "targets"}, nil},
			"stop":     {one, nil},
			"home":     {one, nil},
			"mark":     {one, nil},
			"identity": {nil, []string{"identity"}},
		},
		needed: []string{"where", "move", "stop"},
	})
	s := &Stage{device: d, set: c, trusted: map[drivers.AxisName]bool{}}
	s.check(bad)
	if len(bad.all) > 0 {
		return nil, errors.Join(bad.all...)
	}
	if s.set.PollEvery <= 0 {
		s.set.PollEvery = 50 * time.Millisecond
	}
	if s.set.Margin <= 0 {
		s.set.Margin = 5 * time.Second
	}
	if s.set.MoveWithin <= 0 {
		s.set.MoveWithin = 5 * time.Minute
	}
	if s.set.HomeWithin <= 0 {
		s.set.HomeWithin = 10 * time.Minute
	}
	return s, nil
}

func (s *Stage) check(bad *faults) {
	if len(s.set.Axes) == 0 {
		bad.add("axes", "none; want at least one")
	}
	names, letters := map[drivers.AxisName]bool{}, map[string]bool{}
	for i, a := range s.set.Axes {
		where := fmt.Sprintf("axes[%d]", i)
		if a.Name == "" || names[a.Name] {
			bad.add(where, "name %q is empty or given twice", a.Name)
		}
		names[a.Name] = true
		if a.Letter != "" && (len(a.Letter) != 1 || a.Letter[0] < 'A' || a.Letter[0] > 'Z') {
			bad.add(where+".letter", "%q; want one capital letter", a.Letter)
		}
		if a.Letter != "" && letters[a.Letter] {
			bad.add(where+".letter", "%q is the letter of another axis", a.Letter)
		}
		letters[a.Letter] = true
		if a.Mount.Sense != 1 && a.Mount.Sense != -1 {
			bad.add(where+".sense", "%d; want 1 or -1", a.Mount.Sense)
		}
		if a.Speed < 0 || a.Acceleration < 0 {
			bad.add(where, "negative speed or acceleration")
		}
		if a.StepsPerTurn < 0 || a.Gear < 0 || math.IsInf(a.StepsPerTurn*a.Gear, 0) || math.IsNaN(a.StepsPerTurn*a.Gear) {
			bad.add(where+".steps_per_turn", "%v with gear %v; want positive numbers", a.StepsPerTurn, a.Gear)
		}
		if a.Gear != 0 && a.StepsPerTurn == 0 {
			bad.add(where+".gear", "without steps_per_turn")
		}
		for name, q := range s.questions {
			if (q.send.has("letter") || q.send.has("targets")) && a.Letter == "" {
				bad.add(where+".letter", "empty; asks.%s needs it", name)
			}
			if q.send.has("address") && a.Address == "" {
				bad.add(where+".address", "empty; asks.%s needs it", name)
			}
			if q.ask.AngleIs != 0 && a.StepsPerTurn != 0 {
				bad.add("asks."+name+".angle_is", "beside steps_per_turn of %s; want one of them", a.Name)
			}
			if q.send.has("feed") && a.Speed == 0 {
				bad.add(where+".speed", "missing; asks.%s sends it as {feed}", name)
			}
		}
	}
	if s.set.FeedUnit != "" && s.set.FeedUnit != "deg/min" && s.set.FeedUnit != "deg/s" {
		bad.add("feed_unit", "%q; want deg/min or deg/s", s.set.FeedUnit)
	}
	if q := s.questions["where"]; q != nil && q.match != nil {
		s.needGroups(bad, q, "angle")
	} else if q != nil && s.common.Dialect.Asks["where"].Match == "" {
		bad.add("asks.where", "no match; want a pattern with the angle")
	}
	if q := s.questions["homed"]; q != nil {
		switch {
		case q.ask.Match == "":
			bad.add("asks.homed", "no match; want the answer for yes")
		case q.match == nil:
		case q.perAxis() && q.ask.Otherwise == "":
			bad.add("asks.homed", "no otherwise; want the answer for no")
		case !q.perAxis() && q.ask.Otherwise == "":
			s.needGroups(bad, q, "")
		}
	}
	if q := s.questions["mark"]; q != nil {
		if !q.perAxis() && len(s.set.Axes) > 1 {
			bad.add("asks.mark.send", "%q for %d axes; want {letter} or {address}", q.ask.Send+q.ask.Bytes, len(s.set.Axes))
		}
		if q.ask.Match == "" {
			bad.add("asks.mark", "no match; want the answer to a search that was accepted, or is over")
		}
	}
	if q := s.questions["at_rest"]; q != nil && (q.ask.Match == "" || q.ask.Otherwise == "") {
		bad.add("asks.at_rest", "want match and otherwise: the answers for yes and for no")
	}
	if q := s.questions["move"]; q != nil {
		if !q.send.has("targets") && (!q.send.has("angle") || (!q.perAxis() && len(s.set.Axes) > 1)) {
			bad.add("asks.move.send", "%q; want {targets}, or {angle} with {letter} or {address}", q.ask.Send)
		}
		if q.ask.Match == "" && s.questions["at_rest"] == nil {
			bad.add("asks.move", "neither acknowledged nor a question at_rest; want one of them")
		}
	}
}

// needGroups wants the group one in an answer for one axis, and every axis's letter otherwise.
func (s *Stage) needGroups(bad *faults, q *question, one string) {
	if one != "" && hasGroup(q.match, one) {
		if !q.perAxis() && len(s.set.Axes) > 1 {
			bad.add("asks."+q.name, "one %s for %d axes; want {letter} or {address} in send, or a group for each letter", one, len(s.set.Axes))
		}
		return
	}
	if one != "" && q.perAxis() {
		bad.add("asks."+q.name+".match", "no group %q in %q", one, q.ask.Match)
		return
	}
	for _, a := range s.set.Axes {
		if a.Letter == "" || !hasGroup(q.match, a.Letter) {
			bad.add("asks."+q.name+".match", "no group for axis %s (letter %q) in %q", a.Name, a.Letter, q.ask.Match)
		}
	}
}

// perAxis says whether a question is asked for one axis at a time.
func (q *question) perAxis() bool { return q.send.has("letter") || q.send.has("address") }

// Axes lists the axes in the order of the configuration.
func (s *Stage) Axes() []drivers.AxisName {
	names := make([]drivers.AxisName, len(s.set.Axes))
	for i, a := range s.set.Axes {
		names[i] = a.Name
	}
	return names
}

// Together says whether axes of one Move start and finish together.
func (s *Stage) Together() bool { return s.set.Together }

// HomesTogether says that the controller can only search all references at once.
func (s *Stage) HomesTogether() bool {
	q := s.questions["home"]
	return q != nil && !q.perAxis() && len(s.set.Axes) > 1
}

// Connect opens the line, checks who answers and sends the start settings.
func (s *Stage) Connect(ctx context.Context) error {
	fresh, err := s.connect(ctx)
	if fresh {
		s.mu.Lock()
		clear(s.trusted)
		s.mu.Unlock()
	}
	return err
}

// TrustZero takes a person's word for the zero of all axes, until the next restart or reconnection.
func (s *Stage) TrustZero() {
	for _, a := range s.set.Axes {
		s.trust(a.Name)
	}
}

func (s *Stage) trust(axis drivers.AxisName) {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.trusted[axis] = true
}

// Where asks for the angles until two answers in a row agree to the letter, and whether the
// controller still knows its zero.
func (s *Stage) Where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	return s.where(ctx, "where", nil)
}

func (s *Stage) where(ctx context.Context, op string, epoch line.Epoch) (map[drivers.AxisName]unit.Angle, error) {
	position, err := s.proven(ctx, op, epoch)
	if err != nil {
		return nil, err
	}
	homed := position.homed
	if len(homed) < len(s.set.Axes) {
		if homed, err = s.homed(ctx, op); err != nil {
			return nil, err
		}
	}
	for _, a := range s.set.Axes {
		if !homed[a.Name] && !s.vouched(a.Name) {
			return nil, s.errorf(op, drivers.HomeAgain, "%s does not know its zero", a.Name)
		}
	}
	return position.angles, nil
}

type position struct {
	angles map[drivers.AxisName]unit.Angle
	homed  map[drivers.AxisName]bool // of the axes of which the answers say so
	text   string
}

// position asks once.
func (s *Stage) position(ctx context.Context, op string, epoch line.Epoch) (position, error) {
	return s.positionBy(op, func(a Axis, _ *position) (reply, error) {
		return s.ask(ctx, "where", op, a.values(), s.repeat, epoch)
	})
}

// proven asks until it is sure of the answers. What is asked between them is whether the zero is
// known, where the controller can tell.
func (s *Stage) proven(ctx context.Context, op string, epoch line.Epoch) (position, error) {
	tells := s.behind("where") == "homed"
	return s.positionBy(op, func(a Axis, p *position) (reply, error) {
		proof, err := s.proved(ctx, "where", op, a.values(), epoch, func(a, b proof) bool {
			return toTheLetter(a, b) && (!tells || a.behind.text == b.behind.text)
		})
		if err == nil && tells && proof.behind.text != "" {
			err = s.flags(op, a, proof.behind, p.homed)
		}
		return proof.answer, err
	})
}

func (s *Stage) positionBy(op string, ask func(Axis, *position) (reply, error)) (position, error) {
	q := s.questions["where"]
	p := position{angles: map[drivers.AxisName]unit.Angle{}, homed: map[drivers.AxisName]bool{}}
	take := func(a Axis, number string) error {
		angle, err := angleOf(number, s.scale(q, a))
		if err != nil {
			return s.errorf(op, drivers.Retry, "%s: %w", a.Name, err)
		}
		p.angles[a.Name] = a.Mount.Bench(angle)
		return nil
	}
	for i, a := range s.set.Axes {
		if i > 0 && !q.perAxis() {
			break
		}
		r, err := ask(a, &p)
		if err != nil {
			return position{}, err
		}
		p.text += r.text + "\n"
		answered := []Axis{a}
		if !q.perAxis() {
			answered = s.set.Axes
		}
		for _, each := range answered {
			number, ok := r.groups["angle"]
			if !hasGroup(q.match, "angle") {
				number, ok = r.groups[each.Letter]
			}
			if !ok {
				return position{}, s.errorf(op, drivers.Retry, "%s: no angle in %.80q", each.Name, r.text)
			}
			if err := take(each, number); err != nil {
				return position{}, err
			}
			if hasGroup(q.match, "homed") {
				yes, ok := truth[r.groups["homed"]]
				if !ok {
					return position{}, s.errorf(op, drivers.Retry, "%s: homed %.40q; want 1 or 0", each.Name, r.groups["homed"])
				}
				p.homed[each.Name] = yes
			}
		}
	}
	return p, nil
}

var truth = map[string]bool{"1": true, "0": false}

func (a Axis) values() map[string]string {
	return map[string]string{"letter": a.Letter, "address": a.Address}
}

// scale is what 1 in a number of the controller means, in micro-arcseconds.
func (s *Stage) scale(q *question, a Axis) *big.Rat {
	angleIs := q.ask.AngleIs
	if angleIs == 0 { // a move speaks as the position does unless it says otherwise
		angleIs = s.questions["where"].ask.AngleIs
	}
	switch {
	case angleIs != 0:
		return big.NewRat(int64(angleIs), 1)
	case a.StepsPerTurn != 0:
		steps := new(big.Rat).SetFloat64(a.StepsPerTurn)
		if a.Gear != 0 {
			steps.Mul(steps, new(big.Rat).SetFloat64(a.Gear))
		}
		return steps.Quo(big.NewRat(int64(unit.Turn), 1), steps)
	}
	return big.NewRat(int64(unit.Degree), 1)
}

func (s *Stage) number(q *question, a Axis, bench unit.Angle) string {
	decimals := 4
	scale := s.scale(q, a)
	switch {
	case q.ask.Decimals != nil:
		decimals = *q.ask.Decimals
	case scale.Cmp(big.NewRat(int64(unit.Degree), 1)) != 0:
		decimals = 0
	}
	return numberOf(a.Mount.Controller(bench), scale, decimals)
}

// vouched says whether the zero was found or vouched for since the last restart, which counts
// where the controller itself cannot tell, and where a person knows better.
func (s *Stage) vouched(axis drivers.AxisName) bool {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.trusted[axis]
}

// homed asks the controller, if it can tell.
func (s *Stage) homed(ctx context.Context, op string) (map[drivers.AxisName]bool, error) {
	q := s.questions["homed"]
	if q == nil {
		if hasGroup(s.questions["where"].match, "homed") {
			p, err := s.proven(ctx, op, nil)
			return p.homed, err
		}
		s.mu.Lock()
		defer s.mu.Unlock()
		return maps.Clone(s.trusted), nil
	}
	homed := map[drivers.AxisName]bool{}
	for i, a := range s.set.Axes {
		if i > 0 && !q.perAxis() {
			break
		}
		p, err := s.proved(ctx, "homed", op, a.values(), nil, toTheLetter)
		if err != nil {
			return nil, err
		}
		if err := s.flags(op, a, p.answer, homed); err != nil {
			return nil, err
		}
	}
	return homed, nil
}

// flags reads an answer to the question homed, asked for axis a or for all.
func (s *Stage) flags(op string, a Axis, r reply, into map[drivers.AxisName]bool) error {
	answered := s.set.Axes
	if s.questions["homed"].perAxis() {
		answered = []Axis{a}
	}
	for _, each := range answered {
		yes := r.yes
		if flag, ok := r.groups[each.Letter]; ok && yes {
			if yes, ok = truth[flag]; !ok {
				return s.errorf(op, drivers.Retry, "%s: homed %.40q; want 1 or 0", each.Name, flag)
			}
		}
		into[each.Name] = yes
	}
	return nil
}

// Homed says for each axis whether its zero is known.
func (s *Stage) Homed(ctx context.Context) (map[drivers.AxisName]bool, error) {
	homed, err := s.homed(ctx, "homed")
	if err != nil {
		return nil, err
	}
	all := map[drivers.AxisName]bool{}
	for _, a := range s.set.Axes {
		all[a.Name] = homed[a.Name] || s.vouched(a.Name)
	}
	return all, nil
}

// Move sends the axes to their targets and waits until the controller says it is at rest.
func (s *Stage) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	epoch := s.seat.Epoch()
	moved := s.targeted(targets)
	if len(moved) != len(targets) {
		return s.errorf("move", drivers.GiveUp, "targets for axes that are not here: %v; want some of %v", targets, s.Axes())
	}
	if len(moved) == 0 {
		return nil
	}
	from, err := s.position(ctx, "move", epoch)
	if err != nil {
		return err
	}
	takes := s.travel(moved, from.angles, targets)
	within := s.set.MoveWithin
	if takes > 0 {
		within = 2*takes + s.set.Margin
	}
	began := time.Now()
	commanded, err := s.command(ctx, moved, from.angles, targets, within, epoch)
	switch {
	case err == nil, uncertain(err):
	case !commanded:
		return err
	default:
		return s.halted(ctx, epoch, err)
	}
	// An acknowledgement that was lost does not mean that nothing moves.
	unacknowledged := err
	remaining := takes - s.common.Pace.Bench(time.Since(began))
	if s.questions["move"].ask.Proves == "arrived" && unacknowledged == nil {
		remaining = 0
	}
	err = s.wait(ctx, "move", epoch, max(remaining, 0))
	if err == nil {
		err = s.untilRest(ctx, "move", epoch, within)
	}
	if err != nil {
		return s.halted(ctx, epoch, err)
	}
	return unacknowledged
}

// halted stops the motion after err, where stopping can help, and returns err.
func (s *Stage) halted(ctx context.Context, epoch line.Epoch, err error) error {
	e, ok := errors.AsType[*drivers.Error](err)
	if !ok || e.Remedy == drivers.Reconnect || epoch.Over() {
		return err // the line is gone, or somebody else has stopped it
	}
	ctx, cancel := line.Urgently(ctx)
	defer cancel()
	if stopErr := s.stop(ctx); stopErr != nil {
		out := *e
		out.Err = fmt.Errorf("%w; and the stop was not confirmed: %w", e.Err, stopErr)
		return &out
	}
	return err
}

func (s *Stage) targeted(targets map[drivers.AxisName]unit.Angle) []Axis {
	var axes []Axis
	for _, a := range s.set.Axes {
		if _, ok := targets[a.Name]; ok {
			axes = append(axes, a)
		}
	}
	return axes
}

// command sends the motion. commanded says that at least one axis may have heard of it.
func (s *Stage) command(ctx context.Context, moved []Axis, from, targets map[drivers.AxisName]unit.Angle, within time.Duration, epoch line.Epoch) (commanded bool, err error) {
	q := s.questions["move"]
	send := func(axes []Axis, values map[string]string) error {
		values["feed"] = s.feed(axes, from, targets)
		var r reply
		ask := s.question(q, "move", values, &r)
		ask.Epoch = epoch
		if q.ask.Proves == "arrived" && q.ask.Within == 0 {
			ask.Within = s.common.Pace.Real(within) + s.seat.LongestAnswer()
		}
		_, err := s.seat.Ask(ctx, ask)
		if f := faultOf(err); err == nil || f == nil || f.Sent && f.Why != line.Refusal {
			commanded = true
		}
		return err
	}
	if q.send.has("targets") {
		words := make([]string, len(moved))
		for i, a := range moved {
			words[i] = a.Letter + s.number(q, a, targets[a.Name])
		}
		return commanded, send(moved, map[string]string{"targets": strings.Join(words, " ")})
	}
	var lost error
	for _, a := range moved {
		values := a.values()
		values["angle"] = s.number(q, a, targets[a.Name])
		if err := send([]Axis{a}, values); uncertain(err) {
			lost = err
		} else if err != nil {
			return commanded, err
		}
	}
	return commanded, lost
}

// travel is how long the move takes by speed, acceleration and distance; 0 if that is not known.
func (s *Stage) travel(moved []Axis, from, targets map[drivers.AxisName]unit.Angle) time.Duration {
	longest := 0.0
	for _, a := range moved {
		if a.Speed == 0 {
			return 0
		}
		way, v := (targets[a.Name] - from[a.Name]).Abs().Degrees(), a.Speed.Degrees()
		t := way / v
		if acc := a.Acceleration.Degrees(); acc > 0 {
			if way < v*v/acc {
				t = 2 * math.Sqrt(way/acc)
			} else {
				t += v / acc
			}
		}
		longest = max(longest, t)
	}
	return time.Duration(longest * 1e9)
}

// feed is the rate of a move of several axes along D = sqrt(dA^2 + dB^2 + dC^2), as RS-274/NGC
// has it (2.1.2.5), so that none of them exceeds its own speed.
func (s *Stage) feed(moved []Axis, from, targets map[drivers.AxisName]unit.Angle) string {
	squares, seconds, slowest := 0.0, 0.0, math.Inf(1)
	for _, a := range moved {
		way, v := (targets[a.Name] - from[a.Name]).Abs().Degrees(), a.Speed.Degrees()
		squares += way * way
		seconds = max(seconds, way/v)
		slowest = min(slowest, v)
	}
	rate := slowest
	if seconds > 0 {
		rate = math.Sqrt(squares) / seconds
	}
	if s.set.FeedUnit != "deg/s" {
		rate *= 60
	}
	return plain(max(rate, 0.0001), 4)
}

// untilRest asks until every axis is at rest.
func (s *Stage) untilRest(ctx context.Context, op string, epoch line.Epoch, within time.Duration) error {
	// The bound is bench time, but each look costs time on the wall: give it that as well.
	by := time.Now().Add(s.common.Pace.Real(within) + s.seat.LongestAnswer())
	for {
		rest, err := s.atRest(ctx, op, epoch)
		if err != nil {
			return err
		}
		if rest {
			return nil
		}
		if time.Now().After(by) {
			return s.errorf(op, drivers.Retry, "not at rest within %s", unit.Span(within))
		}
		if err := s.wait(ctx, op, epoch, s.set.PollEvery); err != nil {
			return err
		}
	}
}

// atRest asks the controller; where it cannot tell, two equal positions must do. A "yes" counts only
// if the question behind it gets its own answer.
func (s *Stage) atRest(ctx context.Context, op string, epoch line.Epoch) (bool, error) {
	q := s.questions["at_rest"]
	if q == nil {
		before, err := s.proven(ctx, op, epoch)
		if err != nil {
			return false, err
		}
		if err := s.wait(ctx, op, epoch, s.set.PollEvery); err != nil {
			return false, err
		}
		after, err := s.proven(ctx, op, epoch)
		return err == nil && after.text == before.text, err
	}
	for i, a := range s.set.Axes {
		if i > 0 && !q.perAxis() {
			break
		}
		rest, err := s.rests(ctx, op, a, epoch)
		if err != nil || !rest {
			return false, err
		}
	}
	return true, nil
}

func (s *Stage) rests(ctx context.Context, op string, a Axis, epoch line.Epoch) (bool, error) {
	for try := 0; ; try++ {
		r, err := s.once(ctx, "at_rest", op, a.values(), epoch, false)
		if err == nil && r.yes {
			_, err = s.after(ctx, "at_rest", op, a.values(), epoch)
		}
		if f := faultOf(err); f == nil || !f.Again() || try >= s.repeat {
			return r.yes, err
		}
	}
}

// Stop halts all axes out of turn and waits until the controller says it is at rest.
func (s *Stage) Stop(ctx context.Context) error { return s.stop(ctx) }

// brisk is how long the stop of one axis may wait for its answer while the next has not been told.
const brisk = 100 * time.Millisecond

func (s *Stage) stop(ctx context.Context) error {
	q := s.questions["stop"]
	axes := s.set.Axes
	if !q.perAxis() {
		axes = axes[:1]
	}
	var failed error // the first; the other axes are stopped all the same
	for i, a := range axes {
		var r reply
		ask := s.question(q, "stop", a.values(), &r)
		if i < len(axes)-1 {
			ask.Within = brisk
		}
		if _, err := s.seat.Urgent(ctx, ask); err != nil && !uncertain(err) && failed == nil {
			failed = err
		}
	}
	if failed != nil {
		return failed
	}
	for {
		err := s.untilRest(ctx, "stop", nil, s.set.MoveWithin)
		if f := faultOf(err); f != nil && f.Why == line.Interrupted && ctx.Err() == nil {
			continue // another stop went first; ours is still to be confirmed
		}
		return err
	}
}

// Home searches the references one after the other, or all at once where the controller can do
// nothing else.
func (s *Stage) Home(ctx context.Context, order []drivers.AxisName) error {
	q := s.questions["home"]
	if q == nil {
		return s.errorf("home", drivers.GiveUp, "the controller has no reference search; want a person who checks the zero")
	}
	epoch := s.seat.Epoch()
	known := map[drivers.AxisName]Axis{}
	for _, a := range s.set.Axes {
		known[a.Name] = a
	}
	for _, name := range order {
		if _, ok := known[name]; !ok {
			return s.errorf("home", drivers.GiveUp, "no axis %q; want some of %v", name, s.Axes())
		}
	}
	if !q.perAxis() {
		return s.search(ctx, s.set.Axes, epoch)
	}
	for _, name := range order {
		if err := s.search(ctx, []Axis{known[name]}, epoch); err != nil {
			return err
		}
	}
	return nil
}

// search runs one reference search, for the axes that take part in it.
func (s *Stage) search(ctx context.Context, axes []Axis, epoch line.Epoch) error {
	unacknowledged, err := s.seek(ctx, "home", axes[0], epoch)
	if err != nil {
		return err
	}
	homed, err := s.homed(ctx, "home")
	if err != nil {
		return err
	}
	tells := s.questions["homed"] != nil || hasGroup(s.questions["where"].match, "homed")
	for _, a := range axes {
		if tells && !homed[a.Name] {
			return s.errorf("home", drivers.Retry, "%s: the search is over, and its zero is not known", a.Name)
		}
	}
	if tells {
		return nil // and asked again each time: no memory of ours may outlive a restart unseen
	}
	if unacknowledged != nil {
		return unacknowledged // nobody can say whether it took place
	}
	for _, a := range axes {
		s.trust(a.Name)
	}
	return nil
}

// seek sends a search for a reference and waits until it is at rest. unacknowledged says why nobody can
// say that it took place, though nothing moves any more.
func (s *Stage) seek(ctx context.Context, op string, a Axis, epoch line.Epoch) (unacknowledged, err error) {
	q := s.questions[op]
	var r reply
	ask := s.question(q, op, a.values(), &r)
	ask.Epoch = epoch
	if q.ask.Proves == "arrived" && q.ask.Within == 0 {
		ask.Within = s.common.Pace.Real(s.set.HomeWithin)
	}
	_, unacknowledged = s.seat.Ask(ctx, ask)
	if err := unacknowledged; err != nil && !uncertain(err) {
		if f := faultOf(err); f != nil && !f.Sent {
			return nil, err
		}
		return nil, s.halted(ctx, epoch, err)
	}
	if err := s.untilRest(ctx, op, epoch, s.set.HomeWithin); err != nil {
		return nil, s.halted(ctx, epoch, err)
	}
	return unacknowledged, nil
}

// Mark searches the reference mark of an axis by the question mark, which leaves the zero as it is and
// the axis at its mark, and returns the angle that the controller then reports for it.
func (s *Stage) Mark(ctx context.Context, axis drivers.AxisName) (unit.Angle, error) {
	q := s.questions["mark"]
	i := slices.IndexFunc(s.set.Axes, func(a Axis) bool { return a.Name == axis })
	switch {
	case q == nil:
		return 0, s.errorf("mark", drivers.GiveUp, "the controller has no search that keeps the zero; want the question mark")
	case i < 0:
		return 0, s.errorf("mark", drivers.GiveUp, "no axis %q; want one of %v", axis, s.Axes())
	}
	epoch := s.seat.Epoch()
	if _, err := s.where(ctx, "mark", epoch); err != nil {
		return 0, err // there is a zero to be kept
	}
	unacknowledged, err := s.seek(ctx, "mark", s.set.Axes[i], epoch)
	if err == nil {
		err = unacknowledged
	}
	if err != nil {
		return 0, err
	}
	at, err := s.where(ctx, "mark", epoch)
	return at[axis], err
}
