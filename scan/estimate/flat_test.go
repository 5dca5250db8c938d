package estimate

import (
	"errors"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// chance is a sweep in which all coincidences are chance ones, but for crosstalk as given.
func chance(counts float64, crosstalk float64) delayWorld {
	w := plainDelay()
	// signal · idler · width / gate = counts
	w.gateS = 40
	w.signal = math.Sqrt(counts * w.gateS / (w.widthNs * 1e-9))
	w.idler = w.signal
	w.pairs = crosstalk
	return w
}

func net(t *testing.T, rows Rows, at *float64) *NetPairs {
	t.Helper()
	_, err := Delay(rows, undying(), DelayQuestion{Channel: "pairs", Setting: "delay", Operating: at})
	var no *Refusal
	if !errors.As(err, &no) || no.Net == nil {
		t.Fatalf("%v; want what can be said of a flat sweep", err)
	}
	if text := Refused(rows, "delay", no).Text(); !strings.Contains(text, "no window") || !strings.Contains(text, "less than") {
		t.Errorf("the result says %q; want that there is no window, and the limit", text)
	}
	return no.Net
}

// A sweep of chance coincidences alone gives net coincidences about zero, within their uncertainty, and
// a limit that holds as often as it says.
func TestAFlatDelaySaysHowFewPairsThereMayBe(t *testing.T) {
	operating := 2.3
	for k, c := range []struct {
		name      string
		counts    float64 // by chance in a reading
		crosstalk float64 // true ones in a reading, too few to be seen as a window
	}{
		{"many chance coincidences", 330, 0},
		{"few", 3, 0},
		{"hardly any", 0.05, 0},
		{"a little crosstalk among many", 330, 4},
		{"a little crosstalk among few", 3, 0.3},
	} {
		t.Run(c.name, func(t *testing.T) {
			times, held, within := 200, 0, 0
			mean := 0.0
			w := chance(c.counts, c.crosstalk)
			truth := c.crosstalk / w.gateS
			for i := range times {
				n := net(t, w.scan(rand.New(rand.NewPCG(uint64(900+k), uint64(i)))), &operating)
				if !n.Declared || math.Abs(n.AtS-2.3e-9) > 1e-15 || n.FullS != 4e-9 {
					t.Fatalf("at %g s, declared %v, width %g s; want the declared delay and window", n.AtS, n.Declared, n.FullS)
				}
				if truth <= n.UpperHz {
					held++
				}
				if math.Abs(n.Hz-truth) < 2*n.U {
					within++
				}
				mean += (n.Hz - truth) / n.U / float64(times)
			}
			// 95 % of 200 is 190, with a standard deviation of 3. A limit that may only err upwards may hold always.
			if held < 178 {
				t.Errorf("the limit holds in %d of %d sweeps; want 95 %%", held, times)
			}
			if within < 178 {
				t.Errorf("within two uncertainties in %d of %d sweeps; want 95 %%", within, times)
			}
			// Some of the crosstalk lies in the window's soft edges, which the box leaves out.
			if math.Abs(mean) > 0.3 {
				t.Errorf("off by %.2f uncertainties on average; want none", mean)
			}
		})
	}
}

func TestAWindowIsNoFlatSweep(t *testing.T) {
	w := chance(330, 60)
	r, err := Delay(w.scan(rand.New(rand.NewPCG(950, 1))), undying(), DelayQuestion{Channel: "pairs", Setting: "delay"})
	if err != nil || math.Abs(*r.Value-2.3) > 0.5 {
		t.Errorf("%v, %v; want the window at 2.3 ns found among chance coincidences", r.Value, err)
	}
	// Without a declared delay the question is about the sweep's middle.
	if n := net(t, chance(330, 0).scan(rand.New(rand.NewPCG(950, 2))), nil); n.Declared || math.Abs(n.AtS-2e-9) > 1e-15 {
		t.Errorf("at %g s, declared %v; want the middle, 2 ns", n.AtS, n.Declared)
	}
}

// The significance of an excess, by hand: 25 counts where 9 in four times as long say 2.25. Li and Ma's
// equation 17 with alpha 1/4: sqrt(2 {25 ln[5 · 25/34] + 9 ln[(5/4) · 9/34]}).
func TestTheExcessIsThatOfLiAndMa(t *testing.T) {
	want := math.Sqrt(2 * (25*math.Log(5*25./34) + 9*math.Log(1.25*9./34)))
	if got := excess(25, 1, 9, 4); math.Abs(got-want) > 1e-9 {
		t.Errorf("%.9f standard deviations; want %.9f", got, want)
	}
	if got := excess(2, 1, 9, 4); got != 0 {
		t.Errorf("%g where there is less inside than outside; want 0", got)
	}
	// A few: nothing is taken off, 3.00 counts for none (Garwood 1936).
	if got := netUpper(0, 2, 100, 10, 0.95); math.Abs(got-2.9957/2) > 1e-3 {
		t.Errorf("limit %.4f; want 2.9957 counts in 2 s", got)
	}
}
