package registry

import (
	"fmt"
	"math"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A ConformityStatement says of one line whether it conforms, by a rule that
// the report holds.
type ConformityStatement struct {
	Rule int // index in the report's rules
	// Probability is that of conformance (JCGM 106:2012, 7), AcceptLower and
	// AcceptUpper the acceptance interval (‰; infinite where open), Guard its
	// guard band (‰).
	Probability              float64
	AcceptLower, AcceptUpper float64
	Guard                    float64
	// Conforms: within the acceptance interval. Risk is the probability that this
	// statement is wrong: 1 − p_c where it conforms, p_c where it does not.
	Conforms bool
	Risk     float64
}

// conformity states conformity of a line by the report's rules; nil where none applies.
func conformity(rules []store.ConformityRule, d ReportedDelta) *ConformityStatement {
	for i, rule := range rules {
		if rule.Scale != d.Scale || rule.Measurand != d.Measurand {
			continue
		}
		t := toleranceOf(rule)
		nu := math.Inf(1)
		if d.EffectiveDF != nil {
			nu = *d.EffectiveDF
		}
		s := ConformityStatement{Rule: i, Guard: rule.Guard * d.Expanded, Probability: uncertain.ConformanceProbability(d.Value, d.StandardUncertainty, nu, t.Lower, t.Upper)}
		accept, err := t.Accept(s.Guard)
		s.AcceptLower, s.AcceptUpper = accept.Lower, accept.Upper
		s.Conforms = err == nil && d.Value >= accept.Lower && d.Value <= accept.Upper
		if s.Risk = s.Probability; s.Conforms {
			s.Risk = 1 - s.Probability
		}
		return &s
	}
	return nil
}

func toleranceOf(rule store.ConformityRule) uncertain.Tolerance {
	t := uncertain.Tolerance{Lower: math.Inf(-1), Upper: math.Inf(1)}
	if rule.Lower != nil {
		t.Lower = *rule.Lower
	}
	if rule.Upper != nil {
		t.Upper = *rule.Upper
	}
	return t
}

// checkConformity complains about rules that say nothing.
func checkConformity(c *complaints, rules []store.ConformityRule) {
	seen := map[string]int{}
	for i, rule := range rules {
		place := fmt.Sprintf("body.conformity[%d]", i)
		t := toleranceOf(rule)
		switch {
		case rule.Lower == nil && rule.Upper == nil:
			c.add(place, "no limit", "lower, upper or both")
		case !(t.Lower < t.Upper) || math.IsNaN(t.Lower) || math.IsNaN(t.Upper):
			c.add(place, fmt.Sprintf("%v to %v", t.Lower, t.Upper), "a lower limit below the upper one")
		}
		if !(rule.Guard >= 0 && rule.Guard <= 10) {
			c.add(place+".guard", fmt.Sprint(rule.Guard), "0 to 10 expanded uncertainties")
		}
		c.text(place+".source", rule.Source, 1000)
		c.text(place+".scale", rule.Scale, 40)
		key := rule.Scale + "/" + rule.Measurand
		if before, ok := seen[key]; ok {
			c.add(place, key, "each scale and measurand once; body.conformity[%d] is of the same", before)
		}
		seen[key] = i
	}
}

// ConformityWords states a rule as a sentence.
func ConformityWords(rule store.ConformityRule) string {
	limits := ""
	switch {
	case rule.Lower != nil && rule.Upper != nil:
		limits = fmt.Sprintf("from %v ‰ to %v ‰", *rule.Lower, *rule.Upper)
	case rule.Lower != nil:
		limits = fmt.Sprintf("at or above %v ‰", *rule.Lower)
	default:
		limits = fmt.Sprintf("at or below %v ‰", *rule.Upper)
	}
	how := "simple acceptance: a line conforms if its value lies within the limits, so that near a limit the risk of a wrong statement reaches 50 %"
	if rule.Guard > 0 {
		how = fmt.Sprintf("guarded acceptance: a line conforms if its value lies within the limits by at least %v U", rule.Guard)
	}
	return fmt.Sprintf("%s (%s) %s; %s. Limits and rule: %s.", rule.Scale, rule.Measurand, limits, how, rule.Source)
}
