package forecast

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"gonum.org/v1/gonum/stat/distuv"

	"gemel/scan"
	"gemel/sim/source"
)

// TestExpectedCountsAgreeWithSimulatedEvents holds the forecast's counts of a visit against visits
// that are made event by event, at low and at high rates: chi-square over five points for each
// channel, each with the variance that the events themselves show, since dead time makes it smaller
// than a Poisson one. That the test can fail is shown beside it: counts three percent off are found.
func TestExpectedCountsAgreeWithSimulatedEvents(t *testing.T) {
	const visits = 300
	for _, power := range []float64{0.2, 1, 12} { // idler singles from 60 000 to some millions a second
		t.Run(fmt.Sprintf("%g times the power", power), func(t *testing.T) {
			l := light(t, power)
			plan := grid([3]float64{2.764, 2.964, 1}, [3]float64{2.364, 3.364, 5}, false)
			for i := range plan.Points {
				plan.Points[i].Axes[0].Angle = 2864 * deg / 1000
			}
			gate := time.Duration(float64(4*time.Millisecond) / math.Max(power, 0.4))
			plan.Dwell = scan.Dwell{Time: gate, Slice: gate}
			f, err := Of(Ask{Plan: plan, Bench: arms(), Begins: evening, Expect: l.expect})
			if err != nil {
				t.Fatal(err)
			}
			list := f.List()
			rng := rand.New(rand.NewPCG(20310203, uint64(power*10)))
			var chi, off [3]float64
			for _, p := range list {
				expected := [3]float64{p.Singles["signal"], p.Singles["idler"], p.Coincidences["pairs"]}
				rates := l.model.Rates(l.pose(plan.Points[p.Point.Point].Axes))
				var sum, squares [3]float64
				for range visits {
					c := l.model.DrawEvents(rng, []source.Segment{{For: gate, Rates: rates}})
					for k, n := range []uint64{c.Signal, c.Idler, c.Coincidences} {
						sum[k] += float64(n)
						squares[k] += float64(n) * float64(n)
					}
				}
				for k := range sum {
					mean := sum[k] / visits
					variance := math.Max((squares[k]-visits*mean*mean)/(visits-1), 0.05*expected[k]) / visits
					chi[k] += (mean - expected[k]) * (mean - expected[k]) / variance
					off[k] += (mean - 1.03*expected[k]) * (mean - 1.03*expected[k]) / variance
				}
			}
			for k, name := range []string{"signal", "idler", "coincidences"} {
				p := distuv.ChiSquared{K: float64(len(list))}.Survival(chi[k])
				wrong := distuv.ChiSquared{K: float64(len(list))}.Survival(off[k])
				t.Logf("%-12s chi square %.1f over %d points, p = %.3g; 3 %% off p = %.2g", name, chi[k], len(list), p, wrong)
				if p < 1e-3 {
					t.Errorf("%s: chi square %.1f over %d points, p = %.2g; want expected counts", name, chi[k], len(list), p)
				}
				if name == "idler" && wrong > 1e-6 {
					t.Errorf("%s: counts three percent off give p = %.2g; the test could not fail", name, wrong)
				}
			}
		})
	}
}
