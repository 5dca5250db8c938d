package protocol

// ForecastSchema names the body of a forecast.
const ForecastSchema = "gemel.forecast.v1"

// ForecastRequest asks what a recipe would do. Exactly one of Recipe and RecipeName is set. Nothing
// moves for it, so that no arming is needed and a run may be going on.
type ForecastRequest struct {
	Recipe     string `json:"recipe,omitempty"`
	RecipeName string `json:"recipe_name,omitempty"`
	Aim        string `json:"aim,omitempty"` // the standard uncertainty that is wanted, such as "0.5 %" or "0.01 deg"
	Who        string `json:"who,omitempty"`
	ExpiresAt  *Time  `json:"expires_at,omitempty"`
}

// Forecast is what a recipe will do, how long it takes and what it will be worth. The seconds from
// waiting to overhead add up to the duration.
type Forecast struct {
	Schema   string `json:"schema"`
	Bench    string `json:"bench"`
	Title    string `json:"title"`
	Sentence string `json:"sentence"`

	BeginsAt   Time    `json:"begins_at"`
	FinishesAt Time    `json:"finishes_at"`
	Duration   Seconds `json:"duration_s"`
	Waiting    Seconds `json:"waiting_s"`  // for not_before and the shortest warm-up
	Moving     Seconds `json:"moving_s"`   // axes on their way
	Settling   Seconds `json:"settling_s"` // axes, shutters, detectors and settings coming to rest
	Counting   Seconds `json:"counting_s"` // gates of light readings
	Beside     Seconds `json:"beside_s"`   // gates of darks, backgrounds and references
	Overhead   Seconds `json:"overhead_s"` // questions on the lines, glances, entries written

	Points      int `json:"points"`
	PointsEmpty int `json:"points_empty"` // of them: nobody goes there
	PointsAdded int `json:"points_added"` // by a refinement, as far as it can be foreseen
	Visits      int `json:"visits"`
	LeftOut     int `json:"visits_left_out"` // by the schedule's end
	Darks       int `json:"darks"`
	Backgrounds int `json:"backgrounds"`
	References  int `json:"references"` // readings, not sets

	// Of the first result, in its unit: what it will be known to, of which no amount of time takes
	// the floor away. Null where they are not forecast.
	Uncertainty *float64         `json:"expected_uncertainty"`
	Floor       *float64         `json:"floor"`
	Results     []ForecastResult `json:"results"`
	Aim         *ForecastAim     `json:"aim"` // null: none was given

	Provisional   bool     `json:"provisional"` // values of earlier results are missing, so that points stand elsewhere in the end
	RatesFrom     string   `json:"rates_from"`
	RatesAt       int      `json:"rates_evaluated"`     // places at which rates were worked out; others are interpolated
	Interpolation float64  `json:"interpolation_error"` // the largest relative one that was found
	OverheadFrom  string   `json:"overhead_from"`
	Warnings      []string `json:"warnings"`

	PointList        []ForecastPoint `json:"point_list"`          // null where it is left out
	PointListLeftOut string          `json:"point_list_left_out"` // why; empty otherwise
}

// ForecastPoint is one point. Rates are per second of light, dark counts in them.
type ForecastPoint struct {
	Point
	Added        bool               `json:"added"`        // by a refinement
	Visits       int                `json:"visits"`       // 0: left out
	Begins       Seconds            `json:"begins_s"`     // of its first reading, since the start
	Gate         Seconds            `json:"gate_s"`       // of one visit, on the average
	Singles      map[string]float64 `json:"singles"`      // counts of one visit, by channel
	Coincidences map[string]float64 `json:"coincidences"` // accidental ones in them
	Accidentals  map[string]float64 `json:"accidentals"`
}

// ForecastResult is what one of the recipe's results will be worth.
type ForecastResult struct {
	Kind        string          `json:"kind"`
	Unit        string          `json:"unit"`
	Value       *float64        `json:"expected_value"` // null: not forecast, see because
	Uncertainty *float64        `json:"expected_uncertainty"`
	Counting    *float64        `json:"from_counting"` // what more time reduces
	Floor       *float64        `json:"floor"`         // what it does not
	FloorFrom   []ForecastShare `json:"floor_from"`    // largest first
	Because     []string        `json:"because"`
}

// ForecastShare is one contribution to a floor.
type ForecastShare struct {
	Quantity     string  `json:"quantity"`
	Contribution float64 `json:"contribution"` // in the result's unit
}

// ForecastAim is what has to be done for an uncertainty that is wanted.
type ForecastAim struct {
	Text        string   `json:"asked"`
	Wanted      float64  `json:"wanted_uncertainty"` // of the first result, in its unit
	Reachable   bool     `json:"reachable"`
	Because     string   `json:"because"`
	Dwell       *Seconds `json:"dwell_s"`              // of each light reading, or its longest time; null: unreachable
	Heralds     *uint64  `json:"heralds"`              // where dwells end on counts
	Beside      *Seconds `json:"beside_dwell_s"`       // of each background, or of each dark where there is none
	BestShare   *float64 `json:"best_beside_share"`    // of the counting time that they should take, for the least uncertainty
	Share       *float64 `json:"beside_share"`         // that they take now
	Duration    *Seconds `json:"duration_s"`           // of the whole run then
	Uncertainty *float64 `json:"expected_uncertainty"` // then
}
