package api_test

import (
	"context"
	"encoding/base64"
	"fmt"
	"net/http"
	"strings"
	"testing"
	"time"

	"deltamoor/api"
	"deltamoor/api/registry"
	"deltamoor/api/rest"
)

// wantProblem checks a refusal: status, type, media type, and that each text
// stands somewhere in it.
func (b *bench) wantProblem(a answer, status int, meaning string, texts ...string) {
	b.t.Helper()
	if a.Status != status {
		b.t.Errorf("status %d, want %d: %.800s", a.Status, status, a.Body)
		return
	}
	if media := a.Header.Get("Content-Type"); media != "application/problem+json" {
		b.t.Errorf("media type %q of a refusal: %.300s", media, a.Body)
		return
	}
	p := a.json(b.t)
	if p["type"] != "/problems/"+meaning || p["status"] != float64(status) || p["title"] == "" || p["detail"] == "" {
		b.t.Errorf("refusal %.500s, want the type /problems/%s", a.Body, meaning)
	}
	for _, text := range texts {
		if !strings.Contains(string(a.Body), strings.Trim(quoteJSON(text), `"`)) {
			b.t.Errorf("the refusal does not say %s: %.1500s", text, a.Body)
		}
	}
}

func quoteJSON(s string) string {
	r := strings.NewReplacer(`"`, `\"`, "\n", `\n`)
	return r.Replace(s)
}

// TestEveryMeaningHasItsAnswer asks for every refusal there is.
func TestEveryMeaningHasItsAnswer(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	mistyped := j.reported[:10] + string(nextSymbol(j.reported[10]))
	value := "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total"
	exclusion := map[string]any{"act": "exclude", "readings": []any{6}, "cause": "leak", "reason": "split"}
	for _, c := range []struct {
		name    string
		q       request
		status  int
		meaning string
		texts   []string
	}{
		{"no token", request{method: "GET", path: "/v1/materials"}, 401, "unauthenticated", []string{"Authorization: Bearer"}},
		{"unknown token", request{method: "GET", path: "/v1/materials", headers: map[string]string{"Authorization": "Bearer dm_nothing"}}, 401, "unauthenticated", nil},
		{"unknown scheme", request{method: "GET", path: "/v1/materials", headers: map[string]string{"Authorization": "Digest x"}}, 401, "unauthenticated", []string{"Digest"}},
		{"role missing", request{role: registry.Auditor, method: "POST", path: "/v1/instruments", body: map[string]any{"code": "EA2", "name": "x"}}, 403, "refused", []string{"manager"}},
		{"own work", request{role: registry.Manager, method: "POST", path: value + "/decisions", body: map[string]any{"decision": "withdrawn"}, headers: pairs([]string{"If-Match", `"1-1"`})}, 422, "invalid", []string{"body.reason"}},
		{"unknown address", request{role: registry.Auditor, method: "GET", path: "/v1/nothing"}, 404, "not-found", nil},
		{"unknown code", request{role: registry.Auditor, method: "GET", path: "/v1/materials/NOBODY"}, 404, "not-found", []string{"NOBODY"}},
		{"unknown generated code", request{role: registry.Auditor, method: "GET", path: "/v1/reported/D7K3M-9Q2XG"}, 404, "not-found", []string{"D7K3M-9Q2XG"}},
		{"mistyped code", request{role: registry.Auditor, method: "GET", path: "/v1/reported/" + mistyped}, 422, "invalid", []string{"path.code", "mistyped"}},
		{"code of something else", request{role: registry.Auditor, method: "GET", path: "/v1/reported/" + j.session}, 422, "invalid", []string{"the code of a session", "the code of a reported delta"}},
		{"PUT", request{role: registry.Manager, method: "PUT", path: "/v1/materials/FJO-GLY", body: "{}"}, 405, "method-not-allowed", []string{"PUT does not exist here"}},
		{"DELETE", request{role: registry.Manager, method: "DELETE", path: value}, 405, "method-not-allowed", nil},
		{"code taken", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: map[string]any{"code": "EA1", "name": "x"}}, 409, "conflict", []string{"EA1", "exists already"}},
		{"no condition", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/" + j.session + "/exclusions", body: exclusion}, 428, "unconditional", []string{"If-Match"}},
		{"stale", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/" + j.session + "/exclusions", body: exclusion, headers: pairs([]string{"If-Match", `"3-0"`})}, 412, "stale", []string{`"0-0"`}},
		{"weak tag", request{role: registry.Analyst, method: "POST", path: "/v1/sessions/" + j.session + "/exclusions", body: exclusion, headers: pairs([]string{"If-Match", `W/"0-0"`})}, 412, "stale", nil},
		{"media type", request{role: registry.Analyst, method: "POST", path: "/v1/samples", body: "<x/>", headers: pairs([]string{"Content-Type", "application/xml"})}, 415, "unsupported-media-type", []string{"application/xml", "text/csv"}},
		{"media type of JSON", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: "code: EA9", headers: pairs([]string{"Content-Type", "application/yaml"})}, 415, "unsupported-media-type", nil},
		{"too large", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: `{"code":"EA9","name":"` + strings.Repeat("x", 1<<20) + `"}`}, 413, "too-large", []string{"1048577"}},
		{"broken JSON", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: `{"code":`}, 422, "invalid", []string{"body"}},
		{"no body", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: ""}, 422, "invalid", nil},
		{"unknown member", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: `{"code":"EA9","name":"x","colour":"red"}`}, 422, "invalid", []string{"body.colour"}},
		{"another case", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: `{"code":"EA9","Name":"x"}`}, 422, "invalid", []string{"Name"}},
		{"member twice", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: `{"code":"EA9","name":"x","name":"y"}`}, 422, "invalid", []string{"body.name stands twice"}},
		{"text for a number", request{role: registry.Manager, method: "POST", path: "/v1/materials/FJO-GLY/values", body: `{"scale":"d13C-VPDB-LSVEC","value":"-26.390","u":0.04,"basis":"certificate"}`}, 422, "invalid", []string{"body.value", "number"}},
		{"unknown parameter", request{role: registry.Auditor, method: "GET", path: "/v1/materials?colour=red"}, 422, "invalid", []string{"query.colour"}},
		{"unusable cursor", request{role: registry.Auditor, method: "GET", path: "/v1/materials?after=abc"}, 422, "invalid", []string{"query.after"}},
		{"unusable time", request{role: registry.Auditor, method: "GET", path: "/v1/materials?as_of=yesterday"}, 422, "invalid", []string{"query.as_of", "yesterday"}},
		{"page too long", request{role: registry.Auditor, method: "GET", path: "/v1/materials?limit=501"}, 422, "invalid", []string{"query.limit"}},
		{"decision made", request{role: registry.Signatory, method: "POST", path: value + "/decisions", body: map[string]any{"decision": "approved"}, headers: pairs([]string{"If-Match", `"1-1"`})}, 409, "conflict", []string{"approved"}},
		{"cross origin", request{role: registry.Manager, method: "POST", path: "/v1/instruments", body: `{}`, headers: pairs([]string{"Sec-Fetch-Site", "cross-site"})}, 403, "refused", []string{"another origin"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			b := *b2(b, t)
			b.unchanged(c.name, func() { b.wantProblem(b.do(c.q), c.status, c.meaning, c.texts...) })
		})
	}
	b.checkAnswers()
}

// b2 is the same bench for a subtest.
func b2(b *bench, t testing.TB) *bench {
	return &bench{t: t, store: b.store, key: b.key, handler: b.handler, log: b.log, tokens: b.tokens, clock: b.clock}
}

func nextSymbol(c byte) byte {
	const symbols = "0123456789ABCDEFGHJKMNPQRSTVWXYZ"
	return symbols[(strings.IndexByte(symbols, c)+1)%len(symbols)]
}

func TestBeforeInitTheServerLivesAndIsNotReady(t *testing.T) {
	b := openEmpty(t, api.Options{})
	b.want(200, request{method: "GET", path: "/healthz"})
	b.wantProblem(b.do(request{method: "GET", path: "/readyz"}), 503, "unavailable", "run init")
	a := b.do(request{method: "GET", path: "/v1/materials", headers: map[string]string{"Authorization": "Bearer dm_x"}})
	b.wantProblem(a, 503, "unavailable", "run init")
	if a.Header.Get("Retry-After") == "" {
		t.Error("503 without Retry-After")
	}
	_, err := b.registry().Init(context.Background(), registry.InitRequest{Laboratory: "TST", Name: "Test", Person: "ada", PersonName: "Ada"})
	b.must(err)
	b.want(200, request{method: "GET", path: "/readyz"})
	b.wantProblem(b.do(request{method: "GET", path: "/v1/materials", headers: map[string]string{"Authorization": "Bearer dm_x"}}), 401, "unauthenticated")
}

func TestADatabaseGoneIsUnavailable(t *testing.T) {
	b := openBench(t)
	b.must(b.store.Close())
	b.want(200, request{method: "GET", path: "/healthz"})
	if a := b.do(request{method: "GET", path: "/readyz"}); a.Status != 503 {
		t.Errorf("readiness without a database: status %d", a.Status)
	}
	a := b.do(request{role: registry.Auditor, method: "GET", path: "/v1/materials"})
	if a.Status != 503 && a.Status != 500 || strings.Contains(string(a.Body), "sql") {
		t.Errorf("status %d: %s", a.Status, a.Body)
	}
}

func TestTokensByBasicAndRevocationAtOnce(t *testing.T) {
	b := openBench(t)
	made := b.post(registry.Analyst, "/v1/tokens", map[string]any{"label": "spreadsheet"})
	secret := made.text(t, "secret")
	basic := map[string]string{"Authorization": "Basic " + base64.StdEncoding.EncodeToString([]byte("anyone:"+secret))}
	list := request{method: "GET", path: "/v1/samples", headers: basic}
	b.want(200, list)
	path := "/v1/tokens/" + made.text(t, "code")
	if again := b.get(registry.Analyst, path); strings.Contains(string(again.Body), secret) || again.json(t)["secret"] != nil {
		t.Errorf("the secret is shown a second time: %s", again.Body)
	}
	b.wantProblem(b.do(request{role: registry.Signatory, method: "GET", path: path}), 403, "refused", "administrator")
	b.post(registry.Analyst, path+"/versions", map[string]any{"revoked": true}, "If-Match", made.Header.Get("ETag"))
	a := b.do(list)
	b.wantProblem(a, 401, "unauthenticated")
	if a.Header.Get("WWW-Authenticate") == "" {
		t.Error("401 without a challenge")
	}
}

func TestTooManyFailedSignInsOfOneAddress(t *testing.T) {
	b := openBench(t)
	bad := request{method: "GET", path: "/v1/samples", headers: map[string]string{"Authorization": "Bearer dm_wrong"}}
	var a answer
	for range 40 {
		if a = b.do(bad); a.Status == http.StatusTooManyRequests {
			break
		}
	}
	b.wantProblem(a, 429, "too-many-requests", "failed sign-ins")
	if a.Header.Get("Retry-After") == "" {
		t.Error("429 without Retry-After")
	}
	b.get(registry.Auditor, "/v1/samples") // who has a good token is not locked out by a neighbour
}

func TestLogAndMetricsTellNoLabels(t *testing.T) {
	b := openBench(t)
	b.post(registry.Analyst, "/v1/samples", map[string]any{"samples": []any{map[string]any{"client": "Secretive", "label": "Hidden-7", "wanted": []any{map[string]any{"scale": "d13C-VPDB-LSVEC"}}}}})
	b.do(request{role: registry.Auditor, method: "GET", path: "/v1/materials/Hidden-7?format=csv"})
	for range 3 {
		b.do(request{method: "GET", path: fmt.Sprintf("/some/where/%d", b.now().UnixNano())})
	}
	metrics := string(b.want(200, request{method: "GET", path: "/metrics"}).Body)
	for _, text := range []string{b.log.String(), metrics} {
		for _, secret := range []string{"Secretive", "Hidden-7", "dm_"} {
			if strings.Contains(text, secret) {
				t.Errorf("%q stands in:\n%s", secret, text)
			}
		}
	}
	for _, want := range []string{`deltamoor_requests_total{method="GET",route="/v1/materials/:code",status="4xx"} 1`, `deltamoor_requests_total{method="GET",route="none",status="4xx"} 3`} {
		if !strings.Contains(metrics, want) {
			t.Errorf("metrics have no %s:\n%s", want, metrics)
		}
	}
	if !strings.Contains(b.log.String(), "route=/v1/materials/:code") || !strings.Contains(b.log.String(), "request_id=") {
		t.Errorf("log:\n%s", b.log)
	}
}

func TestEveryAnswerHasTheHeadersThatProtect(t *testing.T) {
	b := openBench(t)
	for _, path := range []string{"/v1/materials", "/nothing", "/docs", "/healthz", "/openapi.json"} {
		a := b.do(request{role: registry.Auditor, method: "GET", path: path})
		for _, name := range []string{"X-Content-Type-Options", "Content-Security-Policy", "Referrer-Policy", "X-Request-Id"} {
			if a.Header.Get(name) == "" {
				t.Errorf("%s has no %s", path, name)
			}
		}
	}
	docs := b.want(200, request{method: "GET", path: "/docs"})
	for _, outside := range []string{"http://", "https://", "//cdn"} {
		if strings.Contains(string(docs.Body), outside) {
			t.Errorf("/docs reaches outside: %s", docs.Body)
		}
	}
	for _, file := range []string{"/docs/swagger-ui-bundle.js", "/docs/swagger-ui.css", "/docs/init.js", "/docs/NOTICE.txt"} {
		b.want(200, request{method: "GET", path: file})
	}
	b.want(200, request{method: "GET", path: "/problems/invalid"})
	head := b.do(request{role: registry.Auditor, method: "HEAD", path: "/v1/materials"})
	if head.Status != 200 {
		t.Errorf("HEAD: status %d", head.Status)
	}
}

func TestARequestThatTakesTooLongIsUnavailable(t *testing.T) {
	b := openEmpty(t, api.Options{API: rest.Options{Timeout: time.Nanosecond}})
	secret, err := b.registry().Init(context.Background(), registry.InitRequest{Laboratory: "TST", Name: "Test", Person: "ada", PersonName: "Ada"})
	b.must(err)
	b.tokens["TST"] = map[string]string{registry.Administrator: secret}
	b.unchanged("a request out of time", func() {
		a := b.do(request{role: registry.Administrator, method: "POST", path: "/v1/instruments", body: map[string]any{"code": "EA1", "name": "x"}})
		b.wantProblem(a, 503, "unavailable")
		if a.Header.Get("Retry-After") == "" {
			t.Error("503 without Retry-After")
		}
	})
}
