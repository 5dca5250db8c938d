// Package nighttest runs whole nights under virtual time and judges them. A night is a bench
// file, a recipe, a list of troubles, operators' requests and kills; it runs the real keeper,
// engine, drivers and SQLite file against virtual instruments, in one bubble. What happened is
// one merged time line of world, journal, stream and process, and one pure function says what is
// wrong with it. The same function judges killed processes and pseudo-terminal runs.
package nighttest

import (
	"cmp"
	"slices"
	"time"

	"gemel/protocol"
	"gemel/scan"
	"gemel/sim/instruments"
)

// Moment is one thing on the time line. Exactly one of the pointers is set.
type Moment struct {
	At      time.Time // bench time
	World   *instruments.Record
	Journal *protocol.Entry // became durable
	Stream  *protocol.Entry // arrived in the stream, as the stream has it
	Process *Process
}

// Process is what the program, or somebody with it, did.
type Process struct {
	What ProcessKind
	Run  protocol.RunID
	Text string
}

// ProcessKind is what happened to the program.
type ProcessKind string

// The kinds.
const (
	Started      ProcessKind = "started"
	Killed       ProcessKind = "killed" // without a word
	StopAnswered ProcessKind = "stop answered"
	HoldAnswered ProcessKind = "hold answered"
	CameOlder    ProcessKind = "came older" // the broker: it lost its last messages, as many as Text says
	DiskFull     ProcessKind = "disk full"
	DiskFree     ProcessKind = "disk free"
)

// Facts are what the judge must know of the bench and of what was asked for.
type Facts struct {
	Channels  []string // of the counter, in order
	Tag       string
	Tolerance map[string]float64 // by axis, degrees: what a proved angle may be off, detection limit included
	Pump      string             // device name of the pump shutter
	Counter   string
	Detectors []DetectorFact
	Controls  []string // the names of the stages' devices
	Axes      []scan.Axis
	KeepOuts  []scan.KeepOut
	// Controller is the device that turns an axis.
	Controller map[string]string
	// Plans are what each run was asked for. A finished run did all of it, or says what it gave up.
	Plans map[protocol.RunID]scan.Plan
	// Visits is how many the last of them makes without a refinement.
	Visits int
	// HomeOrder is by controller; Unattended ones may search with nobody there.
	HomeOrder  map[string][]string
	Unattended map[string]bool
	Settings   map[string]Scale
	Sensors    map[string]Scale
	// Watch is how long light at a detector may go unseen; 0: the longest gate of the plan.
	Watch time.Duration
	// CaughtUp says that the courier was given the time to publish everything.
	CaughtUp bool
}

// Scale says where the ledger has what a reading calls by a name, and by what a reading's value is
// multiplied to be the ledger's.
type Scale struct {
	Device    string
	Quantity  string // of a sensor: W or Cel
	Factor    float64
	Tolerance float64 // in the reading's unit
}

// DetectorFact is one detector of the judge's interest.
type DetectorFact struct {
	Name      string // "signal" or "idler": which of the two lights of the ledger it sees
	Channel   string
	TripHz    float64
	FloorHz   float64
	Protector string // device name; empty: none
}

// Merge brings the parts into one time line. Where two parts say the same instant, the world comes
// first, then the journal, then the stream: an effect is never before its cause.
func Merge(parts ...[]Moment) []Moment {
	all := slices.Concat(parts...)
	rank := func(m Moment) int {
		switch {
		case m.World != nil, m.Process != nil && m.Process.What == CameOlder:
			return 0
		case m.Journal != nil:
			return 1
		case m.Stream != nil:
			return 2
		}
		return 3
	}
	slices.SortStableFunc(all, func(a, b Moment) int {
		return cmp.Or(a.At.Compare(b.At), cmp.Compare(rank(a), rank(b)))
	})
	return all
}

// World turns a ledger into moments.
func World(records []instruments.Record) []Moment {
	out := make([]Moment, len(records))
	for i := range records {
		out[i] = Moment{At: records[i].At, World: &records[i]}
	}
	return out
}
