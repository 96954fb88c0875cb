package api_test

import (
	"bytes"
	"encoding/json"
	"encoding/xml"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strings"
	"testing"

	"github.com/santhosh-tekuri/jsonschema/v6"

	"deltamoor/api/registry"
)

// accept asks for a form by the header Accept.
func (b *bench) accept(path, media string) answer {
	b.t.Helper()
	return b.want(200, request{role: registry.Auditor, method: "GET", path: path, headers: map[string]string{"Accept": media}})
}

func TestTraceComesInEveryForm(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	path := "/v1/reported/" + j.reported + "/trace"

	page := b.accept(path, "text/html")
	for _, want := range []string{"Reported delta " + j.reported, "of this value&#39;s variance is anchor FJO-GLY as stated by its certificate", "in-house certificate 7", "/v1/calibrations/" + j.calibration + "/versions/1",
		"approved by sig", "?format=prov"} {
		if !strings.Contains(string(page.Body), want) {
			t.Errorf("the page has no %q", want)
		}
	}
	if bytes.Contains(page.Body, []byte("<script")) || !strings.Contains(page.Header.Get("Content-Security-Policy"), "style-src 'sha256-") {
		t.Errorf("a page with scripts, or whose style a browser refuses: %s", page.Header.Get("Content-Security-Policy"))
	}

	picture := b.accept(path, "image/svg+xml")
	for d := xml.NewDecoder(bytes.NewReader(picture.Body)); ; {
		if _, err := d.Token(); errors.Is(err, io.EOF) {
			break
		} else if err != nil {
			t.Fatalf("the picture is no XML: %v", err)
		}
	}
	if !bytes.Contains(picture.Body, []byte("/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total/versions/1")) {
		t.Error("the picture does not lead to the anchor's value")
	}
	if got := b.get(registry.Auditor, path+"?format=text"); !strings.HasPrefix(got.Header.Get("Content-Type"), "text/plain") {
		t.Errorf("media type %q of text", got.Header.Get("Content-Type"))
	}
	b.wantProblem(b.do(request{role: registry.Auditor, method: "GET", path: path + "?format=csv"}), 422, "invalid")
	// On a reported delta rests what amends its report: nothing yet.
	if up := b.get(registry.Auditor, path+"?direction=up"); len(up.json(t)["nodes"].([]any)) != 1 || up.text(t, "nodes.0.code") != j.report {
		t.Errorf("on the delta rests %s", up.Body)
	}
}

// The schema is the published one of PROV-JSONLD; its definitions carry an $id
// that draft-07 reserves for plain names, which is taken out.
func TestTraceAsProvenanceIsValidThroughTheAPI(t *testing.T) {
	text, err := os.ReadFile("../testdata/schemas/prov/prov-jsonld-schema.json")
	if err != nil {
		t.Fatal(err)
	}
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(text))
	if err != nil {
		t.Fatal(err)
	}
	for _, d := range doc.(map[string]any)["definitions"].(map[string]any) {
		if m, ok := d.(map[string]any); ok {
			delete(m, "$id")
		}
	}
	c := jsonschema.NewCompiler()
	if err := c.AddResource("prov.json", doc); err != nil {
		t.Fatal(err)
	}
	schema, err := c.Compile("prov.json")
	if err != nil {
		t.Fatal(err)
	}
	b := openBench(t)
	j := b.travel()
	path := "/v1/reported/" + j.reported + "/trace"
	a := b.accept(path, "application/ld+json")
	got, err := jsonschema.UnmarshalJSON(bytes.NewReader(a.Body))
	b.must(err)
	if err := schema.Validate(got); err != nil {
		t.Fatalf("not valid PROV-JSONLD: %v", err)
	}
	derivations := 0
	for _, s := range got.(map[string]any)["@graph"].([]any) {
		if s.(map[string]any)["@type"] == "prov:Derivation" {
			derivations++
		}
	}
	if edges := len(b.get(registry.Auditor, path).json(t)["edges"].([]any)); derivations != edges || edges == 0 {
		t.Errorf("%d derivations, the trace has %d edges", derivations, edges)
	}
}

func TestSharesOfTheVarianceAddUpToOne(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	sum, anchors := 0.0, 0
	for _, s := range b.get(registry.Auditor, "/v1/reported/"+j.reported+"/trace").json(t)["shares"].([]any) {
		m := s.(map[string]any)
		sum += m["variance_share"].(float64)
		if m["kind"] == "anchor" {
			anchors++
		}
	}
	if math.Abs(sum-1) > 1e-9 || anchors != 2 {
		t.Errorf("shares of %d anchors and the rest add up to %v, want 2 anchors and 1", anchors, sum)
	}
}

// up walks an upward trace page by page.
func (b *bench) up(path string, limit int) (nodes []string) {
	b.t.Helper()
	for next, pages := fmt.Sprintf("%s?direction=up&limit=%d", path, limit), 0; next != ""; pages++ {
		a := b.get(registry.Auditor, next)
		var page struct {
			Nodes []struct{ Kind, Code string }
			Edges []struct{ From, To int }
			After string
		}
		b.must(json.Unmarshal(a.Body, &page))
		for i, n := range page.Nodes {
			if i > 0 {
				nodes = append(nodes, n.Kind+" "+n.Code)
			}
		}
		next = ""
		if page.After != "" {
			link := a.Header.Get("Link")
			next = link[1:strings.IndexByte(link, '>')]
		}
		if pages > 100 {
			b.t.Fatal("the pages do not end")
		}
	}
	return nodes
}

func TestUpwardsTraceIsPagedAndLeavesOutNothing(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	value := "/v1/materials/FJO-GLY/values/d13C-VPDB-LSVEC/total/trace"
	whole := b.up(value, 2000)
	want := []string{"calibration " + j.calibration, "final " + j.final, "report " + j.report}
	if fmt.Sprint(whole) != fmt.Sprint(want) {
		t.Errorf("on the value rest %v, want %v", whole, want)
	}
	if paged := b.up(value, 1); fmt.Sprint(paged) != fmt.Sprint(whole) {
		t.Errorf("page by page %v, at once %v", paged, whole)
	}
	// Of a file everything that was made of it, and its session.
	file := b.up("/v1/uploads/"+j.upload+"/trace", 2000)
	for _, want := range append(want, "session "+j.session) {
		if !strings.Contains(fmt.Sprint(file), want) {
			t.Errorf("on the file rest %v, want %s among them", file, want)
		}
	}
	csv := b.get(registry.Auditor, value+"?direction=up&format=csv")
	if n := strings.Count(string(csv.Body), "\n"); n != 1+len(want) {
		t.Errorf("%d lines of CSV, want a heading and %d:\n%s", n, len(want), csv.Body)
	}
	for _, path := range []string{"/v1/instruments/EA1/trace", "/v1/sessions/" + j.session + "/trace", "/v1/methods/C-solid/trace"} {
		if nodes := b.up(path, 2000); !strings.Contains(fmt.Sprint(nodes), "report "+j.report) {
			t.Errorf("%s upwards does not reach the report: %v", path, nodes)
		}
	}
}
