package adjust

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/mat"
)

type strd struct {
	Name, Source string
	Columns      [][]float64
	Y            []float64
	Estimate, SD []string
	ResidualSD   string `json:"residual_sd"`
}

// Certified linear regressions of the NIST Statistical Reference Datasets. The
// digits asked for are those that LAPACK's least squares (numpy lstsq, double
// precision) reaches on the same set, within a factor of 30; the polynomials of degree
// five and Longley's data are the hard ones.
func TestLeastSquaresMatchesCertifiedRegressions(t *testing.T) {
	data, err := os.ReadFile("testdata/strd.json")
	if err != nil {
		t.Fatal(err)
	}
	var sets []strd
	if err := json.Unmarshal(data, &sets); err != nil {
		t.Fatal(err)
	}
	digits := map[string]float64{"norris": 12.1, "pontius": 13.5, "noint1": 14.8, "longley": 10.9, "wampler1": 9.6, "wampler2": 13.0, "wampler3": 9.0, "wampler5": 5.5}
	for _, s := range sets {
		t.Run(s.Name+": "+s.Source, func(t *testing.T) {
			columns := FromRows(s.Columns)
			x, err := LeastSquares(columns, s.Y)
			if err != nil {
				t.Fatal(err)
			}
			var rss float64
			for i, y := range s.Y {
				r := y
				for k := range x {
					r -= x[k] * columns.At(k, i)
				}
				rss += r * r
			}
			sd, _ := strconv.ParseFloat(s.ResidualSD, 64)
			if got := math.Sqrt(rss / float64(len(s.Y)-len(x))); math.Abs(got-sd) > 1e-6*sd+1e-6 {
				t.Errorf("residual sd %v, want %s", got, s.ResidualSD)
			}
			for k := range x {
				want, err := strconv.ParseFloat(s.Estimate[k], 64)
				if err != nil {
					t.Fatal(err)
				}
				if math.Abs(x[k]-want) > 30*math.Pow(10, -digits[s.Name])*math.Abs(want) {
					t.Errorf("coefficient %d = %.16g, want %s (relative %.2g)", k, x[k], s.Estimate[k], math.Abs(x[k]-want)/math.Abs(want))
				}
			}
		})
	}
}

// line is F = α + βτ, one row for each value.
type line struct{ n int }

func (l line) Evaluate(theta, tau, f, slope []float64, x *Matrix) {
	for i := range l.n {
		if f != nil {
			f[i] = theta[0] + theta[1]*tau[i]
		}
		if slope != nil {
			slope[i] = theta[1]
		}
		if x != nil {
			x.Set(0, i, 1)
			x.Set(1, i, tau[i])
		}
	}
}

func (l line) Bend(_, _, dtheta, dtau []float64, dx *Matrix, dslope []float64) {
	for i := range l.n {
		dx.Set(0, i, 0)
		dx.Set(1, i, dtau[i])
		dslope[i] = dtheta[1]
	}
}

// randomLine is a line through n points with full covariances of both sides.
func randomLine(r *rand.Rand, n int) *Problem {
	pr := &Problem{Model: line{n}, Parameters: 2, Observed: make([]float64, n), Latent: make([]int, n), Values: make([]float64, n)}
	for i := range n {
		pr.Latent[i] = i
		pr.Values[i] = 10*r.Float64() - 5 + float64(i)
		pr.Observed[i] = 1 + 0.9*pr.Values[i] + 0.3*r.NormFloat64()
	}
	covariance := func(scale float64) *Matrix {
		g := NewMatrix(n, n+1)
		for i := range g.Data {
			g.Data[i] = scale * r.NormFloat64()
		}
		return gram(g, 0)
	}
	pr.Noise, pr.ValueCovariance = covariance(0.1), covariance(0.08)
	return pr
}

// The check beside the engine: the same Gauss–Newton steps with gonum's dense
// matrices, inverses and normal equations.
func gonumSolve(pr *Problem, theta []float64) (t []float64, c *mat.Dense, chi2 float64) {
	n := len(pr.Observed)
	t = append([]float64(nil), theta...)
	noise := mat.NewDense(n, n, append([]float64(nil), pr.Noise.Data...))
	vy := mat.NewDense(n, n, append([]float64(nil), pr.ValueCovariance.Data...))
	for range 200 {
		e := mat.NewVecDense(n, nil)
		for i := range n {
			e.SetVec(i, pr.Observed[i]-t[0]-t[1]*pr.Values[i])
		}
		var sigma, inv mat.Dense
		sigma.Scale(t[1]*t[1], vy)
		sigma.Add(&sigma, noise)
		if err := inv.Inverse(&sigma); err != nil {
			panic(err)
		}
		var lambda, shift mat.VecDense
		lambda.MulVec(&inv, e)
		chi2 = mat.Dot(e, &lambda)
		shift.MulVec(vy, &lambda)
		x := mat.NewDense(n, 2, nil)
		for i := range n {
			x.Set(i, 0, 1)
			x.Set(i, 1, pr.Values[i]+t[1]*shift.AtVec(i))
		}
		var ix, xix mat.Dense
		ix.Mul(&inv, x)
		xix.Mul(x.T(), &ix)
		c = new(mat.Dense)
		if err := c.Inverse(&xix); err != nil {
			panic(err)
		}
		var score, step mat.VecDense
		score.MulVec(x.T(), &lambda)
		step.MulVec(c, &score)
		t[0] += step.AtVec(0)
		t[1] += step.AtVec(1)
	}
	return t, c, chi2
}

func TestSolveAgreesWithDenseNormalEquations(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 5))
	for k := range 50 {
		pr := randomLine(r, 4+r.IntN(6))
		s, err := Solve(pr, []float64{1, 0.9})
		if err != nil {
			t.Fatal(err)
		}
		want, c, chi2 := gonumSolve(pr, []float64{1, 0.9})
		got := s.Covariance()
		for i := range 2 {
			if math.Abs(s.Theta[i]-want[i]) > 1e-9*math.Sqrt(c.At(i, i)) {
				t.Errorf("case %d: parameter %d = %.15g, want %.15g", k, i, s.Theta[i], want[i])
			}
			for j := range 2 {
				if math.Abs(got.At(i, j)-c.At(i, j)) > 1e-8*math.Sqrt(c.At(i, i)*c.At(j, j)) {
					t.Errorf("case %d: covariance %d %d = %v, want %v", k, i, j, got.At(i, j), c.At(i, j))
				}
			}
		}
		if math.Abs(s.ChiSquare-chi2) > 1e-8*(1+chi2) {
			t.Errorf("case %d: chi-square %v, want %v", k, s.ChiSquare, chi2)
		}
	}
}

// K V_r Kᵀ + (∂θ/∂y) V_y (∂θ/∂y)ᵀ = C, and the rows of P are orthogonal to X.
func TestSourcesAddUpToCovariance(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 11))
	for range 20 {
		pr := randomLine(r, 6)
		s, err := Solve(pr, []float64{1, 0.9})
		if err != nil {
			t.Fatal(err)
		}
		c, d := s.Covariance(), s.Sensitivity()
		for i := range 2 {
			for j := range 2 {
				sum := Quadratic(s.K.Row(i), pr.Noise, s.K.Row(j)) + Quadratic(d.Row(i), pr.ValueCovariance, d.Row(j))
				if math.Abs(sum-c.At(i, j)) > 1e-10*math.Sqrt(c.At(i, i)*c.At(j, j)) {
					t.Errorf("sources %d %d add up to %v, covariance %v", i, j, sum, c.At(i, j))
				}
			}
		}
		p, inverse := s.Projection()
		for i := range 6 {
			for k := range 2 {
				if v := Dot(p.Row(i), s.X.Row(k)); math.Abs(v) > 1e-9*Norm(inverse.Row(i))*Norm(s.X.Row(k)) {
					t.Errorf("P·X is %v, want 0", v)
				}
			}
			if p.At(i, i) < 0 || p.At(i, i) > inverse.At(i, i)*(1+1e-12) {
				t.Errorf("P_ii = %v outside 0 … %v", p.At(i, i), inverse.At(i, i))
			}
		}
	}
}

// The exact derivative agrees with refits at shifted values to second order:
// halving the shift quarters what is left.
func TestDerivativeAgreesWithRefits(t *testing.T) {
	r := rand.New(rand.NewPCG(13, 17))
	for k := range 20 {
		n := 4 + r.IntN(4)
		pr := randomLine(r, n)
		s, err := Solve(pr, []float64{1, 0.9})
		if err != nil {
			t.Fatal(err)
		}
		d, err := s.Derivative()
		if err != nil {
			t.Fatal(err)
		}
		at := r.IntN(n)
		left := func(h float64) float64 {
			moved := *pr
			moved.Values = append([]float64(nil), pr.Values...)
			moved.Values[at] += h
			m, err := Solve(&moved, s.Theta)
			if err != nil {
				t.Fatal(err)
			}
			worst := 0.0
			for i := range 2 {
				worst = math.Max(worst, math.Abs(m.Theta[i]-s.Theta[i]-h*d.At(i, at)))
			}
			return worst
		}
		// Central differences of the refit, against the derivative.
		h := 1e-4
		if e := left(h); e > 1e-6 {
			t.Errorf("case %d: derivative leaves %v of a shift of %v", k, e, h)
		}
		if a, b := left(0.02), left(0.01); a > 1e-9 && !(b < 0.35*a) {
			t.Errorf("case %d: halving the shift leaves %v of %v, want a quarter", k, b, a)
		}
	}
}

func TestSolveKeepsTheLowerMinimum(t *testing.T) {
	// Pearson's data with York's weights have a second minimum at b = 0.249,
	// chi-square 231.1, besides b = −0.4805, 11.866 (60-digit solution).
	x := []float64{0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4}
	y := []float64{5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5}
	wx := []float64{1000, 1000, 500, 800, 200, 80, 60, 20, 1.8, 1}
	wy := []float64{1, 1.8, 4, 8, 20, 20, 70, 70, 100, 500}
	pr := &Problem{Model: line{10}, Parameters: 2, Observed: y, Values: x, Latent: []int{0, 1, 2, 3, 4, 5, 6, 7, 8, 9}, Noise: NewMatrix(10, 10), ValueCovariance: NewMatrix(10, 10)}
	for i := range x {
		pr.Noise.Set(i, i, 1/wy[i])
		pr.ValueCovariance.Set(i, i, 1/wx[i])
	}
	for _, starts := range [][][]float64{{{1, 0.248787}, {5.5, -0.5}}, {{5.5, -0.5}, {1, 0.248787}}} {
		s, err := Solve(pr, starts...)
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(s.Theta[1]+0.48053340744620198662) > 1e-13 {
			t.Errorf("slope %v, want the lower minimum −0.4805334", s.Theta[1])
		}
	}
}

func TestRefusals(t *testing.T) {
	pr := &Problem{Model: line{3}, Parameters: 2, Observed: []float64{1, 2, 3}, Values: []float64{1, 1, 1}, Latent: []int{0, 1, 2}, NoiseVariance: 1}
	var rank *RankError
	if _, err := Solve(pr, []float64{0, 1}); !errors.As(err, &rank) || rank.Column != 1 {
		t.Errorf("three equal values: error %v, want a RankError at the slope", err)
	}
	pr.Values = []float64{1, 1 + 1e-12, 1 - 1e-12}
	var condition *ConditionError
	if _, err := Solve(pr, []float64{0, 1}); !errors.As(err, &condition) {
		t.Errorf("values that differ in the twelfth digit: error %v, want a ConditionError", err)
	}
	pr.Values, pr.NoiseVariance = []float64{1, 2, 4}, 0
	var singular *SingularError
	if _, err := Solve(pr, []float64{0, 1}); !errors.As(err, &singular) {
		t.Errorf("exact readings beyond the parameters: error %v, want a SingularError", err)
	}
	if _, err := Solve(&Problem{Model: line{1}, Parameters: 2, Observed: []float64{1}, Values: []float64{1}, Latent: []int{0}}, []float64{0, 1}); !errors.As(err, &rank) {
		t.Errorf("one row for two parameters: error %v, want a RankError", err)
	}
}

func TestExactlyDeterminedNeedsNoCovariance(t *testing.T) {
	pr := &Problem{Model: line{2}, Parameters: 2, Observed: []float64{1, 3}, Values: []float64{0, 4}, Latent: []int{0, 1}}
	s, err := Solve(pr, []float64{0, 1})
	if err != nil {
		t.Fatal(err)
	}
	if s.Theta[0] != 1 || s.Theta[1] != 0.5 || !s.Determined {
		t.Errorf("line through (0, 1) and (4, 3): %v", s.Theta)
	}
	want := [][]float64{{1, 0}, {-0.25, 0.25}} // X⁻¹
	for k := range want {
		for i := range want[k] {
			if math.Abs(s.K.At(k, i)-want[k][i]) > 1e-15 {
				t.Errorf("K[%d][%d] = %v, want %v", k, i, s.K.At(k, i), want[k][i])
			}
		}
	}
}

// Random covariances against exact products: 2⁵³ digits are lost without pairs.
func TestSemiCholeskyGivesTheMatrixBack(t *testing.T) {
	r := rand.New(rand.NewPCG(19, 23))
	for range 100 {
		n, rank := 1+r.IntN(6), 1+r.IntN(6)
		g := NewMatrix(n, rank)
		for i := range g.Data {
			g.Data[i] = math.Round(8*r.NormFloat64()) / 8
		}
		a := gram(g, 0)
		l := NewMatrix(n, n)
		copy(l.Data, a.Data)
		if err := SemiCholesky(l); err != nil {
			t.Fatalf("%v for %v", err, a)
		}
		back := gram(l, 0)
		for i := range back.Data {
			if math.Abs(back.Data[i]-a.Data[i]) > 1e-12*(1+math.Abs(a.Data[i])) {
				t.Fatalf("L Lᵀ = %v, want %v", back.Data, a.Data)
			}
		}
	}
}

func TestDotIsTheSumOfProducts(t *testing.T) {
	for n := range 20 {
		a, b, want := make([]float64, n), make([]float64, n), 0.0
		for i := range a {
			a[i], b[i] = float64(i+1), float64(2*i-3)
			want += a[i] * b[i]
		}
		if got := Dot(a, b); got != want { // integers: exact
			t.Errorf("dot of %d = %v, want %v", n, got, want)
		}
		hi, lo := ExtendedDot(a, b)
		if hi != want || lo != 0 {
			t.Errorf("extended dot of %d = %v + %v, want %v", n, hi, lo, want)
		}
	}
	// 1e16 + 1 − 1e16 is 1 in pairs and 0 in doubles.
	if hi, lo := ExtendedDot([]float64{1e16, 1, -1e16}, []float64{1, 1, 1}); hi+lo != 1 {
		t.Errorf("extended sum = %v", hi+lo)
	}
}

func ExampleLeastSquares() {
	// y = 1 + 2x through three exact points.
	columns := FromRows([][]float64{{1, 1, 1}, {0, 1, 2}})
	x, err := LeastSquares(columns, []float64{1, 3, 5})
	fmt.Printf("%.3f %.3f %v\n", x[0], x[1], err)
	// Output: 1.000 2.000 <nil>
}
