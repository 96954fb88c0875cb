package calib

import (
	"math"
	"slices"

	"deltamoor/calib/uncertain"
)

// takeSubjects predicts every sample and control, in the order of their first
// readings.
func (c *calibrated) takeSubjects(r *Result) {
	groups := c.subjects()
	p, m := len(c.reported.names), len(c.in.inputs)
	total := 0
	for _, g := range groups {
		total += len(g.readings)
	}
	r.Subjects = make([]SubjectResult, len(groups))
	// One array for all subjects of each kind of slice.
	floats := make([]float64, len(groups)*p+total)
	indices := make([]int, total)
	lines := make([]Contribution, 0, len(groups)*(len(c.sources.list)+2)+total*(1+indicatorInt(c.nz.preparations)))
	ids := c.subjectIDs(groups, total)
	gradient, anchors := make([]float64, c.layout.p), make([]float64, m)
	id := 0
	for k, g := range groups {
		s := &r.Subjects[k]
		rd := &c.in.readings[g.readings[0]]
		s.Subject, s.Role, s.N = rd.Subject, rd.Role, g.preparations
		n := len(g.readings)
		s.Readings, indices = indices[:n:n], indices[n:]
		s.Gradient, floats = floats[:p:p], floats[p:]
		s.Coefficients, floats = floats[:n:n], floats[n:]
		pred := c.predict(g.readings, gradient, s.Coefficients, anchors)
		var w []float64
		if c.nz.general {
			w = c.functional(g.readings, gradient, s.Coefficients, c.lags)
		}
		c.fillSubject(s, g, pred)
		start := len(lines)
		lines = c.budget(lines, s, g, w, gradient, anchors, ids[id:])
		s.Sources = lines[start:len(lines):len(lines)]
		id += n + 1
	}
}

func indicatorInt(b bool) int {
	if b {
		return 1
	}
	return 0
}

// A subjectGroup is one sample's or control's readings, by position.
type subjectGroup struct {
	readings     []int
	preparations int
	// ambiguous says that a sample and a control of the session have one code.
	ambiguous bool
}

// subjects collects the usable readings of samples and controls. A control
// reading of a material that is an anchor is shown, and flagged.
func (c *calibrated) subjects() []subjectGroup {
	type key struct {
		subject string
		sample  bool
	}
	count := 0
	for i := range c.in.readings {
		if rd := &c.in.readings[i]; rd.usable && rd.class < 0 {
			count++
		}
	}
	at := make(map[key]int, count)
	var groups []subjectGroup
	which := make([]int, 0, count)
	for i := range c.in.readings {
		rd := &c.in.readings[i]
		if !rd.usable || rd.class >= 0 {
			continue
		}
		k := key{rd.Subject, rd.Role == Sample}
		g, ok := at[k]
		if !ok {
			g = len(groups)
			at[k] = g
			groups = append(groups, subjectGroup{})
		}
		groups[g].preparations++ // readings, for now
		which = append(which, g)
	}
	slab := make([]int, count)
	for g := range groups {
		n := groups[g].preparations
		groups[g].readings, slab = slab[:0:n], slab[n:]
	}
	j := 0
	for i := range c.in.readings {
		if rd := &c.in.readings[i]; rd.usable && rd.class < 0 {
			groups[which[j]].readings = append(groups[which[j]].readings, i)
			j++
		}
	}
	for k, g := range at {
		_, groups[g].ambiguous = at[key{k.subject, !k.sample}]
	}
	seen := make([]bool, c.in.preparations)
	for g := range groups {
		groups[g].preparations = 0
		for _, i := range groups[g].readings {
			if p := c.in.readings[i].preparation; !seen[p] {
				seen[p] = true
				groups[g].preparations++
			}
		}
	}
	return groups
}

// fillSubject sets value, uncertainty and coverage.
func (c *calibrated) fillSubject(s *SubjectResult, g subjectGroup, pred prediction) {
	for k, i := range g.readings {
		s.Readings[k] = c.in.readings[i].index
	}
	s.Value, s.scatter = pred.value+0, pred.scatter
	between := c.in.policy.BetweenSession
	s.BetweenSession = between.StandardUncertainty
	b2 := float64(between.StandardUncertainty * between.StandardUncertainty)
	variance := pred.variance + b2
	below := pred.below
	if nu := between.DegreesOfFreedom; nu > 0 {
		below += float64(2*float64(b2*b2)) / nu
	}
	if own := c.in.policy.SampleHomogeneity; own.StandardUncertainty > 0 && c.in.readings[g.readings[0]].Role == Sample && !slices.Contains(c.in.session.Materials, s.Subject) {
		s.Homogeneity = own.StandardUncertainty
		h2 := float64(own.StandardUncertainty * own.StandardUncertainty)
		variance += h2
		if nu := own.DegreesOfFreedom; nu > 0 {
			below += float64(2*float64(h2*h2)) / nu
		}
	}
	s.StandardUncertainty = math.Sqrt(math.Max(0, variance))
	nu := uncertain.SatterthwaiteDF(variance, below)
	s.Expanded, _ = uncertain.ExpandedFrom(s.StandardUncertainty, nu, c.in.policy.coverage()) // the policy was validated
	for k, i := range g.readings {
		rd := &c.in.readings[i]
		// The readings' weights in the value are own·slope.
		line := c.invert(rd, 0, nil)
		c.reportedGradient(rd, line.value, float64(s.Coefficients[k]*line.slope), s.Gradient)
	}
	for _, l := range c.lags {
		if k := slices.Index(g.readings, l.reading); k >= 0 {
			s.Coefficients[k] += l.coefficient
			continue
		}
		s.OtherReadings = append(s.OtherReadings, c.in.readings[l.reading].index)
		s.OtherCoefficients = append(s.OtherCoefficients, l.coefficient)
	}
}
