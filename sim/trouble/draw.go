package trouble

import (
	"math/rand/v2"
	"slices"
	"time"
)

// Target is a device that Draw may trouble.
type Target struct {
	Device  string
	Answers int           // wire troubles fall on answers 1 to this; 0: none
	Longest time.Duration // the longest answer its line declares: no late answer is later
	Chatter []string      // lines it is declared to send unasked; empty: a line nobody declared
	Restart bool          // it may start anew
	Unplug  bool          // its line may go away
	Axes    []string      // axes that may slip or lose steps
	May     []Kind        // what else may happen to it, or to its axes; a Latched one is an arm
}

// Night says what Draw may draw from.
type Night struct {
	Targets []Target
	For     time.Duration // world troubles begin within this bench time
	Kinds   []Kind        // empty: the five wire troubles, restart and lamp
	LampHz  float64       // the brightest lamp; 0: 1 MHz
}

// Draw draws up to n troubles. Kinds that no target allows are never drawn, so the list can be
// shorter. No answer is troubled twice; one in four wire troubles falls on the answer right after
// the last one's, so that both readings of a pair are hit too.
func Draw(rng *rand.Rand, night Night, n int) List {
	kinds := night.Kinds
	if len(kinds) == 0 {
		kinds = []Kind{Missing, Garbled, Late, Duplicated, Unasked, Restart, Lamp}
	}
	lampHz := night.LampHz
	if lampHz == 0 {
		lampHz = 1e6
	}
	type answer struct {
		device string
		number int
	}
	taken := map[answer]bool{}
	var last Trouble
	var l List
	for range n {
		t := Trouble{Kind: kinds[rng.IntN(len(kinds))]}
		fits := night.fits(t.Kind)
		switch {
		case !t.Wired() && !t.Kind.OfDevice() && !t.Kind.OfAxis() && t.Kind != Latched:
			t.At = within(rng, night.For)
		case len(fits) == 0:
			continue
		default:
			g := fits[rng.IntN(len(fits))]
			t.Device = g.Device
			switch {
			case t.Kind.OfAxis():
				t.Device = g.Axes[rng.IntN(len(g.Axes))]
				t.At = within(rng, night.For)
			case !t.Wired():
				t.At = within(rng, night.For)
			default:
				t.Answer = 1 + rng.IntN(g.Answers)
				if last.Device == g.Device && last.Answer > 0 && last.Answer < g.Answers && rng.IntN(4) == 0 {
					t.Answer = last.Answer + 1
				}
				if taken[answer{t.Device, t.Answer}] {
					continue
				}
				taken[answer{t.Device, t.Answer}] = true
				t.wire(rng, g)
			}
		}
		switch t.Kind {
		case Lamp:
			t.For = time.Duration(1+rng.IntN(90)) * time.Second
			t.RateHz = float64(1+rng.IntN(100)) * lampHz / 100
		case PumpDrift:
			t.For = time.Duration(1+rng.IntN(60)) * time.Minute
			t.Share = float64(rng.IntN(41)-20) / 100
		case Unplug, Stranger, Hung:
			t.For = time.Duration(1+rng.IntN(20)) * time.Second
		case Silent, Latched, StuckValue, StuckShutter:
			t.For = time.Duration(1+rng.IntN(300)) * time.Second
		case ModeHop:
			t.ByNm = eitherWay(rng, float64(2+rng.IntN(30))/100)
		case TemperatureDrift:
			t.For = time.Duration(1+rng.IntN(60)) * time.Minute
			t.ByCel = eitherWay(rng, float64(1+rng.IntN(80))/10)
		case WrongGate:
			t.Share = eitherWay(rng, float64(5+rng.IntN(46))/100)
		case Slip, LostSteps:
			t.ByDeg = eitherWay(rng, float64(1+rng.IntN(200))/100)
		}
		last = t
		l = append(l, t)
	}
	return l
}

func eitherWay(rng *rand.Rand, x float64) float64 {
	if rng.IntN(2) == 0 {
		return -x
	}
	return x
}

func (t *Trouble) wire(rng *rand.Rand, g Target) {
	switch t.Kind {
	case Garbled:
		t.Byte = rng.IntN(64)
		if rng.IntN(3) > 0 {
			t.As = byte('0' + rng.IntN(10)) // a digit becomes another digit: the nasty case
		} else {
			t.As = byte(1 + rng.IntN(254))
			if t.As == '\n' || t.As == '\r' {
				t.As = ' '
			}
		}
	case Late:
		longest := max(g.Longest, time.Millisecond)
		t.By = time.Millisecond * time.Duration(1+rng.Int64N(int64(longest/time.Millisecond)))
		t.By = min(t.By, g.Longest)
	case Split:
		t.Byte = rng.IntN(64)
		t.By = max(1, time.Duration(rng.Int64N(int64(max(g.Longest*9/10, 2))))) // the rest of it is within the longest answer
	case Unasked:
		if len(g.Chatter) > 0 {
			t.Text = g.Chatter[rng.IntN(len(g.Chatter))]
		} else {
			undeclared := []string{"?", "0", "+1,+1,+1", "ready"}
			t.Text = undeclared[rng.IntN(len(undeclared))]
		}
	}
}

func within(rng *rand.Rand, d time.Duration) time.Duration {
	return time.Duration(rng.Int64N(max(1, int64(d/time.Millisecond)))) * time.Millisecond
}

func (n Night) fits(k Kind) []Target {
	var fits []Target
	for _, g := range n.Targets {
		ok := g.Answers > 0
		switch k {
		case Restart:
			ok = g.Restart
		case Unplug:
			ok = g.Unplug
		case Slip, LostSteps:
			ok = len(g.Axes) > 0
		default:
			if !(Trouble{Kind: k}).Wired() {
				ok = slices.Contains(g.May, k) && (!k.OfAxis() || len(g.Axes) > 0)
			}
		}
		if ok {
			fits = append(fits, g)
		}
	}
	return fits
}
