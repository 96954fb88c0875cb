package exchange

import (
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"math"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

// fitExample is the contract's request, with one word chosen of each list of words.
const fitExample = `{
  "scale": "d13C-VPDB",
  "model": {"drift": "linear", "size": "none", "memory": "carryover",
            "weights": "declared", "declared_nu": null, "allow_single_anchor": false},
  "anchors": [{"material": "A", "value": 1.2, "u": 0.2, "nu": null}],
  "anchor_covariance": [[0.04]],
  "readings": [{"material": "A", "role": "anchor", "raw": 3.4, "u": 0.2, "time": 0.0, "size": 5.0, "preparation": "A1", "previous": null, "excluded": false},
               {"sample": "S1", "role": "sample", "raw": 2.0, "u": 0.2, "time": 0.3, "size": 4.8}],
  "probability": 0.95
}`

func TestDecodeFitReadsTheContractsExample(t *testing.T) {
	request, err := DecodeFit([]byte(fitExample))
	if err != nil {
		t.Fatal(err)
	}
	session, model, policy, err := request.Session()
	if err != nil {
		t.Fatal(err)
	}
	f := func(x float64) *float64 { return &x }
	want := calib.Session{
		Anchors: []calib.AssignedValue{{Material: "A", Value: uncertain.Number{Value: 1.2,
			Terms: []uncertain.Term{{Source: uncertain.Source{ID: "anchor:A", Kind: "anchor", U: 0.2}, Sensitivity: 1}}}}},
		Readings: []calib.Reading{
			{ID: "0", Subject: "A", Role: calib.Anchor, Raw: 3.4, StandardUncertainty: f(0.2), Time: f(0), Size: f(5), Preparation: "A1"},
			{ID: "1", Subject: "S1", Role: calib.Sample, Raw: 2, StandardUncertainty: f(0.2), Time: f(0.3), Size: f(4.8)},
		},
	}
	if diff := cmp.Diff(want, session); diff != "" {
		t.Errorf("session (-want +got):\n%s", diff)
	}
	if want := (calib.Model{Drift: "linear", Size: "none", Memory: "carryover", Weights: "declared"}); model != want {
		t.Errorf("model %+v, expected %+v", model, want)
	}
	if diff := cmp.Diff(calib.Policy{Probability: 0.95}, policy); diff != "" {
		t.Errorf("policy (-want +got):\n%s", diff)
	}
}

// Var(u²) = 2u⁴/ν (metrology 1): u = 0.2, ν = 8 give φ = 0.04 and 2·0.0016/8 = 0.0004.
func TestFitRequestGivesDeclaredDegreesOfFreedomTheirGroup(t *testing.T) {
	request, err := DecodeFit([]byte(`{"anchors":[{"material":"A","value":1,"u":0.2,"nu":8},{"material":"B","value":2,"u":0},{"material":"C","value":3,"u":0.1}],
		"readings":[{"material":"A","role":"anchor","raw":1}]}`))
	if err != nil {
		t.Fatal(err)
	}
	s, _, _, err := request.Session()
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Groups) != 1 || s.Groups[0].ID != "anchor:A" || math.Abs(s.Groups[0].Variances[0]-0.04) > 1e-17 || math.Abs(s.Groups[0].Covariance[0][0]-0.0004) > 1e-18 {
		t.Errorf("groups %+v", s.Groups)
	}
	if s.Anchors[0].Value.Terms[0].Group != "anchor:A" || len(s.Anchors[1].Value.Terms) != 0 || s.Anchors[2].Value.Terms[0].Group != "" {
		t.Errorf("anchors %+v", s.Anchors)
	}
}

func TestFitRequestKeepsTheAnchorsCovariance(t *testing.T) {
	request, err := DecodeFit([]byte(`{"anchors":[{"material":"B","value":-10},{"material":"A","value":-33,"u":9}],"anchor_covariance":[[0.04,0.01],[0.01,0.09]],
		"readings":[{"material":"A","role":"anchor","raw":1},{"material":"B","role":"anchor","raw":2}]}`))
	if err != nil {
		t.Fatal(err)
	}
	s, _, _, err := request.Session()
	if err != nil {
		t.Fatal(err)
	}
	b, a := s.Anchors[0].Value, s.Anchors[1].Value
	if b.Value != -10 || a.Value != -33 || s.Anchors[0].Material != "B" {
		t.Errorf("anchors %+v", s.Anchors)
	}
	for name, c := range map[string][2]float64{
		"var B": {uncertain.Covariance(b, b), 0.04}, "cov": {uncertain.Covariance(a, b), 0.01}, "var A": {uncertain.Covariance(a, a), 0.09},
	} {
		if math.Abs(c[0]-c[1]) > 1e-16 {
			t.Errorf("%s is %v, expected %v", name, c[0], c[1])
		}
	}
}

func TestDecodeFitRefusesByPlace(t *testing.T) {
	const anchors = `"anchors":[{"material":"A","value":1,"u":0.1}]`
	const readings = `"readings":[{"material":"A","role":"anchor","raw":1}]`
	for _, c := range []struct{ body, want string }{
		{`{` + anchors + `}`, "body.readings: found nothing, expected the member readings"},
		{`{` + readings + `}`, "body.anchors: found nothing"},
		{`{` + anchors + `,"readings":[]}`, "body.readings: found an empty list"},
		{`{"anchors":[],` + readings + `}`, "body.anchors: found an empty list"},
		{`{` + anchors + `,` + readings + `,"scale":3}`, "body.scale: found the number 3, expected a text"},
		{`{` + anchors + `,` + readings + `,"modle":{}}`, "body.modle: found an unknown member, expected a known member; the nearest is model"},
		{`{` + anchors + `,` + readings + `,"model":{"drift":"cubic"}}`, `body.model.drift: found "cubic", expected one of none, linear, quadratic, bracketed`},
		{`{` + anchors + `,` + readings + `,"model":{"drift":"none","drift":"linear"}}`, "body.model.drift: found the member a second time"},
		{`{` + anchors + `,` + readings + `,"model":{"declared_nu":0}}`, "body.model.declared_nu: found 0, expected degrees of freedom above 0"},
		{`{` + anchors + `,` + readings + `,"probability":1}`, "body.probability: found 1"},
		{`{` + anchors + `,` + readings + `,"cross_covariance":[[1],2]}`, "body.cross_covariance[1]: found the number 2, expected a list"},
		{`{` + anchors + `,` + readings + `,"cross_covariance":[[1],null]}`, "body.cross_covariance[1]: found null"},
		{`{"anchors":[{"material":"A","value":1}],` + readings + `}`, "body.anchors[0].u: found nothing, expected the standard uncertainty"},
		{`{"anchors":[{"material":"A","value":1,"u":-1}],` + readings + `}`, "body.anchors[0].u: found -1"},
		{`{"anchors":[{"material":"A","u":1}],` + readings + `}`, "body.anchors[0].value: found nothing"},
		{`{"anchors":[{"material":"","value":1,"u":1}],` + readings + `}`, "body.anchors[0].material: found an empty text"},
		{`{"anchors":[{"material":"A","value":1,"u":1},{"material":"A","value":2,"u":1}],` + readings + `}`, `body.anchors[1].material: found "A", which anchors[0] is as well`},
		{`{"anchors":[{"material":"A","value":1,"u":1,"nu":-2}],` + readings + `}`, "body.anchors[0].nu: found -2"},
		{`{"anchors":[{"material":"A","value":1,"nu":2}],"anchor_covariance":[[1]],` + readings + `}`, "body.anchors[0].nu: found 2, expected no nu beside anchor_covariance"},
		{`{` + anchors + `,"readings":[{"material":"A","role":"anchor"}]}`, "body.readings[0].raw: found nothing"},
		{`{` + anchors + `,"readings":[{"material":"A","raw":1}]}`, "body.readings[0].role: found nothing"},
		{`{` + anchors + `,"readings":[{"role":"anchor","raw":1}]}`, "body.readings[0].material: found nothing"},
		{`{` + anchors + `,"readings":[{"role":"sample","raw":1}]}`, "body.readings[0].sample: found nothing"},
		{`{` + anchors + `,"readings":[{"sample":"S","role":"anchor","raw":1}]}`, `body.readings[0].sample: found "S", expected material`},
		{`{` + anchors + `,"readings":[{"sample":"S","material":"A","role":"anchor","raw":1}]}`, `body.readings[0]: found material "A" and sample "S"`},
		{`{` + anchors + `,"readings":[{"material":"A","role":"anchor","raw":1,"u":-0.1}]}`, "body.readings[0].u: found -0.1"},
		{`{` + anchors + `,"readings":[{"material":"A","role":"anchor","raw":1,"excluded":"no"}]}`, `body.readings[0].excluded: found the text "no", expected true or false`},
	} {
		_, err := DecodeFit([]byte(c.body))
		wantRefusal(t, err, registry.Invalid, c.want)
	}
	many := make([]string, MaxFitAnchors+1)
	for i := range many {
		many[i] = fmt.Sprintf(`{"material":"A%d","value":1,"u":1}`, i)
	}
	_, err := DecodeFit([]byte(`{"anchors":[` + strings.Join(many, ",") + `],` + readings + `}`))
	wantRefusal(t, err, registry.TooLarge, "1001 anchors", "1000")
	// A matrix is refused by its place in the body when it becomes numbers.
	request, err := DecodeFit([]byte(`{` + anchors + `,"anchor_covariance":[[-1]],` + readings + `}`))
	if err != nil {
		t.Fatal(err)
	}
	_, _, _, err = request.Session()
	wantRefusal(t, err, registry.Invalid, "body.anchor_covariance[0][0]: found -1")
}

// fitAnswerExample is the contract's answer, to the letter of its members.
const fitAnswerExample = `{
  "parameters": [{"name": "intercept", "value": 0, "u": 0}, {"name": "slope", "value": 1, "u": 0}],
  "covariance": [[0, 0], [0, 0]],
  "noise_covariance": [[0, 0], [0, 0]],
  "variances": [{"name": "sigma2", "value": 0, "nu": 0}], "variance_covariance": [[0]],
  "reference": {"time": 0, "size": 0},
  "chi_square": 0, "degrees_of_freedom": 0, "p_value": 0, "birge_ratio": 0, "residual_sd": 0,
  "lack_of_fit": {"f": 0, "nu1": 0, "nu2": 0, "p_value": 0}, "aicc": 0,
  "line": {"slope": 1, "intercept": 0, "u_slope": 0, "u_intercept": 0, "covariance": 0},
  "readings": [{"index": 0, "predicted": 0, "residual": 0, "standardized_residual": 0, "studentized_residual": 0, "leverage": 0, "cooks_distance": 0}],
  "anchors": [{"material": "A", "value": 0, "adjusted": 0, "left_out": {"predicted": 0, "u": 0, "z": 0}}],
  "samples": [{"sample": "S1", "n": 1, "value": 0, "u": 0, "k": 2, "U": 0, "nu_eff": 9, "gradient": [0, 0],
               "sources": [{"id": "anchor:A", "kind": "anchor", "group": "", "sensitivity": 0.4, "u": 0.2, "variance_share": 0.3}]}],
  "flags": [{"code": "extrapolation", "severity": "warning", "readings": [1], "message": "…"}],
  "condition_number": 0, "engine": "1"
}`

// fitResult is the result whose answer the contract's example is.
func fitResult() *calib.Result {
	zero := func() *float64 { return new(float64) }
	return &calib.Result{
		Engine:     "1",
		Parameters: []calib.Parameter{{Name: "intercept"}, {Name: "slope", Value: 1}},
		Covariance: [][]float64{{0, 0}, {0, 0}}, NoiseCovariance: [][]float64{{0, 0}, {0, 0}},
		Variances: []calib.Variance{{Name: "sigma2"}}, VarianceCovariance: [][]float64{{0}},
		ReferenceTime: zero(), ReferenceSize: zero(), ChiSquare: zero(), PValue: zero(), BirgeRatio: zero(), ResidualSD: zero(),
		LackOfFit: &calib.LackOfFit{}, AICc: zero(), Line: &calib.Line{Slope: 1},
		Readings: []calib.ReadingResult{{Predicted: zero(), Residual: zero(), StandardizedResidual: zero(), StudentizedResidual: zero(), Leverage: zero(), CooksDistance: zero()}},
		Anchors:  []calib.AnchorResult{{Material: "A", LeftOut: &calib.LeftOut{}}},
		Subjects: []calib.SubjectResult{{Subject: "S1", Role: calib.Sample, N: 1, Gradient: []float64{0, 0},
			Expanded: uncertain.Expanded{CoverageFactor: 2, Probability: 0.95, DegreesOfFreedom: 9},
			Sources:  []calib.Contribution{{ID: "anchor:A", Kind: uncertain.KindAnchor, Sensitivity: 0.4, U: 0.2, VarianceShare: 0.3}}}},
		Flags: []calib.Flag{{Code: "extrapolation", Severity: calib.Warning, Readings: []int{1}, Message: "…"}},
	}
}

func generic(t *testing.T, text []byte) map[string]any {
	t.Helper()
	var v map[string]any
	if err := json.Unmarshal(text, &v); err != nil {
		t.Fatal(err)
	}
	return v
}

func TestFitAnswerHasTheContractsMembers(t *testing.T) {
	text, err := json.Marshal(NewFitAnswer(FitRequest{}, fitResult()))
	if err != nil {
		t.Fatal(err)
	}
	got, want := generic(t, text), generic(t, []byte(fitAnswerExample))
	// Beyond the example: U comes with its probability (contract, first part), and
	// the role tells a sample from a control.
	sample := got["samples"].([]any)[0].(map[string]any)
	if sample["p"] != 0.95 || sample["role"] != "sample" {
		t.Errorf("sample %v", sample)
	}
	delete(sample, "p")
	delete(sample, "role")
	// So does what the readings say of each term; the example has no such list.
	if _, ok := got["needs"].([]any); !ok {
		t.Errorf("needs %v", got["needs"])
	}
	delete(got, "needs")
	if diff := cmp.Diff(want, got); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

func TestFitAnswerWritesNullForWhatCannotBeComputed(t *testing.T) {
	r := fitResult()
	r.ChiSquare, r.PValue, r.LackOfFit, r.AICc, r.Line = nil, nil, nil, nil, nil
	r.ReferenceTime = nil
	r.BirgeRatio = new(float64)
	*r.BirgeRatio = math.NaN()
	r.Variances[0].DegreesOfFreedom = math.Inf(1)
	r.Subjects[0].Expanded.DegreesOfFreedom = math.Inf(1)
	r.Subjects = append(r.Subjects, calib.SubjectResult{Subject: "KELP", Role: calib.Control})
	r.Anchors[0].LeftOut = nil
	r.Readings[0] = calib.ReadingResult{Index: 3}
	r.Flags[0].Readings = nil
	r.Covariance[0][0] = math.NaN()
	r.ConditionNumber = math.Inf(1)
	text, err := json.Marshal(NewFitAnswer(FitRequest{}, r))
	if err != nil {
		t.Fatal(err)
	}
	got := generic(t, text)
	for _, key := range []string{"chi_square", "p_value", "birge_ratio", "lack_of_fit", "aicc", "line", "condition_number"} {
		if v, ok := got[key]; !ok || v != nil {
			t.Errorf("%s is %v, expected null", key, v)
		}
	}
	for _, part := range []string{`"nu":null`, `"nu_eff":null`, `"left_out":null`, `"reference":{"time":null,"size":0}`, `"covariance":[[null,0],[0,0]]`,
		`{"index":3,"predicted":null,"residual":null,"standardized_residual":null,"studentized_residual":null,"leverage":null,"cooks_distance":null}`,
		`{"material":"KELP","role":"control"`, `"gradient":[],"sources":[]`, `"readings":[],"message":"…"`} {
		if !strings.Contains(string(text), part) {
			t.Errorf("%s\nlacks %s", text, part)
		}
	}
	// An empty result still has every list, as a list.
	text, err = json.Marshal(NewFitAnswer(FitRequest{}, &calib.Result{}))
	if err != nil {
		t.Fatal(err)
	}
	empty := generic(t, text)
	members := generic(t, []byte(fitAnswerExample))
	members["needs"] = nil
	if want := slices.Sorted(maps.Keys(members)); !slices.Equal(want, slices.Sorted(maps.Keys(empty))) {
		t.Errorf("members %v", slices.Sorted(maps.Keys(empty)))
	}
	for _, key := range []string{"parameters", "covariance", "noise_covariance", "variances", "variance_covariance", "readings", "anchors", "samples", "needs", "flags"} {
		if list, ok := empty[key].([]any); !ok || len(list) != 0 {
			t.Errorf("%s is %v, expected an empty list", key, empty[key])
		}
	}
}

func TestFitComplaintsPlaceTheEnginesRefusalsInTheBody(t *testing.T) {
	if err := FitComplaints(nil); err != nil {
		t.Errorf("nil became %v", err)
	}
	other := errors.New("disk full")
	if err := FitComplaints(other); err != other {
		t.Errorf("an error without a place became %v", err)
	}
	missing := &calib.MissingUncertaintyError{Refusal: calib.Refusal{Place: "readings[3].u", Found: "nothing", Expected: "u"}}
	rank := &calib.NotEstimableError{Refusal: calib.Refusal{Found: "one time", Expected: "two"}}
	err := FitComplaints(fmt.Errorf("fit: %w", errors.Join(missing, fmt.Errorf("and %w", rank))))
	refusal := wantRefusal(t, err, registry.Invalid, "body.readings[3].u: found nothing, expected u", "body: found one time, expected two")
	if len(refusal.Complaints) != 2 || !errors.Is(err, missing) {
		t.Errorf("refusal %+v", refusal)
	}
	wantRefusal(t, FitComplaints(&calib.TooManyError{Refusal: calib.Refusal{Place: "readings", Found: "9", Expected: "at most 8"}}), registry.TooLarge, "body.readings")
}

// A session with one reading that is off, asked for with its companion: the
// companion weighs that reading less and suggests a look, and the official
// numbers are those without it.
func TestFitAnswersTheCompanionOnlyWhereItIsAskedFor(t *testing.T) {
	body := func(companion string) []byte {
		return []byte(`{"model":{"drift":"linear","weights":"equal"},` + companion + `
			"anchors":[{"material":"A","value":-30,"u":0.03},{"material":"B","value":10,"u":0.03}],
			"readings":[{"material":"A","role":"anchor","raw":-30.01,"time":0},{"material":"B","role":"anchor","raw":10.02,"time":1},
				{"material":"A","role":"anchor","raw":-29.98,"time":2},{"material":"B","role":"anchor","raw":10.01,"time":3},
				{"material":"A","role":"anchor","raw":-28.50,"time":4},{"material":"B","role":"anchor","raw":10.03,"time":5},
				{"material":"A","role":"anchor","raw":-30.02,"time":6},{"material":"B","role":"anchor","raw":9.99,"time":7},
				{"material":"A","role":"anchor","raw":-30.00,"time":8},{"material":"B","role":"anchor","raw":10.00,"time":9},
				{"material":"A","role":"anchor","raw":-29.99,"time":10},{"material":"B","role":"anchor","raw":10.01,"time":11},
				{"sample":"S","role":"sample","raw":-10,"time":4}]}`)
	}
	answer := func(companion string) FitAnswer {
		request, err := DecodeFit(body(companion))
		if err != nil {
			t.Fatal(err)
		}
		a, err := AnswerFit(request)
		if err != nil {
			t.Fatal(err)
		}
		return a
	}
	plain, with := answer(""), answer(`"companion":true,`)
	if plain.Companion != nil || with.Companion == nil {
		t.Fatalf("companion %v without asking, %v with", plain.Companion, with.Companion)
	}
	c := with.Companion
	if !slices.Equal(c.Suggested, []int{4}) {
		t.Errorf("suggested %v, want reading 4, which is 1.5 ‰ off", c.Suggested)
	}
	if w := c.Readings[4].Weight; c.Readings[4].Index != 4 || w == nil || !(*w < 0.1) {
		t.Errorf("reading 4 has the weight %v", w)
	}
	if s := c.Samples[0]; s.Sample != "S" || s.Value == nil || math.Abs(*s.Value+10) > 0.05 || math.Abs(*s.Difference-(*s.Value-*with.Samples[0].Value)) > 1e-12 {
		t.Errorf("sample %+v beside %v; the other readings put it within 0.05 of −10", s, *with.Samples[0].Value)
	}
	with.Companion = nil
	if diff := cmp.Diff(plain, with); diff != "" {
		t.Errorf("asking for the companion changed the official answer:\n%s", diff)
	}
	if len(plain.Needs) == 0 || !strings.HasSuffix(plain.Needs[0].Sentence, ".") {
		t.Errorf("needs %+v", plain.Needs)
	}
}
