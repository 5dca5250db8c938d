package report

import (
	"math"

	"gemel/scan/estimate"
)

// EndOfLegs is how far a budget's last leg ends from where the first begins.
func EndOfLegs(rows []estimate.Row) float64 {
	all := legs(rows)
	end := all[len(all)-1].to
	return math.Hypot(end.x, end.y)
}
