//go:build unix

package main

import (
	"context"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/protocol/client"
)

// queueing is a daemon with one long run that is executed and others that wait.
type queueing struct {
	t          *testing.T
	dir, data  string
	args       []string
	daemon     *program
	runs       map[string]protocol.RunID // by title
	kills, did int
}

func newQueueing(t *testing.T) *queueing {
	dir := t.TempDir()
	q := &queueing{t: t, dir: dir, data: filepath.Join(dir, "data"), runs: map[string]protocol.RunID{}}
	q.args = []string{"--bench", quick(t, dir), "--data", q.data}
	q.live()
	return q
}

func (q *queueing) live() {
	q.t.Helper()
	p, serving := serve(q.t, nil, q.args...)
	if !serving {
		q.t.Fatalf("serve: %s", p.err)
	}
	q.daemon = p
}

func (q *queueing) kill() {
	q.daemon.signal(syscall.SIGKILL)
	q.daemon.wait()
	q.kills++
}

func (q *queueing) start(title, dwell string) {
	q.t.Helper()
	file := writeFile(q.t, filepath.Join(q.dir, title+".yaml"), fmt.Sprintf("title: %s\ndwell: %s\n", title, dwell))
	var r protocol.StartReply
	if err := json.Unmarshal([]byte(must(q.t, "start", "--data", q.data, "--recipe", file, "--key", title, "--json")), &r); err != nil {
		q.t.Fatal(err)
	}
	q.runs[title] = r.Run
}

func (q *queueing) client() *client.Client {
	q.t.Helper()
	cl, err := client.ConnectFolder(q.data, protocol.ControlRole)
	if err != nil {
		q.t.Fatal(err)
	}
	return cl
}

// order is the queue by its titles, less an interrupted run that is still to be taken up.
func (q *queueing) order() string {
	q.t.Helper()
	var reply protocol.QueueReply
	if err := json.Unmarshal([]byte(must(q.t, "queue", "--data", q.data, "--json")), &reply); err != nil {
		q.t.Fatal(err)
	}
	var titles []string
	for _, r := range reply.Queue {
		if r.State == protocol.Queued {
			titles = append(titles, r.Title)
		}
	}
	return strings.Join(titles, " ")
}

// reorderUntilKilled shuffles the queue until the daemon is dead. It returns the order that was
// answered last and the one that was asked for when it died.
func (q *queueing) reorderUntilKilled(rng *rand.Rand, after time.Duration) (answered, asked string) {
	q.t.Helper()
	cl := q.client()
	defer cl.Close()
	ctx, cancel := context.WithTimeout(q.t.Context(), patience)
	defer cancel()
	timer := time.AfterFunc(after, func() {
		q.daemon.signal(syscall.SIGKILL)
		<-q.daemon.ended
		cancel()
	})
	defer timer.Stop()
	titles := strings.Fields("A B C D E")
	for {
		rng.Shuffle(len(titles), func(i, j int) { titles[i], titles[j] = titles[j], titles[i] })
		r := protocol.ReorderRequest{Who: "the harness"}
		for _, title := range titles {
			r.Runs = append(r.Runs, q.runs[title])
		}
		if _, err := cl.Reorder(ctx, r); err != nil {
			q.daemon.wait()
			q.kills++
			return answered, strings.Join(titles, " ")
		}
		answered = strings.Join(titles, " ")
		q.did++
	}
}

func TestTheQueueOutlivesEveryDeathOfTheDaemon(t *testing.T) {
	q := newQueueing(t)
	q.start("Long", "10 min")
	q.until("the long run is executed", func() bool { return strings.Contains(must(t, "status", "--data", q.data), "is running") })
	for title := range strings.FieldsSeq("A B C D E") {
		q.start(title, "20 ms")
	}
	if got := q.order(); got != "A B C D E" {
		t.Fatalf("the queue is %s; want it as it was asked for", got)
	}
	rng := rand.New(rand.NewPCG(1, 5))
	for range 3 {
		answered, asked := q.reorderUntilKilled(rng, time.Duration(rng.Int64N(int64(80*time.Millisecond))))
		q.live()
		if got := q.order(); got != asked && answered != "" && got != answered {
			t.Fatalf("after a kill the queue is %s; %s was answered last, and %s asked for", got, answered, asked)
		}
	}
	q.until("the long run goes on", func() bool { return strings.Contains(must(t, "status", "--data", q.data), "is running") })
	out := must(t, "queue", "--data", q.data, "--first", string(q.runs["D"])+","+string(q.runs["B"]))
	if first, second := strings.Index(out, `"D", 1 reading`), strings.Index(out, `"B", 1 reading`); !strings.HasPrefix(out, "5 runs wait on bench skerry, the next first:\n") || first < 0 || second < first {
		t.Errorf("queue --first printed\n%s", out)
	}
	must(t, "queue", "--data", q.data, "--withdraw", string(q.runs["C"]))
	if _, errOut, code := gemel(t, "queue", "--data", q.data, "--withdraw", string(q.runs["Long"])); code != exitFailed || !strings.Contains(errOut, "is being executed; it can be stopped") {
		t.Errorf("withdrawing the run that is executed: code %d, %s", code, errOut)
	}
	if _, _, code := gemel(t, "queue", "--data", q.data, "--first", "x", "--withdraw", "y"); code != exitWrongUse {
		t.Errorf("--first and --withdraw together: code %d; want %d", code, exitWrongUse)
	}
	if out := must(t, "status", "--data", q.data); !strings.Contains(out, `Next: "D", "B", `) || !strings.Contains(out, "and 1 more.") {
		t.Errorf("status says %q; want it to name who is next", out)
	}
	want := strings.Fields(q.order())
	must(t, "stop", "--data", q.data, string(q.runs["Long"]))
	q.until("the queue is empty", func() bool {
		return q.order() == "" && strings.Contains(must(t, "status", "--data", q.data), "finished")
	})
	if out := must(t, "queue", "--data", q.data); out != "No run waits on bench skerry.\n" {
		t.Errorf("an empty queue is printed as %q", out)
	}
	if got := q.began(); !slices.Equal(got, append([]string{"Long"}, want...)) {
		t.Errorf("runs began in the order %v; want Long, then %v", got, want)
	}
	t.Logf("%d kills, %d answered changes of the order", q.kills, q.did)
}

func (q *queueing) until(what string, is func() bool) {
	q.t.Helper()
	for deadline := time.Now().Add(patience); !is(); {
		if time.Now().After(deadline) {
			q.t.Fatalf("%s did not come true within %s", what, patience)
		}
		<-time.After(50 * time.Millisecond)
	}
}

// began lists the titles of the runs in the order in which they began.
func (q *queueing) began() []string {
	t := q.t
	t.Helper()
	book, err := logbook.OpenReadOnly(filepath.Join(q.data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	entries, err := book.After(t.Context(), 0, 1_000_000)
	if err != nil {
		t.Fatal(err)
	}
	var titles []string
	for _, e := range entries {
		if kindOf(e.Entry) != protocol.Began {
			continue
		}
		row, err := book.Run(t.Context(), e.Run)
		if err != nil {
			t.Fatal(err)
		}
		titles = append(titles, row.Title)
	}
	return titles
}

func TestFollowTellsOfADeadDaemonAndGoesOnUnlessToldOtherwise(t *testing.T) {
	q := newQueueing(t)
	q.start("Long", "10 min")
	q.until("the long run is executed", func() bool { return strings.Contains(must(t, "status", "--data", q.data), "is running") })
	q.start("A", "20 ms")
	patient := launch(t, nil, "follow", "--data", q.data)
	brief := launch(t, nil, "follow", "--data", q.data, "--json", "--give-up", "6 s")
	if !patient.says(patient.err, `Next: "A".`) {
		t.Fatalf("follow does not tell what waits: %s", patient.err)
	}
	for _, f := range []*program{patient, brief} {
		q.until("it follows", func() bool {
			must(t, "hold", "--data", q.data)
			must(t, "resume", "--data", q.data)
			return f.out.String() != ""
		})
	}
	q.kill()
	if code := brief.wait(); code != exitFailed || !strings.Contains(brief.err.String(), "nothing was heard of bench skerry for 10 s") || !strings.Contains(brief.err.String(), "given up") {
		t.Errorf("follow --give-up: code %d, %s", code, brief.err)
	}
	if text := patient.err.String(); !strings.Contains(text, "nothing was heard of bench skerry for 5 s") || !strings.Contains(text, "still following") {
		t.Errorf("follow says %q; want it to tell of the silence", text)
	}
	q.live()
	if !patient.says(patient.err, "the daemon is heard again") || !patient.says(patient.out, "interrupted: ") {
		t.Errorf("follow after the daemon's return: %s\n%s", patient.out, patient.err)
	}
	if n := strings.Count(patient.err.String(), "nothing was heard"); n != 1 {
		t.Errorf("the silence is told %d times; want once", n)
	}
	for line := range strings.SplitSeq(strings.TrimSpace(brief.out.String()), "\n") {
		if !json.Valid([]byte(line)) {
			t.Errorf("follow --json printed %q", line)
		}
	}
	if _, errOut, code := gemel(t, "follow", "--data", q.data, "--give-up", "1 s"); code != exitWrongUse || !strings.Contains(errOut, "want 5 s or more") {
		t.Errorf("--give-up of a second: code %d, %s", code, errOut)
	}
}
