package rest

import (
	"context"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Companion is a robust fit beside one version of a calibration. It is
// computed when it is asked for and kept nowhere.
type Companion struct {
	Calibration string `json:"calibration"`
	Version     int    `json:"version"`
	exchange.FitCompanion
}

func (f *face) companion(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Version int `query:"version" minimum:"1" doc:"Of this version; left out: the one in force, else the newest."`
	MomentParams
}) (*plain[Companion], error) {
	code, err := calibrationKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	c, err := f.registry.CompanionOf(ctx, actor, code, in.Version, in.moment())
	if err != nil {
		return nil, refusedFit(err)
	}
	body := *exchange.NewFitCompanion(c.Companion, c.Numbers)
	for i := range body.Samples {
		body.Samples[i].Sample = showSubject(body.Samples[i].Sample)
	}
	return &plain[Companion]{Companion{store.FormatCode(c.Calibration.Code), c.Calibration.Version, body}}, nil
}
