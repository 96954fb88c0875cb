package scale

import (
	"errors"
	"math"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"deltamoor/calib/uncertain"
)

func near(t interface {
	Helper()
	Errorf(string, ...any)
}, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.17g, want %.17g (allowed %.2g)", what, got, want, tolerance)
	}
}

var oxygen = Relation{ID: "VPDB-VSMOW.2014", Factor: 1.03092, Offset: 30.92} // Brand et al. 2014

// Values on both scales as IUPAC 2014, CIAAW and the IAEA print them
// (calcite oxygen), to 0.006 ‰, the rounding of the prints; and the exact
// arithmetic.
func TestOxygenRelationMatchesPublishedPairs(t *testing.T) {
	for _, c := range []struct {
		name                string
		vpdb, vsmow, within float64
	}{
		{"NBS 19", -2.2, 28.65, 0.006},
		{"NBS 19, exact", -2.2, 28.651976, 1e-12},
		{"NBS 18", -23.01, 7.2, 0.006},
		{"NBS 18, exact", -23.01, 7.1985308, 1e-12},
		{"IAEA-603", -2.37, 28.47672, 5e-6},
	} {
		y, err := oxygen.Apply(uncertain.Exact(c.vpdb))
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.name, y.Value, c.vsmow, c.within)
	}
	x, err := oxygen.Invert(uncertain.Exact(0))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "VSMOW on VPDB", x.Value, -29.9926279439724, 1e-12) // exact arithmetic (mpmath)
	// The printed rounded inverse, 0.97001x − 29.99, loses 0.0026 ‰ on the way
	// from −40 and back; the exact one loses nothing.
	y, _ := oxygen.Apply(uncertain.Exact(-40))
	near(t, "−40 forward", y.Value, -10.3168, 1e-12)
	near(t, "and back by the printed inverse", 0.97001*y.Value-29.99, -39.997399, 5e-7)
	back, err := oxygen.Invert(y)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "and back", back.Value, -40, 1e-13)
}

// The exact ratios that define the scales (Coplen 1994; IUPAC 1993).
func TestDefiningRatiosAreTheirDeltas(t *testing.T) {
	for _, c := range []struct{ ratio, delta float64 }{{0.572, -428}, {0.9445, -55.5}, {1.00195, 1.95}} {
		d, err := FromRatio(c.ratio, 1)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "delta", d, c.delta, 1e-9)
		r, err := ToRatio(c.delta, 1)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "ratio", r, c.ratio, 1e-15)
	}
}

func TestChangeOfReferenceKeepsTheProduct(t *testing.T) {
	n, err := ChangeReference(uncertain.Exact(50), uncertain.Exact(50))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "50 ‰ of 50 ‰", n.Value, 102.5, 1e-13)
	rapid.Check(t, func(t *rapid.T) {
		a, b := rapid.Float64Range(-500, 500).Draw(t, "A/B"), rapid.Float64Range(-500, 500).Draw(t, "B/C")
		ac, err := ChangeReference(uncertain.Exact(a), uncertain.Exact(b))
		if err != nil {
			t.Fatal(err)
		}
		near(t, "by ratios", ac.Value, ((1+a/1000)*(1+b/1000)-1)*1000, 1e-10)
		ba, err := Exchange(uncertain.Exact(a))
		if err != nil {
			t.Fatal(err)
		}
		one, err := ChangeReference(uncertain.Exact(a), ba)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "A/B of B/A", one.Value, 0, 1e-10)
	})
}

func uncertainDelta(value, u float64) uncertain.Number {
	return uncertain.Number{Value: value, Terms: []uncertain.Term{{Source: uncertain.Source{ID: "reading:1", Kind: uncertain.KindReading, U: u}, Sensitivity: 1}}}
}

// Uncertain constants are sources of the relation's version: two values
// converted with it share them, and a value that comes back has lost them.
func TestUncertainConstantsAreSharedSources(t *testing.T) {
	r := Relation{ID: "REL-1.1", Factor: 1.005, Offset: 0.2, Covariance: [2][2]float64{{1e-6, 4e-6}, {4e-6, 9e-4}}}
	x := uncertainDelta(-40, 0.05)
	y, err := r.Apply(x)
	if err != nil {
		t.Fatal(err)
	}
	// u²(y) = A²u²(x) + x²u²(A) + u²(B) + 2x·cov(A, B)
	want := 1.005*1.005*0.0025 + 1600*1e-6 + 9e-4 + 2*-40*4e-6
	near(t, "u", y.StandardUncertainty(), math.Sqrt(want), 1e-12)
	z, err := r.Apply(uncertain.Exact(-40))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "covariance of two conversions", uncertain.Covariance(y, z), want-1.005*1.005*0.0025, 1e-12)
	back, err := r.Invert(y)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "value back", back.Value, -40, 1e-12)
	near(t, "u back", back.StandardUncertainty(), 0.05, 1e-9)
}

func TestFixedConstantsAddNoSource(t *testing.T) {
	y, err := oxygen.Apply(uncertainDelta(-2.2, 0.05))
	if err != nil {
		t.Fatal(err)
	}
	want := uncertainDelta(0, 0.05)
	want.Value, want.Terms[0].Sensitivity = 1.03092*-2.2+30.92, 1.03092
	if diff := cmp.Diff(want, y); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

func TestExchangePropagates(t *testing.T) {
	x := uncertainDelta(-428, 0.3)
	y, err := Exchange(x)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "δ(B/A)", y.Value, (1/0.572-1)*1000, 1e-9)
	near(t, "u", y.StandardUncertainty(), 0.3/(0.572*0.572), 1e-12)
}

func TestUnits(t *testing.T) {
	for u, want := range map[Unit]float64{PerMil: 25, MilliUrey: 25, PPM: 0.025, PerMeg: 0.025} {
		got, err := u.PerMil(25)
		if err != nil || got != want {
			t.Errorf("25 %s = %v ‰ (%v), want %v", u, got, err, want)
		}
	}
}

func TestQuantityOfAScale(t *testing.T) {
	for name, want := range map[string][2]string{"d13C-VPDB-LSVEC": {"d13C", "VPDB-LSVEC"}, "d18O-VSMOW-SLAP": {"d18O", "VSMOW-SLAP"}, "d15N-AIR": {"d15N", "AIR"}} {
		q, l, err := Quantity(name)
		if err != nil || q != want[0] || l != want[1] {
			t.Errorf("%s: %q, %q, %v", name, q, l, err)
		}
	}
}

func TestRefusals(t *testing.T) {
	var c *ConversionError
	for name, err := range map[string]error{
		"factor zero":        second(Relation{}.Apply(uncertain.Exact(1))),
		"NaN offset":         second(Relation{Factor: 1, Offset: math.NaN()}.Invert(uncertain.Exact(1))),
		"constants unnamed":  second(Relation{Factor: 1, Covariance: [2][2]float64{{1, 0}, {0, 0}}}.Apply(uncertain.Exact(1))),
		"no isotope left":    second(Exchange(uncertain.Exact(-1000))),
		"ratio of nothing":   second(FromRatio(0, 1)),
		"delta of nothing":   second(ToRatio(-1000, 1)),
		"unit":               second(Unit("percent").PerMil(1)),
		"scale without dash": func() error { _, _, err := Quantity("d13C"); return err }(),
	} {
		if !errors.As(err, &c) || c.Found == "" || c.Expected == "" {
			t.Errorf("%s: error %v, want a ConversionError", name, err)
		}
	}
	var v *uncertain.ValueError
	if _, err := oxygen.Apply(uncertain.Exact(math.Inf(1))); !errors.As(err, &v) {
		t.Errorf("an infinite delta: error %v", err)
	}
	if _, err := (Relation{ID: "x", Factor: 1, Covariance: [2][2]float64{{1, 2}, {2, 1}}}).Apply(uncertain.Exact(1)); !errors.As(err, &v) {
		t.Errorf("a covariance that is none: error %v", err)
	}
}

func second[T any](_ T, err error) error { return err }
