package recipe

import (
	"fmt"
	"math/big"
	"slices"
	"strconv"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Earlier is a value that an earlier run on this bench measured, as a recipe asks for it.
type Earlier struct {
	Kind         scan.ResultKind
	Axis         drivers.AxisName   // of a peak or a zero
	Setting      drivers.DeviceName // of a delay
	From         string             // title of the run
	NotOlderThan time.Duration      // 0: however old
	Otherwise    scan.Then

	below                *number // nil: however uncertain
	at, whoseAt, belowAt strict.Place
}

// maxAge is older than any bench stays as it is.
const maxAge = 10 * 365 * 24 * time.Hour

// readEarlier reads {peak: AXIS, from: TITLE, …}; nil when there is something wrong with it.
func readEarlier(v strict.Value, isAngle bool) *Earlier {
	m := v.Map()
	peak, zero, delay := m.Opt("peak"), m.Opt("zero"), m.Opt("delay")
	from, older, below, otherwise := m.Need("from"), m.Opt("not_older_than"), m.Opt("u_below"), m.Opt("otherwise")
	e := &Earlier{From: from.Text(), at: v.Place(), belowAt: below.Place()}
	want := "one of: peak, zero, each with an axis"
	if !isAngle {
		want = "delay, with the setting"
	}
	sound, given := true, 0
	for _, k := range []struct {
		kind  scan.ResultKind
		whose strict.Value
	}{{scan.Peak, peak}, {scan.Zero, zero}, {scan.Delay, delay}} {
		if !k.whose.Given() {
			continue
		}
		given++
		e.Kind, e.whoseAt = k.kind, k.whose.Place()
		name := k.whose.Token()
		sound = sound && k.whose.Good()
		if k.kind == scan.Delay {
			e.Setting = drivers.DeviceName(name)
		} else {
			e.Axis = drivers.AxisName(name)
		}
	}
	switch {
	case !m.Given():
		return nil
	case given == 0:
		m.Fail("no result that the value is taken from", want)
		sound = false
	case given > 1:
		m.Fail("results of several kinds", want)
		sound = false
	case isAngle == delay.Given():
		m.Fail(fmt.Sprintf("the result of a %s", e.Kind), want)
		sound = false
	}
	e.NotOlderThan = older.Duration(time.Minute, maxAge, 0)
	if isAngle {
		below.Angle(0, unit.Turn/4)
	}
	if n, ok := readNumber(below, isAngle); ok {
		if n.value.Sign() <= 0 {
			below.Failf("a standard uncertainty above zero")
		}
		e.below = &n
	}
	e.Otherwise = scan.Then(otherwise.Choice([]string{string(scan.Hold), string(scan.Stop)}, string(scan.Hold)))
	m.Done()
	if !sound || !from.Good() || older.Given() && !older.Good() || below.Given() && !below.Good() || otherwise.Given() && !otherwise.Good() {
		return nil
	}
	return e
}

// stand is what an entry's values are added to, where that is a value from an earlier result.
type stand struct {
	angle  unit.Angle // of an axis
	value  float64    // of a setting, in its unit
	source *scan.EarlierSource
}

// open says whether where the entry stands is provisional: nobody goes there.
func (e Entry) open() bool { return e.stand != nil && e.stand.source == nil }

// resolved asks for the values from earlier results and returns the recipe with their places filled
// in. Where there is none, the place is where the model puts the arm, else where the axis parks,
// else the middle of its limits, so that a forecast has something to show.
func (r *Recipe) resolved(f Facts) (*Recipe, []scan.Earlier, []protocol.Finding) {
	q := *r
	q.Sweep = slices.Clone(r.Sweep)
	var asking []*Entry
	for i := range q.Sweep {
		e := &q.Sweep[i]
		if e.With != nil {
			with := *e.With
			e.With = &with
		}
		for _, e := range []*Entry{e, e.With} {
			if e != nil && e.Values.earlier != nil {
				asking = append(asking, e)
			}
		}
	}
	var earlier []scan.Earlier
	var findings []protocol.Finding
	for _, e := range asking {
		one, found := e.ask(f)
		if findings = append(findings, found...); found == nil {
			earlier = append(earlier, one)
		}
	}
	// The tilt first: where the arms see light depends on it.
	tilt := drivers.AxisName(tiltName(f))
	for _, tiltOnly := range []bool{true, false} {
		for _, e := range asking {
			switch {
			case !e.open() || tiltOnly != (e.Axis != "" && e.Axis == tilt):
			case e.Axis != "":
				e.stand.angle = q.provisional(*e, f)
			default:
				s, _ := f.setting(e.Setting, e.nameAt)
				e.stand.value = (s.Low + s.High) / 2
			}
		}
	}
	return &q, earlier, findings
}

// ask looks the entry's value up, and stands the entry there.
func (e *Entry) ask(f Facts) (scan.Earlier, []protocol.Finding) {
	want := e.Values.earlier
	e.stand = &stand{}
	ask := scan.EarlierAsk{Kind: want.Kind, Axis: want.Axis, Setting: want.Setting, From: want.From, NotOlderThan: want.NotOlderThan}
	if want.Axis != "" {
		axis, found := f.axis(want.Axis, want.whoseAt)
		switch {
		case found != nil:
			return scan.Earlier{}, found
		case want.Kind == scan.Zero && axis.Role != signalArm && axis.Role != idlerArm:
			return scan.Earlier{}, []protocol.Finding{want.whoseAt.Finding(fmt.Sprintf("the zero of %s, whose role is %s", axis.Name, axis.Role), "an arm, whose zero lies between the two sides of the ring")}
		}
		if want.below != nil {
			ask.Below = want.below.angle()
		}
	} else {
		s, found := f.setting(want.Setting, want.whoseAt)
		switch {
		case found != nil:
			return scan.Earlier{}, found
		case want.Setting != e.Setting:
			return scan.Earlier{}, []protocol.Finding{want.whoseAt.Finding(fmt.Sprintf("the delay of %s for %s", want.Setting, e.Setting), "the delay of "+string(e.Setting))}
		}
		if want.below != nil {
			var err error
			if ask.BelowValue, err = want.below.difference(s.Unit); err != nil {
				return scan.Earlier{}, []protocol.Finding{want.belowAt.Finding(want.below.String(), fmt.Sprintf("a value in %s, the unit of %s", s.Unit, s.Name))}
			}
		}
	}
	one := scan.Earlier{Ask: ask, Otherwise: want.Otherwise}
	if f.Earlier == nil {
		one.Missing = "no logbook is at hand to look it up in"
		return one, nil
	}
	source, err := f.Earlier(ask)
	if err != nil {
		one.Missing = err.Error()
		return one, nil
	}
	one.Source = &source
	*e.stand = stand{angle: source.Angle, value: source.Value, source: &source}
	return one, nil
}

// provisional is where an axis stands for the time being whose value is not measured yet.
func (r *Recipe) provisional(e Entry, f Facts) unit.Angle {
	axis, _ := f.axis(e.Axis, e.nameAt)
	if (axis.Role == signalArm || axis.Role == idlerArm) && f.Emission != nil {
		if deg, err := f.Emission(axis.Role, r.someTilt(f).Degrees()); err == nil {
			return roundPartner(deg)
		}
	}
	if axis.Park != nil {
		return *axis.Park
	}
	return axis.Low + (axis.High-axis.Low)/2
}

// someTilt is a tilt that the crystal has in this recipe: the sweep's first, else where it parks.
func (r *Recipe) someTilt(f Facts) unit.Angle {
	i := slices.IndexFunc(f.Axes, func(a scan.Axis) bool { return a.Role == crystalTilt })
	if i < 0 {
		return 0
	}
	if c, ok := r.column(f.Axes[i].Name); ok {
		return c.angles()[0]
	}
	if park := f.Axes[i].Park; park != nil {
		return *park
	}
	return 0
}

// from says which run the entry's place comes from, for a finding about it.
func (e Entry) from() string {
	if e.stand == nil || e.stand.source == nil {
		return ""
	}
	return fmt.Sprintf(", by the %s that run %s found", e.Values.earlier.Kind, e.stand.source.Run)
}

// difference returns a difference of two values in another unit of its kind: as in, but without the
// shift between two scales of temperature.
func (n number) difference(name string) (float64, error) {
	if n.value.Sign() == 0 {
		return 0, nil
	}
	x, err := n.in(name)
	if err != nil {
		return 0, err
	}
	zero, err := number{value: new(big.Rat), unit: n.unit}.in(name)
	if err != nil {
		return 0, err
	}
	return strconv.ParseFloat(strconv.FormatFloat(x-zero, 'g', 12, 64), 64)
}
