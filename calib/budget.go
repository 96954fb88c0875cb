package calib

import (
	"math"
	"strings"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// subjectIDs builds the source identities of all subjects' readings, and of
// their between-session effects, in one string: for each subject its
// readings', then its own.
func (c *calibrated) subjectIDs(groups []subjectGroup, total int) []string {
	var b strings.Builder
	ends := make([]int, 0, total+len(groups))
	for _, g := range groups {
		for _, i := range g.readings {
			c.in.readings[i].writeSourceID(&b)
			ends = append(ends, b.Len())
		}
		c.writeBetweenID(&b, g)
		ends = append(ends, b.Len())
	}
	all := b.String()
	ids := make([]string, len(ends))
	start := 0
	for k, end := range ends {
		ids[k] = all[start:end]
		start = end
	}
	return ids
}

// writeBetweenID writes the identity of a subject's between-session effect.
func (c *calibrated) writeBetweenID(b *strings.Builder, g subjectGroup) {
	p := c.in.policy.BetweenSession
	if p.StandardUncertainty == 0 {
		return
	}
	b.WriteString("between_session:")
	b.WriteString(p.Session)
	b.WriteString("/")
	b.WriteString(p.Scale)
	if p.Common {
		return
	}
	rd := &c.in.readings[g.readings[0]]
	b.WriteString("/")
	b.WriteString(rd.Subject)
	if g.ambiguous && rd.Role == Control {
		b.WriteString("/control")
	}
}

// betweenGroup is the group of the between-session component: the method's
// version, or its own where it was typed in with degrees of freedom.
func (c *calibrated) betweenGroup() string {
	p := c.in.policy.BetweenSession
	switch {
	case p.DegreesOfFreedom == 0:
		return ""
	case p.Group != "":
		return p.Group
	}
	return "between_session:" + p.Session + "/" + p.Scale
}

// homogeneityID is the lasting identity of a sample's own heterogeneity.
func (c *calibrated) homogeneityID(subject string) string {
	return "sample:" + subject + "/" + c.in.policy.SampleHomogeneity.Scale
}

// homogeneityGroup is the group of that component; "" when it is known.
func (c *calibrated) homogeneityGroup() string {
	p := c.in.policy.SampleHomogeneity
	switch {
	case p.DegreesOfFreedom == 0 || math.IsInf(p.DegreesOfFreedom, 1):
		return ""
	case p.Group != "":
		return p.Group
	}
	return "sample:" + p.Scale
}

// budget appends a subject's sources for people: those of the anchors, the
// readings' part through the parameters in one line, its own readings, their
// preparations, the session. Shares of u² sum to 1; sources that contribute
// nothing are left out. w is ∂value/∂raw over all readings where the subject's
// own are correlated with the fit's, else nil.
func (c *calibrated) budget(lines []Contribution, s *SubjectResult, g subjectGroup, w, gradient, anchors []float64, ids []string) []Contribution {
	start := len(lines)
	if len(c.sources.list) > 0 {
		q := c.anchorLoads(anchors, w)
		for k, src := range c.sources.list {
			if q[k] != 0 && src.U > 0 {
				lines = append(lines, Contribution{ID: src.ID, Kind: src.Kind, Group: src.Group, Sensitivity: q[k] / src.U, U: src.U, VarianceShare: float64(q[k] * q[k])})
			}
		}
	}
	if w == nil {
		lines = c.plainLines(lines, s, g, gradient, ids)
	} else {
		lines = c.generalLines(lines, g, w, ids)
	}
	if u := s.BetweenSession; u > 0 {
		lines = append(lines, Contribution{ID: ids[len(g.readings)], Kind: uncertain.KindBetweenSession, Group: c.betweenGroup(), Sensitivity: 1, U: u, VarianceShare: float64(u * u)})
	}
	if u := s.Homogeneity; u > 0 {
		lines = append(lines, Contribution{ID: c.homogeneityID(s.Subject), Kind: uncertain.KindUnit, Group: c.homogeneityGroup(), Sensitivity: 1, U: u, VarianceShare: float64(u * u)})
	}
	var total float64
	for k := start; k < len(lines); k++ {
		total += lines[k].VarianceShare
	}
	for k := start; k < len(lines); k++ {
		if total > 0 {
			lines[k].VarianceShare /= total
		}
	}
	return lines
}

func (c *calibrated) noiseGroup() string {
	if c.nz.v == nil {
		return ""
	}
	return c.nz.group
}

// plainLines are the fit's and the own readings' lines where the two are
// independent.
func (c *calibrated) plainLines(lines []Contribution, s *SubjectResult, g subjectGroup, gradient []float64, ids []string) []Contribution {
	lines = c.fitLine(lines, adjust.Quadratic(gradient, c.noise, gradient))
	for k, i := range g.readings {
		lines = c.readingLine(lines, i, s.Coefficients[k], ids[k])
	}
	if c.nz.phiA > 0 {
		sum := c.preparationSums
		for k, i := range g.readings {
			sum[2*c.in.readings[i].preparation] += s.Coefficients[k]
		}
		for _, i := range g.readings {
			rd := &c.in.readings[i]
			if v := &sum[2*rd.preparation]; *v != 0 {
				lines = c.preparationLine(lines, rd.preparationID(), *v)
				*v = 0
			}
		}
	}
	return lines
}

func (c *calibrated) fitLine(lines []Contribution, variance float64) []Contribution {
	if !(variance > 0) {
		return lines
	}
	return append(lines, Contribution{ID: "fit", Kind: uncertain.KindFit, Group: c.noiseGroup(), Sensitivity: 1, U: math.Sqrt(variance), VarianceShare: variance})
}

func (c *calibrated) readingLine(lines []Contribution, i int, coefficient float64, id string) []Contribution {
	u := math.Sqrt(c.nz.own[i])
	if q := float64(coefficient * u); q != 0 {
		lines = append(lines, Contribution{ID: id, Kind: uncertain.KindReading, Group: c.noiseGroup(), Sensitivity: coefficient, U: u, VarianceShare: float64(q * q)})
	}
	return lines
}

func (c *calibrated) preparationLine(lines []Contribution, id string, coefficient float64) []Contribution {
	return append(lines, Contribution{ID: id, Kind: uncertain.KindPreparation, Group: c.noiseGroup(), Sensitivity: coefficient, U: math.Sqrt(c.nz.phiA), VarianceShare: float64(float64(coefficient*coefficient) * c.nz.phiA)})
}

// generalLines splits Σ w_i r_i into what is the subject's own and the rest,
// which is the fit's.
func (c *calibrated) generalLines(lines []Contribution, g subjectGroup, w []float64, ids []string) []Contribution {
	mine := make(map[string]bool, 2*len(g.readings))
	for k, i := range g.readings {
		mine[ids[k]] = true
		if c.nz.preparations {
			mine[c.in.readings[i].preparationID()] = true
		}
	}
	var rest float64
	var own []Contribution
	for _, t := range c.nz.terms(w) {
		q := float64(t.Sensitivity * t.U)
		if !mine[t.ID] {
			rest += float64(q * q)
			continue
		}
		if q != 0 {
			own = append(own, Contribution{ID: t.ID, Kind: t.Kind, Group: t.Group, Sensitivity: t.Sensitivity, U: t.U, VarianceShare: float64(q * q)})
		}
	}
	return append(c.fitLine(lines, rest), own...)
}
