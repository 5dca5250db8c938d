package unit_test

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/big"
	"strings"
	"testing"

	"pgregory.net/rapid"

	"gemel/protocol/unit"
)

func TestAnglesAreReadExactly(t *testing.T) {
	for text, want := range map[string]unit.Angle{
		"0 deg":                0,
		"-0 deg":               0,
		"1 deg":                unit.Degree,
		"1.5 deg":              unit.Degree + 30*unit.Arcminute,
		"-2.864 deg":           -2864 * unit.Degree / 1000,
		"0.000001 deg":         unit.Degree / 1_000_000,
		"30 arcmin":            30 * unit.Arcminute,
		"0.1 arcmin":           6 * unit.Arcsecond,
		"12 arcsec":            12 * unit.Arcsecond,
		"0.000001 arcsec":      unit.MicroArcsecond,
		"360 deg":              unit.Turn,
		"1e2 deg":              100 * unit.Degree,
		"+7.25e-1 deg":         unit.Degree * 29 / 40,
		"  3 deg  ":            3 * unit.Degree,
		"0.0000000001 deg":     0,                     // finer than the grain: rounded
		"0.0000000002 deg":     unit.MicroArcsecond,   // 0.72 of one
		"17.453292519943 mrad": 3600 * unit.Arcsecond, // pi/180, to the grain
	} {
		got, err := unit.ParseAngle(text)
		if err != nil || got != want {
			t.Errorf("%q is %d, %v; want %d", text, got, err, want)
		}
	}
}

// A millionth of a degree is 3600 grains, so every such angle is a whole number of them.
func TestAMillionthOfADegreeIsExact(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		millionths := rapid.Int64Range(-360_000_000, 360_000_000).Draw(t, "millionths of a degree")
		text := new(big.Rat).SetFrac64(millionths, 1_000_000).FloatString(6)
		got, err := unit.ParseAngle(text + " deg")
		if err != nil || got != unit.Angle(millionths*3600) {
			t.Fatalf("%s deg is %d, %v; want %d", text, got, err, millionths*3600)
		}
		if back := got.Fixed(6); back != text && "-"+back != text {
			t.Fatalf("%s deg is printed %s", text, back)
		}
	})
}

func TestMinutesAndSecondsOfArcAreExact(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		seconds := rapid.Int64Range(-1_296_000, 1_296_000).Draw(t, "arc seconds")
		want := unit.Angle(seconds) * unit.Arcsecond
		for _, text := range []string{
			fmt.Sprintf("%d arcsec", seconds),
			new(big.Rat).SetFrac64(seconds*1000, 60_000).FloatString(9) + " arcmin",
		} {
			got, err := unit.ParseAngle(text)
			// Sixtieths end nowhere in decimals: nine of them are good to the grain.
			if err != nil || (got-want).Abs() > unit.MicroArcsecond {
				t.Fatalf("%s is %d, %v; want %d", text, got, err, want)
			}
			if strings.HasSuffix(text, "sec") && got != want {
				t.Fatalf("%s is %d; want %d", text, got, want)
			}
		}
	})
}

func TestAnglesSurviveJSONAndTheirOwnPrint(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		a := unit.Angle(rapid.Int64Range(-1<<60, 1<<60).Draw(t, "micro-arcseconds"))
		body, err := json.Marshal(a)
		if err != nil {
			t.Fatal(err)
		}
		var back unit.Angle
		if err := json.Unmarshal(body, &back); err != nil || back != a {
			t.Fatalf("%d is written %s and comes back as %d, %v", a, body, back, err)
		}
		again, err := json.Marshal(back)
		if err != nil || string(again) != string(body) {
			t.Fatalf("%s is written again as %s, %v", body, again, err)
		}
		read, err := unit.ParseAngle(a.String())
		if err != nil || read != a {
			t.Fatalf("%s is read as %d, %v; want %d", a, read, err, back)
		}
	})
}

func TestAnglesArePrintedShort(t *testing.T) {
	for a, want := range map[unit.Angle]string{
		0: "0 deg", unit.Degree: "1 deg", -unit.Degree / 2: "-0.5 deg", 100 * unit.Degree: "100 deg",
		2850 * unit.Degree / 1000: "2.85 deg", unit.MicroArcsecond: "0.0000000003 deg", -unit.MicroArcsecond: "-0.0000000003 deg", unit.Arcsecond: "0.0002777778 deg",
	} {
		if got := a.String(); got != want {
			t.Errorf("%d is printed %q; want %q", a, got, want)
		}
	}
	if got := (-unit.Degree / 10000).Fixed(3); got != "0.000" {
		t.Errorf("-0.0001 deg with 3 decimals is %q; want no minus nothing", got)
	}
}

func TestDegreesAndRadiansRoundOnce(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		deg := rapid.Float64Range(-720, 720).Draw(t, "degrees")
		if d := math.Abs(unit.Degrees(deg).Degrees() - deg); d > 1.5e-10 {
			t.Fatalf("%v deg is off by %v; want at most half a grain", deg, d)
		}
		rad := deg * math.Pi / 180
		if d := math.Abs(unit.Radians(rad).Radians() - rad); d > 3e-12 {
			t.Fatalf("%v rad is off by %v; want at most half a grain", rad, d)
		}
	})
}

func TestWhatIsNoAngleIsRefused(t *testing.T) {
	for text, want := range map[string]string{
		"1.5":                            `1.5 has no unit; want a value with its unit, such as "1.5 deg"`,
		"":                               `""; want a number, one space and a unit, such as "1.5 deg"`,
		"deg":                            `"deg"; want a number, one space and a unit, such as "1.5 deg"`,
		"1.5deg":                         `"1.5deg"; want a number, one space and a unit, such as "1.5 deg"`,
		"2 s":                            `unit "s"; want an angle in deg, mrad, arcmin or arcsec`,
		"1 Deg":                          `unit "Deg"; want an angle in deg, mrad, arcmin or arcsec`,
		"1 mdeg":                         `unit "mdeg"; want an angle in deg, mrad, arcmin or arcsec`,
		"1,5 deg":                        `"1,5"; want a decimal number`,
		"0x1p3 deg":                      `"0x1p3"; want a decimal number`,
		"1_000 deg":                      `"1_000"; want a decimal number`,
		"1/3 deg":                        `"1/3"; want a decimal number`,
		"NaN deg":                        `"NaN"; want a decimal number`,
		"Inf mrad":                       `"Inf"; want a decimal number`,
		"--1 deg":                        `"--1"; want a decimal number`,
		". deg":                          `"."; want a decimal number`,
		"1e deg":                         `"1e"; want a decimal number`,
		"1e999999999 deg":                `"1e999999999"; want a decimal number`,
		"1e99 deg":                       `1e99 deg; want an angle below 600000 deg`,
		"-1e9 deg":                       `-1e9 deg; want an angle below 600000 deg`,
		"1e99 mrad":                      `1e99 mrad; want an angle below 600000 deg`,
		strings.Repeat("1", 41) + " deg": `a number of 41 characters; want at most 40`,
	} {
		_, err := unit.ParseAngle(text)
		if err == nil || err.Error() != want {
			t.Errorf("%q: %v; want %s", text, err, want)
		}
	}
	if _, err := unit.ParseAngle("5"); !errors.Is(err, unit.ErrNoUnit) {
		t.Errorf("a plain number: %v; want ErrNoUnit", err)
	}
	for _, body := range []string{`"1"`, `null`, `1e40`, `true`, `[]`} {
		var a unit.Angle
		if err := json.Unmarshal([]byte(body), &a); err == nil {
			t.Errorf("JSON %s is read as %v; want it refused", body, a)
		}
	}
}

func FuzzParseAngle(f *testing.F) {
	for _, s := range []string{"1.5 deg", "-30 arcmin", "12 arcsec", "4.2 mrad", "5", "1e99 deg", "0.000000001 deg", "\x00 deg", "1  deg", "1 deg deg"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		a, err := unit.ParseAngle(text)
		if err != nil {
			if a != 0 || err.Error() == "" {
				t.Errorf("%q gives %d with error %q", text, a, err)
			}
			return
		}
		if a.Abs() > math.MaxInt64/4 {
			t.Errorf("%q is %d, beyond the largest angle", text, a)
		}
		back, err := unit.ParseAngle(a.String())
		if err != nil || back != a {
			t.Errorf("%q is printed %q, which is read as %d, %v; want %d", text, a, back, err, a)
		}
	})
}
