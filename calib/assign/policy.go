package assign

import (
	"fmt"

	"deltamoor/calib/uncertain"
)

// Weights says how results are weighted.
type Weights string

// The schemes of weights.
const (
	// PrivateWeights are ∝ 1/(private variance + τ²). The default.
	PrivateWeights Weights = "private"
	// FullWeights are ∝ Ω⁻¹1, those of the least variance; refused where one of
	// them is negative.
	FullWeights Weights = "full"
)

// A Policy fixes, before the data, how sessions are combined. The zero Policy
// is Paule–Mandel with private weights, tests at 5 %, and U at p = 0.95.
type Policy struct {
	Estimator Estimator
	Weights   Weights
	// Level of the tests of agreement and of instruments; 0 is 0.05.
	Level    float64
	Coverage uncertain.Coverage
	// LongTerm is the method's own between-session variance, with its group of
	// one variance; the larger of it and the estimate is used. Nil for none.
	LongTerm *uncertain.Group
}

func (p Policy) complete() (Policy, error) {
	if p.Estimator == "" {
		p.Estimator = PauleMandel
	}
	if p.Weights == "" {
		p.Weights = PrivateWeights
	}
	p.Level = orDefault(p.Level, 0.05)
	switch p.Estimator {
	case PauleMandel, DerSimonianLaird, RestrictedLikelihood, NoBetween:
	default:
		return p, &InputError{Place: "policy.estimator", Found: fmt.Sprintf("%q", p.Estimator), Expected: "paule_mandel, dersimonian_laird, reml or none"}
	}
	if p.Weights != PrivateWeights && p.Weights != FullWeights {
		return p, &InputError{Place: "policy.weights", Found: fmt.Sprintf("%q", p.Weights), Expected: "private or full"}
	}
	if p.LongTerm != nil {
		if err := p.LongTerm.Validate(); err != nil {
			return p, fmt.Errorf("read the long-term component: %w", err)
		}
		if len(p.LongTerm.Variances) != 1 {
			return p, &InputError{Place: "policy.long_term", Found: fmt.Sprintf("%d variances", len(p.LongTerm.Variances)), Expected: "one"}
		}
	}
	return p, checkLevel("policy.level", p.Level)
}
