//go:build unix

package main

import (
	"bytes"
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"io/fs"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"
	"unicode"
	"unicode/utf8"

	"github.com/nats-io/nats.go"
	"github.com/rs/zerolog"

	"gemel/protocol"
)

// victim is a daemon in this process, with everything but the command line: a simulated bench that
// moves, keeper, logbook, broker and service. Around its data folder lie traps.
type victim struct {
	t       testing.TB
	around  string
	held    bool // a run holds and two wait; else the bench is idle
	s       *session
	log     *output
	seeds   []string // that nobody may ever read
	nc      *nats.Conn
	answers chan *nats.Msg
	asked   int
	calm    int   // goroutines
	last    int64 // id of the journal's last entry that was looked at
	runs    [3]protocol.RunID
}

// canary stands in files that no request may have read.
const canary = "canary-7f3a91"

// trip bounds what a request may take: what it sets going is at most a move from limit to limit.
const trip = 20 * time.Second

func newVictim(tb testing.TB, held bool) *victim {
	tb.Helper()
	v := &victim{t: tb, around: tb.TempDir(), held: held, log: newOutput(), answers: make(chan *nats.Msg, 16)}
	for file, text := range map[string]string{
		"bench.yaml": v.bench(), "recipes/ring.yaml": "title: by name\ndwell: 10 s\n",
		"outside.yaml": "title: " + canary + "\ndwell: 10 s\n", "outside": canary, "recipes/broken.yaml": "title: [" + "\n",
	} {
		file = filepath.Join(v.around, file)
		if err := os.MkdirAll(filepath.Dir(file), 0o755); err != nil {
			tb.Fatal(err)
		}
		if err := os.WriteFile(file, []byte(text), 0o644); err != nil {
			tb.Fatal(err)
		}
	}
	// Whoever opens one of these waits for ever, and answers nothing.
	for _, pipe := range []string{"pipe.yaml", "recipes/pipe.yaml"} {
		if err := syscall.Mkfifo(filepath.Join(v.around, pipe), 0o600); err != nil {
			tb.Fatal(err)
		}
	}
	var err error
	flags := benchFlags{Bench: filepath.Join(v.around, "bench.yaml"), Data: filepath.Join(v.around, "data")}
	if v.s, err = open(context.Background(), flags, filepath.Join(v.around, "recipes"), false, zerolog.New(v.log)); err != nil {
		tb.Fatal(err)
	}
	ctx, cancel := context.WithCancel(context.Background())
	ended := make(chan error, 1)
	go func() { ended <- v.s.keeper.Run(ctx) }()
	tb.Cleanup(func() {
		cancel()
		if err := <-ended; err != nil {
			tb.Errorf("the keeper ended with %v", err)
		}
		v.s.close()
	})
	for _, role := range []string{protocol.ControlRole, protocol.WatchRole} {
		seed, err := os.ReadFile(filepath.Join(flags.Data, role+".nk"))
		if err != nil {
			tb.Fatal(err)
		}
		v.seeds = append(v.seeds, strings.TrimSpace(string(seed)))
	}
	nkey, err := nats.NkeyOptionFromSeed(filepath.Join(flags.Data, protocol.ControlRole+".nk"))
	if err != nil {
		tb.Fatal(err)
	}
	if v.nc, err = nats.Connect(v.s.broker.Contact().URL, nkey, nats.CustomInboxPrefix(protocol.InboxPrefix(protocol.ControlRole))); err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(v.nc.Close)
	if _, err := v.nc.ChanSubscribe(v.inbox("*"), v.answers); err != nil {
		tb.Fatal(err)
	}
	v.arrange()
	v.calm = runtime.NumGoroutine()
	return v
}

func (v *victim) inbox(n string) string {
	return protocol.InboxPrefix(protocol.ControlRole) + ".hostile." + n
}

func (v *victim) bench() string {
	text, err := os.ReadFile(demoBenchFile)
	if err != nil {
		v.t.Fatal(err)
	}
	return string(text)
}

// arrange brings the bench back to how every request finds it.
func (v *victim) arrange() {
	v.t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), time.Minute)
	defer cancel()
	k := v.s.keeper
	for {
		s := k.Status(ctx)
		active := s.Run != "" && !s.State.Final()
		switch {
		case ctx.Err() != nil:
			v.t.Fatalf("the bench cannot be arranged again: %+v", s)
		case s.Hand != "":
			_, _ = k.Stop(ctx, protocol.RunRequest{Run: protocol.BenchRun, Who: "the harness"})
		case v.held && s.Run == v.runs[0] && s.State == protocol.Holding && slices.Equal(s.Causes, []protocol.Cause{protocol.ByOperator}) && slices.Equal(s.Queue, []protocol.RunID{v.runs[1], v.runs[2]}):
			return
		case len(s.Queue) > 0:
			_, _ = k.Stop(ctx, protocol.RunRequest{Run: s.Queue[0], Who: "the harness"})
		case active:
			_, _ = k.Stop(ctx, protocol.RunRequest{Run: s.Run, Who: "the harness"})
		case !v.held:
			return
		default:
			for i := range v.runs {
				v.asked++
				r, err := k.Start(ctx, protocol.StartRequest{Recipe: fmt.Sprintf("title: run %d\ndwell: 1 h\n", i), Key: fmt.Sprintf("harness %d", v.asked), Who: "the harness"})
				if err != nil {
					v.t.Fatal(err)
				}
				v.runs[i] = r.Run
			}
			for ctx.Err() == nil {
				if r, err := k.Hold(ctx, protocol.RunRequest{Run: v.runs[0], Who: "the harness"}); err == nil && r.State == protocol.Holding {
					break
				}
				<-time.After(time.Millisecond)
			}
		}
		<-time.After(time.Millisecond)
	}
}

// sight is what a refused request must leave as it was.
type sight struct {
	status string
	files  string
	last   int64 // id of the journal's last entry
}

func (v *victim) look() sight {
	v.t.Helper()
	ctx := context.Background()
	s := v.s.keeper.Status(ctx)
	s.Behind, s.TimeLeft = 0, nil
	status, err := json.Marshal(s)
	if err != nil {
		v.t.Fatal(err)
	}
	for more := true; more; {
		entries, err := v.s.book.After(ctx, v.last, 1000)
		if err != nil {
			v.t.Fatal(err)
		}
		if more = len(entries) > 0; more {
			v.last = entries[len(entries)-1].ID
		}
	}
	var files strings.Builder
	err = filepath.WalkDir(v.around, func(file string, d fs.DirEntry, err error) error {
		rel, _ := filepath.Rel(v.around, file)
		if err != nil {
			return err
		}
		if rel == "data/nats" {
			return fs.SkipDir // the broker's
		}
		fmt.Fprintln(&files, rel)
		if info, err := d.Info(); err == nil && info.Mode().IsRegular() && !strings.HasPrefix(rel, "data/") {
			fmt.Fprintln(&files, info.Size(), info.ModTime())
		}
		return nil
	})
	if err != nil {
		v.t.Fatal(err)
	}
	return sight{string(status), files.String(), v.last}
}

// request is one that is sent.
type request struct {
	verb    string
	body    []byte
	header  nats.Header
	noReply bool
}

// answer is what came back.
type answer struct {
	code string
	text string
	body string
}

func (a answer) refused() bool { return a.code != "" }

// attack sends a request, judges what it did, and brings the bench back.
func (v *victim) attack(q request) answer {
	v.t.Helper()
	for _, run := range []struct{ mark, name string }{{"RUN0", string(v.runs[0])}, {"RUN1", string(v.runs[1])}, {"RUN2", string(v.runs[2])}} {
		if run.name != "" {
			q.body = bytes.ReplaceAll(q.body, []byte(run.mark), []byte(run.name))
		}
	}
	before := v.look()
	v.asked++
	reply := v.inbox(fmt.Sprint(v.asked))
	m := &nats.Msg{Subject: protocol.DoSubject("skerry", q.verb), Reply: reply, Data: q.body, Header: q.header}
	if q.noReply {
		m.Reply = ""
	}
	if err := v.nc.PublishMsg(m); err != nil {
		if len(q.body) < 3<<20 {
			v.t.Fatalf("%s: %v", q, err)
		}
		return answer{code: "broker", text: err.Error()}
	}
	if q.noReply { // requests of one verb are answered in turn, so what answers this has seen the other
		m = &nats.Msg{Subject: m.Subject, Reply: reply, Data: []byte("[]")}
		if err := v.nc.PublishMsg(m); err != nil {
			v.t.Fatal(err)
		}
	}
	a := v.await(q, reply)
	if q.noReply {
		v.arrange()
		return a
	}
	v.judge(q, a, before, v.look())
	v.arrange()
	return a
}

func (q request) String() string {
	return fmt.Sprintf("%s %.300q (%d bytes)", q.verb, q.body, len(q.body))
}

func (v *victim) await(q request, reply string) answer {
	v.t.Helper()
	late := time.After(trip)
	for {
		select {
		case m := <-v.answers:
			if m.Subject == reply {
				return answer{m.Header.Get("Nats-Service-Error-Code"), m.Header.Get("Nats-Service-Error"), string(m.Data)}
			}
			v.t.Errorf("a second answer on %s, before the one to %s", m.Subject, q)
		case <-late:
			v.t.Fatalf("%s: no answer in %v", q, trip)
		}
	}
}

// judge holds what must be true of every request.
func (v *victim) judge(q request, a answer, before, after sight) {
	v.t.Helper()
	var said map[string]any
	if !utf8.ValidString(a.body) || !utf8.ValidString(a.text) || len(a.body) > 1<<20 || json.Unmarshal([]byte(a.body), &said) != nil {
		v.t.Errorf("%s: answered %s %q %.200q; want a JSON object of at most 1 MiB", q, a.code, a.text, a.body)
	}
	if a.refused() {
		if _, findings := said["findings"].([]any); said["error"] == "" || !findings || a.text == "" || strings.ContainsFunc(a.text, func(r rune) bool { return r < ' ' }) {
			v.t.Errorf("%s: refused with %q and %.200q; want a reason in a line, and a problem", q, a.text, a.body)
		}
		if !slices.Contains(strings.Fields("400 403 404 408 409 413 422 501 503"), a.code) {
			v.t.Errorf("%s: refused with %s %q; want a code that is no defect", q, a.code, a.text)
		}
		// An act by hand that is refused when it is tried has taken the bench and given it back.
		if before.status != after.status || before.last != after.last && q.verb != "hand" {
			v.t.Errorf("%s: refused with %q, and it changed something:\n%s %d\n%s %d", q, a.text, before.status, before.last, after.status, after.last)
		}
	} else {
		v.recorded(q, said, before, after)
	}
	if before.files != after.files {
		v.t.Errorf("%s: files were\n%sand are\n%s", q, before.files, after.files)
	}
	for _, secret := range append([]string{canary}, v.seeds...) {
		if strings.Contains(a.text+a.body+v.log.String(), secret) && !bytes.Contains(q.body, []byte(secret)) {
			v.t.Errorf("%s: %.10s… is in the answer or the log", q, secret)
		}
	}
	if n := runtime.NumGoroutine(); n > v.calm+100 {
		v.t.Errorf("%s: %d goroutines, and %d before; want no more for every request", q, n, v.calm)
	}
}

// recorded says whether what was accepted is in the logbook, with who asked, and was in time.
func (v *victim) recorded(q request, said map[string]any, before, after sight) {
	v.t.Helper()
	var plain struct {
		Who     string `json:"who"`
		Act     string `json:"act"`
		Expires string `json:"expires_at"`
	}
	if len(q.body) > 0 {
		if err := json.Unmarshal(q.body, &plain); err != nil {
			v.t.Errorf("%s: accepted, and a plain reader says %v", q, err)
		}
	}
	if plain.Expires != "" {
		if at, err := time.Parse(time.RFC3339Nano, plain.Expires); err != nil || at.Before(time.Now().Add(-trip)) {
			v.t.Errorf("%s: carried out, and it expired at %s", q, plain.Expires)
		}
	}
	reads := slices.Contains([]string{"status", "queue", "forecast"}, q.verb) || q.verb == "hand" && slices.Contains([]string{"where", "stay", "look", "rest"}, plain.Act)
	if q.verb == "start" {
		row, err := v.s.book.Run(context.Background(), protocol.RunID(fmt.Sprint(said["run"])))
		if err != nil || row.Who != plain.Who && before.last != after.last {
			v.t.Errorf("%s: the run is of %q, %v; want it with who asked", q, row.Who, err)
		}
		return
	}
	if before.last == after.last {
		// What is asked for twice is done once: a hold of what holds, a queue in the order that it has.
		if !reads && !slices.Contains([]string{"hold", "reorder", "resume"}, q.verb) {
			v.t.Errorf("%s: accepted, and nothing is written", q)
		}
		return
	}
	if reads && q.verb != "hand" {
		v.t.Errorf("%s: something is written; want nothing", q)
	}
	entries, err := v.s.book.After(context.Background(), before.last, 1000)
	if err != nil {
		v.t.Fatal(err)
	}
	for _, e := range entries {
		var ev protocol.Event
		if json.Unmarshal(e.Body, &ev) == nil && strings.Contains(ev.Text, calledBy(plain.Who)) {
			return
		}
	}
	v.t.Errorf("%s: accepted and written, and nothing says that %q asked for it", q, plain.Who)
}

// calledBy is how a line names who asked.
func calledBy(who string) string {
	var name []rune
	for _, r := range who {
		if !unicode.IsControl(r) {
			name = append(name, r)
		}
	}
	if who = strings.TrimSpace(string(name)); who == "" {
		return "somebody who gave no name"
	}
	if name = []rune(who); len(name) > 80 {
		name = name[:80]
	}
	return string(name)
}

// honest are requests that are well formed, by verb. RUN0 is the run that holds, RUN1 and RUN2 wait.
var honest = []struct{ verb, body string }{
	{"start", `{"recipe":"title: a\ndwell: 10 s\n","key":"k1","who":"ann"}`},
	{"start", `{"recipe_name":"ring","key":"k2","who":"ann"}`},
	{"stop", `{"run":"RUN0","who":"ann"}`},
	{"hold", `{"run":"RUN0","who":"ann"}`},
	{"resume", `{"run":"RUN0","who":"ann"}`},
	{"withdraw", `{"run":"RUN1","who":"ann"}`},
	{"stop_after_point", `{"run":"RUN0","who":"ann"}`},
	{"reorder", `{"runs":["RUN2","RUN1"],"who":"ann"}`},
	{"status", `{}`},
	{"queue", `{}`},
	{"forecast", `{"recipe":"title: a\ndwell: 10 s\n","who":"ann"}`},
	{"forecast", `{"recipe_name":"ring","aim":"","who":"ann"}`},
	{"hand", `{"act":"where","who":"ann"}`},
	{"hand", `{"act":"look","gate_s":0.5,"who":"ann"}`},
	{"hand", `{"act":"move","axis":"signal_arm","to_deg":3,"who":"ann"}`},
	{"hand", `{"act":"move","axis":"idler_arm","by_deg":-0.5,"who":"ann"}`},
	{"hand", `{"act":"shutter","shutter":"pump","open":true,"who":"ann"}`},
	{"hand", `{"act":"set","setting":"delay","value":12,"unit":"ns","who":"ann"}`},
	{"hand", `{"act":"home","axis":"crystal_tilt","who":"ann"}`},
	{"hand", `{"act":"release","who":"ann"}`},
}

// poisons are values where others are wanted, as they stand in JSON.
func poisons() []string {
	deep := strings.Repeat("[", 10_000) + strings.Repeat("]", 10_000)
	objects := strings.Repeat(`{"a":`, 5_000) + "1" + strings.Repeat("}", 5_000)
	all := []string{
		`null`, `true`, `false`, `{}`, `[]`, `""`, `0`, `-0`, `-1`, `1`, `1e999`, `-1e308`, `1e-400`, `NaN`, `Infinity`, `9223372036854775808`, `0.1e1`, `1e9`, `1e18`, `01`, `.5`, `[null]`, `[[]]`,
		deep, objects, strings.Repeat("9", 5000), `"` + strings.Repeat("x", 1<<20) + `"`, `"` + strings.Repeat("x", 201) + `"`, `"` + strings.Repeat("\\u0000", 30) + `"`, "\"\xff\xfe\"", "\"\xed\xa0\x80\"", `"\ud800"`, `"\u202e"`, `"\u0085\u2028"`,
		`"2001-01-01T00:00:00Z"`, `"9999-12-31T23:59:59Z"`, `"0000-01-01T00:00:00Z"`, `"0001-01-01T00:00:00Z"`, `"2031-02-30T00:00:00Z"`, `"now"`, `"-9999-01-01T00:00:00Z"`,
		`"title: a\ndwell: 1e300 s\n"`, `"title: a\ndwell: 10 s\nsweep: [{}]\n"`, `"a: &a [1,1,1,1,1,1,1,1]\nb: &b [*a,*a,*a,*a,*a,*a]\n"`, `"!!binary x"`, `"title: \"\\e[31m\"\ndwell: 10 s\n"`,
		`"` + strings.Repeat("[", 10_000) + `"`, `"` + strings.Repeat(`a:\n `, 3000) + `"`,
		`"control.nk"`, `"-"`, `"*"`, `">"`, `"gemel.skerry.do.stop"`, `"RUN0"`, `"RUN1"`, `["RUN1","RUN1"]`, `["RUN0"]`, `"leave"`, `"rest"`, `"stay"`, `"pump"`, `"detectors"`,
	}
	for _, name := range climbing {
		text, _ := json.Marshal(name)
		all = append(all, string(text))
	}
	return all
}

// climbing are names that mean another file than they should, here or on another system.
var climbing = []string{
	"../outside", "..", ".", "../outside.yaml", "../pipe", "./ring", "ring/../ring", "recipes/../../outside", "/etc/passwd", "/dev/zero", "/dev/stdin", "../data/control.nk", "ring\x00", "ring.yaml\x00.txt",
	`..\outside`, `C:\outside`, `\\host\share\x`, "CON", "ring:stream", "~root", "$HOME", "%2e%2e%2foutside", "ring ", " ring", "*", "rin?", "", "pipe", "outside", "ring.yaml.yaml", "．．／outside", "-",
}

// pair is a key and its value, as they stand in JSON: an object that no honest writer makes.
type pair struct{ key, value string }

// pairs takes an object apart, and returns nothing of what is none.
func pairs(text []byte) (all []pair) {
	d := json.NewDecoder(bytes.NewReader(text))
	if open, err := d.Token(); err != nil || open != json.Delim('{') {
		return nil
	}
	for d.More() {
		key, err := d.Token()
		var value json.RawMessage
		if err != nil || d.Decode(&value) != nil {
			return all
		}
		quoted, _ := json.Marshal(key)
		all = append(all, pair{string(quoted), string(value)})
	}
	return all
}

// twisted makes a hostile request of an honest one.
func twisted(rng *rand.Rand, text []byte) []byte {
	p := pairs(text)
	bad := poisons()
	poison := func() string { return bad[rng.IntN(len(bad))] }
	some := func() int { return rng.IntN(len(p)) }
	for range rng.IntN(3) {
		switch n := rng.IntN(9); {
		case n == 0 || len(p) == 0:
			keys := []string{"run", "runs", "who", "key", "recipe", "recipe_name", "expires_at", "act", "session", "axis", "to_deg", "by_deg", "open", "gate_s", "value", "unit", "live", "aim", "", "__proto__", "RUN", strings.Repeat("k", 70_000)}
			quoted, _ := json.Marshal(keys[rng.IntN(len(keys))])
			p = append(p, pair{string(quoted), poison()})
		case n <= 4:
			p[some()].value = poison()
		case n == 5:
			p = append(p, p[some()])
		case n == 6:
			i := some()
			p = slices.Delete(p, i, i+1)
		case n == 7:
			i, j := some(), some()
			p[i].value, p[j].value = p[j].value, p[i].value
		case n == 8:
			expiry := time.Now().Add(time.Duration(rng.IntN(7)-4) * time.Hour)
			p = append(p, pair{`"expires_at"`, `"` + expiry.Format(time.RFC3339) + `"`})
		}
	}
	var b bytes.Buffer
	b.WriteByte('{')
	for i, one := range p {
		if i > 0 {
			b.WriteByte(',')
		}
		b.WriteString(one.key + ":" + one.value)
	}
	b.WriteByte('}')
	switch out := b.Bytes(); rng.IntN(32) {
	case 0:
		return append(out, out...)
	case 1:
		return out[:rng.IntN(len(out))]
	case 2:
		return append([]byte("\xef\xbb\xbf"), out...)
	case 3:
		out[rng.IntN(len(out))] ^= 1 << rng.IntN(8)
		return out
	default:
		return out
	}
}

// drawn is one request of many, and to which of the two benches.
func drawn(seed uint64) (held bool, q request) {
	rng := rand.New(rand.NewPCG(seed, 17))
	h := honest[rng.IntN(len(honest))]
	q = request{verb: h.verb, body: twisted(rng, []byte(h.body)), noReply: rng.IntN(10) == 0}
	if rng.IntN(10) == 0 {
		q.verb = honest[rng.IntN(len(honest))].verb
	}
	if rng.IntN(10) == 0 {
		q.header = nats.Header{"Nats-Msg-Id": {"r1.1"}, "Nats-Service-Error-Code": {"200"}, "Nats-Rollup": {"all"}, "X": {strings.Repeat("h", rng.IntN(60_000))}}
	}
	return rng.IntN(2) == 0, q
}

func TestNamedHostileRequestsGetTheirAnswer(t *testing.T) {
	idle, held := newVictim(t, false), newVictim(t, true)
	deep := strings.Repeat("[", 10_001) + strings.Repeat("]", 10_001)
	big := strings.Repeat("x", 1<<20)
	const past, beyond = "2001-02-03T04:05:06Z", "2001-02-03T04:05:06.000000000Z"
	type row struct{ verb, body, code, text string }
	rows := []row{
		// Size.
		{"stop", `{"run":"` + big + `"}`, "413", "a request of 1048586 bytes; want at most 65536"},
		{"hand", `{"act":"` + big + `"}`, "413", "a request of 1048586 bytes; want at most 65536"},
		{"status", strings.Repeat(" ", 65537), "413", "a request of 65537 bytes; want at most 65536"},
		{"start", `{"recipe":"` + big + `x","key":"k","who":"ann"}`, "413", "start: a recipe of 1048577 bytes; want at most 1048576"},
		{"forecast", `{"recipe":"` + big + `x","who":"ann"}`, "413", "forecast: a recipe of 1048577 bytes; want at most 1048576"},
		{"start", `{"recipe":"` + big + big + big + `"}`, "413", "a request of 3145741 bytes; want at most 2162688"},
		{"hold", `{"run":"RUN0","who":"` + big[:201] + `"}`, "400", "request: who of 201 bytes; want at most 200"},
		// Depth.
		{"stop", `{"run":` + deep + `}`, "400", "request: run: invalid character '[' exceeded max depth"},
		{"reorder", `{"runs":` + deep + `}`, "400", "request: runs: invalid character '[' exceeded max depth"},
		{"start", `{"recipe":"a: ` + deep + `","key":"k","who":"ann"}`, "422", "the recipe cannot be run"},
		// Types.
		{"stop", `{"run":1,"who":"ann"}`, "400", "request: json: cannot unmarshal number into Go struct field RunRequest.run of type protocol.RunID"},
		{"reorder", `{"runs":{"0":"RUN1"},"who":"ann"}`, "400", "request: json: cannot unmarshal object"},
		{"hand", `{"act":"look","gate_s":1e999,"who":"ann"}`, "400", "request: "},
		{"hand", `{"act":"move","axis":"signal_arm","to_deg":"3","who":"ann"}`, "400", "request: "},
		{"stop", `{"run":"RUN0","run":"RUN1","who":"ann"}`, "400", `request: key "run" twice`},
		{"stop", `{"run":"RUN0","who":"ann","force":true}`, "400", `request: key "force"; want only run, who, expires_at`},
		{"stop", "{\"run\":\"RUN0\",\"who\":\"\xff\"}", "400", "request: not UTF-8"},
		// Too late.
		{"stop", `{"run":"RUN0","who":"ann","expires_at":"` + past + `"}`, "408", "expired at " + beyond},
		{"start", `{"recipe":"title: a\ndwell: 1 s\n","key":"late","who":"ann","expires_at":"` + past + `"}`, "408", "expired at " + beyond},
		{"reorder", `{"runs":["RUN2"],"who":"ann","expires_at":"` + past + `"}`, "408", "expired at " + beyond},
		{"hand", `{"act":"home","axis":"signal_arm","who":"ann","expires_at":"` + past + `"}`, "408", "expired at " + beyond},
		{"stop", `{"run":"RUN0","who":"ann","expires_at":"0001-01-01T00:00:01Z"}`, "408", "expired at 0001-01-01T00:00:01.000000000Z"},
		{"stop", `{"run":"RUN0","who":"ann","expires_at":"0001-01-01T00:00:00Z"}`, "400", `request: time "0001-01-01T00:00:00Z"; want RFC 3339`}, // not: no expiry
		{"stop", `{"run":"RUN0","who":"ann","expires_at":"0000-01-01T00:00:00Z"}`, "400", `request: time "0000-01-01T00:00:00Z"; want RFC 3339`},
		// Runs that are none.
		{"stop", `{"run":"../data","who":"ann"}`, "400", `run "../data"; want the name of the run that is meant`},
		{"withdraw", `{"run":"*","who":"ann"}`, "400", `run "*"; want the name of the run that is meant`},
		{"reorder", `{"runs":["RUN1",">"],"who":"ann"}`, "400", `reorder: run ">"; want the names of runs that wait`},
	}
	for _, name := range climbing {
		quoted, _ := json.Marshal(name)
		code, text := "404", fmt.Sprintf(`recipe name %q; want letters, digits, "-" and "_" only`, name)
		switch name {
		case "":
			code, text = "400", "recipe and recipe_name; want exactly one of them"
		case "pipe":
			text = `recipe "pipe" is no file; want one`
		case "outside", "CON", "-":
			text = fmt.Sprintf("no recipe %q in the folder of recipes", name)
		}
		rows = append(rows, row{"start", `{"recipe_name":` + string(quoted) + `,"key":"climb","who":"ann"}`, code, text},
			row{"forecast", `{"recipe_name":` + string(quoted) + `,"who":"ann"}`, code, text})
	}
	for _, c := range rows {
		for _, v := range []*victim{idle, held} {
			if v == idle && strings.Contains(c.body, "RUN") {
				continue // there are none
			}
			v.calm = runtime.NumGoroutine()
			if a := v.attack(request{verb: c.verb, body: []byte(c.body)}); a.code != c.code || !strings.Contains(a.text, c.text) {
				t.Errorf("%s %.100s (%d bytes): answered %s %q; want %s %q", c.verb, c.body, len(c.body), a.code, a.text, c.code, c.text)
			}
		}
	}
	// What the broker does not carry reaches nobody, and takes nothing with it.
	if a := idle.attack(request{verb: "start", body: bytes.Repeat([]byte("x"), 4<<20+1)}); a.code != "broker" || a.text != nats.ErrMaxPayload.Error() {
		t.Errorf("4 MiB and a byte: %+v; want the broker to refuse it", a)
	}
	for _, verb := range []string{"*", ">"} {
		if m, err := idle.nc.Request(protocol.DoSubject("skerry", verb), []byte(`{"run":"-","who":"ann"}`), 300*time.Millisecond); err == nil {
			t.Errorf("a request on %q is answered %q; want nobody to hear it", verb, m.Data)
		}
	}
	// A name is whatever it is, and is written where it stands in a line.
	for _, who := range []string{"ann\n2031-02-03 bob stopped the run", "\x1b[31mann\x00", "../../ann", strings.Repeat("ä", 100), "＊"} {
		quoted, _ := json.Marshal(who)
		if a := held.attack(request{verb: "withdraw", body: []byte(`{"run":"RUN1","who":` + string(quoted) + `,"expires_at":"9999-12-31T23:59:59Z"}`)}); a.code != "" {
			t.Errorf("a withdrawal by %q: %+v; want it done", who, a)
		}
	}
	if a := idle.attack(request{verb: "start", body: []byte(`{"recipe":"title: ../../title\ndwell: 1 s\n","key":"../../../key","who":"ann"}`)}); a.code != "" || strings.Contains(a.body, "..") {
		t.Errorf("a start under a key that climbs: %+v; want a run with a name of ours", a)
	}
}

func TestTheLargestRequestsLeaveNoMemoryBehind(t *testing.T) {
	v := newVictim(t, false)
	heap := func() uint64 {
		runtime.GC()
		var m runtime.MemStats
		runtime.ReadMemStats(&m)
		return m.HeapAlloc
	}
	before := heap()
	for range 10 {
		for _, q := range []request{
			{verb: "start", body: []byte(`{"recipe":"` + strings.Repeat(`[`, 1<<20) + `","key":"k","who":"ann"}`)},
			{verb: "start", body: []byte(`{"recipe":"` + strings.Repeat(`a: *b\n`, 1<<17) + `","key":"k","who":"ann"}`)},
			{verb: "start", body: []byte(`{"recipe":"` + strings.Repeat(`- `, 1<<18) + `","key":"k","who":"ann"}`)},
			{verb: "forecast", body: []byte(`{"recipe":` + strings.Repeat("[", 1<<21) + `}`)},
			{verb: "reorder", body: []byte(`{"runs":["` + strings.Repeat(`r","`, 10_000) + `"],"who":"ann"}`)},
		} {
			if a := v.attack(q); !a.refused() {
				t.Fatalf("%s: %+v; want it refused", q, a)
			}
		}
	}
	if after := heap(); after > before+64<<20 {
		t.Errorf("the heap holds %d MiB, and %d before 50 large requests; want no more than 64 beyond", after>>20, before>>20)
	}
}

// A seed of a failure is asked again with -run TestHostileRequests -hostile.seed N -hostile.count 1.
var (
	hostileSeed  = flag.Uint64("hostile.seed", 1, "first of the hostile requests")
	hostileCount = flag.Uint64("hostile.count", 250, "number of hostile requests")
)

func TestHostileRequestsAreAnsweredAndDoNoHarm(t *testing.T) {
	idle, held := newVictim(t, false), newVictim(t, true)
	idle.calm, held.calm = runtime.NumGoroutine(), runtime.NumGoroutine()
	codes := map[string]int{}
	count := *hostileCount
	if testing.Short() {
		count = min(count, 80)
	}
	for seed := *hostileSeed; seed < *hostileSeed+count && !t.Failed(); seed++ {
		onHeld, q := drawn(seed)
		v := idle
		if onHeld {
			v = held
		}
		codes[v.attack(q).code]++
		if t.Failed() {
			t.Logf("seed %d", seed)
		}
	}
	t.Logf("answers by code: %v", codes)
	if count >= 250 && (codes[""] == 0 || codes["400"] == 0 || codes["408"] == 0) {
		t.Errorf("answers by code: %v; want some accepted, some refused and some late, or nothing was tried", codes)
	}
}
