package assign_test

import (
	"fmt"
	"math"

	"deltamoor/calib/assign"
	"deltamoor/calib/uncertain"
)

// The results of key comparison CCQM-K25 (2005) for PCB 105 in sediment, seven
// institutes that share nothing. R's metafor 3.8-1 gives τ² 0.18386, value
// 10.5577, u 0.1916 for rma(y, u^2, method = "PM").
func ExampleAnalyse() {
	y := []float64{10.21, 10.90, 10.94, 10.58, 10.81, 9.62, 10.80}
	u := []float64{0.381, 0.250, 0.130, 0.410, 0.445, 0.196, 0.093}
	var members []assign.Member
	for i := range y {
		code := fmt.Sprintf("institute %d", i+1)
		n, err := uncertain.New(y[i], uncertain.Term{Sensitivity: 1, Source: uncertain.Source{ID: "reading:" + code, Kind: uncertain.KindReading, U: u[i]}})
		if err != nil {
			fmt.Println(err)
			return
		}
		members = append(members, assign.Member{Session: code, Result: n})
	}
	a, err := assign.Analyse(assign.Campaign{Assignment: "K25", Members: members})
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("Q %.1f on %d, tau² %.5f\n", *a.Heterogeneity.Q, a.Heterogeneity.DegreesOfFreedom, math.Pow(a.BetweenSession, 2))
	fmt.Printf("value %.4f, u %.4f, U %.2f (k %.2f)\n", a.Value.Value, a.Value.StandardUncertainty(), a.Expanded.U, a.Expanded.CoverageFactor)
	for _, e := range a.Estimates {
		fmt.Printf("%s: %.4f ± %.4f\n", e.Estimator, e.Value, e.StandardUncertainty)
	}
	// Output:
	// Q 37.3 on 6, tau² 0.18386
	// value 10.5577, u 0.1916, U 0.48 (k 2.50)
	// dersimonian_laird: 10.5571 ± 0.1971
	// paule_mandel: 10.5577 ± 0.1916
	// reml: 10.5565 ± 0.2031
}
