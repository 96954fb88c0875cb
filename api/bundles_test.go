package api_test

import (
	"archive/zip"
	"bytes"
	"io"
	"net/url"
	"strings"
	"testing"

	"deltamoor/api/registry"
)

// bring imports a bundle into the other laboratory.
func (b *bench) bring(status int, bundle []byte, query string) answer {
	b.t.Helper()
	return b.want(status, request{role: registry.Manager, laboratory: "OTH", method: "POST", path: "/v1/bundles?" + query, body: string(bundle), headers: map[string]string{"Content-Type": "application/zip"}})
}

// give exports the newest value of a material and returns the bundle and the key.
func (b *bench) give(path string) (bundle []byte, key string) {
	b.t.Helper()
	return b.get(registry.Manager, path+"/bundle").Body, "key=" + url.QueryEscape(b.get(registry.Manager, "/v1/ledger/key").text(b.t, "key"))
}

const ureaValue = "/v1/materials/FJO-UREA/values/d13C-VPDB-LSVEC/total"

// assignedUrea travels, and assigns the value of a second material from a session.
func assignedUrea(t *testing.T) (*bench, journey) {
	b := openBench(t)
	j := b.travel()
	b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-UREA", "name": "Urea", "kind": "control"})
	b.assign(j)
	b.decide(registry.Signatory, ureaValue, "approved")
	b.clock = b.clock.AddDate(0, 0, 5) // the value holds by now
	return b, j
}

// The two laboratories stand for two servers: nothing of one is seen by the
// other but what the bundle carries.
func TestABundleBringsTheWholeChainAndWaitsForAPerson(t *testing.T) {
	b, j := assignedUrea(t)
	bundle, key := b.give(ureaValue)
	a := b.bring(201, bundle, key)
	if a.text(t, "origin") != "deltamoor.local/TST" || a.text(t, "code") != "FJO-UREA/d13C-VPDB-LSVEC/total" || a.text(t, "value.basis") != "partner" || a.text(t, "value.state") != "draft" || a.at(t, "recomputed") != a.at(t, "equal") || a.at(t, "recomputed") == 0.0 {
		t.Fatalf("imported: %s", a.Body)
	}
	if got := b.want(200, request{role: registry.Manager, laboratory: "OTH", method: "GET", path: "/v1/materials/FJO-UREA"}); !strings.Contains(string(got.Body), "deltamoor.local/TST/FJO-UREA") {
		t.Errorf("the material does not keep where it is from: %s", got.Body)
	}
	// Nothing is in force before a person accepts it.
	b.wantProblem(b.do(request{role: registry.Manager, laboratory: "OTH", method: "GET", path: ureaValue}), 404, "not-found")
	b.want(201, request{role: registry.Signatory, laboratory: "OTH", method: "POST", path: ureaValue + "/decisions", body: map[string]any{"decision": "approved"}, headers: map[string]string{"If-Match": a.Header.Get("ETag")}})
	ours, theirs := b.want(200, request{role: registry.Manager, laboratory: "OTH", method: "GET", path: ureaValue}), b.get(registry.Manager, ureaValue)
	if ours.at(t, "value") != theirs.at(t, "value") || ours.at(t, "u") != theirs.at(t, "u") {
		t.Errorf("value %v, u %v; the partner's %v, %v", ours.at(t, "value"), ours.at(t, "u"), theirs.at(t, "value"), theirs.at(t, "u"))
	}

	// The trace reaches the partner's anchors, under their origin and with their codes.
	trace := b.want(200, request{role: registry.Auditor, laboratory: "OTH", method: "GET", path: ureaValue + "/trace"})
	kinds := map[string]bool{}
	for _, n := range trace.json(t)["nodes"].([]any) {
		m := n.(map[string]any)
		if origin, ok := m["origin"].(string); ok {
			kinds[origin+" "+m["kind"].(string)+" "+m["code"].(string)] = true
		}
	}
	for _, want := range []string{"deltamoor.local/TST value FJO-UREA/d13C-VPDB-LSVEC/total", "deltamoor.local/TST value FJO-GLY/d13C-VPDB-LSVEC/total", "deltamoor.local/common value USGS41/d13C-VPDB-LSVEC/total", "deltamoor.local/TST method C-solid"} {
		if !kinds[want] {
			t.Errorf("the trace does not reach %s: %v", want, kinds)
		}
	}
	if page := b.want(200, request{role: registry.Auditor, laboratory: "OTH", method: "GET", path: ureaValue + "/trace?format=html"}); !strings.Contains(string(page.Body), "in deltamoor.local/TST") {
		t.Error("the page does not name the origin")
	}
	// The client's own label of a sample of the same session is not handed on.
	if z, err := zip.NewReader(bytes.NewReader(bundle), int64(len(bundle))); err != nil {
		t.Fatal(err)
	} else {
		for _, f := range z.File {
			r, err := f.Open()
			b.must(err)
			text, err := io.ReadAll(r)
			b.must(err)
			if strings.Contains(string(text), "Marsh survey") {
				t.Errorf("%s names a client", f.Name)
			}
		}
	}
	// It verifies there, with the whole chain, and a second time brings nothing.
	v := b.want(200, request{role: registry.Auditor, laboratory: "OTH", method: "GET", path: ureaValue + "/verification"})
	if v.at(t, "clean") != true || v.at(t, "recomputed") != 1.0 {
		t.Errorf("verification of the partner's value: %s", v.Body)
	}
	if again := b.bring(200, bundle, ""); again.at(t, "existed") != true {
		t.Errorf("the same bundle again: %s", again.Body)
	}
	_ = j
}

func TestABundleThatWasTouchedOrIsOfAnotherIsRefused(t *testing.T) {
	b, _ := assignedUrea(t)
	bundle, key := b.give(ureaValue)
	z, err := zip.NewReader(bytes.NewReader(bundle), int64(len(bundle)))
	b.must(err)
	for _, touched := range z.File {
		if strings.HasSuffix(touched.Name, ".txt") && touched.Name == "README.txt" || touched.Name == "page.html" || touched.Name == "pack.json" {
			continue // for people; what is taken in is checked below
		}
		var out bytes.Buffer
		w := zip.NewWriter(&out)
		for _, f := range z.File {
			r, err := f.Open()
			b.must(err)
			text, err := io.ReadAll(r)
			b.must(err)
			if f.Name == touched.Name {
				if i := bytes.IndexByte(text, '1'); i >= 0 {
					text[i] = '2'
				} else {
					text = append(text, '\n')
				}
			}
			part, err := w.Create(f.Name)
			b.must(err)
			_, err = part.Write(text)
			b.must(err)
		}
		b.must(w.Close())
		b.unchanged("a touched bundle", func() {
			b.wantProblem(b.do(request{role: registry.Manager, laboratory: "OTH", method: "POST", path: "/v1/bundles?" + key, body: out.String(), headers: map[string]string{"Content-Type": "application/zip"}}), 422, "invalid")
		})
	}
	b.unchanged("refused bundles", func() {
		b.wantProblem(b.bring(422, bundle, ""), 422, "invalid", "query.key")
		b.wantProblem(b.bring(422, bundle, "key="+url.QueryEscape("deltamoor.local/TST+00000000+AAAA")), 422, "invalid")
		b.wantProblem(b.bring(422, []byte("no archive"), key), 422, "invalid", "ZIP")
		pack := b.get(registry.Auditor, "/v1/reported/"+b.get(registry.Auditor, "/v1/reports").text(t, "items.0.codes.0")+"/pack")
		b.wantProblem(b.bring(422, pack.Body, key), 422, "invalid", "evidence pack")
		b.wantProblem(b.do(request{role: registry.Signatory, laboratory: "OTH", method: "POST", path: "/v1/bundles?" + key, body: string(bundle), headers: map[string]string{"Content-Type": "application/zip"}}), 403, "refused")
	})
}

func TestOlderVersionsAndEqualCodesAreNotGuessed(t *testing.T) {
	b, _ := assignedUrea(t)
	first, key := b.give(ureaValue)
	b.post(registry.Manager, ureaValue+"/versions", `{"reason":"revalued","value":-18.19,"u":0.05,"basis":"literature","evidence":"a ring test","valid_from":"2026-03-05T00:00:00Z"}`, "If-Match", b.newestTag(ureaValue))
	b.decide(registry.Signatory, ureaValue, "approved")
	b.clock = b.clock.AddDate(0, 0, 30)
	second, _ := b.give(ureaValue)

	// The other laboratory has a material of that code of its own.
	b.want(201, request{role: registry.Manager, laboratory: "OTH", method: "POST", path: "/v1/materials", body: map[string]any{"code": "FJO-UREA", "name": "something else", "kind": "working"}})
	b.unchanged("a code that is taken", func() { b.wantProblem(b.bring(422, second, key), 422, "invalid", "query.material", "of its own") })
	a := b.bring(201, second, key+"&material=TST-UREA")
	if a.text(t, "value.code") != "TST-UREA/d13C-VPDB-LSVEC/total" || a.at(t, "version") != 2.0 || a.at(t, "material_made") != true {
		t.Fatalf("imported under a code of its own: %s", a.Body)
	}
	b.unchanged("an older version after a newer one", func() {
		b.wantProblem(b.bring(409, first, "material=TST-UREA"), 409, "conflict", "older than version 2")
	})
	// A further version of the partner is a proposal: what is in force stays.
	b.want(201, request{role: registry.Signatory, laboratory: "OTH", method: "POST", path: "/v1/materials/TST-UREA/values/d13C-VPDB-LSVEC/total/decisions", body: map[string]any{"decision": "approved"}, headers: map[string]string{"If-Match": a.Header.Get("ETag")}})
	b.post(registry.Manager, ureaValue+"/versions", `{"reason":"a digit","value":-18.18,"u":0.05,"basis":"literature","evidence":"a ring test","valid_from":"2026-03-05T00:00:00Z"}`, "If-Match", b.newestTag(ureaValue))
	b.decide(registry.Signatory, ureaValue, "approved")
	third, _ := b.give(ureaValue)
	if a := b.bring(201, third, "material=TST-UREA"); a.text(t, "value.state") != "draft" || a.at(t, "value.version") != 2.0 {
		t.Errorf("a further version: %s", a.Body)
	}
	if held := b.want(200, request{role: registry.Auditor, laboratory: "OTH", method: "GET", path: "/v1/materials/TST-UREA/values/d13C-VPDB-LSVEC/total"}); held.at(t, "value") != -18.19 {
		t.Errorf("in force is %v, want −18.19 until somebody accepts the new one", held.at(t, "value"))
	}
}
