package instruments

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"sort"
	"sync"
	"time"

	"gemel/sim/source"
	"gemel/sim/trouble"
)

// WorldConfig describes the world behind the instruments.
type WorldConfig struct {
	Seed  uint64
	Pace  int           // bench seconds in a real second; 0 is 1
	Model *source.Model // where counts come from

	// Still is the pose of everything that no instrument moves: pump power and wavelength,
	// crystal temperature, room light, angles without an axis. Open shares of shutters that no
	// instrument has are 1 whatever stands here.
	Still source.Pose

	PumpWander    Wander // relative
	CrystalWander Wander // in Cel

	Troubles trouble.List
	Ledger   *Ledger // nil: one in memory
}

// Wander is a slow sine about the still value.
type Wander struct {
	Amplitude float64
	Period    time.Duration // 0: none
}

func (w Wander) at(t time.Duration) float64 {
	if w.Period <= 0 {
		return 0
	}
	return w.Amplitude * math.Sin(2*math.Pi*t.Seconds()/w.Period.Seconds())
}

// The roles an axis can have in the world. Any other role has no effect on counts.
const (
	SignalArm     = "signal_arm"
	IdlerArm      = "idler_arm"
	CrystalTilt   = "crystal_tilt"
	PumpWaveplate = "pump_waveplate"
)

// World is the truth that the instruments share: where every axis and blade is, was and will be,
// how bright pump and lamp are. It may be used by several goroutines.
type World struct {
	mu     sync.Mutex
	cfg    WorldConfig
	origin time.Time // real and bench time agree here
	pace   time.Duration
	ledger *Ledger

	due     []*happening // in order
	actors  []*actor
	axes    []*axis
	arms    map[string]*axis // by role
	blades  map[string]*ramp // by what they stand in front of
	lampHz  *ramp
	pump    *ramp               // share of the still power
	warmer  *ramp               // Cel
	longer  *ramp               // nm
	latched map[string][]*latch // by arm
	sets    map[string]*Setting // by what they change
	open    map[*gate]bool
	moments []time.Time // scratch
}

// happening is something that takes place at a known time, unless it is called off before.
type happening struct {
	at    time.Time
	what  func(at time.Time)
	whose *actor // must wake for it; nil: nobody need be awake
	off   bool
}

// NewWorld begins a world now.
func NewWorld(cfg WorldConfig) (*World, error) {
	if cfg.Model == nil {
		return nil, fmt.Errorf("world: no source model; want one")
	}
	if cfg.Pace == 0 {
		cfg.Pace = 1
	}
	if cfg.Pace < 1 || cfg.Pace > 100 {
		return nil, fmt.Errorf("world: pace %d; want 1 to 100", cfg.Pace)
	}
	if cfg.Ledger == nil {
		cfg.Ledger = NewLedger(nil)
	}
	now := time.Now().UTC()
	w := &World{cfg: cfg, origin: now, pace: time.Duration(cfg.Pace), ledger: cfg.Ledger,
		arms: map[string]*axis{}, blades: map[string]*ramp{}, sets: map[string]*Setting{}, open: map[*gate]bool{},
		lampHz: newRamp(now, 0), pump: newRamp(now, 1), warmer: newRamp(now, 0), longer: newRamp(now, 0), latched: map[string][]*latch{}}
	w.mu.Lock()
	defer w.mu.Unlock()
	for _, t := range cfg.Troubles {
		w.happen(t)
	}
	return w, nil
}

// Ledger is where the world writes down what happens.
func (w *World) Ledger() *Ledger { return w.ledger }

// Now is the bench time.
func (w *World) Now() time.Time { return w.bench(time.Now()) }

// Origin is the instant at which the world began, in real and in bench time.
func (w *World) Origin() time.Time { return w.origin }

// Settle writes down everything that has ended by now, such as a gate nobody has read yet.
func (w *World) Settle() {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.settle(w.Now())
	for _, a := range w.actors {
		a.waited()
	}
}

// Let makes a world trouble happen: at its time, or at once if that has passed. Wire troubles
// must be in WorldConfig, since answers are counted from the beginning.
func (w *World) Let(t trouble.Trouble) error {
	if t.Wired() {
		return fmt.Errorf("world: %s is a wire trouble; want it in the world's configuration", t)
	}
	w.mu.Lock()
	defer w.mu.Unlock()
	w.happen(t)
	for _, a := range w.actors {
		a.poke()
	}
	return nil
}

// Strangers are the configured troubles that name a device or an axis the world does not have, and
// so never happen. Ask when all instruments are there.
func (w *World) Strangers() trouble.List {
	w.mu.Lock()
	defer w.mu.Unlock()
	names := map[string]bool{"": true}
	for _, a := range w.actors {
		names[a.name] = true
	}
	axes := map[string]bool{}
	for _, x := range w.axes {
		axes[x.cfg.Axis] = true
	}
	var l trouble.List
	for _, t := range w.cfg.Troubles {
		among := names
		switch {
		case t.Kind.OfAxis():
			among = axes
		case t.Kind == trouble.Latched:
			among = map[string]bool{SignalBlade: true, IdlerBlade: true}
		}
		if !among[t.Device] {
			l = append(l, t)
		}
	}
	return l
}

// TrueDeg is the true bench angle of an axis now.
func (w *World) TrueDeg(axis string) (float64, bool) {
	w.mu.Lock()
	defer w.mu.Unlock()
	for _, x := range w.axes {
		if x.cfg.Axis == axis {
			return x.path.axis(w.Now()), true
		}
	}
	return 0, false
}

// stand is where every axis truly is.
func (w *World) stand(at time.Time) map[string]float64 {
	all := make(map[string]float64, len(w.axes))
	for _, x := range w.axes {
		all[x.cfg.Axis] = x.path.axis(at)
	}
	return all
}

func (w *World) bench(real time.Time) time.Time { return w.origin.Add(real.Sub(w.origin) * w.pace) }

// real is the first instant at which bench time is at.
func (w *World) real(at time.Time) time.Time {
	return w.origin.Add((at.Sub(w.origin) + w.pace - 1) / w.pace)
}

// at lets something happen at a bench time.
func (w *World) at(at time.Time, whose *actor, what func(at time.Time)) *happening {
	h := &happening{at: at, what: what, whose: whose}
	i := sort.Search(len(w.due), func(i int) bool { return w.due[i].at.After(at) })
	w.due = slices.Insert(w.due, i, h)
	return h
}

func (h *happening) callOff() {
	if h != nil {
		h.off = true
	}
}

// settle lets everything happen that is due by now, in order, each at its own time.
func (w *World) settle(now time.Time) {
	for len(w.due) > 0 && !w.due[0].at.After(now) {
		h := w.due[0]
		w.due = w.due[1:]
		if !h.off {
			h.what(h.at)
		}
	}
}

// nextFor is when the actor must next be awake.
func (w *World) nextFor(a *actor) (time.Time, bool) {
	for _, h := range w.due {
		if h.whose == a && !h.off {
			return h.at, true
		}
	}
	return time.Time{}, false
}

// record writes into the ledger.
func (w *World) record(r Record) { w.ledger.add(r) }

// happen puts a world trouble on the list. Troubles of devices that are not on the bench are
// found when they fall due, since devices join after the world began.
func (w *World) happen(t trouble.Trouble) {
	if t.Wired() {
		return
	}
	at := w.origin.Add(t.At)
	if now := w.Now(); at.Before(now) {
		at = now
	}
	switch t.Kind {
	case trouble.Lamp:
		w.at(at, nil, func(at time.Time) {
			w.lampHz.turn(at, w.lampHz.value(at)+t.RateHz, 0)
			w.record(Record{At: at, Kind: LampOn, Text: t.String(), Value: t.RateHz})
		})
		w.at(at.Add(t.For), nil, func(at time.Time) {
			w.lampHz.turn(at, max(0, w.lampHz.value(at)-t.RateHz), 0)
			w.record(Record{At: at, Kind: LampOff, Text: t.String(), Value: t.RateHz})
		})
	case trouble.PumpDrift:
		w.at(at, nil, func(at time.Time) {
			w.pump.turn(at, max(0, w.pump.value(at)*(1+t.Share)), t.For)
			w.record(Record{At: at, Kind: Drifting, Text: t.String(), Value: t.Share})
		})
	case trouble.TemperatureDrift:
		w.at(at, nil, func(at time.Time) {
			w.warmer.turn(at, w.warmer.value(at)+t.ByCel, t.For)
			w.record(Record{At: at, Kind: Drifting, Text: t.String(), Value: t.ByCel})
		})
	case trouble.ModeHop:
		w.at(at, nil, func(at time.Time) {
			w.longer.turn(at, w.longer.value(at)+t.ByNm, 0)
			w.record(Record{At: at, Kind: Hopped, Text: t.String(), Value: t.ByNm})
		})
	case trouble.Latched:
		w.latched[t.Device] = append(w.latched[t.Device], &latch{trouble: t, from: at, to: at.Add(t.For)})
	case trouble.Slip, trouble.LostSteps, trouble.Stall:
		w.at(at, nil, func(at time.Time) {
			for _, x := range w.axes {
				if x.cfg.Axis == t.Device {
					x.upset(at, t)
				}
			}
		})
	default:
		for _, a := range w.actors {
			if a.name == t.Device {
				a.expect(t)
			}
		}
	}
}

// join makes a device part of the world.
func (w *World) join(a *actor) error {
	for _, b := range w.actors {
		if b.name == a.name {
			return fmt.Errorf("%s: there are two devices of this name; want one", a.name)
		}
	}
	a.w = w
	a.residue = int64((len(w.actors)*37 + 11) % instantModulus)
	a.wire = w.cfg.Troubles.Wire(a.name)
	w.actors = append(w.actors, a)
	for _, t := range w.cfg.Troubles {
		if t.Device == a.name && t.Kind.OfDevice() {
			a.expect(t)
		}
	}
	return nil
}

// rng returns the generator for one draw. It depends on nothing but seed, device and number, so
// that what happens elsewhere never shifts another gate's counts.
func (w *World) rng(device string, number uint64) *rand.Rand {
	b := make([]byte, 16, 16+len(device))
	binary.LittleEndian.PutUint64(b, w.cfg.Seed)
	binary.LittleEndian.PutUint64(b[8:], number)
	sum := sha256.Sum256(append(b, device...))
	return rand.New(rand.NewPCG(binary.LittleEndian.Uint64(sum[:8]), binary.LittleEndian.Uint64(sum[8:16])))
}

// pose is the truth at an instant.
func (w *World) pose(at time.Time) source.Pose {
	p := w.cfg.Still
	for role, x := range w.arms {
		deg := x.path.axis(at)
		switch role {
		case SignalArm:
			p.SignalDeg = deg
		case IdlerArm:
			p.IdlerDeg = deg
		case CrystalTilt:
			p.TiltDeg = deg
		case PumpWaveplate:
			p.WaveplateDeg = deg
		}
	}
	p.PumpW = w.pumpW(at)
	p.CrystalCel = w.crystalCel(at)
	p.PumpNm += w.longer.value(at)
	w.set(&p, at)
	p.PumpOpen, p.SignalOpen, p.IdlerOpen = w.openShare(PumpBlade, at), w.openShare(SignalBlade, at), w.openShare(IdlerBlade, at)
	lamp := w.lampHz.value(at)
	for i := range p.RoomHz {
		p.RoomHz[i] += lamp
		if v, ok := w.setTo(RoomLight, at); ok {
			p.RoomHz[i] += max(0, v) * w.sets[RoomLight].cfg.RoomHz[i]
		}
	}
	return p
}

func (w *World) pumpW(at time.Time) float64 {
	p := w.cfg.Still.PumpW
	if v, ok := w.setTo(PumpPower, at); ok {
		p = v
	}
	return max(0, p*w.pump.value(at)*(1+w.cfg.PumpWander.at(at.Sub(w.origin))))
}

func (w *World) crystalCel(at time.Time) float64 {
	c := w.cfg.Still.CrystalCel
	if v, ok := w.setTo(CrystalTemperature, at); ok {
		c = v
	}
	return c + w.warmer.value(at) + w.cfg.CrystalWander.at(at.Sub(w.origin))
}

// setTo is the true value of what a setting changes.
func (w *World) setTo(what string, at time.Time) (float64, bool) {
	s := w.sets[what]
	if s == nil {
		return 0, false
	}
	return s.value.value(at), true
}

// set puts what the settings change into a pose, all but power and temperature.
func (w *World) set(p *source.Pose, at time.Time) {
	if v, ok := w.setTo(Delay, at); ok {
		p.DelayS += v - w.sets[Delay].cfg.Neutral
	}
	for i, iris := range []string{SignalIris, IdlerIris} {
		if v, ok := w.setTo(iris, at); ok {
			p.RadiusMm[i] = v / 2 * 1000
		}
	}
	for i, bias := range []string{SignalBias, IdlerBias} {
		if v, ok := w.setTo(bias, at); ok {
			p.Gain[i] = w.sets[bias].cfg.PerVolt * (v - w.sets[bias].cfg.Neutral)
		}
	}
}

func (w *World) openShare(blade string, at time.Time) float64 {
	if r := w.blades[blade]; r != nil {
		return r.value(at)
	}
	return 1
}

func (w *World) ramps() []*ramp {
	rs := []*ramp{w.lampHz, w.pump, w.warmer, w.longer}
	for _, name := range []string{PumpBlade, SignalBlade, IdlerBlade} {
		if r := w.blades[name]; r != nil {
			rs = append(rs, r)
		}
	}
	for _, name := range Effects() {
		if s := w.sets[name]; s != nil {
			rs = append(rs, s.value)
		}
	}
	return rs
}

// The sampling of what changes continuously: pieces no longer than sampleEvery in which no arm
// turns further than sampleDeg, well inside the width of any peak; at least sampleLeast of them,
// and no more than sampleMost in one stretch.
const (
	sampleEvery = 250 * time.Millisecond
	sampleDeg   = 0.05
	sampleLeast = 8
	sampleMost  = 1024
)

// pieces cuts [from, to] at each change, and further where something changes continuously. Each
// piece is asked at its middle.
func (w *World) pieces(from, to time.Time, visit func(mid time.Time, lasts time.Duration)) {
	cuts := append(w.moments[:0], from)
	for _, x := range w.axes {
		cuts = x.path.cuts(from, to, cuts)
	}
	ramps := w.ramps()
	for _, r := range ramps {
		cuts = r.cuts(from, to, cuts)
	}
	for _, all := range w.latched {
		for _, l := range all {
			for _, t := range []time.Time{l.from, l.to} {
				if t.After(from) && t.Before(to) {
					cuts = append(cuts, t)
				}
			}
		}
	}
	cuts = append(cuts, to)
	slices.SortFunc(cuts, time.Time.Compare)
	cuts = slices.CompactFunc(cuts, time.Time.Equal)
	w.moments = cuts
	wandering := w.cfg.PumpWander.Period > 0 || w.cfg.CrystalWander.Period > 0
	for i := 1; i < len(cuts); i++ {
		u, v := cuts[i-1], cuts[i]
		mid := u.Add(v.Sub(u) / 2)
		changing, deg := wandering, 0.0
		for _, x := range w.arms {
			deg = max(deg, math.Abs(x.path.axis(v)-x.path.axis(u)))
		}
		changing = changing || deg > 0
		for _, r := range ramps {
			p := r.points[r.find(mid)]
			changing = changing || p.lasts > 0 && mid.Sub(p.at) < p.lasts
		}
		n := time.Duration(1)
		if changing {
			n = min(sampleMost, max(sampleLeast, (v.Sub(u)+sampleEvery-1)/sampleEvery, time.Duration(math.Ceil(deg/sampleDeg))))
		}
		for k := range n {
			a, b := u.Add(v.Sub(u)*k/n), u.Add(v.Sub(u)*(k+1)/n)
			visit(a.Add(b.Sub(a)/2), b.Sub(a))
		}
	}
}

// gate is one counting interval while the world has to remember what happens in it.
type gate struct {
	from time.Time
}

// look works out what truly happened between from and to, and the pieces to draw counts from.
func (w *World) look(from, to time.Time) (GateTruth, []source.Segment) {
	t := GateTruth{Opened: from, GateS: to.Sub(from).Seconds(), Axes: map[string]Range{}}
	seen := &Seen{}
	t.Seen = seen
	for _, x := range w.axes {
		low, high := x.path.reach(from, to)
		t.Axes[x.cfg.Axis] = Range{LowDeg: low, HighDeg: high}
	}
	var segments []source.Segment
	var last source.Pose
	var lastGives [2]float64
	var light source.Rates // what arrives, whatever a latched detector makes of it
	total := max(to.Sub(from).Seconds(), 1e-12)
	w.pieces(from, to, func(mid time.Time, lasts time.Duration) {
		p := w.pose(mid)
		gives := [2]float64{w.gives(SignalBlade, mid, p.SignalOpen), w.gives(IdlerBlade, mid, p.IdlerOpen)}
		if len(segments) == 0 || p != last || gives != lastGives {
			light = w.cfg.Model.Rates(p)
			counted := light
			counted.SignalHz *= gives[0]
			counted.IdlerHz *= gives[1]
			counted.PairsHz *= gives[0] * gives[1]
			segments = append(segments, source.Segment{Rates: counted})
		}
		last, lastGives = p, gives
		s := &segments[len(segments)-1]
		s.For += lasts
		share := lasts.Seconds() / total
		seen.PumpOpenShare += p.PumpOpen * share
		seen.PumpMeanW += p.PumpW * share
		lit := 0.0
		if w.lampHz.value(mid) > 0 {
			lit = share
		}
		seen.LampShare += lit
		seen.Signal.see(p.SignalOpen, share, lit, light.SignalHz)
		seen.Idler.see(p.IdlerOpen, share, lit, light.IdlerHz)
	})
	return t, segments
}

// latch is a time during which a detector gives next to nothing.
type latch struct {
	trouble  trouble.Trouble
	from, to time.Time
	met      bool
}

// latchedGives is what a latched detector gives of what it should.
const latchedGives = 1e-6

// gives is what an arm's detector gives of what it should. A latched one shows it first in light.
func (w *World) gives(arm string, at time.Time, open float64) float64 {
	for _, l := range w.latched[arm] {
		if at.Before(l.from) || !at.Before(l.to) {
			continue
		}
		if !l.met && open > 0 {
			l.met = true
			w.record(Record{At: at, Device: arm, Kind: Befell, Text: l.trouble.String()})
		}
		return latchedGives
	}
	return 1
}

func (l *LightTruth) see(open, share, lit, hz float64) {
	l.OpenShare += open * share
	if open > 0 {
		l.LampShare += lit
	}
	l.MeanHz += hz * share
	l.PeakHz = max(l.PeakHz, hz)
}

// forget drops history that no gate can ask for any more.
func (w *World) forget(now time.Time) {
	before := now
	for g := range w.open {
		if g.from.Before(before) {
			before = g.from
		}
	}
	for _, x := range w.axes {
		x.path.prune(before)
	}
	for _, r := range w.ramps() {
		r.prune(before)
	}
}
