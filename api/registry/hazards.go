package registry

import (
	"embed"
	"encoding/json"
	"fmt"
	"slices"
	"strings"
)

// The statements of GHS/CLP, © European Union, CC BY 4.0; hazards/README.md.
//
//go:embed hazards/*.json
var hazardFiles embed.FS

// HazardLanguages are the languages that hazard statements are kept in.
var HazardLanguages = []string{"en", "de", "fr", "es"}

// A HazardStatement is a GHS code with its sentence.
type HazardStatement struct {
	Code string `json:"code"`
	// Text is "" where the list does not have the code.
	Text string `json:"text"`
}

// HazardStatements gives the sentences of GHS codes in a language.
func HazardStatements(language string, codes []string) ([]HazardStatement, error) {
	if !slices.Contains(HazardLanguages, language) {
		return nil, Complain("hazard statements are not kept in this language", []Complaint{{Place: "query.language", Found: quote(language), Expected: "one of " + strings.Join(HazardLanguages, ", ")}})
	}
	if len(codes) == 0 {
		return nil, nil
	}
	data, err := hazardFiles.ReadFile("hazards/hpstatements-" + language + ".json")
	if err != nil {
		return nil, fmt.Errorf("read hazard statements: %w", err)
	}
	var list struct {
		Statements map[string]string `json:"statements"`
	}
	if err := json.Unmarshal(data, &list); err != nil {
		return nil, fmt.Errorf("read hazard statements: %w", err)
	}
	out := make([]HazardStatement, 0, len(codes))
	for _, code := range codes {
		out = append(out, HazardStatement{Code: code, Text: list.Statements["latest/"+language+"/"+code]})
	}
	return out, nil
}
