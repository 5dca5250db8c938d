package route

import (
	"fmt"
	"strings"

	"gemel/drivers"
	"gemel/protocol/unit"
)

// Conflict is a place or a leg that a keep-out forbids.
type Conflict struct {
	KeepOut string
	Axes    []drivers.AxisName // the axes the keep-out is about
	From    []unit.Angle       // where they begin, in the order of Axes
	To      []unit.Angle       // where they end; equal to From for a place
	text    string
}

func (c *Conflict) Error() string { return c.text }

// conflict describes how a leg, or a place that is its own end, offends a fence of the bench. The
// numbers wanted are the bench's, whatever the fence yielded.
func (b *bench) conflict(f fence, from, to []unit.Angle) *Conflict {
	c := &Conflict{KeepOut: f.name}
	moving := false
	var where []string
	for n := range f.count() {
		i := f.axis[n]
		c.Axes, c.From, c.To = append(c.Axes, b.axes[i].Name), append(c.From, from[i]), append(c.To, to[i])
		if from[i] == to[i] {
			where = append(where, fmt.Sprintf("%s at %s", b.axes[i].Name, from[i]))
		} else {
			where, moving = append(where, fmt.Sprintf("%s from %s to %s", b.axes[i].Name, from[i], to[i])), true
		}
	}
	var found, want string
	whole := b.fences[f.number]
	if f.band {
		allowance := f.margin + f.tol[0] + f.tol[1]
		low, high := f.sum(from, to, f.straight(from, to))
		found = fmt.Sprintf("%s %s", nearest(low, high), f.kind)
		want = fmt.Sprintf("%s or more (%s, and %s for margin and tolerances)", whole.reach, whole.reach-allowance, allowance)
	} else {
		found = "in a forbidden range"
		want = fmt.Sprintf("%s outside %s to %s", b.axes[f.axis[0]].Name, whole.low[0], whole.high[0])
		if f.pair {
			want += fmt.Sprintf(", or %s outside %s to %s", b.axes[f.axis[1]].Name, whole.low[1], whole.high[1])
		}
		want += ", margin and tolerances included"
	}
	if f.lifts {
		want += ", or the pump closed"
	}
	if moving {
		found += " on the way"
	}
	c.text = fmt.Sprintf("%s: %s; keep-out %q wants %s", strings.Join(where, ", "), found, f.name, want)
	return c
}
