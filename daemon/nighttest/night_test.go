package nighttest

import (
	"fmt"
	"os"
	"strings"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/bench"
	"gemel/protocol"
	"gemel/sim/source"
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
	t.Errorf("%s (%s), %d lives, %d accepted, %d set aside:\n  %s\nplay it again: %s",
		r.State, r.Reason, r.Lives, r.Accepted, r.SetAside, strings.Join(wrong, "\n  "), replay)
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

func TestADetectorThatLatchesInALongDwellEndsIt(t *testing.T) {
	n := Night{Bench: demoBench(t), Recipe: `
title: Two long dwells
sweep: [{axis: idler_arm, at: [2.864 deg, 3 deg]}]
dwell: {time: 30 min, slice: 2 s}
trouble: {retries: 3, then: hold}
`}
	var err error
	if n.Script, err = ParseScript("| latched(idler, at 15m, for 40s)"); err != nil {
		t.Fatal(err)
	}
	r := play(t, n)
	demand(t, n, r, "")
	// The dwell in which it latched is given up then, and not half an hour later. One look finds it still
	// latched, the next one well.
	if most := 80 * time.Minute; r.State != protocol.Finished || r.Accepted != 2+1 || r.SetAside != 1+1 || r.Took > most {
		t.Errorf("%s (%s) with %d accepted, %d set aside, after %s; want two dwells accepted and one set aside within %s, and two looks", r.State, r.Reason, r.Accepted, r.SetAside, r.Took, most)
	}
}

func TestANightReplayedIsTheSameNight(t *testing.T) {
	f := family(t)
	members, _ := f.Members()
	d, err := Draw(f, members, 3)
	if err != nil {
		t.Fatal(err)
	}
	one, two := play(t, d.Night), play(t, d.Night)
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
