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
	Reference  *Reference  // nil: none
	Refine     *Refine     // nil: the points stay as they are
	Guards     []Guard
	Schedule   Schedule
	Trouble    Trouble
	Results    []Result // the numbers the run is for; empty: counts alone

	// Earlier are the values that the points take from earlier results, in the recipe's order.
	Earlier []Earlier
}

// Open lists the values of the plan that no earlier result gives yet. A plan with any is
// provisional: its points stand where the model, or the axis's park angle, puts them, and nobody
// goes there.
func (p Plan) Open() []Earlier {
	var open []Earlier
	for _, e := range p.Earlier {
		if e.Source == nil {
			open = append(open, e)
		}
	}
	return open
}

// Earlier is a value taken from an earlier result on this bench.
type Earlier struct {
	Ask       EarlierAsk
	Otherwise Then   // hold or stop, when there is none
	Missing   string // why there is none; empty with a Source
	Source    *EarlierSource
}

// EarlierAsk says which result a value is taken from: the last of its kind from a finished run
// with that title.
type EarlierAsk struct {
	Kind         ResultKind         // peak, zero or delay
	Axis         drivers.AxisName   // of a peak or a zero
	Setting      drivers.DeviceName // of a delay
	From         string             // the title of the run
	NotOlderThan time.Duration      // 0: however old
	Below        unit.Angle         // its standard uncertainty at most; 0: whatever it is. Of a delay: see BelowValue
	BelowValue   float64            // the same of a setting, in its unit
}

// Of names the axis or the setting that a value is for.
func (a EarlierAsk) Of() string {
	if a.Axis != "" {
		return string(a.Axis)
	}
	return string(a.Setting)
}

// EarlierSource is where a value came from.
type EarlierSource struct {
	Run      string     // the run that measured it
	Sequence int64      // its result's entry
	Angle    unit.Angle // of an axis
	Value    float64    // of a setting, in its unit
	U        float64    // its standard uncertainty, in degrees or the setting's unit
}

// Point is one set of targets. Axes and settings it does not name stay where they are.
type Point struct {
	Axes     []AxisTarget
	Settings []SettingTarget
	// Empty is why there is nothing to be seen at this point, such as a ring that is closed at its
	// tilt. Such a point keeps its index and its place in every list, and nobody goes there.
	Empty string
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

// Visits lists every visit of the plan in the order they are made. Points that are empty have none.
func (p Plan) Visits() []Visit {
	visits := make([]Visit, 0, len(p.Points)*p.Repeat.Times)
	if p.Repeat.InPlace {
		for _, i := range p.pass(1) {
			for v := 1; v <= p.Repeat.Times; v++ {
				visits = append(visits, Visit{Point: i, Visit: v})
			}
		}
	} else {
		for v := 1; v <= p.Repeat.Times; v++ {
			for _, i := range p.pass(v) {
				visits = append(visits, Visit{Point: i, Visit: v})
			}
		}
	}
	return slices.DeleteFunc(visits, func(v Visit) bool { return p.Points[v.Point].Empty != "" })
}

// Sweeps says whether the points move an axis. All points name the same axes, but those that are
// empty, which may name fewer.
func (p Plan) Sweeps(axis drivers.AxisName) bool {
	i := slices.IndexFunc(p.Points, func(p Point) bool { return p.Empty == "" })
	return i >= 0 && slices.ContainsFunc(p.Points[i].Axes, func(t AxisTarget) bool { return t.Axis == axis })
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

// Guard is a condition for counting. It is no protective guard and no interlock. Exactly one of
// Sensor, Rate, DarkRate and ReferenceAge is set.
type Guard struct {
	Name   string             // as the recipe says it
	Sensor drivers.DeviceName // its value, before, during and after each light dwell
	Rate   drivers.Channel    // counts per second of each gate of each light dwell, the glance before it included
	// DarkRate is a channel's counts per second in each dark.
	DarkRate drivers.Channel
	// ReferenceAge is how old the last good reference may be when a light dwell begins. A hold for
	// it is a trouble's: a person lets it go on, and a new reference comes first.
	ReferenceAge time.Duration
	Low, High    float64 // in the sensor's unit, or per second
	Otherwise    Then
	GiveUpAfter  time.Duration // a hold for this guard fails the run after it; 0: the trouble's bound
}

// Reference is a return to known places to see drift: a check point, no calibration standard. One
// set is a reading at each of its places, in their order. The first set of a run, and the first
// after a person let a run go on that a reference held, is what later ones are compared with.
type Reference struct {
	Cadence   // AtStart is always set
	Places    []ReferencePlace
	Trigger   drivers.Channel // singles of the one arm's detector
	UnderTest drivers.Channel // singles of the other's
	Pairs     drivers.Channel // their coincidences
	Bounds    Bounds
	Otherwise Then // note, hold or stop
}

// ReferencePlace is where one reading of a reference is taken.
type ReferencePlace struct {
	Arm  drivers.AxisName // the arm whose profile it lies on; empty: the top that all arms share
	On   Spot
	Axes []AxisTarget // of every arm, and of the crystal's tilt where the sweep moves it
}

// Spot is a place on an arm's profile of coincidences.
type Spot string

// The spots.
const (
	LowFlank  Spot = "low_flank"  // at half maximum, towards smaller bench angles
	Top       Spot = "top"        // where the partner goes
	HighFlank Spot = "high_flank" // at half maximum, towards greater bench angles
)

// Bounds are how far a reference may be from the one it is compared with. Zero: not looked at.
type Bounds struct {
	Singles float64    // relative change of each detector's singles at the top, 0.01 is 1 %
	Ratio   float64    // relative change of coincidences over singles, for both detectors, at the top
	Centre  unit.Angle // shift of each arm's centre, fitted to its flanks and the top
}

// Refine adds points after the first pass, where the counts say so. Exactly one of Span and Below
// is set.
type Refine struct {
	Of    drivers.Channel  // the counts that are looked at, singles or coincidences
	Along drivers.AxisName // the axis the points are added on
	// Span and Step are of the grid about the maximum.
	Span, Step unit.Angle
	// Below asks for points until the fitted position's standard uncertainty is no more than this.
	Below  unit.Angle
	AtMost int           // points added in all
	Within time.Duration // bench time that all of them may take, dwells and moves; 0: no bound but AtMost
}

// Schedule bounds a run in time. The instants are worked out when the recipe is accepted.
type Schedule struct {
	NotBefore time.Time // zero: at once
	FinishBy  time.Time // zero: no end. What does not fit before it is left out, closing readings first reserved
	WarmUp    *WarmUp   // nil: none
}

// WarmUp waits, at rest, until every sensor is steady.
type WarmUp struct {
	Steady []Steady
	AtMost time.Duration // then the run holds for a person
}

// Steady says that a sensor's greatest and least value over a time differ by no more than a bound.
type Steady struct {
	Sensor   drivers.DeviceName
	Relative float64 // of the mean, 0.005 is 0.5 %; 0: Absolute counts
	Absolute float64 // in the sensor's unit
	Over     time.Duration
}

// Result is a number that a run is for, and which of its readings make it: said before they are
// taken, because the best of many readings, picked afterwards, is biased high.
type Result struct {
	Kind ResultKind

	// Of an efficiency.
	Trigger   drivers.Channel  // singles
	UnderTest drivers.Channel  // singles
	PlateauOf drivers.AxisName // empty: all light readings, which stand at one place
	HalfWidth unit.Angle       // of the plateau's part that counts
	// By names a setting whose values each give an efficiency of their own, shown one by one and
	// fitted by a line against the setting; empty: one number.
	By drivers.DeviceName

	// Of an efficiency, a peak or a zero: only readings with these axes at these targets count; empty: all.
	At []AxisTarget

	// Of a peak, a zero, a tuning curve, a conjugate map, a delay.
	Of    drivers.Channel  // singles or coincidences
	Along drivers.AxisName // the axis whose profile is fitted; of a conjugate map the arm that searches
	// Against is the axis whose places each give a fitted position: the tilt of a tuning curve, the
	// other arm of a conjugate map.
	Against drivers.AxisName
	Setting drivers.DeviceName // of a delay: the setting that is swept
	Profile string             // of a peak; empty: what fits best to what is known
	Power   drivers.DeviceName // the sensor whose mean is part of the exposure; empty: none
}

// ResultKind is what a result is a number of.
type ResultKind string

// The kinds.
const (
	Efficiency   ResultKind = "efficiency"    // of the detector under test
	Peak         ResultKind = "peak"          // centre, width and height along an axis
	TuningCurve  ResultKind = "tuning_curve"  // fitted angles against tilt, beside phase matching
	ConjugateMap ResultKind = "conjugate_map" // fitted partner angles against the other arm's, beside phase matching
	Drift        ResultKind = "drift"         // what the references say of the night
	Zero         ResultKind = "zero"          // an arm's zero, from both sides of the ring
	Delay        ResultKind = "delay"         // where coincidences are centred against a delay, and the window's width
)

// Then is what is done when something went wrong as often as the recipe allows.
type Then string

// The choices.
const (
	Hold Then = "hold"
	Skip Then = "skip"
	Stop Then = "stop"
	Note Then = "note" // of a reference: it is written, readings are doubted, and the run goes on
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
	// HomeRunUp says that the search turns the axis straight towards HomesAt from wherever it stands,
	// and otherwise only within this of it; nil: anywhere within the soft limits.
	HomeRunUp *unit.Angle
	Verify    *Verify // nil: its zero is not verified while a run goes on
}

// Verify says how often an axis's zero is verified at its reference mark, and how far off it may be.
// It is compulsory for an axis whose position is only counted, because a slip would not show.
type Verify struct {
	Every     time.Duration // bench time between two; 0: at the start, after each interruption and at the end only
	Tolerance unit.Angle
}

// Limits says whether an angle lies within the soft limits.
func (a Axis) Limits(angle unit.Angle) bool { return angle >= a.Low && angle <= a.High }

// Expected is what the source model, with the bench file's declared values, expects to be recorded
// at a place, per second of light. It is what a forecast is made of, and never a result.
type Expected struct {
	CountsHz      map[drivers.Channel]float64 // singles, and coincidences with the accidental ones in them
	AccidentalsHz map[drivers.Channel]float64 // of the coincidence channels
	DarkHz        map[drivers.Channel]float64 // with the pump blocked
	Warnings      []string                    // such as no emission at this tilt
}
