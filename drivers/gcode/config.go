package gcode

import (
	"time"

	"gemel/drivers"
	"gemel/drivers/custom"
)

// Config describes a controller that takes RS-274 words for its rotary axes. What the standard
// leaves open is declared as questions of package custom.
type Config struct {
	Name     drivers.DeviceName
	Pace     drivers.Pace
	Repeat   *int
	Identity string // see custom.Dialect

	Axes     []custom.Axis // Letter A, B or C; Speed is needed, for it becomes the feed
	Decimals *int          // of an angle; nil takes 4
	FeedUnit string        // "deg/min" (the default, and the standard's) or "deg/s"

	EndsWith       string
	AnswersEndWith string
	Echo           bool

	Ack      string // pattern of the answer to a line that was taken; needed
	AckMeans string // "accepted" (the default) or "arrived"
	Nak      string // pattern of a refusal, with an optional group reason
	Unasked  []custom.Unasked

	Position custom.Ask // the groups are the axes' letters; needed
	AtRest   custom.Ask // needed
	Stop     custom.Ask // needed
	Homed    custom.Ask // Send empty: the controller cannot tell
	Home     custom.Ask // Send empty: it has no reference search
	Mark     custom.Ask // Send empty: it cannot search its reference mark and keep the zero
	AskWho   custom.Ask // Send empty: it has no identity

	// Start lines are sent by each Connect and acknowledged; nil takes "G21 G90 G94", "G54",
	// "G92.1".
	Start []string

	PollEvery, Margin, MoveWithin, HomeWithin time.Duration // see custom.StageConfig
}
