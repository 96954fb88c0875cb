package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib"
	"deltamoor/calib/correct"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// The origins of an H3 factor.
const (
	// FromPulses: computed here from the pulses that the version holds.
	FromPulses = "pulses"
	// AppliedElsewhere: used by a program before this registry, and recorded with its number.
	AppliedElsewhere = "applied elsewhere"
)

// The words of an H3 determination.
var (
	RatioUnits     = []string{"ppm", "one"}
	IntensityUnits = []string{"nA", "pA", "V", "mV"}
	PeakShapes     = []string{"flat", "gaussian", "mean"}
)

// stepZ is the change between two determinations, in its own standard
// uncertainty, that is called a step where the method says nothing
// (common practice, no source).
const stepZ = 3

// curvatureLevel is the probability below which pulses are not straight
// (common practice, no source).
const curvatureLevel = 0.01

// MaxPulses bounds one determination.
const MaxPulses = 10_000

// StateFactor records one determination of an instrument's H3 factor: from its
// pulses by weighted regression, ratio = R0 + K·intensity (Sessions, Burgoyne
// and Hayes 2001, doi:10.1021/ac000489e), or the number that a program applied
// elsewhere. It holds from when it was made, once approved.
func (r *Registry) StateFactor(ctx context.Context, actor Actor, instrument string, f store.Factor, e Edit) (Item[store.Factor], error) {
	var out Item[store.Factor]
	f.Instrument, f.Quantity = instrument, nameOr(f.Quantity, "d2H")
	f.Before = nil
	if err := completeFactor(&f); err != nil {
		return out, err
	}
	e.ValidFrom = &f.DeterminedAt
	err := r.write(ctx, actor, MayFit, func(ctx context.Context, tx *store.Tx) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindInstrument, Code: instrument}
		raw, err := lookupIn(ctx, &tx.View, key, 0, store.Moment{})
		if err != nil {
			return missing(err, key)
		}
		factor := store.Key{Laboratory: actor.Laboratory, Kind: store.KindFactor, Code: instrument}
		inputs := []store.Input{{Part: "instrument", Ref: raw.Ref}}
		if before, state, err := tx.InForce(ctx, factor, store.Moment{ValidAt: &f.DeterminedAt}); err == nil && state != store.Withdrawn {
			old, err := store.Decode[store.Factor](before)
			if err != nil {
				return err
			}
			if f.Before, err = factorBefore(f, old); err != nil {
				return err
			}
		} else if ignoreNotFound(err) != nil {
			return err
		}
		// Determinations follow one another without one replacing the other, so
		// the next number is taken where the author names none.
		if e.After == 0 {
			newest, err := tx.Newest(ctx, factor)
			if ignoreNotFound(err) != nil {
				return err
			}
			e.After = newest.Ref.Version
		}
		e.Reason = nameOr(strings.TrimSpace(e.Reason), "determined on "+f.DeterminedAt.Time().Format("2006-01-02"))
		_, err = appendVersion(ctx, tx, actor, factor, e, inputs, f)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Factor](ctx, r, actor, store.KindFactor, instrument)
}

// completeFactor checks what was sent and, of pulses, computes the factor.
func completeFactor(f *store.Factor) error {
	const message = "this H3 factor cannot be recorded"
	f.Zero, f.ResidualSD, f.Residuals, f.Lowest, f.Highest, f.Curvature, f.CurvatureDF, f.CurvatureP = nil, nil, nil, nil, nil, nil, nil, nil
	var c complaints
	c.oneOf("body.origin", f.Origin, FromPulses, AppliedElsewhere)
	c.oneOf("body.ratio_unit", f.RatioUnit, RatioUnits...)
	c.oneOf("body.intensity_unit", f.IntensityUnit, IntensityUnits...)
	if f.DeterminedAt == 0 {
		c.add("body.determined_at", "nothing", "when it was determined (RFC 3339)")
	}
	if !(f.Resistor >= 0) || math.IsInf(f.Resistor, 0) {
		c.add("body.resistor_ohm", fmt.Sprint(f.Resistor), "a resistance in Ω, or nothing")
	}
	switch f.Origin {
	case FromPulses:
		c.oneOf("body.shape", f.Shape, PeakShapes...)
		if n := len(f.Pulses); n < 2 || n > MaxPulses {
			c.add("body.pulses", fmt.Sprintf("%d pulses", n), "2 to %d pulses of different height", MaxPulses)
		}
		if f.K != 0 || f.U != 0 || f.DegreesOfFreedom != nil {
			c.add("body.k", fmt.Sprint(f.K), "nothing: the factor follows from the pulses")
		}
	case AppliedElsewhere:
		if len(f.Pulses) > 0 {
			c.add("body.pulses", fmt.Sprintf("%d pulses", len(f.Pulses)), `nothing, or the origin "pulses"`)
		}
		if !finiteNumber(f.K) || f.K < 0 {
			c.add("body.k", fmt.Sprint(f.K), "the factor that was applied, 0 or more")
		}
		if !finiteNumber(f.U) || f.U < 0 {
			c.add("body.u", fmt.Sprint(f.U), "its standard uncertainty, or 0 where none is known")
		}
		if nu := f.DegreesOfFreedom; nu != nil && !(*nu >= 1) {
			c.add("body.nu", fmt.Sprint(*nu), "degrees of freedom of 1 or more")
		}
		c.text("body.evidence", f.Evidence, 2000)
	}
	if err := Complain(message, c); err != nil || f.Origin != FromPulses {
		return err
	}
	pulses := make([]correct.Pulse, len(f.Pulses))
	lowest, highest := math.Inf(1), math.Inf(-1)
	for i, p := range f.Pulses {
		intensity := meanIntensity(f.Shape, p.Intensity)
		pulses[i] = correct.Pulse{Intensity: intensity, Ratio: p.Ratio, U: p.U}
		lowest, highest = math.Min(lowest, intensity), math.Max(highest, intensity)
	}
	found, err := correct.DetermineH3(pulses)
	if bad := (*correct.PulseError)(nil); errors.As(err, &bad) {
		return Complain(message, []Complaint{{Place: "body." + bad.Place, Found: bad.Found, Expected: bad.Expected}})
	}
	if err != nil {
		return err
	}
	f.K, f.U, f.DegreesOfFreedom = found.K, found.U, finite(found.DegreesOfFreedom)
	f.Zero, f.Residuals, f.Lowest, f.Highest = &found.Zero, found.Residuals, &lowest, &highest
	if !math.IsNaN(found.ResidualSD) {
		f.ResidualSD = &found.ResidualSD
	}
	if !math.IsNaN(found.Curvature) {
		nu := found.CurvatureDF
		if math.IsInf(nu, 1) {
			nu = 1e9 // a normal distribution, to the last digit that counts
		}
		p := 2 * distuv.StudentsT{Mu: 0, Sigma: 1, Nu: nu}.CDF(-math.Abs(found.Curvature))
		f.Curvature, f.CurvatureDF, f.CurvatureP = &found.Curvature, finite(found.CurvatureDF), &p
	}
	return nil
}

// againFactor computes a factor again from the pulses that its version holds.
func againFactor(f store.Factor) (store.Factor, error) {
	again := f
	if f.Origin != FromPulses {
		return again, nil
	}
	again.K, again.U, again.DegreesOfFreedom = 0, 0, nil
	return again, completeFactor(&again)
}

func finiteNumber(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

// meanIntensity is ∫I²dt/∫I dt of what a file gives for a peak of a shape.
func meanIntensity(shape string, given float64) float64 {
	if shape == "gaussian" {
		return correct.GaussianIntensity(given)
	}
	return correct.FlatIntensity(given)
}

// factorBefore sets a factor beside the one before it, in the new one's units.
func factorBefore(f store.Factor, old store.Version[store.Factor]) (*store.FactorBefore, error) {
	scale, err := perUnit(old.Value, f.RatioUnit, f.IntensityUnit)
	if err != nil {
		return nil, nil // in units that nothing connects: no comparison
	}
	b := &store.FactorBefore{Version: old.Ref.Version, K: old.Value.K * scale, U: old.Value.U * scale}
	if u := math.Sqrt(float64(f.U*f.U) + float64(b.U*b.U)); u > 0 {
		z := (f.K - b.K) / u
		b.Z = &z
	}
	return b, nil
}

// Step tells whether a factor differs from the one before it by more than 3
// standard uncertainties of that difference (common practice, no source).
func Step(f store.Factor) bool {
	return f.Before != nil && f.Before.Z != nil && math.Abs(*f.Before.Z) > stepZ
}

// perUnit is what a factor's number is multiplied by to be in other units.
// Current and voltage convert by the resistor only: U = R·I.
func perUnit(f store.Factor, ratio, intensity string) (float64, error) {
	scale := map[string]float64{"ppm": 1e-6, "one": 1}[f.RatioUnit] / map[string]float64{"ppm": 1e-6, "one": 1}[ratio]
	amperes := map[string]float64{"nA": 1e-9, "pA": 1e-12}
	volts := map[string]float64{"V": 1, "mV": 1e-3}
	from, fromCurrent := amperes[f.IntensityUnit]
	to, toCurrent := amperes[intensity]
	if !fromCurrent {
		from = volts[f.IntensityUnit]
	}
	if !toCurrent {
		to = volts[intensity]
	}
	switch {
	case fromCurrent == toCurrent:
	case f.Resistor == 0:
		return 0, Refuse(Invalid, "the H3 factor is in %s per %s and the readings are in %s: the resistor of the m/z 2 channel is needed to convert, and was not recorded with the factor", f.RatioUnit, f.IntensityUnit, intensity)
	case fromCurrent:
		from *= f.Resistor // one unit of current, in volts
	default:
		from /= f.Resistor
	}
	return scale * to / from, nil
}

// factorAt is the approved factor of an instrument that held at a moment, or
// the version that is named.
func factorAt(ctx context.Context, v *store.View, laboratory, instrument string, version int, at store.Instant) (store.Version[store.Factor], error) {
	key := store.Key{Laboratory: laboratory, Kind: store.KindFactor, Code: instrument}
	if version > 0 {
		raw, err := v.Version(ctx, key, version)
		if err != nil {
			return store.Version[store.Factor]{}, missing(err, key)
		}
		state, _, err := v.State(ctx, raw.Ref, store.Moment{})
		if err != nil {
			return store.Version[store.Factor]{}, err
		}
		if state != store.Approved && state != store.Superseded {
			return store.Version[store.Factor]{}, Refuse(Conflict, "H3 factor %s.%d is %s: approve it first", instrument, version, state)
		}
		return store.Decode[store.Factor](raw)
	}
	raw, state, err := v.InForce(ctx, key, store.Moment{ValidAt: &at})
	if err != nil {
		return store.Version[store.Factor]{}, err
	}
	if state == store.Withdrawn {
		return store.Version[store.Factor]{}, Refuse(Conflict, "H3 factor %s.%d, which held at %s, is withdrawn: record another determination for that time", instrument, raw.Ref.Version, at)
	}
	return store.Decode[store.Factor](raw)
}

// factorNumber is a factor as a source that is common to everything corrected
// with this version of it, in the units of the readings.
func factorNumber(f store.Version[store.Factor], rule store.H3Rule) (uncertain.Number, []uncertain.Group, error) {
	scale, err := perUnit(f.Value, rule.RatioUnit, rule.IntensityUnit)
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	k, u := f.Value.K*scale, f.Value.U*scale
	if u == 0 {
		return uncertain.Exact(k), nil, nil
	}
	return correctionNumber(factorSource(f.Ref), k, u, f.Value.DegreesOfFreedom)
}

// factorSource is the lasting identity of the uncertainty of one determination.
func factorSource(ref store.Ref) string {
	return fmt.Sprintf("correction:h3/%s/%s.%d", ref.Laboratory, ref.Code, ref.Version)
}

// factorDetail says what a factor is and what it was found from.
func factorDetail(f store.Factor) string {
	text := fmt.Sprintf("%.4g %s/%s", f.K, f.RatioUnit, f.IntensityUnit)
	if f.U > 0 {
		text += fmt.Sprintf(", u %.2g", f.U)
	}
	if f.Origin == FromPulses {
		return text + fmt.Sprintf(", from %d pulses", len(f.Pulses))
	}
	return text + ", " + strings.Trim(f.Origin+": "+f.Evidence, ": ")
}

// correctionNumber is a number that is one source of its own, of the kind correction.
func correctionNumber(id string, x, u float64, nu *float64) (uncertain.Number, []uncertain.Group, error) {
	if u == 0 {
		return uncertain.Exact(x), nil, nil
	}
	source := uncertain.Source{ID: id, Kind: uncertain.KindCorrection, U: u}
	var groups []uncertain.Group
	if nu != nil {
		source.Group = id
		groups = []uncertain.Group{uncertain.NewGroup(id, u*u, *nu)}
	}
	n, err := uncertain.New(x, uncertain.Term{Source: source, Sensitivity: 1})
	return n, groups, err
}

// factorFlags hold a factor against the method's limits for a session.
func (a *assembly) factorFlags(f store.Version[store.Factor]) []calib.Flag {
	rule := a.spec.H3
	if rule == nil {
		return nil
	}
	var flags []calib.Flag
	name := fmt.Sprintf("%s.%d", f.Code, f.Ref.Version)
	age := float64(*a.session.Value.StartedAt-f.Value.DeterminedAt) / 3600e6
	if age < 0 {
		flags = append(flags, calib.Flag{Code: "h3_determined_later", Severity: calib.Warning, Subject: f.Code,
			Message: fmt.Sprintf("The H3 factor %s was determined %.1f hours after the session began.", name, -age),
			Advice:  "A later factor serves only if nothing was tuned in between."})
	}
	if limit := rule.MaximumAgeHours; limit > 0 && math.Abs(age) > limit {
		flags = append(flags, calib.Flag{Code: "h3_stale", Severity: calib.Warning, Subject: f.Code,
			Message: fmt.Sprintf("The H3 factor %s was %.0f hours from the session; the method allows %.0f.", name, math.Abs(age), limit),
			Advice:  "Determine the factor again before measuring."})
	}
	if p := f.Value.CurvatureP; p != nil && *p < curvatureLevel {
		flags = append(flags, calib.Flag{Code: "h3_not_straight", Severity: calib.Warning, Subject: f.Code,
			Message: fmt.Sprintf("The pulses behind the H3 factor %s do not lie on a straight line (p = %.2g for a second-degree term).", name, *p),
			Advice:  "Look at the residuals: a detector near saturation, or pulses too high for the source, bend the line."})
	}
	b := f.Value.Before
	if b == nil {
		return flags
	}
	if limit := rule.MaximumChange; limit > 0 && math.Abs(f.Value.K-b.K) > limit {
		flags = append(flags, calib.Flag{Code: "h3_changed", Severity: calib.Warning, Subject: f.Code,
			Message: fmt.Sprintf("The H3 factor %s is %.3g %s/%s from the one before it; the method allows %.3g.", name, f.Value.K-b.K, f.Value.RatioUnit, f.Value.IntensityUnit, limit),
			Advice:  "Look at the source's tuning and vacuum; measure the pulses again."})
	}
	limit := rule.StepZ
	if limit == 0 {
		limit = stepZ
	}
	if b.Z != nil && math.Abs(*b.Z) > limit {
		flags = append(flags, calib.Flag{Code: "h3_step", Severity: calib.Warning, Subject: f.Code,
			Message: fmt.Sprintf("The H3 factor %s differs from the one before it by %.1f times the standard uncertainty of that difference.", name, math.Abs(*b.Z)),
			Advice:  "A step after tuning is expected; without one it is not. Sessions between the two may rest on the wrong one."})
	}
	return flags
}

// Factors lists the determinations of an instrument's H3 factor, oldest first,
// from the version after on.
func (r *Registry) Factors(ctx context.Context, actor Actor, instrument string, after, limit int) ([]Item[store.Factor], error) {
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindInstrument, Code: instrument}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		_, err := v.Newest(ctx, key)
		return missing(err, key)
	})
	if err != nil {
		return nil, err
	}
	items, err := Versions[store.Factor](ctx, r, actor, store.KindFactor, instrument, after, limit)
	if MeaningOf(err) == NotFound {
		return nil, nil // none yet
	}
	return slices.Clip(items), err
}
