package instruments

import (
	"math"
	"sort"
	"time"
)

// path is where one axis truly is, was and will be, in bench degrees. It is a list of phases of
// constant acceleration in each of which the motor turns one way only; between and after them it
// rests. Two positions matter: the motor's, and the axis's, which hangs behind by the play: the
// motor pushes the axis with one flank and has to cross the play before it pushes with the other.
type path struct {
	playDeg float64
	falling bool // the flank on which motor and axis agree: after rising motion, or after falling
	phases  []phase
}

type phase struct {
	at      time.Time
	lasts   time.Duration
	x, v, a float64 // motor at the start: degrees, deg/s, deg/s²
	axis    float64 // axis at the start
}

func newPath(at time.Time, x, playDeg float64, falling bool) *path {
	return &path{playDeg: playDeg, falling: falling, phases: []phase{{at: at, x: x, axis: x}}}
}

func (p phase) motor(at time.Time) (x, v float64) {
	t := min(at.Sub(p.at), p.lasts).Seconds()
	if t < 0 {
		t = 0
	}
	if at.Sub(p.at) >= p.lasts {
		return p.x + p.v*t + p.a*t*t/2, 0
	}
	return p.x + p.v*t + p.a*t*t/2, p.v + p.a*t
}

// drag is the play: the axis stays unless a flank of the motor meets it.
func (p *path) drag(axis, motor float64) float64 {
	if p.falling {
		return min(max(axis, motor-p.playDeg), motor)
	}
	return max(min(axis, motor+p.playDeg), motor)
}

func (p *path) find(at time.Time) int {
	i := sort.Search(len(p.phases), func(i int) bool { return p.phases[i].at.After(at) })
	return max(i-1, 0)
}

// motor returns the motor's position and speed.
func (p *path) motor(at time.Time) (x, v float64) { return p.phases[p.find(at)].motor(at) }

// axis returns the true angle.
func (p *path) axis(at time.Time) float64 {
	ph := p.phases[p.find(at)]
	m, _ := ph.motor(at)
	return p.drag(ph.axis, m)
}

// moving says whether motion is under way or planned, and whether the motor is accelerating.
func (p *path) moving(at time.Time) (turning, ramping bool) {
	last := p.phases[len(p.phases)-1]
	if at.Before(last.at) {
		turning = true
	}
	ph := p.phases[p.find(at)]
	return turning, turning && ph.a != 0 && at.Sub(ph.at) < ph.lasts
}

// end is when the last planned motion is over, and where the motor is then.
func (p *path) end() (time.Time, float64) {
	last := p.phases[len(p.phases)-1]
	return last.at, last.x
}

// add appends a phase. It must begin at or after the last one.
func (p *path) add(ph phase) {
	last := p.phases[len(p.phases)-1]
	m, _ := last.motor(ph.at)
	ph.axis = p.drag(last.axis, m)
	ph.axis = p.drag(ph.axis, ph.x) // differs only where the motor jumps
	if ph.at.Equal(last.at) {
		p.phases[len(p.phases)-1] = ph
		return
	}
	p.phases = append(p.phases, ph)
}

// cut forgets what was planned after at, and leaves the motor with the speed it has.
func (p *path) cut(at time.Time) (x, v float64) {
	x, v = p.motor(at)
	i := p.find(at)
	p.phases = p.phases[:i+1]
	p.phases[i].lasts = min(p.phases[i].lasts, at.Sub(p.phases[i].at))
	return x, v
}

// halt brings the motor to rest at once.
func (p *path) halt(at time.Time) float64 {
	x, _ := p.cut(at)
	p.add(phase{at: at, x: x})
	return x
}

// slow brings the motor to rest within a time, evenly. It returns where it will be.
func (p *path) slow(at time.Time, within time.Duration) float64 {
	x, v := p.cut(at)
	if v == 0 || within <= 0 {
		p.add(phase{at: at, x: x})
		return x
	}
	t := within.Seconds()
	p.add(phase{at: at, lasts: within, x: x, v: v, a: -v / t})
	x += v * t / 2
	p.add(phase{at: at.Add(within), x: x})
	return x
}

// shift moves motor and axis by deg at one instant, and everything planned after it.
func (p *path) shift(at time.Time, deg float64) {
	i := p.find(at)
	now := p.phases[i]
	x, v := now.motor(at)
	later := append([]phase(nil), p.phases[i+1:]...)
	rest := now.at.Add(now.lasts).Sub(at)
	axis := p.axis(at)
	p.cut(at)
	jump := phase{at: at, x: x + deg, axis: axis + deg}
	if rest > 0 {
		jump.lasts, jump.v, jump.a = rest, v, now.a
	}
	if jump.at.Equal(p.phases[i].at) {
		p.phases[i] = jump
	} else {
		p.phases = append(p.phases, jump)
	}
	for _, ph := range later {
		ph.x += deg
		p.add(ph)
	}
}

// prune forgets phases that were over before at.
func (p *path) prune(at time.Time) {
	if i := p.find(at); i > 64 { // copying costs more than a few old phases
		p.phases = append(p.phases[:0], p.phases[i:]...)
	}
}

// cuts appends the instants strictly inside (from, to) at which a phase begins or ends.
func (p *path) cuts(from, to time.Time, into []time.Time) []time.Time {
	for i := p.find(from); i < len(p.phases); i++ {
		ph := p.phases[i]
		if !ph.at.Before(to) {
			break
		}
		for _, t := range []time.Time{ph.at, ph.at.Add(ph.lasts)} {
			if t.After(from) && t.Before(to) {
				into = append(into, t)
			}
		}
	}
	return into
}

// reach is the least and greatest true angle within [from, to]. Within a phase the motor turns
// one way, so its ends are enough.
func (p *path) reach(from, to time.Time) (low, high float64) {
	low = p.axis(from)
	high = low
	for _, t := range append(p.cuts(from, to, nil), to) {
		x := p.axis(t)
		low, high = min(low, x), max(high, x)
	}
	return low, high
}

// profile is a trapezoid over a path of length 1: it speeds up evenly, turns evenly, slows evenly.
type profile struct {
	ramp, cruise time.Duration
	v, a         float64 // of the path, in 1/s and 1/s²
}

// newProfile works out the fastest trapezoid within a greatest speed and acceleration of the path.
func newProfile(v, a float64) profile {
	if v*v/a > 1 { // never reaches full speed
		v = math.Sqrt(a)
	}
	ramp := time.Duration(v / a * float64(time.Second))
	cruise := time.Duration((1/v - v/a) * float64(time.Second))
	ramp, cruise = max(ramp, 1), max(cruise, 0)
	// Whole nanoseconds, so that phases meet: the speed follows from them.
	v = 1 / (ramp + cruise).Seconds()
	return profile{ramp: ramp, cruise: cruise, v: v, a: v / ramp.Seconds()}
}

// follow makes the motor travel from where it will be at the end of its plan to x, along f.
func (p *path) follow(at time.Time, x float64, f profile) time.Time {
	_, from := p.end()
	d := x - from
	r := f.ramp.Seconds()
	p.add(phase{at: at, lasts: f.ramp, x: from, a: d * f.a})
	at = at.Add(f.ramp)
	x1 := from + d*f.a*r*r/2
	if f.cruise > 0 {
		p.add(phase{at: at, lasts: f.cruise, x: x1, v: d * f.v})
		at = at.Add(f.cruise)
	}
	p.add(phase{at: at, lasts: f.ramp, x: x - d*f.a*r*r/2, v: d * f.v, a: -d * f.a})
	at = at.Add(f.ramp)
	p.add(phase{at: at, x: x})
	return at
}

// ramp is a quantity that travels from one value to another: evenly, such as a shutter's blade, or
// ever more slowly, such as a temperature.
type ramp struct{ points []rampPoint }

type rampPoint struct {
	at       time.Time
	lasts    time.Duration
	from, to float64
	lag      time.Duration // time constant of an exponential approach; 0: evenly
}

// mostLags is when an exponential approach is over: what is left is a few parts in 10⁹ of the way.
const mostLags = 20

func newRamp(at time.Time, x float64) *ramp {
	return &ramp{points: []rampPoint{{at: at, from: x, to: x}}}
}

func (r *ramp) find(at time.Time) int {
	i := sort.Search(len(r.points), func(i int) bool { return r.points[i].at.After(at) })
	return max(i-1, 0)
}

func (r *ramp) value(at time.Time) float64 {
	p := r.points[r.find(at)]
	t := at.Sub(p.at)
	switch {
	case t < 0 || t >= p.lasts:
		return p.to
	case p.lag > 0:
		return p.to + (p.from-p.to)*math.Exp(-t.Seconds()/p.lag.Seconds())
	default:
		return p.from + (p.to-p.from)*float64(t)/float64(p.lasts)
	}
}

// turn sends the quantity to x from where it is, lasting as given.
func (r *ramp) turn(at time.Time, x float64, lasts time.Duration) {
	r.add(rampPoint{at: at, lasts: lasts, from: r.value(at), to: x})
}

// drift lets the quantity approach x exponentially, with a time constant.
func (r *ramp) drift(at time.Time, x float64, lag time.Duration) {
	r.add(rampPoint{at: at, lasts: mostLags * lag, from: r.value(at), to: x, lag: lag})
}

func (r *ramp) add(p rampPoint) {
	r.points = r.points[:r.find(p.at)+1]
	if r.points[len(r.points)-1].at.Equal(p.at) {
		r.points[len(r.points)-1] = p
		return
	}
	r.points = append(r.points, p)
}

func (r *ramp) prune(at time.Time) {
	if i := r.find(at); i > 64 {
		r.points = append(r.points[:0], r.points[i:]...)
	}
}

func (r *ramp) cuts(from, to time.Time, into []time.Time) []time.Time {
	for i := r.find(from); i < len(r.points); i++ {
		p := r.points[i]
		if !p.at.Before(to) {
			break
		}
		for _, t := range []time.Time{p.at, p.at.Add(p.lasts)} {
			if t.After(from) && t.Before(to) {
				into = append(into, t)
			}
		}
	}
	return into
}
