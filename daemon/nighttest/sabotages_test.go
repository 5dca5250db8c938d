package nighttest

import (
	"bytes"
	"context"
	"encoding/json"
	"maps"
	"slices"
	"time"

	"gemel/daemon/courier"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/engine"
)

// twice publishes an entry a second time; without one it leaves an entry out.
type unfaithful struct {
	courier.Sink
	leaveOut bool
	n        int
}

func (s *unfaithful) Publish(ctx context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	if s.n++; s.n != 30 {
		return s.Sink.Publish(ctx, m, after)
	}
	if s.leaveOut {
		return courier.Last{Message: m, Sequence: after.Sequence}, nil
	}
	last, err := s.Sink.Publish(ctx, m, after)
	if err != nil {
		return last, err
	}
	return s.Sink.Publish(ctx, m, last)
}

func publishTwice() Sabotage {
	return Sabotage{Sink: func(s courier.Sink) courier.Sink { return &unfaithful{Sink: s} }}
}

func leaveOneOut() Sabotage {
	return Sabotage{Sink: func(s courier.Sink) courier.Sink { return &unfaithful{Sink: s, leaveOut: true} }}
}

// rewritten changes the body of the nth entry that it is shown and that it wants to change.
func rewritten[T any](kind protocol.EntryKind, nth int, change func(*T) bool) Sabotage {
	n := 0
	return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		if e.Kind != kind || n >= nth {
			return on(ctx, e)
		}
		var body T
		if err := json.Unmarshal(e.Body, &body); err != nil {
			return err
		}
		if change(&body) {
			if n++; n == nth {
				e.Body, _ = json.Marshal(body)
			}
		}
		return on(ctx, e)
	})}
}

func reading(nth int, change func(*protocol.Reading) bool) func() Sabotage {
	return func() Sabotage { return rewritten(protocol.ReadingEntry, nth, change) }
}

func event(change func(*protocol.Event) bool) func() Sabotage {
	return func() Sabotage { return rewritten(protocol.EventEntry, 1, change) }
}

func points(change func(*protocol.Points) bool) func() Sabotage {
	return func() Sabotage { return rewritten(protocol.PointEntry, 1, change) }
}

// withoutEvents loses every event of some kinds.
func withoutEvents(kinds ...protocol.EventKind) func() Sabotage {
	return func() Sabotage {
		var by int64
		return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			for _, kind := range kinds {
				if e.Kind == protocol.EventEntry && bytes.Contains(e.Body, []byte(`"kind":"`+string(kind)+`"`)) {
					by--
					return nil
				}
			}
			return on(ctx, renumber(e, by))
		})}
	}
}

// withoutLast loses the nth accepted dark.
func withoutDark(nth int) func() Sabotage {
	return func() Sabotage {
		var by int64
		n := 0
		return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			if bytes.Contains(e.Body, []byte(`"kind":"dark"`)) {
				if n++; n == nth {
					by--
					return nil
				}
			}
			return on(ctx, renumber(e, by))
		})}
	}
}

// roundabout goes to its targets by way of another place.
type roundabout struct {
	drivers.Stage
	n   int
	via map[drivers.AxisName]unit.Angle
	lit func(context.Context)
}

func (s *roundabout) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	if s.n++; s.n == 9 {
		if s.lit != nil {
			s.lit(ctx)
		}
		if err := s.Stage.Move(ctx, s.via); err != nil {
			return err
		}
	}
	return s.Stage.Move(ctx, targets)
}

func goBy(via map[drivers.AxisName]unit.Angle, lit bool) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Bench: func(b *engine.Bench) {
			s := &roundabout{Stage: b.Stages[0], via: via}
			if pump := b.Pump; lit {
				s.lit = func(ctx context.Context) { _ = pump.Open(ctx) }
			}
			b.Stages[0] = s
		}}
	}
}

// stale answers where it stood after the last move.
type stale struct {
	drivers.Stage
	at map[drivers.AxisName]unit.Angle
}

func (s *stale) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	s.at = nil
	return s.Stage.Move(ctx, targets)
}

func (s *stale) Where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	if s.at != nil {
		copied := map[drivers.AxisName]unit.Angle{}
		maps.Copy(copied, s.at)
		return copied, nil
	}
	at, err := s.Stage.Where(ctx)
	if err == nil {
		s.at = map[drivers.AxisName]unit.Angle{}
		maps.Copy(s.at, at)
	}
	return at, err
}

func proveOnce() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Stages[0] = &stale{Stage: b.Stages[0]} }}
}

// searcher searches its zeros in its own way.
type searcher struct {
	drivers.Stage
	before   func(context.Context)
	backward bool
}

func (s *searcher) Home(ctx context.Context, order []drivers.AxisName) error {
	if s.before != nil {
		s.before(ctx)
	}
	if s.backward {
		order = slices.Clone(order)
		slices.Reverse(order)
	}
	return s.Stage.Home(ctx, order)
}

func searchBackward() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Stages[0] = &searcher{Stage: b.Stages[0], backward: true} }}
}

func searchInTheLight() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		pump := b.Pump
		b.Stages[0] = &searcher{Stage: b.Stages[0], before: func(ctx context.Context) { _ = pump.Open(ctx) }}
	}}
}

func searchUnprotected() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		shield := b.Detectors[0].Protect
		b.Stages[0] = &searcher{Stage: b.Stages[0], before: func(ctx context.Context) { _ = shield.Open(ctx) }}
	}}
}

func searchAlone() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		for _, s := range b.Stages {
			b.Unattended[s.Name()] = true
		}
	}}
}

// tardy takes its time before it closes.
type tardy struct {
	drivers.Shutter
	by time.Duration
}

func (s *tardy) Close(ctx context.Context) error {
	if blade, err := s.Shutter.State(ctx); err == nil && blade.Open {
		time.Sleep(s.by)
	}
	return s.Shutter.Close(context.WithoutCancel(ctx))
}

func protectAfter(by time.Duration) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Bench: func(b *engine.Bench) {
			for i := range b.Detectors {
				b.Detectors[i].Protect = &tardy{b.Detectors[i].Protect, by}
			}
		}}
	}
}

// slowly does nothing for an hour, once.
func waitInCounter() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		n := 0
		b.Counter = &countingCounter{Counter: b.Counter, before: func() {
			if n++; n == 40 {
				time.Sleep(time.Hour)
			}
		}}
	}}
}

type sluggish struct {
	drivers.Stage
	n int
}

func (s *sluggish) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	if s.n++; s.n == 9 {
		time.Sleep(time.Hour)
	}
	return s.Stage.Move(ctx, targets)
}

func waitInStage() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Stages[0] = &sluggish{Stage: b.Stages[0]} }}
}

// silent mends what is wrong with a stage, and tells nobody.
type silent struct{ drivers.Stage }

func (s silent) mend(ctx context.Context, do func() error) error {
	err := do()
	for range 60 {
		if err == nil || ctx.Err() != nil || drivers.RemedyOf(err) == drivers.GiveUp {
			break
		}
		time.Sleep(time.Second)
		if s.Connect(ctx) == nil {
			err = do()
		}
	}
	return err
}

func (s silent) Where(ctx context.Context) (at map[drivers.AxisName]unit.Angle, err error) {
	err = s.mend(ctx, func() error { at, err = s.Stage.Where(ctx); return err })
	return at, err
}

func (s silent) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	return s.mend(ctx, func() error { return s.Stage.Move(ctx, targets) })
}

func reconnectSilently() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Stages[0] = silent{b.Stages[0]} }}
}

// pretender takes a setting's value for set.
type pretender struct {
	drivers.Setting
	value float64
}

func (s *pretender) Set(_ context.Context, value float64) (float64, error) {
	s.value = value
	return value, nil
}

func (s *pretender) Get(context.Context) (float64, error) { return s.value, nil }

func pretendToSet() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		n := 0
		for i, s := range b.Settings {
			if s.Name() == "delay" {
				b.Settings[i] = &sometimes{Setting: s, pretend: func() bool { n++; return n > 6 }}
			}
		}
	}}
}

// sometimes sets truly until it pretends.
type sometimes struct {
	drivers.Setting
	pretend func() bool
	fake    *pretender
}

func (s *sometimes) Set(ctx context.Context, value float64) (float64, error) {
	if s.fake == nil && s.pretend() {
		s.fake = &pretender{}
	}
	if s.fake != nil {
		return s.fake.Set(ctx, value)
	}
	return s.Setting.Set(ctx, value)
}

func (s *sometimes) Get(ctx context.Context) (float64, error) {
	if s.fake != nil {
		return s.fake.Get(ctx)
	}
	return s.Setting.Get(ctx)
}

// stuckSensor answers its first value for ever.
type stuckSensor struct {
	drivers.Sensor
	value float64
	read  bool
}

func (s *stuckSensor) Read(ctx context.Context) (float64, error) {
	if s.read {
		return s.value, nil
	}
	var err error
	s.value, err = s.Sensor.Read(ctx)
	s.read = err == nil
	return s.value, err
}

func stickSensor() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Sensors[0] = &stuckSensor{Sensor: b.Sensors[0]} }}
}

// rosy adds a little.
type rosy struct{ drivers.Sensor }

func (s rosy) Read(ctx context.Context) (float64, error) {
	v, err := s.Sensor.Read(ctx)
	return v * 1.0001, err
}

func adornSensor() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Sensors[1] = rosy{b.Sensors[1]} }}
}

func widenGuard() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Sensors[0] = clamped{b.Sensors[0]} }}
}

// clamped never leaves what a guard wants.
type clamped struct{ drivers.Sensor }

func (s clamped) Read(ctx context.Context) (float64, error) {
	v, err := s.Sensor.Read(ctx)
	return min(max(v, 44), 46), err
}

// forgetful shows another journal to who takes a run up again.
type forgetful struct {
	Book
	change func(*protocol.Reading) bool
}

func (b *forgetful) Entries(ctx context.Context, run protocol.RunID, after int64, limit int) ([]protocol.Entry, error) {
	all, err := b.Book.Entries(ctx, run, after, limit)
	changed := false
	for i, e := range all {
		if e.Kind != protocol.ReadingEntry || changed {
			continue
		}
		var body protocol.Reading
		if err := json.Unmarshal(e.Body, &body); err != nil {
			return nil, err
		}
		if changed = b.change(&body); changed {
			all[i].Body, _ = json.Marshal(body)
		}
	}
	return all, err
}

func forgetOneTaken() Sabotage {
	return Sabotage{Book: func(b Book) Book {
		return &forgetful{b, func(r *protocol.Reading) bool {
			was := r.Accepted && r.Kind == protocol.Light && *r.Point == 3
			r.Accepted = r.Accepted && !was
			return was
		}}
	}}
}

func rememberOneMore() Sabotage {
	return Sabotage{Book: func(b Book) Book {
		return &forgetful{b, func(r *protocol.Reading) bool {
			if !r.Accepted || r.Kind != protocol.Light || *r.Point != 3 {
				return false
			}
			next := 40
			r.Point = &next
			return true
		}}
	}}
}

// forged changes the time line at the nth moment of those that it is about: what the parts of the
// program wrote is then no longer what happened, as after a file that lost or doubled something.
func forged(nth int, is func(Moment) bool, change func(line []Moment, i int) []Moment) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Line: func(line []Moment) []Moment {
			n := 0
			return change(line, slices.IndexFunc(line, func(m Moment) bool {
				if is(m) {
					n++
				}
				return n == nth
			}))
		}}
	}
}

// tamper is forged at the fortieth entry of the journal.
func tamper(change func(line []Moment, i int) []Moment) func() Sabotage {
	return forged(40, func(m Moment) bool { return m.Journal != nil }, change)
}

func moveBeforeDecided() Sabotage {
	var stage drivers.Stage
	return Sabotage{
		Bench: func(b *engine.Bench) { stage = b.Stages[0] },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			if bytes.Contains(e.Body, []byte(`"refined":1`)) {
				_ = stage.Move(ctx, map[drivers.AxisName]unit.Angle{"idler_arm": 3 * unit.Degree})
			}
			return on(ctx, e)
		}),
	}
}

func moveAfterStop() Sabotage {
	var stage drivers.Stage
	return Sabotage{
		Bench: func(b *engine.Bench) { stage = b.Stages[0] },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			err := on(ctx, e)
			if bytes.Contains(e.Body, []byte(`"state":"stopped"`)) {
				_ = stage.Move(context.WithoutCancel(ctx), map[drivers.AxisName]unit.Angle{"signal_arm": 2 * unit.Degree})
			}
			return err
		}),
	}
}

// fallenShut closes a shutter in the middle of a dwell, and says it is open.
type fallenShut struct {
	drivers.Shutter
	fell bool
}

func (s *fallenShut) State(ctx context.Context) (drivers.Blade, error) {
	if s.fell {
		return drivers.Blade{Open: true, Sensed: true}, nil
	}
	return s.Shutter.State(ctx)
}

func (s *fallenShut) Close(ctx context.Context) error {
	s.fell = false
	return s.Shutter.Close(ctx)
}

func trustShutter() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		s, n := &fallenShut{Shutter: b.Detectors[1].Protect}, 0
		b.Counter = &countingCounter{Counter: b.Counter, before: func() {
			if n++; n == 30 {
				_ = s.Shutter.Close(context.Background())
				s.fell = true
			}
		}}
		b.Detectors[1].Protect = s
	}}
}
