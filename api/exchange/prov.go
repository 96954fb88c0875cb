package exchange

import (
	"encoding/json"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// Names of the vocabularies in a PROV document.
const (
	provContext = "https://openprovenance.org/prov-jsonld/context.jsonld"
	provTerms   = "https://deltamoor.local/terms#"
)

// A provStatement is one element or relation of the graph. Which members it
// has depends on its type; the empty ones are left out.
type provStatement struct {
	Type            string      `json:"@type"`
	ID              string      `json:"@id,omitempty"`
	Entity          string      `json:"entity,omitempty"`
	Activity        string      `json:"activity,omitempty"`
	Agent           string      `json:"agent,omitempty"`
	Generated       string      `json:"generatedEntity,omitempty"`
	Used            string      `json:"usedEntity,omitempty"`
	Time            string      `json:"time,omitempty"`
	StartTime       string      `json:"startTime,omitempty"`
	EndTime         string      `json:"endTime,omitempty"`
	Types           []string    `json:"type,omitempty"`
	Roles           []string    `json:"role,omitempty"`
	Label           []provText  `json:"label,omitempty"`
	Hash            []provValue `json:"deltamoor:sha256,omitempty"`
	Delta           []provValue `json:"deltamoor:value,omitempty"`
	U               []provValue `json:"deltamoor:standardUncertainty,omitempty"`
	ValidFrom       []provValue `json:"deltamoor:validFrom,omitempty"`
	State           []provValue `json:"deltamoor:state,omitempty"`
	Reason          []provValue `json:"deltamoor:reason,omitempty"`
	Detail          []provValue `json:"deltamoor:detail,omitempty"`
	ShareOfVariance []provValue `json:"deltamoor:shareOfVariance,omitempty"`
}

type provText struct {
	Value    string `json:"@value"`
	Language string `json:"@language,omitempty"`
}

type provValue struct {
	Value string `json:"@value"`
	Type  string `json:"@type"`
}

func provString(s string) []provValue {
	if s == "" {
		return nil
	}
	return []provValue{{s, "xsd:string"}}
}

func provDouble(x *float64) []provValue {
	if x == nil {
		return nil
	}
	return []provValue{{strconv.FormatFloat(*x, 'g', -1, 64), "xsd:double"}}
}

// WritePROV writes a trace as provenance in the PROV-JSONLD serialisation of
// W3C PROV-DM (openprovenance.org/prov-jsonld): each version is an entity, the
// act that recorded it an activity with the person as agent, each edge of the
// trace one derivation whose type is the part played, with one usage beside it;
// each decision is an activity that used the version. registryName is what
// the ledgers' origins begin with; records are named below it. The same trace
// gives the same bytes.
func WritePROV(w io.Writer, registryName string, t registry.Trace) error {
	var graph []provStatement
	agents := map[string]bool{}
	agent := func(laboratory, person string) string {
		id := "record:" + laboratory + "/person/" + person
		agents[id] = true
		return id
	}
	for i, n := range t.Nodes {
		at := n.RecordedAt.String()
		entity := provStatement{Type: "prov:Entity", ID: provVersion(n.Ref), Types: []string{"deltamoor:" + string(n.Kind)}, Label: []provText{{Value: n.Title, Language: "en"}},
			Hash: provString(n.Hash.String()), Delta: provDouble(n.Value), U: provDouble(n.StandardUncertainty), State: provString(string(n.State)), Detail: provString(n.Detail)}
		if n.ValidFrom != nil {
			entity.ValidFrom = []provValue{{n.ValidFrom.String(), "xsd:dateTime"}}
		}
		act := provVersion(n.Ref) + "/recorded"
		graph = append(graph, entity,
			provStatement{Type: "prov:Activity", ID: act, StartTime: at, EndTime: at, Types: []string{"deltamoor:recording"}, Reason: provString(n.Reason)},
			provStatement{Type: "prov:Generation", Entity: entity.ID, Activity: act, Time: at},
			provStatement{Type: "prov:Association", Activity: act, Agent: agent(n.Laboratory, n.RecordedBy), Roles: []string{"deltamoor:author"}})
		for _, e := range t.Edges {
			if e.From != i {
				continue
			}
			part := "deltamoor:part/" + strings.ReplaceAll(e.Part, " ", "-")
			used := provVersion(t.Nodes[e.To].Ref)
			graph = append(graph,
				provStatement{Type: "prov:Usage", Activity: act, Entity: used, Time: at, Roles: []string{part}},
				provStatement{Type: "prov:Derivation", Generated: entity.ID, Used: used, Activity: act, Types: []string{part}, ShareOfVariance: provDouble(e.Share)})
		}
		for k, d := range n.Decisions {
			act := fmt.Sprintf("%s/decision/%d", provVersion(n.Ref), k+1)
			at := d.At.String()
			graph = append(graph,
				provStatement{Type: "prov:Activity", ID: act, StartTime: at, EndTime: at, Types: []string{"deltamoor:" + d.Act}, Reason: provString(d.Reason)},
				provStatement{Type: "prov:Usage", Activity: act, Entity: entity.ID, Time: at, Roles: []string{"deltamoor:part/subject"}},
				provStatement{Type: "prov:Association", Activity: act, Agent: agent(n.Laboratory, d.By), Roles: []string{"deltamoor:" + d.Act}})
			if d.Act == "withdrawn" {
				graph = append(graph, provStatement{Type: "prov:Invalidation", Entity: entity.ID, Activity: act, Time: at})
			}
		}
	}
	ids := make([]string, 0, len(agents))
	for id := range agents {
		ids = append(ids, id)
	}
	slices.Sort(ids)
	for _, id := range ids {
		graph = append(graph, provStatement{Type: "prov:Agent", ID: id, Types: []string{"prov:Person"}})
	}
	e := json.NewEncoder(w)
	e.SetEscapeHTML(false)
	e.SetIndent("", " ")
	err := e.Encode(struct {
		Context []any           `json:"@context"`
		Graph   []provStatement `json:"@graph"`
	}{[]any{provContext, map[string]string{"deltamoor": provTerms, "record": "https://" + registryName + "/records/"}}, graph})
	if err != nil {
		return fmt.Errorf("write provenance: %w", err)
	}
	return nil
}

// provVersion names a version as a qualified name.
func provVersion(ref store.Ref) string {
	return fmt.Sprintf("record:%s/%s/%s.%d", ref.Laboratory, ref.Kind, ref.Code, ref.Version)
}
