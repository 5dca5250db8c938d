package estimate

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
	"time"

	"gemel/protocol"
	"gemel/sim/crystal"
	"gemel/sim/phasematch"
	"gemel/sim/source"
)

// The same questions to the simulator of the house, which other people wrote.

// ringOptics are the optics of a bench like skerry.
func ringOptics(t testing.TB) source.Optics {
	t.Helper()
	set, err := crystal.Named("bbo-kato-1986")
	if err != nil {
		t.Fatal(err)
	}
	arm := source.Arm{Aperture: source.Iris, RadiusMm: 1, DistanceMm: 500, Filter: source.Filter{CentreNm: 810, WidthNm: 10, Shape: source.FilterGaussian}, Transmittance: 1,
		Detector: source.Detector{Efficiency: 0.6}}
	return source.Optics{Crystal: set, Process: phasematch.EOO, CutDeg: 29.2, ThicknessMm: 2, CrystalCel: 20, PumpNm: 405, PumpWaistUm: 100, PumpW: 0.05, PairHzPerMw: 1000,
		Signal: arm, Idler: arm, Counter: source.Counter{WindowS: 4e-9, JitterS: 0.5e-9, Logic: source.EveryPair}}
}

// takeFrom draws the same night from source's single events instead of this package's own.
func takeFrom(t *testing.T, o source.Optics, w world, n night, logic Logic) Rows {
	t.Helper()
	o.Counter = source.Counter{WindowS: w.windowS, JitterS: w.jitterS, Logic: string(logic)}
	o.Signal.Detector = source.Detector{Efficiency: 0.6, DeadTimeS: w.tauT, Model: string(w.modelT), Afterpulse: w.afterT, AfterpulseS: w.afterDecayS}
	o.Idler.Detector = source.Detector{Efficiency: 0.6, DeadTimeS: w.tauD, Model: string(w.modelD), Afterpulse: w.afterD, AfterpulseS: w.afterDecayS}
	m, err := source.New(o)
	if err != nil {
		t.Fatal(err)
	}
	draw := func(spoiled bool, s float64) gateCounts {
		r := source.Rates{SignalHz: w.noiseT, IdlerHz: w.noiseD}
		if !spoiled {
			r.SignalHz += w.pairsHz * w.etaT
			r.IdlerHz += w.pairsHz * w.etaD * w.pathD
			r.PairsHz = w.pairsHz * w.etaT * w.etaD * w.pathD
		}
		c := m.DrawEvents(w.randomStream, []source.Segment{{For: time.Duration(math.Round(s * 1e9)), Rates: r}})
		return gateCounts{s: int(c.Signal), d: int(c.Idler), pairs: int(c.Coincidences), heralds: int(c.Coincidences)}
	}
	var all []taken
	add := func(kind protocol.ReadingKind, s float64, slices int) {
		one := taken{kind: kind, sliceS: s}
		for range slices {
			one.slices = append(one.slices, draw(kind == protocol.Background, s))
		}
		all = append(all, one)
	}
	add(protocol.Background, n.darkS, 1)
	for i := range n.readings {
		add(protocol.Light, n.sliceS, n.slices)
		if i == n.readings/2 {
			add(protocol.Background, n.darkS, 1)
		}
	}
	add(protocol.Background, n.darkS, 1)
	return rowsOf(all, logic)
}

func TestCalibrationsOfTheHousesSimulatorCoverTheTruth(t *testing.T) {
	statistics(t)
	times := 25
	if *long {
		times = 2000
	}
	optics := ringOptics(t)
	for k, reg := range regimes {
		if reg.wide || reg.model == Paralysable { // which that simulator only has without afterpulses
			continue
		}
		for _, logic := range []Logic{EveryPair, OnePerHerald} {
			t.Run(fmt.Sprintf("%s, %s", reg.name, logic), func(t *testing.T) {
				t.Parallel()
				inside, miss := 0, 0.0
				for i := range times {
					r := rand.New(rand.NewPCG(uint64(9000+k), uint64(i)))
					b := benchFor(reg, logic)
					w := drawn(r, b, reg.model)
					n := night{}
					reg.choose(r, &w, &n)
					res, err := Efficiency(takeFrom(t, optics, w, n, logic), b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"})
					if err != nil {
						t.Fatal(err)
					}
					if res.Interval.Low <= w.etaD && w.etaD <= res.Interval.High {
						inside++
					}
					miss += (*res.Value - w.etaD) / *res.U / float64(times)
				}
				share := float64(inside) / float64(times)
				low, high := 0.935, 0.965
				if !*long {
					low, high = 0.95-3.5*math.Sqrt(0.95*0.05/float64(times)), 1
				}
				t.Logf("%.2f %% covered, mean miss %+.3f u", 100*share, miss)
				if share < low || share > high {
					t.Errorf("%.2f %% covered; want %.1f to %.1f %%", 100*share, 100*low, 100*high)
				}
			})
		}
	}
}

// A sweep of the idler arm across the ring as the model predicts it, zero offsets drawn.
func TestPeaksAgainstTheModelsProfileCoverTheTruth(t *testing.T) {
	statistics(t)
	m, err := source.New(ringOptics(t))
	if err != nil {
		t.Fatal(err)
	}
	signal, idler := m.Reference()
	profile := func(deg float64) float64 {
		return m.Rates(source.Pose{SignalDeg: signal, IdlerDeg: deg, PumpW: 0.05, PumpNm: 405, CrystalCel: 20, PumpOpen: 1, SignalOpen: 1, IdlerOpen: 1}).PairsHz
	}
	const points = 41
	low, high := idler-0.8, idler+0.8
	table, err := tabulate(profile, low-0.8, high+0.8, (high-low)/points)
	if err != nil {
		t.Fatal(err)
	}
	for _, x := range []float64{idler - 0.31, idler - 0.1, idler + 0.033, idler + 0.2} {
		near(t, "table against the model", table(x)/profile(idler), profile(x)/profile(idler), 2e-3)
	}
	top := highest(table, low, high)
	t.Logf("ring at %.4f deg, the profile's maximum at %.4f deg", idler, top)
	times := 60
	if *long {
		times = 2000
	}
	scale := 3000 / table(top)
	inside, miss := 0, 0.0
	for i := range times {
		r := rand.New(rand.NewPCG(600, uint64(i)))
		offset, shift := 0.1*(2*r.Float64()-1), 0.002*r.NormFloat64()
		data := profileData(r, func(x float64) float64 { return 10 + scale*table(x-offset+shift) }, low, high, points, ones)
		res, err := Peak(spotRows(data), skerry(EveryPair), Model{Profile: table}, PeakQuestion{Axis: "idler_arm", Channel: "idler", Trials: 1})
		if err != nil {
			t.Fatal(err)
		}
		if res.Interval.Low <= top+offset && top+offset <= res.Interval.High {
			inside++
		}
		miss += (*res.Value - top - offset) / *res.U / float64(times)
	}
	share := float64(inside) / float64(times)
	t.Logf("%.2f %% covered, mean miss %+.3f u", 100*share, miss)
	lowest, highestShare := 0.935, 0.965
	if !*long {
		lowest, highestShare = 0.95-3.5*math.Sqrt(0.95*0.05/float64(times)), 1
	}
	if share < lowest || share > highestShare {
		t.Errorf("%.2f %% covered; want %.1f to %.1f %%", 100*share, 100*lowest, 100*highestShare)
	}
}
