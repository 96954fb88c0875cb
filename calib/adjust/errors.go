package adjust

import "fmt"

// A RankError says that the columns of X do not determine every parameter.
type RankError struct {
	// Column is the first parameter, in the model's order, that the columns
	// before it already explain.
	Column int
	// Rows and Parameters are what there is and what is asked.
	Rows, Parameters int
}

func (e *RankError) Error() string {
	if e.Rows < e.Parameters {
		return fmt.Sprintf("%d rows do not determine %d parameters", e.Rows, e.Parameters)
	}
	return fmt.Sprintf("parameter %d is not determined: its column depends on the others", e.Column)
}

// A ConditionError says that the parameters are determined too badly for
// double precision.
type ConditionError struct {
	// Condition is the condition number of the whitened X with columns of unit length.
	Condition, Limit float64
}

func (e *ConditionError) Error() string {
	return fmt.Sprintf("condition number %.3g is above the limit %.3g", e.Condition, e.Limit)
}

// A SingularError says that a covariance is singular or not positive, at the
// given row.
type SingularError struct {
	Row   int
	Pivot float64
}

func (e *SingularError) Error() string {
	return fmt.Sprintf("covariance is singular or not positive at row %d (pivot %.3g)", e.Row, e.Pivot)
}

// A ConvergenceError says that the iteration did not settle.
type ConvergenceError struct {
	Iterations int
	// Step is the last step, in units of its own standard uncertainty.
	Step float64
}

func (e *ConvergenceError) Error() string {
	return fmt.Sprintf("no convergence after %d iterations (last step %.3g standard uncertainties)", e.Iterations, e.Step)
}
