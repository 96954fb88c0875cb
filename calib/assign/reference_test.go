package assign

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"deltamoor/calib/uncertain"
)

// A published is one case of testdata/assign: inputs, and expected figures with
// what was printed, how sure the reading is, and what an independent program gives.
type published struct {
	ID       string
	Inputs   json.RawMessage
	Expected []expectation

	byName map[string]expectation
	used   map[string]bool
}

type expectation struct {
	Name, Printed, Status, Computed, Agrees string
}

func loadCase(t testing.TB, id string, inputs any) *published {
	t.Helper()
	body, err := os.ReadFile(filepath.Join("..", "..", "testdata", "assign", id+".json"))
	if err != nil {
		t.Fatal(err)
	}
	c := &published{byName: map[string]expectation{}, used: map[string]bool{}}
	if err := json.Unmarshal(body, c); err != nil {
		t.Fatalf("read %s: %v", id, err)
	}
	if err := json.Unmarshal(c.Inputs, inputs); err != nil {
		t.Fatalf("read the inputs of %s: %v", id, err)
	}
	for _, e := range c.Expected {
		c.byName[e.Name] = e
	}
	return c
}

// check holds got to the printed digits (half a unit of the last, or one unit
// where the case says so) and to the independent figure, relative tolerance tol.
func (c *published) check(t *testing.T, name string, got, tol float64) {
	t.Helper()
	e, ok := c.byName[name]
	if !ok {
		t.Fatalf("%s: no expected figure %q", c.ID, name)
	}
	c.used[name] = true
	if math.IsNaN(got) {
		t.Errorf("%s %s: got NaN", c.ID, name)
	}
	checked := false
	if e.Printed != "" && e.Agrees != "no" {
		units := 0.5 + 1e-6
		if strings.HasPrefix(e.Agrees, "last digit") {
			units = 1
		}
		if e.Status == "certified" {
			units = math.Inf(1) // more digits than binary64 inputs carry: held by tol below
			want, _ := strconv.ParseFloat(e.Printed, 64)
			near(t, c.ID+" "+name, got, want, tol)
		}
		want, last := decimal(t, e.Printed)
		if math.Abs(got-want) > units*last {
			t.Errorf("%s %s: got %v, printed %s (%s)", c.ID, name, got, e.Printed, e.Status)
		}
		checked = true
	}
	if e.Computed != "" {
		want, err := strconv.ParseFloat(e.Computed, 64)
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.ID+" "+name, got, want, tol)
		checked = true
	}
	if !checked {
		t.Errorf("%s %s: nothing to check against", c.ID, name)
	}
}

// complete says which expected figures no check has used, but for those named.
func (c *published) complete(t *testing.T, but ...string) {
	t.Helper()
	for _, e := range c.Expected {
		excused := c.used[e.Name]
		for _, b := range but {
			excused = excused || strings.HasPrefix(e.Name, b)
		}
		if !excused {
			t.Errorf("%s: figure %s is not checked", c.ID, e.Name)
		}
	}
}

// decimal is the number and the unit of its last digit.
func decimal(t *testing.T, s string) (value, last float64) {
	t.Helper()
	value, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	mantissa, exponent, _ := strings.Cut(strings.ToUpper(s), "E")
	power := 0
	if exponent != "" {
		if power, err = strconv.Atoi(exponent); err != nil {
			t.Fatal(err)
		}
	}
	if k := strings.IndexByte(mantissa, '.'); k >= 0 {
		power -= len(mantissa) - k - 1
	}
	return value, math.Pow(10, float64(power))
}

func near(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol*math.Max(math.Abs(want), 1e-300)) && got != want {
		t.Errorf("%s: got %.17g, want %.17g (relative tolerance %g)", what, got, want, tol)
	}
}

func number(t testing.TB, value float64, terms ...uncertain.Term) uncertain.Number {
	t.Helper()
	n, err := uncertain.New(value, terms...)
	if err != nil {
		t.Fatal(err)
	}
	return n
}

func source(id string, kind uncertain.Kind, u, sensitivity float64) uncertain.Term {
	return uncertain.Term{Source: uncertain.Source{ID: id, Kind: kind, U: u}, Sensitivity: sensitivity}
}

// independent are results that share nothing, one session each.
func independent(t testing.TB, y, u []float64) []Member {
	t.Helper()
	out := make([]Member, len(y))
	for i := range y {
		id := fmt.Sprintf("S-%03d", i)
		out[i] = Member{Session: id, Result: number(t, y[i], source("reading:"+id+"/1", uncertain.KindReading, u[i], 1))}
	}
	return out
}

func analyse(t testing.TB, c Campaign) *Analysis {
	t.Helper()
	out, err := Analyse(c)
	if err != nil {
		t.Fatal(err)
	}
	return out
}
