package registry

import (
	"context"
	"embed"
	"encoding/csv"
	"fmt"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"

	"deltamoor/store"
)

//go:embed seeds/*.csv
var seedFiles embed.FS

// A seedRow is one row of a seed file by heading.
type seedRow map[string]string

func seedRows(name string) ([]seedRow, error) {
	f, err := seedFiles.Open("seeds/" + name)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	records, err := csv.NewReader(f).ReadAll()
	if err != nil {
		return nil, fmt.Errorf("read seeds/%s: %w", name, err)
	}
	rows := make([]seedRow, 0, len(records)-1)
	for _, record := range records[1:] {
		row := seedRow{}
		for i, heading := range records[0] {
			row[heading] = record[i]
		}
		rows = append(rows, row)
	}
	return rows, nil
}

// checked tells whether a row's number was seen in its source; others are seeded as provisional.
func (row seedRow) checked() bool { return row["confirmed"] == "checked" }

// seed records the public rows of common in one act: scales, international
// materials, their values, relations. Each version's evidence is its citation.
func (r *Registry) seed(ctx context.Context) error {
	scales, order, err := seedScales()
	if err != nil {
		return err
	}
	rows, err := seedRows("materials.csv")
	if err != nil {
		return err
	}
	actor := Actor{Person: RegistryPerson, Laboratory: store.Common}
	_, err = r.store.Write(ctx, store.Common, func(ctx context.Context, tx *store.Tx) error {
		scaleRefs := map[string]store.Ref{}
		add := func(kind store.Kind, code, source string, inputs []store.Input, body store.Body) (store.Ref, error) {
			return tx.Append(ctx, store.Draft{Kind: kind, Code: code, By: actor.Person, Reason: source, Inputs: inputs, Value: body, After: first})
		}
		for _, name := range order {
			ref, err := add(store.KindScale, name, scales[name].source, nil, scales[name].body)
			if err != nil {
				return fmt.Errorf("seed scale %s: %w", name, err)
			}
			scaleRefs[name] = ref
		}
		materialRefs := map[string]store.Ref{}
		for _, m := range seedMaterials(rows) {
			ref, err := add(store.KindMaterial, m.code, m.source, nil, m.body)
			if err != nil {
				return fmt.Errorf("seed material %s: %w", m.code, err)
			}
			materialRefs[m.code] = ref
		}
		newest := map[string]int{}
		for _, row := range seedOrder(rows) {
			code, scale := materialCode(row["material"]), scaleName(row["quantity"], row["scale"])
			if _, ok := scaleRefs[scale]; !ok { // a scale of some source that scales.csv does not define
				ref, err := add(store.KindScale, scale, row["source"], nil, store.Scale{Quantity: row["quantity"], Label: row["scale"], Status: "as printed by a source; not defined here", Provisional: true})
				if err != nil {
					return fmt.Errorf("seed scale %s: %w", scale, err)
				}
				scaleRefs[scale] = ref
			}
			body, validFrom, err := seedValue(row, code, scale)
			if err != nil {
				return fmt.Errorf("seed value of %s on %s: %w", code, scale, err)
			}
			record := ValueCode(code, scale, Total)
			after := newest[record]
			ref, err := tx.Append(ctx, store.Draft{Kind: store.KindValue, Code: record, By: actor.Person, Reason: row["source"], ValidFrom: &validFrom,
				Inputs: []store.Input{{Part: "material", Ref: materialRefs[code]}, {Part: "scale", Ref: scaleRefs[scale]}}, Value: body, After: &after})
			if err != nil {
				return fmt.Errorf("seed value %s: %w", record, err)
			}
			newest[record]++
			if s := row["value_status"]; s == "superseded" || strings.HasPrefix(s, "current") || strings.HasPrefix(s, "possibly superseded") {
				// Other live values of the same material stay unapproved: a
				// laboratory that prefers one states it as its own.
				if err := seedApproval(ctx, tx, ref, row["source"]); err != nil {
					return fmt.Errorf("seed value %s: %w", record, err)
				}
			}
		}
		return seedRelations(ctx, tx, scaleRefs)
	})
	return err
}

func seedApproval(ctx context.Context, tx *store.Tx, ref store.Ref, source string) error {
	_, err := tx.Append(ctx, store.Draft{Kind: store.KindDecision, Code: store.DecisionCode(ref), By: RegistryPerson, Reason: "seeded from " + source,
		Inputs: []store.Input{{Part: "subject", Ref: ref}}, Value: store.Decision{Act: "approved", Meaning: "published by its issuer"}, After: first})
	return err
}

// beforeAll is since when a constant holds whose source names no year: before any session.
var beforeAll = store.InstantOf(time.Date(1950, 1, 1, 0, 0, 0, 0, time.UTC))

// seedRelations records published conversions, constants and rules. Rows of one
// code are versions of one record, each holding from its year.
func seedRelations(ctx context.Context, tx *store.Tx, scales map[string]store.Ref) error {
	rows, err := seedRows("relations.csv")
	if err != nil {
		return err
	}
	newest := map[string]int{}
	for _, row := range rows {
		body := store.Relation{Sort: row["sort"], Title: strings.ReplaceAll(row["code"], "-", " ") + ": " + row["kind"], Expression: row["expression"], From: row["from"], To: row["to"],
			Factor: store.Decimal(row["factor"]), Offset: store.Decimal(row["offset"]), Constant: store.Decimal(row["constant"]), Stated: row["stated"], StatedUncertainty: row["stated_uncertainty"],
			Domain: row["domain"], Evidence: row["source"], Provisional: row["confirmed"] != "checked", Note: strings.Trim(row["note"]+"; "+row["confirmed"], "; ")}
		if row["u"] != "" {
			u, err := strconv.ParseFloat(row["u"], 64)
			if err != nil {
				return fmt.Errorf("seed relation %s: u: %w", row["code"], err)
			}
			body.StandardUncertainty = &u
		}
		var c complaints
		checkRelation(&c, body)
		if err := Complain("seed relation "+row["code"], c); err != nil {
			return err
		}
		from := beforeAll
		if row["valid_from"] != "" {
			year, err := time.Parse("2006", row["valid_from"])
			if err != nil {
				return fmt.Errorf("seed relation %s: year: %w", row["code"], err)
			}
			from = store.InstantOf(year)
		}
		var inputs []store.Input
		for _, side := range []string{"from", "to"} {
			if name := row[side]; name != "" {
				ref, ok := scales[name]
				if !ok {
					return fmt.Errorf("seed relation %s: no scale %s", row["code"], name)
				}
				inputs = append(inputs, store.Input{Part: side, Ref: ref})
			}
		}
		after := newest[row["code"]]
		ref, err := tx.Append(ctx, store.Draft{Kind: store.KindRelation, Code: row["code"], By: RegistryPerson, Reason: row["source"], ValidFrom: &from, Inputs: inputs, Value: body, After: &after})
		if err != nil {
			return fmt.Errorf("seed relation %s: %w", row["code"], err)
		}
		newest[row["code"]]++
		if err := seedApproval(ctx, tx, ref, row["source"]); err != nil {
			return fmt.Errorf("seed relation %s: %w", row["code"], err)
		}
	}
	return nil
}

type seedScale struct {
	body   store.Scale
	source string
}

func seedScales() (map[string]seedScale, []string, error) {
	rows, err := seedRows("scales.csv")
	if err != nil {
		return nil, nil, err
	}
	scales := map[string]seedScale{}
	var order []string
	for _, row := range rows {
		label, _, _ := strings.Cut(row["scale_id"], "(")
		for _, quantity := range strings.Split(row["quantity"], ", ") {
			name := scaleName(quantity, label)
			s, ok := scales[name]
			if !ok {
				order = append(order, name)
				s.body = store.Scale{Quantity: quantity, Label: label, Ratio: row["ratio"], Status: row["scale_status"], Succeeds: row["succeeds"]}
			}
			s.body.Provisional = s.body.Provisional || !row.checked()
			s.body.Anchors = append(s.body.Anchors, store.ScaleAnchor{Role: row["role"], Material: row["defining_material"], Value: row["defining_value_permil"],
				Uncertainty: row["uncertainty"], RealisedBy: row["realised_today_by"], From: row["valid_from"], To: row["valid_to"],
				Source: row["source"], Note: row["note"], Provisional: !row.checked()})
			s.source = row["source"]
			scales[name] = s
		}
	}
	return scales, order, nil
}

var notInCodes = regexp.MustCompile(`[^A-Za-z0-9._-]+`)

// scaleName is a published scale's name in the contract's form: quantity, hyphen, label.
func scaleName(quantity, label string) string {
	if label == "Air-N2" {
		label = "AIR"
	}
	return quantity + "-" + strings.Trim(notInCodes.ReplaceAllString(label, "-"), "-")
}

// materialCode is a published material's code: its name with other characters made hyphens.
func materialCode(name string) string {
	return strings.Trim(notInCodes.ReplaceAllString(name, "-"), "-")
}

type seedMaterial struct {
	code, source string
	body         store.Material
}

// seedMaterials gathers the rows of each material into one body.
func seedMaterials(rows []seedRow) []seedMaterial {
	var out []seedMaterial
	at := map[string]int{}
	for _, row := range rows {
		code := materialCode(row["material"])
		i, ok := at[code]
		if !ok {
			i = len(out)
			at[code] = i
			out = append(out, seedMaterial{code: code, source: row["source"], body: store.Material{Name: row["material"], Kind: "international",
				Substance: row["substance"], Formula: row["formula"], Producer: row["issuer"], Status: row["material_status"], Provisional: true}})
		}
		m := &out[i].body
		for alias := range strings.SplitSeq(row["aliases"], ";") {
			if alias = strings.TrimSpace(alias); alias != "" && !slices.Contains(m.Aliases, alias) {
				m.Aliases = append(m.Aliases, alias)
			}
		}
		if strings.HasPrefix(row["uncertainty_kind"], "exact by definition") {
			m.Kind = "defining"
		}
		if row.checked() {
			m.Provisional = false
		}
	}
	return out
}

// seedOrder sorts values so that a record's versions follow the years, and the
// one its issuer calls current comes after those it replaced.
func seedOrder(rows []seedRow) []seedRow {
	rank := func(row seedRow) string {
		status := "1"
		switch {
		case row["value_status"] == "superseded":
			status = "0"
		case strings.HasPrefix(row["value_status"], "current"):
			status = "2"
		}
		return row["year_of_value"] + status
	}
	out := slices.Clone(rows)
	slices.SortStableFunc(out, func(a, b seedRow) int { return strings.Compare(rank(a), rank(b)) })
	return out
}

func seedValue(row seedRow, material, scale string) (store.Value, store.Instant, error) {
	year, err := time.Parse("2006", row["year_of_value"])
	if err != nil {
		return store.Value{}, 0, fmt.Errorf("year %q: %w", row["year_of_value"], err)
	}
	stated := seedStated(row["uncertainty_permil"], row["uncertainty_kind"])
	u, rule, err := StandardFrom(stated)
	if err != nil {
		return store.Value{}, 0, err
	}
	body := store.Value{Material: material, MaterialLaboratory: store.Common, Scale: scale, Measurand: Total, Value: store.Decimal(row["value_permil"]),
		StandardUncertainty: u, Exact: stated.Kind == "exact", Stated: &stated, Rule: rule + " (" + row["uncertainty_kind"] + ")", Basis: "literature",
		Evidence: row["source"], Status: row["value_status"], Provisional: !row.checked(), Note: row["note"]}
	if body.Exact {
		body.Basis = "definition"
	}
	return body, store.InstantOf(year), nil
}

var numberOfObservations = regexp.MustCompile(`\(n=(\d+)`)

// seedStated reads the kind of an uncertainty off the words it was printed with.
// The kind is a property of the source's row; where two issuers label the same
// digits differently, the larger reading stands.
func seedStated(digits, kind string) store.Stated {
	s := store.Stated{Text: digits, Kind: "standard"}
	two := 2.0
	switch {
	case strings.HasPrefix(kind, "exact"):
		s.Kind, s.Text = "exact", "0"
	case digits == "" || strings.HasPrefix(kind, "no uncertainty") || strings.HasPrefix(kind, "not stated") || strings.HasPrefix(kind, "approximate"):
		s.Kind, s.Text = "none", ""
	case strings.HasPrefix(kind, "expanded"), strings.Contains(kind, "k=2 per CIAAW"), strings.HasPrefix(kind, "2 sigma"):
		s.Kind, s.K = "expanded", &two
	case strings.HasPrefix(kind, "half-width of 95 % CI"):
		normal := 1.959963984540054 // the two-sided 95 % normal quantile; the source gives no degrees of freedom
		s.Kind, s.K = "expanded", &normal
	case strings.HasPrefix(kind, "half-width"):
		s.Kind = "half-width"
	case strings.HasPrefix(kind, "standard deviation"), strings.HasPrefix(kind, "SD 1"), strings.HasPrefix(kind, "SD printed"), strings.HasPrefix(kind, "1 s"):
		s.Kind = "sd"
	}
	if m := numberOfObservations.FindStringSubmatch(kind); m != nil && s.Kind == "sd" {
		var n int
		if _, err := fmt.Sscan(m[1], &n); err == nil {
			s.N = &n
		}
	}
	return s
}
