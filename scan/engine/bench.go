package engine

import (
	"time"

	"gemel/drivers"
	"gemel/scan"
)

// Bench is the hardware as the engine sees it. Package daemon/bench builds one; the engine never
// learns what is behind the interfaces.
type Bench struct {
	Name      string
	Pace      drivers.Pace // 1 on a real bench
	Simulated bool

	Axes      []scan.Axis
	KeepOuts  []scan.KeepOut
	Stages    []drivers.Stage
	Counter   drivers.Counter
	Tag       drivers.Channel // the channel that counts gates; empty: none
	Detectors []Detector
	Pump      drivers.Shutter // nil: none, and darks are refused
	Sensors   []drivers.Sensor
	Settings  []drivers.Setting
	// Stand is where settings are brought that the plan does not step, in their units: a run that was
	// stopped in a scan of the delay must not spoil the next one. Others stay as they are found.
	Stand map[drivers.DeviceName]float64
	// Within is how far a setting's value may be from what it was set to, in its unit. One without an
	// entry is believed.
	Within map[drivers.DeviceName]float64

	// HomeOrder is the order in which a controller's axes search their zero, one after another.
	HomeOrder map[drivers.DeviceName][]drivers.AxisName
	// Unattended controllers may search for a lost zero with nobody there.
	Unattended map[drivers.DeviceName]bool
}

// Detector is one detector behind a counter channel.
type Detector struct {
	Name    string
	Channel drivers.Channel
	TripHz  float64         // above this singles rate the detector is protected; 0: none declared
	FloorHz float64         // below this it counts as latched or paralysed; 0: none declared
	Glance  time.Duration   // the short gate before a dwell at which the light is judged; 0: none
	Protect drivers.Shutter // nil: the program cannot protect it, and says so
	Ready   time.Duration   // what the detector needs after its protector opened, before it may count
}
