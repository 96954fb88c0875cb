package rest

import (
	"context"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Final is a version of the final value of one sample and quantity.
type Final struct {
	Recorded
	Sample    string        `json:"sample"`
	Quantity  string        `json:"quantity"`
	Scale     string        `json:"scale"`
	Measurand string        `json:"measurand"`
	Rule      string        `json:"rule" doc:"How it comes from the sessions; fixed in the method before the data."`
	Members   []FinalMember `json:"members"`
	Value     float64       `json:"value" doc:"‰"`
	U         float64       `json:"u" doc:"Standard uncertainty, k = 1 (‰)."`
	K         float64       `json:"k"`
	Expanded  float64       `json:"U" doc:"Expanded uncertainty k·u (‰)."`
	P         float64       `json:"p"`
	NuEff     *float64      `json:"nu_eff" doc:"null where infinite."`
	Flags     []string      `json:"flags"`
}

// A FinalMember is one session's result inside a final value.
type FinalMember struct {
	Calibration string  `json:"calibration"`
	Version     int     `json:"version"`
	Line        int     `json:"line" doc:"Index in the calibration's results."`
	Weight      float64 `json:"weight"`
}

func showFinal(it registry.Item[store.Final]) Final {
	v := it.Value
	return Final{Recorded: recorded(it), Sample: store.FormatCode(v.Sample), Quantity: v.Quantity, Scale: v.Scale, Measurand: v.Measurand, Rule: v.Rule,
		Members: convert(v.Members, func(m store.FinalMember) FinalMember {
			out := FinalMember{Line: m.Line, Weight: m.Weight}
			if m.Input >= 0 && m.Input < len(it.Inputs) {
				in := it.Inputs[m.Input]
				out.Calibration, out.Version = showCode(in.Kind, in.Code), in.Ref.Version
			}
			return out
		}), Value: v.Value, U: v.StandardUncertainty, K: v.K, Expanded: v.Expanded, P: v.Probability, NuEff: v.EffectiveDF, Flags: append([]string{}, v.Flags...)}
}

var finalKind = kindOfRecord[store.Final, Final]{kind: store.KindFinal, show: showFinal, made: true,
	csv: table[Final]{columns("sample", "quantity", "scale", "measurand", "value", "u", "k", "U", "p", "nu_eff", "sessions", "flags"), func(v Final) []string {
		members := len(v.Members)
		return v.row(v.Sample, v.Quantity, v.Scale, v.Measurand, number(v.Value), number(v.U), number(v.K), number(v.Expanded), number(v.P), optional(v.NuEff), whole(&members), spaced(v.Flags))
	}}}

// A NewFinal asks for the final value of a sample, by its method's rule.
type NewFinal struct {
	Sample    string `json:"sample" maxLength:"40"`
	Scale     string `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand string `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Reason    string `json:"reason,omitempty" maxLength:"4000"`
}

func (f *face) addFinal(ctx context.Context, actor registry.Actor, in *struct{ Body NewFinal }) (*one[Final], error) {
	sample, err := parseCode("body.sample", in.Body.Sample, store.KindSample)
	if err != nil {
		return nil, err
	}
	return f.drawUpFinal(ctx, actor, registry.FinalRequest{Sample: sample, Scale: in.Body.Scale, Measurand: in.Body.Measurand, Reason: in.Body.Reason})
}

func (f *face) drawUpFinal(ctx context.Context, actor registry.Actor, q registry.FinalRequest) (*one[Final], error) {
	it, err := f.registry.FinalValue(ctx, actor, q)
	if err != nil {
		return nil, err
	}
	v := showFinal(it)
	return &one[Final]{ETag: quoteTag(it.Tag()), Location: "/v1/finals/" + v.Code, Body: v}, nil
}

// A Reason says why a further version is made.
type Reason struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000"`
}

// changeFinal draws a final value up again, from the sessions accepted by now.
func (f *face) changeFinal(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body Reason
}) (*one[Final], error) {
	code, err := finalKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	before, err := seen[store.Final](ctx, f, actor, store.KindFinal, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	v := before.Value
	return f.drawUpFinal(ctx, actor, registry.FinalRequest{Sample: v.Sample, Scale: v.Scale, Measurand: v.Measurand, Reason: in.Body.Reason, After: before.Ref.Version})
}
