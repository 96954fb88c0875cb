package registry

import (
	"fmt"
	"math"
	"strings"

	"deltamoor/store"
)

// A description is what a version's body says of itself in a trace. It follows
// from the body alone, so it is known by the body's hash.
type description struct {
	key     store.Key
	version int
	node    TraceNode // without depth, time, state and decisions
	inputs  []store.Input
	// subject is what a final value or an assigned value was measured on: the result
	// of its members that the trace follows.
	subject string
	// shares are the variance shares of a calibration's inputs, by subject and index.
	shares map[string]map[int]float64
}

// fill gives a node what its body says.
func (d *description) fill(n *TraceNode) {
	depth := n.Depth
	*n = d.node
	n.Depth = depth
}

func describeVersion(raw store.Raw) (*description, error) {
	d := &description{key: raw.Key, version: raw.Ref.Version, inputs: raw.Inputs}
	n := &d.node
	n.Ref, n.Title = raw.Ref, versionName(raw.Ref)
	n.RecordedAt, n.RecordedBy, n.ValidFrom, n.Reason = raw.RecordedAt, raw.RecordedBy, raw.ValidFrom, raw.Reason
	switch raw.Kind {
	case store.KindFinal:
		f, err := store.Decode[store.Final](raw)
		if err != nil {
			return nil, err
		}
		n.Value, n.StandardUncertainty = &f.Value.Value, &f.Value.StandardUncertainty
		n.Title = fmt.Sprintf("final value of sample %s on %s", store.FormatCode(f.Value.Sample), f.Value.Scale)
		n.Detail = f.Value.Rule
		d.subject = f.Value.Sample
	case store.KindCalibration:
		c, err := store.Decode[store.Calibration](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("calibration of %s in session %s on %s", c.Value.Quantity, store.FormatCode(c.Value.Session), c.Value.Scale)
		n.Detail = calibrationDetail(c.Value)
		d.shares = anchorShares(c)
	case store.KindValue:
		return d, d.value(raw)
	case store.KindScale:
		s, err := store.Decode[store.Scale](raw)
		if err != nil {
			return nil, err
		}
		var points []string
		for _, a := range s.Value.Anchors {
			points = append(points, fmt.Sprintf("%s %s ‰ (%s)", a.Material, a.Value, a.Uncertainty))
		}
		n.Title, n.Leaf = "scale "+raw.Code, "defines the scale"
		n.Detail = strings.Join(points, "; ")
	case store.KindMaterial:
		m, err := store.Decode[store.Material](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Leaf = "material "+raw.Code, "a material"
		n.Detail = strings.Trim(strings.Join([]string{m.Value.Name, m.Value.Substance, m.Value.Status}, "; "), "; ")
	case store.KindSession:
		s, err := store.Decode[store.Session](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = fmt.Sprintf("%d readings on %s by %s", s.Value.Readings, s.Value.Instrument, s.Value.Operator)
		if s.Value.Upload != nil {
			n.Detail += fmt.Sprintf(", from %s, SHA-256 %s", nameOr(s.Value.UploadName, "a request"), s.Value.Upload)
		}
	case store.KindMethod:
		m, err := store.Decode[store.Method](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = m.Value.Title
	case store.KindFactor:
		f, err := store.Decode[store.Factor](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("H3 factor of %s, determined %s", f.Code, f.Value.DeterminedAt.Time().Format("2006-01-02 15:04"))
		n.Detail = factorDetail(f.Value)
	case store.KindRelation:
		rel, err := store.Decode[store.Relation](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Leaf = "relation "+raw.Code, "published or stated"
		n.Detail = strings.Trim(strings.Join([]string{relationText(rel.Value), rel.Value.Evidence}, "; "), "; ")
	case store.KindReport:
		rep, err := store.Decode[store.Report](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = rep.Value.Title
	case store.KindAssignment:
		p, err := store.Decode[store.Assignment](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Detail = "campaign "+store.FormatCode(raw.Code), p.Value.Title
	case store.KindStudy:
		s, err := store.Decode[store.Study](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("study of %s for campaign %s", s.Value.Of, store.FormatCode(s.Value.Assignment))
		n.Detail = fmt.Sprintf("%d measurements on %s", len(s.Value.Measurements), s.Value.Scale)
	case store.KindExclusion:
		x, err := store.Decode[store.Exclusion](raw)
		if err != nil {
			return nil, err
		}
		n.Title = "exclusions in session " + store.FormatCode(raw.Code)
		n.Detail = fmt.Sprintf("%s readings %s: %s", x.Value.Act, intsText(x.Value.Readings), x.Value.Cause)
	case store.KindOutcome:
		o, err := store.Decode[store.Outcome](raw)
		if err != nil {
			return nil, err
		}
		n.Title = fmt.Sprintf("outcome of session %s for %s", store.FormatCode(o.Value.Session), o.Value.Quantity)
		n.Detail = o.Value.Outcome
	case store.KindDocument:
		f, err := store.Decode[store.Upload](raw)
		if err != nil {
			return nil, err
		}
		n.Title, n.Leaf = "file "+nameOr(f.Value.Name, "without a name"), "bytes as they came"
		n.Detail = fmt.Sprintf("%d bytes, SHA-256 %s", f.Value.Size, raw.Code)
	case store.KindUnit:
		u, err := store.Decode[store.Unit](raw)
		if err != nil {
			return nil, err
		}
		n.Detail = fmt.Sprintf("%s, %s, %s", u.Value.Material, u.Value.Label, u.Value.State)
	}
	return d, nil
}

func (d *description) value(raw store.Raw) error {
	n := &d.node
	val, err := store.Decode[store.Value](raw)
	if err != nil {
		return err
	}
	number, _, err := numberOf(val)
	if err != nil {
		return err
	}
	u := val.Value.StandardUncertainty
	n.Value, n.StandardUncertainty = &number.Value, &u
	n.Title = fmt.Sprintf("value of %s on %s", val.Value.Material, val.Value.Scale)
	if val.Value.Measurand != Total {
		n.Title += " (" + val.Value.Measurand + ")"
	}
	n.Detail = strings.Trim(val.Value.Basis+": "+val.Value.Evidence, ": ")
	if val.Value.BackLoaded {
		n.Detail = BackLoadReason + "; " + n.Detail
	}
	if val.Value.Sources == nil {
		n.Leaf = val.Value.Basis
	}
	d.subject = val.Value.Material
	return nil
}

func calibrationDetail(c store.Calibration) string {
	words := []string{"intercept", "slope"}
	if c.Model.Drift != "" && c.Model.Drift != "none" {
		words = append(words, string(c.Model.Drift)+" drift")
	}
	if c.Model.Size != "" && c.Model.Size != "none" {
		words = append(words, string(c.Model.Size)+" size term")
	}
	text := strings.Join(words, ", ") + fmt.Sprintf("; weights %s; engine %s", nameOr(string(c.Model.Weights), "declared"), c.Engine)
	var before []string
	for _, k := range c.Corrections {
		before = append(before, fmt.Sprintf("%s %.4g", k.Name, k.Value))
	}
	if len(before) > 0 {
		text += "; before the fit: " + strings.Join(before, ", ")
	}
	if n := len(c.SetAside); n > 0 {
		text += fmt.Sprintf("; %d readings set aside by the method's rule", n)
	}
	if n := len(c.Means); n > 0 {
		text += fmt.Sprintf("; the rest as %d means", n)
	}
	if len(c.Excluded) > 0 {
		text += "; readings left out: " + intsText(c.Excluded)
	}
	return text
}

func intsText(numbers []int) string {
	words := make([]string, len(numbers))
	for i, n := range numbers {
		words[i] = fmt.Sprint(n)
	}
	return short(words, 20)
}

// anchorShares gives, for each result, the share of its variance that each
// anchor's value brings, by the index of the input: (gᵀ·∂θ/∂y_k)²·u²(y_k)/u².
// Where anchors are correlated these do not sum to the anchors' whole part; the
// budget of the result has that.
func anchorShares(c store.Version[store.Calibration]) map[string]map[int]float64 {
	all := make(map[string]map[int]float64, len(c.Value.Results))
	for _, res := range c.Value.Results {
		u2 := res.StandardUncertainty * res.StandardUncertainty
		if _, first := all[res.Subject]; first || u2 == 0 {
			continue
		}
		shares := make(map[int]float64, len(c.Value.Anchors))
		k := 0
		for j, in := range c.Inputs {
			if in.Kind == store.KindFactor {
				for _, s := range res.Sources {
					if s.ID == factorSource(in.Ref) {
						shares[j] = s.VarianceShare
					}
				}
			}
			if in.Part != "anchor" {
				continue
			}
			coefficient := 0.0
			for p, g := range res.Gradient {
				if p < len(c.Value.AnchorSensitivities) && k < len(c.Value.AnchorSensitivities[p]) {
					coefficient += g * c.Value.AnchorSensitivities[p][k]
				}
			}
			if k < len(c.Value.Anchors) {
				part := coefficient * c.Value.Anchors[k].StandardUncertainty
				if share := part * part / u2; !math.IsNaN(share) {
					shares[j] = share
				}
			}
			k++
		}
		all[res.Subject] = shares
	}
	return all
}
