package bench

import (
	"math"
	"strings"
	"testing"

	"gemel/protocol/unit"
)

func TestThePartnerGoesWhereMomentumAlongTheFaceSendsIt(t *testing.T) {
	const nm = 1e-9
	rule := func(deg, own, partner float64) float64 {
		return math.Asin(math.Sin(deg*math.Pi/180)*partner/own) * 180 / math.Pi
	}
	for _, c := range []struct {
		name                         string
		cut, azimuth                 unit.Angle
		signalNm, idlerNm            float64
		role                         string
		armDeg, tiltDeg, want, close float64
	}{
		{"untilted and degenerate it is the mirror image", 29 * unit.Degree, 90 * unit.Degree, 810, 810, signalArm, 3, 0, 3, 1e-9},
		{"untilted, sines go by wavelengths", 29 * unit.Degree, 90 * unit.Degree, 750, 880.4, signalArm, 3, 0, rule(3, 750, 1/(1/405.-1/750.)), 1e-9},
		{"the same from the other arm", 29 * unit.Degree, 90 * unit.Degree, 750, 880, idlerArm, 3, 0, rule(3, 880, 1/(1/405.-1/880.)), 1e-9},
		{"on the other side of the pump", 29 * unit.Degree, 90 * unit.Degree, 810, 810, signalArm, -3, 0, -3, 1e-9},
		// Rows S073 and S075 of testdata/phase-matching/checks.csv: both ends of one matched pair.
		{"in a tilted crystal, from the signal", 28*unit.Degree + unit.Degree/2, 0, 810, 810, signalArm, 4.3668555395, 2, 4.3785375019, 1e-5},
		{"in a tilted crystal, from the idler", 28*unit.Degree + unit.Degree/2, 0, 810, 810, idlerArm, 4.3785375019, 2, 4.3668555395, 1e-5},
	} {
		t.Run(c.name, func(t *testing.T) {
			f := demo(t)
			f.Optics.Cut, f.Optics.Azimuth = c.cut, c.azimuth
			f.Optics.Signal.Filter.Centre, f.Optics.Idler.Filter.Centre = c.signalNm*nm, c.idlerNm*nm
			got, err := f.Facts().Conjugate(c.role, c.armDeg, c.tiltDeg)
			if err != nil || math.Abs(got-c.want) > c.close {
				t.Errorf("%.8f deg, %v; want %.8f", got, err, c.want)
			}
		})
	}
}

func TestAPartnerThatDoesNotLeaveIsAnError(t *testing.T) {
	f := demo(t)
	f.Optics.Signal.Filter.Centre = 700e-9
	if _, err := f.Facts().Conjugate(signalArm, 60, 0); err == nil || !strings.Contains(err.Error(), "does not leave the crystal") {
		t.Errorf("%v; want a partner at sin = 1.19 refused", err)
	}
	f.Optics.Signal.Filter.Centre = 0
	if _, err := f.Facts().Conjugate(signalArm, 3, 0); err == nil || !strings.Contains(err.Error(), "signal_arm has no filter") {
		t.Errorf("%v; want an arm without a wavelength refused", err)
	}
	if _, err := f.Facts().Conjugate("other", 3, 0); err == nil {
		t.Error("an axis that is no arm has a conjugate; want it refused")
	}
	f.Optics = nil
	if f.Facts().Conjugate != nil {
		t.Error("a bench without optics has conjugates; want none")
	}
}

func BenchmarkConjugate(b *testing.B) {
	f, err := Load("../../configs/demo-bench.yaml")
	if err != nil {
		b.Fatal(err)
	}
	conjugate := f.Facts().Conjugate
	for b.Loop() {
		if _, err := conjugate(signalArm, 3, 1); err != nil {
			b.Fatal(err)
		}
	}
}
