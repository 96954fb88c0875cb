package rest

import (
	"context"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A ValueStep is one version of a value against the one that held before it.
type ValueStep struct {
	Version   int        `json:"version"`
	ValidFrom *time.Time `json:"valid_from"`
	State     string     `json:"state"`
	Basis     string     `json:"basis"`
	Reason    string     `json:"reason"`
	Value     Decimal    `json:"value"`
	U         *float64   `json:"u" doc:"Null where none is stated."`
	Shift     *float64   `json:"shift" doc:"From the version before (‰); null for the first, as are the rest."`
	UShift    *float64   `json:"u_shift" doc:"What both versions rest on has cancelled."`
	Zeta      *float64   `json:"zeta" doc:"Shift over its u."`
	En        *float64   `json:"en" doc:"Shift over twice its u."`
	InU       *float64   `json:"shift_in_u" doc:"Shift over the older version's own u."`
}

func showStep(s registry.ValueStep) ValueStep {
	v := showValue(s.Item)
	return ValueStep{Version: s.Ref.Version, ValidFrom: timePointer(s.ValidFrom), State: string(s.State), Basis: v.Basis, Reason: s.Reason, Value: v.Value, U: v.StandardUncertainty,
		Shift: s.Shift, UShift: s.UShift, Zeta: s.Zeta, En: s.En, InU: s.InU}
}

var stepTable = table[ValueStep]{[]string{"version", "valid_from", "state", "basis", "value", "u", "shift", "u_shift", "zeta", "en", "shift_in_u"}, func(s ValueStep) []string {
	return []string{whole(&s.Version), clock(s.ValidFrom), s.State, s.Basis, string(s.Value), optional(s.U), optional(s.Shift), optional(s.UShift), optional(s.Zeta), optional(s.En), optional(s.InU)}
}}

func (f *face) valueSeries(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	FormatParam
}) (*answer, error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	steps, err := f.registry.ValueSeries(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	list := convert(steps, showStep)
	if in.format == "csv" {
		return csvAnswer(f, list, stepTable), nil
	}
	return jsonAnswer(List[ValueStep]{Items: list}, 200, nil)
}

// A ValueMonitor follows an assigned value after its assignment.
type ValueMonitor struct {
	Version  string         `json:"version" doc:"The version in force."`
	Value    Decimal        `json:"value"`
	Points   []MonitorPoint `json:"points" doc:"Accepted results of the material that was no anchor, by time."`
	Trend    *CampaignTrend `json:"trend" doc:"Of the deviations over time; null with without."`
	Without  string         `json:"without,omitempty" doc:"Why there is no trend."`
	Proposal string         `json:"proposal,omitempty" doc:"Why the material should be held suspect."`
	Next     *time.Time     `json:"next_check" doc:"Null where the material asks for none."`
	Overdue  bool           `json:"overdue"`
}

// A MonitorPoint is one session's result of the material.
type MonitorPoint struct {
	Session     string    `json:"session"`
	Calibration string    `json:"calibration"`
	At          time.Time `json:"at"`
	Value       float64   `json:"value"`
	U           float64   `json:"u"`
	Deviation   float64   `json:"deviation" doc:"From the assigned value (‰)."`
	Campaign    bool      `json:"campaign" doc:"One of the sessions that the value rests on."`
}

func (f *face) monitor(ctx context.Context, actor registry.Actor, in *ValueParams) (*plain[ValueMonitor], error) {
	m, err := f.registry.Monitor(ctx, actor, in.Code, in.Scale, in.Measurand)
	if err != nil {
		return nil, err
	}
	out := ValueMonitor{Version: versionText(store.KindValue, m.Value.Code, m.Value.Ref.Version), Value: Decimal(m.Value.Value.Value), Without: m.Without, Proposal: m.Proposal, Next: timePointer(m.Next), Overdue: m.Overdue,
		Points: convert(m.Points, func(p registry.MonitorPoint) MonitorPoint {
			return MonitorPoint{store.FormatCode(p.Session), store.FormatCode(p.Calibration), p.At.Time(), p.Value, p.StandardUncertainty, p.Deviation, p.Campaign}
		})}
	if s := m.Trend; s != nil {
		out.Trend = &CampaignTrend{Points: len(m.Points), Slope: s.Slope, USlope: s.SlopeUncertainty, DegreesOfFreedom: s.DegreesOfFreedom, P: s.P, Significant: s.Significant,
			SpanDays: s.ShelfLife, ResidualSD: s.ResidualStandardDeviation, ShelfLifeDays: s.ShelfLife, StandardUncertainty: s.StandardUncertainty}
	}
	return &plain[ValueMonitor]{out}, nil
}

// ComparedValues names assigned values.
type ComparedValues struct {
	Values []ComparedValue `json:"values" minItems:"2" maxItems:"50"`
}

// A ComparedValue names one assigned value.
type ComparedValue struct {
	Material  string `json:"material" maxLength:"40"`
	Scale     string `json:"scale" maxLength:"40"`
	Measurand string `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Version   int    `json:"version,omitempty" minimum:"0" doc:"Left out: the one in force."`
}

// ValueCovariance is how assigned values hang together.
type ValueCovariance struct {
	Versions    []string         `json:"versions"`
	Covariance  [][]float64      `json:"covariance" doc:"‰², in the order of the values; u² of the certificates in the diagonal."`
	Correlation [][]float64      `json:"correlation"`
	Pair        *ValueDifference `json:"pair" doc:"Of the first two, where there are two and on one scale; null else."`
}

// A ValueDifference is the first value less the second, shared sources cancelled.
type ValueDifference struct {
	Difference       float64  `json:"difference"`
	U                float64  `json:"u"`
	RootSumOfSquares float64  `json:"u_if_independent" doc:"What u would be if nothing were shared."`
	Correlation      float64  `json:"correlation"`
	Expanded         float64  `json:"U"`
	K                float64  `json:"k"`
	P                float64  `json:"p"`
	Zeta             *float64 `json:"zeta"`
	En               *float64 `json:"en"`
	Different        bool     `json:"different"`
}

func (f *face) covariance(ctx context.Context, actor registry.Actor, in *struct{ Body ComparedValues }) (*plain[ValueCovariance], error) {
	c, err := f.registry.CovarianceOfValues(ctx, actor, convert(in.Body.Values, func(v ComparedValue) registry.ValueName { return registry.ValueName(v) }))
	if err != nil {
		return nil, err
	}
	out := ValueCovariance{Covariance: c.Covariance, Correlation: c.Correlation, Versions: convert(c.Values, func(it registry.Item[store.Value]) string {
		return versionText(store.KindValue, it.Code, it.Ref.Version)
	})}
	if p := c.Pair; p != nil {
		out.Pair = &ValueDifference{p.Difference, p.StandardUncertainty, p.RootSumOfSquares, p.Correlation, p.Expanded.U, p.Expanded.CoverageFactor, p.Expanded.Probability, p.Zeta, p.En, p.Different}
	}
	return &plain[ValueCovariance]{out}, nil
}

// A ValueDepth says how far a value is from the definition of its scale.
type ValueDepth struct {
	Scale     string   `json:"scale"`
	Measurand string   `json:"measurand"`
	Version   string   `json:"version"`
	Depth     int      `json:"depth" doc:"0 for a value that defines a scale, 1 for one from outside, one more than its deepest anchor for one assigned here."`
	Path      []string `json:"path" doc:"The longest way down."`
}

func (f *face) depth(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[List[ValueDepth]], error) {
	list, err := f.registry.Depth(ctx, actor, in.Code)
	if err != nil {
		return nil, err
	}
	return &plain[List[ValueDepth]]{List[ValueDepth]{Items: convert(list, func(d registry.ValueDepth) ValueDepth {
		return ValueDepth{d.Value.Value.Scale, d.Value.Value.Measurand, versionText(store.KindValue, d.Value.Code, d.Value.Ref.Version), d.Depth, convert(d.Path, same)}
	})}}, nil
}
