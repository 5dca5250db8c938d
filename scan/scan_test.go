package scan

import (
	"slices"
	"testing"
	"time"
)

func TestSlicesAreWholeAndTheRest(t *testing.T) {
	got := Dwell{Time: 5 * time.Second, Slice: 2 * time.Second}.Slices()
	if want := []time.Duration{2 * time.Second, 2 * time.Second, time.Second}; !slices.Equal(got, want) {
		t.Errorf("Slices() = %v; want %v", got, want)
	}
}

func TestEveryOrderVisitsEveryPointAsOftenAsAsked(t *testing.T) {
	plan := Plan{Points: make([]Point, 5)}
	for name, r := range map[string]Repeat{
		"passes": {Times: 3}, "in place": {Times: 3, InPlace: true}, "serpentine": {Times: 3, Serpentine: true},
		"shuffled": {Times: 3, Shuffled: true, Seed: 7}, "shuffled in place": {Times: 3, InPlace: true, Shuffled: true, Seed: 7},
	} {
		plan.Repeat = r
		visits := plan.Visits()
		seen := map[Visit]int{}
		for _, v := range visits {
			seen[v]++
		}
		if len(visits) != 15 || len(seen) != 15 {
			t.Errorf("%s: %d visits, %d different ones; want 15 of each", name, len(visits), len(seen))
		}
		if again := plan.Visits(); !slices.Equal(visits, again) {
			t.Errorf("%s: asked again it is another order", name)
		}
	}
}

func TestAShuffleDiffersFromPassToPassAndFromSeedToSeed(t *testing.T) {
	plan := Plan{Points: make([]Point, 20), Repeat: Repeat{Times: 2, Shuffled: true, Seed: 1}}
	one, two := plan.pass(1), plan.pass(2)
	plan.Repeat.Seed = 2
	if other := plan.pass(1); slices.Equal(one, two) || slices.Equal(one, other) || slices.IsSorted(one) {
		t.Errorf("passes %v and %v, another seed %v; want three orders", one, two, other)
	}
}
