package logbook

import (
	"bufio"
	"context"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
)

// childFolder in the environment makes this test binary a writer that is to be killed.
const childFolder = "GEMEL_LOGBOOK_TEST_FOLDER"

// entriesARun is small so that many kills hit a NewRun.
const entriesARun = 8

func killedRun(n int) protocol.RunID { return protocol.RunID(fmt.Sprintf("r%06d", n)) }

// appendForEver goes on where the folder's journal ends, and prints what was acknowledged.
func appendForEver(dir string) {
	b, err := Open(dir)
	if err != nil {
		fmt.Println("error", err)
		os.Exit(1)
	}
	ctx := context.Background()
	rows, err := b.Runs(ctx)
	n, last := max(len(rows), 1), int64(0)
	if err == nil {
		last, err = b.Last(ctx, killedRun(n))
	}
	for err == nil {
		if last == entriesARun {
			n, last = n+1, 0
		}
		last++
		run := killedRun(n)
		if last == 1 {
			_, err = b.NewRun(ctx, header(run, string(run)), event(run, 1, protocol.OperatorDid, protocol.Queued, "asked for"))
		} else {
			err = b.Append(ctx, aReading(run, last))
		}
		if err == nil {
			fmt.Printf("%s.%d\n", run, last) // one write, no buffer
		}
	}
	fmt.Println("error", err)
	os.Exit(1)
}

func TestNothingAcknowledgedIsLostByKills(t *testing.T) {
	rounds := 20
	if testing.Short() {
		rounds = 3
	}
	dir := t.TempDir()
	random := rand.New(rand.NewPCG(2031, 2))
	acknowledged := map[string]bool{}
	for range rounds {
		child := exec.Command(os.Args[0])
		child.Env = append(os.Environ(), childFolder+"="+dir)
		out, err := child.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := child.Start(); err != nil {
			t.Fatal(err)
		}
		lines := bufio.NewScanner(out)
		take := func() {
			if text := lines.Text(); strings.HasPrefix(text, "error") {
				t.Error(text)
			} else {
				acknowledged[text] = true
			}
		}
		for range 1 + random.IntN(60) {
			if lines.Scan() {
				take()
			}
		}
		<-time.After(time.Duration(random.IntN(1500)) * time.Microsecond) // so that the blow falls anywhere in a commit
		if err := child.Process.Kill(); err != nil {
			t.Fatal(err)
		}
		for lines.Scan() { // acknowledged before the blow, read after it
			take()
		}
		if err := child.Wait(); err == nil {
			t.Fatal("the child ended by itself")
		}

		b, err := Open(dir)
		if err != nil {
			t.Fatal(err)
		}
		found := map[string]bool{}
		for id := int64(0); ; {
			page, err := b.After(t.Context(), id, 500)
			if err != nil {
				t.Fatal(err)
			}
			if len(page) == 0 {
				break
			}
			for _, n := range page {
				id = n.ID
				want := aReading(n.Run, n.Sequence)
				if n.Sequence == 1 {
					want = event(n.Run, 1, protocol.OperatorDid, protocol.Queued, "asked for")
				}
				if found[n.Entry.ID()] || string(n.Body) != string(want.Body) {
					t.Errorf("%s: there twice, or not what was appended", n.Entry.ID())
				}
				found[n.Entry.ID()] = true
			}
		}
		for a := range acknowledged {
			if !found[a] {
				t.Errorf("%s was acknowledged and is lost", a)
			}
		}
		// One entry a kill may be there that nobody heard of; it counts as acknowledged from now on.
		if len(found) > len(acknowledged)+1 {
			t.Errorf("%d entries found, %d acknowledged", len(found), len(acknowledged))
		}
		acknowledged = found
		closeVerified(t, b)
	}
	t.Logf("%d kills, %d entries", rounds, len(acknowledged))
}
