package unit_test

import (
	"errors"
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"pgregory.net/rapid"

	"gemel/protocol/unit"
)

func TestQuantitiesAreReadInTheirBaseUnit(t *testing.T) {
	for _, c := range []struct {
		text string
		kind unit.Kind
		want float64
	}{
		{"405 nm", unit.Length, 405e-9},
		{"2 mm", unit.Length, 2e-3},
		{"4.0 ns", unit.Time, 4e-9},
		{"1.5 h", unit.Time, 5400},
		{"250 kHz", unit.Rate, 250e3},
		{"12 /s", unit.Rate, 12},
		{"30 mW", unit.Power, 30e-3},
		{"20 Cel", unit.Temperature, 20},
		{"293.15 K", unit.Temperature, 20},
		{"0.5 %", unit.Share, 0.005},
		{"0.5%", unit.Share, 0.005},
		{"3 ppm", unit.Share, 3e-6},
		{"1 1", unit.Share, 1},
		{"-5 mV", unit.Voltage, -5e-3},
		{"2 uA", unit.Current, 2e-6},
		{"180 deg", unit.Plane, 180},
		{"60 arcmin", unit.Plane, 1},
	} {
		got, err := unit.Parse(c.text, c.kind)
		if err != nil || math.Abs(got-c.want) > 1e-12*math.Abs(c.want)+1e-13 {
			t.Errorf("%q is %v, %v; want %v", c.text, got, err, c.want)
		}
	}
}

func TestEveryUnitConvertsThereAndBack(t *testing.T) {
	kinds := []unit.Kind{unit.Plane, unit.Time, unit.Length, unit.Rate, unit.Power, unit.Temperature, unit.Share, unit.Voltage, unit.Current}
	for _, kind := range kinds {
		names := unit.Units(kind)
		if len(names) == 0 {
			t.Errorf("no unit of kind %s", kind)
		}
		for _, name := range names {
			value, got, written, err := unit.ParseAny("12.5 " + name)
			if err != nil || got != kind || written != name {
				t.Errorf("12.5 %s is of kind %s, unit %q, %v; want %s", name, got, written, err, kind)
				continue
			}
			if back, err := unit.In(value, name); err != nil || math.Abs(back-12.5) > 1e-9 {
				t.Errorf("12.5 %s comes back as %v, %v", name, back, err)
			}
		}
	}
	if got, want := unit.Units(unit.Time), []string{"ps", "ns", "us", "ms", "s", "min", "h"}; !slices.Equal(got, want) {
		t.Errorf("units of time are %v; want %v", got, want)
	}
	if _, err := unit.In(1, "furlong"); err == nil {
		t.Error("a furlong is known; want it refused")
	}
}

func TestWhatIsNoQuantityIsRefused(t *testing.T) {
	for _, c := range []struct {
		text string
		kind unit.Kind
		want string
	}{
		{"405", unit.Length, "has no unit"},
		{"405 NM", unit.Length, `unknown unit "NM"`},
		{"405 nm", unit.Power, `"405 nm"; want a power in nW, uW, mW, W`},
		{"1 W", unit.Plane, `"1 W"; want an angle in arcsec, arcmin, mrad, deg`},
		{"nm", unit.Length, "want a number, one space and a unit"},
		{"x nm", unit.Length, `"x"; want a decimal number`},
	} {
		_, err := unit.Parse(c.text, c.kind)
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q as %s: %v; want %q in it", c.text, c.kind, err, c.want)
		}
	}
}

func TestDurationsAreExactToTheNanosecond(t *testing.T) {
	for text, want := range map[string]time.Duration{
		"2 s": 2 * time.Second, "500 ms": 500 * time.Millisecond, "1.5 h": 90 * time.Minute, "0.1 s": 100 * time.Millisecond,
		"1000 ps": time.Nanosecond, "0.000000001 s": time.Nanosecond, "-3 min": -3 * time.Minute, "9223372036.854775807 s": math.MaxInt64,
	} {
		got, err := unit.ParseDuration(text)
		if err != nil || got != want {
			t.Errorf("%q is %v, %v; want %v", text, got, err, want)
		}
	}
	for text, want := range map[string]string{
		"1 ps": "want whole nanoseconds", "0.3 ns": "want whole nanoseconds", "9223372036.854775808 s": "want less than 292 years",
		"1 deg": "want a time in", "5": "has no unit", "1e99 h": "want less than 292 years", "1s": "want a number, one space and a unit",
	} {
		if d, err := unit.ParseDuration(text); err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("%q is %v, %v; want %q", text, d, err, want)
		}
	}
	if _, err := unit.ParseDuration("5"); !errors.Is(err, unit.ErrNoUnit) {
		t.Errorf("a plain number: %v; want ErrNoUnit", err)
	}
	rapid.Check(t, func(t *rapid.T) {
		d := time.Duration(rapid.Int64().Draw(t, "nanoseconds"))
		got, err := unit.ParseDuration(strconv.FormatInt(int64(d), 10) + " ns")
		if err != nil || got != d {
			t.Fatalf("%d ns is %v, %v", d, got, err)
		}
		if got, err := unit.ParseDuration(d.String()); err == nil {
			t.Fatalf("Go's own form %v is read as %v; want it refused, it is not ours", d, got)
		}
	})
}
