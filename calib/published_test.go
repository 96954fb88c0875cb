package calib

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"deltamoor/calib/uncertain"
)

// A publishedCase is one file of testdata/published: a fit as the stateless
// request states it, and what its source says of the answer.
type publishedCase struct {
	ID, Title, Source, Convention, Notes string
	Request                              publishedRequest
	Expected                             []struct{ Quantity, Value, Rule, Source string }
}

type publishedRequest struct {
	Model   Model
	Anchors []struct {
		Material string
		Value, U float64
		Nu       *float64
	}
	AnchorCovariance [][]float64 `json:"anchor_covariance"`
	Readings         []struct {
		Material, Sample, Role, Preparation string
		Raw                                 float64
		U, Time, Size, Previous             *float64
		Excluded                            bool
	}
	ReadingCovariance [][]float64 `json:"reading_covariance"`
	CrossCovariance   [][]float64 `json:"cross_covariance"`
}

// session turns a request into the engine's input.
func (q publishedRequest) session(t testing.TB) Session {
	t.Helper()
	s := Session{ReadingCovariance: q.ReadingCovariance, CrossCovariance: q.CrossCovariance}
	var codes []string
	var values []float64
	covariance := q.AnchorCovariance
	for i, a := range q.Anchors {
		codes, values = append(codes, a.Material), append(values, a.Value)
		if q.AnchorCovariance == nil {
			row := make([]float64, len(q.Anchors))
			row[i] = a.U * a.U
			covariance = append(covariance, row)
		}
	}
	numbers, err := uncertain.FromCovariance("anchor:", uncertain.KindAnchor, codes, values, covariance)
	if err != nil {
		t.Fatal(err)
	}
	for i, n := range numbers {
		s.Anchors = append(s.Anchors, AssignedValue{Material: codes[i], Value: n})
	}
	for _, r := range q.Readings {
		subject := r.Material
		if r.Sample != "" {
			subject = r.Sample
		}
		s.Readings = append(s.Readings, Reading{
			Subject: subject, Role: Role(r.Role), Raw: r.Raw, StandardUncertainty: r.U, Time: r.Time, Size: r.Size,
			Preparation: r.Preparation, Previous: r.Previous, Excluded: r.Excluded,
		})
	}
	return s
}

func readPublished(t testing.TB) []publishedCase {
	t.Helper()
	files, err := filepath.Glob("../testdata/published/*.json")
	if err != nil || len(files) == 0 {
		t.Fatalf("no published cases: %v", err)
	}
	var out []publishedCase
	for _, name := range files {
		data, err := os.ReadFile(name)
		if err != nil {
			t.Fatal(err)
		}
		var c publishedCase
		d := json.NewDecoder(strings.NewReader(string(data)))
		d.DisallowUnknownFields()
		if err := d.Decode(&c); err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		if c.Source == "" || c.Convention == "" || len(c.Expected) == 0 {
			t.Fatalf("%s: a case names its source, its covariance convention and what is expected", name)
		}
		out = append(out, c)
	}
	return out
}

func TestFitMatchesPublishedCases(t *testing.T) {
	for _, c := range readPublished(t) {
		t.Run(c.ID+": "+c.Source, func(t *testing.T) {
			r, err := Fit(c.Request.session(t), c.Request.Model, Policy{})
			if err != nil {
				t.Fatal(err)
			}
			for _, e := range c.Expected {
				got, err := quantity(r, e.Quantity)
				if err != nil {
					t.Errorf("%s: %v", e.Quantity, err)
					continue
				}
				want, err := strconv.ParseFloat(e.Value, 64)
				if err != nil {
					t.Fatal(err)
				}
				if tol := tolerance(t, e.Value, e.Rule, c, r); !(math.Abs(got-want) <= tol) {
					t.Errorf("%s = %.17g, want %s (%s; off by %.3g, allowed %.3g)", e.Quantity, got, e.Value, e.Source, math.Abs(got-want), tol)
				}
			}
		})
	}
}

// tolerance reads a rule: half a unit of the last digit printed, or relative,
// absolute, or relative to the largest assigned value.
func tolerance(t *testing.T, text, rule string, c publishedCase, r *Result) float64 {
	t.Helper()
	value, _ := strconv.ParseFloat(text, 64)
	number := func(s string) float64 {
		v, err := strconv.ParseFloat(s, 64)
		if err != nil {
			t.Fatalf("rule %q: %v", rule, err)
		}
		return v
	}
	switch {
	case rule == "half unit of the last digit":
		mantissa, exponent, _ := strings.Cut(strings.ToLower(text), "e")
		decimals := 0
		if _, after, ok := strings.Cut(mantissa, "."); ok {
			decimals = len(after)
		}
		e, _ := strconv.Atoi(exponent)
		// The last bits of value and unit are not the printed number's.
		return 0.5*math.Pow(10, float64(e-decimals)) + 1e-15*math.Abs(value)
	case strings.HasPrefix(rule, "relative "):
		return number(rule[len("relative "):]) * math.Abs(value)
	case strings.HasPrefix(rule, "absolute "):
		return number(rule[len("absolute "):])
	case rule == "1e-9 of the product of u":
		// A covariance near zero has no relative digits of its own.
		return 1e-9 * r.Parameters[0].StandardUncertainty * r.Parameters[1].StandardUncertainty
	case rule == "1e-9 of the largest value":
		largest := 0.0
		for _, a := range c.Request.Anchors {
			largest = math.Max(largest, math.Abs(a.Value))
		}
		return 1e-9 * largest
	}
	t.Fatalf("unknown rule %q", rule)
	return 0
}

// quantity reads one number of a result by the name that the files use.
func quantity(r *Result, name string) (float64, error) {
	head, rest, call := strings.Cut(name, "(")
	var args []string
	if call {
		args = strings.Split(strings.TrimSuffix(rest, ")"), ",")
	}
	parameter := func(name string) int {
		return slices.IndexFunc(r.Parameters, func(p Parameter) bool { return p.Name == name })
	}
	subject := func(name string) int {
		return slices.IndexFunc(r.Subjects, func(s SubjectResult) bool { return s.Subject == name })
	}
	nullable := func(v *float64) (float64, error) {
		if v == nil {
			return 0, fmt.Errorf("null")
		}
		return *v, nil
	}
	number := func(i int) float64 { v, _ := strconv.ParseFloat(args[i], 64); return v }
	a, b := parameter("intercept"), parameter("slope")
	forward := func(x float64) float64 {
		return r.Covariance[a][a] + 2*x*r.Covariance[a][b] + x*x*r.Covariance[b][b]
	}
	switch head {
	case "chi_square":
		return nullable(r.ChiSquare)
	case "p_value":
		return nullable(r.PValue)
	case "residual_sd":
		return nullable(r.ResidualSD)
	case "degrees_of_freedom":
		return float64(r.DegreesOfFreedom), nil
	case "chi_square/degrees_of_freedom":
		v, err := nullable(r.ChiSquare)
		return v / float64(r.DegreesOfFreedom), err
	case "birge_ratio*u":
		v, err := nullable(r.BirgeRatio)
		return v * r.Parameters[parameter(args[0])].StandardUncertainty, err
	case "residual_sum_of_squares":
		var sum float64
		for _, x := range r.Readings {
			if x.Residual != nil {
				sum += *x.Residual * *x.Residual
			}
		}
		return sum, nil
	case "residual":
		return nullable(r.Readings[int(number(0))].Residual)
	case "line.slope":
		return r.Line.Slope, nil
	case "line.intercept":
		return r.Line.Intercept, nil
	case "line.covariance":
		return r.Line.Covariance, nil
	case "line.u":
		if args[0] == "slope" {
			return r.Line.USlope, nil
		}
		return r.Line.UIntercept, nil
	case "forward":
		return r.Parameters[a].Value + r.Parameters[b].Value*number(0), nil
	case "u_forward":
		slope := r.Parameters[b].Value
		return math.Sqrt(forward(number(0)) + slope*slope*number(1)*number(1)), nil
	case "variance_forward":
		return forward(number(0)), nil
	case "variance_single":
		return forward(number(0)) + *r.ResidualSD**r.ResidualSD, nil
	case "variance":
		return r.Covariance[parameter(args[0])][parameter(args[0])], nil
	case "correlation":
		i, j := parameter(args[0]), parameter(args[1])
		return r.Covariance[i][j] / math.Sqrt(r.Covariance[i][i]*r.Covariance[j][j]), nil
	case "adjusted":
		for _, x := range r.Anchors {
			if x.Material == args[0] {
				return x.Adjusted, nil
			}
		}
	case "flag":
		return indicator(slices.ContainsFunc(r.Flags, func(f Flag) bool { return f.Code == args[0] })), nil
	case "subject_flag":
		return indicator(slices.Contains(r.Subjects[subject(args[0])].Flags, args[1])), nil
	case "value":
		if i := subject(args[0]); i >= 0 {
			return r.Subjects[i].Value, nil
		}
	case "u":
		if i := parameter(args[0]); i >= 0 {
			return r.Parameters[i].StandardUncertainty, nil
		}
		if i := subject(args[0]); i >= 0 {
			return r.Subjects[i].StandardUncertainty, nil
		}
	case "covariance", "u_difference", "rss_difference":
		if i, j := parameter(args[0]), parameter(args[1]); i >= 0 && j >= 0 {
			return r.Covariance[i][j], nil
		}
		x, y := r.Number(subject(args[0])), r.Number(subject(args[1]))
		d, err := uncertain.Compare(x, y, r.Groups(), uncertain.Coverage{})
		switch head {
		case "u_difference":
			return d.StandardUncertainty, err
		case "rss_difference":
			return d.RootSumOfSquares, err
		}
		return uncertain.Covariance(x, y), nil
	}
	if i := parameter(name); i >= 0 {
		return r.Parameters[i].Value, nil
	}
	return 0, fmt.Errorf("not in the result")
}
