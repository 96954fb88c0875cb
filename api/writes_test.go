package api_test

import (
	"context"
	"encoding/json"
	"fmt"
	"strings"
	"sync"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/store"
)

func TestARepeatedRequestIsAnsweredAsTheFirstTime(t *testing.T) {
	b := openBench(t)
	q := request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: map[string]any{"code": "EA1", "name": "first"}, headers: pairs([]string{"Idempotency-Key", "k1"})}
	first := b.want(201, q)
	b.unchanged("the repetition", func() {
		again := b.want(201, q)
		if diff := cmp.Diff(string(first.Body), string(again.Body)); diff != "" {
			t.Errorf("the repetition differs (-first +again):\n%s", diff)
		}
		for _, name := range []string{"ETag", "Location", "Content-Type"} {
			if first.Header.Get(name) == "" || again.Header.Get(name) != first.Header.Get(name) {
				t.Errorf("%s: %q, then %q", name, first.Header.Get(name), again.Header.Get(name))
			}
		}
		other := q
		other.body = map[string]any{"code": "EA2", "name": "second"}
		b.wantProblem(b.do(other), 422, "invalid", "header.Idempotency-Key")
		q.role = registry.Analyst // another person's key is another key, and this one may not
		b.wantProblem(b.do(q), 403, "refused")
	})
	// A refused request can be tried again under its key.
	q = request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: map[string]any{"code": "EA 3", "name": "third"}, headers: pairs([]string{"Idempotency-Key", "k2"})}
	b.wantProblem(b.do(q), 422, "invalid", "body.code")
	q.body = map[string]any{"code": "EA3", "name": "third"}
	b.want(201, q)

	// A secret is not remembered.
	q = request{role: registry.Analyst, method: "POST", path: "/v1/tokens", body: map[string]any{"label": "x"}, headers: pairs([]string{"Idempotency-Key", "k3"})}
	made, again := b.want(201, q), b.want(201, q)
	if made.text(t, "secret") == "" || again.json(t)["secret"] != nil || made.text(t, "code") != again.text(t, "code") {
		t.Errorf("token: %s\nagain: %s", made.Body, again.Body)
	}
}

func TestOfTwoRequestsWithOneKeyOneActs(t *testing.T) {
	b := openBench(t)
	const n = 8
	statuses := make([]int, n)
	var wait sync.WaitGroup
	for i := range n {
		wait.Add(1)
		go func() {
			defer wait.Done()
			statuses[i] = b.do(request{role: registry.Analyst, method: "POST", path: "/v1/samples", headers: pairs([]string{"Idempotency-Key", "same"}),
				body: `{"samples":[{"client":"c","label":"l","wanted":[{"scale":"d13C-VPDB-LSVEC"}]}]}`}).Status
		}()
	}
	wait.Wait()
	for _, s := range statuses {
		if s != 201 && s != 409 {
			t.Errorf("statuses %v, want 201 or 409", statuses)
			break
		}
	}
	if items := b.get(registry.Auditor, "/v1/samples").json(t)["items"].([]any); len(items) != 1 {
		t.Errorf("%d samples from one key", len(items))
	}
}

func TestOfTwoApprovalsOneWins(t *testing.T) {
	b := openBench(t)
	b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-GLY", "name": "Glycine", "kind": "working"})
	made := b.post(registry.Manager, "/v1/materials/FJO-GLY/values", `{"scale":"d13C-VPDB-LSVEC","value":-26.390,"u":0.040,"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`)
	const n = 6
	statuses := make([]int, n)
	var wait sync.WaitGroup
	for i := range n {
		wait.Add(1)
		go func() {
			defer wait.Done()
			statuses[i] = b.do(request{role: registry.Signatory, method: "POST", path: made.Header.Get("Location") + "/decisions", body: map[string]any{"decision": "approved"},
				headers: pairs([]string{"If-Match", made.Header.Get("ETag")})}).Status
		}()
	}
	wait.Wait()
	won := 0
	for _, s := range statuses {
		switch s {
		case 201:
			won++
		case 409, 412:
		default:
			t.Errorf("status %d", s)
		}
	}
	if won != 1 {
		t.Errorf("%d approvals won: %v", won, statuses)
	}
	if n := len(b.get(registry.Auditor, made.Header.Get("Location")+"/decisions").json(t)["items"].([]any)); n != 1 {
		t.Errorf("%d decisions", n)
	}
}

func TestPreviewsStoreNothing(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	csv := strings.ReplaceAll(carbonCSV(j.sample), "2026-03-02", "2026-03-05")
	b.unchanged("previews", func() {
		a := b.want(200, request{role: registry.Analyst, method: "POST", path: "/v1/sessions/import?instrument=EA1&method=C-solid&preview=true", body: csv, headers: pairs([]string{"Content-Type", csvType})})
		if a.at(t, "preview") != true || len(a.json(t)["readings"].([]any)) != 10 || a.text(t, "session.code") != "" {
			t.Errorf("preview: %.2000s", a.Body)
		}
		if got := a.text(t, "readings.0.role"); got != "anchor" {
			t.Errorf("role %q of the first reading, want the method's: anchor", got)
		}
		b.want(200, request{role: registry.Analyst, method: "POST", path: "/v1/sessions/" + j.session + "/calibrations?preview=true", body: map[string]any{"quantity": "d13C", "model": map[string]any{"drift": "none", "weights": "replicate"}}})
		b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/calculations/fit", body: lineFit})
	})
	var info error
	b.must(b.store.Read(context.Background(), func(ctx context.Context, v *store.View) error {
		sum := sha(csv)
		_, info = v.UploadInfo(ctx, "TST", sum)
		return nil
	}))
	if info == nil {
		t.Error("a preview kept the bytes")
	}
}

func TestTheSameBytesAnswerWithTheSessionThatExists(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	b.unchanged("the same file again", func() {
		a := b.want(200, request{role: registry.Analyst, method: "POST", path: "/v1/sessions/import?instrument=EA1&method=C-solid&name=again.csv", body: carbonCSV(j.sample), headers: pairs([]string{"Content-Type", csvType})})
		if a.at(t, "existed") != true || a.text(t, "session.code") != j.session {
			t.Errorf("again: %.500s", a.Body)
		}
	})
	upload := b.get(registry.Auditor, "/v1/uploads/"+j.upload)
	if string(upload.Body) != carbonCSV(j.sample) {
		t.Error("the upload is not the bytes as they came")
	}
}

// TestUnusableInputIsRefusedWithItsPlace is the list of what people send by
// mistake. Every one names place, found and expected, and changes nothing.
func TestUnusableInputIsRefusedWithItsPlace(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	good := carbonCSV(j.sample)
	path := "/v1/sessions/import?instrument=EA1&method=C-solid&name=run.csv"
	csv := func(body string) request {
		return request{role: registry.Analyst, method: "POST", path: path, body: body, headers: pairs([]string{"Content-Type", csvType})}
	}
	lines := strings.SplitAfter(good, "\n")
	value := func(body string) request {
		return request{role: registry.Manager, method: "POST", path: "/v1/materials/FJO-GLY/values", body: body}
	}
	fit := func(edit func(map[string]any)) request {
		var m map[string]any
		b.must(json.Unmarshal([]byte(lineFit), &m))
		edit(m)
		return request{role: registry.Analyst, method: "POST", path: "/v1/calculations/fit", body: m}
	}
	many := strings.Builder{}
	many.WriteString(lines[0])
	for i := range registry.MaxReadings + 1 {
		fmt.Fprintf(&many, "%d,USGS41,,2026-03-02T09:00:00Z,1,0.1,5,\r\n", i+1)
	}
	for _, c := range []struct {
		name   string
		q      request
		status int
		texts  []string
	}{
		{"unknown material", csv(strings.Replace(good, "USGS41", "USGS99", 1)), 422, []string{`row 3, column "Identifier"`, "USGS99"}},
		{"missing column", csv(strings.Replace(good, "d13C raw", "raw13", 1)), 422, []string{"d13C raw"}},
		{"text in a number", csv(strings.Replace(good, "0.05,5.0", "0.05,large", 1)), 422, []string{`row 2, column "Area"`, "large"}},
		{"decimal comma", csv(strings.Replace(good, ",0.05,", `,"0,05",`, 1)), 422, []string{`row 2, column "u raw"`}},
		{"negative u", csv(strings.Replace(good, ",0.05,", ",-0.05,", 1)), 422, []string{`row 2, column "u raw"`, "-0.05"}},
		{"unusable role", csv(strings.Replace(good, "FJO-GLY,,", "FJO-GLY,anker,", 1)), 422, []string{`row 2, column "Use"`, "anker"}},
		{"sample as anchor", csv(strings.Replace(good, j.sample+",,", j.sample+",anchor,", 1)), 422, []string{"row 7"}},
		{"empty file", csv(" \r\n"), 422, []string{"nothing in it"}},
		{"headings only", csv(lines[0]), 422, nil},
		{"too many rows", csv(many.String()), 413, []string{"100000"}},
		{"wrong encoding", csv(strings.Replace(good, "Remark", "Bemerkung \xfc", 1)), 422, []string{"encoding"}},
		{"unusable time", csv(strings.Replace(good, "2026-03-02T09:00:00Z", "2 March", 1)), 422, []string{`row 2, column "Time"`, "2 March"}},
		{"unknown method", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/import?instrument=EA1&method=none", body: good, headers: pairs([]string{"Content-Type", csvType})}, 404, []string{"none"}},
		{"unknown instrument", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/import?instrument=XX&method=C-solid", body: good + "\r\n", headers: pairs([]string{"Content-Type", csvType})}, 404, []string{"XX"}},
		{"no method said", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/import?instrument=EA1", body: good, headers: pairs([]string{"Content-Type", csvType})}, 422, []string{"query.method"}},
		{"not a workbook", request{role: registry.Analyst, method: "POST", path: path, body: "PK\x03\x04nonsense", headers: pairs([]string{"Content-Type", "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"})}, 422, nil},
		{"duplicate code", request{role: registry.Manager, method: "POST", path: "/v1/materials", body: map[string]any{"code": "fjo-gly", "name": "x", "kind": "working"}}, 409, []string{"FJO-GLY"}},
		{"code of common", request{role: registry.Manager, method: "POST", path: "/v1/materials", body: map[string]any{"code": "USGS41", "name": "x", "kind": "working"}}, 409, []string{"USGS41"}},
		{"two scales mixed", request{role: registry.Manager, method: "POST", path: "/v1/methods", body: map[string]any{"code": "mixed", "title": "mixed", "quantities": []any{
			map[string]any{"quantity": "d13C", "scale": "d13C-VPDB"}, map[string]any{"quantity": "d13C", "scale": "d13C-VPDB-LSVEC"}}}}, 422, []string{"body.quantities[1].quantity", "never holds two scales"}},
		{"value without uncertainty", value(`{"scale":"d13C-VPDB","value":-26.390,"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`), 422, []string{"body.u"}},
		{"u = 0 of what defines nothing", value(`{"scale":"d13C-VPDB","value":-26.390,"u":0,"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`), 422, []string{"body.u", "above 0"}},
		{"negative u of a value", value(`{"scale":"d13C-VPDB","value":-26.390,"u":-0.04,"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`), 422, []string{"body.u", "-0.04"}},
		{"expanded without k", value(`{"scale":"d13C-VPDB","value":-26.390,"stated":{"text":"0.08","kind":"expanded"},"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`), 422, []string{"body.stated.k"}},
		{"unknown scale", value(`{"scale":"d13C-NOTHING","value":-26.390,"u":0.04,"basis":"certificate","valid_from":"2025-01-01T00:00:00Z"}`), 404, []string{"d13C-NOTHING"}},
		{"not a number", value(`{"scale":"d13C-VPDB","value":NaN,"u":0.04,"basis":"certificate"}`), 422, []string{"body"}},
		{"one anchor", fit(func(m map[string]any) {
			m["anchors"] = m["anchors"].([]any)[:1]
			readings := m["readings"].([]any)
			m["readings"] = []any{readings[0], readings[3]}
		}), 422, []string{"body", "anchor"}},
		{"all anchors equal", fit(func(m map[string]any) {
			for _, a := range m["anchors"].([]any) {
				a.(map[string]any)["value"] = 1.0
			}
		}), 422, []string{"body"}},
		{"negative u of a reading", fit(func(m map[string]any) { m["readings"].([]any)[1].(map[string]any)["u"] = -0.1 }), 422, []string{"body.readings[1].u"}},
		{"member twice in a fit", request{role: registry.Analyst, method: "POST", path: "/v1/calculations/fit", body: `{"anchors":[],"anchors":[],"readings":[]}`}, 422, []string{"body.anchors"}},
		{"unknown scale of a sample", request{role: registry.Analyst, method: "POST", path: "/v1/samples", body: `{"samples":[{"client":"c","label":"l","wanted":[{"scale":"x"}]}]}`}, 422, []string{"body.samples[0].wanted[0].scale"}},
		{"label twice in a list", request{role: registry.Analyst, method: "POST", path: "/v1/samples", body: "client,label,wanted\r\nc,l,d13C-VPDB\r\nc,l,d13C-VPDB\r\n", headers: pairs([]string{"Content-Type", csvType})}, 422, []string{`row 3, column "label"`}},
		{"readings of another session", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/" + j.session + "/readings", body: good + "\r\n", headers: pairs([]string{"Content-Type", csvType})}, 409, []string{"another file is another session"}},
		{"excluded reading that is none", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/" + j.session + "/exclusions", body: map[string]any{"act": "exclude", "readings": []any{99}, "cause": "leak", "reason": "x"},
			headers: pairs([]string{"If-Match", `"0-0"`})}, 422, []string{"body.readings[0]", "99"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			b := b2(b, t)
			b.unchanged(c.name, func() {
				a := b.do(c.q)
				meaning := map[int]string{404: "not-found", 409: "conflict", 413: "too-large", 422: "invalid"}[c.status]
				b.wantProblem(a, c.status, meaning, c.texts...)
				if a.Status != 422 {
					return
				}
				faults, _ := a.json(t)["errors"].([]any)
				if len(faults) == 0 {
					t.Errorf("no faults one by one: %.500s", a.Body)
				}
				for _, f := range faults {
					if m := f.(map[string]any); m["message"] == "" || m["location"] == nil {
						t.Errorf("fault without place or expectation: %v", m)
					}
				}
			})
		})
	}
}
