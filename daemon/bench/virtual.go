package bench

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/unit"
	"gemel/sim/instruments"
	"gemel/sim/source"
	"gemel/sim/trouble"
)

// Virtual are the virtual instruments of a simulated bench, one behind each line.
type Virtual struct {
	World *instruments.World
	sets  []*set
}

// Address is where a program finds the instrument of a line.
type Address struct {
	Line string
	Path string // of a device, or "tcp://host:port"; empty in memory
}

// VirtualOptions say how the virtual instruments are reached and what happens to them.
type VirtualOptions struct {
	// Model is one that TruthModel made for the same file, for many worlds that share what it has
	// worked out. Nil: one of this world's own.
	Model    *source.Model
	Troubles trouble.List
	Ledger   *instruments.Ledger // nil: one in memory
	// Folder is where the links to the instruments' pseudo-terminals appear, one a line, named after
	// it (where there are none: files with TCP addresses). Empty: the instruments are reached in
	// memory, by a Bench built on them and by nobody else.
	Folder string
}

// set is the instrument behind one line.
type set struct {
	line       string
	instrument instruments.Instrument
	calls      chan instruments.Conn // in memory
	link       string                // otherwise: where a host finds it
	ready      chan string           // its address, once it can be opened
}

// TruthModel is the model behind the virtual instruments of a simulated bench. It may be shared:
// what one world asked changes how fast another's answers come, never an answer.
func TruthModel(f *File) (*source.Model, error) {
	if !f.Simulated() {
		return nil, fmt.Errorf("bench: %s is a real bench; want one whose lines are simulated", f.Name)
	}
	optics, err := f.source()
	if err != nil {
		return nil, err
	}
	return source.New(optics)
}

// NewVirtual puts the instruments of a simulated bench into a world that begins now. Which one
// stands behind a line follows from the devices that use it. Nothing can be reached before the actors
// run.
func NewVirtual(f *File, o VirtualOptions) (*Virtual, error) {
	if !f.Simulated() {
		return nil, fmt.Errorf("bench: %s is a real bench; want one whose lines are simulated", f.Name)
	}
	optics, err := f.source()
	if err != nil {
		return nil, err
	}
	model := o.Model
	if model == nil {
		if model, err = source.New(optics); err != nil {
			return nil, err
		}
	}
	t := f.Simulation.truth
	world, err := instruments.NewWorld(instruments.WorldConfig{
		Seed: f.Simulation.Seed, Pace: f.Simulation.Clock, Model: model, Troubles: o.Troubles, Ledger: o.Ledger,
		PumpWander: t.powerWander, CrystalWander: t.temperatureWander,
		Still: source.Pose{PumpW: optics.PumpW, PumpNm: optics.PumpNm, CrystalCel: optics.CrystalCel, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1,
			RoomHz: [2]float64{t.signal.room, t.idler.room}},
	})
	if err != nil {
		return nil, err
	}
	v := &Virtual{World: world}
	for _, l := range f.Lines {
		i, err := f.instrument(world, l.Name)
		if err != nil {
			return nil, fmt.Errorf("line %s: %w", l.Name, err)
		}
		one := &set{line: l.Name, instrument: i, calls: make(chan instruments.Conn), ready: make(chan string, 1)}
		if o.Folder != "" {
			one.link = filepath.Join(o.Folder, l.Name)
		}
		v.sets = append(v.sets, one)
	}
	if o.Folder != "" {
		if err := os.MkdirAll(o.Folder, 0o755); err != nil {
			return nil, err
		}
	}
	return v, nil
}

// Addresses waits until the instruments can be reached, and lists where, in the order of the file's
// lines. It may be called once.
func (v *Virtual) Addresses(ctx context.Context) ([]Address, error) {
	var all []Address
	for _, s := range v.sets {
		a := Address{Line: s.line}
		if s.link != "" {
			select {
			case a.Path = <-s.ready:
			case <-ctx.Done():
				return nil, context.Cause(ctx)
			}
		}
		all = append(all, a)
	}
	return all, nil
}

// cableBuffer is what the UARTs of a line keep that nobody has read yet.
const cableBuffer = 4096

// opener lets a line reach its instrument in memory. Opening is plugging in: what the line closes or
// loses is gone, and the next opening is a new cable.
func (v *Virtual) opener(l Line) (func(context.Context) (line.Port, error), error) {
	i := slices.IndexFunc(v.sets, func(s *set) bool { return s.line == l.Name })
	if i < 0 {
		return nil, errors.New("no virtual instrument behind it")
	}
	s := v.sets[i]
	if s.link != "" {
		return linked(s.link), nil
	}
	return func(ctx context.Context) (line.Port, error) {
		host, dev := instruments.Cable(cableBuffer)
		select {
		case s.calls <- dev:
			return host, nil
		case <-ctx.Done():
			return nil, context.Cause(ctx)
		}
	}, nil
}

// Actors lists the instruments' own loops.
func (v *Virtual) Actors() []Actor {
	var all []Actor
	for _, s := range v.sets {
		run := s.serve
		if s.link != "" {
			run = s.present
		}
		all = append(all, Actor{Name: "virtual " + s.instrument.Name(), Run: run})
	}
	return all
}

// serve answers one connection after another. An unplugged instrument answers none: whoever opens
// its line then finds it closed.
func (s *set) serve(ctx context.Context) error {
	for {
		select {
		case <-ctx.Done():
			return nil
		case conn := <-s.calls:
			err := s.instrument.Serve(ctx, conn)
			if err := conn.Close(); err != nil {
				return err
			}
			switch {
			case ctx.Err() != nil:
				return nil
			case err != nil && !errors.Is(err, instruments.ErrUnplugged):
				return err
			}
		}
	}
}

// present offers the instrument to whoever opens its link.
func (s *set) present(ctx context.Context) error {
	err := instruments.Present(ctx, s.instrument, s.link, func(address string) { s.ready <- address })
	if ctx.Err() != nil {
		return nil
	}
	return err
}

// linked opens what a link leads to, which is another terminal each time. Where there are no
// pseudo-terminals the link is a file that holds a TCP address.
func linked(link string) func(context.Context) (line.Port, error) {
	terminal, wrong := line.Address(link, line.Mode{}) // one for all openings: it bounds what hangs
	return func(ctx context.Context) (line.Port, error) {
		info, err := os.Lstat(link)
		if err != nil {
			return nil, err
		}
		if !info.Mode().IsRegular() {
			if wrong != nil {
				return nil, fmt.Errorf("%s: %w", link, wrong)
			}
			return terminal(ctx)
		}
		text, err := os.ReadFile(link)
		if err != nil {
			return nil, err
		}
		open, err := line.Address(strings.TrimSpace(string(text)), line.Mode{})
		if err != nil {
			return nil, fmt.Errorf("%s: %w", link, err)
		}
		return open(ctx)
	}
}

// identity is what a virtual instrument says it is: what the file expects, or a name of its own.
func identity(d Device, model string) instruments.Identity {
	id := instruments.Identity{Maker: "gemel", Model: model, Serial: string(d.Name), Firmware: "1"}
	fields := []*string{&id.Maker, &id.Model, &id.Serial, &id.Firmware}
	for i, field := range splitIdentity(d.Identity) {
		if i < len(fields) && field != "" {
			*fields[i] = field
		}
	}
	return id
}

// instrument makes what stands behind a line. checkVirtual has made sure that it is one.
func (f *File) instrument(w *instruments.World, name string) (instruments.Instrument, error) {
	for _, c := range f.Controllers {
		if c.Line == name {
			return f.virtualStage(w, c)
		}
	}
	if f.Counter.Line == name {
		return f.virtualCounter(w)
	}
	if f.Pump != nil && f.Pump.Line == name {
		return virtualShutter(w, *f.Pump, instruments.PumpBlade)
	}
	for _, s := range f.Protectors {
		if s.Line == name {
			return virtualShutter(w, s, f.blade(s.Name))
		}
	}
	for _, s := range f.Settings {
		if s.Line == name {
			return f.virtualSetting(w, s)
		}
	}
	return f.virtualMonitor(w, name)
}

// virtualMonitor is one instrument for all sensors of a line. It has the line's name, or its only
// sensor's.
func (f *File) virtualMonitor(w *instruments.World, name string) (instruments.Instrument, error) {
	t := f.Simulation.truth
	c := instruments.MonitorConfig{Name: name, PowerNoise: t.powerNoise, CelNoise: t.temperatureNoise}
	var mine []Sensor
	for _, s := range f.Sensors {
		if s.Line == name {
			mine = append(mine, s)
			c.Power = c.Power || s.Kind == unit.Power
			c.Temperature = c.Temperature || s.Kind == unit.Temperature
		}
	}
	if len(mine) == 0 {
		return nil, errors.New("no virtual instrument stands behind it")
	}
	if len(mine) == 1 {
		c.Name = string(mine[0].Name)
	}
	c.Identity = identity(mine[0].Device, "monitor")
	return instruments.NewMonitor(w, c)
}

func virtualShutter(w *instruments.World, s Shutter, blade string) (instruments.Instrument, error) {
	// A blade that is slower than the time the file allows it would be a mistake of the file's, and
	// one that takes none would never be caught half open.
	travel := max(min(s.SettleOpen, s.SettleClosed)*3/4, 1)
	return instruments.NewShutter(w, instruments.ShutterConfig{Name: string(s.Name), Identity: identity(s.Device, "shutter"), Blade: blade, Travel: travel, Sensor: true})
}

// blade is what a protector stands in front of.
func (f *File) blade(protector drivers.DeviceName) string {
	for _, d := range f.Detectors {
		switch {
		case d.ProtectBy != protector:
		case d.Name == f.Optics.Signal.Detector:
			return instruments.SignalBlade
		case d.Name == f.Optics.Idler.Detector:
			return instruments.IdlerBlade
		}
	}
	return ""
}

func (f *File) virtualStage(w *instruments.World, c Controller) (instruments.Instrument, error) {
	var axes []instruments.AxisConfig
	for _, a := range f.Axes {
		if a.Axis.Controller == c.Name {
			axes = append(axes, f.virtualAxis(a, c.Dialect))
		}
	}
	if c.Dialect == "gcode" {
		return instruments.NewRotary(w, instruments.RotaryConfig{Name: string(c.Name), Identity: identity(c.Device, "rotary"), Axes: axes, Together: c.Together})
	}
	return instruments.NewPlain(w, instruments.PlainConfig{Name: string(c.Name), Identity: identity(c.Device, "plain"), Axes: axes})
}

// slack is how much further than the soft limits a virtual controller lets its axes go.
const slack = 5 * unit.Degree

// stepsPerDeg of a virtual axis: a tenth of a millidegree, finer than any tolerance worth proving.
const stepsPerDeg = 10_000

func (f *File) virtualAxis(a Axis, dialect string) instruments.AxisConfig {
	t := f.Simulation.truth.axes[string(a.Name)]
	low, high := a.Mount.Controller(a.Low), a.Mount.Controller(a.High)
	low, high = min(low, high)-slack, max(low, high)+slack
	start := max(a.Low, min(a.High, 0))
	if a.Park != nil {
		start = *a.Park
	}
	if t.start != nil {
		start = *t.start
	}
	home := start
	if a.HomesAt != nil {
		home = *a.HomesAt
	}
	call := a.Letter
	if dialect != "gcode" && a.Address != "" {
		call = a.Address
	}
	return instruments.AxisConfig{
		Letter: call, Axis: string(a.Name), Role: a.Role, Sense: a.Mount.Sense, ZeroDeg: a.Mount.Zero.Degrees(),
		LowDeg: low.Degrees(), HighDeg: high.Degrees(), SpeedDegS: a.SpeedDegS, AccelDegS2: a.AccelDegS2,
		BacklashDeg: t.play.Degrees(), FallingFlank: !a.Rising, StepsPerDeg: stepsPerDeg, Encoder: a.Proof == drivers.Proved,
		HomeDeg: a.Mount.Controller(home).Degrees(), StartDeg: start.Degrees(), Homed: !t.lost,
	}
}

// doubtAbove is by what share a gate may be wrong before a virtual counter says so.
const doubtAbove = 0.001

// virtualCounter counts what stands behind each channel.
func (f *File) virtualCounter(w *instruments.World) (instruments.Instrument, error) {
	c := instruments.CounterConfig{Name: string(f.Counter.Name), Identity: identity(f.Counter.Device, "counter"), Bits: f.Counter.Bits, DoubtAbove: doubtAbove}
	for _, ch := range f.Counter.Channels {
		c.Channels = append(c.Channels, f.counted(ch))
	}
	return instruments.NewCounter(w, c)
}

func (f *File) counted(ch drivers.Channel) string {
	if ch == f.Counter.Tag {
		return instruments.CountsGates
	}
	if _, pair := f.Counter.Coincidences[ch]; pair {
		return instruments.CountsPairs
	}
	for _, d := range f.Detectors {
		switch {
		case d.Channel != ch:
		case d.Name == f.Optics.Signal.Detector:
			return instruments.CountsSignal
		case d.Name == f.Optics.Idler.Detector:
			return instruments.CountsIdler
		}
	}
	return instruments.CountsNone
}

func splitIdentity(text string) []string {
	if text == "" {
		return nil
	}
	fields := strings.Split(text, ",")
	for i := range fields {
		fields[i] = strings.TrimSpace(fields[i])
	}
	return fields
}
