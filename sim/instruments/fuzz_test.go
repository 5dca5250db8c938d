package instruments

import (
	"math"
	"strings"
	"testing"
	"time"

	"gemel/sim/source"
)

func FuzzBlock(f *testing.F) {
	for _, s := range []string{"G90 G0 A12.34", "N10 G1 A3 B4 F60 (msg)", "/G92.1", "g0a-.5", "G0 A1E3", "((", "G1.1"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, line string) {
		b, err := parseBlock(line, "AB")
		if err != nil {
			return
		}
		if len(b.axes) > 2 || math.IsNaN(b.feed) || b.feed < 0 {
			t.Errorf("%q is accepted as %+v", line, b)
		}
		for _, w := range b.axes {
			if math.IsNaN(w.deg) || math.IsInf(w.deg, 0) && len(line) < 200 {
				t.Errorf("%q is accepted with %s %v", line, w.letter, w.deg)
			}
		}
		// Letter case and spaces mean nothing.
		if _, err := parseBlock(" "+strings.ToLower(line), "AB"); err != nil && len(line) < maxBlock && !strings.ContainsAny(line, "()") {
			t.Errorf("%q is accepted, in small letters it is not: %v", line, err)
		}
	})
}

func FuzzSCPI(f *testing.F) {
	for _, s := range []string{"*IDN?", ":SYST:ERR?;*ESE 5;*ESE?", ":TEST:VALUE 1.5E3 MS,\"a;b\"", "*OPC?;*WAI", "TEST2:VAL?", ":A:B:;;", "*ESE #HFF", "'", "(@1,2"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, message string) {
		answers := 0
		s := session{identity: func() Identity { return Identity{} }, in: lines{limit: scpiMessageLimit}, rst: func(time.Time) {}, pending: func(time.Time) bool { return false },
			answer: func(_ time.Time, line string) {
				answers++
				if len(line) > 64*len(message)+64 {
					t.Errorf("%q is answered with %d bytes", message, len(line))
				}
			}}
		value := 0.0
		q := quantity{low: -10, high: 10, units: secondUnits}
		s.tree = compile(append(s.base(), scpiCommand{pattern: "TEST#[:MORE]:VALue",
			set: func(c scpiCall) (err *scpiError) {
				var v float64
				if v, err = q.argument(c.args); err == nil {
					value = v
				}
				return err
			},
			ask: func(c scpiCall) (string, *scpiError) { v, err := q.asked(c, value); return nr3(v), err }}))
		s.powerOn()
		for i := range len(message) {
			s.heard(time.Time{}, message[i])
		}
		s.heard(time.Time{}, '\n')
		if n := strings.Count(message, "\n") + 1; answers > n {
			t.Errorf("%q: %d answers to %d messages", message, answers, n)
		}
		if len(s.errors) > scpiErrorQueueLength || len(s.queue)+len(s.units)+len(s.answers) > 0 || s.busy {
			t.Errorf("%q leaves %d errors, %d messages, %d units, %d answers behind", message, len(s.errors), len(s.queue), len(s.units), len(s.answers))
		}
		if !(value >= -10 && value <= 10) {
			t.Errorf("%q sets %v", message, value)
		}
	})
}

// FuzzMechanism lets an axis be moved, stopped, pushed and restarted in any order: it must stay
// where physics lets it be, and never jump but where it is pushed.
func FuzzMechanism(f *testing.F) {
	f.Add([]byte{0, 100, 1, 3, 50, 2, 4, 9, 5, 1})
	f.Add([]byte{0, 1, 0, 200, 0, 3, 3, 1, 4, 255, 6, 2, 5, 0, 0, 90})
	f.Fuzz(func(t *testing.T, script []byte) {
		at := time.Unix(0, 0)
		p := newPath(at, 0, 0.05, len(script)%2 == 0)
		for i := 0; i+1 < len(script) && i < 200; i += 2 {
			arg := float64(script[i+1])
			before := p.axis(at)
			switch script[i] % 5 {
			case 0:
				end, x := p.end()
				if d := math.Abs(arg - x); d > 0 {
					if end.Before(at) {
						end = at
					}
					p.follow(end, arg, newProfile(10/d, 20/d))
				}
			case 1:
				_, v := p.motor(at)
				p.slow(at, time.Duration(math.Abs(v)/20*1e9))
			case 2:
				p.halt(at)
			case 3:
				p.shift(at, arg/100)
				before += arg / 100
			case 4:
				p.prune(at)
			}
			if got := p.axis(at); math.Abs(got-before) > 1e-6 {
				t.Fatalf("step %d (%d): the axis jumps from %.9f to %.9f", i/2, script[i]%5, before, got)
			}
			next := at.Add(time.Duration(arg) * 37 * time.Millisecond)
			low, high := p.reach(at, next)
			for k := range 20 {
				mid := at.Add(next.Sub(at) * time.Duration(k) / 20)
				x := p.axis(mid)
				m, v := p.motor(mid)
				if math.Abs(x-m) > 0.05+1e-6 || math.Abs(v) > 10.01 || x < low-1e-6 || x > high+1e-6 {
					t.Fatalf("step %d: axis %.6f, motor %.6f at %.3f deg/s, reach %.6f to %.6f", i/2, x, m, v, low, high)
				}
			}
			at = next
		}
	})
}

// Whatever comes over the line, a controller answers in whole lines and its axes stay within its limits and
// the way to its reference.
func FuzzControllers(f *testing.F) {
	for _, s := range []string{"M1 500000\nP1\nS1\n", "H1\nR1\nX\n", "M1 -99999999999\n", "\x18P1\r\n", "G90 G0 A50\nWHERE\nREST\n\x03", "MARK A\nREF A\nREFD\n", "G1 A1 F0.001\n", "M1 1\x18\n\n", "WHO\nI\n"} {
		f.Add([]byte(s), true)
		f.Add([]byte(s), false)
	}
	f.Fuzz(func(t *testing.T, text []byte, plain bool) {
		w, err := NewWorld(WorldConfig{Model: new(source.Model)})
		if err != nil {
			t.Fatal(err)
		}
		axis := AxisConfig{Letter: "A", Axis: "one", LowDeg: -60, HighDeg: 60, SpeedDegS: 10, AccelDegS2: 20, BacklashDeg: 0.1, StepsPerDeg: 1000, Homed: true}
		var hear func(time.Time, byte)
		var a *actor
		if plain {
			axis.Letter = "1"
			p, err := NewPlain(w, PlainConfig{Name: "p", Axes: []AxisConfig{axis}})
			if err != nil {
				t.Fatal(err)
			}
			hear, a = p.heard, &p.actor
		} else {
			r, err := NewRotary(w, RotaryConfig{Name: "r", Axes: []AxisConfig{axis}})
			if err != nil {
				t.Fatal(err)
			}
			hear, a = r.heard, &r.actor
		}
		now := w.origin
		for i, b := range text[:min(len(text), 400)] {
			now = now.Add(time.Duration(i%7) * 100 * time.Millisecond)
			w.settle(now)
			hear(now, b)
			if deg := w.axes[0].path.axis(now); math.IsNaN(deg) || deg < -60-RunUpDeg-0.2 || deg > 60+RunUpDeg+0.2 {
				t.Fatalf("after %q the axis stands at %g deg", text[:i+1], deg)
			}
		}
		w.settle(now.Add(24 * time.Hour))
		for _, s := range a.out {
			if strings.Count(s.text, "\n") != 1 || !strings.HasSuffix(s.text, "\n") || len(s.text) > 1000 {
				t.Fatalf("%q is answered %q; want one line", text, s.text)
			}
		}
		if len(w.ledger.Records()) > 0 && w.axes[0].seeking {
			t.Fatalf("after %q it seeks for ever", text)
		}
	})
}
