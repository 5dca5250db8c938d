//go:build unix

package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/bench"
	"gemel/protocol"
	"gemel/sim/instruments"
)

// The tests of this package run the program itself: real processes, pseudo-terminals, SQLite files
// and brokers, in real time.

// binary is the program, built once with the hooks of killpoint_on.go, which nothing sets but the
// tests that mean them.
var binary string

func TestMain(m *testing.M) {
	flag.Set("rapid.seed", "20310203") // the same draws every time; -rapid.seed overrides
	flag.Parse()
	os.Exit(func() int {
		dir, err := os.MkdirTemp("", "gemel-test-")
		if err != nil {
			fmt.Fprintln(os.Stderr, err)
			return 1
		}
		defer os.RemoveAll(dir)
		binary = filepath.Join(dir, "gemel")
		args := []string{"build", "-tags", "killpoints", "-o", binary}
		if raced {
			args = append(args, "-race", "-gcflags=modernc.org/...=-race=false") // as .ci/run, so that it is compiled once
			if flag.Lookup("test.skip").Value.String() == "" {
				_ = flag.Set("test.skip", notRaced)
			}
		}
		if out, err := exec.Command("go", append(args, ".")...).CombinedOutput(); err != nil {
			fmt.Fprintf(os.Stderr, "go build: %v\n%s", err, out)
			return 1
		}
		return m.Run()
	}())
}

// notRaced are the tests that the race detector is spared. They count time, memory or descriptors, or
// go through many deaths of the program, each a start of it; what runs at the same time in it does so
// in the others too, and in the nights of daemon/nighttest. HearsNoComplaint: under the detector a
// program whose output nobody reads did not end.
const notRaced = "HearsNoComplaint|Killed|Outlives|DieAndComeBack|AStop|Hostile|Largest|PluggedIn|DeadLine|TakesNoBytes|BrokersFolder|MistakeInAFile|ABugInTheProgram|PulledPlug|ClosedTerminal|Predict|Batch|PictureIsWhole|OnlyTheListed|WhatTheReader|EveryFileInConfigs"

// patience bounds every wait of these tests. Nothing takes so long unless it hangs.
const patience = 90 * time.Second

// output gathers what a program prints, and lets a test wait for a piece of it.
type output struct {
	mu      sync.Mutex
	text    bytes.Buffer
	changed chan struct{}
}

func newOutput() *output { return &output{changed: make(chan struct{})} }

func (o *output) Write(b []byte) (int, error) {
	o.mu.Lock()
	defer o.mu.Unlock()
	close(o.changed)
	o.changed = make(chan struct{})
	return o.text.Write(b)
}

func (o *output) String() string {
	text, _ := o.now()
	return text
}

func (o *output) now() (string, <-chan struct{}) {
	o.mu.Lock()
	defer o.mu.Unlock()
	return o.text.String(), o.changed
}

// program is a running gemel.
type program struct {
	t        *testing.T
	cmd      *exec.Cmd
	out, err *output
	ended    chan struct{} // closed when it has ended
	endedAt  time.Time
}

// launch starts gemel in the background. It is killed at the end of the test if it lives then.
func launch(t *testing.T, env []string, args ...string) *program {
	t.Helper()
	return launchBy(t, nil, env, args...)
}

// launchBy is launch for another user; nil is ours.
func launchBy(t *testing.T, user *syscall.Credential, env []string, args ...string) *program {
	t.Helper()
	p := &program{t: t, cmd: exec.Command(binary, args...), out: newOutput(), err: newOutput(), ended: make(chan struct{})}
	p.cmd.Env = append(os.Environ(), env...)
	p.cmd.Stdout, p.cmd.Stderr = p.out, p.err
	p.cmd.SysProcAttr = &syscall.SysProcAttr{Credential: user}
	if err := p.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	go func() {
		_ = p.cmd.Wait()
		p.endedAt = time.Now()
		close(p.ended)
	}()
	t.Cleanup(func() {
		_ = p.cmd.Process.Kill()
		<-p.ended
	})
	return p
}

// says waits until the output holds a text. It returns false when the program ended without it.
func (p *program) says(o *output, text string) bool {
	p.t.Helper()
	deadline := time.After(patience)
	for {
		now, changed := o.now()
		if strings.Contains(now, text) {
			return true
		}
		select {
		case <-changed:
		case <-p.ended:
			now, _ := o.now()
			return strings.Contains(now, text)
		case <-deadline:
			p.t.Fatalf("%v never said %q within %s\nstandard output: %s\nstandard error: %s", p.cmd.Args, text, patience, p.out, p.err)
		}
	}
}

// wait returns the exit code; -1 is the end by a signal.
func (p *program) wait() int {
	p.t.Helper()
	select {
	case <-p.ended:
	case <-time.After(patience):
		p.t.Fatalf("%v does not end\nstandard output: %s\nstandard error: %s", p.cmd.Args, p.out, p.err)
	}
	return p.cmd.ProcessState.ExitCode()
}

func (p *program) signal(s syscall.Signal) {
	p.t.Helper()
	if err := p.cmd.Process.Signal(s); err != nil {
		p.t.Fatal(err)
	}
}

// gemel runs a command to its end.
func gemel(t *testing.T, args ...string) (out, errOut string, code int) {
	t.Helper()
	p := launch(t, nil, args...)
	code = p.wait()
	return p.out.String(), p.err.String(), code
}

// must is gemel for a command that has to succeed.
func must(t *testing.T, args ...string) string {
	t.Helper()
	out, errOut, code := gemel(t, args...)
	if code != exitDone {
		t.Fatalf("gemel %v: exit code %d\n%s%s", args, code, out, errOut)
	}
	return out
}

const (
	demoBenchFile  = "../../configs/demo-bench.yaml"
	demoRecipeFile = "../../configs/demo-recipe.yaml"
)

// change is a replacement that has to find what it replaces.
type change struct{ find, by string }

// variant writes a copy of a file with changes.
func variant(t *testing.T, file, to string, changes ...change) string {
	t.Helper()
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range changes {
		re := regexp.MustCompile("(?m)" + c.find)
		if !re.Match(text) {
			t.Fatalf("%s has nothing like %q", file, c.find)
		}
		text = re.ReplaceAll(text, []byte(c.by))
	}
	return writeFile(t, to, string(text))
}

func writeFile(t *testing.T, file, text string) string {
	t.Helper()
	if err := os.WriteFile(file, []byte(text), 0o644); err != nil {
		t.Fatal(err)
	}
	return file
}

// quick is the demo's bench in real time, so that ledger, journal and this test share one clock,
// with mechanics so fast that nothing waits long for them.
func quick(t *testing.T, dir string, more ...change) string {
	t.Helper()
	return variant(t, demoBenchFile, filepath.Join(dir, "quick-bench.yaml"), append([]change{
		{`^  clock: \d+`, "  clock: 1"},
		{`speed: [0-9.]+ deg/s$`, "speed: 2000 deg/s"},
		{`acceleration: [0-9.]+ deg/s2`, "acceleration: 200000 deg/s2"},
		{`settle(_open|_closed)?: [0-9]+ m?s`, "settle$1: 2 ms"},
		{`glance: 10 ms`, "glance: 1 ms"},
	}, more...)...)
}

// truth is the ledger of a gemel sim, read as it is written.
type truth struct {
	mu      sync.Mutex
	records []instruments.Record
	changed chan struct{}
	done    chan struct{}
	bad     error
}

// simulate starts gemel sim on a bench and reads its ledger through a pipe.
func simulate(t *testing.T, benchFile, lines, troubles string) (*program, *truth) {
	t.Helper()
	pipe := filepath.Join(t.TempDir(), "ledger")
	if err := syscall.Mkfifo(pipe, 0o600); err != nil {
		t.Fatal(err)
	}
	l := &truth{changed: make(chan struct{}), done: make(chan struct{})}
	// Opened for both, so that neither end waits for the other; the end of the file is sim's end.
	file, err := os.OpenFile(pipe, os.O_RDWR, 0)
	if err != nil {
		t.Fatal(err)
	}
	p := launch(t, nil, "sim", "--bench", benchFile, "--lines", lines, "--ledger", pipe, "--troubles", troubles)
	go l.read(file)
	go func() {
		<-p.ended
		_, _ = file.WriteString("\n") // the last line of all
	}()
	t.Cleanup(func() {
		_ = p.cmd.Process.Kill() // if the test failed
		<-p.ended
		<-l.done
		_ = file.Close()
	})
	f, err := bench.Load(benchFile)
	if err != nil {
		t.Fatal(err)
	}
	if last := f.Lines[len(f.Lines)-1].Name; !p.says(p.out, last+" ") {
		t.Fatalf("gemel sim: %s", p.err)
	}
	return p, l
}

func (l *truth) read(file *os.File) {
	defer close(l.done)
	for in := bufio.NewReader(file); ; {
		text, err := in.ReadBytes('\n')
		if err != nil || len(text) == 1 {
			return
		}
		var r instruments.Record
		err = json.Unmarshal(text, &r)
		l.mu.Lock()
		l.records = append(l.records, r)
		l.bad = errors.Join(l.bad, err)
		close(l.changed)
		l.changed = make(chan struct{})
		l.mu.Unlock()
	}
}

func (l *truth) from(n int) ([]instruments.Record, <-chan struct{}) {
	l.mu.Lock()
	defer l.mu.Unlock()
	return l.records[n:len(l.records):len(l.records)], l.changed
}

// all is everything that was written.
func (l *truth) all(t *testing.T) []instruments.Record {
	t.Helper()
	l.mu.Lock()
	defer l.mu.Unlock()
	if l.bad != nil {
		t.Fatal(l.bad)
	}
	return l.records
}

// await waits for a record at or behind place n, and returns the place behind it.
func (l *truth) await(t *testing.T, n int, what string, is func(instruments.Record) bool) (instruments.Record, int) {
	t.Helper()
	deadline := time.After(patience)
	for {
		news, changed := l.from(n)
		for _, r := range news {
			n++
			if is(r) {
				return r, n
			}
		}
		select {
		case <-changed:
		case <-l.done:
			t.Fatalf("the simulator ended before %s", what)
		case <-deadline:
			t.Fatalf("%s did not happen within %s", what, patience)
		}
	}
}

// moved says what moved or shone in these records: what must be empty after a refusal.
func moved(records []instruments.Record) []string {
	var all []string
	for _, r := range records {
		switch r.Kind {
		case instruments.MoveStarted, instruments.HomeStarted, instruments.MarkStarted, instruments.GateOpened, instruments.BladeOpened:
			all = append(all, fmt.Sprintf("%s %s", r.Device, r.Kind))
		}
	}
	return all
}

// quit ends a simulator in good order, so that its ledger is whole.
func quit(t *testing.T, p *program) {
	t.Helper()
	p.signal(syscall.SIGINT)
	if code := p.wait(); code != exitDone {
		t.Fatalf("gemel sim: exit code %d\n%s", code, p.err)
	}
}

// serve starts a daemon and waits until it serves. False: it ended before.
func serve(t *testing.T, env []string, args ...string) (*program, bool) {
	t.Helper()
	p := launch(t, env, append([]string{"serve"}, args...)...)
	return p, p.says(p.err, `"message":"serving"`)
}

var ports atomic.Int64 // tried so far

// port finds a free one outside of the range that the system hands out, so that it is still free
// when a daemon is started again.
func port(t *testing.T) string {
	t.Helper()
	for range 2000 {
		i := int(ports.Add(1))
		address := fmt.Sprintf("127.0.0.1:%d", 20000+(os.Getpid()*7+i*13)%12000)
		if l, err := net.Listen("tcp", address); err == nil {
			_ = l.Close()
			return address
		}
	}
	t.Fatal("no free port between 20000 and 32000")
	return ""
}

// within is a context that ends with the test's patience.
func within(t *testing.T) context.Context {
	ctx, cancel := context.WithTimeout(t.Context(), patience)
	t.Cleanup(cancel)
	return ctx
}

func kindOf(e protocol.Entry) protocol.EventKind {
	var ev protocol.Event
	if e.Kind != protocol.EventEntry || json.Unmarshal(e.Body, &ev) != nil {
		return ""
	}
	return ev.Kind
}

func headOf(t *testing.T, e protocol.Entry) protocol.Head {
	t.Helper()
	var h protocol.Head
	if err := json.Unmarshal(e.Body, &h); err != nil {
		t.Fatalf("entry %s: %v", e.ID(), err)
	}
	return h
}
