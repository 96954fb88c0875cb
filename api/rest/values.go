package rest

import (
	"context"
	"errors"
	"net/url"
	"strconv"
	"strings"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Stated is an uncertainty as its source printed it.
type Stated struct {
	Text string   `json:"text" maxLength:"40" doc:"The figure as printed (‰); empty for exact and none." example:"0.04"`
	Kind string   `json:"kind" enum:"standard,expanded,sd,half-width,exact,none"`
	K    *float64 `json:"k,omitempty" doc:"Coverage factor of an expanded uncertainty."`
	N    *int     `json:"n,omitempty" doc:"Number of observations behind a standard deviation."`
}

// A Value is a version of an assigned value of a material on a scale.
type Value struct {
	Recorded
	Material            string     `json:"material"`
	MaterialLaboratory  string     `json:"material_laboratory"`
	Scale               string     `json:"scale"`
	Measurand           string     `json:"measurand"`
	Value               Decimal    `json:"value" doc:"‰, with the digits it was typed with."`
	StandardUncertainty *float64   `json:"u" doc:"Standard uncertainty, k = 1 (‰); null where none is stated."`
	Exact               bool       `json:"exact,omitempty" doc:"Exact by definition of the scale."`
	DegreesOfFreedom    *float64   `json:"nu" doc:"Degrees of freedom of u; null where u is known."`
	Stated              *Stated    `json:"stated,omitempty"`
	Rule                string     `json:"rule,omitempty" doc:"How u follows from what was stated."`
	Basis               string     `json:"basis" enum:"definition,certificate,literature,assignment,conversion,partner,provisional"`
	Evidence            string     `json:"evidence,omitempty"`
	Document            string     `json:"document,omitempty"`
	ExpiresAt           *time.Time `json:"expires_at,omitempty"`
	Status              string     `json:"status,omitempty"`
	Provisional         bool       `json:"provisional,omitempty"`
	Note                string     `json:"note,omitempty"`
	Sources             []Source   `json:"sources,omitempty" doc:"The outside sources of a value that was made in the registry."`
	// What a campaign that assigned the value found.
	UBetweenUnits *ValueComponent `json:"u_bb,omitempty" doc:"Homogeneity: joins per unit where a unit is used."`
	ULongTerm     *ValueComponent `json:"u_lts,omitempty" doc:"Stability."`
	Campaign      *CampaignResult `json:"campaign,omitempty"`
	BackLoaded    bool            `json:"back_loaded,omitempty" doc:"Assigned before the registry was in use."`
}

// A Source is one term of a value's decomposition.
type Source struct {
	ID          string  `json:"id"`
	Kind        string  `json:"kind"`
	U           float64 `json:"u" doc:"Standard uncertainty of the source."`
	Sensitivity float64 `json:"sensitivity"`
	Group       string  `json:"group,omitempty"`
}

func showValue(it registry.Item[store.Value]) Value {
	v := it.Value
	out := Value{Recorded: recorded(it), Material: v.Material, MaterialLaboratory: v.MaterialLaboratory, Scale: v.Scale, Measurand: v.Measurand,
		Value: Decimal(v.Value), Exact: v.Exact, DegreesOfFreedom: v.DegreesOfFreedom, Rule: v.Rule, Basis: v.Basis, Evidence: v.Evidence,
		Document: hashText(v.Document), ExpiresAt: timePointer(v.ExpiresAt), Status: v.Status, Provisional: v.Provisional, Note: v.Note,
		Sources:       convertOrNil(v.Sources, func(s store.Source) Source { return Source{s.ID, s.Kind, s.U, s.Sensitivity, s.Group} }),
		UBetweenUnits: showPart(v.UBetweenUnits), ULongTerm: showPart(v.ULongTerm), Campaign: showCampaign(v.Campaign), BackLoaded: v.BackLoaded}
	if v.StandardUncertainty != 0 || v.Exact {
		u := v.StandardUncertainty
		out.StandardUncertainty = &u
	}
	if v.Stated != nil {
		s := Stated(*v.Stated)
		out.Stated = &s
	}
	return out
}

var valueKind = kindOfRecord[store.Value, Value]{kind: store.KindValue, show: showValue,
	csv: table[Value]{columns("material", "scale", "measurand", "value", "u", "nu", "basis", "evidence"), func(v Value) []string {
		return v.row(v.Material, v.Scale, v.Measurand, string(v.Value), optional(v.StandardUncertainty), optional(v.DegreesOfFreedom), v.Basis, v.Evidence)
	}}}

// A ValueBody states an assigned value.
type ValueBody struct {
	Value     Decimal    `json:"value" doc:"‰ unless delta_unit says otherwise; it comes back with its digits."`
	DeltaUnit string     `json:"delta_unit,omitempty" enum:"permil,mUr,per-meg,ppm" doc:"Unit of value and uncertainty as sent; left out: permil. They are kept in ‰, with the same digits."`
	U         *Decimal   `json:"u,omitempty" doc:"Standard uncertainty, k = 1: short for stated with the kind standard."`
	Stated    *Stated    `json:"stated,omitempty" doc:"The uncertainty as its source printed it; u follows from it by a recorded rule."`
	Nu        *float64   `json:"nu,omitempty" doc:"Degrees of freedom of u; left out: u is known."`
	Basis     string     `json:"basis" enum:"definition,certificate,literature,assignment,conversion,partner,provisional"`
	Evidence  string     `json:"evidence,omitempty" maxLength:"2000" doc:"Certificate, paper, campaign."`
	Document  string     `json:"document,omitempty" doc:"SHA-256 of the document it rests on."`
	ValidFrom *time.Time `json:"valid_from,omitempty" doc:"Since when it holds."`
	ExpiresAt *time.Time `json:"expires_at,omitempty"`
	Note      string     `json:"note,omitempty" maxLength:"2000"`
}

// A NewValue states the first value of a material on a scale, or asks for it
// to be made from sessions.
type NewValue struct {
	Scale     string `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand string `json:"measurand,omitempty" maxLength:"60" doc:"What of the material: left out, total."`
	Reason    string `json:"reason,omitempty" maxLength:"4000"`
	ValueBody
}

// A ValueChange states a further version of a value.
type ValueChange struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000" doc:"Why this version replaces the one before."`
	ValueBody
}

// request turns the body into the registry's request.
func (b ValueBody) request(scale, measurand string) (registry.ValueRequest, error) {
	q := registry.ValueRequest{Scale: scale, Measurand: measurand, Value: store.Decimal(b.Value), DegreesOfFreedom: b.Nu, Basis: b.Basis, Evidence: b.Evidence,
		ExpiresAt: instantPointer(b.ExpiresAt), Note: b.Note}
	var err error
	if q.Document, err = parseHash("body.document", b.Document); err != nil {
		return q, err
	}
	if b.DeltaUnit == "per-meg" || b.DeltaUnit == "ppm" {
		b = b.inPermil()
		q.Value = store.Decimal(b.Value)
	}
	switch {
	case b.U != nil && b.Stated != nil:
		return q, registry.Complain("this value cannot be stated", []registry.Complaint{{Place: "body.u", Found: string(*b.U) + ", beside stated",
			Expected: "one of the two: u, or the uncertainty as printed from which u follows"}})
	case b.Stated != nil:
		q.Stated = store.Stated(*b.Stated)
	case b.U != nil:
		q.Stated = store.Stated{Text: string(*b.U), Kind: "standard"}
		if x, err := strconv.ParseFloat(string(*b.U), 64); err == nil && x == 0 && b.Basis == "definition" {
			q.Stated = store.Stated{Kind: "exact"}
		}
	case b.Basis == "definition":
		return q, complain("this value cannot be stated", "body.u", "", "the standard uncertainty; 0 for a value that defines a scale")
	default:
		return q, complain("this value cannot be stated", "body.u", "", `the standard uncertainty, or stated with the kind "none" where the source gives none`)
	}
	return q, nil
}

// inPermil turns parts per million into ‰ by moving the decimal point, so that
// every digit stays.
func (b ValueBody) inPermil() ValueBody {
	b.Value = Decimal(byThousand(string(b.Value)))
	if b.U != nil {
		u := Decimal(byThousand(string(*b.U)))
		b.U = &u
	}
	if b.Stated != nil && jsonNumber.MatchString(b.Stated.Text) {
		s := *b.Stated
		s.Text = byThousand(s.Text)
		b.Stated = &s
	}
	return b
}

// byThousand divides a decimal by 1000 in its digits: -10450 is -10.450.
func byThousand(text string) string {
	sign := ""
	if strings.HasPrefix(text, "-") {
		sign, text = "-", text[1:]
	}
	if i := strings.IndexAny(text, "eE"); i >= 0 {
		if exponent, err := strconv.Atoi(strings.TrimPrefix(text[i+1:], "+")); err == nil {
			return sign + text[:i] + "e" + strconv.Itoa(exponent-3)
		}
	}
	before, after, _ := strings.Cut(text, ".")
	before = strings.Repeat("0", max(0, 4-len(before))) + before
	point := len(before) - 3
	before, after = before[:point], before[point:]+after
	for len(before) > 1 && before[0] == '0' {
		before = before[1:]
	}
	return sign + before + "." + after
}

// placed puts complaints about a stated uncertainty where the sender wrote it.
func (b ValueBody) placed(err error) error {
	var refusal *registry.Error
	if b.U == nil || !errors.As(err, &refusal) {
		return err
	}
	moved := *refusal
	moved.Complaints = nil
	for _, c := range refusal.Complaints {
		if c.Place == "body.stated.text" || c.Place == "body.stated.kind" {
			c.Place = "body.u"
		}
		moved.Complaints = append(moved.Complaints, c)
	}
	return &moved
}

// MaterialParams name a material whose values or units are meant.
type MaterialParams struct {
	CodeParam
	ListParams
}

func (f *face) materialValues(ctx context.Context, actor registry.Actor, in *MaterialParams) (*answer, error) {
	items, err := f.registry.Values(ctx, actor, in.Code, in.moment())
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, wholeList(items, nil), showValue, valueKind.csv)
}

func (f *face) addValue(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Body NewValue
}) (*one[Value], error) {
	b := in.Body
	edit := registry.Edit{Reason: b.Reason, ValidFrom: instantPointer(b.ValidFrom)}
	q, err := b.request(b.Scale, b.Measurand)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateValue(ctx, actor, in.Code, q, edit)
	if err != nil {
		return nil, b.placed(err)
	}
	return valueAnswer(it), nil
}

func valueAnswer(it registry.Item[store.Value]) *one[Value] {
	v := showValue(it)
	return &one[Value]{ETag: quoteTag(it.Tag()), Location: valuePath(v.Material, v.Scale, v.Measurand), Body: v}
}

func valuePath(material, scale, measurand string) string {
	return "/v1/materials/" + url.PathEscape(material) + "/values/" + url.PathEscape(scale) + "/" + url.PathEscape(measurand)
}

// ValueParams name the value of a material on a scale.
type ValueParams struct {
	CodeParam
	Scale     string `path:"scale" maxLength:"40" doc:"The scale's name." example:"d13C-VPDB-LSVEC"`
	Measurand string `path:"measurand" maxLength:"60" doc:"What of the material." example:"total"`
}

// ValueListParams name the value whose versions or decisions are listed.
type ValueListParams struct {
	ValueParams
	ListParams
}

// listed answers with pages of what belongs to the value that the parameters name.
func listed[S, T any](ctx context.Context, f *face, actor registry.Actor, in *ValueListParams, read func(code string) pages[S], show func(S) T, csv table[T]) (*answer, error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, read(code), show, csv)
}

// code is the code of the value's record. The material may be named by an alias.
func (p ValueParams) code(ctx context.Context, f *face, actor registry.Actor) (string, error) {
	m, err := f.registry.FindMaterial(ctx, actor, p.Code, store.Moment{})
	if err != nil {
		return "", err
	}
	return registry.ValueCode(m.Code, p.Scale, p.Measurand), nil
}

func (f *face) value(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	MomentParams
}) (*one[Value], error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	return oneOf(ctx, f, actor, valueKind, code, 0, in.moment())
}

func (f *face) valueVersions(ctx context.Context, actor registry.Actor, in *ValueListParams) (*answer, error) {
	read := func(code string) pages[registry.Item[store.Value]] {
		return versionPages[store.Value](f, actor, store.KindValue, code)
	}
	return listed(ctx, f, actor, in, read, showValue, valueKind.csv)
}

func (f *face) valueVersion(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	Number int `path:"version" minimum:"1" doc:"Number of the version." example:"1"`
}) (*one[Value], error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	return oneOf(ctx, f, actor, valueKind, code, in.Number, store.Moment{})
}

func (f *face) changeValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	MatchParam
	Body ValueChange
}) (*one[Value], error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	before, err := seen[store.Value](ctx, f, actor, store.KindValue, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	q, err := in.Body.request(before.Value.Scale, before.Value.Measurand)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateValue(ctx, actor, before.Value.Material, q, registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason, ValidFrom: instantPointer(in.Body.ValidFrom)})
	if err != nil {
		return nil, in.Body.placed(err)
	}
	return valueAnswer(it), nil
}

func (f *face) valueDecisions(ctx context.Context, actor registry.Actor, in *ValueListParams) (*answer, error) {
	read := func(code string) pages[VersionDecision] {
		return decisionPages[store.Value](f, actor, store.KindValue, code)
	}
	return listed(ctx, f, actor, in, read, same, decisionTable)
}

func (f *face) decideValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	MatchParam
	Body NewDecision
}) (*one[Value], error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	it, err := decide[store.Value](ctx, f, actor, store.KindValue, code, in.MatchParam, in.Body)
	if err != nil {
		return nil, err
	}
	return valueAnswer(it), nil
}

// An Assigning asks for a value made from the sessions that measured the
// material as an unknown.
type Assigning struct {
	ValidFrom *time.Time `json:"valid_from,omitempty" doc:"Since when it holds."`
	Note      string     `json:"note,omitempty" maxLength:"2000"`
	Reason    string     `json:"reason,omitempty" maxLength:"4000" doc:"Asked for where there is a value already."`
}

func (f *face) assignValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	FurtherMatch
	Body Assigning
}) (*one[Value], error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	edit := registry.Edit{Reason: in.Body.Reason, ValidFrom: instantPointer(in.Body.ValidFrom)}
	if edit.After, err = firstOrSeen[store.Value](ctx, f, actor, store.KindValue, code, in.IfMatch); err != nil {
		return nil, err
	}
	it, err := f.registry.AssignValue(ctx, actor, registry.AssignRequest{Material: in.Code, Scale: in.Scale, Measurand: in.Measurand, Note: in.Body.Note}, edit)
	if err != nil {
		return nil, err
	}
	return valueAnswer(it), nil
}
