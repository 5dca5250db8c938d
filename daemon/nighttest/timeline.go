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
)

// Facts are what the judge must know of the bench and of what was asked for.
type Facts struct {
	Channels  []string // of the counter, in order
	Tag       string
	Tolerance map[string]float64 // by axis, degrees: what a proved angle may be off, detection limit included
	Pump      string             // device name of the pump shutter
	Detectors []DetectorFact
	Controls  []string // the names of the stages' devices
	// Visits and Darks are what the plan asks for; a finished run has them all, or says which it gave up.
	Visits   int
	MinDarks int
	// CaughtUp says that the courier was given the time to publish everything.
	CaughtUp bool
}

// DetectorFact is one detector of the judge's interest.
type DetectorFact struct {
	Name      string // "signal" or "idler": which of the two lights of the ledger it sees
	Channel   string
	TripHz    float64
	Protector string // device name; empty: none
}

// Merge brings the parts into one time line. Where two parts say the same instant, the world comes
// first, then the journal, then the stream: an effect is never before its cause.
func Merge(parts ...[]Moment) []Moment {
	all := slices.Concat(parts...)
	rank := func(m Moment) int {
		switch {
		case m.World != nil:
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
