package main

import (
	"context"
	"encoding/json"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"golang.org/x/sys/unix"

	"gemel/drivers/line"
	"gemel/protocol"
	"gemel/protocol/client"
)

// served is a daemon on the demo's bench.
func served(t *testing.T, args ...string) (data string) {
	t.Helper()
	data = filepath.Join(t.TempDir(), "data")
	p := launch(t, nil, append([]string{"serve", "--data", data}, args...)...)
	if !p.says(p.err, `"serving"`) {
		t.Fatalf("gemel serve: %s", p.err)
	}
	return data
}

func TestAScriptAlignsTheBenchByHand(t *testing.T) {
	data := served(t, "--bench", demoBenchFile)
	out := must(t, "hand", "--data", data, "--json", "--do", "pump open", "--do", "detectors open", "--do", "signal_arm 2.9 deg", "--do", "idler_arm 2.9 deg", "--do", "look 2 s", "--do", "signal_arm +1 deg", "--do", "look 2 s")
	var replies []protocol.HandReply
	for d := json.NewDecoder(strings.NewReader(out)); d.More(); {
		var r protocol.HandReply
		if err := d.Decode(&r); err != nil {
			t.Fatal(err)
		}
		replies = append(replies, r)
	}
	if len(replies) != 7 {
		t.Fatalf("%d replies; want one an act:\n%s", len(replies), out)
	}
	for _, r := range replies {
		if !r.Recorded {
			t.Errorf("%s is not recorded", r.Act)
		}
	}
	on, off := replies[4].Look, replies[6].Look
	if on == nil || off == nil || len(on.Ratios) != 2 || *on.Ratios[0].Ratio < 2**off.Ratios[0].Ratio {
		t.Errorf("on the ring %+v, a degree beside it %+v; want the partners lost there", on, off)
	}
	last := replies[6]
	if a := last.Axes[0]; a.Axis != "signal_arm" || a.Angle.Fixed(2) != "3.90" {
		t.Errorf("%+v; want signal_arm at 3.9 deg", a)
	}
	for _, s := range last.Shutters {
		if !s.Open {
			t.Errorf("%s is closed; want it open again after the move", s.Shutter)
		}
	}
	for act, want := range map[string]struct {
		code int
		text string
	}{
		"signal_arm 20 deg": {exitFailed, "beyond the soft limits"}, "signal_arm 3": {exitWrongUse, "has no unit"}, "dance": {exitWrongUse, "want one of look"},
	} {
		if _, errOut, code := gemel(t, "hand", "--data", data, "--do", act); code != want.code || !strings.Contains(errOut, want.text) {
			t.Errorf("%q ended with %d: %s; want %d, %q", act, code, errOut, want.code, want.text)
		}
	}
	if _, errOut, code := gemel(t, "hand", "--data", data); code != exitWrongUse || !strings.Contains(errOut, "--do") {
		t.Errorf("without a terminal it ended with %d: %s; want to be told of --do", code, errOut)
	}
	// A recipe without a sweep counts where the hand left the arms.
	recipe := writeFile(t, filepath.Join(t.TempDir(), "stand.yaml"), "title: Where the arms stand\ndwell: 2 s\nrepeat: {times: 2, as: in_place}\n")
	must(t, "start", "--data", data, "--recipe", recipe)
	p := launch(t, nil, "follow", "--data", data, "--all")
	if !p.says(p.out, "finished: 2 of 2 readings accepted") || !strings.Contains(p.out.String(), "signal_arm 3.900 deg") {
		t.Errorf("the run was %s; want two readings at 3.9 deg", p.out)
	}
	for _, want := range []string{"opened pump", "moved signal_arm from", "took the hand off the bench, with the bench at rest"} {
		if !strings.Contains(p.out.String(), want) {
			t.Errorf("the journal does not say %q:\n%s", want, p.out)
		}
	}
}

func TestAnotherProgramMayUseLinesThatWereLetGo(t *testing.T) {
	lines := t.TempDir()
	benchFile := quick(t, t.TempDir())
	simulate(t, benchFile, lines, "")
	data := served(t, "--bench", benchFile, "--lines", lines)
	c, err := client.ConnectFolder(data, protocol.ControlRole)
	if err != nil {
		t.Fatal(err)
	}
	defer c.Close()
	session := ""
	ask := func(q protocol.HandRequest) (protocol.HandReply, error) {
		q.Session, q.Who = session, "ann"
		within, cancel := context.WithTimeout(t.Context(), patience)
		defer cancel()
		r, err := c.Hand(within, q)
		if err == nil {
			session = r.Session
		}
		return r, err
	}
	open := func() (line.Port, error) {
		opener, err := line.Address(filepath.Join(lines, "arms"), line.Mode{})
		if err != nil {
			t.Fatal(err)
		}
		return opener(t.Context())
	}
	if _, err := ask(protocol.HandRequest{Act: protocol.HandWhere}); err != nil {
		t.Fatal(err)
	}
	if port, err := open(); err == nil {
		_ = port.Close()
		t.Error("another program could open the line while it was ours")
	}
	if r, err := ask(protocol.HandRequest{Act: protocol.HandRelease}); err != nil || !r.LetGo {
		t.Fatalf("release: %+v, %v", r, err)
	}
	port := eventually(t, open)
	exchange(t, port, "G90\n", "TAKEN")
	exchange(t, port, "G1 A14 F100000\n", "TAKEN") // 4 deg on the bench
	exchange(t, port, "WHERE\n", "A+014.0")
	if _, err := ask(protocol.HandRequest{Act: protocol.HandTake}); err == nil || !strings.Contains(err.Error(), "the lines stay let go") {
		t.Errorf("take, with another program on the line: %v; want it refused", err)
	}
	if err := port.Close(); err != nil {
		t.Fatal(err)
	}
	var r protocol.HandReply
	for range 20 { // the simulator offers a new terminal when the last host went
		if r, err = ask(protocol.HandRequest{Act: protocol.HandTake}); err == nil {
			break
		}
	}
	if err != nil || r.LetGo || len(r.Moved) != 1 || r.Moved[0].Name != "signal_arm" || r.Moved[0].Before != 1 || r.Moved[0].After < 3.9 || r.Moved[0].After > 4.1 {
		t.Errorf("take: %+v, %v; want to be told that signal_arm went from 1 to 4 deg", r.Moved, err)
	}
	if _, err := ask(protocol.HandRequest{Act: protocol.HandLeave}); err != nil {
		t.Error(err)
	}
}

// eventually opens what another process lets go of at its own pace.
func eventually(t *testing.T, open func() (line.Port, error)) line.Port {
	t.Helper()
	for began := time.Now(); ; {
		port, err := open()
		if err == nil {
			return port
		}
		if time.Since(began) > patience {
			t.Fatal(err)
		}
	}
}

// exchange sends a line and waits for an answer that holds a text.
func exchange(t *testing.T, port line.Port, send, want string) {
	t.Helper()
	got := ""
	for began := time.Now(); !strings.Contains(got, want); {
		if time.Since(began) > patience {
			t.Fatalf("%q was answered %q; want %q", send, got, want)
		}
		if got == "" || strings.HasSuffix(send, "WHERE\n") && strings.HasSuffix(got, "\n") {
			if _, err := port.Write([]byte(send)); err != nil {
				t.Fatal(err)
			}
		}
		_ = port.SetReadDeadline(time.Now().Add(time.Second))
		b := make([]byte, 200)
		n, _ := port.Read(b)
		got += string(b[:n])
	}
}

// terminal is a pseudo-terminal of that size, and what was drawn on it.
func terminal(t *testing.T, columns, rows uint16) (slave *os.File, master *os.File, drawn *output) {
	t.Helper()
	master, err := os.OpenFile("/dev/ptmx", os.O_RDWR|unix.O_NOCTTY, 0)
	if err != nil {
		t.Skipf("NO PSEUDO-TERMINALS HERE, SO THE LIVE SCREEN WAS NOT TRIED: %v", err)
	}
	t.Cleanup(func() { _ = master.Close() })
	conn, err := master.SyscallConn()
	if err != nil {
		t.Fatal(err)
	}
	number, failed := 0, error(nil)
	if err := conn.Control(func(fd uintptr) {
		if failed = unix.IoctlSetPointerInt(int(fd), unix.TIOCSPTLCK, 0); failed == nil {
			number, failed = unix.IoctlGetInt(int(fd), unix.TIOCGPTN)
		}
		if failed == nil {
			failed = unix.IoctlSetWinsize(int(fd), unix.TIOCSWINSZ, &unix.Winsize{Col: columns, Row: rows})
		}
	}); err != nil || failed != nil {
		t.Fatal(err, failed)
	}
	if slave, err = os.OpenFile("/dev/pts/"+strconv.Itoa(number), os.O_RDWR|unix.O_NOCTTY, 0); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { _ = slave.Close() })
	drawn = newOutput()
	go func() { _, _ = io.Copy(drawn, master) }()
	return slave, master, drawn
}

func TestAPersonAlignsAtATerminalAndCtrlCLeavesTheBenchAtRest(t *testing.T) {
	data := served(t, "--bench", demoBenchFile)
	slave, master, drawn := terminal(t, 160, 60)
	p := &program{t: t, cmd: exec.Command(binary, "hand", "--data", data, "--gate", "0.2 s"), out: newOutput(), err: drawn, ended: make(chan struct{})}
	p.cmd.Stdin, p.cmd.Stdout, p.cmd.Stderr = slave, p.out, slave
	if err := p.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	go func() {
		_ = p.cmd.Wait()
		close(p.ended)
	}()
	t.Cleanup(func() {
		_ = p.cmd.Process.Kill()
		<-p.ended
	})
	type said struct{ keys, answer string }
	for _, s := range []said{{"", "██████"}, {"pump open\r", "opened pump"}, {"signal_arm +0.5 deg\r", "moved signal_arm from 1.0000 deg to 1.5 deg"}, {"signal_arm 30 deg\r", "beyond the soft limits"}, {"help\r", "the end, at rest"}} {
		if _, err := master.WriteString(s.keys); err != nil {
			t.Fatal(err)
		}
		if !p.says(drawn, s.answer) {
			t.Fatalf("it ended before it said %q:\n%q", s.answer, drawn)
		}
	}
	if out := must(t, "status", "--data", data); !strings.Contains(out, "is in the hand of") {
		t.Errorf("status: %s; want that somebody has the bench in hand", out)
	}
	if _, err := master.WriteString("\x03"); err != nil {
		t.Fatal(err)
	}
	if code := p.wait(); code != exitDone {
		t.Errorf("it ended with %d", code)
	}
	copied := &program{t: t, cmd: p.cmd, out: p.out, err: drawn} // what it drew may still be on its way
	copied.says(drawn, "\x1b[?1049l")
	copied.says(drawn, "took the hand off the bench, with the bench at rest")
	if out := must(t, "status", "--data", data); !strings.Contains(out, "is idle") {
		t.Errorf("status: %s; want the bench idle", out)
	}
	if _, errOut, code := gemel(t, "stop", "--data", data); code != exitFailed || !strings.Contains(errOut, "no run is active") {
		t.Errorf("a stop of nobody ended with %d: %s", code, errOut)
	}
}
