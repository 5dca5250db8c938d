package nighttest

import (
	"bytes"
	"context"
	"encoding/json"
	"go/ast"
	"go/parser"
	"go/token"
	"maps"
	"path/filepath"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"gemel/daemon/courier"
	"gemel/drivers"
	"gemel/drivers/line"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/engine"
	"gemel/sim/instruments"
)

// TestTheJudgeFindsEverySabotage is the permanent table of what this program must never do. Each
// row breaks one promise on purpose, in one night that is flawless without it, and names the words
// by which the judge must find it in that night. Every invariant has two rows at least, and every
// sentence of the judge is said in one night at least. A row whose sabotage goes unseen, and a
// sentence that is never said, mean that the oracle is blind.
func TestTheJudgeFindsEverySabotage(t *testing.T) {
	var garbledCounts strings.Builder
	for answer := 20; answer < 600; answer += 7 {
		garbledCounts.WriteString("; garbled(counter, answer " + itoa(answer) + ", byte 3 as \"7\")")
	}
	var mu sync.Mutex
	judged := map[string][]string{}
	control := func(t *testing.T, what string, n Night) []string { // many rows share a night
		mu.Lock()
		defer mu.Unlock()
		script := what + n.Script.String()
		if _, known := judged[script]; !known {
			judged[script] = play(t, n).Judge()
		}
		return judged[script]
	}
	byHerald := func(share float64) func(*protocol.Reading) bool {
		return func(r *protocol.Reading) bool {
			if r.Kind != protocol.Light || !r.Accepted || len(r.Sensors) == 0 {
				return false
			}
			r.Sensors[0].Mean *= share
			return true
		}
	}
	light := func(change func(*protocol.Reading)) func(*protocol.Reading) bool {
		return func(r *protocol.Reading) bool {
			if r.Kind != protocol.Light || !r.Accepted {
				return false
			}
			change(r)
			return true
		}
	}
	of := func(kind protocol.EventKind, change func(*protocol.Event)) func(*protocol.Event) bool {
		return func(e *protocol.Event) bool {
			if e.Kind != kind {
				return false
			}
			change(e)
			return true
		}
	}
	reference := func(change func(*protocol.Reading)) func(*protocol.Reading) bool {
		return func(r *protocol.Reading) bool {
			if r.Kind != protocol.Reference {
				return false
			}
			change(r)
			return true
		}
	}
	refined := func(change func(*protocol.Points)) func(*protocol.Points) bool {
		return func(p *protocol.Points) bool {
			if p.Refined == 0 {
				return false
			}
			change(p)
			return true
		}
	}
	setAside := func(r *protocol.Reading) bool {
		if r.Accepted || len(r.Slices) == 0 {
			return false
		}
		r.Accepted, r.Reason = true, ""
		return true
	}
	reference2 := func(r *protocol.Reading) bool {
		if r.Kind != protocol.Reference || r.Reference.Set != 2 || r.Reference.Place != 0 {
			return false
		}
		r.Reference.Set = 1
		return true
	}
	cut := func(change func(*protocol.Event)) func(*protocol.Event) bool {
		return func(e *protocol.Event) bool {
			if e.Kind != protocol.SetAside || e.Detail["task"] != "rest" {
				return false
			}
			change(e)
			return true
		}
	}
	taken := func(change func(*protocol.EarlierValue)) func(*protocol.Points) bool {
		return func(p *protocol.Points) bool {
			if len(p.Earlier) == 0 {
				return false
			}
			change(&p.Earlier[0])
			return true
		}
	}
	const slipping = "| slip(signal_arm, at 4m, by 0.5 deg)"
	const fading = "| pump_drift(at 4m, for 1m, share -0.3)"
	kept := map[string]int{}
	rows := []struct {
		invariant string
		name      string
		night     string // bench words and recipe before the script; empty: plain and small
		script    string
		make      func() Sabotage
		found     string
	}{
		{"counts", "skips the second read of the counts", "", "|" + garbledCounts.String()[1:], skipSecondRead, "counted"},
		{"counts", "invents a count", "", "|", inventCount, "counted"},
		{"counts", "sums a gate twice", "", "|", sumTwice, "sums to"},
		{"gates", "loses a reading", "", "|", loseReading, "are in no reading"},
		{"gates", "tries again under a new sequence", "", "|", newSequence, "in no reading|no such gate|accepted already"},
		{"durable", "opens a gate before the commit", "", "|", gateBeforeCommit, "a gate was opened before it was durable"},
		{"durable", "moves on before the commit", "", "|", moveBeforeCommit, "something moved before it was durable"},
		{"journal", "has an entry too few", "", "|", tamper(func(line []Moment, i int) []Moment { return slices.Delete(line, i, i+1) }), "became durable where"},
		{"journal", "has an entry twice", "", "|", tamper(func(line []Moment, i int) []Moment { return slices.Insert(line, i, line[i]) }), "became durable where"},
		{"stream", "publishes before the commit", "", "|", publishEarly, "published before it was durable"},
		{"stream", "publishes other bytes than the journal's", "", "|", publishOtherBytes, "other bytes"},
		{"stream", "publishes an entry twice", "", "|", publishTwice, "was published where"},
		{"stream", "leaves an entry out", "", "|", leaveOneOut, "was published where"},
		{"rest", "forgets the shutter on a panic", "", "|", forgetShutterOnPanic, "the pump is not blocked"},
		{"rest", "leaves the pump open in a hold", "", "hold 3m |", pretendToClose, "the pump is not blocked"},
		{"rest", "forgets to protect the detectors in a hold", "", "hold 3m |", forgetProtectors, "detector is not protected"},
		{"rest", "moves an arm in a hold", "", "hold 3m |", moveInAHold, "a motion began while"},
		{"rest unreached", "says that it could not rest, where nothing hinders it", "", "hold 3m |", pretendTrouble, "the pump is not blocked"},
		{"rest unreached", "does not say that it could not rest", "", "hold 3m |", pretendToClose, "the pump is not blocked"},
		{"angles", "writes the target for the proved angle", "", "| slip(signal_arm, at 4m, by 0.5 deg)", believeTarget, "was truly at"},
		{"angles", "proves an angle once", "", "| slip(signal_arm, at 4m0.6s, by 0.5 deg)", proveOnce, "was truly at"},
		{"places", "turns an arm into the open pump", "", "|", goBy(map[drivers.AxisName]unit.Angle{"signal_arm": 0}, true), `keep-out "pump_beam" was entered`},
		{"places", "lets the arms meet", "", "|", goBy(map[drivers.AxisName]unit.Angle{"signal_arm": -unit.Degree, "idler_arm": unit.Degree}, false), `keep-out "arms" was entered`},
		{"places", "turns beyond a limit", "", "|", goBy(map[drivers.AxisName]unit.Angle{"idler_arm": 13 * unit.Degree}, false), "its limits are"},
		{"searches", "searches zeros in its own order", "", "| restart(rotary, at 4m)", searchBackward, "out of the declared order"},
		{"searches", "searches zeros in the light", "", "| restart(rotary, at 4m)", searchInTheLight, "searches its zero with the pump open"},
		{"searches", "searches zeros with a detector open", "", "| restart(rotary, at 4m)", searchUnprotected, "searches its zero with the signal detector open"},
		{"searches", "searches zeros with nobody there", "attended", "| restart(rotary, at 4m)", searchAlone, "no person let it"},
		{"zeros", "keeps silent about a lost zero", "", "| restart(rotary, at 4m)", trustAnyZero, "nobody wrote down that its zero is lost"},
		{"zeros", "writes nothing of a lost zero", "", "| restart(rotary, at 4m)", withoutEvents(protocol.Trouble, protocol.HomedEvent, protocol.Held, protocol.TakenAgain), "nobody wrote down that its zero is lost|none of [trouble"},
		{"lights", "ignores too much light", "", "| lamp(at 4m, for 90s, rate 6000000 Hz)", ignoreLight, "still open"},
		{"lights", "protects too late", "", "| lamp(at 4m, for 90s, rate 6000000 Hz)", protectAfter(20 * time.Second), "still open|was in light above its trip rate for"},
		{"lights", "protects too late while the counter is silent", "", "| lamp(at 4m, for 90s, rate 6000000 Hz); silent(counter, at 4m0.2s, for 1m)", protectAfter(20 * time.Second), "still open"},
		{"lights", "counts in too much light", "", "| lamp(at 4m, for 90s, rate 6000000 Hz)", ignoreLight, "was accepted, and the"},
		{"pump and shields", "takes darks with the pump open", "", "|", darkInTheLight, "is a dark, and the pump was open"},
		{"pump and shields", "takes light with the pump closed", "", "|", lightInTheDark, "is not dark, and the pump was open during 0 of"},
		{"pump and shields", "does not see a shield fall shut", "", "|", trustShutter, "detector was covered during part of"},
		{"kills", "keeps silent about an interruption", "", "kill gated:30 |", forgetInterruption, "no interruption is written|before the interruption was"},
		{"kills", "calls an interruption something else", "", "kill gated:30 |", event(of(protocol.Interrupted, func(e *protocol.Event) { e.Kind = protocol.Trouble })), "no interruption is written|before the interruption was"},
		{"stops", "counts on after a stop was answered", "", "stop 3m |", countAfterStop, "is stopped"},
		{"stops", "moves on after a stop was answered", "", "stop 3m |", moveAfterStop, "is stopped"},
		{"troubles", "mends a lost line silently", "", "| unplug(rotary, at 4m, for 10s)", reconnectSilently, "took effect, and none of"},
		{"troubles", "writes nothing of a lost line", "", "| unplug(rotary, at 4m, for 10s)", withoutEvents(protocol.Trouble, protocol.Held, protocol.TakenAgain), "took effect, and none of|is attempt 2, and 0 failed before it"},
		{"reasons", "ends without a reason", "", "stop 3m |", event(of(protocol.Ended, func(e *protocol.Event) { e.Text = "" })), "without a reason"},
		{"reasons", "does not say who stopped it", "", "stop 3m |", event(of(protocol.Ended, func(e *protocol.Event) { e.Text = "stopped" })), "does not say by whom"},
		{"reasons", "fails for nothing", "", "|", event(of(protocol.Ended, func(e *protocol.Event) {
			e.State, e.Text = protocol.Failed, "failed: the light was too bright"
		})), "failed in a night without trouble"},
		{"waits", "waits for a counter for an hour", "", "|", waitInCounter, "without a word"},
		{"waits", "waits for a stage for an hour", "", "|", waitInStage, "without a word"},
		{"references", "takes one place of a reference for another", watchedNight, "|", reading(3, reference(func(r *protocol.Reading) { r.Reference.Place += 2 })), "was due"},
		{"references", "takes a reference elsewhere", watchedNight, "|", reading(2, reference(func(r *protocol.Reading) { r.Angles[0].Target += unit.Degree })), "was to go to"},
		{"doubts", "doubts too little", watchedNight, fading, event(of(protocol.Doubted, func(e *protocol.Event) { e.Detail["from_sequence"] = e.Detail["from_sequence"].(float64) + 1 })), "so want"},
		{"doubts", "doubts too late", watchedNight, fading, event(of(protocol.Doubted, func(e *protocol.Event) { e.Detail["to_sequence"] = e.Detail["to_sequence"].(float64) + 1 })), "so want|are doubted by entry"},
		{"refinement", "moves before points are decided", watchedNight, "|", moveBeforeDecided, "after something had moved"},
		{"refinement", "writes a refinement under another number", watchedNight, "|", points(refined(func(p *protocol.Points) { p.Refined += 2 })), "is written as the 1th"},
		{"refinement", "numbers added points anew", watchedNight, "|", points(refined(func(p *protocol.Points) {
			for i := range p.Points {
				p.Points[i].Point -= 2
			}
		})), "was due"},
		{"settings", "takes a setting's value for set", delayNight, "|", pretendToSet, "truly was"},
		{"settings", "invents what a setting has", delayNight, "|", reading(9, light(func(r *protocol.Reading) { r.Settings[0].After += 0.5 })), "truly was"},
		{"sensors", "adorns a sensor's value", "", "|", adornSensor, "which it did not answer"},
		{"sensors", "invents a sensor's mean", "", "|", reading(9, byHerald(1.1)), "which it did not answer"},
		{"guards", "reads a guarded sensor once", guardedNight, fading, stickSensor, "the guard wants"},
		{"guards", "never lets a guard break", guardedNight, fading, widenGuard, "the guard wants"},
		{"plan", "writes a visit under another number", "", "|", reading(9, light(func(r *protocol.Reading) { *r.Visit = 2 })), "the plan's order has"},
		{"plan", "writes other targets than were decided", "", "|", reading(9, light(func(r *protocol.Reading) { r.Angles[0].Target += unit.Degree })), "was to go to"},
		{"plan", "leaves out a dark", "", "|", withoutDark(3), "without a dark"},
		{"plan", "leaves out the closing dark", "", "|", withoutDark(6), "without a closing dark"},
		{"attempts", "counts attempts wrongly", "", "|", reading(9, light(func(r *protocol.Reading) { r.Attempt = 2 })), "is attempt 2"},
		{"attempts", "counts more attempts than are allowed", "", "|", reading(9, light(func(r *protocol.Reading) { r.Attempt = 5 })), "the recipe allows"},
		{"attempts", "carries attempts over what was given up", givenUpNight, "| silent(counter, at 12s, for 15s)", reading(1, reference(func(r *protocol.Reading) { r.Attempt = 2 })), "is attempt 2, and 0 failed before it"},
		{"shuffles", "takes another order than it wrote", shuffledNight, "|", points(func(p *protocol.Points) bool {
			p.Grounds = "sweep, shuffled by seed 1"
			return true
		}), "the plan's order has"},
		{"shuffles", "swaps two visits", shuffledNight, "|", reading(9, light(func(r *protocol.Reading) { *r.Point = (*r.Point + 1) % 55 })), "the plan's order has"},
		{"gates", "counts in a gate that never opened", "", "|", forged(30, world(instruments.GateOpened), func(line []Moment, i int) []Moment { return slices.Delete(line, i, i+1) }), "never seen to open"},
		{"gates", "accepts a reading without a slice", "", "|", reading(9, light(func(r *protocol.Reading) { r.Slices = nil })), "without a slice"},
		{"gate lengths", "writes another length of a gate", "", "|", reading(9, light(func(r *protocol.Reading) { r.Slices[0].Gate += protocol.Seconds(20 * time.Millisecond) })), "lasted"},
		{"gate lengths", "says that gates are longer than they are", "", "|", stretchGates, "lasted"},
		{"doubts of the counter", "takes a gate that the counter doubts", "", "| wrong_gate(counter, at 4m, share 0.2)", believeCounter, "is doubtful (true)"},
		{"doubts of the counter", "takes an overflow for a count", "", "| overflow(counter, at 4m)", believeCounter, "ran over (true)"},
		{"times", "writes that a reading was over before its gate", "", "|", reading(9, light(func(r *protocol.Reading) { r.EndedAt.Time = r.StartedAt.Add(time.Second) })), "is said to last"},
		{"times", "writes that a reading began after its gate", "", "|", reading(9, light(func(r *protocol.Reading) { r.StartedAt.Time = r.EndedAt.Time })), "is said to last"},
		{"bodies", "writes points that nobody can read", "", "|", unreadable(protocol.PointEntry, 1), "unexpected end of JSON"},
		{"bodies", "writes a reading that nobody can read", "", "|", unreadable(protocol.ReadingEntry, 20), "unexpected end of JSON"},
		{"bodies", "writes a result that nobody can read", ringNight, "|", unreadable(protocol.ResultEntry, 1), "unexpected end of JSON|invalid character"},
		{"bodies", "writes an event that nobody can read", "", "|", unreadable(protocol.EventEntry, 2), "unexpected end of JSON"},
		{"rest", "opens a shield in a hold", "", "hold 3m |", openInAHold(false), "shield was told to open while"},
		{"rest", "opens the pump in a hold", "", "hold 3m |", openInAHold(true), "shutter was told to open while"},
		{"rest", "leaves a gate open in a hold", "", "hold 3m |", leaveGateOpen, "a gate is open"},
		{"rest", "leaves a gate open in a stop", "", "stop 3m |", leaveGateOpen, "a gate is open"},
		{"rest", "holds while an arm still turns", "", "hold 3m |", turnsStill(heldWord), "rotary still turns"},
		{"rest", "ends while an arm still turns", "", "stop 3m |", turnsStill(`"state":"stopped"`), "rotary still turns"},
		{"causes", "holds without a cause", "", "hold 3m |", event(of(protocol.Held, func(e *protocol.Event) { e.Causes = nil })), "holding without a cause"},
		{"causes", "holds for light without saying so", "", "| lamp(at 4m, for 90s, rate 6000000 Hz)", event(of(protocol.Held, func(e *protocol.Event) { e.Causes = nil })), "holding without a cause"},
		{"places", "opens the pump before the signal's arm", "", "|", intoTheBeam("signal_arm"), "the pump was opened with an arm in keep-out"},
		{"places", "opens the pump before the idler's arm", "", "|", intoTheBeam("idler_arm"), "the pump was opened with an arm in keep-out"},
		{"lights", "protects far too late", "", "| lamp(at 4m, for 5m, rate 6000000 Hz)", protectAfter(2 * time.Minute), "was in light above its trip rate for"},
		{"floors", "takes a latched detector for a dark place", "", "| latched(idler, at 4m, for 5m)", ignoreFloor, "below its floor"},
		{"floors", "accepts what its floor set aside", "", "| latched(idler, at 4m, for 5m)", reading(1, setAside), "below its floor"},
		{"floors", "takes the mean of a long dwell for its rate", longDwell, "| latched(idler, at 5m, for 40s)", ignoreFloor, "below its floor"},
		{"death", "counts when it is dead", "", "kill gated:30 |", actsAlone(instruments.GateOpened), "while no process lives"},
		{"death", "moves when it is dead", "", "kill gated:30 |", actsAlone(instruments.MoveStarted), "while no process lives"},
		{"death", "does its last things after its death", "", "kill gated:30 |", diedEarlier(60), "while no process lives"},
		{"after a stop", "counts though a stop was answered", "", "stop 3m |", afterTheStop(countOn), "after the stop of run"},
		{"after a stop", "moves though a stop was answered", "", "stop 3m |", afterTheStop(moveOn), "after the stop of run"},
		{"answers", "answers a stop before it is written", "", "stop 3m |", writeLater(`"state":"stopped"`), "was answered before it was written"},
		{"answers", "answers a hold before it is written", "", "hold 3m |", writeLater(heldWord), "was answered before it was written"},
		{"the end", "writes on after the end", "", "|", oneMore(endedWord, func(e *protocol.Event) { e.Kind = protocol.Trouble }), "for ever"},
		{"the end", "goes on after a stop", "", "stop 3m |", oneMore(endedWord, func(e *protocol.Event) { e.Kind, e.State = protocol.WentOn, protocol.Running }), "for ever"},
		{"the end", "leaves a run unfinished", "", "|", event(of(protocol.Ended, func(e *protocol.Event) { e.State = protocol.Running })), "want it final"},
		{"the end", "finishes with a visit missing", "", "|", reading(110, light(func(r *protocol.Reading) { r.Accepted = false })), "was neither made nor given up"},
		{"stream", "publishes nothing", "", "|", publishNothing, "stuck: "},
		{"logbook", "lets a number of lost gates change in the logbook", "", "|", damage(`"lost_gates":`), "logbook: "},
		{"logbook", "lets a number of an attempt change in the logbook", "", "|", damage(`"attempt":`), "logbook: "},
		{"reasons", "gives no reason for a failure", "", "|", event(of(protocol.Ended, func(e *protocol.Event) { e.State, e.Text = protocol.Failed, "failed: no" })), "is no reason"},
		{"reasons", "fails for light where none was", "", "| missing(counter, answer 50)", event(of(protocol.Ended, func(e *protocol.Event) {
			e.State, e.Text = protocol.Failed, "failed: signal counts 3e+06 /s, above its trip rate of 2e+06 /s"
		})), "no lamp was on"},
		{"reasons", "fails for a lost zero where none was", "", "| missing(counter, answer 50)", event(of(protocol.Ended, func(e *protocol.Event) {
			e.State, e.Text = protocol.Failed, "failed: rotary lost the zero of signal_arm"
		})), "nothing happened to a stage"},
		{"references", "takes a reference that the plan does not have", "", "|", reading(9, light(func(r *protocol.Reading) {
			r.Kind, r.Reference = protocol.Reference, &protocol.ReferenceOf{Set: 1, Places: 1, On: "top"}
		})), "that the plan does not have"},
		{"references", "begins a reference a second time", watchedNight, "|", reading(1, reference2), "was begun already"},
		{"references", "takes more places than the plan has", watchedNight, "|", reading(2, reference(func(r *protocol.Reading) { r.Reference.Places = 9 })), "of 9; the plan has"},
		{"doubts", "doubts what was never written", watchedNight, fading, event(of(protocol.Doubted, func(e *protocol.Event) { e.Detail["to_sequence"] = 9999.0 })), "are doubted by entry"},
		{"slips", "doubts too little after a slip", stepsNight, slipping, event(of(protocol.Doubted, func(e *protocol.Event) { e.Detail["from_sequence"] = e.Detail["from_sequence"].(float64) + 3 })), "it was last known by entry"},
		{"slips", "doubts all but the last reading after a slip", stepsNight, slipping, event(of(protocol.Doubted, func(e *protocol.Event) { e.Detail["to_sequence"] = e.Detail["to_sequence"].(float64) - 1 })), "and the last reading is"},
		{"slips", "doubts nothing after a slip", stepsNight, slipping, withoutEvents(protocol.Doubted), "was truly at"},
		{"refinement", "refines before its visits are made", watchedNight, "|", reading(15, light(func(r *protocol.Reading) { r.Accepted = false })), "was decided before the visits"},
		{"refinement", "adds more points than are allowed", watchedNight, "|", points(refined(func(p *protocol.Points) {
			for len(p.Points) <= 30 {
				more := p.Points[0]
				more.Point += len(p.Points)
				p.Points = append(p.Points, more)
			}
		})), "the plan allows"},
		{"refinement", "ends refining without a word", watchedNight, "|", withoutPoints(func(p *protocol.Points) bool { return p.Refined > 0 && len(p.Points) == 0 }), "refining had no end"},
		{"settings", "sets a setting with a detector open", delayNight, "|", fidget(30), "with the idler detector open"},
		{"settings", "changes a setting while it counts", delayNight, "|", fidget(30), "while it was counted"},
		{"settings", "writes another value of a setting than was decided", delayNight, "|", reading(9, light(func(r *protocol.Reading) {
			for i := range r.Settings {
				r.Settings[i].Target += 0.5
			}
		})), "was to be"},
		{"guards", "accepts what its guard set aside", guardedNight, fading, reading(1, setAside), "was accepted with pump_power from"},
		{"plan", "decides other points than the plan's", "", "|", points(func(p *protocol.Points) bool { p.Points[3].Axes[0].Target += unit.Degree; return true }), "the plan has"},
		{"plan", "takes a point that was never decided", "", "|", reading(9, light(func(r *protocol.Reading) { *r.Point = 99 })), "are decided"},
		{"plan", "makes more visits than there are", "", "|", reading(6, func(r *protocol.Reading) bool {
			if r.Kind != protocol.Dark {
				return false
			}
			r.Kind, r.Point, r.Visit = protocol.Light, new(0), new(1)
			return true
		}), "and all visits were made"},
		{"plan", "leaves out the opening dark", "", "|", withoutDark(1), "no dark was taken at the start"},
		{"shuffles", "shuffles by two seeds", longShuffle, "stop 2m |", func() Sabotage {
			return rewritten(protocol.PointEntry, 2, func(p *protocol.Points) bool { p.Grounds = "sweep, shuffled by seed 1"; return true })
		}, "they were by"},
		{"left out", "says that too few visits are left out", shortNight, "|", event(cut(func(e *protocol.Event) { e.Detail["left_out"] = e.Detail["left_out"].(float64) - 1 })), "are said to be left out"},
		{"left out", "says that too many visits are left out", shortNight, "|", event(cut(func(e *protocol.Event) { e.Detail["left_out"] = e.Detail["left_out"].(float64) + 1 })), "are said to be left out"},
		{"queue", "takes the last run first", ringNight, "|", queueBackward, "was to come first"},
		{"queue", "begins a run while another is under way", ringNight, "|", beginsEarly, "is running"},
		{"queue", "begins a run that nobody asked for", "", "|", func() Sabotage { return Sabotage{Facts: func(f *Facts) { clear(f.Plans) }} }, "nobody asked for it"},
		{"earlier values", "writes another value than the last", ringNight, "|", points(taken(func(v *protocol.EarlierValue) { *v.Angle += unit.Degree / 10 })), "is written as"},
		{"earlier values", "takes a value that nobody measured", ringNight, "|", points(taken(func(v *protocol.EarlierValue) { v.Sequence-- })), "is written as"},
		{"earlier values", "takes a value without saying so", ringNight, "|", points(func(p *protocol.Points) bool {
			had := len(p.Earlier) > 0
			p.Earlier = nil
			return had
		}), "is not written with them"},
		{"earlier values", "takes a value of a result that is not there", ringNight, "|", forged(1, entry(protocol.ResultEntry), func(line []Moment, i int) []Moment { return slices.Delete(line, i, i+1) }), "there is none"},
		{"earlier values", "writes a value as more certain than it is", vagueNight, "|", flatter(func(r *resultSeen) { u := 1e-6; r.U = &u }), "is written as"},
		{"earlier values", "takes a value that is too uncertain", ringNight, "|", func() Sabotage { return Sabotage{Facts: demandMore} }, "is uncertain by"},
		{"earlier values", "takes a value that is too old", staleNight, "|", flatter(func(r *resultSeen) { r.At.Time = r.At.Add(time.Hour) }), "old; want at most"},
		{"schedule", "begins too early", lateNight, "|", reading(1, light(func(r *protocol.Reading) { r.StartedAt.Time = r.StartedAt.Add(-4 * time.Minute) })), "was taken before"},
		{"schedule", "begins on the day before", lateNight, "|", reading(3, light(func(r *protocol.Reading) { r.StartedAt.Time = r.StartedAt.Add(-24 * time.Hour) })), "was taken before"},
		{"warm-up", "leaves the warm-up out", warmNight, "|", withoutEvents(protocol.GuardMended), "before the bench was found steady"},
		{"warm-up", "takes a drifting bench for steady", warmNight, "| pump_drift(at 1s, for 5m, share -0.3)", stickSensor, "is called steady"},
		{"left out", "counts on when the rest is left out", shortNight, "|", oneMore(`"point":30,"visit":1,"accepted":true`, func(e *protocol.Event) {
			*e = protocol.Event{Head: e.Head, Kind: protocol.SetAside, Text: "79 visits are left out", State: protocol.Running, Causes: []protocol.Cause{}, Detail: map[string]any{"task": "rest", "left_out": 79}}
		}), "was left out before it"},
		{"resumed", "forgets after a restart what was taken", "", "kill written:30 |", forgetOneTaken, "accepted already"},
		{"resumed", "takes for taken after a restart what was not", "", "kill written:30 |", rememberOneMore, "the plan's order has|neither made nor given up"},
	}
	caught, said := 0, map[string]bool{}
	t.Cleanup(func() {
		if t.Failed() || caught < len(rows) {
			return // not all were played, or not all were found
		}
		t.Logf("%d sabotages of %d invariants, each found in the one night that it was played in", caught, len(kept))
		for _, sentence := range sentences(t) {
			if !said[sentence] {
				t.Errorf("in %d nights the judge never said %q; want a sabotage that makes it", caught, sentence)
			}
		}
	})
	for i, row := range rows {
		kept[row.invariant]++
		if (raced || testing.Short()) && i%10 != 0 {
			continue // the judge is one goroutine: what the detector is to see, a few nights show
		}
		t.Run(row.name, func(t *testing.T) {
			t.Parallel()
			words, recipe, found := strings.Cut(row.night, between)
			if !found {
				recipe = oneLine(small)
			}
			if words == "" {
				words = "plain"
			}
			d, err := ParseNight(family(t), strings.Join([]string{words, recipe, row.script}, between))
			if err != nil {
				t.Fatal(err)
			}
			n := d.Night
			n.Daemon = len(n.Before) > 0 // else a panic is a test's, too
			if wrong := control(t, words+recipe, n); len(wrong) > 0 {
				t.Fatalf("the night is not flawless without the sabotage: %q", wrong[0])
			}
			n.Wrap = row.make()
			v := play(t, n).Examine()
			wrong := v.Wrong
			seen := slices.ContainsFunc(wrong, func(w string) bool {
				return slices.ContainsFunc(strings.Split(row.found, "|"), func(f string) bool { return strings.Contains(w, f) })
			})
			if !seen {
				t.Errorf("the judge says %q; want %q in it", wrong[:min(3, len(wrong))], row.found)
				return
			}
			mu.Lock()
			defer mu.Unlock()
			caught++
			for _, sentence := range v.Said {
				said[sentence] = true
			}
		})
	}
	for invariant, n := range kept {
		if n < 2 {
			t.Errorf("%s is broken by %d sabotage; want two at least", invariant, n)
		}
	}
}

// sentences lists the forms of all that the judge may say, from its source.
func sentences(t *testing.T) (all []string) {
	t.Helper()
	files, err := filepath.Glob("judge*.go")
	if err != nil || len(files) == 0 {
		t.Fatalf("%d files of the judge: %v", len(files), err)
	}
	for _, file := range files {
		tree, err := parser.ParseFile(token.NewFileSet(), file, nil, 0)
		if err != nil {
			t.Fatal(err)
		}
		ast.Inspect(tree, func(n ast.Node) bool {
			call, ok := n.(*ast.CallExpr)
			if !ok {
				return true
			}
			if f, ok := call.Fun.(*ast.SelectorExpr); ok && f.Sel.Name == "say" {
				text, err := strconv.Unquote(call.Args[0].(*ast.BasicLit).Value)
				if err != nil {
					t.Fatal(err)
				}
				all = append(all, text)
			}
			return true
		})
	}
	return all
}

// Nights of rows that small shows nothing in.
var (
	watchedNight  = "plain" + between + oneLine(watched)
	delayNight    = "plain" + between + `{title: Delays, sweep: [{axis: signal_arm, at: 2.864 deg}, {setting: delay, from: 15 ns, to: 25 ns, step: 0.5 ns}], dwell: 2 s, repeat: {times: 3, as: passes}}`
	givenUpNight  = "plain" + between + `{title: Given up, sweep: [{axis: signal_arm, at: 2.864 deg}, {axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}], dwell: 2 s, reference: {axes: [signal_arm], on: [low_flank, top, high_flank], at: {signal_arm: 2.864 deg, idler_arm: 2.864 deg}, every: 6 points, dwell: 4 s, also: [start], otherwise: note}, trouble: {retries: 1, then: skip}}`
	guardedNight  = "plain" + between + `{title: Guarded, sweep: [{axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}], dwell: 4 s, repeat: {times: 8, as: passes}, guards: [{watch: pump_power, within: [42 mW, 48 mW], otherwise: stop}]}`
	ringNight     = "plain" + between + findRing + between + useRing("not_older_than: 12 h")
	vagueNight    = "plain" + between + findRing + between + useRing("u_below: 0.00001 deg")
	staleNight    = "plain" + between + findRing + between + `{title: Between, sweep: [{axis: idler_arm, at: 2.864 deg}], dwell: 20 s, repeat: {times: 9, as: passes}}` + between + useRing("not_older_than: 1 min")
	lateNight     = "plain" + between + strings.Replace(oneLine(small), "trouble:", `schedule: {not_before: "00:03"}, trouble:`, 1)
	warmNight     = "plain" + between + `{title: Warm, sweep: [{axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}], dwell: 4 s, schedule: {warm_up: {steady: {pump_power: 5 % over 1 min}, at_most: 20 min}}}`
	stepsNight    = "steps" + between + oneLine(small)
	shortNight    = "plain" + between + strings.Replace(oneLine(small), "trouble:", `schedule: {finish_by: "00:05"}, trouble:`, 1)
	longShuffle   = "plain" + between + `{title: Long, sweep: [{axis: signal_arm, around: 2.864 deg, span: 1.6 deg, step: 0.1 deg}, {axis: idler_arm, around: 2.864 deg, span: 3 deg, step: 0.1 deg}], order: shuffled, dwell: 2 s}`
	longDwell     = "plain" + between + `{title: Long dwells, sweep: [{axis: idler_arm, at: [2.864 deg, 3 deg]}], dwell: {time: 10 min, slice: 2 s}, trouble: {retries: 3, then: hold}}`
	shuffledNight = "plain" + between + strings.Replace(oneLine(small), "order: serpentine", "order: shuffled", 1)
)

const findRing = `{title: Find the ring, sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: idler_arm, at: 2.864 deg}, {axis: signal_arm, around: 2.864 deg, span: 1.2 deg, step: 0.1 deg}], dwell: 2 s, result: {kind: peak, of: signal, along: signal_arm, profile: gaussian}}`

// useRing takes what findRing measured, or ends.
func useRing(condition string) string {
	return `{title: Use the ring, sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: {peak: signal_arm, from: Find the ring, ` + condition + `, otherwise: stop}}, {axis: idler_arm, from: 2.7 deg, to: 3 deg, step: 0.1 deg}], dwell: 2 s}`
}

// oneLine writes a recipe of top-level keys in flow style.
func oneLine(recipe string) string {
	var parts []string
	inList := false
	for l := range strings.SplitSeq(strings.TrimSpace(recipe), "\n") {
		item, isItem := strings.CutPrefix(strings.TrimSpace(l), "- ")
		switch {
		case isItem && inList:
			parts[len(parts)-1] += ", " + item
		case isItem:
			parts[len(parts)-1] += " [" + item
			inList = true
		case strings.HasPrefix(l, " "):
			parts[len(parts)-1] += " " + strings.TrimSpace(l)
		default:
			if inList {
				parts[len(parts)-1] += "]"
				inList = false
			}
			if title, is := strings.CutPrefix(l, "title: "); is {
				l = "title: " + strconv.Quote(title)
			}
			parts = append(parts, strings.TrimSpace(l))
		}
	}
	return "{" + strings.Join(parts, ", ") + "}"
}

func itoa(n int) string { b, _ := json.Marshal(n); return string(b) }

// echoPort answers a question for counts that is asked twice in a row from memory, under the new
// question's number.
type echoPort struct {
	line.Port
	mu            sync.Mutex
	asked, answer []byte
	replay        []byte
}

var questionNumber = regexp.MustCompile(`\*ESE ([0-9]+)`)

func (p *echoPort) Write(b []byte) (int, error) {
	p.mu.Lock()
	same := bytes.Contains(b, []byte("FETC")) && bytes.Equal(questionNumber.ReplaceAll(b, nil), questionNumber.ReplaceAll(p.asked, nil))
	if same && bytes.HasSuffix(p.answer, []byte("\n")) {
		number := questionNumber.FindSubmatch(b)[1]
		cut := bytes.LastIndexByte(p.answer, ';') + 1
		p.replay = slices.Concat(p.answer[:cut], number, []byte("\n"))
		p.asked = nil
		p.mu.Unlock()
		return len(b), nil
	}
	p.asked, p.answer = slices.Clone(b), nil
	p.mu.Unlock()
	return p.Port.Write(b)
}

func (p *echoPort) Read(b []byte) (int, error) {
	p.mu.Lock()
	if len(p.replay) > 0 {
		n := copy(b, p.replay)
		p.replay = p.replay[n:]
		p.mu.Unlock()
		return n, nil
	}
	p.mu.Unlock()
	n, err := p.Port.Read(b)
	p.mu.Lock()
	p.answer = append(p.answer, b[:n]...)
	p.mu.Unlock()
	return n, err
}

func skipSecondRead() Sabotage {
	return Sabotage{Port: func(name string, p line.Port) line.Port {
		if name != "counter" {
			return p
		}
		return &echoPort{Port: p}
	}}
}

// book passes everything on, and lets a row change what is appended.
type book struct {
	Book
	append func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error
}

func (b *book) Append(ctx context.Context, e protocol.Entry) error {
	return b.append(ctx, e, b.Book.Append)
}

func onAppend(f func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error) func(Book) Book {
	return func(inner Book) Book { return &book{inner, f} }
}

func publishEarly() Sabotage {
	var sink courier.Sink
	return Sabotage{
		Sink: func(s courier.Sink) courier.Sink { sink = s; return s },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			if e.Kind == protocol.ReadingEntry {
				after, err := sink.Last(ctx)
				if err == nil {
					_, _ = sink.Publish(ctx, courier.Message{Subject: protocol.Subject("skerry", e.Kind, e.Run), ID: e.ID(), Body: e.Body}, after)
				}
			}
			return on(ctx, e)
		}),
	}
}

type otherBytes struct{ courier.Sink }

func (s otherBytes) Publish(ctx context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	m.Body = append(slices.Clone(m.Body), ' ')
	return s.Sink.Publish(ctx, m, after)
}

func publishOtherBytes() Sabotage {
	return Sabotage{Sink: func(s courier.Sink) courier.Sink { return otherBytes{s} }}
}

func gateBeforeCommit() Sabotage {
	var counter drivers.Counter
	n := 0
	return Sabotage{
		Bench: func(b *engine.Bench) { counter = b.Counter },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			if n++; n == 20 {
				_, _ = counter.Count(ctx, time.Second)
			}
			return on(ctx, e)
		}),
	}
}

func moveBeforeCommit() Sabotage {
	var stage drivers.Stage
	n := 0
	return Sabotage{
		Bench: func(b *engine.Bench) { stage = b.Stages[0] },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			if n++; n == 20 {
				_ = stage.Move(ctx, map[drivers.AxisName]unit.Angle{"signal_arm": 2 * unit.Degree})
			}
			return on(ctx, e)
		}),
	}
}

// liar says that it closed, and did not, once lying is set.
type liar struct {
	drivers.Shutter
	lies func() bool
}

func (l *liar) Close(ctx context.Context) error {
	if l.lies() {
		return nil
	}
	return l.Shutter.Close(ctx)
}

func (l *liar) State(ctx context.Context) (drivers.Blade, error) {
	if l.lies() {
		return drivers.Blade{Open: false}, nil
	}
	return l.Shutter.State(ctx)
}

func forgetShutterOnPanic() Sabotage {
	lying, lit := false, 0
	return Sabotage{
		Panics: engine.StepLit, AtPart: 12,
		Bench: func(b *engine.Bench) {
			b.Counter = &countingCounter{Counter: b.Counter, before: func() {}}
			b.Pump = &liar{b.Pump, func() bool { return lying }}
			// After the twelfth light the engine panics; what closes the shutter then is a lie.
			for i := range b.Detectors {
				if b.Detectors[i].Protect != nil && i == 0 {
					b.Detectors[i].Protect = &onOpen{b.Detectors[i].Protect, func() {
						if lit++; lit >= 11 {
							lying = true
						}
					}}
				}
			}
		},
	}
}

type onOpen struct {
	drivers.Shutter
	opened func()
}

func (o *onOpen) Open(ctx context.Context) error {
	err := o.Shutter.Open(ctx)
	o.opened()
	return err
}

type countingCounter struct {
	drivers.Counter
	before func()
}

func (c *countingCounter) Count(ctx context.Context, gate time.Duration) (drivers.Gate, error) {
	c.before()
	return c.Counter.Count(ctx, gate)
}

func pretendToClose() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		began := time.Now()
		b.Pump = &liar{b.Pump, func() bool { return time.Since(began) > 2*time.Minute && time.Since(began) < 4*time.Minute }}
	}}
}

func forgetProtectors() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		began := time.Now()
		for i := range b.Detectors {
			b.Detectors[i].Protect = &liar{b.Detectors[i].Protect, func() bool { return time.Since(began) > 175*time.Second && time.Since(began) < 4*time.Minute }}
		}
	}}
}

// stuck is a shutter that answers what it was told, and leaves one of the two undone.
type stuck struct {
	drivers.Shutter
	opens, closes bool
	told          bool
}

func (s *stuck) Open(ctx context.Context) error {
	s.told = true
	if !s.opens {
		return nil
	}
	return s.Shutter.Open(ctx)
}

func (s *stuck) Close(ctx context.Context) error {
	s.told = false
	if !s.closes {
		return nil
	}
	return s.Shutter.Close(ctx)
}

func (s *stuck) State(context.Context) (drivers.Blade, error) {
	return drivers.Blade{Open: s.told, Sensed: true}, nil
}

func darkInTheLight() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Pump = &stuck{Shutter: b.Pump, opens: true} }}
}

func lightInTheDark() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		b.Pump = &stuck{Shutter: b.Pump, closes: true}
		for i := range b.Detectors {
			b.Detectors[i].FloorHz = 0
		}
	}}
}

func moveInAHold() Sabotage {
	var stage drivers.Stage
	return Sabotage{
		Bench: func(b *engine.Bench) { stage = b.Stages[0] },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			err := on(ctx, e)
			if bytes.Contains(e.Body, []byte(`"kind":"held"`)) {
				_ = stage.Move(ctx, map[drivers.AxisName]unit.Angle{"signal_arm": 2 * unit.Degree})
			}
			return err
		}),
	}
}

// refuser answers no close, and so makes the engine say that it could not rest.
type refuser struct {
	drivers.Shutter
	refuses func() bool
}

func (r *refuser) Close(ctx context.Context) error {
	if r.refuses() {
		return &drivers.Error{Op: "close", Device: r.Name(), Remedy: drivers.Retry, Err: context.DeadlineExceeded}
	}
	return r.Shutter.Close(ctx)
}

func pretendTrouble() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		began := time.Now()
		b.Pump = &refuser{b.Pump, func() bool { return time.Since(began) > 170*time.Second && time.Since(began) < 5*time.Minute }}
	}}
}

// renumber gives an entry another sequence, in its body too.
func renumber(e protocol.Entry, by int64) protocol.Entry {
	var body map[string]json.RawMessage
	if err := json.Unmarshal(e.Body, &body); err != nil {
		panic(err)
	}
	e.Sequence += by
	body["sequence"] = json.RawMessage(itoa(int(e.Sequence)))
	e.Body, _ = json.Marshal(body)
	return e
}

func newSequence() Sabotage {
	var by int64
	n := 0
	return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		err := on(ctx, renumber(e, by))
		if n++; n == 20 && err == nil {
			by++
			err = on(ctx, renumber(e, by))
		}
		return err
	})}
}

func loseReading() Sabotage {
	var by int64
	return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		if by == 0 && e.Sequence > 20 && e.Kind == protocol.ReadingEntry {
			by--
			return nil
		}
		return on(ctx, renumber(e, by))
	})}
}

func inventCount() Sabotage {
	return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		if e.Sequence == 20 && e.Kind == protocol.ReadingEntry {
			var r protocol.Reading
			if err := json.Unmarshal(e.Body, &r); err != nil {
				return err
			}
			r.Slices[0].Counts[0].Counts++
			r.Counts[0].Counts++
			e.Body, _ = json.Marshal(r)
		}
		return on(ctx, e)
	})}
}

func sumTwice() Sabotage {
	return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		if e.Sequence == 20 && e.Kind == protocol.ReadingEntry {
			var r protocol.Reading
			if err := json.Unmarshal(e.Body, &r); err != nil {
				return err
			}
			r.Counts[1].Counts += r.Slices[0].Counts[1].Counts
			e.Body, _ = json.Marshal(r)
		}
		return on(ctx, e)
	})}
}

// believer takes for true what it was told.
type believer struct {
	drivers.Stage
	told map[drivers.AxisName]unit.Angle
}

func (b *believer) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	maps.Copy(b.told, targets)
	return b.Stage.Move(ctx, targets)
}

func (b *believer) Where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	at, err := b.Stage.Where(ctx)
	for axis := range at {
		if angle, known := b.told[axis]; known {
			at[axis] = angle
		}
	}
	return at, err
}

func believeTarget() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		b.Stages[0] = &believer{b.Stages[0], map[drivers.AxisName]unit.Angle{}}
	}}
}

// trusting finds a lost zero again by itself and tells nobody.
type trusting struct{ drivers.Stage }

func (s trusting) again(ctx context.Context, err error) bool {
	if drivers.RemedyOf(err) != drivers.Reconnect && drivers.RemedyOf(err) != drivers.HomeAgain {
		return false
	}
	return s.Connect(ctx) == nil && s.Home(ctx, s.Axes()) == nil
}

func (s trusting) Where(ctx context.Context) (map[drivers.AxisName]unit.Angle, error) {
	at, err := s.Stage.Where(ctx)
	for range 3 {
		if !s.again(ctx, err) {
			break
		}
		at, err = s.Stage.Where(ctx)
	}
	return at, err
}

func (s trusting) Move(ctx context.Context, targets map[drivers.AxisName]unit.Angle) error {
	err := s.Stage.Move(ctx, targets)
	if s.again(ctx, err) {
		err = s.Stage.Move(ctx, targets)
	}
	return err
}

func trustAnyZero() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) { b.Stages[0] = trusting{b.Stages[0]} }}
}

func ignoreLight() Sabotage {
	return Sabotage{Bench: func(b *engine.Bench) {
		for i := range b.Detectors {
			b.Detectors[i].TripHz, b.Detectors[i].FloorHz = 0, 0
		}
	}}
}

func forgetInterruption() Sabotage {
	var by int64
	return Sabotage{Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
		if e.Kind == protocol.EventEntry && bytes.Contains(e.Body, []byte(`"kind":"interrupted"`)) {
			by--
			return nil
		}
		return on(ctx, renumber(e, by))
	})}
}

func countAfterStop() Sabotage {
	var counter drivers.Counter
	return Sabotage{
		Bench: func(b *engine.Bench) { counter = b.Counter },
		Book: onAppend(func(ctx context.Context, e protocol.Entry, on func(context.Context, protocol.Entry) error) error {
			err := on(ctx, e)
			if bytes.Contains(e.Body, []byte(`"state":"stopped"`)) {
				_, _ = counter.Count(context.Background(), 10*time.Millisecond)
			}
			return err
		}),
	}
}
