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

func TestAQuietNightSaysSo(t *testing.T) {
	j := newJournal(t, 8)
	j.tells(protocol.Began, protocol.Running, "began", 0, map[string]any{"readings_planned": 1})
	j.reading(protocol.Light, arms(2.88, 2.96), time.Second, func(*protocol.Reading) {})
	j.tells(protocol.Ended, protocol.Finished, "finished: 1 of 1 readings accepted, 0 set aside", 0, nil)
	n, err := report.NightOf(t.Context(), j.book, j.run)
	if want := "The night\n  finished: 1 of 1 readings accepted, 0 set aside\n  nothing else happened: no interruption, no hold, no doubt\n"; err != nil || n.Text() != want {
		t.Errorf("%v\n%s", err, n.Text())
	}
}
