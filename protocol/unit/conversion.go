package unit

import "fmt"

// Conversion turns values in one unit into values in another of its kind.
type Conversion struct{ factor, offset float64 }

// Of converts there, Back back again.
func (c Conversion) Of(v float64) float64   { return c.factor*v + c.offset }
func (c Conversion) Back(v float64) float64 { return (v - c.offset) / c.factor }

// Convert finds the conversion between two spellings. An empty one to begin with is the other.
func Convert(from, to string) (Conversion, error) {
	b, ok := scales[to]
	if !ok {
		return Conversion{}, &Error{Text: to, Found: fmt.Sprintf("unknown unit %q", to), Want: "a unit that this program knows"}
	}
	if from == "" || from == to {
		return Conversion{1, 0}, nil
	}
	a, ok := scales[from]
	switch {
	case !ok:
		return Conversion{}, &Error{Text: from, Found: fmt.Sprintf("unknown unit %q", from), Want: "a unit that this program knows"}
	case a.kind != b.kind:
		return Conversion{}, wrongUnit("1 "+to, a.kind)
	}
	return Conversion{a.factor / b.factor, (a.offset - b.offset) / b.factor}, nil
}
