//go:build !killpoints || !unix

package main

import (
	"gemel/drivers/line"
	"gemel/scan/engine"
)

// killpoint is nothing in the program that people run. The harness builds another.
func killpoint() func(engine.Step) { return nil }

// sabotage is nothing in the program that people run, either.
func sabotage() func(string, line.Port) line.Port { return nil }
