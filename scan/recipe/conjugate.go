package recipe

import (
	"fmt"
	"math"
	"slices"

	"gemel/protocol"
	"gemel/protocol/unit"
	"gemel/scan"
)

// partners is where the partners go that belong to one conjugate column.
type partners struct {
	of, tilt int            // levels of the sweep that step the other arm and the crystal; tilt -1: not by a level of its own
	angle    [][]unit.Angle // by place of the tilt, then of the other arm
	none     [][]string     // why there is no partner; nil where all have one
	open     bool           // the other arm, or the tilt, stands provisionally
}

// at is where the partner goes at a point, given by its place on every level.
func (p partners) at(level []int) unit.Angle {
	k := 0
	if p.tilt >= 0 {
		k = level[p.tilt]
	}
	return p.angle[k][level[p.of]]
}

// empty is why no partner goes anywhere at a point; empty when one does.
func (p partners) empty(level []int) string {
	if p.none == nil {
		return ""
	}
	k := 0
	if p.tilt >= 0 {
		k = level[p.tilt]
	}
	return p.none[k][level[p.of]]
}

// roundPartner keeps targets that come from a model as short as a person would write them: a
// hundred-thousandth of a degree is finer than any arm, and the same on every machine.
func roundPartner(deg float64) unit.Angle { return unit.Degrees(math.Round(deg*1e5) / 1e5) }

// partners works out where the partners go that a conjugate column is to follow. Every direction is
// asked for once, whatever the number of points.
func (r *Recipe) partners(c column, f Facts) (p partners, findings []protocol.Finding) {
	axis, found := f.axis(c.Axis, c.nameAt)
	other, found2 := f.axis(c.ConjugateOf, c.ofAt)
	if found = append(found, found2...); len(found) > 0 {
		return p, found
	}
	fail := func(found, want string) (partners, []protocol.Finding) {
		return p, []protocol.Finding{c.ofAt.Finding(found, want)}
	}
	if roles := []string{axis.Role, other.Role}; !slices.Contains(roles, signalArm) || !slices.Contains(roles, idlerArm) {
		return fail(fmt.Sprintf("%s (%s) as conjugate of %s (%s)", axis.Name, axis.Role, other.Name, other.Role), "one arm as conjugate of the other")
	}
	of, ok := r.column(c.ConjugateOf)
	switch {
	case !ok:
		return fail(fmt.Sprintf("the conjugate of %s, which is not in the sweep", other.Name), fmt.Sprintf("an entry that says where it is, such as {axis: %s, at: 2 deg}", other.Name))
	case of.ConjugateOf != "":
		return fail(fmt.Sprintf("the conjugate of %s, which is a conjugate itself", other.Name), "an arm whose angles are written")
	case f.Conjugate == nil:
		return fail("a conjugate on a bench without optics", `blocks "optics" and "arms" in the bench file`)
	}
	p.of, p.tilt, p.open = of.level, -1, of.open()
	tilts, ok := r.tilts(f, &p)
	if !ok {
		return fail("a conjugate without the crystal's tilt", "an entry such as {axis: "+tiltName(f)+", at: 0 deg}: where the crystal stands decides where the partner goes")
	}
	arms := of.angles()
	lockStep := p.tilt == p.of
	if lockStep {
		p.tilt = -1
	}
	lowest, highest := c.offsets()
	var none, beyond int
	var firstNone, firstBeyond, want string
	reasons := make([][]string, 0, len(tilts))
	for i, tilt := range tilts {
		if lockStep && i > 0 {
			break
		}
		row, why := make([]unit.Angle, len(arms)), make([]string, len(arms))
		for k, arm := range arms {
			if lockStep {
				tilt = tilts[k]
			}
			deg, err := f.Conjugate(other.Role, arm.Degrees(), tilt.Degrees())
			if err != nil {
				why[k] = fmt.Sprintf("%s at %s, crystal tilted by %s: %v", other.Name, arm, tilt, err)
				if none++; none == 1 {
					firstNone = why[k]
				}
				continue
			}
			row[k] = roundPartner(deg)
			for _, offset := range []unit.Angle{lowest, highest} {
				if found, w, ok := reach(axis, row[k]+offset); !ok {
					if beyond++; beyond == 1 {
						firstBeyond, want = fmt.Sprintf("%s at %s, crystal tilted by %s: %s", other.Name, arm, tilt, found), w
					}
					break
				}
			}
		}
		p.angle, reasons = append(p.angle, row), append(reasons, why)
	}
	places := len(p.angle) * len(arms)
	if none > 0 {
		p.none = reasons
	}
	if p.open {
		return p, nil // nobody goes where this would be
	}
	if none == places {
		findings = append(findings, c.ofAt.Finding(fmt.Sprintf("%s (%d of %d places)", firstNone, none, places), "a place from which a partner leaves the crystal"))
	}
	if beyond > 0 {
		firstBeyond += of.from()
		findings = append(findings, c.ofAt.Finding(fmt.Sprintf("%s (%d of %d places)", firstBeyond, beyond, places), want))
	}
	return p, findings
}

// tilts lists the tilts of the crystal that the sweep has. It is not ok when nothing says where a
// crystal stands that can be tilted.
func (r *Recipe) tilts(f Facts, p *partners) ([]unit.Angle, bool) {
	name := tiltName(f)
	i := slices.IndexFunc(f.Axes, func(a scan.Axis) bool { return a.Role == crystalTilt })
	if i < 0 {
		return []unit.Angle{0}, true
	}
	if c, ok := r.column(f.Axes[i].Name); ok {
		p.tilt, p.open = c.level, p.open || c.open()
		return c.angles(), true
	}
	if r.Background != nil && string(r.Background.Turn) == name && f.Axes[i].Park != nil {
		return []unit.Angle{*f.Axes[i].Park}, true // a background's axis stands there while light is counted
	}
	return nil, false
}

func tiltName(f Facts) string {
	for _, a := range f.Axes {
		if a.Role == crystalTilt {
			return string(a.Name)
		}
	}
	return ""
}

// offsets are the least and the largest angle that is added to the partner's.
func (e Entry) offsets() (low, high unit.Angle) {
	first, _ := e.Values.at(0)
	last, _ := e.Values.at(e.Values.Len() - 1)
	return first.angle(), last.angle()
}

// angles lists an axis entry's values; of a conjugate, what is added.
func (e Entry) angles() []unit.Angle {
	var from unit.Angle
	if e.stand != nil {
		from = e.stand.angle
	}
	all := make([]unit.Angle, e.Values.Len())
	for k := range all {
		n, _ := e.Values.at(k)
		all[k] = from + n.angle()
	}
	return all
}
