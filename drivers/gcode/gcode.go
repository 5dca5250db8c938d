// Package gcode moves rotary axes by RS-274 words.
package gcode

import (
	"errors"

	"gemel/drivers/custom"
	"gemel/drivers/line"
)

func NewStage(l *line.Line, c Config) (*custom.Stage, error) { return nil, errors.New("not built yet") }
