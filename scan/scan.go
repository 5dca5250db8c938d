// Package scan holds the vocabulary of a scan: the plan a recipe comes to, its points and visits,
// and what the engine must know of the bench's axes. Nothing runs here.
package scan

import (
	"math/rand/v2"
	"slices"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
)

// Plan is a checked recipe, worked out for one bench. It is a value: never changed once a run
// began, and worked out again to the same plan from the texts that the logbook keeps.
type Plan struct {
	Title      string
	Points     []Point // in the order of their index, which is their place here
	Dwell      Dwell
	Repeat     Repeat
	Dark       *Cadence    // nil: none
	Background *Background // nil: none
	Guards     []Guard
	Schedule   Schedule
	Trouble    Trouble
	Result     *Result // nil: counts, and no number at the end
}

// Point is one set of targets. Axes and settings it does not name stay where they are.
type Point struct {
	Axes     []AxisTarget
	Settings []SettingTarget
}

// AxisTarget is where an axis is to go, as a bench angle.
type AxisTarget struct {
	Axis  drivers.AxisName
	Angle unit.Angle
}

// SettingTarget is what a setting is to have, in the setting's unit.
type SettingTarget struct {
	Setting drivers.DeviceName
	Value   float64
}

// Dwell is how long one reading counts, in bench time. With Heralds it ends with the first slice
// at whose end the trigger channel has that many counts, and after Time at the latest: stopping on
// trigger counts does not bias an efficiency, stopping on coincidences would.
type Dwell struct {
	Time    time.Duration
	Slice   time.Duration // equal to Time when the dwell is not cut
	Heralds uint64        // 0: the dwell lasts Time
	Trigger drivers.Channel
}

// Slices returns the gates a dwell is counted in: whole slices, and what is left as a last one.
func (d Dwell) Slices() []time.Duration {
	var s []time.Duration
	for left := d.Time; left > 0; left -= d.Slice {
		s = append(s, min(left, d.Slice))
	}
	return s
}

// Repeat says how often each point is visited, and in what manner.
type Repeat struct {
	Times      int
	InPlace    bool // all visits of a point follow one another; else the whole list is passed Times times
	Serpentine bool // every second pass runs backwards
	// Shuffled takes the points of each pass in an order of its own, drawn from Seed, so that a
	// drift is not taken for a dependence on angle.
	Shuffled bool
	Seed     uint64
}

// Visit is one coming to a point. Visit counts from 1.
type Visit struct {
	Point int
	Visit int
}

// Visits lists every visit of the plan in the order they are made.
func (p Plan) Visits() []Visit {
	visits := make([]Visit, 0, len(p.Points)*p.Repeat.Times)
	if p.Repeat.InPlace {
		for _, i := range p.pass(1) {
			for v := 1; v <= p.Repeat.Times; v++ {
				visits = append(visits, Visit{Point: i, Visit: v})
			}
		}
		return visits
	}
	for v := 1; v <= p.Repeat.Times; v++ {
		for _, i := range p.pass(v) {
			visits = append(visits, Visit{Point: i, Visit: v})
		}
	}
	return visits
}

// Sweeps says whether the points move an axis. All points name the same axes.
func (p Plan) Sweeps(axis drivers.AxisName) bool {
	return len(p.Points) > 0 && slices.ContainsFunc(p.Points[0].Axes, func(t AxisTarget) bool { return t.Axis == axis })
}

// pass is the order of the points in one pass, counted from 1.
func (p Plan) pass(n int) []int {
	if p.Repeat.Shuffled {
		return rand.New(rand.NewPCG(p.Repeat.Seed, uint64(n))).Perm(len(p.Points))
	}
	order := make([]int, len(p.Points))
	for i := range order {
		order[i] = i
	}
	if p.Repeat.Serpentine && n%2 == 0 {
		slices.Reverse(order)
	}
	return order
}

// Cadence is how often something is repeated beside the points. Every and EveryPoints exclude
// one another; both may be zero when only AtStart or AtEnd is asked for.
type Cadence struct {
	Dwell       Dwell
	Every       time.Duration // bench time between the starts of two
	EveryPoints int           // visits between two
	AtStart     bool
	AtEnd       bool
}

// Background is counting with the pump on and phase matching spoiled: what the trigger counts
// without a partner. Dark counts are contained in it. The axis is turned by an angle away from
// From, where it stands otherwise, and put back; it must not be swept. From is declared, not found:
// a run that was stopped in a background must not spoil the next one.
type Background struct {
	Cadence
	Axis     drivers.AxisName
	From, By unit.Angle
}

// Guard is a condition for counting. It is no protective guard and no interlock.
type Guard struct {
	Name        string // as the recipe says it
	Sensor      drivers.DeviceName
	Low, High   float64 // in the sensor's unit
	Otherwise   Then
	GiveUpAfter time.Duration // a hold for this guard fails the run after it; 0: the trouble's bound
}

// Schedule bounds a run in time. The instants are worked out when the recipe is accepted.
type Schedule struct {
	NotBefore time.Time // zero: at once
	FinishBy  time.Time // zero: no end. What does not fit before it is left out, closing readings first reserved
}

// Result is the number that a run is for, and which of its readings make it: said before they are
// taken, because the best of many readings, picked afterwards, is biased high.
type Result struct {
	Kind ResultKind

	// Of an efficiency.
	Trigger   drivers.Channel  // singles
	UnderTest drivers.Channel  // singles
	PlateauOf drivers.AxisName // empty: all light readings, which stand at one place
	HalfWidth unit.Angle       // of the plateau's part that counts
	At        []AxisTarget     // only readings with these axes at these targets count; empty: all

	// Of a peak.
	Of      drivers.Channel // singles or coincidences
	Along   drivers.AxisName
	Profile string             // empty: what fits best to what is known
	Power   drivers.DeviceName // the sensor whose mean is part of the exposure; empty: none
}

// ResultKind is what a result is a number of.
type ResultKind string

// The kinds.
const (
	Efficiency ResultKind = "efficiency"
	Peak       ResultKind = "peak"
)

// Then is what is done when something went wrong as often as the recipe allows.
type Then string

// The choices.
const (
	Hold Then = "hold"
	Skip Then = "skip"
	Stop Then = "stop"
)

// Trouble says how often a reading is taken again, and what then.
type Trouble struct {
	Retries     int // beyond the first attempt
	Then        Then
	GiveUpAfter time.Duration // bench time after which a hold that no person asked for fails the run; 0: the engine's default
}

// Axis is what route and engine must know of one axis. Angles are bench angles.
type Axis struct {
	Name       drivers.AxisName
	Role       string // signal_arm, idler_arm, crystal_tilt, pump_waveplate, other
	Controller drivers.DeviceName
	Low, High  unit.Angle // soft limits
	Tolerance  unit.Angle // a proved position may differ from its target by this much
	Backlash   unit.Angle // zero: no approach needed
	Rising     bool       // the last approach is upwards
	Settle     time.Duration
	SpeedDegS  float64 // degrees per second, at full speed
	AccelDegS2 float64
	Park       *unit.Angle
	Proof      drivers.Proof
	// Together axes of one controller start and finish a move together, on a straight line. Where
	// it is false, or controllers differ, any order of passing is expected.
	Together bool
	HomesAt  *unit.Angle // where its reference search leaves it; nil: not known
}

// Limits says whether an angle lies within the soft limits.
func (a Axis) Limits(angle unit.Angle) bool { return angle >= a.Low && angle <= a.High }
