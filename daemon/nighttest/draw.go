package nighttest

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"time"

	"gemel/daemon/bench"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/recipe"
	"gemel/sim/trouble"
)

// Drawn is a night that a seed came to. It prints as one line, which ParseNight reads back: the words
// of the bench, the recipes in the order of the queue, and the script, with " :: " between them.
type Drawn struct {
	Words string
	Night
}

const between = " :: "

func (d Drawn) String() string {
	parts := append([]string{d.Words}, d.Before...)
	return strings.Join(append(parts, d.Recipe, d.Script.String()), between)
}

// ParseNight reads what Drawn prints.
func ParseNight(f *Family, line string) (Drawn, error) {
	parts := strings.Split(strings.TrimSpace(line), between)
	if len(parts) < 3 {
		return Drawn{}, fmt.Errorf("night %q; want bench words :: recipe :: … :: script", line)
	}
	file, err := f.Bench(parts[0])
	if err != nil {
		return Drawn{}, err
	}
	s, err := ParseScript(parts[len(parts)-1])
	recipes := parts[1 : len(parts)-1]
	last := len(recipes) - 1
	return Drawn{Words: parts[0], Night: Night{Bench: file, Before: recipes[:last:last], Recipe: recipes[last], Daemon: true, Script: s}}, err
}

// Least is how many readings a drawn night asks for at least.
const Least = 60

// Draw draws a night: a bench of the family, what is measured on it, and what goes wrong. An error
// means that the dice threw no recipe that the bench allows, which is the dice's fault.
func Draw(f *Family, members []string, seed uint64) (Drawn, error) {
	d := dice{rand.New(rand.NewPCG(seed, 6))}
	words := members[d.IntN(len(members))]
	file, err := f.Bench(words)
	if err != nil {
		return Drawn{}, err
	}
	n := Drawn{Words: words, Night: Night{Bench: file, Daemon: true}}
	texts, plans, err := d.recipes(file)
	if err != nil {
		return n, fmt.Errorf("seed %d, bench %s: %w", seed, words, err)
	}
	last := len(texts) - 1
	n.Before, n.Recipe = texts[:last], texts[last]
	n.Script = d.script(file, plans)
	return n, nil
}

// dice draw what nights are made of.
type dice struct{ *rand.Rand }

func (d dice) one(of ...string) string { return of[d.IntN(len(of))] }

// in says yes once in n times.
func (d dice) in(n int) bool { return d.IntN(n) == 0 }

func (d dice) between(low, high int) int { return low + d.IntN(high-low+1) }

func (d dice) within(t time.Duration) time.Duration {
	return time.Duration(d.Int64N(max(1, int64(t/time.Millisecond)))) * time.Millisecond
}

// recipes throws until the bench allows what came: one recipe, or a user of another's result behind it.
func (d dice) recipes(file *bench.File) (texts []string, plans []scan.Plan, err error) {
	const throws = 60
	var refusal error
	for range throws {
		texts = []string{d.recipe(Least)}
		if d.in(8) {
			texts = d.queue()
		}
		plans = nil
		total := 0
		for _, text := range texts {
			r, err := recipe.Parse("drawn", []byte(text))
			if err == nil {
				facts := file.Facts()
				facts.AcceptedAt = time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC)
				var p scan.Plan
				if p, err = r.Plan(facts); err == nil {
					plans = append(plans, p)
					total += engine.New(engine.Config{Bench: &engine.Bench{}, Plan: p}).Snapshot().Planned
				}
			}
			if err != nil {
				refusal = fmt.Errorf("%s: %w", text, err)
				break
			}
		}
		if len(plans) == len(texts) && total >= Least {
			return texts, plans, nil
		}
	}
	return nil, nil, fmt.Errorf("no recipe in %d throws; the last refusal: %w", throws, refusal)
}

// queue is a recipe and another that takes its result.
func (d dice) queue() []string {
	first := fmt.Sprintf(`{title: Find the ring, sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: idler_arm, at: 2.864 deg}, {axis: signal_arm, around: 2.864 deg, span: 1.2 deg, step: 0.1 deg}], dwell: %s, repeat: {times: %d, as: passes}, dark: {dwell: 2 s, also: [start, end]}, trouble: %s, result: {kind: peak, of: signal, along: signal_arm, profile: gaussian}}`,
		d.one("2 s", "{time: 2 s, slice: 1 s}"), d.between(1, 2), d.trouble())
	otherwise := d.one("hold", "stop")
	second := fmt.Sprintf(`{title: Use the ring, sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, %s: {peak: signal_arm, from: Find the ring, not_older_than: 12 h, u_below: 0.1 deg, otherwise: %s}%s}, {axis: idler_arm, %s}], order: %s, dwell: 2 s, repeat: {times: %d, as: passes}, trouble: %s}`,
		"at", otherwise, "", d.one("from: 2.4 deg, to: 3.4 deg, step: 0.1 deg", "conjugate_of: signal_arm, span: 1 deg, step: 0.1 deg"), d.order(), d.between(4, 5), d.trouble())
	return []string{first, second}
}

func (d dice) order() string { return d.one("ascending", "serpentine", "shuffled") }

func (d dice) trouble() string {
	return fmt.Sprintf("{retries: %d, then: %s, give_up_after: %s}", d.between(0, 3), d.one("hold", "hold", "skip", "stop"), d.one("30 min", "1 h"))
}

// recipe throws one recipe of at least so many readings. The bench may still refuse it.
func (d dice) recipe(least int) string {
	var sweep []string
	points := 1
	add := func(n int, format string, args ...any) {
		sweep = append(sweep, fmt.Sprintf(format, args...))
		points *= n
	}
	swept, along := "", "" // an axis with places enough to be refined along; where the other arm stands still
	watchable := false     // both arms are in the sweep, one of them at the ring
	switch d.IntN(9) {
	case 0: // nested
		add(1, "{axis: crystal_tilt, at: 0 deg}")
		add(3, "{axis: signal_arm, around: 2.864 deg, span: 0.2 deg, step: 0.1 deg}")
		add(11, "{axis: idler_arm, around: 2.864 deg, span: 1 deg, step: 0.1 deg}")
		watchable = true
	case 1: // one arm across the ring
		add(1, "{axis: signal_arm, at: 2.864 deg}")
		add(15, "{axis: idler_arm, from: 2.2 deg, to: 3.6 deg, step: 0.1 deg}")
		swept, along, watchable = "idler_arm", d.one("pairs", "idler"), true
	case 2: // in lock-step
		add(1, "{axis: crystal_tilt, at: 0 deg}")
		add(16, "{axis: signal_arm, from: 2.1 deg, to: 3.6 deg, step: 0.1 deg, with: {axis: idler_arm, from: 2.1 deg, to: 3.6 deg, step: 0.1 deg}}")
		swept, along = "signal_arm", "signal"
	case 3: // conjugates
		add(1, "{axis: crystal_tilt, at: 0 deg}")
		add(4, "{axis: signal_arm, from: 2.7 deg, to: 3 deg, step: 0.1 deg}")
		add(5, "{axis: idler_arm, conjugate_of: signal_arm, span: 0.8 deg, step: 0.2 deg}")
	case 4: // a ring that is closed at some tilts
		add(1, "{axis: idler_arm, at: 11 deg}")
		add(4, "{axis: crystal_tilt, from: -0.9 deg, to: 0.9 deg, step: 0.6 deg}")
		add(7, "{axis: signal_arm, from: 1.5 deg, to: 4.5 deg, step: 0.5 deg}")
	case 5: // a setting
		add(1, "{axis: crystal_tilt, at: 0 deg}")
		add(1, "{axis: signal_arm, at: 2.864 deg}")
		add(1, "{axis: idler_arm, conjugate_of: signal_arm}")
		add(21, "{setting: delay, from: 15 ns, to: 25 ns, step: 0.5 ns}")
	case 6: // powers, and an arm at each
		add(3, "{setting: laser, at: [15 mW, 30 mW, 45 mW]}")
		add(1, "{axis: signal_arm, at: 2.864 deg}")
		add(5, "{axis: idler_arm, around: 2.864 deg, span: 0.8 deg, step: 0.2 deg}")
	case 7: // across the pump
		add(1, "{axis: idler_arm, at: 11 deg}")
		add(16, "{axis: signal_arm, at: [-3.6 deg, -3.2 deg, -3 deg, -2.8 deg, -2.6 deg, -2.2 deg, -1.8 deg, -1 deg, 1 deg, 1.8 deg, 2.2 deg, 2.6 deg, 2.8 deg, 3 deg, 3.2 deg, 3.6 deg]}")
	default: // where everything stands
	}
	parts := []string{"title: Drawn"}
	if len(sweep) > 0 {
		parts = append(parts, "sweep: ["+strings.Join(sweep, ", ")+"]", "order: "+d.order())
	}
	parts = append(parts, "dwell: "+d.one("2 s", "3 s", "{time: 4 s, slice: 2 s}", "{time: 3 s, slice: 1 s}", "{heralds: 20000, of: signal, at_most: 4 s, slice: 1 s}"))
	dark := d.in(2)
	if dark {
		parts = append(parts, fmt.Sprintf("dark: {%sdwell: %s, also: [%s]}", d.one("every: 15 points, ", "every: 25 points, ", "every: 4 min, ", ""), d.one("2 s", "{time: 4 s, slice: 2 s}"), d.one("start", "end", "start, end")))
	}
	if d.in(3) {
		parts = append(parts, fmt.Sprintf("background: {turn: pump_waveplate, by: %s, %sdwell: 3 s, also: [%s]}", d.one("45 deg", "90 deg"), d.one("every: 20 points, ", "every: 5 min, ", ""), d.one("start", "end", "start, end")))
	}
	reference := watchable && d.in(2)
	if reference {
		parts = append(parts, fmt.Sprintf("reference: {axes: [%s], on: [low_flank, top, high_flank], at: {signal_arm: 2.864 deg, idler_arm: 2.864 deg}, every: %s, dwell: 20 s%s, bounds: {singles: 5 %%, ratio: 5 %%, centre: 0.05 deg}, otherwise: %s}",
			d.one("signal_arm", "idler_arm", "signal_arm, idler_arm"), d.one("20 points", "30 points", "6 min"), d.one("", ", also: [end]"), d.one("note", "hold", "stop")))
	}
	times := (least + points - 1) / points
	if swept != "" && d.in(2) {
		parts = append(parts, fmt.Sprintf("refine: {along: %s, of: %s, %s}", swept, along,
			d.one("around: maximum, span: 0.2 deg, step: 0.05 deg, at_most: 10 points", "u_below: 0.004 deg, at_most: 12 points, within: 10 min")))
	}
	parts = append(parts, fmt.Sprintf("repeat: {times: %d, as: %s}", times, d.one("passes", "passes", "in_place")))
	if guards := d.guards(dark, reference); len(guards) > 0 {
		parts = append(parts, "guards: ["+strings.Join(guards, ", ")+"]")
	}
	parts = append(parts, "trouble: "+d.trouble())
	switch d.IntN(10) {
	case 0:
		parts = append(parts, `schedule: {warm_up: {steady: {pump_power: 2 % over 1 min, crystal_temperature: 0.5 K over 1 min}, at_most: 10 min}}`)
	case 1:
		parts = append(parts, `schedule: {finish_by: "00:12"}`)
	case 2:
		parts = append(parts, `schedule: {not_before: "00:03"}`)
	}
	return "{" + strings.Join(parts, ", ") + "}"
}

func (d dice) guards(dark, reference bool) (guards []string) {
	otherwise := func() string {
		return d.one("otherwise: hold, give_up_after: 10 min", "otherwise: hold, give_up_after: 40 min", "otherwise: skip", "otherwise: stop")
	}
	if d.in(3) {
		guards = append(guards, "{watch: pump_power, within: [42 mW, 48 mW], "+otherwise()+"}")
	}
	if d.in(6) {
		guards = append(guards, "{watch: crystal_temperature, within: [19 Cel, 21 Cel], "+otherwise()+"}")
	}
	if d.in(6) {
		guards = append(guards, "{rate: signal, within: [100 Hz, 200 kHz], "+otherwise()+"}")
	}
	if dark && d.in(3) {
		guards = append(guards, "{dark_rate: idler, within: [0 Hz, 3 kHz], "+otherwise()+"}")
	}
	if reference && d.in(3) {
		guards = append(guards, "{reference_age: "+d.one("15 min", "40 min")+", otherwise: "+d.one("hold", "stop")+"}")
	}
	return guards
}

// script throws what goes wrong, who interferes, and when the process dies.
func (d dice) script(file *bench.File, plans []scan.Plan) Script {
	length := time.Duration(0)
	readings := 0
	for _, p := range plans {
		n := engine.New(engine.Config{Bench: &engine.Bench{}, Plan: p}).Snapshot().Planned
		readings += n
		length += time.Duration(n) * (p.Dwell.Time + 1500*time.Millisecond)
	}
	s := Script{Troubles: trouble.Draw(d.Rand, trouble.Night{Targets: targets(file, readings), For: length, Kinds: trouble.Kinds(), LampHz: 6e6}, d.between(2, 12))}
	s.Troubles = slices.DeleteFunc(s.Troubles, func(t trouble.Trouble) bool {
		return (t.Kind == trouble.Gone || t.Kind == trouble.DeadLine) && !d.in(3) // most nights are to get through
	})
	answered := 0
	for range []int{0, 1, 3, 3, 3, 3, 3, 3}[d.IntN(8)] {
		// Each life has to be long enough to meet its kill.
		k := Kill{After: d.within(length / 4)}
		if !d.in(12) {
			k = Kill{Step: engine.Steps[d.IntN(len(engine.Steps))], Nth: d.between(1, 15)}
			switch k.Step {
			case engine.StepRested:
				k.Nth = d.between(1, 3)
			case engine.StepAnswered:
				k.Nth, answered = 1, answered+2
			}
		}
		s.Kills = append(s.Kills, k)
	}
	if d.in(3) || answered > 0 {
		for range d.between(1, 2) + answered {
			at := d.within(length)
			s.Orders = append(s.Orders, Order{At: at, What: "hold"})
			if !d.in(3) { // else the technician finds it
				s.Orders = append(s.Orders, Order{At: at + d.within(length/2), What: "resume"})
			}
		}
	}
	if d.in(10) {
		s.Orders = append(s.Orders, Order{At: d.within(2 * length), What: "stop"})
	}
	slices.SortStableFunc(s.Orders, func(a, b Order) int { return int(a.At - b.At) })
	if d.in(3) {
		s.Broker = append(s.Broker, Away{At: d.within(length), For: d.within(length)})
	}
	if d.in(5) {
		s.Older = append(s.Older, Older{At: d.within(length), By: d.between(1, 30)})
	}
	if d.in(6) {
		s.Full = append(s.Full, Away{At: d.within(length), For: time.Second + d.within(10*time.Minute)})
	}
	return s
}

// targets lists every device of a bench with what may happen to it.
func targets(file *bench.File, readings int) []trouble.Target {
	var all []trouble.Target
	longest := func(line string) time.Duration {
		i := slices.IndexFunc(file.Lines, func(l bench.Line) bool { return l.Name == line })
		return max(file.Lines[i].LongestAnswer, time.Second) // what a line that declares none is waited for
	}
	line := []trouble.Kind{trouble.Gone, trouble.Stranger, trouble.Silent, trouble.DeadLine, trouble.Hung}
	add := func(name, of string, answers int, axes []string, may ...trouble.Kind) {
		all = append(all, trouble.Target{Device: name, Answers: answers, Longest: longest(of), Restart: true, Unplug: true, Axes: axes, May: append(may, line...)})
	}
	for _, c := range file.Controllers {
		var axes []string
		for _, a := range file.Axes {
			if a.Axis.Controller == c.Name {
				axes = append(axes, string(a.Name))
			}
		}
		add(string(c.Name), c.Line, 6*readings, axes, trouble.RestartMoving, trouble.Stall)
	}
	add(string(file.Counter.Name), file.Counter.Line, 9*readings, nil, trouble.WrongGate, trouble.Overflow)
	for _, s := range append(slices.Clone(file.Protectors), *file.Pump) {
		add(string(s.Name), s.Line, 3*readings, nil, trouble.StuckShutter)
	}
	for _, l := range file.Lines {
		if slices.ContainsFunc(file.Sensors, func(s bench.Sensor) bool { return s.Line == l.Name }) {
			add(l.Name, l.Name, 6*readings, nil, trouble.StuckValue)
		}
	}
	for _, s := range file.Settings {
		add(string(s.Name), s.Line, 10, nil)
	}
	for _, arm := range []string{"signal", "idler"} {
		all = append(all, trouble.Target{Device: arm, May: []trouble.Kind{trouble.Latched}})
	}
	return all
}
