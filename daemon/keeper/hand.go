package keeper

import (
	"context"
	"crypto/rand"
	"encoding/json"
	"errors"
	"fmt"
	"runtime/debug"
	"slices"
	"strings"
	"time"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/engine"
)

// handLease is how long a session of hand work outlives its last request: a terminal that died must
// not leave the light on.
const handLease = 2 * time.Minute

// handWatch is the time between two glances at the light while detectors see some and nobody looks.
const handWatch = 2 * time.Second

// hands is the room of hand work. Its fields are guarded by the keeper's mu.
type hands struct {
	serving bool // Run works, and can let a person have the bench
	session *handSession
	waiting []*handOrder
	cancel  context.CancelCauseFunc // ends the act under way; nil: there is none
}

// handSession is one person's hold of the bench.
type handSession struct {
	name  string
	who   string
	since time.Time
	last  time.Time // when something was asked or answered
	letGo bool
}

// handOrder is one request on its way to Run's goroutine.
type handOrder struct {
	q      protocol.HandRequest
	by     string // who asked
	stop   bool   // by somebody who need not be the session's
	answer func(protocol.HandReply, error)
	// restBad is, once the session has ended with this order, what of the rest state was not reached.
	restBad string
}

// ends says whether the session is over after it.
func (o *handOrder) ends() bool { return o.stop || o.q.Act == protocol.HandLeave }

// interrupts says whether it does not wait for what goes on.
func (o *handOrder) interrupts() bool { return o.ends() || o.q.Act == protocol.HandRest }

// Hand takes a request for hand work, and answers it when it is done. The first opens a session, if
// no run is active and none is about to be; until that ends no run begins, and those that are asked
// for wait in the queue. What moves, opens, closes, counts or sets is in the journal before it is
// answered; looks that follow one another closely are one entry, written when they end.
func (k *Keeper) Hand(ctx context.Context, q protocol.HandRequest, answer func(protocol.HandReply, error)) {
	if err := handProblem(q); err != nil {
		answer(protocol.HandReply{}, err)
		return
	}
	if !safeByHand(q) && !k.Armed(time.Now()) {
		answer(protocol.HandReply{}, notArmed())
		return
	}
	if err := k.enqueueHand(ctx, &handOrder{q: q, by: who(q.Who), answer: answer}); err != nil {
		answer(protocol.HandReply{}, err)
	}
}

// acts names what may be asked for by hand.
func acts() (names []string) {
	for _, act := range protocol.HandActs() {
		names = append(names, string(act))
	}
	return names
}

// safeByHand says whether an act can make light or motion.
func safeByHand(q protocol.HandRequest) bool {
	switch q.Act {
	case protocol.HandWhere, protocol.HandRest, protocol.HandRelease, protocol.HandStay, protocol.HandLeave:
		return true
	case protocol.HandShutter:
		return !*q.Open
	}
	return false
}

// handProblem says what is wrong with a request as such: each act has what it needs, and nothing else.
func handProblem(q protocol.HandRequest) error {
	needs, known := map[protocol.HandAct]string{
		protocol.HandLook: "gate_s", protocol.HandMove: "axis", protocol.HandShutter: "open shutter", protocol.HandSet: "setting unit value", protocol.HandHome: "axis",
		protocol.HandWhere: "", protocol.HandRelease: "", protocol.HandTake: "", protocol.HandRest: "", protocol.HandStay: "", protocol.HandLeave: "",
	}[q.Act]
	if !known {
		return protocol.Refuse(400, fmt.Sprintf("act %.40q; want one of %s", q.Act, strings.Join(acts(), ", ")))
	}
	var has []string
	for _, f := range []struct {
		key string
		set bool
	}{{"axis", q.Axis != ""}, {"gate_s", q.Gate != 0}, {"open", q.Open != nil}, {"setting", q.Setting != ""}, {"shutter", q.Shutter != ""}, {"unit", q.Unit != ""}, {"value", q.Value != nil}} {
		if f.set {
			has = append(has, f.key)
		}
	}
	targets := 0
	for _, t := range []*unit.Angle{q.To, q.By} {
		if t != nil {
			targets++
		}
	}
	want := 0
	if q.Act == protocol.HandMove {
		want = 1
	}
	switch {
	case strings.Join(has, " ") != needs:
		return protocol.Refuse(400, fmt.Sprintf("act %s with %s; want %s", q.Act, orNothing(strings.Join(has, ", ")), orNothing(strings.ReplaceAll(needs, " ", ", "))))
	case targets != want:
		return protocol.Refuse(400, fmt.Sprintf("act %s with %d of to_deg and by_deg; want %d", q.Act, targets, want))
	case q.Live && q.Act != protocol.HandLook:
		return protocol.Refuse(400, fmt.Sprintf("act %s with live; want it with look only", q.Act))
	}
	return nil
}

func orNothing(text string) string {
	if text == "" {
		return "nothing else"
	}
	return text
}

// enqueueHand gives an order to Run's goroutine, and opens the session if it is the first. Only that
// waits until it is decided whose turn it is: a request to rest never does.
func (k *Keeper) enqueueHand(ctx context.Context, o *handOrder) error {
	for {
		if k.handSession() != nil {
			if err := k.giveHand(o, false, nil); !errors.Is(err, errHandOver) {
				return err
			}
		}
		if opened, err := k.openHand(ctx, o); opened || err != nil {
			return err
		}
	}
}

var errHandOver = errors.New("the session ended meanwhile")

// openHand gives an order that may open a session; not opened, with no error, means that somebody
// else opened one just before.
func (k *Keeper) openHand(ctx context.Context, o *handOrder) (opened bool, err error) {
	k.order.Lock()
	defer k.order.Unlock()
	if k.handSession() != nil {
		return false, nil
	}
	queue, err := k.waiting(ctx)
	if err != nil {
		return false, err
	}
	return true, k.giveHand(o, true, queue)
}

// giveHand puts an order where Run's goroutine finds it.
func (k *Keeper) giveHand(o *handOrder, mayOpen bool, queue []logbook.Waiting) error {
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.hands.session == nil && !mayOpen {
		return errHandOver
	}
	if err := k.admit(o, queue); err != nil {
		return err
	}
	h := &k.hands
	if len(h.waiting) >= mostHandOrders && !o.interrupts() {
		return protocol.Refuse(503, "too many acts wait already")
	}
	h.session.last = time.Now()
	if o.interrupts() {
		h.waiting = append([]*handOrder{o}, h.waiting...)
		if h.cancel != nil {
			h.cancel(fmt.Errorf("interrupted by %s", o.by))
		}
	} else {
		h.waiting = append(h.waiting, o)
	}
	k.nudge()
	return nil
}

// mostHandOrders may wait for the one that is carried out.
const mostHandOrders = 16

// admit says whether an order belongs to the session, and opens one where it may. It needs mu, and to
// open one, order too.
func (k *Keeper) admit(o *handOrder, queue []logbook.Waiting) error {
	h := &k.hands
	switch s := h.session; {
	case !h.serving:
		return protocol.Refuse(503, "nobody serves this bench by hand: `gemel serve` does, while it runs; `gemel run` executes one recipe")
	case s == nil && (o.interrupts() || o.q.Act == protocol.HandStay || o.q.Session != ""):
		return protocol.Refuse(409, "no such session of hand work: it ended, and the bench went to rest then")
	case s == nil && k.current != nil:
		return protocol.Refuse(409, fmt.Sprintf("run %s is %s; the bench is under its hand until it ends: wait, or stop it", k.row.Run, k.current.Snapshot().State))
	case s == nil && len(queue) > 0:
		return protocol.Refuse(409, fmt.Sprintf("run %s waits in the queue and begins now; wait, or stop it", queue[0].Run))
	case s == nil:
		h.session = &handSession{name: rand.Text(), who: o.by, since: time.Now()}
	case o.stop || o.q.Session == s.name:
	case o.q.Session == "" && s.letGo && time.Since(s.last) > handLease:
		s.name, s.who = rand.Text(), o.by // whoever let go of the lines went away: the next one goes on
	default:
		return protocol.Refuse(409, fmt.Sprintf("%s has the bench under their hand since %s; it is free when they leave, or %s after the last they asked", s.who, s.since.Local().Format("15:04:05"), unit.Span(handLease)))
	}
	return nil
}

func (k *Keeper) nudge() {
	select {
	case k.wake <- struct{}{}:
	default:
	}
}

// stopHand ends a session of hand work, whosever it is: it is the stop of the bench's own run.
func (k *Keeper) stopHand(ctx context.Context, q protocol.RunRequest) (protocol.RunReply, error) {
	type answer struct {
		reply protocol.HandReply
		err   error
	}
	answers := make(chan answer, 1)
	o := &handOrder{q: protocol.HandRequest{Act: protocol.HandLeave, Who: q.Who}, by: who(q.Who), stop: true, answer: func(r protocol.HandReply, err error) { answers <- answer{r, err} }}
	if err := k.enqueueHand(ctx, o); err != nil {
		return protocol.RunReply{}, err
	}
	select {
	case <-ctx.Done():
		return protocol.RunReply{}, context.Cause(ctx)
	case a := <-answers:
		return protocol.RunReply{Run: protocol.BenchRun, State: protocol.Stopped, Causes: []protocol.Cause{}, Recorded: a.reply.Recorded, Rest: o.restBad}, a.err
	}
}

// openHands lets people have the bench while Run works; the function it returns ends that, and
// answers whoever still waits.
func (k *Keeper) openHands() (closeHands func()) {
	k.mu.Lock()
	k.hands.serving = true
	k.mu.Unlock()
	return func() { refuseHands(k.closeSession(false), 503, "the daemon is ending; nothing was done") }
}

// closeSession ends the session, if there is one, and returns the orders that still waited for it:
// what comes after belongs to another.
func (k *Keeper) closeSession(serving bool) (waiting []*handOrder) {
	k.mu.Lock()
	defer k.mu.Unlock()
	waiting = k.hands.waiting
	k.hands = hands{serving: serving}
	return waiting
}

func refuseHands(waiting []*handOrder, code int, text string) {
	for _, o := range waiting {
		o.answer(protocol.HandReply{}, protocol.Refuse(code, text))
	}
}

func (k *Keeper) handSession() *handSession {
	k.mu.Lock()
	defer k.mu.Unlock()
	return k.hands.session
}

// handWork lets a person have the bench, if one asked for it, until the session ends.
func (k *Keeper) handWork(ctx context.Context) (done bool, err error) {
	s := k.handSession()
	if s == nil {
		return false, nil
	}
	w := &handWork{k: k, s: s, hand: engine.NewHand(k.Bench, k.Config.Hand)}
	return true, w.run(ctx)
}

// handWork is one session, in Run's goroutine.
type handWork struct {
	k     *Keeper
	s     *handSession
	hand  *engine.Hand
	begun bool
	now   *handOrder // being carried out
	looks struct {
		count int
		gate  time.Duration
		last  string
	}
	owed []owedEvent // could not be written
}

type owedEvent struct {
	kind   protocol.EventKind
	text   string
	detail map[string]any
}

// run carries out orders until the session is over, and leaves the bench at rest, also after a bug.
func (w *handWork) run(ctx context.Context) (err error) {
	why, last := "", (*handOrder)(nil)
	func() {
		defer func() {
			if v := recover(); v != nil {
				why, last = fmt.Sprintf("a bug in this program ended the hand work of %s: %v", w.who(), v), w.now
				err = fmt.Errorf("hand work: panic: %v\n%s", v, debug.Stack())
			}
		}()
		why, last = w.loop(ctx)
	}()
	w.end(ctx, why, last, err)
	return err
}

// loop returns why the session is over, and the order that is answered when it is.
func (w *handWork) loop(ctx context.Context) (why string, last *handOrder) {
	for {
		o, why := w.next(ctx)
		if o == nil {
			return why, nil
		}
		switch {
		case o.stop:
			return fmt.Sprintf("%s ended the hand work of %s", o.by, w.who()), o
		case o.ends():
			return fmt.Sprintf("%s took the hand off the bench", w.who()), o
		}
		w.now = o
		first := !w.begun
		reply, err := w.carryOut(ctx, o)
		w.now = nil
		w.touch()
		if !w.begun { // answered when the bench is free again, so that who asks next is not told of this session
			return "", &handOrder{q: o.q, by: o.by, answer: func(protocol.HandReply, error) { o.answer(reply, err) }}
		}
		if first && err != nil && !w.awaited() { // a refusal names no session: nobody could go on with this one
			return fmt.Sprintf("the first act of %s was refused, so the hand work ended", w.who()), &handOrder{q: o.q, by: o.by, answer: func(protocol.HandReply, error) { o.answer(reply, err) }}
		}
		o.answer(reply, err)
	}
}

func (w *handWork) who() string {
	w.k.mu.Lock()
	defer w.k.mu.Unlock()
	return w.s.who
}

func (w *handWork) name() string {
	w.k.mu.Lock()
	defer w.k.mu.Unlock()
	return w.s.name
}

// awaited says whether another order waits already, such as the stop that cut the last one short.
func (w *handWork) awaited() bool {
	w.k.mu.Lock()
	defer w.k.mu.Unlock()
	return len(w.k.hands.waiting) > 0
}

func (w *handWork) touch() {
	w.k.mu.Lock()
	defer w.k.mu.Unlock()
	w.s.last, w.s.letGo = time.Now(), w.hand.LetGo()
}

// next waits for the next order; nil with the reason when the session is over. While detectors see
// light it glances at them.
func (w *handWork) next(ctx context.Context) (o *handOrder, why string) {
	for {
		w.k.mu.Lock()
		if h := &w.k.hands; len(h.waiting) > 0 {
			o, h.waiting = h.waiting[0], h.waiting[1:]
		}
		left := handLease - time.Since(w.s.last)
		w.k.mu.Unlock()
		if o != nil {
			return o, ""
		}
		if w.hand.LetGo() {
			left = handLease // another program works: nothing of ours is on, and only a person takes the lines back
		} else if left <= 0 {
			return nil, fmt.Sprintf("nothing was asked for %s, so the hand work of %s ended", unit.Span(handLease), w.who())
		}
		timer := time.NewTimer(min(left, handWatch))
		select {
		case <-ctx.Done():
			timer.Stop()
			return nil, fmt.Sprintf("the program was told to end, and the hand work of %s with it", w.who())
		case <-w.k.wake:
			timer.Stop()
		case <-timer.C:
			w.watch(ctx)
		}
	}
}

func (w *handWork) watch(ctx context.Context) {
	op, done := w.operation(ctx)
	err := w.hand.Watch(op)
	interrupted := op.Err() != nil
	done()
	if err == nil || interrupted {
		return
	}
	text := "while nobody looked: " + oneLine(err)
	if _, bright := errors.AsType[*engine.HandBright](err); !bright {
		text += "; nobody can judge the light, so the bench went to rest" + notAtRest(w.hand.Rest(ctx))
	}
	w.record(ctx, protocol.Trouble, text, nil)
}

// operation gives a context that ends with ctx, or when somebody wants rest.
func (w *handWork) operation(ctx context.Context) (context.Context, func()) {
	op, cancel := context.WithCancelCause(ctx)
	w.k.mu.Lock()
	defer w.k.mu.Unlock()
	w.k.hands.cancel = cancel
	if q := w.k.hands.waiting; len(q) > 0 && q[0].interrupts() {
		cancel(fmt.Errorf("interrupted by %s", q[0].by))
	}
	return op, func() {
		w.k.mu.Lock()
		w.k.hands.cancel = nil
		w.k.mu.Unlock()
		cancel(nil)
	}
}

// carryOut does what an order says, and writes it down.
func (w *handWork) carryOut(ctx context.Context, o *handOrder) (protocol.HandReply, error) {
	if at := o.q.ExpiresAt; at != nil && !at.IsZero() && !time.Now().Before(at.Time) {
		return protocol.HandReply{}, protocol.Refuse(408, fmt.Sprintf("expired at %s; nothing was done", at))
	}
	op, done := w.operation(ctx)
	defer done()
	if !w.begun {
		if err := w.hand.Begin(op); err != nil {
			text := fmt.Sprintf("%s could not take the bench in hand: %s", o.by, oneLine(err))
			w.record(ctx, protocol.Trouble, text, map[string]any{"who": o.by})
			return protocol.HandReply{}, protocol.Refuse(503, text)
		}
		w.begun = true
		text := o.by + " took the bench in hand"
		if lost := w.hand.Lost(); len(lost) > 0 {
			text += "; the angle is not known of " + strings.Join(lost, ", ")
		}
		if !w.record(ctx, protocol.OperatorDid, text, map[string]any{"who": o.by, handDetail: handBegins}) {
			return protocol.HandReply{}, w.noRoom()
		}
	}
	if !o.q.Live && o.q.Act != protocol.HandStay {
		w.writeLooks(ctx)
	}
	if !w.payOwed(ctx) && !safeByHand(o.q) {
		return protocol.HandReply{}, w.noRoom()
	}
	text, detail, seen, moved, err := w.act(op, o)
	if refused, is := errors.AsType[*engine.HandRefused](err); is {
		return protocol.HandReply{}, protocol.Refuse(409, refused.Text)
	}
	reply := w.hand.State()
	reply.Act, reply.Session, reply.Text, reply.Lease, reply.Look = o.q.Act, w.name(), text, protocol.Seconds(handLease), seen
	if moved != nil {
		reply.Moved = moved
	}
	if err != nil {
		return protocol.HandReply{}, w.failed(ctx, op, o, text, detail, err)
	}
	switch {
	case o.q.Act == protocol.HandWhere || o.q.Act == protocol.HandStay:
	case o.q.Live:
		w.looks.count++
		w.looks.gate, w.looks.last = o.q.Gate.Duration(), text
	default:
		if reply.Recorded = w.record(ctx, protocol.OperatorDid, o.by+" "+text, detail); !reply.Recorded {
			reply.Text += "; " + w.noRoom().Error()
			w.fill(&reply)
		}
	}
	return reply, nil
}

// fill tells again how the bench stands.
func (w *handWork) fill(r *protocol.HandReply) {
	s := w.hand.State()
	r.Axes, r.Shutters, r.Settings, r.Sensors, r.LetGo = s.Axes, s.Shutters, s.Settings, s.Sensors, s.LetGo
}

// failed writes down what went wrong in an act that had begun, and makes the refusal of it.
func (w *handWork) failed(ctx, op context.Context, o *handOrder, text string, detail map[string]any, err error) error {
	said := oneLine(err)
	if op.Err() != nil {
		said = context.Cause(op).Error()
	}
	code := 503
	if bright, is := errors.AsType[*engine.HandBright](err); is {
		code = 409
		detail["detector"], detail["rate_hz"], detail["limit_hz"] = bright.Detector, bright.RateHz, bright.LimitHz
	}
	said = fmt.Sprintf("%s %s: %s", o.by, text, said)
	if !w.record(ctx, protocol.Trouble, said, detail) {
		said += "; " + w.noRoom().Error()
	}
	return protocol.Refuse(code, said)
}

// act does one thing. The text says what, as a sentence that begins with the person's name; it is
// true of what was tried also when there is an error.
func (w *handWork) act(ctx context.Context, o *handOrder) (text string, detail map[string]any, seen *protocol.HandLookedAt, moved []protocol.HandMoved, err error) {
	q, h := o.q, w.hand
	detail = map[string]any{"who": o.by, "act": string(q.Act), handDetail: handGoesOn}
	switch q.Act {
	case protocol.HandLook:
		looked, err := h.Look(ctx, q.Gate.Duration())
		if err == nil {
			detail["look"], seen = looked, &looked
		}
		return lookedText(q.Gate.Duration(), looked), detail, seen, nil, err
	case protocol.HandWhere:
		return "asked how the bench stands", detail, nil, nil, h.Where(ctx)
	case protocol.HandMove:
		angle, by := q.To, q.By != nil
		if by {
			angle = q.By
		}
		m, err := h.Move(ctx, drivers.AxisName(q.Axis), *angle, by)
		detail["axis"], detail["from_deg"], detail["target_deg"] = q.Axis, m.From, m.Target
		text = fmt.Sprintf("moved %s from %s deg to %s", q.Axis, m.From.Fixed(4), m.Target)
		if err == nil {
			detail["stands_deg"] = m.Stands
			text += fmt.Sprintf(", where it stands at %s deg", m.Stands.Fixed(4))
		}
		return text, detail, nil, nil, err
	case protocol.HandShutter:
		detail["shutter"], detail["open"] = q.Shutter, *q.Open
		text = "closed " + q.Shutter
		if *q.Open {
			text = "opened " + q.Shutter
		}
		return text, detail, nil, nil, h.Shutter(ctx, q.Shutter, *q.Open)
	case protocol.HandSet:
		text, err = w.set(ctx, q, detail)
		return text, detail, nil, nil, err
	case protocol.HandHome:
		detail["axis"] = q.Axis
		return "let " + q.Axis + " search its zero", detail, nil, nil, h.Home(ctx, drivers.AxisName(q.Axis))
	case protocol.HandRelease:
		return "let go of all lines, at rest", detail, nil, nil, h.Release(ctx)
	case protocol.HandTake:
		moved, err = h.Take(ctx)
		text = "took the lines again" + tookText(moved, h.Lost(), err)
		detail["moved"], detail["lost"] = moved, h.Lost()
		return text, detail, nil, moved, err
	case protocol.HandRest:
		if h.LetGo() {
			return "", nil, nil, nil, &engine.HandRefused{Text: "the lines are let go: the instruments are another program's"}
		}
		return "brought the bench to rest" + notAtRest(h.Rest(ctx)), detail, nil, nil, nil
	}
	return "keeps the session", detail, nil, nil, nil
}

func (w *handWork) set(ctx context.Context, q protocol.HandRequest, detail map[string]any) (string, error) {
	wanted, err := w.hand.SettingUnit(drivers.DeviceName(q.Setting))
	if err != nil {
		return "", err
	}
	value, err := converted(*q.Value, q.Unit, wanted)
	if err != nil {
		return "", &engine.HandRefused{Text: q.Setting + ": " + err.Error()}
	}
	got, err := w.hand.Set(ctx, drivers.DeviceName(q.Setting), value)
	detail["setting"], detail["target"], detail["value"], detail["unit"] = q.Setting, value, got, wanted
	text := fmt.Sprintf("set %s to %.9g %s", q.Setting, value, wanted)
	if err == nil && got != value {
		text += fmt.Sprintf("; it reads %.9g %s", got, wanted)
	}
	return text, err
}

// converted brings a value from one unit to another of the same kind.
func converted(value float64, from, to string) (float64, error) {
	if from == to {
		return value, nil
	}
	text := fmt.Sprintf("%.17g %s", value, from)
	base, kind, _, err := unit.ParseAny(text)
	if err != nil {
		return 0, err
	}
	if !slices.Contains(unit.Units(kind), to) {
		return 0, fmt.Errorf("%.9g %s; want a value in %s", value, from, to)
	}
	return unit.In(base, to)
}

func lookedText(gate time.Duration, l protocol.HandLookedAt) string {
	var b strings.Builder
	fmt.Fprintf(&b, "looked, gate %s", secondsText(gate))
	for i, r := range l.Rates {
		fmt.Fprintf(&b, "%s%s %s /s", map[bool]string{true: ": ", false: ", "}[i == 0], r.Channel, rateText(r.Rate))
		if r.Accidentals != nil {
			fmt.Fprintf(&b, " (%.3g /s accidental)", *r.Accidentals)
		}
	}
	for _, r := range l.Ratios {
		if r.Ratio != nil {
			fmt.Fprintf(&b, ", %s/%s %.4f", r.Channel, r.Over, *r.Ratio)
		}
	}
	if l.Doubt != "" {
		b.WriteString("; doubtful: " + l.Doubt)
	}
	return b.String()
}

// rateText has no decimals that counting does not give, and no exponent.
func rateText(hz float64) string {
	if hz < 100 {
		return fmt.Sprintf("%.3g", hz)
	}
	return fmt.Sprintf("%.0f", hz)
}

func secondsText(d time.Duration) string { return fmt.Sprintf("%.9g s", d.Seconds()) }

func tookText(moved []protocol.HandMoved, lost []string, err error) string {
	if err != nil {
		return ""
	}
	text := "; who answers was checked, the bench is at rest"
	if len(lost) > 0 {
		text += "; the angle is not known of " + strings.Join(lost, ", ")
	}
	if len(moved) == 0 {
		return text + "; everything stands as it was left"
	}
	for _, m := range moved {
		text += fmt.Sprintf("; %s went from %.9g to %.9g %s", m.Name, m.Before, m.After, m.Unit)
	}
	return text
}

func notAtRest(bad string) string {
	if bad == "" {
		return ""
	}
	return "; THE REST STATE WAS NOT REACHED: " + bad
}

func oneLine(err error) string {
	line, _, _ := strings.Cut(err.Error(), "\n")
	return line
}

// writeLooks closes a series of looks.
func (w *handWork) writeLooks(ctx context.Context) {
	if w.looks.count == 0 {
		return
	}
	text := fmt.Sprintf("%s looked %d times; the last time %s", w.who(), w.looks.count, w.looks.last)
	w.record(ctx, protocol.OperatorDid, text, map[string]any{"who": w.who(), "act": string(protocol.HandLook), "times": w.looks.count, "gate_s": w.looks.gate.Seconds(), handDetail: handGoesOn})
	w.looks.count = 0
}

// Under handDetail the journal's events of hand work say whether a session began, goes on, or ended.
const (
	handDetail = "hand"
	handBegins = "begins"
	handGoesOn = "goes on"
	handEnds   = "ends"
)

// record writes an event of the bench. If it cannot be written the bench goes to rest, and the event
// is written when there is room.
func (w *handWork) record(ctx context.Context, kind protocol.EventKind, text string, detail map[string]any) bool {
	if detail == nil {
		detail = map[string]any{"who": w.who(), handDetail: handGoesOn}
	}
	w.owed = append(w.owed, owedEvent{kind, text, detail})
	if w.payOwed(ctx) {
		return true
	}
	if w.begun && !w.hand.LetGo() {
		w.hand.Rest(ctx)
	}
	return false
}

// payOwed writes what could not be written; false when it still cannot.
func (w *handWork) payOwed(ctx context.Context) bool {
	for len(w.owed) > 0 {
		o := w.owed[0]
		if err := w.k.benchEvent(context.WithoutCancel(ctx), o.kind, o.text, o.detail); err != nil {
			return false
		}
		w.owed = w.owed[1:]
	}
	return true
}

func (w *handWork) noRoom() error {
	return protocol.Refuse(503, "nothing can be written, so the bench is at rest until there is room")
}

// end leaves the rest state, writes that the session is over, and answers who asked for that.
func (w *handWork) end(ctx context.Context, why string, last *handOrder, bug error) {
	bad, how := "", ", with the lines still another program's"
	if !w.hand.LetGo() || ctx.Err() == nil {
		bad = w.hand.End(ctx)
		how = ", with the bench at rest" + notAtRest(bad)
	}
	recorded := true
	if w.begun {
		w.writeLooks(ctx)
		kind := protocol.OperatorDid
		if bug != nil || bad != "" {
			kind = protocol.Trouble
		}
		recorded = w.record(ctx, kind, why+how, map[string]any{"who": w.who(), handDetail: handEnds})
	}
	waiting := w.k.closeSession(true)
	if last != nil {
		reply := w.hand.State()
		reply.Act, reply.Session, reply.Text, reply.Recorded = last.q.Act, w.name(), why+how, recorded
		last.restBad = bad
		var err error
		if bug != nil {
			err = protocol.Refuse(500, why)
		}
		last.answer(reply, err)
	}
	refuseHands(waiting, 409, "no such session of hand work: it ended just now, and nothing more was done")
	w.k.nudge() // a run may wait
}

// tellCutHand writes that hand work was cut short by the end of the program, if the journal says so.
func (k *Keeper) tellCutHand(ctx context.Context) error {
	last, err := k.Book.Last(ctx, protocol.BenchRun)
	if err != nil {
		return err
	}
	entries, err := k.Book.Entries(ctx, protocol.BenchRun, max(0, last-100), 100)
	if err != nil {
		return err
	}
	for _, e := range slices.Backward(entries) {
		var ev protocol.Event
		if e.Kind != protocol.EventEntry || json.Unmarshal(e.Body, &ev) != nil || ev.Detail[handDetail] == nil {
			continue
		}
		if ev.Detail[handDetail] == handEnds {
			return nil
		}
		return k.benchEvent(ctx, protocol.Interrupted, fmt.Sprintf("interrupted: the program ended during the hand work of %v; what was being done then is not written", ev.Detail["who"]),
			map[string]any{handDetail: handEnds, "who": ev.Detail["who"], "after_sequence": e.Sequence})
	}
	return nil
}
