// Package protocol is the contract with other lab services: subjects, messages and their JSON.
// The bodies defined here are written once, into the logbook's journal, and those bytes are what
// NATS carries: nobody re-encodes them. Field names carry the unit. Times are RFC 3339 in UTC
// with nine digits, so that they sort as text.
//
// asyncapi.yaml and the schemas beside this file say the same in the open standards' words; a
// test holds types, schemas and what is really sent together.
package protocol

import (
	"bytes"
	"encoding/json"
	"fmt"
	"regexp"
	"strings"
	"time"

	"gemel/protocol/unit"
)

// RunID names a run: unique everywhere, sorting by time, one NATS token.
type RunID string

// BenchRun is the run name under which the events of the bench itself are kept.
const BenchRun RunID = "-"

// State of a run. The last three are final for ever.
type State string

// The states.
const (
	Queued   State = "queued"
	Running  State = "running"
	Holding  State = "holding"
	Finished State = "finished"
	Stopped  State = "stopped"
	Failed   State = "failed"
)

// Final says whether nothing can change the state any more.
func (s State) Final() bool { return s == Finished || s == Stopped || s == Failed }

// Cause is a reason for holding. A run holds while its set of causes is not empty.
type Cause string

// The causes. A resume clears Operator, Trouble and Restart; the others clear themselves when
// the bench is well.
const (
	ByOperator Cause = "operator"
	ByGuard    Cause = "guard"
	ByTrouble  Cause = "trouble"
	ByLight    Cause = "light"
	ByStorage  Cause = "storage"
	ByRestart  Cause = "restart"
)

// EntryKind says what a journal entry's body is, and on which subject it is published.
type EntryKind string

// The kinds of entries.
const (
	ReadingEntry EntryKind = "reading"
	PointEntry   EntryKind = "point"
	EventEntry   EntryKind = "event"
	ResultEntry  EntryKind = "result"
)

// Entry is one entry of the journal: per run, Sequence is gapless from 1. Body is final.
type Entry struct {
	Run      RunID
	Sequence int64
	Kind     EntryKind
	Body     json.RawMessage
}

// ID is the message id under which an entry is published, "<run>.<sequence>".
func (e Entry) ID() string { return fmt.Sprintf("%s.%d", e.Run, e.Sequence) }

// Schema names and versions of the bodies. A field may be added within a version; nothing is
// renamed or removed.
const (
	ReadingSchema = "gemel.reading.v1"
	PointSchema   = "gemel.point.v1"
	EventSchema   = "gemel.event.v1"
	ResultSchema  = "gemel.result.v1"
	BeatSchema    = "gemel.beat.v1"
)

// Head is what every journal body begins with.
type Head struct {
	Schema   string `json:"schema"`
	Bench    string `json:"bench"`
	Run      RunID  `json:"run"`
	Sequence int64  `json:"sequence"`
	At       Time   `json:"at"` // when the body was made, bench time
}

// ReadingKind says what a reading is for.
type ReadingKind string

// The kinds of readings.
const (
	Light      ReadingKind = "light"
	Dark       ReadingKind = "dark"       // shutter closed
	Background ReadingKind = "background" // pump on, phase matching spoiled
	Reference  ReadingKind = "reference"  // a return to known points to see drift
	Check      ReadingKind = "check"      // a short look at the light before a dwell
)

// MostBody is the greatest body of an entry, in bytes: what is larger no broker of ours carries, and
// everything behind it would wait for ever.
const MostBody = 4<<20 - 4096

// Reading is the counts of one completed dwell, with what was proved before and after.
type Reading struct {
	Head
	Kind      ReadingKind  `json:"kind"`
	Point     *int         `json:"point"` // index in the run's list of points, from 0; null where the kind has none
	Visit     *int         `json:"visit"` // from 1; null where the kind has none
	Accepted  bool         `json:"accepted"`
	Reason    string       `json:"reason"` // why it was set aside; empty when accepted
	StartedAt Time         `json:"started_at"`
	EndedAt   Time         `json:"ended_at"`
	GateSet   Seconds      `json:"gate_set_s"` // summed over the slices
	Gate      Seconds      `json:"gate_s"`     // as the counter measured it, summed
	Angles    []Angle      `json:"angles"`
	Settings  []Setting    `json:"settings"`
	Sensors   []Sensor     `json:"sensors"`
	Counts    []Count      `json:"counts"` // summed over the slices; a tag channel shows its last value
	Slices    []Slice      `json:"slices"`
	Scatter   *Scatter     `json:"scatter"`               // null with fewer than two slices
	Glance    *Slice       `json:"glance"`                // the short look at the light before the dwell; not in the counts
	LostGates int          `json:"lost_gates"`            // gates that were opened in this dwell and whose counts are not here
	Attempt   int          `json:"attempt"`               // 1, and one more for each that failed since it was given up, or since a person or a restart let the run go on
	Reference *ReferenceOf `json:"reference,omitempty"`   // of the kind reference: which of the set's readings it is
	Tag       string       `json:"tag_channel,omitempty"` // the channel that numbers gates, and whose counts are no amount; empty: none, or not told
	Simulated *int         `json:"simulated"`
}

// ReferenceOf says which reading of which set of references one is.
type ReferenceOf struct {
	Set    int    `json:"set"`    // from 1
	Place  int    `json:"place"`  // in the plan's list of places, from 0
	Places int    `json:"places"` // how many readings make a set
	Arm    string `json:"arm"`    // whose flank it is; empty: the top, which all arms share
	On     string `json:"on"`     // low_flank, top or high_flank
}

// Angle is where one axis was told to be and where it stood around the dwell, degrees.
type Angle struct {
	Axis   string     `json:"axis"`
	Target unit.Angle `json:"target_deg"`
	Before unit.Angle `json:"before_deg"`
	After  unit.Angle `json:"after_deg"`
	Proof  string     `json:"proof"` // proved or reported
}

// Setting is one setting around the dwell, in its unit.
type Setting struct {
	Name   string  `json:"name"`
	Target float64 `json:"target"`
	Before float64 `json:"before"`
	After  float64 `json:"after"`
	Unit   string  `json:"unit"`
}

// Sensor sums up one sensor over the dwell.
type Sensor struct {
	Sensor  string  `json:"sensor"`
	Minimum float64 `json:"minimum"`
	Mean    float64 `json:"mean"`
	Maximum float64 `json:"maximum"`
	Samples int     `json:"samples"`
	Unit    string  `json:"unit"`
}

// Count is one channel's counts.
type Count struct {
	Channel string `json:"channel"`
	Counts  uint64 `json:"counts"`
}

// Slice is one gate of a dwell.
type Slice struct {
	GateSet Seconds `json:"gate_set_s"`
	Gate    Seconds `json:"gate_s"`
	Counts  []Count `json:"counts"`
	Raw     string  `json:"raw"` // the instrument's answer as received
}

// Scatter is the dispersion test over the slices of the singles channel that scatters most.
type Scatter struct {
	Channel   string  `json:"channel"`
	ChiSquare float64 `json:"chi_square"`
	Freedom   int     `json:"degrees_of_freedom"`
	P         float64 `json:"p_two_sided"`
}

// Points tells which points a run has decided on, in the order of their indices. A long list
// comes in several entries.
type Points struct {
	Head
	Grounds string  `json:"grounds"` // why these points: "sweep", or what a refinement saw
	Points  []Point `json:"points"`
	// Stand is where the axes stood, when the run began, that the sweep does not move. They are
	// kept there, and put back there after a background or a search for the zero.
	Stand []AxisTarget `json:"stand,omitempty"`
	// Refined is the number, from 1, of the refinement that added these points after the first pass;
	// 0: they are the sweep's. A refinement without points is the last.
	Refined int `json:"refined,omitempty"`
	// Earlier are the values that the points take from earlier results, in the recipe's order.
	Earlier []EarlierValue `json:"earlier,omitempty"`
}

// EarlierValue is a value taken from an earlier result on this bench. Exactly one of Axis and
// Setting is set.
type EarlierValue struct {
	Kind     string      `json:"kind"` // of the result
	Axis     string      `json:"axis,omitempty"`
	Setting  string      `json:"setting,omitempty"`
	From     string      `json:"from"` // the title asked for
	Run      RunID       `json:"run"`
	Sequence int64       `json:"sequence"` // the result's entry in that run
	Angle    *unit.Angle `json:"angle_deg,omitempty"`
	Value    *float64    `json:"value,omitempty"` // in the setting's unit
	U        float64     `json:"u"`               // standard uncertainty, degrees or the setting's unit
}

// Point is one set of targets.
type Point struct {
	Point    int            `json:"point"`
	Axes     []AxisTarget   `json:"axes"`
	Settings []SettingValue `json:"settings,omitempty"`
	Empty    string         `json:"empty,omitempty"` // why nobody goes there
}

// AxisTarget is where an axis is to go.
type AxisTarget struct {
	Axis   string     `json:"axis"`
	Target unit.Angle `json:"target_deg"`
}

// SettingValue is what a setting is to have.
type SettingValue struct {
	Name   string  `json:"name"`
	Target float64 `json:"target"`
	Unit   string  `json:"unit"`
}

// EventKind is what happened.
type EventKind string

// The kinds of events.
const (
	Began       EventKind = "began"
	Held        EventKind = "held"
	WentOn      EventKind = "went_on"
	HomedEvent  EventKind = "homed"
	GuardBroken EventKind = "guard_broken"
	GuardMended EventKind = "guard_mended"
	SetAside    EventKind = "set_aside"
	TakenAgain  EventKind = "taken_again"
	Doubted     EventKind = "doubted"
	Interrupted EventKind = "interrupted"
	Trouble     EventKind = "trouble"
	OperatorDid EventKind = "operator"
	Ended       EventKind = "ended"
)

// Event is something that happened to a run, or to the bench.
type Event struct {
	Head
	Kind   EventKind      `json:"kind"`
	Text   string         `json:"text"`   // one sentence for a person
	State  State          `json:"state"`  // the run's state after it; empty for bench events
	Causes []Cause        `json:"causes"` // why it holds; empty otherwise
	Detail map[string]any `json:"detail"` // what a program may want: names, numbers
}

// Beat is the heartbeat, once a second.
type Beat struct {
	Schema string `json:"schema"`
	At     Time   `json:"at"` // wall time
	Status
}

// Status is the live state of a bench, as `status --json` prints it.
type Status struct {
	Bench            string       `json:"bench"`
	Version          string       `json:"version"`
	State            State        `json:"state"` // of the current run; "" when the bench is idle
	Causes           []Cause      `json:"causes"`
	Reason           string       `json:"reason"`
	Run              RunID        `json:"run"`
	Title            string       `json:"title"`
	ReadingsAccepted int          `json:"readings_accepted"`
	ReadingsPlanned  int          `json:"readings_planned"`
	ReadingsSetAside int          `json:"readings_set_aside"`
	TimeLeft         *Seconds     `json:"time_left_s"` // null while holding, or unknown
	EndedAt          *Time        `json:"ended_at"`    // null while the run goes on
	Queue            []RunID      `json:"queue"`
	Waiting          []WaitingRun `json:"waiting"` // the same with titles
	Armed            bool         `json:"armed"`
	Simulated        *int         `json:"simulated"` // null on a real bench, else the clock factor
	Behind           int64        `json:"entries_unpublished"`
	Hand             string       `json:"hand"`                // who has the bench under their hand; empty: nobody
	HoldingSince     *Time        `json:"holding_since"`       // null where the run does not hold, or that is not known
	GivesUpAt        *Time        `json:"gives_up_at"`         // when the hold fails the run; null: never by itself
	LooksAgain       *Seconds     `json:"looks_again_every_s"` // null: nothing but a person ends the hold
	BenchTrouble     string       `json:"bench_trouble"`       // outside any run, since the daemon's start; empty: none, or a run went over it
	BenchTroubleAt   *Time        `json:"bench_trouble_at"`
	Unpublished      string       `json:"unpublished_because"` // why entries wait; empty: nothing is wrong
}

// StartRequest asks for a run. Exactly one of Recipe and RecipeName is set.
type StartRequest struct {
	Recipe     string `json:"recipe,omitempty"`
	RecipeName string `json:"recipe_name,omitempty"`
	Key        string `json:"key"` // asked twice with one key: one run
	Who        string `json:"who"`
	ExpiresAt  *Time  `json:"expires_at,omitempty"`
}

// StartReply names the run that was queued.
type StartReply struct {
	Run RunID `json:"run"`
}

// RunRequest asks to stop, hold or resume the run it names.
type RunRequest struct {
	Run       RunID  `json:"run"`
	Who       string `json:"who"`
	ExpiresAt *Time  `json:"expires_at,omitempty"`
}

// RunReply is the run's state after the request. Recorded is false when it was done but could
// not be written down (a full disk). Rest says what of the rest state was not reached; it is empty
// where all was, and for a run that goes on.
type RunReply struct {
	Run      RunID   `json:"run"`
	State    State   `json:"state"`
	Causes   []Cause `json:"causes"`
	Recorded bool    `json:"recorded"`
	Rest     string  `json:"rest,omitempty"`
}

// Finding is one thing wrong with a file or a request.
type Finding struct {
	File  string `json:"file"`
	Line  int    `json:"line"`
	Col   int    `json:"column"`
	Key   string `json:"key"`
	Found string `json:"found"`
	Want  string `json:"want"`
}

// String prints the finding as `file:line:column: key: found; want …`.
func (f Finding) String() string {
	var b strings.Builder
	if f.File != "" {
		b.WriteString(f.File)
		if f.Line > 0 {
			fmt.Fprintf(&b, ":%d:%d", f.Line, f.Col)
		}
		b.WriteString(": ")
	}
	if f.Key != "" {
		b.WriteString(f.Key + ": ")
	}
	b.WriteString(f.Found)
	if f.Want != "" {
		b.WriteString("; want " + f.Want)
	}
	return b.String()
}

// Problem is the body of every refused request.
type Problem struct {
	Error    string    `json:"error"`
	Findings []Finding `json:"findings"`
}

var token = regexp.MustCompile(`^[A-Za-z0-9_-]{1,64}$`)

// IsToken says whether a name may stand in a subject: 1 to 64 letters, digits, "-" and "_".
func IsToken(name string) bool { return token.MatchString(name) }

// Subject is where an entry of a bench's journal is published.
func Subject(bench string, kind EntryKind, run RunID) string {
	return "gemel." + bench + "." + string(kind) + "." + string(run)
}

// BeatSubject carries the heartbeat.
func BeatSubject(bench string) string { return "gemel." + bench + ".beat" }

// DoSubject takes control requests; verb is start, stop, hold, resume, status …
func DoSubject(bench, verb string) string { return "gemel." + bench + ".do." + verb }

// Stream is the name of a bench's JetStream stream.
func Stream(bench string) string { return "GEMEL_" + bench }

// StreamSubjects lists what the stream takes: never "gemel.<bench>.>", which would swallow
// requests and answer them with storage acknowledgements.
func StreamSubjects(bench string) []string {
	var s []string
	for _, k := range []EntryKind{ReadingEntry, PointEntry, EventEntry, ResultEntry} {
		s = append(s, "gemel."+bench+"."+string(k)+".*")
	}
	return s
}

// timeLayout has nine digits always, so that times sort as text.
const timeLayout = "2006-01-02T15:04:05.000000000Z"

// Time is an instant, written as RFC 3339 in UTC with nine digits.
type Time struct{ time.Time }

func (t Time) String() string { return t.UTC().Format(timeLayout) }

// MarshalJSON writes the fixed layout; the zero time is null.
func (t Time) MarshalJSON() ([]byte, error) {
	if t.IsZero() {
		return []byte("null"), nil
	}
	return json.Marshal(t.String())
}

// UnmarshalJSON reads any RFC 3339 time from the year 1 to 9999 in UTC: outside them nothing sorts as
// text. The first instant of the year 1 is refused too; it would be taken for no time.
func (t *Time) UnmarshalJSON(b []byte) error {
	if bytes.Equal(b, []byte("null")) {
		*t = Time{}
		return nil
	}
	var s string
	if err := json.Unmarshal(b, &s); err != nil {
		return err
	}
	v, err := time.Parse(time.RFC3339Nano, s)
	if v = v.UTC(); err != nil || v.IsZero() || v.Year() < 1 || v.Year() > 9999 {
		return fmt.Errorf("time %.80q; want RFC 3339 such as \"2031-02-03T04:05:06.000000000Z\"", s)
	}
	*t = Time{v}
	return nil
}

// Seconds is a duration, written as an exact decimal number of seconds.
type Seconds time.Duration

// Duration returns s as a time.Duration.
func (s Seconds) Duration() time.Duration { return time.Duration(s) }

// MarshalJSON writes seconds with as many decimals as needed, at most nine.
func (s Seconds) MarshalJSON() ([]byte, error) {
	return []byte(unit.FormatSeconds(int64(s))), nil
}

// UnmarshalJSON reads a decimal number of seconds, to the nanosecond.
func (s *Seconds) UnmarshalJSON(b []byte) error {
	d, err := unit.ParseDuration(string(b) + " s")
	if err != nil {
		return err
	}
	*s = Seconds(d)
	return nil
}
