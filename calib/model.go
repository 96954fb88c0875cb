package calib

import "deltamoor/calib/uncertain"

// A Model names the terms of the session model and how readings are weighted:
//
//	raw = intercept + slope·true + drift(time) + size terms + memory + noise
//
// The zero Model is the plain line with declared weights.
type Model struct {
	Drift   Drift   `json:"drift,omitempty"`
	Size    Size    `json:"size,omitempty"`
	Memory  Memory  `json:"memory,omitempty"`
	Weights Weights `json:"weights,omitempty"`
	// DeclaredDF is the degrees of freedom of declared uncertainties; nil when they are known.
	DeclaredDF *float64 `json:"declared_nu,omitempty"`
	// AllowSingleAnchor permits the one-anchor fit in ratio form, which is always flagged.
	AllowSingleAnchor bool `json:"allow_single_anchor,omitempty"`
}

// Drift is a term in time; "" means none.
type Drift string

// The drift terms.
const (
	DriftNone      Drift = "none"
	DriftLinear    Drift = "linear"
	DriftQuadratic Drift = "quadratic"
	DriftBracketed Drift = "bracketed"
)

// Size is a term in the size of the peak; "" means none.
type Size string

// The size terms.
const (
	SizeNone    Size = "none"
	SizeLinear  Size = "linear"
	SizeInverse Size = "inverse"
	SizeLog     Size = "log"
	SizeBlank   Size = "blank"
)

// Memory is carry-over from the reading before; "" means none.
type Memory string

// The memory terms.
const (
	MemoryNone      Memory = "none"
	MemoryCarryover Memory = "carryover"
)

// Weights says where the readings' variances come from; "" means declared.
type Weights string

// The weight models.
const (
	WeightsDeclared  Weights = "declared"
	WeightsEqual     Weights = "equal"
	WeightsReplicate Weights = "replicate"
	WeightsSize      Weights = "size"
)

// A Policy holds the limits of a method; the zero Policy is the documented
// default: p = 0.95, k from the effective degrees of freedom, |z| beyond 3
// disagrees, no minimum span.
type Policy struct {
	// Probability of the expanded uncertainty; 0 means 0.95.
	Probability float64
	// CoverageFactor fixes k; 0 takes it from the effective degrees of freedom.
	CoverageFactor float64
	// LeftOutLimit flags an anchor whose left-out |z| exceeds it; 0 means 3.
	LeftOutLimit float64
	// StudentizedLimit flags a reading whose studentised residual exceeds it; 0 means 3.
	StudentizedLimit float64
	// TestLevel is the p-value below which a test of the fit is flagged; 0 means 0.05.
	TestLevel float64
	// MinimumSpan refuses anchors closer together than this (‰); 0 asks for nothing.
	MinimumSpan float64
	// AdvisedSpan flags anchors closer together than this (‰); 0 asks for nothing.
	AdvisedSpan float64
	// MinimumAnchors flags a fit with fewer distinct anchors; 0 asks for nothing.
	MinimumAnchors int
	// BetweenSession is the method's between-session standard uncertainty, with
	// its degrees of freedom (0 when known), added to every sample and control.
	BetweenSession BetweenSession
	// SampleHomogeneity is how far a portion of a sample may be from the sample,
	// added to every sample and to no control.
	SampleHomogeneity SampleHomogeneity
}

// SampleHomogeneity is the component of a sample's own heterogeneity. It is one
// source for each sample, common to all its sessions: more sessions of one
// portion do not reduce it.
type SampleHomogeneity struct {
	// StandardUncertainty in ‰; 0 for none.
	StandardUncertainty float64
	// DegreesOfFreedom of it; 0 when known.
	DegreesOfFreedom float64
	// Scale is part of the source's identity: sample:<subject>/<Scale>.
	Scale string
	// Group is the identity of the version that states it; "" is the scale's.
	Group string
}

// BetweenSession is the component that one session adds to each of its values.
type BetweenSession struct {
	// StandardUncertainty in ‰; 0 for none.
	StandardUncertainty float64
	// DegreesOfFreedom of it; 0 when known.
	DegreesOfFreedom float64
	// Session and Scale form the source's identity: between_session:<Session>/<Scale>/<subject>.
	Session, Scale string
	// Common makes one source for the whole session instead of one per subject.
	Common bool
	// Group is the identity of the long-term version that the variance comes from; "" when typed in.
	Group string
}

// withDefaults fills in the documented defaults.
func (p Policy) withDefaults() Policy {
	set := func(v *float64, d float64) {
		if *v == 0 {
			*v = d
		}
	}
	set(&p.Probability, uncertain.DefaultProbability)
	set(&p.LeftOutLimit, 3)
	set(&p.StudentizedLimit, 3)
	set(&p.TestLevel, 0.05)
	return p
}

func (p Policy) coverage() uncertain.Coverage {
	return uncertain.Coverage{Probability: p.Probability, Factor: p.CoverageFactor}
}
