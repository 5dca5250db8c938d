package main

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"gemel/protocol"
)

// handScreen is what a person at the bench sees: rates and ratios as large as the terminal allows,
// how everything stands, what was said last, and the line that is being typed.
type handScreen struct {
	head   string
	look   *protocol.HandLookedAt
	stands []string
	said   []string // the last answer, or help
	doing  string   // what goes on, empty while only rates are shown
	typing string
}

// figure is one number and what it is of.
type figure struct{ name, value, unit string }

// figures are the rates, then the ratios.
func (s *handScreen) figures() []figure {
	if s.look == nil {
		return nil
	}
	var all []figure
	for _, r := range s.look.Rates {
		all = append(all, figure{r.Channel, rateText(r.Rate), "/s"})
	}
	for _, r := range s.look.Ratios {
		value := "-"
		if r.Ratio != nil {
			value = fmt.Sprintf("%.4f", *r.Ratio)
		}
		all = append(all, figure{r.Channel + "/" + r.Over, value, ""})
	}
	return all
}

// rateText is a rate that is read from afar: thousands apart, no more decimals than it has.
func rateText(hz float64) string {
	if hz < 100 {
		return strconv.FormatFloat(hz, 'f', 1, 64)
	}
	text := strconv.FormatFloat(math.Round(hz), 'f', 0, 64)
	for i := len(text) - 3; i > 0; i -= 3 {
		text = text[:i] + " " + text[i:]
	}
	return text
}

// lines lays the screen out for a terminal of that size. There are never more than it has.
func (s *handScreen) lines(width, height int) []string {
	var below []string
	for _, line := range s.stands {
		below = append(below, wrapped(line, width)...)
	}
	if s.doing != "" {
		below = append(below, s.doing)
	}
	for _, line := range s.said {
		below = append(below, wrapped(line, width)...)
	}
	room := max(0, height-3-len(below)) // the head, a free line, and the line that is typed
	lines := append([]string{s.head}, s.drawn(width, room)...)
	lines = append(lines, "")
	lines = append(lines, below...)
	lines = lines[:min(len(lines), max(0, height-1))]
	lines = append(lines, "> "+s.typing)
	for i := range lines {
		lines[i] = cut(lines[i], width)
	}
	return lines
}

// drawn draws the figures in the largest way for which there is room: all of them, else as many as
// can be, from the first, and the others as text.
func (s *handScreen) drawn(width, room int) []string {
	all := s.figures()
	if lines, fits := drawnSo(all, len(all), largest, width, room); fits {
		return lines
	}
	for n := len(all); n >= 0; n-- {
		if lines, fits := drawnSo(all, n, large, width, room); fits {
			return lines
		}
	}
	return nil
}

// drawnSo draws the first n figures so, and the others as text.
func drawnSo(all []figure, n int, way func(string) []string, width, room int) (lines []string, fits bool) {
	label := 0
	for _, f := range all {
		label = max(label, utf8.RuneCountInString(f.name))
	}
	fits = true
	for i, f := range all {
		rows := []string{f.value}
		if i < n {
			rows = way(f.value)
		}
		for y, row := range rows {
			name, unit := "", ""
			if y == len(rows)-1 { // on the line the figures stand on
				name, unit = f.name, f.unit
			}
			line := strings.TrimRight(fmt.Sprintf("%-*s  %s  %s", label, name, row, unit), " ")
			fits = fits && utf8.RuneCountInString(line) <= width
			lines = append(lines, line)
		}
	}
	return lines, fits && len(lines) <= room
}

// wrapped breaks a line between words.
func wrapped(line string, width int) []string {
	var lines []string
	for utf8.RuneCountInString(line) > width {
		at := strings.LastIndexByte(cut(line, width+1), ' ')
		if at <= 0 {
			break
		}
		lines, line = append(lines, line[:at]), line[at+1:]
	}
	return append(lines, line)
}

func cut(line string, width int) string {
	if runes := []rune(line); len(runes) > width {
		return string(runes[:max(0, width)])
	}
	return line
}
