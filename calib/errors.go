package calib

import "fmt"

// A Refusal is what every refused input says: where, what was found, what was
// expected. The detailed errors embed it; [errors.As] into
// interface{ Refused() Refusal } finds any of them.
type Refusal struct {
	// Place is within the session, model or policy, in the words of its JSON
	// form: "readings[3].raw", "anchors[0].u", "model.drift". It is empty when
	// the whole is meant.
	Place           string
	Found, Expected string
}

// Refused returns the refusal itself.
func (r Refusal) Refused() Refusal { return r }

func (r Refusal) Error() string {
	if r.Place == "" {
		return fmt.Sprintf("found %s, expected %s", r.Found, r.Expected)
	}
	return fmt.Sprintf("%s: found %s, expected %s", r.Place, r.Found, r.Expected)
}

// The refusals before any arithmetic.
type (
	// NotFiniteError: a value is NaN or infinite.
	NotFiniteError struct{ Refusal }
	// RangeError: a number so large, or differences so small, that squares of
	// variances leave the range of doubles.
	RangeError struct{ Refusal }
	// NegativeUncertaintyError: a standard uncertainty or variance is negative.
	NegativeUncertaintyError struct{ Refusal }
	// MissingUncertaintyError: declared weights need u of every reading that is used.
	MissingUncertaintyError struct{ Refusal }
	// AssignedValueError: an assigned value's uncertain number or group cannot be used.
	AssignedValueError struct{ Refusal }
	// NoAnchorsError: no anchor has a reading that can be fitted.
	NoAnchorsError struct{ Refusal }
	// UnassignedAnchorError: an anchor's reading has no assigned value.
	UnassignedAnchorError struct{ Refusal }
	// UnreadAnchorError: an assigned value has no reading.
	UnreadAnchorError struct{ Refusal }
	// SingleAnchorError: one anchor without the model's AllowSingleAnchor.
	SingleAnchorError struct{ Refusal }
	// EqualAnchorsError: the anchors' values do not differ, so there is no slope.
	EqualAnchorsError struct{ Refusal }
	// AnchorSpanError: the anchors are closer together than the policy allows.
	AnchorSpanError struct{ Refusal }
	// TermInputError: a term lacks its times or sizes, or they do not vary.
	TermInputError struct{ Refusal }
	// UnknownWordError: a role, term or weight model that does not exist.
	UnknownWordError struct{ Refusal }
	// UnsupportedTermError: the words are known but not together.
	UnsupportedTermError struct{ Refusal }
	// DuplicateError: two anchors of one material, two readings of one identity.
	DuplicateError struct{ Refusal }
	// PreparationError: a preparation that belongs to two subjects, or whose
	// variance cannot be estimated.
	PreparationError struct{ Refusal }
	// OrderError: memory needs to know which reading came before.
	OrderError struct{ Refusal }
	// CovarianceError: a covariance of the wrong shape, or none.
	CovarianceError struct{ Refusal }
	// CorrectionError: a correction input that cannot be used.
	CorrectionError struct{ Refusal }
	// TooManyError: more readings than the engine takes.
	TooManyError struct{ Refusal }
	// PolicyError: a limit that cannot be used.
	PolicyError struct{ Refusal }
)

// The refusals of the fit itself.
type (
	// NotEstimableError: a term is not determined when every material's level is
	// free; only assigned values, if anything, would identify it.
	NotEstimableError struct{ Refusal }
	// TooFewReadingsError: fewer fitted readings than parameters.
	TooFewReadingsError struct{ Refusal }
	// NoReplicatesError: estimated weights without degrees of freedom.
	NoReplicatesError struct{ Refusal }
	// SingularError: the readings' and anchors' covariance is singular.
	SingularError struct{ Refusal }
	// ConditionError: the parameters are determined too badly for double precision.
	ConditionError struct{ Refusal }
	// ConvergenceError: the fit or its variances did not settle.
	ConvergenceError struct{ Refusal }
	// WeakSlopeError: the slope is not distinguishable from zero, so the line
	// cannot be inverted.
	WeakSlopeError struct{ Refusal }
)
