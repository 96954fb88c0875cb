package rest

import (
	"context"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Scale is a version of a delta scale in one realisation.
type Scale struct {
	Recorded
	Quantity    string        `json:"quantity" example:"d13C"`
	Label       string        `json:"label" example:"VPDB"`
	Ratio       string        `json:"ratio,omitempty" example:"13C/12C"`
	Status      string        `json:"status,omitempty"`
	Anchors     []ScaleAnchor `json:"anchors" doc:"The points that define it."`
	Succeeds    string        `json:"succeeds,omitempty"`
	Provisional bool          `json:"provisional,omitempty"`
}

// A ScaleAnchor is one point that defines a scale.
type ScaleAnchor struct {
	Role        string `json:"role"`
	Material    string `json:"material"`
	Value       string `json:"value" doc:"As defined (‰), in the words of its source."`
	Uncertainty string `json:"uncertainty,omitempty"`
	RealisedBy  string `json:"realised_by,omitempty"`
	From        string `json:"from,omitempty"`
	To          string `json:"to,omitempty"`
	Source      string `json:"source,omitempty"`
	Note        string `json:"note,omitempty"`
	Provisional bool   `json:"provisional,omitempty"`
}

func showScale(it registry.Item[store.Scale]) Scale {
	s := it.Value
	return Scale{Recorded: recorded(it), Quantity: s.Quantity, Label: s.Label, Ratio: s.Ratio, Status: s.Status,
		Anchors: convert(s.Anchors, func(a store.ScaleAnchor) ScaleAnchor { return ScaleAnchor(a) }), Succeeds: s.Succeeds, Provisional: s.Provisional}
}

var scaleKind = kindOfRecord[store.Scale, Scale]{kind: store.KindScale, show: showScale,
	csv: table[Scale]{columns("quantity", "label", "ratio", "status"), func(s Scale) []string { return s.row(s.Quantity, s.Label, s.Ratio, s.Status) }}}

// ScalesParams are the parameters of the list of scales, which by itself shows the published ones.
type ScalesParams struct {
	ListParams
	Laboratory string `query:"laboratory" enum:"own,common" doc:"common: the registry's published scales, which is the default; own: those this laboratory added."`
}

func (f *face) scales(ctx context.Context, actor registry.Actor, in *ScalesParams) (*answer, error) {
	laboratory := store.Common
	if in.Laboratory == "own" {
		laboratory = actor.Laboratory
	}
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Scale]], error) {
		return registry.List[store.Scale](ctx, f.registry, actor, laboratory, store.KindScale, q)
	}
	return answerList(ctx, f, &in.ListParams, read, showScale, scaleKind.csv)
}
