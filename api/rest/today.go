package rest

import (
	"context"
	"math"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Today is a reported delta as it would be with the assigned values in force.
type Today struct {
	Reported Reported        `json:"reported"`
	Value    *float64        `json:"value" doc:"With the values in force (‰); null where it cannot be told."`
	U        *float64        `json:"u" doc:"Its standard uncertainty (‰)."`
	K        *float64        `json:"k"`
	Expanded *float64        `json:"U" doc:"k·u (‰)."`
	NuEff    *float64        `json:"nu_eff" doc:"null where infinite, or not told."`
	Shift    *float64        `json:"shift" doc:"value less the reported one (‰): a correction of it, not a second measurement."`
	Ratio    *float64        `json:"ratio" doc:"|shift| over the reported u; null where that is 0."`
	Material bool            `json:"material" doc:"The shift is beyond half of the reported u."`
	Replaced []ReplacedValue `json:"replaced" doc:"Values that its sessions would take now in place of those they took."`
	Why      string          `json:"why,omitempty" doc:"Why it cannot be told."`
}

// A ReplacedValue is an assigned value of which another version holds for a session.
type ReplacedValue struct {
	Session  string  `json:"session"`
	Old      Input   `json:"old"`
	New      Input   `json:"new"`
	OldValue float64 `json:"old_value" doc:"‰"`
	OldU     float64 `json:"old_u" doc:"‰"`
	NewValue float64 `json:"new_value" doc:"‰"`
	NewU     float64 `json:"new_u" doc:"‰"`
}

func (f *face) today(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	AsOfParam
}) (*plain[Today], error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	t, err := f.registry.Today(ctx, actor, code, instantOf(in.AsOf))
	if err != nil {
		return nil, err
	}
	out := Today{Reported: showReported(t.Reported), Material: t.Material, Why: t.Why,
		Replaced: convert(t.Replaced, func(r registry.ReplacedValue) ReplacedValue {
			return ReplacedValue{store.FormatCode(r.Session), showVersionRef(r.Part, r.Old), showVersionRef(r.Part, r.New), r.OldValue, r.OldU, r.NewValue, r.NewU}
		})}
	if t.Why == "" {
		out.Value, out.U, out.K, out.Expanded, out.NuEff, out.Shift = &t.Value, &t.StandardUncertainty, &t.K, &t.Expanded, t.EffectiveDF, &t.Shift
		if !math.IsInf(t.Ratio, 0) {
			out.Ratio = &t.Ratio
		}
	}
	return &plain[Today]{out}, nil
}
