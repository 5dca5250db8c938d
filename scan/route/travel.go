package route

import (
	"maps"
	"math"
	"time"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
)

// Estimate is how long one axis needs from one angle to another, its approach and its settling
// included, in bench time: even acceleration to full speed, even braking. Where the acceleration is
// not stated it is taken as boundless, where the speed is not, travel takes no time.
func Estimate(a scan.Axis, from, to unit.Angle) time.Duration {
	return travel(a, from, to) + a.Settle
}

// Time is how long legs take as the engine makes them, in bench time: within a leg controllers one
// after another, the axes of each at once, in step if they go together. Settling is added once,
// that of the slowest axis.
func Time(axes []scan.Axis, at map[drivers.AxisName]unit.Angle, legs [][]scan.AxisTarget) time.Duration {
	here := make(map[drivers.AxisName]unit.Angle, len(at))
	maps.Copy(here, at)
	var total, settle time.Duration
	for _, leg := range legs {
		done := map[drivers.DeviceName]bool{}
		for _, t := range leg {
			a, ok := find(axes, t.Axis)
			if !ok || done[a.Controller] {
				continue
			}
			done[a.Controller] = true
			total += together(axes, here, leg, a.Controller)
		}
		for _, t := range leg {
			if a, ok := find(axes, t.Axis); ok {
				settle = max(settle, a.Settle)
			}
			here[t.Axis] = t.Angle
		}
	}
	return total + settle
}

// together is how long one controller takes for its part of a leg.
func together(axes []scan.Axis, here map[drivers.AxisName]unit.Angle, leg []scan.AxisTarget, controller drivers.DeviceName) time.Duration {
	var longest time.Duration
	speed, accel := math.Inf(1), math.Inf(1) // of the whole way, in 1/s and 1/s²
	inStep, moves := false, false
	for _, t := range leg {
		a, ok := find(axes, t.Axis)
		if !ok || a.Controller != controller {
			continue
		}
		way := (t.Angle - here[t.Axis]).Abs().Degrees()
		longest = max(longest, ride(way, a.SpeedDegS, a.AccelDegS2))
		inStep = inStep || a.Together
		if way == 0 || a.SpeedDegS <= 0 {
			continue
		}
		moves = true
		speed = min(speed, a.SpeedDegS/way)
		if a.AccelDegS2 > 0 {
			accel = min(accel, a.AccelDegS2/way)
		}
	}
	if inStep && moves {
		if math.IsInf(accel, 1) {
			accel = 0
		}
		return ride(1, speed, accel)
	}
	return longest
}

// travel is an axis's time in motion.
func travel(a scan.Axis, from, to unit.Angle) time.Duration {
	if !nearerThanApproach(a, from, to) {
		return ride((to - from).Abs().Degrees(), a.SpeedDegS, a.AccelDegS2)
	}
	return ride((approach(a, to)-from).Abs().Degrees(), a.SpeedDegS, a.AccelDegS2) + ride(a.Backlash.Degrees(), a.SpeedDegS, a.AccelDegS2)
}

// ride is how long a way from rest to rest takes. A speed of 0 takes no time, an acceleration of 0
// is boundless.
func ride(way, speed, accel float64) time.Duration {
	var s float64
	switch {
	case way == 0 || speed <= 0:
		return 0
	case accel <= 0:
		s = way / speed
	case way < speed*speed/accel: // never at full speed
		s = 2 * math.Sqrt(way/accel)
	default:
		s = way/speed + speed/accel
	}
	return time.Duration(math.Round(s * float64(time.Second)))
}

func find(axes []scan.Axis, name drivers.AxisName) (scan.Axis, bool) {
	for _, a := range axes {
		if a.Name == name {
			return a, true
		}
	}
	return scan.Axis{}, false
}
