package scpi

import (
	"time"

	"gemel/drivers"
)

// Common is what every instrument of this dialect shares. All times in the configurations of
// this package are bench times.
type Common struct {
	Name drivers.DeviceName
	Pace drivers.Pace
	// Identity is compared with the four fields of the *IDN? answer, field by field; an empty
	// field is not compared, and of fewer fields only those given. Empty: whatever answers.
	Identity string
	// Start is sent by each Connect after the identity, one message each; nil takes the device
	// kind's default, an empty list sends nothing.
	Start []string
	// Untagged turns off the numbering of questions by the event enable mask (*ESE).
	Untagged bool
	// Repeat is how often a question that has no effect is asked again; nil takes 2.
	Repeat *int

	AskIdentity string // *IDN?
	AskError    string // :SYST:ERR?
	AskEvents   string // *ESR?
	Clear       string // *CLS
}

// CounterConfig describes a gated counter. Its headers default to those of SCPI-1999 as far as
// that has any; each may be overwritten. {seconds} in SetGate stands for the gate.
type CounterConfig struct {
	Common
	Channels []drivers.Channel // in the order of the answer to Fetch
	Tag      drivers.Channel   // the channel that numbers the gates; empty: none
	GateMin  time.Duration     // shortest gate; 0: not checked
	GateMax  time.Duration     // longest gate; 0: not checked

	SetGate      string // :SENS:TOT:APER {seconds}
	AskGate      string // :SENS:TOT:APER?
	Initiate     string // :INIT
	AskCondition string // :STAT:OPER:COND?
	Fetch        string // :FETC?
	AskQuality   string // :STAT:QUES:EVEN?
	Abort        string // :ABOR

	CountingBit  *int          // of the condition; nil takes 4, "measuring"
	OverflowBits []int         // of the quality register; nil takes 9
	DoubtBits    []int         // of the quality register; nil takes 2, "time"
	GateWithin   float64       // greatest share by which the gate read back may differ; 0 takes 1e-3; what is read back counts
	EndWithin    time.Duration // a gate that is not over so long after its time is aborted; default 2 s and a tenth of the gate
	PollEvery    time.Duration // default 20 ms
}

// ShutterConfig describes a shutter behind an output or a relay.
type ShutterConfig struct {
	Common
	TurnOn  string // :OUTP ON, or :ROUT:CLOS (@1)
	TurnOff string // :OUTP OFF, or :ROUT:OPEN (@1)
	AskOn   string // :OUTP?, or :ROUT:CLOS? (@1): 1 when on, that is when the contact is closed
	// PassesWhen says in which state of the contact light passes: "closed" (the default: on) or
	// "open" (off).
	PassesWhen   string
	AskBlade     string // asks a sensor at the blade; empty: there is none
	BladeOpen    string // that sensor's answer when the blade is open; default 1
	BladeClosed  string // and when it is closed; default 0
	SettleOpen   time.Duration
	SettleClosed time.Duration
}

// SensorConfig describes a meter of one quantity. By default it is read as SCPI-1999 spells out READ?:
// one INITiate, and FETCh? for what it measured. That is asked twice.
type SensorConfig struct {
	Common
	Unit       string        // what Read returns, a spelling of package unit
	AnswerUnit string        // what the instrument answers in, a spelling of package unit; empty: Unit
	SetUnit    string        // such as :UNIT:POW W; empty: the unit is not set
	AskUnit    string        // such as :UNIT:POW?; empty with SetUnit empty
	UnitAnswer string        // the answer to AskUnit, such as W
	Initiate   string        // starts one measurement; default :INIT. One that must be waited for: :INIT;*WAI
	Fetch      string        // asks for what was measured; default :FETC?
	Measure    string        // for a meter without Initiate: measures and answers at once, such as :MEAS:POW?
	Once       bool          // and cannot be asked for the same value again: it measures twice
	Agree      float64       // how far those two may differ, in Unit; needed with Once
	Within     time.Duration // a measurement takes no longer; 0: the line's answer time
}

// SettingConfig describes something that can be set. {value} stands for the number.
type SettingConfig struct {
	Common
	Unit       string  // what Set takes and Get returns, a spelling of package unit
	AnswerUnit string  // what the instrument speaks, a spelling of package unit; empty: Unit
	Set        string  // such as :SOUR:VOLT {value}
	Get        string  // such as :SOUR:VOLT?
	Tolerance  float64 // in Unit: how far the value read back may be from the one set
	Decimals   *int    // of {value}; nil: as many as it needs

	AskCondition string        // :STAT:OPER:COND?
	SettlingBit  *int          // of the condition, set while the value is not reached; nil takes 1, "settling"; -1: it cannot tell
	SettleWithin time.Duration // default 10 s
	Settle       time.Duration // waited after that
	PollEvery    time.Duration // default 50 ms
}
