package exchange

import (
	"bytes"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"github.com/santhosh-tekuri/jsonschema/v6"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// provSchema is the published schema of PROV-JSONLD. Its definitions carry an
// $id that is a fragment, which draft-07 reserves for plain names and
// validators refuse; those are taken out, nothing else.
func provSchema(t *testing.T) *jsonschema.Schema {
	t.Helper()
	doc := readSchema(t)
	definitions, ok := doc["definitions"].(map[string]any)
	if !ok {
		t.Fatal("the schema has no definitions")
	}
	for _, d := range definitions {
		if m, ok := d.(map[string]any); ok {
			delete(m, "$id")
		}
	}
	c := jsonschema.NewCompiler()
	c.AssertFormat()
	if err := c.AddResource("prov.json", doc); err != nil {
		t.Fatal(err)
	}
	schema, err := c.Compile("prov.json")
	if err != nil {
		t.Fatal(err)
	}
	return schema
}

func provBytes(t *testing.T, trace registry.Trace) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := WritePROV(&b, "registry.example", trace); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func TestPROVIsValidAndHoldsTheWholeTrace(t *testing.T) {
	schema := provSchema(t)
	c := openChain(t, false)
	trace, err := c.Trace(c.ctx, c.reader, "", c.code, 0)
	c.must(err)
	b := provBytes(t, trace)
	if !bytes.Equal(b, provBytes(t, trace)) {
		t.Error("the same trace gives other bytes")
	}
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(b))
	c.must(err)
	if err := schema.Validate(doc); err != nil {
		t.Fatalf("not valid PROV-JSONLD: %v", err)
	}
	// The schema is really looked at: an entity without its name is refused.
	broken, err := jsonschema.UnmarshalJSON(strings.NewReader(strings.Replace(string(b), `"@id"`, `"id"`, 1)))
	c.must(err)
	if err := schema.Validate(broken); err == nil {
		t.Error("a document with a nameless entity is valid")
	}

	var got struct {
		Graph []provStatement `json:"@graph"`
	}
	c.must(json.Unmarshal(b, &got))
	type edge struct{ From, To, Part, Share string }
	var entities []string
	var derived, used, want, wantUsed []edge
	ids := map[string]bool{}
	decisions := 0
	for _, s := range got.Graph {
		switch s.Type {
		case "prov:Entity":
			entities = append(entities, s.ID)
		case "prov:Derivation":
			e := edge{From: s.Generated, To: s.Used, Part: s.Types[0]}
			if len(s.ShareOfVariance) > 0 {
				e.Share = s.ShareOfVariance[0].Value
			}
			derived = append(derived, e)
		case "prov:Usage":
			if s.Roles[0] == "deltamoor:part/subject" {
				decisions++
			} else {
				used = append(used, edge{From: s.Activity, To: s.Entity, Part: s.Roles[0]})
			}
		}
		if s.ID != "" {
			if ids[s.ID] {
				t.Errorf("%s is named twice", s.ID)
			}
			ids[s.ID] = true
		}
	}
	wantDecisions := 0
	var wantEntities []string
	for _, n := range trace.Nodes {
		wantEntities = append(wantEntities, provVersion(n.Ref))
		wantDecisions += len(n.Decisions)
	}
	for _, e := range trace.Edges {
		w := edge{From: provVersion(trace.Nodes[e.From].Ref), To: provVersion(trace.Nodes[e.To].Ref), Part: "deltamoor:part/" + e.Part}
		wantUsed = append(wantUsed, edge{From: w.From + "/recorded", To: w.To, Part: w.Part})
		if e.Share != nil {
			w.Share = provDouble(e.Share)[0].Value
		}
		want = append(want, w)
	}
	sorted := cmpopts.SortSlices(func(a, b edge) bool { return a.From+a.To+a.Part < b.From+b.To+b.Part })
	for name, d := range map[string]string{"entities": cmp.Diff(wantEntities, entities), "derivations": cmp.Diff(want, derived, sorted), "usages": cmp.Diff(wantUsed, used, sorted)} {
		if d != "" {
			t.Errorf("%s (-trace +document):\n%s", name, d)
		}
	}
	if decisions != wantDecisions || decisions == 0 {
		t.Errorf("decisions: %d, want %d", decisions, wantDecisions)
	}
	// Whatever a relation names is an element of the graph.
	for _, s := range got.Graph {
		for _, id := range []string{s.Entity, s.Activity, s.Agent, s.Generated, s.Used} {
			if id != "" && !ids[id] {
				t.Errorf("%s names %s, which is not in the graph", s.Type, id)
			}
		}
	}
}

func TestPROVTellsAWithdrawal(t *testing.T) {
	at := store.Instant(1_000_000)
	trace := registry.Trace{Nodes: []registry.TraceNode{{Ref: store.Ref{Key: store.Key{Laboratory: "FJO", Kind: store.KindValue, Code: "X/d13C-VPDB/total"}, Version: 1}, RecordedBy: "ana", RecordedAt: at,
		Title: "value of X", Decisions: []registry.TraceDecision{{Act: "withdrawn", By: "sig", At: at, Reason: "bottle cracked"}}}}}
	b := provBytes(t, trace)
	doc, err := jsonschema.UnmarshalJSON(bytes.NewReader(b))
	if err != nil {
		t.Fatal(err)
	}
	if err := provSchema(t).Validate(doc); err != nil {
		t.Error(err)
	}
	if !bytes.Contains(b, []byte("prov:Invalidation")) || !bytes.Contains(b, []byte("bottle cracked")) {
		t.Errorf("no invalidation in\n%s", b)
	}
}

func readSchema(t *testing.T) map[string]any {
	t.Helper()
	doc := map[string]any{}
	text, err := os.ReadFile(filepath.Join("..", "..", "testdata", "schemas", "prov", "prov-jsonld-schema.json"))
	if err != nil {
		t.Fatal(err)
	}
	if err := json.Unmarshal(text, &doc); err != nil {
		t.Fatal(err)
	}
	return doc
}
