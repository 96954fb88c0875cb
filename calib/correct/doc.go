// Package correct holds what is done to readings before the fit: the H3
// factor, a blank known independently, and the resolution of peaks that tells
// whether a reading may be used at all.
//
// Deltas are in per mil, uncertainties are standard uncertainties (k = 1). A
// correction returns the corrected delta with its derivatives by the inputs
// that many readings share, so that [deltamoor/calib.Correction] can carry
// them to every result: common inputs are never part of the weights.
package correct
