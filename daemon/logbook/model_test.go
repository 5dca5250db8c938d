package logbook

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"slices"
	"strings"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/protocol/unit"

	"pgregory.net/rapid"
)

// fixed are the views that other people's tools rely on, with their first columns.
var fixed = map[string]string{
	"run":             "run, title, state, reason, started_at, ended_at, recipe_text, bench_text, version, simulated",
	"reading":         "run, sequence, point, visit, kind, accepted, reason, doubtful, doubt, started_at, gate_set_s, gate_s",
	"reading_angle":   "run, sequence, axis, target_deg, before_deg, after_deg",
	"reading_setting": "run, sequence, name, target, before, after, unit",
	"reading_sensor":  "run, sequence, sensor, minimum, mean, maximum, samples, unit",
	"reading_count":   "run, sequence, channel, counts",
	"event":           "run, sequence, at, kind, text, detail",
	"note":            "run, at, who, text",
	"reading_slice":   "run, sequence, slice, gate_set_s, gate_s, channel, counts, raw", // ours
}

func TestViewsHaveTheirFixedColumnsFirst(t *testing.T) {
	b := openBook(t, t.TempDir())
	for view, want := range fixed {
		var got string
		if err := b.readers.QueryRow(`SELECT group_concat(name, ', ') FROM pragma_table_info(?)`, view).Scan(&got); err != nil {
			t.Fatal(err)
		}
		if got != want && !strings.HasPrefix(got, want+", ") {
			t.Errorf("%s: %s; want %s first", view, got, want)
		}
	}
}

// model is what the logbook should hold, in plain slices.
type model struct {
	headers []Header
	entries []protocol.Entry // in the order of commits
	bodies  []any            // protocol.Reading, protocol.Event, or nil
	notes   []Note
}

func (m *model) last(run protocol.RunID) (last int64) {
	for _, e := range m.entries {
		if e.Run == run {
			last = max(last, e.Sequence)
		}
	}
	return last
}

func (m *model) known(run protocol.RunID) bool {
	return run == protocol.BenchRun || slices.ContainsFunc(m.headers, func(h Header) bool { return h.Run == run })
}

func (m *model) find(run protocol.RunID, sequence int64) *protocol.Entry {
	for i, e := range m.entries {
		if e.Run == run && e.Sequence == sequence {
			return &m.entries[i]
		}
	}
	return nil
}

// rows is what a fixed view should show, one line a row, sorted.
func (m *model) rows(view string) []string {
	var lines []string
	row := func(cells ...any) { lines = append(lines, line(cells)) }
	if view == "run" {
		for _, h := range m.headers {
			var state, reason, started, ended any
			for _, body := range m.bodies {
				e, ok := body.(protocol.Event)
				if !ok || e.Run != h.Run {
					continue
				}
				if e.State != "" {
					state, reason = string(e.State), e.Text
				}
				if e.Kind == protocol.Began && started == nil {
					started = e.At.String()
				}
				if e.Kind == protocol.Ended {
					ended = e.At.String()
				}
			}
			row(string(h.Run), h.Title, state, reason, started, ended, h.RecipeText, h.BenchText, h.Version, orNull(h.Simulated))
		}
	}
	if view == "note" {
		for _, n := range m.notes {
			row(string(n.Run), "-", n.Who, n.Text)
		}
	}
	for _, body := range m.bodies {
		switch b := body.(type) {
		case protocol.Event:
			if view == "event" {
				var detail any
				if b.Detail != nil {
					text, _ := json.Marshal(b.Detail)
					detail = string(text)
				}
				row(string(b.Run), b.Sequence, b.At.String(), string(b.Kind), b.Text, detail)
			}
		case protocol.Reading:
			run, sequence := string(b.Run), b.Sequence
			switch view {
			case "reading":
				var doubt any
				if whys := m.doubts(b); whys != nil {
					doubt = strings.Join(whys, "; ")
				}
				row(run, sequence, orNull(b.Point), orNull(b.Visit), string(b.Kind), zeroOne(b.Accepted), b.Reason, zeroOne(doubt != nil), doubt,
					b.StartedAt.String(), b.GateSet.Duration().Seconds(), b.Gate.Duration().Seconds())
			case "reading_angle":
				for _, a := range b.Angles {
					row(run, sequence, a.Axis, a.Target.Degrees(), a.Before.Degrees(), a.After.Degrees())
				}
			case "reading_setting":
				for _, s := range b.Settings {
					row(run, sequence, s.Name, s.Target, s.Before, s.After, s.Unit)
				}
			case "reading_sensor":
				for _, s := range b.Sensors {
					row(run, sequence, s.Sensor, s.Minimum, s.Mean, s.Maximum, int64(s.Samples), s.Unit)
				}
			case "reading_count":
				for _, c := range b.Counts {
					row(run, sequence, c.Channel, int64(c.Counts))
				}
			case "reading_slice":
				for i, s := range b.Slices {
					for _, c := range s.Counts {
						row(run, sequence, int64(i+1), s.GateSet.Duration().Seconds(), s.Gate.Duration().Seconds(), c.Channel, int64(c.Counts), s.Raw)
					}
				}
			}
		}
	}
	slices.Sort(lines)
	return lines
}

func (m *model) doubts(r protocol.Reading) (whys []string) {
	for _, body := range m.bodies {
		e, ok := body.(protocol.Event)
		if ok && e.Kind == protocol.Doubted && e.Run == r.Run && e.Detail["from_sequence"].(int64) <= r.Sequence && r.Sequence <= e.Detail["to_sequence"].(int64) {
			whys = append(whys, e.Detail["why"].(string))
		}
	}
	return whys
}

// line prints cells so that two rows are equal when their lines are. Numbers are compared to 13
// digits: SQLite's reading of a decimal may differ from Go's in the last bits.
func line(cells []any) string {
	var b strings.Builder
	for _, c := range cells {
		switch c := c.(type) {
		case nil:
			b.WriteString("null")
		case int64:
			fmt.Fprintf(&b, "integer %d", c)
		case float64:
			fmt.Fprintf(&b, "real %.12e", c+0) // SQLite has no minus zero
		case string:
			fmt.Fprintf(&b, "%q", c)
		default:
			panic(fmt.Sprintf("a cell of type %T", c))
		}
		b.WriteString(" | ")
	}
	return b.String()
}

func orNull(n *int) any {
	if n == nil {
		return nil
	}
	return int64(*n)
}

func zeroOne(b bool) int64 {
	if b {
		return 1
	}
	return 0
}

// shown reads the fixed columns of a view as lines.
func shown(b *Book, view string) ([]string, error) {
	columns := fixed[view]
	if view == "note" {
		columns = "run, '-' AS at, who, text" // the wall clock's; TestNotes looks at it
	}
	rows, err := b.readers.Query("SELECT " + columns + " FROM " + view)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var lines []string
	cells := make([]any, strings.Count(columns, ",")+1)
	pointers := make([]any, len(cells))
	for i := range cells {
		pointers[i] = &cells[i]
	}
	for rows.Next() {
		if err := rows.Scan(pointers...); err != nil {
			return nil, err
		}
		lines = append(lines, line(cells))
	}
	slices.Sort(lines)
	return lines, rows.Err()
}

var (
	someText   = rapid.StringOfN(rapid.Rune(), 0, 12, -1)
	someName   = rapid.SampledFrom([]string{"signal", "idler", "pair", "pump_power", "Fühler"})
	someFloat  = rapid.Float64Range(-1e9, 1e9)
	someAngle  = rapid.Map(rapid.Int64Range(-360e6, 360e6), func(i int64) unit.Angle { return unit.Angle(i) * unit.Degree / 1e6 }) // what JSON holds exactly
	someCounts = rapid.SliceOfN(rapid.Custom(func(t *rapid.T) protocol.Count {
		return protocol.Count{Channel: someName.Draw(t, "channel"), Counts: rapid.Uint64Range(0, 1<<63-1).Draw(t, "counts")}
	}), 0, 3)
	someSeconds = rapid.Map(rapid.Int64Range(0, 1e13), func(i int64) protocol.Seconds { return protocol.Seconds(i) })
	someTime    = rapid.Map(rapid.Int64Range(0, 1e15), func(i int64) protocol.Time { return protocol.Time{Time: evening.Add(time.Duration(i))} })
	someState   = rapid.SampledFrom([]protocol.State{"", "", protocol.Queued, protocol.Running, protocol.Holding, protocol.Finished, protocol.Stopped, protocol.Failed})
	someEvent   = rapid.SampledFrom([]protocol.EventKind{protocol.Began, protocol.Held, protocol.WentOn, protocol.Trouble, protocol.OperatorDid, protocol.Ended})
	someIndex   = rapid.Ptr(rapid.IntRange(0, 1000), true)
	someRun     = rapid.SampledFrom([]protocol.RunID{"-", "r1", "r2", "r3", "r4"})
)

func drawReading(t *rapid.T, h protocol.Head) protocol.Reading {
	r := protocol.Reading{
		Head:  h,
		Kind:  rapid.SampledFrom([]protocol.ReadingKind{protocol.Light, protocol.Dark, protocol.Background, protocol.Reference, protocol.Check}).Draw(t, "kind"),
		Point: someIndex.Draw(t, "point"), Visit: someIndex.Draw(t, "visit"),
		Accepted: rapid.Bool().Draw(t, "accepted"), Reason: someText.Draw(t, "reason"),
		StartedAt: someTime.Draw(t, "started"), EndedAt: someTime.Draw(t, "ended"),
		GateSet: someSeconds.Draw(t, "gate set"), Gate: someSeconds.Draw(t, "gate"),
		Angles: rapid.SliceOfN(rapid.Custom(func(t *rapid.T) protocol.Angle {
			return protocol.Angle{Axis: someName.Draw(t, "axis"), Target: someAngle.Draw(t, "target"), Before: someAngle.Draw(t, "before"), After: someAngle.Draw(t, "after"), Proof: "proved"}
		}), 0, 2).Draw(t, "angles"),
		Settings: rapid.SliceOfN(rapid.Custom(func(t *rapid.T) protocol.Setting {
			return protocol.Setting{Name: someName.Draw(t, "setting"), Target: someFloat.Draw(t, "target"), Before: someFloat.Draw(t, "before"), After: someFloat.Draw(t, "after"), Unit: "ps"}
		}), 0, 2).Draw(t, "settings"),
		Sensors: rapid.SliceOfN(rapid.Custom(func(t *rapid.T) protocol.Sensor {
			return protocol.Sensor{Sensor: someName.Draw(t, "sensor"), Minimum: someFloat.Draw(t, "minimum"), Mean: someFloat.Draw(t, "mean"), Maximum: someFloat.Draw(t, "maximum"),
				Samples: rapid.IntRange(0, 1e6).Draw(t, "samples"), Unit: "mW"}
		}), 0, 2).Draw(t, "sensors"),
		Counts: someCounts.Draw(t, "counts"),
		Slices: rapid.SliceOfN(rapid.Custom(func(t *rapid.T) protocol.Slice {
			return protocol.Slice{GateSet: someSeconds.Draw(t, "gate set"), Gate: someSeconds.Draw(t, "gate"), Counts: someCounts.Draw(t, "counts"), Raw: someText.Draw(t, "raw")}
		}), 0, 3).Draw(t, "slices"),
	}
	if n := len(r.Slices); n > 0 {
		r.Slices[n-1].Counts = r.Counts // as a tag channel's, which are not summed
	}
	if rapid.Bool().Draw(t, "null lists") { // as a driver's nil slices come out in JSON
		r.Angles, r.Settings, r.Sensors, r.Counts = nil, nil, nil, nil
		for i := range r.Slices {
			r.Slices[i].Counts = nil
		}
		if len(r.Slices) == 0 {
			r.Slices = nil
		}
	}
	return r
}

func drawEvent(t *rapid.T, h protocol.Head) protocol.Event {
	e := protocol.Event{Head: h, Kind: someEvent.Draw(t, "event"), Text: someText.Draw(t, "text"), State: someState.Draw(t, "state")}
	if rapid.Bool().Draw(t, "has detail") {
		e.Detail = map[string]any{"axis": someName.Draw(t, "axis"), "where": someFloat.Draw(t, "where"), "of": []any{someText.Draw(t, "of"), nil, true}}
	}
	if rapid.IntRange(0, 3).Draw(t, "doubts") == 0 {
		from := rapid.Int64Range(1, 12).Draw(t, "from")
		e.Kind, e.Detail = protocol.Doubted, map[string]any{"from_sequence": from, "to_sequence": from + rapid.Int64Range(0, 6).Draw(t, "more"), "why": "b" + someText.Draw(t, "why")}
	}
	return e
}

func drawEntry(t *rapid.T, run protocol.RunID, sequence int64) (protocol.Entry, any) {
	h := head(protocol.ReadingSchema, run, sequence)
	h.At = someTime.Draw(t, "at")
	switch rapid.IntRange(0, 9).Draw(t, "entry") {
	case 0:
		h.Schema = protocol.PointSchema
		return entry(protocol.PointEntry, h, protocol.Points{Head: h, Grounds: "sweep", Points: []protocol.Point{{Point: 1}}}), nil
	case 1:
		h.Schema = protocol.ResultSchema
		return entry(protocol.ResultEntry, h, h), nil
	case 2, 3, 4:
		h.Schema = protocol.EventSchema
		e := drawEvent(t, h)
		return entry(protocol.EventEntry, h, e), e
	default:
		r := drawReading(t, h)
		return entry(protocol.ReadingEntry, h, r), r
	}
}

// TestLogbookIsItsModel does random things to a logbook and to plain slices, and compares every
// answer, and in the end every view.
func TestLogbookIsItsModel(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		dir, err := os.MkdirTemp("", "logbook-model-")
		if err != nil {
			t.Fatal(err)
		}
		defer os.RemoveAll(dir)
		b, err := Open(dir)
		if err != nil {
			t.Fatal(err)
		}
		defer func() { b.Close() }()
		ctx, m := context.Background(), &model{}

		keep := func(e protocol.Entry, body any) {
			m.entries, m.bodies = append(m.entries, e), append(m.bodies, body)
		}
		t.Repeat(map[string]func(*rapid.T){
			"new run": func(t *rapid.T) {
				h := header(someRun.Draw(t, "run"), rapid.SampledFrom([]string{"", "k1", "k2"}).Draw(t, "key"))
				h.Title, h.Simulated = someText.Draw(t, "title"), someIndex.Draw(t, "factor")
				e, body := drawEntry(t, h.Run, 1)
				existing, err := b.NewRun(ctx, h, e)
				var want protocol.RunID
				for _, other := range m.headers {
					if h.Key != "" && other.Key == h.Key {
						want = other.Run
					}
				}
				switch {
				case h.Run == protocol.BenchRun:
					if !errors.Is(err, ErrBody) {
						t.Fatalf("NewRun: %v; want %v", err, ErrBody)
					}
				case want != "":
					if err != nil || existing != want {
						t.Fatalf("NewRun: %q, %v; want %q", existing, err, want)
					}
				case m.known(h.Run):
					if !errors.Is(err, ErrDifferent) {
						t.Fatalf("NewRun: %v; want %v", err, ErrDifferent)
					}
				default:
					if err != nil || existing != "" {
						t.Fatalf("NewRun: %q, %v", existing, err)
					}
					m.headers = append(m.headers, h)
					keep(e, body)
				}
			},
			"append": func(t *rapid.T) {
				run := someRun.Draw(t, "run")
				sequence := m.last(run) + max(1, rapid.Int64Range(-3, 2).Draw(t, "ahead")) // mostly its turn
				e, body := drawEntry(t, run, sequence)
				err := b.Append(ctx, e)
				switch {
				case !m.known(run):
					if !errors.Is(err, ErrNoRun) {
						t.Fatalf("Append: %v; want %v", err, ErrNoRun)
					}
				case sequence != m.last(run)+1:
					if !errors.Is(err, ErrGap) {
						t.Fatalf("Append: %v; want %v", err, ErrGap)
					}
				default:
					if err != nil {
						t.Fatal(err)
					}
					keep(e, body)
				}
			},
			"append again": func(t *rapid.T) {
				if len(m.entries) == 0 {
					t.Skip("nothing there")
				}
				old := rapid.SampledFrom(m.entries).Draw(t, "entry")
				if err := b.Append(ctx, old); err != nil {
					t.Fatal(err)
				}
				other, _ := drawEntry(t, old.Run, old.Sequence)
				err := b.Append(ctx, other)
				if same := other.Kind == old.Kind && string(other.Body) == string(old.Body); same && err != nil || !same && !errors.Is(err, ErrDifferent) {
					t.Fatalf("Append of another: %v; want %v", err, ErrDifferent)
				}
			},
			"note": func(t *rapid.T) {
				n := Note{Run: someRun.Draw(t, "run"), Who: someText.Draw(t, "who"), Text: "n" + someText.Draw(t, "text")}
				err := b.AddNote(ctx, n.Run, n.Who, n.Text)
				if !m.known(n.Run) {
					if !errors.Is(err, ErrNoRun) {
						t.Fatalf("AddNote: %v; want %v", err, ErrNoRun)
					}
					return
				}
				if err != nil {
					t.Fatal(err)
				}
				m.notes = append(m.notes, n)
			},
			"close and open": func(t *rapid.T) {
				if err := b.Close(); err != nil {
					t.Fatal(err)
				}
				if b, err = Open(dir); err != nil {
					t.Fatal(err)
				}
			},
			"look for an entry": func(t *rapid.T) {
				run, sequence := someRun.Draw(t, "run"), rapid.Int64Range(0, 6).Draw(t, "sequence")
				id, found, err := b.Position(ctx, run, sequence)
				if err != nil {
					t.Fatal(err)
				}
				want := m.find(run, sequence)
				if found != (want != nil) || found && &m.entries[id-1] != want {
					t.Fatalf("Position(%s, %d) = %d, %t; want %v", run, sequence, id, found, want)
				}
			},
		})

		// Every way to read the journal gives the same entries.
		journal, err := b.After(ctx, 0, 1000)
		if err != nil {
			t.Fatal(err)
		}
		if len(journal) != len(m.entries) {
			t.Fatalf("%d entries; want %d", len(journal), len(m.entries))
		}
		for i, n := range journal {
			want := m.entries[i]
			if n.ID != int64(i+1) || n.ID != journal[i].ID || n.Entry.ID() != want.ID() || n.Kind != want.Kind || string(n.Body) != string(want.Body) {
				t.Fatalf("entry %d is %s %s; want %s %s", n.ID, n.Entry.ID(), n.Body, want.ID(), want.Body)
			}
		}
		for _, run := range []protocol.RunID{"-", "r1", "r2", "r3", "r4"} {
			after := rapid.Int64Range(0, 5).Draw(t, "after")
			got, err := b.Entries(ctx, run, after, 3)
			if err != nil {
				t.Fatal(err)
			}
			if want := min(3, max(0, m.last(run)-after)); int64(len(got)) != want {
				t.Fatalf("Entries(%s, %d, 3): %d; want %d", run, after, len(got), want)
			}
			for i, e := range got {
				if want := m.find(run, after+int64(i)+1); want == nil || string(e.Body) != string(want.Body) {
					t.Fatalf("Entries(%s, %d, 3)[%d] is %s", run, after, i, e.ID())
				}
			}
			if !m.known(run) {
				continue
			}
			var wanted []protocol.Reading
			for _, body := range m.bodies {
				if r, ok := body.(protocol.Reading); ok && r.Run == run {
					wanted = append(wanted, r)
				}
			}
			for r, err := range b.Readings(ctx, run) {
				if err != nil {
					t.Fatal(err)
				}
				if len(wanted) == 0 {
					t.Fatalf("%s: a reading too many: %d", run, r.Sequence)
				}
				got, _ := json.Marshal(r.Reading)
				want, _ := json.Marshal(wanted[0])
				if doubts := m.doubts(wanted[0]); string(got) != string(want) || r.Doubtful != (doubts != nil) || r.Doubt != strings.Join(doubts, "; ") {
					t.Fatalf("reading %s doubt %q; want %s doubt %q", got, r.Doubt, want, doubts)
				}
				wanted = wanted[1:]
			}
			if len(wanted) != 0 {
				t.Fatalf("%s: %d readings not seen", run, len(wanted))
			}
		}
		for view := range fixed {
			got, err := shown(b, view)
			if err != nil {
				t.Fatal(err)
			}
			if want := m.rows(view); !slices.Equal(got, want) {
				t.Fatalf("view %s shows\n%s\nwant\n%s", view, strings.Join(got, "\n"), strings.Join(want, "\n"))
			}
		}
		if faults := b.Verify(ctx); len(faults) != 0 {
			t.Fatalf("verify: %q", faults)
		}
	})
}

// A view that had to look at every entry to show one run would be slow after a year. Times are not
// a test; the query plans are.
func TestViewsFindARunWithoutScanningTheJournal(t *testing.T) {
	b := openBook(t, t.TempDir())
	for view := range fixed {
		rows, err := b.readers.Query("EXPLAIN QUERY PLAN SELECT * FROM " + view + " WHERE run = 'r1'")
		if err != nil {
			t.Fatal(err)
		}
		var plan []string
		for rows.Next() {
			var id, parent, unused int
			var step string
			if err := rows.Scan(&id, &parent, &unused, &step); err != nil {
				t.Fatal(err)
			}
			plan = append(plan, step)
			// json_each scans one body, and o is the few doubts of one reading.
			if strings.HasPrefix(step, "SCAN") && !strings.Contains(step, "VIRTUAL TABLE") && step != "SCAN o" {
				t.Errorf("%s: %s", view, step)
			}
		}
		if err := rows.Err(); err != nil {
			t.Fatal(err)
		}
		if len(plan) == 0 {
			t.Errorf("%s: no plan", view)
		}
		// Without these the newest of a run's readings would be parsed for each answer.
		for _, index := range map[string][]string{"run": {"event_by_kind", "event_with_state"}, "reading": {"event_of_doubt"}}[view] {
			if !slices.ContainsFunc(plan, func(step string) bool { return strings.Contains(step, index) }) {
				t.Errorf("%s does not use index %s: %q", view, index, plan)
			}
		}
	}
}
