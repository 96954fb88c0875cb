package api_test

import (
	"bytes"
	"context"
	"math"
	"strings"
	"testing"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
)

// another measures a sample of another client in a session of its own, on the
// journey's anchors, and reports it.
func (b *bench) another(label, day string) (reported, report string) {
	b.t.Helper()
	sample := b.post(registry.Analyst, "/v1/samples", map[string]any{"samples": []any{map[string]any{"client": "Harbour office", "label": label, "wanted": []any{map[string]any{"scale": "d13C-VPDB-LSVEC"}}}}}).text(b.t, "items.0.code")
	csv := strings.ReplaceAll(carbonCSV(sample), "2026-03-02", day)
	session := b.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid&name="+label+".csv", csv, "Content-Type", csvType).text(b.t, "session.code")
	calibration := b.post(registry.Analyst, "/v1/sessions/"+session+"/calibrations", map[string]any{"quantity": "d13C"}).text(b.t, "code")
	b.decide(registry.Signatory, "/v1/calibrations/"+calibration, "approved")
	b.post(registry.Analyst, "/v1/sessions/"+session+"/outcomes", map[string]any{"quantity": "d13C", "outcome": "accepted"})
	final := b.post(registry.Analyst, "/v1/finals", map[string]any{"sample": sample, "scale": "d13C-VPDB-LSVEC"}).text(b.t, "code")
	b.decide(registry.Signatory, "/v1/finals/"+final, "approved")
	a := b.post(registry.Signatory, "/v1/reports", map[string]any{"client": "Harbour office", "title": "Results", "finals": []any{final}})
	return a.text(b.t, "codes.0"), a.text(b.t, "code")
}

func (b *bench) compare(body map[string]any) answer {
	b.t.Helper()
	return b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/comparisons", body: body})
}

func TestComparisonCancelsWhatDeltasShare(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	second, _ := b.another("H1", "2026-03-05")
	third, _ := b.another("H2", "2026-03-06")
	a := b.compare(map[string]any{"codes": []any{j.reported, second}})
	u, root := a.at(t, "pair.u").(float64), a.at(t, "pair.root_sum_of_squares").(float64)
	if !(u < 0.95*root) {
		t.Errorf("u of the difference %v, root sum of squares %v: two sessions share their anchors", u, root)
	}
	// var(a − b) = var(a) + var(b) − 2·cov(a, b) (JCGM 100:2008 5.2.2).
	c := func(i, k string) float64 { return a.at(t, "covariance."+i+"."+k).(float64) }
	if want := math.Sqrt(c("0", "0") + c("1", "1") - 2*c("0", "1")); math.Abs(u-want) > 1e-12 {
		t.Errorf("u of the difference %v, the covariances give %v", u, want)
	}
	d := a.at(t, "pair.difference").(float64)
	if z, en := a.at(t, "pair.z").(float64), a.at(t, "pair.E_n").(float64); math.Abs(z-d/u) > 1e-12 || math.Abs(en-d/(2*u)) > 1e-12 {
		t.Errorf("z %v, E_n %v of a difference %v with u %v", z, en, d, u)
	}
	if a.at(t, "pair.different") != false || !strings.Contains(a.text(t, "pair.verdict"), "no difference is shown at a coverage probability of 95 %") {
		t.Errorf("verdict on two measurements of one truth: %s", a.Body)
	}
	wide := b.compare(map[string]any{"codes": []any{j.reported, second}, "probability": 0.99})
	if !(wide.at(t, "pair.U").(float64) > a.at(t, "pair.U").(float64)) || wide.at(t, "pair.p") != 0.99 {
		t.Errorf("U at 99 %% is not above that at 95 %%: %s", wide.Body)
	}
	three := b.compare(map[string]any{"codes": []any{j.reported, second, third}})
	mean, common := three.at(t, "mean.u").(float64), three.at(t, "mean.common_part").(float64)
	if three.at(t, "pair") != nil || !(mean >= common) || !(common > 0) {
		t.Errorf("mean of three: u %v, what they share %v: %s", mean, common, three.Body)
	}
	b.wantProblem(b.do(request{role: registry.Auditor, method: "POST", path: "/v1/comparisons", body: map[string]any{"codes": []any{j.reported, j.reported}}}), 422, "invalid", "body.codes[1]")
	b.wantProblem(b.do(request{role: registry.Auditor, method: "POST", path: "/v1/comparisons", body: map[string]any{"codes": []any{j.reported, second}, "probability": 1.5}}), 422, "invalid", "probability")
	b.wantProblem(b.do(request{role: registry.Auditor, laboratory: "OTH", method: "POST", path: "/v1/comparisons", body: map[string]any{"codes": []any{j.reported, second}}}), 404, "not-found")
}

func TestPackOverHTTPIsCheckedWithoutTheServer(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	path := "/v1/reported/" + j.reported + "/pack"
	a := b.get(registry.Auditor, path)
	if got := a.Header.Get("Content-Disposition"); !strings.Contains(got, j.reported+".zip") {
		t.Errorf("Content-Disposition %q", got)
	}
	v, err := exchange.VerifyPack(context.Background(), bytes.NewReader(a.Body), int64(len(a.Body)), registry.PackCheckRequest{})
	b.must(err)
	if !v.Clean() || v.Recomputed == 0 || v.Recomputed != v.Equal {
		t.Errorf("the pack: %+v", v)
	}
	if again := b.get(registry.Auditor, path); !bytes.Equal(again.Body, a.Body) {
		t.Error("the same number gives another pack")
	}
	// Any byte of the archive that is changed is noticed.
	for _, at := range []int{len(a.Body) / 5, len(a.Body) / 2, 4 * len(a.Body) / 5} {
		broken := bytes.Clone(a.Body)
		broken[at] ^= 1
		v, err := exchange.VerifyPack(context.Background(), bytes.NewReader(broken), int64(len(broken)), registry.PackCheckRequest{})
		if err == nil && v.Clean() {
			t.Errorf("byte %d of %d changed, and nothing was found", at, len(broken))
		}
	}
	b.wantProblem(b.do(request{role: registry.Auditor, laboratory: "OTH", method: "GET", path: path}), 404, "not-found")
}
