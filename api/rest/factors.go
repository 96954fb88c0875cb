package rest

import (
	"context"
	"fmt"
	"net/url"
	"strconv"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Factor is one determination of an instrument's H3 factor.
type Factor struct {
	Recorded
	Instrument    string        `json:"instrument"`
	Quantity      string        `json:"quantity"`
	Origin        string        `json:"origin" enum:"pulses,applied elsewhere"`
	DeterminedAt  time.Time     `json:"determined_at"`
	K             float64       `json:"k" doc:"In ratio_unit per intensity_unit."`
	U             float64       `json:"u" doc:"Standard uncertainty; 0 where none was recorded."`
	Nu            *float64      `json:"nu" doc:"Degrees of freedom of u; null where it is known."`
	RatioUnit     string        `json:"ratio_unit"`
	IntensityUnit string        `json:"intensity_unit"`
	Resistor      float64       `json:"resistor_ohm,omitempty"`
	Shape         string        `json:"shape,omitempty"`
	Pulses        []Pulse       `json:"pulses,omitempty"`
	Zero          *float64      `json:"zero,omitempty" doc:"Ratio at no intensity."`
	ResidualSD    *float64      `json:"residual_sd,omitempty"`
	Residuals     []float64     `json:"residuals,omitempty" doc:"Of the ratios, in the order of the pulses: a pattern shows that the ratio is not straight in the intensity."`
	Curvature     *float64      `json:"curvature,omitempty" doc:"Student's t of a second-degree term."`
	CurvatureNu   *float64      `json:"curvature_nu,omitempty" doc:"Its degrees of freedom; left out: known."`
	CurvatureP    *float64      `json:"curvature_p,omitempty" doc:"Its two-sided probability where the ratio is straight in the intensity."`
	Lowest        *float64      `json:"lowest,omitempty"`
	Highest       *float64      `json:"highest,omitempty"`
	Settings      string        `json:"settings,omitempty"`
	Gas           string        `json:"gas,omitempty"`
	Evidence      string        `json:"evidence,omitempty"`
	Before        *FactorBefore `json:"before,omitempty" doc:"The determination before this one, in this one's units."`
	Step          bool          `json:"step" doc:"It differs from the one before by more than 3 standard uncertainties of that difference."`
}

// A Pulse is one pulse of hydrogen.
type Pulse struct {
	Intensity float64  `json:"intensity" doc:"m/z 2, of the shape that is said."`
	Ratio     float64  `json:"ratio" doc:"m/z 3 to m/z 2."`
	U         *float64 `json:"u,omitempty" doc:"Standard uncertainty of the ratio; of all pulses or of none."`
}

// FactorBefore compares a factor with the one before it.
type FactorBefore struct {
	Version int      `json:"version"`
	K       float64  `json:"k"`
	U       float64  `json:"u"`
	Z       *float64 `json:"z" doc:"Change over its standard uncertainty."`
}

func showFactor(it registry.Item[store.Factor]) Factor {
	f := it.Value
	out := Factor{Recorded: recorded(it), Instrument: f.Instrument, Quantity: f.Quantity, Origin: f.Origin, DeterminedAt: f.DeterminedAt.Time(), K: f.K, U: f.U, Nu: f.DegreesOfFreedom,
		RatioUnit: f.RatioUnit, IntensityUnit: f.IntensityUnit, Resistor: f.Resistor, Shape: f.Shape, Pulses: convertOrNil(f.Pulses, func(p store.FactorPulse) Pulse { return Pulse(p) }),
		Zero: f.Zero, ResidualSD: f.ResidualSD, Residuals: f.Residuals, Curvature: f.Curvature, CurvatureNu: f.CurvatureDF, CurvatureP: f.CurvatureP, Lowest: f.Lowest, Highest: f.Highest, Settings: f.Settings, Gas: f.Gas, Evidence: f.Evidence,
		Before: pointed(f.Before, func(b store.FactorBefore) FactorBefore { return FactorBefore(b) })}
	out.Step = registry.Step(f)
	return out
}

var factorKind = kindOfRecord[store.Factor, Factor]{kind: store.KindFactor, show: showFactor,
	csv: table[Factor]{columns("instrument", "determined_at", "k", "u", "nu", "ratio_unit", "intensity_unit", "origin", "step"), func(f Factor) []string {
		return f.row(f.Instrument, clock(&f.DeterminedAt), number(f.K), number(f.U), optional(f.Nu), f.RatioUnit, f.IntensityUnit, f.Origin, strconv.FormatBool(f.Step))
	}}}

func (f *face) factors(ctx context.Context, actor registry.Actor, in *CodeVersions) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.Item[store.Factor]], error) {
		var page registry.Page[registry.Item[store.Factor]]
		after, err := readingNumber(q.After)
		if err != nil {
			return page, err
		}
		if page.Items, err = f.registry.Factors(ctx, actor, in.Code, after, q.Limit); err == nil && len(page.Items) == q.Limit {
			page.After = strconv.Itoa(page.Items[len(page.Items)-1].Ref.Version)
		}
		return page, err
	}
	return answerList(ctx, f, &in.ListParams, read, showFactor, factorKind.csv)
}

// A NewFactor records a determination: of pulses, or the number applied elsewhere.
type NewFactor struct {
	Origin        string    `json:"origin" enum:"pulses,applied elsewhere"`
	DeterminedAt  time.Time `json:"determined_at"`
	RatioUnit     string    `json:"ratio_unit" enum:"ppm,one"`
	IntensityUnit string    `json:"intensity_unit" enum:"nA,pA,V,mV"`
	Resistor      float64   `json:"resistor_ohm,omitempty" doc:"Of the m/z 2 channel (Ω): current and voltage convert only with it."`
	Shape         string    `json:"shape,omitempty" enum:"flat,gaussian,mean" doc:"Of pulses: flat tops, heights of Gaussian peaks, or ∫I²dt/∫I dt."`
	Pulses        []Pulse   `json:"pulses,omitempty" maxItems:"10000"`
	K             float64   `json:"k,omitempty" doc:"Of a factor applied elsewhere."`
	U             float64   `json:"u,omitempty" doc:"Its standard uncertainty; left out: none is known."`
	Nu            *float64  `json:"nu,omitempty"`
	Settings      string    `json:"settings,omitempty" maxLength:"1000" doc:"How the source was tuned."`
	Gas           string    `json:"gas,omitempty" maxLength:"200"`
	Evidence      string    `json:"evidence,omitempty" maxLength:"2000"`
	Reason        string    `json:"reason,omitempty" maxLength:"4000"`
}

func (f *face) addFactor(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Body NewFactor
}) (*one[Factor], error) {
	b := in.Body
	body := store.Factor{Origin: b.Origin, DeterminedAt: store.InstantOf(b.DeterminedAt), RatioUnit: b.RatioUnit, IntensityUnit: b.IntensityUnit, Resistor: b.Resistor, Shape: b.Shape,
		Pulses: convertOrNil(b.Pulses, func(p Pulse) store.FactorPulse { return store.FactorPulse(p) }), K: b.K, U: b.U, DegreesOfFreedom: b.Nu, Settings: b.Settings, Gas: b.Gas, Evidence: b.Evidence}
	it, err := f.registry.StateFactor(ctx, actor, in.Code, body, registry.Edit{Reason: b.Reason})
	if err != nil {
		return nil, err
	}
	return &one[Factor]{ETag: quoteTag(it.Tag()), Location: fmt.Sprintf("/v1/instruments/%s/h3-factors/%d", url.PathEscape(in.Code), it.Ref.Version), Body: showFactor(it)}, nil
}
