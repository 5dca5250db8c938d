package instruments

import (
	"fmt"
	"math"
	"time"

	"gemel/sim/trouble"
)

// AxisConfig describes one axis of a motion controller. The controller's reading is
// ZeroDeg + Sense × bench angle, in degrees.
type AxisConfig struct {
	Letter string // on the wire: a letter for a Rotary, digits for a Plain
	Axis   string // name in the bench file
	Role   string // what turns with it: SignalArm, IdlerArm, CrystalTilt, PumpWaveplate, or nothing known

	Sense           int     // +1 or -1; 0 is +1
	ZeroDeg         float64 // the controller's reading where the bench angle is 0
	LowDeg, HighDeg float64 // the controller's own limits, controller degrees
	SpeedDegS       float64
	AccelDegS2      float64
	BacklashDeg     float64 // true play between motor and axis
	FallingFlank    bool    // the zero was found with the axis turning towards lower bench angles
	StepsPerDeg     float64
	Encoder         bool    // the reading comes from an encoder on the axis, and moves are closed on it
	HomeDeg         float64 // where the reference switch is, controller degrees
	StartDeg        float64 // true bench angle when the world begins
	Homed           bool    // it knows its zero when the world begins
	KeepsZero       bool    // a restart does not lose it
}

// axis is one axis of a controller, and the truth about it.
type axis struct {
	cfg   AxisConfig
	w     *World
	path  *path
	homed bool
	lost  float64 // what the reading is wrong by since the zero was lost, controller degrees
	slip  float64 // motor minus counted position, bench degrees; an encoder does not care

	toLose  float64          // steps to be lost in the next move
	toStall *trouble.Trouble // in the next move
	seeking bool             // it searches its reference
}

func (w *World) newAxis(cfg AxisConfig) (*axis, error) {
	if cfg.Sense == 0 {
		cfg.Sense = 1
	}
	switch {
	case cfg.Sense != 1 && cfg.Sense != -1:
		return nil, fmt.Errorf("axis %s: sense %d; want +1 or -1", cfg.Axis, cfg.Sense)
	case !(cfg.LowDeg < cfg.HighDeg):
		return nil, fmt.Errorf("axis %s: limits %g to %g; want the lower first", cfg.Axis, cfg.LowDeg, cfg.HighDeg)
	case !(cfg.SpeedDegS > 0 && cfg.AccelDegS2 > 0 && cfg.StepsPerDeg > 0):
		return nil, fmt.Errorf("axis %s: speed %g, acceleration %g, steps a degree %g; want all above 0", cfg.Axis, cfg.SpeedDegS, cfg.AccelDegS2, cfg.StepsPerDeg)
	case cfg.BacklashDeg < 0:
		return nil, fmt.Errorf("axis %s: backlash %g; want 0 or more", cfg.Axis, cfg.BacklashDeg)
	case w.arms[cfg.Role] != nil:
		return nil, fmt.Errorf("axis %s: role %s is taken by %s; want one axis a role", cfg.Axis, cfg.Role, w.arms[cfg.Role].cfg.Axis)
	}
	for _, x := range w.axes {
		if x.cfg.Axis == cfg.Axis {
			return nil, fmt.Errorf("axis %s: there are two of this name; want one", cfg.Axis)
		}
	}
	x := &axis{cfg: cfg, w: w, path: newPath(w.Now(), cfg.StartDeg, cfg.BacklashDeg, cfg.FallingFlank), homed: true}
	if !cfg.Homed {
		x.loseZero(w.Now())
	}
	w.axes = append(w.axes, x)
	switch cfg.Role {
	case SignalArm, IdlerArm, CrystalTilt, PumpWaveplate:
		w.arms[cfg.Role] = x
	}
	return x, nil
}

func (x *axis) sense() float64 { return float64(x.cfg.Sense) }

// whole rounds to whole steps.
func (x *axis) whole(deg float64) float64 {
	return math.Round(deg*x.cfg.StepsPerDeg) / x.cfg.StepsPerDeg
}

// reading is what the controller says, in controller degrees.
func (x *axis) reading(at time.Time) float64 {
	pos := x.path.axis(at)
	if !x.cfg.Encoder {
		m, _ := x.path.motor(at)
		pos = m - x.slip
	}
	return x.whole(x.cfg.ZeroDeg + x.sense()*pos + x.lost)
}

// motorFor is where the motor has to go for the controller to read deg.
func (x *axis) motorFor(deg float64) float64 {
	pos := x.sense() * (x.whole(deg) - x.cfg.ZeroDeg - x.lost)
	end, m := x.path.end()
	if !x.cfg.Encoder {
		return pos + x.slip
	}
	now := x.path.axis(end)
	if math.Abs(pos-now) < 0.5/x.cfg.StepsPerDeg {
		return m
	}
	// The loop is closed on the axis: the motor crosses the play by itself.
	switch {
	case pos < now && !x.cfg.FallingFlank:
		return pos - x.cfg.BacklashDeg
	case pos > now && x.cfg.FallingFlank:
		return pos + x.cfg.BacklashDeg
	}
	return pos
}

// loseZero makes the reading start from 0 where the axis stands.
func (x *axis) loseZero(at time.Time) {
	x.homed, x.lost = false, 0
	pos := x.path.axis(at)
	if !x.cfg.Encoder {
		m, _ := x.path.motor(at)
		pos = m - x.slip
	}
	x.lost = -(x.cfg.ZeroDeg + x.sense()*pos)
}

// upset lets the axis slip, now or in its next move.
func (x *axis) upset(at time.Time, t trouble.Trouble) {
	turning, _ := x.path.moving(at)
	switch {
	case t.Kind == trouble.LostSteps && !turning:
		x.toLose += t.ByDeg
		return
	case t.Kind == trouble.Stall && (!turning || x.seeking):
		x.toStall = &t
		return
	case t.Kind == trouble.Stall:
		x.stall(at, t)
		return
	}
	from := x.path.axis(at)
	x.path.shift(at, t.ByDeg)
	x.slip += t.ByDeg
	x.w.record(Record{At: at, Kind: Slipped, Text: t.String(), Axes: map[string]Span{x.cfg.Axis: {from, x.path.axis(at)}}, Stand: x.w.stand(at)})
}

// stall stops the axis where it is, while its controller goes on counting until the motion should end.
func (x *axis) stall(at time.Time, t trouble.Trouble) {
	end, goal := x.path.end()
	planned := x.path.axis(end)
	stands := x.path.halt(at)
	x.path.add(phase{at: end, x: stands})
	x.slip += stands - goal
	x.w.record(Record{At: at, Kind: Stalled, Text: t.String(), Axes: map[string]Span{x.cfg.Axis: {x.path.axis(at), planned}}, Stand: x.w.stand(at)})
}

// mechanism is the moving part of a controller: axes, the moves that are planned, the searches.
type mechanism struct {
	name     string
	w        *World
	axes     []*axis
	together bool

	jobs []*job // under way and planned, in order

	owner     *actor
	toRestart *trouble.Trouble // in the next move
}

type job struct {
	home       *axis // a search, or nil
	axes       []*axis
	from       map[string]Span
	started    bool
	begin, end *happening
	looks      []*happening // at where the axes are meanwhile
}

// looksOfJob is at how many instants of a motion the ledger says where everything is: between them
// nothing turns back.
const looksOfJob = 7

// maxJobs is how many moves a controller keeps in its queue.
const maxJobs = 16

func (m *mechanism) named(letter string) *axis {
	for _, x := range m.axes {
		if x.cfg.Letter == letter {
			return x
		}
	}
	return nil
}

func (m *mechanism) turning(at time.Time) bool {
	for _, x := range m.axes {
		if t, _ := x.path.moving(at); t {
			return true
		}
	}
	return false
}

func (m *mechanism) searching() *axis {
	for _, j := range m.jobs {
		if j.home != nil {
			return j.home
		}
	}
	return nil
}

// target is where one axis shall go.
type target struct {
	axis *axis
	deg  float64 // controller degrees
}

// move plans a move behind what is planned already. feedDegMin of 0 is as fast as the axes can.
// It returns why it will not.
func (m *mechanism) move(now time.Time, targets []target, feedDegMin float64) (refusal string) {
	if x := m.searching(); x != nil {
		return fmt.Sprintf("%s searches its reference", x.cfg.Letter)
	}
	if len(m.jobs) >= maxJobs {
		return "queue full"
	}
	for _, t := range targets {
		switch c := t.axis.cfg; {
		case !t.axis.homed:
			return fmt.Sprintf("%s has no reference", c.Letter)
		case !(t.deg >= c.LowDeg && t.deg <= c.HighDeg):
			return fmt.Sprintf("%s %.4f outside %.4f to %.4f", c.Letter, t.deg, c.LowDeg, c.HighDeg)
		}
	}
	start := now
	for _, x := range m.axes {
		if end, _ := x.path.end(); m.together && end.After(start) {
			start = end
		}
	}
	j := &job{from: map[string]Span{}}
	var sum float64
	ds := make([]float64, len(targets))
	ms := make([]float64, len(targets))
	for i, t := range targets {
		_, at := t.axis.path.end()
		ms[i] = t.axis.motorFor(t.deg)
		ds[i] = math.Abs(ms[i] - at)
		sum += ds[i] * ds[i]
	}
	v, a := math.Inf(1), math.Inf(1)
	for i, t := range targets {
		if ds[i] > 0 {
			v = min(v, t.axis.cfg.SpeedDegS/ds[i])
			a = min(a, t.axis.cfg.AccelDegS2/ds[i])
		}
	}
	if feedDegMin > 0 && sum > 0 {
		v = min(v, feedDegMin/60/math.Sqrt(sum))
	}
	first, last := start, start
	for i, t := range targets {
		if ds[i] == 0 {
			continue
		}
		begin, pv, pa := start, v, a
		if !m.together {
			if end, _ := t.axis.path.end(); end.After(begin) {
				begin = end
			}
			pv, pa = t.axis.cfg.SpeedDegS/ds[i], t.axis.cfg.AccelDegS2/ds[i]
			if feedDegMin > 0 {
				pv = min(pv, feedDegMin/60/ds[i])
			}
		}
		end := t.axis.path.follow(begin, ms[i], newProfile(pv, pa))
		if len(j.axes) == 0 || begin.Before(first) {
			first = begin
		}
		if end.After(last) {
			last = end
		}
		middle := begin.Add(end.Sub(begin) / 2)
		if t.axis.toLose != 0 {
			t.axis.loseSteps(middle)
		}
		if stall := t.axis.toStall; stall != nil {
			t.axis.toStall = nil
			t.axis.w.at(middle, nil, func(at time.Time) { t.axis.upset(at, *stall) })
		}
		j.axes = append(j.axes, t.axis)
	}
	if len(j.axes) > 0 {
		m.enter(j, MoveStarted, MoveEnded, first, last, nil)
		m.restartIn(first.Add(last.Sub(first) / 2))
	}
	return ""
}

// restartIn lets the controller that waits for a motion to restart in do so, if it still moves by then.
func (m *mechanism) restartIn(middle time.Time) {
	t := m.toRestart
	if t == nil {
		return
	}
	m.toRestart = nil
	m.w.at(m.owner.own(middle), m.owner, func(at time.Time) {
		if !m.turning(at) {
			m.toRestart = t
			return
		}
		m.owner.midway(at, *t)
	})
}

// loseSteps lets the axis lose steps in the middle of the move just planned.
func (x *axis) loseSteps(at time.Time) {
	t := trouble.Trouble{Kind: trouble.LostSteps, Device: x.cfg.Axis, At: at.Sub(x.w.origin), ByDeg: x.toLose}
	x.toLose = 0
	x.w.at(at, nil, func(at time.Time) { x.upset(at, t) })
}

// enter puts a job on the list, and its beginning and end into the future. turns are where it turns back.
func (m *mechanism) enter(j *job, began, ended Kind, first, last time.Time, done func(at time.Time), turns ...time.Time) {
	m.jobs = append(m.jobs, j)
	start := func(at time.Time) {
		j.started = true
		planned := map[string]Span{}
		for _, x := range j.axes {
			j.from[x.cfg.Axis] = Span{FromDeg: x.path.axis(at)}
			planned[x.cfg.Axis] = Span{FromDeg: x.path.axis(at), ToDeg: x.path.axis(last)}
		}
		m.w.record(Record{At: at, Device: m.name, Kind: began, Axes: planned, Stand: m.w.stand(at)})
	}
	if first.After(m.w.Now()) {
		j.begin = m.w.at(first, nil, start)
	} else {
		start(first)
	}
	j.end = m.w.at(last, nil, func(at time.Time) {
		m.drop(j)
		if done != nil {
			done(at)
		}
		m.w.record(Record{At: at, Device: m.name, Kind: ended, Axes: j.spans(at), Stand: m.w.stand(at)})
	})
	for i := range looksOfJob {
		turns = append(turns, first.Add(last.Sub(first)*time.Duration(i+1)/(looksOfJob+1)))
	}
	for _, at := range turns {
		j.looks = append(j.looks, m.w.at(at, nil, func(at time.Time) {
			m.w.record(Record{At: at, Device: m.name, Kind: Underway, Stand: m.w.stand(at)})
		}))
	}
}

func (j *job) spans(at time.Time) map[string]Span {
	spans := map[string]Span{}
	for _, x := range j.axes {
		spans[x.cfg.Axis] = Span{FromDeg: j.from[x.cfg.Axis].FromDeg, ToDeg: x.path.axis(at)}
	}
	return spans
}

func (m *mechanism) drop(j *job) {
	for i := range m.jobs {
		if m.jobs[i] == j {
			m.jobs = append(m.jobs[:i], m.jobs[i+1:]...)
			return
		}
	}
}

// RunUpDeg is how far below its reference, beside the play, a search begins that comes from above.
const RunUpDeg = 1.

// home begins the search for an axis's reference: down below the switch if need be, then slowly
// onto it with the flank on which the zero holds.
func (m *mechanism) home(now time.Time, x *axis) (refusal string) {
	if m.searching() == x {
		return "" // asked again: it is at it
	}
	if m.turning(now) {
		return "still turning"
	}
	x.homed = false
	x.toLose = 0
	m.search(now, x, HomeStarted, HomeFound, func(time.Time) { x.homed, x.lost, x.slip = true, 0, 0 })
	return ""
}

// mark begins the search for an axis's reference mark as home does, and keeps the zero as it is.
func (m *mechanism) mark(now time.Time, x *axis) (refusal string) {
	switch {
	case m.searching() == x:
		return "" // asked again: it is at it
	case m.turning(now):
		return "still turning"
	case !x.homed:
		return fmt.Sprintf("%s has no reference", x.cfg.Letter)
	}
	m.search(now, x, MarkStarted, MarkFound, nil)
	return ""
}

func (m *mechanism) search(now time.Time, x *axis, began, found Kind, done func(time.Time)) {
	x.seeking = true
	flank := 1.0
	if x.cfg.FallingFlank {
		flank = -1
	}
	home := x.sense() * (x.cfg.HomeDeg - x.cfg.ZeroDeg)
	below := home - flank*(RunUpDeg+x.cfg.BacklashDeg)
	at := now
	if _, motor := x.path.end(); (motor-below)*flank > 0 {
		d := math.Abs(motor - below)
		at = x.path.follow(at, below, newProfile(x.cfg.SpeedDegS/d, x.cfg.AccelDegS2/d))
	}
	turn := at
	_, motor := x.path.end()
	d := math.Abs(home - motor)
	at = x.path.follow(at, home, newProfile(x.cfg.SpeedDegS/2/d, x.cfg.AccelDegS2/d))
	j := &job{home: x, axes: []*axis{x}, from: map[string]Span{}}
	m.enter(j, began, found, now, at, func(at time.Time) {
		x.seeking = false
		if done != nil {
			done(at)
		}
	}, turn)
}

// stop slows everything down and forgets what was planned.
func (m *mechanism) stop(now time.Time) {
	within := time.Duration(0)
	for _, x := range m.axes {
		_, v := x.path.motor(now)
		within = max(within, time.Duration(math.Abs(v)/x.cfg.AccelDegS2*float64(time.Second)))
	}
	for _, x := range m.axes {
		t := within
		if !m.together {
			_, v := x.path.motor(now)
			t = time.Duration(math.Abs(v) / x.cfg.AccelDegS2 * float64(time.Second))
		}
		if turning, _ := x.path.moving(now); turning {
			x.path.slow(now, t)
		}
	}
	m.interrupt(now.Add(within), within)
}

// interrupt ends all jobs, at the time when everything has come to rest.
func (m *mechanism) interrupt(rest time.Time, within time.Duration) {
	for _, j := range m.jobs {
		if j.home != nil {
			j.home.seeking = false
		}
		j.begin.callOff()
		j.end.callOff()
		for _, look := range j.looks {
			look.callOff()
		}
		if !j.started {
			continue
		}
		report := func(at time.Time) {
			m.w.record(Record{At: at, Device: m.name, Kind: MoveStopped, Axes: j.spans(at), Stand: m.w.stand(at)})
		}
		if within > 0 {
			m.w.at(rest, nil, report)
		} else {
			report(rest)
		}
	}
	m.jobs = nil
}

// lose is a loss of power: the motors stop where they are.
func (m *mechanism) lose(now time.Time) {
	for _, x := range m.axes {
		if turning, _ := x.path.moving(now); turning {
			x.path.halt(now)
		}
	}
	m.interrupt(now, 0)
	for _, x := range m.axes {
		x.toLose, x.toStall = 0, nil
		if !x.cfg.KeepsZero {
			x.loseZero(now)
		}
	}
}
