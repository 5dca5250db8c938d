package recipe

import (
	"fmt"
	"math/big"
	"strconv"

	"gemel/drivers"
	"gemel/protocol/strict"
)

// Entry is one level of the sweep: the values of one axis or one setting.
type Entry struct {
	Axis    drivers.AxisName   // empty when it is a setting
	Setting drivers.DeviceName // empty when it is an axis
	// Values are the targets; of a conjugate they are what is added to where the partner goes, of an
	// earlier result what is added to it.
	Values      Values
	ConjugateOf drivers.AxisName // the other arm; empty: targets as written
	With        *Entry           // has as many values, and takes them in lock-step; nil: nothing

	stand        *stand // where an earlier result put it, once that is worked out
	nameAt, ofAt strict.Place
}

func readSweep(v strict.Value) []Entry {
	if v.Given() && v.IsList() && len(v.List(0, maxEntries)) == 0 && v.Good() {
		v.Fail("an empty list", "axes or settings in it, or no key \"sweep\" to count where everything stands")
		return nil
	}
	var entries []Entry
	seen := map[string]bool{}
	for _, item := range v.List(1, maxEntries) {
		m := item.Map()
		with := m.Opt("with")
		e, ok := readEntry(m, seen)
		if with.Given() {
			e.With = readWith(with, e, ok, seen)
			ok = ok && e.With != nil
		}
		if ok {
			entries = append(entries, e)
		}
	}
	return entries
}

// readWith reads what goes in lock-step with an entry; nil when there is something wrong with it.
func readWith(v strict.Value, leader Entry, leaderOK bool, seen map[string]bool) *Entry {
	m := v.Map()
	m.Refuse("a third in lock-step", "two: a further entry of the sweep nests instead", "with")
	e, ok := readEntry(m, seen)
	switch {
	case !ok || !leaderOK:
		return nil
	case e.Values.Len() != leader.Values.Len():
		v.Fail(fmt.Sprintf("%d values beside %d", e.Values.Len(), leader.Values.Len()), "as many: both are stepped together")
		return nil
	}
	return &e
}

// readEntry reads one axis or setting and its values. Names that were seen before are refused.
func readEntry(m strict.Map, seen map[string]bool) (e Entry, ok bool) {
	axis, setting, of := m.Opt("axis"), m.Opt("setting"), m.Opt("conjugate_of")
	var name strict.Value
	switch {
	case axis.Given() && setting.Given():
		setting.Fail("an axis and a setting in one entry", "one of them; a second entry nests inside the first")
	case axis.Given():
		name, e.Axis = axis, drivers.AxisName(axis.Token())
	case setting.Given():
		name, e.Setting = setting, drivers.DeviceName(setting.Token())
		if of.Given() {
			of.Fail("a setting as conjugate of an axis", "an arm")
		}
	case m.Given():
		m.NeedLike("axis", `"axis" or "setting", with its name`)
	}
	e.nameAt, e.ofAt = name.Place(), of.Place()
	e.ConjugateOf = drivers.AxisName(of.Token())
	e.Values = readValues(m, e.Axis != "", of.Given())
	m.Done()
	if !name.Good() || e.Values.Len() == 0 || of.Given() && !of.Good() {
		return e, false
	}
	if seen[name.Text()] {
		name.Fail(strconv.Quote(name.Text())+" a second time", "each axis and each setting in one entry")
		return e, false
	}
	seen[name.Text()] = true
	return e, true
}

// column is one axis or setting of the sweep, at the level that steps it.
type column struct {
	Entry
	level int
}

// columns lists what the sweep steps, outermost first, those in lock-step beside one another.
func (r *Recipe) columns() []column {
	var all []column
	for level, e := range r.Sweep {
		all = append(all, column{e, level})
		if e.With != nil {
			all = append(all, column{*e.With, level})
		}
	}
	return all
}

// column finds the column of an axis.
func (r *Recipe) column(axis drivers.AxisName) (column, bool) {
	for _, c := range r.columns() {
		if c.Axis == axis && axis != "" {
			return c, true
		}
	}
	return column{}, false
}

// Points is how many points the sweep has.
func (r *Recipe) Points() int { return int(r.points().Int64()) }

func (r *Recipe) points() *big.Int {
	n := big.NewInt(1)
	for _, e := range r.Sweep {
		n.Mul(n, big.NewInt(int64(max(e.Values.Len(), 1))))
	}
	return n
}

func (r *Recipe) visits() *big.Int {
	return new(big.Int).Mul(r.points(), big.NewInt(int64(r.Repeat.Times)))
}
