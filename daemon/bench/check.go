package bench

import (
	"fmt"
	"slices"
	"strings"

	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/sim/instruments"
	"gemel/sim/source"
)

// check finds what is wrong between the blocks.
func (r *reader) check() {
	f := r.file
	r.checkLines()
	r.checkNames()
	r.checkAxes()
	r.checkHoming()
	r.checkDetectors()
	r.checkSettings()
	r.checkKeepOuts()
	if f.Simulated() {
		r.checkSimulation()
	}
	if r.doc.Err() == nil {
		r.checkDrivers()
	}
}

func (r *reader) fail(at strict.Place, found, want string, args ...any) {
	r.doc.Fail(at, found, fmt.Sprintf(want, args...))
}

// devices lists every instrument of the file.
func (f *File) devices() []Device {
	var all []Device
	for _, c := range f.Controllers {
		all = append(all, c.Device)
	}
	if f.Counter.Name != "" {
		all = append(all, f.Counter.Device)
	}
	if f.Pump != nil {
		all = append(all, f.Pump.Device)
	}
	for _, s := range f.Protectors {
		all = append(all, s.Device)
	}
	for _, s := range f.Sensors {
		all = append(all, s.Device)
	}
	for _, s := range f.Settings {
		all = append(all, s.Device)
	}
	return all
}

func (r *reader) checkLines() {
	f := r.file
	var names []string
	used := map[string]bool{}
	for _, l := range f.Lines {
		names = append(names, l.Name)
	}
	for _, d := range f.devices() {
		used[d.Line] = true
		if d.Line != "" && !slices.Contains(names, d.Line) {
			r.fail(d.lineAt, fmt.Sprintf("no line %q", d.Line), "%s", oneOf(d.Line, names))
		}
	}
	byDevice := map[string]Line{}
	for _, l := range f.Lines {
		if !used[l.Name] {
			r.fail(l.at, fmt.Sprintf("the line %q, used by nothing", l.Name), "an instrument that names it, or no such line")
		}
		if other, twice := byDevice[l.Device]; twice && l.Device != Simulated && l.Device != "" {
			what := "the device of line " + other.Name
			if other.Baud != l.Baud {
				what += fmt.Sprintf(" at another speed (%d and %d baud)", baud(other), baud(l))
			}
			r.fail(l.at, what, "each device on one line: instruments that share it name the same line")
		}
		byDevice[l.Device] = l
	}
	r.checkKindOfLines()
}

// checkKindOfLines holds that a bench is real or simulated as a whole. One finding is enough.
func (r *reader) checkKindOfLines() {
	f := r.file
	first := slices.IndexFunc(f.Lines, func(l Line) bool { return l.Device != "" })
	for _, l := range f.Lines {
		simulated := l.Device == Simulated
		switch {
		case l.Device == "":
		case simulated != (f.Lines[first].Device == Simulated):
			what := map[bool]string{true: "a simulated line", false: "a real line"}
			r.fail(l.at, fmt.Sprintf("%s beside %s, %s", what[simulated], what[!simulated], f.Lines[first].Name), "a bench that is simulated as a whole, or not at all: its counts would be half invented")
			return
		}
	}
	switch {
	case first < 0:
	case f.Lines[first].Device == Simulated && !f.Simulated():
		r.fail(f.Lines[first].at, "a simulated line without a block \"simulation\"", "simulation: {clock: …, seed: …, truth: …}")
	case f.Lines[first].Device != Simulated && f.Simulated():
		r.fail(f.Lines[first].at, "a real line beside a block \"simulation\"", `"simulated", or no such block: a clock that runs faster would be wrong on a real instrument`)
	}
}

func baud(l Line) int {
	if l.Baud == 0 {
		return 9600
	}
	return l.Baud
}

func (r *reader) checkNames() {
	seen := map[drivers.DeviceName]string{}
	for _, d := range r.file.devices() {
		if other, twice := seen[d.Name]; twice {
			r.fail(d.at, fmt.Sprintf("the name %q a second time (first as %s)", d.Name, other), "a name of its own for each instrument")
			continue
		}
		seen[d.Name] = d.at.Key()
	}
}

func (r *reader) checkAxes() {
	f := r.file
	var names []string
	axesOf := map[drivers.DeviceName]int{}
	for _, c := range f.Controllers {
		names = append(names, string(c.Name))
	}
	taken, roles := map[string]drivers.AxisName{}, map[string]drivers.AxisName{}
	for i, a := range f.Axes {
		axesOf[a.Axis.Controller]++
		f.Axes[i].Together = slices.ContainsFunc(f.Controllers, func(c Controller) bool { return c.Name == a.Axis.Controller && c.Together })
		if c := string(a.Axis.Controller); c != "" && !slices.Contains(names, c) {
			r.fail(a.controllerAt, fmt.Sprintf("no controller %q", c), "%s", oneOf(c, names))
		}
		for _, call := range []string{"letter " + a.Letter, "address " + a.Address} {
			if strings.HasSuffix(call, " ") {
				continue
			}
			key := string(a.Axis.Controller) + " " + call
			if other, twice := taken[key]; twice {
				r.fail(a.letterAt, fmt.Sprintf("%s of %s, which is %s already", call, a.Axis.Controller, other), "one axis for each")
			}
			taken[key] = a.Name
		}
		if other, twice := roles[a.Role]; twice && a.Role != "other" {
			r.fail(a.at, fmt.Sprintf("a second %s beside %s", a.Role, other), "one axis for each role, or \"other\"")
		}
		if roles[a.Role] == "" {
			roles[a.Role] = a.Name
		}
		if a.Backlash > 0 && a.High-a.Low <= a.Backlash && a.High > a.Low {
			r.fail(a.at, fmt.Sprintf("a backlash of %s within limits of %s", a.Backlash, a.High-a.Low), "room to approach")
		}
		if p := a.Park; p != nil && a.Limits(*p) && (a.Rising && *p-a.Backlash < a.Low || !a.Rising && *p+a.Backlash > a.High) {
			r.fail(a.at, fmt.Sprintf("park at %s, with no room within the limits to approach it by %s", *p, a.Backlash), "a place further from that limit")
		}
	}
	for _, c := range f.Controllers {
		if axesOf[c.Name] == 0 {
			r.fail(c.at, fmt.Sprintf("the controller %q without an axis", c.Name), "an axis that names it")
		}
	}
}

// checkHoming holds the rules of searching for a zero with nobody there.
func (r *reader) checkHoming() {
	for _, c := range r.file.Controllers {
		var mine []Axis
		for _, a := range r.file.Axes {
			if a.Axis.Controller == c.Name {
				mine = append(mine, a)
			}
		}
		orders := map[int]drivers.AxisName{}
		for _, a := range mine {
			switch {
			case a.Verify == nil:
			case !c.marks:
				r.fail(a.verifyAt, fmt.Sprintf("a zero to be verified, though %s has no question \"mark\"", c.Name), "that question: it searches the reference mark and keeps the zero")
			case a.HomesAt == nil:
				r.fail(a.verifyAt, "a zero to be verified, and no place where its mark is", "home: {at: …}, where the search leaves the axis")
			case a.Verify.Tolerance < a.Tolerance:
				r.fail(a.verifyAt, fmt.Sprintf("a tolerance of %s below the axis's own, %s", a.Verify.Tolerance, a.Tolerance), "at least that: no move is nearer to its target")
			}
			other, twice := orders[a.HomeOrder]
			switch {
			case !a.Unattended && slices.ContainsFunc(mine, func(b Axis) bool { return b.Unattended }):
				r.fail(a.at, "an axis that waits for a person, on a controller whose other axes do not", "home: {unattended: true, order: …} for all axes of %s or for none: it loses the zero of all of them", c.Name)
			case a.Unattended && !c.homes:
				r.fail(a.homeAt, fmt.Sprintf("unattended, though %s has no question \"home\"", c.Name), "that question, or no unattended search")
			case a.HomeOrder > 0 && twice:
				r.fail(a.homeAt, fmt.Sprintf("order %d a second time, after %s", a.HomeOrder, other), "one place for each axis of a controller")
			case a.Unattended && c.homesAll && !a.AllAtOnce:
				r.fail(a.homeAt, fmt.Sprintf("unattended, though %s searches the zero of all its axes at once", c.Name), "together: true, which accepts that arms may pass each other in any order with nobody there")
			case a.AllAtOnce && !c.homesAll:
				r.fail(a.homeAt, fmt.Sprintf("together, though %s searches one axis at a time", c.Name), "no such key: one after the other is safer")
			}
			orders[a.HomeOrder] = a.Name
		}
	}
}

func (r *reader) checkDetectors() {
	f := r.file
	var protectors []string
	for _, s := range f.Protectors {
		protectors = append(protectors, string(s.Name))
	}
	uses, channels := map[string]bool{}, map[drivers.Channel]string{}
	for _, d := range f.Detectors {
		_, pair := f.Counter.Coincidences[d.Channel]
		switch other, twice := channels[d.Channel]; {
		case d.Channel == "" || len(f.Counter.Channels) == 0:
		case !slices.Contains(f.Counter.Channels, d.Channel):
			r.fail(d.channelAt, fmt.Sprintf("no channel %q", d.Channel), "one of %s", join(f.Counter.Channels))
		case pair || d.Channel == f.Counter.Tag:
			r.fail(d.channelAt, fmt.Sprintf("the channel %q, which no detector is behind", d.Channel), "a channel of singles")
		case twice:
			r.fail(d.channelAt, fmt.Sprintf("the channel of %s", other), "a channel for each detector")
		}
		channels[d.Channel] = d.Name
		if d.ProtectBy != "" {
			uses[string(d.ProtectBy)] = true
			if !slices.Contains(protectors, string(d.ProtectBy)) {
				r.fail(d.protectAt, fmt.Sprintf("no protector %q", d.ProtectBy), "%s", oneOf(string(d.ProtectBy), protectors))
			}
		}
		if d.Watch > 0 && f.Counter.GateMax > f.Counter.GateMin && d.Watch < 2*f.Counter.GateMin {
			r.fail(d.at, "a watch of "+unit.Span(d.Watch), "twice the counter's shortest gate, %s, or more", unit.Span(f.Counter.GateMin))
		}
		if d.Glance > 0 && f.Counter.GateMax > 0 && (d.Glance < f.Counter.GateMin || d.Glance > f.Counter.GateMax) {
			r.fail(d.at, "a glance of "+unit.Span(d.Glance), "a gate of the counter, %s to %s", unit.Span(f.Counter.GateMin), unit.Span(f.Counter.GateMax))
		}
	}
	for _, s := range f.Protectors {
		if !uses[string(s.Name)] {
			r.fail(s.at, fmt.Sprintf("the protector %q, which protects nothing", s.Name), "a detector with protect: {by: %s}", s.Name)
		}
	}
}

// checkSimulation holds what the virtual instruments need beyond a real bench's file.
func (r *reader) checkSimulation() {
	f := r.file
	t := f.Simulation.truth
	if f.Optics == nil {
		r.fail(t.at, "a simulated bench without optics", "the blocks \"optics\" and \"arms\": counts come from them")
		return
	}
	if len(f.Counter.Coincidences) == 0 && f.Counter.Name != "" {
		r.fail(f.Counter.at, "a simulated counter without a coincidence channel", "coincidences: {…: [signal, idler]}")
	}
	for name := range t.axes {
		if !slices.ContainsFunc(f.Axes, func(a Axis) bool { return string(a.Name) == name }) {
			r.fail(t.at, fmt.Sprintf("the truth about an axis %q that there is not", name), "an axis of this file")
		}
	}
	r.checkSettingTruth()
	for _, a := range f.Axes {
		if a.Acceleration == 0 {
			r.fail(a.at, "a simulated axis without acceleration", "acceleration: 20 deg/s2, or what it has")
		}
		if least := unit.Degrees(instruments.RunUpDeg) + t.axes[string(a.Name)].play; a.HomeRunUp != nil && *a.HomeRunUp < least {
			r.fail(a.homeAt, fmt.Sprintf("a run-up of %s", *a.HomeRunUp), "%s or more: the virtual controller begins its search there, play included", least)
		}
	}
	if r.doc.Err() != nil {
		return
	}
	optics, err := f.source()
	if err == nil {
		_, err = source.New(optics)
	}
	if err != nil {
		for one := range strings.SplitSeq(err.Error(), "\n") {
			found, want := halves(one)
			r.fail(f.Optics.at, found, "%s", want)
		}
	}
	r.checkVirtual()
}

// checkVirtual finds lines that no virtual instrument can stand behind, and what each would have to
// be that none is.
func (r *reader) checkVirtual() {
	f := r.file
	role := map[string]string{}
	use := func(d Device, what, dialect string) {
		if d.Dialect != dialect {
			r.fail(d.at, fmt.Sprintf("a simulated %s that speaks %s", what, d.Dialect), "%s, which the virtual one speaks", dialect)
		}
		switch other := role[d.Line]; {
		case other == "" || other == "sensor" && what == "sensor":
			role[d.Line] = what
		default:
			r.fail(d.lineAt, fmt.Sprintf("a %s on the simulated line of a %s", what, other), "a line of its own: one virtual instrument stands behind each")
		}
	}
	for _, c := range f.Controllers {
		dialect := c.Dialect
		if dialect != "gcode" {
			dialect = "custom"
		}
		use(c.Device, "controller", dialect)
	}
	use(f.Counter.Device, "counter", "scpi")
	if f.Pump != nil {
		use(f.Pump.Device, "shutter", "scpi")
	}
	blades := map[string]drivers.DeviceName{}
	for _, s := range f.Protectors {
		use(s.Device, "shutter", "scpi")
		blade := f.blade(s.Name)
		if blade == "" {
			r.fail(s.at, "a simulated protector of a detector that is in no arm", "a detector of an arm")
		} else if other, twice := blades[blade]; twice {
			r.fail(s.at, fmt.Sprintf("a second simulated protector of the %s arm, after %s", blade, other), "one for each arm")
		}
		blades[blade] = s.Name
	}
	kinds := map[string]drivers.DeviceName{}
	for _, s := range f.Sensors {
		use(s.Device, "sensor", "scpi")
		key := s.Line + " " + string(s.Kind)
		if other, twice := kinds[key]; twice {
			r.fail(s.at, fmt.Sprintf("a second %s sensor on the line of %s", s.Kind, other), "one of each kind on a simulated line")
		}
		kinds[key] = s.Name
	}
	for _, s := range f.Settings {
		use(s.Device, "setting", "scpi")
		if want := effectOf(s.Is).speaks; want != "" && s.speaks() != want {
			r.fail(s.at, fmt.Sprintf("a simulated setting of %s that speaks %s", s.Kind, s.speaks()), "answer_unit: %s, which the virtual one speaks", want)
		}
	}
}

// halves cuts an error of the house's shape in two.
func halves(text string) (found, want string) {
	found, want, ok := strings.Cut(text, "; want ")
	if !ok {
		return text, "what the part named accepts"
	}
	return found, want
}

// checkDrivers builds every driver once, on a line that is never opened, so that what only the
// driver can find is found before anything runs.
func (r *reader) checkDrivers() {
	lines := map[string]*line.Line{}
	for _, l := range r.file.Lines {
		lines[l.Name] = line.New(line.Settings{Name: l.Name})
	}
	try := func(d Device, err error) {
		if err == nil {
			return
		}
		for one := range strings.SplitSeq(err.Error(), "\n") {
			found, want := halves(strings.TrimPrefix(one, string(d.Name)+": "))
			r.fail(d.at, found, "%s", want)
		}
	}
	f, pace := r.file, r.file.Pace()
	for _, c := range f.Controllers {
		_, err := c.make(lines[c.Line], pace, c, f.customAxes(c.Name))
		try(c.Device, err)
	}
	_, err := f.Counter.make(lines[f.Counter.Line], pace, f.Counter)
	try(f.Counter.Device, err)
	shutters := f.Protectors
	if f.Pump != nil {
		shutters = append(slices.Clone(shutters), *f.Pump)
	}
	for _, s := range shutters {
		_, err := s.make(lines[s.Line], pace, s)
		try(s.Device, err)
	}
	for _, s := range f.Sensors {
		_, err := s.make(lines[s.Line], pace, s)
		try(s.Device, err)
	}
	for _, s := range f.Settings {
		_, err := s.make(lines[s.Line], pace, s)
		try(s.Device, err)
	}
}

func oneOf(name string, names []string) string {
	if near := strict.Nearest(name, names); near != "" {
		return fmt.Sprintf("%q, which is nearest", near)
	}
	if len(names) == 0 {
		return "one that this file describes: it has none"
	}
	return "one of " + strings.Join(names, ", ")
}
