package nighttest

import (
	"flag"
	"fmt"
	"maps"
	"os"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/scan/engine"
	"gemel/sim/trouble"
)

var (
	nightsFlag = flag.Int("nights", 0, "how many nights are drawn; 0: a few hundred, fewer with -short or -race")
	seedFlag   = flag.Uint64("seed", 0, "the first night's seed; 0: drawn from the date")
	nightFlag  = flag.String("night", "", "play only this night, as a failure printed it, and tell its story")
)

var theFamily = sync.OnceValues(func() (*Family, error) {
	const file = "../../configs/demo-bench.yaml"
	text, err := os.ReadFile(file)
	return &Family{Path: file, Text: string(text)}, err
})

func family(t testing.TB) *Family {
	t.Helper()
	f, err := theFamily()
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// TestNight draws nights at random: bench, recipes, troubles, kills, people, broker and disk. Each is
// played and judged. What fails is printed as a command that plays it again.
func TestNight(t *testing.T) {
	f := family(t)
	if *nightFlag != "" {
		d, err := ParseNight(f, *nightFlag)
		if err != nil {
			t.Fatal(err)
		}
		r := play(t, d.Night)
		t.Log(r.Story())
		demand(t, d.Night, r, "")
		return
	}
	many, first := *nightsFlag, *seedFlag
	if many == 0 {
		if many = 200; testing.Short() || raced {
			many = 25
		}
	}
	if first == 0 {
		now := time.Now().UTC()
		first = uint64(now.Year()*10000+int(now.Month())*100+now.Day()) * 100000
	}
	members, refused := f.Members()
	for words, err := range refused {
		t.Logf("no nights on the bench %q: %.120s", words, err)
	}
	t.Logf("%d nights from seed %d on", many, first)
	c := newCensus()
	began := time.Now()
	t.Run("nights", func(t *testing.T) {
		for seed := first; seed < first+uint64(many); seed++ {
			t.Run(fmt.Sprint("seed ", seed), func(t *testing.T) {
				t.Parallel()
				d, err := Draw(f, members, seed)
				if err != nil {
					t.Fatal(err)
				}
				line := d.String()
				if back, err := ParseNight(f, line); err != nil || back.String() != line {
					t.Fatalf("the night %q does not read back: %v", line, err)
				}
				r := play(t, d.Night)
				v := r.Examine()
				c.add(d, r, v)
				if len(v.Wrong) > 0 {
					demand(t, d.Night, r, fmt.Sprintf("go test ./daemon/nighttest -run TestNight -args -nights 1 -seed %d\nor:            go test ./daemon/nighttest -run TestNight -args -night %q", seed, line))
				}
			})
		}
	})
	t.Log(c.String(time.Since(began)))
	for _, text := range c.short(many) {
		t.Error(text)
	}
}

// census counts what the nights were made of.
type census struct {
	mu       sync.Mutex
	nights   int
	readings int
	runs     map[protocol.State]int
	lives    int
	benches  map[string]int
	drawn    map[trouble.Kind]int
	effect   map[trouble.Kind]int
	surfaced map[trouble.Kind]int
	shown    map[trouble.Kind]int
	kills    int
	steps    map[[2]any]int // which step, and which kill of the night
	pairs    map[[2]engine.Step]int
	others   map[string]int
	wrong    int
}

func newCensus() *census {
	return &census{runs: map[protocol.State]int{}, benches: map[string]int{}, drawn: map[trouble.Kind]int{}, effect: map[trouble.Kind]int{}, surfaced: map[trouble.Kind]int{},
		shown: map[trouble.Kind]int{}, steps: map[[2]any]int{}, pairs: map[[2]engine.Step]int{}, others: map[string]int{}}
}

func (c *census) add(d Drawn, r *Result, v Verdict) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.nights++
	c.readings += r.Accepted + r.SetAside
	c.lives += r.Lives
	c.benches[d.Words]++
	for _, e := range r.Ends {
		c.runs[e.State]++
	}
	for _, t := range d.Troubles {
		c.drawn[t.Kind]++
	}
	for _, e := range v.Effects {
		c.effect[e.Kind]++
		if e.Surfaced {
			c.surfaced[e.Kind]++
		}
		if e.Shown {
			c.shown[e.Kind]++
		}
	}
	for i, step := range r.Killed {
		c.kills++
		c.steps[[2]any{step, i}]++
		if i > 0 {
			c.pairs[[2]engine.Step{r.Killed[i-1], step}]++
		}
	}
	for what, n := range map[string]int{"orders": len(d.Orders), "broker away": len(d.Broker), "broker older": len(d.Older), "disk full": len(d.Full), "queues": len(d.Before)} {
		c.others[what] += n
	}
	if len(v.Wrong) > 0 {
		c.wrong++
	}
}

func (c *census) String(took time.Duration) string {
	var b strings.Builder
	fmt.Fprintf(&b, "%d nights, %d readings, %d lives, %d kills, %d nights judged wrong, in %s\n", c.nights, c.readings, c.lives, c.kills, c.wrong, took.Round(time.Second))
	fmt.Fprintf(&b, "runs: %s; %s\n", counted(c.runs), counted(c.others))
	fmt.Fprintf(&b, "benches: %s\n", counted(c.benches))
	for _, k := range trouble.Kinds() {
		note := ""
		switch s := (trouble.Trouble{Kind: k}).Surfaces(); {
		case s.Undetectable != "":
			note = "; no instrument shows it"
		case s.Harmless && len(s.Events) == 0:
			note = "; harmless, no event is asked for"
		case s.Harmless:
			note = "; may be harmless"
		}
		fmt.Fprintf(&b, "%s: %d drawn, %d took effect, %d surfaced, %d followed by some event%s\n", k, c.drawn[k], c.effect[k], c.surfaced[k], c.shown[k], note)
	}
	for _, s := range append(slices.Clone(engine.Steps), "") {
		name := s
		if name == "" {
			name = "by the clock"
		}
		fmt.Fprintf(&b, "killed %s: first %d, second %d, third %d\n", name, c.steps[[2]any{s, 0}], c.steps[[2]any{s, 1}], c.steps[[2]any{s, 2}])
	}
	least := 1 << 30
	for _, p := range engine.Steps {
		for _, q := range engine.Steps {
			least = min(least, c.pairs[[2]engine.Step{p, q}])
		}
	}
	fmt.Fprintf(&b, "each step followed by a kill at each other: %d times at least", least)
	return b.String()
}

func counted[K ~string](m map[K]int) string {
	var parts []string
	for _, k := range slices.Sorted(maps.Keys(m)) {
		parts = append(parts, fmt.Sprintf("%s %d", k, m[k]))
	}
	return strings.Join(parts, ", ")
}

// short lists what happened too seldom for the nights to have tested it.
func (c *census) short(nights int) (all []string) {
	const kinds, kills = 500, 20 // in 10,000 nights
	switch {
	case c.nights < nights:
		return nil // some were not played at all, and said why
	case nights < 100:
		return nil
	case nights < 10000:
		for _, k := range trouble.Kinds() {
			if c.effect[k] == 0 {
				all = append(all, fmt.Sprintf("%s never took effect in %d nights", k, nights))
			}
		}
		return all
	}
	for _, k := range trouble.Kinds() {
		if c.effect[k] < kinds {
			all = append(all, fmt.Sprintf("%s took effect %d times; want %d", k, c.effect[k], kinds))
		}
	}
	for _, s := range engine.Steps {
		for i := range 3 {
			if n := c.steps[[2]any{s, i}]; n < kills {
				all = append(all, fmt.Sprintf("kill %d of a night fell on step %s %d times; want %d", i+1, s, n, kills))
			}
		}
		for _, q := range engine.Steps {
			if n := c.pairs[[2]engine.Step{s, q}]; n < kills {
				all = append(all, fmt.Sprintf("a kill at %s was followed by one at %s %d times; want %d", s, q, n, kills))
			}
		}
	}
	return all
}

func TestTheFamilyIsWhatItsWordsSay(t *testing.T) {
	f := family(t)
	members, refused := f.Members()
	if len(members) < 16 {
		t.Errorf("%d benches; %d were refused", len(members), len(refused))
	}
	for words, check := range map[string]func() bool{
		"custom":          func() bool { b, _ := f.Bench("custom"); return b.Controllers[0].Dialect == "custom" },
		"split":           func() bool { b, _ := f.Bench("split"); return len(b.Controllers) == 3 },
		"bare":            func() bool { b, _ := f.Bench("bare"); return len(b.Protectors) == 0 && len(b.Detectors) == 2 },
		"open":            func() bool { b, _ := f.Bench("open"); return len(b.KeepOuts) == 0 },
		"wide":            func() bool { b, _ := f.Bench("wide"); return b.KeepOuts[0].Apart.Least.Degrees() == 1.6 },
		"attended fenced": func() bool { b, _ := f.Bench("attended fenced"); return len(b.KeepOuts) == 4 },
		"attended":        func() bool { b, _ := f.Bench("attended"); return !b.Axes[0].Unattended },
		"tight":           func() bool { b, _ := f.Bench("tight"); return b.Detectors[0].TripHz == 6e5 },
		"blind":           func() bool { b, _ := f.Bench("blind"); return b.Detectors[1].TripHz == 0 },
		"falling":         func() bool { b, _ := f.Bench("falling"); return !b.Axes[0].Rising },
	} {
		if _, err := f.Bench(words); err != nil {
			t.Errorf("%s: %v", words, err)
		} else if !check() {
			t.Errorf("%s is not what it says", words)
		}
	}
	if _, err := f.Bench("purple"); err == nil {
		t.Error("a bench of unknown words is taken; want it refused")
	}
}
