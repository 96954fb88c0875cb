package assign

import (
	"errors"
	"fmt"
	"math"
)

// ErrNothing is returned when there is nothing to combine.
var ErrNothing = errors.New("no results to combine")

// An InputError says what of the input cannot be used.
type InputError struct {
	// Place is where, such as "members[2].session".
	Place           string
	Found, Expected string
}

func (e *InputError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

// A NegativeWeightError refuses weights of the full covariance that would put
// the mean outside the data.
type NegativeWeightError struct {
	Session string
	Weight  float64
}

func (e *NegativeWeightError) Error() string {
	return fmt.Sprintf("session %s: found weight %.3g, expected none below 0; take weights of the private variances", e.Session, e.Weight)
}

// A Remark is a judgement that comes with a result and does not change it.
type Remark struct {
	Code string `json:"code"`
	// Severity is "information" or "warning".
	Severity string   `json:"severity"`
	Subjects []string `json:"subjects,omitempty"` // sessions, units or instruments
	Sentence string   `json:"sentence"`
}

// The severities of remarks.
const (
	Information = "information"
	Warning     = "warning"
)

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

func orDefault(v, otherwise float64) float64 {
	if v == 0 {
		return otherwise
	}
	return v
}

func checkLevel(place string, level float64) error {
	if !(level > 0 && level < 1) {
		return &InputError{Place: place, Found: fmt.Sprint(level), Expected: "a probability between 0 and 1"}
	}
	return nil
}
