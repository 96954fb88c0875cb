package rest

import (
	"bytes"
	"context"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A StockRule limits the units of a material and says when it is looked at; what is left out is not asked for.
type StockRule struct {
	MaximumOpenings int     `json:"maximum_openings,omitempty" minimum:"0" doc:"A session that uses a unit opened more often is flagged."`
	MaximumAgeDays  float64 `json:"maximum_age_days,omitempty" minimum:"0" doc:"Days since the first opening beyond which sessions are flagged."`
	RecheckDays     float64 `json:"recheck_days,omitempty" minimum:"0" doc:"Days between results that check its value."`
	Portion         *Amount `json:"portion,omitempty" doc:"What one analysis takes, losses included."`
	LeadDays        float64 `json:"lead_days,omitempty" minimum:"0" doc:"Days before the end at which a successor must be begun."`
}

func (r *StockRule) body() *store.StockRule {
	if r == nil {
		return nil
	}
	return &store.StockRule{MaximumOpenings: r.MaximumOpenings, MaximumAgeDays: r.MaximumAgeDays, RecheckDays: r.RecheckDays, Portion: r.Portion.body(), LeadDays: r.LeadDays}
}

func showStockRule(r *store.StockRule) *StockRule {
	if r == nil {
		return nil
	}
	return &StockRule{MaximumOpenings: r.MaximumOpenings, MaximumAgeDays: r.MaximumAgeDays, RecheckDays: r.RecheckDays, Portion: showAmount(r.Portion), LeadDays: r.LeadDays}
}

// A Stock is what is left of a material, who used it, and when it runs out.
type Stock struct {
	Material        string      `json:"material"`
	LeftUnit        string      `json:"left_unit" doc:"Unit of measurement of what is left: g, L or units."`
	Forecast        *Forecast   `json:"forecast"`
	WithoutForecast string      `json:"without_forecast,omitempty" doc:"Why there is no forecast."`
	Units           []UnitStock `json:"units"`
	Handling        Handling    `json:"handling"`
}

// Handling is what whoever handles a material has to know.
type Handling struct {
	Material    string            `json:"material"`
	Name        string            `json:"name"`
	Storage     string            `json:"storage,omitempty"`
	Preparation string            `json:"preparation,omitempty"`
	Minimum     *Amount           `json:"minimum_portion,omitempty"`
	Language    string            `json:"language" enum:"en,de,fr,es"`
	Hazards     []HazardStatement `json:"hazards"`
	Caution     string            `json:"caution,omitempty" doc:"The safety data sheet, local rules and trained staff decide."`
}

func showHandling(h registry.Handling) Handling {
	return Handling{h.Material, h.Name, h.Storage, h.Preparation, showAmount(h.MinimumPortion), h.Language, convert(h.Hazards, func(s registry.HazardStatement) HazardStatement { return HazardStatement(s) }), h.Caution}
}

// LanguageParam chooses the language of hazard statements.
type LanguageParam struct {
	Language string `query:"language" enum:"en,de,fr,es" doc:"Of the hazard statements; left out: en."`
}

func (f *face) handling(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	LanguageParam
}) (*plain[Handling], error) {
	h, err := f.registry.Handling(ctx, actor, in.Code, in.Language)
	if err != nil {
		return nil, err
	}
	return &plain[Handling]{showHandling(h)}, nil
}

// A Forecast says when a material runs out, if it is used as it was.
type Forecast struct {
	Basis      string    `json:"basis" enum:"portions,content,units" doc:"Logged portions, statements of what is left, or units emptied."`
	Events     int       `json:"events" doc:"Uses it rests on."`
	Since      time.Time `json:"since"`
	Left       float64   `json:"left"`
	RatePerDay float64   `json:"rate_per_day"`
	URate      float64   `json:"u_rate_per_day"`
	Days       float64   `json:"days" doc:"From now."`
	UDays      float64   `json:"u_days"`
	RunsOut    time.Time `json:"runs_out"`
	Earliest   time.Time `json:"earliest" doc:"With latest, holds the day at 95 %."`
	Latest     time.Time `json:"latest"`
}

// A UnitStock is one unit and what became of it.
type UnitStock struct {
	Unit Unit      `json:"unit"`
	Left *float64  `json:"left" doc:"Null where no content is stated."`
	Uses []UnitUse `json:"uses"`
}

// A UnitUse is one session's use of a unit, logged through its label.
type UnitUse struct {
	Session  string     `json:"session"`
	At       *time.Time `json:"at"`
	Readings int        `json:"readings"`
	Analyses int        `json:"analyses"`
}

func (f *face) stock(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	LanguageParam
}) (*plain[Stock], error) {
	s, err := f.registry.Stock(ctx, actor, in.Code)
	if err != nil {
		return nil, err
	}
	handling, err := f.registry.Handling(ctx, actor, in.Code, in.Language)
	if err != nil {
		return nil, err
	}
	out := Stock{Material: s.Material.Code, LeftUnit: s.LeftUnit, WithoutForecast: s.WithoutForecast, Units: convert(s.Units, func(u registry.UnitStock) UnitStock {
		return UnitStock{showUnit(u.Unit), u.Left, convert(u.Uses, func(e registry.UseEntry) UnitUse {
			return UnitUse{store.FormatCode(e.Session), timePointer(e.At), e.Readings, e.Analyses}
		})}
	}), Handling: showHandling(handling)}
	if p := s.Forecast; p != nil {
		out.Forecast = &Forecast{p.Basis, p.Events, p.Since.Time(), p.Left, p.RatePerDay, p.URate, p.Days, p.UDays, p.RunsOut.Time(), p.Earliest.Time(), p.Latest.Time()}
	}
	return &plain[Stock]{out}, nil
}

// A DueItem is something that has to be looked at by a day.
type DueItem struct {
	What     string    `json:"what" enum:"expiry,recheck,suspect,successor,opened_too_often,open_too_long,storage_excursion,in_doubt"`
	Material string    `json:"material"`
	Code     string    `json:"code" doc:"Of the value or unit concerned."`
	At       time.Time `json:"at"`
	Sentence string    `json:"sentence"`
}

var dueTable = table[DueItem]{[]string{"what", "material", "code", "at", "sentence"}, func(d DueItem) []string {
	return []string{d.What, d.Material, d.Code, clock(&d.At), d.Sentence}
}}

func (f *face) due(ctx context.Context, actor registry.Actor, in *struct {
	Days float64 `query:"days" minimum:"0" maximum:"36500" doc:"How far ahead; left out: 90."`
	PrintedParam
}) (*answer, error) {
	days := in.Days
	if days == 0 {
		days = 90
	}
	items, err := f.registry.Due(ctx, actor, days)
	if err != nil {
		return nil, err
	}
	if in.format == "html" {
		var b bytes.Buffer
		if err := exchange.WriteDuePage(&b, exchange.DueList{Laboratory: actor.Laboratory, Days: days, Now: f.registry.Now(), Items: items}); err != nil {
			return nil, err
		}
		return pageAnswer(b.Bytes()), nil
	}
	list := convert(items, func(d registry.DueItem) DueItem {
		return DueItem{d.What, d.Material, showSubjectCode(d.Code), d.At.Time(), d.Sentence}
	})
	if in.format == "csv" {
		return csvAnswer(f, list, dueTable), nil
	}
	return jsonAnswer(List[DueItem]{Items: list}, 200, nil)
}

// A Quarantine takes a unit out of use.
type Quarantine struct {
	Reason string    `json:"reason" minLength:"1" maxLength:"4000"`
	Since  time.Time `json:"since" doc:"The last moment at which it was known to be good: what used it later is in doubt."`
}

func (f *face) quarantine(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body Quarantine
}) (*one[Unit], error) {
	code, err := unitKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	before, err := seen[store.Unit](ctx, f, actor, store.KindUnit, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.Quarantine(ctx, actor, code, store.InstantOf(in.Body.Since), registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Unit]{ETag: quoteTag(it.Tag()), Body: showUnit(it)}, nil
}

// An AffectedSession used a unit, with what rests on it.
type AffectedSession struct {
	Session      string         `json:"session"`
	StartedAt    *time.Time     `json:"started_at"`
	Readings     map[string]int `json:"readings" doc:"How many readings of the unit had each role."`
	Calibrations []string       `json:"calibrations"`
	Finals       []string       `json:"finals"`
	Values       []string       `json:"values"`
	Reports      []string       `json:"reports"`
}

func (f *face) affected(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Since time.Time `query:"since" required:"false" doc:"Left out: since the unit's own last good moment, or ever."`
}) (*plain[List[AffectedSession]], error) {
	code, err := unitKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	list, err := f.registry.Affected(ctx, actor, code, instantOf(in.Since))
	if err != nil {
		return nil, err
	}
	return &plain[List[AffectedSession]]{List[AffectedSession]{Items: convert(list, func(a registry.AffectedSession) AffectedSession {
		readings := map[string]int{}
		for role, n := range a.Roles {
			readings[string(role)] = n
		}
		return AffectedSession{Session: store.FormatCode(a.Session.Code), StartedAt: timePointer(a.Session.Value.StartedAt), Readings: readings,
			Calibrations: convert(a.Calibrations, func(c registry.Item[store.Calibration]) string { return store.FormatCode(c.Code) }),
			Finals:       convert(a.Finals, store.FormatCode), Values: convert(a.Values, same), Reports: convert(a.Reports, store.FormatCode)}
	})}}, nil
}

// LabelParams choose the labels of a sheet.
type LabelParams struct {
	CodeParam
	Units   []string `query:"units" doc:"Codes of units; left out: all that can still be used."`
	Page    int      `query:"page" minimum:"1" maximum:"1000" doc:"Sheet; left out: the first. A page for printing has all."`
	Format  string   `query:"format" enum:"svg,html" doc:"html is a page for printing, with all sheets; the header Accept does the same."`
	Address string   `query:"address" maxLength:"200" doc:"What the codes are resolved under; left out: the bare code." example:"https://registry.example"`
}

// Resolve settles the form.
func (p *LabelParams) Resolve(ctx huma.Context) []error {
	if p.Format == "" && accepted(ctx.Header("Accept"), "image/svg+xml", "text/html") == "text/html" {
		p.Format = "html"
	}
	return nil
}

// labels answers with one sheet of labels, as SVG in true size, or with a page
// of all of them.
func (f *face) labels(ctx context.Context, actor registry.Actor, in *LabelParams) (*answer, error) {
	var codes []string
	for _, u := range in.Units {
		code, err := parseCode("query.units", u, store.KindUnit)
		if err != nil {
			return nil, err
		}
		codes = append(codes, code)
	}
	list, err := f.registry.UnitLabels(ctx, actor, in.Code, codes)
	if err != nil {
		return nil, err
	}
	var sheet bytes.Buffer
	if in.Format == "html" {
		if err := exchange.WriteLabelPages(&sheet, in.Code, list, exchange.LabelOptions{Address: in.Address}); err != nil {
			return nil, complain("these sheets cannot be made", "query", "", err.Error())
		}
		return pageAnswer(sheet.Bytes()), nil
	}
	if err := exchange.WriteLabels(&sheet, list, exchange.LabelOptions{Address: in.Address, Page: max(in.Page, 1)}); err != nil {
		return nil, complain("this sheet cannot be made", "query.page", whole(&in.Page), err.Error())
	}
	return textAnswer("image/svg+xml", sheet.Bytes()), nil
}

// pageAnswer is a page for printing: it shows under a policy that lets in its own style.
func pageAnswer(data []byte) *answer {
	return shownAnswer(mediaHTML, exchange.PrintPolicy(), data)
}

func textAnswer(media string, data []byte) *answer {
	return &answer{Body: func(hc huma.Context) {
		hc.SetHeader("Content-Type", media)
		hc.SetStatus(200)
		_, _ = hc.BodyWriter().Write(data) // who has gone needs no answer
	}}
}

// A BackLoadedValue is a value assigned before the registry was in use.
type BackLoadedValue struct {
	Material  string     `json:"material" maxLength:"40"`
	Scale     string     `json:"scale" maxLength:"40"`
	Measurand string     `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Value     Decimal    `json:"value" doc:"‰; it comes back with its digits."`
	Stated    Stated     `json:"stated"`
	Nu        *float64   `json:"nu,omitempty"`
	Basis     string     `json:"basis" enum:"definition,certificate,literature,assignment,conversion,partner,provisional"`
	Evidence  string     `json:"evidence,omitempty" maxLength:"2000" doc:"Where the value stands."`
	ValidFrom *time.Time `json:"valid_from" doc:"Since when it held."`
}

// BackLoad brings values of before.
type BackLoad struct {
	Values []BackLoadedValue `json:"values" minItems:"1" maxItems:"5000"`
}

// backLoad takes the list as JSON or as a table with the headings material,
// scale, value, kind, basis, valid_from, and perhaps uncertainty, k, n, nu,
// measurand, evidence.
func (f *face) backLoad(ctx context.Context, actor registry.Actor, in *struct{ FileParams }) (*plain[List[Value]], error) {
	media, err := in.media()
	if err != nil {
		return nil, err
	}
	var rows []registry.BackLoadRow
	if media == mediaJSON {
		body, err := decode[BackLoad](f, in.RawBody)
		if err != nil {
			return nil, err
		}
		for i, v := range body.Values {
			rows = append(rows, registry.BackLoadRow{Material: v.Material, Scale: v.Scale, Measurand: v.Measurand, Value: store.Decimal(v.Value), Stated: store.Stated(v.Stated),
				DegreesOfFreedom: v.Nu, Basis: v.Basis, Evidence: v.Evidence, ValidFrom: instantPointer(v.ValidFrom), Place: backLoadPlace(i)})
		}
	} else if rows, err = exchange.ReadValues(in.Name, in.RawBody); err != nil {
		return nil, err
	}
	items, err := f.registry.BackLoadValues(ctx, actor, rows)
	if err != nil {
		return nil, err
	}
	return &plain[List[Value]]{List[Value]{Items: convert(items, showValue)}}, nil
}

func backLoadPlace(i int) func(string) string {
	return func(field string) string {
		at := map[string]string{"uncertainty": "stated.text", "kind": "stated.kind", "k": "stated.k", "n": "stated.n"}
		return "body.values[" + whole(&i) + "]." + nameOr(at[field], field)
	}
}
