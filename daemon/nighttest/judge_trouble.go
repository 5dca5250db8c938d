package nighttest

import (
	"slices"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// effect is a trouble that took effect: the ledger says so.
type effect struct {
	trouble  trouble.Trouble
	at       time.Time
	run      protocol.RunID // that was under way then; empty: none
	met      bool           // that run was counting, or asked for it, and had to meet it
	starting bool           // it was met by the rest state with which a new process begins
	passed   bool           // it is over
	readings int            // accepted readings of that run that began since
	surfaced bool           // as it declares
	shown    bool           // somehow: in an event, a reading set aside, a check
}

// troubled takes a trouble in whose record says what it is. A kind that the judge never heard of is
// held to what it declares.
func (j *judge) troubled(r *instruments.Record) {
	j.over(r)
	if r.Text == "" || !strings.Contains(r.Text, "(") || r.Kind == instruments.Refused || r.Kind == instruments.LampOff || r.Kind == instruments.Plugged {
		return
	}
	l, err := trouble.Parse(r.Text)
	if err != nil || len(l) != 1 {
		return
	}
	e := &effect{trouble: l[0], at: r.At}
	if s := j.runs[j.current]; s != nil && s.began && !s.state.Final() {
		e.run, e.starting = j.current, s.owed && !j.killed
		e.met = s.state == protocol.Running && (s.counting || r.Kind == instruments.Befell) && !j.killed && !j.waits.full &&
			(e.trouble.Device == "" || !j.hinders(e.trouble.Device)) // behind another trouble of its device it is met by nobody
	}
	j.effects = append(j.effects, e)
}

// over takes in that a trouble ended.
func (j *judge) over(r *instruments.Record) {
	for _, e := range j.effects {
		if e.trouble.Device == r.Device && (r.Kind == instruments.Passed && r.Text == string(e.trouble.Kind) || r.Kind == instruments.Plugged && r.Text == e.trouble.String()) {
			e.passed = true
		}
	}
}

// unreached takes in what a new process says of the rest state that it began with, in an event of the
// bench or in the run's interruption: a device named there is a trouble written. What was over by the
// interruption, and kept nothing from its rest state, need not show: the next act is to connect everything anew.
func (j *judge) unreached(ev *protocol.Event) {
	at := strings.Index(strings.ToLower(ev.Text), "not reached: ")
	for _, e := range j.effects {
		switch {
		case !e.starting || e.surfaced:
		case at >= 0 && e.trouble.Device != "" && strings.Contains(ev.Text[at:], " "+e.trouble.Device+": "):
			e.surfaced = true
		case ev.Kind == protocol.Interrupted:
			e.met = e.met && !e.passed
		}
	}
}

// surfaces takes an event in: which troubles it may be the sign of.
func (j *judge) surface(run protocol.RunID, kind protocol.EventKind) {
	for _, e := range j.effects {
		if e.surfaced || e.run != run {
			continue
		}
		e.shown = e.shown || slices.Contains([]protocol.EventKind{protocol.TakenAgain, protocol.Trouble, protocol.Held, protocol.SetAside, protocol.GuardBroken, protocol.Doubted, protocol.HomedEvent, protocol.Interrupted}, kind)
		e.surfaced = slices.Contains(e.trouble.Surfaces().Events, string(kind))
	}
}

// unseen is how many readings may be accepted after a trouble that has to show in an event.
const unseen = 6

// died takes in that the process was killed: the next one connects everything anew, and verifies it, so
// what was met by nobody yet need not show.
func (j *judge) died() {
	for _, e := range j.effects {
		if !e.surfaced && e.readings < unseen {
			e.met = false
		}
	}
}

// hinders says whether the world keeps a device from doing what it is told, or did a moment ago; any
// device, where none is named.
func (j *judge) hinders(device string) bool {
	const moment = 2 * time.Minute
	for _, e := range j.effects {
		if e.trouble.Device != device && (device != "" || !e.trouble.Kind.OfDevice()) {
			continue
		}
		until := e.at.Add(e.trouble.For + moment)
		if e.trouble.Kind == trouble.Gone || e.trouble.Kind == trouble.DeadLine || !j.now.After(until) {
			return true
		}
	}
	return false
}

// withheld says whether a device cannot be told, or cannot do, what it is told, or could not a moment ago:
// a plug that is out, or a trouble that lasts. One bad answer is no reason.
func (j *judge) withheld(device string) bool {
	const moment = 2 * time.Minute // as often as what was not reached is tried again, and what a try may take
	return j.out[device] || slices.ContainsFunc(j.effects, func(e *effect) bool {
		t := e.trouble
		forGood := t.Kind == trouble.Gone || t.Kind == trouble.DeadLine
		return t.Device == device && (forGood || t.For > 0 && !j.now.After(e.at.Add(t.For+moment)))
	})
}

// accepted counts a reading against the troubles that did not show yet. None may be accepted with a
// detector that was below its floor for as long as it takes to tell: it is latched, or paralysed.
func (j *judge) accepted(where string, b *protocol.Reading) {
	for _, d := range j.facts.Detectors {
		if counts, seconds, low := belowFloor(d, b.Slices); low {
			j.say("%s was accepted, and the %s detector counted %d in %.4g s, below its floor", where, d.Name, counts, seconds)
		}
	}
	for _, e := range j.effects {
		if e.run == b.Run && !e.surfaced && b.StartedAt.After(e.at) {
			e.readings++
		}
	}
}

// belowFloor finds neighbouring gates, the fewest in which a detector at its floor would count twenty, in
// which it counted less than half of that.
func belowFloor(d DetectorFact, gates []protocol.Slice) (counts uint64, seconds float64, low bool) {
	for end := range gates {
		counts, seconds = 0, 0
		for i := end; i >= 0 && d.FloorHz > 0; i-- {
			seconds += gates[i].Gate.Duration().Seconds()
			for _, c := range gates[i].Counts {
				if c.Channel == d.Channel {
					counts += c.Counts
				}
			}
			if d.FloorHz*seconds < 20 {
				continue
			}
			if float64(counts) < d.FloorHz/2*seconds*(1-1e-9) {
				return counts, seconds, true
			}
			break
		}
	}
	return 0, 0, false
}

// demands says whether a trouble that took effect must have shown in the journal: the run met it.
func (j *judge) demands(e *effect) bool {
	s := e.trouble.Surfaces()
	if s.Harmless || len(s.Events) == 0 || !e.met || e.readings < unseen {
		return false
	}
	switch e.trouble.Kind {
	case trouble.Lamp, trouble.PumpDrift, trouble.TemperatureDrift, trouble.Latched:
		return false // judged by the light itself, and by what guards say of accepted readings
	case trouble.Slip, trouble.LostSteps, trouble.Stall:
		return false // judged by the true angles
	case trouble.WrongGate, trouble.Overflow:
		return false // judged by the gates
	case trouble.StuckShutter:
		return false // judged by the light at the detector
	case trouble.Restart, trouble.RestartMoving, trouble.Unplug:
		return slices.Contains(j.facts.Controls, e.trouble.Device) // the others lose nothing that a reading rests on
	}
	if d := e.trouble.For; d > 0 && d < longestDwell(j.facts.Plans[e.run])+5*time.Second {
		return false // it may have come and gone within one gate
	}
	return e.trouble.Device == "" || j.needed(e.trouble.Device)
}

// needed says whether no reading can be taken without a device.
func (j *judge) needed(device string) bool {
	return slices.Contains(j.facts.Controls, device) || device == j.facts.Counter || device == j.facts.Pump ||
		slices.ContainsFunc(j.facts.Detectors, func(d DetectorFact) bool { return d.Protector == device })
}

// verdicts judges every trouble at the end of the night.
func (j *judge) verdicts() {
	for _, e := range j.effects {
		if j.demands(e) && !e.surfaced {
			j.say("%s took effect, and none of %v followed in %d readings", e.trouble, e.trouble.Surfaces().Events, e.readings)
		}
	}
}

// reasons judges an end that was not as planned: it says why, and the night has something that can be
// the reason.
func (j *judge) reason(where string, ev *protocol.Event) {
	hit := func(kinds ...trouble.Kind) bool {
		return slices.ContainsFunc(j.effects, func(e *effect) bool { return slices.Contains(kinds, e.trouble.Kind) })
	}
	switch {
	case ev.State == protocol.Stopped && !strings.Contains(ev.Text, " by "):
		j.say("%s: stopped, and %q does not say by whom", where, ev.Text)
	case ev.State != protocol.Failed:
	case len(strings.TrimPrefix(ev.Text, "failed")) < 10:
		j.say("%s: failed, and %q is no reason", where, ev.Text)
	case len(j.effects) == 0 && !j.wasKilled && !strings.Contains(ev.Text, "guard") && !strings.Contains(ev.Text, "no value"):
		j.say("%s: failed in a night without trouble: %s", where, ev.Text)
	case strings.Contains(ev.Text, "trip rate") && !hit(trouble.Lamp, trouble.Overflow):
		j.say("%s: failed for light, and no lamp was on: %s", where, ev.Text)
	case strings.Contains(ev.Text, "lost the zero") && !j.wasKilled && !slices.ContainsFunc(j.effects, func(e *effect) bool { return slices.Contains(j.facts.Controls, e.trouble.Device) }):
		j.say("%s: failed for a lost zero, and nothing happened to a stage: %s", where, ev.Text)
	}
}
