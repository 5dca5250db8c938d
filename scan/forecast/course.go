package forecast

import (
	"fmt"
	"math"
	"slices"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/engine"
	"gemel/scan/route"
)

// Spent is where the time goes. Its parts add up to the whole.
type Spent struct {
	Waiting  time.Duration // for not_before, and the shortest warm-up
	Moving   time.Duration // axes and settings on their way
	Settling time.Duration // axes, shutters, detectors and settings that came to rest or were opened
	Counting time.Duration // gates of light readings
	Beside   time.Duration // gates of darks, backgrounds and references
	Overhead time.Duration // questions on the lines, glances, entries written
}

// All is the sum.
func (s Spent) All() time.Duration {
	return s.Waiting + s.Moving + s.Settling + s.Counting + s.Beside + s.Overhead
}

func (s *Spent) add(t Spent) {
	s.Waiting += t.Waiting
	s.Moving += t.Moving
	s.Settling += t.Settling
	s.Counting += t.Counting
	s.Beside += t.Beside
	s.Overhead += t.Overhead
}

func (s Spent) less(t Spent) Spent {
	return Spent{s.Waiting - t.Waiting, s.Moving - t.Moving, s.Settling - t.Settling, s.Counting - t.Counting, s.Beside - t.Beside, s.Overhead - t.Overhead}
}

// taken is one reading of the course.
type taken struct {
	kind    protocol.ReadingKind
	point   int // of a light; of others the point the arms have
	visit   int
	set     int           // of a reference
	place   int           // of a reference
	started time.Duration // since the run began
	ended   time.Duration //
	gate    time.Duration // counted
	slices  float64       // how many, on the average
	at      []unit.Angle  // of all axes; nil where the course keeps no places
	more    *scan.Point   // a point that a refinement added
}

// course goes through the run as the engine would, and adds up what takes time.
type course struct {
	plan  *scan.Plan
	bench *Bench
	rate  func(point int, more *scan.Point) float64 // of the trigger whose counts end a dwell

	walk    *route.Walk
	columns []int        // the axis of each of a point's targets
	here    []unit.Angle // where each axis stands
	there   []unit.Angle
	due     []bool
	sent    []bool
	target  []bool
	stand   []unit.Angle // where axes stay that the sweep does not move
	pumped  bool         // pump shutter open
	shown   bool         // protectors open
	gate    time.Duration
	still   []scan.SettingTarget           // settings that the plan does not step, where they stand
	told    map[drivers.DeviceName]float64 // what each setting was last set to

	now    time.Duration
	spent  Spent
	habits []habit
	anew   bool          // everything is worked out anew, for tests
	stuck  map[int]error // points to which no way is free

	// What one thing of a kind takes, worked out once.
	closeAll, openAll, whereAll, sampleAll, guardAll, shownAll expense
	glance                                                     time.Duration
}

// habit is a light reading that came before, and all that it took: one after the same move, on a bench
// that stood alike, takes the same.
type habit struct {
	moved          []unit.Angle // of each axis
	due            []bool
	spent          Spent
	all            time.Duration
	started, ended time.Duration // since its begin
	gate           time.Duration // counted
	slices         float64
}

// mostHabits is how many are kept: the steps of a sweep, forth and back, and from line to line.
const mostHabits = 6

// expense is a time that is part settling, part overhead.
type expense struct{ settle, overhead time.Duration }

func newCourse(plan *scan.Plan, b *Bench) (*course, error) {
	walk, err := route.NewWalk(b.Axes, b.KeepOuts)
	if err != nil {
		return nil, err
	}
	n := len(b.Axes)
	c := &course{plan: plan, bench: b, walk: walk, here: slices.Clone(b.Start), there: make([]unit.Angle, n), due: make([]bool, n), sent: make([]bool, n),
		target: make([]bool, n), stand: slices.Clone(b.Start), stuck: map[int]error{}, told: map[drivers.DeviceName]float64{}}
	if len(c.here) != n {
		return nil, fmt.Errorf("forecast: %d axes stand somewhere of %d; want all", len(c.here), n)
	}
	if g := plan.Background; g != nil {
		c.stand[c.axis(g.Axis)] = g.From
	}
	at := map[drivers.AxisName]unit.Angle{}
	for i, a := range b.Axes {
		at[a.Name] = b.Start[i]
	}
	if plan.Refine == nil { // its points are not in the plan
		walk.Only(*plan, at)
	}
	for _, s := range b.Settings {
		stepped := len(plan.Points) > 0 && slices.ContainsFunc(plan.Points[0].Settings, func(t scan.SettingTarget) bool { return t.Setting == s.Name })
		if s.Stand != nil && !stepped {
			c.still = append(c.still, scan.SettingTarget{Setting: s.Name, Value: *s.Stand})
		}
	}
	if len(plan.Points) > 0 {
		for _, t := range plan.Points[0].Axes {
			c.columns = append(c.columns, c.axis(t.Axis))
		}
	}
	k := b.Costs
	for _, s := range b.Protectors {
		c.closeAll.settle += s.SettleClosed
		c.closeAll.overhead += k.ask(s.Name, askClose+askState)
		c.openAll.settle += s.SettleOpen
		c.openAll.overhead += k.ask(s.Name, askOpen+askState)
	}
	var ready time.Duration
	for _, d := range b.Detectors {
		c.glance = max(c.glance, d.Glance)
		if d.ProtectBy != "" {
			ready = max(ready, d.Ready)
			c.shownAll.overhead += k.ask(d.ProtectBy, askState)
		}
	}
	if b.Pump != nil {
		c.shownAll.overhead += k.ask(b.Pump.Name, askState)
	}
	c.openAll.settle += ready
	for _, name := range b.Controllers {
		c.whereAll.overhead += k.ask(name, askWhere)
	}
	for _, name := range b.Sensors {
		c.sampleAll.overhead += k.ask(name, askSensor)
	}
	for _, g := range plan.Guards {
		if g.Sensor != "" {
			c.guardAll.overhead += k.ask(g.Sensor, askSensor)
		}
	}
	return c, nil
}

func (c *course) axis(name drivers.AxisName) int {
	i := slices.IndexFunc(c.bench.Axes, func(a scan.Axis) bool { return a.Name == name })
	if i < 0 {
		panic("forecast: the plan names axis " + string(name) + ", which the bench does not have; it should have been refused")
	}
	return i
}

func (c *course) spend(e expense) {
	c.spent.Settling += e.settle
	c.spent.Overhead += e.overhead
	c.now += e.settle + e.overhead
}

func (c *course) overhead(d time.Duration) { c.spend(expense{overhead: d}) }

// run goes through all readings. Each is given to see in its order, and may not be kept.
func (c *course) run(begins time.Time, refine func(int) []scan.Point, see func(*taken)) *engine.Outlook {
	k := c.bench.Costs
	const entry = 500 // points in one entry of the journal
	c.overhead(k.Start + c.whereAll.overhead + time.Duration(1+(len(c.plan.Points)+entry-1)/entry)*k.Write)
	c.wait(c.warmUp())
	if from := c.plan.Schedule.NotBefore; from.After(begins.Add(c.now)) {
		c.wait(from.Sub(begins.Add(c.now)))
	}
	look := engine.NewOutlook(c.plan, begins, refine)
	var r taken
	for {
		f, ok := look.Next(begins.Add(c.now))
		if !ok {
			break
		}
		r = taken{kind: f.Kind, point: f.Visit.Point, visit: f.Visit.Visit, place: f.Place, set: f.Set, at: c.here}
		if f.Visit.Point >= len(c.plan.Points) {
			point := f.Point // f itself must not be made anew a million times
			r.more = &point
		}
		c.take(f, &r)
		look.Taken(f, begins.Add(r.started), begins.Add(r.ended))
		if see != nil {
			see(&r)
		}
		c.overhead(k.Write + k.Reading)
	}
	c.end()
	return look
}

// warmUp is the shortest that it can be: every sensor has to be watched for its time.
func (c *course) warmUp() time.Duration {
	var least time.Duration
	if w := c.plan.Schedule.WarmUp; w != nil {
		for _, s := range w.Steady {
			least = max(least, s.Over)
		}
	}
	return least
}

func (c *course) wait(d time.Duration) {
	c.spent.Waiting += d
	c.now += d
}

// take is one reading, in the engine's order: settings, move, guards, light, glance, slices, proof.
func (c *course) take(f engine.Foreseen, r *taken) {
	c.stayAll()
	var settings []scan.SettingTarget
	switch f.Kind {
	case protocol.Light:
		settings = f.Point.Settings
		c.aim(f.Point.Axes, false)
	case protocol.Dark:
		c.aim(f.Point.Axes, true)
	case protocol.Background:
		c.aim(f.Point.Axes, false)
		g := c.plan.Background
		i := c.axis(g.Axis)
		c.there[i], c.target[i] = g.From+g.By, true
	case protocol.Reference:
		settings = c.plan.Points[0].Settings
		c.aim(f.Point.Axes, true)
		for _, t := range c.plan.Reference.Places[f.Place].Axes {
			i := c.axis(t.Axis)
			c.there[i], c.target[i] = t.Angle, true
		}
	}
	any := c.decide()
	alike := f.Kind == protocol.Light && len(settings) == 0 && f.Dwell.Heralds == 0 && c.pumped && c.shown && c.walk.Free() && !c.anew
	if alike && c.asBefore(r) {
		return
	}
	began, before, gate := c.now, c.spent, c.gate
	var h habit
	if alike && len(c.habits) < mostHabits {
		h = habit{due: slices.Clone(c.due), moved: make([]unit.Angle, len(c.here))}
		for i := range c.here {
			h.moved[i] = c.there[i] - c.here[i]
		}
	}
	c.set(c.still)
	c.set(settings)
	c.goTo(f.Visit.Point, any)
	light := f.Kind != protocol.Dark
	if light {
		c.spend(c.guardAll)
	}
	c.light(light)
	if c.glance > 0 {
		c.count(c.glance, 1)
		c.spent.Overhead += c.glance
		c.now += c.glance
	}
	c.spend(c.sampleAll)
	r.started = c.now
	c.dwell(f, r)
	c.spend(c.shownAll)
	c.spend(c.whereAll)
	for _, s := range c.still {
		c.overhead(c.bench.Costs.ask(s.Setting, askGet))
	}
	for _, s := range settings {
		c.overhead(c.bench.Costs.ask(s.Setting, askGet))
	}
	if h.due != nil && c.gate == gate && c.pumped && c.shown {
		h.spent, h.all, h.started, h.ended, h.gate, h.slices = c.spent.less(before), c.now-began, r.started-began, r.ended-began, r.gate, r.slices
		c.habits = append(c.habits, h)
	}
}

// asBefore does what was done before after the same move.
func (c *course) asBefore(r *taken) bool {
next:
	for k := range c.habits {
		h := &c.habits[k]
		for i, due := range h.due {
			if due != c.due[i] || due && h.moved[i] != c.there[i]-c.here[i] {
				continue next
			}
		}
		r.started, r.ended, r.gate, r.slices = c.now+h.started, c.now+h.ended, h.gate, h.slices
		c.now += h.all
		c.spent.add(h.spent)
		for i, due := range c.due {
			if due {
				c.here[i], c.sent[i] = c.there[i], true
			}
		}
		return true
	}
	return false
}

// stayAll makes every axis stay where it has to be: the course's own there is begun anew.
func (c *course) stayAll() {
	for i := range c.there {
		c.there[i], c.target[i] = c.stand[i], false
	}
}

// aim takes a point's targets. Where the axes look makes no difference to a dark: those that were
// sent somewhere stay.
func (c *course) aim(targets []scan.AxisTarget, stay bool) {
	for n, t := range targets {
		i := 0
		if n < len(c.columns) && c.bench.Axes[c.columns[n]].Name == t.Axis {
			i = c.columns[n]
		} else {
			i = c.axis(t.Axis)
		}
		c.target[i] = true
		c.there[i] = t.Angle
		if stay && c.sent[i] {
			c.there[i] = c.here[i]
		}
	}
}

// set brings settings where they have to be, with the detectors protected. One that was brought there
// before is only asked.
func (c *course) set(settings []scan.SettingTarget) {
	shielded := false
	for _, t := range settings {
		if v, told := c.told[t.Setting]; told && v == t.Value {
			c.overhead(c.bench.Costs.ask(t.Setting, askGet))
			continue
		}
		if !shielded {
			c.shield()
			shielded = true
		}
		c.told[t.Setting] = t.Value
		var settle time.Duration
		if i := slices.IndexFunc(c.bench.Settings, func(s Setting) bool { return s.Name == t.Setting }); i >= 0 {
			settle = c.bench.Settings[i].Settle
		}
		c.spend(expense{settle: settle, overhead: c.bench.Costs.ask(t.Setting, askSet)})
	}
}

// shield closes the protectors that are open.
func (c *course) shield() {
	if c.shown {
		c.spend(c.closeAll)
		c.shown = false
		return
	}
	for _, s := range c.bench.Protectors {
		c.overhead(c.bench.Costs.ask(s.Name, askState))
	}
}

// decide says which axes have to be moved, and whether there are any.
func (c *course) decide() (any bool) {
	for i := range c.there {
		if c.target[i] {
			c.due[i] = !c.sent[i] || c.here[i] != c.there[i]
		} else {
			c.due[i] = (c.here[i] - c.there[i]).Abs() > c.bench.Axes[i].Tolerance
		}
		any = any || c.due[i]
	}
	return any
}

// goTo moves what was decided, with the detectors protected.
func (c *course) goTo(point int, any bool) {
	c.spend(c.whereAll)
	if !any {
		return
	}
	trip, err := c.walk.Go(c.here, c.there, c.due)
	if err != nil {
		if _, told := c.stuck[point]; !told {
			c.stuck[point] = err
		}
	}
	c.spend(c.closeAll)
	c.shown = false
	if trip.Dark && c.bench.Pump != nil {
		c.spend(expense{settle: c.bench.Pump.SettleClosed, overhead: c.bench.Costs.ask(c.bench.Pump.Name, askClose+askState)})
		c.pumped = false
	}
	c.spent.Moving += trip.Travel
	c.now += trip.Travel
	c.spend(expense{settle: trip.Settle, overhead: c.bench.Costs.ask(c.mover(), askMove*trip.Sent)})
	if trip.Travel == 0 {
		c.overhead(c.bench.Costs.ask(c.mover(), askStill*trip.Sent))
	}
	if trip.Back {
		c.overhead(2 * c.bench.Costs.Turn)
	}
	for i := range c.there {
		if c.due[i] {
			c.here[i], c.sent[i] = c.there[i], true
		}
	}
	c.spend(c.whereAll)
}

// mover is a controller of the move just made: the first that was sent.
func (c *course) mover() drivers.DeviceName {
	for i := range c.due {
		if c.due[i] {
			return c.bench.Axes[i].Controller
		}
	}
	return ""
}

// light opens and closes what the reading needs.
func (c *course) light(pump bool) {
	k := c.bench.Costs
	c.spend(c.shownAll)
	if s := c.bench.Pump; s != nil {
		switch {
		case pump && !c.pumped:
			c.spend(expense{settle: s.SettleOpen, overhead: k.ask(s.Name, askOpen+askState)})
		case !pump && c.pumped:
			c.spend(expense{settle: s.SettleClosed, overhead: k.ask(s.Name, askClose+askState)})
		}
		c.pumped = pump
	}
	if !c.shown {
		c.spend(c.openAll)
		c.shown = true
	}
}

// count is what so many gates of a length cost beside their time.
func (c *course) count(gate time.Duration, times float64) {
	questions := askCount * times
	if gate != c.gate {
		questions += askSetGate
		c.gate = gate
	}
	k := c.bench.Costs
	c.overhead(time.Duration(questions * float64(k.ask(c.bench.Counter.Name, 1))))
}

// dwell counts the slices. One that ends on the trigger's counts has as many as these take on the
// average.
func (c *course) dwell(f engine.Foreseen, r *taken) {
	d := f.Dwell
	gates := d.Slices()
	n := float64(len(gates))
	total := d.Time
	if d.Heralds > 0 {
		rate := 0.0
		if c.rate != nil {
			rate = c.rate(f.Visit.Point, r.more)
		}
		n, total = heraldedSlices(d, gates, rate)
	}
	r.gate, r.slices = total, n
	if len(gates) > 1 && gates[len(gates)-1] != gates[0] && d.Heralds == 0 {
		c.count(gates[0], n-1)
		c.count(gates[len(gates)-1], 1)
	} else {
		c.count(gates[0], n)
	}
	c.now += total
	r.ended = c.now
	sample := time.Duration(n*float64(c.sampleAll.overhead)) + time.Duration(n*float64(c.bench.Costs.Slice))
	c.overhead(sample)
	if f.Kind == protocol.Light {
		c.spent.Counting += total
	} else {
		c.spent.Beside += total
	}
}

// heraldedSlices is how many slices a dwell has on the average that ends with the first one at whose
// end the trigger has its counts: the sum of the chances that another is needed.
func heraldedSlices(d scan.Dwell, gates []time.Duration, rateHz float64) (n float64, total time.Duration) {
	counted := time.Duration(0)
	seconds := 0.0
	for _, gate := range gates {
		more := 1.0
		if counted > 0 {
			mean := rateHz * counted.Seconds()
			more = 0.5 * math.Erfc((mean-float64(d.Heralds)+0.5)/math.Sqrt(2*math.Max(mean, 1)))
		}
		if more < 1e-6 {
			break
		}
		n += more
		seconds += more * gate.Seconds()
		counted += gate
	}
	return n, time.Duration(seconds * float64(time.Second))
}

// end is what comes after the last reading: the rest state, and an axis put back.
func (c *course) end() {
	if g := c.plan.Background; g != nil {
		c.spend(c.closeAll)
		c.shown = false
		c.stayAll()
		c.aim(c.plan.Points[0].Axes, true)
		c.goTo(-1, c.decide())
	}
	rest := c.closeAll
	if s := c.bench.Pump; s != nil {
		rest.settle += s.SettleClosed
		rest.overhead += c.bench.Costs.ask(s.Name, askClose+askState)
	}
	for _, name := range c.bench.Controllers {
		rest.overhead += c.bench.Costs.ask(name, 1)
	}
	rest.overhead += c.bench.Costs.ask(c.bench.Counter.Name, 1)
	times := 1
	if len(c.plan.Results) > 0 {
		times++ // once before the results are worked out
	}
	for range times {
		c.spend(rest)
	}
	c.overhead(time.Duration(1+len(c.plan.Results)) * c.bench.Costs.Write)
}
