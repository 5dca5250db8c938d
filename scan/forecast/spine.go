package forecast

import (
	"fmt"
	"io"
	"math"
	"strings"
	"time"

	"gemel/protocol"
	"gemel/scan"
)

// Draw draws the spine of the night: angle across, time downward, both arms as mirrored tracks beside
// the pump, darks as notches in it, waiting as white space, references in one column of their own.
func (f *Forecast) Draw(w io.Writer) error {
	const width, top, bottom, left, right = 760., 96., 44., 74., 70.
	const wide = 104 // letters of a line in the picture
	whole := f.Duration.Duration()
	height := top + bottom + math.Min(900, math.Max(360, 3*float64(len(f.track))))
	y := func(d time.Duration) float64 {
		return top + (height-top-bottom)*float64(d)/math.Max(float64(whole), 1)
	}
	spine := (left + width - right) / 2
	var b strings.Builder
	line := func(format string, a ...any) { fmt.Fprintf(&b, format+"\n", a...) }
	line(`<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 %g %g" font-family="sans-serif" font-size="12" fill="none" stroke="#222">`, width, height)
	line(`<rect x="0" y="0" width="%g" height="%g" fill="#fff" stroke="none"/>`, width, height)
	text := func(x, y float64, anchor, s string) {
		line(`<text x="%.1f" y="%.1f" text-anchor="%s" fill="#222" stroke="#fff" stroke-width="4" stroke-linejoin="round" paint-order="stroke">%s</text>`, x, y, anchor, escape(s))
	}
	at := 18.0
	for _, part := range wrapped(f.Sentence, wide) {
		text(18, at, "start", part)
		at += 16
	}
	for _, h := range f.hours(whole) {
		line(`<path d="M%.1f %.1fH%.1f" stroke-width="0.4" stroke-dasharray="1 5"/>`, left, y(h), width-right+50)
		text(left-10, y(h)+4, "end", f.hourOf(h, whole))
	}
	tracks := f.tracks(left+14, spine-26, spine+26, width-right-14)
	// The pump, thick while something is counted.
	line(`<path d="M%.1f %.1fV%.1f" stroke-width="0.8"/>`, spine, y(0), y(whole))
	line(`<path d="%s" stroke-width="3.2"/>`, f.counted(spine, y))
	for _, s := range f.track {
		h := math.Max(1.4, y(s.ended)-y(s.started))
		switch s.kind {
		case protocol.Dark:
			line(`<path d="M%.1f %.1fl-14 %.1fl14 %.1fz" fill="#222" stroke="none"/>`, spine+1.6, y(s.started)-2, h/2+2, h/2+2)
		case protocol.Background:
			line(`<path d="M%.1f %.1fl14 %.1fl-14 %.1fz" fill="#fff" stroke-width="0.9"/>`, spine-1.6, y(s.started)-2, h/2+2, h/2+2)
		case protocol.Reference:
			line(`<rect x="%.1f" y="%.1f" width="14" height="%.1f" fill="#222" stroke="none"/>`, width-right+22, y(s.started), h)
		}
	}
	for _, t := range tracks {
		line(`<path d="%s" stroke-width="1.1"%s/>`, t.path(f, y), t.dash)
		line(`<text x="%.1f" y="%.1f" font-family="serif" font-size="17" text-anchor="middle" fill="#222" stroke="none">%s</text>`, t.letterX, top-22, t.letter)
		for _, v := range []float64{t.low, t.high} {
			text(t.x(v), top-8, "middle", fmt.Sprintf("%.4g°", v))
			line(`<path d="M%.1f %.1fv5" stroke-width="0.8"/>`, t.x(v), top-4)
			if t.low == t.high {
				break
			}
		}
	}
	if f.References > 0 {
		line(`<text x="%.1f" y="%.1f" font-family="serif" font-size="17" text-anchor="middle" fill="#222" stroke="none">R</text>`, width-right+29, top-22)
	}
	if w := f.Waiting.Duration(); w > 0 && y(w)-y(0) > 14 {
		text(spine, (y(0)+y(w))/2+4, "middle", "waits "+span(w))
	}
	for i, part := range wrapped(f.key(tracks), wide) {
		text(18, height-24+16*float64(i), "start", part)
	}
	line(`</svg>`)
	_, err := io.WriteString(w, b.String())
	return err
}

// track is one arm's way.
type track struct {
	letter    string
	name      string
	axis      int
	low, high float64 // degrees
	from, to  float64 // where they are drawn
	dash      string
	letterX   float64
}

func (t track) x(deg float64) float64 {
	if t.high == t.low {
		return (t.from + t.to) / 2
	}
	return t.from + (deg-t.low)/(t.high-t.low)*(t.to-t.from)
}

// tracks are the signal arm to the left and the idler arm to the right, both outwards; on a bench
// without arms the first two axes that the points name.
func (f *Forecast) tracks(left, leftEnd, rightStart, right float64) []track {
	var all []track
	find := func(role string) int {
		for i, a := range f.bench.Axes {
			if a.Role == role {
				return i
			}
		}
		return -1
	}
	signal, idler := find("signal_arm"), find("idler_arm")
	if signal < 0 && idler < 0 {
		for i, a := range f.bench.Axes {
			if !f.plan.Sweeps(a.Name) {
				continue
			}
			if signal < 0 {
				signal = i
			} else if idler < 0 {
				idler = i
			}
		}
	}
	add := func(axis int, letter, dash string, from, to float64) {
		if axis < 0 {
			return
		}
		t := track{letter: letter, name: string(f.bench.Axes[axis].Name), axis: axis, dash: dash, from: from, to: to, low: math.Inf(1), high: math.Inf(-1), letterX: (from + to) / 2}
		// By all points: of a long run only every so many readings are drawn.
		for i, n := range f.visits {
			if n == 0 {
				continue
			}
			for _, target := range f.point(i).Axes {
				if target.Axis == f.bench.Axes[axis].Name {
					v := target.Angle.Degrees()
					t.low, t.high = math.Min(t.low, v), math.Max(t.high, v)
				}
			}
		}
		if math.IsInf(t.low, 0) {
			t.low, t.high = f.bench.Start[axis].Degrees(), f.bench.Start[axis].Degrees()
		}
		all = append(all, t)
	}
	add(signal, letterOf(f.bench.Axes, signal, "S"), "", leftEnd, left)
	add(idler, letterOf(f.bench.Axes, idler, "I"), ` stroke-dasharray="5 2.5"`, rightStart, right)
	return all
}

func letterOf(axes []scan.Axis, i int, letter string) string {
	if i >= 0 && axes[i].Role != "signal_arm" && axes[i].Role != "idler_arm" {
		return strings.ToUpper(string(axes[i].Name[:1]))
	}
	return letter
}

// path follows the light readings; beside them the arm stands, or is on a flank that its own column
// shows.
func (t track) path(f *Forecast, y func(time.Duration) float64) string {
	var p strings.Builder
	open := false
	for _, s := range f.track {
		if s.kind == protocol.Reference {
			open = false
			continue
		}
		if s.kind != protocol.Light {
			if open { // the arms stand meanwhile
				fmt.Fprintf(&p, "V%.1f", y(s.ended))
			}
			continue
		}
		x := t.x(s.at[t.axis].Degrees())
		move := "L"
		if !open {
			move, open = "M", true
		}
		fmt.Fprintf(&p, "%s%.1f %.1fV%.1f", move, x, y(s.started), y(s.ended))
	}
	return p.String()
}

// counted is the pump line while light is counted.
func (f *Forecast) counted(x float64, y func(time.Duration) float64) string {
	var p strings.Builder
	from, to := time.Duration(-1), time.Duration(0)
	flush := func() {
		if from >= 0 {
			fmt.Fprintf(&p, "M%.1f %.1fV%.1f", x, y(from), y(to))
		}
		from = -1
	}
	for _, s := range f.track {
		if s.kind == protocol.Dark {
			flush()
			continue
		}
		if from < 0 {
			from = s.started
		}
		to = s.ended
	}
	flush()
	return p.String()
}

// hours are the moments that get a clock: both ends, and round ones in between.
func (f *Forecast) hours(whole time.Duration) []time.Duration {
	every := time.Minute
	for _, e := range []time.Duration{2, 5, 10, 15, 30, 60, 120, 180, 360, 720, 1440} {
		if whole/every <= 9 {
			break
		}
		every = e * time.Minute
	}
	all := []time.Duration{0}
	begins := f.BeginsAt.In(f.local)
	midnight := time.Date(begins.Year(), begins.Month(), begins.Day(), 0, 0, 0, 0, f.local)
	for t := midnight; ; t = t.Add(every) {
		d := t.Sub(begins)
		if d >= whole {
			break
		}
		if d > whole/30 && whole-d > whole/30 {
			all = append(all, d)
		}
	}
	return append(all, whole)
}

// hourOf is what a moment is called beside the picture: with its day where it is another than before.
func (f *Forecast) hourOf(h, whole time.Duration) string {
	t := f.BeginsAt.Add(h).In(f.local)
	switch {
	case whole < 20*time.Hour:
		return t.Format("15:04")
	case t.Hour() == 0 && t.Minute() == 0:
		return t.Format("2 Jan")
	case h == 0 || h == whole:
		return t.Format("2 Jan 15:04")
	}
	return t.Format("15:04")
}

func (f *Forecast) key(tracks []track) string {
	var parts []string
	for i, t := range tracks {
		parts = append(parts, fmt.Sprintf("%s %s, %s", t.letter, strings.ReplaceAll(t.name, "_", " "), [2]string{"solid", "broken"}[min(i, 1)]))
	}
	parts = append(parts, "in the middle the pump, thick while light is counted")
	if f.Darks > 0 {
		parts = append(parts, "filled notch: dark")
	}
	if f.Backgrounds > 0 {
		parts = append(parts, "open notch: background")
	}
	if f.References > 0 {
		parts = append(parts, "R references")
	}
	return strings.Join(parts, "; ")
}

func wrapped(s string, wide int) []string {
	var lines []string
	at := ""
	for word := range strings.FieldsSeq(s) {
		if at != "" && len(at)+1+len(word) > wide {
			lines = append(lines, at)
			at = ""
		}
		if at != "" {
			at += " "
		}
		at += word
	}
	return append(lines, at)
}

func escape(s string) string {
	return strings.NewReplacer("&", "&amp;", "<", "&lt;", ">", "&gt;").Replace(s)
}
