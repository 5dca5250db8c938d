package bench

import (
	"strings"
	"time"

	"gemel/drivers"
	"gemel/drivers/custom"
	"gemel/drivers/gcode"
	"gemel/drivers/line"
	"gemel/drivers/scpi"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
)

// A maker builds a driver on its line. It is made when the file is read, from the keys of the
// dialect, and keeps them.
type (
	stageMaker   func(*line.Line, drivers.Pace, Controller, []custom.Axis) (drivers.Stage, error)
	counterMaker func(*line.Line, drivers.Pace, Counter) (drivers.Counter, error)
	shutterMaker func(*line.Line, drivers.Pace, Shutter) (drivers.Shutter, error)
	sensorMaker  func(*line.Line, drivers.Pace, Sensor) (drivers.Sensor, error)
	settingMaker func(*line.Line, drivers.Pace, Setting) (drivers.Setting, error)
)

// dialect is one way of speaking to instruments: for each role it can take, a function that reads
// the dialect's own keys of a device and returns its maker.
type dialect struct {
	name    string
	stage   func(strict.Map) stageReading
	counter func(strict.Map) counterMaker
	shutter func(strict.Map) shutterMaker
	sensor  func(strict.Map) sensorMaker
	setting func(strict.Map) settingReading
}

// dialects is the table of all there are. A new one is one line here.
func dialects() []dialect {
	return []dialect{
		{name: "scpi", counter: scpiCounter, shutter: scpiShutter, sensor: scpiSensor, setting: scpiSetting},
		{name: "gcode", stage: gcodeStage},
		{name: "custom", stage: customStage, counter: customCounter, shutter: customShutter, sensor: customSensor, setting: customSetting},
	}
}

// choose reads the key "dialect" of a device and returns that dialect's reader for a role.
func choose[M any](m strict.Map, role func(dialect) func(strict.Map) M) (string, M) {
	var names []string
	for _, d := range dialects() {
		if role(d) != nil {
			names = append(names, d.name)
		}
	}
	v := m.Need("dialect")
	v.Choice(names)
	var none M
	if !v.Good() {
		return "", none
	}
	for _, d := range dialects() {
		if d.name == v.Choice(names) {
			return d.name, role(d)(m)
		}
	}
	return "", none
}

// Bounds of what a device may ask for. They keep a wait that nobody would sit through out of a file.
const (
	maxPoll  = time.Minute
	maxMove  = 2 * time.Hour
	maxTries = 20
)

func optInt(v strict.Value, low, high int64) *int {
	n := int(v.Int(low, high))
	if !v.Good() {
		return nil
	}
	return &n
}

func bits(v strict.Value) []int {
	var all []int
	for _, b := range v.List(0, 16) {
		all = append(all, int(b.Int(0, 31)))
	}
	return all
}

// texts returns nil when the key is absent and an empty list when it is empty.
func texts(v strict.Value) []string {
	if !v.Given() {
		return nil
	}
	all := []string{}
	for _, t := range v.List(0, 32) {
		all = append(all, t.Wire())
	}
	return all
}

// IEEE 488.2 and SCPI-1999.

func scpiCommon(m strict.Map, h strict.Map) scpi.Common {
	return scpi.Common{
		Start: texts(m.Opt("start")), Untagged: m.Opt("untagged").Bool(), Repeat: optInt(m.Opt("repeat"), 0, maxTries),
		AskIdentity: h.Opt("ask_identity").Text(""), AskError: h.Opt("ask_error").Text(""), AskEvents: h.Opt("ask_events").Text(""), Clear: h.Opt("clear").Text(""),
	}
}

func scpiFor(c scpi.Common, d Device, pace drivers.Pace) scpi.Common {
	c.Name, c.Identity, c.Pace = d.Name, d.Identity, pace
	return c
}

func scpiCounter(m strict.Map) counterMaker {
	h := m.Opt("headers").Map()
	c := scpi.CounterConfig{
		Common:  scpiCommon(m, h),
		SetGate: h.Opt("set_gate").Text(""), AskGate: h.Opt("ask_gate").Text(""), Initiate: h.Opt("initiate").Text(""),
		AskCondition: h.Opt("ask_condition").Text(""), Fetch: h.Opt("fetch").Text(""), AskQuality: h.Opt("ask_quality").Text(""), Abort: h.Opt("abort").Text(""),
		CountingBit: optInt(m.Opt("counting_bit"), 0, 15), OverflowBits: bits(m.Opt("overflow_bits")), DoubtBits: bits(m.Opt("doubt_bits")),
		GateWithin: m.Opt("gate_within").Quantity(unit.Share, 0, 0.1), EndWithin: m.Opt("end_within").Duration(0, maxMove), PollEvery: m.Opt("poll_every").Duration(time.Millisecond, maxPoll),
	}
	h.Done()
	return func(l *line.Line, pace drivers.Pace, d Counter) (drivers.Counter, error) {
		c := c
		c.Common = scpiFor(c.Common, d.Device, pace)
		c.Channels, c.Tag, c.GateMin, c.GateMax = d.Channels, d.Tag, d.GateMin, d.GateMax
		return scpi.NewCounter(l, c)
	}
}

func scpiShutter(m strict.Map) shutterMaker {
	h := m.Opt("headers").Map()
	c := scpi.ShutterConfig{
		Common: scpiCommon(m, h),
		TurnOn: h.Opt("turn_on").Text(""), TurnOff: h.Opt("turn_off").Text(""), AskOn: h.Opt("ask_on").Text(""), AskBlade: h.Opt("ask_blade").Text(""),
		PassesWhen: m.Opt("passes_when").Choice([]string{"closed", "open"}, ""),
		BladeOpen:  m.Opt("blade_open").Text(""), BladeClosed: m.Opt("blade_closed").Text(""),
	}
	h.Done()
	return func(l *line.Line, pace drivers.Pace, d Shutter) (drivers.Shutter, error) {
		c := c
		c.Common = scpiFor(c.Common, d.Device, pace)
		c.SettleOpen, c.SettleClosed = d.SettleOpen, d.SettleClosed
		return scpi.NewShutter(l, c)
	}
}

func scpiSensor(m strict.Map) sensorMaker {
	h := m.Opt("headers").Map()
	c := scpi.SensorConfig{
		Common:  scpiCommon(m, h),
		SetUnit: h.Opt("set_unit").Text(""), AskUnit: h.Opt("ask_unit").Text(""),
		Initiate: h.Opt("initiate").Text(""), Fetch: h.Opt("fetch").Text(""), Measure: h.Opt("measure").Text(""),
		UnitAnswer: m.Opt("unit_answer").Text(""), AnswerUnit: unitOf(m.Opt("answer_unit")), Once: m.Opt("once").Bool(), Within: m.Opt("within").Duration(0, maxPoll),
	}
	agree := inUnit(m, m.Opt("agree"))
	h.Done()
	return func(l *line.Line, pace drivers.Pace, d Sensor) (drivers.Sensor, error) {
		c := c
		c.Common, c.Unit, c.Agree = scpiFor(c.Common, d.Device, pace), d.Unit, agree(d.Unit)
		return scpi.NewSensor(l, c)
	}
}

func scpiSetting(m strict.Map) settingReading {
	h := m.Opt("headers").Map()
	c := scpi.SettingConfig{
		Common: scpiCommon(m, h),
		Set:    h.Need("set").Text(), Get: h.Need("get").Text(), AskCondition: h.Opt("ask_condition").Text(""),
		AnswerUnit: unitOf(m.Opt("answer_unit")), Decimals: optInt(m.Opt("decimals"), 0, 12), SettlingBit: optInt(m.Opt("settling_bit"), -1, 15),
		SettleWithin: m.Opt("settle_within").Duration(0, maxMove), Settle: m.Opt("settle").Duration(0, maxMove), PollEvery: m.Opt("poll_every").Duration(time.Millisecond, maxPoll),
	}
	read := inUnit(m, m.Need("tolerance"))
	h.Done()
	header, _, _ := strings.Cut(strings.TrimPrefix(c.Set, ":"), " ")
	return settingReading{Settle: c.Settle, header: strings.ToUpper(header), answerUnit: c.AnswerUnit, tolerance: read, make: func(l *line.Line, pace drivers.Pace, d Setting) (drivers.Setting, error) {
		c := c
		c.Common, c.Unit, c.Tolerance = scpiFor(c.Common, d.Device, pace), d.Unit, read(d.Unit)
		return scpi.NewSetting(l, c)
	}}
}

// settingReading is what a dialect reads of a setting.
type settingReading struct {
	Settle time.Duration // after it was set, before it is read back
	make   settingMaker
	// What a virtual setting must know: the header that sets it, and the unit it speaks; empty: its own.
	header, answerUnit string
	tolerance          func(unit string) float64 // how far what is read back may be from what was set
}

func unitOf(v strict.Value) string {
	name, _ := v.Unit()
	return name
}

// inUnit reads a difference in a unit of the kind that the device's key "unit" has, for use in that
// unit.
func inUnit(m strict.Map, v strict.Value) func(string) float64 {
	q := v.Any()
	if _, kind := m.Opt("unit").Unit(); v.Good() && kind != "" && q.Kind != kind {
		v.Failf("a value of the kind of its unit, %s", kind)
	}
	return func(name string) float64 {
		zero, err := unit.In(0, name)
		if err != nil {
			return 0
		}
		base := q.Base
		if q.Unit == "K" { // the only scale whose zero is elsewhere: a difference of 1 K is 1 Cel
			base += 273.15
		}
		x, _ := unit.In(base, name)
		if name == "K" {
			return x - zero
		}
		return x
	}
}

// Languages that the user declares.

// questions are the keys of "asks" that a role knows.
func asks(m strict.Map, needed, optional []string) map[string]custom.Ask {
	a := m.Need("asks").Map()
	all := map[string]custom.Ask{}
	for _, q := range needed {
		all[q] = ask(a.Need(q))
	}
	for _, q := range optional {
		if v := a.Opt(q); v.Given() {
			all[q] = ask(v)
		}
	}
	a.Done()
	return all
}

func ask(v strict.Value) custom.Ask {
	if !v.Given() {
		return custom.Ask{}
	}
	m := v.Map()
	send, bytes := m.Opt("send"), m.Opt("bytes")
	if m.Given() && send.Given() == bytes.Given() {
		m.Fail("neither or both of \"send\" and \"bytes\"", "one of them")
	}
	a := custom.Ask{
		Send: send.Wire(), Bytes: bytes.Wire(), Match: m.Opt("match").Pattern(), Otherwise: m.Opt("otherwise").Pattern(),
		Proves:  m.Opt("proves").Choice([]string{"accepted", "arrived"}, ""),
		AngleIs: m.Opt("angle_is").Angle(unit.MicroArcsecond, unit.Turn), UnitIs: unitOf(m.Opt("unit_is")),
		Decimals: optInt(m.Opt("decimals"), 0, 12), Within: m.Opt("within").Duration(0, maxMove),
	}
	m.Done()
	return a
}

func readDialect(m strict.Map, needed, optional []string) custom.Dialect {
	d := custom.Dialect{
		EndsWith: m.Opt("ends_with").Wire(), AnswersEndWith: m.Opt("answers_end_with").Wire(), Echo: m.Opt("echo").Bool(),
		Asks: asks(m, needed, optional), Unasked: unasked(m.Opt("unasked")),
	}
	d.Refused = refusal(m.Opt("refused"))
	for _, v := range m.Opt("start").List(0, 32) {
		d.Start = append(d.Start, ask(v))
	}
	m.Later("frame")
	return d
}

func refusal(v strict.Value) string {
	if !v.Given() {
		return ""
	}
	r := v.Map()
	pattern := r.Need("match").Pattern()
	r.Done()
	return pattern
}

func unasked(v strict.Value) []custom.Unasked {
	var all []custom.Unasked
	for _, item := range v.List(0, 32) {
		u := item.Map()
		all = append(all, custom.Unasked{Match: u.Need("match").Pattern(), Means: u.Need("means").Choice([]string{"restarted", "chatter"})})
		u.Done()
	}
	return all
}

func customCommon(m strict.Map, needed, optional []string) custom.Common {
	return custom.Common{Repeat: optInt(m.Opt("repeat"), 0, maxTries), Dialect: readDialect(m, needed, optional)}
}

func customFor(c custom.Common, d Device, pace drivers.Pace) custom.Common {
	c.Name, c.Pace, c.Dialect.Identity = d.Name, pace, d.Identity
	return c
}

func customStage(m strict.Map) stageReading {
	c := custom.StageConfig{
		Common:    customCommon(m, []string{"where", "at_rest", "move", "stop"}, []string{"homed", "home", "mark", "identity"}),
		FeedUnit:  m.Opt("feed_unit").Choice([]string{"deg/min", "deg/s"}, ""),
		PollEvery: m.Opt("poll_every").Duration(time.Millisecond, maxPoll), Margin: m.Opt("margin").Duration(0, maxMove),
		MoveWithin: m.Opt("move_within").Duration(0, maxMove), HomeWithin: m.Opt("home_within").Duration(0, maxMove),
	}
	return stageWith(c.Dialect.Asks, func(l *line.Line, pace drivers.Pace, d Controller, axes []custom.Axis) (drivers.Stage, error) {
		c := c
		c.Common, c.Axes, c.Together = customFor(c.Common, d.Device, pace), axes, d.Together
		return custom.NewStage(l, c)
	})
}

// stageReading is what a dialect reads of a controller.
type stageReading struct {
	make     stageMaker
	homes    bool // it can search for its zero
	marks    bool // it can look for its reference mark and keep the zero
	homesAll bool // and then only all axes at once
}

func stageWith(asks map[string]custom.Ask, make stageMaker) stageReading {
	question := asks["home"].Send + asks["home"].Bytes
	return stageReading{make: make, marks: asks["mark"].Send+asks["mark"].Bytes != "", homes: question != "", homesAll: question != "" && !strings.Contains(question, "{letter}") && !strings.Contains(question, "{address}")}
}

func customCounter(m strict.Map) counterMaker {
	c := custom.CounterConfig{
		Common: customCommon(m, []string{"arm", "counts", "stop"}, []string{"at_rest", "identity"}),
		GateIs: m.Opt("gate_is").Duration(time.Nanosecond, time.Hour), EndWithin: m.Opt("end_within").Duration(0, maxMove), PollEvery: m.Opt("poll_every").Duration(time.Millisecond, maxPoll),
	}
	return func(l *line.Line, pace drivers.Pace, d Counter) (drivers.Counter, error) {
		c := c
		c.Common, c.Channels, c.Tag = customFor(c.Common, d.Device, pace), d.Channels, d.Tag
		return custom.NewCounter(l, c)
	}
}

func customShutter(m strict.Map) shutterMaker {
	c := custom.ShutterConfig{
		Common: customCommon(m, []string{"set", "get"}, []string{"identity"}),
		Open:   m.Opt("open").Text(""), Closed: m.Opt("closed").Text(""), Sensed: m.Opt("sensed").Bool(),
	}
	return func(l *line.Line, pace drivers.Pace, d Shutter) (drivers.Shutter, error) {
		c := c
		c.Common, c.SettleOpen, c.SettleClosed = customFor(c.Common, d.Device, pace), d.SettleOpen, d.SettleClosed
		return custom.NewShutter(l, c)
	}
}

func customSensor(m strict.Map) sensorMaker {
	c := custom.SensorConfig{Common: customCommon(m, []string{"get"}, []string{"identity"}), Varies: m.Opt("varies").Bool()}
	read := inUnit(m, m.Opt("agree"))
	return func(l *line.Line, pace drivers.Pace, d Sensor) (drivers.Sensor, error) {
		c := c
		c.Common, c.Unit, c.Agree = customFor(c.Common, d.Device, pace), d.Unit, read(d.Unit)
		return custom.NewSensor(l, c)
	}
}

func customSetting(m strict.Map) settingReading {
	c := custom.SettingConfig{
		Common:       customCommon(m, []string{"set", "get"}, []string{"at_rest", "identity"}),
		SettleWithin: m.Opt("settle_within").Duration(0, maxMove), Settle: m.Opt("settle").Duration(0, maxMove), PollEvery: m.Opt("poll_every").Duration(time.Millisecond, maxPoll),
	}
	read := inUnit(m, m.Need("tolerance"))
	return settingReading{Settle: c.Settle, tolerance: read, make: func(l *line.Line, pace drivers.Pace, d Setting) (drivers.Setting, error) {
		c := c
		c.Common, c.Unit, c.Tolerance = customFor(c.Common, d.Device, pace), d.Unit, read(d.Unit)
		return custom.NewSetting(l, c)
	}}
}

// RS-274: the words are the standard's, the rest is declared as questions of package custom.
func gcodeStage(m strict.Map) stageReading {
	c := gcode.Config{
		Repeat: optInt(m.Opt("repeat"), 0, maxTries), Decimals: optInt(m.Opt("decimals"), 0, 9),
		FeedUnit: m.Opt("feed_unit").Choice([]string{"deg/min", "deg/s"}, ""),
		EndsWith: m.Opt("ends_with").Wire(), AnswersEndWith: m.Opt("answers_end_with").Wire(), Echo: m.Opt("echo").Bool(),
		Ack: m.Need("ack").Pattern(), AckMeans: m.Opt("ack_means").Choice([]string{"accepted", "arrived"}, ""),
		Nak: refusal(m.Opt("refused")), Unasked: unasked(m.Opt("unasked")), Start: texts(m.Opt("start")),
		PollEvery: m.Opt("poll_every").Duration(time.Millisecond, maxPoll), Margin: m.Opt("margin").Duration(0, maxMove),
		MoveWithin: m.Opt("move_within").Duration(0, maxMove), HomeWithin: m.Opt("home_within").Duration(0, maxMove),
	}
	all := asks(m, []string{"where", "at_rest", "stop"}, []string{"homed", "home", "mark", "identity"})
	c.Position, c.AtRest, c.Stop, c.Homed, c.Home, c.Mark, c.AskWho = all["where"], all["at_rest"], all["stop"], all["homed"], all["home"], all["mark"], all["identity"]
	m.Later("frame")
	return stageWith(all, func(l *line.Line, pace drivers.Pace, d Controller, axes []custom.Axis) (drivers.Stage, error) {
		c := c
		c.Name, c.Identity, c.Pace, c.Axes = d.Name, d.Identity, pace, axes
		return gcode.NewStage(l, c)
	})
}
