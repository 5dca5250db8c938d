package scan

import (
	"gemel/drivers"
	"gemel/protocol/unit"
)

// KeepOut is a set of angles that a bench's axes must never have, neither at rest nor on the way.
// Exactly one of Apart, Range and Cone is set. Its edges themselves are allowed; every edge is
// moved outwards by Margin and by the tolerances of the axes it is about. It is no safety function:
// it holds as far as the angles that the stages report are true.
type KeepOut struct {
	Name   string // what messages call it
	Margin unit.Angle
	Apart  *Apart
	Range  *Range
	Cone   *Cone
}

// Arm is an axis that turns something around the pump: bench angle 0 looks into the pump, and its
// laboratory angle is Side times its bench angle. Two arms that count away from the pump on
// opposite sides have opposite Sides. Which of them is +1 does not matter.
type Arm struct {
	Axis drivers.AxisName
	Side int // +1 or -1
}

// Apart keeps the directions of two arms at least so far apart, around the circle.
type Apart struct {
	Arms  [2]Arm
	Least unit.Angle
}

// Range forbids the angles of an axis between two: always, or while another axis is in a range of
// its own.
type Range struct {
	Span
	While *Span // nil: always
}

// Span is what lies between two angles of an axis.
type Span struct {
	Axis      drivers.AxisName
	Low, High unit.Angle
}

// Cone keeps each of the arms at least so far from the pump's direction, around the circle.
type Cone struct {
	Arms             []Arm
	HalfWidth        unit.Angle
	UnlessPumpClosed bool
}
