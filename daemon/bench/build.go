package bench

import (
	"context"
	"errors"
	"fmt"
	"hash/fnv"
	"path/filepath"
	"slices"

	"github.com/rs/zerolog"

	"gemel/daemon/crew"
	"gemel/drivers"
	"gemel/drivers/custom"
	"gemel/drivers/line"
	"gemel/scan/engine"
)

// Options say how a bench is built.
type Options struct {
	// Virtual are the instruments behind the lines of a simulated bench, from NewVirtual. Nil: the
	// instruments run elsewhere, and Links says where.
	Virtual *Virtual
	// Links is a folder with one link a line, named after it, to instruments that already run.
	Links string
	// Wrap, if not nil, is put around each port as it is opened. For tests.
	Wrap func(lineName string, p line.Port) line.Port
	// Log is where lines write what happens on them. The zero value is silent.
	Log zerolog.Logger
}

// Bench is a bench ready to be run. Nothing is open and nothing runs before Run.
type Bench struct {
	engine.Bench
	File  *File
	Lines []*line.Line

	virtual *Virtual
}

// Actor is something that has to run for the bench to live. Run blocks until ctx ends.
type Actor struct {
	Name string
	Run  func(ctx context.Context) error
}

// Build makes the drivers of a bench file, each on its line. It opens nothing.
func Build(f *File, o Options) (*Bench, error) {
	if f.Simulated() && (o.Virtual == nil) == (o.Links == "") {
		return nil, errors.New("bench: a simulated bench with both or neither of virtual instruments and links to some; want one")
	}
	if !f.Simulated() && (o.Virtual != nil || o.Links != "") {
		return nil, fmt.Errorf("bench: %s is a real bench; want no virtual instruments behind its lines", f.Name)
	}
	b := &Bench{File: f, virtual: o.Virtual}
	lines := map[string]*line.Line{}
	for _, l := range f.Lines {
		open, err := opener(f, l, o)
		if err != nil {
			return nil, fmt.Errorf("line %s: %w", l.Name, err)
		}
		open = wrapped(l.Name, open, o.Wrap)
		made := line.New(line.Settings{
			Name: l.Name, Open: open, EndsWith: l.EndsWith, AnswersEndWith: l.AnswersEndWith, Echo: l.Echo,
			AnswerWithin: l.AnswerWithin, LongestAnswer: l.LongestAnswer, WriteWithin: l.WriteWithin, QuietFor: l.QuietFor, OpenWithin: l.OpenWithin,
			Seed: seed(f.Name, l.Name), Log: o.Log.With().Str("line", l.Name).Logger(),
		})
		lines[l.Name] = made
		b.Lines = append(b.Lines, made)
	}
	if err := b.build(lines); err != nil {
		return nil, err
	}
	return b, nil
}

func opener(f *File, l Line, o Options) (func(context.Context) (line.Port, error), error) {
	switch {
	case o.Virtual != nil:
		return o.Virtual.opener(l)
	case f.Simulated():
		return linked(filepath.Join(o.Links, l.Name)), nil
	}
	return line.Address(l.Device, line.Mode{Baud: l.Baud, DataBits: l.DataBits, Parity: l.Parity, StopBits: l.StopBits})
}

func wrapped(name string, open func(context.Context) (line.Port, error), wrap func(string, line.Port) line.Port) func(context.Context) (line.Port, error) {
	if wrap == nil {
		return open
	}
	return func(ctx context.Context) (line.Port, error) {
		p, err := open(ctx)
		if err != nil {
			return nil, err
		}
		return wrap(name, p), nil
	}
}

// seed is a number that is a line's own and the same every time.
func seed(names ...string) uint64 {
	h := fnv.New64a()
	for _, n := range names {
		h.Write([]byte(n))
		h.Write([]byte{0})
	}
	return h.Sum64()
}

func (b *Bench) build(lines map[string]*line.Line) error {
	f, pace := b.File, b.File.Pace()
	e := engine.Bench{Name: f.Name, Pace: pace, Simulated: f.Simulated(), Tag: f.Counter.Tag, KeepOuts: f.KeepOuts,
		HomeOrder: map[drivers.DeviceName][]drivers.AxisName{}, Unattended: map[drivers.DeviceName]bool{}, Stand: map[drivers.DeviceName]float64{}, Within: map[drivers.DeviceName]float64{}}
	var err error
	for _, a := range f.Axes {
		e.Axes = append(e.Axes, a.Axis)
	}
	for _, c := range f.Controllers {
		stage, err := c.make(lines[c.Line], pace, c, f.customAxes(c.Name))
		if err != nil {
			return err
		}
		e.Stages = append(e.Stages, stage)
		e.HomeOrder[c.Name], e.Unattended[c.Name] = f.homing(c.Name)
	}
	if e.Counter, err = f.Counter.make(lines[f.Counter.Line], pace, f.Counter); err != nil {
		return err
	}
	if f.Pump != nil {
		if e.Pump, err = f.Pump.make(lines[f.Pump.Line], pace, *f.Pump); err != nil {
			return err
		}
	}
	protectors := map[drivers.DeviceName]drivers.Shutter{}
	for _, s := range f.Protectors {
		if protectors[s.Name], err = s.make(lines[s.Line], pace, s); err != nil {
			return err
		}
	}
	for _, d := range f.Detectors {
		one := engine.Detector{Name: d.Name, Channel: d.Channel, TripHz: d.TripHz, FloorHz: d.FloorHz, Glance: d.Glance, Ready: d.Ready}
		if d.ProtectBy != "" {
			one.Protect = protectors[d.ProtectBy]
		}
		e.Detectors = append(e.Detectors, one)
	}
	for _, s := range f.Sensors {
		made, err := s.make(lines[s.Line], pace, s)
		if err != nil {
			return err
		}
		e.Sensors = append(e.Sensors, made)
	}
	for _, s := range f.Settings {
		made, err := s.make(lines[s.Line], pace, s)
		if err != nil {
			return err
		}
		e.Settings = append(e.Settings, made)
		e.Within[s.Name] = s.tolerance(s.Unit)
		if value, ok := s.stand(f.Optics); ok {
			e.Stand[s.Name] = value
		}
	}
	b.Bench = e
	return nil
}

// Actors lists what has to run, the lines first. All must go on until the rest state is reached.
func (b *Bench) Actors() []Actor {
	var all []Actor
	for _, l := range b.Lines {
		all = append(all, Actor{Name: "line " + l.Name(), Run: l.Run})
	}
	if b.virtual != nil {
		all = append(all, b.virtual.Actors()...)
	}
	return all
}

// Run runs all actors until ctx ends. onPanic may be nil; see package crew.
func (b *Bench) Run(ctx context.Context, onPanic func(*crew.Panic)) error {
	g := crew.New(ctx, onPanic)
	for _, a := range b.Actors() {
		g.Go(a.Name, a.Run)
	}
	return g.Wait()
}

// Unprotected lists the detectors that the program cannot protect. It has to say so, loudly.
func (f *File) Unprotected() []string {
	var names []string
	for _, d := range f.Detectors {
		if d.ProtectBy == "" {
			names = append(names, d.Name)
		}
	}
	return names
}

// customAxes are a controller's axes as its driver wants them.
func (f *File) customAxes(controller drivers.DeviceName) []custom.Axis {
	var all []custom.Axis
	for _, a := range f.Axes {
		if a.Axis.Controller == controller {
			all = append(all, custom.Axis{Name: a.Name, Letter: a.Letter, Address: a.Address, Mount: a.Mount,
				Speed: a.Speed, Acceleration: a.Acceleration, StepsPerTurn: a.StepsPerTurn, Gear: a.Gear})
		}
	}
	return all
}

// homing is the order in which a controller's axes search their zero, and whether they may with
// nobody there.
func (f *File) homing(controller drivers.DeviceName) (order []drivers.AxisName, unattended bool) {
	var mine []Axis
	for _, a := range f.Axes {
		if a.Axis.Controller == controller {
			mine = append(mine, a)
		}
	}
	slices.SortStableFunc(mine, func(a, b Axis) int { return a.HomeOrder - b.HomeOrder })
	for _, a := range mine {
		order = append(order, a.Name)
	}
	return order, len(mine) > 0 && mine[0].Unattended
}

// Devices lists every instrument of the bench, in the order of the file's blocks.
func (b *Bench) Devices() []drivers.Device {
	var all []drivers.Device
	for _, s := range b.Stages {
		all = append(all, s)
	}
	all = append(all, b.Counter)
	if b.Pump != nil {
		all = append(all, b.Pump)
	}
	protectors := map[drivers.DeviceName]bool{}
	for _, d := range b.Detectors {
		if d.Protect != nil && !protectors[d.Protect.Name()] {
			protectors[d.Protect.Name()] = true
			all = append(all, d.Protect)
		}
	}
	for _, s := range b.Sensors {
		all = append(all, s)
	}
	for _, s := range b.Settings {
		all = append(all, s)
	}
	return all
}
