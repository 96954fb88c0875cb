package registry

import (
	"context"

	"deltamoor/store"
)

// Affected is one thing that a revision moves: a calibration (by its result that
// moves most), an assigned value, a final value, or a reported delta.
type Affected struct {
	store.Ref
	Position int64
	State    store.State
	// Session and Scale of a calibration.
	Session, Scale string
	// Line is that of the result, or of the report; Reported the delta's permanent code.
	Line     int
	Reported string
	// Value and StandardUncertainty as they stand (‰).
	Value, StandardUncertainty float64
	// Shift (‰) is the change predicted to first order; Parts are what each change
	// of the revision brings, in the order values, units, methods, factors, exclusions, and
	// add up to it. Ratio is |Shift|/u, +Inf where u is 0 and the value moves.
	Shift, Ratio float64
	Parts        []float64
	// Why says why the shift cannot be told; "" where it can.
	Why string
	// Full is the full re-evaluation, where it was asked for and this is in force.
	Full *Reevaluation
}

// A Reevaluation is a value drawn up again.
type Reevaluation struct {
	// Fixed is the shift (‰) at the variances and weights of the old value, Shift
	// with everything estimated anew.
	Fixed, Shift float64
	// StandardUncertainty is the new one (‰).
	StandardUncertainty float64
	// Why says why it cannot be told; "" where it can.
	Why string
}

// Counts are how many things of one kind a revision moves.
type Counts struct {
	Moved  int64 // everything affected, also where the value stays and only its u changes
	Over   int64 // beyond half of u
	Untold int64 // the shift cannot be told
}

// A RevisionSummary says what a revision moves.
type RevisionSummary struct {
	Laboratory string
	// Position is the size of the ledger it was evaluated at.
	Position                                        int64
	Calibrations, Results, Values, Finals, Reported Counts
	// Passed counts affected versions left out: drafts, declined, superseded or withdrawn.
	Passed int64
	// Judged counts calibrations whose controls were judged by a changed value.
	Judged int64
	// Spread counts results by |shift|/u: below 0.1, 0.25, 0.5, 1, 2, and above.
	Spread [6]int64
	// Largest are the largest |shift|/u of assigned values, final values and
	// reported deltas, largest first.
	Largest []Affected
}

// Material is the part of u beyond which a shift counts as over.
const Material = 0.5

// SpreadLimits are the upper bounds of |shift|/u of the classes of a spread; the
// last class has none.
func SpreadLimits() [5]float64 { return [5]float64{0.1, 0.25, 0.5, 1, 2} }

// PreviewRevision says what a proposal would move, and stores nothing. Yield is
// called for each calibration and assigned value in force, in the order of the
// ledger, in which everything stands after what it rests on; and, after the
// calibrations they rest on, for each final value in force and each reported
// delta; beyond the threshold. An error of it ends the preview.
// Memory does not grow with the number of calibrations or deltas.
func (r *Registry) PreviewRevision(ctx context.Context, actor Actor, p Proposal, yield func(Affected) error) (RevisionSummary, error) {
	var out RevisionSummary
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		body, err := revisionOf(ctx, v, actor.Laboratory, p)
		if err != nil {
			return err
		}
		c, err := compile(ctx, v, actor.Laboratory, body)
		if err != nil {
			return err
		}
		out, err = r.impactOf(ctx, v, c, p, yield)
		return err
	})
	return out, err
}

// impactOf streams what changes. The walk has a transaction of its own, since a
// connection serves one statement at a time; both see nothing that was recorded
// after the moment the revision is frozen at.
func (r *Registry) impactOf(ctx context.Context, v *store.View, c *changes, p Proposal, yield func(Affected) error) (RevisionSummary, error) {
	im := newImpact(v, c, p, yield)
	im.summary.Laboratory, im.summary.Position = c.laboratory, c.body.Position
	q := store.AffectedQuery{Laboratory: c.laboratory, Roots: c.roots(), AsOf: &c.body.FrozenAt, After: -1, FitsOnly: !p.Full}
	var values []store.Ref
	for ref := range c.values {
		values = append(values, ref)
	}
	var err error
	if im.summary.Judged, err = v.Judged(ctx, c.laboratory, values); err != nil {
		return im.summary, err
	}
	if im.moved, err = v.Moved(ctx, c.laboratory, maxMoved); err != nil {
		return im.summary, err
	}
	if p.Full {
		if im.full, err = newEvaluation(ctx, v, c); err != nil {
			return im.summary, err
		}
	}
	err = r.store.Read(ctx, func(ctx context.Context, walk *store.View) error {
		batch := make([]store.AffectedVersion, 0, batchSize)
		err := walk.Affected(ctx, q, func(a store.AffectedVersion) error {
			if a.Position >= c.body.Position {
				return nil
			}
			if batch = append(batch, a); len(batch) < batchSize {
				return nil
			}
			err := im.batch(ctx, batch)
			batch = batch[:0]
			return err
		})
		if err != nil {
			return err
		}
		return im.batch(ctx, batch)
	})
	if err == nil {
		err = im.restingAtLast()
	}
	im.summary.Largest = im.ranked()
	return im.summary, err
}

const batchSize = 500
