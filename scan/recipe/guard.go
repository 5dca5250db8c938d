package recipe

import (
	"fmt"
	"time"

	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/strict"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Guard is a condition for counting as the recipe says it. Exactly one of Watch, Rate, DarkRate and
// ReferenceAge is set.
type Guard struct {
	Watch        drivers.DeviceName
	Rate         string        // as written: a channel or a detector
	DarkRate     string        // the same
	ReferenceAge time.Duration // of the last good reference
	Otherwise    scan.Then
	GiveUpAfter  time.Duration // 0: the trouble's bound

	low, high         number
	at, lowAt, highAt strict.Place // at: what is looked at
}

// maxGuards and maxGiveUp are far beyond use.
const (
	maxGuards    = 32
	maxGuardedHz = 1e9
	maxGiveUp    = 7 * 24 * time.Hour
)

func (r *Recipe) readGuards(v strict.Value) {
	for _, item := range v.List(1, maxGuards) {
		m := item.Map()
		watch, rate, darkRate, age := m.Opt("watch"), m.Opt("rate"), m.Opt("dark_rate"), m.Opt("reference_age")
		within, otherwise, giveUp := m.Opt("within"), m.Opt("otherwise"), m.Opt("give_up_after")
		g := Guard{Watch: drivers.DeviceName(watch.Token()), Rate: rate.Token(), DarkRate: darkRate.Token(), ReferenceAge: age.Duration(time.Minute, maxGiveUp, 0)}
		given := 0
		for _, what := range []strict.Value{watch, rate, darkRate, age} {
			if what.Given() {
				given++
				g.at = what.Place()
			}
		}
		const kinds = "one of: watch, rate, dark_rate, reference_age"
		switch {
		case !m.Given():
		case given == 0:
			m.Fail("a guard of nothing", kinds)
		case given > 1:
			m.Fail("several things in one guard", kinds)
		case age.Given() && within.Given():
			within.Fail("bounds beside an age", "reference_age alone: a reference may be so old")
		case !age.Given():
			m.Need("within")
		}
		switch {
		case darkRate.Given() && r.Dark == nil:
			darkRate.Fail("a guard of dark rates without darks", `a key "dark", or "rate", which is of the light`)
		case age.Given() && r.Reference == nil:
			age.Fail("a guard of the references' age without references", `a key "reference"`)
		case age.Good() && r.Reference.Every == 0 && r.Reference.EveryPoints == 0:
			age.Fail("an age of references that are not repeated", `"every" in the key "reference"`)
		case age.Good() && r.Reference.Every >= g.ReferenceAge:
			age.Failf("more than the %s between two references, or every one would be too old", unit.Span(r.Reference.Every))
		}
		if ends := within.List(2, 2); len(ends) == 2 {
			if rate.Given() || darkRate.Given() { // whatever the bench: both are counts per second
				for _, end := range ends {
					end.Quantity(unit.Rate, 0, maxGuardedHz)
				}
			}
			g.low, _ = readNumber(ends[0], false)
			g.high, _ = readNumber(ends[1], false)
			g.lowAt, g.highAt = ends[0].Place(), ends[1].Place()
		}
		g.Otherwise = scan.Then(otherwise.Choice([]string{string(scan.Hold), string(scan.Skip), string(scan.Stop)}, string(scan.Hold)))
		if otherwise.Good() && age.Given() && g.Otherwise == scan.Skip {
			otherwise.Fail(`"skip" for the age of a reference`, `"hold" or "stop": the next point would find it no younger`)
		}
		g.GiveUpAfter = giveUp.Duration(time.Minute, maxGiveUp, 0)
		if giveUp.Good() && g.Otherwise != scan.Hold {
			giveUp.Fail(fmt.Sprintf("a time to give up beside %q", g.Otherwise), `"otherwise: hold", which waits for the guard to be met again, or no such key`)
		}
		m.Done()
		r.Guards = append(r.Guards, g)
	}
}

// guards works the guards out for one bench, named by what they look at and numbered where they
// would have the same name.
func (r *Recipe) guards(f Facts) (guards []scan.Guard, findings []protocol.Finding) {
	taken := map[string]bool{}
	for _, g := range r.Guards {
		out := scan.Guard{ReferenceAge: g.ReferenceAge, Otherwise: g.Otherwise, GiveUpAfter: g.GiveUpAfter}
		name, in, whose := "reference_age", "", ""
		var found []protocol.Finding
		switch {
		case g.Watch != "":
			var sensor Sensor
			sensor, found = f.sensor(g.Watch, g.at)
			out.Sensor = g.Watch
			name, in, whose = string(g.Watch), sensor.Unit, "the unit of "+string(sensor.Name)
		case g.Rate != "":
			out.Rate, _, found = f.channel(g.Rate, g.at)
			name, in, whose = "rate "+g.Rate, "Hz", "counts per second"
		case g.DarkRate != "":
			out.DarkRate, _, found = f.channel(g.DarkRate, g.at)
			name, in, whose = "dark_rate "+g.DarkRate, "Hz", "counts per second"
		}
		if findings = append(findings, found...); found != nil {
			continue
		}
		if in != "" {
			out.Low, out.High, found = g.bounds(in, whose)
			findings = append(findings, found...)
		}
		out.Name = name
		for n := 2; taken[out.Name]; n++ {
			out.Name = fmt.Sprintf("%s %d", name, n)
		}
		taken[out.Name] = true
		guards = append(guards, out)
	}
	return guards, findings
}

func (g Guard) bounds(in, whose string) (low, high float64, findings []protocol.Finding) {
	low, lowErr := g.low.in(in)
	high, highErr := g.high.in(in)
	want := fmt.Sprintf("a value in %s, %s", in, whose)
	switch {
	case lowErr != nil:
		findings = append(findings, g.lowAt.Finding(g.low.String(), want))
	case highErr != nil:
		findings = append(findings, g.highAt.Finding(g.high.String(), want))
	case low >= high:
		findings = append(findings, g.highAt.Finding(fmt.Sprintf("%s as upper bound beside a lower one of %s", g.high, g.low), "the lower bound first, then a greater one"))
	}
	return low, high, findings
}
