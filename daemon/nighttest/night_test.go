package nighttest

import (
	"flag"
	"fmt"
	"math/rand/v2"
	"os"
	"strings"
	"sync"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/bench"
	"gemel/protocol"
	"gemel/scan/engine"
	"gemel/sim/instruments"
	"gemel/sim/source"
	"gemel/sim/trouble"
)

var (
	oneSeed   = flag.Int64("night.seed", -1, "run only the troubled night of this seed")
	oneScript = flag.String("night.script", "", "run only the night of this script, as a failure printed it")
	nights    = flag.Int("night.count", 0, "how many troubled nights; 0: 40, or 12 with -short")
)

func demoBench(t testing.TB) *bench.File {
	t.Helper()
	const file = "../../configs/demo-bench.yaml"
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	f, err := AtClockOne(file, text)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// small is a night of 110 readings: what the troubled nights run.
const small = `
title: A troubled night
sweep:
  - {axis: signal_arm, around: 2.864 deg, span: 0.4 deg, step: 0.1 deg}
  - {axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}
order: serpentine
dwell: {time: 4 s, slice: 2 s}
repeat: {times: 2, as: passes}
dark: {every: 25 points, dwell: 4 s, also: [start, end]}
trouble: {retries: 3, then: hold}
`

// demoModel is shared by all nights on the demo bench: what it has worked out once is quick ever after.
var demoModel = sync.OnceValues(func() (*source.Model, error) {
	const file = "../../configs/demo-bench.yaml"
	text, err := os.ReadFile(file)
	if err != nil {
		return nil, err
	}
	f, err := AtClockOne(file, text)
	if err != nil {
		return nil, err
	}
	return bench.TruthModel(f)
})

func play(t *testing.T, n Night) (r *Result) {
	t.Helper()
	var err error
	if n.Model, err = demoModel(); err != nil {
		t.Fatal(err)
	}
	data := t.TempDir()
	synctest.Test(t, func(t *testing.T) {
		var err error
		if r, err = Run(n, data); err != nil {
			t.Fatal(err)
		}
	})
	return r
}

// demand fails the test with everything that is wrong and the line that plays the night again.
func demand(t *testing.T, n Night, r *Result, replay string) {
	t.Helper()
	wrong := r.Judge()
	if len(wrong) == 0 {
		return
	}
	const most = 12
	if len(wrong) > most {
		wrong = append(wrong[:most], fmt.Sprintf("and %d more", len(wrong)-most))
	}
	t.Errorf("%s (%s), %d lives, %d accepted, %d set aside:\n  %s\nplay it again: go test ./daemon/nighttest -run TestTroubledNights -night.script %q\nor: %s",
		r.State, r.Reason, r.Lives, r.Accepted, r.SetAside, strings.Join(wrong, "\n  "), n.Script.String(), replay)
}

func TestAQuietNightIsFlawless(t *testing.T) {
	n := Night{Bench: demoBench(t), Recipe: small}
	r := play(t, n)
	demand(t, n, r, "")
	if r.State != protocol.Finished || r.SetAside != 0 || r.Accepted != r.Facts.Visits+6 {
		t.Errorf("%s (%s) with %d accepted, %d set aside; want finished with %d visits and 6 darks", r.State, r.Reason, r.Accepted, r.SetAside, r.Facts.Visits)
	}
	if r.Lines.Retried != 0 || r.Lines.Strays != 0 || r.Lines.Opened != len(n.Bench.Lines) {
		t.Errorf("lines noticed %+v on a quiet night; want nothing", r.Lines)
	}
}

// long is eight hours of work: the demo's points, counted for a minute each, seven times over.
const long = `
title: Eight hours
sweep:
  - {axis: signal_arm, around: 2.864 deg, span: 0.4 deg, step: 0.1 deg}
  - {axis: idler_arm, around: 2.864 deg, span: 2.4 deg, step: 0.2 deg}
order: serpentine
dwell: {time: 60 s, slice: 10 s}
repeat: {times: 7, as: passes}
dark: {every: 30 min, dwell: 60 s, also: [start, end]}
`

func TestEightHoursTakeSeconds(t *testing.T) {
	n := Night{Bench: demoBench(t), Recipe: long}
	began := time.Now()
	r := play(t, n)
	demand(t, n, r, "")
	t.Logf("%s: %d readings in %s of bench time took %s", r.State, r.Accepted, r.Took.Round(time.Minute), time.Since(began).Round(time.Millisecond))
	if r.State != protocol.Finished || r.Took < 8*time.Hour-20*time.Minute {
		t.Errorf("%s after %s; want finished after about 8 h", r.State, r.Took)
	}
}

// draw makes a troubled night from a seed: troubles on wires and in the world, three kills, people,
// a broker that goes away.
func draw(t testing.TB, seed uint64) Night {
	f := demoBench(t)
	rng := rand.New(rand.NewPCG(seed, 1))
	length := 11 * time.Minute // of a night without trouble
	var targets []trouble.Target
	for _, c := range f.Controllers {
		targets = append(targets, trouble.Target{Device: string(c.Name), Answers: 600, Longest: 2 * time.Second, Restart: true})
	}
	targets = append(targets, trouble.Target{Device: string(f.Counter.Name), Answers: 900, Longest: 2 * time.Second})
	for _, s := range append(f.Protectors, *f.Pump) {
		targets = append(targets, trouble.Target{Device: string(s.Name), Answers: 300, Longest: 2 * time.Second})
	}
	targets = append(targets, trouble.Target{Device: "monitor", Answers: 900, Longest: 2 * time.Second})
	s := Script{Troubles: trouble.Draw(rng, trouble.Night{Targets: targets, For: length, LampHz: 6e6}, 4+rng.IntN(12))}
	for range 3 {
		// Each life has to be long enough to meet its kill: a quarter of the night at most.
		k := Kill{After: time.Duration(rng.Int64N(int64(length / 5)))}
		if rng.IntN(2) == 0 {
			k = Kill{Step: engine.Steps[rng.IntN(len(engine.Steps)-2)], Nth: 1 + rng.IntN(18)} // the last two are rare
		} else if rng.IntN(8) == 0 {
			k = Kill{Step: engine.StepRested, Nth: 1}
		}
		s.Kills = append(s.Kills, k)
	}
	if rng.IntN(3) == 0 {
		at := time.Duration(rng.Int64N(int64(length)))
		s.Orders = append(s.Orders, Order{At: at, What: "hold"}, Order{At: at + time.Duration(rng.Int64N(int64(length))), What: "resume"})
	}
	if rng.IntN(8) == 0 {
		s.Orders = append(s.Orders, Order{At: length + time.Duration(rng.Int64N(int64(length))), What: "stop"})
	}
	if rng.IntN(2) == 0 {
		s.Broker = append(s.Broker, Away{At: time.Duration(rng.Int64N(int64(length))), For: time.Duration(rng.Int64N(int64(length)))})
	}
	return Night{Bench: f, Recipe: small, Script: s}
}

func TestTroubledNights(t *testing.T) {
	if *oneScript != "" {
		s, err := ParseScript(*oneScript)
		if err != nil {
			t.Fatal(err)
		}
		n := Night{Bench: demoBench(t), Recipe: small, Script: s}
		r := play(t, n)
		t.Log(r.Story())
		demand(t, n, r, "")
		return
	}
	many := *nights
	if many == 0 {
		many = 40
		if testing.Short() {
			many = 12
		}
	}
	first, last := int64(1), int64(many)
	if *oneSeed >= 0 {
		first, last = *oneSeed, *oneSeed
	}
	began := time.Now()
	var readings, struck, retried, lives, most atomic.Int64
	t.Run("nights", func(t *testing.T) {
		for seed := first; seed <= last; seed++ {
			t.Run(fmt.Sprint("seed ", seed), func(t *testing.T) {
				t.Parallel()
				n := draw(t, uint64(seed))
				if back, err := ParseScript(n.Script.String()); err != nil || back.String() != n.Script.String() {
					t.Fatalf("the script %q does not read back: %v", n.Script, err)
				}
				r := play(t, n)
				demand(t, n, r, fmt.Sprintf("go test ./daemon/nighttest -run TestTroubledNights -night.seed %d", seed))
				if !r.State.Final() {
					t.Errorf("the run is %s (%s); want an end", r.State, r.Reason)
				}
				readings.Add(int64(r.Accepted + r.SetAside))
				lives.Add(int64(r.Lives))
				retried.Add(int64(r.Lines.Retried + r.Lines.Strays + r.Lines.Strangers))
				if r.State == protocol.Finished {
					most.Add(1)
				}
				for _, m := range r.Line {
					if m.World != nil && m.World.Kind == instruments.Troubled {
						struck.Add(1)
					}
				}
			})
		}
	})
	count := last - first + 1
	t.Logf("%d nights, %d finished, %d readings, %d lives, %d wire troubles struck, lines asked again or dropped %d, in %s",
		count, most.Load(), readings.Load(), lives.Load(), struck.Load(), retried.Load(), time.Since(began).Round(time.Millisecond))
	if count > 10 && (struck.Load() < count || retried.Load() < count || lives.Load() < 7*count/2 || most.Load() < count/2) {
		t.Error("too little happened; the nights test nothing")
	}
}

func TestANightReplayedIsTheSameNight(t *testing.T) {
	n := draw(t, 3)
	one, two := play(t, n), play(t, n)
	a, b := one.Story(), two.Story()
	if a != b {
		al, bl := strings.Split(a, "\n"), strings.Split(b, "\n")
		for i := range min(len(al), len(bl)) {
			if al[i] != bl[i] {
				t.Fatalf("line %d of the story differs:\n%s\n%s", i+1, al[i], bl[i])
			}
		}
		t.Fatalf("one story has %d lines, the other %d", len(al), len(bl))
	}
	if len(a) < 1000 {
		t.Errorf("a story of %d bytes; want the whole night", len(a))
	}
}
