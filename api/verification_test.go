package api_test

import (
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/hex"
	"net/url"
	"path/filepath"
	"strings"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// startVerification asks for a verification and returns its job.
func (b *bench) startVerification() string {
	b.t.Helper()
	a := b.want(202, request{role: registry.Auditor, method: "POST", path: "/v1/verification"})
	job := a.text(b.t, "code")
	if got := a.Header.Get("Location"); got != "/v1/jobs/"+job {
		b.t.Errorf("Location %q", got)
	}
	return job
}

// verified verifies the laboratory, as a worker of the server does.
func (b *bench) verified() answer {
	b.t.Helper()
	job := b.startVerification()
	b.work()
	return b.get(registry.Auditor, "/v1/verification/"+job)
}

// answerFor asks once for whatever a laboratory answers for a number with.
func (b *bench) answerFor(j journey) {
	b.t.Helper()
	for _, path := range []string{"/v1/reported/" + j.reported, "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total", "/v1/calibrations/" + j.calibration, "/v1/finals/" + j.final, "/v1/reports/" + j.report,
		"/v1/sessions/" + j.session, "/v1/samples/" + j.sample, "/v1/units/" + j.unit, "/v1/materials/FJO-GLY", "/v1/methods/C-solid", "/v1/instruments/EA1", "/v1/scales/d13C-VPDB-LSVEC"} {
		if a := b.get(registry.Auditor, path+"/verification"); a.at(b.t, "clean") != true {
			b.t.Errorf("%s: %.500s", path, a.Body)
		}
	}
	b.get(registry.Auditor, "/v1/reported/"+j.reported+"/pack")
	second, _ := b.another("H9", "2026-03-09")
	b.compare(map[string]any{"codes": []any{j.reported, second}})
	bundle := b.get(registry.Manager, "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total/bundle")
	key := b.get(registry.Manager, "/v1/ledger/key").text(b.t, "key")
	b.want(201, request{role: registry.Manager, laboratory: "OTH", method: "POST", path: "/v1/bundles?key=" + url.QueryEscape(key), body: string(bundle.Body), headers: map[string]string{"Content-Type": "application/zip"}})
	waiting := b.startVerification()
	b.want(200, request{role: registry.Manager, method: "POST", path: "/v1/jobs/" + waiting + "/cancellation"})
	b.get(registry.Auditor, "/v1/jobs?limit=1")
}

func TestVerificationOfOneNumberShowsWhatWasComputedAgain(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	a := b.get(registry.Auditor, "/v1/reported/"+j.reported+"/verification")
	v := a.json(t)
	if v["clean"] != true || v["recomputed"] != v["equal"] {
		t.Fatalf("verification: %s", a.Body)
	}
	reported := b.get(registry.Auditor, "/v1/reported/"+j.reported)
	roots := map[string]string{}
	for _, l := range v["ledgers"].([]any) {
		m := l.(map[string]any)
		roots[m["laboratory"].(string)] = m["root"].(string)
	}
	kinds := map[string]map[string]any{}
	for _, n := range v["nodes"].([]any) {
		m := n.(map[string]any)
		kinds[m["kind"].(string)] = m
		// Each proof leads from the entry to the root that stands beside it
		// (RFC 6962, 2.1.1), checked here without the server.
		proof := m["inclusion"].(map[string]any)
		entries := b.entry(m["laboratory"].(string), int64(proof["index"].(float64)))
		var path []ledger.Hash
		for _, h := range proof["path"].([]any) {
			path = append(path, ledgerHash(t, h.(string)))
		}
		if err := ledger.CheckInclusion(path, int64(proof["size"].(float64)), ledgerHash(t, roots[m["laboratory"].(string)]), int64(proof["index"].(float64)), ledger.LeafHash(entries)); err != nil {
			t.Errorf("%s %s: %v", m["kind"], m["code"], err)
		}
		if !strings.Contains(string(entries), m["hash"].(string)) {
			t.Errorf("the entry of %s %s does not hold its hash", m["kind"], m["code"])
		}
	}
	for kind, places := range map[string][]string{"report": {"value", "u"}, "final": {"u", "value"}, "calibration": {"intercept", "slope"}} {
		found := ""
		for _, x := range kinds[kind]["numbers"].([]any) {
			m := x.(map[string]any)
			found += m["place"].(string) + " "
			if m["stored"] != m["recomputed"] || m["difference"] != 0.0 {
				t.Errorf("%s: %v", kind, m)
			}
			if kind == "report" && m["place"] == "value" && m["stored"] != reported.at(t, "value") {
				t.Errorf("the report's line states %v, reported is %v", m["stored"], reported.at(t, "value"))
			}
		}
		for _, p := range places {
			if !strings.Contains(found, p) {
				t.Errorf("%s: numbers %q, want %s among them", kind, found, p)
			}
		}
	}
}

func ledgerHash(t *testing.T, text string) (h ledger.Hash) {
	t.Helper()
	raw, err := hex.DecodeString(text)
	if err != nil || len(raw) != sha256.Size {
		t.Fatalf("hash %q", text)
	}
	copy(h[:], raw)
	return h
}

// entry is an entry of a ledger, as it is stored.
func (b *bench) entry(laboratory string, position int64) []byte {
	b.t.Helper()
	var out []byte
	b.must(b.store.Read(context.Background(), func(ctx context.Context, v *store.View) error {
		entries, err := v.Entries(ctx, laboratory, position, 1)
		if err == nil {
			out = entries[0].Bytes
		}
		return err
	}))
	return out
}

func TestChangedReadingIsNamedByTheVerificationOfTheNumber(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	db, err := sql.Open("sqlite", filepath.Join(b.folder, "registry.db"))
	b.must(err)
	defer db.Close()
	for _, s := range []string{"DROP TRIGGER IF EXISTS readings_no_update", "UPDATE readings SET raw = raw + 0.5 WHERE number = 6 AND laboratory = 'TST'"} {
		if _, err := db.Exec(s); err != nil {
			t.Fatal(err)
		}
	}
	a := b.get(registry.Auditor, "/v1/reported/"+j.reported+"/verification")
	if a.at(t, "clean") != false {
		t.Fatal("a changed reading was not found")
	}
	named, moved := false, false
	for _, n := range a.json(t)["nodes"].([]any) {
		m := n.(map[string]any)
		for _, f := range m["findings"].([]any) {
			named = named || f.(map[string]any)["table"] == "readings" && m["kind"] == "session"
		}
		if largest, ok := m["largest"].(map[string]any); ok && m["kind"] == "calibration" {
			moved = largest["difference"] != 0.0
		}
	}
	if !named || !moved {
		t.Errorf("readings named %v, calibration computed anew differs %v: %.2000s", named, moved, a.Body)
	}
	v := b.verified()
	if v.at(t, "clean") != false {
		t.Error("the whole verification did not find it")
	}
}

func TestJobsAreListedFollowedAndCancelled(t *testing.T) {
	b := openBench(t)
	b.travel()
	first := b.startVerification()
	if again := b.startVerification(); again != first {
		t.Errorf("a second verification %s beside the waiting %s", again, first)
	}
	b.wantProblem(b.do(request{role: registry.Auditor, method: "GET", path: "/v1/verification/" + first}), 409, "conflict", "waiting")
	b.wantProblem(b.do(request{role: registry.Analyst, method: "POST", path: "/v1/jobs/" + first + "/cancellation"}), 403, "refused")
	if got := b.want(200, request{role: registry.Auditor, method: "POST", path: "/v1/jobs/" + first + "/cancellation"}).text(t, "state"); got != "cancelled" {
		t.Errorf("its own author cancels it: %s", got)
	}
	b.wantProblem(b.do(request{role: registry.Auditor, method: "POST", path: "/v1/jobs/" + first + "/cancellation"}), 409, "conflict", "ended already")
	b.work()
	if got := b.get(registry.Auditor, "/v1/jobs/"+first).text(t, "state"); got != "cancelled" {
		t.Errorf("a cancelled job was worked on: %s", got)
	}
	second := b.startVerification()
	b.work()
	a := b.get(registry.Auditor, "/v1/jobs/"+second)
	if a.text(t, "state") != "done" || a.text(t, "result") != "/v1/verification/"+second || a.at(t, "done") != a.at(t, "total") || a.at(t, "done") == 0.0 {
		t.Errorf("the job at its end: %s", a.Body)
	}
	var codes []string
	for path := "/v1/jobs?limit=1"; path != ""; {
		page := b.get(registry.Auditor, path)
		codes = append(codes, page.text(t, "items.0.code"))
		link := page.Header.Get("Link")
		if path = ""; link != "" {
			path = link[1:strings.IndexByte(link, '>')]
		}
	}
	if len(codes) != 2 || codes[0] != second || codes[1] != first {
		t.Errorf("jobs %v, want %s and %s", codes, second, first)
	}
	b.wantProblem(b.do(request{role: registry.Auditor, laboratory: "OTH", method: "GET", path: "/v1/verification/" + second}), 404, "not-found")
}
