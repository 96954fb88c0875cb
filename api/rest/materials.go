package rest

import (
	"context"
	"net/url"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A MaterialBody is what a laboratory says of a reference material.
type MaterialBody struct {
	Name        string          `json:"name" maxLength:"200" example:"Glycine working standard"`
	Kind        string          `json:"kind" enum:"defining,international,working,gas,control"`
	Substance   string          `json:"substance,omitempty" maxLength:"200"`
	Formula     string          `json:"formula,omitempty" maxLength:"100"`
	Matrix      string          `json:"matrix,omitempty" maxLength:"200"`
	Producer    string          `json:"producer,omitempty" maxLength:"200"`
	Lot         string          `json:"lot,omitempty" maxLength:"100"`
	Aliases     []string        `json:"aliases,omitempty" maxItems:"50" doc:"Further names by which files may call it; never a lot."`
	Identifiers []Identifier    `json:"identifiers,omitempty" maxItems:"50"`
	Status      string          `json:"status,omitempty" maxLength:"100" doc:"The producer's word on it, such as current, exhausted or withdrawn."`
	Preparation string          `json:"preparation,omitempty" maxLength:"1000"`
	Storage     string          `json:"storage,omitempty" maxLength:"1000"`
	Hazards     []string        `json:"hazards,omitempty" maxItems:"50" doc:"GHS statements by code: of hazards (H, EUH) and precautions (P)."`
	Minimum     *Amount         `json:"minimum_portion,omitempty" doc:"The smallest portion that is the material."`
	Roles       []MaterialRoles `json:"roles,omitempty" maxItems:"50" doc:"What it may be used for; a quantity not listed may have any role."`
	Stock       *StockRule      `json:"stock,omitempty" doc:"How its units are watched."`
	Succeeds    string          `json:"succeeds,omitempty" maxLength:"40" doc:"The material that this one follows: it is no anchor before an approved campaign measured both side by side."`
	Waiver      string          `json:"overlap_waiver,omitempty" maxLength:"1000" doc:"Why it may be an anchor without such a campaign; sessions that use it are flagged with the reason and who gave it."`
	Document    string          `json:"document,omitempty" doc:"SHA-256 of the document it rests on."`
	Provisional bool            `json:"provisional,omitempty" readOnly:"true"`
	Note        string          `json:"note,omitempty" maxLength:"2000"`
}

// An Identifier names a material in somebody else's system.
type Identifier struct {
	Scheme string `json:"scheme" maxLength:"40" example:"CAS"`
	Value  string `json:"value" maxLength:"100" example:"56-40-6"`
}

// MaterialRoles says what a material may be used for.
type MaterialRoles struct {
	Quantity string     `json:"quantity" maxLength:"20" example:"d13C"`
	Roles    []string   `json:"roles"`
	From     *time.Time `json:"from,omitempty"`
	To       *time.Time `json:"to,omitempty"`
}

// A Material is a version of a reference material.
type Material struct {
	Recorded
	MaterialBody
}

func (m MaterialBody) body() (store.Material, error) {
	document, err := parseHash("body.document", m.Document)
	return store.Material{Name: m.Name, Kind: m.Kind, Substance: m.Substance, Formula: m.Formula, Matrix: m.Matrix, Producer: m.Producer, Lot: m.Lot,
		Aliases: m.Aliases, Identifiers: convertOrNil(m.Identifiers, func(i Identifier) store.Identifier { return store.Identifier(i) }), Status: m.Status,
		Preparation: m.Preparation, Storage: m.Storage, Hazards: m.Hazards, Minimum: m.Minimum.body(),
		Roles: convertOrNil(m.Roles, func(r MaterialRoles) store.MaterialRoles {
			return store.MaterialRoles{Quantity: r.Quantity, Roles: convert(r.Roles, func(s string) calib.Role { return calib.Role(s) }),
				From: instantPointer(r.From), To: instantPointer(r.To)}
		}), Stock: m.Stock.body(), Succeeds: m.Succeeds, OverlapWaiver: m.Waiver, Document: document, Note: m.Note}, err
}

func showMaterial(it registry.Item[store.Material]) Material {
	m := it.Value
	return Material{recorded(it), MaterialBody{Name: m.Name, Kind: m.Kind, Substance: m.Substance, Formula: m.Formula, Matrix: m.Matrix, Producer: m.Producer,
		Lot: m.Lot, Aliases: m.Aliases, Identifiers: convertOrNil(m.Identifiers, func(i store.Identifier) Identifier { return Identifier(i) }),
		Status: m.Status, Preparation: m.Preparation, Storage: m.Storage, Hazards: m.Hazards, Minimum: showAmount(m.Minimum),
		Roles: convertOrNil(m.Roles, func(r store.MaterialRoles) MaterialRoles {
			return MaterialRoles{Quantity: r.Quantity, Roles: convert(r.Roles, func(s calib.Role) string { return string(s) }), From: timePointer(r.From), To: timePointer(r.To)}
		}), Stock: showStockRule(m.Stock), Succeeds: m.Succeeds, Waiver: m.OverlapWaiver, Document: hashText(m.Document), Provisional: m.Provisional, Note: m.Note}}
}

var materialTable = table[Material]{columns("name", "kind", "substance", "formula", "producer", "lot", "aliases", "status", "hazards", "provisional"),
	func(m Material) []string {
		provisional := ""
		if m.Provisional {
			provisional = "provisional"
		}
		return m.row(m.Name, m.Kind, m.Substance, m.Formula, m.Producer, m.Lot, spaced(m.Aliases), m.Status, spaced(m.Hazards), provisional)
	}}

// LaboratoryParam chooses between the asker's records and those of everybody.
type LaboratoryParam struct {
	Laboratory string `query:"laboratory" enum:"own,common" doc:"own: this laboratory's; common: the registry's published ones."`
}

func (f *face) materials(ctx context.Context, actor registry.Actor, in *struct {
	ListParams
	LaboratoryParam
}) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Material]], error) {
		return f.registry.Materials(ctx, actor, in.Laboratory == "common", q)
	}
	return answerList(ctx, f, &in.ListParams, read, showMaterial, materialTable)
}

func (f *face) material(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MomentParams
}) (*one[Material], error) {
	it, err := f.registry.FindMaterial(ctx, actor, in.Code, in.moment())
	if err != nil {
		return nil, err
	}
	return &one[Material]{ETag: quoteTag(it.Tag()), Body: showMaterial(it)}, nil
}

// A NewMaterial registers a material.
type NewMaterial struct {
	Code string `json:"code" maxLength:"40" doc:"1 to 40 of A–Z a–z 0–9 . _ -, first a letter or digit; unique without regard to case." example:"FJO-GLY"`
	MaterialBody
}

func (f *face) addMaterial(ctx context.Context, actor registry.Actor, in *struct{ Body NewMaterial }) (*one[Material], error) {
	body, err := in.Body.body()
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateMaterial(ctx, actor, in.Body.Code, body, registry.Edit{})
	if err != nil {
		return nil, err
	}
	return &one[Material]{ETag: quoteTag(it.Tag()), Location: "/v1/materials/" + url.PathEscape(it.Code), Body: showMaterial(it)}, nil
}

// A MaterialChange states a further version of a material, whole.
type MaterialChange struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000" doc:"Why this version replaces the one before."`
	MaterialBody
}

func (f *face) changeMaterial(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body MaterialChange
}) (*one[Material], error) {
	before, err := seen[store.Material](ctx, f, actor, store.KindMaterial, in.Code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	body, err := in.Body.body()
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateMaterial(ctx, actor, before.Code, body, registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Material]{ETag: quoteTag(it.Tag()), Body: showMaterial(it)}, nil
}
