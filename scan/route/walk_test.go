package route_test

import (
	"errors"
	"slices"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

func TestAWalkTakesWhatItsLegsTake(t *testing.T) {
	quick, slow := 0, 0
	rapid.Check(t, func(t *rapid.T) {
		axes := drawAxes(t, rapid.IntRange(2, 4).Draw(t, "axes"), 3)
		for i := range axes {
			axes[i].SpeedDegS, axes[i].AccelDegS2 = float64(rapid.IntRange(0, 4).Draw(t, "speed")), float64(rapid.IntRange(0, 9).Draw(t, "acceleration"))
			axes[i].Settle = time.Duration(rapid.IntRange(0, 300).Draw(t, "settle")) * time.Millisecond
		}
		keepOuts := drawKeepOuts(t, axes, 2)
		w, err := route.NewWalk(axes, keepOuts)
		if err != nil {
			t.Fatal(err)
		}
		for range 6 {
			switch compareAMove(t, w, axes, keepOuts) {
			case 1, 2:
				quick++
			case 0: // no move
			default:
				slow++
			}
		}
	})
	t.Logf("%d moves by at most two legs, %d by more", quick, slow)
	if quick == 0 || slow == 0 {
		t.Error("one road was never taken")
	}
}

// compareAMove draws a move and compares the walk with the legs. It returns how many legs it has.
func compareAMove(t *rapid.T, w *route.Walk, axes []scan.Axis, keepOuts []scan.KeepOut) int {
	at, ok := drawPlace(t, axes, keepOuts, false)
	end, ok2 := drawPlace(t, axes, keepOuts, false)
	if !ok || !ok2 {
		return 0
	}
	targets := drawTargets(t, axes, end)
	// Among ways of equal length the order of the targets chooses; the walk has that of the axes.
	index := func(x scan.AxisTarget) int {
		return slices.IndexFunc(axes, func(a scan.Axis) bool { return a.Name == x.Axis })
	}
	slices.SortFunc(targets, func(a, b scan.AxisTarget) int { return index(a) - index(b) })
	legs, err := route.Legs(axes, keepOuts, at, targets, route.State{})
	dark := false
	if _, conflict := errors.AsType[*route.Conflict](err); conflict {
		dark = true
		legs, err = route.Legs(axes, keepOuts, at, targets, route.State{PumpClosed: true})
	}
	here, there, sent := make([]unit.Angle, len(axes)), make([]unit.Angle, len(axes)), make([]bool, len(axes))
	for i, a := range axes {
		here[i], there[i] = at[a.Name], at[a.Name]
	}
	for _, target := range targets {
		i := slices.IndexFunc(axes, func(a scan.Axis) bool { return a.Name == target.Axis })
		there[i], sent[i] = target.Angle, true
	}
	trip, walkErr := w.Go(here, there, sent)
	if (err == nil) != (walkErr == nil) {
		t.Fatalf("legs say %v, the walk %v", err, walkErr)
	}
	if err != nil {
		return 0
	}
	if want := route.Time(axes, at, legs); trip.Travel+trip.Settle != want || trip.Dark != dark {
		t.Fatalf("from %v to %v: %v; the legs %v take %s", at, targets, trip, legs, want)
	}
	commands := 0
	for _, leg := range legs {
		asked := map[drivers.DeviceName]bool{}
		for _, target := range leg {
			asked[axes[slices.IndexFunc(axes, func(a scan.Axis) bool { return a.Name == target.Axis })].Controller] = true
		}
		commands += len(asked)
	}
	if trip.Sent != commands {
		t.Fatalf("%d commands; the legs %v make %d", trip.Sent, legs, commands)
	}
	return len(legs)
}

func BenchmarkWalk(b *testing.B) {
	axes, keepOuts := skerry()
	w, err := route.NewWalk(axes, keepOuts)
	if err != nil {
		b.Fatal(err)
	}
	here, there, sent := make([]unit.Angle, len(axes)), make([]unit.Angle, len(axes)), make([]bool, len(axes))
	for i := range axes {
		here[i], there[i], sent[i] = 5*deg, 5*deg+unit.Angle(i)*deg/10, true
	}
	for b.Loop() {
		if _, err := w.Go(here, there, sent); err != nil {
			b.Fatal(err)
		}
	}
}
