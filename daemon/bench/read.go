package bench

import (
	"encoding/hex"
	"regexp"
	"strconv"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/sim/source"
)

func (r *reader) bench(v strict.Value) {
	m := v.Map()
	r.file.Name = m.Need("name").Token()
	r.file.Title = m.Opt("title").Text("")
	m.Done()
}

func (r *reader) lines(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		device := m.Need("device")
		l := Line{
			Name: e.Name, Device: device.Text(), at: device.Place(),
			Baud: int(m.Opt("baud").Int(50, 4_000_000, 0)), DataBits: int(m.Opt("data_bits").Int(5, 8, 0)),
			Parity:   m.Opt("parity").Choice([]string{"none", "odd", "even"}, ""),
			EndsWith: terminator(m.Opt("ends_with")), AnswersEndWith: terminator(m.Opt("answers_end_with")), Echo: m.Opt("echo").Bool(),
			AnswerWithin: m.Opt("answer_within").Duration(time.Millisecond, time.Minute), LongestAnswer: m.Opt("longest_answer").Duration(time.Millisecond, 10*time.Minute),
			WriteWithin: m.Opt("write_within").Duration(time.Millisecond, time.Minute), QuietFor: m.Opt("quiet_for").Duration(time.Millisecond, time.Minute),
			OpenWithin: m.Opt("open_within").Duration(time.Millisecond, 10*time.Minute),
		}
		switch m.Opt("stop_bits").Number(1, 2, 1) {
		case 1:
			l.StopBits = "1"
		case 2:
			l.StopBits = "2"
		default:
			m.Opt("stop_bits").Failf("1 or 2")
		}
		if longest := m.Opt("longest_answer"); longest.Good() && l.LongestAnswer < l.AnswerWithin {
			longest.Failf("at least answer_within, %s", unit.Span(l.AnswerWithin))
		}
		serial := m.Has("baud") || m.Has("data_bits") || m.Has("parity") || m.Has("stop_bits")
		switch tcp := strings.HasPrefix(l.Device, "tcp://"); {
		case !device.Good():
		case tcp && !hostPort.MatchString(strings.TrimPrefix(l.Device, "tcp://")):
			device.Failf(`"tcp://host:port"`)
		case tcp && serial:
			device.Fail("a TCP line with the settings of a serial one", "neither baud, data_bits, parity nor stop_bits")
		case !tcp && l.Device != Simulated && !strings.Contains(l.Device, "/"):
			device.Failf(`a path that stays, such as "/dev/serial/by-id/…", "tcp://host:port" or "simulated"`)
		case !tcp && l.Device != Simulated:
			l.Device = near(r.file.Path, l.Device)
		}
		m.Done()
		r.file.Lines = append(r.file.Lines, l)
	}
}

var hostPort = regexp.MustCompile(`^([A-Za-z0-9._-]+|\[[0-9A-Fa-f:.]+\]):[0-9]{1,5}$`)

// terminator reads a line end, in which \r, \n, \t and \xHH stand for bytes.
func terminator(v strict.Value) []byte {
	s := v.Wire()
	if !v.Good() {
		return nil
	}
	escapes := regexp.MustCompile(`\\(x[0-9A-Fa-f]{2}|.)?`)
	var bad bool
	out := escapes.ReplaceAllStringFunc(s, func(e string) string {
		switch {
		case len(e) == 4:
			b, _ := hex.DecodeString(e[2:])
			return string(b)
		case e == `\r`:
			return "\r"
		case e == `\n`:
			return "\n"
		case e == `\t`:
			return "\t"
		case e == `\\`:
			return `\`
		}
		bad = true
		return ""
	})
	if bad || out == "" || len(out) > 4 {
		v.Failf(`one to four bytes, written with \r, \n, \t or \x1B`)
		return nil
	}
	return []byte(out)
}

// device reads what all instruments have in common but the dialect.
func device(name string, at strict.Place, m strict.Map) Device {
	line := m.Need("line")
	return Device{Name: drivers.DeviceName(name), Line: line.Token(), Identity: m.Opt("identity").Text(""), at: at, lineAt: line.Place()}
}

// done reports unknown keys, unless the dialect is unknown: then nobody can say which keys are its.
func done(m strict.Map, d Device) {
	if d.Dialect != "" {
		m.Done()
	}
}

func (r *reader) controllers(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		c := Controller{Device: device(e.Name, e.Key, m)}
		c.Dialect, c.stageReading = choose(m, func(d dialect) func(strict.Map) stageReading { return d.stage })
		motion := m.Need("motion")
		c.Together = motion.Choice([]string{"together", "each"}) == "together"
		if motion.Good() && c.Dialect == "gcode" && !c.Together {
			motion.Failf(`"together": words on one RS-274 line start and finish together`)
		}
		done(m, c.Device)
		r.file.Controllers = append(r.file.Controllers, c)
	}
}

// The bounds of angles and speeds of a bench. No arm turns further, and nothing on one faster.
const (
	farthest = 100 * unit.Turn
	fastest  = 10 * unit.Turn
)

func (r *reader) axes(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		controller, letter, home := m.Need("controller"), m.Opt("letter"), m.Opt("home")
		a := Axis{at: e.Key, controllerAt: controller.Place(), letterAt: letter.Place(), homeAt: home.Place()}
		a.Name = drivers.AxisName(e.Name)
		a.Role = m.Need("role").Choice([]string{"signal_arm", "idler_arm", "crystal_tilt", "pump_waveplate", "other"})
		a.Axis.Controller = drivers.DeviceName(controller.Token())
		a.Letter = letter.Text("")
		if letter.Good() && !regexp.MustCompile(`^[A-Z]$`).MatchString(a.Letter) {
			letter.Failf("one capital letter")
		}
		address := m.Opt("address")
		a.Address = address.Text("")
		if m.Given() && !letter.Given() && !address.Given() {
			m.Fail("neither letter nor address", "what the controller calls this axis")
		}
		a.Low, a.High = limits(m.Need("limits"))
		a.Tolerance = m.Need("tolerance").Angle(unit.MicroArcsecond, unit.Turn)
		backlash, approach := m.Opt("backlash"), m.Opt("approach")
		a.Backlash = backlash.Angle(0, unit.Turn)
		a.Rising = approach.Choice([]string{"rising", "falling"}, "rising") == "rising"
		if a.Backlash > 0 && !approach.Given() && m.Given() {
			m.Need("approach")
		}
		a.Settle = m.Opt("settle").Duration(0, time.Hour)
		a.Speed = m.Need("speed").AnglePer("/s", unit.MicroArcsecond, fastest)
		a.Acceleration = m.Opt("acceleration").AnglePer("/s2", unit.MicroArcsecond, 100*fastest)
		a.SpeedDegS, a.AccelDegS2 = a.Speed.Degrees(), a.Acceleration.Degrees()
		if park := m.Opt("park"); park.Given() {
			p := park.Angle(-farthest, farthest)
			a.Park = &p
			if park.Good() && a.High > a.Low && !a.Limits(p) {
				park.Failf("a place within the limits, %s to %s", a.Low, a.High)
			}
		}
		a.Mount.Zero = m.Opt("zero").Angle(-farthest, farthest)
		a.Mount.Sense = 1
		if sense := m.Opt("sense"); sense.Int(-1, 1, 1) == -1 {
			a.Mount.Sense = -1
		} else if sense.Good() && sense.Int(-1, 1) == 0 {
			sense.Failf("1 or -1")
		}
		a.StepsPerTurn = m.Opt("steps_per_turn").Number(1, 1e9, 0)
		a.Gear = m.Opt("gear").Number(1e-6, 1e6, 0)
		if m.Has("gear") != m.Has("steps_per_turn") && m.Given() {
			m.Fail("one of steps_per_turn and gear", "both or neither")
		}
		a.Proof = drivers.Proved
		from, verify := m.Need("position_from"), m.Opt("verify_home")
		if from.Choice([]string{"encoder", "steps"}) == "steps" {
			a.Proof = drivers.Reported
			if m.Given() && !verify.Given() {
				from.Fail(`"steps" without verify_home`, `verify_home: {every: 30 min, tolerance: …} beside it, or "encoder": where a position is only counted, a slip does not show until the zero is looked for`)
			}
		}
		readVerify(verify, &a)
		a.Error = m.Opt("error").Angle(0, unit.Turn)
		readHome(home, &a)
		m.Done()
		r.file.Axes = append(r.file.Axes, a)
	}
}

// longestUnverified is the longest between two looks at a reference mark.
const longestUnverified = 7 * 24 * time.Hour

func readVerify(v strict.Value, a *Axis) {
	a.verifyAt = v.Place()
	if !v.Given() {
		return
	}
	m := v.Map()
	a.Verify = &scan.Verify{Every: m.Opt("every").Duration(time.Minute, longestUnverified), Tolerance: m.Need("tolerance").Angle(unit.MicroArcsecond, unit.Turn)}
	m.Done()
}

// limits reads [low, high].
func limits(v strict.Value) (low, high unit.Angle) {
	items := v.List(2, 2)
	if len(items) < 2 {
		return 0, 0
	}
	low, high = items[0].Angle(-farthest, farthest), items[1].Angle(-farthest, farthest)
	if items[0].Good() && items[1].Good() && low >= high {
		v.Fail("["+low.String()+", "+high.String()+"]", "the lower limit first")
	}
	return low, high
}

func readHome(v strict.Value, a *Axis) {
	if !v.Given() {
		return
	}
	m := v.Map()
	a.Unattended = m.Opt("unattended").Bool()
	order, together := m.Opt("order"), m.Opt("together")
	a.HomeOrder = int(order.Int(1, 99, 0))
	a.AllAtOnce = together.Bool()
	if a.Unattended && !order.Given() {
		m.Need("order")
	}
	at, runUp := m.Opt("at"), m.Opt("run_up")
	if at.Given() {
		deg := at.Angle(-farthest, farthest)
		a.HomesAt = &deg
		if at.Good() && a.High > a.Low && !a.Limits(deg) {
			at.Failf("a place within the limits, %s to %s", a.Low, a.High)
		}
	}
	if runUp.Given() {
		deg := runUp.Angle(0, unit.Turn)
		a.HomeRunUp = &deg
		if !at.Given() {
			m.Need("at")
		}
	}
	m.Done()
}

func (r *reader) counters(v strict.Value) {
	entries := v.Map().Entries()
	for i, e := range entries {
		if i > 0 {
			e.Value.Fail("a second counter", "one counter: counts that are compared must be latched together")
			continue
		}
		r.file.Counter = r.counter(e)
	}
	if v.IsMap() && len(entries) == 0 && v.Good() {
		v.Fail("no counter", "one")
	}
}

func (r *reader) counter(e strict.Entry) Counter {
	m := e.Value.Map()
	c := Counter{Device: device(e.Name, e.Key, m), Coincidences: map[drivers.Channel][2]drivers.Channel{}}
	c.Dialect, c.make = choose(m, func(d dialect) func(strict.Map) counterMaker { return d.counter })
	known := map[drivers.Channel]bool{}
	for _, item := range m.Need("channels").List(1, 64) {
		name := drivers.Channel(item.Token())
		if item.Good() && known[name] {
			item.Failf("each channel once")
		}
		known[name] = true
		c.Channels = append(c.Channels, name)
	}
	one := func(v strict.Value) drivers.Channel {
		name := drivers.Channel(v.Token())
		if v.Good() && !known[name] {
			v.Failf("one of the channels %v", c.Channels)
		}
		return name
	}
	if pairs := m.Opt("coincidences"); pairs.Given() {
		for _, p := range pairs.Map().Entries() {
			name := drivers.Channel(p.Name)
			if !known[name] {
				p.Value.Fail("a coincidence channel that is not among the channels", "one of the channels "+join(c.Channels))
				continue
			}
			items := p.Value.List(2, 2)
			if len(items) == 2 {
				c.Coincidences[name] = [2]drivers.Channel{one(items[0]), one(items[1])}
				if pair := c.Coincidences[name]; pair[0] == pair[1] || pair[0] == name || pair[1] == name {
					p.Value.Fail("a channel in coincidence with itself", "two other channels")
				}
			}
		}
		c.Logic = m.Need("logic").Choice([]string{source.EveryPair, source.OnePerHerald})
		w := m.Need("window").Map()
		c.Window.Value = w.Need("full").Quantity(unit.Time, 1e-12, 1e-3)
		c.Window.U = w.Opt("u").Quantity(unit.Time, 0, 1e-3)
		c.Window.From = w.Opt("from").Text("")
		w.Done()
		c.Capture = m.Opt("capture").Measured(unit.Share, 0.01, 1)
		c.Jitter = m.Opt("jitter").Measured(unit.Time, 0, 1e-3)
		for _, item := range m.Opt("displaced").List(1, 16) {
			dm := item.Map()
			d := Displaced{Channel: one(dm.Need("channel")), Windows: int(dm.Need("windows").Int(1, 1000))}
			if of := dm.Need("of").List(2, 2); len(of) == 2 {
				d.Of = [2]drivers.Channel{one(of[0]), one(of[1])}
			}
			dm.Done()
			c.Displaced = append(c.Displaced, d)
		}
		if latched := m.Need("latched"); !latched.Bool() && latched.Good() {
			latched.Failf("true: no efficiency follows from singles and coincidences that were not counted in the same interval")
		}
	}
	if tag := m.Opt("gate_tag"); tag.Given() {
		c.Tag = one(tag)
		if _, pair := c.Coincidences[c.Tag]; pair {
			tag.Failf("a channel that counts gates, not a coincidence channel")
		}
	}
	c.Bits = int(m.Opt("bits").Int(8, 53, 32))
	if items := m.Need("gate").List(2, 2); len(items) == 2 {
		c.GateMin, c.GateMax = items[0].Duration(time.Microsecond, 24*time.Hour), items[1].Duration(time.Microsecond, 24*time.Hour)
		if items[0].Good() && items[1].Good() && c.GateMin >= c.GateMax {
			m.Opt("gate").Fail("the longest gate not above the shortest", "the shortest gate first")
		}
	}
	done(m, c.Device)
	return c
}

func join(names []drivers.Channel) string {
	s := make([]string, len(names))
	for i, n := range names {
		s[i] = string(n)
	}
	return strings.Join(s, ", ")
}

// defaultWatch is the longest gate without a look at a light that may trip.
const defaultWatch = 2 * time.Second

func (r *reader) detectors(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		channel := m.Need("channel")
		d := Detector{
			Name: e.Name, Channel: drivers.Channel(channel.Token()), at: e.Key, channelAt: channel.Place(),
			DeadTime:   m.Opt("dead_time").Measured(unit.Time, 0, 1),
			Afterpulse: m.Opt("afterpulsing").Measured(unit.Share, 0, 0.5),
			Dark:       m.Opt("dark_rate").Measured(unit.Rate, 0, 1e9),
			Expected:   m.Opt("expected_efficiency").Measured(unit.Share, 0.0001, 1),
			RoomHz:     m.Opt("expected_room_light").Quantity(unit.Rate, 0, 1e9),
			TripHz:     m.Opt("trip_rate").Quantity(unit.Rate, 1, 1e12), FloorHz: m.Opt("floor").Quantity(unit.Rate, 0, 1e9),
			Glance: m.Opt("glance").Duration(time.Microsecond, time.Minute),
		}
		for _, item := range m.Opt("settings").List(1, 32) {
			d.Settings = append(d.Settings, item.Text())
		}
		model := m.Opt("model")
		d.Model = model.Choice([]string{source.NonParalysable, source.Paralysable}, "")
		if d.DeadTime.Value > 0 && !model.Given() {
			m.Need("model")
		}
		if d.TripHz > 0 && d.FloorHz >= d.TripHz {
			m.Opt("floor").Failf("less than the trip rate")
		}
		if d.TripHz > 0 && !m.Has("glance") {
			m.Need("glance")
		}
		watch := m.Opt("watch")
		d.Watch = watch.Duration(10*time.Millisecond, time.Hour, 0)
		switch {
		case d.TripHz == 0 && watch.Given():
			watch.Fail("a watch without a trip rate to judge the light by", "trip_rate beside it, or no such key")
		case d.TripHz > 0 && d.Watch == 0:
			d.Watch = defaultWatch
		}
		if p := m.Opt("protect"); p.Given() {
			pm := p.Map()
			by := pm.Need("by")
			d.ProtectBy, d.protectAt = drivers.DeviceName(by.Token()), by.Place()
			d.Ready = pm.Opt("settle").Duration(0, time.Hour)
			pm.Later("confirm")
			pm.Done()
		}
		m.Refuse("a detector gated by heralds: not supported", "a free-running detector: with gates, dead time and accidentals follow other laws than those this program corrects by", "gated_by", "gated")
		m.Done()
		r.file.Detectors = append(r.file.Detectors, d)
	}
}

func (r *reader) shutters(pump, protectors strict.Value) {
	if pump.Given() {
		s := shutter("shutter", pump.Place(), pump.Map())
		r.file.Pump = &s
	}
	for _, e := range protectors.Map().Entries() {
		r.file.Protectors = append(r.file.Protectors, shutter(e.Name, e.Key, e.Value.Map()))
	}
}

func shutter(name string, at strict.Place, m strict.Map) Shutter {
	s := Shutter{Device: device(name, at, m)}
	s.Dialect, s.make = choose(m, func(d dialect) func(strict.Map) shutterMaker { return d.shutter })
	s.SettleOpen, s.SettleClosed = m.Need("settle_open").Duration(0, time.Minute), m.Need("settle_closed").Duration(0, time.Minute)
	done(m, s.Device)
	return s
}

func (r *reader) sensors(v strict.Value) {
	for _, e := range v.Map().Entries() {
		m := e.Value.Map()
		s := Sensor{Device: device(e.Name, e.Key, m)}
		s.Dialect, s.make = choose(m, func(d dialect) func(strict.Map) sensorMaker { return d.sensor })
		s.Kind = unit.Kind(m.Need("kind").Choice([]string{string(unit.Power), string(unit.Temperature)}))
		u := m.Need("unit")
		name, kind := u.Unit()
		s.Unit = name
		if u.Good() && s.Kind != "" && kind != s.Kind {
			u.Failf("a unit of %s: %s", s.Kind, strings.Join(unit.Units(s.Kind), ", "))
		}
		m.Later("period")
		done(m, s.Device)
		r.file.Sensors = append(r.file.Sensors, s)
	}
}

// diskRoom is an amount of disk.
var diskRoom = regexp.MustCompile(`^([1-9][0-9]{0,5}) (MB|GB)$`)

// readRoom returns bytes.
func readRoom(v strict.Value) int64 {
	if v.Text(); !v.Good() {
		return 0
	}
	n := v.Match(diskRoom)
	if n == nil {
		v.Failf("whole MB or GB, such as \"64 MB\"")
		return 0
	}
	bytes, _ := strconv.ParseInt(n[1], 10, 64)
	if bytes *= 1e6; n[2] == "GB" {
		bytes *= 1e3
	}
	return bytes
}

// service reads what concerns the program around the bench.
func (r *reader) service(m strict.Map) {
	if v := m.Opt("logbook"); v.Given() {
		l := v.Map()
		folder, room := l.Opt("folder"), l.Opt("least_room")
		if folder.Given() || !room.Given() {
			r.file.LogbookFolder = near(r.file.Path, l.Need("folder").Text(""))
		}
		if room.Given() {
			r.file.LeastRoom = readRoom(room)
		}
		l.Done()
	}
	if v := m.Opt("nats"); v.Given() {
		n := v.Map()
		listen := n.Opt("listen")
		r.file.NATSListen = listen.Text("")
		if listen.Good() && !hostPort.MatchString(r.file.NATSListen) {
			listen.Failf("host:port, such as \"127.0.0.1:4222\"")
		}
		n.Later("url", "credentials", "tls", "replicas", "limits")
		n.Done()
	}
	otherwise := AfterRestartHold
	if r.file.Simulated() {
		otherwise = AfterRestartResume
	}
	r.file.AfterRestart = m.Opt("after_restart").Choice([]string{AfterRestartHold, AfterRestartResume}, otherwise)
}
