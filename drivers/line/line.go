// Package line owns one serial, TCP or in-memory line.
package line

import (
	"context"
	"errors"
)

// Line is one line and its owner.
type Line struct{ set Settings }

// New makes a line; it starts nothing and opens nothing.
func New(s Settings) *Line { return &Line{set: s.withDefaults()} }

// Run owns the port until ctx ends.
func (l *Line) Run(ctx context.Context) error { <-ctx.Done(); return nil }

// Mode says how a serial device is set. Zero values mean 9600 baud, 8 data bits, no parity, 1 stop bit.
type Mode struct {
	Baud     int
	DataBits int
	Parity   string // "none", "odd" or "even"
	StopBits string // "1", "1.5" or "2"
}

// Address returns the opener for a path of a serial device or "tcp://host:port".
func Address(address string, mode Mode) (func(context.Context) (Port, error), error) {
	return nil, errors.New("not built yet")
}
