package estimate

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// NetPairs is what a delay scan without a window says nevertheless: how many coincidences there are
// that chance does not explain, where pairs would be.
type NetPairs struct {
	AtS      float64 `json:"delay_s"`        // middle of the window that is asked about
	Declared bool    `json:"delay_declared"` // as where pairs are centred; else it is the sweep's middle
	FullS    float64 `json:"full_width_s"`   // of the window, as declared
	Inside   float64 `json:"coincidences"`   // within it
	InsideS  float64 `json:"exposure_s"`     // gate time, weighted by the herald's counts
	FloorHz  float64 `json:"floor_per_s"`    // beside it
	Hz       float64 `json:"net_per_s"`      // may be negative
	U        float64 `json:"net_standard_uncertainty_per_s"`
	UpperHz  float64 `json:"net_upper_limit_per_s"`
	Coverage float64 `json:"coverage"`         // of the limit, one-sided
	Most     float64 `json:"most_significant"` // excess of a window anywhere in the sweep, in standard deviations
	MostAtS  float64 `json:"most_significant_delay_s"`
}

// plainly is the excess above which a sweep has a window in it. Among the dozens of places where a
// window could lie, chance alone reaches it once in some hundred thousand sweeps.
const plainly = 5

// fewInside is below how many coincidences the limit takes nothing off for chance.
const fewInside = 10

// flat says what there is to say if no window of the declared width stands out anywhere in a sweep that
// is wider than one.
func (d delayed) flat(window float64, q DelayQuestion) (n NetPairs, is bool) {
	width := window / nano
	low, high := math.Inf(1), math.Inf(-1)
	for _, s := range d.data {
		low, high = math.Min(low, s.AngleDeg), math.Max(high, s.AngleDeg)
	}
	if !(width > 0) || high-low < 1.5*width {
		return n, false
	}
	for _, s := range d.data {
		n1, t1, n0, t0 := d.window(s.AngleDeg, width)
		if z := excess(n1, t1, n0, t0); z > n.Most {
			n.Most, n.MostAtS = z, s.AngleDeg*nano
		}
	}
	if n.Most >= plainly {
		return n, false
	}
	at := (low + high) / 2
	if q.Operating != nil && *q.Operating*d.perNano > low && *q.Operating*d.perNano < high {
		at, n.Declared = *q.Operating*d.perNano, true
	}
	n1, t1, n0, t0 := d.window(at, width)
	if !(t1 > 0 && t0 > 0) {
		return n, false
	}
	n.AtS, n.FullS, n.Inside, n.InsideS, n.FloorHz, n.Coverage = at*nano, window, n1, t1, n0/t0, q.Coverage
	n.Hz, n.U = n1/t1-n0/t0, math.Sqrt(math.Max(n1, 1)/(t1*t1)+n0/(t0*t0))
	n.UpperHz = netUpper(n1, t1, n0, t0, q.Coverage)
	return n, true
}

// window sums counts and exposures inside and outside a window.
func (d delayed) window(at, width float64) (n1, t1, n0, t0 float64) {
	for _, s := range d.data {
		if math.Abs(s.AngleDeg-at) <= width/2 {
			n1, t1 = n1+s.Counts, t1+s.Exposure
		} else {
			n0, t0 = n0+s.Counts, t0+s.Exposure
		}
	}
	return n1, t1, n0, t0
}

// onOff is twice the log likelihood of n1 counts in t1 and n0 in t0, of which a rate s is in the first
// alone, at the floor that is then likeliest.
func onOff(n1, t1, n0, t0, s float64) float64 {
	t := t1 + t0
	b := n1 + n0 - t*s
	b = (b + math.Sqrt(b*b+4*t*n0*s)) / (2 * t)
	term := func(n, mean float64) float64 {
		if n == 0 {
			return -mean
		}
		return n*math.Log(mean) - mean
	}
	return 2 * (term(n1, (s+b)*t1) + term(n0, b*t0))
}

// excess is the significance of more counts inside than outside, in standard deviations, by the ratio
// of likelihoods (Li and Ma, Astrophys. J. 272, 317 (1983), equation 17, recalled from memory).
func excess(n1, t1, n0, t0 float64) float64 {
	if !(t1 > 0 && t0 > 0) || n1/t1 <= n0/t0 {
		return 0
	}
	return math.Sqrt(math.Max(0, onOff(n1, t1, n0, t0, n1/t1-n0/t0)-onOff(n1, t1, n0, t0, 0)))
}

// netUpper is the upper limit of the rate inside that is not there outside, by the profile likelihood
// for rates of 0 and more (Rolke, Lopez and Conrad, Nucl. Instrum. Meth. A 551, 493 (2005), recalled
// from memory). With few counts inside it is the limit of these, with nothing taken off (Garwood 1936),
// which errs upwards only.
func netUpper(n1, t1, n0, t0, coverage float64) float64 {
	if n1 < fewInside {
		return PoissonUpper(n1, coverage) / t1
	}
	best := math.Max(0, n1/t1-n0/t0)
	z := distuv.UnitNormal.Quantile(coverage)
	below := func(s float64) bool { return onOff(n1, t1, n0, t0, best)-onOff(n1, t1, n0, t0, s) < z*z }
	low, high := best, best+math.Sqrt(n1)/t1
	for below(high) {
		high += high - best
	}
	for range 60 {
		if mid := (low + high) / 2; below(mid) {
			low = mid
		} else {
			high = mid
		}
	}
	return high
}

func (n NetPairs) sentence(channel string) string {
	where := fmt.Sprintf("in the middle of the sweep, %.5g ns", n.AtS/nano)
	if n.Declared {
		where = fmt.Sprintf("at the declared delay of %.5g ns", n.AtS/nano)
	}
	return fmt.Sprintf("what can be said: within the declared window of %.4g ns %s, %.4g ± %.2g /s of %s are more than the %.4g /s of chance beside it; with %.4g %% coverage, less than %.3g /s", n.FullS/nano, where, n.Hz, n.U, channel, n.FloorHz, 100*n.Coverage, n.UpperHz)
}
