package keeper

import (
	"encoding/json"
	"fmt"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// past writes a run that ended, with its results, into the logbook.
type past struct {
	title   string
	bench   string // text; empty: today's
	state   protocol.State
	results []string // JSON objects without a head
}

func (p past) write(t *testing.T, book *logbook.Book, name protocol.RunID) {
	t.Helper()
	head := func(schema string, n int64) protocol.Head {
		return protocol.Head{Schema: schema, Bench: "skerry", Run: name, Sequence: n, At: protocol.Time{Time: time.Now()}}
	}
	event := func(n int64, kind protocol.EventKind, state protocol.State) protocol.Entry {
		body, err := json.Marshal(protocol.Event{Head: head(protocol.EventSchema, n), Kind: kind, State: state, Causes: []protocol.Cause{}, Detail: map[string]any{}})
		if err != nil {
			t.Fatal(err)
		}
		return protocol.Entry{Run: name, Sequence: n, Kind: protocol.EventEntry, Body: body}
	}
	text := p.bench
	if text == "" {
		text = "bench: {name: skerry}"
	}
	_, err := book.NewRun(t.Context(), logbook.Header{Run: name, Title: p.title, RecipeText: "r", BenchText: text, Version: "test", QueuedAt: protocol.Time{Time: time.Now()}}, event(1, protocol.OperatorDid, protocol.Queued))
	if err != nil {
		t.Fatal(err)
	}
	n := int64(2)
	for _, r := range p.results {
		body := map[string]any{}
		if err := json.Unmarshal([]byte(r), &body); err != nil {
			t.Fatal(err)
		}
		raw, err := json.Marshal(head(protocol.ResultSchema, n))
		if err == nil {
			err = json.Unmarshal(raw, &body)
		}
		if err == nil {
			raw, err = json.Marshal(body)
		}
		if err == nil {
			err = book.Append(t.Context(), protocol.Entry{Run: name, Sequence: n, Kind: protocol.ResultEntry, Body: raw})
		}
		if err != nil {
			t.Fatal(err)
		}
		n++
	}
	if p.state != protocol.Queued {
		if err := book.Append(t.Context(), event(n, protocol.Ended, p.state)); err != nil {
			t.Fatal(err)
		}
	}
}

func peakAt(axis string, value, u float64) string {
	return fmt.Sprintf(`{"kind":"peak","axis":%q,"value":%g,"standard_uncertainty":%g,"unit":"deg"}`, axis, value, u)
}

// delaySetting is a setting in nanoseconds.
type delaySetting struct{ drivers.Setting }

func (delaySetting) Name() drivers.DeviceName { return "delay" }
func (delaySetting) Unit() string             { return "ns" }

func TestAValueIsTakenFromTheLastResultThatWillDoAndOtherwiseTheReasonIsSaid(t *testing.T) {
	ring := scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm", From: "Find the ring", NotOlderThan: 12 * time.Hour, Below: 50 * unit.Degree / 1000}
	finished := func(results ...string) past {
		return past{title: "Find the ring", state: protocol.Finished, results: results}
	}
	good := finished(peakAt("idler_arm", -2.9, 0.01), peakAt("signal_arm", 2.864, 0.01))
	for _, c := range []struct {
		name  string
		past  []past // an hour apart; the first is the oldest
		later time.Duration
		ask   func(*scan.EarlierAsk)
		want  string // "value of run, u", or part of the reason
	}{
		{name: "nothing", want: `no run "Find the ring" in this bench's logbook; want a finished one`},
		{name: "the value of its axis", past: []past{good}, want: "r1.3 2.864 deg 0.01"},
		{name: "the other axis", past: []past{good}, ask: func(a *scan.EarlierAsk) { a.Axis = "idler_arm" }, want: "r1.2 -2.9 deg 0.01"},
		{name: "the newest of two", past: []past{good, finished(peakAt("signal_arm", 2.9, 0.02))}, want: "r2.2 2.9 deg 0.02"},
		{name: "another title", past: []past{{title: "Find it", state: protocol.Finished, results: good.results}}, want: `no run "Find the ring"`},
		{name: "a run that was stopped", past: []past{{title: "Find the ring", state: protocol.Stopped, results: good.results}},
			want: `the last run "Find the ring", r1, is stopped, and none has finished; want a finished one`},
		{name: "a run that waits", past: []past{{title: "Find the ring", state: protocol.Queued}}, want: "is queued, and none has finished"},
		{name: "a stopped run after a finished one", past: []past{good, {title: "Find the ring", state: protocol.Stopped, results: []string{peakAt("signal_arm", 9, 0.01)}}},
			want: "r1.3 2.864 deg 0.01"},
		{name: "a later run without such a result", past: []past{good, finished(peakAt("idler_arm", -3, 0.01))}, want: "r1.3 2.864 deg 0.01"},
		{name: "no such result at all", past: []past{finished(peakAt("idler_arm", -3, 0.01), `{"kind":"zero","axis":"signal_arm","value":0,"standard_uncertainty":0.1,"unit":"deg"}`)},
			want: `no finished run "Find the ring" has a peak of signal_arm; want a recipe of that title with a result: {kind: peak, …} of it`},
		{name: "young enough to the second", past: []past{good}, later: 12 * time.Hour, want: "r1.3 2.864 deg 0.01"},
		{name: "too old", past: []past{good}, later: 14*time.Hour + 20*time.Minute, want: `the last "Find the ring" (run r1) ended 14 h ago; want at most 12 h`},
		{name: "however old", past: []past{good}, later: 100 * 24 * time.Hour, ask: func(a *scan.EarlierAsk) { a.NotOlderThan = 0 }, want: "r1.3 2.864 deg 0.01"},
		{name: "too uncertain", past: []past{finished(peakAt("signal_arm", 2.9, 0.0512))}, want: `(run r1) has a standard uncertainty of 0.0512 deg; want at most 0.05 deg`},
		{name: "a newer one that is too uncertain", past: []past{good, finished(peakAt("signal_arm", 2.9, 0.06))}, want: "(run r2) has a standard uncertainty of 0.06 deg"},
		{name: "refused", past: []past{good, finished(`{"kind":"peak","axis":"signal_arm","value":null,"standard_uncertainty":null,"unit":"1","because":["3 readings for 4 parameters"]}`)},
			want: "(run r2) gave no peak of signal_arm: 3 readings for 4 parameters; want one with a value"},
		{name: "without an uncertainty", past: []past{finished(`{"kind":"peak","axis":"signal_arm","value":1,"standard_uncertainty":0,"unit":"deg"}`)}, want: "want an angle"},
		{name: "in no degrees", past: []past{finished(`{"kind":"peak","axis":"signal_arm","value":1,"standard_uncertainty":0.1,"unit":"s"}`)}, want: `in "s"; want degrees`},
		{name: "under another bench file that declares the same", past: []past{{title: "Find the ring", bench: "zero 1", state: protocol.Finished, results: good.results}}, want: "r1.3 2.864 deg 0.01"},
		{name: "under another zero", past: []past{{title: "Find the ring", bench: "zero 2", state: protocol.Finished, results: good.results}},
			want: "(run r1) was under another bench file, which declared of signal_arm: zero 2; now it is: zero 1; an angle of then is not the same angle now"},
		{name: "under a bench file that cannot be read", past: []past{{title: "Find the ring", bench: "broken", state: protocol.Finished, results: good.results}},
			want: "that this program does not read any more"},
		{name: "a zero", past: []past{finished(`{"kind":"zero","axis":"signal_arm","value":-0.012,"standard_uncertainty":0.003,"unit":"deg"}`)},
			ask: func(a *scan.EarlierAsk) { a.Kind = scan.Zero }, want: "r1.2 -0.012 deg 0.003"},
		{name: "a delay in another unit", past: []past{finished(`{"kind":"delay","setting":"delay","value":1.25e-8,"standard_uncertainty":2e-10,"unit":"s"}`)},
			ask: func(a *scan.EarlierAsk) {
				a.Kind, a.Axis, a.Setting, a.Below, a.BelowValue = scan.Delay, "", "delay", 0, 0.3
			}, want: "r1.2 12.5 ns 0.2"},
		{name: "a delay that is too uncertain", past: []past{finished(`{"kind":"delay","setting":"delay","value":1.25e-8,"standard_uncertainty":2e-10,"unit":"s"}`)},
			ask: func(a *scan.EarlierAsk) {
				a.Kind, a.Axis, a.Setting, a.Below, a.BelowValue = scan.Delay, "", "delay", 0, 0.1
			}, want: "uncertainty of 0.2 ns; want at most 0.1 ns"},
		{name: "a delay in degrees", past: []past{finished(`{"kind":"delay","setting":"delay","value":1,"standard_uncertainty":2,"unit":"deg"}`)},
			ask: func(a *scan.EarlierAsk) { a.Kind, a.Axis, a.Setting, a.Below = scan.Delay, "", "delay", 0 }, want: `in "deg", and delay is set in "ns"`},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				k, book := keeping(t, func(c *Config) {
					c.BenchText = "zero 1"
					c.Bench.Settings = []drivers.Setting{delaySetting{}}
					c.Declared = func(text string, axis drivers.AxisName) (string, error) {
						if text == "broken" {
							return "", fmt.Errorf("line 1: no\nline 2: bench file")
						}
						if text == "bench: {name: skerry}" {
							text = "zero 1"
						}
						return text, nil
					}
				})
				for i, p := range c.past {
					time.Sleep(time.Hour)
					p.write(t, book, protocol.RunID(fmt.Sprint("r", i+1)))
				}
				time.Sleep(c.later)
				ask := ring
				if c.ask != nil {
					c.ask(&ask)
				}
				l := k.earlierNow(t.Context())
				s, err := l.find(ask)
				got := fmt.Sprintf("%s.%d %s %.6g", s.Run, s.Sequence, s.Angle, s.U)
				if ask.Setting != "" {
					got = fmt.Sprintf("%s.%d %.6g ns %.6g", s.Run, s.Sequence, s.Value, s.U)
				}
				if err != nil {
					got = err.Error()
				}
				if !strings.Contains(got, c.want) {
					t.Errorf("found %s; want %s", got, c.want)
				}
				if l.broken != nil {
					t.Errorf("the logbook is called broken: %v", l.broken)
				}
			})
		})
	}
}

// A run whose points are decided goes on with its own values, whatever was measured since, and a
// run that is still to begin takes what there is when its turn comes.
func TestARunTakesItsValuesWhenItsTurnComesAndKeepsThem(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		ask := scan.EarlierAsk{Kind: scan.Peak, Axis: "signal_arm", From: "Find the ring"}
		var asked []string
		k, book := keeping(t, func(c *Config) {
			counting(c)
			quick := c.Plan
			c.ResumeAfterRestart = true
			c.Plan = func(text string, at time.Time, earlier func(scan.EarlierAsk) (scan.EarlierSource, error)) (scan.Plan, error) {
				plan, err := quick(text, at, earlier)
				s, missing := earlier(ask)
				e := scan.Earlier{Ask: ask, Otherwise: scan.Hold}
				if missing != nil {
					e.Missing = missing.Error()
					asked = append(asked, "none")
				} else {
					e.Source = &s
					asked = append(asked, fmt.Sprintf("%s %s", s.Run, s.Angle))
				}
				plan.Earlier = []scan.Earlier{e}
				return plan, err
			}
		})
		enqueue(t, k, "calibrate") // no value yet: that is no finding
		past{title: "Find the ring", state: protocol.Finished, results: []string{peakAt("signal_arm", 2.864, 0.01)}}.write(t, book, "r1")
		during(t, k, func() { time.Sleep(5 * time.Second) }) // it began, and was interrupted in its dwell
		time.Sleep(time.Hour)
		past{title: "Find the ring", state: protocol.Finished, results: []string{peakAt("signal_arm", 3, 0.01)}}.write(t, book, "r2")
		k = New(k.Config)
		during(t, k, func() { time.Sleep(time.Hour) })
		if got := strings.Join(asked, ", "); got != "none, r1 2.864 deg, r1 2.864 deg" {
			t.Errorf("the plans were made with %s; want nothing, then the first value, and that again", got)
		}
		rows, err := book.Runs(t.Context())
		if err != nil || rows[0].State != protocol.Finished {
			t.Errorf("the run is %s (%s), %v; want finished", rows[0].State, rows[0].Reason, err)
		}
		values, decided, err := book.Taken(t.Context(), rows[0].Run)
		if err != nil || !decided || len(values) != 1 || values[0].Run != "r1" || values[0].Angle == nil || *values[0].Angle != unit.Degrees(2.864) {
			t.Errorf("the journal has %+v, %v, %v; want the value of r1", values, decided, err)
		}
		// A run that asks for what its journal does not have would be another run.
		if _, err := logbook.Again(values, scan.EarlierAsk{Kind: scan.Zero, Axis: "signal_arm", From: "Find the ring"}); err == nil {
			t.Error("a value that was not taken is there")
		}
	})
}
