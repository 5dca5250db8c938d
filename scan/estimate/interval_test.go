package estimate

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"
)

func TestGarwoodAgreesWithTheTable(t *testing.T) {
	// standards.md 6.1, computed there from the chi-square form.
	const sigma = 0.6827 // as the table's head says it, not rounded to one standard deviation
	for _, c := range []struct{ n, low68, high68, low95, high95 float64 }{
		{0, 0, 1.8411, 0, 3.6889}, {1, 0.1727, 3.2996, 0.0253, 5.5716}, {2, 0.7082, 4.6379, 0.2422, 7.2247},
		{3, 1.3673, 5.9182, 0.6187, 8.7673}, {4, 2.0856, 7.1628, 1.0899, 10.2416}, {5, 2.8403, 8.3825, 1.6235, 11.6683},
		{6, 3.6200, 9.5837, 2.2019, 13.0595}, {7, 4.4185, 10.7704, 2.8144, 14.4227}, {8, 5.2316, 11.9452, 3.4538, 15.7632},
		{9, 6.0565, 13.1103, 4.1154, 17.0848}, {10, 6.8913, 14.2670, 4.7954, 18.3904}, {100, 90.0165, 111.0336, 81.3640, 121.6268},
	} {
		i, j := Garwood(c.n, sigma), Garwood(c.n, 0.95)
		near(t, "low 68.27 %", i.Low, c.low68, 0.5001e-4)
		near(t, "high 68.27 %", i.High, c.high68, 0.5001e-4)
		near(t, "low 95 %", j.Low, c.low95, 0.5001e-4)
		near(t, "high 95 %", j.High, c.high95, 0.5001e-4)
	}
	near(t, "one-sided, n = 0", PoissonUpper(0, 0.95), 2.9957, 0.5e-4)
}

func TestGarwoodNeverCoversTooLittle(t *testing.T) {
	for _, mean := range []float64{0.3, 1, 2.7, 5, 11, 40} {
		pois, covered := distuv.Poisson{Lambda: mean}, 0.0
		for n := 0.0; n < mean+15*math.Sqrt(mean)+20; n++ {
			if i := Garwood(n, 0.95); i.Low <= mean && mean <= i.High {
				covered += pois.Prob(n)
			}
		}
		if covered < 0.95 {
			t.Errorf("mean %g: covered in %.4f; want 0.95 at least", mean, covered)
		}
	}
}

func TestClopperPearsonInvertsTheBinomialTails(t *testing.T) {
	for _, c := range []struct{ k, n float64 }{{3, 20}, {17, 40}, {0, 12}, {12, 12}} {
		i := ClopperPearson(c.k, c.n, 0.95)
		if c.k > 0 {
			near(t, "upper tail at the low end", 1-distuv.Binomial{N: c.n, P: i.Low}.CDF(c.k-1), 0.025, 1e-9)
		}
		if c.k < c.n {
			near(t, "lower tail at the high end", distuv.Binomial{N: c.n, P: i.High}.CDF(c.k), 0.025, 1e-9)
		}
	}
	near(t, "0 of 12: 1 - 0.025^(1/12)", ClopperPearson(0, 12, 0.95).High, 1-math.Pow(0.025, 1./12), 1e-12)
}

func TestDecisionsAgreeWithThePublishedChecks(t *testing.T) {
	// standards.md 6.2: ISO 11929 and Currie 1968, formulas recalled, numbers computed there.
	const k = 1.6448536269514722
	d, err := Decide(100, 100, 100, 100, 1, 0, k)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "check 1, threshold", d.Threshold, 0.232617, 0.5e-6)
	near(t, "check 1, limit", d.Limit, 0.492290, 0.5e-6)
	near(t, "paired counts, threshold: 2.326 sqrt(B)", d.Threshold*100, 2.326*10, 0.005)
	near(t, "paired counts, limit: 2.706 + 4.652 sqrt(B)", d.Limit*100, 2.706+46.52, 0.01)
	d, err = Decide(190, 60, 1200, 600, 4, 0.05, k)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "check 2, threshold", d.Threshold, 1.25986, 0.5e-5)
	near(t, "check 2, limit", d.Limit, 2.71848, 0.5e-5)
	near(t, "check 2, value", d.Net, 4.66667, 0.5e-5)
	near(t, "check 2, u", d.U, 0.97582, 0.5e-5)
	if !d.Detected || d.Exact {
		t.Errorf("check 2: detected %v, exact %v; want detected by the threshold", d.Detected, d.Exact)
	}
	if d, _ = Decide(190, 60, 1200, 600, 4, 0.7, k); !math.IsInf(d.Limit, 1) {
		t.Errorf("k u_rel above 1: limit %g; want none", d.Limit)
	}
	// At the limit the chance of a miss is the one stated: put the limit back into the definition.
	d, _ = Decide(190, 60, 1200, 600, 4, 0.05, k)
	r0 := 2.0
	u := math.Sqrt(16*((d.Limit/4+r0)/60+r0/600) + d.Limit*d.Limit*0.05*0.05)
	near(t, "definition of the limit", d.Limit-k*u, d.Threshold, 1e-9)
}

func TestFewCountsAreDecidedExactly(t *testing.T) {
	// By hand: 5 and 0 in equal times: (1/2)^5 = 0.03125; 4 and 0: 0.0625.
	near(t, "5 against 0", BinomialExcess(5, 0, 0.5), 0.03125, 1e-12)
	five, _ := Decide(5, 1, 0, 1, 1, 0, 1.6448536269514722)
	four, _ := Decide(4, 1, 0, 1, 1, 0, 1.6448536269514722)
	if !five.Exact || !five.Detected || !four.Exact || four.Detected {
		t.Errorf("5 against 0: %+v, 4 against 0: %+v; want only the first detected, both exactly", five, four)
	}
}

func TestBestEstimateOfANonNegativeValue(t *testing.T) {
	// At y = 0 the posterior is a half-normal: mean u sqrt(2/pi), standard deviation u sqrt(1-2/pi).
	d, _ := Decide(400, 10, 400, 10, 1, 0, 1.645)
	near(t, "mean", d.Best, d.U*math.Sqrt(2/math.Pi), 1e-9)
	near(t, "deviation", d.BestU, d.U*math.Sqrt(1-2/math.Pi), 1e-9)
}

func TestAccidentalsUseTheFullWindowAndTheFullSingles(t *testing.T) {
	for _, c := range checks(t, "accidental_") {
		near(t, c.id+" "+c.source, Accidentals(c.in["r1_per_s"], c.in["r2_per_s"], c.in["window_ns"]*1e-9, 1), c.value, c.tol)
	}
	near(t, "net", NetCAR(110, 10), 10, 1e-12)
	near(t, "gross", GrossCAR(110, 10), 11, 1e-12)
	near(t, "g2", HeraldedG2(1e6, 10, 1e4, 1e4), 0.1, 1e-12)
}

func TestDispersionIsOneForCountsAndShowsAnExtraSpread(t *testing.T) {
	// By hand: residuals +-2 of variance 4: chi square 5 on 4 degrees of freedom.
	d := Disperse([]float64{2, -2, 2, -2, 2}, []float64{4, 4, 4, 4, 4}, 1)
	near(t, "chi square", d.ChiSquare, 5, 0)
	near(t, "Birge", d.Birge, math.Sqrt(1.25), 1e-15)
	if d.Significant || d.factor() != 1 {
		t.Errorf("%+v: want no significance and no factor", d)
	}
	d = Disperse([]float64{6, -6, 6, -6, 6}, []float64{4, 4, 4, 4, 4}, 1)
	near(t, "factor of a significant spread", d.factor(), math.Sqrt(45./4), 1e-12)
	if d = Disperse([]float64{100}, []float64{1}, 1); d.Freedom != 0 || d.Significant {
		t.Errorf("one reading: %+v; want no test", d)
	}
}
