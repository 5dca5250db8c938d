package main

import (
	"errors"
	"fmt"
	"net"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"sync/atomic"
	"syscall"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"gemel/daemon/bench"
	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/sim/instruments"
)

// plug is a cable that can be pulled: a pseudo-terminal of its own behind the daemon's stable path,
// joined to what the simulator offers.
type plug struct {
	t          *testing.T
	link       string // what the daemon opens
	mu         sync.Mutex
	master, to *os.File
	slave      *os.File // held by us, so that what it takes or not is ours to say
	used       map[string]bool
	done       sync.WaitGroup
}

// newTerminal opens a pseudo-terminal in raw mode, and its slave beside it if that is wanted.
func newTerminal(t *testing.T) (master *os.File, path string, slave *os.File) {
	t.Helper()
	master, err := os.OpenFile("/dev/ptmx", os.O_RDWR|unix.O_NOCTTY|unix.O_NONBLOCK, 0)
	if err != nil {
		t.Skipf("SKIPPED: no pseudo-terminals here: %v", err)
	}
	raw, err := master.SyscallConn()
	if err != nil {
		t.Fatal(err)
	}
	var n int
	var inner error
	err = raw.Control(func(fd uintptr) {
		if inner = unix.IoctlSetPointerInt(int(fd), unix.TIOCSPTLCK, 0); inner == nil {
			n, inner = unix.IoctlGetInt(int(fd), unix.TIOCGPTN)
		}
	})
	path = fmt.Sprintf("/dev/pts/%d", n)
	if err == nil && inner == nil {
		slave, err = os.OpenFile(path, os.O_RDWR|unix.O_NOCTTY, 0)
	}
	if err = errors.Join(err, inner); err != nil {
		t.Fatal(err)
	}
	fd := int(slave.Fd())
	mode, err := unix.IoctlGetTermios(fd, unix.TCGETS)
	if err == nil {
		mode.Iflag &^= unix.BRKINT | unix.ISTRIP | unix.INLCR | unix.IGNCR | unix.ICRNL | unix.IXON
		mode.Oflag &^= unix.OPOST
		mode.Lflag &^= unix.ECHO | unix.ECHONL | unix.ICANON | unix.ISIG | unix.IEXTEN
		mode.Cc[unix.VMIN], mode.Cc[unix.VTIME] = 1, 0
		err = unix.IoctlSetTermios(fd, unix.TCSETS, mode)
	}
	if err != nil {
		t.Fatal(err)
	}
	return master, path, slave
}

// newPlug takes the place of a link of the simulator's.
func newPlug(t *testing.T, link string) *plug {
	p := &plug{t: t, link: link, used: map[string]bool{}}
	t.Cleanup(p.pull)
	return p
}

// in plugs the cable into what offers itself under a path. A new terminal each time, and the link
// leads to it.
func (p *plug) in(instrument string) {
	p.t.Helper()
	master, path, slave := newTerminal(p.t)
	// The simulator hears of a pulled cable a moment later, and offers another terminal.
	offer, err := os.Readlink(instrument)
	for deadline := time.Now().Add(patience); err != nil || p.used[offer]; offer, err = os.Readlink(instrument) {
		if time.Now().After(deadline) {
			p.t.Fatalf("%s is not offered again within %s: %v", instrument, patience, err)
		}
		<-time.After(time.Millisecond)
	}
	p.used = map[string]bool{offer: true}
	to, err := os.OpenFile(offer, os.O_RDWR|unix.O_NOCTTY|unix.O_NONBLOCK, 0)
	if err != nil {
		p.t.Fatal(err)
	}
	p.mu.Lock()
	p.master, p.to, p.slave = master, to, slave
	p.mu.Unlock()
	carry := func(from, to *os.File) {
		defer p.done.Done()
		b := make([]byte, 4096)
		for {
			n, err := from.Read(b)
			if err == nil {
				_, err = to.Write(b[:n])
			}
			if err != nil {
				return
			}
		}
	}
	p.done.Add(2)
	go carry(master, to)
	go carry(to, master)
	p.lead(path)
}

func (p *plug) lead(path string) {
	p.t.Helper()
	fresh := p.link + ".new"
	if err := errors.Join(os.Symlink(path, fresh), os.Rename(fresh, p.link)); err != nil {
		p.t.Fatal(err)
	}
}

// deaf plugs in something that takes no bytes at all.
func (p *plug) deaf() {
	p.t.Helper()
	master, path, slave := newTerminal(p.t)
	if err := unix.IoctlSetInt(int(slave.Fd()), unix.TCXONC, unix.TCOOFF); err != nil {
		p.t.Fatal(err)
	}
	p.master, p.slave = master, slave
	p.lead(path)
}

// pull takes the name away first, as the system does, and then hangs up.
func (p *plug) pull() {
	_ = os.Remove(p.link)
	for _, f := range []*os.File{p.master, p.to, p.slave} {
		if f != nil {
			_ = f.Close()
		}
	}
	p.done.Wait()
	p.master, p.to, p.slave = nil, nil, nil
}

// cpu is how long the processor worked for a process.
func (p *program) cpu() time.Duration {
	p.t.Helper()
	text, err := os.ReadFile(fmt.Sprintf("/proc/%d/stat", p.cmd.Process.Pid))
	if err != nil {
		p.t.Fatal(err)
	}
	fields := strings.Fields(string(text[strings.LastIndexByte(string(text), ')')+2:]))
	user, err1 := strconv.Atoi(fields[11])
	system, err2 := strconv.Atoi(fields[12])
	if err := errors.Join(err1, err2); err != nil {
		p.t.Fatal(err)
	}
	return time.Duration(user+system) * 10 * time.Millisecond // a tick of user space is 1/100 s on every Linux
}

// holds counts a process's descriptors, and its threads.
func (p *program) holds() (descriptors, threads int) {
	p.t.Helper()
	for what, n := range map[string]*int{"fd": &descriptors, "task": &threads} {
		list, err := os.ReadDir(fmt.Sprintf("/proc/%d/%s", p.cmd.Process.Pid, what))
		if err != nil {
			p.t.Fatal(err)
		}
		*n = len(list)
	}
	return descriptors, threads
}

// plugged is a daemon with one cable in the test's hand.
type plugged struct {
	t                *testing.T
	data, sim, bench string
	file             *bench.File
	instruments      *program
	ledger           *truth
	plug             *plug
	p                *program
	gates            int
}

func newPlugged(t *testing.T, line string, more ...change) *plugged {
	t.Helper()
	dir := t.TempDir()
	s := &plugged{t: t, data: filepath.Join(dir, "data"), sim: filepath.Join(dir, "instruments"), bench: quick(t, dir, more...)}
	lines := filepath.Join(dir, "lines")
	if err := os.Mkdir(lines, 0o755); err != nil {
		t.Fatal(err)
	}
	s.instruments, s.ledger = simulate(t, s.bench, s.sim, "")
	var err error
	if s.file, err = bench.Load(s.bench); err != nil {
		t.Fatal(err)
	}
	for _, l := range s.file.Lines {
		if l.Name != line {
			if err := os.Symlink(filepath.Join(s.sim, l.Name), filepath.Join(lines, l.Name)); err != nil {
				t.Fatal(err)
			}
		}
	}
	s.plug = newPlug(t, filepath.Join(lines, line))
	s.plug.in(filepath.Join(s.sim, line))
	var ok bool
	if s.p, ok = serve(t, nil, "--bench", s.bench, "--data", s.data, "--lines", lines); !ok {
		t.Fatalf("serve: %s", s.p.err)
	}
	return s
}

// gate waits for the next gate that closes.
func (s *plugged) gate() {
	s.t.Helper()
	over := false
	defer func() {
		if !over {
			entries := entriesOf(s.t, s.data)
			for _, e := range entries[max(0, len(entries)-5):] {
				s.t.Logf("%.600s", e.Body)
			}
		}
	}()
	_, s.gates = s.ledger.await(s.t, s.gates, "a gate", func(r instruments.Record) bool { return r.Kind == instruments.GateClosed })
	over = true
}

// latest skips what happened already.
func (s *plugged) latest() { s.gates = len(s.ledger.all(s.t)) }

func (s *plugged) end(recipe string) {
	s.t.Helper()
	s.p.signal(syscall.SIGTERM)
	if code := s.p.wait(); code != exitDone {
		s.t.Errorf("serve: exit code %d\n%s", code, s.p.err)
	}
	quit(s.t, s.instruments)
	<-s.ledger.done
	atRest(s.t, s.ledger.all(s.t))
	judged(s.t, s.bench, recipe, s.data, s.ledger.all(s.t))
}

// A cable that is pulled and plugged in again comes back as another terminal behind the same path. The
// run goes on each time, and the daemon keeps nothing of the old ones. Another instrument at the path
// is refused by its identity, and a person asked.
func TestACableThatIsPluggedInAgainIsFoundByItsPathAndAnotherInstrumentIsRefused(t *testing.T) {
	t.Parallel()
	times := 3
	if testing.Short() {
		times = 2
	}
	if *realAll {
		times = 100
	}
	s := newPlugged(t, "counter", change{"device: simulated}", "device: simulated, answer_within: 500 ms, longest_answer: 1 s}"})
	long := strings.Replace(killRecipe, "times: 2", fmt.Sprint("times: ", 4+times), 1)
	run := started(t, s.data, long, "plugged")
	counter := filepath.Join(s.sim, "counter")
	s.gate()
	descriptors, threads := s.p.holds()
	for range times {
		s.plug.pull()
		s.latest()
		s.plug.in(counter)
		for range 6 { // a reading was accepted since, which forgets failed attempts
			s.gate()
		}
	}
	after, threadsAfter := s.p.holds()
	// A few come and go: logbook readers, clients of the broker.
	if after > descriptors+8 || threadsAfter > threads+12 {
		t.Errorf("%d descriptors and %d threads after %d times; %d and %d before", after, threadsAfter, times, descriptors, threads)
	}
	s.plug.pull()
	other := variant(t, s.bench, filepath.Join(t.TempDir(), "other.yaml"), change{"Skerry Workshop,counter,3,2.0", "Skerry Workshop,counter,9,2.0"})
	elsewhere := filepath.Join(t.TempDir(), "lines")
	sim, _ := simulate(t, other, elsewhere, "")
	s.plug.in(filepath.Join(elsewhere, "counter"))
	row := awaitRow(t, s.p, s.data, run, "holding", func(r logbook.RunRow) bool { return r.State == protocol.Holding })
	if !slices.Contains(row.Causes, protocol.ByTrouble) || !strings.Contains(row.Reason, "counter") || !strings.Contains(row.Reason, "want") {
		t.Errorf("the run holds for %v: %s; want another instrument refused", row.Causes, row.Reason)
	}
	s.plug.pull()
	s.plug.in(counter)
	s.latest()
	must(t, "resume", "--data", s.data)
	s.gate()
	must(t, "stop", "--data", s.data)
	t.Logf("%d times: %d descriptors and %d threads, %d and %d before; %s", times, after, threadsAfter, descriptors, threads, row.Reason)
	quit(t, sim)
	s.end(long)
}

// newOpenings counts how often a file is opened by anybody.
func newOpenings(t *testing.T, file string) (count func() int) {
	t.Helper()
	fd, err := unix.InotifyInit1(unix.IN_NONBLOCK | unix.IN_CLOEXEC)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := unix.InotifyAddWatch(fd, file, unix.IN_OPEN); err != nil {
		t.Fatal(err)
	}
	// Events that are equal and wait become one, so each is taken as it comes.
	events := os.NewFile(uintptr(fd), "inotify")
	var n atomic.Int64
	done := make(chan struct{})
	go func() {
		defer close(done)
		b := make([]byte, unix.SizeofInotifyEvent)
		for {
			if _, err := events.Read(b); err != nil {
				return
			}
			n.Add(1)
		}
	}()
	t.Cleanup(func() {
		_ = events.Close()
		<-done
	})
	return func() int { return int(n.Load()) }
}

// A cable that was pulled for good: the run holds for a person, and says which line is gone. When it is
// back the run goes on at a word.
func TestACableThatDoesNotComeBackHoldsTheRunForAPerson(t *testing.T) {
	t.Parallel()
	if !*realAll {
		t.Skip("SKIPPED: a minute is the shortest patience that a recipe may have; the long form waits for it")
	}
	s := newPlugged(t, "counter", change{"device: simulated}", "device: simulated, answer_within: 300 ms, longest_answer: 600 ms}"})
	// Without the recipe's word it is waited for for ten minutes.
	long := strings.Replace(strings.Replace(killRecipe, "times: 2", "times: 6", 1), "then: hold", "then: hold, give_up_after: 1 min", 1)
	run := started(t, s.data, long, "gone")
	s.gate()
	s.plug.pull()
	pulled := time.Now()
	row := awaitRow(t, s.p, s.data, run, "holding", func(r logbook.RunRow) bool { return r.State == protocol.Holding })
	took := time.Since(pulled)
	if took < 55*time.Second || took > 85*time.Second {
		t.Errorf("it holds %s after the cable was pulled; want the minute that the recipe gives, and at most one opening of 10 s and the tries for the rest state after it", took.Round(time.Millisecond))
	}
	if !slices.Contains(row.Causes, protocol.ByTrouble) || !strings.Contains(row.Reason, "counter") || !strings.Contains(row.Reason, "no such file") {
		t.Errorf("the run holds for %v: %s; want the counter's line missing", row.Causes, row.Reason)
	}
	descriptors, _ := s.p.holds()
	s.plug.in(filepath.Join(s.sim, "counter"))
	s.latest()
	must(t, "resume", "--data", s.data)
	s.gate()
	must(t, "stop", "--data", s.data)
	t.Logf("held after %s with %d descriptors: %s", took.Round(time.Millisecond), descriptors, row.Reason)
	s.end(long)
}

// A dead line is tried again with pauses: a daemon that waits for one costs little more than an idle one.
func TestADeadLineDoesNotKeepTheProcessorBusy(t *testing.T) {
	t.Parallel()
	window := 2 * time.Second
	if *realAll {
		window = 20 * time.Second
	}
	s := newPlugged(t, "counter")
	over := func() time.Duration {
		before := s.p.cpu()
		<-time.After(window)
		return s.p.cpu() - before
	}
	idle := over()
	long := strings.Replace(killRecipe, "times: 2", "times: 50", 1)
	started(t, s.data, long, "dead")
	s.gate()
	s.plug.pull()
	gone := over()
	// A file that is no terminal: each try to open it is seen.
	tries := newOpenings(t, writeFile(t, s.plug.link, ""))
	counted := 5 * time.Second // in which the longest pause ends
	if *realAll {
		counted = time.Minute
	}
	<-time.After(counted)
	dead := tries()
	// Pauses grow from 50 ms to 2 s, of which chance takes up to half, and begin anew with each connect.
	if n := int(counted/time.Second)*3/2 + 8; dead == 0 || dead > n {
		t.Errorf("a dead path was tried %d times in %s; want 1 to %d", dead, counted, n)
	}
	// Something that opens and hangs up at once, over and over.
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer listener.Close()
	opened := make(chan struct{}, 100000)
	go func() {
		for {
			c, err := listener.Accept()
			if err != nil {
				return
			}
			_ = c.Close()
			opened <- struct{}{}
		}
	}()
	writeFile(t, s.plug.link, "tcp://"+listener.Addr().String())
	<-opened
	hangsUp := over()
	if n := len(opened); n > int(window/time.Second)*20+20 {
		t.Errorf("it was opened %d times in %s", n, window)
	}
	for what, took := range map[string]time.Duration{"whose line is gone": gone, "whose line hangs up": hangsUp} {
		if took > idle+window/4 {
			t.Errorf("a daemon %s worked for %s in %s; an idle one for %s", what, took, window, idle)
		}
	}
	t.Logf("in %s: idle %s, the line gone %s, a dead path tried %d times in %s, hanging up %s (opened %d times)", window, idle, gone, dead, counted, hangsUp, len(opened))
	unrested(t, "stop", "--data", s.data)
	s.plug.pull()
	s.p.signal(syscall.SIGTERM)
	s.p.wait()
}

// An instrument that takes no bytes holds up one write for a moment: requests are answered, and the
// tries that follow do not pile up.
func TestALineThatTakesNoBytesHoldsNothingUp(t *testing.T) {
	t.Parallel()
	s := newPlugged(t, "counter", change{"device: simulated}", "device: simulated, answer_within: 500 ms, longest_answer: 1 s}"})
	long := strings.Replace(killRecipe, "times: 2", "times: 6", 1)
	started(t, s.data, long, "deaf")
	s.gate()
	descriptors, threads := s.p.holds()
	s.plug.pull()
	s.plug.deaf()
	window := 3 * time.Second
	if *realAll {
		window = 60 * time.Second
	}
	<-time.After(window) // for tries that pile up
	after, threadsAfter := s.p.holds()
	if after > descriptors+12 || threadsAfter > threads+16 {
		t.Errorf("%d descriptors and %d threads after %s of hanging writes; %d and %d before", after, threadsAfter, window, descriptors, threads)
	}
	t.Logf("after %s: %d descriptors, %d threads; %d and %d before", window, after, threadsAfter, descriptors, threads)
	asked := time.Now()
	unrested(t, "hold", "--data", s.data)
	// The rest state is tried on that line too, which costs an opening and a write that hangs.
	if took := time.Since(asked); took > 20*time.Second {
		t.Errorf("hold was answered after %s; want the tries on a dead line bounded", took)
	}
	s.plug.pull()
	s.plug.in(filepath.Join(s.sim, "counter"))
	s.latest()
	must(t, "resume", "--data", s.data)
	s.gate()
	must(t, "stop", "--data", s.data)
	s.end(long)
}

// unrested gives an order to a daemon that does not reach the counter: it is carried out, and the answer
// says what is not at rest.
func unrested(t *testing.T, args ...string) {
	t.Helper()
	out, errOut, code := gemel(t, args...)
	if code != exitFailed || !strings.Contains(out+errOut, "THE REST STATE WAS NOT REACHED: stop counting on counter") {
		t.Fatalf("gemel %v: exit code %d; want %d, and the counter named\n%s%s", args, code, exitFailed, out, errOut)
	}
}
