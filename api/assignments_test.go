package api_test

import (
	"crypto/sha256"
	"encoding/base64"
	"encoding/json"
	"encoding/xml"
	"fmt"
	"math"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
)

// campaignPlan plans a value of FJO-ACE from three sessions by C-solid.
func campaignPlan() map[string]any {
	return map[string]any{"title": "value of FJO-ACE", "material": "FJO-ACE", "methods": []any{"C-solid"}, "sessions": 3, "days": 3, "replicates": 4,
		"quantities": []any{map[string]any{"scale": "d13C-VPDB-LSVEC", "anchors": []any{"FJO-GLY", "USGS41"}, "offered": []any{"IAEA-CH-6"},
			"planning":    map[string]any{"value": -28, "repeatability": 0.05, "between_session": 0.03, "between_units": 0.02},
			"homogeneity": map[string]any{"units": 2, "measurements": 2}, "stability": map[string]any{"not_needed": "kept dry for ten years without change"},
			"acceptance": map[string]any{"U": 5}}}}
}

// planCampaign registers the candidate with two units, and plans and approves a campaign.
func (b *bench) planCampaign() (assignment string, units []string) {
	b.t.Helper()
	b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-ACE", "name": "Acetanilide <2026>", "kind": "working", "hazards": []any{"H302"}, "storage": "dry",
		"stock": map[string]any{"maximum_openings": 4, "portion": map[string]any{"value": 0.5, "unit": "mg"}, "lead_days": 180}})
	a := b.post(registry.Manager, "/v1/materials/FJO-ACE/units", map[string]any{"label": "vial", "count": 2, "state": "open", "content": map[string]any{"value": 10, "unit": "g"}})
	for _, i := range []string{"0", "1"} {
		units = append(units, a.text(b.t, "items."+i+".code"))
	}
	a = b.post(registry.Manager, "/v1/assignments", campaignPlan())
	assignment = a.text(b.t, "code")
	b.decide(registry.Signatory, "/v1/assignments/"+assignment, "approved")
	return assignment, units
}

// campaignDay imports a session of June 2026 in which FJO-ACE is an unknown, and
// takes it to an accepted result: raw = 0.3 + 1.01·true + ripple.
func (b *bench) campaignDay(day int, units []string) string {
	b.t.Helper()
	names := []string{"FJO-GLY", "USGS41", "FJO-GLY", "USGS41", "IAEA-CH-6", "FJO-ACE", "FJO-ACE", "FJO-ACE", "FJO-ACE", "IAEA-CH-6", "FJO-GLY", "USGS41"}
	true_ := map[string]float64{"FJO-GLY": -26.39, "USGS41": 37.63, "IAEA-CH-6": -10.45, "FJO-ACE": -28}
	var readings []any
	start := time.Date(2026, 6, day, 9, 0, 0, 0, time.UTC)
	for i, name := range names {
		r := map[string]any{"name": name, "quantity": "d13C", "raw": 0.3 + 1.01*true_[name] + 0.04*float64((i*7+day*3)%5-2)/2, "time": start.Add(time.Duration(i) * 10 * time.Minute), "position": i + 1}
		if name == "FJO-ACE" {
			r["role"], r["unit"] = "sample", units[i%2]
		}
		readings = append(readings, r)
	}
	a := b.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid", map[string]any{"readings": readings})
	session := "/v1/sessions/" + a.text(b.t, "session.code")
	a = b.post(registry.Analyst, session+"/calibrations", map[string]any{"quantity": "d13C"})
	b.decide(registry.Signatory, "/v1/calibrations/"+a.text(b.t, "code"), "approved")
	b.post(registry.Analyst, session+"/outcomes", map[string]any{"quantity": "d13C", "outcome": "accepted"})
	return strings.TrimPrefix(session, "/v1/sessions/")
}

// campaign goes the whole way of a campaign, and asks everything about it once.
func (b *bench) campaign() {
	b.t.Helper()
	t := b.t
	code, units := b.planCampaign()
	plan := "/v1/assignments/" + code
	b.want(409, request{role: registry.Manager, method: "POST", path: plan + "/versions", body: with(campaignPlan(), "reason", "better"), headers: pairs([]string{"If-Match", b.newestTag(plan)})})
	draft := b.post(registry.Manager, "/v1/assignments", campaignPlan())
	b.post(registry.Manager, draft.Header.Get("Location")+"/versions", with(campaignPlan(), "reason", "better"), "If-Match", draft.Header.Get("ETag"))
	for _, path := range []string{"/v1/assignments", "/v1/assignments?format=csv", plan, plan + "/versions", plan + "/versions/1", plan + "/decisions", plan + "/prospects", plan + "/trace", plan + "/verification"} {
		b.get(registry.Auditor, path)
	}
	prospects := b.get(registry.Auditor, plan+"/prospects")
	u, parts := prospects.at(t, "values.0.prospect.u").(float64), 0.0
	for _, name := range []string{"u_sessions", "u_anchors", "u_bb", "u_lts"} {
		x := prospects.at(t, "values.0.prospect."+name).(float64)
		parts += x * x
	}
	if math.Abs(math.Sqrt(parts)-u) > 1e-12 {
		t.Errorf("prospect u %v, its parts give %v", u, math.Sqrt(parts))
	}
	b.plans(plan)
	b.studies(plan, units)
	session := b.campaignDay(1, units)
	conclusion := map[string]any{"scale": "d13C-VPDB-LSVEC", "valid_from": "2026-06-10T00:00:00Z"}
	b.wantProblem(b.do(request{role: registry.Manager, method: "POST", path: plan + "/values", body: conclusion}), 422, "invalid", "sessions")
	b.campaignDay(2, units)
	b.campaignDay(3, units)
	analysis := b.get(registry.Auditor, plan+"/analysis")
	value := b.post(registry.Manager, plan+"/values", conclusion)
	if got, want := analysis.at(t, "values.0.u"), value.at(t, "u"); got != want {
		t.Errorf("the analysis says u %v, the value %v", got, want)
	}
	b.want(403, request{role: registry.Manager, method: "POST", path: value.Header.Get("Location") + "/decisions", body: map[string]any{"decision": "approved"}, headers: pairs([]string{"If-Match", value.Header.Get("ETag")})})
	b.decide(registry.Signatory, value.Header.Get("Location"), "approved")

	const at = "?valid_at=2026-07-01T00:00:00Z"
	certificate := b.get(registry.Auditor, "/v1/materials/FJO-ACE/certificate"+at)
	for field, of := range map[string]string{"value": "value", "u": "u", "U": "campaign.U", "k": "campaign.k"} {
		if got, want := certificate.at(t, "values.0."+field), value.at(t, of); got != want {
			t.Errorf("the certificate has %s %v, the value %v", field, got, want)
		}
	}
	page := b.get(registry.Auditor, "/v1/materials/FJO-ACE/certificate"+at+"&format=html")
	for _, want := range []string{certificate.text(t, "values.0.value_text"), certificate.text(t, "values.0.U_text"), "Acetanilide &lt;2026&gt;", "H302 Harmful if swallowed."} {
		if !strings.Contains(string(page.Body), want) {
			t.Errorf("the page lacks %q", want)
		}
	}
	dcc := b.want(200, request{role: registry.Auditor, method: "GET", path: "/v1/materials/FJO-ACE/certificate" + at, headers: map[string]string{"Accept": "application/xml"}})
	var document struct {
		Reals []struct {
			Value string `xml:"value"`
			Unit  string `xml:"unit"`
		} `xml:"measurementResults>measurementResult>results>result>data>quantity>hybrid>real"`
	}
	b.must(xml.Unmarshal(dcc.Body, &document))
	if len(document.Reals) < 2 || document.Reals[1].Unit != `\permille` || document.Reals[1].Value != fmt.Sprint(value.at(t, "value")) {
		t.Errorf("the XML says %+v, the value %v", document.Reals[:2], value.at(t, "value"))
	}

	b.links()
	stock := b.get(registry.Auditor, "/v1/materials/FJO-ACE/stock")
	if n := usesOf(stock.at(t, "units").([]any), units[0]); n != 3 || stock.at(t, "forecast") != nil {
		t.Errorf("%d uses logged of the first vial, forecast %v: want 3 sessions", n, stock.at(t, "forecast"))
	}
	b.get(registry.Auditor, "/v1/materials/FJO-ACE/labels?units="+units[0])
	b.get(registry.Auditor, "/v1/due")
	b.printed()
	b.get(registry.Auditor, "/v1/due?days=400&format=csv")
	unit := "/v1/units/" + units[0]
	b.post(registry.Analyst, unit+"/quarantine", map[string]any{"reason": "the lid was loose", "since": "2026-06-02T00:00:00Z"}, "If-Match", b.newestTag(unit))
	affected := b.get(registry.Auditor, unit+"/affected").at(t, "items").([]any)
	if len(affected) != 2 || strings.Contains(fmt.Sprint(affected), session) {
		t.Errorf("%d sessions affected since 2 June, want those of the 2nd and 3rd: %v", len(affected), affected)
	}
	rows := "material,scale,value,kind,basis,valid_from,uncertainty,evidence\nFJO-ACE,d15N-AIR,1.180,standard,literature,2015-01-01,0.02,notebook 4\n"
	loaded := b.post(registry.Manager, "/v1/values/import?name=old.csv", rows, "Content-Type", csvType)
	if loaded.at(t, "items.0.back_loaded") != true || !strings.Contains(string(loaded.Body), `"value":1.180,`) {
		t.Errorf("loaded %s", loaded.Body)
	}
	b.wantProblem(b.do(request{role: registry.Manager, method: "POST", path: "/v1/values/import", body: map[string]any{"values": []any{map[string]any{"material": "NOBODY", "scale": "d15N-AIR", "value": 1,
		"stated": map[string]any{"text": "0.1", "kind": "standard"}, "basis": "literature", "evidence": "x", "valid_from": "2015-01-01T00:00:00Z"}}}}), 422, "invalid", "body.values[0].material")
}

// usesOf counts the sessions that used a unit.
func usesOf(units []any, code string) int {
	for _, u := range units {
		m := u.(map[string]any)
		if m["unit"].(map[string]any)["code"] == code {
			return len(m["uses"].([]any))
		}
	}
	return -1
}

// plans asks what is to be expected of plans, stored and not.
func (b *bench) plans(plan string) {
	b.t.Helper()
	t := b.t
	stored, unstored := b.get(registry.Auditor, plan+"/prospects"), b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/assignments/prospects", body: campaignPlan()})
	if got, want := unstored.at(t, "values.0.prospect.U"), stored.at(t, "values.0.prospect.U"); got != want {
		t.Errorf("a plan has U %v unstored and %v stored", got, want)
	}
	more := campaignPlan()
	more["sessions"] = 12
	if got := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/assignments/prospects", body: more}).at(t, "values.0.prospect.u_sessions").(float64); got >= stored.at(t, "values.0.prospect.u_sessions").(float64) {
		t.Errorf("twelve sessions leave %v", got)
	}
	for _, path := range []string{plan + "/simulation?trials=400&seed=7", plan + "/simulation?trials=400"} {
		s := b.get(registry.Auditor, path)
		if c := s.at(t, "values.0.coverage_characterisation").(float64); c < 0.9 || c > 1 {
			t.Errorf("%s: coverage %v of 400 campaigns", path, c)
		}
	}
	a := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/assignments/simulation?trials=400&seed=7", body: campaignPlan()})
	if got, want := a.at(t, "values.0.U_median"), b.get(registry.Auditor, plan+"/simulation?trials=400&seed=7").at(t, "values.0.U_median"); got != want {
		t.Errorf("one seed gives %v and %v", got, want)
	}
	b.wantProblem(b.do(request{role: registry.Auditor, method: "POST", path: "/v1/assignments/prospects", body: with(campaignPlan(), "material", "NOBODY")}), 422, "invalid", "body.material")
}

// studies brings a study of the units as a table and as JSON, good and broken,
// and lists of units and uses alike.
func (b *bench) studies(plan string, units []string) {
	b.t.Helper()
	t := b.t
	path := plan + "/studies?scale=d13C-VPDB-LSVEC&of=homogeneity&name=units.csv"
	const good = "unit;value;portion_mg;order\nvial 1;-28,01;0,5;1\nvial 1;-28,03;0,6;1\nvial 2;-28,02;0,5;2\nvial 2;-27,99;0,5;2\n"
	b.wantProblem(b.do(request{role: registry.Analyst, method: "POST", path: path, body: strings.Replace(good, "-28,03", "about 28", 1), headers: pairs([]string{"Content-Type", csvType})}), 422, "invalid", `row 3, column "value"`)
	b.wantProblem(b.do(request{role: registry.Analyst, method: "POST", path: strings.Replace(path, "homogeneity", "stability", 1), body: good, headers: pairs([]string{"Content-Type", csvType})}), 409, "conflict", "")
	b.post(registry.Analyst, path, good, "Content-Type", csvType)
	tag := b.get(registry.Auditor, plan+"/studies").text(t, "items.0.code")
	if !strings.HasSuffix(tag, "/d13C-VPDB-LSVEC/total/homogeneity") {
		t.Errorf("study %q", tag)
	}
	b.wantProblem(b.do(request{role: registry.Analyst, method: "POST", path: path, body: good, headers: pairs([]string{"Content-Type", csvType})}), 428, "unconditional", "")
	again := map[string]any{"measurements": []any{map[string]any{"unit": "vial 1", "value": -28.01, "portion_mg": 0.5}, map[string]any{"unit": "vial 1", "value": -28.03, "portion_mg": 0.6},
		map[string]any{"unit": "vial 2", "value": -28.02, "portion_mg": 0.5}, map[string]any{"unit": "vial 2", "value": -27.99, "portion_mg": 0.5}}}
	b.post(registry.Analyst, path+"&reason=without+order", again, "If-Match", "\"1-0\"")

	const more = "Material,Label,Container,Content,Content_unit,Filling_order\nFJO-ACE,ampoule 3,ampoule,0.50,g,3\nFJO-ACE,ampoule 4,ampoule,0.50,g,4\n"
	b.wantProblem(b.do(request{role: registry.Manager, method: "POST", path: "/v1/units/import?name=u.csv", body: strings.Replace(more, "ampoule 4,ampoule", "ampoule 4,sack", 1), headers: pairs([]string{"Content-Type", csvType})}), 422, "invalid", `row 3, column "container"`)
	a := b.post(registry.Manager, "/v1/units/import?name=u.csv", more, "Content-Type", csvType)
	if a.text(t, "items.0.container") != "ampoule" || !strings.Contains(string(a.Body), `"value":0.50,`) {
		t.Errorf("units %s", a.Body)
	}
	b.post(registry.Manager, "/v1/units/import", map[string]any{"units": []any{map[string]any{"material": "FJO-ACE", "label": "ampoule 5"}}})
	ampoule := a.text(t, "items.0.code")
	uses := "unit,reason,at,state,taken,amount_unit,excursion\n" + ampoule + ",opened for a trial,2025-06-01,open,0.1,g,\nampoule 4,left on the bench,2025-06-02,,,,25 °C over night\n"
	b.wantProblem(b.do(request{role: registry.Analyst, method: "POST", path: "/v1/units/uses?name=log.csv", body: strings.Replace(uses, "0.1,g", "0.1,pinch", 1), headers: pairs([]string{"Content-Type", csvType})}), 422, "invalid", `row 2, column "taken"`)
	b.wantProblem(b.do(request{role: registry.Analyst, method: "POST", path: "/v1/units/uses?name=log.csv", body: strings.Replace(uses, "ampoule 4", "ampoule 9", 1), headers: pairs([]string{"Content-Type", csvType})}), 422, "invalid", `row 3, column "unit"`)
	a = b.post(registry.Analyst, "/v1/units/uses?name=log.csv", uses, "Content-Type", csvType)
	if a.text(t, "items.0.state") != "open" || a.text(t, "items.1.excursions.0.what") != "25 °C over night" {
		t.Errorf("uses %s", a.Body)
	}
	b.post(registry.Analyst, "/v1/units/uses", map[string]any{"uses": []any{map[string]any{"unit": ampoule, "reason": "used up", "state": "empty"}}})
}

// links asks how the values hang together.
func (b *bench) links() {
	b.t.Helper()
	t := b.t
	value := "/v1/materials/FJO-ACE/values/d13C-VPDB-LSVEC/total"
	series := b.get(registry.Auditor, value+"/series")
	if series.at(t, "items.0.shift") != nil {
		t.Errorf("the first version has a shift: %s", series.Body)
	}
	b.get(registry.Auditor, value+"/series?format=csv")
	monitor := b.get(registry.Auditor, "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total/monitor")
	if monitor.at(t, "trend") != nil || monitor.text(t, "without") == "" {
		t.Errorf("monitor of an anchor: %s", monitor.Body)
	}
	a := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/values/covariance", body: map[string]any{"values": []any{
		map[string]any{"material": "FJO-ACE", "scale": "d13C-VPDB-LSVEC", "version": 1}, map[string]any{"material": "FJO-GLY", "scale": "d13C-VPDB-LSVEC"}}}})
	if c := a.at(t, "covariance.0.1").(float64); c <= 0 {
		t.Errorf("a value and its own anchor have the covariance %v", c)
	}
	if d := b.get(registry.Auditor, "/v1/materials/FJO-GLY/depth").at(t, "items.0.depth").(float64); d != 1 {
		t.Errorf("a certificate's value has the depth %v", d)
	}
	h := b.get(registry.Auditor, "/v1/materials/FJO-ACE/handling?language=fr")
	// The sentence of H302 in French, as in the statements of GHS/CLP.
	if got := h.text(t, "hazards.0.text"); got != "Nocif en cas d’ingestion." && got != "Nocif en cas d'ingestion." {
		t.Errorf("H302 in French: %q", got)
	}
}

// printed asks for every page and looks that it carries its own style and no script.
func (b *bench) printed() {
	b.t.Helper()
	plan := "/v1/assignments/" + b.get(registry.Auditor, "/v1/assignments").text(b.t, "items.0.code")
	for path, want := range map[string]string{"/v1/materials/FJO-ACE/certificate?valid_at=2026-07-01T00:00:00Z": "H302 Harmful if swallowed.", "/v1/materials/FJO-ACE/labels": "FJO-ACE</text>",
		"/v1/due?days=4000": "What falls due", plan + "/prospects": "What buys the most"} {
		a := b.want(200, request{role: registry.Auditor, method: "GET", path: path, headers: map[string]string{"Accept": "text/html"}})
		page, policy := string(a.Body), a.Header.Get("Content-Security-Policy")
		start, end := strings.Index(page, "<style>")+len("<style>"), strings.Index(page, "</style>")
		if !strings.HasPrefix(page, "<!DOCTYPE html>") || !strings.Contains(page, want) || strings.Contains(page, "<script") || end < start {
			b.t.Errorf("%s: no page with %q: %.400s", path, want, page)
			continue
		}
		sum := sha256.Sum256([]byte(page[start:end]))
		if hash := base64.StdEncoding.EncodeToString(sum[:]); !strings.Contains(policy, hash) || !strings.Contains(policy, "default-src 'none'") {
			b.t.Errorf("%s: the policy %q does not let in the page's style", path, policy)
		}
	}
}

func with(m map[string]any, name string, value any) map[string]any {
	m[name] = value
	return m
}

func TestCampaignFromPlanToCertificate(t *testing.T) {
	b := openBench(t)
	b.travel()
	b.campaign()
	var v map[string]any
	b.must(json.Unmarshal(b.verified().Body, &v))
	if v["clean"] != true {
		t.Errorf("verification: %v", v)
	}
}
