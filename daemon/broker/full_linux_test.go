package broker

import (
	"context"
	"os"
	"os/exec"
	"os/signal"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// child tells the test that it runs in a process of its own.
const child = "GEMEL_TEST_FULL_DISK"

// limitFiles makes the kernel refuse what would let any file grow beyond size, as a quota or a
// full disk does, until it is called off.
func limitFiles(t *testing.T, size uint64) (off func()) {
	t.Helper()
	var before syscall.Rlimit
	if err := syscall.Getrlimit(syscall.RLIMIT_FSIZE, &before); err != nil {
		t.Fatal(err)
	}
	signal.Ignore(syscall.SIGXFSZ)
	if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &syscall.Rlimit{Cur: size, Max: before.Max}); err != nil {
		t.Fatal(err)
	}
	off = func() {
		if err := syscall.Setrlimit(syscall.RLIMIT_FSIZE, &before); err != nil {
			t.Error(err)
		}
		signal.Reset(syscall.SIGXFSZ)
	}
	t.Cleanup(off)
	return off
}

// After one refused write the server's stream takes nothing more, also when there is room again.
func TestAServerThatMetAFullDiskTakesWritesAgain(t *testing.T) {
	// The limit is the whole process's, and would meet the test's own log: so in a child.
	if os.Getenv(child) == "" {
		c := exec.Command(os.Args[0], "-test.run=^"+t.Name()+"$", "-test.v", "-test.timeout=2m")
		c.Env = append(os.Environ(), child+"=1")
		if out, err := c.CombinedOutput(); err != nil || !strings.Contains(string(out), "--- PASS: "+t.Name()) {
			t.Errorf("%v\n%s", err, out)
		}
		return
	}
	log := &lines{}
	b, err := New(Config{Bench: bench, Dir: t.TempDir(), Log: log.add})
	if err != nil {
		t.Fatal(err)
	}
	b.every = 50 * time.Millisecond
	run(t, b)
	reconnected := make(chan struct{}, 1000)
	daemon, err := b.Connect("test", nats.ReconnectHandler(func(*nats.Conn) { reconnected <- struct{}{} }))
	if err != nil {
		t.Fatal(err)
	}
	ended(t, daemon)
	stream := makeStream(t, daemon)
	js, err := jetstream.New(daemon)
	if err != nil {
		t.Fatal(err)
	}
	publish := func() error {
		ctx, cancel := context.WithTimeout(t.Context(), 200*time.Millisecond)
		defer cancel()
		_, err := js.Publish(ctx, "gemel.skerry.event.r1", make([]byte, 2000), jetstream.WithRetryAttempts(0))
		return err
	}
	first := b.server()
	off := limitFiles(t, 100_000)
	stored := uint64(0)
	for publish() == nil && stored < 1000 {
		stored++
	}
	if stored < 10 || stored == 1000 {
		t.Fatalf("%d messages stored before the disk was full; want some, and then no more", stored)
	}
	off()
	for b.server() == first {
		<-reconnected
	}
	for publish() != nil { // once more if that server met the full disk too
		if err := t.Context().Err(); err != nil {
			t.Fatal(err)
		}
	}
	info, err := stream.Info(t.Context())
	if err != nil || info.State.Msgs < stored+1 {
		t.Errorf("the stream holds %+v, %v; want at least the %d that were acknowledged", info, err, stored+1)
	}
	for b.Trouble() != nil { // until it looks again
		if err := daemon.Flush(); err != nil {
			t.Fatal(err)
		}
	}
	if !strings.Contains(log.String(), "write error") {
		t.Errorf("logged %q; want the write error", log)
	}
}
