package estimate

import "math"

// Pairs is the plain case: what was counted in one common time, and a path, nothing else.
type Pairs struct {
	C, A, S, B  float64
	UA, UB      float64 // 0: the square root, one independent measurement as long as the other
	Path, UPath float64 // transmittance; Path 0: 1
	SameGates   bool    // A was counted in a delayed window in the same gates: it shares triggers
}

// Klyshko is eta = (C - A)/[(S - B) T] (Klyshko 1980) with its JCGM 100 budget, Cov(S, C) = C
// because each coincidence is a trigger count. Efficiency is the same with everything that a bench
// adds; this form serves quick looks and holds the budget against published check values.
func Klyshko(p Pairs) (Budget, error) {
	if p.UA == 0 {
		p.UA = math.Sqrt(p.A)
	}
	if p.UB == 0 {
		p.UB = math.Sqrt(p.B)
	}
	if p.Path == 0 {
		p.Path = 1
	}
	count := func(quantity, symbol string, v, u float64) Input {
		return Input{Quantity: quantity, Symbol: symbol, Unit: "1", Estimate: v, U: u, Evaluation: TypeA, Distribution: Counting}
	}
	in := []Input{
		count("coincidences", "C", p.C, math.Sqrt(p.C)),
		count("accidentals", "A", p.A, p.UA),
		count("trigger counts", "S", p.S, math.Sqrt(p.S)),
		count("background", "B", p.B, p.UB),
		{Quantity: "path", Symbol: "T", Unit: "1", Estimate: p.Path, U: p.UPath, Evaluation: TypeB, Distribution: Normal},
	}
	cross := []Cross{{2, 0, p.C, "each coincidence is a trigger count"}}
	if p.SameGates {
		cross = append(cross, Cross{2, 1, p.A, "accidentals are counted in the same gates as the triggers"}, Cross{0, 1, p.C * p.A / p.S, "accidentals and coincidences share triggers"})
	}
	return Propagate(func(x []float64) float64 { return (x[0] - x[1]) / ((x[2] - x[3]) * x[4]) }, in, cross)
}
