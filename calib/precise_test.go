package calib

import (
	"fmt"
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// precision of the independent solution, in bits.
const precision = 400

func exactly(x float64) *big.Float { return new(big.Float).SetPrec(precision).SetFloat64(x) }

func zero() *big.Float { return exactly(0) }

// preciseSolve solves A·x = b by Gauss elimination with pivoting; A and b are overwritten.
func preciseSolve(a [][]*big.Float, b []*big.Float) []*big.Float {
	n := len(b)
	for k := range n {
		pivot := k
		for i := k + 1; i < n; i++ {
			if new(big.Float).Abs(a[i][k]).Cmp(new(big.Float).Abs(a[pivot][k])) > 0 {
				pivot = i
			}
		}
		a[k], a[pivot], b[k], b[pivot] = a[pivot], a[k], b[pivot], b[k]
		for i := k + 1; i < n; i++ {
			f := new(big.Float).Quo(a[i][k], a[k][k])
			for j := k; j < n; j++ {
				a[i][j] = new(big.Float).Sub(a[i][j], new(big.Float).Mul(f, a[k][j]))
			}
			b[i] = new(big.Float).Sub(b[i], new(big.Float).Mul(f, b[k]))
		}
	}
	x := make([]*big.Float, n)
	for k := n - 1; k >= 0; k-- {
		x[k] = b[k]
		for j := k + 1; j < n; j++ {
			x[k] = new(big.Float).Sub(x[k], new(big.Float).Mul(a[k][j], x[j]))
		}
		x[k] = new(big.Float).Quo(x[k], a[k][k])
	}
	return x
}

// preciseFit minimises Σ((r − f)/u)² + Σ((τ − y)/u_y)² over intercept, slope,
// drift and the latent values together, all of them free, by Gauss–Newton on the
// full normal equations in 400 bits. It shares nothing with the engine: no
// elimination of the latent values, no reduction, no QR.
func preciseFit(s Session, start [3]float64, reference float64) (theta [3]*big.Float) {
	m := len(s.Anchors)
	at := map[string]int{}
	x := make([]*big.Float, 3+m)
	for k, v := range start {
		x[k] = exactly(v)
	}
	for i, a := range s.Anchors {
		at[a.Material] = i
		x[3+i] = exactly(a.Value.Value)
	}
	for range 60 {
		normal, right := make([][]*big.Float, 3+m), make([]*big.Float, 3+m)
		for i := range normal {
			normal[i], right[i] = make([]*big.Float, 3+m), zero()
			for j := range normal[i] {
				normal[i][j] = zero()
			}
		}
		add := func(row map[int]*big.Float, residual *big.Float, u float64) {
			w := new(big.Float).Quo(exactly(1), new(big.Float).Mul(exactly(u), exactly(u)))
			for i, a := range row {
				wa := new(big.Float).Mul(w, a)
				right[i].Add(right[i], new(big.Float).Mul(wa, residual))
				for j, b := range row {
					normal[i][j].Add(normal[i][j], new(big.Float).Mul(wa, b))
				}
			}
		}
		for _, rd := range s.Readings {
			if rd.Role != Anchor {
				continue
			}
			k := 3 + at[rd.Subject]
			t := new(big.Float).Sub(exactly(*rd.Time), exactly(reference))
			f := new(big.Float).Add(x[0], new(big.Float).Add(new(big.Float).Mul(x[1], x[k]), new(big.Float).Mul(x[2], t)))
			add(map[int]*big.Float{0: exactly(1), 1: x[k], 2: t, k: x[1]}, new(big.Float).Sub(exactly(rd.Raw), f), *rd.StandardUncertainty)
		}
		for i, a := range s.Anchors {
			add(map[int]*big.Float{3 + i: exactly(1)}, new(big.Float).Sub(exactly(a.Value.Value), x[3+i]), a.Value.Terms[0].U)
		}
		moved := 0.0
		for i, d := range preciseSolve(normal, right) {
			x[i] = new(big.Float).Add(x[i], d)
			v, _ := d.Float64()
			moved = math.Max(moved, math.Abs(v))
		}
		if moved < 1e-40 {
			break
		}
	}
	copy(theta[:], x)
	return theta
}

// Random hard cases agree with an independent solution in 400 bits to 1e-9 of
// the parameter's uncertainty or of itself: weights that spread over many orders,
// anchors close together far from zero, times far from zero.
func TestHardCasesAgreeWithAnIndependentHighPrecisionSolution(t *testing.T) {
	random := rand.New(rand.NewPCG(2026, 12))
	compared := 0
	for k := range 200 {
		var s Session
		centre := math.Pow(10, 4*random.Float64()) * float64(1-2*(k%2))
		span := math.Pow(10, 3*random.Float64()-1)
		m := 3 + random.IntN(4)
		for i := range m {
			u := span * math.Pow(10, -1-3*random.Float64())
			s.Anchors = append(s.Anchors, assigned(fmt.Sprint("A", i), centre+span*(float64(i)+0.3*random.Float64())+u*random.NormFloat64(), u))
		}
		origin := 1000 * random.Float64()
		for n := range 4 * m {
			i := n % m
			u := span * math.Pow(10, -1-3*random.Float64())
			raw := -3 + 0.9*s.Anchors[i].Value.Value + 0.01*span*float64(n) + u*random.NormFloat64()
			s.read(fmt.Sprint("A", i), Anchor, raw, u).at(origin + float64(n)/7)
		}
		r, err := Fit(s, Model{Drift: DriftLinear}, Policy{})
		if err != nil {
			t.Logf("case %d: %v", k, err)
			continue
		}
		compared++
		theta := preciseFit(s, [3]float64{r.Parameters[0].Value, r.Parameters[1].Value, r.Parameters[2].Value}, *r.ReferenceTime)
		for i, want := range theta {
			w, _ := want.Float64()
			p := r.Parameters[i]
			near(t, fmt.Sprintf("case %d (centre %.3g, span %.3g) %s", k, centre, span, p.Name), p.Value, w, 1e-9*math.Max(math.Abs(w), p.StandardUncertainty))
		}
	}
	if compared < 180 {
		t.Errorf("only %d of 200 cases are answered", compared)
	}
}
