package rest

import (
	"context"
	"net/url"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A MethodBody is a measurement procedure: the recipe, its limits, how files
// are read and who approves.
type MethodBody struct {
	Title       string           `json:"title" maxLength:"200" example:"d13C of organic solids"`
	Procedure   string           `json:"procedure,omitempty" maxLength:"4000" doc:"The document that describes it."`
	Quantities  []MethodQuantity `json:"quantities" maxItems:"20"`
	Corrections []Correction     `json:"corrections,omitempty" maxItems:"50" doc:"For each correction, where it is made; what is not said cannot be approved."`
	Import      *Mapping         `json:"import,omitempty" doc:"How tables of raw deltas are read."`
	Approval    Approval         `json:"approval,omitempty"`
	Final       FinalRule        `json:"final,omitempty"`
}

// A MethodQuantity is what the method says of one isotope quantity.
type MethodQuantity struct {
	Quantity          string         `json:"quantity" maxLength:"20" example:"d13C"`
	Scale             string         `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand         string         `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Model             Model          `json:"model,omitempty"`
	Limits            Limits         `json:"limits,omitempty"`
	BetweenSession    *Component     `json:"between_session,omitempty" doc:"Added to every result (‰), with its evidence."`
	SampleHomogeneity *Component     `json:"sample_homogeneity,omitempty" doc:"How far a portion may be from its sample (‰), with its evidence: added to every sample, once, however many sessions measure it."`
	Roles             []MaterialRole `json:"roles,omitempty" maxItems:"200" doc:"Roles of materials where the file gives none."`
	H3                *H3Rule        `json:"h3,omitempty" doc:"What the intensities in the files are; hydrogen only."`
	Blank             *BlankRule     `json:"blank,omitempty" doc:"How a blank is known that is taken out before the fit."`
	Repeats           *Repeats       `json:"repeats,omitempty" doc:"How repeated readings of one portion are taken."`
}

// A Model names the terms of the fit and where the variance of the readings comes from.
type Model struct {
	Drift             string   `json:"drift,omitempty" enum:"none,linear,quadratic,bracketed"`
	Size              string   `json:"size,omitempty" enum:"none,linear,inverse,log,blank"`
	Memory            string   `json:"memory,omitempty" enum:"none,carryover"`
	Weights           string   `json:"weights,omitempty" enum:"declared,equal,replicate,size"`
	DeclaredNu        *float64 `json:"declared_nu,omitempty" doc:"Degrees of freedom of declared uncertainties; left out: known."`
	AllowSingleAnchor bool     `json:"allow_single_anchor,omitempty"`
}

func (m Model) body() calib.Model {
	return calib.Model{Drift: calib.Drift(m.Drift), Size: calib.Size(m.Size), Memory: calib.Memory(m.Memory), Weights: calib.Weights(m.Weights),
		DeclaredDF: m.DeclaredNu, AllowSingleAnchor: m.AllowSingleAnchor}
}

func showModel(m calib.Model) Model {
	return Model{string(m.Drift), string(m.Size), string(m.Memory), string(m.Weights), m.DeclaredDF, m.AllowSingleAnchor}
}

// Limits are acceptance limits; absent ones are not asked for.
type Limits struct {
	Probability       float64 `json:"probability,omitempty" doc:"Coverage probability of U; left out: 0.95."`
	CoverageFactor    float64 `json:"k,omitempty" doc:"Fixes k; left out: from the effective degrees of freedom."`
	LeftOut           float64 `json:"left_out_z,omitempty"`
	Studentized       float64 `json:"studentized,omitempty"`
	MinimumSpan       float64 `json:"minimum_span,omitempty" doc:"‰"`
	AdvisedSpan       float64 `json:"advised_span,omitempty" doc:"‰"`
	MinimumAnchors    int     `json:"minimum_anchors,omitempty"`
	SlopeFrom         float64 `json:"slope_from,omitempty" doc:"Raw per true."`
	SlopeTo           float64 `json:"slope_to,omitempty"`
	ControlDeviation  float64 `json:"control_deviation,omitempty" doc:"‰"`
	ReplicateSD       float64 `json:"replicate_sd,omitempty" doc:"‰"`
	ControlRequired   bool    `json:"control_required,omitempty"`
	MinimumResolution float64 `json:"minimum_resolution,omitempty" doc:"Of neighbouring peaks of one analysis; 1.5 separates them to the base line."`
	TestLevel         float64 `json:"test_level,omitempty" doc:"p-value below which a test of the fit is flagged; left out: 0.05."`
	HistoryLimit      float64 `json:"history_limit,omitempty" doc:"Flags a slope, intercept or drift further than so many standard deviations from the instrument's history; left out: 3."`
	HistorySessions   int     `json:"history_sessions,omitempty" doc:"How many approved sessions of the instrument are its history; left out: 30."`
}

// A Component is an uncertainty component of a method.
type Component struct {
	U        float64  `json:"u" doc:"Standard uncertainty (‰)."`
	Nu       *float64 `json:"nu,omitempty" doc:"Degrees of freedom; left out: known."`
	Evidence string   `json:"evidence,omitempty" maxLength:"1000"`
	Common   bool     `json:"common,omitempty" doc:"One for the whole session instead of one for each subject."`
}

func (c *Component) body() *store.Component {
	if c == nil {
		return nil
	}
	return &store.Component{StandardUncertainty: c.U, DegreesOfFreedom: c.Nu, Evidence: c.Evidence, Common: c.Common}
}

func showComponent(c *store.Component) *Component {
	if c == nil {
		return nil
	}
	return &Component{c.StandardUncertainty, c.DegreesOfFreedom, c.Evidence, c.Common}
}

// A MaterialRole is the role of a material in sessions of the method.
type MaterialRole struct {
	Material string `json:"material" maxLength:"40"`
	Role     string `json:"role" enum:"anchor,control,monitor,blank,gas,conditioning,sample"`
}

// A Correction says where one correction is made.
type Correction struct {
	Name      string   `json:"name" maxLength:"40" example:"o17"`
	Quantity  string   `json:"quantity,omitempty" maxLength:"20" doc:"Left out: all of them."`
	State     string   `json:"state" enum:"earlier,here,not applicable,not said"`
	By        string   `json:"by,omitempty" maxLength:"200" doc:"What made it, where that was earlier."`
	Constants string   `json:"constants,omitempty" maxLength:"1000"`
	Relations []string `json:"relations,omitempty" maxItems:"20" doc:"Codes of registered relations whose constants it used; a session pins their versions."`
}

// An Approval says who approves.
type Approval struct {
	SecondPerson bool   `json:"second_person,omitempty" doc:"Another person than the author."`
	Role         string `json:"role,omitempty" enum:"signatory,manager" doc:"Left out: signatory."`
}

// A FinalRule says, before the data, how a final value comes from sessions.
type FinalRule struct {
	SessionsRequired int    `json:"sessions_required,omitempty" minimum:"0" doc:"Left out: one."`
	Rule             string `json:"rule,omitempty" maxLength:"100" doc:"Left out: one accepted session."`
	Complete         bool   `json:"complete,omitempty" doc:"A report that the completeness check finds incomplete is refused; left out: it is told what is missing."`
}

// A Mapping says how a table of raw deltas is read.
type Mapping struct {
	Format     string            `json:"format,omitempty" enum:"csv,tsv,xlsx" doc:"Left out: by what the bytes are."`
	Sheet      string            `json:"sheet,omitempty" maxLength:"100" doc:"Of a workbook; left out: the first."`
	HeaderRow  int               `json:"header_row,omitempty" minimum:"0" doc:"From 1; left out: the first."`
	Encoding   string            `json:"encoding,omitempty" enum:"utf-8,utf-16le,utf-16be,windows-1252,iso-8859-1" doc:"Left out: a byte order mark, else UTF-8."`
	Delimiter  string            `json:"delimiter,omitempty" maxLength:"1"`
	Decimal    string            `json:"decimal,omitempty" pattern:"^[.,]$" doc:"The decimal sign; left out: a point."`
	Zone       string            `json:"zone,omitempty" maxLength:"60" doc:"Zone of times without offset; left out: UTC." example:"Europe/Lisbon"`
	TimeLayout string            `json:"time_layout,omitempty" maxLength:"60" doc:"Made of YYYY MM DD hh mm ss." example:"DD/MM/YYYY hh:mm:ss"`
	Columns    Columns           `json:"columns"`
	Quantities []QuantityColumns `json:"quantities" maxItems:"20"`
	WidthBy    string            `json:"width_by,omitempty" enum:"base,half-height" doc:"Where the widths of peaks are measured."`
	RoleWords  map[string]string `json:"role_words,omitempty" doc:"What the words of the role column mean."`
}

// Columns are headings of columns that belong to a whole row.
type Columns struct {
	Name        string `json:"name" maxLength:"200"`
	Role        string `json:"role,omitempty" maxLength:"200"`
	Unit        string `json:"unit,omitempty" maxLength:"200"`
	Analysis    string `json:"analysis,omitempty" maxLength:"200"`
	Preparation string `json:"preparation,omitempty" maxLength:"200"`
	Position    string `json:"position,omitempty" maxLength:"200"`
	Peak        string `json:"peak,omitempty" maxLength:"200"`
	Time        string `json:"time,omitempty" maxLength:"200"`
	Date        string `json:"date,omitempty" maxLength:"200"`
	Amount      string `json:"amount,omitempty" maxLength:"200"`
	AmountUnit  string `json:"amount_unit,omitempty" enum:"mg,ug,g" doc:"Of the figures in that column; left out: mg, in which they are kept."`
	Compound    string `json:"compound,omitempty" maxLength:"200"`
	Retention   string `json:"retention,omitempty" maxLength:"200"`
	Width       string `json:"width,omitempty" maxLength:"200" doc:"Of the peak, in the unit of its retention."`
	Group       string `json:"group,omitempty" maxLength:"200"`
	Warning     string `json:"warning,omitempty" maxLength:"200"`
}

// QuantityColumns are the columns of one quantity.
type QuantityColumns struct {
	Quantity     string     `json:"quantity" maxLength:"20"`
	Raw          string     `json:"raw" maxLength:"200"`
	U            string     `json:"u,omitempty" maxLength:"200"`
	Size         string     `json:"size,omitempty" maxLength:"200"`
	Intensity    string     `json:"intensity,omitempty" maxLength:"200" doc:"The peak's m/z 2 intensity, for the H3 factor."`
	GasIntensity string     `json:"gas_intensity,omitempty" maxLength:"200" doc:"The reference pulse's m/z 2 intensity."`
	GasRatio     string     `json:"gas_ratio,omitempty" maxLength:"200" doc:"The reference pulse's ratio of m/z 3 to m/z 2."`
	When         *Condition `json:"when,omitempty" doc:"Only rows in which a column has a value."`
	Optional     bool       `json:"optional,omitempty" doc:"May be empty in a row, which then gives no reading of it."`
}

// A Condition holds for rows in which the column's text equals equals.
type Condition struct {
	Column string `json:"column" maxLength:"200"`
	Equals string `json:"equals" maxLength:"200"`
}

func (m *Mapping) body() *store.Mapping {
	if m == nil {
		return nil
	}
	out := &store.Mapping{Format: m.Format, Sheet: m.Sheet, HeaderRow: m.HeaderRow, Encoding: m.Encoding, Delimiter: m.Delimiter, Decimal: m.Decimal,
		Zone: m.Zone, TimeLayout: m.TimeLayout, WidthBy: m.WidthBy, Columns: store.Columns(m.Columns)}
	out.Quantities = convert(m.Quantities, func(q QuantityColumns) store.QuantityColumns {
		s := store.QuantityColumns{Quantity: q.Quantity, Raw: q.Raw, U: q.U, Size: q.Size, Intensity: q.Intensity, GasIntensity: q.GasIntensity, GasRatio: q.GasRatio, Optional: q.Optional}
		if q.When != nil {
			when := store.Condition(*q.When)
			s.When = &when
		}
		return s
	})
	for word, role := range m.RoleWords {
		if out.RoleWords == nil {
			out.RoleWords = map[string]calib.Role{}
		}
		out.RoleWords[word] = calib.Role(role)
	}
	return out
}

func showMapping(m *store.Mapping) *Mapping {
	if m == nil {
		return nil
	}
	out := &Mapping{Format: m.Format, Sheet: m.Sheet, HeaderRow: m.HeaderRow, Encoding: m.Encoding, Delimiter: m.Delimiter, Decimal: m.Decimal,
		Zone: m.Zone, TimeLayout: m.TimeLayout, WidthBy: m.WidthBy, Columns: Columns(m.Columns)}
	out.Quantities = convert(m.Quantities, func(q store.QuantityColumns) QuantityColumns {
		s := QuantityColumns{Quantity: q.Quantity, Raw: q.Raw, U: q.U, Size: q.Size, Intensity: q.Intensity, GasIntensity: q.GasIntensity, GasRatio: q.GasRatio, Optional: q.Optional}
		if q.When != nil {
			when := Condition(*q.When)
			s.When = &when
		}
		return s
	})
	for word, role := range m.RoleWords {
		if out.RoleWords == nil {
			out.RoleWords = map[string]string{}
		}
		out.RoleWords[word] = string(role)
	}
	return out
}

func (b MethodBody) body() store.Method {
	return store.Method{Title: b.Title, Procedure: b.Procedure,
		Quantities: convert(b.Quantities, func(q MethodQuantity) store.MethodQuantity {
			return store.MethodQuantity{Quantity: q.Quantity, Scale: q.Scale, Measurand: q.Measurand, Model: q.Model.body(), Limits: store.Limits(q.Limits),
				BetweenSession: q.BetweenSession.body(), SampleHomogeneity: q.SampleHomogeneity.body(), Roles: convertOrNil(q.Roles, func(r MaterialRole) store.MaterialRole {
					return store.MaterialRole{Material: r.Material, Role: calib.Role(r.Role)}
				}), H3: pointed(q.H3, func(r H3Rule) store.H3Rule { return store.H3Rule(r) }), Blank: pointed(q.Blank, BlankRule.body),
				Repeats: pointed(q.Repeats, func(r Repeats) store.Repeats { return store.Repeats(r) })}
		}),
		Corrections: convertOrNil(b.Corrections, func(c Correction) store.Correction { return store.Correction(c) }), Mapping: b.Import.body(),
		Approval: store.Approval(b.Approval), Final: store.FinalRule(b.Final)}
}

// A Method is a version of a measurement procedure.
type Method struct {
	Recorded
	MethodBody
}

func showMethod(it registry.Item[store.Method]) Method {
	m := it.Value
	return Method{recorded(it), MethodBody{Title: m.Title, Procedure: m.Procedure,
		Quantities: convert(m.Quantities, func(q store.MethodQuantity) MethodQuantity {
			return MethodQuantity{Quantity: q.Quantity, Scale: q.Scale, Measurand: q.Measurand, Model: showModel(q.Model), Limits: Limits(q.Limits),
				BetweenSession: showComponent(q.BetweenSession), SampleHomogeneity: showComponent(q.SampleHomogeneity), Roles: convertOrNil(q.Roles, func(r store.MaterialRole) MaterialRole {
					return MaterialRole{r.Material, string(r.Role)}
				}), H3: pointed(q.H3, func(r store.H3Rule) H3Rule { return H3Rule(r) }), Blank: pointed(q.Blank, showBlankRule),
				Repeats: pointed(q.Repeats, func(r store.Repeats) Repeats { return Repeats(r) })}
		}),
		Corrections: showCorrections(m.Corrections), Import: showMapping(m.Mapping), Approval: Approval(m.Approval), Final: FinalRule(m.Final)}}
}

func showCorrections(list []store.Correction) []Correction {
	return convertOrNil(list, func(c store.Correction) Correction {
		if c.State == "" {
			c.State = "not said"
		}
		return Correction(c)
	})
}

var methodKind = kindOfRecord[store.Method, Method]{kind: store.KindMethod, show: showMethod,
	csv: table[Method]{columns("title", "quantities"), func(m Method) []string {
		return m.row(m.Title, spaced(convert(m.Quantities, func(q MethodQuantity) string { return q.Quantity })))
	}}}

// A NewMethod states a method: a draft, to be approved by a decision.
type NewMethod struct {
	Code string `json:"code" maxLength:"40" example:"EA-CN"`
	MethodBody
}

func (f *face) addMethod(ctx context.Context, actor registry.Actor, in *struct{ Body NewMethod }) (*one[Method], error) {
	it, err := f.registry.StateMethod(ctx, actor, in.Body.Code, in.Body.body(), registry.Edit{})
	if err != nil {
		return nil, err
	}
	return &one[Method]{ETag: quoteTag(it.Tag()), Location: "/v1/methods/" + url.PathEscape(it.Code), Body: showMethod(it)}, nil
}

// A MethodChange states a further version of a method, whole.
type MethodChange struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000"`
	MethodBody
}

func (f *face) changeMethod(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body MethodChange
}) (*one[Method], error) {
	before, err := seen[store.Method](ctx, f, actor, store.KindMethod, in.Code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	it, err := f.registry.StateMethod(ctx, actor, before.Code, in.Body.body(), registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Method]{ETag: quoteTag(it.Tag()), Body: showMethod(it)}, nil
}
