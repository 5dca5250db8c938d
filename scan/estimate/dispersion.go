package estimate

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Dispersion is the test whether readings scatter as counting alone would make them (Birge, Phys.
// Rev. 40, 207 (1932)).
type Dispersion struct {
	Readings    int     `json:"readings"`
	ChiSquare   float64 `json:"chi_square"`
	Freedom     int     `json:"degrees_of_freedom"`
	Birge       float64 `json:"birge_ratio"` // sqrt(chi square per degree of freedom)
	P           float64 `json:"p"`           // chance of a larger one
	Significant bool    `json:"significant"` // P below 1 %: the counting uncertainty is multiplied by Birge
}

// dispersionLevel is the chance of calling honest readings over-dispersed.
const dispersionLevel = 0.01

// Disperse tests residuals (observed minus fitted) against their variances; fitted is the number
// of parameters that the residuals already used up.
func Disperse(residuals, variances []float64, fitted int) Dispersion {
	d := Dispersion{Birge: 1, P: 1}
	for i, r := range residuals {
		if variances[i] > 0 {
			d.ChiSquare += r * r / variances[i]
			d.Readings++
		}
	}
	d.Freedom = d.Readings - fitted
	if d.Freedom < 1 {
		d.Freedom = 0
		return d
	}
	d.Birge = math.Sqrt(d.ChiSquare / float64(d.Freedom))
	d.P = distuv.ChiSquared{K: float64(d.Freedom)}.Survival(d.ChiSquare)
	d.Significant = d.P < dispersionLevel
	return d
}

// factor is what the counting uncertainty is multiplied by.
func (d Dispersion) factor() float64 {
	if d.Significant {
		return d.Birge
	}
	return 1
}
