//go:build killpoints && unix

package main

import (
	"context"
	"os"
	"strconv"
	"strings"
	"sync/atomic"
	"syscall"

	"gemel/daemon/courier"
	"gemel/drivers/line"
	"gemel/scan/engine"
)

// killpoint lets the harness name a step, "written:12", at whose twelfth passing the process kills
// itself the way a power cut would (GEMEL_KILL_AT), or has a bug (GEMEL_PANIC_AT). It exists in the
// harness's build only.
func killpoint() func(engine.Step) {
	kill := killer()
	bug := counted("GEMEL_PANIC_AT", func() { panic("a bug made on purpose") })
	return func(s engine.Step) {
		kill(string(s))
		bug(string(s))
	}
}

func killer() func(string) {
	return counted("GEMEL_KILL_AT", func() {
		_ = syscall.Kill(os.Getpid(), syscall.SIGKILL)
		select {}
	})
}

// onCommit lets the process die at "committed": the entry is in the file, and nobody was told.
func onCommit(nudge func()) func() {
	kill := killer()
	return func() {
		kill("committed")
		nudge()
	}
}

// onCarry lets it die at "publishing", before an entry is offered to the stream, and at "published",
// when the stream has it and the courier does not know yet.
func onCarry(s courier.Sink) courier.Sink { return carrying{s, killer()} }

type carrying struct {
	courier.Sink
	kill func(string)
}

func (c carrying) Publish(ctx context.Context, m courier.Message, after courier.Last) (courier.Last, error) {
	c.kill("publishing")
	last, err := c.Sink.Publish(ctx, m, after)
	if err == nil {
		c.kill("published")
	}
	return last, err
}

// sabotage lets the harness name a line, "counter:200", in whose two-hundredth write a bug of its
// driver shows (GEMEL_PANIC_LINE).
func sabotage() func(string, line.Port) line.Port {
	bug := counted("GEMEL_PANIC_LINE", func() { panic("a bug made on purpose") })
	return func(name string, p line.Port) line.Port { return buggy{p, name, bug} }
}

type buggy struct {
	line.Port
	name string
	bug  func(string)
}

func (b buggy) Write(p []byte) (int, error) {
	b.bug(b.name)
	return b.Port.Write(p)
}

// counted does something at the Nth passing of what the environment names.
func counted(variable string, do func()) func(string) {
	name, count, found := strings.Cut(os.Getenv(variable), ":")
	due, err := strconv.Atoi(count)
	if !found || err != nil {
		return func(string) {}
	}
	var passed atomic.Int64
	return func(what string) {
		if what == name && passed.Add(1) == int64(due) {
			do()
		}
	}
}
