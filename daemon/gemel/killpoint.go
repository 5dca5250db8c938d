//go:build !killpoints || !unix

package main

import (
	"gemel/daemon/courier"
	"gemel/drivers/line"
	"gemel/scan/engine"
)

// killpoint is nothing in the program that people run. The harness builds another.
func killpoint() func(engine.Step) { return nil }

// sabotage is nothing in the program that people run, either.
func sabotage() func(string, line.Port) line.Port { return nil }

// onCommit and onCarry are the places to die of the logbook and of the courier.
func onCommit(nudge func()) func() { return nudge }

func onCarry(s courier.Sink) courier.Sink { return s }
