package nighttest

import (
	"fmt"
	"math"
	"regexp"
	"slices"
	"strconv"
	"time"

	"gemel/protocol"
	"gemel/scan"
	"gemel/sim/instruments"
	"gemel/sim/trouble"
)

// planned follows one run through its plan: the points it decided, the visits it makes in their order,
// what is repeated beside them, and what the references say. Killed, held and resumed anywhere, a run
// makes the same visits.
type planned struct {
	plan    scan.Plan
	known   bool
	points  []protocol.Point
	rounds  int
	refined bool // a refinement without points was the last
	visits  []scan.Visit
	seeded  bool
	done    map[scan.Visit]bool
	cursor  int
	cut     bool           // the rest is left out
	warm    bool           // the warm-up is over
	failed  map[string]int // by what is taken
	series  map[protocol.ReadingKind]*repeated
	wrote   time.Time // when the run's last entry became durable

	set, place  int // of the reference that is being taken; set 0: none yet
	first, last map[int]int64
	bad         map[int]bool
	zeros       map[string]int64 // entry that last said where an axis's zero is
	lastTaken   int64
}

// repeated is what was done so far of something beside the points.
type repeated struct {
	since int  // visits done since the last
	any   bool // one was taken or given up
	after bool // no visit was made since
}

func (j *judge) planOf(run protocol.RunID) *planned {
	r := j.run(run)
	if r.planned == nil {
		p := &planned{done: map[scan.Visit]bool{}, failed: map[string]int{}, series: map[protocol.ReadingKind]*repeated{},
			first: map[int]int64{}, last: map[int]int64{}, bad: map[int]bool{}, zeros: map[string]int64{}}
		p.plan, p.known = j.facts.Plans[run]
		for _, kind := range []protocol.ReadingKind{protocol.Dark, protocol.Background, protocol.Reference} {
			p.series[kind] = &repeated{}
		}
		r.planned = p
	}
	return r.planned
}

func (p *planned) cadence(kind protocol.ReadingKind) (scan.Cadence, bool) {
	switch {
	case kind == protocol.Dark && p.plan.Dark != nil:
		return *p.plan.Dark, true
	case kind == protocol.Background && p.plan.Background != nil:
		return p.plan.Background.Cadence, true
	case kind == protocol.Reference && p.plan.Reference != nil:
		return p.plan.Reference.Cadence, true
	}
	return scan.Cadence{}, false
}

var seedOf = regexp.MustCompile(`shuffled by seed ([0-9]+)`)

// decided judges an entry of points: complete, in order, each refinement once, and before anything
// moved for it.
func (j *judge) decided(b *protocol.Points) {
	p := j.planOf(b.Run)
	if !p.known {
		return
	}
	where := fmt.Sprintf("run %s: points of entry %d", b.Run, b.Sequence)
	if j.moveStarted.After(p.wrote) && !p.wrote.IsZero() {
		j.say("%s were decided after something had moved for them", where)
	}
	for i, q := range b.Points {
		if q.Point != len(p.points)+i {
			j.say("%s: point %d where %d was due", where, q.Point, len(p.points)+i)
			return
		}
	}
	if b.Refined == 0 {
		if len(p.points) == 0 {
			j.earlier(where, p, b)
		}
		for i, q := range b.Points {
			if n := len(p.points) + i; n < len(p.plan.Points) && p.plan.Repeat.Times > 0 && len(p.plan.Open()) == 0 && !sameTargets(q, p.plan.Points[n]) {
				j.say("%s: point %d is %+v; the plan has %+v", where, n, q, p.plan.Points[n])
			}
		}
		if m := seedOf.FindStringSubmatch(b.Grounds); m != nil {
			seed, _ := strconv.ParseUint(m[1], 10, 64)
			if p.seeded && seed != p.plan.Repeat.Seed {
				j.say("%s are shuffled by seed %d; they were by %d", where, seed, p.plan.Repeat.Seed)
			}
			p.plan.Repeat.Seed, p.seeded = seed, true
		}
		p.points = append(p.points, b.Points...)
		if len(p.points) == len(p.plan.Points) {
			p.visits = p.plan.Visits()
		}
		return
	}
	if p.rounds++; b.Refined != p.rounds || p.refined {
		j.say("%s: refinement %d is written as the %dth", where, b.Refined, p.rounds)
	}
	if !p.visited() && !p.cut {
		j.say("%s: refinement %d was decided before the visits before it were made", where, b.Refined)
	}
	p.refined = len(b.Points) == 0
	for _, q := range b.Points {
		p.visits = append(p.visits, scan.Visit{Point: q.Point, Visit: 1})
	}
	p.points = append(p.points, b.Points...)
	if bound := p.plan.Refine; bound == nil || len(p.points) > len(p.plan.Points)+bound.AtMost {
		j.say("%s: %d points added; the plan allows %+v", where, len(p.points)-len(p.plan.Points), bound)
	}
}

func sameTargets(q protocol.Point, want scan.Point) bool {
	if len(q.Axes) != len(want.Axes) || len(q.Settings) != len(want.Settings) {
		return false
	}
	for i, t := range want.Axes {
		if q.Axes[i].Axis != string(t.Axis) || q.Axes[i].Target != t.Angle {
			return false
		}
	}
	for i, t := range want.Settings {
		if q.Settings[i].Name != string(t.Setting) || q.Settings[i].Target != t.Value {
			return false
		}
	}
	return true
}

func (p *planned) visited() bool {
	for p.cursor < len(p.visits) && p.done[p.visits[p.cursor]] {
		p.cursor++
	}
	return p.cursor >= len(p.visits)
}

// taken judges a reading against the plan.
func (j *judge) taken(where string, b *protocol.Reading) {
	p := j.planOf(b.Run)
	if !p.known {
		return
	}
	j.due(where, p, b)
	j.attempts(where, p, b)
	j.settings(where, b)
	j.sensors(where, b)
	if !b.Accepted {
		return
	}
	switch b.Kind {
	case protocol.Light:
		j.visit(where, p, b)
	case protocol.Reference:
		j.reference(where, p, b)
	case protocol.Dark, protocol.Background:
		p.began(b.Kind)
	}
	if b.Kind != protocol.Check {
		p.lastTaken = b.Sequence
	}
}

func (p *planned) began(kind protocol.ReadingKind) {
	s := p.series[kind]
	s.since, s.any, s.after = 0, true, true
}

func (j *judge) visit(where string, p *planned, b *protocol.Reading) {
	v := scan.Visit{Point: *b.Point, Visit: *b.Visit}
	if v.Point >= len(p.points) {
		j.say("%s is of point %d, and %d are decided", where, v.Point, len(p.points))
		return
	}
	if p.cut {
		j.say("%s is light, and what is left was left out before it", where)
	}
	if p.visited() {
		j.say("%s is of point %d visit %d, and all visits were made", where, v.Point, v.Visit)
	} else if want := p.visits[p.cursor]; v != want {
		j.say("%s is of point %d visit %d; the plan's order has point %d visit %d", where, v.Point, v.Visit, want.Point, want.Visit)
	}
	for _, kind := range []protocol.ReadingKind{protocol.Dark, protocol.Background, protocol.Reference} {
		c, wanted := p.cadence(kind)
		s := p.series[kind]
		switch {
		case !wanted:
		case c.AtStart && !s.any && len(p.done) == 0:
			j.say("%s is light, and no %s was taken at the start", where, kind)
		case c.EveryPoints > 0 && s.since >= c.EveryPoints:
			j.say("%s is the %dth visit without a %s; one is due every %d", where, s.since+1, kind, c.EveryPoints)
		}
	}
	p.made(v)
	q := p.points[v.Point]
	for _, t := range q.Axes {
		i := slices.IndexFunc(b.Angles, func(a protocol.Angle) bool { return a.Axis == t.Axis })
		if i < 0 || b.Angles[i].Target != t.Target {
			j.say("%s: %s was to go to %s deg", where, t.Axis, t.Target)
		}
	}
	for _, t := range q.Settings {
		i := slices.IndexFunc(b.Settings, func(s protocol.Setting) bool { return s.Name == t.Name })
		if i < 0 || b.Settings[i].Target != t.Target {
			j.say("%s: %s was to be %g %s", where, t.Name, t.Target, t.Unit)
		}
	}
}

func (p *planned) made(v scan.Visit) {
	if p.done[v] {
		return
	}
	p.done[v] = true
	for _, s := range p.series {
		s.since++
		s.after = false
	}
}

// attempted names what attempts are counted of: a visit, one place of a set of references, or the dark or
// background that is due. A set that was given up at its first place is begun under the same number again,
// and from the first attempt.
func attempted(task string, point, visit int) string {
	if task == "light" || task == "reference" {
		return fmt.Sprint(task, point, " ", visit)
	}
	return task
}

// attempts judges the numbers of attempts: one more than failed since somebody let the run go on or it was
// given up, and no more than the recipe allows.
func (j *judge) attempts(where string, p *planned, b *protocol.Reading) {
	if b.Kind == protocol.Check {
		return
	}
	key := string(b.Kind)
	switch b.Kind {
	case protocol.Light:
		key = attempted(key, *b.Point, *b.Visit)
	case protocol.Reference:
		key = attempted(key, b.Reference.Place, b.Reference.Set)
	}
	if most := p.plan.Trouble.Retries + 1; b.Attempt < 1 || b.Attempt > most {
		j.say("%s is attempt %d; the recipe allows %d", where, b.Attempt, most)
	}
	if failed := p.failed[key]; b.Attempt != failed+1 {
		j.say("%s is attempt %d, and %d failed before it", where, b.Attempt, failed)
	}
	if b.Accepted {
		delete(p.failed, key)
	}
}

// reference judges one reading of a set: place after place, in the plan's order, at the plan's angles.
func (j *judge) reference(where string, p *planned, b *protocol.Reading) {
	if p.plan.Reference == nil || b.Reference == nil {
		j.say("%s is a reference that the plan does not have", where)
		return
	}
	places := p.plan.Reference.Places
	switch of := b.Reference; {
	case of.Place == 0:
		if of.Set <= p.set {
			j.say("%s begins reference %d; %d was begun already", where, of.Set, p.set)
		}
		p.set, p.place = of.Set, 0
		p.first[of.Set] = b.Sequence
	case of.Set != p.set || of.Place != p.place+1:
		j.say("%s is place %d of reference %d; place %d of %d was due", where, of.Place, of.Set, p.place+1, p.set)
	}
	p.place = b.Reference.Place
	if p.place >= len(places) || b.Reference.Places != len(places) {
		j.say("%s is place %d of %d; the plan has %d places", where, p.place, b.Reference.Places, len(places))
		return
	}
	for _, t := range places[p.place].Axes {
		i := slices.IndexFunc(b.Angles, func(a protocol.Angle) bool { return a.Axis == string(t.Axis) })
		if i < 0 || b.Angles[i].Target != t.Angle {
			j.say("%s: %s was to go to %s deg", where, t.Axis, t.Angle)
		}
	}
	if p.place == len(places)-1 {
		p.last[p.set] = b.Sequence
		p.began(protocol.Reference)
	}
}

// settings judges what is written of settings against what was truly set, during all of the reading.
func (j *judge) settings(where string, b *protocol.Reading) {
	for _, s := range b.Settings {
		scale, ok := j.facts.Settings[s.Name]
		if !ok || !b.Accepted {
			continue
		}
		var value float64
		var told bool
		for _, v := range j.values[scale.Device] {
			switch {
			case !v.at.After(b.StartedAt.Time):
				value, told = v.value, true
			case v.at.Before(b.EndedAt.Time):
				j.say("%s: %s was set to %g while it was counted", where, s.Name, v.value)
			}
		}
		if !told {
			continue // it never was set since the world began
		}
		for what, written := range map[string]float64{"before": s.Before, "after": s.After, "target": s.Target} {
			if math.Abs(written*scale.Factor-value) > scale.Tolerance*scale.Factor+1e-9*math.Abs(value) {
				j.say("%s: %s truly was %g; written %s is %g %s", where, s.Name, value, what, written, s.Unit)
			}
		}
	}
}

// sensors judges what is written of sensors against what was answered around the reading.
func (j *judge) sensors(where string, b *protocol.Reading) {
	for _, s := range b.Sensors {
		scale, ok := j.facts.Sensors[s.Sensor]
		if !ok || s.Samples == 0 {
			continue
		}
		low, high := false, false
		for _, v := range j.values[scale.Device+" "+scale.Quantity] {
			if v.at.Before(b.StartedAt.Add(-time.Minute)) {
				continue
			}
			same := func(written float64) bool {
				return math.Abs(written*scale.Factor-v.value) <= 1e-6*math.Abs(v.value)
			}
			low, high = low || same(s.Minimum), high || same(s.Maximum)
		}
		if !low || !high || s.Mean < s.Minimum-1e-9*math.Abs(s.Minimum) || s.Mean > s.Maximum+1e-9*math.Abs(s.Maximum) {
			j.say("%s: %s is written as %g to %g %s, mean %g, which it did not answer", where, s.Sensor, s.Minimum, s.Maximum, s.Unit, s.Mean)
		}
	}
}

// valued is something that had a value from a moment on.
type valued struct {
	at    time.Time
	value float64
}

func (j *judge) value(r *instruments.Record) {
	key := r.Device
	switch r.Kind {
	case instruments.ValueSet:
		if !r.At.Equal(j.hindered) { // else it lost its power
			j.covered(r)
		}
	case instruments.SensorRead:
		key += " " + r.Text
	default:
		return
	}
	if j.values == nil {
		j.values = map[string][]valued{}
	}
	all := append(j.values[key], valued{r.At, r.Value})
	if len(all) > 4096 {
		all = append(all[:0], all[2048:]...)
	}
	j.values[key] = all
}

// covered judges that no detector sees light while a setting moves: nobody looks at it meanwhile.
func (j *judge) covered(r *instruments.Record) {
	for _, d := range j.facts.Detectors {
		if d.Protector != "" && j.guards[d.Protector] {
			j.say("%s is set to %g with the %s detector open", r.Device, r.Value, d.Name)
		}
	}
}

// follow takes in what an event says about the plan.
func (j *judge) follow(where string, ev *protocol.Event) {
	p := j.planOf(ev.Run)
	number := func(name string) int { n, _ := ev.Detail[name].(float64); return int(n) }
	switch ev.Kind {
	case protocol.SetAside:
		task, _ := ev.Detail["task"].(string)
		delete(p.failed, attempted(task, number("point"), number("visit")))
		switch task {
		case "light":
			p.made(scan.Visit{Point: number("point"), Visit: number("visit")})
		case "rest":
			p.cut = true
			left := 0
			for _, v := range p.visits {
				if !p.done[v] {
					left++
				}
			}
			if p.known && number("left_out") != left {
				j.say("%s: %d visits are said to be left out; %d are", where, number("left_out"), left)
			}
		default:
			if kind := protocol.ReadingKind(task); p.series[kind] != nil {
				p.began(kind)
			}
		}
	case protocol.WentOn, protocol.GuardMended:
		_, mended := ev.Detail["cause"]
		if _, warm := ev.Detail["warm_up"]; warm {
			j.steady(where, p)
		} else if !mended {
			clear(p.failed)
		}
	case protocol.TakenAgain, protocol.Held:
		task, _ := ev.Detail["task"].(string)
		if task == "" || ev.Kind == protocol.Held && !slices.Contains(ev.Causes, protocol.ByLight) {
			break
		}
		p.failed[attempted(task, number("point"), number("visit"))]++
	case protocol.Doubted:
		j.doubt(where, p, ev)
	}
	if _, bad := ev.Detail["reference"]; bad && (ev.Kind == protocol.Doubted || ev.Kind == protocol.Trouble) {
		p.bad[number("reference")] = true
	}
	if ev.Kind == protocol.HomedEvent || ev.Kind == protocol.Doubted {
		for _, a := range axesNamed(ev.Detail) {
			p.zeros[a] = ev.Sequence
		}
	}
	if ev.Kind == protocol.Ended && ev.State == protocol.Finished && p.known {
		j.complete(where, p)
	}
}

func axesNamed(detail map[string]any) (all []string) {
	axes, _ := detail["axes"].([]any)
	for _, a := range axes {
		if name, ok := a.(string); ok {
			all = append(all, name)
		}
	}
	return all
}

// doubt judges a doubted range: from the last good check to the finding.
func (j *judge) doubt(where string, p *planned, ev *protocol.Event) {
	number := func(name string) int64 { n, _ := ev.Detail[name].(float64); return int64(n) }
	from, to := number("from_sequence"), number("to_sequence")
	if from < 1 || to < from || to >= ev.Sequence {
		j.say("%s: readings %d to %d are doubted by entry %d", where, from, to, ev.Sequence)
	}
	if set, ok := ev.Detail["reference"].(float64); ok {
		good := 0
		for n := range p.last {
			if n < int(set) && !p.bad[n] {
				good = max(good, n)
			}
		}
		if wantFrom, wantTo := p.last[good]+1, p.first[int(set)]-1; from != wantFrom || to != wantTo {
			j.say("%s: reference %d doubts readings %d to %d; the last good one is %d, so want %d to %d", where, int(set), from, to, good, wantFrom, wantTo)
		}
		return
	}
	for _, a := range axesNamed(ev.Detail) {
		if want := p.zeros[a] + 1; from != want || to < p.lastTaken {
			j.say("%s: %s doubts readings %d to %d; it was last known by entry %d, and the last reading is %d", where, a, from, to, want-1, p.lastTaken)
		}
	}
}

// complete judges a run that says it is finished.
func (j *judge) complete(where string, p *planned) {
	if !p.visited() && !p.cut {
		v := p.visits[p.cursor]
		j.say("%s: finished, and point %d visit %d was neither made nor given up", where, v.Point, v.Visit)
	}
	if p.plan.Refine != nil && !p.refined && !p.cut {
		j.say("%s: finished, and refining had no end", where)
	}
	for kind, s := range p.series {
		if c, wanted := p.cadence(kind); wanted && c.AtEnd && !s.after {
			j.say("%s: finished without a closing %s", where, kind)
		}
	}
}

// doubtless says whether a reading stands: accepted, and doubted by nothing.
func (j *judge) doubtless(run protocol.RunID, sequence int64) bool {
	return !slices.ContainsFunc(j.doubted, func(s span) bool { return s.run == run && sequence >= s.from && sequence <= s.to })
}

// guarded judges an accepted reading of light against the guards on the pump's power: true power, less
// what the meter's own noise may hide.
func (j *judge) guarded(where string, b *protocol.Reading, seen *instruments.Seen) {
	p := j.planOf(b.Run)
	if b.Kind != protocol.Light {
		return
	}
	for _, g := range p.plan.Guards {
		for _, s := range b.Sensors {
			if s.Sensor == string(g.Sensor) && s.Samples > 0 && (s.Minimum < g.Low || s.Maximum > g.High) {
				j.say("%s was accepted with %s from %g to %g %s; the guard wants %g to %g", where, s.Sensor, s.Minimum, s.Maximum, s.Unit, g.Low, g.High)
			}
		}
		scale, ok := j.facts.Sensors[string(g.Sensor)]
		if !ok || scale.Quantity != "W" || j.stuck(scale.Device, b) {
			continue
		}
		if w := seen.PumpMeanW / scale.Factor; w < g.Low*(1-meterNoise) || w > g.High*(1+meterNoise) {
			j.say("%s was accepted at a pump power of %.4g mW; the guard wants %g to %g", where, w, g.Low, g.High)
		}
	}
}

// stuck says whether a sensor measured the same for ever around a reading: nobody can tell.
func (j *judge) stuck(device string, b *protocol.Reading) bool {
	return slices.ContainsFunc(j.effects, func(e *effect) bool {
		return e.trouble.Kind == trouble.StuckValue && e.trouble.Device == device && !b.EndedAt.Before(e.at) && b.StartedAt.Before(e.at.Add(e.trouble.For+time.Minute))
	})
}

// meterNoise is five times the virtual meter's own, relative.
const meterNoise = 0.005
