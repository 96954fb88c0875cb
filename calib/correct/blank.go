package correct

import "fmt"

// A Blank is known independently of the session's anchors: its size, in the
// unit of the readings' sizes, and its raw delta (‰). It is never used
// together with the model's size blank, which would take it out twice.
type Blank struct {
	Size, RawDelta float64
}

// BlankCorrected is a raw delta with the blank taken out, and its derivatives.
type BlankCorrected struct {
	// Delta is δ_s = (δ_m·s − δ_b·s_b)/(s − s_b).
	Delta float64
	// PerRaw is ∂δ_s/∂δ_m = s/(s − s_b).
	PerRaw float64
	// PerBlankSize is ∂δ_s/∂s_b = (δ_s − δ_b)/(s − s_b).
	PerBlankSize float64
	// PerBlankDelta is ∂δ_s/∂δ_b = −s_b/(s − s_b).
	PerBlankDelta float64
	// PerSize is ∂δ_s/∂s = (δ_m − δ_s)/(s − s_b).
	PerSize float64
}

// A SizeError says that a peak is no larger than the blank in it.
type SizeError struct {
	Size, Blank float64
}

func (e *SizeError) Error() string {
	return fmt.Sprintf("size: found %v, expected more than the blank's %v", e.Size, e.Blank)
}

// Remove takes the blank out of a raw delta (‰) measured on a peak of the
// given size, blank included. A size that does not exceed the blank's is a
// *SizeError.
func (b Blank) Remove(rawDelta, size float64) (BlankCorrected, error) {
	own := size - b.Size
	if !(own > 0) || !finite(own) || b.Size < 0 {
		return BlankCorrected{}, &SizeError{Size: size, Blank: b.Size}
	}
	d := (float64(rawDelta*size) - float64(b.RawDelta*b.Size)) / own
	return BlankCorrected{
		Delta: d, PerRaw: size / own,
		PerBlankSize:  (d - b.RawDelta) / own,
		PerBlankDelta: -b.Size / own,
		PerSize:       (rawDelta - d) / own,
	}, nil
}
