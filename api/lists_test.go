package api_test

import (
	"encoding/csv"
	"fmt"
	"net/url"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
)

// manySamples puts n samples on the list.
func (b *bench) manySamples(n int) {
	b.t.Helper()
	var text strings.Builder
	text.WriteString("client,label,wanted\r\n")
	for i := range n {
		fmt.Fprintf(&text, "c,label %d,d13C-VPDB-LSVEC\r\n", i)
	}
	b.post(registry.Analyst, "/v1/samples?name=list.csv", text.String(), "Content-Type", csvType)
}

func TestPagesTogetherAreTheWholeList(t *testing.T) {
	b := openBench(t)
	b.manySamples(25)
	seen := map[string]bool{}
	next, pages := "/v1/samples?limit=10", 0
	for next != "" {
		a := b.get(registry.Auditor, next)
		pages++
		for _, item := range a.json(t)["items"].([]any) {
			code := item.(map[string]any)["code"].(string)
			if seen[code] {
				t.Errorf("%s stands twice", code)
			}
			seen[code] = true
		}
		link := a.Header.Get("Link")
		if (link == "") != (a.json(t)["after"] == nil) {
			t.Errorf("Link %q beside after %v", link, a.json(t)["after"])
		}
		next = ""
		if rest, ok := strings.CutPrefix(link, "<"); ok {
			next, _, _ = strings.Cut(rest, `>; rel="next"`)
		}
	}
	if len(seen) != 25 || pages != 3 {
		t.Errorf("%d samples on %d pages, want 25 on 3", len(seen), pages)
	}
}

func TestAListAsCSVIsWhole(t *testing.T) {
	b := openBench(t)
	b.manySamples(1203) // more than two pages of the largest size
	for _, q := range []request{
		{role: registry.Auditor, method: "GET", path: "/v1/samples?format=csv"},
		{role: registry.Auditor, method: "GET", path: "/v1/samples", headers: map[string]string{"Accept": "text/csv"}},
		{role: registry.Auditor, method: "GET", path: "/v1/samples?limit=5", headers: map[string]string{"Accept": "text/csv;q=1, application/json;q=0.5"}},
	} {
		a := b.want(200, q)
		rows, err := csv.NewReader(strings.NewReader(string(a.Body))).ReadAll()
		b.must(err)
		if len(rows) != 1204 {
			t.Errorf("%s: %d rows, want a heading and 1203", q.path, len(rows))
		}
		if got := strings.Join(rows[0][:3], ","); got != "code,version,laboratory" {
			t.Errorf("headings %q", got)
		}
	}
	if a := b.get(registry.Auditor, "/v1/samples"); !strings.HasPrefix(a.Header.Get("Content-Type"), "application/json") {
		t.Errorf("without a wish: %q", a.Header.Get("Content-Type"))
	}
}

// TestMomentsChooseWhatHeldAndWhatWasSaid is the table of architecture.md 5
// with its dates moved to a clock that runs: .1 holds from 2018, .2 re-values
// from 2020, .3 corrects .1.
func TestMomentsChooseWhatHeldAndWhatWasSaid(t *testing.T) {
	b := openBench(t)
	b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-GLY", "name": "Glycine", "kind": "working"})
	path := "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total"
	stamp := func() string { return url.QueryEscape(b.now().Format(time.RFC3339Nano)) }
	empty := stamp()
	b.post(registry.Manager, "/v1/materials/FJO-GLY/values", `{"scale":"d13C-VPDB-LSVEC","value":-33.10,"u":0.05,"basis":"certificate","valid_from":"2018-01-01T00:00:00Z"}`)
	drafted := stamp()
	b.decide(registry.Signatory, path, "approved")
	first := stamp()
	b.post(registry.Manager, path+"/versions", `{"reason":"re-valued","value":-33.16,"u":0.04,"basis":"certificate","valid_from":"2020-06-01T00:00:00Z"}`, "If-Match", b.newestTag(path))
	b.decide(registry.Signatory, path, "approved")
	second := stamp()
	b.post(registry.Manager, path+"/versions", `{"reason":"a digit","value":-33.01,"u":0.05,"basis":"certificate","valid_from":"2018-01-01T00:00:00Z"}`, "If-Match", b.newestTag(path))
	b.decide(registry.Signatory, path, "approved")
	for _, c := range []struct {
		validAt, asOf string
		want          string // the value as typed; "" is not found
	}{
		{"2019-03-03T00:00:00Z", first, "-33.10"},
		{"2019-03-03T00:00:00Z", second, "-33.10"},
		{"2019-03-03T00:00:00Z", "", "-33.01"},
		{"2020-12-01T00:00:00Z", "", "-33.16"},
		{"2020-12-01T00:00:00Z", first, "-33.10"},
		{"2019-03-03T00:00:00Z", drafted, ""},
		{"2019-03-03T00:00:00Z", empty, ""},
		{"2017-01-01T00:00:00Z", "", ""},
		{"", "", "-33.16"},
	} {
		q := path + "?"
		if c.validAt != "" {
			q += "&valid_at=" + c.validAt
		}
		if c.asOf != "" {
			q += "&as_of=" + c.asOf
		}
		a := b.do(request{role: registry.Auditor, method: "GET", path: q})
		switch {
		case c.want == "":
			b.wantProblem(a, 404, "not-found")
		case a.Status != 200 || !strings.Contains(string(a.Body), `"value":`+c.want+`,`):
			t.Errorf("valid_at %q, as_of %q: %d %.900s, want %s", c.validAt, c.asOf, a.Status, a.Body, c.want)
		}
	}
}
