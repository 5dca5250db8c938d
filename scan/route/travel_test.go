package route_test

import (
	"math"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/drivers"
	"gemel/protocol/unit"
	"gemel/scan"
	"gemel/scan/route"
)

// rideOut drives a way from rest to rest in small steps of time, as fast as speed and braking
// distance allow: a second road to what the formula says.
func rideOut(way, speed, accel float64) float64 {
	const step = 1e-4
	x, v, t := 0.0, 0.0, 0.0
	for x < way {
		fastest := math.Sqrt(2 * accel * max(way-x, 0)) // from here, braking just suffices
		v = min(v+accel*step, speed, max(fastest, accel*step))
		x += v * step
		t += step
	}
	return t
}

func TestTravelTakesWhatASimulatedRideTakes(t *testing.T) {
	for _, c := range []struct{ from, to, backlash, speed, accel, want float64 }{
		{0, 3, 0, 6, 30, 0},
		{0, 0.4, 0, 6, 30, 0}, // never at full speed
		{3, -5, 0, 6, 30, 0},
		{3, 1, 0.5, 2, 10, 0}, // back by 2.5, on by 0.5
		{1, 3, 0.5, 2, 10, 0},
	} {
		a := scan.Axis{Backlash: unit.Degrees(c.backlash), Rising: true, SpeedDegS: c.speed, AccelDegS2: c.accel, Settle: 70 * time.Millisecond}
		want := 0.07
		if c.backlash > 0 && c.from > c.to-c.backlash {
			want += rideOut(c.from-c.to+c.backlash, c.speed, c.accel) + rideOut(c.backlash, c.speed, c.accel)
		} else {
			want += rideOut(math.Abs(c.to-c.from), c.speed, c.accel)
		}
		if got := route.Estimate(a, unit.Degrees(c.from), unit.Degrees(c.to)).Seconds(); math.Abs(got-want) > 0.01*want {
			t.Errorf("from %g to %g deg: %.4f s; a simulated ride takes %.4f s", c.from, c.to, got, want)
		}
	}
	if got := route.Estimate(scan.Axis{SpeedDegS: 2}, 0, 3*deg); got != 1500*time.Millisecond {
		t.Errorf("3 deg at 2 deg/s with no acceleration stated: %s; want 1.5s", got)
	}
	if got := route.Estimate(scan.Axis{Settle: time.Second}, 0, 3*deg); got != time.Second {
		t.Errorf("no speed stated: %s; want the settling alone", got)
	}
}

func TestLegsTakeTheirControllersInTurnAndTheirAxesAtOnce(t *testing.T) {
	axis := func(name drivers.AxisName, controller drivers.DeviceName, together bool, accel float64) scan.Axis {
		return scan.Axis{Name: name, Controller: controller, Together: together, SpeedDegS: 1, AccelDegS2: accel, Settle: 100 * time.Millisecond}
	}
	at := place{"signal_arm": 0, "idler_arm": 0, "plate": 0}
	to := func(signal, idler, plate float64) []scan.AxisTarget {
		return []scan.AxisTarget{{Axis: "signal_arm", Angle: unit.Degrees(signal)}, {Axis: "idler_arm", Angle: unit.Degrees(idler)}, {Axis: "plate", Angle: unit.Degrees(plate)}}
	}
	for _, c := range []struct {
		name string
		axes []scan.Axis
		legs [][]scan.AxisTarget
		want time.Duration
	}{
		{"each on its own", []scan.Axis{axis("signal_arm", "a", false, 0), axis("idler_arm", "a", false, 0), axis("plate", "b", false, 0)}, [][]scan.AxisTarget{to(2, 3, 4)}, 7100 * time.Millisecond},
		{"in step, without acceleration", []scan.Axis{axis("signal_arm", "a", true, 0), axis("idler_arm", "a", true, 0), axis("plate", "b", false, 0)}, [][]scan.AxisTarget{to(2, 3, 0)}, 3100 * time.Millisecond},
		// The slow start of the one holds the longer way of the other: 4 deg along which 1 deg may gain 0.5 deg/s².
		{"in step, held by the other's acceleration", []scan.Axis{axis("signal_arm", "a", true, 1), axis("idler_arm", "a", true, 0.5), axis("plate", "b", false, 0)}, [][]scan.AxisTarget{to(4, 3, 0)}, 5600 * time.Millisecond},
		{"there and back", []scan.Axis{axis("signal_arm", "a", false, 0), axis("idler_arm", "a", false, 0), axis("plate", "a", false, 0)}, [][]scan.AxisTarget{to(2, 1, 0), to(0, 1, 1)}, 4100 * time.Millisecond},
		{"nothing to do", []scan.Axis{axis("signal_arm", "a", false, 0)}, nil, 0},
	} {
		if got := route.Time(c.axes, at, c.legs); got.Round(time.Millisecond) != c.want {
			t.Errorf("%s: %s; want %s", c.name, got, c.want)
		}
	}
	if at["signal_arm"] != 0 {
		t.Error("the places given were changed")
	}
}

// travelled adds what the slowest axis of each move takes, by the public estimate.
func travelled(points []scan.Point, axes []scan.Axis, order []int) (sum time.Duration) {
	for n := 1; n < len(order); n++ {
		var longest time.Duration
		for i, from := range points[order[n-1]].Axes {
			to := points[order[n]].Axes[i]
			if from.Angle != to.Angle {
				longest = max(longest, route.Estimate(axes[i], from.Angle, to.Angle))
			}
		}
		sum += longest
	}
	return sum
}

func TestAnOrderNeverTravelsLonger(t *testing.T) {
	shorter := 0
	rapid.Check(t, func(t *rapid.T) {
		axes := []scan.Axis{{Name: "signal_arm", SpeedDegS: 1, AccelDegS2: 5, Backlash: deg / 4, Rising: true}, {Name: "idler_arm", SpeedDegS: 3, AccelDegS2: 5}}
		var points []scan.Point
		for range rapid.IntRange(0, 25).Draw(t, "points") {
			points = append(points, scan.Point{Axes: []scan.AxisTarget{
				{Axis: "signal_arm", Angle: unit.Angle(rapid.IntRange(0, 9).Draw(t, "signal")) * deg},
				{Axis: "idler_arm", Angle: unit.Angle(rapid.IntRange(0, 9).Draw(t, "idler")) * deg}}})
		}
		order := route.Order(points, axes)
		seen := make([]bool, len(points))
		given := make([]int, len(points))
		for i := range given {
			given[i] = i
		}
		for _, i := range order {
			if seen[i] {
				t.Fatalf("%v visits %d twice", order, i)
			}
			seen[i] = true
		}
		if len(order) != len(points) || len(order) > 0 && order[0] != 0 {
			t.Fatalf("%v; want every one of %d points, the first first", order, len(points))
		}
		before, after := travelled(points, axes, given), travelled(points, axes, order)
		if after > before {
			t.Fatalf("%s became %s", before, after)
		}
		if after < before {
			shorter++
		}
	})
	t.Logf("%d orders travel shorter", shorter)
	if shorter == 0 {
		t.Error("no order was improved at all")
	}
}
