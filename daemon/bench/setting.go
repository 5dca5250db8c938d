package bench

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/sim/instruments"
	"gemel/sim/source"
)

// Setting is what can be set and read back and is no axis.
type Setting struct {
	Device
	Unit      string
	Kind      unit.Kind
	Low, High float64 // in Unit

	// Is says what it changes of the light, one of the effects of package instruments; empty: nothing
	// that the program knows of. Forecasts act on it, and virtual instruments.
	Is      string
	Centre  *strict.Measured // of a delay: where pairs are centred, s; nil: not known
	Nominal float64          // of a bias: where the detector is as declared, V
	PerVolt float64          // of a bias: relative change of the efficiency
	AddsHz  [2]float64       // of a lamp: to what is recorded at signal and idler, for each 1 of Unit

	// Stand is where it is brought before anything is counted that a recipe does not step it for, in
	// Unit; nil: it stays as it is found. Without a word of the file it is where the light is as declared.
	Stand *float64

	isAt strict.Place
	settingReading
}

// speaks is the unit on the wire.
func (s Setting) speaks() string {
	if s.answerUnit != "" {
		return s.answerUnit
	}
	return s.Unit
}

// effect is what the program must know of one thing that a setting can be.
type effect struct {
	kind   unit.Kind
	speaks string // the unit of virtual ones
}

func effectOf(is string) effect {
	switch is {
	case instruments.PumpPower:
		return effect{unit.Power, "W"}
	case instruments.CrystalTemperature:
		return effect{unit.Temperature, "Cel"}
	case instruments.Delay:
		return effect{unit.Time, "s"}
	case instruments.SignalIris, instruments.IdlerIris:
		return effect{unit.Length, "m"}
	case instruments.SignalBias, instruments.IdlerBias:
		return effect{unit.Voltage, "V"}
	}
	return effect{}
}

func isBias(is string) bool { return is == instruments.SignalBias || is == instruments.IdlerBias }

func (r *reader) settings(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		s := Setting{Device: device(e.Name, e.Key, m)}
		s.Unit, s.Kind = m.Need("unit").Unit()
		s.Dialect, s.settingReading = choose(m, func(d dialect) func(strict.Map) settingReading { return d.setting })
		s.Low, s.High = math.Inf(-1), math.Inf(1)
		list := m.Need("limits")
		if items := list.List(2, 2); len(items) == 2 && s.Kind != "" {
			low, high := items[0].Quantity(s.Kind, -1e30, 1e30), items[1].Quantity(s.Kind, -1e30, 1e30)
			s.Low, _ = unit.In(low, s.Unit)
			s.High, _ = unit.In(high, s.Unit)
			if items[0].Good() && items[1].Good() && low >= high {
				list.Fail("the higher limit not above the lower", "the lower limit first")
			}
		}
		readIs(m, &s)
		if stand := m.Opt("stand"); stand.Given() {
			x, _ := unit.In(stand.Quantity(s.Kind, -1e30, 1e30), s.Unit)
			x = tidy(x)
			if s.Stand = &x; stand.Good() && (x < s.Low || x > s.High) {
				stand.Fail(fmt.Sprintf("%g %s, beyond its limits", x, s.Unit), fmt.Sprintf("%g %s to %g %s", s.Low, s.Unit, s.High, s.Unit))
			}
		}
		done(m, s.Device)
		r.file.Settings = append(r.file.Settings, s)
	}
}

// readIs reads what a setting changes, and the constants that belong to it.
func readIs(m strict.Map, s *Setting) {
	is, centre, nominal, perVolt, adds := m.Opt("is"), m.Opt("centre"), m.Opt("nominal"), m.Opt("per_volt"), m.Opt("adds")
	s.Is, s.isAt = is.Choice(instruments.Effects(), ""), is.Place()
	if want := effectOf(s.Is).kind; want != "" && s.Kind != "" && s.Kind != want {
		is.Fail(fmt.Sprintf("%s in %s", s.Is, s.Unit), fmt.Sprintf("a unit of %s: %s", want, strings.Join(unit.Units(want), ", ")))
	}
	if centre.Given() {
		c := centre.Measured(unit.Time, -1e-3, 1e-3)
		s.Centre = &c
	}
	s.Nominal, s.PerVolt = nominal.Quantity(unit.Voltage, -1e6, 1e6), perVolt.Quantity(unit.Share, -10, 10)
	if centre.Good() && s.Is != instruments.Delay {
		centre.Fail("the centre of what is no delay", "is: delay, or no such key")
	}
	for _, v := range []strict.Value{nominal, perVolt} {
		if v.Good() && !isBias(s.Is) {
			v.Fail("said of what is no bias", "is: signal_bias or idler_bias, or no such key")
		}
	}
	if isBias(s.Is) {
		m.Need("nominal")
		m.Need("per_volt")
	}
	if s.Is == instruments.RoomLight {
		m.Need("adds")
	}
	if !adds.Given() {
		return
	}
	am := adds.Map()
	for i, arm := range []string{"signal", "idler"} {
		s.AddsHz[i] = am.Need(arm).Quantity(unit.Rate, 0, 1e9)
	}
	am.Done()
	if s.Is != instruments.RoomLight {
		adds.Fail("said of what is no lamp", "is: room_light, or no such key")
	}
}

// checkSettings finds two settings of the same thing, and irises of apertures that have none.
func (r *reader) checkSettings() {
	f := r.file
	first := map[string]Setting{}
	for _, s := range f.Settings {
		if s.Is == "" {
			continue
		}
		if other, twice := first[s.Is]; twice {
			r.fail(s.isAt, fmt.Sprintf("a second %s beside %s", s.Is, other.Name), "one setting of each, or no such key")
		}
		first[s.Is] = s
		if f.Optics == nil {
			continue
		}
		arm, ok := map[string]Arm{instruments.SignalIris: f.Optics.Signal, instruments.IdlerIris: f.Optics.Idler}[s.Is]
		if ok && arm.Aperture == source.Gaussian {
			r.fail(s.isAt, "the iris of an arm whose aperture is a fibre's mode", "aperture: {kind: iris, …} in that arm, or no such key")
		}
	}
}

// settingTruth is what is true of a simulated setting. Values are in base units.
type settingTruth struct {
	name             string
	offset           *float64 // of a delay
	lag              time.Duration
	nominal, perVolt *float64         // of a bias
	start            *strict.Quantity // of any

	at, offsetAt, lagAt, biasAt, startAt strict.Place
}

func readSettingTruths(v strict.Value) (all []settingTruth) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		t := settingTruth{name: e.Name, at: e.Key}
		number := func(key string, kind unit.Kind, bound float64) (*float64, strict.Place) {
			v := m.Opt(key)
			if !v.Given() {
				return nil, v.Place()
			}
			x := v.Quantity(kind, -bound, bound)
			return &x, v.Place()
		}
		t.offset, t.offsetAt = number("offset", unit.Time, 1e-3)
		t.nominal, t.biasAt = number("nominal", unit.Voltage, 1e6)
		if t.perVolt, _ = number("per_volt", unit.Share, 10); t.nominal == nil {
			t.biasAt = m.Opt("per_volt").Place()
		}
		lag := m.Opt("lag")
		t.lag, t.lagAt = lag.Duration(time.Millisecond, 24*time.Hour, 0), lag.Place()
		if start := m.Opt("start"); start.Given() {
			q := start.Any()
			t.start, t.startAt = &q, start.Place()
		}
		m.Done()
		all = append(all, t)
	}
	return all
}

// checkSettingTruth holds that what is true of a setting is about one, and about what it is.
func (r *reader) checkSettingTruth() {
	f := r.file
	for _, t := range f.Simulation.truth.settings {
		i := slices.IndexFunc(f.Settings, func(s Setting) bool { return string(s.Name) == t.name })
		if i < 0 {
			r.fail(t.at, fmt.Sprintf("the truth about a setting %q that there is not", t.name), "a setting of this file")
			continue
		}
		s := f.Settings[i]
		wrong := func(at strict.Place, given bool, what, is string, holds bool) {
			if given && !holds {
				r.fail(at, fmt.Sprintf("the %s of %s, which is no %s", what, s.Name, is), "is: %s in its block, or no such key", is)
			}
		}
		wrong(t.offsetAt, t.offset != nil, "offset", instruments.Delay, s.Is == instruments.Delay)
		wrong(t.lagAt, t.lag > 0, "lag", instruments.CrystalTemperature, s.Is == instruments.CrystalTemperature)
		wrong(t.biasAt, t.nominal != nil || t.perVolt != nil, "slope", instruments.IdlerBias, isBias(s.Is))
		if t.start == nil || t.start.Kind == "" || s.Kind == "" {
			continue
		}
		if x, err := unit.In(t.start.Base, s.Unit); t.start.Kind != s.Kind || err != nil || x < s.Low || x > s.High {
			r.fail(t.startAt, fmt.Sprintf("%s %s", t.start.Number, t.start.Unit), "a value within its limits, %g to %g %s", s.Low, s.High, s.Unit)
		}
	}
}

// truthOf is what is true of a setting; without a word in the file it is as declared.
func (f *File) truthOf(s Setting) (t settingTruth, neutral, perVolt float64) {
	all := f.Simulation.truth.settings
	if i := slices.IndexFunc(all, func(t settingTruth) bool { return t.name == string(s.Name) }); i >= 0 {
		t = all[i]
	}
	neutral, perVolt = s.neutral(f.Optics), s.PerVolt
	for _, told := range []*float64{t.offset, t.nominal} {
		if told != nil {
			neutral = *told
		}
	}
	if t.perVolt != nil {
		perVolt = *t.perVolt
	}
	return t, neutral, perVolt
}

// Stands says where a run brings a setting that its recipe does not step, in the setting's unit; false:
// it stays as it is found.
func (f *File) Stands(s Setting) (value float64, ok bool) { return s.stand(f.Optics) }

// stand is where a setting is brought that no recipe steps.
func (s Setting) stand(o *Optics) (value float64, ok bool) {
	switch {
	case s.Stand != nil:
		return *s.Stand, true
	case s.Is == "", s.Is == instruments.Delay && s.Centre == nil, s.Is != instruments.Delay && s.Is != instruments.RoomLight && o == nil:
		return 0, false
	}
	value, err := unit.In(s.neutral(o), s.Unit)
	if err != nil || value < s.Low || value > s.High {
		return 0, false
	}
	return tidy(value), true
}

// neutral is the value, in the base unit of its kind, at which the light is as the file declares.
func (s Setting) neutral(o *Optics) float64 {
	switch s.Is {
	case instruments.PumpPower:
		return o.PumpPower
	case instruments.CrystalTemperature:
		return o.Temperature
	case instruments.SignalIris:
		return 2 * o.Signal.Radius.Value
	case instruments.IdlerIris:
		return 2 * o.Idler.Radius.Value
	case instruments.Delay:
		if s.Centre != nil {
			return s.Centre.Value
		}
		return 0
	case instruments.RoomLight:
		return 0 // off
	}
	return s.Nominal
}

// base is a value of the setting in the base unit of its kind.
func (s Setting) base(value float64) float64 {
	base, _, _, err := unit.ParseAny(strconv.FormatFloat(value, 'g', 17, 64) + " " + s.Unit)
	if err != nil {
		return value
	}
	return base
}

func (f *File) virtualSetting(w *instruments.World, s Setting) (instruments.Instrument, error) {
	wire := func(base float64) float64 {
		y, err := unit.In(base, s.speaks())
		if err != nil {
			return base
		}
		return y
	}
	t, neutral, perVolt := f.truthOf(s)
	c := instruments.SettingConfig{Name: string(s.Name), Identity: identity(s.Device, "setting"), Header: s.header, Changes: s.Is,
		Low: wire(s.base(s.Low)), High: wire(s.base(s.High)), Neutral: neutral, PerVolt: perVolt, Lag: t.lag}
	one := wire(s.base(1)) - wire(s.base(0))
	for i, adds := range s.AddsHz {
		c.RoomHz[i] = adds / one
	}
	start := wire(neutral)
	if t.start != nil {
		start = wire(t.start.Base)
	}
	c.Start = max(c.Low, min(c.High, start))
	if c.Lag > 0 {
		c.Within = max(s.tolerance(s.speaks()), 1e-3) // an exponential never quite arrives
	}
	return instruments.NewSetting(w, c)
}
