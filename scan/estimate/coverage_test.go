package estimate

import (
	"errors"
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gemel/protocol"
)

// long runs the coverage and bias tests at the length that the table in DEVELOPERS.md states:
//
//	go test ./scan/estimate -run 'Cover|Bias|Coupled|PeaksAgainst|PeakAngles' -long -v -timeout 90m
var long = flag.Bool("long", false, "run coverage and bias tests at full length")

// statistics leaves a test out under the race detector that draws for long in its own goroutine: there
// is nothing to race with, and what is drawn is the same.
func statistics(t *testing.T) {
	t.Helper()
	if raced && !*long {
		t.Skip("long statistics in one goroutine are held without the race detector")
	}
}

// regime is a way of calibrating.
type regime struct {
	name   string
	model  DeadTimeModel
	choose func(r *rand.Rand, w *world, n *night) // rates and lengths
	bench  func(b *Bench)                         // declared otherwise than skerry's
	wide   bool                                   // the interval is exact or carries a model row, so it may cover more
}

func logUniform(r *rand.Rand, low, high float64) float64 {
	return low * math.Exp(r.Float64()*math.Log(high/low))
}

// lengths gives a night that yields about so many net coincidences.
func lengths(w world, n *night, net float64, readings int) {
	rate := w.pairsHz * w.etaT * w.etaD * w.pathD
	n.readings, n.slices = readings, 2
	// whole microseconds, so that the rows carry the gate exactly
	n.sliceS = math.Ceil(net/rate/float64(readings*2)*1e6) / 1e6
	n.darkS = n.sliceS * float64(readings)
}

var regimes = []regime{
	{"few: 100 to 1000 net coincidences", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		w.pairsHz, w.noiseT, w.noiseD = 3e3, 300, 300
		lengths(*w, n, logUniform(r, 110, 1000), 4)
	}, nil, false},
	{"medium: 10^4 to 10^5 net coincidences, rates near 10^5/s", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		w.pairsHz = logUniform(r, 1e5, 4e5)
		w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
		lengths(*w, n, logUniform(r, 1e4, 1e5), 5)
	}, nil, false},
	{"high: m_D tau_D 0.03 to 0.1", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		load := 0.03 + 0.07*r.Float64()
		w.pairsHz = load / (1 - load) / w.tauD / (w.etaD*w.pathD + 0.05)
		w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
		lengths(*w, n, logUniform(r, 1e4, 1e5), 5)
	}, nil, false},
	{"high, paralysable: m_D tau_D 0.03 to 0.1", Paralysable, func(r *rand.Rand, w *world, n *night) {
		load := 0.03 + 0.07*r.Float64()
		w.pairsHz = load / (1 - load) / w.tauD / (w.etaD*w.pathD + 0.05)
		w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
		lengths(*w, n, logUniform(r, 1e4, 1e5), 5)
	}, nil, false},
	{"slow counter: window 20 ns, fast detectors of 2 ns", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		w.pairsHz = logUniform(r, 1e5, 6e5)
		w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
		lengths(*w, n, logUniform(r, 1e4, 1e5), 5)
	}, func(b *Bench) {
		b.Counter.Window = Constant{20e-9, 0.1e-9, "delay scan"}
		for i := range b.Arms {
			b.Arms[i].DeadTime = Constant{2e-9, 0.1e-9, "pile-up scan"}
		}
	}, true},
	{"slow counter without afterpulses: the two logics differ", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		w.pairsHz = logUniform(r, 1e5, 6e5)
		w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
		lengths(*w, n, logUniform(r, 1e4, 1e5), 5)
	}, func(b *Bench) {
		b.Counter.Window = Constant{20e-9, 0.1e-9, "delay scan"}
		for i := range b.Arms {
			b.Arms[i].DeadTime = Constant{2e-9, 0.1e-9, "pile-up scan"}
			b.Arms[i].Afterpulse = Constant{1e-5, 1e-6, "own"}
		}
	}, false},
	{"very few: 5 to 90 net coincidences", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		w.pairsHz, w.noiseT, w.noiseD = 3e3, 300, 300
		lengths(*w, n, logUniform(r, 5, 90), 3)
	}, nil, true},
	{"beyond the warning: m_D tau_D 0.1 to 0.3", NonParalysable, func(r *rand.Rand, w *world, n *night) {
		load := 0.1 + 0.2*r.Float64()
		w.pairsHz = load / (1 - load) / w.tauD / (w.etaD*w.pathD + 0.05)
		w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
		lengths(*w, n, logUniform(r, 1e4, 1e5), 5)
	}, nil, true},
}

// drawn is skerry as it truly is tonight: each constant drawn from its stated uncertainty.
func drawn(r *rand.Rand, b Bench, model DeadTimeModel) world {
	value := func(c Constant) float64 { return c.Value + c.U*r.NormFloat64() }
	w := world{etaT: 0.35, etaD: 0.6, pathD: 1, modelT: model, modelD: model, tauT: value(b.Arms[0].DeadTime), tauD: value(b.Arms[1].DeadTime),
		afterT: math.Max(0, value(b.Arms[0].Afterpulse)), afterD: math.Max(0, value(b.Arms[1].Afterpulse)), afterDecayS: 60e-9,
		windowS: value(b.Counter.Window), displacedS: 3e-6, randomStream: r}
	for _, t := range b.Arms[1].Path {
		w.pathD *= value(t.Constant)
	}
	w.jitterS = jitterFor(w.windowS, math.Min(value(b.Counter.Capture), 0.9999))
	return w
}

func benchFor(reg regime, logic Logic) Bench {
	b := skerry(logic)
	for i := range b.Arms {
		b.Arms[i].Model = reg.model
	}
	if reg.bench != nil {
		reg.bench(&b)
	}
	return b
}

func TestCalibrationsCoverTheTruth(t *testing.T) {
	statistics(t)
	times := 40
	if *long {
		times = 2000
	}
	for k, reg := range regimes {
		t.Run(reg.name, func(t *testing.T) {
			t.Parallel()
			inside := map[string]int{}
			miss, sumU := map[string]float64{}, map[string]float64{}
			significant, refused, limits := 0, 0, 0
			for i := range times {
				r := rand.New(rand.NewPCG(uint64(1000+k), uint64(i)))
				b := benchFor(reg, EveryPair)
				w := drawn(r, b, reg.model)
				n := night{}
				reg.choose(r, &w, &n)
				n.w = w
				all := n.take()
				for _, logic := range []Logic{EveryPair, OnePerHerald} {
					for _, displaced := range []bool{false, true} {
						b := benchFor(reg, logic)
						name := fmt.Sprintf("%s, displaced %v", logic, displaced)
						res, err := Efficiency(rowsOf(all, logic), b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler", Displaced: displaced})
						if no, ok := errors.AsType[*Refusal](err); ok && no.Limit != nil {
							limits++ // nothing coincided: everything below the limit is the interval
							if w.etaD <= no.Limit.Efficiency {
								inside[name]++
							}
							continue
						}
						if err != nil {
							refused++
							t.Logf("calibration %d: %v", i, err)
							continue
						}
						if res.Interval.Low <= w.etaD && w.etaD <= res.Interval.High {
							inside[name]++
						}
						miss[name] += (*res.Value - w.etaD) / *res.U / float64(times)
						sumU[name] += *res.U / *res.Value / float64(times)
						if res.Dispersion.Significant {
							significant++
						}
					}
				}
			}
			low, high := 0.935, 0.965
			if !*long {
				// 3.5 standard deviations of a binomial at 95 %
				low, high = 0.95-3.5*math.Sqrt(0.95*0.05/float64(times)), 1
			}
			if reg.wide {
				high = 1
			}
			for name, n := range inside {
				share := float64(n) / float64(times)
				t.Logf("%s: %.2f %% covered, mean miss %+.3f u, mean u %.3f %%", name, 100*share, miss[name], 100*sumU[name])
				if share < low || share > high {
					t.Errorf("%s: %.2f %% covered; want %.1f to %.1f %%", name, 100*share, 100*low, 100*high)
				}
			}
			t.Logf("significant scatter in %.1f %%, refused %d, without a coincidence %d", 100*float64(significant)/float64(4*times), refused, limits)
			// With a handful of heralds now and then the background is no less than they are.
			if refused > 0 && !reg.wide || float64(refused) > 0.005*float64(4*times) {
				t.Errorf("%d refused; want none, or next to none where heralds are few", refused)
			}
		})
	}
}

// Bias where the constants are exactly what is declared: what is left is the formulas' own.
func TestBiasIsATenthOfTheUncertaintyAtTenMillionHeralds(t *testing.T) {
	statistics(t)
	runs, heralds := 1, 6e5
	if *long {
		runs, heralds = 10, 1e7
	}
	for k, load := range []float64{0.01, 0.05, 0.1} {
		for m, model := range []DeadTimeModel{NonParalysable, Paralysable} {
			t.Run(fmt.Sprintf("%s, m_D tau_D %g", model, load), func(t *testing.T) {
				t.Parallel()
				reg := regime{model: model}
				sum, sq, u := map[Logic]float64{}, map[Logic]float64{}, map[Logic]float64{}
				for i := range runs {
					w := nominal(rand.New(rand.NewPCG(uint64(77+10*k+m), uint64(i))))
					w.modelT, w.modelD = model, model
					w.pairsHz = load / (1 - load) / w.tauD / (w.etaD*w.pathD + 0.05)
					w.noiseT, w.noiseD = 0.05*w.pairsHz, 0.05*w.pairsHz
					n := night{w: w}
					lengths(w, &n, heralds*w.etaD*w.pathD, 10)
					all := n.take()
					for _, logic := range []Logic{EveryPair, OnePerHerald} {
						b := benchFor(reg, logic)
						b.Arms[0].Afterpulse.Value = afterShare(all)
						res, err := Efficiency(rowsOf(all, logic), b, Model{Collection: full}, Question{Trigger: "signal", UnderTest: "idler"})
						if err != nil {
							t.Fatal(err)
						}
						d := *res.Value - w.etaD
						sum[logic] += d / float64(runs)
						sq[logic] += d * d / float64(runs)
						u[logic] = *res.U
					}
				}
				for _, logic := range []Logic{EveryPair, OnePerHerald} {
					own := math.Sqrt(math.Max(0, sq[logic]-sum[logic]*sum[logic]) / float64(max(runs-1, 1)))
					t.Logf("%s: bias %+.1e ± %.1e, stated u %.1e: %+.3f u", logic, sum[logic], own, u[logic], sum[logic]/u[logic])
					bound := 0.1
					if !*long {
						bound = 1.5
					}
					if math.Abs(sum[logic]) > bound*u[logic] {
						t.Errorf("%s: bias %+.3f u; want at most %g", logic, sum[logic]/u[logic], bound)
					}
				}
			})
		}
	}
}

// afterShare is the share of recorded trigger counts that were afterpulses, which is what the
// constant means: some afterpulses meet a dead detector, more of them at high rates.
func afterShare(all []taken) float64 {
	after, counts := 0, 0
	for _, t := range all {
		if t.kind == protocol.Light {
			for _, g := range t.slices {
				after, counts = after+g.afterpulsesT, counts+g.s
			}
		}
	}
	return float64(after) / float64(counts)
}
