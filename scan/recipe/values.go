package recipe

import (
	"fmt"
	"math/big"
	"slices"
	"strings"

	"gemel/protocol/strict"
	"gemel/protocol/unit"
)

// Values are the targets of one entry, kept as the arithmetic that makes them or as they are
// listed, never expanded.
type Values struct {
	listed  []listed
	grid    *grid
	earlier *Earlier // what they are added to; nil: they are targets themselves
}

type listed struct {
	number
	at strict.Place
}

// grid is first, first+step … n values in all. The arithmetic is rational, in one unit.
type grid struct {
	first, step *big.Rat
	n           int
	unit        string
	at, endAt   strict.Place // where the first and the last value come from
}

// number is an exact value and its unit. Angles that degrees can say are counted in
// micro-arcseconds, unit ""; milliradians stay what they are until a target is made of them, so
// that a grid in milliradians is rounded once a point and not once a step.
type number struct {
	value *big.Rat
	unit  string
}

// Len is how many values there are.
func (v Values) Len() int {
	if v.grid != nil {
		return v.grid.n
	}
	return len(v.listed)
}

// at returns value i and the place it comes from.
func (v Values) at(i int) (number, strict.Place) {
	if v.grid == nil {
		return v.listed[i].number, v.listed[i].at
	}
	g := v.grid
	x := new(big.Rat).Mul(g.step, big.NewRat(int64(i), 1))
	at := g.at
	if i == g.n-1 {
		at = g.endAt
	}
	return number{value: x.Add(x, g.first), unit: g.unit}, at
}

// extremes are the indices that can lie outside a range when any does.
func (v Values) extremes() []int {
	if v.grid != nil {
		return []int{0, v.grid.n - 1}
	}
	all := make([]int, len(v.listed))
	for i := range all {
		all[i] = i
	}
	return all
}

func (n number) angle() unit.Angle {
	if n.unit == "mrad" {
		f, _ := n.value.Float64()
		return unit.Radians(f / 1000)
	}
	a, err := unit.ParseAngleIn(new(big.Rat).Quo(n.value, big.NewRat(int64(unit.Arcsecond), 1)).FloatString(6), "arcsec")
	if err != nil {
		panic(fmt.Sprintf("recipe: %s micro-arcseconds: %v", n.value, err)) // numbers are bounded where they are read
	}
	return a
}

func (n number) String() string {
	if n.unit == "" {
		return n.angle().String()
	}
	s := n.value.FloatString(15)
	if strings.Contains(s, ".") {
		s = strings.TrimSuffix(strings.TrimRight(s, "0"), ".")
	}
	return s + " " + n.unit
}

// maxAngle is far beyond any axis and far within what arithmetic takes.
const maxAngle = 1000 * unit.Turn

// readNumber reads one value of an axis (an angle) or of a setting (anything with a unit).
func readNumber(v strict.Value, isAngle bool) (number, bool) {
	if isAngle {
		v.Angle(-maxAngle, maxAngle)
	}
	if !v.Good() {
		return number{}, false
	}
	q := v.Any()
	if !v.Good() {
		return number{}, false
	}
	return exact(q)
}

func exact(q strict.Quantity) (number, bool) {
	r, ok := new(big.Rat).SetString(q.Number)
	if !ok {
		return number{}, false
	}
	in := map[string]unit.Angle{"deg": unit.Degree, "arcmin": unit.Arcminute, "arcsec": unit.Arcsecond}
	if per, plain := in[q.Unit]; plain {
		// Not rounded here: a step finer than a micro-arcsecond must not grow to one and add up.
		return number{value: r.Mul(r, big.NewRat(int64(per), 1))}, true
	}
	return number{value: r, unit: q.Unit}, true
}

// readValues reads the one of the three ways of giving values that an entry uses. It asks for all
// their keys, so that a mistyped one is compared with each. Of a conjugate, and of an earlier result,
// it reads what is added.
func readValues(m strict.Map, isAngle, conjugate bool) Values {
	at := m.Opt("at")
	from, to, step := m.Opt("from"), m.Opt("to"), m.Opt("step")
	around, span := m.Opt("around"), m.Opt("span")
	if !m.Given() {
		return Values{}
	}
	ways := 0
	for _, used := range []bool{at.Given(), from.Given() || to.Given(), around.Given() || span.Given()} {
		if used {
			ways++
		}
	}
	const want = "one of: at; from, to and step; around, span and step"
	switch {
	case conjugate && (at.Given() || from.Given() || to.Given() || around.Given()):
		m.Fail("values given in two ways", "conjugate_of alone, or with span and step about where the partner goes")
		return Values{}
	case conjugate && (span.Given() || step.Given()):
		m.Need("span")
		m.Need("step")
		return readSpan(number{value: new(big.Rat)}, span, step, span, isAngle)
	case conjugate:
		return Values{listed: []listed{{number: number{value: new(big.Rat)}, at: m.Place()}}}
	case ways == 0:
		also := ""
		if isAngle {
			also = "; or conjugate_of, on an arm"
		}
		m.Fail("no values", want+also)
		return Values{}
	case ways > 1, at.Given() && step.Given():
		m.Fail("values given in two ways", want)
		return Values{}
	case at.IsMap():
		e := readEarlier(at, isAngle)
		if e == nil {
			return Values{}
		}
		return Values{listed: []listed{{number: number{value: new(big.Rat)}, at: at.Place()}}, earlier: e}
	case at.Given():
		return readListed(at, isAngle)
	case from.Given() || to.Given():
		m.Need("from")
		m.Need("to")
		m.Need("step")
		return readRange(from, to, step, isAngle)
	}
	m.Need("around")
	m.Need("span")
	m.Need("step")
	return readAround(around, span, step, isAngle)
}

func readListed(at strict.Value, isAngle bool) Values {
	items := []strict.Value{at}
	if at.IsList() {
		items = at.List(1, maxList)
	}
	var v Values
	for _, item := range items {
		if n, ok := readNumber(item, isAngle); ok {
			v.listed = append(v.listed, listed{number: n, at: item.Place()})
		}
	}
	return v
}

func readRange(from, to, step strict.Value, isAngle bool) Values {
	a, okA := readNumber(from, isAngle)
	b, okB := readNumber(to, isAngle)
	s, okS := readStep(step, isAngle)
	if !okA || !okB || !okS || !oneUnit(step, s, []strict.Value{from, to}, a, b) {
		return Values{}
	}
	span := new(big.Rat).Sub(b.value, a.value)
	if span.Sign() == 0 {
		to.Fail(fmt.Sprintf("%s again", b), fmt.Sprintf("another end than %s, or \"at: %s\" for one value", a, a))
		return Values{}
	}
	signed := new(big.Rat).Set(s.value)
	if span.Sign() < 0 {
		signed.Neg(signed)
	}
	n, ok := divide(step, span, signed, func(k *big.Int) string {
		end := new(big.Rat).Mul(signed, new(big.Rat).SetInt(k))
		return "to: " + number{value: end.Add(end, a.value), unit: a.unit}.String()
	})
	if !ok {
		return Values{}
	}
	return Values{grid: &grid{first: a.value, step: signed, n: n, unit: a.unit, at: from.Place(), endAt: to.Place()}}
}

func readAround(around, span, step strict.Value, isAngle bool) Values {
	if around.IsMap() {
		e := readEarlier(around, isAngle)
		v := readSpan(number{value: new(big.Rat)}, span, step, around, isAngle)
		if e == nil || v.Len() == 0 {
			return Values{}
		}
		v.earlier = e
		return v
	}
	c, ok := readNumber(around, isAngle)
	if !ok {
		readSpan(number{}, span, step, around, isAngle) // for what is wrong with it
		return Values{}
	}
	return readSpan(c, span, step, around, isAngle)
}

// readSpan reads a grid about a centre that stands at a place of its own, or nowhere: then it is a
// zero without a unit, which goes with every angle.
func readSpan(c number, span, step, around strict.Value, isAngle bool) Values {
	w, okW := readNumber(span, isAngle)
	s, okS := readStep(step, isAngle)
	if okW && w.value.Sign() <= 0 {
		span.Failf("a span above zero: it reaches half of it to either side")
		okW = false
	}
	if c.value != nil && c.value.Sign() == 0 && c.unit == "" {
		c.unit = s.unit
	}
	if c.value == nil || !okW || !okS || !oneUnit(step, s, []strict.Value{around, span}, c, w) {
		return Values{}
	}
	n, ok := divide(step, w.value, s.value, func(k *big.Int) string {
		return "span: " + number{value: new(big.Rat).Mul(s.value, new(big.Rat).SetInt(k)), unit: c.unit}.String()
	})
	if !ok {
		return Values{}
	}
	half := new(big.Rat).Mul(w.value, big.NewRat(1, 2))
	return Values{grid: &grid{first: half.Sub(c.value, half), step: s.value, n: n, unit: c.unit, at: around.Place(), endAt: around.Place()}}
}

func readStep(step strict.Value, isAngle bool) (number, bool) {
	s, ok := readNumber(step, isAngle)
	if !ok || s.value.Sign() > 0 {
		return s, ok
	}
	if s.value.Sign() == 0 {
		step.Failf("a step above zero, or \"at\" for one value")
	} else {
		step.Failf("a step above zero: to run downwards, write the upper end as \"from\" and the lower one as \"to\"")
	}
	return s, false
}

// oneUnit demands that the numbers of a grid share their unit, where that is not one of the exact
// angle units: a difference of two temperatures, or a sum of degrees and milliradians, is no grid.
func oneUnit(step strict.Value, s number, others []strict.Value, numbers ...number) bool {
	for i, n := range numbers {
		if n.unit != s.unit {
			others[i].Fail(fmt.Sprintf("%s beside a step of %s", n, s), "the same unit in all three")
			return false
		}
	}
	return true
}

// divide returns how many values a step makes of a span, both ends included. When the step does not
// divide it, say is asked to write down an end that would do.
func divide(step strict.Value, span, by *big.Rat, say func(*big.Int) string) (int, bool) {
	ratio := new(big.Rat).Quo(span, by)
	whole := new(big.Int).Quo(ratio.Num(), ratio.Denom())
	if whole.Cmp(big.NewInt(MaxVisits)) >= 0 {
		step.Fail(fmt.Sprintf("%s steps", whole), fmt.Sprintf("fewer than %d", MaxVisits))
		return 0, false
	}
	if !ratio.IsInt() {
		var ends []string
		if whole.Sign() > 0 {
			ends = append(ends, fmt.Sprintf("%q", say(whole)))
		}
		ends = append(ends, fmt.Sprintf("%q", say(new(big.Int).Add(whole, big.NewInt(1)))))
		step.Fail("a step that does not divide the range", "a step that does, or "+strings.Join(slices.Compact(ends), " or "))
		return 0, false
	}
	return int(whole.Int64()) + 1, true
}
