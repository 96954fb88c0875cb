package rest

import (
	"context"
	"net/url"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A RelationBody states a relation: a conversion between two scales, a constant, or a rule in words.
type RelationBody struct {
	Sort              string         `json:"sort" enum:"conversion,constant,words"`
	Title             string         `json:"title" maxLength:"200"`
	Expression        string         `json:"expression,omitempty" maxLength:"4000"`
	From              string         `json:"from,omitempty" maxLength:"40" doc:"Of a conversion: to = factor·from + offset (‰)." example:"d18O-VPDB"`
	To                string         `json:"to,omitempty" maxLength:"40" example:"d18O-VSMOW-SLAP"`
	Factor            Decimal        `json:"factor,omitempty"`
	Offset            Decimal        `json:"offset,omitempty"`
	Covariance        *[2][2]float64 `json:"covariance,omitempty" doc:"Of (factor, offset); left out: they are fixed."`
	Lowest            *float64       `json:"lowest,omitempty" doc:"Range in which a conversion holds (‰ on from)."`
	Highest           *float64       `json:"highest,omitempty"`
	Constant          Decimal        `json:"constant,omitempty" doc:"Of a constant."`
	U                 *float64       `json:"u,omitempty" doc:"Its standard uncertainty."`
	Stated            string         `json:"stated,omitempty" maxLength:"1000" doc:"As the source prints it."`
	StatedUncertainty string         `json:"stated_uncertainty,omitempty" maxLength:"1000"`
	Domain            string         `json:"domain,omitempty" maxLength:"1000"`
	Evidence          string         `json:"evidence,omitempty" maxLength:"2000"`
	Provisional       bool           `json:"provisional,omitempty" doc:"Nobody has checked it against its source."`
	Note              string         `json:"note,omitempty" maxLength:"2000"`
}

func (b RelationBody) body() store.Relation {
	return store.Relation{Sort: b.Sort, Title: b.Title, Expression: b.Expression, From: b.From, To: b.To, Factor: store.Decimal(b.Factor), Offset: store.Decimal(b.Offset),
		Covariance: b.Covariance, Constant: store.Decimal(b.Constant), StandardUncertainty: b.U, Lowest: b.Lowest, Highest: b.Highest, Stated: b.Stated, StatedUncertainty: b.StatedUncertainty,
		Domain: b.Domain, Evidence: b.Evidence, Provisional: b.Provisional, Note: b.Note}
}

// A Relation is a version of a relation.
type Relation struct {
	Recorded
	RelationBody
}

func showRelation(it registry.Item[store.Relation]) Relation {
	b := it.Value
	return Relation{recorded(it), RelationBody{Sort: b.Sort, Title: b.Title, Expression: b.Expression, From: b.From, To: b.To, Factor: Decimal(b.Factor), Offset: Decimal(b.Offset),
		Covariance: b.Covariance, Constant: Decimal(b.Constant), U: b.StandardUncertainty, Lowest: b.Lowest, Highest: b.Highest, Stated: b.Stated, StatedUncertainty: b.StatedUncertainty,
		Domain: b.Domain, Evidence: b.Evidence, Provisional: b.Provisional, Note: b.Note}}
}

var relationKind = kindOfRecord[store.Relation, Relation]{kind: store.KindRelation, show: showRelation,
	csv: table[Relation]{columns("sort", "title", "from", "to", "factor", "offset", "constant", "u", "evidence"), func(r Relation) []string {
		return r.row(r.Sort, r.Title, r.From, r.To, string(r.Factor), string(r.Offset), string(r.Constant), optional(r.U), r.Evidence)
	}}}

// relations lists the published relations, or those that the laboratory added.
func (f *face) relations(ctx context.Context, actor registry.Actor, in *ScalesParams) (*answer, error) {
	laboratory := store.Common
	if in.Laboratory == "own" {
		laboratory = actor.Laboratory
	}
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Relation]], error) {
		return registry.List[store.Relation](ctx, f.registry, actor, laboratory, store.KindRelation, q)
	}
	return answerList(ctx, f, &in.ListParams, read, showRelation, relationKind.csv)
}

// A NewRelation states a relation of the laboratory.
type NewRelation struct {
	Code      string    `json:"code" maxLength:"40" example:"d13C-LSVEC-own"`
	ValidFrom time.Time `json:"valid_from" doc:"Since when it holds."`
	RelationBody
}

func (f *face) addRelation(ctx context.Context, actor registry.Actor, in *struct{ Body NewRelation }) (*one[Relation], error) {
	it, err := f.registry.StateRelation(ctx, actor, in.Body.Code, in.Body.body(), registry.Edit{ValidFrom: instantPointer(&in.Body.ValidFrom)})
	if err != nil {
		return nil, err
	}
	return &one[Relation]{ETag: quoteTag(it.Tag()), Location: "/v1/relations/" + url.PathEscape(it.Code), Body: showRelation(it)}, nil
}

// A RelationChange states a further version of a relation, whole.
type RelationChange struct {
	Reason    string    `json:"reason" minLength:"1" maxLength:"4000"`
	ValidFrom time.Time `json:"valid_from"`
	RelationBody
}

func (f *face) changeRelation(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body RelationChange
}) (*one[Relation], error) {
	before, err := seen[store.Relation](ctx, f, actor, store.KindRelation, in.Code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateRelation(ctx, actor, before.Code, in.Body.body(), registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason, ValidFrom: instantPointer(&in.Body.ValidFrom)})
	if err != nil {
		return nil, err
	}
	return &one[Relation]{ETag: quoteTag(it.Tag()), Body: showRelation(it)}, nil
}

// A ConversionOf asks what a delta is on the other side of a relation.
type ConversionOf struct {
	Relation string  `json:"relation" maxLength:"40" example:"d18O-VPDB-VSMOW"`
	Version  int     `json:"version,omitempty" minimum:"1" doc:"Left out: the one that holds now."`
	Scale    string  `json:"scale" maxLength:"40" doc:"On which the delta is; a relation works both ways, its inverse exactly." example:"d18O-VPDB"`
	Value    float64 `json:"value" doc:"‰"`
	U        float64 `json:"u,omitempty" minimum:"0" doc:"Standard uncertainty (‰)."`
}

// A Converted is a delta on another scale.
type Converted struct {
	Relation     string  `json:"relation"`
	Version      int     `json:"version" doc:"Of the relation."`
	Scale        string  `json:"scale"`
	Value        float64 `json:"value" doc:"‰"`
	U            float64 `json:"u" doc:"Standard uncertainty (‰)."`
	FromRelation float64 `json:"u_relation" doc:"The part of u that the relation's constants bring (‰)."`
	Provisional  bool    `json:"provisional" doc:"Nobody has checked the relation against its source."`
}

func (f *face) calculateConversion(ctx context.Context, actor registry.Actor, in *struct{ Body ConversionOf }) (*plain[Converted], error) {
	b := in.Body
	a, err := f.registry.Convert(ctx, actor, registry.ConversionRequest{Relation: b.Relation, Version: b.Version, Scale: b.Scale, Value: b.Value, U: b.U})
	if err != nil {
		return nil, err
	}
	return &plain[Converted]{Converted{a.Relation.Code, a.Relation.Ref.Version, a.Scale, a.Value, a.StandardUncertainty, a.FromRelation, a.Relation.Value.Provisional}}, nil
}

// A ConvertedFinal asks for a final value on the other side of a relation.
type ConvertedFinal struct {
	Relation string `json:"relation" maxLength:"40"`
	Version  int    `json:"version,omitempty" minimum:"1"`
	After    int    `json:"after,omitempty" minimum:"1" doc:"Newest version seen of the converted value, where there is one."`
	Reason   string `json:"reason,omitempty" maxLength:"4000"`
}

func (f *face) convertFinal(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Body ConvertedFinal
}) (*one[Final], error) {
	code, err := finalKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	b := in.Body
	it, err := f.registry.ConvertFinal(ctx, actor, code, registry.ConvertRequest{Relation: b.Relation, Version: b.Version, After: b.After, Reason: b.Reason})
	if err != nil {
		return nil, err
	}
	out := showFinal(it)
	return &one[Final]{ETag: quoteTag(it.Tag()), Location: "/v1/finals/" + out.Code, Body: out}, nil
}

// A ConvertedValue asks for a material's value on the other side of a relation.
type ConvertedValue struct {
	Relation  string    `json:"relation" maxLength:"40"`
	Version   int       `json:"version,omitempty" minimum:"1" doc:"Left out: the one that held at valid_from."`
	ValidFrom time.Time `json:"valid_from"`
	After     int       `json:"after,omitempty" minimum:"1" doc:"Newest version seen of the converted value, where there is one."`
	Reason    string    `json:"reason,omitempty" maxLength:"4000"`
}

func (f *face) convertValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	Body ConvertedValue
}) (*one[Value], error) {
	b := in.Body
	it, err := f.registry.ConvertValue(ctx, actor, in.Code, in.Scale, in.Measurand,
		registry.ConvertRequest{Relation: b.Relation, Version: b.Version, After: b.After, Reason: b.Reason}, instantPointer(&b.ValidFrom))
	if err != nil {
		return nil, err
	}
	return valueAnswer(it), nil
}
