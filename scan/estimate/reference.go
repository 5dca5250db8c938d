package estimate

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// ReferenceQuestion says what sets of references are asked about.
type ReferenceQuestion struct {
	Of scan.Reference
	// Profile predicts, for an arm by name, the rate of coincidences against its angle (degrees) in
	// any unit, with everything else at the top. An arm that it does not know, and every arm where
	// the map is nil, is taken for a Gaussian.
	Profile map[string]func(angleDeg float64) float64
}

// Finding is what a comparison of one quantity came to.
type Finding string

// The findings.
const (
	Within Finding = "within" // of its bound, which its counts can judge
	Beyond Finding = "beyond"
	Untold Finding = "cannot tell" // too few counts for the bound
)

// judgedSigmas is how many standard uncertainties a bound must have to be judged: a set that did
// not change passes it once in 16,000 by chance, for each quantity.
const judgedSigmas = 4

// judgedChance is the chance to be judgedSigmas off.
const judgedChance = 6.3e-5

// Change is how one quantity of a reference differs from the one it is compared with.
type Change struct {
	Quantity string  `json:"quantity"`
	Unit     string  `json:"unit"`    // of Change, U and Bound: 1, which is relative, or deg
	Before   float64 `json:"before"`  // Hz, counts per count, or degrees
	Now      float64 `json:"now"`     // in the same
	Change   float64 `json:"change"`  // Now/Before - 1, or Now - Before
	U        float64 `json:"u"`       // standard uncertainty of Change by counting, had nothing changed; 0: none could be worked out
	Bound    float64 `json:"bound"`   // what the recipe allows
	Counts   float64 `json:"counts"`  // the fewest in the two sets that it is made of
	Finding  Finding `json:"finding"` // within, beyond, cannot tell
	Because  string  `json:"because"` // where the numbers do not explain the finding
	WantS    float64 `json:"dwell_s"` // where it cannot be told: the dwell that could judge the bound; 0: not known

	shown func(v float64) string
}

// ReferenceVerdict compares one set of references with an earlier one.
type ReferenceVerdict struct {
	Good    bool
	Changes []Change // of every quantity that has a bound, singles first
}

// JudgeReference compares two sets of accepted reference readings: rates of each detector and both
// coincidence ratios (net of accidentals, S_a S_b W / T) at the top, and each arm's centre, fitted
// to its flanks and the top (centreOf). A change is bad when it is beyond its bound. A bound below
// four standard uncertainties of the change cannot be judged and is no reason to call a set bad,
// unless the change is beyond the bound by four of them more: a detector that died must not pass
// because its counts are few. The uncertainty is that of counting alone, worked out for sets that
// do not differ, from both sets' counts together: with each set's own, a rate that fell would widen
// the error it is judged by.
//
// Held by TestReferencesThatDidNotChangeAreSeldomCalledBad and TestChangesAreFound.
func JudgeReference(now, before []protocol.Reading, bench Bench, q ReferenceQuestion) ReferenceVerdict {
	profiles := q.profiles()
	a, b := newReferenceSet(before, bench, q), newReferenceSet(now, bench, q)
	v := ReferenceVerdict{Good: true}
	if bound := q.Of.Bounds.Singles; bound > 0 {
		for _, channel := range []string{string(q.Of.Trigger), string(q.Of.UnderTest)} {
			v.add(singlesChange(a, b, channel, bound))
		}
	}
	if bound := q.Of.Bounds.Ratio; bound > 0 {
		for _, channel := range []string{string(q.Of.Trigger), string(q.Of.UnderTest)} {
			v.add(ratioChange(a, b, channel, bound))
		}
	}
	if bound := q.Of.Bounds.Centre; bound > 0 {
		for _, arm := range q.arms() {
			v.add(centreChange(a, b, arm, profiles[arm], bound))
		}
	}
	return v
}

func (v *ReferenceVerdict) add(c Change) {
	v.Good = v.Good && c.Finding != Beyond
	v.Changes = append(v.Changes, c)
}

// Text is the verdict in a sentence: what is beyond its bound first, what cannot be told last.
func (v ReferenceVerdict) Text() string {
	var beyond, within, untold []string
	for _, c := range v.Changes {
		switch c.Finding {
		case Beyond:
			beyond = append(beyond, c.String())
		case Within:
			within = append(within, c.String())
		default:
			untold = append(untold, c.String())
		}
	}
	var parts []string
	if len(beyond) > 0 {
		parts = append(parts, strings.Join(beyond, ", "))
	}
	if len(within) > 0 {
		parts = append(parts, "within bounds: "+strings.Join(within, ", "))
	}
	if len(untold) > 0 {
		parts = append(parts, "cannot tell: "+strings.Join(untold, ", "))
	}
	if len(parts) == 0 {
		return "nothing is compared: the recipe gives no bounds"
	}
	return strings.Join(parts, "; ")
}

// Detail is the verdict's numbers for a program, under names that JSON can carry.
func (v ReferenceVerdict) Detail() map[string]any {
	return map[string]any{"good": v.Good, "changes": v.Changes, "sigmas": judgedSigmas}
}

// String is a change as part of a sentence.
func (c Change) String() string {
	switch {
	case c.Finding == Untold && c.Because != "":
		return c.Quantity + ", " + c.Because
	case c.Finding == Untold:
		text := fmt.Sprintf("%s, %.0f counts give u %s for a bound of %s", c.Quantity, c.Counts, c.shown(c.U), c.shown(c.Bound))
		if c.WantS > 0 {
			text += "; want a dwell of at least " + roundedUp(c.WantS)
		}
		return text
	case c.Because != "":
		return c.Quantity + ": " + c.Because
	}
	sign := ""
	if c.Change >= 0 {
		sign = "+"
	}
	if c.Finding == Within {
		return fmt.Sprintf("%s %s%s", c.Quantity, sign, c.shown(c.Change))
	}
	return fmt.Sprintf("%s changed by %s%s, u %s, %s allowed", c.Quantity, sign, c.shown(c.Change), c.shown(c.U), c.shown(c.Bound))
}

func shownPercent(v float64) string { return figure(100*v, 2) + " %" }
func shownDegrees(v float64) string { return figure(v, 2) + " deg" }

// roundedUp is a dwell as a person would write it, never shorter than needed.
func roundedUp(s float64) string {
	d := time.Duration(math.Min(s, 1e8) * float64(time.Second))
	step := 100 * time.Millisecond
	for _, larger := range []time.Duration{time.Second, 10 * time.Second, time.Minute} {
		if d > 20*larger {
			step = larger
		}
	}
	if over := d % step; over > 0 {
		d += step - over
	}
	switch {
	case d%time.Hour == 0:
		return fmt.Sprintf("%d h", d/time.Hour)
	case d%time.Minute == 0:
		return fmt.Sprintf("%d min", d/time.Minute)
	}
	return fmt.Sprintf("%g s", d.Seconds())
}

// judge decides what a change is called, given at which change upwards it is beyond the bound and
// its standard uncertainty in the same terms.
func (c *Change) judge(bound float64) {
	switch {
	case !(c.U > 0) || math.IsInf(c.U, 0):
		c.U, c.Finding = 0, Untold
	case bound < judgedSigmas*c.U && math.Abs(c.Change) <= c.Bound+judgedSigmas*c.U:
		c.Finding = Untold
	case math.Abs(c.Change) > c.Bound:
		c.Finding = Beyond
	default:
		c.Finding = Within
	}
}

// wanted is the dwell of both sets at which a bound has judgedSigmas, from the uncertainty that
// these gates gave: variances go down as time goes up.
func (c *Change) wanted(bound, gateA, gateB float64) {
	if c.Finding != Untold || !(c.U > 0) {
		return
	}
	perSecond := c.U * c.U / (1/gateA + 1/gateB)
	c.WantS = 2 * perSecond * judgedSigmas * judgedSigmas / (bound * bound)
}

// referencePlace names a reading of a set.
type referencePlace struct {
	arm string // empty: the top
	on  scan.Spot
}

var topPlace = referencePlace{on: scan.Top}

// looked is what one reading of a set counted.
type looked struct {
	dwell
	reading protocol.Reading
}

// referenceSet is the accepted readings of one set, by place.
type referenceSet struct {
	q       ReferenceQuestion
	windowS float64
	at      map[referencePlace]looked
	bad     map[referencePlace]error // readings whose channels cannot be read
}

func newReferenceSet(readings []protocol.Reading, bench Bench, q ReferenceQuestion) referenceSet {
	set := referenceSet{q: q, windowS: bench.Counter.Window.Value, at: map[referencePlace]looked{}, bad: map[referencePlace]error{}}
	ch := channels{s: string(q.Of.Trigger), d: string(q.Of.UnderTest), c: string(q.Of.Pairs)}
	for _, r := range readings {
		if !r.Accepted || r.Kind != protocol.Reference || r.Reference == nil {
			continue
		}
		place := referencePlace{r.Reference.Arm, scan.Spot(r.Reference.On)}
		d, err := ch.read(r)
		if err != nil {
			set.bad[place] = err
			continue
		}
		set.at[place] = looked{d, r}
	}
	return set
}

func (s referenceSet) find(place referencePlace) (looked, error) {
	if l, ok := s.at[place]; ok {
		return l, nil
	}
	if err, ok := s.bad[place]; ok {
		return looked{}, err
	}
	where := "at the top"
	if place != topPlace {
		where = fmt.Sprintf("at the %s of %s", strings.ReplaceAll(string(place.on), "_", " "), place.arm)
	}
	return looked{}, fmt.Errorf("no reading %s", where)
}

// arms lists the arms that have flanks, in the order of the places.
func (q ReferenceQuestion) arms() []string {
	var arms []string
	for _, p := range q.Of.Places {
		if p.Arm != "" && !slices.Contains(arms, string(p.Arm)) {
			arms = append(arms, string(p.Arm))
		}
	}
	return arms
}

// profiles asks the model once about each arm: a set's three fits would ask it thousands of times,
// and it takes milliseconds.
func (q ReferenceQuestion) profiles() map[string]*armProfile {
	all := map[string]*armProfile{}
	for arm, model := range q.Profile {
		low, high := math.Inf(1), math.Inf(-1)
		for _, p := range q.Of.Places {
			for _, t := range p.Axes {
				if string(p.Arm) == arm && t.Axis == p.Arm {
					low, high = math.Min(low, t.Angle.Degrees()), math.Max(high, t.Angle.Degrees())
				}
			}
		}
		all[arm] = newArmProfile(model, low, high)
	}
	return all
}

// pooled is what a dwell of gateS would count, by both dwells' rates together.
func pooled(a, b dwell, gateS float64) dwell {
	share := gateS / (a.gateS + b.gateS)
	p := dwell{gateS: gateS, s: (a.s + b.s) * share, d: (a.d + b.d) * share, c: (a.c + b.c) * share}
	p.chances = Accidentals(p.s, p.d, 1, gateS)
	return p
}

func (d dwell) singles(isTrigger bool) float64 {
	if isTrigger {
		return d.s
	}
	return d.d
}

// relative fills in a change by a factor. Its uncertainty is that of the logarithm, and so is the
// bound it is compared with: a factor of 1 + bound is nearer in it than one of 1 - bound.
func relative(quantity string, bound, gateA, gateB, before, now, u, counts float64) Change {
	c := Change{Quantity: quantity, Unit: "1", Before: before, Now: now, Change: now/before - 1, U: u, Bound: bound, Counts: counts, shown: shownPercent}
	if !(before > 0) {
		c.Change, c.Finding, c.Because = 0, Untold, "there is nothing to compare with"
		return c
	}
	c.judge(math.Log1p(bound))
	c.wanted(math.Log1p(bound), gateA, gateB)
	return c
}

func untold(quantity, unitName string, bound float64, err error) Change {
	return Change{Quantity: quantity, Unit: unitName, Bound: bound, Finding: Untold, Because: err.Error(), shown: shownPercent}
}

func singlesName(channel string) string { return "singles of " + channel }

func (q ReferenceQuestion) ratioName(channel string) string {
	return fmt.Sprintf("%s per count of %s", q.Of.Pairs, channel)
}

func centreName(arm string) string { return "centre of " + arm }

func singlesChange(a, b referenceSet, channel string, bound float64) Change {
	name := singlesName(channel)
	before, err := a.find(topPlace)
	if err != nil {
		return untold(name, "1", bound, fmt.Errorf("in the set it is compared with: %w", err))
	}
	now, err := b.find(topPlace)
	if err != nil {
		return untold(name, "1", bound, err)
	}
	isTrigger := channel == string(a.q.Of.Trigger)
	n, m := before.singles(isTrigger), now.singles(isTrigger)
	return relative(name, bound, before.gateS, now.gateS, n/before.gateS, m/now.gateS,
		math.Sqrt(1/pooled(before.dwell, now.dwell, before.gateS).singles(isTrigger)+1/pooled(before.dwell, now.dwell, now.gateS).singles(isTrigger)), math.Min(n, m))
}

// ratio is net coincidences per singles count of one detector, with the relative variance by
// counting: the logarithm's slopes in C, S and D with Var = the counts and all three covariances
// C, since each recorded pair is a count in all three (derived here).
func (d dwell) ratio(isTrigger bool, windowS float64) (value, relVariance float64) {
	accidentals := d.chances * windowS
	net := d.c - accidentals
	by := d.singles(isTrigger)
	value = net / by
	if !(net > 0) || !(d.s > 0) || !(d.d > 0) {
		return value, math.Inf(1)
	}
	toC := 1 / net
	toS, toD := -accidentals/net/d.s, -accidentals/net/d.d
	if isTrigger {
		toS -= 1 / d.s
	} else {
		toD -= 1 / d.d
	}
	return value, toC*toC*d.c + toS*toS*d.s + toD*toD*d.d + 2*d.c*(toC*toS+toC*toD+toS*toD)
}

func ratioChange(a, b referenceSet, channel string, bound float64) Change {
	name := a.q.ratioName(channel)
	before, err := a.find(topPlace)
	if err != nil {
		return untold(name, "1", bound, fmt.Errorf("in the set it is compared with: %w", err))
	}
	now, err := b.find(topPlace)
	if err != nil {
		return untold(name, "1", bound, err)
	}
	isTrigger := channel == string(a.q.Of.Trigger)
	if before.singles(isTrigger) == 0 || now.singles(isTrigger) == 0 {
		return untold(name, "1", bound, fmt.Errorf("%s counts nothing", channel))
	}
	was, _ := before.ratio(isTrigger, a.windowS)
	is, _ := now.ratio(isTrigger, a.windowS)
	_, v := pooled(before.dwell, now.dwell, before.gateS).ratio(isTrigger, a.windowS)
	_, w := pooled(before.dwell, now.dwell, now.gateS).ratio(isTrigger, a.windowS)
	return relative(name, bound, before.gateS, now.gateS, was, is, math.Sqrt(v+w), math.Min(before.c, now.c))
}

// flanks are the three readings that an arm's centre is fitted to, from low to high.
func (s referenceSet) flanks(arm string) (spots [3]Spot, gateS float64, err error) {
	for i, place := range []referencePlace{{arm, scan.LowFlank}, topPlace, {arm, scan.HighFlank}} {
		l, err := s.find(place)
		if err != nil {
			return spots, 0, err
		}
		angle, ok := angleOf(l.reading, arm)
		if !ok {
			return spots, 0, fmt.Errorf("reading %d: no angle of %q", l.sequence, arm)
		}
		spots[i] = Spot{AngleDeg: angle, Counts: l.c, Exposure: l.gateS, Known: l.chances * s.windowS}
		gateS += l.gateS / 3
	}
	return spots, gateS, nil
}

func centreChange(a, b referenceSet, arm string, profile *armProfile, allowed unit.Angle) Change {
	name, bound := centreName(arm), allowed.Degrees()
	before, gateA, err := a.flanks(arm)
	if err != nil {
		return untold(name, "deg", bound, fmt.Errorf("in the set it is compared with: %w", err))
	}
	now, gateB, err := b.flanks(arm)
	if err != nil {
		return untold(name, "deg", bound, err)
	}
	c := Change{Quantity: name, Unit: "deg", Bound: bound, shown: shownDegrees, Counts: math.Inf(1)}
	var both [3]Spot
	for i := range both {
		both[i] = Spot{AngleDeg: (before[i].AngleDeg + now[i].AngleDeg) / 2, Counts: before[i].Counts + now[i].Counts, Exposure: before[i].Exposure + now[i].Exposure, Known: before[i].Known + now[i].Known}
		c.Counts = min(c.Counts, before[i].Counts, now[i].Counts)
	}
	was, uWas, err := centreOf(before, profile)
	if err != nil {
		c.Finding, c.Because = Untold, "in the set it is compared with: "+err.Error()
		return c
	}
	is, uIs, err := centreOf(now, profile)
	c.Before, c.Now, c.Change = was, is, is-was
	if err == nil && uIs > judgedSigmas*uWas*math.Sqrt(gateA/gateB) {
		err = fmt.Errorf("%w: a centre at %.4g deg would have a u of %.2g deg", errNoPeak, is, uIs) // three lucky counts among many that are none
	}
	if err != nil {
		// Counts that are no peak any more are bad where chance does not explain it, however few.
		c.Now, c.Change, c.Finding, c.Because = was, 0, Untold, err.Error()
		if p := sameChance(before, now); p < judgedChance {
			c.Finding, c.Because = Beyond, fmt.Sprintf("there was one at %.4g deg, and now %v", was, err)
		}
		return c
	}
	if _, u, err := centreOf(both, profile); err == nil {
		c.U = u * math.Sqrt((gateA+gateB)/gateA+(gateA+gateB)/gateB)
	} else {
		c.U = math.Hypot(uWas, uIs)
	}
	c.judge(bound)
	c.wanted(bound, gateA, gateB)
	return c
}
