package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A FitRequest asks for a calibration of one quantity of a session.
type FitRequest struct {
	Session   string
	Quantity  string
	Measurand string
	// Model replaces the method's, for a draft that shows what another model would give.
	Model *calib.Model
	// Factor is the version of the instrument's H3 factor to use; 0 takes the one
	// that held when the session started.
	Factor int
	Reason string
	// Preview answers as if done and stores nothing.
	Preview bool
}

// Fit draws up a calibration: the anchors' values that held when the session
// started, as known now, are pinned; the result is a draft version.
func (r *Registry) Fit(ctx context.Context, actor Actor, q FitRequest) (Item[store.Calibration], error) {
	var out Item[store.Calibration]
	var code string
	err := r.write(ctx, actor, MayFit, func(ctx context.Context, tx *store.Tx) error {
		a, inputs, err := assemble(ctx, &tx.View, actor.Laboratory, q)
		if err != nil {
			return err
		}
		name := store.CalibrationName(a.session.Code, a.spec.Scale, measurandOf(a.spec))
		keys, err := tx.Resolve(ctx, actor.Laboratory, store.KindCalibration, name)
		if err != nil {
			return err
		}
		e := Edit{Reason: q.Reason}
		if len(keys) == 0 {
			if code, err = r.draw(ctx, &tx.View, actor.Laboratory, 'C'); err != nil {
				return err
			}
			onlyOne(tx, store.KindCalibration, name)
		} else {
			code = keys[0].Code
			old, err := tx.Newest(ctx, keys[0])
			if err != nil {
				return err
			}
			e.After = old.Ref.Version
		}
		a.version = store.Ref{Key: store.Key{Laboratory: actor.Laboratory, Kind: store.KindCalibration, Code: code}, Version: e.After + 1}
		body, err := a.fit()
		if err != nil {
			return err
		}
		if err := a.observe(ctx, &tx.View, actor.Laboratory, body); err != nil {
			return err
		}
		a.addObserved(&body)
		if q.Preview {
			out = Item[store.Calibration]{State: store.Drafted}
			out.Value, out.Inputs = body, inputs
			return errPreview
		}
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindCalibration, Code: code}, e, inputs, body)
		return err
	})
	if errors.Is(err, errPreview) {
		return out, nil
	}
	if err != nil {
		return out, err
	}
	return reread[store.Calibration](ctx, r, actor, store.KindCalibration, code)
}

// result runs the engine.
func (a *assembly) result() (*calib.Result, calib.Session, error) {
	s, p, err := a.input()
	if err != nil {
		return nil, s, err
	}
	result, err := calib.Fit(s, a.model, p)
	if err != nil {
		return nil, s, &Error{Meaning: Invalid, Message: fmt.Sprintf("session %s cannot be fitted for %s: %s", store.FormatCode(a.session.Code), a.spec.Quantity, a.inWords(err)), Err: err}
	}
	return result, s, nil
}

// inWords gives an engine's refusal the reading's number in the session in place of its index.
func (a *assembly) inWords(err error) string {
	text := err.Error()
	var placed interface {
		At() (list string, index int)
	}
	if errors.As(err, &placed) {
		if list, i := placed.At(); list == "readings" && i >= 0 && i < len(a.prepared.readings) {
			text = strings.ReplaceAll(text, fmt.Sprintf("readings[%d]", i), fmt.Sprintf("reading %d", a.prepared.readings[i].stored.Number))
		}
	}
	return text
}

// fit runs the engine and states the stored body.
func (a *assembly) fit() (store.Calibration, error) {
	result, _, err := a.result()
	if err != nil {
		return store.Calibration{}, err
	}
	body := a.state(result)
	for i := range body.Results {
		flags, err := a.controlFlags(result, i)
		if err != nil {
			return body, err
		}
		body.Flags = append(body.Flags, flags...)
		for _, f := range flags {
			body.Results[i].Flags = append(body.Results[i].Flags, f.Code)
		}
	}
	body.Flags = append(body.Flags, a.slopeFlags(result)...)
	body.Flags = append(body.Flags, a.repeatabilityFlags(result)...)
	body.Flags = append(body.Flags, a.prepared.flags...)
	body.Flags = append(body.Flags, a.flags...)
	a.addObserved(&body)
	return body, nil
}

// state turns the engine's result into the stored form: indices of the
// engine's list become reading numbers.
func (a *assembly) state(r *calib.Result) store.Calibration {
	b := store.Calibration{Engine: r.Engine, Session: a.session.Code, Instrument: a.session.Value.Instrument, StartedAt: a.session.Value.StartedAt,
		Quantity: a.spec.Quantity, Scale: a.spec.Scale, Measurand: measurandOf(a.spec), Model: a.model, Limits: a.limits, BetweenSession: a.between, SampleHomogeneity: a.sampled,
		Covariance: r.Covariance, NoiseCovariance: r.NoiseCovariance, AnchorSensitivities: r.AnchorSensitivities, AnchorDerivatives: r.AnchorDerivatives,
		VarianceCovariance: r.VarianceCovariance, ReferenceTime: r.ReferenceTime, ReferenceSize: r.ReferenceSize, ChiSquare: r.ChiSquare,
		DegreesOfFreedom: r.DegreesOfFreedom, PValue: r.PValue, BirgeRatio: r.BirgeRatio, ResidualSD: r.ResidualSD, AICc: r.AICc, ConditionNumber: r.ConditionNumber}
	for _, rd := range a.readings {
		if a.excluded[rd.Number] {
			b.Excluded = append(b.Excluded, rd.Number)
		}
	}
	b.SetAside, b.Means = a.prepared.setAside, a.prepared.means
	for j, in := range a.prepared.shared {
		k := store.CalibrationCorrection{Name: in.name, Value: in.value.Value, StandardUncertainty: in.value.StandardUncertainty(),
			Sensitivities: column(r.CorrectionSensitivities, j), Derivatives: column(r.CorrectionDerivatives, j)}
		b.Corrections = append(b.Corrections, k)
	}
	for i, v := range a.anchors {
		anchor := store.CalibrationAnchor{Material: v.Value.Material, StandardUncertainty: v.Value.StandardUncertainty}
		if i < len(r.Anchors) {
			anchor.Value, anchor.Adjusted = r.Anchors[i].Value, r.Anchors[i].Adjusted
			if l := r.Anchors[i].LeftOut; l != nil {
				anchor.LeftOut = &store.LeftOut{Predicted: l.Predicted, StandardUncertainty: l.StandardUncertainty, Z: l.Z}
			}
		}
		b.Anchors = append(b.Anchors, anchor)
	}
	for _, p := range r.Parameters {
		b.Parameters = append(b.Parameters, store.Parameter(p))
	}
	for _, v := range r.Variances {
		b.Variances = append(b.Variances, store.Variance{Name: v.Name, Value: v.Value, DegreesOfFreedom: finite(v.DegreesOfFreedom)})
	}
	if l := r.LackOfFit; l != nil {
		lack := store.LackOfFit(*l)
		b.LackOfFit = &lack
	}
	if l := r.Line; l != nil {
		line := store.Line(*l)
		b.Line = &line
	}
	for _, d := range r.Readings {
		if d.Predicted == nil && d.Residual == nil {
			continue
		}
		rd := a.prepared.readings[d.Index]
		var corrected *float64
		if rd.changed {
			raw := rd.Raw
			corrected = &raw
		}
		b.Readings = append(b.Readings, store.ReadingDiagnosis{Number: rd.numbers[0], Corrected: corrected, Predicted: d.Predicted, Residual: d.Residual,
			Standardized: d.StandardizedResidual, Studentized: d.StudentizedResidual, Leverage: d.Leverage, CooksD: d.CooksDistance})
	}
	for _, s := range r.Subjects {
		res := store.Result{Subject: s.Subject, Role: s.Role, N: s.N, Value: s.Value, StandardUncertainty: s.StandardUncertainty,
			K: s.Expanded.CoverageFactor, Expanded: s.Expanded.U, Probability: s.Expanded.Probability, EffectiveDF: finite(s.Expanded.DegreesOfFreedom),
			Gradient: s.Gradient, Readings: a.heads(s.Readings), Coefficients: s.Coefficients, BetweenSession: s.BetweenSession, Flags: slices.Clone(s.Flags)}
		for _, c := range s.Sources {
			res.Sources = append(res.Sources, store.Contribution{ID: c.ID, Kind: string(c.Kind), Group: c.Group, Sensitivity: c.Sensitivity, U: c.U, VarianceShare: c.VarianceShare})
		}
		b.Results = append(b.Results, res)
	}
	for _, n := range r.Needs {
		b.Needs = append(b.Needs, store.Need(n))
	}
	for _, f := range r.Flags {
		f.Readings = a.numbers(f.Readings)
		b.Flags = append(b.Flags, f)
	}
	return b
}

// column is one column of a matrix that is stored by rows.
func column(m [][]float64, j int) []float64 {
	out := make([]float64, len(m))
	for i := range m {
		out[i] = m[i][j]
	}
	return out
}

// heads are the numbers that a fit calls its readings by, one for each index:
// of a mean, its first; what else it stands for is in the calibration's means.
func (a *assembly) heads(indices []int) []int {
	out := make([]int, 0, len(indices))
	for _, i := range indices {
		out = append(out, a.prepared.readings[i].numbers[0])
	}
	return out
}

// numbers are the numbers of all stored readings that the engine's stand for.
func (a *assembly) numbers(indices []int) []int {
	out := make([]int, 0, len(indices))
	for _, i := range indices {
		out = append(out, a.prepared.readings[i].numbers...)
	}
	return out
}

// finite is a degrees of freedom as it is stored: absent when infinite.
func finite(nu float64) *float64 {
	if math.IsInf(nu, 1) {
		return nil
	}
	return &nu
}

// mayApproveCalibration holds a calibration against its method: its own model,
// every correction declared, a control where one is asked for.
func mayApproveCalibration(ctx context.Context, v *store.View, raw store.Raw) error {
	calibration, err := store.Decode[store.Calibration](raw)
	if err != nil {
		return err
	}
	a, err := assembleStored(ctx, v, calibration)
	if err != nil {
		return err
	}
	var c complaints
	for _, k := range a.session.Value.Corrections {
		if (k.Quantity == "" || k.Quantity == a.spec.Quantity) && (k.State == "" || k.State == "not said") {
			c.add("correction "+k.Name, "not said", "whether it was done earlier, is done here, or does not apply")
		}
	}
	if k, ok := a.declared("h3"); ok && a.spec.Quantity == "d2H" && k.State == "earlier" && a.earlier == nil && k.Constants == "" {
		c.add("correction h3", "earlier, by a factor that nobody recorded", "the factor that was applied, on record for the instrument, or its number in the declaration's constants")
	}
	if calibration.Value.Model != a.spec.Model {
		c.add("model", "another model than the method's", "a calibration by the method's own model")
	}
	if a.limits.ControlRequired && !slices.ContainsFunc(calibration.Value.Results, func(r store.Result) bool { return r.Role == calib.Control }) {
		c.add("controls", "none", "at least one control that is not in the fit")
	}
	return Complain(versionName(raw.Ref)+" cannot be approved", c)
}

// resultNumber is the uncertain number of one line of a stored calibration,
// with every source it rests on, and the variance groups they name.
func resultNumber(ctx context.Context, v source, c store.Version[store.Calibration], line int) (uncertain.Number, []uncertain.Group, error) {
	a, err := assembleStored(ctx, v, c)
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	r, s, err := a.result()
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	if line < 0 || line >= len(r.Subjects) {
		return uncertain.Number{}, nil, fmt.Errorf("%s has no result %d", c.Ref, line)
	}
	return r.Number(line), append(slices.Clone(s.Groups), r.Groups()...), nil
}

// Calibrations lists the calibrations of a session.
func (r *Registry) Calibrations(ctx context.Context, actor Actor, session string) ([]Item[store.Calibration], error) {
	var out []Item[store.Calibration]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		s, err := newest[store.Session](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: session})
		if err != nil {
			return err
		}
		method, err := sessionMethod(ctx, v, s.Version)
		if err != nil {
			return err
		}
		for _, q := range method.Value.Quantities {
			keys, err := v.Resolve(ctx, actor.Laboratory, store.KindCalibration, store.CalibrationName(session, q.Scale, measurandOf(q)))
			if err != nil {
				return err
			}
			for _, key := range keys {
				it, err := newest[store.Calibration](ctx, v, key)
				if err != nil {
					return err
				}
				out = append(out, it)
			}
		}
		return nil
	})
	return out, err
}

// Calculate runs the engine without storing anything.
func (r *Registry) Calculate(s calib.Session, m calib.Model, p calib.Policy) (*calib.Result, error) {
	return calib.Fit(s, m, p)
}
