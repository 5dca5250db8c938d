package recipe

import (
	"errors"
	"fmt"
	"math"
	"reflect"
	"slices"
	"strings"
	"testing"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// bench is what every recipe here is planned for.
func bench() Facts {
	axis := func(name string, low, high unit.Angle) scan.Axis {
		return scan.Axis{Name: drivers.AxisName(name), Role: name, Low: low, High: high}
	}
	plate := axis("pump_waveplate", -10*unit.Degree, 100*unit.Degree)
	plate.Park = new(unit.Angle(0))
	return Facts{
		Axes:        []scan.Axis{axis("signal_arm", -unit.Degree, 8*unit.Degree), axis("idler_arm", -unit.Degree, 8*unit.Degree), axis("crystal_tilt", -5*unit.Degree, 5*unit.Degree), plate},
		Settings:    []Setting{{Name: "delay", Unit: "ns", Low: -20, High: 20}, {Name: "oven", Unit: "Cel", Low: 10, High: 60}},
		PumpShutter: true, GateMin: 10 * time.Millisecond, GateMax: 100 * time.Second,
		Singles:      []drivers.Channel{"a", "b"},
		Coincidences: map[drivers.Channel][2]drivers.Channel{"ab": {"a", "b"}},
		Detectors:    map[string]drivers.Channel{"signal": "a", "idler": "b"},
		Conjugate:    mirror,
		Emission:     ring, Flanks: halves, Expect: source, Earlier: measured,
		Sensors: []Sensor{{Name: "pump_power", Unit: "mW"}, {Name: "crystal_temperature", Unit: "Cel"}},
	}
}

// mirror is a crystal whose partners leave on the mirror side, moved by the tilt, up to 7 deg.
func mirror(role string, armDeg, tiltDeg float64) (float64, error) {
	if armDeg > 7 {
		return 0, errors.New("the partner does not leave the crystal")
	}
	if role == "idler_arm" {
		return armDeg - tiltDeg/10, nil
	}
	return armDeg + tiltDeg/10, nil
}

// ring is where the mirror's light leaves, up to a tilt of 4 deg.
func ring(role string, tiltDeg float64) (float64, error) {
	if tiltDeg > 4 {
		return 0, errors.New("the ring is closed")
	}
	if role == "idler_arm" {
		return 2.8 + tiltDeg/10, nil
	}
	return 2.8, nil
}

// spread is the standard deviation of the coincidences about the partner's place.
const spread = 0.3 // deg

// beside is how far an arm is beside the partner of the other, whose crystal is not tilted.
func beside(axes []scan.AxisTarget) float64 {
	var off float64
	for _, t := range axes {
		switch t.Axis {
		case "signal_arm":
			off += t.Angle.Degrees()
		case "idler_arm":
			off -= t.Angle.Degrees()
		}
	}
	return off
}

func halves(arm drivers.AxisName, top []scan.AxisTarget) (low, high unit.Angle, err error) {
	i := slices.IndexFunc(top, func(t scan.AxisTarget) bool { return t.Axis == arm })
	centre := top[i].Angle.Degrees() + beside(top)
	if arm == "signal_arm" {
		centre = top[i].Angle.Degrees() - beside(top)
	}
	half := spread * math.Sqrt(2*math.Ln2)
	return unit.Degrees(centre - half), unit.Degrees(centre + half), nil
}

// source gives 2000 coincidences a second at the top, 50 of them accidental.
func source(axes []scan.AxisTarget, _ []scan.SettingTarget) (scan.Expected, error) {
	pairs := 1950 * math.Exp(-beside(axes)*beside(axes)/(2*spread*spread))
	return scan.Expected{
		CountsHz:      map[drivers.Channel]float64{"a": 20000, "b": 15000, "ab": pairs + 50},
		AccidentalsHz: map[drivers.Channel]float64{"ab": 50},
	}, nil
}

// measured is a logbook with a few runs in it.
func measured(ask scan.EarlierAsk) (scan.EarlierSource, error) {
	switch ask.From {
	case "Find the ring":
		return scan.EarlierSource{Run: "R7", Sequence: 40, Angle: 2_876_543 * unit.Degree / 1_000_000, U: 0.004}, nil
	case "At the edge":
		return scan.EarlierSource{Run: "R8", Sequence: 41, Angle: 7900 * unit.Degree / 1000, U: 0.004}, nil
	case "Delay scan":
		return scan.EarlierSource{Run: "R9", Sequence: 12, Value: 3.217, U: 0.02}, nil
	}
	return scan.EarlierSource{}, fmt.Errorf("no finished run %q has one", ask.From)
}

func planOf(t *testing.T, body string) scan.Plan {
	t.Helper()
	return plan(t, "title: A\ndwell: 1 s\n"+body)
}

func plan(t *testing.T, text string) scan.Plan {
	t.Helper()
	r, err := Parse("r.yaml", []byte(text))
	if err != nil {
		t.Fatal(err)
	}
	p, err := r.Plan(bench())
	if err != nil {
		t.Fatal(err)
	}
	return p
}

func anglesOf(p scan.Plan, axis drivers.AxisName) []string {
	var out []string
	for _, point := range p.Points {
		for _, a := range point.Axes {
			if a.Axis == axis {
				out = append(out, strings.TrimSuffix(strings.TrimRight(a.Angle.Fixed(9), "0"), "."))
			}
		}
	}
	return out
}

func TestGridsAreExactAndReachBothEnds(t *testing.T) {
	for _, c := range []struct{ name, entry, want string }{
		{"a tenth of a degree ends on the degree", "from: 0 deg, to: 1 deg, step: 0.1 deg", "0 0.1 0.2 0.3 0.4 0.5 0.6 0.7 0.8 0.9 1"},
		{"downwards from above to", "from: 1 deg, to: 0 deg, step: 0.25 deg", "1 0.75 0.5 0.25 0"},
		{"through zero", "from: -0.2 deg, to: 0.2 deg, step: 0.1 deg", "-0.2 -0.1 0 0.1 0.2"},
		{"units may differ where they are exact", "from: 0 deg, to: 30 arcmin, step: 600 arcsec", "0 0.166666667 0.333333333 0.5"},
		{"around a centre", "around: 2.864 deg, span: 0.4 deg, step: 0.1 deg", "2.664 2.764 2.864 2.964 3.064"},
		{"around a centre with an odd number of steps", "around: 3 deg, span: 0.3 deg, step: 0.1 deg", "2.85 2.95 3.05 3.15"},
		{"listed as they come", "at: [3 deg, 1 deg, 2 deg, 1 deg]", "3 1 2 1"},
		{"one value", "at: 2.5 deg", "2.5"},
		{"milliradians round once a point", "from: 0 mrad, to: 10 mrad, step: 2.5 mrad", "0 0.143239449 0.286478898 0.429718346 0.572957795"},
	} {
		t.Run(c.name, func(t *testing.T) {
			got := strings.Join(anglesOf(planOf(t, "sweep: [{axis: signal_arm, "+c.entry+"}]\n"), "signal_arm"), " ")
			if got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
	p := planOf(t, "sweep: [{axis: signal_arm, from: 0 deg, to: 1 deg, step: 0.1 deg}]\n")
	if last := p.Points[10].Axes[0].Angle; last != unit.Degree {
		t.Errorf("the last point is %d micro-arcseconds; want %d", last, unit.Degree)
	}
	p = planOf(t, "sweep: [{axis: signal_arm, from: 0 mrad, to: 100 mrad, step: 0.1 mrad}]\n")
	if last, want := p.Points[1000].Axes[0].Angle, unit.Radians(0.1); last != want {
		t.Errorf("the last of a thousand steps is %v; want %v", last, want)
	}
}

func TestOrderOfNestedSweeps(t *testing.T) {
	const sweep = "sweep:\n- {axis: crystal_tilt, at: [0 deg, 1 deg]}\n- {axis: signal_arm, at: [1 deg, 2 deg]}\n- {axis: idler_arm, from: 1 deg, to: 3 deg, step: 1 deg}\n"
	line := func(p scan.Plan) string {
		var s []string
		for _, point := range p.Points {
			var one strings.Builder
			for _, a := range point.Axes {
				one.WriteString(strings.TrimSuffix(a.Angle.String(), " deg"))
			}
			s = append(s, one.String())
		}
		return strings.Join(s, " ")
	}
	if got, want := line(planOf(t, sweep)), "011 012 013 021 022 023 111 112 113 121 122 123"; got != want {
		t.Errorf("ascending\ngot  %s\nwant %s", got, want)
	}
	p := planOf(t, sweep+"order: serpentine\nrepeat: {times: 2, as: passes}\n")
	if got, want := line(p), "011 012 013 023 022 021 121 122 123 113 112 111"; got != want {
		t.Errorf("serpentine\ngot  %s\nwant %s", got, want)
	}
	for i := 1; i < len(p.Points); i++ {
		moved := 0
		for k, a := range p.Points[i].Axes {
			if a != p.Points[i-1].Axes[k] {
				moved++
			}
		}
		if moved != 1 {
			t.Errorf("%d axes move between points %d and %d; want 1", moved, i-1, i)
		}
	}
	if v := p.Visits(); v[12] != (scan.Visit{Point: 11, Visit: 2}) {
		t.Errorf("the second pass begins with %v; want where the first one ended", v[12])
	}
}

func TestSettingsAreSteppedInTheirOwnUnit(t *testing.T) {
	for _, c := range []struct {
		name, entry string
		want        []float64
	}{
		{"the same unit", "setting: delay, from: -0.3 ns, to: 0.3 ns, step: 0.1 ns", []float64{-0.3, -0.2, -0.1, 0, 0.1, 0.2, 0.3}},
		{"another unit of the kind", "setting: delay, from: 100 ps, to: 300 ps, step: 100 ps", []float64{0.1, 0.2, 0.3}},
		{"a shifted scale", "setting: oven, from: 293.15 K, to: 295.15 K, step: 1 K", []float64{20, 21, 22}},
		{"listed in several", "setting: delay, at: [1 ns, 500 ps]", []float64{1, 0.5}},
	} {
		t.Run(c.name, func(t *testing.T) {
			var got []float64
			for _, p := range planOf(t, "sweep: [{"+c.entry+"}]\n").Points {
				got = append(got, p.Settings[0].Value)
			}
			if !slices.Equal(got, c.want) {
				t.Errorf("got %v; want %v", got, c.want)
			}
		})
	}
}

func TestARecipeWithoutSweepCountsWhereEverythingStands(t *testing.T) {
	p := planOf(t, "repeat: {times: 100, as: in_place}\n")
	if len(p.Points) != 1 || len(p.Points[0].Axes) != 0 || len(p.Visits()) != 100 {
		t.Errorf("%d points with %v, %d visits; want one empty point visited 100 times", len(p.Points), p.Points[0], len(p.Visits()))
	}
}

func TestAllKeysArriveInThePlan(t *testing.T) {
	r, err := Parse("r.yaml", []byte(`
title: "All of them: once"
sweep: [{axis: signal_arm, at: 1 deg}]
order: serpentine
dwell: {time: 5 s, slice: 2 s}
repeat: {times: 3, as: in_place}
dark: {every: 10 points, dwell: {time: 60 s, slice: 20 s}, also: [start, end]}
trouble: {retries: 1, then: skip}
`))
	if err != nil {
		t.Fatal(err)
	}
	got, err := r.Plan(bench())
	if err != nil {
		t.Fatal(err)
	}
	want := scan.Plan{
		Title:   "All of them: once",
		Points:  []scan.Point{{Axes: []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degree}}}},
		Dwell:   scan.Dwell{Time: 5 * time.Second, Slice: 2 * time.Second},
		Repeat:  scan.Repeat{Times: 3, InPlace: true, Serpentine: true},
		Dark:    &scan.Cadence{Dwell: scan.Dwell{Time: time.Minute, Slice: 20 * time.Second}, EveryPoints: 10, AtStart: true, AtEnd: true},
		Trouble: scan.Trouble{Retries: 1, Then: scan.Skip},
	}
	want.Points[0].Settings = []scan.SettingTarget{}
	if !reflect.DeepEqual(got, want) {
		t.Errorf("got  %+v\nwant %+v", got, want)
	}
}

// TestAMillionVisitsAndNotOneMore also shows that the refusal costs nothing.
func TestAMillionVisitsAndNotOneMore(t *testing.T) {
	text := func(times int) []byte {
		return fmt.Appendf(nil, "title: A\ndwell: 1 s\nsweep:\n- {axis: signal_arm, from: 0 deg, to: 0.999 deg, step: 0.001 deg}\n- {axis: idler_arm, from: 0 deg, to: 0.099 deg, step: 0.001 deg}\nrepeat: {times: %d}\n", times)
	}
	if _, err := Parse("r.yaml", text(10)); err != nil {
		t.Error(err)
	}
	_, err := Parse("r.yaml", text(11))
	if err == nil || !strings.Contains(err.Error(), "r.yaml:4:1: sweep: 100000 points visited 11 times are 1100000 visits; want at most 1000000") {
		t.Errorf("got %v; want the visits refused", err)
	}
	tenMillion := strings.ReplaceAll(millionPoints, "to: 0.999 deg, step: 0.001 deg}\n", "to: 3.162 deg, step: 0.001 deg}\n")
	if _, err := Parse("r.yaml", []byte(tenMillion)); err == nil || !strings.Contains(err.Error(), "10004569 points visited 1 times are 10004569 visits; want at most 1000000") {
		t.Errorf("got %v; want ten million points refused with the bound", err)
	}
	huge := []byte("title: A\ndwell: 1 s\nsweep:\n" + strings.Repeat("", 0) +
		"- {axis: a, from: 0 deg, to: 0.999 deg, step: 0.001 deg}\n- {axis: b, from: 0 deg, to: 0.999 deg, step: 0.001 deg}\n- {axis: c, from: 0 deg, to: 0.999 deg, step: 0.001 deg}\n")
	refused := testing.AllocsPerRun(3, func() {
		if _, err := Parse("r.yaml", huge); err == nil || !strings.Contains(err.Error(), "1000000000 points") {
			t.Errorf("got %v; want a thousand million points refused", err)
		}
	})
	if refused > 5000 {
		t.Errorf("refusing took %.0f allocations; want a few hundred, whatever the number of points", refused)
	}
}

func FuzzParse(f *testing.F) {
	for _, body := range []string{
		"title: A\ndwell: 1 s\nsweep: [{axis: signal_arm, from: 0 deg, to: 1 deg, step: 0.1 deg}]\norder: serpentine\n",
		"title: A\ndwell: {time: 5 s, slice: 1 s}\nsweep: [{axis: signal_arm, around: 2.864 deg, span: 0.4 deg, step: 0.1 deg}, {setting: delay, at: [1 ns, 2 ns]}]\nrepeat: {times: 3, as: passes}\n",
		"title: A\ndwell: 1 s\ndark: {every: 10 points, dwell: 1 s, also: [start]}\ntrouble: {retries: 0, then: stop}\n",
		"title: A\ndwell: 1 s\nsweep: [{setting: oven, from: 293.15 K, to: 295.15 K, step: 1 K}]\n",
		"title: A\ndwell: {heralds: 200000, of: signal, at_most: 60 s, slice: 1 s}\nbackground: {turn: pump_waveplate, by: 45 deg, every: 10 points, dwell: 10 s}\norder: shuffled\n",
		"title: A\ndwell: {heralds: 9, at_most: 60 s, slice: 1 s}\ndark: {also: [end], dwell: 1 s}\nsweep: [{axis: idler_arm, from: 2 deg, to: 3 deg, step: 0.1 deg}]\nresult: {kind: efficiency, trigger: signal, under_test: idler, use: {plateau_of: idler_arm, half_width: 0.1 deg}}\n",
		"title: A\ndwell: 1 s\nsweep: [{axis: idler_arm, from: 2 deg, to: 3 deg, step: 0.1 deg}]\nresult: {kind: peak, of: ab, along: idler_arm, profile: sinc2, power: pump_power}\n",
		"title: A\ndwell: 1 s\nsweep: [{axis: crystal_tilt, at: [0 deg, 1 deg]}, {axis: signal_arm, at: [1 deg, 2 deg], with: {setting: delay, at: [1 ns, 2 ns]}}, {axis: idler_arm, conjugate_of: signal_arm, span: 1 deg, step: 0.5 deg}]\n",
		"title: A\ndwell: 1 s\nguards: [{watch: pump_power, within: [45 mW, 0.055 W], otherwise: hold, give_up_after: 30 min}]\nschedule: {not_before: 22:00, finish_by: \"06:30\"}\n",
		ringThenPartner + "reference: {axes: [idler_arm], every: 30 min, dwell: 20 s, bounds: {singles: 5 %, centre: 0.1 deg}, otherwise: hold}\nguards: [{reference_age: 1 h}, {rate: ab, within: [1 Hz, 2 kHz]}]\n",
		acrossIdler + "refine: {along: idler_arm, of: ab, around: maximum, span: 0.2 deg, step: 0.02 deg, at_most: 40 points, within: 30 min}\nschedule: {warm_up: {steady: {pump_power: 0.5 % over 10 min}, at_most: 2 h}}\nresult: [{kind: peak, of: ab, along: idler_arm, at: {signal_arm: 2 deg}}]\n",
		"title: A\ndwell: 1 s\nsweep: [{setting: delay, around: {delay: delay, from: Delay scan, u_below: 50 ps}, span: 4 ns, step: 1 ns}]\nresult: {kind: delay, of: ab, setting: delay}\n",
		"title: A\ndwell: {coincidences: 5}\nsweep: [{axis: x, at: 1 mrad, conjugate_of: y}]\n",
	} {
		f.Add(body)
	}
	facts := bench()
	facts.KeepOuts = []scan.KeepOut{forbidden("signal_arm", 6, 7)}
	facts.AcceptedAt = time.Date(2026, 3, 28, 20, 0, 0, 0, time.UTC)
	f.Fuzz(func(t *testing.T, text string) {
		r, err := Parse("r.yaml", []byte(text))
		if err != nil {
			return
		}
		p, err := r.Plan(facts)
		if err != nil {
			return
		}
		if wrong := printed(text); wrong != "" {
			t.Fatal(wrong)
		}
		again, err := Parse("other.yaml", []byte(r.Text))
		if err != nil {
			t.Fatalf("accepted once only: %v", err)
		}
		second, err := again.Plan(facts)
		if err != nil || !reflect.DeepEqual(p, second) {
			t.Fatalf("planned differently the second time (%v)", err)
		}
		if len(p.Points)*p.Repeat.Times > MaxVisits || len(p.Points) == 0 || p.Dwell.Time <= 0 || p.Dwell.Slice <= 0 {
			t.Fatalf("plan of %d points × %d, dwell %+v", len(p.Points), p.Repeat.Times, p.Dwell)
		}
		for _, point := range p.Points {
			for _, a := range point.Axes {
				for _, axis := range facts.Axes {
					if len(p.Open()) == 0 && axis.Name == a.Axis && !axis.Limits(a.Angle) {
						t.Fatalf("%s planned to %s", a.Axis, a.Angle)
					}
				}
			}
		}
	})
}

func TestSlicesAreCutToTheWatch(t *testing.T) {
	for _, c := range []struct {
		dwell        string
		watch, slice time.Duration
		gates        int
	}{
		{"20 s", 0, 20 * time.Second, 1},
		{"20 s", 2 * time.Second, 2 * time.Second, 10},
		{"1 s", 2 * time.Second, time.Second, 1},
		{"5 s", 2 * time.Second, 1667 * time.Millisecond, 3},
		{"{time: 30 s, slice: 10 s}", 3 * time.Second, 2500 * time.Millisecond, 12},
		{"{time: 30 s, slice: 1 s}", 3 * time.Second, time.Second, 30},
		{"{heralds: 1000, of: a, at_most: 60 s, slice: 5 s}", 2 * time.Second, 1667 * time.Millisecond, 36},
		{"1 h", 2 * time.Second, 2 * time.Second, 1800},
	} {
		f := bench()
		f.Watch = c.watch
		r, err := Parse("r.yaml", []byte("title: A\nsweep: [{axis: signal_arm, at: [1 deg]}]\ndwell: "+c.dwell+"\ndark: {every: 10 points, dwell: 20 s, also: [start]}\n"))
		if err != nil {
			t.Fatal(err)
		}
		p, err := r.Plan(f)
		if err != nil {
			t.Errorf("dwell %s watched every %v: %v", c.dwell, c.watch, err)
			continue
		}
		if p.Dwell.Slice != c.slice || len(p.Dwell.Slices()) != c.gates {
			t.Errorf("dwell %s watched every %v: %d gates of %v; want %d of %v", c.dwell, c.watch, len(p.Dwell.Slices()), p.Dwell.Slice, c.gates, c.slice)
		}
		if c.watch > 0 && p.Dark.Dwell.Slice > c.watch {
			t.Errorf("a dark in gates of %v, watched every %v", p.Dark.Dwell.Slice, c.watch)
		}
		if c.dwell == "1 h" {
			continue // longer than a gate of this counter
		}
		if again, err := r.Plan(bench()); err != nil || again.Dark.Dwell.Slice != 20*time.Second {
			t.Errorf("planned again without a watch: darks in gates of %v, %v; want the recipe's own", again.Dark.Dwell.Slice, err)
		}
	}
	f := bench()
	f.Watch = time.Second
	r, err := Parse("r.yaml", []byte("title: A\nsweep: [{axis: signal_arm, at: [1 deg]}]\ndwell: 12 h\n"))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := r.Plan(f); err == nil || !strings.Contains(err.Error(), "43200 gates of 1 s") {
		t.Errorf("a dwell of 12 h watched every second: %v; want it refused", err)
	}
}

func TestADwellMayEndOnTheCountsOfATrigger(t *testing.T) {
	for _, of := range []string{"signal", "a"} {
		p := plan(t, "title: A\ndwell: {heralds: 200000, of: "+of+", at_most: 60 s, slice: 1 s}\n")
		want := scan.Dwell{Time: time.Minute, Slice: time.Second, Heralds: 200000, Trigger: "a"}
		if p.Dwell != want {
			t.Errorf("of %s: %+v; want %+v", of, p.Dwell, want)
		}
	}
}

func TestABackgroundTurnsAnAxisAwayFromWhereItParks(t *testing.T) {
	b := planOf(t, "background: {turn: pump_waveplate, by: 45 deg, every: 30 min, dwell: {time: 60 s, slice: 10 s}, also: [start, end]}\n").Background
	want := scan.Background{Axis: "pump_waveplate", By: 45 * unit.Degree,
		Cadence: scan.Cadence{Dwell: scan.Dwell{Time: time.Minute, Slice: 10 * time.Second}, Every: 30 * time.Minute, AtStart: true, AtEnd: true}}
	if b == nil || *b != want {
		t.Errorf("got  %+v\nwant %+v", b, want)
	}
	if b := planOf(t, "background: {turn: pump_waveplate, by: -5 deg, every: 10 points, dwell: 60 s}\n").Background; b.By != -5*unit.Degree || b.EveryPoints != 10 {
		t.Errorf("got %+v; want a turn downwards every 10 points", b)
	}
}

func TestShuffledPassesVisitEveryPointOnce(t *testing.T) {
	p := planOf(t, "sweep: [{axis: signal_arm, from: 0 deg, to: 1 deg, step: 0.1 deg}]\norder: shuffled\nrepeat: {times: 2, as: passes}\n")
	if !p.Repeat.Shuffled || p.Repeat.Serpentine || p.Repeat.Seed != 0 {
		t.Errorf("%+v; want a shuffle whose seed is still to be drawn", p.Repeat)
	}
	p.Repeat.Seed = 5
	seen, sorted := map[scan.Visit]int{}, true
	for i, v := range p.Visits() {
		seen[v]++
		sorted = sorted && v.Point == i%len(p.Points)
	}
	if len(seen) != 22 || sorted {
		t.Errorf("%d visits, in the order of the list: %v; want 22 different ones in another order", len(seen), sorted)
	}
}

const acrossIdler = "sweep: [{axis: signal_arm, at: 2 deg}, {axis: idler_arm, from: 2 deg, to: 3 deg, step: 0.1 deg}]\n"

func TestAnEfficiencyNamesItsDetectorsAndItsReadings(t *testing.T) {
	const dark = "dark: {also: [start], dwell: 10 s}\n"
	for _, c := range []struct {
		name, body string
		want       scan.Result
	}{
		{"by detectors, on the plateau", acrossIdler + dark + "result: {kind: efficiency, trigger: signal, under_test: idler, use: {plateau_of: idler_arm, half_width: 0.1 deg}}\n",
			scan.Result{Kind: scan.Efficiency, Trigger: "a", UnderTest: "b", PlateauOf: "idler_arm", HalfWidth: unit.Degree / 10}},
		{"by channels, all points", dark + "result: {kind: efficiency, trigger: b, under_test: a, use: {points: all}}\n",
			scan.Result{Kind: scan.Efficiency, Trigger: "b", UnderTest: "a"}},
		{"all points of one place and several settings", "sweep: [{axis: idler_arm, at: [2 deg, 2 deg]}, {setting: delay, at: [1 ns, 2 ns]}]\n" + dark + "result: {kind: efficiency, trigger: signal, under_test: idler, use: {points: all}}\n",
			scan.Result{Kind: scan.Efficiency, Trigger: "a", UnderTest: "b"}},
		{"a peak of coincidences", acrossIdler + "result: {kind: peak, of: ab, along: idler_arm, profile: sinc2, power: pump_power}\n",
			scan.Result{Kind: scan.Peak, Of: "ab", Along: "idler_arm", Profile: "sinc2", Power: "pump_power"}},
		{"a peak of a detector's counts", acrossIdler + "result: {kind: peak, of: idler, along: idler_arm}\n",
			scan.Result{Kind: scan.Peak, Of: "b", Along: "idler_arm"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			if got := planOf(t, c.body).Results; !reflect.DeepEqual(got, []scan.Result{c.want}) {
				t.Errorf("got  %+v\nwant %+v", got, c.want)
			}
		})
	}
	if got := planOf(t, acrossIdler).Results; got != nil {
		t.Errorf("a recipe without result has %+v; want none", got)
	}
}

func TestHeraldsAreOfTheResultsTrigger(t *testing.T) {
	p := plan(t, "title: A\ndwell: {heralds: 1000, at_most: 60 s, slice: 1 s}\ndark: {also: [start], dwell: 10 s}\nresult: {kind: efficiency, trigger: idler, under_test: signal, use: {points: all}}\n")
	if p.Dwell.Trigger != "b" || p.Dwell.Heralds != 1000 {
		t.Errorf("%+v; want heralds of b", p.Dwell)
	}
}

// targets prints a plan's points, one line each.
func targets(p scan.Plan) string {
	var b strings.Builder
	for _, point := range p.Points {
		for _, a := range point.Axes {
			fmt.Fprintf(&b, "%s ", strings.TrimSuffix(a.Angle.String(), " deg"))
		}
		for _, s := range point.Settings {
			fmt.Fprintf(&b, "%gns ", s.Value)
		}
		b.WriteString("| ")
	}
	return strings.TrimSuffix(b.String(), " | ")
}

func TestTwoInLockStepAreSteppedTogether(t *testing.T) {
	for _, c := range []struct{ name, sweep, want string }{
		{"an axis with an axis", "- {axis: signal_arm, from: 1 deg, to: 3 deg, step: 1 deg, with: {axis: idler_arm, at: [5 deg, 6 deg, 4 deg]}}", "1 5 | 2 6 | 3 4"},
		{"an axis with a setting", "- axis: signal_arm\n  at: [1 deg, 2 deg]\n  with: {setting: delay, from: 1 ns, to: 2 ns, step: 1 ns}", "1 1ns | 2 2ns"},
		{"a setting with an axis, around an inner axis", "- {setting: delay, at: [1 ns, 2 ns], with: {axis: crystal_tilt, at: [0 deg, 1 deg]}}\n- {axis: signal_arm, at: [3 deg, 4 deg]}", "0 3 1ns | 0 4 1ns | 1 3 2ns | 1 4 2ns"},
	} {
		t.Run(c.name, func(t *testing.T) {
			if got := targets(planOf(t, "sweep:\n"+c.sweep+"\n")); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
}

func TestAConjugateGoesWhereThePartnerGoes(t *testing.T) {
	const tilt = "- {axis: crystal_tilt, at: [0 deg, 1 deg]}\n"
	for _, c := range []struct{ name, sweep, want string }{
		{"alone", tilt + "- {axis: signal_arm, at: [2 deg, 3 deg]}\n- {axis: idler_arm, conjugate_of: signal_arm}", "0 2 2 | 0 3 3 | 1 2 2.1 | 1 3 3.1"},
		{"with a span about it", tilt + "- {axis: signal_arm, at: 2 deg}\n- {axis: idler_arm, conjugate_of: signal_arm, span: 1 deg, step: 0.5 deg}", "0 2 1.5 | 0 2 2 | 0 2 2.5 | 1 2 1.6 | 1 2 2.1 | 1 2 2.6"},
		{"the other way round, named before it is written", "- {axis: signal_arm, conjugate_of: idler_arm}\n" + tilt + "- {axis: idler_arm, at: 2 deg}", "2 0 2 | 1.9 1 2"},
		{"tilt and arm in lock-step", "- {axis: crystal_tilt, at: [0 deg, 1 deg], with: {axis: signal_arm, at: [2 deg, 3 deg]}}\n- {axis: idler_arm, conjugate_of: signal_arm}", "0 2 2 | 1 3 3.1"},
	} {
		t.Run(c.name, func(t *testing.T) {
			if got := targets(planOf(t, "sweep:\n"+c.sweep+"\n")); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
		})
	}
	t.Run("the crystal stands where a background's axis parks", func(t *testing.T) {
		f := bench()
		f.Axes[2].Park = new(unit.Degree)
		r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\nbackground: {turn: crystal_tilt, by: 2 deg, also: [end], dwell: 1 s}\nsweep: [{axis: signal_arm, at: 2 deg}, {axis: idler_arm, conjugate_of: signal_arm}]\n"))
		if err != nil {
			t.Fatal(err)
		}
		p, err := r.Plan(f)
		if err != nil {
			t.Fatal(err)
		}
		if got := targets(p); got != "2 2.1" {
			t.Errorf("got %s; want 2 2.1", got)
		}
	})
	t.Run("a bench without optics has none", func(t *testing.T) {
		f := bench()
		f.Conjugate = nil
		r, err := Parse("r.yaml", []byte("title: A\ndwell: 1 s\nsweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: 2 deg}, {axis: idler_arm, conjugate_of: signal_arm}]\n"))
		if err != nil {
			t.Fatal(err)
		}
		if _, err := r.Plan(f); err == nil || !strings.Contains(err.Error(), "sweep[2].conjugate_of: a conjugate on a bench without optics") {
			t.Errorf("got %v; want it refused", err)
		}
	})
}
