package custom

import (
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
)

// Dialect is an instrument's language as its user declares it. In every Send, Bytes and
// terminator \xHH, \r, \n, \t, \0 and \\ stand for bytes, and {name} in Send for a value.
// Patterns are RE2 expressions that must cover the whole answer.
type Dialect struct {
	EndsWith       string // sent after each question; empty: the line's
	AnswersEndWith string // ends each answer; empty: the line's
	Echo           bool   // the instrument repeats each question before it answers

	Asks    map[string]Ask // by question: where at_rest homed move stop home mark arm counts identity set get
	Refused string         // pattern of a refusal of any question, with an optional group reason
	Unasked []Unasked      // what comes without having been asked for
	Start   []Ask          // sent by each Connect, one after the other
	// Identity is what the group identity of the question identity must show; fields between
	// commas are compared one by one, and an empty one is not compared.
	Identity string
	Frame    string // not available yet: anything but "" or "none" is refused
}

// Ask is one question: what to send, and what may be answered.
type Ask struct {
	Send      string // a text with {names}; the terminator is added
	Bytes     string // instead of Send: exactly these bytes, without a terminator
	Match     string // pattern of the answer, or of the answer "yes"; empty: nothing is answered
	Otherwise string // pattern of the answer "no"
	Proves    string // for move, home and mark: "accepted" (the default) or "arrived"

	AngleIs  unit.Angle    // what 1 in {angle} or the groups for angles means; 0: 1 deg, or the axis's steps
	UnitIs   string        // the unit of {value} and the group value, a spelling of package unit; empty: the device's
	Decimals *int          // of {angle}, {value}; nil: 0 where AngleIs or steps are given, otherwise 4
	Within   time.Duration // the answer comes no later, in bench time; 0: the line's answer time
}

// Unasked is a line that comes by itself.
type Unasked struct {
	Match string
	Means string // "restarted" or "chatter"
}

// Common is what every device of this dialect shares. All times are bench times.
type Common struct {
	Name    drivers.DeviceName
	Pace    drivers.Pace
	Repeat  *int // how often a question that has no effect is asked again; nil takes 2
	Dialect Dialect
}

// Axis is one axis of a controller.
type Axis struct {
	Name         drivers.AxisName
	Letter       string // one capital letter, unique: {letter}, and the name of the axis's group in an answer for all axes
	Address      string // {address}, for a controller that is asked for one axis at a time
	Mount        drivers.Mount
	Speed        unit.Angle // in one second; 0: not known
	Acceleration unit.Angle // in one second per second; 0: not known
	StepsPerTurn float64    // with Gear instead of AngleIs: controller numbers in a turn of the motor
	Gear         float64    // turns of the motor in one of the axis; 0 takes 1
}

// StageConfig describes a motion controller. Names in templates: {letter} {address} {angle}
// {feed} {targets}; groups in answers: angle, reason, identity and the letters of the axes.
// {targets} is every axis to be moved with its angle, such as "A12.3400 B-3.0000".
type StageConfig struct {
	Common
	Axes     []Axis
	Together bool   // axes of one move start and finish together
	FeedUnit string // of {feed}: "deg/min" (the default) or "deg/s"

	PollEvery  time.Duration // between two looks whether it is at rest; default 50 ms
	Margin     time.Duration // a move may take so much longer than speed and distance say; default 5 s and as long again
	MoveWithin time.Duration // bound of a move whose time is not known; default 5 min
	HomeWithin time.Duration // bound of a reference search; default 10 min
}

// CounterConfig describes a counter. Names in templates: {gate}, in seconds or in AngleIs's place
// GateIs; groups in answers: the channels' names, gate (as measured), overflow.
type CounterConfig struct {
	Common
	Channels  []drivers.Channel
	Tag       drivers.Channel // the channel that numbers the gates; empty: none
	GateIs    time.Duration   // what 1 in {gate} and in the group gate means; 0 takes 1 s
	EndWithin time.Duration   // a gate that is not over so long after its time is stopped; default 2 s and a tenth of the gate
	PollEvery time.Duration   // default 20 ms
}

// ShutterConfig describes a shutter: set with {value}, get with the group value.
type ShutterConfig struct {
	Common
	Open         string // {value} and the group value for an open shutter; default 1
	Closed       string // and for a closed one; default 0
	Sensed       bool   // get tells what a sensor at the blade sees
	SettleOpen   time.Duration
	SettleClosed time.Duration
}

// SensorConfig describes a sensor: get with the group value.
type SensorConfig struct {
	Common
	Unit string
	// Varies says that two answers to get need not agree to the letter, because each is a new
	// measurement. They may then differ by Agree, in Unit.
	Varies bool
	Agree  float64
}

// SettingConfig describes a setting: set with {value}, get with the group value, and at_rest if
// the instrument can say when it is reached.
type SettingConfig struct {
	Common
	Unit         string
	Tolerance    float64       // in Unit: how far the value read back may be from the one set
	SettleWithin time.Duration // default 10 s
	Settle       time.Duration // waited after that
	PollEvery    time.Duration // default 50 ms
}
