package report

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strings"

	"gemel/daemon/logbook"
	"gemel/drivers"
	"gemel/protocol"
	"gemel/scan"
	"gemel/scan/estimate"
)

// Beside is what the pictures of a run show beside its results: readings, references and what happened
// to it. The zero value shows the results alone.
type Beside struct {
	night   Night
	plan    scan.Plan
	rows    estimate.Rows
	windowS float64
	pairs   map[string][2]string // coincidence channels, and the two that each is of
	tracks  [2]drivers.AxisName  // signal arm and idler arm; empty: there is none
	drift   *estimate.DriftTable // nil: fewer than two sets of references
	bad     []badSet
}

// badSet is a set of references that the run called bad.
type badSet struct {
	set, against int
	beyond       []string // quantities
}

// BesideOf reads what a run's pictures show beside its results, which are all.
func BesideOf(ctx context.Context, book *logbook.Book, run protocol.RunID, all []estimate.Result) (Beside, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return Beside{}, err
	}
	file, plan, err := planOf(ctx, book, row)
	if err != nil {
		return Beside{}, err
	}
	rows, err := rowsOf(ctx, book, row, plan)
	if err != nil {
		return Beside{}, err
	}
	constants := Constants(file)
	b := Beside{plan: plan, rows: rows, windowS: constants.Counter.Window.Value, pairs: constants.Counter.Pairs}
	for _, a := range file.Facts().Axes {
		switch a.Role {
		case "signal_arm":
			b.tracks[0] = a.Name
		case "idler_arm":
			b.tracks[1] = a.Name
		}
	}
	for _, r := range all {
		if r.Drift != nil {
			b.drift = r.Drift
		}
	}
	if plan.Reference != nil && b.drift == nil {
		if r, err := estimate.Drift(rows, constants, driftQuestion(rows, file, *plan.Reference)); err == nil {
			b.drift = r.Drift
		}
	}
	if b.night, err = NightOf(ctx, book, run); err != nil {
		return Beside{}, err
	}
	return b, each(ctx, book, run, func(e protocol.Entry) error {
		if e.Kind != protocol.EventEntry {
			return nil
		}
		var ev struct {
			Kind   protocol.EventKind `json:"kind"`
			Detail struct {
				Set     int               `json:"reference"`
				Against int               `json:"compared_with"`
				Changes []estimate.Change `json:"changes"`
			} `json:"detail"`
		}
		if err := json.Unmarshal(e.Body, &ev); err != nil || ev.Detail.Set == 0 || ev.Kind == protocol.Ended {
			return nil // a detail of another shape is another event's
		}
		one := badSet{set: ev.Detail.Set, against: ev.Detail.Against}
		for _, c := range ev.Detail.Changes {
			if c.Finding == estimate.Beyond {
				one.beyond = append(one.beyond, c.Quantity)
			}
		}
		if len(one.beyond) > 0 {
			b.bad = append(b.bad, one)
		}
		return nil
	})
}

// each goes through a run's entries.
func each(ctx context.Context, book *logbook.Book, run protocol.RunID, do func(protocol.Entry) error) error {
	const page = 500
	for after := int64(0); ; {
		entries, err := book.Entries(ctx, run, after, page)
		if err != nil {
			return err
		}
		for _, e := range entries {
			if err := do(e); err != nil {
				return fmt.Errorf("run %s: entry %d: %w", run, e.Sequence, err)
			}
			after = e.Sequence
		}
		if len(entries) < page {
			return nil
		}
	}
}

// title is what stands behind the run's name.
func (b Beside) title() string {
	if b.rows.Title == "" {
		return ""
	}
	return ", " + b.rows.Title
}

// plateau is the net coincidences per trigger count that an efficiency is made of, against the arm whose
// plateau it is, or where all readings count against time. Not ok where the readings are not at hand.
func (b Beside) plateau(r estimate.Result, number int) (p picture, ok bool) {
	if number >= len(b.plan.Results) || b.plan.Results[number].Kind != scan.Efficiency {
		return p, false
	}
	q := b.plan.Results[number]
	trigger, test := string(q.Trigger), string(q.UnderTest)
	both := ""
	for channel, of := range b.pairs {
		if of == [2]string{trigger, test} || of == [2]string{test, trigger} {
			both = channel
		}
	}
	p = picture{across: "minutes after the first reading", up: both + " per count of " + trigger, fromZero: true, grains: true}
	if q.PlateauOf != "" {
		p.across = string(q.PlateauOf) + " / deg"
	}
	var net, heralds float64
	var used []mark
	var first protocol.Time
	for _, one := range standing(b.rows, q.At).Readings {
		if one.Kind != protocol.Light || !one.Accepted || b.rows.Doubtful[one.Sequence] != "" {
			continue
		}
		if first.IsZero() {
			first = one.StartedAt
		}
		s, d, c, gate := countOf(one, trigger), countOf(one, test), countOf(one, both), one.Gate.Duration().Seconds()
		if !(s > 0) || !(gate > 0) {
			continue
		}
		at := one.StartedAt.Sub(first.Time).Minutes()
		if q.PlateauOf != "" {
			if at, ok = stoodAt(one, q.PlateauOf); !ok {
				continue
			}
		}
		known := s * d * b.windowS / gate
		m := mark{place{at, (c - known) / s}, math.Sqrt(math.Max(c, 1)*math.Max(1-c/s, 1/s)) / s, true}
		if _, is := slices.BinarySearch(r.Used, one.Sequence); is {
			m.hollow = false
			net, heralds, used = net+c-known, heralds+s, append(used, m)
		}
		p.points = append(p.points, m)
	}
	if len(used) == 0 {
		return p, false
	}
	mean := net / heralds
	low, high := used[0].x, used[0].x
	for _, m := range used {
		low, high = math.Min(low, m.x), math.Max(high, m.x)
		p.residuals = append(p.residuals, place{m.x, (m.y - mean) / m.u})
	}
	p.key = fmt.Sprintf("Before corrections. Filled circles: the %d readings that make the efficiency, hollow: the others, with what counting leaves open; line: %s over all of the filled", len(used), fixed(mean, 5))
	if q.PlateauOf != "" {
		if centre, ok := plateauCentre(r); ok {
			w := q.HalfWidth.Degrees()
			p.hairlines = []hairline{{centre - w, fixed(centre-w, 3)}, {centre, "middle " + fixed(centre, 4)}, {centre + w, fixed(centre+w, 3)}}
			low, high = centre-w, centre+w
			p.key += "; dotted: the plateau's middle and where it was agreed to end"
		}
	}
	p.fitted = []place{{low, mean}, {high, mean}}
	p.key += "; below: what the line leaves, in units of the uncertainty"
	return p, true
}

// plateauCentre is the mean of the middles by which a result's readings were chosen.
func plateauCentre(r estimate.Result) (deg float64, ok bool) {
	n := 0.
	for _, c := range r.Condition {
		if strings.HasPrefix(c.Name, "plateau's centre") && c.Value != nil {
			deg, n = deg+*c.Value, n+1
		}
	}
	return deg / math.Max(n, 1), n > 0
}

// stoodAt is where an axis stood in a reading, the mean of before and after.
func stoodAt(r protocol.Reading, axis drivers.AxisName) (deg float64, ok bool) {
	for _, a := range r.Angles {
		if a.Axis == string(axis) {
			return (a.Before.Degrees() + a.After.Degrees()) / 2, true
		}
	}
	return 0, false
}

func countOf(r protocol.Reading, channel string) float64 {
	for _, c := range r.Counts {
		if c.Channel == channel {
			return float64(c.Counts)
		}
	}
	return 0
}
