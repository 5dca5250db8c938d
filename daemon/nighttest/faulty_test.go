package nighttest

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"slices"
	"time"

	"gemel/daemon/courier"
	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/engine"
	"gemel/sim/instruments"
)

func process(what ProcessKind) func(Moment) bool {
	return func(m Moment) bool { return m.Process != nil && m.Process.What == what }
}

func world(kind instruments.Kind) func(Moment) bool {
	return func(m Moment) bool { return m.World != nil && m.World.Kind == kind }
}

func entry(kind protocol.EntryKind) func(Moment) bool {
	return func(m Moment) bool { return m.Journal != nil && m.Journal.Kind == kind }
}

// unreadable breaks an entry's body off.
func unreadable(kind protocol.EntryKind, nth int) func() Sabotage {
	return forged(nth, entry(kind), func(line []Moment, i int) []Moment {
		e := *line[i].Journal
		e.Body = e.Body[:len(e.Body)/2]
		line[i].Journal = &e
		return line
	})
}

// diedEarlier says that the process died before it did the last things that it did.
func diedEarlier(by int) func() Sabotage {
	return forged(1, process(Killed), func(line []Moment, i int) []Moment {
		m := line[i]
		line = slices.Delete(line, i, i+1)
		m.At = line[i-by].At
		return slices.Insert(line, i-by, m)
	})
}

// actsAlone lets something happen again behind the process's death that happened before it.
func actsAlone(kind instruments.Kind) func() Sabotage {
	return forged(1, process(Killed), func(line []Moment, i int) []Moment {
		for k := i; k >= 0; k-- {
			if world(kind)(line[k]) {
				r := *line[k].World
				r.At = line[i].At.Add(time.Second)
				return slices.Insert(line, i+1, Moment{At: r.At, World: &r})
			}
		}
		return line
	})
}

// lax takes what a counter says against its own gates for nothing.
type lax struct{ drivers.Counter }

func (c lax) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	g, err := c.Counter.Count(ctx, gate)
	g.Overflow, g.Doubtful, g.Length = false, false, g.Set
	return g, err
}

func believeCounter() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		b.Counter = lax{b.Counter}
		for i := range b.Detectors {
			b.Detectors[i].TripHz = 0 // what is left of an overflow may look like light
		}
	}}
}

// stretched says that its gates were a little longer than they were.
type stretched struct{ drivers.Counter }

func (c stretched) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	g, err := c.Counter.Count(ctx, gate)
	g.Set, g.Length = g.Set+g.Set/200, g.Length+g.Length/200
	return g, err
}

func stretchGates() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Counter = stretched{b.Counter} }}
}

// deaf counts its gate to the end, whoever wants it to stop.
type deaf struct{ drivers.Counter }

func (c deaf) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	type answer struct {
		gate drivers.Gate
		err  error
	}
	done := make(chan answer, 1)
	go func() {
		g, err := c.Counter.Count(context.WithoutCancel(ctx), gate)
		done <- answer{g, err}
	}()
	select {
	case a := <-done:
		return a.gate, a.err
	case <-ctx.Done():
		return drivers.Gate{}, &drivers.Error{Op: "count", Device: c.Name(), Remedy: drivers.Retry, GateOpened: true, Err: ctx.Err()}
	}
}

func (deaf) Abort(context.Context) error { return nil }

func leaveGateOpen() Sabotage {
	return Sabotage{Sink: slowly, Bench: func(b *engine.Bench) { b.Counter = deaf{b.Counter} }}
}

// once does something, once, instead of writing an entry that says a word, or when it is durable.
func once(word string, instead bool, do func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error) func(Book) Book {
	done := false
	return onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		if done || !bytes.Contains(e.Body, []byte(word)) {
			return on(ctx, e)
		}
		done = true
		if instead {
			return do(ctx, e, on)
		}
		if err := on(ctx, e); err != nil {
			return err
		}
		return do(ctx, e, on)
	})
}

const (
	heldWord  = `"kind":"held"`
	endedWord = `"kind":"ended"`
)

func openInAHold(pump bool) func() Sabotage {
	return func() Sabotage {
		var blade drivers.Shutter
		return Sabotage{
			Bench: func(b *engine.Bench) {
				if blade = b.Detectors[0].Protect; pump {
					blade = b.Pump
				}
			},
			Book: once(heldWord, false, func(ctx context.Context, _ protocol.Entry, _ func(context.Context, protocol.Entry) error) error {
				_ = blade.Open(ctx)
				_ = blade.Close(ctx)
				return nil
			}),
		}
	}
}

// turnsStill sends an arm far away just before an entry that says a word is written.
func turnsStill(word string) func() Sabotage {
	return func() Sabotage {
		var stage drivers.Stage
		return Sabotage{
			Sink:  slowly,
			Bench: func(b *engine.Bench) { stage = b.Stages[0] },
			Book: once(word, true, func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
				go func() {
					_ = stage.Move(context.WithoutCancel(ctx), map[drivers.AxisName]unit.Angle{"signal_arm": 11 * unit.Degree})
				}()
				time.Sleep(500 * time.Millisecond)
				return on(ctx, e)
			}),
		}
	}
}

// slow takes some seconds to publish what is the last of a run, so that the lines of a run that is over
// still live for a minute.
type slow struct{ courier.Sink }

func (s slow) Publish(ctx context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	if bytes.Contains(m.Body, []byte(endedWord)) {
		time.Sleep(5 * time.Second)
	}
	return s.Sink.Publish(ctx, m, after)
}

func slowly(s courier.Sink) courier.Sink { return slow{s} }

// afterTheStop does something a second after a stop was answered.
func afterTheStop(do func(context.Context, *engine.Bench)) func() Sabotage {
	return func() Sabotage {
		var bench *engine.Bench
		return Sabotage{
			Sink:  slowly,
			Bench: func(b *engine.Bench) { bench = b },
			Book: once(`"state":"stopped"`, false, func(ctx context.Context, _ protocol.Entry, _ func(context.Context, protocol.Entry) error) error {
				go func() {
					time.Sleep(time.Second)
					do(context.WithoutCancel(ctx), bench)
				}()
				return nil
			}),
		}
	}
}

func countOn(ctx context.Context, b *engine.Bench) {
	_, _ = b.Counter.Count(ctx, 10*time.Millisecond)
}

func moveOn(ctx context.Context, b *engine.Bench) {
	_ = b.Stages[0].Move(ctx, map[drivers.AxisName]unit.Angle{"signal_arm": 2 * unit.Degree})
}

// writeLater says at once that an entry is durable, and writes it a moment later.
func writeLater(word string) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Sink: slowly, Book: once(word, true, func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			go func() {
				time.Sleep(50 * time.Millisecond)
				_ = on(context.WithoutCancel(ctx), e)
			}()
			return nil
		})}
	}
}

// oneMore writes another event behind one that says a word.
func oneMore(word string, change func(*protocol.Event)) func() Sabotage {
	return func() Sabotage {
		var by int64
		return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			err := on(ctx, renumber(e, by))
			if err != nil || by > 0 || !bytes.Contains(e.Body, []byte(word)) {
				return err
			}
			by++
			var ev protocol.Event
			if err := json.Unmarshal(renumber(e, by).Body, &ev); err != nil {
				return err
			}
			change(&ev)
			body, _ := json.Marshal(ev)
			return on(ctx, protocol.Entry{Run: e.Run, Sequence: e.Sequence + by, Kind: protocol.EventEntry, Body: body})
		})}
	}
}

func ignoreFloor() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		for i := range b.Detectors {
			b.Detectors[i].FloorHz = 0
		}
	}}
}

// intoTheBeam turns an arm into the pump's beam while that is blocked, and opens it then.
func intoTheBeam(arm drivers.AxisName) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Bench: func(b *engine.Bench) {
			pump := b.Pump
			b.Stages[0] = &detour{Stage: b.Stages[0], then: func(ctx context.Context, s drivers.Stage) error {
				if err := pump.Close(ctx); err != nil {
					return err
				}
				if err := s.Move(ctx, map[drivers.AxisName]unit.Angle{arm: 0}); err != nil {
					return err
				}
				if err := pump.Open(ctx); err != nil {
					return err
				}
				return pump.Close(ctx)
			}}
		}}
	}
}

// detour does something before its ninth move.
type detour struct {
	drivers.Stage
	n    int
	then func(context.Context, drivers.Stage) error
}

func (s *detour) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	if s.n++; s.n == 9 {
		if err := s.then(ctx, s.Stage); err != nil {
			return err
		}
	}
	return s.Stage.Move(ctx, targets)
}

// withoutPoints loses the entries of points that it is asked about.
func withoutPoints(lose func(*protocol.Points) bool) func() Sabotage {
	return func() Sabotage {
		var by int64
		return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			var p protocol.Points
			if e.Kind == protocol.PointEntry && json.Unmarshal(e.Body, &p) == nil && lose(&p) {
				by--
				return nil
			}
			return on(ctx, renumber(e, by))
		})}
	}
}

// fidget changes a setting during a gate, and brings it back before the gate is over.
func fidget(nth int) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Bench: func(b *engine.Bench) {
			i := slices.IndexFunc(b.Settings, func(s drivers.Setting) bool { return s.Name() == "delay" })
			delay, n := b.Settings[i], 0
			b.Counter = &countingCounter{Counter: b.Counter, before: func() {
				if n++; n == nth {
					go func() {
						ctx := context.Background()
						time.Sleep(300 * time.Millisecond)
						at, _ := delay.Get(ctx)
						_, _ = delay.Set(ctx, at+2)
						_, _ = delay.Set(ctx, at)
					}()
				}
			}}
		}}
	}
}

// never publishes nothing.
type never struct{ courier.Sink }

func (never) Publish(ctx context.Context, _ courier.Message, _ courier.Last) (courier.Last, error) {
	<-ctx.Done()
	return courier.Last{}, ctx.Err()
}

func publishNothing() Sabotage {
	return Sabotage{Sink: func(s courier.Sink) courier.Sink { return never{s} }}
}

// damage changes a byte of the logbook's file behind a word that stands in it, when all is over.
func damage(word string) func() Sabotage {
	return func() Sabotage {
		var data string
		return Sabotage{
			Book: func(b Book) Book { data = b.(*recorder).life.data; return b },
			Line: func(line []Moment) []Moment {
				file := filepath.Join(data, "logbook.db")
				text, err := os.ReadFile(file)
				if err != nil {
					panic(err)
				}
				i := bytes.LastIndex(text, []byte(word)) + len(word)
				text[i] ^= 1 // another digit
				if err := os.WriteFile(file, text, 0o600); err != nil {
					panic(err)
				}
				return line
			},
		}
	}
}

// backward shows the queue from behind.
type backward struct{ Book }

func (b backward) Queue(ctx context.Context) ([]logbook.Waiting, error) {
	all, err := b.Book.Queue(ctx)
	slices.Reverse(all)
	return all, err
}

func queueBackward() Sabotage {
	return Sabotage{Book: func(b Book) Book { return backward{b} }}
}

// beginsEarly lets the second run begin before the first has ended.
func beginsEarly() Sabotage {
	says := func(word string) func(Moment) bool {
		return func(m Moment) bool { return m.Journal != nil && bytes.Contains(m.Journal.Body, []byte(word)) }
	}
	return forged(1, says(endedWord), func(line []Moment, i int) []Moment {
		k := i + slices.IndexFunc(line[i:], says(`"kind":"began"`))
		m := line[k]
		m.At = line[i].At
		return slices.Insert(slices.Delete(line, k, k+1), i, m)
	})()
}

// flatterer shows results better than they are written.
type flatterer struct {
	Book
	change func(*resultSeen)
}

func (b flatterer) Results(ctx context.Context, run protocol.RunID) ([]protocol.Entry, error) {
	all, err := b.Book.Results(ctx, run)
	for i, e := range all {
		var body map[string]json.RawMessage
		var seen resultSeen
		if err := errors.Join(json.Unmarshal(e.Body, &body), json.Unmarshal(e.Body, &seen)); err != nil {
			return nil, err
		}
		b.change(&seen)
		body["standard_uncertainty"], _ = json.Marshal(seen.U)
		body["at"], _ = json.Marshal(seen.At)
		all[i].Body, _ = json.Marshal(body)
	}
	return all, err
}

func flatter(change func(*resultSeen)) func() Sabotage {
	return func() Sabotage {
		return Sabotage{Book: func(b Book) Book { return flatterer{b, change} }}
	}
}

// demandMore says that the recipes asked for earlier values that are surer than what was taken.
func demandMore(f *Facts) {
	for _, p := range f.Plans {
		for i := range p.Earlier {
			p.Earlier[i].Ask.Below = 1 // of an angle's smallest parts
		}
	}
}
