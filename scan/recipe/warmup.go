package recipe

import (
	"fmt"
	"regexp"
	"strings"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// WarmUp waits, at rest, until sensors are steady. It is told in bench time.
type WarmUp struct {
	Steady []Steady // in the order of the file
	AtMost time.Duration
}

// Steady says how little a sensor's value may move over a time.
type Steady struct {
	Sensor drivers.DeviceName
	Over   time.Duration

	by         number // a share, or a difference of the sensor's kind
	nameAt, at strict.Place
}

var movesOver = regexp.MustCompile(`^(\S+ ?\S+) over (\S+ \S+)$`)

func readWarmUp(v strict.Value) *WarmUp {
	if !v.Given() {
		return nil
	}
	m := v.Map()
	steady, most := m.Need("steady"), m.Need("at_most")
	w := &WarmUp{AtMost: most.Duration(time.Minute, maxGiveUp)}
	s := steady.Map()
	entries := s.Entries()
	if s.Given() && len(entries) == 0 {
		steady.Fail("no sensors", "sensors, such as {pump_power: 0.5 % over 10 min}")
	}
	for _, e := range entries {
		one := Steady{Sensor: drivers.DeviceName(e.Name), nameAt: e.Key, at: e.Value.Place()}
		const want = `how little it may move, and over which time, such as "0.5 %% over 10 min"`
		if e.Value.TextLike(strings.ReplaceAll(want, "%%", "%")); !e.Value.Good() {
			continue
		}
		parts := e.Value.Match(movesOver)
		if parts == nil {
			e.Value.Failf(want)
			continue
		}
		n, ok := parseNumber(parts[1])
		over, err := unit.ParseDuration(parts[2])
		switch {
		case !ok || n.value.Sign() <= 0 || err != nil:
			e.Value.Failf(want)
		case over < time.Second || over > maxDwell:
			e.Value.Failf("a time from %s to %s", unit.Span(time.Second), unit.Span(maxDwell))
		case most.Good() && over > w.AtMost:
			e.Value.Failf("a time within the %s of at_most", unit.Span(w.AtMost))
		}
		one.by, one.Over = n, over
		w.Steady = append(w.Steady, one)
	}
	m.Done()
	return w
}

// plan works the warm-up out for one bench.
func (w *WarmUp) plan(f Facts) (*scan.WarmUp, []protocol.Finding) {
	if w == nil {
		return nil, nil
	}
	out := &scan.WarmUp{AtMost: w.AtMost}
	var findings []protocol.Finding
	for _, s := range w.Steady {
		sensor, found := f.sensor(s.Sensor, s.nameAt)
		if found != nil {
			findings = append(findings, found...)
			continue
		}
		one := scan.Steady{Sensor: s.Sensor, Over: s.Over}
		kind := kindOf(sensor.Unit)
		var err error
		switch {
		case kind != unit.Share && kindOf(s.by.unit) == unit.Share && kind == unit.Temperature:
			findings = append(findings, s.at.Finding("a share of a temperature", fmt.Sprintf("a difference, such as \"0.1 K over %s\": the zero of its scale is nobody's", unit.Written(s.Over))))
			continue
		case kind != unit.Share && kindOf(s.by.unit) == unit.Share:
			one.Relative, err = s.by.in("1")
		default:
			one.Absolute, err = s.by.difference(sensor.Unit)
		}
		if err != nil {
			findings = append(findings, s.at.Finding(s.by.String(), fmt.Sprintf("a share, or a difference in %s, the unit of %s", sensor.Unit, sensor.Name)))
			continue
		}
		out.Steady = append(out.Steady, one)
	}
	if findings != nil {
		return nil, findings
	}
	return out, nil
}

// parseNumber reads a value with its unit, as readNumber does.
func parseNumber(text string) (number, bool) {
	_, _, name, err := unit.ParseAny(text)
	if err != nil {
		return number{}, false
	}
	n, _, _ := strings.Cut(strings.TrimSpace(text), " ")
	return exact(strict.Quantity{Number: strings.TrimSuffix(n, "%"), Unit: name})
}

// kindOf is what a unit measures; empty where there is no such unit.
func kindOf(name string) unit.Kind {
	_, kind, _, err := unit.ParseAny("1 " + name)
	if err != nil {
		return ""
	}
	return kind
}
