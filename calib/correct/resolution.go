package correct

import (
	"fmt"
	"math"
)

// The widths that a resolution may be stated by.
type Width string

const (
	// BaseWidth is between the tangents' crossings of the base line:
	// R = 2(t2 − t1)/(w1 + w2).
	BaseWidth Width = "base"
	// HalfHeightWidth is at half the peak's height: R = 1.18(t2 − t1)/(w1 + w2).
	HalfHeightWidth Width = "half-height"
)

// A ChromatographicPeak has a retention time and a width in one unit.
type ChromatographicPeak struct {
	Retention, Width float64
}

// A WidthError says what of two peaks cannot be used.
type WidthError struct {
	Found, Expected string
}

func (e *WidthError) Error() string {
	return fmt.Sprintf("peaks: found %s, expected %s", e.Found, e.Expected)
}

// Resolution is that of two neighbouring peaks (IUPAC, Nomenclature for
// chromatography 1993, doi:10.1351/pac199365040819, 3.7): 1.5 separates them
// to the base line, at 1 they touch. Order does not matter.
func Resolution(a, b ChromatographicPeak, by Width) (float64, error) {
	factor := 0.0
	switch by {
	case BaseWidth:
		factor = 2
	case HalfHeightWidth:
		factor = 1.18
	default:
		return 0, &WidthError{fmt.Sprintf("width %q", by), `"base" or "half-height"`}
	}
	if !(a.Width > 0 && b.Width > 0) || !finite(a.Width+b.Width) {
		return 0, &WidthError{fmt.Sprintf("widths %v and %v", a.Width, b.Width), "positive widths"}
	}
	if !finite(a.Retention) || !finite(b.Retention) {
		return 0, &WidthError{fmt.Sprintf("retentions %v and %v", a.Retention, b.Retention), "finite times"}
	}
	return float64(factor*math.Abs(b.Retention-a.Retention)) / (a.Width + b.Width), nil
}
