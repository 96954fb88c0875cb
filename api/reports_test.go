package api_test

import (
	"archive/zip"
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"testing"

	"github.com/xuri/excelize/v2"
	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
)

// items are the completeness items of a report by id.
func (b *bench) items(report string) (complete bool, items map[string]map[string]any) {
	b.t.Helper()
	a := b.get(registry.Auditor, "/v1/reports/"+report+"/completeness")
	items = map[string]map[string]any{}
	for _, it := range a.json(b.t)["items"].([]any) {
		m := it.(map[string]any)
		items[m["id"].(string)] = m
	}
	return a.at(b.t, "complete").(bool), items
}

func TestCompletenessNamesWhatIsMissingAndWhereToSayIt(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	complete, items := b.items(j.report)
	// The journey's method states no procedure, its instrument no configuration, its sample no matrix.
	for _, id := range []string{"procedure.preparation", "procedure.instrument", "procedure.matrix", "processing.constants"} {
		if items[id]["state"] != "missing" {
			t.Errorf("%s: %v, want it missing", id, items[id])
		}
	}
	if complete || items["traceability.anchors"]["state"] != "satisfied" || !strings.Contains(items["traceability.anchors"]["where"].(string), "FJO-GLY/d13C-VPDB-LSVEC/total.1") ||
		items["traceability.controls"]["state"] != "satisfied" || items["procedure.exchange"]["state"] != "not applicable" {
		t.Errorf("complete %v: %v", complete, items)
	}
	if !strings.Contains(items["procedure.preparation"]["where"].(string), "method C-solid.1") {
		t.Errorf("where: %v", items["procedure.preparation"]["where"])
	}
}

func TestAMethodMayAskForCompleteReports(t *testing.T) {
	b := openBench(t)
	method := carbonMethod()
	method["final"] = map[string]any{"complete": true}
	b.post(registry.Manager, "/v1/materials", map[string]any{"code": "FJO-GLY", "name": "Glycine working standard", "kind": "working"})
	b.post(registry.Manager, "/v1/materials/FJO-GLY/values", `{"scale":"d13C-VPDB-LSVEC","value":-26.390,"u":0.040,"basis":"certificate","evidence":"in-house certificate 7","valid_from":"2025-01-01T00:00:00Z"}`)
	b.decide(registry.Signatory, "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total", "approved")
	b.post(registry.Manager, "/v1/instruments", map[string]any{"code": "EA1", "name": "first instrument", "configuration": "elemental analyser, continuous flow"})
	b.post(registry.Manager, "/v1/methods", method)
	b.decide(registry.Signatory, "/v1/methods/C-solid", "approved")
	final := func(label, day string, matrix any) string {
		sample := map[string]any{"client": "Marsh survey", "label": label, "wanted": []any{map[string]any{"scale": "d13C-VPDB-LSVEC"}}}
		if matrix != nil {
			sample["matrix"] = matrix
		}
		code := b.post(registry.Analyst, "/v1/samples", map[string]any{"samples": []any{sample}}).text(t, "items.0.code")
		session := b.post(registry.Analyst, "/v1/sessions/import?instrument=EA1&method=C-solid&name="+label+".csv", strings.ReplaceAll(carbonCSV(code), "2026-03-02", day), "Content-Type", csvType).text(t, "session.code")
		calibration := b.post(registry.Analyst, "/v1/sessions/"+session+"/calibrations", map[string]any{"quantity": "d13C"}).text(t, "code")
		b.decide(registry.Signatory, "/v1/calibrations/"+calibration, "approved")
		b.post(registry.Analyst, "/v1/sessions/"+session+"/outcomes", map[string]any{"quantity": "d13C", "outcome": "accepted"})
		value := b.post(registry.Analyst, "/v1/finals", map[string]any{"sample": code, "scale": "d13C-VPDB-LSVEC"}).text(t, "code")
		b.decide(registry.Signatory, "/v1/finals/"+value, "approved")
		return value
	}
	refused := final("A1", "2026-03-02", nil)
	b.unchanged("an incomplete report", func() {
		b.wantProblem(b.do(request{role: registry.Signatory, method: "POST", path: "/v1/reports", body: map[string]any{"client": "Marsh survey", "title": "Results", "finals": []any{refused}}}),
			422, "invalid", "asks for complete ones", "procedure.preparation")
	})
	delete(method, "code")
	method["reason"] = "the procedure is written down"
	method["procedure"] = "Combustion at 1020 °C over chromium oxide; portions of 0.5 mg in tin capsules"
	method["corrections"] = []any{map[string]any{"name": "o17", "state": "earlier", "by": "acquisition software", "constants": "IUPAC 2010, lambda 0.528"}}
	b.post(registry.Manager, "/v1/methods/C-solid/versions", method, "If-Match", b.newestTag("/v1/methods/C-solid"))
	b.decide(registry.Signatory, "/v1/methods/C-solid", "approved")
	a := b.post(registry.Signatory, "/v1/reports", map[string]any{"client": "Marsh survey", "title": "Results", "finals": []any{final("A2", "2026-03-03", "sediment, acid-washed")}})
	if complete, items := b.items(a.text(t, "code")); !complete {
		t.Errorf("a report with everything said: %v", items)
	}
	if page := b.accept("/v1/reports/"+a.text(t, "code"), "text/html"); !strings.Contains(string(page.Body), "Combustion at 1020 °C") || !strings.Contains(string(page.Body), "are on record") {
		t.Errorf("the page: %s", page.Body)
	}
	text := b.accept("/v1/reports/"+a.text(t, "code")+"/methods", "text/plain")
	for _, want := range []string{"Combustion at 1020 °C", "o17 by acquisition software (IUPAC 2010, lambda 0.528)", "1 session was normalized by a line through 2 anchors", "linear drift", "FJO-GLY", "in-house certificate 7", "IAEA-CH-6", "No reading was left out"} {
		if !strings.Contains(strings.Join(strings.Fields(string(text.Body)), " "), want) {
			t.Errorf("the methods text has no %q:\n%s", want, text.Body)
		}
	}
}

func TestReportComesAsTableWorkbookPackageAndPage(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	path := "/v1/reports/" + j.report
	value := b.get(registry.Auditor, "/v1/reported/"+j.reported).at(t, "value").(float64)

	book := b.accept(path, "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet")
	f, err := excelize.OpenReader(bytes.NewReader(book.Body), excelize.Options{RawCellValue: true})
	b.must(err)
	rows, err := f.GetRows("lines")
	b.must(err)
	dictionary, err := f.GetRows("dictionary")
	b.must(err)
	at := map[string]int{}
	for i, name := range rows[0] {
		at[name] = i
		if dictionary[i+1][0] != name {
			t.Errorf("column %q stands as %q in the dictionary", name, dictionary[i+1][0])
		}
	}
	if got, err := strconv.ParseFloat(rows[1][at["value"]], 64); err != nil || got != value || rows[1][at["code"]] != j.reported {
		t.Errorf("the workbook says %v (%v), the API %v", got, err, value)
	}

	archive := b.accept(path, "application/zip")
	z, err := zip.NewReader(bytes.NewReader(archive.Body), int64(len(archive.Body)))
	b.must(err)
	files := map[string][]byte{}
	for _, f := range z.File {
		r, err := f.Open()
		b.must(err)
		files[f.Name], err = io.ReadAll(r)
		b.must(err)
	}
	checkDataPackage(t, files)
	table, err := csv.NewReader(bytes.NewReader(files["lines.csv"])).ReadAll()
	b.must(err)
	plain, err := csv.NewReader(bytes.NewReader(b.get(registry.Auditor, path+"?format=csv").Body)).ReadAll()
	b.must(err)
	for i, name := range plain[0] { // what both have is the same
		for k, other := range table[0] {
			if name == other && plain[1][i] != table[1][k] {
				t.Errorf("%s: %q as CSV, %q in the package", name, plain[1][i], table[1][k])
			}
		}
	}

	page := string(b.accept(path, "text/html").Body)
	for _, want := range []string{j.reported, "A1", "How it was measured", "FJO-GLY", "these are missing", "/v1/reported/" + j.reported + "/trace?format=html", exchange.Fixed(value, 3)[:5]} {
		if !strings.Contains(page, want) {
			t.Errorf("the page has no %q", want)
		}
	}
	if strings.Contains(page, "<script") {
		t.Error("the page has a script")
	}
}

// checkDataPackage holds a package against what the profile tabular-data-package
// asks (datapackage.org, Tabular Data Package 1.0): name, resources with path,
// profile and a schema whose fields are named as the columns, in their order,
// with the types of Table Schema; and each cell against its field's type.
func checkDataPackage(t *testing.T, files map[string][]byte) {
	t.Helper()
	var d struct {
		Profile, Name string
		Resources     []struct {
			Profile, Name, Path, Hash string
			Bytes                     int
			Schema                    struct {
				Fields     []struct{ Name, Type, Description string }
				PrimaryKey string
			}
		}
	}
	if err := json.Unmarshal(files["datapackage.json"], &d); err != nil {
		t.Fatalf("datapackage.json: %v", err)
	}
	if d.Profile != "tabular-data-package" || d.Name != strings.ToLower(d.Name) || len(d.Resources) != 1 {
		t.Fatalf("descriptor %+v", d)
	}
	r := d.Resources[0]
	data := files[r.Path]
	if r.Profile != "tabular-data-resource" || len(data) != r.Bytes || r.Hash != "sha256:"+sha(string(data)).String() {
		t.Errorf("resource %+v does not describe its %d bytes", r, len(data))
	}
	rows, err := csv.NewReader(bytes.NewReader(data)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows[0]) != len(r.Schema.Fields) {
		t.Fatalf("%d columns, %d fields", len(rows[0]), len(r.Schema.Fields))
	}
	for i, f := range r.Schema.Fields {
		if rows[0][i] != f.Name || f.Description == "" {
			t.Errorf("column %q is described as %+v", rows[0][i], f)
		}
		for _, row := range rows[1:] {
			if row[i] == "" {
				continue
			}
			var err error
			switch f.Type {
			case "number":
				_, err = strconv.ParseFloat(row[i], 64)
			case "integer":
				_, err = strconv.Atoi(row[i])
			case "boolean":
				_, err = strconv.ParseBool(row[i])
			case "datetime", "string":
			default:
				err = fmt.Errorf("type %q", f.Type)
			}
			if err != nil {
				t.Errorf("%s: %v", f.Name, err)
			}
		}
	}
}

func TestConformityIsStatedByTheRecordedRule(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	d := b.get(registry.Auditor, "/v1/reported/"+j.reported)
	value, u, expanded := d.at(t, "value").(float64), d.at(t, "u").(float64), d.at(t, "U").(float64)
	// An upper limit half of U above the value: simple acceptance lets it pass, a guard band of U does not.
	limit := value + expanded/2
	issue := func(guard float64) answer {
		final := b.get(registry.Auditor, "/v1/reports/"+j.report).text(t, "lines.0.final.code")
		a := b.post(registry.Signatory, "/v1/reports", map[string]any{"client": "Marsh survey", "title": "Conformity", "finals": []any{final},
			"conformity": []any{map[string]any{"scale": "d13C-VPDB-LSVEC", "upper": limit, "guard": guard, "source": "order 17, agreed with the client"}}})
		return b.get(registry.Auditor, "/v1/reported/"+a.text(t, "codes.0"))
	}
	simple, guarded := issue(0), issue(1)
	nu, ok := d.at(t, "nu_eff").(float64)
	want := distuv.UnitNormal.CDF((limit - value) / u) // JCGM 106:2012, 7.3: one upper limit
	if ok {
		want = distuv.StudentsT{Sigma: 1, Nu: nu}.CDF((limit - value) / u)
	}
	if got := simple.at(t, "conformity.probability").(float64); math.Abs(got-want) > 1e-12 {
		t.Errorf("probability of conformance %v, want %v", got, want)
	}
	if simple.at(t, "conformity.conforms") != true || guarded.at(t, "conformity.conforms") != false {
		t.Errorf("conforms: simple %v, guarded %v", simple.at(t, "conformity"), guarded.at(t, "conformity"))
	}
	if got := guarded.at(t, "conformity.upper").(float64); math.Abs(got-(limit-expanded)) > 1e-12 {
		t.Errorf("acceptance limit %v, want %v", got, limit-expanded)
	}
	page := string(b.accept("/v1/reports/"+guarded.text(t, "report"), "text/html").Body)
	if !strings.Contains(page, "guarded acceptance") || !strings.Contains(page, "order 17") || !strings.Contains(page, "does not conform") {
		t.Error("the page does not state rule and verdict")
	}
	b.wantProblem(b.do(request{role: registry.Signatory, method: "POST", path: "/v1/reports", body: map[string]any{"client": "Marsh survey", "title": "t", "finals": []any{j.final},
		"conformity": []any{map[string]any{"scale": "d13C-VPDB-LSVEC", "lower": 2, "upper": 1, "source": "x"}}}}), 422, "invalid", "body.conformity[0]")
}

func TestAmendedReportsAndPermanentAddressesLeadToEachOther(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	calibration := "/v1/calibrations/" + j.calibration
	session := "/v1/sessions/" + j.session
	b.post(registry.Analyst, session+"/exclusions", map[string]any{"act": "exclude", "readings": []any{6}, "cause": "leak", "reason": "the peak is split"}, "If-Match", b.get(registry.Analyst, session+"/exclusions").Header.Get("ETag"))
	b.post(registry.Analyst, session+"/calibrations", map[string]any{"quantity": "d13C", "reason": "without reading 6"})
	b.decide(registry.Signatory, calibration, "approved")
	final := "/v1/finals/" + j.final
	b.post(registry.Analyst, final+"/versions", map[string]any{"reason": "one reading less"}, "If-Match", b.newestTag(final))
	b.decide(registry.Signatory, final, "approved")
	amended := b.post(registry.Signatory, "/v1/reports", map[string]any{"client": "Marsh survey", "title": "Results, amended", "finals": []any{j.final}, "amends": j.report, "reason": "a split peak was found"})
	code, report := amended.text(t, "codes.0"), amended.text(t, "code")

	// What was reported still answers, with what it was, and leads on.
	old := b.get(registry.Auditor, "/v1/reported/"+j.reported)
	if old.text(t, "successor") != code || old.text(t, "amended_by") != report || old.text(t, "final_state") != "superseded" || !strings.Contains(old.Header.Get("Link"), "</v1/reported/"+code+`>; rel="successor-version"`) {
		t.Errorf("the old delta: %s, Link %s", old.Body, old.Header.Get("Link"))
	}
	now := b.get(registry.Auditor, "/v1/reported/"+code)
	if now.text(t, "replaces") != j.reported || !strings.Contains(now.Header.Get("Link"), "predecessor-version") {
		t.Errorf("the new delta: %s", now.Body)
	}
	page := string(b.accept("/v1/reports/"+report, "text/html").Body)
	if !strings.Contains(page, "amends and replaces") || !strings.Contains(page, j.report) || !strings.Contains(page, "a split peak was found") {
		t.Error("the amended report does not name the original and the reason")
	}
	if page := string(b.accept("/v1/reports/"+j.report, "text/html").Body); !strings.Contains(page, "replaced by the amended report") || !strings.Contains(page, report) {
		t.Error("the original does not name the amended report")
	}
	value := "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total"
	b.post(registry.Manager, value+"/versions", `{"reason":"a digit","value":-26.391,"u":0.04,"basis":"certificate","evidence":"e","valid_from":"2025-01-01T00:00:00Z"}`, "If-Match", b.newestTag(value))
	b.decide(registry.Signatory, value, "approved")
	b.post(registry.Analyst, "/v1/units/"+j.unit+"/versions", map[string]any{"reason": "opened", "state": "open"}, "If-Match", b.newestTag("/v1/units/"+j.unit))
	for _, record := range []string{calibration, final, value, "/v1/units/" + j.unit} {
		a := b.get(registry.Auditor, record+"/versions/1")
		if want := "<" + record + `/versions/2>; rel="successor-version", <` + record + `>; rel="latest-version"`; a.Header.Get("Link") != want {
			t.Errorf("%s/versions/1: Link %q, want %q", record, a.Header.Get("Link"), want)
		}
		if last := b.get(registry.Auditor, record+"/versions/2").Header.Get("Link"); strings.Contains(last, "successor") {
			t.Errorf("%s/versions/2 has a successor: %s", record, last)
		}
	}

	// The difference of the two calibrations, in the laboratory's words: the act of
	// exclusion, the reading, and nothing else.
	changes := b.get(registry.Auditor, calibration+"/changes?from=1&to=2")
	var c struct {
		Reason  string
		Changes []struct{ What, Name, Text, Reason string }
		Shifts  []struct {
			Subject              string
			Before, After, Shift *float64
		}
	}
	b.must(json.Unmarshal(changes.Body, &c))
	if len(c.Changes) != 2 || c.Changes[0].What != "exclusion" || c.Changes[0].Reason != "the peak is split" || c.Changes[1].What != "reading" || c.Changes[1].Name != "6" || c.Reason != "without reading 6" {
		t.Errorf("changes %+v", c.Changes)
	}
	moved := false
	for _, s := range c.Shifts {
		if *s.Shift != *s.After-*s.Before {
			t.Errorf("shift %v of %v to %v", *s.Shift, *s.Before, *s.After)
		}
		moved = moved || s.Subject == j.sample && *s.Shift != 0
	}
	if len(c.Shifts) != 2 || !moved {
		t.Errorf("shifts %+v", c.Shifts)
	}
}
