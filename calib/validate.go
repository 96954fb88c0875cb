package calib

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/uncertain"
)

// Bounds of one fit.
const (
	// MaxReadings is the most readings a session may have.
	MaxReadings = 100_000
	// MaxDenseReadings is the most readings with a full covariance, or with
	// exact readings among them: the cost grows with the cube.
	MaxDenseReadings = 2_000
	// MaxLeftOutAnchors is the most anchors of which each is left out in turn: the
	// cost grows with the fourth power. With more, [AnchorResult.LeftOut] is nil.
	MaxLeftOutAnchors = 100
)

// The range of numbers: deltas and u in ‰, times in hours, sizes in any unit.
// Fourth powers of anything that a fit makes of them are still doubles.
const (
	largest  = 1e30
	smallest = 1e-30
	longest  = 1e9
	biggest  = 1e15
)

// maxRefusals is how many refusals one answer lists.
const maxRefusals = 20

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

// refusals gathers what is wrong, so that a person can mend it all at once.
type refusals struct{ list []error }

func (r *refusals) add(err error) {
	if len(r.list) < maxRefusals {
		r.list = append(r.list, err)
	}
}

func (r *refusals) err() error {
	if len(r.list) == 1 {
		return r.list[0]
	}
	return errors.Join(r.list...)
}

// number refuses a value that is not finite, or beyond the range.
func (r *refusals) number(v float64, format string, args ...any) bool {
	switch {
	case !finite(v):
		r.add(&NotFiniteError{Refusal{Place: fmt.Sprintf(format, args...), Found: fmt.Sprint(v), Expected: "a finite number"}})
	case math.Abs(v) > largest:
		r.add(&RangeError{Refusal{Place: fmt.Sprintf(format, args...), Found: fmt.Sprint(v), Expected: fmt.Sprintf("a number within ±%g", largest)}})
	default:
		return true
	}
	return false
}

// validate refuses what the arithmetic cannot take. Several refusals come
// joined.
func validate(s *Session, m Model, p Policy) error {
	var r refusals
	if len(s.Readings) > MaxReadings {
		return &TooManyError{Refusal{Place: "readings", Found: fmt.Sprint(len(s.Readings)), Expected: fmt.Sprintf("at most %d", MaxReadings)}}
	}
	validateModel(&r, m)
	validatePolicy(&r, p)
	validateAnchors(&r, s)
	validateReadings(&r, s, m)
	validateCovariances(&r, s, m)
	validateCorrections(&r, s, m)
	return r.err()
}

func validateModel(r *refusals, m Model) {
	word := func(place, found string, known ...string) {
		if found != "" && !slices.Contains(known, found) {
			r.add(&UnknownWordError{Refusal{Place: place, Found: fmt.Sprintf("%q", found), Expected: "one of " + strings.Join(known, ", ")}})
		}
	}
	word("model.drift", string(m.Drift), "none", "linear", "quadratic", "bracketed")
	word("model.size", string(m.Size), "none", "linear", "inverse", "log", "blank")
	word("model.memory", string(m.Memory), "none", "carryover")
	word("model.weights", string(m.Weights), "declared", "equal", "replicate", "size")
	if m.DeclaredDF != nil {
		switch {
		case m.weights() != WeightsDeclared:
			r.add(&UnsupportedTermError{Refusal{Place: "model.declared_nu", Found: "with weights " + string(m.Weights), Expected: "declared weights only"}})
		case !(*m.DeclaredDF > 0):
			r.add(&PolicyError{Refusal{Place: "model.declared_nu", Found: fmt.Sprint(*m.DeclaredDF), Expected: "positive degrees of freedom"}})
		}
	}
}

func validatePolicy(r *refusals, p Policy) {
	positive := func(place string, v float64) {
		if !finite(v) || v < 0 {
			r.add(&PolicyError{Refusal{Place: place, Found: fmt.Sprint(v), Expected: "a finite number, not negative"}})
		}
	}
	if p.Probability != 0 && !(p.Probability > 0 && p.Probability < 1) {
		r.add(&PolicyError{Refusal{Place: "probability", Found: fmt.Sprint(p.Probability), Expected: "between 0 and 1"}})
	}
	positive("policy.coverage_factor", p.CoverageFactor)
	positive("policy.left_out_limit", p.LeftOutLimit)
	positive("policy.studentized_limit", p.StudentizedLimit)
	positive("policy.test_level", p.TestLevel)
	positive("policy.minimum_span", p.MinimumSpan)
	positive("policy.advised_span", p.AdvisedSpan)
	positive("policy.between_session.u", p.BetweenSession.StandardUncertainty)
	positive("policy.between_session.nu", p.BetweenSession.DegreesOfFreedom)
	positive("policy.sample_homogeneity.u", p.SampleHomogeneity.StandardUncertainty)
	positive("policy.sample_homogeneity.nu", p.SampleHomogeneity.DegreesOfFreedom)
}

func validateAnchors(r *refusals, s *Session) {
	groups := map[string]bool{}
	for i, g := range s.Groups {
		if err := g.Validate(); err != nil {
			r.add(&AssignedValueError{Refusal{Place: fmt.Sprintf("groups[%d]", i), Found: err.Error(), Expected: "variances with their covariance"}})
		}
		if groups[g.ID] {
			r.add(&DuplicateError{Refusal{Place: fmt.Sprintf("groups[%d].id", i), Found: fmt.Sprintf("%q again", g.ID), Expected: "each group once"}})
		}
		groups[g.ID] = true
	}
	seen := map[string]int{}
	for i, a := range s.Anchors {
		place := fmt.Sprintf("anchors[%d]", i)
		if a.Material == "" {
			r.add(&UnassignedAnchorError{Refusal{Place: place + ".material", Found: "nothing", Expected: "a material's code"}})
		} else if j, ok := seen[a.Material]; ok {
			r.add(&DuplicateError{Refusal{Place: place + ".material", Found: fmt.Sprintf("%q, as in anchors[%d]", a.Material, j), Expected: "one assigned value for each material"}})
		}
		seen[a.Material] = i
		if !r.number(a.Value.Value, "%s.value", place) {
			continue
		}
		for _, t := range a.Value.Terms {
			switch {
			case !finite(t.U) || !finite(t.Sensitivity):
				r.add(&NotFiniteError{Refusal{Place: place + ".u", Found: fmt.Sprint(t.U), Expected: "a finite standard uncertainty"}})
			case math.Abs(t.U) > largest || math.Abs(t.Sensitivity) > largest:
				r.add(&RangeError{Refusal{Place: place + ".u", Found: fmt.Sprint(t.U), Expected: fmt.Sprintf("at most %g", largest)}})
			case t.U < 0:
				r.add(&NegativeUncertaintyError{Refusal{Place: place + ".u", Found: fmt.Sprint(t.U), Expected: "a standard uncertainty, not negative"}})
			case t.ID == "":
				r.add(&AssignedValueError{Refusal{Place: place, Found: "a source without identity", Expected: "an identity for each source"}})
			}
		}
		if _, err := uncertain.EffectiveDF(a.Value, s.Groups); err != nil {
			// A group that is not listed has a known variance; a wrong shape is refused.
			var g *uncertain.GroupError
			if errors.As(err, &g) && groups[g.Group] {
				r.add(&AssignedValueError{Refusal{Place: place, Found: err.Error(), Expected: "derivatives that fit the group"}})
			}
		}
	}
}

func validateReadings(r *refusals, s *Session, m Model) {
	assigned := map[string]int{}
	for i, a := range s.Anchors {
		assigned[a.Material] = i
	}
	read := make([]bool, len(s.Anchors))
	ids := make(map[string]int, len(s.Readings))
	preparations := map[string]string{}
	anyAnchor := false
	for i := range s.Readings {
		rd := &s.Readings[i]
		validateReading(r, rd, i)
		if rd.ID != "" {
			if j, ok := ids[rd.ID]; ok {
				r.add(&DuplicateError{Refusal{Place: fmt.Sprintf("readings[%d].id", i), Found: fmt.Sprintf("%q, as in readings[%d]", rd.ID, j), Expected: "each reading once"}})
			}
			ids[rd.ID] = i
		}
		if rd.Preparation != "" && rd.Role.measured() {
			owner := rd.subjectKey()
			if o, ok := preparations[rd.Preparation]; ok && o != owner {
				r.add(&PreparationError{Refusal{Place: fmt.Sprintf("readings[%d].preparation", i), Found: fmt.Sprintf("%q, which another material or sample has too", rd.Preparation), Expected: "a preparation of one material or sample"}})
			}
			preparations[rd.Preparation] = owner
		}
		if a, ok := assigned[rd.Subject]; ok && rd.Role.material() {
			read[a] = read[a] || rd.Role == Anchor
			anyAnchor = anyAnchor || (rd.Role == Anchor && !rd.Excluded)
		} else if rd.Role == Anchor && !rd.Excluded {
			r.add(&UnassignedAnchorError{Refusal{Place: fmt.Sprintf("readings[%d].material", i), Found: fmt.Sprintf("anchor %q without an assigned value", rd.Subject), Expected: "its value among anchors"}})
		}
		if m.weights() == WeightsDeclared && s.ReadingCovariance == nil && rd.StandardUncertainty == nil && rd.Role.measured() && !rd.Excluded {
			r.add(&MissingUncertaintyError{Refusal{Place: fmt.Sprintf("readings[%d].u", i), Found: "nothing", Expected: "the reading's standard uncertainty (declared weights), or weights that are estimated"}})
		}
	}
	for i, ok := range read {
		if !ok {
			r.add(&UnreadAnchorError{Refusal{Place: fmt.Sprintf("anchors[%d]", i), Found: fmt.Sprintf("%q without a reading", s.Anchors[i].Material), Expected: "at least one reading with role anchor"}})
		}
	}
	if !anyAnchor && len(r.list) == 0 {
		r.add(&NoAnchorsError{Refusal{Place: "readings", Found: "no anchor", Expected: "readings with role anchor that are not excluded"}})
	}
}

func validateReading(r *refusals, rd *Reading, i int) {
	number := func(v *float64, field string) bool {
		if v == nil {
			return false
		}
		return r.number(*v, "readings[%d].%s", i, field)
	}
	number(&rd.Raw, "raw")
	switch rd.Role {
	case Anchor, Control, Monitor, Blank, Gas, Conditioning, Sample:
	default:
		r.add(&UnknownWordError{Refusal{Place: fmt.Sprintf("readings[%d].role", i), Found: fmt.Sprintf("%q", rd.Role), Expected: "one of anchor, control, monitor, blank, gas, conditioning, sample"}})
	}
	if rd.Subject == "" && rd.Role.measured() {
		r.add(&UnassignedAnchorError{Refusal{Place: fmt.Sprintf("readings[%d].%s", i, rd.Role.noun()), Found: "nothing", Expected: "a code"}})
	}
	if u := rd.StandardUncertainty; number(u, "u") && *u < 0 {
		r.add(&NegativeUncertaintyError{Refusal{Place: fmt.Sprintf("readings[%d].u", i), Found: fmt.Sprint(*u), Expected: "a standard uncertainty, not negative"}})
	}
	number(rd.Previous, "previous")
	if number(rd.Time, "time") && math.Abs(*rd.Time) > longest {
		r.add(&RangeError{Refusal{Place: fmt.Sprintf("readings[%d].time", i), Found: fmt.Sprint(*rd.Time), Expected: fmt.Sprintf("hours within ±%g", longest)}})
	}
	if number(rd.Size, "size") {
		if s := math.Abs(*rd.Size); s > biggest || s > 0 && s < 1/biggest {
			r.add(&RangeError{Refusal{Place: fmt.Sprintf("readings[%d].size", i), Found: fmt.Sprint(*rd.Size), Expected: fmt.Sprintf("a size from %g to %g", 1/biggest, biggest)}})
		}
	}
}

func validateCovariances(r *refusals, s *Session, m Model) {
	n := len(s.Readings)
	if s.ReadingCovariance == nil && s.CrossCovariance == nil {
		return
	}
	if m.weights() != WeightsDeclared {
		r.add(&UnsupportedTermError{Refusal{Place: "model.weights", Found: fmt.Sprintf("%q with a covariance of the readings", m.Weights), Expected: "declared weights"}})
	}
	if n > MaxDenseReadings {
		r.add(&TooManyError{Refusal{Place: "readings", Found: fmt.Sprint(n), Expected: fmt.Sprintf("at most %d with a covariance of the readings", MaxDenseReadings)}})
		return
	}
	if s.ReadingCovariance != nil {
		if err := uncertain.CheckCovariance(s.ReadingCovariance, n); err != nil {
			var v *uncertain.ValueError
			errors.As(err, &v)
			r.add(&CovarianceError{Refusal{Place: "reading_" + v.Place, Found: v.Found, Expected: v.Expected}})
		}
	}
	if c := s.CrossCovariance; c != nil {
		if len(c) != n {
			r.add(&CovarianceError{Refusal{Place: "cross_covariance", Found: fmt.Sprintf("%d rows", len(c)), Expected: fmt.Sprint(n)}})
		}
		for i, row := range c {
			if len(row) != len(s.Anchors) {
				r.add(&CovarianceError{Refusal{Place: fmt.Sprintf("cross_covariance[%d]", i), Found: fmt.Sprintf("%d entries", len(row)), Expected: fmt.Sprint(len(s.Anchors))}})
				continue
			}
			for j, v := range row {
				r.number(v, "cross_covariance[%d][%d]", i, j)
			}
		}
	}
}

func validateCorrections(r *refusals, s *Session, m Model) {
	for i, c := range s.Corrections {
		place := fmt.Sprintf("corrections[%d]", i)
		if c.Blank && m.Size == SizeBlank {
			r.add(&UnsupportedTermError{Refusal{Place: "model.size", Found: fmt.Sprintf("blank beside %s, %q, a blank already taken out", place, c.Name), Expected: "one of the two: together they take the blank out twice"}})
		}
		if _, err := uncertain.New(c.Input.Value, c.Input.Terms...); err != nil {
			r.add(&CorrectionError{Refusal{Place: place, Found: err.Error(), Expected: "an uncertain number"}})
		}
		if len(c.PerReading) != len(s.Readings) {
			r.add(&CorrectionError{Refusal{Place: place + ".per_reading", Found: fmt.Sprintf("%d derivatives", len(c.PerReading)), Expected: fmt.Sprintf("one for each of %d readings", len(s.Readings))}})
		}
		for j, v := range c.PerReading {
			r.number(v, "%s.per_reading[%d]", place, j)
		}
	}
}

// measured says that a reading of the role has a value of its own.
func (r Role) measured() bool {
	return r == Anchor || r == Control || r == Monitor || r == Sample
}

// material says that the subject of the role is a material, not a sample.
func (r Role) material() bool { return r == Anchor || r == Control || r == Monitor }

// noun is what the subject of the role is called.
func (r Role) noun() string {
	if r == Sample {
		return "sample"
	}
	return "material"
}

// subjectKey tells a sample from a material of the same code.
func (rd *Reading) subjectKey() string { return rd.Role.noun() + "\x00" + rd.Subject }
