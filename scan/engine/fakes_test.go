package engine

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"slices"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// world is a bench of stand-ins that remember what was done to them, in order.
type world struct {
	mu    sync.Mutex
	log   []string
	fail  func(what string) error // asked before every act
	rates map[drivers.Channel]float64
	open  map[string]bool
	at    map[drivers.AxisName]unit.Angle
	homed bool
	gates int
}

func newWorld() *world {
	return &world{rates: map[drivers.Channel]float64{"signal": 1000, "idler": 800}, open: map[string]bool{}, at: map[drivers.AxisName]unit.Angle{"signal_arm": 0, "idler_arm": 0, "plate": 5 * unit.Degree}, homed: true}
}

func (w *world) act(format string, args ...any) error {
	what := fmt.Sprintf(format, args...)
	w.mu.Lock()
	w.log = append(w.log, what)
	fail := w.fail
	w.mu.Unlock()
	if fail != nil {
		return fail(what)
	}
	return nil
}

// heard is what was done so far.
func (w *world) heard() []string {
	synctest.Wait()
	w.mu.Lock()
	defer w.mu.Unlock()
	return slices.Clone(w.log)
}

func (w *world) shutter(name string, open bool) {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.open[name] = open
}

func (w *world) atRest(t *testing.T) {
	t.Helper()
	synctest.Wait()
	w.mu.Lock()
	defer w.mu.Unlock()
	for name, open := range w.open {
		if open {
			t.Errorf("%s is open; want the rest state", name)
		}
	}
}

type fakeDevice struct {
	w    *world
	name drivers.DeviceName
}

func (d fakeDevice) Name() drivers.DeviceName          { return d.name }
func (d fakeDevice) Identity() string                  { return "stand-in" }
func (d fakeDevice) Connect(ctx context.Context) error { return d.w.act("connect %s", d.name) }

type fakeStage struct{ fakeDevice }

func (s fakeStage) Axes() []drivers.AxisName {
	return []drivers.AxisName{"signal_arm", "idler_arm", "plate"}
}
func (s fakeStage) Together() bool { return true }
func (s fakeStage) TrustZero()     { s.w.homed = true }
func (s fakeStage) Stop(context.Context) error {
	return s.w.act("stop %s", s.name)
}
func (s fakeStage) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	for _, a := range s.Axes() {
		if t, ok := targets[a]; ok {
			if err := s.w.act("move %s %s", a, t.Fixed(2)); err != nil {
				return err
			}
			s.w.at[a] = t
		}
	}
	return drivers.Pace(1).Wait(ctx, 300*time.Millisecond)
}
func (s fakeStage) Where(context.Context) (map[drivers.AxisName]unit.Angle, error) {
	if err := s.w.act("where"); err != nil {
		return nil, err
	}
	return maps.Clone(s.w.at), nil
}
func (s fakeStage) Home(_ context.Context, order []drivers.AxisName) error {
	s.w.homed = true
	return s.w.act("home %v", order)
}
func (s fakeStage) Homed(context.Context) (map[drivers.AxisName]bool, error) {
	return map[drivers.AxisName]bool{"signal_arm": s.w.homed, "idler_arm": s.w.homed, "plate": s.w.homed}, nil
}

type fakeCounter struct{ fakeDevice }

func (c fakeCounter) Channels() []drivers.Channel {
	return []drivers.Channel{"signal", "idler", "tag"}
}
func (c fakeCounter) Abort(context.Context) error { return c.w.act("abort") }
func (c fakeCounter) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	c.w.gates++
	if err := c.w.act("gate %s pump=%v", gate, c.w.open["pump"]); err != nil {
		return drivers.Gate{}, err
	}
	if err := drivers.Pace(1).Wait(ctx, gate); err != nil {
		return drivers.Gate{}, &drivers.Error{Op: "count", Device: c.name, Remedy: drivers.Retry, GateOpened: true, Err: err}
	}
	g := drivers.Gate{Counts: map[drivers.Channel]uint64{"tag": uint64(c.w.gates)}, Set: gate, Length: gate}
	for ch, rate := range c.w.rates {
		g.Counts[ch] = uint64(rate * gate.Seconds())
	}
	return g, nil
}

type fakeShutter struct{ fakeDevice }

func (s fakeShutter) Open(context.Context) error {
	err := s.w.act("open %s", s.name)
	if err == nil {
		s.w.shutter(string(s.name), true)
	}
	return err
}
func (s fakeShutter) Close(context.Context) error {
	err := s.w.act("close %s", s.name)
	if err == nil {
		s.w.shutter(string(s.name), false)
	}
	return err
}
func (s fakeShutter) State(context.Context) (drivers.Blade, error) {
	return drivers.Blade{Open: s.w.open[string(s.name)]}, nil
}

type fakeSensor struct {
	fakeDevice
	value func() (float64, error)
}

func (s fakeSensor) Unit() string { return "mW" }
func (s fakeSensor) Read(context.Context) (float64, error) {
	return s.value()
}

func (w *world) bench() *Bench {
	axis := func(name drivers.AxisName) scan.Axis {
		return scan.Axis{Name: name, Controller: "rotary", Low: -10 * unit.Degree, High: 10 * unit.Degree, Tolerance: unit.Degree / 100, Backlash: unit.Degree / 2, Rising: true, Settle: 100 * time.Millisecond, Proof: drivers.Proved}
	}
	guard := fakeShutter{fakeDevice{w, "guard"}}
	return &Bench{
		Name: "skerry", Pace: 1, Simulated: true,
		Axes:    []scan.Axis{axis("signal_arm"), axis("idler_arm"), {Name: "plate", Controller: "rotary", Low: -90 * unit.Degree, High: 90 * unit.Degree, Tolerance: unit.Degree / 100, Proof: drivers.Proved}},
		Stages:  []drivers.Stage{fakeStage{fakeDevice{w, "rotary"}}},
		Counter: fakeCounter{fakeDevice{w, "counter"}}, Tag: "tag",
		Pump: fakeShutter{fakeDevice{w, "pump"}},
		Detectors: []Detector{
			{Name: "signal", Channel: "signal", TripHz: 1e5, FloorHz: 10, Glance: 20 * time.Millisecond, Protect: guard},
			{Name: "idler", Channel: "idler", TripHz: 1e5, Protect: guard},
		},
	}
}

// memory is a logbook that keeps entries, and refuses while full is set.
type memory struct {
	mu      sync.Mutex
	entries []protocol.Entry
	full    bool
}

func (m *memory) Append(_ context.Context, e protocol.Entry) error {
	m.mu.Lock()
	defer m.mu.Unlock()
	if m.full {
		return errors.New("no space left")
	}
	if e.Sequence != int64(len(m.entries))+1 {
		return fmt.Errorf("%w: sequence %d after %d", ErrConflict, e.Sequence, len(m.entries))
	}
	m.entries = append(m.entries, e)
	return nil
}

func (m *memory) readings(t *testing.T) []protocol.Reading {
	t.Helper()
	var all []protocol.Reading
	for _, e := range m.entries {
		if e.Kind == protocol.ReadingEntry {
			var r protocol.Reading
			if err := json.Unmarshal(e.Body, &r); err != nil {
				t.Fatal(err)
			}
			all = append(all, r)
		}
	}
	return all
}

func (m *memory) events(t *testing.T) []protocol.Event {
	t.Helper()
	synctest.Wait()
	var all []protocol.Event
	for _, e := range m.entries {
		if e.Kind == protocol.EventEntry {
			var ev protocol.Event
			if err := json.Unmarshal(e.Body, &ev); err != nil {
				t.Fatal(err)
			}
			all = append(all, ev)
		}
	}
	return all
}

func (m *memory) fold(t *testing.T) Progress {
	t.Helper()
	var p Progress
	for _, e := range m.entries {
		if err := p.Fold(e); err != nil {
			t.Fatal(err)
		}
	}
	return p
}

// aPlan is three points, two passes, darks at both ends and every four visits.
func aPlan() scan.Plan {
	dwell := scan.Dwell{Time: 2 * time.Second, Slice: time.Second}
	p := scan.Plan{Title: "three points", Dwell: dwell, Repeat: scan.Repeat{Times: 2, Serpentine: true},
		Dark:    &scan.Cadence{Dwell: scan.Dwell{Time: time.Second, Slice: time.Second}, EveryPoints: 4, AtStart: true, AtEnd: true},
		Trouble: scan.Trouble{Retries: 2, Then: scan.Hold, GiveUpAfter: time.Hour}}
	for i := range 3 {
		p.Points = append(p.Points, scan.Point{Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Angle(i) * unit.Degree}, {Axis: "idler_arm", Angle: 3 * unit.Degree}}})
	}
	return p
}
