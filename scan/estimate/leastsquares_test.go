package estimate

import (
	"encoding/csv"
	"math"
	"os"
	"testing"
)

type reference struct {
	value, start1, start2, deviation []float64
	summary                          map[string]float64
	x, y                             []float64
}

// strd reads testdata/strd (its README names the source).
func strd(t *testing.T, name string) reference {
	t.Helper()
	f, err := os.Open("../../testdata/strd/" + name + ".csv")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	r := csv.NewReader(f)
	r.Comment = '#'
	rows, err := r.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	ref := reference{summary: map[string]float64{}}
	for _, row := range rows {
		switch row[0] {
		case "parameter":
			ref.value = append(ref.value, number(t, row[2]))
			ref.deviation = append(ref.deviation, number(t, row[5]))
			if row[3] != "" {
				ref.start1 = append(ref.start1, number(t, row[3]))
				ref.start2 = append(ref.start2, number(t, row[4]))
			}
		case "summary":
			ref.summary[row[1]] = number(t, row[2])
		case "observation":
			ref.x = append(ref.x, number(t, row[2]))
			ref.y = append(ref.y, number(t, row[3]))
		}
	}
	return ref
}

// digits is the log relative error: the number of digits that agree.
func digits(got, want float64) float64 {
	if got == want {
		return 16
	}
	return -math.Log10(math.Abs(got-want) / math.Abs(want))
}

func TestCertifiedNonlinearFits(t *testing.T) {
	for _, c := range []struct {
		name  string // Statistical Reference Datasets (StRD), nonlinear regression, of this name
		model func(x float64, b []float64) float64
	}{
		{"gauss1", func(x float64, b []float64) float64 {
			return b[0]*math.Exp(-b[1]*x) + b[2]*math.Exp(-(x-b[3])*(x-b[3])/b[4]/b[4]) + b[5]*math.Exp(-(x-b[6])*(x-b[6])/b[7]/b[7])
		}},
		{"eckerle4", func(x float64, b []float64) float64 {
			return b[0] / b[1] * math.Exp(-0.5*(x-b[2])*(x-b[2])/b[1]/b[1])
		}},
		{"misra1a", func(x float64, b []float64) float64 { return b[0] * (1 - math.Exp(-b[1]*x)) }},
	} {
		ref := strd(t, c.name)
		for k, start := range [][]float64{ref.start1, ref.start2} {
			fit, err := LeastSquares(c.model, ref.x, ref.y, start)
			if err != nil {
				t.Errorf("%s, start %d: %v", c.name, k+1, err)
				continue
			}
			worst, worstU := 16.0, 16.0
			for i := range ref.value {
				worst = math.Min(worst, digits(fit.Params[i], ref.value[i]))
				worstU = math.Min(worstU, digits(fit.U(i), ref.deviation[i]))
			}
			t.Logf("%s, start %d: %.1f digits, %.1f in the deviations", c.name, k+1, worst, worstU)
			if worst < 6 || worstU < 6 {
				t.Errorf("%s, start %d: %.1f and %.1f digits; want 6", c.name, k+1, worst, worstU)
			}
			if d := digits(fit.Value, ref.summary["residual_sum_of_squares"]); d < 6 {
				t.Errorf("%s: sum of squares agrees in %.1f digits", c.name, d)
			}
			if d := digits(fit.Residual, ref.summary["residual_standard_deviation"]); d < 6 {
				t.Errorf("%s: residual deviation agrees in %.1f digits", c.name, d)
			}
			if fit.Freedom != int(ref.summary["degrees_of_freedom"]) {
				t.Errorf("%s: %d degrees of freedom", c.name, fit.Freedom)
			}
		}
	}
}

func TestCertifiedLinearFit(t *testing.T) {
	ref := strd(t, "norris") // Statistical Reference Datasets (StRD), linear regression, Norris
	var design [][]float64
	for _, x := range ref.x {
		design = append(design, []float64{1, x})
	}
	fit, err := LinearFit(design, ref.y)
	if err != nil {
		t.Fatal(err)
	}
	for i := range ref.value {
		if d := digits(fit.Params[i], ref.value[i]); d < 11 {
			t.Errorf("b%d agrees in %.1f digits; want 11", i, d)
		}
		if d := digits(fit.U(i), ref.deviation[i]); d < 11 {
			t.Errorf("u(b%d) agrees in %.1f digits; want 11", i, d)
		}
	}
	if d := digits(fit.Residual, ref.summary["residual_standard_deviation"]); d < 11 {
		t.Errorf("residual deviation agrees in %.1f digits; want 11", d)
	}
}

func TestFitsRefuseWhatTheDataCannotTell(t *testing.T) {
	x, y := []float64{1, 2, 3, 4, 5}, []float64{1.1, 2, 2.9, 4.1, 5}
	if f, err := LeastSquares(func(x float64, p []float64) float64 { return (p[0] + p[1]) * x }, x, y, []float64{1, 1}); err == nil {
		t.Errorf("two parameters that only appear summed: got %v; want an error", f.Cov)
	}
	if _, err := LinearFit([][]float64{{1, 1}}, []float64{2}); err == nil {
		t.Error("two parameters of one observation: want an error")
	}
}
