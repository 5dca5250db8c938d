package recipe

import (
	"fmt"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/scan"
)

// Guard is a condition for counting as the recipe says it.
type Guard struct {
	Watch       drivers.DeviceName
	Otherwise   scan.Then
	GiveUpAfter time.Duration // 0: the trouble's bound

	low, high              number
	watchAt, lowAt, highAt strict.Place
}

// maxGuards and maxGiveUp are far beyond use.
const (
	maxGuards = 32
	maxGiveUp = 7 * 24 * time.Hour
)

func readGuards(v strict.Value) []Guard {
	var guards []Guard
	for _, item := range v.List(1, maxGuards) {
		m := item.Map()
		watch, within, otherwise, giveUp := m.Need("watch"), m.Need("within"), m.Opt("otherwise"), m.Opt("give_up_after")
		g := Guard{Watch: drivers.DeviceName(watch.Token()), watchAt: watch.Place()}
		if ends := within.List(2, 2); len(ends) == 2 {
			g.low, _ = readNumber(ends[0], false)
			g.high, _ = readNumber(ends[1], false)
			g.lowAt, g.highAt = ends[0].Place(), ends[1].Place()
		}
		g.Otherwise = scan.Then(otherwise.Choice([]string{string(scan.Hold), string(scan.Skip), string(scan.Stop)}, string(scan.Hold)))
		g.GiveUpAfter = giveUp.Duration(time.Minute, maxGiveUp, 0)
		if giveUp.Good() && g.Otherwise != scan.Hold {
			giveUp.Fail(fmt.Sprintf("a time to give up beside %q", g.Otherwise), `"otherwise: hold", which waits for the guard to be met again, or no such key`)
		}
		m.Done()
		guards = append(guards, g)
	}
	return guards
}

// guards works the guards out for one bench, named by their sensors and numbered where one sensor
// has several.
func (r *Recipe) guards(f Facts) (guards []scan.Guard, findings []protocol.Finding) {
	seen := map[drivers.DeviceName]int{}
	for _, g := range r.Guards {
		sensor, found := f.sensor(g.Watch, g.watchAt)
		if found != nil {
			findings = append(findings, found...)
			continue
		}
		low, lowErr := g.low.in(sensor.Unit)
		high, highErr := g.high.in(sensor.Unit)
		want := fmt.Sprintf("a value in %s, the unit of %s", sensor.Unit, sensor.Name)
		switch {
		case lowErr != nil:
			findings = append(findings, g.lowAt.Finding(g.low.String(), want))
		case highErr != nil:
			findings = append(findings, g.highAt.Finding(g.high.String(), want))
		case low >= high:
			findings = append(findings, g.highAt.Finding(fmt.Sprintf("%s as upper bound beside a lower one of %s", g.high, g.low), "the lower bound first, then a greater one"))
		}
		name := string(g.Watch)
		if seen[g.Watch]++; seen[g.Watch] > 1 {
			name = fmt.Sprintf("%s %d", name, seen[g.Watch])
		}
		guards = append(guards, scan.Guard{Name: name, Sensor: g.Watch, Low: low, High: high, Otherwise: g.Otherwise, GiveUpAfter: g.GiveUpAfter})
	}
	return guards, findings
}
