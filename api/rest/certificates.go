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

// A Certificate is the product information sheet of a material with its
// assigned values. Deltas and u in ‰.
type Certificate struct {
	Identifier     string               `json:"identifier"`
	Laboratory     string               `json:"laboratory"`
	LaboratoryName string               `json:"laboratory_name"`
	Material       string               `json:"material"`
	Name           string               `json:"name"`
	Substance      string               `json:"substance,omitempty"`
	Formula        string               `json:"formula,omitempty"`
	Matrix         string               `json:"matrix,omitempty"`
	Producer       string               `json:"producer,omitempty"`
	Lot            string               `json:"lot,omitempty"`
	Preparation    string               `json:"preparation,omitempty"`
	Storage        string               `json:"storage,omitempty"`
	MinimumPortion *Amount              `json:"minimum_portion,omitempty"`
	Hazards        []HazardStatement    `json:"hazards"`
	Caution        string               `json:"caution,omitempty"`
	IssuedAt       time.Time            `json:"issued_at"`
	Values         []CertificateValue   `json:"values"`
	Signatures     []CertificateSigning `json:"signatures"`
}

// A HazardStatement is a GHS code with its sentence.
type HazardStatement struct {
	Code string `json:"code" example:"H319"`
	Text string `json:"text" doc:"Empty where the list of statements does not have the code."`
}

// A CertificateValue is one assigned value on a certificate.
type CertificateValue struct {
	Version      string              `json:"version" doc:"The version of the value."`
	Hash         string              `json:"hash"`
	Scale        string              `json:"scale"`
	Measurand    string              `json:"measurand"`
	Quantity     string              `json:"quantity"`
	Value        Decimal             `json:"value"`
	U            *float64            `json:"u" doc:"Null where no uncertainty is stated."`
	K            float64             `json:"k"`
	Expanded     *float64            `json:"U"`
	P            float64             `json:"p"`
	NuEff        *float64            `json:"nu_eff" doc:"Null where u is known."`
	ValueText    string              `json:"value_text" doc:"Rounded together with U, to two digits of U."`
	ExpandedText string              `json:"U_text"`
	Basis        string              `json:"basis"`
	Evidence     string              `json:"evidence,omitempty"`
	BackLoaded   bool                `json:"back_loaded" doc:"Assigned before the registry was in use."`
	ValidFrom    *time.Time          `json:"valid_from"`
	ExpiresAt    *time.Time          `json:"expires_at"`
	DriftPerDay  *float64            `json:"drift_per_day,omitempty"`
	Campaign     string              `json:"campaign,omitempty"`
	Sessions     int                 `json:"sessions,omitempty"`
	First        *time.Time          `json:"first_session,omitempty"`
	Last         *time.Time          `json:"last_session,omitempty"`
	Estimator    string              `json:"estimator,omitempty"`
	Deviation    string              `json:"deviation,omitempty"`
	Homogeneity  string              `json:"homogeneity,omitempty"`
	Stability    string              `json:"stability,omitempty"`
	Minimum      float64             `json:"minimum_portion_mg,omitempty" doc:"The largest test portion of the homogeneity study."`
	Budget       []CampaignBudget    `json:"budget"`
	Anchors      []CertificateAnchor `json:"anchors" doc:"What the value is traceable through."`
}

// A CertificateAnchor is a value that the sessions of a campaign were tied to.
type CertificateAnchor struct {
	Material string  `json:"material"`
	Version  string  `json:"version"`
	Value    Decimal `json:"value"`
	U        float64 `json:"u"`
	Basis    string  `json:"basis"`
}

// A CertificateSigning is a person's part in a value.
type CertificateSigning struct {
	Person  string    `json:"person"`
	Name    string    `json:"name"`
	Meaning string    `json:"meaning" enum:"made,approved"`
	Of      string    `json:"of"`
	At      time.Time `json:"at"`
}

func showCertificate(c registry.Certificate) Certificate {
	return Certificate{Identifier: c.Identifier, Laboratory: c.Laboratory, LaboratoryName: c.LaboratoryName, Material: c.Material, Name: c.Name, Substance: c.Substance, Formula: c.Formula,
		Matrix: c.Matrix, Producer: c.Producer, Lot: c.Lot, Preparation: c.Preparation, Storage: c.Storage, MinimumPortion: showAmount(c.MinimumPortion),
		Hazards: convert(c.Hazards, func(h registry.HazardStatement) HazardStatement { return HazardStatement(h) }), Caution: c.Caution, IssuedAt: c.IssuedAt.Time(),
		Values: convert(c.Values, func(v registry.CertificateValue) CertificateValue {
			out := CertificateValue{Version: versionText(store.KindValue, v.Code, v.Version), Hash: v.Hash.String(), Scale: v.Scale, Measurand: v.Measurand, Quantity: v.Quantity, Value: Decimal(v.Value),
				K: v.K, P: v.P, NuEff: v.NuEff, ValueText: v.ValueText, ExpandedText: v.ExpandedText, Basis: v.Basis, Evidence: v.Evidence, BackLoaded: v.BackLoaded,
				ValidFrom: timePointer(v.ValidFrom), ExpiresAt: timePointer(v.ExpiresAt), DriftPerDay: v.DriftPerDay, Sessions: v.Sessions, First: timePointer(v.First), Last: timePointer(v.Last),
				Estimator: v.Estimator, Deviation: v.Deviation, Homogeneity: v.Homogeneity, Stability: v.Stability, Minimum: v.MinimumPortion,
				Budget: convert(v.Budget, func(b store.CampaignBudget) CampaignBudget { return CampaignBudget(b) }),
				Anchors: convert(v.Anchors, func(a registry.CertificateAnchor) CertificateAnchor {
					return CertificateAnchor{a.Material, a.Version, Decimal(a.Value), a.U, a.Basis}
				})}
			if v.U > 0 || v.Exact {
				out.U, out.Expanded = &v.U, &v.Expanded
			}
			if v.Campaign != "" {
				out.Campaign = store.FormatCode(v.Campaign)
			}
			return out
		}),
		Signatures: convert(c.Signatures, func(s registry.CertificateSignature) CertificateSigning {
			return CertificateSigning{s.Person, s.Name, s.Meaning, s.Of, s.At.Time()}
		})}
}

// CertificateForm chooses between JSON, page and XML.
type CertificateForm struct {
	Format string `query:"format" enum:"json,html,xml" doc:"html is a page for printing, xml a digital calibration certificate; the header Accept does the same."`
	format string
}

// Resolve settles the form.
func (p *CertificateForm) Resolve(ctx huma.Context) []error {
	p.format = p.Format
	if p.format == "" {
		p.format = map[string]string{"text/html": "html", "application/xml": "xml"}[accepted(ctx.Header("Accept"), "application/json", "text/html", "application/xml")]
	}
	return nil
}

// certificate answers with the certificate of a material, in the form that was asked for.
func (f *face) certificate(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MomentParams
	CertificateForm
	Language string `query:"language" enum:"en,de,fr,es" doc:"Of the hazard statements; left out: en."`
	Country  string `query:"country" pattern:"^[A-Z]{2}$" doc:"Of the laboratory, in the XML (ISO 3166-1); left out: ZZ."`
}) (*answer, error) {
	c, err := f.registry.Certificate(ctx, actor, registry.CertificateRequest{Material: in.Code, Language: in.Language, Moment: in.moment()})
	if err != nil {
		return nil, err
	}
	var b bytes.Buffer
	switch in.format {
	case "html":
		if err := exchange.WriteCertificatePage(&b, c); err != nil {
			return nil, err
		}
		return pageAnswer(b.Bytes()), nil
	case "xml":
		if err := exchange.WriteDCC(&b, c, exchange.DCCOptions{Country: in.Country, Release: f.options.Version}); err != nil {
			return nil, err
		}
		return textAnswer("application/xml", b.Bytes()), nil
	}
	return jsonAnswer(showCertificate(c), 200, nil)
}
