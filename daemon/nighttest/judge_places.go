package nighttest

import (
	"math"
	"slices"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
	"gemel/sim/instruments"
)

// places judges where the axes truly are and go: keep-outs and limits hold for true angles while the
// true angle is within the keep-out's margin of the one reported; a zero is searched in the declared
// order only, in the dark, with the detectors protected, and not without a person where the file asks
// for one.
type places struct {
	stand     map[string]float64
	since     time.Time
	unknown   map[string]bool    // its zero is lost: what it reports means nothing
	off       map[string]float64 // true minus reported, of one that only counts
	slipped   time.Time
	moving    map[string]bool // an axis on its way
	astray    map[string]bool // slipped on the way that it is on: it ends where nobody sent it
	searched  map[string]int  // by controller: place in its order of the last search, from 1
	searching map[string]bool
	person    bool            // somebody let the run go on, and nothing held it since
	pump      []openSince     // when the pump's blade began to open, and was closed, newest last
	blamed    map[string]bool // keep-outs that are violated now, said once
}

type openSince struct {
	at   time.Time
	open bool
}

// slackDeg is what rounding and an encoder's resolution may cost.
const slackDeg = detection

func (j *judge) place(r *instruments.Record) {
	p := &j.places
	if p.unknown == nil {
		p.unknown, p.off, p.searched, p.blamed = map[string]bool{}, map[string]float64{}, map[string]int{}, map[string]bool{}
		p.moving, p.astray = map[string]bool{}, map[string]bool{}
	}
	switch r.Kind {
	case instruments.BladeStarted, instruments.BladeClosed:
		if r.Device != j.facts.Pump || r.Kind == instruments.BladeStarted && r.Text != "open" {
			break
		}
		open := r.Kind == instruments.BladeStarted
		p.pump = append(p.pump, openSince{r.At, open})
		if open && p.stand != nil && r.At.Sub(p.slipped) > slipUnseen {
			for _, k := range j.facts.KeepOuts {
				if k.Cone != nil && k.Cone.UnlessPumpClosed && j.trusted(k) && violated(k, p.stand, p.stand) {
					j.say("the pump was opened with an arm in keep-out %q: %v", k.Name, p.stand)
				}
			}
		}
	case instruments.Restarted:
		for axis, controller := range j.facts.Controller {
			if controller == r.Device {
				p.unknown[axis] = true
			}
		}
		delete(p.searched, r.Device)
	case instruments.Stalled:
		for axis, span := range r.Axes {
			if j.axis(axis).Proof != drivers.Proved { // it counts the steps that were not made
				p.off[axis] += span.FromDeg - span.ToDeg
			}
		}
	case instruments.Slipped:
		p.slipped = r.At
		for axis, span := range r.Axes {
			if p.searching[axis] {
				p.unknown[axis] = true // it ends elsewhere than at its mark
			}
			if j.axis(axis).Proof != drivers.Proved {
				p.off[axis] += span.ToDeg - span.FromDeg
			}
			p.astray[axis] = p.moving[axis]
		}
		p.stand = r.Stand // nobody's doing: the way there is not judged
	case instruments.MoveStarted:
		clear(p.searched)
		for axis := range r.Axes {
			p.moving[axis] = true
			delete(p.astray, axis)
		}
	case instruments.MarkStarted:
		j.inTheDark(r)
	case instruments.HomeStarted:
		j.inTheDark(r)
		j.search(r)
		p.searching = map[string]bool{}
		for axis := range r.Axes {
			p.searching[axis] = true
		}
	}
	if r.Stand == nil {
		return
	}
	if p.stand != nil {
		j.way(p.stand, r.Stand, p.since, r.At)
	}
	p.stand, p.since = r.Stand, r.At
	if r.Kind == instruments.MoveEnded || r.Kind == instruments.MoveStopped {
		for axis := range r.Axes {
			delete(p.moving, axis)
		}
	}
	if r.Kind == instruments.HomeFound {
		for axis := range r.Axes {
			delete(p.unknown, axis)
			delete(p.off, axis)
		}
	}
}

// slipUnseen is how long a slip may be unknown to a program that asks an encoder before each light.
const slipUnseen = 15 * time.Second

// trusted says whether the axes that a keep-out is about are where they say, within its margin.
func (j *judge) trusted(k scan.KeepOut) bool {
	return !slices.ContainsFunc(axesOf(k), func(a string) bool {
		return j.places.unknown[a] || j.places.astray[a] || math.Abs(j.places.off[a]) > k.Margin.Degrees()
	})
}

func axesOf(k scan.KeepOut) (all []string) {
	switch {
	case k.Apart != nil:
		all = append(all, string(k.Apart.Arms[0].Axis), string(k.Apart.Arms[1].Axis))
	case k.Cone != nil:
		for _, a := range k.Cone.Arms {
			all = append(all, string(a.Axis))
		}
	case k.Range != nil:
		all = append(all, string(k.Range.Axis))
		if k.Range.While != nil {
			all = append(all, string(k.Range.While.Axis))
		}
	}
	return all
}

// way judges a straight piece of a way. A place that a slip led into is left without blame; entering
// one is not.
func (j *judge) way(from, to map[string]float64, began, ended time.Time) {
	p := &j.places
	for _, k := range j.facts.KeepOuts {
		if k.Cone != nil && k.Cone.UnlessPumpClosed && !p.pumpOpen(began, ended) {
			continue
		}
		switch bad := violated(k, from, to); {
		case !bad:
			delete(p.blamed, k.Name)
		case !j.trusted(k) || p.blamed[k.Name] || violated(k, from, from):
		default:
			p.blamed[k.Name] = true
			j.say("keep-out %q was entered: from %v to %v", k.Name, from, to)
		}
	}
	for _, a := range j.facts.Axes {
		x, was := to[string(a.Name)], from[string(a.Name)]
		outside := func(x float64) bool {
			return x < a.Low.Degrees()-a.Tolerance.Degrees()-slackDeg || x > a.High.Degrees()+a.Tolerance.Degrees()+slackDeg
		}
		if outside(x) && !outside(was) && !p.unknown[string(a.Name)] && !p.astray[string(a.Name)] && math.Abs(p.off[string(a.Name)]) < slackDeg {
			j.say("%s went to %.4f deg; its limits are %s to %s deg", a.Name, x, a.Low, a.High)
		}
	}
}

// pumpOpen says whether any light of the pump came through between two moments.
func (p *places) pumpOpen(from, to time.Time) bool {
	open := false
	for _, o := range p.pump {
		if o.at.Before(from) || o.at.Equal(from) {
			open = o.open
		} else if o.at.Before(to) {
			open = open || o.open
		}
	}
	if n := len(p.pump); n > 64 {
		p.pump = append(p.pump[:0], p.pump[n-32:]...)
	}
	return open
}

// violated says whether a keep-out is met anywhere on the straight way between two places. The bare
// bounds count, without the margin.
func violated(k scan.KeepOut, from, to map[string]float64) bool {
	switch {
	case k.Apart != nil:
		lab := func(at map[string]float64) float64 {
			a, b := k.Apart.Arms[0], k.Apart.Arms[1]
			return math.Remainder(float64(a.Side)*at[string(a.Axis)]-float64(b.Side)*at[string(b.Axis)], 360)
		}
		return nearest(lab(from), lab(to)) < k.Apart.Least.Degrees()-slackDeg
	case k.Cone != nil:
		return slices.ContainsFunc(k.Cone.Arms, func(a scan.Arm) bool {
			return nearest(math.Remainder(from[string(a.Axis)], 360), math.Remainder(to[string(a.Axis)], 360)) < k.Cone.HalfWidth.Degrees()-slackDeg
		})
	case k.Range != nil:
		first, last, met := inside(k.Range.Span, from, to)
		if !met || k.Range.While == nil {
			return met
		}
		f, l, also := inside(*k.Range.While, from, to)
		return also && max(first, f) < min(last, l)
	}
	return false
}

// nearest is how near to zero a straight way from a to b comes.
func nearest(a, b float64) float64 {
	if a*b < 0 {
		return 0
	}
	return min(math.Abs(a), math.Abs(b))
}

// inside is the part of a straight way, from 0 to 1, on which an axis is between two angles.
func inside(s scan.Span, from, to map[string]float64) (first, last float64, met bool) {
	a, b := from[string(s.Axis)], to[string(s.Axis)]
	low, high := s.Low.Degrees()+slackDeg, s.High.Degrees()-slackDeg
	if a == b {
		return 0, 1, a > low && a < high
	}
	first, last = (low-a)/(b-a), (high-a)/(b-a)
	if first > last {
		first, last = last, first
	}
	first, last = max(0, first), min(1, last)
	return first, last, first < last
}

func (j *judge) axis(name string) scan.Axis {
	for _, a := range j.facts.Axes {
		if string(a.Name) == name {
			return a
		}
	}
	return scan.Axis{}
}

// inTheDark judges the light during a search for a mark.
func (j *judge) inTheDark(r *instruments.Record) {
	if j.pumpOpen || j.pumpMoves {
		j.say("%s searches its zero with the pump open", r.Device)
	}
	for _, d := range j.facts.Detectors {
		if d.Protector != "" && j.guards[d.Protector] {
			j.say("%s searches its zero with the %s detector open", r.Device, d.Name)
		}
	}
}

// search judges the order of searches for zeros, and who let them.
func (j *judge) search(r *instruments.Record) {
	order := j.facts.HomeOrder[r.Device]
	for axis := range r.Axes {
		at := slices.Index(order, axis) + 1
		if at <= j.places.searched[r.Device] {
			j.say("%s searched the zero of %s out of the declared order %v", r.Device, axis, order)
		}
		j.places.searched[r.Device] = at
		if !j.facts.Unattended[r.Device] && !j.places.person && j.axis(axis).Verify == nil {
			j.say("%s searched the zero of %s, and no person let it", r.Device, axis)
		}
	}
}

// placed follows what the journal says about searches and persons.
func (j *judge) placed(ev *protocol.Event) {
	switch ev.Kind {
	case protocol.WentOn:
		_, who := ev.Detail["who"]
		_, mended := ev.Detail["cause"]
		j.places.person = who || j.places.person && mended
	case protocol.Held, protocol.Interrupted, protocol.GuardBroken:
		j.places.person = false
	}
	clear(j.places.searched)
}
