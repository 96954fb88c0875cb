package registry

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A Certificate is the product information sheet of a material with its
// assigned values as they hold at one moment. It is the one document that the
// page and the XML are made of.
type Certificate struct {
	// Identifier is the certificate's own: laboratory, material and the ledger position it was drawn at.
	Identifier     string
	Laboratory     string
	LaboratoryName string

	Material           string
	MaterialLaboratory string
	Name, Substance    string
	Formula, Matrix    string
	Producer, Lot      string
	Status             string
	Preparation        string
	Storage            string
	MinimumPortion     *store.Amount
	Hazards            []HazardStatement
	Caution            string
	Language           string
	IssuedAt           store.Instant
	Values             []CertificateValue
	// Signatures are the people who made and approved the values.
	Signatures []CertificateSignature
}

// A CertificateValue is one assigned value on a certificate. All numbers in ‰.
type CertificateValue struct {
	Code                       string // of the value, with its version
	Version                    int
	Hash                       store.Hash
	Scale, Measurand, Quantity string

	Value  store.Decimal
	Number float64
	// U is 0 with Exact, and where no uncertainty is stated.
	U        float64
	Exact    bool
	K        float64
	Expanded float64
	P        float64
	NuEff    *float64 // nil where u is known
	// ValueText and ExpandedText are rounded together, to two digits of U.
	ValueText, ExpandedText string

	Basis, Evidence string
	BackLoaded      bool
	ValidFrom       *store.Instant
	ExpiresAt       *store.Instant
	DriftPerDay     *float64

	// Budget and what follows are those of a campaign.
	Campaign    string
	Budget      []store.CampaignBudget
	Sessions    int
	First, Last *store.Instant
	Estimator   string
	Deviation   string
	Homogeneity string // what was done, or why nothing was
	Stability   string
	// MinimumPortion is the largest test portion of the homogeneity study, in mg; 0 where none was recorded.
	MinimumPortion float64
	// Anchors are what the value is traceable through.
	Anchors []CertificateAnchor
}

// A CertificateAnchor is a value that the sessions of a campaign were tied to.
type CertificateAnchor struct {
	Material string
	Version  string
	Value    store.Decimal
	U        float64
	Basis    string
}

// A CertificateSignature is a person's part in a value.
type CertificateSignature struct {
	Person, Name string
	Meaning      string // "made" or "approved"
	Of           string // the version
	At           store.Instant
}

// CertificateRequest asks for the certificate of a material.
type CertificateRequest struct {
	Material string
	// Language of the hazard statements; "" is English.
	Language string
	Moment   store.Moment
}

// Certificate draws up the certificate of a material from its approved values.
// Nothing is stored: the versions it names say the same for ever.
func (r *Registry) Certificate(ctx context.Context, actor Actor, q CertificateRequest) (Certificate, error) {
	out := Certificate{Laboratory: actor.Laboratory, Language: nameOr(q.Language, "en")}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Certificate{Laboratory: actor.Laboratory, Language: nameOr(q.Language, "en")}
		lab, err := newest[store.Laboratory](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindLaboratory, Code: actor.Laboratory})
		if err != nil {
			return err
		}
		out.LaboratoryName = lab.Value.Name
		key, err := findMaterial(ctx, v, actor.Laboratory, q.Material)
		if err != nil {
			return err
		}
		raw, _, err := v.InForce(ctx, key, q.Moment)
		if err != nil {
			return missing(err, key)
		}
		m, err := store.Decode[store.Material](raw)
		if err != nil {
			return err
		}
		if err := out.material(key, m); err != nil {
			return err
		}
		raws, _, err := v.List(ctx, store.ListQuery{Laboratory: actor.Laboratory, Kind: store.KindValue, Prefix: key.Code + "/", Limit: MaxPage, Moment: q.Moment})
		if err != nil {
			return err
		}
		for _, held := range raws {
			if held.State == store.Withdrawn {
				continue
			}
			it, err := item[store.Value](ctx, v, held.Raw, q.Moment)
			if err != nil {
				return err
			}
			if err := out.value(ctx, v, it); err != nil {
				return err
			}
		}
		if len(out.Values) == 0 {
			return Refuse(Conflict, "material %s has no approved value of laboratory %s in force at that moment; there is nothing to certify", key.Code, actor.Laboratory)
		}
		moment, head, err := v.Moment(ctx, actor.Laboratory, q.Moment)
		if err != nil {
			return err
		}
		out.IssuedAt = max(*moment.AsOf, head.At)
		if q.Moment.AsOf != nil {
			out.IssuedAt = *moment.AsOf
		}
		out.Identifier = fmt.Sprintf("%s/%s/%s", actor.Laboratory, key.Code, out.versions())
		return nil
	})
	return out, err
}

// versions names the versions of the values, which make the certificate what it is.
func (c *Certificate) versions() string {
	var parts []string
	for _, v := range c.Values {
		parts = append(parts, fmt.Sprintf("%s.%d", v.Scale, v.Version))
	}
	return strings.Join(parts, "+")
}

func (c *Certificate) material(key store.Key, m store.Version[store.Material]) error {
	b := m.Value
	c.Material, c.MaterialLaboratory = key.Code, key.Laboratory
	c.Name, c.Substance, c.Formula, c.Matrix, c.Producer, c.Lot, c.Status = b.Name, b.Substance, b.Formula, b.Matrix, b.Producer, b.Lot, b.Status
	h, err := handlingOf(m, c.Language)
	c.Preparation, c.Storage, c.MinimumPortion, c.Hazards, c.Caution = h.Preparation, h.Storage, h.MinimumPortion, h.Hazards, h.Caution
	return err
}

const deferral = "The safety data sheet, local rules and trained staff decide how the material is handled."

// cautionOf is the usual caution for gases; "" for other materials.
func cautionOf(m store.Material) string {
	flammable, compressed := false, m.Kind == "gas"
	for _, h := range m.Hazards {
		flammable = flammable || h == "H220" || h == "H221"
		compressed = compressed || h == "H280" || h == "H281"
	}
	switch {
	case flammable:
		return "Flammable gas under pressure: keep away from ignition, secure the cylinder, ventilate and watch for leaks. " + deferral
	case compressed:
		return "Gas under pressure, which can also displace air: secure the cylinder and ventilate. " + deferral
	}
	return ""
}

func (c *Certificate) value(ctx context.Context, v *store.View, it Item[store.Value]) error {
	val := it.Value
	x, ok := new(complaints).number("", val.Value)
	if !ok {
		return fmt.Errorf("%s: stored value %q is not a number", it.Ref, val.Value)
	}
	scale, err := lookup(ctx, v, it.Laboratory, store.KindScale, val.Scale, 0, store.Moment{})
	if err != nil {
		return err
	}
	s, err := store.Decode[store.Scale](scale)
	if err != nil {
		return err
	}
	out := CertificateValue{Code: it.Code, Version: it.Ref.Version, Hash: it.Hash, Scale: val.Scale, Measurand: val.Measurand, Quantity: s.Value.Quantity,
		Value: val.Value, Number: x, U: val.StandardUncertainty, Exact: val.Exact, Basis: val.Basis, Evidence: val.Evidence, BackLoaded: val.BackLoaded, ValidFrom: it.ValidFrom, ExpiresAt: val.ExpiresAt}
	if r := val.Campaign; r != nil {
		out.K, out.Expanded, out.P, out.NuEff = r.K, r.Expanded, r.Probability, r.EffectiveDF
		out.Budget, out.Sessions, out.Estimator, out.Deviation, out.DriftPerDay = r.Budget, len(r.Sessions), r.Estimator, r.Deviation, r.DriftPerDay
		for _, line := range r.Sessions {
			if at := line.StartedAt; at != nil {
				if out.First == nil || *at < *out.First {
					out.First = at
				}
				if out.Last == nil || *at > *out.Last {
					out.Last = at
				}
			}
		}
		out.Homogeneity, out.Stability = studies(r)
		out.MinimumPortion = r.MinimumPortion
	} else {
		nu := math.Inf(1)
		if val.DegreesOfFreedom != nil {
			nu = *val.DegreesOfFreedom
		}
		e, err := uncertain.ExpandedFrom(val.StandardUncertainty, nu, uncertain.Coverage{})
		if err != nil {
			return err
		}
		out.K, out.Expanded, out.P, out.NuEff = e.CoverageFactor, e.U, e.Probability, val.DegreesOfFreedom
	}
	out.ValueText, out.ExpandedText = RoundTogether(x, out.Expanded)
	if out.U == 0 { // the digits are those that were stated
		out.ValueText, out.ExpandedText = string(val.Value), "none stated"
		if out.Exact {
			out.ExpandedText = "exact"
		}
	}
	for _, in := range it.Inputs {
		switch in.Part {
		case partCampaign:
			out.Campaign = in.Code
		case "member":
			if err := out.anchors(ctx, v, in.Ref); err != nil {
				return err
			}
		}
	}
	slices.SortFunc(out.Anchors, func(a, b CertificateAnchor) int { return strings.Compare(a.Version, b.Version) })
	c.Values = append(c.Values, out)
	return c.sign(ctx, v, it)
}

func studies(r *store.CampaignResult) (homogeneity, stability string) {
	homogeneity, stability = r.HomogeneityNot, r.StabilityNot
	if h := r.Homogeneity; h != nil {
		homogeneity = fmt.Sprintf("%d units, %d measurements", h.Units, h.Measurements)
	}
	if s := r.Stability; s != nil {
		what := "sessions"
		if s.Isochronous || s.Blocks > 0 {
			what = "measurements"
		}
		stability = fmt.Sprintf("%d %s over %.0f days, for a shelf life of %g days", s.Points, what, s.SpanDays, r.ShelfLifeDays)
		if s.Isochronous {
			stability += "; units stored for different times and measured together"
		}
	}
	if p := r.Prior; p != nil {
		if stability != "" {
			stability += "; "
		}
		stability += fmt.Sprintf("the study is planned for %.0f days and has run for %.0f; until it ends u = %.3g ‰ is taken from: %s", p.PlannedDays, p.SpanDays, p.StandardUncertainty, p.Evidence)
	}
	return homogeneity, stability
}

func (v *CertificateValue) anchors(ctx context.Context, view *store.View, calibration store.Ref) error {
	raw, err := view.Version(ctx, calibration.Key, calibration.Version)
	if err != nil {
		return err
	}
	for _, in := range raw.Inputs {
		name := fmt.Sprintf("%s.%d", in.Code, in.Ref.Version)
		if in.Part != "anchor" || slices.ContainsFunc(v.Anchors, func(a CertificateAnchor) bool { return a.Version == name }) {
			continue
		}
		anchor, err := decodeVersion[store.Value](ctx, view, in.Ref)
		if err != nil {
			return err
		}
		v.Anchors = append(v.Anchors, CertificateAnchor{Material: anchor.Value.Material, Version: name, Value: anchor.Value.Value, U: anchor.Value.StandardUncertainty, Basis: anchor.Value.Basis})
	}
	return nil
}

func (c *Certificate) sign(ctx context.Context, v *store.View, it Item[store.Value]) error {
	add := func(person, meaning string, at store.Instant) error {
		name := person
		raw, err := v.Newest(ctx, store.Key{Laboratory: it.Laboratory, Kind: store.KindPerson, Code: person})
		if ignoreNotFound(err) != nil {
			return err
		}
		if err == nil {
			p, err := store.Decode[store.Person](raw)
			if err != nil {
				return err
			}
			name = p.Value.Name
		}
		c.Signatures = append(c.Signatures, CertificateSignature{Person: person, Name: name, Meaning: meaning, Of: fmt.Sprintf("%s.%d", it.Code, it.Ref.Version), At: at})
		return nil
	}
	if err := add(it.RecordedBy, "made", it.RecordedAt); err != nil {
		return err
	}
	for _, d := range it.Decisions {
		if d.Value.Act == "approved" {
			if err := add(d.RecordedBy, "approved", d.RecordedAt); err != nil {
				return err
			}
		}
	}
	return nil
}

// RoundTogether writes a value and its expanded uncertainty with one number of
// decimals, from two digits of the uncertainty; an exact value keeps its digits.
func RoundTogether(value, expanded float64) (valueText, expandedText string) {
	if !(expanded > 0) {
		return strconv.FormatFloat(value, 'f', -1, 64), "0"
	}
	_, exponent, _ := strings.Cut(strconv.FormatFloat(expanded, 'e', 1, 64), "e") // of U rounded to two digits
	magnitude, err := strconv.Atoi(exponent)
	if err != nil { // infinite
		return strconv.FormatFloat(value, 'f', -1, 64), strconv.FormatFloat(expanded, 'f', -1, 64)
	}
	digits := 1 - magnitude
	digits = max(digits, 0)
	valueText = strconv.FormatFloat(value, 'f', digits, 64)
	if zero, err := strconv.ParseFloat(valueText, 64); err == nil && zero == 0 {
		valueText = strings.TrimPrefix(valueText, "-")
	}
	return valueText, strconv.FormatFloat(expanded, 'f', digits, 64)
}
