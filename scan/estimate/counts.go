package estimate

import (
	"fmt"
	"math"
	"slices"
	"time"

	"gemel/protocol"
)

// Rows is what the logbook holds of one run, in the order of sequence.
type Rows struct {
	Run      protocol.RunID
	Title    string
	Readings []protocol.Reading
	Doubtful map[int64]string // sequence: why a reading was doubted after it was accepted
	// Planned is how many points the sweep has; those with a higher index were added by a refinement,
	// after counts were seen. 0: none was.
	Planned int
}

// refined says whether a reading belongs to a point that a refinement added.
func (r Rows) refined(row protocol.Reading) bool {
	return r.Planned > 0 && row.Point != nil && *row.Point >= r.Planned
}

// Aside is a reading that does not count, and why.
type Aside struct {
	Sequence int64  `json:"sequence"`
	Reason   string `json:"reason"`
}

// split sorts the readings: the accepted ones by kind, the others with their reasons.
func (r Rows) split() (byKind map[protocol.ReadingKind][]protocol.Reading, aside []Aside) {
	byKind = map[protocol.ReadingKind][]protocol.Reading{}
	for _, row := range r.Readings {
		doubt, doubtful := r.Doubtful[row.Sequence]
		switch {
		case !row.Accepted:
			aside = append(aside, Aside{row.Sequence, row.Reason})
		case doubtful:
			aside = append(aside, Aside{row.Sequence, "doubtful: " + doubt})
		default:
			byKind[row.Kind] = append(byKind[row.Kind], row)
		}
	}
	return byKind, aside
}

// asPlanned keeps the readings of the sweep itself. An efficiency without a plateau is what its points
// were said to be before anything was counted.
func (r Rows) asPlanned(lights []protocol.Reading, aside []Aside) ([]protocol.Reading, []Aside) {
	var kept []protocol.Reading
	for _, row := range lights {
		if r.refined(row) {
			aside = append(aside, Aside{row.Sequence, "at a point that a refinement added after counts were seen; only the sweep's points make this number"})
			continue
		}
		kept = append(kept, row)
	}
	return kept, aside
}

func countOf(counts []protocol.Count, channel string) (float64, bool) {
	for _, c := range counts {
		if c.Channel == channel {
			return float64(c.Counts), true
		}
	}
	return 0, false
}

// dwell is one light reading as the efficiency sees it.
type dwell struct {
	sequence   int64
	mid        time.Time
	gateS      float64
	s, d, c    float64 // trigger, under test, coincidences
	chances    float64 // sum over slices of S D / T: times W it is the accidentals
	displaced  float64 // counts of the displaced channel over its windows
	background []share // true background rate: sum of share × rate of that background
}

type share struct {
	background int
	weight     float64
}

// channels names what is counted.
type channels struct{ s, d, c, displaced string }

func (ch channels) read(r protocol.Reading) (dwell, error) {
	d := dwell{sequence: r.Sequence, gateS: r.Gate.Duration().Seconds(), mid: middle(r)}
	if d.gateS <= 0 {
		return d, fmt.Errorf("reading %d: gate of %g s; want a positive one", r.Sequence, d.gateS)
	}
	for _, want := range []struct {
		name string
		into *float64
	}{{ch.s, &d.s}, {ch.d, &d.d}, {ch.c, &d.c}, {ch.displaced, &d.displaced}} {
		if want.name == "" {
			continue
		}
		v, ok := countOf(r.Counts, want.name)
		if !ok {
			return d, fmt.Errorf("reading %d: no channel %q", r.Sequence, want.name)
		}
		*want.into = v
	}
	cut := r.Slices
	if len(cut) == 0 {
		cut = []protocol.Slice{{Gate: r.Gate, Counts: r.Counts}}
	}
	var s, t float64
	for i, sl := range cut {
		a, okA := countOf(sl.Counts, ch.s)
		b, okB := countOf(sl.Counts, ch.d)
		gate := sl.Gate.Duration().Seconds()
		if !okA || !okB || gate <= 0 {
			return d, fmt.Errorf("reading %d, slice %d: gate of %g s, channels %q and %q there: %v, %v; want a gate and both", r.Sequence, i+1, gate, ch.s, ch.d, okA, okB)
		}
		s, t = s+a, t+b
		d.chances += Accidentals(a, b, 1, gate)
	}
	if s != d.s || t != d.d {
		return d, fmt.Errorf("reading %d: the slices add up to %.0f and %.0f, the reading says %.0f and %.0f", r.Sequence, s, t, d.s, d.d)
	}
	return d, nil
}

func middle(r protocol.Reading) time.Time {
	return r.StartedAt.Add(r.EndedAt.Sub(r.StartedAt.Time) / 2)
}

// dim is one background (or dark) measurement of the trigger.
type dim struct {
	mid    time.Time
	gateS  float64
	counts float64

	// Of one that was taken at another pump power (scaled): what its own counting adds to the variance
	// of counts, and the seconds of dark in counts.
	scaled   bool
	variance float64
	darkS    float64
}

// uncertain is the variance of the counts by their own counting; no count is not no rate.
func (d dim) uncertain() float64 {
	if d.scaled {
		return d.variance
	}
	return math.Max(d.counts, 1)
}

func (d dim) rateHz() float64 { return d.counts / d.gateS }

// bracket interpolates between the measurements before and after a time; outside them the nearest
// counts. Measurements must be in the order of time.
func bracket(at time.Time, measured []dim) []share {
	i, exact := slices.BinarySearchFunc(measured, at, func(d dim, t time.Time) int { return d.mid.Compare(t) })
	switch {
	case len(measured) == 0:
		return nil
	case exact || i == 0:
		return []share{{i, 1}}
	case i == len(measured):
		return []share{{i - 1, 1}}
	}
	gap := measured[i].mid.Sub(measured[i-1].mid).Seconds()
	if gap <= 0 {
		return []share{{i - 1, 0.5}, {i, 0.5}}
	}
	w := at.Sub(measured[i-1].mid).Seconds() / gap
	return []share{{i - 1, 1 - w}, {i, w}}
}

// angleOf is where an axis stood around a reading, degrees.
func angleOf(r protocol.Reading, axis string) (float64, bool) {
	for _, a := range r.Angles {
		if a.Axis == axis {
			return (a.Before.Degrees() + a.After.Degrees()) / 2, true
		}
	}
	return math.NaN(), false
}
