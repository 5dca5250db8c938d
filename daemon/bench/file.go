package bench

import (
	"path/filepath"
	"strconv"
	"time"

	"gemel/drivers"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/recipe"
)

// File is a bench file that is sound in itself. It is a value: never changed once read.
type File struct {
	Path string // empty when it did not come from a file
	Text string

	Name  string // a NATS token
	Title string

	Lines       []Line
	Controllers []Controller
	Axes        []Axis
	Counter     Counter
	Detectors   []Detector
	Pump        *Shutter // nil: no pump shutter, and no darks
	Protectors  []Shutter
	Sensors     []Sensor
	Settings    []Setting
	KeepOuts    []scan.KeepOut
	Optics      *Optics // nil: none described; a simulated bench has them

	Simulation *Simulation // nil on a real bench

	LogbookFolder string // absolute or relative to where the program stands; empty: the command's choice
	LeastRoom     int64  // bytes that are kept free on the logbook's disk; 0: the logbook's own bound
	NATSListen    string // host:port; empty: the command's choice
	AfterRestart  string // AfterRestartHold or AfterRestartResume

	outlook    *outlook
	keepOutsAt []strict.Place
}

// What `serve` does with a run that a crash or SIGTERM left unfinished.
const (
	AfterRestartHold   = "hold"
	AfterRestartResume = "resume"
)

// Simulated says whether virtual instruments stand behind the lines.
func (f *File) Simulated() bool { return f.Simulation != nil }

// Pace is how many bench seconds pass in a real one.
func (f *File) Pace() drivers.Pace {
	if f.Simulation == nil {
		return 1
	}
	return drivers.Pace(f.Simulation.Clock)
}

// Facts are what a recipe must know of the bench.
func (f *File) Facts() recipe.Facts {
	facts := recipe.Facts{PumpShutter: f.Pump != nil, GateMin: f.Counter.GateMin, GateMax: f.Counter.GateMax,
		SliceBytes: f.Counter.sliceBytes(), Coincidences: f.Counter.Coincidences, Detectors: map[string]drivers.Channel{}, Pace: f.Pace()}
	for _, c := range f.Counter.Channels {
		if _, pairs := f.Counter.Coincidences[c]; !pairs && c != f.Counter.Tag {
			facts.Singles = append(facts.Singles, c)
		}
	}
	for _, d := range f.Detectors {
		facts.Detectors[d.Name] = d.Channel
		if d.Watch > 0 && (facts.Watch == 0 || d.Watch < facts.Watch) {
			facts.Watch = d.Watch
		}
	}
	for _, s := range f.Sensors {
		facts.Sensors = append(facts.Sensors, recipe.Sensor{Name: s.Name, Unit: s.Unit})
	}
	facts.KeepOuts = f.KeepOuts
	if f.Optics != nil {
		facts.Conjugate, facts.Emission, facts.Flanks, facts.Expect = f.conjugate, f.emission, f.flanks, f.expect
	}
	for _, a := range f.Axes {
		facts.Axes = append(facts.Axes, a.Axis)
	}
	for _, s := range f.Settings {
		facts.Settings = append(facts.Settings, recipe.Setting{Name: s.Name, Unit: s.Unit, Low: s.Low, High: s.High})
	}
	return facts
}

// sliceBytes is what one gate takes at most in the entry of its reading, in bytes: two times, each
// channel with its name and its count, and the instrument's answer, which has each count again and a
// few words.
func (c Counter) sliceBytes() int {
	const (
		times = len(`{"gate_set_s":0.000000000,"gate_s":0.000000000,"counts":[],"raw":""},`) + 16
		words = 64
		one   = len(`{"channel":"","counts":},`)
		exact = len("+1.234567890E+09,") // as an instrument may write it
	)
	digits := len(strconv.FormatUint(1<<max(c.Bits, 1), 10))
	n := times + words
	for _, ch := range c.Channels {
		n += one + len(ch) + digits + max(digits+1, exact)
	}
	return n
}

// near resolves a path that the file names: relative ones start at the file.
func near(file, path string) string {
	if path == "" || filepath.IsAbs(path) || file == "" {
		return path
	}
	return filepath.Join(filepath.Dir(file), path)
}

// Line is one line: a device by a path that stays, TCP, or a virtual instrument. Times are times on
// the wall. Zero values leave the choice to package line.
type Line struct {
	Name   string
	Device string // a path, "tcp://host:port" or Simulated

	Baud, DataBits   int
	Parity, StopBits string
	EndsWith         []byte
	AnswersEndWith   []byte
	Echo             bool

	AnswerWithin, LongestAnswer, WriteWithin, QuietFor, OpenWithin time.Duration

	at strict.Place
}

// Simulated is the device of a line that a virtual instrument stands behind.
const Simulated = "simulated"

// Device is what all instruments have in common.
type Device struct {
	Name     drivers.DeviceName
	Line     string
	Dialect  string
	Identity string // what the instrument must say it is; empty: whatever answers

	at, lineAt strict.Place
}

// Controller is a motion controller. Its axes are the Axes that name it.
type Controller struct {
	Device
	Together bool // axes of one move start and finish together

	stageReading
}

// Axis is one axis of a controller.
type Axis struct {
	scan.Axis
	Letter       string
	Address      string
	Mount        drivers.Mount
	Speed        unit.Angle // in a second
	Acceleration unit.Angle // in a second, per second; 0: not stated
	StepsPerTurn float64    // with Gear what a step is; 0: the dialect says
	Gear         float64
	Error        unit.Angle // standard uncertainty of a proved angle
	Unattended   bool       // may search for a lost zero with nobody there
	HomeOrder    int        // place among its controller's axes in that search
	AllAtOnce    bool       // the file accepts that the controller searches all axes at once

	at, controllerAt, letterAt, homeAt, verifyAt strict.Place
}

// Counter is the gated counter.
type Counter struct {
	Device
	Channels     []drivers.Channel
	Coincidences map[drivers.Channel][2]drivers.Channel // which pair is which coincidence channel
	Tag          drivers.Channel                        // the channel that counts gates; empty: none
	Logic        string                                 // every_pair or one_per_herald; empty without coincidences
	Window       strict.Measured                        // full width of the coincidence window, s
	Displaced    []Displaced                            // coincidence channels whose windows lie off the true delay
	Capture      strict.Measured                        // share of true coincidences within the window, from a delay scan
	Jitter       strict.Measured                        // rms between the two arrivals of a pair, s; for forecasts alone
	Bits         int
	GateMin      time.Duration
	GateMax      time.Duration

	make counterMaker
}

// Displaced is a coincidence channel whose windows lie off the true delay, and so count accidentals
// alone.
type Displaced struct {
	Channel drivers.Channel
	Of      [2]drivers.Channel
	Windows int // of the full width, summed by the channel
}

// Detector is one photon-counting detector.
type Detector struct {
	Settings   []string // bias, threshold …, as a person states them
	Name       string
	Channel    drivers.Channel
	DeadTime   strict.Measured // s
	Model      string          // non-paralysable or paralysable; empty without a dead time
	Afterpulse strict.Measured // share of recorded events
	Dark       strict.Measured // Hz, as stated
	Expected   strict.Measured // efficiency that a forecast takes; no value: a perfect detector
	RoomHz     float64         // room light that a forecast takes, recorded
	TripHz     float64
	FloorHz    float64
	Glance     time.Duration
	Watch      time.Duration      // the longest gate without a look at its light; 0: as long as a dwell's slice
	ProtectBy  drivers.DeviceName // empty: the program cannot protect it, and says so
	Ready      time.Duration      // after the protector opened

	at, channelAt, protectAt strict.Place
}

// Shutter is the pump shutter or a detector's protector.
type Shutter struct {
	Device
	SettleOpen   time.Duration
	SettleClosed time.Duration

	make shutterMaker
}

// Sensor is a monitor of one quantity.
type Sensor struct {
	Device
	Kind unit.Kind // power or temperature
	Unit string

	make sensorMaker
}

// Simulation says how the virtual instruments live.
type Simulation struct {
	Clock int    // bench seconds in a real one
	Seed  uint64 // of everything that is drawn

	// What is true and no instrument shows. It is not exported, so that nothing that works out
	// a result can read what it is to find.
	truth truth
}
