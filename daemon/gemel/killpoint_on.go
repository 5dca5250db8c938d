//go:build killpoints && unix

package main

import (
	"os"
	"strconv"
	"strings"
	"sync/atomic"
	"syscall"

	"gemel/scan/engine"
)

// killpoint lets the harness name a step, "written:12", at whose twelfth passing the process kills
// itself the way a power cut would: without a word. It exists in the harness's build only.
func killpoint() func(engine.Step) {
	name, count, found := strings.Cut(os.Getenv("GEMEL_KILL_AT"), ":")
	due, err := strconv.Atoi(count)
	if !found || err != nil {
		return nil
	}
	var passed atomic.Int64
	return func(s engine.Step) {
		if string(s) == name && passed.Add(1) == int64(due) {
			_ = syscall.Kill(os.Getpid(), syscall.SIGKILL)
			select {}
		}
	}
}
