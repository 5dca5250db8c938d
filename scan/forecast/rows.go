package forecast

import (
	"math"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/estimate"
)

// rowMaker makes the rows that the estimate is asked about: readings that hold the counts to be
// expected. What rounding to whole counts takes from one reading of a channel it gives to the next,
// so that sums stay true.
type rowMaker struct {
	forecast *Forecast
	ask      *Ask
	few      bool // not too many to make
	rows     estimate.Rows

	carry     map[protocol.ReadingKind][]float64
	other     map[string]scan.Expected // at places that are none of the plan's points
	set       []scan.SettingTarget     // what the settings were last set to
	refinedAt time.Duration
}

// expected asks about a place that is none of the plan's points.
func (m *rowMaker) expected(axes []scan.AxisTarget, settings []scan.SettingTarget) (scan.Expected, bool) {
	if m.ask.Expect == nil {
		return scan.Expected{}, false
	}
	key := placeOf(scan.Point{Axes: axes, Settings: settings})
	x, known := m.other[key]
	if !known {
		var err error
		if x, err = m.ask.Expect(axes, settings); err != nil {
			x = scan.Expected{}
		}
		if m.other == nil {
			m.other = map[string]scan.Expected{}
		}
		if len(m.other) < MostEvaluations {
			m.other[key] = x
		}
	}
	return x, x.CountsHz != nil
}

// triggerHz is the rate that ends a dwell on counts.
func (m *rowMaker) triggerHz(point int, more *scan.Point) float64 {
	trigger := m.forecast.plan.Dwell.Trigger
	if more != nil {
		x, _ := m.expected(more.Axes, more.Settings)
		return x.CountsHz[trigger]
	}
	if m.forecast.rates == nil {
		return 0
	}
	got := make(row, len(m.forecast.rates.channels))
	m.forecast.rates.into(point, got)
	for k, c := range m.forecast.channels() {
		if c == trigger && !math.IsNaN(got[k]) {
			return got[k]
		}
	}
	return 0
}

// hz is what a reading's channels record each second.
func (m *rowMaker) hz(r *taken) []float64 {
	f := m.forecast
	channels := f.channels()
	out := make([]float64, len(channels))
	fill := func(by map[drivers.Channel]float64) {
		for k, c := range channels {
			out[k] = by[c]
		}
	}
	at := func() (axes []scan.AxisTarget) {
		for i, a := range f.bench.Axes {
			axes = append(axes, scan.AxisTarget{Axis: a.Name, Angle: r.at[i]})
		}
		return axes
	}
	switch {
	case r.kind == protocol.Dark:
		if f.rates != nil && f.rates.dark != nil {
			fill(f.rates.dark)
		}
	case r.kind == protocol.Light && r.more == nil:
		if f.rates != nil {
			got := make(row, len(f.rates.channels))
			f.rates.into(r.point, got)
			copy(out, got[:len(channels)])
		}
	default: // a background sets nothing
		x, _ := m.expected(at(), m.set)
		fill(x.CountsHz)
	}
	return out
}

func (m *rowMaker) add(r *taken) {
	f := m.forecast
	if !m.few || m.ask.Expect == nil || len(m.rows.Readings) >= 2*MostRows {
		m.few = false
		return
	}
	begins := m.ask.Begins
	gate := protocol.Seconds(r.gate)
	row := protocol.Reading{Kind: r.kind, Accepted: true, GateSet: gate, Gate: gate, Attempt: 1,
		StartedAt: protocol.Time{Time: begins.Add(r.started).UTC()}, EndedAt: protocol.Time{Time: begins.Add(r.ended).UTC()},
		Settings: []protocol.Setting{}, Sensors: []protocol.Sensor{}, Slices: []protocol.Slice{}}
	row.Sequence = int64(len(m.rows.Readings) + 1)
	for i, a := range f.bench.Axes {
		row.Angles = append(row.Angles, protocol.Angle{Axis: string(a.Name), Target: r.at[i], Before: r.at[i], After: r.at[i], Proof: string(a.Proof)})
	}
	for _, name := range f.bench.Sensors { // steady: what it shows drops out of every profile
		row.Sensors = append(row.Sensors, protocol.Sensor{Sensor: string(name), Minimum: 1, Mean: 1, Maximum: 1, Samples: 2})
	}
	settings := f.point(r.point).Settings
	switch r.kind {
	case protocol.Light:
		point, visit := r.point, r.visit
		row.Point, row.Visit = &point, &visit
	case protocol.Reference:
		places := f.plan.Reference.Places
		row.Reference = &protocol.ReferenceOf{Set: r.set, Place: r.place, Places: len(places), Arm: string(places[r.place].Arm), On: string(places[r.place].On)}
		settings = f.plan.Points[0].Settings
	default:
		settings = nil
	}
	if settings != nil {
		m.set = settings
	}
	for _, s := range settings {
		row.Settings = append(row.Settings, protocol.Setting{Name: string(s.Setting), Target: s.Value, Before: s.Value, After: s.Value, Unit: f.unitOf(s.Setting)})
	}
	hz := m.hz(r)
	if m.carry == nil {
		m.carry = map[protocol.ReadingKind][]float64{}
	}
	if m.carry[r.kind] == nil {
		m.carry[r.kind] = make([]float64, len(hz))
	}
	carry := m.carry[r.kind]
	for k, c := range f.channels() {
		n := hz[k]*r.gate.Seconds() + carry[k]
		if !(n > 0) {
			n = 0
		}
		whole := math.Round(n)
		carry[k] = n - whole
		row.Counts = append(row.Counts, protocol.Count{Channel: string(c), Counts: uint64(max(0, whole))})
	}
	m.rows.Readings = append(m.rows.Readings, row)
}
