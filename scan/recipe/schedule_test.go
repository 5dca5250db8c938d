package recipe

import (
	"fmt"
	"reflect"
	"strings"
	"testing"
	"time"
	_ "time/tzdata" // so that the tables hold on a machine without a zone database

	"gemel/scan"
)

func zone(t *testing.T, name string) *time.Location {
	t.Helper()
	loc, err := time.LoadLocation(name)
	if err != nil {
		t.Fatal(err)
	}
	return loc
}

func clock(t *testing.T, text string) *Clock {
	t.Helper()
	if text == "" {
		return nil
	}
	at, err := time.Parse("15:04", text)
	if err != nil {
		t.Fatal(err)
	}
	return &Clock{at.Hour(), at.Minute()}
}

// TestTimesOfTheDayBecomeInstants: wanted instants are UTC, worked out by hand from the rules of
// the zones (Europe on the last Sundays of March and October at 01:00 UTC, the United States on the
// second Sunday of March and the first of November at 02:00 local, New South Wales on the first
// Sundays of October and April at 02:00 standard time, Lord Howe by half an hour).
func TestTimesOfTheDayBecomeInstants(t *testing.T) {
	const berlin, newYork, sydney, lordHowe, apia, utc = "Europe/Berlin", "America/New_York", "Australia/Sydney", "Australia/Lord_Howe", "Pacific/Apia", "UTC"
	for _, c := range []struct {
		name, zone, accepted string // local
		notBefore, finishBy  string
		from, to             string // UTC; empty: none
	}{
		{"nothing asked for", utc, "2026-02-03 09:00", "", "", "", ""},
		{"tonight", utc, "2026-02-03 09:00", "22:00", "06:30", "2026-02-03 22:00", "2026-02-04 06:30"},
		{"accepted within the night it begins at once", utc, "2026-02-03 23:10", "22:00", "06:30", "2026-02-03 22:00", "2026-02-04 06:30"},
		{"accepted after midnight", utc, "2026-02-04 03:00", "22:00", "06:30", "2026-02-03 22:00", "2026-02-04 06:30"},
		{"accepted at the very end it is the next night", utc, "2026-02-04 06:30", "22:00", "06:30", "2026-02-04 22:00", "2026-02-05 06:30"},
		{"within one day", utc, "2026-02-03 07:00", "08:00", "17:00", "2026-02-03 08:00", "2026-02-03 17:00"},
		{"within one day, in the middle of it", utc, "2026-02-03 12:00", "08:00", "17:00", "2026-02-03 08:00", "2026-02-03 17:00"},
		{"a beginning alone", utc, "2026-02-03 22:01", "22:00", "", "2026-02-04 22:00", ""},
		{"a beginning alone, on the minute", utc, "2026-02-03 22:00", "22:00", "", "2026-02-03 22:00", ""},
		{"an end alone", utc, "2026-02-03 22:00", "", "06:30", "", "2026-02-04 06:30"},
		{"over the end of a year", utc, "2026-12-31 20:00", "22:00", "06:30", "2026-12-31 22:00", "2027-01-01 06:30"},

		{"Berlin in winter", berlin, "2026-02-03 09:00", "22:00", "06:30", "2026-02-03 21:00", "2026-02-04 05:30"},
		{"Berlin, a night an hour shorter", berlin, "2026-03-28 20:00", "22:00", "06:30", "2026-03-28 21:00", "2026-03-29 04:30"},
		{"Berlin, a night an hour longer", berlin, "2026-10-24 20:00", "22:00", "06:30", "2026-10-24 20:00", "2026-10-25 05:30"},
		{"Berlin, an end that is left out", berlin, "2026-03-28 20:00", "22:00", "02:30", "2026-03-28 21:00", "2026-03-29 01:00"},
		{"Berlin, a beginning that is left out", berlin, "2026-03-28 20:00", "02:30", "06:30", "2026-03-29 01:00", "2026-03-29 04:30"},
		{"Berlin, an end that comes twice is the first", berlin, "2026-10-24 20:00", "22:00", "02:30", "2026-10-24 20:00", "2026-10-25 00:30"},
		{"Berlin, accepted between the two ends", berlin, "2026-10-25 02:45", "22:00", "02:30", "2026-10-25 21:00", "2026-10-26 01:30"},
		{"Berlin, a beginning that comes twice is the second", berlin, "2026-10-24 20:00", "02:30", "06:30", "2026-10-25 01:30", "2026-10-25 05:30"},
		{"Berlin, both come twice and keep their order", berlin, "2026-10-24 20:00", "02:15", "02:45", "2026-10-25 00:15", "2026-10-25 00:45"},
		{"Berlin, a beginning alone that comes twice", berlin, "2026-10-24 20:00", "02:30", "", "2026-10-25 01:30", ""},

		{"New York, a night an hour shorter", newYork, "2026-03-07 20:00", "22:00", "06:30", "2026-03-08 03:00", "2026-03-08 10:30"},
		{"New York, a night an hour longer", newYork, "2026-10-31 20:00", "22:00", "06:30", "2026-11-01 02:00", "2026-11-01 11:30"},
		{"New York, an end that is left out", newYork, "2026-03-07 20:00", "", "02:30", "", "2026-03-08 07:00"},
		{"New York, an end that comes twice", newYork, "2026-10-31 20:00", "", "01:30", "", "2026-11-01 05:30"},
		{"New York, a beginning that comes twice", newYork, "2026-10-31 20:00", "01:30", "", "2026-11-01 06:30", ""},

		{"Sydney, spring comes in October", sydney, "2026-10-03 20:00", "22:00", "06:30", "2026-10-03 12:00", "2026-10-03 19:30"},
		{"Sydney, an end that is left out", sydney, "2026-10-03 20:00", "", "02:30", "", "2026-10-03 16:00"},
		{"Sydney, a beginning that comes twice in April", sydney, "2026-04-04 20:00", "02:30", "06:30", "2026-04-04 16:30", "2026-04-04 20:30"},
		{"Lord Howe, half an hour left out", lordHowe, "2026-10-03 20:00", "", "02:15", "", "2026-10-03 15:30"},
		{"Lord Howe, half an hour twice", lordHowe, "2026-04-04 20:00", "01:45", "", "2026-04-04 15:15", ""},
		{"Apia, a whole day left out", apia, "2011-12-29 20:00", "22:00", "06:30", "2011-12-30 08:00", "2011-12-30 10:00"},
	} {
		t.Run(c.name, func(t *testing.T) {
			accepted, err := time.ParseInLocation("2006-01-02 15:04", c.accepted, zone(t, c.zone))
			if err != nil {
				t.Fatal(err)
			}
			from, to, ok := Instants(clock(t, c.notBefore), clock(t, c.finishBy), accepted)
			print := func(at time.Time) string {
				if at.IsZero() {
					return ""
				}
				return at.UTC().Format("2006-01-02 15:04")
			}
			if !ok || print(from) != c.from || print(to) != c.to {
				t.Errorf("from %q to %q, %v; want %q to %q", print(from), print(to), ok, c.from, c.to)
			}
		})
	}
}

func TestTimesThatTheClockLeavesOutAltogetherAreRefused(t *testing.T) {
	accepted := time.Date(2026, 3, 28, 20, 0, 0, 0, zone(t, "Europe/Berlin"))
	if from, to, ok := Instants(&Clock{2, 15}, &Clock{2, 45}, accepted); ok {
		t.Errorf("%v to %v; want no time between 02:15 and 02:45 in that night", from, to)
	}
}

// TestInstantsAgreeWithAWatchedClock looks at the clock every five minutes, as a person would, over
// the days around each change of several years.
func TestInstantsAgreeWithAWatchedClock(t *testing.T) {
	const step = 5 * time.Minute
	for _, name := range []string{"Europe/Berlin", "America/New_York", "Australia/Sydney", "Australia/Lord_Howe", "America/Santiago", "Asia/Kolkata", "UTC"} {
		loc := zone(t, name)
		at := time.Date(2025, 1, 1, 0, 0, 0, 0, time.UTC).In(loc)
		for range 6 {
			_, change := at.ZoneBounds()
			if change.IsZero() {
				change = at.AddDate(0, 6, 0)
			}
			at = change
			accepted := change.Add(-30 * time.Hour).Truncate(step).In(loc)
			first := map[Clock]time.Time{} // when the clock first shows it after accepted
			for watch := accepted.Add(step); watch.Sub(accepted) < 60*time.Hour; watch = watch.Add(step) {
				c := Clock{watch.Hour(), watch.Minute()}
				if _, seen := first[c]; !seen {
					first[c] = watch
				}
			}
			_, wasOffset := change.Add(-time.Nanosecond).Zone()
			_, isOffset := change.Zone()
			for c, want := range first {
				_, to, ok := Instants(nil, &c, accepted)
				leftOut := isOffset > wasOffset && to.Equal(change) && want.After(change)
				if !ok || !to.Equal(want) && !leftOut {
					t.Errorf("%s: accepted %s, by %s: %s; want %s", name, accepted, c, to, want)
				}
				if leftOut {
					gap := time.Duration(isOffset-wasOffset) * time.Second
					readsAs := change.Add(-gap) // what the clock would show had it not been set
					if until := time.Duration(c.Hour*60+c.Minute)*time.Minute - time.Duration(readsAs.Hour()*60+readsAs.Minute())*time.Minute; until < 0 || until >= gap {
						t.Errorf("%s: %s is taken as left out; the clock leaves out %s from %s", name, c, gap, readsAs)
					}
				}
			}
		}
	}
}

const nightRecipe = "title: A\ndwell: 1 s\nschedule: {not_before: \"22:00\", finish_by: 06:30}\n"

func TestAScheduleIsReckonedFromTheMomentOfAcceptance(t *testing.T) {
	r, err := Parse("r.yaml", []byte(nightRecipe))
	if err != nil {
		t.Fatal(err)
	}
	f := bench()
	f.AcceptedAt = time.Date(2026, 3, 28, 20, 0, 0, 0, zone(t, "Europe/Berlin"))
	f.Pace = 1
	p, err := r.Plan(f)
	if err != nil {
		t.Fatal(err)
	}
	if from, to := p.Schedule.NotBefore, p.Schedule.FinishBy; !from.Equal(f.AcceptedAt.Add(2*time.Hour)) || to.Sub(from) != 7*time.Hour+30*time.Minute {
		t.Errorf("%s to %s; want the night of 7.5 h in which the clocks are set forward", from, to)
	}
	for _, c := range []struct {
		name, want string
		change     func(*Facts)
	}{
		{"faster than the wall", "a schedule on a simulated bench at 100 times the speed", func(f *Facts) { f.Pace = 100 }},
		{"no moment", "a schedule without a moment to reckon from", func(f *Facts) { f.AcceptedAt = time.Time{} }},
	} {
		bad := f
		c.change(&bad)
		if _, err := r.Plan(bad); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v; want %s", c.name, err, c.want)
		}
	}
	r.Schedule.NotBefore, r.Schedule.FinishBy = &Clock{2, 15}, &Clock{2, 45}
	if _, err := r.Plan(f); err == nil || !strings.Contains(err.Error(), "02:15 to 02:45 in the night to 2026-03-29, when the clocks leave these times out") {
		t.Errorf("%v; want times that do not come refused", err)
	}
}

func TestGuardsAreReadInTheSensorsUnit(t *testing.T) {
	r, err := Parse("r.yaml", []byte(`title: A
dwell: 1 s
guards:
  - {watch: pump_power, within: [45 mW, 0.055 W], otherwise: hold, give_up_after: 30 min}
  - {watch: crystal_temperature, within: [292.15 K, 21.5 Cel]}
  - {watch: pump_power, within: [30 mW, 70 mW], otherwise: stop}
  - {rate: signal, within: [1 kHz, 80 kHz], otherwise: skip}
  - {rate: a, within: [1 kHz, 80 kHz]}
  - {rate: a, within: [10 /s, 80 kHz]}
  - {dark_rate: idler, within: [0 Hz, 500 Hz]}
  - {reference_age: 1 h, otherwise: stop}
dark: {also: [end], dwell: 1 s}
sweep: [{axis: crystal_tilt, at: 0 deg}, {axis: signal_arm, at: 2 deg}, {axis: idler_arm, at: 2 deg}]
reference: {axes: [idler_arm], every: 30 min}
`))
	if err != nil {
		t.Fatal(err)
	}
	p, err := r.Plan(bench())
	if err != nil {
		t.Fatal(err)
	}
	want := []scan.Guard{
		{Name: "pump_power", Sensor: "pump_power", Low: 45, High: 55, Otherwise: scan.Hold, GiveUpAfter: 30 * time.Minute},
		{Name: "crystal_temperature", Sensor: "crystal_temperature", Low: 19, High: 21.5, Otherwise: scan.Hold},
		{Name: "pump_power 2", Sensor: "pump_power", Low: 30, High: 70, Otherwise: scan.Stop},
		{Name: "rate signal", Rate: "a", Low: 1000, High: 80000, Otherwise: scan.Skip},
		{Name: "rate a", Rate: "a", Low: 1000, High: 80000, Otherwise: scan.Hold},
		{Name: "rate a 2", Rate: "a", Low: 10, High: 80000, Otherwise: scan.Hold},
		{Name: "dark_rate idler", DarkRate: "b", High: 500, Otherwise: scan.Hold},
		{Name: "reference_age", ReferenceAge: time.Hour, Otherwise: scan.Stop},
	}
	if got := fmt.Sprint(p.Guards); got != fmt.Sprint(want) {
		t.Errorf("got  %s\nwant %s", got, fmt.Sprint(want))
	}
}

func TestAWarmUpIsSteadyInShareOrInTheSensorsUnit(t *testing.T) {
	r, err := Parse("r.yaml", []byte(`title: A
dwell: 1 s
schedule: {warm_up: {steady: {pump_power: 0.5 % over 10 min, crystal_temperature: 0.1 K over 90 s}, at_most: 2 h}}
`))
	if err != nil {
		t.Fatal(err)
	}
	want := scan.WarmUp{AtMost: 2 * time.Hour, Steady: []scan.Steady{
		{Sensor: "pump_power", Relative: 0.005, Over: 10 * time.Minute},
		{Sensor: "crystal_temperature", Absolute: 0.1, Over: 90 * time.Second},
	}}
	f := bench()
	f.Pace = 100 // a warm-up is told in bench time, whatever the clock on the wall says
	p, err := r.Plan(f)
	if err != nil || p.Schedule.WarmUp == nil || !reflect.DeepEqual(*p.Schedule.WarmUp, want) {
		t.Errorf("%+v, %v; want %+v", p.Schedule.WarmUp, err, want)
	}
	f.Sensors[0].Unit = "%" // a share of a share is nobody's meaning: half a percent is half a percent
	if p, err = r.Plan(f); err != nil || p.Schedule.WarmUp.Steady[0].Absolute != 0.5 {
		t.Errorf("%+v, %v; want half a percent of a sensor in percent as a difference", p.Schedule.WarmUp, err)
	}
}
