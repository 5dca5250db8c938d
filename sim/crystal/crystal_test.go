package crystal

import (
	"errors"
	"go/ast"
	"go/parser"
	"go/token"
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// evaluate computes a published formula from its text: n^2 = … with L in micrometres.
func evaluate(t *testing.T, formula string, um float64) float64 {
	t.Helper()
	_, right, ok := strings.Cut(formula, "=")
	if !ok {
		t.Fatalf("formula %q has no right-hand side", formula)
	}
	// Go has no power operator, but ^ binds as tightly as is needed after the exponent's digits
	// are glued to their base: "L**4" becomes the call pow(L, 4).
	for _, e := range []string{"6", "4", "2"} {
		right = strings.ReplaceAll(right, "L**"+e, "pow(L, "+e+")")
	}
	for i := strings.Index(right, "**2"); i >= 0; i = strings.Index(right, "**2") {
		j := i
		for j > 0 && strings.ContainsRune("0123456789.", rune(right[j-1])) {
			j--
		}
		right = right[:j] + "pow(" + right[j:i] + ", 2)" + right[i+3:]
	}
	e, err := parser.ParseExpr(right)
	if err != nil {
		t.Fatalf("%q: %v", right, err)
	}
	var walk func(ast.Expr) float64
	walk = func(e ast.Expr) float64 {
		switch e := e.(type) {
		case *ast.BasicLit:
			v, err := strconv.ParseFloat(e.Value, 64)
			if err != nil {
				t.Fatal(err)
			}
			return v
		case *ast.Ident:
			return um
		case *ast.ParenExpr:
			return walk(e.X)
		case *ast.CallExpr:
			return math.Pow(walk(e.Args[0]), walk(e.Args[1]))
		case *ast.BinaryExpr:
			x, y := walk(e.X), walk(e.Y)
			switch e.Op {
			case token.ADD:
				return x + y
			case token.SUB:
				return x - y
			case token.MUL:
				return x * y
			case token.QUO:
				return x / y
			}
		}
		t.Fatalf("%q: cannot evaluate %T", formula, e)
		return 0
	}
	return math.Sqrt(walk(e))
}

func TestTermsSayWhatTheFormulaSays(t *testing.T) {
	if n := len(Names()); n != 22 {
		t.Fatalf("%d sets; want 22", n)
	}
	for _, name := range Names() {
		s, err := Named(name)
		if err != nil {
			t.Fatal(err)
		}
		if s.Reference == "" || s.Source == "" || s.SourceKind == "" {
			t.Errorf("%s: where it comes from is missing", name)
		}
		for _, d := range s.Axes {
			for i := range 21 {
				um := d.RangeUm[0] + (d.RangeUm[1]-d.RangeUm[0])*float64(i)/20
				want := evaluate(t, d.Formula, um)
				got, err := s.Index(d.Axis, um*1000, s.RefCel)
				if err != nil {
					t.Fatal(err)
				}
				if math.Abs(got-want) > 1e-12 {
					t.Errorf("%s n_%s at %g um: terms give %.15g, the formula %.15g", name, d.Axis, um, got, want)
				}
			}
		}
	}
}

func TestOrderOfIndicesFitsClassAndSign(t *testing.T) {
	for _, name := range Names() {
		s, _ := Named(name)
		const nm = 1000
		n := func(a Axis) float64 {
			v, err := s.Extrapolate(a, nm, s.RefCel)
			if err != nil {
				t.Fatal(err)
			}
			return v
		}
		switch {
		case s.Class == Biaxial && !(n(X) < n(Y) && n(Y) < n(Z)):
			t.Errorf("%s: n_x %g, n_y %g, n_z %g; want them rising", name, n(X), n(Y), n(Z))
		case s.Class == Uniaxial && (n(Ordinary) > n(Extraordinary)) != (s.Sign == "negative"):
			t.Errorf("%s: n_o %g, n_e %g in a %s crystal", name, n(Ordinary), n(Extraordinary), s.Sign)
		}
	}
}

func TestAWavelengthOutsideTheRangeIsRefusedUnlessAskedFor(t *testing.T) {
	s, _ := Named("bbo-zhang-2000")
	if _, err := s.Index(Ordinary, 405, 20); !errors.Is(err, ErrRange) {
		t.Errorf("405 nm: %v; want ErrRange", err)
	}
	if n, err := s.Extrapolate(Ordinary, 405, 20); err != nil || math.Abs(n-1.69) > 0.01 {
		t.Errorf("405 nm on request: %g, %v; want about 1.69", n, err)
	}
	if _, err := s.Index(Ordinary, 640, 20); err != nil {
		t.Errorf("640 nm, the edge itself: %v", err)
	}
	if err := s.CheckRange(3300); !errors.Is(err, ErrRange) {
		t.Errorf("3300 nm: %v; want ErrRange", err)
	}
	if _, err := s.Extrapolate(Ordinary, 134.98, 20); !errors.Is(err, ErrRange) {
		t.Errorf("next to the pole: %v; want ErrRange", err)
	}
	if _, err := s.Index(X, 800, 20); err == nil {
		t.Error("n_x of a uniaxial crystal was given; want a refusal")
	}
}

func TestTheOrdinaryIndexOfBBOFallsFasterWithTemperature(t *testing.T) {
	for _, name := range Names() {
		if !strings.HasPrefix(name, "bbo-") {
			continue
		}
		s, _ := Named(name)
		var slope [2]float64
		for i, a := range []Axis{Ordinary, Extraordinary} {
			hot, _ := s.Index(a, 810, s.RefCel+10)
			cold, _ := s.Index(a, 810, s.RefCel)
			slope[i] = (hot - cold) / 10
		}
		if math.Abs(slope[0]+16.6e-6) > 1e-10 || math.Abs(slope[1]+9.3e-6) > 1e-10 || s.DnDTWarning == "" {
			t.Errorf("%s: dn_o/dT %g, dn_e/dT %g; want -16.6e-6 and -9.3e-6, and a warning that copies interchange them", name, slope[0], slope[1])
		}
	}
	for name, want := range map[string]bool{"kdp-zernike-1964": false, "mgo5-linbo3-gayer-2008": true, "ktp-kato-2002": true} {
		if s, _ := Named(name); s.HasTemperature() != want {
			t.Errorf("%s has temperature terms: %v; want %v", name, s.HasTemperature(), want)
		}
	}
}

func TestASetOfOnesOwnIsCheckedBeforeItIsUsed(t *testing.T) {
	good := func() Set {
		s, _ := Named("bbo-kato-1986")
		s.Name, s.Axes = "mine", slices.Clone(s.Axes)
		return s
	}
	if s, err := Own(good()); err != nil || s.Sign != "negative" {
		t.Errorf("a good set: sign %q, %v", s.Sign, err)
	}
	for _, c := range []struct {
		name string
		f    func(*Set)
		want string
	}{
		{"one axis missing", func(s *Set) { s.Axes = s.Axes[:1] }, "1 dispersion formulas"},
		{"an axis twice", func(s *Set) { s.Axes[1].Axis = Ordinary }, "no dispersion formula for n_e"},
		{"no range", func(s *Set) { s.Axes[0].RangeUm = [2]float64{} }, "two rising wavelengths"},
		{"a pole inside the range", func(s *Set) { s.Axes[0].Poles = []Pole{{0.01, 0, 0.25}} }, "lies inside the range"},
		{"a padded term", func(s *Set) { s.Axes[0].Poles = append(slices.Clone(s.Axes[0].Poles), Pole{}) }, "left out"},
		{"no index", func(s *Set) { s.Axes[1].Constant = -3 }, "between 1 and 10"},
		{"ranges apart", func(s *Set) { s.Axes[0].RangeUm = [2]float64{1.1, 1.2} }, "do not meet"},
		{"unknown class", func(s *Set) { s.Class = "cubic" }, `class "cubic"`},
	} {
		s := good()
		c.f(&s)
		if _, err := Own(s); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v; want %q", c.name, err, c.want)
		}
	}
	if _, err := Named("bbo"); err == nil || !strings.Contains(err.Error(), "bbo-kato-1986") {
		t.Errorf("an unknown name: %v; want a list of the known ones", err)
	}
}

func BenchmarkIndex(b *testing.B) {
	s, _ := Named("bbo-kato-1986")
	for b.Loop() {
		sink, _ = s.Index(Ordinary, 810, 20)
	}
}

var sink float64
