package forecast

import (
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Bench is what a forecast must know of a bench. All times are bench time.
type Bench struct {
	Name        string
	Axes        []scan.Axis
	KeepOuts    []scan.KeepOut
	Start       []unit.Angle         // where each axis stands before the run, in the order of Axes
	Controllers []drivers.DeviceName // in the order in which they are asked and sent
	Pump        *Shutter             // nil: none
	Protectors  []Shutter            // each once, in the order of the detectors
	Detectors   []Detector
	Counter     Counter
	Sensors     []drivers.DeviceName
	Settings    []Setting
	Costs       Costs
	PumpPower   *PumpPower // nil: no sensor is known to show it
	Pace        float64    // bench seconds in a real one; 0 and 1: the bench's clock is the wall's
}

// PumpPower is what the sensor of the pump's power shows, by what the optics declare.
type PumpPower struct {
	Sensor drivers.DeviceName
	Unit   string             // the sensor's
	Value  float64            // in it
	By     drivers.DeviceName // the setting that sets it; empty: none
	ByUnit float64            // one of that setting's units, in the sensor's
}

// at is what it shows at a point.
func (w PumpPower) at(p scan.Point) float64 {
	for _, t := range p.Settings {
		if w.By != "" && t.Setting == w.By {
			return t.Value * w.ByUnit
		}
	}
	return w.Value
}

// Shutter is a shutter that the engine opens and closes.
type Shutter struct {
	Name         drivers.DeviceName
	SettleOpen   time.Duration
	SettleClosed time.Duration
}

// Detector is one detector behind a channel.
type Detector struct {
	Name      string
	Channel   drivers.Channel
	TripHz    float64 // 0: none declared
	FloorHz   float64
	Glance    time.Duration
	Ready     time.Duration
	ProtectBy drivers.DeviceName // empty: the program cannot protect it
	DeadTimeS float64
}

// Counter is the gated counter.
type Counter struct {
	Name         drivers.DeviceName
	Channels     []drivers.Channel                      // that count anything
	Coincidences map[drivers.Channel][2]drivers.Channel // which pair is which channel
	Bits         int                                    // 0: not stated
}

// Setting is what can be set and is no axis.
type Setting struct {
	Name   drivers.DeviceName
	Unit   string
	Settle time.Duration // after it was set
	Stand  *float64      // where it is brought when the plan does not step it; nil: it stays as it is
}

// Costs is what takes time beside moving, settling and counting.
type Costs struct {
	Question time.Duration                        // from a question on a line to its answer
	On       map[drivers.DeviceName]time.Duration // the same for devices whose lines are slower
	Write    time.Duration                        // until an entry of the journal is on the disk
	Start    time.Duration                        // from the start until the first reading is decided: lines opened, instruments asked who they are
	Turn     time.Duration                        // how much later the end of a leg is seen in which an axis turns round, because its play takes time that nobody declared
	// What an earlier run took beyond all this, for each reading and each slice of one; less than
	// nothing where it was quicker.
	Reading, Slice time.Duration
	From           string // where the numbers come from, for people
}

// Measured are the costs that were measured on virtual instruments whose answers take 1.2 ms, on so
// many lines. Opening one and asking who is there takes 100 ms, and controllers are asked every 50 ms
// whether they are at rest.
func Measured(lines int) Costs {
	const question = 1200 * time.Microsecond
	return Costs{Question: question, Write: 1500 * time.Microsecond, Start: 480*time.Millisecond + time.Duration(lines)*100*time.Millisecond, Turn: 50*time.Millisecond + question,
		From: "questions on the lines at 1.2 ms each, as measured on virtual instruments"}
}

func (c Costs) ask(device drivers.DeviceName, questions int) time.Duration {
	each := c.Question
	if slow, ok := c.On[device]; ok {
		each = slow
	}
	return time.Duration(questions) * each
}

// How many questions the dialects ask for one thing. What ends in a reading is asked twice.
const (
	askWhere   = 4 // angles twice, homed twice
	askMove    = 3 // angles twice before, at rest after; the command's answer passes while it moves
	askStill   = 1 // the command's own answer, where nothing moves meanwhile
	askCount   = 4 // open, over?, counts twice
	askSetGate = 2
	askState   = 1
	askOpen    = 3 // command, commanded?, blade
	askClose   = 2 // commanded?, blade: the command itself is urgent and not answered
	askSensor  = 1
	askSet     = 3 // command, settled?, value
	askGet     = 1
)
