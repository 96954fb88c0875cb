package registry

import (
	"cmp"
	"container/heap"
	"context"
	"fmt"
	"math"
	"slices"

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
	// of the revision brings, in the order values, units, methods, exclusions, and
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
// called in the order of the ledger, in which everything stands after what it
// rests on, for each calibration, assigned value and final value in force and
// each reported delta beyond the threshold; an error of it ends the preview.
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
	q := store.AffectedQuery{Laboratory: c.laboratory, Roots: c.roots(), AsOf: &c.body.FrozenAt, After: -1}
	var values []store.Ref
	for ref := range c.values {
		values = append(values, ref)
	}
	var err error
	if im.summary.Judged, err = v.Judged(ctx, c.laboratory, values); err != nil {
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
	im.summary.Largest = im.ranked()
	return im.summary, err
}

const batchSize = 500

// An impact propagates first-order shifts along the ledger.
type impact struct {
	*changes
	v       *store.View
	p       Proposal
	yield   func(Affected) error
	summary RevisionSummary
	top     ranking
	full    *evaluation
	// values are the shifts of assigned values met so far; the others are bounded
	// memories of what the next in the ledger most likely rests on.
	values       map[store.Ref]shift
	calibrations recent[calibrationShift]
	finals       recent[shift]
	blocks       map[store.Ref]store.CalibrationBlock // of the batch
}

// A shift is the predicted change of one number, by component; moved is false
// where the number does not depend on the revision at all.
type shift struct {
	moved bool
	why   string
	parts []float64
}

func (s *shift) add(o shift, weight float64, parts int) {
	if !o.moved {
		return
	}
	s.moved = true
	if s.why == "" {
		s.why = o.why
	}
	if s.parts == nil {
		s.parts = make([]float64, parts)
	}
	for i, x := range o.parts {
		s.parts[i] += weight * x
	}
}

func (s shift) total() float64 {
	sum := 0.0
	for _, x := range s.parts {
		sum += x
	}
	return sum
}

// A calibrationShift has a shift for each result.
type calibrationShift struct {
	moved bool
	lines []shift
}

func newImpact(v *store.View, c *changes, p Proposal, yield func(Affected) error) *impact {
	if p.Top == 0 {
		p.Top = 50
	}
	if yield == nil {
		yield = func(Affected) error { return nil }
	}
	return &impact{changes: c, v: v, p: p, yield: yield, values: map[store.Ref]shift{}, top: ranking{most: p.Top}}
}

func (im *impact) batch(ctx context.Context, batch []store.AffectedVersion) error {
	var calibrations, bodies []store.Ref
	for _, a := range batch {
		switch a.Kind {
		case store.KindCalibration:
			calibrations = append(calibrations, a.Ref.Bare())
		case store.KindValue, store.KindFinal:
			bodies = append(bodies, a.Ref.Bare())
		}
	}
	var err error
	if im.blocks, err = im.v.Blocks(ctx, im.laboratory, calibrations); err != nil {
		return err
	}
	raws, err := im.v.VersionsOf(ctx, bodies)
	if err != nil {
		return err
	}
	for _, a := range batch {
		if im.full != nil {
			if err := im.full.next(ctx, a); err != nil {
				return err
			}
		}
		switch a.Kind {
		case store.KindCalibration:
			err = im.calibration(ctx, a)
		case store.KindValue:
			err = im.value(ctx, a, raws[a.Ref.Bare()])
		case store.KindFinal:
			err = im.final(ctx, a, raws[a.Ref.Bare()])
		case store.KindReport:
			err = im.report(ctx, a)
		}
		if err != nil {
			return err
		}
	}
	return nil
}

// counts tells whether a version in this state is shown.
func (im *impact) counts(s store.State) bool {
	return s == store.Approved || im.p.Drafts && (s == store.Drafted || s == store.Submitted)
}

func (im *impact) calibration(ctx context.Context, a store.AffectedVersion) error {
	b, ok := im.blocks[a.Ref.Bare()]
	if !ok {
		return fmt.Errorf("%s has no derivatives", a.Ref)
	}
	s, err := im.shiftOfCalibration(ctx, a.Ref.Bare(), b)
	if err != nil || !s.moved {
		return err
	}
	if !im.counts(a.State) {
		im.summary.Passed++
		return nil
	}
	worst := Affected{Ref: a.Ref, Position: a.Position, State: a.State, Session: b.Session, Scale: b.Scale, Line: -1, Ratio: -1}
	for i, line := range s.lines {
		if !line.moved {
			continue
		}
		one := worst
		one.Line = i
		one.fill(b.Results[i].Value, b.Results[i].StandardUncertainty, line)
		im.summary.Results.count(one)
		if one.Why == "" {
			im.summary.Spread[spreadOf(one.Ratio)]++
		}
		if worst.Line < 0 || one.Ratio > worst.Ratio || worst.Why != "" && one.Why == "" {
			worst = one
		}
	}
	if worst.Line < 0 {
		worst.Ratio = 0
	}
	im.summary.Calibrations.count(worst)
	return im.emit(worst)
}

func spreadOf(ratio float64) int {
	for i, below := range SpreadLimits() {
		if ratio < below {
			return i
		}
	}
	return len(SpreadLimits())
}

func (c *Counts) count(a Affected) {
	c.Moved++
	switch {
	case a.Why != "":
		c.Untold++
	case a.Ratio > Material:
		c.Over++
	}
}

func (a *Affected) fill(value, u float64, s shift) {
	a.Value, a.StandardUncertainty, a.Why = value, u, s.why
	if s.why != "" {
		return
	}
	a.Parts, a.Shift = s.parts, s.total()
	switch {
	case a.Shift == 0:
		a.Ratio = 0
	default:
		a.Ratio = math.Abs(a.Shift) / u
	}
}

// emit hands one thing out and ranks it.
func (im *impact) emit(a Affected) error {
	if im.full != nil {
		if err := im.full.fill(&a); err != nil {
			return err
		}
	}
	if a.Kind != store.KindCalibration && a.Why == "" {
		im.top.offer(a)
	}
	if a.Why == "" && a.Ratio < im.p.Threshold {
		return nil
	}
	return im.yield(a)
}

// shiftOfCalibration is, for each result, gᵀ·(dθ/dy)·Δy, with dθ/dy the exact
// derivative of the estimate at fixed variances; what a revision changes
// directly is fitted again.
func (im *impact) shiftOfCalibration(ctx context.Context, ref store.Ref, b store.CalibrationBlock) (calibrationShift, error) {
	if s, ok := im.calibrations.find(ref); ok {
		return s, nil
	}
	s := calibrationShift{lines: make([]shift, len(b.Results))}
	var body *store.Version[store.Calibration]
	load := func() error {
		if body != nil {
			return nil
		}
		raw, err := im.v.Version(ctx, ref.Key, ref.Version)
		if err != nil {
			return err
		}
		c, err := store.Decode[store.Calibration](raw)
		body = &c
		return err
	}
	moves := make([]shift, len(b.Anchors))
	for k, anchor := range b.Anchors {
		if change := im.changes.values[anchor]; change != nil && change.applies(b.StartedAt) {
			moves[k] = shift{moved: true, parts: make([]float64, im.parts)}
			moves[k].parts[change.part] = change.delta
			if change.Withdrawn {
				// The fit without an anchor is the fit with that anchor at the value
				// which the rest predicts for it: exactly so for the plain line.
				if err := load(); err != nil {
					return s, err
				}
				if k >= len(body.Value.Anchors) || body.Value.Anchors[k].LeftOut == nil {
					moves[k].why = fmt.Sprintf("%s cannot be fitted without %s", versionName(ref), change.old.Value.Material)
				} else {
					moves[k].parts[change.part] = body.Value.Anchors[k].LeftOut.Predicted - body.Value.Anchors[k].Value
				}
			}
		} else if below, ok := im.values[anchor]; ok {
			moves[k] = below
		}
		s.moved = s.moved || moves[k].moved
	}
	if s.moved {
		columns := 0
		if len(b.AnchorDerivatives) > 0 {
			columns = len(b.AnchorDerivatives[0])
		}
		for i, res := range b.Results {
			for k, move := range moves {
				if columns != len(b.Anchors) {
					s.lines[i] = shift{moved: true, why: "its derivatives are not known"}
					break
				}
				slope := 0.0
				for p, g := range res.Gradient {
					slope += g * b.AnchorDerivatives[p][k]
				}
				s.lines[i].add(move, slope, im.parts)
			}
		}
	}
	if part, direct := im.direct[ref]; direct {
		if err := load(); err != nil {
			return s, err
		}
		if err := im.refitted(ctx, *body, part, &s); err != nil {
			return s, err
		}
	}
	im.calibrations.keep(ref, s)
	return s, nil
}

// refitted adds what a bottle, a method or readings change in a calibration.
func (im *impact) refitted(ctx context.Context, of store.Version[store.Calibration], part int, s *calibrationShift) error {
	next, touched, untold, err := im.again(ctx, im.v, of, unchanged)
	if err != nil || !touched {
		return err
	}
	s.moved = true
	var body store.Calibration
	if untold == "" {
		if body, untold, err = refit(ctx, im.v, next); err != nil {
			return err
		}
	}
	for i, old := range of.Value.Results {
		moved := shift{moved: true, why: untold, parts: make([]float64, im.parts)}
		if untold == "" {
			line := slices.IndexFunc(body.Results, func(r store.Result) bool { return r.Subject == old.Subject && r.Role == old.Role })
			if line < 0 {
				moved.why = "no reading of it is left"
			} else {
				moved.parts[part] = body.Results[line].Value - old.Value
			}
		}
		s.lines[i].add(moved, 1, im.parts)
	}
	return nil
}

// shiftOfMember is that of one result of a calibration.
func (im *impact) shiftOfMember(ctx context.Context, ref store.Ref, line int) (shift, error) {
	ref = ref.Bare()
	s, ok := im.calibrations.find(ref)
	if !ok {
		b, loaded := im.blocks[ref]
		if !loaded {
			blocks, err := im.v.Blocks(ctx, im.laboratory, []store.Ref{ref})
			if err != nil {
				return shift{}, err
			}
			b = blocks[ref]
		}
		var err error
		if s, err = im.shiftOfCalibration(ctx, ref, b); err != nil {
			return shift{}, err
		}
	}
	if line < 0 || line >= len(s.lines) {
		return shift{}, nil
	}
	return s.lines[line], nil
}

func (im *impact) value(ctx context.Context, a store.AffectedVersion, raw store.Raw) error {
	if im.changes.values[a.Ref.Bare()] != nil {
		return nil // it is the change itself
	}
	val, err := store.Decode[store.Value](raw)
	if err != nil {
		return err
	}
	members, err := membersOf(ctx, im.v, val.Inputs, func(_ int, c store.Version[store.Calibration]) int { return resultOf(c.Value, val.Value.Material) })
	if err != nil {
		return err
	}
	weights, err := weightsOf(ctx, im.v, val.Value, members)
	if err != nil {
		return err
	}
	var s shift
	for i, m := range members {
		one, err := im.shiftOfMember(ctx, m.calibration.Ref, m.line)
		if err != nil {
			return err
		}
		s.add(one, weights[i], im.parts)
	}
	if !s.moved {
		return nil
	}
	im.values[a.Ref.Bare()] = s
	if a.State, _, err = im.v.State(ctx, a.Ref, store.Moment{AsOf: &im.body.FrozenAt}); err != nil {
		return err
	}
	if !im.counts(a.State) && a.State != store.Superseded { // another period's value
		im.summary.Passed++
		return nil
	}
	number, _, err := numberOf(val)
	if err != nil {
		return err
	}
	out := Affected{Ref: a.Ref, Position: a.Position, State: a.State, Scale: val.Value.Scale}
	out.fill(number.Value, val.Value.StandardUncertainty, s)
	im.summary.Values.count(out)
	return im.emit(out)
}

// weightsOf are the weights by which an assigned value was combined.
func weightsOf(ctx context.Context, src source, val store.Value, members []member) ([]float64, error) {
	weights := make([]float64, len(members))
	if val.Campaign != nil {
		for i, m := range members {
			for _, s := range val.Campaign.Sessions {
				if s.Session == m.calibration.Value.Session {
					weights[i] = s.Weight
				}
			}
		}
		return weights, nil
	}
	if len(members) == 1 {
		return []float64{1}, nil
	}
	combined, _, err := combineAssigned(ctx, src, members)
	return combined.Weights, err
}

func (im *impact) final(ctx context.Context, a store.AffectedVersion, raw store.Raw) error {
	f, err := store.Decode[store.Final](raw)
	if err != nil {
		return err
	}
	s, err := im.shiftOfFinal(ctx, f)
	if err != nil || !s.moved {
		return err
	}
	if !im.counts(a.State) {
		im.summary.Passed++
		return nil
	}
	out := Affected{Ref: a.Ref, Position: a.Position, State: a.State, Scale: f.Value.Scale}
	out.fill(f.Value.Value, f.Value.StandardUncertainty, s)
	im.summary.Finals.count(out)
	return im.emit(out)
}

func (im *impact) shiftOfFinal(ctx context.Context, f store.Version[store.Final]) (shift, error) {
	if s, ok := im.finals.find(f.Ref.Bare()); ok {
		return s, nil
	}
	var s shift
	for _, m := range f.Value.Members {
		if m.Input < 0 || m.Input >= len(f.Inputs) {
			return s, fmt.Errorf("%s has no input %d", f.Ref, m.Input)
		}
		one, err := im.shiftOfMember(ctx, f.Inputs[m.Input].Ref, m.Line)
		if err != nil {
			return s, err
		}
		s.add(one, m.Weight, im.parts)
	}
	im.finals.keep(f.Ref.Bare(), s)
	return s, nil
}

// report hands out the reported deltas of a report that move.
func (im *impact) report(ctx context.Context, a store.AffectedVersion) error {
	if a.State != store.Approved {
		im.summary.Passed++
		return nil
	}
	lines, err := im.v.LinesOfReport(ctx, a.Ref)
	if err != nil {
		return err
	}
	var missing []store.Ref
	for _, l := range lines {
		if _, ok := im.finals.find(l.Final); !ok {
			missing = append(missing, l.Final)
		}
	}
	raws, err := im.v.VersionsOf(ctx, missing)
	if err != nil {
		return err
	}
	for _, l := range lines {
		s, ok := im.finals.find(l.Final)
		if raw, again := raws[l.Final]; !ok && again {
			f, err := store.Decode[store.Final](raw)
			if err != nil {
				return err
			}
			if s, err = im.shiftOfFinal(ctx, f); err != nil {
				return err
			}
		}
		if !s.moved {
			continue
		}
		out := Affected{Ref: a.Ref, Position: a.Position, State: a.State, Line: l.Line, Reported: l.Code}
		out.fill(l.Value, l.StandardUncertainty, s)
		im.summary.Reported.count(out)
		if im.full != nil {
			out.Full = im.full.finals[l.Final]
		}
		if err := im.emit(out); err != nil {
			return err
		}
	}
	return nil
}

// A recent remembers the last things kept, at most twice recentSize.
type recent[T any] struct{ young, old map[store.Ref]T }

const recentSize = 5000

func (r *recent[T]) find(ref store.Ref) (T, bool) {
	if x, ok := r.young[ref]; ok {
		return x, true
	}
	x, ok := r.old[ref]
	return x, ok
}

func (r *recent[T]) keep(ref store.Ref, x T) {
	if r.young == nil || len(r.young) >= recentSize {
		r.young, r.old = map[store.Ref]T{}, r.young
	}
	r.young[ref] = x
}

// A ranking keeps the largest |shift|/u; of equal ones the first in the ledger.
type ranking struct {
	most int
	list []Affected
}

func worse(a, b Affected) int {
	return cmp.Or(cmp.Compare(a.Ratio, b.Ratio), cmp.Compare(b.Position, a.Position), cmp.Compare(b.Line, a.Line))
}

func (r *ranking) Len() int           { return len(r.list) }
func (r *ranking) Less(i, j int) bool { return worse(r.list[i], r.list[j]) < 0 }
func (r *ranking) Swap(i, j int)      { r.list[i], r.list[j] = r.list[j], r.list[i] }
func (r *ranking) Push(x any)         { r.list = append(r.list, x.(Affected)) }
func (r *ranking) Pop() any {
	x := r.list[len(r.list)-1]
	r.list = r.list[:len(r.list)-1]
	return x
}

func (r *ranking) offer(a Affected) {
	if len(r.list) < r.most {
		heap.Push(r, a)
	} else if r.most > 0 && worse(a, r.list[0]) > 0 {
		r.list[0] = a
		heap.Fix(r, 0)
	}
}

func (im *impact) ranked() []Affected {
	list := slices.Clone(im.top.list)
	slices.SortFunc(list, func(a, b Affected) int { return worse(b, a) })
	return list
}
