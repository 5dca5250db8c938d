package nighttest

import (
	"fmt"
	"regexp"
	"slices"
	"strings"
	"sync"

	"gemel/daemon/bench"
)

// Family makes benches out of one bench file by changing its text, and keeps them: what a file has
// worked out about its optics, all nights on it share.
type Family struct {
	Path string
	Text string

	mu    sync.Mutex
	files map[string]*bench.File
	bad   map[string]error
}

// change is one way in which a bench of the family differs from the file.
type change struct {
	word string
	edit func(text string) string
}

// changes are the words that a bench is called by, in the order in which they are applied.
var changes = []change{
	{"custom", func(t string) string { // the arms' controller speaks a language that the file declares
		t = block(t, "  rotary:", ownDialect("rotary", "arms", "Skerry Workshop,rotary,17,1.2"))
		return strings.NewReplacer("letter: A", `address: "1"`, "letter: B", `address: "2"`, "letter: C", `address: "3"`).Replace(t)
	}},
	{"split", func(t string) string { // the idler's arm has a controller of its own
		t = strings.Replace(t, "  waveplate: {device: simulated}\n", "  waveplate: {device: simulated}\n  idler_stage: {device: simulated}\n", 1)
		t = strings.Replace(t, "  plate:\n", ownDialect("other", "idler_stage", "Skerry Workshop,other,5,1.0")+"  plate:\n", 1)
		t = strings.Replace(t, "(?P<A>[-+][0-9.]+) B(?P<B>[-+][0-9.]+) C(?P<C>[-+][0-9.]+)", "(?P<A>[-+][0-9.]+) C(?P<C>[-+][0-9.]+)", 1)
		t = strings.Replace(t, "REFD A(?P<A>[01]) B(?P<B>[01]) C(?P<C>[01])", "REFD A(?P<A>[01]) C(?P<C>[01])", 1)
		return strings.Replace(t, "controller: rotary\n    letter: B\n", "controller: other\n    address: \"1\"\n", 1)
	}},
	{"wide", func(t string) string {
		return strings.NewReplacer("least: 1.5 deg, margin: 0.2 deg", "least: 1.6 deg, margin: 0.25 deg", "half_width: 0.4 deg", "half_width: 0.7 deg").Replace(t)
	}},
	{"bare", func(t string) string { // detectors that nothing can protect
		t = block(t, "protectors:", "")
		t = regexp.MustCompile(`(?m)^    protect: .*\n`).ReplaceAllString(t, "")
		return regexp.MustCompile(`(?m)^  (signal|idler)_shield: .*\n`).ReplaceAllString(t, "")
	}},
	{"open", func(t string) string { return block(t, "keep_out:", "") }},
	{"fenced", func(t string) string {
		return strings.Replace(t, "keep_out:\n", "keep_out:\n  wall: {axis: signal_arm, between: [-5 deg, -4.2 deg], margin: 0.1 deg}\n  corner: {axis: idler_arm, between: [7 deg, 8 deg], while: {axis: crystal_tilt, between: [2 deg, 4 deg]}, margin: 0.05 deg}\n", 1)
	}},
	{"attended", func(t string) string { return strings.ReplaceAll(t, "unattended: true, ", "") }},
	{"tight", func(t string) string {
		return strings.NewReplacer("trip_rate: 2 MHz", "trip_rate: 600 kHz", "floor: 20 Hz", "floor: 100 Hz", "glance: 10 ms", "glance: 50 ms").Replace(t)
	}},
	{"blind", func(t string) string { // detectors that nobody watches
		return regexp.MustCompile(`(?m)^    (trip_rate|floor|glance): .*\n`).ReplaceAllString(t, "")
	}},
	{"falling", func(t string) string { return strings.ReplaceAll(t, "approach: rising", "approach: falling") }},
	{"watched", func(t string) string {
		return regexp.MustCompile(`(?m)^    glance: .*\n`).ReplaceAllString(t, "${0}    watch: 1500 ms\n")
	}},
	{"steps", func(t string) string { // positions that are only counted, and verified
		return regexp.MustCompile(`(?m)^    position_from: encoder\n    error: 0.004 deg\n`).ReplaceAllString(t,
			"    position_from: steps\n    error: 0.004 deg\n    verify_home: {every: 5 min, tolerance: 0.01 deg}\n")
	}},
}

// members are the benches that nights are drawn on; "plain" is the file as it stands.
var members = []string{"plain", "plain", "custom", "split", "wide", "bare", "open", "attended fenced", "attended", "tight", "blind", "falling",
	"custom bare", "split attended", "split open tight", "custom wide falling", "split wide", "custom attended fenced blind",
	"watched", "tight watched", "steps", "steps attended", "split watched steps", "custom steps"}

// block replaces what begins with a line and is indented deeper, or is empty or a comment between.
func block(text, head, with string) string {
	lines := strings.SplitAfter(text, "\n")
	from := slices.IndexFunc(lines, func(l string) bool { return strings.HasPrefix(l, head) })
	if from < 0 {
		return text
	}
	indent := len(head) - len(strings.TrimLeft(head, " "))
	to := from + 1
	for to < len(lines) && (strings.TrimSpace(lines[to]) == "" || len(lines[to])-len(strings.TrimLeft(lines[to], " ")) > indent) {
		to++
	}
	return strings.Join(lines[:from], "") + with + strings.Join(lines[to:], "")
}

func ownDialect(name, line, identity string) string {
	return fmt.Sprintf(`  %s:
    line: %s
    dialect: custom
    identity: "%s"
    motion: each
    refused: {match: "E(?P<reason>[0-9]+)"}
    unasked:
      - {match: READY, means: restarted}
      - {match: "T=.*", means: chatter}
    asks:
      where: {send: "P{address}", match: "P(?P<angle>-?[0-9]+)", angle_is: 0.0001 deg}
      move: {send: "M{address} {angle}", match: OK, proves: accepted, angle_is: 0.0001 deg}
      at_rest: {send: "S{address}", match: IDLE, otherwise: BUSY|RAMP}
      stop: {bytes: '\x18'}
      homed: {send: "Z{address}", match: "1", otherwise: "0"}
      home: {send: "H{address}", match: OK}
      mark: {send: "R{address}", match: OK}
      identity: {send: I, match: "I(?P<identity>.+)"}
`, name, line, identity)
}

// Bench returns the bench that is called by these words, with the simulation's clock set to 1.
func (f *Family) Bench(words string) (*bench.File, error) {
	f.mu.Lock()
	defer f.mu.Unlock()
	if file, ok := f.files[words]; ok {
		return file, f.bad[words]
	}
	text := f.Text
	for word := range strings.FieldsSeq(words) {
		if word == "plain" {
			continue
		}
		i := slices.IndexFunc(changes, func(c change) bool { return c.word == word })
		if i < 0 {
			return nil, fmt.Errorf("bench %q: no such change; want plain or some of %s", word, changeWords())
		}
		was := text
		if text = changes[i].edit(text); text == was {
			return nil, fmt.Errorf("bench %q: it changes nothing in %s", word, f.Path)
		}
	}
	file, err := AtClockOne(f.Path, []byte(text))
	if f.files == nil {
		f.files, f.bad = map[string]*bench.File{}, map[string]error{}
	}
	f.files[words], f.bad[words] = file, err
	return file, err
}

func changeWords() string {
	var words []string
	for _, c := range changes {
		words = append(words, c.word)
	}
	return strings.Join(words, ", ")
}

// Members lists the benches of the family that the bench reader takes, and why it takes no others.
func (f *Family) Members() (all []string, refused map[string]error) {
	refused = map[string]error{}
	for _, words := range members {
		if _, err := f.Bench(words); err != nil {
			refused[words] = err
			continue
		}
		all = append(all, words)
	}
	return all, refused
}
