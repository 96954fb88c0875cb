package uncertain_test

import (
	"fmt"

	"deltamoor/calib/uncertain"
)

// Two results that rest on one anchor: their difference is better known than
// either.
func ExampleCompare() {
	anchor := uncertain.Source{ID: "anchor:USGS40", Kind: uncertain.KindAnchor, U: 0.04}
	result := func(value float64, reading string) uncertain.Number {
		n, err := uncertain.New(value,
			uncertain.Term{Source: anchor, Sensitivity: 1},
			uncertain.Term{Source: uncertain.Source{ID: reading, Kind: uncertain.KindReading, U: 0.03}, Sensitivity: 1})
		if err != nil {
			panic(err)
		}
		return n
	}
	c, err := uncertain.Compare(result(-25.10, "reading:S-1/4"), result(-25.21, "reading:S-1/9"), nil, uncertain.Coverage{})
	if err != nil {
		panic(err)
	}
	fmt.Printf("d = %.2f, u = %.4f (%.4f if nothing were shared), different: %v\n",
		c.Difference.Value, c.StandardUncertainty, c.RootSumOfSquares, c.Different)
	// Output: d = 0.11, u = 0.0424 (0.0707 if nothing were shared), different: true
}
