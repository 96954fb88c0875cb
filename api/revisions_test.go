package api_test

import (
	"context"
	"fmt"
	"math"
	"strings"
	"testing"

	"deltamoor/api/registry"
)

// moved proposes that the laboratory's glycine is at −26.00 in place of −26.39.
var moved = map[string]any{"reason": "the certificate was corrected", "values": []any{map[string]any{"material": "FJO-GLY", "scale": "d13C-VPDB-LSVEC", "value": -26.00, "u": 0.04}}}

// work runs the laboratory's jobs to their end, as a worker of the server does.
func (b *bench) work() {
	b.t.Helper()
	for {
		did, err := b.registry().Work(context.Background(), "TST", "test")
		b.must(err)
		if !did {
			return
		}
	}
}

// revise records a revision and draws everything up again.
func (b *bench) revise() (revision, job string) {
	b.t.Helper()
	a := b.want(202, request{role: registry.Manager, method: "POST", path: "/v1/revisions", body: moved})
	revision, job = a.text(b.t, "revision.code"), a.text(b.t, "job.code")
	if got := a.Header.Get("Location"); got != "/v1/revisions/"+revision {
		b.t.Errorf("Location %q", got)
	}
	b.work()
	return revision, job
}

// reviseWhole takes a revision to its end, on a report of its own.
func (b *bench) reviseWhole() {
	b.t.Helper()
	sample := b.post(registry.Analyst, "/v1/samples", map[string]any{"samples": []any{map[string]any{"client": "Harbour office", "label": "H1", "wanted": []any{map[string]any{"scale": "d13C-VPDB-LSVEC"}}}}}).text(b.t, "items.0.code")
	csv := strings.ReplaceAll(carbonCSV(sample), "2026-03-02", "2026-03-05")
	session := b.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid&name=harbour.csv", csv, "Content-Type", csvType).text(b.t, "session.code")
	calibration := b.post(registry.Analyst, "/v1/sessions/"+session+"/calibrations", map[string]any{"quantity": "d13C"}).text(b.t, "code")
	b.decide(registry.Signatory, "/v1/calibrations/"+calibration, "approved")
	b.post(registry.Analyst, "/v1/sessions/"+session+"/outcomes", map[string]any{"quantity": "d13C", "outcome": "accepted"})
	final := b.post(registry.Analyst, "/v1/finals", map[string]any{"sample": sample, "scale": "d13C-VPDB-LSVEC"}).text(b.t, "code")
	b.decide(registry.Signatory, "/v1/finals/"+final, "approved")
	report := b.post(registry.Signatory, "/v1/reports", map[string]any{"client": "Harbour office", "title": "Results", "finals": []any{final}})
	delta := report.text(b.t, "codes.0")

	var preview answer
	b.unchanged("a preview", func() {
		preview = b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/revisions?preview=true&full=true&limit=500", body: moved})
	})
	var predicted, full float64
	for _, x := range preview.json(b.t)["affected"].([]any) {
		if m := x.(map[string]any); m["kind"] == "reported" && m["code"] == delta {
			predicted, full = m["shift"].(float64), m["full"].(map[string]any)["shift"].(float64)
		}
	}
	// The line runs through −26.39 and 37.63; a sample at −18.2 moves by (37.63 + 18.2)/(37.63 + 26.39) = 0.872 of
	// the anchor's 0.39 ‰, to first order and but for the drift term and the ripple.
	if math.Abs(predicted-0.872*0.39) > 0.005 || math.Abs(full-predicted) > 0.01 {
		b.t.Errorf("predicted %v, drawn up again %v, want about %v", predicted, full, 0.872*0.39)
	}

	code, job := b.revise()
	revision := "/v1/revisions/" + code
	if got := b.get(registry.Auditor, "/v1/jobs/"+job); got.text(b.t, "state") != "done" {
		b.t.Errorf("job: %s", got.Body)
	}
	made := b.get(registry.Auditor, revision+"/versions/2")
	set := made.text(b.t, "drafted.hash")
	if len(set) != 64 || made.text(b.t, "phase") != "drafted" {
		b.t.Fatalf("revision: %s", made.Body)
	}
	before := b.get(registry.Auditor, "/v1/finals/"+final)
	for name, body := range map[string]any{"no hash": map[string]any{"decision": "approved"}, "another hash": map[string]any{"decision": "approved", "set": strings.Repeat("0", 63) + "1"}} {
		if a := b.do(request{role: registry.Signatory, method: "POST", path: revision + "/decisions", body: body, headers: map[string]string{"If-Match": made.Header.Get("ETag")}}); a.Status != 422 && a.Status != 409 {
			b.t.Errorf("approval with %s: %d %s", name, a.Status, a.Body)
		}
	}
	b.post(registry.Signatory, revision+"/decisions", map[string]any{"decision": "approved", "set": set, "reason": "checked"}, "If-Match", made.Header.Get("ETag"))
	b.work()
	after := b.get(registry.Auditor, "/v1/finals/"+final)
	if d := after.at(b.t, "value").(float64) - before.at(b.t, "value").(float64); math.Abs(d-full) > 1e-12 {
		b.t.Errorf("the final value moved by %v, the preview gave %v", d, full)
	}
	if got := b.get(registry.Auditor, "/v1/reported/"+delta).at(b.t, "value"); got != before.at(b.t, "value") {
		b.t.Errorf("the reported delta is %v now, it was %v: what was issued stays", got, before.at(b.t, "value"))
	}

	lines := b.get(registry.Auditor, revision+"/sets/"+report.text(b.t, "code")+"/lines")
	if lines.at(b.t, "items.0.new_value") != after.at(b.t, "value") || lines.text(b.t, "items.0.client") != "Harbour office" {
		b.t.Errorf("lines before and after: %s", lines.Body)
	}
	closed := b.post(registry.Signatory, revision+"/closings", map[string]any{"report": report.text(b.t, "code"), "action": "re-issue", "reason": "the value matters to the client"}, "Idempotency-Key", "close 1")
	amended := b.get(registry.Auditor, "/v1/reports/"+closed.text(b.t, "reissued"))
	if amended.text(b.t, "amends") != report.text(b.t, "code") || !strings.Contains(amended.text(b.t, "reason"), code) {
		b.t.Errorf("amended report: %s", amended.Body)
	}
	if csv := string(b.get(registry.Auditor, revision+"/sets?format=csv").Body); !strings.Contains(csv, "re-issue") {
		b.t.Errorf("sets as CSV: %s", csv)
	}
	for _, path := range []string{"/v1/revisions", revision, revision + "/versions", revision + "/decisions", revision + "/sets"} {
		b.get(registry.Auditor, path)
	}
}

func TestRevisionThroughTheAPI(t *testing.T) {
	b := openBench(t)
	b.travel()
	b.reviseWhole()
	if v := b.verified(); v.at(t, "clean") != true {
		t.Errorf("verification: %s", v.Body)
	}
}

func TestUnusableRevisionsAreRefusedWithTheirPlace(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	for name, q := range map[string]struct {
		body  string
		place string
	}{
		"nothing":       {`{"reason":"r"}`, "body"},
		"unknown":       {`{"reason":"r","values":[{"material":"NOBODY","scale":"d13C-VPDB-LSVEC","withdrawn":true}]}`, "body.values[0]"},
		"no u":          {`{"reason":"r","values":[{"material":"FJO-GLY","scale":"d13C-VPDB-LSVEC","value":1}]}`, "body.values[0].stated"},
		"two u":         {`{"reason":"r","values":[{"material":"FJO-GLY","scale":"d13C-VPDB-LSVEC","value":1,"u":0.1,"stated":{"text":"0.1","kind":"standard"}}]}`, "body.values[0].u"},
		"mistyped unit": {`{"reason":"r","units":[{"unit":"B0000-00000"}]}`, "body.units[0].unit"},
		"no reason":     {`{"values":[{"material":"FJO-GLY","scale":"d13C-VPDB-LSVEC","withdrawn":true}]}`, "body.reason"},
		"no reading":    {fmt.Sprintf(`{"reason":"r","exclusions":[{"session":%q,"readings":[99]}]}`, j.session), "body.exclusions[0].readings"},
	} {
		b.unchanged(name, func() {
			b.wantProblem(b.do(request{role: registry.Manager, method: "POST", path: "/v1/revisions", body: q.body}), 422, "invalid", q.place)
		})
	}
	b.wantProblem(b.do(request{role: registry.Manager, method: "GET", path: "/v1/jobs/" + j.session}), 422, "invalid", "path.code")
}
