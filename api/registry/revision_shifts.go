package registry

import (
	"context"
	"fmt"
	"math"
	"slices"

	"deltamoor/store"
)

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
	resting
	// Of the batch: derivatives, final values, and the lines of reports.
	blocks map[store.Ref]store.CalibrationBlock
	shares map[store.Ref]store.FinalShares
	lines  map[store.Ref][]store.Reported
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
	var calibrations, values, finals []store.Ref
	here := map[store.Ref]bool{}
	im.lines = map[store.Ref][]store.Reported{}
	for _, a := range batch {
		ref := a.Ref.Bare()
		switch a.Kind {
		case store.KindCalibration:
			calibrations = append(calibrations, ref)
		case store.KindValue:
			values = append(values, ref)
		case store.KindFinal:
			finals, here[ref] = append(finals, ref), true
		case store.KindReport:
			if a.State != store.Approved {
				continue
			}
			lines, err := im.v.LinesOfReport(ctx, a.Ref)
			if err != nil {
				return err
			}
			im.lines[ref] = lines
			for _, l := range lines { // those that were in an earlier batch, or do not move
				if _, ok := im.finals.find(l.Final); !ok && !here[l.Final] {
					finals, here[l.Final] = append(finals, l.Final), true
				}
			}
		}
	}
	var err error
	if im.blocks, err = im.v.Blocks(ctx, im.laboratory, calibrations); err != nil {
		return err
	}
	raws, err := im.v.VersionsOf(ctx, values)
	if err != nil {
		return err
	}
	if im.shares, err = im.v.Shares(ctx, finals); err != nil {
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
			err = im.final(ctx, a)
		case store.KindReport:
			err = im.report(ctx, a)
		}
		if err != nil {
			return err
		}
	}
	if im.full == nil {
		return im.restOn(ctx, calibrations)
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
	limits := SpreadLimits()
	for i, below := range limits {
		if ratio < below {
			return i
		}
	}
	return len(limits)
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
	if from, rel, ok, err := converted(ctx, im.v, val.Inputs); ok || err != nil {
		if err != nil {
			return err
		}
		return im.convertedValue(ctx, a, val, from, rel)
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
	return im.valueMoves(ctx, a, val, s)
}

// convertedValue moves with the value it was made from, by the relation's slope.
func (im *impact) convertedValue(ctx context.Context, a store.AffectedVersion, val store.Version[store.Value], from store.Ref, rel store.Version[store.Relation]) error {
	scale, err := decodeVersion[store.Value](ctx, im.v, from)
	if err != nil {
		return err
	}
	slope, err := slopeFrom(rel, scale.Value.Scale)
	if err != nil {
		return err
	}
	below, ok := im.values[from.Bare()]
	if change := im.changes.values[from.Bare()]; change != nil && change.applies(val.ValidFrom) {
		below, ok = shift{moved: true, parts: make([]float64, im.parts)}, true
		below.parts[change.part] = change.delta
		if change.Withdrawn {
			below.why = fmt.Sprintf("%s is withdrawn", versionName(from))
		}
	}
	var s shift
	if ok {
		s.add(below, slope, im.parts)
	}
	return im.valueMoves(ctx, a, val, s)
}

// valueMoves hands out an assigned value that moves, and keeps its shift for
// what rests on it.
func (im *impact) valueMoves(ctx context.Context, a store.AffectedVersion, val store.Version[store.Value], s shift) error {
	if !s.moved {
		return nil
	}
	im.values[a.Ref.Bare()] = s
	var err error
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

func (im *impact) final(ctx context.Context, a store.AffectedVersion) error {
	f, ok := im.shares[a.Ref.Bare()]
	if !ok {
		return fmt.Errorf("%s cannot be read", a.Ref)
	}
	s, err := im.shiftOfFinal(ctx, a.Ref.Bare(), f)
	if err != nil || !s.moved {
		return err
	}
	if !im.counts(a.State) {
		im.summary.Passed++
		return nil
	}
	out := Affected{Ref: a.Ref, Position: a.Position, State: a.State, Scale: f.Scale}
	out.fill(f.Value, f.StandardUncertainty, s)
	im.summary.Finals.count(out)
	return im.emit(out)
}

func (im *impact) shiftOfFinal(ctx context.Context, ref store.Ref, f store.FinalShares) (shift, error) {
	if s, ok := im.finals.find(ref); ok {
		return s, nil
	}
	var s shift
	for _, m := range f.Members {
		one, err := im.shiftOfMember(ctx, m.Calibration, m.Line)
		if err != nil {
			return s, err
		}
		s.add(one, m.Weight, im.parts)
	}
	im.finals.keep(ref, s)
	return s, nil
}

// report hands out the reported deltas of a report that move.
func (im *impact) report(ctx context.Context, a store.AffectedVersion) error {
	if a.State != store.Approved {
		im.summary.Passed++
		return nil
	}
	for _, l := range im.lines[a.Ref.Bare()] {
		s, ok := im.finals.find(l.Final)
		if !ok {
			f, known := im.shares[l.Final]
			if !known { // remembered when the batch began, and forgotten since
				shares, err := im.v.Shares(ctx, []store.Ref{l.Final})
				if err != nil {
					return err
				}
				if f, known = shares[l.Final]; !known {
					return fmt.Errorf("%s, on line %d of %s, cannot be read", l.Final, l.Line, a.Ref)
				}
			}
			var err error
			if s, err = im.shiftOfFinal(ctx, l.Final, f); err != nil {
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
