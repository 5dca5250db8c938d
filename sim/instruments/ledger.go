package instruments

import (
	"cmp"
	"encoding/json"
	"io"
	"slices"
	"strings"
	"sync"
	"time"
)

// Kind is what happened. The text is what a line of the ledger file says.
type Kind string

// The kinds, with the fields that each fills beside At, Device and Kind.
const (
	GateOpened  Kind = "gate_opened"  // Gate: tag, set_s
	GateClosed  Kind = "gate_closed"  // Gate: everything; At is the gate's end, whenever it was asked for
	GateAborted Kind = "gate_aborted" // Gate: everything but counts, as far as it came
	GateRead    Kind = "gate_read"    // Gate: tag and the counts as they were answered

	MoveStarted Kind = "move_started" // Axes: true from_deg, and to_deg as planned
	MoveEnded   Kind = "move_ended"   // Axes: true from_deg and to_deg
	MoveStopped Kind = "move_stopped" // the same, when a stopped axis has come to rest
	HomeStarted Kind = "home_started" // Axes: from_deg
	HomeFound   Kind = "home_found"   // Axes: true from_deg and to_deg; the axis knows its zero now
	MarkStarted Kind = "mark_started" // Axes: from_deg; a search that keeps the zero
	MarkFound   Kind = "mark_found"   // Axes: true from_deg and to_deg; the axis stands at its reference mark
	Underway    Kind = "underway"     // between the two, at a few instants: Stand
	Stopped     Kind = "stop_byte"    // a stop byte arrived, whether or not something moved
	Refused     Kind = "refused"      // a line was refused; Text: the line and the reason

	BladeOpened  Kind = "blade_opened" // the blade is fully open now
	BladeClosed  Kind = "blade_closed" // the blade is fully closed now
	BladeStarted Kind = "blade_told"   // Text: open or closed; the blade starts to travel
	ValueSet     Kind = "value_set"    // a setting was told a new value; Value
	SensorRead   Kind = "sensor_read"  // Value: what was answered, in W or Cel

	Restarted Kind = "restarted" // the device lost power; it answers again after its start-up time
	Unplugged Kind = "unplugged"
	Plugged   Kind = "plugged"
	LampOn    Kind = "lamp_on" // Text: the trouble
	LampOff   Kind = "lamp_off"
	Slipped   Kind = "slipped" // Axes: true from_deg and to_deg
	Drifting  Kind = "drifting"
	Hopped    Kind = "mode_hopped"  // Value: nm
	Stalled   Kind = "stalled"      // Axes: from_deg where it stands, to_deg where it should have gone
	Befell    Kind = "befell"       // Text: a trouble that no other record tells of, when it first met something
	Passed    Kind = "passed"       // Text: the kind of a trouble that befell and is over
	Troubled  Kind = "wire_trouble" // Text: the trouble as trouble.Parse reads it; Line: the answer it hit
)

// Record is one thing that truly happened, in bench time.
type Record struct {
	At     time.Time `json:"at"`
	Device string    `json:"device,omitempty"`
	Kind   Kind      `json:"kind"`

	Gate  *GateTruth      `json:"gate,omitempty"`
	Axes  map[string]Span `json:"axes,omitempty"` // by the axis's name in the bench file; bench degrees
	Value float64         `json:"value,omitempty"`
	// Stand is where every axis of the bench truly is, bench degrees: in all records of motion.
	Stand map[string]float64 `json:"stand,omitempty"`
	Text  string             `json:"text,omitempty"`
	Line  string             `json:"line,omitempty"`
}

// Span is where an axis truly went, in bench degrees.
type Span struct {
	FromDeg float64 `json:"from_deg"`
	ToDeg   float64 `json:"to_deg"`
}

// GateTruth is what truly happened during one gate.
type GateTruth struct {
	Tag      uint64    `json:"tag"` // gates since power-on, this one included
	Opened   time.Time `json:"opened"`
	SetS     float64   `json:"set_s"`            // as the counter was told
	GateS    float64   `json:"gate_s"`           // as long as it truly was, or came to
	Counts   []uint64  `json:"counts,omitempty"` // in the order of the counter's channels
	Overflow bool      `json:"overflow,omitempty"`
	Doubtful bool      `json:"doubtful,omitempty"`

	Axes map[string]Range `json:"axes,omitempty"` // true angles during the gate, bench degrees
	Seen *Seen            `json:"seen,omitempty"` // only where it is said to be filled
}

// Seen is the light during a gate.
type Seen struct {
	PumpOpenShare float64    `json:"pump_open_share"` // mean share of the pump that passed its shutter
	PumpMeanW     float64    `json:"pump_mean_w"`     // before the shutter
	LampShare     float64    `json:"lamp_share"`      // share of the gate during which the lamp was on
	Signal        LightTruth `json:"signal"`          // at the detector, behind its shutter
	Idler         LightTruth `json:"idler"`
}

// Range is the least and the greatest true angle.
type Range struct {
	LowDeg  float64 `json:"low_deg"`
	HighDeg float64 `json:"high_deg"`
}

// LightTruth is what one detector saw during a gate.
type LightTruth struct {
	OpenShare float64 `json:"open_share"` // mean opening of its shutter; 1 without one
	LampShare float64 `json:"lamp_share"` // share of the gate with the lamp on and its shutter not closed
	MeanHz    float64 `json:"mean_hz"`    // true rate of detection events, before dead time
	PeakHz    float64 `json:"peak_hz"`
}

// Ledger keeps what truly happened, ordered in time. It may be used by several goroutines.
type Ledger struct {
	mu      sync.Mutex
	records []Record
	forgets bool
	out     *json.Encoder
	err     error
}

// NewLedger returns an empty ledger. If out is not nil, each record is also written to it, one
// line of JSON each, as it is made.
func NewLedger(out io.Writer) *Ledger {
	l := &Ledger{}
	if out != nil {
		l.out = json.NewEncoder(out)
	}
	return l
}

// WriteOnly returns a ledger that keeps nothing, for worlds that may last for months: each record is
// written to out, if that is not nil, and forgotten. Records finds none.
func WriteOnly(out io.Writer) *Ledger {
	l := NewLedger(out)
	l.forgets = true
	return l
}

func (l *Ledger) add(r Record) {
	r.At = r.At.Round(0) // what is written reads back the same
	if r.Gate != nil {
		g := *r.Gate
		g.Opened = g.Opened.Round(0)
		r.Gate = &g
	}
	l.mu.Lock()
	defer l.mu.Unlock()
	if !l.forgets {
		l.records = append(l.records, r)
	}
	if l.out != nil && l.err == nil {
		l.err = l.out.Encode(r)
	}
}

// Records returns everything so far, ordered by time, and at one instant by device: which of two
// devices asked at the same instant was heard first means nothing. What ended without anybody asking since (a gate, a motion)
// is not in it before World.Settle.
func (l *Ledger) Records() []Record {
	l.mu.Lock()
	defer l.mu.Unlock()
	records := slices.Clone(l.records)
	slices.SortStableFunc(records, func(a, b Record) int {
		return cmp.Or(a.At.Compare(b.At), strings.Compare(a.Device, b.Device))
	})
	return records
}

// Err is the first error of writing to the ledger's file, after which nothing more was written.
func (l *Ledger) Err() error {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.err
}
