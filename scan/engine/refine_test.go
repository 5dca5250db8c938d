package engine

import (
	"context"
	"encoding/json"
	"errors"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

func at(signal unit.Angle) scan.Point {
	return scan.Point{Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: signal}, {Axis: "idler_arm", Angle: 3 * unit.Degree}}}
}

// refining is a night of three points and one pass, to which rounds of points are added.
func refining(t *testing.T, atMost int, rounds ...[]scan.Point) *night {
	t.Helper()
	return newNight(t, func(c *Config) {
		c.Plan.Repeat.Times = 1
		c.Plan.Refine = &scan.Refine{Of: "signal", Along: "signal_arm", Below: unit.Degree / 100, AtMost: atMost, Within: time.Hour}
		c.Refine = func(_ context.Context, round int) (Refinement, error) {
			if round > len(rounds) {
				return Refinement{Grounds: "u is 0.008 deg, asked 0.01 deg"}, nil
			}
			return Refinement{Points: rounds[round-1], Grounds: "u is 0.02 deg, asked 0.01 deg"}, nil
		}
	})
}

func (m *memory) points(t *testing.T) []protocol.Points {
	t.Helper()
	var all []protocol.Points
	for _, e := range m.entries {
		if e.Kind == protocol.PointEntry {
			var points protocol.Points
			if err := json.Unmarshal(e.Body, &points); err != nil {
				t.Fatal(err)
			}
			all = append(all, points)
		}
	}
	return all
}

func TestPointsAreAddedWhereTheCountsSaySo(t *testing.T) {
	var whole []protocol.Entry
	rounds := [][]scan.Point{{at(unit.Degree / 2), at(3 * unit.Degree / 2)}, {at(unit.Degree / 4)}}
	const want = "dark 0.1 1.1 2.1 3.1 dark 4.1 5.1 dark"
	synctest.Test(t, func(t *testing.T) {
		n := refining(t, 10, rounds...)
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := sequenceOf(n.readings(t)); got != want {
			t.Errorf("readings %s; want %s", got, want)
		}
		decided := n.points(t)
		if len(decided) != 4 || decided[1].Refined != 1 || decided[1].Grounds != "u is 0.02 deg, asked 0.01 deg" || decided[2].Points[0].Point != 5 || len(decided[3].Points) != 0 {
			t.Errorf("decided %+v; want the sweep, two rounds and the last word", decided)
		}
		for _, r := range n.readings(t) {
			if r.Point != nil && *r.Point == 5 && r.Angles[0].Before != unit.Degree/4 {
				t.Errorf("point 5 was counted at %s; want 0.25 deg", r.Angles[0].Before)
			}
		}
		whole = slices.Clone(n.entries)
	})
	for cut := 2; cut < len(whole); cut++ {
		synctest.Test(t, func(t *testing.T) {
			n := refining(t, 10, rounds...)
			n.memory.entries = slices.Clone(whole[:cut])
			c := n.eng.Config
			c.Past, c.ResumeAfterRestart = n.fold(t), true
			n.eng = New(c)
			if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
				t.Fatalf("cut after %d: %s, %v; want finished", cut, state, err)
			}
			if got := sequenceOf(n.readings(t)); got != want {
				t.Errorf("cut after %d: readings %s; want %s", cut, got, want)
			}
		})
	}
}

func TestARefinementKeepsItsBounds(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := refining(t, 3, []scan.Point{at(unit.Degree / 2), at(3 * unit.Degree / 2)}, []scan.Point{at(unit.Degree / 4), at(unit.Degree / 3), at(unit.Degree / 5)})
		if _, err := n.eng.Run(t.Context()); err != nil {
			t.Fatal(err)
		}
		decided := n.points(t)
		if last := decided[len(decided)-1]; len(n.eng.progress.refined) != 3 || last.Grounds != "refined: the bound of 3 points is reached" {
			t.Errorf("%d points added, at last %q; want 3 and the bound", len(n.eng.progress.refined), last.Grounds)
		}
	})
	synctest.Test(t, func(t *testing.T) {
		n := refining(t, 10, []scan.Point{at(unit.Degree / 2), at(3 * unit.Degree / 2), at(unit.Degree)})
		n.eng.Plan.Refine.Within = 4 * time.Second
		state, err := n.eng.Run(t.Context())
		if state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := sequenceOf(n.readings(t)); got != "dark 0.1 1.1 2.1 3.1 dark 4.1 dark" || kinds(n.events(t)) != "began set_aside ended" {
			t.Errorf("readings %s, events %s; want the third added point left out and the closing dark taken", got, kinds(n.events(t)))
		}
	})
	synctest.Test(t, func(t *testing.T) {
		n := refining(t, 10)
		n.eng.Config.Refine = func(context.Context, int) (Refinement, error) { return Refinement{}, errors.New("no peak in sight") }
		if state, _ := n.eng.Run(t.Context()); state != protocol.Finished {
			t.Fatalf("it ended %s; want finished", state)
		}
		if last := n.points(t)[1]; last.Grounds != "not refined: no peak in sight" || last.Refined != 1 || len(last.Points) != 0 {
			t.Errorf("written %+v; want why nothing is added", last)
		}
	})
}

func TestAPlanWaitsForEarlierResults(t *testing.T) {
	angle := 2 * unit.Degree
	missing := scan.Earlier{Ask: scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm", From: "Find the ring"}, Otherwise: scan.Hold, Missing: `no finished run has the title "Find the ring"`}
	found := missing
	found.Missing, found.Source = "", &scan.EarlierSource{Run: "q", Sequence: 17, Angle: angle, U: 0.01}
	synctest.Test(t, func(t *testing.T) {
		there := false
		n := newNight(t, func(c *Config) {
			c.Plan.Earlier = []scan.Earlier{missing}
			c.Replan = func(context.Context) (scan.Plan, error) {
				p := aPlan()
				if p.Earlier = []scan.Earlier{missing}; there {
					p.Earlier = []scan.Earlier{found}
					p.Points = []scan.Point{at(angle)}
				}
				return p, nil
			}
		})
		done := make(chan protocol.State)
		go func() {
			state, _ := n.eng.Run(t.Context())
			done <- state
		}()
		time.Sleep(time.Minute)
		synctest.Wait()
		if s := n.eng.Snapshot(); s.State != protocol.Holding || !strings.Contains(s.Reason, `no value for the peak of signal_arm: no finished run has the title "Find the ring"`) {
			t.Fatalf("it is %s: %s; want a hold that says what is missing", s.State, s.Reason)
		}
		for _, what := range n.heard() {
			if strings.HasPrefix(what, "move") || strings.HasPrefix(what, "open") {
				t.Errorf("%q while a value is missing; want nothing moved", what)
			}
		}
		there = true
		if _, err := n.eng.Resume(t.Context(), "mara"); err != nil {
			t.Fatal(err)
		}
		if state := <-done; state != protocol.Finished {
			t.Errorf("it ended %s; want finished", state)
		}
		decided := n.points(t)[0]
		if len(decided.Points) != 1 || len(decided.Earlier) != 1 || decided.Earlier[0].Run != "q" || *decided.Earlier[0].Angle != angle {
			t.Errorf("decided %+v; want the point of the value, and where it came from", decided)
		}
		if got := n.fold(t).Earlier; len(got) != 1 || got[0].Sequence != 17 {
			t.Errorf("folded %+v; want the value for a restart", got)
		}
	})
	synctest.Test(t, func(t *testing.T) {
		stop := missing
		stop.Otherwise = scan.Stop
		n := newNight(t, func(c *Config) { c.Plan.Earlier = []scan.Earlier{stop} })
		if state, _ := n.eng.Run(t.Context()); state != protocol.Failed || len(n.readings(t)) > 0 {
			t.Errorf("it ended %s with %d readings; want failed with none", state, len(n.readings(t)))
		}
	})
}

func TestNobodyGoesToAnEmptyPoint(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		n := newNight(t, func(c *Config) { c.Plan.Points[1].Empty = "no emission at this tilt" })
		planned := n.eng.Snapshot().Planned
		if state, err := n.eng.Run(t.Context()); state != protocol.Finished || err != nil {
			t.Fatalf("Run() = %s, %v; want finished", state, err)
		}
		if got := sequenceOf(n.readings(t)); got != "dark 0.1 2.1 2.2 0.2 dark" || planned != 6 {
			t.Errorf("readings %s of %d planned; want all but point 1", got, planned)
		}
		if points := n.points(t)[0].Points; len(points) != 3 || points[1].Empty == "" {
			t.Errorf("decided %+v; want the empty point in its place", points)
		}
	})
}

func TestTheEndOfTheProgramDecidesNothing(t *testing.T) {
	for name, arrange := range map[string]func(*Config, context.CancelFunc){
		"while the plan is worked out again": func(c *Config, end context.CancelFunc) {
			c.Plan.Earlier = []scan.Earlier{{Ask: scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm"}, Otherwise: scan.Stop}}
			c.Replan = func(ctx context.Context) (scan.Plan, error) { end(); return scan.Plan{}, ctx.Err() }
		},
		"while points are chosen": func(c *Config, end context.CancelFunc) {
			c.Plan.Refine = &scan.Refine{AtMost: 5}
			c.Refine = func(ctx context.Context, _ int) (Refinement, error) { end(); return Refinement{}, ctx.Err() }
		},
		"while the result is worked out": func(c *Config, end context.CancelFunc) {
			c.Plan.Results = []scan.Result{{Kind: scan.Efficiency}}
			c.Conclude = func(ctx context.Context) ([]json.RawMessage, error) { end(); return nil, ctx.Err() }
		},
	} {
		synctest.Test(t, func(t *testing.T) {
			ctx, end := context.WithCancel(t.Context())
			n := newNight(t, func(c *Config) { arrange(c, end) })
			if state, err := n.eng.Run(ctx); state != protocol.Holding || err != nil {
				t.Errorf("%s: Run() = %s, %v; want a hold for the restart", name, state, err)
			}
			if got := kinds(n.events(t)); got != "began held" {
				t.Errorf("%s: events %s; want nothing decided", name, got)
			}
			for _, p := range n.points(t) {
				if p.Refined > 0 {
					t.Errorf("%s: a refinement was written: %q", name, p.Grounds)
				}
			}
		})
	}
	synctest.Test(t, func(t *testing.T) {
		ctx, end := context.WithCancel(t.Context())
		n := referenced(t, scan.Stop, never)
		n.eng.Config.Judge = func(ctx context.Context, _, _ int) (Verdict, error) { end(); return Verdict{}, ctx.Err() }
		if state, _ := n.eng.Run(ctx); state != protocol.Holding || kinds(n.events(t)) != "began held" {
			t.Errorf("while a reference is judged: %s, events %s; want a hold and no verdict", state, kinds(n.events(t)))
		}
	})
}
