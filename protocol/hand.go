package protocol

import "gemel/protocol/unit"

// HandRequest asks for one act of hand work on a bench that no run moves. The first act opens a
// session, and its reply names it; every later one brings that name. A session ends by leave, by
// a stop of the run "-", or when nothing was asked for a while, always in the rest state.
type HandRequest struct {
	Act       HandAct     `json:"act"`
	Session   string      `json:"session,omitempty"`
	Who       string      `json:"who"`
	Axis      string      `json:"axis,omitempty"`    // move, home
	To        *unit.Angle `json:"to_deg,omitempty"`  // move: one of to_deg and by_deg
	By        *unit.Angle `json:"by_deg,omitempty"`  // move: from where it was sent, or stands
	Shutter   string      `json:"shutter,omitempty"` // "pump", "detectors", a detector or a shutter
	Open      *bool       `json:"open,omitempty"`
	Setting   string      `json:"setting,omitempty"`
	Value     *float64    `json:"value,omitempty"`
	Unit      string      `json:"unit,omitempty"`
	Gate      Seconds     `json:"gate_s,omitempty"` // look
	Live      bool        `json:"live,omitempty"`   // look: one of many, written together when they end
	ExpiresAt *Time       `json:"expires_at,omitempty"`
}

// HandAct is what a hand does.
type HandAct string

// The acts. Where, Rest, Release, Stay, Leave and closing a shutter need no arming.
const (
	HandLook    HandAct = "look"    // count one gate
	HandWhere   HandAct = "where"   // ask every device how it stands
	HandMove    HandAct = "move"    // one axis
	HandShutter HandAct = "shutter" // the pump's, or detectors'
	HandSet     HandAct = "set"     // a setting
	HandHome    HandAct = "home"    // one axis searches its zero, with somebody there
	HandRelease HandAct = "release" // let go of all lines, at rest, for another program
	HandTake    HandAct = "take"    // take them again: identity, zero and place are checked
	HandRest    HandAct = "rest"    // everything closed and still; interrupts what goes on
	HandStay    HandAct = "stay"    // nothing, but the session goes on
	HandLeave   HandAct = "leave"   // the end of the session, at rest; interrupts what goes on
)

// HandActs lists them all.
func HandActs() []HandAct {
	return []HandAct{HandLook, HandWhere, HandMove, HandShutter, HandSet, HandHome, HandRelease, HandTake, HandRest, HandStay, HandLeave}
}

// HandReply tells how an act went, and how the bench stands as far as that is known: what was not
// asked about is as it was last.
type HandReply struct {
	Act      HandAct       `json:"act"`
	Session  string        `json:"session"`
	Text     string        `json:"text"`     // one sentence for a person
	Recorded bool          `json:"recorded"` // false: not written down, for want of room, as one of many looks, or because it touched nothing
	Lease    Seconds       `json:"lease_s"`  // the session ends when nothing is asked for so long
	LetGo    bool          `json:"let_go"`   // the lines are another program's
	Axes     []HandAxis    `json:"axes"`
	Shutters []HandBlade   `json:"shutters"` // the pump's first
	Settings []HandValue   `json:"settings"`
	Sensors  []HandValue   `json:"sensors"`
	Look     *HandLookedAt `json:"look"`  // null but after a look
	Moved    []HandMoved   `json:"moved"` // after take: what stands elsewhere than when it was let go
}

// HandAxis is where one axis stands.
type HandAxis struct {
	Axis    string      `json:"axis"`
	Angle   *unit.Angle `json:"angle_deg"` // null: not known
	Low     unit.Angle  `json:"low_deg"`   // soft limits
	High    unit.Angle  `json:"high_deg"`
	Proof   string      `json:"proof"`   // proved or reported
	Trouble string      `json:"trouble"` // why the angle is not known
}

// HandBlade is how one shutter stands.
type HandBlade struct {
	Shutter string `json:"shutter"`
	Guards  string `json:"guards"` // pump, or the detectors behind it
	Open    bool   `json:"open"`
	Trouble string `json:"trouble"` // why that is not known
}

// HandValue is a setting, or what a sensor says.
type HandValue struct {
	Name    string   `json:"name"`
	Value   *float64 `json:"value"` // null: not known
	Unit    string   `json:"unit"`
	Trouble string   `json:"trouble"`
}

// HandLookedAt is one gate's counts.
type HandLookedAt struct {
	Gate   Seconds     `json:"gate_s"` // as the counter measured it
	Doubt  string      `json:"doubt"`  // what speaks against these counts; empty: nothing
	Rates  []HandRate  `json:"rates"`
	Ratios []HandRatio `json:"ratios"` // coincidences over singles, of each channel with each of its arms
}

// HandRate is one channel's counts, and as a rate.
type HandRate struct {
	Channel     string   `json:"channel"`
	Counts      uint64   `json:"counts"`
	Rate        float64  `json:"rate_hz"`
	Accidentals *float64 `json:"accidentals_hz"` // of a coincidence channel: rate x rate x window; else null
}

// HandRatio is coincidences over singles, as counted: nothing is corrected.
type HandRatio struct {
	Channel string   `json:"channel"`
	Over    string   `json:"over"`
	Ratio   *float64 `json:"ratio"` // null without singles
	U       *float64 `json:"u"`     // of counting alone
}

// HandMoved is what another program changed while the lines were let go.
type HandMoved struct {
	Name   string  `json:"name"`
	Before float64 `json:"before"`
	After  float64 `json:"after"`
	Unit   string  `json:"unit"`
}
