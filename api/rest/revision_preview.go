package rest

import (
	"context"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A RevisionPreview says what a proposal would move; nothing is stored.
type RevisionPreview struct {
	Laboratory   string           `json:"laboratory"`
	Position     int64            `json:"position" doc:"Size of the ledger that it was evaluated at."`
	Calibrations AffectedCount    `json:"calibrations"`
	Results      AffectedCount    `json:"results" doc:"Of samples and controls in those calibrations."`
	Values       AffectedCount    `json:"values"`
	Finals       AffectedCount    `json:"finals"`
	Reported     AffectedCount    `json:"reported"`
	Passed       int64            `json:"passed" doc:"Drafts, and what is declined, superseded or withdrawn: not counted above."`
	Judged       int64            `json:"judged" doc:"Calibrations whose controls were judged by a changed value."`
	Spread       []AffectedSpread `json:"spread" doc:"How many results move by how much of their own u."`
	Largest      []Affected       `json:"largest" doc:"Assigned values, final values and reported deltas by |shift|/u, largest first."`
	Affected     []Affected       `json:"affected" doc:"In the order of the ledger, at most limit."`
	More         int64            `json:"more" doc:"Affected beyond limit."`
}

// An AffectedCount counts what a revision moves of one kind.
type AffectedCount struct {
	Moved  int64 `json:"moved"`
	Over   int64 `json:"over" doc:"By more than half of u."`
	Untold int64 `json:"untold" doc:"By how much cannot be told."`
}

// An AffectedSpread is one class of |shift|/u.
type AffectedSpread struct {
	Below *float64 `json:"below" doc:"null for the last class."`
	Count int64    `json:"count"`
}

// An Affected thing is a calibration, an assigned value, a final value or a reported delta.
type Affected struct {
	Kind     string        `json:"kind" enum:"calibration,value,final,reported"`
	Code     string        `json:"code" doc:"Of the record; of a reported delta its permanent code."`
	Version  int           `json:"version"`
	Line     *int          `json:"line,omitempty" doc:"Of a calibration: the result that moves most. Of a reported delta: its line."`
	State    string        `json:"state"`
	Scale    string        `json:"scale,omitempty"`
	Position int64         `json:"position"`
	Value    *float64      `json:"value" doc:"As it stands (‰)."`
	U        *float64      `json:"u" doc:"As it stands (‰)."`
	Shift    *float64      `json:"shift" doc:"Predicted to first order (‰); null where it cannot be told."`
	Ratio    *float64      `json:"ratio" doc:"|shift|/u; null where u is 0 or the shift cannot be told."`
	Parts    []float64     `json:"parts" doc:"What each change brings, in the order values, units, methods, exclusions; they add up to the shift."`
	Why      string        `json:"why,omitempty" doc:"Why the shift cannot be told."`
	Full     *Reevaluation `json:"full,omitempty" doc:"With full=true: drawn up again."`
}

// A Reevaluation is a value drawn up again.
type Reevaluation struct {
	Fixed *float64 `json:"fixed" doc:"Shift at the variances and weights of the old value (‰)."`
	Shift *float64 `json:"shift" doc:"Shift with everything estimated again (‰)."`
	U     *float64 `json:"u" doc:"The new standard uncertainty (‰)."`
	Why   string   `json:"why,omitempty" doc:"Why it cannot be told."`
}

func showAffected(a registry.Affected) Affected {
	out := Affected{Kind: string(a.Kind), Code: showCode(a.Kind, a.Ref.Code), Version: a.Ref.Version, State: string(a.State), Scale: a.Scale, Position: a.Position,
		Parts: append([]float64{}, a.Parts...), Why: a.Why}
	if a.Kind == store.KindReport {
		out.Kind, out.Code = "reported", store.FormatCode(a.Reported)
	}
	if a.Kind == store.KindReport || a.Kind == store.KindCalibration && a.Line >= 0 {
		out.Line = &a.Line
	}
	if a.Kind != store.KindCalibration || a.Line >= 0 {
		out.Value, out.U = &a.Value, &a.StandardUncertainty
	}
	if a.Why == "" {
		out.Shift = &a.Shift
		if a.StandardUncertainty > 0 || a.Shift == 0 {
			out.Ratio = &a.Ratio
		}
	}
	if e := a.Full; e != nil {
		out.Full = &Reevaluation{Why: e.Why}
		if e.Why == "" {
			out.Full.Fixed, out.Full.Shift, out.Full.U = &e.Fixed, &e.Shift, &e.StandardUncertainty
		}
	}
	return out
}

func (f *face) previewRevision(ctx context.Context, actor registry.Actor, p registry.Proposal, in RevisionParams) (*answer, error) {
	p.Full, p.Drafts, p.Threshold, p.Top = in.Full, in.Drafts, in.Threshold, in.Top
	limit := in.Limit
	if limit == 0 {
		limit = 100
	}
	out := RevisionPreview{Affected: []Affected{}}
	s, err := f.registry.PreviewRevision(ctx, actor, p, func(a registry.Affected) error {
		if len(out.Affected) < limit {
			out.Affected = append(out.Affected, showAffected(a))
		} else {
			out.More++
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	out.Laboratory, out.Position, out.Passed, out.Judged = s.Laboratory, s.Position, s.Passed, s.Judged
	out.Calibrations, out.Results, out.Values = AffectedCount(s.Calibrations), AffectedCount(s.Results), AffectedCount(s.Values)
	out.Finals, out.Reported = AffectedCount(s.Finals), AffectedCount(s.Reported)
	limits := registry.SpreadLimits()
	for i, n := range s.Spread {
		class := AffectedSpread{Count: n}
		if i < len(limits) {
			class.Below = &limits[i]
		}
		out.Spread = append(out.Spread, class)
	}
	out.Largest = convert(s.Largest, showAffected)
	return jsonAnswer(out, 200, nil)
}
