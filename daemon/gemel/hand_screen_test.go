package main

import (
	"strings"
	"testing"
	"unicode/utf8"

	"gemel/protocol"
	"gemel/protocol/unit"
)

func TestNoTwoGlyphsAreTakenForOneAnother(t *testing.T) {
	const all = "0123456789.-"
	for i, a := range all {
		for _, b := range all[i+1:] {
			differ := 0
			for y, row := range glyph(a) {
				other := glyph(b)[y]
				if len(row) != len(other) {
					differ += 2
					continue
				}
				for x := range row {
					if row[x] != other[x] {
						differ++
					}
				}
			}
			if differ < 2 {
				t.Errorf("%c and %c differ in %d dots", a, b, differ)
			}
		}
	}
	for _, r := range all {
		for y, row := range glyph(r) {
			if len(row) != len(glyph(r)[0]) || strings.Trim(row, "# ") != "" {
				t.Errorf("%c, row %d is %q", r, y, row)
			}
		}
	}
}

func TestFiguresAreDrawnInBothSizes(t *testing.T) {
	for _, c := range []struct {
		way  func(string) []string
		rows int
		wide int
	}{{largest, 8, 22}, {large, 4, 11}} {
		rows := c.way("20")
		if len(rows) != c.rows {
			t.Fatalf("%d rows; want %d", len(rows), c.rows)
		}
		ink := 0
		for _, row := range rows {
			if row != "" && utf8.RuneCountInString(row) != c.wide {
				t.Errorf("row %q is %d wide; want %d", row, utf8.RuneCountInString(row), c.wide)
			}
			ink += 2*strings.Count(row, "█") + strings.Count(row, "▀") + strings.Count(row, "▄")
		}
		// 14 dots of a 2 and 16 of a 0; a dot is two blocks, or half a block.
		if want := map[int]int{8: 4 * 30, 4: 30}[c.rows]; ink != want {
			t.Errorf("%d halves of blocks; want %d:\n%s", ink, want, strings.Join(rows, "\n"))
		}
	}
}

func handed() protocol.HandReply {
	p := func(v float64) *float64 { return &v }
	angle := 3 * unit.Degree
	return protocol.HandReply{
		Axes:     []protocol.HandAxis{{Axis: "signal_arm", Angle: &angle}, {Axis: "idler_arm", Trouble: "rotary: where: no answer"}},
		Shutters: []protocol.HandBlade{{Shutter: "shutter", Guards: "pump", Open: true}, {Shutter: "guard", Guards: "signal, idler"}},
		Settings: []protocol.HandValue{{Name: "delay", Value: p(18.42), Unit: "ns"}},
		Sensors:  []protocol.HandValue{{Name: "pump_power", Trouble: "silent", Unit: "mW"}},
		Look: &protocol.HandLookedAt{
			Rates:  []protocol.HandRate{{Channel: "signal", Rate: 18432.4}, {Channel: "idler", Rate: 1212500}, {Channel: "pairs", Rate: 12.34}},
			Ratios: []protocol.HandRatio{{Channel: "pairs", Over: "signal", Ratio: p(0.0566)}, {Channel: "pairs", Over: "idler"}},
		},
	}
}

func TestTheScreenUsesTheRoomThereIsAndNoMore(t *testing.T) {
	r := handed()
	for _, c := range []struct {
		width, height int
		block         string // what only this size has
	}{
		{200, 60, strings.Repeat("█", 10)},
		{100, 36, "▀"},
		{80, 24, "▀"}, // a terminal as it opens: four large, the fifth as text
		{80, 14, "18 432"},
		{30, 4, ""},
		{8, 2, ""},
	} {
		s := &handScreen{head: "skerry, gate 0.5 s", look: r.Look, stands: standing(r), said: []string{"moved"}, typing: "signal"}
		lines := s.lines(c.width, c.height)
		if len(lines) > c.height {
			t.Errorf("%d × %d: %d lines", c.width, c.height, len(lines))
		}
		for _, line := range lines {
			if n := utf8.RuneCountInString(line); n > c.width {
				t.Errorf("%d × %d: a line of %d", c.width, c.height, n)
			}
		}
		text := strings.Join(lines, "\n")
		if !strings.Contains(text, c.block) || !strings.HasPrefix(lines[len(lines)-1], "> ") {
			t.Errorf("%d × %d has no %q, or not the line that is typed last:\n%s", c.width, c.height, c.block, text)
		}
	}
}

func TestWordsAreBrokenBetweenThem(t *testing.T) {
	for line, want := range map[string]string{
		"signal_arm 2.9 deg, idler_arm 2.8 deg": "signal_arm 2.9|deg, idler_arm|2.8 deg",
		"short":                                 "short", "": "", "averylongwordthatdoesnotfit": "averylongwordthatdoesnotfit",
	} {
		if got := strings.Join(wrapped(line, 14), "|"); got != want {
			t.Errorf("%q is %s; want %s", line, got, want)
		}
	}
}

func TestHowTheBenchStandsIsSaidInWords(t *testing.T) {
	want := "signal_arm 3.0000 deg, idler_arm unknown (rotary: where: no answer)\npump open, signal, idler closed\ndelay 18.42 ns, pump_power unknown (silent)"
	if got := strings.Join(standing(handed()), "\n"); got != want {
		t.Errorf("%s\nwant %s", got, want)
	}
	for hz, want := range map[float64]string{0: "0.0", 12.34: "12.3", 99.96: "100.0", 999.4: "999", 18432.4: "18 432", 1212500: "1 212 500"} {
		if got := rateText(hz); got != want {
			t.Errorf("%g /s is %s; want %s", hz, got, want)
		}
	}
}

func TestATypedLineIsReadOneWayOrRefused(t *testing.T) {
	h := &handHold{last: handed()}
	deg := func(d float64) *unit.Angle { a := unit.Degrees(d); return &a }
	same := func(a, b *unit.Angle) bool { return a == nil && b == nil || a != nil && b != nil && *a == *b }
	for text, c := range map[string]struct {
		want protocol.HandRequest
		err  string
	}{
		"signal_arm 3.1 deg":      {want: protocol.HandRequest{Act: protocol.HandMove, Axis: "signal_arm", To: deg(3.1)}},
		"signal_arm +0.1 deg":     {want: protocol.HandRequest{Act: protocol.HandMove, Axis: "signal_arm", By: deg(0.1)}},
		"signal_arm by -6 arcmin": {want: protocol.HandRequest{Act: protocol.HandMove, Axis: "signal_arm", By: deg(-0.1)}},
		"signal_arm to -0.1 deg":  {want: protocol.HandRequest{Act: protocol.HandMove, Axis: "signal_arm", To: deg(-0.1)}},
		"signal_arm -0.1 deg":     {err: `may be a place or a step; want "signal_arm to -0.1 deg" or "signal_arm by -0.1 deg"`},
		"signal_arm 3.1":          {err: "has no unit"},
		"signal_arm":              {err: "signal_arm: "},
		"signal_arm to":           {err: "signal_arm: "},
		"arm 3 deg":               {err: `"arm" is no act, axis, shutter or setting here; want one of look`},
		"pump open":               {want: protocol.HandRequest{Act: protocol.HandShutter, Shutter: "pump", Open: new(true)}},
		"detectors close":         {want: protocol.HandRequest{Act: protocol.HandShutter, Shutter: "detectors", Open: new(false)}},
		"delay 1.2 ns":            {want: protocol.HandRequest{Act: protocol.HandSet, Setting: "delay", Value: new(1.2), Unit: "ns"}},
		"delay 1.2":               {err: "has no unit"},
		"look 500 ms":             {want: protocol.HandRequest{Act: protocol.HandLook, Gate: 5e8}},
		"look":                    {err: "look: "},
		"home idler_arm":          {want: protocol.HandRequest{Act: protocol.HandHome, Axis: "idler_arm"}},
		"rest":                    {want: protocol.HandRequest{Act: protocol.HandRest}},
		"rest now":                {err: "want rest alone"},
		"release":                 {want: protocol.HandRequest{Act: protocol.HandRelease}},
		"take":                    {want: protocol.HandRequest{Act: protocol.HandTake}},
		"quit":                    {want: protocol.HandRequest{Act: protocol.HandLeave}},
		"  ":                      {err: "nothing; want an act"},
	} {
		q, err := h.parse(text)
		if c.err != "" {
			if err == nil || !strings.Contains(err.Error(), c.err) {
				t.Errorf("%q: %v; want %q", text, err, c.err)
			}
			continue
		}
		w := c.want
		if err != nil || q.Act != w.Act || q.Axis != w.Axis || q.Shutter != w.Shutter || q.Setting != w.Setting || q.Unit != w.Unit || q.Gate != w.Gate || !same(q.To, w.To) || !same(q.By, w.By) ||
			(q.Open == nil) != (w.Open == nil) || q.Open != nil && *q.Open != *w.Open || (q.Value == nil) != (w.Value == nil) || q.Value != nil && (*q.Value-*w.Value > 1e-12 || *w.Value-*q.Value > 1e-12) {
			t.Errorf("%q: %+v, %v; want %+v", text, q, err, w)
		}
	}
}

func TestKeysMakeALineAndTheArrowsBringOneBack(t *testing.T) {
	l := &handLive{hold: &handHold{last: handed()}, urgent: make(chan protocol.HandRequest, 1)}
	press := func(keys string) (left bool) {
		for _, r := range keys {
			left = l.key(r) || left
		}
		return left
	}
	if press("signal_arm +0.1 dex\x7fg\r") || l.next == nil || l.next.Axis != "signal_arm" || l.screen.doing != "signal_arm +0.1 deg …" {
		t.Fatalf("next %+v, doing %q; want the step", l.next, l.screen.doing)
	}
	if press("pump open\r"); l.next.Act != protocol.HandMove || !strings.Contains(l.screen.said[0], "was not taken") {
		t.Errorf("next %+v, said %q; want the second act refused while the first goes on", l.next, l.screen.said)
	}
	if press("rest\r"); len(l.urgent) != 1 || l.next != nil {
		t.Errorf("%d urgent, next %+v; want rest sent at once, and nothing after it", len(l.urgent), l.next)
	}
	if press("\x1b[A\x1b[A\x1b[A"); string(l.typing) != "signal_arm +0.1 deg" {
		t.Errorf("three times up is %q", string(l.typing))
	}
	if press("\x1b[B"); string(l.typing) != "pump open" {
		t.Errorf("down is %q", string(l.typing))
	}
	if press("\x15gate 2 s\r"); l.hold.gate.Seconds() != 2 {
		t.Errorf("gate %s; want 2 s", l.hold.gate)
	}
	if press("help\r"); len(l.screen.said) < 10 {
		t.Errorf("help is %q", l.screen.said)
	}
	if !press("leave\r") || !press("\x03") {
		t.Error("leave or Ctrl-C did not leave")
	}
}
