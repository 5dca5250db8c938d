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
	below := append([]string{}, s.stands...)
	if s.doing != "" {
		below = append(below, s.doing)
	}
	below = append(below, s.said...)
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

// drawn draws the figures in the largest way for which there is room.
func (s *handScreen) drawn(width, room int) []string {
	all := s.figures()
	label := 0
	for _, f := range all {
		label = max(label, utf8.RuneCountInString(f.name))
	}
	for _, way := range []func(string) []string{largest, large, func(t string) []string { return []string{t} }} {
		var lines []string
		fits := true
		for _, f := range all {
			figure := way(f.value)
			if len(figure) > 1 {
				lines = append(lines, "")
			}
			for y, row := range figure {
				name, unit := "", ""
				if y == len(figure)-1 { // on the line the figures stand on
					name, unit = f.name, f.unit
				}
				line := strings.TrimRight(fmt.Sprintf("%-*s  %s  %s", label, name, row, unit), " ")
				fits = fits && utf8.RuneCountInString(line) <= width
				lines = append(lines, line)
			}
		}
		if fits && len(lines) <= room {
			return lines
		}
	}
	return nil
}

func cut(line string, width int) string {
	if runes := []rune(line); len(runes) > width {
		return string(runes[:max(0, width)])
	}
	return line
}
