package calib_test

import (
	"fmt"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

// The generalised distance example of ISO/TS 28037:2010, clause 7.4: six
// standards whose assigned values are uncertain, each read once. The standard
// prints a = 0.5788, b = 2.1597, u(a) = 0.4764, u(b) = 0.1355, chi-square 2.743.
func ExampleFit() {
	values := []float64{1.2, 1.9, 2.9, 4.0, 4.7, 5.9}
	raw := []float64{3.4, 4.4, 7.2, 8.5, 10.8, 13.5}
	u := []float64{0.2, 0.2, 0.2, 0.4, 0.4, 0.4}
	var session calib.Session
	for i, v := range values {
		code := fmt.Sprint("STD-", i+1)
		source := uncertain.Source{ID: "anchor:" + code, Kind: uncertain.KindAnchor, U: 0.2}
		session.Anchors = append(session.Anchors, calib.AssignedValue{
			Material: code,
			Value:    uncertain.Number{Value: v, Terms: []uncertain.Term{{Source: source, Sensitivity: 1}}},
		})
		session.Readings = append(session.Readings, calib.Reading{
			ID: fmt.Sprint("S-1/", i+1), Subject: code, Role: calib.Anchor, Raw: raw[i], StandardUncertainty: &u[i],
		})
	}
	session.Readings = append(session.Readings, calib.Reading{
		ID: "S-1/7", Subject: "unknown", Role: calib.Sample, Raw: 9.0, StandardUncertainty: &u[0],
	})
	result, err := calib.Fit(session, calib.Model{}, calib.Policy{})
	if err != nil {
		fmt.Println(err)
		return
	}
	for _, p := range result.Parameters {
		fmt.Printf("%s %.4f, u = %.4f\n", p.Name, p.Value, p.StandardUncertainty)
	}
	fmt.Printf("chi-square %.3f on %d degrees of freedom\n", *result.ChiSquare, result.DegreesOfFreedom)
	s := result.Subjects[0]
	fmt.Printf("%s %.3f, U = %.3f (k = %.2f, p = %.2f)\n", s.Subject, s.Value, s.Expanded.U, s.Expanded.CoverageFactor, s.Expanded.Probability)
	// Output:
	// intercept 0.5788, u = 0.4764
	// slope 2.1597, u = 0.1355
	// chi-square 2.743 on 4 degrees of freedom
	// unknown 3.899, U = 0.282 (k = 1.96, p = 0.95)
}
