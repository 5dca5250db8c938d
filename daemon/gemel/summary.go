package main

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"io"
	"slices"
	"strings"
	"text/tabwriter"

	"gemel/daemon/logbook"
	"gemel/daemon/report"
	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan/estimate"
)

// summary is a run at a glance: what was counted at each point, sums over the accepted readings.
type summary struct {
	Run       protocol.RunID `json:"run"`
	Title     string         `json:"title"`
	State     protocol.State `json:"state"`
	Reason    string         `json:"reason"`
	Accepted  int            `json:"readings_accepted"`
	SetAside  int            `json:"readings_set_aside"`
	Simulated *int           `json:"simulated"`
	Points    []pointRow     `json:"points"`
	Dark      *pointRow      `json:"dark"`
	Most      *pointRow      `json:"most_coincident"` // null without a coincidence channel
	// As gemel report gives them; no results where the recipe asks for none.
	Results []estimate.Result `json:"results"`
	Night   *report.Night     `json:"night"`

	axes     []string
	channels []string
}

type pointRow struct {
	Point  *int                  `json:"point"`
	Angles map[string]unit.Angle `json:"target_deg"`
	Visits int                   `json:"visits"`
	Gate   protocol.Seconds      `json:"gate_s"`
	Counts map[string]uint64     `json:"counts"`
}

// summarise reads a run back from the logbook: what is printed is what is written.
func summarise(ctx context.Context, book *logbook.Book, run protocol.RunID) (*summary, error) {
	row, err := book.Run(ctx, run)
	if err != nil {
		return nil, err
	}
	s := &summary{Run: run, Title: row.Title, State: row.State, Reason: row.Reason, Simulated: row.Simulated, Points: []pointRow{}}
	byPoint := map[int]*pointRow{}
	for r, err := range book.Readings(ctx, run) {
		if err != nil {
			return nil, err
		}
		if !r.Accepted {
			s.SetAside++
			continue
		}
		if r.Kind == protocol.Check {
			continue
		}
		s.Accepted++
		var to *pointRow
		switch {
		case r.Kind == protocol.Dark:
			if s.Dark == nil {
				s.Dark = newRow(nil)
			}
			to = s.Dark
		case r.Point == nil:
			continue
		default:
			if to = byPoint[*r.Point]; to == nil {
				to = newRow(r.Point)
				byPoint[*r.Point] = to
			}
			for _, a := range r.Angles {
				to.Angles[a.Axis] = a.Target
				s.axes = note(s.axes, a.Axis)
			}
		}
		to.Visits++
		to.Gate += r.Gate
		for _, c := range r.Counts {
			to.Counts[c.Channel] += c.Counts
			s.channels = note(s.channels, c.Channel)
		}
	}
	for _, p := range byPoint {
		s.Points = append(s.Points, *p)
	}
	slices.SortFunc(s.Points, func(a, b pointRow) int { return cmp.Compare(*a.Point, *b.Point) })
	return s, nil
}

// takeMorning works out what gemel report tells of the run.
func (s *summary) takeMorning(ctx context.Context, book *logbook.Book) error {
	all, err := report.All(ctx, book, s.Run, report.Options{})
	if err != nil && !errors.Is(err, report.ErrNoResult) {
		return err
	}
	night, err := report.NightOf(ctx, book, s.Run)
	if err != nil {
		return err
	}
	s.Results, s.Night = append([]estimate.Result{}, all...), &night
	return nil
}

func newRow(point *int) *pointRow {
	return &pointRow{Point: point, Angles: map[string]unit.Angle{}, Counts: map[string]uint64{}}
}

func note(list []string, name string) []string {
	if slices.Contains(list, name) {
		return list
	}
	return append(list, name)
}

// drop takes a channel out that is no amount, such as the one that numbers gates.
func (s *summary) drop(tag string) {
	s.channels = slices.DeleteFunc(s.channels, func(c string) bool { return c == tag })
	for _, p := range s.Points {
		delete(p.Counts, tag)
	}
	if s.Dark != nil {
		delete(s.Dark.Counts, tag)
	}
}

// findMost names the point with the highest rate of one channel.
func (s *summary) findMost(channel string) {
	best := -1.0
	for i, p := range s.Points {
		if rate := float64(p.Counts[channel]) / p.Gate.Duration().Seconds(); rate > best {
			best, s.Most = rate, &s.Points[i]
		}
	}
}

// moved lists the axes that differ between points; the others stand in the sentence.
func (s *summary) moved() (moving, still []string) {
	for _, axis := range s.axes {
		differs := false
		for _, p := range s.Points {
			differs = differs || p.Angles[axis] != s.Points[0].Angles[axis]
		}
		if differs {
			moving = append(moving, axis)
		} else {
			still = append(still, axis)
		}
	}
	return moving, still
}

func (s *summary) print(w io.Writer, coincidence string) error {
	var b strings.Builder
	fmt.Fprintf(&b, "Run %s, %q: %s.", s.Run, s.Title, s.Reason)
	if s.Simulated != nil {
		fmt.Fprintf(&b, " Simulated, %d bench seconds in a real one.", *s.Simulated)
	}
	moving, still := s.moved()
	if s.Most != nil && len(s.Points) > 1 {
		var where []string
		for _, axis := range moving {
			where = append(where, fmt.Sprintf("%s %s deg", axis, s.Most.Angles[axis].Fixed(3)))
		}
		fmt.Fprintf(&b, "\nMost %s at %s: %.4g in a second.", coincidence, strings.Join(where, ", "), float64(s.Most.Counts[coincidence])/s.Most.Gate.Duration().Seconds())
	}
	if len(still) > 0 && len(s.Points) > 0 {
		var where []string
		for _, axis := range still {
			where = append(where, fmt.Sprintf("%s %s deg", axis, s.Points[0].Angles[axis].Fixed(3)))
		}
		fmt.Fprintf(&b, "\nNot moved: %s.", strings.Join(where, ", "))
	}
	if _, err := io.WriteString(w, b.String()+"\n\n"); err != nil {
		return err
	}
	t := tabwriter.NewWriter(w, 0, 0, 2, ' ', tabwriter.AlignRight)
	head := []string{"point"}
	for _, axis := range moving {
		head = append(head, axis+" / deg")
	}
	head = append(head, "visits", "time / s")
	for _, c := range s.channels {
		head = append(head, c+" / counts")
	}
	fmt.Fprintln(t, strings.Join(head, "\t")+"\t")
	rows := s.Points
	if s.Dark != nil {
		rows = append(slices.Clone(rows), *s.Dark)
	}
	for _, p := range rows {
		cells := []string{"dark"}
		if p.Point != nil {
			cells[0] = fmt.Sprint(*p.Point)
		}
		for _, axis := range moving {
			if p.Point == nil {
				cells = append(cells, "")
				continue
			}
			cells = append(cells, p.Angles[axis].Fixed(3))
		}
		cells = append(cells, fmt.Sprint(p.Visits), fmt.Sprintf("%.3f", p.Gate.Duration().Seconds()))
		for _, c := range s.channels {
			cells = append(cells, fmt.Sprint(p.Counts[c]))
		}
		fmt.Fprintln(t, strings.Join(cells, "\t")+"\t")
	}
	return t.Flush()
}
