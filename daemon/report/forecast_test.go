package report

import (
	"runtime"
	"testing"
	"time"

	"gemel/daemon/bench"
	"gemel/scan"
	"gemel/scan/forecast"
	"gemel/scan/recipe"
)

func demo(t testing.TB) *bench.File {
	t.Helper()
	f, err := bench.Load("../../configs/demo-bench.yaml")
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func planned(t testing.TB, f *bench.File, text string) scan.Plan {
	t.Helper()
	r, err := recipe.Parse("recipe", []byte(text))
	if err != nil {
		t.Fatal(err)
	}
	facts := f.Facts()
	facts.AcceptedAt = time.Date(2031, 2, 3, 21, 0, 0, 0, time.UTC)
	plan, err := r.Plan(facts)
	if err != nil {
		t.Fatal(err)
	}
	return plan
}

const million = `
title: A million points
sweep:
  - {axis: signal_arm, from: 2 deg, to: 3.998 deg, step: 0.002 deg}
  - {axis: idler_arm, from: 2 deg, to: 3.998 deg, step: 0.002 deg}
order: serpentine
dwell: {time: 4 s, slice: 2 s}
dark: {every: 500 points, dwell: 10 s, also: [start, end]}
`

// BenchmarkAMillionPoints compares parsing, expanding, checking and timing a recipe of a million
// points with parsing and expanding it alone, both as quick as they are at their best of a few times.
func BenchmarkAMillionPoints(b *testing.B) {
	f := demo(b)
	var plan scan.Plan
	best := func(do func()) time.Duration {
		least := time.Duration(1 << 62)
		for range 5 {
			runtime.GC()
			began := time.Now()
			do()
			least = min(least, time.Since(began))
		}
		return least
	}
	var bare, all time.Duration
	var held uint64
	for b.Loop() {
		bare = best(func() { plan = planned(b, f, million) })
		var before, after runtime.MemStats
		runtime.GC()
		runtime.ReadMemStats(&before)
		var kept *forecast.Forecast
		all = best(func() {
			plan = planned(b, f, million)
			var err error
			if kept, err = forecast.Of(forecast.Ask{Plan: plan, Bench: forecastBench(f), Begins: time.Date(2031, 2, 3, 21, 0, 0, 0, time.UTC)}); err != nil {
				b.Fatal(err)
			}
		})
		runtime.GC()
		runtime.ReadMemStats(&after)
		held = after.HeapAlloc - min(before.HeapAlloc, after.HeapAlloc)
		runtime.KeepAlive(kept)
	}
	b.ReportMetric(float64(all)/float64(bare), "times-the-expansion")
	b.ReportMetric(float64(held)/1e6, "bytes-a-point-held-by-the-forecast")
	b.ReportMetric(bare.Seconds()*1e3, "ms-expansion")
	b.ReportMetric(all.Seconds()*1e3, "ms-in-all")
	if all > 3*bare {
		b.Errorf("%s in all, %s for the expansion alone; want at most three times as long", all, bare)
	}
}
