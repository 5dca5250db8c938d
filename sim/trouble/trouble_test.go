package trouble_test

import (
	"math/rand/v2"
	"reflect"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/sim/trouble"
)

func bench() trouble.Night {
	return trouble.Night{For: 8 * time.Hour, Kinds: trouble.Kinds(), Targets: []trouble.Target{
		{Device: "stage", Answers: 1000, Longest: 800 * time.Millisecond, Chatter: []string{"T=21.4", `a "quoted", (odd); line`}, Restart: true, Unplug: true, Axes: []string{"signal_arm", "idler_arm"}, May: []trouble.Kind{trouble.RestartMoving, trouble.Stall, trouble.Gone, trouble.Stranger, trouble.Hung}},
		{Device: "counter", Answers: 1000, Longest: time.Second, Restart: true, May: []trouble.Kind{trouble.WrongGate, trouble.Overflow, trouble.Silent, trouble.DeadLine}},
		{Device: "idler", May: []trouble.Kind{trouble.Latched}},
		{Device: "monitor", May: []trouble.Kind{trouble.StuckValue}},
		{Device: "shutter", May: []trouble.Kind{trouble.StuckShutter}}}}
}

func TestListPrintsAsItReads(t *testing.T) {
	for _, text := range []string{
		"",
		"missing(stage, answer 7)",
		"late(counter, answer 412, by 230ms); lamp(at 2h13m, for 40s, rate 250000 Hz)",
		`garbled(stage, answer 3, byte 5 as "7"); unasked(stage, answer 4, line "T=21.4")`,
		"restart(stage, at 1h0m5s); unplug(counter, at 3h, for 2s); pump_drift(at 0s, for 10m, share -0.12)",
		"slip(signal_arm, at 20m, by 0.5 deg); lost_steps(idler_arm, at 1s, by -1.25 deg); duplicated(counter, answer 1)",
		"split(stage, answer 9, byte 3, by 200ms); restart_moving(stage, at 5m); stall(signal_arm, at 1h)",
		"mode_hop(at 2h, by -0.11 nm); temperature_drift(at 2h, for 20m, by 1.5 Cel); gone(stage, at 3h); stranger(counter, at 3h, for 10s)",
		"silent(monitor, at 1m, for 1m30s); dead_line(shutter, at 1m); hung(stage, at 1m, for 5s); wrong_gate(counter, at 1m, share -0.2); overflow(counter, at 1m)",
		"latched(idler, at 1m, for 1m30s); stuck_value(monitor, at 1m, for 1m30s); stuck_shutter(shutter, at 1m, for 1m30s)",
	} {
		l, err := trouble.Parse(text)
		if err != nil {
			t.Errorf("%q: %v", text, err)
		} else if l.String() != text {
			t.Errorf("%q prints as %q", text, l.String())
		}
	}
}

func TestDrawnListsPrintAndReadBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 0))
		l := trouble.Draw(rng, bench(), rapid.IntRange(0, 40).Draw(t, "troubles"))
		back, err := trouble.Parse(l.String())
		if err != nil {
			t.Fatalf("%s: %v", l, err)
		}
		if len(l)+len(back) > 0 && !reflect.DeepEqual(l, back) {
			t.Fatalf("%s reads back as %s", l, back)
		}
	})
}

func TestParseSaysWhereAndWhat(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"snow(at 1h)", `"snow" is no kind of trouble`},
		{"missing(stage)", `character 14: found ")"; want ","`},
		{"missing(stage, answer 0)", "answers count from 1"},
		{"missing(stage, answer x)", `found "x"`},
		{"late(stage, answer 1, by 3)", "want a time such as 2h13m"},
		{"late(stage, answer 1, by -3s)", "want a time such as 2h13m"},
		{`garbled(stage, answer 1, byte 0 as "ab")`, "want one byte"},
		{"unasked(stage, answer 1, line T)", "want a text in quotes"},
		{"missing(stage, answer 1) missing(stage, answer 2)", `want ";"`},
		{"slip(x, at 1s, by NaN deg)", `found "NaN"`},
	} {
		if _, err := trouble.Parse(c.text); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: error %v; want one that says %q", c.text, err, c.want)
		}
	}
}

func FuzzParse(f *testing.F) {
	f.Add("late(counter, answer 412, by 230ms); lamp(at 2h13m, for 40s, rate 250000 Hz)")
	f.Add("split(stage, answer 9, byte 3, by 200ms); mode_hop(at 2h, by -0.11 nm); wrong_gate(counter, at 1m, share -0.2); latched(idler, at 1m, for 1m30s)")
	f.Add(`garbled(stage, answer 3, byte 5 as "7"); unasked(stage, answer 4, line "T=21.4")`)
	f.Fuzz(func(t *testing.T, text string) {
		l, err := trouble.Parse(text)
		if err != nil {
			return
		}
		back, err := trouble.Parse(l.String())
		if err != nil || len(l) > 0 && !reflect.DeepEqual(l, back) {
			t.Errorf("%q reads as %s, which reads as %s, %v", text, l, back, err)
		}
	})
}

func heard(w *trouble.Wire, line string) []string {
	var s []string
	h, _ := w.Pass(line)
	for _, x := range h {
		if x.Open {
			x.Line += "..."
		}
		if x.Delay > 0 {
			x.Line += " after " + x.Delay.String()
		}
		s = append(s, x.Line)
	}
	return s
}

func TestWire(t *testing.T) {
	for _, c := range []struct {
		list string
		want []string
	}{
		{"", []string{"+12034"}},
		{"missing(c, answer 1)", nil},
		{"missing(c, answer 2)", []string{"+12034"}},
		{"missing(other, answer 1)", []string{"+12034"}},
		{"late(c, answer 1, by 2s)", []string{"+12034 after 2s"}},
		{"duplicated(c, answer 1)", []string{"+12034", "+12034"}},
		{`unasked(c, answer 1, line "T=21.4")`, []string{"T=21.4", "+12034"}},
		{`garbled(c, answer 1, byte 2 as "9")`, []string{"+19034"}},
		{`garbled(c, answer 1, byte 8 as "9")`, []string{"+19034"}}, // modulo the length
		{`garbled(c, answer 1, byte 2 as "2")`, []string{"+13034"}}, // is 2 already: the next digit
		{"split(c, answer 1, byte 2, by 1s)", []string{"+1...", "2034 after 1s"}},
		{"split(c, answer 1, byte 6, by 1s)", []string{"...", "+12034 after 1s"}},
		{"missing(c, answer 1); split(c, answer 1, byte 2, by 1s)", nil},
		{"split(c, answer 1, byte 2, by 1s); duplicated(c, answer 1)", []string{"+1...", "2034 after 1s", "+1...", "2034 after 1s"}},
		{"missing(c, answer 1); duplicated(c, answer 1)", nil},
		{"late(c, answer 1, by 1s); duplicated(c, answer 1)", []string{"+12034 after 1s", "+12034 after 1s"}},
	} {
		l, err := trouble.Parse(c.list)
		if err != nil {
			t.Fatal(err)
		}
		if got := heard(l.Wire("c"), "+12034"); !reflect.DeepEqual(got, c.want) {
			t.Errorf("%s: the host hears %q; want %q", c.list, got, c.want)
		}
	}
}

func TestGarblingNeverMakesTheSameLineTwiceInARow(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		line := rapid.StringMatching(`[+-]?[0-9]{1,8}`).Draw(t, "line")
		garbled := func(n int) trouble.Trouble {
			return trouble.Trouble{Kind: trouble.Garbled, Device: "c", Answer: n, Byte: rapid.IntRange(0, 9).Draw(t, "byte"), As: byte(rapid.IntRange('0', '9').Draw(t, "as"))}
		}
		w := trouble.List{garbled(1), garbled(2)}.Wire("c")
		a, b := heard(w, line)[0], heard(w, line)[0]
		if a == line || b == line || a == b {
			t.Fatalf("%q is heard as %q, then as %q; want two different lines, neither the true one", line, a, b)
		}
	})
}

func TestDrawKeepsToItsBounds(t *testing.T) {
	n := bench()
	kinds := map[trouble.Kind]int{}
	digits, follows := 0, 0
	for seed := range uint64(300) {
		l := trouble.Draw(rand.New(rand.NewPCG(seed, 0)), n, 40)
		if again := trouble.Draw(rand.New(rand.NewPCG(seed, 0)), n, 40); !reflect.DeepEqual(l, again) {
			t.Fatalf("seed %d draws two different lists", seed)
		}
		seen := map[string]bool{}
		for i, x := range l {
			kinds[x.Kind]++
			if x.Wired() {
				key := x.Device + " " + string(rune(x.Answer))
				if seen[key] || x.Answer < 1 || x.Answer > 1000 {
					t.Errorf("%s: a second trouble of one answer, or none of the device's answers", x)
				}
				seen[key] = true
				if i > 0 && l[i-1].Device == x.Device && l[i-1].Answer+1 == x.Answer {
					follows++
				}
			}
			if x.Kind == trouble.Split && (x.By <= 0 || x.By >= time.Second || x.Device == "stage" && x.By >= 800*time.Millisecond) {
				t.Errorf("%s: the rest comes later than the line's longest answer", x)
			}
			if x.Kind == trouble.Late && (x.By > time.Second || x.Device == "stage" && x.By > 800*time.Millisecond) {
				t.Errorf("%s: later than the line's longest answer", x)
			}
			if x.Kind == trouble.Garbled && x.As >= '0' && x.As <= '9' {
				digits++
			}
			if (x.Kind == trouble.Unplug || x.Kind == trouble.Slip) && x.Device == "counter" || x.At >= n.For {
				t.Errorf("%s: nothing allows it", x)
			}
			if s := x.Surfaces(); s.Text == "" || !s.Harmless && len(s.Events) == 0 && s.Undetectable == "" {
				t.Errorf("%s: nothing says how it must surface", x)
			}
		}
	}
	for _, k := range trouble.Kinds() {
		if kinds[k] == 0 {
			t.Errorf("%s was never drawn", k)
		}
	}
	if digits == 0 || follows == 0 {
		t.Errorf("%d digits became digits, %d troubles fell on the answer after one; want both to occur", digits, follows)
	}
}
