package exchange

import (
	"encoding/json"
	"math"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/calib"
)

// ISO/TS 28037:2010, 7.4 (generalised distance regression), as the body of a
// request: x are the assigned values, y the raw deltas. Printed there:
// a = 0.5788, b = 2.1597, u(a) = 0.4764, u(b) = 0.1355, cov(a, b) = −0.0577,
// χ² = 2.743 with 4 degrees of freedom.
const iso28037Body = `{
  "anchors": [{"material":"1","value":1.2,"u":0.2},{"material":"2","value":1.9,"u":0.2},{"material":"3","value":2.9,"u":0.2},
              {"material":"4","value":4.0,"u":0.2},{"material":"5","value":4.7,"u":0.2},{"material":"6","value":5.9,"u":0.2}],
  "readings": [{"material":"1","role":"anchor","raw":3.4,"u":0.2},{"material":"2","role":"anchor","raw":4.4,"u":0.2},{"material":"3","role":"anchor","raw":7.2,"u":0.2},
               {"material":"4","role":"anchor","raw":8.5,"u":0.4},{"material":"5","role":"anchor","raw":10.8,"u":0.4},{"material":"6","role":"anchor","raw":13.5,"u":0.4},
               {"sample":"S","role":"sample","raw":9.0,"u":0.2}]}`

func TestFitRequestReproducesThePublishedLine(t *testing.T) {
	request, err := DecodeFit([]byte(iso28037Body))
	if err != nil {
		t.Fatal(err)
	}
	session, model, policy, err := request.Session()
	if err != nil {
		t.Fatal(err)
	}
	result, err := calib.Fit(session, model, policy)
	if err != nil {
		t.Fatal(err)
	}
	answer := NewFitAnswer(request, result)
	for name, c := range map[string][2]float64{
		"intercept": {*answer.Parameters[0].Value, 0.5788}, "u(intercept)": {*answer.Parameters[0].StandardUncertainty, 0.4764},
		"slope": {*answer.Parameters[1].Value, 2.1597}, "u(slope)": {*answer.Parameters[1].StandardUncertainty, 0.1355},
		"covariance": {*answer.Covariance[0][1], -0.0577},
	} {
		// Half a unit of the last printed digit.
		if math.Abs(c[0]-c[1]) > 0.00005 {
			t.Errorf("%s is %.6f, printed %.4f", name, c[0], c[1])
		}
	}
	if answer.DegreesOfFreedom != 4 || math.Abs(*answer.ChiSquare-2.743) > 0.0005 {
		t.Errorf("chi-square %v with ν = %d, printed 2.743 with 4", *answer.ChiSquare, answer.DegreesOfFreedom)
	}
	if len(answer.Samples) != 1 || answer.Samples[0].Sample != "S" || answer.Samples[0].EffectiveDF != nil {
		t.Errorf("samples %+v: declared uncertainties are known, so ν_eff is null", answer.Samples)
	}
	share := 0.0
	for _, s := range answer.Samples[0].Sources {
		share += *s.VarianceShare
	}
	if math.Abs(share-1) > 1e-9 {
		t.Errorf("variance shares sum to %v", share)
	}
	if _, err := json.Marshal(answer); err != nil {
		t.Error(err)
	}
}

func TestFitComplaintsNameTheReadingThatTheEngineRefuses(t *testing.T) {
	request, err := DecodeFit([]byte(`{"model":{"drift":"linear"},"anchors":[{"material":"A","value":-33,"u":0.1},{"material":"B","value":-10,"u":0.1}],
		"readings":[{"material":"A","role":"anchor","raw":-30,"u":0.1,"time":1},{"material":"B","role":"anchor","raw":-8,"u":0.1},{"material":"C","role":"anchor","raw":1,"u":0.1,"time":2}]}`))
	if err != nil {
		t.Fatal(err)
	}
	session, model, policy, err := request.Session()
	if err != nil {
		t.Fatal(err)
	}
	_, err = calib.Fit(session, model, policy)
	if err == nil {
		t.Fatal("a reading without its time and an anchor without its value were fitted")
	}
	wantRefusal(t, FitComplaints(err), registry.Invalid, "body.readings[2].material")
}
