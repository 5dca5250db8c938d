package nighttest

import (
	"context"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"testing"
	"testing/synctest"
	"time"
	_ "time/tzdata" // the night on which the clock is set forward, on every machine

	"gemel/daemon/bench"
	"gemel/daemon/keeper"
	"gemel/daemon/logbook"
	"gemel/protocol"
	"gemel/scan/engine"
	"gemel/sim/trouble"
)

var monthFlag = flag.Int("month.nights", 0, "how many nights the month has; 0: 30, fewer with -short or -race")

var alwaysFlag = flag.Bool("month.always", false, "the machine is on by day as well, and nights last four hours instead of two")

// monthRing is measured each evening; monthNight stands where it was found, and lasts as long as the
// schedule lets it.
const (
	monthRing = `
title: Find the ring
sweep:
  - {axis: crystal_tilt, at: 0 deg}
  - {axis: idler_arm, at: 11 deg}
  - {axis: signal_arm, from: 2.4 deg, to: 3.3 deg, step: 0.15 deg}
dwell: 3 s
dark: {dwell: 10 s, also: [start, end]}
result: {kind: peak, of: signal, along: signal_arm}
`
	monthNight = `
title: Night %d
sweep:
  - {axis: crystal_tilt, at: 0 deg}
  - {axis: signal_arm, at: {peak: signal_arm, from: "Find the ring", not_older_than: 14 h, otherwise: hold}}
  - {axis: idler_arm, from: 2.8 deg, to: 3 deg, step: 0.1 deg}
order: serpentine
dwell: 15 min
repeat: {times: 100, as: passes}
dark: {every: 2 h, dwell: 60 s, also: [start, end]}
trouble: {retries: 3, then: hold}
schedule: {not_before: "%s", finish_by: "%s"}
`
	monthShort = `
title: %s
sweep:
  - {axis: signal_arm, at: 2.7 deg}
  - {axis: idler_arm, from: 2.8 deg, to: 3 deg, step: 0.1 deg}
dwell: 10 s
`
)

// appointment is what somebody does at a moment of the month, on one day by the clock on the wall.
type appointment struct {
	at   time.Time
	what string
	do   func(ctx context.Context, l *life, keep *keeper.Keeper) error
}

// month is a diary, and what became of it.
type month struct {
	zone          *time.Location
	opens, closes clock
	t             *testing.T
	left          []appointment
	runs          map[string]protocol.RunID // by key
	begin         []string                  // titles, in the order in which they should begin
	stopped       []string                  // keys of runs that people stopped
	held          int                       // mornings on which a run held, and was let go on
}

// clock is a time of the day, on the wall.
type clock struct{ hour, minute int }

func (c clock) String() string { return fmt.Sprintf("%02d:%02d", c.hour, c.minute) }

// on is the moment of that day at which the clock shows it.
func (c clock) on(day time.Time) time.Time {
	y, m, d := day.Date()
	return time.Date(y, m, d, c.hour, c.minute, 0, 0, day.Location())
}

// keep does what is due, in each of the daemon's lives: what a dying one did not answer is asked again
// of the next, with the same key.
func (m *month) keep(ctx context.Context, l *life, keep *keeper.Keeper) (done bool, err error) {
	for len(m.left) > 0 {
		timer := time.NewTimer(max(0, time.Until(m.left[0].at)) + 23*time.Nanosecond)
		select {
		case <-ctx.Done():
			timer.Stop()
			return false, nil
		case <-timer.C:
		}
		err := m.left[0].do(ctx, l, keep)
		if ctx.Err() != nil {
			return false, nil
		}
		if err != nil {
			return false, fmt.Errorf("%s: %s: %w", m.left[0].at.Format("Jan 2 15:04"), m.left[0].what, err)
		}
		m.left = m.left[1:]
	}
	return true, nil
}

func (m *month) add(at time.Time, what string, do func(ctx context.Context, l *life, keep *keeper.Keeper) error) {
	m.left = append(m.left, appointment{at, what, do})
}

func (m *month) start(at time.Time, key, recipe string) {
	m.add(at, "start "+key, func(ctx context.Context, l *life, keep *keeper.Keeper) error {
		r, err := keep.Start(ctx, protocol.StartRequest{Recipe: recipe, Key: key, Who: "ann"})
		if err != nil {
			return err
		}
		m.runs[key] = r.Run
		l.mu.Lock()
		defer l.mu.Unlock()
		if !slices.Contains(l.runs, r.Run) {
			l.runs = append(l.runs, r.Run)
		}
		return nil
	})
}

func (m *month) reorder(at time.Time, keys ...string) {
	m.add(at, "reorder", func(ctx context.Context, _ *life, keep *keeper.Keeper) error {
		var runs []protocol.RunID
		for _, key := range keys {
			runs = append(runs, m.runs[key])
		}
		q, err := keep.Reorder(ctx, protocol.ReorderRequest{Runs: runs, Who: "ben"})
		if err != nil {
			return err
		}
		for i, run := range runs {
			if i >= len(q.Queue) || q.Queue[i].Run != run {
				m.t.Errorf("%s: after the reorder the queue is %+v; want %v first", at.Format("Jan 2"), q.Queue, runs)
				break
			}
		}
		return nil
	})
}

// order is a request about one run. Asked again of a later life it may have been carried out before.
func (m *month) order(at time.Time, what, key string, again int) {
	m.add(at, what+" "+key, func(ctx context.Context, l *life, keep *keeper.Keeper) error {
		q := protocol.RunRequest{Run: m.runs[key], Who: "cid"}
		ask := map[string]func(context.Context, protocol.RunRequest) (protocol.RunReply, error){"withdraw": keep.Withdraw, "hold": keep.Hold, "stop": keep.Stop}[what]
		r, err := ask(ctx, q)
		if refused, ok := errors.AsType[*protocol.Refusal](err); ok && refused.Code == again {
			return nil
		}
		if err == nil && r.Recorded && what == "hold" {
			l.note(Process{What: HoldAnswered, Run: q.Run})
		}
		return err
	})
}

// morning is somebody who comes in, sees that a run holds for what a person may clear, and clears it.
func (m *month) morning(at time.Time) {
	m.add(at, "morning", func(ctx context.Context, _ *life, keep *keeper.Keeper) error {
		s := keep.Status(ctx)
		if s.State != protocol.Holding || !slices.Contains(s.Causes, protocol.ByTrouble) && !slices.Contains(s.Causes, protocol.ByOperator) {
			return nil
		}
		m.held++
		_, err := keep.Resume(ctx, protocol.RunRequest{Run: s.Run, Who: "ann"})
		return err
	})
}

// fill writes the month: every evening the ring and then the night, and beside them what people think
// of. What is asked for while the ring is measured waits.
func (m *month) fill(from time.Time, nights int) {
	for d := range nights + 1 {
		date := from.AddDate(0, 0, d)
		at := func(hour, minute, second int) time.Time {
			return clock{hour, minute}.on(date).Add(time.Duration(second) * time.Second)
		}
		if d > 0 {
			m.morning(at(5, 0, 0))
			m.idle(at(23, 45, 0))
		}
		if d == nights {
			break
		}
		ring, night, extra := fmt.Sprintf("ring %d", d+1), fmt.Sprintf("night %d", d+1), fmt.Sprintf("extra %d", d+1)
		m.start(at(23, 50, 0), ring, monthRing)
		m.start(at(23, 50, 5), night, fmt.Sprintf(monthNight, d+1, m.opens, m.closes))
		m.begin = append(m.begin, "Find the ring")
		switch d % 5 {
		case 1: // two more, before the night and in another order
			m.start(at(23, 50, 6), extra+" a", fmt.Sprintf(monthShort, extra+" a"))
			m.start(at(23, 50, 7), extra+" b", fmt.Sprintf(monthShort, extra+" b"))
			m.reorder(at(23, 50, 9), extra+" b", extra+" a", night)
			m.begin = append(m.begin, extra+" b", extra+" a")
		case 3:
			m.start(at(23, 50, 6), extra, fmt.Sprintf(monthShort, extra))
			m.reorder(at(23, 50, 8), extra)
			m.order(at(23, 50, 10), "withdraw", extra, 409)
			m.stopped = append(m.stopped, extra)
		}
		m.begin = append(m.begin, fmt.Sprintf("Night %d", d+1))
		switch d {
		case 6:
			m.order(at(25, 10, 0), "hold", night, 0)
		case 11:
			m.order(at(26, 20, 0), "stop", night, 409)
			m.stopped = append(m.stopped, night)
		}
	}
}

// kills are the ends of the daemon's lives: in some nights it is killed, and each morning at half past
// five the machine is switched off until half past eleven in the evening, unless it is always on.
func (m *month) kills(nights int, always bool) (all []Kill) {
	for d := range nights {
		night := map[int][]Kill{
			1:  {{After: time.Hour + 20*time.Minute}},
			6:  {{After: 2 * time.Hour}}, // a person holds it
			9:  {{Step: engine.StepWriting, Nth: 14}},
			13: {{Step: engine.StepGated, Nth: 18}},
			19: {{After: time.Hour + 50*time.Minute}}, // the clock was set forward
		}[d]
		if always {
			for i := range night {
				if night[i].Step == "" {
					night[i].After += 24 * time.Hour * 3
				}
			}
			all = append(all, night...)
			continue
		}
		off := 6 * time.Hour
		if len(night) > 0 {
			off = 4*time.Hour + 15*time.Minute
		}
		all = append(append(all, night...), Kill{After: off})
	}
	return all
}

// up is the evening, when the machine is off by day.
func (m *month) up(died time.Time) time.Time {
	died = died.In(m.zone)
	if evening := (clock{23, 30}).on(died); died.Hour() >= 5 && died.Before(evening) {
		return evening
	}
	return died
}

// idle is an evening before which nothing may wait or be under way.
func (m *month) idle(at time.Time) {
	m.add(at, "evening", func(ctx context.Context, _ *life, keep *keeper.Keeper) error {
		if s := keep.Status(ctx); len(s.Queue) > 0 || s.State != "" && !s.State.Final() {
			m.t.Errorf("on the evening of %s run %s is %s (%s, %v) and %d wait; want everything over", at.Format("Jan 2"), s.Title, s.State, s.Reason, s.Causes, len(s.Queue))
		}
		return nil
	})
}

// monthBench is the demo's, for cheap nights: nothing wanders by the minute, so that the light at an
// angle is worked out once, and detectors are looked after each minute instead of each second.
func monthBench(t *testing.T) *bench.File {
	t.Helper()
	const file = "../../configs/demo-bench.yaml"
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	text = regexp.MustCompile(`(?m)^    (power|temperature)_wander: .*\n`).ReplaceAll(text, nil)
	text = regexp.MustCompile(`(?m)^    glance: .*\n`).ReplaceAll(text, []byte("${0}    watch: 60 s\n"))
	f, err := AtClockOne(file, text)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

// TestAMonth keeps one bench for a month: a night's run every evening that stands where that evening's
// ring was found, other runs before it that are reordered and withdrawn, processes that are killed, a line that
// is pulled out at night and put back, a hold and a stop by people, and a night that is an hour shorter by the clock on the wall.
func TestAMonth(t *testing.T) {
	nights := *monthFlag
	if nights == 0 {
		if nights = 30; testing.Short() || raced {
			nights = 4
		}
	}
	zone, err := time.LoadLocation("Atlantic/Faroe") // the clock is set forward on 26 March 2000
	if err != nil {
		t.Fatal(err)
	}
	from := time.Date(2000, 3, 6, 23, 30, 0, 0, zone)
	m := &month{t: t, zone: zone, runs: map[string]protocol.RunID{}, opens: clock{0, 30}, closes: clock{2, 45}}
	if *alwaysFlag {
		m.closes = clock{4, 30}
	}
	m.fill(from, nights)
	n := Night{Bench: monthBench(t), Daemon: true, Longest: time.Duration(nights+3) * 24 * time.Hour, Zone: zone, diary: m.keep}
	if !*alwaysFlag {
		n.up = m.up
	}
	n.Kills = m.kills(nights, *alwaysFlag)
	if n.Model, err = demoModel(); err != nil {
		t.Fatal(err)
	}
	const day = 24 * time.Hour
	n.Troubles = trouble.List{
		{Kind: trouble.Unplug, Device: "rotary", At: 2*day + time.Hour + 30*time.Minute, For: time.Hour},
		{Kind: trouble.Lamp, At: 8*day + time.Hour + 45*time.Minute, For: 10 * time.Minute, RateHz: 5e6},
		{Kind: trouble.Unplug, Device: "counter", At: 15*day + 2*time.Hour, For: 5 * time.Minute},
	}
	data := t.TempDir()
	var r *Result
	began := time.Now()
	synctest.Test(t, func(t *testing.T) {
		time.Sleep(time.Until(from))
		var err error
		if r, err = Run(n, data); err != nil {
			t.Fatal(err)
		}
	})
	t.Logf("%d nights, %d runs, %d readings, %d set aside, %d lives, %d entries, %d questions on the lines, %d mornings with a hold, in %s", nights, len(r.Ends), r.Accepted, r.SetAside, r.Lives, r.Published, r.Lines.Asked, m.held, time.Since(began).Round(time.Millisecond))
	// Runs that a person stopped ended so; everything else is finished.
	for key, run := range m.runs {
		i := slices.IndexFunc(r.Ends, func(e End) bool { return e.Run == run })
		want := protocol.Finished
		if slices.Contains(m.stopped, key) {
			want = protocol.Stopped
		}
		if i < 0 || r.Ends[i].State != want {
			t.Errorf("%s: %+v; want it %s", key, r.Ends[max(0, i)], want)
		}
	}
	demand(t, n, r, "go test ./daemon/nighttest -run TestAMonth -v")
	m.look(data, nights, r)
}

// look asks the logbook what the month was.
func (m *month) look(data string, nights int, r *Result) {
	t, ctx := m.t, m.t.Context()
	book, err := logbook.OpenReadOnly(filepath.Join(data, "logbook.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer book.Close()
	all, err := book.After(ctx, 0, 1<<30)
	if err != nil {
		t.Fatal(err)
	}
	runs, err := book.Runs(ctx)
	if err != nil {
		t.Fatal(err)
	}
	title := map[protocol.RunID]string{}
	for _, run := range runs {
		title[run.Run] = run.Title
	}
	var began []string
	seen := map[string]bool{}
	for _, e := range all {
		var ev protocol.Event
		if e.Kind != protocol.EventEntry {
			continue
		}
		if err := json.Unmarshal(e.Body, &ev); err != nil {
			t.Fatal(err)
		}
		if ev.Kind == protocol.Began && !seen[string(ev.Run)] {
			seen[string(ev.Run)] = true
			began = append(began, title[ev.Run])
		}
	}
	if !slices.Equal(began, m.begin) {
		t.Errorf("the runs began in the order %q; want %q", began, m.begin)
	}
	if r.Published != len(all) {
		t.Errorf("%d entries were published; want %d, as the journal has", r.Published, len(all))
	}
	taken := map[int]int{}
	for d := range nights {
		night := m.runs[fmt.Sprintf("night %d", d+1)]
		values, decided, err := book.Taken(ctx, night)
		if err != nil {
			t.Fatal(err)
		}
		if ring := m.runs[fmt.Sprintf("ring %d", d+1)]; !decided || len(values) != 1 || values[0].Run != ring {
			t.Errorf("night %d stands where %+v; want the value of its evening's ring, %s", d+1, values, ring)
		}
		row, err := book.Run(ctx, night)
		if err != nil {
			t.Fatal(err)
		}
		morning := row.QueuedAt.In(m.zone).AddDate(0, 0, 1)
		opens, closes := m.opens.on(morning), m.closes.on(morning)
		for reading, err := range book.Readings(ctx, night) {
			if err != nil {
				t.Fatal(err)
			}
			if reading.Kind != protocol.Light {
				continue
			}
			taken[d]++
			if at := reading.StartedAt.In(m.zone); at.Before(opens) || at.After(closes.Add(-15*time.Minute)) {
				t.Errorf("night %d: a reading began at %s; want it between %s and %s", d+1, at, opens, closes)
			}
		}
	}
	if nights < 21 {
		return
	}
	// 15 minutes and some seconds a reading: four fewer when the clock is set forward, and one that the
	// killed process did not finish.
	day := time.Date(2000, 3, 10, 0, 0, 0, 0, m.zone)
	whole := int(m.closes.on(day).Sub(m.opens.on(day))/(15*time.Minute)) - 1
	if taken[17] != whole || taken[19] > whole-4 || taken[19] < whole-5 {
		t.Errorf("%d readings in an undisturbed night, %d in the one in which the clock is set forward (and a process killed); want %d, and 4 or 5 fewer", taken[17], taken[19], whole)
	}
	if m.held < 2 {
		t.Errorf("on %d mornings a run held for a person; want those of the pulled line and of the hold", m.held)
	}
}
