package report_test

import (
	"encoding/json"
	"strings"
	"testing"
	"time"

	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/estimate"
)

// tells writes an event, some time after the last.
func (j *journal) tells(kind protocol.EventKind, state protocol.State, text string, later time.Duration, detail map[string]any) {
	j.t.Helper()
	j.at = j.at.Add(later)
	j.write(protocol.EventEntry, protocol.Event{Head: j.head(protocol.EventSchema), Kind: kind, Text: text, State: state, Causes: []protocol.Cause{}, Detail: detail})
}

func TestTheNightSaysWhatWentWrongBesideTheNumbers(t *testing.T) {
	j := newJournal(t, 7)
	j.tells(protocol.Began, protocol.Running, "began: Drift", 0, map[string]any{"readings_planned": 550})
	peak := unit.Degrees(2.8642)
	j.write(protocol.PointEntry, protocol.Points{Head: j.head(protocol.PointSchema), Grounds: "sweep", Points: []protocol.Point{},
		Earlier: []protocol.EarlierValue{{Kind: "peak", Axis: "signal_arm", From: "Find the ring", Run: "20310202-r1", Sequence: 50, Angle: &peak, U: 0.004}}})
	j.reading(protocol.Light, arms(2.88, 2.96), time.Second, func(*protocol.Reading) {})
	j.reading(protocol.Light, arms(2.88, 2.96), time.Second, func(r *protocol.Reading) { r.Accepted, r.Reason = false, "the gate was short" })
	j.tells(protocol.TakenAgain, protocol.Running, "taken again: the gate was short", 0, map[string]any{"attempt": 1})
	j.reading(protocol.Light, arms(2.88, 2.96), time.Second, func(*protocol.Reading) {})
	j.tells(protocol.Held, protocol.Holding, "held by anna", time.Minute, nil)
	j.tells(protocol.GuardBroken, protocol.Holding, "pump_power is 2 mW", time.Minute, nil)
	j.tells(protocol.WentOn, protocol.Running, "resumed by anna", 90*time.Minute, nil)
	j.tells(protocol.Interrupted, protocol.Holding, "interrupted: the program ended without a word", time.Minute, nil)
	j.tells(protocol.WentOn, protocol.Running, "goes on", time.Minute, nil)
	j.tells(protocol.Doubted, protocol.Running, "idler_arm slipped; readings 3 to 4 are doubtful", 0, map[string]any{"from_sequence": 3, "to_sequence": 4, "why": "idler_arm slipped"})
	j.tells(protocol.SetAside, protocol.Running, "540 visits are left out: they would not be over by 06:30", 0, map[string]any{"left_out": 540})
	j.tells(protocol.Ended, protocol.Stopped, "stopped by anna", time.Minute, map[string]any{"who": "anna"})
	if err := j.book.AddNote(t.Context(), j.run, "ben", "the lamp in the corridor was on"); err != nil {
		t.Fatal(err)
	}
	n, err := report.NightOf(t.Context(), j.book, j.run)
	if err != nil {
		t.Fatal(err)
	}
	text := n.Text()
	for _, want := range []string{
		"stopped by anna; 2 of 550 readings accepted\n",
		"540 of 550 visits left out\n",
		"they would not be over by 06:30\n",
		"interrupted: the program ended without a word\n",
		"(1 h 31 min): held by anna; pump_power is 2 mW\n",
		"doubt: idler_arm slipped; readings 3 to 4 are doubtful\n",
		"taken again: 1; readings set aside: 1; visits given up: 0\n",
		"peak of signal_arm taken from \"Find the ring\", run 20310202-r1: 2.8642, u 0.004 deg\n",
		"note of ben, ",
		": the lamp in the corridor was on\n",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("no %q in\n%s", want, text)
		}
	}
	if strings.Contains(text, "nothing else happened") || len(n.Holds) != 2 || n.Holds[1].To == nil {
		t.Errorf("%+v\n%s", n.Holds, text)
	}
	out, err := report.JSONWith([]estimate.Result{{Run: j.run, Kind: "drift"}}, &n)
	var body struct {
		Night report.Night `json:"night"`
	}
	if err == nil {
		err = json.Unmarshal(out, &body)
	}
	if err != nil || body.Night.LeftOut != 540 || len(body.Night.Notes) != 1 {
		t.Errorf("%v\n%s", err, out)
	}
}

// inZone sets the zone that times are told in until the test ends.
func inZone(t *testing.T, ahead time.Duration) {
	t.Helper()
	was := time.Local
	time.Local = time.FixedZone("", int(ahead.Seconds()))
	t.Cleanup(func() { time.Local = was })
}

// atBench writes an event outside any run.
func (j *journal) atBench(kind protocol.EventKind, text string, at time.Time) {
	j.t.Helper()
	last, err := j.book.Last(j.t.Context(), protocol.BenchRun)
	if err != nil {
		j.t.Fatal(err)
	}
	ev := protocol.Event{Head: j.head(protocol.EventSchema), Kind: kind, Text: text, Causes: []protocol.Cause{}, Detail: map[string]any{}}
	ev.Run, ev.Sequence, ev.At = protocol.BenchRun, last+1, protocol.Time{Time: at}
	body, err := json.Marshal(ev)
	if err == nil {
		err = j.book.Append(j.t.Context(), protocol.Entry{Run: protocol.BenchRun, Sequence: last + 1, Kind: protocol.EventEntry, Body: body})
	}
	if err != nil {
		j.t.Fatal(err)
	}
}

func TestTheNightTellsTheBenchsTroublesInLocalTime(t *testing.T) {
	inZone(t, 2*time.Hour)
	j := newJournal(t, 11)
	j.atBench(protocol.Trouble, "at the start the rest state was not reached: laser: away", j.at.Add(-time.Minute))
	j.atBench(protocol.Trouble, "of the week before", j.at.Add(-200*time.Hour))
	j.atBench(protocol.OperatorDid, "the queue was put in order", j.at)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 1})
	j.tells(protocol.Ended, protocol.Finished, "finished", time.Minute, nil)
	j.atBench(protocol.Trouble, "of the day after", j.at.Add(time.Hour))
	n, err := report.NightOf(t.Context(), j.book, j.run)
	if err != nil {
		t.Fatal(err)
	}
	want := "The night, in local time (UTC+02:00)\n  finished; 0 of 1 readings accepted\n" +
		"  2031-02-03 23:59:00  at the bench: at the start the rest state was not reached: laser: away\n"
	if n.Text() != want {
		t.Errorf("%s\nwant\n%s", n.Text(), want)
	}
	body, err := report.NightJSON(n)
	if err != nil || !strings.Contains(string(body), `"results": []`) || !strings.Contains(string(body), `"at": "2031-02-03T21:59:00`) {
		t.Errorf("%v\n%s\nwant UTC and no results", err, body)
	}
}

func TestAnInterruptionIsToldOnce(t *testing.T) {
	for name, c := range map[string]struct {
		held time.Duration
		want string
	}{
		"where the run went on at once":      {0, "22:01:00  interrupted: dead\n"},
		"with the hold that it left, if any": {time.Hour, "held from 2031-02-03 22:01:00 to 2031-02-03 23:01:00 (1 h): interrupted: dead\n"},
	} {
		t.Run(name, func(t *testing.T) {
			inZone(t, 0)
			j := newJournal(t, 12)
			j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 1})
			j.tells(protocol.Interrupted, protocol.Holding, "interrupted: dead", time.Minute, nil)
			j.tells(protocol.WentOn, protocol.Running, "goes on", c.held, nil)
			n, err := report.NightOf(t.Context(), j.book, j.run)
			if err != nil {
				t.Fatal(err)
			}
			if text := n.Text(); strings.Count(text, "interrupted: dead") != 1 || !strings.Contains(text, c.want) {
				t.Errorf("%s\nwant once %q", text, c.want)
			}
		})
	}
}

func TestAHoldThatWasGivenUpIsToldAsWhatItWas(t *testing.T) {
	inZone(t, 0)
	j := newJournal(t, 13)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 1})
	j.tells(protocol.Held, protocol.Holding, "held: signal sees 900000 /s", time.Minute, nil)
	j.at = j.at.Add(9 * time.Minute)
	j.reading(protocol.Check, arms(2.88, 2.96), time.Second, func(*protocol.Reading) {})
	looked := j.at.Add(-time.Second) // the reading ended; the journal took another second
	j.tells(protocol.Ended, protocol.Failed, "failed: it did not mend within 10 min; it was held: signal sees 900000 /s", time.Minute, nil)
	n, err := report.NightOf(t.Context(), j.book, j.run)
	if err != nil {
		t.Fatal(err)
	}
	want := "failed: given up after a hold of 10 min without a change, which began at 2031-02-03 22:01:00 and was for: signal sees 900000 /s; the last look at it was at " + looked.Format(time.DateTime)
	if text := n.Text(); !strings.Contains(text, want) {
		t.Errorf("%s\nwant %q", text, want)
	}
}

func TestOfARunThatGoesOnARefusalSaysThatReadingsAreStillToCome(t *testing.T) {
	j := newJournal(t, 14)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 20})
	all, err := report.All(t.Context(), j.book, j.run, report.Options{})
	if err != nil || len(all) == 0 || all[0].Value != nil {
		t.Fatalf("%+v, %v; want a refusal", all, err)
	}
	early, err := report.NightOf(t.Context(), j.book, j.run)
	if err != nil {
		t.Fatal(err)
	}
	if text := report.Morning(all, early); !strings.Contains(text, "yet: the run is running with 0 of 20 readings accepted") || strings.Contains(text, "kept") {
		t.Errorf("%s", text)
	}
	j.tells(protocol.Ended, protocol.Stopped, "stopped", time.Minute, nil)
	late, err := report.NightOf(t.Context(), j.book, j.run)
	if err != nil {
		t.Fatal(err)
	}
	if text := report.Morning(all, late); !strings.Contains(text, all[0].Sentence()) {
		t.Errorf("of a run that ended:\n%s", text)
	}
}

func TestAQuietNightSaysSo(t *testing.T) {
	j := newJournal(t, 8)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 1})
	j.reading(protocol.Light, arms(2.88, 2.96), time.Second, func(*protocol.Reading) {})
	j.tells(protocol.Ended, protocol.Finished, "finished: 1 of 1 readings accepted, 0 set aside", 0, nil)
	n, err := report.NightOf(t.Context(), j.book, j.run)
	inZone(t, 0)
	if want := "The night, in local time (UTC+00:00)\n  finished: 1 of 1 readings accepted, 0 set aside\n  nothing else happened: no interruption, no hold, no doubt\n"; err != nil || n.Text() != want {
		t.Errorf("%v\n%s", err, n.Text())
	}
}
