package api_test

import (
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
	for _, path := range []string{"/v1/assignments", "/v1/assignments?format=csv", plan, plan + "/versions", plan + "/versions/1", plan + "/decisions", plan + "/prospects", plan + "/trace"} {
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

	stock := b.get(registry.Auditor, "/v1/materials/FJO-ACE/stock")
	if n := len(stock.at(t, "units.0.uses").([]any)); n != 3 || stock.at(t, "forecast") != nil {
		t.Errorf("%d uses logged of the first vial, forecast %v: want 3 sessions", n, stock.at(t, "forecast"))
	}
	b.get(registry.Auditor, "/v1/materials/FJO-ACE/labels?units="+units[0])
	b.get(registry.Auditor, "/v1/due")
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

func with(m map[string]any, name string, value any) map[string]any {
	m[name] = value
	return m
}

func TestCampaignFromPlanToCertificate(t *testing.T) {
	b := openBench(t)
	b.travel()
	b.campaign()
	var v map[string]any
	b.must(json.Unmarshal(b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/verification"}).Body, &v))
	if v["clean"] != true {
		t.Errorf("verification: %v", v)
	}
}
