package estimate

import (
	"fmt"
	"math"
	"strings"
)

// Constant is a declared constant that enters a result. A U of 0 means that none was stated, and
// is refused: no constant of a bench is known exactly. The zero Constant was not declared at all.
type Constant struct {
	Value float64
	U     float64 // standard uncertainty, in the unit of Value
	From  string  // where the value comes from
}

func (c Constant) declared() bool { return c != Constant{} }

// Transmittance is one piece of the path from the crystal to the face of the tested detector.
type Transmittance struct {
	Name string
	Constant
	Date string // when it was measured, as declared
}

// Filter is a band filter, as the light meets it (angle of incidence and index already in it).
type Filter struct {
	CentreNm float64
	WidthNm  float64 // full width at half maximum
	Shape    string  // as declared
}

// Arm is one detector and the light's way to it.
type Arm struct {
	Name         string
	Channel      string // singles channel of the counter
	Axis         string // that it rides on; empty: none
	DeadTime     Constant
	Model        DeadTimeModel
	Afterpulse   Constant // share of recorded counts
	Path         []Transmittance
	Face         string // the plane that an efficiency refers to: window or fibre_input
	Filter       *Filter
	Polarisation string
	Settings     []string // bias, threshold, temperature …, as declared or read
}

// Displaced is a coincidence channel whose windows are moved off the true delay, by more than
// dead time, afterpulse time and any bunch period.
type Displaced struct {
	Channel string
	Of      [2]string // the two singles channels
	Windows int       // how many windows of the full width the channel sums
}

// Counter is what a result must know of the counter.
type Counter struct {
	Logic     Logic
	Latched   bool                 // singles and coincidences were counted in the same interval
	Pairs     map[string][2]string // coincidence channel: the two singles channels
	Window    Constant             // full width, s
	Capture   Constant             // share of true coincidences within the window, from a delay scan
	Displaced []Displaced
}

// Bench is the constants of a bench file that enter results. Package daemon/bench fills it.
type Bench struct {
	Name      string
	Counter   Counter
	Arms      []Arm
	PumpNm    float64             // vacuum wavelength
	AxisError map[string]Constant // degrees: Value is not used, U is the axis's standard uncertainty
}

// Model is what the model of the source can say, as functions, so that this package needs none. A
// nil function is a model that cannot.
type Model struct {
	// Collection is the share of the trigger's heralded partners that the tested arm's optics
	// collect at this run's plateau.
	Collection func() (float64, error)
	// HeraldedBand is the band of the heralded light at the tested detector; where nil it is worked
	// out from the trigger's filter by energy conservation.
	HeraldedBand func() (centreNm, widthNm float64, err error)
	// Profile is the predicted coincidence or singles rate against the angle of an axis (degrees), in
	// any unit: its offset, scale and background are fitted.
	Profile func(angleDeg float64) float64

	// Of a tuning curve and of a conjugate map: at a place of the other axis (degrees, as it was asked
	// for) the predicted profile along the arm, where the other axis truly stands shiftDeg further.
	ProfileAt func(againstDeg, shiftDeg float64) func(angleDeg float64) float64
	// Bare is where the light of the filter's centre goes that no aperture has averaged, seen by the
	// arm, with the other axis at an angle: by phase matching against a tilt, by the momentum along
	// the face against the other arm.
	Bare func(againstDeg float64) (angleDeg float64, err error)
	// CutDeg is the cut whose crystal, untilted, has the same angle between pump and optic axis as
	// the declared one at this tilt.
	CutDeg func(tiltDeg float64) (float64, error)
}

// Refusal says, with every reason at once, why there is no result.
type Refusal struct {
	Reasons []string
	Limit   *UpperLimit // what can be said nevertheless; nil: nothing
	Net     *NetPairs   // the same of a delay; nil: nothing
}

func (r *Refusal) Error() string { return "no result: " + strings.Join(r.Reasons, "; ") }

func (r *Refusal) addf(format string, args ...any) {
	r.Reasons = append(r.Reasons, fmt.Sprintf(format, args...))
}

func (r *Refusal) err() error {
	if len(r.Reasons) == 0 {
		return nil
	}
	return r
}

// need refuses a constant that is absent, has no uncertainty, or lies outside what can be.
func (r *Refusal) need(c Constant, what string, low, high float64) {
	switch {
	case !c.declared():
		r.addf("%s is not declared; want {value, u, from} in the bench file, or the correction switched off", what)
	case !(c.U > 0) || math.IsInf(c.U, 0):
		r.addf("%s is %g without an uncertainty; want its u", what, c.Value)
	case !(c.Value >= low && c.Value <= high):
		r.addf("%s is %g; want %g to %g", what, c.Value, low, high)
	}
}

func (b Bench) arm(name string) (Arm, bool) {
	for _, a := range b.Arms {
		if a.Name == name {
			return a, true
		}
	}
	return Arm{}, false
}

// counts finds the arm whose singles a channel counts.
func (b Bench) counts(channel string) (Arm, bool) {
	for _, a := range b.Arms {
		if a.Channel == channel {
			return a, true
		}
	}
	return Arm{}, false
}

func samePair(a, b [2]string) bool { return a == b || a == [2]string{b[1], b[0]} }

// coincidence finds the channel that counts coincidences of two singles channels.
func (c Counter) coincidence(of [2]string) string {
	found := ""
	for name, pair := range c.Pairs {
		if samePair(pair, of) && (found == "" || name < found) {
			found = name
		}
	}
	return found
}

func (c Counter) displaced(of [2]string) (Displaced, bool) {
	for _, d := range c.Displaced {
		if samePair(d.Of, of) && d.Windows > 0 {
			return d, true
		}
	}
	return Displaced{}, false
}

// heraldedBand is where the partners of a filtered trigger lie: 1/l_i = 1/l_p - 1/l_s at both
// edges of the trigger's band (energy conservation, vacuum wavelengths).
func heraldedBand(pumpNm float64, trigger Filter) (centreNm, widthNm float64) {
	idler := func(l float64) float64 { return 1 / (1/pumpNm - 1/l) }
	a, b := idler(trigger.CentreNm-trigger.WidthNm/2), idler(trigger.CentreNm+trigger.WidthNm/2)
	return idler(trigger.CentreNm), math.Abs(a - b)
}
