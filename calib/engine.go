package calib

import "fmt"

// EngineNumber is the number of the algorithm that [Fit] uses. A change that
// moves any stored number is a new one, and the old one stays callable by
// [FitWith].
const EngineNumber = "1"

// FitWith fits with the algorithm of the given number, for recomputing what
// was stored with it. An unknown number is an *UnknownWordError.
func FitWith(engine string, session Session, model Model, policy Policy) (*Result, error) {
	switch engine {
	case "1":
		return fit1(session, model, policy)
	}
	return nil, &UnknownWordError{Refusal{Place: "engine", Found: fmt.Sprintf("%q", engine), Expected: `"1"`}}
}
