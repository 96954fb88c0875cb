package api_test

import (
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
)

// carbonMethod names published materials: their roles, and how files are read.
func carbonMethod() map[string]any {
	return map[string]any{"code": "C-solid", "title": "δ13C of solids",
		"quantities": []any{map[string]any{"quantity": "d13C", "scale": "d13C-VPDB-LSVEC", "model": map[string]any{"drift": "linear", "weights": "replicate"},
			"limits": map[string]any{"control_deviation": 0.5, "control_required": true},
			"roles": []any{map[string]any{"material": "FJO-GLY", "role": "anchor"}, map[string]any{"material": "USGS41", "role": "anchor"},
				map[string]any{"material": "IAEA-CH-6", "role": "control"}}}},
		"corrections": []any{map[string]any{"name": "o17", "state": "earlier", "by": "acquisition software"}},
		"approval":    map[string]any{"second_person": true},
		"import": map[string]any{"format": "csv", "zone": "Europe/Lisbon", "columns": map[string]any{"name": "Identifier", "position": "Pos", "time": "Time", "role": "Use"},
			"quantities": []any{map[string]any{"quantity": "d13C", "raw": "d13C raw", "u": "u raw", "size": "Area"}}}}
}

// carbonCSV is a session of ten-minute steps: raw = 0.3 + 1.01·true +
// 0.01·hours, with a repeatable ripple of amplitude 0.04 for noise. True values
// are those that the anchors are given, −26.39, 37.63 (USGS41, CIAAW) and
// −10.45 (IAEA-CH-6, CIAAW); the sample's is −18.2.
func carbonCSV(sample string) string {
	names := []string{"FJO-GLY", "USGS41", "FJO-GLY", "USGS41", "IAEA-CH-6", sample, "IAEA-CH-6", sample, "FJO-GLY", "USGS41"}
	values := map[string]float64{"FJO-GLY": -26.39, "USGS41": 37.63, "IAEA-CH-6": -10.45, sample: -18.2}
	var b strings.Builder
	b.WriteString("Pos,Identifier,Use,Time,d13C raw,u raw,Area,Remark\r\n")
	start := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
	for i, name := range names {
		raw := 0.3 + 1.01*values[name] + 0.01*float64(i)/6 + 0.04*float64((i*7)%5-2)/2
		fmt.Fprintf(&b, "%d,%s,,%s,%.4f,0.05,5.0,\r\n", i+1, name, start.Add(time.Duration(i)*10*time.Minute).Format(time.RFC3339), raw)
	}
	return b.String()
}

// A journey remembers the codes that a whole way through the registry made.
type journey struct {
	sample, session, calibration, final, report, reported, unit, token, upload, assignment, revision, job, verification string
}

const csvType = "text/csv"

// travel goes the whole way: material, value, method, sample, session, fit,
// outcome, final value, report.
func (b *bench) travel() journey {
	b.t.Helper()
	var j journey
	a := b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-GLY", "name": "Glycine working standard", "kind": "working",
		"substance": "glycine", "formula": "C2H5NO2", "minimum_portion": map[string]any{"value": 0.50, "unit": "mg"}})
	if got := a.Header.Get("Location"); got != "/v1/materials/FJO-GLY" {
		b.t.Errorf("Location %q", got)
	}
	a = b.post(registry.Manager, "/v1/materials/FJO-GLY/units", map[string]any{"label": "bottle", "count": 2})
	j.unit = a.text(b.t, "items.0.code")
	// The digits −26.390 are to come back as typed.
	a = b.post(registry.Manager, "/v1/materials/FJO-GLY/values",
		`{"scale":"d13C-VPDB-LSVEC","value":-26.390,"u":0.040,"basis":"certificate","evidence":"in-house certificate 7","valid_from":"2025-01-01T00:00:00Z"}`)
	if !strings.Contains(string(a.Body), `"value":-26.390,`) {
		b.t.Errorf("typed digits lost: %s", a.Body)
	}
	value := "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total"
	if got := a.Header.Get("Location"); got != value {
		b.t.Errorf("Location %q, want %q", got, value)
	}
	b.decide(registry.Signatory, value, "approved")

	b.post(registry.Manager, "/v1/instruments", map[string]any{"code": "EA1", "name": "first instrument"})
	b.post(registry.Signatory, "/v1/instruments/EA1/h3-factors", hydrogenFactor())
	b.post(registry.Manager, "/v1/relations", relation("C-OWN"))
	b.decide(registry.Signatory, "/v1/relations/C-OWN", "approved")
	b.post(registry.Manager, "/v1/methods", carbonMethod())
	b.decide(registry.Signatory, "/v1/methods/C-solid", "approved")

	a = b.post(registry.Analyst, "/v1/samples", map[string]any{"samples": []any{map[string]any{"client": "Marsh survey", "label": "A1", "wanted": []any{map[string]any{"scale": "d13C-VPDB-LSVEC"}}}}})
	j.sample = a.text(b.t, "items.0.code")

	a = b.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid&label=first&name=run.csv", carbonCSV(j.sample), "Content-Type", csvType)
	j.session, j.upload = a.text(b.t, "session.code"), a.text(b.t, "session.upload")
	a = b.post(registry.Analyst, "/v1/sessions/"+j.session+"/calibrations", map[string]any{"quantity": "d13C"})
	j.calibration = a.text(b.t, "code")
	calibration := "/v1/calibrations/" + j.calibration
	b.decide(registry.Analyst, calibration, "submitted")
	b.decide(registry.Signatory, calibration, "approved")
	b.post(registry.Analyst, "/v1/sessions/"+j.session+"/outcomes", map[string]any{"quantity": "d13C", "outcome": "accepted"})
	a = b.post(registry.Analyst, "/v1/finals", map[string]any{"sample": j.sample, "scale": "d13C-VPDB-LSVEC"})
	j.final = a.text(b.t, "code")
	b.decide(registry.Signatory, "/v1/finals/"+j.final, "approved")
	a = b.post(registry.Signatory, "/v1/reports", map[string]any{"client": "Marsh survey", "title": "Results", "finals": []any{j.final}})
	j.report, j.reported = a.text(b.t, "code"), a.text(b.t, "codes.0")
	return j
}

func TestFromMaterialToTracedDelta(t *testing.T) {
	b := openBench(t)
	j := b.travel()

	a := b.get(registry.Auditor, "/v1/reported/"+j.reported)
	value, u := a.at(t, "value").(float64), a.at(t, "u").(float64)
	// The truth of the simulated sample is −18.2; the ripple has an amplitude of 0.04.
	if value < -18.3 || value > -18.1 || !(u > 0.01 && u < 0.1) {
		t.Errorf("reported %v ± %v, want about -18.2 ± 0.04", value, u)
	}
	k, expanded := a.at(t, "k").(float64), a.at(t, "U").(float64)
	if diff := expanded - k*u; diff > 1e-12 || diff < -1e-12 {
		t.Errorf("U = %v, k·u = %v", expanded, k*u)
	}
	// Any writing of the code is the same code.
	typed := strings.ToLower(strings.ReplaceAll(j.reported, "-", ""))
	if got := b.get(registry.Auditor, "/v1/reported/"+typed).text(t, "code"); got != j.reported {
		t.Errorf("code %q typed as %q answers with %q", j.reported, typed, got)
	}

	a = b.get(registry.Auditor, "/v1/reported/"+j.reported+"/trace")
	parts := map[string]bool{}
	for _, e := range a.json(t)["edges"].([]any) {
		parts[e.(map[string]any)["part"].(string)] = true
	}
	for _, part := range []string{"line", "member", "outcome", "session", "method", "instrument", "anchor", "control", "material", "scale", "sample"} {
		if !parts[part] {
			t.Errorf("the trace has no edge of part %q", part)
		}
	}
	text := b.want(200, request{role: registry.Auditor, method: "GET", path: "/v1/reported/" + j.reported + "/trace", headers: map[string]string{"Accept": "text/plain"}})
	for _, want := range []string{j.reported, "value of FJO-GLY on d13C-VPDB-LSVEC", "in-house certificate 7", "of the variance"} {
		if !strings.Contains(string(text.Body), want) {
			t.Errorf("the trace as text does not have %q:\n%s", want, text.Body)
		}
	}
	standing := b.get(registry.Auditor, "/v1/samples/"+j.sample)
	if got := standing.text(t, "standing.0.stage"); got != "reported" {
		t.Errorf("the sample stands as %q, want reported", got)
	}
	if v := b.verified(); v.at(t, "clean") != true {
		t.Errorf("verification: %s", v.Body)
	}
}

func TestAnswersAreAsDescribed(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	b.everything(j)
	done := b.checkAnswers()
	for path, operations := range b.description().Paths {
		for method := range operations {
			if name := strings.ToUpper(method) + " " + path; strings.HasPrefix(path, "/v1") && !done[name] {
				t.Errorf("no test has seen %s succeed: add it to everything", name)
			}
		}
	}
}

// everything asks once for whatever a whole way through the registry has left
// to be asked.
func (b *bench) everything(j journey) {
	b.t.Helper()
	value := "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total"
	session, calibration, final, report := "/v1/sessions/"+j.session, "/v1/calibrations/"+j.calibration, "/v1/finals/"+j.final, "/v1/reports/"+j.report
	token := b.post(registry.Administrator, "/v1/tokens", map[string]any{"label": "for a script", "roles": []any{"administrator"}, "scopes": []any{"read"}})
	j.token = token.text(b.t, "code")

	for _, path := range []string{"/v1/scales", "/v1/scales?laboratory=own", "/v1/scales/d13C-VPDB-LSVEC", "/v1/scales/d13C-VPDB-LSVEC/versions", "/v1/scales/d13C-VPDB-LSVEC/versions/1",
		"/v1/materials", "/v1/materials?laboratory=common&limit=3", "/v1/materials/USGS41", "/v1/materials/FJO-GLY", "/v1/materials/FJO-GLY/versions", "/v1/materials/FJO-GLY/versions/1",
		"/v1/materials/FJO-GLY/units", "/v1/materials/FJO-GLY/values", "/v1/units", "/v1/units/" + j.unit, "/v1/units/" + j.unit + "/versions", "/v1/units/" + j.unit + "/versions/1", "/v1/units/" + j.unit + "/trace",
		value, value + "/versions", value + "/versions/1", value + "/decisions", value + "/trace",
		"/v1/relations", "/v1/relations/C-OWN", "/v1/relations/C-OWN/versions", "/v1/relations/C-OWN/versions/1", "/v1/relations/C-OWN/decisions",
		"/v1/instruments/EA1/h3-factors/trace", "/v1/instruments/EA1/h3-factors/verification", "/v1/relations/C-OWN/trace", "/v1/relations/C-OWN/verification", "/v1/instruments/EA1/h3-factors", "/v1/instruments/EA1/h3-factors?format=csv", "/v1/instruments/EA1/h3-factors/1", "/v1/instruments/EA1/h3-factors/decisions",
		"/v1/instruments", "/v1/instruments/EA1", "/v1/instruments/EA1/versions", "/v1/instruments/EA1/versions/1", "/v1/instruments/EA1/lines", "/v1/instruments/EA1/lines?all=true&method=C-solid&scale=d13C-VPDB-LSVEC&measurand=total&limit=1",
		"/v1/methods", "/v1/methods/C-solid", "/v1/methods/C-solid/versions", "/v1/methods/C-solid/versions/1", "/v1/methods/C-solid/decisions",
		"/v1/sessions", session, session + "/versions", session + "/versions/1", session + "/trace", session + "/readings", session + "/readings?limit=3", session + "/exclusions",
		session + "/outcomes", session + "/outcomes/d13C", session + "/outcomes/d13C/versions", session + "/outcomes/d13C/versions/1", session + "/calibrations",
		calibration, calibration + "/versions", calibration + "/versions/1", calibration + "/results", calibration + "/decisions", calibration + "/companion", calibration + "/trace",
		"/v1/samples", "/v1/samples/" + j.sample, "/v1/samples/" + j.sample + "/versions", "/v1/samples/" + j.sample + "/versions/1",
		"/v1/finals", final, final + "/versions", final + "/versions/1", final + "/decisions", final + "/trace",
		"/v1/reports", report, report + "/versions", report + "/versions/1", report + "/decisions", "/v1/reported/" + j.reported, "/v1/reported/" + j.reported + "/trace", "/v1/reported/" + j.reported + "/today",
		"/v1/laboratories", "/v1/laboratories/TST", "/v1/people", "/v1/people/ana", "/v1/people/ana/versions", "/v1/people/ana/versions/1",
		"/v1/ledger", "/v1/ledger/entries", "/v1/ledger/entries/3/inclusion", "/v1/ledger/consistency?first=3", "/v1/uploads/" + j.upload, "/v1/uploads/" + j.upload + "/trace?direction=up",
		report + "/trace", report + "/completeness", report + "/methods", report + "?format=html", report + "?format=xlsx", report + "?format=package", "/v1/samples/" + j.sample + "/trace?direction=up", "/v1/materials/FJO-GLY/trace?direction=up", "/v1/methods/C-solid/trace", "/v1/instruments/EA1/trace?direction=up", "/v1/scales/d13C-VPDB-LSVEC/trace"} {
		b.get(registry.Manager, path)
	}
	for _, path := range []string{"/v1/tokens", "/v1/tokens/" + j.token, "/v1/tokens/" + j.token + "/versions", "/v1/tokens/" + j.token + "/versions/1"} {
		b.get(registry.Administrator, path)
	}
	for _, path := range []string{"/v1/scales", "/v1/materials", "/v1/units", "/v1/sessions", session + "/readings", session + "/exclusions", session + "/outcomes", calibration + "/results", calibration + "/versions",
		"/v1/samples", "/v1/finals", report, "/v1/reports", value + "/versions", value + "/decisions", "/v1/methods", "/v1/instruments", "/v1/instruments/EA1/lines", "/v1/people", "/v1/ledger/entries"} {
		a := b.get(registry.Auditor, path+"?format=csv")
		if media := a.Header.Get("Content-Type"); !strings.HasPrefix(media, csvType) {
			b.t.Errorf("%s as CSV has the media type %q", path, media)
		}
	}

	change := map[string]any{"reason": "told more exactly", "name": "Glycine", "kind": "working"}
	b.post(registry.Manager, "/v1/materials/FJO-GLY/versions", change, "If-Match", b.newestTag("/v1/materials/FJO-GLY"))
	b.post(registry.Manager, "/v1/instruments/EA1/versions", map[string]any{"reason": "moved", "name": "first instrument", "location": "room 14"}, "If-Match", b.newestTag("/v1/instruments/EA1"))
	b.post(registry.Analyst, "/v1/units/"+j.unit+"/versions", map[string]any{"reason": "opened", "state": "open"}, "If-Match", b.newestTag("/v1/units/"+j.unit))
	b.post(registry.Manager, value+"/versions", `{"reason":"a digit","value":-26.391,"stated":{"text":"0.08","kind":"expanded","k":2},"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`, "If-Match", b.newestTag(value))
	b.post(registry.Manager, "/v1/relations/C-OWN/versions", with(relation(""), "reason", "a digit"), "If-Match", b.newestTag("/v1/relations/C-OWN"))
	b.post(registry.Manager, value+"/conversions", map[string]any{"relation": "C-OWN", "valid_from": "2025-01-01T00:00:00Z"})
	b.post(registry.Analyst, final+"/conversions", map[string]any{"relation": "C-OWN"})
	converted := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calculations/conversion", body: map[string]any{"relation": "d18O-VPDB-VSMOW", "scale": "d18O-VPDB", "value": -2.2}})
	if got := converted.at(b.t, "value").(float64); got < 28.6519 || got > 28.6521 { // 1.03092 × −2.2 + 30.92 (Brand et al. 2014)
		b.t.Errorf("−2.2 ‰ on VPDB is %v on VSMOW", got)
	}
	b.post(registry.Signatory, "/v1/instruments/EA1/h3-factors/decisions", map[string]any{"decision": "approved", "version": 1}, "If-Match", b.get(registry.Auditor, "/v1/instruments/EA1/h3-factors/1").Header.Get("ETag"))
	method := carbonMethod()
	delete(method, "code")
	method["reason"] = "title"
	method["title"] = "δ13C of organic solids"
	b.post(registry.Manager, "/v1/methods/C-solid/versions", method, "If-Match", b.newestTag("/v1/methods/C-solid"))
	b.post(registry.Administrator, "/v1/people", map[string]any{"code": "new", "name": "New", "roles": []any{"analyst"}})
	b.post(registry.Administrator, "/v1/people/new/versions", map[string]any{"reason": "left", "name": "New", "roles": []any{"analyst"}, "closed": true}, "If-Match", b.newestTag("/v1/people/new"))
	revoke := b.get(registry.Administrator, "/v1/tokens/"+j.token)
	b.post(registry.Administrator, "/v1/tokens/"+j.token+"/versions", map[string]any{"revoked": true, "reason": "done"}, "If-Match", revoke.Header.Get("ETag"))

	b.post(registry.Analyst, session+"/exclusions", map[string]any{"act": "exclude", "readings": []any{6}, "cause": "leak", "reason": "the peak is split"}, "If-Match", b.get(registry.Analyst, session+"/exclusions").Header.Get("ETag"))
	b.want(200, request{role: registry.Analyst, method: "POST", path: session + "/calibrations?preview=true", body: map[string]any{"quantity": "d13C"}})
	b.post(registry.Analyst, session+"/calibrations", map[string]any{"quantity": "d13C", "reason": "without reading 6"})
	b.decide(registry.Signatory, calibration, "approved")
	b.get(registry.Auditor, calibration+"/changes")
	b.post(registry.Analyst, final+"/versions", map[string]any{"reason": "one reading less"}, "If-Match", b.newestTag(final))
	b.decide(registry.Signatory, report, "withdrawn")

	b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-UREA", "name": "Urea", "kind": "control"})
	b.assign(j)
	b.campaign()
	b.verified()
	b.answerFor(j)
	b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calculations/fit", body: lineFit})
	b.propagate(j)
	b.checkpoint()

	b.reviseWhole()

	empty := b.post(registry.Analyst, "/v1/sessions", map[string]any{"instrument": "EA1", "method": "C-solid", "label": "second"})
	b.post(registry.Analyst, "/v1/sessions/"+empty.text(b.t, "code")+"/readings?name=second.csv", strings.Replace(carbonCSV(j.sample), "2026-03-02", "2026-03-03", -1), "Content-Type", csvType)
}

// hydrogenFactor are pulses on ratio = 282 + 5·I with a scatter.
func hydrogenFactor() map[string]any {
	var pulses []any
	for i, r := range []float64{287.01, 291.98, 297.02, 302, 306.99} {
		pulses = append(pulses, map[string]any{"intensity": i + 1, "ratio": r})
	}
	return map[string]any{"origin": "pulses", "determined_at": "2026-03-02T06:00:00Z", "ratio_unit": "ppm", "intensity_unit": "nA", "shape": "flat", "pulses": pulses}
}

// relation is an invented conversion between the two realisations of the carbon scale.
func relation(code string) map[string]any {
	m := map[string]any{"sort": "conversion", "title": "between the realisations", "from": "d13C-VPDB", "to": "d13C-VPDB-LSVEC", "factor": 1.005, "offset": 0.01,
		"covariance": []any{[]any{1e-6, 0}, []any{0, 1e-4}}, "evidence": "invented for this test", "valid_from": "2024-01-01T00:00:00Z"}
	if code != "" {
		m["code"] = code
	}
	return m
}

// lineFit is a line through three anchors with declared weights.
const lineFit = `{"scale":"d13C-VPDB","model":{"weights":"declared"},"companion":true,
	"anchors":[{"material":"A","value":-30,"u":0.05},{"material":"B","value":0,"u":0.05},{"material":"C","value":10,"u":0.05}],
	"readings":[{"material":"A","role":"anchor","raw":-29.9,"u":0.1},{"material":"B","role":"anchor","raw":0.2,"u":0.1},{"material":"C","role":"anchor","raw":10.1,"u":0.1},
	{"sample":"S1","role":"sample","raw":-12,"u":0.1}]}`

// linePropagation is the same line with what a propagation asks beside.
var linePropagation = `{"seed":5,"max_trials":60000,"digits":1,` + lineFit[1:]

// propagate asks for the distributions behind a line, a calibration and a
// reported delta, as an auditor, and again for the same answer.
func (b *bench) propagate(j journey) {
	b.t.Helper()
	before := b.get(registry.Auditor, "/v1/ledger").text(b.t, "root")
	line := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calculations/propagation", body: linePropagation})
	// Three anchors of u = 0.05 and known readings: nothing is estimated, so the
	// trials have an u, and the first order holds for a line this well determined.
	if line.at(b.t, "seed") != 5.0 || line.at(b.t, "settled") != true || line.at(b.t, "quantities.0.check.valid") != true || line.text(b.t, "quantities.0.name") != "S1" {
		b.t.Errorf("a line's propagation: %s", line.Body)
	}
	fit := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calculations/fit", body: lineFit})
	for _, x := range []struct {
		name     string
		got, own any
	}{{"value", line.at(b.t, "quantities.0.value"), fit.at(b.t, "samples.0.value")}, {"U", line.at(b.t, "quantities.0.U"), fit.at(b.t, "samples.0.U")}} {
		if got, own := x.got.(float64), x.own.(float64); math.Abs(got-own) > 1e-12 { // two ways of adding the same sources
			b.t.Errorf("%s beside the distribution is %v, of the fit %v", x.name, x.got, x.own)
		}
	}
	again := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calculations/propagation", body: linePropagation})
	if string(again.Body) != string(line.Body) {
		b.t.Errorf("one seed, two answers:\n%s\n%s", line.Body, again.Body)
	}
	whole := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calibrations/" + j.calibration + "/propagation", body: map[string]any{"max_trials": 20000, "digits": 1}})
	delta := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/reported/" + j.reported + "/propagation", body: map[string]any{"max_trials": 20000, "seed": 3}})
	if delta.at(b.t, "seed") != 3.0 || delta.at(b.t, "fits") != 1.0 || delta.text(b.t, "quantities.0.role") != "reported" || whole.text(b.t, "quantities.0.role") == "" {
		b.t.Errorf("propagations of stored numbers: %s, %s", delta.Body, whole.Body)
	}
	refused := b.want(422, request{role: registry.Auditor, method: "POST", path: "/v1/reported/" + j.reported + "/propagation", body: map[string]any{"digits": 3}})
	if !strings.Contains(string(refused.Body), "digits") {
		b.t.Errorf("three digits: %s", refused.Body)
	}
	if after := b.get(registry.Auditor, "/v1/ledger").text(b.t, "root"); after != before {
		b.t.Errorf("propagating moved the ledger from %s to %s", before, after)
	}
}

// assign measures a material as an unknown and states its value from that session.
func (b *bench) assign(j journey) {
	b.t.Helper()
	csv := strings.Replace(strings.ReplaceAll(carbonCSV(j.sample), j.sample+",,", "FJO-UREA,sample,"), "2026-03-02", "2026-03-04", -1)
	a := b.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid&name=urea.csv", csv, "Content-Type", csvType)
	session := "/v1/sessions/" + a.text(b.t, "session.code")
	a = b.post(registry.Analyst, session+"/calibrations", map[string]any{"quantity": "d13C"})
	b.decide(registry.Signatory, "/v1/calibrations/"+a.text(b.t, "code"), "approved")
	b.post(registry.Analyst, session+"/outcomes", map[string]any{"quantity": "d13C", "outcome": "accepted"})
	a = b.post(registry.Manager, "/v1/materials/FJO-UREA/values/d13C-VPDB-LSVEC/total/assignments", map[string]any{"valid_from": "2026-03-04T00:00:00Z"})
	if got := a.text(b.t, "basis"); got != "assignment" {
		b.t.Errorf("basis %q of a value made from a session", got)
	}
}
