package report

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gemel/daemon/logbook"
	"gemel/protocol"
)

// Night is what happened to a run beside its numbers: what a reader of the results should know before
// believing them.
type Night struct {
	State         protocol.State   `json:"state"`
	Ended         string           `json:"ended"` // how, in the run's words; empty while it goes on
	Accepted      int              `json:"readings_accepted"`
	SetAside      int              `json:"readings_set_aside"` // taken and refused
	Planned       int              `json:"readings_planned"`   // 0: it never began
	LeftOut       int              `json:"visits_left_out"`    // by the schedule, a refinement's time or a person
	TakenAgain    int              `json:"taken_again"`
	GivenUp       int              `json:"given_up"` // visits
	Interruptions []Happening      `json:"interruptions"`
	Holds         []Hold           `json:"holds"`
	Doubts        []Happening      `json:"doubts"`
	Cuts          []Happening      `json:"cuts"` // why visits were left out
	Troubles      []Happening      `json:"troubles"`
	Bench         []Happening      `json:"bench_troubles"` // outside any run, from the end of the run before on
	Earlier       []EarlierOfNight `json:"earlier_values"` // of other runs' results, that points were made of
	Notes         []NoteOfNight    `json:"notes"`          // that people wrote

	run    protocol.RunID
	began  protocol.Time // the first entry's
	looked protocol.Time // when the bench was last looked at by a check

	beganAt int64 // the sequence of the entry that says that it began; 0: it did not
}

// Happening is one event.
type Happening struct {
	At   protocol.Time `json:"at"`
	Text string        `json:"text"`
}

// Hold is a stretch in which the run waited.
type Hold struct {
	From protocol.Time  `json:"from"`
	To   *protocol.Time `json:"to"` // null: it still holds
	Why  []string       `json:"why"`
}

// EarlierOfNight is a value that was taken from another run.
type EarlierOfNight struct {
	Kind  string         `json:"kind"`
	Of    string         `json:"of"` // axis or setting
	Title string         `json:"title"`
	Run   protocol.RunID `json:"run"`
	Value float64        `json:"value"` // degrees, or the setting's unit
	U     float64        `json:"standard_uncertainty"`
	Unit  string         `json:"unit"` // empty: the setting's
}

// NoteOfNight is what somebody wrote on the run.
type NoteOfNight struct {
	At   protocol.Time `json:"at"`
	Who  string        `json:"who"`
	Text string        `json:"text"`
}

// NightOf reads a run's journal and notes.
func NightOf(ctx context.Context, book *logbook.Book, run protocol.RunID) (Night, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return Night{}, err
	}
	n := Night{run: run, began: row.QueuedAt, State: row.State, Bench: []Happening{}, Interruptions: []Happening{}, Holds: []Hold{}, Doubts: []Happening{}, Cuts: []Happening{}, Troubles: []Happening{}, Earlier: []EarlierOfNight{}, Notes: []NoteOfNight{}}
	if err := each(ctx, book, run, n.add); err != nil {
		return Night{}, err
	}
	if err := n.addBench(ctx, book, row); err != nil {
		return Night{}, err
	}
	taken, _, err := book.Taken(ctx, run)
	if err != nil {
		return Night{}, err
	}
	for _, v := range taken {
		one := EarlierOfNight{Kind: v.Kind, Of: v.Axis + v.Setting, Title: v.From, Run: v.Run, U: v.U}
		switch {
		case v.Angle != nil:
			one.Value, one.Unit = v.Angle.Degrees(), "deg"
		case v.Value != nil:
			one.Value = *v.Value
		}
		n.Earlier = append(n.Earlier, one)
	}
	notes, err := book.Notes(ctx, run)
	if err != nil {
		return Night{}, err
	}
	for _, one := range notes {
		n.Notes = append(n.Notes, NoteOfNight{one.At, one.Who, one.Text})
	}
	return n, nil
}

// eveningBefore is how long before the run was asked for troubles of the bench belong to its night.
const eveningBefore = 12 * time.Hour

// addBench takes in what happened to the bench outside any run: since the run before ended, and until
// this one did. It goes by the order of commits: the clock of a simulated bench may run ahead of the
// wall's, by which the bench's own events are dated.
func (n *Night) addBench(ctx context.Context, book *logbook.Book, row logbook.RunRow) error {
	lastOf := func(run protocol.RunID) (int64, error) {
		sequence, err := book.Last(ctx, run)
		if err != nil {
			return 0, err
		}
		id, _, err := book.Position(ctx, run, sequence)
		return id, err
	}
	began, _, err := book.Position(ctx, row.Run, max(1, n.beganAt))
	if err != nil {
		return err
	}
	before := row.QueuedAt.Add(-eveningBefore)
	from, to := int64(0), int64(math.MaxInt64)
	if row.State.Final() {
		if to, err = lastOf(row.Run); err != nil {
			return err
		}
	}
	runs, err := book.Runs(ctx)
	if err != nil {
		return err
	}
	for _, r := range runs {
		if r.Run == row.Run || r.StartedAt.IsZero() || !r.EndedAt.After(before) {
			continue
		}
		id, err := lastOf(r.Run)
		if err != nil {
			return err
		}
		if id < began {
			from = max(from, id)
		}
	}
	return each(ctx, book, protocol.BenchRun, func(e protocol.Entry) error {
		var ev protocol.Event
		if e.Kind != protocol.EventEntry {
			return nil
		}
		if err := json.Unmarshal(e.Body, &ev); err != nil {
			return err
		}
		if wrong := ev.Kind == protocol.Trouble || ev.Kind == protocol.Interrupted || ev.Kind == protocol.Doubted; !wrong || ev.At.Before(before) {
			return nil
		}
		id, _, err := book.Position(ctx, protocol.BenchRun, e.Sequence)
		if err == nil && id > from && id < to {
			n.Bench = append(n.Bench, Happening{ev.At, ev.Text})
		}
		return err
	})
}

// add takes one entry in.
func (n *Night) add(e protocol.Entry) error {
	switch e.Kind {
	case protocol.ReadingEntry:
		var r struct {
			Kind     protocol.ReadingKind `json:"kind"`
			Accepted bool                 `json:"accepted"`
			EndedAt  protocol.Time        `json:"ended_at"`
		}
		if err := json.Unmarshal(e.Body, &r); err != nil {
			return err
		}
		switch {
		case r.Kind == protocol.Check:
			n.looked = r.EndedAt
		case r.Accepted:
			n.Accepted++
		default:
			n.SetAside++
		}
	case protocol.EventEntry:
		var ev protocol.Event
		if err := json.Unmarshal(e.Body, &ev); err != nil {
			return err
		}
		n.event(ev)
	}
	return nil
}

func (n *Night) event(ev protocol.Event) {
	number := func(key string) int { v, _ := ev.Detail[key].(float64); return int(v) }
	here := Happening{ev.At, ev.Text}
	switch ev.Kind {
	case protocol.Began:
		n.Planned = number("readings_planned")
		n.beganAt = ev.Sequence
	case protocol.Interrupted:
		n.Interruptions = append(n.Interruptions, here)
	case protocol.Doubted:
		n.Doubts = append(n.Doubts, here)
	case protocol.Trouble, protocol.GuardBroken:
		n.Troubles = append(n.Troubles, here)
	case protocol.TakenAgain:
		n.TakenAgain++
	case protocol.SetAside:
		if left := number("left_out"); left > 0 {
			n.LeftOut += left
			n.Cuts = append(n.Cuts, here)
		} else {
			n.GivenUp++
			n.Troubles = append(n.Troubles, here)
		}
	case protocol.Ended:
		n.Ended = ev.Text
	}
	// A hold begins with the first event that leaves the run holding, and ends with the first that does not.
	open := len(n.Holds) > 0 && n.Holds[len(n.Holds)-1].To == nil
	switch {
	case ev.State == "":
	case ev.State == protocol.Holding && open:
		if ev.Kind == protocol.Held || ev.Kind == protocol.Interrupted || ev.Kind == protocol.GuardBroken {
			last := &n.Holds[len(n.Holds)-1]
			last.Why = append(last.Why, ev.Text)
		}
	case ev.State == protocol.Holding:
		n.Holds = append(n.Holds, Hold{From: ev.At, Why: []string{ev.Text}})
	case open:
		to := ev.At
		n.Holds[len(n.Holds)-1].To = &to
	}
}

// listed is how many happenings of a kind are printed; the JSON has them all.
const listed = 12

// Text is the night for a person.
func (n Night) Text() string {
	var b strings.Builder
	fmt.Fprintf(&b, "The night, in local time (%s)\n", zone(n.began))
	line := func(format string, a ...any) { fmt.Fprintf(&b, "  "+format+"\n", a...) }
	how := n.howItEnded()
	if how == "" {
		how = "by the last entry it is " + string(n.State) // whoever wrote it may be dead
	}
	switch {
	case n.Planned == 0:
		how += "; it never began"
	case !strings.Contains(how, "readings accepted"):
		how += fmt.Sprintf("; %d of %d readings accepted", n.Accepted, n.Planned)
	}
	line("%s", how)
	if n.LeftOut > 0 {
		line("%d of %d visits left out", n.LeftOut, max(n.Planned, n.LeftOut))
	}
	list := func(what string, all []Happening) {
		for i, h := range all {
			if i == listed {
				line("… and %d more like these; --json has them all", len(all)-listed)
				break
			}
			line("%s  %s%s", n.when(h.At), what, h.Text)
		}
	}
	list("", n.Cuts)
	alone, holds := n.onceEach()
	list("", alone)
	for _, h := range holds {
		line("%s", h.sentence(n.when))
	}
	list("doubt: ", n.Doubts)
	list("", n.Troubles)
	list("at the bench: ", n.Bench)
	if n.TakenAgain+n.SetAside+n.GivenUp > 0 {
		line("taken again: %d; readings set aside: %d; visits given up: %d", n.TakenAgain, n.SetAside, n.GivenUp)
	}
	for _, v := range n.Earlier {
		unit := v.Unit
		if unit == "" {
			unit = "in the setting's unit"
		}
		line("%s of %s taken from %q, run %s: %s, u %s %s", v.Kind, v.Of, v.Title, v.Run, plain(v.Value), strconv.FormatFloat(v.U, 'g', 2, 64), unit)
	}
	for _, one := range n.Notes {
		line("note of %s, %s: %s", one.Who, n.when(one.At), one.Text)
	}
	if n.quiet() {
		line("nothing else happened: no interruption, no hold, no doubt")
	}
	return b.String()
}

func (n Night) quiet() bool {
	return n.LeftOut+n.TakenAgain+n.SetAside+n.GivenUp+len(n.Interruptions)+len(n.Holds)+len(n.Doubts)+len(n.Troubles)+len(n.Bench)+len(n.Earlier)+len(n.Notes) == 0
}

// onceEach tells an interruption that left the run holding with its hold, or alone where that lasted
// no second.
func (n Night) onceEach() (alone []Happening, holds []Hold) {
	alone = slices.Clone(n.Interruptions)
	for _, h := range n.Holds {
		at := slices.IndexFunc(alone, func(i Happening) bool { return i.At.Equal(h.From.Time) && i.Text == h.Why[0] })
		switch {
		case at < 0:
		case len(h.Why) == 1 && h.To != nil && h.To.Sub(h.From.Time) < time.Second:
			continue
		default:
			alone = slices.Delete(alone, at, at+1)
		}
		holds = append(holds, h)
	}
	return alone, holds
}

// howItEnded is how, in the run's words. Where a hold's patience was over, what it was for is told as
// what it was: nobody knows whether it still stands.
func (n Night) howItEnded() string {
	const unmended = "failed: it did not mend within "
	if n.State != protocol.Failed || !strings.HasPrefix(n.Ended, unmended) || len(n.Holds) == 0 {
		return n.Ended
	}
	within, _, _ := strings.Cut(strings.TrimPrefix(n.Ended, unmended), ";")
	last := n.Holds[len(n.Holds)-1]
	why := strings.TrimPrefix(last.Why[len(last.Why)-1], "held: ")
	how := fmt.Sprintf("failed: given up after a hold of %s without a change, which began at %s and was for: %s; ", within, n.when(last.From), why)
	if n.looked.After(last.From.Time) {
		return how + "the last look at it was at " + n.when(n.looked)
	}
	return how + "no look after that is written"
}

// when is a time for a person: local, with its zone where that is not the one that the head names.
func (n Night) when(t protocol.Time) string {
	text := t.Local().Format(time.DateTime)
	if z := zone(t); z != zone(n.began) {
		text += " " + z
	}
	return text
}

func zone(t protocol.Time) string { return t.Local().Format("UTC-07:00") }
