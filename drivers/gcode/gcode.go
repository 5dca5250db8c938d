// Package gcode moves rotary axes by RS-274 words (the RS274/NGC interpreter, version 3): A, B and
// C, in degrees, absolute, all axes of a move together. It is a preset of package custom: the
// standard says how to move, and leaves everything else to be declared.
//
// It refuses to be built without a position query and a stop, and never sends a word that moves
// by itself or changes what an angle means: no G91, G92 (but G92.1, which takes such a change
// back), G28, G30, and no end of a program.
package gcode

import (
	"errors"
	"fmt"
	"regexp"
	"strconv"
	"strings"

	"gemel/drivers/custom"
	"gemel/drivers/line"
	"gemel/protocol/unit"
)

// NewStage makes a stage from its configuration. It sends nothing. The error names everything
// that is wrong.
func NewStage(l *line.Line, c Config) (*custom.Stage, error) {
	var bad []error
	wrong := func(where, format string, args ...any) {
		bad = append(bad, fmt.Errorf("%s: %s: "+format, append([]any{c.Name, where}, args...)...))
	}
	if c.Ack == "" {
		wrong("ack", "missing; want the pattern of the answer to a line that was taken")
	}
	if c.Start == nil {
		c.Start = []string{"G21 G90 G94", "G54", "G92.1"}
	}
	if c.Decimals == nil {
		four := 4
		c.Decimals = &four
	}
	for i, a := range c.Axes {
		if a.Letter != "A" && a.Letter != "B" && a.Letter != "C" {
			wrong(fmt.Sprintf("axes[%d].letter", i), "%q; want A, B or C, the rotary axes", a.Letter)
		}
		if a.StepsPerTurn != 0 || a.Gear != 0 {
			wrong(fmt.Sprintf("axes[%d].steps_per_turn", i), "the words of this dialect are in degrees")
		}
	}
	stage := custom.StageConfig{
		Common: custom.Common{Name: c.Name, Pace: c.Pace, Repeat: c.Repeat},
		Axes:   c.Axes, Together: true, FeedUnit: c.FeedUnit,
		PollEvery: c.PollEvery, Margin: c.Margin, MoveWithin: c.MoveWithin, HomeWithin: c.HomeWithin,
	}
	stage.Dialect = custom.Dialect{
		EndsWith: c.EndsWith, AnswersEndWith: c.AnswersEndWith, Echo: c.Echo,
		Refused: c.Nak, Unasked: c.Unasked, Identity: c.Identity,
		Asks: map[string]custom.Ask{
			"move": {Send: "G90 G94 G1 {targets} F{feed}", Match: c.Ack, Proves: c.AckMeans, AngleIs: unit.Degree, Decimals: c.Decimals},
		},
	}
	for name, a := range map[string]custom.Ask{
		"where": c.Position, "at_rest": c.AtRest, "stop": c.Stop, "homed": c.Homed, "home": c.Home, "mark": c.Mark, "identity": c.AskWho,
	} {
		if a.Send != "" || a.Bytes != "" {
			stage.Dialect.Asks[name] = a
		}
	}
	for i, text := range c.Start {
		if word := forbidden(text); word != "" {
			wrong(fmt.Sprintf("start[%d]", i), "%q has %s, which is never sent", text, word)
		}
		stage.Dialect.Start = append(stage.Dialect.Start, custom.Ask{Send: text, Match: c.Ack})
	}
	s, err := custom.NewStage(l, stage)
	if err != nil {
		bad = append(bad, err)
	}
	if len(bad) > 0 {
		return nil, errors.Join(bad...)
	}
	return s, nil
}

// word is one word of a line: spaces and the case of letters mean nothing (RS274/NGC 3.3).
var word = regexp.MustCompile(`([A-Z])([+-]?[0-9.]+)`)

// forbidden returns the first word of a line that must not be sent at the start, or "".
func forbidden(text string) string {
	text = strings.ToUpper(strings.Map(func(r rune) rune {
		if r == ' ' || r == '\t' {
			return -1
		}
		return r
	}, text))
	for _, m := range word.FindAllStringSubmatch(text, -1) {
		n, err := strconv.ParseFloat(m[2], 64)
		switch {
		case err != nil:
			return m[0]
		case m[1] == "G" && (n == 0 || n == 1 || n == 28 || n == 30 || n == 91 || n == 92),
			m[1] == "M", // M2 and M30 reset modes, the others drive spindle and coolant or halt
			strings.Contains("ABCXYZUVW", m[1]):
			return m[0]
		}
	}
	return ""
}
