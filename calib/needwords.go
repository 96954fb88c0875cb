package calib

import "fmt"

// Sentence says in plain words what the readings say of the term.
func (n TermNeed) Sentence() string {
	words := map[string]string{
		"drift": "a drift with time", "drift.quadratic": "a curvature of the drift", "size": "a dependence on the size of the peak",
		"memory": "a carry-over from the reading before", "drift.slope": "a slope that changes with time",
	}
	name, ok := words[n.Term]
	if !ok {
		name = "the term " + n.Term
	}
	test := fmt.Sprintf("chi-square falls by %.3g on %d, p = %.2g", n.DeltaChiSquare, n.DeltaParameters, n.PValue)
	if n.F != nil {
		test = fmt.Sprintf("F = %.3g on %d, p = %.2g", *n.F, n.DeltaParameters, n.PValue)
	}
	if n.AICcWith != nil && n.AICcWithout != nil {
		test += fmt.Sprintf(", AICc %.4g with it and %.4g without", *n.AICcWith, *n.AICcWithout)
	}
	level := missingLevel
	if n.Model {
		level = keptLevel
	}
	switch {
	case n.Model && n.PValue < level:
		return fmt.Sprintf("The readings show %s, and the model has it (%s).", name, test)
	case n.Model:
		return fmt.Sprintf("The readings do not show %s; the model has it all the same (%s).", name, test)
	case n.PValue < level:
		return fmt.Sprintf("The readings show %s, and the model lacks it (%s).", name, test)
	}
	return fmt.Sprintf("The readings do not show %s, and the model has none (%s).", name, test)
}

// keptLevel is the p-value below which a term of the model is said to show.
const keptLevel = 0.05
