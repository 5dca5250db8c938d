package estimate

import (
	"math"
	"math/rand/v2"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"
)

var testStart = time.Date(2031, 2, 3, 22, 0, 0, 0, time.UTC)

// row makes a reading of equal slices from counts that somebody drew.
func row(sequence int64, kind protocol.ReadingKind, start time.Time, sliceS float64, slices []gateCounts, logic Logic) protocol.Reading {
	gate := func(n int) protocol.Seconds {
		return protocol.Seconds(time.Duration(sliceS * float64(n) * 1e9))
	}
	r := protocol.Reading{Kind: kind, Accepted: true, StartedAt: protocol.Time{Time: start}, EndedAt: protocol.Time{Time: start.Add(gate(len(slices)).Duration())},
		GateSet: gate(len(slices)), Gate: gate(len(slices))}
	r.Sequence = sequence
	total := gateCounts{}
	counts := func(g gateCounts) []protocol.Count {
		c := g.pairs
		if logic == OnePerHerald {
			c = g.heralds
		}
		return []protocol.Count{{Channel: "signal", Counts: uint64(g.s)}, {Channel: "idler", Counts: uint64(g.d)}, {Channel: "pairs", Counts: uint64(c)}, {Channel: "shifted", Counts: uint64(g.displaced)}}
	}
	for _, g := range slices {
		total.s, total.d, total.pairs, total.heralds, total.displaced = total.s+g.s, total.d+g.d, total.pairs+g.pairs, total.heralds+g.heralds, total.displaced+g.displaced
		r.Slices = append(r.Slices, protocol.Slice{GateSet: gate(1), Gate: gate(1), Counts: counts(g)})
	}
	r.Counts = counts(total)
	return r
}

func at(r protocol.Reading, axis string, deg float64, point, visit int) protocol.Reading {
	a := unit.Degrees(deg)
	r.Angles = append(r.Angles, protocol.Angle{Axis: axis, Target: a, Before: a, After: a, Proof: "proved"})
	r.Point, r.Visit = &point, &visit
	return r
}

// skerry is the demo's bench for tests, with invented constants.
func skerry(logic Logic) Bench {
	b := Bench{Name: "skerry", PumpNm: 405,
		Counter: Counter{Logic: logic, Latched: true, Pairs: map[string][2]string{"pairs": {"signal", "idler"}},
			Window:    Constant{4e-9, 0.05e-9, "delay scan"},
			Capture:   Constant{0.995, 0.001, "delay scan"},
			Displaced: []Displaced{{"shifted", [2]string{"signal", "idler"}, 1}}},
		AxisError: map[string]Constant{"idler_arm": {U: 0.002}, "signal_arm": {U: 0.002}},
	}
	b.Arms = []Arm{
		{Name: "signal", Channel: "signal", Axis: "signal_arm", DeadTime: Constant{45e-9, 1e-9, "two sources"}, Model: NonParalysable, Afterpulse: Constant{0.008, 0.001, "own"},
			Filter: &Filter{810, 10, "gaussian"}},
		{Name: "idler", Channel: "idler", Axis: "idler_arm", DeadTime: Constant{50e-9, 1e-9, "two sources"}, Model: NonParalysable, Afterpulse: Constant{0.008, 0.001, "own"},
			Filter: &Filter{810, 40, "flat"}, Face: "window", Polarisation: "vertical", Settings: []string{"bias 3.0 V over breakdown"},
			Path: []Transmittance{{"exit face", Constant{0.96, 0.002, "certificate"}, "2031-01-10"}, {"lens", Constant{0.985, 0.002, "own"}, ""}}},
	}
	return b
}

func full() (float64, error) { return 1, nil }

// night is a calibration at one place: light readings between backgrounds.
type night struct {
	w                world
	readings, slices int
	sliceS, darkS    float64
}

// taken is one reading's photons, before a counter's logic makes coincidences of them.
type taken struct {
	kind   protocol.ReadingKind
	sliceS float64
	slices []gateCounts
}

func (n night) take() (all []taken) {
	add := func(kind protocol.ReadingKind, w world, sliceS float64, slices int) {
		t := taken{kind: kind, sliceS: sliceS}
		for range slices {
			t.slices = append(t.slices, w.count(sliceS))
		}
		all = append(all, t)
	}
	spoiled := n.w
	spoiled.spoiled = true
	add(protocol.Background, spoiled, n.darkS, 1)
	for i := range n.readings {
		add(protocol.Light, n.w, n.sliceS, n.slices)
		if i == n.readings/2 {
			add(protocol.Background, spoiled, n.darkS, 1)
		}
	}
	add(protocol.Background, spoiled, n.darkS, 1)
	return all
}

func rowsOf(all []taken, logic Logic) (rows Rows) {
	rows.Run = "20310203T220000-test"
	when := testStart
	for i, t := range all {
		r := row(int64(i+1), t.kind, when, t.sliceS, t.slices, logic)
		when = when.Add(r.Gate.Duration() + time.Second)
		rows.Readings = append(rows.Readings, r)
	}
	return rows
}

// nominal is the world that skerry's constants describe.
func nominal(r *rand.Rand) world {
	b := skerry(EveryPair)
	path := 1.0
	for _, t := range b.Arms[1].Path {
		path *= t.Value
	}
	w := world{etaT: 0.35, etaD: 0.6, pathD: path, noiseT: 3e3, noiseD: 3e3, modelT: NonParalysable, modelD: NonParalysable,
		tauT: b.Arms[0].DeadTime.Value, tauD: b.Arms[1].DeadTime.Value, afterT: 0.008, afterD: 0.008, afterDecayS: 60e-9,
		windowS: b.Counter.Window.Value, displacedS: 3e-6, randomStream: r}
	w.jitterS = jitterFor(w.windowS, b.Counter.Capture.Value)
	return w
}

// jitterFor is the Gaussian jitter that a full window captures this share of.
func jitterFor(windowS, capture float64) float64 {
	return windowS / 2 / (math.Sqrt2 * math.Erfinv(capture))
}
